"""Surveys of exact wakes through files, held against what the wakes are known to be."""

import csv
import json
import os
from pathlib import Path

import numpy as np
import pytest

from wakeledger.run.survey import load, reduce

ROOT = Path(__file__).resolve().parents[2]
SAMPLE = ROOT / "sample_surveys" / "wing_and_tail"


# -- the sample survey --------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def sample():
    return reduce(load(SAMPLE / "survey.toml"), draws=100)


def test_sample_rows_cover_the_truth(sample):
    truth = json.loads((SAMPLE / "truth.json").read_text())["rows"]
    assert set(truth) == {row.name for row in sample.rows}
    for row in sample.rows:
        assert abs(row.value - truth[row.name]["value"]) < row.expanded_uncertainty, row.name
        assert row.unit == truth[row.name]["unit"]
    # Not by being useless: the drags are known to a few per cent.
    for name, share in (("profile_drag", 0.02), ("induced_drag", 0.05), ("total_drag", 0.02), ("lift", 0.04)):
        row = sample.row(name)
        assert 0 < row.expanded_uncertainty < share * row.value, name


def test_sample_agrees_with_everything_beside_it(sample):
    verdicts = {(entry.row, entry.method): entry.verdict for entry in sample.estimates}
    assert verdicts.pop(("total_drag", "momentum_area")) == "not_independent"
    assert set(verdicts.values()) == {"agrees"}
    assert {entry.name: entry.verdict for entry in sample.comparisons} == {
        "balance drag": "agrees",
        "balance lift": "agrees",
    }
    assert {check.verdict for check in sample.checks} == {"pass"}
    assert not sample.failed


# -- without errors -----------------------------------------------------------------------------------------------

WAKES = {
    "wing": lambda kit: kit.wing(),
    "wing, parabolic": lambda kit: kit.wing(loading="parabolic"),
    "wing, more lift to port": lambda kit: kit.wing(loading=kit.asymmetric),
    "flat sheet": lambda kit: kit.wing(x=0.0),
    "wing and tail": lambda kit: kit.wing_and_tail(),
    "wing and tail, more lift to port": lambda kit: kit.wing_and_tail(loading=kit.asymmetric),
    "wing and tail, lifting tail": lambda kit: kit.wing_and_tail(tail_peak=0.5),
}


@pytest.mark.parametrize("name", list(WAKES))
def test_rows_without_noise(kit, tmp_path, name):
    wake = WAKES[name](kit)
    found, truth = kit.values(kit.ledger(tmp_path, kit.table(wake, *kit.axes()))), wake.truth.rows()
    # The targets; at half a core length between points 2e-9, 5e-6 and 2e-9 were measured.
    assert found["profile_drag"] == pytest.approx(truth["profile_drag"], rel=1e-3)
    assert found["induced_drag"] == pytest.approx(truth["induced_drag"], rel=1e-3)
    assert found["lift"] == pytest.approx(truth["lift"], rel=2e-4)
    assert found["residual_drag"] == pytest.approx(truth["residual_drag"], rel=1e-2)
    assert found["total_drag"] == pytest.approx(truth["total_drag"], rel=1e-3)
    assert found["side_force"] == pytest.approx(truth["side_force"], rel=0, abs=2e-4 * truth["lift"])
    assert found["rolling_moment"] == pytest.approx(truth["rolling_moment"], rel=1e-3, abs=1e-6 * truth["lift"])
    exact = truth["lift"] ** 2 / (np.pi * wake.reference.dynamic_pressure * kit.SPAN**2 * truth["induced_drag"])
    assert found["span_efficiency"] == pytest.approx(exact, rel=1e-3)


def test_starboard_wing_down_is_positive(kit, tmp_path):
    # More lift to port lifts the port wing. By the loading itself: M = rho U int y_port Gamma dy, positive.
    wake = kit.wing(loading=kit.asymmetric, x=0.0)
    eta = np.linspace(-1, 1, 20001)
    bound = 2.0 * kit.asymmetric(eta)
    moment = -kit.DENSITY * kit.SPEED * np.trapezoid(bound * eta, eta) * (kit.SPAN / 2) ** 2
    assert moment > 1
    found = kit.values(kit.ledger(tmp_path, kit.table(wake, *kit.axes())))
    # 120 elements stand for the smooth loading.
    assert found["rolling_moment"] == pytest.approx(moment, rel=2e-3)


