"""Viscous, wave and slipstream parts of a plane against shocks by Rankine-Hugoniot and jets in closed form."""

from dataclasses import dataclass, replace

import numpy as np
import pytest
from scipy.special import erf

from wakeledger.core.errors import InputError
from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields.entropy import entropy_loss
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.fields.loss_regions import energised_region, shock_sensor, viscous_region
from wakeledger.physics.methods.slipstream import slipstream
from wakeledger.physics.methods.velocity_defect import drag_split
from wakeledger.physics.methods.wave_split import wave_split
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import ShockedWake, normal_shock_entropy, stream_tube_wave_drag

STREAM = Reference(speed=250.0, density=0.5, static_pressure=35e3, compressible=True)
GRID = UniformGrid.from_axes(np.linspace(-1.1, 1.1, 111), np.linspace(-0.4, 0.7, 221))
#: 0.015 % of the static pressure: far below the shocks here, above rounding.
LEVEL = 1.75


def flow_of_state(state, grid=GRID):
    return Flow(
        grid,
        state.u,
        state.v,
        state.w,
        state.total_pressure,
        state.static_pressure,
        state.density,
        state.total_temperature,
    )


@dataclass(frozen=True, eq=False)
class OtherShock(ShockedWake):
    """Shocks whose Mach number does not fall linearly."""

    power: float = 2.0

    def shock_entropy(self, y, z):
        t = np.clip(z / self.height, -0.1, 1.0)
        shape = np.sqrt(1 - t) if self.power == 0.5 else 1 - np.sign(t) * np.abs(t) ** self.power
        mach = 1 + (self.foot_mach - 1) * self._fade(y) * shape
        return (1 + erf(z / self.smear)) / 2 * normal_shock_entropy(mach)


@dataclass(frozen=True, eq=False)
class OtherWake(ShockedWake):
    """Viscous wakes that are not Gaussian: broader above, broader below, compact, with exponential tails."""

    kind: str = "above"

    def viscous_entropy(self, y, z):
        peak = super().viscous_entropy(y, 0 * z)
        x = z / self.width
        if self.kind == "above":
            return peak * np.exp(-(np.where(x > 0, x / 1.6, x) ** 2))
        if self.kind == "below":
            return peak * np.exp(-(np.where(x > 0, x, x / 1.8) ** 2))
        if self.kind == "compact":
            return peak * np.where(np.abs(x) < 1.7, np.cos(np.pi * x / 3.4) ** 2, 0.0)
        return peak / np.cosh(1.1 * x) ** 2


def test_normal_shock_in_a_stream_tube():
    """A tube of one square metre behind a shock at Mach 1.4, blurred at its edges: its wave drag within 1 %."""
    half, blur = 0.5, 0.01
    y, z = GRID.mesh()

    def inside(x):
        return (erf((x + half) / blur) - erf((x - half) / blur)) / 2

    entropy = normal_shock_entropy(1.4) * inside(y) * inside(z - 0.15)
    temperature = STREAM.temperature * np.exp(entropy / 3.5)
    u = np.sqrt(7 * STREAM.gas_constant * (STREAM.total_temperature - temperature))
    still = np.zeros(GRID.shape)
    total = STREAM.total_pressure * np.exp(-entropy)
    density = STREAM.static_pressure / (STREAM.gas_constant * temperature)
    flow = Flow(GRID, u, still, still, total, still + 35e3, density, still + STREAM.total_temperature)
    # The tube at the shock that is 1 m² on the plane: the same mass flow.
    behind = normal_shock_entropy(1.4)
    warm = STREAM.temperature * np.exp(behind / 3.5)
    speed = np.sqrt(7 * STREAM.gas_constant * (STREAM.total_temperature - warm))
    ahead = STREAM.total_temperature / (1 + 0.2 * 1.4**2)
    shock_flux = STREAM.density * (ahead / STREAM.temperature) ** 2.5
    shock_flux *= 1.4 * np.sqrt(1.4 * STREAM.gas_constant * ahead)
    area = 35e3 / (STREAM.gas_constant * warm) * speed / shock_flux
    expected = stream_tube_wave_drag(STREAM, mach=1.4, area=area)
    found = wave_split(flow, STREAM, level=LEVEL)
    assert found.wave_drag == pytest.approx(expected, rel=0.01)
    assert abs(found.viscous_drag) < 0.01 * expected
    assert 0 < found.split_uncertainty < 0.01 * expected


