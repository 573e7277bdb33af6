"""Total drag by the plain momentum balance of the plane.

D = −∬[ρu(u − U) + (p − p∞)] dA over the window plus the crossflow energy beyond its edge. With the same primary
variables it is the same algebra as Betz plus its partner terms, so its agreement tests the arithmetic, not the flow.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from wakeledger.core.estimate import Estimate
from wakeledger.core.grid import Array
from wakeledger.physics.fields.edge import edge_integrals
from wakeledger.physics.fields.flow import Flow, flow_of
from wakeledger.stream.reference import Reference

if TYPE_CHECKING:
    import xarray as xr


def momentum_integrand(flow: Flow, reference: Reference) -> Array:
    """Momentum flux deficit −[ρu(u − U) + (p − p∞)], Pa, shape (..., nz, ny)."""
    density = flow.density if reference.compressible else reference.density
    excess = flow.static_pressure - reference.static_pressure
    result: Array = density * flow.u * (reference.speed - flow.u) - excess
    return result


def momentum_drag(flow: Flow, reference: Reference) -> Array:
    """Total drag, N, shape (...); see `momentum_area`."""
    outside = 0.5 * reference.density * edge_integrals(flow.v, flow.w, flow.grid).energy_integral
    return flow.grid.integrate(momentum_integrand(flow, reference)) + outside


def momentum_area(plane: xr.Dataset, reference: Reference) -> Estimate:
    """Total drag of a labelled plane by the momentum balance.

    Parameters
    ----------
    plane : Dataset
        With u, v, w, total_pressure and static_pressure on a uniform (z, y) grid.
    reference : Reference
        The undisturbed stream.

    Returns
    -------
    Estimate
        Row ``total_drag``, N, positive downstream.

    Raises
    ------
    DataError
        If the plane lacks a variable or is not uniform.
    """
    value = float(momentum_drag(flow_of(plane, reference), reference))
    return Estimate("total_drag", "momentum_area", value, reason="no uncertainty source was given")
