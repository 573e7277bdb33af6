"""A window in a section, prepared once for solves of any field on it.

Which images act exactly, which panels go around the section, between which Chebyshev points the rest of the correction
acts, and what unit circulation at each of them puts on the edge. See `wall_correction`.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import lru_cache
from typing import Literal

import numpy as np

from wakeledger.core.errors import SurveyError
from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.boundary import (
    Boundary,
    Circle,
    ClosedWalls,
    OpenJet,
    Rectangle,
    Section,
    check_window,
    points_inside,
)
from wakeledger.physics.fields.image_solve import ITSELF, Image, mirror
from wakeledger.physics.fields.section_panels import Complex, Panels, mean_logarithm, panels_of

#: The condition on the section's edge: the function itself is zero, or its normal derivative.
Condition = Literal["zero", "no_gradient"]

#: Walls along the axes nearer than this part of the window's longer side act through images.
_MIRRORED = 0.35
#: Images beyond this many cells act by the plain logarithm, which a smooth field cannot tell from its own weights.
_DISTANT = 24
#: Interpolation between the grid and the Chebyshev points is good to this.
_TOLERANCE = 1e-13
_MOST_POINTS = 160
#: Numbers of random combinations tried for the range of the edge data.
_RANKS = (64, 192)
#: Pairs of places on the window and on the edge that are worked on where the window reaches outside the section.
_MOST_PAIRS = 5e7
#: Places this near a wall, as a part of the section's size, are moved inwards by as much.
INWARD = 1e-9


def complex_of(y: Array, z: Array) -> Complex:
    """Places as complex numbers y + iz."""
    places: Complex = np.asarray(y, float) + 1j * np.asarray(z, float)
    return places


@dataclass(frozen=True, eq=False)
class SectionSetup:
    """A window in a section, prepared: images, panels, interpolation points.

    `data` are the known part of F on the edge (and one row for the constant) for unit circulation at the points.
    """

    grid: UniformGrid
    section: Section
    condition: Condition
    images: tuple[Image, ...]
    walls_only: tuple[Image, ...]
    reach: tuple[float, float] | None
    panels: Panels
    points_y: Array
    points_z: Array
    onto_y: Array
    onto_z: Array
    data: Array

    def places(self, y: Array, z: Array, *, inward: float) -> Complex:
        """Places as complex numbers, those on a wall moved inwards."""
        return _inwards(self.section, complex_of(y, z), inward)

    def moments(self, vorticity: Array) -> Array:
        """Circulations at the interpolation points that act as the window's vorticity does, shape (..., k)."""
        held = (self.onto_z.T @ np.asarray(vorticity, float)) @ self.onto_y * self.grid.cell_area
        moments: Array = held.reshape(*held.shape[:-2], -1)
        return moments


