"""From a mesh to the points of one plane: cut out of a volume, or a surface that lies in the plane already."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.intake.readers.cfd import mesh
from wakeledger.intake.readers.cfd.arrays import ArrayPart, Choice
from wakeledger.intake.readers.cfd.polygons import Polygons, areas_and_centres, joined, none
from wakeledger.intake.readers.cfd.reconstruction import at_places

Indices = NDArray[np.int64]
#: Mesh points closer to the plane than this share of the mesh's length would be cut twice or not at all.
_ON_THE_PLANE = 1e-6
#: Share of the station by which a surface may be off it.
STATION_TOLERANCE = 0.01


@dataclass(frozen=True, eq=False)
class Section:
    """Points of a plane with their values.

    Attributes
    ----------
    points : ndarray, shape (n, 3)
        Along the file's axes, in its unit of length.
    values : mapping of str to ndarray, shape (n,) or (n, 3)
        By key of ``[plane.columns]``.
    polygons : Polygons
        Between the points where values stand at points, else none.
    areas : ndarray, shape (n,), or None
        Area of the cell of each point where values stand for cells.
    index : ndarray of int, shape (n,)
        Point or cell of the file, counted from 1; of a cut its place in the list.
    cut : bool
        Whether the plane was cut out of a volume.
    """

    points: Array
    values: Mapping[str, Array]
    polygons: Polygons
    areas: Array | None
    index: Indices
    cut: bool


def section_of(choice: Choice, axis: int, position: float, tolerance: float, *, line: bool) -> list[Section]:
    """The plane across one axis of a mesh.

    Parameters
    ----------
    choice : Choice
        Blocks of one dimension and their arrays.
    axis : {0, 1, 2}
        The axis across which the plane lies.
    position : float
        Where, in the mesh's unit of length.
    tolerance : float
        By how much points may be off, same unit.
    line : bool
        Whether a line across the stream is wanted, which may be cut out of a surface.

    Returns
    -------
    list of Section
        One for each block that reaches the plane.

    Raises
    ------
    DataError
        If no block does.
    """
    dimension = max(mesh.dimension(block) for block in choice.blocks)
    along = [np.asarray(block.points)[:, axis].astype(float) for block in choice.blocks]
    low, high = min(float(x.min()) for x in along), max(float(x.max()) for x in along)
    solid = dimension == 3 or (line and dimension == 2 and high - low > 2 * tolerance)
    if not solid:
        found = [_level(block, choice, axis, position, tolerance) for block in choice.blocks]
        return [section for section in found if section is not None]
    if not low - tolerance <= position <= high + tolerance:
        return []
    where = _off_the_points(position, along, low, high)
    found = [_cut(block, choice, axis, where, position) for block in choice.blocks]
    return [section for section in found if section is not None]


def _off_the_points(position: float, along: list[Array], low: float, high: float) -> float:
    """The position moved so little that no mesh point lies on the plane."""
    near = _ON_THE_PLANE * (high - low)
    position = min(max(position, low), high)
    while any(np.abs(x - position).min() < near for x in along):
        position += 2 * near if position < 0.5 * (low + high) else -2 * near
    return position


def _array(block: Any, at: str, part: ArrayPart) -> Array:
    data = block.cell_data if at == "cell" else block.point_data
    array = np.asarray(data[part.name]).astype(float)
    return array if part.component is None else array[:, part.component]


def _values(block: Any, choice: Choice) -> dict[str, Array]:
    values = {key: _array(block, choice.at, part) for key, part in choice.parts.items()}
    if choice.at == "point" and "vtkValidPointMask" in block.point_data:
        invalid = np.asarray(block.point_data["vtkValidPointMask"]) == 0
        for array in values.values():
            array[invalid] = np.nan
    return values


def _level(block: Any, choice: Choice, axis: int, position: float, tolerance: float) -> Section | None:
    """The part of a surface or cloud of points that lies in the plane."""
    values = _values(block, choice)
    if mesh.dimension(block) < 2:
        points = np.asarray(block.points).astype(float)
        if choice.at == "cell":
            raise DataError(
                "the values stand for cells that are points or lines", remedy="write a surface, or values at points"
            )
        chosen = np.flatnonzero(np.abs(points[:, axis] - position) <= tolerance)
        if not chosen.size:
            return None
        kept = {key: array[chosen] for key, array in values.items()}
        return Section(points[chosen], kept, none(), None, chosen + 1, cut=False)
    points, polygons, point, cell = mesh.surface_polygons(block)
    near = np.abs(points[:, axis] - position) <= tolerance
    members = np.add.reduceat(near[polygons.corners].astype(int), polygons.offsets[:-1])
    partly = (members > 0) & (members < polygons.sizes)
    if partly.any():
        raise DataError(
            f"the surface is no plane across the stream, it reaches from {points[:, axis].min():g} to "
            f"{points[:, axis].max():g} along the file's {'xyz'[axis]} axis",
            remedy="give a plane across the stream, or the volume, which is cut at the station",
        )
    wanted = (members > 0) & ~mesh.hidden(block)[cell]
    polygons, cell = polygons.kept(wanted), cell[wanted]
    if not polygons.m:
        return None
    across = [k for k in range(3) if k != axis]
    if choice.at == "cell":
        area, centre = areas_and_centres(polygons, points[:, across])
        places = np.empty((polygons.m, 3))
        places[:, across], places[:, axis] = centre, position
        kept = {key: array[cell] for key, array in values.items()}
        return Section(places, kept, none(), np.abs(area), cell + 1, cut=False)
    used = np.unique(polygons.corners)
    table = np.full(points.shape[0], -1, dtype=np.int64)
    table[used] = np.arange(used.size)
    kept = {key: array[point[used]] for key, array in values.items()}
    return Section(points[used], kept, polygons.renumbered(table), None, point[used] + 1, cut=False)


def _cut(block: Any, choice: Choice, axis: int, where: float, position: float) -> Section | None:
    low, high = mesh.reach(block, axis)
    crossed = (low < where) & (high > where) & ~mesh.hidden(block)
    if not mesh.is_structured(block):
        crossed &= mesh.cell_dimensions(block) == mesh.dimension(block)
    if not crossed.any():
        return None
    light = _without_other_arrays(block, choice)
    if choice.at == "cell":
        return _cut_cells(light, choice, crossed, axis, where, position)
    cut = _sliced(light.extract_cells(np.flatnonzero(crossed)), axis, where)
    points = np.asarray(cut.points).astype(float)
    points[:, axis] = position
    polygons = mesh.surface_polygons(cut)[1]
    return Section(points, _values(cut, choice), polygons, None, np.arange(points.shape[0]) + 1, cut=True)


def _without_other_arrays(block: Any, choice: Choice) -> Any:
    light = block.copy(deep=False)
    wanted = {part.name for part in choice.parts.values()} | {"vtkValidPointMask"}
    for at, data in (("point", light.point_data), ("cell", light.cell_data)):
        for name in list(data.keys()):
            if at != choice.at or name not in wanted:
                del data[name]
    return light


def _sliced(grid: Any, axis: int, where: float) -> Any:
    origin = np.array(grid.center, dtype=float)
    origin[axis] = where
    return grid.slice(normal="xyz"[axis], origin=origin, generate_triangles=False)


def _cut_cells(
    block: Any, choice: Choice, crossed: NDArray[np.bool_], axis: int, where: float, position: float
) -> Section:
    """What the plane cuts out of each cell: its centre, its area and the cell's value carried there."""
    near = mesh.with_neighbours(block, crossed) & ~mesh.hidden(block)
    if not mesh.is_structured(block):
        near &= mesh.cell_dimensions(block) == mesh.dimension(block)
    grid = block.extract_cells(np.flatnonzero(near))
    own = np.flatnonzero(crossed[near])
    numbered = grid.extract_cells(own)
    numbered.clear_data()
    numbered.cell_data["number"] = np.arange(own.size)
    cut = _sliced(numbered, axis, where)
    number = np.asarray(cut.cell_data["number"]).astype(np.int64)
    across = [k for k in range(3) if k != axis]
    pieces, areas = _pieces(cut, across)
    weight = np.ones_like(areas) if not areas.any() else areas
    total = np.bincount(number, weight, own.size)
    found = np.flatnonzero(total > 0)
    places = np.empty((found.size, 3))
    for k, letter in enumerate(across):
        places[:, letter] = (np.bincount(number, weight * pieces[:, k], own.size)[found]) / total[found]
    places[:, axis] = where
    arrays = _values(grid, choice)
    stacked = np.column_stack(list(arrays.values()))
    at = at_places(
        np.asarray(grid.points).astype(float), mesh.corners(grid), mesh.centres(grid), stacked, own[found], places
    )
    values, column = {}, 0
    for key, array in arrays.items():
        width = 1 if array.ndim == 1 else array.shape[1]
        values[key] = at[:, column] if array.ndim == 1 else at[:, column : column + width]
        column += width
    places[:, axis] = position
    area = total[found].astype(float) if areas.any() else None
    return Section(places, values, none(), area, np.arange(found.size) + 1, cut=True)


