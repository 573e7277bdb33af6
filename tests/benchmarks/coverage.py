"""Do the error bars cover? Many small synthetic surveys with known errors, each reduced as a survey file is.

``python -m tests.benchmarks.coverage --surveys 2000 --jobs 2 --results coverage.jsonl`` runs all cases. Every survey is
appended to the file of results as soon as it is done, and a later run does only what is missing there. ``--write
docs/coverage.md`` puts the tables into that page; ``docs/make_figures.py`` draws its figure from them. One survey takes
a seventh of a second on one core.
"""

from __future__ import annotations

import argparse
import math
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from tests.benchmarks.small_surveys import (
    JUDGED,
    closed_form,
    continued,
    made_ready,
    noise_second_order,
    read,
    single_errors,
    source_text,
    survey_text,
)

from wakeledger.confidence.correlation import correlated_field
from wakeledger.confidence.curvature import curvature_factor
from wakeledger.confidence.linear_budget import LinearBudget, SecondOrder
from wakeledger.confidence.samples import Samples
from wakeledger.confidence.sampling import ErrorSampler
from wakeledger.confidence.terms import NumericalTerm, add_terms
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.outputs import OUTPUTS
from wakeledger.run.chain.reduction import Variation
from wakeledger.run.config import parse_survey
from wakeledger.run.load import SurveyInput
from wakeledger.run.prepared import Prepared, prepare
from wakeledger.run.uncertainty.draws import terms_of
from wakeledger.run.uncertainty.linear import linear_slopes, survey_budget
from wakeledger.run.uncertainty.numerics import MASK, RESOLUTION
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import (
    GaussianLosses,
    RectangularDuct,
    SyntheticWake,
    TunnelWake,
    shed,
    sheet_losses,
    straight_edge,
    wing_wake,
)
from wakeledger.synthetic.recordings import Errors, Positions, Recording, grid_positions, record
from wakeledger.synthetic.wakes import FlowState

Flags = NDArray[np.bool_]

SPEED, DENSITY, SPAN = 40.0, 1.2, 1.2
REFERENCE = Reference(speed=SPEED, density=DENSITY, static_pressure=100_000.0)
#: Two points per core length, the coarsest spacing the design asks for.
CORE, SPACING = 0.06, 0.03
#: The window, m, which the grid is shifted against by up to half a spacing.
WINDOW_Y, WINDOW_Z = (-0.84, 0.84), (-0.53, 0.49)
HALF_Y, HALF_Z = (0.0, 0.84), (-0.42, 0.54)
SECTION = RectangularDuct((-1.0, 1.0), (-0.6, 0.7))
AT = [OUTPUTS.index(name) for name in JUDGED]
#: Draws of the surveys in which Monte Carlo is held against the closed form.
DRAWS = 400
#: Every which survey that is done in, and every which has numerical terms.
CHECKED, EVERY = 32, 8
#: What the share of surveys that hold the truth may be off 95 %.
TOLERANCE = 0.015

_RANDOM = {"u v w": 0.16, "total_pressure": 1.5, "static_pressure": 2.0}


@dataclass(frozen=True)
class Case:
    """What goes wrong in the surveys of one case; standard deviations in SI, by the names of a survey file's targets.

    Attributes
    ----------
    random, per_row, systematic : mapping of str to float
        Declared noise of each point, of each row, of the whole survey.
    lost : float
        Share of the points that are lost, each on its own.
    hole : bool
        Whether a block of 2 x 3 points at the starboard core's edge is lost as well.
    half : {"", "free_air", "closed_walls"}
        Surroundings of a half model on a reflection plane; empty for a whole one in free air.
    factor : float
        True noise of each point over the declared.
    length : float
        Over how many spacings the true noise of neighbours is correlated, though declared for each point alone.
    spacings : (float, float)
        Range of the spacing over `SPACING`.
    """

    random: Mapping[str, float] = field(default_factory=dict)
    per_row: Mapping[str, float] = field(default_factory=dict)
    systematic: Mapping[str, float] = field(default_factory=dict)
    lost: float = 0.0
    hole: bool = False
    half: str = ""
    factor: float = 1.0
    length: float = 0.0
    spacings: tuple[float, float] = (1.0, 1.0)

    def sources(self) -> list[str]:
        """The ``[[uncertainty.source]]`` tables that declare these errors."""
        text = []
        for effect, sizes in (("random", self.random), ("per_row", self.per_row), ("systematic", self.systematic)):
            for names, size in sizes.items():
                targets = [name if "." in name else f"plane.{name}" for name in names.split()]
                text.append(source_text(f"{effect} {names}", targets, effect, size))
        return text


