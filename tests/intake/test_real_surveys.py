"""Real open data, kept beside the project: read, gridded and held against what is known of them."""

import os
from pathlib import Path

import numpy as np
import pytest

from wakeledger.core.errors import DataError
from wakeledger.core.points import Column
from wakeledger.intake.gridding import make_gridding
from wakeledger.intake.readers import read_points

REFERENCE = Path(
    os.environ.get("WAKELEDGER_REFERENCE_DATA", Path(__file__).resolve().parents[3] / "shared" / "reference")
)
pytestmark = pytest.mark.skipif(not REFERENCE.is_dir(), reason="the reference data are not beside the project")
INCH = 0.0254
CHORD = 48 * INCH
#: The traverse's axes are left-handed: y up, z from the tip inboard on the port side.
TRAVERSE_AXES = np.array([[1.0, 0, 0], [0, 0, 1.0], [0, 1.0, 0]])


def columns(**names):
    return {key: Column(name, "in", INCH) for key, name in names.items()} | {
        letter: Column(f"{letter}_over_U", "1", normalised_by="speed") for letter in "uvw"
    }


def plane(tmp_path, x):
    lines = (REFERENCE / "wing_tip" / "velocity.csv").read_text().splitlines()
    path = tmp_path / "plane.csv"
    path.write_text("\n".join([lines[0], *(line for line in lines if line.startswith(f"{x:.3f},"))]))
    return read_points(path, columns(y="y_in", z="z_in"), axes=TRAVERSE_AXES)


@pytest.mark.parametrize(("x", "circulation"), [(5.784, 0.340), (21.479, 0.339), (-54.703, 0.0)])
def test_circulation_of_the_wing_tip_survey(tmp_path, x, circulation):
    points = plane(tmp_path, x)
    gridding = make_gridding(points.y, points.z, np.ones(points.n, dtype=bool))
    assert gridding.kind == ("uniform" if x < 0 else "tensor")
    # The file's v is up and its w to starboard.
    v, w = gridding.apply(points.channels["w"].values), gridding.apply(points.channels["v"].values)
    grid = gridding.grid
    around = (np.trapezoid(v[0] - v[-1], dx=grid.dy) + np.trapezoid(w[:, -1] - w[:, 0], dx=grid.dz)) / CHORD
    # Gamma/(U c) by line integral, derived from the published survey (Chow, Zilliac & Bradshaw, NASA TM 110418) to 1 %;
    # a port tip turns clockwise seen from behind. The inflow plane must have none.
    assert around == pytest.approx(-circulation, rel=0.01, abs=0.004 if x < 0 else 0.0)


def test_three_planes_in_one_file_are_refused():
    with pytest.raises(DataError, match=r"planes at 'x_in' = -1.38946, 0.146914, 0.545567 m"):
        read_points(REFERENCE / "wing_tip" / "velocity.csv", columns(x="x_in", y="y_in", z="z_in"), axes=TRAVERSE_AXES)


def test_sampled_slice_of_a_flow_solution():
    names = {"x": "x", "y": "y", "z": "z", "u": "U_x", "v": "U_y", "w": "U_z"}
    points = read_points(
        REFERENCE / "cfd_wing" / "U_slice_x2.0.raw",
        {key: Column(name, "m") for key, name in names.items()},
        axes=np.eye(3),
    )
    # "# U  POINT_DATA 8479" is the first line, the header the second, the first point "2 0 -0.00496467449 29.96…".
    assert points.n == 8479
    assert points.line[0] == 3
    assert points.z[0] == -0.00496467449
    assert points.channels["u"].values[0] == 29.9609356
