"""From a data file to points: the format is told by content, one file for each format."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from pathlib import Path
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.core.points import Channel, Column, Points
from wakeledger.intake.readers.cfd import KINDS, files_of, read_mesh
from wakeledger.intake.readers.columns import POSITIONS, Cut, RawColumns
from wakeledger.intake.readers.joining import read_joined
from wakeledger.intake.readers.matlab import read_matlab
from wakeledger.intake.readers.netcdf import read_netcdf
from wakeledger.intake.readers.recognise import recognise
from wakeledger.intake.readers.table import read_table

__all__ = ["digest_of", "read_points", "recognise"]

_NO_STD: Mapping[str, Column] = MappingProxyType({})
#: Largest spread of the streamwise position of one plane, as a share of the plane's size.
_PLANE_THICKNESS = 0.02


def read_points(
    path: Path | str | Sequence[Path | str],
    columns: Mapping[str, Column],
    *,
    axes: Array,
    std: Mapping[str, Column] = _NO_STD,
    samples: Column | None = None,
    coordinates: int = 2,
    station: float | None = None,
    trailing_edge_x: float = 0.0,
    time: float | None = None,
) -> Points:
    """Read the points of one plane from a file.

    Parameters
    ----------
    path : path, or sequence of paths
        A delimited text table, netCDF, MATLAB, VTK or CGNS file, or the folder of an OpenFOAM case. Several are of one
        plane, with other variables each, and joined by position.
    columns : mapping of str to Column
        Where each variable stands, by name. Positions are two of ``x``, ``y``, ``z`` along the file's axes, or ``r``
        and ``theta`` with y = r cos(theta), z = r sin(theta) in wind axes, theta positive from starboard towards up.
        A third position may be given: it must be the same at all points. ``row`` is the traverse row of each point.
    axes : ndarray, shape (3, 3)
        Signed permutation P with wind = P @ file.
    std : mapping of str to Column, optional
        Standard deviation of the samples at each point, by variable.
    samples : Column, optional
        Number of samples behind each point.
    coordinates : {1, 2}
        How many positions across the stream place a point; with one, as of a line traverse, the other is 0.
    station : float, optional
        Distance of the plane behind the trailing edge, m: where volumes are cut, and where a mesh must have its plane.
    trailing_edge_x : float, optional
        Where the trailing edge stands along the wind x axis in the file's coordinates, m.
    time : float, optional
        Instant of a case that holds several; the latest by default.

    Returns
    -------
    Points
        In SI, in file order; positions in wind axes, vector components along the file's axes.

    Raises
    ------
    DataError
        If the file cannot be read, or what it holds is no plane of points; names file, line and column.
    MissingPackageError
        If the package that reads the file's format is not installed.
    """
    paths = [Path(path)] if isinstance(path, str | Path) else [Path(one) for one in path]
    file = paths[0]
    axes = np.asarray(axes, dtype=float)
    wanted = dict(columns) | {f"std.{name}": column for name, column in std.items()}
    if samples is not None:
        wanted["samples"] = samples
    kinds = [recognise(one) for one in paths]
    meshes = [kind in KINDS for kind in kinds]
    if any(meshes) and not all(meshes):
        raise DataError(
            "the file is a mesh and another one of the same plane is none"
            if meshes[0]
            else "the file is no mesh and another one of the same plane is",
            file=file,
            remedy="write all of them in one format",
        )
    if all(meshes):
        wanted = _with_mesh_positions(wanted)
        columns = wanted
    else:
        _require_positions(columns, axes, file, coordinates)
    cut = _cut(axes, station, trailing_edge_x, time, line=coordinates == 1)
    if len(paths) == 1:
        raw = _read(file, kinds[0], wanted, cut)
    else:
        kind_of = dict(zip(paths, kinds, strict=True))
        raw = read_joined(paths, wanted, lambda one, some: _read(one, kind_of[one], some, cut))
    named = _named(wanted)
    # Of a set of instants the reader has found the scatter itself.
    named |= {key: named[key.removeprefix("std.")] for key in raw.values if key.startswith("std.") and key not in named}
    named.setdefault("samples", Column("samples", "1"))
    _refuse_infinite(raw, named, file)
    y, z = _positions(raw, columns, axes, file)
    channels = {}
    for key, values in raw.values.items():
        if key in POSITIONS or key in {"row", "samples"} or key.startswith("std."):
            continue
        column = named[key]
        if not np.isfinite(values).any():
            raise DataError(
                f"column {column.column!r} ({key}) has no value at any point",
                file=file,
                remedy="name the right column or leave the variable out",
            )
        channels[key] = Channel(_si(values, column), column.relative_to, column.normalised_by, column.kinematic)
    return Points(
        y=y,
        z=z,
        channels=MappingProxyType(channels),
        line=raw.line,
        source=", ".join(str(one) for one in paths),
        axes=axes,
        std=MappingProxyType(_deviations(raw, named, file)),
        samples=_integers(raw, "samples", named, file, least=1),
        row=_integers(raw, "row", named, file),
        triangles=raw.triangles,
        areas=None if raw.areas is None else named["x"].scale ** 2 * raw.areas,
        how=raw.how,
        averaged=raw.averaged,
    )


def digest_of(path: Path) -> str:
    """SHA-256 of a data file and of all that it rests on, in hexadecimal digits.

    Parameters
    ----------
    path : Path
        A file, or the folder of a case.

    Returns
    -------
    str
        Of a single file the usual one; of several, of all of them one after the other.
    """
    digest = hashlib.sha256()
    for file in files_of(path, recognise(path)):
        with file.open("rb") as stream:
            while block := stream.read(1 << 20):
                digest.update(block)
    return digest.hexdigest()


def _read(path: Path, kind: str, columns: Mapping[str, Column], cut: Cut) -> RawColumns:
    if kind in KINDS:
        return read_mesh(path, kind, columns, cut)
    if cut.time is not None:
        raise DataError(
            "time is given, and the file is no OpenFOAM case",
            file=path,
            remedy="leave time out of [plane]; a set of instants in netCDF is averaged as a whole",
        )
    volume = None if np.isnan(cut.position) else cut
    if kind == "matlab":
        return read_matlab(path, columns, volume)
    return read_table(path, columns) if kind == "table" else read_netcdf(path, columns, volume)


def _cut(axes: Array, station: float | None, trailing_edge_x: float, time: float | None, *, line: bool) -> Cut:
    letter, sign = _wind_axis(axes, 0)
    place = float("nan") if station is None else station
    position = sign * (place + trailing_edge_x) + 0.0
    return Cut("xyz".index(letter), position, place, trailing_edge_x, line=line, time=time)


def _with_mesh_positions(columns: Mapping[str, Column]) -> dict[str, Column]:
    """Columns with all three positions: a mesh has them, and one unit of length."""
    given = next((columns[key] for key in "xyz" if key in columns), Column("x", "m"))
    return {key: Column(key, given.unit, given.scale) for key in "xyz"} | dict(columns)


def _named(wanted: Mapping[str, Column]) -> dict[str, Column]:
    """Columns by key, the three components of a vector array included."""
    named = dict(wanted)
    for prefix in ("", "std."):
        if f"{prefix}velocity" in wanted:
            named |= {prefix + letter: wanted[f"{prefix}velocity"] for letter in "uvw"}
    return named


def _si(values: Array, column: Column) -> Array:
    return values if column.scale == 1.0 and column.offset == 0.0 else column.scale * values + column.offset


def _place(raw: RawColumns, i: int, column: Column) -> str:
    return raw.place(i, column.column)


def _refuse_infinite(raw: RawColumns, named: Mapping[str, Column], file: Path) -> None:
    for key, values in raw.values.items():
        infinite = np.flatnonzero(np.isinf(values))
        if infinite.size:
            raise DataError(
                f"an infinite value ({key}), {infinite.size} in all",
                file=file,
                place=_place(raw, int(infinite[0]), named[key]),
                remedy="leave the cell empty if the value is missing",
            )


def _wind_axis(axes: Array, target: int) -> tuple[str, float]:
    """Letter of the file's axis that becomes a wind axis, and its sign."""
    source = int(np.argmax(np.abs(axes[target])))
    return "xyz"[source], float(np.sign(axes[target, source]))


