"""Noise of a field found from the field itself."""

import math

import numpy as np
import pytest

from wakeledger.confidence.correlation import correlated_field
from wakeledger.confidence.noise import estimate_noise, line_noise

Z, Y = np.mgrid[0:60, 0:100]
SIGMA = 0.3
# A broad wake, a vortex-like core eight cells wide and a gradient, a hundred times the noise.
SMOOTH = 30 * np.exp(-((Z - 30) ** 2 + (Y - 50) ** 2) / (2 * 4**2)) + 5 * np.sin(Y / 8) + 0.3 * Z
CORE = (Z - 30) ** 2 + (Y - 50) ** 2 < 12**2


def noise(seed, sigma=SIGMA):
    return sigma * np.random.default_rng(seed).standard_normal(Z.shape)


def estimates(make, count=20, **options):
    return [estimate_noise(make(seed), **options) for seed in range(count)]


@pytest.mark.parametrize("signal", [0.0, SMOOTH])
@pytest.mark.parametrize("mask", [None, CORE])
def test_white_noise_is_found_under_a_smooth_signal(signal, mask):
    found = estimates(lambda seed: signal + noise(seed), mask=mask)
    values = np.array([one.standard_deviation for one in found])
    # The mean of 20 estimates is good to 1.3 %/√20 = 0.3 %; the aim is a bias below 5 %.
    assert values.mean() == pytest.approx(SIGMA, rel=0.015)
    expected = 1 / math.sqrt(2 * found[0].effective_size)
    assert expected < 0.02
    # A standard deviation from 20 values is good to 16 %; twice that and the approximation of the size.
    assert values.std() / SIGMA == pytest.approx(expected, rel=0.5)
    assert all(one.is_white and one.reason is None for one in found)


def test_wild_values_hardly_count():
    def spoiled(seed):
        field = SMOOTH + noise(seed)
        field.ravel()[np.random.default_rng(seed + 1000).integers(0, field.size, 30)] += 100
        return field

    values = [one.standard_deviation for one in estimates(spoiled)]
    # Each wild value spoils seven differences: 3.5 % of them; the aim is a bias below 5 %.
    assert np.mean(values) == pytest.approx(SIGMA, rel=0.03)


@pytest.mark.parametrize("length", [0.7, 1.0, 1.5])
def test_correlated_noise_is_recognised_and_corrected(length):
    latents, expand = correlated_field(np.stack([Z.ravel(), Y.ravel()], axis=1).astype(float), length)

    def field(seed):
        return SIGMA * expand(np.random.default_rng(seed).standard_normal((1, latents)))[0].reshape(Z.shape)

    found = estimates(field)
    assert not any(one.is_white for one in found)
    # The length follows from the shape of the spectrum; scatter of one estimate 2 to 4 %.
    np.testing.assert_allclose(np.mean([one.correlation_length_cells for one in found], axis=0), length, rtol=0.02)
    assert np.mean([one.standard_deviation for one in found]) == pytest.approx(SIGMA, rel=0.03)


def test_noise_smoother_than_the_grid_is_a_lower_bound_and_says_so():
    latents, expand = correlated_field(np.stack([Z.ravel(), Y.ravel()], axis=1).astype(float), 4.0)
    found = estimate_noise(expand(np.random.default_rng(1).standard_normal((1, latents)))[0].reshape(Z.shape))
    assert not found.is_white
    assert "lower bound" in found.reason
    assert 0 < found.standard_deviation < 1


def test_errors_of_whole_rows_show_as_a_difference_between_the_axes():
    rows = np.random.default_rng(4).standard_normal((60, 1))
    found = estimate_noise(noise(1) + rows)
    along_z, along_y = found.axis_standard_deviations
    assert along_y == pytest.approx(SIGMA, rel=0.06)
    assert along_z == pytest.approx(math.hypot(SIGMA, 1.0), rel=0.5)
    assert found.standard_deviation == pytest.approx(SIGMA, rel=0.06)


def test_missing_points_and_masked_points_are_not_used():
    field = SMOOTH + noise(1)
    spoiled = field.copy()
    spoiled[CORE] = np.nan
    assert estimate_noise(spoiled) == estimate_noise(field, mask=CORE)
    wild = field.copy()
    wild[CORE] = 1e6
    assert estimate_noise(wild, mask=CORE) == estimate_noise(field, mask=CORE)


