"""Tubes of a rake: offsets between them, static pressures from elsewhere, pitots; each against what was put in."""

import dataclasses

import numpy as np
import pytest

from wakeledger.core.flags import Flag
from wakeledger.intake.probe.pitot import STATIC_INPUT, PitotReduction
from wakeledger.intake.probe.static_tubes import interpolate_static
from wakeledger.intake.probe.tube_offsets import offsets_from_both, offsets_from_outer_flow, offsets_from_overlap
from wakeledger.stream.reference import Reference
from wakeledger.synthetic.aircraft import wing_wake
from wakeledger.synthetic.rakes import RakeTube, pitot_tube, record_rake, static_tube
from wakeledger.synthetic.recordings import grid_positions

STREAM = Reference(speed=40.0, density=1.2, static_pressure=100_000.0)
OFFSETS = np.array([1.5, -2.5, 0.5, 0.5])


def moved_rake(*, tubes=4, pitch=0.02, step=0.02, rows=12, columns=15):
    """Places of a rake along z that is moved on by one tube spacing, and the tube of each point."""
    y, z = np.meshgrid(0.02 * np.arange(columns), step * np.arange(rows))
    places = [(y.ravel(), z.ravel() + pitch * k, np.full(y.size, k)) for k in range(tubes)]
    return tuple(np.concatenate(part) for part in zip(*places, strict=True))


def loss(y, z):
    """A wake, Pa."""
    return 300.0 * np.exp(-(((z - 0.12) / 0.02) ** 2)) * (1 + np.sin(20 * y))


def test_offsets_from_overlap_do_not_see_the_wake():
    y, z, tube = moved_rake()
    exact = 1000.0 - loss(y, z) + OFFSETS[tube]
    found = offsets_from_overlap(exact, tube, y, z, tubes=4)
    # Places have no part in the offsets: what is left is rounding of 1000 Pa.
    assert found.value == pytest.approx(OFFSETS, abs=1e-10)
    assert found.source == "overlap"
    assert found.count == 13 * 15


def test_the_uncertainty_of_offsets_from_overlap_is_their_scatter():
    y, z, tube = moved_rake()
    rng = np.random.default_rng(1)
    drawn, said = [], []
    for _ in range(300):
        found = offsets_from_overlap(
            1000.0 - loss(y, z) + OFFSETS[tube] + 0.3 * rng.standard_normal(y.size), tube, y, z, tubes=4
        )
        drawn.append(found.value)
        said.append(found.standard_uncertainty)
    # 300 draws tell a standard deviation to 4 %; three of that.
    assert np.mean(said, axis=0) == pytest.approx(np.std(drawn, axis=0), rel=0.12)
    assert np.mean(drawn, axis=0) == pytest.approx(OFFSETS, abs=4 * 0.03 / np.sqrt(300))
    assert np.sum(drawn, axis=1) == pytest.approx(np.zeros(300), abs=1e-9)


def test_tubes_that_share_no_place_with_the_others_cannot_be_told_from_overlap():
    y, z, tube = moved_rake(tubes=2, pitch=0.005)
    assert offsets_from_overlap(1000.0 - loss(y, z), tube, y, z, tubes=2) is None
    # Moved on by two spacings, even tubes see one half of the places and odd ones the other.
    y, z, tube = moved_rake(step=0.04)
    assert offsets_from_overlap(1000.0 - loss(y, z), tube, y, z, tubes=4) is None
    y, z, tube = moved_rake(tubes=3)
    y = np.where(tube == 2, y + 10.0, y)
    assert offsets_from_overlap(1000.0 - loss(y, z), tube, y, z, tubes=3) is None


def test_offsets_from_the_outer_flow():
    y, z, tube = moved_rake(pitch=0.005, rows=30)
    rng = np.random.default_rng(2)
    noise = 0.3 * rng.standard_normal(y.size)
    found = offsets_from_outer_flow(1960.0 - loss(y, z) + OFFSETS[tube] + noise, tube, tubes=4, dynamic_pressure=960.0)
    # Some 200 quiet readings of 0.3 Pa for each tube.
    assert np.all(found.standard_uncertainty < 0.03)
    assert found.value == pytest.approx(OFFSETS, abs=4 * 0.03)
    assert np.all(np.abs(found.value - OFFSETS) < 4 * found.standard_uncertainty)


