"""The sample survey of a raw traverse: its files are what its script makes, and its ledger holds the truth."""

import importlib.util
import json
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wakeledger.run.survey import load, reduce

FOLDER = Path(__file__).parents[2] / "sample_surveys" / "raw_traverse"


@pytest.fixture(scope="module")
def script():
    spec = importlib.util.spec_from_file_location("make_raw_traverse", FOLDER / "make_survey.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="module")
def flow(script):
    return script.wake()


@pytest.fixture(scope="module")
def ledger():
    return reduce(load(FOLDER / "survey.toml"), draws=100)


def table(path):
    return np.genfromtxt(path, delimiter=",", names=True)


def test_the_script_makes_the_data_that_are_there(script, flow, tmp_path):
    script.recording(flow).write_csv(tmp_path / "traverse.csv", script.COLUMNS)
    (tmp_path / "calibration.csv").write_text(script.calibration_text(), encoding="utf-8")
    for name in ("traverse.csv", "calibration.csv"):
        kept, made = table(FOLDER / name), table(tmp_path / name)
        for column in kept.dtype.names:
            # One unit of the last digit, where another machine rounds the other way.
            assert_allclose(made[column], kept[column], atol=0.0101, equal_nan=True)
    assert (FOLDER / "traverse.csv").stat().st_size < 1_000_000
    rows = json.loads((FOLDER / "truth.json").read_text(encoding="utf-8"))["rows"]
    for name, row in script.truth(flow)["rows"].items():
        assert_allclose(rows[name]["value"], row["value"], rtol=1e-7, atol=2e-9)


def test_the_ledger_holds_the_truth(ledger):
    truth = json.loads((FOLDER / "truth.json").read_text(encoding="utf-8"))["rows"]
    misses = {
        row.name: abs(row.value - truth[row.name]["value"]) / (2 * row.standard_uncertainty) for row in ledger.rows
    }
    assert max(misses.values()) <= 1.0, misses
    drag = next(row for row in ledger.rows if row.name == "total_drag")
    assert 0.002 < drag.standard_uncertainty / drag.value < 0.02


def test_what_went_wrong_is_found(ledger, script):
    how = script.CONDITIONS
    text = " ".join(ledger.notes)
    backlash = float(text.split("backlash of the traverse of ")[1].split()[0])
    assert backlash == pytest.approx(1e3 * how.backlash, rel=0.1)
    drift = float(text.split("dynamic pressure by ")[1].split("%")[0])
    assert drift == pytest.approx(-100 * how.reference_drift / script.REFERENCE.dynamic_pressure, rel=0.5)
    pitch, yaw = (float(text.split("the flow is turned by ")[1].split(" deg")[part].split()[-1]) for part in (0, 1))
    # The probe hangs upside down, and its head's own turn with it: nose down and to port as it hangs.
    assert pitch == pytest.approx(-np.degrees(how.head_pitch), abs=0.02)
    assert yaw == pytest.approx(np.degrees(how.head_yaw), abs=0.02)
    assert "line 109 of its table" in text
