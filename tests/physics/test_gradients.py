"""Derivatives of the area methods against differences of the methods themselves (dot-product test).

For a direction d in one field, Σ gradient · d must be the derivative of the figure along d. Richardson's extrapolation
of central differences gives that to about 1e-10 of the figure; both are compared at 1e-8 of the derivative.
"""

from dataclasses import replace

import numpy as np
import pytest

from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields.boundary import ClosedWalls, FreeAir, Rectangle
from wakeledger.physics.fields.differences import axial_vorticity, crossflow_divergence, ddy, ddz
from wakeledger.physics.fields.edge import edge_integrals
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.fields.lifting_line import NearField
from wakeledger.physics.fields.poisson import stream_function
from wakeledger.physics.fields.pressure import crossflow_pressure
from wakeledger.physics.fields.transposed import (
    crossflow_pressure_gradient,
    edge_energy_gradient,
    transposed_ddy,
    transposed_ddz,
    transposed_divergence,
    transposed_vorticity,
)
from wakeledger.physics.methods import gradients
from wakeledger.physics.methods.betz_area import loss_free_axial_velocity, profile_drag
from wakeledger.physics.methods.energy_area import crossflow_energy
from wakeledger.physics.methods.entropy_area import entropy_profile_drag
from wakeledger.physics.methods.momentum_area import momentum_drag
from wakeledger.physics.methods.residual import residual_drag
from wakeledger.physics.methods.vorticity_area import vorticity_drag, vorticity_forces
from wakeledger.stream.reference import Reference

GRID = UniformGrid(-0.8, -0.5, 0.04, 0.05, 41, 23)
SLOW = Reference(speed=40.0, density=1.2, static_pressure=100_000.0)
FAST = Reference(speed=200.0, density=0.6, static_pressure=40_000.0, compressible=True)
FIELDS = ("u", "v", "w", "total_pressure", "static_pressure", "density", "total_temperature")
AGREE = 1e-8


def smooth(rng, size):
    """A field of a few long waves, so that no place is extreme."""
    yy, zz = GRID.mesh()
    field = np.zeros(GRID.shape)
    for _ in range(6):
        a, b, phase = rng.uniform(-6, 6, 3)
        field += rng.normal() * np.cos(a * yy + b * zz + phase)
    return size * field / np.abs(field).max()


def flow_of(reference, seed=0):
    rng = np.random.default_rng(seed)
    speed, q = reference.speed, reference.dynamic_pressure
    u = speed * (0.95 + smooth(rng, 0.05))
    v, w = (smooth(rng, 0.1 * speed) for _ in range(2))
    static = reference.static_pressure + smooth(rng, 0.1 * q)
    total = reference.total_pressure - 0.1 * q + smooth(rng, 0.1 * q)
    if not reference.compressible:
        return Flow(GRID, u, v, w, total, static, reference.density)
    density = reference.density * (1 + smooth(rng, 0.03))
    return Flow(GRID, u, v, w, total, static, density, reference.total_temperature * (1 + smooth(rng, 0.01)))


MASK = np.hypot(GRID.mesh()[0], 1.3 * GRID.mesh()[1]) < 0.55


def derivative(function, step):
    """Fourth-order Richardson extrapolation of central differences of a function of one number."""

    def central(h):
        return (function(h) - function(-h)) / (2 * h)

    return (4 * central(step / 2) - central(step)) / 3


def check(figure, gradient, flow, *, names=FIELDS):
    rng = np.random.default_rng(5)
    tested = 0
    for name in names:
        field = np.asarray(getattr(flow, name), float)
        by = np.broadcast_to(np.asarray(getattr(gradient, name), float), GRID.shape)
        if field.shape != GRID.shape:
            assert not np.any(by)
            continue
        direction = rng.standard_normal(GRID.shape) * np.ptp(field)

        def moved(h, name=name, direction=direction, field=field):
            return float(figure(replace(flow, **{name: field + h * direction})))

        found, expected = float((by * direction).sum()), derivative(moved, 1e-3)
        scale = float(np.sqrt(((by * direction) ** 2).sum()))
        assert abs(found - expected) <= AGREE * max(scale, abs(expected)), (name, found, expected)
        tested += bool(np.any(by))
    assert tested
    return tested


@pytest.mark.parametrize("reference", [SLOW, FAST], ids=["incompressible", "compressible"])
def test_profile(reference):
    flow = flow_of(reference)
    weights = np.where(MASK, GRID.weights, 0.0)
    star = loss_free_axial_velocity(flow, reference)
    found = gradients.profile_gradient(flow, reference, star, weights)
    assert check(lambda f: profile_drag(f, reference, MASK), found, flow) == 5


@pytest.mark.parametrize("reference", [SLOW, FAST], ids=["incompressible", "compressible"])
def test_residual(reference):
    flow = flow_of(reference)
    rng = np.random.default_rng(9)
    near = NearField(*(smooth(rng, 0.5) for _ in range(3)))
    weights = np.where(MASK, GRID.weights, 0.0)
    star = loss_free_axial_velocity(flow, reference)

    def part(k):
        return lambda f: residual_drag(f, reference, loss_free_axial_velocity(f, reference), MASK, near=near)[k]

    check(part(0), gradients.divergence_gradient(flow, MASK, density=reference.density, near=near), flow)
    check(part(1), gradients.axial_gradient(flow, reference, star, weights, shift=near.u), flow)


