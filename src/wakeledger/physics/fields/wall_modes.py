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
from scipy.interpolate import RectBivariateSpline

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.boundary import Boundary, FreeAir
from wakeledger.physics.fields.wall_correction import wall_part

Kind = Literal["vorticity", "divergence"]

#: Modes tried; the last number is taken as it comes where the wake reaches up to a wall.
_RANKS = (24, 48)
#: What the modes leave of the response to white probe fields, as a part of the largest. Images and the free-space solve
#: treat the highest wavenumbers in different ways: a thousandth of what the walls add to noise, and no smooth mode.
_TOLERANCE = 1e-3
_PROBES = 4
#: Weakest mode kept, as a part of the strongest.
_LEAST = 1e-5
#: Points along each axis on which modes are looked for; splines carry them to more.
_MOST_POINTS = 64


def wall_modes(
    grid: UniformGrid,
    boundary: Boundary,
    mask: NDArray[np.bool_],
    *,
    of: Kind = "vorticity",
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
        φ_r, zero outside the mask: the share is ½ρ · cell area · Σ_r λ_r (Σ_i φ_r ξ)².

    Raises
    ------
    SurveyError
        If the window does not fit its surroundings.
    """
    if isinstance(boundary, FreeAir) or not mask.any():
        return np.zeros(0), np.zeros((0, *grid.shape))
    coarse = _coarser(grid)
    if coarse == grid:
        strengths, modes = _modes(grid, boundary, mask, of)
    else:
        # Every place of the region counts at the point nearest to it, so that a thin one is not missed.
        held = np.zeros(coarse.shape, dtype=bool)
        held[
            tuple(
                np.rint(places * ((few - 1) / (fine - 1))).astype(int)
                for places, few, fine in zip(np.nonzero(mask), coarse.shape, grid.shape, strict=True)
            )
        ] = True
        strengths, few_points = _modes(coarse, boundary, held, of)
        strengths = strengths * (grid.cell_area / coarse.cell_area)
        modes = np.stack([_interpolated(mode, coarse, grid) for mode in few_points])
    return strengths, np.where(mask, modes, 0.0)


def _coarser(grid: UniformGrid) -> UniformGrid:
    """The window with few points, enough for what is smooth."""
    nz, ny = (min(n, _MOST_POINTS) for n in grid.shape)
    step_y, step_z = grid.dy * (grid.ny - 1) / (ny - 1), grid.dz * (grid.nz - 1) / (nz - 1)
    return grid if (nz, ny) == grid.shape else UniformGrid(grid.y0, grid.z0, step_y, step_z, ny, nz)


def _interpolated(field: Array, coarse: UniformGrid, grid: UniformGrid) -> Array:
    degrees = {"kx": min(5, coarse.nz - 1), "ky": min(5, coarse.ny - 1)}
    spline = RectBivariateSpline(coarse.z, coarse.y, field, **degrees)
    values: Array = spline(np.clip(grid.z, *coarse.z[[0, -1]]), np.clip(grid.y, *coarse.y[[0, -1]]))
    return values


def _modes(grid: UniformGrid, boundary: Boundary, mask: NDArray[np.bool_], of: Kind) -> tuple[Array, Array]:
    """Strengths and modes; the modes go on smoothly beyond the mask."""
    held = np.flatnonzero(mask)

    def response(columns: Array) -> Array:
        fields = np.zeros((columns.shape[1], grid.nz * grid.ny))
        fields[:, held] = columns.T
        walls: Array = wall_part(fields.reshape(-1, *grid.shape), grid, boundary, of=of).reshape(fields.shape).T
        return walls

    rng = np.random.default_rng(0)
    at_probes = response(rng.standard_normal((held.size, _PROBES)))[held]
    range_of = np.zeros((held.size, 0))
    basis = range_of
    for rank in _RANKS:
        more = rng.standard_normal((held.size, min(rank, held.size) - range_of.shape[1]))
        range_of = np.concatenate([range_of, response(more)[held]], axis=1)
        basis, _ = np.linalg.qr(range_of)
        left = at_probes - basis @ (basis.T @ at_probes)
        if np.abs(left).max() < _TOLERANCE * np.abs(at_probes).max() or range_of.shape[1] == held.size:
            break
    everywhere = response(basis)
    inner = basis.T @ everywhere[held]
    values, turn = np.linalg.eigh((inner + inner.T) / 2)
    kept = np.abs(values) > _LEAST * np.abs(values).max()
    modes = (everywhere @ turn[:, kept] / values[kept]).T
    return values[kept], modes.reshape(-1, *grid.shape)
