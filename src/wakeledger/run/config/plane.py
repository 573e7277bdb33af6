"""``[plane]``: the data file, where its variables stand, and how its axes lie in the project's frame."""

from __future__ import annotations

from collections.abc import Mapping
from functools import cached_property, partial
from types import MappingProxyType
from typing import TYPE_CHECKING, Annotated, Any, Literal

import numpy as np
from pydantic import AfterValidator, Field, PlainValidator, create_model, model_validator

from wakeledger.core.grid import Array
from wakeledger.core.names import VARIABLES
from wakeledger.core.points import Column
from wakeledger.core.units import DIMENSIONS, UnitError, conversion
from wakeledger.run.config.quantities import (
    Angle,
    Length,
    Table,
    Text,
    fail,
    frozen,
    listed,
    parse_quantity,
    parse_shape,
    parse_text,
)

POSITIONS: Mapping[str, str] = MappingProxyType({"x": "m", "y": "m", "z": "m", "r": "m", "theta": "rad"})
HOLES: tuple[str, ...] = tuple(f"p{number}" for number in range(1, 8))
PRESSURES: tuple[str, ...] = ("total_pressure", "static_pressure", *HOLES)
VELOCITIES: tuple[str, ...] = ("u", "v", "w", "speed", "velocity")
#: What each variable may be normalised by, the usual one first.
NORMALISED: Mapping[str, tuple[str, ...]] = MappingProxyType(
    {
        **dict.fromkeys(VELOCITIES, ("speed", "sound_speed")),
        **dict.fromkeys(
            PRESSURES,
            (
                "dynamic_pressure",
                "density_speed_squared",
                "density_sound_speed_squared",
                "static_pressure",
                "total_pressure",
            ),
        ),
        "density": ("density",),
        "temperature": ("temperature", "total_temperature"),
        "total_temperature": ("total_temperature", "temperature"),
        "turbulent_viscosity": ("viscosity",),
    }
)
#: SI unit of a variable that is divided by density.
KINEMATIC: Mapping[str, str] = MappingProxyType(
    {"total_pressure": "m2 s-2", "static_pressure": "m2 s-2", "turbulent_viscosity": "m2 s-1"}
)

#: Every name `[plane.columns]` takes, with its SI unit.
COLUMN_UNITS: Mapping[str, str] = MappingProxyType(
    {
        **POSITIONS,
        **{name: variable.unit for name, variable in VARIABLES.items()},
        "velocity": "m s-1",
        "row": "1",
        "tube": "1",
        "roll": "rad",
    }
)


class ColumnEntry(Table):
    """One entry of ``[plane.columns]`` as written."""

    column: Text = Field(description='column = "..." (the name of the column or array in the file)')
    unit: Text | None = None
    relative_to: Literal["total", "static"] | None = None
    normalised_by: (
        Literal[
            "speed",
            "sound_speed",
            "dynamic_pressure",
            "density_speed_squared",
            "density_sound_speed_squared",
            "static_pressure",
            "total_pressure",
            "density",
            "temperature",
            "total_temperature",
            "viscosity",
        ]
        | None
    ) = None
    kinematic: bool = False


def _refuse_where_senseless(name: str, entry: ColumnEntry) -> None:
    if entry.relative_to and name not in PRESSURES:
        raise fail(f"relative_to is given for {name}", f"only {', '.join(PRESSURES)} take it", "relative_to")
    if entry.kinematic and name not in KINEMATIC:
        raise fail(f"kinematic is given for {name}", f"only {', '.join(KINEMATIC)} take it", "kinematic")
    if entry.kinematic and entry.normalised_by:
        raise fail("kinematic and normalised_by are both given", "a normalised value is not kinematic", "kinematic")
    allowed = NORMALISED.get(name, ())
    if entry.normalised_by and entry.normalised_by not in allowed:
        listed = " or ".join(f'"{by}"' for by in allowed)
        remedy = f"write normalised_by = {listed}" if allowed else "leave it out: this variable is never normalised"
        raise fail(f"{name} is normalised_by {entry.normalised_by!r}", remedy, "normalised_by")


