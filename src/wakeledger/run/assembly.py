"""From the outputs of a chain and their draws to the records of the ledger; the same for areas and for sections."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np

from wakeledger.confidence.budget import Budget
from wakeledger.confidence.components import MEASURED
from wakeledger.confidence.linear import welch_satterthwaite
from wakeledger.confidence.linear_budget import correlated_sources
from wakeledger.confidence.samples import Samples
from wakeledger.confidence.sources import Source
from wakeledger.core.errors import SurveyError
from wakeledger.core.estimate import Estimate
from wakeledger.core.names import ROWS
from wakeledger.ledger.contributions import Contributions
from wakeledger.ledger.crosscheck import check_estimate, compare
from wakeledger.ledger.rows import BudgetLine, Comparison, CrossCheck, Row
from wakeledger.run.chain.outputs import coefficient_of, corrected_coefficient_of, estimate_of
from wakeledger.run.config import Survey

NO_SOURCE = "the survey file gives no uncertainty source"


def ledger_row(
    name: str,
    values: Mapping[str, float],
    samples: Samples | None,
    *,
    budget: Budget | None = None,
    sources: Sequence[Source] = (),
    reason: str = NO_SOURCE,
) -> Row | None:
    """One row with its uncertainty.

    Parameters
    ----------
    name : str
        Name of the row.
    values : mapping of str to float
        The chain's outputs.
    samples : Samples or None
        Their draws, numerical terms included; None where there are none.
    budget : Budget or None
        The row's budget, for its degrees of freedom.
    sources : sequence of Source
        The sources behind it.
    reason : str
        Why there are no draws, where there are none.

    Returns
    -------
    Row or None
        None where the value cannot be had.
    """
    value = values[name]
    if math.isnan(value):
        return None
    coefficient = values.get(coefficient_of(name), math.nan)
    between_walls = values.get(corrected_coefficient_of(name), math.nan)
    corrected = None if math.isnan(between_walls) else between_walls
    unknown = (math.nan, math.nan, math.nan, math.nan)
    unit = ROWS[name].unit
    if samples is None:
        return Row(name, value, unit, *unknown, coefficient, math.nan, corrected, reason=reason)
    at = samples.names.index(name)
    why = samples.unknown[at]
    if why:
        return Row(name, value, unit, *unknown, coefficient, math.nan, corrected, reason=why)
    u = float(samples.standard_uncertainty[at])
    half_width = float(samples.interval().half_width[at])
    coefficient_u = math.nan
    if math.isfinite(coefficient):
        coefficient_u = float(samples.standard_uncertainty[samples.names.index(coefficient_of(name))])
    return Row(
        name,
        value,
        unit,
        standard_uncertainty=u,
        expanded_uncertainty=half_width,
        coverage_factor=half_width / u if u > 0 else math.nan,
        degrees_of_freedom=effective_degrees_of_freedom(budget, name, sources),
        coefficient=coefficient,
        coefficient_standard_uncertainty=coefficient_u,
        coefficient_corrected=corrected,
        coefficient_corrected_standard_uncertainty=_known(samples, corrected_coefficient_of(name)),
        reason=_no_freedom(sources),
    )


def _no_freedom(sources: Sequence[Source]) -> str | None:
    why = correlated_sources(sources)
    return None if why is None else f"its degrees of freedom are unknown: {why}"


def _known(samples: Samples, output: str) -> float | None:
    """Standard uncertainty of an output, None where it has none."""
    if output not in samples.names:
        return None
    u = float(samples.standard_uncertainty[samples.names.index(output)])
    return u if math.isfinite(u) else None


def made_unknown(samples: Samples, rows: Sequence[str], reason: str) -> Samples:
    """Draws whose figures for some rows and their coefficients are unknown, and why.

    Parameters
    ----------
    samples : Samples
        Draws of a chain's outputs.
    rows : sequence of str
        The rows.
    reason : str
        Why.

    Returns
    -------
    Samples
    """
    named = {*rows, *(coefficient_of(row) for row in rows)}
    unknown = tuple(reason if name in named else why for name, why in zip(samples.names, samples.unknown, strict=True))
    return replace(samples, unknown=unknown)


def effective_degrees_of_freedom(budget: Budget | None, row: str, sources: Sequence[Source]) -> float:
    """Effective degrees of freedom of a row, ν_eff = u⁴/Σ(u_i⁴/ν_i) (Welch and Satterthwaite; GUM G.2b).

    Parameters
    ----------
    budget : Budget or None
        The row's budget.
    row : str
        The row.
    sources : sequence of Source
        The sources, whose contributions are independent of each other; numerical terms count as exactly known.

    Returns
    -------
    float
        Infinite where every contributing source's uncertainty is taken as exact; NaN where the sources are correlated
        (`wakeledger.confidence.linear_budget.correlated_sources`), to which the formula does not apply.
    """
    if budget is None:
        return math.inf
    if correlated_sources(sources):
        return math.nan
    freedom = {source.name: source.degrees_of_freedom for source in sources}
    lines = budget.of(row)
    return float(
        welch_satterthwaite(
            [line.standard_uncertainty**2 for line in lines], [freedom.get(line.source, math.inf) for line in lines]
        )
    )


def cross_check(
    row: Row,
    method: str,
    value: float,
    samples: Samples | None,
    *,
    expected: float,
    expected_uncertainty: float,
    reason: str | None = None,
    same_algebra: str | None = None,
    no_samples: str = NO_SOURCE,
) -> CrossCheck:
    """One other method's estimate held against its row.

    Parameters
    ----------
    row : Row
        The row.
    method : str
        The other method.
    value : float
        Its estimate, in the row's unit.
    samples : Samples or None
        Draws of the chain's outputs; None where there are none.
    expected, expected_uncertainty : float
        What it is expected to read above the row, and the standard uncertainty of that, same unit.
    reason : str, optional
        Why the estimate is unknown, where it is.
    same_algebra : str, optional
        Why it is not independent, where it is not.
    no_samples : str
        Why there are no draws, where there are none.

    Returns
    -------
    CrossCheck
    """
    u = difference_u = math.nan
    if samples is not None:
        at, primary = samples.names.index(estimate_of(row.name, method)), samples.names.index(row.name)
        u = float(samples.standard_uncertainty[at])
        variance = samples.covariance[at, at] + samples.covariance[primary, primary]
        variance -= 2 * samples.covariance[at, primary]
        difference_u = math.sqrt(max(float(variance), 0.0) + expected_uncertainty**2)
    estimate = Estimate(
        row.name,
        method,
        value,
        standard_uncertainty=u,
        expected_difference=expected,
        reason=reason or (no_samples if samples is None else None),
    )
    return check_estimate(estimate, row, difference_uncertainty=difference_u, same_algebra=same_algebra)


def require_rows(survey: Survey, names: Sequence[str]) -> None:
    """Refuse a ``[[compare]]`` with a row that the ledger will not have, before the Monte Carlo.

    Parameters
    ----------
    survey : Survey
        The survey file.
    names : sequence of str
        The rows there will be.

    Raises
    ------
    SurveyError
        Naming the entry and the rows there are.
    """
    for number, entry in enumerate(survey.compare, 1):
        if entry.row not in names:
            raise SurveyError(
                f"row {entry.row!r} is not in this ledger",
                file=survey.path,
                place=f"[[compare]] {number} ({entry.name}) row",
                remedy=f"it has {', '.join(names)}",
            )


def comparisons(survey: Survey, rows: Sequence[Row], scales: Mapping[str, float]) -> tuple[Comparison, ...]:
    """The values of ``[[compare]]`` held against the rows.

    Parameters
    ----------
    survey : Survey
        The survey file.
    rows : sequence of Row
        The rows of the ledger.
    scales : mapping of str to float
        Force, or moment, of a unit coefficient by row, in the row's unit.

    Returns
    -------
    tuple of Comparison
        A total drag less the buoyancy that the survey file gives.

    Raises
    ------
    SurveyError
        If a row that is to be compared is not in the ledger.
    """
    require_rows(survey, [row.name for row in rows])
    by_name = {row.name: row for row in rows}
    found = []
    for entry in survey.compare:
        value, coefficient = entry.value, entry.coefficient
        scale, as_measured = scales.get(entry.row, math.nan), entry.as_measured or "whole"
        uncertainty = entry.standard_uncertainty
        if uncertainty is None:
            uncertainty = entry.coefficient_standard_uncertainty
        uncertainty = math.nan if uncertainty is None else uncertainty
        pushed = _buoyancy(survey, entry.row, whole=coefficient is not None or as_measured == "whole")
        if pushed is not None:
            # What the empty tunnel's pressure does to the model is in a balance's reading and in no wake.
            unit = 1.0 if coefficient is None else 1.0 / scale
            value = None if value is None else value - pushed[0]
            coefficient = None if coefficient is None else coefficient - unit * pushed[0]
            uncertainty = math.hypot(uncertainty, unit * pushed[1])
        found.append(
            compare(
                by_name[entry.row],
                name=entry.name,
                value=value,
                coefficient=coefficient,
                coefficient_scale=scale,
                standard_uncertainty=uncertainty,
                as_measured=as_measured,
            )
        )
    return tuple(found)


def _buoyancy(survey: Survey, row: str, *, whole: bool) -> tuple[float, float] | None:
    """Drag that the empty tunnel's falling pressure adds to a balance's, N, and its standard uncertainty."""
    boundary = survey.boundary
    if row != "total_drag" or boundary is None or boundary.buoyancy is None:
        return None
    factor = 2.0 if whole and boundary.reflection == "y" else 1.0
    return factor * boundary.buoyancy.value, factor * boundary.buoyancy.standard_uncertainty


def budget_lines(budget: Budget | None, names: Sequence[str]) -> tuple[BudgetLine, ...]:
    """The budget of some rows.

    Parameters
    ----------
    budget : Budget or None
        The budget of all outputs.
    names : sequence of str
        The rows wanted.

    Returns
    -------
    tuple of BudgetLine
        A numerical term that does not touch a row is no line of its budget; a declared source is, even at zero.
    """
    if budget is None:
        return ()
    return tuple(
        BudgetLine(line.row, line.source, line.standard_uncertainty, line.share)
        for name in names
        for line in budget.of(name)
        if not (line.how == "numerical" and line.standard_uncertainty == 0)
    )


def contributions(budget: Budget | None, names: Sequence[str]) -> Contributions | None:
    """What each error does to some rows and their coefficients, for increments.

    Parameters
    ----------
    budget : Budget or None
        The budget of all outputs.
    names : sequence of str
        The rows wanted.

    Returns
    -------
    Contributions or None
        None where there is no budget, or no row.
    """
    if budget is None or budget.scatter is None or not names:
        return None
    at = np.array([[budget.rows.index(name) for name in named] for named in _outputs_of(names, budget)])
    components = tuple(
        replace(one, linear=one.linear[at], curved=one.curved[at])
        for one in budget.components
        # A term of another row is no part of these; a declared source is, even at zero.
        if one.kind == MEASURED or np.any(one.linear[at])
    )
    points = tuple(replace(one, effects=one.effects[at]) for one in budget.points)
    scatter = np.stack([budget.scatter[np.ix_(one, one)] for one in at])
    return Contributions(tuple(names), components, scatter, np.full(at.shape, math.inf), points)


def _outputs_of(names: Sequence[str], budget: Budget) -> list[list[str]]:
    """Outputs of the quantities of some rows; the corrected coefficient is one where a row has it."""
    found = [list(names), [coefficient_of(name) for name in names]]
    corrected = [corrected_coefficient_of(name) for name in names]
    known = dict(zip(budget.rows, budget.standard_uncertainty, strict=True))
    if any(math.isfinite(known.get(name, math.nan)) for name in corrected):
        found.append(corrected)
    return found
