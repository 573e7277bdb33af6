"""Which arrays of a mesh hold the variables, and whether they stand at points or for cells."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from wakeledger.core.errors import DataError
from wakeledger.core.points import Column
from wakeledger.intake.readers.columns import COMPONENTS, missing_column

#: Ways to name the position along each axis of a mesh.
_POSITION = re.compile(r"(?:points?|coordinates?)?[:_ ]?(?:([xyz])|([012]))", re.IGNORECASE)


@dataclass(frozen=True)
class ArrayPart:
    """An array, or one component of it."""

    name: str
    component: int | None


@dataclass(frozen=True)
class Choice:
    """Where the wanted arrays are.

    Attributes
    ----------
    at : {"point", "cell"}
        Where the values stand.
    parts : mapping of str to ArrayPart
        By key of ``[plane.columns]``.
    blocks : list of datasets
        Those that hold all of them.
    """

    at: str
    parts: Mapping[str, ArrayPart]
    blocks: list[Any]


def position_axis(name: str) -> int | None:
    """Axis (0, 1, 2) that a name of a position means, None where it is none."""
    found = _POSITION.fullmatch(name.strip())
    if found is None:
        return None
    return "xyz".index(found[1].lower()) if found[1] else int(found[2])


def choose_arrays(blocks: Sequence[Any], columns: Mapping[str, Column]) -> Choice:
    """Find the wanted arrays among the blocks of a mesh.

    Values of cells are preferred where a file holds both: they are what a finite-volume solver computed, and those at
    the points an average of them.

    Parameters
    ----------
    blocks : sequence of datasets
        Blocks of one dimension.
    columns : mapping of str to Column
        What is wanted, without positions.

    Returns
    -------
    Choice

    Raises
    ------
    DataError
        If an array is missing, of the wrong number of components, or not all stand at points or all for cells.
    """
    chosen: list[Choice] = []
    for at in ("cell", "point"):
        complete, parts = [], {}
        for block in blocks:
            found = {key: _part(column.column, _sizes(block, at)) for key, column in columns.items()}
            if all(part is not None for part in found.values()):
                complete.append(block)
                parts = {key: part for key, part in found.items() if part is not None}
        if complete:
            chosen.append(Choice(at, parts, complete))
    if not chosen:
        raise _incomplete(blocks, columns)
    choice = max(chosen, key=lambda option: len(option.blocks))
    for key, column in columns.items():
        _check_components(key, column, choice.parts[key], _sizes(choice.blocks[0], choice.at))
    return choice


def _data(block: Any, at: str) -> Any:
    return block.cell_data if at == "cell" else block.point_data


def _sizes(block: Any, at: str) -> dict[str, int]:
    """Number of components of each numeric array."""
    data = _data(block, at)
    sizes = {}
    for name in data.keys():  # noqa: SIM118 -- this mapping iterates over pairs
        array = data[name]
        if array.dtype.kind in "iufb":
            sizes[str(name)] = int(array.shape[1]) if array.ndim > 1 else 1
    return sizes


def _part(name: str, sizes: Mapping[str, int]) -> ArrayPart | None:
    name = name.strip()
    if name in sizes:
        return ArrayPart(name, None)
    for suffixes in COMPONENTS:
        for component, suffix in enumerate(suffixes):
            base = name.removesuffix(suffix)
            # A name such as "p0" is no component of a scalar p.
            if base != name and sizes.get(base, 0) > max(component, 1):
                return ArrayPart(base, component)
    return None


def _check_components(key: str, column: Column, part: ArrayPart, sizes: Mapping[str, int]) -> None:
    count = 1 if part.component is not None else sizes[part.name]
    if key.removeprefix("std.") == "velocity":
        if count != 3:
            raise DataError(
                f"the array {column.column!r} has {count} component(s), a velocity has three",
                remedy="name the array that holds the vector, or give u, v and w",
            )
    elif count != 1:
        raise DataError(
            f"the array {column.column!r} ({key}) has {count} components",
            remedy=f"name one of them, as {column.column + ':0'!r}, or write velocity = ... for a velocity vector",
        )


def names_of(blocks: Iterable[Any]) -> list[str]:
    """Names of all arrays of some blocks, each once."""
    return list(dict.fromkeys(name for block in blocks for at in ("point", "cell") for name in _sizes(block, at)))


def _incomplete(blocks: Sequence[Any], columns: Mapping[str, Column]) -> DataError:
    where: dict[str, set[str]] = {}
    for column in columns.values():
        where[column.column] = {
            at for at in ("point", "cell") for block in blocks if _part(column.column, _sizes(block, at)) is not None
        }
    names = names_of(blocks)
    for name, places in where.items():
        if not places:
            if not names:
                return DataError(
                    f"the file holds no arrays, and {name!r} is wanted", remedy="write the fields with the mesh"
                )
            return missing_column(name, names, what="array")
    points = [name for name, places in where.items() if places == {"point"}]
    cells = [name for name, places in where.items() if places == {"cell"}]
    if points and cells:
        return DataError(
            f"{points[0]!r} stands at the points and {cells[0]!r} for the cells",
            remedy="write all variables at the points or all for the cells",
        )
    return DataError(
        f"no block of the file holds all of {', '.join(repr(name) for name in where)}",
        remedy="write all variables on every block",
    )