def _require_positions(columns: Mapping[str, Column], axes: Array, file: Path, coordinates: int) -> None:
    given = [key for key in POSITIONS if key in columns]
    polar = {"r", "theta"} & set(given)
    if polar:
        if polar != {"r", "theta"} or {"y", "z"} & set(given):
            raise DataError(
                f"the positions are given by {', '.join(given)}",
                file=file,
                remedy="give either r and theta, or two of x, y, z, in [plane.columns]",
            )
        return
    across = [(_wind_axis(axes, target)[0], name) for target, name in ((1, "y (to starboard)"), (2, "z (up)"))]
    absent = [(letter, name) for letter, name in across if letter not in columns]
    for letter, name in absent:
        if len(absent) > 2 - coordinates:
            raise DataError(
                f"the position along the file's {letter} axis, which is the wind axis {name}, has no column",
                file=file,
                remedy=f"add {letter} to [plane.columns], or correct [plane.axes]",
            )


def _positions(raw: RawColumns, columns: Mapping[str, Column], axes: Array, file: Path) -> tuple[Array, Array]:
    si: dict[str, Array] = {}
    for key in POSITIONS:
        if key not in raw.values:
            continue
        missing = np.flatnonzero(np.isnan(raw.values[key]))
        if missing.size:
            raise DataError(
                f"the position {key} is missing, at {missing.size} point(s) in all",
                file=file,
                place=_place(raw, int(missing[0]), columns[key]),
                remedy="give the position of every point, or delete the line",
            )
        si[key] = _si(raw.values[key], columns[key])
    if "r" in si:
        negative = np.flatnonzero(si["r"] < 0)
        if negative.size:
            raise DataError(
                f"the radius r is negative, at {negative.size} point(s) in all",
                file=file,
                place=_place(raw, int(negative[0]), columns["r"]),
                remedy="give r >= 0 and turn theta by half a turn",
            )
        y, z = si["r"] * np.cos(si["theta"]), si["r"] * np.sin(si["theta"])
    else:
        (letter_y, sign_y), (letter_z, sign_z) = _wind_axis(axes, 1), _wind_axis(axes, 2)
        still = np.zeros(raw.line.size)
        y, z = sign_y * si.get(letter_y, still) + 0.0, sign_z * si.get(letter_z, still) + 0.0
    letter, _ = _wind_axis(axes, 0)
    if letter in si:
        _refuse_several_planes(si[letter], float(max(np.ptp(y), np.ptp(z))), columns[letter].column, file)
    return y, z


