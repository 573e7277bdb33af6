"""Curvature counted once: slopes are taken at measured values, which hold the errors already."""

import math

import numpy as np
import pytest
from scipy.special import ndtr

from wakeledger.confidence.budget import REMAINDER, make_budget
from wakeledger.confidence.curvature import curvature_factor, scaled_budget, scaled_samples
from wakeledger.confidence.montecarlo import run
from wakeledger.confidence.samples import Samples
from wakeledger.confidence.sampling import unit_variables
from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.confidence.terms import NumericalTerm, add_terms

SURVEYS, DRAWS = 5000, 1000
KURTOSIS = {"normal": 3.0, "rectangular": 1.8}


def unit(rng, count, kinds):
    """Latin hypercubes of unit errors, as the package draws them: their margins are exact."""
    out = np.empty((count, len(kinds)))
    for k, kind in enumerate(kinds):
        unit_variables(rng, column := np.empty((count, 1)), kind)
        out[:, k] = column[:, 0]
    return out


def orders(hessian, kinds):
    """Variance of ½ eᵀHe and E|He|² for independent e of unit variance, by their definitions."""
    squares = np.square(hessian)
    alone = np.array([KURTOSIS[kind] - 1 for kind in kinds]) * np.diag(squares)
    return 0.5 * (squares.sum() - np.trace(squares)) + 0.25 * alone.sum(), squares.sum()


def along(gradient, hessian):
    """h² = (gᵀHg/|g|²)² of gradients, shape (k, n)."""
    return np.square(np.einsum("ki,ij,kj->k", gradient, hessian, gradient) / np.square(gradient).sum(axis=1))


@pytest.mark.parametrize("kind", list(KURTOSIS))
def test_what_draws_hold_beyond_the_scatter_is_what_bends_their_slopes(kind):
    """V = |g|² + V2 is the scatter; at measured values it is on average |g|² + E|He|² + V2."""
    slope = np.array([1.0, -0.5, 0.2])
    hessian = 0.4 * np.array([[0.8, 0.3, 0.0], [0.3, 0.0, -0.5], [0.0, -0.5, -0.4]])
    second, inflation = orders(hessian, [kind] * 3)
    assert inflation == pytest.approx(2 * second) if kind == "normal" else inflation > 2.1 * second
    e = unit(np.random.default_rng(1), 200_000, [kind] * 3)
    scatter = np.var(e @ slope + 0.5 * np.einsum("ki,ij,kj->k", e, hessian, e))
    # 200 000 surveys know a variance within a third of a per cent.
    assert scatter == pytest.approx(slope @ slope + second, rel=0.012)
    by_draws = np.sum(np.square(slope + e @ hessian), axis=1) + second
    assert by_draws.mean() == pytest.approx(scatter + inflation, rel=0.012)
    assert by_draws.mean() > 1.15 * scatter
    corrected = by_draws * curvature_factor(by_draws, np.full(len(e), second), np.full(len(e), inflation)) ** 2
    assert corrected.mean() == pytest.approx(scatter, rel=0.012)


def coverage(function, gradient, hessian, kinds, truth):
    """Share of surveys whose U95 holds the truth, and mean u² over the scatter's: as drawn, and corrected."""
    rng = np.random.default_rng(4)
    second, inflation = orders(hessian, kinds)
    measured = truth + unit(rng, SURVEYS, kinds)
    off = function(measured) - function(truth)
    hits, variances = np.zeros(2), np.zeros(2)
    for part in np.split(np.arange(SURVEYS), 50):
        at = measured[part]
        values = function(at[:, None, :] + unit(rng, DRAWS, kinds))
        variance = values.var(axis=1)
        low, high = np.quantile(values, [0.025, 0.975], axis=1)
        left = inflation - along(gradient(at), hessian)
        for k, factor in enumerate((np.ones(part.size), curvature_factor(variance, np.full(part.size, second), left))):
            hits[k] += np.count_nonzero(np.abs(off[part]) <= factor * (high - low) / 2)
            variances[k] += np.sum(factor**2 * variance)
    return *(hits / SURVEYS).tolist(), *(variances / SURVEYS / off.var()).tolist()


@pytest.mark.parametrize("kind", list(KURTOSIS))
@pytest.mark.parametrize("truth", [(0.0, 0.0, 0.0), (0.7, -0.5, 0.0)])
def test_coverage_of_a_product_near_its_stationary_point(kind, truth):
    """x y + 2.5 z: as in a total drag, two errors multiply beside others that do not."""

    def function(x):
        return x[..., 0] * x[..., 1] + 2.5 * x[..., 2]

    def gradient(x):
        return np.stack([x[..., 1], x[..., 0], np.full(x.shape[:-1], 2.5)], axis=-1)

    hessian = np.array([[0.0, 1.0, 0.0], [1.0, 0.0, 0.0], [0.0, 0.0, 0.0]])
    without, corrected, before, after = coverage(function, gradient, hessian, [kind, kind, "normal"], np.array(truth))
    # 5000 surveys know a share within 0.3 %.
    assert corrected == pytest.approx(0.95, abs=0.01)
    assert without > 0.965
    # 2 V2 of |g|² + V2 is a quarter.
    assert before > 1.2
    assert after == pytest.approx(1.0, abs=0.05)


