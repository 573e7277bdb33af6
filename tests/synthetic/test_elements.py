"""Gaussian elements against closed forms and quadrature."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.special import exp1

from wakeledger.core.grid import UniformGrid
from wakeledger.synthetic import GaussianElements, mutual_drag, shed, straight_edge, vortex_pair

RHO, U = 1.2, 40.0


def random_elements(seed: int, n: int = 7) -> GaussianElements:
    rng = np.random.default_rng(seed)
    circulation = rng.normal(size=n)
    return GaussianElements(
        rng.normal(scale=0.4, size=n),
        rng.normal(scale=0.2, size=n),
        circulation - circulation.mean(),
        rng.uniform(0.06, 0.12, n),
    )


def fine_grid(elements: GaussianElements) -> UniformGrid:
    """Spacing of 0.4 of the smallest core, seven cores beyond every centre: quadrature of Gaussians is then exact."""
    h, reach = 0.4 * elements.core.min(), 7 * elements.core.max()
    axes = [np.arange(c.min() - reach, c.max() + reach, h) for c in (elements.y, elements.z)]
    return UniformGrid.from_axes(*axes)


@pytest.mark.parametrize("core", [0.01, 0.03, 0.3, 1.0])
def test_drag_of_a_pair_is_the_e1_formula(core):
    # Closed form D_i = (ρΓ²/4π)[ln(b²/2a²) + γ + E1(b²/2a²)], two Gaussian vortices ±Γ at spacing b.
    pair = vortex_pair(circulation=1.7, spacing=0.9, core=core)
    x = 0.9**2 / (2 * core**2)
    expected = RHO * 1.7**2 / (4 * np.pi) * (np.log(x) + np.euler_gamma + exp1(x))
    # Both are the same few special functions: rounding only, amplified where the terms cancel (a > b).
    assert_allclose(pair.induced_drag(density=RHO), expected, rtol=1e-12)


def test_drag_is_the_energy_of_psi_and_xi_by_quadrature():
    elements = random_elements(3)
    grid = fine_grid(elements)
    quadrature = 0.5 * RHO * grid.integrate(elements.stream_function_on(grid) * elements.vorticity_on(grid))
    # Evenly weighted sums of Gaussians cut at 7 cores at h/a = 0.4 are exact to 1e-20.
    assert_allclose(elements.induced_drag(density=RHO), quadrature, rtol=1e-10)


def test_drag_is_the_kinetic_energy_of_the_crossflow():
    # ½ρ∬(v² + w²) over the plane: outside the window it equals the line integral −½ρ∮ψ ∂ψ/∂n ds along the edge.
    elements = random_elements(4)
    grid = fine_grid(elements)
    v, w = elements.velocity_on(grid)
    psi = elements.stream_function_on(grid)
    inside = 0.5 * RHO * grid.integrate(v**2 + w**2)
    along_z = np.trapezoid((psi * -w)[:, -1] - (psi * -w)[:, 0], dx=grid.dz)
    along_y = np.trapezoid((psi * v)[-1] - (psi * v)[0], dx=grid.dy)
    outside = -0.5 * RHO * (along_z + along_y)
    assert outside > 0.01 * inside
    # Trapezium rule along the edge, second order: h = 0.024 over distances of 0.5 or more from the nearest centre.
    assert_allclose(inside + outside, elements.induced_drag(density=RHO), rtol=1e-3)


def test_doubling_the_core_costs_what_the_closed_form_says():
    # dD_i/d ln a = −ρΓ²/2π for a well-separated pair (two vortices, −ρΓ²/4π each).
    drag = [vortex_pair(circulation=1, spacing=1, core=a).induced_drag(density=RHO) for a in (0.02, 0.04)]
    assert_allclose(drag[1] - drag[0], -RHO * np.log(2) / (2 * np.pi), rtol=1e-12)


def test_velocity_comes_from_the_stream_function():
    elements = random_elements(5)
    rng = np.random.default_rng(6)
    y, z = rng.uniform(-1, 1, (2, 40))
    h = 1e-4
    v, w = elements.velocity(y, z)
    psi = elements.stream_function

    def slope(a, b):
        near, far = psi(y + a, z + b) - psi(y - a, z - b), psi(y + 2 * a, z + 2 * b) - psi(y - 2 * a, z - 2 * b)
        return (8 * near - far) / (12 * h)

    # Fourth-order differences: truncation (h/a)⁴ ~ 1e-11, rounding 1e-12/h.
    d = slope(h, 0.0), slope(0.0, h)
    scale = np.hypot(v, w).max()
    assert_allclose(v, d[1], atol=1e-8 * scale)
    assert_allclose(w, -d[0], atol=1e-8 * scale)


def test_vorticity_is_the_curl_and_the_crossflow_has_no_divergence():
    elements = random_elements(7)
    rng = np.random.default_rng(8)
    y, z = rng.uniform(-0.6, 0.6, (2, 40))
    h = 1e-5

    def slope(component, dy, dz):
        return (elements.velocity(y + dy, z + dz)[component] - elements.velocity(y - dy, z - dz)[component]) / (2 * h)

    xi = elements.vorticity(y, z)
    # Central differences of step 1e-5: 1e-8 of the vorticity's scale from truncation, as much from rounding.
    assert_allclose(slope(1, h, 0) - slope(0, 0, h), xi, atol=1e-6 * np.abs(xi).max())
    assert_allclose(slope(0, h, 0) + slope(1, 0, h), 0, atol=1e-6 * np.abs(xi).max())


def test_starboard_tip_vortex_is_positive_and_blows_down_between_the_pair():
    pair = vortex_pair(circulation=1.0, spacing=1.0, core=0.05)
    _, w = pair.velocity(np.array([0.0, 0.9]), np.zeros(2))
    # Midway each vortex gives −Γ/(2π · b/2); the exponentials are e⁻¹⁰⁰.
    assert_allclose(w[0], -2 / np.pi, rtol=1e-12)
    assert w[1] > 0
    assert pair.lift(speed=U, density=RHO) == pytest.approx(RHO * U * 1.0 * 1.0, rel=1e-14)


def test_swirl_peaks_at_the_published_radius_with_the_published_speed():
    # Lamb-Oseen: r_c = 1.12090642 a, peak .63817269 Γ/(2πa); α = 1.25643 in the encyclopedia entry citing Devenport et
    # al. 1996, further digits from exp(α) = 1 + 2α.
    one = GaussianElements(0.0, 0.0, 2.0, 0.1)
    r = np.linspace(0.10, 0.125, 250001)
    _, w = one.velocity(r, 0 * r)
    assert_allclose(r[np.argmax(w)], 0.1 * 1.12090642, rtol=1e-5)
    assert_allclose(w.max(), 0.63817269 * 2.0 / (2 * np.pi * 0.1), rtol=1e-8)
    # Solid rotation Γ/(πa²)/2 at the centre and no velocity on it.
    assert one.velocity(0.0, 0.0) == (0.0, 0.0)
    assert_allclose(one.velocity(1e-7, 0.0)[1] / 1e-7, 2.0 / (2 * np.pi * 0.01), rtol=1e-9)


def test_stream_function_is_finite_on_the_centre():
    # lim ½[ln r² + E1(r²/a²)] = ½(ln a² − γ).
    one = GaussianElements(0.3, -0.2, 1.0, 0.1)
    expected = -(np.log(0.01) - np.euler_gamma) / (4 * np.pi)
    assert_allclose(one.stream_function(0.3, -0.2), expected, rtol=1e-14)
    assert_allclose(one.stream_function(0.3 + 1e-9, -0.2), expected, rtol=1e-12)


def test_lift_side_force_and_moment_are_the_moments_of_the_vorticity():
    elements = random_elements(9)
    grid = fine_grid(elements)
    yy, zz = grid.mesh()
    xi = elements.vorticity_on(grid)
    assert_allclose(elements.lift(speed=U, density=RHO), RHO * U * grid.integrate(yy * xi), rtol=1e-11)
    assert_allclose(elements.side_force(speed=U, density=RHO), -RHO * U * grid.integrate(zz * xi), rtol=1e-11)
    moment = -0.5 * RHO * U * grid.integrate((yy**2 + zz**2) * xi)
    assert_allclose(elements.rolling_moment(speed=U, density=RHO), moment, rtol=1e-11)


def test_more_lift_to_port_puts_the_starboard_wing_down():
    loading = shed(lambda eta: np.sqrt(1 - eta**2) * (1 - 0.2 * eta), straight_edge(1.0), peak=1.0, core=0.02)
    # M = −∫y ρUΓ_b dy, exact: ρU · 0.2 · (b/2)² · π/8 for Γ_b = √(1 − η²)(1 − 0.2η).
    expected = RHO * U * 0.2 * 0.25 * np.pi / 8
    # The elements hold each piece of sheet at its centroid: its second moment is short by O(1/n²) = 2e-5.
    assert_allclose(loading.rolling_moment(speed=U, density=RHO), expected, rtol=2e-4)


def test_mutual_drag_is_the_same_both_ways_for_unequal_spans():
    # Munk (NACA Report 121, 1921): D12 = D21. One side integrates wing 2's ψ over wing 1's ξ, the other the reverse.
    first = shed("elliptic", straight_edge(1.0), peak=1.0, core=0.04, n=80)
    second = shed("linear", straight_edge(0.5, y=0.1, z=0.15), peak=0.6, core=0.05, n=60)
    grid = fine_grid(first + second)
    d12 = 0.5 * RHO * grid.integrate(second.stream_function_on(grid) * first.vorticity_on(grid))
    d21 = 0.5 * RHO * grid.integrate(first.stream_function_on(grid) * second.vorticity_on(grid))
    assert_allclose([d12, d21], mutual_drag(first, second, density=RHO), rtol=1e-9)
    whole = (first + second).induced_drag(density=RHO)
    parts = first.induced_drag(density=RHO) + second.induced_drag(density=RHO) + 2 * d12
    assert d12 > 0.05 * whole
    assert_allclose(parts, whole, rtol=1e-9)


def test_one_half_of_a_symmetric_wake_with_its_image_has_half_the_integral():
    whole = shed("elliptic", straight_edge(1.0), peak=1.0, core=0.03, n=100)
    grid = UniformGrid.from_axes(np.arange(0, 0.8, 0.01), np.arange(-0.3, 0.301, 0.01))
    psi_xi = whole.stream_function_on(grid) * whole.vorticity_on(grid)
    # The integrand is even in y, so the trapezium rule that starts on the plane of symmetry halves the whole one.
    half_integral = 0.5 * RHO * np.trapezoid(np.trapezoid(psi_xi, dx=grid.dy), dx=grid.dz)
    assert_allclose(2 * half_integral, whole.induced_drag(density=RHO), rtol=1e-10)
    half = whole[whole.y > 0]
    rebuilt = half + half.mirrored("y")
    assert_allclose(rebuilt.induced_drag(density=RHO), whole.induced_drag(density=RHO), rtol=1e-13)
    assert_allclose(2 * half.lift(speed=U, density=RHO), whole.lift(speed=U, density=RHO), rtol=1e-13)


def test_turning_moving_and_scaling_leave_what_they_must():
    elements = random_elements(11)
    drag = elements.induced_drag(density=RHO)
    # Rounding of a sum of 49 terms with cancellation.
    assert_allclose(elements.rotated(0.7).induced_drag(density=RHO), drag, rtol=1e-11)
    assert_allclose(elements.shifted(y=3.0, z=-1.0).induced_drag(density=RHO), drag, rtol=1e-11)
    # No length scale without net circulation; quadratic in the circulation.
    assert_allclose(elements.scaled(length=5.0, circulation=2.0).induced_drag(density=RHO), 4 * drag, rtol=1e-11)
    turned = elements.rotated(np.pi / 2)
    assert_allclose(
        turned.side_force(speed=U, density=RHO), -elements.lift(speed=U, density=RHO), rtol=1e-12
    )  # lift up turned a quarter counter-clockwise points to port


def test_wrong_elements_are_refused():
    with pytest.raises(ValueError, match="core must be positive"):
        GaussianElements(0.0, 0.0, 1.0, 0.0)
    with pytest.raises(ValueError, match="not finite"):
        GaussianElements(np.nan, 0.0, 1.0, 0.1)
    with pytest.raises(ValueError, match="axis must be"):
        vortex_pair(circulation=1, spacing=1, core=0.1).mirrored("x")
