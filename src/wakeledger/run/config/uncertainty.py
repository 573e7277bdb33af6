"""``[uncertainty]`` and ``[[compare]]``: what is known of the errors, and what the result is held against."""

from __future__ import annotations

import math
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType
from typing import Annotated, Any, Literal

from pydantic import (
    BeforeValidator,
    Field,
    PlainValidator,
    PrivateAttr,
    ValidationInfo,
    field_validator,
    model_validator,
)
from pydantic_core import PydanticCustomError

from wakeledger.core.errors import nearest
from wakeledger.core.names import ROWS, VARIABLES
from wakeledger.core.units import DIMENSIONS, UnitError, split
from wakeledger.run.config.plane import HOLES, column_targets, conversion_fits
from wakeledger.run.config.quantities import (
    Number,
    PositiveLength,
    PositiveNumber,
    Table,
    Text,
    below,
    fail,
    kind_of,
    listed,
    parse_quantity,
    tables,
)

_REFERENCE_UNITS: Mapping[str, str] = {
    "speed": "m s-1",
    "dynamic_pressure": "Pa",
    "mach": "1",
    "calibrated_airspeed": "m s-1",
    "density": "kg m-3",
    "static_pressure": "Pa",
    "temperature": "K",
    "total_temperature": "K",
    "relative_humidity": "1",
    "pressure_altitude": "m",
    "altitude": "m",
    "isa_offset": "K",
    "weight": "N",
    "load_factor": "1",
}
_MODEL_UNITS: Mapping[str, str] = {"reference_area": "m2", "span": "m", "mean_chord": "m", "quarter_chord_x": "m"}
_ALWAYS: Mapping[str, str] = {
    "angle.pitch": "rad",
    "angle.yaw": "rad",
    "angle.roll": "rad",
    "position.y": "m",
    "position.z": "m",
}


@dataclass(frozen=True)
class Target:
    """What an uncertainty may name: its SI unit, and whether the file gives it divided by a reference quantity."""

    unit: str
    normalised: bool = False


def allowed_targets(raw: Mapping[str, Any]) -> dict[str, Target]:
    """Everything ``applies_to`` may name in this survey.

    Parameters
    ----------
    raw : mapping
        The file's content.

    Returns
    -------
    dict of str to Target
    """
    targets = {f"plane.{name}": Target(*found) for name, found in column_targets(raw.get("plane")).items()}
    for table, units in (("reference", _REFERENCE_UNITS), ("model", _MODEL_UNITS)):
        given = raw.get(table)
        names = [name for name in units if isinstance(given, dict) and name in given]
        targets.update({f"{table}.{name}": Target(units[name]) for name in names})
    targets.update({name: Target(unit) for name, unit in _ALWAYS.items()})
    if "probe" in raw:
        targets.update({f"probe.{name}": Target("Pa") for name in HOLES if f"plane.{name}" in targets})
        targets["calibration"] = Target("1")
    return targets


#: Where a quantity that an uncertainty names is given, and the names that can be given there.
_TABLES_OF: Mapping[str, tuple[str, Collection[str]]] = MappingProxyType(
    {
        "plane": ("[plane.columns]", VARIABLES),
        "reference": ("[reference]", _REFERENCE_UNITS),
        "model": ("[model]", _MODEL_UNITS),
    }
)

Scale = Literal["absolute", "relative", "normalised"]


def _parse_targets(value: Any, info: ValidationInfo) -> tuple[str, ...]:
    allowed: Mapping[str, Target] = (info.context or {})["targets"]

    def parse(item: Any) -> str:
        if isinstance(item, str) and item in allowed:
            return item
        if not isinstance(item, str):
            raise fail(f"{kind_of(item)} stands where a name is needed", f"known here: {', '.join(allowed)}")
        remedy = f"known here: {', '.join(allowed)}"
        room, _, key = item.partition(".")
        table, names = _TABLES_OF.get(room, ("", ()))
        if key in names:
            remedy = f"give {key} in {table}, or take {item!r} out; {remedy}"
        else:
            close = f"position.{key}" if f"position.{key}" in allowed else nearest(item, allowed)
            remedy = f"did you mean {close!r}? {remedy}" if close else remedy
        raise fail(f"{item!r} is nothing this survey gives", remedy)

    names: tuple[str, ...] = listed(parse, 'a list of names as ["plane.v", "plane.w"]')(value)
    if len(set(names)) < len(names):
        twice = next(name for name in names if names.count(name) > 1)
        raise fail(f"{twice!r} is named twice", "name each once")
    return names


