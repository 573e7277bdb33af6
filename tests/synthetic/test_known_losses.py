"""Wakes whose drag is a closed form: a wake at another pressure, and the loss of a normal shock."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.integrate import quad

from wakeledger.core.grid import UniformGrid
from wakeledger.stream.gas import normal_shock_total_pressure_ratio, pressure_ratio
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import ExpandedWake, ShockedWake, normal_shock_entropy, stream_tube_wave_drag

SLOW = Reference(speed=40.0, density=1.2, static_pressure=100e3)
FAST = Reference(speed=250.0, density=0.5, static_pressure=35e3, compressible=True)


@pytest.mark.parametrize("stream", [SLOW, FAST], ids=["slow", "fast"])
def test_closed_form_is_the_momentum_deficit_at_the_streams_pressure(stream):
    wake = ExpandedWake(stream, defect=0.35, width=0.2)

    def deficit(r):
        u = stream.speed * (1 - 0.35 * np.exp(-((r / 0.2) ** 2)))
        density = stream.density
        if stream.compressible:
            warm = stream.total_temperature - u**2 / (7 * stream.gas_constant)
            density = stream.static_pressure / (stream.gas_constant * warm)
        return 2 * np.pi * r * density * u * (stream.speed - u)

    # Quadrature of a smooth integrand.
    assert wake.drag == pytest.approx(quad(deficit, 0, 2.0, epsabs=0, epsrel=1e-12)[0], rel=1e-10)
    # Spline of 6000 tubes; sqrt(2(p0 - p)/rho) rounds at 1e-16 of p/q.
    assert wake.local_pressure_drag == pytest.approx(wake.drag, rel=1e-8)


def test_slow_compressible_wake_has_the_incompressible_drag():
    gas = Reference(speed=5.0, density=1.2, static_pressure=1e5, compressible=True)
    still = Reference(speed=5.0, density=1.2, static_pressure=1e5)
    drags = [ExpandedWake(stream, defect=0.3, width=0.1).drag for stream in (gas, still)]
    # M² = 2e-4.
    assert drags[0] == pytest.approx(drags[1], rel=2e-4)


@pytest.mark.parametrize("stream", [SLOW, FAST], ids=["slow", "fast"])
@pytest.mark.parametrize("coefficient", [-0.15, 0.1])
def test_tubes_keep_their_mass_flow_and_total_pressure(stream, coefficient):
    wake = ExpandedWake(stream, defect=0.3, width=0.1, pressure_coefficient=coefficient)
    still = ExpandedWake(stream, defect=0.3, width=0.1)
    axis = np.linspace(-1.1, 1.1, 221)
    grid = UniformGrid.from_axes(axis, axis)
    moved, rest = wake.state_on(grid), still.state_on(grid)
    # What is transported with the tubes, integrated over their mass flow: total-pressure loss.
    before, after = (
        grid.integrate(s.density * s.u * (stream.total_pressure - s.total_pressure)) for s in (rest, moved)
    )
    assert after == pytest.approx(before, rel=1e-6)
    centre = np.unravel_index(np.argmin(moved.total_pressure), grid.shape)
    assert moved.total_pressure[centre] == pytest.approx(rest.total_pressure[centre], rel=1e-12)
    excess = (moved.static_pressure[centre] - stream.static_pressure) / stream.dynamic_pressure
    assert excess == pytest.approx(coefficient, rel=1e-12)
    assert np.sign(moved.u[centre] - rest.u[centre]) == -np.sign(coefficient)
    if stream.compressible:
        assert_allclose(moved.static_pressure, moved.density * stream.gas_constant * moved.temperature, rtol=1e-13)
        stagnation = moved.temperature + moved.u**2 / (7 * stream.gas_constant)
        assert_allclose(stagnation, stream.total_temperature, rtol=1e-13)


def test_impossible_wakes_are_refused():
    with pytest.raises(ValueError, match="must be below 1"):
        ExpandedWake(SLOW, defect=1.0, width=0.1)
    with pytest.raises(ValueError, match="cannot reach"):
        ExpandedWake(SLOW, defect=0.9, width=0.1, pressure_coefficient=0.5)


@pytest.mark.parametrize(("mach", "ratio"), [(1.5, 0.929787), (2.0, 0.720874), (3.0, 0.328344)])
def test_shock_entropy_is_the_tabulated_total_pressure_loss(mach, ratio):
    # NACA Report 1135, table II: pt2/pt1.
    assert np.exp(-normal_shock_entropy(mach)) == pytest.approx(ratio, abs=6e-7)
    assert normal_shock_total_pressure_ratio(mach) == pytest.approx(ratio, abs=6e-7)
    assert normal_shock_entropy(0.9) == 0.0


def test_wave_drag_of_a_stream_tube():
    """Weak shocks: D = ∬p∞ Δs/R (ρu/ρ∞U) dA (Lock), Δs/R = 2γ/(3(γ+1)²) (M² − 1)³ at leading order."""
    mach, area = 1.01, 0.3
    tube = stream_tube_wave_drag(FAST, mach=mach, area=area)
    weak = 2 * 1.4 / (3 * 2.4**2) * (mach**2 - 1) ** 3
    flux = pressure_ratio(mach) / pressure_ratio(FAST.mach) * mach / FAST.mach
    flux *= np.sqrt((1 + 0.2 * mach**2) / (1 + 0.2 * FAST.mach**2))
    # Next order in M² − 1 = 0.02.
    assert tube == pytest.approx(FAST.static_pressure * weak * flux * area, rel=0.04)
    assert stream_tube_wave_drag(FAST, mach=1.0, area=area) == pytest.approx(0.0, abs=1e-9)


def test_shocked_wake_adds_its_parts():
    alone = ShockedWake(FAST, defect=0.0)
    viscous = ShockedWake(FAST, foot_mach=1.0)
    both = ShockedWake(FAST)
    assert alone.viscous_drag == pytest.approx(0.0, abs=1e-9 * alone.wave_drag)
    assert abs(viscous.wave_drag) < 1e-9 * viscous.viscous_drag
    # The slower mass flow of the wake carries less of the shock's loss; products of the two losses are shared out.
    assert both.wave_drag < alone.wave_drag
    assert both.wave_drag == pytest.approx(alone.wave_drag, rel=0.1)
    assert both.viscous_drag == pytest.approx(viscous.viscous_drag, rel=0.02)
    z = np.linspace(-0.45, 0.55, 1001)
    grid = UniformGrid.from_axes(np.linspace(-1.05, 1.05, 211), z)
    state = both.state_on(grid)
    total = grid.integrate(state.density * state.u * (FAST.speed - state.u))
    assert total == pytest.approx(both.wave_drag + both.viscous_drag, rel=1e-4)
