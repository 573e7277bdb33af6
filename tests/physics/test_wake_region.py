"""The wake region: found from noisy fields, two-sided inside, the same for mirrored and rescaled data."""

import numpy as np
import pytest

from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields.differences import axial_vorticity
from wakeledger.physics.fields.lifting_line import near_field
from wakeledger.physics.fields.outer_flow import outer_flow
from wakeledger.physics.fields.poisson import stream_function
from wakeledger.physics.fields.wake_region import region_of, wake_region
from wakeledger.stream.reference import Reference
from wakeledger.synthetic.aircraft import wing_wake

STREAM = Reference(speed=42.0, density=1.185, static_pressure=100.6e3)
GRID = UniformGrid(-0.81, -0.36, 0.012, 0.012, 136, 61)
WAKE = wing_wake(STREAM)
STATE = WAKE.state_on(GRID)
LOSS = STREAM.total_pressure - STATE.total_pressure


def noisy(seed, velocity=0.2, pressure=1.5):
    rng = np.random.default_rng(seed)
    shape = GRID.shape
    v, w = STATE.v + velocity * rng.normal(size=shape), STATE.w + velocity * rng.normal(size=shape)
    return LOSS + pressure * rng.normal(size=shape), axial_vorticity(v, w, GRID)


def test_noise_free_region_holds_the_wake():
    region = wake_region(LOSS, axial_vorticity(STATE.v, STATE.w, GRID), GRID)
    xi = WAKE.elements.vorticity_on(GRID)
    # The level's floor is 1e-3 of the peak and the region is grown by four cells: what is left outside is below 1e-4.
    assert np.abs(xi[~region.mask]).sum() < 1e-4 * np.abs(xi).sum()
    assert LOSS[~region.mask].sum() < 1e-3 * LOSS.sum()
    assert region.mask.mean() < 0.45


@pytest.mark.parametrize("seed", range(5))
def test_region_in_noise_keeps_the_wake_and_little_else(seed):
    region = wake_region(*noisy(seed), GRID)
    xi = WAKE.elements.vorticity_on(GRID)
    assert np.abs(xi[~region.mask]).sum() < 0.03 * np.abs(xi).sum()
    assert LOSS[~region.mask].sum() < 0.01 * LOSS.sum()
    assert region.mask.mean() < 0.45


def test_noise_alone_has_hardly_a_region():
    covered = []
    for seed in range(20):
        rng = np.random.default_rng(seed)
        v, w = rng.normal(size=(2, *GRID.shape))
        covered.append(wake_region(rng.normal(size=GRID.shape), axial_vorticity(v, w, GRID), GRID).mask.mean())
    # A seed is six standard deviations of the smoothed noise: a few false places in 20 planes of 8000 points at most.
    assert np.mean(covered) < 0.01


def test_the_region_does_not_rectify_noise():
    """Formulas C4: keeping only positive losses adds σA/√(2π); a two-sided region must not."""
    rng = np.random.default_rng(7)
    sigma = 1.5
    errors, one_sided = [], []
    for _ in range(40):
        loss = LOSS + sigma * rng.normal(size=GRID.shape)
        region = wake_region(loss, axial_vorticity(STATE.v, STATE.w, GRID), GRID)
        errors.append(GRID.integrate(np.where(region.mask, loss, 0)) - GRID.integrate(LOSS))
        one_sided.append(GRID.integrate(np.maximum(loss, 0)) - GRID.integrate(LOSS))
    rectified = sigma * GRID.area / np.sqrt(2 * np.pi)
    assert np.mean(one_sided) == pytest.approx(rectified, rel=0.3)
    # 3 standard errors of the mean over 40 planes.
    assert abs(np.mean(errors)) < 3 * np.std(errors) / np.sqrt(40) + 1e-3 * GRID.integrate(LOSS)


def test_mirrored_fields_have_the_mirrored_region():
    loss, xi = noisy(3)
    grid = UniformGrid(-0.81, -0.36, 0.012, 0.012, 136, 61)
    region = wake_region(loss, xi, grid)
    mirrored = wake_region(loss[:, ::-1], -xi[:, ::-1], grid)
    assert np.array_equal(mirrored.mask, region.mask[:, ::-1])


