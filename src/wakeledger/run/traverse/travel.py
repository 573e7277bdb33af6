"""The way of a probe through its points: order, time and rows."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.core.points import Points
from wakeledger.intake.gridding.lattice import find_lattice, rows_in_order

_T = TypeVar("_T", bound=np.generic)
#: Fewer points tell no rows.
_FEWEST_OF_A_ROW = 3


@dataclass(frozen=True, eq=False)
class Travel:
    """The points in the order in which they were taken.

    Attributes
    ----------
    order : ndarray of int, shape (n,)
        Which points, as filed, were taken one after the other.
    time : ndarray, shape (n,), or None
        Time of each, s, ascending; None where it was not kept.
    row : ndarray of int, shape (n,)
        Traverse row of each, from 0; a row that is taken both ways is two.
    y, z : ndarray, shape (n,)
        Indicated positions, m.
    """

    order: NDArray[np.intp]
    time: Array | None
    row: NDArray[np.int64]
    y: Array
    z: Array

    @property
    def n(self) -> int:
        """Number of points."""
        return int(self.order.size)

    @property
    def clock(self) -> Array:
        """Time, s, or the number of each point where no time was kept."""
        return np.arange(self.n, dtype=float) if self.time is None else self.time

    @property
    def along_and_across(self) -> tuple[Array, Array]:
        """Positions along the rows and across them."""
        same = np.diff(self.row) == 0
        by_y, by_z = (float(np.abs(np.diff(x))[same].sum()) for x in (self.y, self.z))
        return (self.y, self.z) if by_y >= by_z else (self.z, self.y)

    def taken(self, values: NDArray[_T]) -> NDArray[_T]:
        """Values of the file's order in the order in which they were taken, shape (..., n)."""
        return values[..., self.order]

    def filed(self, values: NDArray[_T]) -> NDArray[_T]:
        """Undo `taken`."""
        found = np.empty_like(values)
        found[..., self.order] = values
        return found


def travel_of(points: Points) -> Travel:
    """The order in which points were taken: by their time, or as they are filed.

    Parameters
    ----------
    points : Points
        The points as read.

    Returns
    -------
    Travel

    Raises
    ------
    DataError
        If the time of a point is missing where others have one.
    """
    channel = points.channels.get("time")
    time = None if channel is None else channel.values
    if time is not None:
        missing = np.flatnonzero(~np.isfinite(time))
        if missing.size:
            raise DataError(
                f"time is missing at {missing.size} point(s)",
                place=f"line {points.line[missing[0]]}",
                remedy="give the time of every point, or leave its column out",
            )
    order = np.arange(points.n) if time is None else np.argsort(time, kind="stable")
    y, z = points.y[order], points.z[order]
    row = points.row[order] if points.row is not None else _rows_travelled(y, z)
    new = np.diff(row) != 0
    roll = points.channels.get("roll")
    if roll is not None:
        new |= np.diff(roll.values[order]) != 0
    row = np.cumsum(np.concatenate([[0], new])).astype(np.int64)
    return Travel(order, None if time is None else time[order], row, y, z)


def _rows_travelled(y: Array, z: Array) -> NDArray[np.int64]:
    """Row of each point, from positions in the order in which they were taken: a new one where the probe turns back."""
    if y.size < _FEWEST_OF_A_ROW:
        return np.zeros(y.size, dtype=np.int64)
    line = rows_in_order(y, z, find_lattice(y, z))
    step_y, step_z = np.diff(y), np.diff(z)
    along = step_y if np.abs(step_y).sum() >= np.abs(step_z).sum() else step_z
    new = np.concatenate([[False], np.diff(line) != 0])
    turned = np.zeros(y.size, dtype=bool)
    turned[2:] = along[1:] * along[:-1] < 0
    # The point after a change of line has come from another row: its step tells no direction.
    turned[1:] &= ~new[:-1]
    return np.cumsum(new | turned).astype(np.int64)
