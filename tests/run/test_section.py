"""Section surveys from file to ledger: exact wakes, a computed airfoil wake of known drag, and what surrounds them."""

import importlib.util
import json
import math
import os
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr

from wakeledger.confidence.montecarlo import run as run_montecarlo
from wakeledger.core.errors import InputError
from wakeledger.core.flags import Flag
from wakeledger.core.points import Channel, Points
from wakeledger.core.traverse import axis_of
from wakeledger.ledger.archive import open_archive, write_archive
from wakeledger.ledger.tabular import ledger_json
from wakeledger.run.config import parse_survey
from wakeledger.run.load import SurveyInput
from wakeledger.run.section.chain import OUTPUTS, ROW
from wakeledger.run.section.survey import prepare_section
from wakeledger.run.survey import inspect, load, reduce
from wakeledger.stream.reference import Reference, resolve_reference

STREAM = Reference(speed=30.0, density=1.2, static_pressure=1e5)
Q = STREAM.dynamic_pressure
CHORD = 0.5
FAST = resolve_reference({"mach": 0.6, "static_pressure": 5e4, "temperature": 250.0}, compressible=True)
SAMPLE = Path(__file__).parents[2] / "sample_surveys" / "wing_section"


# exact wakes


def gaussian(depth=0.3, width=0.05, n=121, half=0.3):
    """Far wake u = U (1 - A exp(-(z/B)^2)) at the stream's pressure: columns in SI and the drag in closed form."""
    z = np.linspace(-half, half, n)
    u = STREAM.speed * (1 - depth * np.exp(-((z / width) ** 2)))
    total = STREAM.static_pressure + 0.5 * STREAM.density * u**2
    # Closed form: c_d c = 2 sqrt(pi) B A (1 - A/sqrt(2)).
    drag = 2 * math.sqrt(math.pi) * width * depth * (1 - depth / math.sqrt(2)) * Q
    return {"z": z, "pt": total, "ps": np.full(n, STREAM.static_pressure), "u": u}, drag


