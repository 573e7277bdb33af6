"""Surveys between walls and in open jets from file to ledger, against exact wakes with all their images."""

import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wakeledger.core.errors import InputError
from wakeledger.run.survey import load, reduce
from wakeledger.synthetic import RectangularDuct, RoundDuct, TunnelWake, shed, straight_edge

#: What a survey made by images may be off, of each row.
CLOSE = 2e-3
DUCT = RectangularDuct((-0.96, 1.04), (-0.6, 0.68))
JET = RectangularDuct((-0.96, 1.04), (-0.6, 0.68), closed=False)
WINDOW = (-0.88, 0.88), (-0.36, 0.44)
ROWS = ("profile_drag", "induced_drag", "induced_drag_free_air", "total_drag", "lift", "rolling_moment")


@pytest.fixture(scope="module")
def tunnel():
    return SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("tunnel_kit.py"))))


@pytest.fixture
def survey(kit, tunnel, tmp_path):
    """Write the survey of a flow, load and reduce it."""

    def run(flow, boundary, window=WINDOW, *, noise=0.0, spacing=tunnel.SPACING, name="survey", **more):
        y, z = tunnel.points(*window, spacing)
        data = tunnel.columns(flow.state(y, z), y, z, noise=noise)
        return reduce(load(kit.write(tmp_path / name, data, tunnel.description(kit, boundary, **more))))

    return run


def values(ledger):
    return {row.name: row.value for row in ledger.rows}


def check(ledger, name):
    return next(each for each in ledger.checks if each.name == name)


def said(ledger):
    return " ".join(ledger.notes)


CASES = {
    "closed rectangle": (DUCT, {"kind": "closed_walls", "y": ["-0.96 m", "1.04 m"], "z": ["-0.60 m", "0.68 m"]}),
    "closed polygon": (
        DUCT,
        {
            "kind": "closed_walls",
            "section": "polygon",
            "vertices": [["-0.96 m", "-0.6 m"], ["1.04 m", "-0.6 m"], ["1.04 m", "0.68 m"], ["-0.96 m", "0.68 m"]],
        },
    ),
    "open jet": (JET, {"kind": "open_jet", "y": ["-0.96 m", "1.04 m"], "z": ["-0.60 m", "0.68 m"]}),
    "closed circle": (
        RoundDuct(2.4, (0.04, 0.0)),
        {"kind": "closed_walls", "section": "circle", "diameter": "2.4 m", "centre": ["40 mm", "0 m"]},
    ),
    "round jet": (RoundDuct(2.4, closed=False), {"kind": "open_jet", "section": "circle", "diameter": "2.4 m"}),
}


@pytest.mark.parametrize("name", CASES)
def test_rows_as_tested_and_in_free_air(tunnel, survey, name):
    section, boundary = CASES[name]
    flow = tunnel.wing(section)
    found, exact = survey(flow, boundary), flow.truth.rows()
    rows = values(found)
    for row in ROWS:
        assert_allclose(rows[row], exact[row], rtol=CLOSE)
    change = rows["induced_drag_free_air"] - rows["induced_drag"]
    assert_allclose(change, exact["induced_drag_free_air"] - exact["induced_drag"], rtol=0.01)
    assert (change > 0) == section.closed
    # The same surroundings in the cross-checks: energy in the window, line and vortices see the images too.
    for estimate in found.estimates:
        if estimate.row == "induced_drag":
            doubt = 0.02 if estimate.method == "vortex_sum" else 0.004
            assert abs(estimate.difference - estimate.expected_difference) < doubt * exact["induced_drag"]
    # δ = ΔC_D C/(S C_L²), in its note with the classical values beside it.
    q = 0.5 * tunnel.DENSITY * tunnel.SPEED**2
    factor = change * q * section.area / rows["lift"] ** 2
    assert f"boundary factor {factor:+.4f}" in said(found)


