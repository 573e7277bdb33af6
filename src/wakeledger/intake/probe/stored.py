"""The calibration's product: one netCDF file that plain xarray opens and that reduces readings to the same digits."""

from __future__ import annotations

import json
import os
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from wakeledger.core.errors import DataError
from wakeledger.intake.probe.coefficients import Coefficients
from wakeledger.intake.probe.inverse import InverseTables
from wakeledger.intake.probe.record import Calibration, CalibrationSet, CalibrationTable
from wakeledger.intake.probe.residuals import QUANTITIES
from wakeledger.intake.probe.validity import DirectionHull

if TYPE_CHECKING:
    import xarray as xr

#: Version of the layout; a file with a higher one is refused.
CALIBRATION_FORMAT = 1
#: Root attribute that holds the version, and by which a calibration is recognised.
FORMAT_ATTRIBUTE = "wakeledger_calibration"

_UNITS = {"pitch": "rad", "yaw": "rad", "total_pressure": "1", "static_pressure": "1"}
_OF_Q = {"pitch": "", "yaw": "", "total_pressure": ", over q", "static_pressure": ", over q"}
_CENTRE_FIRST = "C_yaw in the centre sector, C_theta in an outer one"
_CENTRE_SECOND = "C_pitch in the centre sector, C_phi in an outer one"
_REMEDY = "give the file that wakeledger calibrate wrote"


