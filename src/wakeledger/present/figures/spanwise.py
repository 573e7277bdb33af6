"""Span loading and the drag of each strip along the span."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from wakeledger.present.figures.canvas import BLUE, GREEN, GREY, INK, PURPLE, VERMILION, WIDTH, style
from wakeledger.present.wording import unit_text, words

if TYPE_CHECKING:
    import xarray as xr
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from wakeledger.ledger.ledger import Ledger

_LINES = (
    (BLUE, "-"), (VERMILION, (0, (5, 2))), (GREEN, (0, (1.5, 1.5))), (PURPLE, (0, (5, 1.5, 1.5, 1.5))), (INK, "-"),
)  # fmt: skip


def span_figure(ledger: Ledger) -> Figure:
    """Bound circulation above, drag per unit span below, both along y.

    Parameters
    ----------
    ledger : Ledger
        With a ``span`` dataset along y: circulations in m2 s-1, drags per unit span in N/m, each with its
        uncertainty under ``<name>_standard_uncertainty`` where there is one.

    Returns
    -------
    Figure
    """
    from matplotlib.figure import Figure

    span = ledger.span
    assert span is not None
    panels = [panel for panel in (_named(span, "m2 s-1"), _named(span, "N/m")) if panel]
    titles = {"m2 s-1": "Bound circulation along the span", "N/m": "Drag of each strip, per unit span"}
    with style():
        figure = Figure(figsize=(WIDTH, 2.3 * max(1, len(panels)) + 0.4), layout="constrained")
        grid = figure.subplots(max(1, len(panels)), 1, sharex=True, squeeze=False)
        for axes, names in zip(grid[:, 0], panels, strict=False):
            unit = str(span[names[0]].attrs["units"])
            for name, (colour, line) in zip(names, _LINES, strict=False):
                _curve(axes, span, name, colour, line)
            axes.set_title(titles[unit])
            axes.set_ylabel(f"Γ, {unit_text(unit)}" if unit == "m2 s-1" else f"drag, {unit_text(unit)}")
            axes.axhline(0, color=GREY, linewidth=0.6)
            if len(names) > 1:
                axes.legend(loc="best")
        grid[-1, 0].set_xlabel("y to starboard, m (seen from behind)")
    return figure


def _named(span: xr.Dataset, unit: str) -> list[str]:
    names = [str(name) for name, values in span.data_vars.items() if values.dims == ("y",)]
    chosen = [name for name in names if span[name].attrs.get("units") == unit and "uncertainty" not in name]
    return chosen if unit != "N/m" else [name for name in chosen if "drag" in name]


def _curve(axes: Axes, span: xr.Dataset, name: str, colour: str, line: object) -> None:
    y, values = span["y"].values, span[name].values
    axes.plot(y, values, color=colour, linestyle=line, label=words(name))
    uncertainty = f"{name}_standard_uncertainty"
    if uncertainty in span:
        expanded = 2 * np.nan_to_num(span[uncertainty].values)
        axes.fill_between(y, values - expanded, values + expanded, color=colour, alpha=0.18, linewidth=0)
