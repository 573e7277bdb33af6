"""Flow state: every way of measuring the same flow gives the same state; signs, normalisations, impossible points."""

from dataclasses import dataclass

import numpy as np
import pytest

from wakeledger.core.errors import DataError, SurveyError
from wakeledger.core.points import Channel, Points
from wakeledger.core.rotation import rotation_matrix
from wakeledger.intake.state import check_state, nonphysical, point_state


@dataclass(frozen=True)
class Stream:
    """A stand-in for the undisturbed stream, its quantities consistent by hand."""

    speed: float = 42.0
    density: float = 1.185
    static_pressure: float = 100600.0
    temperature: float = float("nan")
    compressible: bool = False
    gamma: float = 1.4
    gas_constant: float = 287.05287

    @property
    def dynamic_pressure(self):
        return 0.5 * self.density * self.speed**2

    @property
    def total_temperature(self):
        return self.temperature + self.speed**2 * 0.2 / (self.gamma * self.gas_constant * 0.5) / 2

    @property
    def total_pressure(self):
        if not self.compressible:
            return self.static_pressure + self.dynamic_pressure
        return self.static_pressure * (self.total_temperature / self.temperature) ** 3.5


LOW = Stream()
HIGH = Stream(
    speed=200.0, density=101325 / (287.05287 * 288.15), static_pressure=101325.0, temperature=288.15, compressible=True
)
IDENTITY = np.eye(3)
N = 40


def flow(seed=13, speed=42.0):
    generator = np.random.default_rng(seed)
    return speed * np.array([0.9, 0.0, 0.0])[:, None] + 0.15 * speed * generator.uniform(-0.5, 0.5, (3, N))


def incompressible(velocity, stream=LOW):
    static = stream.static_pressure + np.linspace(-50.0, 20.0, N)
    return static, static + 0.5 * stream.density * (velocity**2).sum(axis=0)


def state_of(values, stream=LOW, *, primary="total_pressure", kinds=None, axes=IDENTITY, rotation=IDENTITY):
    channels = {name: np.asarray(array) for name, array in values.items()}
    kinds = {name: Channel(array) for name, array in channels.items()} | (kinds or {})
    return point_state(channels, kinds, stream, primary=primary, axes=axes, rotation=rotation)


def assert_flow(state, velocity, rtol=1e-12):
    scale = np.abs(velocity).max()
    for measured, true in zip((state.u, state.v, state.w), velocity, strict=True):
        np.testing.assert_allclose(measured, true, atol=rtol * scale)


def angles(velocity):
    u, v, w = velocity
    return {"pitch": np.arctan2(w, u), "yaw": np.arcsin(v / np.sqrt((velocity**2).sum(axis=0)))}


def test_every_direction_measured_gives_the_same_velocity():
    velocity = flow()
    u, v, w = velocity
    static, total = incompressible(velocity)
    pressures = {"static_pressure": static, "total_pressure": total}
    for direction in (
        {"u": u, "v": v, "w": w},
        {"u": 3 * u, "v": 3 * v, "w": 3 * w},
        angles(velocity),
        {"v": v, "w": w},
    ):
        # Pressures of 1e5 Pa leave 1e-16 * 1e5 / q = 1e-13 of the speed.
        assert_flow(state_of(pressures | direction), velocity, rtol=1e-12)


def test_velocity_as_primary():
    velocity = flow()
    u, v, w = velocity
    static, total = incompressible(velocity)
    speed = np.sqrt((velocity**2).sum(axis=0))
    for values in ({"u": u, "v": v, "w": w}, {"speed": speed, "v": v, "w": w}, {"speed": speed} | angles(velocity)):
        state = state_of(values | {"static_pressure": static}, primary="velocity")
        assert_flow(state, velocity)
        np.testing.assert_allclose(state.total_pressure, total, rtol=1e-14)
    bare = state_of({"u": u, "v": v, "w": w}, primary="velocity")
    assert bare.total_pressure is None
    assert bare.static_pressure is None
    np.testing.assert_array_equal(bare.density, np.full(N, LOW.density))


@pytest.mark.parametrize("angle", ["pitch", "yaw", "roll"])
def test_mounting_is_taken_out(angle):
    velocity = flow()
    static, total = incompressible(velocity)
    turn = rotation_matrix(**({"pitch": 0.0, "yaw": 0.0, "roll": 0.0} | {angle: 0.1}))
    u, v, w = turn.T @ velocity
    for values in ({"u": u, "v": v, "w": w}, {"v": v, "w": w}, angles(turn.T @ velocity)):
        values = values | {"static_pressure": static, "total_pressure": total}
        assert_flow(state_of(values, rotation=turn), velocity)
    state = state_of({"u": u, "v": v, "w": w}, primary="velocity")
    assert np.abs(state.w - velocity[2]).max() + np.abs(state.v - velocity[1]).max() > 0.5