def test_shock_alone_is_all_wave_drag():
    wake = ShockedWake(STREAM, defect=0.0)
    found = wave_split(flow_of_state(wake.state_on(GRID)), STREAM, level=LEVEL)
    assert found.wave_drag == pytest.approx(wake.wave_drag, rel=1e-3)
    assert not found.regions.viscous.any() and found.continued_drag == 0.0
    assert found.split_uncertainty > 0


def test_wake_alone_has_no_wave_drag_but_a_limit_of_detection():
    wake = ShockedWake(STREAM, foot_mach=1.0)
    found = wave_split(flow_of_state(wake.state_on(GRID)), STREAM, level=LEVEL)
    assert found.viscous_drag == pytest.approx(wake.viscous_drag, rel=1e-3)
    assert abs(found.wave_drag) <= 2 * found.split_uncertainty
    assert 0 < found.split_uncertainty < 1e-3 * wake.viscous_drag


@pytest.mark.parametrize(
    "wake",
    [
        ShockedWake(STREAM),
        ShockedWake(STREAM, foot_mach=1.2),
        ShockedWake(STREAM, foot_mach=1.4),
        ShockedWake(STREAM, height=0.3),
        ShockedWake(STREAM, width=0.02, smear=0.01),
        ShockedWake(STREAM, width=0.06, smear=0.04),
        ShockedWake(STREAM, defect=0.5, smear=0.03),
        OtherShock(STREAM, power=2.0),
        OtherShock(STREAM, power=0.5),
    ],
    ids=["plain", "weak", "strong", "low", "thin wake", "thick wake", "deep wake", "square", "root"],
)
def test_shock_over_a_wake_is_split_within_the_stated_uncertainty(wake):
    flow = flow_of_state(wake.state_on(GRID))
    found = wave_split(flow, STREAM, level=LEVEL)
    error = found.wave_drag - wake.wave_drag
    assert abs(error) <= 2 * found.split_uncertainty
    # The uncertainty must mean something, too.
    assert found.split_uncertainty < 0.12 * wake.wave_drag
    assert found.wave_drag == pytest.approx(wake.wave_drag, rel=0.08)
    # A good part of the answer was continued under the wake: leaving it out would fail.
    assert found.continued_drag > 4 * found.split_uncertainty
    everything = drag_split(flow, STREAM, np.ones(GRID.shape, bool)).irreversible
    parts = found.viscous_drag + found.wave_drag + found.numerical_drag + found.energised_drag
    assert parts == pytest.approx(everything, rel=1e-12)
    assert everything == pytest.approx(wake.wave_drag + wake.viscous_drag, rel=1e-3)


@pytest.mark.parametrize("foot_mach", [1.0, 1.2, 1.4])
@pytest.mark.parametrize("kind", ["above", "below", "compact", "tails"])
def test_the_viscous_profile_need_not_be_gaussian(kind, foot_mach):
    wake = OtherWake(STREAM, kind=kind, foot_mach=foot_mach)
    found = wave_split(flow_of_state(wake.state_on(GRID)), STREAM, level=LEVEL)
    assert abs(found.wave_drag - wake.wave_drag) <= 2 * found.split_uncertainty
    assert found.viscous_drag == pytest.approx(wake.viscous_drag, rel=0.04)
    assert found.split_uncertainty < 0.05 * wake.viscous_drag


def test_a_shock_as_low_as_the_wake_is_thick_is_said_to_be_in_doubt():
    wake = ShockedWake(STREAM, height=0.25, width=0.06)
    found = wave_split(flow_of_state(wake.state_on(GRID)), STREAM, level=LEVEL)
    # Missed, and within 4 % of the viscous drag; that there may be one is in the tails.
    assert found.wave_drag < 0.1 * wake.wave_drag
    assert found.tail_drag > 5.0
    gaussian = wave_split(flow_of_state(ShockedWake(STREAM, foot_mach=1.0).state_on(GRID)), STREAM, level=LEVEL)
    assert gaussian.tail_drag < 0.5