def carried_back(stream=STREAM, pressure=0.0, depth=0.2, width=0.04, n=121, half=0.25, reach=0.5):
    """A Gaussian far wake carried back, tube by tube, to a plane of another static pressure; its drag is known."""
    far = np.linspace(-0.6, 0.6, 24_001)
    speed = stream.speed * (1 - depth * np.exp(-((far / width) ** 2)))
    static = stream.static_pressure + pressure * stream.dynamic_pressure * np.exp(-((far / reach) ** 2))
    if stream.compressible:
        kappa = (stream.gamma - 1) / stream.gamma
        enthalpy = stream.heat_capacity * stream.total_temperature
        total = stream.static_pressure * (1 - 0.5 * speed**2 / enthalpy) ** (-1 / kappa)
        far_flux = speed / (1 - 0.5 * speed**2 / enthalpy) * stream.static_pressure
        cold = (static / total) ** kappa
        local = np.sqrt(2 * enthalpy * (1 - cold))
        flux = static / cold * local
        mass = far_flux / (stream.gas_constant * stream.total_temperature)
    else:
        total = stream.static_pressure + 0.5 * stream.density * speed**2
        local = np.sqrt(2 * (total - static) / stream.density)
        far_flux, flux, mass = speed, local, stream.density * speed
    ratio = far_flux / flux
    across = np.concatenate([[0.0], np.cumsum(0.5 * (ratio[1:] + ratio[:-1]) * np.diff(far))])
    across -= across[far.size // 2]
    drag = float(np.trapezoid(mass * (stream.speed - speed), far))
    z = np.linspace(-half, half, n)
    profiles = {"pt": total, "ps": static, "u": local}
    return {"z": z} | {name: np.interp(z, across, values) for name, values in profiles.items()}, drag


# survey files


def entry(column, unit, **more):
    return {"column": column, "unit": unit, **more}


PRESSURES = {"total_pressure": entry("pt", "Pa"), "static_pressure": entry("ps", "Pa")}


def source(name, target, amount, effect="random"):
    return {"name": name, "applies_to": [target], "effect": effect, "standard_uncertainty": amount}


def description(
    *,
    columns=None,
    primary="total_pressure",
    edge_static="measured",
    stream=STREAM,
    sources=(),
    compare=(),
    draws=200,
    seed=1,
    **tables,
):
    reference = {"speed": f"{stream.speed!r} m/s", "static_pressure": f"{stream.static_pressure!r} Pa"}
    reference |= {"temperature": "250 K"} if stream.compressible else {"density": f"{stream.density!r} kg/m^3"}
    return {
        "title": "test section",
        "reference": reference,
        "plane": {
            "file": "traverse.csv",
            "station": "0.4 m",
            "primary": primary,
            "columns": {"z": entry("z", "m"), **PRESSURES} if columns is None else columns,
        },
        "section": {"chord": f"{CHORD} m", "edge_static": edge_static},
        "uncertainty": {"draws": draws, "seed": seed, "source": list(sources)},
        "compare": list(compare),
        **tables,
    }


def toml(content):
    def value(item):
        if isinstance(item, dict):
            return "{ " + ", ".join(f"{key} = {value(entry)}" for key, entry in item.items()) + " }"
        if isinstance(item, list):
            return "[" + ", ".join(value(entry) for entry in item) + "]"
        return json.dumps(item)

    lines = [f"{key} = {value(item)}" for key, item in content.items() if not isinstance(item, dict)]
    for key, item in content.items():
        if isinstance(item, dict):
            lines += [f"[{key}]", *(f"{name} = {value(part)}" for name, part in item.items())]
    return "\n".join(lines) + "\n"


def write(folder, data, content):
    folder.mkdir(parents=True, exist_ok=True)
    rows = zip(*data.values(), strict=True)
    cells = (",".join("" if np.isnan(x) else repr(float(x)) for x in row) for row in rows)
    (folder / "traverse.csv").write_text("\n".join([",".join(data), *cells]) + "\n", encoding="utf-8")
    path = folder / "survey.toml"
    path.write_text(toml(content), encoding="utf-8")
    return path


def ledger(folder, data, **options):
    return reduce(load(write(folder, data, description(**options))))


def drag_of(folder, data, **options):
    return ledger(folder, data, **options).row(ROW).value


def noisy(data, *, total=0.0, static=0.0, speed=0.0, seed=0):
    generator = np.random.default_rng(seed)
    sizes = {"pt": total, "ps": static, "u": speed}
    return {
        name: values + generator.normal(0.0, sizes[name], values.size) if sizes.get(name) else values
        for name, values in data.items()
    }


NOISE = (source("total noise", "plane.total_pressure", "2 Pa"), source("static noise", "plane.static_pressure", "2 Pa"))


# the value


def test_exact_gaussian_wake_in_noise(tmp_path):
    data, exact = gaussian()
    found = ledger(
        tmp_path,
        noisy(data, total=2.0, static=2.0, seed=4),
        sources=[*NOISE, source("speed", "reference.speed", "0.05 m/s", "systematic")],
        compare=[
            {"name": "closed form", "row": ROW, "value": f"{exact!r} N/m", "standard_uncertainty": "0.001 N/m"},
            {"name": "doubled", "row": ROW, "coefficient": 2 * exact / Q / CHORD, "standard_uncertainty": 0.0001},
        ],
    )
    row = found.row(ROW)
    # White noise of 0.4 % of q, 5 mm apart, over a wake of 0.26 m and its outer level: 0.5 % of the drag.
    assert 0.003 * exact < row.standard_uncertainty < 0.008 * exact
    assert abs(row.value - exact) < row.expanded_uncertainty
    assert row.unit == "N/m"
    assert row.coefficient == pytest.approx(row.value / (Q * CHORD), rel=1e-12)
    # 0.0418938/0.5: closed form for A = 0.3, B = 0.05 m on a chord of 0.5 m.
    assert row.coefficient == pytest.approx(0.0418938 / CHORD, abs=row.coefficient_expanded_uncertainty)
    assert [(line.method, line.verdict) for line in found.estimates] == [
        ("betz", "agrees"),
        ("momentum", "not_independent"),
    ]
    assert [line.verdict for line in found.comparisons] == ["agrees", "disagrees"]
    assert found.comparisons[1].difference == pytest.approx(row.value - 2 * exact, rel=1e-12)
    # The budget closes: its variances add to the row's.
    parts = {line.source: line.standard_uncertainty for line in found.budget}
    assert {"total noise", "static noise", "speed", "remainder"} <= parts.keys()
    assert math.hypot(*parts.values()) == pytest.approx(row.standard_uncertainty, rel=1e-9)
    assert max(parts, key=parts.get) == "total noise"
    assert found.covariance == pytest.approx(np.array([[row.standard_uncertainty**2]]))


def test_exact_gaussian_wake_without_noise(tmp_path):
    data, exact = gaussian()
    # The window ends where a Gaussian keeps 2e-4 of its area outside, and its tail shifts the zero by as much.
    assert drag_of(tmp_path, data) == pytest.approx(exact, rel=6e-4)


@pytest.mark.parametrize("pressure", [-0.08, -0.03, 0.02, 0.07])
@pytest.mark.parametrize("stream", [STREAM, FAST], ids=["slow", "fast"])
def test_drag_does_not_depend_on_the_pressure_at_the_rake(tmp_path, stream, pressure):
    data, exact = carried_back(stream, pressure)
    found = ledger(tmp_path, data, stream=stream)
    assert found.compressible == stream.compressible
    row = found.row(ROW)
    # Tails and zero as above; the fine wake is interpolated to 4 mm.
    assert row.value == pytest.approx(exact, rel=1.5e-3)
    assert row.coefficient == pytest.approx(exact / (stream.dynamic_pressure * CHORD), rel=1.5e-3)
    # With the stream's pressure in its place the drag is off by about half the pressure coefficient, and the other way.
    wrong = ledger(tmp_path / "stream", data, stream=stream, edge_static="stream")
    assert (wrong.row(ROW).value / exact - 1) / pressure == pytest.approx(0.6, abs=0.25)
    assert any("cannot be told from this traverse" in note for note in wrong.notes)


def test_compressibility_matters(tmp_path):
    data, exact = carried_back(FAST, 0.02)
    content = description(stream=FAST)
    content["reference"]["compressible"] = False
    slow = reduce(load(write(tmp_path, data, content)))
    assert not slow.compressible
    # At Mach 0.6 the total pressure stands 9 % of q higher above the static one than in incompressible flow.
    assert abs(slow.row(ROW).value / exact - 1) > 0.02


def reference_data(name):
    root = os.environ.get("WAKELEDGER_REFERENCE_DATA")
    folder = Path(root) if root else Path(__file__).resolve().parents[3] / "shared" / "reference"
    path = folder / "airfoil_wake" / name
    if not path.exists():
        pytest.skip(f"no reference data: set WAKELEDGER_REFERENCE_DATA ({name} is not beside the repository)")
    return pd.read_csv(path)


SPEED_COLUMNS = {"z": entry("z", "m"), "u": entry("u", "1", normalised_by="speed")}
#: Surface-integrated drag coefficient of DSMA661 Model A (NASA Turbulence Modeling Resource), seen.
PUBLISHED = {"first": 0.010069494, "second": 0.01006930}


@pytest.mark.parametrize("solver", PUBLISHED)
@pytest.mark.parametrize("station", [1.8, 3.0])
def test_computed_airfoil_wake(tmp_path, solver, station):
    table = reference_data("wake_sa.csv")
    table = table[(table.solver == solver) & (table.x_over_c == station)]
    data = {"z": CHORD * table.y_over_c.to_numpy(), "u": table.u_over_Uref.to_numpy()}
    found = ledger(tmp_path, data, columns=SPEED_COLUMNS, primary="velocity", edge_static="edge_speed")
    # The design's target: within 0.5 % of the published coefficient.
    assert found.row(ROW).coefficient == pytest.approx(PUBLISHED[solver], rel=5e-3)
    assert any("straight between those at the wake's edges" in note for note in found.notes)


# which pressure comes from where


def test_every_way_to_the_same_state(tmp_path):
    data, _ = carried_back(pressure=0.04)
    base = drag_of(tmp_path / "base", data)
    z, total, static, u = entry("z", "m"), PRESSURES["total_pressure"], PRESSURES["static_pressure"], entry("u", "m/s")
    for name, columns, primary in (
        ("total and speed", {"z": z, "total_pressure": total, "u": u}, "total_pressure"),
        ("speed and static", {"z": z, "u": u, "static_pressure": static}, "velocity"),
        ("speed and total", {"z": z, "u": u, "total_pressure": total}, "velocity"),
        ("magnitude", {"z": z, "speed": u, "static_pressure": static}, "velocity"),
    ):
        # The same algebra but for interpolating p, H and u between exact points: second order in the spacing.
        assert drag_of(tmp_path / name, data, columns=columns, primary=primary) == pytest.approx(base, rel=3e-4), name


def test_edge_speed(tmp_path):
    # The static pressure is level: what a straight line between the edges leaves out is not tested here.
    data, exact = carried_back(pressure=0.04, reach=5.0)
    columns = {"z": entry("z", "m"), "total_pressure": PRESSURES["total_pressure"], "u": entry("u", "m/s")}
    # Edge speeds are read where a thousandth of the deficit is left.
    assert drag_of(tmp_path, data, columns=columns, edge_static="edge_speed") == pytest.approx(exact, rel=2e-3)
    speed = {"z": entry("z", "m"), "u": entry("u", "m/s")}
    options = {"columns": speed, "primary": "velocity", "edge_static": "edge_speed"}
    assert drag_of(tmp_path / "speed", data, **options) == pytest.approx(exact, rel=2e-3)
    # A hump of the static pressure under the wake is missed, and the sweep of the window is there to cover it.
    humped, exact = carried_back(pressure=0.04)
    found = ledger(tmp_path / "humped", humped, sources=[source("noise", "plane.u", "0.001 m/s")], **options)
    assert 3e-3 * exact < abs(found.row(ROW).value - exact) < found.row(ROW).expanded_uncertainty


def test_primary_variables_are_respected(tmp_path):
    """A static pressure 1 % of q off costs half a per cent, whether the total pressure carries that error or not."""
    data, _ = carried_back(pressure=0.04)
    columns = {"z": entry("z", "m"), **PRESSURES, "u": entry("u", "m/s")}
    shifted = data | {"ps": data["ps"] + 0.01 * Q}
    found = {}
    for primary in ("total_pressure", "velocity"):
        right = drag_of(tmp_path / f"{primary} right", data, columns=columns, primary=primary)
        found[primary] = drag_of(tmp_path / primary, shifted, columns=columns, primary=primary) / right - 1
    # d ln D / d(p/q) is -1/(2 (g - k)), g - k being between the wake's 0.6 and the stream's 1.
    assert found["total_pressure"] == pytest.approx(-0.0062, abs=0.0015)
    # Here H carries the error and is zeroed beside the wake: speed and loss stay, only the local pressure is off.
    assert found["velocity"] == pytest.approx(found["total_pressure"], abs=3e-4)


def test_reference_drift_is_taken_out(tmp_path):
    data, exact = carried_back(pressure=0.04)
    drift = 0.01 * Q * (0.5 + data["z"] / 0.25)
    found = ledger(tmp_path, data | {"pt": data["pt"] + drift})
    assert any("drifts along the traverse" in note for note in found.notes)
    # A drift along the traverse is straight between the levels beside the wake.
    assert found.row(ROW).value == pytest.approx(exact, rel=2e-3)
    check = next(check for check in found.checks if check.name == "outer_flow")
    # Half of 1 % of q over a window of 0.2 m is 0.5 N/m of 30.
    assert check.verdict in ("warn", "pass")
    assert check.value == pytest.approx(0.005 * Q * 0.21 / exact, rel=0.1)


# invariance


def test_rows_units_and_directions_do_not_matter(tmp_path):
    data, _ = carried_back(pressure=0.05)
    data = noisy(data, total=2.0, static=2.0)
    base = drag_of(tmp_path / "base", data)
    order = np.random.default_rng(3).permutation(data["z"].size)
    shuffled = {name: values[order] for name, values in data.items()}
    assert drag_of(tmp_path / "order", shuffled) == pytest.approx(base, rel=1e-12)
    other = {
        "z": data["z"] / 0.0254,
        "pt": (data["pt"] - STREAM.total_pressure) / Q,
        "ps": (data["ps"] - STREAM.static_pressure) / 1e3,
    }
    columns = {
        "z": entry("z", "in"),
        "total_pressure": entry("pt", "1", normalised_by="dynamic_pressure", relative_to="total"),
        "static_pressure": entry("ps", "kPa", relative_to="static"),
    }
    # Pressures of 1e5 Pa against losses of 100 Pa cost a few digits.
    assert drag_of(tmp_path / "units", other, columns=columns) == pytest.approx(base, rel=1e-9)
    flipped = description(columns=None)
    flipped["plane"]["axes"] = {"z": "-z", "y": "-y"}
    found = reduce(load(write(tmp_path / "flipped", data, flipped)))
    assert found.row(ROW).value == pytest.approx(base, rel=1e-9)
    assert found.plane["z"].values[0] == pytest.approx(-data["z"][-1])
    sideways = description(columns={"y": entry("z", "m"), **PRESSURES})
    found = reduce(load(write(tmp_path / "sideways", data, sideways)))
    assert found.row(ROW).value == pytest.approx(base, rel=1e-12)
    assert axis_of(found.plane) == "y"
    turned = description(columns={"y": entry("z", "m"), **PRESSURES})
    turned["plane"]["axes"] = {"y": "+z", "z": "-y"}
    found = reduce(load(write(tmp_path / "turned", data, turned)))
    assert found.row(ROW).value == pytest.approx(base, rel=1e-12)
    assert axis_of(found.plane) == "z"


def test_speed_along_another_axis_and_with_crossflow(tmp_path):
    """A file whose x runs upstream, and a probe turned by 5 degrees: only the magnitude matters."""
    data, _ = gaussian()
    speed = {"z": entry("z", "m"), "u": entry("u", "m/s")}
    options = {"primary": "velocity", "edge_static": "edge_speed"}
    base = drag_of(tmp_path / "base", data, columns=speed, **options)
    turned = {"z": data["z"], "u": -data["u"] * math.cos(0.09), "w": data["u"] * math.sin(0.09)}
    content = description(columns=speed | {"w": entry("w", "m/s")}, **options)
    content["plane"]["axes"] = {"x": "-x", "y": "-y"}
    assert reduce(load(write(tmp_path, turned, content))).row(ROW).value == pytest.approx(base, rel=1e-12)


# gaps, repeats, impossible points


def test_lost_repeated_and_impossible_points(tmp_path):
    data, exact = carried_back(pressure=0.03)
    data = noisy(data, total=0.5, static=0.5)
    whole = drag_of(tmp_path / "whole", data)
    lost = {name: values.copy() for name, values in data.items()}
    lost["pt"][[57, 90]] = np.nan
    lost["ps"][64] = STREAM.total_pressure
    lost = {name: np.concatenate([values, values[[70, 10]]]) for name, values in lost.items()}
    lost["pt"][-2] += 1.0
    found = ledger(tmp_path, lost, sources=NOISE)
    # Two points of a wake of 50, a cubic over 8 mm of a wake 40 mm thick, and noise of 0.1 % of q.
    assert found.row(ROW).value == pytest.approx(whole, rel=3e-3)
    assert found.row(ROW).value == pytest.approx(exact, abs=found.row(ROW).expanded_uncertainty)
    flag = found.plane["flag"].values.ravel()
    assert flag.size == 121
    assert np.flatnonzero(flag & Flag.MISSING).tolist() == [57, 64, 90]
    assert np.flatnonzero(flag & Flag.NON_PHYSICAL).tolist() == [64]
    assert np.flatnonzero(flag & Flag.AVERAGED).tolist() == [10, 70]
    assert np.isfinite(found.plane["total_pressure"].values).all()
    assert "filled points" in {line.source for line in found.budget}
    check = next(check for check in found.checks if check.name == "missing_points")
    assert check.verdict == "warn"
    for sentence in ("filled from their neighbours: 3", "without a real flow state, which count as missing: 1"):
        assert any(sentence in note for note in found.notes)


def test_a_wake_without_its_deepest_place_is_reported(tmp_path):
    data, _ = carried_back()
    data["pt"][60] = np.nan
    found = ledger(tmp_path, data)
    check = next(check for check in found.checks if check.name == "missing_points")
    assert check.verdict != "pass"
    assert "deepest place" in check.message


def test_gap_term_covers_what_a_wide_gap_does(tmp_path):
    data, exact = carried_back(n=61)
    data["pt"][28:31] = np.nan
    found = ledger(tmp_path, data, sources=[source("noise", "plane.total_pressure", "0.01 Pa")])
    terms = {line.source: line.standard_uncertainty for line in found.budget}
    assert abs(found.row(ROW).value - exact) < 3 * terms["filled points"]
    assert terms["filled points"] < 0.1 * exact


@pytest.mark.parametrize("n", [13, 17, 25])
def test_spacing_term_covers_a_coarse_traverse(tmp_path, n):
    data, exact = gaussian(depth=0.2, width=0.04, n=n, half=0.2)
    found = ledger(tmp_path, data, sources=[source("noise", "plane.total_pressure", "0.01 Pa")])
    row = found.row(ROW)
    assert abs(row.value - exact) < row.expanded_uncertainty
    # 33, 25 and 17 mm apart in a wake with B = 40 mm
    assert row.expanded_uncertainty < {13: 0.3, 17: 0.08, 25: 0.02}[n] * exact


def test_excluded_and_included_stretches(tmp_path):
    data, exact = carried_back(pressure=0.02)
    wall = data | {"pt": data["pt"] - 0.5 * Q * np.exp(-(((data["z"] + 0.25) / 0.03) ** 2))}
    boxes = {"exclude": [[["-1 m", "-1 m"], ["1 m", "-0.17 m"]]]}
    found = ledger(tmp_path, wall, wake=boxes)
    assert found.row(ROW).value == pytest.approx(exact, rel=2e-3)
    assert any("Points excluded by the survey file" in note for note in found.notes)
    wide = ledger(tmp_path / "wide", data, wake={"include": [[["-1 m", "-0.2 m"], ["1 m", "0 m"]]], "grow": "5 mm"})
    assert float(wide.plane["wake_from"]) == pytest.approx(-0.2)
    assert wide.row(ROW).value == pytest.approx(exact, rel=2e-3)


def test_a_wake_lost_in_noise_can_be_given(tmp_path):
    data, exact = gaussian(depth=0.02, width=0.04, n=61, half=0.2)
    data = noisy(data, total=15.0, seed=5)
    level = {"level": 30.0}
    with pytest.raises(InputError, match="no wake stands out"):
        ledger(tmp_path, data, wake=level)
    found = ledger(tmp_path / "given", data, wake=level | {"include": [[["-1 m", "-0.1 m"], ["1 m", "0.1 m"]]]})
    window = float(found.plane["wake_from"]), float(found.plane["wake_to"])
    assert window == pytest.approx((-0.1, 0.1))
    # Noise of 3 % of q over 0.2 m with 30 places, and the same again from the level beside it.
    assert found.row(ROW).value == pytest.approx(exact, abs=4 * 15.0 * 0.2 / math.sqrt(30))


# checks


def test_a_cut_wake_fails(tmp_path):
    data, _ = carried_back()
    part = data["z"] > -0.02
    found = ledger(tmp_path, {name: values[part] for name, values in data.items()})
    verdicts = {check.name: check for check in found.checks}
    assert verdicts["edge_total_pressure_loss"].verdict == "fail"
    assert "lower" in verdicts["edge_total_pressure_loss"].message
    assert found.failed


def test_a_wake_that_fills_the_traverse_fails(tmp_path):
    data, _ = gaussian(n=41, half=0.08)
    found = ledger(tmp_path, data)
    assert {check.name: check.verdict for check in found.checks}["outer_flow"] == "fail"


def test_checks_and_notes_of_a_good_traverse(tmp_path):
    data, _ = carried_back(pressure=0.03)
    data = noisy(data, total=2.0, static=2.0)
    found = ledger(tmp_path, data, sources=NOISE)
    verdicts = {check.name: check.verdict for check in found.checks}
    assert verdicts == {
        "net_circulation": "not_applicable",
        "mass_balance": "not_applicable",
        "edge_vorticity": "not_applicable",
        "edge_total_pressure_loss": "pass",
        "core_resolution": "not_applicable",
        "noise_bias": "pass",
        "declared_noise": "pass",
        "outer_flow": "pass",
        "missing_points": "pass",
    }
    assert all(check.message for check in found.checks)
    assert not any("[model]" in note for note in found.notes)
    loud = ledger(tmp_path / "loud", data, sources=[source("total noise", "plane.total_pressure", "9 Pa")])
    check = next(check for check in loud.checks if check.name == "declared_noise")
    assert check.verdict == "warn" and "total pressure" in check.message and "declared 9 Pa" in check.message
    # 9 Pa declared, 2 Pa there, less three standard errors.
    assert 1.5 < check.value < 4.5
    assert any("no source declares (static pressure" in note for note in loud.notes)


def test_speed_at_the_streams_pressure_is_questioned(tmp_path):
    """Where the pressure is not the stream's, a speed taken at it shows a loss beside the wake, which is reported."""
    data, exact = carried_back(pressure=0.04)
    speed = {"z": entry("z", "m"), "u": entry("u", "m/s")}
    found = ledger(tmp_path, data, columns=speed, primary="velocity", edge_static="stream")
    verdicts = {check.name: check.verdict for check in found.checks}
    assert verdicts["outer_flow"] != "pass"
    assert verdicts["noise_bias"] in ("pass", "not_applicable")
    far, exact = gaussian()
    options = {"columns": speed, "primary": "velocity", "edge_static": "stream"}
    assert drag_of(tmp_path / "far", far, **options) == pytest.approx(exact, rel=1e-3)


def test_without_sources_the_uncertainty_is_unknown(tmp_path):
    data, _ = gaussian()
    row = ledger(tmp_path, data).row(ROW)
    assert math.isnan(row.standard_uncertainty)
    assert "no uncertainty source" in row.reason
    survey = load(write(tmp_path, data, description(sources=NOISE)))
    assert "no Monte Carlo draws" in reduce(survey, draws=0).row(ROW).reason


# products


@pytest.fixture(scope="module")
def reduced(tmp_path_factory):
    data, _ = carried_back(pressure=0.03)
    data = noisy(data, total=2.0, static=2.0)
    data["pt"][75] = np.nan
    folder = tmp_path_factory.mktemp("reduced")
    position = source("position", "position.z", "0.1 mm")
    found = ledger(folder, data, sources=[*NOISE, position], draws=100)
    write_archive(found, folder / "ledger.nc")
    return folder, found


def test_archive_reduces_to_the_same_numbers(reduced):
    folder, found = reduced
    again = reduce(load(folder / "ledger.nc"))
    assert ledger_json(again) == ledger_json(found)
    assert open_archive(folder / "ledger.nc").plane.identical(found.plane)
    # Errors of the position count, but little: a tenth of a millimetre in a wake of 80.
    shares = {line.source: line.share for line in found.budget}
    assert 0 < shares["position"] < 0.5


def test_archive_opens_with_plain_xarray(reduced):
    folder, found = reduced
    with xr.open_dataset(folder / "ledger.nc") as root:
        assert float(root["value"].sel(row=ROW)) == found.row(ROW).value
        assert str(root["unit"].sel(row=ROW).values) == "N/m"
    with xr.open_dataset(folder / "ledger.nc", group="plane") as plane:
        assert plane["total_pressure_loss"].dims == ("z", "y")
        assert plane.sizes == {"z": 121, "y": 1}
        inside = plane["wake_mask"].values.ravel() == 1
        z = plane["z"].values
        assert (inside == ((z >= float(plane["wake_from"])) & (z <= float(plane["wake_to"])))).all()
        assert plane["u"].attrs["units"] == "m s-1"
    with xr.open_dataset(folder / "ledger.nc", group="model") as model:
        assert float(model["chord"]) == CHORD


def test_archive_conforms_to_cf(reduced, tmp_path):
    checker = shutil.which("compliance-checker", path=str(Path(sys.executable).parent))
    if checker is None:
        pytest.skip("compliance-checker is not installed beside this Python")
    files = [reduced[0] / "ledger.nc", tmp_path / "plane.nc"]
    with xr.open_dataset(files[0], group="plane") as plane:
        bare = {name: {"_FillValue": var.encoding.get("_FillValue")} for name, var in plane.variables.items()}
        plane.assign_attrs(Conventions="CF-1.11", title="t", history="h").to_netcdf(files[1], encoding=bare)
    command = [sys.executable, "-W", "ignore", checker, "--test=cf:1.11", "--criteria=strict", *map(str, files)]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.stdout.count("All tests passed!") == 2, done.stdout + done.stderr


def test_report_shows_the_traverse(reduced):
    from wakeledger.present.figures import draw
    from wakeledger.present.report import report_html
    from wakeledger.present.terminal import ledger_text

    _, found = reduced
    figures = draw(found)
    assert {"traverse", "estimates", "budget"} == set(figures)
    loss, pressure, speed = figures["traverse"].axes
    assert [axes.get_ylabel() for axes in (loss, pressure, speed)] == ["loss / q", "(p − p∞) / q", "u / U"]
    (shade,) = (patch for patch in loss.patches)
    window = float(found.plane["wake_from"]), float(found.plane["wake_to"])
    assert (shade.get_x(), shade.get_x() + shade.get_width()) == pytest.approx(window)
    filled = next(line for line in loss.lines if line.get_label() == "filled in")
    assert filled.get_xdata() == pytest.approx([found.plane["z"].values[75]])
    page = report_html(found)
    assert "The traverse" in page
    assert "section drag" in page
    assert "section drag" in ledger_text(found)


def test_inspection(reduced):
    from wakeledger.present.terminal import inspection_text

    folder, found = reduced
    seen = inspect(load(folder / "survey.toml"))
    assert seen.arrangement == "line traverse along z"
    assert seen.shape == (1, 121)
    assert seen.window == (0.0, 0.0, -0.25, 0.25)
    noise = {channel.name: channel.noise for channel in seen.channels}
    # Noise of 2 Pa from some 60 differences beside the wake: 10 % of it, three times over.
    assert noise == pytest.approx({"total_pressure": 2.0, "static_pressure": 2.0}, rel=0.3)
    assert [edge.side for edge in seen.edges] == ["lower", "upper"]
    assert seen.checks == found.checks
    assert "121 places, 4.17 mm apart" in inspection_text(seen)


# what is wrong is said in one line


def with_value(name, index, value):
    def change(data):
        data[name][index] = value
        return data

    return change


@pytest.mark.parametrize(
    ("change", "options", "message"),
    [
        (lambda data: data | {"pt": data["ps"], "ps": data["pt"]}, {}, "line 2: there is no real flow state"),
        (lambda data: {name: values[:4] for name, values in data.items()}, {}, "only 4 places"),
        (lambda data: data | {"pt": data["pt"] * np.nan}, {}, "no value at any point"),
        (lambda data: data | {"z": data["z"] * 0}, {}, "contradict each other|only 1 places"),
        (with_value("z", 7, np.nan), {}, "line 9, column 'z': the position z is missing"),
        (lambda data: data | {"pt": np.full(121, STREAM.total_pressure)}, {}, "no wake stands out"),
        (
            lambda data: data | {"u": -data["u"]},
            {"columns": SPEED_COLUMNS, "primary": "velocity", "edge_static": "edge_speed"},
            "line 2: the flow runs upstream",
        ),
        (
            lambda data: data,
            {
                "columns": {"z": entry("z", "m"), "total_pressure": PRESSURES["total_pressure"]},
                "edge_static": "edge_speed",
            },
            r'\[plane.columns\]: u or speed has no column, and edge_static = "edge_speed" rests on it',
        ),
        (
            lambda data: data,
            {"compare": [{"name": "b", "row": "lift", "value": "1 N", "standard_uncertainty": "1 N"}]},
            "row 'lift' is not in this ledger",
        ),
    ],
    ids=[
        "exchanged",
        "short",
        "empty",
        "one place",
        "no position",
        "no wake",
        "upstream",
        "speed",
        "row",
    ],
)
def test_refusals(tmp_path, change, options, message):
    data, _ = carried_back()
    data = change(data)
    with pytest.raises(InputError, match=message) as raised:
        ledger(tmp_path, data, **options)
    line = raised.value.line
    assert "\n" not in line
    assert line.startswith(str(tmp_path))


def test_contradicting_repeats(tmp_path):
    data, _ = carried_back()
    data = {name: np.append(values, values[60]) for name, values in data.items()}
    data |= {"pt": data["pt"] - STREAM.total_pressure}
    data["pt"][-1] += 60.0
    columns = {"z": entry("z", "m"), **PRESSURES, "total_pressure": entry("pt", "Pa", relative_to="total")}
    with pytest.raises(InputError, match="lines 62 and 123: two values of total_pressure at the same place"):
        ledger(tmp_path, data, columns=columns)


# error bars


def test_coverage(monkeypatch):
    """U95 of the measured sources holds the truth in about 95 of 100 surveys with every kind of error."""
    sources = [
        *NOISE,
        source("total zero", "plane.total_pressure", "2 Pa", "systematic"),
        source("static zero", "plane.static_pressure", "5 Pa", "systematic"),
        source("speed", "reference.speed", "0.06 m/s", "systematic"),
    ]
    survey = parse_survey(toml(description(sources=sources)), "survey.toml")
    clean, exact = carried_back(pressure=0.04, n=61)
    # The numerical terms cover by design and are tested by themselves; they need no noise here.
    monkeypatch.setattr("wakeledger.run.section.survey._NOISE_DRAWS", 2)
    held, surveys, deviations = 0, 100, []
    for seed in range(surveys):
        generator = np.random.default_rng([2024, seed])
        # The survey file says 30 m/s; the tunnel ran at that less the error, and every pressure with it.
        factor = (1 - generator.normal(0, 0.06) / STREAM.speed) ** 2
        total = STREAM.static_pressure + factor * (clean["pt"] - STREAM.static_pressure)
        static = STREAM.static_pressure + factor * (clean["ps"] - STREAM.static_pressure)
        total = total + generator.normal(0, 2, total.size) + generator.normal(0, 2)
        static = static + generator.normal(0, 2, static.size) + generator.normal(0, 5)
        n = total.size
        points = Points(
            np.zeros(n),
            clean["z"],
            {"total_pressure": Channel(total), "static_pressure": Channel(static)},
            np.arange(1, n + 1),
            "traverse.csv",
        )
        prepared = prepare_section(SurveyInput(survey, points, {}))
        samples = run_montecarlo(
            prepared.vectors,
            prepared.sources,
            prepared.layouts,
            names=OUTPUTS,
            draws=100,
            seed=seed,
            workers=1,
        )
        error = prepared.nominal.values[ROW] - factor * exact
        held += abs(error) <= samples.interval().half_width[0]
        deviations.append(error / samples.standard_uncertainty[0])
    # Binomial, p = 0.94 (100 draws make the interval a little short), 100 surveys: sd 2.4; 3 sd either way.
    assert 87 <= held <= 100
    # Standard deviation of 100 normal values: 1 within 3 x 7 %; a bias below 3 x 0.1.
    assert np.std(deviations) == pytest.approx(1.0, abs=0.22)
    assert abs(np.mean(deviations)) < 0.3


# the sample survey


@pytest.fixture(scope="module")
def script():
    spec = importlib.util.spec_from_file_location("make_section_survey", SAMPLE / "make_survey.py")
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


def test_sample_survey_is_what_its_script_makes(script):
    flow = script.wake()
    table = np.genfromtxt(SAMPLE / "traverse.csv", delimiter=",", names=True)
    for name, values in script.recording(flow).items():
        # One unit of the last digit, where another machine rounds the other way.
        np.testing.assert_allclose(table[name], values, atol=0.0101, equal_nan=True)
    kept = json.loads((SAMPLE / "truth.json").read_text(encoding="utf-8"))["rows"]["section_drag"]
    made = script.truth(flow)["rows"]["section_drag"]
    assert kept["value"] == pytest.approx(made["value"], rel=1e-7)
    # A laminar section's drag, with the flow's own drag beside it: D' = q c c_d.
    assert 0.008 < kept["coefficient"] < 0.012
    assert kept["value"] == pytest.approx(0.5 * 1.18 * 36.0**2 * 0.5 * kept["coefficient"], rel=1e-6)


def test_sample_survey_gives_its_truth():
    truth = json.loads((SAMPLE / "truth.json").read_text(encoding="utf-8"))["rows"]["section_drag"]
    found = reduce(load(SAMPLE / "survey.toml"))
    row = found.row(ROW)
    assert abs(row.value - truth["value"]) < row.expanded_uncertainty
    assert abs(row.coefficient - truth["coefficient"]) < row.coefficient_expanded_uncertainty
    # A survey worth its tunnel time: a few per cent.
    assert 0.01 < row.expanded_uncertainty / row.value < 0.05
    assert axis_of(found.plane) == "y"
    assert not found.failed
    assert [line.verdict for line in found.comparisons] == ["agrees"]


def noise_found(tmp_path, data, sources):
    return prepare_section(load(write(tmp_path, data, description(sources=sources)))).findings


def test_declared_noise_of_a_line_is_held_against_its_points(tmp_path):
    """Wrong by three each channel is named alone; right it is not. Some 60 places lie beside the wake."""
    data, _ = carried_back(pressure=0.03)
    for seed in range(12):
        found = noise_found(tmp_path / str(seed), noisy(data, total=2.0, static=2.0, seed=seed), NOISE)
        assert found.disagreements == () and found.notes == ()
        assert {one.name for one in found.compared} == {"total_pressure", "static_pressure"}
    for loud, quiet in (("total", "static"), ("static", "total")):
        found = noise_found(tmp_path / loud, noisy(data, **{loud: 6.0, quiet: 2.0}, seed=3), NOISE)
        (said,) = found.disagreements
        assert f"{loud} pressure " in said and "declared 2 Pa" in said and f"{quiet} pressure " not in said


def test_visits_of_a_line_that_drift_are_named(tmp_path):
    data, _ = carried_back()
    twice = {name: np.concatenate([values, values[:30:2]]) for name, values in data.items()}
    made = noisy(twice, total=2.0, static=2.0, seed=4)
    assert noise_found(tmp_path / "still", made, NOISE).drift is None
    made["pt"][-15:] += 14.0
    found = noise_found(tmp_path / "moved", made, NOISE)
    assert "15 places" in found.drift and "total pressure" in found.drift and "static" not in found.drift
