"""Arrays on named dimensions laid out as points: one plane, or a volume that is cut at the station."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

import numpy as np

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.core.points import Column
from wakeledger.intake.readers.columns import Cut, RawColumns

Dimensioned = tuple[tuple[str, ...], Array]


def as_points(
    arrays: Mapping[str, Dimensioned], columns: Mapping[str, Column], cut: Cut | None, path: Path, *, what: str
) -> RawColumns:
    """Lay arrays out as points.

    Parameters
    ----------
    arrays : mapping of str to (names of dimensions, ndarray)
        By key of ``[plane.columns]``, in the file's units.
    columns : mapping of str to Column
        The columns that were asked for.
    cut : Cut or None
        Where a volume is cut; None where none is wanted.
    path : Path
        The file.
    what : str
        What an array is called in this format.

    Returns
    -------
    RawColumns
        In the order of the largest array.

    Raises
    ------
    DataError
        If the dimensions do not fit together, or there are three and x, y and z do not all stand in them.
    """
    values, shape, dimensions = _spread(split_vectors(arrays), columns)
    if len(shape) == 3:
        return _cut(values, columns, cut, shape, dimensions, path)
    flat = {key: array.reshape(-1).copy() for key, array in values.items()}
    line = np.arange(1, int(np.prod(shape)) + 1, dtype=np.int64)

    def place(i: int, column: str) -> str:
        index = ", ".join(str(int(k)) for k in np.unravel_index(i, shape))
        return f"{what} {column!r}, index ({index})"

    return RawColumns(flat, line, place)


def split_vectors(arrays: Mapping[str, Dimensioned]) -> dict[str, Dimensioned]:
    """Velocity arrays taken apart into u, v and w along their dimension of length 3."""
    split: dict[str, Dimensioned] = {}
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


def _spread(
    arrays: Mapping[str, Dimensioned], columns: Mapping[str, Column]
) -> tuple[dict[str, Array], tuple[int, ...], tuple[str, ...]]:
    """Every array spread over the dimensions of the largest one, and these."""
    dimensions, largest = max(arrays.values(), key=lambda entry: (len(entry[0]), entry[1].size))
    shape = largest.shape
    if len(dimensions) > 3:
        raise _too_many(dimensions, shape)
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
        values[key] = np.broadcast_to(expanded, shape)
    return values, shape if shape else (1,), dimensions


def _too_many(dimensions: tuple[str, ...], shape: tuple[int, ...]) -> DataError:
    listed = ", ".join(f"{name} = {length}" for name, length in zip(dimensions, shape, strict=True))
    return DataError(
        f"the arrays have {len(dimensions)} dimensions ({listed})",
        remedy="give one plane at one instant: arrays of points, or fields with two dimensions; or a volume, with x, y "
        "and z in [plane.columns], which is cut at the station",
    )


def _cut(
    values: Mapping[str, Array],
    columns: Mapping[str, Column],
    cut: Cut | None,
    shape: tuple[int, ...],
    dimensions: tuple[str, ...],
    path: Path,
) -> RawColumns:
    if cut is None or not all(letter in values for letter in "xyz"):
        raise _too_many(dimensions, shape)
    from wakeledger.intake.readers.cfd import cut_volume

    scales = {letter: columns[letter].scale for letter in "xyz"}
    positions = {letter: scales[letter] * values[letter] for letter in "xyz"}
    if not all(np.isfinite(array).all() for array in positions.values()):
        raise DataError("a position of the volume is missing", remedy="give the position of every point")
    fields = {key: array for key, array in values.items() if key not in "xyz"}
    found = cut_volume(fields, positions, cut, path)
    for letter in "xyz":
        found.values[letter][:] = found.values[letter] / scales[letter]
    return found
