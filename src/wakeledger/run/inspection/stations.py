"""Planes at several stations looked at."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

from wakeledger.ledger.inspection import Inspection, Recommendation
from wakeledger.run.load import SurveyInput
from wakeledger.run.worst_checks import worst_checks


def inspect_stations(survey: SurveyInput, inspect_one: Callable[[SurveyInput], Inspection]) -> Inspection:
    """Look at every plane of a survey.

    Parameters
    ----------
    survey : SurveyInput
        With the survey of each plane in `stations`.
    inspect_one : callable
        Looks at the survey of one plane.

    Returns
    -------
    Inspection
        Of the first plane, with the worst outcome of each check, the recommendations of all planes, and notes that say
        so.

    Raises
    ------
    InputError
        If a plane's data are wrong.
    """
    found = [inspect_one(one) for one in survey.stations]
    stations = [one.station for one in found]
    first = found[0]
    listed = ", ".join(f"{station:g} m" for station in stations)
    notes = [
        f"Planes at {listed} were looked at: checks and recommendations are those of all, grid, map, ranges and edges"
        f" those of the plane at {stations[0]:g} m."
    ]
    for one in found[1:]:
        low_y, high_y, low_z, high_z = one.window
        notes.append(
            f"At {one.station:g} m: {one.points} points on a {one.arrangement}, y {low_y:.4g} to {high_y:.4g} m, z"
            f" {low_z:.4g} to {high_z:.4g} m."
        )
        notes += [f"At {one.station:g} m: {note}" for note in one.notes if note not in first.notes]
    return replace(
        first,
        points=sum(one.points for one in found),
        checks=worst_checks([one.checks for one in found], stations),
        recommendations=_together(found),
        notes=(*notes, *first.notes),
    )


def _together(found: list[Inspection]) -> tuple[Recommendation, ...]:
    """What to do at each station; at the end to move on, where that holds for all."""
    todo = [
        replace(each, message=f"At {one.station:g} m: {each.message}")
        for one in found
        for each in one.recommendations
        if each.action != "move_on"
    ]
    longest = max((one.recommendations for one in found), key=len)
    may_move_on = all(each.recommendations[-1].action == "move_on" for each in found)
    return (*todo, *(longest[-1:] if may_move_on else ()))
