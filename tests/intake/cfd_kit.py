"""Meshes and files of computed flow written by hand or by public writers, all of one analytic field."""

from pathlib import Path

import numpy as np

from wakeledger.core.points import Column

#: Coefficients of 1, x, y, z of each variable: no two alike, so that nothing can be taken for something else.
LINEAR = {
    "u": (30.0, 0.5, -2.0, 3.0),
    "v": (1.0, -0.3, 4.0, -1.5),
    "w": (-2.0, 0.2, 1.25, 5.0),
    "p": (7.0, 0.7, -3.5, 2.25),
}
COLUMNS = {
    "velocity": Column("U", "m/s"),
    "static_pressure": Column("p", "m2/s2", kinematic=True),
}
STRETCHED_Y = np.sign(np.linspace(-1, 1, 15)) * np.abs(np.linspace(-1, 1, 15)) ** 1.5
STRETCHED_Z = np.linspace(-0.8, 0.75, 12) ** 3 + 0.3
STRETCHED_X = np.array([0.5, 0.8, 1.2, 1.5, 2.0, 2.6, 3.3])


def linear(name, points):
    """A variable at places, shape (..., 3)."""
    a, *slope = LINEAR[name]
    return a + points @ np.array(slope)


def arrays(points):
    """What a solver would write at places, shape (n, 3)."""
    return {"p": linear("p", points), "U": np.stack([linear(name, points) for name in "uvw"], axis=-1)}


def with_fields(mesh, at, *, fields=arrays):
    """A copy of a mesh that carries the fields at its points or for its cells."""
    mesh = mesh.copy()
    places = mesh.points if at == "point" else mesh.cell_centers().points
    data = mesh.point_data if at == "point" else mesh.cell_data
    for name, values in fields(np.asarray(places, dtype=float)).items():
        data[name] = values
    return mesh


def boxes(lines, *, split=None):
    """Boxes between lines along x, y and z, as rows of (x0, x1, y0, y1, z0, z1); some split in four along y and z.

    `split` says of the middle (y, z) of each box whether it is.
    """
    found = []
    for x0, x1 in zip(lines[0][:-1], lines[0][1:], strict=True):
        for y0, y1 in zip(lines[1][:-1], lines[1][1:], strict=True):
            for z0, z1 in zip(lines[2][:-1], lines[2][1:], strict=True):
                ym, zm = (y0 + y1) / 2, (z0 + z1) / 2
                if split is not None and split(ym, zm):
                    found += [(x0, x1, *y, *z) for y in ((y0, ym), (ym, y1)) for z in ((z0, zm), (zm, z1))]
                else:
                    found.append((x0, x1, y0, y1, z0, z1))
    return np.array(found)


def centres(cells):
    return np.column_stack([(cells[:, 2 * k] + cells[:, 2 * k + 1]) / 2 for k in range(3)])


def hexahedra(cells):
    """Boxes as hexahedra that know nothing of hanging nodes."""
    import pyvista

    corner = np.array([[0, 0, 0], [1, 0, 0], [1, 1, 0], [0, 1, 0], [0, 0, 1], [1, 0, 1], [1, 1, 1], [0, 1, 1]])
    points = np.stack([cells[:, 2 * k + corner[:, k]] for k in range(3)], axis=-1).reshape(-1, 3)
    distinct, index = np.unique(np.round(points, 12), axis=0, return_inverse=True)
    index = index.reshape(-1, 8)
    return pyvista.UnstructuredGrid({pyvista.CellType.HEXAHEDRON: index}, distinct)


