"""The response of walls as a few modes, against the walled solve itself."""

from __future__ import annotations

import numpy as np
import pytest

from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields.boundary import Circle, ClosedWalls, FreeAir, OpenJet, Rectangle
from wakeledger.physics.fields.poisson import stream_function, velocity_potential
from wakeledger.physics.fields.wall_correction import wall_stream_function, wall_velocity_potential
from wakeledger.physics.fields.wall_modes import wall_modes

GRID = UniformGrid(-0.6, -0.32, 0.06, 0.05, 21, 14)
YY, ZZ = GRID.mesh()
MASK = (YY / 0.5) ** 2 + (ZZ / 0.22) ** 2 < 1
BOUNDARIES = {
    "closed": ClosedWalls(Rectangle((-1.0, 1.0), (-0.7, 0.7))),
    "near walls": ClosedWalls(Rectangle((-0.66, 0.66), (-0.36, 0.45))),
    "jet": OpenJet(Circle(1.9)),
    # The corners of the window lie outside.
    "round": ClosedWalls(Circle(1.3)),
}


@pytest.mark.parametrize("name", BOUNDARIES)
@pytest.mark.parametrize("of", ["vorticity", "divergence"])
def test_modes_give_what_the_walls_add(name: str, of: str) -> None:
    boundary = BOUNDARIES[name]
    fields = np.random.default_rng(5).standard_normal((6, *GRID.shape)) * MASK
    if of == "vorticity":
        walls = wall_stream_function(fields, GRID, boundary) - stream_function(fields, GRID)
    else:
        walls = velocity_potential(fields, GRID) - wall_velocity_potential(fields, GRID, boundary)
    expected = (fields * walls).sum(axis=(-2, -1))
    strengths, modes = wall_modes(GRID, boundary, MASK, of=of)
    found = np.einsum("r,kr->k", strengths, np.einsum("rzy,kzy->kr", modes, fields) ** 2)
    # The tolerance of the modes.
    np.testing.assert_allclose(found, expected, rtol=0, atol=2e-3 * np.abs(expected).max())
    assert np.abs(expected).min() > 1e-5
    assert strengths.size <= 100


@pytest.mark.parametrize("of", ["vorticity", "divergence"])
def test_modes_of_a_fine_plane(of: str) -> None:
    """Modes found on fewer points, for white fields, which see every wavenumber, and for a smooth one."""
    grid = UniformGrid(-0.6, -0.32, 0.012, 0.0084, 101, 78)
    yy, zz = grid.mesh()
    mask = (yy / 0.5) ** 2 + (zz / 0.22) ** 2 < 1
    fields = np.random.default_rng(5).standard_normal((6, *grid.shape))
    fields = np.concatenate([fields, [np.exp(-((yy - 0.3) ** 2 + zz**2) / 0.01)]]) * mask
    boundary = BOUNDARIES["closed"]
    if of == "vorticity":
        walls = wall_stream_function(fields, grid, boundary) - stream_function(fields, grid)
    else:
        walls = velocity_potential(fields, grid) - wall_velocity_potential(fields, grid, boundary)
    expected = (fields * walls).sum(axis=(-2, -1))
    strengths, modes = wall_modes(grid, boundary, mask, of=of)
    found = np.einsum("r,kr->k", strengths, np.einsum("rzy,kzy->kr", modes, fields) ** 2)
    np.testing.assert_allclose(found[:6], expected[:6], rtol=0, atol=2e-3 * np.abs(expected[:6]).max())
    # Splines of fifth degree through 64 points.
    assert found[6] == pytest.approx(expected[6], rel=1e-4)


def test_a_region_between_the_points_on_which_modes_are_looked_for() -> None:
    """Two by two places of 201 x 301, none of them nearest to one of 64 x 64."""
    grid = UniformGrid(-0.6, -0.4, 0.004, 0.004, 301, 201)
    mask = np.zeros(grid.shape, bool)
    mask[103:105, 149:151] = True
    for axis, points in enumerate(grid.shape):
        nearest = np.rint(np.linspace(0, points - 1, 64)).astype(int)
        assert not np.isin(np.nonzero(mask)[axis], nearest).any()
    fields = np.random.default_rng(5).standard_normal((6, *grid.shape)) * mask
    boundary = BOUNDARIES["closed"]
    walls = wall_stream_function(fields, grid, boundary) - stream_function(fields, grid)
    expected = (fields * walls).sum(axis=(-2, -1))
    strengths, modes = wall_modes(grid, boundary, mask)
    found = np.einsum("r,kr->k", strengths, np.einsum("rzy,kzy->kr", modes, fields) ** 2)
    # The tolerance of the modes.
    np.testing.assert_allclose(found, expected, rtol=0, atol=2e-3 * np.abs(expected).max())
    assert np.abs(expected).max() > 1e-6


def test_nothing_around_the_plane_adds_nothing() -> None:
    for boundary, mask in ((FreeAir(), MASK), (BOUNDARIES["closed"], np.zeros_like(MASK))):
        strengths, modes = wall_modes(GRID, boundary, mask)
        assert strengths.size == 0
        assert modes.shape == (0, *GRID.shape)
