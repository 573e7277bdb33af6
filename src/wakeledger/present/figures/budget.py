"""The uncertainty budget as bars."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from wakeledger.present.figures.canvas import BLUE, GREY, WIDTH, style
from wakeledger.present.wording import words

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from wakeledger.ledger.increment import Increment
    from wakeledger.ledger.ledger import Ledger

#: Rows that get a panel where the budget has them, in this order.
PANELS = ("profile_drag", "induced_drag", "wave_drag", "total_drag", "section_drag", "lift")


#: Sources below this share in every panel, in per cent, are drawn together.
SMALL = 1.0


def pooled_shares(ledger: Ledger | Increment) -> tuple[list[str], list[str], dict[tuple[str, str], float]]:
    """Rows and sources of the figure, and every share.

    Parameters
    ----------
    ledger : Ledger or Increment
        With a budget.

    Returns
    -------
    tuple
        Rows, sources with the largest first, and the shares in per cent by row and source; NaN where unknown. Sources
        that are small in each of the rows are summed under one name, so that each row still adds up.
    """
    shares = {(line.row, line.source): 100 * line.share for line in ledger.budget}
    present = {row for row, _ in shares}
    rows = [row for row in PANELS if row in present][:4] or sorted(present)[:4]
    largest: dict[str, float] = {}
    for (row, source), share in shares.items():
        if row in rows:
            largest[source] = max(largest.get(source, 0.0), abs(share) if math.isfinite(share) else math.inf)
    sources = sorted((source for source in largest if largest[source] >= SMALL), key=lambda source: -largest[source])
    small = [source for source in largest if largest[source] < SMALL]
    if len(small) == 1:
        sources += small
    elif small:
        name = f"{len(small)} smaller sources"
        sources.append(name)
        for row in rows:
            shares[row, name] = sum(shares.get((row, source), 0.0) for source in small)
    return rows, sources, {key: share for key, share in shares.items() if key[0] in rows and key[1] in sources}


def budget_figure(ledger: Ledger | Increment) -> Figure:
    """Share of each source in the variance of the main rows, one panel per row.

    Parameters
    ----------
    ledger : Ledger or Increment
        With a budget.

    Returns
    -------
    Figure
    """
    from matplotlib.figure import Figure

    rows, sources, shares = pooled_shares(ledger)
    lowest = 1.2 * min([0.0, *(share for share in shares.values() if math.isfinite(share))])
    with style():
        figure = Figure(figsize=(WIDTH, 0.25 * len(sources) + 1.0), layout="constrained")
        panels = figure.subplots(1, len(rows), sharey=True, squeeze=False)[0]
        for axes, row in zip(panels, rows, strict=True):
            for index, source in enumerate(sources):
                share = shares.get((row, source))
                if share is None:
                    continue
                known = math.isfinite(share)
                text = "unknown" if not known else f"{share:.0f}".replace("-", "−") if abs(share) >= 1 else "< 1"
                axes.barh(index, share if known else 0.0, height=0.62, color=BLUE)
                axes.annotate(
                    text, (max(share, 0.0) if known else 0.0, index), xytext=(3, 0), textcoords="offset points",
                    va="center", fontsize=7.5,
                )  # fmt: skip
            axes.set_title(words(row))
            axes.axvline(0, color=GREY, linewidth=0.6)
            axes.set_xlim(lowest, 118)
            axes.set_xticks([0, 50, 100])
            axes.tick_params(axis="y", length=0)
        figure.supxlabel("share of the row's variance, %", fontsize="medium")
        panels[0].set_yticks(range(len(sources)), sources)
        panels[0].set_ylim(len(sources) - 0.5, -0.5)
    return figure
