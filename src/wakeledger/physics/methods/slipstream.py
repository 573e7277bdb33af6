"""Thrust, power and swirl of a slipstream, kept apart from the drag of the rest of the plane.

    T = −∬_slip[−ρu(u − U) − (p − p∞)] dA = ∬_slip[(H − H∞) + ½ρ(u − U)² − ½ρ(v² + w²)] dA   (incompressible)

The kinetic energy of its swirl raises the crossflow energy of the plane but is no induced drag of a lifting surface: it
is named here, and the stream function's induced drag is to be given with and without the slipstream's vorticity.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.physics.fields.entropy import enthalpy_excess
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.physics.methods.momentum_area import momentum_integrand
from wakeledger.stream.reference import Reference


@dataclass(frozen=True)
class Slipstream:
    """What a slipstream carries, arrays of the fields' leading shape (...).

    Attributes
    ----------
    thrust : ndarray
        Momentum put in, less the drag inside the region, N, positive upstream on the body.
    power : ndarray
        ∬u(H − H∞) dA, or ∬ρuΔH dA in compressible flow, W: what the flow was given per unit time.
    swirl_energy : ndarray
        ½ρ∬(v² + w²) dA, N: the part of the crossflow energy in the region.
    mass_flow : ndarray
        ∬ρu dA, kg/s.
    area : ndarray
        m².
    """

    thrust: Array
    power: Array
    swirl_energy: Array
    mass_flow: Array
    area: Array


def slipstream(flow: Flow, reference: Reference, region: Mask) -> Slipstream:
    """Integrals over a slipstream's region.

    Parameters
    ----------
    flow : Flow
        The plane.
    reference : Reference
        The undisturbed stream.
    region : ndarray of bool, shape (..., nz, ny)
        The slipstream (`wakeledger.physics.fields.loss_regions.energised_region`).

    Returns
    -------
    Slipstream

    Notes
    -----
    Swirl recovery by a wing or a vane shows as less `swirl_energy` at the same `power`.
    """
    density = flow.density if reference.compressible else np.full(np.shape(flow.u), reference.density)
    if reference.compressible:
        work = density * flow.u * enthalpy_excess(flow, reference)
    else:
        work = flow.u * (flow.total_pressure - reference.total_pressure)

    def over(integrand: Array) -> Array:
        return flow.grid.integrate(np.where(region, integrand, 0.0))

    return Slipstream(
        thrust=over(-momentum_integrand(flow, reference)),
        power=over(work),
        swirl_energy=over(0.5 * density * (flow.v**2 + flow.w**2)),
        mass_flow=over(density * flow.u),
        area=np.count_nonzero(region, axis=(-2, -1)) * flow.grid.cell_area,
    )
