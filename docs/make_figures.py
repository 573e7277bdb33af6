"""Draw the figures of these pages: ``python docs/make_figures.py`` writes them into docs/figures.

The drawings of axes and mounting need no data; the others are drawn from the sample survey and from synthetic wakes.
"""

from __future__ import annotations

import sys
import tempfile
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from wakeledger.present.figures import (
    budget_figure,
    estimates_figure,
    figure_bytes,
    loss_map,
    section_figure,
    span_figure,
    stations_figure,
)
from wakeledger.present.figures.canvas import BLUE, GREEN, GREY, INK, PURPLE, VERMILION, style

sys.path.insert(0, str(Path(__file__).resolve().parent))
import measured

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from wakeledger.ledger.ledger import Ledger

FOLDER = measured.DOCS / "figures"


@contextmanager
def drawing(width: float, height: float, columns: int = 1) -> Iterator[tuple[Figure, list[Axes]]]:
    """A figure in the program's own style, with its panels."""
    from matplotlib.figure import Figure

    with style():
        figure = Figure(figsize=(width, height), layout="constrained")
        yield figure, list(figure.subplots(1, columns, squeeze=False)[0])


def _arrow(panel: Axes, start: tuple[float, float], end: tuple[float, float], colour: str = INK) -> None:
    panel.annotate("", end, start, arrowprops={"arrowstyle": "-|>", "color": colour, "lw": 1.3, "shrinkA": 0})


def _arc(panel: Axes, centre: tuple[float, float], radius: float, start: float, stop: float, colour: str) -> None:
    """An arc from one angle to another, degrees, with its head at the second."""
    at = np.radians(np.linspace(start, stop, 60))
    y, z = centre[0] + radius * np.cos(at), centre[1] + radius * np.sin(at)
    panel.plot(y, z, color=colour, lw=1.3)
    _arrow(panel, (float(y[-3]), float(z[-3])), (float(y[-1]), float(z[-1])), colour)


def _bare(panel: Axes, y: tuple[float, float], z: tuple[float, float]) -> None:
    panel.set_axis_off()
    panel.set_aspect("equal")
    panel.set_xlim(*y)
    panel.set_ylim(*z)


def axes() -> Figure:
    """The axes and the positive senses, seen from behind."""
    with drawing(6.6, 3.1) as (figure, (panel,)):
        _bare(panel, (-3.3, 3.5), (-1.1, 2.0))
        panel.plot([-2, 2], [0, 0], color=GREY, lw=5, solid_capstyle="round")
        panel.plot([0, 0], [0, 0.45], color=GREY, lw=4, solid_capstyle="round")
        panel.plot(0, 0, "o", color=GREY, ms=17)
        panel.plot(0, 0, "o", color="white", ms=9, mec=INK)
        panel.plot(0, 0, "o", color=INK, ms=3)
        panel.annotate("x: downstream,\ntowards the viewer", (0.0, -0.58), ha="center", fontsize=8)
        _arrow(panel, (2.5, 0), (3.2, 0))
        panel.annotate("y: starboard", (2.5, -0.25), fontsize=8)
        _arrow(panel, (0, 0.55), (0, 1.45))
        panel.annotate("z: up, lift", (0.1, 1.25), fontsize=8)
        for side, name in ((1, "starboard tip vortex,\nΓ > 0, ξ > 0"), (-1, "port tip vortex,\nΓ < 0, ξ < 0")):
            colour = VERMILION if side > 0 else BLUE
            begin, end = (200, 490) if side > 0 else (-20, -310)
            _arc(panel, (2.0 * side, 0.0), 0.38, begin, end, colour)
            panel.annotate(name, (2.0 * side, 0.55), ha="center", fontsize=8, color=colour)
        for y in (-1.2, -0.75, 0.75, 1.2):
            _arrow(panel, (y, -0.15), (y, -0.7), GREEN)
        for y in (-0.98, 0.98):
            panel.annotate("downwash, w < 0", (y, -0.95), ha="center", fontsize=8, color=GREEN)
        _arc(panel, (0, 0.0), 1.75, 118, 62, PURPLE)
        panel.annotate("rolling moment > 0:\nstarboard wing down", (1.0, 1.42), fontsize=8, color=PURPLE)
        panel.annotate("port", (-3.2, -0.05), fontsize=8, color=GREY)
        panel.set_title("Seen from behind, looking upstream")
    return figure


