"""Checks: each passes on a good survey, and warns or fails on the survey it is there for."""

import math
from dataclasses import dataclass, replace

import numpy as np
import pytest

from wakeledger.core.grid import UniformGrid
from wakeledger.core.names import CHECKS
from wakeledger.physics.fields.differences import axial_vorticity
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.fields.wake_region import wake_region
from wakeledger.physics.methods.vorticity_area import vorticity_forces
from wakeledger.run import checks
from wakeledger.run.chain.outputs import OUTPUTS
from wakeledger.run.chain.reduction import Reduction
from wakeledger.run.traverse.probe_range import ProbeRange
from wakeledger.run.uncertainty.channel_noise import ChannelNoise, NoiseFindings, Shown, sums_factor
from wakeledger.stream.reference import Reference
from wakeledger.synthetic.aircraft import wing_wake

STREAM = Reference(speed=42.0, density=1.185, static_pressure=100.6e3)
WAKE = wing_wake(STREAM)


@dataclass(frozen=True)
class Core:
    y: float = 0.47
    z: float = 0.0
    core_length: float = 0.03
    circulation: float = 2.0


def reduction(grid=None, *, u_shift=0.0, loss_shift=0.0, offset=(0.0, 0.0)):
    grid = grid or UniformGrid(-0.81, -0.36, 0.012, 0.012, 136, 61)
    state = WAKE.state_on(grid)
    flow = Flow(grid, state.u + u_shift, state.v, state.w, state.total_pressure, state.static_pressure, STREAM.density)
    xi = axial_vorticity(state.v, state.w, grid)
    region = wake_region(STREAM.total_pressure - state.total_pressure, xi, grid)
    inside = np.where(region.mask, xi, 0.0)
    values = dict.fromkeys(OUTPUTS, math.nan) | WAKE.truth.rows()
    none = np.zeros(grid.shape)
    return Reduction(
        STREAM,
        flow,
        region,
        inside,
        vorticity_forces(inside, grid, STREAM),
        none,
        none,
        loss_shift,
        offset,
        values,
        0.0,
        (0.0, 0.0),
    )


def facts(nominal, **changes):
    plain = checks.Facts((Core(),), 0.012, np.zeros(nominal.flow.grid.shape, bool), 0.001, 0.01)
    return replace(plain, **changes)


def findings(*, declared=0.12, shown=0.12, size=900.0, lengths=(math.nan, math.nan), cells=(), name="v"):
    """Noise of one channel, declared and shown."""
    by_neighbours = Shown(shown, lengths, size, sums_factor(cells))
    return NoiseFindings((ChannelNoise(name, by_neighbours, declared, shared=False, sources=("noise of v",)),), 50.0)


GOOD = reduction()


def test_a_good_survey_passes_every_check_in_the_ledgers_order():
    probe = ProbeRange("reynolds", (5e3, 2e4), (6e3, 9e3), 0.0, 0.0)
    found = checks.all_checks(GOOD, facts(GOOD, probe=probe, noise=findings()))
    assert tuple(check.name for check in found) == CHECKS
    # Without a calibration that tells its number there is nothing to check.
    assert tuple(check.name for check in checks.all_checks(GOOD, facts(GOOD))) == CHECKS[:-1]
    assert {check.verdict for check in found} == {"pass"}
    assert all(check.limit == checks.LIMITS[check.name][0] for check in found)
    assert all(0 <= check.value <= check.limit for check in found)


@pytest.mark.parametrize(("shown", "verdict"), [(0.12, "pass"), (0.16, "pass"), (0.24, "warn"), (0.06, "warn")])
def test_declared_noise_is_held_against_what_the_data_show(shown, verdict):
    check = checks.declared_noise(findings(shown=shown))
    assert check.verdict == verdict
    # Three standard errors of 900 points, exp(-3/√1800), are taken off the factor, which is never below 1.
    factor = max(shown / 0.12, 0.12 / shown)
    assert check.value == pytest.approx(max(factor * 0.9317, 1.0), rel=1e-3)
    if verdict == "warn":
        assert (
            f"v {shown:.2g} m/s, declared 0.12 m/s" in check.message
            and "correct the size of 'noise of v'" in check.message
        )


def test_few_points_do_not_call_a_declaration_wrong():
    assert checks.declared_noise(findings(shown=0.24, size=30.0)).verdict == "pass"
    assert checks.declared_noise(findings(shown=0.60, size=30.0)).verdict == "warn"


def test_noise_that_neighbours_share_warns_with_what_sums_err_by():
    check = checks.declared_noise(findings(lengths=(0.012, 0.012), cells=(1.0, 1.0)))
    # Σ exp(-k²/2) = 2.5066 along each axis, which is √(2π) to five digits.
    assert check.verdict == "warn" and check.value == pytest.approx(2.5066, rel=1e-4)
    assert "v over about 12 mm" in check.message and "correlation_length" in check.message
    faint = checks.declared_noise(findings(lengths=(0.006, math.nan), cells=(0.5, math.nan)))
    assert faint.verdict == "warn" and faint.value == pytest.approx(1.5)


def test_declared_noise_does_not_apply_where_nothing_can_be_compared():
    for found, said in (
        (None, "No noise is declared"),
        (findings(declared=0.0), "No noise is declared"),
        (findings(shown=math.nan, size=0.0), "Too little flow outside the wake"),
    ):
        check = checks.declared_noise(found)
        assert check.verdict == "not_applicable" and math.isnan(check.value) and said in check.message


