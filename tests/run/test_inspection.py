"""What `inspect` says of surveys whose wake, noise, gaps and repeats are known."""

import math
import re
from pathlib import Path

import numpy as np
import pytest

from wakeledger.run import prepared
from wakeledger.run.inspection.advice import recommendations
from wakeledger.run.survey import inspect, load, reduce
from wakeledger.run.uncertainty import draws

NOISE = {"u": 0.1, "v": 0.1, "w": 0.1, "total_pressure": 1.0, "static_pressure": 1.0}


@pytest.fixture(scope="module")
def wing(kit):
    return kit.wing()


def noisy(data, seed=3, **sizes):
    generator = np.random.default_rng(seed)
    return data | {
        name: data[name] + size * generator.standard_normal(data[name].size) for name, size in (NOISE | sizes).items()
    }


def looked(kit, folder, data, **changes):
    return inspect(load(kit.write(folder, data, kit.description(**changes))))


def actions(seen):
    return [(one.action, one.side) for one in seen.recommendations]


def taken(data, rows):
    return {name: values[rows] for name, values in data.items()}


def test_a_good_survey_may_be_left(kit, wing, tmp_path):
    y, z = kit.axes()
    data = noisy(kit.table(wing, y, z))
    seen = looked(kit, tmp_path, data)
    assert actions(seen) == [("move_on", None)]
    assert not seen.failed and all(edge.quiet for edge in seen.edges)
    assert seen.repeats.places == 0 and seen.missing_places == ()
    assert [channel.name for channel in seen.channels] == ["u", "v", "w", "total_pressure", "static_pressure"]
    for channel in seen.channels:
        # 4000 quiet points: 5 % is more than three standard errors of the estimate.
        assert channel.noise == pytest.approx(NOISE[channel.name], rel=0.05)
        assert math.isnan(channel.declared_noise) and math.isnan(channel.repeatability)


def test_inspecting_makes_no_noise_bias_and_no_frozen_geometry(kit, wing, tmp_path, monkeypatch):
    for module, name in (
        (prepared, "crossflow_noises"),
        (prepared, "noise_bias"),
        (prepared, "_line"),
        (draws, "numerical_terms"),
        (draws, "run_montecarlo"),
    ):
        monkeypatch.setattr(module, name, None)
    looked(kit, tmp_path, kit.table(wing, *kit.axes()))


def test_checks_are_those_of_the_reduction(kit, wing, tmp_path):
    """Without noise nothing is subtracted, so that the checks agree to the last digit."""
    path = kit.write(tmp_path, kit.table(wing, *kit.axes()), kit.description())
    ledger, seen = reduce(load(path)), inspect(load(path))
    reduced = {check.name: check for check in ledger.checks if check.name not in ("noise_bias", "declared_noise")}
    assert {check.name for check in seen.checks} == set(reduced)
    for check in seen.checks:
        assert check.verdict == reduced[check.name].verdict
        assert check.value == pytest.approx(reduced[check.name].value, rel=0.02, abs=1e-5)


CUTS = {
    "upper": {"z": (-0.7, 0.1)},
    "lower": {"z": (-0.15, 0.6)},
    "port": {"y": (-0.35, 1.1)},
    "starboard": {"y": (-1.1, 0.5)},
}


