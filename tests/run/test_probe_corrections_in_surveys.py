"""Walls, misalignment, and rows to and fro through the survey file: what was put in comes out, and is said."""

import runpy
from dataclasses import replace
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

from wakeledger.core.errors import InputError
from wakeledger.intake.probe.backlash import estimate_backlash
from wakeledger.ledger.archive import write_archive
from wakeledger.physics.methods.energy_area import crossflow_energy
from wakeledger.run.config import parse_survey
from wakeledger.run.survey import inspect, load, prepare, reduce
from wakeledger.run.traverse import outer_alignment
from wakeledger.synthetic.probes import TraverseConditions, record_traverse, sphere_probe

DEGREE = np.pi / 180
COARSE = 0.05
TIP = 6e-3
FLOOR = -0.704
#: The floor is no outer flow.
WAKE = [[["-1.2 m", "-0.71 m"], ["1.2 m", "-0.67 m"]]]


@pytest.fixture(scope="module")
def raw():
    return SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("traverse_kit.py"))))


@pytest.fixture(scope="module")
def wake(kit):
    return kit.wing(core=0.1)


@pytest.fixture(scope="module")
def probe(raw, tmp_path_factory):
    """A sphere probe and its stored calibration."""
    head = sphere_probe(5)
    return head, raw.stored_probe(tmp_path_factory.mktemp("probe"), head)


def only(notes, words):
    """The one sentence that holds the words."""
    found = [text for text in notes if words in text]
    assert len(found) == 1, (words, notes)
    return found[0]


def number(text, before, after):
    return float(text.split(before)[1].split(after)[0])


def state_error(prepared, wake, name="w"):
    """Largest error of a component of the velocity at the points, m/s."""
    chain = prepared.chain
    state = chain.state(prepared.nominal.reference)
    truth = wake.state(chain.points.y, chain.points.z)
    return np.nanmax(np.abs(getattr(state, name) - getattr(truth, name)))


# -- walls ------------------------------------------------------------------------------------------------------------


def missing_speed(distance, diameter=TIP):
    """dU/U of a pitot near a wall (MacMillan, ARC R&M 3028, 1956; from memory)."""
    ratio = distance / diameter
    return np.where(ratio < 2, 0.015 * np.exp(-3.5 * (ratio - 0.5)), 0.0)


def near_the_floor(wake, static_of):
    """Edits the columns: holes as read where the speed is too low by what the wall takes; gauge against p∞."""

    def table(data):
        static = static_of(data)
        factor = (1 + missing_speed(data["z"] - FLOOR)) ** -2
        return {
            name: static + (array - static) * factor if name[0] == "p" and name[1:].isdigit() else array
            for name, array in data.items()
        }

    return table


@pytest.fixture(scope="module")
def floor(raw, kit, wake, probe, tmp_path_factory):
    """Surveys over a floor that takes speed, by what the file says of it."""

    def static_of(data):
        return np.asarray(wake.state(data["y"], data["z"]).static_pressure) - wake.reference.static_pressure

    def written(name, walls, **more):
        own = {"tip_diameter": f"{TIP} m", "displacement": 0, **({} if walls is None else {"walls": walls}), **more}
        folder = tmp_path_factory.mktemp(name)
        at, table, how = raw.positions(spacing=COARSE), near_the_floor(wake, static_of), TraverseConditions(noise=0.2)
        path = raw.traverse(folder, wake, *probe, how=how, at=at, table=table, probe=own)
        region = kit.toml({"wake": {"grow": "50 mm", "include": WAKE}})
        path.write_text(path.read_text(encoding="utf-8") + region, encoding="utf-8")
        return path

    return written


