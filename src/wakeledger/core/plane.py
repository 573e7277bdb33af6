"""The plane: flow fields in wind axes on one uniform grid, as a labelled dataset."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import DataError
from wakeledger.core.flags import cf_attributes
from wakeledger.core.grid import UniformGrid
from wakeledger.core.names import PLANE_VARIABLES, stamp

if TYPE_CHECKING:
    from collections.abc import Mapping

    import xarray as xr


def make_plane(
    grid: UniformGrid, fields: Mapping[str, NDArray[np.generic]], *, station: float = float("nan")
) -> xr.Dataset:
    """Label bare arrays on a grid.

    Parameters
    ----------
    grid : UniformGrid
        The grid.
    fields : mapping of str to ndarray, shape (nz, ny)
        Arrays in SI by name (`wakeledger.core.names.PLANE_VARIABLES`).
    station : float
        Distance of the plane behind the trailing edge, m.

    Returns
    -------
    Dataset
        Dimensions (z, y), scalar coordinate x, every variable stamped from the names table.

    Raises
    ------
    DataError
        If an array has another shape than the grid.
    """
    import xarray as xr

    coordinates = {"z": ("z", grid.z), "y": ("y", grid.y), "x": ((), float(station))}
    dataset = xr.Dataset(coords=coordinates)
    for name, values in fields.items():
        array = np.asarray(values)
        if array.shape != grid.shape:
            raise DataError(f"{name} has shape {array.shape}, the grid has {grid.shape} (z, y)")
        dataset[name] = stamp(xr.DataArray(array, dims=("z", "y")), name)
    for name in ("x", "y", "z"):
        dataset.coords[name].attrs = stamp(dataset.coords[name], name).attrs
    if "flag" in dataset:
        dataset["flag"].attrs |= cf_attributes()
    return dataset


def plane(dataset: xr.Dataset, *, station: float = float("nan")) -> xr.Dataset:
    """Check a dataset of one's own and bring it to SI.

    Parameters
    ----------
    dataset : Dataset
        Dimensions z and y with uniform ascending coordinates; variables of `wakeledger.core.names.PLANE_VARIABLES`,
        each with a ``units`` attribute, in wind axes. Coordinates without units are in m.
    station : float
        Distance of the plane behind the trailing edge, m.

    Returns
    -------
    Dataset
        A new plane in SI, stamped from the names table; variables of other names are left out.

    Raises
    ------
    DataError
        If a coordinate is missing or not uniform, a variable has no units or ones of another dimension, or nothing is
        known in it.
    """
    from wakeledger.core.units import UnitError, conversion

    axes = {}
    for name in ("y", "z"):
        if name not in dataset.coords:
            raise DataError(f"the dataset has no coordinate {name}", remedy="give y (to starboard) and z (up)")
        scale, _ = conversion(str(dataset[name].attrs.get("units", "m")), "m")
        axes[name] = scale * np.asarray(dataset[name].values, dtype=float)
    try:
        grid = UniformGrid.from_axes(axes["y"], axes["z"])
    except ValueError as error:
        raise DataError(str(error)) from error
    fields: dict[str, NDArray[np.generic]] = {}
    for name in map(str, dataset.data_vars):
        if name not in PLANE_VARIABLES:
            continue
        array, meaning = dataset[name], PLANE_VARIABLES[name]
        values = array.transpose("z", "y").values
        if meaning.unit == "1":
            fields[name] = values
            continue
        if "units" not in array.attrs:
            raise DataError(f"{name} has no units", remedy=f"set its units attribute, as in {meaning.unit!r}")
        try:
            scale, offset = conversion(str(array.attrs["units"]), meaning.unit)
        except UnitError as error:
            raise DataError(f"{name}: {error.found}", remedy=error.remedy) from error
        fields[name] = scale * np.asarray(values, dtype=float) + offset
    if not fields:
        known = ", ".join(PLANE_VARIABLES)
        raise DataError("the dataset has no variable with a known name", remedy=f"known names: {known}")
    return make_plane(grid, fields, station=station)


def grid_of(plane: xr.Dataset) -> UniformGrid:
    """The uniform grid of a plane.

    Parameters
    ----------
    plane : Dataset
        With one-dimensional ascending coordinates y and z, m.

    Returns
    -------
    UniformGrid

    Raises
    ------
    DataError
        If y or z is missing or not uniform.
    """
    for name in ("y", "z"):
        if name not in plane.coords:
            raise DataError(f"the plane has no coordinate {name}", remedy="give y (to starboard) and z (up) in m")
    try:
        return UniformGrid.from_axes(plane["y"].values, plane["z"].values)
    except ValueError as error:
        raise DataError(str(error)) from error


def array_of(plane: xr.Dataset, name: str) -> NDArray[np.float64]:
    """One field of a plane as a bare (nz, ny) array in SI.

    Parameters
    ----------
    plane : Dataset
        The plane.
    name : str
        A variable of `wakeledger.core.names.PLANE_VARIABLES`.

    Returns
    -------
    ndarray, shape (nz, ny)

    Raises
    ------
    DataError
        If the variable is missing or carries another unit than the table's.
    """
    if name not in plane:
        raise DataError(f"the plane has no {name}", remedy=f"it has {', '.join(map(str, plane.data_vars))}")
    unit = plane[name].attrs.get("units")
    expected = PLANE_VARIABLES[name].unit
    if unit != expected:
        raise DataError(
            f"{name} has units {unit!r}", remedy=f"give it in {expected!r} and say so in its units attribute"
        )
    return np.asarray(plane[name].transpose("z", "y").values, dtype=float)
