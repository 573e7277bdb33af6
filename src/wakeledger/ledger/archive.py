"""The archive: one netCDF-4 file (CF-1.11) that holds a whole ledger and everything needed to reduce it again.

The root holds the rows, their covariance and the reference state; the groups hold the plane, the raw points and the
other tables; the survey file's text and the provenance are attributes of the root.
"""

from __future__ import annotations

import dataclasses
import json
import os
import shutil
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from wakeledger.core.errors import DataError
from wakeledger.ledger import encoding
from wakeledger.ledger.closure import Cause, Closure
from wakeledger.ledger.contributions import Contributions
from wakeledger.ledger.ledger import Combined, KeptSurvey, Ledger
from wakeledger.ledger.propagation import dataset_propagation, propagation_dataset
from wakeledger.ledger.rows import BudgetLine, Check, Comparison, CrossCheck, Diagnostic, Row, TunnelFigure
from wakeledger.ledger.tabular import rows_dataset
from wakeledger.ledger.units import scalar

if TYPE_CHECKING:
    import xarray as xr

#: Version of the archive's layout; a file with a higher one is refused.
ARCHIVE_FORMAT = 1

#: A device with fewer bytes than this to spare counts as full once writing to it has failed.
_NO_SPACE = 100_000

#: Name of the root attribute that holds the version, and by which an archive is recognised.
FORMAT_ATTRIBUTE = "wakeledger_format"

#: Groups that hold a table of records: field of `Ledger`, record, dimension.
_RECORDS: tuple[tuple[str, type, str], ...] = (
    ("estimates", CrossCheck, "estimate"),
    ("comparisons", Comparison, "comparison"),
    ("budget", BudgetLine, "line"),
    ("checks", Check, "check"),
)

#: Group of what the walls of a tunnel do, absent in free air, and groups of other surveys that a ledger rests on.
_TUNNEL, _COMPANIONS = "tunnel", ("empty_tunnel", "support_tare")

#: Groups that hold a dataset and may be absent.
_TABLES = ("wake_line", "vortices", "span", "repeats")

#: Group of what each error does to the rows.
_CONTRIBUTIONS = "contributions"

#: Group of how each row's uncertainty came about.
_PROPAGATION = "propagation"

#: Groups of the ledgers of several planes, numbered from 1, and the attribute that says how they were combined.
_STATION, _COMBINED = "station_", "combined"

#: Group of other forms of the drag of a computed plane.
_DIAGNOSTICS = "diagnostics"

#: Attribute that holds what surface forces and wake differ by.
_CLOSURES = "closures"

#: Group of the first probe calibration; further ones are numbered. Its attribute says which file it comes from.
_CALIBRATION, _CALIBRATION_NAME = "calibration", "survey_name"

#: Root attributes that hold a JSON object of strings.
_MAPPINGS = ("test", "inputs", "provenance")


def write_archive(ledger: Ledger, path: str | os.PathLike[str]) -> None:
    """Write a ledger to its archive, whole or not at all.

    Parameters
    ----------
    ledger : Ledger
        The ledger.
    path : path
        The file; an existing one is replaced in one step when the new one is complete.

    Raises
    ------
    DataError
        If the file cannot be written there.
    """
    target = Path(path)
    groups = _groups(ledger)
    part = target.with_name(f".{target.name}.{os.getpid()}.part")
    try:
        mode = "w"
        for group, dataset in groups.items():
            encoding.write_group(dataset, part, group=group or None, mode=mode)
            mode = "a"
        part.replace(target)
    except (OSError, RuntimeError) as error:
        # The netCDF library reports a full disk as an error of its own.
        if isinstance(error, RuntimeError) and not str(error).startswith("NetCDF:"):
            raise
        raise _unwritable(target, error) from error
    finally:
        part.unlink(missing_ok=True)