@pytest.mark.parametrize("side", CUTS)
def test_a_cut_wake_is_widened_on_its_side_by_enough(kit, wing, tmp_path, side):
    """The survey widened as recommended has a quiet edge, and was not widened over more than the whole window."""
    window = {"y": (-1.1, 1.1), "z": (-0.7, 0.6)} | CUTS[side]
    seen = looked(kit, tmp_path / "cut", noisy(kit.table(wing, *kit.axes(**window))))
    [edge] = [edge for edge in seen.edges if not edge.quiet]
    assert edge.side == side
    advice = next(one for one in seen.recommendations if one.action in ("widen", "continue"))
    assert advice.side == side and advice.distance == edge.missing_reach
    # Rows come from below: only upwards is the way that the traverse runs.
    assert advice.action == ("continue" if side == "upper" else "widen")
    line = "row" if side in ("upper", "lower") else "column"
    assert f"touches the {side} edge" in edge.message and f"in the last {line}" in edge.message
    assert f"{1e3 * advice.distance:.0f} mm ({round(advice.distance / kit.SPACING)} {line}s)" in advice.message
    assert not any("lies along the window's edge" in one.message for one in seen.recommendations)

    axis, end = ("y", side == "starboard") if line == "column" else ("z", side == "upper")
    low, high = window[axis]
    window[axis] = (low, high + advice.distance) if end else (low - advice.distance, high)
    wider = looked(kit, tmp_path / "wider", noisy(kit.table(wing, *kit.axes(**window)), seed=4))
    assert all(edge.quiet for edge in wider.edges)
    assert advice.distance < 0.8


def test_shares_of_the_last_line_are_those_of_the_field(kit, wing, tmp_path):
    """The share of the loss in the last row, against the recording itself: the wake is all that there is of loss."""
    y, z = kit.axes(z=(-0.7, 0.1))
    data = kit.table(wing, y, z)
    seen = looked(kit, tmp_path, data)
    loss = kit.PRESSURE + 0.5 * kit.DENSITY * kit.SPEED**2 - data["total_pressure"].reshape(z.size, y.size)
    upper = next(edge for edge in seen.edges if edge.side == "upper")
    # What lies outside the wake region, and the zero of the outer flow, are a percent of the loss.
    assert upper.loss_share == pytest.approx(loss[-1].sum() / loss.sum(), rel=0.03)


def test_a_patch_of_noise_at_the_edge_widens_nothing(kit, wing, tmp_path):
    """A burst of crossflow noise in a corner joins the wake region there; it holds little and stands apart."""
    y, z = kit.axes()
    data = noisy(kit.table(wing, y, z))
    corner = np.hypot(data["y"] - 1.0, data["z"] - 0.5) < 0.12
    data["v"][corner] += 0.5 * np.random.default_rng(7).standard_normal(np.count_nonzero(corner))
    seen = looked(kit, tmp_path, data)
    assert all(edge.quiet for edge in seen.edges)
    assert {check.name for check in seen.checks if check.verdict in ("warn", "fail")} >= {"edge_vorticity"}
    assert "rather noise than wake" in seen.recommendations[0].message


def test_an_unfinished_row_is_continued(kit, wing, tmp_path):
    y, z = kit.axes()
    data = taken(kit.table(wing, y, z), slice(0, y.size * (z.size - 1) + 20))
    seen = looked(kit, tmp_path, data)
    first = seen.recommendations[0]
    assert (first.action, first.side) == ("continue", "upper")
    assert f"z = {1e3 * z[-1]:.4g} mm" in first.message and f"20 of the usual {y.size}" in first.message


def test_flow_angles_are_the_extreme_ones_where_they_are(kit, wing, tmp_path):
    data = kit.table(wing, *kit.axes())
    pitch, yaw = looked(kit, tmp_path, data).angles
    u, v, w = (data[name] for name in "uvw")
    for found, angle in ((pitch, np.arctan2(w, u)), (yaw, np.arcsin(v / np.sqrt(u**2 + v**2 + w**2)))):
        for value, at, k in (
            (found.minimum, found.minimum_at, np.argmin(angle)),
            (found.maximum, found.maximum_at, np.argmax(angle)),
        ):
            # u follows from the measured pressures, which are the recording's own.
            assert value == pytest.approx(angle[k], rel=1e-6)
            assert at == pytest.approx((data["y"][k], data["z"][k]), abs=1e-12)
    # Behind a lifting wing: downwash inside, upwash beyond the tips, and outflow to port below, to starboard above.
    assert pitch.minimum < 0 < pitch.maximum and abs(pitch.minimum_at[0]) < abs(pitch.maximum_at[0])


