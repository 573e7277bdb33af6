"""Corrections of raw traverses: each inserted error comes out again, no error gives no correction, signs matter.

Figures marked [V] are those of a check done before this program existed, to the digits they were given with.
"""

import pickle

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wakeledger.core.errors import DataError
from wakeledger.core.grid import UniformGrid
from wakeledger.intake.probe.backlash import correct_backlash, estimate_backlash, row_senses
from wakeledger.intake.probe.displacement import displacement_on_line, displacement_on_plane, speed_noise
from wakeledger.intake.probe.lag import correct_lag, estimate_lag, make_rate_filter
from wakeledger.intake.probe.misalignment import correct_misalignment, from_outer_flow, from_roll_pair
from wakeledger.intake.probe.wall_proximity import correct_speed, correct_total_pressure, speed_deficit
from wakeledger.physics.methods.vorticity_area import vorticity_drag
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import GaussianLosses, SyntheticWake, grid_positions, vortex_pair
from wakeledger.synthetic.probes import TraverseConditions, record_traverse, sphere_probe

REFERENCE = Reference(speed=40.0, density=1.2, static_pressure=1e5)
CORE = 0.06
PAIR = vortex_pair(circulation=2.0, spacing=0.8, core=CORE)
LOSSES = GaussianLosses(np.linspace(-0.4, 0.4, 9), np.zeros(9), np.full(9, 0.4), np.full(9, 0.06))
WAKE = SyntheticWake(REFERENCE, (PAIR,), LOSSES, PAIR)
SPACING = CORE / 2
Y, Z = np.arange(-0.75, 0.7501, SPACING), np.arange(-0.3, 0.3001, SPACING)
ONE_WAY, TO_AND_FRO = grid_positions(Y, Z), grid_positions(Y, Z, serpentine=True)
BOTH_WAYS = grid_positions(Y, np.repeat(Z, 2), serpentine=True)


def take(positions, *, seed=5, **conditions):
    return record_traverse(
        WAKE,
        positions,
        sphere_probe(5),
        generator=np.random.default_rng(seed),
        conditions=TraverseConditions(**conditions),
    )


def rms(values):
    return float(np.sqrt(np.mean(np.square(values))))


# -- displacement in shear ----------------------------------------------------------------------------------------

A_WAKE, STEP = 0.15, 0.1  # depth of a Gaussian wake exp(-z²) and the distance of its points in widths
LINE = np.arange(-5, 5 + 1e-9, STEP)


def wake_profile(z, depth=A_WAKE):
    return 1 - depth * np.exp(-(z**2))


def section_drag(u):
    """Momentum loss ∫u(1 − u) dz of a wake in the stream's static pressure."""
    return float(np.sum(u * (1 - u)) * STEP)


@pytest.mark.parametrize(("ratio", "published"), [(0.1, -1.6), (0.2, -3.2)])
def test_displacement_costs_what_was_found_and_is_put_right(ratio, published):
    read = wake_profile(LINE + 0.15 * ratio * np.sign(LINE))
    exact = section_drag(wake_profile(LINE))
    # [V] −1.6 % and −3.2 % of c_d at d/L_w = 0.1 and 0.2.
    assert_allclose(100 * (section_drag(read) / exact - 1), published, atol=0.05)
    put_right = displacement_on_line(read, read, LINE, diameter=ratio)
    # Second order in the displacement over the spacing, at the crest of the wake.
    assert abs(section_drag(put_right.values) / exact - 1) < 4e-4
    assert_allclose(put_right.uncorrected, read, rtol=1e-14)
    # The stated uncertainty is a third of the correction: 0.05 of 0.15 diameters.
    assert_allclose(put_right.per_sigma, put_right.size / 3, rtol=1e-12)
    wrong = displacement_on_line(read, read, LINE, diameter=ratio, coefficient=-0.15)
    assert section_drag(wrong.values) / exact - 1 < -0.03 * ratio / 0.1


