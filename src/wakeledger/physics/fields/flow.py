"""A complete flow state on a uniform grid, as every area method reads it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array, UniformGrid
from wakeledger.core.names import stamp
from wakeledger.core.plane import array_of, grid_of
from wakeledger.physics.fields.differences import axial_vorticity
from wakeledger.physics.fields.wake_region import wake_region
from wakeledger.stream.reference import Reference

if TYPE_CHECKING:
    import xarray as xr


@dataclass(frozen=True)
class Flow:
    """Flow fields in wind axes; arrays of shape (..., nz, ny).

    Attributes
    ----------
    grid : UniformGrid
        The grid.
    u, v, w : ndarray
        Velocity, m/s.
    total_pressure, static_pressure : ndarray
        Pa, absolute on the reference state's scale.
    density : ndarray or float
        kg/m³.
    total_temperature : ndarray or float
        K; NaN for an incompressible state.
    """

    grid: UniformGrid
    u: Array
    v: Array
    w: Array
    total_pressure: Array
    static_pressure: Array
    density: Any
    total_temperature: Any = np.nan


def flow_of(plane: xr.Dataset, reference: Reference) -> Flow:
    """The flow state of a labelled plane.

    Parameters
    ----------
    plane : Dataset
        With u, v, w, total_pressure and static_pressure; density and temperature are needed for a compressible
        reference.
    reference : Reference
        The undisturbed stream.

    Returns
    -------
    Flow

    Raises
    ------
    DataError
        If a variable is missing or in another unit.
    """
    names = ("u", "v", "w", "total_pressure", "static_pressure")
    u, v, w, total, static = (array_of(plane, name) for name in names)
    if not reference.compressible:
        return Flow(grid_of(plane), u, v, w, total, static, reference.density)
    density, temperature = array_of(plane, "density"), array_of(plane, "temperature")
    heat = reference.gamma / (reference.gamma - 1) * reference.gas_constant
    return Flow(grid_of(plane), u, v, w, total, static, density, temperature + (u**2 + v**2 + w**2) / (2 * heat))


def mask_of(plane: xr.Dataset) -> np.ndarray[Any, np.dtype[np.bool_]]:
    """The wake mask of a labelled plane as booleans, shape (nz, ny).

    Raises
    ------
    DataError
        If the plane has no wake_mask.
    """
    if "wake_mask" not in plane:
        raise DataError("the plane has no wake_mask", remedy="find it with wakeledger.find_wake first")
    mask: np.ndarray[Any, np.dtype[np.bool_]] = plane["wake_mask"].transpose("z", "y").values.astype(bool)
    return mask


def find_wake(plane: xr.Dataset, reference: Reference, *, level: float = 3.0, grow: float | None = None) -> xr.Dataset:
    """A labelled plane with its wake region marked.

    Parameters
    ----------
    plane : Dataset
        With v, w and total_pressure.
    reference : Reference
        The undisturbed stream.
    level : float
        Boundary level in standard deviations of the smoothed fields' noise.
    grow : float, optional
        How far the region is grown beyond the level, m; four spacings unless given.

    Returns
    -------
    Dataset
        The plane with ``wake_mask``.

    Raises
    ------
    DataError
        If the plane lacks a variable or is not uniform.
    """
    import xarray as xr

    grid = grid_of(plane)
    loss = reference.total_pressure - array_of(plane, "total_pressure")
    vorticity = axial_vorticity(array_of(plane, "v"), array_of(plane, "w"), grid)
    region = wake_region(loss, vorticity, grid, level=level, grow=grow)
    mask = xr.DataArray(region.mask.astype(np.int8), dims=("z", "y"))
    return plane.assign(wake_mask=stamp(mask, "wake_mask"))
