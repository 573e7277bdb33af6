"""The vorticity form on gridded fields against the E1 double sums of the elements behind them.

The crossflow is exact on the grid; ξ comes from differences, ψ from the free-space solve, and D_i = ½ρ Σ ψξ ΔA. What
counts is the wake region: everything within about five core lengths of an element. Outside it the one-sided stencils on
the window's edge make vorticity that is not there (1.5e-5 of the lift with a margin of six cores and six points).
"""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields.differences import axial_vorticity
from wakeledger.physics.fields.poisson import stream_function
from wakeledger.synthetic import (
    LiftingLine,
    Sheet,
    optimum_loading,
    roll_up,
    rolled_up_wing,
    shed,
    straight_edge,
    v_edge,
    vortex_pair,
)
from wakeledger.synthetic.optimum import box_wing, winglets

RHO, U, CORE = 1.2, 42.0, 0.03


def lopsided(eta):
    return np.sqrt(np.clip(1 - eta**2, 0, None)) * (1 + 0.35 * eta)


def flat(name, core=CORE):
    return shed(name, straight_edge(1.0), peak=2.0, core=core, n=150)


def wing_and_tail():
    tail = shed("elliptic", straight_edge(0.4, z=0.12), peak=-0.4, core=CORE, n=80)
    return roll_up([Sheet(flat("elliptic")), Sheet(tail, x=0.5)], x=2.0, speed=U).elements


FLAT = {
    "pair": vortex_pair(circulation=2.0, spacing=0.8, core=CORE),
    "elliptic": flat("elliptic"),
    "parabolic": flat("parabolic"),
    "linear": flat("linear"),
    "bell": flat("bell"),
    "V": shed("elliptic", v_edge(1.0, tip_height=0.2), peak=2.0, core=CORE, n=150),
    "biplane": flat("elliptic") + flat("elliptic").shifted(z=0.2),
    "ground": flat("elliptic") + flat("elliptic").mirrored("z", at=-0.15),
    "box wing": optimum_loading(box_wing(0.2), panels=80).elements(core=CORE, peak=2.0),
    "winglets": optimum_loading(winglets(0.2), panels=80).elements(core=CORE, peak=2.0),
}
ROLLED_UP = {
    "elliptic": rolled_up_wing("elliptic", span=1.0, peak=2.0, core=CORE, x=2.0, speed=U, n=150).elements,
    "asymmetric": rolled_up_wing(lopsided, span=1.0, peak=2.0, core=CORE, x=2.0, speed=U, n=150).elements,
    "wing and tail": wing_and_tail(),
}


def window(elements, ratio, shift=(0.37, 0.21)):
    """Grid of spacing `ratio` cores, 6 cores and 6 points beyond the elements, off their symmetry by part of a cell."""
    h = ratio * float(elements.core.min())
    reach = 6 * float(elements.core.max()) + 6 * h
    axes = [
        np.arange(c.min() - reach + part * h, c.max() + reach, h)
        for c, part in zip((elements.y, elements.z), shift, strict=True)
    ]
    return UniformGrid.from_axes(*axes)


def forces(elements, grid, v, w, order=10):
    """Induced drag and lift of gridded crossflow, from vorticity inside the wake."""
    exact = np.abs(elements.vorticity_on(grid))
    xi = np.where(exact > 1e-12 * exact.max(), axial_vorticity(v, w, grid, order=order), 0.0)
    drag = 0.5 * RHO * grid.cell_area * float((stream_function(xi, grid) * xi).sum())
    return drag, RHO * U * grid.cell_area * float((grid.mesh()[0] * xi).sum())


def errors(elements, ratio, **options):
    """Relative errors of drag and lift."""
    grid = window(elements, ratio)
    drag, lift = forces(elements, grid, *elements.velocity_on(grid), **options)
    exact = elements.lift(speed=U, density=RHO)
    return drag / elements.induced_drag(density=RHO) - 1, (lift / exact - 1) if exact > 1 else 0.0