def test_displacement_of_nothing_is_nothing():
    read = wake_profile(LINE)
    assert not displacement_on_line(read, read, LINE, diameter=0.0).size.any()
    flat = np.full(LINE.size, 40.0)
    assert not displacement_on_line(flat, flat, LINE, diameter=0.2).size.any()
    grid = UniformGrid(0.0, 0.0, 0.1, 0.1, 8, 6)
    still = displacement_on_plane(np.full((3, 6, 8), 7.0), np.full((6, 8), 40.0), grid, diameter=0.1)
    assert not still.size.any()
    assert_allclose(still.values, 7.0)


def test_displacement_on_uneven_places():
    z = np.sort(np.concatenate([LINE, LINE[40:60] + 0.03]))
    read = wake_profile(z + 0.015 * np.sign(z))
    got = displacement_on_line(read, read, z, diameter=0.1, noise=0.0)
    away = np.abs(z) > 0.25
    assert np.abs(got.values - wake_profile(z))[away].max() < 0.1 * np.abs(read - wake_profile(z))[away].max()


def plane_of(positions, diameter, coefficient=0.15, spacing=SPACING):
    """State on a grid as a probe of a given tip reads it."""
    grid = UniformGrid.from_axes(np.unique(positions.y), np.unique(positions.z))
    y, z = grid.mesh()
    step = 1e-5

    def speed(y, z):
        state = WAKE.state(y, z)
        return np.sqrt(state.u**2 + state.v**2 + state.w**2)

    by_y = (speed(y + step, z) - speed(y - step, z)) / (2 * step)
    by_z = (speed(y, z + step) - speed(y, z - step)) / (2 * step)
    norm = np.hypot(by_y, by_z) + 1e-6
    shift = coefficient * diameter
    return grid, WAKE.state(y + shift * by_y / norm, z + shift * by_z / norm), WAKE.state(y, z)


def test_displacement_on_a_plane():
    fine = grid_positions(np.arange(-0.75, 0.7501, CORE / 4), np.arange(-0.3, 0.3001, CORE / 4))
    grid, read, true = plane_of(fine, 6e-3)
    fields = np.stack([read.u, read.v, read.w, read.total_pressure])
    exact = np.stack([true.u, true.v, true.w, true.total_pressure])
    got = displacement_on_plane(fields, np.linalg.norm(fields[:3], axis=0), grid, diameter=6e-3)
    before, after = (np.sum((x - exact)[3]) for x in (fields, got.values))
    # The loss lacks 2.7 % of itself before; what is left is of second order at the crest of the wake.
    loss = np.sum(REFERENCE.total_pressure - true.total_pressure)
    assert 0.015 < before / loss < 0.05
    assert abs(after) < 0.1 * abs(before)
    for k in range(4):
        assert rms((got.values - exact)[k]) < 0.35 * rms((fields - exact)[k])
    # A stack of draws goes through at once and gives the same.
    draws = displacement_on_plane(
        np.stack([fields, fields], axis=1), np.stack([np.linalg.norm(fields[:3], axis=0)] * 2), grid, diameter=6e-3
    )
    assert_allclose(draws.values[:, 1], got.values, rtol=1e-12)


def test_noise_is_not_rectified_into_a_loss():
    # Outside the wake nothing but noise: an unweighted shift towards the faster side would subtract k d |slope|.
    rng = np.random.default_rng(2)
    sigma, diameter = 0.001, 0.3 * STEP
    grid = UniformGrid(0.0, 0.0, STEP, STEP, 200, 200)
    read = 1 + sigma * rng.standard_normal((200, 200))
    assert_allclose(speed_noise(read), sigma, rtol=0.03)
    size = displacement_on_plane(read, read, grid, diameter=diameter).size
    rectified = np.mean(np.hypot(*np.gradient(read, STEP))) * 0.15 * diameter
    assert abs(np.mean(size)) < 0.03 * rectified
    # In the wake the noise changes the correction by little: [V] −1.6 % is still put right within 0.1 % on average.
    true = section_drag(wake_profile(LINE))
    read = wake_profile(LINE + 0.015 * np.sign(LINE)) + 0.001 * rng.standard_normal((400, LINE.size))
    got = displacement_on_line(read, read, LINE, diameter=0.1)
    gain = np.mean([section_drag(x) for x in got.size + wake_profile(LINE + 0.015 * np.sign(LINE))]) / true - 1
    assert abs(gain) < 1e-3


