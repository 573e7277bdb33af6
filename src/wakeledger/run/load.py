"""A survey ready to be reduced: from its file and data, or from an archive that holds both."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from wakeledger.core.errors import DataError, SurveyError
from wakeledger.core.names import VARIABLES
from wakeledger.core.points import Points
from wakeledger.intake.probe.record import Calibration
from wakeledger.run.config import Survey, parse_survey, read_survey
from wakeledger.run.tubes import RakePoints, assemble

if TYPE_CHECKING:
    import xarray as xr

_NETCDF = (b"\x89HDF\r\n\x1a\n", b"CDF")


@dataclass(frozen=True)
class SurveyInput:
    """A survey and its points.

    Attributes
    ----------
    survey : Survey
        The survey file.
    points : Points
        The points of its plane as read; those of a rake where its tubes were, static tubes left out.
    inputs : mapping of str to str
        SHA-256 of each input file by name.
    calibrations : mapping of str to Calibration
        Calibrated probes by the name under which the survey file gives them.
    rake : RakePoints or None
        Which tube of a rake took which point.
    read : Points or None
        The points of a rake as read; None where `points` are.
    empty_tunnel : SurveyInput or None
        The survey of the tunnel without the model.
    """

    survey: Survey
    points: Points
    inputs: Mapping[str, str]
    calibrations: Mapping[str, Calibration] = field(default_factory=dict)
    rake: RakePoints | None = None
    read: Points | None = None
    empty_tunnel: SurveyInput | None = None

    @property
    def as_read(self) -> Points:
        """The points of the file, to be kept."""
        return self.points if self.read is None else self.read


def load(path: str | Path) -> SurveyInput:
    """Read a survey file with its data, or take both out of an archive.

    Parameters
    ----------
    path : path-like
        A survey file (TOML) or a ledger (netCDF), told apart by content.

    Returns
    -------
    SurveyInput

    Raises
    ------
    InputError
        If anything about the survey file, the data or the archive is wrong.
    """
    from wakeledger.intake.readers.recognise import is_stream

    path = Path(path)
    if is_stream(path):
        raise SurveyError(
            "this is no regular file", file=path, remedy="write the survey to a file: its data are found beside it"
        )
    if _is_netcdf(path):
        from wakeledger.ledger.archive import open_archive

        ledger = open_archive(path)
        survey = _kept_survey(ledger.survey_text, ledger.raw, path)
        calibrations = _kept_calibrations(survey, ledger.calibrations, path)
        return _assembled(SurveyInput(survey, ledger.raw, ledger.inputs, calibrations))
    return load_survey(read_survey(path))


def _kept_survey(text: object, points: Points, path: Path) -> Survey:
    """The survey file kept in an archive, which must be whole and fit the points kept beside it."""
    remedy = "take the file from its backup, or reduce the survey again"
    try:
        survey = parse_survey(str(text), path)
    except SurveyError as error:
        found = f"{error.place}: {error.found}" if error.place else error.found
        raise DataError(f"the survey file kept inside is damaged ({found})", file=path, remedy=remedy) from error
    named = survey.plane.columns
    wanted = {"u", "v", "w"} if "velocity" in named else set()
    wanted |= {name for name in named if name in VARIABLES}
    missing = sorted(wanted - set(points.channels))
    if missing:
        raise DataError(
            f"the points kept inside have no {', '.join(missing)}, which the survey file kept beside them names",
            file=path,
            remedy=remedy,
        )
    if not (np.isfinite(points.y).all() and np.isfinite(points.z).all() and np.isfinite(points.axes).all()):
        raise DataError("the positions of the points kept inside are damaged", file=path, remedy=remedy)
    return survey


def _kept_calibrations(survey: Survey, kept: Mapping[str, xr.Dataset], path: Path) -> dict[str, Calibration]:
    """The calibrations kept in an archive, which must be those that the survey file kept beside them names."""
    from wakeledger.intake.probe.stored import from_dataset

    remedy = "take the file from its backup, or reduce the survey again"
    missing = sorted(set(_calibrations_named(survey)) - set(kept))
    if missing:
        raise DataError(f"the calibration {missing[0]} is not kept inside", file=path, remedy=remedy)
    try:
        return {name: from_dataset(dataset) for name, dataset in kept.items()}
    except (KeyError, ValueError) as error:
        raise DataError(f"a calibration kept inside is damaged ({error})", file=path, remedy=remedy) from error


def _calibrations_named(survey: Survey) -> tuple[str, ...]:
    """Names of the calibration files of a survey, each once."""
    return tuple(dict.fromkeys(probe.calibration for probe in survey.probe if probe.calibration is not None))


def load_survey(survey: Survey) -> SurveyInput:
    """Read the data of a survey file.

    Parameters
    ----------
    survey : Survey
        The survey file.

    Returns
    -------
    SurveyInput

    Raises
    ------
    InputError
        If the survey asks for what this version does not do, or its data are wrong.
    """
    refuse_unsupported(survey)
    from wakeledger.intake.readers import digest_of, read_points

    plane = survey.plane
    files = [survey.resolve(name) for name in plane.files]
    points = read_points(
        files,
        plane.columns,
        axes=plane.axes.matrix(),
        std=plane.std,
        samples=plane.samples,
        coordinates=2 if survey.section is None else 1,
        station=plane.station,
        trailing_edge_x=plane.trailing_edge_x,
        time=plane.time,
    )
    inputs = {survey.path.name: survey.sha256}
    inputs |= {name: digest_of(file) for name, file in zip(plane.files, files, strict=True)}
    calibrations = {}
    for name in _calibrations_named(survey):
        from wakeledger.run.calibrate import load_calibration

        calibration = calibrations[name] = load_calibration(survey.resolve(name))
        inputs[name] = hashlib.sha256(survey.resolve(name).read_bytes()).hexdigest()
        inputs |= {own: digest for own, digest in calibration.inputs.items() if own not in inputs}
    empty = _empty_tunnel(survey)
    if empty is not None:
        inputs |= {name: digest for name, digest in empty.inputs.items() if name not in inputs}
    return _assembled(SurveyInput(survey, points, inputs, calibrations, empty_tunnel=empty))


def _empty_tunnel(survey: Survey) -> SurveyInput | None:
    """The survey of the tunnel without the model that a survey names."""
    if survey.empty_tunnel is None:
        return None
    file = survey.resolve(survey.empty_tunnel.survey)
    if file.resolve() == survey.path.resolve():
        raise SurveyError(
            "it is this survey itself",
            file=survey.path,
            place="[empty_tunnel] survey",
            remedy="name the survey file of the tunnel without the model",
        )
    empty = read_survey(file)
    check_empty_tunnel(empty)
    return load_survey(empty)


def check_empty_tunnel(empty: Survey) -> None:
    """Refuse a survey that cannot stand for the tunnel without the model.

    Raises
    ------
    SurveyError
        If it is a line traverse, or subtracts an empty tunnel itself.
    """
    if empty.section is not None or empty.empty_tunnel is not None:
        what = "a line traverse" if empty.section is not None else "a survey that names an empty tunnel itself"
        raise SurveyError(
            f"the survey of the empty tunnel is {what}",
            file=empty.path,
            place="[section]" if empty.section is not None else "[empty_tunnel]",
            remedy="survey the same plane without the model",
        )


def _assembled(survey: SurveyInput) -> SurveyInput:
    """The same with the points of a rake where its tubes were."""
    if not survey.survey.rake:
        return survey
    points, rake = assemble(survey.survey, survey.points)
    return replace(survey, points=points, rake=rake, read=survey.points)


def refuse_unsupported(survey: Survey) -> None:
    """Say in one line what a survey asks for that this version does not do.

    Raises
    ------
    SurveyError
        Naming the first such place.
    """
    unsupported = survey.unsupported()
    if unsupported:
        place, what = unsupported[0].split(": ", 1)
        raise SurveyError(what, file=survey.path, place=place)


def _is_netcdf(path: Path) -> bool:
    try:
        with path.open("rb") as file:
            head = file.read(8)
    except OSError:
        return False
    if path.suffix == ".nc" and not head:
        raise DataError("the archive is empty", file=path, remedy="reduce the survey again")
    found = head.startswith(_NETCDF)
    if path.suffix == ".nc" and not found:
        raise DataError(
            "the file is not netCDF, or is damaged", file=path, remedy="give a survey file, or a finished ledger.nc"
        )
    return found