def _to_column(name: str, entry: ColumnEntry, *, difference: bool = False) -> Column:
    """The entry with its conversion to the SI unit of the variable."""
    _refuse_where_senseless(name, entry)
    si_unit = COLUMN_UNITS[name]
    if entry.kinematic:
        si_unit = KINEMATIC[name]
    elif entry.normalised_by:
        si_unit = "1"
    if entry.unit is None and si_unit != "1":
        raise fail(
            "key 'unit' is missing", f'add the unit of {DIMENSIONS[si_unit][0]} (SI: unit = "{si_unit}")', "unit"
        )
    unit = entry.unit or "1"
    try:
        scale, offset = conversion(unit, si_unit, difference=difference)
    except UnitError as error:
        remedy = error.remedy or ""
        if entry.normalised_by:
            remedy = f'a value normalised by the {entry.normalised_by} has unit = "1"'
        elif conversion_fits(unit, "1") and name in NORMALISED:
            remedy = f'{remedy}; for a value divided by the reference one add normalised_by = "{NORMALISED[name][0]}"'
            if len(NORMALISED[name]) > 1:
                remedy = f"{remedy} (or {', '.join(NORMALISED[name][1:])})"
        elif name in KINEMATIC and conversion_fits(unit, KINEMATIC[name]):
            what = "viscosity" if name == "turbulent_viscosity" else "pressure"
            remedy = f"{remedy}; for a {what} divided by density add kinematic = true"
        raise fail(error.found, remedy, "unit") from error
    return Column(
        column=entry.column,
        unit=unit,
        scale=scale,
        offset=offset,
        relative_to=entry.relative_to,
        normalised_by=entry.normalised_by,
        kinematic=entry.kinematic,
    )


def conversion_fits(unit: str, si_unit: str) -> bool:
    """Whether a unit is known and of the dimension of an SI unit."""
    try:
        conversion(unit, si_unit)
    except UnitError:
        return False
    return True


def _std_column(name: str, entry: ColumnEntry) -> Column:
    if entry.relative_to:
        raise fail("relative_to is given for a standard deviation", "leave it out: it is a difference", "relative_to")
    return _to_column(name, entry, difference=True)


def _samples_column(entry: ColumnEntry) -> Column:
    for key in ("relative_to", "normalised_by", "kinematic"):
        if getattr(entry, key):
            raise fail(f"{key} is given for a number of samples", "leave it out", key)
    if entry.unit not in (None, "1"):
        raise fail(f"unit {entry.unit!r} is given for a number of samples", 'leave it out, or write unit = "1"', "unit")
    return Column(column=entry.column, unit="1")


if TYPE_CHECKING:
    StdTable = Table
    ColumnsTable = Table
else:
    StdTable = create_model(
        "StdTable",
        __base__=Table,
        **{
            name: (Annotated[ColumnEntry, AfterValidator(partial(_std_column, name))] | None, None)
            for name in COLUMN_UNITS
            if name not in (*POSITIONS, "row", "tube", "time", "roll")
        },
    )
    ColumnsTable = create_model(
        "ColumnsTable",
        __base__=Table,
        **{
            name: (Annotated[ColumnEntry, AfterValidator(partial(_to_column, name))] | None, None)
            for name in COLUMN_UNITS
        },
        std=(StdTable | None, None),
        samples=(Annotated[ColumnEntry, AfterValidator(_samples_column)] | None, None),
    )


def _given(table: Table | None) -> dict[str, Column]:
    if table is None:
        return {}
    return {name: value for name in type(table).model_fields if isinstance(value := getattr(table, name), Column)}