def faces(cells):
    """Points, faces with every point on their edges, and the two cells of each (-1 outside) of boxes.

    The corners of a face run so that its normal points out of the first cell.
    """
    corner = [(i, j, k) for i in (0, 1) for j in (2, 3) for k in (4, 5)]
    points = np.unique(np.round(np.concatenate([cells[:, list(each)] for each in corner]), 12), axis=0)
    cells = np.round(cells, 12)
    polygons, owner, neighbour = [], [], []
    for axis in range(3):
        at_level = {level: np.flatnonzero(points[:, axis] == level) for level in np.unique(points[:, axis])}
        others = [k for k in range(3) if k != axis]
        low, high = cells[:, 2 * axis], cells[:, 2 * axis + 1]
        paired = {(side, i): False for side in (0, 1) for i in range(len(cells))}
        first, second = np.nonzero(high[:, None] == low[None, :])
        for i, j in zip(first, second, strict=True):
            rectangle = [
                (max(cells[i, 2 * k], cells[j, 2 * k]), min(cells[i, 2 * k + 1], cells[j, 2 * k + 1])) for k in others
            ]
            if all(b > a for a, b in rectangle):
                paired[1, i] = paired[0, j] = True
                polygons.append(_around(points, at_level[high[i]], axis, others, rectangle, outward=True))
                owner.append(i)
                neighbour.append(j)
        for (side, i), done in paired.items():
            if not done:
                rectangle = [(cells[i, 2 * k], cells[i, 2 * k + 1]) for k in others]
                polygons.append(
                    _around(points, at_level[cells[i, 2 * axis + side]], axis, others, rectangle, outward=side == 1)
                )
                owner.append(i)
                neighbour.append(-1)
    return points, polygons, np.array(owner), np.array(neighbour)


def _around(points, candidates, axis, others, rectangle, *, outward):
    """Numbers of the points on the perimeter of a rectangle, around the axis or the other way."""
    (a0, a1), (b0, b1) = rectangle
    a, b = points[candidates, others[0]], points[candidates, others[1]]
    within = (a >= a0) & (a <= a1) & (b >= b0) & (b <= b1)
    edge = np.flatnonzero(within & ((a == a0) | (a == a1) | (b == b0) | (b == b1)))
    # By direction from the middle in units of the half sides: the perimeter is convex.
    angle = np.arctan2((b[edge] - (b0 + b1) / 2) / (b1 - b0), (a[edge] - (a0 + a1) / 2) / (a1 - a0))
    around = candidates[edge[np.argsort(angle)]]
    # others are (y, z), (x, z), (x, y): counter-clockwise about x and z, clockwise about y.
    return list(around if outward == (axis != 1) else around[::-1])


def polyhedra(cells):
    """Boxes as polyhedra whose faces have hanging nodes."""
    import pyvista

    points, polygons, owner, neighbour = faces(cells)
    of_cell = [[] for _ in cells]
    for polygon, i, j in zip(polygons, owner, neighbour, strict=True):
        of_cell[i].append(polygon)
        if j >= 0:
            of_cell[j].append(polygon[::-1])
    stream = []
    for own in of_cell:
        flat = [len(own)]
        for polygon in own:
            flat += [len(polygon), *polygon]
        stream += [len(flat), *flat]
    return pyvista.UnstructuredGrid(np.array(stream), np.full(len(cells), pyvista.CellType.POLYHEDRON), points)


HEADER = "FoamFile\n{{\n    version 2.0;\n    format ascii;\n    class {kind};\n    object {name};\n}}\n"


def write_case(folder, cells, times, *, fields=arrays):
    """An OpenFOAM case of boxes with hanging nodes; `times` maps folder names to a factor on the fields."""
    folder = Path(folder)
    points, polygons, owner, neighbour = faces(cells)
    inner = np.flatnonzero(neighbour >= 0)
    inner = inner[np.lexsort((neighbour[inner], owner[inner]))]
    order = np.concatenate([inner, np.flatnonzero(neighbour < 0)])
    mesh = folder / "constant" / "polyMesh"
    mesh.mkdir(parents=True)
    (folder / "system").mkdir()

    def write(path, kind, body):
        path.write_text(HEADER.format(kind=kind, name=path.name) + body)

    def listed(items):
        return f"{len(items)}\n(\n" + "\n".join(items) + "\n)\n"

    write(folder / "system" / "controlDict", "dictionary", "application simpleFoam;\nstartTime 0;\ndeltaT 1;\n")
    write(mesh / "points", "vectorField", listed([f"({a:.12g} {b:.12g} {c:.12g})" for a, b, c in points]))
    write(mesh / "faces", "faceList", listed([f"{len(polygons[f])}({' '.join(map(str, polygons[f]))})" for f in order]))
    write(mesh / "owner", "labelList", listed([str(owner[f]) for f in order]))
    write(mesh / "neighbour", "labelList", listed([str(neighbour[f]) for f in inner]))
    patch = f"outside\n{{\n    type patch;\n    nFaces {len(order) - len(inner)};\n    startFace {len(inner)};\n}}"
    write(mesh / "boundary", "polyBoundaryMesh", listed([patch]))
    values = fields(centres(cells))
    for time, factor in times.items():
        (folder / time).mkdir()
        for name, array in values.items():
            vector = array.ndim > 1
            rows = [f"({' '.join(f'{x:.12g}' for x in row)})" if vector else f"{row:.12g}" for row in factor * array]
            kind = "vector" if vector else "scalar"
            write(
                folder / time / name,
                f"vol{kind.capitalize()}Field",
                f"dimensions [0 1 -1 0 0 0 0];\ninternalField nonuniform List<{kind}>\n{listed(rows)};\n"
                "boundaryField\n{\n    outside { type zeroGradient; }\n}\n",
            )
    return folder


