"""Speeds that were measured twice, and the stream's: wrong units and normalisations show there before all else."""

from __future__ import annotations

import numpy as np

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.core.points import Points
from wakeledger.intake.state import State, Stream, absolute
from wakeledger.stream.gas import mach_from_pressure_ratio

#: Factor between the middle of the measured speeds and that from the pressures, and the stream's, from which on the
#: data are refused. Units of speed differ by 1.15 (kt and mph) to 3.6; no wake fills a window so deeply.
ANOTHER_SPEED, ANOTHER_STREAM = 1.12, 2.0
#: Departure that is told: common practice calls a multi-hole probe good to 1 % of the speed.
TOLD = 0.02


def check_speeds(state: State, points: Points, reference: Stream) -> None:
    """Refuse speeds that cannot be in their units.

    Parameters
    ----------
    state : State
        The state of the survey, without leading draws.
    points : Points
        The points as read.
    reference : Stream
        The undisturbed stream.

    Raises
    ------
    DataError
        If the median speed departs from the stream's by a factor of 2, and velocity and pressures do not both say so;
        or if the measured speeds depart from those that total and static pressure give by a factor of 1.12 in the
        median.
    """
    speed = np.sqrt(state.u**2 + state.v**2 + state.w**2)
    ratio = measured_speed_ratio(state, points, reference)
    # A window that lies in a deep wake or a slipstream is believed where two measurements agree.
    if np.isfinite(speed).any() and not abs(ratio - 1) <= TOLD:
        middle = float(np.nanmedian(speed))
        if _apart(middle / reference.speed, ANOTHER_STREAM):
            raise DataError(
                f"the speed is {middle:.4g} m/s in the middle of its range, that of the stream"
                f" {reference.speed:.4g} m/s",
                file=points.source,
                place="[plane.columns]",
                remedy="check the units and normalised_by of the columns, and [reference]",
            )
    if _apart(ratio, ANOTHER_SPEED):
        named = [name for name in ("u", "v", "w", "speed") if name in points.channels]
        raise DataError(
            f"{', '.join(named)} come to {ratio:.3g} times the speed that total and static pressure give (median)",
            file=points.source,
            place="[plane.columns]",
            remedy="check the units, normalised_by and relative_to of these columns; leave out u where only a"
            " direction was measured",
        )


def measured_speed_ratio(state: State, points: Points, reference: Stream) -> float:
    """Measured speed over that from total and static pressure, median over the points.

    Parameters
    ----------
    state, points, reference
        As in `check_speeds`.

    Returns
    -------
    float
        NaN where the file does not give both.
    """
    measured, pressures = _measured_speed(points, reference), _pressure_speed(state, points, reference)
    if measured is None or pressures is None:
        return float("nan")
    with np.errstate(invalid="ignore", divide="ignore"):
        ratios = measured / pressures
    ratios = ratios[np.isfinite(ratios)]
    return float(np.median(ratios)) if ratios.size else float("nan")


def speed_note(ratio: float) -> list[str]:
    """A sentence where the two speeds differ by more than 2 %; `ratio` is `measured_speed_ratio`."""
    if not abs(ratio - 1) > TOLD:
        return []
    return [
        f"The measured velocities come to {ratio:.3f} times the speed that total and static pressure give (median); the"
        " one that is not primary gives the direction only, or nothing."
    ]


def _apart(ratio: float, factor: float) -> bool:
    return bool(np.isfinite(ratio)) and not 1 / factor < ratio < factor


def _measured_speed(points: Points, reference: Stream) -> Array | None:
    given = {
        name: absolute(points.channels[name].values, points.channels[name], reference)
        for name in ("u", "v", "w", "speed")
        if name in points.channels
    }
    if "speed" in given:
        return given["speed"]
    if not {"u", "v", "w"} <= set(given):
        return None
    found: Array = np.sqrt(given["u"] ** 2 + given["v"] ** 2 + given["w"] ** 2)
    return found


def _pressure_speed(state: State, points: Points, reference: Stream) -> Array | None:
    """Speed from total and static pressure where both were measured."""
    if not {"total_pressure", "static_pressure"} <= set(points.channels):
        return None
    total, static = state.total_pressure, state.static_pressure
    if total is None or static is None:
        return None
    with np.errstate(invalid="ignore", divide="ignore"):
        if not reference.compressible:
            found: Array = np.sqrt(2 * (total - static) / state.density)
        else:
            mach = mach_from_pressure_ratio(static / total, gamma=reference.gamma)
            found = mach * np.sqrt(reference.gamma * static / state.density)
    return found
