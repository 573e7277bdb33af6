"""Loss of induced drag by smearing against the closed form of a pair of Gaussian vortices."""

import math

import pytest
from scipy.special import exp1

from wakeledger.physics.vortices.smearing import smearing_loss


def pair(gamma, span, core, density):
    """D_i = (ρΓ²/4π)[ln(b²/2a²) + γ_E + E1(b²/2a²)] of two opposite Gaussian vortices."""
    ratio = span**2 / (2 * core**2)
    return density * gamma**2 / (4 * math.pi) * (math.log(ratio) + 0.5772156649015329 + exp1(ratio))


def test_a_smeared_pair():
    still, s = 0.03, 0.015
    smeared = math.sqrt(still**2 + 2 * s**2)
    lost = pair(2.0, 1.0, still, 1.2) - pair(2.0, 1.0, smeared, 1.2)
    assert lost > 0
    # The overlap of cores a thirtieth of their distance is below rounding.
    assert smearing_loss([2.0, -2.0], [smeared, smeared], s, density=1.2) == pytest.approx(lost, rel=1e-12)


def test_a_core_smaller_than_its_smearing_tells_nothing():
    assert math.isnan(smearing_loss([2.0, 1.0], [0.05, 0.02], 0.02, density=1.2))
    assert smearing_loss([2.0], [0.05], 0.0, density=1.2) == 0.0
