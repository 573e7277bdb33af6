"""VTK files of every kind, all of one analytic field: read to the places and values it has, cut or not."""

import numpy as np
import pytest

from wakeledger.core.errors import DataError
from wakeledger.core.points import Column
from wakeledger.intake.readers import read_points

IDENTITY = np.eye(3)
STATION = 1.37


def volumes(cfd):
    """Volumes about the station by kind, with the extension of the XML format."""
    import pyvista

    x, y, z = cfd.STRETCHED_X, cfd.STRETCHED_Y, cfd.STRETCHED_Z
    mesh = np.meshgrid(x, y, z, indexing="ij")
    structured = pyvista.StructuredGrid(*mesh)
    halves = [
        pyvista.StructuredGrid(*np.meshgrid(x, part, z, indexing="ij")).cast_to_unstructured_grid()
        for part in (y[:8], y[7:])
    ]
    return {
        "structured": (structured, ".vts"),
        "rectilinear": (pyvista.RectilinearGrid(x, y, z), ".vtr"),
        "image": (pyvista.ImageData(dimensions=(5, 9, 8), spacing=(0.7, 0.25, 0.2), origin=(0.5, -1, -0.4)), ".vti"),
        "hexahedra": (structured.cast_to_unstructured_grid(), ".vtu"),
        "tetrahedra": (structured.triangulate(), ".vtu"),
        "multiblock": (pyvista.MultiBlock(halves), ".vtm"),
    }


def planes(cfd):
    """Planes at the station by kind."""
    import pyvista

    y, z = cfd.STRETCHED_Y, cfd.STRETCHED_Z
    structured = pyvista.StructuredGrid(*np.meshgrid([STATION], y, z, indexing="ij"))
    surface = pyvista.PolyData(*_quads(y, z))
    return {
        "structured": (structured, ".vts"),
        "rectilinear": (pyvista.RectilinearGrid([STATION], y, z), ".vtr"),
        "image": (pyvista.ImageData(dimensions=(1, 9, 8), spacing=(1, 0.25, 0.2), origin=(STATION, -1, -0.4)), ".vti"),
        "polydata": (surface, ".vtp"),
        "triangles": (surface.triangulate(), ".vtp"),
        "unstructured": (surface.cast_to_unstructured_grid(), ".vtu"),
    }


def _quads(y, z):
    yy, zz = np.meshgrid(y, z, indexing="ij")
    points = np.column_stack([np.full(yy.size, STATION), yy.ravel(), zz.ravel()])
    number = np.arange(yy.size).reshape(yy.shape)
    corners = np.stack([number[:-1, :-1], number[1:, :-1], number[1:, 1:], number[:-1, 1:]], axis=-1).reshape(-1, 4)
    return points, np.column_stack([np.full(len(corners), 4), corners]).ravel()


def loaded(cfd, mesh, at):
    import pyvista

    if isinstance(mesh, pyvista.MultiBlock):
        return pyvista.MultiBlock([cfd.with_fields(block, at) for block in mesh])
    return cfd.with_fields(mesh, at)


def read(cfd, path, station=STATION, **options):
    return read_points(path, cfd.COLUMNS, axes=IDENTITY, station=station, **options)


@pytest.mark.parametrize("binary", [True, False], ids=["binary", "ascii"])
@pytest.mark.parametrize("at", ["point", "cell"])
@pytest.mark.parametrize("kind", ["structured", "rectilinear", "image", "hexahedra", "tetrahedra", "multiblock"])
def test_a_volume_is_cut_at_the_station(cfd, tmp_path, kind, at, binary):
    mesh, extension = volumes(cfd)[kind]
    # The file's name says nothing of its kind.
    path = tmp_path / f"volume{extension}"
    loaded(cfd, mesh, at).save(path, binary=binary)
    for station in (STATION, 2.0):
        points = read(cfd, path, station)
        cfd.check(points, station)
        y, z = np.array(mesh.bounds).reshape(3, 2)[1:]
        assert points.n > 40
        # A plane of points reaches the mesh's edge, one of cells half a cell less.
        assert np.ptp(points.y) == pytest.approx(np.ptp(y), rel=1e-6 if at == "point" else 0.2)
        area = float(np.ptp(y) * np.ptp(z))
        if at == "cell":
            assert points.triangles is None
            assert points.areas.sum() == pytest.approx(area, rel=1e-6)
        else:
            assert points.areas is None
            assert area_of(points) == pytest.approx(area, rel=1e-6)
        assert "cut out of a volume" in points.how


