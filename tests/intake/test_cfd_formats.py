"""CGNS, OpenFOAM, sampled text, MATLAB and netCDF: the same analytic field, read to the same answer."""

import os
import shutil
from pathlib import Path

import netCDF4
import numpy as np
import pytest
from scipy.io import savemat

from wakeledger.core.errors import DataError, MissingPackageError
from wakeledger.core.points import Column
from wakeledger.intake.readers import digest_of, read_points, recognise

IDENTITY = np.eye(3)
STATION = 1.37
REFERENCE = Path(
    os.environ.get("WAKELEDGER_REFERENCE_DATA", Path(__file__).resolve().parents[3] / "shared" / "reference")
)


def lines(cfd):
    return cfd.STRETCHED_X, cfd.STRETCHED_Y, cfd.STRETCHED_Z


def volume(cfd):
    """Positions and fields of shape (nk, nj, ni)."""
    z, y, x = np.meshgrid(*reversed(lines(cfd)), indexing="ij")
    return x, y, z, {name: cfd.linear(name, np.stack([x, y, z], axis=-1)) for name in "uvwp"}


def plane(cfd, x=STATION):
    """Positions and fields of shape (nz, ny)."""
    _, y, z = lines(cfd)
    zz, yy = np.meshgrid(z, y, indexing="ij")
    places = np.stack([np.full(yy.shape, x), yy, zz], axis=-1)
    return yy, zz, {name: cfd.linear(name, places) for name in "uvwp"}


def positions(*letters):
    return {letter: Column(letter, "m") for letter in letters}


# CGNS


@pytest.mark.parametrize("location", ["Vertex", "CellCenter"])
def test_cgns(cfd, tmp_path, location):
    x, y, z, fields = volume(cfd)
    names = {"u": "VelocityX", "v": "VelocityY", "w": "VelocityZ", "p": "Pressure"}
    if location == "CellCenter":

        def middle(array):
            for axis in range(3):
                low, high = (np.take(array, np.arange(s, array.shape[axis] - 1 + s), axis=axis) for s in (0, 1))
                array = (low + high) / 2
            return array

        fields = {name: middle(array) for name, array in fields.items()}
    path = tmp_path / "solution.hdf"
    cfd.write_cgns(path, x, y, z, {names[name]: array for name, array in fields.items()}, location)
    assert recognise(path) == "cgns"
    for columns in (
        {"velocity": Column("Velocity", "m/s")},
        {letter: Column(names[letter], "m/s") for letter in "uvw"},
    ):
        points = read_points(
            path, columns | {"static_pressure": Column("Pressure", "Pa")}, axes=IDENTITY, station=STATION
        )
        cfd.check(points, STATION)
        assert points.n == (15 * 12 if location == "Vertex" else 14 * 11)
        assert (points.areas is None) == (location == "Vertex")


# OpenFOAM


@pytest.fixture(scope="module")
def case(cfd, tmp_path_factory):
    """A case of stretched boxes of which those about the middle are split in four."""
    cells = cfd.boxes(lines(cfd), split=lambda y, z: abs(y) < 0.4 and abs(z - 0.2) < 0.3)
    return cfd.write_case(tmp_path_factory.mktemp("case"), cells, {"0": 0.0, "100": 0.5, "250": 1.0}), cells


def test_openfoam_case(cfd, case):
    folder, cells = case
    crossed = cells[(cells[:, 0] < STATION) & (cells[:, 1] > STATION)]
    (folder / "case.foam").touch()
    for path in (folder, folder / "case.foam", folder / "system" / "controlDict"):
        assert recognise(path) == "openfoam"
        points = read_points(path, cfd.COLUMNS, axes=IDENTITY, station=STATION)
        cfd.check(points, STATION, places=cfd.centres(crossed)[:, 1:])
        sides = crossed[:, 3] - crossed[:, 2], crossed[:, 5] - crossed[:, 4]
        assert points.areas.sum() == pytest.approx(np.sum(sides[0] * sides[1]), rel=1e-6)
        assert "carried to the plane" in points.how