@pytest.mark.parametrize("kind", list(KURTOSIS))
def test_coverage_of_a_parabola_near_its_stationary_point(kind):
    """0.3 x + x² + 5 z, measured near the bottom of the parabola."""

    def function(x):
        return 0.3 * x[..., 0] + x[..., 0] ** 2 + 5 * x[..., 1]

    def gradient(x):
        return np.stack([0.3 + 2 * x[..., 0], np.full(x.shape[:-1], 5.0)], axis=-1)

    hessian = np.array([[2.0, 0.0], [0.0, 0.0]])
    without, corrected, before, after = coverage(function, gradient, hessian, [kind, "normal"], np.array([-0.15, 0.0]))
    assert corrected == pytest.approx(0.95, abs=0.01)
    assert without > corrected + 0.01
    # 4 of 27 for the normal, of 26 for the rectangular error.
    assert before > 1.1
    assert after == pytest.approx(1.0, abs=0.05)


def test_one_error_alone_covers_less_and_is_not_made_smaller():
    """y = x²: where g = 2 x0 > 0 U95 of draws is k g(e), which covers −k + d < e < k + d, d = (√(1 + k²h²) − 1)/h."""
    x0, k = 4.0, 1.959964
    h = 1 / x0
    d = (math.sqrt(1 + (k * h) ** 2) - 1) / h
    expected = ndtr(k + d) - ndtr(d - k)
    assert expected == pytest.approx(0.95 - k**5 * h**2 / 4 * math.exp(-(k**2) / 2) / math.sqrt(2 * math.pi), abs=0.004)
    arguments = (lambda x: x[..., 0] ** 2, lambda x: 2 * x, np.array([[2.0]]), ["normal"], np.array([x0]))
    without, corrected, _, _ = coverage(*arguments)
    assert without == pytest.approx(expected, abs=0.012)
    assert corrected == without


def test_nothing_changes_where_the_second_order_is_small_or_unknown():
    variance = np.array([1.0, 1.0, 1.0, 1.0, 0.0])
    second = np.array([0.009, 0.011, math.nan, 0.6, 0.0])
    factor = curvature_factor(variance, second, 2 * second)
    assert factor[0] == 1.0
    assert factor[1] == pytest.approx(math.sqrt(1 - 0.022), rel=1e-12)
    assert factor[2] == 1.0
    # 1 − 1.2 is no variance: the second order itself is the least there is.
    assert factor[3] == pytest.approx(math.sqrt(0.6), rel=1e-12)
    assert factor[4] == 1.0
    assert curvature_factor(np.array([1.0]), np.array([1.4]), np.array([2.8]))[0] == 1.0


def test_scaled_draws_keep_their_mean_and_their_correlation():
    rng = np.random.default_rng(1)
    values = rng.standard_normal((400, 3)) @ rng.standard_normal((3, 3)) + [5.0, -2.0, 1e3]
    values[7] = math.nan
    samples = Samples(("a", "b", "c"), values)
    factor = np.array([0.9, 1.0, 0.7])
    found = scaled_samples(samples, factor)
    np.testing.assert_allclose(found.covariance, samples.covariance * np.outer(factor, factor), rtol=1e-12)
    np.testing.assert_allclose(found.mean, samples.mean, rtol=1e-12)
    np.testing.assert_allclose(found.interval().half_width, factor * samples.interval().half_width, rtol=1e-12)
    np.testing.assert_allclose(found.coverage_factor(), samples.coverage_factor(), rtol=1e-12)
    np.testing.assert_array_equal(found.values[:, 1], values[:, 1])
    assert scaled_samples(samples, np.ones(3)) is samples


def test_a_scaled_budget_adds_up_and_leaves_the_numerical_terms_alone():
    layouts = {"x": InputLayout(0.0), "z": InputLayout(np.zeros(30))}
    sources = [Source("x", ("x",), "systematic", 1.0), Source("z", ("z",), "random", 0.4)]
    terms = [NumericalTerm("grid", np.array([0.5, 0.0]))]

    def evaluate(errors):
        return np.stack([errors["x"] + errors["x"] ** 2, errors["z"].sum(axis=1)], axis=1)

    plain = run(evaluate, sources, layouts, names=("f", "g"), draws=400, seed=2)
    budget = make_budget(evaluate, sources, layouts, plain, seed=2, terms=terms)
    factor = np.array([0.8, 1.0])
    whole = add_terms(scaled_samples(plain, factor), terms, seed=2)
    found = scaled_budget(budget, factor, whole.standard_uncertainty)
    for k, row in enumerate(("f", "g")):
        lines = found.of(row)
        total = sum(line.standard_uncertainty**2 for line in lines)
        assert total == pytest.approx(whole.standard_uncertainty[k] ** 2, rel=1e-12)
        assert sum(line.share for line in lines) == pytest.approx(1.0, rel=1e-12)
        assert lines[-1].source == REMAINDER
    by_source = {line.source: line for line in found.of("f")}
    before = {line.source: line for line in budget.of("f")}
    assert by_source["grid"].standard_uncertainty == pytest.approx(0.5, rel=0.05)
    ratio = by_source["x"].standard_uncertainty / before["x"].standard_uncertainty
    assert ratio == pytest.approx(0.8, rel=0.05)
    assert found.of("g") == budget.of("g")
    # What increments and repeats are made of is what each error does, as it was found.
    assert found.components is budget.components
    assert found.scatter is budget.scatter
