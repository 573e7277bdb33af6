"""NetCDF: points and fields in any order of dimensions, masked values, units that contradict."""

import netCDF4
import numpy as np
import pytest

from wakeledger.core.errors import DataError
from wakeledger.core.points import Column
from wakeledger.intake.readers import read_points

IDENTITY = np.eye(3)
COLUMNS = {
    "y": Column("yy", "mm", 1e-3),
    "z": Column("zz", "mm", 1e-3),
    "u": Column("U", "m/s"),
    "total_pressure": Column("pt", "hPa", 100.0),
}
Y = np.array([-10.0, 0.0, 10.0, 25.0])
Z = np.array([0.0, 5.0, 20.0])
U = 40.0 + Z[:, None] + 0.1 * Y[None, :]
PT = 1010.0 + 0.5 * Z[:, None] - 0.25 * Y[None, :]


def write(path, *, order=("z", "y"), file_format="NETCDF4", units=True, change=None):
    with netCDF4.Dataset(path, "w", format=file_format) as dataset:
        dataset.createDimension("y", Y.size)
        dataset.createDimension("z", Z.size)
        dataset.createDimension("x", 1)
        for name, dims, values, unit in (
            ("yy", ("y",), Y, "mm"),
            ("zz", ("z",), Z, "mm"),
            ("U", order, U if order[-1] == "y" else U.T, "m s-1"),
            ("pt", ("x", "z", "y"), PT[None], "hPa"),
        ):
            variable = dataset.createVariable(name, "f8", dims, fill_value=-999.0)
            variable[...] = values
            if units:
                variable.units = unit
        if change:
            change(dataset)
    return path


@pytest.mark.parametrize("file_format", ["NETCDF4", "NETCDF3_CLASSIC", "NETCDF3_64BIT_OFFSET", "NETCDF4_CLASSIC"])
@pytest.mark.parametrize("units", [True, False])
def test_fields_become_points(tmp_path, file_format, units):
    points = read_points(write(tmp_path / "plane.dat", file_format=file_format, units=units), COLUMNS, axes=IDENTITY)
    zz, yy = np.meshgrid(1e-3 * Z, 1e-3 * Y, indexing="ij")
    np.testing.assert_array_equal(points.y, yy.ravel())
    np.testing.assert_array_equal(points.z, zz.ravel())
    np.testing.assert_array_equal(points.channels["u"].values, U.ravel())
    np.testing.assert_array_equal(points.channels["total_pressure"].values, 100.0 * PT.ravel())
    np.testing.assert_array_equal(points.line, np.arange(1, 13))


def test_other_order_of_dimensions(tmp_path):
    points = read_points(write(tmp_path / "plane.nc", order=("y", "z")), COLUMNS, axes=IDENTITY)
    # The file holds both orders; each value must stay with its own place.
    np.testing.assert_allclose(points.channels["u"].values, 40.0 + 1e3 * points.z + 100.0 * points.y, rtol=1e-14)
    pressure = 100.0 * (1010.0 + 500.0 * points.z - 250.0 * points.y)
    np.testing.assert_allclose(points.channels["total_pressure"].values, pressure, rtol=1e-14)


def test_points_and_groups(tmp_path):
    path = tmp_path / "points.nc"
    with netCDF4.Dataset(path, "w") as dataset:
        dataset.createDimension("point", 5)
        group = dataset.createGroup("raw")
        for name in ("yy", "zz", "U"):
            group.createVariable(name, "f4" if name == "U" else "i4", ("point",))[...] = np.arange(5) ** 2
    columns = {key: Column(f"raw/{name}", "m") for key, name in (("y", "yy"), ("z", "zz"), ("u", "U"))}
    points = read_points(path, columns, axes=IDENTITY)
    np.testing.assert_array_equal(points.channels["u"].values, np.arange(5.0) ** 2)


def test_masked_and_fill_values_are_missing(tmp_path):
    def change(dataset):
        dataset["U"][1, 2] = np.ma.masked
        dataset["U"][0, 0] = np.nan

    points = read_points(write(tmp_path / "plane.nc", change=change), COLUMNS, axes=IDENTITY)
    np.testing.assert_array_equal(np.flatnonzero(np.isnan(points.channels["u"].values)), [0, 6])


def test_packed_values_are_unpacked(tmp_path):
    def change(dataset):
        packed = dataset.createVariable("packed", "i2", ("z", "y"), fill_value=-1)
        packed.scale_factor, packed.add_offset = 0.5, 100.0
        packed[...] = PT

    columns = COLUMNS | {"total_pressure": Column("packed", "hPa", 100.0)}
    points = read_points(write(tmp_path / "plane.nc", change=change), columns, axes=IDENTITY)
    # Packed in steps of 0.5 hPa.
    assert np.abs(points.channels["total_pressure"].values / 100.0 - PT.ravel()).max() <= 0.25