def test_openfoam_instants(cfd, case):
    folder, _ = case
    half = read_points(folder, cfd.COLUMNS, axes=IDENTITY, station=STATION, time=100)
    whole = read_points(folder, cfd.COLUMNS, axes=IDENTITY, station=STATION, time=250)
    np.testing.assert_allclose(2 * half.channels["u"].values, whole.channels["u"].values, rtol=1e-6)
    with pytest.raises(DataError, match=r"no instant 120; it has 0, 100, 250"):
        read_points(folder, cfd.COLUMNS, axes=IDENTITY, station=STATION, time=120)


def test_the_digest_of_a_case_follows_its_files(cfd, tmp_path, case):
    copy = tmp_path / "copy"
    shutil.copytree(case[0], copy)
    before = digest_of(copy)
    assert before == digest_of(case[0]) and len(before) == 64
    field = copy / "250" / "p"
    field.write_text(field.read_text().replace("7", "8", 1))
    assert digest_of(copy) != before


def test_openfoam_case_that_is_not_whole(cfd, tmp_path, case):
    folder = tmp_path / "case"
    shutil.copytree(case[0], folder)
    (folder / "250" / "p").unlink()
    with pytest.raises(DataError, match=r"there is no array 'p'; .* 'U'"):
        read_points(folder, cfd.COLUMNS, axes=IDENTITY, station=STATION)
    (folder / "system" / "controlDict").unlink()
    with pytest.raises(DataError, match="no system/controlDict"):
        read_points(folder, cfd.COLUMNS, axes=IDENTITY, station=STATION)
    with pytest.raises(DataError, match="a single file of an OpenFOAM case"):
        read_points(folder / "250" / "U", cfd.COLUMNS, axes=IDENTITY, station=STATION)
    with pytest.raises(DataError, match="this is a directory, and no OpenFOAM case"):
        read_points(tmp_path, cfd.COLUMNS, axes=IDENTITY, station=STATION)


# Sampled text, one file for each variable


def sampled(cfd, folder, *, shuffle=True, shift=0.0):
    yy, zz, fields = plane(cfd)
    rng = np.random.default_rng(7)
    paths = []
    for name, parts in (("U", "uvw"), ("p", "p")):
        rows = np.column_stack([np.full(yy.size, STATION), yy.ravel() + shift * (name == "p"), zz.ravel()])
        rows = np.column_stack([rows, *(fields[part].ravel() for part in parts)])
        if shuffle:
            rows = rng.permutation(rows)
        header = f"# {name}  POINT_DATA {len(rows)}\n# x  y  z  " + (
            "  ".join(f"U_{letter}" for letter in "xyz") if name == "U" else name
        )
        paths.append(folder / f"{name}_plane.raw")
        np.savetxt(paths[-1], rows, header=header, comments="", fmt="%.10g")
    return paths


def test_sampled_text_is_joined_by_position(cfd, tmp_path):
    paths = sampled(cfd, tmp_path)
    points = read_points(paths, cfd.COLUMNS | positions("x", "y", "z"), axes=IDENTITY, station=STATION)
    yy, zz, _ = plane(cfd)
    cfd.check(points, STATION, places=np.column_stack([yy.ravel(), zz.ravel()]))
    assert points.source == f"{paths[0]}, {paths[1]}"


@pytest.mark.parametrize(
    ("change", "match"),
    [
        ("shift", r"no point of the file stands where line \d+"),
        ("short", "holds 179 points and 'U_plane.raw' 180"),
        ("twice", r"'p' \(static_pressure\) is in 'p_plane.raw' too"),
        ("none", "the file holds none of the variables"),
        ("absent", r"'q' \(total_pressure\) is in none of the 2 files; .*file has 'x', 'y', 'z', 'p'"),
        ("bad number", r"p_plane.raw, line 3, column 'p': 'wrong' is not a number"),
        ("infinite", r"p_plane.raw, line \d+, column 'p': an infinite value"),
    ],
)
def test_sampled_text_that_does_not_fit(cfd, tmp_path, change, match):
    paths = sampled(cfd, tmp_path, shift=0.01 if change == "shift" else 0.0)
    columns = cfd.COLUMNS | positions("x", "y", "z")
    text = paths[1].read_text().splitlines()
    if change == "short":
        text = text[:-1]
    elif change == "twice":
        shutil.copy(paths[1], tmp_path / "p_again.raw")
        paths.append(tmp_path / "p_again.raw")
    elif change == "none":
        text[1] = "# x  y  z  q"
    elif change == "absent":
        columns["total_pressure"] = Column("q", "Pa")
    elif change in {"bad number", "infinite"}:
        text[2] = text[2].rsplit(" ", 1)[0] + (" wrong" if change == "bad number" else " inf")
    paths[1].write_text("\n".join(text))
    with pytest.raises(DataError, match=match):
        read_points(paths, columns, axes=IDENTITY, station=STATION)


