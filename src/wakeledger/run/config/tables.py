"""The small tables: test, probe, empty tunnel, boundary, wake, section, bodies and loading."""

from __future__ import annotations

import datetime
from typing import Annotated, Any, Literal

from pydantic import Field, PlainValidator, model_validator

from wakeledger.physics.fields.boundary import (
    Boundary,
    Circle,
    ClosedWalls,
    FreeAir,
    OpenJet,
    Rectangle,
    Section,
)
from wakeledger.physics.fields.boundary import Polygon as PolygonSection
from wakeledger.run.config.quantities import (
    Angle,
    Duration,
    Label,
    Length,
    LengthFromZero,
    NumberFromZero,
    Point,
    Polygon,
    Polyline,
    PositiveLength,
    PositiveNumber,
    Pressure,
    Shape,
    Shapes,
    Table,
    Text,
    Validator,
    Walls,
    fail,
    kind_of,
    listed,
    parse_quantity,
)
from wakeledger.run.config.tunnel import TunnelCorrections


def _date(value: Any) -> str:
    if isinstance(value, datetime.date | datetime.datetime | datetime.time):
        return value.isoformat()
    if isinstance(value, str):
        return value
    raise fail(f"{kind_of(value)} stands where a date is needed", "write it as 2025-06-30 or as text")


def _angle_text(value: Any) -> str:
    parse_quantity(value, "rad")
    return str(value)


class TestTable(Table):
    """``[test]``: what identifies the run; kept everywhere as written, all optional."""

    __test__ = False

    run: Label | None = None
    point: Label | None = None
    configuration: Label | None = None
    alpha: Annotated[str, PlainValidator(_angle_text)] | None = None
    beta: Annotated[str, PlainValidator(_angle_text)] | None = None
    date: Annotated[str, PlainValidator(_date)] | None = None
    operator: Label | None = None
    notes: Label | None = None

    def given(self) -> dict[str, str]:
        """The keys the file gives, as written."""
        return {name: str(value) for name in type(self).model_fields if (value := getattr(self, name)) is not None}


class HoleReadings(Table):
    """Readings of the holes with no flow, Pa."""

    p1: Pressure | None = None
    p2: Pressure | None = None
    p3: Pressure | None = None
    p4: Pressure | None = None
    p5: Pressure | None = None
    p6: Pressure | None = None
    p7: Pressure | None = None


class ProbeZeros(Table):
    """Zero readings before and after the traverse."""

    before: HoleReadings | None = None
    after: HoleReadings | None = None


def _backlash(value: Any) -> float | Literal["estimate"]:
    if value == "estimate":
        return "estimate"
    if isinstance(value, str) and not value.strip()[:1].isdigit():
        raise fail(f"{kind_of(value)} is not allowed", 'write backlash = "estimate", or a length as in "0.2 mm"')
    return parse_quantity(value, "m", least=0.0)


def _places(value: Any) -> tuple[float, ...]:
    def parse(item: Any) -> float:
        return parse_quantity(item, "m")

    many: Validator = listed(parse, 'one place, or a list of them: ["-0.45 m", "0.45 m"]')
    found: tuple[float, ...] = many(value if isinstance(value, list) else [value])
    return found


class ProbeWalls(Table):
    """Walls near a probe's way: places of those that stand across y, and of those across z, m."""

    y: Annotated[tuple[float, ...], PlainValidator(_places)] = ()
    z: Annotated[tuple[float, ...], PlainValidator(_places)] = ()


class ProbeTable(Table):
    """``[probe]``, or one tube of a rake in ``[[probe]]``."""

    calibration: Text | None = None
    role: Literal["flow", "static"] = "flow"
    tube: int | None = Field(default=None, ge=1)
    offset: Point | None = None
    roll: Angle = 0.0
    pitch: Angle = 0.0
    yaw: Angle = 0.0
    tip_diameter: PositiveLength | None = None
    zeros: ProbeZeros | None = None
    lag: Duration | None = None
    displacement: NumberFromZero | None = None
    backlash: Annotated[float | Literal["estimate"], PlainValidator(_backlash)] | None = None
    walls: ProbeWalls | None = None
    misalignment: Literal["roll_pair", "outer_flow"] | None = None


class EmptyTunnelTable(Table):
    """``[empty_tunnel]``: a survey of the tunnel without the model."""

    survey: Text = Field(description='survey = "empty.toml" (the survey of the empty tunnel)')


