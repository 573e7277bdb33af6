"""What a wake may still hold where it has sunk below the level that bounds its region: Gaussian tails.

Inside the contours at the level and at twice the level the field stands clear of the noise. How far apart the two are,
and how high the field rises behind them, tells the Gaussian it falls off by, and with it what lies further out, where
no single place can be told from noise.
"""

from __future__ import annotations

import numpy as np
from scipy import ndimage

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.wake_region import SEED, Mask, connected

#: Peak over level from which on the contours tell the whole tail, and none of it is taken as hidden.
TOLD = 5.0


def gaussian_tail(smooth: Array, level: float, grid: UniformGrid) -> Array:
    """Extrapolation of a field beyond the contour at a level.

    Parameters
    ----------
    smooth : ndarray, shape (nz, ny)
        A field about its zero, its noise smoothed, any unit.
    level : float
        Level that bounds it, the same unit.
    grid : UniformGrid
        The grid.

    Returns
    -------
    ndarray, shape (nz, ny)
        With the sign of the nearest place above the level; zero at places above it, and everywhere if there are none.

    Raises
    ------
    ValueError
        If the level is not positive.

    Notes
    -----
    At a distance d beyond the contour f = ℓ exp(−t d/σ − d²/2σ²) with t = √(2 ln(P/ℓ)), the tail of a Gaussian of peak
    P; σ = δ/(t − √(2 ln(P/2ℓ))) from the mean distance δ of the contours at ℓ and 2ℓ. P and δ are those of the nearest
    patch that hangs together.
    """
    if not level > 0:
        raise ValueError(f"the level must be positive, {level} was given")
    size = np.abs(smooth)
    core = connected(size, level)
    tail = np.zeros(grid.shape)
    if not core.any() or core.all():
        return tail
    sampling = (grid.dz, grid.dy)
    distance, (iz, iy) = ndimage.distance_transform_edt(~core, sampling=sampling, return_indices=True)
    between = ndimage.distance_transform_edt(~(core & (size > SEED * level)), sampling=sampling)
    labels, count = ndimage.label(core, structure=np.ones((3, 3)))
    patch = labels[iz, iy]
    every = np.arange(1, count + 1)
    contour = np.where(core & ~ndimage.binary_erosion(core, border_value=1), labels, 0)
    # The mean along the contour of a patch: noise moves it to and fro at each place.
    apart = np.concatenate([[0.0], ndimage.mean(between, contour, every)])
    peaks = np.concatenate([[0.0], ndimage.maximum(size, labels, every)])
    # Two contours closer than half a spacing are not told apart.
    between = np.maximum(apart, 0.5 * min(sampling))[patch]
    peak = peaks[patch] / level
    steepness = np.sqrt(2 * np.log(peak))
    width = between / (steepness - np.sqrt(2 * np.log(peak / SEED)))
    outside = ~core
    tail[outside] = (level * np.exp(-steepness * distance / width - 0.5 * (distance / width) ** 2))[outside]
    signed: Array = tail * np.sign(smooth[iz, iy])
    return signed


def wake_tails(
    loss: Array, vorticity: Array, grid: UniformGrid, *, levels: tuple[float, float], mask: Mask
) -> tuple[Array, Array]:
    """Tails of loss and vorticity outside a wake region.

    Parameters
    ----------
    loss, vorticity : ndarray, shape (nz, ny)
        Smoothed, about their zeros, Pa and s⁻¹.
    grid : UniformGrid
        The grid.
    levels : (float, float)
        The levels that bound them, Pa and s⁻¹; a field without a level has no tail.
    mask : ndarray of bool, shape (nz, ny)
        The wake region.

    Returns
    -------
    tuple of ndarray
        Zero inside the region.
    """
    fields = zip((loss, vorticity), levels, strict=True)
    one, other = (
        np.where(mask, 0.0, gaussian_tail(field, level, grid)) if level > 0 else np.zeros(grid.shape)
        for field, level in fields
    )
    return one, other


def untold(smooth: Array, level: float) -> float:
    """How little of a field's tail its contours tell.

    Parameters
    ----------
    smooth : ndarray, shape (nz, ny)
        A field about its zero, its noise smoothed, any unit.
    level : float
        Level that bounds it, the same unit.

    Returns
    -------
    float
        1 where the peak is below `SEED` times the level, so that noise sets the contours, falling to 0 at `TOLD` times.
    """
    peak = float(np.abs(smooth).max()) / level if level > 0 else np.inf
    return float(np.clip((TOLD - peak) / (TOLD - SEED), 0.0, 1.0))


def hidden_tail(level: float, grid: UniformGrid, *, mask: Mask, width: float) -> Array:
    """The most that a field whose contours tell nothing may hold beside the wake region.

    Parameters
    ----------
    level : float
        Level that bounds it, any unit.
    grid : UniformGrid
        The grid.
    mask : ndarray of bool, shape (nz, ny)
        The wake region.
    width : float
        Standard deviation of its fall beyond the region, m.

    Returns
    -------
    ndarray, shape (nz, ny)
        ℓ exp(−d²/2w²) at a distance d from the region, the unit of the level; zero inside.
    """
    if mask.all() or not mask.any():
        return np.zeros(grid.shape)
    distance = ndimage.distance_transform_edt(~mask, sampling=(grid.dz, grid.dy))
    found: Array = np.where(mask, 0.0, level * np.exp(-0.5 * (distance / width) ** 2))
    return found


def shape_share(values: Array, shape: Array) -> tuple[float, float]:
    """How much of a shape noisy values hold, about any level.

    Parameters
    ----------
    values : ndarray, shape (n,)
        A field at places of the outer flow, any unit.
    shape : ndarray, shape (n,)
        The shape there, the same unit.

    Returns
    -------
    tuple of float
        Factor on the shape by least squares, and its standard deviation from white noise of the size of what is left.
    """
    about = shape - shape.mean()
    power = float(about @ about)
    share = float(about @ values) / power
    left = values - values.mean() - share * about
    return share, float(np.sqrt(left @ left / max(values.size - 2, 1) / power))
