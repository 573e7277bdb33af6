"""The survey plane in the section of the tunnel, seen from behind."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.core.plane import grid_of
from wakeledger.present.figures.canvas import BLUE, GREEN, GREY, INK, VERMILION, WIDTH, style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from wakeledger.ledger.ledger import Ledger

_EDGES = {"closed_walls": "walls", "open_jet": "edge of the jet", "free_air": ""}
_PALE = "#eef0f2"
_TITLES = {"closed_walls": "The plane between walls", "open_jet": "The plane in the open jet"}
#: The mirrored half shows through it.
VEIL, HATCH = (1.0, 1.0, 1.0, 0.55), "////"


def has_section(ledger: Ledger) -> bool:
    """Whether the ledger knows walls, a jet or a reflection plane around its plane."""
    return bool(ledger.plane.attrs.get("reflection")) or "section_y" in ledger.plane.attrs


def section_figure(ledger: Ledger) -> Figure:
    """Outline of the section, the survey's window, its wake region and vortices, and the reflection plane.

    Parameters
    ----------
    ledger : Ledger
        With what surrounds the plane among the plane's attributes.

    Returns
    -------
    Figure
    """
    from matplotlib.figure import Figure

    corners = section_corners(ledger)
    low, high = corners.min(axis=0), corners.max(axis=0)
    margin = 0.05 * float(max(high - low))
    with style():
        height = float(np.clip((WIDTH - 0.8) * (high[1] - low[1]) / (high[0] - low[0]), 1.6, 6.0)) + 1.15
        figure = Figure(figsize=(WIDTH, height), layout="constrained")
        axes = figure.add_subplot()
        handles = [
            *_outline(axes, ledger, corners),
            *_window(axes, ledger),
            *_reflection(axes, ledger, low, high),
        ]
        axes.set_aspect("equal")
        axes.set_xlim(low[0] - margin, high[0] + margin)
        axes.set_ylim(low[1] - margin, high[1] + margin)
        axes.set_title(_TITLES.get(str(ledger.plane.attrs.get("boundary")), "The plane and its reflection plane"))
        axes.set_xlabel("y to starboard, m (seen from behind)")
        axes.set_ylabel("z up, m")
        figure.legend(handles=handles, loc="outside lower left", ncols=min(len(handles), 4))
    return figure


def section_corners(ledger: Ledger) -> Array:
    """Corners of what is drawn: of the section, or of the window and its mirror image where there are no walls.

    Parameters
    ----------
    ledger : Ledger
        As for `section_figure`.

    Returns
    -------
    ndarray, shape (n, 2)
        y and z, m.
    """
    attributes = ledger.plane.attrs
    if "section_y" in attributes:
        return np.column_stack([attributes["section_y"], attributes["section_z"]])
    grid = grid_of(ledger.plane)
    y, z = (float(grid.y[0]), float(grid.y[-1])), (float(grid.z[0]), float(grid.z[-1]))
    if attributes.get("reflection") == "y":
        y = (-y[1], y[1])
    elif attributes.get("reflection") == "z":
        z = (min(0.0, z[0]), z[1])
    return np.array([[y[0], z[0]], [y[1], z[0]], [y[1], z[1]], [y[0], z[1]]])


def _outline(axes: Axes, ledger: Ledger, corners: Array) -> list[object]:
    from matplotlib.patches import Polygon

    name = _EDGES.get(str(ledger.plane.attrs.get("boundary")), "")
    if not name:
        return []
    jet = ledger.plane.attrs["boundary"] == "open_jet"
    outline = Polygon(
        corners, closed=True, facecolor="none", edgecolor=INK, linewidth=1.8, linestyle=(0, (4, 2)) if jet else "-",
        label=name, zorder=2.6, joinstyle="miter",
    )  # fmt: skip
    axes.add_patch(outline)
    return [outline]


def _window(axes: Axes, ledger: Ledger) -> list[object]:
    """The window, its wake region, the trace of the wake and the vortices."""
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch, Rectangle

    plane, grid = ledger.plane, grid_of(ledger.plane)
    reflection = plane.attrs.get("reflection")
    # The plane of a half model holds its mirrored half, too, which was not surveyed.
    corner = (
        max(float(grid.y[0]), 0.0) if reflection == "y" else float(grid.y[0]),
        max(float(grid.z[0]), 0.0) if reflection == "z" else float(grid.z[0]),
    )
    size = float(grid.y[-1]) - corner[0], float(grid.z[-1]) - corner[1]
    window = Rectangle(corner, *size, facecolor=_PALE, edgecolor=GREY, linewidth=0.9, label="window", zorder=1)
    axes.add_patch(window)
    drawn: list[object] = [window]
    if "wake_mask" in plane and plane["wake_mask"].values.any():
        mask = plane["wake_mask"].values.astype(float)
        axes.contourf(grid.y, grid.z, mask, levels=[0.5, 1.5], colors=[BLUE], alpha=0.25, zorder=1.5)
        drawn.append(Patch(facecolor=BLUE, alpha=0.25, label="wake region"))
    if ledger.vortices is not None and ledger.vortices["y"].size:
        circulation = ledger.vortices["circulation"].values
        strong = np.abs(circulation) >= 0.1 * np.abs(circulation).max()
        for sign, colour, face in ((1, VERMILION, "+"), (-1, BLUE, "x")):
            some = strong & (np.sign(circulation) == sign)
            if some.any():
                label = "vortex, counter-clockwise" if sign > 0 else "vortex, clockwise"
                (line,) = axes.plot(
                    ledger.vortices["y"].values[some], ledger.vortices["z"].values[some], linestyle="none",
                    marker=face, color=colour, markersize=7, markeredgewidth=1.4, label=label, zorder=3,
                )  # fmt: skip
                drawn.append(Line2D([], [], linestyle="none", marker=face, color=colour, label=line.get_label()))
    return drawn


def _reflection(axes: Axes, ledger: Ledger, low: Array, high: Array) -> list[object]:
    """The reflection plane, and the mirrored half behind it."""
    reflection = ledger.plane.attrs.get("reflection")
    if not reflection:
        return []
    along = axes.axvline if reflection == "y" else axes.axhline
    plane = along(0.0, color=GREEN, linewidth=2.0, label="reflection plane", zorder=2.7)
    drawn: list[object] = [plane]
    across = 0 if reflection == "y" else 1
    if low[across] < 0:
        from matplotlib.patches import Rectangle

        size = (-low[0], high[1] - low[1]) if across == 0 else (high[0] - low[0], -low[1])
        mirrored = Rectangle(
            (float(low[0]), float(low[1])), *map(float, size), facecolor=VEIL, edgecolor=GREY, hatch=HATCH,
            linewidth=0, label="mirrored", zorder=2.2,
        )  # fmt: skip
        axes.add_patch(mirrored)
        drawn.append(mirrored)
    return drawn
