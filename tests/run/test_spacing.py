"""Terms of the points' spacing, held against exact planes whose error is known."""

import math

import numpy as np
import pytest

from wakeledger.physics.fields.core_response import core_error
from wakeledger.run.chain.outputs import OUTPUTS
from wakeledger.run.load import load
from wakeledger.run.prepared import prepare
from wakeledger.run.uncertainty.draws import terms_of
from wakeledger.run.uncertainty.numerics import RESAMPLING
from wakeledger.run.uncertainty.spacing import CORES, ORDER, RESOLUTION, Cores, observed_order
from wakeledger.synthetic import GaussianLosses, SyntheticWake, vortex_pair

CORE = 0.06
INDUCED = OUTPUTS.index("induced_drag")


def terms(kit, folder, wake, data):
    content = kit.description()
    content["uncertainty.source"] = [kit.source("noise", ["plane.v", "plane.w"], "0.001 m/s", "random")]
    given = load(kit.write(folder, data, content))
    prepared = prepare(given)
    error = prepared.nominal.values["induced_drag"] - wake.truth.rows()["induced_drag"]
    return {term.name: term for term in terms_of(prepared, given)}, error


def pair(kit):
    losses = GaussianLosses(*(np.array(one) for one in ([-0.45, 0.45], [0.0, 0.0], [0.8, 0.8], [0.12, 0.12])))
    return SyntheticWake(kit.REFERENCE, (vortex_pair(circulation=2.5, spacing=0.9, core=CORE),), losses)


@pytest.mark.parametrize("spacing", [0.5, 0.67, 0.8, 1.0, 1.2])
def test_a_pair_of_coarse_cores_is_covered(kit, tmp_path, spacing):
    step = spacing * CORE
    y, z = kit.axes(spacing=step, y=(-1.0 + 0.3 * step, 1.0), z=(-0.66 + 0.2 * step, 0.66))
    wake = pair(kit)
    found, error = terms(kit, tmp_path, wake, kit.table(wake, y, z))
    u = math.hypot(*(found[name].standard_uncertainty[INDUCED] for name in (RESOLUTION, CORES)))
    assert abs(error) <= 1.96 * u < 10 * abs(error)
    # Differences take drag away.
    assert found[CORES].standard_uncertainty[INDUCED] < 0
    assert found[CORES].standard_uncertainty[OUTPUTS.index("total_drag")] == pytest.approx(
        found[CORES].standard_uncertainty[INDUCED]
    )


def test_scattered_points_are_covered_and_moved_by_their_interpolant(kit, tmp_path):
    rng = np.random.default_rng(8)
    y, z = kit.axes(spacing=0.05, y=(-0.9, 0.9), z=(-0.6, 0.5))
    yy, zz = (one.ravel() for one in np.meshgrid(y, z))
    wake = pair(kit)
    data = kit.at(wake, yy + rng.uniform(-0.02, 0.02, yy.size), zz + rng.uniform(-0.02, 0.02, zz.size))
    found, error = terms(kit, tmp_path, wake, data)
    # Half of the points are √2 times as far apart: over 2^(3/2) − 1 instead of 7.
    assert abs(error) <= 1.96 * abs(found[RESOLUTION].standard_uncertainty[INDUCED])
    size = abs(found[RESAMPLING].standard_uncertainty[INDUCED])
    assert 0.05 * abs(error) < size < 20 * abs(error)


def test_response_to_a_core():
    # Differences of tenth order: halving the spacing takes the error down by up to 2¹⁰ = 1024, coarse cores by less.
    assert 300 < core_error(0.5, 0.5) / core_error(0.25, 0.25) < 1024
    assert 64 < core_error(1.0, 1.0) / core_error(0.5, 0.5) < 300
    # Along one axis it costs about half.
    assert core_error(0.8, 0.2) == pytest.approx(core_error(0.8, 0.8) / 2, rel=0.2)
    with pytest.raises(ValueError, match="positive"):
        core_error(0.0, 1.0)


def test_order_is_believed_within_limits():
    near, zero = np.array([1.0, 1.0, 1.0, 1.0, 1.0, 0.0]), np.zeros(6)
    far = np.array([4.0, 64.0, 1.0, -4.0, math.nan, 0.0])
    # Second order; a lucky sixth and a stalled one; none where signs differ or nothing is known.
    np.testing.assert_allclose(observed_order(near, far, zero, zero), [2.0, ORDER, 1.0, ORDER, ORDER, ORDER])
    # Not clear of the noise.
    np.testing.assert_allclose(observed_order(near, far, zero + 0.5, zero), np.full(6, ORDER))
    unknown = np.full(6, math.nan)
    np.testing.assert_allclose(observed_order(near, far, unknown, unknown), np.full(6, ORDER))


def test_no_vortices_no_cores():
    assert Cores().resolved(4)
    assert Cores().per_core(1) == []
