"""The plane cut into rectangular cells whose circulations are closed line integrals of the velocity.

Small cells cover the wake, larger ones the outer flow, where a long outline measures a weak circulation far better than
many short ones. A cell's circulation is linear in the velocities on its outline, so the whole cut is one sparse matrix;
cells that touch share an edge, so nothing is counted twice or left out. The cut looks the same from either end of the
window, so that mirrored surveys are cut into mirrored cells.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse, special

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.circulation import interval_weights

Mask = NDArray[np.bool_]
Indices = NDArray[np.intp]

#: How often, at least and at most, the cells of the outer flow double in size away from the wake.
OUTER_LEVELS = (2, 5)
# Largest cells that would cover the whole window; more of them call for another doubling.
_MOST_OUTER_CELLS = 600
# Weights of an edge that two joined cells have in common cancel but for rounding.
_CANCELLED = 1e-12


@dataclass(frozen=True)
class Tiles:
    """Cells of the plane.

    Attributes
    ----------
    y_low, y_high, z_low, z_high : ndarray, shape (n,)
        Edges of each cell, m.
    points : ndarray of int, shape (p,)
        Flat indices of the grid points that the line integrals touch.
    from_v, from_w : sparse array, shape (n, p)
        Circulations, m²/s, from the velocities at those points, m/s.
    """

    y_low: Array
    y_high: Array
    z_low: Array
    z_high: Array
    points: Indices
    from_v: sparse.csr_array
    from_w: sparse.csr_array

    @property
    def count(self) -> int:
        """Number of cells."""
        return int(self.y_low.size)

    @property
    def y(self) -> Array:
        """Centres along y, m."""
        return (self.y_low + self.y_high) / 2

    @property
    def z(self) -> Array:
        """Centres along z, m."""
        return (self.z_low + self.z_high) / 2

    @property
    def area(self) -> Array:
        """Areas, m²."""
        return (self.y_high - self.y_low) * (self.z_high - self.z_low)

    @property
    def spread(self) -> Array:
        """a² of the Gaussian with the mean second moment of an evenly filled cell, (width² + height²)/12, m²."""
        return ((self.y_high - self.y_low) ** 2 + (self.z_high - self.z_low) ** 2) / 12

    def circulations(self, v: Array, w: Array) -> Array:
        """Line integral around every cell.

        Parameters
        ----------
        v, w : ndarray, shape (..., nz, ny)
            Crossflow, m/s.

        Returns
        -------
        ndarray, shape (..., n)
            Γ, m²/s, counter-clockwise positive.
        """
        v, w = np.asarray(v, float), np.asarray(w, float)
        size = v.shape[-2] * v.shape[-1]
        flat_v, flat_w = (np.take(f.reshape(-1, size), self.points, axis=1) for f in (v, w))
        result: Array = np.asarray(self.from_v @ flat_v.T + self.from_w @ flat_w.T).T
        return result.reshape(*v.shape[:-2], self.count)

    def gaussian_share(self, y: float, z: float, core: float) -> Array:
        """Share of one Gaussian vortex's circulation in each cell, shape (n,).

        Parameters
        ----------
        y, z, core : float
            The vortex, m.

        Returns
        -------
        ndarray, shape (n,)
            ¼ Δerf((y − y₀)/a) Δerf((z − z₀)/a).
        """
        along_y = special.erf((self.y_high - y) / core) - special.erf((self.y_low - y) / core)
        along_z = special.erf((self.z_high - z) / core) - special.erf((self.z_low - z) / core)
        result: Array = along_y * along_z / 4
        return result


def symmetric_widths(intervals: int, wanted: int) -> Indices:
    """Cut a number of intervals into pieces of a wanted width, the same seen from either end.

    Parameters
    ----------
    intervals, wanted : int
        Intervals in all and per piece, both at least 1.

    Returns
    -------
    ndarray of int
        Widths that sum to `intervals`; none is above `wanted`, narrower ones lie in the middle.

    Examples
    --------
    >>> symmetric_widths(9, 2).tolist()
    [2, 2, 1, 2, 2]
    """
    side = intervals // wanted // 2
    rest = intervals - 2 * side * wanted
    if rest == 0:
        middle = []
    elif rest <= wanted:
        middle = [rest]
    elif rest % 2 == 0:
        middle = [rest // 2, rest // 2]
    else:
        middle = [rest // 2, 1, rest // 2]
    return np.array([wanted] * side + middle + [wanted] * side, dtype=np.intp)


def cut_plane(grid: UniformGrid, wake: Mask, intervals: tuple[int, int], *, excluded: Mask | None = None) -> Tiles:
    """Cut the whole window into cells, small in the wake and larger away from it.

    Parameters
    ----------
    grid : UniformGrid
        The grid.
    wake : ndarray of bool, shape (nz, ny)
        Where the cells are smallest.
    intervals : (int, int)
        Grid intervals along y and z of the smallest cells.
    excluded : ndarray of bool, shape (nz, ny), optional
        Cells with their centre in it do not count at all.

    Returns
    -------
    Tiles
    """
    finest = (grid.ny - 1) * (grid.nz - 1) / (intervals[0] * intervals[1])
    doublings = int(np.clip(np.ceil(np.log2(finest / _MOST_OUTER_CELLS) / 2), *OUTER_LEVELS))
    columns = _levels(grid.ny - 1, intervals[0], doublings)
    rows = _levels(grid.nz - 1, intervals[1], doublings)
    needed = np.asarray(wake, bool) if excluded is None else np.asarray(wake | excluded, bool)
    boxes = _graded_boxes(columns, rows, needed)
    fine_y, fine_z = columns[0], rows[0]
    y_edges, z_edges = grid.y0 + grid.dy * fine_y, grid.z0 + grid.dz * fine_z
    c0, c1, r0, r1 = (boxes[:, k] for k in range(4))
    if excluded is not None:
        middle_row = np.rint((fine_z[r0] + fine_z[r1]) / 2).astype(np.intp)
        middle_column = np.rint((fine_y[c0] + fine_y[c1]) / 2).astype(np.intp)
        kept = ~np.asarray(excluded, bool)[middle_row, middle_column]
        c0, c1, r0, r1 = c0[kept], c1[kept], r0[kept], r1[kept]
    along_y, along_z = (_running(interval_weights(n)) * d for n, d in ((grid.ny, grid.dy), (grid.nz, grid.dz)))
    # v runs along the lower edge to starboard and back along the upper one; w up the starboard edge, down the port one.
    over_y = along_y[fine_y[c1]] - along_y[fine_y[c0]]
    over_z = along_z[fine_z[r1]] - along_z[fine_z[r0]]
    from_v = _outer_rows(grid, fine_z[r0], over_y, axis="row") - _outer_rows(grid, fine_z[r1], over_y, axis="row")
    from_w = _outer_rows(grid, fine_y[c1], over_z, axis="column") - _outer_rows(grid, fine_y[c0], over_z, axis="column")
    points = np.unique(np.concatenate([from_v.indices, from_w.indices])).astype(np.intp)
    return Tiles(
        y_low=y_edges[c0],
        y_high=y_edges[c1],
        z_low=z_edges[r0],
        z_high=z_edges[r1],
        points=points,
        from_v=sparse.csr_array(from_v[:, points]),
        from_w=sparse.csr_array(from_w[:, points]),
    )


def _levels(intervals: int, finest: int, doublings: int) -> list[Indices]:
    """Grid indices of the edges of the finest cells, then, level by level, positions of coarser edges among them."""
    edges = np.concatenate([[0], np.cumsum(symmetric_widths(intervals, finest))]).astype(np.intp)
    levels = [edges, np.arange(edges.size, dtype=np.intp)]
    for _ in range(doublings):
        groups = symmetric_widths(levels[-1].size - 1, 2)
        levels.append(levels[-1][np.concatenate([[0], np.cumsum(groups)])])
    return levels


def _graded_boxes(columns: list[Indices], rows: list[Indices], wake: Mask) -> Indices:
    """Cells as (first column, last column, first row, last row) in edges of the finest cut.

    A coarse cell is split where the wake comes closer than the cell's own size.
    """
    boxes: list[Indices] = []
    open_cells = np.ones((rows[-1].size - 1, columns[-1].size - 1), dtype=bool)
    touched_finest = _any_inside(_any_inside(wake, rows[0], 0), columns[0], 1)
    for level in range(len(rows) - 1, 0, -1):
        row_edges, column_edges = rows[level], columns[level]
        touched = np.logical_or.reduceat(touched_finest, row_edges[:-1], axis=0)
        touched = np.logical_or.reduceat(touched, column_edges[:-1], axis=1)
        split = open_cells & _grown_by_one(touched) if level > 1 else np.zeros_like(open_cells)
        r, c = np.nonzero(open_cells & ~split)
        boxes.append(np.stack([column_edges[c], column_edges[c + 1], row_edges[r], row_edges[r + 1]], axis=1))
        if level > 1:
            parent_row = np.searchsorted(row_edges, rows[level - 1][:-1], side="right") - 1
            parent_column = np.searchsorted(column_edges, columns[level - 1][:-1], side="right") - 1
            open_cells = split[np.ix_(parent_row, parent_column)]
    return np.concatenate(boxes)


def _grown_by_one(mask: Mask) -> Mask:
    padded = np.pad(mask, 1)
    rows = padded[:-2] | padded[1:-1] | padded[2:]
    grown: Mask = rows[:, :-2] | rows[:, 1:-1] | rows[:, 2:]
    return grown


def _any_inside(mask: Mask, edges: Indices, axis: int) -> Mask:
    inside = np.logical_or.reduceat(mask, edges[:-1], axis=axis)
    result: Mask = inside | np.take(mask, edges[1:], axis=axis)
    return result


def _running(weights: sparse.csr_array) -> sparse.csr_array:
    """Integral from the first point to each point, from the integrals over single intervals."""
    n = weights.shape[1]
    return sparse.csr_array(np.concatenate([np.zeros((1, n)), np.cumsum(weights.toarray(), axis=0)]))


def _outer_rows(grid: UniformGrid, line: Indices, weights: sparse.csr_array, *, axis: str) -> sparse.csr_array:
    """Each cell's weights along one line of the grid, written as a row over all points."""
    coo = sparse.coo_array(weights)
    kept = np.abs(coo.data) > _CANCELLED * np.abs(coo.data).max(initial=0.0)
    cell, along, data = coo.coords[0][kept], coo.coords[1][kept], coo.data[kept]
    flat = line[cell] * grid.ny + along if axis == "row" else along * grid.ny + line[cell]
    return sparse.csr_array((data, (cell, flat)), shape=(weights.shape[0], grid.nz * grid.ny))