def test_coefficients_are_on_the_reference_state(kit, tmp_path):
    found = kit.ledger(tmp_path, kit.table(kit.wing(loading=kit.asymmetric), *kit.axes()))
    force = 0.5 * kit.DENSITY * kit.SPEED**2 * kit.AREA
    for name in kit.ROWS:
        row = found.row(name)
        length = kit.SPAN if name == "rolling_moment" else 1.0
        assert row.coefficient == pytest.approx(row.value / (force * length), rel=1e-12, abs=1e-18)
    assert np.isnan(found.row("span_efficiency").coefficient)


def test_moment_centre(kit, tmp_path):
    # About (y0, z0): M - y0 L ... seen from behind, starboard down positive: M' = M + y0 L - z0 Y.
    wake = kit.wing(loading=kit.asymmetric)
    content = kit.description(model={"moment_centre": ["0.1 m", "0.02 m"]})
    found, truth = kit.values(kit.ledger(tmp_path, kit.table(wake, *kit.axes()), content)), wake.truth.rows()
    # Lift at starboard of the axis lifts the starboard wing; moving the axis to starboard moves the lift to its port.
    assert found["rolling_moment"] == pytest.approx(truth["rolling_moment"] + 0.1 * truth["lift"], rel=1e-6)


# -- near the model -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("share", [0.25, 0.35, 0.5])
@pytest.mark.parametrize("name", ["flat", "rolled up", "more lift to port"])
def test_station_near_the_model(kit, tmp_path, name, share):
    options = {"flat": {"x": 0.0}, "rolled up": {}, "more lift to port": {"loading": kit.asymmetric}}[name]
    wake = kit.wing(bound_distance=share * kit.SPAN, **options)
    content = kit.description(plane={"station": f"{share * kit.SPAN - 0.75 * kit.CHORD!r} m"})
    found = kit.ledger(tmp_path, kit.table(wake, *kit.axes()), content)
    result, truth = kit.values(found), wake.truth.rows()
    assert result["induced_drag"] == pytest.approx(truth["induced_drag"], rel=1e-3)
    assert result["lift"] == pytest.approx(truth["lift"], rel=2e-4)
    assert result["profile_drag"] == pytest.approx(truth["profile_drag"], rel=1e-3)
    # The remainder of the pair -phi sigma and (u* - U)^2 over the wake region: 1.7e-3 of the drag at a quarter span.
    assert result["total_drag"] == pytest.approx(truth["total_drag"], rel=3e-3)
    energy = next(entry for entry in found.estimates if entry.method == "energy_area")
    assert energy.difference > 0.03 * truth["induced_drag"]
    assert energy.difference == pytest.approx(energy.expected_difference, rel=0, abs=5e-3 * truth["induced_drag"])
    line = next(entry for entry in found.estimates if (entry.row, entry.method) == ("induced_drag", "wake_line"))
    # The wake line reads the same disturbance and is held to its own target, 5e-3.
    assert line.difference == pytest.approx(line.expected_difference, rel=0, abs=5e-3 * truth["induced_drag"])


def test_quarter_chord_is_where_the_survey_says(kit, tmp_path):
    wake = kit.wing(bound_distance=0.6)
    data = kit.table(wake, *kit.axes())
    default = kit.ledger(tmp_path / "a", data, kit.description(plane={"station": f"{0.6 - 0.75 * kit.CHORD!r} m"}))
    stated = kit.description(plane={"station": "0.4 m"}, model={"quarter_chord_x": "-0.2 m"})
    same = kit.ledger(tmp_path / "b", data, stated)
    for first, second in zip(default.estimates, same.estimates, strict=True):
        assert first.expected_difference == pytest.approx(second.expected_difference, rel=1e-9, abs=1e-12)
    assert any(entry.expected_difference > 0.01 for entry in same.estimates)


def test_mean_chord_is_area_over_span_where_it_is_not_given(kit, tmp_path):
    # An expected difference of zero so close behind the wing would be wrong by 4 % of the induced drag.
    data = kit.table(kit.wing(bound_distance=0.6), *kit.axes())
    place = {"station": f"{0.6 - 0.75 * kit.AREA / kit.SPAN!r} m"}
    given = kit.ledger(tmp_path / "a", data, kit.description(plane=place))
    absent = kit.ledger(tmp_path / "b", data, kit.description(plane=place, model={"mean_chord": None}))
    assert [entry.expected_difference for entry in absent.estimates] == pytest.approx(
        [entry.expected_difference for entry in given.estimates], rel=1e-9, abs=1e-12
    )
    assert any(entry.expected_difference > 0.01 for entry in absent.estimates)


