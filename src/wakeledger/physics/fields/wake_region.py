"""Where the wake is: the region over which losses and vorticity are integrated.

The region is a set of places, not of signs: it is drawn from smoothed fields of loss and vorticity at a level set by
their noise, joined, grown, and then everything inside counts, gains and negative values too. Keeping only positive
losses instead rectifies the noise, σ_H A/√(2π) over the window: tens of drag counts.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.differences import difference_matrix

Mask = NDArray[np.bool_]

#: Standard deviation of the Gaussian smoothing, in cells.
SMOOTHING = 1.5
#: How far the region is grown beyond the level, in cells, where the survey file does not say.
GROW_CELLS = 4.0
#: A place starts a region where it exceeds this many times the level that bounds it.
SEED = 2.0
#: Lowest level as a fraction of the field's peak, for data without noise.
VORTICITY_FLOOR = 1e-3
LOSS_FLOOR = 2e-3
#: 30 % of normal noise lies below 0.3853 standard deviations: robust while less than half the window is wake.
_QUANTILE, _QUANTILE_NORMAL = 0.30, 0.385320
#: The same for the median.
_MEDIAN_NORMAL = 0.674490


@dataclass(frozen=True)
class WakeRegion:
    """A wake region and how it was found.

    Attributes
    ----------
    mask : ndarray of bool, shape (nz, ny)
        True inside.
    loss_zero : float
        Median loss of the outer flow, Pa: the level from which the loss was counted when the region was drawn.
    loss_noise, vorticity_noise : float
        Standard deviation of the smoothed fields in the outer flow, Pa and s⁻¹.
    loss_level, vorticity_level : float
        The levels that bound the region, Pa and s⁻¹.
    grow : float
        How far it was grown beyond them, m.
    """

    mask: Mask
    loss_zero: float
    loss_noise: float
    vorticity_noise: float
    loss_level: float
    vorticity_level: float
    grow: float


def wake_region(
    loss: Array,
    vorticity: Array,
    grid: UniformGrid,
    *,
    level: float = 3.0,
    grow: float | None = None,
    include: Mask | None = None,
    exclude: Mask | None = None,
) -> WakeRegion:
    """Find the wake region of one plane.

    Parameters
    ----------
    loss : ndarray, shape (nz, ny)
        Total-pressure loss H∞ − H, Pa.
    vorticity : ndarray, shape (nz, ny)
        Axial vorticity, s⁻¹.
    grid : UniformGrid
        The grid both live on.
    level : float
        Boundary level in standard deviations of the smoothed fields' noise in the outer flow.
    grow : float, optional
        Distance by which the region is grown, m; `GROW_CELLS` spacings unless given.
    include, exclude : ndarray of bool, shape (nz, ny), optional
        Places that belong to the region, or do not, whatever the fields say.

    Returns
    -------
    WakeRegion

    Raises
    ------
    ValueError
        If level or grow is negative.
    """
    reach = GROW_CELLS * max(grid.dy, grid.dz) if grow is None else grow
    if level < 0 or reach < 0:
        raise ValueError(f"level and grow must not be negative, {level} and {reach} m were given")
    smooth_loss, smooth_vorticity = smoothed(loss, vorticity, grid)
    smooth_vorticity = np.abs(smooth_vorticity)
    quiet = np.ones(grid.shape, dtype=bool) if exclude is None else ~exclude
    zero, loss_noise, vorticity_noise = _first_guess(smooth_loss, smooth_vorticity, quiet)
    core = np.zeros(grid.shape, dtype=bool)
    loss_level = vorticity_level = 0.0
    for last in (False, True):
        excess = np.abs(smooth_loss - zero)
        loss_level = max(level * loss_noise, LOSS_FLOOR * float(excess.max()))
        vorticity_level = max(level * vorticity_noise, VORTICITY_FLOOR * float(smooth_vorticity.max()))
        core = connected(excess, loss_level) | connected(smooth_vorticity, vorticity_level)
        if last:
            break
        outer = quiet & ~_grown(core, grid, reach)
        if np.count_nonzero(outer) < 0.05 * outer.size:
            break
        zero = float(np.median(smooth_loss[outer]))
        loss_noise = float(np.median(np.abs(smooth_loss[outer] - zero))) / _MEDIAN_NORMAL
        vorticity_noise = float(np.median(smooth_vorticity[outer])) / _MEDIAN_NORMAL
    mask = ndimage.binary_fill_holes(_grown(core, grid, reach))
    if include is not None:
        mask |= include
    if exclude is not None:
        mask &= ~exclude
    return WakeRegion(mask, zero, loss_noise, vorticity_noise, loss_level, vorticity_level, reach)


def smoothed(loss: Array, vorticity: Array, grid: UniformGrid) -> tuple[Array, Array]:
    """The fields from which the region is drawn.

    Parameters
    ----------
    loss, vorticity : ndarray, shape (nz, ny)
        Total-pressure loss, Pa, and axial vorticity, s⁻¹.
    grid : UniformGrid
        The grid.

    Returns
    -------
    tuple of ndarray
        Both smoothed; differences and smoothing let more noise of the vorticity through near the edges of the window,
        which is levelled out.
    """
    smooth_loss = ndimage.gaussian_filter(loss, SMOOTHING, mode="nearest")
    smooth_vorticity = ndimage.gaussian_filter(vorticity, SMOOTHING, mode="nearest") / _noise_gain(grid)
    return smooth_loss, smooth_vorticity


def grown_region(
    core: Mask, grid: UniformGrid, *, grow: float, include: Mask | None = None, exclude: Mask | None = None
) -> WakeRegion:
    """A wake region from a core that is known already.

    Parameters
    ----------
    core : ndarray of bool, shape (nz, ny)
        The region before it is grown.
    grid : UniformGrid
        The grid.
    grow : float
        Distance by which it is grown, m.
    include, exclude : ndarray of bool, shape (nz, ny), optional
        As in `wake_region`.

    Returns
    -------
    WakeRegion
        Without noise and levels (NaN).
    """
    mask = ndimage.binary_fill_holes(_grown(core, grid, grow))
    if include is not None:
        mask |= include
    if exclude is not None:
        mask &= ~exclude
    nan = float("nan")
    return WakeRegion(mask, nan, nan, nan, nan, nan, grow)


@lru_cache(maxsize=8)
def _noise_gain(grid: UniformGrid) -> Array:
    """Noise of the smoothed vorticity at each place relative to the middle of the window, shape (nz, ny)."""
    gains = []
    for n, step in ((grid.nz, grid.dz), (grid.ny, grid.dy)):
        smoothing = ndimage.gaussian_filter1d(np.eye(n), SMOOTHING, axis=0, mode="nearest")
        slope = smoothing @ difference_matrix(n).toarray() / step
        gains.append((np.sum(smoothing**2, axis=1), np.sum(slope**2, axis=1)))
    (value_z, slope_z), (value_y, slope_y) = gains
    gain: Array = np.sqrt(np.outer(value_z, slope_y) + np.outer(slope_z, value_y))
    gain /= gain[grid.nz // 2, grid.ny // 2]
    gain.flags.writeable = False
    return gain


def _first_guess(smooth_loss: Array, smooth_vorticity: Array, quiet: Mask) -> tuple[float, float, float]:
    zero = float(np.median(smooth_loss[quiet]))
    loss_noise = float(np.quantile(np.abs(smooth_loss[quiet] - zero), _QUANTILE)) / _QUANTILE_NORMAL
    vorticity_noise = float(np.quantile(smooth_vorticity[quiet], _QUANTILE)) / _QUANTILE_NORMAL
    return zero, loss_noise, vorticity_noise


def connected(magnitude: Array, level: float) -> Mask:
    """Places above a level that hang together with a place well above it, so that lone noise peaks stay out.

    Parameters
    ----------
    magnitude : ndarray, shape (nz, ny)
        Size of a smoothed field.
    level : float
        The level, the field's unit.

    Returns
    -------
    ndarray of bool, shape (nz, ny)
        Each patch holds a place above `SEED` times the level.
    """
    weak = magnitude > level
    seeds = magnitude > SEED * level
    labels, count = ndimage.label(weak, structure=np.ones((3, 3)))
    if count == 0:
        return weak
    kept = np.zeros(count + 1, dtype=bool)
    kept[labels[seeds]] = True
    kept[0] = False
    result: Mask = kept[labels]
    return result


def _grown(mask: Mask, grid: UniformGrid, distance: float) -> Mask:
    if distance == 0 or not mask.any():
        return mask
    # Only the box about the places within reach takes part.
    box = tuple(
        slice(max(int(held[0]) - room, 0), int(held[-1]) + room + 1)
        for held, room in (
            (np.flatnonzero(mask.any(axis=1)), int(distance / grid.dz) + 1),
            (np.flatnonzero(mask.any(axis=0)), int(distance / grid.dy) + 1),
        )
    )
    nearest: Array = ndimage.distance_transform_edt(~mask[box], sampling=(grid.dz, grid.dy))
    grown: Mask = np.zeros_like(mask)
    grown[box] = nearest <= distance
    return grown


def region_of(shapes: Sequence[Array], grid: UniformGrid) -> Mask:
    """Grid points inside any of several shapes.

    Parameters
    ----------
    shapes : sequence of ndarray, shape (k, 2)
        Boxes (two corners, k = 2) or polygons (k ≥ 3 vertices), (y, z) in m.
    grid : UniformGrid
        The grid.

    Returns
    -------
    ndarray of bool, shape (nz, ny)
        Boxes include their edges.

    Raises
    ------
    ValueError
        If a shape has fewer than two vertices.
    """
    yy, zz = grid.mesh()
    inside = np.zeros(grid.shape, dtype=bool)
    for shape in shapes:
        vertices = np.asarray(shape, float)
        if len(vertices) < 2:
            raise ValueError("a shape needs two corners (a box) or at least three vertices (a polygon)")
        low, high = vertices.min(axis=0), vertices.max(axis=0)
        if len(vertices) == 2:
            inside |= (yy >= low[0]) & (yy <= high[0]) & (zz >= low[1]) & (zz <= high[1])
            continue
        crossings = np.zeros(grid.shape, dtype=bool)
        for (y1, z1), (y2, z2) in zip(vertices, np.roll(vertices, -1, axis=0), strict=True):
            if z1 == z2:
                continue
            straddles = (zz >= min(z1, z2)) & (zz < max(z1, z2))
            crossings ^= straddles & (yy < y1 + (zz - z1) * (y2 - y1) / (z2 - z1))
        inside |= crossings
    return inside
