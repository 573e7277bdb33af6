"""The increment of two ledgers, B minus A, with the errors that both have in common cancelling."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Sequence
from os import PathLike
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from wakeledger.confidence.components import MEASURED, NUMERICAL
from wakeledger.core.errors import DataError, InputError, SurveyError
from wakeledger.ledger.archive import open_archive
from wakeledger.ledger.cancellation import SCATTER, Difference, opaque, subtract
from wakeledger.ledger.contributions import QUANTITIES, Contributions
from wakeledger.ledger.increment import (
    Cancellation,
    Figure,
    Increment,
    IncrementRow,
    NotCancelled,
    Side,
    ordered_budget,
)
from wakeledger.ledger.ledger import Ledger
from wakeledger.ledger.plane_difference import plane_differences
from wakeledger.ledger.rows import Row
from wakeledger.run import tables
from wakeledger.run.config import Survey, parse_survey
from wakeledger.run.ledgers.shared_points import shared_points_notes, unshared_points
from wakeledger.run.ledgers.unlike import is_computed, unlike

if TYPE_CHECKING:
    from wakeledger.run.config import Source

_PER_POINT = (
    "it has an error of its own for each point or row, and the archive of {side} does not hold what each of them does "
    "(an earlier version, or too many of them), so that it was added"
)
_OTHER_POINTS = (
    "its errors are those of single points or rows, and these are not the same ({why}), so that it was added"
)
_NO_RECORD = "an archive from an earlier version does not hold what each error does; reduce it again"
#: Why numerical terms are added.
_NUMERICAL = (
    "a numerical term: the same method errs in the same sense on like wakes, but by how much on each is not known, so "
    "that the two were added in squares"
)


def increment(a: Ledger | str | PathLike[str], b: Ledger | str | PathLike[str], *, command: str = "") -> Increment:
    """B minus A for every row that both have.

    Parameters
    ----------
    a, b : Ledger or path
        The ledgers, or their archives; combined ones too (`wakeledger.run.ledgers.repeats.combine`).
    command : str
        The command line, for the record.

    Returns
    -------
    Increment

    Raises
    ------
    DataError
        If an archive cannot be read, or the two have no row in common.
    InputError
        If both declare a source with the same ``shared_id``, but not the same error.

    Notes
    -----
    u²(B - A) is the sum over all independent errors of the square of their effect on the difference. An error that both
    surveys name by one ``shared_id`` is one error, and its effect on the difference is the difference of its signed
    effects; nothing cancels by name alone. U95 is half the 95 % interval of the difference, drawn from the errors'
    distributions (JCGM 101:2008).
    """
    ledgers, files = [], []
    for one in (a, b):
        ledgers.append(one if isinstance(one, Ledger) else open_archive(one))
        files.append("" if isinstance(one, Ledger) else str(one))
    first, second = ledgers
    names = [row.name for row in first.rows if any(row.name == other.name for other in second.rows)]
    if not names:
        raise DataError(
            "the two ledgers have no row in common",
            file=files[1] or None,
            remedy=f"A has {_listed(row.name for row in first.rows)}; B has {_listed(row.name for row in second.rows)}",
        )
    surveys = declared_surveys(first, files[0]), declared_surveys(second, files[1])
    refuse_conflicts(zip(("A", "B"), surveys, strict=True))
    known = [name for name in names if all(math.isfinite(one.row(name).standard_uncertainty) for one in ledgers)]
    parts = [contributions_of(one, known) for one in ledgers]
    common = min(len(part.quantities) for part in parts)
    difference = subtract(*(part.of(known, quantities=common) for part in parts))
    rows = _rows(first, second, names, known, difference)
    covariance = np.full((len(names), len(names)), np.nan)
    at = [names.index(name) for name in known]
    covariance[np.ix_(at, at)] = difference.covariance[0]
    planes, plane_notes = plane_differences(first, second)
    only = [
        f"Only {side} has {_listed(row.name for row in one.rows if row.name not in names)}."
        for side, one in (("A", first), ("B", second))
        if any(row.name not in names for row in one.rows)
    ]
    return Increment(
        a=_side(first, files[0]),
        b=_side(second, files[1]),
        rows=rows,
        covariance=covariance,
        cancellations=_cancellations(difference),
        not_cancelled=_not_cancelled(first, second, *surveys, difference),
        budget=ordered_budget(known, {name: variance[0] for name, variance in difference.by_source.items()}),
        warnings=(*unlike(first, second, *surveys), *unshared_points(first, second, *surveys, difference)),
        notes=(*only, *shared_points_notes(difference), *_plane_notes(first, second), *plane_notes),
        plane=planes[0] if planes else None,
        further_planes=planes[1:],
        provenance=tables.provenance(command),
    )


def declared_surveys(ledger: Ledger, file: str = "") -> tuple[Survey, ...]:
    """The survey files behind a ledger; several for a combined one.

    Parameters
    ----------
    ledger : Ledger
        The ledger.
    file : str
        Its archive, for messages.

    Returns
    -------
    tuple of Survey

    Raises
    ------
    DataError
        If a survey file kept in it cannot be read.
    """
    texts = [ledger.survey_text] if ledger.repeats is None else json.loads(ledger.repeats.attrs["survey_texts"])
    try:
        return tuple(parse_survey(text, Path(file or "survey.toml")) for text in texts)
    except SurveyError as error:
        found = f"{error.place}: {error.found}" if error.place else error.found
        raise DataError(
            f"the survey file kept in the ledger cannot be read ({found})",
            file=file or None,
            remedy="take the archive from its backup, or reduce the survey again",
        ) from error


def contributions_of(ledger: Ledger, names: Sequence[str]) -> Contributions:
    """What each error does to some rows; their totals alone where the ledger does not hold that."""
    if ledger.contributions is not None and set(names) <= set(ledger.contributions.rows):
        return ledger.contributions.of(names)
    rows = [ledger.row(name) for name in names]
    sizes = [[row.standard_uncertainty for row in rows], [row.coefficient_standard_uncertainty for row in rows]]
    corrected = [row.coefficient_corrected_standard_uncertainty for row in rows]
    if any(size is not None for size in corrected):
        sizes.append([math.nan if size is None else size for size in corrected])
    u = np.array(sizes)
    nu = np.array([[row.degrees_of_freedom for row in rows]] * len(u))
    return opaque(names, u, np.where(np.isfinite(nu), nu, math.inf))


def refuse_conflicts(declared: Iterable[tuple[str, Iterable[Survey]]]) -> None:
    """Refuse surveys that give one identity to two different errors: one of their error bars would be wrong.

    Parameters
    ----------
    declared : iterable of (str, iterable of Survey)
        What messages call each ledger, and its survey files.

    Raises
    ------
    InputError
        Naming the identity and what differs.
    """
    seen: dict[tuple[str, str], tuple[str, Source]] = {}
    for side, surveys in declared:
        for survey in surveys:
            for source in survey.uncertainty.source:
                if source.shared_id is None:
                    continue
                for target in source.applies_to:
                    where, earlier = seen.setdefault((source.shared_id, target), (side, source))
                    unlike_in = [
                        (what, _said(one), _said(other))
                        for what, one, other in zip(_DECLARED, _declaration(earlier), _declaration(source), strict=True)
                        if one != other
                    ]
                    if unlike_in:
                        what, one, other = unlike_in[0]
                        raise InputError(
                            f"shared_id {source.shared_id!r} is declared as two different errors of {target}: {what} is"
                            f" {one} for {earlier.name!r} in {where}, and {other} for {source.name!r} in {side}",
                            remedy="one of the two error bars is wrong: declare the same error in both survey files, or"
                            " give two errors two identities, and reduce again",
                        )


_DECLARED = (
    "effect",
    "the scale of standard_uncertainty",
    "standard_uncertainty",
    "distribution",
    "degrees_of_freedom",
    "correlation_length",
)


def _declaration(source: Source) -> tuple[object, ...]:
    return (
        source.effect,
        source.scale,
        # The same size written in two units differs by rounding.
        float(f"{source.standard_uncertainty:.9g}"),
        source.distribution,
        source.degrees_of_freedom,
        source.correlation_length,
    )


def _said(value: object) -> str:
    return f"{value:g}" if isinstance(value, float) else "not given" if value is None else str(value)


def _rows(
    a: Ledger, b: Ledger, names: Sequence[str], known: Sequence[str], difference: Difference
) -> tuple[IncrementRow, ...]:
    u = np.sqrt(np.einsum("qrr->qr", difference.covariance))
    half, freedom = difference.half_width(), difference.degrees_of_freedom
    found = []
    for name in names:
        one, other = a.row(name), b.row(name)
        figures = []
        for quantity in QUANTITIES:
            x, y = (_figure_of(row, quantity) for row in (one, other))
            size = width = nu = math.nan
            at = QUANTITIES.index(quantity)
            if name in known and at < len(u):
                k = known.index(name)
                size, width, nu = float(u[at, k]), float(half[at, k]), float(freedom[at, k])
            factor = width / size if size > 0 else math.nan
            apart = math.hypot(x[1], y[1])
            figures.append(Figure(x[0], y[0], y[0] - x[0], size, width, factor, nu, apart))
        corrected = None if math.isnan(figures[2].difference) else figures[2]
        found.append(IncrementRow(name, other.unit, figures[0], figures[1], corrected, reason=_reason(one, other)))
    return tuple(found)


def _figure_of(row: Row, quantity: str) -> tuple[float, float]:
    """A row's value, coefficient or corrected coefficient, and its standard uncertainty; NaN where there is none."""
    if quantity == "value":
        return row.value, row.standard_uncertainty
    found = getattr(row, quantity), getattr(row, f"{quantity}_standard_uncertainty")
    value, size = (math.nan if one is None else one for one in found)
    return value, size


