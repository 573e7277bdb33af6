"""The runs behind a combined ledger, as a table."""

from __future__ import annotations

from typing import TYPE_CHECKING

from wakeledger.ledger.repeats import RepeatLine, repeat_lines
from wakeledger.ledger.rounding import rounded
from wakeledger.ledger.rows import COUNT
from wakeledger.present.printing import new_table
from wakeledger.present.wording import digits, in_counts, unit_text, words

if TYPE_CHECKING:
    import xarray as xr
    from rich.table import Table

    from wakeledger.ledger.ledger import Ledger

#: More runs than this are not printed one by one.
MOST_RUNS = 4

#: Verdicts as they are printed.
VERDICTS = {
    "consistent": "as declared",
    "larger": "LARGER THAN DECLARED",
    "smaller": "smaller than declared",
    "unknown": "unknown",
}


def repeats_cells(ledger: Ledger, repeats: xr.Dataset) -> list[dict[str, str | list[str]]]:
    """What a table of the runs shows, row by row.

    Parameters
    ----------
    ledger : Ledger
        The combined ledger.
    repeats : Dataset
        Its runs.

    Returns
    -------
    list of dict
        ``row``, ``figures`` of the runs, ``unit``, ``between``, ``upper``, ``birge`` and ``verdict``, as printed.
    """
    return [_cells(ledger, line) for line in repeat_lines(repeats)]


def _cells(ledger: Ledger, line: RepeatLine) -> dict[str, str | list[str]]:
    row = ledger.row(line.row)
    scale, unit = 1.0, unit_text(row.unit)
    expanded = row.expanded_uncertainty
    if line.of_coefficient:
        scale, unit = (COUNT, "counts") if in_counts(line.row) else (1.0, "")
        expanded = row.coefficient_expanded_uncertainty
    return {
        "row": words(line.row),
        "figures": [rounded(figure / scale, expanded / scale)[0] for figure in line.figures],
        "unit": unit,
        "between": digits(line.between / scale, 2),
        "upper": digits(line.between_upper / scale, 2),
        "birge": digits(line.birge_ratio, 2),
        "verdict": VERDICTS[line.verdict],
    }


def repeats_table(ledger: Ledger, repeats: xr.Dataset) -> Table:
    """The runs and the scatter between them, as a table for the terminal.

    Parameters
    ----------
    ledger, repeats
        As for `repeats_cells`.

    Returns
    -------
    Table
    """
    count = repeats.sizes["run"]
    runs = [f"run {k}" for k in range(1, count + 1)] if count <= MOST_RUNS else []
    table = new_table(
        ("", "left"), *((run, "right") for run in runs), ("", "left"), ("between", "right"), ("at most", "right"),
        ("Birge", "right"), ("scatter", "left"),
    )  # fmt: skip
    for cells in repeats_cells(ledger, repeats):
        figures = cells["figures"] if runs else []
        table.add_row(
            str(cells["row"]), *figures, *(str(cells[key]) for key in ("unit", "between", "upper", "birge", "verdict"))
        )
    return table