def mounting() -> Figure:
    """The three mounting rotations."""
    with drawing(7.1, 2.5, 3) as (figure, panels):
        views = (
            ("yaw > 0: nose to port", "seen from above", "x", "y"),
            ("pitch > 0: nose up", "seen from port", "x", "z"),
            ("roll > 0: counter-clockwise", "seen from behind", "y", "z"),
        )
        for panel, (name, view, right, up) in zip(panels, views, strict=True):
            _bare(panel, (-1.5, 1.5), (-1.4, 1.1))
            panel.set_title(f"{name}\n{view}", fontsize=8.5)
            _arrow(panel, (-1.4, -1.3), (-0.85, -1.3), GREY)
            _arrow(panel, (-1.4, -1.3), (-1.4, -0.75), GREY)
            panel.annotate(right, (-0.8, -1.35), fontsize=8, color=GREY)
            panel.annotate(up, (-1.45, -0.7), fontsize=8, color=GREY)
        for panel, side in ((panels[0], -1.0), (panels[1], 1.0)):
            _arrow(panel, (-0.6, 0.9), (0.6, 0.9), BLUE)
            panel.annotate("stream", (-0.25, 0.62), fontsize=8, color=BLUE)
            for slope, colour in ((0.0, GREY), (0.28 * side, INK)):
                panel.plot([-1.1, 1.0], [1.1 * slope, -1.0 * slope], color=colour, lw=3, solid_capstyle="round")
                panel.plot(-1.1, 1.1 * slope, "o", ms=6, color=colour)
            _arc(panel, (0.0, 0.0), 0.95, 180 - 2 * side, 180 - 15 * side, VERMILION)
        for angle, colour in ((0.0, GREY), (22.0, INK)):
            for offset in (0, 90):
                at = np.radians(angle + offset)
                panels[2].plot([-np.cos(at), np.cos(at)], [-np.sin(at), np.sin(at)], color=colour, lw=1.3)
        _arc(panels[2], (0.0, 0.0), 0.85, 2, 22, VERMILION)
    return figure


def holes() -> Figure:
    """Hole numbers of five- and seven-hole probes, and the flow angles in probe axes."""
    rings = {
        "five holes": {2: 180, 3: 0, 4: 270, 5: 90},
        "seven holes": {2: 90, 3: 150, 4: 210, 5: 270, 6: 330, 7: 30},
    }
    with drawing(7.4, 2.4, 4) as (figure, panels):
        for panel, (name, ring) in zip(panels, rings.items(), strict=False):
            _bare(panel, (-1.5, 1.6), (-1.45, 1.5))
            panel.set_title(f"{name}\nseen from behind", fontsize=8.5)
            edge = np.radians(np.linspace(0, 360, 100))
            panel.plot(np.cos(edge), np.sin(edge), color=INK, lw=1.2)
            for number, angle in {1: None, **ring}.items():
                y, z = (
                    (0.0, 0.0)
                    if angle is None
                    else (0.62 * np.cos(np.radians(angle)), 0.62 * np.sin(np.radians(angle)))
                )
                panel.plot(y, z, "o", ms=15, mfc="white", mec=BLUE if number > 1 else VERMILION)
                panel.annotate(f"p{number}", (y, z), ha="center", va="center", fontsize=7)
            _arrow(panel, (1.05, 0), (1.5, 0), GREY)
            panel.annotate("y", (1.42, 0.1), fontsize=8, color=GREY)
            _arrow(panel, (0, 1.05), (0, 1.45), GREY)
            panel.annotate("z", (0.1, 1.32), fontsize=8, color=GREY)
            panel.annotate("port", (-1.5, -1.35), fontsize=7, color=GREY)
            panel.annotate("starboard", (0.75, -1.35), fontsize=7, color=GREY)
        angles = (
            ("pitch > 0: upwash", "seen from port", "x", "z", "lower holes\nread more"),
            ("yaw > 0: to starboard", "seen from above", "x", "y", "port holes\nread more"),
        )
        for panel, (name, view, right, up, words) in zip(panels[2:], angles, strict=True):
            _bare(panel, (-1.6, 1.5), (-1.45, 1.5))
            panel.set_title(f"{name}\n{view}", fontsize=8.5)
            panel.plot([-0.5, 1.3], [0, 0], color=GREY, lw=5, solid_capstyle="round")
            panel.plot(-0.5, 0, "o", ms=9, color=INK)
            panel.plot([-1.6, -0.5], [0, 0], color=GREY, lw=0.8, ls="--")
            slope = np.radians(24)
            _arrow(
                panel,
                (-0.62 - 0.95 * np.cos(slope), -0.06 - 0.95 * np.sin(slope)),
                (-0.62, -0.06),
                VERMILION,
            )
            panel.annotate("flow", (-1.6, -0.75), fontsize=8, color=VERMILION)
            panel.annotate(words, (-0.45, -0.6), fontsize=7, color=BLUE)
            _arrow(panel, (-1.4, -1.3), (-0.85, -1.3), GREY)
            _arrow(panel, (-1.4, -1.3), (-1.4, -0.85), GREY)
            panel.annotate(right, (-0.8, -1.35), fontsize=8, color=GREY)
            panel.annotate(up, (-1.32, -0.95), fontsize=8, color=GREY)
    return figure


