"""Calibration against the potential-flow sphere: what goes in comes out, and what does not fit is said."""

import pickle

import numpy as np
import pytest
import xarray as xr

from wakeledger.core.errors import DataError
from wakeledger.intake.probe.calibration import CalibrationTable, calibrate
from wakeledger.intake.probe.coefficients import coefficients, leading_hole, sector_terms
from wakeledger.intake.probe.directions import (
    angles,
    direction_from_angles,
    direction_from_cone,
    from_plane,
    to_plane,
)
from wakeledger.intake.probe.stored import read_calibration, write_calibration
from wakeledger.synthetic.probes import sphere_probe

Q = 800.0
STATIC = 50.0
#: Where the outer holes lie, seen from behind, degrees counter-clockwise from starboard (interface: hole numbers).
AZIMUTH = {5: (180, 0, 270, 90), 7: (90, 150, 210, 270, 330, 30)}


def outward(holes, *, jitter=0.0, rng=None):
    """Outward normals of the holes, 45 degrees off the axis; x points downstream, so the centre hole faces -x."""
    across = np.radians(AZIMUTH[holes])
    ring = np.sqrt(0.5) * np.stack([-np.ones(across.size), np.cos(across), np.sin(across)], axis=1)
    normals = np.vstack([[-1.0, 0.0, 0.0], ring])
    if jitter:
        normals = normals + jitter * rng.normal(size=normals.shape)
    return normals / np.linalg.norm(normals, axis=1)[:, None]


def sphere(direction, normals, sensitivity=1.0):
    """Cp = 1 - (9/4) sin^2(theta) at each hole, theta between the oncoming stream and the hole's normal."""
    cosine = -np.einsum("kc,c...->k...", normals, direction)
    return 1.0 - 2.25 * (1.0 - cosine**2) * np.reshape(sensitivity, (-1,) + (1,) * (direction.ndim - 1))


def grid(limit=30.0, step=5.0):
    side = np.radians(np.arange(-limit, limit + 0.1 * step, step))
    return tuple(np.ravel(part) for part in np.meshgrid(side, side))


def table(pressures, pitch, yaw, *, noise=0.0, rng=None, level=None, level_name=None):
    cp = pressures(direction_from_angles(pitch, yaw))
    if noise:
        cp = cp + noise * rng.normal(size=cp.shape)
    return CalibrationTable(
        pitch,
        yaw,
        STATIC + Q * cp,
        np.full(pitch.size, STATIC + Q),
        np.full(pitch.size, STATIC),
        np.arange(2, pitch.size + 2),
        "calibration.csv",
        level,
        level_name,
    )


def ideal(holes):
    normals = outward(holes)
    return lambda direction: sphere(direction, normals)


@pytest.fixture(scope="module")
def calibrations():
    return {holes: calibrate(table(ideal(holes), *grid()), title="ideal sphere") for holes in (5, 7)}


def read_back(calibration, pressures, pitch, yaw, *, q=600.0, static=-40.0, **options):
    direction = direction_from_angles(pitch, yaw)
    reading = calibration.read(static + q * pressures(direction), **options)
    apart = np.degrees(np.arccos(np.clip(np.sum(reading.direction * direction, axis=0), -1.0, 1.0)))
    errors = np.stack(
        [reading.pitch - pitch, reading.yaw - yaw, (reading.total - static - q) / q, (reading.static - static) / q]
    )
    speed = np.sqrt((reading.total - reading.static) / q) - 1.0
    return reading, apart, speed, errors


def test_stereographic_plane_is_exact_both_ways():
    pitch, yaw = np.radians([[-80.0, 0.0, 35.0], [60.0, 0.0, -70.0]])
    direction = direction_from_angles(pitch, yaw)
    assert np.allclose(from_plane(to_plane(direction)), direction, rtol=0, atol=1e-15)
    assert np.allclose(angles(direction), [pitch, yaw], rtol=0, atol=1e-14)


