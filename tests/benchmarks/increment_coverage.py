"""Do the error bars of increments cover? Many pairs of small synthetic surveys whose shared errors really are shared.

``python -m tests.benchmarks.increment_coverage --pairs 1000 --results increments.jsonl`` runs all cases. Every pair is
appended to the file of results as soon as it is done, and a later run does only what is missing there. ``--write
docs/increments.md`` puts the table into that page. One pair takes a third of a second on one core: what noise does is
found in closed form, what each error of a whole survey does as the program finds it for its archive.
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
from tests.benchmarks.small_surveys import (
    JUDGED,
    column,
    continued,
    made_ready,
    markdown_table,
    noise_second_order,
    read,
    share_text,
    single_errors,
    source_text,
    survey_text,
    with_block,
)

from wakeledger.confidence.components import Component, scatter, term_components
from wakeledger.confidence.linear_budget import SecondOrder, linear_budget
from wakeledger.confidence.point_errors import PointErrors, point_errors, predicted
from wakeledger.confidence.samples import Samples
from wakeledger.confidence.sampling import ErrorSampler
from wakeledger.ledger.cancellation import subtract
from wakeledger.ledger.contributions import Contributions
from wakeledger.run.chain.outputs import OUTPUTS, coefficient_of
from wakeledger.run.config import parse_survey
from wakeledger.run.load import SurveyInput
from wakeledger.run.prepared import Prepared, prepare
from wakeledger.run.uncertainty.draws import terms_of
from wakeledger.run.uncertainty.linear import linear_slopes
from wakeledger.run.uncertainty.noise import Noise
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import SyntheticWake, wing_wake
from wakeledger.synthetic.recordings import Errors, grid_positions, record

DENSITY, PRESSURE, AREA, SPAN = 1.2, 100_000.0, 0.18, 1.2
CORE, SPACING, COUNT_Y, COUNT_Z = 0.05, 0.025, 68, 36
#: Draws of the surveys in which Monte Carlo is held against the closed form.
DRAWS = 400
#: Every which pair that is done in, and every which has numerical terms.
CHECKED, EVERY = 32, 64
AT = np.array([[OUTPUTS.index(name) for name in JUDGED], [OUTPUTS.index(coefficient_of(name)) for name in JUDGED]])


_SYSTEMATIC = {
    "plane.total_pressure": 1.0,
    "plane.static_pressure": 4.0,
    "angle.pitch": 0.004,
    "angle.yaw": 0.004,
    "reference.speed": 0.2,
    "reference.density": 0.006,
}
#: Long samples, so that the systematic errors rule.
_QUIET = {"u": 0.003, "v": 0.003, "w": 0.003, "total_pressure": 0.04, "static_pressure": 0.04}
_NOISY = {"u": 0.16, "v": 0.16, "w": 0.16, "total_pressure": 1.5, "static_pressure": 2.0}
#: Means of samples, on a holder that sags and twists from place to place.
_SAMPLED = {"u": 0.05, "v": 0.05, "w": 0.05, "total_pressure": 0.5, "static_pressure": 0.5}
_TABLE = {"v": 0.2, "w": 0.2, "total_pressure": 3.0}


@dataclass(frozen=True)
class Case:
    """What goes wrong in the pairs of one case; standard deviations in SI.

    Attributes
    ----------
    random : mapping of str to float
        Noise of each point of each survey.
    shared, own : mapping of str to float
        Errors that a pair has in common, and that each survey has of its own.
    speeds : (float, float)
        Speed of the stream in A and in B, m/s.
    rectangular : bool
        Whether the shared errors are distributed evenly instead of normally.
    points : mapping of str to float
        Errors of each point that a pair has in common.
    """

    random: Mapping[str, float]
    shared: Mapping[str, float] = field(default_factory=dict)
    own: Mapping[str, float] = field(default_factory=dict)
    speeds: tuple[float, float] = (40.0, 40.0)
    rectangular: bool = False
    points: Mapping[str, float] = field(default_factory=dict)


_OWN = {"plane.static_pressure": 2.0, "reference.density": 0.002}
_ALIKE = {name: size for name, size in _SYSTEMATIC.items() if name not in _OWN}
CASES = {
    "systematic shared": Case(_QUIET, shared=_SYSTEMATIC),
    "mixed": Case(_NOISY, shared=_SYSTEMATIC),
    "another speed": Case(_NOISY, shared=_SYSTEMATIC, speeds=(40.0, 46.0), rectangular=True),
    "partly shared": Case(_NOISY, shared=_ALIKE, own=_OWN),
    "nothing shared": Case(_NOISY, own=_SYSTEMATIC),
    "points shared": Case(_SAMPLED, shared=_ALIKE, points=_TABLE),
}


@cache
def wake(side: int, speed: float) -> SyntheticWake:
    """Wake of configuration A, and of B: its lift better balanced, 3 % more of it, and 4 % more loss."""
    tilt, peak, loss = ((0.10, 2.0, 3.0), (0.06, 2.06, 3.12))[side]
    part = speed / 40.0
    return wing_wake(
        Reference(speed=speed, density=DENSITY, static_pressure=PRESSURE),
        loading=lambda eta: np.sqrt(np.clip(1 - eta**2, 0, None)) * (1 - tilt * eta),
        peak=peak * part,
        loss=loss * part**2,
        core_loss=0.1 * part**2,
        core=CORE,
        n=120,
    )


@cache
def truth(side: int, speed: float) -> np.ndarray:
    """Rows of `JUDGED` and their coefficients, shape (2, rows)."""
    rows = wake(side, speed).truth.rows()
    forces = np.array([rows[name] for name in JUDGED])
    return np.stack([forces, forces / (0.5 * DENSITY * speed**2 * AREA)])


def _sources(case: Case) -> list[str]:
    shape = "rectangular" if case.rectangular else "normal"
    return [
        *(source_text(f"noise {name}", [f"plane.{name}"], "random", size) for name, size in case.random.items()),
        *(
            source_text(f"shared {name}", [name], "systematic", size, shape=shape, shared_id=f"rig {name}")
            for name, size in case.shared.items()
        ),
        *(
            source_text(f"table {name}", [f"plane.{name}"], "random", size, shared_id=f"table {name}")
            for name, size in case.points.items()
        ),
        *(source_text(f"own {name}", [name], "systematic", size) for name, size in case.own.items()),
    ]


def pair(case: Case, generator: np.random.Generator) -> tuple[SurveyInput, SurveyInput]:
    """Surveys of A and B on one grid; the shared errors take one value for both, all others one for each."""
    draw = (lambda: generator.uniform(-1, 1) * math.sqrt(3)) if case.rectangular else generator.standard_normal
    common = {name: size * draw() for name, size in case.shared.items()}
    shift = generator.uniform(-0.5, 0.5, 2) * SPACING
    table = {name: size * generator.standard_normal(COUNT_Y * COUNT_Z) for name, size in case.points.items()}
    found = []
    for side, speed in enumerate(case.speeds):
        wrong = dict(common)
        for name, size in case.own.items():
            wrong[name] = wrong.get(name, 0.0) + size * generator.standard_normal()
        found.append(_survey(case, side, speed, wrong, table, shift, generator))
    return found[0], found[1]


def _survey(
    case: Case,
    side: int,
    speed: float,
    wrong: Mapping[str, float],
    table: Mapping[str, np.ndarray],
    shift: np.ndarray,
    generator: np.random.Generator,
) -> SurveyInput:
    y = SPACING * (np.arange(COUNT_Y) - COUNT_Y / 2) + shift[0]
    z = SPACING * (np.arange(COUNT_Z) - 0.52 * COUNT_Z) + shift[1]
    errors = Errors(
        random=case.random,
        systematic={name.removeprefix("plane."): value for name, value in wrong.items() if name.startswith("plane.")},
        pitch=wrong.get("angle.pitch", 0.0),
        yaw=wrong.get("angle.yaw", 0.0),
    )
    recording = record(wake(side, speed), grid_positions(y, z), generator=generator, errors=errors)
    values = {name: value + table.get(name, 0.0) for name, value in recording.values.items()}
    text = survey_text(
        f"pair, {'AB'[side]}",
        speed=speed + wrong.get("reference.speed", 0.0),
        density=DENSITY + wrong.get("reference.density", 0.0),
        static_pressure=PRESSURE,
        area=AREA,
        span=SPAN,
        seed=int(generator.integers(2**31)),
        sources=_sources(case),
    )
    return SurveyInput(parse_survey(text, "pair.toml"), replace(recording, values=values).points(), {})


@cache
def second_order(case: str, side: int) -> dict[str, SecondOrder]:
    """Second order of the noise of a case in A or in B, of one survey for all of them."""
    given = pair(CASES[case], np.random.default_rng([0, list(CASES).index(case)]))[side]
    return noise_second_order(prepare(given))


@cache
def noise_memory(case: str, side: int) -> dict[str, tuple[Noise, ...]]:
    """What the noise of a case does to the crossflow, in A or in B: the declared one is the same in all surveys."""
    return {}


def _kept(components: Sequence[Component], covariance: np.ndarray, points: Sequence[PointErrors] = ()) -> Contributions:
    """Contributions over `JUDGED` from figures over `OUTPUTS`."""
    parts = tuple(replace(one, linear=one.linear[AT], curved=one.curved[AT]) for one in components)
    left = np.stack([covariance[np.ix_(at, at)] for at in AT])
    of_points = tuple(replace(one, effects=one.effects[AT]) for one in points)
    return Contributions(JUDGED, parts, left, np.full(AT.shape, math.inf), of_points)


def contributions(prepared: Prepared, second: Mapping[str, SecondOrder], *, seed: int) -> Contributions:
    """What each error does to the rows of one survey, in closed form."""
    sampler = ErrorSampler(prepared.sources, prepared.layouts, seed=seed)
    slopes = linear_slopes(prepared.chain, prepared.nominal, prepared.sources, prepared.layouts, estimates=False)
    budget = linear_budget(slopes, prepared.sources, prepared.layouts, names=OUTPUTS, second=second)
    found, pairs = single_errors(prepared, budget)
    left = np.zeros((len(OUTPUTS), len(OUTPUTS)))
    points: list[PointErrors] = []
    for one, covariance, order in zip(sampler.by_source, budget.covariance, budget.second, strict=True):
        if one.source.effect == "systematic":
            continue
        own = point_errors(one, slopes, prepared.layouts)
        points += own
        left += np.diag(order.variance) + (0 if own else covariance)
    # What pairs of errors do is in nobody's share: the archive has it in the scatter of the draws.
    left += pairs.covariance
    return _kept(found, left, points)


def _drawn(prepared: Prepared, *, draws: int, seed: int) -> Contributions:
    """The same with what is left beside single errors from draws, as the program finds it."""
    slopes = linear_slopes(prepared.chain, prepared.nominal, prepared.sources, prepared.layouts, estimates=False)
    budget = linear_budget(slopes, prepared.sources, prepared.layouts, names=OUTPUTS)
    found, _ = single_errors(prepared, budget)
    sampler = ErrorSampler(prepared.sources, prepared.layouts, seed=seed)
    few = [one for one in sampler.by_source if one.source.effect == "systematic"]
    points = [each for one in sampler.by_source for each in point_errors(one, slopes, prepared.layouts)]
    samples = Samples(OUTPUTS, prepared.chain.vectors(sampler.draw(0, draws), estimates=False))
    known = predicted(sampler.by_source, points, draws) if points else None
    return _kept(found, np.nan_to_num(scatter(samples, few, found, predicted=known)), points)


def judge(name: str, seed: int, k: int, *, draws: int = 0, numerical: bool = False) -> dict[str, Any]:
    """Reduce pair k of a case, take its increment by the program's own algebra, and hold it to the truth.

    They settle everything about it. Over values and coefficients and `JUDGED`: ``error``, increment minus true
    increment; ``u`` and ``half_width`` of its 95 % interval, measured sources alone; ``apart``, the root of the sum of
    squares of the standard uncertainties of A and B; ``mc_u`` and ``mc_half_width`` of so many Monte Carlo draws of
    each survey, where there are any; ``half_width_all`` with numerical terms, where they are wanted.
    """
    case = CASES[name]
    given = pair(case, np.random.default_rng([seed, list(CASES).index(name), k]))
    ready = [made_ready(one, noise_memory(name, side)) for side, one in enumerate(given)]
    seeds = [one.survey.uncertainty.seed for one in given]
    parts = [contributions(ready[side], second_order(name, side), seed=seeds[side]) for side in (0, 1)]
    values = [one.nominal.vector[AT] for one in ready]
    exact = truth(1, case.speeds[1]) - truth(0, case.speeds[0])
    variances = [np.einsum("qrr->qr", one.covariance) for one in parts]
    found: dict[str, Any] = {"case": name, "seed": seed, "k": k}
    found["error"] = (values[1] - values[0] - exact).tolist()
    found["apart"] = np.sqrt(variances[0] + variances[1]).tolist()
    ways = {"": parts}
    if draws:
        ways["mc_"] = [_drawn(one, draws=draws, seed=number) for one, number in zip(ready, seeds, strict=True)]
    for prefix, own in ways.items():
        difference = subtract(*own)
        found[f"{prefix}u"] = np.sqrt(np.einsum("qrr->qr", difference.covariance)).tolist()
        found[f"{prefix}half_width"] = difference.half_width().tolist()
    if numerical:
        terms = [
            _kept(term_components(terms_of(one, each)), np.zeros((len(OUTPUTS), len(OUTPUTS)))).components
            for one, each in zip(ready, given, strict=True)
        ]
        wide = [replace(one, components=(*one.components, *more)) for one, more in zip(parts, terms, strict=True)]
        found["half_width_all"] = subtract(*wide).half_width().tolist()
    return found


Task = tuple[str, int, int, int, bool]


def tasks(case: str, pairs: int, *, seed: int = 1) -> list[Task]:
    """What is to be done for a case; pair k is the same whatever their number is and whoever does it."""
    return [(case, seed, k, DRAWS if k % CHECKED == 1 else 0, k % EVERY == 0) for k in range(pairs)]


def done(task: Task) -> dict[str, Any]:
    """One pair of a study."""
    case, seed, k, draws, numerical = task
    return judge(case, seed, k, draws=draws, numerical=numerical)


def tightening(found: Sequence[Mapping[str, Any]]) -> np.ndarray:
    """Uncertainty if nothing cancelled over that of the increment, root mean squares, shape (2, rows)."""
    apart, u = (np.square(column(found, name)).mean(axis=0) for name in ("apart", "u"))
    ratio: np.ndarray = np.sqrt(apart / u)
    return ratio


def table(studies: Mapping[str, Sequence[Mapping[str, Any]]]) -> str:
    """Markdown table of the studies; the coefficients, in counts."""
    lines = []
    for case, found in studies.items():
        error, u, half = (column(found, name)[:, 1] for name in ("error", "u", "half_width"))
        wide = [one for one in found if "half_width_all" in one]
        wider = np.abs(column(wide, "error")) <= column(wide, "half_width_all") if wide else None
        drawn = [one for one in found if "mc_half_width" in one]
        scattered = 1e4 * np.sqrt(np.square(error).mean(axis=0))
        typical = 1e4 * np.sqrt(np.square(u).mean(axis=0))
        for k, row in enumerate(JUDGED):
            ratios = [one["half_width"][1][k] / one["mc_half_width"][1][k] for one in drawn]
            lines.append(
                [
                    case,
                    row,
                    str(len(found)),
                    share_text(np.abs(error[:, k]) <= half[:, k]),
                    f"{scattered[k]:.2f} counts",
                    f"{typical[k]:.2f} counts",
                    f"{typical[k] / scattered[k]:.3f} ± {1 / math.sqrt(2 * len(found)):.3f}",
                    f"{tightening(found)[1, k]:.1f}",
                    "" if wider is None else f"{wider[:, 1, k].sum()} of {len(wider)}",
                    f"{np.mean(ratios):.3f}" if ratios else "",
                ]
            )
    heads = (
        "case, row, pairs, true increment inside U95, scatter of the errors, mean u, u / scatter, "
        "u if nothing cancelled / u, with numerical terms, U95 over Monte Carlo's"
    )
    return markdown_table(heads.split(", "), lines)


def together(studies: Mapping[str, Sequence[Mapping[str, Any]]]) -> str:
    """Markdown table of all cases in one; the coefficients."""
    found = [one for own in studies.values() for one in own]
    error, u, half = (column(found, name)[:, 1] for name in ("error", "u", "half_width"))
    ratio = 1 / np.sqrt(np.square(error / u).mean(axis=0))
    lines = [
        [
            row,
            str(len(found)),
            share_text(np.abs(error[:, k]) <= half[:, k]),
            f"{ratio[k]:.3f} ± {1 / math.sqrt(2 * len(found)):.3f}",
        ]
        for k, row in enumerate(JUDGED)
    ]
    return markdown_table(["row, all cases", "pairs", "true increment inside U95", "u / scatter"], lines)


#: The tables of the page, between their marks.
TABLES = {
    ("<!-- generated: begin -->", "<!-- generated: end -->"): table,
    ("<!-- generated: together -->", "<!-- end -->"): together,
}


def main(arguments: Sequence[str] | None = None) -> None:
    """Run what is missing in the study, and print or write its table."""
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks.increment_coverage", description=__doc__)
    parser.add_argument("--pairs", type=int, default=50, help="pairs per case (default 50)")
    parser.add_argument("--case", action="append", choices=list(CASES), help="a case; all if not given")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--jobs", type=int, default=1, help="processes (default 1)")
    parser.add_argument("--results", type=Path, required=True, help="file of results, which is continued")
    parser.add_argument("--write", type=Path, help="page whose table is replaced")
    options = parser.parse_args(arguments)
    os.environ.setdefault("OMP_NUM_THREADS", "1")
    known = {(case, one["k"]) for case, own in read(options.results, seed=options.seed).items() for one in own}
    wanted = [task for case in options.case or CASES for task in tasks(case, options.pairs, seed=options.seed)]
    continued(options.results, done, [task for task in wanted if (task[0], task[2]) not in known], jobs=options.jobs)
    found = read(options.results, seed=options.seed)
    studies = {case: found[case] for case in options.case or CASES if case in found}
    for make in TABLES.values():
        print(make(studies), end="\n\n")
    if options.write:
        page = options.write.read_text(encoding="utf-8")
        for marks, make in TABLES.items():
            page = with_block(page, *marks, make(studies))
        options.write.write_text(page, encoding="utf-8")


if __name__ == "__main__":
    main()