def _parse_amount(written: Any, names: tuple[str, ...], targets: Mapping[str, Target]) -> tuple[float, Scale]:
    """An uncertainty as written, in SI or as a fraction, for all the targets it is for."""
    first = targets[names[0]]
    what, example = DIMENSIONS[first.unit]
    if isinstance(written, str):
        try:
            _, unit = split(written)
        except UnitError as error:
            raise fail(error.found, f"write {what} as in {example!r}, or a relative value as in '0.1 %'") from error
    elif isinstance(written, int | float) and not isinstance(written, bool):
        unit = ""
    else:
        raise fail(
            f"{kind_of(written)} stands here", f"write {what} as in {example!r}, or a relative value as in '0.1 %'"
        )
    if unit and not conversion_fits(unit, "1"):
        for name in names:
            if not conversion_fits(unit, targets[name].unit):
                needed, how = DIMENSIONS[targets[name].unit]
                raise fail(
                    f"unit {unit!r} does not fit {name}",
                    f"it needs {needed} as in {how!r}, or a relative value as in '0.1 %'; give other quantities a "
                    "source of their own",
                )
        return parse_quantity(written, first.unit, difference=True, least=0.0), "absolute"
    amount = parse_quantity(written, "1", least=0.0)
    scales = {name: _scale_of_pure_number(targets[name], unit, name) for name in names}
    if len(set(scales.values())) > 1:
        raise fail(
            f"{written!r} means different things for {' and '.join(names)}",
            "give each a source of its own: normalised columns take a fraction of the reference, others of the value",
        )
    scale = scales[names[0]]
    if scale is None:
        raise fail(
            f"{kind_of(written)} has no unit",
            f"{names[0]} needs {what} as in {example!r}, or a relative value as in '0.1 %'",
        )
    return amount, scale


def _scale_of_pure_number(target: Target, unit: str, name: str) -> Scale | None:
    """What a number without dimension is a fraction of; None where it lacks a unit."""
    if target.normalised:
        return "normalised"
    if target.unit != "1":
        return "relative" if unit else None
    return "relative" if unit and name != "reference.relative_humidity" else "absolute"


