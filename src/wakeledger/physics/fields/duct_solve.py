"""Stream function between closed rectangular walls by sine transforms.

∇²ψ = −ξ with ψ = 0 on the walls has the eigenfunctions sin(mπ(y − y₀)/B) sin(nπ(z − z₀)/H), so that each transformed
component of ξ is divided by its eigenvalue. Walls need not lie on grid points: the transforms are sums over the
window's points, up to the grid's highest wavenumber. Neither images nor boundary elements enter: it is the independent
check on `wall_correction`, and exact for smooth vorticity.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.boundary import ClosedWalls, Rectangle, check_window


def duct_stream_function(vorticity: Array, grid: UniformGrid, boundary: ClosedWalls) -> Array:
    """Stream function of a window's vorticity in a closed rectangular test section.

    Parameters
    ----------
    vorticity : ndarray, shape (..., nz, ny)
        Axial vorticity ξ, s⁻¹; zero outside the window and at the walls.
    grid : UniformGrid
        The window, inside the section.
    boundary : ClosedWalls
        With a rectangular section; a reflection plane is one more wall.

    Returns
    -------
    ndarray, shape (..., nz, ny)
        ψ, m²/s, zero on the walls.

    Raises
    ------
    ValueError
        If the section is not a rectangle.
    SurveyError
        If the window reaches across the reflection plane.
    """
    section = boundary.section
    if not isinstance(section, Rectangle):
        raise ValueError(f"sine transforms need a rectangular section, a {type(section).__name__} was given")
    check_window(grid, boundary)
    y, z = section.y, section.z
    if boundary.reflection == "y":
        y = (0.0, y[1])
    if boundary.reflection == "z":
        z = (0.0, z[1])
    in_y, number_y = _sines(grid.y0, grid.dy, grid.ny, *y)
    in_z, number_z = _sines(grid.z0, grid.dz, grid.nz, *z)
    scale = 4 * grid.cell_area / ((y[1] - y[0]) * (z[1] - z[0]))
    spectrum = scale * (in_z @ vorticity @ in_y.T) / (number_z[:, None] ** 2 + number_y**2)
    solution: Array = in_z.T @ spectrum @ in_y
    return solution


@lru_cache(maxsize=8)
def _sines(first: float, step: float, n: int, low: float, high: float) -> tuple[Array, Array]:
    """Sines at the points of an axis, shape (modes, n), and their wavenumbers, up to the grid's highest."""
    width = high - low
    number = np.pi * np.arange(1, max(int(np.floor(width / step + 1e-9)), 2)) / width
    return np.sin(number[:, None] * (first + step * np.arange(n) - low)), number
