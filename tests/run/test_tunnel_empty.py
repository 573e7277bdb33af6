"""What the tunnel does without the model: taken out as vectors before squaring, or fitted to the outer flow."""

import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wakeledger.core.errors import InputError
from wakeledger.run.survey import load, reduce
from wakeledger.synthetic import EmptyTunnel, GaussianElements, GaussianLosses, RectangularDuct

CLOSE = 2e-3
DUCT = RectangularDuct((-0.96, 1.04), (-0.6, 0.68))
WINDOW = (-0.88, 0.88), (-0.36, 0.44)
ROWS = ("profile_drag", "induced_drag", "induced_drag_free_air", "total_drag", "lift", "rolling_moment")
TURNED = EmptyTunnel(
    upflow=0.20,
    sidewash=-0.08,
    swirl=0.10,
    axis=(0.1, 0.0),
    losses=GaussianLosses(np.array([-0.2]), np.array([0.1]), np.array([0.5]), np.array([0.10])),
)
#: A pair of vortices from the screens, without net circulation, in the middle of the wake.
SCREENS = GaussianElements(
    np.array([-0.3, 0.3]), np.array([0.1, -0.1]), np.array([0.15, -0.15]), np.array([0.10, 0.10])
)


@pytest.fixture(scope="module")
def tunnel():
    return SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("tunnel_kit.py"))))


@pytest.fixture
def survey(kit, tunnel, tmp_path):
    """Write a survey and that of the empty tunnel, load and reduce them."""

    def run(flow, boundary, *, empty=True, noise=0.0, name="survey", speed=1.0, window=WINDOW, change=None, **more):
        y, z = tunnel.points(*WINDOW)
        content = tunnel.description(kit, boundary, **more)
        if empty:
            at = tunnel.points(*window)
            alone = tunnel.columns(flow.empty_state(*at), *at, noise=noise, seed=2)
            if speed != 1.0:
                # The same tunnel at another speed: velocities as it, pressures as its square.
                total = tunnel.REFERENCE.total_pressure
                static = tunnel.REFERENCE.static_pressure
                lost = speed**2 * (alone["total_pressure"] - total)
                alone |= {each: speed * alone[each] for each in ("u", "v", "w")}
                alone["total_pressure"] = static + speed**2 * (total - static) + lost
            plain = kit.merged({key: value for key, value in content.items() if key != "compare"}, change or {})
            plain["reference"] = plain["reference"] | {"speed": f"{speed * tunnel.SPEED!r} m/s"}
            kit.write(tmp_path / name / "empty", alone, plain)
            content["empty_tunnel"] = {"survey": "empty/survey.toml"}
        data = tunnel.columns(flow.state(y, z), y, z, noise=noise, seed=1)
        return reduce(load(kit.write(tmp_path / name, data, content)))

    return run


def values(ledger):
    return {row.name: row.value for row in ledger.rows}


def energy(ledger):
    return next(each.value for each in ledger.estimates if each.method == "energy_area")


@pytest.mark.parametrize("speed", [1.0, 0.8])
def test_empty_tunnel_is_taken_out(tunnel, survey, speed):
    flow = tunnel.wing(DUCT, empty=TURNED)
    found = survey(flow, tunnel.table(DUCT), speed=speed)
    for row in ROWS:
        assert_allclose(values(found)[row], flow.truth.rows()[row], rtol=CLOSE)
    assert_allclose(energy(found), flow.truth.induced_drag, rtol=CLOSE)