def accuracy() -> Figure:
    """Error of the vorticity form against the spacing, for several orders of the differences."""
    elements = measured.pair()
    exact = elements.induced_drag(density=measured.RHO)
    ratios = np.array([0.3, 0.35, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 1.0, 1.2, 1.5])
    with drawing(4.6, 3.2) as (figure, (panel,)):
        for order, colour in zip((2, 4, 6, 10), (GREY, GREEN, BLUE, VERMILION), strict=True):
            errors = []
            for ratio in ratios:
                grid = measured.window(elements, float(ratio))
                v, w = elements.velocity_on(grid)
                xi = np.where(measured.inside(elements, grid), measured.axial_vorticity(v, w, grid, order=order), 0.0)
                errors.append(abs(measured.vorticity_form(xi, grid) / exact - 1))
            panel.loglog(ratios, errors, "o-", ms=3, color=colour, label=f"order {order}")
        panel.set_xlabel("spacing over core length, h/a")
        panel.set_ylabel("error of the induced drag")
        panel.set_xticks([0.3, 0.5, 0.8, 1.0, 1.5], ["0.3", "0.5", "0.8", "1", "1.5"])
        panel.set_yticks([1e-7, 1e-5, 1e-3, 1e-1], ["1e-7", "1e-5", "1e-3", "0.1"])
        panel.minorticks_off()
        panel.grid(visible=True, lw=0.4, color="#d9dde1")
        panel.legend()
    return figure


def station() -> Figure:
    """What the energy form reads above the vorticity form along the wake, and the prediction."""
    stations = (0.1, 0.15, 0.2, 0.25, 0.35, 0.5, 0.75, 1.0, 1.5, 2.0, 3.0, 5.0)
    x, form, excess, predicted = np.array(list(measured.station_excess(stations))).T
    with drawing(4.6, 3.0) as (figure, (panel,)):
        panel.plot(x, 100 * predicted, color=VERMILION, label="energy form, predicted")
        panel.plot(x, 100 * excess, "o", ms=4, color=BLUE, label="energy form")
        panel.plot(x, 100 * form, "s-", ms=3, color=GREEN, label="vorticity form")
        panel.set_xscale("log")
        panel.set_xticks([0.1, 0.25, 0.5, 1, 2, 5], ["0.1", "0.25", "0.5", "1", "2", "5"])
        panel.minorticks_off()
        panel.set_xlabel("distance behind the bound line over span, x/b")
        panel.set_ylabel("above the exact induced drag, %")
        panel.legend()
    return figure


def trace(ledger: Ledger) -> Figure:
    """Wake region, trace and vortices of the sample survey over its vorticity."""
    plane, line, found = ledger.plane, ledger.wake_line, ledger.vortices
    assert line is not None and found is not None
    y, z = plane["y"].values, plane["z"].values
    with drawing(6.6, 3.3) as (figure, (panel,)):
        xi = np.where(plane["wake_mask"].values > 0, plane["axial_vorticity"].values, 0.0)
        limit = float(np.abs(xi).max())
        image = panel.pcolormesh(y, z, xi, cmap="RdBu_r", vmin=-limit, vmax=limit, shading="nearest", rasterized=True)
        figure.colorbar(image, ax=panel, label="axial vorticity, 1/s", shrink=0.8)
        panel.contour(y, z, plane["wake_mask"].values, levels=[0.5], colors=[INK], linewidths=0.8)
        for chain in np.unique(line["chain"].values):
            own = line["chain"].values == chain
            panel.plot(line["y"].values[own], line["z"].values[own], ".-", ms=3, lw=0.9, color=GREEN)
        angle = np.linspace(0, 2 * np.pi, 60)
        for at_y, at_z, core in zip(*(found[name].values for name in ("y", "z", "core_length")), strict=True):
            panel.plot(at_y + core * np.cos(angle), at_z + core * np.sin(angle), color=PURPLE, lw=1.2)
        panel.set_aspect("equal")
        panel.set_xlabel("y (starboard), m")
        panel.set_ylabel("z (up), m")
    return figure


