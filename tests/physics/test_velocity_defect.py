"""The exact split of the momentum balance, its second-order form, first-order brackets and power balances."""

import numpy as np
import pytest

from wakeledger.core.errors import InputError
from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields.entropy import enthalpy_excess, entropy_loss, static_temperature
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.methods.betz_area import profile_drag
from wakeledger.physics.methods.entropy_area import entropy_profile_drag
from wakeledger.physics.methods.first_order_entropy import first_order_bracket
from wakeledger.physics.methods.momentum_area import momentum_integrand
from wakeledger.physics.methods.power_balance import exergy_integrands, power_integrands
from wakeledger.physics.methods.velocity_defect import drag_split, split_integrands, velocity_defect
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import ExpandedWake, GaussianLosses, SyntheticWake, vortex_pair

MACHS = (0.2, 0.6, 0.85)
SLOW = Reference(speed=40.0, density=1.2, static_pressure=100e3)


def stream_at(mach):
    speed = mach * np.sqrt(1.4 * 287.05287 * 250.0)
    density = 60e3 / (287.05287 * 250.0)
    return Reference(speed=speed, density=density, static_pressure=60e3, temperature=250.0, compressible=True)


def gas(stream, u, v, w, pressure, temperature):
    """A compressible plane from static quantities, by relations written out here."""
    shape = np.shape(u)
    grid = UniformGrid(0.0, 0.0, 1.0, 1.0, shape[1], shape[0])
    stagnation = temperature + (u**2 + v**2 + w**2) * 0.4 / (2 * 1.4 * stream.gas_constant)
    total = pressure * (stagnation / temperature) ** 3.5
    return Flow(grid, u, v, w, total, pressure, pressure / (stream.gas_constant * temperature), stagnation)


def heated_states(stream, seed, size=0.2, shape=(20, 50)):
    """Any states at all: velocity, pressure and temperature are independent of each other."""
    rng = np.random.default_rng(seed)
    u = stream.speed * (1 + size * rng.normal(size=shape))
    v, w = (size * stream.speed * rng.normal(size=shape) for _ in range(2))
    pressure = stream.static_pressure * np.exp(size * stream.mach**2 * rng.normal(size=shape))
    temperature = stream.temperature * np.exp(size * rng.normal(size=shape))
    return gas(stream, u, v, w, pressure, temperature)


def flow_on(grid, state, stream):
    density = state.density if stream.compressible else stream.density
    heat = state.total_temperature if stream.compressible else np.nan
    return Flow(grid, state.u, state.v, state.w, state.total_pressure, state.static_pressure, density, heat)


@pytest.mark.parametrize("mach", MACHS)
def test_entropy_and_enthalpy_from_static_quantities(mach):
    stream = stream_at(mach)
    flow = heated_states(stream, 1)
    temperature = flow.static_pressure / (flow.density * stream.gas_constant)
    entropy = 3.5 * np.log(temperature / 250.0) - np.log(flow.static_pressure / 60e3)
    heat = 3.5 * stream.gas_constant * (temperature - 250.0)
    heat += (flow.u**2 + flow.v**2 + flow.w**2 - stream.speed**2) / 2
    # Two ways of writing the same state; rounding of exponents and logarithms only.
    assert entropy_loss(flow, stream) == pytest.approx(60e3 * entropy, rel=1e-9, abs=1e-6)
    assert enthalpy_excess(flow, stream) == pytest.approx(heat, rel=1e-9, abs=1e-6)
    assert static_temperature(flow, stream) == pytest.approx(temperature, rel=1e-14)


