"""Reference readings, zeros and re-visits: what was put into a traverse comes out again."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wakeledger.core.errors import DataError
from wakeledger.intake.probe.readings import (
    at_reference_condition,
    check_dynamic_pressure,
    estimate_drift,
    find_revisits,
    progress,
    stream_at_points,
    subtract_drift,
    subtract_zeros,
    temperature_at_reference,
)
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import GaussianLosses, SyntheticWake, grid_positions, vortex_pair
from wakeledger.synthetic.probes import TraverseConditions, record_traverse, sphere_probe, with_revisits

REFERENCE = Reference(speed=40.0, density=1.2, static_pressure=1e5)
Q = REFERENCE.dynamic_pressure
PAIR = vortex_pair(circulation=2.0, spacing=0.8, core=0.06)
LOSSES = GaussianLosses(np.array([-0.4, 0.0, 0.4]), np.zeros(3), np.array([1.0, 2.0, 1.0]), np.full(3, 0.08))
WAKE = SyntheticWake(REFERENCE, (PAIR,), LOSSES, PAIR)
GRID = grid_positions(np.linspace(-0.6, 0.6, 25), np.linspace(-0.3, 0.3, 13))
PLACES = with_revisits(GRID, y=-0.65, z=0.35, every=3)
ZEROS = {"zeros_before": (1.0, -2.0, 0.5, 3.0, 0.0), "zeros_after": (2.5, -2.0, -1.0, 3.2, 0.4)}


def take(positions=PLACES, seed=11, **conditions):
    return record_traverse(
        WAKE,
        positions,
        sphere_probe(5),
        generator=np.random.default_rng(seed),
        conditions=TraverseConditions(**conditions),
    )


CLEAN = take()


# -- normalisation ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("relative", [True, False])
def test_a_drifting_stream_is_brought_back_to_the_reference(relative):
    raw = take(stream_drift=0.03, static_drift=-120.0, relative=relative)
    clean = take(relative=relative)
    got = at_reference_condition(
        raw.holes,
        dynamic_pressure=raw.values["reference_dynamic_pressure"],
        static_pressure=raw.values["reference_static_pressure"],
        reference_dynamic_pressure=Q,
        reference_static_pressure=REFERENCE.static_pressure,
        relative=relative,
    )
    # Exact but for rounding of absolute pressures of 1e5 Pa; untreated, 3 % of q (29 Pa) is wrong at the end.
    assert_allclose(got, clean.holes, atol=1e-9 * 1e5)
    assert np.abs(raw.holes - clean.holes).max() > 20


def test_a_steady_stream_changes_nothing_and_draws_pass_through():
    same = at_reference_condition(CLEAN.holes, dynamic_pressure=np.full(PLACES.y.size, Q), reference_dynamic_pressure=Q)
    assert_allclose(same, CLEAN.holes, rtol=1e-14)
    assert_allclose(
        at_reference_condition(CLEAN.holes, dynamic_pressure=None, reference_dynamic_pressure=Q), CLEAN.holes
    )
    draws = np.array([[Q], [1.01 * Q]])
    got = at_reference_condition(
        CLEAN.values["p1"], dynamic_pressure=np.full(PLACES.y.size, Q), reference_dynamic_pressure=draws
    )
    assert_allclose(got, [CLEAN.values["p1"], 1.01 * CLEAN.values["p1"]], rtol=1e-14)


def test_a_static_pressure_that_only_shifts_needs_no_dynamic_pressure():
    got = at_reference_condition(
        np.array([100_050.0]),
        dynamic_pressure=None,
        reference_dynamic_pressure=Q,
        static_pressure=np.array([100_030.0]),
        reference_static_pressure=1e5,
        relative=False,
    )
    assert_allclose(got, 100_020.0, rtol=1e-15)


def test_density_and_speed_of_the_moment():
    density, speed = stream_at_points(
        dynamic_pressure=np.array([960.0, 960.0]),
        reference_density=1.2,
        static_pressure=np.array([1e5, 1.02e5]),
        temperature=np.array([290.0, 290.0 * 1.02]),
        reference_static_pressure=1e5,
        reference_temperature=290.0,
    )
    assert_allclose(density, 1.2, rtol=1e-12)
    assert_allclose(speed, 40.0, rtol=1e-12)
    warm, fast = stream_at_points(
        dynamic_pressure=np.array([960.0]),
        reference_density=1.2,
        temperature=np.array([319.0]),
        reference_temperature=290.0,
    )
    assert_allclose(warm, 1.2 / 1.1, rtol=1e-12)
    assert_allclose(fast, 40 * np.sqrt(1.1), rtol=1e-12)
    assert_allclose(
        temperature_at_reference(np.array([300.0]), reading=np.array([297.0]), reference_temperature=288),
        300 * 288 / 297,
    )


def test_readings_that_cannot_normalise_are_refused():
    readings = np.full(10, Q)
    check_dynamic_pressure(readings, Q)
    readings[4] = 0.0
    with pytest.raises(DataError, match=r"point 5: reference_dynamic_pressure is 0 Pa"):
        check_dynamic_pressure(readings, Q)
    with pytest.raises(DataError, match="line 14"):
        check_dynamic_pressure(readings, Q, line=np.arange(10, 20))
    with pytest.raises(DataError, match=r"0\.001 times"):
        check_dynamic_pressure(np.full(10, Q / 1000), Q)
    with pytest.raises(DataError, match="no reading at all"):
        check_dynamic_pressure(np.full(3, np.nan), Q)


# -- zeros --------------------------------------------------------------------------------------------------------


def test_drifting_zeros_are_subtracted_in_time():
    raw = take(**ZEROS, row_time=30.0)
    done = progress(raw.holes.shape[1], time=raw.values["time"])
    before, after = (np.array(ZEROS[name])[:, None] for name in ("zeros_before", "zeros_after"))
    got = subtract_zeros(raw.holes, before, after, done)
    clean = take(row_time=30.0)
    assert_allclose(got.values, clean.holes, atol=1e-9)
    assert_allclose(got.size, clean.holes - raw.holes, atol=1e-9)
    assert_allclose(got.uncorrected, raw.holes)
    # By point number the same zeros are wrong in the middle: time stands still for 30 s between rows.
    wrong = subtract_zeros(raw.holes, before, after, progress(raw.holes.shape[1]))
    assert np.abs(wrong.values - clean.holes).max() > 0.01
    # Known at both readings, widest half-way between.
    assert_allclose(got.per_sigma[:, [0, -1]], 0.0, atol=1e-12)
    assert_allclose(got.per_sigma.max(axis=1), [0.75, 0, 0.75, 0.1, 0.2], rtol=0.01)


def test_no_zero_is_no_correction_and_one_zero_says_nothing_of_drift():
    done = progress(CLEAN.holes.shape[1])
    got = subtract_zeros(CLEAN.holes, np.zeros((5, 1)), np.zeros((5, 1)), done)
    assert_allclose(got.values, CLEAN.holes, rtol=0)
    assert not got.size.any()
    assert not got.per_sigma.any()
    single = subtract_zeros(CLEAN.holes, 2.0, None, done)
    assert_allclose(single.values, CLEAN.holes - 2.0)
    assert np.isnan(single.per_sigma).all()


def test_progress_of_times_and_numbers():
    assert_allclose(progress(3, time=np.array([10.0, 20.0, 50.0]), start=0.0, end=100.0), [0.1, 0.2, 0.5])
    assert_allclose(progress(3, time=np.zeros(3)), [0, 0.5, 1])
    assert_allclose(progress(3), [0, 0.5, 1])


def test_uncertainty_of_the_zero_covers_a_wandering_drift():
    # Random walks with a given typical change; the mean error over the traverse against its stated uncertainty.
    rng = np.random.default_rng(3)
    n, runs = 200, 2000
    walk = np.cumsum(rng.standard_normal((runs, n)), axis=1) / np.sqrt(n)
    done = np.arange(1, n + 1) / n
    bridge = walk - walk[:, -1:] * done
    stated = subtract_zeros(np.zeros((runs, n)), np.zeros((runs, 1)), walk[:, -1:], done).per_sigma
    # One reading of the change is all there is, so the stated size is right in the mean square only, point by point.
    assert_allclose(np.sqrt(np.mean(stated[:, 100] ** 2)), np.std(bridge[:, 100]), rtol=0.1)


# -- re-visits ----------------------------------------------------------------------------------------------------


def test_revisits_are_found_whatever_else_repeats():
    place = find_revisits(PLACES.y, PLACES.z)
    home = (PLACES.y == -0.65) & (PLACES.z == 0.35)
    assert (place[home] == 0).all()
    assert (place[~home] == -1).all()
    # Repeated at once, without leaving: no re-visit.
    y, z = np.repeat(GRID.y, 2), np.repeat(GRID.z, 2)
    assert (find_revisits(y, z) == -1).all()
    assert (find_revisits(np.zeros(4), np.zeros(4)) == -1).all()
    # Two places, visited again within a hundredth of a step.
    y = np.array([0.0, 1, 2, 3, 0.01, 2.0])
    assert_allclose(find_revisits(y, np.zeros(6)), [0, -1, 1, -1, 0, 1])


def drifting(seed=11, **more):
    """Total pressure of a traverse whose reading of the stream drifts by 0.4 % of q while the stream holds."""
    raw = take(seed=seed, reference_drift=0.004 * Q, **more)
    holes = at_reference_condition(
        raw.holes, dynamic_pressure=raw.values["reference_dynamic_pressure"], reference_dynamic_pressure=Q
    )
    return holes[0], raw.values["time"]


def test_drift_of_the_reading_is_recovered():
    total, time = drifting()
    drift = estimate_drift(total, time, find_revisits(PLACES.y, PLACES.z))
    # The place lies outside the wake, where H - p is q (1 + small); the reading grows, so what it normalises falls.
    at_home = CLEAN.values["p1"][0]
    assert_allclose(drift.rate * np.ptp(time), -0.004 * at_home, rtol=5e-3)
    assert drift.places == 1
    assert drift.visits == 6
    assert drift.degrees_of_freedom == 4
    assert_allclose(drift.left_alone(time), 0.004 * at_home / np.sqrt(12), rtol=0.02)
    put_right = subtract_drift(total, time, drift)
    untreated = total - np.mean(total - CLEAN.values["p1"]) - CLEAN.values["p1"]
    left = put_right.values - CLEAN.values["p1"]
    outer = np.abs(PLACES.z) > 0.25
    assert np.std(left[outer]) < 0.05 * np.std(untreated[outer])
    assert_allclose(put_right.size.mean(), 0.0, atol=1e-9)


def test_no_drift_gives_none_within_its_uncertainty():
    place = find_revisits(PLACES.y, PLACES.z)
    time = CLEAN.values["time"]
    exact = estimate_drift(CLEAN.values["p1"], time, place)
    assert abs(exact.rate) * np.ptp(time) < 1e-9
    errors = []
    for seed in range(200):
        noisy = take(seed=seed, noise=1.0).values["p1"]
        drift = estimate_drift(noisy, time, place)
        errors.append((drift.rate / drift.standard_uncertainty, drift.repeatability))
    t, s = np.array(errors).T
    # Student's t with 4 degrees of freedom has variance 2; five standard errors of 200 runs are about 60 %.
    assert 0.8 < np.var(t) < 3.6
    assert_allclose(np.sqrt(np.mean(s**2)), 1.0, rtol=0.15)


def test_draws_share_one_call():
    total, time = drifting()
    place = find_revisits(PLACES.y, PLACES.z)
    both = estimate_drift(np.stack([total, 2 * total]), time, place)
    assert_allclose(both.rate[1], 2 * both.rate[0], rtol=1e-12)
    assert subtract_drift(np.stack([total, 2 * total]), time, both).values.shape == (2, total.size)


def test_a_single_repeat_has_no_known_uncertainty_and_none_gives_none():
    y = np.array([0.0, 1.0, 2.0, 0.0])
    place = find_revisits(y, np.zeros(4))
    drift = estimate_drift(np.array([1.0, 5.0, 5.0, 4.0]), np.arange(4.0), place)
    assert_allclose(drift.rate, 1.0)
    assert np.isnan(drift.standard_uncertainty)
    assert drift.degrees_of_freedom == 0
    assert drift.left_alone(np.arange(4.0)) > 0
    assert estimate_drift(np.array([1.0, 5.0, 5.0, np.nan]), np.arange(4.0), place) is None
    assert estimate_drift(np.ones(4), np.arange(4.0), np.full(4, -1)) is None