def test_flow_angle_offset_leaves_the_vorticity_forms_alone(kit, tmp_path):
    wake = kit.wing(loading=kit.asymmetric)
    data = kit.table(wake, *kit.axes())
    plain = kit.values(kit.ledger(tmp_path / "plain", data))
    content = kit.description(plane={"axes": {"pitch_offset": "0.3 deg", "yaw_offset": "-0.2 deg"}})
    turned = kit.ledger(tmp_path / "turned", data, content)
    found = kit.values(turned)
    # A uniform crossflow has no vorticity. The turn also mixes u's deficit into v and w: 0.5 % of 10 % of U, as a
    # dipole of vorticity; 7e-4 of the lift and of the induced drag were measured.
    assert found["induced_drag"] == pytest.approx(plain["induced_drag"], rel=2e-3)
    assert found["lift"] == pytest.approx(plain["lift"], rel=2e-3)
    energy = next(entry for entry in turned.estimates if entry.method == "energy_area")
    assert energy.value == pytest.approx(plain["induced_drag"], rel=2e-3)
    outer = next(check for check in turned.checks if check.name == "outer_flow")
    # Turning the file's axes by +0.3 deg nose up takes upwash off: wind = R @ file.
    assert "-0.30 deg in pitch" in outer.message
    assert "-0.20 deg in yaw" in outer.message


def test_uniform_crossflow_leaves_them_exactly(kit, tmp_path):
    wake = kit.wing(loading=kit.asymmetric)
    data = kit.table(wake, *kit.axes())
    plain = kit.values(kit.ledger(tmp_path / "plain", data))
    shifted = {**data, "v": data["v"] + 0.15, "w": data["w"] + 0.25}
    found = kit.ledger(tmp_path / "shifted", shifted, kit.description(plane={"primary": "velocity"}))
    for name in ("induced_drag", "lift", "side_force", "rolling_moment"):
        assert kit.values(found)[name] == pytest.approx(plain[name], rel=1e-6, abs=1e-6 * plain["lift"]), name
    energy = next(entry for entry in found.estimates if entry.method == "energy_area")
    assert energy.value == pytest.approx(plain["induced_drag"], rel=1e-3)


# -- a real survey ------------------------------------------------------------------------------------------------

#: Chow, Zilliac & Bradshaw, AIAA J. 35(10), 1997; NASA TM 110418 (check_values 0.2, SEEN; circulation, centre and core
#: DERIVED there from the published points).
CHORD = 48.0
INCIDENCE = np.radians(10.0)


def reference_data():
    folder = Path(os.environ.get("WAKELEDGER_REFERENCE_DATA", ROOT.parent / "shared" / "reference")) / "wing_tip"
    if not folder.is_dir():
        pytest.skip("the reference data are not here; set WAKELEDGER_REFERENCE_DATA")
    return folder


def wing_tip(folder, x):
    """The plane's columns as published, joined point by point."""
    tables = []
    for name in ("velocity.csv", "pressure.csv"):
        with (folder / name).open() as file:
            rows = [row for row in csv.DictReader(file) if float(row["x_in"]) == x]
        tables.append({(row["y_in"], row["z_in"]): row for row in rows})
    joined = [tables[0][key] | tables[1][key] for key in tables[0] if key in tables[1]]
    return {name: np.array([float(row[name]) for row in joined]) for name in joined[0] if name != "x_in"}


def wing_tip_survey(kit, folder, station):
    """The file as published: inches, U and q divided out, left-handed axes."""
    coefficient = {"unit": "1", "normalised_by": "dynamic_pressure", "relative_to": "static"}
    columns = {
        "y": {"column": "y_in", "unit": "inch"},
        "z": {"column": "z_in", "unit": "inch"},
        **{name: {"column": f"{name}_over_U", "unit": "1", "normalised_by": "speed"} for name in "uvw"},
        "static_pressure": {"column": "Cp_static", **coefficient},
        "total_pressure": {"column": "Cp_total", **coefficient},
    }
    return kit.description(
        reference={"speed": "170 ft/s", "density": "1.2 kg/m^3", "static_pressure": "100 kPa"},
        model={"reference_area": f"{48 * 36} inch^2", "span": "72 inch", "mean_chord": "48 inch"},
        # y up, z towards the root: w is negative outboard. The wing is taken as a starboard half: tip to starboard.
        plane={
            "station": f"{station} inch",
            "primary": "total_pressure",
            "columns": columns,
            "axes": {"x": "+x", "y": "+z", "z": "-y"},
        },
        boundary={"kind": "free_air"},
    )


