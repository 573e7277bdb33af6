"""NetCDF-3 and netCDF-4: arrays of points, fields on (z, y) with coordinate variables, or a structured volume."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.core.points import Column
from wakeledger.intake.readers.columns import Cut, RawColumns, missing_column, refuse_contradicting_unit
from wakeledger.intake.readers.fields import as_points


def read_netcdf(path: Path, columns: Mapping[str, Column], cut: Cut | None = None) -> RawColumns:
    """Read the named variables of a netCDF file as points.

    Parameters
    ----------
    path : Path
        The file.
    columns : mapping of str to Column
        What to read, by key; a column is the name of a variable, ``group/name`` within a group. The key ``velocity``
        is an array with one dimension of length 3 and becomes the keys u, v, w.
    cut : Cut, optional
        Where a volume is cut.

    Returns
    -------
    RawColumns
        In the order of the file's arrays, in the file's units; masked values and fill values are NaN.

    Raises
    ------
    DataError
        If the file is damaged, a variable is missing, not numeric, of dimensions that do not fit, or states another
        unit than the survey file.
    """
    import netCDF4

    try:
        with netCDF4.Dataset(path) as dataset:
            arrays = {key: _read(dataset, key, column) for key, column in columns.items()}
    except DataError as error:
        raise error.located(file=path) from None
    except (OSError, RuntimeError) as error:
        raise DataError(
            f"the file begins like netCDF but cannot be read ({error})", file=path, remedy="write the file again"
        ) from None
    try:
        return as_points(arrays, columns, cut, path, what="variable")
    except DataError as error:
        raise error.located(file=path) from None


def _read(dataset: Any, key: str, column: Column) -> tuple[tuple[str, ...], Array]:
    name = column.column.strip()
    place = f"variable {name!r}"
    try:
        variable = dataset[name]
        dimensions = tuple(variable.dimensions)
    except (IndexError, KeyError, AttributeError):
        raise missing_column(name, _names(dataset), what="variable") from None
    if getattr(variable, "dtype", None) is str or variable.dtype.kind not in "iuf":
        raise DataError("the variable does not hold numbers", place=place, remedy="name a numeric variable")
    stated = getattr(variable, "units", None)
    if isinstance(stated, str) and stated.strip():
        try:
            refuse_contradicting_unit(stated, key, column, strict=True)
        except DataError as error:
            raise error.located(place=place) from None
    values = np.ma.filled(np.ma.asarray(variable[...]).astype(np.float64), np.nan)
    if values.size == 0:
        raise DataError("the variable is empty", place=place, remedy="give a file that holds the points of the plane")
    keep = tuple(i for i, length in enumerate(values.shape) if length != 1)
    return tuple(dimensions[i] for i in keep), values.reshape(tuple(values.shape[i] for i in keep))


def _names(group: Any, prefix: str = "") -> list[str]:
    names = [prefix + name for name in group.variables]
    for name, inner in group.groups.items():
        names += _names(inner, f"{prefix}{name}/")
    return names
