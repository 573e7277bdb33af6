"""The nearness of walls to a probe's way, taken out of its readings."""

from __future__ import annotations

import numpy as np

from wakeledger.core.errors import DataError, SurveyError
from wakeledger.core.grid import Array
from wakeledger.core.points import Points
from wakeledger.intake.probe.correction import Correction
from wakeledger.intake.probe.wall_proximity import REACH, correct_total_pressure
from wakeledger.run.config import Survey
from wakeledger.run.config.tables import ProbeTable, ProbeWalls

#: Name of the correction.
WALL = "wall proximity"
_PLACE = "[probe] walls"


def wall_correction(
    survey: Survey, probe: ProbeTable, points: Points, pressures: Array, static: Array
) -> tuple[Correction | None, str]:
    """What the nearness of walls takes from the holes' readings.

    Parameters
    ----------
    survey : Survey
        The survey file.
    probe : ProbeTable
        With ``walls`` and ``tip_diameter``.
    points : Points
        Where the probe was.
    pressures : ndarray, shape (holes, n)
        Of the holes, Pa.
    static : ndarray, shape (n,)
        Static pressure at the points, on the same zero, Pa.

    Returns
    -------
    (Correction or None, str)
        Of the holes, and half a sentence; None and a whole one where no point is near a wall.

    Raises
    ------
    InputError
        If points lie on both sides of a wall, or the tip would reach into it.

    Notes
    -----
    A speed that is read too low by dU at the right static pressure and direction lowers every hole above the static
    pressure in proportion: (p_k − p)(1 + dU/U)² + p is what is right.
    """
    walls, diameter = probe.walls, probe.tip_diameter
    assert walls is not None and diameter is not None
    distance = _distance(survey, walls, points)
    try:
        correction = correct_total_pressure(pressures, static, distance, diameter=diameter)
    except DataError as error:
        raise DataError(error.found, place=_PLACE, remedy=error.remedy) from error
    near = int(np.count_nonzero(distance < REACH * diameter))
    if not near:
        return None, (
            f"No point lies within {REACH:g} tip diameters of a wall: there is nothing to correct for the nearness of"
            " walls."
        )
    return correction, (
        f"The nearness of walls ({near} of {points.n} points within {REACH:g} tip diameters, the nearest at"
        f" {1e3 * distance.min():.3g} mm; common practice, known to half of it) was taken out"
    )


def _distance(survey: Survey, walls: ProbeWalls, points: Points) -> Array:
    """Distance of each point from the nearest wall, m."""
    nearest = np.full(points.n, np.inf)
    for axis, places in (("y", walls.y), ("z", walls.z)):
        measured = survey.section is None or survey.plane.axes.file_axis(axis) in survey.plane.columns  # type: ignore[arg-type]
        if places and not measured:
            raise SurveyError(
                f"walls across {axis} are given, and the line traverse does not tell {axis}",
                place=f"{_PLACE}.{axis}",
                remedy="leave them out",
            )
        for place in places:
            away = getattr(points, axis) - place
            if away.max() > 0 > away.min():
                raise SurveyError(
                    f"points lie on both sides of the wall at {axis} = {1e3 * place:g} mm"
                    f" ({axis} = {1e3 * (away.min() + place):g} to {1e3 * (away.max() + place):g} mm)",
                    place=f"{_PLACE}.{axis}",
                    remedy="give the walls' places in the project's frame, as [boundary] does",
                )
            nearest = np.minimum(nearest, np.abs(away))
    return nearest
