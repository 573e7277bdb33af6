"""The plane's fields carry the standard uncertainty that the declared sources give them."""

import numpy as np
import pytest
import xarray as xr
from tests.run import survey_kit as kit

from wakeledger.ledger.archive import open_archive, write_archive

NOISE, ZERO = 0.12, 2.5


@pytest.fixture(scope="module")
def found(tmp_path_factory):
    data = kit.table(kit.wing(), *kit.axes())
    sources = [
        kit.source("noise", "plane.w", f"{NOISE} m/s", effect="random"),
        kit.source("zero", "plane.static_pressure", f"{ZERO} Pa"),
    ]
    content = kit.description(uncertainty={"draws": 100, "seed": 4}) | {"uncertainty.source": sources}
    return kit.ledger(tmp_path_factory.mktemp("fields"), data, content)


def middle(plane, name):
    return float(np.sqrt(np.mean(plane[f"{name}_standard_uncertainty"].values ** 2)))


def test_each_field_has_what_the_sources_do_to_it(found):
    plane = found.plane
    # The points stand on the grid, so that w has the noise itself: 2200 independent estimates of 39 degrees of freedom.
    assert middle(plane, "w") == pytest.approx(NOISE, rel=0.03)
    # V² = 2 (H - p)/rho: one zero for all, du = -dp/(rho u); 40 draws know it within 11 %, four of these are allowed.
    outside = plane["wake_mask"].values == 0
    expected = ZERO / (kit.DENSITY * kit.SPEED)
    u = plane["u_standard_uncertainty"].values[outside]
    assert np.sqrt(np.mean(u**2)) == pytest.approx(expected, rel=0.45)
    assert np.ptp(plane["static_pressure_standard_uncertainty"].values) < 1e-9 * ZERO
    assert middle(plane, "total_pressure") < 0.05 * ZERO
    # Central difference of tenth order, coefficients +-5/6, 5/21, 5/84, 5/504, 1/1260 (Fornberg 1988, from memory).
    gain = np.sqrt(2 * sum(c**2 for c in (5 / 6, 5 / 21, 5 / 84, 5 / 504, 1 / 1260)))
    inner = plane["axial_vorticity_standard_uncertainty"].values[8:-8, 8:-8]
    assert np.sqrt(np.mean(inner**2)) == pytest.approx(gain * NOISE / kit.SPACING, rel=0.03)


def test_the_archive_links_each_field_to_its_uncertainty(found, tmp_path):
    write_archive(found, tmp_path / "ledger.nc")
    with xr.open_dataset(tmp_path / "ledger.nc", group="plane") as plane:
        assert plane["w"].attrs["ancillary_variables"] == "w_standard_uncertainty flag"
        assert plane["w_standard_uncertainty"].attrs["units"] == "m s-1"
        assert plane["static_pressure"].attrs["standard_name"] == "air_pressure"
    assert open_archive(tmp_path / "ledger.nc").plane.identical(found.plane)


def test_without_sources_there_are_none(tmp_path):
    plane = kit.ledger(tmp_path, kit.table(kit.wing(), *kit.axes())).plane
    assert not [name for name in plane if str(name).endswith("_standard_uncertainty")]
