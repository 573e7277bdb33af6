"""The reduction of a section traverse, from points to ledger: `[section]` in the survey file."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import NDArray

from wakeledger.confidence.budget import Budget, make_budget
from wakeledger.confidence.montecarlo import run as run_montecarlo
from wakeledger.confidence.samples import Samples
from wakeledger.confidence.sampling import ErrorSampler
from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.confidence.terms import NumericalTerm, add_terms
from wakeledger.core.errors import InputError, SurveyError
from wakeledger.core.grid import Array
from wakeledger.core.traverse import make_traverse
from wakeledger.intake.gridding import check_duplicates
from wakeledger.intake.gridding.line import Line, make_line
from wakeledger.intake.probe.traverse import correction_input
from wakeledger.ledger.ledger import Ledger
from wakeledger.ledger.propagation import Propagation
from wakeledger.ledger.rows import CrossCheck, Row
from wakeledger.physics.fields.traverse_window import TAIL
from wakeledger.physics.methods.section_drag import SectionDrag, section_drag
from wakeledger.run import tables
from wakeledger.run.assembly import (
    NO_SOURCE,
    budget_lines,
    comparisons,
    contributions,
    cross_check,
    ledger_row,
    require_rows,
)
from wakeledger.run.chain.outputs import estimate_of
from wakeledger.run.config.tunnel import section_height
from wakeledger.run.inputs import layouts, sources
from wakeledger.run.load import SurveyInput, refuse_unsupported
from wakeledger.run.section.chain import (
    METHODS,
    OUTPUTS,
    ROW,
    SectionChain,
    SectionReduction,
    SectionSettings,
    SectionVariation,
)
from wakeledger.run.section.checks import SectionFacts, section_checks
from wakeledger.run.section.noise import section_findings
from wakeledger.run.section.notes import raw_notes, section_notes
from wakeledger.run.section.state import SectionState, check_section_state
from wakeledger.run.section.terms import LEVEL, section_terms
from wakeledger.run.traverse.rake import prepare_raw
from wakeledger.run.traverse.traverse import SHEAR, RawSurvey, corrected_points
from wakeledger.run.uncertainty.channel_noise import NoiseFindings
from wakeledger.run.uncertainty.method_choice import choice_terms, spread_notes
from wakeledger.run.uncertainty.propagation import propagation
from wakeledger.stream.reference import Reference

if TYPE_CHECKING:
    import xarray as xr

Progress = Callable[[int, int], None]

#: Draws that tell the effect of a choice from that of noise.
_NOISE_DRAWS = 16
#: The outer flow's total pressure is taken as drifting where sloping lines leave less than this share of its scatter.
_DRIFT = 0.8
#: Fewer places than this beside the wake do not show its noise.
_FEWEST_OUTER = 8
_BY_DRAWS = "a line traverse is propagated by Monte Carlo alone"
_NO_DRAWS = "no Monte Carlo draws were made"
#: Differences smaller than this share of the drag are rounding.
_ROUNDING = 1e-6
_ONE_ALGEBRA = (
    "at the stream's static pressure Jones, Betz and the momentum balance are one algebra: it tests the arithmetic, not"
    " the flow"
)
_AS_BETZ = "with the outer flow's part expected of it, it is Betz's algebra point by point"


@dataclass(frozen=True)
class PreparedSection:
    """A section survey with its nominal reduction, before any error is added.

    Attributes
    ----------
    chain : SectionChain
        Ready to be reduced.
    nominal : SectionReduction
        Its reduction.
    state : SectionState
        What the points say.
    usable : ndarray of bool, shape (n,)
        Points that are used.
    drag : SectionDrag
        The three methods on the nominal traverse, with what is expected of each.
    sources, layouts
        Sources of uncertainty and the inputs they act on.
    noise : tuple of mapping
        A few draws of the errors that differ from point to point.
    findings : NoiseFindings
        Declared noise beside what the data show.
    terms : tuple of NumericalTerm
        What the numerical choices are worth.
    notes : tuple of str
        Sentences about the choices made.
    """

    chain: SectionChain
    nominal: SectionReduction
    state: SectionState
    usable: NDArray[np.bool_]
    drag: SectionDrag
    sources: tuple[Source, ...]
    layouts: Mapping[str, InputLayout]
    noise: tuple[Mapping[str, Array], ...]
    findings: NoiseFindings
    terms: tuple[NumericalTerm, ...]
    notes: tuple[str, ...]

    def vectors(self, errors: dict[str, Array]) -> Array:
        """Outputs of many draws in the nominal window, which the data's own noise has had its part in choosing."""
        return self.chain.vectors(errors, vary=SectionVariation(window=self.nominal.window))

    @property
    def facts(self) -> SectionFacts:
        """What the checks need."""
        level = next(term for term in self.terms if term.name == LEVEL)
        effect = math.sqrt(3.0) * abs(float(level.standard_uncertainty[0])) / abs(self.nominal.values[ROW])
        return SectionFacts(self.chain.settings, self.chain.line.filled, effect, self.findings)


