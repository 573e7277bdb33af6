"""What a survey shall know, and how well."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

from wakeledger.core.errors import SurveyError, nearest
from wakeledger.core.names import ROWS as NAMED_ROWS
from wakeledger.core.units import UnitError, split, to_si
from wakeledger.run.chain.outputs import ROWS, coefficient_of

_EXAMPLES = 'write "2 counts" (of a drag coefficient), "0.5 %", a value in the row\'s unit, or one of its coefficient'
#: One count of a drag coefficient.
_COUNT = 1e-4
#: Coefficients below this are rounding.
_NOTHING = 1e-9


@dataclass(frozen=True)
class Target:
    """An expanded uncertainty (95 %) that one row is to have.

    Attributes
    ----------
    row : str
        The row.
    output : str
        The chain's output that is judged: the row or its coefficient.
    unit : str
        What it is shown in: ``counts``, or a UDUNITS string.
    scale : float
        Shown figure over the output.
    limit : float
        Largest expanded uncertainty, as shown.
    """

    row: str
    output: str
    unit: str
    scale: float
    limit: float


def read_target(text: str | None, row: str, values: Mapping[str, float], *, place: str = "[plan] target") -> Target:
    """The target as written.

    Parameters
    ----------
    text : str or None
        ``"2 counts"``, ``"0.5 %"``, ``"0.1 N"`` or ``"0.002"``.
    row : str
        The row it is for.
    values : mapping of str to float
        What the outputs are expected to be, for parts of the value.
    place : str
        Where it is written, for messages.

    Returns
    -------
    Target

    Raises
    ------
    SurveyError
        If the row or the target is not understood.
    """
    if row not in ROWS:
        close = nearest(row, ROWS)
        meant = f"did you mean {close!r}? " if close else ""
        raise SurveyError(
            f"row {row!r} is not planned", place="[plan] row", remedy=f"{meant}allowed: {', '.join(ROWS)}"
        )
    if text is None:
        raise SurveyError("no target is given", place=place, remedy=f"give --target, or target in [plan]: {_EXAMPLES}")
    coefficient = row if row == "span_efficiency" else coefficient_of(row)
    if math.isnan(values.get(coefficient, math.nan)):
        coefficient = row
    if math.isnan(values.get(coefficient, math.nan)):
        raise SurveyError(
            f"{row} is not known of this flow", place="[plan] row", remedy="plan for another row, or from a ledger"
        )
    in_counts = "drag" in row and coefficient != row
    shown = ("counts", 1 / _COUNT) if in_counts else ("1" if coefficient != row else NAMED_ROWS[row].unit, 1.0)
    try:
        number, unit = split(text)
    except UnitError as error:
        raise SurveyError(error.found, place=place, remedy=_EXAMPLES) from error
    if unit in ("count", "counts"):
        if not in_counts:
            raise SurveyError(f"counts are given for {row}", place=place, remedy=_EXAMPLES)
        limit, output = float(number), coefficient
    elif unit == "%":
        if abs(values[coefficient]) < _NOTHING:
            raise SurveyError(
                f"the {row.replace('_', ' ')} is expected to be zero, and {text} of it is nothing",
                place=place,
                remedy=f"give a value in {NAMED_ROWS[row].unit}, or a coefficient",
            )
        limit, output = abs(float(number) / 100 * values[coefficient]) * shown[1], coefficient
    elif not unit:
        limit, output = float(number) * shown[1], coefficient
        if in_counts and limit > abs(values[coefficient]) * shown[1]:
            # A coefficient of a drag is a small number: what is larger than the drag itself was meant in another unit.
            raise SurveyError(
                f"{text!r} without a unit is a coefficient, {limit:g} counts, more than the {row.replace('_', ' ')}"
                " itself",
                place=place,
                remedy=_EXAMPLES,
            )
    else:
        wanted = NAMED_ROWS[row].unit
        try:
            limit = to_si(text, wanted, difference=True)
        except UnitError as error:
            raise SurveyError(error.found, place=place, remedy=_EXAMPLES) from error
        output, shown = row, (wanted, 1.0)
    if not (math.isfinite(limit) and limit > 0):
        raise SurveyError(f"{text!r} is not a target", place=place, remedy="give an expanded uncertainty above zero")
    return Target(row, output, shown[0], shown[1], limit)
