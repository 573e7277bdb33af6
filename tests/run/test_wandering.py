"""Wandering named in the survey file: the note gives back what smearing an exact wake took from its induced drag."""

import math
import re

import pytest

from wakeledger.run.survey import load, prepare, reduce
from wakeledger.run.uncertainty.wandering import WANDERING

STILL, S = 0.05, 0.02
SMEARED = math.sqrt(STILL**2 + 2 * S**2)


@pytest.fixture
def notes(kit, tmp_path):
    def make(core, **wake):
        data = kit.table(kit.wing(core=core), *kit.axes())
        prepared = prepare(load(kit.write(tmp_path / f"{core}{len(wake)}", data, kit.description(wake=wake))))
        return prepared, [note for note in prepared.notes if "andering" in note]

    return make


def counts(text):
    return [float(number) for number in re.findall(r"([+-][\d.]+) counts", text)]


def test_a_smeared_wake_is_corrected(notes):
    still, none = notes(STILL)
    assert not none
    smeared, said = notes(SMEARED, wandering=f"{1e3 * S} mm", wandering_standard_uncertainty="2 mm")
    assert len(said) == 1
    lost, doubt, corrected = counts(said[0])
    truth = still.nominal.values["induced_drag coefficient"] * 1e4
    measured = smeared.nominal.values["induced_drag coefficient"] * 1e4
    assert truth - measured > 0.5
    # The fitted core lies in the wake's own vorticity, and the sheet between the tips is smeared as well.
    assert lost == pytest.approx(truth - measured, rel=0.25)
    assert corrected == pytest.approx(measured + lost, abs=0.02)
    # d/ds of ln a²/(a² - 2s²) at 20 mm: 2 mm are a fifth of it, and a little more above.
    assert doubt == pytest.approx(0.22 * lost, rel=0.2)


def test_too_much_wandering_is_said(notes):
    _, said = notes(STILL, wandering="60 mm")
    assert "too large for these data" in said[0]


def test_unknown_doubt_is_asked_for(notes):
    _, said = notes(STILL, wandering="5 mm")
    assert "give wandering_standard_uncertainty" in said[0]


@pytest.fixture
def reduced(kit, tmp_path):
    def make(core, **wake):
        content = kit.description(wake=wake, uncertainty={"draws": 100})
        content["uncertainty.source"] = [kit.source("zero", ["plane.total_pressure"], "0.01 Pa")]
        data = kit.table(kit.wing(core=core), *kit.axes())
        return reduce(load(kit.write(tmp_path / f"u{core}{len(wake)}{wake.get('wandering')}", data, content)))

    return make


def budget(ledger, row):
    return {line.source: line.standard_uncertainty for line in ledger.budget if line.row == row}


def test_what_is_not_put_back_is_in_the_uncertainty(reduced):
    truth = reduced(STILL).row("induced_drag").value
    plain = reduced(SMEARED)
    found = reduced(SMEARED, wandering=f"{1e3 * S} mm", wandering_standard_uncertainty="2 mm")
    lost = truth - found.row("induced_drag").value
    # √(ΔD² + (0.22 ΔD)²), ΔD as above within a quarter.
    size = budget(found, "induced_drag")[WANDERING]
    assert size == pytest.approx(1.024 * lost, rel=0.25)
    assert budget(found, "total_drag")[WANDERING] == pytest.approx(size, rel=1e-3)
    assert WANDERING not in budget(found, "profile_drag") and WANDERING not in budget(plain, "induced_drag")
    assert found.row("induced_drag").expanded_uncertainty > lost
    # The other methods see the same mean plane.
    errors = [{(e.row, e.method): e.normalised_error for e in one.estimates} for one in (plain, found)]
    key = ("induced_drag", "vortex_sum")
    assert errors[1][key] == pytest.approx(errors[0][key], rel=0.25)
    without = reduced(SMEARED, wandering=f"{1e3 * S} mm")
    assert budget(without, "induced_drag")[WANDERING] == pytest.approx(size / 1.024, rel=0.01)


def test_too_much_wandering_leaves_the_uncertainty_unknown(reduced):
    found = reduced(STILL, wandering="60 mm")
    for name in ("induced_drag", "total_drag"):
        row = found.row(name)
        assert math.isnan(row.standard_uncertainty) and WANDERING in row.reason
    assert math.isfinite(found.row("profile_drag").standard_uncertainty)
