"""A support in the surveyed wake, ground planes cut short, and what an empty tunnel must declare."""

import re
import runpy
from dataclasses import replace
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wakeledger.core.errors import InputError
from wakeledger.run.survey import load, prepare, reduce
from wakeledger.synthetic import EmptyTunnel, GaussianElements, GaussianLosses, RectangularDuct, TunnelWake

DUCT = RectangularDuct((-0.96, 1.04), (-0.6, 0.68))
WINDOW = (-0.88, 0.88), (-0.36, 0.44)
STRUT = GaussianLosses(np.array([0.3]), np.array([-0.16]), np.array([0.6]), np.array([0.08]))
NOISE = {
    "name": "pressure noise",
    "applies_to": ["plane.total_pressure"],
    "effect": "random",
    "standard_uncertainty": "0.5 Pa",
}
UNCERTAINTY = {"draws": 100, "seed": 1, "source": [NOISE]}


@pytest.fixture(scope="module")
def tunnel():
    return SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("tunnel_kit.py"))))


def values(ledger):
    return {row.name: row.value for row in ledger.rows}


@pytest.fixture
def with_support(kit, tunnel, tmp_path):
    """The survey of a wing on a strut, and that of the strut alone at a part of the speed."""

    def run(*, speed=1.0, boundary=None):
        y, z = tunnel.points(*WINDOW)
        wing = tunnel.wing(DUCT)
        both = replace(wing, losses=wing.losses + STRUT)
        nothing = GaussianElements(*np.zeros((3, 1)), np.full(1, 0.1))
        strut = TunnelWake(tunnel.REFERENCE, nothing, STRUT, DUCT)
        alone = tunnel.columns(strut.state(y, z), y, z)
        static = tunnel.REFERENCE.static_pressure
        for name in ("u", "v", "w"):
            alone[name] = speed * alone[name]
        for name in ("total_pressure", "static_pressure"):
            alone[name] = static + speed**2 * (alone[name] - static)
        plain = tunnel.description(kit, boundary or tunnel.table(DUCT), uncertainty=UNCERTAINTY)
        plain["reference"] = plain["reference"] | {"speed": f"{speed * tunnel.SPEED!r} m/s"}
        kit.write(tmp_path / "survey" / "strut", alone, plain)
        given = tunnel.table(DUCT, support_tare={"survey": "strut/survey.toml"})
        content = tunnel.description(kit, given, uncertainty=UNCERTAINTY)
        data = tunnel.columns(both.state(y, z), y, z)
        return reduce(load(kit.write(tmp_path / "survey", data, content))), wing, both, strut

    return run


@pytest.mark.parametrize("speed", [1.0, 0.7])
def test_the_supports_drag_is_taken_off_rows_and_cross_checks(with_support, tunnel, speed):
    found, _, both, strut = with_support(speed=speed)
    wanted = both.truth.profile_drag - strut.truth.profile_drag
    assert strut.truth.profile_drag > 0.1 * wanted
    # The wake region cuts the losses' tails.
    assert_allclose(values(found)["profile_drag"], wanted, rtol=3e-3)
    estimates = {(each.row, each.method): each for each in found.estimates}
    entropy = estimates["profile_drag", "entropy_area"]
    assert_allclose(entropy.value, wanted, rtol=6e-3)
    assert entropy.verdict == "agrees"
    momentum = estimates["total_drag", "momentum_area"]
    assert_allclose(momentum.value, values(found)["total_drag"], rtol=3e-3)
    # The strut slows the stream as the model does.
    figures = {each.name: each.value for each in found.tunnel}
    assert_allclose(figures["wake_blockage"], both.truth.wake_blockage / tunnel.SPEED, rtol=3e-3)
    assert_allclose(figures["expected_wake_blockage"], figures["wake_blockage"], rtol=0.02)


def test_a_support_surveyed_in_other_surroundings_is_refused(with_support):
    with pytest.raises(InputError, match=r"\[boundary\] of survey.toml is not that of survey.toml"):
        with_support(boundary={"kind": "free_air"})


def test_without_a_bound_line_near_by_there_is_no_doubt_of_what_it_adds(kit, tunnel, tmp_path):
    flow = tunnel.wing(DUCT)
    y, z = tunnel.points(*WINDOW)
    content = tunnel.description(kit, tunnel.table(DUCT), uncertainty=UNCERTAINTY)
    content["model"] = {**content["model"], "quarter_chord_x": "-500 m"}
    found = reduce(load(kit.write(tmp_path, tunnel.columns(flow.state(y, z), y, z), content)))
    lines = [line for line in found.budget if line.source == "bound vortex in the residual"]
    # What the walls do to the stream, 2u_b, is no part of it: it had passed for one.
    assert all(line.standard_uncertainty < 1e-9 for line in lines)


def test_circulation_above_the_ground_is_checked(kit, tunnel, tmp_path):
    boundary = {"kind": "free_air", "reflection": "z"}
    found = {}
    for name, window in (("whole", ((-0.88, 0.88), (0.0, 0.72))), ("cut", ((-0.88, 0.12), (0.0, 0.72)))):
        y, z = tunnel.points(*window)
        data = tunnel.columns(tunnel.wing(None, "z", z=0.32).state(y, z), y, z)
        ledger = reduce(load(kit.write(tmp_path / name, data, tunnel.description(kit, boundary))))
        found[name] = next(each for each in ledger.checks if each.name == "net_circulation")
    assert found["whole"].verdict == "pass"
    assert found["whole"].value < 0.01
    assert found["cut"].verdict == "warn"
    # Of the vortices left, those of one sign: nearly all that sheds to port.
    assert found["cut"].value > 0.8


