"""Static pressure from the crossflow alone, for planes where none was measured.

In a slender wake the crossflow obeys its own momentum balance, ∇²p = −ρ ∂ᵢ∂ⱼ(uᵢuⱼ) = 2ρ(v_y w_z − v_z w_y) − ρσ²,
in the plane; with p → p∞ far away this is one free-space Poisson solve.
"""

from __future__ import annotations

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.differences import ddy, ddz
from wakeledger.physics.fields.poisson import stream_function


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
        p − p∞; negative in a vortex core.
    """
    v_y, v_z, w_y, w_z = ddy(v, grid), ddz(v, grid), ddy(w, grid), ddz(w, grid)
    source = 2 * (v_y * w_z - v_z * w_y) - (v_y + w_z) ** 2
    return -density * stream_function(source, grid)