def test_one_surface_file_for_each_variable(cfd, tmp_path):
    import pyvista

    _, y, z = lines(cfd)
    grid = cfd.with_fields(pyvista.RectilinearGrid([STATION], y, z), "point")
    for name in ("U", "p"):
        part = grid.copy()
        del part.point_data["p" if name == "U" else "U"]
        part.save(tmp_path / f"{name}.vtk")
    points = read_points([tmp_path / "U.vtk", tmp_path / "p.vtk"], cfd.COLUMNS, axes=IDENTITY, station=STATION)
    cfd.check(points, STATION)
    assert points.triangles is not None


def test_a_mesh_and_a_table_are_not_joined(cfd, tmp_path):
    import pyvista

    _, y, z = lines(cfd)
    cfd.with_fields(pyvista.RectilinearGrid([STATION], y, z), "point").save(tmp_path / "plane.vtr")
    paths = [tmp_path / "plane.vtr", sampled(cfd, tmp_path)[1]]
    with pytest.raises(
        DataError, match="is a mesh and another one of the same plane is none; write all of them in one"
    ):
        read_points(paths, cfd.COLUMNS, axes=IDENTITY, station=STATION)


def test_the_digest_of_a_multiblock_file_follows_its_blocks(cfd, tmp_path):
    import pyvista

    _, y, z = lines(cfd)
    block = cfd.with_fields(pyvista.RectilinearGrid([STATION], y, z), "point")
    pyvista.MultiBlock([block]).save(tmp_path / "plane.vtm")
    before = digest_of(tmp_path / "plane.vtm")
    piece = next(path for path in (tmp_path / "plane").iterdir())
    piece.write_bytes(piece.read_bytes() + b"\n")
    assert digest_of(tmp_path / "plane.vtm") != before


def test_a_table_with_a_vector_in_three_columns(cfd, tmp_path):
    yy, zz, fields = plane(cfd)
    for names in (("U:0", "U:1", "U:2"), ("Ux", "Uy", "Uz"), ("U_X", "U_Y", "U_Z")):
        rows = np.column_stack([yy.ravel(), zz.ravel(), *(fields[name].ravel() for name in "uvwp")])
        np.savetxt(tmp_path / "plane.csv", rows, header=",".join(["y", "z", *names, "p"]), delimiter=",", comments="")
        points = read_points(tmp_path / "plane.csv", cfd.COLUMNS | positions("y", "z"), axes=IDENTITY)
        cfd.check(points, STATION)
    columns = cfd.COLUMNS | positions("y", "z") | {"velocity": Column("V", "m/s")}
    with pytest.raises(DataError, match="no three columns V_x, V_y, V_z"):
        read_points(tmp_path / "plane.csv", columns, axes=IDENTITY)


# MATLAB


def save_matlab(path, content, version):
    if version == 5:
        savemat(path, content, do_compression=True)
        return
    import h5py

    with h5py.File(path, "w", userblock_size=512) as file:
        for name, value in content.items():
            for inner, array in value.items() if isinstance(value, dict) else [(None, value)]:
                # As MATLAB does: the first dimension last.
                stored = np.atleast_2d(array).T
                dataset = file.create_dataset(f"{name}/{inner}" if inner else name, data=stored)
                dataset.attrs["MATLAB_class"] = np.bytes_("double")
    with path.open("r+b") as stream:
        # The header is free text: nothing may hang on it.
        stream.write(b"some other program's header".ljust(124))


