"""Noise that points taken again show: pooled, told apart from a drift between visits, held against the sources.

Twelve places outside the wake, visited twice, fix a standard deviation within 1/√24 = 20 %.
"""

import math

import numpy as np
import pytest

from wakeledger.confidence.revisits import Scatter
from wakeledger.run import checks
from wakeledger.run.survey import load, prepare
from wakeledger.run.uncertainty.channel_noise import OUTSIDE, Again, ChannelNoise, NoiseFindings, Shown, visits_off

NAMES = {"u": "m/s", "v": "m/s", "w": "m/s", "total_pressure": "Pa", "static_pressure": "Pa"}
SIZES = {"u": 0.1, "v": 0.1, "w": 0.1, "total_pressure": 1.5, "static_pressure": 1.5}
#: Standard errors of twelve pairs, and of four times that.
DOUBT = 1 / math.sqrt(24)


@pytest.fixture(scope="module")
def exact(kit):
    """Points of a plane, and after them twelve of its outer places again."""
    data = kit.table(kit.wing(), *kit.axes(spacing=0.05, y=(-1.1, 1.1), z=(-0.7, 0.7)))
    outer = np.flatnonzero((np.abs(data["z"]) > 0.55) & (np.abs(data["y"]) < 0.95))
    again = outer[:: outer.size // 12][:12]
    return {name: np.concatenate([values, values[again]]) for name, values in data.items()}


def recorded(exact, seed, *, later=None, keep=slice(None)):
    """The points with noise; `later` is what the visits at the end read more."""
    rng = np.random.default_rng([seed, 6])
    n = exact["y"].size
    data = {name: values + SIZES.get(name, 0.0) * rng.standard_normal(n) for name, values in exact.items()}
    for name in ("y", "z"):
        data[name] = exact[name]
    for name, change in (later or {}).items():
        data[name][-12:] += change
    return {name: values[keep] for name, values in data.items()}


@pytest.fixture
def prepared(kit, tmp_path):
    def make(data, *, declared=True, extra=(), **changes):
        content = kit.description(**changes)
        content["uncertainty.source"] = [
            kit.source(f"noise of {name}", f"plane.{name}", f"{SIZES[name]} {unit}", "random")
            for name, unit in NAMES.items()
            if declared
        ] + list(extra)
        if not content["uncertainty.source"]:
            content["uncertainty.source"] = [kit.source("zero", "plane.static_pressure", "1 Pa")]
        return prepare(load(kit.write(tmp_path / str(len(list(tmp_path.iterdir()))), data, content)))

    return make


def outside(channel):
    (found,) = (one for one in channel.again if one.where == OUTSIDE)
    return found


def test_noise_is_recovered_from_twelve_places_and_held_against_the_sources(exact, prepared):
    found = prepared(recorded(exact, 1)).findings
    for name, size in SIZES.items():
        again = outside(found[name])
        assert (again.scatter.degrees_of_freedom, again.scatter.places) == (12, 12)
        assert again.scatter.deviation == pytest.approx(size, rel=4 * DOUBT)
        # What the sources make of it is the mean of 32 draws: within 1/√(2·12·32) = 3.6 %.
        assert again.declared == pytest.approx(size, rel=4 * 0.036)
    assert found.disagreements == () and found.drift is None and found.notes == ()
    assert checks.declared_noise(found).verdict == "pass"


@pytest.mark.parametrize("freedom", [1, 3, 12, 60])
def test_right_declarations_are_not_called_wrong_by_visits(freedom):
    rng = np.random.default_rng(freedom)
    scatters = np.sqrt(rng.chisquare(freedom, 20000) / freedom)
    none = Scatter(math.nan, 0, 0, 0)
    wrong = sum(
        visits_off(Again(OUTSIDE, Scatter(float(one), freedom, freedom, 2 * freedom), none, 1.0, math.nan)) > 1.5
        for one in scatters
    )
    # A chance of 2e-4 at either end at the most, and the factor of 1.5 beside it.
    assert wrong <= 16


def test_a_drift_between_visits_is_named_with_its_size(exact, prepared):
    found = prepared(recorded(exact, 2, later={"v": 0.8})).findings
    assert "v " in found.drift and "12 places" in found.drift and 'effect = "per_row"' in found.drift
    assert "w " not in found.drift.split(":")[0]
    # Twelve changes of 0.8 between visits: each pair scatters by 0.8/√2 about its mean.
    assert outside(found["v"]).scatter.deviation == pytest.approx(math.hypot(0.8 / math.sqrt(2), 0.1), rel=4 * 0.1)
    check = checks.declared_noise(found)
    assert check.verdict == "warn" and "scatter otherwise than declared (v " in check.message
    assert found.drift in check.message and found.drift not in found.notes


def test_an_even_drift_has_its_change_over_the_survey(exact, prepared):
    n = exact["y"].size
    data = recorded(exact, 3)
    data["total_pressure"] = data["total_pressure"] + 12.0 * np.arange(n) / n
    found = prepared(data).findings
    assert outside(found["total_pressure"]).change == pytest.approx(12.0, rel=0.2)
    assert "a drift of +1" in found.drift


def test_a_declared_error_of_each_row_explains_the_visits(kit, exact, prepared):
    rows = np.unique(exact["z"], return_inverse=True)[1]
    rows[-12:] = rows.max() + 1 + np.arange(12)
    shifts = 0.5 * np.random.default_rng(4).standard_normal(rows.max() + 1)
    data = recorded(exact, 4)
    data["v"] = data["v"] + shifts[rows]
    data["row"] = rows
    plane = {"columns": kit.columns(row={"column": "row"})}
    of_rows = kit.source("rows", "plane.v", "0.5 m/s", "per_row")
    explained = prepared(data, extra=[of_rows], plane=plane).findings
    assert explained.drift is None and explained.disagreements == ()
    # Without it the visits differ by more than noise, and not evenly in time.
    assert "hysteresis" in prepared(data, plane=plane).findings.drift


def test_visits_stand_in_where_noise_is_not_declared(exact, prepared):
    plain = prepared(recorded(exact, 5, keep=slice(0, -12)), declared=False)
    both = prepared(recorded(exact, 5), declared=False)
    (note,) = (note for note in both.notes if "No noise of the crossflow was declared" in note)
    assert "neighbouring points and re-visits (12 degrees of freedom)" in note
    v = both.findings["v"]
    parts = ((v.shown.deviation, v.shown.size), (outside(v).scatter.deviation, 12))
    pooled = math.sqrt(sum(n * s**2 for s, n in parts) / sum(n for _, n in parts))
    assert math.sqrt(both.noises[0].outer_variance[0]) == pytest.approx(pooled)
    assert "what the data show" in next(note for note in plain.notes if "No noise of the crossflow" in note)
    # Visits that drift are no noise from point to point.
    drifting = prepared(recorded(exact, 5, later={"v": 0.8}), declared=False)
    # Twelve places of the plane are half of 0.8 m/s off their neighbours, which a robust estimate hardly sees.
    assert math.sqrt(drifting.noises[0].outer_variance[0]) == pytest.approx(0.1, rel=0.1)
    assert any("Re-visits to 12 places outside the wake differ" in note for note in drifting.notes)
    assert checks.declared_noise(drifting.findings).verdict == "not_applicable"


def test_visits_tell_the_noise_where_no_outer_flow_is_left(kit, exact, prepared):
    found = prepared(recorded(exact, 6), declared=False, wake={"include": [[["-1.2 m", "-0.8 m"], ["1.2 m", "0.8 m"]]]})
    assert found.findings["v"].shown.size == 0
    assert "the re-visits (12 degrees of freedom)" in next(n for n in found.notes if "No noise of the crossflow" in n)
    assert math.sqrt(found.noises[0].outer_variance[0]) == pytest.approx(0.1, rel=4 * DOUBT)


def test_noise_of_the_pressures_is_none_of_the_crossflow(kit, exact, prepared):
    """What it leaves in the direction of the flow is no declaration: the bias is that of the noise in the data."""
    found = prepared(
        recorded(exact, 9), declared=False, extra=[kit.source("total", "plane.total_pressure", "1.5 Pa", "random")]
    )
    assert [one.name for one in found.noises] == ["noise in the data"]
    assert found.findings["v"].white == 0
    # Twelve places of some 500 are averages of two points.
    assert found.findings["total_pressure"].white == pytest.approx(1.5, rel=0.01)
    assert found.findings.disagreements == ()
    (said,) = (note for note in found.notes if "no source declares" in note)
    assert "v 0." in said and "static pressure" in said


def test_copies_of_a_line_are_no_visits(exact, prepared):
    data = recorded(exact, 7, keep=slice(0, -12))
    copied = {name: np.concatenate([values, values[200:212]]) for name, values in data.items()}
    found = prepared(copied).findings
    assert outside(found["v"]).scatter.degrees_of_freedom == 0
    assert found.disagreements == ()


def test_a_place_taken_four_times_at_once_is_averaged_before_it_is_compared(kit, exact, prepared):
    # Every place four times: the plane shows half the noise of a point, and so do the sources on it.
    first = {name: values[:-12] for name, values in exact.items()}
    data = recorded({name: np.repeat(values, 4) for name, values in first.items()}, 8)
    found = prepared(data).findings
    assert found["v"].shown.deviation == pytest.approx(0.05, rel=0.2)
    assert found["v"].white == pytest.approx(0.05, rel=0.05)
    assert found.disagreements == ()


def test_neighbours_that_differ_by_the_flow_itself_give_way_to_visits():
    shown = Shown(0.3, (math.nan, math.nan), 200.0)
    again = Again(OUTSIDE, Scatter(0.1, 40, 40, 80), Scatter(math.nan, 0, 0, 0), 0.0, math.nan)
    value, by = ChannelNoise("v", shown, 0.0, shared=False, again=(again,)).best()
    assert value == 0.1 and by == "the re-visits (40 degrees of freedom)"
    assert not NoiseFindings((ChannelNoise("v", shown, 0.0, shared=False, again=(again,)),), 48.0).declares
