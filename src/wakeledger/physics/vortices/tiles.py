"""The wake cut into rectangular cells whose circulations are closed line integrals of the velocity.

A cell spans a few grid intervals each way. Its circulation is linear in the velocities on its outline, so the whole cut
is one sparse matrix, and any union of cells has exactly the line integral around its own outline.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.circulation import interval_weights


@dataclass(frozen=True)
class WakeTiles:
    """Cells that cover the wake.

    Attributes
    ----------
    y, z : ndarray, shape (n,)
        Centres, m.
    width, height : ndarray, shape (n,)
        Extent along y and z, m.
    row, column : ndarray of int, shape (n,)
        Place in the cut of the whole window.
    y_edges, z_edges : ndarray
        Edges of that cut, m.
    points : ndarray of int, shape (p,)
        Flat indices of the grid points that the line integrals touch.
    from_v, from_w : sparse array, shape (n, p)
        Circulations, m²/s, from the velocities at those points, m/s.
    """

    y: Array
    z: Array
    width: Array
    height: Array
    row: NDArray[np.int_]
    column: NDArray[np.int_]
    y_edges: Array
    z_edges: Array
    points: NDArray[np.int_]
    from_v: sparse.csr_array
    from_w: sparse.csr_array

    @property
    def count(self) -> int:
        """Number of cells."""
        return int(self.y.size)

    @property
    def smearing(self) -> Array:
        """a² of the Gaussian with a uniform cell's mean second moment, (width² + height²)/12, m², shape (n,)."""
        return (self.width**2 + self.height**2) / 12

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
        lead = np.shape(v)[:-2]
        flat_v = np.asarray(v, float).reshape(-1, v.shape[-2] * v.shape[-1])[:, self.points]
        flat_w = np.asarray(w, float).reshape(-1, w.shape[-2] * w.shape[-1])[:, self.points]
        result: Array = (self.from_v @ flat_v.T + self.from_w @ flat_w.T).T
        return result.reshape(*lead, self.count)


def symmetric_widths(intervals: int, wanted: int) -> NDArray[np.int_]:
    """Cut a number of grid intervals into cells of a wanted width, the same seen from either end.

    Parameters
    ----------
    intervals, wanted : int
        Intervals along the axis and intervals per cell, both at least 1.

    Returns
    -------
    ndarray of int
        Widths that sum to `intervals`; none is above `wanted`, the narrower ones lie in the middle.

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
    return np.array([wanted] * side + middle + [wanted] * side)


def cut_wake(grid: UniformGrid, mask: NDArray[np.bool_], intervals: tuple[int, int]) -> WakeTiles:
    """Cover a wake region with cells.

    Parameters
    ----------
    grid : UniformGrid
        The grid.
    mask : ndarray of bool, shape (nz, ny)
        The wake region; a cell with any of its points inside belongs to it.
    intervals : (int, int)
        Grid intervals per cell along y and z.

    Returns
    -------
    WakeTiles
    """
    wide = symmetric_widths(grid.ny - 1, intervals[0])
    high = symmetric_widths(grid.nz - 1, intervals[1])
    columns = np.concatenate([[0], np.cumsum(wide)])
    rows = np.concatenate([[0], np.cumsum(high)])
    touched = _any_inside(_any_inside(np.asarray(mask, bool), rows, 0), columns, 1)
    row, column = np.nonzero(touched)
    y_edges, z_edges = grid.y0 + grid.dy * columns, grid.z0 + grid.dz * rows
    along_y = _summed(interval_weights(grid.ny), columns) * grid.dy
    along_z = _summed(interval_weights(grid.nz), rows) * grid.dz
    select_z = _edge_rows(rows, grid.nz)
    select_y = _edge_rows(columns, grid.ny)
    cell = row * wide.size + column
    # v runs along the lower edge to starboard and back along the upper one; w up the starboard edge, down the port one.
    from_v = sparse.csr_array(sparse.kron(select_z[:-1] - select_z[1:], along_y, format="csr"))[cell]
    from_w = sparse.csr_array(sparse.kron(along_z, select_y[1:] - select_y[:-1], format="csr"))[cell]
    points = np.unique(np.concatenate([from_v.indices, from_w.indices]))
    return WakeTiles(
        y=(y_edges[column] + y_edges[column + 1]) / 2,
        z=(z_edges[row] + z_edges[row + 1]) / 2,
        width=wide[column] * grid.dy,
        height=high[row] * grid.dz,
        row=row,
        column=column,
        y_edges=y_edges,
        z_edges=z_edges,
        points=points,
        from_v=sparse.csr_array(from_v[:, points]),
        from_w=sparse.csr_array(from_w[:, points]),
    )


def _any_inside(mask: NDArray[np.bool_], edges: NDArray[np.int_], axis: int) -> NDArray[np.bool_]:
    inside = np.logical_or.reduceat(mask, edges[:-1], axis=axis)
    last = np.take(mask, edges[1:], axis=axis)
    result: NDArray[np.bool_] = inside | last
    return result


def _summed(weights: sparse.csr_array, edges: NDArray[np.int_]) -> sparse.csr_array:
    intervals = np.arange(edges[-1])
    cell = np.searchsorted(edges, intervals, side="right") - 1
    gather = sparse.csr_array((np.ones(intervals.size), (cell, intervals)), shape=(edges.size - 1, intervals.size))
    return sparse.csr_array(gather @ weights)


def _edge_rows(edges: NDArray[np.int_], points: int) -> sparse.csr_array:
    return sparse.csr_array((np.ones(edges.size), (np.arange(edges.size), edges)), shape=(edges.size, points))
