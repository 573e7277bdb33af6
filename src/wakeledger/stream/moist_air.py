"""Density of moist air by the CIPM-2007 formula.

Picard, Davis, Gläser and Fujii, Metrologia 45 (2008) 149-155, for air with 400 ppm of carbon dioxide. The formula is
stated for the ranges in `PRESSURE_RANGE` and `TEMPERATURE_RANGE`; outside them it is evaluated all the same, and
`in_stated_range` says so.
"""

from __future__ import annotations

import math

#: Pressures the formula is stated for, Pa.
PRESSURE_RANGE = (60_000.0, 110_000.0)
#: Temperatures the formula is stated for, K.
TEMPERATURE_RANGE = (288.15, 300.15)

_GAS_CONSTANT = 8.314472
_MOLAR_MASS_DRY = 28.96546e-3
_MOLAR_MASS_WATER = 18.01528e-3


def in_stated_range(pressure: float, temperature: float) -> bool:
    """Whether the formula is stated for this pressure (Pa) and temperature (K)."""
    return (
        PRESSURE_RANGE[0] <= pressure <= PRESSURE_RANGE[1]
        and TEMPERATURE_RANGE[0] <= temperature <= TEMPERATURE_RANGE[1]
    )


def saturation_vapour_pressure(temperature: float) -> float:
    """Saturation pressure of water vapour, Pa, at a temperature in K."""
    exponent = (
        1.2378847e-5 * temperature * temperature - 1.9121316e-2 * temperature + 33.93711047 - 6.3431645e3 / temperature
    )
    return math.exp(exponent)


def enhancement_factor(pressure: float, temperature: float) -> float:
    """How much air at this pressure (Pa) and temperature (K) raises the saturation pressure, dimensionless."""
    celsius = temperature - 273.15
    return 1.00062 + 3.14e-8 * pressure + 5.6e-7 * celsius * celsius


def vapour_mole_fraction(pressure: float, temperature: float, relative_humidity: float) -> float:
    """Mole fraction of water vapour.

    Parameters
    ----------
    pressure, temperature : float
        Static pressure, Pa, and temperature, K.
    relative_humidity : float
        From 0 to 1.

    Returns
    -------
    float
    """
    saturation = saturation_vapour_pressure(temperature)
    return relative_humidity * enhancement_factor(pressure, temperature) * saturation / pressure


def compressibility(pressure: float, temperature: float, mole_fraction: float) -> float:
    """Compressibility factor Z of moist air.

    Parameters
    ----------
    pressure, temperature : float
        Static pressure, Pa, and temperature, K.
    mole_fraction : float
        Mole fraction of water vapour.

    Returns
    -------
    float
    """
    t, x = temperature - 273.15, mole_fraction
    ratio = pressure / temperature
    first = 1.58123e-6 + t * (-2.9331e-8 + 1.1043e-10 * t) + x * (5.707e-6 - 2.051e-8 * t)
    first += x * x * (1.9898e-4 - 2.376e-6 * t)
    return 1.0 - ratio * first + ratio * ratio * (1.83e-11 - 0.765e-8 * x * x)


def density(pressure: float, temperature: float, relative_humidity: float = 0.0) -> float:
    """Density of moist air, kg/m³.

    Parameters
    ----------
    pressure, temperature : float
        Static pressure, Pa, and temperature, K.
    relative_humidity : float
        From 0 (dry) to 1.

    Returns
    -------
    float

    Notes
    -----
    rho = p Ma / (Z R T) [1 - xv (1 - Mv/Ma)]; Picard et al., Metrologia 45 (2008) 149, with the molar mass of dry air
    28.965 46 g/mol that 400 ppm of carbon dioxide give.

    Examples
    --------
    >>> round(density(101325.0, 293.15, 0.5), 6)
    1.199314
    """
    x = vapour_mole_fraction(pressure, temperature, relative_humidity)
    z = compressibility(pressure, temperature, x)
    dry = pressure * _MOLAR_MASS_DRY / (z * _GAS_CONSTANT * temperature)
    return dry * (1.0 - x * (1.0 - _MOLAR_MASS_WATER / _MOLAR_MASS_DRY))
