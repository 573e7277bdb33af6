"""Tensor grids: placement, averaging, gaps, resampling; truth from polynomials and a Gaussian vortex."""

import pickle

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from wakeledger.core.errors import DataError
from wakeledger.core.flags import Flag
from wakeledger.intake.gridding import make_gridding

CORE = 0.1
CENTRE = (0.03, -0.02)


def swirl(y, z):
    """Side velocity of a Gaussian vortex of core 0.1 and circulation 1 (Lamb 1932, art. 334a)."""
    dy, dz = y - CENTRE[0], z - CENTRE[1]
    square = dy**2 + dz**2
    return np.expm1(-square / CORE**2) / (2 * np.pi * square) * dz


PEAK = 0.638 / (2 * np.pi * CORE)


def cubic(y, z):
    return 1.0 + 2 * y - 3 * z + 4 * y * z - y**2 + 0.5 * z**3 - 2 * y**2 * z + y**3


def mesh(y, z):
    zz, yy = np.meshgrid(z, y, indexing="ij")
    return yy.ravel(), zz.ravel()


def on(grid, function):
    zz, yy = np.meshgrid(grid.z, grid.y, indexing="ij")
    return function(yy, zz)


def graded(n, strength=0.7):
    s = np.linspace(-1.0, 1.0, n)
    return s * (1 - strength + strength * s**2)


def everything(y):
    return np.ones(y.size, dtype=bool)


def test_uniform_grid_is_kept_to_the_last_bit():
    y, z = mesh(np.linspace(-1, 1, 21), np.linspace(0, 0.5, 11))
    gridding = make_gridding(y, z, everything(y))
    assert gridding.kind == "uniform"
    assert gridding.raw_shape == (11, 21)
    assert gridding.filled_fraction == 0.0
    assert not gridding.flag.any()
    np.testing.assert_allclose(gridding.raw_spacing, (0.1, 0.05), rtol=1e-12)
    values = np.random.default_rng(1).normal(size=(3, 2, y.size))
    np.testing.assert_array_equal(gridding.apply(values), values.reshape(3, 2, 11, 21))
    wz, wy = gridding.operators()
    np.testing.assert_array_equal(wz, np.eye(11))
    np.testing.assert_array_equal(wy, np.eye(21))


@pytest.mark.parametrize("y_lines", [np.linspace(-1, 1, 21), graded(25)])
def test_shuffled_rows_give_bit_identical_grids(y_lines):
    y, z = mesh(y_lines, np.linspace(0, 0.5, 11))
    usable = everything(y)
    usable[[7, 60, 61, 100]] = False
    values = swirl(y, z)
    first = make_gridding(y, z, usable)
    order = np.random.default_rng(2).permutation(y.size)
    second = make_gridding(y[order], z[order], usable[order])
    assert first.grid == second.grid
    np.testing.assert_array_equal(first.flag, second.flag)
    np.testing.assert_array_equal(first.apply(values), second.apply(values[order]))


@settings(max_examples=25, deadline=None)
@given(
    unit=st.sampled_from([1.0, 1e-3, 25.4e-3, 0.3048, 1e3]),
    shift=st.tuples(st.floats(-50, 50), st.floats(-50, 50)),
    seed=st.integers(0, 1000),
    strength=st.sampled_from([0.0, 0.5]),
)
def test_units_shift_and_order_do_not_matter(unit, shift, seed, strength):
    generator = np.random.default_rng(seed)
    y, z = mesh(graded(17, strength), graded(13, strength))
    usable = generator.random(y.size) > 0.03
    values = swirl(y, z)
    first = make_gridding(y, z, usable)
    order = generator.permutation(y.size)
    second = make_gridding((unit * (y + shift[0]))[order], (unit * (z + shift[1]))[order], usable[order])
    assert second.kind == first.kind
    assert second.grid.shape == first.grid.shape
    # A shift of 50 over a spacing of 0.06 costs three digits of the positions.
    np.testing.assert_allclose(second.grid.y / unit - shift[0], first.grid.y, atol=1e-12)
    np.testing.assert_array_equal(second.flag, first.flag)
    np.testing.assert_allclose(second.apply(values[order]), first.apply(values), atol=1e-9 * PEAK)


