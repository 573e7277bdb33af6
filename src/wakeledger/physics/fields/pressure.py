"""Static pressure from the crossflow alone, for planes where none was measured.

In a slender wake the crossflow obeys its own momentum balance in the plane, ∇p + ρ(u·∇)u = 0. In Lamb's form

    p − p∞ = −½ρ(v² + w²) + p',     ∇²p' = ρ[∂(ξw)/∂y − ∂(ξv)/∂z],     p' → 0 far away,

so that the only source is the vorticity: the outer flow outside the window contributes nothing, and noise contributes
nothing on average, because a central difference is uncorrelated with the value at its own place. The total pressure
p + ½ρV² then sees the crossflow through p' alone.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.differences import axial_vorticity, ddy, ddz
from wakeledger.physics.fields.poisson import stream_function

#: Width of the window's rim whose vorticity is left out, in cells: twice the reach of the central differences.
_RIM = 10


def crossflow_pressure(v: Array, w: Array, grid: UniformGrid, *, density: float) -> Array:
    """Static pressure relative to the undisturbed stream, Pa.

    Parameters
    ----------
    v, w : ndarray, shape (..., nz, ny)
        Crossflow, m/s.
    grid : UniformGrid
        The grid.
    density : float
        kg/m³.

    Returns
    -------
    ndarray, shape (..., nz, ny)
        p − p∞; negative in a vortex core. Vorticity in the window's rim, ten cells, is left out, and so is
        the axial disturbance of a body close by.
    """
    xi = axial_vorticity(v, w, grid)
    xi = np.where(inner_window(grid), xi, 0.0)
    source = ddy(xi * w, grid) - ddz(xi * v, grid)
    return -0.5 * density * (v**2 + w**2) - density * stream_function(source, grid)


def inner_window(grid: UniformGrid) -> NDArray[np.bool_]:
    """Places whose vorticity counts as a source of pressure, shape (nz, ny).

    One-sided differences, in the rim, are correlated with the value at their own place, so they would rectify noise.
    """
    rim_z, rim_y = min(_RIM, grid.nz // 4), min(_RIM, grid.ny // 4)
    inner = np.zeros(grid.shape, dtype=bool)
    inner[rim_z : grid.nz - rim_z, rim_y : grid.ny - rim_y] = True
    return inner
