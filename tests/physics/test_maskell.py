"""Profile drag and blockage of a wake between walls."""

import numpy as np
import pytest

from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields.boundary import ClosedWalls, FreeAir, OpenJet, Rectangle
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.methods.betz_area import profile_drag
from wakeledger.physics.methods.maskell import wake_blockage
from wakeledger.stream.reference import resolve_reference

STREAM = resolve_reference({"speed": 40.0, "density": 1.2, "static_pressure": 1.0e5})
WALLS = ClosedWalls(Rectangle((-1.0, 1.0), (-0.6, 0.6)))


def duct_wake(part, deficit):
    """A top-hat wake over `part` of a duct far downstream: its mask, the flow, and the exact drag.

    The window is the duct. Outside the wake the total pressure is the stream's; continuity fixes the speed there, and
    Bernoulli's equation the static pressure, uniform over the plane.
    """
    grid = UniformGrid(-1.0, -0.6, 2.0 / 80, 1.2 / 60, 81, 61)
    y, _ = grid.mesh()
    mask = np.abs(y) < (round(part * 40) - 0.5) * grid.dy
    share = float(grid.integrate(mask.astype(float))) / grid.area
    inner = STREAM.speed * (1 - deficit)
    outer = (STREAM.speed - share * inner) / (1 - share)
    u = np.where(mask, inner, outer)
    static = STREAM.static_pressure + 0.5 * STREAM.density * (STREAM.speed**2 - outer**2)
    total = static + 0.5 * STREAM.density * u**2
    zero = np.zeros(grid.shape)
    flow = Flow(grid, u, zero, zero, total, static + zero, STREAM.density)
    # Momentum theorem with uniform inlet: D = ∬[(p∞ + ρU²) − (p + ρu²)] dA.
    density = STREAM.density
    upstream = STREAM.static_pressure - static + density * (STREAM.speed**2 - u**2)
    return mask, flow, float(grid.integrate(upstream)), outer, share


@pytest.mark.parametrize(("part", "deficit"), [(0.05, 0.2), (0.1, 0.4), (0.3, 0.5), (0.7, 0.6)])
def test_duct_wake_identity(part, deficit):
    """With u_b the integral is the exact force in the duct, at any size of wake (formulas A3)."""
    mask, flow, exact, outer, _ = duct_wake(part, deficit)
    found = wake_blockage(flow, STREAM, mask, WALLS)
    # Algebraic identity; pressures of 1e5 Pa leave 1e-11 of the drag.
    assert found.profile_drag == pytest.approx(exact, rel=1e-10)
    # Far downstream the stream beside the wake runs at U + 2u_b.
    assert STREAM.speed + 2 * found.velocity == pytest.approx(outer, rel=1e-12)
    assert found.corrected_dynamic_pressure == pytest.approx(0.6 * (40.0 + found.velocity) ** 2, rel=1e-12)


def test_leaving_the_blockage_out_costs_what_is_published():
    """+0.7 % at 5 % of the duct's area and 20 % deficit, +3.6 % at 10 % and 40 % (formulas A3, first-order theory)."""
    for part, deficit in ((0.05, 0.2), (0.1, 0.4)):
        mask, flow, exact, outer, share = duct_wake(part, deficit)
        betz = float(profile_drag(flow, STREAM, mask))
        # The exact excess is ½ρ(u* − U)² over the duct.
        excess = 0.5 * STREAM.density * (outer - STREAM.speed) ** 2 * flow.grid.area
        assert betz - exact == pytest.approx(excess, rel=1e-8)
        expected = {0.2: 0.007, 0.4: 0.036}[deficit]
        # The wake holds a whole number of columns, so its area is not quite the nominal one.
        assert betz / exact - 1 == pytest.approx(expected * share / part, rel=0.1)


def test_wake_blockage_agrees_with_the_classical_result_for_weak_wakes():
    """u_b/U → C_D S/(4C): the difference falls with the deficit, in proportion."""
    differences = []
    for deficit in (0.02, 0.01):
        mask, flow, _, _, _ = duct_wake(0.1, deficit)
        found = wake_blockage(flow, STREAM, mask, WALLS)
        assert found.velocity > 0
        differences.append(float(found.expected_velocity / found.velocity - 1))
    assert abs(differences[0]) < 0.03
    assert differences[1] / differences[0] == pytest.approx(0.5, abs=0.02)


def test_no_blockage_without_closed_walls():
    mask, flow, _, _, _ = duct_wake(0.1, 0.4)
    betz = float(profile_drag(flow, STREAM, mask))
    for boundary in (FreeAir(), OpenJet(WALLS.section)):
        found = wake_blockage(flow, STREAM, mask, boundary)
        assert found.velocity == 0.0
        assert found.expected_velocity == 0.0
        assert found.profile_drag == pytest.approx(betz, rel=1e-14)
        assert found.corrected_dynamic_pressure == STREAM.dynamic_pressure


def test_half_model_has_the_blockage_of_the_whole():
    """The starboard half of the plane in half of the section: same u_b, half of the drag."""
    mask, flow, _, _, _ = duct_wake(0.2, 0.3)
    whole = wake_blockage(flow, STREAM, mask, WALLS)
    grid = UniformGrid(0.0, -0.6, 2.0 / 80, 1.2 / 60, 41, 61)
    half = (Ellipsis, slice(40, None))
    parts = (flow.u, flow.v, flow.w, flow.total_pressure, flow.static_pressure)
    starboard = Flow(grid, *(part[half] for part in parts), STREAM.density)
    found = wake_blockage(starboard, STREAM, mask[half], ClosedWalls(WALLS.section, "y"))
    # The end corrections of the integral at y = 0 are exact where the wake is uniform.
    assert found.velocity == pytest.approx(whole.velocity, rel=1e-12)
    assert 2 * found.profile_drag == pytest.approx(whole.profile_drag, rel=1e-12)


def test_batches():
    mask, flow, exact, _, _ = duct_wake(0.1, 0.4)
    parts = (flow.u, flow.v, flow.w, flow.total_pressure, flow.static_pressure)
    both = Flow(flow.grid, *(np.stack([part, part]) for part in parts), STREAM.density)
    assert wake_blockage(both, STREAM, mask, WALLS).profile_drag == pytest.approx([exact, exact], rel=1e-10)
