"""Clause 8 of JCGM 101:2008 on its own examples (clause 9), through the package's first order, draws and comparison.

The published figures are from memory and were recomputed (check_values.md 7.2).
"""

import math

import numpy as np
import pytest

from wakeledger.confidence.linear import coverage_factor, propagate, sensitivities
from wakeledger.confidence.montecarlo import run
from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.confidence.validation import compare_with_samples, numerical_tolerance

HALF = 1 / math.sqrt(3)


def both(function, inputs, *, draws=200_000, digits=2, kind="symmetric"):
    """First order and draws of y = f(x) for inputs name -> (value, u, distribution)."""
    names = list(inputs)
    x, u = (np.array([inputs[name][k] for name in names]) for k in (0, 1))
    found = propagate(sensitivities(lambda values: function(**dict(zip(names, values, strict=True))), x, u), u)
    layouts = {name: InputLayout(inputs[name][0]) for name in names}
    sources = [Source(name, (name,), "systematic", inputs[name][1], distribution=inputs[name][2]) for name in names]

    def evaluate(errors):
        return function(**{name: inputs[name][0] + errors[name] for name in names})[:, None]

    samples = run(evaluate, sources, layouts, names=["y"], draws=draws, seed=11, batch=20_000)
    value = np.atleast_1d(function(**dict(zip(names, x, strict=True))))
    half = coverage_factor(0.95) * found.standard_uncertainty
    return value, half, found, samples, compare_with_samples(value, half, samples, digits=digits, kind=kind)


def total(**x):
    return sum(x.values())


def test_9_2_2_normal_is_validated():
    _, half, found, _, comparison = both(total, {f"x{i}": (0.0, 1.0, "normal") for i in range(4)})
    assert found.standard_uncertainty[0] == pytest.approx(2.0, rel=1e-12)
    assert half[0] == pytest.approx(3.92, abs=0.005)
    assert comparison.tolerance[0] == 0.05
    assert comparison.verdict == ("validated",)


def test_9_2_3_rectangular_differs_by_four_hundredths():
    # GUM [-3.92, 3.92], Monte Carlo [-3.88, 3.88]: validated at two digits, not at three.
    inputs = {f"x{i}": (0.0, 1.0, "rectangular") for i in range(4)}
    _, half, _, _, comparison = both(total, inputs, digits=2)
    assert half[0] == pytest.approx(3.92, abs=0.005)
    assert comparison.low[0] == pytest.approx(0.04, abs=0.02)
    assert comparison.verdict == ("validated",)
    assert both(total, inputs, digits=3)[-1].verdict == ("not_validated",)


def test_9_2_4_one_dominant_rectangular_is_not_validated():
    inputs = {f"x{i}": (0.0, 10.0 if i == 3 else 1.0, "rectangular") for i in range(4)}
    _, half, found, samples, comparison = both(total, inputs)
    assert found.standard_uncertainty[0] == pytest.approx(10.1, abs=0.05)
    assert half[0] == pytest.approx(19.9, abs=0.05)
    assert samples.interval().half_width[0] == pytest.approx(17.0, abs=0.1)
    assert comparison.low[0] == pytest.approx(2.9, abs=0.1)
    assert comparison.tolerance[0] == 0.5
    assert comparison.verdict == ("not_validated",)


def test_9_3_mass_calibration_first_order_is_not_validated():
    inputs = {
        "m": (100_000.0, 0.050, "normal"),
        "dm": (1.234, 0.020, "normal"),
        "air": (1.20, 0.10 * HALF, "rectangular"),
        "weight": (8000.0, 1000 * HALF, "rectangular"),
        "reference": (8000.0, 50 * HALF, "rectangular"),
    }

    def deviation(m, dm, air, weight, reference):
        return (m + dm) * (1 + (air - 1.2) * (1 / weight - 1 / reference)) - 100_000.0

    value, half, found, samples, comparison = both(deviation, inputs, digits=1, kind="shortest")
    # GUM first order: 1.2340 with u 0.0539 and [1.1285, 1.3395]; Monte Carlo u 0.0754.
    assert found.standard_uncertainty[0] == pytest.approx(0.0539, abs=0.00005)
    assert value[0] - half[0] == pytest.approx(1.1285, abs=0.0001)
    assert value[0] + half[0] == pytest.approx(1.3395, abs=0.0001)
    assert samples.standard_uncertainty[0] == pytest.approx(0.0754, abs=0.0004)
    assert comparison.tolerance[0] == 0.005
    assert comparison.low[0] == pytest.approx(0.045, abs=0.004)
    assert comparison.verdict == ("not_validated",)


def test_too_few_draws_decide_nothing():
    _, _, _, _, comparison = both(total, {f"x{i}": (0.0, 1.0, "normal") for i in range(300)}, draws=200, digits=3)
    assert comparison.low[0] > comparison.tolerance[0]
    assert comparison.verdict == ("undecided",)


@pytest.mark.parametrize(
    ("u", "digits", "expected"),
    # JCGM 101:2008, 7.9.2, examples 1 and 2 (from memory): 0.00035 g with two digits, 2 K with one.
    [(0.00035, 2, 0.000005), (2.0, 1, 0.5), (9.96, 2, 0.5), (0.0754, 1, 0.005)],
)
def test_numerical_tolerance(u, digits, expected):
    assert numerical_tolerance(u, digits=digits) == pytest.approx(expected, rel=1e-12)


def test_no_uncertainty_has_no_tolerance():
    assert math.isnan(numerical_tolerance(0.0))
    assert math.isnan(numerical_tolerance(math.nan))
