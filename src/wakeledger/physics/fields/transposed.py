"""Transposes of the linear maps from a crossflow to its vorticity, its divergence and the integrals along the edge.

A figure that is a weighted sum of vorticities, Σ a ξ(v, w), is a weighted sum of the velocities, Σ(b_v v + b_w w): the
functions here take a to (b_v, b_w). They are what an exact gradient of a figure with respect to every measured value is
made of.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from scipy import sparse

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.banded import Banded
from wakeledger.physics.fields.differences import axial_vorticity, difference_matrix
from wakeledger.physics.fields.edge import edge_shape
from wakeledger.physics.fields.path_integrals import running_integral
from wakeledger.physics.fields.poisson import stream_function
from wakeledger.physics.fields.pressure import inner_window


def transposed_ddy(weights: Array, grid: UniformGrid) -> Array:
    """Transpose of `ddy`: weights of the field, shape (..., nz, ny), from those of its derivative, per metre."""
    by_field: Array = _transposed_differences(grid.ny).along_y(np.asarray(weights, dtype=float))
    by_field /= grid.dy
    return by_field


def transposed_ddz(weights: Array, grid: UniformGrid) -> Array:
    """Transpose of `ddz`: weights of the field, shape (..., nz, ny), from those of its derivative, per metre."""
    by_field: Array = _transposed_differences(grid.nz).along_z(np.asarray(weights, dtype=float))
    by_field /= grid.dz
    return by_field


@lru_cache(maxsize=32)
def _transposed_differences(n: int) -> Banded:
    return Banded.of(sparse.csr_array(difference_matrix(n).T))


def transposed_vorticity(weights: Array, grid: UniformGrid) -> tuple[Array, Array]:
    """How a weighted sum of vorticities depends on the crossflow.

    Parameters
    ----------
    weights : ndarray, shape (..., nz, ny)
        Weight a of the vorticity ξ = ∂w/∂y − ∂v/∂z at each place.
    grid : UniformGrid
        The grid.

    Returns
    -------
    by_v, by_w : ndarray, shape (..., nz, ny)
        Σ a ξ = Σ(by_v v + by_w w).
    """
    return -transposed_ddz(weights, grid), transposed_ddy(weights, grid)


def transposed_divergence(weights: Array, grid: UniformGrid) -> tuple[Array, Array]:
    """How a weighted sum of divergences σ = ∂v/∂y + ∂w/∂z depends on v and w; shapes as `transposed_vorticity`."""
    return transposed_ddy(weights, grid), transposed_ddz(weights, grid)


def edge_energy_gradient(v: Array, w: Array, grid: UniformGrid) -> tuple[Array, Array]:
    """Derivatives of ∮ψ v_t ds along the window's edge with respect to the crossflow.

    Parameters
    ----------
    v, w : ndarray, shape (nz, ny)
        Crossflow, m/s.
    grid : UniformGrid
        The grid.

    Returns
    -------
    by_v, by_w : ndarray, shape (nz, ny)
        m³/s, zero away from the edge.
    """
    shape = edge_shape(grid)
    tangential, outward = _sides(v, w)
    running = [step * running_integral(side.size) for side, step in zip(tangential, _steps(grid), strict=True)]
    psi_parts, outflow = [], 0.0
    for side, matrix in zip(outward, running, strict=True):
        growth = matrix @ side
        psi_parts.append(outflow + growth)
        outflow += float(growth[-1])
    circulation = sum(float(matrix[-1] @ side) for side, matrix in zip(tangential, running, strict=True))
    psi = np.concatenate(psi_parts) - outflow * shape.travelled
    psi = psi - float(shape.constant @ psi) - circulation * shape.logarithm
    quadrature = np.concatenate([matrix[-1] for matrix in running])
    # Backwards: the energy is Σ q ψ v_t, and ψ is linear in both velocities.
    by_psi = quadrature * np.concatenate(tangential)
    total = float(by_psi.sum())
    by_psi = by_psi - total * shape.constant
    by_outflow = -float(by_psi @ shape.travelled)
    by_tangential: list[Array] = []
    by_outward: list[Array] = []
    stop = psi.size
    later = by_outflow
    for matrix in reversed(running):
        part = slice(stop - len(matrix), stop)
        by_outward.insert(0, matrix.T @ by_psi[part] + later * matrix[-1])
        by_tangential.insert(0, quadrature[part] * psi[part] - total * shape.logarithm * matrix[-1])
        later += float(by_psi[part].sum())
        stop = part.start
    by_v, by_w = np.zeros((2, *grid.shape))
    _onto_sides(by_v, by_w, by_tangential, by_outward)
    return by_v, by_w


def _steps(grid: UniformGrid) -> tuple[float, float, float, float]:
    return grid.dy, grid.dz, grid.dy, grid.dz


def _sides(v: Array, w: Array) -> tuple[list[Array], list[Array]]:
    """Tangential and outward velocity along the four sides, counter-clockwise from the lower port corner."""
    tangential = [v[0, :], w[:, -1], -v[-1, ::-1], -w[::-1, 0]]
    outward = [-w[0, :], v[:, -1], w[-1, ::-1], -v[::-1, 0]]
    return tangential, outward


def _onto_sides(by_v: Array, by_w: Array, tangential: list[Array], outward: list[Array]) -> None:
    """Add weights of the velocities along the sides to those of the fields."""
    by_v[0, :] += tangential[0]
    by_w[0, :] -= outward[0]
    by_w[:, -1] += tangential[1]
    by_v[:, -1] += outward[1]
    by_v[-1, ::-1] -= tangential[2]
    by_w[-1, ::-1] += outward[2]
    by_w[::-1, 0] -= tangential[3]
    by_v[::-1, 0] -= outward[3]


def crossflow_pressure_gradient(
    v: Array, w: Array, weights: Array, grid: UniformGrid, *, density: float
) -> tuple[Array, Array]:
    """Derivatives of a weighted sum of crossflow pressures with respect to the crossflow.

    Parameters
    ----------
    v, w : ndarray, shape (nz, ny)
        Crossflow, m/s.
    weights : ndarray, shape (..., nz, ny)
        Weight of `wakeledger.physics.fields.pressure.crossflow_pressure` at each place.
    grid : UniformGrid
        The grid.
    density : float
        kg/m³.

    Returns
    -------
    by_v, by_w : ndarray, shape (..., nz, ny)
        In the weights' unit times Pa s/m.
    """
    inner = inner_window(grid)
    xi = np.where(inner, axial_vorticity(v, w, grid), 0.0)
    # The Green's function is symmetric, so that it is its own transpose.
    by_source = -density * stream_function(weights, grid)
    by_xi_w, by_xi_v = transposed_ddy(by_source, grid), -transposed_ddz(by_source, grid)
    from_v, from_w = transposed_vorticity(np.where(inner, by_xi_w * w + by_xi_v * v, 0.0), grid)
    by_v = -density * v * weights + by_xi_v * xi + from_v
    by_w = -density * w * weights + by_xi_w * xi + from_w
    return by_v, by_w
