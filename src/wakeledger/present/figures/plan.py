"""Figures of a planned survey: what each set-up would know, and what the doubt of the chosen one consists of."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from wakeledger.ledger.rounding import significant
from wakeledger.present.figures.canvas import BLUE, GREY, INK, VERMILION, WIDTH, style
from wakeledger.present.figures.drawing import Drawing, drawn
from wakeledger.present.wording import unit_text, words

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from wakeledger.ledger.plan import Plan


def _unit(plan: Plan) -> str:
    return "" if plan.unit == "1" else f", {plan.unit if plan.unit == 'counts' else unit_text(plan.unit)}"


def uncertainty_map(plan: Plan) -> Figure:
    """Map of the expanded uncertainty over spacing and probe, one panel for each window.

    Parameters
    ----------
    plan : Plan
        With a set-up chosen.

    Returns
    -------
    Figure
    """
    from matplotlib.colors import LogNorm
    from matplotlib.figure import Figure

    known = plan.uncertainty[np.isfinite(plan.uncertainty)]
    spread = max(2.0, float(known.max()) / plan.target, plan.target / float(known.min())) if known.size else 2.0
    norm = LogNorm(plan.target / spread, plan.target * spread)
    count = len(plan.windows)
    with style():
        figure = Figure(figsize=(WIDTH, 0.42 * len(plan.probes) + 1.35), layout="constrained")
        panels = figure.subplots(1, count, sharey=True, squeeze=False)[0]
        shown = None
        for j, axes in enumerate(panels):
            shown = axes.pcolormesh(
                plan.uncertainty[:, j, :], cmap="PuOr_r", norm=norm, edgecolors="white", linewidth=1.2
            )
            _cells(plan, axes, j)
            axes.set_title(f"window {1e3 * plan.windows[j]:.3g} mm beyond the wake")
            axes.set_xticks(np.arange(len(plan.spacings)) + 0.5, [f"{1e3 * h:.3g}" for h in plan.spacings])
            axes.set_xlabel("spacing, mm")
            axes.tick_params(length=0)
            for side in axes.spines.values():
                side.set_visible(False)
        panels[0].set_yticks(np.arange(len(plan.probes)) + 0.5, plan.probes)
        panels[0].set_ylabel("probe's noise")
        panels[0].set_ylim(len(plan.probes), 0)
        if shown is not None:
            bar = figure.colorbar(shown, ax=list(panels), label=f"U95{_unit(plan)}", pad=0.01)
            bar.ax.minorticks_off()
            ticks = sorted({plan.target / spread, plan.target, plan.target * spread})
            bar.set_ticks(ticks, labels=[significant(tick, 2) for tick in ticks])
            bar.ax.axhline(plan.target, color=INK, linewidth=1.2)
    return figure


def _cells(plan: Plan, axes: Axes, j: int) -> None:
    """The figures in the cells; those of failing surveys are struck, those that reach the target bold."""
    for c in range(len(plan.probes)):
        for i, spacing in enumerate(plan.spacings):
            u = float(plan.uncertainty[c, j, i])
            if math.isnan(u):
                axes.text(i + 0.5, c + 0.5, "–", ha="center", va="center", color=GREY)
                continue
            failing = bool(plan.failing[c, j, i])
            reaches = u <= plan.target and not failing
            ratio = abs(math.log(u / plan.target))
            axes.text(
                i + 0.5, c + 0.5, significant(u, 2), ha="center", va="center", fontsize=8,
                fontweight="bold" if reaches else "normal",
                color="white" if ratio > 1.2 else INK,
            )  # fmt: skip
            if failing:
                axes.fill_between([i, i + 1], c, c + 1, facecolor="none", edgecolor=GREY, hatch="////", linewidth=0)
            one = plan.chosen
            if one is not None and (spacing, plan.windows[j], plan.probes[c]) == (one.spacing, one.window, one.probe):
                axes.plot(
                    np.array([0.04, 0.96, 0.96, 0.04, 0.04]) + i, np.array([0.05, 0.05, 0.95, 0.95, 0.05]) + c,
                    color=VERMILION, linewidth=1.8,
                )  # fmt: skip


def cost_figure(plan: Plan) -> Figure:
    """Expanded uncertainty against the time, or the points, of every set-up of the map.

    Parameters
    ----------
    plan : Plan
        With a set-up chosen.

    Returns
    -------
    Figure
    """
    from matplotlib.figure import Figure

    timed = bool(np.isfinite(plan.minutes).any())
    with style():
        figure = Figure(figsize=(WIDTH, 2.7), layout="constrained")
        axes = figure.subplots()
        shades = np.linspace(1.0, 0.35, len(plan.probes))
        for c, probe in enumerate(plan.probes):
            cost, u, failing = plan.minutes, plan.uncertainty[c], plan.failing[c]
            if not timed:
                break
            good = np.isfinite(u) & ~failing
            axes.plot(cost[good], u[good], "o", color=BLUE, alpha=shades[c], markersize=4.5 + c, label=probe)
            axes.plot(cost[failing], u[failing], "x", color=GREY, markersize=4.5 + c)
        axes.axhline(plan.target, color=INK, linewidth=0.9)
        axes.annotate("target", (1, plan.target), xycoords=("axes fraction", "data"), xytext=(-2, 3),
                      textcoords="offset points", ha="right", fontsize=7.5)  # fmt: skip
        if math.isfinite(plan.time_limit):
            axes.axvline(plan.time_limit, color=GREY, linewidth=0.9, linestyle=(0, (4, 3)))
        if plan.chosen is not None:
            axes.plot(plan.chosen.minutes, plan.expanded_uncertainty, "o", markersize=11, markerfacecolor="none",
                      markeredgecolor=VERMILION, markeredgewidth=1.8)  # fmt: skip
        axes.set_yscale("log")
        axes.set_xscale("log")
        _plain_ticks(axes)
        axes.set_xlabel("time of all surveys, minutes")
        axes.set_ylabel(f"U95 of the {words(plan.row)}{_unit(plan)}")
        figure.legend(title="probe's noise", title_fontsize=8, loc="outside right upper")
    return figure


def _plain_ticks(axes: Axes) -> None:
    from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

    for axis in (axes.xaxis, axes.yaxis):
        axis.set_major_locator(LogLocator(base=10, subs=(1.0, 2.0, 5.0)))
        axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:.3g}"))
        axis.set_minor_formatter(NullFormatter())


def plan_budget(plan: Plan) -> Figure:
    """The chosen set-up's budget and what each improvement would gain, as bars.

    Parameters
    ----------
    plan : Plan
        With a set-up chosen.

    Returns
    -------
    Figure
    """
    from matplotlib.figure import Figure

    lines = [line for line in plan.budget if line.share >= 0.002]
    better = plan.improvements[:8]
    colours = {"random": BLUE, "systematic": VERMILION, "numerical": GREY}
    with style():
        figure = Figure(figsize=(WIDTH, 0.24 * max(len(lines), len(better), 4) + 1.0), layout="constrained")
        left, right = figure.subplots(1, 2)
        for index, line in enumerate(lines):
            left.barh(index, line.standard_uncertainty, height=0.62, color=colours[line.kind])
            left.annotate(significant(line.standard_uncertainty, 2), (line.standard_uncertainty, index), xytext=(3, 0),
                          textcoords="offset points", va="center", fontsize=7.5)  # fmt: skip
        for kind, colour in colours.items():
            if any(line.kind == kind for line in lines):
                left.barh(0, 0, color=colour, label=kind)
        figure.legend(*left.get_legend_handles_labels(), loc="outside lower left", ncols=3)
        left.set_yticks(range(len(lines)), [line.source for line in lines])
        left.set_title("Standard uncertainty")
        left.set_xlabel(f"u{_unit(plan)}")
        for index, one in enumerate(better):
            right.barh(index, one.gain, height=0.62, color=BLUE if one.minutes == 0 else "#7fb8d8")
            text = significant(one.gain, 2)
            if one.minutes > 0:
                text += f"  (+{one.minutes:.0f} min)"
            right.annotate(
                text, (one.gain, index), xytext=(3, 0), textcoords="offset points", va="center", fontsize=7.5
            )
        right.set_yticks(range(len(better)), [one.what for one in better])
        right.set_title("Gain of one improvement")
        right.set_xlabel(f"U95 less by{_unit(plan)}")
        for axes, count in ((left, len(lines)), (right, len(better))):
            axes.tick_params(axis="y", length=0)
            axes.set_ylim(max(count, 1) - 0.5, -0.5)
            axes.set_xlim(0, axes.get_xlim()[1] * 1.25)
    return figure


def _known(plan: Plan) -> bool:
    return plan.chosen is not None and bool(np.isfinite(plan.uncertainty).any())


#: Figures of a plan by name, in the order of the report.
DRAWINGS: dict[str, Drawing[Plan]] = {
    "plan_map": Drawing(
        uncertainty_map,
        _known,
        "Expanded uncertainty (95 %) over the spacing of the points and the probe's noise, everything else as in the "
        "set-up that is outlined. Figures that reach the target are bold; in hatched cells a check would fail.",
    ),
    "plan_cost": Drawing(
        cost_figure,
        lambda plan: _known(plan) and bool(np.isfinite(plan.minutes).any()),
        "The same against the time it takes; the ring is the set-up chosen, crosses are surveys in which a check would "
        "fail, the broken line is the time limit.",
    ),
    "plan_budget": Drawing(
        plan_budget,
        _known,
        "What the chosen set-up's doubt consists of, and what doing one thing better would gain: half of a source "
        "(dark), or more time (light).",
    ),
}


def draw_plan(plan: Plan) -> dict[str, Figure]:
    """Every figure of a plan, by the names of `DRAWINGS`: none where no survey can be reduced."""
    return drawn(DRAWINGS, plan)
