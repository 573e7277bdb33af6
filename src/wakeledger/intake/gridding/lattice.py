"""Finding the rows and columns that points stand on, from their positions alone."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array

#: Positions of one line may differ by this share of the distance to the next line (2 % to either side).
LINE_WIDTH = 0.04
#: Share of the lattice's nodes that must carry a point; rows shifted against each other by backlash reach one half.
_OCCUPANCY = 0.55
#: A gap between lines is at least this many times as wide as any gap inside one.
_GAP_RATIO = 4.0
_CANDIDATES = 12
#: A step in file order this many times the median step begins a new row.
_JUMP = 5.0


@dataclass(frozen=True)
class Lattice:
    """Lines of constant y and z, and where each point stands on them.

    Attributes
    ----------
    y, z : ndarray, shape (nc,), (nr,)
        Ascending positions of the lines, m.
    iy, iz : ndarray of int, shape (n,)
        Column and row of each point.
    """

    y: Array
    z: Array
    iy: NDArray[np.intp]
    iz: NDArray[np.intp]


def find_lattice(y: Array, z: Array) -> Lattice | None:
    """The tensor grid that points stand on, in whatever order they come.

    Parameters
    ----------
    y, z : ndarray, shape (n,)
        Finite positions, m.

    Returns
    -------
    Lattice or None
        None where positions scatter by more than 2 % of the spacing, or too few nodes carry a point.
    """
    best, occupied = None, _OCCUPANCY
    columns = list(_lines(y))
    for z_lines, iz in _lines(z):
        for y_lines, iy in columns:
            nodes = y_lines.size * z_lines.size
            if nodes * _OCCUPANCY > y.size:
                continue
            share = np.unique(iz * y_lines.size + iy).size / nodes
            if share > occupied:
                best, occupied = Lattice(y_lines, z_lines, iy, iz), share
    return best


def _lines(x: Array) -> Iterator[tuple[Array, NDArray[np.intp]]]:
    """Ways to sort one coordinate into lines, the clearest first: positions of the lines, line of each point."""
    order = np.argsort(x, kind="stable")
    ascending = x[order]
    extent = ascending[-1] - ascending[0]
    if not extent > 0:
        return
    steps = np.maximum(np.diff(ascending), 1e-9 * extent)
    levels = np.unique(steps)
    if levels[0] > 1e-9 * extent:
        levels = np.concatenate([[1e-9 * extent], levels])
    ratios = levels[1:] / levels[:-1]
    for k in np.argsort(-ratios, kind="stable")[:_CANDIDATES]:
        if ratios[k] < _GAP_RATIO:
            return
        new = steps > np.sqrt(levels[k] * levels[k + 1])
        starts = np.concatenate([[0], np.flatnonzero(new) + 1])
        ends = np.concatenate([starts[1:], [x.size]])
        low = ascending[starts]
        label = np.concatenate([[0], np.cumsum(new)])
        # Summed from the lower edge, so that a line of equal positions keeps them to the last bit.
        centre = low + np.add.reduceat(ascending - low[label], starts) / (ends - starts)
        spacing = np.diff(centre)
        room = np.minimum(np.append(spacing, np.inf), np.append(np.inf, spacing))
        if np.all(ascending[ends - 1] - low <= LINE_WIDTH * room * (1 + 1e-9)):
            index = np.empty(x.size, dtype=np.intp)
            index[order] = label
            yield centre, index


def rows_in_order(y: Array, z: Array, lattice: Lattice | None) -> NDArray[np.int64]:
    """Traverse row of each point, deduced from the order of the file.

    Parameters
    ----------
    y, z : ndarray, shape (n,)
        Positions in file order, m.
    lattice : Lattice or None
        The tensor grid the points stand on, if they do.

    Returns
    -------
    ndarray of int, shape (n,)
        The line of constant z, or of constant y where the probe travelled along z. Without lines, a row ends where the
        probe jumps; where that happens all the time, all points are one row.
    """
    if lattice is not None:
        along_y = np.count_nonzero((np.diff(lattice.iy) != 0) & (np.diff(lattice.iz) == 0))
        along_z = np.count_nonzero((np.diff(lattice.iz) != 0) & (np.diff(lattice.iy) == 0))
        return (lattice.iz if along_y >= along_z else lattice.iy).astype(np.int64)
    for coordinate in (z, y):
        for lines, index in _lines(coordinate):
            if lines.size * 4 <= coordinate.size:
                return index.astype(np.int64)
    steps = np.hypot(np.diff(y), np.diff(z))
    rows = np.concatenate([[0], np.cumsum(steps > _JUMP * np.median(steps))]) if steps.size else np.zeros(y.size)
    if rows[-1] * 4 > y.size:
        return np.zeros(y.size, dtype=np.int64)
    return np.asarray(rows, dtype=np.int64)
