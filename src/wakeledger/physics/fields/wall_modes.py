"""What walls, or the edge of a jet, add to the energy of a window's vorticity, as a few squares.

The walls' share of the stream function is harmonic on the window and smooth, so that as a linear map from the vorticity
to its own places it has next to no rank: Σ ξ_i χ_ij ξ_j = Σ_r λ_r (Σ_i φ_r(i) ξ_i)² with few modes φ_r. They are found
with seeded random fields (N. Halko, P. G. Martinsson, J. A. Tropp, SIAM Review 53 (2011) 217-288) from the very solve
that makes the rows.
"""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.boundary import Boundary, FreeAir
from wakeledger.physics.fields.wall_correction import wall_part

#: Modes tried; the last number is taken as it comes where the wake reaches up to a wall.
_RANKS = (24, 48, 96)
#: A probe field's energy beside the walls is met to this part of the largest.
_TOLERANCE = 1e-8
_PROBES = 4
_LEAST = 1e-13


def wall_modes(
    grid: UniformGrid,
    boundary: Boundary,
    mask: NDArray[np.bool_],
    *,
    of: Literal["vorticity", "divergence"] = "vorticity",
) -> tuple[Array, Array]:
    """Modes of the walls' share of ½ρ∬ψξ, or of −½ρ∬φσ, over a wake region.

    Parameters
    ----------
    grid : UniformGrid
        The window.
    boundary : FreeAir, ClosedWalls or OpenJet
        What surrounds it.
    mask : ndarray of bool, shape (nz, ny)
        Where the field is not zero.
    of : {"vorticity", "divergence"}
        The field.

    Returns
    -------
    strengths : ndarray, shape (r,)
        λ_r, m²; none in free air.
    modes : ndarray, shape (r, nz, ny)
        φ_r, orthonormal over the points and zero outside the mask: the share is ½ρ · cell area · Σ_r λ_r (Σ_i φ_r ξ)².

    Raises
    ------
    SurveyError
        If the window does not fit its surroundings.
    """
    held = np.flatnonzero(mask)
    if isinstance(boundary, FreeAir) or not held.size:
        return np.zeros(0), np.zeros((0, *grid.shape))

    def response(columns: Array) -> Array:
        fields = np.zeros((columns.shape[1], grid.nz * grid.ny))
        fields[:, held] = columns.T
        walls = wall_part(fields.reshape(-1, *grid.shape), grid, boundary, of=of)
        within: Array = walls.reshape(fields.shape)[:, held].T
        return within

    rng = np.random.default_rng(0)
    probes = rng.standard_normal((held.size, _PROBES))
    at_probes = response(probes)
    range_of = at_probes
    values, vectors = np.zeros(0), np.zeros((held.size, 0))
    for rank in _RANKS:
        more = rng.standard_normal((held.size, min(rank, held.size) - range_of.shape[1]))
        range_of = np.concatenate([range_of, response(more)], axis=1)
        basis, _ = np.linalg.qr(range_of)
        inner = basis.T @ response(basis)
        values, turn = np.linalg.eigh((inner + inner.T) / 2)
        vectors = basis @ turn
        left = at_probes - (vectors * values) @ (vectors.T @ probes)
        if np.abs(left).max() < _TOLERANCE * np.abs(at_probes).max() or range_of.shape[1] == held.size:
            break
    kept = np.abs(values) > _LEAST * np.abs(values).max()
    modes = np.zeros((int(kept.sum()), grid.nz * grid.ny))
    modes[:, held] = vectors[:, kept].T
    return values[kept], modes.reshape(-1, *grid.shape)
