"""Roll-up: what must stay the same, and what must come out."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wakeledger.synthetic import GaussianElements, Sheet, roll_up, rolled_up_wing, shed, straight_edge, vortex_pair
from wakeledger.synthetic.rollup import step

U = 42.0


def lopsided(eta):
    return np.sqrt(np.clip(1 - eta**2, 0, None)) * (1 + 0.35 * eta)


@pytest.mark.parametrize("loading", ["elliptic", "bell", lopsided])
def test_roll_up_conserves_drag_lift_and_side_force(loading):
    before = shed(loading, straight_edge(1.2), peak=2.5, core=0.03, n=160)
    after = roll_up([Sheet(before)], x=3.0, speed=U).elements
    moved = np.hypot(after.y - before.y, after.z - before.z)
    assert moved.max() > 0.1
    # The motion is Hamiltonian with the E1 sum; the fourth-order steps leave 1e-7. Target 1e-5.
    assert_allclose(after.induced_drag(density=1.2), before.induced_drag(density=1.2), rtol=1e-6)
    # The impulse is a linear invariant, kept by every Runge-Kutta step to rounding.
    assert_allclose(after.lift(speed=U, density=1.2), before.lift(speed=U, density=1.2), rtol=1e-12)
    assert_allclose(after.z @ after.circulation, before.z @ before.circulation, atol=1e-12)


def test_wing_and_tail_keep_their_drag_once_both_are_shed():
    wing = shed("elliptic", straight_edge(1.2), peak=2.5, core=0.03, n=160)
    tail = shed("elliptic", straight_edge(0.4, z=0.12), peak=-0.5, core=0.03, n=80)
    sheets = [Sheet(wing), Sheet(tail, x=0.5)]
    at_tail, later = (roll_up(sheets, x=x, speed=U) for x in (0.5, 1.8))
    assert_allclose(later.elements.induced_drag(density=1.0), at_tail.elements.induced_drag(density=1.0), rtol=1e-6)
    assert_allclose(later.elements.lift(speed=U, density=1.0), (wing + tail).lift(speed=U, density=1.0), rtol=1e-12)
    assert_allclose(later.of(1).circulation, tail.circulation)
    assert_allclose(at_tail.of(1).y, tail.y)
    # Order of the sheets is the caller's, whatever their stations.
    swapped = roll_up(sheets[::-1], x=1.8, speed=U)
    assert_allclose(swapped.of(0).z, later.of(1).z, atol=1e-12)


def test_a_pair_sinks_at_the_speed_it_induces():
    pair = vortex_pair(circulation=2.0, spacing=1.0, core=0.05)
    after = roll_up([Sheet(pair)], x=4.2, speed=U).elements
    # w = −Γ/(2πb), for both, with e^(−200) of a correction.
    assert_allclose(after.z, -2.0 / (2 * np.pi) * 4.2 / U, rtol=1e-12)
    assert_allclose(after.y, pair.y, rtol=1e-12)


def test_two_equal_vortices_turn_about_each_other():
    pair = GaussianElements(np.array([-0.5, 0.5]), np.zeros(2), np.ones(2), np.full(2, 0.05))
    # Angular speed Γ/(πd²): a quarter turn takes π²d²/(2Γ).
    quarter = np.pi**2 / 2

    def miss(steps):
        now = pair
        for _ in range(steps):
            now = step(now, quarter / steps)
        return np.hypot(now.y[1], now.z[1] - 0.5)

    coarse, fine = miss(10), miss(20)
    assert fine < 1e-4
    # Fourth order: halving the step divides the error by 16 (15.6 measured).
    assert np.log2(coarse / fine) == pytest.approx(4.0, abs=0.3)


def test_vortices_of_an_elliptic_wing_draw_in_towards_pi_over_four_of_the_span():
    # Rolled up, the centroid of each side lies at ±(π/4)(b/2) (first moment, exact at every station).
    wake = rolled_up_wing("elliptic", span=1.2, peak=2.5, core=0.03, x=6.0, speed=U, n=160)
    side = wake.elements[wake.elements.y > 0]
    assert_allclose(side.y @ side.circulation / side.circulation.sum(), np.pi / 4 * 0.6, rtol=1e-3)
    # The tip has wound inboard, and the whole has sunk.
    assert 0.9 * np.pi / 4 * 0.6 < wake.elements.y[-1] < 0.9 * 0.6
    assert side.z @ side.circulation / side.circulation.sum() < -0.01


def test_a_symmetric_wake_stays_symmetric():
    wake = rolled_up_wing("elliptic", span=1.2, peak=2.5, core=0.03, x=3.0, speed=U, n=100).elements
    assert_allclose(wake.y, -wake.y[::-1], atol=1e-11)
    assert_allclose(wake.z, wake.z[::-1], atol=1e-11)


def test_a_station_ahead_of_a_trailing_edge_is_refused():
    wing = shed("elliptic", straight_edge(1.0), peak=1.0, core=0.05, n=20)
    with pytest.raises(ValueError, match="ahead of a trailing edge"):
        roll_up([Sheet(wing), Sheet(wing, x=2.0)], x=1.0, speed=U)