def _reason(a: Row, b: Row) -> str | None:
    unknown = [(side, row) for side, row in (("A", a), ("B", b)) if math.isnan(row.value + row.standard_uncertainty)]
    return "; ".join(f"unknown in {side}: {row.reason}" for side, row in unknown) or None


def _cancellations(difference: Difference) -> tuple[Cancellation, ...]:
    found = []
    for k, row in enumerate(difference.rows):
        for one in difference.cancelled:
            values, coefficients = ((one.in_a[q, k], one.in_b[q, k], one.left[q, k]) for q in (0, 1))
            found.append(
                Cancellation(
                    row,
                    one.shared_id,
                    one.source_a,
                    one.source_b,
                    *(float(value) for value in values),
                    *(float(value) for value in coefficients),
                )
            )
    return tuple(found)


def _not_cancelled(
    a: Ledger, b: Ledger, surveys_a: Sequence[Survey], surveys_b: Sequence[Survey], difference: Difference
) -> tuple[NotCancelled, ...]:
    """Sources and terms that both ledgers have under one name or identity, and why they were added."""
    done = [{(one.shared_id, one.source_a) for one in difference.cancelled}]
    done.append({(one.shared_id, one.source_b) for one in difference.cancelled})
    declared = [_shared_sources(surveys) for surveys in (surveys_a, surveys_b)]
    named = [_budget_names(ledger, MEASURED) for ledger in (a, b)]
    found = []
    for name in named[0]:
        if name not in named[1]:
            continue
        own = [_shared_source(name, known) for known in declared]
        ids = [None if source is None else source.shared_id for source in own]
        if any((identity, name) in side for identity, side in zip(ids, done, strict=True)):
            continue
        # Sources of an empty tunnel are declared in a file of their own.
        if ids == [None, None] and all(any(name == one for _, one in side) for side in done):
            continue
        if own[0] is not None and own[1] is not None:
            if ids[0] == ids[1]:
                reason = _why_not(own[0], own[1], difference, (a, b))
            else:
                reason = f"its shared_id is {ids[0]!r} in A and {ids[1]!r} in B: two errors, which were added"
        else:
            where = "either" if ids == [None, None] else "A" if ids[0] is None else "B"
            reason = f"it has no shared_id in {where}; a name alone does not make it the same error, so it was added"
        found.append(NotCancelled(name, reason))
    said = {line.source for line in found}
    for name, source in declared[0].items():
        others = [other for other in declared[1].values() if other.shared_id == source.shared_id]
        parts = (name, f"{name} (")
        done_with = any(
            identity == source.shared_id and (one == parts[0] or one.startswith(parts[1])) for identity, one in done[0]
        )
        if not others or name in said or done_with:
            continue
        alike = [other for other in others if set(other.applies_to) & set(source.applies_to)]
        reason = _why_not(source, (*alike, *others)[0], difference, (a, b))
        found.append(NotCancelled(name, f"shared_id {source.shared_id!r} is in both: {reason}"))
    terms = [_budget_names(ledger, NUMERICAL) for ledger in (a, b)]
    found += [NotCancelled(name, _NUMERICAL) for name in terms[0] if name in terms[1]]
    return tuple(found)


