"""Gaps of a survey: the draws of the missing points cover what filling them costs the rows."""

from dataclasses import replace

import numpy as np
import pytest

from wakeledger.run.chain.outputs import OUTPUTS
from wakeledger.run.chain.reduction import Variation
from wakeledger.run.survey import load, prepare
from wakeledger.run.uncertainty.gaps import gap_draws

ROWS = ("profile_drag", "induced_drag", "lift", "side_force")
AT = [OUTPUTS.index(name) for name in ROWS]


@pytest.fixture
def survey(kit, tmp_path):
    def make(data, **changes):
        content = kit.description(**changes)
        content["uncertainty.source"] = [kit.source("noise", ["plane.v", "plane.w"], "0.05 m/s", "random")]
        return prepare(load(kit.write(tmp_path / str(len(list(tmp_path.iterdir()))), data, content)))

    return make


def without(data, missing):
    return {name: column if name in "yz" else np.where(missing, np.nan, column) for name, column in data.items()}


def test_a_hole_over_a_core(kit, survey):
    spacing = 0.0375
    y, z = kit.axes(spacing=spacing, y=(-0.9, 0.9), z=(-0.6, 0.5))
    wake = kit.wing(loading=kit.asymmetric)
    data = kit.table(wake, y, z)
    inside, errors, sizes = [], [], []
    rng = np.random.default_rng(4)
    for _ in range(5):
        place = np.array([wake.cores.y[1], wake.cores.z[1]]) + rng.uniform(-0.04, 0.04, 2)
        missing = (np.abs(data["y"] - place[0]) < 0.8 * spacing) & (np.abs(data["z"] - place[1]) < 0.8 * spacing)
        prepared = survey(without(data, missing))
        chain, nominal = prepared.chain, prepared.nominal
        assert chain.gridding.filled.any()
        whole = survey(data).chain.reduce(vary=Variation(mask=nominal.region.mask))
        error = (nominal.vector - whole.vector)[AT]
        changes = gap_draws(chain, nominal, [])
        u = np.sqrt(np.square(changes).mean(axis=0))[AT]
        inside.append(np.abs(error) <= 2 * u)
        errors.append(error)
        sizes.append(u)
    assert np.mean(inside) >= 0.9
    # Of the size of the errors, not merely beyond them.
    assert np.all(np.square(sizes).mean(axis=0) < 36 * np.square(errors).mean(axis=0))


def test_nothing_missing_has_no_term(kit, survey):
    data = kit.table(kit.wing(), *kit.axes(spacing=0.0375, y=(-0.9, 0.9), z=(-0.6, 0.5)))
    prepared = survey(data)
    assert gap_draws(prepared.chain, prepared.nominal, []) is None


def test_a_drawn_gap_leaves_the_measured_points_alone(kit, survey):
    data = kit.table(kit.wing(), *kit.axes(spacing=0.0375, y=(-0.9, 0.9), z=(-0.6, 0.5)))
    missing = (np.abs(data["y"] - 0.3) < 0.03) & (np.abs(data["z"]) < 0.03)
    prepared = survey(without(data, missing))
    one, two = (gap_draws(prepared.chain, prepared.nominal, [], draws=2, seed=seed) for seed in (1, 1))
    np.testing.assert_array_equal(one, two)
    other = gap_draws(prepared.chain, prepared.nominal, [], draws=2, seed=2)
    assert np.abs(other[:, AT] - one[:, AT]).max() > 0


def test_half_model(kit, survey):
    y, z = kit.axes(spacing=0.0375, y=(0.01875, 0.9), z=(-0.6, 0.5))
    data = kit.table(kit.wing(), y, z)
    missing = (np.abs(data["y"] - 0.45) < 0.05) & (np.abs(data["z"]) < 0.05)
    prepared = survey(without(data, missing), boundary={"kind": "free_air", "reflection": "y"})
    changes = gap_draws(prepared.chain, prepared.nominal, [])
    assert np.isfinite(changes[:, AT[:3]]).all()
    assert np.abs(changes[:, AT[0]]).max() > 0
    assert replace(prepared.chain).gridding.mirror is not None
