"""Scattered points many times denser along one direction here and even elsewhere, as those of a mesh."""

import numpy as np
import pytest

from wakeledger.intake.gridding import make_gridding

#: Width of the sheet and of the vortex, m.
SHEET, CORE = 0.05, 0.15


def places():
    """Columns a tenth of the span apart inboard and ten times closer at the tip, staggered, across even outer flow."""
    y = np.concatenate([np.arange(0.0, 2.4, 0.1), 2.4 + 0.03 * np.arange(37)])
    inner = np.linspace(-0.2, 0.2, 41)
    outer = np.cumsum(0.012 * 1.25 ** np.arange(10))
    z = np.concatenate([-0.2 - outer[::-1], inner, 0.2 + outer])
    step = np.gradient(z)
    points = [np.column_stack([np.full(z.size, each), z + (k % 2) * step / 2]) for k, each in enumerate(y)]
    return np.concatenate(points).T


def sheet(y, z):
    return np.exp(-(((z - 0.01 * y) / SHEET) ** 2)) / (1 + np.exp((y - 2.8) / 0.15))


def vortex(y, z):
    return (y - 3) * np.exp(-((y - 3) ** 2 + (z - 0.02) ** 2) / CORE**2)


@pytest.mark.parametrize("field", [sheet, vortex])
def test_a_sheet_between_far_columns_is_kept(field):
    y, z = places()
    gridding = make_gridding(y, z, np.ones(y.size, dtype=bool), spacing=0.02, mesh=True)
    assert gridding.kind == "scattered"
    zz, yy = np.meshgrid(gridding.grid.z, gridding.grid.y, indexing="ij")
    inner = (np.abs(zz) < 0.35) & (yy < 3.4)
    assert not gridding.filled[inner].any()
    truth = field(yy, zz)
    found = gridding.apply(field(y, z))
    # Interpolants that count true distances err by 3 % here: what lies between two columns is far from both.
    assert np.abs(found - truth)[inner].max() < 0.01 * np.abs(truth).max()
    area = gridding.grid.dy * gridding.grid.dz
    assert np.sum(found[inner]) * area == pytest.approx(np.sum(truth[inner]) * area, rel=1e-3, abs=1e-5)


def test_no_value_is_invented():
    y, z = places()
    gridding = make_gridding(y, z, np.ones(y.size, dtype=bool), spacing=0.02, mesh=True)
    found = gridding.apply(np.where(z > 0, 1.0, 0.0))
    # A step overshoots by a tenth, as any interpolation beyond the first degree; not by its own height.
    assert found.min() > -0.35 and found.max() < 1.35


def test_even_points_are_not_taken_for_stretched():
    from scipy.spatial import Delaunay

    from wakeledger.intake.gridding.scattered import _edges
    from wakeledger.intake.gridding.stretching import stretch_levels

    random = np.random.default_rng(5).uniform(0, 1, (4000, 2))
    angle, radius = np.meshgrid(np.arange(0, 2 * np.pi, 0.1), np.linspace(0.05, 1, 20))
    polar = np.column_stack([(radius * np.cos(angle)).ravel(), (radius * np.sin(angle)).ravel()])
    for points in (random, polar):
        assert not stretch_levels(points, _edges(Delaunay(points))).any()
    # Dense rows inboard, even spacing outside: one place in three is stretched.
    inboard = np.meshgrid(np.arange(0, 2, 0.1), np.arange(-0.2, 0.2, 0.01))
    outside = np.meshgrid(np.arange(0, 2, 0.05), np.arange(0.25, 2, 0.05))
    both = np.column_stack([np.concatenate([a.ravel(), b.ravel()]) for a, b in zip(inboard, outside, strict=True)])
    level = stretch_levels(both, _edges(Delaunay(both)))
    dense = np.abs(both[:, 1]) < 0.15
    assert np.mean(level[dense] <= -2) > 0.9 and np.mean(np.abs(level[both[:, 1] > 0.4]) <= 1) > 0.95
