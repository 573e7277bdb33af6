"""The linear budget against dense linear algebra written down here, and against published second-order results."""

import math

import numpy as np
import pytest

from wakeledger.confidence.components import shifted_components
from wakeledger.confidence.linear_budget import SecondOrder, Slopes, correlated_sources, linear_budget, probed_curvature
from wakeledger.confidence.montecarlo import run
from wakeledger.confidence.sampling import ErrorSampler, draw_errors
from wakeledger.confidence.sources import InputLayout, Source

NY, NZ = 9, 7
N = NY * NZ
YY, ZZ = np.meshgrid(np.linspace(0, 0.8, NY), np.linspace(0, 0.6, NZ))
PLACES = np.stack([YY.ravel(), ZZ.ravel()], axis=1)
ROW = np.repeat(np.arange(NZ), NY)


@pytest.fixture
def layouts():
    rng = np.random.default_rng(3)
    fields = {
        name: InputLayout(rng.uniform(1, 2, N), positions=PLACES, row=ROW, std=rng.uniform(0.1, 0.3, N))
        for name in "ab"
    }
    return {**fields, "c": InputLayout(4.0)}


@pytest.fixture
def slopes():
    rng = np.random.default_rng(4)
    figures = {name: rng.standard_normal((2, N)) for name in "ab"}
    outputs = np.array([[1.0, 0.0], [0.5, -2.0], [np.nan, np.nan]])
    return Slopes(outputs, figures, {"c": np.array([0.3, -0.7, 1.0])}, {"c": np.array([0.2, 0.0, 0.0])})


def dense(source, layout):
    """Covariance of a source's errors of one field, by its definition."""
    scale = np.full(N, source.standard_uncertainty)
    scale = scale * (layout.nominal if source.relative else 1.0) * (layout.std if source.from_samples else 1.0)
    distance = np.linalg.norm(PLACES[:, None] - PLACES[None], axis=-1)
    together = {
        "random": np.eye(N),
        "systematic": np.ones((N, N)),
        "per_row": (ROW[:, None] == ROW[None]).astype(float),
    }[source.effect]
    if source.correlation_length is not None:
        together = np.exp(-0.5 * (distance / source.correlation_length) ** 2)
    return scale[:, None] * together * scale[None, :]


SOURCES = [
    Source("random", ("a", "b"), "random", 0.2),
    Source("relative", ("a",), "random", 0.1, relative=True),
    Source("gain", ("b",), "systematic", 0.1, relative=True),
    Source("samples", ("b",), "random", 1.0, from_samples=True),
    Source("row", ("a", "b"), "per_row", 0.15),
    Source("smooth", ("b",), "random", 0.3, correlation_length=0.2),
]


def test_first_order_is_the_law_of_propagation(layouts, slopes):
    found = linear_budget(slopes, SOURCES, layouts, names="xyz")
    total = np.zeros((2, 2))
    for k, source in enumerate(SOURCES):
        expected = np.zeros((2, 2))
        for name in source.applies_to:
            by = slopes.outputs[:2] @ slopes.figures[name]
            expected += by @ dense(source, layouts[name]) @ by.T
        np.testing.assert_allclose(found.covariance[k][:2, :2], expected, rtol=1e-9)
        total += expected
    np.testing.assert_allclose(found.total[:2, :2], total, rtol=1e-9)
    # What is not known stays unknown.
    assert math.isnan(found.standard_uncertainty[2])
    assert math.isinf(found.degrees_of_freedom()[0])
    assert found.coverage_factor()[0] == pytest.approx(1.959964, abs=1e-6)


def test_a_missing_derivative_is_no_zero(layouts, slopes):
    with pytest.raises(KeyError):
        linear_budget(Slopes(slopes.outputs, {"a": slopes.figures["a"]}), SOURCES, layouts, names="xyz")


def test_a_single_number_has_both_orders(layouts, slopes):
    source = Source("c", ("c",), "systematic", 0.05, relative=True)
    found = linear_budget(slopes, [source], layouts, names="xyz")
    # σ = 0.2: a = 0.3 σ, b = ½ 0.2 σ², var = a² + 2 b².
    assert found.contributions[0, 0] == pytest.approx(0.06**2 + 2 * 0.004**2, rel=1e-12)
    assert found.shift[0] == pytest.approx(0.004, rel=1e-12)
    assert found.standard_uncertainty[2] == pytest.approx(0.2, rel=1e-12)
    given = {"c": SecondOrder(np.zeros(3), np.zeros(3))}
    # An order that is given takes the place of the other: nothing counts twice.
    assert linear_budget(slopes, [source], layouts, names="xyz", second=given).shift[0] == 0.0


def test_predicted_changes_have_the_covariance_of_the_budget(layouts, slopes):
    sources = [*SOURCES, Source("c", ("c",), "systematic", 0.2)]
    found = linear_budget(slopes, sources, layouts, names="xyz")
    changes = slopes.change(ErrorSampler(sources, layouts, seed=1).draw(0, 4000))[:, :2]
    # 4000 draws: 1.1 % of the standard deviation, four times that.
    np.testing.assert_allclose(changes.std(axis=0, ddof=1), found.standard_uncertainty[:2], rtol=0.045)
    rho = found.total[0, 1] / np.prod(found.standard_uncertainty[:2])
    assert np.corrcoef(changes.T)[0, 1] == pytest.approx(rho, abs=0.06)


