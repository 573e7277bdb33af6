"""What noise adds to a quadratic form, against the dense trace and against paired simulation."""

import numpy as np
import pytest
from scipy import sparse

from wakeledger.confidence.correlation import squared_exponential
from wakeledger.confidence.noise_bias import quadratic_noise_bias

RNG = np.random.default_rng(17)


def derivative(n):
    """Sixth-order central difference on a unit spacing, zero beyond the ends."""
    weights = (-1 / 60, 9 / 60, -45 / 60, 0, 45 / 60, -9 / 60, 1 / 60)
    return sum(w * np.eye(n, k=k) for k, w in zip(range(-3, 4), weights, strict=True))


def dense(left_z, left_y, kernel, mask, variance, correlation):
    """½ tr(M G M C) with every matrix written out."""
    nz, ny = mask.shape
    raw = left_z.shape[1], left_y.shape[1]
    kz, ky = (np.eye(n) if k is None else k for n, k in zip(raw, correlation, strict=True))
    s = np.sqrt(np.broadcast_to(variance, raw)).ravel()
    operator = np.kron(left_z, left_y)
    covariance = operator @ (np.kron(kz, ky) * np.outer(s, s)) @ operator.T
    i, j = np.divmod(np.arange(nz * ny), ny)
    g = kernel[i[:, None] - i[None] + nz - 1, j[:, None] - j[None] + ny - 1]
    m = mask.ravel()
    return 0.5 * m @ (g * covariance) @ m


NZ, NY = 13, 17
KERNEL = RNG.normal(size=(2 * NZ - 1, 2 * NY - 1))
MASK = np.where(np.add.outer(np.arange(NZ), np.arange(NY)) % 7 > 1, RNG.random((NZ, NY)), 0.0)
MASK[:2] = MASK[:, -1:] = 0
OPERATORS = {
    "v": (-derivative(NZ), np.eye(NY)),
    "w": (np.eye(NZ), derivative(NY)),
    "resampled": (RNG.normal(size=(NZ, 9)), RNG.normal(size=(NY, 11))),
}


@pytest.mark.parametrize("operators", OPERATORS)
@pytest.mark.parametrize("correlation", ["none", "smooth", "rows"])
def test_equals_the_dense_trace(operators, correlation):
    left_z, left_y = OPERATORS[operators]
    smooth = [squared_exponential(np.arange(left.shape[1]) * 1.0, 1.7) for left in (left_z, left_y)]
    matrices = {
        "none": (None, None),
        "smooth": tuple(smooth),
        "rows": (None, np.ones((left_y.shape[1],) * 2)),
    }[correlation]
    expected = dense(left_z, left_y, KERNEL, MASK, 0.09, matrices)
    found = quadratic_noise_bias(left_z, left_y, KERNEL, MASK, 0.09, correlation=matrices)
    # Rounding of a sum of 4e4 terms of either sign.
    assert found == pytest.approx(expected, rel=1e-11, abs=1e-13)
    assert abs(expected) > 1e-4 or (correlation == "rows" and operators == "w")
    # A map that does not vary is the same as a number.
    even = np.full((left_z.shape[1], left_y.shape[1]), 0.09)
    assert quadratic_noise_bias(left_z, left_y, KERNEL, MASK, even, correlation=matrices) == pytest.approx(
        found, rel=1e-12, abs=1e-15
    )


@pytest.mark.parametrize("operators", OPERATORS)
def test_variance_map_of_independent_noise_is_exact(operators):
    left_z, left_y = OPERATORS[operators]
    z, y = np.ogrid[0 : left_z.shape[1], 0 : left_y.shape[1]]
    # A map of any rank, and a smooth one of rank two, which take different ways.
    for variance in (RNG.random((z.size, y.size)), 1 + 0.1 * z + 0.02 * z * y):
        expected = dense(left_z, left_y, KERNEL, MASK, variance, (None, None))
        assert quadratic_noise_bias(left_z, left_y, KERNEL, MASK, variance) == pytest.approx(expected, rel=1e-11)