def test_the_speed_that_a_wall_takes_is_given_back(floor, wake):
    left, right = (prepare(load(floor(name, walls))) for name, walls in (("a", None), ("b", {"z": f"{FLOOR} m"})))
    lost = 40.0 * missing_speed(0.004)
    assert lost > 0.3
    # Without the correction the row at the floor is too slow by what the wall took. 0.2 Pa of noise are 0.005 m/s.
    assert state_error(left, wake, "u") == pytest.approx(lost, rel=0.07)
    assert state_error(right, wake, "u") < 0.1 * lost
    assert "nearness of walls (none are given)" in only(left.notes, "nearness of walls")
    said = only(right.notes, "nearness of walls")
    assert "45 of 1215 points" in said and "the nearest at 4 mm" in said
    worth = number(said, "taken out: ", " counts")
    scale = right.nominal.reference.dynamic_pressure * right.chain.settings.reference_area / 1e4
    # ρ U ΔU over the whole row, which lies at the window's edge.
    grid = right.nominal.flow.grid
    row = grid.integrate(np.where(np.arange(grid.nz)[:, None] == 0, 1.2 * 40.0 * lost, np.zeros(grid.shape))) / scale
    assert worth == pytest.approx(-row, rel=0.05)
    assert number(said, "+- ", " counts") == pytest.approx(row / 2, rel=0.05)
    assert right.nominal.values["total_drag"] - left.nominal.values["total_drag"] == pytest.approx(
        -row * scale, rel=0.1
    )


def test_the_doubt_of_a_wall_correction_is_half_of_it_and_a_source_of_its_own(floor):
    prepared = prepare(load(floor("c", {"z": [f"{FLOOR} m"]})))
    source = next(one for one in prepared.sources if one.name == "nearness of walls (correction)")
    (name,) = source.applies_to
    reference = prepared.nominal.reference
    more = prepared.chain.state(reference, {name: 1.0}).u - prepared.chain.state(reference).u
    row = prepared.chain.points.z < -0.69
    assert more[row] == pytest.approx(0.5 * 40.0 * missing_speed(0.004), rel=0.05)
    assert np.abs(more[~row]).max() < 1e-9


def test_walls_on_either_side_and_far_away(floor, wake):
    both = prepare(load(floor("d", {"z": [f"{FLOOR} m", "0.75 m"], "y": ["-1.2 m", "1.3 m"]})))
    assert state_error(both, wake, "u") < 0.05
    far = prepare(load(floor("e", {"z": "-0.8 m"})))
    assert "there is nothing to correct" in only(far.notes, "nearness of walls")


@pytest.mark.parametrize(
    ("walls", "more", "words"),
    [
        ({"z": "0.2 m"}, {}, ("[probe] walls.z", "both sides of the wall at z = 200 mm")),
        ({"z": "-0.702 m"}, {}, ("[probe] walls", "less than half its tip_diameter")),
        ({"z": f"{FLOOR} m"}, {"tip_diameter": None, "displacement": None}, ("[probe] walls", "tip_diameter")),
        ({}, {}, ("[probe] walls", "no wall is given")),
        ({"z": 0.2}, {}, ("[probe] walls.z", "0.2")),
    ],
)
def test_walls_that_cannot_be_are_one_line(floor, walls, more, words):
    path = floor("refused", walls)
    text = path.read_text(encoding="utf-8")
    if more:
        lines = [line for line in text.splitlines() if not line.startswith(tuple(more))]
        path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    with pytest.raises(InputError) as caught:
        prepare(load(path))
    message = str(caught.value)
    assert "\n" not in message
    for word in words:
        assert word in message


# -- misalignment -----------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def rolled(raw, kit, wake, probe):
    """Writes a survey of which some rows were measured again at a second roll."""

    def written(folder, *, rolls=(0.0, 180.0), rows=slice(8, 20), own=None, noise=0.2, **conditions):
        at = raw.positions(spacing=COARSE)
        again = np.isin(at.row, np.unique(at.row)[rows])
        second = type(at)(at.y[again], at.z[again], at.row[again])
        parts = []
        for k, (where, roll) in enumerate(zip((at, second), rolls, strict=True)):
            how = TraverseConditions(noise=noise, roll=roll * DEGREE, **conditions)
            read = record_traverse(wake, where, probe[0], generator=np.random.default_rng(7 + k), conditions=how).values
            number = where.row + 1000.0 * k
            placed = {"y": where.y, "z": where.z, "row": number, "roll": np.full(where.y.size, roll)}
            parts.append({**placed, **read, "time": read["time"] + 1e4 * k})
        data = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
        columns = raw.columns(read) | {"roll": {"column": "roll", "unit": "deg"}}
        mounting = {name: f"{float(conditions.get(name, 0.0) / DEGREE)!r} deg" for name in ("pitch", "yaw")}
        own = {"misalignment": "roll_pair"} if own is None else own
        content = {
            "plane": {"primary": "hole_pressures", "columns": columns},
            "probe": {"calibration": str(probe[1]), **mounting, **own},
        }
        return kit.write(folder, data, kit.merged(kit.description(), content))

    return written


