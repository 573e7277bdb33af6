"""Derivatives of the chain's outputs by every input against differences of the chain itself (dot-product test).

For a random direction in one input the sum of derivative times direction must be the slope of each output along it.
Richardson's extrapolation of central differences of the whole chain gives that slope; what it can tell is limited by
rounding in absolute pressures of 1e5 Pa, so 1e-7 of the sum of squares is asked for where 1e-8 holds on bare fields
(tests/physics/test_gradients.py).
"""

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from wakeledger.confidence.sources import InputLayout
from wakeledger.run.chain.adjoint import input_gradients, point_gradient
from wakeledger.run.chain.adjoint_state import StateSlopes
from wakeledger.run.chain.outputs import OUTPUTS
from wakeledger.run.survey import load, prepare
from wakeledger.stream.reference import Reference

AGREE = 1e-7


ROOT = Path(__file__).resolve().parents[2]


@pytest.fixture(scope="module")
def raw_sample():
    return prepare(load(ROOT / "sample_surveys" / "raw_traverse" / "survey.toml"))


def slopes_of(prepared):
    chain, nominal = prepared.chain, prepared.nominal
    gradient = point_gradient(chain, nominal)
    slopes, left = input_gradients(chain, gradient, prepared.layouts)
    return {name: gradient.outputs @ by for name, by in slopes.items()}, left


def directional(chain, name, direction, step):
    """Fourth-order slope of every output along a direction in one input."""
    sizes = step * np.array([1.0, -1.0, 0.5, -0.5])
    values = chain.vectors({name: np.multiply.outer(sizes, direction)})
    coarse, fine = (values[0] - values[1]) / (2 * step), (values[2] - values[3]) / step
    return (4 * fine - coarse) / 3


def check(prepared, *, agree=AGREE, known=("profile_drag", "induced_drag", "total_drag", "lift"), step=0.25):
    chain, nominal = prepared.chain, prepared.nominal
    slopes, left = slopes_of(prepared)
    rng = np.random.default_rng(8)
    reached = np.zeros(len(OUTPUTS), dtype=bool)
    assert slopes
    for name, by in slopes.items():
        layout = prepared.layouts[name]
        size = np.abs(np.asarray(layout.nominal, float))
        source = next(one for one in prepared.sources if name in one.applies_to)
        scale = source.standard_uncertainty * (float(np.nanmax(size)) if source.relative else 1.0)
        scale *= float(np.nanmax(layout.std)) if source.from_samples else 1.0
        direction = scale * (1.0 if layout.is_scalar else rng.standard_normal(layout.size))
        expected = directional(chain, name, direction, step)
        terms = by * direction if layout.is_scalar else (by * direction).sum(axis=1)
        spread = np.abs(terms) if layout.is_scalar else np.sqrt(np.square(by * direction).sum(axis=1))
        unknown = np.isnan(by if layout.is_scalar else by[:, 0])
        np.testing.assert_array_equal(np.isnan(nominal.vector) | unknown, unknown)
        for k, output in enumerate(OUTPUTS):
            if unknown[k]:
                assert math.isnan(nominal.vector[k]) or output == "wall_upwash", output
                continue
            # Rounding of the passes themselves: 1e-9 of the figure, 1e-10 N beside a lift of some 25 N.
            rounding = 1e-9 * abs(nominal.vector[k]) + (1e-12 if "coefficient" in output else 1e-10)
            limit = agree * max(spread[k], abs(expected[k])) + rounding
            assert abs(terms[k] - expected[k]) <= limit, (name, output, terms[k], expected[k], spread[k])
            reached[k] |= abs(terms[k]) > 1e-6 * abs(nominal.vector[k])
    for output in known:
        assert reached[OUTPUTS.index(output)], output
    return slopes, left


def sources(names, size):
    return [
        {"name": f"source {name}", "applies_to": [name], "effect": "random", "standard_uncertainty": amount}
        for name, amount in zip(names, size, strict=True)
    ]


VELOCITY = sources(["plane.u", "plane.v", "plane.w"], ["0.16 m/s"] * 3)
PRESSURE = sources(["plane.total_pressure", "plane.static_pressure"], ["1.5 Pa", "2 Pa"])
ANGLES = [
    {"name": "angles", "applies_to": ["angle.pitch", "angle.yaw", "angle.roll"], "effect": "systematic",
     "standard_uncertainty": "0.1 deg"},
    {"name": "places", "applies_to": ["position.y", "position.z"], "effect": "random",
     "standard_uncertainty": "0.2 mm"},
]  # fmt: skip