_SYSTEMATIC = {
    "total_pressure": 1.0,
    "static_pressure": 3.0,
    "angle.pitch": 0.004,
    "angle.yaw": 0.003,
    "reference.speed": 0.1,
    "reference.density": 0.003,
}
_BOTH = Case(random=_RANDOM, systematic=_SYSTEMATIC)
#: Cases whose intervals are counted.
COVERED = {
    "random": Case(random=_RANDOM),
    "systematic": Case(systematic=_SYSTEMATIC),
    "mixed": replace(_BOTH, per_row={"total_pressure": 1.0, "w": 0.05}),
    "gappy": replace(_BOTH, lost=0.04, hole=True),
    "half_model": replace(_BOTH, half="free_air"),
    "half_model_walls": replace(_BOTH, half="closed_walls"),
}
#: Surveys whose noise is not what their file says.
MISDECLARED = {
    "twice": Case(random=_RANDOM, factor=2.0),
    "half": Case(random=_RANDOM, factor=0.5),
    "correlated_half_cell": Case(random=_RANDOM, length=0.5),
    "correlated_1_cell": Case(random=_RANDOM, length=1.0),
    "correlated_2_cells": Case(random=_RANDOM, length=2.0),
}
#: Surveys for the numerical terms, one by one.
NUMERICAL = {"numerical": Case(random=_RANDOM, spacings=(0.75, 1.35))}
CASES = COVERED | MISDECLARED | NUMERICAL


@cache
def flow(half: str) -> SyntheticWake | TunnelWake:
    """Rolled-up wake of a wing with a little more lift to port, or that of a half model, far behind it."""
    if not half:
        return wing_wake(
            REFERENCE,
            loading=lambda eta: np.sqrt(np.clip(1 - eta**2, 0, None)) * (1 - 0.1 * eta),
            core=CORE,
            n=120,
        )
    elements = shed("elliptic", straight_edge(SPAN, z=0.04), peak=2.0, core=CORE, n=60)
    losses = sheet_losses(elements, elements, total=4.0, width=0.09)
    own = losses.y > 0
    losses = GaussianLosses(losses.y[own], losses.z[own], losses.strength[own], losses.width[own])
    return TunnelWake(REFERENCE, elements[elements.y > 0], losses, SECTION if half == "closed_walls" else None, "y")


@dataclass(frozen=True)
class Remembered:
    """A flow that keeps the states it has given: those between walls take longer than everything else."""

    wake: TunnelWake
    states: dict[bytes, FlowState] = field(default_factory=dict)

    @property
    def reference(self) -> Reference:
        return self.wake.reference

    def state(self, y: np.ndarray, z: np.ndarray) -> FlowState:
        """The flow at points."""
        key = y.tobytes() + z.tobytes()
        if key not in self.states:
            self.states[key] = self.wake.state(y, z)
        return self.states[key]


@cache
def recorded(half: str) -> SyntheticWake | Remembered:
    """The flow as it is recorded."""
    wake = flow(half)
    return Remembered(wake) if isinstance(wake, TunnelWake) else wake


@dataclass(frozen=True)
class Simulated:
    """One survey: its file and points; these with all errors, without those of each point and row, without any."""

    given: SurveyInput
    noisy: Recording
    still: Recording
    exact: Recording


