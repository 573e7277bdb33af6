"""The reduction of one survey, from points to ledger, in its declared order."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from wakeledger.confidence.budget import Budget, make_budget
from wakeledger.confidence.linear_budget import NEGLIGIBLE, LinearBudget
from wakeledger.confidence.montecarlo import run as run_montecarlo
from wakeledger.confidence.samples import Samples
from wakeledger.confidence.sampling import ErrorSampler
from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.confidence.terms import NumericalTerm, add_terms
from wakeledger.core.errors import InputError, SurveyError
from wakeledger.core.grid import Array
from wakeledger.ledger.inspection import Inspection
from wakeledger.ledger.propagation import Propagation
from wakeledger.ledger.rows import Check, CrossCheck, KeptSurvey, Ledger, Row
from wakeledger.physics.fields.entropy import entropy_loss
from wakeledger.physics.fields.loss_level import loss_level
from wakeledger.physics.fields.outer_flow import OuterFlow, outer_flow
from wakeledger.physics.loading.span import span_loading
from wakeledger.physics.methods.energy_area import crossflow_energy
from wakeledger.physics.methods.entropy_area import expansion_doubt
from wakeledger.physics.methods.wake_line import WakeLine, path_scatter, wake_line
from wakeledger.physics.methods.wake_line import evaluate as evaluate_wake_line
from wakeledger.physics.vortices.vortex_sum import VortexSum
from wakeledger.run import tables
from wakeledger.run.assembly import (
    NO_SOURCE,
    budget_lines,
    comparisons,
    contributions,
    cross_check,
    ledger_row,
    made_unknown,
    require_rows,
)
from wakeledger.run.chain import Chain, turned_crossflow, zero_places
from wakeledger.run.checks import Facts, all_checks
from wakeledger.run.config.tunnel import GIVEN, TunnelInput
from wakeledger.run.estimates import counted_mask, without_walls
from wakeledger.run.gridded import core_spacings, grid_survey, regrid_of
from wakeledger.run.inputs import gradients, layouts, sources
from wakeledger.run.inspection import inspect_plane, inspect_section
from wakeledger.run.linear import linear_slopes, separated, survey_budget, tried, with_prediction
from wakeledger.run.load import SUPPORT_TARE, SurveyInput, load, refuse_unsupported
from wakeledger.run.near_field import with_closures
from wakeledger.run.noise import Noise, declared_noise, estimated_noise, noise_bias, white_noise
from wakeledger.run.numerics import numerical_terms
from wakeledger.run.outputs import ESTIMATES, MOMENTS, OUTPUTS, ROWS, estimate_of
from wakeledger.run.probe_range import probe_range
from wakeledger.run.propagation import propagation, propagation_notes
from wakeledger.run.reduction import Frozen, Reduction
from wakeledger.run.section.survey import reduce_section
from wakeledger.run.stations import reduce_stations
from wakeledger.run.traverse_notes import traverse_notes
from wakeledger.run.tunnel import tunnel_figures, tunnel_notes, tunnel_sources

__all__ = ["SurveyInput", "inspect", "load", "prepare", "reduce"]

Progress = Callable[[int, int], None]

#: Draws that tell the wake region's own effect from that of noise.
_NOISE_DRAWS = 16
_NO_WAKE = "no wake was found, and what the noise may hide is unknown"
_NO_BOUND_LINE = "without mean_chord, quarter_chord_x or span the bound vortex's effect on it is unknown"
_SEES_THE_BOUND_VORTEX = {
    ("induced_drag", "energy_area"),
    ("induced_drag", "wake_line"),
    ("total_drag", "momentum_area"),
}
#: What sums of cells and sums of differences may differ by on the same vorticity, as a share.
DISCRETISATION = 1e-4
#: A shock's loss stands this many times above the noise and wander of the outer flow, and above this share of q.
_SHOCK_LEVELS, _SHOCK_FLOOR = 5.0, 1e-4
_UNBALANCED = "the net circulation is not zero, so the induced drag depends on where the window ends"
#: Outputs that hang on the induced drag.
_INDUCED = ("induced_drag", "induced_drag_free_air", "total_drag", "span_efficiency")
_ASSUMED_STATIC = "at the stream's static pressure it is the algebra of the row: it tests the arithmetic, not the flow"
_SAME_ALGEBRA = "the same algebra as the sum of the rows: it tests the arithmetic, not the flow"


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
    notes : tuple of str
        Sentences about the choices made.
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
    notes: tuple[str, ...]


def reduce(
    survey: SurveyInput, *, draws: int | None = None, progress: Progress | None = None, command: str = ""
) -> Ledger:
    """Reduce one survey to its ledger.

    Parameters
    ----------
    survey : SurveyInput
        From `load`.
    draws : int, optional
        Monte Carlo draws instead of the survey file's.
    progress : callable, optional
        Called with the draws done and their number.
    command : str
        The command line, for the archive.

    Returns
    -------
    Ledger

    Raises
    ------
    InputError
        If the survey or its data are wrong.
    """
    if survey.survey.section is not None:
        return reduce_section(survey, draws=draws, progress=progress, command=command)
    survey = _with_tare(survey, draws=draws)
    if survey.stations:
        stations = tuple(replace(one, tare=survey.tare) for one in survey.stations)
        whole = reduce_stations(
            replace(survey, stations=stations),
            lambda one: reduce(one, draws=draws, progress=progress, command=command),
            command=command,
        )
        return with_closures(whole) if survey.computed else whole
    prepared = prepare(survey)
    require_rows(survey.survey, [name for name in ROWS if not math.isnan(prepared.nominal.values[name])])
    uncertainty = survey.survey.uncertainty
    count = uncertainty.draws if draws is None else draws
    terms: tuple[NumericalTerm, ...] = ()
    samples, budget = None, None
    found: Propagated | None = None
    if prepared.sources and prepared.nominal.region.mask.any():
        try:
            terms = _terms(prepared, survey)
            found = _propagate(prepared, terms, draws=count, seed=uncertainty.seed, progress=progress)
            samples, budget = found.samples, found.budget
        except InputError as error:
            raise error.located(file=survey.survey.path) from error
    elif survey.computed and prepared.nominal.region.mask.any():
        samples, budget = _numerical_only(prepared, _terms(prepared, survey), draws=count, seed=uncertainty.seed)
    checks = all_checks(prepared.nominal, _facts(prepared))
    if samples is not None and any(check.name == "net_circulation" and check.verdict == "fail" for check in checks):
        samples = made_unknown(samples, _INDUCED, _UNBALANCED)
    ledger = _ledger(survey, prepared, samples, budget, checks, found=found, command=command)
    return with_closures(ledger) if survey.computed else ledger


def _with_tare(survey: SurveyInput, *, draws: int | None) -> SurveyInput:
    """The survey with what its survey of the support alone came to."""
    support = survey.companions.get(SUPPORT_TARE)
    if support is None or survey.tare is not None:
        return survey
    row = next(row for row in reduce(support, draws=draws).rows if row.name == "profile_drag")
    if not math.isfinite(row.standard_uncertainty):
        raise SurveyError(
            "the profile drag of the support alone has no known uncertainty",
            file=support.survey.path,
            place="[[uncertainty.source]]",
            remedy="declare the sources of that survey, or give the tare as a value with its uncertainty",
        )
    return replace(survey, tare=TunnelInput(row.value, row.standard_uncertainty, GIVEN[SUPPORT_TARE]))


def inspect(survey: SurveyInput) -> Inspection:
    """Read, grid and check one survey without reducing it.

    Parameters
    ----------
    survey : SurveyInput
        From `load`.

    Returns
    -------
    Inspection

    Raises
    ------
    InputError
        If the survey or its data are wrong.
    """
    if survey.survey.section is not None:
        return inspect_section(survey)
    refuse_unsupported(survey.survey)
    try:
        return inspect_plane(survey, grid_survey(survey, quick=True))
    except InputError as error:
        raise error.located(file=survey.points.source) from error


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
    chain = replace(chain, frozen=replace(chain.frozen, shock_level=_shock_level(chain, first)))
    plain = chain.reduce()
    noises, noise_notes = _noises(chain, plain, declared, inputs, seed=file.uncertainty.seed)
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
    )
    outer = replace(outer, loss_zero_uncertainty=float(level.zero_uncertainty))
    expected = _expected(chain, nominal)
    made = () if raw is None else traverse_notes(raw, chain, nominal)
    said = file.notes()
    if survey.computed:
        said = [note for note in said if not note.startswith("[[uncertainty.source]]")]
    notes = (
        *said,
        *made,
        *tables.notes(survey, chain, nominal, gridded.state),
        *tunnel_notes(survey, chain, nominal),
        *noise_notes,
    )
    return Prepared(chain, nominal, outer, line, vortices, expected, declared, inputs, noises, notes)


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


def _noises(
    chain: Chain,
    nominal: Reduction,
    declared: Sequence[Source],
    inputs: Mapping[str, InputLayout],
    *,
    seed: int,
) -> tuple[tuple[Noise, ...], list[str]]:
    """Noise of the crossflow as declared, else as the data show it; and what the data say about the declaration."""
    if not chain.settings.crossflow:
        return (), []
    noises = declared_noise(chain, nominal, declared, inputs, seed=seed)
    if chain.gridding.kind != "uniform":
        if noises:
            return noises, []
        return (), ["The noise of the crossflow is unknown, so its bias was not subtracted from the induced drag."]
    estimates = estimated_noise(nominal, chain.gridding.filled)
    v, w = (estimate.standard_deviation for estimate in estimates)
    if not math.isfinite(v + w):
        return noises, ["The noise of the crossflow cannot be estimated: too little outer flow is left."]
    shown = f"v {v:.3g} m/s, w {w:.3g} m/s"
    if not noises:
        return (white_noise("noise in the data", v, w),), [
            f"No noise of the crossflow was declared; its bias was subtracted with what the data show ({shown})."
        ]
    said = [math.sqrt(sum(noise.outer_variance[k] for noise in noises if noise.is_white)) for k in range(2)]
    ratios = [found / max(stated, 1e-300) for found, stated in zip((v, w), said, strict=True)]
    if max(ratios) > 1.5 or min(ratios) < 1 / 1.5:
        declared_text = f"v {said[0]:.3g} m/s, w {said[1]:.3g} m/s"
        return noises, [
            f"The crossflow's point-to-point noise shown by the data ({shown}) is not the declared one"
            f" ({declared_text}); check the sources."
        ]
    return noises, []


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


def _terms(prepared: Prepared, survey: SurveyInput) -> tuple[NumericalTerm, ...]:
    return numerical_terms(
        prepared.chain,
        prepared.nominal,
        outer=prepared.outer,
        regrid=regrid_of(survey, prepared.chain.state(prepared.nominal.reference)),
        method_uncertainty=_method_uncertainty(prepared),
        noise=_noise_draws(prepared, seed=survey.survey.uncertainty.seed),
    )


def _method_uncertainty(prepared: Prepared) -> dict[str, float]:
    """Standard uncertainty that each estimate's own choices add, N."""
    chain, nominal, near = prepared.chain, prepared.nominal, prepared.chain.frozen.near_field
    flow, reference = nominal.flow, nominal.reference
    found = {
        estimate_of("induced_drag", "vortex_sum"): prepared.vortices.method_uncertainty,
        estimate_of("profile_drag", "entropy_area"): expansion_doubt(flow, reference, nominal.profile_integrand),
        estimate_of("lift", "wake_line"): DISCRETISATION * abs(nominal.values["lift"]),
    }
    if chain.frozen.cuts is not None and near is not None:
        # The bound vortex makes families of paths differ as predicted; what is left over is the method's doubt.
        v, w = without_walls(chain.settings, flow, nominal.forces)
        far = evaluate_wake_line(
            chain.frozen.cuts,
            v - near[0],
            w - near[1],
            reference.density,
            reference.speed,
            mask=counted_mask(chain.settings, nominal.region.mask, flow.grid),
        )
        found[estimate_of("induced_drag", "wake_line")] = float(path_scatter(far.family_drag))
    return found


