"""Wall corrections of a section: the exact two-dimensional duct, potential images, an energy balance, and the limits.

Printed forms are those of Allen and Vincenti, NACA Report 782 (1944), from memory; what they must give at low speed is
derived here.
"""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wakeledger.physics.methods.section_kernels import betz, jones, window_weights
from wakeledger.physics.methods.section_walls import SectionWalls, section_wake_blockage
from wakeledger.stream.reference import Reference

SPEED, DENSITY, PRESSURE = 36.0, 1.2, 99_000.0
REFERENCE = Reference(speed=SPEED, density=DENSITY, static_pressure=PRESSURE)
HEIGHT, CHORD = 0.6, 0.2


def duct_wake(depth, width=0.012):
    """Pressures on a traverse far behind a section in a duct, u_b and the exact force from its momentum balance.

    Beside the wake the stream is faster by 2u_b so that the duct passes Uh; the static pressure is even.
    """
    z = np.linspace(-6 * width, 6 * width, 2001)
    shape = np.exp(-((z / width) ** 2))
    deficit = depth * SPEED * np.trapezoid(shape, z)
    blocked = deficit / (2 * HEIGHT)
    star = SPEED + 2 * blocked
    u = star - depth * SPEED * shape
    static = PRESSURE + 0.5 * DENSITY * (SPEED**2 - star**2)
    through = (PRESSURE + DENSITY * SPEED**2) - (static + DENSITY * u**2)
    outside = (PRESSURE + DENSITY * SPEED**2) - (static + DENSITY * star**2)
    force = np.trapezoid(through, z) + outside * (HEIGHT - np.ptp(z))
    return z, static + 0.5 * DENSITY * u**2, np.full(z.size, static), blocked, float(force)


@pytest.mark.parametrize("depth", [0.05, 0.3])
def test_betz_less_the_blockage_is_the_force_in_the_duct(depth):
    z, total, static, blocked, force = duct_wake(depth)
    weights = window_weights(z, z[0], z[-1])
    found, excess = section_wake_blockage(total, static, REFERENCE, weights=weights, height=HEIGHT)
    assert_allclose(found, blocked, rtol=1e-9)
    # Betz's integral with U + u_b is the duct's momentum balance, exactly (Maskell).
    assert_allclose(betz(z, total, static, REFERENCE) - excess, force, rtol=1e-9)
    # Jones recovers to the pressure ahead, which here is a few thousandths of q off: second order.
    assert_allclose(jones(z, total, static, REFERENCE) - excess, force, rtol=3e-4)
    # Without it Betz reads u_b/U too high, to first order in the deficit.
    assert_allclose(betz(z, total, static, REFERENCE) / force - 1, blocked / SPEED, rtol=depth)


def test_maskells_blockage_is_the_classical_one_at_a_small_deficit():
    z, total, static, _, force = duct_wake(0.01)
    weights = window_weights(z, z[0], z[-1])
    blocked, _ = section_wake_blockage(total, static, REFERENCE, weights=weights, height=HEIGHT)
    drag = force / (REFERENCE.dynamic_pressure * CHORD)
    walls = SectionWalls(CHORD, HEIGHT)
    assert_allclose(walls.tau * drag, drag * CHORD / (4 * HEIGHT), rtol=1e-14)
    # u_b/U = c_d c/4h; what is left is half the deficit, of the next order.
    assert_allclose(blocked / SPEED, walls.tau * drag, rtol=0.01)
    assert_allclose(walls.speed_ratio(drag) - 1, blocked / SPEED, rtol=0.01)


def test_solid_term_is_that_of_a_doublets_images():
    # A cylinder of radius a: a doublet whose images between walls at ±h/2 stand nh apart and add
    # U Σ a²/(nh)² = U (π²/3)(a/h)². Allen and Vincenti's Λσ with Λ = 16(a/c)² is the same.
    radius = 0.03
    n = np.arange(1, 200_001)
    images = 2 * np.sum((radius / (n * HEIGHT)) ** 2)
    walls = SectionWalls(CHORD, HEIGHT, solid_blockage=16 * (radius / CHORD) ** 2 * SectionWalls(CHORD, HEIGHT).sigma)
    assert_allclose(walls.speed_ratio(0.0) - 1, images, rtol=1e-5)


