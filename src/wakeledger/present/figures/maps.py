"""Maps of the plane, seen from behind, looking upstream: y to starboard is to the right."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.flags import Flag
from wakeledger.core.grid import Array, UniformGrid
from wakeledger.core.plane import grid_of
from wakeledger.present.figures.canvas import INK, WIDTH, style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from wakeledger.ledger.ledger import Ledger

#: Cells with one of these flags hold no measurement that can be trusted; they are hatched.
UNTRUSTED = int(Flag.MISSING | Flag.FAR_FROM_DATA | Flag.NON_PHYSICAL | Flag.OUT_OF_RANGE)

VEIL = (0.55, 0.58, 0.61, 0.45)
HATCH = "///////"

#: More boxes than this are drawn as pixels, so that the file stays small.
MANY_BOXES = 500

#: More cells than this are brought to the picture's pixels; fewer are kept, one pixel a cell, for viewers to enlarge.
MANY_CELLS = 100_000

#: Arrows along the longer side of the plane.
ARROWS = 32

#: Arrows are cut at so many times the length of the one in the key.
LONGEST_ARROW = 2.0


@dataclass(frozen=True)
class Shade:
    """How one field is coloured.

    Attributes
    ----------
    values : ndarray, shape (nz, ny)
        The field.
    label : str
        What it is, with its unit.
    colours : str
        Name of the colour map.
    lowest, highest : float
        Values of its ends.
    beyond : {"both", "min", "max", "neither"}
        Where there are values beyond them.
    """

    values: Array
    label: str
    colours: str
    lowest: float
    highest: float
    beyond: str


def loss_map(ledger: Ledger) -> Figure:
    """Map of the total-pressure loss, as a part of the reference dynamic pressure where that is known.

    Parameters
    ----------
    ledger : Ledger
        With ``total_pressure_loss`` in its plane.

    Returns
    -------
    Figure
    """
    loss = ledger.plane["total_pressure_loss"].values
    q = ledger.reference.get("dynamic_pressure", np.nan)
    known = bool(q > 0)
    loss = loss / q if known else loss
    label = "total-pressure loss / q" if known else "total-pressure loss, Pa"
    highest = float(np.nanpercentile(loss, 99.7)) or 1.0
    return _map(ledger, "Total-pressure loss", Shade(loss, label, "GnBu", 0.0, max(highest, 1e-12), "both"))


def vorticity_map(ledger: Ledger) -> Figure:
    """Map of the axial vorticity with arrows of the crossflow.

    Parameters
    ----------
    ledger : Ledger
        With ``axial_vorticity``, ``v`` and ``w`` in its plane.

    Returns
    -------
    Figure
    """
    xi = ledger.plane["axial_vorticity"].values
    inside = ledger.plane["wake_mask"].values > 0 if "wake_mask" in ledger.plane else np.ones(xi.shape, dtype=bool)
    strong = np.abs(xi[inside & np.isfinite(xi)]) if inside.any() else np.abs(xi[np.isfinite(xi)])
    quiet = np.abs(xi[~inside & np.isfinite(xi)])
    # Four standard deviations of the scatter outside the wake stay pale, so that the wake stands out of the noise.
    noise = 4 * 1.4826 * float(np.median(quiet)) if quiet.size else 0.0
    limit = max(float(np.percentile(strong, 99.0)) if strong.size else 0.0, noise, 1e-12)
    shade = Shade(xi, "axial vorticity, 1/s", "RdBu_r", -limit, limit, "both")
    return _map(ledger, "Axial vorticity and crossflow", shade, arrows=True)


def axial_velocity_map(ledger: Ledger) -> Figure:
    """Map of the velocity along the stream, as a part of the stream's speed where that is known.

    Parameters
    ----------
    ledger : Ledger
        With ``u`` in its plane.

    Returns
    -------
    Figure
    """
    u = ledger.plane["u"].values
    speed = ledger.reference.get("speed", np.nan)
    if speed > 0:
        excess = u / speed - 1
        limit = max(float(np.nanpercentile(np.abs(excess), 99.7)), 1e-12)
        shade = Shade(excess, "u / U − 1", "PuOr", -limit, limit, "both")
    else:
        low, high = (float(bound) for bound in np.nanpercentile(u, (0.3, 100)))
        shade = Shade(u, "u, m/s", "cividis", low, high, "min")
    return _map(ledger, "Axial velocity", shade)


def _map(ledger: Ledger, title: str, shade: Shade, *, arrows: bool = False) -> Figure:
    crossflow = (ledger.plane["v"].values, ledger.plane["w"].values, "m/s") if arrows else None
    return shaded_map(
        grid_of(ledger.plane), shade, title, overlay=lambda axes: _overlay(axes, ledger), arrows=crossflow
    )


def shaded_map(
    grid: UniformGrid,
    shade: Shade,
    title: str,
    *,
    overlay: Callable[[Axes], list[object]],
    arrows: tuple[Array, Array, str] | None = None,
) -> Figure:
    """A figure of one field of a plane, seen from behind in equal scale, with what is drawn over it.

    Parameters
    ----------
    grid : UniformGrid
        The plane's grid.
    shade : Shade
        The field and its colours.
    title : str
        What it is.
    overlay : callable
        Draws over the field; returns what the legend names.
    arrows : (ndarray, ndarray, str), optional
        Crossflow to starboard and up, shape (nz, ny), and its unit.

    Returns
    -------
    Figure
    """
    from matplotlib.figure import Figure

    with style():
        height = float(np.clip((WIDTH - 1.5) * grid.dz * grid.nz / (grid.dy * grid.ny), 1.2, 7.5)) + 1.15
        figure = Figure(figsize=(WIDTH, height), layout="constrained")
        axes = figure.add_subplot()
        shaded(figure, axes, grid, shade, title)
        named = overlay(axes)
        if arrows is not None:
            draw_arrows(axes, grid, *arrows)
        if named:
            figure.legend(handles=named, loc="outside lower left", ncols=len(named))
    return figure


def shaded(figure: Figure, axes: Axes, grid: UniformGrid, shade: Shade, title: str) -> None:
    """Draw one field of a plane, seen from behind, with its colour bar.

    Parameters
    ----------
    figure, axes : Figure, Axes
        Where to draw it.
    grid : UniformGrid
        The plane's grid.
    shade : Shade
        The field and its colours.
    title : str
        What it is.
    """
    many = shade.values.size > MANY_CELLS
    image = axes.imshow(
        shade.values,
        origin="lower",
        extent=(
            grid.y[0] - grid.dy / 2,
            grid.y[-1] + grid.dy / 2,
            grid.z[0] - grid.dz / 2,
            grid.z[-1] + grid.dz / 2,
        ),
        cmap=shade.colours,
        vmin=shade.lowest,
        vmax=shade.highest,
        interpolation="nearest" if many else "none",
        aspect="equal",
        rasterized=many,
    )
    bar = figure.colorbar(image, ax=axes, extend=shade.beyond, fraction=0.05, pad=0.02, shrink=0.9)
    bar.set_label(shade.label)
    bar.outline.set_linewidth(0.5)
    axes.set_title(title)
    axes.set_xlabel("y to starboard, m (seen from behind)")
    axes.set_ylabel("z up, m")


def _overlay(axes: Axes, ledger: Ledger) -> list[object]:
    """Outline of the wake region, cells that were not measured, vortices and the wake's trace; what was drawn."""
    from matplotlib.lines import Line2D
    from matplotlib.patches import Circle, Patch
    from matplotlib.patheffects import withStroke

    halo = [withStroke(linewidth=2.2, foreground="white", alpha=0.7)]
    plane = ledger.plane
    y, z = plane["y"].values, plane["z"].values
    drawn: list[object] = []
    if "wake_mask" in plane:
        mask = plane["wake_mask"].values.astype(float)
        if 0 < mask.sum() < mask.size:
            axes.contour(y, z, mask, levels=[0.5], colors=[INK], linewidths=0.8)
            drawn.append(Line2D([], [], color=INK, linewidth=0.8, label="wake region"))
    if "flag" in plane:
        untrusted = (plane["flag"].values & UNTRUSTED) != 0
        if untrusted.any():
            hatch(axes, grid_of(plane), untrusted)
            drawn.append(Patch(facecolor=VEIL, edgecolor=INK, hatch=HATCH, linewidth=0, label="no trusted measurement"))
    if ledger.wake_line is not None:
        trace = ledger.wake_line
        chain = trace["chain"].values if "chain" in trace else np.zeros(trace["y"].size, dtype=int)
        for number in np.unique(chain):
            one = chain == number
            axes.plot(
                trace["y"].values[one], trace["z"].values[one], color=INK, linewidth=1.0, linestyle=(0, (4, 2)),
                path_effects=halo,
            )  # fmt: skip
        drawn.append(Line2D([], [], color=INK, linewidth=1.0, linestyle=(0, (4, 2)), label="trace of the wake"))
    if ledger.vortices is not None and ledger.vortices["y"].size:
        vortices = ledger.vortices
        radius = vortices["core_radius"].values if "core_radius" in vortices else np.full(vortices["y"].size, np.nan)
        for yc, zc, a in zip(vortices["y"].values, vortices["z"].values, radius, strict=True):
            if np.isfinite(a):
                axes.add_patch(Circle((yc, zc), a, fill=False, edgecolor=INK, linewidth=1.0, path_effects=halo))
            axes.plot([yc], [zc], marker="+", color=INK, markersize=6, markeredgewidth=1.0, path_effects=halo)
        drawn.append(
            Line2D([], [], linestyle="none", marker="+", color=INK, markersize=6, label="vortex centre and core radius")
        )
    axes.set_xlim(float(y[0]), float(y[-1]))
    axes.set_ylim(float(z[0]), float(z[-1]))
    return drawn


