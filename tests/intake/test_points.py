"""From columns to points: axes, polar positions, deviations, sample counts; files that are no tables."""

import os
from pathlib import Path

import numpy as np
import pytest

from wakeledger.core.errors import DataError
from wakeledger.core.points import Column
from wakeledger.intake.readers import read_points

IDENTITY = np.eye(3)


def write(tmp_path, header, values):
    path = tmp_path / "points.csv"
    np.savetxt(path, values, delimiter=",", header=header, comments="", fmt="%.17g")
    return path


def columns(**units):
    return {key: Column(key, unit, scale) for key, (unit, scale) in units.items()}


M = ("m", 1.0)


def test_left_handed_axes_map_positions_and_leave_components(tmp_path):
    # File axes: x downstream, y up, z from starboard to port: y_wind = -z_file, z_wind = y_file.
    axes = np.array([[1.0, 0, 0], [0, 0, -1.0], [0, 1.0, 0]])
    path = write(tmp_path, "y,z,v,w", [[1.0, 2.0, 3.0, 4.0], [5.0, 6.0, 7.0, 8.0]])
    points = read_points(path, columns(y=M, z=M, v=M, w=M), axes=axes)
    np.testing.assert_array_equal(points.y, [-2.0, -6.0])
    np.testing.assert_array_equal(points.z, [1.0, 5.0])
    np.testing.assert_array_equal(points.channels["v"].values, [3.0, 7.0])
    np.testing.assert_array_equal(points.axes, axes)


def test_streamwise_axis_may_be_any_of_the_file(tmp_path):
    # File z is downstream, x to starboard, y up.
    axes = np.array([[0, 0, 1.0], [1.0, 0, 0], [0, 1.0, 0]])
    path = write(tmp_path, "x,y,z,u", [[1.0, 2.0, 9.0, 3.0], [3.0, 4.0, 9.0, 3.0]])
    points = read_points(path, columns(x=M, y=M, z=M, u=M), axes=axes)
    np.testing.assert_array_equal(points.y, [1.0, 3.0])
    np.testing.assert_array_equal(points.z, [2.0, 4.0])


def test_polar_positions(tmp_path):
    path = write(tmp_path, "r,theta,u", [[2.0, 0.0, 1.0], [2.0, 90.0, 1.0], [1.0, 210.0, 1.0]])
    points = read_points(path, columns(r=M, theta=("deg", np.pi / 180), u=M), axes=IDENTITY)
    # theta from starboard (+y) towards up (+z); 1e-15 is the rounding of the cosine of a right angle.
    np.testing.assert_allclose(points.y, [2.0, 0.0, -np.sqrt(3) / 2], atol=1e-15)
    np.testing.assert_allclose(points.z, [0.0, 2.0, -0.5], atol=1e-15)


@pytest.mark.parametrize(
    ("keys", "match"),
    [
        ("yu", "wind axis z"),
        ("zu", "wind axis y"),
        ("xyu", "wind axis z"),
        (("r", "u"), "given by r"),
        (("y", "r", "theta", "u"), "given by y, r, theta"),
    ],
)
def test_incomplete_positions(tmp_path, keys, match):
    path = write(tmp_path, ",".join(keys), np.ones((3, len(keys))))
    with pytest.raises(DataError, match=match):
        read_points(path, columns(**dict.fromkeys(keys, M)), axes=IDENTITY)


def test_negative_radius(tmp_path):
    path = write(tmp_path, "r,theta,u", [[2.0, 0.0, 1.0], [-2.0, 1.0, 1.0]])
    with pytest.raises(DataError, match=r"line 3, column 'r': the radius r is negative"):
        read_points(path, columns(r=M, theta=("rad", 1.0), u=M), axes=IDENTITY)


def test_several_planes_are_told_apart(tmp_path):
    values = [[x, y, z, 1.0] for x in (0.5, 1.0) for y in (0.0, 1.0) for z in (0.0, 1.0)]
    with pytest.raises(DataError, match=r"planes at 'x' = 0.5, 1 m"):
        read_points(write(tmp_path, "x,y,z,u", values), columns(x=M, y=M, z=M, u=M), axes=IDENTITY)