def test_scale_and_offset():
    one, other = estimate_noise(SMOOTH + noise(2)), estimate_noise(7.0 - 1000 * (SMOOTH + noise(2)))
    assert other.standard_deviation == pytest.approx(1000 * one.standard_deviation, rel=1e-6)
    assert estimate_noise((SMOOTH + noise(2)).T).standard_deviation == pytest.approx(one.standard_deviation, rel=1e-9)


def test_exact_data_have_no_noise():
    assert estimate_noise(SMOOTH, mask=CORE).standard_deviation < 1e-4
    assert estimate_noise(np.full(Z.shape, 3.0)).standard_deviation == 0.0


def test_too_few_points_are_unknown_with_a_reason():
    found = estimate_noise(noise(1)[:7, :7])
    assert math.isnan(found.standard_deviation)
    assert "seven" in found.reason
    with pytest.raises(ValueError, match="mask"):
        estimate_noise(noise(1), mask=CORE.T)


def test_short_stretches_beside_a_wake_raise_no_alarm():
    # A window that the wake nearly fills: seven good points in a row are few, pairs two apart are half as many.
    z, y = np.mgrid[0:34, 0:56]
    wake = ((z - 17) / 11) ** 2 + ((y - 28) / 27) ** 2 < 1
    found = estimates(lambda seed: np.random.default_rng([seed, 7]).standard_normal(z.shape), count=400, mask=wake)
    # Two lags on two axes beyond four standard errors: 0.1 expected of 400. Counting values as pairs let 5 through.
    assert sum(not one.is_white for one in found) <= 1


def test_too_few_pairs_are_no_correlation():
    # Seven good points in each row, one sixth difference: nothing tells whether neighbours share anything.
    field = np.random.default_rng(0).standard_normal((60, 9))
    field[:, 7:] = np.nan
    field[6::7] = np.nan
    found = estimate_noise(field)
    assert found.is_white
    # 52 values that overlap nowhere: a standard deviation within 10 %; three times that.
    assert found.standard_deviation == pytest.approx(1.0, rel=0.3)


def on_a_line(count, *, seed, even=True, length=None):
    rng = np.random.default_rng([seed, 8])
    steps = np.ones(count - 1) if even else rng.uniform(0.6, 1.6, count - 1)
    position = np.concatenate([[0.0], np.cumsum(steps)])
    if length is None:
        return position, SIGMA * rng.standard_normal(count)
    latents, expand = correlated_field(np.stack([position, 0 * position], axis=1), length)
    return position, SIGMA * expand(rng.standard_normal((1, latents)))[0]


@pytest.mark.parametrize("even", [True, False])
@pytest.mark.parametrize("count", [24, 60])
def test_noise_of_a_line_under_a_slope_and_a_gap(even, count):
    found = []
    for seed in range(300):
        position, errors = on_a_line(count, seed=seed, even=even)
        skip = np.abs(np.arange(count) - count // 2) < 3
        found.append(line_noise(position, errors + 5 + 0.4 * position + 100 * skip, skip=skip))
    values = np.array([one.standard_deviation for one in found])
    expected = 1 / math.sqrt(2 * found[0].effective_size)
    assert expected < (0.32 if count == 24 else 0.17)
    # The clipped deviation of a dozen values reads up to 5 % low; the mean itself is good to a tenth of `expected`.
    assert values.mean() == pytest.approx(SIGMA, rel=0.07)
    assert values.std() / SIGMA == pytest.approx(expected, rel=0.3)
    # White noise is called correlated in fewer than 1 % of the lines.
    assert np.mean([not one.is_white for one in found]) < 0.01


def test_correlated_noise_of_a_line_is_recognised():
    found = [line_noise(*on_a_line(120, seed=seed, length=1.5)) for seed in range(30)]
    assert np.mean([not one.is_white for one in found]) > 0.9
    assert np.nanmean([one.correlation_length_cells[1] for one in found]) == pytest.approx(1.5, rel=0.15)


def test_too_few_points_of_a_line_say_nothing():
    found = line_noise(np.arange(10.0), np.arange(10.0))
    assert math.isnan(found.standard_deviation) and "12 points" in found.reason
    assert line_noise(np.arange(20.0), np.arange(20.0)).standard_deviation == 0.0