def survey(case: Case, generator: np.random.Generator) -> Simulated:
    """Simulate one survey of a case."""
    wake = recorded(case.half)
    spacing = SPACING * generator.uniform(*case.spacings)
    at = _places(case, spacing, generator)
    wrong = {name: size * generator.standard_normal() for name, size in case.systematic.items()}
    errors = Errors(
        systematic={name: value for name, value in wrong.items() if "." not in name},
        pitch=wrong.get("angle.pitch", 0.0),
        yaw=wrong.get("angle.yaw", 0.0),
    )
    missing = _missing(case, at, spacing, generator)
    exact = record(wake, at, generator=generator, missing=missing)
    still = record(wake, at, generator=generator, errors=errors, missing=missing) if wrong else exact
    values = {name: value + _noise(case, name, at, spacing, generator) for name, value in still.values.items()}
    boundary = 'kind = "free_air"'
    if case.half == "closed_walls":
        sides = ("y", SECTION.y), ("z", SECTION.z)
        boundary = 'kind = "closed_walls"\n' + "\n".join(
            f'{name} = ["{low!r} m", "{high!r} m"]' for name, (low, high) in sides
        )
    if case.half:
        boundary += '\nreflection = "y"'
    text = survey_text(
        "coverage",
        speed=SPEED + wrong.get("reference.speed", 0.0),
        density=DENSITY + wrong.get("reference.density", 0.0),
        static_pressure=REFERENCE.static_pressure,
        area=0.18,
        span=SPAN,
        boundary=boundary,
        seed=int(generator.integers(2**31)),
        sources=case.sources(),
    )
    noisy = Recording(at, values)
    return Simulated(SurveyInput(parse_survey(text, "coverage.toml"), noisy.points(), {}), noisy, still, exact)


def _places(case: Case, spacing: float, generator: np.random.Generator) -> Positions:
    """A grid shifted at random; on a reflection plane it begins there or half a spacing off, at 16 heights."""
    shift_y, shift_z = generator.uniform(-0.5, 0.5, 2)
    if case.half:
        shift_y, shift_z = 0.5 if shift_y > 0 else 0.0, math.floor(16 * shift_z) / 16
    (from_y, to_y), (from_z, to_z) = (HALF_Y, HALF_Z) if case.half else (WINDOW_Y, WINDOW_Z)
    y = from_y + spacing * (np.arange(round((to_y - from_y) / spacing)) + shift_y)
    z = from_z + spacing * (np.arange(round((to_z - from_z) / spacing)) + shift_z)
    return grid_positions(y, z)


def _noise(case: Case, name: str, at: Positions, spacing: float, generator: np.random.Generator) -> np.ndarray:
    """What differs from point to point and from row to row."""
    sizes = [size for names, size in case.random.items() if name in names.split()]
    total = np.zeros(at.y.size)
    if sizes:
        errors = generator.standard_normal(at.y.size)
        if case.length:
            latents, expand = correlated_field(np.stack([at.y, at.z], axis=1), case.length * spacing)
            errors = expand(generator.standard_normal((1, latents)))[0]
        total += case.factor * sizes[0] * errors
    return total + case.per_row.get(name, 0.0) * generator.standard_normal(int(at.row.max()) + 1)[at.row]


def _missing(case: Case, at: Positions, spacing: float, generator: np.random.Generator) -> Flags:
    missing: Flags = generator.random(at.y.size) < case.lost
    cores = flow(case.half).cores
    if case.hole and cores is not None:
        dy = (at.y - (cores.y[1] + 0.7 * CORE)) / spacing
        dz = (at.z - (cores.z[1] + 0.5 * CORE)) / spacing
        missing |= (np.abs(dy) <= 1.0) & (np.abs(dz) <= 1.5)
    return missing


# -- one survey ---------------------------------------------------------------------------------------------------


@cache
def second_order(case: str) -> dict[str, SecondOrder]:
    """Second order of the noise of a case, of one survey for all of them."""
    if not CASES[case].random:
        return {}
    return noise_second_order(prepare(survey(CASES[case], np.random.default_rng([0, list(CASES).index(case)])).given))