def test_jitter_below_two_percent_is_a_tensor_grid_and_more_is_not():
    generator = np.random.default_rng(3)
    y, z = mesh(np.linspace(-1, 1, 41), np.linspace(0, 1, 21))
    shift = 0.05 * generator.uniform(-1, 1, (2, y.size))
    small = make_gridding(y + 0.019 * shift[0], z + 0.019 * shift[1], everything(y))
    assert small.kind == "uniform"
    np.testing.assert_allclose(small.grid.y, np.linspace(-1, 1, 41), atol=0.01 * 0.05)
    assert make_gridding(y + 0.04 * shift[0], z, everything(y)).kind == "scattered"


def test_backlash_between_rows_is_no_tensor_grid():
    y, z = mesh(np.linspace(-1, 1, 41), np.linspace(0, 1, 21))
    row = np.rint(z * 20).astype(int)
    gridding = make_gridding(y + 0.01 * (row % 2), z, everything(y))
    assert gridding.kind == "scattered"
    np.testing.assert_array_equal(gridding.row_index, row)


def test_repeated_points_are_averaged_and_flagged():
    y, z = mesh(np.linspace(0, 1, 6), np.linspace(0, 1, 5))
    values = cubic(y, z)
    gridding = make_gridding(np.append(y, y[[8, 8]]), np.append(z, z[[8, 8]]), np.ones(32, dtype=bool))
    fields = gridding.apply(np.append(values, [values[8] + 3.0, values[8] + 6.0]))
    expected = values.reshape(5, 6).copy()
    expected[1, 2] += 3.0
    np.testing.assert_allclose(fields, expected, rtol=1e-14)
    assert np.flatnonzero(gridding.flag == Flag.AVERAGED).tolist() == [8]


def test_unusable_repeat_is_left_out_of_the_mean():
    y, z = mesh(np.linspace(0, 1, 6), np.linspace(0, 1, 5))
    usable = np.append(everything(y), False)
    gridding = make_gridding(np.append(y, y[8]), np.append(z, z[8]), usable)
    np.testing.assert_array_equal(gridding.apply(np.append(cubic(y, z), np.nan)).ravel(), cubic(y, z))
    assert not gridding.flag.any()


def test_gaps_inside_continue_cubic_polynomials():
    y, z = mesh(np.linspace(-1, 1, 31), np.linspace(-0.5, 0.5, 21))
    usable = everything(y).reshape(21, 31)
    usable[4:7, 5:9] = usable[10, 12] = usable[14:16, 20] = usable[15, 21] = False
    values = np.where(usable.ravel(), cubic(y, z), np.nan)
    gridding = make_gridding(y, z, usable.ravel())
    # Third differences of a cubic are constant, so only rounding of the solve is left.
    np.testing.assert_allclose(gridding.apply(values).ravel(), cubic(y, z), atol=1e-11)
    np.testing.assert_array_equal(gridding.filled, ~usable)
    np.testing.assert_array_equal((gridding.flag & Flag.MISSING) != 0, ~usable)
    assert gridding.filled_fraction == pytest.approx(16 / 651, rel=1e-12)
    assert not (gridding.flag & Flag.FAR_FROM_DATA).any()


def test_missing_points_that_are_not_in_the_file_are_gaps_too():
    y, z = mesh(np.linspace(-1, 1, 31), np.linspace(-0.5, 0.5, 21))
    kept = np.ones(y.size, dtype=bool)
    kept[[100, 101, 300]] = False
    gridding = make_gridding(y[kept], z[kept], np.ones(kept.sum(), dtype=bool))
    assert np.flatnonzero(gridding.filled).tolist() == [100, 101, 300]
    np.testing.assert_allclose(gridding.apply(cubic(y[kept], z[kept])).ravel(), cubic(y, z), atol=1e-11)


