"""Wakes in test sections: images summed one by one, conditions on the walls, momentum balance of the duct, and rows."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wakeledger.core.grid import UniformGrid
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import (
    EmptyTunnel,
    GaussianElements,
    GaussianLosses,
    RectangularDuct,
    RoundDuct,
    TunnelWake,
    root_bending_moment,
    shed,
    sheet_losses,
    straight_edge,
    tip_cores,
)

REFERENCE = Reference(speed=40.0, density=1.2, static_pressure=100_000.0)
Y, Z = (-1.0, 1.1), (-0.6, 0.7)


@pytest.fixture(scope="module")
def vortices():
    """Four vortices without net circulation, off the section's middle."""
    return GaussianElements(
        np.array([-0.5, 0.4, 0.62, 0.1]), np.array([-0.2, 0.1, 0.3, -0.3]), np.array([-1.1, 0.8, 0.7, -0.4]), 0.04
    )


def one_by_one(elements, duct, y, z, reach):
    """Velocity of all images up to so many sections away, no closed form used."""
    number = np.arange(-reach, reach + 1)
    v, w = np.zeros(y.size), np.zeros(y.size)
    for turn_y in (1, -1):
        for turn_z in (1, -1):
            sign = turn_y * turn_z if duct.closed else 1
            for k in range(elements.n):
                at_y = duct.y[0] + turn_y * (elements.y[k] - duct.y[0]) + 2 * (duct.y[1] - duct.y[0]) * number
                at_z = duct.z[0] + turn_z * (elements.z[k] - duct.z[0]) + 2 * (duct.z[1] - duct.z[0]) * number
                dy, dz = y[:, None, None] - at_y[None, :, None], z[:, None, None] - at_z[None, None, :]
                r2 = dy**2 + dz**2
                swirl = sign * elements.circulation[k] * -np.expm1(-r2 / elements.core[k] ** 2) / (2 * np.pi * r2)
                v -= (swirl * dz).sum(axis=(1, 2))
                w += (swirl * dy).sum(axis=(1, 2))
    return v, w


@pytest.mark.parametrize("closed", [True, False])
@pytest.mark.parametrize(("y", "z"), [(Y, Z), ((-0.7, 0.8), (-1.4, 1.4)), ((-2.0, 2.0), (-0.55, 0.5))])
def test_images_in_closed_form_are_those_summed_one_by_one(vortices, y, z, closed):
    duct = RectangularDuct(y, z, closed)
    points = np.array([-0.49, 0.38, 0.0, 0.69, -0.6]), np.array([-0.2, 0.45, 0.0, -0.5, 0.4])
    # What whole rings of images leave out falls as the square of their extent, so that two extents show the limit.
    near, far = (one_by_one(vortices, duct, *points, reach) for reach in (20, 40))
    for found, coarse, fine in zip(duct.velocity(vortices, *points), near, far, strict=True):
        limit = fine + (fine - coarse) / ((81 / 41) ** 2 - 1)
        assert_allclose(found, limit, atol=2e-8)
        assert np.abs(found).max() > 0.1


def test_walls_are_stream_lines_and_a_jets_edge_has_no_velocity_along_it(vortices):
    along = np.linspace(0.0, 1.0, 15)
    sides = [
        (Y[0] + 0 * along, Z[0] + along * np.ptp(Z), True),
        (Y[1] + 0 * along, Z[0] + along * np.ptp(Z), True),
        (Y[0] + along * np.ptp(Y), Z[0] + 0 * along, False),
        (Y[0] + along * np.ptp(Y), Z[1] + 0 * along, False),
    ]
    closed, jet = RectangularDuct(Y, Z), RectangularDuct(Y, Z, closed=False)
    for y, z, upright in sides:
        assert np.abs(closed.stream_function(vortices, y, z)).max() < 1e-14
        v, w = closed.velocity(vortices, y, z)
        assert np.abs(v if upright else w).max() < 1e-13
        assert np.abs(w if upright else v).max() > 0.05
        v, w = jet.velocity(vortices, y, z)
        assert np.abs(w if upright else v).max() < 1e-13
    round_walls, angle = RoundDuct(1.9, (0.05, 0.0)), 2 * np.pi * along
    y, z = 0.05 + 0.95 * np.cos(angle), 0.95 * np.sin(angle)
    assert np.abs(round_walls.stream_function(vortices, y, z)).max() < 1e-14
    v, w = RoundDuct(1.9, (0.05, 0.0), closed=False).velocity(vortices, y, z)
    assert np.abs(w * np.cos(angle) - v * np.sin(angle)).max() < 1e-13


