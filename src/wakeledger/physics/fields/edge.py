"""Line integrals of the measured crossflow along the window's edge.

They carry what lies outside the window: its net circulation and outflow, and the kinetic energy beyond the edge,
E_out = −½ρ∮ψ ∂ψ/∂n ds = +½ρ∮ψ v_t ds, with ψ from the path integral dψ = v dz − w dy of the measured velocity. No
derivative of the data and no Poisson solve enters.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.path_integrals import running_integral

#: Multipoles of the exterior field whose fit fixes the constant of ψ when there is a net circulation.
_MULTIPOLES = 6


@dataclass(frozen=True)
class Edge:
    """Crossflow along the window's edge, counter-clockwise from the lower port corner; arrays (..., m), closed.

    Attributes
    ----------
    y, z : ndarray, shape (m,)
        Positions, m; the first point is repeated at the end.
    circulation : ndarray, shape (...)
        Net circulation ∮ v_t ds, m²/s, counter-clockwise positive.
    outflow : ndarray, shape (...)
        Net outflow ∮ v_n ds, m²/s.
    psi : ndarray, shape (..., m)
        Stream function from the path integral, its constant fixed so that the exterior field is −(Γ/2π) ln r plus
        decaying multipoles, m²/s.
    energy_integral : ndarray, shape (...)
        ∮ψ v_t ds, m⁴/s²: twice the outside crossflow energy over the density for zero net circulation.
    """

    y: Array
    z: Array
    circulation: Array
    outflow: Array
    psi: Array
    energy_integral: Array


def edge_integrals(v: Array, w: Array, grid: UniformGrid) -> Edge:
    """Integrals along the window's edge.

    Parameters
    ----------
    v, w : ndarray, shape (..., nz, ny)
        Crossflow, m/s.
    grid : UniformGrid
        The grid.

    Returns
    -------
    Edge
    """
    shape = edge_shape(grid)
    # Side by side: tangential and outward velocity along the direction of travel.
    sides = (
        (v[..., 0, :], -w[..., 0, :], grid.dy),
        (w[..., :, -1], v[..., :, -1], grid.dz),
        (-v[..., -1, ::-1], w[..., -1, ::-1], grid.dy),
        (-w[..., ::-1, 0], -v[..., ::-1, 0], grid.dz),
    )
    psi_parts = []
    circulation, outflow = np.zeros(v.shape[:-2]), np.zeros(v.shape[:-2])
    for tangential, outward, step in sides:
        # Counter-clockwise, ψ grows by the outflow: dψ = v dz − w dy = v_n ds.
        running = step * running_integral(tangential.shape[-1])
        growth = outward @ running.T
        psi_parts.append(outflow[..., None] + growth)
        outflow = outflow + growth[..., -1]
        circulation = circulation + tangential @ running[-1]
    psi = np.concatenate(psi_parts, axis=-1)
    # A net outflow (σ ≠ 0 near the model, or noise) leaves ψ many-valued: spread it evenly along the edge.
    psi = psi - outflow[..., None] * shape.travelled
    constant = psi @ shape.constant + circulation * shape.logarithm
    psi = psi - constant[..., None]
    energy = np.zeros(v.shape[:-2])
    start = 0
    for tangential, _, step in sides:
        stop = start + tangential.shape[-1]
        energy = energy + (psi[..., start:stop] * tangential) @ (step * running_integral(stop - start)[-1])
        start = stop
    return Edge(shape.y, shape.z, circulation, outflow, psi, energy)


@dataclass(frozen=True, eq=False)
class EdgeShape:
    """Places along the edge, the share of it travelled at each, and the functional that gives ψ its constant."""

    y: Array
    z: Array
    travelled: Array
    constant: Array
    logarithm: float


@lru_cache(maxsize=8)
def edge_shape(grid: UniformGrid) -> EdgeShape:
    """The constant c in ψ = c − (Γ/2π) ln r + decaying multipoles is linear in ψ: a row of a least-squares inverse."""
    y, z = grid.y, grid.z
    ys = np.concatenate([y, np.full(grid.nz, y[-1]), y[::-1], np.full(grid.nz, y[0])])
    zs = np.concatenate([np.full(grid.ny, z[0]), z, np.full(grid.ny, z[-1]), z[::-1]])
    travelled = np.concatenate([[0.0], np.cumsum(np.hypot(np.diff(ys), np.diff(zs)))])
    centre_y, centre_z = (y[0] + y[-1]) / 2, (z[0] + z[-1]) / 2
    distance = np.hypot(ys - centre_y, zs - centre_z)
    angle = np.arctan2(zs - centre_z, ys - centre_y)
    columns = [np.ones_like(angle)]
    for n in range(1, _MULTIPOLES + 1):
        decay = (distance.max() / distance) ** n
        columns += [decay * np.cos(n * angle), decay * np.sin(n * angle)]
    constant: Array = np.linalg.pinv(np.stack(columns, axis=1))[0]
    return EdgeShape(ys, zs, travelled / travelled[-1], constant, float(constant @ np.log(distance)) / (2 * np.pi))
