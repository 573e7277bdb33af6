"""The reference level of the total pressure, and what its wander is worth over the region that is integrated.

Outside the wake the loss H∞ − H should be zero. In a computed plane, and in many tunnels, it wanders slowly instead:
its errors are alike over large patches, so that the mean of the outer flow is far less certain than its points would
make it, and the wander inside the wake, which nobody can see there, is no longer the mean of that outside. Both act on

    ∬_W [(H∞ − H) − zero] dA,     zero = mean outside.

The weights of the loss in it add up to zero, so that its variance follows from half the mean square difference between
places at a distance r, γ(r), which the outer flow shows whether or not a patch is larger than the window:

    Var = −ΣΣ c_i c_j γ(r_ij),     γ(r) = n² + s²[1 − exp(−(r/L)²/2)]  for r > 0.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft, ndimage, special

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.outer_flow import LEAST_SHARE
from wakeledger.physics.fields.wake_region import Mask

#: Correlation lengths tried, from one cell to twice the window's diagonal.
_LENGTHS = 60
#: Classes of distance, from one cell to this part of the window's diagonal.
_CLASSES = 24
_FARTHEST = 0.5
#: Places along each axis at which the variance of the integral is summed.
_FINEST = 160
#: Coverage factor that the uncertainties are made for, and the probability.
_COVERAGE = 2.0
_PROBABILITY = 0.954500
#: Blocks along each axis whose means tell wander from noise, the share of one that must be outside, the probability.
_BLOCKS, _LEAST_OF_BLOCK, _SEEN = 4, 0.3, 0.95
#: Least number of independent patches that is believed.
_FEWEST = 2.0


@dataclass(frozen=True)
class LossLevel:
    """Level of the loss in the outer flow; arrays of the loss's leading shape (...).

    Attributes
    ----------
    zero : ndarray
        Mean loss of the outer flow, Pa.
    zero_uncertainty : ndarray
        Its standard uncertainty as the level inside the region, Pa, to act on the region's whole area. The noise of the
        region's own points is not in it: that is a source of its own.
    integral_uncertainty : ndarray
        Standard uncertainty of the loss integrated over the region, counted from the zero, N: the zero's own, the
        wander inside the region, covariance included, and the noise of its points. Twice of it covers 95 %, few patches
        taken into account. NaN where too little of the window is outside.
    wander, noise : ndarray
        Standard deviation of the part that is alike over patches, and of the part independent from cell to cell, Pa.
    correlation_length : ndarray
        Length L of the patches, m.
    patches : ndarray
        Number of independent patches in the outer flow; never below 2.
    reason : str or None
        Why the uncertainties are unknown.
    """

    zero: Array
    zero_uncertainty: Array
    integral_uncertainty: Array
    wander: Array
    noise: Array
    correlation_length: Array
    patches: Array
    reason: str | None = None


def beyond(mask: Mask, grid: UniformGrid, distance: float) -> Mask:
    """Places further than a distance, m, from a region, shape (nz, ny).

    A computed wake often has a weak, broad loss about it that is no part of the stream: where the level is taken from
    all of the outer flow, that loss is taken out of the wake as well.
    """
    if not mask.any():
        return np.ones(mask.shape, dtype=bool)
    nearest: Array = ndimage.distance_transform_edt(~mask, sampling=(grid.dz, grid.dy))
    far: Mask = nearest > distance
    return far


def loss_level(
    loss: Array, grid: UniformGrid, *, mask: Mask, outer: Mask | None = None, noise_known: bool = False
) -> LossLevel:
    """Zero of the loss in the outer flow, with an uncertainty that acts on the integrated area.

    Parameters
    ----------
    loss : ndarray, shape (..., nz, ny)
        H∞ − H, Pa.
    grid : UniformGrid
        The grid.
    mask : ndarray of bool, shape (nz, ny)
        The region over which the loss is integrated.
    outer : ndarray of bool, shape (nz, ny), optional
        Where the level is taken (`beyond`); all that is outside the region unless given.
    noise_known : bool
        Whether the points' own noise is a source of uncertainty of its own: the zero then holds the wander's part only.

    Returns
    -------
    LossLevel

    Raises
    ------
    ValueError
        If the level is to be taken inside the region.

    Notes
    -----
    γ is found from all pairs of outer cells up to half the window's diagonal apart. Its own uncertainty is that of
    two values for each patch of area πL² in the outer flow, by Student's distribution.
    """
    loss = np.asarray(loss, float)
    outer = ~mask if outer is None else outer
    if (outer & mask).any():
        raise ValueError("the level is to be taken outside the region over which the loss is integrated")
    lead = loss.shape[:-2]
    if np.count_nonzero(outer) < LEAST_SHARE * outer.size:
        unknown = np.full(lead, np.nan)
        reason = f"the level would rest on less than {100 * LEAST_SHARE:g} % of the window"
        return LossLevel(np.zeros(lead), unknown, unknown, unknown, unknown, unknown, unknown, reason)
    zero = np.where(outer, loss, 0.0).sum(axis=(-2, -1)) / np.count_nonzero(outer)
    fields = np.where(outer, loss - zero[..., None, None], 0.0).reshape(-1, *grid.shape)
    distance, half_square, pairs = _variogram(fields, outer, grid)
    extent = float(np.hypot(grid.dy * grid.ny, grid.dz * grid.nz))
    lengths = np.geomspace(max(grid.dy, grid.dz), 2 * extent, _LENGTHS)
    noise2, wander2, index = _fitted(distance, half_square, pairs, lengths)
    length = lengths[index]
    smooth, white = _of_the_integral(mask, outer, grid, lengths)
    patches = np.maximum(np.count_nonzero(outer) * grid.cell_area / (np.pi * length**2), _FEWEST)
    factor = special.stdtrit(2 * patches, (1 + _PROBABILITY) / 2) / _COVERAGE
    integral = factor * np.sqrt(wander2 * smooth[index] + noise2 * white)
    inside, outside = np.count_nonzero(mask), np.count_nonzero(outer)
    area = inside * grid.cell_area
    points = noise2 * white * inside / (inside + outside)
    if noise_known:
        # White noise alone fits with a little wander, too: it counts where blocks of the window show it.
        points = np.zeros_like(points)
        wander2 = np.where(_wanders(fields, outer, noise2), wander2, 0.0)
    level = factor * np.sqrt(wander2 * smooth[index] + points)

    def shaped(array: Array) -> Array:
        return np.reshape(array, lead)

    return LossLevel(
        zero=zero,
        zero_uncertainty=shaped(level / area if area else np.zeros(level.shape)),
        integral_uncertainty=shaped(integral),
        wander=shaped(np.sqrt(wander2)),
        noise=shaped(np.sqrt(noise2)),
        correlation_length=shaped(length),
        patches=shaped(patches),
    )


def _wanders(fields: Array, outer: Mask, noise2: Array) -> NDArray[np.bool_]:
    """Whether means of blocks of the outer flow differ by more than its noise explains, shape (fields,)."""
    chi_square, blocks = np.zeros(fields.shape[0]), 0
    for rows in np.array_split(np.arange(outer.shape[0]), _BLOCKS):
        for columns in np.array_split(np.arange(outer.shape[1]), _BLOCKS):
            block = np.ix_(rows, columns)
            count = np.count_nonzero(outer[block])
            if count > _LEAST_OF_BLOCK * outer[block].size:
                # The fields are zero inside the region and have mean zero outside.
                chi_square += fields[:, rows[:, None], columns].sum(axis=(1, 2)) ** 2 / count
                blocks += 1
    if blocks < 3:
        return np.ones(fields.shape[0], dtype=bool)
    limit = special.chdtri(blocks - 1, 1 - _SEEN)
    found: NDArray[np.bool_] = chi_square > limit * np.maximum(noise2, 1e-300)
    return found


def _variogram(fields: Array, outer: Mask, grid: UniformGrid) -> tuple[Array, Array, Array]:
    """Half the mean square difference by distance: mean distances (k,), values (fields, k), pairs (k,)."""
    shape = [fft.next_fast_len(2 * n, real=True) for n in grid.shape]

    def transform(array: Array | Mask) -> Array:
        spectrum: Array = fft.rfft2(np.asarray(array, float), s=shape)
        return spectrum

    there = transform(outer)
    pairs = np.rint(fft.irfft2(np.abs(there) ** 2, s=shape))
    lag_z, lag_y = (fft.fftfreq(n, 1 / n) * step for n, step in zip(shape, (grid.dz, grid.dy), strict=True))
    r = np.hypot(lag_z[:, None], lag_y)
    farthest = _FARTHEST * float(np.hypot(grid.dy * grid.ny, grid.dz * grid.nz))
    edges = np.geomspace(0.999 * min(grid.dy, grid.dz), farthest, _CLASSES + 1)
    sorted_in = np.where(pairs > 0.5, np.digitize(r, edges), 0).ravel()
    count = np.bincount(sorted_in, weights=pairs.ravel(), minlength=_CLASSES + 2)[1:-1]
    full = count > 0
    distance = np.bincount(sorted_in, weights=(pairs * r).ravel(), minlength=_CLASSES + 2)[1:-1][full] / count[full]
    values = []
    for field in fields:
        # Σ m m' (f − f')²/2 over all pairs at a lag, m being 1 outside the region.
        square, plain = transform(field**2), transform(field)
        sums = fft.irfft2((square * there.conj()).real - np.abs(plain) ** 2, s=shape)
        values.append(np.bincount(sorted_in, weights=sums.ravel(), minlength=_CLASSES + 2)[1:-1][full] / count[full])
    half_square: Array = np.maximum(np.array(values), 0.0)
    return distance, half_square, count[full].astype(float)


def _fitted(distance: Array, values: Array, pairs: Array, lengths: Array) -> tuple[Array, Array, NDArray[np.intp]]:
    """Noise and wander variance of each field, and the index of its length, by weighted least squares."""
    best = np.full(values.shape[0], np.inf)
    noise, wander = np.zeros(values.shape[0]), np.zeros(values.shape[0])
    index = np.zeros(values.shape[0], dtype=np.intp)
    # A class's scatter is as its value; far classes hold many pairs of few patches, so pairs count by their root.
    largest = values.max(axis=1, keepdims=True)
    scale = np.where(largest > 0, largest, 1.0)
    values = values / scale
    weight = np.sqrt(pairs) / np.maximum(values, 1e-3) ** 2
    for k, length in enumerate(lengths):
        rise = -np.expm1(-0.5 * (distance / length) ** 2)
        w, wr, wrr = weight.sum(axis=1), weight @ rise, weight @ rise**2
        wv, wrv = (weight * values).sum(axis=1), (weight * values) @ rise
        determinant = w * wrr - wr**2
        flat = determinant <= 1e-12 * w * wrr
        safe = np.where(flat, 1.0, determinant)
        a, b = (wrr * wv - wr * wrv) / safe, (w * wrv - wr * wv) / safe
        a, b = np.where(flat, wv / w, a), np.where(flat, 0.0, b)
        # Neither variance is negative: the one that would be is left out.
        a, b = np.where(b < 0, wv / w, a), np.where(a < 0, wrv / wrr, b)
        a, b = np.maximum(a, 0.0), np.where((wv / w == a) & (b < 0), 0.0, np.maximum(b, 0.0))
        misfit = np.sum(weight * (values - a[:, None] - b[:, None] * rise) ** 2, axis=1)
        better = misfit < best
        best[better], noise[better], wander[better], index[better] = misfit[better], a[better], b[better], k
    return noise * scale[:, 0], wander * scale[:, 0], index


def _of_the_integral(mask: Mask, outer: Mask, grid: UniformGrid, lengths: Array) -> tuple[Array, float]:
    """Variance of ∬_W (loss − zero) dA for unit wander of each length, and for unit noise, m⁴."""
    inside, outside = np.count_nonzero(mask), np.count_nonzero(outer)
    weights = (mask - inside / outside * outer) * grid.cell_area
    white = float(np.sum(weights**2))
    places = []
    for axis, x in enumerate((grid.z, grid.y)):
        starts = np.unique(np.linspace(0, x.size, min(x.size, _FINEST), endpoint=False).astype(np.intp))
        weights = np.add.reduceat(weights, starts, axis=axis)
        places.append(np.add.reduceat(x, starts) / np.diff(np.append(starts, x.size)))
    smooth = []
    for length in lengths:
        along_z, along_y = (np.exp(-0.5 * ((x[:, None] - x) / length) ** 2) for x in places)
        smooth.append(max(float(np.sum(weights * (along_z @ weights @ along_y))), 0.0))
    return np.array(smooth), white