def test_lost_places_are_on_the_map_and_in_the_list(kit, wing, tmp_path):
    y, z = kit.axes()
    data = kit.table(wing, y, z)
    nodes = [(3, 5), (28, 44), (28, 45)]
    for iz, iy in nodes:
        data["u"][iz * y.size + iy] = np.nan
    # One more place was never visited.
    gone = 50 * y.size + 6
    data = {name: np.delete(values, gone) for name, values in data.items()}
    seen = looked(kit, tmp_path, data)
    wake, outside = nodes[1:], [nodes[0], (50, 6)]
    assert seen.missing_in_wake == 2
    assert list(seen.missing_places[:2]) == [pytest.approx((y[iy], z[iz])) for iz, iy in wake]
    rows = seen.map.rows[::-1]
    assert {(k, i) for k, row in enumerate(rows) for i, symbol in enumerate(row) if symbol == "o"} == {*wake, *outside}
    assert rows[28][40] == "#" and rows[0][0] == "."
    assert seen.flags["missing"] == 4


def test_lost_places_in_the_wake_are_repeated(kit, wing, tmp_path):
    y, z = kit.axes()
    data = kit.table(wing, y, z)
    generator = np.random.default_rng(8)
    lost = generator.random(data["u"].size) < 0.06
    # The vortices are kept, so that the share alone is judged.
    lost &= np.hypot(np.abs(data["y"]) - 0.48, data["z"]) > 0.15
    data["u"][lost] = np.nan
    advice = next(one for one in looked(kit, tmp_path, data).recommendations if one.action == "repeat")
    assert advice.message.startswith(f"Repeat the {len(advice.places)} places in the wake that were lost: y = ")
    assert f"and {len(advice.places) - 5} more" in advice.message
    kept = {(round(a, 9), round(b, 9)) for a, b in zip(data["y"][lost], data["z"][lost], strict=True)}
    assert {(round(a, 9), round(b, 9)) for a, b in advice.places} <= kept


def test_coarse_cores_are_refined_where_they_are(kit, wing, tmp_path):
    """Cores of 5 cm surveyed every 6 cm."""
    seen = looked(kit, tmp_path, kit.table(wing, *kit.axes(spacing=0.06)))
    fine = kit.axes(spacing=0.01)
    v, w = (kit.table(wing, *fine)[name].reshape(fine[1].size, fine[0].size) for name in "vw")
    vorticity = np.abs(np.gradient(w, 0.01, axis=1) - np.gradient(v, 0.01, axis=0))
    centre = abs(fine[0][np.unravel_index(np.argmax(vorticity), vorticity.shape)[1]])
    advice = next(one for one in seen.recommendations if one.action == "refine")
    [(y, _)] = advice.places
    assert abs(y) == pytest.approx(centre, abs=0.03)
    assert advice.spacing == pytest.approx(kit.CORE / 2, rel=0.4)
    assert f"points {1e3 * advice.spacing:.0f} mm apart" in advice.message


def repeated(kit, wing, extra, seed=11, **drift):
    """A survey of which some points were taken again at its end, with noise of their own and perhaps a drift."""
    data = kit.table(wing, *kit.axes())
    again = taken(data, extra)
    for name, size in drift.items():
        again[name] = again[name] + size * np.random.default_rng(seed).standard_normal(extra.size)
    return noisy({name: np.concatenate([data[name], again[name]]) for name in data}, seed=seed)


def test_repeats_scatter_as_the_noise(kit, wing, tmp_path):
    extra = np.arange(10, 4000, 40)
    seen = looked(kit, tmp_path, repeated(kit, wing, extra))
    assert (seen.repeats.places, seen.repeats.points, seen.repeats.revisited) == (100, 200, 100)
    assert seen.repeats.degrees_of_freedom == 100
    for channel in seen.channels:
        # 100 degrees of freedom fix a standard deviation to 7 %.
        assert channel.repeatability == pytest.approx(NOISE[channel.name], rel=0.25)
    assert sum(row.count("=") for row in seen.map.rows) == 100
    assert seen.recommendations[-1].action == "move_on"


