"""The plan file: ``[plan]`` in a file of its own, or in a survey file."""

from __future__ import annotations

import hashlib
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from pydantic import Field, ValidationError, model_validator

from wakeledger.core.errors import SurveyError
from wakeledger.run.config.errors import survey_error
from wakeledger.run.config.plan import PlanTable
from wakeledger.run.config.quantities import Label, Table, fail
from wakeledger.run.config.stream import ModelTable, ReferenceTable
from wakeledger.run.config.survey import Survey, parse_survey
from wakeledger.run.config.tables import BoundaryTable, WakeTable
from wakeledger.run.config.text_file import read_toml_text

#: Keys of ``[boundary]`` that change no simulated flow.
_GIVEN = ("solid_blockage", "buoyancy", "support_tare")


class PlanFile(Table):
    """The content of a plan file.

    Attributes
    ----------
    title : str
    reference, model, boundary, wake, plan
        Its tables, as in a survey file.
    """

    title: Label = ""
    reference: ReferenceTable | None = None
    model: ModelTable | None = None
    boundary: BoundaryTable | None = None
    wake: WakeTable = WakeTable()
    plan: PlanTable = Field(description="[plan] (the flow to expect and the ranges to try)")

    @classmethod
    def written(cls, key: str) -> str:
        """How messages name a table of the file."""
        return f"table [{key}]"

    @model_validator(mode="after")
    def _tables_fit_together(self) -> PlanFile:
        if self.plan.ledger is not None:
            for name in ("reference", "model", "boundary", "wake"):
                if name in self.model_fields_set:
                    raise fail(f"[{name}] and [plan] ledger are both given", "the ledger holds it: leave it out", name)
            if self.plan.station is not None:
                raise fail("station and ledger are both given", "the ledger holds it: leave it out", "plan", "station")
            return self
        if self.reference is None:
            raise fail("table [reference] is missing", "add [reference] (the undisturbed stream: speed, density, ...)")
        if self.model is None:
            raise fail("table [model] is missing", 'add [model] with reference_area = "0.180 m^2" and span')
        if self.plan.station is None:
            raise fail("key 'station' is missing", 'add station = "0.9 m" (behind the trailing edge)', "plan")
        return self


@dataclass(frozen=True)
class PlanRequest:
    """A plan file, or the plan of a survey file, ready to be worked on.

    Attributes
    ----------
    title : str
    plan : PlanTable
    tables : mapping of str to dict
        ``[reference]``, ``[model]``, ``[boundary]`` and ``[wake]`` as the file writes them; empty where a ledger holds
        them.
    station : float
        Of the plane, m; NaN where a ledger holds it.
    path : Path
        The file.
    sha256 : str
        Of the file.
    notes : tuple of str
        What of a survey file is not planned with.
    """

    title: str
    plan: PlanTable
    tables: Mapping[str, Mapping[str, Any]]
    station: float
    path: Path
    sha256: str
    notes: tuple[str, ...] = ()

    def resolve(self, name: str) -> Path:
        """Path of a file that the plan names."""
        return self.path.parent / name


def read_plan(path: Path | str) -> PlanRequest:
    """Read and check a plan file, or a survey file with a ``[plan]``.

    Parameters
    ----------
    path : path-like
        TOML.

    Returns
    -------
    PlanRequest

    Raises
    ------
    SurveyError
        For the first thing that is wrong, with file, place and remedy.
    """
    path = Path(path)
    return parse_plan(read_toml_text(path, "plan file"), path)