def reduce_section(
    survey: SurveyInput, *, draws: int | None = None, progress: Progress | None = None, command: str = ""
) -> Ledger:
    """Reduce a section survey to its ledger.

    Parameters
    ----------
    survey : SurveyInput
        With a ``[section]``.
    draws : int, optional
        Monte Carlo draws instead of the survey file's.
    progress : callable, optional
        Called with the draws done and their number.
    command : str
        The command line, for the archive.

    Returns
    -------
    Ledger
        With the row ``section_drag``; its plane is the traverse (`wakeledger.core.traverse.make_traverse`).

    Raises
    ------
    InputError
        If the survey or its data are wrong.
    """
    require_rows(survey.survey, (ROW,))
    prepared = prepare_section(survey)
    uncertainty = survey.survey.uncertainty
    count = uncertainty.draws if draws is None else draws
    found: _Propagated | None = None
    if prepared.sources and count >= 2:
        try:
            found = _propagate(prepared, draws=count, seed=uncertainty.seed, progress=progress)
        except InputError as error:
            raise error.located(file=survey.survey.path) from error
    return _ledger(survey, prepared, found, command=command)


def prepare_section(survey: SurveyInput) -> PreparedSection:
    """Everything up to the Monte Carlo: places, window, expected differences and numerical terms.

    Parameters
    ----------
    survey : SurveyInput
        With a ``[section]``.

    Returns
    -------
    PreparedSection

    Raises
    ------
    InputError
        If the survey or its data are wrong.
    """
    refuse_unsupported(survey.survey)
    try:
        return _prepare(survey)
    except SurveyError as error:
        raise error.located(file=survey.survey.path) from error
    except InputError as error:
        raise error.located(file=survey.points.source) from error


def section_settings(survey: SurveyInput, reference: Reference) -> SectionSettings:
    """The chain's settings from the survey file."""
    file = survey.survey
    assert file.section is not None
    along: Literal["y", "z"] = "y" if file.plane.axes.file_axis("y") in file.plane.columns else "z"
    given = {} if file.boundary is None else file.boundary.chain_inputs()
    solid = given.get("boundary.solid_blockage")
    return SectionSettings(
        reference=file.reference.given(),
        compressible=reference.compressible,
        primary="total_pressure" if file.plane.primary == "hole_pressures" else file.plane.primary,
        edge_static=file.section.edge_static,
        along=along,
        chord=file.section.chord,
        level=file.wake.level if file.wake.level is not None else SectionSettings.level,
        grow=file.wake.grow or 0.0,
        include=_stretches(file.wake.include, along),
        height=section_height(file.boundary, along),
        solid_blockage=0.0 if solid is None else solid.value,
    )


def _stretches(shapes: Sequence[Array], along: str) -> tuple[tuple[float, float], ...]:
    """What boxes and polygons cover along the traverse, m."""
    column = "yz".index(along)
    return tuple((float(shape[:, column].min()), float(shape[:, column].max())) for shape in shapes)


def _of_readings(raw: RawSurvey) -> tuple[Source, ...]:
    """Sources of raw readings; their displacement in shear is not corrected along a line."""
    return tuple(source for source in raw.sources if source.applies_to != (correction_input(SHEAR),))