def increment_coverage() -> Figure:
    """Coverage of the increments' U95, and what cancelling is worth, from the table of the study in its page."""
    text = (measured.DOCS / "increments.md").read_text(encoding="utf-8")
    block = text.split("<!-- generated: begin -->")[1].split("<!-- generated: end -->")[0]
    lines = [[cell.strip() for cell in line.split("|")[1:-1]] for line in block.splitlines() if line.startswith("|")][
        2:
    ]
    cases = list(dict.fromkeys(line[0] for line in lines))
    rows = list(dict.fromkeys(line[1] for line in lines))
    with drawing(7.1, 2.9, 2) as (figure, (left, right)):
        left.axvspan(93.5, 96.5, color=GREEN, alpha=0.18, lw=0)
        left.axvline(95, color=GREEN, lw=1)
        right.axvline(3, color=GREY, lw=1, ls=(0, (4, 2)))
        for k, (row, colour) in enumerate(zip(rows, (BLUE, VERMILION, INK, PURPLE), strict=True)):
            own = [line for line in lines if line[1] == row]
            at = [cases.index(line[0]) + 0.17 * (k - 1.5) for line in own]
            inside, doubt = np.array([[float(x) for x in line[3].rstrip(" %").split(" ± ")] for line in own]).T
            left.errorbar(inside, at, xerr=doubt, fmt="o", ms=4, lw=1, color=colour, label=row.replace("_", " "))
            right.plot([float(line[7]) for line in own], at, "o", ms=4, color=colour)
        left.set_yticks(range(len(cases)), cases)
        right.set_yticks(range(len(cases)), [""] * len(cases))
        for panel in (left, right):
            panel.set_ylim(len(cases) - 0.5, -0.5)
        left.set_xlabel("true increment inside U95, %")
        left.set_xlim(88, 100)
        right.set_xscale("log")
        right.set_xticks([1, 3, 10, 20], ["1", "3", "10", "20"])
        right.minorticks_off()
        right.set_xlabel("u if nothing cancelled / u")
        figure.legend(loc="outside lower left", ncols=4)
    return figure


def coverage() -> Figure:
    """Coverage of U95 by case and row, and u over the scatter of the errors, from the table in the page."""
    text = (measured.DOCS / "coverage.md").read_text(encoding="utf-8")
    block = text.split("<!-- generated: coverage -->")[1].split("<!-- end -->")[0]
    lines = [[cell.strip() for cell in line.split("|")[1:-1]] for line in block.splitlines() if line.startswith("|")][
        2:
    ]
    cases = list(dict.fromkeys(line[0] for line in lines))
    rows = list(dict.fromkeys(line[1] for line in lines))
    with drawing(7.1, 3.4, 2) as (figure, (left, right)):
        left.axvspan(93.5, 96.5, color=GREEN, alpha=0.18, lw=0)
        left.axvline(95, color=GREEN, lw=1)
        right.axvline(1, color=GREEN, lw=1)
        for k, (row, colour) in enumerate(zip(rows, (BLUE, VERMILION, INK, PURPLE), strict=True)):
            own = [line for line in lines if line[1] == row]
            at = [cases.index(line[0]) + 0.17 * (k - 1.5) for line in own]
            for panel, number in ((left, 3), (right, 6)):
                mean, doubt = np.array([[float(x) for x in line[number].rstrip(" %").split(" ± ")] for line in own]).T
                name = row.replace("_", " ") if panel is left else None
                panel.errorbar(mean, at, xerr=doubt, fmt="o", ms=4, lw=1, color=colour, label=name)
        left.set_yticks(range(len(cases)), [case.replace("_", " ") for case in cases])
        right.set_yticks(range(len(cases)), [""] * len(cases))
        for panel in (left, right):
            panel.set_ylim(len(cases) - 0.5, -0.5)
        left.set_xlabel("truth inside U95, %")
        left.set_xlim(90, 100)
        right.set_xlabel("u / scatter of the errors")
        right.set_xlim(0.88, 1.12)
        figure.legend(loc="outside lower left", ncols=4)
    return figure


