"""What the undisturbed flow outside the wake says about the survey's zeros.

Outside the wake the total pressure must be the stream's, and the crossflow must be that of the wake's own vorticity.
What is left over on average is a zero error of the total pressure and a flow-angle offset of the survey.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.differences import ddy, ddz
from wakeledger.physics.fields.wake_region import Mask

#: Outer flow below this share of the window cannot give a zero.
LEAST_SHARE = 0.1
_BLOCKS = 4


@dataclass(frozen=True)
class OuterFlow:
    """Zeros found in the outer flow.

    Attributes
    ----------
    share : float
        Outer flow's share of the window.
    loss_zero, loss_zero_uncertainty : float
        Mean loss outside the wake and its standard uncertainty from the scatter between blocks of the window, Pa.
    v_offset, w_offset : float
        Mean crossflow not explained by the wake's vorticity, m/s.
    offset_uncertainty : float
        Standard uncertainty of each offset from the scatter between blocks, m/s.
    swirl_uncertainty : float
        Standard uncertainty of the stream's rotation, s⁻¹; NaN where it was not looked for.
    """

    share: float
    loss_zero: float
    loss_zero_uncertainty: float
    v_offset: float
    w_offset: float
    offset_uncertainty: float
    swirl_uncertainty: float = float("nan")


def loss_zero(loss: Array, mask: Mask) -> float:
    """Mean loss outside the wake, Pa; 0 where too little of the window is outside."""
    outer = ~mask
    if np.count_nonzero(outer) < LEAST_SHARE * outer.size:
        return 0.0
    return float(loss[outer].mean())


def crossflow_offset(v: Array, w: Array, psi: Array, near_field: tuple[Array, ...], outer: Array) -> Array:
    """Mean crossflow left over outside the wake, m/s.

    Parameters
    ----------
    v, w : ndarray, shape (..., nz, ny)
        Measured crossflow, m/s.
    psi : ndarray, shape (2, ..., nz, ny)
        Crossflow of the wake's own vorticity, (∂ψ/∂z, −∂ψ/∂y), m/s.
    near_field : NearField, or any tuple of two or more ndarrays of shape (nz, ny)
        What the bound vortex adds, m/s.
    outer : ndarray, shape (nz, ny)
        Weight of each place, 1 outside the wake.

    Returns
    -------
    ndarray, shape (2, ...)
        v and w offsets.
    """
    weight = outer / outer.sum()
    left_over = np.stack([v - near_field[0], w - near_field[1]]) - psi
    result: Array = np.einsum("...zy,zy->...", left_over, weight)
    return result


def stream_swirl(left_over: Array, turned: Array, grid: UniformGrid, outer: Array) -> float:
    """Solid rotation of the stream that fits the crossflow left over outside the wake, s⁻¹.

    Parameters
    ----------
    left_over : ndarray, shape (2, nz, ny)
        Measured crossflow less that of the wake's vorticity, m/s.
    turned : ndarray, shape (2, nz, ny)
        Crossflow that the vorticity of a unit rotation inside the wake region induces, which the wake's own holds, m.
    grid : UniformGrid
        The grid.
    outer : ndarray, shape (nz, ny)
        Weight of each place, 1 outside the wake.

    Returns
    -------
    float
        ω of v = v0 − ωz, w = w0 + ωy by least squares, counter-clockwise seen from behind; 0 without outer flow.
    """
    if np.count_nonzero(outer) < LEAST_SHARE * outer.size:
        return 0.0
    weight = outer / outer.sum()
    yy, zz = grid.mesh()
    shape = np.stack([-zz, yy]) - turned
    shape = shape - np.einsum("kzy,zy->k", shape, weight)[:, None, None]
    return float(np.sum(weight * shape * left_over) / np.sum(weight * shape**2))


def swirl_scatter(left_over: Array, turned: Array, grid: UniformGrid, outer: Array) -> float:
    """Standard uncertainty of `stream_swirl` by leaving out one block of the window after the other, s⁻¹."""
    found = []
    for rows in np.array_split(np.arange(grid.nz), _BLOCKS):
        for columns in np.array_split(np.arange(grid.ny), _BLOCKS):
            kept = outer.copy()
            kept[np.ix_(rows, columns)] = 0.0
            found.append(stream_swirl(left_over, turned, grid, kept))
    count = len(found)
    return float(np.sqrt((count - 1) / count * np.sum((np.array(found) - np.mean(found)) ** 2)))


def induced_crossflow(psi: Array, grid: UniformGrid) -> Array:
    """Crossflow (∂ψ/∂z, −∂ψ/∂y) of a stream function, stacked on a new first axis, m/s."""
    return np.stack([ddz(psi, grid), -ddy(psi, grid)])


def outer_flow(
    loss: Array,
    v: Array,
    w: Array,
    psi: Array,
    grid: UniformGrid,
    *,
    mask: Mask,
    near_field: tuple[Array, ...],
    turned: Array | None = None,
) -> OuterFlow:
    """Zeros of the survey from the flow outside the wake.

    Parameters
    ----------
    loss : ndarray, shape (nz, ny)
        H∞ − H, Pa.
    v, w : ndarray, shape (nz, ny)
        Crossflow, m/s.
    psi : ndarray, shape (nz, ny)
        Stream function of the wake's vorticity, m²/s.
    grid : UniformGrid
        The grid.
    mask : ndarray of bool, shape (nz, ny)
        The wake region.
    near_field : NearField, or any tuple of two or more ndarrays of shape (nz, ny)
        Crossflow that the bound vortex adds, m/s (`wakeledger.physics.fields.lifting_line`).
    turned : ndarray, shape (2, nz, ny), optional
        As in `stream_swirl`, where the stream may rotate.

    Returns
    -------
    OuterFlow
        Zero offsets with share below `LEAST_SHARE` where there is too little outer flow.
    """
    outer = (~mask).astype(float)
    share = float(outer.mean())
    if share < LEAST_SHARE:
        return OuterFlow(share, 0.0, np.nan, 0.0, 0.0, np.nan)
    near = near_field
    own = induced_crossflow(psi, grid)
    v_offset, w_offset = crossflow_offset(v, w, own, near, outer)
    left_v, left_w = v - near[0] - own[0], w - near[1] - own[1]
    scatter = np.hypot(_block_scatter(left_v, outer), _block_scatter(left_w, outer)) / np.sqrt(2)
    return OuterFlow(
        share,
        loss_zero(loss, mask),
        _block_scatter(loss, outer),
        float(v_offset),
        float(w_offset),
        float(scatter),
        float("nan") if turned is None else swirl_scatter(np.stack([left_v, left_w]), turned, grid, outer),
    )


def _block_scatter(field: Array, outer: Array) -> float:
    """Standard uncertainty of the outer mean from the scatter of block means, slow drifts included."""
    means = []
    for rows in np.array_split(np.arange(field.shape[0]), _BLOCKS):
        for columns in np.array_split(np.arange(field.shape[1]), _BLOCKS):
            weight = outer[np.ix_(rows, columns)]
            if weight.sum() > 0.3 * weight.size:
                means.append(float((field[np.ix_(rows, columns)] * weight).sum() / weight.sum()))
    if len(means) < 3:
        return float("nan")
    return float(np.std(means, ddof=1) / np.sqrt(len(means)))
