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
    """

    values: Mapping[str, Array]
    line: NDArray[np.int64]
    place: Callable[[int, str], str]


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


def missing_column(name: str, present: list[str], *, what: str) -> DataError:
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
    DataError
        Offering the nearest name and listing all; without file and place.
    """
    folded = {entry.casefold(): entry for entry in present}
    longer = (entry for entry in present if re.match(re.escape(name) + r"\W", entry, re.IGNORECASE))
    close = folded.get(name.casefold()) or next(longer, None) or nearest(name, present)
    guess = f"did you mean {close!r}? The" if close else "the"
    shown = [repr(entry) for entry in present if entry]
    listed = ", ".join(shown[:40]) + (f" and {len(shown) - 40} more" if len(shown) > 40 else "")
    return DataError(f"there is no {what} {name!r}", remedy=f"{guess} file has {listed}" if shown else None)
