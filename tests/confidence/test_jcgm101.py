"""Published examples of JCGM 101:2008, clause 9, through the same Source and run that a survey uses.

The published figures are from memory and were recomputed (check_values.md 7.2). Tolerances: four standard errors of the
figure at the number of draws used, plus half a unit of the last printed digit.
"""

import numpy as np
import pytest

from wakeledger.confidence.montecarlo import run
from wakeledger.confidence.sources import InputLayout, Source

DRAWS = 200_000


def propagate(function, inputs, *, draws=DRAWS):
    """Run y = function(**inputs) with inputs name -> (value, u, distribution, degrees of freedom)."""
    layouts = {name: InputLayout(spec[0]) for name, spec in inputs.items()}
    sources = [
        Source(name, (name,), "systematic", spec[1], distribution=spec[2], degrees_of_freedom=(*spec, np.inf)[3])
        for name, spec in inputs.items()
    ]

    def evaluate(errors):
        return function(**{name: inputs[name][0] + errors[name] for name in inputs})[:, None]

    return run(evaluate, sources, layouts, names=["y"], draws=draws, seed=101, batch=20_000)


def close(found, published, standard_error, digit):
    return abs(found - published) <= 4 * standard_error + digit / 2


def test_9_2_2_four_normals():
    s = propagate(lambda **x: sum(x.values()), {f"x{i}": (0.0, 1.0, "normal") for i in range(4)})
    error = s.sampling_error()
    assert close(s.standard_uncertainty[0], 2.00, error.standard_uncertainty[0], 0.01)
    for kind in ("symmetric", "shortest"):
        interval = s.interval(kind=kind)
        assert close(interval.half_width[0], 3.92, error.high[0], 0.01)
        # The shortest interval's place is less certain than its length: the ends only move together.
        assert close(interval.low[0], -3.92, error.low[0] * (1 if kind == "symmetric" else 4), 0.01)
    assert close(s.coverage_factor()[0], 1.96, error.coverage_factor[0], 0.0)


def test_9_2_3_four_rectangular():
    s = propagate(lambda **x: sum(x.values()), {f"x{i}": (0.0, 1.0, "rectangular") for i in range(4)})
    error = s.sampling_error()
    assert close(s.standard_uncertainty[0], 2.00, error.standard_uncertainty[0], 0.01)
    interval = s.interval()
    assert close(interval.low[0], -3.88, error.low[0], 0.01)
    assert close(interval.high[0], 3.88, error.high[0], 0.01)
    # The normal law would give 3.92; the published difference must be seen.
    assert interval.half_width[0] < 3.91


def test_9_2_4_one_dominant_rectangular():
    inputs = {f"x{i}": (0.0, 10.0 if i == 3 else 1.0, "rectangular") for i in range(4)}
    s = propagate(lambda **x: sum(x.values()), inputs)
    error = s.sampling_error()
    assert close(s.standard_uncertainty[0], 10.1, error.standard_uncertainty[0], 0.1)
    interval = s.interval()
    assert close(interval.low[0], -17.0, error.low[0], 0.1)
    assert close(interval.high[0], 17.0, error.high[0], 0.1)


def test_9_3_mass_calibration():
    half = 1 / np.sqrt(3)
    inputs = {
        "m": (100_000.0, 0.050, "normal"),
        "dm": (1.234, 0.020, "normal"),
        "air": (1.20, 0.10 * half, "rectangular"),
        "weight": (8000.0, 1000 * half, "rectangular"),
        "reference": (8000.0, 50 * half, "rectangular"),
    }

    def deviation(m, dm, air, weight, reference):
        return (m + dm) * (1 + (air - 1.2) * (1 / weight - 1 / reference)) - 100_000.0

    s = propagate(deviation, inputs)
    error = s.sampling_error()
    assert close(s.mean[0], 1.2341, error.mean[0], 0.0001)
    assert close(s.standard_uncertainty[0], 0.0754, error.standard_uncertainty[0], 0.0001)
    # The published interval is the shortest one and noisy; 0.003 is what 5e4 draws move it by.
    interval = s.interval(kind="shortest")
    assert abs(interval.low[0] - 1.0834) < 0.003
    assert abs(interval.high[0] - 1.3825) < 0.003


@pytest.mark.parametrize(("x1", "mean", "u"), [(0.0, 50e-6, 50e-6), (0.010, 150e-6, 112e-6), (0.050, 2550e-6, 502e-6)])
def test_9_4_sum_of_squares(x1, mean, u):
    # Exact: mean x1² + 2u², variance 4u²x1² + 4u⁴. First order would give u = 0 at x1 = 0.
    s = propagate(lambda a, b: a**2 + b**2, {"a": (x1, 0.005, "normal"), "b": (0.0, 0.005, "normal")})
    error = s.sampling_error()
    assert close(s.mean[0], mean, error.mean[0], 0.0)
    assert close(s.standard_uncertainty[0], u, error.standard_uncertainty[0], 1e-6)
    if x1 == 0.0:
        assert s.interval(kind="shortest").low[0] < 1e-8
        assert np.isclose(s.interval().low[0], -50e-6 * np.log(0.975), rtol=0.05)


def test_9_5_gauge_block():
    half = 1 / np.sqrt(3)
    inputs = {
        "standard": (50_000_623.0, 25.0, "normal", 18),
        "difference": (215.0, 6.0, "normal", 24),
        "d1": (0.0, 4.0, "normal", 5),
        "d2": (0.0, 7.0, "normal", 8),
        "expansion": (11.5e-6, 2e-6 * half, "rectangular"),
        "mean_temperature": (-0.1, 0.2, "normal"),
        "cycle": (0.0, 0.5 / np.sqrt(2), "arcsine"),
        "expansion_difference": (0.0, 1e-6 * half, "rectangular", 50),
        "temperature_difference": (0.0, 0.050 * half, "rectangular", 2),
    }

    def deviation(
        standard, difference, d1, d2, expansion, mean_temperature, cycle, expansion_difference, temperature_difference
    ):
        warm = mean_temperature + cycle
        length = standard * (1 + expansion * (warm - temperature_difference))
        gauge = (length + difference + d1 + d2) / (1 + (expansion + expansion_difference) * warm)
        return gauge - 50_000_000.0

    s = propagate(deviation, inputs)
    error = s.sampling_error(0.99)
    # check_values.md 7.2: 838 nm, u 36 (recomputed 35.8), 99 % about [745, 932] (recomputed [743.7, 931.0]).
    assert close(s.mean[0], 838.0, error.mean[0], 1.0)
    assert close(s.standard_uncertainty[0], 36.0, error.standard_uncertainty[0], 1.0)
    interval = s.interval(0.99)
    assert close(interval.low[0], 743.7, error.low[0], 1.0)
    assert close(interval.high[0], 931.0, error.high[0], 1.0)