@pytest.mark.parametrize("version", [5, 7.3])
@pytest.mark.parametrize("layout", ["fields", "points", "lines", "structure", "volume"])
def test_matlab(cfd, tmp_path, version, layout):
    yy, zz, fields = plane(cfd)
    columns = cfd.COLUMNS | positions("y", "z")
    if layout == "volume":
        x, y, z, fields = volume(cfd)
        content = {"x": x, "y": y, "z": z, "p": fields["p"]}
        content["U"] = np.stack([fields[name] for name in "uvw"], axis=-1)
        columns |= positions("x")
    else:
        content = {"y": yy, "z": zz, "p": fields["p"], "U": np.stack([fields[name] for name in "uvw"], axis=-1)}
    if layout == "points":
        content = {name: array.reshape(yy.size, -1) for name, array in content.items()}
    elif layout == "lines":
        content |= {"y": yy[:1], "z": zz[:, :1]}
    elif layout == "structure":
        content = {"data": content}
        columns = {
            key: Column(f"data.{column.column}", "m", kinematic=column.kinematic) for key, column in columns.items()
        }
    path = tmp_path / "plane.bin"
    save_matlab(path, content, version)
    assert recognise(path) == "matlab"
    points = read_points(path, columns, axes=IDENTITY, station=STATION)
    cfd.check(points, STATION, places=np.column_stack([yy.ravel(), zz.ravel()]))


@pytest.mark.parametrize("version", [5, 7.3])
def test_a_square_plane_in_matlab(tmp_path, version):
    # Rows and columns of a square array are told apart by how the positions are written.
    y, z = np.linspace(0, 1, 6)[None, :], np.linspace(2, 4, 6)[:, None]
    path = tmp_path / "square.mat"
    save_matlab(path, {"y": y, "z": z, "u": 10 * y + z}, version)
    points = read_points(path, {name: Column(name, "m") for name in "yzu"}, axes=IDENTITY)
    np.testing.assert_allclose(points.channels["u"].values, 10 * points.y + points.z, rtol=1e-12)
    assert np.ptp(points.y) == 1.0 and np.ptp(points.z) == 2.0


@pytest.mark.parametrize("version", [5, 7.3])
def test_what_is_wrong_with_a_matlab_file(tmp_path, version):
    path = tmp_path / "plane.mat"
    good = {"y": np.arange(6.0), "z": np.arange(6.0), "u": np.ones(6), "short": np.ones(5)}
    save_matlab(path, good, version)

    def read(**columns):
        return read_points(path, {key: Column(name, "m") for key, name in columns.items()}, axes=IDENTITY)

    with pytest.raises(DataError, match=r"there is no array 'U'; did you mean 'u'\?"):
        read(y="y", z="z", u="U")
    with pytest.raises(DataError, match="the array of u has shape"):
        read(y="y", z="z", u="short")
    path.write_bytes(path.read_bytes()[: 300 if version == 5 else 1500])
    with pytest.raises(DataError, match="cannot be read"):
        read(y="y", z="z", u="u")


# netCDF


def save_netcdf(path, dimensions, variables):
    with netCDF4.Dataset(path, "w") as file:
        for name, length in dimensions.items():
            file.createDimension(name, length)
        for name, (own, values) in variables.items():
            file.createVariable(name, "f8", own)[:] = values


@pytest.mark.parametrize("layout", ["points", "curvilinear", "lines", "volume", "curvilinear volume"])
def test_netcdf(cfd, tmp_path, layout):
    yy, zz, fields = plane(cfd)
    columns = cfd.COLUMNS | positions("y", "z")
    if "volume" in layout:
        x, y, z, fields = volume(cfd)
        own, dimensions = ("k", "j", "i"), dict(zip("kji", x.shape, strict=True))
        places = {"x": (own, x), "y": (own, y), "z": (own, z)}
        if layout == "volume":
            places = {"x": (("i",), x[0, 0]), "y": (("j",), y[0, :, 0]), "z": (("k",), z[:, 0, 0])}
        columns |= positions("x")
    else:
        own, dimensions = ("k", "j"), dict(zip("kj", yy.shape, strict=True))
        places = {"y": (own, yy), "z": (own, zz)}
        if layout == "lines":
            places = {"y": (("j",), yy[0]), "z": (("k",), zz[:, 0])}
        elif layout == "points":
            own, dimensions = ("point",), {"point": yy.size}
            places = {"y": (own, yy.ravel()), "z": (own, zz.ravel())}
            fields = {name: array.ravel() for name, array in fields.items()}
    vector = np.stack([fields[name] for name in "uvw"], axis=-1)
    variables = places | {"p": (own, fields["p"]), "U": ((*own, "component"), vector)}
    path = tmp_path / "plane.cdf"
    save_netcdf(path, dimensions | {"component": 3}, variables)
    points = read_points(path, columns, axes=IDENTITY, station=STATION)
    cfd.check(points, STATION, places=np.column_stack([yy.ravel(), zz.ravel()]))
    assert (points.triangles is not None) == ("volume" in layout)