def to_dataset(calibration: Calibration) -> xr.Dataset:
    """A calibration as one dataset, lossless.

    Parameters
    ----------
    calibration : Calibration
        The calibration.

    Returns
    -------
    Dataset
        Points, coefficients, residuals, uncertainties by region, and the tables of the inverse; provenance and the
        probe file's text are attributes.
    """
    import xarray as xr

    dataset = xr.Dataset()

    def put(name: str, dimensions: tuple[str, ...], values: Any, meaning: str, unit: str = "1") -> None:
        array = np.asarray(values)
        if array.dtype == bool:
            array = array.astype(np.int8)
        dataset[name] = (dimensions, array, {"long_name": meaning, "units": unit})

    table = calibration.table
    put("pitch", ("point",), table.pitch, "flow pitch angle in probe axes, positive for upwash", "rad")
    put("yaw", ("point",), table.yaw, "flow yaw angle in probe axes, positive towards starboard", "rad")
    put("hole_pressure", ("hole", "point"), table.holes, "pressure of each hole", "Pa")
    put("total_pressure", ("point",), table.total, "total pressure of the calibration stream", "Pa")
    put("static_pressure", ("point",), table.static, "static pressure of the calibration stream", "Pa")
    put("line", ("point",), table.line, "line of the calibration file, counted from 1")
    if table.level is not None:
        put("level", ("point",), table.level, f"{table.level_name} number of the calibration stream")
    put("set_of_point", ("point",), calibration.set_index, "set each point belongs to")
    own = calibration.coefficients
    put("sector_of_point", ("point",), own.sector, "sector: 0 centre, else number of the leading hole less one")
    put("first_coefficient", ("point",), own.first, _CENTRE_FIRST)
    put("second_coefficient", ("point",), own.second, _CENTRE_SECOND)
    put("total_coefficient", ("point",), own.total, "(P_lead - Pt)/D")
    static = "(mean of the outer holes - Ps)/D" if calibration.holes == 5 else "C_q = D/(Pt - Ps)"
    put("static_coefficient", ("point",), own.static, static)
    for index, name in enumerate(QUANTITIES):
        words = name.replace("_", " ")
        put(
            f"residual_{name}",
            ("point",),
            calibration.residual[index],
            f"residual of {words}{_OF_Q[name]}",
            _UNITS[name],
        )
        meaning = f"error of {words} by a calibration that does not know the point{_OF_Q[name]}"
        put(f"left_out_{name}", ("point",), calibration.left_out[index], meaning, _UNITS[name])
        meaning = f"standard uncertainty of {words} by region{_OF_Q[name]}"
        values = np.stack([one.uncertainty[index] for one in calibration.sets])
        put(f"{name}_standard_uncertainty", ("set", "region_y", "region_z"), values, meaning, _UNITS[name])
    put("difference", ("hole", "point"), calibration.difference, "hole less what all other points predict, over q")
    put("deviations", ("hole", "point"), calibration.deviations, "the same in robust standard deviations")
    put("bad", ("point",), calibration.bad, "1 for a point the calibration does not rest on")
    put("edge", ("point",), calibration.edge, "1 for a point on the edge of the range")
    put("covered", ("point",), calibration.covered, "1 for a point whose coefficients lead back to its direction")

    sets = calibration.sets
    put("set_level", ("set",), [one.level for one in sets], "Mach or Reynolds number of the set, NaN where unknown")
    put("spacing", ("set",), [one.hull.spacing for one in sets], "median distance of neighbouring directions", "rad")
    put("smoothing", ("set",), [one.smoothing for one in sets], "smoothing, as a share of the largest eigenvalue")
    for name in ("low", "high"):
        meaning = f"{name} corner of the regions in the plane (v, w)/(1 + u)"
        put(f"region_{name}", ("set", "axis"), np.stack([getattr(one, name) for one in sets]), meaning)
    hull = np.concatenate([one.hull.vertices for one in sets])
    owner = np.concatenate([np.full(len(one.hull.vertices), index) for index, one in enumerate(sets)])
    put("hull_pitch", ("corner",), hull[:, 0], "pitch of the corners of the calibrated range", "rad")
    put("hull_yaw", ("corner",), hull[:, 1], "yaw of the corners of the calibrated range", "rad")
    put("hull_set", ("corner",), owner, "set each corner belongs to")
    nodes = ("set", "sector", "node_y", "node_x")
    for name, dimensions, meaning in (
        ("origin", (*nodes[:2], "axis"), "first node of the grid over the compressed coefficient plane"),
        ("step", (*nodes[:2], "axis"), "spacing of that grid"),
        ("image", (*nodes, "axis"), "direction (v, w)/(1 + u) at the nodes"),
        ("total", nodes, "(P_lead - Pt) over the pressure scale of the plane at the nodes"),
        ("dynamic", nodes, "(Pt - Ps) over the pressure scale of the plane at the nodes"),
        ("solved", nodes, "1 for nodes that belong to a direction in or near the calibrated range"),
    ):
        put(f"table_{name}", dimensions, np.stack([getattr(one.tables, name) for one in sets]), meaning)
    dataset.attrs = {
        "Conventions": "CF-1.11",
        FORMAT_ATTRIBUTE: np.int32(CALIBRATION_FORMAT),
        "title": calibration.title,
        "history": calibration.provenance.get("time", ""),
        "source": f"wakeledger {calibration.provenance.get('version wakeledger', '')}".strip(),
        "comment": "Calibration of a multi-hole probe: an engineering estimate; long names give signs and units.",
        "level_name": table.level_name or "",
        "file": table.source,
        "notes": json.dumps(list(calibration.notes), ensure_ascii=False),
        "probe_text": calibration.text,
        "inputs": json.dumps(dict(calibration.inputs), ensure_ascii=False),
        "provenance": json.dumps(dict(calibration.provenance), ensure_ascii=False),
    }
    return dataset