def judge(name: str, seed: int, k: int, *, draws: int = 0, numerical: bool = False) -> dict[str, Any]:
    """Reduce survey k of a case as its file says, and hold it against the truth.

    They settle everything about it. Gives ``error``, value minus truth, ``u`` and ``half_width`` of the 95 % interval,
    measured sources alone, over `JUDGED`, N; ``plain_u`` and ``plain_half_width``, those as draws about measured values
    give them, where the curvature is worked out; ``bias``, the noise bias of the induced drag that was subtracted, and
    ``held`` and ``anew``, that which there is in the survey's own wake region, and with a region found in the noise;
    ``size`` and ``shared``, whether the file's noise was called wrong or shared by neighbours; ``mc_u`` and
    ``mc_half_width`` of so many Monte Carlo draws, where there are any; ``half_width_all`` with numerical terms, where
    they are wanted; those of the case ``numerical`` apart.
    """
    case = CASES[name]
    made = survey(case, np.random.default_rng([seed, list(CASES).index(name), k]))
    prepared = made_ready(made.given)
    found: dict[str, Any] = {"case": name, "seed": seed, "k": k}
    said = " ".join((*prepared.notes, *prepared.findings.disagreements))
    found["size"] = "is not the declared one" in said
    found["shared"] = "Neighbouring points share their noise" in said
    if name in MISDECLARED:
        return found
    truth = flow(case.half).truth.rows()
    found["error"] = [prepared.nominal.values[row] - truth[row] for row in JUDGED]
    if name in NUMERICAL:
        return found | _numerical_terms(prepared, made, truth)
    budget = closed_form(prepared, second_order(name))
    factor = np.ones(len(OUTPUTS))
    if not case.random:
        budget = with_single_errors(prepared, budget)
        factor = curvature_factor(np.diag(budget.total), budget.second_order**2, budget.inflation)
        found |= {"plain_u": budget.standard_uncertainty[AT].tolist()}
        found |= {"plain_half_width": (budget.coverage_factor() * budget.standard_uncertainty)[AT].tolist()}
    u = factor * budget.standard_uncertainty
    found |= {"u": u[AT].tolist(), "half_width": (budget.coverage_factor() * u)[AT].tolist()}
    if case.random:
        found |= _paired(prepared, made)
    if draws:
        drawn = ErrorSampler(prepared.sources, prepared.layouts, seed=made.given.survey.uncertainty.seed)
        values = prepared.chain.vectors(drawn.draw(0, draws), estimates=False)[:, AT]
        samples = Samples(JUDGED, values)
        found["mc_u"] = samples.standard_uncertainty.tolist()
        found["mc_half_width"] = samples.interval().half_width.tolist()
    if numerical:
        terms = terms_of(prepared, made.given)
        found["half_width_all"] = _with_terms(budget, factor, terms, seed=k).tolist()
    return found


def with_single_errors(prepared: Prepared, budget: LinearBudget) -> LinearBudget:
    """The budget of a survey with what its single errors do alone and in pairs, as the program works it out.

    Beside noise none of it reaches a thousandth of the variance of a row.
    """
    chain, nominal, given, layouts = prepared.chain, prepared.nominal, prepared.sources, prepared.layouts
    slopes = linear_slopes(chain, nominal, given, layouts, estimates=False)
    components, pairs = single_errors(prepared, budget)
    return survey_budget(chain, nominal, slopes, given, layouts, noisy=(), components=components, pairs=pairs)


def _with_terms(budget: LinearBudget, factor: np.ndarray, terms: Sequence[NumericalTerm], *, seed: int) -> np.ndarray:
    """Half-width with the numerical terms, which are added to draws of what the closed form says."""
    generator = np.random.default_rng([seed, 7])
    covariance = (budget.total * np.outer(factor, factor))[np.ix_(AT, AT)]
    values = generator.multivariate_normal(np.zeros(len(AT)), covariance, size=DRAWS, method="eigh")
    own = [replace(term, standard_uncertainty=term.standard_uncertainty[AT]) for term in terms]
    return add_terms(Samples(JUDGED, values), own, seed=seed).interval().half_width


