"""The survey file as a whole: read, checked, and brought to SI."""

from __future__ import annotations

import hashlib
import re
import tomllib
from pathlib import Path
from typing import Annotated

from pydantic import BeforeValidator, Field, PrivateAttr, ValidationError, model_validator
from pydantic_core import PydanticCustomError

from wakeledger.core.errors import SurveyError
from wakeledger.run.config.errors import survey_error
from wakeledger.run.config.plan import PlanTable
from wakeledger.run.config.plane import Plane, check_positions, check_primary
from wakeledger.run.config.probe_corrections import check_probe_corrections
from wakeledger.run.config.quantities import Label, Table, below, fail, one_or_more_tables, tables
from wakeledger.run.config.rake import check_rake, check_static, is_directed, is_rake
from wakeledger.run.config.stream import ModelTable, ReferenceTable
from wakeledger.run.config.tables import (
    BodyTable,
    BoundaryTable,
    EmptyTunnelTable,
    LoadingTable,
    ProbeTable,
    SectionTable,
    TestTable,
    WakeTable,
)
from wakeledger.run.config.text_file import read_toml_text
from wakeledger.run.config.tunnel import check_walls
from wakeledger.run.config.uncertainty import Comparison, UncertaintyTable, allowed_targets, refuse_twice


class Survey(Table):
    """One survey, completely described: the content of a survey file with every quantity in SI.

    Attributes
    ----------
    title : str
    test, reference, model, empty_tunnel, boundary, wake, section, loading, uncertainty, plan
        The tables of the file under their own names; None where an optional one is absent.
    planes, probe, body, compare
        Tables that may stand more than once, as tuples; `plane` is the first plane.
    """

    title: Label = ""
    test: TestTable = TestTable()
    reference: ReferenceTable = Field(description="[reference] (the undisturbed stream: speed, density, ...)")
    model: ModelTable | None = None
    planes: Annotated[tuple[Plane, ...], BeforeValidator(one_or_more_tables)] = Field(
        alias="plane", description="[plane] (the data file and where its variables stand)"
    )
    probe: Annotated[tuple[ProbeTable, ...], BeforeValidator(one_or_more_tables)] = ()
    empty_tunnel: EmptyTunnelTable | None = None
    boundary: BoundaryTable | None = None
    wake: WakeTable = WakeTable()
    section: SectionTable | None = None
    body: Annotated[tuple[BodyTable, ...], BeforeValidator(tables)] = ()
    loading: LoadingTable | None = None
    uncertainty: UncertaintyTable = UncertaintyTable()
    compare: Annotated[tuple[Comparison, ...], BeforeValidator(tables)] = ()
    plan: PlanTable | None = None
    _path: Path = PrivateAttr(default=Path())
    _text: str = PrivateAttr(default="")

    @classmethod
    def written(cls, key: str) -> str:
        """How messages name a table of the file."""
        return f"table [{key}]"

    @property
    def plane(self) -> Plane:
        """The first plane; the only one of most surveys."""
        return self.planes[0]

    @property
    def directed(self) -> bool:
        """Whether the direction of the flow is measured; pitot tubes alone do not tell it."""
        return self.plane.primary != "hole_pressures" or is_directed(self.probe)

    @property
    def rake(self) -> bool:
        """Whether the points were taken by tubes that have to be put together first."""
        return self.plane.primary == "hole_pressures" and is_rake(self.probe)

    def of_plane(self, index: int) -> Survey:
        """The same survey with one of its planes only, held against nothing."""
        return self.model_copy(update={"planes": (self.planes[index],), "compare": ()})

    @property
    def path(self) -> Path:
        """The survey file."""
        return self._path

    @property
    def text(self) -> str:
        """The file as read."""
        return self._text

    @property
    def sha256(self) -> str:
        """SHA-256 of the file, in hexadecimal digits."""
        return hashlib.sha256(self._text.encode()).hexdigest()

    def resolve(self, name: str) -> Path:
        """Path of a file that the survey names, relative to the survey file."""
        return self._path.parent / name

    @model_validator(mode="after")
    def _tables_fit_together(self) -> Survey:
        if self.model is None and self.section is None:
            raise fail("table [model] is missing", 'add [model] with reference_area = "0.180 m^2"')
        if self.boundary is None and self.section is None:
            raise fail(
                "table [boundary] is missing",
                'add [boundary] with kind = "free_air", "closed_walls" or "open_jet": it is never assumed',
            )
        if self.boundary is not None:
            check_walls(self.boundary, None if self.section is None else self.plane)
        bound_line = None if self.model is None else self.model.quarter_chord()
        for index, plane in enumerate(self.planes):
            place: tuple[str | int, ...] = ("plane", index)
            edge_static = self.section.edge_static if self.section else None
            if plane.primary == "hole_pressures" and self.probe:
                check_rake(plane, self.probe)
                check_probe_corrections(plane, self.probe, empty_tunnel=self.empty_tunnel is not None)
                if self.section is not None and edge_static != "stream":
                    check_static(plane, self.probe)
            try:
                check_positions(plane, coordinates=2 if edge_static is None else 1)
                check_primary(plane, edge_static=edge_static, calibrated=self.directed or not self.probe)
            except PydanticCustomError as error:
                raise below(error, *place) from error
            if plane.primary == "hole_pressures" and not self.probe:
                raise fail(
                    'primary = "hole_pressures" needs a calibrated probe',
                    'add [probe] with calibration = "probe.toml", or without it for a pitot tube',
                    *place,
                    "primary",
                )
            if self.section is None and bound_line is not None and plane.station <= bound_line:
                raise fail(
                    f"the plane at {plane.station:g} m is not behind the quarter-chord line at {bound_line:g} m",
                    "count the station downstream from the trailing edge, or correct [model] quarter_chord_x",
                    *place,
                    "station",
                )
        refuse_twice(self.compare, "compare")
        refuse_twice(self.body, "body")
        half = self.boundary is not None and self.boundary.reflection == "y"
        for index, comparison in enumerate(self.compare):
            if half and comparison.as_measured is None:
                raise fail(
                    "key 'as_measured' is missing for a half model",
                    'add as_measured = "half" (what the balance of the half model read) or "whole" (both halves)',
                    "compare",
                    index,
                )
            if not half and comparison.as_measured is not None:
                raise fail(
                    "as_measured is given without a half model",
                    'leave it out, or add [boundary] reflection = "y"',
                    "compare",
                    index,
                    "as_measured",
                )
        return self

    def unsupported(self) -> list[str]:
        """What the file asks for that this version does not do.

        Returns
        -------
        list of str
            Sentences "place: what"; empty where everything is acted on.
        """
        found: list[str] = []

        def add(present: object, place: str, what: str) -> None:
            if present:
                found.append(f"{place}: {what}")

        add(
            len(self.planes) > 1 and self.section is not None,
            "[[plane]]",
            "line traverses at several stations are not combined; keep one [plane] per survey file",
        )
        add(
            len(self.planes) > 1 and any(plane.primary == "hole_pressures" for plane in self.planes),
            "[[plane]]",
            "raw traverses at several stations are not combined; reduce each by itself",
        )
        for plane in self.planes:
            holes = sorted(name for name in plane.columns if re.fullmatch(r"p\d", name))
            raw = plane.primary == "hole_pressures"
            add(
                raw and self.section is not None and self.directed,
                "[plane] primary",
                "hole pressures of a calibrated probe are not reduced along a line yet; give total and static pressure",
            )
            add(
                holes and not raw,
                f"[plane.columns] {', '.join(holes)}",
                "hole pressures are not used yet; leave them out",
            )
            references = sorted(name for name in plane.columns if name.startswith("reference_"))
            add(
                references and not raw,
                f"[plane.columns] {', '.join(references)}",
                "the reference of each point is not used yet; leave it out, and give the drift as an uncertainty",
            )
            add(
                plane.axes.turn_positions and (raw or self.section is not None),
                "[plane.axes] turn_positions",
                "the places of a raw traverse and of a line are along the axes of the traverse, and are not turned;"
                " leave it out, or turn them in the file",
            )
            add(
                "tube" in plane.columns and not raw,
                "[plane.columns] tube",
                'tubes are only told apart with primary = "hole_pressures"; give each point\'s position',
            )
            add(
                "roll" in plane.columns and not raw,
                "[plane.columns] roll",
                'the roll of each point is only used with primary = "hole_pressures"; turn the components beforehand',
            )
        holes_measured = any(plane.primary == "hole_pressures" for plane in self.planes)
        add(
            self.probe and not holes_measured,
            "[probe]",
            'a probe is only used with primary = "hole_pressures"; leave it out',
        )
        add(
            self.empty_tunnel and self.section is not None,
            "[empty_tunnel]",
            "the empty tunnel is not taken out of a line traverse; leave it out",
        )
        add(
            self.empty_tunnel and len(self.planes) > 1,
            "[empty_tunnel]",
            "the empty tunnel is surveyed at one station, and there are several planes; reduce each by itself",
        )
        add(self.body, "[[body]]", "bodies are not told apart yet; leave it out")
        add(self.loading, "[loading]", "the least induced drag of a trailing edge is not computed yet; leave it out")
        for source in self.uncertainty.source:
            later = [name for name in source.applies_to if name.split(".")[0] in ("probe", "calibration")]
            add(
                later and not holes_measured,
                f"[[uncertainty.source]] ({source.name}) applies_to",
                f'{", ".join(later)} is only perturbed with primary = "hole_pressures"; give that of what was measured',
            )
        return found

    def notes(self) -> list[str]:
        """What is lost because an optional key is absent, and what is kept without being used.

        Returns
        -------
        list of str
            Sentences "place: what".
        """
        found: list[str] = []
        if self.model is None:
            found.append("[model]: it is absent, so forces have no coefficients")
        else:
            if self.model.span is None:
                found.append("[model] span: it is absent, so span efficiency and moment coefficients are unknown")
            if self.model.quarter_chord() is None:
                found.append(
                    "[model] mean_chord: it is absent, and quarter_chord_x and span too, so the bound vortex's "
                    "effect on the cross-checks is not predicted"
                )
        idle = [key for key in ("weight", "load_factor") if getattr(self.reference, key) is not None]
        found.extend(f"[reference] {key}: it is kept in the archive, and no row uses it" for key in idle)
        for plane in self.planes:
            idle_here = (
                ("reynolds", "turbulent") if plane.primary == "hole_pressures" else ("reynolds", "turbulent", "time")
            )
            kept = [name for name in plane.columns if name.startswith(idle_here)]
            if kept:
                found.append(f"[plane.columns] {', '.join(kept)}: kept in the archive, and no row uses them")
        if self.plan is not None:
            found.append("[plan]: kept in the archive; only the planning of surveys uses it")
        # With hole pressures the calibration and the corrections have sources of their own; their notes say what lacks.
        if not self.uncertainty.source and self.plane.primary != "hole_pressures":
            found.append("[[uncertainty.source]]: there is none, so the uncertainty of the measurement is unknown")
        return found


