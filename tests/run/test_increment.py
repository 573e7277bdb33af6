"""Increments and repeats from survey files to products, on small exact wakes."""

import dataclasses
import json
import math

import numpy as np
import pytest
import xarray as xr

import wakeledger as wl
from wakeledger.cli import exits, wakeledger
from wakeledger.core.errors import DataError, InputError
from wakeledger.ledger.archive import open_archive, write_archive
from wakeledger.ledger.increment import increment_json
from wakeledger.ledger.tabular import json_text, ledger_json
from wakeledger.run.ledgers.increment import declared_surveys
from wakeledger.run.ledgers.unlike import unlike
from wakeledger.run.survey import load, reduce

RIG = {"v": 0.05, "total_pressure": 0.8}


def sources(kit, *, shared=True, speed="0.5 %", noise="0.02 m/s"):
    rig = {"shared_id": "tunnel speed"} if shared else {}
    probe = {"shared_id": "probe-17"} if shared else {}
    return [
        kit.source("noise", ["plane.v", "plane.w"], noise, "random"),
        kit.source("tunnel speed", "reference.speed", speed, **rig),
        kit.source("probe angle", "angle.pitch", "0.2 deg", **probe),
        kit.source("density", "reference.density", "0.2 %"),
    ]


def survey(kit, folder, *, seed, peak=2.0, declared=None, changes=None):
    """One run of a wing with a given lift, its noise from a seed."""
    generator = np.random.default_rng(seed)
    data = kit.table(kit.wing(peak=peak), *kit.axes(spacing=0.0375, y=(-0.9, 0.9), z=(-0.6, 0.5)))
    for name in ("v", "w"):
        data[name] = data[name] + 0.02 * generator.standard_normal(data[name].size)
    content = kit.description(**{"title": f"peak {peak}, run {seed}", "uncertainty": {"draws": 100}} | (changes or {}))
    content["uncertainty.source"] = sources(kit) if declared is None else declared
    return kit.write(folder, data, content)


@pytest.fixture(scope="module")
def room(kit, tmp_path_factory):
    """Archives of A, of two repeats of it, and of B with 4 % more circulation."""
    folder = tmp_path_factory.mktemp("increment")
    for name, seed, peak in (("a", 1, 2.0), ("a2", 2, 2.0), ("a3", 3, 2.0), ("b", 4, 2.08)):
        write_archive(reduce(load(survey(kit, folder / name, seed=seed, peak=peak))), folder / f"{name}.nc")
    return folder


@pytest.fixture(scope="module")
def found(room):
    return wl.increment(room / "a.nc", room / "b.nc")


@pytest.fixture
def cli(capfd):
    def call(*arguments):
        status = exits.run(wakeledger, [str(argument) for argument in arguments])
        out, err = capfd.readouterr()
        return status, out, err

    return call


def test_every_plane_of_a_survey_counts_in_what_is_unlike(room):
    a = open_archive(room / "a.nc")
    one = declared_surveys(a)[0]
    far = one.plane.model_copy(update={"station": one.plane.station + 1, "file": "far.csv"})
    two = one.model_copy(update={"planes": (one.plane, far)})
    listed = f"{one.plane.station:g} m, {far.station:g} m"
    assert any(listed in sentence for sentence in unlike(a, a, (one,), (two,)))
    # The second plane's data alone are the same.
    shared = "c" * 64
    others = [dataclasses.replace(a, inputs={"survey.toml": name, "far.csv": shared}) for name in "pq"]
    assert any("same data" in sentence for sentence in unlike(*others, (two,), (two,)))


def test_contributions_add_up_to_each_row(room):
    ledger = open_archive(room / "a.nc")
    u = np.sqrt(np.einsum("qrr->qr", ledger.contributions.covariance))
    rows = [ledger.row(name) for name in ledger.contributions.rows]
    # 100 draws know u within 7 %, and so do both figures.
    np.testing.assert_allclose(u[0], [row.standard_uncertainty for row in rows], rtol=0.15)
    coefficients = np.array([row.coefficient_standard_uncertainty for row in rows])
    known = np.isfinite(coefficients)
    np.testing.assert_allclose(u[1][known], coefficients[known], rtol=0.15)


