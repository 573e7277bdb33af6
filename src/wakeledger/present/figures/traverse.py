"""Profiles of a section traverse: loss and speed across the wake."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from wakeledger.core.traverse import axis_of
from wakeledger.present.figures.canvas import BLUE, GREY, INK, WIDTH, style
from wakeledger.present.figures.maps import UNTRUSTED

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from wakeledger.ledger.ledger import Ledger

_LABELS = {"y": "y to starboard, m", "z": "z up, m"}


def is_traverse(ledger: Ledger) -> bool:
    """Whether the ledger's plane is a line traverse.

    Parameters
    ----------
    ledger : Ledger
        The ledger.

    Returns
    -------
    bool
    """
    return axis_of(ledger.plane) is not None


def traverse_figure(ledger: Ledger) -> Figure:
    """Total-pressure loss, local static pressure and speed along the traverse, with the wake's window.

    Parameters
    ----------
    ledger : Ledger
        Of a section (`wakeledger.core.traverse.make_traverse`).

    Returns
    -------
    Figure
    """
    from matplotlib.figure import Figure

    plane = ledger.plane
    along = axis_of(plane)
    assert along is not None
    q, speed, pressure = (
        ledger.reference.get(name, np.nan) for name in ("dynamic_pressure", "speed", "static_pressure")
    )
    position = plane[along].values
    profiles = {str(name): values.values.ravel() for name, values in plane.data_vars.items()}
    untrusted = (profiles["flag"] & UNTRUSTED) != 0
    panels = (
        ("Total-pressure loss", "loss / q", profiles["total_pressure_loss"] / q, 0.0),
        ("Static pressure", "(p − p∞) / q", (profiles["static_pressure"] - pressure) / q, 0.0),
        ("Speed", "u / U", profiles["u"] / speed, 1.0),
    )
    with style():
        figure = Figure(figsize=(WIDTH, 5.4), layout="constrained")
        grid = figure.subplots(3, 1, sharex=True, gridspec_kw={"height_ratios": (3, 1.4, 3)})
        handles = []
        for axes, (title, label, values, level) in zip(grid, panels, strict=True):
            window = axes.axvspan(
                float(plane["wake_from"]), float(plane["wake_to"]), color=GREY, alpha=0.18, linewidth=0, label="wake"
            )
            axes.axhline(level, color=GREY, linewidth=0.7)
            axes.plot(position, values, color=BLUE, linewidth=0.9)
            (measured,) = axes.plot(
                position[~untrusted], values[~untrusted], color=BLUE, marker="o", markersize=2.8, linestyle="none",
                label="measured",
            )  # fmt: skip
            handles = [window, measured]
            if untrusted.any():
                (filled,) = axes.plot(
                    position[untrusted], values[untrusted], color=INK, marker="o", markersize=4.0, linestyle="none",
                    markerfacecolor="white", label="filled in",
                )  # fmt: skip
                handles.append(filled)
            axes.set_title(title)
            axes.set_ylabel(label)
        # A level static pressure is shown as such, not as the last digit's noise.
        low, high = grid[1].get_ylim()
        middle, half = 0.5 * (low + high), max(0.5 * (high - low), 0.01)
        grid[1].set_ylim(middle - half, middle + half)
        grid[-1].set_xlabel(_LABELS[along])
        figure.legend(handles=handles, loc="outside lower left", ncols=len(handles))
    return figure
