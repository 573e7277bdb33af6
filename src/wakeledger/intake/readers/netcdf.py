"""NetCDF-3 and netCDF-4: arrays of points, fields on (z, y) with coordinate variables, or a structured volume."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.core.points import Column
from wakeledger.intake.readers.columns import (
    POSITIONS,
    Cut,
    RawColumns,
    missing_column,
    refuse_contradicting_unit,
)
from wakeledger.intake.readers.fields import Dimensioned, as_points
from wakeledger.intake.readers.instants import Instants, read_instants, time_dimension

_ALONG_PLACES = frozenset({*POSITIONS, "row", "tube", "roll", "time"})


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
            along = _dimensions_of_places(dataset, columns)
            arrays, averaged = _averaged(
                {key: _read(dataset, key, column, along) for key, column in columns.items()}, columns
            )
    except DataError as error:
        raise error.located(file=path) from None
    except (OSError, RuntimeError) as error:
        raise DataError(
            f"the file begins like netCDF but cannot be read ({error})", file=path, remedy="write the file again"
        ) from None
    try:
        return replace(as_points(arrays, columns, cut, path, what="variable"), averaged=averaged)
    except DataError as error:
        raise error.located(file=path) from None


def _dimensions_of_places(dataset: Any, columns: Mapping[str, Column]) -> frozenset[str]:
    """Dimensions along which places differ: a probe that travels is somewhere else at every instant."""
    found: set[str] = set()
    for key in _ALONG_PLACES & set(columns):
        try:
            found |= set(dataset[columns[key].column.strip()].dimensions)
        except (IndexError, KeyError, AttributeError):
            continue
    return frozenset(found)


def _averaged(
    read: Mapping[str, tuple[tuple[str, ...], Array | Instants]], columns: Mapping[str, Column]
) -> tuple[dict[str, Dimensioned], str]:
    """Arrays of one plane: sets of instants as means, with the standard deviation and number of samples beside them."""
    arrays: dict[str, Dimensioned] = {}
    counts: list[tuple[tuple[str, ...], Instants]] = []
    for key, (dimensions, values) in read.items():
        if not isinstance(values, Instants):
            arrays[key] = dimensions, values
            continue
        if key.startswith("std.") or key == "samples":
            raise DataError(
                "the variable changes with time",
                place=f"variable {columns[key].column!r}",
                remedy="name a variable of the plane alone; of a set of instants the scatter is found from the values",
            )
        arrays[key] = dimensions, values.mean
        arrays.setdefault(f"std.{key}", (dimensions, values.deviation))
        if key != "velocity":
            counts.append((dimensions, values))
        else:
            axis = values.count.shape.index(3) if values.count.shape[-1] != 3 else values.count.ndim - 1
            rest = tuple(name for i, name in enumerate(dimensions) if i != axis)
            counts.append((rest, replace(values, count=values.count.min(axis=axis))))
    if not counts:
        return arrays, ""
    dimensions, first = counts[0]
    alike = max((one.alike for _, one in counts if np.isfinite(one.alike)), default=float("nan"))
    fewest = np.min([one.count for held, one in counts if held == dimensions], axis=0)
    worth = np.maximum(1, np.rint(fewest / (alike if np.isfinite(alike) else 1.0)))
    arrays.setdefault("samples", (dimensions, worth))
    said = f"{int(first.count.max())} instants"
    if not np.isfinite(alike):
        said += ", too few to show whether neighbouring ones resemble each other: each counts as independent"
    elif worth.max() < first.count.max():
        said += f", which are worth {int(worth.max())} independent ones as neighbouring instants resemble each other"
    return arrays, said


def _read(dataset: Any, key: str, column: Column, along: frozenset[str]) -> tuple[tuple[str, ...], Array | Instants]:
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
    holder = variable.group() if hasattr(variable, "group") else dataset
    instants = time_dimension(holder, variable)
    if instants is not None and len(dimensions) > 1 and dimensions[instants] not in along:
        found = read_instants(variable, instants)
        left = tuple(name for i, name in enumerate(dimensions) if i != instants)
        keep = tuple(i for i, length in enumerate(found.mean.shape) if length != 1)
        shape = tuple(found.mean.shape[i] for i in keep)
        plane = Instants(
            found.mean.reshape(shape), found.deviation.reshape(shape), found.count.reshape(shape), found.alike
        )
        return tuple(left[i] for i in keep), plane
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
