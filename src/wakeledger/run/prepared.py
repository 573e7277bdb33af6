"""A survey brought onto its grid and frozen there, before any error is added to it."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.core.errors import InputError
from wakeledger.physics.fields.entropy import entropy_loss
from wakeledger.physics.fields.loss_level import loss_level
from wakeledger.physics.fields.outer_flow import OuterFlow, outer_flow
from wakeledger.physics.methods.energy_area import crossflow_energy
from wakeledger.physics.methods.wake_line import WakeLine, wake_line
from wakeledger.physics.methods.wake_line import evaluate as evaluate_wake_line
from wakeledger.physics.vortices.vortex_sum import VortexSum
from wakeledger.run import tables
from wakeledger.run.chain.chain import Chain, turned_crossflow
from wakeledger.run.chain.estimates import counted_mask, without_walls
from wakeledger.run.chain.outputs import ESTIMATES, estimate_of
from wakeledger.run.chain.places import zero_places
from wakeledger.run.chain.reduction import Frozen, Reduction
from wakeledger.run.computed import slipstream_notes, slipstream_region
from wakeledger.run.gridded import grid_survey
from wakeledger.run.inputs import gradients, layouts, sources
from wakeledger.run.load import SurveyInput, refuse_unsupported
from wakeledger.run.traverse.notes import traverse_notes
from wakeledger.run.tunnel import tunnel_notes, tunnel_sources
from wakeledger.run.uncertainty.channel_noise import NoiseFindings
from wakeledger.run.uncertainty.noise import Noise, noise_bias
from wakeledger.run.uncertainty.noise_findings import crossflow_noises
from wakeledger.run.uncertainty.resolution import resolution_notes
from wakeledger.run.uncertainty.wandering import wandering_notes

#: A shock's loss stands this many times above the noise and wander of the outer flow, and above this share of q.
_SHOCK_LEVELS, _SHOCK_FLOOR = 5.0, 1e-4


@dataclass(frozen=True)
class Prepared:
    """A survey brought onto its grid, before any error is added.

    Attributes
    ----------
    chain : Chain
        Ready to be reduced.
    nominal : Reduction
        Its reduction, noise bias not yet subtracted.
    outer : OuterFlow
        Zeros found in the outer flow.
    line : WakeLine
        The wake line of the nominal plane.
    vortices : VortexSum
        The vortices of the nominal plane.
    expected : mapping of str to float
        What each estimate is expected to read above the primary one, N.
    sources, layouts
        Sources of uncertainty and the inputs they act on.
    noises : tuple of Noise
        Noise of the crossflow.
    findings : NoiseFindings
        Declared noise beside what the data show.
    notes : tuple of str
        Sentences about the choices made.
    cut : float
        Inboard cut, m.
    """

    chain: Chain
    nominal: Reduction
    outer: OuterFlow
    line: WakeLine
    vortices: VortexSum
    expected: Mapping[str, float]
    sources: tuple[Source, ...]
    layouts: Mapping[str, InputLayout]
    noises: tuple[Noise, ...]
    findings: NoiseFindings
    notes: tuple[str, ...]
    cut: float = 0.0


def prepare(survey: SurveyInput) -> Prepared:
    """Everything up to the Monte Carlo: grid, wake region, frozen geometry, noise and its bias.

    Parameters
    ----------
    survey : SurveyInput
        From `load`.

    Returns
    -------
    Prepared

    Raises
    ------
    InputError
        If the survey or its data are wrong.
    """
    refuse_unsupported(survey.survey)
    try:
        return _prepare(survey)
    except InputError as error:
        raise error.located(file=survey.points.source) from error


def _prepare(survey: SurveyInput) -> Prepared:
    file, points = survey.survey, survey.points
    gridded = grid_survey(survey)
    chain, first, vortices = gridded.chain.with_frozen_shear(), gridded.first, gridded.vortices
    reference, gridding = first.reference, chain.gridding
    near_field = chain.near_field(first.vorticity, first.flow.grid)
    line = _line(chain, first)
    found = first.region.mask.any() and not math.isnan(vortices.induced_drag)
    kept = gridded.parts if found else None
    turned = None
    if chain.swirls:
        turned = turned_crossflow(first.region.mask, first.flow.grid, chain.settings.boundary.whole)
    chain = replace(chain, frozen=Frozen(near_field, line.cuts if line.reason is None else None, kept, turned=turned))
    raw = gridded.raw
    declared = sources(file, points, reference) + (() if raw is None else raw.sources)
    names = sorted({name for source in declared for name in source.applies_to})
    inputs = layouts(file, points, gridding, names)
    declared, of_tunnel = tunnel_sources(survey, chain, declared)
    inputs |= of_tunnel
    if any(name.startswith("position.") for name in names):
        chain = replace(chain, gradients=gradients(chain))
    apart = slipstream_region(chain, first)
    chain = replace(chain, frozen=replace(chain.frozen, shock_level=_shock_level(chain, first), energised=apart))
    plain = chain.reduce()
    noises, findings, noise_notes = crossflow_noises(chain, plain, declared, inputs, seed=file.uncertainty.seed)
    chain = replace(chain, frozen=replace(chain.frozen, bias=noise_bias(chain, plain, noises)))
    nominal = chain.reduce()
    chain = replace(chain, frozen=replace(chain.frozen, region=nominal.region.mask))
    outer = outer_flow(
        reference.total_pressure - nominal.flow.total_pressure + nominal.loss_zero,
        nominal.flow.v,
        nominal.flow.w,
        nominal.forces.stream_function,
        nominal.flow.grid,
        mask=nominal.region.mask,
        near_field=near_field,
        turned=turned if chain.swirls else None,
    )
    level = loss_level(
        reference.total_pressure - nominal.flow.total_pressure,
        nominal.flow.grid,
        mask=nominal.region.mask,
        outer=zero_places(nominal.region.mask, nominal.flow.grid, chain.settings.zero_beyond),
        noise_known=_declares_noise_of_loss(declared),
    )
    outer = replace(outer, loss_zero_uncertainty=float(level.zero_uncertainty))
    expected = _expected(chain, nominal)
    made = () if raw is None else traverse_notes(raw, chain, nominal)
    notes = (
        *survey.notes(),
        *made,
        *tables.notes(survey, chain, nominal, gridded.state),
        *tunnel_notes(survey, chain, nominal),
        *slipstream_notes(chain, nominal),
        *resolution_notes(chain, nominal),
        *wandering_notes(file.wake, vortices, chain, nominal),
        *noise_notes,
    )
    cut = 0.0 if file.boundary is None else file.boundary.inboard_cut or 0.0
    return Prepared(chain, nominal, outer, line, vortices, expected, declared, inputs, noises, findings, notes, cut)


def _declares_noise_of_loss(declared: Sequence[Source]) -> bool:
    """Whether the draws hold the noise of the total pressure already, and with it that of its zero."""
    causes = ("plane.total_pressure", "plane.static_pressure", "plane.u", "plane.speed", "probe.")
    return any(
        source.effect == "random" and any(name.startswith(causes) for name in source.applies_to) for source in declared
    )


def _shock_level(chain: Chain, first: Reduction) -> float | None:
    """Loss above which smooth loss beside the wake of a computed compressible plane is a shock's, Pa."""
    reference, grid = first.reference, first.flow.grid
    if not (chain.settings.computed and reference.compressible):
        return None
    loss = entropy_loss(first.flow, reference)
    mask = first.region.mask
    found = loss_level(loss, grid, mask=mask, outer=zero_places(mask, grid, chain.settings.zero_beyond))
    wander = float(np.hypot(found.noise, found.wander))
    if not math.isfinite(wander):
        return None
    return max(_SHOCK_LEVELS * wander, _SHOCK_FLOOR * reference.dynamic_pressure)


