"""In shear a probe reads the flow a little to the faster side of its axis: 0.15 tip diameters by common practice.

The correction belongs on the gridded plane, not on the points: moved points would leave the lines they stand on. What
was read at r is the flow at r + k d n, n towards the higher speed, so the flow at r is f − k d n·∇f to first order; the
second order is (k d/L)² of the change across a layer of thickness L.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.intake.probe.correction import Correction

#: Displacement in tip diameters, towards the higher speed, and its standard uncertainty (common practice).
COEFFICIENT = 0.15
STANDARD_UNCERTAINTY = 0.05
#: Shear counts where it stands out of its noise by this many standard deviations.
_LEVEL = 3.0
_SMOOTH = np.array([1.0, 4.0, 6.0, 4.0, 1.0]) / 16
_SLOPE = np.array([-0.5, 0.0, 0.5])
_FOURTH = np.array([1.0, -4.0, 6.0, -4.0, 1.0])
#: Noise of a smoothed speed's change over one step, and what smoothing across does to it, over the speed's own.
_STEP_NOISE = float(np.linalg.norm(np.convolve(_SLOPE, _SMOOTH)))
_ACROSS_NOISE = float(np.linalg.norm(_SMOOTH))


def displacement_on_plane(
    fields: Array,
    speed: Array,
    grid: UniformGrid,
    *,
    diameter: float,
    coefficient: float = COEFFICIENT,
    standard_uncertainty: float = STANDARD_UNCERTAINTY,
    noise: float | None = None,
) -> Correction:
    """Fields of a plane as they are at the probe's axis.

    Parameters
    ----------
    fields : ndarray, shape (..., nz, ny)
        Whatever was measured: velocity components, pressures; any leading axes (fields, draws).
    speed : ndarray, shape (..., nz, ny)
        Speed |V|, whose gradient is the shear, m/s; its leading axes are the last ones of the fields' leading axes.
    grid : UniformGrid
        The grid.
    diameter : float
        Outside diameter of the probe's tip, m.
    coefficient, standard_uncertainty : float
        Displacement towards the higher speed, in diameters, and how well it is known.
    noise : float, optional
        Standard deviation of the speed, m/s; estimated (`speed_noise`) where not given. Draws of one survey must share
        it.

    Returns
    -------
    Correction
        f − k d n·∇f. The unit vector n along the smoothed shear is multiplied by max(0, 1 − (3 σ/|shear|)²), σ being
        the smoothed shear's noise, so that noise outside the wake is not rectified into a loss.
    """
    smooth = _smoothed(_smoothed(speed, -1), -2)
    by_y, by_z = _gradient(smooth, grid.dy, -1), _gradient(smooth, grid.dz, -2)
    sigma = speed_noise(speed) if noise is None else noise
    weight = _significant((by_y * grid.dy) ** 2 + (by_z * grid.dz) ** 2, _STEP_NOISE * _ACROSS_NOISE * sigma)
    square = by_y**2 + by_z**2
    shear = np.sqrt(np.where(square > 0, square, 1.0))
    along = (by_y * _gradient(fields, grid.dy, -1) + by_z * _gradient(fields, grid.dz, -2)) / shear
    return _correction(fields, along * weight, diameter, coefficient, standard_uncertainty)


def displacement_on_line(
    profiles: Array,
    speed: Array,
    position: Array,
    *,
    diameter: float,
    coefficient: float = COEFFICIENT,
    standard_uncertainty: float = STANDARD_UNCERTAINTY,
    noise: float | None = None,
) -> Correction:
    """Profiles of a line traverse as they are at the probe's axis.

    Parameters
    ----------
    profiles : ndarray, shape (..., m)
        Whatever was measured.
    speed : ndarray, shape (..., m)
        Speed, m/s.
    position : ndarray, shape (m,)
        Ascending places, m, evenly spaced or not.
    diameter, coefficient, standard_uncertainty, noise
        As in `displacement_on_plane`.

    Returns
    -------
    Correction
    """
    slope = np.gradient(_smoothed(speed, -1), position, axis=-1)
    step = np.gradient(position)
    sigma = speed_noise(speed) if noise is None else noise
    weight = _significant((slope * step) ** 2, _STEP_NOISE * sigma)
    along = np.sign(slope) * np.gradient(profiles, position, axis=-1)
    return _correction(profiles, along * weight, diameter, coefficient, standard_uncertainty)


def speed_noise(speed: Array) -> float:
    """Standard deviation of a speed's noise, m/s, from its fourth differences along the last axis.

    Parameters
    ----------
    speed : ndarray, shape (..., m)
        Speed on evenly spaced places; with draws, the noise common to all.

    Returns
    -------
    float
        The median of their magnitude over 0.6745 sqrt(70), so that the wake, a small part of the plane, hardly counts;
        0 for fewer than five places.
    """
    if speed.shape[-1] < _FOURTH.size:
        return 0.0
    windows = np.lib.stride_tricks.sliding_window_view(speed, _FOURTH.size, axis=-1)
    return float(np.nanmedian(np.abs(windows @ _FOURTH)) / (0.6745 * np.linalg.norm(_FOURTH)))


def _correction(fields: Array, along: Array, diameter: float, coefficient: float, sigma: float) -> Correction:
    size = -coefficient * diameter * along
    return Correction(fields + size, size, -sigma * diameter * along)


def _significant(square: Array, sigma: float) -> Array:
    """max(0, 1 − (3σ)²/x²) of a squared quantity x², 0 where there is none."""
    some = square > (_LEVEL * sigma) ** 2
    return np.where(some, 1 - (_LEVEL * sigma) ** 2 / np.where(some, square, 1.0), 0.0)


def _smoothed(field: Array, axis: int) -> Array:
    from scipy.ndimage import correlate1d

    result: Array = correlate1d(np.asarray(field, float), _SMOOTH, axis=axis, mode="nearest")
    return result


def _gradient(field: Array, step: float, axis: int) -> Array:
    gradient: Any = np.gradient(field, step, axis=axis)
    return np.asarray(gradient)
