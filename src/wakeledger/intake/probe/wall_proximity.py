"""A pitot probe close to a wall reads too low a speed; the flow it bends aside cannot pass between it and the wall.

The figures are common practice and no more than that: their uncertainty is taken as half the correction.
"""

from __future__ import annotations

import numpy as np

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.intake.probe.correction import Correction

#: Relative error of the speed when the probe touches the wall, and its decay per diameter away from there.
AT_WALL = 0.015
DECAY = 3.5
#: Distance of the axis from the wall, in diameters, beyond which nothing is left of it.
REACH = 2.0
RELATIVE_UNCERTAINTY = 0.5


def speed_deficit(distance: Array, *, diameter: float) -> Array:
    """Relative speed that a pitot probe near a wall misses.

    Parameters
    ----------
    distance : ndarray, any shape
        Distance of the probe's axis from the nearest wall, m.
    diameter : float
        Outside diameter of the probe's tip, m.

    Returns
    -------
    ndarray
        dU/U = 0.015 exp(−3.5 (y/D − 0.5)) for y/D < 2, else 0; to be added to what was read.

    Raises
    ------
    DataError
        If the axis is closer to the wall than half the diameter, which the tip does not allow.
    """
    ratio = np.asarray(distance, float) / diameter
    closest = float(np.nanmin(ratio, initial=np.inf))
    if closest < 0.5 * (1 - 1e-6):
        raise DataError(
            f"the probe's axis is {closest * diameter:.4g} m from a wall, less than half its tip_diameter",
            remedy="check the walls' positions and tip_diameter, or leave the wall correction out",
        )
    return np.where(ratio < REACH, AT_WALL * np.exp(-DECAY * (np.minimum(ratio, REACH) - 0.5)), 0.0)


def correct_speed(speed: Array, distance: Array, *, diameter: float) -> Correction:
    """Speed, or each velocity component, of a probe near a wall.

    Parameters
    ----------
    speed : ndarray, shape (..., n) or (..., nz, ny)
        As read, m/s; any quantity proportional to the speed.
    distance : ndarray, of the trailing shape
        Distance of the probe's axis from the nearest wall, m.
    diameter : float
        Outside diameter of the tip, m.

    Returns
    -------
    Correction
        V (1 + dU/U), known to half the correction.

    Raises
    ------
    DataError
        As `speed_deficit`.
    """
    size = np.asarray(speed * speed_deficit(distance, diameter=diameter))
    return Correction(speed + size, size, RELATIVE_UNCERTAINTY * size)


def correct_total_pressure(total: Array, static: Array, distance: Array, *, diameter: float) -> Correction:
    """Total pressure of a probe near a wall, the static pressure being right.

    Parameters
    ----------
    total, static : ndarray, shape (..., n) or (..., nz, ny)
        As read, Pa, on one zero.
    distance : ndarray, of the trailing shape
        Distance of the probe's axis from the nearest wall, m.
    diameter : float
        Outside diameter of the tip, m.

    Returns
    -------
    Correction
        p + (H − p)(1 + dU/U)², known to half the correction.

    Raises
    ------
    DataError
        As `speed_deficit`.
    """
    deficit = speed_deficit(distance, diameter=diameter)
    size = np.asarray((total - static) * ((1 + deficit) ** 2 - 1))
    return Correction(total + size, size, RELATIVE_UNCERTAINTY * size)
