"""Surveys made by images in closed form reduce to the exact drag between walls and in free air."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields.boundary import Circle, ClosedWalls, FreeAir, OpenJet, Polygon, Rectangle
from wakeledger.physics.fields.differences import axial_vorticity
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.fields.wall_correction import wall_stream_function
from wakeledger.physics.methods.maskell import wake_blockage
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import (
    GaussianElements,
    GaussianLosses,
    RectangularDuct,
    RoundDuct,
    TunnelWake,
    shed,
    sheet_losses,
    straight_edge,
)

REFERENCE = Reference(speed=40.0, density=1.2, static_pressure=100_000.0)
CORE = 0.04
Y, Z = (-0.95, 0.95), (-0.6, 0.7)
#: What a survey made by images may be off, of the drag.
CLOSE = 2e-3


def loading(eta):
    """More lift to port, so that neither half is the other's reflection."""
    return np.sqrt(np.clip(1 - eta**2, 0, None)) * (1 - 0.3 * eta)


def wing(section, *, y=0.0, z=0.05, span=1.2, shape=loading, reflection=None):
    elements = shed(shape, straight_edge(span, y=y, z=z), peak=2.0, core=CORE, n=80)
    losses = sheet_losses(elements, elements, total=4.0, width=0.06)
    if reflection == "y":
        half = losses.y > 0
        losses = GaussianLosses(losses.y[half], losses.z[half], losses.strength[half], losses.width[half])
        elements = elements[elements.y > 0]
    return TunnelWake(REFERENCE, elements, losses, section, reflection)


def plane(flow, y, z, spacing=0.02):
    """The exact flow on a window, and its vorticity by differences of the velocity."""
    counts = [round((high - low) / spacing) + 1 for low, high in (y, z)]
    grid = UniformGrid(y[0], z[0], spacing, spacing, *counts)
    state = flow.state_on(grid)
    return (
        Flow(
            grid,
            state.u,
            state.v,
            state.w,
            state.total_pressure,
            state.static_pressure,
            state.density,
            state.total_temperature,
        ),
        axial_vorticity(state.v, state.w, grid),
    )


def drag(vorticity, grid, boundary):
    """Induced drag ½ρ∬ψξ dA; of a half model both halves."""
    psi = wall_stream_function(vorticity, grid, boundary)
    doubled = 2 if boundary.reflection == "y" else 1
    return doubled * 0.5 * REFERENCE.density * grid.cell_area * float((psi * vorticity).sum())


RECTANGLE, ROUND = Rectangle(Y, Z), Circle(2.0, (0.05, 0.0))
CASES = {
    "closed rectangle": (RectangularDuct(Y, Z), ClosedWalls(RECTANGLE), {}),
    "closed rectangle as a polygon": (RectangularDuct(Y, Z), ClosedWalls(Polygon(tuple(RECTANGLE.corners))), {}),
    "open jet": (RectangularDuct(Y, Z, closed=False), OpenJet(RECTANGLE), {}),
    "closed circle": (RoundDuct(2.0, (0.05, 0.0)), ClosedWalls(ROUND), {}),
    "round jet": (RoundDuct(2.0, (0.05, 0.0), closed=False), OpenJet(ROUND), {}),
    "near one wall": (RectangularDuct(Y, Z), ClosedWalls(RECTANGLE), {"y": 0.1, "z": 0.3, "span": 1.1}),
    "free air": (None, FreeAir(), {}),
}


@pytest.mark.parametrize("name", CASES)
def test_a_survey_reduces_to_the_drag_with_and_without_the_walls(name):
    section, boundary, where = CASES[name]
    flow = wing(section, **where)
    window = ((-0.76, 0.76), (-0.24, 0.3)) if not where else ((-0.62, 0.86), (0.04, 0.56))
    measured, vorticity = plane(flow, *window)
    exact = flow.truth
    assert_allclose(drag(vorticity, measured.grid, boundary), exact.induced_drag, rtol=CLOSE)
    assert_allclose(drag(vorticity, measured.grid, boundary.free), exact.induced_drag_free_air, rtol=CLOSE)
    everywhere = np.ones(measured.grid.shape, dtype=bool)
    found = wake_blockage(measured, REFERENCE, everywhere, boundary)
    # The profile drag needs no derivative: the trapezium rule over Gaussians three cells wide.
    assert_allclose(found.profile_drag, exact.profile_drag, rtol=1e-4)
    assert_allclose(found.velocity, exact.wake_blockage, rtol=1e-4, atol=1e-12)
    walls = exact.induced_drag_free_air - exact.induced_drag
    if section is not None:
        assert abs(walls) > 10 * CLOSE * exact.induced_drag
        assert (walls > 0) == section.closed