def test_deviations_samples_and_rows(tmp_path):
    path = write(tmp_path, "y,z,u,s,n,row", [[0, 1, 5.0, 2.0, 100, 3], [1, 1, 6.0, np.nan, 50, 4]])
    points = read_points(
        path,
        columns(y=M, z=M, u=("degC", 1.0), row=("1", 1.0)) | {"temperature": Column("u", "degF", 5 / 9, 255.37)},
        axes=IDENTITY,
        std={"temperature": Column("s", "degF", 5 / 9, 255.37)},
        samples=Column("n", "1"),
    )
    # A deviation is a difference: scaled, never shifted.
    np.testing.assert_allclose(points.std["temperature"], [10 / 9, np.nan], rtol=1e-15)
    np.testing.assert_array_equal(points.samples, [100, 50])
    np.testing.assert_array_equal(points.row, [3, 4])
    assert "row" not in points.channels


@pytest.mark.parametrize(
    ("name", "value", "match"),
    [
        ("s", -1.0, "deviation of u is negative"),
        ("n", 2.5, "samples is 2.5"),
        ("n", 0, "samples is 0"),
        ("n", np.nan, "samples is nan"),
        ("row", 0.5, "row is 0.5"),
    ],
)
def test_wrong_deviations_samples_and_rows(tmp_path, name, value, match):
    row = {"y": 0.0, "z": 1.0, "u": 5.0, "s": 2.0, "n": 10, "row": 1}
    path = write(tmp_path, ",".join(row), [list(row.values()), list((row | {name: value}).values())])
    with pytest.raises(DataError, match=match) as caught:
        read_points(
            path, columns(y=M, z=M, u=M, row=M), axes=IDENTITY, std={"u": Column("s", "m")}, samples=Column("n", "1")
        )
    assert "line 3" in (caught.value.place or "")


def test_missing_file_and_directory(tmp_path):
    with pytest.raises(DataError, match="there is no such file"):
        read_points(tmp_path / "absent.csv", columns(y=M, z=M, u=M), axes=IDENTITY)
    with pytest.raises(DataError, match="this is a directory"):
        read_points(tmp_path, columns(y=M, z=M, u=M), axes=IDENTITY)


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="the superuser may read everything")
def test_unreadable_file(tmp_path):
    path = write(tmp_path, "y,z,u", np.ones((3, 3)))
    path.chmod(0)
    with pytest.raises(DataError, match="permission denied"):
        read_points(path, columns(y=M, z=M, u=M), axes=IDENTITY)


def test_unreadable_file_by_any_user(tmp_path, monkeypatch):
    path = write(tmp_path, "y,z,u", np.ones((3, 3)))

    def refuse(self, *_args, **_options):
        raise PermissionError(13, "Permission denied", str(self))

    monkeypatch.setattr(Path, "open", refuse)
    with pytest.raises(DataError, match="permission denied"):
        read_points(path, columns(y=M, z=M, u=M), axes=IDENTITY)


@pytest.mark.parametrize(
    ("content", "kind"),
    [
        (b"<?xml version='1.0'?>\n<VTKFile type='PolyData'>", "VTK XML"),
        (b"# vtk DataFile Version 2.0\ntime\nASCII\n", "legacy VTK"),
        (b"/*--- C++ ---*/\nFoamFile\n{\n version 2.0;\n}\n", "OpenFOAM"),
        (b"MATLAB 5.0 MAT-file, Platform: GLNXA64" + bytes(90), "MATLAB"),
        (b"MATLAB 7.3 MAT-file, Platform".ljust(512) + b"\x89HDF\r\n\x1a\n" + bytes(64), "HDF5"),
        (b"\x89HDF\r\n\x1a\n" + bytes(64) + b"CGNSLibraryVersion", "CGNS"),
        (b"\x89HDF\r\n\x1a\n" + bytes(640), "HDF5"),
        (b"PK\x03\x04" + bytes(30), "spreadsheet"),
        (b"\x1f\x8b\x08" + bytes(30), "gzip"),
        (b"\x89PNG\r\n\x1a\n" + bytes(30), "PNG"),
    ],
)
def test_other_formats_are_recognised_by_content(tmp_path, content, kind):
    path = tmp_path / "misnamed.csv"
    path.write_bytes(content)
    with pytest.raises(DataError, match=kind) as caught:
        read_points(path, columns(y=M, z=M, u=M), axes=IDENTITY)
    assert caught.value.remedy
