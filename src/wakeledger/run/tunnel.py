"""What a tunnel adds to a survey's uncertainty, to its ledger and to its notes."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np

from wakeledger.confidence.samples import Samples
from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.core.errors import SurveyError
from wakeledger.ledger.rows import TunnelFigure
from wakeledger.physics.fields.boundary import ClosedWalls, FreeAir
from wakeledger.physics.fields.differences import crossflow_divergence
from wakeledger.physics.fields.solvability import solvability
from wakeledger.physics.loading.boundary_factor import classical_boundary_factor
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.empty_tunnel import PREFIX
from wakeledger.run.chain.outputs import TUNNEL
from wakeledger.run.chain.reduction import Reduction, Variation
from wakeledger.run.inputs import layouts, sources
from wakeledger.run.ledgers.increment import refuse_conflicts
from wakeledger.run.load import SurveyInput
from wakeledger.run.tables import counts_text

#: Unit and meaning of each figure.
_MEANINGS: Mapping[str, tuple[str, str]] = {
    "boundary_factor": ("1", "boundary factor delta = (C_Di,free - C_Di) C/(S C_L^2), positive between closed walls"),
    "wake_blockage": ("1", "velocity that the wake adds to the stream's at the model between closed walls, as a share"),
    "wall_upwash": ("1", "upwash of the walls at the model over the stream's speed, positive up"),
    "angle_correction": ("rad", "delta (S/C) C_L, to be added to the model's incidence"),
}
#: Loadings whose classical boundary factor stands beside the survey's own.
_LOADINGS = ("small", "elliptic", "uniform")


def tunnel_sources(
    survey: SurveyInput, chain: Chain, declared: Sequence[Source]
) -> tuple[tuple[Source, ...], dict[str, InputLayout]]:
    """Sources of the empty tunnel's survey and of the support's, with those of the survey itself.

    Parameters
    ----------
    survey : SurveyInput
        The survey.
    chain : Chain
        Its chain, the empty tunnel in it.
    declared : sequence of Source
        Its own sources.

    Returns
    -------
    sources : tuple of Source
        The declared ones first. One that carries the `shared_id` of a source of the empty tunnel acts on both surveys.
    layouts : dict of str to InputLayout
        Of the inputs added.

    Raises
    ------
    InputError
        If the survey has sources and that of the empty tunnel none, or both mean another error by one `shared_id`.
    """
    found = list(declared)
    added: dict[str, InputLayout] = {}
    if not found:
        # Where nothing is known of the measurement's errors, those of other surveys alone would pass for all there are.
        return (), added
    if survey.tare is not None:
        found.append(
            Source(survey.tare.label, ("boundary.support_tare",), "systematic", survey.tare.standard_uncertainty)
        )
        added["boundary.support_tare"] = InputLayout(survey.tare.value)
    empty, own = survey.empty_tunnel, chain.empty
    if empty is None or own is None:
        return tuple(found), added
    theirs = (*sources(empty.survey, empty.points, own.chain.reference()), *own.sources)
    if not theirs:
        raise SurveyError(
            "the survey of the empty tunnel declares no source of uncertainty, so that what is taken out would pass for"
            " exact",
            file=empty.survey.path,
            place="[[uncertainty.source]]",
            remedy="declare the noise of that survey, with the shared_id of what both surveys have in common",
        )
    refuse_conflicts((("the survey", (survey.survey,)), ("that of the empty tunnel", (empty.survey,))))
    names = sorted({name for source in theirs for name in source.applies_to})
    places = layouts(empty.survey, empty.points, own.chain.gridding, names)
    added |= {PREFIX + name: layout for name, layout in places.items()}
    for source in theirs:
        inputs = tuple(PREFIX + name for name in source.applies_to)
        twin = _twin(found, source)
        if twin is not None:
            found[twin] = replace(found[twin], applies_to=(*found[twin].applies_to, *inputs), prefix=PREFIX)
        else:
            found.append(replace(source, name=f"empty tunnel: {source.name}", applies_to=inputs, prefix=PREFIX))
    return tuple(found), added


def _twin(found: Sequence[Source], source: Source) -> int | None:
    """Which of a survey's own sources is one and the same error of one input as a source of the empty tunnel's.

    What errs at each point or row on its own does so anew in the other survey, whatever its `shared_id`.
    """
    if source.effect != "systematic":
        return None
    same = ("effect", "standard_uncertainty", "relative", "distribution", "degrees_of_freedom", "shared_id")
    for k, one in enumerate(found):
        if one.shared_id is None or not set(one.applies_to) & set(source.applies_to):
            continue
        if all(getattr(one, name) == getattr(source, name) for name in same):
            return k
    return None


def tunnel_figures(chain: Chain, nominal: Reduction, samples: Samples | None) -> tuple[TunnelFigure, ...]:
    """What the walls do to the flow at the model, and what classical theory gives for the loading.

    Parameters
    ----------
    chain : Chain
        The survey.
    nominal : Reduction
        Its nominal reduction.
    samples : Samples or None
        Its draws.

    Returns
    -------
    tuple of TunnelFigure
        Empty in free air.
    """
    boundary, settings = chain.settings.boundary, chain.settings
    if isinstance(boundary, FreeAir) or not settings.crossflow:
        return ()
    found = []
    for name in TUNNEL:
        value = nominal.values[name]
        if math.isnan(value):
            continue
        u, reason = math.nan, "the survey has no uncertainty source"
        if samples is not None:
            at = samples.names.index(name)
            u, reason = float(samples.standard_uncertainty[at]), samples.unknown[at] or ""
        found.append(TunnelFigure(name, value, *_MEANINGS[name][:1], u, _MEANINGS[name][1], reason or None))
    place = settings.model_place or _middle(nominal)
    for loading, factor in classical_factors(chain, place).items():
        meaning = (
            f"classical boundary factor of a {loading} wing"
            if loading == "small"
            else (f"classical boundary factor of a straight wing with {loading} loading")
        )
        found.append(TunnelFigure(f"classical_{loading}", factor, "1", 0.0, meaning))
    if isinstance(boundary, ClosedWalls):
        found.append(
            TunnelFigure(
                "expected_wake_blockage",
                _classical_blockage(chain, nominal, boundary),
                "1",
                math.nan,
                "classical wake blockage C_D S/(4C) of all profile drag in the wake, as a share of the speed",
                reason="it is held beside the measured one only",
            )
        )
    return tuple(found)


def _middle(nominal: Reduction) -> tuple[float, float]:
    """Middle of the wake's vorticity of one half: where the wing's line is taken to be."""
    weight, grid = np.abs(nominal.vorticity), nominal.flow.grid
    total = float(weight.sum())
    if total == 0:
        return 0.0, 0.0
    yy, zz = grid.mesh()
    return float((weight * yy).sum() / total), float((weight * zz).sum() / total)


def classical_factors(chain: Chain, place: tuple[float, float]) -> dict[str, float]:
    """Classical boundary factors of a straight level wing of the model's span, as far as it fits the section."""
    boundary, span = chain.settings.boundary, chain.settings.span
    if isinstance(boundary, FreeAir):
        return {}
    centre = (0.0 if boundary.reflection == "y" else place[0], place[1])
    found = {}
    for loading in _LOADINGS:
        if loading != "small" and not math.isfinite(span):
            continue
        try:
            found[loading] = classical_boundary_factor(boundary, loading, span=span, centre=centre)
        except SurveyError:
            continue
    return found