def test_points_repeated_at_once_are_no_visits(kit, wing, tmp_path):
    data = noisy(kit.table(wing, *kit.axes()))
    data = {name: np.insert(values, 101, values[100]) for name, values in data.items()}
    repeats = looked(kit, tmp_path, data).repeats
    assert (repeats.places, repeats.points, repeats.revisited) == (1, 2, 0)


def test_repeats_that_drift_are_said(kit, wing, tmp_path):
    seen = looked(kit, tmp_path, repeated(kit, wing, np.arange(10, 4000, 80), total_pressure=3.0))
    [advice] = [one for one in seen.recommendations if "Repeated points" in one.message]
    assert advice.action == "check" and "of total pressure differ" in advice.message
    # The difference of a pair holds the noise twice and the drift once: √(1 + 3²/2) = 2.3 times the noise.
    found = next(channel for channel in seen.channels if channel.name == "total_pressure")
    assert found.repeatability / found.noise == pytest.approx(math.sqrt(1 + 9 / 2), rel=0.3)


def sourced(kit):
    """The noise as sources of each channel, and two that are no point-to-point noise."""
    units = {"total_pressure": "Pa", "static_pressure": "Pa"}
    sources = [
        kit.source(f"noise of {name}", f"plane.{name}", f"{size} {units.get(name, 'm/s')}", "random")
        for name, size in NOISE.items()
    ]
    sources += [kit.source("zero of w", "plane.w", "3 m/s"), kit.source("rows", "plane.u", "3 m/s", "per_row")]
    return {"source": sources}


def test_declared_noise_stands_beside_what_the_data_show(kit, wing, tmp_path):
    seen = looked(kit, tmp_path, noisy(kit.table(wing, *kit.axes())), uncertainty=sourced(kit))
    for channel in seen.channels:
        assert channel.declared_noise == pytest.approx(NOISE[channel.name], rel=1e-9)
    assert actions(seen) == [("move_on", None)]


def test_noise_beyond_the_declared_one_is_said(kit, wing, tmp_path):
    seen = looked(kit, tmp_path, noisy(kit.table(wing, *kit.axes()), w=0.25), uncertainty=sourced(kit))
    [advice] = [one for one in seen.recommendations if "declares" in one.message]
    assert advice.action == "check" and re.search(r"noise of w is up to 2\.[3-7] times", advice.message)
    assert seen.recommendations[-1].action == "move_on"


@pytest.mark.parametrize("kind", ["uneven", "scattered", "polar"])
def test_other_arrangements_are_looked_at_too(kit, wing, tmp_path, kind):
    if kind == "uneven":
        y, z = kit.axes()
        data = kit.table(wing, 1.1 * np.sign(y) * np.abs(y / 1.1) ** 0.9, z)
    elif kind == "scattered":
        # Points at random on no lines, but no two close together: else noise raises patches out of the gaps.
        generator = np.random.default_rng(2)
        yy, zz = np.meshgrid(*kit.axes())
        data = kit.at(wing, *(x.ravel() + generator.uniform(-0.008, 0.008, x.size) for x in (yy, zz)))
    else:
        radius, angle = np.meshgrid(np.arange(0.01, 1.3, 0.025), np.linspace(0, 2 * np.pi, 120, endpoint=False))
        data = kit.at(wing, (radius * np.cos(angle)).ravel(), (radius * np.sin(angle)).ravel())
    seen = looked(kit, tmp_path, noisy(data))
    for channel in seen.channels:
        # Some tenth of the outer flow's curvature is left in the polar survey's widest gaps.
        assert channel.noise == pytest.approx(NOISE[channel.name], rel=0.15)
    assert len(seen.map.rows) == seen.shape[1] and {len(row) for row in seen.map.rows} == {seen.shape[0]}
    assert sum(row.count("#") for row in seen.map.rows) > 0.05 * seen.shape[0] * seen.shape[1]
    assert not any(edge.side in ("upper", "lower") and not edge.quiet for edge in seen.edges)


