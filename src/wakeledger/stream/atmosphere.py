"""The International Standard Atmosphere, also on days that are warmer or colder.

ISO 2533 and the US Standard Atmosphere 1976, which agree up to 32 km. Scalars only: a survey has one stream. Three
altitudes are told apart: *geometric* (above mean sea level), *geopotential* (geometric, with the decrease of gravity
taken out) and *pressure altitude* (the geopotential altitude at which the standard atmosphere has this pressure).
"""

from __future__ import annotations

import math
from bisect import bisect_right

from wakeledger.core.errors import InputError
from wakeledger.stream.gas import GAS_CONSTANT

GRAVITY = 9.80665
EARTH_RADIUS = 6_356_766.0
SEA_LEVEL_TEMPERATURE = 288.15
SEA_LEVEL_PRESSURE = 101_325.0
SEA_LEVEL_DENSITY = SEA_LEVEL_PRESSURE / (GAS_CONSTANT * SEA_LEVEL_TEMPERATURE)
#: Geopotential altitudes covered, m.
ALTITUDE_RANGE = (-5_000.0, 80_000.0)

#: Base altitude of each layer, m, and the temperature gradient in it, K/m.
_BASES = (0.0, 11_000.0, 20_000.0, 32_000.0, 47_000.0, 51_000.0, 71_000.0)
_GRADIENTS = (-6.5e-3, 0.0, 1.0e-3, 2.8e-3, 0.0, -2.8e-3, -2.0e-3)


def _step(layer: int, temperature: float, rise: float) -> float:
    """Pressure ratio over a rise (m) from the base of a layer, where the temperature is given."""
    gradient = _GRADIENTS[layer]
    if gradient == 0.0:
        return math.exp(-GRAVITY * rise / (GAS_CONSTANT * temperature))
    return float((1.0 + gradient * rise / temperature) ** (-GRAVITY / (GAS_CONSTANT * gradient)))


def _layers() -> tuple[tuple[float, ...], tuple[float, ...]]:
    temperatures, pressures = [SEA_LEVEL_TEMPERATURE], [SEA_LEVEL_PRESSURE]
    for layer in range(len(_BASES) - 1):
        rise = _BASES[layer + 1] - _BASES[layer]
        pressures.append(pressures[layer] * _step(layer, temperatures[layer], rise))
        temperatures.append(temperatures[layer] + _GRADIENTS[layer] * rise)
    return tuple(temperatures), tuple(pressures)


_TEMPERATURES, _PRESSURES = _layers()


def _layer_at(altitude: float) -> int:
    if not ALTITUDE_RANGE[0] <= altitude <= ALTITUDE_RANGE[1]:
        raise InputError(
            f"an altitude of {altitude:g} m is outside the standard atmosphere",
            remedy=f"it covers {ALTITUDE_RANGE[0]:g} m to {ALTITUDE_RANGE[1]:g} m",
        )
    return max(bisect_right(_BASES, altitude) - 1, 0)


def geopotential_altitude(geometric: float) -> float:
    """Geopotential altitude, m, of a geometric altitude, m."""
    return EARTH_RADIUS * geometric / (EARTH_RADIUS + geometric)


def geometric_altitude(geopotential: float) -> float:
    """Geometric altitude, m, of a geopotential altitude, m."""
    return EARTH_RADIUS * geopotential / (EARTH_RADIUS - geopotential)


def standard_temperature(pressure_altitude: float, *, isa_offset: float = 0.0) -> float:
    """Static temperature, K.

    Parameters
    ----------
    pressure_altitude : float
        Pressure altitude (geopotential altitude, on a standard day), m.
    isa_offset : float
        How much warmer than the standard the air is at every pressure, K.

    Returns
    -------
    float

    Raises
    ------
    InputError
        If the altitude is outside `ALTITUDE_RANGE`.

    Examples
    --------
    >>> standard_temperature(5000.0, isa_offset=10.0)
    265.65
    """
    layer = _layer_at(pressure_altitude)
    return _TEMPERATURES[layer] + _GRADIENTS[layer] * (pressure_altitude - _BASES[layer]) + isa_offset


