"""The standard atmosphere against published tables, the `ambiance` package and the hydrostatic equation."""

import numpy as np
import pytest

from wakeledger.core.errors import InputError
from wakeledger.stream import atmosphere
from wakeledger.stream.gas import GAS_CONSTANT, sound_speed, sutherland_viscosity

# US Standard Atmosphere 1976 on geopotential altitude: T, p, rho seen in public test tables of the standard
# (sea level: from memory, recomputed); a, mu derived.
GEOPOTENTIAL = [
    (0.0, 288.15, 101325.0, 1.2250, 340.294, 1.7894e-5),
    (5000.0, 255.65, 54019.9, 0.736116, 320.529, 1.6281e-5),
    (10000.0, 223.15, 26436.3, 0.412707, 299.463, 1.4571e-5),
    (11000.0, 216.65, 22632.06, 0.363918, 295.070, 1.4216e-5),
    (15000.0, 216.65, 12044.6, 0.193674, 295.070, 1.4216e-5),
    (20000.0, 216.65, 5474.889, 0.0880349, 295.070, 1.4216e-5),
]


@pytest.mark.parametrize(("altitude", "t", "p", "rho", "a", "mu"), GEOPOTENTIAL)
def test_geopotential_table(altitude, t, p, rho, a, mu):
    temperature, pressure = atmosphere.standard_temperature(altitude), atmosphere.standard_pressure(altitude)
    assert temperature == pytest.approx(t, rel=1e-12)
    # half a unit of the coarsest digit given and the 0.02 Pa between the two usual gas constants
    assert pressure == pytest.approx(p, abs=0.071)
    assert pressure / (GAS_CONSTANT * temperature) == pytest.approx(rho, rel=3e-6)
    assert sound_speed(temperature) == pytest.approx(a, abs=0.51e-3)
    assert sutherland_viscosity(temperature) == pytest.approx(mu, abs=0.51e-9)


@pytest.mark.parametrize(
    ("geometric", "geopotential", "p", "p_tolerance", "t"),
    [
        # Mechanical Engineers' Handbook vol. 4, table 6, prints p = 0.5405 bar; the value is computed to 0.1 Pa
        (5000.0, 4996.07, 54048.3, 0.06, 255.68),
        # same table: 22 700 Pa
        (11000.0, 10981.0, 22699.9, 0.06, 216.77),
        # from memory, recomputed
        (20000.0, 19937.3, 5529.3, 0.06, 216.65),
    ],
)
def test_geometric_altitude(geometric, geopotential, p, p_tolerance, t):
    altitude = atmosphere.geopotential_altitude(geometric)
    assert altitude == pytest.approx(geopotential, abs=0.06 if geometric != 11000.0 else 0.51)
    assert atmosphere.standard_pressure(altitude) == pytest.approx(p, abs=p_tolerance)
    assert atmosphere.standard_temperature(altitude) == pytest.approx(t, abs=0.0051)
    assert atmosphere.geometric_altitude(altitude) == pytest.approx(geometric, rel=1e-12)


@pytest.mark.parametrize(
    "geometric", [-4000.0, 0.0, 3048.0, 11019.1, 15000.0, 25000.0, 40000.0, 49000.0, 60000.0, 75000.0]
)
def test_against_ambiance(geometric):
    ambiance = pytest.importorskip("ambiance")
    oracle = ambiance.Atmosphere(geometric)
    altitude = atmosphere.geopotential_altitude(geometric)
    pressure_tolerance = 1e-12 if 0.0 <= altitude < 11000.0 else 5e-6
    # the same standard; its base pressures are tabulated to six digits (5e-6), its sea level is exact
    assert atmosphere.standard_temperature(altitude) == pytest.approx(float(oracle.temperature[0]), rel=1e-12)
    assert atmosphere.standard_pressure(altitude) == pytest.approx(float(oracle.pressure[0]), rel=pressure_tolerance)


@pytest.mark.parametrize(
    "altitude", [-3000.0, 0.0, 5000.0, 11000.0, 18000.0, 25000.0, 40000.0, 50000.0, 60000.0, 75000.0]
)
def test_pressure_altitude_is_the_inverse(altitude):
    pressure = atmosphere.standard_pressure(altitude)
    assert atmosphere.pressure_altitude_from_pressure(pressure) == pytest.approx(altitude, rel=1e-10, abs=1e-6)


@pytest.mark.parametrize("offset", [-25.0, 0.0, 20.0])
def test_warm_and_cold_days_are_hydrostatic(offset):
    """dp/dH = -rho g0 with the offset temperature, by a central difference over geopotential altitude."""
    for target in (2000.0, 9000.0, 14000.0, 24000.0):
        step = 5.0
        pressures = []
        for altitude in (target - step, target, target + step):
            geometric = atmosphere.geometric_altitude(altitude)
            reached = atmosphere.pressure_altitude_from_altitude(geometric, isa_offset=offset)
            pressures.append(atmosphere.standard_pressure(reached))
        reached = atmosphere.pressure_altitude_from_pressure(pressures[1])
        temperature = atmosphere.standard_temperature(reached, isa_offset=offset)
        slope = (pressures[2] - pressures[0]) / (2 * step)
        # truncation of the difference: (step/scale height)^2/6 = 8e-8
        assert slope == pytest.approx(-atmosphere.GRAVITY * pressures[1] / (GAS_CONSTANT * temperature), rel=1e-6)


def test_warm_air_carries_its_pressure_higher():
    warm = atmosphere.pressure_altitude_from_altitude(3000.0, isa_offset=15.0)
    assert warm == pytest.approx(3000.0 - 15.0 * 3000.0 / 278.0, abs=10.0)
    assert atmosphere.standard_temperature(3000.0, isa_offset=15.0) == pytest.approx(268.65 + 15.0)


def test_sea_level_is_the_same_on_every_day():
    assert atmosphere.pressure_altitude_from_altitude(0.0, isa_offset=20.0) == pytest.approx(0.0, abs=1e-9)


@pytest.mark.parametrize("altitude", [-6000.0, 90000.0, np.nan])
def test_outside_the_standard(altitude):
    with pytest.raises(InputError, match="covers"):
        atmosphere.standard_pressure(altitude)


@pytest.mark.parametrize("pressure", [0.0, -5.0, 0.5, 3e5])
def test_pressure_that_does_not_occur(pressure):
    with pytest.raises(InputError, match="absolute"):
        atmosphere.pressure_altitude_from_pressure(pressure)
