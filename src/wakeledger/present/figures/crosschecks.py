"""Every estimate and compared value against its primary row, in per cent of the row."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from wakeledger.present.figures.canvas import BLUE, GREY, INK, VERMILION, WIDTH, style
from wakeledger.present.wording import VERDICT_WORDS, words

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from wakeledger.ledger.ledger import Ledger

_MARKS = {
    "agrees": (BLUE, "o", True),
    "disagrees": (VERMILION, "D", True),
    "not_independent": (GREY, "s", False),
    "unknown": (GREY, "o", False),
}


def estimates_figure(ledger: Ledger) -> Figure:
    """Estimates and compared values with their expanded uncertainties (k = 2) beside the primary rows.

    Parameters
    ----------
    ledger : Ledger
        With estimates or comparisons.

    Returns
    -------
    Figure
        One line per figure; the row's own interval is the shaded band, the expected difference a short stroke.
    """
    from matplotlib.figure import Figure
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch, Rectangle

    lines = offsets(ledger)
    with style():
        figure = Figure(figsize=(WIDTH, 0.24 * len(lines) + 1.35), layout="constrained")
        axes = figure.add_subplot()
        for index, line in enumerate(lines):
            if math.isfinite(line.band):
                axes.add_patch(
                    Rectangle((-line.band, index - 0.5), 2 * line.band, 1.0, facecolor=GREY, alpha=0.22, linewidth=0)
                )
            colour, marker, filled = _MARKS[line.verdict]
            face = colour if filled else "white"
            bar = line.half if math.isfinite(line.half) else None
            axes.errorbar(
                line.offset, index, xerr=bar, color=colour, marker=marker, markerfacecolor=face, markersize=5,
                capsize=2.5, elinewidth=1.2, linestyle="none",
            )  # fmt: skip
            if line.expected:
                axes.plot([line.expected] * 2, [index - 0.36, index + 0.36], color=INK, linewidth=1.6)
        axes.axvline(0, color=INK, linewidth=0.8)
        axes.set_yticks(range(len(lines)), [line.label for line in lines])
        axes.set_ylim(len(lines) - 0.5, -0.5)
        axes.tick_params(axis="y", length=0)
        axes.spines["left"].set_visible(False)
        axes.set_xlabel("difference from the primary row, % of the row")
        axes.set_title("Estimates and compared values (bars: k = 2)")
        handles: list[object] = [Patch(facecolor=GREY, alpha=0.3, label="row ± U95")]
        used = {line.verdict for line in lines}
        for verdict, (colour, marker, filled) in _MARKS.items():
            if verdict in used:
                face = colour if filled else "white"
                handles.append(
                    Line2D(
                        [],
                        [],
                        color=colour,
                        marker=marker,
                        markerfacecolor=face,
                        linestyle="none",
                        label=VERDICT_WORDS[verdict].lower(),
                    )
                )
        handles.append(Line2D([], [], color=INK, linestyle="none", marker="|", markersize=9, label="expected"))
        figure.legend(handles=handles, loc="outside lower left", ncols=len(handles), handletextpad=0.4)
    return figure


@dataclass(frozen=True)
class Offset:
    """One figure beside its primary row, all in per cent of the row.

    Attributes
    ----------
    label : str
        Row and method, or row and compared value.
    band : float
        Half width of the row's own interval (95 %).
    offset : float
        The figure minus the row.
    half : float
        Expanded uncertainty of the figure (k = 2).
    expected : float
        The offset that is to be expected.
    verdict : str
        Verdict of the estimate or comparison.
    """

    label: str
    band: float
    offset: float
    half: float
    expected: float
    verdict: str


def offsets(ledger: Ledger) -> tuple[Offset, ...]:
    """Every estimate and compared value relative to its primary row.

    Parameters
    ----------
    ledger : Ledger
        The ledger.

    Returns
    -------
    tuple of Offset
        Without those whose difference is unknown or whose row is unknown or zero.
    """
    rows = {row.name: row for row in ledger.rows if math.isfinite(row.value) and row.value != 0}
    figures = [
        (
            line.row,
            words(line.method),
            line.difference,
            line.standard_uncertainty,
            line.expected_difference,
            line.verdict,
        )
        for line in ledger.estimates
    ]
    figures += [
        (line.row, line.name, -line.difference, line.standard_uncertainty, 0.0, line.verdict)
        for line in ledger.comparisons
    ]
    found = []
    for name, label, difference, u, expected, verdict in figures:
        row = rows.get(name)
        if row is not None and math.isfinite(difference):
            percent = 100 / abs(row.value)
            found.append(
                Offset(
                    label=f"{words(name)}: {label}",
                    band=percent * row.expanded_uncertainty,
                    offset=percent * difference,
                    half=2 * percent * u,
                    expected=percent * expected,
                    verdict=verdict,
                )
            )
    return tuple(found)
