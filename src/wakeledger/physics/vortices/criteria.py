"""Where the crossflow turns: Γ₁, Γ₂ and the swirling strength.

All three are positive for counter-clockwise rotation seen from behind. Γ₂ and the swirling strength do not change when
a uniform velocity is added (they are Galilean invariant); Γ₁ does, by definition.

Source: L. Graftieaux, M. Michard, N. Grosjean, Meas. Sci. Technol. 12 (2001) 1422-1429, for Γ₁ and Γ₂.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.differences import ddy, ddz

#: |Γ₂| above which rotation outweighs strain, to leading order in the size of the window.
ROTATION_DOMINATES = 2 / np.pi
#: Radius of the window of Γ₁ and Γ₂, in grid spacings.
REACH = 3.0


@lru_cache(maxsize=16)
def _disc(dy: float, dz: float, radius: float) -> tuple[tuple[int, int, float, float], ...]:
    """Offsets (columns, rows, unit vector y, unit vector z) of the points of a disc about its centre."""
    reach_y, reach_z = int(radius / dy + 1e-9), int(radius / dz + 1e-9)
    offsets = []
    for j in range(-reach_z, reach_z + 1):
        for i in range(-reach_y, reach_y + 1):
            distance = float(np.hypot(i * dy, j * dz))
            if (i, j) != (0, 0) and distance <= radius * (1 + 1e-9):
                offsets.append((i, j, i * dy / distance, j * dz / distance))
    return tuple(offsets)


def _window(grid: UniformGrid, radius: float | None) -> tuple[tuple[int, int, float, float], ...]:
    wanted = REACH * max(grid.dy, grid.dz) if radius is None else radius
    disc = _disc(grid.dy, grid.dz, wanted)
    if len(disc) < 4:
        raise ValueError(f"a window of radius {wanted:g} m holds fewer than 4 points beside its centre")
    return disc


def _padded(field: Array, rows: int, columns: int) -> Array:
    pad = [(0, 0)] * (field.ndim - 2) + [(rows, rows), (columns, columns)]
    return np.pad(np.asarray(field, float), pad, mode="edge")


def gamma1(v: Array, w: Array, grid: UniformGrid, *, radius: float | None = None) -> Array:
    """Γ₁: mean sine of the angle between the arm PM and the velocity at M.

    Parameters
    ----------
    v, w : ndarray, shape (..., nz, ny)
        Crossflow, m/s, in the frame in which the vortices stand still.
    grid : UniformGrid
        The grid.
    radius : float, optional
        Radius of the window around P, m; three spacings unless given.

    Returns
    -------
    ndarray, shape (..., nz, ny)
        Between −1 and 1; ±1 at the centre of an axisymmetric vortex. The window's values are repeated beyond the
        plane's edge.

    Raises
    ------
    ValueError
        If the window holds fewer than four points beside its centre.

    Notes
    -----
    Γ₁(P) = (1/N) Σ_M [PM × U_M]_x / (|PM| |U_M|), where U_M = 0 counts as zero.
    """
    disc = _window(grid, radius)
    columns, rows = max(d[0] for d in disc), max(d[1] for d in disc)
    speed = np.hypot(v, w)
    safe = np.where(speed > 0, speed, 1.0)
    direction_y, direction_z = _padded(v / safe, rows, columns), _padded(w / safe, rows, columns)
    out = np.zeros(np.shape(v))
    nz, ny = grid.shape
    for i, j, arm_y, arm_z in disc:
        window = (..., slice(rows + j, rows + j + nz), slice(columns + i, columns + i + ny))
        out += arm_y * direction_z[window]
        out -= arm_z * direction_y[window]
    return out / len(disc)


def gamma2(v: Array, w: Array, grid: UniformGrid, *, radius: float | None = None) -> Array:
    """Γ₂: as Γ₁, with the window's mean velocity taken off first.

    Parameters
    ----------
    v, w : ndarray, shape (..., nz, ny)
        Crossflow, m/s; a uniform velocity does not matter.
    grid : UniformGrid
        The grid.
    radius : float, optional
        Radius of the window around P, m; three spacings unless given.

    Returns
    -------
    ndarray, shape (..., nz, ny)
        Between −1 and 1. |Γ₂| > 2/π where rotation outweighs strain, 2/π in a parallel shear layer, ±1 at the centre of
        an axisymmetric vortex.

    Raises
    ------
    ValueError
        If the window holds fewer than four points beside its centre.

    Notes
    -----
    Γ₂(P) = (1/N) Σ_M [PM × (U_M − Ū_P)]_x / (|PM| |U_M − Ū_P|), Ū_P the mean over the window.
    """
    disc = _window(grid, radius)
    columns, rows = max(d[0] for d in disc), max(d[1] for d in disc)
    padded_v, padded_w = _padded(v, rows, columns), _padded(w, rows, columns)
    nz, ny = grid.shape
    windows = [(..., slice(rows + j, rows + j + nz), slice(columns + i, columns + i + ny)) for i, j, _, _ in disc]
    mean_v, mean_w = np.array(v, float), np.array(w, float)
    for window in windows:
        mean_v += padded_v[window]
        mean_w += padded_w[window]
    mean_v /= len(disc) + 1
    mean_w /= len(disc) + 1
    # A difference at the level of rounding has no direction.
    floor = (1e-13 * (np.abs(v).max(initial=0.0) + np.abs(w).max(initial=0.0))) ** 2 + np.finfo(float).tiny
    out = np.zeros(np.shape(v))
    for (_, _, arm_y, arm_z), window in zip(disc, windows, strict=True):
        relative_v = padded_v[window] - mean_v
        relative_w = padded_w[window] - mean_w
        square = relative_v * relative_v
        square += relative_w * relative_w
        square += floor
        np.sqrt(square, out=square)
        relative_w *= arm_y
        relative_v *= arm_z
        relative_w -= relative_v
        relative_w /= square
        out += relative_w
    return out / len(disc)


def swirling_strength(v: Array, w: Array, grid: UniformGrid) -> Array:
    """Signed swirling strength of the crossflow: the turning rate where particles spiral, zero elsewhere.

    Parameters
    ----------
    v, w : ndarray, shape (..., nz, ny)
        Crossflow, m/s.
    grid : UniformGrid
        The grid.

    Returns
    -------
    ndarray, shape (..., nz, ny)
        Imaginary part of the velocity gradient's complex eigenvalues with the sign of the vorticity, rad/s:
        √((ξ/2)² − s²), s the in-plane strain rate; ξ/2 in solid-body rotation.
    """
    v_y, v_z, w_y, w_z = ddy(v, grid), ddz(v, grid), ddy(w, grid), ddz(w, grid)
    half_vorticity = (w_y - v_z) / 2
    strain_squared = ((v_y - w_z) / 2) ** 2 + ((w_y + v_z) / 2) ** 2
    result: Array = np.sign(half_vorticity) * np.sqrt(np.maximum(half_vorticity**2 - strain_squared, 0.0))
    return result
