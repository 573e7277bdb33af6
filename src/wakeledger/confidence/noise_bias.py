"""What noise adds, on average, to a quadratic form of the data: exact linear algebra, no simulation."""

from __future__ import annotations

from collections.abc import Callable
from typing import TypeAlias

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray
from scipy import sparse

from wakeledger.core.grid import Array

Operator: TypeAlias = Array | sparse.csr_array
Covariance: TypeAlias = Array | sparse.csr_array
Kernel: TypeAlias = Array | Callable[[NDArray[np.int64], NDArray[np.int64]], Array]

_NEGLIGIBLE = 1e-10
_ROUNDING = 1e-17
_LOW_RANK = 8
# Columns worked on at once, of which each meets only those within the covariance's reach.
_COLUMNS = 64


def quadratic_noise_bias(
    left_z: Operator,
    left_y: Operator,
    kernel: Kernel,
    mask: Array,
    variance: float | Array,
    *,
    correlation: tuple[Array | None, Array | None] = (None, None),
) -> float:
    """Expected value that the noise of one data field adds to a quadratic form.

    Parameters
    ----------
    left_z : ndarray or sparse array, shape (nz, nz_raw)
        Operator along z from the data to the field that enters the form (a derivative, an interpolation, the identity).
    left_y : ndarray or sparse array, shape (ny, ny_raw)
        Operator along y.
    kernel : ndarray, shape (2 nz - 1, 2 ny - 1), or callable
        Weights g at the offsets (dz, dy) in cells, g(0, 0) in the middle; a callable takes two integer arrays that
        broadcast and gives the weights. Quadrature weights belong in it.
    mask : ndarray, shape (nz, ny)
        Weight of each point: 1 inside the region, 0 outside, or anything between.
    variance : float or ndarray, shape (nz_raw, ny_raw)
        Variance of the noise of the data.
    correlation : tuple of (ndarray or None)
        Correlation matrices of the noise along z, (nz_raw, nz_raw), and along y, (ny_raw, ny_raw), whose product is the
        correlation of two data points; None where they are independent. `squared_exponential` gives one; a matrix of
        ones along y is one error per row of constant z.

    Returns
    -------
    float
        The expectation, in the unit of the form. Fields with independent noise add.

    Raises
    ------
    ValueError
        If the shapes do not fit together.

    Notes
    -----
    With the form Q(f) = ½ Σ_ij M_i f_i g(i - j) f_j M_j and f = R_z n R_yᵀ the noise n adds
    E[Q] = ½ Σ_ij g(i - j) C_ij M_i M_j, C = σ² (R_z K_z R_zᵀ) ⊗ (R_y K_y R_yᵀ), since the noise has no mean and the
    mixed terms vanish. The sum runs over the offsets at which the covariance along the narrower axis is not negligible.
    A variance that differs from point to point is exact for independent noise; with correlation it is taken as slowly
    varying: √(σ²_i σ²_j) at the two points of the form, each a mean weighted with the operators' squares.
    """
    onto_z, onto_y = (sparse.csr_array(left, dtype=float) for left in (left_z, left_y))
    mask, spread = np.asarray(mask, dtype=float), np.asarray(variance, dtype=float)
    nz, ny = mask.shape
    raw = onto_z.shape[1], onto_y.shape[1]
    if (onto_z.shape[0], onto_y.shape[0]) != mask.shape:
        raise ValueError(f"the operators give shape {(onto_z.shape[0], onto_y.shape[0])}; the mask has {mask.shape}")
    if spread.ndim and spread.shape != raw:
        raise ValueError(f"variance has shape {spread.shape}; the data have {raw}")
    weights = _offset_weights(kernel, nz, ny)
    if not mask.any():
        return 0.0
    # Only the box around the region takes part.
    box = _box(mask)
    mask, onto_z, onto_y = mask[box], onto_z[box[0]], onto_y[box[1]]
    reach_z, reach_y = mask.shape[0] - 1, mask.shape[1] - 1
    weights = weights[nz - 1 - reach_z : nz + reach_z, ny - 1 - reach_y : ny + reach_y]
    if spread.ndim and spread.min() == spread.max():
        spread = spread[0, 0]
    if spread.ndim:
        if all(matrix is None for matrix in correlation):
            return 0.5 * _independent(onto_z, onto_y, weights, mask, spread)
        square_z, square_y = onto_z.power(2), onto_y.power(2)
        total = np.outer(square_z.sum(axis=1), square_y.sum(axis=1))
        local = square_z @ spread @ square_y.T
        mask = mask * np.sqrt(np.divide(local, total, out=np.zeros_like(local), where=total > 0))
        spread = np.array(1.0)
    covariance_z, covariance_y = (
        _product(left) if matrix is None else np.asarray(left @ matrix @ left.T)
        for left, matrix in zip((onto_z, onto_y), correlation, strict=True)
    )
    return 0.5 * float(spread) * _separable(covariance_z, covariance_y, weights, mask)