def test_an_archive_reduces_to_the_same_contributions(room):
    again = reduce(load(room / "a.nc"))
    kept = open_archive(room / "a.nc")
    assert json_text(ledger_json(again)) == json_text(ledger_json(kept))
    xr.testing.assert_identical(again.contributions.to_dataset(), kept.contributions.to_dataset())


def test_differences_and_their_truth(kit, found):
    a, b = (kit.wing(peak=peak).truth.rows() for peak in (2.0, 2.08))
    for name in ("induced_drag", "lift", "total_drag"):
        row = found.row(name)
        assert row.value.difference == pytest.approx(row.value.b - row.value.a, rel=1e-12)
        exact = b[name] - a[name]
        assert abs(row.value.difference - exact) < 1.5 * row.value.expanded_uncertainty
        assert row.value.difference == pytest.approx(exact, rel=0.2) and row.resolved
        q = 0.5 * kit.DENSITY * kit.SPEED**2
        assert row.coefficient.difference == pytest.approx(row.value.difference / (q * kit.AREA), rel=1e-9)
        assert row.coefficient.in_counts[0] == pytest.approx(1e4 * row.coefficient.difference, rel=1e-12)
    assert found.row("side_force").resolved is False


def test_shared_sources_cancel_by_what_they_do(found, room):
    a, b = (open_archive(room / name) for name in ("a.nc", "b.nc"))
    lines = {(line.row, line.shared_id): line for line in found.cancellations}
    line = lines["lift", "tunnel speed"]
    # The probe's speed follows the stream's through the zero of the total pressure, so that the crossflow does too, and
    # lift goes with the square of the speed: 1 % of each, and of the difference 1 % of the difference.
    for value, u in ((a.row("lift").value, line.in_a), (b.row("lift").value, line.in_b)):
        assert u == pytest.approx(0.01 * value, rel=2e-3)
    assert line.left == pytest.approx(0.01 * found.row("lift").value.difference, rel=2e-3)
    # The coefficient does not know of it.
    assert line.coefficient_in_a < 0.01 * 0.01 * a.row("lift").coefficient
    row = found.row("lift").value
    assert row.uncancelled_uncertainty > 1.7 * row.standard_uncertainty
    assert row.uncancelled_uncertainty == pytest.approx(
        math.hypot(a.row("lift").standard_uncertainty, b.row("lift").standard_uncertainty), rel=1e-12
    )
    assert np.sqrt(np.diag(found.covariance)) == pytest.approx([r.value.standard_uncertainty for r in found.rows])


def test_what_does_not_cancel_is_said(found):
    reasons = {line.source: line.reason for line in found.not_cancelled}
    assert "no shared_id in either" in reasons["density"] and "name alone" in reasons["density"]
    assert "no shared_id" in reasons["noise"]
    assert "numerical term" in reasons["edge of the wake region"]
    assert "tunnel speed" not in reasons and "probe angle" not in reasons
    assert not found.warnings and not found.failed


def test_budget_closes(found):
    for row in found.rows:
        lines = [line for line in found.budget if line.row == row.name]
        assert sum(line.standard_uncertainty**2 for line in lines) == pytest.approx(
            row.value.standard_uncertainty**2, rel=1e-9
        )
        assert {line.source for line in lines} >= {"random errors and interaction (A)", "density (B)"}