def test_gaps_at_edges_and_corners_continue_planes():
    y, z = mesh(np.linspace(-1, 1, 31), np.linspace(-0.5, 0.5, 21))
    usable = everything(y).reshape(21, 31)
    usable[:2, :2] = usable[0, 10:14] = usable[10:12, 29:] = False
    values = np.where(usable.ravel(), 1 + 2 * y - 3 * z, np.nan)
    np.testing.assert_allclose(make_gridding(y, z, usable.ravel()).apply(values).ravel(), 1 + 2 * y - 3 * z, atol=1e-11)


def test_a_gridding_can_be_sent_to_another_process():
    y, z = mesh(graded(21), graded(17))
    usable = np.random.default_rng(5).random(y.size) > 0.1
    gridding = make_gridding(y, z, usable)
    before = gridding.apply(swirl(y, z))
    copy = pickle.loads(pickle.dumps(gridding))
    np.testing.assert_array_equal(copy.apply(swirl(y, z)), before)


def test_large_gap_is_flagged_far_and_stays_bounded():
    y, z = mesh(np.linspace(-1, 1, 41), np.linspace(-0.5, 0.5, 31))
    usable = (np.hypot(y - 1, z - 0.5) > 0.4) & everything(y)
    gridding = make_gridding(y, z, usable)
    far = (gridding.flag & Flag.FAR_FROM_DATA) != 0
    assert far[-1, -1]
    assert not far[0].any()
    assert (gridding.filled | ~far).all()
    field = gridding.apply(np.where(usable, y, np.nan))
    # The slope dies out over the two cells that belong to the data: no further than that beyond their range.
    assert field.max() <= 1.0 + 2 * 0.05
    assert field.min() >= -1.0 - 1e-12


def test_filling_is_linear_and_ignores_what_is_not_usable():
    generator = np.random.default_rng(4)
    y, z = mesh(graded(21), graded(17))
    usable = generator.random(y.size) > 0.1
    gridding = make_gridding(y, z, usable)
    a, b = generator.normal(size=(2, y.size))
    combined = gridding.apply(np.where(usable, 2 * a - 3 * b, np.nan))
    np.testing.assert_allclose(combined, 2 * gridding.apply(a) - 3 * gridding.apply(b), atol=1e-11)
    both = gridding.apply(np.stack([a, b]))
    np.testing.assert_allclose(both[1], gridding.apply(b), atol=1e-12)


@pytest.mark.parametrize(("degree", "order", "limit"), [(3, 4, 2e-7), (5, 6, 5e-10)])
def test_observed_order_of_resampling(degree, order, limit):
    errors = []
    for n in (161, 241):
        y, z = mesh(graded(n, 0.5), 0.5 * graded(n, 0.5))
        gridding = make_gridding(y, z, everything(y), degree=degree, spacing=0.01)
        assert gridding.kind == "tensor"
        errors.append(np.abs(gridding.apply(swirl(y, z)) - on(gridding.grid, swirl)).max())
    # Interpolation by splines of degree k has order k + 1, approached from above as the core is resolved; measured 3.8
    # and 7.0, the latter from a spacing of a fifth of the core.
    observed = np.log(errors[0] / errors[1]) / np.log(1.5)
    assert order - 0.5 < observed < order + 1.5
    assert errors[0] < limit


