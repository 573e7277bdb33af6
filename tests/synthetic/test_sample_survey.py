"""The sample survey: its files are what its script makes, and the data are as its survey file says."""

import importlib.util
import json
import tomllib
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

FOLDER = Path(__file__).parents[2] / "sample_surveys" / "wing_and_tail"


@pytest.fixture(scope="module")
def script():
    spec = importlib.util.spec_from_file_location("make_survey", FOLDER / "make_survey.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="module")
def flow(script):
    return script.wake()


@pytest.fixture(scope="module")
def table():
    return np.genfromtxt(FOLDER / "traverse.csv", delimiter=",", names=True)


@pytest.fixture(scope="module")
def survey():
    return tomllib.loads((FOLDER / "survey.toml").read_text(encoding="utf-8"))


def test_the_script_makes_the_data_that_are_there(script, flow, table, tmp_path):
    fresh = tmp_path / "traverse.csv"
    script.recording(flow).write_csv(fresh, script.COLUMNS)
    again = np.genfromtxt(fresh, delimiter=",", names=True)
    for name in table.dtype.names:
        # One unit of the last digit, where another machine rounds the other way.
        assert_allclose(again[name], table[name], atol=0.0101, equal_nan=True)
    assert (FOLDER / "traverse.csv").stat().st_size < 1_000_000


def test_truth_is_that_of_the_flow(script, flow):
    kept = json.loads((FOLDER / "truth.json").read_text(encoding="utf-8"))["rows"]
    made = script.truth(flow)["rows"]
    assert kept.keys() == made.keys()
    for name, row in made.items():
        assert_allclose(kept[name]["value"], row["value"], rtol=1e-7, atol=2e-9)
    assert 0.0120 < kept["profile_drag"]["coefficient"] < 0.0200
    assert_allclose(kept["lift"]["coefficient"], 0.5, rtol=0.01)
    total = sum(kept[name]["value"] for name in ("profile_drag", "induced_drag", "residual_drag"))
    assert_allclose(kept["total_drag"]["value"], total, rtol=1e-8)


def test_noise_is_what_the_survey_file_declares(flow, table, survey):
    state = flow.state(table["Y"] / 1e3, table["Z"] / 1e3)
    declared = {
        target.removeprefix("plane."): float(source["standard_uncertainty"].split()[0])
        for source in survey["uncertainty"]["source"]
        if source["effect"] == "random"
        for target in source["applies_to"]
    }
    clean = {
        "u": state.u,
        "v": state.v,
        "w": state.w,
        "total_pressure": state.total_pressure - flow.reference.total_pressure,
        "static_pressure": state.static_pressure - flow.reference.static_pressure,
    }
    for name, entry in survey["plane"]["columns"].items():
        if name in clean:
            error = table[entry["column"]] - clean[name]
            # The mounting turns w into v and so on at the level of 0.003; four standard errors of 7853 points.
            assert_allclose(np.nanstd(error), declared[name], rtol=0.035)


def test_the_window_encloses_the_wake_and_resolves_its_cores(flow, table):
    y, z = np.unique(table["Y"]) / 1e3, np.unique(table["Z"]) / 1e3
    assert table.size == y.size * z.size
    assert 60 <= z.size <= 70
    assert 110 <= y.size <= 130
    wake = flow.elements
    reach = 4 * wake.core.max()
    assert wake.y.max() + reach < y[-1]
    assert wake.y.min() - reach > y[0]
    assert wake.z.max() + reach < z[-1]
    assert wake.z.min() - reach > z[0]
    assert np.diff(y).max() / wake.core.min() <= 0.5 + 1e-9


def test_some_points_are_missing_and_some_of_them_lie_at_a_core(flow, table):
    lost = np.isnan(table["U"])
    assert 5 <= lost.sum() <= 20
    distance = np.hypot(table["Y"] / 1e3 - flow.cores.y[1], table["Z"] / 1e3 - flow.cores.z[1])
    assert np.count_nonzero(lost & (distance < 2 * flow.cores.core[1])) >= 2


def test_balance_readings_agree_with_the_truth_within_their_uncertainty(survey):
    truth = json.loads((FOLDER / "truth.json").read_text(encoding="utf-8"))["rows"]
    for reading in survey["compare"]:
        value, u = (float(reading[key].split()[0]) for key in ("value", "standard_uncertainty"))
        assert 0 < abs(value - truth[reading["row"]]["value"]) < 2 * u


def test_the_survey_file_is_accepted():
    # Unknown keys, wrong dimensions and missing columns would be refused here.
    from wakeledger.run.config.survey import read_survey

    survey = read_survey(FOLDER / "survey.toml")
    assert survey.unsupported() == []
