"""A survey ready to be reduced: from its file and data, or from an archive that holds both."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import DataError, SurveyError
from wakeledger.core.grid import UniformGrid
from wakeledger.core.names import VARIABLES
from wakeledger.core.points import Points
from wakeledger.core.rotation import rotation_matrix
from wakeledger.intake.probe.record import Calibration
from wakeledger.run.config import Survey, parse_survey, read_survey
from wakeledger.run.config.plane import Plane
from wakeledger.run.config.tunnel import TunnelInput
from wakeledger.run.traverse.tubes import RakePoints, assemble
from wakeledger.run.turned_positions import turned

if TYPE_CHECKING:
    import xarray as xr

    from wakeledger.ledger.ledger import Ledger

#: What other surveys stand for, and where the survey file names them.
EMPTY_TUNNEL, SUPPORT_TARE = "empty_tunnel", "support_tare"
_PLACES = {EMPTY_TUNNEL: "[empty_tunnel] survey", SUPPORT_TARE: "[boundary] support_tare survey"}
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
        The points as read, where `points` are those of a rake's tubes or turned; None where `points` are as read.
    lean : float
        Largest distance of a point from the station where the positions are turned, m.
    companions : mapping of str to SurveyInput
        Surveys that this one names: the tunnel without the model ("empty_tunnel"), the support alone ("support_tare").
    tare : TunnelInput or None
        What the survey of the support came to, N, of both halves of a half model.
    core : (UniformGrid, ndarray of bool) or None
        The wake region before it is grown, where it is common to several planes.
    stations : tuple of SurveyInput
        The survey of each plane by itself, where there are several; `points` are then those of the first.
    """

    survey: Survey
    points: Points
    inputs: Mapping[str, str]
    calibrations: Mapping[str, Calibration] = field(default_factory=dict)
    rake: RakePoints | None = None
    read: Points | None = None
    lean: float = 0.0
    companions: Mapping[str, SurveyInput] = field(default_factory=dict)
    tare: TunnelInput | None = None
    core: tuple[UniformGrid, NDArray[np.bool_]] | None = None
    stations: tuple[SurveyInput, ...] = ()

    @property
    def empty_tunnel(self) -> SurveyInput | None:
        """The survey of the tunnel without the model."""
        return self.companions.get(EMPTY_TUNNEL)

    @property
    def computed(self) -> bool:
        """Whether the flow was computed: as the survey file says, else by its coming from a mesh or out of a volume."""
        said = self.survey.plane.computed
        if said is not None:
            return said
        return self.points.triangles is not None or self.points.areas is not None or bool(self.points.how)

    def notes(self) -> list[str]:
        """What the survey file leaves open, as far as it matters: a computed flow needs no source of uncertainty."""
        said = self.survey.notes()
        if self.lean > 0:
            said.append(
                "[plane.axes] turn_positions: the plane of the points leans, and they lie up to"
                f" {1e3 * self.lean:.2g} mm from the station, which is taken for all of them"
            )
        return [note for note in said if not (self.computed and note.startswith("[[uncertainty.source]]"))]

    @property
    def given(self) -> dict[str, TunnelInput]:
        """What is known of the tunnel beforehand and acts on the rows, by input."""
        boundary = self.survey.boundary
        if boundary is None:
            return {}
        found = boundary.chain_inputs()
        if self.tare is not None:
            found["boundary.support_tare"] = self.tare
        return found

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
        if ledger.repeats is not None:
            raise DataError(
                "this archive combines several surveys and holds none of their points",
                file=path,
                remedy="reduce the archive of each run, and combine them again",
            )
        kept = _kept(ledger.survey_text, ledger.raw, ledger, path)
        planes = len(kept.survey.planes)
        if planes == 1:
            return kept
        if len(ledger.stations) != planes:
            raise DataError(
                f"{len(ledger.stations)} planes are kept inside, the survey file kept beside them names {planes}",
                file=path,
                remedy="take the file from its backup, or reduce the survey again",
            )
        return _with_stations(kept, [station.raw for station in ledger.stations])
    return load_survey(read_survey(path))


