"""A calibration as text for a terminal; a pure function, nothing is printed here."""

from __future__ import annotations

import textwrap
from typing import TYPE_CHECKING

import numpy as np

from wakeledger.core.grid import Array

if TYPE_CHECKING:
    from wakeledger.intake.probe.record import Calibration

#: More bad points than this are counted instead of named; the calibration file lists all.
MOST_NAMED = 20


def calibration_text(calibration: Calibration, *, width: int = 100) -> str:
    """What was calibrated, how well, and which points do not fit.

    Parameters
    ----------
    calibration : Calibration
        The calibration.
    width : int
        Columns of the terminal.

    Returns
    -------
    str
        Lines without trailing blanks, ended by a line feed.
    """
    table = calibration.table
    lines = [calibration.title, ""] if calibration.title else []
    bad = calibration.bad_points
    words = {5: "Five", 7: "Seven"}
    lines.append(
        f"{words[calibration.holes]}-hole probe, {table.n} points, {table.n - len(bad)} used; pitch "
        f"{_span(table.pitch)}, yaw {_span(table.yaw)}."
    )
    if len(calibration.sets) > 1:
        listed = ", ".join(f"{one.level:.4g}" for one in calibration.sets)
        lines.append(f"{len(calibration.sets)} sets, interpolated between {table.level_name} {listed}.")
    pitch, yaw, total, static = calibration.standard_uncertainty()
    lines += [
        "",
        "Standard uncertainty, from points left out (root mean square over the range; by region in the file):",
        f"  pitch            {np.degrees(pitch):.2g} deg",
        f"  yaw              {np.degrees(yaw):.2g} deg",
        f"  total pressure   {100 * total:.2g} % of q",
        f"  static pressure  {100 * static:.2g} % of q",
    ]
    sentences = [f"Bad point, {point.sentence}." for point in bad[:MOST_NAMED]]
    if len(bad) > MOST_NAMED:
        sentences.append(f"{len(bad) - MOST_NAMED} further bad points are listed in the file (bad = 1).")
    blind = ~calibration.covered & ~calibration.bad
    if blind.any():
        named = ", ".join(f"line {line}" for line in table.line[blind][:MOST_NAMED])
        sentences.append(
            f"At {np.count_nonzero(blind)} points the coefficients do not tell the direction ({named}); the range "
            "ends before them."
        )
    sentences += [f"{note[0].upper()}{note[1:]}." for note in calibration.notes]
    if sentences:
        lines.append("")
        for sentence in sentences:
            lines += textwrap.wrap(sentence, max(width, 40), initial_indent="- ", subsequent_indent="  ")
    return "\n".join(line.rstrip() for line in lines) + "\n"


def _span(values: Array) -> str:
    low, high = np.degrees([values.min(), values.max()]) + 0.0
    return f"{low:.3g} to {high:.3g} deg"
