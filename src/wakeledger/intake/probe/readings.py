"""What is read beside the holes: the stream at each point, zeros with no flow, and visits to a place already seen.

Pressures are brought to the reference condition by the ratio of dynamic pressures: a point taken while the stream had
the static pressure p_i and the dynamic pressure q_i gives p* = p∞ + (p − p_i) q∞/q_i.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.intake.probe.correction import Correction

#: Readings of the dynamic pressure whose median differs from the reference by more than this factor are refused.
LARGEST_RATIO = 2.0
#: Points are at the same place within this share of the typical step of the traverse.
SAME_PLACE = 0.02
#: The neighbour whose distance counts: rows that are taken twice or three times have nearer ones.
_NEIGHBOUR = 4


def at_reference_condition(
    pressure: Array,
    *,
    dynamic_pressure: Array | None,
    reference_dynamic_pressure: ArrayLike,
    static_pressure: Array | None = None,
    reference_static_pressure: ArrayLike = 0.0,
    relative: bool = True,
) -> Array:
    """Pressures as they would have been had the stream been at the reference condition.

    Parameters
    ----------
    pressure : ndarray, shape (..., n)
        Pressures at the points, Pa: holes, total or static; any leading axes (holes, draws).
    dynamic_pressure : ndarray, shape (..., n), or None
        Reading q_i of the stream's dynamic pressure at each point, Pa; None for a stream that holds the reference's.
    reference_dynamic_pressure, reference_static_pressure : array_like, shape (..., 1) or scalar
        q∞ and p∞, Pa.
    static_pressure : ndarray, shape (..., n), or None
        Reading p_i of the stream's static pressure at each point, Pa, absolute; None for a stream that holds p∞.
        Not used with `relative`.
    relative : bool
        Whether the pressures are differences from the stream's static pressure of the moment, as a transducer open to
        it on its other side reads them. They then stay differences, from p∞.

    Returns
    -------
    ndarray, shape (..., n)
        p* = p∞ + (p − p_i) q∞/q_i; with `relative`, p* − p∞ = (p − p_i) q∞/q_i. Pa.

    Notes
    -----
    Exact for a flow whose dimensionless pressures (p − p∞)/q∞ do not change with the stream's speed and density. The
    density of a normalised point is the reference's; a temperature read in the flow is scaled as T* = T T∞/T_i
    (`temperature_at_reference`).
    """
    if dynamic_pressure is None:
        ratio: Array = np.asarray(1.0)
    else:
        ratio = np.asarray(reference_dynamic_pressure, float) / np.asarray(dynamic_pressure, float)
    if relative:
        return np.asarray(pressure * ratio)
    base = np.asarray(reference_static_pressure, float)
    moment = base if static_pressure is None else np.asarray(static_pressure, float)
    return np.asarray(base + (pressure - moment) * ratio)


def temperature_at_reference(temperature: Array, *, reading: Array, reference_temperature: ArrayLike) -> Array:
    """Temperature T* = T T∞/T_i of a point, K, from the one in the flow and the stream's reading of the moment."""
    return np.asarray(temperature * (np.asarray(reference_temperature, float) / reading))


def stream_at_points(
    *,
    dynamic_pressure: Array,
    reference_density: float,
    static_pressure: Array | None = None,
    temperature: Array | None = None,
    reference_static_pressure: float = math.nan,
    reference_temperature: float = math.nan,
) -> tuple[Array, Array]:
    """Density and speed of the stream while each point was taken.

    Parameters
    ----------
    dynamic_pressure, static_pressure, temperature : ndarray, shape (..., n)
        Readings, Pa and K; what is not read is taken to hold the reference's value.
    reference_density, reference_static_pressure, reference_temperature : float
        The reference condition, kg/m³, Pa, K.

    Returns
    -------
    (ndarray, ndarray)
        rho_i = rho∞ (p_i/p∞)(T∞/T_i), kg/m³, and U_i = sqrt(2 q_i/rho_i), m/s.
    """
    density = np.full(np.shape(dynamic_pressure), reference_density)
    if static_pressure is not None:
        density = density * static_pressure / reference_static_pressure
    if temperature is not None:
        density = density * reference_temperature / temperature
    return density, np.sqrt(2 * dynamic_pressure / density)


