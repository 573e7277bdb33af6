"""The part of the window that the points cover.

Scattered and polar points leave the corners of their bounding box empty; what is filled in there is no measurement, and
integrals over the window or along its edge must not see it.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from wakeledger.core.errors import DataError
from wakeledger.core.flags import Flag
from wakeledger.core.grid import Array, UniformGrid
from wakeledger.intake.gridding.record import Gridding, Scheme

_FEWEST = 5


@dataclass(frozen=True, eq=False)
class CutScheme:
    """Another scheme's fields, cut to a rectangle of its grid.

    Attributes
    ----------
    whole : Scheme
        The scheme that grids the points.
    rows, columns : slice
        The rectangle.
    mirrored : {"y", "z"} or None
        Reflection plane between two halves of the points.
    shape : (int, int)
        Shape of the whole grid.
    mirrored : {"y", "z"} or None
        Reflection plane between two halves of the points.
    """

    whole: Scheme
    rows: slice
    columns: slice
    shape: tuple[int, int]
    mirrored: str | None = None

    def fields(self, values: Array) -> Array:
        """Grid values of shape (draws, n) to (draws, nz, ny)."""
        return self.whole.fields(values)[:, self.rows, self.columns]

    def transposed(self, weights: Array) -> Array:
        """Weights of the points, (k, n), from weights of the cells, (k, nz, ny)."""
        whole = np.zeros((weights.shape[0], *self.shape))
        whole[:, self.rows, self.columns] = weights
        return self.whole.transposed(whole)

    def operators(self) -> tuple[Array, Array] | None:
        """Dense operators along z and y, None where gridding does not separate."""
        operators = self.whole.operators()
        return None if operators is None else (operators[0][self.rows], operators[1][self.columns])

    def near(self, points: NDArray[np.bool_]) -> NDArray[np.bool_]:
        """Cells whose nearest point is among the given ones, shape (nz, ny)."""
        return self.whole.near(points)[self.rows, self.columns]

    def decimated(self, step: int, phase: tuple[int, int]) -> Gridding:
        """The same with every `step`-th row and column only, cut to what is covered then."""
        return covered_window(self.whole.decimated(step, phase), mirrored=self.mirrored)


def covered_window(gridding: Gridding, *, mirrored: str | None = None) -> Gridding:
    """Cut a gridding to the largest rectangle that its points cover.

    Parameters
    ----------
    gridding : Gridding
        The gridding.
    mirrored : {"y", "z"}, optional
        Reflection plane between two halves of the points, next to which nothing need be measured.

    Returns
    -------
    Gridding
        The same one where no cell far from the data touches the window's edge. Holes inside the window stay: they are
        filled and flagged.

    Raises
    ------
    DataError
        If no rectangle of at least 5 x 5 cells is covered.
    """
    outside = _outside(gridding.flag, gridding.grid, mirrored)
    if not outside.any():
        return gridding
    rows, columns = _largest_rectangle(~outside)
    if rows.stop - rows.start < _FEWEST or columns.stop - columns.start < _FEWEST:
        raise DataError(
            "the points cover no rectangle of 5 x 5 cells", remedy="measure a plane without large gaps along its edges"
        )
    whole = gridding.grid
    grid = UniformGrid(
        whole.y0 + columns.start * whole.dy,
        whole.z0 + rows.start * whole.dz,
        whole.dy,
        whole.dz,
        columns.stop - columns.start,
        rows.stop - rows.start,
    )
    filled = gridding.filled[rows, columns]
    return replace(
        gridding,
        grid=grid,
        flag=gridding.flag[rows, columns],
        filled=filled,
        filled_fraction=float(filled.mean()),
        scheme=CutScheme(gridding.scheme, rows, columns, gridding.grid.shape, mirrored),
    )


def _outside(flag: NDArray[np.int32], grid: UniformGrid, mirrored: str | None) -> NDArray[np.bool_]:
    """Cells far from the data that hang together with the window's edge, not through the gap between two halves."""
    far = (flag & Flag.FAR_FROM_DATA.value) != 0
    if mirrored is not None and not far.all():
        across = np.abs(grid.mesh()[0 if mirrored == "y" else 1])
        far &= across >= across[~far].min()
    labels, _ = ndimage.label(far)
    edge = np.unique(np.concatenate([labels[0], labels[-1], labels[:, 0], labels[:, -1]]))
    found: NDArray[np.bool_] = np.isin(labels, edge[edge > 0])
    return found


def _largest_rectangle(inside: NDArray[np.bool_]) -> tuple[slice, slice]:
    """Largest rectangle of true cells, by the height of the true column that ends in each row."""
    nz, ny = inside.shape
    height = np.zeros(ny, dtype=int)
    best, area = (slice(0, 0), slice(0, 0)), 0
    for row in range(nz):
        height = np.where(inside[row], height + 1, 0)
        stack: list[int] = []
        for column in range(ny + 1):
            current = height[column] if column < ny else 0
            while stack and height[stack[-1]] >= current:
                tall = int(height[stack.pop()])
                left = stack[-1] + 1 if stack else 0
                if tall * (column - left) > area:
                    area = tall * (column - left)
                    best = (slice(row - tall + 1, row + 1), slice(left, column))
            stack.append(column)
    return best