def _kept(text: str, points: Points, ledger: Ledger, path: Path) -> SurveyInput:
    """A survey kept in an archive, with those that it names."""
    survey = _kept_survey(text, points, path)
    calibrations = _kept_calibrations(survey, ledger.calibrations, path)
    companions = {}
    for name in companion_files(survey):
        if name not in ledger.companions:
            raise DataError(
                f"the survey of {_PLACES[name]} is not kept inside",
                file=path,
                remedy="take the file from its backup, or reduce the survey again",
            )
        kept = ledger.companions[name]
        companions[name] = _kept(kept.survey_text, kept.raw, ledger, path)
    return _assembled(SurveyInput(survey, points, ledger.inputs, calibrations, companions=companions))


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
    inputs = {survey.path.name: survey.sha256}
    planes = []
    for plane in survey.planes:
        points, digests = _read_plane(survey, plane)
        planes.append(points)
        inputs |= digests
    calibrations = {}
    for name in _calibrations_named(survey):
        from wakeledger.run.traverse.calibrate import load_calibration

        calibration = calibrations[name] = load_calibration(survey.resolve(name))
        inputs[name] = hashlib.sha256(survey.resolve(name).read_bytes()).hexdigest()
        inputs |= {own: digest for own, digest in calibration.inputs.items() if own not in inputs}
    companions = {}
    for name, file in companion_files(survey).items():
        companion = read_survey(file)
        check_companion(companion, name)
        companions[name] = load_survey(companion)
        inputs |= {own: digest for own, digest in companions[name].inputs.items() if own not in inputs}
    found = _assembled(SurveyInput(survey, planes[0], inputs, calibrations, companions=companions))
    return found if len(planes) == 1 else _with_stations(found, planes)


def _read_plane(survey: Survey, plane: Plane) -> tuple[Points, dict[str, str]]:
    """The points of one plane, and the SHA-256 of its files by name."""
    from wakeledger.intake.readers import digest_of, read_points

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
    return points, {name: digest_of(file) for name, file in zip(plane.files, files, strict=True)}


def _with_stations(survey: SurveyInput, planes: Sequence[Points]) -> SurveyInput:
    """A survey of several planes with that of each plane by itself."""
    stations = tuple(
        _assembled(replace(survey, survey=survey.survey.of_plane(index), points=points, read=None))
        for index, points in enumerate(planes)
    )
    return replace(survey, stations=stations)


def companion_files(survey: Survey) -> dict[str, Path]:
    """Survey files that a survey names, by what they stand for.

    Raises
    ------
    SurveyError
        If a survey names itself.
    """
    named: dict[str, str] = {}
    if survey.empty_tunnel is not None:
        named[EMPTY_TUNNEL] = survey.empty_tunnel.survey
    tare = None if survey.boundary is None else survey.boundary.support_tare
    if tare is not None and tare.survey is not None:
        named[SUPPORT_TARE] = tare.survey
    found = {}
    for name, file in named.items():
        path = survey.resolve(file)
        if path.resolve() == survey.path.resolve():
            raise SurveyError(
                "it is this survey itself",
                file=survey.path,
                place=_PLACES[name],
                remedy="name the survey file of the tunnel without the model",
            )
        found[name] = path
    return found


def check_companion(companion: Survey, name: str) -> None:
    """Refuse a survey that cannot stand for the tunnel without the model, or for its support.

    Raises
    ------
    SurveyError
        If it is a line traverse, or names such surveys itself.
    """
    own = companion_files(companion)
    if companion.section is None and not own:
        return
    what = "a line traverse" if companion.section is not None else "a survey that names another one"
    raise SurveyError(
        f"{_PLACES[name]} is {what}",
        file=companion.path,
        place="[section]" if companion.section is not None else _PLACES[next(iter(own))],
        remedy="survey the same plane without the model, and nothing taken out of it",
    )


def _assembled(survey: SurveyInput) -> SurveyInput:
    """The same with the points of a rake where its tubes were, and positions turned where that is asked for."""
    axes = survey.survey.plane.axes
    if axes.turn_positions:
        points, lean = turned(survey.points, rotation_matrix(axes.pitch_offset, axes.yaw_offset, axes.roll_offset))
        return replace(survey, points=points, read=survey.points, lean=lean)
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
