"""The budget by source: known parts are found, squares close, nothing unknown becomes zero."""

import numpy as np
import pytest

from wakeledger.confidence.budget import REMAINDER, Budget, make_budget, with_scaled_scatter
from wakeledger.confidence.components import MEASURED, Component
from wakeledger.confidence.montecarlo import run
from wakeledger.confidence.samples import Samples
from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.confidence.terms import NumericalTerm, add_terms

X = np.linspace(1.0, 3.0, 200)
LAYOUTS = {
    "x": InputLayout(X, row=np.repeat(np.arange(20), 10)),
    "gain": InputLayout(1.0),
    "offset": InputLayout(0.0),
    "idle": InputLayout(0.0),
}
SOURCES = [
    Source("noise", ("x",), "random", 0.5),
    Source("rows", ("x",), "per_row", 0.1),
    Source("gain", ("gain",), "systematic", 0.01),
    Source("offset", ("offset",), "systematic", 0.03, distribution="rectangular"),
    Source("idle", ("idle",), "systematic", 1.0),
]
ROWS = ("mean", "curved", "constant")
SEED = 5


def evaluate(errors):
    mean = (1 + errors["gain"]) * (X + errors["x"]).mean(axis=1) + errors["offset"]
    return np.stack([mean, 1000 * errors["gain"] ** 2 + errors["offset"], 0 * mean + 2.0], axis=1)


@pytest.fixture(scope="module")
def samples():
    return run(evaluate, SOURCES, LAYOUTS, names=ROWS, draws=1000, seed=SEED)


TERMS = (
    NumericalTerm("resolution", np.array([0.02, -0.05, 0.0])),
    NumericalTerm("mask", np.array([0.01, 0.0, 0.0]), distribution="rectangular"),
)


@pytest.fixture(scope="module")
def budget(samples):
    return make_budget(evaluate, SOURCES, LAYOUTS, samples, seed=SEED, terms=TERMS)


def test_known_parts(budget):
    lines = {line.source: line for line in budget.of("mean")}
    scale = budget.scale[0] ** 0.5
    # Exact to rounding: shifts of a linear function (the gain acts on the mean, 2) and the numerical terms.
    assert lines["gain"].standard_uncertainty == pytest.approx(0.02 * scale, rel=1e-9)
    assert lines["offset"].standard_uncertainty == pytest.approx(0.03 * scale, rel=1e-9)
    assert lines["resolution"].standard_uncertainty == pytest.approx(0.02 * scale, rel=1e-12)
    assert lines["idle"].standard_uncertainty == 0.0
    # Drawn: 4 standard errors of a standard deviation from 200 draws are 20 %.
    assert lines["noise"].standard_uncertainty == pytest.approx(0.5 / 200**0.5, rel=0.2)
    assert lines["rows"].standard_uncertainty == pytest.approx(0.1 / 20**0.5, rel=0.2)
    assert {line.how for line in budget.of("mean")} == {"sensitivities", "monte_carlo", "numerical", "remainder"}


def test_second_order_is_in_the_line(budget):
    lines = {line.source: line for line in budget.of("curved")}
    # 1000 g² with g normal, u = 0.01: mean 0.1, standard deviation √2 · 0.1; first order would give zero.
    assert lines["gain"].standard_uncertainty == pytest.approx(2**0.5 * 0.1 * budget.scale[1] ** 0.5, rel=1e-6)
    assert lines["gain"].shift == pytest.approx(0.1, rel=1e-9)
    assert lines["noise"].standard_uncertainty == 0.0


