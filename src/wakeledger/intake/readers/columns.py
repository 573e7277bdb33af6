"""What every reader hands over: bare columns in the file's own units, and where each value stands."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import DataError, InputError, nearest
from wakeledger.core.grid import Array
from wakeledger.core.names import VARIABLES
from wakeledger.core.points import Column

#: Keys of positions and the SI unit of each.
POSITIONS: Mapping[str, str] = {"x": "m", "y": "m", "z": "m", "r": "m", "theta": "rad"}
#: SI units of keys that are neither positions nor variables of the names table.
_OTHER_UNITS: Mapping[str, str] = {
    "row": "1",
    "tube": "1",
    "roll": "rad",
    "samples": "1",
    "time": "s",
    "velocity": "m s-1",
    "reference_dynamic_pressure": "Pa",
    "reference_static_pressure": "Pa",
    **{f"p{hole}": "Pa" for hole in range(1, 8)},
}


@dataclass(frozen=True)
class RawColumns:
    """The columns that were asked for, as they stand in the file.

    Attributes
    ----------
    values : mapping of str to ndarray, shape (n,)
        Numbers in the file's units by key; NaN where a cell is empty.
    line : ndarray of int, shape (n,)
        Line of the file (or flat index into its arrays) of each point, counted from 1.
    place : callable
        ``place(i, column)`` says where the value of point i in a column of the file stands.
    triangles : ndarray of int, shape (m, 3), or None
        Triangles between the points, where the file connects them and its values stand at the corners.
    areas : ndarray, shape (n,), or None
        Area of the cell that each point is the centre of, in the square of the file's unit of length, where the values
        stand for cells.
    how : str
        How the points came out of a file that holds more than them.
    averaged : str
        What was averaged where the file holds many instants.
    """

    values: Mapping[str, Array]
    line: NDArray[np.int64]
    place: Callable[[int, str], str]
    triangles: NDArray[np.int64] | None = None
    areas: Array | None = None
    how: str = ""
    averaged: str = ""


@dataclass(frozen=True)
class Cut:
    """The plane that is wanted of a file that may hold more.

    Attributes
    ----------
    axis : {0, 1, 2}
        The file's axis along the stream.
    position : float
        Where the plane lies along that axis of the file, m.
    station, trailing_edge_x : float
        What the survey file says of it, m.
    tolerance : float
        By how much points may be off the plane, as a share of its size.
    line : bool
        Whether a line across the stream is wanted instead of a plane.
    time : float or None
        The instant that is wanted; None for the latest.
    """

    axis: int
    position: float
    station: float
    trailing_edge_x: float = 0.0
    tolerance: float = 0.001
    line: bool = False
    time: float | None = None


class MissingColumnError(DataError):
    """A column that was asked for is not in the file."""

    column: str = ""

    def located(self, *, file: object = None, place: str | None = None) -> MissingColumnError:
        """The same error with the file or place filled in where it was still missing."""
        error = type(self)(self.found, file=self.file or file, place=self.place or place, remedy=self.remedy)
        error.column = self.column
        return error


#: Suffixes by which tables and meshes name the components of a vector, one set after the other.
COMPONENTS: tuple[tuple[str, str, str], ...] = (
    ("_x", "_y", "_z"),
    ("x", "y", "z"),
    ("_X", "_Y", "_Z"),
    ("X", "Y", "Z"),
    (":0", ":1", ":2"),
    (":X", ":Y", ":Z"),
    ("_0", "_1", "_2"),
    ("[0]", "[1]", "[2]"),
    ("0", "1", "2"),
)


def si_unit(key: str, column: Column) -> str | None:
    """The SI unit a column's `scale` leads to.

    Parameters
    ----------
    key : str
        Key of ``[plane.columns]``; ``"std.v"`` for the standard deviation of v.
    column : Column
        Says whether the variable is divided by a reference quantity.

    Returns
    -------
    str or None
        UDUNITS string, None where the key is unknown.
    """
    name = key.removeprefix("std.")
    if column.normalised_by is not None:
        return "1"
    if column.kinematic:
        return "m2 s-1" if name == "turbulent_viscosity" else "m2 s-2"
    if name in POSITIONS:
        return POSITIONS[name]
    if name in VARIABLES:
        return VARIABLES[name].unit
    return _OTHER_UNITS.get(name)


def refuse_contradicting_unit(stated: str, key: str, column: Column, *, strict: bool) -> None:
    """Refuse a unit that the file states and that is not the survey file's.

    Parameters
    ----------
    stated : str
        The unit as the file states it.
    key : str
        Key of ``[plane.columns]``.
    column : Column
        The column as the survey file declares it.
    strict : bool
        True where the file's statement is authoritative (an attribute): a unit of another dimension is refused too.
        False for free text in a table: only a unit of the same dimension and another size is refused.

    Raises
    ------
    DataError
        Naming both units; without file and place.
    """
    from wakeledger.core.units import conversion

    unit = si_unit(key, column)
    if unit is None or stated.strip() == column.unit.strip():
        return
    try:
        scale, offset = conversion(stated, unit, difference=key.startswith("std."))
    except InputError:
        if not strict:
            return
        agrees = False
    else:
        agrees = bool(np.isclose(scale, column.scale, rtol=1e-9) and np.isclose(offset, column.offset, atol=1e-9))
    if not agrees:
        raise DataError(
            f"the file gives the unit of {column.column!r} as {stated!r}, the survey file says {column.unit!r}",
            remedy="correct whichever is wrong, so that both say the same",
        )


def missing_column(name: str, present: list[str], *, what: str) -> MissingColumnError:
    """The error for a column that is not there.

    Parameters
    ----------
    name : str
        The name that was asked for.
    present : list of str
        The names that exist.
    what : str
        What such a thing is called in this format ("column", "variable").

    Returns
    -------
    MissingColumnError
        Offering the nearest name and listing all; without file and place.
    """
    folded = {entry.casefold(): entry for entry in present}
    longer = (entry for entry in present if re.match(re.escape(name) + r"\W", entry, re.IGNORECASE))
    close = folded.get(name.casefold()) or next(longer, None) or nearest(name, present)
    guess = f"did you mean {close!r}? The" if close else "the"
    shown = [repr(entry) for entry in present if entry]
    listed = ", ".join(shown[:40]) + (f" and {len(shown) - 40} more" if len(shown) > 40 else "")
    error = MissingColumnError(f"there is no {what} {name!r}", remedy=f"{guess} file has {listed}" if shown else None)
    error.column = name
    return error