@pytest.mark.parametrize("form", ["expanded", "local"])
@pytest.mark.parametrize("mach", [0.0, *MACHS])
def test_parts_add_up_to_the_momentum_balance_exactly(mach, form):
    rng = np.random.default_rng(2)
    if mach:
        stream, flow = stream_at(mach), heated_states(stream_at(mach), 3, size=0.5)
    else:
        stream, shape = SLOW, (20, 50)
        u, v, w = (40.0 * (base + 0.3 * rng.normal(size=shape)) for base in (1.0, 0.0, 0.0))
        static = 100e3 + 300.0 * rng.normal(size=shape)
        total = static + 0.6 * (u**2 + v**2 + w**2)
        flow = Flow(UniformGrid(0, 0, 1.0, 1.0, 50, 20), u, v, w, total, static, 1.2)
    found = velocity_defect(flow, stream, form=form)
    parts = split_integrands(flow, stream, found.defect)
    momentum = flow.density * flow.u * (stream.speed - flow.u) - (flow.static_pressure - stream.static_pressure)
    assert np.abs(parts.irreversible + parts.induced - momentum).max() < 1e-10 * stream.dynamic_pressure
    # The states are so wild that some have no real defect: the sum is exact there too.
    assert found.valid.any() and (mach != 0.85 or not found.valid.all())
    assert np.isfinite(found.defect).all()
    mask = rng.random(flow.grid.shape) > 0.5
    split = drag_split(flow, stream, mask, form=form)
    together = split.irreversible + split.outside + split.induced_flux
    assert together == pytest.approx(split.total, rel=1e-10)
    assert split.total == pytest.approx(flow.grid.integrate(momentum), rel=1e-12)
    assert split.invalid_area == np.count_nonzero(mask & ~found.valid)


def test_an_unknown_form_is_refused():
    with pytest.raises(ValueError, match="form is 'entropy'"):
        velocity_defect(heated_states(stream_at(0.6), 4), stream_at(0.6), form="entropy")


def test_expanded_defect_against_its_definition():
    """Δū by solving the expansion to the stream's pressure: T from s, u from h0, nothing else."""
    stream = stream_at(0.6)
    flow = heated_states(stream, 5, size=0.05)
    temperature = flow.static_pressure / (flow.density * stream.gas_constant)
    expanded = temperature * (60e3 / flow.static_pressure) ** (0.4 / 1.4)
    enthalpy = 3.5 * stream.gas_constant * (temperature - expanded) + (flow.u**2 + flow.v**2 + flow.w**2) / 2
    found = velocity_defect(flow, stream)
    assert found.valid.all()
    assert found.defect == pytest.approx(np.sqrt(2 * enthalpy) - stream.speed, rel=1e-9)


def test_masks_say_where_a_defect_has_no_real_value():
    """A: total pressure below the stream's static; B: crossflow energy above what the local pressure leaves."""
    stream = stream_at(0.6)
    u, cross = np.full((2, 3), 0.5 * stream.speed), np.zeros((2, 3))
    pressure, temperature = np.full((2, 3), 60e3), np.full((2, 3), 250.0)
    pressure[0, 0] = 45e3  # p0 = 1.06 x 45 kPa < 60 kPa
    cross[1, 2] = 1.2 * stream.speed
    temperature[1, 2] = 300.0
    flow = gas(stream, u, cross, 0 * cross, pressure, temperature)
    expanded, local = (velocity_defect(flow, stream, form=form) for form in ("expanded", "local"))
    assert np.argwhere(~expanded.valid).tolist() == [[0, 0]]
    assert np.argwhere(~local.valid).tolist() == [[1, 2]]
    assert expanded.defect[0, 0] == -stream.speed
    assert local.defect[1, 2] == pytest.approx(u[1, 2] - stream.speed, rel=1e-14)


def lossy_states(stream, size, seed=6):
    """States that leave the stream by `size`: crossflow, pressure and loss of one streamtube each."""
    rng = np.random.default_rng(seed)
    shape = (10, 60)
    v, w = (size * stream.speed * rng.uniform(-1, 1, size=shape) for _ in range(2))
    gamma, q2 = 1.4, stream.mach**2
    pressure = 60e3 * (1 + gamma * q2 * size * rng.uniform(-1, 1, size=shape))
    entropy = gamma * q2 * size * rng.uniform(0, 1, size=shape)
    temperature = 250.0 * np.exp((entropy + np.log(pressure / 60e3)) / 3.5)
    u = np.sqrt(7 * stream.gas_constant * (stream.total_temperature - temperature) - v**2 - w**2)
    return gas(stream, u, v, w, pressure, temperature)


