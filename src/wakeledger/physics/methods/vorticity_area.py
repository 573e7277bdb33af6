"""Induced drag, lift, side force and rolling moment from the axial vorticity.

D_i = ½ρ∬ψξ dA is the primary induced drag: it is right at any station behind the wing, because the bound vortex's share
of the crossflow energy is cancelled by the axial disturbance (Parseval), and it is blind to a uniform flow-angle error.
L = ρU∬yξ dA and its companions are the impulse of the same vorticity and do not depend on the window once all vorticity
is inside; −ρU∬w dA is conditionally convergent and is not the lift. Maskell, RAE TR 72232 (1972).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from wakeledger.core.estimate import Estimate
from wakeledger.core.grid import Array, UniformGrid
from wakeledger.core.plane import array_of, grid_of
from wakeledger.physics.fields.differences import axial_vorticity
from wakeledger.physics.fields.flow import mask_of
from wakeledger.physics.fields.poisson import stream_function
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.stream.reference import Reference

if TYPE_CHECKING:
    import xarray as xr


@dataclass(frozen=True)
class VorticityForces:
    """Forces of a vorticity field; every array has the leading shape (...) of the fields.

    Attributes
    ----------
    induced_drag, lift, side_force : ndarray
        N; downstream, up, to starboard.
    rolling_moment : ndarray
        N m about the moment centre, positive starboard wing down.
    net_circulation, gross_circulation : ndarray
        ∬ξ dA and ½∬|ξ| dA, m²/s.
    stream_function : ndarray, shape (..., nz, ny)
        m²/s.
    """

    induced_drag: Array
    lift: Array
    side_force: Array
    rolling_moment: Array
    net_circulation: Array
    gross_circulation: Array
    stream_function: Array


def vorticity_forces(
    vorticity: Array,
    grid: UniformGrid,
    reference: Reference,
    *,
    moment_centre: tuple[float, float] = (0.0, 0.0),
) -> VorticityForces:
    """Forces from a vorticity field in free air.

    Parameters
    ----------
    vorticity : ndarray, shape (..., nz, ny)
        Axial vorticity, s⁻¹, zero outside the wake.
    grid : UniformGrid
        The grid.
    reference : Reference
        The undisturbed stream.
    moment_centre : (float, float)
        y and z of the rolling moment's axis, m.

    Returns
    -------
    VorticityForces

    Notes
    -----
    D_i = ½ρ∬ψξ, L = ρU∬yξ, Y = −ρU∬zξ; the moment about +x, starboard wing up, is ½ρU∬(y²+z²)ξ and is reported with
    the opposite sign (starboard wing down positive). Sums are plain, not end-corrected: the vorticity is zero on the
    edge, where the plain sum is spectrally accurate.
    """
    psi = stream_function(vorticity, grid)
    area = grid.cell_area
    y, z = grid.y, grid.z
    q = reference.density * reference.speed
    in_y = vorticity.sum(axis=-2)
    in_z = vorticity.sum(axis=-1)
    about_y, about_z = y - moment_centre[0], z - moment_centre[1]
    # The moment of a displaced axis needs the forces' own moments as well, hence squares about the axis.
    roll = -0.5 * q * area * (in_y @ about_y**2 + in_z @ about_z**2)
    return VorticityForces(
        induced_drag=0.5 * reference.density * area * np.einsum("...zy,...zy->...", psi, vorticity),
        lift=q * area * (in_y @ y),
        side_force=-q * area * (in_z @ z),
        rolling_moment=roll,
        net_circulation=area * in_y.sum(axis=-1),
        gross_circulation=0.5 * area * np.abs(vorticity).sum(axis=(-2, -1)),
        stream_function=psi,
    )


def vorticity_drag(v: Array, w: Array, grid: UniformGrid, mask: Mask, *, density: float) -> Array:
    """Induced drag ½ρ∬ψξ dA of a crossflow over a wake region, N, shape (...)."""
    xi = np.where(mask, axial_vorticity(v, w, grid), 0.0)
    drag: Array = 0.5 * density * grid.cell_area * np.einsum("...zy,...zy->...", stream_function(xi, grid), xi)
    return drag


def vorticity_area(plane: xr.Dataset, reference: Reference, *, mask: Mask | None = None) -> tuple[Estimate, Estimate]:
    """Induced drag and lift of a labelled plane in free air.

    Parameters
    ----------
    plane : Dataset
        With v and w, and wake_mask unless `mask` is given.
    reference : Reference
        The undisturbed stream.
    mask : ndarray of bool, shape (nz, ny), optional
        Where vorticity counts.

    Returns
    -------
    (Estimate, Estimate)
        Rows ``induced_drag`` (N, positive downstream) and ``lift`` (N, positive up).

    Raises
    ------
    DataError
        If the plane lacks a variable or is not uniform.
    """
    grid = grid_of(plane)
    region = mask_of(plane) if mask is None else mask
    xi = np.where(region, axial_vorticity(array_of(plane, "v"), array_of(plane, "w"), grid), 0.0)
    forces = vorticity_forces(xi, grid, reference)
    reason = "no uncertainty source was given"
    return (
        Estimate("induced_drag", "vorticity_area", float(forces.induced_drag), reason=reason),
        Estimate("lift", "vorticity_area", float(forces.lift), reason=reason),
    )
