"""Smooth filling of cells without a measurement, linear in the data around them.

The filled values minimise the bending energy of a thin plate, the sum of f_yy² + 2 f_yz² + f_zz² over the grid, with
the measured values held: gaps inside the survey continue cubic polynomials exactly on a uniform grid. Cells far from
any measurement, and not between two of their row or column, also pay for the slope, which holds extrapolation within
the range of its surroundings.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from wakeledger.core.grid import Array

#: Cells further than this many cells from any measurement are far from the data.
FAR = 2.0


@dataclass(frozen=True, eq=False)
class GapFill:
    """Fills the gaps of fields on one grid.

    Attributes
    ----------
    missing, used : ndarray of int
        Flat indices of the cells that are filled, and of the measured cells they depend on.
    """

    missing: NDArray[np.intp]
    used: NDArray[np.intp]
    _coupling: Any
    _normal: Any

    @cached_property
    def _factor(self) -> Any:
        from scipy.sparse.linalg import splu

        return splu(self._normal)

    def __getstate__(self) -> dict[str, Any]:
        """The system without its factors, which cannot be copied between processes; they are worked out again."""
        return {name: value for name, value in self.__dict__.items() if name != "_factor"}

    def into(self, fields: Array) -> None:
        """Overwrite the missing cells of fields in place.

        Parameters
        ----------
        fields : ndarray, shape (..., nz * ny)
            Flat fields; what stands in the missing cells is ignored.
        """
        if self.missing.size:
            known = np.moveaxis(fields[..., self.used], -1, 0)
            right = self._coupling @ known.reshape(self.used.size, -1)
            solved = self._factor.solve(right).reshape((self.missing.size, *known.shape[1:]))
            fields[..., self.missing] = np.moveaxis(solved, 0, -1)

    def energy(self) -> Array:
        """Matrix of the energy in the missing cells, shape (n, n), the measured ones held; dense, for small gaps."""
        return np.asarray(self._normal.toarray())

    def back(self, weights: Array) -> None:
        """Move weights of the missing cells, in place, to the measured cells they depend on: the transpose of `into`.

        Parameters
        ----------
        weights : ndarray, shape (k, nz * ny)
            Weights of flat fields; those of missing cells become zero.
        """
        if self.missing.size:
            solved = self._factor.solve(np.ascontiguousarray(weights[:, self.missing].T), trans="T")
            weights[:, self.used] += (self._coupling.T @ solved).T
            weights[:, self.missing] = 0.0


def distance_to_data(measured: NDArray[np.bool_]) -> Array:
    """Distance of each cell to the nearest measured one, in cells.

    Parameters
    ----------
    measured : ndarray of bool, shape (nz, ny)
        Cells with a measurement; at least one.

    Returns
    -------
    ndarray, shape (nz, ny)
    """
    from scipy.ndimage import distance_transform_edt

    return np.asarray(distance_transform_edt(~measured), dtype=float)


def _between(measured: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Cells with measurements on both sides of them along their row or their column."""

    def bracketed(axis: int) -> NDArray[np.bool_]:
        before = np.logical_or.accumulate(measured, axis=axis)
        after = np.flip(np.logical_or.accumulate(np.flip(measured, axis), axis=axis), axis)
        both: NDArray[np.bool_] = before & after
        return both

    return bracketed(0) | bracketed(1)


def make_gap_fill(measured: NDArray[np.bool_], y: Array, z: Array) -> GapFill:
    """Prepare the filling of every cell that is not measured.

    Parameters
    ----------
    measured : ndarray of bool, shape (nz, ny)
        Cells with a measurement; they must not all lie on one line.
    y, z : ndarray, shape (ny,), (nz,)
        Ascending positions of the grid lines, m; uniform or not.

    Returns
    -------
    GapFill
        Holds the sparse system, factorised on first use, so that each further field costs one substitution.
    """
    missing = np.flatnonzero(~measured)
    if not missing.size:
        return GapFill(missing, missing, None, None)
    far = (distance_to_data(measured) > FAR) & ~_between(measured)
    rows = _energy_rows(float(np.median(np.diff(y))), float(np.median(np.diff(z))), y, z, far)
    touched = rows[:, missing]
    keep = np.flatnonzero(np.diff(touched.indptr))
    at_missing = touched[keep]
    at_known = rows[keep][:, np.flatnonzero(measured)]
    normal = (at_missing.T @ at_missing).tocsc()
    coupling = (-(at_missing.T @ at_known)).tocsc()
    used = np.flatnonzero(np.diff(coupling.indptr))
    return GapFill(missing, np.flatnonzero(measured)[used], coupling[:, used].tocsr(), normal)


def _differences(x: Array, unit: float) -> tuple[Any, Any, Array, Array, Array]:
    """First and second differences along one axis with the lengths that points, intervals and triples stand for."""
    h = np.diff(x) / unit
    n = x.size
    first = sparse.diags_array([-1 / h, 1 / h], offsets=[0, 1], shape=(n - 1, n))
    left, right = h[:-1], h[1:]
    second = sparse.diags_array(
        [2 / (left * (left + right)), -2 / (left * right), 2 / (right * (left + right))],
        offsets=[0, 1, 2],
        shape=(n - 2, n),
    )
    share = np.zeros(n)
    share[:-1] += h / 2
    share[1:] += h / 2
    return first, second, share, h, (left + right) / 2


def _energy_rows(dy: float, dz: float, y: Array, z: Array, far: NDArray[np.bool_]) -> Any:
    y1, y2, y_point, y_interval, y_triple = _differences(y, dy)
    z1, z2, z_point, z_interval, z_triple = _differences(z, dz)

    def weighted(along_z: Any, along_y: Any, weight_z: Array, weight_y: Array) -> Any:
        weight = np.sqrt(np.outer(weight_z, weight_y).ravel())
        return sparse.diags_array(weight) @ sparse.kron(along_z, along_y, format="csr")

    one_y, one_z = sparse.eye_array(y.size), sparse.eye_array(z.size)
    rows = [
        weighted(one_z, y2, z_point, y_triple),
        weighted(z2, one_y, z_triple, y_point),
        np.sqrt(2.0) * weighted(z1, y1, z_interval, y_interval),
    ]
    if far.any():
        slopes = sparse.vstack(
            [weighted(one_z, y1, z_point, y_interval), weighted(z1, one_y, z_interval, y_point)], format="csr"
        )
        touched = abs(slopes) @ far.ravel().astype(float)
        rows.append(slopes[np.flatnonzero(touched)])
    return sparse.vstack(rows, format="csr")