@pytest.mark.parametrize("mach", MACHS)
def test_second_order_induced_drag_leaves_a_third_order_remainder_losses_included(mach):
    stream = stream_at(mach)
    remainders = []
    for size in (0.02, 0.01, 0.005):
        flow = lossy_states(stream, size)
        parts = split_integrands(flow, stream, velocity_defect(flow, stream).defect)
        remainders.append(np.abs(parts.induced - parts.second_order).max())
    orders = np.log2(np.array(remainders[:-1]) / remainders[1:])
    assert orders == pytest.approx(3.0, abs=0.15)
    # Without (1 - M^2) the remainder is of second order.
    flow = lossy_states(stream, 0.005)
    defect = velocity_defect(flow, stream).defect
    parts = split_integrands(flow, stream, defect)
    wrong = parts.second_order - 0.5 * stream.density * mach**2 * (flow.u - stream.speed - defect) ** 2
    assert np.abs(parts.induced - wrong).max() > 5 * remainders[-1]


@pytest.mark.parametrize(("mach", "published"), [(0.2, 0.02), (0.6, 0.17), (0.85, 0.31)])
def test_third_order_coefficient(mach, published):
    """Loss-free axial disturbance: remainder/(ρU²) = M²[1 − (2 − γ)M²/3] e³; half of it is the published 0.02 …."""
    stream = stream_at(mach)
    size = 1e-3
    u = np.full((2, 2), stream.speed * (1 + size))
    temperature = stream.total_temperature - u**2 / (7 * stream.gas_constant)
    for crossflow in (0.0, 5e-3 * stream.speed):
        warm = temperature - crossflow**2 / (7 * stream.gas_constant)
        pressure = 60e3 * (warm / 250.0) ** 3.5
        flow = gas(stream, u, np.full((2, 2), crossflow), np.zeros((2, 2)), pressure, warm)
        parts = split_integrands(flow, stream, velocity_defect(flow, stream).defect)
        scale = stream.density * stream.speed**2 * size**3
        coefficient = (parts.induced - parts.second_order)[0, 0] / scale
        closed = mach**2 * (1 - 0.6 * mach**2 / 3)
        # Fourth order adds about the disturbance itself, and the square of the crossflow's square.
        assert coefficient == pytest.approx(closed, rel=0.01 if crossflow == 0 else 0.25)
        assert closed / 2 == pytest.approx(published, abs=0.005)


@pytest.mark.parametrize("mach", [0.0, *MACHS])
@pytest.mark.parametrize("defect", [0.1, 0.4])
def test_the_expanded_form_sees_the_drag_of_a_wake_at_another_pressure(mach, defect):
    stream = stream_at(mach) if mach else SLOW
    wake = ExpandedWake(stream, defect=defect, width=0.1, pressure_coefficient=0.1)
    axis = np.linspace(-0.75, 0.75, 151)
    grid = UniformGrid.from_axes(axis, axis)
    flow = flow_on(grid, wake.state_on(grid), stream)
    everywhere = np.ones(grid.shape, bool)
    split = drag_split(flow, stream, everywhere)
    # The tubes' places are splined; the sum over a Gaussian at h = 0.1 s is exact.
    assert split.irreversible == pytest.approx(wake.drag, rel=1e-6)
    assert entropy_profile_drag(flow, stream, everywhere)[0] == pytest.approx(wake.drag, rel=1e-6)
    assert profile_drag(flow, stream, everywhere) == pytest.approx(wake.local_pressure_drag, rel=1e-6)
    # The two must be able to disagree: u* is not U here.
    assert abs(wake.local_pressure_drag / wake.drag - 1) > 1e-3


@pytest.mark.parametrize("mach", MACHS)
def test_a_compressible_wake_with_a_vortex_pair(mach):
    stream = stream_at(mach)
    strength = 0.06 * stream.speed
    pair = vortex_pair(circulation=strength, spacing=1.0, core=0.08)
    losses = GaussianLosses(
        np.array([-0.3, 0.0, 0.3]), np.zeros(3), 0.2 * np.pi * 0.01 * stream.dynamic_pressure * np.ones(3), 0.1
    )
    wake = SyntheticWake(stream, (pair,), losses)
    axis = np.linspace(-1.5, 1.5, 151)
    grid = UniformGrid.from_axes(axis, axis)
    flow = flow_on(grid, wake.state_on(grid), stream)
    region = np.hypot(*grid.mesh()) < 0.9
    split = drag_split(flow, stream, region)
    truth = wake.truth
    # No axial disturbance without loss, so both forms see the same wake up to the crossflow's share of the pressure.
    local = drag_split(flow, stream, region, form="local")
    assert local.irreversible == pytest.approx(truth.profile_drag, rel=1e-6)
    assert split.irreversible == pytest.approx(truth.profile_drag, rel=5e-3)
    assert abs(split.outside) < 1e-6 * split.irreversible
    # The window's crossflow energy by its own sum: flux form = that, up to third order (the crossflow is 0.1 U).
    energy = 0.5 * stream.density * grid.integrate(flow.v**2 + flow.w**2)
    assert local.induced_flux == pytest.approx(energy, rel=0.01)
    assert local.induced_second_order == pytest.approx(energy, rel=1e-6)
    assert split.induced_second_order == pytest.approx(split.induced_flux, rel=0.01)
    assert split.total == pytest.approx(truth.profile_drag + energy + truth.residual_drag, rel=1e-3)