def area_of(points):
    corner = np.column_stack([points.y, points.z])[points.triangles]
    a, b = corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]
    return 0.5 * np.abs(a[:, 0] * b[:, 1] - a[:, 1] * b[:, 0]).sum()


@pytest.mark.parametrize("legacy", [True, False], ids=["legacy", "xml"])
@pytest.mark.parametrize("at", ["point", "cell"])
@pytest.mark.parametrize("kind", ["structured", "rectilinear", "image", "polydata", "triangles", "unstructured"])
def test_a_plane_is_taken_as_it_is(cfd, tmp_path, kind, at, legacy):
    mesh, extension = planes(cfd)[kind]
    path = tmp_path / f"plane{'.vtk' if legacy else extension}"
    mesh = cfd.with_fields(mesh, at)
    mesh.save(path, binary=not legacy)
    named = tmp_path / "plane.dat"
    path.rename(named)
    points = read(cfd, named)
    places = mesh.points if at == "point" else mesh.cell_centers().points
    cfd.check(points, STATION, places=np.asarray(places)[:, 1:])
    assert points.n == (mesh.n_points if at == "point" else mesh.n_cells)
    y, z = np.array(mesh.bounds).reshape(3, 2)[1:]
    total = points.areas.sum() if at == "cell" else area_of(points)
    assert total == pytest.approx(float(np.ptp(y) * np.ptp(z)), rel=1e-6)
    assert "cut" not in points.how


@pytest.mark.parametrize("legacy", [True, False], ids=["legacy", "xml"])
@pytest.mark.parametrize("kind", ["structured", "rectilinear", "image", "hexahedra", "tetrahedra"])
def test_legacy_volumes_are_cut_too(cfd, tmp_path, kind, legacy):
    mesh, extension = volumes(cfd)[kind]
    path = tmp_path / f"volume{'.vtk' if legacy else extension}"
    cfd.with_fields(mesh, "point").save(path)
    cfd.check(read(cfd, path), STATION)


def test_a_cut_equals_its_slice(cfd, tmp_path):
    # A station on mesh points: the plane's own points and values, not means with the next layer.
    import pyvista

    mesh, _ = volumes(cfd)["rectilinear"]
    cfd.with_fields(mesh, "point").save(tmp_path / "volume.vtr")
    plane = pyvista.RectilinearGrid([2.0], cfd.STRETCHED_Y, cfd.STRETCHED_Z)
    cfd.with_fields(plane, "point").save(tmp_path / "slice.vtr")
    cut, given = read(cfd, tmp_path / "volume.vtr", 2.0), read(cfd, tmp_path / "slice.vtr", 2.0)
    order = [np.lexsort((np.round(points.y, 6), np.round(points.z, 6))) for points in (cut, given)]
    assert cut.n == given.n
    for name in ("y", "z"):
        np.testing.assert_allclose(getattr(cut, name)[order[0]], getattr(given, name)[order[1]], atol=1e-6)
    for name, channel in given.channels.items():
        np.testing.assert_allclose(
            cut.channels[name].values[order[0]], channel.values[order[1]], rtol=0, atol=1e-4
        )  # 2 millionths of the mesh's length off, times a slope below one
    assert cut.triangles.shape == given.triangles.shape


def test_a_cloud_of_points_has_no_triangles(cfd, tmp_path):
    import pyvista

    points, _ = _quads(cfd.STRETCHED_Y, cfd.STRETCHED_Z)
    cfd.with_fields(pyvista.PolyData(points), "point").save(tmp_path / "cloud.vtp")
    found = read(cfd, tmp_path / "cloud.vtp")
    cfd.check(found, STATION, places=points[:, 1:])
    assert found.triangles is None and found.areas is None


