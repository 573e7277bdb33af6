"""The report of a grid series, in the manner of a ledger's."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

from wakeledger.ledger.grid_series import FAR_FIELD
from wakeledger.present.grid_series_text import OUTCOMES, own_sentences, pair_cells, series_cells, value_cells
from wakeledger.present.report.page import page, pictures
from wakeledger.present.wording import capital, words

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from wakeledger.ledger.grid_series import GridSeries

_CLASSES = {"monotone": "pass", "assumed": "not_applicable", "unchanged": "not_applicable", "unknown": "unknown"}


def grid_series_html(series: GridSeries, figures: Mapping[str, Figure] | None = None) -> str:
    """The report of a grid series.

    Parameters
    ----------
    series : GridSeries
        The series.
    figures : mapping of str to Figure, optional
        Its figures, where they have been drawn.

    Returns
    -------
    str
        A whole HTML document without external resources; the same series gives the same text.
    """
    from wakeledger.present.figures.grid_series import DRAWINGS, draw_grid_series

    return page(
        "grid_series.html",
        provenance=series.provenance,
        series=series,
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
        pairs=[
            {"name": f"{words(pair.far.row)}, {pair.near.source}", "class": pair.agreement} | pair_cells(pair)
            for pair in series.pairs
        ],
        sentences=[
            *(capital(one.statement) for one in series.series),
            *(capital(pair.statement) for pair in series.pairs),
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
        pictures=list(pictures(draw_grid_series(series) if figures is None else figures, DRAWINGS).values()),
    )
