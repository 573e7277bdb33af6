"""A ledger is reduced again from its archive alone, to the last digit."""

import json
import math
import shutil

import numpy as np
import pytest

from wakeledger.cli import exits, wakeledger
from wakeledger.ledger.archive import open_archive, write_archive
from wakeledger.ledger.tabular import json_text, ledger_json
from wakeledger.run.survey import load, reduce

SOURCES = [
    {"name": "noise", "applies_to": ["plane.v", "plane.w"], "effect": "random", "standard_uncertainty": "0.1 m/s"},
    {"name": "rows", "applies_to": ["plane.total_pressure"], "effect": "per_row", "standard_uncertainty": "1 Pa"},
    {"name": "speed", "applies_to": ["reference.speed"], "effect": "systematic", "standard_uncertainty": "0.2 %"},
    {"name": "place", "applies_to": ["position.y"], "effect": "random", "standard_uncertainty": "0.3 mm"},
]


def recorded(kit, axes, *, form):
    """A noisy plane in one of several forms."""
    generator = np.random.default_rng(7)
    wake = kit.wing(loading=kit.asymmetric)
    data = kit.table(wake, *axes)
    for name, sigma in {"v": 0.1, "w": 0.1, "total_pressure": 1.0}.items():
        data[name] = data[name] + sigma * generator.standard_normal(data[name].size)
    for number in (200, 201, 900):
        for name in ("u", "v", "w", "total_pressure", "static_pressure"):
            data[name][number] = math.nan
    if form == "shuffled":
        order = generator.permutation(data["y"].size)
        data = {name: array[order] for name, array in data.items()}
    return data


@pytest.fixture(scope="module", params=["plain", "shuffled", "uneven", "axes and units"])
def kept(request, kit, tmp_path_factory):
    y, z = kit.axes(spacing=0.0375, y=(-0.9, 0.9), z=(-0.6, 0.5))
    if request.param == "uneven":
        y = np.concatenate([y[:4:2], y[4:-4], y[-4::2]])
    data = recorded(kit, (y, z), form=request.param)
    plane = {}
    if request.param == "axes and units":
        data = {**data, "y": data["z"] / 0.0254, "z": -1e3 * data["y"], "v": data["w"], "w": -data["v"]}
        plane = {
            "columns": kit.columns(y={"column": "y", "unit": "inch"}, z={"column": "z", "unit": "mm"}),
            "axes": {"y": "+z", "z": "-y", "pitch_offset": "0.3 deg"},
        }
    content = kit.description(
        test={"run": "117", "notes": 'quotes " and ümlauts'}, uncertainty={"seed": 5, "draws": 100}, plane=plane
    ) | {"uncertainty.source": SOURCES}
    content["compare"] = [{"name": "balance", "row": "total_drag", "value": "4.8 N", "standard_uncertainty": "0.1 N"}]
    folder = tmp_path_factory.mktemp("kept")
    ledger = reduce(load(kit.write(folder, data, content)), draws=100)
    archive = folder / "elsewhere" / "ledger.nc"
    archive.parent.mkdir()
    write_archive(ledger, archive)
    for name in ("plane.csv", "survey.toml"):
        (folder / name).unlink()
    return ledger, archive


def same_records(first, second):
    assert len(first) == len(second)
    for one, two in zip(first, second, strict=True):
        for name, value in vars(one).items():
            other = getattr(two, name)
            if isinstance(value, float):
                assert value == other or (math.isnan(value) and math.isnan(other)), (one, two, name)
            else:
                assert value == other


def test_archive_is_reduced_to_the_same_numbers(kept):
    ledger, archive = kept
    again = reduce(load(archive), draws=100)
    for table in ("rows", "estimates", "comparisons", "budget", "checks"):
        same_records(getattr(ledger, table), getattr(again, table))
    np.testing.assert_array_equal(again.covariance, ledger.covariance)
    assert again.survey_text == ledger.survey_text
    assert dict(again.inputs) == dict(ledger.inputs)
    for name in ledger.plane.data_vars:
        np.testing.assert_array_equal(again.plane[name].values, ledger.plane[name].values)


def test_archive_reads_back_whole(kept):
    ledger, archive = kept
    read = open_archive(archive)
    for table in ("rows", "estimates", "comparisons", "budget", "checks"):
        same_records(getattr(ledger, table), getattr(read, table))
    assert read.notes == ledger.notes
    assert dict(read.test) == dict(ledger.test)
    for name, channel in ledger.raw.channels.items():
        np.testing.assert_array_equal(read.raw.channels[name].values, channel.values)
    np.testing.assert_array_equal(read.raw.y, ledger.raw.y)
    np.testing.assert_array_equal(read.raw.line, ledger.raw.line)


def test_json_round_trip(kept):
    ledger, archive = kept
    text = json_text(ledger_json(ledger))
    document = json.loads(text)
    assert json_text(ledger_json(open_archive(archive))) == text
    assert document["format"] == 1
    rows = {entry["name"]: entry for entry in document["rows"]}
    for row in ledger.rows:
        assert rows[row.name]["value"] == row.value
        assert rows[row.name]["standard_uncertainty"] == row.standard_uncertainty
    assert {entry["method"] for entry in document["estimates"]} >= {"energy_area", "wake_line", "vortex_sum"}
    assert [entry["name"] for entry in document["comparisons"]] == ["balance"]
    assert "NaN" not in text


def test_two_runs_are_one(kit, tmp_path):
    axes = kit.axes(spacing=0.0375, y=(-0.9, 0.9), z=(-0.6, 0.5))
    content = kit.description(uncertainty={"seed": 5}) | {"uncertainty.source": SOURCES}
    path = kit.write(tmp_path, recorded(kit, axes, form="plain"), content)
    first, second = (reduce(load(path), draws=100) for _ in range(2))
    same_records(first.rows, second.rows)
    other = kit.write(tmp_path / "b", recorded(kit, axes, form="plain"), content | {"uncertainty": {"seed": 6}})
    third = reduce(load(other), draws=100)
    assert third.row("lift").value == first.row("lift").value
    assert third.row("lift").standard_uncertainty != first.row("lift").standard_uncertainty


def test_command_line_reduces_its_own_archive(kit, tmp_path):
    axes = kit.axes(spacing=0.0375, y=(-0.9, 0.9), z=(-0.6, 0.5))
    content = kit.description(uncertainty={"seed": 5, "draws": 100}) | {"uncertainty.source": SOURCES[:1]}
    path = kit.write(tmp_path / "survey", recorded(kit, axes, form="plain"), content)
    one, two = tmp_path / "one", tmp_path / "two"
    assert exits.run(wakeledger, ["reduce", str(path), "--out", str(one), "--quiet", "--draws", "100"]) == 0
    moved = shutil.copy(one / "ledger.nc", tmp_path / "renamed.nc")
    shutil.rmtree(tmp_path / "survey")
    assert exits.run(wakeledger, ["reduce", str(moved), "--out", str(two), "--quiet", "--draws", "100"]) == 0
    documents = [json.loads((folder / "ledger.json").read_text()) for folder in (one, two)]
    for key in ("rows", "estimates", "comparisons", "budget", "checks", "compressible", "title", "test"):
        assert documents[0][key] == documents[1][key], key
    assert (one / "ledger.csv").read_text() == (two / "ledger.csv").read_text()
