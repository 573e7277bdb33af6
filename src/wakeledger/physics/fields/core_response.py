"""What differences over a spacing do to the self energy of a vortex: their response to an exact Gaussian core."""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields.differences import axial_vorticity
from wakeledger.physics.fields.poisson import stream_function

#: Radius within which the vorticity counts, as in a wake region, and half the width of the grid, in core lengths; near
#: the grid's edge one-sided differences would tell.
_REGION, _REACH = 6.0, 12.0
#: Places of the centre within a cell, as shares of it.
_PLACES = (0.0, 0.25, 0.5)
#: Coarser than this nothing of a core is left that could be told.
_COARSEST = 4.0


def core_error(spacing_y: float, spacing_z: float) -> float:
    """Error of the induced drag of one Gaussian vortex from the spacing of the points.

    Parameters
    ----------
    spacing_y, spacing_z : float
        Spacing over the core length a of ξ ∝ exp(−r²/a²).

    Returns
    -------
    float
        Of ½ρ∬ψξ dA, over ρΓ²/8π; negative where the drag is too low. Mean over places of the centre within a cell.

    Raises
    ------
    ValueError
        If a spacing is not positive.

    Notes
    -----
    The exact value is −[ln 2a² − γ] ρΓ²/8π (lengths in m): the self energy of the element whose velocity is put in.

    Examples
    --------
    >>> bool(-0.2 < core_error(1.2, 1.2) < core_error(0.8, 0.8) < 0)
    True
    """
    if not (spacing_y > 0 and spacing_z > 0):
        raise ValueError(f"spacings must be positive, {spacing_y} and {spacing_z} core lengths were given")
    return _of(*(float(round(min(one, _COARSEST), 3)) for one in (spacing_y, spacing_z)))


@lru_cache(maxsize=256)
def _of(spacing_y: float, spacing_z: float) -> float:
    ny, nz = (2 * int(np.ceil(_REACH / one)) + 1 for one in (spacing_y, spacing_z))
    exact = -(np.log(2.0) - np.euler_gamma)
    found = []
    for share_y in _PLACES:
        for share_z in _PLACES:
            y0 = -(ny // 2 + share_y) * spacing_y
            z0 = -(nz // 2 + share_z) * spacing_z
            grid = UniformGrid(y0, z0, spacing_y, spacing_z, ny, nz)
            y, z = grid.mesh()
            square = y**2 + z**2
            turn = np.where(square > 0, -np.expm1(-square) / np.where(square > 0, square, 1.0), 1.0) / (2 * np.pi)
            vorticity = np.where(square < _REGION**2, axial_vorticity(-turn * z, turn * y, grid), 0.0)
            # ½ρ∬ψξ over ρ/8π.
            found.append(4 * np.pi * float(grid.integrate(stream_function(vorticity, grid) * vorticity)) - exact)
    return float(np.mean(found))