# -- wall proximity -----------------------------------------------------------------------------------------------


def test_wall_proximity_is_that_of_common_practice():
    # check_values 6, from memory: dU/U = 0.015 exp(−3.5 (y/D − 0.5)) for y/D < 2, common practice.
    d = 3e-3
    assert_allclose(
        speed_deficit(np.array([0.5, 1.0, 1.999, 2.001, 10.0]) * d, diameter=d),
        [0.015, 0.015 * np.exp(-1.75), 0.015 * np.exp(-3.5 * 1.499), 0.0, 0.0],
        rtol=1e-12,
    )
    true = np.full(3, 40.0)
    distance = np.array([0.6, 1.2, 5.0]) * d
    got = correct_speed(true / (1 + speed_deficit(distance, diameter=d)), distance, diameter=d)
    assert_allclose(got.values, true, rtol=1e-12)
    assert (got.size[:2] > 0).all()
    assert got.size[2] == 0
    assert_allclose(got.per_sigma, 0.5 * got.size)
    total = correct_total_pressure(np.full(3, 900.0), np.zeros(3), distance, diameter=d)
    assert_allclose(np.sqrt(total.values / 900.0), 1 + speed_deficit(distance, diameter=d), rtol=1e-12)
    assert_allclose(total.values[2], 900.0, rtol=0)


def test_a_probe_inside_the_wall_is_refused():
    with pytest.raises(DataError, match="less than half its tip_diameter"):
        speed_deficit(np.array([0.001, 0.1]), diameter=0.003)


# -- tubing lag ---------------------------------------------------------------------------------------------------


def lagged(field, step, length, *, fine=16):
    """A field that lags along its last axis, from its values `fine` times as dense: exact for straight pieces."""
    ratio = step / fine / length
    kept = np.exp(-ratio)
    mean = (1 - kept) / ratio
    out = np.empty_like(field)
    out[..., 0] = field[..., 0]
    for k in range(1, field.shape[-1]):
        out[..., k] = kept * out[..., k - 1] + (1 - mean) * field[..., k] + (mean - kept) * field[..., k - 1]
    return out[..., ::fine]


class Vortices:
    """The reference pair a = 0.03 b on a grid of a/2, and its drag by the vorticity form."""

    core = 0.03
    step = core / 2
    pair = vortex_pair(circulation=1.0, spacing=1.0, core=core)
    grid = UniformGrid.from_axes(np.arange(-0.8, 0.8, step), np.arange(-0.3, 0.3, step))

    @classmethod
    def crossflow(cls, *, dense=1, before=0):
        """At the grid's points, or densely along y from `before` points ahead of them."""
        y = cls.grid.y0 + cls.step / dense * np.arange(-before * dense, (cls.grid.ny - 1) * dense + 1)
        return np.stack(cls.pair.velocity(*np.meshgrid(y, cls.grid.z)))

    @classmethod
    def lagged(cls, length, *, before=30):
        """Read with a lag along y, settled `before` points ahead of the grid."""
        return lagged(cls.crossflow(dense=16, before=before), cls.step, length)[..., before:]

    @classmethod
    def drag(cls, crossflow, *, edge=0):
        """½∬ψξ dA without the vorticity of the outermost lines."""
        mask = np.zeros(cls.grid.shape, bool)
        mask[edge : cls.grid.nz - edge, edge : cls.grid.ny - edge] = True
        return float(vorticity_drag(*crossflow, cls.grid, mask, density=1.0))


@pytest.mark.parametrize(("ratio", "published", "within"), [(0.25, -0.6, 0.05), (1.0, -7.0, 0.1)])
def test_lag_of_a_vortex_costs_what_was_found(ratio, published, within):
    # [V] L_s/a = 0.25: −0.6 % of D_i; 1: −7 %: the whole window, rows settled where they begin at its edge.
    exact = Vortices.drag(Vortices.crossflow())
    read = Vortices.lagged(ratio * Vortices.core, before=0)
    assert_allclose(100 * (Vortices.drag(read) / exact - 1), published, atol=within)