def test_resampling_reproduces_cubics_and_carries_flags():
    y_lines, z_lines = graded(25), np.linspace(0, 1, 15)
    y, z = mesh(y_lines, z_lines)
    usable = everything(y).reshape(15, 25)
    usable[7, 12] = False
    gridding = make_gridding(y, z, usable.ravel())
    wz, wy = gridding.operators()
    np.testing.assert_array_equal(wz, np.eye(15))
    assert wy.shape == (gridding.grid.ny, 25)
    full = make_gridding(y, z, everything(y))
    np.testing.assert_allclose(full.apply(cubic(y, z)), on(full.grid, cubic), atol=1e-12)
    np.testing.assert_allclose(full.apply(cubic(y, z)), wz @ cubic(y, z).reshape(15, 25) @ wy.T, atol=1e-13)
    spot = np.argmin(np.abs(gridding.grid.y - y_lines[12]))
    assert gridding.filled[7, spot]
    assert not gridding.filled[[6, 8]].any()
    assert ((gridding.flag & Flag.INTERPOLATED) != 0).mean() > 0.8
    np.testing.assert_allclose(gridding.grid.y[[0, -1]], [-1, 1], rtol=1e-14)


def test_integral_over_a_graded_grid_matches_the_closed_form():
    y, z = mesh(graded(61), 0.9 * graded(51))
    gridding = make_gridding(y, z, everything(y), degree=5)
    width = 0.12
    field = gridding.apply(np.exp(-(y**2 + z**2) / width**2))
    weights = np.ones(gridding.grid.shape)
    # Sum over a field that has died away at the edges: as exact as the field itself; spline error here below 1e-5.
    total = (field * weights).sum() * gridding.grid.cell_area
    assert total == pytest.approx(np.pi * width**2, rel=1e-5)


def test_spacing_subdivides_uniform_lines():
    y, z = mesh(np.linspace(-1, 1, 41), np.linspace(-0.5, 0.5, 21))
    gridding = make_gridding(y, z, everything(y), spacing=0.02)
    assert gridding.kind == "tensor"
    assert gridding.grid.shape == (61, 121)
    field = gridding.apply(swirl(y, z))
    np.testing.assert_array_equal(field[::3, ::3].shape, (21, 41))
    np.testing.assert_allclose(field[::3, ::3].ravel(), swirl(y, z), atol=1e-12)
    assert not (gridding.flag[::3, ::3]).any()
    assert (gridding.flag[1::3] == Flag.INTERPOLATED).all()
    assert make_gridding(y, z, everything(y), spacing=0.06).kind == "uniform"
    assert make_gridding(y, z, everything(y), spacing=(0.05, 0.025)).grid.shape == (41, 41)


def test_cells_are_capped():
    y, z = mesh(graded(41, 0.9), graded(41, 0.9))
    free = make_gridding(y, z, everything(y))
    capped = make_gridding(y, z, everything(y), max_cells=5000)
    assert free.grid.ny * free.grid.nz > 5000 >= capped.grid.ny * capped.grid.nz > 4000
    assert make_gridding(y, z, everything(y), spacing=0.01, max_cells=5000).grid.ny <= 71


def test_decimated_uniform_grid():
    y, z = mesh(np.linspace(-1, 1, 41), np.linspace(-0.5, 0.5, 21))
    usable = everything(y).reshape(21, 41)
    usable[4, 6] = usable[5, 7] = False
    gridding = make_gridding(y, z, usable.ravel())
    half = gridding.decimated(2)
    assert (half.kind, half.grid.shape) == ("uniform", (11, 21))
    assert half.grid.dy == pytest.approx(0.1)
    assert np.flatnonzero(half.filled).tolist() == [2 * 21 + 3]
    values = np.where(usable.ravel(), cubic(y, z), np.nan)
    np.testing.assert_allclose(half.apply(values), cubic(y, z).reshape(21, 41)[::2, ::2], atol=1e-11)
    other = gridding.decimated(2, phase=(1, 0))
    assert other.grid.shape == (10, 21)
    assert other.grid.z0 == pytest.approx(-0.45)
    np.testing.assert_allclose(other.apply(values), cubic(y, z).reshape(21, 41)[1::2, ::2], atol=1e-11)
    with pytest.raises(DataError, match="leaves 3 rows"):
        gridding.decimated(8)
    with pytest.raises(ValueError, match="phase"):
        gridding.decimated(2, phase=(2, 0))


