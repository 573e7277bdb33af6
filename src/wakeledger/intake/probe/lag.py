"""Pressures behind tubing that answers late: a first-order lag along a continuous traverse, taken out.

A tube of time constant τ reads m with τ dm/dt + m = p, so p = m + τ dm/dt. The rate comes from a smoothing spline
through each row, the reading itself passes unsmoothed: noise grows by no more than the correction needs, and without
lag nothing changes.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
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
#: Rows are at one level within this share of the largest distance between levels.
_SAME_LEVEL = 0.02
#: Pairs of rows from which on their own scatter tells the uncertainty.
_FEWEST_PAIRS = 6


@dataclass(frozen=True, eq=False)
class RateFilter:
    """Rate of change along the rows of a traverse by smoothing splines; linear in the values, and picklable.

    Attributes
    ----------
    smoothing_time : float
        Time T, s: the spline passes 1/(1 + (ωT)⁴) of an oscillation.
    interval : float
        Median time between two points of a row, s.
    usable : ndarray of bool, shape (n,)
        Points that take part; the rate of the others is NaN.
    """

    smoothing_time: float
    interval: float
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


def estimate_lag(along: Array, across: Array, row: NDArray[np.integer], time: Array, values: Array) -> Lag:
    """Time constant of the tubing from rows that were traversed in both directions.

    Parameters
    ----------
    along, across : ndarray, shape (n,)
        Positions along the rows and across them, m, in the order in which the points were taken.
    row : ndarray of int, shape (n,)
        Traverse row of each point.
    time : ndarray, shape (n,)
        Time of each point, s, growing along each row.
    values : ndarray, shape (channels, n)
        Readings, Pa; NaN where one is missing.

    Returns
    -------
    Lag
        The τ with which both ways read the same, m₁ + τ dm₁/dt = m₂ + τ dm₂/dt, over all channels.

    Raises
    ------
    DataError
        If time does not grow along a row.

    Notes
    -----
    With d the difference of the readings and s that of the rates, τ = −Σ w d/Σ w s, where the weight w is s from the
    smoothing splines and s itself comes from hardly smoothed ones, so that smoothing does not flatten it; what noise
    adds to Σ w s is known from the splines and is taken out. Backlash moves the two ways apart just as lag does: they
    can be told apart only by traversing at another speed.
    """
    pairs = _pairs(along, across, row, np.asarray(np.isfinite(values).all(axis=0)))
    if not pairs:
        return Lag(np.nan, np.nan, 0, "no row was traversed in both directions")
    smooth = make_rate_filter(time, row, values=values)
    close = make_rate_filter(time, row, smoothing_time=_SHORTEST / 2 * smooth.interval, usable=smooth.usable)
    signs = np.sign(np.random.default_rng(0).standard_normal((_PROBES, row.size)))
    rough = signs - smooth.smooth(signs)
    noise = np.nansum((values - smooth.smooth(values)) ** 2, axis=-1) / np.nansum(rough * signs) * _PROBES
    common = smooth.rate(signs) * close.rate(signs)
    trust = 1 / np.maximum(noise, 1e-300 + 1e-12 * np.nanvar(values, axis=-1))[:, None]
    channels = np.stack([values, close.rate(values), smooth.rate(values)])
    above, below, parts = 0.0, 0.0, []
    for first, second in pairs:
        read, rate, weight = channels[..., first] - _at(along[first], along[second], channels[..., second])
        shared = np.mean(common[:, first]) + np.mean(common[:, second])
        above -= float(np.sum(trust * weight * read))
        below += float(np.sum(trust * (weight * rate - noise[:, None] * shared)))
        parts.append((trust * weight, read, rate))
    if not below > 0:
        return Lag(np.nan, np.nan, len(pairs), "the readings do not vary along the rows by more than their noise")
    tau = above / below
    pulls = [np.sum(weight * (read + tau * rate)) for weight, read, rate in parts]
    inside = [np.sum((weight * (read + tau * rate)) ** 2) for weight, read, rate in parts]
    # Pairs are independent of each other; with few of them, so are (nearly) the points within each.
    squares = float(np.sum(np.square(pulls)) if len(pairs) >= _FEWEST_PAIRS else np.sum(inside))
    return Lag(tau, float(np.sqrt(squares)) / below, len(pairs))


def _pairs(
    along: Array, across: Array, row: NDArray[np.integer], usable: NDArray[np.bool_]
) -> list[tuple[NDArray[np.intp], NDArray[np.intp]]]:
    """Points of each two rows at one level taken in opposite senses: those of one inside the other, and the other's."""
    rows = []
    for number in np.unique(row):
        here = np.flatnonzero((row == number) & usable)
        if here.size >= FEWEST:
            sense = np.sign(along[here[-1]] - along[here[0]])
            rows.append((float(np.mean(across[here])), sense, here[np.argsort(along[here], kind="stable")]))
    levels = np.diff(np.unique([level for level, _, _ in rows]))
    tolerance = _SAME_LEVEL * float(np.max(levels, initial=0.0))
    pairs = []
    for index, (level, sense, here) in enumerate(rows):
        for other_level, other_sense, other in rows[index + 1 :]:
            if sense * other_sense < 0 and abs(level - other_level) <= tolerance:
                inside = (along[here] >= along[other[0]]) & (along[here] <= along[other[-1]])
                if np.count_nonzero(inside) >= FEWEST and (np.diff(along[other]) > 0).all():
                    pairs.append((here[inside], other))
    return pairs


