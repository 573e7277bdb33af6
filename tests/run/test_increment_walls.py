"""Increments and repeats between walls: coefficients on the dynamic pressure corrected for blockage."""

import json
import math
import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

import wakeledger as wl
from wakeledger.ledger.archive import open_archive, write_archive
from wakeledger.ledger.increment import increment_csv, increment_json
from wakeledger.present.increment_text import increment_text
from wakeledger.present.report.increment import increment_html
from wakeledger.run.survey import load, reduce
from wakeledger.synthetic import RectangularDuct

DUCT = RectangularDuct((-0.96, 1.04), (-0.6, 0.68))
WINDOW = (-0.88, 0.88), (-0.36, 0.44)


@pytest.fixture(scope="module")
def tunnel():
    return SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("tunnel_kit.py"))))


@pytest.fixture(scope="module")
def runs(kit, tunnel, tmp_path_factory):
    """Two runs of a wing between walls, and one with more lift."""
    folder = tmp_path_factory.mktemp("walls")
    y, z = tunnel.points(*WINDOW, 0.05)

    def run(name, factor, seed):
        flow = tunnel.wing(DUCT, loading=lambda eta: factor * tunnel.asymmetric(eta))
        data = tunnel.columns(flow.state(y, z), y, z, noise=0.02, seed=seed)
        boundary = tunnel.table(DUCT, solid_blockage={"value": "0.004", "standard_uncertainty": "0.001"})
        content = tunnel.description(kit, boundary, title=name, uncertainty={"draws": 100, "seed": seed})
        content["uncertainty.source"] = [
            kit.source("noise", ["plane.v", "plane.w"], "0.02 m/s", "random"),
            kit.source("pitot", "plane.total_pressure", "1 Pa", shared_id="transducer 3"),
            kit.source("angle", "angle.pitch", "0.1 deg", shared_id="probe"),
        ]
        return reduce(load(kit.write(folder / name, data, content)))

    return {name: run(name, factor, seed) for name, factor, seed in (("a", 1.0, 1), ("a2", 1.0, 2), ("b", 1.04, 3))}


def test_contributions_hold_the_corrected_coefficients(runs):
    kept = runs["a"].contributions
    assert kept.quantities == ("value", "coefficient", "coefficient_corrected")
    u = np.sqrt(np.einsum("qrr->qr", kept.covariance))[2]
    for name in ("profile_drag", "induced_drag", "total_drag", "lift"):
        row = runs["a"].row(name)
        # 100 draws know u within 7 %, and so do both figures.
        assert u[kept.rows.index(name)] == pytest.approx(row.coefficient_corrected_standard_uncertainty, rel=0.2)


def test_corrected_coefficients_have_an_increment_of_their_own(runs, tmp_path):
    for name in ("a", "b"):
        write_archive(runs[name], tmp_path / f"{name}.nc")
    found = wl.increment(tmp_path / "a.nc", tmp_path / "b.nc")
    row = found.row("lift")
    a, b = (runs[name].row("lift") for name in ("a", "b"))
    figure = row.corrected
    assert figure.difference == pytest.approx(b.coefficient_corrected - a.coefficient_corrected, rel=1e-12)
    assert figure.resolved and figure.difference < row.coefficient.difference
    uncancelled = math.hypot(*(one.coefficient_corrected_standard_uncertainty for one in (a, b)))
    assert figure.uncancelled_uncertainty == pytest.approx(uncancelled, rel=1e-12)
    assert 0 < figure.standard_uncertainty < uncancelled
    assert 1.8 < figure.coverage_factor < 2.1
    # The blockage scales the figure itself: as a share both are known alike, but for the correction's own doubt.
    assert figure.standard_uncertainty == pytest.approx(row.coefficient.standard_uncertainty, rel=0.5)
    entry = next(one for one in increment_json(found)["rows"] if one["name"] == "lift")
    assert entry["coefficient_corrected"] == pytest.approx(figure.difference, rel=1e-12)
    assert entry["coefficient_corrected_a"] == pytest.approx(a.coefficient_corrected, rel=1e-12)
    assert entry["coefficient_corrected_expanded_uncertainty"] == pytest.approx(figure.expanded_uncertainty, rel=1e-12)
    json.dumps(entry, allow_nan=False)
    assert "coefficient_corrected_expanded_uncertainty" in increment_csv(found).splitlines()[0]
    assert float(found.to_dataset()["coefficient_corrected"].sel(row="lift")) == figure.difference
    text = increment_text(found)
    assert "corrected for blockage" in text
    assert "corrected for blockage" in increment_html(found, {})


def test_a_ledger_that_does_not_know_it_leaves_its_uncertainty_unknown(runs):
    import dataclasses

    older = runs["a"].contributions.of(runs["a"].contributions.rows, quantities=2)
    found = wl.increment(dataclasses.replace(runs["a"], contributions=older), runs["b"])
    figure = found.row("lift").corrected
    assert math.isfinite(figure.difference) and math.isnan(figure.standard_uncertainty) and figure.resolved is None
    json.dumps(increment_json(found), allow_nan=False)
    assert "unknown" in increment_text(found)


def test_free_air_has_none(kit, tunnel, runs, tmp_path):
    y, z = tunnel.points(*WINDOW, 0.05)
    data = tunnel.columns(tunnel.wing().state(y, z), y, z, noise=0.02)
    content = tunnel.description(kit, {"kind": "free_air"}, uncertainty={"draws": 100})
    content["uncertainty.source"] = [kit.source("noise", ["plane.v", "plane.w"], "0.02 m/s", "random")]
    free = reduce(load(kit.write(tmp_path, data, content)))
    assert free.contributions.quantities == ("value", "coefficient")
    found = wl.increment(free, runs["a"])
    assert found.row("lift").corrected is None
    assert "coefficient_corrected" not in increment_json(found)["rows"][0]
    assert "corrected" not in increment_csv(found).splitlines()[0]


def test_repeats_have_a_mean_of_them(runs, tmp_path):
    mean = wl.combine([runs["a"], runs["a2"]])
    row = mean.row("lift")
    ends = sorted(runs[name].row("lift").coefficient_corrected for name in ("a", "a2"))
    assert ends[0] <= row.coefficient_corrected <= ends[1]
    one = runs["a"].row("lift").coefficient_corrected_standard_uncertainty
    assert 0.3 * one < row.coefficient_corrected_standard_uncertainty < 1.6 * one
    write_archive(mean, tmp_path / "mean.nc")
    found = wl.increment(open_archive(tmp_path / "mean.nc"), runs["b"])
    assert found.row("lift").corrected.resolved