def _prepare(survey: SurveyInput) -> PreparedSection:
    file, points = survey.survey, survey.points
    reference = file.reference.resolve()
    settings = section_settings(survey, reference)
    raw = prepare_raw(survey, reference) if file.plane.primary == "hole_pressures" else None
    check_duplicates(points if raw is None else corrected_points(points, raw.traverse, reference))
    position = getattr(points, settings.along)
    empty = SectionChain(points, None, settings, traverse=None if raw is None else raw.traverse)  # type: ignore[arg-type]
    state = empty.state(reference)
    check_section_state(state, points)
    usable = state.usable
    for start, stop in _stretches(file.wake.exclude, settings.along):
        usable &= (position < start) | (position > stop)

    def line(chosen: NDArray[np.bool_]) -> Line:
        return make_line(position, chosen, impossible=state.impossible, row=points.row)

    chain = replace(empty, line=line(usable))
    nominal = chain.reduce()
    if state.total_pressure is not None and nominal.window.noise > TAIL * nominal.window.depth:
        sloping = replace(chain, drifting=True)
        other = sloping.reduce()
        if other.window.noise < _DRIFT * nominal.window.noise:
            chain, nominal = sloping, other
    drag = section_drag(
        nominal.coordinate,
        nominal.total_pressure,
        nominal.static_pressure,
        nominal.reference,
        total_temperature=nominal.total_temperature,
        window=(nominal.window.lower, nominal.window.upper),
    )
    declared = sources(file, points, reference) + (() if raw is None else _of_readings(raw))
    names = sorted({name for source in declared for name in source.applies_to})
    inputs = layouts(file, points, chain.line, names)
    noise = _noise_draws(declared, inputs, seed=file.uncertainty.seed)
    share = _shown_share(chain, nominal, noise)
    terms = section_terms(chain, nominal, line=line, usable=usable, noise=noise, noise_share=share)
    notes = section_notes(survey, chain, nominal, drag, state, usable)
    findings = section_findings(chain, nominal, usable, declared, inputs, seed=file.uncertainty.seed)
    notes += findings.notes
    if raw is not None:
        notes += raw_notes(raw, chain, nominal)
    return PreparedSection(chain, nominal, state, usable, drag, declared, inputs, noise, findings, terms, tuple(notes))


def _noise_draws(
    declared: Sequence[Source], inputs: Mapping[str, InputLayout], *, seed: int
) -> tuple[Mapping[str, Array], ...]:
    """A few draws of the errors that differ from point to point."""
    random = [source for source in declared if source.effect == "random"]
    if not random:
        return ()
    used = {name: inputs[name] for source in random for name in source.applies_to}
    drawn = ErrorSampler(random, used, seed=seed).draw(0, _NOISE_DRAWS)
    return tuple({name: array[k] for name, array in drawn.items()} for k in range(_NOISE_DRAWS))


def _shown_share(chain: SectionChain, nominal: SectionReduction, noise: Sequence[Mapping[str, Array]]) -> float:
    """Which share of the declared variance the scatter beside the wake shows, 1 where either is unknown."""
    by_speed = chain.settings.primary == "velocity" and chain.settings.edge_static != "measured"
    outer = ~nominal.inside & ~chain.line.filled
    if not noise or np.count_nonzero(outer) < _FEWEST_OUTER:
        return 1.0
    held = SectionVariation(window=nominal.window)
    squares = []
    for errors in noise:
        drawn = chain.reduce(errors, vary=held)
        change = drawn.speed - nominal.speed if by_speed else drawn.loss - nominal.loss
        squares.append(np.mean(np.square(change[outer])))
    declared = math.sqrt(float(np.mean(squares)))
    ratio = nominal.window.noise / declared if declared > 0 else math.nan
    return 1.0 if math.isnan(ratio) else min(ratio**2, 1.0)


@dataclass(frozen=True)
class _Propagated:
    """Draws with numerical terms, those that the cross-checks are made with, those without any, and the budget."""

    samples: Samples
    held: Samples
    plain: Samples
    budget: Budget