def _line(chain: Chain, nominal: Reduction) -> WakeLine:
    flow, reference = nominal.flow, nominal.reference
    loss = reference.total_pressure - flow.total_pressure
    v, w = without_walls(chain.settings, flow, nominal.forces)
    return wake_line(v, w, flow.grid, reference.density, reference.speed, mask=nominal.region.mask, loss=loss)


def _expected(chain: Chain, nominal: Reduction) -> dict[str, float]:
    """What each estimate reads above the primary one because of the bound vortex."""
    near = chain.frozen.near_field
    zero = dict.fromkeys((estimate_of(row, method) for row, method in ESTIMATES), 0.0)
    reference, settings = nominal.reference, chain.settings
    # The loss expands to the stream's pressure at U, and between walls to that of the faster stream, U + 2u_b.
    share = nominal.wake_blockage / reference.speed
    zero[estimate_of("profile_drag", "entropy_area")] = share * nominal.values["profile_drag"]
    if near is None or not (np.any(near[0]) or np.any(near[1])):
        return zero
    flow, cuts = nominal.flow, chain.frozen.cuts
    v0, w0 = nominal.crossflow_offset
    energy = [
        settings.counted * float(crossflow_energy(v - v0, w - w0, flow.grid, density=reference.density))
        for v, w in ((flow.v, flow.w), (flow.v - near[0], flow.w - near[1]))
    ]
    excess = energy[0] - energy[1]
    zero[estimate_of("induced_drag", "energy_area")] = excess
    # The momentum balance over the window holds the axial disturbance as well, with the other sign.
    axial = 0.5 * reference.density * settings.counted * float(flow.grid.integrate(near.u**2))
    zero[estimate_of("total_drag", "momentum_area")] = excess - axial
    if cuts is not None:
        v, w = without_walls(settings, flow, nominal.forces)
        mask = counted_mask(settings, nominal.region.mask, flow.grid)
        here, there = (
            evaluate_wake_line(cuts, at_v, at_w, reference.density, reference.speed, mask=mask)
            for at_v, at_w in ((v, w), (v - near[0], w - near[1]))
        )
        zero[estimate_of("induced_drag", "wake_line")] = float(here.induced_drag - there.induced_drag)
        zero[estimate_of("lift", "wake_line")] = float(here.lift - there.lift)
    return zero