@lru_cache(maxsize=16)
def section_setup(
    grid: UniformGrid, boundary: ClosedWalls | OpenJet, condition: Condition, parity: float
) -> SectionSetup:
    """Prepare a window in a section.

    Parameters
    ----------
    grid : UniformGrid
        The window.
    boundary : ClosedWalls or OpenJet
        The section and the reflection plane.
    condition : {"zero", "no_gradient"}
        On the section's edge.
    parity : float
        Sign of the image in the reflection plane: −1 for vorticity, +1 for divergence.

    Returns
    -------
    SectionSetup

    Raises
    ------
    SurveyError
        If the window reaches across the reflection plane, or outside the section on a grid too fine for it.
    """
    check_window(grid, boundary)
    section = boundary.section
    union = union_window(grid, boundary)
    sign = -1.0 if condition == "zero" else 1.0
    near = _near_walls(section, union, sign) if window_inside(grid, section) else ()
    near = tuple(_told_apart(wall, union, grid) for wall in near)
    halves = reflections(boundary, parity)
    images = tuple(wall.after(image) for wall in (ITSELF, *near) for image in halves)
    walls_only = tuple(wall.after(image) for wall in near for image in halves)
    windows = [(_moved(union, wall), wall) for wall in (ITSELF, *near)]

    def clearance(edge: Complex) -> Array:
        """Distance from the nearest image of the window whose share the other images do not cancel on this wall."""
        distance = np.full(edge.shape, np.inf)
        for box, wall in windows:
            partner = _partner_walls(wall, near, section)
            own = np.hypot(
                np.maximum(np.maximum(box[0] - edge.real, edge.real - box[1]), 0),
                np.maximum(np.maximum(box[2] - edge.imag, edge.imag - box[3]), 0),
            )
            for axis, at in partner:
                on_wall = np.abs((edge.real if axis == "y" else edge.imag) - at) < 1e-9 * size_of(section)
                own = np.where(on_wall.all(axis=-1, keepdims=True), np.inf, own)
            distance = np.minimum(distance, own)
        finite: Array = np.where(np.isfinite(distance), distance, size_of(section))
        return finite

    panels = panels_of(section, clearance, floor=4 * max(grid.dy, grid.dz))
    distance = float(clearance(panels.nodes.reshape(panels.starts.size, -1)).min())
    points_y, onto_y = _interpolation(grid.y, distance)
    points_z, onto_z = _interpolation(grid.z, distance)
    if not window_inside(grid, section):
        if grid.ny * grid.nz * panels.nodes.size > _MOST_PAIRS:
            raise SurveyError(
                "the survey window reaches outside the section on a grid too fine for it",
                place="[boundary] section",
                remedy="cut the window to the section, or give the survey on a coarser grid",
            )
        points_y, onto_y, points_z, onto_z = grid.y, np.eye(grid.ny), grid.z, np.eye(grid.nz)
    ys, zs = np.meshgrid(points_y, points_z)
    outside = ~points_inside(section, ys, zs, margin=INWARD * size_of(section))
    close = 0.25 * min(grid.dy, grid.dz) / size_of(section) if distance < min(grid.dy, grid.dz) else INWARD
    sources = _inwards(section, complex_of(ys.ravel(), zs.ravel()), close)
    data = np.zeros((panels.nodes.size + 1, sources.size))
    held = ~outside.ravel()
    data[:, held] = edge_data(panels, sources[held], images, section, condition)
    return SectionSetup(
        grid,
        section,
        condition,
        images,
        walls_only,
        None if near else reach_of(union),
        panels,
        points_y,
        points_z,
        onto_y,
        onto_z,
        data,
    )


def harmonic_values(panels: Panels, places: Complex, condition: Condition, known: Array) -> Array:
    """Harmonic functions at places inside the section from what is known of them on its edge.

    Parameters
    ----------
    panels : Panels
        Around the section.
    places : ndarray of complex, shape (k,)
        Inside it, m.
    condition : {"zero", "no_gradient"}
        Whether χ is known on the edge, or its conjugate η.
    known : ndarray, shape (n + 1, r)
        Values at the nodes, and the constant, of r functions; see `edge_data`.

    Returns
    -------
    ndarray, shape (k, r)
        χ.
    """
    given, constant = known[:-1], known[-1]
    solved = panels.conjugate @ given
    weights = panels.cauchy(places)
    if condition == "zero":
        values: Array = weights.real @ given - weights.imag @ solved
    else:
        values = -weights.imag @ given - weights.real @ solved
    values += constant
    return values


def edge_modes(known: Array) -> tuple[Array, Array]:
    """Few functions on the edge that make up all of many, to rounding.

    Parameters
    ----------
    known : ndarray, shape (n + 1, k)
        Edge data of many sources.

    Returns
    -------
    modes : ndarray, shape (n + 1, r)
        Orthonormal.
    shares : ndarray, shape (r, k)
        known = modes @ shares to `_TOLERANCE` of its largest value.

    Notes
    -----
    The range is found with seeded random combinations (N. Halko, P. G. Martinsson, J. A. Tropp, SIAM Review 53 (2011)
    217-288); where a few do not do, all nodes are kept.
    """
    rng = np.random.default_rng(0)
    for rank in _RANKS:
        if 2 * rank > min(known.shape):
            break
        modes, _ = np.linalg.qr(known @ rng.standard_normal((known.shape[1], rank)))
        shares: Array = modes.T @ known
        if np.abs(known - modes @ shares).max() < _TOLERANCE * np.abs(known).max():
            return modes, shares
    return np.eye(known.shape[0]), known


