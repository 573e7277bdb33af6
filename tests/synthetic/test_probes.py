"""The synthetic probe and its raw traverses: closed forms, signs of every hole, and what each fault does."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wakeledger.stream.reference import Reference
from wakeledger.synthetic import GaussianLosses, SyntheticWake, grid_positions, vortex_pair
from wakeledger.synthetic.probes import (
    TraverseConditions,
    direction_of,
    record_traverse,
    sphere_probe,
    with_revisits,
)

REFERENCE = Reference(speed=40.0, density=1.2, static_pressure=1e5)
PAIR = vortex_pair(circulation=2.0, spacing=0.8, core=0.06)
LOSSES = GaussianLosses(np.array([-0.4, 0.0, 0.4]), np.zeros(3), np.array([1.0, 2.0, 1.0]), np.full(3, 0.08))
WAKE = SyntheticWake(REFERENCE, (PAIR,), LOSSES, PAIR)
STILL = SyntheticWake(REFERENCE, (vortex_pair(circulation=0.0, spacing=0.8, core=0.06),))
GRID = grid_positions(np.linspace(-0.6, 0.6, 25), np.linspace(-0.2, 0.2, 9), serpentine=True)


def generator():
    return np.random.default_rng(7)


def take(wake=WAKE, positions=GRID, probe=None, **conditions):
    return record_traverse(
        wake,
        positions,
        probe or sphere_probe(5),
        generator=generator(),
        conditions=TraverseConditions(**conditions),
    )


def test_holes_on_axis_read_the_closed_form():
    # 1 - (9/4) sin^2(45 deg) = -1/8: the sphere's potential flow.
    for holes in (5, 7):
        c = sphere_probe(holes).coefficients(np.array([40.0, 0.0, 0.0]))
        assert_allclose(c, [1.0] + [-0.125] * (holes - 1), rtol=1e-12)


def test_a_hole_that_faces_the_stream_reads_the_total_pressure():
    # p2 to port faces a flow at 45 deg towards starboard; p4 below faces one at 45 deg upwards; p3 and p5 the reverse.
    probe = sphere_probe(5)
    t = np.pi / 4
    for (pitch, yaw), hole in (((0, t), 1), ((0, -t), 2), ((t, 0), 3), ((-t, 0), 4)):
        c = probe.coefficients(direction_of(pitch, yaw))
        assert np.argmax(c) == hole
        assert_allclose(c[hole], 1.0, rtol=1e-12)


@pytest.mark.parametrize(
    ("hole", "around"), [(2, 90), (3, 150), (4, 210), (5, 270), (6, 330), (7, 30)], ids=lambda value: str(value)
)
def test_seven_holes_stand_where_the_interface_numbers_them(hole, around):
    # Seen from behind, angles counter-clockwise from starboard: the flow that hits a hole comes from its side.
    a = np.radians(around)
    c = sphere_probe(7).coefficients(np.array([1.0, -np.cos(a), -np.sin(a)]))
    assert np.argmax(c) == hole - 1


def test_pitch_and_yaw_coefficients_grow_with_the_angle():
    table = sphere_probe(5).calibration_table(np.radians([0.0, 5.0, 0.0]), np.radians([0.0, 0.0, 5.0]))
    assert table["p2"][2] > table["p3"][2]
    assert table["p4"][1] > table["p5"][1]
    assert_allclose(table["total_pressure"], 1000.0)


def test_displaced_and_unequal_holes_are_as_large_as_asked():
    probe = sphere_probe(7, displaced=np.radians(1.0), unequal=0.02, generator=generator())
    ideal = sphere_probe(7)
    angle = np.degrees(np.arccos(np.clip(np.sum(probe.normals * ideal.normals, axis=1), -1, 1)))
    assert 0.5 < angle.mean() < 2.0
    assert 0.005 < np.std(probe.sensitivity) < 0.05
    with pytest.raises(ValueError, match="generator"):
        sphere_probe(5, displaced=0.01)
    with pytest.raises(ValueError, match="5 or 7"):
        sphere_probe(6)


def test_mach_effect_and_calibration_noise():
    probe = sphere_probe(5, mach_effect=0.3)
    at = np.array([1.0, 0.0, 0.0])
    assert_allclose(probe.coefficients(at, mach=0.5)[1], 1 - 1.125 * 1.075, rtol=1e-12)
    table = sphere_probe(5).calibration_table(np.zeros(4000), np.zeros(4000), noise=2.0, generator=generator())
    # Five standard errors of 4000 values.
    assert_allclose(np.std(table["p3"]), 2.0, rtol=0.06)
    with pytest.raises(ValueError, match="generator"):
        sphere_probe(5).calibration_table(np.zeros(3), np.zeros(3), noise=1.0)


def test_a_perfect_traverse_reads_the_flow():
    raw = take(probe=sphere_probe(7))
    state = WAKE.state(GRID.y, GRID.z)
    centre = raw.values["p1"] + REFERENCE.static_pressure
    cosine = state.u / np.sqrt(state.u**2 + state.v**2 + state.w**2)
    q = state.total_pressure - state.static_pressure
    assert_allclose(centre, state.static_pressure + q * (1 - 2.25 * (1 - cosine**2)), rtol=1e-12)
    assert raw.holes.shape == (7, GRID.y.size)
    assert_allclose(take(relative=False).values["p1"], centre, rtol=1e-12)


def test_a_probe_mounted_nose_up_reads_upwash():
    # Flow from below raises the lower hole p4; nose to port is flow towards port and raises the starboard hole p3.
    up = take(STILL, pitch=0.1).values
    assert (up["p4"] > up["p5"] + 100).all()
    port = take(STILL, yaw=0.1).values
    assert (port["p3"] > port["p2"] + 100).all()


def test_the_head_turns_with_the_probe():
    upright, over = (take(STILL, roll=roll, head_pitch=0.05).values for roll in (0.0, np.pi))
    assert_allclose(upright["p4"], over["p4"], rtol=1e-9)
    # A level stream seen by a mounted pitch changes sides when the probe is rolled.
    upright, over = (take(STILL, roll=roll, pitch=0.05).values for roll in (0.0, np.pi))
    assert_allclose(upright["p4"], over["p5"], rtol=1e-9)


def test_zeros_noise_and_readings():
    clean = take(STILL)
    raw = take(STILL, zeros_before=(1.0, 2, 3, 4, 5), zeros_after=(2.0, 0, 3, 4, 5))
    error = raw.holes - clean.holes
    assert_allclose(error[:2, 0], [1, 2], atol=1e-9)
    assert_allclose(error[:2, -1], [2, 0], atol=1e-9)
    assert_allclose(error[2], 3, atol=1e-9)
    noisy = take(STILL, noise=0.5, reference_noise=0.2)
    assert_allclose(np.std(noisy.holes - clean.holes), 0.5, rtol=0.1)
    with pytest.raises(ValueError, match="one value per hole"):
        take(STILL, zeros_before=(1.0, 2.0))


def test_a_stream_that_drifts_scales_everything():
    raw, clean = take(stream_drift=0.02, static_drift=30.0, temperature=290.0, temperature_drift=3.0), take()
    factor = raw.values["reference_dynamic_pressure"] / REFERENCE.dynamic_pressure
    assert_allclose(factor[[0, -1]], [1.0, 1.02], rtol=1e-12)
    assert_allclose(raw.holes, clean.holes * factor, rtol=1e-9)
    assert_allclose(raw.values["reference_static_pressure"][-1], 1e5 + 30)
    assert_allclose(raw.values["temperature"][-1], 293)
    misread = take(reference_drift=2.0)
    assert_allclose(misread.holes, clean.holes)
    assert_allclose(misread.values["reference_dynamic_pressure"][-1], REFERENCE.dynamic_pressure + 2.0)


def test_backlash_leaves_the_probe_behind_in_its_direction_of_travel():
    raw = take(backlash=2e-3)
    first, second = GRID.row == 0, GRID.row == 1
    assert_allclose(raw.true_y[first] - GRID.y[first], -1e-3, rtol=1e-9)
    assert_allclose(raw.true_y[second] - GRID.y[second], +1e-3, rtol=1e-9)
    assert_allclose(raw.true_z, GRID.z, atol=1e-15)


def test_lag_of_a_ramp_is_speed_times_time_constant():
    # Behind a first-order tube a steady ramp is late by tau: the reading is that of the place c tau before.
    wide = SyntheticWake(
        REFERENCE,
        (vortex_pair(circulation=0.0, spacing=0.8, core=0.06),),
        GaussianLosses(np.zeros(1), np.zeros(1), np.array([300.0]), np.array([1.0])),
    )
    line = grid_positions(np.linspace(-1.0, 1.0, 201), np.array([0.0]))
    tau, speed = 0.05, 0.1
    raw = take(wide, line, speed=speed, lag=tau)
    late = take(wide, grid_positions(np.linspace(-1.0, 1.0, 201) - speed * tau, np.array([0.0])))
    gain = np.ptp(late.values["p1"])
    # Second order in c tau over the width of 1 m: (0.005)^2.
    assert_allclose(raw.values["p1"][20:], late.values["p1"][20:], atol=5e-5 * gain)
    assert np.abs(raw.values["p1"] - take(wide, line).values["p1"]).max() > 3e-3 * gain
    assert_allclose(np.diff(raw.values["time"]), 0.1, rtol=1e-9)
    assert_allclose(raw.values["p1"][0], take(wide, line).values["p1"][0])


def test_a_probe_in_shear_reads_from_the_faster_side():
    probe = sphere_probe(5, tip_diameter=4e-3)
    line = grid_positions(np.array([-0.05, 0.05]), np.array([0.0]))
    shear = SyntheticWake(
        REFERENCE,
        (vortex_pair(circulation=0.0, spacing=0.8, core=0.06),),
        GaussianLosses(np.zeros(1), np.zeros(1), np.array([3.0]), np.array([0.08])),
    )
    raw = take(shear, line, probe, displacement=0.15)
    beyond = take(shear, grid_positions(np.array([-0.0506, 0.0506]), np.array([0.0])), probe)
    assert_allclose(raw.values["p1"], beyond.values["p1"], rtol=1e-6)
    assert (raw.values["p1"] > take(shear, line, probe).values["p1"]).all()


def test_revisits_are_rows_of_their_own(tmp_path):
    places = with_revisits(GRID, y=0.6, z=0.2, every=4)
    visits = np.flatnonzero((places.y == 0.6) & (places.z == 0.2) & (np.bincount(places.row)[places.row] == 1))
    assert visits.size == 4
    assert visits[0] == 0
    assert visits[-1] == places.y.size - 1
    assert (np.diff(places.row) >= 0).all()
    raw = take(positions=places, stream_drift=0.01)
    p1 = raw.values["p1"][visits]
    assert (np.diff(p1) > 0).all()
    raw.write_csv(tmp_path / "raw.csv", {"y": ("Y", 1e3, 2), "p1": ("p1", 1.0, 2), "time": ("t", 1.0, 1)})
    assert (tmp_path / "raw.csv").read_text(encoding="utf-8").startswith("Y,p1,t\n600.00,")
    points = raw.points()
    assert points.channels["p1"].relative_to == "static"
    assert points.channels["reference_dynamic_pressure"].relative_to is None
