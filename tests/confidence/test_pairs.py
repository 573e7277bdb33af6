"""What pairs of single errors do together, against the variances of products, which have closed forms."""

import math

import numpy as np
import pytest

from wakeledger.confidence.components import shifted_components
from wakeledger.confidence.linear_budget import Slopes, linear_budget
from wakeledger.confidence.montecarlo import run
from wakeledger.confidence.pairs import pair_order
from wakeledger.confidence.sampling import ErrorSampler
from wakeledger.confidence.sources import InputLayout, Source

A, B, U, V = 1.5, -0.4, 0.3, 0.5
LAYOUTS = {"x": InputLayout(A), "y": InputLayout(B)}


def products(errors):
    """f = x y and g = 2 x y + x."""
    x, y = A + errors["x"], B + errors["y"]
    return np.stack([x * y, 2 * x * y + x], axis=1)


def orders(evaluate, sources, layouts, outputs, **more):
    sampler = ErrorSampler(sources, layouts, seed=1)
    parts = shifted_components(evaluate, sampler, sampler.by_source, outputs, batch=16, workers=1)
    variance = sum(one.variance for one in parts)
    return parts, pair_order(evaluate, sampler, sampler.by_source, parts, variance, workers=1, **more)


@pytest.mark.parametrize("kind", ["normal", "rectangular", "arcsine"])
def test_product_of_two_independent_errors(kind):
    """Var(xy) = b²u² + a²v² + u²v² for independent x and y of any distribution."""
    sources = [Source("x", ("x",), "systematic", U, distribution=kind), Source("y", ("y",), "systematic", V)]
    parts, pairs = orders(products, sources, LAYOUTS, 2)
    slopes = Slopes(np.zeros((2, 0)), {}, {"x": np.array([B, 2 * B + 1]), "y": np.array([A, 2 * A])})
    found = linear_budget(slopes, sources, LAYOUTS, names="fg", pairs=pairs)
    both = U**2 * V**2
    assert found.total[0, 0] == pytest.approx((B * U) ** 2 + (A * V) ** 2 + both, rel=1e-12)
    assert found.total[0, 1] == pytest.approx(B * (2 * B + 1) * U**2 + 2 * A**2 * V**2 + 2 * both, rel=1e-12)
    assert found.second_order[1] == pytest.approx(2 * U * V, rel=1e-12)
    # A product bends nowhere along one error, so that all of the second order is the pair's.
    assert all(np.allclose(one.curved, 0, atol=1e-15) for one in parts)
    # Slopes at measured values: E|H e|² = 2 (h u v)².
    assert pairs.inflation[0] == pytest.approx(2 * both, rel=1e-12)
    # Less (gᵀHg/|g|²)², the curvature along the slope.
    along = 2 * (U * V) * (B * U) * (A * V) / ((B * U) ** 2 + (A * V) ** 2)
    assert found.inflation[0] == pytest.approx(2 * both - along**2, rel=1e-12)
    samples = run(products, sources, LAYOUTS, names="fg", draws=20_000, seed=3, batch=2000)
    # 20 000 draws know a standard deviation within half a percent; the pair's part of it is 5 %.
    np.testing.assert_allclose(samples.standard_uncertainty, found.standard_uncertainty, rtol=0.02)
    first = linear_budget(slopes, sources, LAYOUTS, names="fg").standard_uncertainty
    assert (found.standard_uncertainty > 1.015 * first).all()


def test_doubt_about_one_size_is_common_to_its_pairs():
    """Two errors of one source of ν degrees of freedom share √(ν/χ²): E of its fourth power is ν²/((ν−2)(ν−4))."""
    nu, layouts = 9.0, {"x": InputLayout(0.0), "y": InputLayout(0.0)}

    def evaluate(errors):
        return (errors["x"] * errors["y"])[:, None]

    one = [Source("both", ("x", "y"), "systematic", 0.2, degrees_of_freedom=nu)]
    two = [Source(name, (name,), "systematic", 0.2, degrees_of_freedom=nu) for name in "xy"]
    assert orders(evaluate, one, layouts, 1)[1].covariance[0, 0] == pytest.approx(
        0.2**4 * nu**2 / ((nu - 2) * (nu - 4)), rel=1e-12
    )
    assert orders(evaluate, two, layouts, 1)[1].covariance[0, 0] == pytest.approx(
        (0.04 * nu / (nu - 2)) ** 2, rel=1e-12
    )


