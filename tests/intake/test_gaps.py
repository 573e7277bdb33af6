"""Conditional simulation of gaps: what is drawn must cover what was there, over many places of the hole."""

import numpy as np
import pytest

from wakeledger.intake.gridding.conditional import MOST_CELLS, drawn_deviations, find_holes
from wakeledger.intake.gridding.fill import make_gap_fill

Y, Z = np.arange(-1.0, 1.0, 0.025), np.arange(-0.6, 0.6, 0.025)
YY, ZZ = np.meshgrid(Y, Z)
CORE = 0.05


def vortex(y, z):
    r2 = (YY - y) ** 2 + (ZZ - z) ** 2 + 1e-12
    swirl = -np.expm1(-r2 / CORE**2) / (2 * np.pi * r2)
    return -swirl * (ZZ - z), swirl * (YY - y)


V, W = (a - b for a, b in zip(vortex(0.5, 0.02), vortex(-0.5, 0.02), strict=True))
LOSS = 100 * np.exp(-((ZZ / 0.04) ** 2)) * (np.abs(YY) < 0.6)
FIELDS = np.stack([V, W, LOSS])
SIZES = np.array([0.02, 0.02, 1.5])


def filled(fields, missing):
    flat = fields.reshape(len(fields), -1).copy()
    make_gap_fill(~missing, Y, Z).into(flat)
    return flat.reshape(fields.shape)


def hole_at(iz, iy, height, width):
    missing = np.zeros(YY.shape, dtype=bool)
    missing[iz : iz + height, iy : iy + width] = True
    return missing


@pytest.mark.parametrize("noisy", [False, True])
def test_draws_cover_the_truth_over_a_core_and_over_the_wake(noisy):
    rng = np.random.default_rng(5)
    inside, ratio = [], []
    for trial in range(40 if noisy else 80):
        height, width = rng.integers(1, 4), rng.integers(1, 5)
        centre = (0.5 if trial % 2 else rng.uniform(-0.4, 0.4)) + 0.05 * rng.uniform(-1, 1)
        iz, iy = int(np.argmin(np.abs(Z - rng.uniform(-0.06, 0.08)))), int(np.argmin(np.abs(Y - centre)))
        missing = hole_at(iz - height // 2, iy - width // 2, height, width)
        noise = SIZES[:, None, None] * rng.standard_normal((9, *FIELDS.shape)) if noisy else None
        data = filled(FIELDS + (noise[0] if noisy else 0.0), missing)
        draws = np.stack([filled(one, missing) for one in noise[1:]]) if noisy else None
        holes = find_holes(data, missing, Y, Z, noise=draws)
        assert len(holes) == 1
        assert holes[0].known
        # The fill's own error: noise passes through it, too, but is counted elsewhere.
        error = (filled(FIELDS, missing) - FIELDS).sum(axis=(1, 2))
        drawn = np.stack([drawn_deviations(holes, rng, 3, YY.shape).sum(axis=(1, 2)) for _ in range(60)])
        u = drawn.std(axis=0)
        assert np.all(u > 0)
        assert not drawn_deviations(holes, rng, 3, YY.shape)[:, ~missing].any()
        inside.append(np.abs(error) <= 2 * u)
        ratio.append(np.stack([np.square(error), np.square(u)]))
    # 120 or 240 intervals of two standard uncertainties; a few places are rougher than all around them.
    assert np.mean(inside) >= 0.93
    mean = np.mean(ratio, axis=0)
    # Not wide for safety: with exact data the draws are no more than four times the errors they stand for.
    if not noisy:
        assert np.all(np.sqrt(mean[1] / mean[0]) < 4)


def test_gaps_that_hang_together_are_drawn_together():
    missing = hole_at(10, 10, 2, 2) | hole_at(10, 13, 1, 1) | hole_at(30, 40, 1, 3)
    holes = find_holes(filled(FIELDS, missing), missing, Y, Z)
    assert sorted(hole.cells.size for hole in holes) == [3, 5]
    assert sum(hole.cells.size for hole in holes) == missing.sum()


def test_what_the_data_do_not_tell_stays_unknown():
    large = hole_at(5, 5, 30, 30)
    assert large.sum() > MOST_CELLS
    assert not find_holes(filled(FIELDS, large), large, Y, Z)[0].known
    # A cross from edge to edge fits nowhere else.
    across = hole_at(0, 40, Z.size, 3) | hole_at(20, 0, 3, Y.size)
    assert across.sum() < MOST_CELLS
    assert not any(hole.known for hole in find_holes(filled(FIELDS, across), across, Y, Z))


def test_the_fill_of_a_field_it_reproduces_leaves_no_doubt():
    # Cubic polynomials are continued exactly on a uniform grid.
    cubic = np.stack([YY**3 - 2 * YY * ZZ**2 + ZZ, 1 + 0 * YY])
    missing = hole_at(20, 30, 2, 3)
    holes = find_holes(filled(cubic, missing), missing, Y, Z)
    assert np.abs(holes[0].covariance).max() < 1e-18
