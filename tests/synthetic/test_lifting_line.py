"""The lifting line with straight legs."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wakeledger.core.grid import UniformGrid
from wakeledger.synthetic import GaussianElements, LiftingLine, mutual_drag, shed, straight_edge

CORE = 0.015


def line(loading="elliptic", n=120):
    return LiftingLine(shed(loading, straight_edge(1.0), peak=1.0, core=CORE, n=n))


def slopes(model, x, y, z, h=2e-5):
    """∂(u, v, w)/∂(x, y, z) by central differences, shape (3, 3): [component, direction]."""
    rows = []
    for dx, dy, dz in np.eye(3) * h:
        plus = np.array(model.velocity(x + dx, y + dy, z + dz))
        minus = np.array(model.velocity(x - dx, y - dy, z - dz))
        rows.append((plus - minus) / (2 * h))
    return np.array(rows).T


@pytest.mark.parametrize("x", [0.1, 0.5, 2.0])
@pytest.mark.parametrize("y, z", [(0.3, 0.01), (-0.48, -0.02), (0.1, 0.2)])
def test_field_is_solenoidal_and_its_only_vorticity_is_that_of_the_legs(x, y, z):
    model = line()
    s = slopes(model, x, y, z)
    # Differences of step 2e-5 over the core: truncation (h/a)² = 2e-6 of the leg's strain.
    scale = np.abs(s).max()
    assert abs(np.trace(s)) < 2e-5 * scale
    assert_allclose(s[2, 1] - s[1, 2], model.elements.vorticity(y, z), atol=2e-5 * scale)
    assert_allclose([s[0, 2] - s[2, 0], s[1, 0] - s[0, 1]], 0.0, atol=2e-5 * scale)


def test_far_downstream_it_is_the_two_dimensional_field():
    model = line()
    y, z = np.random.default_rng(1).uniform(-0.7, 0.7, (2, 30))
    u, v, w = model.velocity(200.0, y, z)
    flat = model.elements.velocity(y, z)
    # What is missing falls as (r/x)²/2 = 1e-5.
    scale = np.hypot(*flat).max()
    assert_allclose([v, w], flat, atol=2e-5 * scale)
    assert np.abs(u).max() < 1e-5 * scale


def test_downwash_far_behind_is_twice_that_at_the_line():
    # Prandtl: the half-infinite legs give half of the endless ones; elliptic loading Γ0/(2b) at the line, Γ0/b behind.
    # The smooth sheet of core a has a little less; a/b = 0.002 leaves the thin-sheet value within 1 %.
    model = LiftingLine(shed("elliptic", straight_edge(1.0), peak=1.0, core=0.002, n=1500))
    y = np.linspace(-0.3, 0.3, 9)
    at_line = model.downwash_at_line(y)
    assert_allclose(at_line, -0.5, rtol=0.01)
    _, _, far = model.velocity(500.0, y, np.zeros(9))
    assert_allclose(far / at_line, 2.0, rtol=1e-4)


def test_a_horseshoe_has_the_textbook_downwash_on_its_axis():
    # One horseshoe of span b, point at distance x behind its middle: w = −(Γ/(2πs))(1 + √(x² + s²)/x), s = b/2
    # (Biot-Savart of three straight vortices; both legs and the bound line).
    pair = GaussianElements(np.array([-0.5, 0.5]), np.zeros(2), np.array([-1.0, 1.0]), np.full(2, 0.01))
    for x in (0.1, 0.7, 5.0):
        u, v, w = LiftingLine(pair).velocity(x, 0.0, 0.0)
        assert_allclose(w, -1 / (2 * np.pi * 0.5) * (1 + np.hypot(x, 0.5) / x), rtol=1e-12)
        assert_allclose([u, v], 0.0, atol=1e-15)


def test_the_bound_vortex_speeds_the_flow_up_above_it():
    u, _, _ = line().velocity(0.2, np.zeros(2), np.array([0.1, -0.1]))
    assert u[0] > 0.01
    assert_allclose(u[1], -u[0], rtol=1e-10)


# Share of the axial energy ½ρ∬u'² dA in D_i, which the crossflow energy alone overcounts: 5.4, 1.6 and 0.4 % for the
# elliptic line (derived by Parseval, verified elsewhere numerically; two digits).
@pytest.mark.parametrize("x, share", [(0.25, 0.054), (0.5, 0.016), (1.0, 0.004)])
def test_axial_energy_is_what_the_crossflow_energy_overcounts(x, share):
    model = LiftingLine(shed("elliptic", straight_edge(1.0), peak=1.0, core=0.02, n=80))
    axis = np.linspace(-4, 4, 161)
    u, _, _ = model.velocity_on(x, UniformGrid.from_axes(axis, axis))
    energy = 0.5 * (u**2).sum() * (axis[1] - axis[0]) ** 2
    # Two printed digits (0.4 %: one), and the core's and the window's own effects.
    assert_allclose(energy / model.elements.induced_drag(density=1.0), share, rtol=0.05)


def drag_in_the_field_of(acting, on, x, gap):
    """−ρ∫Γ_b w dy along one line in the other's field, by Simpson's rule on each segment (unit density)."""
    y = on.elements.y
    stations = np.stack([y[:-1], (y[:-1] + y[1:]) / 2, y[1:]])
    _, _, w = acting.velocity(x, stations, np.full(stations.shape, gap))
    return -on.bound_circulation @ (np.diff(y) / 6 * (np.array([1.0, 4.0, 1.0]) @ w))


def test_moving_a_wing_streamwise_leaves_the_sum_of_the_mutual_drags():
    # Munk's stagger theorem (NACA Report 121, 1921), from forces on the bound lines, for wings of unequal span: each
    # share changes with the stagger, their sum stays 2 D12 of the Trefftz plane.
    gap = 0.25
    front, rear = line(), LiftingLine(shed("parabolic", straight_edge(0.6), peak=0.5, core=CORE, n=80))
    expected = 2 * mutual_drag(front.elements, rear.elements.shifted(z=gap), density=1.0)
    shares = []
    for stagger in (0.1, 0.3, 1.0, 3.0):
        on_rear = drag_in_the_field_of(front, rear, stagger, gap)
        on_front = drag_in_the_field_of(rear, front, -stagger, -gap)
        shares.append(on_rear / expected)
        # Simpson on 80 segments whose field varies over the gap: 1e-7.
        assert_allclose(on_rear + on_front, expected, rtol=1e-5)
    # The rear wing's share passes its far-downstream value where the front bound line blows down on it hardest.
    assert shares[0] < 0.95 < 1.1 < shares[1]
    assert shares[-1] == pytest.approx(1.0, abs=0.01)


def test_lines_that_do_not_close_are_refused():
    with pytest.raises(ValueError, match="circulations add up to"):
        LiftingLine(GaussianElements(np.zeros(2), np.zeros(2), np.array([0.0, 1.0]), np.full(2, 0.1)))
    with pytest.raises(ValueError, match="same core"):
        LiftingLine(GaussianElements(np.arange(2.0), np.zeros(2), np.array([-1.0, 1.0]), np.array([0.1, 0.2])))
    with pytest.raises(ValueError, match="nearer than five core lengths"):
        line().velocity(0.05, 0.0, 0.0)
