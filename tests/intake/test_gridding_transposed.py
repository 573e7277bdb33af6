"""The transpose of a gridding against its definition: Σ w apply(x) = Σ transposed(w) x for any x and w."""

import numpy as np
import pytest

from wakeledger.intake.gridding import make_gridding
from wakeledger.intake.gridding.mirror import make_mirrored
from wakeledger.intake.gridding.window import covered_window

#: Both sides are sums of some 1e4 products of order 1.
ROUNDING = 1e-11


def tensor(y, z):
    yy, zz = np.meshgrid(y, z)
    return yy.ravel(), zz.ravel()


def uneven(n, rng):
    return np.cumsum(rng.uniform(0.6, 1.4, n))


def whole(y, z, usable, row):
    return make_gridding(y, z, usable, row=row)


def cases():
    rng = np.random.default_rng(4)
    y, z = tensor(np.arange(24.0), np.arange(17.0))
    holes = rng.random(y.size) > 0.1
    yield "uniform", make_gridding(y, z, np.ones(y.size, dtype=bool))
    yield "gaps", make_gridding(y, z, holes)
    twice = np.concatenate([y, y[:40]]), np.concatenate([z, z[:40]])
    yield "repeated", make_gridding(*twice, np.concatenate([holes, np.ones(40, dtype=bool)]))
    y, z = tensor(uneven(22, rng), uneven(18, rng))
    yield "resampled", make_gridding(y, z, rng.random(y.size) > 0.05, spacing=0.5)
    y, z = rng.uniform(0, 20, (2, 500))
    yield "scattered", make_gridding(y, z, rng.random(500) > 0.05)
    r, t = np.meshgrid(np.linspace(0.5, 10, 20), np.linspace(0, 2 * np.pi, 40, endpoint=False))
    polar = (r * np.cos(t)).ravel(), (r * np.sin(t)).ravel()
    yield "cut", covered_window(make_gridding(*polar, np.ones(r.size, dtype=bool)))
    y, z = tensor(np.arange(0.0, 14.0), np.arange(15.0))
    yield "mirrored", make_mirrored(whole, y, z, rng.random(y.size) > 0.05, None, axis="y")
    y, z = tensor(np.arange(2.5, 14.0), np.arange(15.0))
    yield "mirrored with an inboard gap", make_mirrored(whole, y, z, np.ones(y.size, dtype=bool), None, axis="y")


@pytest.mark.parametrize(("name", "gridding"), list(cases()), ids=lambda value: value if isinstance(value, str) else "")
@pytest.mark.parametrize("odd", [False, True])
def test_transpose(name, gridding, odd):
    rng = np.random.default_rng(11)
    weights = rng.standard_normal((3, *gridding.grid.shape))
    values = rng.standard_normal((2, gridding.n))
    fields = gridding.apply(values, odd=odd)
    back = gridding.transposed(weights, odd=odd)
    assert back.shape == (3, gridding.n)
    expected = np.einsum("kzy,jzy->kj", weights, fields)
    np.testing.assert_allclose(back @ values.T, expected, rtol=0, atol=ROUNDING * np.abs(expected).max() * 10)
    assert np.abs(expected).min() > 0


def test_wrong_shape_is_refused():
    gridding = make_gridding(*tensor(np.arange(6.0), np.arange(7.0)), np.ones(42, dtype=bool))
    with pytest.raises(ValueError, match="last axes"):
        gridding.transposed(np.zeros((2, 6, 7)))
