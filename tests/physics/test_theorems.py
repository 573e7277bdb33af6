"""Theorems of induced drag, asked of the vorticity form itself (they are facts of lifting-line theory, Munk 1921)."""

import numpy as np
import pytest

from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields.differences import axial_vorticity
from wakeledger.physics.fields.poisson import stream_function
from wakeledger.physics.methods.vorticity_area import vorticity_drag, vorticity_forces
from wakeledger.stream.reference import Reference
from wakeledger.synthetic.aircraft import wing_wake
from wakeledger.synthetic.loadings import shed, straight_edge

STREAM = Reference(speed=40.0, density=1.2)
CORE = 0.03
GRID = UniformGrid(-0.81, -0.41, 0.015, 0.015, 109, 61)


def crossflow(elements):
    return elements.velocity_on(GRID)


def test_mutual_drags_are_equal_for_unequal_spans():
    wide = shed("elliptic", straight_edge(1.1), peak=2.0, core=CORE)
    narrow = shed("parabolic", straight_edge(0.5, z=0.2), peak=0.7, core=CORE)
    xi = [axial_vorticity(*crossflow(wake), GRID) for wake in (wide, narrow)]
    psi = [stream_function(one, GRID) for one in xi]
    d12, d21 = np.sum(psi[0] * xi[1]), np.sum(psi[1] * xi[0])
    # The discrete Green's function is symmetric, so this holds to rounding; each is a sizeable part of the whole.
    assert d12 == pytest.approx(d21, rel=1e-11)
    assert abs(d12) > 0.05 * np.sum(psi[0] * xi[0])


def test_half_of_a_symmetric_wake_has_half_the_drag_in_the_whole_ones_stream_function():
    grid = UniformGrid(-0.8025, -0.41, 0.015, 0.015, 108, 61)
    wake = shed("elliptic", straight_edge(1.0), peak=2.0, core=CORE)
    xi = axial_vorticity(*wake.velocity_on(grid), grid)
    psi = stream_function(xi, grid)
    half = np.sum((psi * xi)[:, 54:]) / np.sum(psi * xi)
    assert half == pytest.approx(0.5, abs=1e-10)


def test_moving_a_surface_along_the_stream_leaves_the_total_unchanged():
    # Munk's stagger theorem in the far plane: only the shed circulations count, and both loadings stay what they were.
    front = shed("elliptic", straight_edge(1.0), peak=2.0, core=CORE)
    rear = shed("elliptic", straight_edge(0.4, z=0.15), peak=-0.3, core=CORE)
    mask = np.ones(GRID.shape, bool)
    mask[:5] = mask[-5:] = mask[:, :5] = mask[:, -5:] = False
    together = vorticity_drag(*crossflow(front + rear), GRID, mask, density=1.2)
    assert together == pytest.approx((front + rear).induced_drag(density=1.2), rel=1e-4)
    apart = front.induced_drag(density=1.2) + rear.induced_drag(density=1.2)
    assert abs(together - apart) > 0.02 * apart


@pytest.mark.parametrize("strength", [1.0, 0.5])
def test_a_straight_wake_and_a_force_free_one_give_the_same_drag(strength):
    """The straight wake bears no drag, the rolled-up one no force; their drags agree to second order in the loading."""
    flat = wing_wake(STREAM, span=1.0, peak=2.0 * strength, x=0.0)
    rolled = wing_wake(STREAM, span=1.0, peak=2.0 * strength, x=3.0)
    drags = []
    for wake in (flat, rolled):
        v, w = crossflow(wake.elements)
        xi = axial_vorticity(v, w, GRID)
        xi[:5] = xi[-5:] = 0
        drags.append(float(vorticity_forces(xi, GRID, STREAM).induced_drag))
    assert np.abs(rolled.elements.z - flat.elements.z).max() > 0.01
    # Roll-up conserves the energy of the crossflow; differences at h/a = 0.6 cost 1e-4.
    assert drags[1] == pytest.approx(drags[0], rel=5e-4)