@pytest.mark.parametrize("ratio", [0.25, 1.0])
def test_lag_of_a_vortex_costs_the_closed_form_and_is_put_right(ratio):
    from scipy.integrate import quad

    # Derived: the lag filters ξ by 1/(1 + i k_y L), so each vortex loses Γ²/2π ∫ exp(−k²a²/2)(1 − (1 + k²L²)^−½) dk/k.
    lost, _ = quad(lambda k: np.exp(-(k**2) / 2) * (1 - 1 / np.sqrt(1 + (k * ratio) ** 2)) / k, 1e-9, 12)
    cost = -2 * lost / (np.log(1 / (2 * Vortices.core**2)) + np.euler_gamma)
    exact = Vortices.drag(Vortices.crossflow())
    read = Vortices.lagged(ratio * Vortices.core)
    # What the vortices do to each other is of order (L/b)²; at a/2 the differences are right to 1e-5.
    assert_allclose(Vortices.drag(read, edge=5) / exact - 1, cost, rtol=0.01)
    speed = 0.1
    time = np.tile(Vortices.grid.y / speed, Vortices.grid.nz)
    row = np.repeat(np.arange(Vortices.grid.nz), Vortices.grid.ny)
    values = read.reshape(2, -1)
    rates = make_rate_filter(time, row, values=values)
    got = correct_lag(values, rates, lag=ratio * Vortices.core / speed)
    # A spline's slope at two points per core is right to a few per cent of itself; at the end of a row it is one-sided.
    assert abs(Vortices.drag(got.values.reshape(read.shape), edge=5) / exact - 1) < 0.06 * abs(cost)
    wrong = correct_lag(values, rates, lag=-ratio * Vortices.core / speed)
    true = Vortices.crossflow().reshape(2, -1)
    assert rms(got.values - true) < 0.06 * rms(values - true)
    assert rms(wrong.values - true) > 1.5 * rms(values - true)


@pytest.mark.parametrize(("ratio", "published"), [(0.25, 0.9), (1.0, 5.6)])
def test_lag_of_a_wake_costs_what_was_found_and_is_put_right(ratio, published):
    line = np.concatenate([LINE, LINE[-1] + STEP * np.arange(1, 60)])
    dense = LINE[0] + STEP / 16 * np.arange((line.size - 1) * 16 + 1)
    read = lagged(wake_profile(dense, 0.2), STEP, ratio)
    exact = section_drag(wake_profile(LINE, 0.2))
    # [V] L_s/L_w = 0.25: +0.9 %; 1: +5.6 % of c_d (the loss integral stays, its square shrinks).
    assert_allclose(100 * (section_drag(read) / exact - 1), published, atol=0.08)
    rates = make_rate_filter(line, np.zeros(line.size, int), values=read)
    put_right = section_drag(correct_lag(read, rates, lag=ratio).values)
    assert abs(put_right / exact - 1) < 0.02 * published / 100


@pytest.mark.parametrize("positions", [ONE_WAY, TO_AND_FRO], ids=["one_way", "serpentine"])
def test_lag_is_taken_out_of_a_traverse(positions):
    lag, speed = 0.4, 0.05  # L_s = a/3
    clean = take(positions).holes
    raw = take(positions, lag=lag, speed=speed, row_time=5.0)
    rates = make_rate_filter(raw.values["time"], positions.row, values=raw.holes)
    got = correct_lag(raw.holes, rates, lag=lag, standard_uncertainty=0.02)
    # Points are half a core apart; the slopes of the splines are right to 1 %.
    assert rms(got.values - clean) < 0.02 * rms(raw.holes - clean)
    assert_allclose(got.per_sigma, got.size * 0.02 / lag, rtol=1e-12)
    assert rms(correct_lag(raw.holes, rates, lag=-lag).values - clean) > 1.9 * rms(raw.holes - clean)
    # One hole's tube may be longer than another's.
    lags = np.array([0.1, 0.2, 0.3, 0.4, 0.5])
    raw = take(positions, lag=tuple(lags), speed=speed)
    got = correct_lag(raw.holes, rates, lag=lags[:, None])
    assert rms(got.values - clean) < 0.02 * rms(raw.holes - clean)


