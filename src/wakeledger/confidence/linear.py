"""First-order propagation of uncertainty with covariance (GUM, JCGM 100:2008, 5 and G.4)."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import stdtrit

from wakeledger.core.errors import InputError
from wakeledger.core.grid import Array


@dataclass(frozen=True)
class LinearPropagation:
    """Result of the law of propagation of uncertainty.

    Attributes
    ----------
    components : ndarray, shape (m, n)
        c_i u(x_i) for each output and input, with the sign of the sensitivity.
    covariance : ndarray, shape (m, m)
        Covariance of the outputs.
    degrees_of_freedom : ndarray, shape (n,)
        Degrees of freedom of the inputs.
    correlated : bool
        Whether the inputs are correlated.
    """

    components: Array
    covariance: Array
    degrees_of_freedom: Array
    correlated: bool

    @property
    def standard_uncertainty(self) -> Array:
        """Combined standard uncertainty of each output, shape (m,)."""
        return np.sqrt(np.diag(self.covariance))

    @property
    def correlation(self) -> Array:
        """Correlation of the outputs, shape (m, m)."""
        u = self.standard_uncertainty
        return self.covariance / np.outer(u, u)

    def effective_degrees_of_freedom(self) -> Array:
        """Effective degrees of freedom ν_eff = u_c⁴/Σ(u_i⁴/ν_i) (Welch and Satterthwaite; GUM G.2b).

        Returns
        -------
        ndarray, shape (m,)
            Infinite where every contributing input is known exactly. Tables are entered with the next lower integer
            (GUM G.6.4).

        Raises
        ------
        InputError
            If the inputs are correlated: the formula holds for independent inputs only.
        """
        if self.correlated:
            raise InputError(
                "effective degrees of freedom were asked for correlated inputs",
                remedy="the Welch-Satterthwaite formula needs independent ones; "
                "take the coverage interval from a Monte Carlo run",
            )
        return welch_satterthwaite(self.components**2, self.degrees_of_freedom)


def welch_satterthwaite(variances: ArrayLike, degrees_of_freedom: ArrayLike) -> Array:
    """Effective degrees of freedom ν_eff = (Σ u_i²)²/Σ(u_i⁴/ν_i) of a sum of independent contributions (GUM G.2b).

    Parameters
    ----------
    variances : array_like, shape (..., n)
        u_i², the contributions to the variance of each output.
    degrees_of_freedom : array_like, shape (n,)
        Of each contribution; infinite where its size is taken as exact.

    Returns
    -------
    ndarray, shape (...)
        Infinite where every contribution is taken as exact; NaN where one is unknown.
    """
    squares, freedom = np.asarray(variances, dtype=float), np.asarray(degrees_of_freedom, dtype=float)
    total, loss = squares.sum(axis=-1), (squares**2 / freedom).sum(axis=-1)
    nu: Array = np.where(loss > 0, total**2 / np.where(loss > 0, loss, 1.0), np.where(np.isnan(loss), np.nan, math.inf))
    return nu


def propagate(
    sensitivities: ArrayLike,
    uncertainties: ArrayLike,
    *,
    correlation: ArrayLike | None = None,
    degrees_of_freedom: ArrayLike | None = None,
) -> LinearPropagation:
    """Combine standard uncertainties by given sensitivities.

    Parameters
    ----------
    sensitivities : array_like, shape (m, n) or (n,)
        Derivatives of the m outputs with respect to the n inputs.
    uncertainties : array_like, shape (n,)
        Standard uncertainties of the inputs.
    correlation : array_like, shape (n, n), optional
        Correlation coefficients of the inputs; independent when left out.
    degrees_of_freedom : array_like, shape (n,), optional
        Of each input's uncertainty; infinite when left out.

    Returns
    -------
    LinearPropagation

    Raises
    ------
    InputError
        If the shapes do not fit, an uncertainty is negative, or the correlation is not symmetric with ones on its
        diagonal and nothing beyond ±1.

    Notes
    -----
    U_y = C U_x Cᵀ (GUM, 5.2.2, for each output and pair of outputs).
    """
    c = np.atleast_2d(np.asarray(sensitivities, dtype=float))
    u = np.asarray(uncertainties, dtype=float)
    if u.shape != c.shape[1:]:
        raise InputError(
            f"{u.size} uncertainties and {c.shape[1]} sensitivities were given", remedy="give one for each"
        )
    if (u < 0).any():
        raise InputError(f"a standard uncertainty is negative: {u.min():g}", remedy="give it without a sign")
    nu = np.full(u.shape, math.inf) if degrees_of_freedom is None else np.asarray(degrees_of_freedom, dtype=float)
    if nu.shape != u.shape or not (nu > 0).all():
        raise InputError(f"degrees of freedom are {nu}", remedy="give a positive number for each input")
    r = np.eye(u.size) if correlation is None else np.asarray(correlation, dtype=float)
    if r.shape != (u.size, u.size) or not (
        np.allclose(r, r.T, rtol=0, atol=1e-12)
        and np.allclose(np.diag(r), 1, rtol=0, atol=1e-12)
        and (np.abs(r) <= 1 + 1e-12).all()
    ):
        raise InputError(
            f"the correlation matrix of shape {r.shape} is not one",
            remedy=f"give {u.size} x {u.size} coefficients, symmetric, 1 on the diagonal, none beyond 1",
        )
    components = c * u
    correlated = bool((np.abs(r - np.diag(np.diag(r))) > 0).any())
    return LinearPropagation(components, components @ r @ components.T, nu, correlated)


def sensitivities(function: Callable[[Array], ArrayLike], values: ArrayLike, uncertainties: ArrayLike) -> Array:
    """Sensitivities by shifting each input by plus and minus its standard uncertainty (GUM, 5.1.3, note 2).

    Parameters
    ----------
    function : callable
        Takes the inputs, shape (n,), gives the outputs, shape (m,) or one number.
    values, uncertainties : array_like, shape (n,)
        Where, and by how much; an input with no uncertainty has sensitivity zero.

    Returns
    -------
    ndarray, shape (m, n)
    """
    x, u = np.asarray(values, dtype=float), np.asarray(uncertainties, dtype=float)
    columns = []
    for step in np.diag(u):
        rise = np.atleast_1d(np.asarray(function(x + step), dtype=float))
        fall = np.atleast_1d(np.asarray(function(x - step), dtype=float))
        width = 2 * step.sum()
        columns.append((rise - fall) / width if width else np.zeros_like(rise))
    return np.stack(columns, axis=1)


def second_order_variance(function: Callable[[Array], ArrayLike], values: ArrayLike, uncertainties: ArrayLike) -> Array:
    """Second-order terms of the variance for independent normal inputs (GUM, 5.1.2, note).

    Parameters
    ----------
    function : callable
        Takes the inputs, shape (n,), gives the outputs, shape (m,) or one number.
    values, uncertainties : array_like, shape (n,)
        Where, and the standard uncertainties, which are the steps.

    Returns
    -------
    ndarray, shape (m,)
        Σ_ij (½ f_ij² + f_i f_ijj) u_i² u_j², to be added to the first-order variance.

    Notes
    -----
    Exact for polynomials of second degree. Inputs with no uncertainty take no part.
    """
    x, u = np.asarray(values, dtype=float), np.asarray(uncertainties, dtype=float)
    steps = [step for step in np.diag(u) if step.any()]

    def at(*moves: Array) -> Array:
        return np.atleast_1d(np.asarray(function(x + sum(moves, np.zeros(x.size))), dtype=float))

    still = at()
    total = np.zeros_like(still)
    for first in steps:
        slope = (at(first) - at(-first)) / 2
        for other in steps:
            if first is other:
                mixed = at(first) + at(-first) - 2 * still
                bent = (at(2 * first) - at(-2 * first)) / 2 - 2 * slope
            else:
                corners = [at(a * first, b * other) for a, b in ((1, 1), (1, -1), (-1, 1), (-1, -1))]
                mixed = (corners[0] - corners[1] - corners[2] + corners[3]) / 4
                bent = (corners[0] + corners[1] - corners[2] - corners[3]) / 2 - 2 * slope
            total = total + 0.5 * mixed**2 + slope * bent
    return total


def coverage_factor(probability: float = 0.95, *, degrees_of_freedom: float = math.inf) -> float:
    """Factor k of U = k u for a two-sided interval, from Student's t (GUM G.3).

    Parameters
    ----------
    probability : float
        Coverage probability.
    degrees_of_freedom : float
        Degrees of freedom; infinite for the normal distribution.

    Returns
    -------
    float

    Raises
    ------
    ValueError
        If the probability is not between 0 and 1 or the degrees of freedom are not positive.

    Examples
    --------
    >>> round(coverage_factor(0.99, degrees_of_freedom=16), 2)
    2.92
    """
    if not 0 < probability < 1:
        raise ValueError(f"probability is {probability}; give a number between 0 and 1")
    if not degrees_of_freedom > 0:
        raise ValueError(f"degrees_of_freedom is {degrees_of_freedom}; give a positive number")
    return float(stdtrit(min(degrees_of_freedom, 1e10), (1 + probability) / 2))