def test_wakes_and_vortices_one_above_the_other_are_no_shocks():
    """A tip vortex above the sheet and a tail's wake below it: narrow peaks all, and the shock is still found."""
    wake = ShockedWake(STREAM, width=0.025)
    state = wake.state_on(GRID)
    y, z = GRID.mesh()
    more = 0.06 * np.exp(-((y - 0.75) ** 2 + (z - 0.3) ** 2) / 0.05**2)
    more += 0.02 * np.exp(-(((z + 0.2) / 0.02) ** 2)) * (1 - np.clip(np.abs(y) / 0.5, 0, 1) ** 2) ** 2
    entropy = np.log(STREAM.total_pressure / state.total_pressure) + more
    temperature = STREAM.temperature * np.exp(entropy / 3.5)
    u = np.sqrt(7 * STREAM.gas_constant * (STREAM.total_temperature - temperature))
    density = STREAM.static_pressure / (STREAM.gas_constant * temperature)
    total = STREAM.total_pressure * np.exp(-entropy)
    flow = replace(flow_of_state(state), u=u, density=density, total_pressure=total)
    found = wave_split(flow, STREAM, level=LEVEL)
    assert abs(found.wave_drag - wake.wave_drag) <= 2 * found.split_uncertainty
    assert found.split_uncertainty < 0.12 * wake.wave_drag
    calm = ShockedWake(STREAM, width=0.025, foot_mach=1.0)
    entropy = np.log(STREAM.total_pressure / calm.state_on(GRID).total_pressure) + more
    quiet = wave_split(replace(flow, total_pressure=STREAM.total_pressure * np.exp(-entropy)), STREAM, level=LEVEL)
    assert abs(quiet.wave_drag) <= max(2 * quiet.split_uncertainty, 0.01 * wake.wave_drag)


def test_noise_is_no_shock_and_hides_none():
    wake = ShockedWake(STREAM)
    state = wake.state_on(GRID)
    noise = 1e-3 * STREAM.dynamic_pressure * np.random.default_rng(4).normal(size=GRID.shape)
    flow = flow_of_state(replace(state, total_pressure=state.total_pressure + noise))
    found = wave_split(flow, STREAM, level=30.0)
    assert abs(found.wave_drag - wake.wave_drag) <= 2 * found.split_uncertainty
    assert found.split_uncertainty < 0.12 * wake.wave_drag
    calm = ShockedWake(STREAM, foot_mach=1.0).state_on(GRID)
    quiet = wave_split(flow_of_state(replace(calm, total_pressure=calm.total_pressure + noise)), STREAM, level=60.0)
    assert abs(quiet.wave_drag) <= 2 * quiet.split_uncertainty


def test_turbulent_viscosity_finds_the_wake():
    wake = ShockedWake(STREAM)
    y, z = GRID.mesh()
    viscosity = 1e-3 * wake.viscous_entropy(y, 0.75 * z) + 1e-6
    flow = flow_of_state(wake.state_on(GRID))
    found = wave_split(flow, STREAM, level=LEVEL, turbulent_viscosity=viscosity)
    assert abs(found.wave_drag - wake.wave_drag) <= 2 * found.split_uncertainty
    region = viscous_region(entropy_loss(flow, STREAM), GRID, turbulent_viscosity=viscosity)
    # exp(-(0.75 z/s)²) falls to 2 % at z = 2.6 s.
    middle = GRID.ny // 2
    assert np.count_nonzero(region[:, middle]) * GRID.dz == pytest.approx(2 * 2.64 * 0.04, abs=2 * GRID.dz)
    assert not viscous_region(flow.u, GRID, turbulent_viscosity=np.full(GRID.shape, 1e-6)).any()
    given = wave_split(flow, STREAM, level=LEVEL, viscous=region)
    assert given.wave_drag == pytest.approx(found.wave_drag, rel=1e-12)
    nowhere = wave_split(flow, STREAM, level=LEVEL, shock=np.zeros(GRID.shape, bool))
    assert nowhere.wave_drag == 0.0 and nowhere.numerical_drag > 0


def test_slow_planes_and_levels_of_nothing_are_refused():
    flow = flow_of_state(ShockedWake(STREAM).state_on(GRID))
    slow = Reference(speed=40.0, density=1.2, static_pressure=1e5)
    with pytest.raises(InputError, match="needs a compressible stream"):
        wave_split(flow, slow, level=LEVEL)
    with pytest.raises(ValueError, match="must be positive"):
        wave_split(flow, STREAM, level=0.0)


def test_shock_sensor_is_the_normal_mach_number():
    gradient = (np.array([3.0, 4.0, 0.0, -1.0]), np.array([4.0, 0.0, 0.0, 0.0]), np.zeros(4))
    velocity = (np.full(4, 400.0), np.full(4, 100.0), np.full(4, 7.0))
    expected = [(0.6 * 400 + 0.8 * 100) / 320, 400 / 320, 0.0, -400 / 320]
    assert shock_sensor(velocity, gradient, np.full(4, 320.0)) == pytest.approx(expected, rel=1e-14)