def test_no_lag_no_correction_and_noise_is_not_amplified_needlessly():
    clean = take(TO_AND_FRO).holes
    raw = take(TO_AND_FRO, noise=4.0, lag=0.4, speed=0.05)
    time = raw.values["time"]
    rates = make_rate_filter(time, TO_AND_FRO.row, values=raw.holes)
    none = correct_lag(raw.holes, rates, lag=0.0)
    assert not none.size.any()
    assert_allclose(none.values, raw.holes, rtol=0)
    got = correct_lag(raw.holes, rates, lag=0.4)
    # The readings' own noise is 4 Pa and stays; plain differences, (m₊ − m₋)/2h, would add 0.4/(0.6 √2) of it again.
    assert rms(got.values - clean) < 1.15 * 4.0
    smooth = make_rate_filter(time, TO_AND_FRO.row, smoothing_time=1.5)
    still = 4.0 * np.random.default_rng(1).standard_normal((50, time.size))
    assert np.std(0.4 * smooth.rate(still)) < 0.2 * 4.0
    assert rates.smoothing_time > 0.3 * rates.interval


def test_rates_are_linear_exact_for_straight_lines_and_picklable():
    time = np.sort(np.random.default_rng(4).uniform(0, 10, 40))
    row = np.repeat([3, 4, 5], [20, 17, 3])
    rates = make_rate_filter(time, row, smoothing_time=0.5)
    got = rates.rate(3 * time - 2)
    assert_allclose(got[:37], 3.0, rtol=1e-9)
    assert_allclose(got[37:], 0.0, atol=1e-12)
    again = pickle.loads(pickle.dumps(rates))
    draws = np.random.default_rng(5).standard_normal((2, 3, 40))
    assert_allclose(again.rate(draws)[1, 2], rates.rate(draws[1, 2]), rtol=1e-9, atol=1e-12)
    assert_allclose(rates.smooth(3 * time - 2), 3 * time - 2, rtol=1e-9)
    hole = draws[0, 0].copy()
    hole[7] = np.nan
    part = make_rate_filter(time, row, values=hole)
    assert np.isnan(part.rate(hole)).sum() == 1
    with pytest.raises(DataError, match="time does not grow along traverse row 4"):
        make_rate_filter(np.where(row == 4, 1.0, time), row, smoothing_time=0.5)
    with pytest.raises(ValueError, match="smoothing_time"):
        make_rate_filter(time, row)


def test_lag_is_found_from_both_directions():
    def found(lag, noises=(0.0,)):
        raw = take(BOTH_WAYS, speed=0.05, row_time=5.0, lag=lag)
        for seed, noise in enumerate(noises):
            holes = raw.holes + noise * np.random.default_rng(seed).standard_normal(raw.holes.shape)
            yield estimate_lag(BOTH_WAYS.y, BOTH_WAYS.z, BOTH_WAYS.row, raw.values["time"], holes)

    (exact,), (none,) = found(0.4), found(0.0)
    assert_allclose(exact.value, 0.4, rtol=2e-3)
    assert exact.pairs == Z.size
    assert abs(none.value) < 1e-6
    errors = []
    for noisy in found(0.1, [2.0] * 12):
        errors.append((noisy.value - 0.1) / noisy.standard_uncertainty)
        assert noisy.standard_uncertainty < 0.002
    # Mean within 4 standard errors of 12, scatter within the 99.9 % range of chi-square with 12.
    assert abs(np.mean(errors)) < 4 / np.sqrt(12)
    assert 0.3 < rms(errors) < 1.7


def test_lag_of_a_one_way_traverse_is_unknown():
    raw = take(ONE_WAY, speed=0.05, lag=0.4)
    lag = estimate_lag(ONE_WAY.y, ONE_WAY.z, ONE_WAY.row, raw.values["time"], raw.holes)
    assert np.isnan(lag.value)
    assert "both directions" in lag.reason


