"""Points measured twice: repeats are averaged, contradictions are refused."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.core.points import Points
from wakeledger.intake.gridding.lattice import find_lattice

#: Repeats that differ by more than this many standard deviations of their difference contradict each other.
_CONTRADICTION = 8.0
#: Least noise that is assumed, as a share of a variable's range: the last digit of a table.
_LEAST_NOISE = 1e-3
_NEIGHBOURS = 8
_TESTED_PLACES = 2000


def check_duplicates(points: Points) -> None:
    """Refuse points at the same place whose values contradict each other.

    Parameters
    ----------
    points : Points
        Points as read.

    Raises
    ------
    DataError
        If two values at one place differ by more than 8 standard deviations of their difference; the standard deviation
        of a mean comes from the file, or else from how far points scatter about a plane through their neighbours.
    """
    label = place_labels(points.y, points.z)
    order = np.argsort(label, kind="stable")
    same = np.flatnonzero(np.diff(label[order]) == 0)
    if not same.size:
        return
    first, second = order[same], order[same + 1]
    for name, channel in points.channels.items():
        values = channel.values
        difference = np.abs(values[first] - values[second])
        noise = max(_noise(points.y, points.z, values, label), _LEAST_NOISE * _range(values))
        allowed = np.full(difference.shape, _CONTRADICTION * np.sqrt(2.0) * noise)
        if name in points.std:
            error = points.std[name] / (1.0 if points.samples is None else np.sqrt(points.samples))
            given = np.hypot(error[first], error[second])
            allowed = np.fmax(allowed, _CONTRADICTION * given)
        wrong = np.flatnonzero(difference > allowed)
        if wrong.size:
            worst = wrong[np.argmax(difference[wrong])]
            i, j = int(first[worst]), int(second[worst])
            raise DataError(
                f"two values of {name} at the same place (y = {points.y[i]:g} m, z = {points.z[i]:g} m) contradict "
                f"each other: {values[i]:g} and {values[j]:g}, in SI units",
                file=points.source,
                place=f"lines {points.line[i]} and {points.line[j]}",
                remedy="delete the wrong line; repeats that agree within the noise are averaged",
            )


def _range(values: Array) -> float:
    """Range of nearly all values: a level common to them, as of absolute pressures, says nothing of their noise."""
    finite = values[np.isfinite(values)]
    return float(np.ptp(np.quantile(finite, [0.01, 0.99]))) if finite.size else 0.0


def place_labels(y: Array, z: Array) -> NDArray[np.intp]:
    """Number of the place of each point.

    Parameters
    ----------
    y, z : ndarray, shape (n,)
        Positions, m.

    Returns
    -------
    ndarray of int, shape (n,)
        Points on one node of a tensor grid have one number; of scattered points, those at the very same place.
    """
    lattice = find_lattice(y, z)
    if lattice is not None:
        return np.asarray(lattice.iz * lattice.y.size + lattice.iy, dtype=np.intp)
    grain = 1e-9 * max(np.ptp(y), np.ptp(z), np.finfo(float).tiny)
    keys = np.column_stack([np.round((y - y.min()) / grain), np.round((z - z.min()) / grain)])
    return np.unique(keys, axis=0, return_inverse=True)[1].reshape(-1).astype(np.intp)


def _noise(y: Array, z: Array, values: Array, label: NDArray[np.intp]) -> float:
    """Standard deviation of the scatter about a local plane, the median over places so that the wake hardly counts."""
    from scipy.spatial import cKDTree

    finite = np.flatnonzero(np.isfinite(values))
    chosen = finite[np.unique(label[finite], return_index=True)[1]]
    if chosen.size <= _NEIGHBOURS:
        return 0.0
    places = np.column_stack([y[chosen], z[chosen]])
    tested = np.arange(0, chosen.size, max(1, chosen.size // _TESTED_PLACES))
    near = cKDTree(places).query(places[tested], _NEIGHBOURS + 1)[1][:, 1:]
    offset = places[near] - places[tested][:, None, :]
    size = np.abs(offset).max(axis=(1, 2), keepdims=True)
    plane = np.concatenate([np.ones((*near.shape, 1)), offset / size], axis=-1)
    weights = np.linalg.pinv(plane)[:, 0, :]
    residual = values[chosen[tested]] - (weights * values[chosen[near]]).sum(axis=1)
    spread = np.sqrt(1.0 + (weights**2).sum(axis=1))
    return float(np.median(np.abs(residual) / spread) / 0.6745)
