"""What a Monte Carlo run gives: values per draw, and the figures that follow from them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array

#: Largest fraction of draws without a value at which the others still speak for all.
FAILED_FRACTION = 0.01


@dataclass(frozen=True)
class Interval:
    """A coverage interval for each output.

    Attributes
    ----------
    low, high : ndarray, shape (m,)
        Ends of the interval, in each output's unit; NaN where unknown.
    probability : float
        Coverage probability.
    """

    low: Array
    high: Array
    probability: float

    @property
    def half_width(self) -> Array:
        """Half the length, shape (m,)."""
        return (self.high - self.low) / 2


@dataclass(frozen=True)
class SamplingError:
    """Standard errors that the finite number of draws leaves, each of shape (m,).

    Attributes
    ----------
    mean, standard_uncertainty : ndarray
        Of `Samples.mean` and `Samples.standard_uncertainty`.
    low, high, coverage_factor : ndarray
        Of the ends of the symmetric interval and of `Samples.coverage_factor`.
    """

    mean: Array
    standard_uncertainty: Array
    low: Array
    high: Array
    coverage_factor: Array


@dataclass(frozen=True)
class Samples:
    """Values of every output in every draw.

    Attributes
    ----------
    names : tuple of str
        Names of the m outputs.
    values : ndarray, shape (draws, m)
        One row per draw; NaN where a draw gave no value.
    unknown : tuple of (str or None)
        Why nothing can be said about an output, None where something can; taken from the failures when left out.

    Notes
    -----
    Statistics are those of the draws in which every known output has a value. An output of which 1 % of the draws or
    more have none is unknown: its figures are NaN and `unknown` says why.
    """

    names: tuple[str, ...]
    values: Array
    unknown: tuple[str | None, ...] = ()

    def __post_init__(self) -> None:
        if self.values.ndim != 2 or self.values.shape[1] != len(self.names):
            raise ValueError(f"values has shape {self.values.shape}; (draws, {len(self.names)}) is needed")
        if len(self.values) < 2:
            raise ValueError(f"{len(self.values)} draws were given; at least 2 are needed")
        given = self.unknown or (None,) * len(self.names)
        draws = len(self.values)
        reasons = tuple(
            reason or (f"{count} of {draws} draws gave no value" if count >= FAILED_FRACTION * draws else None)
            for reason, count in zip(given, self.failed.tolist(), strict=True)
        )
        object.__setattr__(self, "unknown", reasons)

    @property
    def draws(self) -> int:
        """Number of draws."""
        return len(self.values)

    @cached_property
    def failed(self) -> NDArray[np.int64]:
        """How many draws gave no finite value, shape (m,)."""
        count: NDArray[np.int64] = (~np.isfinite(self.values)).sum(axis=0)
        return count

    @cached_property
    def known(self) -> NDArray[np.bool_]:
        """Which outputs have figures, shape (m,)."""
        return np.array([reason is None for reason in self.unknown], dtype=bool)

    @cached_property
    def used(self) -> Array:
        """The draws that count, shape (k, m); columns of unknown outputs are NaN."""
        whole = np.isfinite(self.values[:, self.known]).all(axis=1)
        used: Array = np.where(self.known, self.values[whole], np.nan)
        return used

    @cached_property
    def deviations(self) -> Array:
        """`used` minus its mean, shape (k, m): exactly zero for an output that does not vary."""
        # Taking the first draw off before the mean keeps a constant exactly constant.
        shifted = self.used - self.used[0]
        deviations: Array = shifted - shifted.mean(axis=0)
        return deviations

    @cached_property
    def mean(self) -> Array:
        """Mean of each output, shape (m,)."""
        first = self.used[0]
        mean: Array = first + (self.used - first).mean(axis=0)
        return mean

    @cached_property
    def covariance(self) -> Array:
        """Covariance of the outputs, shape (m, m)."""
        covariance: Array = self.deviations.T @ self.deviations / (len(self.used) - 1)
        return covariance

    @cached_property
    def standard_uncertainty(self) -> Array:
        """Standard deviation of each output, shape (m,)."""
        return np.sqrt(np.diag(self.covariance))

    def interval(self, probability: float = 0.95, *, kind: Literal["symmetric", "shortest"] = "symmetric") -> Interval:
        """Coverage interval of each output.

        Parameters
        ----------
        probability : float
            Coverage probability p.
        kind : {"symmetric", "shortest"}
            Leave (1 - p)/2 out at each end, or take the shortest interval that holds the fraction p
            (JCGM 101:2008, 7.7).

        Returns
        -------
        Interval

        Raises
        ------
        ValueError
            If the probability is not between 0 and 1, or the kind is not known.
        """
        _check_probability(probability)
        if kind == "symmetric":
            # numpy's default lies inside the distribution's own quantiles: with 150 draws it would hold 93.7 %.
            ends = [(1 - probability) / 2, (1 + probability) / 2]
            low, high = np.quantile(self.used, ends, axis=0, method="median_unbiased")
            return Interval(low, high, probability)
        if kind != "shortest":
            raise ValueError(f"kind is {kind!r}; allowed are symmetric, shortest")
        ordered = np.sort(self.used, axis=0)
        held = min(int(probability * len(ordered) + 0.5), len(ordered) - 1)
        lengths = ordered[held:] - ordered[:-held]
        first = np.where(self.known, np.argmin(np.nan_to_num(lengths, nan=math.inf), axis=0), 0)
        columns = np.arange(len(self.names))
        return Interval(ordered[first, columns], ordered[first + held, columns], probability)

    def coverage_factor(self, probability: float = 0.95) -> Array:
        """Half-width of the symmetric interval over the standard uncertainty, shape (m,); NaN where that is zero.

        Parameters
        ----------
        probability : float
            Coverage probability.

        Returns
        -------
        ndarray, shape (m,)

        Raises
        ------
        ValueError
            If the probability is not between 0 and 1.
        """
        u = self.standard_uncertainty
        half = self.interval(probability).half_width
        factor: Array = np.divide(half, u, out=np.full(u.shape, np.nan), where=u > 0)
        return factor

    def sampling_error(self, probability: float = 0.95) -> SamplingError:
        """Standard errors of the figures from the number of draws.

        Parameters
        ----------
        probability : float
            Coverage probability of the interval.

        Returns
        -------
        SamplingError

        Raises
        ------
        ValueError
            If the probability is not between 0 and 1.

        Notes
        -----
        Mean: u/√M. Standard deviation: √((μ₄ - u⁴)/M)/(2u), with the fourth central moment μ₄ of the draws. Ends of the
        interval: half the distance between the order statistics one binomial standard deviation to either side. The
        coverage factor's takes the ends as independent and u as known, which errs on the large
        side, as do all of them where few systematic errors, drawn in strata, rule.
        """
        _check_probability(probability)
        count = len(self.used)
        u = self.standard_uncertainty
        fourth = (self.deviations**4).mean(axis=0)
        spread = np.sqrt(np.maximum(fourth - u**4, 0) / count)
        u_error = np.where(u == 0, 0.0, np.divide(spread, 2 * u, out=np.full(u.shape, np.nan), where=u > 0))
        ends = []
        for level in ((1 - probability) / 2, (1 + probability) / 2):
            step = math.sqrt(level * (1 - level) / count)
            below, above = np.quantile(self.used, [max(level - step, 0.0), min(level + step, 1.0)], axis=0)
            ends.append((above - below) / 2)
        half = np.hypot(ends[0], ends[1]) / 2
        factor = np.divide(half, u, out=np.full(u.shape, np.nan), where=u > 0)
        return SamplingError(u / math.sqrt(count), u_error, ends[0], ends[1], factor)


def _check_probability(probability: float) -> None:
    if not 0 < probability < 1:
        raise ValueError(f"probability is {probability}; give a number between 0 and 1")
