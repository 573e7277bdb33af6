"""Point-to-point noise of a channel at points that stand on no uniform grid, from their nearest neighbours."""

from __future__ import annotations

import math

import numpy as np

from wakeledger.core.grid import Array

#: Neighbours of each tested point, for the six terms of a parabola in two dimensions.
_NEIGHBOURS = 14
_TESTED = 1500
_FEWEST = 30
_MAD_TO_SIGMA = 1.482602


def local_noise(places: Array, values: Array) -> Array:
    """Standard deviation of the scatter about a parabola through the nearest neighbours.

    Parameters
    ----------
    places : ndarray, shape (n, 2)
        Positions of distinct points, in units of their spacing along each axis; points in the wake left out.
    values : ndarray, shape (k, n)
        Channels at the points, finite.

    Returns
    -------
    ndarray, shape (k,)
        In each channel's unit; NaN where fewer than 30 points are given.

    Notes
    -----
    The residual of a point from the least-squares parabola through its 14 nearest neighbours has the variance
    σ² (1 + Σ w²) for independent errors, w being the neighbours' weights; σ is the median of |residual|/√(1 + Σ w²)
    over the points, brought to a standard deviation. Errors that neighbours share are not seen.
    """
    from scipy.spatial import cKDTree

    count = places.shape[0]
    if count < _FEWEST:
        return np.full(values.shape[0], math.nan)
    tested = np.unique(np.linspace(0, count - 1, min(count, _TESTED)).astype(np.intp))
    near = cKDTree(places).query(places[tested], _NEIGHBOURS + 1)[1][:, 1:]
    offset = places[near] - places[tested][:, None, :]
    y, z = np.moveaxis(offset / np.abs(offset).max(axis=(1, 2), keepdims=True), -1, 0)
    parabola = np.stack([np.ones_like(y), y, z, y * y, y * z, z * z], axis=-1)
    # Neighbours on one circle, or on two lines, do not carry every term.
    weights = np.linalg.pinv(parabola, rcond=1e-6)[:, 0, :]
    residual = values[:, tested] - np.einsum("tn,ktn->kt", weights, values[:, near])
    spread = np.sqrt(1.0 + (weights**2).sum(axis=1))
    return np.asarray(_MAD_TO_SIGMA * np.median(np.abs(residual) / spread, axis=-1))
