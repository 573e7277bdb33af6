"""A half gridded as the whole its reflection plane makes of it: an analytic field of the right symmetry comes back."""

import numpy as np
import pytest

from wakeledger.core.errors import DataError
from wakeledger.core.flags import Flag
from wakeledger.intake.gridding import make_gridding
from wakeledger.intake.gridding.mirror import make_mirrored


def even(y, z):
    return np.cos(3 * y) * np.exp(-z)


def odd(y, z):
    return np.sin(3 * y) * np.exp(-z)


def half(first, count=31, step=0.02, rows=25):
    y, z = np.meshgrid(first + step * np.arange(count), 0.02 * np.arange(rows) - 0.2)
    return y.ravel(), z.ravel()


def gridded(y, z, axis="y", usable=None):
    usable = np.ones(y.size, bool) if usable is None else usable
    return make_mirrored(lambda a, b, u, r: make_gridding(a, b, u, row=r), y, z, usable, None, axis=axis)


@pytest.mark.parametrize(("first", "columns"), [(0.0, 61), (0.01, 62), (0.02, 63), (0.05, 66)])
def test_a_half_on_an_even_grid_gives_the_whole_on_it(first, columns):
    y, z = half(first)
    gridding = gridded(y, z)
    assert gridding.kind == "uniform"
    assert gridding.grid.ny == columns
    assert gridding.n == y.size
    yy, zz = gridding.grid.mesh()
    # Outside the gap the places are the points themselves. In it the fill errs by g⁴/384 of the fourth derivative over
    # its width g = 0.1 m, 2e-5, and by more at the window's edge, beyond which nothing bends: 1e-3 is measured.
    gap = np.abs(yy) < first - 1e-9
    for field, parity in ((even, False), (odd, True)):
        found = gridding.apply(field(y, z), odd=parity)
        np.testing.assert_allclose(found[~gap], field(yy, zz)[~gap], rtol=0, atol=1e-12)
        np.testing.assert_allclose(found, field(yy, zz), rtol=0, atol=1.5e-3)
        middle = np.abs(zz - 0.04) < 0.12
        np.testing.assert_allclose(found[middle], field(yy, zz)[middle], rtol=0, atol=1e-4)
    wrong = gridding.apply(odd(y, z))
    assert np.abs(wrong - odd(yy, zz)).max() > 0.5
    assert gridding.filled.any() == bool(gap.any())


def test_the_gap_is_flagged_as_filled_and_stays_in_the_window():
    y, z = half(0.1)
    gridding = gridded(y, z)
    yy, _ = gridding.grid.mesh()
    inside = np.abs(yy) < 0.1 - 1e-9
    assert (gridding.filled == inside).all()
    assert ((gridding.flag & Flag.MISSING) != 0)[inside].all()
    assert not (gridding.flag & Flag.FAR_FROM_DATA).any()


def test_points_left_out_next_to_the_plane_are_a_gap():
    y, z = half(0.0)
    gridding = gridded(y, z, usable=y > 0.05)
    yy, zz = gridding.grid.mesh()
    assert (gridding.filled == (np.abs(yy) < 0.059)).all()
    # A gap 0.12 m wide: 4e-5 of the field, more along the window's edge.
    found = gridding.apply(even(y, z))
    np.testing.assert_allclose(found, even(yy, zz), rtol=0, atol=1.5e-3)
    middle = np.abs(zz - 0.04) < 0.12
    np.testing.assert_allclose(found[middle], even(yy, zz)[middle], rtol=0, atol=2e-4)


def test_uneven_lines_and_scattered_points():
    rng = np.random.default_rng(4)
    lines = np.cumsum(rng.uniform(0.015, 0.025, 30)) - 0.01
    y, z = (part.ravel() for part in np.meshgrid(lines, 0.02 * np.arange(25) - 0.2))
    tensor = gridded(y, z)
    assert tensor.kind == "tensor"
    yy, zz = tensor.grid.mesh()
    # Cubic splines over 20 mm: 5/384 h⁴ f'''' = 2e-7 inside, more over the gap.
    np.testing.assert_allclose(tensor.apply(odd(y, z), odd=True), odd(yy, zz), rtol=0, atol=1e-5)
    y, z = rng.uniform(0.0, 0.6, 1500), rng.uniform(-0.2, 0.3, 1500)
    scattered = gridded(y, z)
    assert scattered.kind == "scattered"
    yy, zz = scattered.grid.mesh()
    inside = (np.abs(yy) < 0.55) & (zz > -0.17) & (zz < 0.27)
    np.testing.assert_allclose(scattered.apply(even(y, z))[inside], even(yy, zz)[inside], rtol=0, atol=1e-3)


@pytest.mark.parametrize("first", [0.0, 0.01])
def test_operators_hold_both_halves(first):
    y, z = half(first)
    gridding = gridded(y, z)
    rng = np.random.default_rng(1)
    values = rng.normal(size=y.size)
    for parity in (False, True):
        along_z, along_y = gridding.operators(odd=parity)
        field = gridding.apply(values, odd=parity)
        raw = gridding.apply(values)
        np.testing.assert_allclose(along_z @ raw @ along_y.T, field, rtol=0, atol=1e-13)
        # A point and its twin carry one error: the variance of their sum is four times the noise's, or zero.
        total = (along_y @ along_y.T)[5, ::-1][5]
        assert total == pytest.approx(-1.0 if parity else 1.0)


def test_a_ground_plane_mirrors_upwards():
    y, z = half(0.0)
    gridding = gridded(z, y, axis="z")
    yy, zz = gridding.grid.mesh()
    assert gridding.is_odd("w")
    assert not gridding.is_odd("v")
    np.testing.assert_allclose(gridding.apply(odd(y, z), odd=True), odd(zz, yy), rtol=0, atol=1e-12)


def test_points_across_the_plane_are_refused():
    y, z = half(-0.1)
    with pytest.raises(DataError, match=r"lie across the reflection plane y = 0, the farthest at y = -0\.1 m"):
        gridded(y, z)


def test_every_second_line_still_belongs_to_the_same_points():
    y, z = half(0.01)
    coarse = gridded(y, z).decimated(2, phase=(0, 1))
    assert coarse.n == y.size
    yy, zz = coarse.grid.mesh()
    np.testing.assert_allclose(coarse.apply(odd(y, z), odd=True), odd(yy, zz), rtol=0, atol=1e-12)