class Axes(Table):
    """``[plane.axes]``: which way each axis of the file points in the project's frame, and how the probe was turned.

    Attributes
    ----------
    x, y, z : str
        Direction of the file's axis in the project's frame, such as ``"-z"``.
    pitch_offset, yaw_offset, roll_offset : float
        Mounting rotations of the velocity vectors, rad: yaw about z (nose to port), then pitch about y (nose up), then
        roll about x (counter-clockwise from behind), each about the already rotated axes.
    turn_positions : bool
        Whether positions turn with the vectors.
    """

    x: Literal["+x", "-x", "+y", "-y", "+z", "-z"] = "+x"
    y: Literal["+x", "-x", "+y", "-y", "+z", "-z"] = "+y"
    z: Literal["+x", "-x", "+y", "-y", "+z", "-z"] = "+z"
    pitch_offset: Angle = 0.0
    yaw_offset: Angle = 0.0
    roll_offset: Angle = 0.0
    turn_positions: bool = False

    @model_validator(mode="after")
    def _is_permutation(self) -> Axes:
        if len({direction[1] for direction in (self.x, self.y, self.z)}) != 3:
            raise fail(
                f'x = "{self.x}", y = "{self.y}", z = "{self.z}" is no set of axes',
                "each of x, y and z of the project's frame must be named once, with its sign; an axis that is left out "
                "keeps its own direction",
            )
        return self

    def matrix(self) -> Array:
        """Signed permutation P with wind = P @ file.

        Returns
        -------
        ndarray, shape (3, 3)
            Determinant +1, or -1 for a left-handed file.

        Examples
        --------
        >>> Axes(x="+x", y="+z", z="-y").matrix() @ [1.0, 2.0, 3.0]
        array([ 1., -3.,  2.])
        """
        matrix = np.zeros((3, 3))
        for file_axis, direction in enumerate((self.x, self.y, self.z)):
            matrix["xyz".index(direction[1]), file_axis] = 1.0 if direction[0] == "+" else -1.0
        return frozen(matrix)

    def file_axis(self, wind_axis: Literal["x", "y", "z"]) -> str:
        """Name of the file's axis that lies along an axis of the project's frame."""
        return next(name for name in ("x", "y", "z") if getattr(self, name)[1] == wind_axis)


def _files(value: Any) -> str | tuple[str, ...]:
    if not isinstance(value, list):
        return str(parse_text(value))
    names: tuple[str, ...] = listed(parse_text, 'the files as file = ["U_plane.raw", "p_plane.raw"]')(value)
    for name in names:
        if names.count(name) > 1:
            raise fail(f"{name!r} is listed {names.count(name)} times", "list each file once")
    return names[0] if len(names) == 1 else names


def _window(value: Any) -> Array:
    what = 'two opposite corners as [["-5 m", "-2 m"], ["5 m", "2 m"]]'
    box = parse_shape(listed(lambda corner: corner, what, least=2, most=2)(value))
    return frozen(box)


def _time(value: Any) -> float:
    # Steady solvers count iterations where others have seconds, and name their folders alike.
    return parse_quantity(value, "s" if isinstance(value, str) else "1")