def test_cone_and_roll_as_a_probe_pitched_up_then_rolled():
    # Nose up by 20 degrees reads an upwash of 20 degrees; rolled counter-clockwise from behind by 90 degrees its upper
    # side points to port, and the same flow comes towards its starboard side.
    pitch, yaw = angles(direction_from_cone(np.radians([20.0, 20.0, 20.0]), np.radians([0.0, 90.0, 180.0])))
    assert np.degrees(pitch) == pytest.approx([20.0, 0.0, -20.0], abs=1e-12)
    assert np.degrees(yaw) == pytest.approx([0.0, 20.0, 0.0], abs=1e-12)


def test_five_hole_coefficients_are_those_published():
    # Treaster & Yocum (1979), definitions; worked by hand. Port reads 60 above starboard, lower 20 above upper.
    holes = np.array([[100.0], [70.0], [10.0], [40.0], [20.0]])
    found = coefficients(holes, np.array([104.0]), np.array([5.0]))
    mean, d = 35.0, 65.0
    assert found.first == pytest.approx(60.0 / d)
    assert found.second == pytest.approx(20.0 / d)
    assert found.total == pytest.approx((100.0 - 104.0) / d)
    assert found.static == pytest.approx((mean - 5.0) / d)


def test_seven_hole_coefficients_are_those_published():
    # Gallington (1980), definitions, with this program's hole numbers; worked by hand.
    holes = np.array([[100.0], [20.0], [30.0], [60.0], [70.0], [50.0], [25.0]])
    found = coefficients(holes, np.array([102.0]), np.array([0.0]))
    d = 100.0 - 255.0 / 6.0
    a, b, c = 50.0, 35.0, 20.0
    assert found.second == pytest.approx((2 * a + b + c) / 3 / d)
    assert found.first == pytest.approx((b - c) / np.sqrt(3) / d)
    assert found.static == pytest.approx(d / 102.0)
    holes[4] = 120.0
    found = coefficients(holes, np.array([125.0]), np.array([0.0]))
    d = 120.0 - (60.0 + 50.0) / 2
    assert found.sector == 4
    assert found.first == pytest.approx((120.0 - 100.0) / d)
    assert found.second == pytest.approx((50.0 - 60.0) / d)
    assert found.total == pytest.approx((120.0 - 125.0) / d)


@pytest.mark.parametrize("holes", [5, 7])
def test_both_coefficients_grow_with_their_angle(holes):
    pressures = ideal(holes)
    for index, (pitch, yaw) in enumerate([(0.0, 0.05), (0.05, 0.0)]):
        found = pressures(direction_from_angles(np.array([pitch]), np.array([yaw])))
        terms = sector_terms(found, leading_hole(found))
        numbers = np.array([terms.first[0], terms.second[0]]) / terms.denominator[0]
        # On the sphere C = 8 u v/(3 u² - 1): 0.2 at 0.05 rad, in the own direction only.
        assert numbers[index] == pytest.approx(8 * 0.05 / 2, rel=0.02)
        assert abs(numbers[1 - index]) < 1e-12


def test_sector_is_the_hole_that_faces_the_stream():
    # Flow from above (downwash) meets the top hole p2, flow from port (towards starboard) the port holes.
    pitch, yaw = np.radians([-40.0, 40.0, -20.0, 20.0, 20.0, -20.0]), np.radians([0.0, 0.0, 35.0, 35.0, -35.0, -35.0])
    leads = leading_hole(ideal(7)(direction_from_angles(pitch, yaw)))
    assert leads.tolist() == [1, 4, 2, 3, 5, 6]


@pytest.mark.parametrize("holes", [5, 7])
def test_sphere_is_read_back_between_the_calibration_points(calibrations, holes):
    rng = np.random.default_rng(holes)
    pitch, yaw = np.radians(rng.uniform(-30.0, 30.0, (2, 6000)))
    reading, apart, speed, errors = read_back(calibrations[holes], ideal(holes), pitch, yaw)
    assert not reading.out_of_range.any()
    # The issue asks for 0.05 deg and 0.1 % of speed; 0.004 deg and 6e-5 are reached on a 5 deg grid.
    assert apart.max() < 0.01
    assert np.abs(speed).max() < 2e-4
    assert np.abs(errors[2:]).max() < 4e-4
    # The stated uncertainty, left-out errors by region, is honest: most errors lie within twice of it ...
    sizes = reading.standard_uncertainty()
    assert np.all(np.mean(np.abs(errors) < 2 * sizes, axis=1) > 0.9)
    # ... and it is not a blanket figure: exact data leave it below a thousandth of the 0.05 deg on average.
    assert np.degrees(np.median(sizes[:2])) < 0.01