def test_overlap_and_outer_flow_together_know_better_than_either():
    y, z, tube = moved_rake(pitch=0.22)
    rng = np.random.default_rng(3)
    errors = {"overlap": [], "outer flow": [], "both": []}
    said = []
    for _ in range(200):
        total = 1960.0 - loss(y, z) + OFFSETS[tube] + 0.3 * rng.standard_normal(y.size)
        # One row of 15 places leads from each tube to the next.
        overlap = offsets_from_overlap(total, tube, y, z, tubes=4)
        outer = offsets_from_outer_flow(total, tube, tubes=4, dynamic_pressure=960.0)
        both = offsets_from_both(overlap, outer)
        for found in (overlap, outer, both):
            errors[found.source].append(found.value - OFFSETS)
        said.append(both.standard_uncertainty)
        assert both.second == outer.count and abs(both.value.sum()) < 1e-9
    rms = {name: np.sqrt(np.mean(np.square(each))) for name, each in errors.items()}
    assert rms["both"] < 0.6 * rms["overlap"] and rms["both"] < 1.02 * rms["outer flow"]
    # Cautious, since some readings count in both.
    assert 0.9 * rms["both"] < np.sqrt(np.mean(np.square(said))) < 1.6 * rms["both"]


def test_an_outer_flow_that_contradicts_the_overlap_is_not_used():
    y, z, tube = moved_rake()
    total = 1960.0 - loss(y, z) + OFFSETS[tube] + 0.3 * np.random.default_rng(4).standard_normal(y.size)
    overlap = offsets_from_overlap(total, tube, y, z, tubes=4)
    outer = offsets_from_outer_flow(total, tube, tubes=4, dynamic_pressure=960.0)
    wrong = dataclasses.replace(outer, value=outer.value + np.array([0.0, 2.0, 0.0, 0.0]))
    assert offsets_from_both(overlap, wrong) is overlap


def test_a_tube_that_stays_in_the_wake_has_no_offset_from_the_outer_flow():
    y, z, tube = moved_rake(pitch=0.005, rows=30)
    total = 1960.0 - np.where(tube == 3, 200.0, loss(y, z)) + OFFSETS[tube]
    found = offsets_from_outer_flow(total, tube, tubes=4, dynamic_pressure=960.0)
    assert np.isnan(found.value[3])
    assert found.value[:3] == pytest.approx(OFFSETS[:3] - OFFSETS[:3].mean(), abs=1e-3)
    only = np.where(tube == 0, total, 1500.0)
    assert offsets_from_outer_flow(only, tube, tubes=4, dynamic_pressure=960.0) is None


# -- static pressure from elsewhere -----------------------------------------------------------------------------------


def test_a_linear_static_pressure_is_met_exactly_between_the_readings():
    rng = np.random.default_rng(3)
    places, points = rng.uniform(0.0, 1.0, (80, 2)), rng.uniform(0.2, 0.8, (50, 2))

    def field(at):
        return 10.0 + 3.0 * at[:, 0] - 7.0 * at[:, 1]

    found = interpolate_static(places, field(places), points)
    # Linear between three readings each: exact but for rounding.
    assert found.at_points(field(places)) == pytest.approx(field(points), abs=1e-10)
    assert found.beyond == 0
    assert found.left_out == pytest.approx(0.0, abs=1e-10)
    many = found.at_points(np.stack([field(places), 2 * field(places)]))
    assert many[1] == pytest.approx(2 * field(points), abs=1e-10)


def test_readings_on_one_line_hold_across_it_and_the_nearest_beyond():
    places = np.stack([np.full(11, 0.3), np.linspace(0.0, 1.0, 11)], axis=1)
    points = np.array([[0.0, 0.25], [0.9, 0.25], [0.3, 1.4]])
    found = interpolate_static(places, 5.0 * places[:, 1], points)
    assert found.at_points(5.0 * places[:, 1]) == pytest.approx([1.25, 1.25, 5.0], abs=1e-12)
    assert found.beyond == 1


