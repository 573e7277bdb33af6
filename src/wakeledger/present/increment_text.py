"""An increment as text for a terminal; a pure function, nothing is printed here."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

from wakeledger.ledger.rounding import UNKNOWN, rounded
from wakeledger.ledger.rows import COUNT
from wakeledger.present.printing import (
    bullet,
    heading,
    joined,
    new_console,
    new_table,
    section,
    sentences_of,
    with_statement,
)
from wakeledger.present.wording import ABOUT_COUNTS, ABOUT_U95, digits, grouped_reasons, printable, unit_text, words

if TYPE_CHECKING:
    from rich.console import RenderableType
    from rich.table import Table

    from wakeledger.ledger.increment import Cancellation, Figure, Increment, IncrementRow

#: From this width on, the coverage factor and the uncertainty of two separate surveys are shown.
ROOMY = 92

#: Share of the largest source below which another is nothing but rounding.
_ROUNDING = 1e-5

#: Rows whose cancellations are printed: the first that there is.
MAIN_ROWS = ("total_drag", "section_drag", "profile_drag")

#: Outcome in words, and how it is shown.
OUTCOMES = {True: "RESOLVED", False: "not resolved", None: "unknown"}
_STYLES = {True: "bold green", False: "dim", None: "yellow"}


def increment_text(increment: Increment, *, width: int = 100, colour: bool = False) -> str:
    """An increment as text: rows with their verdict, what cancelled, what did not, warnings and notes.

    Parameters
    ----------
    increment : Increment
        The increment.
    width : int
        Columns of the terminal.
    colour : bool
        Whether to write the terminal's colour codes; nothing is said by colour alone.

    Returns
    -------
    str
        Lines without trailing blanks, ended by a line feed.
    """
    console = new_console(width, colour)
    heading(console, "Increment B − A", {})
    for name, side in (("A", increment.a), ("B", increment.b)):
        run = " · ".join(f"{key} {value}" for key, value in side.test.items() if key in ("run", "point"))
        console.print(printable(f"{name}: {side.title}" + (f" ({run})" if run else "")))
    console.print()
    console.print(_rows_table(increment.rows, roomy=console.width >= ROOMY))
    for sentence in grouped_reasons((words(row.name), row.reason) for row in increment.rows):
        bullet(console, sentence)
    corrected = corrected_cells(increment)
    if corrected:
        section(console, "Coefficients on the dynamic pressure corrected for blockage, B − A in counts")
        console.print(_corrected_table(corrected))
    main = main_row(increment)
    lines = [line for line in increment.cancellations if main is not None and line.row == main.name]
    if lines and main is not None:
        section(console, f"Shared sources in the {words(main.name)} ({_unit(main) or 'its unit'}, k = 1)")
        console.print(_cancellation_table(lines, in_counts=main.judged is main.coefficient))
    if increment.not_cancelled:
        section(console, "Not cancelled")
        for sentence in grouped_reasons((line.source, line.reason) for line in increment.not_cancelled):
            bullet(console, sentence)
    sentences_of(console, "Warnings", increment.warnings)
    failed = [f"{name}: {text}" for name, side in (("A", increment.a), ("B", increment.b)) for text in side.failed]
    sentences_of(console, "Failed checks", failed)
    sentences_of(console, "Notes", increment.notes)
    about = "Uncancelled: the uncertainty of two separate surveys, nothing cancelling, in units of u."
    return with_statement(console, ABOUT_U95, ABOUT_COUNTS, *([about] if console.width >= ROOMY else []))


def main_row(increment: Increment) -> IncrementRow | None:
    """The row whose uncertainty is shown source by source.

    Parameters
    ----------
    increment : Increment
        The increment.

    Returns
    -------
    IncrementRow or None
        None where no uncertainty is known.
    """
    known = {row.name: row for row in increment.rows if row.resolved is not None}
    return next((known[name] for name in (*MAIN_ROWS, *known) if name in known), None)


def figure_text(figure: Figure, scale: float = 1.0) -> tuple[str, str]:
    """A difference, with its sign, and its expanded uncertainty as they are printed.

    Parameters
    ----------
    figure : Figure
        The difference.
    scale : float
        What both are divided by.

    Returns
    -------
    tuple of str
        Two empty strings where the difference is unknown.
    """
    difference, expanded = rounded(figure.difference / scale, figure.expanded_uncertainty / scale)
    if difference == UNKNOWN:
        return "", ""
    plain = difference.startswith("-") or not difference.strip("0.")
    return (difference if plain else f"+{difference}"), expanded


def _rows_table(rows: Sequence[IncrementRow], *, roomy: bool) -> Table:
    from rich.text import Text

    apart = [("k", "right"), ("uncancelled", "right")] if roomy else []
    table = new_table(
        ("", "left"), ("B − A ± U95", "left"), ("unit", "left"), ("counts ± U95", "left"), *apart, ("", "left")
    )
    values = joined([figure_text(row.value) for row in rows])
    counts = joined([figure_text(row.coefficient, COUNT) for row in rows])
    for row, value, count in zip(rows, values, counts, strict=True):
        judged = row.judged
        ratio = (
            judged.uncancelled_uncertainty / judged.standard_uncertainty if judged.standard_uncertainty else math.nan
        )
        cells: list[RenderableType] = [words(row.name), value, unit_text(row.unit), count]
        if roomy:
            cells += [digits(judged.coverage_factor, 3), f"{digits(ratio, 3)} u" if math.isfinite(ratio) else "–"]
        cells.append(Text(OUTCOMES[row.resolved], style=_STYLES[row.resolved]))
        table.add_row(*cells)
    return table


def corrected_cells(increment: Increment) -> list[dict[str, str]]:
    """Differences of the coefficients on the dynamic pressure corrected for blockage.

    Parameters
    ----------
    increment : Increment
        The increment.

    Returns
    -------
    list of dict
        ``row``, ``counts``, ``expanded``, ``k``, ``ratio`` of two separate surveys to the increment, ``outcome`` and
        ``style`` of the rows that have them.
    """
    found = []
    for row in increment.rows:
        figure = row.corrected
        if figure is None:
            continue
        counts, expanded = figure_text(figure, COUNT)
        u = figure.standard_uncertainty
        found.append(
            {
                "row": words(row.name),
                "counts": counts,
                "expanded": expanded,
                "k": digits(figure.coverage_factor, 3),
                "ratio": digits(figure.uncancelled_uncertainty / u, 3) if u else "–",
                "outcome": OUTCOMES[figure.resolved],
                "style": _STYLES[figure.resolved],
            }
        )
    return found


def _corrected_table(cells: Sequence[dict[str, str]]) -> Table:
    from rich.text import Text

    table = new_table(("", "left"), ("counts ± U95", "left"), ("k", "right"), ("uncancelled", "right"), ("", "left"))
    shown = joined([(line["counts"], line["expanded"]) for line in cells])
    for line, counts in zip(cells, shown, strict=True):
        ratio = "–" if line["ratio"] == "–" else f"{line['ratio']} u"
        table.add_row(line["row"], counts, line["k"], ratio, Text(line["outcome"], style=line["style"]))
    return table


def _cancellation_table(lines: Sequence[Cancellation], *, in_counts: bool) -> Table:
    table = new_table(
        ("source", "left"), ("shared_id", "left"), ("in A", "right"), ("in B", "right"), ("left in B − A", "right")
    )
    whole = largest_part(lines, in_counts=in_counts)
    for line in lines:
        figures = (line.in_a, line.in_b, line.left)
        if in_counts:
            figures = (line.coefficient_in_a, line.coefficient_in_b, line.coefficient_left)
        scale = COUNT if in_counts else 1.0
        name = line.source_a if line.source_a == line.source_b else f"{line.source_a} / {line.source_b}"
        shown = (part_text(figure / scale, whole / scale) for figure in figures)
        table.add_row(printable(name), printable(line.shared_id), *shown)
    return table


def largest_part(lines: Sequence[Cancellation], *, in_counts: bool) -> float:
    """The largest standard uncertainty of A or B from one of some shared sources.

    Parameters
    ----------
    lines : sequence of Cancellation
        The sources in one row.
    in_counts : bool
        Whether of the coefficient instead of the value.

    Returns
    -------
    float
    """
    if in_counts:
        return max(max(line.coefficient_in_a, line.coefficient_in_b) for line in lines)
    return max(max(line.in_a, line.in_b) for line in lines)


def part_text(figure: float, whole: float) -> str:
    """What one source comes to, as it is printed; rounding errors of the whole are none.

    Parameters
    ----------
    figure : float
        Standard uncertainty from the source.
    whole : float
        Largest of such figures.

    Returns
    -------
    str
    """
    return "0" if figure <= _ROUNDING * whole else digits(figure, 2)


def _unit(row: IncrementRow) -> str:
    return "counts" if row.judged is row.coefficient else unit_text(row.unit)