def jet(stream, *, excess=0.2, swirl=0.0, radius=0.2):
    """A smooth jet at the stream's pressure with solid-body swirl inside the radius; pressure balances the swirl."""
    axis = np.linspace(-1.0, 1.0, 201)
    grid = UniformGrid.from_axes(axis, axis)
    y, z = grid.mesh()
    r2 = (y**2 + z**2) / radius**2
    bell = np.exp(-r2)
    u = stream.speed * (1 + excess * bell)
    turn = swirl * stream.speed / radius * np.exp(-r2)
    v, w = -turn * z, turn * y
    # dp/dr = rho v_theta^2/r with v_theta = swirl U (r/R) exp(-r²/R²): p = -rho (swirl U)²/4 exp(-2 r²/R²).
    static = stream.static_pressure - stream.density * (swirl * stream.speed) ** 2 / 4 * np.exp(-2 * r2)
    total = static + 0.5 * stream.density * (u**2 + v**2 + w**2)
    return Flow(grid, u, v, w, total, static, stream.density)


def test_slipstream_thrust_power_and_swirl():
    slow = Reference(speed=40.0, density=1.2, static_pressure=1e5)
    a, radius, area = 0.2, 0.2, np.pi * 0.2**2
    plain = slipstream(jet(slow, excess=a), slow, np.ones((201, 201), bool))
    # ∬ of powers of a Gaussian: ρU²A(a + a²/2); u(H − H∞) = ½ρ u (u² − U²) = ½ρU³ (2a + 3a² + a³).
    assert plain.thrust == pytest.approx(1.2 * 1600 * area * (a + a**2 / 2), rel=1e-9)
    power = 0.5 * 1.2 * 40.0**3 * area * (2 * a + 3 * a**2 / 2 + a**3 / 3)
    assert plain.power == pytest.approx(power, rel=1e-9)
    assert plain.swirl_energy == 0.0
    turning = jet(slow, excess=a, swirl=0.3, radius=radius)
    swirled = slipstream(turning, slow, np.ones((201, 201), bool))
    # ½ρ∬v_θ² = ½ρ (0.3U)² πR² ∫ q exp(-2q) dq = a quarter of ½ρ(0.3U)²πR²; the pressure takes the same off the thrust.
    energy = 0.5 * 1.2 * (0.3 * 40.0) ** 2 * area / 4
    assert swirled.swirl_energy == pytest.approx(energy, rel=1e-9)
    assert swirled.thrust == pytest.approx(plain.thrust - energy, rel=1e-9)
    h_form = (
        turning.total_pressure - slow.total_pressure + 0.6 * ((turning.u - 40.0) ** 2 - turning.v**2 - turning.w**2)
    )
    assert swirled.thrust == pytest.approx(turning.grid.integrate(h_form), rel=1e-9)


def test_heated_flow_is_kept_apart():
    """A jet of hot air with the stream's total pressure: seen by its temperature, charged to no wake and no shock."""
    wake = ShockedWake(STREAM, foot_mach=1.0, width=0.03)
    state = wake.state_on(GRID)
    y, z = GRID.mesh()
    warming = 1 + 0.1 * np.exp(-((y - 0.1) ** 2 + (z - 0.4) ** 2) / 0.08**2)
    # The same Mach number and pressure, warmer: u as the root of T.
    flow = Flow(
        GRID,
        state.u * np.sqrt(warming),
        state.v,
        state.w,
        state.total_pressure,
        state.static_pressure,
        state.density / warming,
        state.total_temperature * warming,
    )
    region = energised_region(flow, STREAM, level=1e-3)
    assert region[np.argmin(np.abs(GRID.z - 0.4)), np.argmin(np.abs(GRID.y - 0.1))]
    assert not region[:, : GRID.ny // 4].any()
    found = wave_split(flow, STREAM, level=LEVEL, energised=region)
    # ∬ρu(u − U) of the hot jet: ρu falls as 1/√ as u grows.
    gain = GRID.integrate(state.density * state.u * STREAM.speed * (np.sqrt(warming) - 1) / np.sqrt(warming))
    assert -found.energised_drag == pytest.approx(gain, rel=5e-3)
    assert found.viscous_drag == pytest.approx(wake.viscous_drag, rel=2e-3)
    assert abs(found.wave_drag) <= 2 * found.split_uncertainty
    jetstream = slipstream(flow, STREAM, region)
    assert jetstream.thrust == pytest.approx(-found.energised_drag, rel=1e-6)
    assert jetstream.power > 0
