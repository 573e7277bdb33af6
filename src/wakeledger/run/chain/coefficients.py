"""Coefficients of the rows, and what the walls of a tunnel do to the flow at the model."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.boundary import ClosedWalls, FreeAir
from wakeledger.physics.fields.wall_correction import wall_crossflow
from wakeledger.physics.loading.boundary_factor import angle_correction, boundary_factor
from wakeledger.run.chain.outputs import MOMENTS, ROWS, coefficient_of, corrected_coefficient_of
from wakeledger.run.chain.reduction import Settings
from wakeledger.stream.reference import Reference


def coefficients(
    values: Mapping[str, float],
    free_air: float,
    settings: Settings,
    reference: Reference,
    blockage: float,
    errors: Mapping[str, Array],
) -> dict[str, float]:
    """Span efficiency and coefficients, those on the blockage-corrected dynamic pressure too.

    Parameters
    ----------
    values : mapping of str to float
        The rows, N or N m.
    free_air : float
        Induced drag in free air, N.
    settings : Settings
        The survey's settings.
    reference : Reference
        The undisturbed stream.
    blockage : float
        Wake-blockage velocity u_b, m/s.
    errors : mapping of str to ndarray
        Errors of the model's and the tunnel's given values.

    Returns
    -------
    dict of str to float
        By output. The corrected dynamic pressure is ½ρU²(1 + ε + u_b/U)² with the given solid blockage ε.
    """
    found: dict[str, float] = {}
    area = settings.reference_area + float(errors.get("model.reference_area", 0.0))
    span = settings.span + float(errors.get("model.span", 0.0))
    q = reference.dynamic_pressure
    if free_air > 0:
        found["span_efficiency"] = values["lift"] ** 2 / (np.pi * q * span**2 * free_air)
    solid = settings.given.get("boundary.solid_blockage", 0.0) + float(errors.get("boundary.solid_blockage", 0.0))
    faster = (1 + solid + blockage / reference.speed) ** 2
    for row in ROWS:
        if row != "span_efficiency":
            coefficient = values[row] / (q * area * (span if row in MOMENTS else 1.0))
            found[coefficient_of(row)] = coefficient
            if settings.blocked:
                found[corrected_coefficient_of(row)] = coefficient / faster
    return found


def tunnel_figures(
    values: Mapping[str, float],
    vorticity: Array,
    grid: UniformGrid,
    settings: Settings,
    reference: Reference,
    blockage: float,
    errors: Mapping[str, Array],
) -> dict[str, float]:
    """What the walls do to the flow at the model; nothing in free air.

    Parameters
    ----------
    values : mapping of str to float
        The rows, N.
    vorticity : ndarray, shape (nz, ny)
        Axial vorticity of the wake, s⁻¹.
    grid : UniformGrid
        The grid.
    settings, reference, blockage, errors
        As in `coefficients`.

    Returns
    -------
    dict of str to float
        The outputs `wakeledger.run.chain.outputs.TUNNEL`, as far as they can be had.
    """
    boundary = settings.boundary
    if isinstance(boundary, FreeAir):
        return {}
    area = settings.reference_area + float(errors.get("model.reference_area", 0.0))
    q = reference.dynamic_pressure
    factor = float(
        boundary_factor(
            values["induced_drag"],
            values["induced_drag_free_air"],
            values["lift"],
            dynamic_pressure=q,
            area=boundary.flow_area,
        )
    )
    lift_coefficient = values["lift"] / (q * area)
    found = {
        "boundary_factor": factor,
        "angle_correction": angle_correction(
            factor, lift_coefficient=lift_coefficient, reference_area=area, area=boundary.flow_area
        ),
    }
    if isinstance(boundary, ClosedWalls):
        found["wake_blockage"] = blockage / reference.speed
    if settings.model_place is not None:
        y, z = (np.array([value]) for value in settings.model_place)
        _, w = wall_crossflow(vorticity, grid, boundary.whole, y, z)
        # The trailing vortices and their images reach downstream of the model only.
        found["wall_upwash"] = 0.5 * float(w[0]) / reference.speed
    return found