@pytest.mark.parametrize(
    ("head", "mounting", "rolls"),
    [
        ((0.5, 0.0), (0.0, 0.0), (0.0, 180.0)),
        ((0.0, 0.5), (0.0, 0.0), (0.0, 180.0)),
        ((-0.4, 0.3), (3.0, -4.0), (180.0, 0.0)),
        ((0.4, -0.3), (0.0, 0.0), (0.0, 90.0)),
    ],
)
def test_a_roll_pair_tells_the_turn_of_the_head(rolled, wake, tmp_path, head, mounting, rolls):
    how = dict(zip(("head_pitch", "head_yaw", "pitch", "yaw"), np.array([*head, *mounting]) * DEGREE, strict=True))
    prepared = prepare(load(rolled(tmp_path, rolls=rolls, **how)))
    said = only(prepared.notes, "turned against its shaft")
    assert number(said, "shaft by ", " deg in pitch") == pytest.approx(head[0], abs=0.003)
    assert number(said, "and ", " deg in yaw") == pytest.approx(head[1], abs=0.003)
    assert "places show that were measured at rolls of" in said
    # 0.2 Pa of 960 Pa turn a single reading by up to 0.01 deg: 0.03 m/s at three standard deviations; 0.5 deg are 0.35.
    assert state_error(prepared, wake, "w") < 0.05 and state_error(prepared, wake, "v") < 0.05
    assert np.abs(prepared.nominal.crossflow_offset).max() < 0.01


def test_what_a_misalignment_is_worth_is_said_where_it_shows(rolled, wake, kit, tmp_path):
    prepared = prepare(load(rolled(tmp_path, head_pitch=0.5 * DEGREE)))
    said = only(prepared.notes, "turned against its shaft")
    assert "the vorticity form is blind to it" in said
    flow, reference = prepared.nominal.flow, prepared.nominal.reference
    # The pair's own rows hold half of either turn: they cancel there, and the others are turned by t.
    turned = np.sin(0.5 * DEGREE) * flow.u
    turned[np.isin(np.arange(flow.grid.nz), np.arange(8, 20))] = 0.0
    right, wrong = (
        crossflow_energy(flow.v, flow.w + change, flow.grid, density=reference.density) for change in (0.0, turned)
    )
    counts = 1e4 * (right - wrong) / (reference.dynamic_pressure * kit.AREA)
    assert counts > 5 and number(said, "would see ", " counts") == pytest.approx(counts, rel=0.01)


def test_the_doubt_of_a_misalignment_turns_the_flow_by_it(rolled, tmp_path):
    prepared = prepare(load(rolled(tmp_path, head_pitch=0.5 * DEGREE, noise=2.0)))
    source = next(one for one in prepared.sources if one.name == "misalignment of the head (correction)")
    assert set(source.applies_to) == {"correction.misalignment.pitch", "correction.misalignment.yaw"}
    chain, reference = prepared.chain, prepared.nominal.reference
    known, _ = chain.traverse.tubes[0].turn.standard_uncertainty
    text = only(prepared.notes, "against its shaft")
    assert number(text, "pitch (+- ", ")") == pytest.approx(known / DEGREE, rel=0.05)
    plain = chain.state(reference)
    more = chain.state(reference, {"correction.misalignment.pitch": 1.0})
    mine = chain.points.channels["roll"].values < 1.0
    # Nose up more than was thought: the reading was of a higher upwash, and less of it is left; rolled over, more is.
    assert known > 1e-5
    assert (more.w - plain.w)[mine] == pytest.approx(-known * plain.u[mine], rel=0.06)
    assert (more.w - plain.w)[~mine] == pytest.approx(known * plain.u[~mine], rel=0.06)
    side = chain.state(reference, {"correction.misalignment.yaw": 1.0})
    assert np.all((side.v - plain.v)[mine] * (side.v - plain.v)[mine] > 0)
    assert np.sign(np.median((side.v - plain.v)[mine])) == -np.sign(np.median((side.v - plain.v)[~mine])) == 1.0


