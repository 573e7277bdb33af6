"""What must not change, or must change in a known way, when the same flow is described differently."""

import math

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

CHEAP = settings(max_examples=5, deadline=None, derandomize=True, suppress_health_check=list(HealthCheck))
#: 16 digits are written; a plane's differences magnify their rounding by the number of points across it.
ROUNDING = 1e-9


@pytest.fixture(scope="module")
def wake(kit):
    return kit.wing_and_tail(loading=kit.asymmetric)


@pytest.fixture(scope="module")
def data(kit, wake):
    return kit.table(wake, *kit.axes())


@pytest.fixture(scope="module")
def plain(kit, data, tmp_path_factory):
    return kit.ledger(tmp_path_factory.mktemp("plain"), data)


def close(found, expected, scale, tolerance=ROUNDING):
    assert found == pytest.approx(expected, rel=0, abs=tolerance * scale)


def check(kit, found, expected, *, tolerance=ROUNDING, **other):
    """Rows as expected, those in `other` by their own values."""
    for name in kit.ROWS:
        scale = max(abs(expected[name]), expected["total_drag"])
        close(found[name], other.get(name, expected[name]), scale, tolerance)


def test_mirror(kit, data, plain, tmp_path):
    mirrored = {**data, "y": -data["y"], "v": -data["v"]}
    found = kit.ledger(tmp_path, mirrored)
    before, after = kit.values(plain), kit.values(found)
    assert before["rolling_moment"] > 1
    check(
        kit,
        after,
        before,
        side_force=-before["side_force"],
        rolling_moment=-before["rolling_moment"],
    )
    for first, second in zip(plain.estimates, found.estimates, strict=True):
        # The wake line and the vortex sum divide the wake anew: 1e-4 of the drag.
        close(second.value, first.value, abs(first.value), 1e-3)


def test_upside_down(kit, data, plain, tmp_path):
    found = kit.values(kit.ledger(tmp_path, {**data, "z": -data["z"], "w": -data["w"]}))
    before = kit.values(plain)
    check(
        kit,
        found,
        before,
        lift=-before["lift"],
        side_force=before["side_force"],
        rolling_moment=-before["rolling_moment"],
    )


@given(y=st.floats(-3, 3), z=st.floats(-3, 3))
@CHEAP
def test_shift(kit, data, plain, tmp_path_factory, y, z):
    moved = {**data, "y": data["y"] + y, "z": data["z"] + z}
    found = kit.values(kit.ledger(tmp_path_factory.mktemp("shift"), moved))
    before = kit.values(plain)
    # The lift acts y further to starboard and lifts that wing; the side force acts z higher.
    moment = before["rolling_moment"] - y * before["lift"] + z * before["side_force"]
    check(kit, found, before, rolling_moment=moment, tolerance=1e-8)


def test_moment_centre_moves_with_the_survey(kit, data, plain, tmp_path):
    moved = {**data, "y": data["y"] + 0.7, "z": data["z"] - 0.4}
    content = kit.description(model={"moment_centre": ["0.7 m", "-0.4 m"]})
    check(kit, kit.values(kit.ledger(tmp_path, moved, content)), kit.values(plain), tolerance=1e-8)


def test_quarter_turn(kit, wake, data, plain, tmp_path):
    # Turned by 90 deg counter-clockwise seen from behind: up becomes port, so lift becomes side force to port.
    turned = {**data, "y": -data["z"], "z": data["y"], "v": -data["w"], "w": data["v"]}
    found, before = kit.values(kit.ledger(tmp_path, turned)), kit.values(plain)
    # The plane's own points turn with it, so the grid is the same one with rows and columns swapped.
    check(kit, found, before, lift=before["side_force"], side_force=-before["lift"])


@given(angle=st.floats(-180, 180))
@CHEAP
def test_any_turn(kit, wake, plain, tmp_path_factory, angle):
    turned = kit.turned(wake, math.radians(angle))
    around = kit.axes(y=(-1.0, 1.0), z=(-1.0, 1.0))
    found = kit.values(kit.ledger(tmp_path_factory.mktemp("turn"), kit.table(turned, *around)))
    truth = wake.truth.rows()
    c, s = math.cos(math.radians(angle)), math.sin(math.radians(angle))
    for name in ("profile_drag", "induced_drag", "total_drag", "rolling_moment"):
        close(found[name], truth[name], abs(truth[name]), 2e-5)
    close(found["lift"], c * truth["lift"], truth["lift"], 1e-6)
    close(found["side_force"], -s * truth["lift"], truth["lift"], 1e-6)


@given(length=st.floats(0.05, 40), speed=st.floats(0.2, 8), density=st.floats(0.05, 900))
@CHEAP
def test_scale(kit, data, plain, tmp_path_factory, length, speed, density):
    """The same flow at another size, speed and density: coefficients stay."""
    q = density * speed**2
    reference = kit.REFERENCE
    scaled = {
        **{name: data[name] * length for name in ("y", "z")},
        **{name: data[name] * speed for name in "uvw"},
        "total_pressure": (data["total_pressure"] - reference.static_pressure) * q,
        "static_pressure": (data["static_pressure"] - reference.static_pressure) * q,
    }
    relative = {"unit": "Pa", "relative_to": "static"}
    content = kit.description(
        reference={
            "speed": f"{kit.SPEED * speed!r} m/s",
            "density": f"{kit.DENSITY * density!r} kg/m^3",
            # Only differences from it are used, and no gas has all of these densities at one pressure.
            "static_pressure": None,
        },
        model={
            "span": f"{kit.SPAN * length!r} m",
            "reference_area": f"{kit.AREA * length**2!r} m^2",
            "mean_chord": f"{kit.CHORD * length!r} m",
        },
        plane={
            "station": f"{1000 * length!r} m",
            "columns": kit.columns(
                total_pressure={"column": "total_pressure", **relative},
                static_pressure={"column": "static_pressure", **relative},
            ),
        },
    )
    found = kit.ledger(tmp_path_factory.mktemp("scale"), scaled, content)
    for name in kit.ROWS:
        row = plain.row(name)
        close(found.row(name).coefficient, row.coefficient, max(abs(row.coefficient), 0.026), 1e-7)
    close(found.row("span_efficiency").value, plain.row("span_efficiency").value, 1.0, 1e-7)


@given(seed=st.integers(0, 2**32 - 1))
@CHEAP
def test_order_of_the_points(kit, data, plain, tmp_path_factory, seed):
    order = np.random.default_rng(seed).permutation(data["y"].size)
    found = kit.ledger(tmp_path_factory.mktemp("order"), {name: array[order] for name, array in data.items()})
    assert kit.values(found) == kit.values(plain)


def test_a_stream_of_another_pressure_is_the_same_stream(kit, data, plain, tmp_path):
    raised = {**data, **{name: data[name] - 40_000.0 for name in ("total_pressure", "static_pressure")}}
    content = kit.description(reference={"static_pressure": "60 kPa"})
    check(kit, kit.values(kit.ledger(tmp_path, raised, content)), kit.values(plain), tolerance=1e-8)


def test_a_constant_total_pressure_error_is_zeroed_in_the_outer_flow(kit, data, plain, tmp_path):
    shifted = {**data, "total_pressure": data["total_pressure"] + 3.0}
    found = kit.ledger(tmp_path, shifted)
    # 3 Pa over the window of 2.9 m2 would be 8.6 N, twice the drag.
    check(kit, kit.values(found), kit.values(plain), tolerance=3e-3)
    assert any("+3 Pa" in note for note in found.notes)
