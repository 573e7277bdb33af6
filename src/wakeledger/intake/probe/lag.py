"""Pressures behind tubing that answers late: a first-order lag along a continuous traverse, taken out.

A tube of time constant τ reads m with τ dm/dt + m = p, so p = m + τ dm/dt. The rate comes from a smoothing spline
through each row, the reading itself passes unsmoothed: noise grows by no more than the correction needs, and without
lag nothing changes.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.intake.probe.correction import Correction

#: Fewest points of a row that has a rate; shorter rows are taken as settled.
FEWEST = 5
#: Range in which the smoothing time is sought, in sampling intervals.
_SHORTEST, _LONGEST = 0.3, 30.0
_PROBES = 16


@dataclass(frozen=True, eq=False)
class RateFilter:
    """Rate of change along the rows of a traverse by smoothing splines; linear in the values, and picklable.

    Attributes
    ----------
    smoothing_time : float
        Time T, s: the spline passes 1/(1 + (ωT)⁴) of an oscillation.
    usable : ndarray of bool, shape (n,)
        Points that take part; the rate of the others is NaN.
    """

    smoothing_time: float
    usable: NDArray[np.bool_]
    _second: Any
    _direct: Any
    _curved: Any
    _roughness: Any
    _factor: Array | None

    def rate(self, values: Array) -> Array:
        """Rate of change at the points, shape (..., n), in the unit of `values` (..., n) per second."""
        return self._spread(self._rate(self._columns(values)), values)

    def smooth(self, values: Array) -> Array:
        """The smoothing spline itself at the points, shape (..., n)."""
        columns = self._columns(values)
        return self._spread(columns - self._roughness @ self._bend(columns), values)

    def _columns(self, values: Array) -> Array:
        return np.asarray(values, float)[..., self.usable].reshape(-1, int(self.usable.sum())).T

    def _spread(self, columns: Array, values: Array) -> Array:
        out = np.full(np.shape(values), np.nan)
        out[..., self.usable] = columns.T.reshape(*np.shape(values)[:-1], -1)
        return out

    def _bend(self, columns: Array) -> Array:
        from scipy.linalg import cho_solve_banded

        if self._factor is None:
            return np.zeros((0, columns.shape[1]))
        bend: Array = cho_solve_banded((self._factor, False), self._second @ columns, check_finite=False)
        return bend

    def _rate(self, columns: Array) -> Array:
        rate: Array = self._direct @ columns + self._curved @ self._bend(columns)
        return rate


def make_rate_filter(
    time: Array,
    row: NDArray[np.integer],
    *,
    values: Array | None = None,
    smoothing_time: float | None = None,
    usable: NDArray[np.bool_] | None = None,
) -> RateFilter:
    """Prepare the rates along the rows of a traverse.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Time of each point, s, growing along each row.
    row : ndarray of int, shape (n,)
        Traverse row of each point; a row's points follow one another in the file, and a row begins settled or in
        quiet flow.
    values : ndarray, shape (..., n), optional
        Readings from which the smoothing is chosen, by generalised cross-validation over all of them together.
    smoothing_time : float, optional
        Smoothing time T, s, instead.
    usable : ndarray of bool, shape (n,), optional
        Points with readings; all unless given.

    Returns
    -------
    RateFilter

    Raises
    ------
    DataError
        If time does not grow along a row.
    ValueError
        If neither `values` nor `smoothing_time` is given.

    Notes
    -----
    Natural cubic smoothing splines by Reinsch's equations (Green & Silverman, Nonparametric Regression and Generalized
    Linear Models, 1994, section 2.3.3), all rows in one banded system. λ = T⁴ over the median interval.
    """
    if values is None and smoothing_time is None:
        raise ValueError("give values to choose the smoothing from, or smoothing_time")
    use = np.ones(time.size, dtype=bool) if usable is None else np.asarray(usable, dtype=bool)
    if values is not None:
        use = use & np.isfinite(values).reshape(-1, time.size).all(axis=0)
    t, r = np.asarray(time, float)[use], np.asarray(row)[use]
    system = _system(t, r)
    if smoothing_time is None:
        readings = np.asarray(values, float)[..., use].reshape(-1, t.size)
        smoothing_time = _cross_validated(system, readings)
    return _filter(system, smoothing_time, use)


def correct_lag(
    values: Array, rates: RateFilter, *, lag: ArrayLike, standard_uncertainty: ArrayLike = np.nan
) -> Correction:
    """Pressures as they were in front of the tubes.

    Parameters
    ----------
    values : ndarray, shape (..., n)
        Readings, Pa.
    rates : RateFilter
        Rates along the rows.
    lag, standard_uncertainty : array_like, shape (..., 1) or scalar
        Time constant τ, s, of all or of each hole, and how well it is known (NaN: not known).

    Returns
    -------
    Correction
        p = m + τ dm/dt. Noise of the readings is not in `per_sigma`: it passes through this function with the draws.
    """
    rate = rates.rate(values)
    size = np.asarray(lag, float) * rate
    return Correction(values + size, size, np.asarray(standard_uncertainty, float) * rate)


@dataclass(frozen=True)
class Lag:
    """A time constant found from rows that were traversed both ways.

    Attributes
    ----------
    value, standard_uncertainty : float
        τ, s; NaN with a reason where it cannot be had.
    pairs : int
        Pairs of rows it rests on.
    reason : str or None
        Why it is unknown.
    """

    value: float
    standard_uncertainty: float
    pairs: int
    reason: str | None = None


def estimate_lag(along: Array, across: Array, row: NDArray[np.integer], values: Array, rates: RateFilter) -> Lag:
    """Time constant of the tubing from rows that were traversed in both directions.

    Parameters
    ----------
    along, across : ndarray, shape (n,)
        Positions along the rows and across them, m.
    row : ndarray of int, shape (n,)
        Traverse row of each point.
    values : ndarray, shape (channels, n)
        Readings, Pa.
    rates : RateFilter
        Made with the same rows.

    Returns
    -------
    Lag
        The τ with which both ways read the same, m₁ + τ dm₁/dt = m₂ + τ dm₂/dt, by least squares over all channels.

    Notes
    -----
    Backlash moves the two ways apart just as lag does: they can be told apart only by traversing at another speed. The
    noise of the rates, known from the filter and the readings' scatter, is taken out of the sum of squares.
    """
    from scipy.interpolate import CubicSpline

    places = {int(k): np.flatnonzero((row == k) & rates.usable) for k in np.unique(row)}
    rows = [k for k, here in places.items() if here.size >= FEWEST]
    level = {k: float(np.mean(across[places[k]])) for k in rows}
    sense = {k: np.sign(along[places[k]][-1] - along[places[k]][0]) for k in rows}
    heights = np.unique(list(level.values()))
    apart = np.diff(heights)
    tolerance = 0.02 * float(np.max(apart, initial=0.0))
    rate, smooth = rates.rate(values), rates.smooth(values)
    noise = np.nanvar(values - smooth, axis=-1)
    gain = rates.rate(np.sign(np.random.default_rng(0).standard_normal((_PROBES, row.size))))
    products, squares, used, sums = 0.0, 0.0, 0, []
    for index, a in enumerate(rows):
        for b in rows[index + 1 :]:
            if sense[a] * sense[b] >= 0 or abs(level[a] - level[b]) > tolerance:
                continue
            first, second = places[a], places[b][::-1] if sense[b] < 0 else places[b]
            first = first[::-1] if sense[a] < 0 else first
            low = max(along[first[0]], along[second[0]])
            high = min(along[first[-1]], along[second[-1]])
            first = first[(along[first] >= low) & (along[first] <= high)]
            if first.size < FEWEST:
                continue
            other = CubicSpline(along[second], np.stack([values[:, second], rate[:, second]]), axis=-1)(along[first])
            apart_read = values[:, first] - other[0]
            apart_rate = rate[:, first] - other[1]
            weight = 1 / np.maximum(noise, 1e-30 + 1e-12 * np.nanvar(values, axis=-1))[:, None]
            noisy = 2 * np.mean(gain[:, first] ** 2) * noise[:, None]
            squares += float(np.sum(weight * (apart_rate**2 - noisy)))
            products -= float(np.sum(weight * apart_read * apart_rate))
            sums.append((weight, apart_read, apart_rate))
            used += 1
    if not used:
        return Lag(np.nan, np.nan, 0, "no row was traversed in both directions")
    if not squares > 0:
        return Lag(np.nan, np.nan, used, "the readings do not vary along the rows by more than their noise")
    tau = products / squares
    left = [w * (read + tau * slope) ** 2 for w, read, slope in sums]
    variance = sum(float(np.sum(x)) for x in left) / max(sum(x.size for x in left) - 1, 1)
    return Lag(tau, float(np.sqrt(variance / squares)), used)


# -- Reinsch's equations ------------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class _System:
    """Sparse parts of the splines of all rows: values g and second derivatives γ at the inner points."""

    second: Any  # Qᵀ
    energy: Any  # R
    direct: Any
    curved: Any
    interval: float


def _system(time: Array, row: NDArray[np.integer]) -> _System:
    from scipy import sparse

    bounds = np.flatnonzero(np.diff(row)) + 1
    starts = np.concatenate([[0], bounds]).astype(np.intp)
    ends = np.concatenate([bounds, [time.size]]).astype(np.intp)
    second, energy, direct, curved, steps = [], [], [], [], []
    for start, end in zip(starts, ends, strict=True):
        n = int(end - start)
        if n < FEWEST:
            second.append(sparse.coo_array((0, n)))
            energy.append(sparse.coo_array((0, 0)))
            direct.append(sparse.coo_array((n, n)))
            curved.append(sparse.coo_array((n, 0)))
            continue
        h = np.diff(time[start:end])
        if not (h > 0).all():
            raise DataError(
                f"time does not grow along traverse row {int(row[start])}",
                remedy="a lag can be taken out only of rows whose points are in the order in which they were taken",
            )
        steps.append(h)
        second.append(
            sparse.diags_array([1 / h[:-1], -1 / h[:-1] - 1 / h[1:], 1 / h[1:]], offsets=[0, 1, 2], shape=(n - 2, n))
        )
        energy.append(sparse.diags_array([h[1:-1] / 6, (h[:-1] + h[1:]) / 3, h[1:-1] / 6], offsets=[-1, 0, 1]))
        # The mean of the slopes from either side, which agree; at the ends the only one there is.
        left = sparse.diags_array([-1 / h, 1 / h], offsets=[-1, 0], shape=(n, n)).tolil()
        left[0, :] = 0
        left[0, [0, 1]] = [-1 / h[0], 1 / h[0]]
        direct.append(left.tocsr())
        bend = sparse.diags_array([h / 6, np.append(0.0, h / 3)], offsets=[-1, 0], shape=(n, n)).tolil()
        bend[0, :] = 0
        bend[0, 1] = -h[0] / 6
        curved.append(bend.tocsr()[:, 1:-1])
    interval = float(np.median(np.concatenate(steps))) if steps else 1.0
    q, r, first, bent = (sparse.block_diag(part, format="csr") for part in (second, energy, direct, curved))
    return _System(q, r, first, bent, interval)


def _filter(system: _System, smoothing_time: float, usable: NDArray[np.bool_]) -> RateFilter:
    from scipy.linalg import cholesky_banded

    strength = smoothing_time**4 / system.interval
    spread = system.second.T.tocsr()
    factor = None
    if system.energy.shape[0]:
        matrix = (system.energy + strength * (system.second @ spread)).tocsr()
        factor = cholesky_banded(_upper(matrix), check_finite=False)
    curved = system.curved - strength * (system.direct @ spread)
    return RateFilter(smoothing_time, usable, system.second, system.direct, curved.tocsr(), strength * spread, factor)


def _upper(matrix: Any) -> Array:
    n = matrix.shape[0]
    bands = np.zeros((3, n))
    for offset in range(min(3, n)):
        bands[2 - offset, offset:] = matrix.diagonal(offset)
    return bands


def _cross_validated(system: _System, readings: Array) -> float:
    """Smoothing time with the least Σr²/(n − trace)², the trace from random signs."""
    from scipy.optimize import minimize_scalar

    n = readings.shape[1]
    if not system.energy.shape[0]:
        return system.interval
    signs = np.sign(np.random.default_rng(0).standard_normal((_PROBES, n)))
    scale = np.maximum(np.ptp(readings, axis=1, keepdims=True), 1e-300)
    columns = np.vstack([readings / scale, signs]).T
    everything = np.ones(n, dtype=bool)

    def score(logarithm: float) -> float:
        trial = _filter(system, float(np.exp(logarithm)) * system.interval, everything)
        left = trial._roughness @ trial._bend(columns)
        freedom = float(np.mean(np.sum(left[:, -_PROBES:] * signs.T, axis=0)))
        return float(np.log(np.sum(left[:, :-_PROBES] ** 2) + 1e-300) - 2 * np.log(freedom))

    found = minimize_scalar(score, bounds=(np.log(_SHORTEST), np.log(_LONGEST)), method="bounded")
    return float(np.exp(found.x)) * system.interval
