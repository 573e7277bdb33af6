"""What noise adds to a quadratic form given by its modes, against the dense trace."""

import numpy as np
import pytest

from wakeledger.confidence.correlation import squared_exponential
from wakeledger.confidence.noise_bias import modal_noise_bias

RNG = np.random.default_rng(31)
NZ, NY = 9, 12
MASK = np.where(np.add.outer(np.arange(NZ), np.arange(NY)) % 5 > 0, RNG.random((NZ, NY)), 0.0)
MODES = RNG.normal(size=(4, NZ, NY))
STRENGTHS = np.array([2.0, -0.7, 0.3, 0.05])
LEFT_Z, LEFT_Y = RNG.normal(size=(NZ, 7)), RNG.normal(size=(NY, 10))


@pytest.mark.parametrize("maps", [False, True])
@pytest.mark.parametrize("correlated", [False, True])
def test_equals_the_dense_trace(maps, correlated):
    variance = RNG.uniform(0.5, 2.0, (7, 10)) if maps else np.array(0.6)
    correlation = tuple(squared_exponential(np.arange(n) * 1.0, 1.3) for n in (7, 10)) if correlated else (None, None)
    kz, ky = (np.eye(n) if k is None else k for n, k in zip((7, 10), correlation, strict=True))
    s = np.sqrt(np.broadcast_to(variance, (7, 10))).ravel()
    operator = np.kron(LEFT_Z, LEFT_Y)
    covariance = operator @ (np.kron(kz, ky) * np.outer(s, s)) @ operator.T
    held = (MODES * MASK).reshape(4, -1)
    expected = 0.5 * float(np.einsum("r,ri,ij,rj->", STRENGTHS, held, covariance, held))
    found = modal_noise_bias(LEFT_Z, LEFT_Y, STRENGTHS, MODES, MASK, variance, correlation=correlation)
    # Rounding of sums over some hundred points.
    assert found == pytest.approx(expected, rel=1e-12)
    assert abs(expected) > 1


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"modes": MODES[:, 1:]}, "modes have shape"),
        ({"strengths": STRENGTHS[1:]}, "strengths"),
        ({"left_z": LEFT_Z[1:]}, "operators give"),
        ({"variance": np.ones((2, 2))}, "variance has shape"),
    ],
)
def test_shapes_are_checked(change, message):
    arguments = {
        "left_z": LEFT_Z,
        "left_y": LEFT_Y,
        "strengths": STRENGTHS,
        "modes": MODES,
        "mask": MASK,
        "variance": 1.0,
    } | change
    with pytest.raises(ValueError, match=message):
        modal_noise_bias(**arguments)