def quadratic(n, matrix, slope=1.0):
    layouts = {f"x{k}": InputLayout(0.0) for k in range(n)}
    sources = [Source(name, (name,), "systematic", 1.0) for name in layouts]
    calls = []

    def evaluate(errors):
        e = np.stack([errors[name] for name in layouts], axis=1)
        calls.append(len(e))
        return (slope * e.sum(axis=1) + 0.5 * np.einsum("ki,ij,kj->k", e, matrix, e))[:, None]

    return evaluate, sources, layouts, calls


def test_pairs_that_cannot_matter_are_not_evaluated():
    n = 8
    matrix = np.diag(np.full(n, 0.5))
    evaluate, sources, layouts, calls = quadratic(n, matrix)
    _, pairs = orders(evaluate, sources, layouts, 1)
    assert pairs.covariance[0, 0] == 0.0
    # The singles and the probes; 28 pairs were spared.
    assert sum(calls) - (1 + 2 * n) < 12
    matrix[2, 5] = matrix[5, 2] = 1.0
    evaluate, sources, layouts, calls = quadratic(n, matrix)
    _, pairs = orders(evaluate, sources, layouts, 1)
    assert pairs.covariance[0, 0] == pytest.approx(1.0, rel=1e-12)
    assert sum(calls) - (1 + 2 * n) >= n * (n - 1) // 2


def test_pairs_of_very_many_errors_are_probed():
    n = 24
    rng = np.random.default_rng(2)
    root = rng.standard_normal((n, n))
    matrix = 0.1 * (root + root.T)
    evaluate, sources, layouts, calls = quadratic(n, matrix)
    _, pairs = orders(evaluate, sources, layouts, 1)
    expected = np.sum(np.square(matrix[np.triu_indices(n, 1)]))
    assert sum(calls) - (1 + 2 * n) < n * (n - 1) // 2
    # 32 directions: a relative scatter of √(2/32) = 0.25.
    assert pairs.covariance[0, 0] == pytest.approx(expected, rel=0.5)
    assert pairs.inflation[0] == pytest.approx(2 * pairs.covariance[0, 0], rel=1e-12)
    lone = np.zeros((n, n))
    lone[3, 20] = lone[20, 3] = 1.0
    evaluate, sources, layouts, _ = quadratic(n, lone)
    # Signs square to one, so that a single pair is exact.
    assert orders(evaluate, sources, layouts, 1)[1].covariance[0, 0] == pytest.approx(1.0, rel=1e-12)


def test_the_same_error_twice_is_no_pair():
    layouts = {"x": InputLayout(0.0)}

    def evaluate(errors):
        return (errors["x"] ** 2)[:, None]

    sources = [Source(name, ("x",), "systematic", 0.3, shared_id="gauge") for name in ("one", "two")]
    assert orders(evaluate, sources, layouts, 1)[1].covariance[0, 0] == 0.0


def test_an_output_without_value_stays_unknown():
    layouts = {name: InputLayout(0.0) for name in "xy"}

    def evaluate(errors):
        product = errors["x"] * errors["y"]
        return np.stack([product, np.full(product.shape, math.nan)], axis=1)

    sources = [Source(name, (name,), "systematic", 1.0) for name in "xy"]
    _, pairs = orders(evaluate, sources, layouts, 2)
    assert pairs.covariance[0, 0] == pytest.approx(1.0)
    assert math.isnan(pairs.covariance[1, 1])
    assert orders(evaluate, sources[:1], layouts, 2)[1].covariance[0, 0] == 0.0
