"""What is known of computed planes beyond their rows, as tables: how far and near field close, and the diagnostics."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from wakeledger.ledger.crosscheck import COVERAGE_FACTOR
from wakeledger.ledger.rounding import UNKNOWN
from wakeledger.ledger.rows import COUNT
from wakeledger.present.printing import joined, new_table
from wakeledger.present.stations_text import blocks_of, column_width, head_of
from wakeledger.present.wording import VERDICT_STYLES, VERDICT_WORDS, digits, error_text, signed, unit_text, words

if TYPE_CHECKING:
    from rich.table import Table

    from wakeledger.ledger.closure import Closure
    from wakeledger.ledger.ledger import Ledger

#: What the last line of a closure is called.
LEFT_OVER = "left over"
#: Digits of a diagnostic, which has no uncertainty of its own.
_DIGITS = 4


@dataclass(frozen=True)
class ClosureLine:
    """One line of the table of closures.

    Attributes
    ----------
    label : str
        What is compared, a cause, or `LEFT_OVER`.
    difference, expanded, unit : str
        Far field less near field, its U95 and their unit, as printed; the first two are empty for a cause that is in
        the uncertainty of the difference already.
    error, verdict : str
        E_n as printed, and the verdict; empty where there is none.
    note : str
        How it was found.
    part : bool
        Whether it is a part of the difference above it.
    """

    label: str
    difference: str
    expanded: str
    unit: str
    error: str = ""
    verdict: str = ""
    note: str = ""
    part: bool = True


def closure_lines(ledger: Ledger) -> tuple[ClosureLine, ...]:
    """Every difference of far and near field with its causes and what they leave over.

    Parameters
    ----------
    ledger : Ledger
        With closures.

    Returns
    -------
    tuple of ClosureLine
    """
    return tuple(line for closure in ledger.closures for line in _lines_of(ledger, closure))


def _lines_of(ledger: Ledger, closure: Closure) -> list[ClosureLine]:
    counted = math.isfinite(closure.counts_per_unit)
    scale = closure.counts_per_unit if counted else 1.0
    unit = "counts" if counted else unit_text(ledger.row(closure.row).unit)

    def figures(difference: float, u: float) -> tuple[str, str, str]:
        expanded = COVERAGE_FACTOR * scale * u
        return signed(scale * difference, expanded), digits(expanded, 2), unit

    near = [one.name for one in ledger.comparisons if (one.row, one.value) == (closure.row, closure.near)]
    found = [
        ClosureLine(
            f"{words(closure.row)} − {near[0] if near else 'near field'}",
            *figures(closure.difference, closure.standard_uncertainty),
            error=error_text(closure.normalised_error),
            part=False,
        )
    ]
    for cause in closure.causes:
        inside = cause.difference == 0 and cause.standard_uncertainty == 0
        shown = ("", "", "") if inside else figures(cause.difference, cause.standard_uncertainty)
        found.append(ClosureLine(words(cause.name), *shown, note=cause.note))
    found.append(
        ClosureLine(
            LEFT_OVER,
            *figures(closure.left_over, closure.left_over_uncertainty),
            error=error_text(closure.left_over_error),
            verdict=closure.verdict,
        )
    )
    return found


def closure_table(ledger: Ledger) -> Table:
    """The closures as a table for the terminal, without the causes that have no figure.

    Parameters
    ----------
    ledger : Ledger
        With closures.

    Returns
    -------
    Table
    """
    from rich.text import Text

    lines = [line for line in closure_lines(ledger) if line.difference]
    table = new_table(
        ("", "left"), ("difference ± U95", "left"), ("", "left"), ("E_n", "right"),
        ("verdict", "left"),
    )  # fmt: skip
    pairs = joined([(line.difference, line.expanded if line.expanded != "–" else UNKNOWN) for line in lines])
    for line, pair in zip(lines, pairs, strict=True):
        verdict = Text(VERDICT_WORDS.get(line.verdict, ""), style=VERDICT_STYLES.get(line.verdict, ""))
        table.add_row(("  " if line.part else "") + line.label, pair, line.unit, line.error, verdict)
    return table


def closure_notes(ledger: Ledger) -> list[str]:
    """How each cause of a difference was found, each said once."""
    found = (f"{line.label}: {line.note}" for line in closure_lines(ledger) if line.note)
    return list(dict.fromkeys(found))


@dataclass(frozen=True)
class DiagnosticLine:
    """One diagnostic on every plane.

    Attributes
    ----------
    label, unit, meaning : str
        In words; the unit is that of the figures.
    planes : tuple of str
        The figure on each plane as printed, a dash where a plane has none.
    """

    label: str
    unit: str
    meaning: str
    planes: tuple[str, ...]


def diagnostic_planes(ledger: Ledger) -> tuple[Ledger, ...]:
    """Ledgers of the planes that have diagnostics."""
    return tuple(one for one in (ledger.stations or (ledger,)) if one.diagnostics)


def diagnostic_lines(ledger: Ledger) -> tuple[DiagnosticLine, ...]:
    """Every diagnostic on every plane that has any; a force is given in counts where the total drag has them.

    Parameters
    ----------
    ledger : Ledger
        The ledger.

    Returns
    -------
    tuple of DiagnosticLine
    """
    planes = diagnostic_planes(ledger)
    own = [{figure.name: figure for figure in one.diagnostics} for one in planes]
    every = {name: figure for figures in own for name, figure in figures.items()}
    per_newton = _counts_per_newton(ledger)
    found = []
    for name, figure in every.items():
        counted = figure.unit == "N" and math.isfinite(per_newton)
        scale = per_newton if counted else 1.0
        shown = tuple(digits(scale * figures[name].value, _DIGITS) if name in figures else "–" for figures in own)
        found.append(
            DiagnosticLine(words(name), "counts" if counted else unit_text(figure.unit), figure.meaning, shown)
        )
    return tuple(found)


def _counts_per_newton(ledger: Ledger) -> float:
    for row in ledger.rows:
        if row.name.endswith("_drag") and row.value and math.isfinite(row.coefficient):
            return row.coefficient / row.value / COUNT
    return math.nan


def diagnostic_heads(ledger: Ledger) -> list[str]:
    """Heads of the columns of the diagnostics, one for each plane."""
    return [head_of(one.station) if ledger.stations else "value" for one in diagnostic_planes(ledger)]


def diagnostic_tables(ledger: Ledger, width: int) -> list[Table]:
    """The diagnostics as tables for the terminal, of several planes as many beside each other as it is wide.

    Parameters
    ----------
    ledger : Ledger
        With diagnostics.
    width : int
        Columns of the terminal.

    Returns
    -------
    list of Table
    """
    lines = diagnostic_lines(ledger)
    columns = [[head, *(line.planes[k] for line in lines)] for k, head in enumerate(diagnostic_heads(ledger))]
    fixed = column_width([line.label for line in lines]) + column_width([line.unit for line in lines])
    found = []
    for block in blocks_of(columns, width - fixed):
        table = new_table(("", "left"), *((column[0], "right") for column in block), ("", "left"))
        for k, line in enumerate(lines, start=1):
            table.add_row(line.label, *(column[k] for column in block), line.unit)
        found.append(table)
    return found


def diagnostic_meanings(ledger: Ledger) -> list[str]:
    """What each diagnostic is."""
    return [f"{line.label}: {line.meaning}" for line in diagnostic_lines(ledger)]
