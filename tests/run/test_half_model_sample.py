"""The sample survey of a half model between walls: its files are what its script makes, its ledger holds the truth."""

import importlib.util
import json
import tomllib
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wakeledger.run.survey import load, reduce

FOLDER = Path(__file__).parents[2] / "sample_surveys" / "half_model"


@pytest.fixture(scope="module")
def script():
    spec = importlib.util.spec_from_file_location("make_half_model", FOLDER / "make_survey.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="module")
def truth():
    return json.loads((FOLDER / "truth.json").read_text(encoding="utf-8"))


@pytest.fixture(scope="module")
def ledger():
    return reduce(load(FOLDER / "survey.toml"), draws=100)


def test_the_script_makes_the_data_that_are_there(script, truth, tmp_path):
    flow = script.wake()
    for recording, name in zip(script.recording(flow), ("traverse.csv", "empty.csv"), strict=True):
        recording.write_csv(tmp_path / name, script.COLUMNS)
        kept, made = (
            np.genfromtxt(folder / name, delimiter=",", names=True, encoding="utf-8") for folder in (FOLDER, tmp_path)
        )
        for column, (heading, _, decimals) in script.COLUMNS.items():
            # One unit of the last digit, where another machine rounds the other way.
            assert_allclose(made[heading], kept[heading], atol=1.01 * 10.0**-decimals, equal_nan=True, err_msg=column)
        assert (FOLDER / name).stat().st_size < 200_000
    made = script.truth(flow)
    for name, row in made["rows"].items():
        assert_allclose(truth["rows"][name]["value"], row["value"], rtol=1e-7, atol=2e-9)
    assert_allclose(list(truth["tunnel"].values()), list(made["tunnel"].values()), rtol=1e-6)


def test_the_ledger_holds_the_truth(ledger, truth):
    found = {row.name: row for row in ledger.rows}
    assert set(found) == set(truth["rows"])
    for name, row in found.items():
        assert abs(row.value - truth["rows"][name]["value"]) <= row.expanded_uncertainty, name
    # An answer that is any good: lift and induced drag to a few per cent, the walls' share of the latter resolved.
    assert found["lift"].standard_uncertainty < 0.02 * found["lift"].value
    gap = found["induced_drag_free_air"].value - found["induced_drag"].value
    assert_allclose(gap, 6.308 - 4.197, rtol=0.05)
    assert {check.verdict for check in ledger.checks} <= {"pass", "warn", "not_applicable"}
    assert {each.verdict for each in ledger.comparisons} == {"agrees"}
    assert {each.verdict for each in ledger.estimates} <= {"agrees", "not_independent"}


def test_coefficients_are_corrected_for_both_blockages(ledger, truth):
    lift = next(row for row in ledger.rows if row.name == "lift")
    # The survey file gives 0.50 %, the model has 0.55 %.
    blocked = truth["tunnel"]["wake_blockage"]
    assert_allclose(lift.coefficient / lift.coefficient_corrected, (1 + 0.005 + blocked) ** 2, rtol=5e-5)
    assert "side_force" not in {row.name for row in ledger.rows}


def test_balance_readings_fit_the_truth(script, truth):
    survey = tomllib.loads((FOLDER / "survey.toml").read_text(encoding="utf-8"))
    for reading in survey["compare"]:
        value, u = (float(reading[key].split()[0]) for key in ("value", "standard_uncertainty"))
        exact = truth["rows"][reading["row"]]["value"]
        if reading["row"] != "root_bending_moment":
            exact = exact / 2
        if reading["row"] == "total_drag":
            exact += script.BUOYANCY
        assert 0 < abs(value - exact) < 2 * u
    given = survey["boundary"]
    for key, actual in (("solid_blockage", 100 * script.SOLID), ("buoyancy", script.BUOYANCY)):
        value, u = (float(given[key][each].split()[0]) for each in ("value", "standard_uncertainty"))
        assert 0 < abs(value - actual) < 2 * u
