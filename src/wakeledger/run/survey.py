"""The reduction of one survey, from points to ledger, in its declared order."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np

from wakeledger.confidence.budget import Budget
from wakeledger.confidence.samples import Samples
from wakeledger.confidence.terms import NumericalTerm
from wakeledger.core.errors import InputError, SurveyError
from wakeledger.ledger.inspection import Inspection
from wakeledger.ledger.ledger import KeptSurvey, Ledger
from wakeledger.ledger.propagation import Propagation
from wakeledger.ledger.rows import Check, CrossCheck, Row
from wakeledger.physics.fields.boundary import Boundary
from wakeledger.physics.loading.span import span_loading
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
from wakeledger.run.chain.outputs import ESTIMATES, MOMENTS, OUTPUTS, ROWS, estimate_of
from wakeledger.run.checks import Facts, all_checks
from wakeledger.run.computed import diagnostics
from wakeledger.run.config import Survey
from wakeledger.run.config.tunnel import GIVEN, TunnelInput
from wakeledger.run.gridded import core_spacings, grid_survey
from wakeledger.run.inspection import inspect_plane, inspect_section
from wakeledger.run.inspection.stations import inspect_stations
from wakeledger.run.load import SUPPORT_TARE, SurveyInput, load, refuse_unsupported
from wakeledger.run.near_field import with_closures
from wakeledger.run.prepared import Prepared, prepare
from wakeledger.run.section.survey import reduce_section
from wakeledger.run.stations import reduce_stations
from wakeledger.run.traverse.probe_range import probe_range
from wakeledger.run.tunnel import tunnel_figures
from wakeledger.run.uncertainty.draws import Propagated, numerical_only, propagate, terms_of, with_notes
from wakeledger.run.uncertainty.field_scatter import field_uncertainties, with_uncertainties
from wakeledger.run.uncertainty.method_choice import choice_terms, spread_notes
from wakeledger.run.uncertainty.noise_alone import noise_alone_notes
from wakeledger.run.uncertainty.propagation import propagation, propagation_notes

__all__ = ["SurveyInput", "inspect", "load", "prepare", "reduce"]

Progress = Callable[[int, int], None]

_NO_WAKE = "no wake was found, and what the noise may hide is unknown"
_NO_BOUND_LINE = "without mean_chord, quarter_chord_x or span the bound vortex's effect on it is unknown"
_SEES_THE_BOUND_VORTEX = {
    ("induced_drag", "energy_area"),
    ("induced_drag", "wake_line"),
    ("total_drag", "momentum_area"),
}
_UNBALANCED = "the net circulation is not zero, so the induced drag depends on where the window ends"
#: Outputs that hang on the induced drag.
_INDUCED = ("induced_drag", "induced_drag_free_air", "total_drag", "span_efficiency")
_ASSUMED_STATIC = "at the stream's static pressure it is the algebra of the row: it tests the arithmetic, not the flow"
_SAME_ALGEBRA = "the same algebra as the sum of the rows: it tests the arithmetic, not the flow"


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
    checks = all_checks(prepared.nominal, facts_of(prepared))
    unbalanced = any(check.name == "net_circulation" and check.verdict == "fail" for check in checks)
    reason = NO_SOURCE if prepared.nominal.region.mask.any() else _NO_WAKE

    def known(draws: Samples) -> Samples:
        return made_unknown(draws, _INDUCED, _UNBALANCED) if unbalanced else draws

    def estimates_of(draws: Samples | None) -> tuple[CrossCheck, ...]:
        return _crosschecks(prepared, _rows(prepared, draws, reason=reason), draws, reason)

    def choice(draws: Samples) -> tuple[NumericalTerm, ...]:
        return choice_terms(estimates_of(known(draws)), prepared.nominal.values, OUTPUTS)

    samples, held, budget = None, None, None
    found: Propagated | None = None
    if prepared.sources and prepared.nominal.region.mask.any():
        try:
            terms = terms_of(prepared, survey)
            prepared = with_notes(prepared, terms)
            found = propagate(prepared, terms, draws=count, seed=uncertainty.seed, progress=progress, choice=choice)
            samples, held, budget = known(found.samples), known(found.held), found.budget
        except InputError as error:
            raise error.located(file=survey.survey.path) from error
    elif survey.computed and prepared.nominal.region.mask.any():
        terms = terms_of(prepared, survey)
        prepared = with_notes(prepared, terms)
        samples, held, budget = numerical_only(prepared, terms, draws=count, seed=uncertainty.seed, choice=choice)
        samples, held = known(samples), known(held)
    rows = _rows(prepared, samples, budget=budget, reason=reason)
    ledger = _ledger(
        survey, prepared, rows, samples, budget, checks, estimates=estimates_of(held), found=found, command=command
    )
    return with_closures(ledger) if survey.computed else ledger


def _with_tare(survey: SurveyInput, *, draws: int | None) -> SurveyInput:
    """The survey with what its survey of the support alone came to."""
    support = survey.companions.get(SUPPORT_TARE)
    if support is None or survey.tare is not None:
        return survey
    own, whole = support.survey, survey.survey
    if _surroundings(own) != _surroundings(whole):
        raise SurveyError(
            f"[boundary] of {own.path.name} is not that of {whole.path.name}",
            file=whole.path,
            place="[boundary] support_tare survey",
            remedy="describe the same test section and reflection plane in both",
        )
    row = next(row for row in reduce(support, draws=draws).rows if row.name == "profile_drag")
    if not math.isfinite(row.standard_uncertainty):
        raise SurveyError(
            "the profile drag of the support alone has no known uncertainty",
            file=support.survey.path,
            place="[[uncertainty.source]]",
            remedy="declare the sources of that survey, or give the tare as a value with its uncertainty",
        )
    # At another speed the support's drag goes with the dynamic pressure.
    scale = whole.reference.resolve().dynamic_pressure / own.reference.resolve().dynamic_pressure
    tare = TunnelInput(row.value, row.standard_uncertainty, GIVEN[SUPPORT_TARE])
    return replace(survey, tare=tare.times(scale))


def _surroundings(survey: Survey) -> Boundary | None:
    return None if survey.boundary is None else survey.boundary.surroundings()


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
    if survey.stations:
        return inspect_stations(survey, inspect)
    try:
        return inspect_plane(survey, grid_survey(survey, quick=True))
    except InputError as error:
        raise error.located(file=survey.points.source) from error


def _rows(prepared: Prepared, samples: Samples | None, *, budget: Budget | None = None, reason: str) -> tuple[Row, ...]:
    values, sources = prepared.nominal.values, prepared.sources
    made = (ledger_row(name, values, samples, budget=budget, sources=sources, reason=reason) for name in ROWS)
    return tuple(row for row in made if row is not None)


def _ledger(
    survey: SurveyInput,
    prepared: Prepared,
    rows: tuple[Row, ...],
    samples: Samples | None,
    budget: Budget | None,
    checks: tuple[Check, ...],
    *,
    estimates: tuple[CrossCheck, ...],
    found: Propagated | None,
    command: str,
) -> Ledger:
    file, nominal = survey.survey, prepared.nominal
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
            factor=found.factor,
        )
    return Ledger(
        title=file.title,
        compressible=nominal.reference.compressible,
        rows=rows,
        covariance=covariance,
        plane=with_uncertainties(
            tables.plane_table(prepared.chain, nominal), field_uncertainties(prepared, seed=file.uncertainty.seed)
        ),
        raw=survey.as_read,
        survey_text=file.text,
        estimates=estimates,
        comparisons=comparisons(file, rows, _scales(prepared)),
        budget=budget_lines(budget, known),
        contributions=contributions(budget, known),
        propagation=came_about,
        checks=checks,
        notes=(
            *prepared.notes,
            *noise_alone_notes(file, prepared),
            *spread_notes(estimates, rows),
            *propagation_notes(came_about),
        ),
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
        diagnostics=diagnostics(prepared.chain, nominal),
        companions={name: KeptSurvey(one.survey.text, one.as_read) for name, one in survey.companions.items()},
        inputs=dict(survey.inputs),
        provenance=tables.provenance(command),
    )


def facts_of(prepared: Prepared) -> Facts:
    """What the checks need beyond the reduction of a prepared survey."""
    return Facts(
        vortices=prepared.vortices.vortices,
        raw_spacing=max(prepared.chain.gridding.raw_spacing),
        filled=prepared.chain.gridding.filled,
        bias=prepared.chain.frozen.bias.get("induced_drag", math.nan),
        loss_zero_uncertainty=prepared.outer.loss_zero_uncertainty,
        spacings=core_spacings(prepared.chain, prepared.vortices.vortices),
        crossflow=prepared.chain.settings.crossflow,
        probe=probe_range(prepared.chain),
        noise=None if prepared.chain.settings.computed else prepared.findings,
        boundary=prepared.chain.settings.boundary,
        cut=prepared.cut,
        computed=prepared.chain.settings.computed,
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
