"""A mesh as bare arrays: dimension, corners and centres of its cells, and their reach along an axis."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from wakeledger.core.grid import Array
from wakeledger.intake.readers.cfd.polygons import Polygons

Indices = NDArray[np.int64]
_POLYHEDRON = 42


def dimension(block: Any) -> int:
    """Highest dimension of a block's cells, 0 where it has points only."""
    if not block.n_cells:
        return 0
    if is_structured(block):
        return sum(1 for length in block.dimensions if length > 1)
    return max(_dimension_of_type(int(kind)) for kind in np.unique(_cell_types(block)))


def _dimension_of_type(kind: int) -> int:
    from vtkmodules.vtkCommonDataModel import vtkGenericCell

    cell = vtkGenericCell.InstantiateCell(kind)
    return 0 if cell is None else int(cell.GetCellDimension())


def _cell_types(block: Any) -> NDArray[np.int64]:
    if hasattr(block, "celltypes"):
        return np.asarray(block.celltypes, dtype=np.int64)
    # Of a surface: 1 for points, 3 for lines, 7 for polygons and strips of triangles.
    kinds = ((1, block.n_verts), (3, block.n_lines), (7, block.n_cells - block.n_verts - block.n_lines))
    return np.array([kind for kind, number in kinds if number], dtype=np.int64)


def is_structured(block: Any) -> bool:
    """Whether a block's cells follow from its dimensions."""
    return hasattr(block, "dimensions")


def cell_dimensions(block: Any) -> NDArray[np.int64]:
    """Dimension of each cell of an unstructured block, shape (m,)."""
    kinds, index = np.unique(_cell_types(block), return_inverse=True)
    return np.array([_dimension_of_type(int(kind)) for kind in kinds], dtype=np.int64)[index]


def hidden(block: Any) -> NDArray[np.bool_]:
    """Cells that another block holds too, or that are blanked out."""
    if "vtkGhostType" in block.cell_data:
        ghost: NDArray[np.bool_] = np.asarray(block.cell_data["vtkGhostType"]) != 0
        return ghost
    return np.zeros(block.n_cells, dtype=bool)


def corners(block: Any) -> Polygons:
    """Corners of each cell of an unstructured block, in no particular order around it."""
    return _cell_array(block.GetCells())


def reach(block: Any, axis: int) -> tuple[Array, Array]:
    """Lowest and highest position of each cell's corners along an axis, shapes (m,)."""
    x = np.asarray(block.points)[:, axis].astype(float)
    if not is_structured(block):
        cells = corners(block)
        if not cells.m:
            return np.zeros(0), np.zeros(0)
        along = x[cells.corners]
        return np.minimum.reduceat(along, cells.offsets[:-1]), np.maximum.reduceat(along, cells.offsets[:-1])
    low = high = x.reshape(block.dimensions[::-1])
    for direction in range(3):
        if low.shape[direction] > 1:
            first = tuple(slice(None, -1) if k == direction else slice(None) for k in range(3))
            second = tuple(slice(1, None) if k == direction else slice(None) for k in range(3))
            low, high = np.minimum(low[first], low[second]), np.maximum(high[first], high[second])
    return low.ravel(), high.ravel()