def _at(places: Array, along: Array, values: Array) -> Array:
    from scipy.interpolate import CubicSpline

    result: Array = CubicSpline(along, values, axis=-1)(places)
    return result


# -- Reinsch's equations ------------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class _System:
    """Sparse parts of the splines of all rows: values g and second derivatives γ at the inner points."""

    second: Any  # Qᵀ
    energy: Any  # R
    direct: Any
    curved: Any
    interval: float

    @cached_property
    def back(self) -> Any:
        """Q."""
        return self.second.T.tocsr()

    @cached_property
    def bands(self) -> tuple[Array, Array]:
        """Upper bands of R and QᵀQ."""
        return _upper(self.energy), _upper((self.second @ self.back).tocsr())

    @cached_property
    def slope_of_back(self) -> Any:
        return (self.direct @ self.back).tocsr()

    def factor(self, strength: float) -> Array | None:
        """Cholesky factor of R + λ QᵀQ."""
        from scipy.linalg import cholesky_banded

        if not self.energy.shape[0]:
            return None
        factor: Array = cholesky_banded(self.bands[0] + strength * self.bands[1], check_finite=False)
        return factor


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
        # Slope at the far end of each interval; at the first point, at its near end.
        left = sparse.diags_array([-1 / h, np.append(0.0, 1 / h)], offsets=[-1, 0], shape=(n, n)).tolil()
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
    strength = smoothing_time**4 / system.interval
    return RateFilter(
        smoothing_time,
        system.interval,
        usable,
        system.second,
        system.direct,
        (system.curved - strength * system.slope_of_back).tocsr(),
        strength * system.back,
        system.factor(strength),
    )


def _upper(matrix: Any) -> Array:
    n = matrix.shape[0]
    bands = np.zeros((3, n))
    for offset in range(min(3, n)):
        bands[2 - offset, offset:] = matrix.diagonal(offset)
    return bands


def _cross_validated(system: _System, readings: Array) -> float:
    """Smoothing time with the least Σr²/(n − trace)², the trace from random signs."""
    from scipy.linalg import cho_solve_banded
    from scipy.optimize import minimize_scalar

    n = readings.shape[1]
    if not system.energy.shape[0]:
        return system.interval
    signs = np.sign(np.random.default_rng(0).standard_normal((_PROBES, n)))
    scale = np.maximum(np.ptp(readings, axis=1, keepdims=True), 1e-300)
    columns = np.vstack([readings / scale, signs]).T
    bent = system.second @ columns

    def score(logarithm: float) -> float:
        strength = float(np.exp(4 * logarithm)) * system.interval**3
        factor = system.factor(strength)
        left = strength * (system.back @ cho_solve_banded((factor, False), bent, check_finite=False))
        freedom = float(np.mean(np.sum(left[:, -_PROBES:] * signs.T, axis=0)))
        return float(np.log(np.sum(left[:, :-_PROBES] ** 2) + 1e-300) - 2 * np.log(freedom))

    found = minimize_scalar(
        score, bounds=(np.log(_SHORTEST), np.log(_LONGEST)), method="bounded", options={"xatol": 0.01}
    )
    return float(np.exp(found.x)) * system.interval
