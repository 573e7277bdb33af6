"""Errors of points and rows that two surveys of the same points share: they cancel in increments, error by error."""

import dataclasses
import math

import numpy as np
import pytest
import xarray as xr

import wakeledger as wl
from wakeledger.confidence.sampling import ErrorSampler
from wakeledger.ledger.archive import open_archive, write_archive
from wakeledger.run.chain.outputs import OUTPUTS
from wakeledger.run.prepared import prepare
from wakeledger.run.survey import load, reduce

GRID = {"spacing": 0.05, "y": (-0.9, 0.9), "z": (-0.6, 0.5)}
CORE = 0.1
#: Standard uncertainty of what the table of the probe's holder leaves at each point, and of noise.
TABLE, NOISE = 0.3, 0.01
ROWS = ("induced_drag", "lift", "profile_drag", "total_drag")


def shared(kit, *, identity="holder table", effect="random", **more):
    return [
        kit.source("holder", ["plane.v", "plane.w"], f"{TABLE} m/s", effect, shared_id=identity, **more),
        kit.source("losses", "plane.total_pressure", "3 Pa", effect, shared_id=f"{identity} of losses", **more),
        kit.source("noise", ["plane.v", "plane.w"], f"{NOISE} m/s", "random"),
    ]


def table(seed, size, effect="random", lines=None):
    """Errors of the holder's table: of v, of w and of the total pressure."""
    generator = np.random.default_rng(seed)
    if effect == "random":
        return generator.standard_normal((3, size)) * np.array([[TABLE], [TABLE], [3.0]])
    rows = np.repeat(np.arange(lines), size // lines)
    return (generator.standard_normal((3, lines)) * np.array([[TABLE], [TABLE], [3.0]]))[:, rows]


def survey(kit, folder, *, peak=2.0, errors=None, seed=0, grid=GRID, declared=None, rows=False):
    """One run of a wing with given errors of its points and noise of its own."""
    y, z = kit.axes(**grid)
    data = kit.table(kit.wing(peak=peak, core=CORE), y, z)
    generator = np.random.default_rng(seed)
    for name, column in zip(("v", "w", "total_pressure"), range(3), strict=True):
        if errors is not None:
            data[name] = data[name] + errors[column]
        if name != "total_pressure":
            data[name] = data[name] + NOISE * generator.standard_normal(data[name].size)
    content = kit.description(title=f"peak {peak}, {seed}", uncertainty={"draws": 100, "seed": seed})
    if rows:
        data["row"] = np.repeat(np.arange(float(z.size)), y.size)
        content["plane"]["columns"]["row"] = {"column": "row", "unit": "1"}
    content["uncertainty.source"] = shared(kit) if declared is None else declared
    return kit.write(folder, data, content)


@pytest.fixture(scope="module")
def pairs(kit, tmp_path_factory):
    """Survey files of A and B with the same table of errors, and with rows' errors."""
    folder = tmp_path_factory.mktemp("points")
    y, z = kit.axes(**GRID)
    found = {}
    for effect in ("random", "per_row"):
        errors = table(11, y.size * z.size, effect, z.size)
        declared = shared(kit, effect=effect)
        found[effect] = [
            survey(kit, folder / f"{effect} {seed}", peak=peak, errors=errors, seed=seed, declared=declared, rows=True)
            for seed, peak in ((1, 2.0), (2, 2.06))
        ]
    return found


@pytest.fixture(scope="module")
def ledgers(pairs):
    return {effect: [reduce(load(path)) for path in paths] for effect, paths in pairs.items()}


@pytest.mark.parametrize("effect", ["random", "per_row"])
def test_the_increment_is_recovered_within_what_is_left(kit, ledgers, effect):
    found = wl.increment(*ledgers[effect])
    truths = [kit.wing(peak=peak, core=CORE).truth.rows() for peak in (2.0, 2.06)]
    for name in ROWS:
        row = found.row(name).value
        error = row.difference - (truths[1][name] - truths[0][name])
        # Two in a thousand for each, and what 5 cm of spacing with 10 cm cores lose of the difference.
        assert abs(error) < 1.5 * row.expanded_uncertainty + 2e-3 * abs(truths[0][name] - truths[1][name])
    lift = found.row("lift").value
    # What the doubt of the wake region does is added; errors of rows matter less to the lift.
    assert lift.uncancelled_uncertainty > {"random": 3, "per_row": 1.4}[effect] * lift.standard_uncertainty
    lines = {(line.row, line.shared_id): line for line in found.cancellations}
    line = lines["lift", "holder table"]
    # The regions of the two wakes differ here and there: an error in one of them alone stays.
    most = {"random": 0.25, "per_row": 0.5}[effect]
    assert line.left < most * min(line.in_a, line.in_b) and line.coefficient_left < most * line.coefficient_in_b
    assert line.in_a == pytest.approx(ledgers[effect][0].row("lift").standard_uncertainty, rel=0.3)
    assert not [line for line in found.not_cancelled if line.source in ("holder", "losses")]
    assert any("'holder'" in note and "shared_id" in note for note in found.notes)
    assert any(line.source == "holder (left)" for line in found.budget)


@pytest.mark.parametrize("effect", ["random", "per_row"])
def test_what_is_left_is_that_of_monte_carlo(pairs, ledgers, effect):
    """Both surveys by the chain under the same draws: a shared source has the same errors whatever the seed."""
    draws, values = 200, []
    for seed, path in enumerate(pairs[effect]):
        prepared = prepare(load(path))
        own = [one for one in prepared.sources if one.shared_id]
        used = {name: prepared.layouts[name] for one in own for name in one.applies_to}
        drawn = ErrorSampler(own, used, seed=seed).draw(0, draws)
        values.append(prepared.chain.vectors(drawn, estimates=False))
    found = wl.increment(*ledgers[effect])
    for name in ROWS:
        at = OUTPUTS.index(name)
        left = math.hypot(*(line.left for line in found.cancellations if line.row == name))
        apart = [line.in_a for line in found.cancellations if line.row == name]
        # 200 draws know a standard deviation within 5 %: four times that, and a twentieth of what the errors do to the
        # row for what they do to second order, which derivatives do not follow and the scatter holds.
        scattered = float(np.std(values[1][:, at] - values[0][:, at], ddof=1))
        assert left == pytest.approx(scattered, rel=0.2, abs=0.05 * math.hypot(*apart)), name
        alone = float(np.std(values[0][:, at], ddof=1))
        assert alone > 0.8 * math.hypot(*apart), name
        if name in ("lift", "profile_drag"):
            assert alone == pytest.approx(math.hypot(*apart), rel=0.2), name


def test_contributions_still_add_up_to_each_row(ledgers):
    for ledger in ledgers["random"]:
        u = np.sqrt(np.einsum("qrr->qr", ledger.contributions.covariance))[0]
        rows = [ledger.row(name).standard_uncertainty for name in ledger.contributions.rows]
        # 100 draws know u within 7 %: three and a half times that.
        np.testing.assert_allclose(u, rows, rtol=0.25)
        own = ledger.contributions.scatter[0]
        at = ledger.contributions.rows.index("lift")
        # What is left beside the followed errors is noise: 3 % of them.
        assert math.sqrt(own[at, at]) < 0.1 * ledger.row("lift").standard_uncertainty


def test_other_points_do_not_cancel_and_that_is_said(kit, ledgers, tmp_path):
    for number, (grid, words) in enumerate(
        (
            ({**GRID, "y": (-0.85, 0.9)}, "points, the other"),
            ({**GRID, "y": (-0.895, 0.905)}, "mm apart"),
        )
    ):
        y, z = kit.axes(**grid)
        errors = table(11, y.size * z.size)
        other = reduce(load(survey(kit, tmp_path / str(number), peak=2.06, errors=errors, seed=2, grid=grid)))
        found = wl.increment(ledgers["random"][0], other)
        assert found.cancellations == ()
        reasons = {line.source: line.reason for line in found.not_cancelled}
        assert words in reasons["holder"] and "single points" in reasons["holder"]
        row = found.row("lift").value
        assert row.standard_uncertainty == pytest.approx(row.uncancelled_uncertainty, rel=0.25)


def test_another_identity_does_not_cancel(kit, pairs, ledgers, tmp_path):
    text = pairs["random"][1].read_text(encoding="utf-8").replace("holder table", "another table")
    other = tmp_path / "survey.toml"
    other.write_text(text, encoding="utf-8")
    (tmp_path / "plane.csv").write_bytes((pairs["random"][1].parent / "plane.csv").read_bytes())
    found = wl.increment(ledgers["random"][0], reduce(load(other)))
    reasons = {line.source: line.reason for line in found.not_cancelled}
    assert "'holder table' in A and 'another table' in B" in reasons["holder"]
    assert found.cancellations == ()


def test_the_archive_keeps_them(ledgers, tmp_path):
    for number, ledger in enumerate(ledgers["per_row"]):
        write_archive(ledger, tmp_path / f"{number}.nc")
    kept = [open_archive(tmp_path / f"{number}.nc") for number in (0, 1)]
    for one, other in zip(kept, ledgers["per_row"], strict=True):
        xr.testing.assert_identical(one.contributions.to_dataset(), other.contributions.to_dataset())
    row, other = (wl.increment(*each).row("lift").value for each in (kept, ledgers["per_row"]))
    assert row == other
    again = reduce(load(tmp_path / "0.nc"))
    xr.testing.assert_identical(again.contributions.to_dataset(), kept[0].contributions.to_dataset())


def test_an_archive_without_them_adds_and_says_so(ledgers):
    a = ledgers["random"][0]
    scatter = a.contributions.scatter + sum(one.covariance for one in a.contributions.points)
    older = dataclasses.replace(a.contributions, points=(), scatter=scatter)
    found = wl.increment(dataclasses.replace(a, contributions=older), ledgers["random"][1])
    reasons = {line.source: line.reason for line in found.not_cancelled}
    assert "archive of A does not hold" in reasons["holder"]
    row = found.row("lift").value
    assert row.standard_uncertainty == pytest.approx(row.uncancelled_uncertainty, rel=0.25)


def test_noise_that_is_called_shared_is_found_out(kit, tmp_path):
    """The file gives noise an identity; the two surveys' points show that their errors are not the same."""
    y, z = kit.axes(**GRID)
    ledgers = [
        reduce(load(survey(kit, tmp_path / str(seed), errors=table(seed, y.size * z.size), seed=seed)))
        for seed in (5, 6)
    ]
    found = wl.increment(*ledgers)
    assert any("holder" in text and "noise" in text for text in found.warnings)


def test_errors_that_are_shared_are_not_called_noise(ledgers):
    assert wl.increment(*ledgers["random"]).warnings == ()
    assert wl.increment(*ledgers["per_row"]).warnings == ()


def test_repeats_do_not_average_them_down(kit, pairs, ledgers, tmp_path):
    y, z = kit.axes(**GRID)
    errors = table(11, y.size * z.size)
    runs = [
        ledgers["random"][0],
        *(reduce(load(survey(kit, tmp_path / str(seed), errors=errors, seed=seed))) for seed in (7, 8)),
    ]
    mean = wl.combine(runs)
    budget = {(line.row, line.source): line.standard_uncertainty for line in mean.budget}
    one = next(each for each in runs[0].contributions.points if each.input == "plane.v")
    at = runs[0].contributions.rows.index("lift")
    both = [each.variance[0, at] for each in runs[0].contributions.points if each.source == "holder"]
    assert budget["lift", "holder"] == pytest.approx(math.sqrt(sum(both)), rel=0.02)
    assert one.variance[0, at] > 0
    # The mean still cancels against a survey of the same points.
    found = wl.increment(mean, ledgers["random"][1])
    assert {line.shared_id for line in found.cancellations} == {"holder table", "holder table of losses"}
    assert found.row("lift").value.uncancelled_uncertainty > 3 * found.row("lift").value.standard_uncertainty


def test_repeats_on_other_points_average_them_down_and_say_so(kit, ledgers, tmp_path):
    grid = {**GRID, "y": (-0.875, 0.925)}
    y, z = kit.axes(**grid)
    other = reduce(load(survey(kit, tmp_path, errors=table(12, y.size * z.size), seed=7, grid=grid)))
    mean = wl.combine([ledgers["random"][0], other])
    assert any("holder table" in note and "each run's own" in note for note in mean.notes)
    # Two runs of like uncertainty: down by √2, within the sampling of 100 draws.
    expected = ledgers["random"][0].row("lift").standard_uncertainty / math.sqrt(2)
    assert mean.row("lift").standard_uncertainty == pytest.approx(expected, rel=0.3)


def test_sections_follow_them_too(kit, tmp_path):
    z = np.linspace(-0.06, 0.06, 61)
    table = np.random.default_rng(3).standard_normal(z.size) * 4.0
    ledgers = []
    for number, depth in enumerate((200.0, 230.0)):
        loss = depth * np.exp(-((z / 0.01) ** 2))
        data = {"z": z, "total_pressure": kit.PRESSURE + 0.5 * kit.DENSITY * kit.SPEED**2 - loss + table}
        data["static_pressure"] = np.full(z.size, kit.PRESSURE)
        data["total_pressure"] = data["total_pressure"] + 0.1 * np.random.default_rng(number).standard_normal(z.size)
        content = kit.description(
            model=None,
            boundary=None,
            section={"chord": "0.16 m", "edge_static": "measured"},
            plane={
                "columns": {name: {"column": name, "unit": kit.UNITS[name]} for name in data},
                "primary": "total_pressure",
            },
        )
        content["uncertainty.source"] = [
            kit.source("noise", "plane.total_pressure", "0.1 Pa", "random"),
            kit.source("holes of the rake", "plane.total_pressure", "4 Pa", "random", shared_id="rake 2"),
        ]
        ledgers.append(reduce(load(kit.write(tmp_path / str(number), data, content)), draws=100))
    found = wl.increment(*ledgers)
    (line,) = found.cancellations
    assert line.shared_id == "rake 2" and line.left < 0.3 * line.in_a
    assert (
        found.row("section_drag").value.uncancelled_uncertainty > found.row("section_drag").value.standard_uncertainty
    )