def check_dynamic_pressure(readings: Array, reference: float, *, line: NDArray[np.int64] | None = None) -> None:
    """Refuse readings of the stream's dynamic pressure that no point can be normalised by.

    Parameters
    ----------
    readings : ndarray, shape (n,)
        q_i, Pa; NaN where a point has none.
    reference : float
        q∞, Pa.
    line : ndarray of int, shape (n,), optional
        Line of the file of each point, for the message.

    Raises
    ------
    DataError
        If a reading is not positive, or their median is more than a factor of 2 away from the reference.
    """
    remedy = "a stream that was not running cannot normalise a point; leave the points out, or the column"
    bad = np.flatnonzero(readings <= 0)
    if bad.size:
        place = f"line {line[bad[0]]}" if line is not None else f"point {bad[0] + 1}"
        raise DataError(
            f"reference_dynamic_pressure is {readings[bad[0]]:g} Pa ({bad.size} such readings)",
            place=place,
            remedy=remedy,
        )
    if not np.isfinite(readings).any():
        raise DataError("reference_dynamic_pressure has no reading at all", remedy="leave its column out")
    ratio = float(np.nanmedian(readings)) / reference
    if not 1 / LARGEST_RATIO <= ratio <= LARGEST_RATIO:
        raise DataError(
            f"reference_dynamic_pressure is {ratio:.3g} times that of [reference] in the median",
            remedy="check the unit of its column and the speed and density of [reference]",
        )


# -- zeros --------------------------------------------------------------------------------------------------------


def progress(n: int, *, time: Array | None = None, start: float | None = None, end: float | None = None) -> Array:
    """How far the traverse had come at each point, from 0 at the first zero reading to 1 at the last.

    Parameters
    ----------
    n : int
        Number of points.
    time : ndarray, shape (n,), optional
        Time of each point, s; without it, or where all times are equal, the points are taken as evenly spaced.
    start, end : float, optional
        Times of the zero readings, s; the first and last point unless given.

    Returns
    -------
    ndarray, shape (n,)
    """
    if time is None or n < 2 or not np.ptp(time) > 0:
        return np.linspace(0.0, 1.0, n)
    first = float(np.min(time)) if start is None else start
    last = float(np.max(time)) if end is None else end
    return np.asarray((np.asarray(time, float) - first) / (last - first))


def subtract_zeros(pressure: Array, before: ArrayLike, after: ArrayLike | None, done: Array) -> Correction:
    """Hole pressures without the readings the transducers give with no flow.

    Parameters
    ----------
    pressure : ndarray, shape (..., n)
        Readings, Pa: one hole, or the holes on the axis before the last.
    before, after : array_like, shape (..., 1) or scalar
        Readings with no flow before and after the traverse, Pa; after is None where there was only one.
    done : ndarray, shape (n,)
        From `progress`.

    Returns
    -------
    Correction
        p − [z_before + (z_after − z_before) s]; `per_sigma` is hole by hole.

    Notes
    -----
    The drift between the two readings is taken as even. Its standard uncertainty is that of a drift that wanders at
    random between its two known ends (a Brownian bridge), |z_after − z_before| sqrt(s (1 − s)), taken as one error of
    all points. With one reading nothing is known of the drift: `per_sigma` is NaN.
    """
    first = np.asarray(before, float)
    shape = np.broadcast_shapes(np.shape(pressure), (*first.shape[:-1], done.size))
    if after is None:
        size = np.broadcast_to(-first, shape)
        return Correction(pressure + size, size, np.full(shape, np.nan))
    change = np.asarray(after, float) - first
    size = np.broadcast_to(-(first + change * done), shape)
    wander = np.sqrt(np.clip(done * (1 - done), 0.0, None))
    return Correction(pressure + size, size, np.broadcast_to(np.abs(change) * wander, shape))


# -- re-visits ----------------------------------------------------------------------------------------------------


