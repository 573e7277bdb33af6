"""Differences and means of planes on a common grid."""

import dataclasses

import numpy as np

from wakeledger.core.grid import UniformGrid
from wakeledger.core.plane import make_plane
from wakeledger.core.traverse import make_traverse
from wakeledger.ledger.plane_difference import plane_difference, plane_differences
from wakeledger.ledger.plane_mean import plane_mean


def field(y, z):
    """A bicubic polynomial, which bicubic splines reproduce."""
    return 1 + y - 2 * z + y * z**2 + 0.5 * y**3


def of(ledger, grid, factor, *, speed=40.0):
    y, z = grid.mesh()
    values = factor * field(y, z)
    names = ("total_pressure_loss", "axial_vorticity", "v", "w", "u")
    marks = {"wake_mask": (np.abs(y) < 0.31).astype(np.int8), "flag": np.zeros(grid.shape, dtype=np.int32)}
    plane = make_plane(grid, dict.fromkeys(names, values) | marks, station=1.0)
    return dataclasses.replace(ledger, plane=plane, reference={"speed": speed, "dynamic_pressure": 0.6 * speed**2})


def test_planes_are_brought_onto_the_coarser_places_of_the_common_window(ledger):
    a = of(ledger, UniformGrid(-1.0, -0.5, 0.02, 0.05, 101, 21), 1.0)
    b = of(ledger, UniformGrid(-0.9, -0.4, 0.05, 0.02, 31, 41), 3.0, speed=50.0)
    found, note = plane_difference(a, b)
    assert "bicubic" in note
    # y from the coarser B inside both windows, z from the coarser A inside both.
    np.testing.assert_allclose(found["y"], -0.9 + 0.05 * np.arange(31), atol=1e-12)
    np.testing.assert_allclose(found["z"], -0.4 + 0.05 * np.arange(17), atol=1e-12)
    y, z = np.meshgrid(found["y"], found["z"])
    exact = field(y, z)
    # Splines reproduce cubics to rounding; every field over its own stream.
    loss = 3 * exact / (0.6 * 50.0**2) - exact / (0.6 * 40.0**2)
    np.testing.assert_allclose(found["total_pressure_loss"], loss, rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(found["axial_vorticity"], exact * (3 / 50 - 1 / 40), rtol=1e-9, atol=1e-12)
    np.testing.assert_array_equal(found["wake_mask_b"] > 0, np.abs(y) < 0.31)


def test_unknown_places_stay_unknown(ledger):
    a = of(ledger, UniformGrid(-1.0, -0.5, 0.02, 0.05, 101, 21), 1.0)
    b = of(ledger, UniformGrid(-0.9, -0.4, 0.05, 0.02, 31, 41), 3.0)
    b.plane["v"] = b.plane["v"].copy(deep=True)
    b.plane["v"].values[20, 15] = np.nan
    found, _ = plane_difference(a, b)
    unknown = np.isnan(found["v"].values)
    # z = 0.0, y = -0.15.
    assert unknown.sum() == 1 and unknown[8, 15]
    assert not np.isnan(found["w"].values).any()


def test_like_planes_are_subtracted_as_they_stand(ledger):
    grid = UniformGrid(-1.0, -0.5, 0.02, 0.05, 101, 21)
    found, note = plane_difference(of(ledger, grid, 1.0), of(ledger, grid, 1.0))
    assert "as they stand" in note
    assert float(np.abs(found["total_pressure_loss"]).max()) == 0.0


def test_planes_apart_have_no_difference(ledger):
    one = of(ledger, UniformGrid(-1.0, -0.5, 0.02, 0.05, 11, 21), 1.0)
    other = of(ledger, UniformGrid(1.0, -0.5, 0.02, 0.05, 11, 21), 1.0)
    found, said = plane_difference(one, other)
    assert found is None and "no window in common" in said


def traverse(ledger, z, factor):
    plane = make_traverse("z", z, {"total_pressure_loss": factor * z}, station=1.0, wake=(0.0, 1.0))
    return dataclasses.replace(ledger, plane=plane, reference={"speed": 40.0, "dynamic_pressure": 960.0})


def test_traverses_are_subtracted_along_their_line(ledger):
    a = traverse(ledger, np.linspace(0.0, 1.0, 21), 1.0)
    b = traverse(ledger, np.linspace(0.2, 1.4, 13), 2.0)
    found, note = plane_difference(a, b)
    np.testing.assert_allclose(found["z"], np.linspace(0.2, 1.0, 9), atol=1e-12)
    np.testing.assert_allclose(found["total_pressure_loss"], found["z"] / 960.0, rtol=1e-9)
    assert "9 places" in note
    across, said = plane_difference(a, of(ledger, UniformGrid(-1.0, -0.5, 0.02, 0.05, 11, 21), 1.0))
    assert across is None and "same axis" in said


def test_mean_of_planes(ledger):
    grid = UniformGrid(-1.0, -0.5, 0.02, 0.05, 101, 21)
    planes = [of(ledger, grid, factor).plane for factor in (1.0, 2.0, 6.0)]
    planes[1]["flag"].values[3, 4] = 8
    mean, note = plane_mean(planes)
    np.testing.assert_allclose(mean["v"], 3 * planes[0]["v"], rtol=1e-12)
    assert int(mean["flag"].values[3, 4]) == 8 and "same places" in note
    assert float(planes[0]["flag"].values[3, 4]) == 0
    other = of(ledger, UniformGrid(-0.9, -0.4, 0.05, 0.02, 31, 41), 3.0).plane
    mean, note = plane_mean([planes[0], other])
    y, z = np.meshgrid(mean["y"], mean["z"])
    np.testing.assert_allclose(mean["v"], 2 * field(y, z), rtol=1e-9, atol=1e-12)
    assert "coarsest" in note


def stations(ledger, grid, factors):
    planes = [
        dataclasses.replace(one, plane=one.plane.assign_coords(x=x))
        for x, factor in factors.items()
        for one in [of(ledger, grid, factor)]
    ]
    return dataclasses.replace(planes[0], stations=tuple(planes) if len(planes) > 1 else ())


def test_planes_are_subtracted_station_by_station_in_any_order(ledger):
    grid = UniformGrid(-1.0, -0.5, 0.1, 0.1, 21, 11)
    a = stations(ledger, grid, {1.0: 1.0, 2.0: 10.0, 3.0: 5.0})
    b = stations(ledger, grid, {2.0: 13.0, 1.0: 3.0})
    found, notes = plane_differences(a, b)
    assert [float(one["x"]) for one in found] == [1.0, 2.0]
    y, z = grid.mesh()
    for one, change in zip(found, (2.0, 3.0), strict=True):
        # Planes that stand as they are: rounding alone.
        np.testing.assert_allclose(one["axial_vorticity"], change * field(y, z) / 40.0, rtol=1e-12, atol=1e-14)
    assert notes[0].startswith("Planes at 1 m: Both planes have the same places")
    assert notes[-1] == "Only A has a plane at 3 m: no difference of planes was taken there."


def test_a_single_plane_is_held_against_the_one_at_its_station(ledger):
    grid = UniformGrid(-1.0, -0.5, 0.1, 0.1, 21, 11)
    a = stations(ledger, grid, {1.0: 1.0, 2.0: 10.0})
    (found,), notes = plane_differences(a, stations(ledger, grid, {2.0: 7.0}))
    y, z = grid.mesh()
    np.testing.assert_allclose(found["axial_vorticity"], -3 * field(y, z) / 40.0, rtol=1e-12, atol=1e-14)
    assert "Only A has a plane at 1 m" in notes[-1]


def test_planes_without_a_common_station_are_said_to_stand_apart(ledger):
    grid = UniformGrid(-1.0, -0.5, 0.1, 0.1, 21, 11)
    (found,), (note,) = plane_differences(
        stations(ledger, grid, {1.0: 1.0, 2.0: 10.0}), stations(ledger, grid, {4.0: 3.0})
    )
    assert "x" not in found.coords
    assert note.startswith("Plane of A at 1 m and of B at 4 m: ")
    # One plane each: as it always was.
    single, (said,) = plane_differences(stations(ledger, grid, {1.0: 1.0}), stations(ledger, grid, {1.0: 2.0}))
    assert said.startswith("Both planes have the same places")
    assert len(single) == 1
