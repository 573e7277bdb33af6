"""Calibrated airspeed against values derived from the standard formula, and the position error table."""

import numpy as np
import pytest

from wakeledger.core.errors import InputError
from wakeledger.stream import airspeed, atmosphere

KNOT = 1852.0 / 3600.0
FOOT = 0.3048
# CAS kt, pressure altitude ft, qc Pa, qc/p, M, TAS kt, EAS kt: derived from the usual formula (a0 = 661.48 kt).
CASES = [
    (100.0, 0.0, 1630.28, 0.016090, 0.15118, 100.000, 100.000),
    (120.0, 5000.0, 2353.51, 0.027916, 0.19872, 129.168, 119.902),
    (250.0, 10000.0, 10498.22, 0.150660, 0.45228, 288.702, 248.096),
    (250.0, 30000.0, 10498.22, 0.348899, 0.66811, 393.731, 240.831),
    (300.0, 35000.0, 15354.71, 0.644012, 0.87356, 503.538, 280.302),
]


@pytest.mark.parametrize(("cas", "feet", "qc", "qc_p", "mach", "tas", "eas"), CASES)
def test_derived_values(cas, feet, qc, qc_p, mach, tas, eas):
    pressure = atmosphere.standard_pressure(feet * FOOT)
    temperature = atmosphere.standard_temperature(feet * FOOT)
    # a0 rounded to 661.48 kt in the source moves the impact pressure by 1e-5
    assert airspeed.impact_pressure(cas * KNOT) == pytest.approx(qc, rel=2e-5)
    assert airspeed.impact_pressure(cas * KNOT) / pressure == pytest.approx(qc_p, rel=4e-5)
    found = airspeed.mach_from_calibrated_airspeed(cas * KNOT, pressure)
    assert found == pytest.approx(mach, abs=1e-5)
    true = airspeed.true_airspeed(found, temperature)
    assert true / KNOT == pytest.approx(tas, rel=1e-5)
    density = pressure / (287.05287 * temperature)
    assert airspeed.equivalent_airspeed(true, density) / KNOT == pytest.approx(eas, rel=1e-5)


def test_round_trip_through_mach_one():
    pressure = atmosphere.standard_pressure(12000.0)
    mach = np.array([0.1, 0.5, 0.99, 1.0, 1.05, 1.6, 2.2])
    cas = airspeed.calibrated_airspeed_from_mach(mach, pressure)
    assert np.all(np.diff(cas) > 0)
    # Newton's method is stopped at 1e-13 of the Mach number
    np.testing.assert_allclose(airspeed.mach_from_calibrated_airspeed(cas, pressure), mach, rtol=1e-10)


def test_position_error_is_linear_between_entries():
    table = airspeed.PositionError(indicated=[40.0, 60.0, 100.0], correction=[1.0, -1.0, -3.0])
    assert table.calibrated(40.0) == 41.0
    assert table.calibrated(50.0) == 50.0
    assert table.calibrated(80.0) == 78.0


@pytest.mark.parametrize("speed", [39.9, 100.1, float("nan")])
def test_position_error_is_never_extrapolated(speed):
    table = airspeed.PositionError(indicated=[40.0, 60.0, 100.0], correction=[1.0, -1.0, -3.0])
    with pytest.raises(InputError, match="covers 40 m/s to 100 m/s"):
        table.calibrated(speed)


@pytest.mark.parametrize(
    ("indicated", "correction", "message"),
    [
        ([40.0], [1.0], "at least two"),
        ([40.0, 50.0], [1.0], "one correction for each"),
        ([50.0, 40.0], [1.0, 1.0], "sort"),
        ([40.0, 40.0], [1.0, 1.0], "without repeats"),
        ([40.0, 50.0], [1.0, float("nan")], "finite"),
    ],
)
def test_bad_position_error_table(indicated, correction, message):
    with pytest.raises(InputError, match=message):
        airspeed.PositionError(indicated=indicated, correction=correction)