def test_squares_close_exactly_and_lines_are_sorted(budget, samples):
    total = add_terms(samples, TERMS, seed=SEED).standard_uncertainty
    np.testing.assert_array_equal(budget.standard_uncertainty, total)
    for row, u in zip(ROWS, total, strict=True):
        lines = budget.of(row)
        assert sum(line.standard_uncertainty**2 for line in lines) == pytest.approx(u**2, rel=1e-12, abs=0)
        assert lines[-1].source == REMAINDER
        sizes = [line.standard_uncertainty for line in lines[:-1]]
        assert sizes == sorted(sizes, reverse=True)
        if u:
            assert sum(line.share for line in lines) == pytest.approx(1, rel=1e-12)
            # Additive parts: what is left over is sampling, at most 4 standard errors of a variance from 1000 draws.
            assert lines[-1].share < 4 * (2 / 1000) ** 0.5
            assert budget.scale[ROWS.index(row)] > 1 - 4 * (2 / 1000) ** 0.5


def test_a_row_that_depends_on_nothing_has_no_uncertainty(budget):
    assert budget.standard_uncertainty[2] == 0.0
    assert all(line.standard_uncertainty == 0.0 and line.share == 0.0 for line in budget.of("constant"))


def test_a_dominant_drawn_source_shares_the_runs_sampling_error():
    sources = [Source("noise", ("x",), "random", 0.5), Source("small", ("offset",), "systematic", 0.001)]
    found = []
    for seed in range(20):
        s = run(evaluate, sources, LAYOUTS, names=ROWS, draws=1000, seed=seed)
        found.append(make_budget(evaluate, sources, LAYOUTS, s, seed=seed, draws=100).of("mean")[0].share)
    # Without the correction the share would scatter by √(2/100) = 14 %.
    assert np.std(found) < 0.02
    assert np.mean(found) == pytest.approx(1, abs=0.02)


def test_a_single_source_is_not_drawn_again():
    calls = []

    def counted(errors):
        calls.append(1)
        return evaluate(errors)

    sources = SOURCES[:1]
    s = run(evaluate, sources, LAYOUTS, names=ROWS, draws=300, seed=1)
    found = make_budget(counted, sources, LAYOUTS, s, seed=1)
    assert not calls
    assert found.of("mean")[0].share == pytest.approx(1, rel=1e-12)


def test_interaction_goes_to_the_remainder():
    sources = [Source("a", ("gain",), "systematic", 0.1), Source("b", ("offset",), "systematic", 0.1)]

    def product(errors):
        return (errors["gain"] * errors["offset"])[:, None]

    s = run(product, sources, LAYOUTS, names=["p"], draws=1000, seed=1)
    assert make_budget(product, sources, LAYOUTS, s, seed=1).of("p")[-1].share == pytest.approx(1, rel=1e-12)


def test_cancelling_sources_are_scaled_and_say_so():
    sources = [Source("a", ("gain", "offset"), "systematic", 0.1), Source("b", ("idle",), "systematic", 0.1)]

    def saturating(errors):
        return np.maximum(np.abs(errors["gain"]), np.abs(errors["idle"]))[:, None]

    s = run(saturating, sources, LAYOUTS, names=["p"], draws=1000, seed=1)
    found = make_budget(saturating, sources, LAYOUTS, s, seed=1)
    assert found.scale[0] < 1
    assert sum(line.share for line in found.lines) == pytest.approx(1, rel=1e-12)


def test_terms_carry_covariance_between_rows(samples):
    total = add_terms(samples, (NumericalTerm("resolution", np.array([3.0, -2.0, 0.0])),), seed=SEED)
    # One variable for all rows, far larger than the rest: correlation -1 within the rest's share.
    assert total.covariance[0, 1] == pytest.approx(-6.0, rel=0.05)
    assert total.standard_uncertainty[2] == 0.0


