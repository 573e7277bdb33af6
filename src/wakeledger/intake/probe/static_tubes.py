"""Static tubes that sit elsewhere than the pitots: their readings brought to where the total pressure was read."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array

#: Places count as one line where they reach less than this share of its length to the side.
_LINE = 1e-6
#: Least part of the interpolation's own error that is left at a place beside a reading.
_AT_READING = 0.5
#: Places are left out in so many parts at most, to be predicted from the others.
_PARTS = 20


@dataclass(frozen=True, eq=False)
class StaticInterpolation:
    """Static pressure at points from readings at other places, linear in the readings.

    Attributes
    ----------
    weights : sparse array, shape (n, m)
        Of m readings at n points.
    distance : ndarray, shape (n,)
        To the nearest reading, m.
    spacing : float
        Typical distance between readings, m.
    left_out : float
        Root mean square difference of readings from what the others predict, Pa; NaN where it cannot be told.
    standard_uncertainty : ndarray, shape (n,)
        Of the interpolated pressure, Pa, one error of all points; NaN likewise.
    beyond : int
        Points outside the area (or line) that the readings span, which take the nearest value.
    """

    weights: object
    distance: Array
    spacing: float
    left_out: float
    standard_uncertainty: Array
    beyond: int

    def at_points(self, readings: Array) -> Array:
        """Interpolated readings.

        Parameters
        ----------
        readings : ndarray, shape (..., m)
            Static pressures, Pa.

        Returns
        -------
        ndarray, shape (..., n)
        """
        found = self.weights @ readings.reshape(-1, readings.shape[-1]).T  # type: ignore[operator]
        return np.asarray(found.T.reshape(*readings.shape[:-1], found.shape[0]))


def interpolate_static(places: Array, readings: Array, points: Array) -> StaticInterpolation:
    """Interpolate static pressures linearly between the places where they were read.

    Parameters
    ----------
    places : ndarray, shape (m, 2)
        y and z of the readings, m; NaN readings are not used.
    readings : ndarray, shape (m,)
        Static pressures, Pa.
    points : ndarray, shape (n, 2)
        y and z where it is wanted, m.

    Returns
    -------
    StaticInterpolation

    Notes
    -----
    Readings that stand on one line are taken to hold across it. Readings at one place are averaged. The standard
    uncertainty grows from half the left-out error beside a reading in proportion to the distance over the spacing of
    the readings.
    """
    from scipy.spatial import cKDTree

    known = np.flatnonzero(np.isfinite(readings))
    where, member = _merged(places[known])
    count = np.bincount(member)
    values = np.bincount(member, weights=readings[known]) / count
    plain, beyond = _weights(where, points)
    from scipy.sparse import coo_array

    average = coo_array((1.0 / count[member], (member, known)), shape=(count.size, readings.size)).tocsr()
    distance = cKDTree(where).query(points)[0]
    left_out, spacing = _left_out(where, values)
    share = np.maximum(distance / spacing if spacing > 0 else 0.0 * distance, _AT_READING)
    return StaticInterpolation(
        weights=plain @ average,
        distance=distance,
        spacing=spacing,
        left_out=left_out,
        standard_uncertainty=left_out * share,
        beyond=int(np.count_nonzero(beyond)),
    )


def _merged(places: Array) -> tuple[Array, NDArray[np.intp]]:
    """Different places, and which of them each reading stands at."""
    grain = 1e-6 * max(float(np.ptp(places, axis=0).max()), 1e-6)
    _, first, member = np.unique(np.round(places / grain), axis=0, return_index=True, return_inverse=True)
    return places[first], np.ravel(member)


def _weights(where: Array, points: Array) -> tuple[object, NDArray[np.bool_]]:
    """Linear weights of places at points (sparse, shape (n, m)), and which points lie beyond the places."""
    from scipy.sparse import coo_array
    from scipy.spatial import Delaunay, cKDTree

    n, m = len(points), len(where)
    rows = np.arange(n)
    if m == 1:
        return coo_array((np.ones(n), (rows, np.zeros(n, dtype=int))), shape=(n, m)).tocsr(), np.zeros(n, dtype=bool)
    centre = where.mean(axis=0)
    _, sizes, axes = np.linalg.svd(where - centre, full_matrices=False)
    if sizes[-1] <= _LINE * sizes[0]:
        along = (where - centre) @ axes[0]
        order = np.argsort(along)
        wanted = (points - centre) @ axes[0]
        upper = np.clip(np.searchsorted(along[order], wanted), 1, m - 1)
        low, high = along[order][upper - 1], along[order][upper]
        share = np.clip((wanted - low) / (high - low), 0.0, 1.0)
        columns = np.concatenate([order[upper - 1], order[upper]])
        matrix = coo_array((np.concatenate([1 - share, share]), (np.tile(rows, 2), columns)), shape=(n, m)).tocsr()
        slack = 1e-9 * float(np.ptp(along))
        return matrix, (wanted < along.min() - slack) | (wanted > along.max() + slack)
    mesh = Delaunay(where)
    simplex = mesh.find_simplex(points, tol=1e-9)
    inside = np.flatnonzero(simplex >= 0)
    transform = mesh.transform[simplex[inside]]
    part = np.einsum("kij,kj->ki", transform[:, :2], points[inside] - transform[:, 2])
    shares = np.column_stack([part, 1 - part.sum(axis=1)])
    outside = np.flatnonzero(simplex < 0)
    nearest = cKDTree(where).query(points[outside])[1]
    data = np.concatenate([shares.ravel(), np.ones(outside.size)])
    at = np.concatenate([np.repeat(inside, 3), outside])
    columns = np.concatenate([mesh.simplices[simplex[inside]].ravel(), nearest])
    return coo_array((data, (at, columns)), shape=(n, m)).tocsr(), simplex < 0


def _left_out(where: Array, values: Array) -> tuple[float, float]:
    """Error of readings predicted by the others, Pa, and the typical distance between readings, m."""
    from scipy.spatial import cKDTree

    if len(where) < 3:
        spacing = float(np.hypot(*np.ptp(where, axis=0))) if len(where) == 2 else 0.0
        return math.nan, spacing
    spacing = float(np.median(cKDTree(where).query(where, 2)[0][:, 1]))
    part = np.arange(len(where)) % _PARTS
    errors = []
    for number in range(min(len(where), _PARTS)):
        left, others = part == number, part != number
        matrix, beyond = _weights(where[others], where[left])
        errors.append((matrix @ values[others] - values[left])[~beyond])
    found = np.concatenate(errors)
    return (float(np.sqrt(np.mean(found**2))) if found.size else math.nan), spacing
