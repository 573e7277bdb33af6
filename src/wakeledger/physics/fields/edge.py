"""Line integrals of the measured crossflow along the window's edge.

They carry what lies outside the window: its net circulation and outflow, and the kinetic energy beyond the edge,
E_out = −½ρ∮ψ ∂ψ/∂n ds = +½ρ∮ψ v_t ds, with ψ from the path integral dψ = v dz − w dy of the measured velocity. No
derivative of the data and no Poisson solve enters.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.integrate import cumulative_simpson

from wakeledger.core.grid import Array, UniformGrid

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
    y, z = grid.y, grid.z
    # Side by side: tangential and outward velocity along the direction of travel.
    sides = (
        (v[..., 0, :], -w[..., 0, :], grid.dy, y, np.full(grid.ny, z[0])),
        (w[..., :, -1], v[..., :, -1], grid.dz, np.full(grid.nz, y[-1]), z),
        (-v[..., -1, ::-1], w[..., -1, ::-1], grid.dy, y[::-1], np.full(grid.ny, z[-1])),
        (-w[..., ::-1, 0], -v[..., ::-1, 0], grid.dz, np.full(grid.nz, y[0]), z[::-1]),
    )
    flux_parts, psi_parts = [], []
    along, across = np.zeros(v.shape[:-2]), np.zeros(v.shape[:-2])
    for tangential, outward, step, _, _ in sides:
        # Counter-clockwise, ψ grows by the outflow: dψ = v dz − w dy = v_n ds.
        growth = cumulative_simpson(outward, dx=step, axis=-1, initial=0.0)
        psi_parts.append(across[..., None] + growth)
        across = across + growth[..., -1]
        circulation = cumulative_simpson(tangential, dx=step, axis=-1, initial=0.0)[..., -1]
        along = along + circulation
        flux_parts.append((tangential, step))
    ys = np.concatenate([side[3] for side in sides])
    zs = np.concatenate([side[4] for side in sides])
    psi = np.concatenate(psi_parts, axis=-1)
    travelled = np.concatenate([[0.0], np.cumsum(np.hypot(np.diff(ys), np.diff(zs)))])
    # A net outflow (σ ≠ 0 near the model, or noise) leaves ψ many-valued: spread it evenly along the edge.
    psi = psi - across[..., None] * (travelled / travelled[-1])
    psi = psi - _exterior_constant(psi, along, ys, zs)[..., None]
    energy = np.zeros(v.shape[:-2])
    start = 0
    for tangential, step in flux_parts:
        stop = start + tangential.shape[-1]
        energy = energy + _simpson(psi[..., start:stop] * tangential, step)
        start = stop
    return Edge(ys, zs, along, across, psi, energy)


def _simpson(values: Array, step: float) -> Array:
    total: Array = cumulative_simpson(values, dx=step, axis=-1, initial=0.0)[..., -1]
    return total


def _exterior_constant(psi: Array, circulation: Array, ys: Array, zs: Array) -> Array:
    """Constant c in ψ = c − (Γ/2π) ln r + decaying multipoles, by least squares along the edge."""
    centre_y, centre_z = (ys.min() + ys.max()) / 2, (zs.min() + zs.max()) / 2
    scale = np.hypot(ys.max() - centre_y, zs.max() - centre_z)
    distance = np.hypot(ys - centre_y, zs - centre_z)
    angle = np.arctan2(zs - centre_z, ys - centre_y)
    columns = [np.ones_like(angle)]
    for n in range(1, _MULTIPOLES + 1):
        decay = (scale / distance) ** n
        columns += [decay * np.cos(n * angle), decay * np.sin(n * angle)]
    pseudo_inverse = np.linalg.pinv(np.stack(columns, axis=1))
    target = psi + circulation[..., None] / (2 * np.pi) * np.log(distance)
    constant: Array = target @ pseudo_inverse[0]
    return constant
