"""From points to a uniform grid: placed, averaged, filled and resampled, with all of it flagged."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.intake.gridding.duplicates import check_duplicates
from wakeledger.intake.gridding.lattice import find_lattice, rows_in_order
from wakeledger.intake.gridding.record import Gridding
from wakeledger.intake.gridding.scattered import make_scattered
from wakeledger.intake.gridding.tensor import make_tensor

__all__ = ["Gridding", "check_duplicates", "make_gridding"]

#: Points this close to one line, as a share of its length, are collinear.
_COLLINEAR = 1e-3


def make_gridding(
    y: Array,
    z: Array,
    usable: NDArray[np.bool_],
    *,
    row: NDArray[np.integer] | None = None,
    spacing: float | tuple[float, float] | None = None,
    degree: int = 3,
    max_cells: int = 400_000,
    mesh: bool = False,
) -> Gridding:
    """Work out how values at points become fields on a uniform grid.

    Parameters
    ----------
    y, z : ndarray, shape (n,)
        Positions, m, in file order; any order gives the same grid.
    usable : ndarray of bool, shape (n,)
        Points whose measurement can be used; the others are missing cells, and filled.
    row : ndarray of int, shape (n,), optional
        Traverse row of each point; deduced from the order of the points if absent.
    spacing : float or (float, float), optional
        Largest spacing of the grid (along y and z), m. By default uniform lines are kept, and other lines are resampled
        to the finest part of their spacing. Uniform lines that are too far apart are subdivided.
    degree : {3, 5}, optional
        Degree of the splines, or of the radial functions between scattered points.
    max_cells : int, optional
        Most cells of a resampled grid.
    mesh : bool, optional
        Whether the points are those of a mesh that was made for the flow, as stretched as it.

    Returns
    -------
    Gridding
        Positions that differ by less than 2 % of the spacing are on one line.

    Raises
    ------
    DataError
        If a position is not finite, nothing is usable, the points lie on one line, or there are fewer than 5 x 5.
    ValueError
        If an option is out of range or the arrays differ in length.
    """
    y, z = np.asarray(y, dtype=float), np.asarray(z, dtype=float)
    usable = np.asarray(usable, dtype=bool)
    if not (y.ndim == 1 and y.shape == z.shape == usable.shape):
        raise ValueError(f"y, z and usable must be of one length, {y.shape}, {z.shape}, {usable.shape} were given")
    if degree not in {3, 5}:
        raise ValueError(f"degree must be 3 or 5, {degree} was given")
    steps = None if spacing is None else (spacing if isinstance(spacing, tuple) else (spacing, spacing))
    if steps is not None and not all(step > 0 for step in steps):
        raise ValueError(f"spacing must be positive, {spacing} m was given")
    _refuse_degenerate(y, z, usable)
    lattice = find_lattice(y, z)
    rows = rows_in_order(y, z, lattice) if row is None else np.asarray(row, dtype=np.int64)
    if rows.shape != y.shape:
        raise ValueError(f"row must have one entry for each of the {y.size} points, {rows.shape} was given")
    if lattice is not None:
        return make_tensor(lattice, usable, rows, spacing=steps, degree=degree, max_cells=max_cells)
    return make_scattered(y, z, usable, rows, spacing=steps, max_cells=max_cells, mesh=mesh, degree=degree)


def _refuse_degenerate(y: Array, z: Array, usable: NDArray[np.bool_]) -> None:
    if not (np.isfinite(y).all() and np.isfinite(z).all()):
        raise DataError("a position is not a finite number", remedy="give the position of every point")
    number = int(np.count_nonzero(usable))
    if not number:
        raise DataError(
            f"none of the {y.size} points has a usable measurement",
            remedy="check which columns are named and which values are missing",
        )
    if number < 2:
        raise DataError("the survey has one usable point", remedy="a plane needs at least 5 x 5 points")
    centred = np.column_stack([y[usable] - y[usable].mean(), z[usable] - z[usable].mean()])
    size = np.linalg.svd(centred, compute_uv=False)
    if size[0] == 0:
        raise DataError("all points stand at one place", remedy="a plane needs at least 5 x 5 points")
    if size[-1] <= _COLLINEAR * size[0]:
        across_y, across_z = np.ptp(centred, axis=0)
        if across_z <= _COLLINEAR * across_y:
            line = f"one row, at z = {z[usable].mean():g} m"
        elif across_y <= _COLLINEAR * across_z:
            line = f"one row, at y = {y[usable].mean():g} m"
        else:
            line = "one slanting line"
        raise DataError(
            f"all {number} usable points lie on {line}",
            remedy="a plane needs at least 5 x 5 points; a single row can only give a section's drag",
        )