class Source(Table):
    """``[[uncertainty.source]]``: one labelled cause of error.

    Attributes
    ----------
    name : str
        Label in the budget.
    applies_to : tuple of str
        What it disturbs.
    effect : {"random", "systematic", "per_row"}
        Each point on its own, one error for the survey, or one for each row.
    distribution : {"normal", "rectangular", "triangular"}
    correlation_length : float or None
        Of a random effect over the plane, m.
    degrees_of_freedom : float
        Infinite where not given.
    shared_id : str or None
        The same error in every survey that names it.
    """

    name: Text = Field(description='name = "crossflow noise"')
    applies_to: Annotated[tuple[str, ...], PlainValidator(_parse_targets)] = Field(
        description='applies_to = ["plane.v", "plane.w"] (what it disturbs)'
    )
    effect: Literal["random", "systematic", "per_row"] = Field(
        description='effect = "random" (each point on its own), "systematic" (one error for the survey) or "per_row"'
    )
    written_standard: Any = Field(default=None, alias="standard_uncertainty")
    written_expanded: Any = Field(default=None, alias="expanded_uncertainty")
    coverage_factor: PositiveNumber | None = None
    distribution: Literal["normal", "rectangular", "triangular"] = "normal"
    correlation_length: PositiveLength | None = None
    degrees_of_freedom: PositiveNumber = math.inf
    shared_id: Text | None = None
    _amount: tuple[float, Scale] = PrivateAttr(default=(math.nan, "absolute"))

    @property
    def standard_uncertainty(self) -> float:
        """Standard uncertainty, k = 1; what it is measured in is said by `scale`."""
        return self._amount[0]

    @property
    def scale(self) -> Scale:
        """How the standard uncertainty is measured.

        ``"absolute"``: in the SI unit of the targets; ``"relative"``: as a fraction of the value itself;
        ``"normalised"``: as a fraction of the reference quantity that the column is divided by in the file.
        """
        return self._amount[1]

    @property
    def relative(self) -> bool:
        """Whether the standard uncertainty is a fraction of the value itself."""
        return self.scale == "relative"

    @model_validator(mode="after")
    def _amount_and_sense(self, info: ValidationInfo) -> Source:
        targets: Mapping[str, Target] = (info.context or {})["targets"]
        standard, expanded = self.written_standard, self.written_expanded
        if standard is None and expanded is None:
            unit = DIMENSIONS[targets[self.applies_to[0]].unit][1].partition(" ")[2]
            raise fail(
                "key 'standard_uncertainty' is missing",
                f"add it (k = 1) as in standard_uncertainty = '0.1 {unit}', or expanded_uncertainty with "
                "coverage_factor",
            )
        if standard is not None and expanded is not None:
            raise fail(
                "standard_uncertainty and expanded_uncertainty are both given", "keep one", "expanded_uncertainty"
            )
        if expanded is not None and self.coverage_factor is None:
            raise fail("key 'coverage_factor' is missing", "an expanded uncertainty needs it, as coverage_factor = 2")
        if standard is not None and self.coverage_factor is not None:
            raise fail(
                "coverage_factor is given with a standard uncertainty",
                "leave it out, or give expanded_uncertainty",
                "coverage_factor",
            )
        key = "standard_uncertainty" if standard is not None else "expanded_uncertainty"
        try:
            amount, scale = _parse_amount(standard if standard is not None else expanded, self.applies_to, targets)
        except PydanticCustomError as error:
            raise below(error, key) from error
        self._amount = (amount / (self.coverage_factor or 1.0), scale)
        pointwise = all(name.split(".")[0] in ("plane", "probe", "angle", "position") for name in self.applies_to)
        constant = next((name for name in self.applies_to if name.startswith("model.")), None)
        if self.effect != "systematic" and constant:
            raise fail(
                f'effect = "{self.effect}" is given for {constant}, which is one number for the survey',
                'write effect = "systematic"',
                "effect",
            )
        if self.correlation_length is not None and (self.effect != "random" or not pointwise):
            raise fail(
                "correlation_length is given for an error that does not vary from point to point",
                'leave it out, or write effect = "random" for plane, angle, position or probe quantities',
                "correlation_length",
            )
        if self.correlation_length is not None and self.distribution != "normal":
            raise fail(
                f'correlation_length is given with distribution = "{self.distribution}"',
                'errors that hang together in space are normal: write distribution = "normal", or leave it out',
                "correlation_length",
            )
        if self.distribution == "triangular" and math.isfinite(self.degrees_of_freedom):
            raise fail(
                'degrees_of_freedom is given with distribution = "triangular"',
                "it goes with a normal or a rectangular distribution",
                "degrees_of_freedom",
            )
        return self


def refuse_twice(entries: Sequence[Any], *below: str) -> None:
    """Refuse entries that carry the same name."""
    for index, entry in enumerate(entries):
        first = next(place for place, other in enumerate(entries) if other.name == entry.name)
        if first != index:
            raise fail(
                f"name {entry.name!r} is used twice",
                f"entry {first + 1} has it too; name each once",
                *below,
                index,
                "name",
            )


class UncertaintyTable(Table):
    """``[uncertainty]``: size of the Monte Carlo, and the sources."""

    draws: Annotated[int, Field(ge=100)] = 400
    seed: Annotated[int, Field(ge=0)] = 0
    source: Annotated[tuple[Source, ...], BeforeValidator(tables)] = ()

    @model_validator(mode="after")
    def _names_differ(self) -> UncertaintyTable:
        refuse_twice(self.source, "source")
        return self