def hatch(axes: Axes, grid: UniformGrid, cells: NDArray[np.bool_]) -> None:
    """Veil and hatch whole cells; neighbours along y share one rectangle.

    Parameters
    ----------
    axes : Axes
        Where to draw them.
    grid : UniformGrid
        The plane's grid.
    cells : ndarray of bool, shape (nz, ny)
        Which cells.
    """
    from matplotlib.collections import PatchCollection
    from matplotlib.patches import Rectangle

    boxes = []
    for row, line in enumerate(cells):
        bounds = np.flatnonzero(np.diff(np.concatenate(([0], line.astype(int), [0]))))
        for start, stop in bounds.reshape(-1, 2):
            corner = grid.y0 + (start - 0.5) * grid.dy, grid.z0 + (row - 0.5) * grid.dz
            boxes.append(Rectangle(corner, (stop - start) * grid.dy, grid.dz))
    hatched = PatchCollection(
        boxes, facecolor=VEIL, edgecolor=INK, hatch=HATCH, linewidth=0, rasterized=len(boxes) > MANY_BOXES
    )
    axes.add_collection(hatched, autolim=False)


def draw_arrows(axes: Axes, grid: UniformGrid, across: Array, up: Array, unit: str) -> None:
    """Draw arrows of a crossflow over a plane, with their key; the longest are cut, so that they hide no other.

    Parameters
    ----------
    axes : Axes
        Where to draw them.
    grid : UniformGrid
        The plane's grid.
    across, up : ndarray, shape (nz, ny)
        Components to starboard and up.
    unit : str
        Their unit.
    """
    apart = max(grid.ny * grid.dy, grid.nz * grid.dz) / ARROWS
    along_y = min(max(1, round(apart / grid.dy)), grid.ny)
    along_z = min(max(1, round(apart / grid.dz)), grid.nz)
    y, z = grid.mesh()
    some = (slice(along_z // 2, None, along_z), slice(along_y // 2, None, along_y))
    v, w = across[some], up[some]
    typical = float(np.nanpercentile(np.hypot(v, w), 98))
    if not typical > 0:
        return
    length = float(f"{typical:.0e}")
    cut = np.minimum(1.0, LONGEST_ARROW * length / np.maximum(np.hypot(v, w), 1e-300))
    v, w = cut * v, cut * w
    spacing = min(along_y * grid.dy, along_z * grid.dz)
    arrows = axes.quiver(
        y[some], z[some], v, w, angles="xy", scale_units="xy", scale=typical / (1.6 * spacing), color=INK,
        width=0.0016, alpha=0.85, zorder=2.5,
    )  # fmt: skip
    axes.quiverkey(arrows, 0.93, 1.04, length, f"{length:g} {unit}", labelpos="W", coordinates="axes")
