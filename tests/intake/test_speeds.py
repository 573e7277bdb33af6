"""Speeds in another unit are refused where the file or the stream tells; small departures are told."""

import numpy as np
import pytest

from wakeledger.core.errors import DataError
from wakeledger.core.points import Channel, Points
from wakeledger.intake.speeds import check_speeds, measured_speed_ratio, speed_note
from wakeledger.intake.state import point_state
from wakeledger.stream.reference import Reference, resolve_reference

N = 60
SLOW = Reference(speed=40.0, density=1.2, static_pressure=100_000.0)
FAST = resolve_reference({"mach": 0.6, "static_pressure": 60_000.0, "temperature": 260.0}, compressible=True)


def flow(reference):
    """A wake of half the stream's speed over a quarter of the points, slightly inclined; exact pressures."""
    speed = reference.speed * np.where(np.arange(N) < N // 4, 0.5, 1.0)
    pitch = np.radians(np.linspace(-3, 3, N))
    values = {"u": speed * np.cos(pitch), "v": np.zeros(N), "w": speed * np.sin(pitch)}
    static = np.full(N, reference.static_pressure)
    if not reference.compressible:
        total = static + 0.5 * reference.density * speed**2
    else:
        temperature = reference.total_temperature - speed**2 / (2 * reference.heat_capacity)
        mach = speed / np.sqrt(reference.gamma * reference.gas_constant * temperature)
        total = static * (1 + 0.2 * mach**2) ** 3.5
    return values | {"total_pressure": total, "static_pressure": static}


def looked_at(values, reference, primary="total_pressure"):
    channels = {name: Channel(array) for name, array in values.items()}
    points = Points(np.arange(N) * 0.01, np.zeros(N), channels, np.arange(2, N + 2), "rake.csv")
    state = point_state(
        values, channels, reference, primary=primary, axes=np.eye(3), rotation=np.eye(3)
    )  # fmt: skip
    check_speeds(state, points, reference)
    return measured_speed_ratio(state, points, reference)


@pytest.mark.parametrize("reference", [SLOW, FAST], ids=["slow", "fast"])
@pytest.mark.parametrize("primary", ["total_pressure", "velocity"])
def test_a_speed_measured_twice_is_one(reference, primary):
    # Exact pressures: rounding only.
    assert looked_at(flow(reference), reference, primary) == pytest.approx(1.0, rel=1e-9)
    assert speed_note(1.0) == speed_note(1.019) == speed_note(float("nan")) == []


@pytest.mark.parametrize("factor", [1 / 3.6, 0.5144, 1 / 1.15, 1.15, 3.28])
def test_velocities_in_another_unit_beside_pressures_are_refused(factor):
    values = flow(SLOW)
    values |= {name: factor * values[name] for name in "uvw"}
    with pytest.raises(DataError, match=rf"rake.csv, .* u, v, w come to {factor:.3g} times .* leave out u"):
        looked_at(values, SLOW)


def test_one_component_in_another_unit_is_refused():
    values = flow(SLOW)
    with pytest.raises(DataError, match=r"u, v, w come to 0\.2"):
        looked_at(values | {"u": values["u"] / 3.6}, SLOW)


def test_velocities_alone_are_held_against_the_stream():
    values = {name: array for name, array in flow(SLOW).items() if name in "uvw"}
    assert np.isnan(looked_at(values, SLOW, "velocity"))
    with pytest.raises(DataError, match=r"144 m/s in the middle of its range, that of the stream 40 m/s"):
        looked_at({name: 3.6 * array for name, array in values.items()}, SLOW, "velocity")


def test_a_probe_that_reads_a_little_fast_is_told_of():
    values = flow(SLOW)
    ratio = looked_at(values | {name: 1.04 * values[name] for name in "uvw"}, SLOW)
    assert ratio == pytest.approx(1.04)
    assert "1.040 times" in speed_note(ratio)[0]


def test_a_window_in_a_slipstream_is_believed_where_velocity_and_pressures_agree():
    values = flow(SLOW)
    fast = {name: 2.5 * values[name] for name in "uvw"}
    speed = np.sqrt(sum(component**2 for component in fast.values()))
    pressures = {"static_pressure": values["static_pressure"]}
    pressures["total_pressure"] = pressures["static_pressure"] + 0.5 * SLOW.density * speed**2
    assert looked_at(fast | pressures, SLOW, "velocity") == pytest.approx(1.0)
    with pytest.raises(DataError, match="100 m/s in the middle"):
        looked_at(fast, SLOW, "velocity")