def test_a_rolled_survey_is_reduced_again_from_its_archive(rolled, tmp_path):
    ledger = reduce(load(rolled(tmp_path, head_yaw=0.4 * DEGREE)), draws=100)
    write_archive(ledger, tmp_path / "ledger.nc")
    again = reduce(load(tmp_path / "ledger.nc"), draws=100)
    assert [row.value for row in again.rows] == [row.value for row in ledger.rows]
    assert again.notes == ledger.notes
    assert "misalignment of the head (correction)" in {line.source for line in ledger.budget}


def test_rows_at_another_roll_are_no_lag_and_no_drift(rolled, tmp_path):
    prepared = prepare(load(rolled(tmp_path, head_pitch=0.5 * DEGREE)))
    assert not any("to and fro" in text for text in prepared.notes)
    assert "No place was visited again" in only(prepared.notes, "visit")


def test_a_mounting_off_its_statement_shows_in_the_outer_flow_alone(raw, kit, wake, probe, tmp_path):
    for name, turn in (("pitch", (0.6, 0.0)), ("yaw", (0.0, 0.6))):
        how = TraverseConditions(**{name: 0.6 * DEGREE}, noise=0.2)
        own = {name: "0 deg", "misalignment": "outer_flow"}
        at = raw.positions(spacing=COARSE)
        path = raw.traverse(tmp_path / name, wake, *probe, how=how, at=at, probe=own)
        prepared = prepare(load(path))
        said = only(prepared.notes, "as the outer flow shows")
        assert number(said, "stated by ", " deg in pitch") == pytest.approx(turn[0], abs=0.005)
        assert number(said, "and ", " deg in yaw") == pytest.approx(turn[1], abs=0.005)
        assert state_error(prepared, wake, "w") < 0.05 and state_error(prepared, wake, "v") < 0.05
        assert "misalignment of the probe (correction)" in {source.name for source in prepared.sources}
        # Uniform upwash of angle t over a window and beyond it, closed by its edge: the energy form falls by t L/2.
        nominal, worth = prepared.nominal, number(said, "would see ", " counts")
        lift = nominal.values["lift"] / (nominal.reference.dynamic_pressure * kit.AREA)
        assert worth == pytest.approx(0.5e4 * lift * 0.6 * DEGREE if name == "pitch" else 0.0, rel=0.03, abs=0.5)


def test_a_misalignment_of_unknown_uncertainty_is_not_taken_out(raw, wake, probe, tmp_path, monkeypatch):
    found = outer_alignment.outer_flow
    monkeypatch.setattr(
        outer_alignment, "outer_flow", lambda *a, **k: replace(found(*a, **k), offset_uncertainty=float("nan"))
    )
    own, at = {"pitch": "0 deg", "misalignment": "outer_flow"}, raw.positions(spacing=COARSE)
    path = raw.traverse(tmp_path, wake, *probe, how=TraverseConditions(noise=0.2), at=at, probe=own)
    prepared = prepare(load(path))
    assert only(prepared.notes, "misalignment was not taken out: too few parts of the window")
    assert "misalignment of the probe (correction)" not in {source.name for source in prepared.sources}


def test_the_axes_that_the_outer_flow_turns_are_those_of_the_survey(raw, wake, probe, tmp_path):
    how = TraverseConditions(roll=np.pi / 2, head_pitch=0.5 * DEGREE)
    path = raw.traverse(
        tmp_path, wake, *probe, how=how, at=raw.positions(spacing=COARSE), probe={"misalignment": "outer_flow"}
    )
    prepared = prepare(load(path))
    said = only(prepared.notes, "as the outer flow shows")
    # Rolled by a quarter turn counter-clockwise from behind, the head's up points to port, and so does its nose.
    assert number(said, "stated by ", " deg in pitch") == pytest.approx(0.0, abs=0.005)
    assert number(said, "and ", " deg in yaw") == pytest.approx(0.5, abs=0.005)
    assert state_error(prepared, wake, "v") < 0.02


