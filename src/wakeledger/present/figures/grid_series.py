"""Figure of a grid series: far and near field against the size of the cells, with what they are extrapolated to."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from wakeledger.ledger.grid_series import EXTRAPOLATED, FAR_FIELD
from wakeledger.present.figures.canvas import BLUE, GREY, INK, VERMILION, WIDTH, style
from wakeledger.present.figures.drawing import Drawing, drawn
from wakeledger.present.wording import unit_text, words

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from wakeledger.ledger.grid_series import GridSeries, Series

#: Rows that get a panel where they were compared with nothing, in this order.
PANELS = ("total_drag", "section_drag", "profile_drag", "induced_drag", "wave_drag", "lift")
_MOST_ROWS = 6
_CURVE_POINTS = 100


def drawn_rows(series: GridSeries) -> list[str]:
    """Rows of the figure: those that are compared with a near field, then the main ones.

    Parameters
    ----------
    series : GridSeries
        The series.

    Returns
    -------
    list of str
        Only rows that are known on every grid that counts.
    """
    known = [one.row for one in series.series if one.source == FAR_FIELD and one.found is not None]
    compared = [pair.far.row for pair in series.pairs]
    wanted = dict.fromkeys([*(name for name in PANELS if name in compared), *compared, *PANELS])
    return [name for name in wanted if name in known][:_MOST_ROWS]


def grid_series_figure(series: GridSeries) -> Figure:
    """Values against the size of the cells.

    Parameters
    ----------
    series : GridSeries
        With at least one known row.

    Returns
    -------
    Figure
        One line of panels per row, the far field on the left and what it is compared with on the right, on one scale:
        the value on each grid, the curve of the observed order down to no cell size, and the finest grid's value with
        its index as a band; where the order is not trusted, the band is that of the spread and there is no curve.
    """
    from matplotlib.figure import Figure
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch

    rows = drawn_rows(series)
    beside = bool(series.pairs)
    with style():
        figure = Figure(figsize=(WIDTH, 1.65 * len(rows) + 1.0), layout="constrained")
        panels = figure.subplots(len(rows), 2 if beside else 1, sharex=True, sharey="row", squeeze=False)
        for line, name in zip(panels, rows, strict=True):
            far = series.of(name)
            _panel(line[0], series, far, BLUE, "o")
            line[0].set_title(f"{words(name)}, far field" if beside else words(name))
            line[0].set_ylabel(unit_text(far.scale[1]))
            if not beside:
                continue
            near = [pair.near for pair in series.pairs if pair.far.row == name and pair.near.found is not None]
            for one, marker in zip(near, "sD^v<>", strict=False):
                _panel(line[1], series, one, VERMILION, marker)
            if near:
                line[1].set_title(f"{words(name)}, {', '.join(one.source for one in near)}")
            else:
                line[1].set_axis_off()
        for column in panels.T:
            lowest = [axes for axes in column if axes.axison][-1:]
            for axes in lowest:
                axes.set_xlabel("cell size over that of the finest grid")
                axes.tick_params(labelbottom=True)
        panels[0, 0].set_xlim(0.0, 1.08 * series.grids[0].size)
        figure.align_ylabels(panels[:, 0])
        figure.legend(
            handles=[
                Line2D([], [], color=INK, marker="o", linestyle="none", label="value on a grid"),
                Line2D([], [], color=INK, linestyle=(0, (5, 2)), label="observed or assumed order"),
                Line2D([], [], color=INK, marker="*", markersize=8, markerfacecolor="white", linestyle="none",
                       label="extrapolated"),
                Patch(color=GREY, alpha=0.3, label="GCI, or 2 u where not trusted"),
            ],
            loc="outside lower left",
            ncols=4,
        )  # fmt: skip
    return figure


def _panel(axes: Axes, series: GridSeries, one: Series, colour: str, marker: str) -> None:
    scale, _ = one.scale
    h = np.array([grid.size for grid in series.grids])
    values = scale * np.array(one.values)
    found = one.found
    assert found is not None
    half = abs(scale) * one.expanded_uncertainty
    if math.isfinite(half):
        axes.axhspan(values[-1] - half, values[-1] + half, color=colour, alpha=0.13, linewidth=0)
    if one.verdict in EXTRAPOLATED:
        limit = scale * found.extrapolated
        x = np.linspace(0.0, h[-min(3, h.size)], _CURVE_POINTS)
        axes.plot(x, limit + (values[-1] - limit) * x**found.order, color=colour, linewidth=1.0, linestyle=(0, (5, 2)))
        axes.plot(
            0.0, limit, "*", color=colour, markersize=9, markerfacecolor="white", clip_on=False, zorder=3
        )  # fmt: skip
    filled = colour if one.trusted else "white"
    axes.plot(h, values, marker, color=colour, markersize=5, markerfacecolor=filled, zorder=3)
    axes.margins(y=0.2)


#: The figure by the name of its file.
DRAWINGS: dict[str, Drawing[GridSeries]] = {
    "grid_series": Drawing(
        grid_series_figure,
        lambda series: bool(drawn_rows(series)),
        "Values against the size of the cells, far field and near field on one scale. Dashed: the order, down to no "
        "cell size (star). Band: the grid convergence index about the finest grid's value; where the order is not "
        "trusted (open markers), the spread of the grids.",
    )
}


def draw_grid_series(series: GridSeries) -> dict[str, Figure]:
    """The figure by its name, if anything is known."""
    return drawn(DRAWINGS, series)
