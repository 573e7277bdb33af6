"""Every method that the package names, on one labelled plane of an exact wake."""

import numpy as np
import pytest
import xarray as xr

import wakeledger as wl
from wakeledger.core.errors import DataError
from wakeledger.synthetic import vortex_pair

STREAM = wl.Reference(speed=42.0, density=1.2)
PAIR = vortex_pair(circulation=2.0, spacing=0.8, core=0.03)


@pytest.fixture(scope="module")
def plane():
    y, z = np.arange(-0.75, 0.75, 0.015), np.arange(-0.45, 0.45, 0.015)
    v, w = PAIR.velocity(*np.meshgrid(y, z))
    fields = {"v": v, "w": w, "total_pressure": np.full(v.shape, STREAM.total_pressure)}
    units = {"v": "m/s", "w": "m/s", "total_pressure": "Pa"}
    mine = xr.Dataset(
        {name: (("z", "y"), values, {"units": units[name]}) for name, values in fields.items()},
        coords={"z": z, "y": y},
    )
    return wl.find_wake(wl.plane(mine, station=1.5), STREAM)


def test_three_methods_give_the_drag_of_a_vortex_pair(plane):
    truth = PAIR.induced_drag(density=1.2)
    by_area, _ = wl.methods.vorticity_area(plane, STREAM)
    by_line, lift = wl.methods.wake_line(plane, STREAM)
    by_sum = wl.methods.vortex_sum(plane, STREAM)
    # design.md, numbers to reach, at h/a 0.5: vorticity form 1e-4, wake line 5e-3, vortex sum 2e-2.
    assert by_area.value == pytest.approx(truth, rel=1e-4)
    assert by_line.value == pytest.approx(truth, rel=5e-3)
    assert by_sum.value == pytest.approx(truth, rel=2e-2)
    assert lift.value == pytest.approx(1.2 * 42.0 * 2.0 * 0.8, rel=1e-3)
    assert by_sum.terms["vortices"] == 2
    assert by_sum.terms["vortex_circulation"] == pytest.approx(4.0, rel=0.05)


def test_a_plane_without_a_wake_region_is_refused(plane):
    for method in (wl.methods.wake_line, wl.methods.vortex_sum):
        with pytest.raises(DataError, match=r"wake_mask"):
            method(plane.drop_vars("wake_mask"), STREAM)


def test_every_name_is_there():
    assert all(callable(getattr(wl.methods, name)) for name in wl.methods.__all__)
    assert {"vortex_sum", "wake_line", "betz_area", "entropy_area"} <= set(wl.methods.__all__)
