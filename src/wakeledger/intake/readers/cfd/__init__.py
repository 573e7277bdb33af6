"""Computed planes and volumes: meshes read by one package, cut at the station, and handed over as points."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.core.points import Column
from wakeledger.intake.readers.cfd import mesh
from wakeledger.intake.readers.cfd.arrays import choose_arrays, position_axis
from wakeledger.intake.readers.cfd.cutting import STATION_TOLERANCE, Section, combined, merged, section_of
from wakeledger.intake.readers.cfd.files import KINDS, files_of, open_blocks
from wakeledger.intake.readers.cfd.polygons import triangles_of
from wakeledger.intake.readers.columns import POSITIONS, Cut, RawColumns

__all__ = ["KINDS", "cut_volume", "files_of", "read_mesh"]


def read_mesh(path: Path, kind: str, columns: Mapping[str, Column], cut: Cut) -> RawColumns:
    """Read the plane at the station from a mesh.

    Parameters
    ----------
    path : Path
        File or case folder.
    kind : str
        A key of `KINDS`.
    columns : mapping of str to Column
        What to read, by key. Positions are the mesh's own: an entry only says their unit, m where there is none.
    cut : Cut
        Which plane.

    Returns
    -------
    RawColumns
        With all three positions. A volume is cut; of surfaces the one at the station is taken. Values that stand for
        cells are those of the cells' centres, carried to the middle of what the plane cuts out of each
        (`wakeledger.intake.readers.cfd.reconstruction`).

    Raises
    ------
    DataError
        If the file is damaged, arrays are missing, or there is no plane at the station.
    MissingPackageError
        If the package that reads it is not installed.
    """
    try:
        scale = _length_scale(columns)
        fields = {key: column for key, column in columns.items() if key not in POSITIONS}
        blocks = open_blocks(path, kind, cut.time)
        return _plane_of(blocks, fields, cut, scale, path)
    except DataError as error:
        raise error.located(file=path) from None


def _plane_of(blocks: list[Any], fields: Mapping[str, Column], cut: Cut, scale: float, path: Path) -> RawColumns:
    from wakeledger.intake.readers.cfd.package import caught_messages

    dimensions = [mesh.dimension(block) for block in blocks]
    solid = [block for block, own in zip(blocks, dimensions, strict=True) if own == max(dimensions)]
    choice = choose_arrays(solid, fields)
    if np.isnan(cut.position):
        if max(dimensions) == 3:
            raise DataError("the file holds a volume", remedy="give the station at which it is cut")
        cut = replace(cut, position=scale * float(np.mean(choice.blocks[0].points[:, cut.axis])), station=0.0)
    extent = max(float(np.ptp(np.asarray(block.points), axis=0).max()) for block in choice.blocks)
    tolerance = STATION_TOLERANCE * abs(cut.station) / scale + cut.tolerance * extent
    with caught_messages("a mesh", path):
        sections = section_of(choice, cut.axis, cut.position / scale, tolerance, line=cut.line)
    if not sections:
        raise _nothing_there(choice.blocks, cut, scale, dimension=max(dimensions))
    section, repeated = combined(sections), 0
    if choice.at == "point":
        section, repeated = merged(section)
    how = _how(section, cut, choice.at, repeated, len(solid) - len(choice.blocks))
    return _as_columns(section, cut.axis, choice.at, how)


def _length_scale(columns: Mapping[str, Column]) -> float:
    """Metres in the mesh's unit of length."""
    scales: dict[float, str] = {}
    for key in ("y", "z", *POSITIONS):
        if key not in columns:
            continue
        column = columns[key]
        if key in {"r", "theta"}:
            raise DataError(
                f"{key} is given, and a mesh has positions x, y and z",
                remedy="leave r and theta out of [plane.columns]",
            )
        axis = position_axis(column.column)
        if axis is None:
            raise DataError(
                f"the position {key} is to stand in {column.column!r}, and a mesh has positions of its own",
                remedy=f'write {key} = {{ column = "{key}", unit = "{column.unit}" }}, or leave the positions out',
            )
        if axis != "xyz".index(key):
            raise DataError(
                f"the position {key} is to stand in the mesh's {'xyz'[axis]}",
                remedy=f'write {key} = {{ column = "{key}", ... }}, and say in [plane.axes] which way each axis points',
            )
        scales.setdefault(column.scale, key)
    if len(scales) > 1:
        raise DataError(
            f"the positions {' and '.join(scales.values())} are given in different units, a mesh has one",
            remedy="give all positions in the mesh's unit of length",
        )
    return next(iter(scales), 1.0)


