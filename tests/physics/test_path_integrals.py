import numpy as np
import pytest

from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields.path_integrals import (
    adjoint_of_circulation,
    adjoint_of_paths,
    cell_circulation,
    cell_integrals,
    cell_weights,
    outer_flow,
    path_stream_function,
)
from wakeledger.synthetic import GaussianElements, vortex_pair

CORE = 0.05


def window(spacing, *, y0=-1.003, z0=-0.501, width=2.0, height=1.0):
    return UniformGrid(y0, z0, spacing, spacing, round(width / spacing) + 1, round(height / spacing) + 1)


def box_of(grid, half_y, half_z):
    rows, columns = np.flatnonzero(np.abs(grid.z) < half_z), np.flatnonzero(np.abs(grid.y) < half_y)
    return int(rows[0]), int(rows[-1]), int(columns[0]), int(columns[-1])


@pytest.mark.parametrize("n", [4, 5, 8, 23])
def test_cell_integrals_are_exact_for_cubics_everywhere_and_ninth_degree_inside(n):
    x = np.arange(n, dtype=float)
    for power in range(10):
        exact = (x[1:] ** (power + 1) - x[:-1] ** (power + 1)) / (power + 1)
        got = cell_integrals(n) @ x**power
        inside = slice(None) if power < 4 else slice(4, n - 5)
        # Only rounding is left: sums of up to 22^9.
        np.testing.assert_allclose(got[inside], exact[inside], rtol=1e-9)


def test_cell_weights_undo_the_running_mean():
    # The mean of cos(kx) over one cell is cos(kx) sin(k/2)/(k/2), so the weights must give cos(kx) (k/2)/sin(k/2).
    n = 40
    x = np.arange(n, dtype=float)
    middle = x[:-1] + 0.5
    errors = []
    for k in (0.4, 0.8):
        exact = np.cos(k * middle) * (k / 2) / np.sin(k / 2)
        errors.append(np.abs(cell_weights(n) @ np.cos(k * x) - exact)[5:-5].max())
    # Tenth order: 2.4e-4 k^10 is what ten-point interpolation to the middle leaves.
    assert errors[1] < 3e-4 * 0.8**10
    assert errors[1] / errors[0] > 2**9
    np.testing.assert_allclose(cell_weights(n) @ np.ones(n), 1.0, rtol=1e-12)
    np.testing.assert_allclose(cell_weights(n) @ x, middle, rtol=0, atol=1e-11)


@pytest.mark.parametrize("function", [cell_integrals, cell_weights])
def test_axes_too_short_are_refused(function):
    with pytest.raises(ValueError, match="at least 4 points"):
        function(3)


def test_circulation_of_cells_is_the_integral_of_vorticity():
    vortex = GaussianElements(0.01, 0.02, 1.3, CORE)
    errors = []
    for ratio in (0.25, 0.5):
        grid = window(CORE * ratio)
        circulation = cell_circulation(*vortex.velocity_on(grid), grid)
        # The cell at the centre against Gauss-Legendre quadrature of the exact vorticity.
        iz, iy = int(np.searchsorted(grid.z, 0.02)) - 1, int(np.searchsorted(grid.y, 0.01)) - 1
        node, weight = np.polynomial.legendre.leggauss(8)
        y, z = grid.y[iy] + grid.dy * (node + 1) / 2, grid.z[iz] + grid.dz * (node + 1) / 2
        exact = weight @ vortex.vorticity(*np.meshgrid(y, z)) @ weight * grid.cell_area / 4
        errors.append(abs(circulation[iz, iy] / exact - 1))
    # At h/a = 0.5 the rule errs by 2e-4 in the worst cell, with an order of eight or more.
    assert errors[1] < 5e-4
    assert errors[0] < errors[1] / 2**7
    # The total is a line integral far from the core, where the rule errs by 1e-9.
    assert circulation.sum() == pytest.approx(1.3, rel=1e-8)


def test_sum_over_cells_is_the_line_integral_around_them():
    rng = np.random.default_rng(3)
    grid = UniformGrid(0.0, 0.0, 0.1, 0.2, 15, 13)
    v, w = rng.standard_normal((2, *grid.shape))
    part = cell_circulation(v, w, grid)[3:7, 4:9].sum()
    along_y = grid.dy * cell_integrals(grid.ny)[4:9].sum(axis=0)
    along_z = grid.dz * cell_integrals(grid.nz)[3:7].sum(axis=0)
    around = along_y @ v[3] + along_z @ w[:, 9] - along_y @ v[7] - along_z @ w[:, 4]
    assert part == pytest.approx(around, rel=1e-12)


