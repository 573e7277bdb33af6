"""Play in the traverse gear: rows taken to starboard and to port stand apart, and the plane shows a zipper.

The probe stands b/2 behind the indicated place in its direction of travel. Only rows taken both ways show it; where all
rows run the same way the whole plane is moved by b/2, which no drag depends on, and nothing is corrected.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array
from wakeledger.intake.probe.correction import Correction

#: Fewest points of a row and fewest rows that take part.
FEWEST_POINTS = 5
FEWEST_ROWS = 6
#: Rows in one comparison: a polynomial of degree 3 across them leaves no trace.
_ROWS = 5
#: Rows shorter than this share of the median row do not take part, nor those that are one level twice.
_LONG = 0.6
_SAME_LEVEL = 0.02
_ITERATIONS = 12
#: Places per step of a row at which rows are compared: with one, the noise of a moved row and that of its slope are
#: correlated, since a spline's noise is largest at its knots; over a whole step that averages out.
_PHASES = 4
_ONE_WAY = "all rows were taken in the same direction"


@dataclass(frozen=True)
class Backlash:
    """Play of the traverse gear found from neighbouring rows.

    Attributes
    ----------
    value : float
        b, m: distance between the places of one indicated position reached from either side; positive where the probe
        lags behind. 0 where it cannot be seen.
    standard_uncertainty : float
        m; with few rows widened as Student's t at 95 %; NaN with a reason where it is unknown.
    rows : int
        Rows it rests on.
    reason : str or None
        Why it is unknown.
    chance : float
        How likely rows without any backlash are to stand apart as far as these do, by their own scatter; NaN likewise.
    """

    value: float
    standard_uncertainty: float
    rows: int
    reason: str | None = None
    chance: float = float("nan")


def row_senses(along: Array, row: NDArray[np.integer]) -> Array:
    """Direction in which each point's row was taken: +1, −1, or 0 for a row of one place, shape (n,).

    Parameters
    ----------
    along : ndarray, shape (n,)
        Position along the rows, m, in the order in which the points were taken.
    row : ndarray of int, shape (n,)
        Traverse row of each point.
    """
    sense = np.zeros(along.size)
    for number in np.unique(row):
        here = np.flatnonzero(row == number)
        sense[here] = np.sign(along[here[-1]] - along[here[0]])
    return sense


def estimate_backlash(
    along: Array, across: Array, row: NDArray[np.integer], values: Array, *, below: float = 1.0
) -> Backlash:
    """Backlash of a traverse whose rows run to and fro.

    Parameters
    ----------
    along, across : ndarray, shape (n,)
        Indicated positions along the rows and across them, m, in the order in which the points were taken.
    row : ndarray of int, shape (n,)
        Traverse row of each point.
    values : ndarray, shape (channels, n)
        Any readings; NaN where one is missing. Channels are weighted by their own scatter.
    below : float
        Chance from which on the first linear step is not refined: it is not worth the time.

    Returns
    -------
    Backlash

    Notes
    -----
    With σ_j = ±1 the direction of row j and F the field, a row reads F(y − σ_j b/2, z_j). A divided difference of
    fourth order across five neighbouring rows, Σ c_j f_j, leaves nothing of a field that varies smoothly from row to
    row but keeps what alternates: Σ c_j f_j = −(b/2) Σ c_j σ_j ∂F_j/∂y. b is found by least squares over all places,
    rows and channels, the rows being moved by cubic splines until nothing is left; its standard uncertainty comes
    from the scatter between rows. The chance is that of a first linear step from b = 0, by Student's t: noise so large
    that the steps lead astray leaves it right. What varies from row to row with an alternating sign looks the same, so
    does a lag.
    """
    table = _rows(along, across, row, values)
    senses = np.array([entry.sense for entry in table])
    if not np.any(senses):
        return Backlash(0.0, np.nan, 0, "no row has points enough")
    if not (np.any(senses > 0) and np.any(senses < 0)):
        return Backlash(0.0, np.nan, len(table), _ONE_WAY)
    if len(table) < FEWEST_ROWS:
        return Backlash(0.0, np.nan, len(table), f"fewer than {FEWEST_ROWS} rows")
    score = _Score(table)
    if not score.windows:
        return Backlash(0.0, np.nan, len(table), "no neighbouring rows were taken in opposite directions")
    from scipy.special import stdtr

    half, slope = 0.0, 1.0
    step = score(half)
    sigma, freedom = score.scatter(half)
    chance = 2.0 * float(stdtr(freedom, -abs(step) / sigma)) if sigma > 0 else float("nan")
    if chance >= below:
        return Backlash(2 * step, 2 * sigma * _widened(freedom), len(table), chance=chance)
    reach = 4 * score.spacing
    for _ in range(_ITERATIONS):
        # Noise in the slopes makes the first step too short; the secant learns by how much.
        move = float(np.clip(step / slope, -reach, reach))
        if abs(move) < 1e-6 * score.spacing:
            break
        half += move
        after = score(half)
        if abs(step - after) > 0.05 * abs(move):
            slope = float(np.clip((step - after) / move, 0.2, 2.0))
        step = after
    sigma, freedom = score.scatter(half)
    return Backlash(2 * half, 2 * sigma * _widened(freedom) / slope, len(table), chance=chance)


def correct_backlash(
    values: Array,
    along: Array,
    row: NDArray[np.integer],
    *,
    backlash: float,
    standard_uncertainty: float = np.nan,
) -> Correction:
    """Values as they are at the indicated places.

    Parameters
    ----------
    values : ndarray, shape (..., n)
        Readings or flow variables; a point that is missing in one of them stays missing in all.
    along : ndarray, shape (n,)
        Indicated position along the rows, m.
    row : ndarray of int, shape (n,)
        Traverse row of each point, in the order in which the points were taken.
    backlash, standard_uncertainty : float
        b and how well it is known, m (NaN: not known).

    Returns
    -------
    Correction
        Each row read by a cubic spline through its true places, y − σ b/2, which goes on straight beyond its last one.
        Where all rows run the same way nothing is changed.
    """
    values = np.asarray(values, float)
    sense = row_senses(along, row)
    size, slope = np.zeros(values.shape), np.zeros(values.shape)
    if not (np.any(sense > 0) and np.any(sense < 0)):
        return Correction(values + size, size, slope)
    measured = np.isfinite(values).reshape(-1, along.size).all(axis=0)
    for number in np.unique(row):
        here = np.flatnonzero((row == number) & measured)
        places, first = np.unique(along[here], return_index=True)
        if here.size < FEWEST_POINTS or places.size < here.size or not backlash:
            continue
        spline = _spline(places - 0.5 * sense[here[0]] * backlash, values[..., here[first]])
        at = np.clip(along[here], spline.x[0], spline.x[-1])
        beyond = along[here] - at
        size[..., here] = spline(at) + spline(at, 1) * beyond - values[..., here]
    for number in np.unique(row):
        here = np.flatnonzero((row == number) & measured)
        places, first = np.unique(along[here], return_index=True)
        if here.size >= FEWEST_POINTS and places.size == here.size:
            slope[..., here[first]] = 0.5 * sense[here[0]] * _spline(places, values[..., here[first]])(places, 1)
    return Correction(values + size, size, standard_uncertainty * slope)


def _widened(freedom: float) -> float:
    """Factor that gives a normal distribution the 95 % interval of Student's t."""
    from scipy.special import ndtri, stdtrit

    return float(stdtrit(freedom, 0.975) / ndtri(0.975))