def modal_noise_bias(
    left_z: Operator,
    left_y: Operator,
    strengths: Array,
    modes: Array,
    mask: Array,
    variance: float | Array,
    *,
    correlation: tuple[Array | None, Array | None] = (None, None),
) -> float:
    """Expected value that the noise of one data field adds to a quadratic form given as a sum of few squares.

    Parameters
    ----------
    left_z, left_y, mask, variance, correlation
        As in `quadratic_noise_bias`.
    strengths : ndarray, shape (r,)
        Weight λ of each square.
    modes : ndarray, shape (r, nz, ny)
        Weights φ of the field in each.

    Returns
    -------
    float
        The expectation, in the unit of the form.

    Raises
    ------
    ValueError
        If the shapes do not fit together.

    Notes
    -----
    Q(f) = ½ Σ_r λ_r (Σ_i M_i φ_r(i) f_i)² and f = R_z n R_yᵀ: each square gains the variance of one linear functional
    of the data, whose weights are R_zᵀ (M φ_r) R_y.
    """
    onto_z, onto_y = (sparse.csr_array(left, dtype=float) for left in (left_z, left_y))
    spread = np.asarray(variance, dtype=float)
    if (onto_z.shape[0], onto_y.shape[0]) != mask.shape:
        raise ValueError(f"the operators give shape {(onto_z.shape[0], onto_y.shape[0])}; the mask has {mask.shape}")
    if modes.shape[1:] != mask.shape:
        raise ValueError(f"modes have shape {modes.shape[1:]}; the mask has {mask.shape}")
    if strengths.shape != modes.shape[:1]:
        raise ValueError(f"{strengths.size} strengths do not fit {len(modes)} modes")
    raw = onto_z.shape[1], onto_y.shape[1]
    if spread.ndim and spread.shape != raw:
        raise ValueError(f"variance has shape {spread.shape}; the data have {raw}")
    box = _box(mask)
    mask, modes, onto_z, onto_y = mask[box], modes[:, *box], onto_z[box[0]], onto_y[box[1]]
    deviation = np.sqrt(spread)
    along_z, along_y = correlation
    total = 0.0
    for strength, mode in zip(strengths, modes, strict=True):
        weights = deviation * _pulled_back(mask * mode, onto_z, onto_y)
        spreading = weights if along_z is None else along_z @ weights
        if along_y is not None:
            spreading = spreading @ along_y
        total += float(strength) * float(np.vdot(weights, spreading))
    return 0.5 * total


def _box(mask: Array) -> tuple[slice, slice]:
    """Rows and columns from the first to the last that the region touches."""
    rows, columns = np.flatnonzero(mask.any(axis=1)), np.flatnonzero(mask.any(axis=0))
    if not rows.size:
        return slice(0, 0), slice(0, 0)
    return slice(int(rows[0]), int(rows[-1]) + 1), slice(int(columns[0]), int(columns[-1]) + 1)


def _pulled_back(field: Array, onto_z: sparse.csr_array, onto_y: sparse.csr_array) -> Array:
    """Weights of the data in a weighted sum of the field, R_zᵀ f R_y."""
    weights: Array = onto_z.T @ field
    # Few of the data's rows hold any weight where the box is small.
    held = np.flatnonzero(weights.any(axis=1))
    result = np.zeros((weights.shape[0], onto_y.shape[1]))
    result[held] = (onto_y.T @ weights[held].T).T
    return result


