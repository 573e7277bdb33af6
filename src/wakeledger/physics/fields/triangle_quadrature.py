"""Integrals over a plane on the triangles between its own points, with nothing resampled.

A scattered or computed plane comes onto a uniform grid by interpolation, which the spectral methods need and an area
integral does not. The same integral on the points' own triangles differs from the gridded one by what resampling did
to it.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array

Triangles = NDArray[np.int64]
#: Triangles of a hull that are flatter than this (height over longest side) belong to its rim and hold no points.
_SLIVER = 1e-6


def delaunay(y: Array, z: Array) -> Triangles:
    """Triangles between points that nothing connects.

    Parameters
    ----------
    y, z : ndarray, shape (n,)
        Positions, m; finite. Points at one place are connected once.

    Returns
    -------
    ndarray of int, shape (m, 3)
        Those of Delaunay, which fill the convex hull; slivers along its rim are left out.

    Raises
    ------
    ValueError
        If the points lie on one line or are fewer than three.
    """
    from scipy.spatial import Delaunay, QhullError

    places = np.column_stack([y, z])
    try:
        found = Delaunay(places).simplices.astype(np.int64)
    except (QhullError, ValueError) as error:
        raise ValueError(f"{places.shape[0]} points have no triangles between them: they lie on one line") from error
    corner = places[found]
    longest = np.max([np.sum((corner[:, i] - corner[:, i - 1]) ** 2, axis=1) for i in range(3)], axis=0)
    kept: Triangles = found[2.0 * triangle_areas(y, z, found) > _SLIVER * longest]
    return kept


def triangle_areas(y: Array, z: Array, triangles: Triangles) -> Array:
    """Area of each triangle, whichever way round it goes.

    Parameters
    ----------
    y, z : ndarray, shape (n,)
        Positions of the points, m.
    triangles : ndarray of int, shape (m, 3)
        Points at the corners of each.

    Returns
    -------
    ndarray, shape (m,)
        m².
    """
    y, z = np.asarray(y, dtype=float)[triangles], np.asarray(z, dtype=float)[triangles]
    cross = (y[:, 1] - y[:, 0]) * (z[:, 2] - z[:, 0]) - (y[:, 2] - y[:, 0]) * (z[:, 1] - z[:, 0])
    result: Array = 0.5 * np.abs(cross)
    return result


def area_weights(y: Array, z: Array, triangles: Triangles, *, inside: NDArray[np.bool_] | None = None) -> Array:
    """The area that each point stands for.

    Parameters
    ----------
    y, z : ndarray, shape (n,)
        Positions of the points, m.
    triangles : ndarray of int, shape (m, 3)
        Points at the corners of each triangle.
    inside : ndarray of bool, shape (n,), optional
        Points of a region; all by default. A triangle counts by the share of its corners that are inside.

    Returns
    -------
    ndarray, shape (n,)
        m²; a third of the triangles about each point, so that sum(weights * values) is the integral of the values
        joined linearly. Zero outside the region.
    """
    third = triangle_areas(y, z, triangles) / 3.0
    weights: Array = np.bincount(triangles.ravel(), np.repeat(third, 3), np.asarray(y).size).astype(float)
    return weights if inside is None else np.where(inside, weights, 0.0)


def integrate(
    values: Array, y: Array, z: Array, triangles: Triangles, *, inside: NDArray[np.bool_] | None = None
) -> Array:
    """Integral over the triangles of values that are joined linearly between the points.

    Parameters
    ----------
    values : ndarray, shape (..., n)
        At the points.
    y, z : ndarray, shape (n,)
        Positions of the points, m.
    triangles : ndarray of int, shape (m, 3)
        Points at the corners of each triangle.
    inside : ndarray of bool, shape (n,), optional
        Points of a region, as in `area_weights`.

    Returns
    -------
    ndarray, shape (...)
        Unit of the values times m². Exact for linear fields over whole triangles, second order for others. A triangle
        with a corner without a value (NaN) counts with the mean of its other corners, and not at all without any.

    Raises
    ------
    ValueError
        If the values are not at the points.
    """
    values = np.asarray(values, dtype=float)
    if values.shape[-1:] != np.shape(y):
        raise ValueError(f"values have shape {values.shape}, the last axis must hold the {np.size(y)} points")
    weights = area_weights(y, z, triangles, inside=inside)
    if np.isfinite(values).all():
        return np.asarray(values @ weights)
    corner = values[..., triangles]
    known = np.isfinite(corner)
    member = np.ones(triangles.shape, dtype=bool) if inside is None else inside[triangles]
    count = (known & member).sum(axis=-1)
    total = np.where(known & member, corner, 0.0).sum(axis=-1)
    mean = np.divide(total, count, out=np.zeros_like(total), where=count > 0)
    return np.asarray((mean * member.mean(axis=-1)) @ triangle_areas(y, z, triangles))
