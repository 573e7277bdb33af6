"""Planes at several stations: what the ground mirrors is no further vortex, and errors of rows are each plane's own."""

import numpy as np
import pytest

from wakeledger.physics.methods.station_fit import vortex_decay
from wakeledger.run.load import load
from wakeledger.run.survey import reduce
from wakeledger.synthetic import GaussianLosses, SyntheticWake, vortex_pair

CIRCULATION, SPACING, HEIGHT = 4.0, 0.8, 0.5
STATIONS, CORES = (500.0, 1500.0), (0.055, 0.075)


def above_ground(kit, core):
    """A pair above the ground, with the loss of its cores, and its images."""
    pair = vortex_pair(circulation=CIRCULATION, spacing=SPACING, core=core).shifted(z=HEIGHT)
    places = np.array([-SPACING, SPACING, -SPACING, SPACING]) / 2
    heights = np.array([HEIGHT, HEIGHT, -HEIGHT, -HEIGHT])
    losses = GaussianLosses(places, heights, np.full(4, 2.0), np.full(4, core))
    return SyntheticWake(kit.REFERENCE, (pair, pair.mirrored("z")), losses)


def written(kit, folder, wakes, axes, **changes):
    folder.mkdir(parents=True, exist_ok=True)
    for k, wake in enumerate(wakes, 1):
        kit.write_csv(folder / f"plane_{k}.csv", kit.table(wake, *axes))
    given = kit.description(plane=None, **changes)
    given["plane"] = [
        {"file": f"plane_{k}.csv", "station": f"{x:g} m", "primary": "total_pressure", "columns": kit.columns()}
        for k, x in enumerate(STATIONS, 1)
    ]
    path = folder / "survey.toml"
    path.write_text(kit.toml(given), encoding="utf-8")
    return path


def test_images_below_ground_do_not_decay(kit, tmp_path):
    axes = kit.axes(spacing=0.03, y=(-0.96, 0.96), z=(0.0, 1.08))
    boundary = {"kind": "free_air", "reflection": "z"}
    sources = [kit.source("pressure noise", ["plane.total_pressure"], "0.1 Pa", effect="random")]
    changes = {"boundary": boundary, "uncertainty": {"draws": 100}, "uncertainty.source": sources}
    found = reduce(load(written(kit, tmp_path, [above_ground(kit, core) for core in CORES], axes, **changes)))
    table = found.stations[0].vortices
    assert table.sizes["vortex"] == 4
    expected = vortex_decay(
        np.array(STATIONS),
        found.combined.diffusivity,
        circulation=np.array([-CIRCULATION, CIRCULATION]),
        core=np.full(2, CORES[0]),
        core_station=STATIONS[0],
        reference=kit.REFERENCE,
    )[0]
    # The fit's mean decay is not quite that of its mean diffusivity; with the images it would be twice as large.
    assert found.combined.decay == pytest.approx(tuple(expected), rel=0.1)


def test_errors_of_rows_with_an_identity_are_each_planes_own(kit, tmp_path):
    """An identity that cannot be followed from point to point makes no error common to two planes."""
    # Eight rows: so few errors are followed one by one.
    axes = kit.axes(spacing=0.12, y=(-0.96, 0.96), z=(-0.42, 0.42))
    pair = vortex_pair(circulation=CIRCULATION, spacing=SPACING, core=0.2)
    losses = GaussianLosses(np.array([-0.4, 0.4]), np.zeros(2), np.full(2, 2.0), np.full(2, 0.2))
    wakes = [SyntheticWake(kit.REFERENCE, (pair,), losses)] * 2
    drift = kit.source("drift", "plane.total_pressure", "2 Pa", effect="per_row", shared_id="reference")
    changes = {"uncertainty": {"draws": 100}, "uncertainty.source": [drift]}
    found = reduce(load(written(kit, tmp_path, wakes, axes, **changes)))

    def size(ledger):
        lines = [one for one in ledger.budget if (one.row, one.source) == ("profile_drag", "drift")]
        return lines[0].standard_uncertainty

    # Two planes alike, each with errors of its own: down by the root of two, but for the draws' per cent.
    assert size(found) == pytest.approx(size(found.stations[0]) / np.sqrt(2), rel=0.05)