def _product(left: sparse.csr_array, variance: Array | None = None) -> sparse.csr_array:
    """Covariance of a linear map of independent noise."""
    inner = left if variance is None else left * variance[None, :]
    return sparse.csr_array(inner @ left.T)


def _offset_weights(kernel: Kernel, nz: int, ny: int) -> Array:
    if callable(kernel):
        kernel = kernel(np.arange(1 - nz, nz)[:, None], np.arange(1 - ny, ny)[None, :])
    weights = np.asarray(kernel, dtype=float)
    if weights.shape != (2 * nz - 1, 2 * ny - 1):
        raise ValueError(f"kernel has shape {weights.shape}; {(2 * nz - 1, 2 * ny - 1)} offsets are needed")
    return weights


def _band(covariance: Covariance, least: float = _NEGLIGIBLE) -> int:
    """Largest offset at which a covariance matrix is not negligible."""
    i, j = (abs(covariance) > least * abs(covariance).max()).nonzero()
    return int(np.abs(i - j).max()) if i.size else 0


def _separable(covariance_z: Covariance, covariance_y: Covariance, weights: Array, mask: Array) -> float:
    """Σ g C M M for a covariance that is a product of one symmetric matrix per axis."""
    band_z, band_y = _band(covariance_z), _band(covariance_y)
    if band_y < band_z:
        covariance_z, covariance_y, weights, mask = covariance_y, covariance_z, weights.T, mask.T
        band_z = band_y
    nz, ny = mask.shape
    reach_y = _band(covariance_y, _ROUNDING)
    covariance_z, covariance_y = (
        one.toarray() if isinstance(one, sparse.csr_array) else one for one in (covariance_z, covariance_y)
    )
    total = 0.0
    for offset in range(band_z + 1):
        forward, backward = _toeplitz(weights[nz - 1 + offset], ny), _toeplitz(weights[nz - 1 - offset], ny).T
        left = mask[: nz - offset] * np.diagonal(covariance_z, offset)[:, None]
        for start in range(0, ny, _COLUMNS):
            columns = slice(start, min(start + _COLUMNS, ny))
            reach = slice(max(start - reach_y, 0), columns.stop + reach_y)
            coupling = forward[reach, columns]
            if offset:
                coupling = coupling + backward[reach, columns]
            coupling = coupling * covariance_y[reach, columns]
            total += float(np.vdot(left[:, reach] @ coupling, mask[offset:, columns]))
    return total


def _toeplitz(row: Array, ny: int) -> Array:
    """Matrix of the weights at j' - j, from the row of weights at all offsets."""
    return sliding_window_view(row, ny)[::-1]


def _independent(
    left_z: sparse.csr_array, left_y: sparse.csr_array, weights: Array, mask: Array, variance: Array
) -> float:
    """Σ g C M M for independent noise whose variance differs from point to point."""
    along_z, sizes, along_y = np.linalg.svd(variance, full_matrices=False)
    rank = int((sizes > _NEGLIGIBLE * sizes[0]).sum())
    if rank <= _LOW_RANK:
        return sum(
            float(sizes[r]) * _separable(_product(left_z, along_z[:, r]), _product(left_y, along_y[r]), weights, mask)
            for r in range(rank)
        )
    return _point_by_point(left_z.toarray(), left_y.toarray(), weights, mask, variance)


def _point_by_point(left_z: Array, left_y: Array, weights: Array, mask: Array, variance: Array) -> float:
    nz, ny = mask.shape
    band_y = _band(left_y @ left_y.T)
    total = 0.0
    for dz in range(_band(left_z @ left_z.T) + 1):
        along_z = (left_z[: nz - dz] * left_z[dz:]) @ variance
        for dy in range(-band_y, band_y + 1):
            if dz == 0 and dy < 0:
                continue
            here, there = slice(max(0, -dy), ny - max(0, dy)), slice(max(0, dy), ny - max(0, -dy))
            g = weights[nz - 1 + dz, ny - 1 + dy] + (weights[nz - 1 - dz, ny - 1 - dy] if dz or dy else 0.0)
            covariance = along_z @ (left_y[here] * left_y[there]).T
            total += g * float(np.vdot(covariance, mask[: nz - dz, here] * mask[dz:, there]))
    return total