def test_exact_data_under_declared_noise_give_a_finite_value():
    check = checks.declared_noise(findings(shown=0.0))
    assert check.verdict == "warn" and check.value == 1000.0


def test_a_window_that_cuts_the_starboard_vortex_is_reported():
    cut = reduction(UniformGrid(-0.81, -0.36, 0.012, 0.012, 106, 61))
    found = {check.name: check for check in checks.all_checks(cut, facts(cut))}
    assert found["edge_vorticity"].verdict == "fail"
    assert "starboard" in found["edge_vorticity"].message
    assert found["net_circulation"].verdict == "fail"


def test_a_window_that_cuts_the_wake_below_names_the_lower_edge():
    cut = reduction(UniformGrid(-0.81, -0.03, 0.012, 0.012, 136, 34))
    check = checks.edge_total_pressure_loss(cut)
    assert check.verdict in ("warn", "fail")
    assert "lower" in check.message


@pytest.mark.parametrize(("shift", "verdict"), [(0.0, "pass"), (0.2, "warn"), (-2.0, "fail")])
def test_axial_velocity_off_the_streams(shift, verdict):
    check = checks.mass_balance(reduction(u_shift=shift))
    assert check.verdict == verdict
    if shift:
        assert check.value == pytest.approx(abs(shift) / STREAM.speed, rel=0.1)


@pytest.mark.parametrize(("spacing", "verdict"), [(0.012, "pass"), (0.030, "warn"), (0.060, "fail")])
def test_core_resolution(spacing, verdict):
    check = checks.core_resolution(facts(GOOD, raw_spacing=spacing))
    assert check.verdict == verdict
    assert check.value == pytest.approx(spacing / 0.03)
    assert checks.core_resolution(facts(GOOD, vortices=())).verdict == "not_applicable"


def test_core_resolution_is_judged_where_the_core_is():
    # Uneven points: coarse far from the core, fine in it.
    check = checks.core_resolution(facts(GOOD, raw_spacing=0.1, spacings=(0.01,)))
    assert check.verdict == "pass"
    assert check.value == pytest.approx(0.01 / 0.03)


def test_core_resolution_passes_over_a_faint_eddy():
    eddy = Core(core_length=0.005, circulation=-0.1)
    assert checks.core_resolution(facts(GOOD, vortices=(eddy, Core()))).value == pytest.approx(0.012 / 0.03)
    assert checks.core_resolution(facts(GOOD, vortices=(replace(eddy, circulation=-0.5), Core()))).verdict == "fail"


@pytest.mark.parametrize(("share", "verdict"), [(0.01, "pass"), (0.05, "warn"), (0.3, "fail")])
def test_noise_bias(share, verdict):
    bias = share * float(GOOD.forces.induced_drag)
    assert checks.noise_bias(GOOD, facts(GOOD, bias=bias)).verdict == verdict
    assert checks.noise_bias(GOOD, facts(GOOD, bias=math.nan)).verdict == "not_applicable"


def test_outer_flow_warns_of_a_drifted_reference_and_of_a_turned_probe():
    worth = GOOD.region.mask.sum() * GOOD.flow.grid.cell_area
    drift = 0.1 * GOOD.values["total_drag"] / worth
    assert checks.outer_flow(reduction(loss_shift=drift), facts(GOOD)).verdict == "warn"
    assert checks.outer_flow(reduction(loss_shift=-4 * drift), facts(GOOD)).verdict == "fail"
    turned = checks.outer_flow(reduction(offset=(0.0, STREAM.speed * math.radians(0.8))), facts(GOOD))
    assert turned.verdict == "warn"
    assert "+0.80 deg in pitch" in turned.message
    assert turned.value > turned.limit


def test_missing_points_fail_where_a_core_was_filled_in():
    grid = GOOD.flow.grid
    filled = np.zeros(grid.shape, bool)
    filled[0, 0] = True
    assert checks.missing_points(GOOD, facts(GOOD, filled=filled)).verdict == "pass"
    filled[round((0.0 - grid.z0) / grid.dz), round((0.47 - grid.y0) / grid.dy)] = True
    core = checks.missing_points(GOOD, facts(GOOD, filled=filled))
    assert core.verdict == "fail"
    assert "y = 0.47 m" in core.message
    many = np.zeros(grid.shape, bool)
    many[GOOD.region.mask] = np.arange(GOOD.region.mask.sum()) % 20 == 0
    assert checks.missing_points(GOOD, facts(GOOD, filled=many, vortices=())).verdict == "warn"


def test_a_plane_without_vorticity_says_so():
    still = replace(
        GOOD,
        vorticity=np.zeros(GOOD.flow.grid.shape),
        forces=vorticity_forces(np.zeros(GOOD.flow.grid.shape), GOOD.flow.grid, STREAM),
    )
    assert checks.net_circulation(still).verdict == "not_applicable"
    assert checks.edge_vorticity(still).verdict == "not_applicable"
    assert all(check.message for check in checks.all_checks(still, facts(still, vortices=())))


def test_net_circulation_of_a_wake_cut_in_half_is_all_of_it():
    grid = UniformGrid(0.0, -0.36, 0.012, 0.012, 70, 61)
    half = reduction(grid)
    # The starboard half alone has one sign: no more than all of it can be unbalanced.
    assert checks.net_circulation(half).value == pytest.approx(1.0, abs=0.05)
