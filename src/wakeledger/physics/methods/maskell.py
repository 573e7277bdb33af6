"""Profile drag and wake blockage between closed walls.

Walls make the flow beside a wake faster, u* = U + 2u_b far downstream, which Betz's integral in free air would book as
drag. With the wake-blockage velocity at the model

    u_b = (1/2C) ∬_W (u* − u) dA        (closed walls; zero in an open jet and in free air),

    D_p = ∬_W {(H∞ − H) + ½ρ(u* − u)[u* + u − 2(U + u_b)]} dA,

the force in the tunnel is D_p plus the crossflow terms with the walls' own stream function. Coefficients on the
corrected dynamic pressure ½ρ(U + u_b)² are those of a model in an unbounded stream of that speed.

E. C. Maskell, RAE TR 72232 (1972).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.physics.fields.boundary import Boundary, ClosedWalls
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.physics.methods.betz_area import loss_free_axial_velocity, profile_integrand
from wakeledger.stream.reference import Reference


@dataclass(frozen=True)
class WakeBlockage:
    """Blockage by the wake and the profile drag that goes with it; arrays of the fields' leading shape (...).

    Attributes
    ----------
    velocity : ndarray
        Wake-blockage velocity u_b at the model, m/s.
    profile_drag : ndarray
        D_p on the surveyed side of the reflection plane, N.
    corrected_dynamic_pressure : ndarray
        ½ρ(U + u_b)², Pa.
    expected_velocity : ndarray
        U C_D S/(4C) from that profile drag, the classical wake blockage, m/s.
    """

    velocity: Array
    profile_drag: Array
    corrected_dynamic_pressure: Array
    expected_velocity: Array


def wake_blockage(
    flow: Flow, reference: Reference, mask: Mask, boundary: Boundary, *, loss_free: Array | None = None
) -> WakeBlockage:
    """Wake blockage and profile drag of a plane.

    Parameters
    ----------
    flow : Flow
        The plane.
    reference : Reference
        The undisturbed stream.
    mask : ndarray of bool, shape (..., nz, ny)
        The wake region W.
    boundary : FreeAir, ClosedWalls or OpenJet
        What surrounds the plane.
    loss_free : ndarray, shape (..., nz, ny), optional
        u* where it is known already.

    Returns
    -------
    WakeBlockage

    Notes
    -----
    In a compressible stream the blockage term keeps its low-speed form with the stream's density; Betz's integrand is
    the compressible one.
    """
    star = loss_free_axial_velocity(flow, reference) if loss_free is None else loss_free
    drag = flow.grid.integrate(np.where(mask, profile_integrand(flow, reference, star), 0.0))
    return with_blockage(drag, wake_deficit(flow, star, mask), reference, boundary)


def wake_deficit(flow: Flow, loss_free: Array, mask: Mask) -> Array:
    """Volume flow that the wake lacks, ∬_W (u* − u) dA, m³/s, shape (...).

    Parameters
    ----------
    flow : Flow
        The plane.
    loss_free : ndarray, shape (..., nz, ny)
        u*, m/s.
    mask : ndarray of bool, shape (..., nz, ny)
        The wake region.

    Returns
    -------
    ndarray
    """
    return flow.grid.integrate(np.where(mask, loss_free - flow.u, 0.0))


def with_blockage(betz: Array, deficit: Array, reference: Reference, boundary: Boundary) -> WakeBlockage:
    """Wake blockage from Betz's integral of a plane and the volume flow that its wake lacks.

    Parameters
    ----------
    betz : ndarray, shape (...)
        Betz's integral over the wake region, N.
    deficit : ndarray, shape (...)
        `wake_deficit` over the same region, m³/s.
    reference : Reference
        The undisturbed stream.
    boundary : FreeAir, ClosedWalls or OpenJet
        What surrounds the plane.

    Returns
    -------
    WakeBlockage

    Notes
    -----
    D_p is Betz's drag less ρu_b∬(u* − u), which is the same integral with U + u_b instead of U.
    """
    density, speed = reference.density, reference.speed
    betz, deficit = np.asarray(betz, float), np.asarray(deficit, float)
    if not isinstance(boundary, ClosedWalls):
        still = np.zeros_like(betz)
        return WakeBlockage(still, betz, still + reference.dynamic_pressure, still)
    area = boundary.surveyed_area
    velocity = deficit / (2 * area)
    drag = betz - density * velocity * deficit
    corrected = reference.dynamic_pressure * (1 + velocity / speed) ** 2
    return WakeBlockage(velocity, drag, corrected, speed * drag / (4 * reference.dynamic_pressure * area))