def test_signs_of_small_mounting_angles():
    # Uniform stream: a probe nose up by 1 degree reads upwash; told so, the upwash goes away.
    uniform = {
        "u": np.array([42 * np.cos(np.radians(1))]),
        "v": np.zeros(1),
        "w": np.array([42 * np.sin(np.radians(1))]),
    }
    state = state_of(uniform, primary="velocity", rotation=rotation_matrix(np.radians(1), 0.0, 0.0))
    np.testing.assert_allclose([state.u[0], state.v[0], state.w[0]], [42.0, 0.0, 0.0], atol=1e-13)
    # Nose to port reads flow towards port.
    uniform = {
        "u": np.array([42 * np.cos(np.radians(1))]),
        "v": np.array([-42 * np.sin(np.radians(1))]),
        "w": np.zeros(1),
    }
    state = state_of(uniform, primary="velocity", rotation=rotation_matrix(0.0, np.radians(1), 0.0))
    np.testing.assert_allclose([state.u[0], state.v[0], state.w[0]], [42.0, 0.0, 0.0], atol=1e-13)


def test_axes_of_the_file():
    velocity = flow()
    static, total = incompressible(velocity)
    # File: u up, v upstream, w to port.
    axes = np.array([[0, -1.0, 0], [0, 0, -1.0], [1.0, 0, 0]])
    u, v, w = axes.T @ velocity
    pressures = {"static_pressure": static, "total_pressure": total}
    turn = rotation_matrix(0.05, -0.03, 0.2)
    assert_flow(state_of({"u": u, "v": v, "w": w} | pressures, axes=axes), velocity)
    assert_flow(state_of({"u": u, "w": w} | pressures, axes=axes), velocity)
    u, v, w = axes.T @ turn.T @ velocity
    assert_flow(state_of({"u": u, "v": v, "w": w}, primary="velocity", axes=axes, rotation=turn), velocity)


def test_leading_draws_broadcast():
    velocity = flow()
    static, total = incompressible(velocity)
    turns = rotation_matrix(np.array([0.0, 0.01, 0.02]), 0.0, 0.0)
    values = {
        "u": velocity[0],
        "v": velocity[1],
        "w": velocity[2],
        "total_pressure": total + np.array([0.0, 5.0, -5.0])[:, None],
    }
    state = state_of(values | {"static_pressure": static}, rotation=turns)
    assert state.w.shape == (3, N)
    single = state_of(values | {"static_pressure": static, "total_pressure": total - 5.0}, rotation=turns[2])
    for name in ("u", "v", "w", "total_pressure", "static_pressure", "density"):
        np.testing.assert_array_equal(getattr(state, name)[2], getattr(single, name))


def test_relations_to_the_reference_are_undone():
    velocity = flow()
    static, total = incompressible(velocity)
    q = LOW.dynamic_pressure
    plain = state_of(
        {"u": velocity[0], "v": velocity[1], "w": velocity[2], "static_pressure": static, "total_pressure": total}
    )
    values = {
        "u": velocity[0] / 42.0,
        "v": velocity[1] / 42.0,
        "w": velocity[2] / 42.0,
        "static_pressure": (static - LOW.static_pressure) / q,
        "total_pressure": (total - LOW.total_pressure) / LOW.density,
    }
    kinds = {name: Channel(values[name], normalised_by="speed") for name in "uvw"}
    kinds["static_pressure"] = Channel(
        values["static_pressure"], relative_to="static", normalised_by="dynamic_pressure"
    )
    kinds["total_pressure"] = Channel(values["total_pressure"], relative_to="total", kinematic=True)
    related = state_of(values, kinds=kinds)
    for name in ("u", "v", "w", "total_pressure", "static_pressure"):
        np.testing.assert_allclose(getattr(related, name), getattr(plain, name), rtol=1e-12)


def compressible(velocity):
    """Static pressure, total pressure, temperature and density of a flow at the stream's total temperature."""
    cp = 3.5 * 287.05287
    temperature = HIGH.total_temperature - (velocity**2).sum(axis=0) / (2 * cp)
    static = HIGH.static_pressure * np.linspace(0.95, 1.02, N)
    total = static * (HIGH.total_temperature / temperature) ** 3.5
    return static, total, temperature, static / (287.05287 * temperature)


def test_stand_in_is_consistent():
    # T0 = T + U²/(2 cp), cp = 3.5 R.
    assert HIGH.total_temperature == pytest.approx(288.15 + 200.0**2 / (7 * 287.05287), rel=1e-14)


