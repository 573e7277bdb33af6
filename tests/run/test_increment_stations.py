"""Increments and repeats of surveys with several planes, and of computed ones."""

import dataclasses

import numpy as np
import pytest

import wakeledger as wl
from wakeledger.core.errors import InputError
from wakeledger.ledger.contributions import Contributions
from wakeledger.run.survey import load, reduce

GRID = {"spacing": 0.05, "y": (-0.9, 0.9), "z": (-0.6, 0.5)}
STATIONS = (500.0, 900.0)
TABLE = 0.2


def survey(kit, folder, *, seed, peak=2.0, stations=STATIONS):
    """A wing at several stations, the holder's table of each the same in all surveys; noise of its own."""
    y, z = kit.axes(**GRID)
    generator = np.random.default_rng(seed)
    folder.mkdir(parents=True, exist_ok=True)
    for k, _ in enumerate(stations, 1):
        data = kit.table(kit.wing(peak=peak, core=0.1), y, z)
        held = np.random.default_rng([11, k]).standard_normal((2, data["v"].size))
        for name, errors in zip("vw", held, strict=True):
            data[name] = data[name] + TABLE * errors + 0.02 * generator.standard_normal(data[name].size)
        kit.write_csv(folder / f"plane_{k}.csv", data)
    content = kit.description(title=f"peak {peak}", plane=None, uncertainty={"draws": 100, "seed": seed})
    content["plane"] = [
        {"file": f"plane_{k}.csv", "station": f"{x:g} m", "primary": "total_pressure", "columns": kit.columns()}
        for k, x in enumerate(stations, 1)
    ]
    content["uncertainty.source"] = [
        kit.source("noise", ["plane.v", "plane.w"], "0.02 m/s", "random"),
        kit.source("holder", ["plane.v", "plane.w"], f"{TABLE} m/s", "random", shared_id="holder table"),
        kit.source("speed", "reference.speed", "0.5 %", shared_id="tunnel"),
    ]
    path = folder / "survey.toml"
    path.write_text(kit.toml(content), encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def ledgers(kit, tmp_path_factory):
    folder = tmp_path_factory.mktemp("stations")
    return {
        name: reduce(load(survey(kit, folder / name, seed=seed, peak=peak)))
        for name, seed, peak in (("a", 1, 2.0), ("a2", 2, 2.0), ("b", 3, 2.06))
    }


def test_contributions_of_several_planes_add_up(ledgers):
    kept = ledgers["a"].contributions
    u = np.sqrt(np.einsum("qrr->qr", kept.covariance))[0]
    rows = [ledgers["a"].row(name).standard_uncertainty for name in kept.rows]
    np.testing.assert_allclose(u, rows, rtol=1e-9)
    assert {one.input for one in kept.points} == {f"plane.{name} of plane {k}" for name in "vw" for k in (1, 2)}


def test_errors_of_points_cancel_plane_by_plane(kit, ledgers):
    found = wl.increment(ledgers["a"], ledgers["b"])
    lines = {(line.row, line.shared_id): line for line in found.cancellations}
    line = lines["lift", "holder table"]
    assert line.left < 0.3 * min(line.in_a, line.in_b)
    one = ledgers["a"].stations[0].contributions
    alone = [each.variance[0, one.rows.index("lift")] for each in one.points]
    # The planes have errors of their own: in the mean of two they average down.
    assert line.in_a == pytest.approx(np.sqrt(sum(alone) / 2), rel=0.1)
    truths = [kit.wing(peak=peak, core=0.1).truth.rows()["lift"] for peak in (2.0, 2.06)]
    row = found.row("lift").value
    assert abs(row.difference - (truths[1] - truths[0])) < 1.5 * row.expanded_uncertainty
    assert row.uncancelled_uncertainty > 2 * row.standard_uncertainty
    notes = " ".join(found.notes)
    assert "rows of A are combined from its planes at 500 m, 900 m" in notes
    assert [float(one["x"]) for one in (found.plane, *found.further_planes)] == [500.0, 900.0]
    assert "Planes at 900 m: " in notes
    assert "counts as another one on each plane" in notes


def test_stations_that_differ_are_warned_of(kit, ledgers, tmp_path):
    single = reduce(load(survey(kit, tmp_path, seed=4, stations=STATIONS[:1])))
    found = wl.increment(ledgers["a"], single)
    assert any("station is 500 m, 900 m in A and 500 m in B" in text for text in found.warnings)
    # The single plane's points are another error than those of a plane of several; the speed is one.
    assert {line.shared_id for line in found.cancellations} == {"tunnel"}
    reasons = {line.source: line.reason for line in found.not_cancelled}
    assert "each plane by itself" in reasons["holder"]


def test_repeats_of_several_planes(ledgers):
    mean = wl.combine([ledgers["a"], ledgers["a2"]])
    ends = sorted(ledgers[name].row("lift").value for name in ("a", "a2"))
    assert ends[0] <= mean.row("lift").value <= ends[1]
    budget = {(line.row, line.source): line.standard_uncertainty for line in mean.budget}
    one = ledgers["a"].contributions
    own = np.sqrt(sum(each.variance[0, one.rows.index("lift")] for each in one.points))
    # The holder's table is one error in both runs: not averaged down.
    assert budget["lift", "holder"] == pytest.approx(own, rel=0.1)
    assert any("several planes" in note for note in mean.notes)
    assert wl.increment(mean, ledgers["b"]).row("lift").value.standard_uncertainty > 0


def computed(ledger):
    """The ledger as if its flow were computed: numerical terms alone."""
    kept = ledger.contributions
    terms = tuple(one for one in kept.components if one.kind == "numerical")
    bare = Contributions(kept.rows, terms, 0 * kept.scatter, kept.scatter_degrees_of_freedom)
    # Any figure of a computed plane that is in no row.
    return dataclasses.replace(ledger, contributions=bare, diagnostics=("power",))


def test_computed_flows(ledgers):
    a, b = computed(ledgers["a"]), computed(ledgers["b"])
    found = wl.increment(a, b)
    assert any("Both flows are computed" in note for note in found.notes)
    assert found.cancellations == () and all("numerical term" in line.reason for line in found.not_cancelled[-2:])
    assert not any("Both flows are computed" in note for note in wl.increment(a, ledgers["b"]).notes)
    twice = wl.increment(a, a)
    assert any("numerical errors have in common" in text for text in twice.warnings)
    with pytest.raises(InputError, match="run 2 is computed"):
        wl.combine([ledgers["a2"], b])