def test_an_octagon_lies_between_its_circles_and_is_what_its_harmonics_make_of_it(tunnel, survey):
    inner = 1.2
    outer = inner / np.cos(np.pi / 8)
    corners = outer * np.exp(1j * np.pi / 4 * (np.arange(8) + 0.5))
    boundary = {
        "kind": "closed_walls",
        "section": "polygon",
        "vertices": [[f"{c.real!r} m", f"{c.imag!r} m"] for c in corners.tolist()],
    }
    flow = tunnel.wing(None)
    # The walls' own stream function as harmonic polynomials that cancel the free wake's on them, and nothing else.
    along = np.sin(np.pi / 2 * np.linspace(-1, 1, 161)) / 2 + 0.5
    wall = np.concatenate([a + (b - a) * along for a, b in zip(corners, np.roll(corners, -1), strict=True)])
    powers = np.arange(1, 61)

    def harmonics(place):
        terms = (place[:, None] / outer) ** powers
        return np.concatenate([np.ones((place.size, 1)), terms.real, terms.imag], axis=1)

    free = flow.elements.stream_function(wall.real, wall.imag)
    fit = np.linalg.lstsq(harmonics(wall), -free, rcond=None)[0]
    own = harmonics(flow.elements.y + 1j * flow.elements.z) @ fit
    exact = flow.truth.induced_drag + 0.5 * tunnel.DENSITY * float(flow.elements.circulation @ own)
    within, about = (RoundDuct(2 * r).induced_drag(flow.elements, density=tunnel.DENSITY) for r in (inner, outer))
    assert within < exact < about
    # The survey is made in the octagon: the walls add ψ = Re F, that is v = ∂ψ/∂z = −Im F' and w = −∂ψ/∂y = −Re F'.
    y, z = tunnel.points(*WINDOW)
    place = (y + 1j * z) / outer
    count = powers.size
    slope = (powers * place[:, None] ** (powers - 1) / outer) @ (fit[1 : count + 1] - 1j * fit[count + 1 :])
    state = flow.state(y, z)
    v, w = state.v - slope.imag, state.w - slope.real
    data = tunnel.columns(state, y, z) | {"v": v, "w": w}
    data["u"] = np.sqrt(2 * (data["total_pressure"] - data["static_pressure"]) / tunnel.DENSITY - v**2 - w**2)
    data["static_pressure"] = data["static_pressure"] + 0.5 * tunnel.DENSITY * (state.v**2 + state.w**2 - v**2 - w**2)
    found = values(survey(_Given(data), boundary))
    assert_allclose(found["induced_drag"], exact, rtol=CLOSE)
    assert_allclose(found["induced_drag_free_air"], flow.truth.induced_drag, rtol=CLOSE)


class _Given:
    """A state that is there already."""

    def __init__(self, data):
        self.data = data

    def state(self, *_):
        return SimpleNamespace(**self.data)


def test_wake_blockage(tunnel, survey):
    flow = tunnel.wing(DUCT)
    boundary = CASES["closed rectangle"][1]
    found = survey(flow, boundary)
    blocked = flow.truth.wake_blockage / tunnel.SPEED
    by_row = {row.name: row for row in found.rows}
    for row in ("profile_drag", "total_drag", "lift"):
        assert_allclose(by_row[row].coefficient / by_row[row].coefficient_corrected, (1 + blocked) ** 2, rtol=1e-5)
    classical = flow.truth.profile_drag / (4 * 0.5 * tunnel.DENSITY * tunnel.SPEED**2 * DUCT.area)
    assert f"adds {blocked:.3%}" in said(found)
    assert f"{classical:.3%}" in said(found)
    # An open jet's stream gives way.
    jet = survey(tunnel.wing(JET), CASES["open jet"][1], name="jet")
    assert all(row.coefficient_corrected is None for row in jet.rows)


def test_given_solid_blockage_and_support_tare(tunnel, survey):
    flow, boundary = tunnel.wing(DUCT), CASES["closed rectangle"][1]
    noise = {
        "name": "total pressure noise",
        "applies_to": ["plane.total_pressure"],
        "effect": "random",
        "standard_uncertainty": "0.5 Pa",
    }
    more = {"uncertainty": {"draws": 100, "seed": 1, "source": [noise]}}
    plain = survey(flow, boundary, **more)
    given = {
        "solid_blockage": {"value": "0.6 %", "standard_uncertainty": "0.2 %"},
        "support_tare": {"value": "0.50 N", "standard_uncertainty": "0.04 N"},
    }
    found = survey(flow, boundary | given, name="given", **more)
    before, after = ({row.name: row for row in each.rows} for each in (plain, found))
    for row in ("profile_drag", "total_drag"):
        assert_allclose(before[row].value - after[row].value, 0.5, rtol=1e-9)
        assert_allclose(after[row].standard_uncertainty, np.hypot(before[row].standard_uncertainty, 0.04), rtol=0.15)
    assert_allclose(before["lift"].value, after["lift"].value, rtol=1e-12)
    blocked = flow.truth.wake_blockage / tunnel.SPEED
    assert_allclose(
        after["lift"].coefficient / after["lift"].coefficient_corrected, (1 + 0.006 + blocked) ** 2, rtol=1e-5
    )
    tare = {line.row: line.standard_uncertainty for line in found.budget if line.source == "support tare"}
    assert_allclose([tare["profile_drag"], tare["total_drag"]], 0.04, rtol=0.15)