def _spline(places: Array, values: Array) -> Any:
    from scipy.interpolate import CubicSpline

    return CubicSpline(places, values, axis=-1)


@dataclass(frozen=True, eq=False)
class _Row:
    """One row: ascending indicated places, readings, level across, direction of travel."""

    along: Array
    values: Array
    across: float
    sense: float


def _rows(along: Array, across: Array, row: NDArray[np.integer], values: Array) -> list[_Row]:
    sense = row_senses(along, row)
    measured = np.isfinite(values).all(axis=0)
    table = []
    for number in np.unique(row):
        here = np.flatnonzero((row == number) & measured)
        places, first = np.unique(along[here], return_index=True)
        if places.size >= FEWEST_POINTS and sense[here[0]]:
            chosen = here[first]
            table.append(_Row(places, values[:, chosen], float(np.mean(across[chosen])), float(sense[here[0]])))
    extent = [entry.along[-1] - entry.along[0] for entry in table]
    long = _LONG * float(np.median(extent)) if extent else 0.0
    table = [entry for entry, length in zip(table, extent, strict=True) if length >= long]
    return sorted(table, key=lambda entry: entry.across)


def _windows(levels: Array, sense: Array) -> tuple[list[NDArray[np.intp]], list[Array]]:
    """Rows to compare and their weights: pairs at one level taken both ways, else five neighbouring levels."""
    near = _SAME_LEVEL * float(np.max(np.diff(levels), initial=0.0))
    pairs = [np.array([j, j + 1]) for j in np.flatnonzero((np.diff(levels) <= near) & (sense[1:] != sense[:-1]))]
    if pairs:
        return pairs, [np.array([0.5, -0.5])] * len(pairs)
    distinct = np.flatnonzero(np.diff(levels, prepend=-np.inf) > near)
    windows, weights = [], []
    for start in range(distinct.size - _ROWS + 1):
        window = distinct[start : start + _ROWS]
        if np.ptp(sense[window]) == 0:
            continue
        gap = (levels[window][:, None] - levels[window]) / np.ptp(levels[window])
        np.fill_diagonal(gap, 1.0)
        coefficients = 1 / np.prod(gap, axis=1)
        windows.append(window)
        weights.append(coefficients / np.abs(coefficients).sum())
    return windows, weights


