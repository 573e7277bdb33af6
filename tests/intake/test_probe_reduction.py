"""From hole pressures to velocities: exact angles, every mounting axis, errors, compressible points."""

import dataclasses
import pickle

import numpy as np
import pytest

from wakeledger.core.errors import DataError
from wakeledger.core.flags import Flag
from wakeledger.core.points import Channel
from wakeledger.core.rotation import rotation_matrix
from wakeledger.intake.probe.calibration import CalibrationTable, calibrate
from wakeledger.intake.probe.directions import direction_from_angles
from wakeledger.intake.probe.mounting import Mounting
from wakeledger.intake.probe.reduction import CALIBRATION_INPUTS, WAVES, HoleReduction
from wakeledger.stream.reference import Reference

SPEED = 40.0
STREAM = Reference(speed=SPEED, density=1.2, static_pressure=100_000.0, temperature=288.15)
AZIMUTH = {5: (180, 0, 270, 90), 7: (90, 150, 210, 270, 330, 30)}


def sphere(direction, holes):
    """Cp = 1 - (9/4) sin^2(theta) at the centre and at holes 45 degrees off axis, in probe axes."""
    across = np.radians(AZIMUTH[holes])
    ring = np.sqrt(0.5) * np.stack([-np.ones(across.size), np.cos(across), np.sin(across)], axis=1)
    normals = np.vstack([[-1.0, 0.0, 0.0], ring])
    return 1.0 - 2.25 * (1.0 - np.einsum("kc,c...->k...", normals, direction) ** 2)


def table(holes, *, sensitivity=1.0, **extra):
    side = np.radians(np.arange(-30.0, 30.1, 5.0))
    pitch, yaw = (np.ravel(part) for part in np.meshgrid(side, side))
    cp = 1.0 - sensitivity * (1.0 - sphere(direction_from_angles(pitch, yaw), holes))
    ones = np.ones(pitch.size)
    return CalibrationTable(pitch, yaw, 500.0 * cp, 500.0 * ones, 0.0 * ones, np.arange(pitch.size), "c.csv", **extra)


@pytest.fixture(scope="module")
def calibrations():
    return {holes: calibrate(table(holes)) for holes in (5, 7)}


def readings(velocity, static, mounting, holes, *, density=1.2):
    """Hole pressures of a mounted sphere probe in velocities (3, n) of wind axes."""
    own = rotation_matrix(mounting.pitch, mounting.yaw, mounting.roll).T @ velocity
    square = np.sum(own**2, axis=0)
    pressures = static + 0.5 * density * square * sphere(own / np.sqrt(square), holes)
    return {f"p{number + 1}": values for number, values in enumerate(pressures)}


def wake(n=2000, seed=1, across=8.0):
    rng = np.random.default_rng(seed)
    velocity = np.stack([rng.uniform(0.7, 1.05, n) * SPEED, *rng.uniform(-across, across, (2, n))])
    return velocity, 100_000.0 + rng.normal(0.0, 30.0, n)


def velocity_of(state):
    return np.stack([state.u, state.v, state.w])


@pytest.mark.parametrize("holes", [5, 7])
def test_velocity_and_pressures_come_back(calibrations, holes):
    velocity, static = wake()
    state = HoleReduction(calibrations[holes]).state(readings(velocity, static, Mounting(), holes), STREAM)
    # The issue asks for 0.1 % of U; the calibration's 5 deg grid gives 2e-5 in this cone of 17 deg.
    assert np.abs(velocity_of(state) - velocity).max() < 1e-4 * SPEED
    assert state.static_pressure == pytest.approx(static, abs=1e-4 * STREAM.dynamic_pressure)
    total = static + 0.6 * np.sum(velocity**2, axis=0)
    assert state.total_pressure == pytest.approx(total, abs=1e-4 * STREAM.dynamic_pressure)
    assert not state.impossible.any()


