"""Whole wakes: the state is self-consistent and its momentum is the truth."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.integrate import quad

from wakeledger.core.grid import UniformGrid
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import (
    GaussianElements,
    GaussianLosses,
    SyntheticWake,
    shed,
    sheet_losses,
    straight_edge,
    tip_cores,
    vortex_pair,
    wing_and_tail_wake,
    wing_wake,
)

SLOW = Reference(speed=42.0, density=1.185, static_pressure=100_600.0)
FAST = Reference(speed=170.0, density=0.9, static_pressure=70_000.0, compressible=True)


def momentum_drag(wake, half, spacing):
    """∬[ρu(U − u) − (p − p∞)] dA over the plane: a window, and the crossflow energy outside by its edge integral."""
    axis = np.arange(-half, half + spacing / 2, spacing)
    grid = UniformGrid.from_axes(axis, axis)
    state, ref = wake.state_on(grid), wake.reference
    integrand = state.density * state.u * (ref.speed - state.u) - (state.static_pressure - ref.static_pressure)
    psi = wake.elements.stream_function_on(grid)
    along_z = np.trapezoid((psi * -state.w)[:, -1] - (psi * -state.w)[:, 0], dx=spacing)
    along_y = np.trapezoid((psi * state.v)[-1] - (psi * state.v)[0], dx=spacing)
    return grid.integrate(integrand) - 0.5 * ref.density * (along_z + along_y)


@pytest.fixture(scope="module")
def wing():
    return wing_wake(SLOW, n=120)


@pytest.mark.parametrize(
    "wake",
    [wing_wake(SLOW, n=120), wing_and_tail_wake(SLOW, n=120, n_tail=60), wing_wake(SLOW, x=0.0, n=120)],
    ids=["wing", "wing and tail", "flat"],
)
def test_total_is_the_momentum_drag_of_the_state(wake):
    # F1 point by point over the plane, no decomposition. Edge by the trapezium rule, second order in 0.012/1.2.
    direct = momentum_drag(wake, half=1.2, spacing=0.012)
    assert_allclose(direct, wake.truth.total_drag, rtol=1e-5)
    assert wake.truth.quadrature_error < 1e-9 * wake.truth.total_drag


def test_compressible_total_is_the_momentum_drag_of_the_state():
    wake = wing_wake(FAST, peak=8.0, loss=40.0, n=100)
    # The energy outside the window in its incompressible form: the rest falls with the fourth power of v/a.
    direct = momentum_drag(wake, half=1.1, spacing=0.012)
    assert_allclose(direct, wake.truth.total_drag, rtol=1e-5)
    assert wake.truth.quadrature_error < 1e-9 * wake.truth.total_drag


@pytest.mark.parametrize("reference", [SLOW, FAST], ids=["incompressible", "compressible"])
def test_state_obeys_its_equations_of_state(reference):
    wake = wing_wake(reference, peak=0.05 * reference.speed, loss=0.003 * reference.dynamic_pressure, n=80)
    y, z = np.random.default_rng(5).uniform(-0.7, 0.7, (2, 200))
    s = wake.state(y, z)
    speed2 = s.u**2 + s.v**2 + s.w**2
    if reference.compressible:
        cp = reference.heat_capacity
        assert_allclose(cp * s.temperature + speed2 / 2, reference.total_enthalpy, rtol=1e-12)
        assert_allclose(s.static_pressure, s.density * reference.gas_constant * s.temperature, rtol=1e-12)
        isentropic = (s.total_temperature / s.temperature) ** (reference.gamma / (reference.gamma - 1))
        assert_allclose(s.total_pressure, s.static_pressure * isentropic, rtol=1e-12)
    else:
        assert_allclose(s.total_pressure - s.static_pressure, 0.5 * reference.density * speed2, rtol=1e-12)


@pytest.mark.parametrize("reference", [SLOW, FAST], ids=["incompressible", "compressible"])
def test_far_from_the_wake_the_stream_is_undisturbed(reference):
    s = wing_wake(reference, n=80).state(np.array([4.0]), np.array([3.0]))
    assert_allclose(s.u, reference.speed, rtol=1e-12)
    assert_allclose(s.total_pressure, reference.total_pressure, rtol=1e-14)
    assert_allclose(s.static_pressure, reference.static_pressure, rtol=1e-5)


def test_a_lone_vortex_is_in_radial_equilibrium():
    vortex = GaussianElements(0.0, 0.0, 2.0, 0.05)
    wake = SyntheticWake(SLOW, (vortex,), cores=vortex)
    for r in (0.0, 0.02, 0.06, 0.2):
        # p∞ − p = ρ∫ v_θ²/r dr by adaptive quadrature.
        pull, _ = quad(lambda t: (2.0 / (2 * np.pi * t) * -np.expm1(-((t / 0.05) ** 2))) ** 2 / t, r, np.inf, epsabs=0)
        found = SLOW.static_pressure - wake.state(r, 0.0).static_pressure
        assert_allclose(found, SLOW.density * pull, rtol=1e-6)
    # On the axis ρΓ² ln 2/(4π²a²), and the axial velocity there exceeds the stream's (no loss, Batchelor 1964).
    centre = wake.state(0.0, 0.0)
    drop = SLOW.density * 4 * np.log(2) / (4 * np.pi**2 * 0.05**2)
    assert_allclose(SLOW.static_pressure - centre.static_pressure, drop, rtol=1e-10)
    assert centre.u > SLOW.speed


def test_profile_drag_of_a_patch_of_loss_is_the_momentum_deficit():
    # Without crossflow p = p∞ and D = ∬ρu(U − u) dA, a radial integral of u = √(U² − 2 loss/ρ).
    losses = GaussianLosses(0.1, 0.0, 5.0, 0.04)
    wake = SyntheticWake(SLOW, (vortex_pair(circulation=1e-12, spacing=1.0, core=0.03),), losses)

    def deficit(r):
        loss = 5.0 / (np.pi * 0.04**2) * np.exp(-((r / 0.04) ** 2))
        u = np.sqrt(SLOW.speed**2 - 2 * loss / SLOW.density)
        return SLOW.density * u * (SLOW.speed - u) * 2 * np.pi * r

    expected, _ = quad(deficit, 0.0, 0.4, epsabs=0, epsrel=1e-11)
    assert_allclose(wake.truth.profile_drag, expected, rtol=1e-9)
    # A peak of 995 Pa against q = 1045 Pa: the drag is far below the integral of the loss.
    assert wake.truth.profile_drag < 0.85 * 5.0


def test_a_bound_line_disturbs_the_axial_flow_but_not_the_drag(wing):
    near = wing_wake(SLOW, n=120, bound_distance=0.6)
    s = near.state(np.array([0.0, 0.0]), np.array([0.3, -0.3]))
    assert s.u[0] > SLOW.speed > s.u[1]
    assert near.truth.induced_drag == wing.truth.induced_drag
    # Profile drag changes by (u* − u)u' over the wake: the sheet lies near z = 0 where u' changes sign.
    assert_allclose(near.truth.total_drag, wing.truth.total_drag, rtol=1e-3)
    assert near.truth.total_drag != wing.truth.total_drag


def test_rows_are_plausible_and_carry_their_signs(wing):
    rows = wing.truth.rows()
    force = SLOW.dynamic_pressure * 0.18
    assert 0.0120 < rows["profile_drag"] / force < 0.0200
    assert 0.4 < rows["lift"] / force < 0.6
    assert 0.007 < rows["induced_drag"] / force < 0.011
    assert -1e-3 * rows["induced_drag"] < rows["residual_drag"] < 0
    assert abs(rows["side_force"]) < 1e-9 * rows["lift"]


def test_losses_ride_on_the_sheet():
    flat = shed("elliptic", straight_edge(1.0), peak=1.0, core=0.03, n=60)
    here = flat.shifted(z=0.1)
    losses = sheet_losses(flat, here, total=4.0, width=0.05)
    assert_allclose(losses.strength.sum(), 4.0)
    assert_allclose(losses.z, 0.1)
    # Even along the edge, so the peak is total/(b √π s); the elements sit at centroids, unevenly at mid-span.
    assert_allclose(losses.loss(np.array([0.0, 0.2]), np.array([0.1, 0.1])), 4.0 / (np.sqrt(np.pi) * 0.05), rtol=0.02)
    weighted = sheet_losses(flat, here, total=4.0, width=0.05, weight=np.exp(-(flat.y**2)))
    assert weighted.loss(0.0, 0.1) > losses.loss(0.0, 0.1)


def test_cores_are_the_ends_of_the_sheet():
    flat = shed("elliptic", straight_edge(1.0), peak=2.0, core=0.02, n=200)
    port, starboard = tip_cores(flat, share=0.5), tip_cores(flat, share=1.0)
    assert_allclose(port.circulation, [-1.0, 1.0], rtol=0.02)
    assert_allclose(port.y[0], -port.y[1], rtol=1e-9)
    # All of a side: its centroid π/8 of the span outboard, as the rolled-up vortex of an elliptic wing.
    assert_allclose(starboard.y, [-np.pi / 8, np.pi / 8], rtol=1e-3)
    assert (port.core > 0.02).all()


def test_impossible_wakes_are_refused():
    pair = vortex_pair(circulation=1.0, spacing=1.0, core=0.03)
    with pytest.raises(ValueError, match="no real axial velocity"):
        SyntheticWake(SLOW, (pair,), GaussianLosses(0.0, 0.0, 50.0, 0.03)).state(0.0, 0.0)
    with pytest.raises(ValueError, match="as many distances"):
        SyntheticWake(SLOW, (pair,), bound_distance=(1.0, 2.0))
    with pytest.raises(ValueError, match="only in incompressible flow"):
        SyntheticWake(FAST, (pair,), bound_distance=(1.0,))
    with pytest.raises(ValueError, match="or neither"):
        wing_and_tail_wake(SLOW, bound_distance=1.0)
