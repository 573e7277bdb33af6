"""Point-to-point noise of a gridded channel, estimated from the data themselves."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray
from scipy.special import comb

from wakeledger.core.grid import Array

_ORDER = 6
_CLIP = 3.0
# Variance of a unit normal variable cut off at +-3, 1 - 6 phi(3)/(2 Phi(3) - 1).
_CLIPPED_VARIANCE = 0.9733369
_MAD_TO_SIGMA = 1.482602
_FEWEST = 50
#: The same on a line, whose outer flow has few points.
_FEWEST_ON_A_LINE = 12
_LINE_ORDER = 2
#: Standard errors from which on noise is called correlated: of five channels beside a small wake 0.5 % by chance.
_DEPARTS = 4.5
_LONGEST = 2.0
# Differences of exact data are a few units of rounding.
_ROUNDING = 16 * np.finfo(float).eps


@dataclass(frozen=True)
class NoiseEstimate:
    """Noise of one channel.

    Attributes
    ----------
    standard_deviation : float
        Standard deviation of the noise of one point, in the channel's unit; NaN where it cannot be had, zero for data
        exact to rounding.
    correlation_length_cells : tuple of float
        Correlation length along z and along y, in cells, of noise correlated as exp(-(d/L)²/2); NaN along an axis on
        which it is not told apart from white noise.
    effective_size : float
        Number of independent values that would fix the standard deviation equally well: its relative standard error is
        1/√(2 effective_size).
    axis_standard_deviations : tuple of float
        The estimate from differences along z and along y alone, corrected for the correlation found on that axis.
    reason : str or None
        Why the value is unknown or less certain than its size says.
    """

    standard_deviation: float
    correlation_length_cells: tuple[float, float]
    effective_size: float
    axis_standard_deviations: tuple[float, float]
    reason: str | None = None

    @property
    def is_white(self) -> bool:
        """Whether no correlation between neighbouring points was found along either axis."""
        return all(math.isnan(length) for length in self.correlation_length_cells)


@dataclass(frozen=True)
class _AxisNoise:
    deviation: float
    length: float
    size: float
    beyond: bool = False


def estimate_noise(field: Array, *, mask: NDArray[np.bool_] | None = None) -> NoiseEstimate:
    """Noise of a field from its sixth differences.

    Parameters
    ----------
    field : ndarray, shape (nz, ny)
        One channel on a uniform grid; NaN where there is no value.
    mask : ndarray of bool, shape (nz, ny), optional
        True where the field is to be left out, as in the wake, where the flow itself varies from point to point.

    Returns
    -------
    NoiseEstimate

    Raises
    ------
    ValueError
        If the mask has another shape than the field.

    Notes
    -----
    The sixth difference along an axis, divided by √924, leaves the standard deviation of white noise as it is and
    takes out whatever is a polynomial of fifth degree over seven points. Its spread is the median absolute deviation,
    refined by discarding what lies beyond three standard deviations until nothing changes, so that single wild values
    do not count. White noise through the filter has autocorrelations -6/7 and 15/28 at lags one and two; where either
    is off by more than 4.5 standard errors, the length of exp(-(d/L)²/2) that gives the first is found and the loss of
    such noise in the filter is made good. The two axes are pooled where they agree; else the axis on which
    the noise is white is taken, or the smaller value, since a signal can only add.
    """
    field = np.asarray(field, dtype=float)
    if mask is not None:
        if mask.shape != field.shape:
            raise ValueError(f"mask has shape {mask.shape}; the field has {field.shape}")
        field = np.where(mask, np.nan, field)
    along_z, along_y = _axis_noise(field.T), _axis_noise(field)
    lengths = (along_z.length, along_y.length)
    deviations = (along_z.deviation, along_y.deviation)
    found = [one for one in (along_z, along_y) if one.size >= 1]
    if not found:
        nan = math.nan
        return NoiseEstimate(nan, (nan, nan), 0.0, (nan, nan), f"fewer than {_FEWEST} stretches of seven good points")
    white = [one for one in found if math.isnan(one.length)] or found
    chosen = min(white, key=lambda one: one.deviation)
    deviation, size = chosen.deviation, chosen.size
    if len(white) == 2 and _agree(*white):
        # Differences along z and along y of the same white noise are nearly independent.
        size = white[0].size + white[1].size
        deviation = math.sqrt(sum(one.size * one.deviation**2 for one in white) / size)
    reason = None
    if chosen.beyond:
        reason = f"the noise is correlated over more than {_LONGEST:g} cells; the value is a lower bound"
    elif not math.isnan(chosen.length):
        reason = "neighbouring points share their noise; the value rests on the correlation found"
    return NoiseEstimate(deviation, lengths, size, deviations, reason)


def _agree(one: _AxisNoise, other: _AxisNoise) -> bool:
    if min(one.deviation, other.deviation) == 0:
        return one.deviation == other.deviation
    scatter = math.sqrt(1 / (2 * one.size) + 1 / (2 * other.size))
    return abs(math.log(one.deviation / other.deviation)) < 4 * scatter


def line_noise(position: Array, values: Array, *, skip: NDArray[np.bool_] | None = None) -> NoiseEstimate:
    """Noise of a channel along a line, from how each point departs from its two neighbours.

    Parameters
    ----------
    position : ndarray, shape (n,)
        Places along the line, ascending; any spacing.
    values : ndarray, shape (n,)
        The channel; NaN where there is no value.
    skip : ndarray of bool, shape (n,), optional
        True where it is to be left out, as in the wake.

    Returns
    -------
    NoiseEstimate
        Its second axis is the line, in steps; NaN where fewer than 12 points have both neighbours.

    Notes
    -----
    As `estimate_noise`, with the departure from the straight line between the neighbours, divided by √(1 + a² + b²)
    for their shares a and b, in place of the sixth difference: of even steps it is the second one.
    """
    field = np.array(values, dtype=float)
    if skip is not None:
        field[skip] = np.nan
    nan = math.nan
    found = _AxisNoise(nan, nan, 0.0)
    if field.size >= 3:
        steps = np.diff(position)
        before, after = steps[1:] / (steps[:-1] + steps[1:]), steps[:-1] / (steps[:-1] + steps[1:])
        departures = (before * field[:-2] + after * field[2:] - field[1:-1]) / np.sqrt(1 + before**2 + after**2)
        size = float(np.nanmax(np.abs(field), initial=0.0))
        found = _noise_of_differences(departures[None, :], size, order=_LINE_ORDER, fewest=_FEWEST_ON_A_LINE)
    reason = None
    if not found.size >= 1:
        reason = f"fewer than {_FEWEST_ON_A_LINE} points with both neighbours"
    return NoiseEstimate(found.deviation, (nan, found.length), found.size, (nan, found.deviation), reason)


def _axis_noise(field: Array) -> _AxisNoise:
    """Noise from differences along the last axis."""
    columns = field.shape[1] - _ORDER
    if columns < 3:
        return _AxisNoise(math.nan, math.nan, 0.0)
    weights = comb(_ORDER, np.arange(_ORDER + 1)) * (-1.0) ** np.arange(_ORDER + 1)
    weights /= math.sqrt(float((weights**2).sum()))
    differences = sum(w * field[:, k : k + columns] for k, w in enumerate(weights))
    return _noise_of_differences(differences, float(np.nanmax(np.abs(field), initial=0.0)))


def _noise_of_differences(
    differences: Array, largest: float, *, order: int = _ORDER, fewest: int = _FEWEST
) -> _AxisNoise:
    """Noise from differences of some order along the last axis, that leave the size of white noise as it is."""
    values = differences[np.isfinite(differences)]
    if values.size < fewest:
        return _AxisNoise(math.nan, math.nan, 0.0)
    deviation = _clipped_deviation(values)
    # Errors common to neighbouring lines, as in a traverse row, leave fewer independent values.
    across, _ = _robust_correlation(differences[:-1], differences[1:])
    across = 0.0 if math.isnan(across) else across
    repeated = min((1 + across**2) / max(1 - across**2, 1e-12), float(len(differences)))
    count = values.size / repeated
    white, errors = _white_filter(order)
    lag_one, pairs_one = _robust_correlation(differences[:, :-1], differences[:, 1:])
    lag_two, pairs_two = _robust_correlation(differences[:, :-2], differences[:, 2:])
    # Short stretches have far fewer pairs than values.
    departs = (
        abs(lag_one - white[1]) > _DEPARTS * errors[0] * math.sqrt(repeated / max(pairs_one, 1)),
        abs(lag_two - white[2]) > _DEPARTS * errors[1] * math.sqrt(repeated / max(pairs_two, 1)),
    )
    if deviation <= _ROUNDING * largest:
        return _AxisNoise(0.0, math.nan, count * _independent_share(white))
    if not any(departs) or math.isnan(lag_one):
        return _AxisNoise(deviation, math.nan, count * _independent_share(white))
    lengths, first, gain = _correlated_filter(order)
    length = float(np.interp(lag_one, first, lengths))
    passed = float(np.interp(length, lengths, gain))
    share = _independent_share(_autocovariance(_correlation_at_lags(length, 6 * order), order))
    slope = float(np.interp(lag_one, first, np.gradient(np.log(gain), first))) / 2
    relative_variance = 1 / (2 * count * share) + (slope * errors[0]) ** 2 / count
    return _AxisNoise(deviation / math.sqrt(passed), length, 1 / (2 * relative_variance), lag_one > first[-1])


def _clipped_deviation(values: Array) -> float:
    deviation = _MAD_TO_SIGMA * float(np.median(np.abs(values)))
    for _ in range(30):
        kept = values[np.abs(values) <= _CLIP * deviation]
        refined = math.sqrt(float(np.mean(kept**2)) / _CLIPPED_VARIANCE)
        if abs(refined - deviation) <= 1e-6 * deviation:
            break
        deviation = refined
    return deviation


def _robust_correlation(a: Array, b: Array) -> tuple[float, int]:
    """Correlation from the spreads of sum and difference, and from how many pairs; NaN where they are too few."""
    good = np.isfinite(a) & np.isfinite(b)
    count = int(good.sum())
    if count < _FEWEST:
        return math.nan, count
    plus = _clipped_deviation(a[good] + b[good]) ** 2
    minus = _clipped_deviation(a[good] - b[good]) ** 2
    return (plus - minus) / (plus + minus) if plus + minus > 0 else 0.0, count


def _autocovariance(correlation: Array, order: int) -> Array:
    """Autocovariance at lags 0, 1, 2 … of the filtered noise, from the noise's correlation at lags 0, 1, …."""
    lags = np.arange(-order, order + 1)
    taps = comb(2 * order, lags + order) * (-1.0) ** lags / comb(2 * order, order)
    shifts = np.arange(correlation.size - order)
    result: Array = (taps[None, :] * correlation[np.abs(shifts[:, None] + lags[None, :])]).sum(axis=1)
    return result