def open_archive(path: str | os.PathLike[str]) -> Ledger:
    """Read a ledger from its archive.

    Parameters
    ----------
    path : path
        The file.

    Returns
    -------
    Ledger
        Equal to the one that was written.

    Raises
    ------
    DataError
        If the file is missing, not netCDF, not an archive of this program, of a newer layout, or damaged.
    """
    source = Path(path)
    try:
        if not source.is_file():
            found = "is a directory" if source.is_dir() else "does not exist"
            raise DataError(f"the archive {found}", file=source, remedy="give the ledger.nc of a finished reduction")
        root = encoding.read_group(source)
    except DataError:
        raise
    except PermissionError as error:
        raise DataError("the archive cannot be read", file=source, remedy="check its permissions") from error
    except Exception as error:
        raise DataError(
            "the file is not netCDF, or is damaged", file=source, remedy="give the ledger.nc of a finished reduction"
        ) from error
    if FORMAT_ATTRIBUTE not in root.attrs:
        raise DataError(
            "the netCDF file is not a ledger", file=source, remedy="give the ledger.nc of a finished reduction"
        )
    version = root.attrs[FORMAT_ATTRIBUTE]
    if isinstance(version, int | np.integer) and version > ARCHIVE_FORMAT:
        raise DataError(
            f"the archive has format {version}, this program reads up to {ARCHIVE_FORMAT}",
            file=source,
            remedy="open it with a newer version of this program",
        )
    try:
        return _ledger(root, source)
    except Exception as error:
        raise DataError(
            f"the archive is damaged or incomplete ({type(error).__name__}: {error})",
            file=source,
            remedy="take the file from its backup, or reduce the survey again",
        ) from error


def is_archive(path: str | os.PathLike[str]) -> bool:
    """Whether a file starts like netCDF-4 (HDF5), so that it is to be opened as an archive rather than read as TOML.

    Parameters
    ----------
    path : path
        The file.

    Returns
    -------
    bool
        False also where the file cannot be read.
    """
    try:
        with Path(path).open("rb") as stream:
            return stream.read(8) == b"\x89HDF\r\n\x1a\n"
    except OSError:
        return False


def _unwritable(target: Path, error: OSError | RuntimeError) -> DataError:
    reason = getattr(error, "strerror", None) or str(error)
    if target.parent.is_dir() and shutil.disk_usage(target.parent).free < _NO_SPACE:
        reason = "no space is left on the device"
    return DataError(f"the archive cannot be written ({reason})", file=target, remedy="choose another place with --out")


def _groups(ledger: Ledger) -> dict[str, xr.Dataset]:
    import xarray as xr

    root = rows_dataset(ledger)
    command = ledger.provenance.get("command", "")
    root.attrs = {
        "Conventions": "CF-1.11",
        FORMAT_ATTRIBUTE: np.int32(ARCHIVE_FORMAT),
        "title": ledger.title,
        "history": f"{ledger.provenance.get('time', '')} {command}".strip(),
        "source": f"wakeledger {ledger.provenance.get('version wakeledger', '')}".strip(),
        "comment": "Engineering estimates from a wake survey; see the variables' long names for signs and units.",
        "compressible": np.int8(ledger.compressible),
        "survey_text": ledger.survey_text,
        "notes": json.dumps(list(ledger.notes), ensure_ascii=False),
        "reference_names": json.dumps(list(ledger.reference)),
    }
    root.attrs |= {name: json.dumps(dict(getattr(ledger, name)), ensure_ascii=False) for name in _MAPPINGS}
    groups = {"": root, "plane": encoding.with_ancillaries(ledger.plane)}
    for name, record, dimension in _RECORDS:
        groups[name] = encoding.records_dataset(getattr(ledger, name), record, dimension)
    for name in _TABLES:
        table = getattr(ledger, name)
        if table is not None:
            groups[name] = table
    if ledger.propagation:
        groups[_PROPAGATION] = propagation_dataset(ledger.propagation)
    if ledger.contributions is not None:
        groups[_CONTRIBUTIONS] = ledger.contributions.to_dataset()
    for number, (name, calibration) in enumerate(ledger.calibrations.items(), start=1):
        group = _CALIBRATION if number == 1 else f"{_CALIBRATION}_{number}"
        groups[group] = calibration.assign_attrs({_CALIBRATION_NAME: name})
    if ledger.diagnostics:
        groups[_DIAGNOSTICS] = encoding.records_dataset(ledger.diagnostics, Diagnostic, "figure")
    if ledger.tunnel:
        groups[_TUNNEL] = encoding.records_dataset(ledger.tunnel, TunnelFigure, "figure")
    for name, kept in ledger.companions.items():
        groups[name] = encoding.points_dataset(kept.raw).assign_attrs(survey_text=kept.survey_text)
    groups["model"] = xr.Dataset({name: scalar(name, value, "model") for name, value in ledger.model.items()})
    groups["raw"] = encoding.points_dataset(ledger.raw)
    if ledger.closures:
        root.attrs[_CLOSURES] = json.dumps([dataclasses.asdict(one) for one in ledger.closures])
    if ledger.combined is not None:
        root.attrs[_COMBINED] = json.dumps(dataclasses.asdict(ledger.combined))
    for number, station in enumerate(ledger.stations, start=1):
        for name, dataset in _groups(station).items():
            groups[f"{_STATION}{number}/{name}".rstrip("/")] = dataset
    return groups