# -- backlash -----------------------------------------------------------------------------------------------------


def found_backlash(positions, **conditions):
    raw = take(positions, **conditions)
    return estimate_backlash(positions.y, positions.z, positions.row, raw.holes), raw


def test_backlash_costs_what_was_found_and_is_put_right():
    # [V] rows at ±0.3 a: −1.2 % of D_i with central differences, here at a/4; b is the distance between the two.
    core, step = 0.03, 0.0075
    pair = vortex_pair(circulation=1.0, spacing=1.0, core=core)
    grid = UniformGrid.from_axes(np.arange(-0.8, 0.8, step), np.arange(-0.3, 0.3, step))
    y, z = grid.mesh()
    sense = np.where(np.arange(grid.nz) % 2, -1.0, 1.0)[:, None]
    mask = np.zeros(grid.shape, bool)
    mask[2:-2, 2:-2] = True

    def central(crossflow):
        from wakeledger.physics.fields.differences import axial_vorticity
        from wakeledger.physics.fields.poisson import stream_function

        xi = np.where(mask, axial_vorticity(*crossflow, grid, order=2), 0.0)
        return float(np.sum(stream_function(xi, grid) * xi))

    exact = central(pair.velocity(y, z))
    read = np.stack(pair.velocity(y - 0.3 * core * sense, z))
    assert_allclose(100 * (central(read) / exact - 1), -1.2, atol=0.05)
    # In the order of the traverse: every second row from starboard to port.
    order = np.where(sense > 0, np.arange(grid.ny), np.arange(grid.ny)[::-1])
    row = np.repeat(np.arange(grid.nz), grid.ny)

    def travel(field):
        return np.take_along_axis(field, np.broadcast_to(order, field.shape), axis=-1).reshape(*field.shape[:-2], -1)

    along, across, values = travel(y), travel(z), travel(read)
    backlash = estimate_backlash(along, across, row, values)
    assert_allclose(backlash.value, 0.6 * core, rtol=1e-3)
    got = correct_backlash(values, along, row, backlash=backlash.value)
    back = np.take_along_axis(got.values.reshape(read.shape), np.broadcast_to(order, read.shape), axis=-1)
    # Both orders are their own inverse; what is left is the splines' error at four points per core.
    assert abs(central(back) / exact - 1) < 3e-4


@pytest.mark.parametrize("play", [0.3 * CORE, -0.3 * CORE, 0.6 * CORE, 0.001])
def test_backlash_is_found_below_a_step(play):
    # Steps are half a core, 30 mm: the play is found to 1e-4 of it where there is no noise.
    backlash, raw = found_backlash(TO_AND_FRO, backlash=play)
    assert_allclose(backlash.value, play, rtol=1e-4, atol=2e-6)
    clean = take(TO_AND_FRO).holes
    got = correct_backlash(raw.holes, TO_AND_FRO.y, TO_AND_FRO.row, backlash=backlash.value, standard_uncertainty=1e-4)
    assert rms(got.values - clean) < 0.03 * rms(raw.holes - clean)
    wrong = correct_backlash(raw.holes, TO_AND_FRO.y, TO_AND_FRO.row, backlash=-backlash.value)
    assert rms(wrong.values - clean) > 1.8 * rms(raw.holes - clean)


def test_backlash_uncertainty_is_how_the_correction_answers_to_it():
    _, raw = found_backlash(TO_AND_FRO, backlash=0.01)
    options = {"along": TO_AND_FRO.y, "row": TO_AND_FRO.row}
    one = correct_backlash(raw.holes, **options, backlash=0.01, standard_uncertainty=1e-5)
    more = correct_backlash(raw.holes, **options, backlash=0.01 + 1e-5)
    inner = np.abs(TO_AND_FRO.y) < 0.6
    assert_allclose(
        one.per_sigma[:, inner], (more.values - one.values)[:, inner], atol=0.2 * np.abs(one.per_sigma).max()
    )
    assert np.corrcoef(one.per_sigma[:, inner].ravel(), (more.values - one.values)[:, inner].ravel())[0, 1] > 0.98