@pytest.fixture
def prepared(kit, tmp_path):
    """Brings a survey of an exact wake up to its Monte Carlo."""

    def make(found, *, data=None, **changes):
        content = kit.description(**changes)
        content["uncertainty.source"] = found
        return prepare(load(kit.write(tmp_path / "survey", data, content)))

    return make


@pytest.fixture(scope="module")
def data(kit):
    return kit.table(kit.wing(loading=kit.asymmetric), *kit.axes(spacing=0.0375, y=(-0.9, 0.9), z=(-0.6, 0.5)))


def noisy(data, seed=0):
    rng = np.random.default_rng(seed)
    sizes = {"u": 0.1, "v": 0.1, "w": 0.1, "total_pressure": 1.0, "static_pressure": 1.0}
    return {name: column + sizes.get(name, 0.0) * rng.standard_normal(column.size) for name, column in data.items()}


def test_total_pressure(prepared, data):
    check(prepared(VELOCITY + PRESSURE + ANGLES, data=noisy(data)))


def test_near_the_wing(prepared, data):
    # The bound vortex's field is frozen, and taken out of the residual.
    check(prepared(VELOCITY + PRESSURE, data=noisy(data), plane={"station": "0.4 m"}))


def test_crossflow_beside_pressures(prepared, kit, data):
    check(prepared(VELOCITY[1:] + PRESSURE, data=noisy(data), plane={"columns": kit.columns(u=None)}))


@pytest.mark.parametrize("missing", [("total_pressure",), ("static_pressure",), ("total_pressure", "static_pressure")])
def test_velocity(prepared, kit, data, missing):
    kept = [one for one in PRESSURE if one["applies_to"][0].removeprefix("plane.") not in missing]
    plane = {"primary": "velocity", "columns": kit.columns(**dict.fromkeys(missing))}
    check(prepared(VELOCITY + kept, data=noisy(data), plane=plane))


def test_gaps_and_uneven_lines(prepared, kit):
    y, z = kit.axes(spacing=0.0375, y=(-0.9, 0.9), z=(-0.6, 0.5))
    y = y + 0.01 * np.sin(9 * y)
    found = noisy(kit.table(kit.wing(loading=kit.asymmetric), y, z))
    holes = np.random.default_rng(1).random(found["y"].size) < 0.03
    found = {name: column if name in "yz" else np.where(holes, np.nan, column) for name, column in found.items()}
    check(prepared(VELOCITY + PRESSURE, data=found))


def test_scattered(prepared, kit):
    rng = np.random.default_rng(3)
    places = rng.uniform((-0.9, -0.6), (0.9, 0.5), (1500, 2)).T
    found = noisy(kit.at(kit.wing(loading=kit.asymmetric), *places))
    check(prepared(VELOCITY + PRESSURE, data=found))


FAST = Reference(speed=170.0, density=0.9, static_pressure=70_000.0, compressible=True)


@pytest.mark.parametrize(
    ("primary", "dropped"),
    [
        ("total_pressure", ()),
        ("velocity", ("total_pressure",)),
        ("velocity", ("static_pressure",)),
        ("velocity", ()),
    ],
)
def test_compressible(prepared, kit, primary, dropped):
    y, z = kit.axes(spacing=0.0375, y=(-0.9, 0.9), z=(-0.6, 0.5))
    found = noisy(kit.table(kit.wing(FAST, loading=kit.asymmetric), y, z))
    kept = [one for one in PRESSURE if one["applies_to"][0].removeprefix("plane.") not in dropped]
    reference = {"speed": "170 m/s", "density": "0.9 kg/m^3", "static_pressure": "70 kPa", "compressible": True}
    plane = {"primary": primary, "columns": kit.columns(**dict.fromkeys(dropped))}
    ready = prepared(VELOCITY + kept, data=found, reference=reference, plane=plane)
    assert ready.nominal.reference.compressible
    check(ready)


def test_compressible_with_a_measured_temperature(prepared, kit):
    y, z = kit.axes(spacing=0.0375, y=(-0.9, 0.9), z=(-0.6, 0.5))
    found = noisy(kit.table(kit.wing(FAST, loading=kit.asymmetric), y, z))
    found["temperature"] = FAST.temperature + np.random.default_rng(2).standard_normal(found["y"].size)
    reference = {"speed": "170 m/s", "density": "0.9 kg/m^3", "static_pressure": "70 kPa", "compressible": True}
    plane = {"columns": kit.columns(temperature={"column": "temperature", "unit": "K"})}
    check(prepared(VELOCITY + PRESSURE + sources(["plane.temperature"], ["0.3 K"]), data=found, reference=reference,
                   plane=plane))  # fmt: skip


