"""The budget: what each source contributes to the uncertainty of each row, closing to the total."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Literal

import numpy as np

from wakeledger.confidence.components import (
    MEASURED,
    Component,
    scatter,
    shifted_components,
    term_components,
)
from wakeledger.confidence.linear_budget import Slopes
from wakeledger.confidence.montecarlo import Evaluate, Progress, sample
from wakeledger.confidence.point_errors import PointErrors, point_errors, predicted, shifted_point_errors
from wakeledger.confidence.samples import Samples
from wakeledger.confidence.sampling import ErrorSampler, Seed, SourceErrors
from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.confidence.terms import NumericalTerm, add_terms
from wakeledger.core.grid import Array

if TYPE_CHECKING:
    import pandas as pd
    import xarray as xr

#: Name of the line that closes the budget.
REMAINDER = "remainder"

#: A source with no more independent errors than this is shifted error by error instead of being drawn.
FEW_ERRORS = 8

#: The same for a source with a shared identity, so that each of its errors can be followed to other surveys.
FEW_SHARED_ERRORS = 40

How = Literal["sensitivities", "monte_carlo", "numerical", "remainder"]


@dataclass(frozen=True)
class BudgetLine:
    """One source's part in the uncertainty of one row.

    Attributes
    ----------
    row : str
        Name of the row.
    source : str
        Name of the source, or ``remainder``.
    standard_uncertainty : float
        What the row's standard uncertainty would be from this source alone, in the row's unit; NaN where unknown.
    share : float
        Its square over the square of the row's standard uncertainty; NaN where either is unknown.
    how : {"sensitivities", "monte_carlo", "numerical", "remainder"}
        How it was found.
    shift : float
        By how much this source alone moves the mean of the row, second order; NaN unless found by sensitivities.
    """

    row: str
    source: str
    standard_uncertainty: float
    share: float
    how: How
    shift: float = math.nan


@dataclass(frozen=True)
class Budget:
    """Budgets of all rows.

    Attributes
    ----------
    rows : tuple of str
        Names of the rows.
    lines : tuple of BudgetLine
        Row by row, the largest first and the remainder last. The squares of a row's lines add up to the square of its
        standard uncertainty.
    standard_uncertainty : ndarray, shape (m,)
        Of each row, all sources and numerical terms together; NaN where unknown.
    scale : ndarray, shape (m,)
        Factor by which the variances of the lines were reduced because together they exceeded the total, as they can
        through sampling or through sources that partly cancel; 1 where they did not.
    components : tuple of Component
        Every error that was shifted by itself and every numerical term, with its signed effect on the rows.
    points : tuple of PointErrors
        Errors of points or rows that have a shared identity, with their effects on the rows.
    scatter : ndarray, shape (m, m), or None
        Covariance of the rows that all these leave unexplained (`wakeledger.confidence.components.scatter`).
    """

    rows: tuple[str, ...]
    lines: tuple[BudgetLine, ...]
    standard_uncertainty: Array
    scale: Array
    components: tuple[Component, ...] = ()
    points: tuple[PointErrors, ...] = ()
    scatter: Array | None = None

    def of(self, row: str) -> tuple[BudgetLine, ...]:
        """The lines of one row, the largest first.

        Parameters
        ----------
        row : str
            Name of the row.

        Returns
        -------
        tuple of BudgetLine

        Raises
        ------
        KeyError
            If there is no such row.
        """
        if row not in self.rows:
            raise KeyError(row)
        return tuple(line for line in self.lines if line.row == row)

    def to_dataframe(self) -> pd.DataFrame:
        """The lines as a table, one column for each of their attributes."""
        import pandas as pd

        columns = ("row", "source", "standard_uncertainty", "share", "how", "shift")
        return pd.DataFrame({name: [getattr(line, name) for line in self.lines] for name in columns})

    def to_dataset(self) -> xr.Dataset:
        """The lines as arrays over (row, source), sources in order of first appearance."""
        table = self.to_dataframe()
        sources = list(dict.fromkeys(table["source"]))
        indexed = table.set_index(["row", "source"])[["standard_uncertainty", "share", "shift"]]
        return indexed.to_xarray().reindex(row=list(self.rows), source=sources)


@dataclass(frozen=True)
class _Part:
    name: str
    how: How
    variance: Array
    shift: Array


def make_budget(
    evaluate: Evaluate,
    sources: Sequence[Source],
    layouts: Mapping[str, InputLayout],
    samples: Samples,
    *,
    seed: Seed,
    terms: Sequence[NumericalTerm] = (),
    slopes: Slopes | None = None,
    draws: int = 200,
    batch: int = 16,
    workers: int = 2,
    progress: Progress | None = None,
) -> Budget:
    """Split the uncertainty found by `wakeledger.confidence.montecarlo.run` by source.

    Parameters
    ----------
    evaluate, sources, layouts, seed
        As they were given to `run`.
    samples : Samples
        What `run` gave.
    terms : sequence of NumericalTerm
        Numerical terms; the total is that of ``add_terms(samples, terms, seed=seed)``.
    slopes : Slopes, optional
        Derivatives of the outputs, for the errors of points that other surveys share; these are shifted one by one
        where there are no derivatives.
    draws : int
        Draws for each source with many errors.
    batch, workers : int
        As in `run`.
    progress : callable, optional
        Called with the evaluations done and their number.

    Returns
    -------
    Budget

    Raises
    ------
    SurveyError
        If a source cannot act on these inputs.

    Notes
    -----
    A source with up to `FEW_ERRORS` independent errors is shifted by plus and minus one standard deviation of each:
    with a = (f₊ - f₋)/2 and b = (f₊ + f₋)/2 - f₀ it contributes a² + (κ - 1) b², which is exact for a quadratic (κ is
    the kurtosis of the error), and shifts the mean by b. Other sources are drawn by themselves, with the very errors
    they had in the run. Their sample variance V_i is corrected by β(V - V'), where V and V' are the variances of all
    draws of the run and of the same first ones, and β is the regression of the squared deviations on those of the run:
    the sampling error that a dominant source shares with the run drops out. What is missing to the total is the
    remainder, from interaction between sources and from sampling. Where the lines exceed the total they are scaled to
    it and `scale` says by how much.
    """
    sampler = ErrorSampler(sources, layouts, seed=seed)
    few = [one for one in sampler.by_source if _is_few(one)]
    many = [one for one in sampler.by_source if not _is_few(one)]
    draws = min(draws, samples.draws)
    counts = [1 + 2 * sum(one.latents for one in few)] if few else []
    redrawn = 0 if len(sampler.by_source) == 1 else len(many)
    total_count, done = sum(counts) + redrawn * draws, 0

    def report(part: int, _: int) -> None:
        if progress is not None:
            progress(done + part, total_count)

    parts: list[_Part] = []
    components: tuple[Component, ...] = ()
    if few:
        components = shifted_components(
            evaluate, sampler, few, len(samples.names), batch=batch, workers=workers, progress=report
        )
        parts += [_shifted(one, [part for part in components if part.source == one.source.name]) for one in few]
        done += counts[0]
    for one in many:
        if redrawn:

            def draw(start: int, stop: int, one: SourceErrors = one) -> dict[str, Array]:
                return sampler.zeros(stop - start) | one.draw(start, stop)

            values = sample(evaluate, draw, len(samples.names), draws, batch, workers, report)
            done += draws
        else:
            values = samples.values
        parts.append(_drawn(one.source.name, values, samples))
    nothing = np.full(len(samples.names), np.nan)
    parts += [_Part(term.name, "numerical", np.square(term.standard_uncertainty), nothing) for term in terms]
    budget = _close(samples.names, add_terms(samples, terms, seed=seed).standard_uncertainty ** 2, parts)
    points: list[PointErrors] = []
    for one in many:
        if slopes is not None:
            points += point_errors(one, slopes, layouts)
        else:
            points += shifted_point_errors(evaluate, sampler, one, len(samples.names), batch=batch, workers=workers)
    left = scatter(samples, few, components, predicted=predicted(many, points, samples.draws) if points else None)
    return replace(budget, components=(*components, *term_components(terms)), points=tuple(points), scatter=left)


def with_scaled_scatter(budget: Budget, factor: Array) -> Budget:
    """A budget whose scatter is what single errors leave of draws that were scaled.

    Parameters
    ----------
    budget : Budget
        With the scatter of the draws as they were.
    factor : ndarray, shape (m,)
        By what the draws' deviations from their mean were multiplied.

    Returns
    -------
    Budget
        With the scatter that makes the variance of all errors the factor's square of what it was, or none.
    """
    if budget.scatter is None or not np.any(factor != 1):
        return budget
    own = np.diag(budget.scatter)
    followed = np.zeros(own.shape)
    for one in budget.components:
        if one.kind == MEASURED:
            followed = followed + one.variance
    for each in budget.points:
        followed = followed + each.variance
    wanted = np.maximum(factor**2 * (followed + own) - followed, 0.0)
    scale = np.sqrt(np.divide(wanted, own, out=np.ones(own.shape), where=(factor != 1) & (own > 0)))
    return replace(budget, scatter=budget.scatter * np.outer(scale, scale))


def _is_few(one: SourceErrors) -> bool:
    if one.source.shared_id is None:
        return one.latents <= FEW_ERRORS
    # Errors of points or rows are followed together (`wakeledger.confidence.point_errors`).
    return one.followed and one.latents <= FEW_SHARED_ERRORS


def _shifted(one: SourceErrors, components: Sequence[Component]) -> _Part:
    """Contribution of a source whose errors were shifted one by one."""
    linear = np.stack([part.linear for part in components])
    curved = np.stack([part.curved for part in components])
    # A t with few degrees of freedom has no fourth moment; the normal one stands in and the remainder has the rest.
    kurtosis = one.source.kurtosis if math.isfinite(one.source.kurtosis) else 3.0
    variance = (linear**2 + (kurtosis - 1) * curved**2).sum(axis=0)
    return _Part(one.source.name, "sensitivities", variance, curved.sum(axis=0))


def _drawn(name: str, values: Array, samples: Samples) -> _Part:
    """Contribution by the source's own draws, with the run's as control."""
    own = Samples(samples.names, values)
    variance = own.standard_uncertainty**2
    whole = np.isfinite(values).all(axis=1) & np.isfinite(samples.values[: len(values)]).all(axis=1)
    if len(values) < samples.draws and whole.sum() >= 2:
        alone, together = values[whole], samples.values[: len(values)][whole]
        squares = np.square(alone - alone.mean(axis=0))
        control = np.square(together - together.mean(axis=0))
        control_deviation = control - control.mean(axis=0)
        power = (control_deviation**2).sum(axis=0)
        product = ((squares - squares.mean(axis=0)) * control_deviation).sum(axis=0)
        slope = np.clip(np.divide(product, power, out=np.zeros_like(power), where=power > 0), 0, 1)
        corrected = variance + slope * (samples.standard_uncertainty**2 - together.var(axis=0, ddof=1))
        variance = np.where(corrected > 0, corrected, variance)
    # The mean of the source's own draws is one sampling error wide, so it is no measure of a second-order shift.
    return _Part(name, "monte_carlo", variance, np.full(len(samples.names), np.nan))


def _close(rows: tuple[str, ...], total: Array, parts: Sequence[_Part]) -> Budget:
    """Order the lines of each row and close them to the total."""
    scale = np.ones(len(rows))
    lines: list[BudgetLine] = []
    for k, row in enumerate(rows):
        known = sum(float(part.variance[k]) for part in parts if np.isfinite(part.variance[k]))
        if known > total[k]:
            scale[k] = total[k] / known
        rest = max(total[k] - known, 0.0) if math.isfinite(total[k]) else math.nan
        entries = [(part.name, float(part.variance[k]) * scale[k], part.how, float(part.shift[k])) for part in parts]
        entries.sort(key=lambda entry: (math.isnan(entry[1]), -entry[1] if math.isfinite(entry[1]) else 0.0))
        entries.append((REMAINDER, rest, "remainder", math.nan))
        for name, variance, how, shift in entries:
            share = variance / total[k] if total[k] > 0 else (0.0 if total[k] == 0 else math.nan)
            lines.append(BudgetLine(row, name, math.sqrt(variance), float(share), how, shift))
    return Budget(rows, tuple(lines), np.sqrt(total), scale)