def test_the_doubt_of_a_static_pressure_grows_with_the_distance_and_the_scatter():
    rng = np.random.default_rng(4)
    places = np.stack([np.zeros(200), np.linspace(0.0, 2.0, 200)], axis=1)
    readings = 2.0 * rng.standard_normal(200)
    points = np.array([[0.0, 1.0], [0.05, 1.0], [0.1, 1.0]])
    found = interpolate_static(places, readings, points)
    # A reading against the mean of its neighbours: sqrt(1.5) times the noise, 200 readings, 15 %.
    assert found.left_out == pytest.approx(2.0 * np.sqrt(1.5), rel=0.15)
    assert found.standard_uncertainty[0] == pytest.approx(0.5 * found.left_out, rel=0.01)
    assert found.standard_uncertainty[2] / found.standard_uncertainty[1] == pytest.approx(2.0, rel=0.01)


def test_missing_and_repeated_readings_are_no_hindrance():
    places = np.array([[0.0, 0.0], [0.0, 1.0], [0.0, 1.0], [0.0, 2.0]])
    readings = np.array([1.0, 2.0, 4.0, np.nan])
    found = interpolate_static(places, readings, np.array([[0.0, 0.5]]))
    assert found.at_points(np.nan_to_num(readings)) == pytest.approx([2.0], abs=1e-12)
    assert np.isnan(found.left_out)


# -- pitots -----------------------------------------------------------------------------------------------------------


def test_a_pitot_gives_the_speed_at_the_static_pressure_it_is_told():
    total = STREAM.static_pressure + np.array([960.0, 500.0, np.nan])
    found = PitotReduction(static_uncertainty=10.0).state({"p1": total}, STREAM)
    assert found.u[:2] == pytest.approx(np.sqrt(2 * np.array([960.0, 500.0]) / 1.2), rel=1e-12)
    assert not np.any(found.v[:2]) and not np.any(found.w[:2])
    assert np.isnan(found.u[2]) and not found.impossible[2]
    higher = PitotReduction(static_uncertainty=10.0).state({"p1": total}, STREAM, {STATIC_INPUT: 1.0})
    assert higher.u[0] == pytest.approx(np.sqrt(2 * 950.0 / 1.2), rel=1e-12)
    own = {"p1": total, "static_pressure": np.full(3, STREAM.static_pressure - 40.0)}
    assert PitotReduction(measured_static=True).state(own, STREAM).u[0] == pytest.approx(
        np.sqrt(2 * 1000.0 / 1.2), rel=1e-12
    )
    assert PitotReduction().flags({"p1": total}, STREAM).tolist() == [0, 0, int(Flag.MISSING)]


def test_the_synthetic_rake_reads_what_is_at_each_tube():
    wake = wing_wake(STREAM, core=0.05, n=40)
    at = grid_positions(np.linspace(-0.5, 0.5, 7), np.linspace(-0.1, 0.1, 3), serpentine=True)
    tubes = (RakeTube(4, pitot_tube(), (0.0, 0.03)), RakeTube(9, static_tube(), (0.1, 0.0)))
    found = record_rake(wake, at, tubes, generator=np.random.default_rng(0))
    assert found.tube.tolist() == [4, 9] * 21
    pitots, statics = wake.state(at.y, at.z + 0.03), wake.state(at.y + 0.1, at.z)
    # Read against the stream's static pressure; rounding of 1e5 Pa.
    assert found.values["p1"][::2] == pytest.approx(pitots.total_pressure - STREAM.static_pressure, abs=1e-9)
    assert found.values["p1"][1::2] == pytest.approx(statics.static_pressure - STREAM.static_pressure, abs=1e-9)
    assert np.array_equal(found.positions.y[::2], at.y)
    assert np.ptp(statics.static_pressure) > 1.0
