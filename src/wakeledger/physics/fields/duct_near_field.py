"""What the bound vortex adds to the flow at a station between walls, or in an open jet.

Walls reflect the bound line too: its field dies away behind it as exp(−kX) with the section's wavenumbers k, and not as
the square of the distance as it does in free air. Behind the plane X = 0 of the bound line the velocity is that of the
endless trailing vortices and a potential Φ; ahead of it, by symmetry, the potential alone. Across that plane the axial
velocity is continuous, and the crossflow jumps by the bound vorticity B_y, B_z that lies in it, so that

    ∇²φ = ½(∂B_z/∂y − ∂B_y/∂z) at X = 0,    Φ = Σ φ_mn e^{−k_mn X},

with ∂φ/∂n = 0 on closed walls (cosines) and φ = 0 on the edge of a jet (sines): exact in a rectangle. In sections of
another shape that of the rectangle of the same area about their extent stands in.
"""

from __future__ import annotations

import numpy as np

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.boundary import Circle, ClosedWalls, OpenJet, Rectangle, Section
from wakeledger.physics.fields.lifting_line import NearField, bound_circulation

#: Modes that have fallen below exp of this are left out.
_FALLEN = 40.0


def duct_near_field(
    vorticity: Array, grid: UniformGrid, boundary: ClosedWalls | OpenJet, *, distance: float
) -> NearField:
    """Velocity at the plane beyond that of infinitely long trailing vortices and their images.

    Parameters
    ----------
    vorticity : ndarray, shape (nz, ny)
        Axial vorticity of the wake, s⁻¹, zero outside it; both sides of a reflection plane.
    grid : UniformGrid
        The grid.
    boundary : ClosedWalls or OpenJet
        What surrounds both sides.
    distance : float
        Distance X of the plane behind the bound line, m, positive.

    Returns
    -------
    NearField
        v and w to be added to the two-dimensional crossflow of the same vorticity; u to the stream's speed.

    Raises
    ------
    ValueError
        If the plane does not lie behind the bound line.
    """
    if distance <= 0:
        raise ValueError(f"the plane must lie behind the bound line, {distance} m was given")
    (y0, y1), (z0, z1) = _rectangle(boundary.section)
    along_y, along_z = bound_circulation(vorticity, grid)
    closed = isinstance(boundary, ClosedWalls)
    first = 0 if closed else 1
    number_y, number_z = (
        np.pi * np.arange(first, _modes(width, step, distance) + first) / width
        for width, step in ((y1 - y0, grid.dy), (z1 - z0, grid.dz))
    )
    phase_y, phase_z = number_y[:, None] * (grid.y - y0), number_z[:, None] * (grid.z - z0)
    if closed:
        (even_y, odd_y), (even_z, odd_z) = ((np.cos(p), -np.sin(p)) for p in (phase_y, phase_z))
    else:
        (even_y, odd_y), (even_z, odd_z) = ((np.sin(p), np.cos(p)) for p in (phase_y, phase_z))
    slope_y, slope_z = number_y[:, None] * odd_y, number_z[:, None] * odd_z
    # ½∬(∂B_z/∂y − ∂B_y/∂z) f dA by parts.
    source = 0.5 * slope_z @ along_y @ even_y.T
    if along_z is not None:
        source = source - 0.5 * even_z @ along_z @ slope_y.T
    weight = np.where(number_z == 0, 1.0, 2.0)[:, None] * np.where(number_y == 0, 1.0, 2.0)
    square = number_z[:, None] ** 2 + number_y**2
    k = np.sqrt(square)
    scale = weight * grid.cell_area / ((y1 - y0) * (z1 - z0))
    amplitude = -scale * source * np.exp(-k * distance) / np.where(square > 0, square, np.inf)
    v: Array = even_z.T @ amplitude @ slope_y
    w: Array = slope_z.T @ amplitude @ even_y
    u: Array = even_z.T @ (-k * amplitude) @ even_y
    return NearField(v, w, u)


def _modes(width: float, step: float, distance: float) -> int:
    """Number of modes across a section: those not yet fallen at the plane, as far as the grid resolves them."""
    fallen, resolved = _FALLEN * width / (np.pi * distance), width / step
    return int(np.ceil(min(fallen, resolved))) + 2


def _rectangle(section: Section) -> tuple[tuple[float, float], tuple[float, float]]:
    """Walls of the rectangle that stands for a section."""
    if isinstance(section, Rectangle):
        return section.y, section.z
    if isinstance(section, Circle):
        half = section.diameter / 2
        low, high = np.array(section.centre) - half, np.array(section.centre) + half
    else:
        low, high = section.corners.min(axis=0), section.corners.max(axis=0)
    middle, size = (low + high) / 2, high - low
    size = size * np.sqrt(section.area / float(np.prod(size)))
    return tuple((float(m - s / 2), float(m + s / 2)) for m, s in zip(middle, size, strict=True))  # type: ignore[return-value]
