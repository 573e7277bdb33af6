"""A probe's calibration: its coefficient grid, the calibrated range, and what the calibration does not reproduce."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.present.figures.canvas import BLUE, GREEN, GREY, INK, VERMILION, WIDTH, style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from wakeledger.intake.probe.record import Calibration

#: Directions that share an angle within this are drawn as one line of the grid, degrees.
_SAME_ANGLE = 0.05
_FEWEST_ON_LINE = 3
_NO_ERROR = 1e-6


def calibration_figure(calibration: Calibration) -> Figure:
    """Coefficient grid, range with the left-out errors of direction, and errors against the angle from the axis.

    Parameters
    ----------
    calibration : Calibration
        The calibration.

    Returns
    -------
    Figure
        Four panels; points that are not used are crossed out in each of the upper two.
    """
    with style():
        from matplotlib.figure import Figure

        figure = Figure(figsize=(WIDTH, 6.6), layout="constrained")
        axes = figure.subplots(2, 2)
        _coefficient_grid(axes[0, 0], calibration)
        _range(figure, axes[0, 1], calibration)
        _angle_errors(axes[1, 0], calibration)
        _pressure_errors(axes[1, 1], calibration)
        if calibration.title:
            figure.suptitle(calibration.title, x=0.01, ha="left", fontsize=10.5)
    return figure


def _coefficient_grid(axes: Axes, calibration: Calibration) -> None:
    own, table = calibration.coefficients, calibration.table
    first_set = (own.sector == 0) & (calibration.set_index == 0)
    chosen = first_set & ~calibration.bad
    for shared, along in ((table.pitch, table.yaw), (table.yaw, table.pitch)):
        for line in _lines(np.degrees(shared), np.degrees(along), chosen):
            axes.plot(own.first[line], own.second[line], color=GREY, linewidth=0.7)
    axes.plot(own.first[chosen], own.second[chosen], ".", color=BLUE, markersize=3.5)
    bad = first_set & calibration.bad & np.isfinite(own.first) & np.isfinite(own.second)
    if bad.any():
        axes.plot(own.first[bad], own.second[bad], "x", color=VERMILION, markersize=6, label="not used")
        axes.legend(loc="upper left", handletextpad=0.1, borderaxespad=0.0)
    if chosen.any():
        reach = 1.15 * max(np.abs(own.first[chosen]).max(), np.abs(own.second[chosen]).max())
        axes.set_xlim(-reach, reach)
        axes.set_ylim(-reach, reach)
    axes.set_aspect("equal")
    axes.set_xlabel("C_yaw")
    axes.set_ylabel("C_pitch")
    sector = "" if calibration.holes == 5 else ", centre sector"
    level = ""
    if len(calibration.sets) > 1:
        level = f", {calibration.table.level_name} {calibration.sets[0].level:.3g}"
    axes.set_title(f"Coefficient grid{sector}{level}")


def _lines(shared: Array, along: Array, chosen: Array) -> list[Array]:
    """Points that share an angle, in the order of the other one."""
    index = np.flatnonzero(chosen)
    groups: dict[int, list[int]] = {}
    for point in index:
        groups.setdefault(round(float(shared[point]) / _SAME_ANGLE), []).append(int(point))
    return [
        np.array(sorted(group, key=lambda point: float(along[point])))
        for group in groups.values()
        if len(group) >= _FEWEST_ON_LINE
    ]


def direction_errors(errors: Array) -> Array:
    """Angle between true and reduced direction, degrees, from errors of pitch and yaw in rad."""
    return np.asarray(np.degrees(np.hypot(errors[0], errors[1])))


def _range(figure: Figure, axes: Axes, calibration: Calibration) -> None:
    table = calibration.table
    pitch, yaw = np.degrees(table.pitch), np.degrees(table.yaw)
    errors = direction_errors(calibration.left_out)
    used = ~calibration.bad
    for one in calibration.sets:
        closed = np.degrees(np.vstack([one.hull.vertices, one.hull.vertices[:1]]))
        axes.plot(closed[:, 1], closed[:, 0], color=INK, linewidth=0.9)
    high = max(float(np.percentile(errors[used], 95)), _NO_ERROR)
    shown = axes.scatter(yaw[used], pitch[used], c=errors[used], s=14, cmap="viridis_r", vmin=0, vmax=high, lw=0)
    if calibration.bad.any():
        axes.plot(yaw[~used], pitch[~used], "x", color=VERMILION, markersize=6)
    figure.colorbar(shown, ax=axes, label="left-out error of direction, deg", extend="max", shrink=0.85)
    axes.set_aspect("equal")
    axes.set_xlabel("yaw, deg (towards starboard)")
    axes.set_ylabel("pitch, deg (upwash)")
    axes.set_title("Calibrated range")


def _from_axis(calibration: Calibration) -> Array:
    table = calibration.table
    return np.asarray(np.degrees(np.arccos(np.clip(np.cos(table.pitch) * np.cos(table.yaw), -1.0, 1.0))))


def _errors(axes: Axes, calibration: Calibration, parts: tuple[tuple[int, str, str], ...], factor: float) -> None:
    away = _from_axis(calibration)
    used = ~calibration.bad
    inner = used & ~calibration.edge
    for index, name, colour in parts:
        axes.plot(away[inner], factor * calibration.left_out[index, inner], ".", color=colour, markersize=4, label=name)
        edge = used & calibration.edge
        axes.plot(away[edge], factor * calibration.left_out[index, edge], ".", color=colour, markersize=4, alpha=0.25)
        axes.plot(away[used], factor * calibration.residual[index, used], "_", color=colour, markersize=5, alpha=0.7)
    reach = factor * np.abs(calibration.left_out[[part[0] for part in parts]][:, inner if inner.any() else used])
    limit = 1.4 * max(float(reach.max()), 1e-9)
    axes.set_ylim(-limit, limit)
    axes.axhline(0.0, color=GREY, linewidth=0.7)
    axes.set_xlabel("angle from the axis, deg\n(pale: on the edge; dashes: residuals of the fit)")
    axes.legend(loc="upper left", ncols=2, handletextpad=0.1, columnspacing=0.8, borderaxespad=0.1)


def _angle_errors(axes: Axes, calibration: Calibration) -> None:
    _errors(axes, calibration, ((0, "pitch", BLUE), (1, "yaw", VERMILION)), float(np.degrees(1.0)))
    axes.set_ylabel("error of angle, deg")
    axes.set_title("Left-out errors of the angles")


def _pressure_errors(axes: Axes, calibration: Calibration) -> None:
    _errors(axes, calibration, ((2, "total pressure", BLUE), (3, "static pressure", GREEN)), 100.0)
    axes.set_ylabel("error of pressure, % of q")
    axes.set_title("Left-out errors of the pressures")