def test_several_surfaces_in_one_file(cfd, tmp_path):
    import pyvista

    points, corners = _quads(cfd.STRETCHED_Y, cfd.STRETCHED_Z)
    surfaces = [pyvista.PolyData(points + np.array([x, 0, 0]), corners) for x in (0.0, 1.0, 2.0)]
    both = cfd.with_fields(surfaces[0].merge(surfaces[1:]), "point")
    both.save(tmp_path / "three.vtu" if isinstance(both, pyvista.UnstructuredGrid) else tmp_path / "three.vtp")
    path = next(tmp_path.glob("three.*"))
    cfd.check(read(cfd, path, STATION + 1), STATION + 1)
    with pytest.raises(
        DataError, match=r"surfaces lie at x = 1\.37, 2\.37, 3\.37 m, and the plane is wanted at x = 3 m"
    ):
        read(cfd, path, 3.0)


def test_points_of_neighbouring_triangles_are_taken_together(cfd, tmp_path):
    import pyvista

    surface = pyvista.PolyData(*_quads(cfd.STRETCHED_Y, cfd.STRETCHED_Z)).triangulate()
    corner = surface.regular_faces.ravel()
    apart = pyvista.PolyData(
        surface.points[corner], np.column_stack([np.full(len(corner) // 3, 3), np.arange(len(corner)).reshape(-1, 3)])
    )
    cfd.with_fields(apart, "point").save(tmp_path / "apart.vtp")
    points = read(cfd, tmp_path / "apart.vtp")
    assert points.n == surface.n_points
    cfd.check(points, STATION, places=surface.points[:, 1:])
    assert area_of(points) == pytest.approx(np.ptp(cfd.STRETCHED_Y) * np.ptp(cfd.STRETCHED_Z), rel=1e-6)
    assert f"{apart.n_points - surface.n_points} point(s)" in points.how


def test_contradicting_points_at_one_place_stay_apart(cfd, tmp_path):
    import pyvista

    points, _corners = _quads(cfd.STRETCHED_Y, cfd.STRETCHED_Z)
    mesh = cfd.with_fields(pyvista.PolyData(np.vstack([points, points[:1]])), "point")
    mesh.point_data["p"][-1] += 5.0
    mesh.save(tmp_path / "twice.vtp")
    assert read(cfd, tmp_path / "twice.vtp").n == len(points) + 1


SIGNED = {
    "x downstream, y up, z to port": ("+x", "+z", "-y"),
    "x upstream, y starboard, z down": ("-x", "+y", "-z"),
    "z downstream": ("+y", "+z", "+x"),
    "y upstream, left-handed": ("+z", "-x", "+y"),
}


@pytest.mark.parametrize("at", ["point", "cell"])
@pytest.mark.parametrize("directions", SIGNED.values(), ids=SIGNED.keys())
def test_any_axes(cfd, tmp_path, directions, at):
    # wind = P @ file: the mesh is written in the file's axes, positions and vectors alike.
    from wakeledger.intake.state import point_state
    from wakeledger.run.config.plane import Axes
    from wakeledger.stream.reference import Reference

    axes = Axes(**dict(zip("xyz", directions, strict=True)))
    matrix = axes.matrix()
    mesh, _ = volumes(cfd)["hexahedra"]
    mesh = cfd.with_fields(mesh, at)
    data = mesh.point_data if at == "point" else mesh.cell_data
    mesh.points = np.asarray(mesh.points, dtype=float) @ matrix
    data["U"] = data["U"] @ matrix
    mesh.save(tmp_path / "turned.vtu")
    points = read_points(tmp_path / "turned.vtu", cfd.COLUMNS, axes=matrix, station=STATION)
    at_places = np.column_stack([np.full(points.n, STATION), points.y, points.z])
    state = point_state(
        {name: channel.values for name, channel in points.channels.items()},
        points.channels,
        Reference(speed=30.0, density=1.0),
        primary="velocity",
        axes=matrix,
        rotation=np.eye(3),
    )
    for name in "uvw":
        np.testing.assert_allclose(getattr(state, name), cfd.linear(name, at_places), rtol=0, atol=1e-4)
    np.testing.assert_allclose(state.static_pressure, cfd.linear("p", at_places), rtol=0, atol=5e-5)
    assert np.ptp(points.y) > 1.5 and np.ptp(points.z) > 0.7


def test_the_mesh_may_be_in_another_unit_and_have_its_trailing_edge_elsewhere(cfd, tmp_path):
    mesh, _ = volumes(cfd)["structured"]
    mesh = cfd.with_fields(mesh, "point")
    mesh.points *= 1000.0
    mesh.save(tmp_path / "millimetres.vts")
    columns = cfd.COLUMNS | {"y": Column("Points:1", "mm", 0.001), "z": Column("z", "mm", 0.001)}
    points = read_points(
        tmp_path / "millimetres.vts", columns, axes=IDENTITY, station=STATION - 0.5, trailing_edge_x=0.5
    )
    cfd.check(points, STATION)


def test_components_by_name(cfd, tmp_path):
    mesh, _ = planes(cfd)["polydata"]
    cfd.with_fields(mesh, "point").save(tmp_path / "plane.vtp")
    for names in (("U:0", "U:1", "U:2"), ("U_x", "U_y", "U_z"), ("UX", "UY", "UZ")):
        columns = {letter: Column(name, "m/s") for letter, name in zip("uvw", names, strict=True)}
        points = read_points(
            tmp_path / "plane.vtp",
            columns | {"static_pressure": cfd.COLUMNS["static_pressure"]},
            axes=IDENTITY,
            station=STATION,
        )
        cfd.check(points, STATION)


def broken(cfd, tmp_path, what):
    """A file with something wrong, and the columns to read."""
    import pyvista

    mesh, _ = planes(cfd)["polydata"]
    mesh = cfd.with_fields(mesh, "point")
    columns, path = dict(cfd.COLUMNS), tmp_path / "plane.vtp"
    if what == "array":
        columns["static_pressure"] = Column("P", "Pa")
    elif what == "scalar":
        columns["static_pressure"] = Column("U", "Pa")
    elif what == "vector":
        columns["velocity"] = Column("p", "m/s")
    elif what == "no component":
        columns["static_pressure"] = Column("p0", "Pa")
    elif what == "mixed":
        mesh.cell_data["p"] = np.ones(mesh.n_cells)
        del mesh.point_data["p"]
    elif what == "nan":
        mesh.point_data["p"][:] = np.nan
    elif what == "infinite":
        mesh.point_data["p"][7] = np.inf
    elif what == "no arrays":
        mesh.clear_data()
    elif what == "curved":
        mesh.points[:, 0] += 0.5 * mesh.points[:, 1] ** 2
    elif what == "position":
        columns["y"] = Column("z", "m")
    elif what == "no position":
        columns["y"] = Column("p", "m")
    elif what == "units":
        columns |= {"y": Column("y", "mm", 0.001), "z": Column("z", "m")}
    elif what == "polar":
        columns |= {"r": Column("r", "m"), "theta": Column("theta", "deg", 0.01745)}
    elif what == "empty":
        mesh = pyvista.PolyData()
    mesh.save(path)
    if what == "cut short":
        path.write_bytes(path.read_bytes()[:-2000])
    return path, columns


@pytest.mark.parametrize(
    ("what", "found", "remedy"),
    [
        ("array", "there is no array 'P'", "did you mean 'p'? The file has 'p', 'U'"),
        ("scalar", "the array 'U' (static_pressure) has 3 components", "'U:0'"),
        ("vector", "the array 'p' has 1 component(s), a velocity has three", "u, v and w"),
        ("no component", "there is no array 'p0'", "did you mean 'p'"),
        ("mixed", "'U' stands at the points and 'p' for the cells", "all variables at the points or all for"),
        ("nan", "'p' (static_pressure) has no value at any point", "name the right column"),
        ("infinite", "an infinite value (static_pressure)", "leave the cell empty"),
        ("no arrays", "the file holds no arrays", "with the mesh"),
        ("curved", "the surface is no plane across the stream", "cut at the station"),
        ("position", "the position y is to stand in the mesh's z", "[plane.axes]"),
        ("no position", "the position y is to stand in 'p'", "leave the positions out"),
        ("units", "y and z are given in different units", "mesh's unit"),
        ("polar", "r is given", "leave r and theta out"),
        ("empty", "the file holds no points", "with its fields"),
        ("cut short", "this is a VTK XML file, and it cannot be read", "write it again"),
    ],
)
def test_what_is_wrong_is_said_in_one_line(cfd, tmp_path, what, found, remedy):
    path, columns = broken(cfd, tmp_path, what)
    with pytest.raises(DataError) as caught:
        read_points(path, columns, axes=IDENTITY, station=STATION)
    assert found in caught.value.found
    assert remedy in caught.value.remedy
    assert caught.value.file.endswith("plane.vtp")
    assert "\n" not in str(caught.value)


def test_a_station_that_is_not_there(cfd, tmp_path):
    mesh, _ = planes(cfd)["polydata"]
    cfd.with_fields(mesh, "point").save(tmp_path / "plane.vtp")
    with pytest.raises(DataError, match=r"the surface lies at x = 1\.37 m, and the plane is wanted at x = 2 m"):
        read(cfd, tmp_path / "plane.vtp", 2.0)
    read(cfd, tmp_path / "plane.vtp", STATION + 0.01)
    mesh, _ = volumes(cfd)["structured"]
    cfd.with_fields(mesh, "point").save(tmp_path / "volume.vts")
    with pytest.raises(DataError, match=r"the volume reaches from x = 0\.5 to 3\.3 m, .* \(station 4 m\)") as caught:
        read(cfd, tmp_path / "volume.vts", 4.0)
    assert "trailing_edge_x" in caught.value.remedy


def test_missing_values_are_kept_as_missing(cfd, tmp_path):
    mesh, _ = planes(cfd)["polydata"]
    mesh = cfd.with_fields(mesh, "point")
    mesh.point_data["p"][5] = np.nan
    mask = np.ones(mesh.n_points, dtype=np.int8)
    mask[9] = 0
    mesh.point_data["vtkValidPointMask"] = mask
    mesh.save(tmp_path / "plane.vtp")
    points = read(cfd, tmp_path / "plane.vtp")
    missing = np.isnan(points.channels["static_pressure"].values)
    assert np.flatnonzero(missing).tolist() == [5, 9]
    assert np.flatnonzero(np.isnan(points.channels["u"].values)).tolist() == [9]


def test_time_is_refused_where_there_is_one_instant(cfd, tmp_path):
    mesh, _ = planes(cfd)["polydata"]
    cfd.with_fields(mesh, "point").save(tmp_path / "plane.vtp")
    with pytest.raises(DataError, match="time is given"):
        read(cfd, tmp_path / "plane.vtp", time=3.0)


@pytest.mark.parametrize("at", ["point", "cell"])
def test_a_line_is_cut_out_of_a_plane_flow(cfd, tmp_path, at):
    # Flow about an airfoil in the plane of x and z: across the stream there is a line left.
    import pyvista

    mesh = pyvista.StructuredGrid(*np.meshgrid(cfd.STRETCHED_X, [0.0], cfd.STRETCHED_Z, indexing="ij"))
    cfd.with_fields(mesh.cast_to_unstructured_grid(), at).save(tmp_path / "flow.vtu")
    points = read(cfd, tmp_path / "flow.vtu", coordinates=1)
    z = cfd.STRETCHED_Z if at == "point" else (cfd.STRETCHED_Z[1:] + cfd.STRETCHED_Z[:-1]) / 2
    np.testing.assert_allclose(np.sort(points.z), np.sort(z), atol=1e-6)
    cfd.check(points, STATION)


def test_triangles_areas_and_origin_are_kept_in_the_archive(cfd, tmp_path):
    from wakeledger.ledger.encoding import dataset_points, points_dataset

    mesh, extension = volumes(cfd)["hexahedra"]
    for at in ("point", "cell"):
        path = tmp_path / f"{at}{extension}"
        cfd.with_fields(mesh, at).save(path)
        points = read(cfd, path)
        again = dataset_points(points_dataset(points))
        assert again.how == points.how != ""
        for name in ("triangles", "areas"):
            kept, was = getattr(again, name), getattr(points, name)
            assert (kept is None) == (was is None)
            if was is not None:
                np.testing.assert_array_equal(kept, was)
