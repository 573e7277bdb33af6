"""``wakeledger plan`` as a user runs it."""

import dataclasses
import json

import numpy as np
import pytest

from wakeledger.cli import exits, wakeledger
from wakeledger.present.plan_text import outcome, plan_text, standing, time_text

PLAN = """title = "one set-up"
[reference]
speed = "40.0 m/s"
density = "1.190 kg/m^3"
static_pressure = "100.9 kPa"
[model]
reference_area = "0.165 m^2"
span = "1.10 m"
[plan]
station = "0.90 m"
lift_coefficient = 0.40
profile_drag_coefficient = 0.0110
tip_core = "60 mm"
wake_width = "60 mm"
spacing = "25 mm"
window = "300 mm"
hole_noise = "0.3 Pa"
draws = 200
settling_time = "1 s"
"""


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    """The command once with products; path of the plan and its folder."""
    folder = tmp_path_factory.mktemp("plan")
    path = folder / "plan.toml"
    path.write_text(PLAN, encoding="utf-8")
    status = exits.run(wakeledger, ["plan", str(path), "--target", "20 counts", "--out", str(folder / "out")])
    return path, folder / "out", status


def test_products_are_written_and_hold_the_outcome(run):
    _, out, status = run
    assert status == exits.DONE
    assert {path.name for path in out.iterdir()} == {"plan.json", "report.html"}
    document = json.loads((out / "plan.json").read_text("utf-8"))
    assert document["reached"] and document["unit"] == "counts" and document["target"] == 20.0
    assert document["provenance"]["command"].startswith("wakeledger plan ")
    page = (out / "report.html").read_text("utf-8")
    assert "The target of 20.0 counts is reached" in page
    assert page.count("data:image/svg+xml;base64,") == 3
    assert "engineering estimates" in page and "http://" not in page.replace("http://www.w3.org", "")


def test_products_are_not_replaced_unasked(run, capsys):
    path, out, _ = run
    before = (out / "plan.json").read_bytes()
    assert exits.run(wakeledger, ["plan", str(path), "--target", "20 counts", "--out", str(out)]) == exits.INPUT_WRONG
    assert "--overwrite" in capsys.readouterr().err
    assert (out / "plan.json").read_bytes() == before


def test_no_set_up_is_exit_status_one_and_json_is_the_document(run, capsys):
    path, out, _ = run
    assert exits.run(wakeledger, ["plan", str(path), "--target", "0.01 counts", "--json"]) == exits.CHECK_FAILED
    document = json.loads(capsys.readouterr().out)
    kept = json.loads((out / "plan.json").read_text("utf-8"))
    assert not document["reached"] and document["beyond"] is None
    assert document["chosen"] == kept["chosen"]
    assert document["expanded_uncertainty"] == pytest.approx(kept["expanded_uncertainty"], rel=1e-12)


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["--target", "2 cts"], "--target"),
        ([], "no target is given"),
        (["--target"], "requires an argument"),
    ],
)
def test_wrong_input_is_one_line(run, arguments, words, capsys):
    path, _, _ = run
    assert exits.run(wakeledger, ["plan", str(path), *arguments]) == exits.INPUT_WRONG
    found = capsys.readouterr().err
    assert words in found and found.count("\n") == 1


def test_a_missing_file_is_one_line(tmp_path, capsys):
    assert exits.run(wakeledger, ["plan", str(tmp_path / "none.toml"), "--target", "2 counts"]) == exits.INPUT_WRONG
    assert "does not exist" in capsys.readouterr().err


def test_the_text_says_what_the_record_holds(run):
    from wakeledger.run.planning import plan

    path, _, _ = run
    found = plan(path, target="0.02 counts")
    text = plan_text(found, width=80)
    assert outcome(found).startswith("No set-up tried reaches 0.0200 counts; the best one found: total drag")
    assert "The best set-up found" in text and "0.3 Pa at each hole" in text
    assert all(len(line) <= 80 for line in text.splitlines())
    assert np.isfinite(found.uncertainty).all()
    assert plan_text(found, width=80, colour=True) != text


def test_a_set_up_that_is_good_enough_but_fails_a_check_is_told_so(run):
    from wakeledger.run.planning import plan

    path, _, _ = run
    found = plan(path, target="0.02 counts")
    one = dataclasses.replace(found.chosen, failing=("edge_vorticity",), expanded_uncertainty=0.01)
    failing = dataclasses.replace(found, chosen=one, expanded_uncertainty=0.01, reached=False)
    assert "would be within the target of 0.0200 counts, but edge vorticity would fail" in outcome(failing)
    assert standing(failing, one) == (False, "edge vorticity would FAIL")
    good = dataclasses.replace(one, failing=())
    assert standing(failing, good) == (True, "reaches the target")
    assert standing(failing, dataclasses.replace(good, minutes=1e9))[0] is (not failing.time_limit < 1e9)
    assert standing(failing, dataclasses.replace(good, expanded_uncertainty=1.0)) == (False, "does NOT reach it")


def test_times():
    assert [time_text(minutes) for minutes in (0.2, 119.4, 300.0)] == ["12 s", "119 min", "5 h 00 min"]
