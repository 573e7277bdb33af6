"""Scattered points: accuracy against closed forms and against piecewise cubic interpolation, flags, linearity."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.interpolate import CloughTocher2DInterpolator

from wakeledger.core.errors import DataError
from wakeledger.core.flags import Flag
from wakeledger.intake.gridding import make_gridding

CORE = 0.1


def swirl(y, z):
    """Side velocity of a Gaussian vortex of core 0.1 and circulation 1 (Lamb 1932, art. 334a)."""
    dy, dz = y - 0.03, z + 0.02
    square = dy**2 + dz**2
    return np.expm1(-square / CORE**2) / (2 * np.pi * square) * dz


PEAK = 0.638 / (2 * np.pi * CORE)


def cubic(y, z):
    return 1.0 + 2 * y - 3 * z + 4 * y * z - y**2 + 0.5 * z**3 - 2 * y**2 * z + y**3


def scatter(n, jitter=0.4, seed=7):
    """An n x n lattice over [-1, 1]² with every point shifted by up to `jitter` spacings."""
    generator = np.random.default_rng(seed)
    line = np.linspace(-1, 1, n)
    yy, zz = np.meshgrid(line, line)
    shift = generator.uniform(-jitter, jitter, (2, n, n)) * (line[1] - line[0])
    return (yy + shift[0]).ravel(), (zz + shift[1]).ravel()


def everything(y):
    return np.ones(y.size, dtype=bool)


def on(grid, function):
    zz, yy = np.meshgrid(grid.z, grid.y, indexing="ij")
    return function(yy, zz)


def test_cubic_polynomials_are_exact():
    y, z = scatter(21)
    gridding = make_gridding(y, z, everything(y))
    assert gridding.kind == "scattered"
    assert gridding.operators() is None
    error = np.abs(gridding.apply(cubic(y, z)) - on(gridding.grid, cubic))
    # Rounding of systems of 40 unknowns, whose pivots are kept from zero by 1e-12.
    assert error[~gridding.filled].max() < 1e-8
    # Of 21 x 21 cells 80 are on the edge, and about every other sees the hull's edge pass inside it.
    assert gridding.filled_fraction < 80 / 441


def test_better_than_piecewise_cubics_and_of_higher_order():
    errors, reference = [], []
    for n in (41, 81):
        y, z = scatter(n)
        gridding = make_gridding(y, z, everything(y), spacing=0.025)
        truth = on(gridding.grid, swirl)
        inside = (np.abs(gridding.grid.y) < 0.6)[None, :] & (np.abs(gridding.grid.z) < 0.6)[:, None]
        assert not gridding.filled[inside].any()
        zz, yy = np.meshgrid(gridding.grid.z, gridding.grid.y, indexing="ij")
        errors.append(np.std((gridding.apply(swirl(y, z)) - truth)[inside]))
        piecewise = CloughTocher2DInterpolator(np.column_stack([y, z]), swirl(y, z))(yy, zz)
        reference.append(np.std((piecewise - truth)[inside]))
    assert errors[0] < 0.5 * reference[0]
    assert errors[1] < 0.35 * reference[1]
    # Between third order (radial functions) and fourth (cubic polynomials); 3.2 here, 4.4 from 81 to 161 a side.
    assert np.log2(errors[0] / errors[1]) > 3.0
    assert errors[1] < 2e-4 * PEAK


def test_vorticity_of_scattered_points_gives_the_circulation():
    y, z = scatter(61)
    gridding = make_gridding(y, z, everything(y), spacing=0.025)

    def upwash(y, z):
        return swirl(z + 0.05, -(y - 0.05))  # the same vortex turned by a quarter: w(y, z)

    v, w = gridding.apply(swirl(y, z)), gridding.apply(upwash(y, z))
    grid = gridding.grid
    xi = np.gradient(w, grid.dy, axis=1) - np.gradient(v, grid.dz, axis=0)
    inside = (np.abs(grid.y) < 0.5)[None, :] & (np.abs(grid.z) < 0.5)[:, None]
    # Circulation 1 within r = 0.5 but for exp(-25); second-order differences keep sums but for the edge.
    assert (xi * inside).sum() * grid.cell_area == pytest.approx(1.0, rel=5e-3)


def test_order_shift_and_units_do_not_matter():
    y, z = scatter(17)
    usable = everything(y)
    usable[100] = False
    first = make_gridding(y, z, usable)
    order = np.random.default_rng(8).permutation(y.size)
    second = make_gridding(y[order], z[order], usable[order])
    assert first.grid == second.grid
    np.testing.assert_array_equal(first.apply(swirl(y, z)), second.apply(swirl(y, z)[order]))
    np.testing.assert_array_equal(first.flag, second.flag)


@settings(max_examples=10, deadline=None)
@given(unit=st.sampled_from([1e-3, 0.3048, 1e3]), shift=st.tuples(st.floats(-20, 20), st.floats(-20, 20)))
def test_shift_and_units(unit, shift):
    y, z = scatter(13)
    first = make_gridding(y, z, everything(y), spacing=0.1)
    second = make_gridding(unit * (y + shift[0]), unit * (z + shift[1]), everything(y), spacing=0.1 * unit)
    assert second.grid.shape == first.grid.shape
    np.testing.assert_allclose(second.apply(swirl(y, z)), first.apply(swirl(y, z)), atol=1e-7 * PEAK)


def test_linear_and_cheap_for_many_draws():
    y, z = scatter(21)
    gridding = make_gridding(y, z, everything(y))
    draws = np.random.default_rng(9).normal(size=(2, 3, y.size))
    fields = gridding.apply(draws)
    assert fields.shape == (2, 3, *gridding.grid.shape)
    np.testing.assert_allclose(fields[1, 2], gridding.apply(draws[1, 2]), atol=1e-11)
    np.testing.assert_allclose(
        gridding.apply(2 * draws[0, 0] - draws[0, 1]), 2 * fields[0, 0] - fields[0, 1], atol=1e-10
    )


def test_polar_traverse():
    radius, angle = np.meshgrid(np.linspace(0, 0.5, 31), np.arange(72) * np.pi / 36, indexing="ij")
    y, z = (radius * np.cos(angle)).ravel(), (radius * np.sin(angle)).ravel()
    gridding = make_gridding(y, z, everything(y))
    # 72 readings of the centre are one place.
    assert gridding.raw_shape == (1, 30 * 72 + 1)
    centre = np.unravel_index(np.argmin(np.abs(on(gridding.grid, np.hypot))), gridding.grid.shape)
    assert gridding.flag[centre] & Flag.AVERAGED
    error = np.abs(gridding.apply(swirl(y, z)) - on(gridding.grid, swirl))
    # The outer circles have points 0.044 apart, 0.44 of the core.
    assert error[~gridding.filled].max() < 2e-3 * PEAK
    # A circle covers pi/4 of its square.
    assert gridding.filled_fraction == pytest.approx(1 - np.pi / 4, abs=0.05)
    corner = gridding.flag[0, 0]
    assert corner & Flag.FAR_FROM_DATA


def test_holes_and_surroundings_are_flagged():
    y, z = scatter(41)
    hole = np.hypot(y, z) < 0.3
    gridding = make_gridding(y, z, ~hole)
    distance = on(gridding.grid, np.hypot)
    far = (gridding.flag & Flag.FAR_FROM_DATA) != 0
    missing = (gridding.flag & Flag.MISSING) != 0
    assert far[distance < 0.1].all()
    assert missing[distance < 0.25].all()
    assert not missing[(distance > 0.4) & ~far].any()
    assert gridding.filled[missing | far].all()
    assert np.isfinite(gridding.apply(np.where(hole, np.nan, swirl(y, z)))).all()


def test_dense_rows_are_not_far_from_each_other():
    generator = np.random.default_rng(10)
    z = np.repeat(np.linspace(-0.5, 0.5, 21), 200)
    y = np.concatenate([np.sort(generator.uniform(-1, 1, 200)) for _ in range(21)])
    gridding = make_gridding(y, z, everything(y))
    assert gridding.kind == "scattered"
    np.testing.assert_array_equal(gridding.row_index, np.repeat(np.arange(21), 200))
    assert gridding.filled_fraction < 0.03
    assert gridding.raw_spacing[1] == pytest.approx(0.05, rel=0.4)
    assert gridding.raw_spacing[0] == pytest.approx(0.01, rel=0.4)
    error = np.abs(gridding.apply(swirl(y, z)) - on(gridding.grid, swirl))
    # Rows are half a core apart, and the widest gaps within a row a third.
    assert error[~gridding.filled].max() < 1e-2 * PEAK


def test_decimated_keeps_the_grid_and_costs_accuracy():
    y, z = scatter(61)
    gridding = make_gridding(y, z, everything(y))
    fewer = gridding.decimated(2)
    assert fewer.grid == gridding.grid
    assert fewer.raw_shape == (1, (61 * 61 + 1) // 2)
    truth = on(gridding.grid, swirl)
    both = ~(gridding.filled | fewer.filled)
    fine, coarse = (np.std((g.apply(swirl(y, z)) - truth)[both]) for g in (gridding, fewer))
    assert 2 < coarse / fine < 40
    with pytest.raises(DataError, match="at least 5 x 5"):
        gridding.decimated(200)


def test_too_few_places():
    y, z = scatter(4)
    with pytest.raises(DataError, match=r"at 16 places"):
        make_gridding(y, z, everything(y))


def test_points_mark_their_cells():
    y, z = scatter(21)
    chosen = np.hypot(y - 0.5, z) < 0.2
    marked = make_gridding(y, z, everything(y)).near(chosen)
    grid = make_gridding(y, z, everything(y)).grid
    distance = on(grid, lambda yy, zz: np.hypot(yy - 0.5, zz))
    assert marked[distance < 0.1].all()
    assert not marked[distance > 0.3].any()