def from_dataset(dataset: xr.Dataset) -> Calibration:
    """Undo `to_dataset`.

    Parameters
    ----------
    dataset : Dataset
        As read from a file.

    Returns
    -------
    Calibration

    Raises
    ------
    KeyError
        If a part is missing.
    """

    def get(name: str) -> Any:
        return np.ascontiguousarray(dataset[name].values)

    def flags(name: str) -> Any:
        return get(name).astype(bool)

    name = dataset.attrs["level_name"] or None
    table = CalibrationTable(
        pitch=get("pitch"),
        yaw=get("yaw"),
        holes=get("hole_pressure"),
        total=get("total_pressure"),
        static=get("static_pressure"),
        line=get("line").astype(np.int64),
        source=str(dataset.attrs["file"]),
        level=get("level") if name else None,
        level_name=name,
    )
    owner, corners = get("hull_set"), np.stack([get("hull_pitch"), get("hull_yaw")], axis=1)
    uncertainty = np.stack([get(f"{quantity}_standard_uncertainty") for quantity in QUANTITIES], axis=1)
    sets = []
    for index in range(dataset.sizes["set"]):
        values = {part: get(f"table_{part}")[index] for part in ("origin", "step", "image", "total", "dynamic")}
        sets.append(
            CalibrationSet(
                level=float(get("set_level")[index]),
                tables=InverseTables(**values, solved=flags("table_solved")[index]),
                hull=DirectionHull(corners[owner == index], float(get("spacing")[index])),
                low=get("region_low")[index],
                high=get("region_high")[index],
                uncertainty=uncertainty[index],
                smoothing=float(get("smoothing")[index]),
            )
        )
    return Calibration(
        title=str(dataset.attrs["title"]),
        table=table,
        sets=tuple(sets),
        set_index=get("set_of_point").astype(np.int64),
        coefficients=Coefficients(
            get("first_coefficient"),
            get("second_coefficient"),
            get("total_coefficient"),
            get("static_coefficient"),
            get("sector_of_point").astype(np.intp),
        ),
        residual=np.stack([get(f"residual_{quantity}") for quantity in QUANTITIES]),
        left_out=np.stack([get(f"left_out_{quantity}") for quantity in QUANTITIES]),
        difference=get("difference"),
        deviations=get("deviations"),
        bad=flags("bad"),
        edge=flags("edge"),
        covered=flags("covered"),
        notes=tuple(json.loads(dataset.attrs["notes"])),
        text=str(dataset.attrs["probe_text"]),
        inputs=json.loads(dataset.attrs["inputs"]),
        provenance=json.loads(dataset.attrs["provenance"]),
    )


def write_calibration(calibration: Calibration, path: str | os.PathLike[str]) -> None:
    """Write a calibration to a netCDF file, whole or not at all.

    Parameters
    ----------
    calibration : Calibration
        The calibration.
    path : path
        The file; an existing one is replaced in one step when the new one is complete.

    Raises
    ------
    DataError
        If the file cannot be written there.
    """
    target = Path(path)
    dataset = to_dataset(calibration)
    encoding: dict[Any, dict[str, Any]] = {}
    for name, variable in dataset.variables.items():
        settings: dict[str, Any] = {"_FillValue": None}
        if variable.dtype.kind in "iu" and variable.dtype.itemsize > 4:
            settings["dtype"] = "int32"
        if variable.ndim and variable.size:
            settings |= {"zlib": True, "complevel": 1, "shuffle": True, "fletcher32": True}
        encoding[name] = settings
    part = target.with_name(f".{target.name}.{os.getpid()}.part")
    try:
        dataset.to_netcdf(part, mode="w", engine="netcdf4", format="NETCDF4", encoding=encoding)
        part.replace(target)
    except OSError as error:
        raise DataError(
            f"the calibration cannot be written ({error.strerror or error})",
            file=target,
            remedy="choose another place with --out",
        ) from error
    finally:
        part.unlink(missing_ok=True)


def read_calibration(path: str | os.PathLike[str]) -> Calibration:
    """Read a calibration from its netCDF file.

    Parameters
    ----------
    path : path
        The file.

    Returns
    -------
    Calibration
        Equal to the one that was written, so that readings are reduced to the same digits.

    Raises
    ------
    DataError
        If the file is missing, not netCDF, not a calibration, of a newer layout, or damaged.
    """
    import xarray as xr

    source = Path(path)
    if not source.is_file():
        found = "is a directory" if source.is_dir() else "does not exist"
        raise DataError(f"the calibration file {found}", file=source, remedy="check the path")
    try:
        with xr.open_dataset(source, engine="netcdf4", decode_times=False, decode_timedelta=False) as opened:
            dataset = opened.load()
    except Exception as error:
        raise DataError("the file is not netCDF, or is damaged", file=source, remedy=_REMEDY) from error
    if FORMAT_ATTRIBUTE not in dataset.attrs:
        raise DataError("the netCDF file is not a probe calibration", file=source, remedy=_REMEDY)
    version = int(dataset.attrs[FORMAT_ATTRIBUTE])
    if version > CALIBRATION_FORMAT:
        raise DataError(
            f"the calibration has format {version}, this program reads up to {CALIBRATION_FORMAT}",
            file=source,
            remedy="calibrate the probe again, or use a newer version of this program",
        )
    try:
        return from_dataset(dataset)
    except Exception as error:
        raise DataError(
            f"the calibration is damaged or incomplete ({type(error).__name__}: {error})",
            file=source,
            remedy="calibrate the probe again",
        ) from error
