"""The calibration of a survey's probe: found, held against the columns, and how well it is known in sentences."""

from __future__ import annotations

import math
from collections.abc import Collection, Sequence

import numpy as np

from wakeledger.core.errors import DataError, SurveyError
from wakeledger.intake.probe.record import Calibration
from wakeledger.run.config.tables import ProbeTable
from wakeledger.run.load import SurveyInput

_NAMED = 5


def calibration_of(survey: SurveyInput, probe: ProbeTable) -> Calibration | None:
    """Calibration of a probe; None for a pitot or static tube.

    Raises
    ------
    SurveyError
        If it was not read with the survey.
    """
    if probe.calibration is None:
        return None
    found = survey.calibrations.get(probe.calibration)
    if found is None:
        raise SurveyError(
            f"the calibration {probe.calibration!r} was not read",
            place="[probe] calibration",
            remedy="load the survey from its file, or from a ledger that holds the calibration",
        )
    return found


def check_columns(columns: Collection[str], holes: Sequence[str]) -> None:
    """Refuse readings that are not those of the calibrated holes.

    Raises
    ------
    DataError
        If a hole has no column, or a column no hole.
    """
    for hole in holes:
        if hole not in columns:
            raise DataError(
                f"hole {hole} has no column, and the probe is calibrated with {len(holes)} holes",
                place="[plane.columns]",
                remedy=f"add {hole}, or give the calibration of the probe that was used",
            )
    extra = sorted(name for name in columns if name[:1] == "p" and name[1:].isdigit() and name not in holes)
    if extra:
        raise DataError(
            f"{', '.join(extra)} has a column, and the probe is calibrated with {len(holes)} holes",
            place="[plane.columns]",
            remedy="leave it out, or give the calibration of the probe that was used",
        )


def calibration_notes(calibration: Calibration) -> list[str]:
    """Sentences about the points a calibration rests on, and how well it is known."""
    found = []
    bad = calibration.bad_points
    if bad:
        lines = ", ".join(str(point.line) for point in bad[:_NAMED]) + (", ..." if len(bad) > _NAMED else "")
        lines = f"{'line' if len(bad) == 1 else 'lines'} {lines}"
        found.append(
            f"The calibration does not rest on {len(bad)} of its {calibration.table.n} points, which lie off"
            f" the smooth surface through all others ({lines} of its table)."
        )
    found += _folded(calibration)
    pitch, yaw, total, static = calibration.standard_uncertainty()
    found.append(
        f"The calibration ({calibration.holes} holes, {calibration.table.n} points) is known to"
        f" {math.degrees(pitch):.2g} deg in pitch, {math.degrees(yaw):.2g} deg in yaw, {total:.2%} of q in total"
        f" and {static:.2%} in static pressure, by points left out."
    )
    return found


def _folded(calibration: Calibration) -> list[str]:
    """A sentence about calibrated directions that their pressures do not tell, if there are any."""
    blind = ~calibration.covered & ~calibration.bad
    if not blind.any():
        return []
    table = calibration.table
    cone = np.degrees(np.arccos(np.cos(table.yaw[blind]) * np.cos(table.pitch[blind])))
    return [
        f"The pressures at {np.count_nonzero(blind)} of the calibration's {table.n} points, from {cone.min():.3g} deg"
        " off the axis on, do not tell their direction from others: readings like them count as outside the range."
    ]