def tunnel_notes(survey: SurveyInput, chain: Chain, nominal: Reduction) -> list[str]:
    """Sentences about walls, reflection plane, empty tunnel and blockage, each with its size.

    Parameters
    ----------
    survey : SurveyInput
        The survey.
    chain : Chain
        Ready to be reduced.
    nominal : Reduction
        Its nominal reduction.

    Returns
    -------
    list of str
        Empty in free air without a reflection plane.
    """
    settings, found = chain.settings, []
    boundary = settings.boundary
    if settings.reflection == "y":
        found.append(
            "The survey is the starboard half of a half model: lift and drag are those of both halves, the other one"
            " mirrored."
        )
        found += _cut_note(survey, chain)
    if settings.reflection == "z":
        found.append("The ground z = 0 reflects the flow; forces are those of what stands above it.")
    if not isinstance(boundary, FreeAir) and settings.crossflow:
        kind = "closed walls" if isinstance(boundary, ClosedWalls) else "the edge of an open jet"
        free, tested = nominal.values["induced_drag_free_air"], nominal.values["induced_drag"]
        place = settings.model_place or _middle(nominal)
        classical = ", ".join(f"{name} {value:+.4f}" for name, value in classical_factors(chain, place).items())
        found.append(
            f"With {kind} (section {boundary.flow_area:.4g} m2) the induced drag is that of free air"
            f" {counts_text(tested - free, nominal, chain)}: boundary factor {nominal.values['boundary_factor']:+.4f}"
            + (f" (classical, straight wing: {classical})." if classical else ".")
        )
        degrees = math.degrees(nominal.values["angle_correction"])
        found.append(f"In free air the model would have this lift at an incidence {degrees:+.3f} deg higher.")
    if isinstance(boundary, ClosedWalls):
        found.append(_blockage_note(chain, nominal))
        if settings.crossflow:
            found.append(_source_note(chain, nominal))
    found += _stream_notes(chain, nominal)
    tare = settings.given.get("boundary.support_tare")
    if tare:
        found.append(f"The support's drag was taken off the profile drag ({counts_text(tare, nominal, chain)}).")
    return found