WALLS = {"kind": "closed_walls", "section": "rectangle", "y": ["-1.2 m", "1.2 m"], "z": ["-0.9 m", "0.8 m"]}


def test_walls_swirl_and_blockage(prepared, data):
    ready = prepared(VELOCITY + PRESSURE, data=noisy(data), boundary=WALLS)
    assert ready.chain.swirls
    assert ready.nominal.wake_blockage != 0
    # The boundary elements that complete the walls' images are symmetric to their own accuracy only.
    check(ready, agree=1e-5, known=("induced_drag", "induced_drag_free_air", "boundary_factor", "wake_blockage"))


@pytest.mark.parametrize("kind", ["free_air", "closed_walls"])
def test_half_model(prepared, kit, kind):
    y, z = kit.axes(spacing=0.0375, y=(0.01875, 0.9), z=(-0.6, 0.5))
    found = noisy(kit.table(kit.wing(), y, z))
    walls = WALLS if kind == "closed_walls" else {"kind": "free_air"}
    ready = prepared(VELOCITY + PRESSURE, data=found, boundary=walls | {"reflection": "y"})
    check(ready, agree=1e-5, known=("lift", "induced_drag", "root_bending_moment"))


def test_ground_plane(prepared, kit):
    y, z = kit.axes(spacing=0.0375, y=(-0.9, 0.9), z=(0.01875, 0.9))
    wake = kit.wing(z=0.4) if False else kit.wing()
    yy, zz = np.meshgrid(y, z)
    found = noisy(kit.at(wake, yy.ravel(), zz.ravel() - 0.45) | {"z": zz.ravel()})
    ready = prepared(VELOCITY + PRESSURE, data=found, boundary={"kind": "free_air", "reflection": "z"})
    check(ready, known=("lift", "induced_drag"))


def test_hole_pressures(raw_sample):
    # The sample's own errors: holes, calibration, corrections of zeros, lag and backlash, displacement in shear.
    rooms = {name.split(".")[0] for name in raw_sample.layouts}
    assert {"probe", "calibration"} <= rooms
    assert raw_sample.chain.displacement is not None
    # The inverse of a calibration has kinks between its cells, so that only a small step has the slope of the place.
    _, left = check(raw_sample, agree=1e-3, step=0.01, known=("profile_drag", "induced_drag", "lift"))
    assert "correction.displacement" in left


@pytest.mark.parametrize("axes", [np.eye(3), np.array([[0.0, -1.0, 0.0], [0.0, 0.0, 1.0], [-1.0, 0.0, 0.0]])])
def test_closed_form_of_a_point_is_its_own_difference(prepared, data, axes):
    """Axes of the file turned and mounted askew, one channel normalised: closed forms against steps of the state."""
    chain = prepared(VELOCITY + PRESSURE + ANGLES, data=noisy(data)).chain
    points = chain.points
    # The file's columns are what these axes make of the same flow.
    turned = axes.T @ np.stack([points.channels[name].values for name in "uvw"])
    channels = dict(points.channels) | {
        name: replace(points.channels[name], values=row) for name, row in zip("uvw", turned, strict=True)
    }
    speed = chain.reference().speed
    channels["v"] = replace(channels["v"], values=channels["v"].values / speed, normalised_by="speed")
    chain = replace(
        chain,
        points=replace(points, channels=channels, axes=axes),
        settings=replace(chain.settings, offsets=(0.05, -0.03, 0.02)),
    )
    errors = {"plane.w": 0.1 * np.sin(np.arange(points.n)), "angle.yaw": np.float64(0.004)}
    slopes = StateSlopes(chain, errors)
    assert slopes.pressures
    wanted = frozenset({"u", "v", "w", "total_pressure", "static_pressure"})
    for name in ("plane.u", "plane.v", "plane.w", "plane.total_pressure", "plane.static_pressure", "angle.pitch"):
        single = name.startswith("angle")
        layout = InputLayout(0.0 if single else channels[name.split(".")[1]].values)
        closed, stepped = slopes(name, layout, wanted), slopes._by_steps(name, layout, wanted)
        assert len(closed) >= 3
        for field in wanted:
            expected = np.nan_to_num(stepped[field])
            found = closed.get(field, np.zeros(points.n))
            # Steps lose what rounding of absolute pressures leaves: 1e-11 Pa over 1e-3 Pa.
            np.testing.assert_allclose(found, expected, rtol=1e-6, atol=1e-6 * np.abs(expected).max() + 1e-7)