class Plane(Table):
    """``[plane]``.

    Attributes
    ----------
    file : str or tuple of str
        The data file or files, relative to the survey file.
    station : float
        Distance of the plane behind the trailing edge, m.
    window : ndarray, shape (2, 2), or None
        Lower port and upper starboard corner of the part that is used, (y, z) in m; None where that is left to the
        program.
    trailing_edge_x : float
        Where the trailing edge stands along the project's x axis in a file of computed flow, m.
    computed : bool or None
        Whether the flow was computed, so that it has no noise; told by the file's mesh where it is left out.
    time : float or None
        Instant of a case folder that holds several, in s or as the solver counts; None for the latest.
    primary : {"total_pressure", "velocity", "hole_pressures"}
        What was measured.
    axes : Axes
        The file's axes in the project's frame.
    """

    file: Annotated[str | tuple[str, ...], PlainValidator(_files)] = Field(
        description='file = "traverse.csv" (the data file, relative to the survey file)'
    )
    station: Length = Field(description='station = "0.90 m" (distance of the plane behind the trailing edge)')
    primary: Literal["total_pressure", "velocity", "hole_pressures"] = Field(
        description='primary = "total_pressure", "velocity" or "hole_pressures" (what was measured)'
    )
    columns_table: ColumnsTable = Field(
        alias="columns",
        description='[plane.columns] (where each variable stands, as u = { column = "U", unit = "m/s" })',
    )
    axes: Axes = Axes()
    window: Annotated[Array, PlainValidator(_window)] | None = None
    trailing_edge_x: Length = 0.0
    computed: bool | None = None
    time: Annotated[float, PlainValidator(_time)] | None = None

    @property
    def files(self) -> tuple[str, ...]:
        """The data files."""
        return (self.file,) if isinstance(self.file, str) else self.file

    @cached_property
    def columns(self) -> Mapping[str, Column]:
        """Where each variable and position stands in the file, by name; without `std` and `samples`."""
        given = _given(self.columns_table)
        given.pop("samples", None)
        return MappingProxyType(given)

    @cached_property
    def std(self) -> Mapping[str, Column]:
        """Where the standard deviation of each variable's samples stands."""
        return MappingProxyType(_given(getattr(self.columns_table, "std")))  # noqa: B009

    @property
    def samples(self) -> Column | None:
        """Where the number of samples of each point stands."""
        column = getattr(self.columns_table, "samples")  # noqa: B009
        return column if isinstance(column, Column) else None

    @property
    def polar(self) -> bool:
        """Whether positions are given as radius and angle."""
        return "r" in self.columns or "theta" in self.columns

    @model_validator(mode="after")
    def _columns_make_sense(self) -> Plane:
        names = set(self.columns)
        if "velocity" in names and names & {"u", "v", "w"}:
            clash = sorted(names & {"u", "v", "w"})[0]
            raise fail(f"velocity and {clash} are both given", "give the vector or its components", "columns", clash)
        if {"pitch", "yaw"} & names and {"v", "w", "velocity"} & names:
            clash = sorted({"pitch", "yaw"} & names)[0]
            raise fail(
                f"{clash} and velocity components give the flow direction twice",
                "keep v and w, or pitch and yaw",
                "columns",
                clash,
            )
        for name in self.std:
            if name not in names:
                raise fail(
                    f"{name} has a standard deviation but no column of its own",
                    f"add {name}, or one of {', '.join(sorted(names))} is meant",
                    "columns",
                    "std",
                    name,
                )
        taken: dict[str, str] = {}
        for name, column in (*self.columns.items(), *((f"std.{name}", column) for name, column in self.std.items())):
            if column.column in taken:
                raise fail(
                    f"column {column.column!r} is given for {taken[column.column]} and for {name}",
                    "name the column of each variable once",
                    "columns",
                    *name.split("."),
                )
            taken[column.column] = name
        return self


def check_positions(plane: Plane, *, coordinates: int) -> None:
    """Refuse a plane whose position columns do not place its points.

    Parameters
    ----------
    plane : Plane
        The plane.
    coordinates : {1, 2}
        Two for an area survey, one for a line traverse (``[section]``).

    Raises
    ------
    PydanticCustomError
        If a position is missing or one too many.
    """
    names = set(plane.columns)
    across = [plane.axes.file_axis("y"), plane.axes.file_axis("z")]
    if not names & set(POSITIONS):
        # A mesh has positions of its own; where the file turns out to be none, its reader asks for them.
        return
    cartesian = [name for name in across if name in names]
    if plane.polar:
        if coordinates == 1:
            raise fail("r and theta are given for a line traverse", f"give {' or '.join(across)}", "columns")
        for name in ("r", "theta"):
            if name not in names:
                raise fail(f"column {name!r} is missing", "a polar traverse needs r and theta", "columns")
        if cartesian:
            raise fail(
                f"{cartesian[0]} is given beside r and theta",
                "give r and theta, or two lengths",
                "columns",
                cartesian[0],
            )
        return
    if coordinates == 1:
        if len(cartesian) != 1:
            found = "y and z are both given" if cartesian else "no position is given"
            raise fail(
                f"{found} for a line traverse",
                f"[section] takes one: {' or '.join(across)}; an area survey has no [section]",
                "columns",
            )
        return
    for name in sorted(set(across) - set(cartesian)):
        raise fail(
            f"position {name!r} is missing",
            f"a plane needs two positions: {' and '.join(sorted(across))} of the file (as [plane.axes] has it), or r "
            "and theta; a line traverse needs [section]",
            "columns",
        )


