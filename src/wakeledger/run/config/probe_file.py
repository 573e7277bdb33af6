"""The probe file: what ``wakeledger calibrate`` takes, as strict as a survey file."""

from __future__ import annotations

import hashlib
import tomllib
from collections.abc import Mapping
from functools import partial
from pathlib import Path
from types import MappingProxyType
from typing import TYPE_CHECKING, Annotated, Literal

from pydantic import AfterValidator, Field, PrivateAttr, ValidationError, create_model, model_validator

from wakeledger.core.errors import SurveyError
from wakeledger.core.points import Column
from wakeledger.core.units import DIMENSIONS, UnitError, conversion
from wakeledger.run.config.errors import survey_error
from wakeledger.run.config.quantities import Label, Table, Text, fail
from wakeledger.run.config.text_file import read_toml_text

#: Every name ``[data.columns]`` takes, with its SI unit.
CALIBRATION_UNITS: Mapping[str, str] = MappingProxyType(
    {
        "pitch": "rad",
        "yaw": "rad",
        "cone": "rad",
        "roll": "rad",
        **{f"p{number}": "Pa" for number in range(1, 8)},
        "total_pressure": "Pa",
        "static_pressure": "Pa",
        "mach": "1",
        "reynolds": "1",
    }
)
_HEADING = "[data] columns."


class DataColumn(Table):
    """One entry of ``[data.columns]`` as written."""

    column: Text = Field(description='column = "..." (the name of the column or array in the file)')
    unit: Text | None = None


def _to_column(name: str, entry: DataColumn) -> Column:
    si_unit = CALIBRATION_UNITS[name]
    if entry.unit is None and si_unit != "1":
        what = DIMENSIONS[si_unit][0]
        raise fail("key 'unit' is missing", f'add the unit of {what} (SI: unit = "{si_unit}")', "unit")
    unit = entry.unit or "1"
    try:
        scale, offset = conversion(unit, si_unit)
    except UnitError as error:
        raise fail(error.found, error.remedy or "", "unit") from error
    return Column(column=entry.column, unit=unit, scale=scale, offset=offset)


if TYPE_CHECKING:
    ColumnsTable = Table
else:
    ColumnsTable = create_model(
        "ColumnsTable",
        __base__=Table,
        **{
            name: (Annotated[DataColumn, AfterValidator(partial(_to_column, name))] | None, None)
            for name in CALIBRATION_UNITS
        },
    )


class DataTable(Table):
    """``[data]``: the calibration table and where its columns stand."""

    file: Text = Field(description='file = "calibration.csv" (the table, relative to the probe file)')
    columns_table: ColumnsTable = Field(
        alias="columns",
        description='[data.columns] (where each variable stands, as p1 = { column = "P1", unit = "Pa" })',
    )


class ProbeFile(Table):
    """The content of a probe file.

    Attributes
    ----------
    title : str
    holes : {5, 7}
    data : DataTable
    """

    title: Label = ""
    holes: Literal[5, 7] = Field(description="holes = 5 or holes = 7")
    data: DataTable = Field(description="[data] (the calibration table and its columns)")
    _path: Path = PrivateAttr(default=Path())
    _text: str = PrivateAttr(default="")

    @classmethod
    def written(cls, key: str) -> str:
        """How messages name a key of the file."""
        return f"table [{key}]" if key == "data" else f"key {key!r}"

    @property
    def path(self) -> Path:
        """The probe file."""
        return self._path

    @property
    def text(self) -> str:
        """The file as read."""
        return self._text

    @property
    def sha256(self) -> str:
        """SHA-256 of the file, in hexadecimal digits."""
        return hashlib.sha256(self._text.encode()).hexdigest()

    @property
    def file(self) -> Path:
        """The calibration table."""
        return self._path.parent / self.data.file

    @property
    def columns(self) -> Mapping[str, Column]:
        """Where each variable stands in the table, by name."""
        entries = {name: getattr(self.data.columns_table, name) for name in CALIBRATION_UNITS}
        return MappingProxyType({name: entry for name, entry in entries.items() if entry is not None})

    @model_validator(mode="after")
    def _columns_are_complete(self) -> ProbeFile:
        names = set(self.columns)
        given = sorted(names & {"pitch", "yaw", "cone", "roll"})
        if set(given) not in ({"pitch", "yaw"}, {"cone", "roll"}):
            found = f"the flow direction is given by {', '.join(given)}" if given else "the flow direction is missing"
            raise fail(found, "give pitch and yaw, or cone and roll", "data", "columns")
        needed = [*(f"p{number}" for number in range(1, self.holes + 1)), "total_pressure", "static_pressure"]
        for name in needed:
            if name not in names:
                remedy = f"a {'five' if self.holes == 5 else 'seven'}-hole probe needs {', '.join(needed)}"
                raise fail(f"column {name!r} is missing", remedy, "data", "columns")
        for name in ("p6", "p7"):
            if self.holes == 5 and name in names:
                raise fail(f"{name} is given for a probe with five holes", "leave it out, or write holes = 7", "holes")
        if {"mach", "reynolds"} <= names:
            raise fail("mach and reynolds are both given", "give the one the sets differ in", "data", "columns")
        taken: dict[str, str] = {}
        for name, column in self.columns.items():
            if column.column in taken:
                raise fail(
                    f"column {column.column!r} is given for {taken[column.column]} and for {name}",
                    "name the column of each variable once",
                    "data",
                    "columns",
                    name,
                )
            taken[column.column] = name
        return self


def parse_probe_file(text: str, path: Path | str = "probe.toml") -> ProbeFile:
    """Check the text of a probe file.

    Parameters
    ----------
    text : str
        TOML, as read from the file or kept in a calibration.
    path : path-like, optional
        The file it is from; the table's path is relative to its folder.

    Returns
    -------
    ProbeFile

    Raises
    ------
    SurveyError
        For the first thing that is wrong, with file, place and remedy.
    """
    try:
        raw = tomllib.loads(text.removeprefix("\ufeff"))
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise SurveyError(
            f"this is not TOML: {error}",
            file=path,
            remedy='write key = "value" under a [table] heading, each key once, quantities in quotation marks',
        ) from error
    if "primary" in raw.get("plane", {}) if isinstance(raw.get("plane"), dict) else False:
        raise SurveyError("this is a survey file", file=path, remedy="give the probe file, with [data] and holes")
    try:
        probe = ProbeFile.model_validate(raw)
    except ValidationError as error:
        found = survey_error(error, raw, path)
        place = found.place
        if place and place.startswith(_HEADING):
            place = f"[data.columns] {place.removeprefix(_HEADING)}"
        elif place == _HEADING.rstrip("."):
            place = "[data.columns]"
        raise SurveyError(found.found, file=path, place=place, remedy=found.remedy) from error
    probe._path = Path(path)
    probe._text = text
    return probe


def read_probe_file(path: Path | str) -> ProbeFile:
    """Read and check a probe file.

    Parameters
    ----------
    path : path-like
        The probe file, TOML.

    Returns
    -------
    ProbeFile

    Raises
    ------
    SurveyError
        For the first thing that is wrong, with file, place and remedy.
    """
    path = Path(path)
    return parse_probe_file(read_toml_text(path, "probe file"), path)