def test_a_netcdf_volume_in_millimetres(cfd, tmp_path):
    x, y, z, fields = volume(cfd)
    own = ("k", "j", "i")
    variables = {name: (own, 1000 * array) for name, array in (("x", x), ("y", y), ("z", z))}
    variables |= {name: (own, array) for name, array in fields.items()}
    save_netcdf(tmp_path / "volume.nc", dict(zip(own, x.shape, strict=True)), variables)
    columns = {letter: Column(letter, "mm", 0.001) for letter in "xyz"}
    columns |= {name: Column(name, "m/s") for name in "uvw"}
    columns["static_pressure"] = Column("p", "m2/s2", kinematic=True)
    points = read_points(tmp_path / "volume.nc", columns, axes=IDENTITY, station=STATION)
    cfd.check(points, STATION)
    with pytest.raises(DataError, match=r"the volume reaches from x = 0\.5 to 3\.3 m"):
        read_points(tmp_path / "volume.nc", columns, axes=IDENTITY, station=9.0)
    del columns["x"]
    with pytest.raises(DataError, match=r"3 dimensions .* cut at the station"):
        read_points(tmp_path / "volume.nc", columns, axes=IDENTITY, station=STATION)


# The package that reads them


@pytest.mark.parametrize("name", ["pyvista", "h5py"])
def test_a_missing_package_is_said_with_the_command(cfd, tmp_path, monkeypatch, name):
    import sys

    path = tmp_path / "plane.bin"
    if name == "pyvista":
        path.write_text("# vtk DataFile Version 3.0\nplane\nASCII\nDATASET POLYDATA\n")
    else:
        save_matlab(path, {"y": np.arange(6.0)}, 7.3)
    monkeypatch.setitem(sys.modules, name, None)
    with pytest.raises(MissingPackageError) as caught:
        read_points(path, cfd.COLUMNS | positions("y", "z"), axes=IDENTITY, station=STATION)
    assert f"({name}) is not installed" in str(caught.value)
    assert caught.value.remedy == "install it with: pip install 'wakeledger[cfd]'"


# The reference case


@pytest.mark.skipif(not REFERENCE.is_dir(), reason="the reference data are not beside the project")
def test_the_three_formats_of_the_reference_case(cfd):
    folder = REFERENCE / "cfd_wing"
    raw = read_points(
        [folder / "U_slice_x2.0.raw", folder / "p_slice_x2.0.raw"],
        cfd.COLUMNS | positions("x", "y", "z"),
        axes=IDENTITY,
        station=2.0,
    )
    legacy = read_points(folder / "slice_x2.0_legacy.vtk", cfd.COLUMNS, axes=IDENTITY, station=2.0)
    xml = read_points(folder / "slice_x1.0.vtp", cfd.COLUMNS, axes=IDENTITY, station=1.0)
    # Number of points: the files' own headers.
    assert (raw.n, legacy.n, xml.n) == (8479, 15065, 8235)
    # About the wake the legacy file holds the points of the raw one, and more on the diagonals of its triangles.
    from scipy.spatial import cKDTree

    distance, index = cKDTree(np.column_stack([legacy.y, legacy.z])).query(np.column_stack([raw.y, raw.z]))
    near = (np.abs(raw.z) < 0.9) & (raw.y < 4.0)
    assert near.sum() > 2500 and distance[near].max() < 1e-5
    for name, channel in raw.channels.items():
        # Nine digits in the one, single precision in the other.
        np.testing.assert_allclose(
            channel.values[near], legacy.channels[name].values[index[near]], rtol=1e-7, atol=2e-6
        )
    # Half the tunnel's section: 16 m by 30 m (its README). The triangles of the legacy file overlap a little.
    for points, rel in ((xml, 1e-6), (legacy, 1e-3)):
        corner = np.column_stack([points.y, points.z])[points.triangles]
        a, b = corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]
        assert 0.5 * np.abs(a[:, 0] * b[:, 1] - a[:, 1] * b[:, 0]).sum() == pytest.approx(480.0, rel=rel)