@pytest.mark.parametrize("phase", [(0, 0), (1, 1)])
def test_decimated_tensor_grid_shows_the_error_of_resolution(phase):
    y, z = mesh(graded(101, 0.5), graded(101, 0.5))
    gridding = make_gridding(y, z, everything(y))
    half = gridding.decimated(2, phase=phase)
    assert half.grid == gridding.grid
    truth = on(gridding.grid, swirl)
    fine = np.abs(gridding.apply(swirl(y, z)) - truth).max()
    coarse = np.abs(half.apply(swirl(y, z)) - truth).max()
    # Fourth order: 16 times the error, within a factor of two on either side at this resolution.
    assert 8 < coarse / fine < 32


def test_row_index():
    y, z = mesh(np.linspace(0, 1, 9), np.linspace(0, 1, 6))
    rows = np.repeat(np.arange(6), 9)
    np.testing.assert_array_equal(make_gridding(y, z, everything(y)).row_index, rows)
    # Traversed along z, back and forth: rows are lines of constant y.
    order = np.concatenate([np.arange(6)[:: 1 if k % 2 == 0 else -1] * 9 + k for k in range(9)])
    np.testing.assert_array_equal(
        make_gridding(y[order], z[order], everything(y)).row_index, np.repeat(np.arange(9), 6)
    )
    given_rows = np.arange(y.size) // 7
    np.testing.assert_array_equal(make_gridding(y, z, everything(y), row=given_rows).row_index, given_rows)


def test_points_mark_their_cells():
    y, z = mesh(graded(21), np.linspace(0, 1, 9))
    gridding = make_gridding(y, z, everything(y))
    marked = gridding.near(np.arange(y.size) == 4 * 21 + 10)
    rows, columns = np.nonzero(marked)
    assert set(rows) == {4}
    assert np.abs(gridding.grid.y[columns]).max() <= np.diff(graded(21))[10]


def test_outer_lines_without_a_usable_point_are_left_out():
    y, z = mesh(np.linspace(0, 1, 9), np.linspace(0, 1, 11))
    gridding = make_gridding(y, z, (z > 0.05) & (y < 0.99))
    assert gridding.raw_shape == (10, 8)
    assert gridding.grid.z0 == pytest.approx(0.1)
    assert gridding.filled_fraction == 0.0


@pytest.mark.parametrize(
    ("y", "z", "usable", "match"),
    [
        (np.arange(30.0), np.zeros(30), None, "one row, at z = 0 m"),
        (np.zeros(30), np.arange(30.0), None, "one row, at y = 0 m"),
        (np.arange(30.0), 2 * np.arange(30.0), None, "slanting line"),
        (np.ones(30), np.ones(30), None, "at one place"),
        (*mesh(np.arange(9.0), np.arange(3.0)), None, r"3 row\(s\) of constant z and 9 column"),
        (*mesh(np.arange(9.0), np.arange(9.0)), np.zeros(81, dtype=bool), "none of the 81 points"),
        (*mesh(np.arange(9.0), np.arange(9.0)), np.arange(81) < 9, "one row"),
        (*mesh(np.arange(9.0), np.arange(9.0)), np.arange(81) == 5, "one usable point"),
        (np.array([0.0, np.nan]), np.zeros(2), None, "not a finite number"),
    ],
)
def test_what_is_no_plane(y, z, usable, match):
    with pytest.raises(DataError, match=match) as caught:
        make_gridding(y, z, everything(y) if usable is None else usable)
    assert caught.value.remedy


def test_wrong_options():
    y, z = mesh(np.arange(9.0), np.arange(9.0))
    with pytest.raises(ValueError, match="degree"):
        make_gridding(y, z, everything(y), degree=4)
    with pytest.raises(ValueError, match="spacing"):
        make_gridding(y, z, everything(y), spacing=-1.0)
    with pytest.raises(ValueError, match="last axis"):
        make_gridding(y, z, everything(y)).apply(np.zeros((81, 3)))
