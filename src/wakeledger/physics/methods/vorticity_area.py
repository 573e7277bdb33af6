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
from wakeledger.physics.fields.boundary import Boundary, FreeAir, Reflection
from wakeledger.physics.fields.differences import axial_vorticity
from wakeledger.physics.fields.flow import mask_of
from wakeledger.physics.fields.poisson import stream_function
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.physics.fields.wall_correction import wall_part, wall_stream_function
from wakeledger.stream.reference import Reference

if TYPE_CHECKING:
    import xarray as xr

FREE_AIR = FreeAir()


@dataclass(frozen=True)
class VorticityForces:
    """Forces of a vorticity field; every array has the leading shape (...) of the fields.

    Attributes
    ----------
    induced_drag, lift, side_force : ndarray
        N; downstream, up, to starboard. Of a half model both halves together, without a side force (NaN).
    rolling_moment : ndarray
        N m about the moment centre, positive starboard wing down; NaN for a half model.
    root_bending_moment : ndarray
        N m, of the lift of a half model's own half about its plane of symmetry; NaN otherwise.
    net_circulation, gross_circulation : ndarray
        ∬ξ dA and ½∬|ξ| dA, m²/s.
    stream_function : ndarray, shape (..., nz, ny)
        m²/s, with what surrounds the window.
    free_air_drag : ndarray
        Induced drag that the same vorticity has in free air, N.
    free_air_stream_function : ndarray, shape (..., nz, ny)
        m²/s; that of the same vorticity in free air.
    """

    induced_drag: Array
    lift: Array
    side_force: Array
    rolling_moment: Array
    root_bending_moment: Array
    net_circulation: Array
    gross_circulation: Array
    stream_function: Array
    free_air_drag: Array
    free_air_stream_function: Array


def vorticity_forces(
    vorticity: Array,
    grid: UniformGrid,
    reference: Reference,
    *,
    moment_centre: tuple[float, float] = (0.0, 0.0),
    boundary: Boundary = FREE_AIR,
    reflection: Reflection | None = None,
) -> VorticityForces:
    """Forces from a vorticity field.

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
    boundary : FreeAir, ClosedWalls or OpenJet
        What surrounds the window, a reflection plane not included.
    reflection : {"y", "z"} or None
        Reflection plane whose mirrored half the window holds as well. Both halves of a half model ("y") count, what
        lies below the ground ("z") does not.

    Returns
    -------
    VorticityForces

    Raises
    ------
    SurveyError
        If the window does not fit its surroundings.

    Notes
    -----
    D_i = ½ρ∬ψξ, L = ρU∬yξ, Y = −ρU∬zξ; the moment about +x, starboard wing up, is ½ρU∬(y²+z²)ξ and is reported with
    the opposite sign (starboard wing down positive); the root bending moment is ½ρU∬y²ξ over y > 0. Sums are plain, not
    end-corrected: the vorticity is zero on the edge, where the plain sum is spectrally accurate.
    """
    free = stream_function(vorticity, grid)
    psi = free if isinstance(boundary, FreeAir) else wall_stream_function(vorticity, grid, boundary, free=free)
    area = grid.cell_area
    y, z = grid.y, grid.z
    q = reference.density * reference.speed
    share = own_share(grid, reflection)
    counted = vorticity if reflection != "z" else vorticity * share[:, None]
    in_y = counted.sum(axis=-2)
    in_z = counted.sum(axis=-1)
    about_y, about_z = y - moment_centre[0], z - moment_centre[1]
    # The moment of a displaced axis needs the forces' own moments as well, hence squares about the axis.
    roll = -0.5 * q * area * (in_y @ about_y**2 + in_z @ about_z**2)
    half_density = 0.5 * reference.density * area
    drag = half_density * np.einsum("...zy,...zy->...", psi, counted)
    unknown = np.full_like(drag, np.nan)
    half = reflection == "y"
    return VorticityForces(
        induced_drag=drag,
        lift=q * area * (in_y @ y),
        side_force=unknown if half else -q * area * (in_z @ z),
        rolling_moment=unknown if half else roll,
        root_bending_moment=0.5 * q * area * (in_y @ np.maximum(y, 0.0) ** 2) if half else unknown,
        net_circulation=area * in_y.sum(axis=-1),
        gross_circulation=0.5 * area * np.abs(counted).sum(axis=(-2, -1)),
        stream_function=psi,
        free_air_drag=drag if psi is free else half_density * np.einsum("...zy,...zy->...", free, counted),
        free_air_stream_function=free,
    )


def own_share(grid: UniformGrid, reflection: Reflection | None) -> Array:
    """Share of each row of a window that counts, shape (nz,): what lies below a ground plane does not.

    Parameters
    ----------
    grid : UniformGrid
        The window; with a reflection plane "z" it holds both sides of it.
    reflection : {"y", "z"} or None
        The reflection plane.

    Returns
    -------
    ndarray
        1; with "z" 0 below the plane and ½ on it.
    """
    if reflection != "z":
        return np.ones(grid.nz)
    return np.where(np.abs(grid.z) < 0.25 * grid.dz, 0.5, (grid.z > 0).astype(float))


def vorticity_drag(
    v: Array, w: Array, grid: UniformGrid, mask: Mask, *, density: float, boundary: Boundary = FREE_AIR
) -> Array:
    """Induced drag ½ρ∬ψξ dA of a crossflow over a wake region, N, shape (...)."""
    xi = np.where(mask, axial_vorticity(v, w, grid), 0.0)
    psi = stream_function(xi, grid)
    if not isinstance(boundary, FreeAir):
        psi = psi + wall_part(xi, grid, boundary)
    drag: Array = 0.5 * density * grid.cell_area * np.einsum("...zy,...zy->...", psi, xi)
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