def test_a_survey_in_a_turned_square_reduces_like_that_in_the_upright_one():
    # The only other polygon with images in closed form; its walls lie on no line of the grid.
    side = 1.7
    upright = wing(RectangularDuct((-side / 2, side / 2), (-side / 2, side / 2)), z=0.0, span=0.9)
    angle = np.deg2rad(35.0)
    c, s = np.cos(angle), np.sin(angle)
    corners = np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]]) * side / 2 @ np.array([[c, s], [-s, c]])
    grid = UniformGrid(-0.62, -0.62, 0.02, 0.02, 63, 63)
    y, z = grid.mesh()
    v, w = upright.crossflow(c * y + s * z, -s * y + c * z)
    vorticity = axial_vorticity(c * v - s * w, s * v + c * w, grid)
    found = drag(vorticity, grid, ClosedWalls(Polygon(tuple(map(tuple, corners)))))
    assert_allclose(found, upright.truth.induced_drag, rtol=CLOSE)
    assert found < 0.95 * upright.truth.induced_drag_free_air


@pytest.mark.parametrize("closed", [True, False])
def test_half_a_model_reduces_to_the_whole_ones_drag(closed):
    flow = wing(RectangularDuct(Y, Z, closed), shape="elliptic", reflection="y")
    walls = (ClosedWalls if closed else OpenJet)(RECTANGLE, "y")
    measured, vorticity = plane(flow, (0.0, 0.76), (-0.24, 0.3))
    # What the reflection plane halves, the trapezium's end weights halve.
    weighted = vorticity.copy()
    weighted[:, 0] /= 2
    assert_allclose(drag(weighted, measured.grid, walls), flow.truth.induced_drag, rtol=CLOSE)
    assert_allclose(drag(weighted, measured.grid, walls.free), flow.truth.induced_drag_free_air, rtol=CLOSE)
    found = wake_blockage(measured, REFERENCE, np.ones(measured.grid.shape, dtype=bool), walls)
    assert_allclose(2 * found.profile_drag, flow.truth.profile_drag, rtol=2e-4)
    assert_allclose(found.velocity, flow.truth.wake_blockage, rtol=2e-4, atol=1e-12)


@pytest.mark.parametrize("section", [None, RectangularDuct(Y, (-0.7, 0.7))])
def test_over_the_ground_nothing_is_doubled(section):
    flow = wing(section, z=0.3, reflection="z")
    walls = FreeAir("z") if section is None else ClosedWalls(Rectangle(Y, (0.0, 0.7)), "z")
    measured, vorticity = plane(flow, (-0.76, 0.76), (0.02, 0.56))
    assert_allclose(drag(vorticity, measured.grid, walls), flow.truth.induced_drag, rtol=CLOSE)
    assert_allclose(drag(vorticity, measured.grid, walls.free), flow.truth.induced_drag_free_air, rtol=CLOSE)
    found = wake_blockage(measured, REFERENCE, np.ones(measured.grid.shape, dtype=bool), walls)
    assert_allclose(found.profile_drag, flow.truth.profile_drag, rtol=1e-4)
    assert_allclose(found.velocity, flow.truth.wake_blockage, rtol=1e-4, atol=1e-12)


def test_one_sided_vorticity_between_walls():
    # A lone vortex: between walls it has a drag of its own, which no condition on the net circulation forbids.
    section = RectangularDuct(Y, Z)
    vortex = GaussianElements(np.array([0.4]), np.array([0.1]), np.array([2.0]), CORE)
    flow = TunnelWake(REFERENCE, vortex, section=section)
    measured, vorticity = plane(flow, (0.1, 0.7), (-0.2, 0.4))
    assert_allclose(drag(vorticity, measured.grid, ClosedWalls(RECTANGLE)), flow.truth.induced_drag, rtol=CLOSE)
