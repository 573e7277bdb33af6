"""NetCDF-3 and netCDF-4: arrays of points, or fields on (z, y) with coordinate variables."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.core.points import Column
from wakeledger.intake.readers.columns import RawColumns, missing_column, refuse_contradicting_unit


def read_netcdf(path: Path, columns: Mapping[str, Column]) -> RawColumns:
    """Read the named variables of a netCDF file as points.

    Parameters
    ----------
    path : Path
        The file.
    columns : mapping of str to Column
        What to read, by key; a column is the name of a variable, ``group/name`` within a group. The key ``velocity``
        is an array with one dimension of length 3 and becomes the keys u, v, w.

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
        values, shape = _flatten(_split_vector(arrays), columns)
    except DataError as error:
        raise error.located(file=path) from None
    line = np.arange(1, int(np.prod(shape)) + 1, dtype=np.int64)

    def place(i: int, column: str) -> str:
        index = ", ".join(str(int(k)) for k in np.unravel_index(i, shape))
        return f"variable {column!r}, index ({index})"

    return RawColumns(values, line, place)


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


def _split_vector(arrays: Mapping[str, tuple[tuple[str, ...], Array]]) -> dict[str, tuple[tuple[str, ...], Array]]:
    split: dict[str, tuple[tuple[str, ...], Array]] = {}
    for key, (dimensions, values) in arrays.items():
        name = key.removeprefix("std.")
        if name != "velocity":
            split[key] = (dimensions, values)
            continue
        axes = [i for i, length in enumerate(values.shape) if length == 3]
        axis = axes[-1] if axes and axes[-1] == values.ndim - 1 else (axes[0] if axes else None)
        if axis is None:
            raise DataError(
                f"the velocity array has shape {values.shape}", remedy="one dimension must hold the three components"
            )
        rest = tuple(d for i, d in enumerate(dimensions) if i != axis)
        for component, letter in enumerate("uvw"):
            split[key.replace("velocity", letter)] = (rest, np.take(values, component, axis=axis))
    return split


def _flatten(
    arrays: Mapping[str, tuple[tuple[str, ...], Array]], columns: Mapping[str, Column]
) -> tuple[dict[str, Array], tuple[int, ...]]:
    """Spread every array over the dimensions of the largest one, and lay it out flat in that order."""
    dimensions, largest = max(arrays.values(), key=lambda entry: (len(entry[0]), entry[1].size))
    shape = largest.shape
    if len(dimensions) > 2:
        listed = ", ".join(f"{name} = {length}" for name, length in zip(dimensions, shape, strict=True))
        raise DataError(
            f"the arrays have {len(dimensions)} dimensions ({listed})",
            remedy="give one plane at one instant: arrays of points, or fields with two dimensions",
        )
    if len(set(dimensions)) < len(dimensions):
        raise DataError(f"a dimension is used twice ({', '.join(dimensions)})", remedy="name each dimension once")
    values = {}
    for key, (own, array) in arrays.items():
        extra = [name for name in own if name not in dimensions]
        if extra:
            column = columns[key].column if key in columns else key
            raise DataError(
                f"{column!r} has the dimension {extra[0]!r}, the other arrays have {', '.join(dimensions) or 'none'}",
                remedy="all arrays must share the dimensions of the plane",
            )
        order = [own.index(name) for name in dimensions if name in own]
        expanded = array.transpose(order).reshape(
            tuple(length if name in own else 1 for name, length in zip(dimensions, shape, strict=True))
        )
        values[key] = np.broadcast_to(expanded, shape).reshape(-1).copy()
    return values, shape if shape else (1,)