def test_errors_that_two_sources_share_add_before_squaring(layouts, slopes):
    one = Source("one", ("a",), "systematic", 0.1, shared_id="probe")
    two = Source("two", ("a",), "systematic", 0.3, shared_id="probe")
    found = linear_budget(slopes, [one, two], layouts, names="xyz")
    # The very same error twice is one of the size of the sum, not of the root sum of squares.
    assert found.standard_uncertainty[0] == pytest.approx(abs(slopes.figures["a"][0].sum()) * 0.4, rel=1e-12)
    drawn = draw_errors(one, layouts, seed=5, draws=3)["a"] * 3
    np.testing.assert_allclose(draw_errors(two, layouts, seed=6, draws=3)["a"], drawn, rtol=1e-12)


def test_one_error_of_two_inputs_acts_on_both_at_once():
    """f = (x + e) − (x' + e) holds no e; two systematic sources of one identity and one input are one error as well."""
    layouts = {name: InputLayout(0.0) for name in ("a", "b", "other.a", "other.b")}
    ones = {"a": [1.0, 1.0, 0.0], "other.a": [-1.0, 0.0, 0.0], "b": [0.0, 0.0, 2.0], "other.b": [0.0, 0.0, -2.0]}
    slopes = Slopes(np.zeros((3, 0)), {}, {name: np.array(slope) for name, slope in ones.items()})
    joined = Source("a", ("a", "other.a", "other.b"), "systematic", 0.3, shared_id="rig", prefix="other.")
    beside = Source("b", ("b",), "systematic", 0.3, shared_id="rig")
    found = linear_budget(slopes, (joined, beside), layouts, names=("f", "g", "h"))
    np.testing.assert_allclose(found.standard_uncertainty, [0.0, 0.3, 0.0], atol=1e-9)
    draws = ErrorSampler((joined, beside), layouts, seed=1).draw(0, 50)
    np.testing.assert_allclose(slopes.change(draws)[:, [0, 2]], 0.0, atol=1e-15)


@pytest.mark.parametrize("effect", ["random", "per_row"])
def test_errors_of_points_of_another_survey_are_others_whatever_their_identity(layouts, slopes, effect):
    """What errs at each point or row errs anew where another survey was made at the same points."""
    layouts = {"a": layouts["a"], "other.a": layouts["a"]}
    slopes = Slopes(slopes.outputs[:2], {"a": slopes.figures["a"], "other.a": -slopes.figures["a"]})
    own = Source("a", ("a",), effect, 0.3, shared_id="rig")
    other = Source("other: a", ("other.a",), effect, 0.3, shared_id="rig", prefix="other.")
    both = linear_budget(slopes, (own, other), layouts, names=("f", "g"))
    alone = linear_budget(slopes, (own,), layouts, names=("f", "g"))
    np.testing.assert_allclose(both.standard_uncertainty, np.sqrt(2) * alone.standard_uncertainty, rtol=1e-12)
    drawn = slopes.change(ErrorSampler((own, other), layouts, seed=1).draw(0, 400))
    # 400 draws know a standard deviation within 3.5 %; one error would leave nothing.
    np.testing.assert_allclose(drawn.std(axis=0), both.standard_uncertainty, rtol=0.12)


def test_degrees_of_freedom(layouts, slopes):
    few = Source("few", ("a",), "systematic", 0.1, degrees_of_freedom=5)
    found = linear_budget(slopes, [few, SOURCES[0]], layouts, names="xyz")
    a, b = found.contributions[:, 0]
    # The t distribution's own spread √(5/3) is in the contribution, as in Monte Carlo.
    assert a == pytest.approx((slopes.figures["a"][0].sum() * 0.1) ** 2 * 5 / 3, rel=1e-12)
    assert found.degrees_of_freedom()[0] == pytest.approx((a + b) ** 2 / (a**2 / 5), rel=1e-12)
    assert linear_budget(slopes, [few], layouts, names="xyz").coverage_factor()[0] == pytest.approx(2.571, abs=5e-4)


@pytest.mark.parametrize(
    ("sources", "reason"),
    [
        ([Source("s", ("a",), "random", 0.1, correlation_length=0.1, degrees_of_freedom=9)], "point to point"),
        (
            [
                Source("s", ("a",), "systematic", 0.1, shared_id="p", degrees_of_freedom=9),
                Source("t", ("a",), "systematic", 0.1, shared_id="p"),
            ],
            "share their errors",
        ),
    ],
)
def test_degrees_of_freedom_are_refused_for_correlated_sources(layouts, slopes, sources, reason):
    found = linear_budget(slopes, sources, layouts, names="xyz")
    assert reason in found.correlated
    assert np.isnan(found.degrees_of_freedom()).all()
    assert np.isnan(found.coverage_factor()).all()
    assert found.standard_uncertainty[0] > 0


