"""What the noise in the data makes of the rows by itself, where the survey file declares none."""

import math
import re

import numpy as np
import pytest

from wakeledger.confidence.noise import estimate_noise
from wakeledger.run.survey import load, reduce

SIZES = {"u": 0.12, "v": 0.12, "w": 0.12, "total_pressure": 1.5, "static_pressure": 1.5}
UNITS = {"u": "m/s", "v": "m/s", "w": "m/s", "total_pressure": "Pa", "static_pressure": "Pa"}
ROWS = ("profile_drag", "induced_drag", "total_drag")


@pytest.fixture(scope="module")
def data(kit):
    exact = kit.table(kit.wing(), *kit.axes(spacing=0.05, y=(-1.1, 1.1), z=(-0.7, 0.7)))
    rng = np.random.default_rng(5)
    return {name: values + SIZES.get(name, 0.0) * rng.standard_normal(values.size) for name, values in exact.items()}


@pytest.fixture(scope="module")
def bare(kit, data, tmp_path_factory):
    return reduce(load(kit.write(tmp_path_factory.mktemp("bare"), data, kit.description())))


def figures(ledger):
    """Standard uncertainties of the note, in counts, by row."""
    (note,) = (note for note in ledger.notes if "noise that the data show makes" in note)
    found = re.findall(r"([a-z ]+?) ([\d.]+) counts", note.split("by itself", 1)[1])
    return note, {name.strip(" ,:and").replace(" ", "_"): float(value) for name, value in found}


def test_rows_stay_unknown_and_the_note_gives_what_noise_does(bare):
    note, found = figures(bare)
    assert set(found) == set(ROWS)
    assert all(math.isnan(row.standard_uncertainty) for row in bare.rows)
    assert "v 0.12 m/s" in note and "total pressure 1.5 Pa" in note
    assert all(value > 0 for value in found.values())


def test_it_is_what_a_declared_source_of_that_size_gives(kit, data, bare, tmp_path):
    _, found = figures(bare)
    sizes = {name: shown_by(data, name, bare) for name in SIZES}
    content = kit.description()
    content["uncertainty.source"] = [
        kit.source(f"noise of {name}", f"plane.{name}", f"{size!r} {UNITS[name]}", "random")
        for name, size in sizes.items()
    ]
    ledger = reduce(load(kit.write(tmp_path, data, content)), draws=50)
    assert not any("noise that the data show makes" in note for note in ledger.notes)
    scale = 1e4 / (0.5 * kit.DENSITY * kit.SPEED**2 * kit.AREA)
    for one in ledger.propagation:
        if one.row in found:
            # Printed to two decimals of a count.
            expected = scale * one.linear_standard_uncertainty
            assert found[one.row] == pytest.approx(expected, rel=1e-3, abs=0.006), one.row
    lift = next(one for one in ledger.propagation if one.row == "lift").linear_standard_uncertainty
    assert f"lift {lift / ledger.row('lift').value:.2%}" in figures(bare)[0]


def shown_by(data, name, ledger):
    """Noise of a channel as the plane shows it outside the wake."""
    mask = ledger.plane["wake_mask"].values.astype(bool)
    return float(estimate_noise(data[name].reshape(mask.shape), mask=mask).standard_deviation)


def test_noise_beside_other_sources_is_told_to_be_in_no_uncertainty(kit, data, tmp_path):
    content = kit.description()
    content["uncertainty.source"] = [kit.source("zero", "plane.static_pressure", "1 Pa")]
    ledger = reduce(load(kit.write(tmp_path, data, content)), draws=50)
    note, found = figures(ledger)
    assert set(found) == set(ROWS) and "in no uncertainty" in note
    assert all(math.isfinite(row.standard_uncertainty) for row in ledger.rows if row.name in ROWS)


def test_flow_angles_that_were_measured_are_among_it(kit, data, tmp_path):
    speed = np.sqrt(data["u"] ** 2 + data["v"] ** 2 + data["w"] ** 2)
    made = {name: data[name] for name in ("y", "z", "total_pressure", "static_pressure")}
    made |= {"pitch": np.degrees(np.arctan2(data["w"], data["u"])), "yaw": np.degrees(np.arcsin(data["v"] / speed))}
    angles = {name: {"column": name, "unit": "deg"} for name in ("pitch", "yaw")}
    columns = kit.columns(u=None, v=None, w=None, **angles)
    ledger = reduce(load(kit.write(tmp_path, made, kit.description(plane={"columns": columns}))))
    note, found = figures(ledger)
    # 0.12 m/s of 40 m/s.
    assert "pitch 0.17 deg" in note
    assert found["induced_drag"] > 0
