"""Derivatives of the figures that the outputs are made of by the plane that the methods see."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.physics.fields.boundary import ClosedWalls, FreeAir
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.methods import gradients
from wakeledger.physics.methods.gradients import FlowGradient
from wakeledger.physics.methods.vorticity_area import own_share
from wakeledger.physics.methods.wake_line import sensitivity as wake_line_sensitivity
from wakeledger.physics.vortices.vortex_sum import sensitivities as vortex_sum_sensitivities
from wakeledger.run.chain.adjoint_plane import crossflow_functional
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.estimates import counted_mask, without_walls
from wakeledger.run.chain.outputs import estimate_of
from wakeledger.run.chain.reduction import Reduction

FREE_AIR = FreeAir()
#: Wake-blockage velocity, m/s, among the figures that are differentiated; the outputs hold its share of the speed.
BLOCKAGE = "wake blockage velocity"


def figure_gradients(chain: Chain, nominal: Reduction, *, estimates: bool) -> dict[str, FlowGradient]:
    """Derivatives of what the outputs are made of by the plane that the methods see.

    Parameters
    ----------
    chain : Chain
        The survey, with what was frozen on the nominal plane.
    nominal : Reduction
        Its reduction.
    estimates : bool
        Whether the cross-checks are wanted.

    Returns
    -------
    dict of str to FlowGradient
        By the name of the row or the estimate, and of the wake-blockage velocity between closed walls.
    """
    settings, flow, reference = chain.settings, nominal.flow, nominal.reference
    grid, mask, star, forces = flow.grid, nominal.region.mask, nominal.loss_free, nominal.forces
    counted, boundary = settings.counted, settings.boundary.whole
    weights = np.where(mask, grid.weights, 0.0)
    blockage = nominal.wake_blockage
    near = chain.frozen.near_field
    shift: Array | float = 0.0 if near is None else near.u
    profile = gradients.profile_gradient(flow, reference, star, weights)
    axial = gradients.axial_gradient(flow, reference, star, weights, shift=shift + 2 * blockage)
    found: dict[str, FlowGradient] = {}
    if isinstance(boundary, ClosedWalls):
        deficit = gradients.deficit_gradient(flow, reference, star, weights)
        found[BLOCKAGE] = deficit * (1 / (2 * boundary.surveyed_area))
        # ρu_b∬(u* − u) is quadratic in the deficit, which u_b is a multiple of.
        profile = profile + deficit * (-2 * reference.density * blockage)
        if not reference.compressible:
            by_blockage = (
                2 * reference.density * float((weights * (star - shift - 2 * blockage - reference.speed)).sum())
            )
            axial = axial + found[BLOCKAGE] * by_blockage
    found["profile_drag"] = profile * counted
    if settings.crossflow:
        divergence = gradients.divergence_gradient(flow, mask, density=reference.density, near=near, boundary=boundary)
        found["residual_drag"] = (divergence + axial) * counted
        induced = gradients.induced_gradient(forces.stream_function, mask, grid, density=reference.density)
        found["induced_drag"] = induced * counted
        if settings.bounded:
            free = gradients.induced_gradient(forces.free_air_stream_function, mask, grid, density=reference.density)
            found["induced_drag_free_air"] = free * counted
        found |= _impulses(chain, nominal)
    if estimates:
        name = estimate_of("profile_drag", "entropy_area")
        found[name] = gradients.entropy_gradient(flow, reference, weights) * counted
        if settings.crossflow:
            found |= _energies(chain, nominal, found.get(BLOCKAGE))
            found |= _on_frozen_geometry(chain, nominal, found)
    return found


def _impulses(chain: Chain, nominal: Reduction) -> dict[str, FlowGradient]:
    settings, flow, reference = chain.settings, nominal.flow, nominal.reference
    grid, reflection = flow.grid, settings.reflection
    yy, zz = grid.mesh()
    about_y, about_z = yy - settings.moment_centre[0], zz - settings.moment_centre[1]
    arms = {"lift": yy}
    if reflection == "y":
        arms["root_bending_moment"] = 0.5 * np.maximum(yy, 0.0) ** 2
    else:
        arms |= {"side_force": -zz, "rolling_moment": -0.5 * (about_y**2 + about_z**2)}
    counted = nominal.region.mask * own_share(grid, reflection)[:, None]
    impulse = reference.density * reference.speed
    return {name: gradients.impulse_gradient(arm, counted, grid, impulse=impulse) for name, arm in arms.items()}


def _energies(chain: Chain, nominal: Reduction, by_blockage: FlowGradient | None) -> dict[str, FlowGradient]:
    """Energy form and momentum balance, whose crossflow offset is read from the plane itself."""
    settings, flow, reference = chain.settings, nominal.flow, nominal.reference
    grid, mask, counted = flow.grid, nominal.region.mask, chain.settings.counted
    v, w = (component - offset for component, offset in zip((flow.v, flow.w), nominal.crossflow_offset, strict=True))
    energy = gradients.energy_gradient(v, w, grid, density=reference.density)
    square = flow.u**2 + (flow.v**2 - v**2) + (flow.w**2 - w**2)
    along = np.sqrt(np.maximum(square, 0.0))
    aligned = Flow(grid, along, v, w, flow.total_pressure, flow.static_pressure, flow.density, flow.total_temperature)
    balance = gradients.momentum_gradient(aligned, reference)
    # u² = u² + (v² − v'²) + (w² − w'²): turning the flow keeps its speed.
    share = np.where(square > 0, np.asarray(balance.u) / np.where(square > 0, along, 1.0), 0.0)
    momentum = FlowGradient(
        u=share * flow.u,
        v=np.asarray(balance.v) - share * v,
        w=np.asarray(balance.w) - share * w,
        total_pressure=balance.total_pressure,
        static_pressure=balance.static_pressure,
        density=balance.density,
    )
    direct = FlowGradient(v=share * flow.v, w=share * flow.w)
    if by_blockage is not None and nominal.wake_blockage:
        width, height = (grid.ny - 1) * grid.dy, (grid.nz - 1) * grid.dz
        beside = max(getattr(settings.boundary, "section").area - width * height, 0.0)  # noqa: B009
        direct = direct + by_blockage * (-4 * reference.density * nominal.wake_blockage * beside)
    outer = (~mask).astype(float)
    found = {}
    for name, inner, rest in (
        (estimate_of("induced_drag", "energy_area"), energy, FlowGradient()),
        (estimate_of("total_drag", "momentum_area"), momentum, direct),
    ):
        total = inner + rest
        if outer.sum() > 0:
            # Both act on the crossflow less its offset: what they lose by the offset goes to where that was read.
            by = [
                0.0 if settings.reflection == axis else -float(np.sum(part))
                for axis, part in (("y", inner.v), ("z", inner.w))
            ]
            each = outer / outer.sum()
            from_v, from_w = crossflow_functional(by[0] * each, by[1] * each, flow, mask, settings.boundary.whole)
            total = total + FlowGradient(v=from_v, w=from_w)
        found[name] = total * counted
    return found


def _on_frozen_geometry(chain: Chain, nominal: Reduction, rows: Mapping[str, FlowGradient]) -> dict[str, FlowGradient]:
    """Wake line and vortex sum, which see the crossflow without that of the walls."""
    settings, frozen, flow, reference = chain.settings, chain.frozen, nominal.flow, nominal.reference
    grid, mask = flow.grid, nominal.region.mask
    v, w = without_walls(settings, flow, nominal.forces)
    found: dict[str, tuple[Array, Array]] = {}
    if frozen.cuts is not None and frozen.cuts.enclosed:
        above = counted_mask(settings, mask, grid)
        drag, lift = wake_line_sensitivity(frozen.cuts, v, w, reference.density, reference.speed, mask=above)
        found[estimate_of("induced_drag", "wake_line")] = drag
        found[estimate_of("lift", "wake_line")] = lift
    if frozen.parts is not None:
        by_v, by_w = vortex_sum_sensitivities(frozen.parts, v, w, reference.density)
        found[estimate_of("induced_drag", "vortex_sum")] = (settings.counted * by_v, settings.counted * by_w)
    result = {}
    for name, (by_v, by_w) in found.items():
        gradient = FlowGradient(v=by_v, w=by_w)
        if settings.bounded:
            gradient = gradient + _through_walls(by_v, by_w, chain, nominal)
            if name.startswith("induced_drag"):
                gradient = gradient + rows["induced_drag"] + rows["induced_drag_free_air"] * -1.0
        result[name] = gradient
    return result


def _through_walls(by_v: Array, by_w: Array, chain: Chain, nominal: Reduction) -> FlowGradient:
    """What the crossflow of the walls, itself made by the wake's vorticity, hands back to the plane."""
    flow, mask, boundary = nominal.flow, nominal.region.mask, chain.settings.boundary.whole
    walled = crossflow_functional(by_v, by_w, flow, mask, boundary)
    free = crossflow_functional(by_v, by_w, flow, mask, FREE_AIR)
    return FlowGradient(v=walled[0] - free[0], w=walled[1] - free[1])