def _pieces(cut: Any, across: list[int]) -> tuple[Array, Array]:
    """Centre, shape (m, 2), and area of each piece of a cut; of lines, cut out of a surface, the middles."""
    if cut.n_lines and not cut.GetNumberOfPolys():
        ends = np.asarray(cut.lines).reshape(-1, 3)[:, 1:]
        return np.asarray(cut.points)[ends].mean(axis=1)[:, across], np.zeros(ends.shape[0])
    points, polygons, _, _ = mesh.surface_polygons(cut)
    area, centre = areas_and_centres(polygons, points[:, across])
    return centre, np.abs(area)


def combined(sections: list[Section]) -> Section:
    """One section of several blocks."""
    if len(sections) == 1:
        return sections[0]
    keys = sections[0].values.keys()
    areas = [section.areas for section in sections if section.areas is not None]
    return Section(
        points=np.concatenate([section.points for section in sections]),
        values={key: np.concatenate([section.values[key] for section in sections]) for key in keys},
        polygons=joined([section.polygons for section in sections], [section.points.shape[0] for section in sections]),
        areas=np.concatenate(areas) if len(areas) == len(sections) else None,
        index=np.concatenate([section.index for section in sections]),
        cut=sections[0].cut,
    )


#: Points closer than this share of their largest coordinate are one, in single precision.
_ONE_PLACE = 1e-6
#: Values of one place that differ by more than this share of their range are left to be refused.
_ONE_VALUE = 0.01