def _paired(prepared: Prepared, made: Simulated) -> dict[str, float]:
    """Noise bias that there is: mean of the survey and of that with all noise turned round, less that without."""
    mirrored = {name: 2 * made.still.values[name] - made.noisy.values[name] for name in made.noisy.values}
    recordings = (made.noisy, replace(made.noisy, values=mirrored), made.still)
    unbiased = replace(prepared.chain, frozen=replace(prepared.chain.frozen, bias={}))
    found = {"bias": prepared.chain.frozen.bias.get("induced_drag", 0.0)}
    for key, region in (("held", prepared.chain.frozen.region), ("anew", None)):
        one, other, still = (_rows(unbiased, recording, region)["induced_drag"] for recording in recordings)
        found[key] = (one + other) / 2 - still
    return found


def _rows(chain: Chain, recording: Recording, region: Flags | None) -> Mapping[str, float]:
    trial = replace(chain, points=recording.points())
    return trial.reduce(vary=Variation(mask=region), estimates=False).values


def _numerical_terms(prepared: Prepared, made: Simulated, truth: Mapping[str, float]) -> dict[str, Any]:
    """What region and spacing cost on exact data, and what the noisy survey says that they may."""
    terms = {term.name: np.abs(term.standard_uncertainty[AT]) for term in terms_of(prepared, made.given)}
    unbiased = replace(prepared.chain, frozen=replace(prepared.chain.frozen, bias={}))
    wide = prepared.chain.reduce(vary=Variation(grow_factor=2.0), estimates=False).region.mask
    own = _rows(unbiased, made.exact, prepared.chain.frozen.region)
    whole = _rows(unbiased, made.exact, wide)
    return {
        "mask_error": [own[row] - whole[row] for row in JUDGED],
        # A rectangular doubt ends at √3 u, and holds 95 % within 0.95 √3 u.
        "mask_half_width": (0.95 * math.sqrt(3) * terms[MASK]).tolist(),
        "resolution_error": [whole[row] - truth[row] for row in JUDGED],
        "resolution_half_width": (1.96 * terms[RESOLUTION]).tolist(),
        "points_per_core": CORE / prepared.nominal.flow.grid.dy,
    }


# -- many surveys -------------------------------------------------------------------------------------------------


def tasks(
    case: str, surveys: int, *, seed: int = 1, checked: int = CHECKED, every: int = EVERY
) -> list[tuple[str, int, int, int, bool]]:
    """What is to be done for a case; survey k is the same whatever their number is and whoever does it."""
    found = []
    for k in range(surveys):
        draws = DRAWS if case in COVERED and k % checked == 1 else 0
        found.append((case, seed, k, draws, case in COVERED and k % every == 0))
    return found


def done(task: tuple[str, int, int, int, bool]) -> dict[str, Any]:
    """One survey of a study."""
    case, seed, k, draws, numerical = task
    return judge(case, seed, k, draws=draws, numerical=numerical)


def main(arguments: Sequence[str] | None = None) -> None:
    """Run what is missing in the study, and print or write its tables."""
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks.coverage", description=__doc__)
    parser.add_argument("--surveys", type=int, default=100, help="surveys per case (default 100)")
    parser.add_argument("--case", action="append", choices=list(CASES), help="a case; all if not given")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--jobs", type=int, default=1, help="processes (default 1)")
    parser.add_argument("--results", type=Path, required=True, help="file of results, which is continued")
    parser.add_argument("--write", type=Path, help="page whose tables are replaced")
    options = parser.parse_args(arguments)
    os.environ.setdefault("OMP_NUM_THREADS", "1")
    known = {(case, one["k"]) for case, own in read(options.results, seed=options.seed).items() for one in own}
    wanted = [task for case in options.case or CASES for task in tasks(case, options.surveys, seed=options.seed)]
    wanted = [task for task in wanted if (task[0], task[2]) not in known]
    continued(options.results, done, wanted, jobs=options.jobs)
    found = read(options.results, seed=options.seed)
    studies = {case: found[case] for case in options.case or CASES if case in found}
    # The tables know the cases from here.
    from tests.benchmarks.coverage_tables import TABLES, written

    for table in TABLES.values():
        print(table(studies), end="\n\n")
    if options.write:
        options.write.write_text(written(options.write.read_text(encoding="utf-8"), studies), encoding="utf-8")


if __name__ == "__main__":
    main()