@pytest.mark.parametrize(("defect", "low", "high"), [(0.2, -0.069, 0.082), (0.05, -0.018, 0.018)])
def test_first_order_bias_of_a_plane_gaussian_wake(defect, low, high):
    """Published: a two-dimensional Gaussian wake at the stream's pressure, by both first-order forms."""
    axis = np.linspace(-0.8, 0.8, 321)
    grid = UniformGrid(0.0, -0.8, 0.1, 0.005, 11, 321)
    u = SLOW.speed * (1 - defect * np.exp(-((axis / 0.1) ** 2)))[:, None] * np.ones(11)
    still, static = np.zeros(grid.shape), np.full(grid.shape, SLOW.static_pressure)
    flow = Flow(grid, u, still, still, static + 0.6 * u**2, static, 1.2)
    exact = grid.integrate(1.2 * u * (SLOW.speed - u))
    bracket = first_order_bracket(flow, SLOW, np.ones(grid.shape, bool))
    assert bracket.mass_flux_weighted / exact - 1 == pytest.approx(low, abs=6e-4)
    assert bracket.local / exact - 1 == pytest.approx(high, abs=6e-4)


@pytest.mark.parametrize("mach", MACHS)
def test_series_of_the_expanded_defect(mach):
    """−Δū/U = S/(γM²) − E + (1 + (γ−1)M²)S²/(2γ²M⁴) − SE/(γM²) + E²/2 to second order, S = Δs/R, E = ΔH/U²."""
    stream = stream_at(mach)
    left = []
    for size in (0.02, 0.01):
        s = 1.4 * mach**2 * size * np.array([[1.0, 0.5, 0.0], [1.0, -0.3, 0.7]])
        e = size * np.array([[0.0, 0.4, 1.0], [-0.5, 0.2, 0.3]])
        stagnation = stream.total_temperature + e * stream.speed**2 / (3.5 * stream.gas_constant)
        # At the stream's pressure: T from the entropy, u from what is left of the total enthalpy.
        temperature = 250.0 * np.exp(s / 3.5)
        u = np.sqrt(7 * stream.gas_constant * (stagnation - temperature))
        flow = gas(stream, u, 0 * u, 0 * u, np.full(u.shape, 60e3), temperature)
        first = s / (1.4 * mach**2) - e
        second = (1 + 0.4 * mach**2) * s**2 / (2 * 1.96 * mach**4) - s * e / (1.4 * mach**2) + e**2 / 2
        defect = velocity_defect(flow, stream).defect
        # At the stream's pressure the expansion is none: Δū is u − U itself.
        assert defect == pytest.approx(u - stream.speed, rel=1e-8, abs=1e-9 * stream.speed)
        left.append(np.abs(-defect / stream.speed - first - second).max())
    assert np.log2(left[0] / left[1]) == pytest.approx(3.0, abs=0.15)


def test_slow_local_form_and_betz_differ_by_a_known_product():
    wake = ExpandedWake(SLOW, defect=0.3, width=0.1, pressure_coefficient=0.1)
    axis = np.linspace(-0.75, 0.75, 151)
    grid = UniformGrid.from_axes(axis, axis)
    flow = flow_on(grid, wake.state_on(grid), SLOW)
    everywhere = np.ones(grid.shape, bool)
    star = np.sqrt(2 * (SLOW.total_pressure - flow.static_pressure) / 1.2)
    product = grid.integrate(1.2 * (star - flow.u) * (star - SLOW.speed))
    local = drag_split(flow, SLOW, everywhere, form="local")
    assert local.irreversible + product == pytest.approx(profile_drag(flow, SLOW, everywhere), rel=1e-10)
    assert abs(product) > 1e-3 * local.irreversible


