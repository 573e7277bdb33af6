"""The numerical term of the window's edge: what is cut there counts, noise that is declared does not count again."""

import numpy as np

from wakeledger.run.load import load
from wakeledger.run.survey import reduce
from wakeledger.run.uncertainty.numerics import EDGE

NOISE = 0.02


def lines(kit, folder, *, window, noise, seed=0):
    """Budget of the lift by source."""
    generator = np.random.default_rng(seed)
    data = kit.table(kit.wing(peak=2.0), *kit.axes(spacing=0.0375, y=(-window, window), z=(-0.6, 0.5)))
    for name in "vw":
        data[name] = data[name] + noise * generator.standard_normal(data[name].size)
    content = kit.description(uncertainty={"draws": 100})
    content["uncertainty.source"] = [kit.source("noise", ["plane.v", "plane.w"], f"{NOISE} m/s", "random")]
    ledger = reduce(load(kit.write(folder, data, content)))
    return {line.source: line.standard_uncertainty for line in ledger.budget if line.row == "lift"}


def test_declared_noise_along_the_edge_is_not_counted_again(kit, tmp_path):
    # The wake region, grown by four spacings, just reaches the window's edge: only noise is there.
    sizes = []
    for seed in range(3):
        found = lines(kit, tmp_path / str(seed), window=0.9, noise=NOISE, seed=seed)
        sizes.append(found.get(EDGE, 0.0) / found["noise"])
    # The strip's own noise alone would make it 0.25 to 0.9 of the noise's line.
    assert max(sizes) < 0.15


def test_a_wake_that_is_cut_has_the_term(kit, tmp_path):
    # The window ends at the wing's tips: half of each tip vortex is outside.
    for name, noise in (("still", 0.0), ("noisy", NOISE)):
        found = lines(kit, tmp_path / name, window=0.6, noise=noise)
        assert found[EDGE] > 5 * found["noise"]
