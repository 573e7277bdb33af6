"""Drag against the station of the plane, with what the planes together came to."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.present.figures.canvas import BLUE, GREEN, GREY, INK, PURPLE, VERMILION, WIDTH, style
from wakeledger.present.stations_text import Scale, how, scale_of
from wakeledger.present.wording import words

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from wakeledger.ledger.ledger import Ledger

#: Rows that get a panel, with the colour and marker of their planes.
_PANELS = {
    "total_drag": (INK, "o"),
    "induced_drag": (BLUE, "s"),
    "induced_drag_free_air": (BLUE, "P"),
    "profile_drag": (GREEN, "^"),
    "wave_drag": (PURPLE, "D"),
    "residual_drag": (GREY, "v"),
    "numerical_drag": (GREY, "X"),
}
#: Rows that get no panel where they are smaller than this part of the total drag or than their own U95.
_MINOR = ("residual_drag", "numerical_drag")
_NOTABLE = 0.01
#: What the decay of the vortices does to a row: it goes out of the induced drag and into the profile drag.
_DECAY_SIGN = {"induced_drag": -1.0, "induced_drag_free_air": -1.0, "profile_drag": 1.0, "total_drag": 0.0}
_CURVE_POINTS = 200


def stations_figure(ledger: Ledger) -> Figure:
    """Each drag against the distance of the plane behind the trailing edge.

    Parameters
    ----------
    ledger : Ledger
        With stations.

    Returns
    -------
    Figure
        One panel per row: planes with bars of U95, the row of the ledger as a line with its U95 as a band, the fitted
        decay of the trailing vortices where it was resolved, and values from elsewhere.
    """
    from matplotlib.figure import Figure
    from matplotlib.lines import Line2D

    rows = stations_rows(ledger)
    with style():
        figure = Figure(figsize=(WIDTH, 1.55 * len(rows) + 1.0), layout="constrained")
        panels = figure.subplots(len(rows), 1, sharex=True, squeeze=False)[:, 0]
        plane = Line2D([], [], color=INK, marker="o", markersize=5, linestyle="none", label="one plane ± U95")
        handles: dict[str, object] = {"plane": plane}
        for axes, name in zip(panels, rows, strict=True):
            for handle in _panel(axes, ledger, name):
                handles.setdefault(str(handle.get_label()), handle)  # type: ignore[attr-defined]
        panels[-1].set_xlabel("distance of the plane behind the trailing edge, m")
        panels[-1].set_xlim(*_reach(ledger))
        figure.align_ylabels(panels)
        figure.legend(handles=list(handles.values()), loc="outside lower left", ncols=3)
    return figure


def stations_rows(ledger: Ledger) -> tuple[str, ...]:
    """Rows of the figure.

    Parameters
    ----------
    ledger : Ledger
        With stations.

    Returns
    -------
    tuple of str
        Those drags that the ledger has with known values, the minor ones only where they can be seen.
    """
    present = {row.name: row for row in ledger.rows}
    found = []
    for name in _PANELS:
        row = present.get(name)
        if row is None or not math.isfinite(row.value):
            continue
        total = abs(present["total_drag"].value) if "total_drag" in present else 0.0
        values = [one.row(name).value for one in ledger.stations]
        least = (
            _NOTABLE * total
            if math.isnan(row.expanded_uncertainty)
            else max(row.expanded_uncertainty, _NOTABLE * total)
        )
        if name in _MINOR and max(map(abs, values)) < least:
            continue
        found.append(name)
    return tuple(found)


def _reach(ledger: Ledger) -> tuple[float, float]:
    """Ends of the axis: from the trailing edge where the drags are those there."""
    stations = [one.station for one in ledger.stations]
    assert ledger.combined is not None
    first = min(0.0, *stations) if ledger.combined.method == "extrapolated" else min(stations)
    margin = 0.06 * ((max(stations) - first) or 1.0)
    return first - margin, max(stations) + margin


def _panel(axes: Axes, ledger: Ledger, name: str) -> list[object]:
    """Draw one row; what was drawn, for the legend."""
    combined = ledger.combined
    assert combined is not None
    colour, marker = _PANELS[name]
    scale = scale_of(ledger, name)
    value, expanded = scale.figures(ledger.row(name))
    followed = how(name, combined) != "mean"
    sign = _DECAY_SIGN.get(name, 0.0) if followed else 0.0
    drawn: list[object] = []
    if sign == 0:
        axes.axhline(value, color=GREY, linewidth=0.9)
        if math.isfinite(expanded):
            low, high = value - expanded, value + expanded
            drawn.append(axes.axhspan(low, high, color=GREY, alpha=0.2, linewidth=0, label="row of the ledger ± U95"))
    others = [line for line in ledger.comparisons if line.row == name and math.isfinite(line.value)]
    drawn += [_compared(axes, line.name, line.value, line.standard_uncertainty, scale) for line in others]
    if sign != 0:
        x, lost = decay_curve(ledger)
        curve = value + sign * scale.per_unit * lost
        drawn += axes.plot(x, curve, color=INK, linewidth=1.0, linestyle=(0, (1.5, 1.5)), label="fitted vortex decay")
    if followed:
        bar = expanded if math.isfinite(expanded) else None
        drawn.append(
            axes.errorbar(
                0.0, value, yerr=bar, color=INK, marker="*", markersize=8, markerfacecolor="white", capsize=2.5,
                elinewidth=1.2, linestyle="none", zorder=3, label="row of the ledger, at the trailing edge",
            )
        )  # fmt: skip
    figures = np.array([scale.figures(one.row(name)) for one in ledger.stations])
    # An unknown uncertainty has no bar, rather than one of no length.
    bars = np.asarray(figures[:, 1], dtype=float)
    known = bars if np.isfinite(bars).any() else None
    axes.errorbar(
        [one.station for one in ledger.stations], figures[:, 0], yerr=known, color=colour,
        marker=marker, markersize=5, capsize=2.5, elinewidth=1.2, linestyle="none", zorder=3,
    )  # fmt: skip
    axes.set_title(words(name))
    axes.set_ylabel(scale.unit)
    axes.margins(y=0.15)
    return drawn


def _compared(axes: Axes, name: str, value: float, u: float, scale: Scale) -> object:
    """Draw a value from elsewhere with its band (k = 2)."""
    at, half = scale.per_unit * value, 2 * scale.per_unit * u
    if math.isfinite(half) and half > 0:
        axes.axhspan(at - half, at + half, color=VERMILION, alpha=0.13, linewidth=0)
    return axes.axhline(at, color=VERMILION, linewidth=1.1, linestyle=(0, (5, 2)), label=f"{name} (band: k = 2)")


def decay_curve(ledger: Ledger) -> tuple[Array, Array]:
    """Induced drag that the trailing vortices have lost, from the trailing edge to the last station.

    Parameters
    ----------
    ledger : Ledger
        With stations behind the trailing edge and a decay at each.

    Returns
    -------
    x : ndarray, shape (n,)
        Distance behind the trailing edge, m.
    lost : ndarray, shape (n,)
        N; zero at the trailing edge, monotone and through the decay at each station.
    """
    from scipy.interpolate import PchipInterpolator

    assert ledger.combined is not None
    known = sorted(zip((one.station for one in ledger.stations), ledger.combined.decay, strict=True))
    at, lost = np.array([(0.0, 0.0), *known]).T
    x = np.linspace(0.0, at[-1], _CURVE_POINTS)
    return x, np.asarray(PchipInterpolator(at, lost)(x))