def test_offsets_of_the_axes_come_after_the_turn(raw, wake, probe, tmp_path):
    how = TraverseConditions(pitch=5.5 * DEGREE)
    path = raw.traverse(
        tmp_path,
        wake,
        *probe,
        how=how,
        at=raw.positions(spacing=COARSE),
        probe={"pitch": "0 deg", "misalignment": "outer_flow"},
        plane={"axes": {"pitch_offset": "5 deg"}},
    )
    prepared = prepare(load(path))
    said = only(prepared.notes, "as the outer flow shows")
    assert number(said, "stated by ", " deg in pitch") == pytest.approx(0.5, abs=0.005)
    assert state_error(prepared, wake, "w") < 0.02


EMPTY = {"empty_tunnel": {"survey": "empty.toml"}}


@pytest.mark.parametrize(
    ("own", "more", "words"),
    [
        ({"misalignment": "outer_flow"}, EMPTY, ("[probe] misalignment", "empty-tunnel")),
        ({"misalignment": "outer_flow"}, {}, ("[probe] misalignment", "roll_pair")),
        ({"misalignment": "roll_pair", "roll": "180 deg"}, {}, ("[probe] roll", "[plane.columns]")),
        ({"misalignment": "sideways"}, {}, ("[probe] misalignment", "'roll_pair', 'outer_flow'")),
    ],
)
def test_corrections_that_do_not_go_together_are_one_line(kit, own, more, words):
    units = {"y": "m", "z": "m", **{f"p{hole}": "Pa" for hole in range(1, 6)}}
    units |= {} if more else {"roll": "deg"}
    columns = {name: {"column": name, "unit": unit} for name, unit in units.items()}
    content = {
        "plane": {"primary": "hole_pressures", "columns": columns},
        "probe": {"calibration": "probe.toml", **own},
    }
    text = kit.toml(kit.merged(kit.merged(kit.description(), content), more))
    with pytest.raises(InputError) as caught:
        parse_survey(text, "survey.toml")
    for word in words:
        assert word in str(caught.value)


def test_a_roll_pair_that_is_not_asked_for_is_not_averaged_away(rolled, tmp_path):
    with pytest.raises(InputError, match=r"places measured at two rolls contradict each other.*write misalignment"):
        prepare(load(rolled(tmp_path, own={}, head_pitch=0.3 * DEGREE)))
    # A head that is straight needs nothing.
    prepared = prepare(load(rolled(tmp_path / "straight", own={})))
    assert np.abs(prepared.nominal.crossflow_offset).max() < 0.01


# -- rows to and fro --------------------------------------------------------------------------------------------------


def survey_of(raw, wake, probe, folder, how, *, seed=1, spacing=COARSE, **own):
    return raw.traverse(folder, wake, *probe, how=how, at=raw.positions(spacing=spacing), seed=seed, probe=own)


def test_an_undeclared_lag_is_said_with_its_size_and_its_remedy(raw, wake, probe, tmp_path):
    how = TraverseConditions(speed=0.5, lag=0.1, noise=0.5)
    left = prepare(load(survey_of(raw, wake, probe, tmp_path, how, spacing=0.03)))
    said = only(left.notes, "to and fro")
    assert number(said, "apart by ", " mm") == pytest.approx(2e3 * 0.5 * 0.1, rel=0.12)
    assert number(said, "tubing of ", " ms") == pytest.approx(100.0, rel=0.12)
    assert 'Write backlash = "estimate", or lag = ' in said
    right = prepare(load(survey_of(raw, wake, probe, tmp_path / "right", how, spacing=0.03, lag="100 ms")))
    assert not any("to and fro" in text for text in right.notes)
    scale = right.nominal.reference.dynamic_pressure * right.chain.settings.reference_area / 1e4
    for row, words in (("profile_drag", " counts of profile drag and"), ("induced_drag", " counts of induced drag if")):
        worth = (left.nominal.values[row] - right.nominal.values[row]) / scale
        part = said.split("backlash, ")[-1]
        shown = float(part.split(words)[0].split()[-1])
        assert abs(worth) > (0.5 if row == "profile_drag" else 0.2)
        assert shown == pytest.approx(worth, rel=0.25, abs=0.1)
    advice = " ".join(one.message for one in inspect(load(tmp_path / "survey.toml")).recommendations)
    assert "Rows taken to and fro stand apart" in advice and "one row traversed at two speeds" in advice