def test_vector_array(tmp_path):
    def change(dataset):
        dataset.createDimension("component", 3)
        vector = dataset.createVariable("velocity", "f8", ("z", "y", "component"))
        vector[...] = np.stack([U, 2 * U, -U], axis=-1)

    columns = {key: COLUMNS[key] for key in "yz"} | {"velocity": Column("velocity", "m/s")}
    points = read_points(write(tmp_path / "plane.nc", change=change), columns, axes=IDENTITY)
    for letter, factor in (("u", 1.0), ("v", 2.0), ("w", -1.0)):
        np.testing.assert_array_equal(points.channels[letter].values, factor * U.ravel())


def test_contradicting_unit_names_both(tmp_path):
    path = write(tmp_path / "plane.nc", change=lambda dataset: dataset["pt"].setncattr("units", "Pa"))
    with pytest.raises(DataError, match=r"'pt' as 'Pa', the survey file says 'hPa'") as caught:
        read_points(path, COLUMNS, axes=IDENTITY)
    assert caught.value.place == "variable 'pt'"


@pytest.mark.parametrize("unit", ["kelvin", "furlongs per whatever"])
def test_unit_of_another_kind(tmp_path, unit):
    path = write(tmp_path / "plane.nc", change=lambda dataset: dataset["U"].setncattr("units", unit))
    with pytest.raises(DataError, match=f"{unit!r}, the survey file says 'm/s'"):
        read_points(path, COLUMNS, axes=IDENTITY)


def test_other_spellings_of_the_unit_agree(tmp_path):
    path = write(tmp_path / "plane.nc", change=lambda dataset: dataset["pt"].setncattr("units", "mbar"))
    assert read_points(path, COLUMNS, axes=IDENTITY).n == 12


def test_normalised_variable_is_a_pure_number(tmp_path):
    columns = COLUMNS | {"u": Column("U", "1", normalised_by="speed")}
    with pytest.raises(DataError, match="'m s-1', the survey file says '1'"):
        read_points(write(tmp_path / "plane.nc"), columns, axes=IDENTITY)
    path = write(tmp_path / "plain.nc", change=lambda dataset: dataset["U"].setncattr("units", "1"))
    assert read_points(path, columns, axes=IDENTITY).channels["u"].normalised_by == "speed"


def test_missing_variable_offers_the_nearest(tmp_path):
    columns = COLUMNS | {"u": Column("u", "m/s")}
    with pytest.raises(DataError, match=r"no variable 'u'; did you mean 'U'"):
        read_points(write(tmp_path / "plane.nc"), columns, axes=IDENTITY)


def test_text_variable(tmp_path):
    def change(dataset):
        dataset.createVariable("label", str, ("y",))[...] = np.array(["a", "b", "c", "d"], dtype=object)

    with pytest.raises(DataError, match="does not hold numbers"):
        read_points(write(tmp_path / "plane.nc", change=change), COLUMNS | {"u": Column("label", "m/s")}, axes=IDENTITY)


def test_volume_is_refused(tmp_path):
    def change(dataset):
        dataset.createDimension("level", 2)
        dataset.createVariable("series", "f8", ("level", "z", "y"))[...] = np.stack([U, U])

    with pytest.raises(DataError, match=r"3 dimensions \(level = 2, z = 3, y = 4\)"):
        read_points(
            write(tmp_path / "plane.nc", change=change), COLUMNS | {"u": Column("series", "m/s")}, axes=IDENTITY
        )


def test_foreign_dimension_is_refused(tmp_path):
    def change(dataset):
        dataset.createDimension("other", 4)
        dataset.createVariable("stray", "f8", ("other",))[...] = Y

    with pytest.raises(DataError, match="'stray' has the dimension 'other'"):
        read_points(write(tmp_path / "plane.nc", change=change), COLUMNS | {"u": Column("stray", "m/s")}, axes=IDENTITY)


def test_faults_name_the_index(tmp_path):
    def change(dataset):
        dataset["U"][2, 1] = np.inf

    with pytest.raises(DataError, match=r"variable 'U', index \(2, 1\): an infinite value"):
        read_points(write(tmp_path / "plane.nc", change=change), COLUMNS, axes=IDENTITY)


@pytest.mark.parametrize("file_format", ["NETCDF4", "NETCDF3_CLASSIC"])
def test_damaged_file(tmp_path, file_format):
    path = write(tmp_path / "plane.nc", file_format=file_format)
    path.write_bytes(path.read_bytes()[:400])
    with pytest.raises(DataError) as caught:
        read_points(path, COLUMNS, axes=IDENTITY)
    assert caught.value.file == str(path)
