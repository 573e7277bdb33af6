"""``[plan]``: what a survey that is still to be made may look like."""

from __future__ import annotations

import math
from typing import Annotated, Any, Literal

from pydantic import Field, PlainValidator, model_validator

from wakeledger.run.config.quantities import (
    Duration,
    Force,
    Length,
    PositiveLength,
    PositiveNumber,
    Speed,
    Table,
    Text,
    Validator,
    fail,
    kind_of,
    listed,
    parse_quantity,
)

_RANGE = "one value, or a list of values to try"


def _several(parse: Validator) -> PlainValidator:
    """One value or a list of different values to try, in the order given."""
    many: Validator = listed(parse, _RANGE)

    def parse_all(value: Any) -> tuple[Any, ...]:
        found: tuple[Any, ...] = many(value if isinstance(value, list) else [value])
        if len(set(found)) < len(found):
            raise fail("a value is given twice", "give each once")
        return found

    return PlainValidator(parse_all)


def _range(si_unit: str, *, above: float | None = None) -> PlainValidator:
    least = 0.0 if above is None else None
    return _several(lambda value: parse_quantity(value, si_unit, difference=True, above=above, least=least))


def _accuracies(si_unit: str, most: float, said: str) -> PlainValidator:
    """Standard uncertainties that errors of second order still describe."""

    def parse(value: Any) -> float:
        size = parse_quantity(value, si_unit, difference=True, least=0.0)
        if size >= most:
            raise fail(f"{value!r} is not planned with", f"give a standard uncertainty smaller than {said}")
        return size

    return _several(parse)


def _instruments(si_unit: str) -> PlainValidator:
    """Noise of one instrument or of several, which may share a value."""
    many: Validator = listed(lambda value: parse_quantity(value, si_unit, least=0.0), _RANGE)
    return PlainValidator(lambda value: many(value if isinstance(value, list) else [value]))


def _count(value: Any) -> int:
    if not isinstance(value, int) or isinstance(value, bool) or value < 1:
        raise fail(f"{kind_of(value)} stands here", "write a whole number of at least 1, or a list of them")
    return value


Lengths = Annotated[tuple[float, ...], _range("m", above=0.0)]
Angles = Annotated[tuple[float, ...], _accuracies("rad", math.radians(20), "20 deg")]
Shares = Annotated[tuple[float, ...], _accuracies("1", 0.2, "20 %")]
Pressures = Annotated[tuple[float, ...], _range("Pa")]
SpeedNoise = Annotated[tuple[float, ...], _instruments("m s-1")]
PressureNoise = Annotated[tuple[float, ...], _instruments("Pa")]

_NOISES = ("noise", "total_pressure_noise", "static_pressure_noise", "hole_noise")
#: Keys that say what flow to expect.
FLOW = ("loading", "lift", "lift_coefficient", "tip_core", "profile_drag", "profile_drag_coefficient", "wake_width",
         "rolled_up", "height")  # fmt: skip