def test_a_name_alone_never_cancels(kit, room, tmp_path):
    path = survey(kit, tmp_path, seed=4, peak=2.08, declared=sources(kit, shared=False))
    found = wl.increment(room / "a.nc", reduce(load(path)))
    assert found.cancellations == ()
    reasons = {line.source: line.reason for line in found.not_cancelled}
    assert "no shared_id in B" in reasons["tunnel speed"]
    row = found.row("lift").value
    # Nothing cancels: within the sampling of 100 draws.
    assert row.standard_uncertainty == pytest.approx(row.uncancelled_uncertainty, rel=0.12)


def test_one_identity_with_two_sizes_is_refused(kit, room, tmp_path, cli):
    path = survey(kit, tmp_path, seed=4, peak=2.08, declared=sources(kit, speed="0.4 %"))
    other = tmp_path / "other.nc"
    write_archive(reduce(load(path)), other)
    with pytest.raises(InputError, match=r"tunnel speed.*reference\.speed.*0\.005.*0\.004"):
        wl.increment(room / "a.nc", other)
    status, out, err = cli("increment", room / "a.nc", other, "--out", tmp_path / "out")
    assert (status, out) == (2, "") and err.count("\n") == 1 and "two different errors" in err
    assert not (tmp_path / "out").exists()


def test_one_instrument_may_have_several_errors(kit, room, tmp_path):
    declared = [
        kit.source("noise", ["plane.v", "plane.w"], "0.02 m/s", "random", shared_id="probe-17"),
        kit.source("pitch of the probe", "angle.pitch", "0.2 deg", shared_id="probe-17"),
        kit.source("yaw of the probe", "angle.yaw", "0.1 deg", shared_id="probe-17"),
        kit.source("zero", "plane.total_pressure", "0.5 Pa", shared_id="transducer"),
    ]
    others = [*declared[:3], kit.source("zero", "plane.static_pressure", "0.5 Pa", shared_id="transducer")]
    a, b = (
        reduce(load(survey(kit, tmp_path / str(number), seed=number, declared=sources)))
        for number, sources in enumerate((declared, others))
    )
    found = wl.increment(a, b)
    lines = [line for line in found.cancellations if line.row == "induced_drag"]
    # The noise has an error for each point, the very same one by its identity.
    assert {line.source_a for line in lines} == {"noise", "pitch of the probe", "yaw of the probe"}
    assert any("'noise' has an error for each point" in note for note in found.notes)
    reasons = {line.source: line.reason for line in found.not_cancelled}
    assert "acts on plane.total_pressure in A and on plane.static_pressure in B" in reasons["zero"]


def test_a_ledger_minus_itself(room):
    found = wl.increment(room / "a.nc", room / "a.nc")
    for row in found.rows:
        assert row.value.difference == 0.0 and row.resolved is False
        # Its random errors are taken as those of two surveys.
        assert row.value.standard_uncertainty > 0
    assert all(line.left == pytest.approx(0, abs=1e-12) for line in found.cancellations)
    assert any("same data" in warning for warning in found.warnings)


def test_unlike_ledgers_are_warned_of(kit, room, tmp_path):
    changes = {
        "model": {"reference_area": "0.2 m^2"},
        "reference": {"speed": "42 m/s"},
        "plane": {"station": "900 m"},
    }
    found = wl.increment(room / "a.nc", reduce(load(survey(kit, tmp_path, seed=4, peak=2.08, changes=changes))))
    text = " ".join(found.warnings)
    assert "reference area is 0.18 m² in A and 0.2 m² in B" in text
    assert "dynamic pressure is 960 Pa in A and 1058.4 Pa in B" in text
    assert "station" in text
    lift = found.row("lift")
    a, b = lift.coefficient.a, lift.coefficient.b
    assert lift.coefficient.difference == pytest.approx(b - a, rel=1e-12)
    # More force and yet a smaller coefficient on the larger area.
    assert lift.value.difference > 0 > lift.coefficient.difference


def test_lengths_of_the_model_are_no_matter_of_the_flow(room):
    """A mean chord that was written differently changes no flow."""
    one = open_archive(room / "a.nc")
    other = dataclasses.replace(one, model={**one.model, "mean_chord": 1.1 * one.model["mean_chord"]})
    (said,) = [sentence for sentence in wl.increment(one, other).warnings if "mean chord" in sentence]
    assert said.endswith("the coefficients are each on its own.")