def merged(section: Section) -> tuple[Section, int]:
    """Points that stand twice at one place taken together, where they agree.

    Parameters
    ----------
    section : Section
        Values at points.

    Returns
    -------
    section : Section
        Means of the values at each place.
    number : int
        How many points went away.
    """
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components
    from scipy.spatial import cKDTree

    points = section.points
    pairs = cKDTree(points).query_pairs(_ONE_PLACE * float(np.abs(points).max()) / 2, output_type="ndarray")
    if pairs.size:
        agree = np.ones(len(pairs), dtype=bool)
        for array in section.values.values():
            columns = array.reshape(points.shape[0], -1)
            span = np.nanmax(columns, axis=0, initial=-np.inf) - np.nanmin(columns, axis=0, initial=np.inf)
            apart = np.abs(columns[pairs[:, 0]] - columns[pairs[:, 1]])
            agree &= ~(apart > _ONE_VALUE * np.abs(span)).any(axis=1)
        pairs = pairs[agree]
    if not pairs.size:
        return section, 0
    n = points.shape[0]
    links = coo_array((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(n, n))
    count, label = connected_components(links, directed=False)
    first = np.full(count, n, dtype=np.int64)
    np.minimum.at(first, label, np.arange(n))
    order = np.argsort(first)
    place = np.empty(count, dtype=np.int64)
    place[order] = np.arange(count)
    label = place[label]
    size = np.bincount(label)

    def mean(array: Array) -> Array:
        if array.ndim > 1:
            return np.stack([mean(array[:, k]) for k in range(array.shape[1])], axis=-1)
        return np.asarray(np.bincount(label, array) / size)

    return (
        Section(
            points=points[first[order]],
            values={key: mean(array) for key, array in section.values.items()},
            polygons=section.polygons.renumbered(label.astype(np.int64)),
            areas=None,
            index=section.index[first[order]],
            cut=section.cut,
        ),
        n - count,
    )