#: What to do with the total pressures of tubes that tell no direction.
_PITOTS = 'of pitot tubes give p1, with primary = "hole_pressures" and a [probe] without calibration'


def check_primary(plane: Plane, *, edge_static: str | None, calibrated: bool = True) -> None:
    """Refuse a plane without the columns its primary quantity needs.

    Parameters
    ----------
    plane : Plane
        The plane.
    edge_static : str or None
        ``[section] edge_static`` of a line traverse, None for an area survey.
    calibrated : bool
        Whether the probes are calibrated; else each is a tube that reads one pressure.

    Raises
    ------
    PydanticCustomError
        It says which column is missing.
    """
    names = set(plane.columns) | ({"u", "v", "w"} if "velocity" in plane.columns else set())

    def need(found: bool, what: str, remedy: str) -> None:
        if not found:
            raise fail(f'primary = "{plane.primary}" needs {what}', remedy, "columns")

    if plane.primary == "total_pressure":
        need("total_pressure" in names, "total_pressure", "add it, or choose another primary")
        if edge_static is None:
            angles = bool(names & {"pitch", "yaw"})
            for name in ("pitch", "yaw") if angles else ("v", "w"):
                both = "pitch and yaw" if angles else "v and w, or pitch and yaw"
                need(name in names, f"the flow direction, and {name!r} is missing", f"add {both}; {_PITOTS}")
            by_speed = {"u", "v", "w"} <= names or {"speed", "pitch", "yaw"} <= names
            remedy = 'set primary = "velocity": the total pressure is used beside the speed' if by_speed else "add it"
            need("static_pressure" in names, "static_pressure", remedy)
        if edge_static == "measured":
            given = bool(names & {"static_pressure", "speed", "u"})
            need(given, "static_pressure, or else u or speed", "add one of them")
    elif plane.primary == "velocity":
        if edge_static is not None:
            need(bool(names & {"u", "speed"}), "u or speed", "add one of them")
            pressure = edge_static != "measured" or bool(names & {"static_pressure", "total_pressure"})
            need(pressure, "a pressure where edge_static is measured", "add static_pressure or total_pressure")
        elif names & {"pitch", "yaw"}:
            for name in ("speed", "pitch", "yaw"):
                need(name in names, f"u, v and w, or speed, pitch and yaw, and {name!r} is missing", "add it")
        else:
            for name in ("u", "v", "w"):
                need(name in names, f"u, v and w, or speed, pitch and yaw, and {name!r} is missing", "add it")
    else:
        if not calibrated:
            need("p1" in names, "the reading of the tubes, and 'p1' is missing", "add it: what a pitot reads is p1")
        pitot = "add it; a pitot reads p1 alone, and its [probe] has no calibration"
        for name in HOLES[:5] if calibrated else ():
            need(name in names, f"the holes p1 to p5 (or p7), and {name!r} is missing", pitot)


def column_targets(raw: Any) -> dict[str, tuple[str, bool]]:
    """Variables of the planes' columns that an uncertainty may name, read before the tables are checked.

    Parameters
    ----------
    raw : object
        What stands under ``plane`` in the file.

    Returns
    -------
    dict of str to (str, bool)
        By name: SI unit, and whether the column is normalised.
    """
    targets: dict[str, tuple[str, bool]] = {}
    for plane in raw if isinstance(raw, list) else [raw]:
        columns = plane.get("columns") if isinstance(plane, dict) else None
        for name, entry in columns.items() if isinstance(columns, dict) else ():
            if name not in COLUMN_UNITS or name in (*POSITIONS, "row", "tube", "time", "roll"):
                continue
            normalised = isinstance(entry, dict) and entry.get("normalised_by") is not None
            for each in ("u", "v", "w") if name == "velocity" else (name,):
                targets[each] = (COLUMN_UNITS[name], normalised)
    return targets
