"""Positions that are turned with the vectors: the traverse stands askew as the probe does."""

import re
from pathlib import Path

import numpy as np
import pytest
from tests.run import survey_kit as kit

from wakeledger.core.rotation import rotation_matrix
from wakeledger.ledger.archive import open_archive, write_archive
from wakeledger.run.config import parse_survey
from wakeledger.run.survey import load, reduce

SAMPLES = Path(__file__).resolve().parents[2] / "sample_surveys"
#: A traverse mounted badly, deg.
ROLL = 4.0


def askew(wake, *, roll=0.0, pitch=0.0, yaw=0.0):
    """What a traverse reads whose axes, positions and vectors alike, are turned against the wind axes."""
    turn = rotation_matrix(np.radians(pitch), np.radians(yaw), np.radians(roll))
    y, z = (one.ravel() for one in np.meshgrid(*kit.axes()))
    _, there_y, there_z = turn @ np.stack([np.zeros_like(y), y, z])
    data = kit.at(wake, there_y, there_z)
    u, v, w = turn.T @ np.stack([data["u"], data["v"], data["w"]])
    return {**data, "y": y, "z": z, "u": u, "v": v, "w": w}


def content(*, turn=True, **angles):
    axes = {f"{name}_offset": f"{angle} deg" for name, angle in angles.items()}
    return kit.description(plane={"axes": {**axes, "turn_positions": turn}})


@pytest.fixture(scope="module")
def wake():
    return kit.wing(loading=kit.asymmetric)


def test_a_traverse_that_is_rolled_as_a_whole_gives_the_forces_of_the_wind_axes(wake, tmp_path):
    straight = kit.values(kit.ledger(tmp_path / "a", kit.table(wake, *kit.axes())))
    found = kit.values(kit.ledger(tmp_path / "b", askew(wake, roll=ROLL), content(roll=ROLL)))
    wrong = kit.values(kit.ledger(tmp_path / "c", askew(wake, roll=ROLL), content(roll=-ROLL)))
    for row in ("profile_drag", "induced_drag", "lift", "total_drag"):
        # Points off the lines of the grid are interpolated, at two points per core length.
        assert found[row] == pytest.approx(straight[row], rel=2e-3)
    # Turned the wrong way, lift 90 N would show as side force 90 sin 8 deg = 12.5 N.
    assert abs(found["side_force"]) < 0.2 < abs(wrong["side_force"])
    assert found["rolling_moment"] == pytest.approx(straight["rolling_moment"], rel=5e-3)


def test_without_it_only_the_vectors_are_turned(wake, tmp_path):
    inner = load(kit.write(tmp_path, askew(wake, roll=ROLL), content(turn=False, roll=ROLL)))
    assert np.array_equal(inner.points.y, np.meshgrid(*kit.axes())[0].ravel())


def test_a_plane_that_leans_keeps_its_station_and_says_by_how_much_it_leans(wake, tmp_path):
    survey = load(kit.write(tmp_path, askew(wake, yaw=2.0), content(yaw=2.0)))
    # Seen along the stream the plane is narrower by cos 2 deg.
    assert np.ptp(survey.points.y) == pytest.approx(2.2 * np.cos(np.radians(2.0)), rel=1e-12)
    # Its ends at y = 1.1 m stand 1.1 sin 2 deg = 38 mm from the station.
    assert any(re.search(r"turn_positions.* 38 mm", note) for note in survey.notes())


def test_the_archive_keeps_the_positions_as_read_and_turns_them_again(wake, tmp_path):
    data = askew(wake, roll=ROLL)
    made = kit.ledger(tmp_path, data, content(roll=ROLL))
    assert np.array_equal(made.raw.y, data["y"])
    write_archive(made, tmp_path / "ledger.nc")
    assert kit.values(reduce(load(tmp_path / "ledger.nc"))) == kit.values(made)
    assert np.array_equal(open_archive(tmp_path / "ledger.nc").raw.y, data["y"])


@pytest.mark.parametrize("name", ["raw_traverse", "wing_section"])
def test_the_places_of_a_raw_traverse_and_of_a_line_are_not_turned(name):
    text = (SAMPLES / name / "survey.toml").read_text(encoding="utf-8")
    asked = text.replace("[plane.columns]", "[plane.axes]\nturn_positions = true\n\n[plane.columns]", 1)
    said = [one for one in parse_survey(asked, "survey.toml").unsupported() if "turn_positions" in one]
    assert len(said) == 1
    assert "turn them in the file" in said[0]