def _why_not(a: Source, b: Source, difference: Difference, ledgers: tuple[Ledger, Ledger]) -> str:
    """Why one identity in both surveys does not cancel."""
    kept = [one.contributions for one in ledgers]
    if kept[0] is None or kept[1] is None:
        return _NO_RECORD
    if not set(a.applies_to) & set(b.applies_to):
        return f"it acts on {', '.join(a.applies_to)} in A and on {', '.join(b.applies_to)} in B: two errors, added"
    if a.effect == "systematic":
        return "its errors are too many to be followed one by one, so that it was added"
    why = next((why for identity, *_, why in difference.unlike if identity == a.shared_id), None)
    if why is not None:
        return _OTHER_POINTS.format(why=why)
    lacking = [
        side
        for side, one in zip("AB", kept, strict=True)
        if one is not None and not any(each.shared_id == a.shared_id for each in one.points)
    ]
    if not lacking:
        return _OTHER_POINTS.format(why="those of several planes are of each plane by itself")
    return _PER_POINT.format(side=" and ".join(lacking))


def _shared_sources(surveys: Iterable[Survey]) -> dict[str, Source]:
    return {
        source.name: source
        for survey in surveys
        for source in survey.uncertainty.source
        if source.shared_id is not None
    }


def _shared_source(name: str, known: dict[str, Source]) -> Source | None:
    """Declaration of a source of the budget, which may be a part of a declared one ("name (inputs)")."""
    return known.get(name, next((known[key] for key in known if name.startswith(f"{key} (")), None))