def test_unknown_stays_unknown(kit, room, tmp_path):
    path = survey(kit, tmp_path, seed=4, declared=[])
    found = wl.increment(room / "a.nc", reduce(load(path)))
    row = found.row("total_drag")
    assert math.isfinite(row.value.difference)
    assert math.isnan(row.value.standard_uncertainty) and row.resolved is None
    assert "unknown in B: the survey file gives no uncertainty source" in row.reason
    document = increment_json(found)
    assert document["rows"][0]["standard_uncertainty"] is None and document["rows"][0]["resolved"] is None
    json.dumps(document, allow_nan=False)


def test_an_archive_without_contributions_adds_whole_and_says_so(room):
    a = dataclasses.replace(open_archive(room / "a.nc"), contributions=None)
    found = wl.increment(a, room / "b.nc")
    assert any("archive of A does not hold" in warning for warning in found.warnings)
    assert found.cancellations == ()
    row = found.row("lift").value
    assert row.standard_uncertainty == pytest.approx(row.uncancelled_uncertainty, rel=0.12)
    assert any("tunnel speed" in line.source and "reduce it again" in line.reason for line in found.not_cancelled)


def test_command_and_products(room, tmp_path, cli):
    status, out, err = cli("increment", room / "a.nc", room / "b.nc")
    assert (status, err) == (0, "") and "RESOLVED" in out and "Not cancelled" in out
    assert list(tmp_path.iterdir()) == []
    out_dir = tmp_path / "inc"
    status, out, err = cli("increment", room / "a.nc", room / "b.nc", "--out", out_dir, "--figures", "png", "--json")
    assert status == 0
    document = json.loads(out)
    assert out == (out_dir / "increment.json").read_text("utf-8")
    names = {"increment.nc", "increment.json", "increment.csv", "report.html", "figures"}
    assert {path.name for path in out_dir.iterdir()} == names
    assert {path.stem for path in (out_dir / "figures").iterdir()} == {
        "increments", "increment_budget", "loss_difference", "vorticity_difference",
    }  # fmt: skip
    row = next(row for row in document["rows"] if row["name"] == "total_drag")
    assert row["counts"] == pytest.approx(1e4 * row["coefficient"]) and row["resolved"] is True
    with xr.open_dataset(out_dir / "increment.nc") as root:
        assert float(root["value"].sel(row="total_drag")) == row["value"]
    with xr.open_dataset(out_dir / "increment.nc", group="plane") as plane:
        assert plane["total_pressure_loss"].dims == ("z", "y")
    report = (out_dir / "report.html").read_text("utf-8")
    assert "What cancels" in report and "probe-17" in report and "http" not in report.replace("http-equiv", "")
    before = (out_dir / "increment.json").read_bytes()
    status, out, err = cli("increment", room / "b.nc", room / "a.nc", "--out", out_dir)
    assert status == 2 and "--overwrite" in err and (out_dir / "increment.json").read_bytes() == before
    status, out, err = cli("increment", room / "b.nc", room / "a.nc", "--out", out_dir, "--overwrite")
    assert status == 0 and (out_dir / "increment.json").read_bytes() != before
    assert not (out_dir / "figures").exists()


def test_wrong_input_is_one_line(room, tmp_path, cli):
    for arguments in (
        (room / "a.nc", tmp_path / "none.nc"),
        (room / "a.nc", room / "a" / "survey.toml"),
        (room / "a.nc",),
    ):
        status, out, err = cli("increment", *arguments)
        assert (status, out) == (2, "") and err.count("\n") == 1
    status, _, err = cli("increment", room / "a.nc", room / "b.nc", "--figures", "png")
    assert status == 2 and "--out" in err