def test_vectors_are_taken_out_and_not_what_they_square_to(tunnel, survey):
    flow = tunnel.wing(DUCT, empty=EmptyTunnel(vortices=SCREENS))
    boundary = tunnel.table(DUCT)
    out, left = survey(flow, boundary), survey(flow, boundary, empty=False, name="left")
    exact = flow.truth.induced_drag
    together, alone = (DUCT.induced_drag(each, density=tunnel.DENSITY) for each in (flow.elements + SCREENS, SCREENS))
    assert_allclose(values(out)["induced_drag"], exact, rtol=CLOSE)
    assert_allclose(values(left)["induced_drag"], together, rtol=CLOSE)
    # The drag of the empty tunnel's own vortices is not what they add: the cross term 2D₁₂ is most of it.
    cross = together - alone - exact
    assert abs(cross) > 3 * alone
    assert_allclose(values(left)["induced_drag"] - values(out)["induced_drag"], cross + alone, rtol=0.02)
    assert_allclose(energy(out), exact, rtol=CLOSE)


def test_without_an_empty_tunnel_upflow_and_swirl_are_those_of_the_outer_flow(tunnel, survey):
    flow = tunnel.wing(DUCT, empty=EmptyTunnel(upflow=0.20, sidewash=-0.08, swirl=0.15))
    found = survey(flow, tunnel.table(DUCT), empty=False)
    rows, exact = values(found), flow.truth.rows()
    for row in ("induced_drag", "induced_drag_free_air", "lift", "rolling_moment"):
        assert_allclose(rows[row], exact[row], rtol=CLOSE)
    # The swirl's own vorticity 2ω in the wake region would have been this much.
    assert_allclose(energy(found), exact["induced_drag"], rtol=2 * CLOSE)
    said = " ".join(found.notes)
    pitch, turn = np.degrees(0.20 / tunnel.SPEED), np.degrees(0.15 / tunnel.SPEED)
    assert "not surveyed empty" in said
    # Upflow where the wake is, and the rotation per metre.
    assert f"turns by {turn:+.3f} deg per metre" in said
    assert pitch == pytest.approx(0.286, abs=1e-3)
    still = survey(tunnel.wing(DUCT), tunnel.table(DUCT), empty=False, name="still")
    assert_allclose(rows["induced_drag"], values(still)["induced_drag"], rtol=1e-3)


def test_uncertainty_of_the_empty_tunnel_is_carried(tunnel, survey):
    flow = tunnel.wing(DUCT, empty=TURNED)
    noise = {
        "name": "crossflow noise",
        "applies_to": ["plane.v", "plane.w"],
        "effect": "random",
        "standard_uncertainty": "0.20 m/s",
    }
    zero = {
        "name": "total pressure zero",
        "applies_to": ["plane.total_pressure"],
        "effect": "systematic",
        "standard_uncertainty": "1 Pa",
        "shared_id": "transducer-4",
    }
    more = {"uncertainty": {"draws": 150, "seed": 4, "source": [noise, zero]}}
    with_it = survey(flow, tunnel.table(DUCT), noise=0.20, **more)
    lines = {(line.row, line.source): line.standard_uncertainty for line in with_it.budget}
    here, there = (lines["induced_drag", name] for name in ("crossflow noise", "empty tunnel: crossflow noise"))
    # As many points, as noisy, taken out of each other.
    assert_allclose(there, here, rtol=0.3)
    assert here > 0
    # One transducer in both surveys: its zero goes out.
    shared = lines["profile_drag", "total pressure zero"]
    assert shared < 0.02 * with_it.rows[0].value
    error = values(with_it)["induced_drag"] - flow.truth.induced_drag
    row = next(row for row in with_it.rows if row.name == "induced_drag")
    assert 0 < abs(error) < 3 * row.standard_uncertainty


def test_an_empty_tunnel_that_does_not_fit_is_refused(tunnel, survey):
    flow, boundary = tunnel.wing(DUCT, empty=TURNED), tunnel.table(DUCT)
    with pytest.raises(InputError, match="station"):
        survey(flow, boundary, change={"plane": {"station": "900 m"}}, name="station")
    with pytest.raises(InputError, match="covers 60%"):
        survey(flow, boundary, window=((-0.4, 0.6), (-0.36, 0.44)), name="window")
    with pytest.raises(InputError, match="same test section"):
        survey(flow, boundary, change={"boundary": {"y": ["-1.0 m", "1.0 m"]}}, name="walls")