def test_unknown_stays_unknown():
    values = np.random.default_rng(1).standard_normal((500, 2))
    samples = Samples(("a", "b"), values)
    total = add_terms(samples, (NumericalTerm("gaps", np.array([np.nan, 0.1])),), seed=1)
    assert np.isnan(total.standard_uncertainty[0])
    assert "gaps" in total.unknown[0]
    assert np.isfinite(total.standard_uncertainty[1])
    with pytest.raises(ValueError, match="3 deviations"):
        add_terms(samples, (NumericalTerm("gaps", np.ones(3)),), seed=1)

    def evaluate_two(errors):
        return errors["x"][:, :2]

    sources = SOURCES[:1]
    s = run(evaluate_two, sources, LAYOUTS, names=("a", "b"), draws=300, seed=1)
    found = make_budget(
        evaluate_two, sources, LAYOUTS, s, seed=1, terms=[NumericalTerm("gaps", np.array([np.nan, 0.1]))]
    )
    lines = {line.source: line for line in found.of("a")}
    assert np.isnan(lines["gaps"].standard_uncertainty)
    assert np.isnan(lines["noise"].share)
    assert lines["noise"].standard_uncertainty == pytest.approx(0.5, rel=0.2)
    assert np.isnan(lines[REMAINDER].standard_uncertainty)


def test_tables(budget):
    table = budget.to_dataframe()
    assert list(table.columns) == ["row", "source", "standard_uncertainty", "share", "how", "shift"]
    dataset = budget.to_dataset()
    assert dataset.sizes == {"row": 3, "source": 8}
    line = budget.of("mean")[0]
    assert float(dataset["share"].sel(row="mean", source=line.source)) == line.share
    with pytest.raises(KeyError):
        budget.of("lift")


def test_progress_reaches_its_end(samples):
    seen = []
    make_budget(
        evaluate,
        SOURCES,
        LAYOUTS,
        samples,
        seed=SEED,
        draws=50,
        progress=lambda done, total: seen.append((done, total)),
    )
    assert seen[-1][0] == seen[-1][1] == 1 + 2 * 3 + 2 * 50
    assert [done for done, _ in seen] == sorted(done for done, _ in seen)


def test_scatter_of_scaled_draws_leaves_single_errors_as_they_are():
    linear = np.array([3.0, 3.0, 3.0])
    single = Component("zero", MEASURED, linear, np.zeros(3))
    scatter = np.array([[16.0, 8.0, 4.0], [8.0, 16.0, 2.0], [4.0, 2.0, 16.0]])
    before = Budget(("a", "b", "c"), (), np.full(3, 5.0), np.ones(3), components=(single,), scatter=scatter)
    # 25 falls to 16: 9 stay with the zero, 7 of 16 are left. To a quarter, less than the zero alone: nothing is left.
    found = with_scaled_scatter(before, np.array([0.8, 1.0, 0.5])).scatter
    np.testing.assert_allclose(np.diag(found), [7.0, 16.0, 0.0], rtol=1e-12)
    assert found[0, 1] == pytest.approx(8 * np.sqrt(7 / 16), rel=1e-12) and found[0, 2] == 0.0
    assert with_scaled_scatter(before, np.ones(3)) is before


def test_one_error_of_two_inputs_is_one():
    """An input of another survey with the same error: f = (x + e) − (x' + e) holds no e, nor does its square."""
    source = Source("zero", ("offset", "other.offset"), "systematic", 0.3, shared_id="rig", prefix="other.")
    layouts = {"offset": InputLayout(0.0), "other.offset": InputLayout(0.0), "gain": InputLayout(1.0)}
    sources = [source, Source("gain", ("gain",), "systematic", 0.1)]

    def evaluate(errors):
        apart = errors["offset"] - errors["other.offset"]
        return np.stack([errors["gain"] + apart, errors["gain"] + 5 * apart**2, errors["offset"] + errors["gain"]], 1)

    samples = run(evaluate, sources, layouts, names=("a", "b", "c"), draws=200, seed=1)
    budget = make_budget(evaluate, sources, layouts, samples, seed=1)
    (zero, gain) = budget.components
    assert zero.key == ("rig", "offset", 0) and gain.source == "gain"
    np.testing.assert_allclose(zero.linear, [0.0, 0.0, 0.3], atol=1e-12)
    np.testing.assert_allclose(zero.curved, 0.0, atol=1e-12)
    assert next(line for line in budget.of("a") if line.source == "zero").standard_uncertainty < 1e-9
    np.testing.assert_allclose(np.diag(budget.scatter), 0.0, atol=1e-12)
