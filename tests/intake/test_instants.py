"""Sets of many instants: their means, scatter and worth, and how little of them is held at a time."""

import netCDF4
import numpy as np
import pytest

from wakeledger.core.errors import DataError
from wakeledger.core.points import Column
from wakeledger.intake.readers import instants, read_points

Y = np.linspace(-0.2, 0.2, 9)
Z = np.linspace(0.0, 0.15, 6)
COLUMNS = {"y": Column("y", "m"), "z": Column("z", "m"), "v": Column("V", "m/s"), "w": Column("W", "m/s")}
MEAN = {"V": 1.0 + 3.0 * np.add.outer(Z, Y), "W": -2.0 + np.multiply.outer(Z, Y)}
SIGMA = {"V": 0.4, "W": 0.25}


def write(path, count, *, memory=0.0, order=("time", "z", "y"), missing=None, seed=3, name="time", attributes=None):
    """First-order autoregressive instants: neighbours resemble each other by `memory`."""
    rng = np.random.default_rng(seed)
    with netCDF4.Dataset(path, "w") as dataset:
        for axis, length in ((name, count), ("z", Z.size), ("y", Y.size)):
            dataset.createDimension(axis, length)
        for axis, values in (("y", Y), ("z", Z)):
            dataset.createVariable(axis, "f8", (axis,))[:] = values
        if attributes is not None:
            dataset.createVariable(name, "f8", (name,)).setncatts(attributes)
        order = tuple(name if axis == "time" else axis for axis in order)
        for variable, mean in MEAN.items():
            kicks = rng.standard_normal((count, *mean.shape))
            values = np.empty_like(kicks)
            values[0] = kicks[0]
            for i in range(1, count):
                values[i] = memory * values[i - 1] + np.sqrt(1 - memory**2) * kicks[i]
            values = mean + SIGMA[variable] * values
            if missing is not None:
                values[missing] = np.nan
            held = dataset.createVariable(variable, "f4", order, fill_value=np.float32(-999.0))
            fields = np.moveaxis(values, 0, order.index(name)) if order[0] != name else values
            held[...] = np.ma.masked_invalid(fields)
    return path


def read(path):
    return read_points(path, COLUMNS, axes=np.eye(3))


@pytest.mark.parametrize("order", [("time", "z", "y"), ("z", "y", "time")])
def test_mean_and_standard_deviation(tmp_path, order):
    points = read(write(tmp_path / "set.nc", 2000, order=order))
    for key, name in (("v", "V"), ("w", "W")):
        sigma = SIGMA[name]
        # Five standard errors of a mean and of a standard deviation of 2000 values, over 54 points.
        np.testing.assert_allclose(points.channels[key].values, MEAN[name].ravel(), atol=5 * sigma / np.sqrt(2000))
        np.testing.assert_allclose(points.std[key], sigma, rtol=5 / np.sqrt(4000))
    assert points.samples.shape == (54,)
    # Independent instants: what 44 stretches at 54 points say of their worth is within a few per cent.
    assert 0.9 * 2000 < points.samples[0] <= 2000


def test_instants_that_resemble_each_other_count_less(tmp_path):
    points = read(write(tmp_path / "set.nc", 6000, memory=0.8))
    # (1 - r)/(1 + r) of an autoregressive sequence; stretches of 94 instants hold most of its memory.
    assert points.samples[0] == pytest.approx(6000 * 0.2 / 1.8, rel=0.12)


def test_missing_instants(tmp_path):
    gone = np.s_[100:700, 2, 3]
    points = read(write(tmp_path / "set.nc", 1000, missing=gone))
    at = 2 * Y.size + 3
    np.testing.assert_allclose(points.channels["v"].values[at], MEAN["V"][2, 3], atol=5 * SIGMA["V"] / np.sqrt(400))
    assert points.samples[at] == pytest.approx(0.4 * points.samples[0], abs=1)
    everywhere = read(write(tmp_path / "void.nc", 100, missing=np.s_[:, 2, 3]))
    assert np.isnan(everywhere.channels["v"].values[at])


@pytest.mark.parametrize(
    ("name", "attributes"),
    [
        ("n", {"units": "seconds since 2024-03-01"}),
        ("n", {"axis": "T"}),
        ("n", {"standard_name": "time"}),
        ("Snapshot", None),
    ],
)
def test_dimension_that_counts_instants(tmp_path, name, attributes):
    points = read(write(tmp_path / "set.nc", 80, name=name, attributes=attributes))
    assert points.n == 54
    assert set(points.std) == {"v", "w"}


def test_few_instants_count_as_they_are(tmp_path):
    assert set(read(write(tmp_path / "set.nc", 20)).samples.tolist()) == {20}


def test_a_probe_that_travels_in_time_is_no_set_of_instants(tmp_path):
    path = tmp_path / "rake.nc"
    with netCDF4.Dataset(path, "w") as dataset:
        dataset.createDimension("time", Z.size)
        dataset.createDimension("tube", Y.size)
        dataset.createVariable("y", "f8", ("tube",))[:] = Y
        dataset.createVariable("z", "f8", ("time",))[:] = Z
        for name, mean in MEAN.items():
            dataset.createVariable(name, "f8", ("time", "tube"))[...] = mean
    points = read(path)
    assert points.n == 54
    assert not points.std
    assert not points.averaged
    np.testing.assert_allclose(points.channels["v"].values, 1.0 + 3.0 * (points.z + points.y), rtol=1e-12)


def test_scatter_that_changes_with_time_is_refused(tmp_path):
    with pytest.raises(DataError, match="changes with time"):
        read_points(write(tmp_path / "set.nc", 80), COLUMNS, axes=np.eye(3), std={"v": Column("W", "m/s")})


class Counted:
    """A variable that remembers how much was asked of it at a time."""

    def __init__(self, values, dimensions):
        self.values, self.dimensions, self.shape, self.dtype = values, dimensions, values.shape, values.dtype
        self.largest, self.total = 0, 0

    def __getitem__(self, key):
        part = self.values[key]
        self.largest, self.total = max(self.largest, part.nbytes), self.total + part.size
        return np.ma.asarray(part)


@pytest.mark.parametrize("axis", [0, 2])
def test_only_blocks_are_read_and_each_once(monkeypatch, axis):
    monkeypatch.setattr(instants, "CHUNK_BYTES", 80_000)
    monkeypatch.setattr(instants, "_SLICE_BYTES", 9_000)
    values = np.moveaxis(np.random.default_rng(1).normal(7.0, 2.0, (900, 12, 20)), 0, axis)
    variable = Counted(values, ("a", "b", "c"))
    found = instants.read_instants(variable, axis)
    assert variable.total == values.size
    assert variable.largest <= 40_000 < values.nbytes / 40
    # Rounding only: the same sums in another order.
    np.testing.assert_allclose(found.mean, values.mean(axis=axis), rtol=1e-12)
    np.testing.assert_allclose(found.deviation, values.std(axis=axis, ddof=1), rtol=1e-10)
