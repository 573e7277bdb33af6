"""The report of a grid series, in the manner of a ledger's."""

from __future__ import annotations

from typing import TYPE_CHECKING

from wakeledger.ledger.grid_series import FAR_FIELD
from wakeledger.present.grid_series_text import OUTCOMES, own_sentences, pair_cells, series_cells, value_cells
from wakeledger.present.report.document import environment, picture
from wakeledger.present.wording import STATEMENT, words

if TYPE_CHECKING:
    from wakeledger.ledger.grid_series import GridSeries

CAPTION = (
    "Values against the size of the cells, far field and near field on one scale. Dashed: the order, down to no cell "
    "size (star). Band: the grid convergence index about the finest grid's value; where the order is not trusted (open "
    "markers), the spread of the grids."
)
_CLASSES = {"monotone": "pass", "assumed": "not_applicable", "unchanged": "not_applicable", "unknown": "unknown"}


def grid_series_html(series: GridSeries) -> str:
    """The report of a grid series.

    Parameters
    ----------
    series : GridSeries
        The series.

    Returns
    -------
    str
        A whole HTML document without external resources; the same series gives the same text.
    """
    from wakeledger.present.figures.grid_series import draw_grid_series

    return (
        environment()
        .get_template("grid_series.html")
        .render(
            series=series,
            statement=STATEMENT,
            rows=[
                {
                    "name": words(one.row) if one.source == FAR_FIELD else one.source,
                    "main": one.row in ("total_drag", "section_drag") and one.source == FAR_FIELD,
                    "near": one.source != FAR_FIELD,
                    "values": value_cells(one),
                    "outcome": OUTCOMES[one.verdict],
                    "class": _CLASSES.get(one.verdict, "warn"),
                }
                | series_cells(one)
                for one in series.series
            ],
            pairs=[{"name": f"{words(pair.far.row)}, {pair.near.source}", "class": pair.agreement} | pair_cells(pair)
                   for pair in series.pairs],
            sentences=[
                *(_capital(one.statement) for one in series.series),
                *(_capital(pair.statement) for pair in series.pairs),
            ],
            attention=[
                *series.warnings,
                *(
                    f"On grid {number} a check failed: {text}"
                    for number, grid in enumerate(series.grids, 1)
                    for text in grid.failed
                ),
            ],
            notes=[*series.notes, *own_sentences(series)],
            pictures=[picture(name, figure, CAPTION) for name, figure in draw_grid_series(series).items()],
            versions={
                key.removeprefix("version "): text for key, text in series.provenance.items() if "version " in key
            },
        )
    )  # fmt: skip


def _capital(text: str) -> str:
    return text[:1].upper() + text[1:]