def edge_data(
    panels: Panels, sources: Complex, images: tuple[Image, ...], section: Section, condition: Condition
) -> Array:
    """Known part of F on the edge, and the constant, for unit circulation at each source, shape (n + 1, k).

    For ψ = 0 that is χ = −ψ₀. For ∂ψ/∂n = −Γ/P it is the conjugate η, whose growth along the edge is the flux
    ∂χ/∂n ds = Γ(dθ/2π − ds/P), θ the direction in which the source sees the edge; the constant makes ∮ψ ds = 0.
    """
    data = np.zeros((panels.nodes.size + 1, sources.size))
    for image in images:
        at = complex_of(*image.of(sources.real, sources.imag))
        if condition == "zero":
            data[:-1] += image.sign * np.log(np.abs(panels.nodes[:, None] - at)) / (2 * np.pi)
            continue
        turned, winding = panels.direction(at)
        data[:-1] += image.sign * (turned - winding * panels.travelled[:, None])
        data[-1] += image.sign * mean_logarithm(section, at) / (2 * np.pi)
    return data


def reflections(boundary: Boundary, parity: float) -> tuple[Image, ...]:
    """The field itself and its image of sign `parity` in the reflection plane, if there is one."""
    if boundary.reflection is None:
        return (ITSELF,)
    return ITSELF, mirror(boundary.reflection, sign=parity)


def union_window(grid: UniformGrid, boundary: Boundary) -> tuple[float, float, float, float]:
    """The window and its reflection as one box: y from, to, z from, to, m."""
    y0, y1, z0, z1 = (float(value) for value in (grid.y[0], grid.y[-1], grid.z[0], grid.z[-1]))
    if boundary.reflection == "y":
        y0 = -y1
    if boundary.reflection == "z":
        z0 = -z1
    return y0, y1, z0, z1


def _moved(box: tuple[float, float, float, float], image: Image) -> tuple[float, float, float, float]:
    y, z = image.of(np.array(box[:2]), np.array(box[2:]))
    return float(y.min()), float(y.max()), float(z.min()), float(z.max())


def reach_of(union: tuple[float, float, float, float]) -> tuple[float, float]:
    """Extents of the window and its reflection along z and y, m."""
    return union[3] - union[2], union[1] - union[0]


def _told_apart(wall: Image, union: tuple[float, float, float, float], grid: UniformGrid) -> Image:
    """An image in walls, marked distant where it lies many cells from the window."""
    box = _moved(union, wall)
    cells_y = max(box[0] - union[1], union[0] - box[1], 0.0) / grid.dy
    cells_z = max(box[2] - union[3], union[2] - box[3], 0.0) / grid.dz
    return replace(wall, distant=max(cells_y, cells_z) > _DISTANT)


def _axis_walls(section: Section) -> list[tuple[str, float]]:
    """Walls along the axes, each with the whole section on one side of it."""
    if isinstance(section, Circle):
        return []
    corners = section.corners
    walls = []
    for here, there in zip(corners, np.roll(corners, -1, axis=0), strict=True):
        for axis, name in enumerate("yz"):
            if here[axis] == there[axis] and here[axis] in (corners[:, axis].min(), corners[:, axis].max()):
                walls.append((name, float(here[axis])))
    return list(dict.fromkeys(walls))