@pytest.mark.parametrize(
    ("axis", "angle", "probe_pitch", "probe_yaw"),
    [
        # Nose up reads an upwash, nose to port reads a flow towards port (interface: mounting), rolled
        # counter-clockwise from behind reads an upwash of the stream as a flow towards starboard.
        ("pitch", 10.0, 10.0, 0.0),
        ("yaw", 10.0, 0.0, -10.0),
    ],
)
def test_sign_of_each_mounting_axis(calibrations, axis, angle, probe_pitch, probe_yaw):
    mounting = Mounting(**{axis: np.radians(angle)})
    stream = np.array([[SPEED], [0.0], [0.0]])
    values = readings(stream, 100_000.0, mounting, 5)
    reduction = HoleReduction(calibrations[5], mounting)
    reading = reduction.read(values, STREAM)
    assert np.degrees(reading.pitch[0]) == pytest.approx(probe_pitch, abs=0.01)
    assert np.degrees(reading.yaw[0]) == pytest.approx(probe_yaw, abs=0.01)
    assert velocity_of(reduction.state(values, STREAM)) == pytest.approx(stream, abs=1e-3 * SPEED)
    # The opposite sign is off by twice the angle, 35 % of the speed across.
    wrong = HoleReduction(calibrations[5], Mounting(**{axis: -np.radians(angle)})).state(values, STREAM)
    assert np.abs(velocity_of(wrong) - stream).max() > 0.3 * SPEED


def test_sign_of_the_roll(calibrations):
    mounting = Mounting(roll=np.radians(90.0))
    upwash = np.array([[SPEED], [0.0], [5.0]])
    values = readings(upwash, 100_000.0, mounting, 5)
    reduction = HoleReduction(calibrations[5], mounting)
    # Rolled counter-clockwise from behind, the probe's starboard side is up: the upwash comes from its port side.
    assert np.degrees(reduction.read(values, STREAM).yaw[0]) == pytest.approx(np.degrees(np.arctan(5 / 40)), abs=0.01)
    assert velocity_of(reduction.state(values, STREAM)) == pytest.approx(upwash, abs=1e-3 * SPEED)


def test_rotations_apply_in_the_order_yaw_pitch_roll_and_stay_exact_for_large_angles(calibrations):
    mounting = Mounting(pitch=np.radians(25.0), yaw=np.radians(-40.0), roll=np.radians(70.0))
    turned = rotation_matrix(mounting.pitch, mounting.yaw, mounting.roll)
    rng = np.random.default_rng(2)
    own = SPEED * direction_from_angles(*np.radians(rng.uniform(-29.0, 29.0, (2, 500))))
    velocity = turned @ own
    values = readings(velocity, np.full(500, 100_000.0), mounting, 7)
    state = HoleReduction(calibrations[7], mounting).state(values, STREAM)
    assert np.abs(velocity_of(state) - velocity).max() < 2e-4 * SPEED
    # A survey rotation acts on what the mounting has made of it.
    offset = rotation_matrix(0.1, -0.2, 0.3)
    state = HoleReduction(calibrations[7], mounting).state(values, STREAM, rotation=offset)
    assert np.abs(velocity_of(state) - offset @ velocity).max() < 2e-4 * SPEED


@pytest.mark.parametrize("holes", [5, 7])
def test_a_probe_rolled_by_half_a_turn_gives_the_same_plane(calibrations, holes):
    velocity, static = wake(seed=3)
    states = []
    for roll in (0.0, np.pi):
        mounting = Mounting(pitch=np.radians(1.5), yaw=np.radians(-2.0), roll=roll)
        values = readings(velocity, static, mounting, holes)
        states.append(HoleReduction(calibrations[holes], mounting).state(values, STREAM))
    assert np.abs(velocity_of(states[0]) - velocity_of(states[1])).max() < 1e-4 * SPEED
    assert np.abs(velocity_of(states[1]) - velocity).max() < 1e-4 * SPEED