def _cut_note(survey: SurveyInput, chain: Chain) -> list[str]:
    boundary = survey.survey.boundary
    cut = None if boundary is None else boundary.inboard_cut
    first = float(survey.points.y.min())
    if cut is not None:
        dropped = int(np.count_nonzero(survey.points.y < cut))
        return [
            f"{dropped} points nearer than {1e3 * cut:.3g} mm to the reflection plane were left out; the flow there was"
            " filled from both sides."
        ]
    if first > chain.gridding.grid.dy:
        return [
            f"The survey begins {1e3 * first:.3g} mm from the reflection plane; the flow up to it was filled from both"
            " sides."
        ]
    return []


def _classical_blockage(chain: Chain, nominal: Reduction, boundary: ClosedWalls) -> float:
    """C_D S/(4C) of all drag in the surveyed wake, that of the support too: both slow the stream."""
    drag = nominal.values["profile_drag"] + chain.settings.given.get("boundary.support_tare", 0.0)
    return drag / (4 * nominal.reference.dynamic_pressure * boundary.flow_area)


def _blockage_note(chain: Chain, nominal: Reduction) -> str:
    reference, boundary = nominal.reference, chain.settings.boundary
    assert isinstance(boundary, ClosedWalls)
    share = nominal.wake_blockage / reference.speed
    expected = _classical_blockage(chain, nominal, boundary)
    solid = chain.settings.given.get("boundary.solid_blockage")
    wake = (
        f"The wake adds {share:.3%} to the speed at the model (C_D S/4C of the profile drag: {expected:.3%}); that is"
        " in the profile drag"
    )
    if solid is None:
        wake += " and in the corrected coefficients; the model's own volume is not: give solid_blockage."
    else:
        wake += f", and with the given solid blockage of {solid:.3%} in the corrected coefficients."
    faster = share + (solid or 0.0)
    return f"{wake} The lift is the wake's impulse at the reference speed; at the model's it would be {faster:+.2%}."


def _source_note(chain: Chain, nominal: Reduction) -> str:
    """What had to be taken out of the divergence so that nothing goes through the walls."""
    flow, mask = nominal.flow, nominal.region.mask
    near = chain.frozen.near_field
    v, w = (flow.v, flow.w) if near is None else (flow.v - near.v, flow.w - near.w)
    divergence = np.where(mask, crossflow_divergence(v, w, flow.grid), 0.0)
    whole = solvability(divergence, flow.grid, chain.settings.boundary.whole, of="divergence")
    net = chain.settings.counted * float(whole.net)
    gross = float(nominal.forces.gross_circulation)
    share = f" ({abs(net) / gross:.1%} of the wake's circulation)" if gross > 0 else ""
    return (
        f"The crossflow's net source in the wake region, {net:+.3g} m2/s{share}, was taken out ahead of the residual"
        " drag: closed walls let nothing through."
    )


def _stream_notes(chain: Chain, nominal: Reduction) -> list[str]:
    """What was taken out of the stream, and what that is worth."""
    if chain.empty is not None:
        grid = nominal.flow.grid
        _, v, w, total, _ = chain.empty.flow(nominal.reference, grid, {})
        raw = replace(chain, empty=None).reduce(vary=Variation(mask=nominal.region.mask))
        worth = nominal.values[nominal.drag] - raw.values[nominal.drag]
        speed = nominal.reference.speed
        found = (
            f"The empty tunnel was taken out: mean upwash {math.degrees(math.atan2(float(w.mean()), speed)):+.3f} deg,"
            f" sidewash {math.degrees(math.atan2(float(v.mean()), speed)):+.3f} deg, mean loss"
            f" {-float(total.mean()):+.3g} Pa; that changes the {nominal.drag.replace('_', ' ')} by"
            f" {counts_text(worth, nominal, chain)}"
        )
        if not chain.settings.crossflow:
            return [found + "."]
        energy = "induced_drag energy_area"
        by_energy = nominal.values[energy] - raw.values[energy]
        return [f"{found} and the energy form by {counts_text(by_energy, nominal, chain)}."]
    if not chain.settings.bounded:
        return []
    said = "The tunnel was not surveyed empty"
    if chain.swirls:
        raw = chain.reduce(vary=Variation(mask=nominal.region.mask, swirl_shift=-nominal.swirl), estimates=False)
        worth = nominal.values["induced_drag"] - raw.values["induced_drag"]
        return [
            f"{said}: outside the wake the stream turns by"
            f" {math.degrees(nominal.swirl / nominal.reference.speed):+.3f} deg per metre, which was taken out"
            f" ({counts_text(worth, nominal, chain)} of induced drag)."
        ]
    return [f"{said}: its upflow is that of the flow outside the wake."]
