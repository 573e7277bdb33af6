"""Noise at points that stand on no uniform grid, against the noise that was put in."""

import numpy as np
import pytest

from wakeledger.confidence.local_noise import local_noise

SIGMA = 0.3


def places(kind, generator):
    if kind == "scattered":
        return generator.uniform(0.0, 50.0, (2500, 2))
    if kind == "uneven lines":
        y = np.cumsum(generator.uniform(0.5, 1.5, 50))
        return np.stack(np.meshgrid(y, np.arange(50.0)), axis=-1).reshape(-1, 2)
    radius, angle = np.meshgrid(np.arange(1.0, 26.0), np.linspace(0, 2 * np.pi, 90, endpoint=False))
    return np.stack([radius * np.cos(angle), radius * np.sin(angle)], axis=-1).reshape(-1, 2)


@pytest.mark.parametrize("kind", ["scattered", "uneven lines", "polar"])
def test_white_noise_about_a_smooth_field(kind):
    """1500 tested points share neighbours; a median fixes σ to about 1.2/√(2 · 700), so 10 % is three times that."""
    generator = np.random.default_rng(5)
    at = places(kind, generator)
    y, z = at.T
    smooth = 40 + 0.2 * y - 0.01 * y * z + 0.004 * z**2
    noisy = smooth + SIGMA * generator.standard_normal(y.size)
    found = local_noise(at, np.stack([noisy, 2 * noisy, smooth]))
    assert found[0] == pytest.approx(SIGMA, rel=0.10)
    assert found[1] == pytest.approx(2 * found[0], rel=1e-9)
    # A parabola goes through its own points: what is left is rounding.
    assert found[2] < 1e-9


def test_a_few_wild_points_do_not_count():
    generator = np.random.default_rng(6)
    at = places("scattered", generator)
    values = SIGMA * generator.standard_normal(2500)
    values[::125] += 100.0
    # One wild point in 125 spoils the residual of every eighth point, which a median bears.
    assert local_noise(at, values[None])[0] == pytest.approx(SIGMA, rel=0.25)


def test_too_few_points_tell_nothing():
    assert np.isnan(local_noise(np.random.default_rng(1).uniform(size=(29, 2)), np.zeros((1, 29)))).all()