@pytest.mark.parametrize("reference", [SLOW, FAST], ids=["incompressible", "compressible"])
def test_entropy_and_momentum(reference):
    flow = flow_of(reference)
    weights = np.where(MASK, GRID.weights, 0.0)
    found = gradients.entropy_gradient(flow, reference, weights)
    assert check(lambda f: entropy_profile_drag(f, reference, MASK)[0], found, flow) >= 2
    check(lambda f: momentum_drag(f, reference), gradients.momentum_gradient(flow, reference), flow)


def test_induced_drag_and_impulse():
    flow = flow_of(SLOW)
    yy, zz = GRID.mesh()
    xi = np.where(MASK, axial_vorticity(flow.v, flow.w, GRID), 0.0)
    found = gradients.induced_gradient(stream_function(xi, GRID), MASK, GRID, density=SLOW.density)
    check(lambda f: vorticity_drag(f.v, f.w, GRID, MASK, density=SLOW.density), found, flow)
    arms = {"lift": yy, "side_force": -zz, "rolling_moment": -0.5 * (yy**2 + zz**2)}
    for name, arm in arms.items():

        def figure(f, name=name):
            inside = np.where(MASK, axial_vorticity(f.v, f.w, GRID), 0.0)
            return getattr(vorticity_forces(inside, GRID, SLOW), name)

        found = gradients.impulse_gradient(arm, MASK.astype(float), GRID, impulse=SLOW.density * SLOW.speed)
        check(figure, found, flow)


def test_energy_and_edge():
    flow = flow_of(SLOW)
    found = gradients.energy_gradient(flow.v, flow.w, GRID, density=SLOW.density)
    check(lambda f: crossflow_energy(f.v, f.w, GRID, density=SLOW.density), found, flow)
    by_v, by_w = edge_energy_gradient(flow.v, flow.w, GRID)
    check(
        lambda f: edge_integrals(f.v, f.w, GRID).energy_integral,
        gradients.FlowGradient(v=by_v, w=by_w),
        flow,
        names=("v", "w"),
    )
    # A quadratic form without a constant: half of gradient times field is the form itself.
    form = float(edge_integrals(flow.v, flow.w, GRID).energy_integral)
    assert 0.5 * ((by_v * flow.v).sum() + (by_w * flow.w).sum()) == pytest.approx(form, rel=1e-10)


def test_crossflow_pressure():
    flow = flow_of(SLOW)
    weights = np.random.default_rng(3).standard_normal(GRID.shape)
    by_v, by_w = crossflow_pressure_gradient(flow.v, flow.w, weights, GRID, density=SLOW.density)
    check(
        lambda f: (weights * crossflow_pressure(f.v, f.w, GRID, density=SLOW.density)).sum(),
        gradients.FlowGradient(v=by_v, w=by_w),
        flow,
        names=("v", "w"),
    )


@pytest.mark.parametrize("shape", [(7, 5), (12, 30), (3, 4)])
def test_transposed_differences(shape):
    nz, ny = shape
    grid = UniformGrid(0.0, 0.0, 0.3, 0.2, ny, nz)
    rng = np.random.default_rng(1)
    v, w, a = rng.standard_normal((3, nz, ny))
    for forward, back in ((ddy, transposed_ddy), (ddz, transposed_ddz)):
        assert (a * forward(v, grid)).sum() == pytest.approx((back(a, grid) * v).sum(), rel=1e-12)
    for field, back in ((axial_vorticity, transposed_vorticity), (crossflow_divergence, transposed_divergence)):
        by_v, by_w = back(a, grid)
        assert (a * field(v, w, grid)).sum() == pytest.approx((by_v * v + by_w * w).sum(), rel=1e-12)


def test_divergence_part_between_walls():
    walls = ClosedWalls(Rectangle((-1.2, 1.2), (-0.8, 0.9)))
    flow = flow_of(SLOW)

    def figure(f):
        star = loss_free_axial_velocity(f, SLOW)
        return residual_drag(f, SLOW, star, MASK, boundary=walls)[0]

    found = gradients.divergence_gradient(flow, MASK, density=SLOW.density, boundary=walls)
    by = np.concatenate([np.ravel(found.v), np.ravel(found.w)])
    direction = np.random.default_rng(2).standard_normal((2, *GRID.shape))
    expected = derivative(
        lambda h: float(figure(replace(flow, v=flow.v + h * direction[0], w=flow.w + h * direction[1]))), 1e-2
    )
    # The boundary elements that complete the walls' images are symmetric to their own accuracy only.
    assert by @ direction.ravel() == pytest.approx(expected, rel=1e-5)
    free = gradients.divergence_gradient(flow, MASK, density=SLOW.density, boundary=FreeAir())
    assert np.abs(np.asarray(free.v) - found.v).max() > 1e-3 * np.abs(found.v).max()