def test_points_outside_the_probe_range_are_named():
    [advice] = recommendations((), out_of_range=[(0.1, -0.02), (0.2, 0.0)])
    assert advice.action == "repeat" and advice.places == ((0.1, -0.02), (0.2, 0.0))
    assert advice.message.startswith("2 points outside the probe's calibrated range, the first at y = 100, z = -20 mm")


@pytest.fixture
def section(tmp_path):
    """The sample survey of a section in a folder of its own, with only the lines that a test keeps."""
    sample = Path(__file__).resolve().parents[2] / "sample_surveys" / "wing_section"

    def make(kept=lambda y: True):
        folder = tmp_path / f"section-{len(list(tmp_path.iterdir()))}"
        folder.mkdir()
        text = (sample / "survey.toml").read_text(encoding="utf-8")
        (folder / "survey.toml").write_text(text, encoding="utf-8")
        lines = (sample / "traverse.csv").read_text(encoding="utf-8").splitlines()
        head = next(k for k, line in enumerate(lines) if re.match(r"^-?[0-9]", line))
        chosen = [line for line in lines[head:] if kept(float(re.match(r"^-?[0-9.]+", line)[0]))]
        (folder / "traverse.csv").write_text("\n".join([*lines[:head], *chosen]) + "\n", encoding="utf-8")
        return inspect(load(folder / "survey.toml"))

    return make


def test_a_section_is_drawn_as_a_line(section):
    seen = section()
    [row] = seen.map.rows
    assert len(row) == seen.shape[0] and row.count("o") == 2 and row.count("=") == 1
    assert re.fullmatch(r"\.+[#o=]+[.o]+", row)
    # One of the two lost places lies in the wake, one of the places was visited again.
    assert (len(seen.missing_places), seen.missing_in_wake) == (2, 1)
    assert (seen.repeats.places, seen.repeats.points, seen.repeats.revisited) == (1, 2, 1)
    assert seen.angles == () and all(edge.quiet for edge in seen.edges)
    assert math.isnan(seen.edges[0].vorticity)
    assert [(one.action, one.places) for one in seen.recommendations] == [("repeat", seen.missing_places[:1])]


def test_a_cut_section_is_traversed_further(section):
    """Without what lies beyond y = 30 mm, 25 mm before the wake's end; then widened as recommended."""
    cut = section(lambda y: y < 30)
    [edge] = [edge for edge in cut.edges if not edge.quiet]
    assert edge.side == "starboard" and "in the last place" in edge.message
    advice = cut.recommendations[0]
    assert advice.action == "widen" and f"{1e3 * advice.distance:.0f} mm" in advice.message
    wider = section(lambda y: y < 30 + 1e3 * advice.distance + 0.5)
    assert all(edge.quiet for edge in wider.edges)
    assert advice.distance < 0.1


def test_document_holds_everything(kit, wing, tmp_path):
    import json

    y, z = kit.axes(z=(-0.7, 0.1))
    data = noisy(kit.table(wing, y, z))
    data["u"][7] = np.nan
    seen = looked(kit, tmp_path, data)
    document = seen.to_dict()
    assert json.loads(json.dumps(document, allow_nan=False)) == document
    assert document["format"] == 2
    assert document["map"]["legend"]["o"] == "missing" and document["map"]["rows"][0].startswith("..")
    assert document["missing_places"] == [[pytest.approx(y[7]), pytest.approx(z[0])]]
    assert [edge["quiet"] for edge in document["edges"]] == [True, True, True, False]
    assert document["recommendations"][0]["action"] == "continue"
    assert document["angles"][0]["minimum_at"] == list(seen.angles[0].minimum_at)
    assert document["repeats"]["degrees_of_freedom"] == 0
