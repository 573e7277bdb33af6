"""How the ledger's parts are laid out in netCDF: records, raw points, and the one function that writes a group."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.names import VARIABLES
from wakeledger.core.points import Channel, Points

if TYPE_CHECKING:
    import xarray as xr

Record = TypeVar("Record")

UNCERTAINTY_SUFFIX = "_standard_uncertainty"
DEVIATION_SUFFIX = "_std"

_LONG_NAMES = {
    "row": "row of the ledger",
    "method": "method of the estimate",
    "source": "source of the uncertainty",
    "value": "value, in the row's unit",
    "unit": "UDUNITS string of the row's unit",
    "standard_uncertainty": "standard uncertainty (k = 1), in the row's unit",
    "difference": "difference of the two figures, in the row's unit",
    "expected_difference": "difference that was to be expected, in the row's unit",
    "normalised_error": "normalised error E_n of ISO/IEC 17043",
    "verdict": "outcome",
    "reason": "why something is unknown",
    "share": "part of the row's variance",
    "limit": "largest value that passes",
    "message": "what it means and what to do",
    "meaning": "what it is, with its sign",
    "name": "name",
}
_DIMENSIONLESS = frozenset({"normalised_error", "share"})


def write_group(dataset: xr.Dataset, path: Path, *, group: str | None, mode: str) -> None:
    """Write one dataset as a group of a netCDF-4 file; everything that is written goes through here.

    Parameters
    ----------
    dataset : Dataset
        Variables with their attributes; nothing is changed in it.
    path : Path
        The file.
    group : str or None
        Name of the group, None for the root.
    mode : {"w", "a"}
        Make the file, or add to it.

    Raises
    ------
    OSError
        If the file cannot be written.
    """
    prepared = dataset.copy(deep=False)
    encoding: dict[Any, dict[str, Any]] = {}
    for name, variable in dataset.variables.items():
        settings: dict[str, Any] = {}
        kind = variable.dtype.kind
        if name in dataset.coords or kind in "iub":
            settings["_FillValue"] = None
        if kind in "iu" and variable.dtype.itemsize > 4 and _fits_int32(variable.values):
            settings["dtype"] = "int32"
        if kind in "iufb" and variable.ndim and variable.size:
            settings |= {"zlib": True, "complevel": 1, "shuffle": True, "fletcher32": True}
        if kind in "UO":
            # Text as characters: files with variable-length strings, open twice in one process, crash netCDF 4.10.
            settings["dtype"] = "S1"
        encoding[name] = settings
        attributes = dict(variable.attrs)
        if attributes.get("units") == "K":
            difference = str(name).endswith((UNCERTAINTY_SUFFIX, DEVIATION_SUFFIX))
            attributes["units_metadata"] = f"temperature: {'difference' if difference else 'on_scale'}"
        prepared[name].attrs = attributes
        prepared[name].encoding = {}
    prepared.to_netcdf(path, group=group, mode=mode, engine="netcdf4", format="NETCDF4", encoding=encoding)  # type: ignore[call-overload]


def _fits_int32(values: NDArray[np.integer]) -> bool:
    limits = np.iinfo(np.int32)
    return values.size == 0 or bool(values.min() >= limits.min and values.max() <= limits.max)


def read_group(path: Path, *, group: str | None = None) -> xr.Dataset:
    """Read one group of a netCDF-4 file into memory.

    Parameters
    ----------
    path : Path
        The file.
    group : str or None
        Name of the group, None for the root.

    Returns
    -------
    Dataset
        Without what `write_group` added.

    Raises
    ------
    OSError
        If the file or the group cannot be read.
    """
    import xarray as xr

    with xr.open_dataset(path, group=group, engine="netcdf4", decode_times=False, decode_timedelta=False) as opened:
        dataset = opened.load()
    for variable in dataset.variables.values():
        variable.encoding = {}
        variable.attrs.pop("units_metadata", None)
    dataset.encoding = {}
    return dataset


def group_names(path: Path, *, within: str = "") -> frozenset[str]:
    """Names of the groups of a netCDF-4 file.

    Parameters
    ----------
    path : Path
        The file.
    within : str
        Path of a group whose own groups are wanted; empty for the root.

    Returns
    -------
    frozenset of str
    """
    import netCDF4

    with netCDF4.Dataset(path) as dataset:
        return frozenset((dataset[within] if within else dataset).groups)


def with_ancillaries(plane: xr.Dataset) -> xr.Dataset:
    """The plane with each field pointing to its uncertainty and to the quality flags.

    Parameters
    ----------
    plane : Dataset
        The plane; the uncertainty of ``u`` is called ``u_standard_uncertainty``.

    Returns
    -------
    Dataset
        A copy with ``ancillary_variables`` where there are any.
    """
    linked = plane.copy(deep=False)
    for key in plane.data_vars:
        name = str(key)
        if name == "flag" or name.endswith(UNCERTAINTY_SUFFIX):
            continue
        helpers = [other for other in (f"{name}{UNCERTAINTY_SUFFIX}", "flag") if other in plane]
        if helpers:
            linked[key].attrs = {**plane[key].attrs, "ancillary_variables": " ".join(helpers)}
    return linked


def without_ancillaries(plane: xr.Dataset) -> xr.Dataset:
    """Undo `with_ancillaries`.

    Parameters
    ----------
    plane : Dataset
        As read from the archive.

    Returns
    -------
    Dataset
        The same object, with the attribute gone.
    """
    for name in plane.data_vars:
        plane[name].attrs.pop("ancillary_variables", None)
    return plane


def records_dataset(records: Sequence[Any], record: type, dimension: str) -> xr.Dataset:
    """Records of one kind as a dataset of one dimension.

    Parameters
    ----------
    records : sequence of dataclass instances
        Fields are float, str or None (of text).
    record : type
        Their class, also where there is none of them.
    dimension : str
        Name of the dimension.

    Returns
    -------
    Dataset
    """
    import xarray as xr

    dataset = xr.Dataset()
    for field in dataclasses.fields(record):
        values = [getattr(line, field.name) for line in records]
        attributes = {"long_name": _LONG_NAMES[field.name]}
        if field.type == "float":
            if field.name in _DIMENSIONLESS or dimension == "check":
                attributes["units"] = "1"
            dataset[field.name] = (dimension, np.array(values, dtype=float), attributes)
        else:
            dataset[field.name] = (dimension, np.array([value or "" for value in values], dtype=str), attributes)
    return dataset


def dataset_records(dataset: xr.Dataset, record: type[Record]) -> tuple[Record, ...]:
    """Undo `records_dataset`.

    Parameters
    ----------
    dataset : Dataset
        As read from the archive.
    record : type
        Class of the records.

    Returns
    -------
    tuple of records

    Raises
    ------
    KeyError
        If a field is missing.
    """
    columns: dict[str, list[Any]] = {}
    fields = dataclasses.fields(record)  # type: ignore[arg-type]
    for field in fields:
        values = dataset[field.name].values
        if field.type == "float":
            columns[field.name] = [float(value) for value in values]
        else:
            empty = None if "None" in str(field.type) else ""
            columns[field.name] = [str(value) or empty for value in values]
    count = len(columns[fields[0].name])
    return tuple(record(**{name: values[index] for name, values in columns.items()}) for index in range(count))


def points_dataset(points: Points) -> xr.Dataset:
    """Raw points as a dataset, lossless.

    Parameters
    ----------
    points : Points
        The points as read.

    Returns
    -------
    Dataset
        Dimension point; each channel under its name with what it is relative to or normalised by as attributes, its
        standard deviation as ``<name>_std``, and ``line``, ``samples``, ``row`` and ``axes``.
    """
    import xarray as xr

    dataset = xr.Dataset(
        coords={
            "y": ("point", points.y, {"units": "m", "long_name": "distance to starboard"}),
            "z": ("point", points.z, {"units": "m", "long_name": "height, positive up"}),
        }
    )
    for name, channel in points.channels.items():
        attributes = {"units": _unit(name, channel), "long_name": _meaning(name)}
        if channel.relative_to:
            attributes["relative_to"] = channel.relative_to
        if channel.normalised_by:
            attributes["normalised_by"] = channel.normalised_by
        if channel.kinematic:
            attributes["kinematic"] = "divided by density"
        if name in points.std:
            attributes["ancillary_variables"] = name + DEVIATION_SUFFIX
        dataset[name] = ("point", np.asarray(channel.values, dtype=float), attributes)
    for name, deviation in points.std.items():
        attributes = {"long_name": f"standard deviation of the samples of {name}"}
        if name in VARIABLES:
            attributes["units"] = _unit(name, points.channels.get(name))
        dataset[name + DEVIATION_SUFFIX] = ("point", np.asarray(deviation, dtype=float), attributes)
    counts = {
        "line": (points.line, "line of the file each point came from, counted from 1"),
        "samples": (points.samples, "number of samples behind each point"),
        "row": (points.row, "traverse row each point belongs to"),
    }
    for name, (values, meaning) in counts.items():
        if values is not None:
            dataset[name] = ("point", np.asarray(values, dtype=np.int64), {"long_name": meaning, "units": "1"})
    meaning = "signed permutation from the file's vector components to wind axes"
    axes = np.asarray(points.axes, dtype=float)
    dataset["axes"] = (("wind_axis", "file_axis"), axes, {"long_name": meaning, "units": "1"})
    if points.triangles is not None:
        corners = {"long_name": "points at the corners of each triangle, counted from 0", "units": "1"}
        dataset["triangles"] = (("triangle", "corner"), np.asarray(points.triangles, dtype=np.int64), corners)
    if points.areas is not None:
        area = {"long_name": "area of the cell that each point is the centre of", "units": "m2"}
        dataset["areas"] = ("point", np.asarray(points.areas, dtype=float), area)
    dataset.attrs = {"file": points.source, "channels": " ".join(points.channels)}
    if points.how:
        dataset.attrs["how"] = points.how
    if points.averaged:
        dataset.attrs["averaged"] = points.averaged
    return dataset


def _unit(name: str, channel: Channel | None) -> str:
    if channel is not None and channel.normalised_by:
        return "1"
    if channel is not None and channel.kinematic:
        return "m2 s-1" if name == "turbulent_viscosity" else "m2 s-2"
    return VARIABLES[name].unit if name in VARIABLES else "1"


def _meaning(name: str) -> str:
    return VARIABLES[name].long_name if name in VARIABLES else name.replace("_", " ")


def dataset_points(dataset: xr.Dataset) -> Points:
    """Undo `points_dataset`.

    Parameters
    ----------
    dataset : Dataset
        As read from the archive.

    Returns
    -------
    Points

    Raises
    ------
    KeyError
        If a part is missing.
    """

    def counts(name: str) -> NDArray[np.int64] | None:
        return dataset[name].values.astype(np.int64) if name in dataset else None

    channels = {}
    for name in str(dataset.attrs["channels"]).split():
        attributes = dataset[name].attrs
        channels[name] = Channel(
            dataset[name].values,
            relative_to=attributes.get("relative_to"),
            normalised_by=attributes.get("normalised_by"),
            kinematic="kinematic" in attributes,
        )
    names = [str(name) for name in dataset.data_vars]
    std = {
        name.removesuffix(DEVIATION_SUFFIX): dataset[name].values
        for name in names
        if name.endswith(DEVIATION_SUFFIX) and name not in channels
    }
    return Points(
        y=dataset["y"].values,
        z=dataset["z"].values,
        channels=channels,
        line=dataset["line"].values.astype(np.int64),
        source=str(dataset.attrs["file"]),
        axes=dataset["axes"].values,
        std=std,
        samples=counts("samples"),
        row=counts("row"),
        triangles=counts("triangles"),
        areas=dataset["areas"].values if "areas" in dataset else None,
        how=str(dataset.attrs.get("how", "")),
        averaged=str(dataset.attrs.get("averaged", "")),
    )
