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
from wakeledger.physics.fields.circulation import cell_circulations, cell_circulations_adjoint
from wakeledger.physics.fields.gaussian_elements import Reflection
from wakeledger.physics.vortices.lattice import TentLattice, circulation_covariance

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
    lattices : tuple of TentLattice
        The tents that the cells are: those of the wake and those of the outer flow.
    """

    grid: UniformGrid
    y: Array
    z: Array
    area: Array
    spread: Array
    weights: sparse.csr_array
    lattices: tuple[TentLattice, ...]

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
        return circulation_covariance(self.lattices, self.grid, variance_v, variance_w)

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
    return cells_on(ground_of(grid, wake, excluded, reflection), step)


@dataclass(frozen=True, eq=False)
class Ground:
    """What is shared out, whatever the cells' size.

    Attributes
    ----------
    grid : UniformGrid
        The grid.
    to_wake : ndarray, shape (nz, ny)
        Distance of each point from the wake, m; infinite without a wake.
    presence : ndarray, shape (nz − 1, ny − 1)
        How much each square between points counts.
    """

    grid: UniformGrid
    to_wake: Array
    presence: Array


def ground_of(grid: UniformGrid, wake: Mask, excluded: Mask | None, reflection: Reflection) -> Ground:
    """What is shared out of a window; arguments as in `share_out`."""
    wake = np.asarray(wake, bool)
    if excluded is not None:
        wake = wake & ~np.asarray(excluded, bool)
    to_wake = np.full(grid.shape, np.inf)
    if wake.any():
        to_wake = ndimage.distance_transform_edt(~wake, sampling=(grid.dz, grid.dy))
    return Ground(grid, to_wake, _presence(grid, to_wake, excluded, reflection))


def cells_on(ground: Ground, step: float) -> WakeCells:
    """Cells of one size, m, as `share_out` makes them."""
    grid, presence = ground.grid, ground.presence
    step = max(step, grid.dy, grid.dz)
    fine_y, fine_z = _tents_along(grid.ny - 1, step / grid.dy), _tents_along(grid.nz - 1, step / grid.dz)
    near = _squares(ground.to_wake <= _MARGIN * step)
    fine = sparse.csr_array(sparse.kron(fine_z, fine_y, format="csr"))
    in_wake = np.flatnonzero(fine @ near.ravel().astype(float) > 0)
    fine = sparse.csr_array(fine[in_wake])
    left = 1.0 - np.asarray(fine.sum(axis=0)).ravel()
    left[left < _CANCELLED] = 0.0
    outer_step = max(OUTER_STEP * step, float(np.sqrt(grid.area / _MOST_OUTER)))
    outer_y, outer_z = _tents_along(grid.ny - 1, outer_step / grid.dy), _tents_along(grid.nz - 1, outer_step / grid.dz)
    outer = sparse.csr_array(sparse.kron(outer_z, outer_y, format="csr")) * left[None, :]
    weights = sparse.csr_array(sparse.vstack([fine, outer]) * presence.ravel()[None, :])
    weights.eliminate_zeros()
    area = np.asarray(weights.sum(axis=1)).ravel() * grid.cell_area
    kept = area > _EMPTY * step**2
    number = np.where(kept, np.cumsum(kept) - 1, -1)
    fine_number = np.full(fine_z.shape[0] * fine_y.shape[0], -1)
    fine_number[in_wake] = number[: in_wake.size]
    lattices = (
        _lattice(fine_z, fine_y, presence, fine_number),
        _lattice(outer_z, outer_y, left.reshape(presence.shape) * presence, number[in_wake.size :]),
    )
    return _with_moments(grid, sparse.csr_array(weights[np.flatnonzero(kept)]), lattices)


def _lattice(
    along_z: sparse.csr_array, along_y: sparse.csr_array, share: Array, number: NDArray[np.int64]
) -> TentLattice:
    shape = along_z.shape[0], along_y.shape[0]
    return TentLattice(along_z.toarray(), along_y.toarray(), share, number.reshape(shape))


def _with_moments(grid: UniformGrid, weights: sparse.csr_array, lattices: tuple[TentLattice, ...]) -> WakeCells:
    yy, zz = np.meshgrid(grid.y[:-1] + grid.dy / 2, grid.z[:-1] + grid.dz / 2)
    yy, zz = yy.ravel(), zz.ravel()
    total = np.asarray(weights.sum(axis=1)).ravel()
    y, z = (weights @ yy) / total, (weights @ zz) / total
    # Taken about the window's middle so that the difference of squares keeps its digits.
    middle_y, middle_z = yy.mean(), zz.mean()
    square = weights @ ((yy - middle_y) ** 2 + (zz - middle_z) ** 2) / total
    own = (grid.dy**2 + grid.dz**2) / 12
    spread = square - (y - middle_y) ** 2 - (z - middle_z) ** 2 + own
    area = total * grid.cell_area
    return WakeCells(grid=grid, y=y, z=z, area=area, spread=spread, weights=weights, lattices=lattices)


def _tents_along(intervals: int, step: float) -> sparse.csr_array:
    pieces = max(1, int(np.ceil(intervals / step - 1e-9)))
    nodes = intervals / 2 + step * (np.arange(pieces + 1) - pieces / 2)
    middle = np.arange(intervals) + 0.5
    return sparse.csr_array(np.maximum(0.0, 1 - np.abs(np.subtract.outer(nodes, middle)) / step))


def _presence(grid: UniformGrid, to_wake: Array, excluded: Mask | None, reflection: Reflection) -> Array:
    """How much each square counts: 1 in the wake, falling to 0 at the window's edge and at what is excluded."""
    void = np.zeros(grid.shape, dtype=bool) if excluded is None else np.asarray(excluded, bool)
    framed = np.pad(~void, 1)
    if reflection == "y":
        framed[:, 0 if abs(grid.y[0]) < abs(grid.y[-1]) else -1] = True
    elif reflection == "z":
        framed[0 if abs(grid.z[0]) < abs(grid.z[-1]) else -1, :] = True
    to_void = ndimage.distance_transform_edt(framed, sampling=(grid.dz, grid.dy))[1:-1, 1:-1]
    if np.isinf(to_wake).all():
        return np.where(_squares(void), 0.0, 1.0)
    share = to_wake / np.maximum(to_wake + to_void, np.finfo(float).tiny)
    at_points = np.where(void, 0.0, 1 - share**_FADING)
    result: Array = (at_points[:-1, :-1] + at_points[1:, :-1] + at_points[:-1, 1:] + at_points[1:, 1:]) / 4
    return result


def _squares(mask: Mask) -> Mask:
    """Squares with any corner inside."""
    result: Mask = mask[:-1, :-1] | mask[1:, :-1] | mask[:-1, 1:] | mask[1:, 1:]
    return result