def _noise_draws(prepared: Prepared, *, seed: int) -> list[dict[str, Array]]:
    """A few draws of the errors that differ from point to point."""
    random = [source for source in prepared.sources if source.effect != "systematic"]
    if not random:
        return []
    inputs = {name: prepared.layouts[name] for source in random for name in source.applies_to}
    draws = ErrorSampler(random, inputs, seed=seed).draw(0, _NOISE_DRAWS)
    return [{name: array[k] for name, array in draws.items()} for k in range(_NOISE_DRAWS)]


@dataclass(frozen=True)
class Propagated:
    """Uncertainty of the outputs: draws with numerical terms, and without; what derivatives make of the same errors."""

    samples: Samples
    budget: Budget
    plain: Samples
    predicted: Samples
    linear: LinearBudget


def _propagate(
    prepared: Prepared, terms: Sequence[NumericalTerm], *, draws: int, seed: int, progress: Progress | None
) -> Propagated:
    chain, nominal, given, inputs = prepared.chain, prepared.nominal, prepared.sources, prepared.layouts
    slopes = tried(chain, linear_slopes(chain, nominal, given, inputs), given, inputs)
    drawn = run_montecarlo(
        with_prediction(chain.vectors, slopes),
        given,
        inputs,
        names=(*OUTPUTS, *(f"{name} by derivatives" for name in OUTPUTS)),
        draws=draws,
        seed=seed,
        progress=progress,
    )
    plain, predicted = separated(drawn)
    budget = make_budget(
        chain.vectors,
        given,
        inputs,
        plain,
        seed=seed,
        terms=terms,
        draws=max(50, draws // 5),
    )
    whole = sum(sum(noise.variance) for noise in prepared.noises)
    noisy = {noise.name for noise in prepared.noises if sum(noise.variance) >= NEGLIGIBLE * whole}
    linear = survey_budget(chain, nominal, slopes, given, inputs, noisy=noisy, components=budget.components)
    return Propagated(add_terms(plain, terms, seed=seed), budget, plain, predicted, linear)


def _numerical_only(
    prepared: Prepared, terms: Sequence[NumericalTerm], *, draws: int, seed: int
) -> tuple[Samples, Budget]:
    """Nothing was measured in a computed flow: numerical terms are all the uncertainty there is."""
    plain = Samples(OUTPUTS, np.tile(prepared.nominal.vector, (draws, 1)))
    budget = make_budget(prepared.chain.vectors, (), {}, plain, seed=seed, terms=terms)
    return add_terms(plain, terms, seed=seed), budget


def _ledger(
    survey: SurveyInput,
    prepared: Prepared,
    samples: Samples | None,
    budget: Budget | None,
    checks: tuple[Check, ...],
    *,
    found: Propagated | None,
    command: str,
) -> Ledger:
    file, nominal = survey.survey, prepared.nominal
    reason = NO_SOURCE if nominal.region.mask.any() else _NO_WAKE
    made = (
        ledger_row(name, nominal.values, samples, budget=budget, sources=prepared.sources, reason=reason)
        for name in ROWS
    )
    rows = tuple(row for row in made if row is not None)
    names = [row.name for row in rows]
    known = [row.name for row in rows if math.isfinite(row.standard_uncertainty)]
    covariance = np.full((len(names), len(names)), np.nan)
    if samples is not None:
        at = [OUTPUTS.index(name) for name in names]
        covariance = samples.covariance[np.ix_(at, at)]
    came_about: tuple[Propagation, ...] = ()
    if found is not None:
        came_about = propagation(
            known,
            found.budget,
            prepared.sources,
            plain=found.plain,
            predicted=found.predicted,
            linear=found.linear,
        )
    return Ledger(
        title=file.title,
        compressible=nominal.reference.compressible,
        rows=rows,
        covariance=covariance,
        plane=tables.plane_table(prepared.chain, nominal),
        raw=survey.as_read,
        survey_text=file.text,
        estimates=_crosschecks(prepared, rows, samples, reason),
        comparisons=comparisons(file, rows, _scales(prepared)),
        budget=budget_lines(budget, known),
        contributions=contributions(budget, known),
        propagation=came_about,
        checks=checks,
        notes=(*prepared.notes, *propagation_notes(came_about)),
        test=file.test.given(),
        reference=tables.reference_scalars(nominal.reference),
        model={} if file.model is None else file.model.given(),
        wake_line=tables.wake_line_table(prepared.line),
        vortices=tables.vortex_table(prepared.vortices.vortices),
        span=tables.span_table(
            span_loading(
                nominal.vorticity,
                nominal.forces.stream_function,
                nominal.profile_integrand,
                nominal.flow.grid,
                nominal.reference,
            ),
            crossflow=prepared.chain.settings.crossflow,
        ),
        calibrations=tables.calibration_tables(survey.calibrations),
        tunnel=tunnel_figures(prepared.chain, nominal, samples),
        companions={name: KeptSurvey(one.survey.text, one.as_read) for name, one in survey.companions.items()},
        inputs=dict(survey.inputs),
        provenance=tables.provenance(command),
    )


def _facts(prepared: Prepared) -> Facts:
    return Facts(
        vortices=prepared.vortices.vortices,
        raw_spacing=max(prepared.chain.gridding.raw_spacing),
        filled=prepared.chain.gridding.filled,
        bias=prepared.chain.frozen.bias.get("induced_drag", math.nan),
        loss_zero_uncertainty=prepared.outer.loss_zero_uncertainty,
        spacings=core_spacings(prepared.chain, prepared.vortices.vortices),
        crossflow=prepared.chain.settings.crossflow,
        probe=probe_range(prepared.chain),
        boundary=prepared.chain.settings.boundary,
    )


def _crosschecks(
    prepared: Prepared, rows: Sequence[Row], samples: Samples | None, no_samples: str
) -> tuple[CrossCheck, ...]:
    nominal = prepared.nominal
    by_name = {row.name: row for row in rows}
    found = []
    for row, method in ESTIMATES:
        if row not in by_name:
            continue
        name = estimate_of(row, method)
        value, expected = nominal.values[name], prepared.expected[name]
        reason = None
        if math.isinf(prepared.chain.settings.bound_line) and (row, method) in _SEES_THE_BOUND_VORTEX:
            expected, reason = math.nan, _NO_BOUND_LINE
        if math.isnan(value):
            reason = prepared.line.reason if method == "wake_line" else prepared.vortices.reason
            reason = reason or "it could not be evaluated on this plane"
        check = cross_check(
            by_name[row],
            method,
            value,
            samples,
            expected=expected,
            expected_uncertainty=tables.EXPECTED_DOUBT * abs(expected),
            reason=reason,
            same_algebra=_same_algebra(method, prepared),
            no_samples=no_samples,
        )
        found.append(check)
    return tuple(found)


def _same_algebra(method: str, prepared: Prepared) -> str | None:
    """Why an estimate is not independent of its row, where it is not."""
    if method == "momentum_area":
        return _SAME_ALGEBRA
    nominal = prepared.nominal
    everywhere = np.all(nominal.flow.static_pressure == nominal.reference.static_pressure)
    if method == "entropy_area" and not prepared.chain.settings.crossflow and everywhere:
        return _ASSUMED_STATIC
    return None


def _scales(prepared: Prepared) -> dict[str, float]:
    """Force, or moment, of a unit coefficient by row."""
    settings = prepared.chain.settings
    force = prepared.nominal.reference.dynamic_pressure * settings.reference_area
    return dict.fromkeys(ROWS, force) | dict.fromkeys(MOMENTS, force * settings.span)