def force_between_walls(stream, free):
    """c_d' in the duct of a section that takes from the air what it does in an unbounded stream of that speed.

    Its friction dissipates ½ρV³c c_d. The same power, ∫(H∞ − H)u dz, is missing in the wake, here one so wide that its
    deficit δ is small: ρu*² ∫δ dz with ∫δ dz = 2u_b h. The rest is the duct's momentum balance.
    """
    power = 0.5 * DENSITY * stream**3 * CHORD * free
    blocked = 0.0
    for _ in range(20):
        blocked = power / (2 * HEIGHT * DENSITY * (SPEED + 2 * blocked) ** 2)
    star = SPEED + 2 * blocked
    force = 2 * DENSITY * star * 2 * blocked * HEIGHT - 0.5 * DENSITY * (star**2 - SPEED**2) * HEIGHT
    return force / (REFERENCE.dynamic_pressure * CHORD)


@pytest.mark.parametrize("solid", [0.0, 2e-3])
def test_drag_correction_is_that_of_an_energy_balance(solid):
    walls, free = SectionWalls(CHORD, HEIGHT, solid_blockage=solid), 1e-3
    measured = free
    for _ in range(20):
        measured = force_between_walls(SPEED * walls.speed_ratio(measured), free)
    change = measured / free - 1
    # Three times the solid and twice the wake blockage; the rest is second order.
    assert_allclose(change, 3 * solid + 2 * walls.tau * free, rtol=5 * change)
    assert_allclose(walls.corrected_drag(measured), free, rtol=5 * change**2)
    assert measured > free


@pytest.mark.parametrize("mach", [0.0, 0.3, 0.6])
def test_ratios_belong_together(mach):
    walls = SectionWalls(CHORD, HEIGHT, solid_blockage=1e-6, mach=mach)
    drag = 1e-6 / walls.tau
    gain = walls.speed_ratio(drag) - 1
    # q ~ ρV² and M ~ V/a along an adiabatic stream: dq/q = (2 − M²) dV/V, dM/M = (1 + 0.2M²) dV/V for γ = 1.4.
    assert_allclose(walls.dynamic_pressure_ratio(drag) - 1, (2 - mach**2) * gain, rtol=1e-8)
    assert_allclose(walls.mach_ratio(drag) - 1, (1 + 0.2 * mach**2) * gain, rtol=1e-8)
    # Prandtl-Glauert: the images of a doublet act as (1 − M²)^{-3/2}.
    assert_allclose(walls.speed_ratio(0.0) - 1, 1e-6 * (1 - mach**2) ** -1.5, rtol=1e-8)
    assert walls.corrected_drag(drag) < drag


def test_lift_and_incidence_at_low_speed():
    # The images of the bound vortices curve the stream: α − α' = σ/2π (c_l' + 4c_m'), c_l = c_l'(1 − σ).
    walls = SectionWalls(CHORD, HEIGHT)
    sigma = np.pi**2 / 48 * (CHORD / HEIGHT) ** 2
    assert_allclose(walls.corrected_lift(0.8, 0.0), 0.8 * (1 - sigma), rtol=1e-13)
    assert_allclose(walls.angle_correction(0.8, -0.05), sigma / (2 * np.pi) * 0.6, rtol=1e-13)
    # A flat plate at incidence has c_l = 2πα, its camber by the images' curved stream adds what both corrections take
    # away: dα lifts by 2π dα = σ c_l, and σ c_l is what the curvature had added.
    assert_allclose(2 * np.pi * walls.angle_correction(0.8, 0.0), 0.8 - walls.corrected_lift(0.8, 0.0), rtol=1e-12)


def test_what_has_no_correction_is_refused():
    with pytest.raises(ValueError, match="no correction"):
        SectionWalls(CHORD, 0.0)
    with pytest.raises(ValueError, match="no correction"):
        SectionWalls(CHORD, HEIGHT, mach=1.0)