def test_buoyancy_is_taken_off_the_balance(tunnel, survey):
    flow, boundary = tunnel.wing(DUCT), CASES["closed rectangle"][1]
    balance = {"name": "balance", "row": "total_drag", "value": "5.30 N", "standard_uncertainty": "0.03 N"}
    push = {"buoyancy": {"value": "0.12 N", "standard_uncertainty": "0.04 N"}}
    before = survey(flow, boundary, compare=[balance])
    after = survey(flow, boundary | push, compare=[balance], name="pushed")
    assert_allclose(values(after)["total_drag"], values(before)["total_drag"], rtol=1e-12)
    assert_allclose(after.comparisons[0].value, 5.30 - 0.12, rtol=1e-12)
    assert_allclose(after.comparisons[0].difference, before.comparisons[0].difference + 0.12, rtol=1e-9)
    assert_allclose(after.comparisons[0].standard_uncertainty, 0.05, rtol=1e-12)
    relative = {**balance, "coefficient": 0.0306, "coefficient_standard_uncertainty": 1e-4}
    del relative["value"], relative["standard_uncertainty"]
    found = survey(flow, boundary | push, compare=[relative], name="relative")
    q = 0.5 * tunnel.DENSITY * tunnel.SPEED**2
    assert_allclose(found.comparisons[0].value, 0.0306 * q * tunnel.AREA - 0.12, rtol=1e-12)


def test_a_window_that_meets_a_wall_is_not_one_that_ends_short_of_it(tunnel, survey):
    flow, boundary = tunnel.wing(DUCT, y=0.16), CASES["closed rectangle"][1]
    touching = survey(flow, boundary, ((-0.72, 1.04), (-0.36, 0.44)))
    for row in ROWS:
        assert_allclose(values(touching)[row], flow.truth.rows()[row], rtol=CLOSE)
    assert check(touching, "edge_vorticity").verdict == "pass"
    short = survey(flow, boundary, ((-0.72, 0.80), (-0.36, 0.44)), name="short")
    found = check(short, "edge_vorticity")
    assert found.verdict == "fail"
    assert "240 mm short of the wall" in found.message
    assert values(short)["lift"] < 0.98 * flow.truth.lift


def test_net_circulation_in_a_jet_is_told(tunnel, survey):
    # An open jet's edge carries no net circulation away: half a wing's wake has no answer there.
    cut = survey(tunnel.wing(JET), CASES["open jet"][1], ((-0.88, 0.28), (-0.36, 0.44)))
    found = check(cut, "net_circulation")
    assert found.verdict == "fail"
    assert found.value > 0.1
    assert "depends on where the jet ends" in found.message


def test_a_window_through_a_wall_is_refused(tunnel, survey):
    boundary = {"kind": "closed_walls", "y": ["-0.7 m", "0.7 m"], "z": ["-0.6 m", "0.68 m"]}
    with pytest.raises(InputError, match="through the walls"):
        survey(tunnel.wing(DUCT), boundary)


def test_upwash_of_the_walls_at_the_model(tunnel, survey):
    # A small uniform wing: the upwash at the model is half of that far behind it, δ (S/C) C_L U.
    elements = shed("elliptic", straight_edge(0.5, z=0.04), peak=1.5, core=0.06, n=40)
    duct = RectangularDuct((-1.0, 1.0), (-1.0, 1.0))
    flow = TunnelWake(tunnel.REFERENCE, elements, section=duct)
    boundary = {"kind": "closed_walls", "y": ["-1 m", "1 m"], "z": ["-1 m", "1 m"], "model_centre": ["0 m", "40 mm"]}
    window = (-0.60, 0.60), (-0.36, 0.44)
    found = survey(flow, boundary, window, model={"span": "0.5 m"})
    far = np.array(duct.velocity(elements, np.zeros(1), np.array([0.04])))
    far -= np.array(elements.velocity(np.zeros(1), np.array([0.04])))
    assert far[1, 0] > 0
    angle = np.degrees(0.5 * far[1, 0] / tunnel.SPEED)
    assert f"{angle:+.3f} deg" in said(found)
