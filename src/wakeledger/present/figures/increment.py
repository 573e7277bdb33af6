"""Figures of an increment: what changed in the plane, how large each change is, and what its doubt consists of."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING, Literal

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.core.plane import grid_of
from wakeledger.ledger.rounding import rounded
from wakeledger.present.figures.budget import budget_figure
from wakeledger.present.figures.canvas import BLUE, GREY, INK, VERMILION, WIDTH, style
from wakeledger.present.figures.drawing import Drawing, drawn
from wakeledger.present.figures.maps import HATCH, UNTRUSTED, VEIL, Shade, hatch, shaded_map
from wakeledger.present.wording import unit_text, words

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from wakeledger.ledger.increment import Increment, IncrementRow

#: Bars longer than so many U95 run out of the figure.
_LONGEST = 6.0

#: Share of the places whose change the colours span.
_SPANNED = 99.7


def loss_difference_map(increment: Increment) -> Figure:
    """Map of the change of the total-pressure loss over q.

    Parameters
    ----------
    increment : Increment
        With ``total_pressure_loss`` in its plane.

    Returns
    -------
    Figure
    """
    return _map(increment, "total_pressure_loss", "Total-pressure loss, B − A", "change of loss / q", "PuOr_r")


def vorticity_difference_map(increment: Increment) -> Figure:
    """Map of the change of the axial vorticity over U, with arrows of that of the crossflow.

    Parameters
    ----------
    increment : Increment
        With ``axial_vorticity``, ``v`` and ``w`` in its plane.

    Returns
    -------
    Figure
    """
    title = "Axial vorticity and crossflow, B − A"
    return _map(increment, "axial_vorticity", title, "change of vorticity / U, 1/m", "RdBu_r", arrows=True)


def _map(increment: Increment, name: str, title: str, label: str, colours: str, *, arrows: bool = False) -> Figure:
    plane = increment.plane
    assert plane is not None
    grid = grid_of(plane)
    values = plane[name].values
    limit = max(float(np.nanpercentile(np.abs(values), _SPANNED)), _noise(increment, values), 1e-12)
    crossflow = (plane["v"].values, plane["w"].values, "U") if arrows else None
    shade = Shade(values, label, colours, -limit, limit, "both")
    return shaded_map(grid, shade, title, overlay=lambda axes: _overlay(axes, increment), arrows=crossflow)


def _noise(increment: Increment, values: Array) -> float:
    """Four standard deviations of the change outside both wake regions, which stay pale."""
    plane = increment.plane
    if plane is None or "wake_mask_a" not in plane or "wake_mask_b" not in plane:
        return 0.0
    quiet = np.abs(values[(plane["wake_mask_a"].values == 0) & (plane["wake_mask_b"].values == 0)])
    return 4 * 1.4826 * float(np.nanmedian(quiet)) if np.isfinite(quiet).any() else 0.0


def _overlay(axes: Axes, increment: Increment) -> list[object]:
    """Outlines of both wake regions, and places where either plane holds no trusted measurement."""
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch

    plane = increment.plane
    assert plane is not None
    grid = grid_of(plane)
    drawn: list[object] = []
    lines: tuple[tuple[str, Literal["dashed", "solid"]], ...] = (("a", "dashed"), ("b", "solid"))
    for side, line in lines:
        name = f"wake_mask_{side}"
        if name in plane and 0 < plane[name].values.sum() < plane[name].size:
            mask = plane[name].values.astype(float)
            axes.contour(grid.y, grid.z, mask, levels=[0.5], colors=[INK], linewidths=0.8, linestyles=[line])
            label = f"wake region of {side.upper()}"
            drawn.append(Line2D([], [], color=INK, linewidth=0.8, linestyle=line, label=label))
    flags = [plane[name].values & UNTRUSTED for name in ("flag_a", "flag_b") if name in plane]
    untrusted = np.any([flag != 0 for flag in flags], axis=0) if flags else np.zeros(grid.shape, dtype=bool)
    if untrusted.any():
        hatch(axes, grid, untrusted)
        label = "no trusted measurement in A or B"
        drawn.append(Patch(facecolor=VEIL, edgecolor=INK, hatch=HATCH, linewidth=0, label=label))
    axes.set_xlim(float(grid.y[0]), float(grid.y[-1]))
    axes.set_ylim(float(grid.z[0]), float(grid.z[-1]))
    return drawn


def traverse_difference_figure(increment: Increment) -> Figure:
    """Loss along both line traverses, and its change.

    Parameters
    ----------
    increment : Increment
        With a plane of one dimension.

    Returns
    -------
    Figure
    """
    from matplotlib.figure import Figure

    plane = increment.plane
    assert plane is not None
    axis = str(next(iter(plane.sizes)))
    with style():
        figure = Figure(figsize=(WIDTH, 3.8), layout="constrained")
        upper, lower = figure.subplots(2, 1, sharex=True)
        for side, colour in (("a", GREY), ("b", BLUE)):
            upper.plot(plane[axis], plane[f"total_pressure_loss_{side}"], color=colour, label=side.upper())
        upper.set_ylabel("loss / q")
        upper.legend()
        upper.set_title("Total-pressure loss of A and B, and B − A")
        lower.axhline(0, color=GREY, linewidth=0.7)
        lower.plot(plane[axis], plane["total_pressure_loss"], color=INK)
        lower.set_ylabel("change")
        lower.set_xlabel(f"{axis}, m")
    return figure


def increments_figure(increment: Increment) -> Figure:
    """Every row's change over its expanded uncertainty: outside the band it is resolved.

    Parameters
    ----------
    increment : Increment
        With at least one known uncertainty.

    Returns
    -------
    Figure
    """
    from matplotlib.figure import Figure
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch

    rows = [row for row in increment.rows if _drawable(row)]
    reach = max(1.6, *(abs(_ratio(row)) + 1.15 * min(max(1.0, _uncancelled(row)), _LONGEST) for row in rows))
    with style():
        figure = Figure(figsize=(WIDTH, 0.3 * len(rows) + 1.2), layout="constrained")
        axes = figure.add_subplot()
        axes.axvspan(-1, 1, color=GREY, alpha=0.22, linewidth=0)
        axes.axvline(0, color=INK, linewidth=0.7)
        for index, row in enumerate(rows):
            ratio, apart = _ratio(row), _uncancelled(row)
            colour = VERMILION if row.resolved else BLUE
            axes.plot([ratio - apart, ratio + apart], [index] * 2, color=GREY, linewidth=4, alpha=0.5)
            axes.plot([ratio - 1, ratio + 1], [index] * 2, color=colour, linewidth=1.6)
            axes.plot(
                ratio, index, "o", color=colour, markerfacecolor=colour if row.resolved else "white", markersize=5
            )
            axes.annotate(
                _shown(row), (1.02, index), xycoords=("axes fraction", "data"), va="center", fontsize=8,
            )  # fmt: skip
        axes.set_yticks(range(len(rows)), [words(row.name) for row in rows])
        axes.set_ylim(len(rows) - 0.5, -0.5)
        axes.set_xlim(-reach, reach)
        axes.tick_params(axis="y", length=0)
        axes.spines["left"].set_visible(False)
        axes.set_xlabel("(B − A) / U95")
        axes.set_title("Increments: outside the grey band they are resolved")
        figure.legend(
            handles=[
                Line2D([], [], color=VERMILION, marker="o", label="resolved, ± U95"),
                Line2D([], [], color=BLUE, marker="o", markerfacecolor="white", label="not resolved, ± U95"),
                Patch(color=GREY, alpha=0.5, label="± U95 if nothing cancelled"),
            ],
            loc="outside lower left",
            ncols=3,
        )
    return figure


def _drawable(row: IncrementRow) -> bool:
    return row.resolved is not None and row.judged.expanded_uncertainty > 0


def _ratio(row: IncrementRow) -> float:
    return row.judged.difference / row.judged.expanded_uncertainty


def _uncancelled(row: IncrementRow) -> float:
    figure = row.judged
    return figure.uncancelled_uncertainty / figure.standard_uncertainty


def _shown(row: IncrementRow) -> str:
    """The difference as it stands beside the figure."""
    if row.judged is row.coefficient:
        figures, unit = row.coefficient.in_counts, "counts"
    else:
        figures, unit = (row.value.difference, row.value.expanded_uncertainty), unit_text(row.unit)
    difference, expanded = rounded(*figures)
    return f"{difference} ± {expanded} {unit}".replace("-", "−").rstrip()


def _in_plane(*names: str) -> Callable[[Increment], bool]:
    def has(increment: Increment) -> bool:
        plane = increment.plane
        return plane is not None and len(plane.sizes) == 2 and all(name in plane for name in names)

    return has


def _along_line(increment: Increment) -> bool:
    return increment.plane is not None and len(increment.plane.sizes) == 1


#: Figures of an increment as a whole, by the names of their files.
OF_INCREMENT: dict[str, Drawing[Increment]] = {
    "increments": Drawing(
        increments_figure,
        lambda increment: any(_drawable(row) for row in increment.rows),
        "Each row's change over its expanded uncertainty. Outside the grey band it is resolved; the wide bars show the "
        "uncertainty if nothing cancelled.",
    ),
    "increment_budget": Drawing(
        budget_figure,
        lambda increment: any(math.isfinite(line.share) for line in increment.budget),
        "Share of each source in the variance of the main increments.",
    ),
}

#: Figures of the difference of two planes.
OF_PLANES: dict[str, Drawing[Increment]] = {
    "loss_difference": Drawing(
        loss_difference_map,
        _in_plane("total_pressure_loss"),
        "Change of the total-pressure loss over the dynamic pressure, seen from behind: orange where B loses more. "
        "Outlines are the two wake regions.",
    ),
    "vorticity_difference": Drawing(
        vorticity_difference_map,
        _in_plane("axial_vorticity", "v", "w"),
        "Change of the axial vorticity over the stream's speed, with arrows of the change of the crossflow, cut at "
        "twice the length of the one in the key. Counter-clockwise is positive; the colours are centred at zero.",
    ),
    "traverse_difference": Drawing(
        traverse_difference_figure, _along_line, "Loss along both traverses and its change."
    ),
}


def differences_of(increment: Increment) -> tuple[Increment, ...]:
    """The increment with the difference of planes of each station; itself where there is one."""
    if not increment.further_planes:
        return (increment,)
    return tuple(
        replace(increment, plane=plane, further_planes=()) for plane in (increment.plane, *increment.further_planes)
    )


def name_in(increment: Increment, name: str, number: int) -> str:
    """Name of a figure of one difference, counted from 0: with its number where there are several."""
    return f"{name}_plane_{number + 1}" if increment.further_planes else name


def draw_increment(increment: Increment) -> dict[str, Figure]:
    """Every figure the increment has what is needed for, by the names of `OF_INCREMENT` and `OF_PLANES`."""
    found = drawn(OF_INCREMENT, increment)
    for k, one in enumerate(differences_of(increment)):
        found |= {name_in(increment, name, k): figure for name, figure in drawn(OF_PLANES, one).items()}
    return found
