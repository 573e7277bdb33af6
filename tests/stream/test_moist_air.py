"""CIPM-2007 against values derived from the formula as published, and against CoolProp's humid air."""

import pytest

from wakeledger.stream import moist_air

# Picard et al., Metrologia 45 (2008) 149: derived with the published coefficients (no published worked value found).
# t in deg C, p, RH, rho, psv, f, xv, Z
CASES = [
    (20.0, 101325.0, 0.5, 1.199314, 2339.163, 1.0040256, 0.01158934, 0.99961477),
    (20.0, 101325.0, 0.0, 1.204557, None, None, 0.0, 0.99964314),
    (22.0, 99000.0, 0.45, 1.163610, 2645.180, 1.0039996, 0.01207163, 0.99964162),
    (25.0, 100000.0, 0.60, 1.160430, 3169.757, 1.0041100, 0.01909671, 0.99964385),
    (15.0, 101325.0, 0.0, 1.225521, 1705.669, None, 0.0, 0.99959221),
]


@pytest.mark.parametrize(("t", "p", "rh", "rho", "psv", "f", "xv", "z"), CASES)
def test_derived_values(t, p, rh, rho, psv, f, xv, z):
    temperature = t + 273.15
    # half a unit of the last digit given
    assert moist_air.density(p, temperature, rh) == pytest.approx(rho, abs=0.51e-6)
    if psv:
        assert moist_air.saturation_vapour_pressure(temperature) == pytest.approx(psv, abs=0.51e-3)
    if f:
        assert moist_air.enhancement_factor(p, temperature) == pytest.approx(f, abs=0.51e-7)
    assert moist_air.vapour_mole_fraction(p, temperature, rh) == pytest.approx(xv, abs=0.51e-8)
    assert moist_air.compressibility(p, temperature, xv) == pytest.approx(z, abs=0.51e-8)


@pytest.mark.parametrize(("t", "p", "rh"), [case[:3] for case in CASES])
def test_independent_formulation(t, p, rh):
    humid_air = pytest.importorskip("CoolProp.HumidAirProp")
    oracle = 1.0 / humid_air.HAPropsSI("Vha", "T", t + 273.15, "P", p, "R", rh)
    # the two formulations differ steadily by 3.7e-5 (other molar mass of dry air and virial coefficients)
    assert moist_air.density(p, t + 273.15, rh) == pytest.approx(oracle, rel=8e-5)


def test_humid_air_is_lighter():
    assert moist_air.density(1e5, 295.0, 0.9) < 0.995 * moist_air.density(1e5, 295.0, 0.0)


def test_stated_range():
    assert moist_air.in_stated_range(101325.0, 293.15)
    assert not moist_air.in_stated_range(101325.0, 313.15)
    assert not moist_air.in_stated_range(50000.0, 293.15)