def with_neighbours(block: Any, wanted: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """The wanted cells and all that share a corner with one, shape (m,)."""
    if is_structured(block):
        shape = [max(length - 1, 1) for length in block.dimensions[::-1]]
        grown = ndimage.binary_dilation(wanted.reshape(shape), np.ones((3, 3, 3)))
        return np.asarray(grown).ravel()
    cells = corners(block)
    touched = np.zeros(block.n_points, dtype=bool)
    touched[cells.corners[np.repeat(wanted, cells.sizes)]] = True
    return np.maximum.reduceat(touched[cells.corners], cells.offsets[:-1])


def centres(grid: Any) -> Array:
    """Centre of volume of each cell of an unstructured grid, shape (m, 3).

    The mean of the corners, exact for boxes, prisms and tetrahedra; of polyhedra from their faces, whose hanging nodes
    would draw the mean to one side.
    """
    points, cells = np.asarray(grid.points, dtype=float), corners(grid)
    found: Array = np.add.reduceat(points[cells.corners], cells.offsets[:-1], axis=0) / cells.sizes[:, None]
    polyhedra = np.flatnonzero(np.asarray(grid.celltypes) == _POLYHEDRON)
    if polyhedra.size:
        found[polyhedra] = _polyhedron_centres(grid, points, polyhedra, found[polyhedra])
    return found


def _polyhedron_centres(grid: Any, points: Array, wanted: Indices, inner: Array) -> Array:
    """From the pyramids that each side of each face makes with a point inside the cell."""
    faces, of_cell = _cell_array(grid.GetPolyhedronFaces()), _cell_array(grid.GetPolyhedronFaceLocations())
    count = of_cell.sizes[wanted]
    face = of_cell.corners[_ranges(of_cell.offsets[wanted], count)]
    cell_of_face = np.repeat(np.arange(wanted.size), count)
    sides = faces.sizes[face]
    entry = _ranges(faces.offsets[face], sides)
    face_of_side = np.repeat(np.arange(face.size), sides)
    last = np.cumsum(sides) - 1
    following = np.arange(entry.size) + 1
    following[last] = last - sides + 1
    p = points[faces.corners[entry]]
    q = p[following]
    middle = np.stack([np.bincount(face_of_side, p[:, k]) / sides for k in range(3)], axis=-1)[face_of_side]
    cell = cell_of_face[face_of_side]
    inside = inner[cell]
    volume = np.abs(np.einsum("ij,ij->i", middle - inside, np.cross(p - inside, q - inside)))
    centre = (p + q + middle + inside) / 4.0
    total = np.bincount(cell, volume, wanted.size)
    return np.stack([np.bincount(cell, volume * centre[:, k], wanted.size) / total for k in range(3)], axis=-1)


def _cell_array(array: Any) -> Polygons:
    return Polygons(
        _numbers(array.GetConnectivityArray()).astype(np.int64),
        _numbers(array.GetOffsetsArray()).astype(np.int64),
    )


def _ranges(start: Indices, count: Indices) -> Indices:
    """The numbers start, start + 1, ... of each range, one range after the other."""
    first = np.repeat(np.cumsum(count) - count, count)
    return np.repeat(start, count) + np.arange(int(count.sum())) - first


def surface_polygons(block: Any) -> tuple[Array, Polygons, Indices, Indices]:
    """Polygons of a block of surfaces.

    Returns
    -------
    points : ndarray, shape (n, 3)
    polygons : Polygons
        m of them.
    point, cell : ndarray of int, shapes (n,), (m,)
        Which point and cell of the block each was.
    """
    surface = block
    if not hasattr(block, "n_strips") or block.n_strips:
        surface = _as_surface(block)
    polygons = _cell_array(surface.GetPolys())
    before = surface.GetNumberOfVerts() + surface.GetNumberOfLines()
    points = _numbers(surface.GetPoints().GetData()).astype(float)
    if surface is block:
        point, cell = np.arange(points.shape[0]), np.arange(polygons.m) + before
    else:
        point = _numbers(surface.GetPointData().GetArray("vtkOriginalPointIds")).astype(np.int64)
        cell = _numbers(surface.GetCellData().GetArray("vtkOriginalCellIds")).astype(np.int64)[before:]
    return points, polygons, point, cell


def _as_surface(block: Any) -> Any:
    from vtkmodules.vtkFiltersCore import vtkTriangleFilter
    from vtkmodules.vtkFiltersGeometry import vtkGeometryFilter

    if hasattr(block, "n_strips"):
        numbered = block.copy(deep=False)
        numbered.point_data["vtkOriginalPointIds"] = np.arange(block.n_points)
        numbered.cell_data["vtkOriginalCellIds"] = np.arange(block.n_cells)
        triangulated = vtkTriangleFilter()
        triangulated.SetInputData(numbered)
        triangulated.Update()
        return triangulated.GetOutput()
    surface = vtkGeometryFilter()
    surface.SetInputData(block)
    surface.SetPassThroughPointIds(True)
    surface.SetPassThroughCellIds(True)
    surface.Update()
    return surface.GetOutput()


def _numbers(array: Any) -> Any:
    """An array of the package as one of numpy's."""
    from vtkmodules.util import numpy_support

    convert: Any = numpy_support.vtk_to_numpy
    return convert(array)
