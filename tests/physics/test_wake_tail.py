"""Tail of a field beyond its level, against fields whose tails are Gaussians."""

import numpy as np
import pytest

from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields.wake_tail import gaussian_tail, hidden_tail, shape_share, untold, wake_tails

GRID = UniformGrid(-1.0, -1.0, 0.01, 0.01, 201, 201)


def radius():
    y, z = GRID.mesh()
    return np.hypot(y - 0.003, z + 0.004)


@pytest.mark.parametrize("peak", [3.0, 10.0, 300.0])
@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_a_gaussian_is_continued(peak, sign):
    sigma = 0.12
    field = sign * peak * np.exp(-(radius() ** 2) / (2 * sigma**2))
    tail = gaussian_tail(field, 1.0, GRID)
    beyond = np.abs(field) <= 1.0
    truth, found = field[beyond].sum(), tail[beyond].sum()
    # The contours are told within half a spacing each, a quarter of their distance at the highest peak.
    assert found == pytest.approx(truth, rel=0.35)
    assert (tail[~beyond] == 0).all()
    # Far out as well, to a factor: what a region leaves out that is grown by two standard deviations.
    far = radius() > sigma * (np.sqrt(2 * np.log(peak)) + 1.0)
    assert 0.4 < tail[far].sum() / field[far].sum() < 2.5


def test_each_patch_has_its_own_tail():
    y, z = GRID.mesh()
    narrow = 100 * np.exp(-((y + 0.5) ** 2 + z**2) / (2 * 0.05**2))
    wide = -4 * np.exp(-((y - 0.4) ** 2 + z**2) / (2 * 0.2**2))
    tail = gaussian_tail(narrow + wide, 1.0, GRID)
    left, right = tail[y < -0.45], tail[y > 0.2]
    assert (left >= 0).all() and (right <= 0).all()
    truth = (wide * (np.abs(wide) <= 1))[y > 0.2].sum()
    assert right.sum() == pytest.approx(truth, rel=0.35)
    assert left.sum() < 0.1 * abs(right.sum())


def test_nothing_above_the_level_has_no_tail():
    assert not gaussian_tail(np.full(GRID.shape, 0.5), 1.0, GRID).any()
    with pytest.raises(ValueError, match="positive"):
        gaussian_tail(np.ones(GRID.shape), 0.0, GRID)


def test_the_region_has_none():
    field = 10 * np.exp(-(radius() ** 2) / (2 * 0.1**2))
    mask = radius() < 0.3
    loss, vorticity = wake_tails(field, 2 * field, GRID, levels=(1.0, 0.0), mask=mask)
    assert not loss[mask].any() and loss[~mask].any()
    assert not vorticity.any()


def test_a_field_near_its_level_tells_no_tail():
    field = np.exp(-(radius() ** 2) / (2 * 0.1**2))
    # A peak of 1, 3.5 and 6 times the level: between 2 and 5 the tail is told in part.
    found = [untold(-field, 1 / times) for times in (1.0, 3.5, 6.0)]
    # The peak lies half a spacing off the points, a share of (0.005/0.1)²/2 at most.
    assert found == pytest.approx([1.0, 0.5, 0.0], abs=0.01)
    assert untold(field, 0.0) == 0.0


def test_what_hides_beside_a_region_has_the_level_and_the_width():
    mask = radius() < 0.3
    hidden = hidden_tail(2.0, GRID, mask=mask, width=0.05)
    assert not hidden[mask].any()
    # ∫ ℓ exp(−d²/2w²) 2π(R + d) dd = 2πℓ (R w √(π/2) + w²); the border is known within a spacing, a tenth of it.
    truth = 2 * np.pi * 2.0 * (0.3 * 0.05 * np.sqrt(np.pi / 2) + 0.05**2)
    assert GRID.integrate(hidden) == pytest.approx(truth, rel=0.12)
    for one in (np.ones_like(mask), np.zeros_like(mask)):
        assert not hidden_tail(2.0, GRID, mask=one, width=0.05).any()


def test_a_shape_is_found_in_noise():
    rng = np.random.default_rng(2)
    shape = np.exp(-np.linspace(0, 5, 2000))
    found = np.array([shape_share(3.0 + 2 * shape + 0.5 * rng.standard_normal(2000), shape) for _ in range(200)])
    # 200 trials give mean and spread within 1/√200 and 1/√400 of the spread; three times that.
    assert found[:, 0].mean() == pytest.approx(2.0, abs=0.22 * found[:, 1].mean())
    assert found[:, 0].std() == pytest.approx(found[:, 1].mean(), rel=0.16)
