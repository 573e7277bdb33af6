"""The points of a rake put where its tubes were, and told apart by tube."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import DataError
from wakeledger.core.points import Points
from wakeledger.run.config import Survey
from wakeledger.run.config.tables import ProbeTable

_COLUMN = "[plane.columns] tube"


@dataclass(frozen=True, eq=False)
class RakePoints:
    """Which tube took which point.

    Attributes
    ----------
    tube : ndarray of int, shape (n,)
        Index among the tubes in the flow of each point, from 0.
    tables : tuple of ProbeTable
        Of the tubes in the flow.
    static : mapping of int to Points
        Points of each static tube, where it was, by its number.
    static_tables : mapping of int to ProbeTable
        The static tubes.
    """

    tube: NDArray[np.intp]
    tables: tuple[ProbeTable, ...]
    static: Mapping[int, Points] = field(default_factory=dict)
    static_tables: Mapping[int, ProbeTable] = field(default_factory=dict)


def assemble(survey: Survey, points: Points) -> tuple[Points, RakePoints]:
    """Move each point from where the traverse stood to where its tube was.

    Parameters
    ----------
    survey : Survey
        With ``rake``.
    points : Points
        As read, positions those of the traverse.

    Returns
    -------
    (Points, RakePoints)
        The points of the tubes in the flow, those of static tubes beside them.

    Raises
    ------
    DataError
        If the numbers in the data and those of the survey file are not the same.
    """
    number = _numbers(survey, points)
    channels = {name: channel for name, channel in points.channels.items() if name != "tube"}
    points = replace(points, channels=channels)
    y, z = points.y.copy(), points.z.copy()
    index = np.full(points.n, -1, dtype=np.intp)
    flow = [probe for probe in survey.probe if probe.role == "flow"]
    for probe in survey.probe:
        here = number == probe.tube if probe.tube is not None else np.ones(points.n, dtype=bool)
        if probe.offset is not None:
            y[here] += probe.offset[0]
            z[here] += probe.offset[1]
        if probe.role == "flow":
            index[here] = flow.index(probe)
    points = replace(points, y=y, z=z)
    kept = index >= 0
    static = {probe.tube: probe for probe in survey.probe if probe.role == "static"}
    return subset(points, np.flatnonzero(kept)), RakePoints(
        index[kept],
        tuple(flow),
        {tube: subset(points, np.flatnonzero(number == tube)) for tube in static if tube is not None},
        {tube: probe for tube, probe in static.items() if tube is not None},
    )


def subset(points: Points, at: NDArray[np.intp]) -> Points:
    """Some of the points."""
    return replace(
        points,
        y=points.y[at],
        z=points.z[at],
        channels={name: replace(channel, values=channel.values[at]) for name, channel in points.channels.items()},
        line=points.line[at],
        std={name: values[at] for name, values in points.std.items()},
        samples=None if points.samples is None else points.samples[at],
        row=None if points.row is None else points.row[at],
    )


def _numbers(survey: Survey, points: Points) -> NDArray[np.int64]:
    """Number of the tube that took each point."""
    channel = points.channels.get("tube")
    if channel is None:
        return np.zeros(points.n, dtype=np.int64)
    values = channel.values
    wrong = np.flatnonzero(~np.isfinite(values) | (values != np.round(values)))
    if wrong.size:
        found = "missing" if np.isnan(values[wrong[0]]) else f"{values[wrong[0]]:g}, which is no whole number"
        raise DataError(
            f"the tube is {found}, at {wrong.size} point(s) in all",
            file=points.source,
            place=f"line {points.line[wrong[0]]}",
            remedy="give the number of the tube that took each point",
        )
    number = values.astype(np.int64)
    described = [probe.tube for probe in survey.probe if probe.tube is not None]
    unknown = np.flatnonzero(~np.isin(number, described))
    if unknown.size:
        raise DataError(
            f"tube {number[unknown[0]]} has no [[probe]], at {unknown.size} point(s) in all",
            file=points.source,
            place=f"line {points.line[unknown[0]]}",
            remedy=f"the survey file describes tube {listed(described)}: describe it too, or correct the number",
        )
    absent = [tube for tube in described if not np.any(number == tube)]
    if absent:
        raise DataError(
            f"tube {listed(absent)} took no point",
            file=points.source,
            place=_COLUMN,
            remedy="leave its [[probe]] out, or check the column of tube numbers",
        )
    return number


def listed(numbers: Sequence[int]) -> str:
    """1, 2 and 3."""
    texts = [str(number) for number in numbers]
    return texts[0] if len(texts) == 1 else f"{', '.join(texts[:-1])} and {texts[-1]}"
