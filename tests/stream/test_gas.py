"""Perfect-gas relations against NACA Report 1135 and Sutherland's law.

Table values are given to the last printed digit, so the tolerance is half a unit of that digit.
"""

import numpy as np
import pytest

from wakeledger.stream import gas

# NACA Report 1135, gamma 1.4: from memory, recomputed from first principles to the digits shown.
# M, p/pt, T/Tt, rho/rhot, qc/p, qc/q, pitot p02/p1, p02/p01
NACA_1135 = [
    (0.1, 0.993031, 0.998004, 0.995017, 0.007018, 1.002503, None, None),
    (0.2, 0.972497, 0.992063, 0.980277, 0.028281, 1.010040, None, None),
    (0.3, 0.939470, 0.982318, 0.956380, 0.064430, 1.022703, None, None),
    (0.5, 0.843019, 0.952381, 0.885170, 0.186213, 1.064072, None, None),
    (0.8, 0.656022, 0.886525, 0.739992, 0.524340, 1.170402, None, None),
    (1.0, 0.528282, 0.833333, 0.633938, 0.892929, 1.275613, 1.892929, 1.0),
    (1.5, 0.272403, 0.689655, 0.394984, 2.671031, 1.695892, 3.413275, 0.929787),
    (2.0, 0.127805, 0.555556, 0.230048, 6.824449, 2.437303, 5.640441, 0.720874),
    (3.0, 0.027224, 0.357143, 0.076226, 35.73272, 5.671861, 12.060965, 0.328344),
]
LAST_DIGIT = 0.51e-6


@pytest.mark.parametrize(("mach", "p", "t", "rho", "qc_p", "qc_q", "pitot", "shock"), NACA_1135)
def test_isentropic_and_pitot_table(mach, p, t, rho, qc_p, qc_q, pitot, shock):
    assert gas.pressure_ratio(mach) == pytest.approx(p, abs=LAST_DIGIT)
    assert gas.temperature_ratio(mach) == pytest.approx(t, abs=LAST_DIGIT)
    assert gas.density_ratio(mach) == pytest.approx(rho, abs=LAST_DIGIT)
    impact = 1.0 / gas.pressure_ratio(mach) - 1.0
    assert impact == pytest.approx(qc_p, abs=LAST_DIGIT if mach < 3 else 0.51e-5)
    assert impact / (0.7 * mach**2) == pytest.approx(qc_q, abs=LAST_DIGIT)
    assert gas.mach_from_pressure_ratio(gas.pressure_ratio(mach)) == pytest.approx(mach, rel=1e-12)
    if pitot is not None:
        assert gas.pitot_pressure_ratio(mach) == pytest.approx(pitot, abs=LAST_DIGIT)
        assert gas.normal_shock_total_pressure_ratio(mach) == pytest.approx(shock, abs=LAST_DIGIT)
    else:
        assert gas.pitot_pressure_ratio(mach) == pytest.approx(1.0 / p, rel=1e-6)


def test_pitot_inverse_covers_both_branches():
    mach = np.array([0.05, 0.5, 0.999, 1.0, 1.001, 1.7, 3.0, 5.0])
    # Newton's method is stopped at 1e-13 of the Mach number
    np.testing.assert_allclose(gas.mach_from_pitot(gas.pitot_pressure_ratio(mach)), mach, rtol=1e-10)
    assert isinstance(gas.mach_from_pitot(1.2), float)
    assert gas.mach_from_pitot(gas.pitot_pressure_ratio(2.5)) == pytest.approx(2.5, rel=1e-10)


def test_no_mach_number_without_a_real_state():
    assert np.isnan(gas.mach_from_pressure_ratio(1.01))


def test_no_shock_below_mach_one():
    with pytest.raises(ValueError, match="at least 1"):
        gas.normal_shock_total_pressure_ratio(0.9)


@pytest.mark.parametrize(
    ("temperature", "viscosity"),
    # derived from the law of the US Standard Atmosphere 1976, six digits
    [
        (250.0, 1.59913e-5),
        (273.15, 1.71608e-5),
        (288.15, 1.78938e-5),
        (300.0, 1.84600e-5),
        (350.0, 2.07360e-5),
        (400.0, 2.28527e-5),
    ],
)
def test_sutherland(temperature, viscosity):
    assert gas.sutherland_viscosity(temperature) == pytest.approx(viscosity, abs=0.51e-10)


def test_arrays_keep_their_shape():
    mach = np.linspace(0.1, 2.0, 6).reshape(2, 3)
    for function in (gas.pressure_ratio, gas.pitot_pressure_ratio, gas.mach_from_pressure_ratio, gas.sound_speed):
        assert function(mach / 4).shape == (2, 3)
