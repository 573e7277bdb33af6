"""Repeats of one measurement: their weighted mean, and the scatter between them beyond what was declared."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy.optimize import brentq
from scipy.special import chdtrc, chdtri

from wakeledger.core.grid import Array

#: Chance of a scatter as large as the one found, or as small, below which it is said not to be the declared one.
SIGNIFICANT = 0.05


@dataclass(frozen=True)
class RepeatedMean:
    """What k repeats come to.

    Attributes
    ----------
    mean : float
        Weighted mean.
    weights : ndarray, shape (k,)
        Weights, which add up to 1.
    between : float
        Standard deviation between the repeats beyond what was declared, 0 where none is seen.
    between_upper : float
        Largest one that the scatter does not speak against (97.5 %).
    chi_square : float
        Σ(y_i - ȳ)²/p_i about the mean weighted with 1/p_i.
    degrees_of_freedom : int
        k - 1.
    chance : float
        Probability that the declared uncertainties alone give a chi-square as large.
    """

    mean: float
    weights: Array
    between: float
    between_upper: float
    chi_square: float
    degrees_of_freedom: int
    chance: float

    @property
    def birge_ratio(self) -> float:
        """√(χ²/(k - 1)) (R. T. Birge, Phys. Rev. 40 (1932) 207): about 1 where the declared uncertainties are right."""
        return math.sqrt(self.chi_square / self.degrees_of_freedom)

    @property
    def verdict(self) -> str:
        """``larger``, ``smaller`` or ``consistent``: the scatter beside the declared one; ``unknown`` without any."""
        if math.isnan(self.chance):
            return "unknown"
        if self.chance < SIGNIFICANT / 2:
            return "larger"
        return "smaller" if self.chance > 1 - SIGNIFICANT / 2 else "consistent"


def repeated_mean(values: ArrayLike, variances: ArrayLike) -> RepeatedMean:
    """Weighted mean of repeats with the variance between them estimated.

    Parameters
    ----------
    values : array_like, shape (k,)
        What the repeats gave.
    variances : array_like, shape (k,)
        Declared variance of each from errors of its own, p_i: what all repeats share is not in it. NaN where it is not
        known.

    Returns
    -------
    RepeatedMean
        Where a variance is not known the weights are equal, ``between`` is the whole standard deviation of the values,
        and nothing is said about consistency.

    Raises
    ------
    ValueError
        If there are fewer than two values, or not one variance for each.

    Notes
    -----
    The weights are 1/(p_i + τ²), with the τ² ≥ 0 for which Σ(y_i - ȳ)²/(p_i + τ²) = k - 1 (R. C. Paule and J. Mandel,
    J. Res. NBS 87 (1982) 377); its upper bound is where the sum is the 2.5 % quantile of χ² (W. Viechtbauer, Stat. Med.
    26 (2007) 37).
    """
    y, p = np.asarray(values, dtype=float), np.asarray(variances, dtype=float)
    if y.ndim != 1 or y.size < 2 or p.shape != y.shape:
        raise ValueError(
            f"values have shape {y.shape}, variances {p.shape}; give at least two, and one variance for each"
        )
    nu = y.size - 1
    whole = float(np.var(y, ddof=1))
    equal = np.full(y.size, 1 / y.size)
    if not np.isfinite(p).all():
        unknown = math.nan
        return RepeatedMean(float(y.mean()), equal, math.sqrt(whole), unknown, unknown, nu, unknown)

    def excess(between: float) -> float:
        weights = 1 / (p + between)
        mean = (weights * y).sum() / weights.sum()
        return float((weights * (y - mean) ** 2).sum())

    exact = bool((p == 0).any())
    chi_square = math.inf if exact and whole > 0 else 0.0 if whole == 0 else excess(0.0)
    between = _between(excess, chi_square, float(nu), whole)
    limit = float(chdtri(nu, 1 - SIGNIFICANT / 2))
    upper = _between(excess, chi_square, limit, whole * nu / limit)
    weights = (p == 0).astype(float) if exact and between == 0 else 1 / (p + between)
    weights = weights / weights.sum()
    chance = float(chdtrc(nu, chi_square)) if math.isfinite(chi_square) else 0.0
    return RepeatedMean(
        float((weights * y).sum()), weights, math.sqrt(between), math.sqrt(upper), chi_square, nu, chance
    )


def _between(excess: Callable[[float], float], chi_square: float, wanted: float, largest: float) -> float:
    """Variance between the repeats at which the sum of squares is as wanted; 0 where it is below that without any."""
    if chi_square <= wanted:
        return 0.0
    # At `largest` the sum about the plain mean, which the weighted one's is never above, is as wanted for p = 0.
    return float(brentq(lambda t: excess(t) - wanted, 1e-12 * largest, largest * (1 + 1e-9), rtol=1e-12))
