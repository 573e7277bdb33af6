"""The zero of the loss under wander of known correlation: coverage of the integrated loss."""

import numpy as np
import pytest

from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields.loss_level import beyond, loss_level
from wakeledger.physics.fields.outer_flow import outer_flow

GRID = UniformGrid(-1.0, -0.75, 0.025, 0.025, 81, 61)


def wander(rng, length, draws):
    """Fields of unit variance correlated as exp(-(d/L)²/2), by square roots of one matrix per axis."""
    roots = []
    for axis in (GRID.z, GRID.y):
        values, vectors = np.linalg.eigh(np.exp(-0.5 * ((axis[:, None] - axis) / length) ** 2))
        roots.append(vectors * np.sqrt(np.maximum(values, 0.0)))
    return roots[0] @ rng.normal(size=(draws, GRID.nz, GRID.ny)) @ roots[1].T


def wake_mask(kind):
    y, z = GRID.mesh()
    if kind == "strip":
        return (np.abs(z) < 0.12) & (np.abs(y) < 0.6)
    return (np.hypot(y - 0.5, z) < 0.2) | ((np.abs(z) < 0.08) & (y > -0.9) & (y < 0.5))


@pytest.mark.parametrize("kind", ["strip", "one-sided"])
@pytest.mark.parametrize("length", [0.0, 0.05, 0.15, 0.4, 1.0])
def test_integrated_loss_is_covered(length, kind):
    """∬_W of a wander that is no loss at all must lie within 2 u of zero in 95 % of cases."""
    rng = np.random.default_rng([int(100 * length), len(kind)])
    draws = 500
    fields = 0.07 * (wander(rng, length, draws) if length else rng.normal(size=(draws, GRID.nz, GRID.ny)))
    mask = wake_mask(kind)
    found = loss_level(fields + 3.0, GRID, mask=mask)
    assert found.zero == pytest.approx((fields + 3.0)[:, ~mask].mean(axis=1), rel=1e-12)
    error = GRID.cell_area * np.where(mask, fields + 3.0 - found.zero[:, None, None], 0.0).sum(axis=(1, 2))
    ratio = error / found.integral_uncertainty
    # 500 draws: 95 % is known to 1 %. Where patches are as large as the window the length is not to be had from one
    # plane, and all that are likely share the answer.
    assert 0.92 <= np.mean(np.abs(ratio) <= 2) <= 0.995
    # Not by being wide: the typical uncertainty is that of the error.
    assert 0.75 < np.sqrt(np.mean(found.integral_uncertainty**2)) / error.std() < 1.6
    area = np.count_nonzero(mask) * GRID.cell_area
    assert (found.zero_uncertainty <= found.integral_uncertainty / area * (1 + 1e-12)).all()
    if length >= 0.15:
        assert found.zero_uncertainty == pytest.approx(found.integral_uncertainty / area, rel=0.02)


def test_points_that_err_together_are_worth_few():
    rng = np.random.default_rng(5)
    fields = 0.07 * wander(rng, 0.4, 50)
    mask = wake_mask("strip")
    found = loss_level(fields, GRID, mask=mask)
    naive = fields[:, ~mask].std(axis=1) / np.sqrt(np.count_nonzero(~mask))
    assert np.median(found.zero_uncertainty / naive) > 10
    assert 2 < np.median(found.patches) < 12
    assert np.median(found.correlation_length) == pytest.approx(0.4, rel=0.35)
    assert np.median(found.wander) == pytest.approx(0.07, rel=0.3)
    # Blocks of a sixteenth of the window count as independent there: too small by half under such patches.
    still = np.zeros(GRID.shape)
    blocks = outer_flow(fields[0], still, still, still, GRID, mask=mask, near_field=(still, still))
    assert blocks.loss_zero_uncertainty < found.zero_uncertainty[0]


