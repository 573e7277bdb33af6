"""The small remainder of the momentum balance: axial disturbance and crossflow divergence, always as a pair.

½ρ∬[−φσ − (u* − U)²] dA. For a disturbance that is harmonic and decays downstream the two cancel (Parseval); alone, the
first is +5 % of the induced drag a quarter span behind the wing. So the bound vortex's predicted disturbance is taken
out of both, and what is left is taken over the wake region, where the pressure of vortex cores leaves a real remainder.
"""

from __future__ import annotations

import numpy as np

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.boundary import ClosedWalls, FreeAir, OpenJet
from wakeledger.physics.fields.differences import crossflow_divergence
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.fields.lifting_line import NearField
from wakeledger.physics.fields.poisson import velocity_potential
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.physics.fields.wall_correction import wall_velocity_potential
from wakeledger.physics.methods.betz_area import axial_integrand
from wakeledger.stream.reference import Reference

FREE_AIR = FreeAir()


def residual_drag(
    flow: Flow,
    reference: Reference,
    loss_free: Array,
    mask: Mask,
    *,
    near: NearField | None = None,
    boundary: FreeAir | ClosedWalls | OpenJet = FREE_AIR,
    blockage: float = 0.0,
) -> tuple[Array, Array]:
    """Both parts of the residual over the wake region, N, each of shape (...).

    Parameters
    ----------
    flow, reference
        The plane and the undisturbed stream.
    loss_free : ndarray, shape (..., nz, ny)
        u* of `wakeledger.physics.methods.betz_area.loss_free_axial_velocity`, m/s.
    mask : ndarray of bool, shape (..., nz, ny)
        The wake region.
    near : NearField, optional
        Predicted disturbance of the bound vortex (`wakeledger.physics.fields.lifting_line`), m/s.
    boundary : FreeAir, ClosedWalls or OpenJet
        What surrounds the window.
    blockage : float
        Wake-blockage velocity u_b between closed walls, m/s: the whole plane's 2u_b is in the profile drag already.

    Returns
    -------
    divergence_part, axial_part : ndarray
        −½ρ∬φσ dA and −½ρ∬(u* − U)² dA. The mean divergence of the region is taken out first: a net source has no
        decaying potential in an unbounded plane.

    Notes
    -----
    In compressible flow the axial part is −∬[ρu(u* − U) + (p − p∞) + ½ρ∞(v² + w²)] dA, what the profile drag and the
    crossflow leave of the momentum balance. It holds −½ρ∞(1 − M²)(u* − U)² and also, of the same order, the loss times
    the axial disturbance, which the incompressible Betz integrand counts as profile drag.
    """
    if reference.compressible:
        axial = -flow.density * flow.u * (loss_free - reference.speed)
        axial = axial - (flow.static_pressure - reference.static_pressure)
        axial = axial - 0.5 * reference.density * (flow.v**2 + flow.w**2)
        if near is not None:
            axial = axial + 0.5 * reference.density * (1 - reference.mach**2) * near.u**2
    else:
        axial = axial_integrand(
            loss_free - 2 * blockage if near is None else loss_free - 2 * blockage - near.u, reference
        )
    axial_part = flow.grid.integrate(np.where(mask, axial, 0.0))
    v, w = (flow.v, flow.w) if near is None else (flow.v - near.v, flow.w - near.w)
    divergence_part = divergence_drag(v, w, flow.grid, mask, density=reference.density, boundary=boundary)
    return divergence_part, axial_part


def divergence_drag(
    v: Array,
    w: Array,
    grid: UniformGrid,
    mask: Mask,
    *,
    density: float,
    boundary: FreeAir | ClosedWalls | OpenJet = FREE_AIR,
) -> Array:
    """Divergence part −½ρ∬φσ dA of a crossflow over a wake region, N, shape (...)."""
    sigma = np.where(mask, crossflow_divergence(v, w, grid), 0.0)
    count = np.maximum(np.count_nonzero(mask, axis=(-2, -1)), 1)
    sigma = np.where(mask, sigma - (sigma.sum(axis=(-2, -1)) / count)[..., None, None], 0.0)
    free = isinstance(boundary, FreeAir)
    phi = velocity_potential(sigma, grid) if free else wall_velocity_potential(sigma, grid, boundary)
    drag: Array = -0.5 * density * grid.cell_area * np.einsum("...zy,...zy->...", phi, sigma)
    return drag
