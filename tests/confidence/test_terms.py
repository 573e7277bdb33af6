"""Spread of several values about one: the closed forms, where there is one, of Paule and Mandel's estimate."""

import math

import numpy as np
import pytest

from wakeledger.confidence.terms import spread_beyond


def test_equal_uncertainties_have_a_closed_form():
    # Σd²/(u² + τ²) = k with one u for all: τ² is the mean square less u².
    differences = [3.0, -1.0, 2.0]
    assert spread_beyond(differences, [0.5] * 3) == pytest.approx(math.sqrt(14 / 3 - 0.25), rel=1e-9)
    assert spread_beyond([-2.0], [0.5]) == pytest.approx(math.sqrt(4 - 0.25), rel=1e-9)


def test_two_unlike_uncertainties_have_a_closed_form():
    # With d₁ = 0: d²/(u² + τ²) = 2, whatever the uncertainty of the first.
    assert spread_beyond([0.0, 4.0], [9.0, 1.0]) == pytest.approx(math.sqrt(8 - 1), rel=1e-9)


def test_the_equation_holds():
    rng = np.random.default_rng(3)
    d, u = 4 * rng.standard_normal(6), rng.uniform(0.2, 2, 6)
    tau = spread_beyond(d, u)
    assert np.sum(d**2 / (u**2 + tau**2)) == pytest.approx(6, rel=1e-9)


def test_what_the_uncertainties_explain_is_no_spread():
    assert spread_beyond([0.9, -1.0], [1.0, 1.0]) == 0.0
    assert spread_beyond([0.0, 0.0], [1.0, 2.0]) == 0.0
    # One large difference is enough.
    assert spread_beyond([0.9, -3.0], [1.0, 1.0]) > 1.0


def test_recovers_a_known_spread():
    rng = np.random.default_rng(7)
    u = np.tile([0.5, 1.0, 1.5, 2.0], 500)
    d = rng.normal(0.0, np.hypot(u, 2.0))
    # 2000 values give their standard deviation within 1/√4000 = 1.6 %, and τ within three times that and a little.
    assert spread_beyond(d, u) == pytest.approx(2.0, rel=0.06)


@pytest.mark.parametrize("u", [[0.0, 1.0], [math.nan, 1.0], [1.0]])
def test_unknown_uncertainties_are_refused(u):
    with pytest.raises(ValueError, match="uncertaint"):
        spread_beyond([1.0, 2.0], u)
