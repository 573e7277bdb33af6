"""Noise told without any model: how points scatter that were taken at the same place more than once."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtri

from wakeledger.core.grid import Array


@dataclass(frozen=True)
class Scatter:
    """Scatter of repeated points about the means of their places.

    Attributes
    ----------
    deviation : float
        Standard deviation of one point, √(Σ (x − x̄)²/ν), x̄ the mean of the place; NaN without repeats.
    degrees_of_freedom : int
        ν, points less places.
    places, points : int
        Places with several points, and their points.
    """

    deviation: float
    degrees_of_freedom: int
    places: int
    points: int

    def interval(self, probability: float = 0.95) -> tuple[float, float]:
        """Interval that holds the standard deviation with this probability, for normal errors.

        Parameters
        ----------
        probability : float
            Of the interval, both tails alike.

        Returns
        -------
        (float, float)
            NaN without repeats.
        """
        if self.degrees_of_freedom < 1:
            return math.nan, math.nan
        tail, nu = (1 - probability) / 2, self.degrees_of_freedom
        low, high = (self.deviation * math.sqrt(nu / float(chdtri(nu, p))) for p in (tail, 1 - tail))
        return low, high


@dataclass(frozen=True, eq=False)
class Visits:
    """Which points repeat each other, −1 for those that do not.

    Attributes
    ----------
    again : ndarray of int, shape (n,)
        Place of the first point of each visit, of places that were left and visited again: what changed in between
        shows.
    once : ndarray of int, shape (n,)
        Number of the visit, of points taken one after the other without leaving the place.
    """

    again: NDArray[np.int64]
    once: NDArray[np.int64]


def sort_visits(place: NDArray[np.intp], order: NDArray[np.intp]) -> Visits:
    """Tell points that were taken at once from visits to a place that was left.

    Parameters
    ----------
    place : ndarray of int, shape (n,)
        Place of each point.
    order : ndarray of int, shape (n,)
        Which points were taken one after the other.

    Returns
    -------
    Visits
    """
    at = place[order]
    begins = np.concatenate([[True], np.diff(at) != 0])
    visit = np.cumsum(begins) - 1
    again, once = np.full(at.size, -1, dtype=np.int64), np.full(at.size, -1, dtype=np.int64)
    long = np.bincount(visit)[visit] > 1
    once[order[long]] = visit[long]
    first = np.flatnonzero(begins)
    often = np.bincount(at[first], minlength=int(at.max()) + 1) > 1
    chosen = first[often[at[first]]]
    again[order[chosen]] = at[chosen]
    return Visits(again, once)


def pooled_scatter(values: Array, place: NDArray[np.int64]) -> Scatter:
    """Scatter of points about the means of their places, pooled over the places.

    Parameters
    ----------
    values : ndarray, shape (n,)
        A channel, any unit; NaN where a point has none.
    place : ndarray of int, shape (n,)
        Place of each point; those at −1 are left out.

    Returns
    -------
    Scatter
    """
    known = (place >= 0) & np.isfinite(values)
    counts = np.bincount(place[known], minlength=1)
    known[known] = counts[place[known]] > 1
    places, label = np.unique(place[known], return_inverse=True)
    freedom = int(known.sum()) - places.size
    if freedom < 1:
        return Scatter(math.nan, 0, 0, 0)
    x = values[known]
    mean = np.bincount(label, weights=x) / np.bincount(label)
    deviation = math.sqrt(float(np.sum((x - mean[label]) ** 2)) / freedom)
    return Scatter(deviation, freedom, int(places.size), int(known.sum()))