def test_backlash_in_noise():
    errors = []
    for seed in range(16):
        backlash, _ = found_backlash(TO_AND_FRO, backlash=0.018, noise=4.0, seed=seed)
        errors.append((backlash.value - 0.018) / backlash.standard_uncertainty)
        # 4 Pa is 0.4 % of q; 30 mm steps: a hundredth of a step is seen, and 21 rows widen that by a fifth.
        assert backlash.standard_uncertainty < 5e-4
    assert abs(np.mean(errors)) < 4 / np.sqrt(16)
    assert 0.4 < rms(errors) < 1.6


def test_no_backlash_where_there_is_none_to_see():
    none, raw = found_backlash(TO_AND_FRO)
    assert abs(none.value) < 1e-6
    assert none.reason is None
    noisy, _ = found_backlash(TO_AND_FRO, noise=2.0)
    assert abs(noisy.value) < 3 * noisy.standard_uncertainty
    one_way, raw = found_backlash(ONE_WAY, backlash=0.01)
    assert one_way.value == 0.0
    assert np.isnan(one_way.standard_uncertainty)
    assert "same direction" in one_way.reason
    kept = correct_backlash(raw.holes, ONE_WAY.y, ONE_WAY.row, backlash=0.01)
    assert not kept.size.any()
    untouched = correct_backlash(raw.holes, TO_AND_FRO.y, TO_AND_FRO.row, backlash=0.0)
    assert not untouched.size.any()


def test_backlash_with_gaps_uneven_rows_and_both_ways_on_every_line():
    uneven = grid_positions(Y, np.cumsum(np.resize([0.03, 0.022, 0.035], 20)) - 0.28, serpentine=True)
    _, raw = found_backlash(uneven, backlash=0.01)
    values = raw.holes.copy()
    values[:, np.random.default_rng(1).choice(uneven.y.size, 30, replace=False)] = np.nan
    backlash = estimate_backlash(uneven.y, uneven.z, uneven.row, values)
    # A gap of half a core is bridged by the spline to a few per cent of the field there.
    assert_allclose(backlash.value, 0.01, rtol=0.03)
    got = correct_backlash(values, uneven.y, uneven.row, backlash=0.01)
    assert_allclose(np.isnan(got.values), np.isnan(values))
    pairs, _ = found_backlash(BOTH_WAYS, backlash=0.01)
    assert_allclose(pairs.value, 0.01, rtol=1e-3)
    few = grid_positions(Y, Z[:4], serpentine=True)
    assert "fewer than" in found_backlash(few, backlash=0.01)[0].reason


def test_directions_of_rows():
    assert_allclose(
        row_senses(np.array([0.0, 1, 2, 2, 1, 0, 5]), np.array([0, 0, 0, 1, 1, 1, 2])), [1, 1, 1, -1, -1, -1, 0]
    )


def test_backlash_draws_go_through_at_once():
    _, raw = found_backlash(TO_AND_FRO, backlash=0.01)
    draws = np.stack([raw.holes, 2 * raw.holes])
    got = correct_backlash(draws, TO_AND_FRO.y, TO_AND_FRO.row, backlash=0.01)
    assert_allclose(got.values[1], 2 * got.values[0], rtol=1e-12)


# -- misalignment -------------------------------------------------------------------------------------------------


def measured(*, pitch=0.0, yaw=0.0, roll=0.0, head_pitch=0.0, head_yaw=0.0, upflow=0.0):
    """Velocities of the traverse in the probe's measuring axes, large crossflow angles included."""
    state = WAKE.state(TO_AND_FRO.y, TO_AND_FRO.z)
    rotation = TraverseConditions(pitch=pitch, yaw=yaw, roll=roll, head_pitch=head_pitch, head_yaw=head_yaw).rotation
    return rotation.T @ np.stack([state.u, state.v, state.w + upflow])


