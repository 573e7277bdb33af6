"""The plane shared out between overlapping cells whose circulations are means of closed line integrals of the velocity.

A cell is a tent over a square lattice of step t: the tent-weighted circulation is the mean of the line integrals
around the squares of side t that are centred within half a step of the lattice point. Every velocity is used, not just
those on a few outlines, which keeps noise down; the tents add up to one and reproduce positions, so that circulation
and its first moment are conserved. Tents of small step cover the wake; wider ones take what they leave of the outer
flow. The outer flow counts less the nearer the window's edge, beyond which no velocity is known.

The lattice lies symmetrically in the window, so that mirrored surveys are shared out in mirrored ways.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage, sparse, special

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.circulation import cell_circulations, cell_circulations_adjoint, interval_weights
from wakeledger.physics.fields.gaussian_elements import Reflection

Mask = NDArray[np.bool_]

#: Step of the outer flow's tents in units of the wake's.
OUTER_STEP = 4.0
# Wider still where more than this many would be needed.
_MOST_OUTER = 400
# The wake's tents reach this many steps beyond its mask.
_MARGIN = 1.0
# The outer flow counts 1 − s⁴, s its distance from the wake over that from the wake to the edge: flat at first, so that
# vorticity that a mask has missed still counts.
_FADING = 4
# Points worked on at once.
_BATCH = 60_000
# Weights that cancel but for rounding, and cells with next to no weight.
_CANCELLED = 1e-12
_EMPTY = 1e-6


@dataclass(frozen=True)
class WakeCells:
    """Overlapping cells of the plane.

    Attributes
    ----------
    grid : UniformGrid
        The grid.
    y, z : ndarray, shape (n,)
        Weighted centres, m.
    area : ndarray, shape (n,)
        Area that each cell stands for, m².
    spread : ndarray, shape (n,)
        Sum of the second moments along y and z about the centre, m²: a² of the Gaussian that is as wide.
    weights : sparse array, shape (n, (nz − 1)(ny − 1))
        Weight of each cell on the squares between grid points.
    """

    grid: UniformGrid
    y: Array
    z: Array
    area: Array
    spread: Array
    weights: sparse.csr_array

    @property
    def count(self) -> int:
        """Number of cells."""
        return int(self.y.size)

    def circulations(self, v: Array, w: Array) -> Array:
        """Weighted circulation of every cell.

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
        lead, shape = v.shape[:-2], v.shape[-2:]
        stacked_v, stacked_w = v.reshape(-1, *shape), w.reshape(-1, *shape)
        out = np.empty((stacked_v.shape[0], self.count))
        # A few planes at a time stay in the processor's cache.
        batch = max(1, _BATCH // (shape[0] * shape[1]))
        for start in range(0, out.shape[0], batch):
            part = slice(start, start + batch)
            squares = cell_circulations(stacked_v[part], stacked_w[part], self.grid)
            out[part] = (self.weights @ squares.reshape(squares.shape[0], -1).T).T
        return out.reshape(*lead, self.count)

    def velocity_derivatives(self, by_cell: Array) -> tuple[Array, Array]:
        """Derivatives of Σ by_cell Γ with respect to v and w, two arrays of shape (nz, ny)."""
        squares = (self.weights.T @ by_cell).reshape(self.grid.nz - 1, self.grid.ny - 1)
        return cell_circulations_adjoint(squares, self.grid)

    def covariance(self, variance_v: Array | float, variance_w: Array | float) -> sparse.csr_array:
        """Covariance of the circulations from independent noise of the velocities.

        Parameters
        ----------
        variance_v, variance_w : float or ndarray, shape (nz, ny)
            Variances at the grid points, m²/s².

        Returns
        -------
        sparse array, shape (n, n)
            m⁴/s².
        """
        grid = self.grid
        along_y, along_z = interval_weights(grid.ny) * grid.dy, interval_weights(grid.nz) * grid.dz
        # v runs along the lower edge to starboard and back along the upper one; w up one side and down the other.
        from_v = _clean(self.weights @ sparse.kron(-_steps(grid.nz), along_y, format="csr"))
        from_w = _clean(self.weights @ sparse.kron(along_z, _steps(grid.ny), format="csr"))
        spread_v, spread_w = (np.broadcast_to(x, grid.shape).ravel()[None, :] for x in (variance_v, variance_w))
        return sparse.csr_array((from_v * spread_v) @ from_v.T + (from_w * spread_w) @ from_w.T)

    def gaussian_share(self, y: float, z: float, core: float) -> Array:
        """Share of one Gaussian vortex's circulation that falls to each cell, shape (n,).

        Parameters
        ----------
        y, z, core : float
            The vortex, m.

        Returns
        -------
        ndarray, shape (n,)
        """
        along_y = np.diff(special.erf((self.grid.y - y) / core)) / 2
        along_z = np.diff(special.erf((self.grid.z - z) / core)) / 2
        result: Array = self.weights @ np.outer(along_z, along_y).ravel()
        return result


def share_out(
    grid: UniformGrid, wake: Mask, step: float, *, excluded: Mask | None = None, reflection: Reflection = None
) -> WakeCells:
    """Share the window out between cells, small ones in the wake and wide ones outside.

    Parameters
    ----------
    grid : UniformGrid
        The grid.
    wake : ndarray of bool, shape (nz, ny)
        Where the small cells are.
    step : float
        Step of their lattice, m; taken as the wider grid spacing at least.
    excluded : ndarray of bool, shape (nz, ny), optional
        What does not count at all.
    reflection : {"y", "z"}, optional
        Plane of symmetry; the outer flow goes on beyond the window's edge nearest to it.

    Returns
    -------
    WakeCells
    """
    step = max(step, grid.dy, grid.dz)
    wake = np.asarray(wake, bool)
    if excluded is not None:
        wake = wake & ~np.asarray(excluded, bool)
    presence = _presence(grid, wake, excluded, reflection).ravel()
    fine = _tents(grid, step)
    near = _squares(_within(grid, wake, _MARGIN * step)).ravel()
    fine = sparse.csr_array(fine[np.flatnonzero(fine @ near.astype(float) > 0)])
    left = 1.0 - np.asarray(fine.sum(axis=0)).ravel()
    left[left < _CANCELLED] = 0.0
    outer_step = max(OUTER_STEP * step, float(np.sqrt(grid.area / _MOST_OUTER)))
    outer = _tents(grid, outer_step) * left[None, :]
    weights = sparse.csr_array(sparse.vstack([fine, outer]) * presence[None, :])
    weights.eliminate_zeros()
    area = np.asarray(weights.sum(axis=1)).ravel() * grid.cell_area
    weights = sparse.csr_array(weights[np.flatnonzero(area > _EMPTY * step**2)])
    return _with_moments(grid, weights)


def _with_moments(grid: UniformGrid, weights: sparse.csr_array) -> WakeCells:
    yy, zz = np.meshgrid(grid.y[:-1] + grid.dy / 2, grid.z[:-1] + grid.dz / 2)
    yy, zz = yy.ravel(), zz.ravel()
    total = np.asarray(weights.sum(axis=1)).ravel()
    y, z = (weights @ yy) / total, (weights @ zz) / total
    # Taken about the window's middle so that the difference of squares keeps its digits.
    middle_y, middle_z = yy.mean(), zz.mean()
    square = weights @ ((yy - middle_y) ** 2 + (zz - middle_z) ** 2) / total
    own = (grid.dy**2 + grid.dz**2) / 12
    spread = square - (y - middle_y) ** 2 - (z - middle_z) ** 2 + own
    return WakeCells(grid=grid, y=y, z=z, area=total * grid.cell_area, spread=spread, weights=weights)


def _tents(grid: UniformGrid, step: float) -> sparse.csr_array:
    """Weights of all tents of one step on the squares between grid points, shape (tents, squares)."""
    along_y = _tents_along(grid.ny - 1, step / grid.dy)
    along_z = _tents_along(grid.nz - 1, step / grid.dz)
    return sparse.csr_array(sparse.kron(along_z, along_y, format="csr"))


def _tents_along(intervals: int, step: float) -> sparse.csr_array:
    pieces = max(1, int(np.ceil(intervals / step - 1e-9)))
    nodes = intervals / 2 + step * (np.arange(pieces + 1) - pieces / 2)
    middle = np.arange(intervals) + 0.5
    return sparse.csr_array(np.maximum(0.0, 1 - np.abs(np.subtract.outer(nodes, middle)) / step))


def _presence(grid: UniformGrid, wake: Mask, excluded: Mask | None, reflection: Reflection) -> Array:
    """How much each square counts: 1 in the wake, falling to 0 at the window's edge and at what is excluded."""
    void = np.zeros(grid.shape, dtype=bool) if excluded is None else np.asarray(excluded, bool)
    framed = np.pad(~void, 1)
    if reflection == "y":
        framed[:, 0 if abs(grid.y[0]) < abs(grid.y[-1]) else -1] = True
    elif reflection == "z":
        framed[0 if abs(grid.z[0]) < abs(grid.z[-1]) else -1, :] = True
    to_void = ndimage.distance_transform_edt(framed, sampling=(grid.dz, grid.dy))[1:-1, 1:-1]
    if not wake.any():
        return np.where(_squares(void), 0.0, 1.0)
    to_wake = ndimage.distance_transform_edt(~wake, sampling=(grid.dz, grid.dy))
    share = to_wake / np.maximum(to_wake + to_void, np.finfo(float).tiny)
    at_points = np.where(void, 0.0, 1 - share**_FADING)
    result: Array = (at_points[:-1, :-1] + at_points[1:, :-1] + at_points[:-1, 1:] + at_points[1:, 1:]) / 4
    return result


def _within(grid: UniformGrid, mask: Mask, distance: float) -> Mask:
    if not mask.any():
        return mask
    result: Mask = ndimage.distance_transform_edt(~mask, sampling=(grid.dz, grid.dy)) <= distance
    return result


def _squares(mask: Mask) -> Mask:
    """Squares with any corner inside."""
    result: Mask = mask[:-1, :-1] | mask[1:, :-1] | mask[:-1, 1:] | mask[1:, 1:]
    return result


def _steps(points: int) -> sparse.csr_array:
    return sparse.csr_array(sparse.diags_array([-1.0, 1.0], offsets=[0, 1], shape=(points - 1, points)))


def _clean(matrix: sparse.csr_array) -> sparse.csr_array:
    matrix = sparse.csr_array(matrix)
    matrix.data[np.abs(matrix.data) < _CANCELLED * np.abs(matrix.data).max(initial=0.0)] = 0.0
    matrix.eliminate_zeros()
    return matrix
