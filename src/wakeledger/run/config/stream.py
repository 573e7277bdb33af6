"""``[reference]`` and ``[model]``: the undisturbed stream, and what forces are divided by."""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import Field, PlainValidator, model_validator

from wakeledger.core.errors import InputError
from wakeledger.run.config.quantities import (
    Area,
    Density,
    Force,
    Length,
    Number,
    Point,
    PositiveLength,
    PositiveNumber,
    PositivePressure,
    Pressure,
    Speed,
    Table,
    Temperature,
    TemperatureDifference,
    fail,
    frozen,
    kind_of,
    listed,
    parse_quantity,
    quantity,
)
from wakeledger.stream.airspeed import PositionError
from wakeledger.stream.reference import Reference, resolve_reference

_parse_speeds = listed(
    lambda value: parse_quantity(value, "m s-1"), 'at least two speeds as ["60 kt", "120 kt"]', least=2
)
Speeds = Annotated[tuple[float, ...], PlainValidator(_parse_speeds)]


def _compressible(value: Any) -> bool | Literal["auto"]:
    if isinstance(value, bool):
        return value
    if value == "auto":
        return "auto"
    raise fail(f"{kind_of(value)} is not allowed", 'allowed: true, false, "auto"')


class PositionErrorTable(Table):
    """``[reference.position_error]``: what to add to the indicated airspeed to get the calibrated one."""

    indicated: Speeds = Field(description='indicated = ["60 kt", "120 kt"] (indicated airspeeds, ascending)')
    correction: Speeds = Field(description='correction = ["-1.2 kt", "0.4 kt"] (to be added to each)')

    @model_validator(mode="after")
    def _is_table(self) -> PositionErrorTable:
        try:
            self.record()
        except InputError as error:
            raise fail(error.found, error.remedy or "") from error
        return self

    def record(self) -> PositionError:
        """The table as the stream room takes it, m/s."""
        return PositionError(frozen(self.indicated), frozen(self.correction))


class ReferenceTable(Table):
    """``[reference]``: what was measured of the undisturbed stream, in SI; None where it is not given."""

    speed: Speed | None = None
    dynamic_pressure: PositivePressure | None = None
    mach: PositiveNumber | None = None
    calibrated_airspeed: Speed | None = None
    density: Density | None = None
    static_pressure: Pressure | None = None
    temperature: Temperature | None = None
    total_temperature: Temperature | None = None
    relative_humidity: Annotated[float, quantity("1", least=0.0)] | None = None
    pressure_altitude: Length | None = None
    altitude: Length | None = None
    isa_offset: TemperatureDifference | None = None
    weight: Force | None = None
    load_factor: Number | None = None
    compressible: Annotated[bool | Literal["auto"], PlainValidator(_compressible)] = "auto"
    position_error: PositionErrorTable | None = None

    def given(self) -> dict[str, float]:
        """The quantities the file gives, in SI, by key.

        Returns
        -------
        dict of str to float
            As `wakeledger.stream.reference.resolve_reference` takes them: the calibrated airspeed is corrected by the
            position error table where there is one; `compressible` is apart.
        """
        names = [name for name in type(self).model_fields if name not in ("compressible", "position_error")]
        given = {name: float(value) for name in names if (value := getattr(self, name)) is not None}
        if self.position_error is not None and "calibrated_airspeed" in given:
            given["calibrated_airspeed"] = self.position_error.record().calibrated(given["calibrated_airspeed"])
        return given

    def resolve(self) -> Reference:
        """The undisturbed stream that the table determines."""
        return resolve_reference(self.given(), compressible=None if self.compressible == "auto" else self.compressible)

    @model_validator(mode="after")
    def _is_a_stream(self) -> ReferenceTable:
        if self.position_error is not None and self.calibrated_airspeed is None:
            raise fail(
                "a position error table is given without calibrated_airspeed",
                "give calibrated_airspeed (as indicated; the table corrects it), or leave the table out",
                "position_error",
            )
        try:
            self.resolve()
        except InputError as error:
            raise fail(error.found, error.remedy or "") from error
        return self


class ModelTable(Table):
    """``[model]``: areas and lengths of the whole configuration, in SI."""

    reference_area: Area = Field(description='reference_area = "0.180 m^2" (coefficients are forces over q times it)')
    span: PositiveLength | None = None
    mean_chord: PositiveLength | None = None
    quarter_chord_x: Length | None = None
    moment_centre: Point | None = None

    def given(self) -> dict[str, float]:
        """The quantities the file gives, in SI, by key; without the moment centre."""
        names = ("reference_area", "span", "mean_chord", "quarter_chord_x")
        return {name: float(value) for name in names if (value := getattr(self, name)) is not None}

    def quarter_chord(self) -> float | None:
        """Position of the quarter-chord line, m: as given, else three quarters of the mean chord ahead of the edge.

        Returns
        -------
        float or None
            x, negative upstream of the trailing edge; the mean chord is the area over the span where it is not given,
            and None is returned where there is no span either.
        """
        if self.quarter_chord_x is not None:
            return self.quarter_chord_x
        chord = self.mean_chord
        if chord is None and self.span is not None:
            chord = self.reference_area / self.span
        return None if chord is None else -0.75 * chord
