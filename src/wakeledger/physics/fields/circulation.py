"""Circulation as closed line integrals of the measured velocity: no derivative is taken.

Two ways in: `cell_circulations` integrates around every cell of the grid at once, so that the circulation of any union
of cells is a plain sum in which the inner edges cancel; `CrossflowSpline` integrates along circles, rectangles and
polygons that lie anywhere in the window.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.interpolate import RectBivariateSpline

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.banded import Banded

# Half of the widest stencil of the edge integrals: eight points, exact for polynomials of degree seven.
_REACH = 4
_DEGREE = 5
_STENCIL = _DEGREE + 1


@lru_cache(maxsize=32)
def interval_weights(n: int) -> sparse.csr_array:
    """Integral from each point to the next along one axis as a sparse matrix, for unit spacing.

    Parameters
    ----------
    n : int
        Number of points along the axis, at least 2.

    Returns
    -------
    sparse array, shape (n - 1, n)
        Row i integrates the polynomial through the eight points nearest to the interval, fewer and one-sided where the
        axis ends.
    """
    reach = min(_REACH, n // 2)
    rows, columns, weights = [], [], []
    for i in range(n - 1):
        first = min(max(i + 1 - reach, 0), n - 2 * reach)
        points = np.arange(first, first + 2 * reach)
        offsets = points - i - 0.5
        powers = np.arange(2 * reach)
        moments = (0.5 ** (powers + 1) - (-0.5) ** (powers + 1)) / (powers + 1)
        rows += [i] * points.size
        columns += points.tolist()
        weights += np.linalg.solve(np.vander(offsets, increasing=True).T, moments).tolist()
    return sparse.csr_array((weights, (rows, columns)), shape=(n - 1, n))


def cell_circulations(v: Array, w: Array, grid: UniformGrid) -> Array:
    """Circulation around every cell between four neighbouring points.

    Parameters
    ----------
    v, w : ndarray, shape (..., nz, ny)
        Crossflow, m/s.
    grid : UniformGrid
        The grid they live on.

    Returns
    -------
    ndarray, shape (..., nz - 1, ny - 1)
        ∮(v dy + w dz) counter-clockwise, m²/s; sums over neighbouring cells are the line integral around their union.
    """
    along_y = _intervals(grid.ny).along_y(np.asarray(v, float))
    along_z = _intervals(grid.nz).along_z(np.asarray(w, float))
    result: Array = (along_y[..., :-1, :] - along_y[..., 1:, :]) * grid.dy
    result += (along_z[..., 1:] - along_z[..., :-1]) * grid.dz
    return result


def cell_circulations_adjoint(weights: Array, grid: UniformGrid) -> tuple[Array, Array]:
    """Derivatives of a weighted sum of cell circulations with respect to the velocities.

    Parameters
    ----------
    weights : ndarray, shape (..., nz - 1, ny - 1)
        Weight of each cell.
    grid : UniformGrid
        The grid.

    Returns
    -------
    by_v, by_w : ndarray, shape (..., nz, ny)
        With Σ weights · Γ = Σ (by_v v + by_w w), m times the weights' unit.
    """
    padded = np.pad(np.asarray(weights, float), [(0, 0)] * (np.ndim(weights) - 2) + [(1, 1), (1, 1)])
    across_z = padded[..., 1:, 1:-1] - padded[..., :-1, 1:-1]
    across_y = padded[..., 1:-1, :-1] - padded[..., 1:-1, 1:]
    by_v: Array = _back_on_points(grid.ny).along_y(across_z) * grid.dy
    by_w: Array = _back_on_points(grid.nz).along_z(across_y) * grid.dz
    return by_v, by_w


@lru_cache(maxsize=32)
def _intervals(n: int) -> Banded:
    return Banded.of(interval_weights(n))


@lru_cache(maxsize=32)
def _back_on_points(n: int) -> Banded:
    return Banded.of(sparse.csr_array(interval_weights(n).T))


def circle_weights(grid: UniformGrid, y: float, z: float, radius: float) -> tuple[NDArray[np.intp], Array, Array]:
    """The line integral around a circle as weights on grid values, for many planes at once.

    Parameters
    ----------
    grid : UniformGrid
        The grid, at least six points along each axis.
    y, z, radius : float
        The circle, m; inside the window.

    Returns
    -------
    points : ndarray of int, shape (n,)
        Flat indices of the points that count.
    on_v, on_w : ndarray, shape (n,)
        Weights, m: Γ = on_v · v + on_w · w, with fifth-degree polynomials between the points.

    Raises
    ------
    ValueError
        If the grid is too small.
    """
    if min(grid.shape) < _STENCIL:
        raise ValueError(f"polynomials of degree {_DEGREE} need at least {_STENCIL} points along each axis")
    n = _circle_points(radius, min(grid.dy, grid.dz))
    angle = 2 * np.pi * (np.arange(n) + 0.5) / n
    cosine, sine = np.cos(angle), np.sin(angle)
    columns, along_y = _lagrange((y + radius * cosine - grid.y0) / grid.dy, grid.ny)
    rows, along_z = _lagrange((z + radius * sine - grid.z0) / grid.dz, grid.nz)
    flat = (rows[:, :, None] * grid.ny + columns[:, None, :]).reshape(n, -1)
    weights = (along_z[:, :, None] * along_y[:, None, :]).reshape(n, -1) * (2 * np.pi * radius / n)
    points, where = np.unique(flat, return_inverse=True)
    where = where.ravel()
    on_v: Array = np.bincount(where, (-weights * sine[:, None]).ravel(), points.size).astype(float)
    on_w: Array = np.bincount(where, (weights * cosine[:, None]).ravel(), points.size).astype(float)
    return points, on_v, on_w


def _lagrange(position: Array, count: int) -> tuple[NDArray[np.intp], Array]:
    """Indices and weights of the six points around each position given in grid steps, shape (n, 6)."""
    first = np.clip(np.floor(position).astype(np.intp) - _STENCIL // 2 + 1, 0, count - _STENCIL)
    offset = (position - first)[:, None]
    weights = np.empty((position.size, _STENCIL))
    for k in range(_STENCIL):
        others = np.delete(np.arange(_STENCIL), k)
        weights[:, k] = np.prod((offset - others) / (k - others), axis=1)
    return first[:, None] + np.arange(_STENCIL), weights


def _circle_points(radius: float, spacing: float) -> int:
    # The trapezium rule on a circle is spectrally accurate once the points are about as close as the grid's; a multiple
    # of four keeps mirrored circles mirrored.
    return 4 * max(8, int(np.ceil(np.pi * radius / spacing / 2)))


class CrossflowSpline:
    """The measured crossflow as a quintic spline, for line integrals along curves inside the window.

    Parameters
    ----------
    v, w : ndarray, shape (nz, ny)
        Crossflow, m/s.
    y, z : ndarray, shape (ny,), (nz,)
        Ascending coordinates of columns and rows, m; they need not be uniform.

    Raises
    ------
    ValueError
        If the shapes do not fit, a value is not finite, or an axis has fewer than 2 points.
    """

    def __init__(self, v: Array, w: Array, y: Array, z: Array) -> None:
        self.y, self.z = np.asarray(y, float), np.asarray(z, float)
        v, w = np.asarray(v, float), np.asarray(w, float)
        shape = (self.z.size, self.y.size)
        if v.shape != shape or w.shape != shape:
            raise ValueError(f"v and w need the shape (nz, ny) = {shape}, {v.shape} and {w.shape} were given")
        if not (np.isfinite(v).all() and np.isfinite(w).all()):
            raise ValueError("v and w must be finite everywhere; fill or cut out missing points first")
        if min(shape) < 2:
            raise ValueError(f"a spline needs at least 2 points along each axis, the shape {shape} was given")
        degrees = {"kx": min(_DEGREE, shape[0] - 1), "ky": min(_DEGREE, shape[1] - 1)}
        self._v = RectBivariateSpline(self.z, self.y, v, **degrees)
        self._w = RectBivariateSpline(self.z, self.y, w, **degrees)

    @classmethod
    def on_grid(cls, v: Array, w: Array, grid: UniformGrid) -> CrossflowSpline:
        """The spline of fields of shape (nz, ny) on a uniform grid."""
        return cls(v, w, grid.y, grid.z)

    def velocity(self, y: Array, z: Array) -> tuple[Array, Array]:
        """Crossflow v, w at positions y, z (arrays of one shape, m), m/s."""
        return self._v.ev(z, y), self._w.ev(z, y)

    def around_circle(self, y: float, z: float, radius: float | Array) -> Array:
        """Circulation around circles about one centre.

        Parameters
        ----------
        y, z : float
            Centre, m.
        radius : float or ndarray
            Radii, m; the circles must lie inside the window.

        Returns
        -------
        ndarray
            Γ(r) = ∮(v dy + w dz), m²/s, counter-clockwise; shape of `radius`.

        Raises
        ------
        ValueError
            If a circle leaves the window.
        """
        radii = np.asarray(radius, float)
        room = min(y - self.y[0], self.y[-1] - y, z - self.z[0], self.z[-1] - z)
        if radii.size and radii.max() > room * (1 + 1e-12):
            raise ValueError(f"a circle of radius {radii.max():g} m about ({y:g}, {z:g}) m leaves the window")
        spacing = min(np.diff(self.y).min(), np.diff(self.z).min())
        largest = float(radii.max()) if radii.size else 0.0
        n = _circle_points(largest, spacing)
        angle = 2 * np.pi * (np.arange(n) + 0.5) / n
        cosine, sine = np.cos(angle), np.sin(angle)
        v, w = self.velocity(y + radii[..., None] * cosine, z + radii[..., None] * sine)
        result: Array = (w * cosine - v * sine).mean(axis=-1) * 2 * np.pi * radii
        return result

    def around_rectangle(self, y_range: tuple[float, float], z_range: tuple[float, float]) -> float:
        """Circulation around the rectangle between two y and two z, m²/s, counter-clockwise."""
        (y0, y1), (z0, z1) = y_range, z_range
        return self.around_polygon(np.array([y0, y1, y1, y0]), np.array([z0, z0, z1, z1]))

    def around_polygon(self, y: Array, z: Array) -> float:
        """Circulation around a closed polygon.

        Parameters
        ----------
        y, z : ndarray, shape (n,)
            Corners in order, m; the last is joined to the first.

        Returns
        -------
        float
            ∮(v dy + w dz) in the order of the corners, m²/s: counter-clockwise corners give Γ > 0 for ξ > 0.

        Raises
        ------
        ValueError
            If a corner lies outside the window.
        """
        y, z = np.asarray(y, float), np.asarray(z, float)
        slack = 1e-12 * (self.y[-1] - self.y[0] + self.z[-1] - self.z[0])
        if min(y.min() - self.y[0], self.y[-1] - y.max(), z.min() - self.z[0], self.z[-1] - z.max()) < -slack:
            raise ValueError(
                f"the contour leaves the window {self.y[0]:g} … {self.y[-1]:g} m by {self.z[0]:g} … {self.z[-1]:g} m"
            )
        dy, dz = np.roll(y, -1) - y, np.roll(z, -1) - z
        spacing = min(np.diff(self.y).min(), np.diff(self.z).min())
        # Composite Gauss rule: pieces no longer than the spacing, so that each meets at most a few knots.
        pieces = max(1, int(np.ceil(np.hypot(dy, dz).max() / spacing)))
        nodes, weights = np.polynomial.legendre.leggauss(4)
        fraction = ((np.arange(pieces)[:, None] + 0.5 + nodes / 2) / pieces).ravel()
        share = np.tile(weights / 2 / pieces, pieces)
        v, w = self.velocity(y[:, None] + dy[:, None] * fraction, z[:, None] + dz[:, None] * fraction)
        return float((v @ share) @ dy + (w @ share) @ dz)
