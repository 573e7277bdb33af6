"""Recordings: the errors put in are the errors found."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wakeledger.core.rotation import rotation_matrix
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import wing_wake
from wakeledger.synthetic.recordings import (
    Errors,
    grid_positions,
    polar_positions,
    record,
    scattered_positions,
)

REFERENCE = Reference(speed=42.0, density=1.185, static_pressure=100_600.0)
WAKE = wing_wake(REFERENCE, n=60)
GRID = grid_positions(np.linspace(-0.7, 0.7, 41), np.linspace(-0.3, 0.3, 31))


def generator(seed=1):
    return np.random.default_rng(seed)


def test_without_errors_it_is_the_state_with_relative_pressures():
    found = record(WAKE, GRID, generator=generator()).values
    state = WAKE.state(GRID.y, GRID.z)
    assert_allclose(found["w"], state.w, rtol=1e-14)
    assert_allclose(found["total_pressure"], state.total_pressure - REFERENCE.total_pressure, atol=1e-12)
    assert_allclose(found["static_pressure"], state.static_pressure - REFERENCE.static_pressure, atol=1e-12)
    assert found["total_pressure"].min() < -30
    assert found["static_pressure"].min() < -5


def test_random_errors_have_the_declared_size():
    clean = record(WAKE, GRID, generator=generator()).values
    noisy = record(WAKE, GRID, generator=generator(2), errors=Errors(random={"v": 0.17, "total_pressure": 1.5})).values
    n = GRID.y.size
    for name, size in (("v", 0.17), ("total_pressure", 1.5)):
        error = noisy[name] - clean[name]
        # Standard error of a standard deviation, 1/√(2n) = 2 %; four of them.
        assert_allclose(error.std(), size, rtol=4 / np.sqrt(2 * n))
        assert abs(error.mean()) < 4 * size / np.sqrt(n)
    assert_allclose(noisy["w"], clean["w"])


def test_row_systematic_and_drift_errors_lie_where_they_should():
    clean = record(WAKE, GRID, generator=generator()).values
    errors = Errors(per_row={"static_pressure": 2.0}, systematic={"u": 0.3}, drift={"total_pressure": 5.0})
    found = record(WAKE, GRID, generator=generator(3), errors=errors).values
    by_row = (found["static_pressure"] - clean["static_pressure"]).reshape(31, 41)
    assert_allclose(by_row, np.broadcast_to(by_row[:, :1], by_row.shape), atol=1e-12)
    assert 1.0 < by_row[:, 0].std() < 3.0
    assert_allclose(found["u"] - clean["u"], 0.3, rtol=1e-12)
    drift = found["total_pressure"] - clean["total_pressure"]
    assert_allclose(drift, np.linspace(0, 5, GRID.y.size), atol=1e-11)


def test_a_probe_mounted_nose_up_reads_upwash_and_nose_to_port_reads_flow_to_starboard():
    # In a level stream a nose-up probe sees the flow come from below; a nose turned to port sees it come from port.
    far = grid_positions(np.array([4.0, 5.0]), np.array([3.0, 4.0]))
    tilted = record(WAKE, far, generator=generator(), errors=Errors(pitch=0.01)).values
    clean = record(WAKE, far, generator=generator()).values
    assert_allclose(tilted["w"] - clean["w"], 42.0 * np.sin(0.01), rtol=1e-3)
    turned = record(WAKE, far, generator=generator(), errors=Errors(yaw=0.01)).values
    assert_allclose(turned["v"] - clean["v"], -42.0 * np.sin(0.01), rtol=1e-3)


def test_mounting_is_the_rotation_of_the_vocabulary():
    # Written twice on purpose: the truth shares no code with what it judges.
    errors = Errors(pitch=0.3, yaw=-0.2, roll=0.1)
    assert_allclose(errors.mounting, rotation_matrix(pitch=0.3, yaw=-0.2, roll=0.1), atol=1e-15)


def test_missing_points_are_empty_cells(tmp_path):
    missing = np.zeros(GRID.y.size, bool)
    missing[[3, 700]] = True
    recording = record(WAKE, GRID, generator=generator(), missing=missing)
    assert np.isnan(recording.values["u"]).sum() == 2
    path = tmp_path / "traverse.csv"
    columns = {"y": ("Y", 1e3, 2), "z": ("Z", 1e3, 2), "u": ("U", 1.0, 3), "static_pressure": ("ps", 1.0, 2)}
    recording.write_csv(path, columns)
    lines = path.read_text(encoding="utf-8").splitlines()
    assert lines[0] == "Y,Z,U,ps"
    assert lines[4].endswith(",,")
    assert lines[1] == "-700.00,-300.00," + ",".join(
        f"{recording.values[name][0]:.{d}f}" for name, d in (("u", 3), ("static_pressure", 2))
    )
    assert len(lines) == GRID.y.size + 1
    again = tmp_path / "again.csv"
    record(WAKE, GRID, generator=generator(), missing=missing).write_csv(again, columns)
    assert again.read_bytes() == path.read_bytes()


def test_points_carry_what_the_pressures_are_relative_to():
    points = record(WAKE, GRID, generator=generator()).points()
    assert points.channels["total_pressure"].relative_to == "total"
    assert points.channels["static_pressure"].relative_to == "static"
    assert points.channels["u"].relative_to is None
    assert points.line[0] == 2
    assert points.row is not None
    assert points.row.max() == 30


def test_positions():
    back = grid_positions(np.array([0.0, 1.0, 3.0]), np.array([0.0, 1.0]), serpentine=True)
    assert_allclose(back.y, [0, 1, 3, 3, 1, 0])
    assert_allclose(back.row, [0, 0, 0, 1, 1, 1])
    polar = polar_positions(np.array([0.1, 0.2]), np.array([0.0, np.pi / 2]), y=1.0)
    assert_allclose(polar.y, [1.1, 1.0, 1.2, 1.0], atol=1e-15)
    assert_allclose(polar.z, [0.0, 0.1, 0.0, 0.2], atol=1e-15)
    scattered = scattered_positions((-1, 1), (2, 3), n=50, generator=generator())
    assert scattered.z.min() >= 2
    assert scattered.z.max() <= 3


def test_an_error_of_something_not_recorded_is_refused():
    with pytest.raises(ValueError, match="errors name"):
        record(WAKE, GRID, generator=generator(), errors=Errors(random={"temperature": 1.0}))
