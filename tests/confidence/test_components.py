"""Components: signed effects, what they leave unexplained, and the interval of a model made of them."""

import math

import numpy as np
import pytest
from scipy.stats import norm, t

from wakeledger.confidence.budget import make_budget
from wakeledger.confidence.components import NUMERICAL, Component, half_width
from wakeledger.confidence.montecarlo import run
from wakeledger.confidence.sampling import SourceErrors
from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.confidence.terms import NumericalTerm

LAYOUTS = {
    "gain": InputLayout(1.0),
    "offset": InputLayout(0.0),
    "x": InputLayout(np.zeros(50)),
}


def evaluate(errors):
    """3 g − 2 o + mean(x), and g² + 0.1 mean(x); both known by hand."""
    g, o, x = errors["gain"], errors["offset"], errors["x"].mean(axis=1)
    return np.stack([3 * g - 2 * o + x, g**2 + 0.1 * x], axis=1)


def budget(sources, *, terms=(), draws=1000, seed=3):
    samples = run(evaluate, sources, LAYOUTS, names=("first", "second"), draws=draws, seed=seed)
    return make_budget(evaluate, sources, LAYOUTS, samples, seed=seed, terms=terms)


SOURCES = [
    Source("gain", ("gain",), "systematic", 0.5, shared_id="amplifier"),
    Source("offset", ("offset",), "systematic", 0.2, distribution="rectangular"),
    Source("noise", ("x",), "random", 1.0),
]


def test_components_carry_sign_order_and_identity():
    found = budget(SOURCES, terms=[NumericalTerm("edge", np.array([0.3, -0.4]), "rectangular")]).components
    gain, offset, edge = found
    np.testing.assert_allclose(gain.linear, [1.5, 0.0], rtol=1e-12, atol=1e-12)
    np.testing.assert_allclose(gain.curved, [0.0, 0.25], rtol=1e-12, atol=1e-12)
    assert gain.key == ("amplifier", "gain", 0)
    np.testing.assert_allclose(offset.linear, [-0.4, 0.0], rtol=1e-12, atol=1e-12)
    assert offset.key is None and offset.distribution == "rectangular"
    assert edge.kind == NUMERICAL and edge.key is None
    np.testing.assert_array_equal(edge.linear, [0.3, -0.4])
    # (g² with g normal, 0.5: variance 2 · 0.25² = 0.125)
    assert gain.variance[1] == pytest.approx(0.125, rel=1e-12)


def test_scatter_is_what_components_leave_free_of_their_sampling_error():
    found = budget(SOURCES, draws=400)
    # mean of 50 unit errors: variance 1/50; 400 draws leave 7 % of it, and the dominant gain (variance 2.25) nothing.
    assert found.scatter[0, 0] == pytest.approx(0.02, rel=0.2)
    assert found.scatter[0, 1] == pytest.approx(0.002, rel=0.2)
    # Without what only the components explain there is nothing left.
    assert budget(SOURCES[:2]).scatter == pytest.approx(np.zeros((2, 2)), abs=1e-20)


def test_variables_are_those_of_the_draws():
    for source in (
        SOURCES[0],
        Source("t", ("gain", "offset"), "systematic", 0.5, degrees_of_freedom=6),
        Source("r", ("gain", "offset"), "systematic", 0.5, distribution="rectangular", degrees_of_freedom=10),
    ):
        errors = SourceErrors(source, LAYOUTS, seed=1)
        variables = errors.variables(0, 300)
        for k, (name, number) in enumerate(errors.names):
            assert number == 0
            np.testing.assert_allclose(errors.draw(0, 300)[name], variables[:, k] * source.spread * 0.5, rtol=1e-12)
        # JCGM 101 9.4.2.2.1 and 6.4.9: of unit variance; 300 draws.
        assert variables.std() == pytest.approx(1, rel=0.15)


def test_only_errors_of_whole_inputs_are_followed():
    assert SourceErrors(Source("s", ("x",), "systematic", 1.0, shared_id="a"), LAYOUTS, seed=1).followed
    assert not SourceErrors(Source("s", ("x",), "random", 1.0, shared_id="a"), LAYOUTS, seed=1).followed
    found = budget([Source("many", ("x",), "random", 1.0, shared_id="a"), SOURCES[0]]).components
    assert [one.shared_id for one in found] == ["amplifier"]


def one(linear, curved=0.0, **options):
    return Component("s", "measured", np.array([linear]), np.array([curved]), **options)


def width(*components, scatters=(), groups=None):
    return float(half_width(components, groups or list(range(len(components))), scatters)[0])


def test_half_width_of_known_distributions():
    # 20 000 stratified draws; quantiles of a stratified column are good to 1e-3, of sums to 1 %.
    assert width(one(2.0)) == pytest.approx(2 * norm.ppf(0.975), rel=2e-3)
    assert width(one(-2.0, distribution="rectangular")) == pytest.approx(2 * 0.95 * math.sqrt(3), rel=2e-3)
    assert width(one(3.0), one(4.0)) == pytest.approx(5 * norm.ppf(0.975), rel=0.02)
    assert width(scatters=[(np.array([2.0]), 4.0)]) == pytest.approx(2 * t.ppf(0.975, 4), rel=0.03)
    assert width(scatters=[(np.array([2.0]), math.inf)]) == pytest.approx(2 * norm.ppf(0.975), rel=2e-3)
    # A t with ν = 8 has the standard deviation √(8/6) of its scale, which is the component's size.
    assert width(one(1.0, degrees_of_freedom=8)) == pytest.approx(t.ppf(0.975, 8) / math.sqrt(8 / 6), rel=0.03)
    # ε² − 1: between the 2.5 % and 97.5 % quantiles of χ² with one degree of freedom.
    assert width(one(0.0, 1.0)) == pytest.approx((norm.ppf(0.9875) ** 2 - norm.ppf(0.5125) ** 2) / 2, rel=0.02)


def test_half_width_is_the_same_twice_and_unknown_stays_unknown():
    parts = (one(1.0), one(2.0, 0.1))
    assert width(*parts) == width(*parts)
    both = Component("s", "measured", np.array([1.0, np.nan]), np.zeros(2))
    found = half_width([both], ["s"])
    assert np.isfinite(found[0]) and np.isnan(found[1])