def _correlation_at_lags(length: float, count: int) -> Array:
    result: Array = np.exp(-0.5 * (np.arange(count) / length) ** 2)
    return result


def _independent_share(autocovariance: Array) -> float:
    """Independent values per value, for the variance of a sequence with this autocovariance at lags 0, 1, …."""
    rho = autocovariance / autocovariance[0]
    # Cutting at three standard deviations costs a tenth of what the values tell about their variance.
    return 0.9 / float(2 * (rho**2).sum() - 1)


@cache
def _white_filter(order: int) -> tuple[Array, tuple[float, float]]:
    """Autocorrelation of filtered white noise, and Bartlett's standard errors at lags 1 and 2, times √n."""
    correlation = _autocovariance(np.eye(1, 6 * order)[0], order)
    lags = np.arange(1, 3 * order)
    errors = []
    for lag in (1, 2):
        terms = correlation[lags + lag] + correlation[np.abs(lags - lag)] - 2 * correlation[lag] * correlation[lags]
        errors.append(math.sqrt(float((terms**2).sum())))
    return correlation, (errors[0], errors[1])


@cache
def _correlated_filter(order: int) -> tuple[Array, Array, Array]:
    """Correlation lengths in cells, lag-one autocorrelation after the filter, share of the variance that it passes."""
    lengths = np.linspace(0.2, _LONGEST, 181)
    first, gain = np.empty_like(lengths), np.empty_like(lengths)
    for k, length in enumerate(lengths):
        covariance = _autocovariance(_correlation_at_lags(float(length), order + 2), order)
        first[k], gain[k] = covariance[1] / covariance[0], covariance[0]
    return lengths, first, gain