@pytest.mark.parametrize("closed", [True, False])
def test_velocity_is_the_gradient_of_the_stream_function(vortices, closed):
    y, z, step = np.array([-0.49, 0.3, 0.62]), np.array([-0.19, 0.5, 0.28]), 1e-4
    for duct in (RectangularDuct(Y, Z, closed), RoundDuct(1.9, closed=closed)):
        v, w = duct.velocity(vortices, y, z)
        up = duct.stream_function(vortices, y, z + step) - duct.stream_function(vortices, y, z - step)
        right = duct.stream_function(vortices, y + step, z) - duct.stream_function(vortices, y - step, z)
        # Second-order differences over a four-hundredth of a core.
        assert_allclose(v, up / (2 * step), rtol=1e-4, atol=1e-5)
        assert_allclose(w, -right / (2 * step), rtol=1e-4, atol=1e-5)


@pytest.mark.parametrize("closed", [True, False])
def test_induced_drag_is_the_crossflow_energy_of_the_section(vortices, closed):
    duct = RectangularDuct(Y, Z, closed)
    step = 0.01
    grid = UniformGrid(Y[0] + step / 2, Z[0] + step / 2, step, step, 210, 130)
    v, w = duct.velocity(vortices, *grid.mesh())
    # Even and periodic about the walls, so that the sums of the middles converge spectrally.
    energy = 0.6 * float((v**2 + w**2).sum()) * step**2
    assert_allclose(duct.induced_drag(vortices, density=1.2), energy, rtol=1e-11)
    assert duct.induced_drag(vortices, density=1.2) != pytest.approx(vortices.induced_drag(density=1.2), rel=0.02)


def wing(reflection=None, section=None, **more):
    elements = shed("elliptic", straight_edge(1.2, z=0.05), peak=2.0, core=0.04, n=100)
    losses, cores = sheet_losses(elements, elements, total=3.0, width=0.05), tip_cores(elements)
    if reflection == "y":
        starboard = losses.y > 0
        losses = GaussianLosses(losses.y[starboard], losses.z[starboard], losses.strength[starboard], 0.05)
        elements, cores = elements[elements.y > 0], cores[1:]
    return TunnelWake(REFERENCE, elements, losses, section, reflection, cores=cores, **more)


@pytest.mark.parametrize("closed", [True, False])
def test_rows_add_up_to_the_momentum_balance_of_the_section(closed):
    flow = wing(section=RectangularDuct(Y, Z, closed))
    truth, step = flow.truth, 0.01
    grid = UniformGrid(Y[0] + step / 2, Z[0] + step / 2, step, step, 210, 130)
    state = flow.state_on(grid)
    density, speed = REFERENCE.density, REFERENCE.speed
    if closed:
        through = (REFERENCE.static_pressure + density * speed**2) - (state.static_pressure + density * state.u**2)
        assert_allclose(float(state.u.sum()) * step**2, speed * np.ptp(Y) * np.ptp(Z), rtol=1e-13)
        # The classical wake blockage C_D S/4C; the rest of a per cent is of the next order in the deficit.
        assert_allclose(truth.wake_blockage, truth.profile_drag / (4 * 0.5 * density * speed) / (2.1 * 1.3), rtol=0.02)
    else:
        through = density * state.u * (speed - state.u) - (state.static_pressure - REFERENCE.static_pressure)
        assert truth.wake_blockage == 0.0
    assert_allclose(truth.total_drag, float(through.sum()) * step**2, rtol=1e-10)
    assert_allclose(truth.total_drag, truth.profile_drag + truth.induced_drag + truth.residual_drag, rtol=1e-14)
    assert (truth.induced_drag < truth.induced_drag_free_air) == closed


@pytest.mark.parametrize("distance", [0.25, 0.8])
def test_a_bound_line_disturbs_the_flow_and_not_the_drag(distance):
    # Its images one by one are summed in tests/physics/test_duct_near_field.py.
    section = RectangularDuct(Y, Z)
    far, near = wing(section=section), wing(section=section, bound_distance=distance)
    step = 0.01
    grid = UniformGrid(Y[0] + step / 2, Z[0] + step / 2, step, step, 210, 130)
    state, still = near.state_on(grid), far.state_on(grid)
    assert np.abs(state.w - still.w).max() > 0.02
    assert np.abs(state.u - still.u).max() > 0.01
    density, speed = REFERENCE.density, REFERENCE.speed
    assert_allclose(float(state.u.sum()) * step**2, speed * np.ptp(Y) * np.ptp(Z), rtol=1e-13)
    through = (REFERENCE.static_pressure + density * speed**2) - (state.static_pressure + density * state.u**2)
    assert_allclose(near.truth.total_drag, float(through.sum()) * step**2, rtol=1e-10)
    assert near.truth.induced_drag == far.truth.induced_drag
    assert_allclose(near.truth.total_drag, far.truth.total_drag, rtol=2e-3)
    with pytest.raises(ValueError, match="rectangular section"):
        wing(bound_distance=distance)