@pytest.mark.parametrize("holes", [5, 7])
def test_directions_outside_the_hull_are_flagged_and_those_inside_are_not(calibrations, holes):
    rng = np.random.default_rng(10 + holes)
    pitch, yaw = np.radians(rng.uniform(-36.0, 36.0, (2, 6000)))
    reading, *_ = read_back(calibrations[holes], ideal(holes), pitch, yaw)
    outside = np.degrees(np.maximum(np.abs(pitch), np.abs(yaw))) - 30.0
    # The tolerance is 2 % of the 5 deg spacing, that is 0.1 deg; 0.02 deg more for the error of the reading itself.
    assert not reading.out_of_range[outside < 0.0].any()
    assert reading.out_of_range[outside > 0.12].all()
    far = calibrations[holes].read(np.array([[0.0], [90.0], [-90.0], [90.0], [-90.0], [0.0], [0.0]])[:holes])
    assert far.out_of_range.all()


@pytest.mark.parametrize("holes", [5, 7])
def test_a_dead_reading_is_out_of_range(calibrations, holes):
    readings = np.ones((holes, 2))
    readings[2, 1] = np.nan
    reading = calibrations[holes].read(readings)
    assert reading.out_of_range.all()


@pytest.mark.parametrize("holes", [5, 7])
def test_the_calibration_points_themselves_are_in_range(calibrations, holes):
    calibration = calibrations[holes]
    assert calibration.covered.all()
    assert not calibration.bad.any()
    assert not calibration.read(calibration.table.holes).out_of_range.any()
    # Residuals of exact data are those of the smoothing alone.
    assert np.degrees(np.abs(calibration.residual[:2]).max()) < 0.005


@pytest.mark.parametrize("holes", [5, 7])
def test_displaced_holes_unequal_sensitivities_and_an_irregular_table(holes):
    rng = np.random.default_rng(20 + holes)
    normals = outward(holes, jitter=0.08, rng=rng)
    sensitivity = 1.0 + 0.08 * rng.normal(size=holes)

    def pressures(direction):
        return sphere(direction, normals, sensitivity)

    calibration = calibrate(table(pressures, *np.radians(rng.uniform(-30.0, 30.0, (2, 250)))))
    assert not calibration.bad.any()
    reading, apart, speed, _ = read_back(calibration, pressures, *np.radians(rng.uniform(-32.0, 32.0, (2, 6000))))
    inside = ~reading.out_of_range
    assert 0.75 < inside.mean() < 0.95
    assert apart[inside].max() < 0.05
    assert np.abs(speed[inside]).max() < 1e-3


def test_large_cone_of_a_seven_hole_probe_is_read_in_its_outer_sectors():
    cone, roll = (
        np.ravel(a) for a in np.meshgrid(np.radians(np.arange(5.0, 51.0, 5.0)), np.radians(np.arange(0, 360, 12)))
    )
    pitch, yaw = angles(direction_from_cone(np.append(cone, 0.0), np.append(roll, 0.0)))
    calibration = calibrate(table(ideal(7), pitch, yaw))
    assert set(calibration.coefficients.sector) == set(range(7))
    rng = np.random.default_rng(3)
    at = angles(direction_from_cone(np.radians(rng.uniform(0, 49, 5000)), np.radians(rng.uniform(0, 360, 5000))))
    reading, apart, speed, _ = read_back(calibration, ideal(7), *at)
    assert not reading.out_of_range.any()
    assert apart.max() < 0.05
    assert np.abs(speed).max() < 1e-3


