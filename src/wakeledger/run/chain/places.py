"""Places of a plane: how far its wake region is grown, where its zero is taken, and regions on other grids."""

from __future__ import annotations

import numpy as np

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.intake.gridding import Gridding
from wakeledger.physics.fields.loss_level import beyond
from wakeledger.physics.fields.outer_flow import LEAST_SHARE
from wakeledger.physics.fields.wake_region import GROW_CELLS, Mask


def zero_places(mask: Mask, grid: UniformGrid, distance: float) -> Mask:
    """Places at which the zero of the total pressure is taken: so far from the wake region, if enough is left there."""
    if distance > 0:
        far = beyond(mask, grid, distance)
        if far.mean() >= LEAST_SHARE:
            return far
    outside: Mask = ~mask
    return outside


def default_grow(gridding: Gridding) -> float:
    """How far the wake region is grown where the survey file does not say, m: four spacings of the measured points."""
    return GROW_CELLS * max(gridding.raw_spacing)


def sampled_mask(mask: Mask, grid: UniformGrid, onto: UniformGrid) -> Mask:
    """A wake region brought onto another grid of the same plane, by nearest place; none beyond its own grid."""
    iz, iy = np.rint((onto.z - grid.z0) / grid.dz).astype(int), np.rint((onto.y - grid.y0) / grid.dy).astype(int)
    inside = np.outer((iz >= 0) & (iz < grid.nz), (iy >= 0) & (iy < grid.ny))
    found: Mask = mask[np.ix_(np.clip(iz, 0, grid.nz - 1), np.clip(iy, 0, grid.ny - 1))] & inside
    return found


def mask_at(mask: Mask, grid: UniformGrid, y: Array, z: Array) -> Mask:
    """Whether points, y and z of shape (n,), lie in a region, by the nearest place of its grid."""
    iz = np.clip(np.rint((z - grid.z0) / grid.dz).astype(int), 0, grid.nz - 1)
    iy = np.clip(np.rint((y - grid.y0) / grid.dy).astype(int), 0, grid.ny - 1)
    found: Mask = mask[iz, iy]
    return found
