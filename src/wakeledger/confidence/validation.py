"""Whether first-order propagation may stand for Monte Carlo: the comparison of JCGM 101:2008, clause 8."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from wakeledger.confidence.samples import Samples
from wakeledger.core.grid import Array

#: The comparison is undecided where it fails by less than this many standard errors of the draws.
_DOUBTFUL = 2.0

Agreement = Literal["validated", "not_validated", "undecided", "unknown"]


def numerical_tolerance(uncertainty: float, *, digits: int = 2) -> float:
    """Numerical tolerance δ of a standard uncertainty (JCGM 101:2008, 7.9.2).

    Parameters
    ----------
    uncertainty : float
        Standard uncertainty, positive.
    digits : int
        Significant digits that are meaningful in it.

    Returns
    -------
    float
        Half of the last of these digits' place: u = c × 10^l with an integer c of that many digits, δ = ½ 10^l; NaN
        where the uncertainty is not positive.

    Examples
    --------
    >>> numerical_tolerance(0.00035, digits=2)
    5e-06
    """
    if not uncertainty > 0 or math.isinf(uncertainty):
        return math.nan
    # Through the printed number, so that 0.0996 counts as 0.10 and not as 0.099.
    exponent = int(f"{uncertainty:.{digits - 1}e}".split("e")[1]) - (digits - 1)
    return float(f"5e{exponent - 1}")


@dataclass(frozen=True)
class Comparison:
    """First order held against Monte Carlo, each of shape (m,).

    Attributes
    ----------
    low, high : ndarray
        d_low and d_high: how far the ends of the two 95 % intervals are apart.
    tolerance : ndarray
        δ of the Monte Carlo standard uncertainty.
    sampling : ndarray
        Standard error that the number of draws leaves in the end that is known less well.
    verdict : tuple of {"validated", "not_validated", "undecided", "unknown"}
        Both differences within δ; one beyond it; one beyond it by less than the draws can tell; no interval.
    """

    low: Array
    high: Array
    tolerance: Array
    sampling: Array
    verdict: tuple[Agreement, ...]


def compare_with_samples(
    values: Sequence[float] | Array,
    half_widths: Sequence[float] | Array,
    samples: Samples,
    *,
    digits: int = 2,
    probability: float = 0.95,
    kind: Literal["symmetric", "shortest"] = "symmetric",
) -> Comparison:
    """Compare intervals y ± U of first-order propagation with those of draws.

    Parameters
    ----------
    values, half_widths : array_like, shape (m,)
        y and U.
    samples : Samples
        The draws of the m outputs.
    digits : int
        Significant digits of the standard uncertainty that matter.
    probability : float
        Coverage probability of both.
    kind : {"symmetric", "shortest"}
        Which interval of the draws.

    Returns
    -------
    Comparison
    """
    y, half = np.asarray(values, float), np.asarray(half_widths, float)
    interval, error = samples.interval(probability, kind=kind), samples.sampling_error(probability)
    low, high = np.abs(y - half - interval.low), np.abs(y + half - interval.high)
    tolerance = np.array([numerical_tolerance(float(u), digits=digits) for u in samples.standard_uncertainty])
    sampling = np.maximum(error.low, error.high)
    worst = np.maximum(low, high)
    verdict = tuple(
        _verdict(float(d), float(delta), float(s)) for d, delta, s in zip(worst, tolerance, sampling, strict=True)
    )
    return Comparison(low, high, tolerance, sampling, verdict)


def _verdict(difference: float, tolerance: float, sampling: float) -> Agreement:
    if math.isnan(difference) or math.isnan(tolerance):
        return "unknown"
    if difference <= tolerance:
        return "validated"
    return "undecided" if difference <= tolerance + _DOUBTFUL * sampling else "not_validated"
