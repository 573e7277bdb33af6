"""What the bound vortex and the finite length of the trailing legs add to the crossflow at a station.

A plane far behind a wing sees two-dimensional crossflow; a plane at distance X behind the bound line sees legs that
start there, and the bound line itself. The difference is smooth and follows from the measured vorticity alone:

    legs:   the two-dimensional velocity of each element times ½(X/√(X² + r²) − 1),
    bound:  w = −(X/4π) ∬ B dA' / (X² + r²)^{3/2},   B(y, z) = −∫_{port}^{y} ξ dy',

    axial:  u' = (1/4π) ∬ B (z − z') dA' / (X² + r²)^{3/2},

where every leg is joined along y at its own height. It is what the energy form and the wake line are expected to read
above the vorticity form.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy import fft

from wakeledger.core.grid import Array, UniformGrid


class NearField(NamedTuple):
    """What the bound vortex and the legs' beginning add to the velocity, m/s, each of shape (nz, ny)."""

    v: Array
    w: Array
    u: Array


def near_field(vorticity: Array, grid: UniformGrid, *, distance: float) -> NearField:
    """Velocity at the plane beyond that of infinitely long trailing vortices.

    Parameters
    ----------
    vorticity : ndarray, shape (nz, ny)
        Axial vorticity of the wake, s⁻¹, zero outside it.
    grid : UniformGrid
        The grid.
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

    Notes
    -----
    A net circulation of a row of the grid is joined at the wake's centre, where a vertical bound vortex then adds to v.
    """
    if distance <= 0:
        raise ValueError(f"the plane must lie behind the bound line, {distance} m was given")
    nz, ny = grid.shape
    mz, my = fft.next_fast_len(2 * nz, real=True), fft.next_fast_len(2 * ny, real=True)
    dz = grid.dz * np.concatenate([np.arange(mz // 2 + 1), np.arange(mz // 2 + 1 - mz, 0)])
    dy = grid.dy * np.concatenate([np.arange(my // 2 + 1), np.arange(my // 2 + 1 - my, 0)])
    yy, zz = dy[None, :], dz[:, None]
    reach = np.sqrt(distance**2 + yy**2 + zz**2)
    # ½(X/R − 1)/(2πr²) without the cancellation at small r
    shortfall = -1 / (4 * np.pi * reach * (reach + distance))
    bound_kernel = distance / (4 * np.pi * reach**3)

    def transform(field: Array) -> Array:
        spectrum: Array = fft.rfft2(field, s=(mz, my))
        return spectrum

    def window(spectrum: Array) -> Array:
        solution: Array = fft.irfft2(spectrum, s=(mz, my))[:nz, :ny] * grid.cell_area
        return solution

    source = transform(vorticity)
    dv = window(source * transform(-zz * shortfall))
    dw = window(source * transform(yy * shortfall))
    bound_y, bound_z = bound_circulation(vorticity, grid)
    kernel = transform(bound_kernel)
    along_y = transform(bound_y)
    dw -= window(along_y * kernel)
    du = window(along_y * transform(zz / (4 * np.pi * reach**3)))
    if bound_z is not None:
        along_z = transform(bound_z)
        dv += window(along_z * kernel)
        du -= window(along_z * transform(yy / (4 * np.pi * reach**3)))
    return NearField(dv, dw, du)


def bound_circulation(vorticity: Array, grid: UniformGrid) -> tuple[Array, Array | None]:
    """Bound vorticity along y and along z, s⁻¹, that joins the legs in the plane of the bound line."""
    # Half of a cell's own vorticity lies to port of its centre.
    along_y = -(np.cumsum(vorticity, axis=1) - 0.5 * vorticity) * grid.dy
    row = vorticity.sum(axis=1) * grid.dy
    if not np.abs(row).max() > 1e-12 * np.abs(vorticity).max() * grid.dy * grid.ny:
        return along_y, None
    weight = np.abs(vorticity).sum(axis=0)
    centre = round(float(weight @ np.arange(grid.ny)) / max(float(weight.sum()), 1e-300))
    along_y[:, centre:] += row[:, None]
    along_z = np.zeros_like(vorticity)
    # The row's surplus climbs (or falls) along the centre column to the rows that lack it.
    along_z[:, centre] = -(np.cumsum(row) - 0.5 * row) * grid.dz / grid.dy
    return along_y, along_z
