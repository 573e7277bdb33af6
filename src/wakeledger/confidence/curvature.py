"""Curvature counted once: what draws about measured values hold beyond the scatter of the errors.

Let f = f₀ + g·e + ½ eᵀHe with independent errors e of zero mean, unit variance and symmetric distributions, e = 0 being
the truth. Over many surveys the error f(e) − f₀ scatters with V = |g|² + V₂, V₂ the variance of ½ eᵀHe. Whoever has
one survey draws about the values it measured, which hold their errors already: the slope there is g + He, and the
variance of the draws |g + He|² + V₂, on average

    |g|² + E|He|² + V₂ = V + tr(HH),

which is too large by W = tr(HH) = Σ H_ij². For normal errors W = 2 V₂: slopes and draws together count the curvature
three times. For others it differs along single errors: their V₂ is ¼(κ − 1) H_ii², their W is H_ii² whatever the
kurtosis κ. V_draws − W is free of that bias. It may be small by chance, but the scatter is never below V₂.

Of W the curvature along the slope itself, h² = (gᵀHg/|g|²)², is left in. There the error of a survey and its slope go
together, the true interval lies askew about the value, and y ± U95 covers too little already: with one normal error
alone by k⁵φ(k) h²/(4|g|²) less than 95 %, k = 1.96. Shortened, it would cover less still.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from wakeledger.confidence.budget import REMAINDER, Budget, BudgetLine
from wakeledger.confidence.linear_budget import NEGLIGIBLE
from wakeledger.confidence.samples import Samples
from wakeledger.core.grid import Array


def curvature_factor(variance: Array, second: Array, inflation: Array) -> Array:
    """Factor on draws about measured values that makes their variance that of the errors, on average over surveys.

    Parameters
    ----------
    variance : ndarray, shape (m,)
        Of the draws, or by derivatives at the measured values, both orders.
    second : ndarray, shape (m,)
        V₂, variance of the second order; NaN where it is not known.
    inflation : ndarray, shape (m,)
        W − h², what the curvature adds on average to the first order at measured values, but for that along the slope.

    Returns
    -------
    ndarray, shape (m,)
        √(max(V − W + h², V₂)/V); 1 where V₂ is not known, or below 1 % of V.
    """
    counts = (second > NEGLIGIBLE * variance) & np.isfinite(inflation) & (variance > 0)
    least = np.maximum(variance - inflation, second)
    ratio = np.divide(least, variance, out=np.ones(np.shape(variance)), where=counts)
    factor: Array = np.sqrt(np.minimum(ratio, 1.0))
    return factor


def scaled_samples(samples: Samples, factor: Array) -> Samples:
    """Draws whose deviations from their mean are multiplied.

    Parameters
    ----------
    samples : Samples
        Draws of m outputs.
    factor : ndarray, shape (m,)
        From `curvature_factor`.

    Returns
    -------
    Samples
        Standard uncertainties, covariances and intervals follow; the coverage factors stay.
    """
    changed = factor != 1
    if not np.any(changed):
        return samples
    mean = samples.mean
    scaled = np.where(changed, mean + factor * (samples.values - mean), samples.values)
    return replace(samples, values=scaled)


def scaled_budget(budget: Budget, factor: Array, standard_uncertainty: Array) -> Budget:
    """Budget of rows whose draws were scaled.

    Parameters
    ----------
    budget : Budget
        Of the draws as they were.
    factor : ndarray, shape (m,)
        From `curvature_factor`.
    standard_uncertainty : ndarray, shape (m,)
        Of the scaled draws, numerical terms added.

    Returns
    -------
    Budget
        Lines of declared sources by the factor, numerical terms as they were, closed to the new total by the
        remainder; lines that exceed it are scaled. Components, what each error does, stay.
    """
    lines: list[BudgetLine] = []
    for row, ratio, u in zip(budget.rows, factor.tolist(), standard_uncertainty.tolist(), strict=True):
        lines += budget.of(row) if ratio == 1 else _closed(budget.of(row), ratio, u)
    changed = factor != 1
    together = np.where(changed, standard_uncertainty, budget.standard_uncertainty)
    return replace(budget, lines=tuple(lines), standard_uncertainty=together)


def _closed(lines: tuple[BudgetLine, ...], ratio: float, u: float) -> list[BudgetLine]:
    own = [
        (line, (line.standard_uncertainty * (1.0 if line.how == "numerical" else ratio)) ** 2)
        for line in lines
        if line.source != REMAINDER
    ]
    known = float(np.nansum([variance for _, variance in own]))
    shrunk = min(1.0, u**2 / known) if known > 0 else 1.0
    # The largest first, unknown ones last, as before.
    own.sort(key=lambda entry: (np.isnan(entry[1]), -entry[1]))
    rest = max(u**2 - known, 0.0)
    closed = [(line, variance * shrunk) for line, variance in own]
    closed += [(line, rest) for line in lines if line.source == REMAINDER]
    return [
        replace(line, standard_uncertainty=float(np.sqrt(variance)), share=variance / u**2) for line, variance in closed
    ]
