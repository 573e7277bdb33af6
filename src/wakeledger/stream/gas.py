"""Relations of a calorically perfect gas, and the viscosity of air.

Ratios are static over total, as in NACA Report 1135 (Ames Research Staff, 1953). Everything takes and gives scalars or
arrays of any shape.
"""

from __future__ import annotations

from typing import Any, TypeVar

import numpy as np

from wakeledger.core.grid import Array

#: Ratio of the specific heats of air.
GAMMA = 1.4
#: Gas constant of dry air, J kg⁻¹ K⁻¹ (US Standard Atmosphere 1976).
GAS_CONSTANT = 287.05287

Number = TypeVar("Number", float, Array)


def _like(values: Any) -> Any:
    """A plain number where an array has no dimension."""
    return values[()]


def sound_speed(temperature: Number, *, gamma: float = GAMMA, gas_constant: float = GAS_CONSTANT) -> Number:
    """Speed of sound, m/s, a = sqrt(gamma R T).

    Parameters
    ----------
    temperature : float or ndarray
        Static temperature, K.
    gamma, gas_constant : float
        Ratio of the specific heats; gas constant, J kg⁻¹ K⁻¹.

    Returns
    -------
    float or ndarray

    Examples
    --------
    >>> round(sound_speed(288.15), 3)
    340.294
    """
    result: Number = (gamma * gas_constant * temperature) ** 0.5
    return result


def temperature_ratio(mach: Number, *, gamma: float = GAMMA) -> Number:
    """Static over total temperature, T/T0 = 1/(1 + (gamma-1)/2 M^2).

    Parameters
    ----------
    mach : float or ndarray
        Mach number.
    gamma : float
        Ratio of the specific heats.

    Returns
    -------
    float or ndarray
    """
    result: Number = 1.0 / (1.0 + 0.5 * (gamma - 1.0) * mach * mach)
    return result


def pressure_ratio(mach: Number, *, gamma: float = GAMMA) -> Number:
    """Static over total pressure of isentropic flow, p/p0 = (T/T0)^(gamma/(gamma-1)).

    Parameters
    ----------
    mach : float or ndarray
        Mach number.
    gamma : float
        Ratio of the specific heats.

    Returns
    -------
    float or ndarray
    """
    result: Number = temperature_ratio(mach, gamma=gamma) ** (gamma / (gamma - 1.0))
    return result


def density_ratio(mach: Number, *, gamma: float = GAMMA) -> Number:
    """Static over total density of isentropic flow, rho/rho0 = (T/T0)^(1/(gamma-1)).

    Parameters
    ----------
    mach : float or ndarray
        Mach number.
    gamma : float
        Ratio of the specific heats.

    Returns
    -------
    float or ndarray
    """
    result: Number = temperature_ratio(mach, gamma=gamma) ** (1.0 / (gamma - 1.0))
    return result


def mach_from_pressure_ratio(ratio: Number, *, gamma: float = GAMMA) -> Number:
    """Mach number from static over total pressure, the inverse of `pressure_ratio`.

    Parameters
    ----------
    ratio : float or ndarray
        p/p0, above 0 and at most 1; NaN beyond 1, where no real flow state exists.
    gamma : float
        Ratio of the specific heats.

    Returns
    -------
    float or ndarray
    """
    square = (ratio ** -((gamma - 1.0) / gamma) - 1.0) * (2.0 / (gamma - 1.0))
    result: Number = _like(np.sqrt(np.where(square < 0.0, np.nan, square)))
    return result


def pitot_pressure_ratio(mach: Number, *, gamma: float = GAMMA) -> Number:
    """Pressure in a pitot tube over the stream's static pressure.

    Parameters
    ----------
    mach : float or ndarray
        Mach number of the stream.
    gamma : float
        Ratio of the specific heats.

    Returns
    -------
    float or ndarray

    Notes
    -----
    Isentropic up to Mach 1, Rayleigh's formula (total pressure behind a normal shock) above it:
    p02/p1 = ((gamma+1)/2 M^2)^(gamma/(gamma-1)) ((gamma+1)/(2 gamma M^2 - (gamma-1)))^(1/(gamma-1)).
    """
    subsonic = 1.0 / pressure_ratio(mach, gamma=gamma)
    square = np.maximum(np.square(mach), 1.0)
    rayleigh = (0.5 * (gamma + 1.0) * square) ** (gamma / (gamma - 1.0)) * (
        (gamma + 1.0) / (2.0 * gamma * square - (gamma - 1.0))
    ) ** (1.0 / (gamma - 1.0))
    result: Number = _like(np.where(np.greater(mach, 1.0), rayleigh, subsonic))
    return result


def mach_from_pitot(ratio: Number, *, gamma: float = GAMMA) -> Number:
    """Mach number of the stream from pitot over static pressure, the inverse of `pitot_pressure_ratio`.

    Parameters
    ----------
    ratio : float or ndarray
        Pitot over static pressure, at least 1.
    gamma : float
        Ratio of the specific heats.

    Returns
    -------
    float or ndarray
    """
    isentropic = mach_from_pressure_ratio(1.0 / ratio, gamma=gamma)
    supersonic = np.greater(isentropic, 1.0)
    if not np.any(supersonic):
        return isentropic
    from scipy import optimize

    target = np.where(supersonic, ratio, pitot_pressure_ratio(2.0, gamma=gamma))
    start = np.where(supersonic, np.sqrt(target / pitot_pressure_ratio(1.0, gamma=gamma)), 2.0)
    solved = optimize.newton(
        lambda guess: pitot_pressure_ratio(np.asarray(guess), gamma=gamma) / target - 1.0, start, tol=1e-13
    )
    result: Number = _like(np.where(supersonic, solved, isentropic))
    return result


def normal_shock_total_pressure_ratio(mach: Number, *, gamma: float = GAMMA) -> Number:
    """Total pressure behind a normal shock over that ahead of it, p02/p01.

    Parameters
    ----------
    mach : float or ndarray
        Mach number ahead of the shock, at least 1.
    gamma : float
        Ratio of the specific heats.

    Returns
    -------
    float or ndarray

    Raises
    ------
    ValueError
        If any Mach number is below 1, where there is no shock.
    """
    if np.any(np.less(mach, 1.0)):
        raise ValueError(f"a normal shock needs a Mach number of at least 1, {np.min(mach)} was given")
    result: Number = pitot_pressure_ratio(mach, gamma=gamma) * pressure_ratio(mach, gamma=gamma)
    return result


def sutherland_viscosity(temperature: Number) -> Number:
    """Dynamic viscosity of air, Pa s, mu = 1.458e-6 T^1.5 / (T + 110.4).

    Parameters
    ----------
    temperature : float or ndarray
        Static temperature, K.

    Returns
    -------
    float or ndarray

    Notes
    -----
    Sutherland's law with the constants of the US Standard Atmosphere 1976.
    """
    result: Number = 1.458e-6 * temperature**1.5 / (temperature + 110.4)
    return result