def test_a_roll_pair_tells_the_head_from_the_stream():
    # Mounting error and upflow stay with the stream and cancel; only the head's own turn is found.
    other = {"pitch": 0.03, "yaw": -0.02, "upflow": 0.5, "head_pitch": 0.012, "head_yaw": -0.02}
    found = from_roll_pair(measured(**other), measured(roll=np.pi, **other))
    assert_allclose([found.pitch, found.yaw], [0.012, -0.02], rtol=1e-9)
    assert found.scatter < 1e-12
    # With the head put right, both traverses read the same.
    first = correct_misalignment(measured(**other), found).values
    assert_allclose(first, measured(pitch=0.03, yaw=-0.02, upflow=0.5), rtol=1e-9, atol=1e-9)
    none = from_roll_pair(measured(upflow=0.5), measured(roll=np.pi, upflow=0.5))
    assert max(abs(none.pitch), abs(none.yaw)) < 1e-12
    quarter = from_roll_pair(measured(**other), measured(roll=np.pi / 2, **other), roll=np.pi / 2)
    assert_allclose([quarter.pitch, quarter.yaw], [0.012, -0.02], rtol=1e-9)


def test_a_roll_pair_in_noise():
    rng = np.random.default_rng(9)
    errors = []
    for _ in range(30):
        a, b = (
            measured(head_pitch=0.01, head_yaw=0.004, roll=roll) + 0.2 * rng.standard_normal((3, TO_AND_FRO.y.size))
            for roll in (0.0, np.pi)
        )
        found = from_roll_pair(a, b, row=TO_AND_FRO.row)
        errors.append((np.array([found.pitch, found.yaw]) - [0.01, 0.004]) / found.standard_uncertainty)
    # 0.2 m/s of 40 m/s over 1071 points: 0.1 mrad; normalised errors of 21 rows scatter by one.
    assert max(found.standard_uncertainty) < 3e-4
    assert 0.6 < rms(errors) < 1.5
    assert abs(np.mean(errors)) < 4 / np.sqrt(60)


def test_outer_flow_gives_the_mean_misalignment():
    velocity = measured(pitch=0.01, yaw=-0.005)
    outer = np.abs(TO_AND_FRO.z) > 0.2
    state = WAKE.state(TO_AND_FRO.y, TO_AND_FRO.z)
    found = from_outer_flow(velocity[:, outer], expected=(state.v[outer], state.w[outer]), row=TO_AND_FRO.row[outer])
    assert_allclose([found.pitch, found.yaw], [0.01, -0.005], rtol=1e-6)
    assert_allclose(correct_misalignment(velocity, found).values, measured(), rtol=1e-6, atol=1e-6)
    # A stream that rises looks like a probe mounted nose up.
    rising = np.stack([np.full(50, 40.0), np.zeros(50), np.full(50, 0.4)])
    seen = from_outer_flow(rising)
    assert_allclose([seen.pitch, seen.yaw], [np.arctan(0.01), 0.0], atol=1e-12)
    level = from_outer_flow(np.stack([np.full(50, 40.0), np.zeros(50), np.zeros(50)]))
    assert level.pitch == 0.0
    assert level.yaw == 0.0


def test_misalignment_uncertainty_and_refusals():
    found = from_outer_flow(np.stack([np.full(9, 40.0), np.zeros(9), np.linspace(-0.4, 0.4, 9)]))
    assert found.standard_uncertainty[0] > 1e-3
    got = correct_misalignment(np.array([[40.0], [0.0], [0.0]]), found)
    # A turn further nose up brings a level reading down... towards −z: stated w = −u sin(pitch).
    assert_allclose(got.per_sigma[0][2], -40.0 * found.standard_uncertainty[0], rtol=1e-3)
    draws = correct_misalignment(np.ones((3, 4, 5)), found)
    assert draws.values.shape == (3, 4, 5)
    assert draws.per_sigma.shape == (2, 3, 4, 5)
    few = from_outer_flow(np.ones((3, 6)), row=np.array([0, 0, 0, 1, 1, 1]))
    assert np.isnan(few.standard_uncertainty).all()
    with pytest.raises(DataError, match="at least 3 points"):
        from_outer_flow(np.full((3, 5), np.nan))
    with pytest.raises(DataError, match="differ in roll by 2 degrees"):
        from_roll_pair(np.ones((3, 5)), np.ones((3, 5)), roll=np.radians(2.0))
