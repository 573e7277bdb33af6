"""The choice among methods as a numerical term: how far independent methods lie from the row beyond their own doubt.

The cross-checks are made before these terms, so that methods that disagree still do.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

from wakeledger.confidence.terms import NumericalTerm, spread_beyond
from wakeledger.core.grid import Array
from wakeledger.ledger.crosscheck import COVERAGE_FACTOR
from wakeledger.ledger.rows import COUNT, CrossCheck, Row
from wakeledger.run.uncertainty.changes import changes_with, share_of, with_induced_drag

CHOICE = "choice among methods for the {}"


def choice_name(row: str) -> str:
    """Name of a row's term in the budget."""
    return CHOICE.format(row.replace("_", " "))


def choice_terms(
    checks: Sequence[CrossCheck], values: Mapping[str, float], outputs: Sequence[str]
) -> tuple[NumericalTerm, ...]:
    """What the choice of the method is worth, for each row that is held against independent ones.

    Parameters
    ----------
    checks : sequence of CrossCheck
        Estimates held against their rows, before this term.
    values : mapping of str to float
        The chain's outputs.
    outputs : sequence of str
        Their order in the terms.

    Returns
    -------
    tuple of NumericalTerm
        One for each row that the methods' own uncertainties do not explain; the total drag and whatever else follows
        from a row moves with it.

    Notes
    -----
    `wakeledger.confidence.terms.spread_beyond` with the differences less what was expected of them. A single estimate
    shows no spread: by chance alone one in three lies further off than its uncertainty, so that it counts only where
    it disagrees.
    """
    found = []
    for row in dict.fromkeys(check.row for check in checks):
        spread = _spread(_known(checks, row))
        if spread > 0:
            found.append(NumericalTerm(choice_name(row), _moved(row, spread, values, outputs)))
    return tuple(found)


def spread_notes(checks: Sequence[CrossCheck], rows: Sequence[Row]) -> list[str]:
    """How far the independent methods spread about their row, and what that adds to its uncertainty.

    Parameters
    ----------
    checks : sequence of CrossCheck
        Estimates held against their rows.
    rows : sequence of Row
        The rows.

    Returns
    -------
    list of str
        A sentence for each row with two or more independent estimates of known uncertainty, or with one that disagrees.
    """
    found = []
    for row in rows:
        own = _known(checks, row.name)
        spread = _spread(own)
        if len(own) < 2 and spread == 0:
            continue
        apart = [_beyond_expected(check) for check in own]
        doubts = [_doubt(check) for check in own if check.normalised_error]
        if not doubts:
            continue
        far, explained = (math.sqrt(sum(one**2 for one in them) / len(them)) for them in (apart, doubts))
        scale, unit = (row.coefficient / row.value / COUNT, "counts") if _in_counts(row) else (1.0, row.unit)
        name = row.name.replace("_", " ")
        methods = (
            f"{len(own)} other methods for the {name} lie" if len(own) > 1 else f"Another method for the {name} lies"
        )
        added = (
            f"; the choice among methods adds a standard uncertainty of {abs(scale) * spread:.2g}." if spread else "."
        )
        found.append(
            f"{methods} {abs(scale) * far:.2g} {unit} from it (root mean square, expected differences taken out); their"
            f" uncertainties explain {abs(scale) * explained:.2g} {unit}{added}"
        )
    return found


def _known(checks: Sequence[CrossCheck], row: str) -> list[CrossCheck]:
    """Independent estimates of a row that are held against it with a known uncertainty."""
    return [check for check in checks if check.row == row and check.verdict in ("agrees", "disagrees")]


def _spread(own: Sequence[CrossCheck]) -> float:
    if not own or (len(own) == 1 and own[0].verdict == "agrees"):
        return 0.0
    return spread_beyond([_beyond_expected(check) for check in own], [_doubt(check) for check in own])


def _beyond_expected(check: CrossCheck) -> float:
    return check.difference - check.expected_difference


def _doubt(check: CrossCheck) -> float:
    """Standard uncertainty of the difference; a difference of zero has no part in the spread, whatever it is."""
    apart = abs(_beyond_expected(check))
    return apart / (COVERAGE_FACTOR * check.normalised_error) if apart > 0 else 1.0


def _moved(row: str, size: float, values: Mapping[str, float], outputs: Sequence[str]) -> Array:
    """What all outputs move by when a row does."""
    moved = {row: size}
    if row in ("profile_drag", "wave_drag"):
        moved["total_drag"] = size
    if row == "induced_drag":
        moved = with_induced_drag(size, values)
    if row == "lift":
        share = share_of(size, values[row])
        for name, power in (("span_efficiency", 2), ("angle_correction", 1), ("wall_upwash", 1)):
            moved[name] = power * share * values.get(name, math.nan)
    return changes_with(moved, values, outputs)


def _in_counts(row: Row) -> bool:
    return row.name.endswith("_drag") and math.isfinite(row.coefficient) and row.value != 0
