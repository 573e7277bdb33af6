"""Noise bias of the wake line's quadratic form, against the form itself taken at every point."""

from __future__ import annotations

import numpy as np
import pytest

from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields.path_form import PathForm, path_fields, path_noise_bias
from wakeledger.physics.fields.path_integrals import outer_flow


def form_of(nz: int, ny: int) -> PathForm:
    grid = UniformGrid(-0.4, -0.2, 0.05, 0.04, ny, nz)
    rows, columns = np.mgrid[0 : nz - 1, 0 : ny - 1]
    cells = ((rows - nz / 2) / (nz / 4)) ** 2 + ((columns - ny / 2.2) / (ny / 3.5)) ** 2 < 1
    cells[nz // 2, 0] = True
    return PathForm(grid, cells, outer_flow(grid, (nz // 4, 3 * nz // 4, ny // 5, 4 * ny // 5)))


def forms(form: PathForm, v: np.ndarray, w: np.ndarray) -> np.ndarray:
    """ΣΓψ of each field."""
    fields = path_fields(form, v, w)
    return (fields.circulation * fields.inside * fields.stream_function).sum(axis=(-2, -1))


@pytest.mark.parametrize(("nz", "ny"), [(15, 21), (26, 13), (9, 9)])
def test_noise_bias_is_the_sum_over_points(nz: int, ny: int) -> None:
    """Independent noise adds the variance at each point times what a unit velocity there alone gives."""
    form = form_of(nz, ny)
    one_by_one = np.eye(nz * ny).reshape(-1, nz, ny)
    none = np.zeros_like(one_by_one)
    of_v, of_w = (forms(form, *pair).reshape(nz, ny) for pair in ((one_by_one, none), (none, one_by_one)))
    rng = np.random.default_rng(12)
    for variance_v, variance_w in (rng.uniform(0.5, 2, (2, nz, ny)), np.ones((2, nz, ny)) * [[[0.3]], [[0.8]]]):
        expected = float((variance_v * of_v).sum() + (variance_w * of_w).sum())
        found = path_noise_bias(form, variance_v, variance_w)
        # Rounding of sums over all points, whose terms are some hundred times larger than what is left of them.
        assert found == pytest.approx(expected, rel=1e-10)
        assert abs(expected) > 1e-6