class _Score:
    """How far apart the rows still are when each is moved back by half the backlash."""

    def __init__(self, table: list[_Row]) -> None:
        low, high = max(entry.along[0] for entry in table), min(entry.along[-1] for entry in table)
        count = int(np.median([entry.along.size for entry in table]))
        self.spacing = float((high - low) / (count - 1))
        self.at = low + self.spacing * np.arange(_PHASES, _PHASES * (count - 2)) / _PHASES
        self.table = table
        self.sense = np.array([entry.sense for entry in table])
        self.windows, self.weights = _windows(np.array([entry.across for entry in table]), self.sense)

    def parts(self, half: float) -> tuple[Array, Array, Array]:
        """Differences d and model g of each window of rows, shape (windows, channels, places), and channel weights."""
        moved = [_spline(entry.along - entry.sense * half, entry.values) for entry in self.table]
        fields = np.stack([spline(self.at) for spline in moved])
        slopes = np.stack([spline(self.at, 1) for spline in moved])
        smooth = slopes.copy()
        smooth[1:-1] = 0.25 * slopes[:-2] + 0.5 * slopes[1:-1] + 0.25 * slopes[2:]
        left, model = [], []
        for window, weight in zip(self.windows, self.weights, strict=True):
            left.append(np.einsum("j,jcy->cy", weight, fields[window]))
            model.append(-np.einsum("j,jcy->cy", weight * self.sense[window], smooth[window]))
        d, g = np.stack(left), np.stack(model)
        scatter = np.median(np.abs(d), axis=(0, 2))
        floor = 1e-9 * np.max(np.abs(fields), axis=(0, 2))
        return d, g, 1 / np.maximum(scatter, np.maximum(floor, 1e-300)) ** 2

    def __call__(self, half: float) -> float:
        """Remaining half backlash, as far as the noisy slopes can tell, m."""
        d, g, trust = self.parts(half)
        total = float(np.einsum("kcy,kcy,c->", g, g, trust))
        return float(np.einsum("kcy,kcy,c->", d, g, trust)) / total if total > 0 else 0.0

    def scatter(self, half: float) -> tuple[float, float]:
        """Standard uncertainty of the remaining half backlash, m, from the scatter of the windows' own sums.

        Neighbouring windows share rows, and the fit makes the sums add to nothing; what either does to their scatter,
        and how many degrees of freedom it leaves (Satterthwaite), follows from the weights, the rows being independent.
        """
        d, g, trust = self.parts(half)
        pulls = np.einsum("kcy,kcy,c->k", d, g, trust)
        model = np.einsum("kcy,lcy,c->kl", g, g, trust)
        total = float(np.trace(model))
        if pulls.size < 2 or not total > 0:
            return float("nan"), float("nan")
        pulls = pulls - np.diag(model) * pulls.sum() / total
        spread = np.zeros((pulls.size, len(self.table)))
        for k, (window, weight) in enumerate(zip(self.windows, self.weights, strict=True)):
            spread[k, window] = weight
        covariance = (spread @ spread.T) * model
        fitted = np.eye(pulls.size) - np.diag(model)[:, None] / total
        left = fitted @ covariance @ fitted.T
        scatter = float(np.trace(left))
        sigma = float(np.sqrt(covariance.sum() / scatter * np.sum(pulls**2))) / total
        return sigma, scatter**2 / float(np.sum(left**2))