def test_path_stream_function_is_the_exact_one_up_to_its_constant():
    pair = vortex_pair(circulation=1.0, spacing=1.0, core=CORE)
    errors = []
    for ratio in (0.5, 0.8):
        grid = window(ratio * CORE)
        exact = pair.stream_function_on(grid)
        for psi in path_stream_function(*pair.velocity_on(grid), grid):
            assert psi.mean() == pytest.approx(0, abs=1e-12)
            error = np.abs(psi - (exact - exact.mean())).max()
            errors.append(error)
    # ψ spans 0.8 m²/s between the cores.
    assert max(errors[:2]) < 1e-4
    # Observed order at these spacings is about eight, six at least.
    assert errors[2] / errors[0] > (0.8 / 0.5) ** 5


def test_families_of_paths_differ_by_the_flux_between_them():
    # A source of strength m: around any corner the two ways of going enclose it or do not.
    m, core = 0.7, 0.05
    grid = window(core / 2)
    yy, zz = grid.mesh()
    r2 = yy**2 + zz**2
    speed = m / (2 * np.pi) * -np.expm1(-r2 / core**2) / r2
    row_first, column_first = path_stream_function(speed * yy, speed * zz, grid)
    difference = row_first - column_first
    # Row first and column first make a counter-clockwise loop around the upper starboard corner's rectangle; a quarter
    # of all starting points puts the source inside it. The offset of the window's middle by 0.3 % is all that differs.
    for row, column, sign in ((-1, -1, 1), (-1, 0, -1), (0, -1, -1), (0, 0, 1)):
        assert difference[row, column] == pytest.approx(sign * m / 4, rel=0.03)


def test_outer_flow_reads_the_offset_and_nothing_else():
    grid = window(CORE / 2)
    wake = GaussianElements([-0.5, 0.4, 0.1], [0.0, 0.1, -0.05], [-1.0, 0.8, 0.5], CORE)
    outer = outer_flow(grid, box_of(grid, 0.65, 0.25))
    v, w = wake.velocity_on(grid)
    v0, w0 = outer.offset(v, w)
    # The crossflow is of order 1 m/s on these lines.
    assert abs(v0) < 1e-6
    assert abs(w0) < 1e-6
    shifted = outer.offset(v + 0.3, w - 0.2)
    # A uniform flow is read without any quadrature error.
    assert shifted[0] - v0 == pytest.approx(0.3, abs=1e-13)
    assert shifted[1] - w0 == pytest.approx(-0.2, abs=1e-13)
    assert len(outer.lines) > 5


def test_outer_flow_fixes_the_constant_of_the_stream_function():
    # With a net circulation of 0.3 m²/s ψ must tend to −(Γ/2π) ln(r / 1 m).
    grid = window(CORE / 2)
    wake = GaussianElements([-0.5, 0.4, 0.1], [0.0, 0.1, -0.05], [-1.0, 0.8, 0.5], CORE)
    outer = outer_flow(grid, box_of(grid, 0.65, 0.25))
    v, w = wake.velocity_on(grid)
    row_first, column_first = path_stream_function(v, w, grid)
    psi = (row_first + column_first) / 2 - outer.constant(v, w)
    exact = wake.stream_function_on(grid)
    assert np.ptp(exact) > 0.5
    # h/a = 0.5, as for the paths themselves.
    np.testing.assert_allclose(psi, exact, rtol=0, atol=1e-4)


def test_adjoints():
    rng = np.random.default_rng(4)
    grid = UniformGrid(0.0, 0.0, 0.1, 0.2, 17, 13)
    v, w = rng.standard_normal((2, *grid.shape))
    weights = rng.standard_normal((grid.nz - 1, grid.ny - 1))
    from_v, from_w = adjoint_of_circulation(weights, grid)
    assert (from_v * v + from_w * w).sum() == pytest.approx((weights * cell_circulation(v, w, grid)).sum(), rel=1e-11)
    weights = rng.standard_normal(grid.shape)
    from_v, from_w = adjoint_of_paths(weights, grid)
    psi = sum(path_stream_function(v, w, grid)) / 2
    assert (from_v * v + from_w * w).sum() == pytest.approx((weights * psi).sum(), rel=1e-11)


def test_leading_axes_are_independent_fields():
    rng = np.random.default_rng(5)
    grid = UniformGrid(0.0, 0.0, 0.1, 0.2, 17, 13)
    v, w = rng.standard_normal((2, 3, 2, *grid.shape))
    outer = outer_flow(grid, (4, 8, 5, 11))
    many = (cell_circulation(v, w, grid), *path_stream_function(v, w, grid), *outer.offset(v, w), outer.constant(v, w))
    one = v[2, 1], w[2, 1]
    single = (
        cell_circulation(*one, grid),
        *path_stream_function(*one, grid),
        *outer.offset(*one),
        outer.constant(*one),
    )
    for got, expected in zip(many, single, strict=True):
        np.testing.assert_allclose(got[2, 1], expected, rtol=1e-11, atol=1e-12)