def test_half_a_model_has_the_rows_of_the_whole_one():
    section = RectangularDuct((-1.0, 1.0), Z)
    half, whole = wing("y", section), wing(section=section)
    for name in ("profile_drag", "induced_drag", "induced_drag_free_air", "residual_drag", "total_drag", "lift"):
        assert_allclose(getattr(half.truth, name), getattr(whole.truth, name), rtol=1e-12)
    assert "side_force" not in half.truth.rows()
    assert "root_bending_moment" not in whole.truth.rows()
    y, z = np.array([0.0, 0.01, 0.5]), np.array([0.1, 0.0, -0.3])
    for name in ("u", "v", "w", "static_pressure"):
        assert_allclose(getattr(half.state(y, z), name), getattr(whole.state(y, z), name), rtol=1e-12, atol=1e-12)
    assert abs(half.state(y[:1], z[:1]).v[0]) < 1e-14


def test_ground_lowers_the_induced_drag_by_the_image():
    elements = shed("elliptic", straight_edge(1.2, z=0.3), peak=2.0, core=0.03, n=200)
    low = TunnelWake(REFERENCE, elements, reflection="z").truth
    free = TunnelWake(REFERENCE, elements).truth
    # Prandtl's factor for elliptic loads with a gap of the span's half, check_values 4.3; the core costs 14 % of the
    # free-air drag and nothing of the interference.
    thin = np.pi * REFERENCE.density * 2.0**2 / 8
    assert_allclose(free.induced_drag - low.induced_drag, 0.23221 * thin, rtol=2e-3)
    assert_allclose(low.lift, free.lift, rtol=1e-14)


def test_root_bending_moment_is_that_of_the_loading():
    # Γ_b = G√(1 − (y/s)²): ∫₀^s y Γ_b dy = G s²/3.
    elements = shed("elliptic", straight_edge(1.2), peak=2.0, core=1e-3, n=400)
    starboard = elements[elements.y > 0]
    found = root_bending_moment(starboard, speed=40.0, density=1.2)
    assert_allclose(found, 1.2 * 40.0 * 2.0 * 0.6**2 / 3, rtol=1e-4)
    # A vortex whose core reaches across the plane, by quadrature with its image.
    vortex = GaussianElements(np.array([0.05]), np.zeros(1), np.ones(1), np.array([0.06]))
    y = np.linspace(0, 0.6, 6001)
    strip = (np.exp(-(((y - 0.05) / 0.06) ** 2)) - np.exp(-(((y + 0.05) / 0.06) ** 2))) / (np.sqrt(np.pi) * 0.06)
    assert_allclose(root_bending_moment(vortex, speed=1.0, density=1.0), np.trapezoid(y**2 * strip, y) / 2, rtol=1e-9)


def test_what_the_empty_tunnel_adds_is_the_same_with_and_without_the_model():
    section = RectangularDuct((-1.0, 1.0), Z)
    corner = GaussianElements(np.array([0.05]), np.array([-0.55]), np.array([0.05]), np.array([0.01]))
    empty = EmptyTunnel(upflow=0.2, swirl=0.15, layer_loss=300.0, layer_thickness=0.03, vortices=corner)
    still, turned = wing("y", section), wing("y", section, empty=empty)
    rng = np.random.default_rng(4)
    y, z = rng.uniform(0, 0.9, 40), rng.uniform(-0.5, 0.6, 40)
    alone, before, after = turned.empty_state(y, z), still.state(y, z), turned.state(y, z)
    assert_allclose(after.v - before.v, alone.v, atol=1e-13)
    assert_allclose(after.w - before.w, alone.w, atol=1e-13)
    assert_allclose(after.total_pressure - before.total_pressure, alone.total_pressure - REFERENCE.total_pressure)
    assert_allclose(alone.static_pressure, REFERENCE.static_pressure)
    assert np.abs(alone.w).min() > 0.1
    kinetic = REFERENCE.density * (after.u**2 + after.v**2 + after.w**2) / 2
    assert_allclose(after.total_pressure - after.static_pressure, kinetic, rtol=1e-10)
    assert_allclose(turned.truth.total_drag, still.truth.total_drag, rtol=1e-15)


def test_what_has_no_exact_answer_is_refused(vortices):
    with pytest.raises(ValueError, match="net circulation"):
        RectangularDuct(Y, Z, closed=False).velocity(vortices[1:], np.zeros(1), np.zeros(1))
    with pytest.raises(ValueError, match="inside the section"):
        RectangularDuct((-0.4, 0.4), Z).velocity(vortices, np.zeros(1), np.zeros(1))
    with pytest.raises(ValueError, match="core lengths inside"):
        RoundDuct(1.2).velocity(vortices, np.zeros(1), np.zeros(1))
    fast = Reference(speed=120.0, density=1.2, static_pressure=100_000.0, compressible=True)
    with pytest.raises(ValueError, match="incompressible"):
        TunnelWake(fast, vortices)