def test_points_out_of_range_are_flagged_and_masked(calibrations):
    directions = np.radians([[0.0, 35.0, 0.0, -29.0], [0.0, 0.0, -33.0, 29.0]])
    velocity = SPEED * direction_from_angles(*directions)
    values = readings(velocity, np.full(4, 100_000.0), Mounting(), 5)
    values["p4"] = values["p4"].copy()
    values["p4"][0] = np.nan
    reduction = HoleReduction(calibrations[5])
    assert reduction.flags(values, STREAM).tolist() == [Flag.MISSING, Flag.OUT_OF_RANGE, Flag.OUT_OF_RANGE, 0]
    state = reduction.state(values, STREAM)
    assert np.isnan(state.u).tolist() == [True, True, True, False]
    assert np.isnan(state.total_pressure).tolist() == [True, True, True, False]
    assert not state.impossible.any()


def test_points_do_not_come_and_go_with_the_errors_once_the_range_is_frozen(calibrations):
    n = 400
    velocity = SPEED * direction_from_angles(np.full(n, np.radians(29.9)), np.linspace(-0.5, 0.5, n))
    values = readings(velocity, np.full(n, 100_000.0), Mounting(), 5)
    rng = np.random.default_rng(4)
    errors = {f"probe.p{k}": rng.normal(0.0, 10.0, n) for k in range(1, 6)}
    loose = HoleReduction(calibrations[5])
    frozen = loose.frozen_on(values, STREAM)
    assert frozen.in_range.all()
    assert 0.2 < np.isnan(loose.state(values, STREAM, errors).u).mean() < 0.8
    state = frozen.state(values, STREAM, errors)
    assert np.isfinite(state.u).all()
    # Noise of 10 Pa in q = 960 Pa is about half a degree; nothing is clamped, the tables reach 5 deg beyond the hull.
    spread = np.degrees(np.arctan2(state.w, state.u) - np.radians(29.9))
    assert 0.15 < np.std(spread) < 1.5
    assert abs(np.mean(spread)) < 0.2


def test_relative_holes_and_normalised_holes_give_absolute_pressures(calibrations):
    velocity, static = wake(n=50, seed=5)
    absolute = readings(velocity, static, Mounting(), 5)
    direct = HoleReduction(calibrations[5]).state(absolute, STREAM)
    for kind, change in (
        (Channel(np.empty(0), relative_to="static"), lambda p: p - STREAM.static_pressure),
        (Channel(np.empty(0), relative_to="total"), lambda p: p - STREAM.total_pressure),
        (
            Channel(np.empty(0), relative_to="static", normalised_by="dynamic_pressure"),
            lambda p: (p - STREAM.static_pressure) / STREAM.dynamic_pressure,
        ),
    ):
        values = {name: change(p) for name, p in absolute.items()}
        state = HoleReduction(calibrations[5], kinds=dict.fromkeys(values, kind)).state(values, STREAM)
        assert velocity_of(state) == pytest.approx(velocity_of(direct), rel=1e-9, abs=1e-8)
        assert state.static_pressure == pytest.approx(direct.static_pressure, rel=1e-9)


def test_density_of_the_point_is_used(calibrations):
    velocity, static = wake(n=50, seed=6)
    density = np.linspace(1.0, 1.3, 50)
    own = np.sum(velocity**2, axis=0)
    pressures = static + 0.5 * density * own * sphere(velocity / np.sqrt(own), 5)
    values = {f"p{k + 1}": p for k, p in enumerate(pressures)} | {"density": density}
    state = HoleReduction(calibrations[5]).state(values, STREAM)
    assert np.abs(velocity_of(state) - velocity).max() < 1e-4 * SPEED
    assert np.array_equal(state.density, density)


