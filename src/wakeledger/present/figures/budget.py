"""The uncertainty budget as bars."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from wakeledger.present.figures.canvas import BLUE, WIDTH, style
from wakeledger.present.wording import words

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from wakeledger.ledger.rows import Ledger

#: Rows that get a panel where the budget has them, in this order.
PANELS = ("profile_drag", "induced_drag", "wave_drag", "total_drag", "section_drag", "lift")


def budget_figure(ledger: Ledger) -> Figure:
    """Share of each source in the variance of the main rows, one panel per row.

    Parameters
    ----------
    ledger : Ledger
        With a budget.

    Returns
    -------
    Figure
    """
    from matplotlib.figure import Figure

    shares = {(line.row, line.source): 100 * line.share for line in ledger.budget}
    present = {row for row, _ in shares}
    rows = [row for row in PANELS if row in present][:4] or sorted(present)[:4]
    sources = list(dict.fromkeys(source for row, source in shares if row in rows))
    sources.sort(key=lambda source: -max(np.nan_to_num(shares.get((row, source), 0.0)) for row in rows))
    with style():
        figure = Figure(figsize=(WIDTH, 0.25 * len(sources) + 1.0), layout="constrained")
        panels = figure.subplots(1, len(rows), sharey=True, squeeze=False)[0]
        for axes, row in zip(panels, rows, strict=True):
            widths = [float(np.nan_to_num(shares.get((row, source), 0.0))) for source in sources]
            axes.barh(range(len(sources)), widths, height=0.62, color=BLUE)
            for index, width in enumerate(widths):
                if (row, sources[index]) in shares:
                    axes.annotate(
                        f"{width:.0f}" if width >= 1 else "< 1", (max(width, 0), index), xytext=(3, 0),
                        textcoords="offset points", va="center", fontsize=7.5,
                    )  # fmt: skip
            axes.set_title(words(row))
            axes.set_xlim(0, 112)
            axes.set_xticks([0, 50, 100])
            axes.set_xlabel("share of variance, %")
            axes.tick_params(axis="y", length=0)
        panels[0].set_yticks(range(len(sources)), sources)
        panels[0].set_ylim(len(sources) - 0.5, -0.5)
    return figure