def _near_walls(section: Section, union: tuple[float, float, float, float], sign: float) -> tuple[Image, ...]:
    """Images in the walls that the window nearly touches; in a rectangle those of its corners with them."""
    reach = _MIRRORED * max(union[1] - union[0], union[3] - union[2])
    near = []
    for axis, at in _axis_walls(section):
        low, high = union[:2] if axis == "y" else union[2:]
        if min(abs(at - low), abs(high - at)) < reach:
            near.append((axis, mirror(axis, at=at, sign=sign)))
    single = [image for _, image in near]
    if not isinstance(section, Rectangle):
        return tuple(single)
    across, upright = ([image for axis, image in near if axis == name] for name in "yz")
    return (*single, *(one.after(other) for one in across for other in upright))


def _partner_walls(wall: Image, near: tuple[Image, ...], section: Section) -> list[tuple[str, float]]:
    """Walls on which this image and another one cancel each other."""
    present = {ITSELF, *near}
    partners = []
    for axis, at in _axis_walls(section):
        for sign in (-1.0, 1.0):
            other = mirror(axis, at=at, sign=sign)
            if other in near and other.after(wall) in present:
                partners.append((axis, at))
    return partners


def _interpolation(axis: Array, distance: float) -> tuple[Array, Array]:
    """Chebyshev points on an axis for functions analytic up to `distance` from it, and the way onto the axis.

    Returns
    -------
    points : ndarray, shape (p,)
        The axis itself where it has no more points than would be needed.
    onto : ndarray, shape (n, p)
        Values at the axis from values at the points (Lagrange polynomials in barycentric form).
    """
    middle, half = (axis[0] + axis[-1]) / 2, (axis[-1] - axis[0]) / 2
    rate = np.arcsinh(max(distance, 1e-12) / half)
    count = int(min(np.ceil(-np.log(_TOLERANCE) / rate) + 2, _MOST_POINTS))
    if count >= axis.size:
        return axis, np.eye(axis.size)
    angle = (np.arange(count) + 0.5) * np.pi / count
    points = middle - half * np.cos(angle)
    sign = np.where(np.arange(count) % 2, -1.0, 1.0) * np.sin(angle)
    gap = axis[:, None] - points
    exact = np.abs(gap) < 1e-15 * max(abs(axis[0]), abs(axis[-1]), half)
    terms = sign / np.where(exact, 1.0, gap)
    onto = terms / terms.sum(axis=1, keepdims=True)
    onto[exact.any(axis=1)] = exact[exact.any(axis=1)]
    return points, onto


def size_of(section: Section) -> float:
    """Larger extent of a section, m."""
    if isinstance(section, Circle):
        return section.diameter
    return float(np.ptp(section.corners, axis=0).max())


def window_inside(grid: UniformGrid, section: Section) -> bool:
    """Whether the whole edge of a window lies inside a section."""
    ys, zs = np.meshgrid(grid.y, grid.z)
    edge = np.ones(grid.shape, dtype=bool)
    edge[1:-1, 1:-1] = False
    return bool(points_inside(section, ys[edge], zs[edge], margin=1e-6 * size_of(section)).all())


def _inwards(section: Section, places: Complex, part: float) -> Complex:
    """Places, those within `part` of the section's size of its edge moved inwards by as much."""
    if part == 0:
        return places
    step = part * size_of(section)
    if isinstance(section, Circle):
        centre = complex(*section.centre)
        radius = np.abs(places - centre)
        factor = np.minimum(1.0, (section.diameter / 2 - step) / np.maximum(radius, step))
        moved: Complex = centre + (places - centre) * factor
        return moved
    corners = complex_of(*section.corners.T)
    for start, end in zip(corners, np.roll(corners, -1), strict=True):
        along = (end - start) / abs(end - start)
        local = (places - start) / along
        beside = (local.real > -step) & (local.real < abs(end - start) + step)
        close = beside & (local.imag < step) & (local.imag > -2 * step)
        places = np.where(close, places + 1j * along * (step - local.imag), places)
    return places