def _budget_names(ledger: Ledger, kind: str) -> tuple[str, ...]:
    """Names of the sources, or of the numerical terms, in a ledger's budget."""
    terms = set()
    if ledger.contributions is not None:
        terms = {one.source for one in ledger.contributions.components if one.kind == NUMERICAL}
    # What is left of all sources together is none of its own.
    names = dict.fromkeys(line.source for line in ledger.budget if line.source not in ("remainder", SCATTER))
    return tuple(name for name in names if (name in terms) == (kind == NUMERICAL))


def _plane_notes(a: Ledger, b: Ledger) -> list[str]:
    """What is not followed where a ledger combines several planes, or none was measured."""
    sides = [(side, ledger) for side, ledger in (("A", a), ("B", b)) if ledger.stations]
    found = [
        f"The rows of {side} are combined from its planes at "
        f"{', '.join(f'{one.station:g} m' for one in ledger.stations)}; B − A is that of the combined rows."
        for side, ledger in sides
    ]
    if any(ledger.contributions is not None and ledger.contributions.points for _, ledger in sides):
        found.append("An error of single points or rows counts as another one on each plane of a survey.")
    if is_computed(a) and is_computed(b):
        found.append(
            "Both flows are computed: the uncertainty is numerical alone. What the solver, its mesh and its turbulence"
            " model do alike in both cancels in B − A, but by how much is not known, so that nothing was taken off."
        )
    return found


def _side(ledger: Ledger, file: str) -> Side:
    failed = tuple(
        f"{check.name.replace('_', ' ')}: {check.message}" for check in ledger.checks if check.verdict == "fail"
    )
    return Side(ledger.title, dict(ledger.test), file, dict(ledger.inputs), failed, dict(ledger.reference))


def _listed(names: Iterable[str]) -> str:
    return ", ".join(name.replace("_", " ") for name in names)