def test_an_empty_tunnel_without_sources_is_refused(kit, tunnel, tmp_path):
    flow = tunnel.wing(DUCT, empty=EmptyTunnel(upflow=0.2))
    y, z = tunnel.points(*WINDOW)
    boundary = tunnel.table(DUCT)
    content = tunnel.description(kit, boundary, uncertainty=UNCERTAINTY) | {
        "empty_tunnel": {"survey": "empty/survey.toml"}
    }
    kit.write(tmp_path / "empty", tunnel.columns(flow.empty_state(y, z), y, z), tunnel.description(kit, boundary))
    survey = load(kit.write(tmp_path, tunnel.columns(flow.state(y, z), y, z), content))
    with pytest.raises(InputError, match="declares no source"):
        reduce(survey)


def test_one_identity_for_two_errors_of_both_surveys_is_refused(kit, tunnel, tmp_path):
    flow = tunnel.wing(DUCT, empty=EmptyTunnel(upflow=0.2))
    y, z = tunnel.points(*WINDOW)
    boundary = tunnel.table(DUCT)
    angles = [
        {
            "name": name,
            "applies_to": [f"angle.{name}"],
            "effect": "systematic",
            "standard_uncertainty": "0.2 deg",
            "shared_id": "probe-1",
        }
        for name in ("pitch", "yaw")
    ]

    def run(name, changed):
        content = tunnel.description(kit, boundary, uncertainty=UNCERTAINTY | {"source": angles})
        plain = tunnel.description(kit, boundary, uncertainty=UNCERTAINTY | {"source": changed})
        kit.write(tmp_path / name / "empty", tunnel.columns(flow.empty_state(y, z), y, z), plain)
        content["empty_tunnel"] = {"survey": "empty/survey.toml"}
        return reduce(load(kit.write(tmp_path / name, tunnel.columns(flow.state(y, z), y, z), content)))

    # Pitch goes out with pitch, yaw with yaw, of one probe: what is left is what turns the wake itself.
    alone = run("alike", angles)
    lines = {(line.row, line.source): line.standard_uncertainty for line in alone.budget}
    lift = values(alone)["lift"]
    assert lines["lift", "pitch"] < 2e-3 * lift
    assert lines["lift", "yaw"] < 2e-3 * lift
    with pytest.raises(InputError, match="two different errors of"):
        run("other", [{**angles[0], "standard_uncertainty": "0.1 deg"}, angles[1]])


@pytest.mark.parametrize(
    ("more", "says"),
    [
        ({"model_centre": ["0 m", "2 m"]}, r"survey.toml, \[boundary\] model_centre: the model's centre"),
        ({"y": ["-0.5 m", "1.04 m"]}, r"survey.toml, \[boundary\] y, z: the survey reaches"),
        ({"y": ["-0.96 m", "1.04 m"], "reflection": "y"}, r"survey.toml, \[boundary\] section: .* not symmetric"),
    ],
)
def test_what_is_wrong_with_the_section_names_the_survey_file(kit, tunnel, tmp_path, more, says):
    y, z = tunnel.points(*WINDOW)
    data = tunnel.columns(tunnel.wing(DUCT).state(y, z), y, z)
    survey = load(kit.write(tmp_path, data, tunnel.description(kit, tunnel.table(DUCT) | more)))
    with pytest.raises(InputError, match=says):
        reduce(survey)


def test_noise_of_both_surveys_is_two_noises_whatever_its_identity(kit, tunnel, tmp_path):
    flow = tunnel.wing(DUCT, empty=EmptyTunnel(upflow=0.2))
    y, z = tunnel.points(*WINDOW)
    bias = []
    for more in ({}, {"shared_id": "probe-1"}):
        noise = {
            "name": "crossflow noise",
            "applies_to": ["plane.v", "plane.w"],
            "effect": "random",
            "standard_uncertainty": "0.5 m/s",
        }
        content = tunnel.description(kit, tunnel.table(DUCT), uncertainty=UNCERTAINTY | {"source": [noise | more]})
        folder = tmp_path / str(len(more))
        kit.write(folder / "empty", tunnel.columns(flow.empty_state(y, z), y, z, noise=0.5, seed=2), content)
        content = content | {"empty_tunnel": {"survey": "empty/survey.toml"}}
        data = tunnel.columns(flow.state(y, z), y, z, noise=0.5, seed=3)
        bias.append(prepare(load(kit.write(folder, data, content))).chain.frozen.bias["induced_drag"])
    assert bias[0] > 0
    # Half of it is the empty tunnel's. Its fields are drawn.
    assert_allclose(bias[1], bias[0], rtol=0.05)


def test_a_net_source_between_walls_is_told(kit, tunnel, tmp_path):
    y, z = tunnel.points(*WINDOW)
    data = tunnel.columns(tunnel.wing(DUCT).state(y, z), y, z)
    # A Gaussian source of 0.3 m²/s in the middle of the wake.
    along, up = y - 0.04, z - 0.04
    square = along**2 + up**2
    radial = 0.3 / (2 * np.pi) * -np.expm1(-square / 0.08**2) / np.maximum(square, 1e-12)
    data["v"], data["w"] = data["v"] + radial * along, data["w"] + radial * up
    survey = load(kit.write(tmp_path, data, tunnel.description(kit, tunnel.table(DUCT))))
    said = " ".join(reduce(survey).notes)
    found = re.search(r"net source in the wake region, ([+-][\d.]+) m2/s", said)
    assert found is not None
    assert_allclose(float(found[1]), 0.3, rtol=0.05)