def test_an_undeclared_backlash_is_said_and_no_lag_where_no_time_was_kept(raw, wake, probe, tmp_path):
    how = TraverseConditions(backlash=3e-3, noise=0.2)
    path = raw.traverse(
        tmp_path, wake, *probe, how=how, at=raw.positions(spacing=COARSE), keep=("row", "reference_dynamic_pressure")
    )
    said = only(prepare(load(path)).notes, "to and fro")
    assert number(said, "apart by ", " mm") == pytest.approx(3.0, abs=0.15)
    assert "lag" not in said


def test_what_a_stated_lag_leaves_over_is_said(raw, wake, probe, tmp_path):
    how = TraverseConditions(speed=0.3, lag=0.1, noise=0.2)
    said = only(prepare(load(survey_of(raw, wake, probe, tmp_path, how, lag="50 ms"))).notes, "to and fro")
    assert "still stand apart, after what was taken out," in said
    assert number(said, "out, by ", " mm") == pytest.approx(30.0, rel=0.2)


def test_rows_that_run_ahead_are_no_lag(raw, wake, probe, tmp_path):
    how = TraverseConditions(backlash=-3e-3, noise=0.2)
    said = only(prepare(load(survey_of(raw, wake, probe, tmp_path, how))).notes, "to and fro")
    assert number(said, "apart by ", " mm") == pytest.approx(-3.0, abs=0.15)
    assert "run ahead of its indicated place" in said and "lag of the tubing" not in said
    estimated = prepare(load(survey_of(raw, wake, probe, tmp_path / "estimate", how, backlash="estimate")))
    assert "a play is never negative" in only(estimated.notes, "A backlash of the traverse")


def test_a_backlash_that_is_not_clear_of_the_scatter_is_carried_and_not_taken_out(raw, wake, probe, tmp_path):
    how = TraverseConditions(noise=2.0)
    found = prepare(load(survey_of(raw, wake, probe, tmp_path, how, seed=3, backlash="estimate")))
    said = only(found.notes, "A backlash of the traverse")
    assert "not clear of the scatter between rows" in said
    addition = next(one for one in found.chain.traverse.additions if one.name == "backlash")
    assert not np.any(addition.size["p1"]) and np.any(addition.per_sigma["correction.backlash"]["p1"])


@pytest.mark.parametrize(
    ("own", "words"), [({}, "no row was traversed in both directions"), ({"backlash": "1 mm"}, "play of the traverse")]
)
def test_why_a_lag_is_taken_as_known_to_a_tenth_is_said(raw, wake, probe, tmp_path, own, words):
    how = TraverseConditions(speed=0.2, lag=0.05)
    path = survey_of(raw, wake, probe, tmp_path, how, lag="50 ms", **own)
    assert words in only(prepare(load(path)).notes, "A lag of the tubing")


def test_clean_noisy_surveys_give_no_alarm(raw, wake, probe):
    at = raw.positions(spacing=COARSE)
    holes = record_traverse(wake, at, probe[0], generator=np.random.default_rng(0)).holes
    chances = []
    for seed in range(120):
        noise = 0.5 * np.random.default_rng(seed).standard_normal(holes.shape)
        chances.append(estimate_backlash(at.y, at.z, at.row, holes + noise, below=0.005).chance)
    # Of 400 seeds each, in 13 kinds of survey, 0 to 0.75 % fall below 0.005; here one in 120 would be 0.8 %.
    assert np.sum(np.array(chances) < 0.005) <= 1
    assert 0.01 < np.mean(np.array(chances) < 0.05) < 0.12
