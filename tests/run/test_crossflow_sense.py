"""A crossflow with exchanged or reversed components is told; wakes, noise and near planes are not called so."""

from types import SimpleNamespace

import numpy as np
import pytest
from tests.run import survey_kit as kit

from wakeledger.core.grid import UniformGrid
from wakeledger.run.crossflow_sense import crossflow_notes
from wakeledger.run.survey import inspect, load


def said(folder, *, noise=0.0, near=False, change=lambda v, w: (v, w), **content):
    data = kit.table(kit.wing_and_tail() if near else kit.wing(loading=kit.asymmetric), *kit.axes())
    rng = np.random.default_rng(5)
    v, w = (data[name] + noise * rng.standard_normal(data[name].size) for name in "vw")
    data["v"], data["w"] = change(v, w)
    notes = inspect(load(kit.write(folder, data, kit.description(**content)))).notes
    return [note for note in notes if "own vorticity" in note]


@pytest.mark.parametrize("noise", [0.0, 0.16])
def test_a_wake_is_not_called_so(tmp_path, noise):
    assert said(tmp_path / "a", noise=noise) == []
    assert said(tmp_path / "b", noise=noise, near=True) == []
    # The whole flow mirrored is a wake with its lift downwards.
    assert said(tmp_path / "c", noise=noise, change=lambda v, w: (-v, -w)) == []


@pytest.mark.parametrize(
    "change",
    [lambda v, w: (v, -w), lambda v, w: (-v, w), lambda v, w: (w, v)],
    ids=["w reversed", "v reversed", "exchanged"],
)
@pytest.mark.parametrize("noise", [0.0, 0.16])
def test_components_exchanged_or_reversed_are_told(tmp_path, change, noise):
    (sentence,) = said(tmp_path, noise=noise, change=change)
    assert "[plane.axes]" in sentence


def test_noise_alone_is_not_judged(tmp_path):
    rng = np.random.default_rng(6)
    assert (
        said(tmp_path, change=lambda v, w: (0.2 * rng.standard_normal(v.size), 0.2 * rng.standard_normal(w.size))) == []
    )


def test_a_plane_too_small_to_tell_its_noise_is_not_judged():
    """Eight lines have 16 sixth differences along each axis, of 50 that noise takes; a strain makes no vorticity."""
    grid = UniformGrid(-0.1, -0.1, 0.02, 0.02, 8, 8)
    y, z = grid.mesh()
    nominal = SimpleNamespace(
        flow=SimpleNamespace(grid=grid, v=y, w=-z), forces=SimpleNamespace(stream_function=np.zeros(grid.shape))
    )
    assert crossflow_notes(nominal) == []