def test_a_failed_check_is_status_1(room, tmp_path, cli):
    ledger = open_archive(room / "b.nc")
    failing = dataclasses.replace(ledger.checks[0], verdict="fail", message="it is not closed.")
    write_archive(dataclasses.replace(ledger, checks=(failing, *ledger.checks[1:])), tmp_path / "failed.nc")
    status, out, _ = cli("increment", room / "a.nc", tmp_path / "failed.nc")
    assert status == 1 and "it is not closed" in out
    status, out, _ = cli("repeats", room / "a.nc", tmp_path / "failed.nc")
    assert status == 1


@pytest.fixture(scope="module")
def mean(room):
    return wl.combine([room / f"{name}.nc" for name in ("a", "a2", "a3")])


def test_repeats_average_what_is_each_runs_own(room, mean):
    runs = [open_archive(room / f"{name}.nc") for name in ("a", "a2", "a3")]
    for name in ("lift", "induced_drag"):
        row, values = mean.row(name), [run.row(name).value for run in runs]
        assert min(values) < row.value < max(values)
        weights = mean.repeats["weight"].sel(quantity="value", row=name).values
        assert weights.sum() == pytest.approx(1) and row.value == pytest.approx(float(weights @ values), rel=1e-12)
    budget = {(line.row, line.source): line.standard_uncertainty for line in mean.budget}
    one = runs[0].contributions
    k = one.rows.index("lift")
    speed = next(part for part in one.components if part.source == "tunnel speed")
    # Shared: not averaged down. Own: by √3.
    assert budget["lift", "tunnel speed"] == pytest.approx(abs(speed.linear[0, k]), rel=0.01)
    noise = math.sqrt(one.scatter[0, k, k] / 3)
    assert budget["lift", "random errors and interaction"] == pytest.approx(noise, rel=0.15)
    density = next(part for part in one.components if part.source == "density")
    assert budget["lift", "density"] == pytest.approx(abs(density.linear[0, k]) / math.sqrt(3), rel=0.02)
    edge = [next(p for p in run.contributions.components if p.source.startswith("edge")).linear[0, k] for run in runs]
    assert budget["lift", "edge of the wake region"] == pytest.approx(np.sqrt(np.mean(np.square(edge))), rel=0.3)


def test_a_combined_ledger_is_an_archive_of_its_own(mean, room, tmp_path, cli):
    write_archive(mean, tmp_path / "mean.nc")
    back = open_archive(tmp_path / "mean.nc")
    assert json_text(ledger_json(back)) == json_text(ledger_json(mean))
    assert len(ledger_json(mean)["repeats"]["runs"]) == 3
    status, out, _ = cli("show", tmp_path / "mean.nc")
    assert status == 0 and "The 3 runs" in out and "scatter between the runs" in out
    status, _, err = cli("reduce", tmp_path / "mean.nc", "--out", tmp_path / "again")
    assert status == 2 and "combines several surveys" in err
    found = wl.increment(tmp_path / "mean.nc", room / "b.nc")
    single = wl.increment(room / "a.nc", room / "b.nc")
    assert {line.shared_id for line in found.cancellations} == {"tunnel speed", "probe-17"}
    lift, alone = found.row("lift").value, single.row("lift").value
    assert lift.difference == pytest.approx(alone.difference, rel=0.1)
    between = mean.repeats["between"].sel(quantity="value")
    calm = [name for name in ("profile_drag", "lift", "side_force") if float(between.sel(row=name)) == 0]
    assert calm
    for name in calm:
        own = [
            line.standard_uncertainty
            for increment in (found, single)
            for line in increment.budget
            if (line.row, line.source) == (name, "random errors and interaction (A)")
        ]
        # Three runs instead of one: 1/√3, the sampling of 100 draws apart.
        assert own[0] == pytest.approx(own[1] / math.sqrt(3), rel=0.2)


