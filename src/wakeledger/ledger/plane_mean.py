"""The mean of several planes on a common grid."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import UniformGrid
from wakeledger.core.plane import grid_of, make_plane
from wakeledger.core.traverse import axis_of
from wakeledger.ledger.encoding import UNCERTAINTY_SUFFIX
from wakeledger.ledger.plane_difference import brought, common_places, nearest_places, same_places

if TYPE_CHECKING:
    import xarray as xr

#: Fields that are not averaged.
_MARKS = ("wake_mask", "flag")


def plane_mean(planes: Sequence[xr.Dataset]) -> tuple[xr.Dataset, str]:
    """Mean of planes, each with the same weight.

    Parameters
    ----------
    planes : sequence of Dataset
        Planes in wind axes, or line traverses.

    Returns
    -------
    dataset : Dataset
        The mean of every field that all have, without uncertainties; the wake region is that of any of them, and flags
        are set where they are in any. Where there is nothing in common, the first plane.
    note : str
        What was done.
    """
    # The uncertainty of a mean depends on which errors the runs share, which is not known field by field.
    planes = [plane.drop_vars([name for name in plane if str(name).endswith(UNCERTAINTY_SUFFIX)]) for plane in planes]
    first = planes[0]
    if all(same_places(plane[axis].values, first[axis].values) for plane in planes for axis in ("y", "z")):
        mean = first.copy()
        for name in first.data_vars:
            if not all(name in plane for plane in planes):
                mean = mean.drop_vars(str(name))
                continue
            mean[name].values = _together(str(name), np.stack([plane[name].values for plane in planes]))
        return mean, "The plane is the mean of the runs' planes, which have the same places."
    if any(axis_of(plane) is not None for plane in planes):
        return first, "The runs were not traversed at the same places: the traverse shown is that of run 1."
    grids = [grid_of(plane) for plane in planes]
    y, z = (common_places(grids, axis) for axis in ("y", "z"))
    if y.size < 2 or z.size < 2:
        return first, "The runs' planes have no window in common: the plane shown is that of run 1."
    fields: dict[str, NDArray[Any]] = {}
    for name in first.data_vars:
        if all(name in plane for plane in planes):
            bring = nearest_places if name in _MARKS else brought
            stack = [bring(plane[name].values, grid, y, z) for plane, grid in zip(planes, grids, strict=True)]
            fields[str(name)] = _together(str(name), np.stack(stack))
    station = float(first["x"]) if "x" in first.coords else float("nan")
    mean = make_plane(UniformGrid.from_axes(y, z), fields, station=station)
    return mean, (
        f"The plane is the mean of the runs' planes, brought onto the places of the coarsest inside all windows"
        f" ({y.size} x {z.size})."
    )


def _together(name: str, fields: NDArray[Any]) -> NDArray[Any]:
    if name == "wake_mask":
        found: NDArray[Any] = fields.max(axis=0)
    elif name == "flag":
        found = np.bitwise_or.reduce(fields, axis=0)
    else:
        found = fields.mean(axis=0)
    return found