def test_white_noise_is_as_certain_as_its_points():
    rng = np.random.default_rng(6)
    fields = 0.07 * rng.normal(size=(50, GRID.nz, GRID.ny))
    mask = wake_mask("strip")
    found = loss_level(fields, GRID, mask=mask)
    outside, inside = np.count_nonzero(~mask), np.count_nonzero(mask)
    # The noise of the region's points is not the level's.
    assert np.median(found.zero_uncertainty) == pytest.approx(0.07 / np.sqrt(outside), rel=1.5)
    expected = 0.07 * GRID.cell_area * np.sqrt(inside + inside**2 / outside)
    assert np.median(found.integral_uncertainty) == pytest.approx(expected, rel=0.25)


def test_the_uncertainty_acts_on_the_area():
    rng = np.random.default_rng(7)
    field = 0.07 * wander(rng, 0.15, 1)[0]
    y, z = GRID.mesh()
    small, large = ((np.abs(y) < a) & (np.abs(z) < a / 2) for a in (0.3, 0.8))
    narrow, wide = (loss_level(field, GRID, mask=mask).integral_uncertainty for mask in (small, large))
    assert wide > 3 * narrow


def test_too_little_outer_flow_is_said():
    mask = np.ones(GRID.shape, bool)
    mask[:, :3] = False
    found = loss_level(np.ones(GRID.shape), GRID, mask=mask)
    assert found.zero == 0.0 and np.isnan(found.integral_uncertainty) and "10 % of the window" in found.reason


def test_a_flat_outer_flow_has_a_level_without_doubt():
    found = loss_level(np.full(GRID.shape, 2.0), GRID, mask=wake_mask("strip"))
    assert found.zero == pytest.approx(2.0, rel=1e-14)
    assert found.integral_uncertainty < 1e-12


def test_a_broad_loss_beside_the_wake_does_not_move_the_level():
    """The level is taken beyond it: the wake keeps its loss, and the broad loss shows as its own."""
    rng = np.random.default_rng(8)
    _, z = GRID.mesh()
    broad = 0.5 * np.exp(-((z / 0.3) ** 2))
    mask = np.abs(z) < 0.12
    still = 0.02 * wander(rng, 0.15, 100)
    everywhere = loss_level(broad + still, GRID, mask=mask)
    far = loss_level(broad + still, GRID, mask=mask, outer=beyond(mask, GRID, 0.52))
    assert everywhere.zero.mean() > 0.05
    inside = GRID.cell_area * np.where(mask, still - far.zero[:, None, None], 0.0).sum(axis=(1, 2))
    assert np.mean(np.abs(inside) <= 2 * far.integral_uncertainty) >= 0.9
    with pytest.raises(ValueError, match="outside the region"):
        loss_level(broad, GRID, mask=mask, outer=np.ones(GRID.shape, bool))
    assert beyond(np.zeros(GRID.shape, bool), GRID, 1.0).all()
    assert beyond(mask, GRID, 0.1)[:, 0].sum() == np.count_nonzero(np.abs(GRID.z) > 0.101 + 0.1)


def test_noise_that_is_a_source_of_its_own_is_not_in_the_zero_again():
    rng = np.random.default_rng(8)
    mask = np.zeros(GRID.shape, bool)
    mask[GRID.nz // 3 : GRID.nz // 2, GRID.ny // 3 : GRID.ny // 2] = True
    plain = rng.normal(0.0, 2.0, (40, *GRID.shape))
    unknown, known = (loss_level(plain, GRID, mask=mask, noise_known=each).zero_uncertainty for each in (False, True))
    assert (unknown > 0).all()
    # One in twenty shows wander by chance.
    assert np.count_nonzero(known) <= 6
    # Where there is wander it stays, noise beside it or not: 1 Pa over a fifth of the window.
    drifting = plain + wander(rng, 0.3, 40)
    unknown, known = (
        loss_level(drifting, GRID, mask=mask, noise_known=each).zero_uncertainty for each in (False, True)
    )
    assert (known > 0.9 * unknown).all()