def test_compressible_points_follow_naca_1135(calibrations):
    # NACA Report 1135, table I: M = 0.6, p/p0 = 0.7840, T/T0 = 0.9328 (from memory; consistent to all digits shown).
    total, static = 100_000.0, 78_400.0
    reference = Reference(speed=200.0, density=1.0, static_pressure=78_400.0, temperature=273.0, compressible=True)
    pitch, yaw = np.radians([5.0]), np.radians([-10.0])
    pressures = static + (total - static) * sphere(direction_from_angles(pitch, yaw), 5)
    values = {f"p{k + 1}": p for k, p in enumerate(pressures)} | {"total_temperature": np.array([300.0])}
    state = HoleReduction(calibrations[5]).state(values, reference)
    assert state.temperature == pytest.approx(0.9328 * 300.0, rel=1e-4)
    speed = 0.6 * np.sqrt(1.4 * 287.05287 * 0.9328 * 300.0)
    # Four digits of the table leave 3e-4 of the Mach number.
    assert np.linalg.norm(velocity_of(state)) == pytest.approx(speed, rel=5e-4)
    assert np.degrees(np.arctan2(state.w, state.u)) == pytest.approx(5.0, abs=0.01)
    assert np.degrees(np.arcsin(state.v / np.linalg.norm(velocity_of(state)))) == pytest.approx(-10.0, abs=0.01)
    assert state.density == pytest.approx(78_400.0 / (287.05287 * 0.9328 * 300.0), rel=1e-3)


def test_draws_are_the_single_reductions_stacked(calibrations):
    velocity, static = wake(n=60, seed=7)
    values = readings(velocity, static, Mounting(), 7)
    rng = np.random.default_rng(8)
    draws = 4
    errors = {"probe.p3": rng.normal(0.0, 2.0, (draws, 60)), "angle.roll": rng.normal(0.0, 0.02, (draws, 1))}
    errors |= {name: rng.normal(size=(draws, 1)) for name in CALIBRATION_INPUTS}
    reduction = HoleReduction(calibrations[7], Mounting(pitch=0.02)).frozen_on(values, STREAM)
    together = reduction.state(values, STREAM, errors)
    assert together.u.shape == (draws, 60)
    for draw in range(draws):
        alone = reduction.state(values, STREAM, {name: error[draw] for name, error in errors.items()})
        assert np.array_equal(velocity_of(alone), velocity_of(together)[:, draw])
        assert np.array_equal(alone.total_pressure, together.total_pressure[draw])


@pytest.mark.parametrize(("name", "component", "sign"), [("pitch", 2, 1), ("yaw", 1, -1)])
def test_an_error_of_the_mounting_turns_the_velocity(calibrations, name, component, sign):
    stream = np.array([[SPEED], [0.0], [0.0]])
    values = readings(stream, 100_000.0, Mounting(), 5)
    errors = {f"angle.{name}": 0.01}
    state = HoleReduction(calibrations[5]).state(values, STREAM, errors)
    # The probe is believed nose up (nose to port) by 0.01 rad: what flows along its axis is taken for a downwash (a
    # flow towards starboard).
    assert velocity_of(state)[component, 0] == pytest.approx(-sign * 0.01 * SPEED, rel=0.01)


def test_an_error_of_the_calibration_is_its_own_uncertainty_in_that_region():
    rng = np.random.default_rng(9)
    source = table(5)
    noisy = dataclasses.replace(source, holes=source.holes + 1.0 * rng.normal(size=source.holes.shape))
    calibration = calibrate(noisy)
    velocity, static = wake(n=300, seed=10)
    values = readings(velocity, static, Mounting(), 5)
    reduction = HoleReduction(calibration).frozen_on(values, STREAM)
    plain = reduction.read(values, STREAM)
    sizes = plain.standard_uncertainty()
    dynamic = plain.total - plain.static
    squares = np.zeros_like(sizes)
    for number, name in enumerate(CALIBRATION_INPUTS):
        index = number // WAVES
        off = reduction.read(values, STREAM, {name: 2.0})
        changes = np.stack(
            [
                off.pitch - plain.pitch,
                off.yaw - plain.yaw,
                (off.total - plain.total) / dynamic,
                (off.static - plain.static) / dynamic,
            ]
        )
        squares[index] += changes[index] ** 2
        # Turning the yaw leaves the pitch exactly where it was, and the pressures too.
        assert np.abs(np.delete(changes, index, axis=0)).max() < 1e-9
        if number % WAVES == 0:
            assert np.all(changes[index] > 0)
    assert np.sqrt(squares) == pytest.approx(2.0 * sizes, rel=1e-6)
    assert np.std(sizes[0]) > 0.01 * np.mean(sizes[0])