STATIONS = [(5.784, 0.340, (-0.0738, 0.6720)), (21.479, 0.339, (-0.0586, 0.6641))]


@pytest.fixture(scope="module", params=STATIONS)
def tip(request, kit, tmp_path_factory):
    x, circulation, centre = request.param
    folder = reference_data()
    data = wing_tip(folder, x)
    path = kit.write(tmp_path_factory.mktemp("tip"), data, wing_tip_survey(kit, folder, x + 0.25))
    return path, reduce(load(path)), circulation, centre


def test_wing_tip_reports_that_the_survey_cuts_its_wake(tip):
    _, ledger, _, _ = tip
    verdicts = {check.name: check.verdict for check in ledger.checks}
    assert verdicts["edge_vorticity"] in ("warn", "fail")
    assert verdicts["edge_total_pressure_loss"] in ("warn", "fail")
    assert verdicts["net_circulation"] == "fail"
    assert ledger.failed
    # Of the one-signed half of a wake no more than all can be unbalanced; the bound circulation's 0.332 of it leaves.
    net = next(check for check in ledger.checks if check.name == "net_circulation")
    assert 0.7 < net.value <= 1
    # The lines are 0.1 to 0.25 inch apart about the core and inches apart elsewhere.
    assert verdicts["core_resolution"] == "pass"


@pytest.mark.parametrize("tip", STATIONS[:1], indirect=True)
def test_wing_tip_exit_status(tip, tmp_path):
    from wakeledger.cli import exits, wakeledger

    path, *_ = tip
    assert exits.run(wakeledger, ["reduce", str(path), "--out", str(tmp_path / "out"), "--quiet"]) == 1
    assert (tmp_path / "out" / "ledger.nc").is_file()


def test_wing_tip_circulation(tip):
    # The line integral along the window's edge; the finite-difference vorticity of the uneven grid gives 15 % more.
    _, ledger, circulation, _ = tip
    plane = ledger.plane
    y, z, v, w = (plane[name].values for name in "yzvw")
    around = np.trapezoid(v[0], y) + np.trapezoid(w[:, -1], z) - np.trapezoid(v[-1], y) - np.trapezoid(w[:, 0], z)
    scale = 170 * 0.3048 * CHORD * 0.0254
    assert around / scale == pytest.approx(circulation, rel=0.01)
    vorticity = float(plane["axial_vorticity"].integrate(("y", "z")))
    assert vorticity / scale == pytest.approx(circulation, rel=0.015)


def test_wing_tip_vortex(tip):
    _, ledger, circulation, (up, outboard) = tip
    speed, chord = 170 * 0.3048, CHORD * 0.0254
    vortices = ledger.vortices
    strongest = int(np.argmax(np.abs(vortices["circulation"].values)))
    found = {name: float(vortices[name].values[strongest]) for name in vortices.data_vars}
    # The tip is to starboard and the lift up: counter-clockwise.
    # Listed is what the core holds, where the line integral on circles levels off: 0.232 of the survey's 0.340 U c
    # (read off the same files, 3 %); the rest is the sheet that still rolls up.
    assert found["circulation"] / (speed * chord) == pytest.approx(0.232, rel=0.03)
    assert found["circulation"] / (speed * chord) < circulation
    # In the published axes y' = y - 0.75 c sin a - 5.3588, z' = 39.7714 - z (inches); the project's y is the file's -z.
    y_published = found["z"] / 0.0254 - 0.75 * CHORD * np.sin(INCIDENCE) - 5.3588
    z_published = 39.7714 + found["y"] / 0.0254
    # Points stand 0.1 to 0.25 inch apart at the core: half of that is 0.003 c.
    assert y_published / CHORD == pytest.approx(up, abs=3e-3)
    assert z_published / CHORD == pytest.approx(outboard, abs=3e-3)
    # The published core radius is that of the largest swirl; the listed core length is that of exp(-(r/a)^2).
    assert found["core_radius"] / chord == pytest.approx(0.028, rel=0.10)
    assert found["core_radius"] == pytest.approx(1.1209 * found["core_length"], rel=1e-4)
    # 0.885 and 0.878 of U, 3 %.
    assert found["peak_swirl"] / speed == pytest.approx(0.88, rel=0.03)
    assert found["u"] / speed > 1.5
