"""Noise that the data show against noise that the survey file declares: what is wrong is reported, right is not.

Rates over seeds on the surveys of this file: twice or half the declared noise, and noise of one or two cells' length
declared as each point's own, are reported in every one; right declarations in none. A length of half a cell correlates
neighbours by 0.14 and mostly goes unseen.
"""

import math
import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

from wakeledger.confidence.correlation import correlated_field
from wakeledger.confidence.noise import estimate_noise
from wakeledger.run.survey import load, prepare
from wakeledger.run.uncertainty.noise_findings import shown_noise

SPACING = 0.0375
SIZES = {"v": 0.12, "w": 0.12, "total_pressure": 1.5}
SEEDS = 8


@pytest.fixture(scope="module")
def exact(kit):
    return kit.table(kit.wing(), *kit.axes(spacing=SPACING, y=(-0.95, 0.95), z=(-0.7, 0.65)))


@pytest.fixture
def survey(kit, tmp_path):
    def make(data, *, declared=True, extra=(), **changes):
        content = kit.description(**changes)
        names = {"v": "m/s", "w": "m/s", "total_pressure": "Pa"}
        content["uncertainty.source"] = [
            kit.source(f"noise of {name}", f"plane.{name}", f"{SIZES[name]} {unit}", "random")
            for name, unit in names.items()
            if declared
        ] + list(extra)
        if not declared and not extra:
            content["uncertainty.source"] = [kit.source("zero", "plane.static_pressure", "1 Pa")]
        return prepare(load(kit.write(tmp_path / str(len(list(tmp_path.iterdir()))), data, content)))

    return make


def noisy(exact, seed, *, factor=1.0, length=None):
    rng = np.random.default_rng([seed, 3])
    places = np.stack([exact["y"], exact["z"]], axis=1)
    data = dict(exact)
    for name, size in SIZES.items():
        errors = rng.standard_normal(exact["y"].size)
        if length is not None:
            latents, expand = correlated_field(places, length)
            errors = expand(rng.standard_normal((1, latents)))[0]
        data[name] = exact[name] + factor * size * errors
    return data


def reported(prepared):
    size = any("is not the declared one" in note for note in prepared.notes)
    together = any("Neighbouring points share their noise" in note for note in prepared.notes)
    return size, together


def rates(exact, survey, **errors):
    found = np.array([reported(survey(noisy(exact, seed, **errors))) for seed in range(SEEDS)])
    return found.mean(axis=0)


def test_right_declarations_raise_no_alarm(exact, survey):
    np.testing.assert_array_equal(rates(exact, survey), [0.0, 0.0])


@pytest.mark.parametrize("factor", [2.0, 0.5])
def test_noise_wrong_by_two_is_reported(exact, survey, factor):
    size, together = rates(exact, survey, factor=factor)
    assert size == 1.0
    assert together == 0.0


@pytest.mark.parametrize("cells", [1.0, 2.0])
def test_correlated_noise_declared_as_white_is_reported(exact, survey, cells):
    size, together = rates(exact, survey, length=cells * SPACING)
    assert together == 1.0
    # Its size is read with the correlation that was found, and is right.
    assert size <= 1 / SEEDS


def test_declared_correlation_is_no_news(kit, exact, survey):
    names = {"v": "m/s", "w": "m/s"}
    smooth = [
        kit.source(f"smooth {name}", f"plane.{name}", f"{SIZES[name]} {unit}", "random", correlation_length="37.5 mm")
        for name, unit in names.items()
    ]
    prepared = survey(noisy(exact, 1, length=SPACING), declared=False, extra=smooth)
    assert not any(reported(prepared))


def test_undeclared_noise_is_taken_from_the_data_and_called_so(exact, survey):
    prepared = survey(noisy(exact, 2), declared=False)
    assert [one.name for one in prepared.noises] == ["noise in the data"]
    assert any("No noise of the crossflow was declared" in note for note in prepared.notes)
    # About 900 points: a standard deviation within 3 %; four times that.
    assert math.sqrt(prepared.noises[0].outer_variance[0]) == pytest.approx(SIZES["v"], rel=0.12)
    assert prepared.chain.frozen.bias["induced_drag"] > 0


def test_scattered_points_are_asked_too(kit, survey):
    rng = np.random.default_rng(6)
    places = rng.uniform((-0.95, -0.7), (0.95, 0.65), (1500, 2)).T
    exact = kit.at(kit.wing(), *places)
    right = survey(noisy(exact, 1))
    assert not any(reported(right))
    assert shown_noise(right.chain, right.nominal)["w"].deviation == pytest.approx(SIZES["w"], rel=0.15)
    assert reported(survey(noisy(exact, 1, factor=2.0)))[0]
    # None declared: what the data show stands in, and its bias is what declared noise would have had.
    bare = survey(noisy(exact, 1), declared=False)
    assert [one.name for one in bare.noises] == ["noise in the data"]
    expected = right.chain.frozen.bias["induced_drag"]
    assert bare.chain.frozen.bias["induced_drag"] == pytest.approx(expected, rel=0.3)


def test_the_mirrored_half_is_no_evidence(kit, tmp_path):
    # Points half a spacing off the plane: the two lines beside it share their noise, because they are one line.
    tunnel = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("tunnel_kit.py"))))
    flow = tunnel.wing(None, "y")
    y, z = tunnel.points((0.02, 0.98), (-0.6, 0.68))
    alarms = 0
    for seed in range(SEEDS):
        data = tunnel.columns(flow.state(y, z), y, z, noise=0.12, seed=seed)
        content = tunnel.description(kit, {"kind": "free_air", "reflection": "y"})
        names = ["plane.u", "plane.v", "plane.w"]
        content["uncertainty.source"] = [kit.source("noise", names, "0.12 m/s", "random")]
        prepared = prepare(load(kit.write(tmp_path / str(seed), data, content)))
        shown = shown_noise(prepared.chain, prepared.nominal)["w"]
        assert shown.deviation == pytest.approx(0.12, rel=0.3)
        grid = prepared.nominal.flow.grid
        half, wake = (field[:, grid.y > 0] for field in (prepared.nominal.flow.w, prepared.nominal.region.mask))
        assert shown.size == pytest.approx(estimate_noise(half, mask=wake).effective_size)
        alarms += any(reported(prepared))
    assert alarms == 0
