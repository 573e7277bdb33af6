"""A grid series as text for a terminal; a pure function, nothing is printed here."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

from wakeledger.ledger.grid_series import FAR_FIELD
from wakeledger.ledger.rounding import UNKNOWN, rounded, significant
from wakeledger.present.printing import bullet, heading, new_console, new_table, section, sentences_of, with_statement
from wakeledger.present.wording import (
    VERDICT_WORDS,
    digits,
    error_text,
    grouped_reasons,
    printable,
    signed,
    unit_text,
    words,
)

if TYPE_CHECKING:
    from rich.console import RenderableType
    from rich.table import Table

    from wakeledger.ledger.grid_series import GridSeries, Pair, Series

#: Outcome in words; those that ask for attention are in capitals, so that they stand out without colour.
OUTCOMES = {
    "monotone": "monotone",
    "assumed": "order assumed",
    "close_grids": "GRIDS TOO ALIKE",
    "out_of_range": "OUT OF RANGE",
    "oscillatory": "OSCILLATES",
    "divergent": "DIVERGES",
    "unchanged": "no change",
    "unknown": "unknown",
}
_STYLES = {"monotone": "bold green", "assumed": "dim", "unchanged": "dim"}
#: Width of the terminal from which on so many of the finest grids are printed one by one, the widest first.
_GRIDS_SHOWN = ((112, 4), (92, 3), (0, 1))


def grid_series_text(series: GridSeries, *, width: int = 100, colour: bool = False) -> str:
    """A grid series as text: the grids, far and near field on each with order and index, and how the two compare.

    Parameters
    ----------
    series : GridSeries
        The series.
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
    heading(console, "Grid series", {})
    for number, line in enumerate(grid_lines(series), 1):
        console.print(printable(f"grid {number}: {line}"))
    console.print()
    most = next(number for least, number in _GRIDS_SHOWN if console.width >= least)
    shown = range(len(series.grids))[-most:]
    console.print(_table(series, shown))
    doubts = [
        (f"{words(one.row)}, {one.source}", one.reason if one.found is None else one.found.reason)
        for one in series.series
        if one.verdict not in ("monotone", "assumed")
    ]
    for sentence in grouped_reasons(doubts):
        bullet(console, sentence)
    if series.pairs:
        section(console, "Far field less near field")
        console.print(_pairs(series, shown))
    sentences_of(console, "Warnings", series.warnings)
    failed = [f"grid {number}: {text}" for number, grid in enumerate(series.grids, 1) for text in grid.failed]
    sentences_of(console, "Failed checks", failed)
    sentences_of(console, "Notes", [*series.notes, *own_sentences(series)])
    return with_statement(console)


def grid_lines(series: GridSeries) -> list[str]:
    """Each grid with its title, cells and size.

    Parameters
    ----------
    series : GridSeries
        The series.

    Returns
    -------
    list of str
    """
    return [f"{grid.title}, {grid.cells:.0f} cells, h {grid.size:.3g}" for grid in series.grids]


def own_sentences(series: GridSeries) -> list[str]:
    """What is said of rows that change less from grid to grid than they are known.

    Parameters
    ----------
    series : GridSeries
        The series.

    Returns
    -------
    list of str
    """
    names = [words(one.row) for one in series.series if one.within_own and one.source == FAR_FIELD]
    if not names:
        return []
    return [
        "The grids differ by less than the row's own standard uncertainty, so that the order may be that of the"
        f" reduction: {', '.join(names)}."
    ]


def series_cells(one: Series) -> dict[str, str]:
    """What a table shows of one series.

    Parameters
    ----------
    one : Series
        The series.

    Returns
    -------
    dict of str to str
        ``order``, ``extrapolated``, ``error`` (per cent), ``index`` (per cent), ``u`` and ``unit``; a dash where there
        is none.
    """
    scale, unit = one.scale
    u = abs(scale) * one.standard_uncertainty
    limit = rounded(scale * one.extrapolated, u)[0]
    found = one.found
    return {
        "order": "–" if found is None or math.isnan(found.order) else f"{found.order:.2f}",
        "extrapolated": "–" if limit == UNKNOWN else limit,
        "error": _per_cent(math.nan if found is None else found.approximate_error),
        "index": _per_cent(math.nan if found is None else found.index),
        "u": digits(u, 2),
        "unit": unit_text(unit),
    }


def value_cells(one: Series) -> list[str]:
    """The value on each grid as it is printed.

    Parameters
    ----------
    one : Series
        The series.

    Returns
    -------
    list of str
    """
    scale, _ = one.scale
    shown = [rounded(scale * value, abs(scale) * one.standard_uncertainty)[0] for value in one.values]
    return ["–" if text == UNKNOWN else text for text in shown]


def pair_cells(pair: Pair) -> dict[str, object]:
    """What a table shows of far field less near field.

    Parameters
    ----------
    pair : Pair
        The pair.

    Returns
    -------
    dict
        ``differences`` (list), ``extrapolated``, ``expanded``, ``unit``, ``error`` and ``verdict``, as printed.
    """
    scale, unit = pair.far.scale
    expanded = 2 * abs(scale) * pair.standard_uncertainty
    return {
        "differences": [signed(scale * difference, expanded) for difference in pair.differences],
        "extrapolated": signed(scale * pair.extrapolated, expanded),
        "expanded": digits(expanded, 2),
        "unit": unit_text(unit),
        "error": error_text(pair.normalised_error),
        "verdict": VERDICT_WORDS[pair.agreement],
    }


def _table(series: GridSeries, shown: Sequence[int]) -> Table:
    from rich.text import Text

    roomy = len(shown) > 1
    table = new_table(
        ("", "left"),
        *((f"grid {k + 1}", "right") for k in shown),
        ("h → 0", "right"),
        ("order", "right"),
        *([("e, %", "right")] if roomy else []),
        ("GCI, %", "right"),
        *([("u", "right")] if roomy else []),
        ("", "left"),
    )
    for one in series.series:
        cells, values = series_cells(one), value_cells(one)
        head = f"  {printable(one.source)}"
        if one.source == FAR_FIELD:
            head = ", ".join(part for part in (words(one.row), cells["unit"]) if part)
        line: list[RenderableType] = [head, *(values[k] for k in shown), cells["extrapolated"]]
        keys = ("order", "error", "index", "u") if roomy else ("order", "index")
        line += [cells[key] for key in keys]
        line.append(Text(OUTCOMES[one.verdict], style=_STYLES.get(one.verdict, "bold yellow")))
        table.add_row(*line)
    return table


def _pairs(series: GridSeries, shown: Sequence[int]) -> Table:
    table = new_table(
        ("", "left"),
        *((f"grid {k + 1}", "right") for k in shown),
        ("h → 0", "right"),
        ("± U95", "left"),
        ("unit", "left"),
        ("E_n", "right"),
        ("", "left"),
    )
    for pair in series.pairs:
        cells = pair_cells(pair)
        differences = cells["differences"]
        assert isinstance(differences, list)
        figures = [differences[k] for k in shown]
        rest = [str(cells[key]) for key in ("extrapolated", "expanded", "unit", "error", "verdict")]
        table.add_row(printable(f"{words(pair.far.row)}, {pair.near.source}"), *figures, *rest)
    return table


def _per_cent(share: float) -> str:
    if math.isnan(share):
        return "–"
    return significant(100 * share, 2) if share < 10 else "> 1000"