def _refuse_several_planes(x: Array, size: float, column: str, file: Path) -> None:
    if np.ptp(x) <= _PLANE_THICKNESS * size:
        return
    levels = np.unique(np.round(x, 6))
    found = (
        f"planes at {column!r} = {', '.join(f'{level:g}' for level in levels)} m"
        if levels.size <= 6
        else f"points from {x.min():g} to {x.max():g} m along {column!r}"
    )
    raise DataError(f"the file holds {found}", file=file, remedy="give a file with the points of one plane only")


def _deviations(raw: RawColumns, named: Mapping[str, Column], file: Path) -> dict[str, Array]:
    deviations = {}
    for key, values in raw.values.items():
        if not key.startswith("std."):
            continue
        negative = np.flatnonzero(values < 0)
        if negative.size:
            raise DataError(
                f"the standard deviation of {key.removeprefix('std.')} is negative",
                file=file,
                place=_place(raw, int(negative[0]), named[key]),
                remedy="give values from zero up, and leave the cell empty where unknown",
            )
        deviations[key.removeprefix("std.")] = abs(named[key].scale) * values
    return deviations


def _integers(
    raw: RawColumns, key: str, named: Mapping[str, Column], file: Path, *, least: int | None = None
) -> NDArray[np.int64] | None:
    if key not in raw.values:
        return None
    values = raw.values[key]
    wrong = ~np.isfinite(values) | (values != np.round(values))
    if least is not None:
        wrong |= values < least
    if wrong.any():
        i = int(np.flatnonzero(wrong)[0])
        raise DataError(
            f"{key} is {values[i]:g}",
            file=file,
            place=_place(raw, i, named[key]),
            remedy="give a whole number at every point" + (f", at least {least}" if least is not None else ""),
        )
    return np.round(values).astype(np.int64)