@pytest.mark.parametrize("correlated", [False, True])
def test_long_window_and_sparse_operators(correlated):
    """More columns than are worked on at once; operators without their zeros."""
    nz, ny = 5, 150
    rng = np.random.default_rng(23)
    left_z, left_y = rng.normal(size=(nz, nz)), derivative(ny)
    kernel, mask = rng.normal(size=(2 * nz - 1, 2 * ny - 1)), rng.random((nz, ny))
    along_y = squared_exponential(np.arange(ny) * 1.0, 2.0) if correlated else None
    expected = dense(left_z, left_y, kernel, mask, 0.5, (None, along_y))
    found = [
        quadratic_noise_bias(z, y, kernel, mask, 0.5, correlation=(None, along_y))
        for z, y in ((left_z, left_y), (sparse.csr_array(left_z), sparse.csr_array(left_y)))
    ]
    assert found == pytest.approx([expected] * 2, rel=1e-11)


def test_slowly_varying_variance_with_correlation():
    left_z, left_y = OPERATORS["v"]
    variance = np.multiply.outer(1 + 0.02 * np.arange(NZ), 1 + 0.02 * np.arange(NY))
    matrices = (squared_exponential(np.arange(NZ) * 1.0, 1.0), squared_exponential(np.arange(NY) * 1.0, 1.0))
    kernel = np.exp(-0.1 * np.hypot(*np.ogrid[1 - NZ : NZ, 1 - NY : NY]))
    expected = dense(left_z, left_y, kernel, MASK, variance, matrices)
    found = quadratic_noise_bias(left_z, left_y, kernel, MASK, variance, correlation=matrices)
    # 2 % per cell over a few cells of correlation and stencil.
    assert found == pytest.approx(expected, rel=0.02)


def test_callable_kernel_and_empty_mask():
    left_z, left_y = OPERATORS["v"]

    def kernel(dz, dy):
        return np.log(0.25 + dz**2 + dy**2)

    table = kernel(np.arange(1 - NZ, NZ)[:, None], np.arange(1 - NY, NY)[None, :])
    assert quadratic_noise_bias(left_z, left_y, kernel, MASK, 1.0) == quadratic_noise_bias(
        left_z, left_y, table, MASK, 1.0
    )
    assert quadratic_noise_bias(left_z, left_y, kernel, 0 * MASK, 1.0) == 0.0


def test_paired_simulation():
    """Q(s + n) and Q(s - n) average to Q(s) + Q(n), whatever the signal s: the bias is seen without its scatter."""
    nz, ny, sigma = 24, 40, 0.3
    dz, dy = np.ogrid[1 - nz : nz, 1 - ny : ny]
    kernel = -np.log(0.3 + dz**2 + dy**2) / (4 * np.pi)
    z, y = np.mgrid[0:nz, 0:ny]
    mask = ((z - 12) ** 2 / 64 + (y - 20) ** 2 / 225 < 1).astype(float)
    d_z, d_y = derivative(nz), derivative(ny)
    transform = np.fft.rfft2(np.fft.ifftshift(np.pad(kernel, ((1, 0), (1, 0)))))

    def form(v, w):
        xi = mask * (w @ d_y.T - d_z @ v)
        psi = np.fft.irfft2(transform * np.fft.rfft2(xi, (2 * nz, 2 * ny)), (2 * nz, 2 * ny))[..., :nz, :ny]
        return 0.5 * (xi * psi).sum(axis=(-2, -1))

    rng = np.random.default_rng(8)
    signal = 5 * np.exp(-((z - 12.0) ** 2 + (y - 14.0) ** 2) / 18)
    v, w = signal * (z - 12), -signal * (y - 14)
    n_v, n_w = sigma * rng.standard_normal((2, 4000, nz, ny))
    paired = (form(v + n_v, w + n_w) + form(v - n_v, w - n_w)) / 2 - form(v, w)
    bias = quadratic_noise_bias(-d_z, np.eye(ny), kernel, mask, sigma**2) + quadratic_noise_bias(
        np.eye(nz), d_y, kernel, mask, sigma**2
    )
    standard_error = paired.std() / np.sqrt(len(paired))
    assert standard_error < 0.02 * abs(bias)
    assert abs(paired.mean() - bias) < 4 * standard_error


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"mask": MASK[1:]}, "operators give"),
        ({"kernel": KERNEL[1:]}, "offsets are needed"),
        ({"variance": np.ones((2, 2))}, "variance has shape"),
    ],
)
def test_shapes_are_checked(change, message):
    left_z, left_y = OPERATORS["v"]
    arguments = {"left_z": left_z, "left_y": left_y, "kernel": KERNEL, "mask": MASK, "variance": 1.0} | change
    with pytest.raises(ValueError, match=message):
        quadratic_noise_bias(**arguments)