def _propagate(prepared: PreparedSection, *, draws: int, seed: int, progress: Progress | None) -> _Propagated:
    plain = run_montecarlo(
        prepared.vectors,
        prepared.sources,
        prepared.layouts,
        names=OUTPUTS,
        draws=draws,
        seed=seed,
        workers=1,
        progress=progress,
    )
    held = add_terms(plain, prepared.terms, seed=seed)
    checks = _crosschecks(prepared, _row(prepared, held), held)
    terms = (*prepared.terms, *choice_terms(checks, prepared.nominal.values, OUTPUTS))
    budget = make_budget(
        prepared.vectors,
        prepared.sources,
        prepared.layouts,
        plain,
        seed=seed,
        terms=terms,
        draws=max(50, draws // 5),
        workers=1,
    )
    return _Propagated(add_terms(plain, terms, seed=seed), held, plain, budget)


def _why(prepared: PreparedSection) -> str:
    """Why there are no draws, where there are none."""
    return _NO_DRAWS if prepared.sources else NO_SOURCE


def _row(prepared: PreparedSection, samples: Samples | None, *, budget: Budget | None = None) -> Row:
    row = ledger_row(
        ROW, prepared.nominal.values, samples, budget=budget, sources=prepared.sources, reason=_why(prepared)
    )
    assert row is not None
    return row


def _ledger(survey: SurveyInput, prepared: PreparedSection, found: _Propagated | None, *, command: str) -> Ledger:
    file, nominal = survey.survey, prepared.nominal
    settings = prepared.chain.settings
    budget = None if found is None else found.budget
    row = _row(prepared, None if found is None else found.samples, budget=budget)
    estimates = _crosschecks(prepared, row, None if found is None else found.held)
    variance = math.nan if found is None else float(found.samples.covariance[0, 0])
    model = {} if file.model is None else file.model.given()
    came_about: tuple[Propagation, ...] = ()
    if found is not None and math.isfinite(row.standard_uncertainty):
        came_about = propagation((ROW,), found.budget, prepared.sources, plain=found.plain, reason=_BY_DRAWS)
    return Ledger(
        title=file.title,
        compressible=nominal.reference.compressible,
        rows=(row,),
        covariance=np.array([[variance]]),
        plane=_traverse(prepared, survey.survey.plane.station),
        raw=survey.as_read,
        survey_text=file.text,
        estimates=estimates,
        comparisons=comparisons(file, (row,), {ROW: nominal.reference.dynamic_pressure * settings.chord}),
        budget=budget_lines(budget, (ROW,)),
        contributions=contributions(budget, (ROW,)),
        propagation=came_about,
        checks=section_checks(nominal, prepared.facts),
        notes=(*prepared.notes, *spread_notes(estimates, (row,))),
        test=file.test.given(),
        reference=tables.reference_scalars(nominal.reference),
        model={**model, "chord": settings.chord},
        inputs=dict(survey.inputs),
        provenance=tables.provenance(command),
    )


def _crosschecks(prepared: PreparedSection, row: Row, samples: Samples | None) -> tuple[CrossCheck, ...]:
    """Betz and the momentum balance against Jones.

    What is expected of them is of first order in the loss; the rest grows as the loss over what is left of the total
    pressure.
    """
    nominal, expected = prepared.nominal, prepared.drag.expected_difference
    reference = nominal.reference
    depth = float(nominal.loss[nominal.inside].max()) / (reference.total_pressure - reference.static_pressure)
    share = max(tables.EXPECTED_DOUBT, depth / max(1.0 - depth, 0.05))
    doubt = math.hypot(share * expected["betz"], _ROUNDING * row.value)
    same = {"betz": None, "momentum": _AS_BETZ}
    if prepared.chain.settings.edge_static == "stream":
        same = dict.fromkeys(METHODS, _ONE_ALGEBRA)
    return tuple(
        cross_check(
            row,
            method,
            nominal.values[estimate_of(ROW, method)],
            samples,
            expected=expected[method],
            expected_uncertainty=doubt,
            same_algebra=same[method],
            no_samples=_why(prepared),
        )
        for method in METHODS
    )


def _traverse(prepared: PreparedSection, station: float) -> xr.Dataset:
    """The traverse as it was integrated, with the wake's window and flags."""
    nominal = prepared.nominal
    profiles = {
        "u": nominal.speed,
        "total_pressure": nominal.total_pressure,
        "static_pressure": nominal.static_pressure,
        "total_pressure_loss": nominal.loss,
        "wake_mask": nominal.inside.astype(np.int8),
        "flag": prepared.chain.line.flag,
    }
    wake = (nominal.window.lower, nominal.window.upper)
    return make_traverse(prepared.chain.settings.along, nominal.coordinate, profiles, wake=wake, station=station)