class PlanTable(Table):
    """``[plan]``: the flow to expect, and the ranges of a survey's set-up; single values are ranges of one.

    Attributes
    ----------
    loading, lift, lift_coefficient, tip_core, profile_drag, profile_drag_coefficient, wake_width, rolled_up
        The wake to expect, in SI; `ledger` instead takes the plane of an archive for it.
    height : float or None
        Of the trailing edge above z = 0, m.
    station : float or None
        Distance of the plane behind the trailing edge, m, in a file of its own.
    spacing, window : tuple of float
        Distance of the points, and of the window's edge from the wake, m.
    noise, total_pressure_noise, static_pressure_noise, hole_noise : tuple of float or None
        Standard deviation of one reading at one point, m/s and Pa, one entry for each probe to choose from.
    angle_accuracy, reference_accuracy, density_accuracy, reference_drift : tuple of float or None
        Standard uncertainties of what is wrong for a whole survey (rad; parts of the dynamic pressure and density), and
        from row to row (Pa).
    rows_along : {"y", "z"}
        Along which the probe goes to and fro.
    repeats : tuple of int
    settling_time, traverse_speed, time_limit : float or None
        s, m/s, s.
    row, target : str, str or None
        What is to be known, and how well.
    draws, seed : int
        Of the Monte Carlo that checks the set-up chosen.
    """

    loading: Literal["elliptic", "parabolic", "linear", "bell"] = "elliptic"
    lift: Force | None = None
    lift_coefficient: PositiveNumber | None = None
    tip_core: PositiveLength | None = None
    profile_drag: Force | None = None
    profile_drag_coefficient: PositiveNumber | None = None
    wake_width: PositiveLength | None = None
    rolled_up: bool = True
    height: Length | None = None
    ledger: Text | None = None
    station: Length | None = None
    spacing: Lengths = Field(description='spacing = ["10 mm", "15 mm"] (distance of the points)')
    window: Lengths = Field(description='window = ["100 mm"] (from the wake to the edge of the window)')
    noise: SpeedNoise | None = None
    total_pressure_noise: PressureNoise | None = None
    static_pressure_noise: PressureNoise | None = None
    hole_noise: PressureNoise | None = None
    angle_accuracy: Angles | None = None
    reference_accuracy: Shares | None = None
    density_accuracy: Shares | None = None
    reference_drift: Pressures | None = None
    rows_along: Literal["y", "z"] = "y"
    repeats: Annotated[tuple[int, ...], _several(_count)] = (1,)
    settling_time: Duration | None = None
    traverse_speed: Speed | None = None
    time_limit: Duration | None = None
    row: Text = "total_drag"
    target: Text | None = None
    draws: Annotated[int, Field(ge=200)] = 1000
    seed: Annotated[int, Field(ge=0)] = 0

    @property
    def instruments(self) -> int:
        """Number of probes to choose from."""
        return max(len(given) for name in _NOISES if (given := getattr(self, name)) is not None)

    @model_validator(mode="after")
    def _flow_is_known(self) -> PlanTable:
        given = self.model_fields_set
        if self.ledger is not None:
            both = [name for name in FLOW if name in given]
            if both:
                raise fail(
                    f"{both[0]} and ledger are both given",
                    "the ledger's plane is the flow to expect: keep one",
                    both[0],
                )
            return self
        for one, other, example in (
            ("lift_coefficient", "lift", "lift_coefficient = 0.5"),
            ("profile_drag_coefficient", "profile_drag", "profile_drag_coefficient = 0.0120"),
        ):
            if getattr(self, one) is not None and getattr(self, other) is not None:
                raise fail(f"{one} and {other} are both given", "keep one", one)
            if getattr(self, one) is None and getattr(self, other) is None:
                raise fail(f"key {one!r} is missing", f"add {example}, or {other}, or ledger (an archive)")
        for name, example in (("tip_core", '"20 mm"'), ("wake_width", '"25 mm"')):
            if getattr(self, name) is None:
                raise fail(f"key {name!r} is missing", f"add {name} = {example}, or ledger (an archive)")
        return self

    @model_validator(mode="after")
    def _noise_is_known(self) -> PlanTable:
        direct = [name for name in _NOISES[:3] if getattr(self, name) is not None]
        if self.hole_noise is not None:
            if direct:
                raise fail(
                    f"{direct[0]} and hole_noise are both given",
                    "hole_noise says what the flow variables' noise is: keep one",
                    direct[0],
                )
            return self
        for name, example in (("noise", '["0.1 m/s", "0.2 m/s"]'), ("total_pressure_noise", '"1.0 Pa"')):
            if getattr(self, name) is None:
                raise fail(f"key {name!r} is missing", f"add {name} = {example}, or hole_noise of a five-hole probe")
        lengths = {name: len(getattr(self, name)) for name in direct}
        several = {name: count for name, count in lengths.items() if count > 1}
        if len(set(several.values())) > 1:
            found = ", ".join(f"{count} of {name}" for name, count in several.items())
            raise fail(
                f"the lists differ in length: {found}",
                "each entry is one probe: give as many of each, or one that is common to all",
                next(iter(several)),
            )
        return self