def _nothing_there(blocks: list[Any], cut: Cut, scale: float, *, dimension: int) -> DataError:
    letter = "xyz"[cut.axis]
    x = np.unique(np.concatenate([np.unique(np.asarray(block.points)[:, cut.axis]) for block in blocks])) * scale
    levels = x[np.concatenate([[True], np.diff(x) > 1e-4 * max(float(np.ptp(x)), 1e-30)])]
    if dimension == 3:
        found = f"the volume reaches from {letter} = {x[0]:g} to {x[-1]:g} m"
    elif levels.size == 1:
        found = f"the surface lies at {letter} = {x[0]:g} m"
    elif levels.size <= 12:
        found = f"the surfaces lie at {letter} = {', '.join(f'{level:g}' for level in levels)} m"
    else:
        found = f"the surface reaches from {letter} = {x[0]:g} to {x[-1]:g} m"
    return DataError(
        f"{found}, and the plane is wanted at {letter} = {cut.position:g} m (station {cut.station:g} m)",
        remedy="correct station or the unit of the positions, or say in trailing_edge_x where the trailing edge stands "
        "in the file",
    )


def _how(section: Section, cut: Cut, at: str, repeated: int, left_out: int) -> str:
    said = []
    if section.cut:
        said.append(f"cut out of a volume at {'xyz'[cut.axis]} = {cut.position:g} m of the file")
    if at == "cell":
        said.append("values of cells, taken at the cells' centres")
        if section.cut:
            said[-1] += " and carried to the plane by the gradient through their neighbours"
    if repeated:
        said.append(f"{repeated} point(s) that stood at the place of another were taken together with it")
    if left_out:
        said.append(f"{left_out} block(s) without these arrays were left out")
    return "; ".join(said)


def _as_columns(section: Section, axis: int, at: str, how: str) -> RawColumns:
    values: dict[str, Array] = {letter: section.points[:, k] for k, letter in enumerate("xyz")}
    for key, array in section.values.items():
        if array.ndim > 1:
            for k, letter in enumerate("uvw"):
                values[key.replace("velocity", letter)] = array[:, k].copy()
        else:
            values[key] = array
    triangles = None
    if at == "point" and section.polygons.m:
        across = [k for k in range(3) if k != axis]
        triangles = triangles_of(section.polygons, section.points[:, across])
    index, word = section.index, "point" if section.cut or at == "point" else "cell"

    def place(i: int, column: str) -> str:
        return f"array {column!r}, {word} {index[i]}" + (" of the cut" if section.cut else "")

    return RawColumns(values, index, place, triangles, section.areas, how)


def cut_volume(values: Mapping[str, Array], positions: Mapping[str, Array], cut: Cut, path: Path) -> RawColumns:
    """Cut fields on a structured volume at the station.

    Parameters
    ----------
    values : mapping of str to ndarray, shape (nk, nj, ni)
        Fields by key of ``[plane.columns]``.
    positions : mapping of str to ndarray, shape (nk, nj, ni)
        ``x``, ``y`` and ``z`` of the file's axes, m.
    cut : Cut
        Which plane.
    path : Path
        The file, for messages.

    Returns
    -------
    RawColumns
        With all three positions, m.

    Raises
    ------
    DataError
        If the volume does not reach the station.
    MissingPackageError
        If the package that cuts it is not installed.
    """
    from wakeledger.intake.readers.cfd.package import optional_package

    pyvista = optional_package("pyvista", "a volume, which is cut at the station", path)
    # The package lays points out with the first dimension fastest.
    grid = pyvista.StructuredGrid(*(positions[letter].transpose(2, 1, 0) for letter in "xyz"))
    for key, array in values.items():
        grid.point_data[key] = array.ravel()
    return _plane_of([grid], {key: Column(key, "1") for key in values}, cut, 1.0, path)
