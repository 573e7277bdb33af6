"""Calibrated, equivalent and true airspeed, and the position error of an airspeed system.

An airspeed indicator is a pitot-static gauge with the standard sea-level scale: the calibrated airspeed is the speed
that gives the measured impact pressure at sea level on a standard day.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from wakeledger.core.errors import InputError
from wakeledger.core.grid import Array
from wakeledger.stream.atmosphere import SEA_LEVEL_DENSITY, SEA_LEVEL_PRESSURE, SEA_LEVEL_TEMPERATURE
from wakeledger.stream.gas import Number, mach_from_pitot, pitot_pressure_ratio, sound_speed

_SEA_LEVEL_SOUND_SPEED = sound_speed(SEA_LEVEL_TEMPERATURE)


def impact_pressure(calibrated_airspeed: Number) -> Number:
    """Pitot minus static pressure, Pa, that a calibrated airspeed (m/s) stands for."""
    mach: Number = calibrated_airspeed / _SEA_LEVEL_SOUND_SPEED
    result: Number = SEA_LEVEL_PRESSURE * (pitot_pressure_ratio(mach) - 1.0)
    return result


def mach_from_calibrated_airspeed(calibrated_airspeed: Number, static_pressure: float) -> Number:
    """Mach number from the calibrated airspeed.

    Parameters
    ----------
    calibrated_airspeed : float or ndarray
        Calibrated airspeed, m/s, at least 0.
    static_pressure : float
        Static pressure of the stream, Pa.

    Returns
    -------
    float or ndarray

    Notes
    -----
    The impact pressure in flight is that of the calibrated airspeed at sea level on a standard day; both follow the
    isentropic relation up to Mach 1 and Rayleigh's pitot formula above.
    """
    ratio: Number = 1.0 + impact_pressure(calibrated_airspeed) / static_pressure
    return mach_from_pitot(ratio)


def calibrated_airspeed_from_mach(mach: Number, static_pressure: float) -> Number:
    """Calibrated airspeed, m/s: the inverse of `mach_from_calibrated_airspeed`.

    Parameters
    ----------
    mach : float or ndarray
        Mach number.
    static_pressure : float
        Static pressure of the stream, Pa.

    Returns
    -------
    float or ndarray
    """
    ratio: Number = 1.0 + (pitot_pressure_ratio(mach) - 1.0) * static_pressure / SEA_LEVEL_PRESSURE
    result: Number = _SEA_LEVEL_SOUND_SPEED * mach_from_pitot(ratio)
    return result


def true_airspeed(mach: Number, temperature: float) -> Number:
    """True airspeed, m/s, at a Mach number and a static temperature in K."""
    result: Number = mach * sound_speed(temperature)
    return result


def equivalent_airspeed(true: Number, density: float) -> Number:
    """Equivalent airspeed, m/s: the sea-level speed of the same dynamic pressure.

    Parameters
    ----------
    true : float or ndarray
        True airspeed, m/s.
    density : float
        Density of the air, kg/m³.

    Returns
    -------
    float or ndarray
    """
    result: Number = true * (density / SEA_LEVEL_DENSITY) ** 0.5
    return result


@dataclass(frozen=True)
class PositionError:
    """Correction of an airspeed system for where its static port sits.

    Attributes
    ----------
    indicated : ndarray, shape (n,)
        Indicated airspeeds (corrected for the instrument's own error), m/s, ascending.
    correction : ndarray, shape (n,)
        What to add to each to get the calibrated airspeed, m/s.

    Raises
    ------
    InputError
        If the table has no two entries, is not ascending, not finite, or the columns differ in length.
    """

    indicated: Array
    correction: Array

    def __post_init__(self) -> None:
        for name in ("indicated", "correction"):
            object.__setattr__(self, name, np.array(getattr(self, name), dtype=float))
        if self.indicated.ndim != 1 or self.indicated.shape != self.correction.shape or self.indicated.size < 2:
            raise InputError(
                f"the position error table has columns of shape {self.indicated.shape} and {self.correction.shape}",
                remedy="give at least two indicated airspeeds and one correction for each",
            )
        if not (np.all(np.isfinite(self.indicated)) and np.all(np.isfinite(self.correction))):
            raise InputError("the position error table has a value that is not finite", remedy="give numbers only")
        if np.any(np.diff(self.indicated) <= 0.0):
            raise InputError("the position error table's airspeeds do not ascend", remedy="sort them, without repeats")

    def calibrated(self, indicated: float) -> float:
        """Calibrated airspeed by linear interpolation in the table.

        Parameters
        ----------
        indicated : float
            Indicated airspeed, m/s.

        Returns
        -------
        float
            Calibrated airspeed, m/s.

        Raises
        ------
        InputError
            If the airspeed is outside the table; it is never extrapolated.
        """
        low, high = float(self.indicated[0]), float(self.indicated[-1])
        if not low <= indicated <= high:
            raise InputError(
                f"an indicated airspeed of {indicated:g} m/s is outside the position error table",
                remedy=f"the table covers {low:g} m/s to {high:g} m/s; extend it",
            )
        return float(indicated + np.interp(indicated, self.indicated, self.correction))