def _ledger(root: xr.Dataset, source: Path, *, within: str = "") -> Ledger:
    def read(name: str) -> xr.Dataset:
        return encoding.read_group(source, group=f"{within}/{name}" if within else name)

    present = encoding.group_names(source, within=within)
    tables: dict[str, Any] = {name: read(name) if name in present else None for name in _TABLES}
    for name, record, _ in _RECORDS:
        tables[name] = encoding.dataset_records(read(name), record)
    for name in _MAPPINGS:
        tables[name] = json.loads(root.attrs[name])
    model = read("model")
    contributions = Contributions.from_dataset(read(_CONTRIBUTIONS)) if _CONTRIBUTIONS in present else None
    if _PROPAGATION in present:
        tables["propagation"] = dataset_propagation(read(_PROPAGATION))
    if _DIAGNOSTICS in present:
        tables["diagnostics"] = encoding.dataset_records(read(_DIAGNOSTICS), Diagnostic)
    if _TUNNEL in present:
        tables["tunnel"] = encoding.dataset_records(read(_TUNNEL), TunnelFigure)
    companions = {}
    for name in _COMPANIONS:
        if name in present:
            dataset = read(name)
            companions[name] = KeptSurvey(str(dataset.attrs["survey_text"]), encoding.dataset_points(dataset))
    numbered = sorted((name for name in present if name.startswith(_CALIBRATION)), key=_number)
    calibrations = [read(name) for name in numbered]
    stations = sorted(
        (name for name in present if name.startswith(_STATION)), key=lambda name: int(name[len(_STATION) :])
    )
    combined = root.attrs.get(_COMBINED)
    return Ledger(
        title=root.attrs["title"],
        compressible=bool(root.attrs["compressible"]),
        rows=_rows(root),
        covariance=root["covariance"].values,
        plane=encoding.without_ancillaries(read("plane")),
        raw=encoding.dataset_points(read("raw")),
        survey_text=root.attrs["survey_text"],
        notes=tuple(json.loads(root.attrs["notes"])),
        reference={name: float(root[name]) for name in json.loads(root.attrs["reference_names"])},
        model={str(name): float(variable) for name, variable in model.data_vars.items()},
        calibrations={str(dataset.attrs.pop(_CALIBRATION_NAME)): dataset for dataset in calibrations},
        contributions=contributions,
        companions=companions,
        stations=tuple(_ledger(read(name), source, within=f"{within}/{name}".lstrip("/")) for name in stations),
        closures=tuple(_closure(entry) for entry in json.loads(root.attrs.get(_CLOSURES, "[]"))),
        combined=None if combined is None else Combined(**json.loads(combined)),
        **tables,
    )


def _closure(entry: dict[str, Any]) -> Closure:
    causes = tuple(Cause(**cause) for cause in entry.pop("causes"))
    return Closure(causes=causes, errors=tuple(entry.pop("errors")), **entry)


def _number(group: str) -> int:
    """Number of a calibration's group."""
    return int(group.removeprefix(_CALIBRATION).strip("_") or 1)


def _rows(root: xr.Dataset) -> tuple[Row, ...]:
    rows = []
    names = [field.name for field in dataclasses.fields(Row) if field.name not in ("name", "unit", "reason")]
    for index, name in enumerate(root["row"].values):
        # An archive of an earlier version lacks what came later.
        numbers = {key: float(root[key].values[index]) if key in root else np.nan for key in names}
        corrected, u_corrected = (numbers.pop(f"coefficient_corrected{key}") for key in ("", "_standard_uncertainty"))
        rows.append(
            Row(
                name=str(name),
                unit=str(root["unit"].values[index]),
                reason=str(root["reason"].values[index]) or None,
                coefficient_corrected=None if np.isnan(corrected) else corrected,
                coefficient_corrected_standard_uncertainty=None if np.isnan(u_corrected) else u_corrected,
                **numbers,
            )
        )
    return tuple(rows)