def parse_survey(text: str, path: Path | str) -> Survey:
    """Check the text of a survey file.

    Parameters
    ----------
    text : str
        TOML, as read from the file or kept in an archive.
    path : path-like
        The file it is from; other paths are relative to its folder.

    Returns
    -------
    Survey

    Raises
    ------
    SurveyError
        For the first thing that is wrong, with file, place and remedy.
    """
    try:
        raw = tomllib.loads(text.removeprefix("\ufeff"))
    except tomllib.TOMLDecodeError as error:
        raise _syntax_error(str(error), text, path) from error
    except RecursionError as error:
        raise SurveyError(
            "it is nested too deeply", file=path, remedy="write tables and lists as documented"
        ) from error
    try:
        survey = Survey.model_validate(raw, context={"targets": allowed_targets(raw)})
    except ValidationError as error:
        raise survey_error(error, raw, path) from error
    survey._path = Path(path)
    survey._text = text
    return survey


def _syntax_error(message: str, text: str, path: Path | str) -> SurveyError:
    where = re.search(r"\(at line (\d+), column (\d+)\)", message)
    found = re.sub(r"\s*\(at .*\)", "", message)
    if where is None:
        return SurveyError(
            f"the file ends too early: {found}", file=path, place=f"line {len(text.splitlines())}", remedy="complete it"
        )
    number = int(where.group(1))
    lines = text.splitlines()
    line = lines[number - 1].strip() if number <= len(lines) else ""
    return SurveyError(
        f"this is not TOML: {found}" + (f", in {line[:60]!r}" if line else ""),
        file=path,
        place=f"line {number}, column {where.group(2)}",
        remedy='write key = "value" under a [table] heading, each key once, quantities in quotation marks',
    )


def read_survey(path: Path | str) -> Survey:
    """Read and check a survey file.

    Parameters
    ----------
    path : path-like
        The survey file, TOML.

    Returns
    -------
    Survey
        With every quantity in SI.

    Raises
    ------
    SurveyError
        For the first thing that is wrong, with file, place and remedy.
    """
    path = Path(path)
    return parse_survey(read_toml_text(path, "survey file"), path)
