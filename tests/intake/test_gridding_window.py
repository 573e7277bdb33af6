"""Scattered and polar points cover only part of their bounding box: the plane is cut to what they cover."""

import numpy as np
import pytest

from wakeledger.core.flags import Flag
from wakeledger.intake.gridding import make_gridding
from wakeledger.intake.gridding.window import _largest_rectangle, covered_window


def disc(n=3000, radius=1.0, seed=4):
    rng = np.random.default_rng(seed)
    r, angle = radius * np.sqrt(rng.random(n)), 2 * np.pi * rng.random(n)
    return r * np.cos(angle), r * np.sin(angle)


def test_a_disc_of_points_is_cut_to_a_rectangle_inside_it():
    y, z = disc()
    whole = make_gridding(y, z, np.ones(y.size, bool))
    cut = covered_window(whole)
    assert (whole.flag & Flag.FAR_FROM_DATA.value).any()
    edges = np.concatenate([cut.flag[0], cut.flag[-1], cut.flag[:, 0], cut.flag[:, -1]])
    assert not (edges & Flag.FAR_FROM_DATA.value).any()
    corner = np.hypot(max(abs(cut.grid.y[0]), cut.grid.y[-1]), max(abs(cut.grid.z[0]), cut.grid.z[-1]))
    assert corner < 1.05
    # The largest rectangle in a disc is the square of side √2 r; the ragged edge costs a few cells.
    assert cut.grid.area == pytest.approx(2.0, rel=0.15)


def test_the_cut_fields_are_the_whole_ones_inside():
    y, z = disc()
    whole = make_gridding(y, z, np.ones(y.size, bool))
    cut = covered_window(whole)
    values = np.sin(3 * y) + z
    field, part = whole.apply(values), cut.apply(values)
    iy = round((cut.grid.y0 - whole.grid.y0) / whole.grid.dy)
    iz = round((cut.grid.z0 - whole.grid.z0) / whole.grid.dz)
    assert np.array_equal(part, field[iz : iz + cut.grid.nz, iy : iy + cut.grid.ny])
    assert np.array_equal(cut.near(y > 0), whole.near(y > 0)[iz : iz + cut.grid.nz, iy : iy + cut.grid.ny])


def test_a_full_grid_is_left_as_it_is():
    yy, zz = np.meshgrid(np.linspace(0, 1, 12), np.linspace(0, 1, 9))
    gridding = make_gridding(yy.ravel(), zz.ravel(), np.ones(yy.size, bool))
    assert covered_window(gridding) is gridding


def test_a_hole_inside_stays():
    yy, zz = np.meshgrid(np.linspace(0, 1, 40), np.linspace(0, 1, 40))
    usable = np.hypot(yy - 0.5, zz - 0.5).ravel() > 0.2
    gridding = covered_window(make_gridding(yy.ravel(), zz.ravel(), usable))
    assert gridding.grid.shape == (40, 40)
    assert gridding.filled.sum() == (~usable).sum()


def test_largest_rectangle_against_all_rectangles():
    rng = np.random.default_rng(0)
    for _ in range(30):
        inside = rng.random((7, 9)) > 0.3
        rows, columns = _largest_rectangle(inside)
        assert inside[rows, columns].all()
        best = max(
            (b - a) * (d - c)
            for a in range(7)
            for b in range(a + 1, 8)
            for c in range(9)
            for d in range(c + 1, 10)
            if inside[a:b, c:d].all()
        )
        assert (rows.stop - rows.start) * (columns.stop - columns.start) == best