def test_units_do_not_matter():
    loss, xi = noisy(3)
    region = wake_region(loss, xi, GRID)
    scaled = wake_region(1e4 * loss, 1e-3 * xi, GRID)
    assert np.array_equal(region.mask, scaled.mask)
    assert scaled.loss_level == pytest.approx(1e4 * region.loss_level)


def test_a_zero_error_of_the_loss_does_not_move_the_region():
    loss, xi = noisy(3)
    assert np.array_equal(wake_region(loss, xi, GRID).mask, wake_region(loss + 7.0, xi, GRID).mask)


def test_include_exclude_and_growth():
    loss, xi = noisy(3)
    box = np.array([[0.5, 0.2], [0.7, 0.3]])
    inside = region_of([box], GRID)
    assert inside.sum() == pytest.approx(0.2 * 0.1 / GRID.cell_area, rel=0.2)
    plain = wake_region(loss, xi, GRID).mask
    assert wake_region(loss, xi, GRID, include=inside).mask[inside].all()
    assert not wake_region(loss, xi, GRID, exclude=inside).mask[inside].any()
    assert wake_region(loss, xi, GRID, grow=0.1).mask.sum() > plain.sum()
    with pytest.raises(ValueError, match="must not be negative"):
        wake_region(loss, xi, GRID, grow=-0.1)


def test_polygons_are_filled_by_the_even_odd_rule():
    triangle = np.array([[-0.5, -0.3], [0.5, -0.3], [0.0, 0.3]])
    inside = region_of([triangle], GRID)
    assert inside.sum() * GRID.cell_area == pytest.approx(0.3, rel=0.05)
    assert inside[GRID.nz // 2, GRID.ny // 2]
    with pytest.raises(ValueError, match="two corners"):
        region_of([triangle[:1]], GRID)


def test_outer_flow_finds_the_zeros_put_into_the_data():
    rng = np.random.default_rng(11)
    shape = GRID.shape
    loss = LOSS - 2.0 + 1.5 * rng.normal(size=shape)
    v, w = STATE.v + 0.12 + 0.2 * rng.normal(size=shape), STATE.w - 0.07 + 0.2 * rng.normal(size=shape)
    xi = axial_vorticity(v, w, GRID)
    region = wake_region(loss, xi, GRID)
    inside = np.where(region.mask, xi, 0.0)
    still = (np.zeros(shape), np.zeros(shape))
    found = outer_flow(loss, v, w, stream_function(inside, GRID), GRID, mask=region.mask, near_field=still)
    # Noise over about 5000 outer points: 0.02 Pa and 0.003 m/s; the wake's own crossflow adds a little to the latter.
    assert found.loss_zero == pytest.approx(-2.0, abs=4 * 1.5 / np.sqrt(4000) + 0.02)
    assert found.v_offset == pytest.approx(0.12, abs=0.03)
    assert found.w_offset == pytest.approx(-0.07, abs=0.03)
    assert 0 < found.loss_zero_uncertainty < 0.2
    assert 0 < found.offset_uncertainty < 0.05


def test_outer_flow_tells_upwash_of_the_bound_vortex_from_an_offset():
    near = wing_wake(STREAM, x=0.3, bound_distance=0.42)
    state = near.state_on(GRID)
    xi = axial_vorticity(state.v, state.w, GRID)
    loss = STREAM.total_pressure - state.total_pressure
    mask = wake_region(loss, xi, GRID).mask
    inside = np.where(mask, xi, 0.0)
    psi = stream_function(inside, GRID)
    predicted = near_field(inside, GRID, distance=0.42)
    nothing = (np.zeros(GRID.shape), np.zeros(GRID.shape))
    with_it = outer_flow(loss, state.v, state.w, psi, GRID, mask=mask, near_field=predicted)
    without = outer_flow(loss, state.v, state.w, psi, GRID, mask=mask, near_field=nothing)
    # The bound vortex's downwash would be taken for a flow-angle offset; the prediction removes nearly all of it.
    assert abs(with_it.w_offset) < 0.15 * abs(without.w_offset)


def test_a_wake_that_fills_the_window_has_no_outer_flow():
    mask = np.ones(GRID.shape, bool)
    still = (np.zeros(GRID.shape), np.zeros(GRID.shape))
    found = outer_flow(LOSS, STATE.v, STATE.w, np.zeros(GRID.shape), GRID, mask=mask, near_field=still)
    assert found.share == 0
    assert found.loss_zero == 0
    assert np.isnan(found.loss_zero_uncertainty)
