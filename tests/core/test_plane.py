"""Planes from arrays in memory: checked, brought to SI, stamped from the names table."""

import numpy as np
import pytest
import xarray as xr

import wakeledger as wl
from wakeledger.core.errors import DataError
from wakeledger.core.grid import UniformGrid
from wakeledger.core.plane import array_of, grid_of, make_plane
from wakeledger.synthetic.aircraft import wing_wake

STREAM = wl.Reference(speed=42.0, density=1.185, static_pressure=100.6e3)


def dataset():
    """An exact wake in a user's own units: mm, ft/s and hPa, dimensions the other way round."""
    grid = UniformGrid(-0.81, -0.36, 0.012, 0.012, 136, 61)
    state = wing_wake(STREAM).state_on(grid)
    coordinates = {
        "y": ("y", 1e3 * grid.y, {"units": "mm"}),
        "z": ("z", 1e3 * grid.z, {"units": "mm"}),
    }
    fields = {"u": state.u, "v": state.v, "w": state.w}
    variables = {name: (("y", "z"), field.T / 0.3048, {"units": "ft/s"}) for name, field in fields.items()}
    for name in ("total_pressure", "static_pressure"):
        variables[name] = (("y", "z"), getattr(state, name).T / 100, {"units": "hPa"})
    return xr.Dataset(variables, coordinates), state


def test_a_users_dataset_gives_the_exact_drag():
    given, state = dataset()
    plane = wl.find_wake(wl.plane(given, station=1.2), STREAM)
    assert plane["u"].dims == ("z", "y")
    assert plane["u"].attrs["units"] == "m s-1"
    assert float(plane["x"]) == 1.2
    assert array_of(plane, "v") == pytest.approx(state.v, rel=1e-12, abs=1e-12)
    truth = wing_wake(STREAM).truth
    # The region's noise-free floor leaves out less than 1e-3.
    assert wl.methods.betz_area(plane, STREAM).value == pytest.approx(truth.profile_drag, rel=2e-3)
    induced, lift = wl.methods.vorticity_area(plane, STREAM)
    assert induced.value == pytest.approx(truth.induced_drag, rel=1e-3)
    assert lift.value == pytest.approx(truth.lift, rel=1e-3)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda d: d.drop_vars("y"), "no coordinate y"),
        (lambda d: d.assign(u=d["u"].assign_attrs(units="Pa")), "u: "),
        (lambda d: d.assign(u=xr.DataArray(d["u"].values, dims=d["u"].dims)), "u has no units"),
        (lambda d: d.assign_coords(y=d["y"] ** 3), "not ascending and uniform"),
        (lambda d: xr.Dataset(coords=d.coords), "no variable with a known name"),
    ],
)
def test_what_is_wrong_is_said(change, message):
    with pytest.raises(DataError, match=message):
        wl.plane(change(dataset()[0]))


def test_attributes_never_leak_through_arithmetic():
    plane = make_plane(UniformGrid(0, 0, 0.1, 0.1, 6, 5), {"u": np.ones((5, 6))})
    assert plane["u"].attrs["units"] == "m s-1"
    with pytest.raises(DataError, match="units"):
        array_of((plane * plane).assign(u=(plane["u"] ** 2).assign_attrs(units="m2 s-2")), "u")
    with pytest.raises(DataError, match="has shape"):
        make_plane(grid_of(plane), {"v": np.ones((3, 3))})


def test_unknown_names_of_the_package_are_said():
    with pytest.raises(AttributeError, match=r"it has .*Estimate"):
        _ = wl.betz
    assert "reduce" in dir(wl)
