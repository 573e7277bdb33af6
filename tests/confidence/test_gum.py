"""Published examples of the GUM (JCGM 100:2008, annex H) through the first-order law."""

import math

import numpy as np
import pytest

from wakeledger.confidence.linear import coverage_factor, propagate, second_order_variance, sensitivities
from wakeledger.core.errors import InputError


def test_h1_gauge_block():
    # Inputs: standard, difference and its parts, expansion coefficient difference, temperature difference.
    # Values and components: GUM H.1 (seen as restated in a public repository; check_values.md 7.1).
    standard, mean_temperature, expansion = 50_000_623.0, -0.1, 11.5e-6
    names = ["standard", "repeat", "bias", "random", "expansion_difference", "temperature_difference"]
    u = np.array([25.0, 5.8, 3.9, 6.7, 1e-6 / math.sqrt(3), 0.05 / math.sqrt(3)])
    dof = np.array([18.0, 24.0, 5.0, 8.0, 50.0, 2.0])
    c = np.array([1.0, 1.0, 1.0, 1.0, -standard * mean_temperature, -standard * expansion])
    result = propagate(c, u, degrees_of_freedom=dof)
    components = dict(zip(names, np.abs(result.components[0]), strict=True))
    # Five printed digits.
    assert components["temperature_difference"] == pytest.approx(16.599, abs=0.0005)
    assert components["expansion_difference"] == pytest.approx(2.88679, abs=0.0001)
    assert result.components[0, 5] < 0
    assert result.standard_uncertainty[0] == pytest.approx(31.66, abs=0.015)
    assert propagate(np.ones(3), [5.8, 3.9, 6.7]).standard_uncertainty[0] == pytest.approx(9.7, abs=0.05)
    nu = propagate(np.ones(3), [5.8, 3.9, 6.7], degrees_of_freedom=[24, 5, 8]).effective_degrees_of_freedom()[0]
    # The published 25.6 comes from the rounded 9.7.
    assert nu * (9.7 / np.hypot(np.hypot(5.8, 3.9), 6.7)) ** 4 == pytest.approx(25.6, abs=0.05)
    # H.1.6 combines the rounded list 25, 9.7, 2.9, 16.6 (dof 18, 25.6, 50, 2); 16.75 is recomputed, 16 from memory.
    h16 = propagate(np.ones(4), [25.0, 9.7, 2.9, 16.6], degrees_of_freedom=[18, 25.6, 50, 2])
    assert h16.effective_degrees_of_freedom()[0] == pytest.approx(16.75, abs=0.05)
    assert math.floor(result.effective_degrees_of_freedom()[0]) == 16
    k = coverage_factor(0.99, degrees_of_freedom=16)
    assert k == pytest.approx(2.92, abs=0.005)
    assert k * 32 == pytest.approx(93, abs=0.5)


def test_h1_with_second_order_terms():
    # GUM H.1.7: the products of expansion and temperature raise 32 nm to 34 nm (seen as restated publicly).
    def length(x):
        standard, difference, d1, d2, expansion, mean_temperature, expansion_difference, temperature_difference = x
        warming = expansion_difference * mean_temperature + expansion * temperature_difference
        return standard * (1 - warming) + difference + d1 + d2 - 50_000_000.0

    half = 1 / math.sqrt(3)
    # Temperature: mean u 0.2, cyclic 0.5 arcsine, together 0.41.
    values = [50_000_623.0, 215.0, 0.0, 0.0, 11.5e-6, -0.1, 0.0, 0.0]
    u = [25.0, 5.8, 3.9, 6.7, 2e-6 * half, math.hypot(0.2, 0.5 / math.sqrt(2)), 1e-6 * half, 0.05 * half]
    first = propagate(sensitivities(length, values, u), u).standard_uncertainty[0]
    second = second_order_variance(length, values, u)[0]
    assert first == pytest.approx(31.66, abs=0.015)
    assert math.sqrt(first**2 + second) == pytest.approx(34.0, abs=0.5)
    # The products of expansion difference and temperature, expansion and temperature difference: 11.7 and 1.7 nm.
    expected = (5e7 * u[5] * u[6]) ** 2 + (5e7 * u[4] * u[7]) ** 2
    assert second == pytest.approx(expected, rel=1e-4)


