"""Numerical terms: what resolution, the choice of a mask or gaps add, as one common deviation of all outputs each."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import partial
from typing import get_args

import numpy as np
from numpy.typing import ArrayLike
from scipy.optimize import brentq

from wakeledger.confidence.samples import Samples
from wakeledger.confidence.sampling import Seed, draw_blocks, unit_variables
from wakeledger.confidence.sources import Distribution
from wakeledger.core.grid import Array


@dataclass(frozen=True)
class NumericalTerm:
    """One numerical cause that moves all outputs together.

    Attributes
    ----------
    name : str
        Name of the term in the budget.
    standard_uncertainty : ndarray, shape (m,)
        By how much each output moves at one standard deviation of the cause, in the output's unit and **with its
        sign**: outputs that move together have one sign, and so get their covariance. NaN where it is unknown.
    distribution : {"normal", "rectangular", "triangular", "arcsine"}
        Distribution of the cause.
    note : str
        A sentence about how it was found; empty where there is nothing to be said.

    Raises
    ------
    ValueError
        If the distribution is not known or the deviations are not a vector.
    """

    name: str
    standard_uncertainty: Array
    distribution: Distribution = "normal"
    note: str = ""

    def __post_init__(self) -> None:
        allowed = get_args(Distribution)
        if self.distribution not in allowed:
            raise ValueError(f"distribution is {self.distribution!r}; allowed are {', '.join(allowed)}")
        if np.ndim(self.standard_uncertainty) != 1:
            raise ValueError(f"standard_uncertainty has {np.ndim(self.standard_uncertainty)} dimensions; give a vector")


def add_terms(samples: Samples, terms: Sequence[NumericalTerm], *, seed: Seed) -> Samples:
    """Add numerical terms to the draws, one independent variable per term and draw.

    Parameters
    ----------
    samples : Samples
        Draws of m outputs.
    terms : sequence of NumericalTerm
        The terms; an output for which one is NaN becomes unknown, and says so.
    seed : int or sequence of int
        Seed of the survey.

    Returns
    -------
    Samples

    Raises
    ------
    ValueError
        If a term has another number of outputs.
    """
    values = samples.values.copy()
    unknown = list(samples.unknown)
    for term in terms:
        vector = np.asarray(term.standard_uncertainty, dtype=float)
        if vector.shape != (len(samples.names),):
            raise ValueError(f"term {term.name!r} has {vector.size} deviations; there are {len(samples.names)} outputs")
        key = f"term|{(seed,) if isinstance(seed, int) else tuple(seed)}|{term.name}"
        latent = draw_blocks(key, 0, samples.draws, 1, partial(unit_variables, distribution=term.distribution))
        values += latent * np.where(np.isfinite(vector), vector, 0.0)
        for k in np.flatnonzero(~np.isfinite(vector)):
            unknown[k] = unknown[k] or f"the term {term.name!r} is unknown"
    return replace(samples, values=values, unknown=tuple(unknown))


def spread_beyond(differences: ArrayLike, uncertainties: ArrayLike) -> float:
    """Standard deviation of differences from one value beyond their own uncertainties.

    Parameters
    ----------
    differences : array_like, shape (k,)
        Of k values from the one, any unit.
    uncertainties : array_like, shape (k,)
        Standard uncertainty of each difference, that unit.

    Returns
    -------
    float
        τ ≥ 0, that unit; zero where the uncertainties explain the differences.

    Raises
    ------
    ValueError
        If shapes do not fit, nothing is given, or an uncertainty is not known or not positive.

    Notes
    -----
    Σ d_i²/(u_i² + τ²) = k: R. C. Paule and J. Mandel, J. Res. NBS 87 (1982) 377, about a given value instead of the
    mean, so that no degree of freedom is lost.
    """
    d, u = np.asarray(differences, float), np.asarray(uncertainties, float)
    if d.ndim != 1 or d.shape != u.shape or not d.size or not (np.isfinite(d).all() and np.isfinite(u).all()):
        raise ValueError(f"{d.shape} differences with uncertainties of shape {u.shape} have no known spread")
    if u.min() <= 0:
        raise ValueError("an uncertainty is not positive")

    def excess(variance: float) -> float:
        return float(np.sum(d**2 / (u**2 + variance))) - d.size

    if excess(0.0) <= 0:
        return 0.0
    # At the mean square of the differences the sum is below k.
    return float(np.sqrt(brentq(excess, 0.0, float(np.mean(d**2)))))
