"""Distributions along the span: bound circulation, lift, profile drag and induced drag per unit span."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.differences import ddy
from wakeledger.stream.reference import Reference


@dataclass(frozen=True)
class SpanLoading:
    """Distributions along y, arrays of shape (ny,).

    Attributes
    ----------
    y : ndarray
        m, to starboard.
    bound_circulation : ndarray
        Γ_b(y) = ∫_y^∞∫ξ dz dy', m²/s, positive for lift. From a rolled-up plane it is the loading moved inboard.
    lift_per_span : ndarray
        ρUΓ_b, N/m.
    profile_drag_per_span : ndarray
        Betz's integrand integrated over z inside the wake region, N/m.
    induced_drag_per_span : ndarray
        −½ρΓ_b w with w on the height of the wake's vorticity, N/m; its integral is the induced drag for a flat wake
        only.
    """

    y: Array
    bound_circulation: Array
    lift_per_span: Array
    profile_drag_per_span: Array
    induced_drag_per_span: Array


def span_loading(
    vorticity: Array, psi: Array, profile_integrand: Array, grid: UniformGrid, reference: Reference
) -> SpanLoading:
    """Distributions along the span of one plane.

    Parameters
    ----------
    vorticity : ndarray, shape (nz, ny)
        Axial vorticity, s⁻¹, zero outside the wake region.
    psi : ndarray, shape (nz, ny)
        Its stream function, m²/s.
    profile_integrand : ndarray, shape (nz, ny)
        Betz's integrand, Pa, zero outside the wake region.
    grid : UniformGrid
        The grid.
    reference : Reference
        The undisturbed stream.

    Returns
    -------
    SpanLoading
    """
    shed = vorticity.sum(axis=0) * grid.dz
    # Circulation shed outboard of each point; half of its own cell lies outboard.
    bound = (np.cumsum(shed[::-1])[::-1] - 0.5 * shed) * grid.dy
    weight = np.abs(vorticity)
    column = weight.sum(axis=0)
    share = np.where(column > 0, weight / np.where(column > 0, column, 1.0), 0.0)
    downwash = (share * -ddy(psi, grid)).sum(axis=0)
    return SpanLoading(
        y=grid.y,
        bound_circulation=bound,
        lift_per_span=reference.density * reference.speed * bound,
        profile_drag_per_span=profile_integrand.sum(axis=0) * grid.dz,
        induced_drag_per_span=-0.5 * reference.density * bound * downwash,
    )
