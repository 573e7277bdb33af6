"""What to do next, from what an inspection found."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from wakeledger.core.points import Points
from wakeledger.intake.gridding import Gridding
from wakeledger.ledger.inspection import ChannelSummary, EdgeState, Recommendation, Repeats
from wakeledger.ledger.rows import Check
from wakeledger.run.checks import Core

#: Noise that exceeds the declared one, or repeats that exceed the noise, by this factor deserve a look.
_LOUD = 1.5
#: A last row with less than this share of the usual number of points is not finished.
_UNFINISHED = 0.9
#: Rows from which the way a traverse runs can be told.
_FEWEST_ROWS = 3
#: Spacing that a core is to be measured at, and the distance from its centre to which, in core lengths.
_FINE, _AROUND = 0.5, 3.0
#: Places named in a sentence.
_NAMED = 5
_WAYS = {"port": "to port", "starboard": "to starboard", "lower": "downwards", "upper": "upwards"}
_EDGE_CHECKS = ("edge_vorticity", "edge_total_pressure_loss")
_PATCH = (
    "What touches the window's edge stands apart from the wake and holds little of it: rather noise than wake. Sample"
    " longer, or take it out of the wake region with [wake] exclude or a higher level."
)
MOVE_ON = "The survey is complete and encloses its wake: it may be reduced, and the next point taken."
MOVE_ON_WITH_CARE = "Apart from that the survey is complete and encloses its wake: it may be reduced."


@dataclass(frozen=True)
class Traverse:
    """How a traverse runs from row to row.

    Attributes
    ----------
    heading : {"port", "starboard", "lower", "upper"} or None
        The side that its rows move towards; None where they do not move steadily.
    axis : {"y", "z"}
        The coordinate that a row stands at.
    last_row : float
        Where the last row stands, m.
    points, usual : int
        Points of the last row, and the median over the rows before it.
    """

    heading: str | None
    axis: str
    last_row: float
    points: int
    usual: int

    @property
    def unfinished(self) -> bool:
        """Whether the last row is shorter than the rows before it."""
        return self.heading is not None and self.points < _UNFINISHED * self.usual


def traverse_of(points: Points, gridding: Gridding) -> Traverse | None:
    """How the rows of a traverse follow each other in the file.

    Parameters
    ----------
    points : Points
        The points in the order of the file.
    gridding : Gridding
        Knows the row of each point.

    Returns
    -------
    Traverse or None
        None where there are fewer than three rows.
    """
    row = gridding.row_index
    _, first, label, count = np.unique(row, return_index=True, return_inverse=True, return_counts=True)
    if first.size < _FEWEST_ROWS:
        return None
    order = np.argsort(first)
    centre = [np.bincount(label, weights=values)[order] / count[order] for values in (points.y, points.z)]
    spread = [
        float(np.std(values - np.bincount(label, weights=values)[label] / count[label]))
        for values in (points.y, points.z)
    ]
    k = int(np.argmin(spread))
    steps = np.diff(centre[k])
    heading = None
    if np.all(steps > 0) or np.all(steps < 0):
        sides = (("port", "starboard"), ("lower", "upper"))[k]
        heading = sides[int(steps[-1] > 0)]
    count = count[order]
    return Traverse(heading, "yz"[k], float(centre[k][-1]), int(count[-1]), int(np.median(count[:-1])))


def recommendations(
    checks: Sequence[Check],
    *,
    edges: Sequence[EdgeState] = (),
    traverse: Traverse | None = None,
    core: Core | None = None,
    missing_in_wake: Sequence[tuple[float, float]] = (),
    channels: Sequence[ChannelSummary] = (),
    repeats: Repeats | None = None,
    out_of_range: Sequence[tuple[float, float]] = (),
    spacing: Mapping[str, float] | None = None,
    place: Callable[[tuple[float, float]], str] | None = None,
    remarks: Sequence[str] = (),
) -> tuple[Recommendation, ...]:
    """What to do next, the most urgent first.

    Parameters
    ----------
    checks : sequence of Check
        The checks that were made.
    edges : sequence of EdgeState
        The edges of the window.
    traverse : Traverse or None
        How the traverse runs.
    core : Core or None
        The vortex core measured most coarsely.
    missing_in_wake : sequence of (float, float)
        Places of the wake region without a usable measurement, y and z, m.
    channels : sequence of ChannelSummary
        The measured variables.
    repeats : Repeats or None
        Places measured more than once.
    out_of_range : sequence of (float, float)
        Points outside the probe's calibrated range, y and z, m.
    spacing : mapping of str to float, optional
        Spacing of the points along "y" and "z", m, to count lines by.
    place : callable, optional
        Writes a position; y and z in mm by default.
    remarks : sequence of str
        What else is to be looked into, in sentences.

    Returns
    -------
    tuple of Recommendation
    """
    written = place or place_text
    wrong = {check.name: check for check in checks if check.verdict in ("warn", "fail")}
    found: list[Recommendation] = []
    if traverse is not None and traverse.unfinished:
        message = (
            f"Continue: the last row, at {traverse.axis} = {1e3 * traverse.last_row:.4g} mm, holds {traverse.points}"
            f" of the usual {traverse.usual} points."
        )
        found.append(Recommendation("continue", message, side=traverse.heading))
    found += [_beyond(edge, traverse, spacing or {}) for edge in edges if not edge.quiet]
    at_edges = [wrong.pop(name) for name in _EDGE_CHECKS if name in wrong]
    if at_edges and all(edge.quiet for edge in edges):
        found.append(Recommendation("check", _PATCH))
    if "missing_points" in wrong and missing_in_wake:
        found.append(_repeat(wrong.pop("missing_points"), missing_in_wake, written))
    if out_of_range:
        message = (
            f"{_count(len(out_of_range), 'point')} outside the probe's calibrated range, the first at"
            f" {written(out_of_range[0])}: turn the probe into the flow there, or extend its calibration, and repeat."
        )
        found.append(Recommendation("repeat", message, places=tuple(out_of_range)))
    if "core_resolution" in wrong and core is not None:
        found.append(_refine(wrong.pop("core_resolution"), core, written))
    left = sorted(wrong.values(), key=lambda check: check.verdict != "fail")
    found += [Recommendation("check", message) for message in (*(check.message for check in left), *remarks)]
    found += _noise(channels)
    found += _scatter(channels, repeats)
    if not found:
        return (Recommendation("move_on", MOVE_ON),)
    if all(one.action == "check" for one in found) and not any(check.verdict == "fail" for check in checks):
        found.append(Recommendation("move_on", MOVE_ON_WITH_CARE))
    return tuple(found)


def place_text(place: tuple[float, float]) -> str:
    """A position as it is printed."""
    return "y = {:.4g}, z = {:.4g} mm".format(*(1e3 * x + 0.0 for x in place))


def _mm(length: float) -> str:
    return f"{1e3 * length:.0f} mm" if length >= 0.0095 else f"{1e3 * length:.2g} mm"


def _beyond(edge: EdgeState, traverse: Traverse | None, spacing: Mapping[str, float]) -> Recommendation:
    across = "y" if edge.side in ("port", "starboard") else "z"
    line = {"y": "column", "z": "row"}[across] if len(spacing) > 1 else "place"
    step = spacing.get(across, math.nan)
    number = "" if math.isnan(step) else f" ({_count(round(edge.missing_reach / step), line)})"
    going_on = traverse is not None and traverse.heading == edge.side
    start = f"Continue {_WAYS[edge.side]}" if going_on else f"Widen the survey {_WAYS[edge.side]}"
    message = f"{start} by about {_mm(edge.missing_reach)}{number}. {edge.message}"
    return Recommendation(
        "continue" if going_on else "widen", message, side=edge.side, distance=edge.missing_reach, spacing=step
    )


def _count(number: int, what: str) -> str:
    return f"{number} {what}" + ("" if number == 1 else "s")


def _repeat(
    check: Check, places: Sequence[tuple[float, float]], written: Callable[[tuple[float, float]], str]
) -> Recommendation:
    named = "; ".join(written(place) for place in places[:_NAMED])
    more = f"; and {len(places) - _NAMED} more" if len(places) > _NAMED else ""
    lost = "place in the wake that was lost" if len(places) == 1 else f"{len(places)} places in the wake that were lost"
    why = f" {check.message}" if check.verdict == "fail" else ""
    return Recommendation("repeat", f"Repeat the {lost}: {named}{more}.{why}", places=tuple(places))


def _refine(check: Check, core: Core, written: Callable[[tuple[float, float]], str]) -> Recommendation:
    step, around = _FINE * core.core_length, _AROUND * core.core_length
    message = (
        f"Refine within {_mm(around)} of {written((core.y, core.z))}: points {_mm(step)} apart; there"
        f" they are {check.value:.2g} core lengths apart, which smears the induced drag."
    )
    return Recommendation("refine", message, distance=around, spacing=step, places=((core.y, core.z),))


def _noise(channels: Sequence[ChannelSummary]) -> list[Recommendation]:
    """Channels whose noise exceeds what their sources say."""
    loud = [
        channel for channel in channels if channel.declared_noise > 0 and channel.noise > _LOUD * channel.declared_noise
    ]
    if not loud:
        return []
    worst = max(loud, key=lambda channel: channel.noise / channel.declared_noise)
    names = _listed([channel.name for channel in loud])
    message = (
        f"The point-to-point noise of {names} is up to {worst.noise / worst.declared_noise:.2g} times what the survey"
        " file declares: sample longer, or correct its sources of uncertainty."
    )
    return [Recommendation("check", message)]


def _scatter(channels: Sequence[ChannelSummary], repeats: Repeats | None) -> list[Recommendation]:
    """Repeats that scatter more than neighbouring points do: something drifts."""
    if repeats is None or repeats.degrees_of_freedom < 1:
        return []
    # The scatter of few repeats is itself uncertain by one part in the root of twice their degrees of freedom.
    limit = _LOUD * (1.0 + 2.0 / math.sqrt(2.0 * repeats.degrees_of_freedom))
    ratios = {channel.name: channel.repeatability / channel.noise for channel in channels if channel.noise > 0}
    loud = {name: ratio for name, ratio in ratios.items() if ratio > limit}
    if not loud:
        return []
    message = (
        f"Repeated points of {_listed(list(loud))} differ up to {max(loud.values()):.2g} times as much as neighbouring"
        " points scatter: the stream or the probe drifts; visit one place again and again to follow it."
    )
    return [Recommendation("check", message)]


def _listed(names: Sequence[str]) -> str:
    plain = [name.replace("_", " ") for name in names]
    return plain[0] if len(plain) == 1 else f"{', '.join(plain[:-1])} and {plain[-1]}"