def test_noise_of_the_table_shows_in_the_uncertainty_and_is_smoothed():
    rng = np.random.default_rng(31)
    noise = 0.002
    calibration = calibrate(table(ideal(5), *grid(), noise=noise, rng=rng))
    assert not calibration.bad.any()
    reading, _, _, errors = read_back(calibration, ideal(5), *np.radians(rng.uniform(-28, 28, (2, 4000))))
    pitch, _, total, _ = calibration.standard_uncertainty()
    # p4 - p5 = (9/4) 2 u w q changes by 4.5 q per rad near the axis: noise of both holes is sqrt(2)/4.5 of it in angle.
    single = noise * np.sqrt(2.0) / 4.5
    assert 0.8 * single < pitch < 2.5 * single
    assert noise * 0.7 < total < noise * 2
    # A reading is helped by its neighbours: its own error is smaller than that of a single calibration point.
    assert np.std(errors[0]) < 0.8 * pitch
    assert np.all(np.mean(np.abs(errors) < 2 * reading.standard_uncertainty(), axis=1) > 0.95)


def test_bad_points_are_named_and_do_not_spoil_the_rest():
    rng = np.random.default_rng(32)
    clean = table(ideal(5), *grid(), noise=0.001, rng=rng)
    holes, yaw = clean.holes.copy(), clean.yaw.copy()
    holes[2, 40] += 0.05 * Q
    holes[0, 100] -= 0.03 * Q
    yaw[70] += np.radians(2.0)
    spoilt = CalibrationTable(clean.pitch, yaw, holes, clean.total, clean.static, clean.line, clean.source)
    calibration = calibrate(spoilt)
    named = {point.line: point for point in calibration.bad_points}
    assert set(named) == {42, 102, 72}
    assert named[42].hole == 3
    assert named[42].difference == pytest.approx(0.05, rel=0.1)
    assert named[102].hole == 1
    assert named[102].difference == pytest.approx(-0.03, rel=0.15)
    assert all(point.deviations > 8 for point in named.values())
    assert "line 42 (pitch -25.0 deg, yaw -15.0 deg): p3 lies +0.049 q" in named[42].sentence
    assert "robust standard deviations" in named[42].sentence
    _, apart, _, _ = read_back(calibration, ideal(5), *np.radians(rng.uniform(-28, 28, (2, 2000))))
    assert apart.max() < 0.1


def test_no_point_of_an_exact_coarse_table_is_called_bad():
    for holes in (5, 7):
        assert not calibrate(table(ideal(holes), *grid(step=10.0))).bad.any()


def test_repeated_points_are_one_direction():
    rng = np.random.default_rng(33)
    pitch, yaw = grid()
    pitch, yaw = np.append(pitch, pitch[:20]), np.append(yaw, yaw[:20])
    calibration = calibrate(table(ideal(5), pitch, yaw, noise=0.001, rng=rng))
    assert calibration.table.n == 189
    assert np.isfinite(calibration.left_out).all()
    assert calibration.standard_uncertainty()[0] < np.radians(0.1)


def test_incomplete_points_are_noted():
    whole = table(ideal(5), *grid())
    holes = whole.holes.copy()
    holes[3, 7] = np.nan
    calibration = calibrate(
        CalibrationTable(whole.pitch, whole.yaw, holes, whole.total, whole.static, whole.line, whole.source)
    )
    assert calibration.notes == ("line 9: p4 is missing; the point is not used",)
    assert calibration.table.n == whole.n - 1


def machs(numbers, pressures):
    """Tables at several Mach numbers, whose sensitivities grow by 0.3 M²."""
    pitch, yaw = grid()
    parts = [
        table(lambda d, m=m: 1.0 - (1.0 - pressures(d)) * (1 + 0.3 * m**2), pitch, yaw, level=np.full(pitch.size, m))
        for m in numbers
    ]
    return CalibrationTable(
        *(np.concatenate([getattr(p, n) for p in parts]) for n in ("pitch", "yaw")),
        np.concatenate([p.holes for p in parts], axis=1),
        *(np.concatenate([getattr(p, n) for p in parts]) for n in ("total", "static")),
        np.arange(sum(p.n for p in parts)),
        "calibration.csv",
        np.concatenate([p.level for p in parts]),
        "mach",
    )