def machs(numbers):
    parts = [table(5, sensitivity=1 + 0.3 * m**2, level=np.full(169, m), level_name="mach") for m in numbers]
    return CalibrationTable(
        *(np.concatenate([getattr(p, n) for p in parts]) for n in ("pitch", "yaw")),
        np.concatenate([p.holes for p in parts], axis=1),
        *(np.concatenate([getattr(p, n) for p in parts]) for n in ("total", "static")),
        np.arange(169 * len(parts)),
        "c.csv",
        np.concatenate([p.level for p in parts]),
        "mach",
    )


def test_the_mach_number_of_the_point_chooses_between_sets():
    reduction = HoleReduction(calibrate(machs((0.3, 0.4, 0.5, 0.6))))
    reference = Reference(170.0, 95_000.0 / (287.05287 * 288.0), 95_000.0, 288.0, compressible=True)
    mach = np.array([0.3, 0.42, 0.5])
    static = 95_000.0
    total = static * (1 + 0.2 * mach**2) ** 3.5
    direction = direction_from_angles(np.radians([4.0, -7.0, 10.0]), np.radians([-3.0, 12.0, 0.0]))
    cp = 1.0 - (1 + 0.3 * mach**2) * (1.0 - sphere(direction, 5))
    values = {f"p{k + 1}": p for k, p in enumerate(static + (total - static) * cp)}
    reading = reduction.read(values, reference)
    # Linear interpolation of M² between sets misses at most 0.3 (0.05)² = 0.08 % of the sensitivity.
    assert reading.total == pytest.approx(total, abs=1e-3 * (total - static).max())
    assert reading.static == pytest.approx(np.full(3, static), abs=1e-3 * (total - static).max())
    assert np.abs(reading.direction - direction).max() < 1e-3
    gauge = Reference(speed=40.0, density=1.2)
    with pytest.raises(DataError, match="Mach number, and the survey's is not known; give static_pressure"):
        reduction.read({name: p - static for name, p in values.items()}, gauge)


def test_the_tip_reynolds_number_chooses_between_sets():
    source = machs((0.3, 0.6))
    source = dataclasses.replace(source, level=np.where(source.level < 0.4, 5_000.0, 20_000.0), level_name="reynolds")
    reduction = HoleReduction(calibrate(source), tip_diameter=3.2e-3)
    # At 40 m/s in air of 288.15 K, mu = 1.789e-5 Pa s: Re = 1.2 * 40 * 3.2e-3/1.789e-5 = 8586, 24 % of the way.
    share = (8586.0 - 5000.0) / 15000.0
    sensitivity = 1 + 0.3 * (0.09 + share * (0.36 - 0.09))
    direction = direction_from_angles(np.radians([6.0]), np.radians([-4.0]))
    pressures = 100_000.0 + 960.0 * (1.0 - sensitivity * (1.0 - sphere(direction, 5)))
    values = {f"p{k + 1}": p for k, p in enumerate(pressures)}
    reading = reduction.read(values, STREAM)
    assert reading.total - reading.static == pytest.approx([960.0], rel=2e-3)
    with pytest.raises(DataError, match="give tip_diameter in"):
        dataclasses.replace(reduction, tip_diameter=np.nan).read(values, STREAM)


def test_a_missing_hole_is_named(calibrations):
    values = readings(*wake(n=3), Mounting(), 7)
    del values["p6"]
    with pytest.raises(DataError, match="hole p6 has no column, and the probe is calibrated with 7 holes"):
        HoleReduction(calibrations[7]).state(values, STREAM)


def test_a_reduction_can_be_sent_to_another_process(calibrations):
    velocity, static = wake(n=20)
    values = readings(velocity, static, Mounting(), 7)
    reduction = HoleReduction(calibrations[7]).frozen_on(values, STREAM)
    again = pickle.loads(pickle.dumps(reduction))
    assert np.array_equal(again.state(values, STREAM).u, reduction.state(values, STREAM).u)
