"""Monte Carlo runs: reproducibility, failures, coverage."""

import threading

import numpy as np
import pytest

from wakeledger.confidence.montecarlo import run
from wakeledger.confidence.samples import Samples
from wakeledger.confidence.sources import InputLayout, Source

X = np.linspace(1.0, 2.0, 80)
LAYOUTS = {"x": InputLayout(X), "gain": InputLayout(1.0), "unused": InputLayout(5.0)}
SOURCES = [Source("noise", ("x",), "random", 0.05), Source("gain", ("gain",), "systematic", 0.01)]


def energy(errors):
    x = X + errors["x"]
    gain = 1.0 + errors["gain"]
    return np.stack([gain * (x**2).mean(axis=1), x.mean(axis=1), 0 * gain + 3.7], axis=1)


def simulate(evaluate=energy, sources=SOURCES, names=("energy", "mean", "constant"), draws=500, **options):
    return run(evaluate, sources, LAYOUTS, names=names, draws=draws, seed=11, **options)


def test_batches_and_workers_do_not_change_the_values():
    reference = simulate(batch=500, workers=1)
    for options in ({"batch": 16, "workers": 2}, {"batch": 7, "workers": 3}):
        np.testing.assert_array_equal(simulate(**options).values, reference.values)
    np.testing.assert_array_equal(simulate(draws=100).values, reference.values[:100])


def test_closed_form_moments():
    s = simulate(draws=4000)
    u, g, n = 0.05, 0.01, X.size
    mean_square = (X**2).mean()
    # Var of the mean square: 4 u² Σx²/n² + 2 u⁴/n; the gain multiplies.
    variance = 4 * u**2 * mean_square / n + 2 * u**4 / n + g**2 * (mean_square + u**2) ** 2
    error = s.sampling_error()
    assert abs(s.standard_uncertainty[0] - variance**0.5) < 4 * error.standard_uncertainty[0]
    assert abs(s.mean[0] - mean_square - u**2) < 4 * error.mean[0]
    covariance = 2 * u**2 * X.mean() / n
    # 4 standard errors of a covariance of two variables with these variances from 4000 draws.
    assert s.covariance[0, 1] == pytest.approx(covariance, abs=4 * np.sqrt(variance * u**2 / n / 4000))
    assert s.covariance[0, 1] > 0


def test_an_output_independent_of_all_sources_has_exactly_no_uncertainty():
    s = simulate()
    assert s.standard_uncertainty[2] == 0.0
    assert s.covariance[2].tolist() == [0.0, 0.0, 0.0]
    assert np.isnan(s.coverage_factor()[2])
    assert (s.standard_uncertainty[:2] > 0).all()


def test_few_failures_are_counted_and_left_out():
    def sometimes(errors):
        values = energy(errors)
        values[errors["gain"] > 0.0245, 1] = np.nan
        return values

    s = simulate(sometimes, draws=1000)
    count = int((~np.isfinite(s.values[:, 1])).sum())
    assert 0 < count < 10
    assert s.failed.tolist() == [0, count, 0]
    assert s.unknown == (None, None, None)
    assert np.isfinite(s.standard_uncertainty).all()
    assert len(s.used) == 1000 - count


def test_many_failures_make_an_output_unknown_with_a_reason():
    def often(errors):
        values = energy(errors)
        values[errors["gain"] > 0.02, 1] = np.nan
        return values

    s = simulate(often, draws=1000)
    assert "of 1000 draws gave no value" in s.unknown[1]
    assert np.isnan(s.standard_uncertainty[1])
    assert np.isnan(s.interval().low[1])
    assert np.isnan(s.interval(kind="shortest").low[1])
    assert np.isfinite(s.standard_uncertainty[0])
    # The other outputs lose nothing by it.
    assert len(s.used) == 1000


def test_all_failed():
    s = simulate(lambda errors: energy(errors) * np.nan)
    assert np.isnan(s.mean).all()
    assert np.isnan(s.sampling_error().standard_uncertainty).all()
    assert all(s.unknown)


def test_progress_is_reported_in_the_callers_thread():
    seen = []
    simulate(progress=lambda done, total: seen.append((done, total, threading.current_thread())), draws=50)
    assert [entry[0] for entry in seen] == [16, 32, 48, 50] or seen[-1][:2] == (50, 50)
    assert {entry[2] for entry in seen} == {threading.main_thread()}


def test_errors_of_the_callable_come_through():
    with pytest.raises(ZeroDivisionError):
        simulate(lambda errors: 1 / 0)
    with pytest.raises(ValueError, match=r"shape \(16, 2\)"):
        simulate(lambda errors: energy(errors)[:, :2])


def test_numpy_error_state_reaches_the_threads():
    with np.errstate(divide="ignore"):
        s = simulate(lambda errors: energy(errors) / 0.0)
    assert s.failed.tolist() == [500] * 3


def test_samples_refuse_a_wrong_shape():
    with pytest.raises(ValueError, match="draws"):
        Samples(("a",), np.zeros((5, 2)))
    with pytest.raises(ValueError, match="probability"):
        simulate().interval(1.5)


def test_sampling_error_of_normal_draws():
    values = np.random.default_rng(1).standard_normal((20_000, 1))
    error = Samples(("a",), values).sampling_error()
    # Normal theory: u/√M, u/√(2M), and √(p(1-p)/M)/density(1.96) with density 0.05845; good to a few percent.
    assert error.mean[0] == pytest.approx(1 / 20_000**0.5, rel=0.03)
    assert error.standard_uncertainty[0] == pytest.approx(1 / 40_000**0.5, rel=0.05)
    assert error.high[0] == pytest.approx((0.025 * 0.975 / 20_000) ** 0.5 / 0.05845, rel=0.3)


def test_interval_covers_the_truth():
    """A mean square with noise, a gain and a common offset, surveyed 1000 times, each with its own error bar.

    The noise bias u² is subtracted; half-widths from 300 draws are good to 5 %, which costs less than 0.5 % coverage.
    """
    rng = np.random.default_rng(2024)
    u, g, c = 0.1, 0.01, 0.02
    truth = (X**2).mean()
    inside = []
    for survey in range(1000):
        measured = (X + u * rng.standard_normal(X.size) + c * rng.standard_normal()) * (1 + g * rng.standard_normal())
        sources = [
            Source("noise", ("x",), "random", u),
            Source("gain", ("x",), "systematic", g, relative=True),
            Source("offset", ("x",), "systematic", c),
        ]

        def evaluate(errors, measured=measured):
            return ((measured + errors["x"]) ** 2).mean(axis=1, keepdims=True) - u**2

        s = run(
            evaluate,
            sources,
            {"x": InputLayout(measured)},
            names=["q"],
            draws=300,
            seed=(1, survey),
            batch=300,
            workers=1,
        )
        value = (measured**2).mean() - u**2
        inside.append(abs(value - truth) <= s.interval().half_width[0])
    # 4 standard errors of a fraction of 0.95 from 1000 surveys: 2.8 %.
    assert abs(np.mean(inside) - 0.95) < 0.028