def write_cgns(path, x, y, z, fields, location):
    """A CGNS file of one structured zone, arrays of shape (nk, nj, ni), by the HDF5 layout of its standard."""
    import h5py

    def text(value):
        return np.frombuffer(value.encode(), dtype=np.int8)

    def node(parent, name, label, data=None, kind="MT"):
        group = parent.create_group(name, track_order=True)
        for key, value, length in (("name", name, 33), ("label", label, 33), ("type", kind, 3)):
            group.attrs.create(key, np.bytes_(value), dtype=f"S{length}")
        group.attrs.create("flags", np.array([1], dtype=np.int32))
        if data is not None:
            group.create_dataset(" data", data=data)
        return group

    nk, nj, ni = x.shape
    with h5py.File(path, "w", track_order=True) as file:
        for key, value, length in (("name", "HDF5 MotherNode", 33), ("label", "Root Node of HDF5 File", 33)):
            file.attrs.create(key, np.bytes_(value), dtype=f"S{length}")
        file.attrs.create("type", np.bytes_("MT"), dtype="S3")
        file.create_dataset(" format", data=text("IEEE_LITTLE_32"))
        file.create_dataset(" hdf5version", data=text("HDF5 Version 1.14.0".ljust(33, "\0")))
        node(file, "CGNSLibraryVersion", "CGNSLibraryVersion_t", np.array([3.4], dtype=np.float32), "R4")
        base = node(file, "Base", "CGNSBase_t", np.array([3, 3], dtype=np.int32), "I4")
        sizes = np.array([[ni, nj, nk], [ni - 1, nj - 1, nk - 1], [0, 0, 0]], dtype=np.int32)
        zone = node(base, "Zone", "Zone_t", sizes, "I4")
        node(zone, "ZoneType", "ZoneType_t", text("Structured"), "C1")
        grid = node(zone, "GridCoordinates", "GridCoordinates_t")
        for letter, array in zip("XYZ", (x, y, z), strict=True):
            node(grid, f"Coordinate{letter}", "DataArray_t", array, "R8")
        solution = node(zone, "FlowSolution", "FlowSolution_t")
        node(solution, "GridLocation", "GridLocation_t", text(location), "C1")
        for name, array in fields.items():
            node(solution, name, "DataArray_t", array, "R8")


def check(points, station, *, rtol=2e-6, places=None):
    """Every point carries the analytic field of its own place."""
    at = np.column_stack([np.full(points.n, station), points.y, points.z])
    for name, key in (("u", "u"), ("v", "v"), ("w", "w"), ("p", "static_pressure")):
        truth = linear(name, at)
        # Single precision of files and of the package that cuts: 1e-7 of the largest value, some operations long.
        np.testing.assert_allclose(points.channels[key].values, truth, rtol=0, atol=rtol * np.abs(truth).max())
    if places is not None:
        found = np.unique(np.round(np.column_stack([points.y, points.z]), 5), axis=0)
        wanted = np.unique(np.round(places, 5), axis=0)
        np.testing.assert_allclose(found, wanted, atol=2e-5)
