"""Errors drawn from sources: their moments, what hangs together, and reproducibility."""

import math

import numpy as np
import pytest

from wakeledger.confidence.correlation import correlated_field
from wakeledger.confidence.sampling import ErrorSampler, draw_errors
from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.core.errors import SurveyError

N = 400
LAYOUTS = {
    "v": InputLayout(np.linspace(-2.0, 3.0, N), row=np.repeat(np.arange(20), N // 20), std=np.linspace(0.1, 0.5, N)),
    "w": InputLayout(np.ones(N), row=np.repeat(np.arange(20), N // 20)),
    "rho": InputLayout(1.2),
}


def draw(effect="random", applies_to=("v", "w"), u=0.1, draws=2000, layouts=LAYOUTS, **options):
    return draw_errors(Source("s", applies_to, effect, u, **options), layouts, seed=3, draws=draws)


def correlation(a, b):
    return np.corrcoef(a, b)[0, 1]


@pytest.mark.parametrize("distribution", ["normal", "rectangular", "triangular", "arcsine"])
@pytest.mark.parametrize("applies_to", [("v",), ("rho",)])
def test_moments_of_each_distribution(distribution, applies_to):
    draws = 2048
    source = Source("s", applies_to, "random", 0.1, distribution=distribution)
    errors = draw_errors(source, LAYOUTS, seed=3, draws=draws)[applies_to[0]]
    # 4 standard errors of a variance and of a mean from as many independent numbers.
    size = errors.size
    assert abs(errors.var() / 0.01 - 1) < 4 * math.sqrt((source.kurtosis - 1) / size)
    assert abs(errors.mean()) < 4 * 0.1 / math.sqrt(size)
    # 4 standard errors of a kurtosis of about 3 from 2048 numbers: 4 sqrt(24/2048).
    assert np.mean(errors**4) / np.mean(errors**2) ** 2 == pytest.approx(source.kurtosis, abs=0.44)
    if distribution != "normal":
        limit = {"rectangular": math.sqrt(3), "triangular": math.sqrt(6), "arcsine": math.sqrt(2)}[distribution]
        assert 0.95 * 0.1 * limit < np.abs(errors).max() <= 0.1 * limit * (1 + 1e-12)
    assert errors.min() < 0 < errors.max()


def test_random_is_independent_in_space_and_between_inputs():
    errors = draw()
    # 4/sqrt(2000) = 0.09.
    assert abs(correlation(errors["v"][:, 0], errors["v"][:, 1])) < 0.09
    assert abs(correlation(errors["v"][:, 0], errors["w"][:, 0])) < 0.09
    assert abs(correlation(errors["v"][:-1, 0], errors["v"][1:, 0])) < 0.09


def test_systematic_is_common_to_all_points_and_independent_between_inputs():
    errors = draw("systematic")
    assert np.ptp(errors["v"], axis=1).max() == 0.0
    assert abs(correlation(errors["v"][:, 0], errors["w"][:, 0])) < 0.09
    assert errors["v"][:, 0].std() == pytest.approx(0.1, rel=0.02)


def test_relative_systematic_is_a_gain():
    errors = draw("systematic", relative=True)["v"]
    gains = errors[:, LAYOUTS["v"].nominal != 0] / LAYOUTS["v"].nominal[LAYOUTS["v"].nominal != 0]
    np.testing.assert_allclose(gains, gains[:, :1] * np.ones(gains.shape[1]), rtol=1e-12)


def test_per_row_is_common_within_a_row_only():
    errors = draw("per_row")["v"].reshape(-1, 20, N // 20)
    assert np.ptp(errors, axis=2).max() == 0.0
    assert abs(correlation(errors[:, 0, 0], errors[:, 1, 0])) < 0.09
    assert errors.std() == pytest.approx(0.1, rel=0.02)


def test_from_samples_scales_with_each_points_own_deviation():
    errors = draw(applies_to=("v",), u=1.0, from_samples=True)["v"]
    # 4 standard errors of a standard deviation from 2000 numbers: 4/sqrt(4000).
    np.testing.assert_allclose(errors.std(axis=0), LAYOUTS["v"].std, rtol=0.08)
    wide = draw(applies_to=("v",), u=1.0, from_samples=True, degrees_of_freedom=8)["v"]
    assert (wide.std(axis=0) / LAYOUTS["v"].std).mean() == pytest.approx(math.sqrt(8 / 6), rel=0.02)


def test_finite_degrees_of_freedom():
    source = Source("s", ("rho",), "systematic", 0.1, degrees_of_freedom=10)
    errors = draw_errors(source, LAYOUTS, seed=1, draws=100_000)["rho"]
    # Exact: scale times sqrt(nu/(nu - 2)); quantile t(10) at 97.5 % is 2.2281.
    assert errors.std() == pytest.approx(0.1 * math.sqrt(10 / 8), rel=0.015)
    assert source.spread == pytest.approx(math.sqrt(10 / 8))
    assert np.quantile(np.abs(errors), 0.95) == pytest.approx(0.22281, rel=0.015)
    # The doubt about the uncertainty is common to all points: their squares are correlated, they are not.
    many = draw(degrees_of_freedom=10, draws=4000)["v"]
    assert np.corrcoef(np.mean(many[:, :200] ** 2, axis=1), np.mean(many[:, 200:] ** 2, axis=1))[0, 1] > 0.9
    with pytest.raises(SurveyError, match="above 2"):
        draw(degrees_of_freedom=2)


def test_uncertain_limits():
    source = Source("s", ("rho",), "systematic", 0.1, distribution="rectangular", degrees_of_freedom=2)
    errors = draw_errors(source, LAYOUTS, seed=1, draws=100_000)["rho"]
    assert errors.std() == pytest.approx(0.1 * math.sqrt(1 + 1 / 12), rel=0.01)
    assert np.mean(errors**4) / np.mean(errors**2) ** 2 == pytest.approx(source.kurtosis, rel=0.02)
    assert 0.98 < np.abs(errors).max() / (0.1 * math.sqrt(3) * 1.5) <= 1


GRID = np.stack(np.meshgrid(np.arange(30) * 0.01, np.arange(20) * 0.012), axis=-1).reshape(-1, 2)


@pytest.mark.parametrize("length", [0.003, 0.01, 0.03, 0.5])
@pytest.mark.parametrize("scattered", [False, True])
def test_correlated_field_is_exact(length, scattered):
    positions = GRID[::-1]
    if scattered:
        positions = np.random.default_rng(5).uniform([0, 0], [0.3, 0.24], (60, 2))
    latents, expand = correlated_field(positions, length)
    root = expand(np.eye(latents))
    distance = np.linalg.norm(positions[:, None] - positions[None], axis=-1)
    # The variance is right to 1e-6, the correlation to 3e-4 (nodes 0.7 L apart, see the module).
    np.testing.assert_allclose(root.T @ root, np.exp(-0.5 * (distance / length) ** 2), atol=3e-4)
    np.testing.assert_allclose((root**2).sum(axis=0), 1, rtol=1e-6)


def test_correlated_source():
    layouts = {"v": InputLayout(np.ones(len(GRID)), positions=GRID)}
    errors = draw(applies_to=("v",), layouts=layouts, correlation_length=0.01, draws=4000)["v"]
    # The variance over all points and draws: about 4000 x 90 independent values, 4 standard errors 1 %.
    assert errors.var() == pytest.approx(0.01, rel=0.01)
    # Neighbours along y are one length apart: exp(-1/2) = 0.6065, standard error of one pair 0.01.
    assert correlation(errors[:, 0], errors[:, 1]) == pytest.approx(math.exp(-0.5), abs=0.04)


ALL = [
    Source("noise", ("v", "w"), "random", 0.1),
    Source("rows", ("v",), "per_row", 0.2),
    Source("offset", ("v", "rho"), "systematic", 0.05, degrees_of_freedom=12),
]


def test_chunks_and_company_do_not_change_the_numbers():
    whole = ErrorSampler(ALL, LAYOUTS, seed=7).draw(0, 600)
    pieces = [ErrorSampler(ALL, LAYOUTS, seed=7).draw(*cut) for cut in ((0, 17), (17, 300), (300, 600))]
    for name in LAYOUTS:
        np.testing.assert_array_equal(whole[name], np.concatenate([piece[name] for piece in pieces]))
    noise = draw_errors(ALL[0], LAYOUTS, seed=7, draws=600)
    np.testing.assert_array_equal(noise["w"], whole["w"])
    with_more = ErrorSampler([Source("new", ("v",), "random", 1.0), *ALL], LAYOUTS, seed=7).draw(0, 600)
    np.testing.assert_array_equal(with_more["w"], whole["w"])
    assert not np.array_equal(ErrorSampler(ALL, LAYOUTS, seed=8).draw(0, 600)["w"], whole["w"])
    assert not np.array_equal(ErrorSampler(ALL, LAYOUTS, seed=(7, 1)).draw(0, 600)["w"], whole["w"])


def test_two_sources_on_one_input_are_independent():
    one, other = (Source(name, ("w",), "random", 0.1) for name in ("probe", "transducer"))
    sampler = ErrorSampler([one, other], LAYOUTS, seed=7)
    # √2 times one of them; the same errors twice would give 2. 4 standard errors from 200 000 numbers: 0.7 %.
    assert sampler.draw(0, 500)["w"].std() == pytest.approx(0.1 * math.sqrt(2), rel=0.007)


def test_shared_identity_gives_the_same_errors_whatever_the_seed():
    shared = Source("pitot", ("rho",), "systematic", 0.1, shared_id="probe-17")
    elsewhere = Source("another name", ("rho",), "systematic", 0.1, shared_id="probe-17")
    one = draw_errors(shared, LAYOUTS, seed=1, draws=50)["rho"]
    np.testing.assert_array_equal(one, draw_errors(elsewhere, LAYOUTS, seed=2, draws=50)["rho"])


def test_missing_elements_have_no_error():
    layouts = {"v": InputLayout(np.array([1.0, np.nan, 2.0]))}
    errors = draw(applies_to=("v",), layouts=layouts, relative=True, draws=5)["v"]
    assert (errors[:, 1] == 0).all()
    assert (errors[:, 0] != 0).all()


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"effect": "bias"}, "random, systematic, per_row"),
        ({"standard_uncertainty": -0.1}, "not negative"),
        ({"standard_uncertainty": math.nan}, "finite"),
        ({"applies_to": ()}, "at least one"),
        ({"applies_to": ("v", "v")}, "twice"),
        ({"distribution": "uniform"}, "rectangular"),
        ({"degrees_of_freedom": 0}, "positive"),
        ({"distribution": "triangular", "degrees_of_freedom": 5}, "rectangular"),
        ({"effect": "systematic", "correlation_length": 0.1}, "random"),
        ({"correlation_length": 0.0}, "positive length"),
        ({"effect": "systematic", "from_samples": True}, "random"),
    ],
)
def test_contradictions_are_refused_at_construction(change, message):
    arguments = {"name": "probe", "applies_to": ("v",), "effect": "random", "standard_uncertainty": 0.1} | change
    with pytest.raises(SurveyError, match=message) as caught:
        Source(**arguments)
    assert "'probe'" in caught.value.line


@pytest.mark.parametrize(
    ("source", "message"),
    [
        (Source("s", ("vv",), "random", 0.1), "did you mean v"),
        (Source("s", ("rhino_x",), "random", 0.1), "rho"),
        (Source("s", ("p",), "per_row", 0.1), "row"),
        (Source("s", ("v",), "random", 0.1, correlation_length=0.1), "positions"),
        (Source("s", ("w",), "random", 0.1, from_samples=True), "std"),
    ],
)
def test_sources_that_do_not_fit_the_inputs_are_refused(source, message):
    layouts = LAYOUTS | {"p": InputLayout(np.ones(4))}
    with pytest.raises(SurveyError, match=message):
        draw_errors(source, layouts, seed=1, draws=2)
    with pytest.raises(SurveyError, match="twice"):
        ErrorSampler([ALL[0], ALL[0]], LAYOUTS, seed=1)


def test_layout_refuses_arrays_of_another_length():
    with pytest.raises(ValueError, match="row"):
        InputLayout(np.ones(3), row=np.array([1, 2]))
    with pytest.raises(ValueError, match="flat"):
        InputLayout(np.ones((3, 2)))