def test_second_order_of_a_cubic():
    # y = x^3 at 1 has the terms (36/2 + 3 6) u^4; at 0 they vanish, though a normal cube scatters by 15 u^6.
    assert second_order_variance(lambda x: x[0] ** 3, [1.0], [0.1])[0] == pytest.approx(36e-4, rel=0.02)
    assert second_order_variance(lambda x: x[0] ** 3, [0.0], [0.1])[0] == pytest.approx(0.0, abs=1e-4)


H2 = np.array(
    [
        [5.007, 0.019663, 1.0456],
        [4.994, 0.019639, 1.0438],
        [5.005, 0.019640, 1.0468],
        [4.990, 0.019685, 1.0428],
        [4.999, 0.019678, 1.0433],
    ]
)


def impedance(x):
    voltage, current, phase = x
    return np.array([np.cos(phase), np.sin(phase), 1.0]) * voltage / current


def test_h2_resistance_and_reactance():
    # GUM H.2; data seen in a public repository, results from memory and recomputed (check_values.md 7.1).
    mean, u = H2.mean(axis=0), H2.std(axis=0, ddof=1) / math.sqrt(5)
    r = np.corrcoef(H2.T)
    np.testing.assert_allclose(mean, [4.9990, 0.0196610, 1.04446], rtol=1e-6)
    np.testing.assert_allclose(u, [0.0032, 9.5e-6, 7.5e-4], rtol=0.01)
    np.testing.assert_allclose([r[0, 1], r[0, 2], r[1, 2]], [-0.3553, 0.8576, -0.6451], atol=5e-5)
    result = propagate(sensitivities(impedance, mean, u), u, correlation=r)
    np.testing.assert_allclose(impedance(mean), [127.732, 219.847, 254.260], atol=5e-4)
    np.testing.assert_allclose(result.standard_uncertainty, [0.071, 0.2956, 0.236], atol=5e-4)
    rho = result.correlation
    np.testing.assert_allclose([rho[0, 1], rho[0, 2], rho[1, 2]], [-0.588, -0.485, 0.993], atol=5e-4)
    # Without the correlations the uncertainty of R would be several times larger: they must have been used.
    assert propagate(sensitivities(impedance, mean, u), u).standard_uncertainty[0] > 2 * 0.071


def test_sensitivities_are_exact_for_a_quadratic():
    found = sensitivities(lambda x: x[0] ** 2 - 3 * x[1], [2.0, 5.0], [0.1, 0.2])
    np.testing.assert_allclose(found, [[4.0, -3.0]], rtol=1e-12)
    assert sensitivities(lambda x: x[0] * x[1], [2.0, 5.0], [0.1, 0.0])[0, 1] == 0.0


def test_degrees_of_freedom_refuse_correlated_inputs():
    result = propagate([1.0, 1.0], [1.0, 1.0], correlation=[[1, 0.5], [0.5, 1]], degrees_of_freedom=[5, 5])
    with pytest.raises(InputError, match="Monte Carlo"):
        result.effective_degrees_of_freedom()
    assert result.standard_uncertainty[0] == pytest.approx(math.sqrt(3), rel=1e-14)


def test_exact_inputs_have_infinite_degrees_of_freedom():
    assert propagate([1.0, 1.0], [1.0, 0.0]).effective_degrees_of_freedom()[0] == math.inf
    assert coverage_factor(0.95) == pytest.approx(1.959963984540054, rel=1e-9)


@pytest.mark.parametrize(
    ("arguments", "keywords"),
    [
        (([1.0, 1.0], [1.0]), {}),
        (([1.0], [-1.0]), {}),
        (([1.0], [1.0]), {"degrees_of_freedom": [0.0]}),
        (([1.0, 1.0], [1.0, 1.0]), {"correlation": [[1.0, 0.5], [0.4, 1.0]]}),
        (([1.0, 1.0], [1.0, 1.0]), {"correlation": [[2.0, 0.5], [0.5, 1.0]]}),
    ],
)
def test_wrong_inputs_are_refused(arguments, keywords):
    with pytest.raises(InputError):
        propagate(*arguments, **keywords)
