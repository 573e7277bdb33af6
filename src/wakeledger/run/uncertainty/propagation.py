"""How the uncertainty of each row came about: random and systematic parts, derivatives held against Monte Carlo."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from wakeledger.confidence.budget import REMAINDER, Budget
from wakeledger.confidence.linear_budget import LinearBudget
from wakeledger.confidence.samples import Samples
from wakeledger.confidence.sources import Source
from wakeledger.confidence.validation import compare_with_samples
from wakeledger.core.grid import Array
from wakeledger.ledger.propagation import Agreement, Propagation

#: Significant digits of a standard uncertainty that derivatives must give (JCGM 101, 7.9.2: one or two).
DIGITS = 1
#: Share of the draws' standard deviation from which on what derivatives do not predict is told.
NON_LINEAR = 0.1
_NO_DERIVATIVES = "derivatives of this row are not worked out"
_OFF = "the derivatives of this row do not predict what the reduction itself does, so they are not used"


def parts(budget: Budget, row: str, sources: Sequence[Source]) -> tuple[float, float, float]:
    """Random, systematic and numerical part of a row's standard uncertainty.

    Parameters
    ----------
    budget : Budget
        The budget.
    row : str
        The row.
    sources : sequence of Source
        The sources; their effects tell the parts apart.

    Returns
    -------
    (float, float, float)
        Their squares add up to the square of the row's standard uncertainty: the budget's remainder, from interaction
        and sampling, is shared out in proportion.
    """
    systematic = {source.name for source in sources if source.effect == "systematic"}
    variance = {"random": 0.0, "systematic": 0.0, "numerical": 0.0}
    remainder = 0.0
    for line in budget.of(row):
        if line.source == REMAINDER:
            remainder = line.standard_uncertainty**2
        elif line.how == "numerical":
            variance["numerical"] += line.standard_uncertainty**2
        else:
            variance["systematic" if line.source in systematic else "random"] += line.standard_uncertainty**2
    measured = variance["random"] + variance["systematic"]
    # Numerical terms are added to the draws exactly; what is left over belongs to the sources.
    grown = 1 + remainder / measured if measured > 0 else 1.0
    rest = remainder if measured == 0 else 0.0
    return (
        math.sqrt(variance["random"] * grown + rest),
        math.sqrt(variance["systematic"] * grown),
        math.sqrt(variance["numerical"]),
    )


def propagation(
    rows: Sequence[str],
    budget: Budget,
    sources: Sequence[Source],
    *,
    plain: Samples,
    predicted: Samples | None = None,
    linear: LinearBudget | None = None,
    factor: Array | None = None,
    reason: str = _NO_DERIVATIVES,
) -> tuple[Propagation, ...]:
    """How the uncertainty of some rows came about.

    Parameters
    ----------
    rows : sequence of str
        Rows whose uncertainty is known.
    budget : Budget
        Their budget.
    sources : sequence of Source
        The sources.
    plain : Samples
        Draws without numerical terms.
    predicted : Samples or None
        Changes that derivatives predict for the same draws, under the same names; None where there are none.
    linear : LinearBudget or None
        The budget by derivatives.
    factor : ndarray or None
        By what the draws were scaled, under their names (`wakeledger.confidence.curvature`); None where they were not.
    reason : str
        Why there are no derivatives, where there are none.

    Returns
    -------
    tuple of Propagation
    """
    found = []
    for row in rows:
        random, systematic, numerical = parts(budget, row, sources)
        at = plain.names.index(row)
        drawn = float(plain.standard_uncertainty[at])
        scaled = 1.0 if factor is None else float(factor[at])
        if linear is None or predicted is None or not math.isfinite(linear.standard_uncertainty[at]):
            why = reason if linear is None else _OFF
            found.append(
                Propagation(
                    row,
                    random,
                    systematic,
                    numerical,
                    monte_carlo_standard_uncertainty=drawn,
                    curvature_factor=scaled,
                    reason=why,
                )
            )
            continue
        u = float(linear.standard_uncertainty[at])
        coverage = float(linear.coverage_factor()[at])
        verdict, difference, tolerance = _held_against(plain, at, coverage * u)
        left = plain.values[:, at] - predicted.values[:, at]
        left = left[np.isfinite(left)]
        found.append(
            Propagation(
                row,
                random,
                systematic,
                numerical,
                linear_standard_uncertainty=u,
                second_order_standard_uncertainty=float(linear.second_order[at]),
                monte_carlo_standard_uncertainty=drawn,
                curvature_factor=scaled,
                linear_degrees_of_freedom=float(linear.degrees_of_freedom()[at]),
                linear_coverage_factor=coverage,
                linear_expanded_uncertainty=coverage * u,
                interval_difference=difference,
                tolerance=tolerance,
                non_linearity=float(np.std(left, ddof=1)) / drawn if drawn > 0 else math.nan,
                verdict=verdict,
                reason=linear.correlated or (None if verdict != "unknown" else "the draws do not vary"),
            )
        )
    return tuple(found)


def _held_against(plain: Samples, at: int, half_width: float) -> tuple[Agreement, float, float]:
    """Verdict, difference of the intervals' ends, and tolerance of one output.

    The draws add noise to data that hold it already, so that their mean is off the value by the noise bias, which is
    subtracted from the value: the two intervals are compared about their own means.
    """
    own = Samples((plain.names[at],), plain.used[:, [at]])
    comparison = compare_with_samples(own.mean, [half_width], own, digits=DIGITS)
    difference = float(max(comparison.low[0], comparison.high[0]))
    return comparison.verdict[0], difference, float(comparison.tolerance[0])


def propagation_notes(records: Sequence[Propagation]) -> list[str]:
    """What draws and derivatives say about each other, and what was done about the curvature of rows.

    Parameters
    ----------
    records : sequence of Propagation
        From `propagation`.

    Returns
    -------
    list of str
        The row that departs most from its derivatives, and by how much; the rows whose draws were scaled.
    """
    return [*_departure(records), *_scaling(records)]


def _departure(records: Sequence[Propagation]) -> list[str]:
    known = [one for one in records if math.isfinite(one.non_linearity)]
    if not known:
        return []
    worst = max(known, key=lambda one: one.non_linearity)
    if worst.non_linearity < NON_LINEAR:
        return []
    u, drawn = worst.linear_standard_uncertainty, worst.monte_carlo_standard_uncertainty
    name = worst.row.replace("_", " ")
    return [
        f"The {name} departs most from linear propagation: {worst.non_linearity:.0%} of the standard deviation of its"
        f" draws is not predicted by derivatives (u {u:.3g} by derivatives, {drawn:.3g} by Monte Carlo)."
    ]


def _scaling(records: Sequence[Propagation]) -> list[str]:
    scaled = [one for one in records if one.curvature_factor < 1]
    if not scaled:
        return []
    sizes = ", ".join(
        f"{one.row.replace('_', ' ')} {1 - one.curvature_factor:.1%}"
        for one in sorted(scaled, key=lambda one: one.curvature_factor)
    )
    return [
        "Draws about measured values count the curvature of a row more than once, because its slopes there hold the"
        f" errors already; the measured part of the uncertainty is made smaller for it, by this share: {sizes}."
    ]