def find_revisits(y: Array, z: Array) -> NDArray[np.int64]:
    """Points that lie where another one was taken earlier or later, with something else in between.

    Parameters
    ----------
    y, z : ndarray, shape (n,)
        Indicated positions in the order in which they were taken, m.

    Returns
    -------
    ndarray of int, shape (n,)
        Number of the place of each point that was visited again, from 0; −1 for all others. Points are at one place
        within 2 % of the typical step, or of the typical distance of neighbours where that is less. Points repeated at
        once, without leaving, say nothing of a drift and are not counted.
    """
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components
    from scipy.spatial import cKDTree

    label = np.full(y.size, -1, dtype=np.int64)
    step = np.hypot(np.diff(y), np.diff(z))
    moving = step[step > 0]
    if not moving.size:
        return label
    tree = cKDTree(np.column_stack([y, z]))
    apart = float(np.median(tree.query(tree.data, min(_NEIGHBOUR + 1, y.size))[0][:, -1]))
    pairs = tree.query_pairs(SAME_PLACE * min(float(np.median(moving)), apart), output_type="ndarray")
    if not pairs.size:
        return label
    graph = coo_array((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(y.size, y.size))
    place = connected_components(graph, directed=False)[1]
    order = np.argsort(place, kind="stable")
    # A place counts when two of its points, in order of time, have others between them.
    left = np.diff(order) > 1
    again = np.unique(place[order[1:]][(np.diff(place[order]) == 0) & left])
    member = np.isin(place, again)
    label[member] = np.searchsorted(again, place[member])
    return label


@dataclass(frozen=True, eq=False)
class Drift:
    """How a quantity that should repeat changed from visit to visit.

    Attributes
    ----------
    rate : ndarray, shape (...)
        Change per second (or per point), in the quantity's unit, as a straight line through the repeats.
    standard_uncertainty : ndarray, shape (...)
        Of the rate; NaN where a single repeat leaves nothing to judge it by.
    repeatability : ndarray, shape (...)
        Standard deviation of one reading about the line: noise, and drift that is not straight; NaN likewise.
    degrees_of_freedom : int
        Of the repeatability.
    places, visits : int
        Number of places that were visited again, and of points taken there.
    """

    rate: Array
    standard_uncertainty: Array
    repeatability: Array
    degrees_of_freedom: int
    places: int
    visits: int

    def change(self, time: Array) -> Array:
        """Drift at each time about the mean over the traverse, shape (..., n)."""
        return self.rate[..., None] * (time - np.mean(time))

    def left_alone(self, time: Array) -> Array:
        """Standard uncertainty of a point, shape (...), if the drift is not corrected.

        The rms over the traverse of the drift and of its rate's uncertainty together, NaN for an unknown one left out.
        """
        spread = float(np.std(time))
        return np.asarray(spread * np.hypot(self.rate, np.nan_to_num(self.standard_uncertainty)))


def estimate_drift(values: Array, time: Array, place: NDArray[np.int64]) -> Drift | None:
    """Drift of a quantity from points taken at the same place at different times.

    Parameters
    ----------
    values : ndarray, shape (..., n)
        The quantity, normalised to the reference condition: total pressure, dynamic pressure.
    time : ndarray, shape (n,)
        Time of each point, s, or its number where no time was kept.
    place : ndarray of int, shape (n,)
        From `find_revisits`.

    Returns
    -------
    Drift or None
        None where no place was visited twice with usable values.

    Notes
    -----
    Least squares of values = (a level for each place) + rate (t − t̄): rate = Σ δt δv/Σ δt², δ from the place's mean.
    """
    usable = (place >= 0) & np.isfinite(values).reshape(-1, place.size).all(axis=0)
    counts = np.bincount(place[usable], minlength=1)
    usable[usable] = counts[place[usable]] > 1
    at = np.flatnonzero(usable)
    if not at.size:
        return None
    _, member = np.unique(place[at], return_inverse=True)
    number = np.bincount(member)
    share = (member[:, None] == np.arange(number.size)) / number
    moments, readings = np.asarray(time, float)[at], np.asarray(values, float)[..., at]
    since = moments - (moments @ share)[member]
    change = readings - (readings @ share)[..., member]
    total = float(since @ since)
    if not total > 0:
        return None
    rate = np.asarray(change @ since / total)
    freedom = int(at.size - number.size - 1)
    left = change - rate[..., None] * since
    scatter = np.asarray(np.sum(left**2, axis=-1))
    repeatability = np.sqrt(scatter / freedom) if freedom > 0 else np.full(rate.shape, np.nan)
    return Drift(rate, repeatability / math.sqrt(total), repeatability, freedom, int(number.size), int(at.size))


def subtract_drift(values: Array, time: Array, drift: Drift) -> Correction:
    """Values without a drift, about its mean over the traverse.

    Parameters
    ----------
    values : ndarray, shape (..., n)
        The quantity that drifted.
    time : ndarray, shape (n,)
        As given to `estimate_drift`.
    drift : Drift
        The drift.

    Returns
    -------
    Correction
        The level is kept on average: it belongs to the zero of the outer flow.
    """
    size = -drift.change(time)
    per_sigma = -drift.standard_uncertainty[..., None] * (time - np.mean(time))
    return Correction(values + size, np.broadcast_to(size, values.shape), np.broadcast_to(per_sigma, values.shape))
