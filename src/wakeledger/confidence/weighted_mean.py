"""Mean of correlated values of one quantity."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import special

from wakeledger.core.grid import Array

_PROBABILITY = 0.95


@dataclass(frozen=True)
class WeightedMean:
    """Best linear unbiased mean.

    Attributes
    ----------
    value : float
        In the values' unit.
    standard_uncertainty : float
        The same unit; scaled up where the values scatter more than 95 % of their kind do.
    weights : ndarray, shape (n,)
        Weight of each value, adding up to 1; strongly correlated values may get negative ones.
    chi_square : float
        Misfit of the values.
    consistent : bool
        Whether they scatter no more than their covariance allows in 95 % of cases.
    """

    value: float
    standard_uncertainty: float
    weights: Array
    chi_square: float
    consistent: bool


def weighted_mean(values: Array, covariance: Array) -> WeightedMean:
    """Mean of correlated values, weighted with their covariance.

    Parameters
    ----------
    values : ndarray, shape (n,)
        Values of one quantity, any unit.
    covariance : ndarray, shape (n, n)
        Their covariance, that unit squared.

    Returns
    -------
    WeightedMean

    Raises
    ------
    ValueError
        If shapes do not fit or a value is not finite.

    Notes
    -----
    m = (1ᵀV⁻¹x)/(1ᵀV⁻¹1), u² = 1/(1ᵀV⁻¹1) (Gauss-Markov), times χ²/(n − 1) where the values are not consistent.
    """
    x, v = np.asarray(values, float), np.asarray(covariance, float)
    if x.ndim != 1 or v.shape != (x.size, x.size) or not (np.isfinite(x).all() and np.isfinite(v).all()):
        raise ValueError(f"{x.shape} values with a covariance of shape {v.shape} have no weighted mean")
    inverse = np.linalg.pinv(v, hermitian=True)
    weights = inverse.sum(axis=0) / inverse.sum()
    mean = float(weights @ x)
    misfit = float((x - mean) @ inverse @ (x - mean))
    free = x.size - 1
    consistent = free == 0 or misfit <= float(special.chdtri(free, 1 - _PROBABILITY))
    variance = float(weights @ v @ weights)
    return WeightedMean(
        mean, float(np.sqrt(variance * (1 if consistent else misfit / free))), weights, misfit, consistent
    )