def test_sets_are_interpolated_between_mach_numbers():
    calibration = calibrate(machs((0.2, 0.5, 0.4, 0.3), ideal(5)))
    assert calibration.levels == pytest.approx([0.2, 0.3, 0.4, 0.5])
    rng = np.random.default_rng(34)
    at = np.radians(rng.uniform(-29, 29, (2, 2000)))

    def at_mach(mach):
        return lambda d: 1.0 - (1.0 - ideal(5)(d)) * (1 + 0.3 * mach**2)

    _, apart, speed, _ = read_back(calibration, at_mach(0.3), *at, level=0.3)
    assert apart.max() < 0.01
    # Half-way, linear interpolation of M² misses 0.3 (0.05)² = 0.08 % of the sensitivity.
    _, apart, speed, _ = read_back(calibration, at_mach(0.35), *at, level=0.35)
    assert apart.max() < 0.05
    assert np.abs(speed).max() < 1e-3
    # Without the sets the difference is large: what is read at 0.5 with the set of 0.2 is off by 6 % of sensitivity.
    _, apart, speed, _ = read_back(calibration, at_mach(0.5), *at, level=0.2)
    assert np.abs(speed).max() > 5e-3
    with pytest.raises(ValueError, match="a level is needed"):
        calibration.read(np.ones((5, 1)))


@pytest.mark.parametrize("holes", [5, 7])
def test_product_is_read_back_identically(calibrations, holes, tmp_path):
    path = tmp_path / "probe.nc"
    calibration = calibrations[holes]
    write_calibration(calibration, path)
    again = read_calibration(path)
    rng = np.random.default_rng(35)
    readings = calibration.table.holes + 5.0 * rng.normal(size=calibration.table.holes.shape)
    first, second = calibration.read(readings), again.read(readings)
    for name in ("direction", "total", "static", "sector", "out_of_range"):
        assert np.array_equal(getattr(first, name), getattr(second, name))
    assert np.array_equal(first.standard_uncertainty(), second.standard_uncertainty())
    for name in ("residual", "left_out", "difference", "deviations", "bad", "edge", "covered"):
        assert np.array_equal(getattr(calibration, name), getattr(again, name))
    assert np.array_equal(calibration.coefficients.first, again.coefficients.first)
    assert np.array_equal(calibration.table.holes, again.table.holes)
    assert (again.title, again.notes) == (calibration.title, calibration.notes)
    write_calibration(again, tmp_path / "again.nc")
    with xr.open_dataset(path) as one, xr.open_dataset(tmp_path / "again.nc") as two:
        assert one.identical(two)
        assert all("long_name" in variable.attrs and "units" in variable.attrs for variable in one.data_vars.values())


def test_sets_survive_the_product(tmp_path):
    calibration = calibrate(machs((0.2, 0.4), ideal(5)))
    write_calibration(calibration, tmp_path / "probe.nc")
    again = read_calibration(tmp_path / "probe.nc")
    readings = calibration.table.holes[:, ::7]
    level = np.linspace(0.1, 0.5, readings.shape[1])
    assert np.array_equal(calibration.read(readings, level=level).total, again.read(readings, level=level).total)
    assert again.table.level_name == "mach"


def test_a_calibration_can_be_sent_to_another_process(calibrations):
    again = pickle.loads(pickle.dumps(calibrations[7]))
    readings = calibrations[7].table.holes
    assert np.array_equal(again.read(readings).total, calibrations[7].read(readings).total)


def swapped(source, order):
    return CalibrationTable(
        source.pitch, source.yaw, source.holes[order], source.total, source.static, source.line, source.source
    )


@pytest.mark.parametrize(
    ("holes", "order", "words"),
    [
        (5, [0, 2, 1, 3, 4], ("yaw coefficient falls", "exchange the port and starboard holes")),
        (5, [0, 1, 2, 4, 3], ("pitch coefficient falls", "exchange the lower and upper holes")),
        (5, [0, 3, 4, 1, 2], ("changes more with the other angle", "numbers of the outer holes")),
        (5, [1, 0, 2, 3, 4], ("p1", "")),
        (7, [0, 4, 3, 2, 1, 6, 5], ("pitch coefficient falls", "top and bottom")),
        (7, [0, 2, 3, 4, 5, 6, 1], ("changes more with the other angle", "outer holes")),
    ],
)
def test_holes_numbered_otherwise_are_refused(holes, order, words):
    with pytest.raises(DataError) as caught:
        calibrate(swapped(table(ideal(holes), *grid()), order))
    assert all(word in caught.value.line for word in words)
    assert caught.value.file == "calibration.csv"