def test_loss_outside_the_region_is_reported_and_not_subtracted():
    """A broad weak loss about a wake: its own drag, by closed forms of both Gaussians."""
    wake = ExpandedWake(SLOW, defect=0.2, width=0.05)
    axis = np.linspace(-0.75, 0.75, 301)
    grid = UniformGrid.from_axes(axis, axis)
    flow = flow_on(grid, wake.state_on(grid), SLOW)
    y, z = grid.mesh()
    haze = 0.001 * SLOW.dynamic_pressure * np.exp(-((np.hypot(y, z) - 0.4) ** 2) / 0.04**2)
    u = np.sqrt(flow.u**2 - 2 * haze / 1.2)
    hazy = Flow(grid, u, flow.v, flow.w, flow.total_pressure - haze, flow.static_pressure, 1.2)
    split = drag_split(hazy, SLOW, np.hypot(y, z) < 0.2)
    assert split.irreversible == pytest.approx(wake.drag, rel=1e-6)
    # ∬ of a ring: 2πr √π s; the defect is haze/(ρU) to 5e-4.
    assert split.outside == pytest.approx(
        0.001 * SLOW.dynamic_pressure * 2 * np.pi * 0.4 * np.sqrt(np.pi) * 0.04, rel=2e-3
    )
    assert split.total == pytest.approx(split.irreversible + split.outside, rel=1e-5)


@pytest.mark.parametrize("mach", [0.0, 0.05])
def test_first_order_forms_bracket_the_exact_drag(mach):
    stream = stream_at(mach) if mach else SLOW
    wake = ExpandedWake(stream, defect=0.2, width=0.1)
    axis = np.linspace(-0.75, 0.75, 151)
    grid = UniformGrid.from_axes(axis, axis)
    flow = flow_on(grid, wake.state_on(grid), stream)
    bracket = first_order_bracket(flow, stream, np.ones(grid.shape, bool))
    assert bracket.mass_flux_weighted / wake.drag - 1 == pytest.approx(-0.048, abs=1.5e-3)
    assert bracket.local / wake.drag - 1 == pytest.approx(0.056, abs=1.5e-3)


def test_power_balance_is_the_momentum_balance_point_by_point():
    rng = np.random.default_rng(7)
    shape = (20, 50)
    u, v, w = (40.0 * (base + 0.3 * rng.normal(size=shape)) for base in (1.0, 0.0, 0.0))
    static = 100e3 + 300.0 * rng.normal(size=shape)
    total = static + 0.6 * (u**2 + v**2 + w**2)
    flow = Flow(UniformGrid(0, 0, 1.0, 1.0, 50, 20), u, v, w, total, static, 1.2)
    terms = power_integrands(flow, SLOW)
    momentum = 1.2 * u * (40.0 - u) - (static - 100e3)
    assert np.abs(sum(terms.values()) - 40.0 * momentum).max() < 1e-10 * 40.0 * SLOW.dynamic_pressure
    assert np.abs(terms["crossflow_kinetic"] - 0.6 * u * (v**2 + w**2)).max() < 1e-9
    with pytest.raises(InputError, match="incompressible flow only"):
        power_integrands(flow, stream_at(0.6))
    with pytest.raises(InputError, match="needs a compressible stream"):
        exergy_integrands(flow, SLOW)


@pytest.mark.parametrize("mach", [0.3, 0.85])
def test_exergy_balance_closes_point_by_point_with_heat(mach):
    stream = stream_at(mach)
    flow = heated_states(stream, 8)
    terms = exergy_integrands(flow, stream)
    # Identity of formulas A14, heat put in taken out again; the terms are of the size of ρ U cv T.
    scale = stream.density * stream.speed * 2.5 * stream.gas_constant * stream.temperature
    closed = stream.speed * momentum_integrand(flow, stream)
    assert np.abs(sum(terms.values()) - closed).max() < 1e-10 * scale
    temperature = flow.static_pressure / (flow.density * stream.gas_constant)
    rise = stream.gas_constant * (3.5 * np.log(temperature / 250.0) - np.log(flow.static_pressure / 60e3))
    assert terms["anergy"] == pytest.approx(250.0 * flow.density * flow.u * rise, rel=1e-9, abs=1e-6 * scale)