class BoundaryTable(TunnelCorrections):
    """``[boundary]``: what surrounds the survey.

    Attributes
    ----------
    kind : {"free_air", "closed_walls", "open_jet"}
    section : {"rectangle", "circle", "polygon"}
    y, z : tuple of float or None
        Walls of a rectangle, m.
    diameter, centre, vertices
        Of a circle, or of a polygon, m.
    reflection : {"y", "z"} or None
        Half model (plane y = 0), or ground plane (z = 0).
    inboard_cut : float or None
        Distance from the symmetry plane inside which points are left out and filled from outside it, m.
    model_centre : (float, float) or None
        y and z of the model, m, where the upwash of the walls is wanted.
    """

    kind: Literal["free_air", "closed_walls", "open_jet"] = Field(
        description='kind = "free_air", "closed_walls" or "open_jet"'
    )
    section: Literal["rectangle", "circle", "polygon"] | None = None
    y: Walls | None = None
    z: Walls | None = None
    diameter: PositiveLength | None = None
    centre: Point | None = None
    vertices: Polygon | None = None
    reflection: Literal["y", "z"] | None = None
    inboard_cut: LengthFromZero | None = None
    model_centre: Point | None = None

    def surroundings(self) -> Boundary:
        """The boundary in the terms of the physics, its reflection plane included.

        Raises
        ------
        SurveyError
            If the section does not fit the reflection plane.
        """
        if self.kind == "free_air":
            return FreeAir(self.reflection)
        found: Section
        if self.diameter is not None:
            found = Circle(self.diameter, self.centre or (0.0, 0.0))
        elif self.vertices is not None:
            found = PolygonSection(tuple((float(y), float(z)) for y, z in self.vertices))
        else:
            assert self.y is not None
            assert self.z is not None
            found = Rectangle(self.y, self.z)
        kind = ClosedWalls if self.kind == "closed_walls" else OpenJet
        return kind(found, self.reflection)

    @model_validator(mode="after")
    def _belongs_together(self) -> BoundaryTable:
        needed = {"rectangle": ("y", "z"), "circle": ("diameter",), "polygon": ("vertices",)}
        allowed = {**needed, "circle": ("diameter", "centre")}
        section = self.section or "rectangle"
        walls = self.kind != "free_air"
        for key in ("section", "y", "z", "diameter", "centre", "vertices", "model_centre"):
            if getattr(self, key) is None:
                continue
            if not walls:
                raise fail(f'{key} is given in kind = "free_air"', "leave it out, or say which kind of walls", key)
            if key not in ("section", "model_centre") and key not in allowed[section]:
                raise fail(
                    f"{key} is given for a {section}", f"a {section} takes {' and '.join(allowed[section])}", key
                )
        # Two walls are enough beside a section's line traverse; whether there is one is for the survey to say.
        two_walls = self.kind == "closed_walls" and section == "rectangle" and not (self.y is None and self.z is None)
        for key in needed[section] if walls and not two_walls else ():
            if getattr(self, key) is None:
                raise fail(
                    f"key {key!r} is missing", f"a {section} of {self.kind} needs {' and '.join(needed[section])}"
                )
        if self.inboard_cut is not None and self.reflection != "y":
            raise fail(
                "inboard_cut is given without a half model",
                'it is the gap to the symmetry plane: add reflection = "y", or leave it out',
                "inboard_cut",
            )
        return self


class WakeTable(Table):
    """``[wake]``: how the wake is bounded.

    Attributes
    ----------
    level : float or None
        Threshold in units of the noise.
    grow : float or None
        Dilation of the mask, m.
    include, exclude : tuple of ndarray, shape (2, 2) or (n, 2)
        Boxes (two corners) and polygons (y, z), m, that are always or never in the wake.
    wandering, wandering_standard_uncertainty : float or None
        Standard deviation along each axis of how far vortices wandered while they were averaged, m; and of that.
    """

    level: PositiveNumber | None = None
    grow: LengthFromZero | None = None
    include: Shapes = ()
    exclude: Shapes = ()
    wandering: LengthFromZero | None = None
    wandering_standard_uncertainty: LengthFromZero | None = None


class SectionTable(Table):
    """``[section]``: a line traverse behind a section."""

    chord: PositiveLength = Field(description='chord = "0.16 m" (c_d is the drag per span over q times it)')
    edge_static: Literal["measured", "stream", "edge_speed"] = Field(
        description='edge_static = "measured", "stream" or "edge_speed" (the static pressure of the Jones formula)'
    )


class BodyTable(Table):
    """``[[body]]``: one surface or aircraft told apart from the others."""

    name: Text = Field(description='name = "tail"')
    region: Shape = Field(description='region = [["-0.3 m", "0.1 m"], ["0.3 m", "0.3 m"]] (a box or a polygon)')
    x: Length | None = None


class LoadingTable(Table):
    """``[loading]``: the trailing edge the wake leaves."""

    trailing_edge: Polyline = Field(description='trailing_edge = [["-0.6 m", "0 m"], ["0.6 m", "0 m"]]')