def plan_map() -> Figure:
    """What each set-up of the sample plan would know."""
    from wakeledger.present.figures.plan import uncertainty_map
    from wakeledger.run.planning import plan

    return uncertainty_map(plan(measured.DOCS.parent / "sample_surveys" / "plan_a_survey" / "plan.toml"))


def plan_check() -> Figure:
    """U95 of plans over that of the surveys simulated at them, from the table in the page."""
    text = (measured.DOCS / "planning.md").read_text(encoding="utf-8")
    block = text.split("<!-- generated: begin -->")[1].split("<!-- generated: end -->")[0]
    lines = [[cell.strip() for cell in line.split("|")[1:-1]] for line in block.splitlines() if line.startswith("|")][
        2:
    ]
    at = np.arange(len(lines))
    with drawing(7.1, 0.28 * len(lines) + 0.9) as (figure, (panel,)):
        panel.axvspan(0.8, 1.2, color=GREEN, alpha=0.18, lw=0)
        panel.axvline(1, color=GREEN, lw=1)
        for column, colour, name, shift in ((4, BLUE, "whole", -0.12), (5, GREY, "declared sources alone", 0.12)):
            ratio, doubt = np.array([[float(x) for x in line[column].split(" ± ")] for line in lines]).T
            panel.errorbar(ratio, at + shift, xerr=doubt, fmt="o", ms=4, lw=1, color=colour, label=name)
        figure.legend(loc="outside lower left", ncols=2)
        panel.set_yticks(at, [line[0] for line in lines])
        panel.set_ylim(len(lines) - 0.5, -0.5)
        panel.set_xlim(0.6, 1.4)
        panel.set_xlabel("U95 of the plan / (1.96 × rms error of the surveys)")
    return figure


#: Figures that need no ledger, and those drawn from the sample survey's, by the name of their file.
DRAWN: dict[str, Callable[[], Figure]] = {
    "axes.svg": axes,
    "mounting.svg": mounting,
    "holes.svg": holes,
    "accuracy.svg": accuracy,
    "station.svg": station,
    "coverage.svg": coverage,
    "increment_coverage.svg": increment_coverage,
    "plan_map.svg": plan_map,
    "plan_check.svg": plan_check,
}
FROM_LEDGER: dict[str, Callable[[Ledger], Figure]] = {
    "loss.png": loss_map,
    "trace.png": trace,
    "estimates.svg": estimates_figure,
    "budget.svg": budget_figure,
    "span.svg": span_figure,
}
#: Figures drawn from the ledgers of other sample surveys, with their folders.
FROM_SAMPLES: dict[str, tuple[str, Callable[[Ledger], Figure]]] = {
    "between_walls.svg": ("half_model", section_figure),
    "drag_at_stations.svg": ("computed_wing", stations_figure),
}


def of_samples() -> dict[str, Figure]:
    """Figures of the other sample surveys; the computed one needs the packages of the extra ``cfd``."""
    from wakeledger.run.survey import load, reduce

    samples = measured.DOCS.parent / "sample_surveys"
    return {name: draw(reduce(load(samples / folder / "survey.toml"))) for name, (folder, draw) in FROM_SAMPLES.items()}


def main() -> None:
    """Write every figure."""
    from wakeledger.ledger.archive import open_archive

    FOLDER.mkdir(exist_ok=True)
    with tempfile.TemporaryDirectory() as folder:
        sample = measured.Sample(Path(folder))
        sample.run("reduce", "survey.toml")
        ledger = open_archive(sample.folder / "survey-ledger" / "ledger.nc")
        made = {name: draw() for name, draw in DRAWN.items()}
        made |= {name: draw(ledger) for name, draw in FROM_LEDGER.items()}
    made |= of_samples()
    for name, figure in made.items():
        (FOLDER / name).write_bytes(figure_bytes(figure, name.rpartition(".")[2]))


if __name__ == "__main__":
    main()
