"""Points taken with the probe rolled in its mounting: told apart by roll, and what pairs of them say of the head."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.core.points import Points
from wakeledger.intake.probe.misalignment import Misalignment, from_roll_pair
from wakeledger.intake.probe.mounting import Turn
from wakeledger.intake.probe.readings import SAME_PLACE
from wakeledger.intake.probe.reduction import HoleReduction
from wakeledger.intake.probe.traverse import Traverse, Tube
from wakeledger.stream.reference import Reference

#: Most mountings that are told apart in one survey.
MOST_ROLLS = 8
#: Fewest rows whose scatter tells the uncertainty; with fewer, that of the points does.
_FEWEST_ROWS = 6
_COLUMN = "[plane.columns] roll"
_KEY = "[probe] misalignment"
_CLEAR, _CONTRARY = 2.0, 5.0


def by_roll(reduction: HoleReduction, points: Points) -> tuple[Tube, ...]:
    """One tube for each roll in which the probe was mounted, that of most points first.

    Raises
    ------
    DataError
        If a roll is missing, or there are too many of them.
    """
    channel = points.channels.get("roll")
    if channel is None:
        return (Tube(reduction),)
    missing = np.flatnonzero(~np.isfinite(channel.values))
    if missing.size:
        raise DataError(
            f"roll is missing at {missing.size} point(s)",
            place=f"{_COLUMN}, line {points.line[missing[0]]}",
            remedy="give the roll of the probe at every point, or leave its column out",
        )
    rolls, member, count = np.unique(channel.values, return_inverse=True, return_counts=True)
    if rolls.size > MOST_ROLLS:
        raise DataError(
            f"roll takes {rolls.size} values, of which {MOST_ROLLS} are told apart",
            place=_COLUMN,
            remedy="give the nominal roll of each mounting; a probe that rolls all the time is not reduced",
        )
    return tuple(
        Tube(
            replace(reduction, mounting=replace(reduction.mounting, roll=float(rolls[k]))), np.flatnonzero(member == k)
        )
        for k in np.argsort(-count, kind="stable")
    )


def head_turn(
    traverse: Traverse,
    values: Mapping[str, Array],
    points: Points,
    row: NDArray[np.integer],
    reference: Reference,
) -> tuple[Turn, str]:
    """Turn of the probe's head on its shaft, from places measured at two rolls.

    Parameters
    ----------
    traverse : Traverse
        One tube for each roll.
    values : mapping of str to ndarray, shape (n,)
        Readings.
    points : Points
        Where they were taken.
    row : ndarray of int, shape (n,)
        Traverse row of each point.
    reference : Reference
        The stream.

    Returns
    -------
    (Turn, str)
        With half a sentence. Its uncertainty is from the scatter between rows, or points, and the calibration's own.

    Raises
    ------
    DataError
        If there are not two rolls, or no places measured at both.
    """
    first, second, rolls = _both(traverse)
    pairs = _same_places(points, first, second)
    if not pairs:
        raise DataError(
            f"no place was measured at both rolls, {rolls[0]:g} and {rolls[1]:g} deg",
            place=_KEY,
            remedy="measure some places of the survey once more with the probe rolled, or leave misalignment out",
        )
    direction = _directions(traverse, values, reference, points.n)
    one = np.stack([_mean(direction[:, here]) for _, here in pairs], axis=1)
    other = direction[:, [at for at, _ in pairs]]
    rows = row[[at for at, _ in pairs]]
    turned = math.radians(rolls[1] - rolls[0])
    try:
        found = from_roll_pair(one, other, roll=turned, row=rows if np.unique(rows).size >= _FEWEST_ROWS else None)
    except DataError as error:
        raise DataError(error.found, place=_KEY, remedy=error.remedy) from error
    reduction = first.reduction
    assert isinstance(reduction, HoleReduction)
    known = reduction.calibration.standard_uncertainty()
    sigma = tuple(float(math.hypot(own, known[k])) for k, own in enumerate(found.standard_uncertainty))
    turn = Turn(found.pitch, found.yaw, (sigma[0], sigma[1]), of_head=True)
    return turn, (
        f"The probe's head is turned against its shaft by {turn_text(turn)}, as {found.points} places show that were"
        f" measured at rolls of {rolls[0]:g} and {rolls[1]:g} deg; it was taken out"
    )


def refuse_contrary_rolls(
    traverse: Traverse,
    values: Mapping[str, Array],
    points: Points,
    row: NDArray[np.integer],
    reference: Reference,
) -> None:
    """Refuse places measured at two rolls that show a misalignment which the survey file leaves in.

    Parameters
    ----------
    traverse, values, points, row, reference
        As for `head_turn`.

    Raises
    ------
    DataError
        If the misalignment is clear of its uncertainty.
    """
    if len(traverse.tubes) != 2:
        return
    try:
        turn, _ = head_turn(traverse, values, points, row, reference)
    except DataError:
        return
    angles = zip((turn.pitch, turn.yaw), turn.standard_uncertainty, strict=True)
    if any(abs(angle) > _CONTRARY * sigma for angle, sigma in angles):
        raise DataError(
            "places measured at two rolls contradict each other: they show the probe's head turned against its shaft by"
            f" {turn_text(turn)}",
            place="[probe]",
            remedy='write misalignment = "roll_pair" to take it out, or leave out the lines of one roll',
        )


def turn_text(turn: Turn | Misalignment) -> str:
    """Pitch, nose up, and yaw, nose to port, with their uncertainties, deg."""
    parts = []
    for name, angle, sigma in zip(("pitch", "yaw"), (turn.pitch, turn.yaw), turn.standard_uncertainty, strict=True):
        doubt = "" if abs(angle) > _CLEAR * sigma else ", not clear of it"
        parts.append(f"{math.degrees(angle):+.3f} deg in {name} (+- {math.degrees(sigma):.2g}{doubt})")
    return " and ".join(parts)


def _both(traverse: Traverse) -> tuple[Tube, Tube, tuple[float, float]]:
    rolls = [math.degrees(tube.reduction.mounting.roll) for tube in traverse.tubes]  # type: ignore[union-attr]
    if len(rolls) != 2:
        raise DataError(
            f"roll takes {len(rolls)} value(s), and a roll pair has two",
            place=_COLUMN,
            remedy="measure some places at two rolls, best 180 deg apart, or leave misalignment out",
        )
    return traverse.tubes[0], traverse.tubes[1], (rolls[0], rolls[1])


def _same_places(points: Points, first: Tube, second: Tube) -> list[tuple[int, NDArray[np.intp]]]:
    """Points of the second tube, each with those of the first at the same place."""
    from scipy.spatial import cKDTree

    assert first.points is not None and second.points is not None
    place = np.column_stack([points.y, points.z])
    step = np.hypot(*np.diff(place[first.points], axis=0).T)
    step = step[step > 0]
    if not step.size:
        return []
    near = cKDTree(place[first.points]).query_ball_point(place[second.points], SAME_PLACE * float(np.median(step)))
    return [
        (int(at), first.points[np.array(here, dtype=np.intp)])
        for at, here in zip(second.points, near, strict=True)
        if here
    ]


def _directions(traverse: Traverse, values: Mapping[str, Array], reference: Reference, n: int) -> Array:
    """Unit vectors in the measuring axes, shape (3, n); NaN outside the calibrated range."""
    pressures = traverse.pressures(values, reference)
    found = np.full((3, n), np.nan)
    for tube in traverse.tubes:
        assert isinstance(tube.reduction, HoleReduction) and tube.points is not None
        reading = tube.reduction.read({name: array[tube.points] for name, array in pressures.items()}, reference)
        assert reading.out_of_range is not None
        found[:, tube.points] = np.where(reading.out_of_range, np.nan, reading.direction)
    return found


def _mean(vectors: Array) -> Array:
    """Mean of those that are known, shape (3,)."""
    known = np.isfinite(vectors).all(axis=0)
    return np.asarray(vectors[:, known].mean(axis=1)) if known.any() else np.full(3, np.nan)