def test_what_is_no_calibration_is_refused():
    good = table(ideal(5), *grid())
    few = table(ideal(5), *(a[:9] for a in grid()))
    with pytest.raises(DataError, match="9 different calibrated directions; give at least 16"):
        calibrate(few)
    line = table(ideal(5), np.linspace(-0.5, 0.5, 40), np.zeros(40))
    with pytest.raises(DataError, match="lie on one line"):
        calibrate(line)
    with pytest.raises(DataError, match=r"line 2: the total pressure is not above the static pressure at 169 of 169"):
        calibrate(CalibrationTable(good.pitch, good.yaw, good.holes, good.static, good.total, good.line, good.source))
    rng = np.random.default_rng(36)
    jumbled = CalibrationTable(
        rng.permutation(good.pitch), good.yaw, good.holes, good.total, good.static, good.line, good.source
    )
    with pytest.raises(DataError, match="do not follow the flow direction"):
        calibrate(jumbled)


def test_files_that_are_no_calibration(tmp_path):
    with pytest.raises(DataError, match="does not exist"):
        read_calibration(tmp_path / "none.nc")
    (tmp_path / "text.nc").write_text("pitch,yaw")
    with pytest.raises(DataError, match="not netCDF"):
        read_calibration(tmp_path / "text.nc")
    xr.Dataset({"a": 1}).to_netcdf(tmp_path / "other.nc")
    with pytest.raises(DataError, match="not a probe calibration"):
        read_calibration(tmp_path / "other.nc")


def cone_table(holes, top, off_axis):
    """A table in cone and roll angles of a sphere with its outer holes off the axis by an angle, deg."""
    cone, around = (part.ravel() for part in np.meshgrid(np.arange(0.0, top + 0.1, 5.0), np.arange(0.0, 360.0, 15.0)))
    once = (cone > 0) | (around == 0)
    cone, around = np.radians(cone[once]), np.radians(around[once])
    direction = np.stack([np.cos(cone), np.sin(cone) * np.cos(around), np.sin(cone) * np.sin(around)])
    return direction, 500.0 * sphere_probe(holes, off_axis=np.radians(off_axis)).coefficients(direction)


@pytest.mark.parametrize(("top", "off_axis", "kept"), [(75.0, 30.0, 0.4), (75.0, 45.0, 0.75), (55.0, 45.0, 0.95)])
def test_directions_that_read_alike_are_out_of_range_on_either_side_of_the_fold(top, off_axis, kept):
    direction, readings = cone_table(7, top, off_axis)
    pitch, yaw = np.arctan2(direction[2], direction[0]), np.arcsin(direction[1])
    one = np.ones(pitch.size)
    table = CalibrationTable(pitch, yaw, readings, 500.0 * one, 0.0 * one, np.arange(pitch.size), "c.csv")
    found = calibrate(table)
    rng = np.random.default_rng(4)
    cone = np.arccos(rng.uniform(np.cos(np.radians(top - 1.0)), 1.0, 4000))
    around = rng.uniform(0.0, 2 * np.pi, cone.size)
    truth = np.stack([np.cos(cone), np.sin(cone) * np.cos(around), np.sin(cone) * np.sin(around)])
    reading = found.read(500.0 * sphere_probe(7, off_axis=np.radians(off_axis)).coefficients(truth))
    error = np.degrees(np.arccos(np.clip(np.sum(reading.direction * truth, axis=0), -1.0, 1.0)))
    told = ~np.asarray(reading.out_of_range)
    # Left in, the fold gave directions up to 13 deg wrong; within a degree is what the tables' own search resolves.
    assert error[told].max() < 1.3
    assert told[np.degrees(cone) < 40].all() and told.mean() > kept
    assert (top > 60) == (not (found.covered | found.bad).all())