def parse_plan(text: str, path: Path | str) -> PlanRequest:
    """Check the text of a plan file, or of a survey file with a ``[plan]``.

    Parameters
    ----------
    text : str
        TOML.
    path : path-like
        The file it is from.

    Returns
    -------
    PlanRequest

    Raises
    ------
    SurveyError
        For the first thing that is wrong, with file, place and remedy.
    """
    path = Path(path)
    try:
        raw = tomllib.loads(text.removeprefix("\ufeff"))
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise SurveyError(
            f"this is not TOML: {error}",
            file=path,
            remedy='write key = "value" under a [table] heading, each key once, quantities in quotation marks',
        ) from error
    digest = hashlib.sha256(text.encode()).hexdigest()
    if "plane" in raw:
        return _of_survey(parse_survey(text, path), raw, path, digest)
    try:
        file = PlanFile.model_validate(raw)
    except ValidationError as error:
        raise survey_error(error, raw, path) from error
    if file.plan.ledger is not None:
        return PlanRequest(file.title, file.plan, {}, float("nan"), path, digest)
    assert file.plan.station is not None
    tables, notes = planned_tables(raw)
    if file.boundary is None:
        notes = (*notes, "[boundary]: it is absent, so the survey is planned in free air")
    return _checked(PlanRequest(file.title, file.plan, tables, file.plan.station, path, digest, notes), file.model)


def planned_tables(raw: Mapping[str, Any]) -> tuple[dict[str, dict[str, Any]], tuple[str, ...]]:
    """Tables of a file that a planned survey has too, and what of them is left out.

    Parameters
    ----------
    raw : mapping
        A survey file or a plan file, as TOML gives it.

    Returns
    -------
    (dict of str to dict, tuple of str)
        ``[reference]``, ``[model]``, ``[boundary]`` (free air where there is none) and ``[wake]``; sentences.
    """
    kept = {name: dict(raw[name]) for name in ("reference", "model", "boundary", "wake") if name in raw}
    boundary = kept.setdefault("boundary", {"kind": "free_air"})
    notes = [
        f"[boundary] {key}: planned without it, so that its uncertainty is not in these figures"
        for key in _GIVEN
        if boundary.pop(key, None) is not None
    ]
    if "empty_tunnel" in raw:
        notes.append(
            "[empty_tunnel]: planned without it; the noise of the empty tunnel's survey is not in these figures"
        )
    return kept, tuple(notes)


def _of_survey(survey: Survey, raw: Mapping[str, Any], path: Path, digest: str) -> PlanRequest:
    plan = survey.plan
    if plan is None:
        raise SurveyError(
            "table [plan] is missing",
            file=path,
            remedy="add [plan] with the flow to expect and the ranges to try, or give a plan file",
        )
    refuse = (
        (survey.section is not None, "[section]", "line traverses are not planned: give an area survey"),
        (len(survey.planes) > 1, "[[plane]]", "keep one plane: surveys are planned one by one"),
        (plan.station is not None, "[plan] station", "leave it out: it is that of [plane]"),
    )
    for present, place, remedy in refuse:
        if present:
            raise SurveyError("this is not planned", file=path, place=place, remedy=remedy)
    tables, left_out = planned_tables(raw)
    notes = list(left_out)
    if survey.plane.primary == "hole_pressures" and plan.hole_noise is None:
        notes.append(
            "[plane] primary: planned as a survey of total pressure and flow direction, with noise as in [plan]"
        )
    if survey.uncertainty.source:
        notes.append("[[uncertainty.source]]: planned with the accuracies of [plan] alone")
    if plan.ledger is not None:
        return PlanRequest(survey.title, plan, {}, float("nan"), path, digest, tuple(notes))
    request = PlanRequest(survey.title, plan, tables, survey.plane.station, path, digest, tuple(notes))
    return _checked(request, survey.model)


def _checked(request: PlanRequest, model: ModelTable | None) -> PlanRequest:
    """What a wake needs to be made of."""
    if request.plan.ledger is not None:
        return request
    span = None if model is None else model.span
    if model is None or span is None:
        raise SurveyError(
            "key 'span' is missing", file=request.path, place="[model]", remedy='add span = "1.20 m": the wake needs it'
        )
    core = request.plan.tip_core
    if core is not None and core > span / 4:
        raise SurveyError(
            f"a core of {core:g} m is more than a quarter of the span of {span:g} m",
            file=request.path,
            place="[plan] tip_core",
            remedy="give the core length of one tip vortex",
        )
    chord = model.quarter_chord()
    if not request.station > (0.0 if chord is None else max(chord, 0.0)):
        raise SurveyError(
            f"the plane at {request.station:g} m is not behind the trailing edge",
            file=request.path,
            place="[plan] station",
            remedy="count the station downstream from the trailing edge",
        )
    return request
