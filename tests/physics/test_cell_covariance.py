"""Covariance of the vortex sum's cells from noise, against the explicit sparse products over all grid points."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import sparse

from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields.circulation import interval_weights
from wakeledger.physics.vortices.cells import WakeCells, share_out


def explicit(cells: WakeCells, variance_v: np.ndarray, variance_w: np.ndarray) -> np.ndarray:
    """W L diag(σ²) Lᵀ Wᵀ, L the line integral around every square, each written out over all grid points."""
    grid = cells.grid

    def steps(points: int) -> sparse.csr_array:
        return sparse.csr_array(sparse.diags_array([-1.0, 1.0], offsets=[0, 1], shape=(points - 1, points)))

    along_y, along_z = interval_weights(grid.ny) * grid.dy, interval_weights(grid.nz) * grid.dz
    from_v = cells.weights @ sparse.kron(-steps(grid.nz), along_y, format="csr")
    from_w = cells.weights @ sparse.kron(along_z, steps(grid.ny), format="csr")
    spread_v, spread_w = (np.broadcast_to(x, grid.shape).ravel()[None, :] for x in (variance_v, variance_w))
    return ((from_v * spread_v) @ from_v.T + (from_w * spread_w) @ from_w.T).toarray()


def plane(nz: int, ny: int) -> tuple[UniformGrid, np.ndarray]:
    """A window whose wake is two patches, one of them at the edge."""
    grid = UniformGrid(-0.5, -0.3, 0.011, 0.013, ny, nz)
    yy, zz = grid.mesh()
    wake = (np.hypot(yy + 0.2, 2 * (zz - 0.02)) < 0.16) | ((yy > 0.3) & (np.abs(zz) < 0.05))
    return grid, wake


@pytest.mark.parametrize("steps", [1.0, 2.7, 6.3])
@pytest.mark.parametrize("maps", [False, True])
def test_equals_the_explicit_products(steps: float, maps: bool) -> None:
    grid, wake = plane(44, 90)
    excluded = np.zeros(grid.shape, bool)
    excluded[:6, 30:40] = True
    cells = share_out(grid, wake, steps * grid.dz, excluded=excluded)
    rng = np.random.default_rng(4)
    variance = rng.uniform(0.5, 2.0, (2, *grid.shape)) if maps else np.array([0.7, 1.3])
    expected = explicit(cells, *variance)
    found = cells.covariance(*variance).toarray()
    # Rounding of sums over a few hundred points.
    np.testing.assert_allclose(found, expected, rtol=0, atol=1e-13 * np.abs(expected).max())
    assert np.abs(expected[0]).max() > 0
    assert cells.count > 30


@pytest.mark.parametrize(("nz", "ny"), [(5, 7), (9, 30), (40, 12)])
def test_small_windows(nz: int, ny: int) -> None:
    grid = UniformGrid(-0.05, -0.03, 0.011, 0.013, ny, nz)
    wake = np.zeros(grid.shape, bool)
    wake[1:4, 2:5] = True
    cells = share_out(grid, wake, 0.03)
    expected = explicit(cells, np.array(0.4), np.array(0.9))
    np.testing.assert_allclose(
        cells.covariance(0.4, 0.9).toarray(), expected, rtol=0, atol=1e-13 * np.abs(expected).max()
    )


def test_a_plane_without_wake_has_wide_cells_only() -> None:
    grid, wake = plane(30, 50)
    cells = share_out(grid, np.zeros_like(wake), 0.03)
    expected = explicit(cells, np.array(0.4), np.array(0.9))
    np.testing.assert_allclose(
        cells.covariance(0.4, 0.9).toarray(), expected, rtol=0, atol=1e-13 * np.abs(expected).max()
    )