def test_sizes_taken_as_exact_need_no_formula():
    assert correlated_sources([Source("s", ("a",), "random", 0.1, correlation_length=0.1)]) is None


# -- second order -------------------------------------------------------------------------------------------------


def quadratic(layouts, *, at_zero):
    """f = g·a + ½ aᵀHa and e = f² about a given place, with the derivatives a survey's adjoint would give."""
    rng = np.random.default_rng(6)
    root = rng.standard_normal((N, 12))
    hessian = root @ root.T
    gradient = np.zeros(N) if at_zero else 30 * rng.standard_normal(N)

    def gradient_at(errors):
        slope = gradient + hessian @ errors["a"]
        return Slopes(np.array([[1.0]]), {"a": slope[None, :]})

    def evaluate(errors):
        a = errors["a"]
        return (a @ gradient + 0.5 * np.einsum("ki,ij,kj->k", a, hessian, a))[:, None]

    return gradient, hessian, gradient_at, evaluate


def averaged(gradient_at, source, layouts, probes=40, seeds=20):
    found = [probed_curvature(gradient_at, source, layouts, probes=probes, seed=seed) for seed in range(seeds)]
    return SecondOrder(*(np.mean([getattr(one, name) for one in found], axis=0) for name in ("variance", "shift")))


@pytest.mark.parametrize(
    "source",
    [
        Source("s", ("a",), "random", 0.2),
        Source("s", ("a",), "per_row", 0.2),
        Source("s", ("a",), "random", 0.2, correlation_length=0.15),
        Source("s", ("a",), "random", 0.2, distribution="rectangular"),
        Source("s", ("a",), "systematic", 0.2),
    ],
    ids=["random", "per_row", "smooth", "rectangular", "systematic"],
)
def test_second_order_of_a_quadratic_form(layouts, source):
    _, hessian, gradient_at, _ = quadratic(layouts, at_zero=True)
    covariance = dense(source, layouts["a"])
    found = averaged(gradient_at, source, layouts)
    product = hessian @ covariance
    expected = 0.5 * np.trace(product @ product)
    if source.distribution == "rectangular":
        expected += 0.25 * (1.8 - 3) * np.sum((np.diag(hessian) * 0.04) ** 2)
    # 800 directions scatter by 3 % in a form of rank 12; one error, or one for each of 7 rows, is exact.
    exact = source.effect != "random"
    assert found.variance[0] == pytest.approx(expected, rel=1e-9 if exact else 0.1)
    assert found.shift[0] == pytest.approx(0.5 * np.trace(product), rel=1e-9 if exact else 0.06)


@pytest.mark.parametrize("at_zero", [True, False])
def test_where_the_first_order_vanishes_the_second_covers(layouts, at_zero):
    gradient, _, gradient_at, evaluate = quadratic(layouts, at_zero=at_zero)
    source = Source("s", ("a",), "random", 0.2)
    slopes = Slopes(np.array([[1.0]]), {"a": gradient[None, :]})
    second = {"s": averaged(gradient_at, source, layouts)}
    found = linear_budget(slopes, [source], layouts, names=["f"], second=second)
    samples = run(evaluate, [source], {"a": layouts["a"]}, names=["f"], draws=4000, seed=2)
    assert samples.standard_uncertainty[0] == pytest.approx(found.standard_uncertainty[0], rel=0.06)
    assert samples.mean[0] == pytest.approx(found.shift[0], rel=0.1)
    first = linear_budget(slopes, [source], layouts, names=["f"]).standard_uncertainty[0]
    assert (first == 0) == at_zero


def test_jcgm_101_9_4_by_second_order():
    # JCGM 101:2008, 9.4 (from memory, check_values.md 7.2): y = x1² + x2², u = 0.005, x2 = 0. With x1 = 0 the first
    # order gives nothing, the second 50e-6; mean 50e-6. Both are exact for a quadratic.
    layouts = {"x1": InputLayout(0.0), "x2": InputLayout(0.0)}
    sources = [Source(name, (name,), "systematic", 0.005) for name in layouts]
    for x1, mean, u in ((0.0, 50e-6, 50e-6), (0.010, 150e-6, 112e-6), (0.050, 2550e-6, 502e-6)):

        def evaluate(errors, x1=x1):
            return ((x1 + errors["x1"]) ** 2 + errors["x2"] ** 2)[:, None]

        sampler = ErrorSampler(sources, layouts, seed=1)
        parts = shifted_components(evaluate, sampler, sampler.by_source, 1, batch=8, workers=1)
        slope = {"x1": np.array([2 * x1]), "x2": np.array([0.0])}
        slopes = Slopes(np.zeros((1, 0)), {}, slope, {name: np.array([2.0]) for name in layouts})
        found = linear_budget(slopes, sources, layouts, names=["y"])
        assert found.standard_uncertainty[0] == pytest.approx(u, abs=0.5e-6)
        assert x1**2 + found.shift[0] == pytest.approx(mean, abs=1e-9)
        assert sum(float(one.variance[0]) for one in parts) == pytest.approx(found.total[0, 0], rel=1e-9)