@pytest.mark.parametrize("name", FLAT)
def test_induced_drag_and_lift_of_flat_and_box_wakes(name):
    at_half, lift_at_half = errors(FLAT[name], 0.5)
    at_wide, lift_at_wide = errors(FLAT[name], 0.8)
    # Targets 1e-4 at h/a = 0.5 and 1e-3 at 0.8; measured 1.8e-5 and 6.9e-4 at worst (the pair, which is all core).
    assert abs(at_half) < 3e-5
    assert abs(at_wide) < 1e-3
    # Lift 1e-5: measured 4e-8 at 0.5; 2.4e-5 at 0.8.
    assert abs(lift_at_half) < 1e-6
    assert abs(lift_at_wide) < 5e-5


@pytest.mark.parametrize("name", ROLLED_UP)
def test_induced_drag_and_lift_of_rolled_up_wakes(name):
    at_half, lift_at_half = errors(ROLLED_UP[name], 0.5)
    # Target 1e-3 at h/a = 0.5; measured 5e-6.
    assert abs(at_half) < 2e-5
    assert abs(lift_at_half) < 1e-6
    assert abs(errors(ROLLED_UP[name], 0.8)[0]) < 1e-3


@pytest.mark.parametrize("order, ratios", [(2, (0.25, 0.2)), (4, (0.4, 0.32)), (6, (0.5, 0.4)), (10, (0.4, 0.32))])
def test_observed_order_of_convergence(order, ratios, record_property):
    coarse, fine = (abs(errors(FLAT["pair"], ratio, order=order)[0]) for ratio in ratios)
    observed = np.log(coarse / fine) / np.log(ratios[0] / ratios[1])
    record_property("observed_order", round(float(observed), 2))
    # Measured 1.98, 3.88, 5.58 and 9.22; the higher the order, the smaller h/a must be to show it.
    assert observed == pytest.approx(order, abs=0.15 * order)


@pytest.mark.parametrize("x", [0.1, 0.25, 0.5, 1.0, 3.0, 10.0])
def test_induced_drag_is_the_same_at_every_station_behind_a_lifting_line(x):
    line = LiftingLine(flat("elliptic", core=0.02))
    grid = window(line.elements, 0.5)
    _, v, w = line.velocity_on(x, grid)
    drag, lift = forces(line.elements, grid, v, w)
    # Target 1e-3 from 0.1b to 10b. Parseval: the bound line's crossflow has no ξ. What is left is the differences' own
    # error (5e-6 far behind) and the window's.
    assert_allclose(drag, line.elements.induced_drag(density=RHO), rtol=2e-5)
    assert_allclose(lift, line.elements.lift(speed=U, density=RHO), rtol=1e-6)


def test_crossflow_energy_alone_would_not_be_the_same():
    # The same window at 0.1b: the bound line's crossflow is no small matter for a form that sees it.
    line = LiftingLine(flat("elliptic", core=0.02))
    grid = window(line.elements, 0.5)
    near, far = (grid.integrate(v**2 + w**2) for _, v, w in (line.velocity_on(x, grid) for x in (0.1, 10.0)))
    assert near > 1.05 * far


def test_a_uniform_flow_angle_error_does_not_matter():
    elements = ROLLED_UP["elliptic"]
    grid = window(elements, 0.5)
    v, w = elements.velocity_on(grid)
    clean = forces(elements, grid, v, w)
    tilted = forces(elements, grid, v + 0.3, w - 0.2)
    # 0.4° of flow angle; differences of a constant are zero to rounding.
    assert_allclose(tilted, clean, rtol=1e-11)


def test_mirrored_circulation_keeps_the_drag_and_turns_the_lift():
    elements = ROLLED_UP["asymmetric"]
    grid = window(elements, 0.5)
    v, w = elements.velocity_on(grid)
    drag, lift = forces(elements, grid, v, w)
    turned = forces(elements, grid, -v, -w)
    assert lift > 0
    assert_allclose(turned, (drag, -lift), rtol=1e-12)
