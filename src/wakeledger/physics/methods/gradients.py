"""Exact derivatives of the area methods' figures with respect to every value on the plane.

Each function is the reverse of the method of the same name: where that one takes fields to a figure, this one gives the
derivative of the figure with respect to each field at each place. Betz's integrand, the entropy form and the momentum
balance are local; induced drag and the divergence part are quadratic forms with a symmetric kernel,

    ∂/∂ξ ½ρ∬_W ψξ dA = ρ ψ dA in W,

and ξ hands that on to v and w by the transposed differences (`wakeledger.physics.fields.transposed`).
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.boundary import Boundary, FreeAir
from wakeledger.physics.fields.differences import crossflow_divergence
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.fields.lifting_line import NearField
from wakeledger.physics.fields.poisson import velocity_potential
from wakeledger.physics.fields.transposed import edge_energy_gradient, transposed_divergence, transposed_vorticity
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.physics.fields.wall_correction import wall_velocity_potential
from wakeledger.stream.reference import Reference

FREE_AIR = FreeAir()


@dataclass(frozen=True)
class FlowGradient:
    """Derivatives of one figure with respect to the fields of `wakeledger.physics.fields.flow.Flow`.

    Attributes
    ----------
    u, v, w, total_pressure, static_pressure, density, total_temperature : ndarray, shape (nz, ny), or float
        In the figure's unit over the field's; 0 where the figure does not depend on a field.
    """

    u: Array | float = 0.0
    v: Array | float = 0.0
    w: Array | float = 0.0
    total_pressure: Array | float = 0.0
    static_pressure: Array | float = 0.0
    density: Array | float = 0.0
    total_temperature: Array | float = 0.0

    def __add__(self, other: FlowGradient) -> FlowGradient:
        return FlowGradient(*(getattr(self, x.name) + getattr(other, x.name) for x in fields(self)))

    def __mul__(self, factor: float) -> FlowGradient:
        return FlowGradient(*(getattr(self, x.name) * factor for x in fields(self)))


def _by_loss_free(flow: Flow, reference: Reference, loss_free: Array, by: Array) -> FlowGradient:
    """What a derivative by u* means for the fields that u* follows from."""
    crossflow = flow.v**2 + flow.w**2
    if reference.compressible:
        exponent = (reference.gamma - 1) / reference.gamma
        ratio = (flow.static_pressure / reference.static_pressure) ** exponent
        enthalpy = reference.heat_capacity * reference.temperature * ratio
        real = 2 * (reference.total_enthalpy - enthalpy) - crossflow > 0
        by_pressure = -exponent * enthalpy / flow.static_pressure
    else:
        real = 2 * (reference.total_pressure - flow.static_pressure) / reference.density - crossflow > 0
        by_pressure = np.asarray(-1 / reference.density)
    # Where u* has no real value it is the stream's speed, which no field moves.
    share = np.where(real, by, 0.0) / loss_free
    return FlowGradient(v=-share * flow.v, w=-share * flow.w, static_pressure=share * by_pressure)


def profile_gradient(flow: Flow, reference: Reference, loss_free: Array, weights: Array) -> FlowGradient:
    """Derivatives of Betz's integral (`wakeledger.physics.methods.betz_area`).

    Parameters
    ----------
    flow : Flow
        The plane, arrays of shape (nz, ny).
    reference : Reference
        The undisturbed stream.
    loss_free : ndarray, shape (nz, ny)
        u*, m/s.
    weights : ndarray, shape (nz, ny)
        Area that each place stands for, m²; zero outside the wake region.

    Returns
    -------
    FlowGradient
        N over each field's unit.
    """
    if reference.compressible:
        by_star = weights * flow.density * flow.u
        direct = FlowGradient(
            u=weights * flow.density * (loss_free - 2 * flow.u), density=weights * flow.u * (loss_free - flow.u)
        )
    else:
        by_star = weights * reference.density * (loss_free - reference.speed)
        direct = FlowGradient(
            u=weights * reference.density * (reference.speed - flow.u), total_pressure=-np.asarray(weights, float)
        )
    return direct + _by_loss_free(flow, reference, loss_free, by_star)


def deficit_gradient(flow: Flow, reference: Reference, loss_free: Array, weights: Array) -> FlowGradient:
    """Derivatives of ∬(u* − u) dA (`wakeledger.physics.methods.maskell.wake_deficit`); as `profile_gradient`, m³/s."""
    return FlowGradient(u=-weights) + _by_loss_free(flow, reference, loss_free, weights)


def axial_gradient(
    flow: Flow, reference: Reference, loss_free: Array, weights: Array, *, shift: Array | float = 0.0
) -> FlowGradient:
    """Derivatives of the residual's axial part (`wakeledger.physics.methods.residual`).

    Parameters
    ----------
    flow, reference, loss_free, weights
        As in `profile_gradient`.
    shift : ndarray, shape (nz, ny), or float
        Predicted disturbance that is taken off u*, m/s; it counts in an incompressible stream only.

    Returns
    -------
    FlowGradient
        N over each field's unit.
    """
    if not reference.compressible:
        by_star = -reference.density * weights * (loss_free - shift - reference.speed)
        return _by_loss_free(flow, reference, loss_free, by_star)
    excess = loss_free - reference.speed
    direct = FlowGradient(
        u=-weights * flow.density * excess,
        v=-weights * reference.density * flow.v,
        w=-weights * reference.density * flow.w,
        static_pressure=-np.asarray(weights, float),
        density=-weights * flow.u * excess,
    )
    return direct + _by_loss_free(flow, reference, loss_free, -weights * flow.density * flow.u)


def divergence_gradient(
    flow: Flow,
    mask: Mask,
    *,
    density: float,
    near: NearField | None = None,
    boundary: Boundary = FREE_AIR,
) -> FlowGradient:
    """Derivatives of the residual's divergence part −½ρ∬φσ dA.

    Parameters
    ----------
    flow : Flow
        The plane, arrays of shape (nz, ny).
    mask : ndarray of bool, shape (nz, ny)
        The wake region.
    density : float
        Of the stream, kg/m³.
    near : NearField, optional
        Disturbance of the bound vortex that is taken off first, m/s.
    boundary : FreeAir, ClosedWalls or OpenJet
        What surrounds the window.

    Returns
    -------
    FlowGradient
        N per m/s.
    """
    grid = flow.grid
    v, w = (flow.v, flow.w) if near is None else (flow.v - near.v, flow.w - near.w)
    sigma = _without_mean(crossflow_divergence(v, w, grid), mask)
    free = isinstance(boundary, FreeAir)
    phi = velocity_potential(sigma, grid) if free else wall_velocity_potential(sigma, grid, boundary)
    by_sigma = -density * grid.cell_area * _without_mean(phi, mask)
    by_v, by_w = transposed_divergence(by_sigma, grid)
    return FlowGradient(v=by_v, w=by_w)


def _without_mean(field: Array, mask: Mask) -> Array:
    count = max(int(np.count_nonzero(mask)), 1)
    inside = np.where(mask, field, 0.0)
    return np.where(mask, inside - inside.sum() / count, 0.0)


def induced_gradient(psi: Array, mask: Mask, grid: UniformGrid, *, density: float) -> FlowGradient:
    """Derivatives of ½ρ∬ψξ dA: the stream function of the vorticity itself, handed on to v and w.

    Parameters
    ----------
    psi : ndarray, shape (nz, ny)
        Stream function of the region's vorticity, with what surrounds it, m²/s.
    mask : ndarray, shape (nz, ny)
        1 in the wake region.
    grid : UniformGrid
        The grid.
    density : float
        kg/m³.

    Returns
    -------
    FlowGradient
        N per m/s.
    """
    by_v, by_w = transposed_vorticity(density * grid.cell_area * np.where(mask, psi, 0.0), grid)
    return FlowGradient(v=by_v, w=by_w)


def impulse_gradient(arm: Array, mask: Array, grid: UniformGrid, *, impulse: float) -> FlowGradient:
    """Derivatives of a moment of the vorticity, ρU∬ arm ξ dA.

    Parameters
    ----------
    arm : ndarray, shape (nz, ny)
        What the vorticity is weighted with: y for the lift, −z for the side force, −½(y² + z²) for the rolling moment.
    mask : ndarray, shape (nz, ny)
        1 in the wake region; a share where a place counts in part.
    grid : UniformGrid
        The grid.
    impulse : float
        ρU, kg/(m² s).

    Returns
    -------
    FlowGradient
        N, or N m, per m/s.
    """
    by_v, by_w = transposed_vorticity(impulse * grid.cell_area * arm * mask, grid)
    return FlowGradient(v=by_v, w=by_w)


def entropy_gradient(flow: Flow, reference: Reference, weights: Array) -> FlowGradient:
    """Derivatives of the irreversible velocity defect's integral (`wakeledger.physics.methods.entropy_area`).

    Parameters and result as in `profile_gradient`; places without a real expansion depend on u and the density only.
    """
    speed, density = reference.speed, flow.density if reference.compressible else reference.density
    by_total: Array | float
    by_temperature: Array | float = 0.0
    if not reference.compressible:
        square = speed**2 - 2 * (reference.total_pressure - flow.total_pressure) / reference.density
        by_total = 2 / reference.density
    else:
        gamma = reference.gamma
        exponent = (gamma - 1) / gamma
        scale = 2 * speed**2 / ((gamma - 1) * reference.mach**2)
        falling = (flow.total_pressure / reference.total_pressure) ** -exponent
        factor = flow.total_temperature / reference.total_temperature * falling
        heat = reference.heat_capacity
        square = speed**2 + 2 * heat * (flow.total_temperature - reference.total_temperature) - scale * (factor - 1)
        by_total = scale * exponent * factor / flow.total_pressure
        by_temperature = 2 * heat - scale * falling / reference.total_temperature
    real = square > 0
    expanded = np.sqrt(np.where(real, square, 1.0))
    by_square = np.where(real, -weights * density * flow.u / (2 * expanded), 0.0)
    defect = np.where(real, expanded, 0.0) - speed
    return FlowGradient(
        u=-weights * density * defect,
        total_pressure=by_square * by_total,
        density=-weights * flow.u * defect if reference.compressible else 0.0,
        total_temperature=by_square * by_temperature,
    )


def energy_gradient(v: Array, w: Array, grid: UniformGrid, *, density: float) -> FlowGradient:
    """Derivatives of the crossflow energy (`wakeledger.physics.methods.energy_area`) by the crossflow, N per m/s."""
    edge_v, edge_w = edge_energy_gradient(v, w, grid)
    weights = grid.weights
    return FlowGradient(
        v=density * (weights * v + 0.5 * edge_v),
        w=density * (weights * w + 0.5 * edge_w),
    )


def momentum_gradient(flow: Flow, reference: Reference) -> FlowGradient:
    """Derivatives of the momentum balance over the window (`wakeledger.physics.methods.momentum_area`)."""
    weights = flow.grid.weights
    density = flow.density if reference.compressible else reference.density
    edge_v, edge_w = edge_energy_gradient(flow.v, flow.w, flow.grid)
    return FlowGradient(
        u=weights * density * (reference.speed - 2 * flow.u),
        v=0.5 * reference.density * edge_v,
        w=0.5 * reference.density * edge_w,
        static_pressure=-weights,
        density=weights * flow.u * (reference.speed - flow.u) if reference.compressible else 0.0,
    )