def test_scatter_beyond_the_declared_one_is_said_and_widens(kit, room, tmp_path):
    runs = [open_archive(room / "a.nc")]
    for number, factor in ((2, 1.03), (3, 0.98)):
        run = open_archive(room / f"a{number}.nc")
        rows = tuple(
            dataclasses.replace(row, value=row.value * factor, coefficient=row.coefficient * factor) for row in run.rows
        )
        runs.append(dataclasses.replace(run, rows=rows))
    mean = wl.combine(runs)
    assert any("larger than declared" in note and "lift" in note for note in mean.notes)
    row = mean.row("lift")
    values = [run.row("lift").value for run in runs]
    s = np.std(values, ddof=1)
    # Where the scatter rules it is s/√3, and U95 comes from t with 2 degrees of freedom.
    shared = 0.01 * row.value
    assert row.standard_uncertainty == pytest.approx(math.hypot(s / math.sqrt(3), shared), rel=0.05)
    assert row.coverage_factor > 2.5 and row.degrees_of_freedom < 10
    between = float(mean.repeats["between"].sel(quantity="value", row="lift"))
    assert between == pytest.approx(s, rel=0.1)
    assert between < float(mean.repeats["between_upper"].sel(quantity="value", row="lift"))
    assert str(mean.repeats["verdict"].sel(row="lift").values) == "larger"


def test_what_cannot_be_combined_is_refused(kit, room, mean, tmp_path):
    with pytest.raises(InputError, match="1 run was given"):
        wl.combine([room / "a.nc"])
    with pytest.raises(InputError, match="same files as run 1"):
        wl.combine([room / "a.nc", room / "a.nc"])
    with pytest.raises(InputError, match="mean of runs itself"):
        wl.combine([room / "b.nc", mean])
    other = survey(kit, tmp_path, seed=9, changes={"model": {"reference_area": "0.2 m^2"}})
    with pytest.raises(InputError, match="reference_area"):
        wl.combine([room / "a.nc", reduce(load(other))])
    with pytest.raises(DataError, match="does not exist"):
        wl.combine([room / "a.nc", room / "none.nc"])


def test_repeats_command(room, tmp_path, cli):
    runs = [room / f"{name}.nc" for name in ("a", "a2", "a3")]
    status, out, err = cli("repeats", *runs, "--out", tmp_path / "mean", "--json")
    assert (status, err) == (0, "")
    assert out == (tmp_path / "mean" / "ledger.json").read_text("utf-8")
    assert {path.name for path in (tmp_path / "mean").iterdir()} == {
        "ledger.nc", "ledger.json", "ledger.csv", "report.html",
    }  # fmt: skip
    assert "The runs" in (tmp_path / "mean" / "report.html").read_text("utf-8")
    assert cli("repeats")[0] == 2


def test_sections_have_increments(kit, tmp_path):
    z = np.linspace(-0.06, 0.06, 61)
    ledgers = []
    for number, depth in enumerate((200.0, 230.0)):
        loss = depth * np.exp(-((z / 0.01) ** 2))
        data = {"z": z, "total_pressure": kit.PRESSURE + 0.5 * kit.DENSITY * kit.SPEED**2 - loss}
        data["static_pressure"] = np.full(z.size, kit.PRESSURE)
        data["total_pressure"] = data["total_pressure"] + 0.2 * np.random.default_rng(number).standard_normal(z.size)
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
            kit.source("noise", "plane.total_pressure", "0.2 Pa", "random"),
            kit.source("static hole", "plane.static_pressure", "5 Pa", shared_id="probe-3"),
        ]
        ledgers.append(reduce(load(kit.write(tmp_path / str(number), data, content)), draws=100))
    found = wl.increment(*ledgers)
    (row,) = found.rows
    assert row.name == "section_drag" and row.resolved and row.value.difference > 0
    assert found.plane.sizes == {"z": 61}
    assert row.value.uncancelled_uncertainty > 2 * row.value.standard_uncertainty