class Comparison(Table):
    """``[[compare]]``: a value from elsewhere, such as a balance reading.

    Attributes
    ----------
    name : str
        What gave it.
    row : str
        The row it is held against.
    coefficient, coefficient_standard_uncertainty : float or None
        Where the value was given as a coefficient.
    as_measured : {"half", "whole"} or None
        Which part of the configuration it belongs to, for half models.
    """

    name: Text = Field(description='name = "balance"')
    row: Text = Field(description='row = "total_drag"')
    written_value: Any = Field(default=None, alias="value")
    written_uncertainty: Any = Field(default=None, alias="standard_uncertainty")
    coefficient: Number | None = None
    written_coefficient_uncertainty: Any = Field(default=None, alias="coefficient_standard_uncertainty")
    as_measured: Literal["half", "whole"] | None = None
    _value: float | None = PrivateAttr(default=None)
    _uncertainty: float | None = PrivateAttr(default=None)
    _coefficient_uncertainty: float | None = PrivateAttr(default=None)

    @property
    def value(self) -> float | None:
        """The value in the row's SI unit; None where a coefficient is given."""
        return self._value

    @property
    def standard_uncertainty(self) -> float | None:
        """Its standard uncertainty in the same unit, k = 1; None where unknown or given for the coefficient."""
        return self._uncertainty

    @property
    def coefficient_standard_uncertainty(self) -> float | None:
        """Standard uncertainty of the coefficient, k = 1; None where unknown or given for the value."""
        return self._coefficient_uncertainty

    @field_validator("row")
    @classmethod
    def _row_is_known(cls, value: str) -> str:
        if value not in ROWS:
            close = nearest(value, ROWS)
            meant = f"did you mean {close!r}? " if close else ""
            raise fail(f"row {value!r} is not known", f"{meant}known rows: {', '.join(ROWS)}")
        return value

    @model_validator(mode="after")
    def _value_or_coefficient(self) -> Comparison:
        unit = ROWS[self.row].unit
        what, example = DIMENSIONS[unit]
        if self.written_value is None and self.coefficient is None:
            raise fail("key 'value' is missing", f"add value = {example!r}, or coefficient = 0.0231")
        if self.written_value is not None and self.coefficient is not None:
            raise fail("value and coefficient are both given", "keep the one that was measured", "coefficient")
        if self.coefficient is not None and unit == "1":
            raise fail(f"coefficient is given for {self.row}", "it has none: give value", "coefficient")
        if self.written_uncertainty is not None and self.written_coefficient_uncertainty is not None:
            raise fail(
                "standard_uncertainty and coefficient_standard_uncertainty are both given",
                "keep one",
                "coefficient_standard_uncertainty",
            )
        if self.coefficient is None:
            if self.written_coefficient_uncertainty is not None:
                raise fail(
                    "coefficient_standard_uncertainty is given with a value",
                    f"write standard_uncertainty, {what} as in {example!r}",
                    "coefficient_standard_uncertainty",
                )
            self._value = _at(self.written_value, unit, "value")
            if self.written_uncertainty is not None:
                self._uncertainty = _amount_of(self.written_uncertainty, unit, self._value, "standard_uncertainty")
            return self
        key, written = "coefficient_standard_uncertainty", self.written_coefficient_uncertainty
        if written is None:
            key, written = "standard_uncertainty", self.written_uncertainty
        if written is not None:
            self._coefficient_uncertainty = _amount_of(written, "1", self.coefficient, key)
        return self


def _at(value: Any, unit: str, key: str, *, difference: bool = False, least: float | None = None) -> float:
    try:
        return parse_quantity(value, unit, difference=difference, least=least)
    except PydanticCustomError as error:
        raise below(error, key) from error


def _amount_of(written: Any, unit: str, value: float, key: str) -> float:
    """A standard uncertainty in the value's unit; per cent are of the value."""
    if isinstance(written, str) and written.strip().endswith("%"):
        return abs(value) * _at(written, "1", key, least=0.0)
    return _at(written, unit, key, difference=True, least=0.0)