def standard_pressure(pressure_altitude: float) -> float:
    """Static pressure, Pa.

    Parameters
    ----------
    pressure_altitude : float
        Pressure altitude (geopotential altitude, on a standard day), m.

    Returns
    -------
    float

    Raises
    ------
    InputError
        If the altitude is outside `ALTITUDE_RANGE`.

    Examples
    --------
    >>> round(standard_pressure(5000.0), 1)
    54019.9
    """
    layer = _layer_at(pressure_altitude)
    return _PRESSURES[layer] * _step(layer, _TEMPERATURES[layer], pressure_altitude - _BASES[layer])


def pressure_altitude_from_pressure(pressure: float) -> float:
    """Pressure altitude, m, of a static pressure: the inverse of `standard_pressure`.

    Parameters
    ----------
    pressure : float
        Static pressure, Pa.

    Returns
    -------
    float

    Raises
    ------
    InputError
        If the pressure does not occur within `ALTITUDE_RANGE`.
    """
    if not pressure > 0.0:
        raise InputError(f"a static pressure of {pressure:g} Pa has no pressure altitude", remedy="give it absolute")
    layer = len(_PRESSURES) - 1
    while layer > 0 and pressure > _PRESSURES[layer]:
        layer -= 1
    ratio, temperature, gradient = pressure / _PRESSURES[layer], _TEMPERATURES[layer], _GRADIENTS[layer]
    if gradient == 0.0:
        rise = -math.log(ratio) * GAS_CONSTANT * temperature / GRAVITY
    else:
        rise = temperature / gradient * (ratio ** (-GAS_CONSTANT * gradient / GRAVITY) - 1.0)
    altitude = float(_BASES[layer] + rise)
    if not ALTITUDE_RANGE[0] - 1e-6 <= altitude <= ALTITUDE_RANGE[1] + 1e-6:
        raise InputError(
            f"a static pressure of {pressure:g} Pa does not occur in the standard atmosphere",
            remedy="give an absolute static pressure",
        )
    return altitude


def _thickness_per_kelvin(pressure_altitude: float) -> float:
    """Integral of dh/T from sea level to an altitude of the standard atmosphere, m/K."""
    total = 0.0
    last = _layer_at(pressure_altitude)
    for layer in range(last + 1):
        top = pressure_altitude if layer == last else _BASES[layer + 1]
        rise, temperature, gradient = top - _BASES[layer], _TEMPERATURES[layer], _GRADIENTS[layer]
        total += rise / temperature if gradient == 0.0 else math.log1p(gradient * rise / temperature) / gradient
    return total


def pressure_altitude_from_altitude(geometric: float, *, isa_offset: float = 0.0) -> float:
    """Pressure altitude, m, at a geometric altitude above mean sea level.

    Parameters
    ----------
    geometric : float
        Geometric altitude, m.
    isa_offset : float
        How much warmer than the standard the air is at every pressure, K.

    Returns
    -------
    float

    Raises
    ------
    InputError
        If the altitude is outside `ALTITUDE_RANGE`.

    Notes
    -----
    The sea-level pressure is the standard one. In warm air the pressure falls more slowly: hydrostatics give
    dH = dHp (T + isa_offset)/T, so H = Hp + isa_offset * integral of dHp/T, solved for Hp by Newton's method.
    """
    target = geopotential_altitude(geometric)
    altitude = target
    if isa_offset == 0.0:
        return altitude
    for _ in range(50):
        error = altitude + isa_offset * _thickness_per_kelvin(altitude) - target
        change = error / (1.0 + isa_offset / standard_temperature(altitude))
        altitude -= change
        if abs(change) < 1e-9 * max(abs(target), 1.0):
            break
    return altitude
