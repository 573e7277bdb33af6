"""Stream function of a window's vorticity between walls, in an open jet, beside a reflection plane, or in free air.

One mechanism serves every section: the free-space solve of the window's vorticity, images included, plus a harmonic
function on the section that makes the sum meet the condition on its edge,

    closed walls   ψ = 0,          open jet   ∂ψ/∂n = 0 (v_t = 0, constant pressure to first order).

The images are those in the reflection plane and in walls along the axes that the window touches or nearly touches,
where they are exact; what they leave is smooth, and boundary elements (`section_panels`) supply it. The correction is
linear in the vorticity and smooth on the window, so it acts between two small sets of Chebyshev points: after the
geometry has been prepared once, a solve costs little more than one in free space.

For the potential φ of a crossflow divergence the two conditions change places.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.boundary import (
    Boundary,
    ClosedWalls,
    FreeAir,
    OpenJet,
    check_window,
    points_inside,
)
from wakeledger.physics.fields.image_solve import ImageSolve, image_solve
from wakeledger.physics.fields.poisson import stream_function
from wakeledger.physics.fields.section_panels import Complex, panels_of
from wakeledger.physics.fields.section_setup import (
    INWARD,
    Condition,
    SectionSetup,
    complex_of,
    edge_data,
    edge_modes,
    harmonic_values,
    reach_of,
    reflections,
    section_setup,
    size_of,
    union_window,
    window_inside,
)


def wall_stream_function(
    vorticity: Array, grid: UniformGrid, boundary: Boundary, *, workers: int = 1, free: Array | None = None
) -> Array:
    """Stream function of a window's vorticity with what surrounds it.

    Parameters
    ----------
    vorticity : ndarray, shape (..., nz, ny)
        Axial vorticity ξ, s⁻¹; zero outside the window.
    grid : UniformGrid
        The window; with a reflection plane, the half on its starboard or upper side.
    boundary : FreeAir, ClosedWalls or OpenJet
        What surrounds it.
    workers : int
        Threads of the transforms.
    free : ndarray, shape (..., nz, ny), optional
        Free-space stream function of the same vorticity, where it is known already.

    Returns
    -------
    ndarray, shape (..., nz, ny)
        ψ, m²/s, with v = ∂ψ/∂z, w = −∂ψ/∂y; zero on closed walls and on the reflection plane, of mean zero on the edge
        of an open jet, and zero at points of the window outside the section.

    Raises
    ------
    SurveyError
        If the window reaches across the reflection plane, or outside the section on a grid too fine for it.
    """
    condition: Condition = "no_gradient" if isinstance(boundary, OpenJet) else "zero"
    return _solver(grid, boundary, condition, -1.0)(vorticity, workers=workers, free=free)


def wall_velocity_potential(divergence: Array, grid: UniformGrid, boundary: Boundary, *, workers: int = 1) -> Array:
    """Velocity potential φ of a window's crossflow divergence with what surrounds it, ∇²φ = +σ, m²/s.

    Shapes and options as in `wall_stream_function`; ∂φ/∂n = 0 on closed walls and the reflection plane, φ = 0 on the
    edge of an open jet.
    """
    condition: Condition = "no_gradient" if isinstance(boundary, ClosedWalls) else "zero"
    return -_solver(grid, boundary, condition, 1.0)(divergence, workers=workers)


def wall_part(
    field: Array, grid: UniformGrid, boundary: Boundary, *, of: Literal["vorticity", "divergence"] = "vorticity"
) -> Array:
    """What its surroundings alone add to the stream function of a vorticity, or to −φ of a crossflow divergence.

    Shapes and errors as in `wall_stream_function`, m²/s. Linear in the field, symmetric between its places, and smooth
    where the field lies away from the walls.
    """
    solid, parity = (ClosedWalls, 1.0) if of == "divergence" else (OpenJet, -1.0)
    condition: Condition = "no_gradient" if isinstance(boundary, solid) else "zero"
    return _solver(grid, boundary, condition, parity).walls_alone(np.asarray(field, float))


def wall_crossflow(vorticity: Array, grid: UniformGrid, boundary: Boundary, y: Array, z: Array) -> tuple[Array, Array]:
    """Crossflow that the walls or the jet's edge alone add at given places, far downstream.

    Parameters
    ----------
    vorticity : ndarray, shape (..., nz, ny)
        Axial vorticity, s⁻¹.
    grid : UniformGrid
        The window.
    boundary : FreeAir, ClosedWalls or OpenJet
        What surrounds it; the reflection plane belongs to the configuration, not to the walls.
    y, z : ndarray, shape (k,)
        Places inside the section, m.

    Returns
    -------
    v, w : ndarray, shape (..., k)
        m/s. At the model itself the walls add half of it: the trailing vortices and their images reach downstream only.
    """
    y, z = (np.atleast_1d(np.asarray(part, float)) for part in (y, z))
    shape = (*vorticity.shape[:-2], y.size)
    if isinstance(boundary, FreeAir):
        return np.zeros(shape), np.zeros(shape)
    condition: Condition = "no_gradient" if isinstance(boundary, OpenJet) else "zero"
    setup = section_setup(grid, boundary, condition, -1.0)
    at = setup.places(y, z, inward=0.0)
    conjugate, weights = setup.panels.conjugate, setup.panels.cauchy(at, derivative=True)
    # F = χ + iη has F′ = ∂χ/∂y − i ∂χ/∂z; with η given on the edge, the solved part is −χ of F/i.
    slope = weights @ (np.eye(conjugate.shape[0]) + 1j * conjugate)
    if condition == "no_gradient":
        slope = slope * 1j
    found = setup.moments(vorticity) @ (slope @ setup.data[:-1]).T
    v, w = -found.imag, -found.real
    ys, zs = (part.ravel() for part in grid.mesh())
    strength = np.reshape(vorticity, (*shape[:-1], -1)) * grid.cell_area
    for image in setup.walls_only:
        image_y, image_z = image.of(ys, zs)
        dy, dz = y[:, None] - image_y, z[:, None] - image_z
        swirl = image.sign / (2 * np.pi * (dy**2 + dz**2))
        v, w = v - strength @ (swirl * dz).T, w + strength @ (swirl * dy).T
    return v.reshape(shape), w.reshape(shape)


def section_interaction(
    boundary: ClosedWalls | OpenJet, y: Array, z: Array, *, margin: float, refine: float = 1.0
) -> Array:
    """Stream function that the walls alone add between line vortices at given places.

    Parameters
    ----------
    boundary : ClosedWalls or OpenJet
        The section.
    y, z : ndarray, shape (k,)
        Places of the vortices, m; on one side of the reflection plane if there is one.
    margin : float
        Length of the shortest panel, m: about the distance of the vortices from the nearest wall.
    refine : float
        Factor on the number of panels.

    Returns
    -------
    ndarray, shape (k, k)
        χ_ij, m²/s at place i for unit circulation at place j, symmetric: the walls add ½ρ Σ Γ_i χ_ij Γ_j to the drag.
    """
    images = reflections(boundary, -1.0)
    condition: Condition = "no_gradient" if isinstance(boundary, OpenJet) else "zero"
    sources = np.concatenate([complex_of(*image.of(y, z)) for image in images])

    def clearance(edge: Complex) -> Array:
        distance: Array = np.abs(edge[..., None] - sources).min(axis=-1)
        return distance

    panels = panels_of(boundary.section, clearance, floor=margin, refine=refine)
    at = complex_of(y, z)
    return harmonic_values(panels, at, condition, edge_data(panels, at, images, boundary.section, condition))


@dataclass(frozen=True, eq=False)
class _Solver:
    """A prepared solve: transform with images, and the correction between interpolation points."""

    grid: UniformGrid
    base: ImageSolve | None
    setup: SectionSetup | None
    factors: tuple[Array, ...] = ()
    inside: NDArray[np.bool_] | None = None

    def __call__(self, field: Array, *, workers: int, free: Array | None = None) -> Array:
        if self.inside is not None:
            field = np.where(self.inside, field, 0.0)
        if self.base is not None:
            psi = self.base(field, workers=workers)
        elif free is not None and self.inside is None:
            psi = free
        else:
            psi = stream_function(field, self.grid, workers=workers)
        if self.setup is None:
            return psi
        psi = psi + self._correction(self.setup, field)
        return psi if self.inside is None else np.where(self.inside, psi, 0.0)

    def walls_alone(self, field: Array) -> Array:
        """What the images and the correction add to the free-space solve."""
        if self.inside is not None:
            field = np.where(self.inside, field, 0.0)
        walls: Array = np.zeros_like(field)
        if self.base is not None:
            walls = self.base(field) - stream_function(field, self.grid)
        if self.setup is not None:
            walls = walls + self._correction(self.setup, field)
        return walls if self.inside is None else np.where(self.inside, walls, 0.0)

    def _correction(self, setup: SectionSetup, field: Array) -> Array:
        values = setup.moments(field)
        for factor in self.factors[::-1]:
            values = values @ factor.T
        on_points = values.reshape(*values.shape[:-1], setup.points_z.size, setup.points_y.size)
        correction: Array = setup.onto_z @ on_points @ setup.onto_y.T
        return correction


@lru_cache(maxsize=16)
def _solver(grid: UniformGrid, boundary: Boundary, condition: Condition, parity: float) -> _Solver:
    if isinstance(boundary, FreeAir):
        check_window(grid, boundary)
        if boundary.reflection is None:
            return _Solver(grid, None, None)
        images = reflections(boundary, parity)
        return _Solver(grid, image_solve(grid, images, reach_of(union_window(grid, boundary))), None)
    setup = section_setup(grid, boundary, condition, parity)
    base = image_solve(grid, setup.images, setup.reach) if len(setup.images) > 1 else None
    ys, zs = np.meshgrid(setup.points_y, setup.points_z)
    inside = None
    if not window_inside(grid, boundary.section):
        inside = points_inside(boundary.section, *grid.mesh(), margin=INWARD * size_of(boundary.section))
    targets = setup.places(ys.ravel(), zs.ravel(), inward=INWARD)
    modes, shares = edge_modes(setup.data)
    held = np.ones(targets.size, dtype=bool) if inside is None else inside.ravel()
    values = np.zeros((targets.size, modes.shape[1]))
    values[held] = harmonic_values(setup.panels, targets[held], condition, modes)
    factors: tuple[Array, ...] = (values, shares)
    if targets.size < 2 * modes.shape[1]:
        factors = (values @ shares,)
    return _Solver(grid, base, setup, factors, inside)
