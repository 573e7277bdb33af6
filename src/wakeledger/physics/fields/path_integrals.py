"""Line integrals of the measured crossflow along grid lines: circulation, stream function, outer flow.

Everything here is an integral of v and w as measured; nothing is differentiated and no Poisson equation is solved. All
of it is linear in (v, w) and separable along the two axes, so that a small matrix per axis does the work for any
number of fields at once.

Cells are the rectangles between four neighbouring grid points; cell (iz, iy) lies between points iz, iz + 1 and
iy, iy + 1, and arrays over cells have shape (..., nz − 1, ny − 1).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.banded import Banded

#: Points of the symmetric rules inside the window; fewer towards its ends.
_WIDTH = 10
#: Rectangles on which the outer flow is read, at most.
_CONTOURS = 12
#: They start this far out, as a fraction of the room between the wake and the window's edge.
_FIRST_CONTOUR = 0.3


def _rule(offsets: Array, moments: Array) -> Array:
    """Weights at `offsets` that give the first moments (values for 1, x, x², …) exactly."""
    powers: Array = offsets[None, :] ** np.arange(offsets.size, dtype=float)[:, None]
    return np.asarray(np.linalg.solve(powers, moments), dtype=np.float64)


def _midpoint_matrix(n: int, moments: Array) -> Array:
    """One functional about the middle of each cell, exact for polynomials, on the points around it."""
    matrix = np.zeros((n - 1, n))
    rules: dict[tuple[int, int], Array] = {}
    for cell in range(n - 1):
        half = min(_WIDTH // 2, cell + 1, n - 1 - cell)
        # In the outermost cell the two-point rule would be the weakest link: lean on four points from inside.
        count = 2 * half if half > 1 else min(4, n)
        first = cell + 1 - half if half > 1 else (0 if cell == 0 else n - count)
        # Away from the ends every cell has the same rule.
        rule = rules.get((count, first - cell))
        if rule is None:
            offsets = np.arange(count, dtype=np.float64) + (first - cell - 0.5)
            rule = rules[count, first - cell] = _rule(offsets, moments[:count])
        matrix[cell, first : first + count] = rule
    matrix.flags.writeable = False
    return matrix


@lru_cache(maxsize=32)
def cell_integrals(n: int) -> Array:
    """Integral over each cell of an axis with unit spacing.

    Parameters
    ----------
    n : int
        Points along the axis, at least 4.

    Returns
    -------
    ndarray, shape (n − 1, n)
        Row i gives the integral from point i to point i + 1, tenth order inside, fourth in the outermost cells.

    Raises
    ------
    ValueError
        If there are fewer than 4 points.
    """
    if n < 4:
        raise ValueError(f"a line integral needs at least 4 points along each axis, {n} were given")
    k = np.arange(_WIDTH)
    return _midpoint_matrix(n, np.where(k % 2 == 0, 0.5**k / (k + 1), 0.0))


@lru_cache(maxsize=32)
def integrals_over_cells(n: int) -> Banded:
    """`cell_integrals` as a map from the points of an axis to its cells."""
    return Banded.of(sparse.csr_array(cell_integrals(n)))


@lru_cache(maxsize=32)
def _integrals_on_points(n: int) -> Banded:
    return Banded.of(sparse.csr_array(cell_integrals(n).T))


@lru_cache(maxsize=32)
def cell_weights(n: int) -> Array:
    """Value in the middle of each cell of the function whose running mean over one cell is the one given.

    The sum over cells of (integral of f over the cell) × (this value of g) is then ∫ f g, to tenth order, where plain
    means of g over the corners would be of second order only.

    Parameters
    ----------
    n : int
        Points along the axis, at least 4.

    Returns
    -------
    ndarray, shape (n − 1, n)

    Raises
    ------
    ValueError
        If there are fewer than 4 points.
    """
    if n < 4:
        raise ValueError(f"a line integral needs at least 4 points along each axis, {n} were given")
    # (k/2)/sin(k/2) = Σ c_j k^2j; the moment of x^2j is (2j)! (−1)^j c_j.
    half_angle = np.array([(-1.0) ** j / (4.0**j * math.factorial(2 * j + 1)) for j in range(_WIDTH // 2)])
    series = np.zeros(_WIDTH // 2)
    series[0] = 1.0
    for j in range(1, _WIDTH // 2):
        series[j] = -(half_angle[1 : j + 1] * series[j - 1 :: -1][:j]).sum()
    moments = np.zeros(_WIDTH)
    for j in range(_WIDTH // 2):
        moments[2 * j] = math.factorial(2 * j) * (-1.0) ** j * series[j]
    return _midpoint_matrix(n, moments)


@lru_cache(maxsize=32)
def running_integral(n: int) -> Array:
    """Integral from the first point of an axis with unit spacing to each point, shape (n, n); see `cell_integrals`."""
    matrix = np.zeros((n, n))
    matrix[1:] = np.cumsum(cell_integrals(n), axis=0)
    matrix.flags.writeable = False
    return matrix


@lru_cache(maxsize=32)
def centred_integral(n: int) -> Array:
    """`running_integral` less its mean over the axis: the integral to each point averaged over all starting points."""
    matrix: Array = running_integral(n) - running_integral(n).mean(axis=0)
    matrix.flags.writeable = False
    return matrix


def cell_circulation(v: Array, w: Array, grid: UniformGrid) -> Array:
    """Circulation around each cell, m²/s, positive counter-clockwise seen from behind.

    Parameters
    ----------
    v, w : ndarray, shape (..., nz, ny)
        Crossflow, m/s.
    grid : UniformGrid
        The grid.

    Returns
    -------
    ndarray, shape (..., nz − 1, ny − 1)
        ∮(v dy + w dz); the sum over any set of cells is the line integral around that set.
    """
    along_z = grid.dz * integrals_over_cells(grid.nz).along_z(w)
    along_y = grid.dy * integrals_over_cells(grid.ny).along_y(v)
    circulation: Array = np.diff(along_z, axis=-1) - np.diff(along_y, axis=-2)
    return circulation


def path_stream_function(v: Array, w: Array, grid: UniformGrid) -> tuple[Array, Array]:
    """Stream function from path integrals dψ = v dz − w dy, along two families of paths.

    Parameters
    ----------
    v, w : ndarray, shape (..., nz, ny)
        Crossflow, m/s.
    grid : UniformGrid
        The grid.

    Returns
    -------
    row_first, column_first : ndarray, shape (..., nz, ny)
        Along a row and then along a column, averaged over every row as the base line; and along a column and then a
        row, averaged over every column. m²/s, each with zero mean over the window. They differ where the crossflow
        diverges, and by noise.
    """
    up = grid.dz * (centred_integral(grid.nz) @ v)
    across = -grid.dy * (w @ centred_integral(grid.ny).T)
    row_first = up + across.mean(axis=-2, keepdims=True)
    column_first = across + up.mean(axis=-1, keepdims=True)
    return row_first, column_first


@dataclass(frozen=True, eq=False)
class OuterFlow:
    """Linear functionals of (v, w) that read what comes from outside the wake, from closed lines around it.

    With ζ = y + iz the crossflow v − iw is analytic where it is free of vorticity and divergence. The wake's own field
    falls off outwards, so (1/2πi)∮(v − iw) dζ/(ζ − ζ0) around it is exactly the flow at ζ0 that has its origin
    elsewhere: a flow-angle offset. The same with ψ and the logarithm gives the constant by which ψ differs from
    −(Γ/2π) ln(r / 1 m) far away.

    Attributes
    ----------
    y0, z0 : float
        The place ζ0, m.
    v_from_v, v_from_w : ndarray, shape (nz, ny)
        Weights with offset v0 = Σ(v_from_v v + v_from_w w); by symmetry w0 = Σ(v_from_v w − v_from_w v).
    constant_from_v, constant_from_w : ndarray, shape (nz, ny)
        Weights of the constant of the averaged path stream function, in m.
    lines : tuple of (int, int, int, int)
        Each closed line as first and last row, first and last column.
    """

    y0: float
    z0: float
    v_from_v: Array
    v_from_w: Array
    constant_from_v: Array
    constant_from_w: Array
    lines: tuple[tuple[int, int, int, int], ...]

    def offset(self, v: Array, w: Array) -> tuple[Array, Array]:
        """Uniform crossflow (v0, w0), m/s, of fields of shape (..., nz, ny)."""
        v0 = _dot(self.v_from_v, v) + _dot(self.v_from_w, w)
        w0 = _dot(self.v_from_v, w) - _dot(self.v_from_w, v)
        return v0, w0

    def constant(self, v: Array, w: Array) -> Array:
        """Value at (y0, z0) of the part of the path stream function that does not belong to the wake, m²/s."""
        return _dot(self.constant_from_v, v) + _dot(self.constant_from_w, w)


def _dot(weights: Array, field: Array) -> Array:
    product: Array = field.reshape(*field.shape[:-2], -1) @ weights.ravel()
    return product


def outer_flow(grid: UniformGrid, box: tuple[int, int, int, int]) -> OuterFlow:
    """Functionals of the outer flow around a wake.

    Parameters
    ----------
    grid : UniformGrid
        The grid.
    box : (int, int, int, int)
        First and last row, first and last column of the points of the wake.

    Returns
    -------
    OuterFlow
        Averaged over nested rectangles between the wake and the window's edge, weighted by the inverse variance that
        equal independent noise on every point would give each.
    """
    low_z, high_z, low_y, high_y = box
    y0 = grid.y0 + grid.dy * (low_y + high_y) / 2
    z0 = grid.z0 + grid.dz * (low_z + high_z) / 2
    weight_sum = 0.0
    offset: NDArray[np.complex128] = np.zeros(grid.shape, dtype=complex)
    on_psi, on_v, on_w = np.zeros(grid.shape), np.zeros(grid.shape), np.zeros(grid.shape)
    lines = _nested(grid, box)
    for line in lines:
        rows, columns, step = _boundary(line, grid)
        r = (grid.y0 + grid.dy * columns - y0) + 1j * (grid.z0 + grid.dz * rows - z0)
        kernel = step / (2j * np.pi * r)
        # A uniform flow must be read without quadrature error.
        kernel /= kernel.sum()
        weight = 1 / float((np.abs(kernel) ** 2).sum())
        weight_sum += weight
        turn = kernel.real / kernel.real.sum()
        logarithm = np.log(np.abs(r)) / (2 * np.pi)
        np.add.at(offset, (rows, columns), weight * kernel)
        np.add.at(on_psi, (rows, columns), weight * turn)
        np.add.at(on_v, (rows, columns), weight * logarithm * step.real)
        np.add.at(on_w, (rows, columns), weight * logarithm * step.imag)
    offset /= weight_sum
    from_v, from_w = adjoint_of_paths(on_psi, grid)
    return OuterFlow(
        y0,
        z0,
        np.ascontiguousarray(offset.real),
        np.ascontiguousarray(offset.imag),
        (from_v + on_v) / weight_sum,
        (from_w + on_w) / weight_sum,
        lines,
    )


def _nested(grid: UniformGrid, box: tuple[int, int, int, int]) -> tuple[tuple[int, int, int, int], ...]:
    inner = np.array(box, float)
    outer = np.array([0, grid.nz - 1, 0, grid.ny - 1], float)
    lines: list[tuple[int, int, int, int]] = []
    for fraction in np.linspace(1.0, _FIRST_CONTOUR, _CONTOURS):
        a, b, c, d = (int(i) for i in np.rint(inner + fraction * (outer - inner)))
        if b - a >= 3 and d - c >= 3 and (a, b, c, d) not in lines:
            lines.append((a, b, c, d))
    return tuple(lines)


def _boundary(
    line: tuple[int, int, int, int], grid: UniformGrid
) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.complex128]]:
    """Points of a rectangle, side by side counter-clockwise, with the dζ each stands for."""
    low_z, high_z, low_y, high_y = line
    in_y = np.arange(low_y, high_y + 1)
    in_z = np.arange(low_z, high_z + 1)
    weight_y = grid.dy * cell_integrals(in_y.size).sum(axis=0)
    weight_z = grid.dz * cell_integrals(in_z.size).sum(axis=0)
    rows = np.concatenate([np.full(in_y.size, low_z), in_z, np.full(in_y.size, high_z), in_z])
    columns = np.concatenate([in_y, np.full(in_z.size, high_y), in_y, np.full(in_z.size, low_y)])
    step = np.concatenate([weight_y + 0j, 1j * weight_z, -weight_y + 0j, -1j * weight_z])
    return rows, columns, step


def adjoint_of_paths(weights: Array, grid: UniformGrid) -> tuple[Array, Array]:
    """How Σ weights ψ depends on v and w, ψ the mean of both families of `path_stream_function`.

    Parameters
    ----------
    weights : ndarray, shape (nz, ny)
        Weight of ψ at each point.
    grid : UniformGrid
        The grid.

    Returns
    -------
    from_v, from_w : ndarray, shape (nz, ny)
        Σ weights ψ = Σ(from_v v + from_w w).
    """
    up, across = grid.dz * centred_integral(grid.nz), -grid.dy * centred_integral(grid.ny)
    in_z = (weights + weights.mean(axis=1, keepdims=True)) / 2
    in_y = (weights + weights.mean(axis=0, keepdims=True)) / 2
    return up.T @ in_z, in_y @ across


def adjoint_of_circulation(weights: Array, grid: UniformGrid) -> tuple[Array, Array]:
    """How Σ weights Γ depends on v and w, Γ from `cell_circulation`.

    Parameters
    ----------
    weights : ndarray, shape (nz − 1, ny − 1)
        Weight of each cell.
    grid : UniformGrid
        The grid.

    Returns
    -------
    from_v, from_w : ndarray, shape (nz, ny)
        Σ weights Γ = Σ(from_v v + from_w w).
    """
    padded = np.pad(weights, 1)
    from_v = grid.dy * _integrals_on_points(grid.ny).along_y(np.diff(padded, axis=0)[:, 1:-1])
    from_w = -grid.dz * _integrals_on_points(grid.nz).along_z(np.diff(padded, axis=1)[1:-1])
    return from_v, from_w