def test_compressible_state():
    velocity = flow(speed=200.0)
    static, total, temperature, density = compressible(velocity)
    pressures = {"static_pressure": static, "total_pressure": total}
    extra = (
        {},
        {"temperature": temperature},
        {"density": density},
        {"total_temperature": np.full(N, HIGH.total_temperature)},
    )
    for more in extra:
        state = state_of(pressures | {"v": velocity[1], "w": velocity[2]} | more, HIGH)
        assert_flow(state, velocity, rtol=1e-11)
        np.testing.assert_allclose(state.temperature, temperature, rtol=1e-12)
        np.testing.assert_allclose(state.density, density, rtol=1e-12)
        for pressure in ("static_pressure", "total_pressure"):
            components = dict(zip("uvw", velocity, strict=True))
            state = state_of(components | {pressure: pressures[pressure]} | more, HIGH, primary="velocity")
            if pressure == "total_pressure" and "density" in more:
                continue
            np.testing.assert_allclose(state.static_pressure, static, rtol=1e-12)
            np.testing.assert_allclose(state.total_pressure, total, rtol=1e-12)
            np.testing.assert_allclose(state.density, density, rtol=1e-12)


def test_compressible_speed_of_a_known_mach_number():
    # NACA Report 1135, M = 0.5: p/pt = 0.843019, T/Tt = 0.952381 (six digits).
    total_temperature = 300.0
    state = state_of(
        {
            "static_pressure": np.array([84301.9]),
            "total_pressure": np.array([1e5]),
            "total_temperature": np.array([300.0]),
            "v": np.zeros(1),
            "w": np.zeros(1),
        },
        HIGH,
    )
    expected = 0.5 * np.sqrt(1.4 * 287.05287 * 0.952381 * total_temperature)
    assert state.u[0] == pytest.approx(expected, rel=5e-6)


def test_missing_values_and_impossible_points_are_told_apart():
    velocity = flow()
    static, total = incompressible(velocity)
    u, v, w = velocity.copy()
    total[3] = static[3] - 10.0
    w[5] = np.nan
    state = state_of({"u": u, "v": v, "w": w, "static_pressure": static, "total_pressure": total})
    assert np.flatnonzero(nonphysical(state)).tolist() == [3]
    assert np.flatnonzero(~state.usable).tolist() == [3, 5]
    for name in ("u", "v", "w", "total_pressure", "static_pressure", "density"):
        assert np.flatnonzero(np.isnan(getattr(state, name))).tolist() == [3, 5]
    v[7] = 100.0
    state = state_of({"v": v, "w": w, "static_pressure": static, "total_pressure": total})
    assert np.flatnonzero(nonphysical(state)).tolist() == [3, 7]


@pytest.mark.parametrize(
    ("names", "primary", "match"),
    [
        (["u", "v", "w", "total_pressure"], "total_pressure", "needs static_pressure"),
        (["u", "v", "w", "static_pressure"], "total_pressure", "needs total_pressure"),
        (["total_pressure", "static_pressure", "v"], "total_pressure", "flow direction"),
        (["total_pressure", "static_pressure", "pitch"], "total_pressure", "flow direction"),
        (["v", "w"], "velocity", "do not give the velocity"),
        (["pitch", "yaw"], "velocity", "do not give the velocity"),
    ],
)
def test_undetermined_states(names, primary, match):
    with pytest.raises(SurveyError, match=match) as caught:
        state_of({name: np.full(N, 1.0) for name in names}, primary=primary)
    assert caught.value.place == "[plane.columns]"


def test_compressible_without_any_pressure():
    velocity = dict(zip("uvw", flow(speed=200.0), strict=True))
    with pytest.raises(SurveyError, match="need a pressure"):
        state_of(velocity, HIGH, primary="velocity")


def checked(values, **options):
    state = state_of(values, **options)
    points = Points(
        np.zeros(N), np.zeros(N), {k: Channel(a) for k, a in values.items()}, np.arange(2, N + 2), "survey.csv"
    )
    check_state(state, points=points)


def test_checks_of_the_state():
    velocity = flow()
    static, total = incompressible(velocity)
    values = dict(zip("uvw", velocity, strict=True)) | {"static_pressure": static, "total_pressure": total}
    checked(values)
    # One point of 40 is 2.5 %.
    with pytest.raises(DataError, match=r"survey.csv, line 6: there is no real flow state .* at 1 of 40 points"):
        checked(values | {"total_pressure": np.where(np.arange(N) == 4, static - 1, total)})
    with pytest.raises(DataError, match=r"line 2: the flow runs upstream .* at 5 of 40"):
        checked(values | {"u": np.where(np.arange(N) < 5, -1.0, velocity[0])}, primary="velocity")
    checked(values | {"u": np.where(np.arange(N) < 4, -40.0, velocity[0])})
    with pytest.raises(DataError, match=r"line 9: the density is not positive at 1 of 40"):
        checked(values | {"density": np.where(np.arange(N) == 7, -1.2, 1.2)})
