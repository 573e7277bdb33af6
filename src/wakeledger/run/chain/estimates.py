"""The cross-checks that the chain evaluates beside its rows, with what surrounds the survey."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.boundary import ClosedWalls
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.fields.lifting_line import NearField
from wakeledger.physics.fields.outer_flow import crossflow_offset, induced_crossflow
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.physics.methods.energy_area import crossflow_energy
from wakeledger.physics.methods.entropy_area import entropy_profile_drag
from wakeledger.physics.methods.momentum_area import momentum_drag
from wakeledger.physics.methods.vorticity_area import VorticityForces, own_share
from wakeledger.physics.methods.wake_line import evaluate as evaluate_wake_line
from wakeledger.physics.vortices.vortex_sum import evaluate as evaluate_vortex_sum
from wakeledger.run.chain.outputs import estimate_of
from wakeledger.run.chain.reduction import Frozen, Settings, Variation
from wakeledger.stream.reference import Reference


@dataclass(frozen=True)
class AreaEstimates:
    """Cross-checks by integrals over the plane.

    Attributes
    ----------
    values : dict of str to float
        By output, N.
    offset : (float, float)
        Crossflow outside the wake that its vorticity does not explain, m/s; taken out of the energy forms.
    invalid_area : float
        Area where the expansion to the stream's pressure has no real value, m².
    """

    values: dict[str, float]
    offset: tuple[float, float]
    invalid_area: float


def area_estimates(
    settings: Settings,
    frozen: Frozen,
    flow: Flow,
    reference: Reference,
    mask: Mask,
    forces: VorticityForces,
    near: NearField,
    *,
    wake_blockage: float,
    vary: Variation,
) -> AreaEstimates:
    """Entropy area, energy area and momentum area of one plane.

    Parameters
    ----------
    settings, frozen, vary
        Of the chain.
    flow, reference
        The plane and the undisturbed stream.
    mask : ndarray of bool, shape (nz, ny)
        The wake region.
    forces : VorticityForces
        Of the plane's vorticity.
    near : NearField
        What the bound vortex adds.
    wake_blockage : float
        u_b between closed walls, m/s.

    Returns
    -------
    AreaEstimates
    """
    grid, bias, counted = flow.grid, frozen.bias, settings.counted
    entropy, invalid = entropy_profile_drag(flow, reference, mask)
    values = {estimate_of("profile_drag", "entropy_area"): counted * float(entropy)}
    outer = (~mask).astype(float)
    offset: Array = np.zeros(2)
    if outer.sum() > 0:
        offset = crossflow_offset(flow.v, flow.w, induced_crossflow(forces.stream_function, grid), near, outer)
    offset = offset + np.asarray(vary.crossflow_shift)
    if settings.reflection is not None:
        # Nothing flows through the reflection plane, so that the mean of the normal component says nothing.
        offset[0 if settings.reflection == "y" else 1] = 0.0
    v, w = flow.v - offset[0], flow.w - offset[1]
    energy = counted * float(crossflow_energy(v, w, grid, density=reference.density))
    name = estimate_of("induced_drag", "energy_area")
    values[name] = energy - bias.get(name, 0.0)
    # Turning the flow keeps its speed.
    square = flow.u**2 + (flow.v**2 - v**2) + (flow.w**2 - w**2)
    aligned = replace(flow, u=np.sqrt(np.maximum(square, 0.0)), v=v, w=w)
    name = estimate_of("total_drag", "momentum_area")
    momentum = float(momentum_drag(aligned, reference)) - _beside_the_window(settings, grid, reference, wake_blockage)
    values[name] = counted * momentum - bias.get(name, 0.0)
    return AreaEstimates(values, (float(offset[0]), float(offset[1])), float(invalid))


def _beside_the_window(settings: Settings, grid: UniformGrid, reference: Reference, wake_blockage: float) -> float:
    """What the faster stream between the window and closed walls takes off the momentum balance, ½ρ∬(2u_b)² dA, N."""
    if not isinstance(settings.boundary, ClosedWalls):
        return 0.0
    width, height = (grid.ny - 1) * grid.dy, (grid.nz - 1) * grid.dz
    beside = max(settings.boundary.section.area - width * height, 0.0)
    return 2 * reference.density * wake_blockage**2 * beside


def without_walls(settings: Settings, flow: Flow, forces: VorticityForces) -> tuple[Array, Array]:
    """The measured crossflow less that of the walls alone, shape (nz, ny) each, m/s.

    What is left is that of the wake in free air, in which line integrals and vortex sums are closed forms.
    """
    if not settings.bounded:
        return flow.v, flow.w
    walls = induced_crossflow(forces.stream_function - forces.free_air_stream_function, flow.grid)
    return flow.v - walls[0], flow.w - walls[1]


def on_frozen_geometry(
    settings: Settings,
    frozen: Frozen,
    v: Array,
    w: Array,
    mask: Mask,
    density: Array | float,
    speed: Array | float,
    walls_drag: Array | float,
) -> dict[str, Array]:
    """Wake line and vortex sum, noise bias subtracted.

    Parameters
    ----------
    settings, frozen
        Of the chain.
    v, w : ndarray, shape (..., nz, ny)
        Crossflow without that of the walls, m/s.
    mask : ndarray of bool, shape (..., nz, ny)
        Wake regions.
    density, speed : float or ndarray, shape (...)
        Of the undisturbed stream.
    walls_drag : float or ndarray, shape (...)
        What the walls add to the induced drag, N.

    Returns
    -------
    dict of str to ndarray
        By output, shape (...), N.
    """
    found, bias = {}, frozen.bias
    if frozen.cuts is not None:
        line = evaluate_wake_line(
            frozen.cuts, v, w, density, speed, mask=counted_mask(settings, mask, frozen.cuts.grid)
        )
        for row, value in (("induced_drag", line.induced_drag + walls_drag), ("lift", line.lift)):
            name = estimate_of(row, "wake_line")
            found[name] = value - bias.get(name, 0.0)
    if frozen.parts is not None:
        name = estimate_of("induced_drag", "vortex_sum")
        value = settings.counted * evaluate_vortex_sum(frozen.parts, v, w, density) + walls_drag
        found[name] = value - bias.get(name, 0.0)
    return found


def counted_mask(settings: Settings, mask: Mask, grid: UniformGrid) -> Mask:
    """The part of a wake region that the ledger counts: all of it, or what lies above the ground."""
    if settings.reflection != "z":
        return mask
    counted: Mask = mask & (own_share(grid, "z") > 0)[:, None]
    return counted
