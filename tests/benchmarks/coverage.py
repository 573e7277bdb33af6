"""Do the error bars cover? Many small synthetic surveys with known errors, each reduced with its own Monte Carlo.

``python -m tests.benchmarks.coverage --surveys 600`` runs all cases and prints the table; ``--write docs/coverage.md``
puts it into that page. One survey takes about half a second on one core.
"""

from __future__ import annotations

import argparse
import math
import os
import sys
import time
from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, field, replace
from functools import cache
from pathlib import Path

import numpy as np

from wakeledger.confidence.samples import Samples
from wakeledger.confidence.sampling import ErrorSampler
from wakeledger.confidence.terms import add_terms
from wakeledger.run.chain import Chain
from wakeledger.run.config import parse_survey
from wakeledger.run.load import SurveyInput
from wakeledger.run.outputs import ROWS
from wakeledger.run.prepared import prepare
from wakeledger.run.propagate import terms_of
from wakeledger.run.reduction import Variation
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import SyntheticWake, wing_wake
from wakeledger.synthetic.recordings import Errors, Positions, Recording, grid_positions, record

SPEED, DENSITY = 40.0, 1.2
REFERENCE = Reference(speed=SPEED, density=DENSITY, static_pressure=100_000.0)
#: Two points per core length, the coarsest spacing the design asks for.
CORE, SPACING = 0.05, 0.025
COUNT_Y, COUNT_Z = 70, 40
JUDGED = ("profile_drag", "induced_drag", "total_drag", "lift")
DRAWS = 200

_RANDOM = {"u": 0.16, "v": 0.16, "w": 0.16, "total_pressure": 1.5, "static_pressure": 2.0}


@dataclass(frozen=True)
class Case:
    """What goes wrong in the surveys of one case; standard deviations in SI, by the names of a survey file's targets.

    Attributes
    ----------
    random, per_row, systematic : mapping of str to float
        Noise of each point, of each row, of the whole survey.
    lost : float
        Share of the points that are lost, each on its own.
    hole : bool
        Whether a block of 2 x 3 points at the starboard core's edge is lost as well.
    """

    random: Mapping[str, float] = field(default_factory=dict)
    per_row: Mapping[str, float] = field(default_factory=dict)
    systematic: Mapping[str, float] = field(default_factory=dict)
    lost: float = 0.0
    hole: bool = False

    def sources(self) -> str:
        """The ``[[uncertainty.source]]`` tables that declare exactly these errors."""
        text = []
        for effect, sizes in (("random", self.random), ("per_row", self.per_row), ("systematic", self.systematic)):
            for name, size in sizes.items():
                target = name if "." in name else f"plane.{name}"
                unit = _UNITS[target.split(".")[1]]
                text.append(
                    f'[[uncertainty.source]]\nname = "{effect} {target}"\napplies_to = ["{target}"]\n'
                    f'effect = "{effect}"\nstandard_uncertainty = "{size!r} {unit}"\n'
                )
        return "\n".join(text)


_UNITS = {
    **dict.fromkeys(("u", "v", "w", "speed"), "m/s"),
    **dict.fromkeys(("total_pressure", "static_pressure"), "Pa"),
    **dict.fromkeys(("pitch", "yaw"), "rad"),
    "density": "kg/m^3",
}
_SYSTEMATIC = {
    "total_pressure": 1.0,
    "static_pressure": 3.0,
    "angle.pitch": 0.004,
    "angle.yaw": 0.003,
    "reference.speed": 0.1,
    "reference.density": 0.003,
}
CASES = {
    "random": Case(random=_RANDOM),
    "systematic": Case(systematic=_SYSTEMATIC),
    "mixed": Case(random=_RANDOM, systematic=_SYSTEMATIC, per_row={"total_pressure": 1.0, "w": 0.05}),
    "gappy": Case(random=_RANDOM, systematic=_SYSTEMATIC, lost=0.04, hole=True),
}


@cache
def wake() -> SyntheticWake:
    """Rolled-up wake of a wing with a little more lift to port, far behind it."""
    return wing_wake(
        REFERENCE,
        loading=lambda eta: np.sqrt(np.clip(1 - eta**2, 0, None)) * (1 - 0.1 * eta),
        core=CORE,
        n=120,
    )


def survey(case: Case, generator: np.random.Generator) -> tuple[SurveyInput, Recording, Recording]:
    """One survey as its file and points, and the recording with and without its random errors."""
    shift_y, shift_z = generator.uniform(-0.5, 0.5, 2) * SPACING
    y = SPACING * (np.arange(COUNT_Y) - COUNT_Y / 2) + shift_y
    z = SPACING * (np.arange(COUNT_Z) - 0.52 * COUNT_Z) + shift_z
    at = grid_positions(y, z)
    wrong = {name: size * generator.standard_normal() for name, size in case.systematic.items()}
    errors = Errors(
        systematic={name: value for name, value in wrong.items() if "." not in name},
        pitch=wrong.get("angle.pitch", 0.0),
        yaw=wrong.get("angle.yaw", 0.0),
    )
    missing = _missing(case, at, generator)
    still = record(wake(), at, generator=generator, errors=errors, missing=missing)
    noisy = record(
        wake(),
        at,
        generator=generator,
        errors=replace(errors, random=case.random, per_row=case.per_row),
        missing=missing,
    )
    text = f"""
title = "coverage"
[reference]
speed = "{SPEED + wrong.get("reference.speed", 0.0)!r} m/s"
density = "{DENSITY + wrong.get("reference.density", 0.0)!r} kg/m^3"
static_pressure = "{REFERENCE.static_pressure!r} Pa"
[model]
reference_area = "0.180 m^2"
span = "1.20 m"
[plane]
file = "plane.csv"
station = "1000 m"
primary = "total_pressure"
[plane.columns]
y = {{ column = "y", unit = "m" }}
z = {{ column = "z", unit = "m" }}
u = {{ column = "u", unit = "m/s" }}
v = {{ column = "v", unit = "m/s" }}
w = {{ column = "w", unit = "m/s" }}
total_pressure = {{ column = "pt", unit = "Pa", relative_to = "total" }}
static_pressure = {{ column = "ps", unit = "Pa", relative_to = "static" }}
[boundary]
kind = "free_air"
[uncertainty]
draws = {DRAWS}
seed = {int(generator.integers(2**31))}
{case.sources()}
"""
    return SurveyInput(parse_survey(text, "coverage.toml"), noisy.points(), {}), noisy, still


def _missing(case: Case, at: Positions, generator: np.random.Generator) -> np.ndarray:
    missing = generator.random(at.y.size) < case.lost
    cores = wake().cores
    if case.hole and cores is not None:
        dy = (at.y - (cores.y[1] + 0.7 * CORE)) / SPACING
        dz = (at.z - (cores.z[1] + 0.5 * CORE)) / SPACING
        missing |= (np.abs(dy) <= 1.0) & (np.abs(dz) <= 1.5)
    return missing


@dataclass(frozen=True)
class Outcome:
    """One survey judged against the truth; arrays over `JUDGED`, N.

    Attributes
    ----------
    error : ndarray
        Value minus truth.
    u, half_width : ndarray
        Standard uncertainty and half-width of the 95 % interval, measured sources alone.
    half_width_all : ndarray
        Half-width with the numerical terms.
    bias : float
        Noise bias of the induced drag that was subtracted, N.
    held, anew : float
        Noise bias that there is: the mean of the survey and of the one with all random errors turned round, less that
        without random errors, N; in the survey's own wake region, and each in the region that is found in it.
    """

    error: np.ndarray
    u: np.ndarray
    half_width: np.ndarray
    half_width_all: np.ndarray
    bias: float
    held: float
    anew: float


def judge(case: Case, generator: np.random.Generator, *, draws: int = DRAWS, numerical: bool = True) -> Outcome:
    """Reduce one survey by the chain itself and hold it against the truth."""
    given, noisy, still = survey(case, generator)
    prepared = prepare(given)
    chain = prepared.chain
    seed = given.survey.uncertainty.seed
    drawn = ErrorSampler(prepared.sources, prepared.layouts, seed=seed).draw(0, draws)
    values = chain.vectors(drawn, estimates=False)[:, : len(ROWS)]
    at = [ROWS.index(name) for name in JUDGED]
    samples = Samples(ROWS, values)
    wider = samples
    if numerical:
        terms = [
            replace(term, standard_uncertainty=term.standard_uncertainty[: len(ROWS)])
            for term in terms_of(prepared, given)
        ]
        wider = add_terms(samples, terms, seed=seed)
    truth = wake().truth.rows()
    error = np.array([prepared.nominal.values[name] - truth[name] for name in JUDGED])
    mirrored = {name: 2 * still.values[name] - noisy.values[name] for name in noisy.values}
    recordings = (noisy, replace(noisy, values=mirrored), still)
    unbiased = replace(chain, frozen=replace(chain.frozen, bias={}))
    pairs = []
    for region in (chain.frozen.region, None):
        one, other, exact = (_induced_drag(unbiased, recording, region) for recording in recordings)
        pairs.append((one + other) / 2 - exact)
    return Outcome(
        error,
        samples.standard_uncertainty[at],
        samples.interval().half_width[at],
        wider.interval().half_width[at],
        chain.frozen.bias.get("induced_drag", 0.0),
        *pairs,
    )


def _induced_drag(chain: Chain, recording: Recording, region: np.ndarray | None) -> float:
    trial = replace(chain, points=recording.points())
    return trial.reduce(vary=Variation(mask=region), estimates=False).values["induced_drag"]


@dataclass(frozen=True)
class Study:
    """All surveys of one case; arrays of shape (surveys, rows)."""

    case: str
    error: np.ndarray
    u: np.ndarray
    half_width: np.ndarray
    half_width_all: np.ndarray
    bias: np.ndarray
    held: np.ndarray
    anew: np.ndarray

    @property
    def surveys(self) -> int:
        """Number of surveys."""
        return len(self.error)

    def coverage(self, *, numerical: bool = False) -> np.ndarray:
        """Share of the surveys whose interval holds the truth, by row."""
        return (np.abs(self.error) <= (self.half_width_all if numerical else self.half_width)).mean(axis=0)


def study(
    case: str,
    surveys: int,
    *,
    seed: int = 1,
    draws: int = DRAWS,
    numerical: bool = True,
    workers: int = 1,
    progress: Callable[[int], None] | None = None,
) -> Study:
    """Judge many surveys of a case; survey k is the same whatever their number and the workers are."""
    jobs = [(case, seed, k, draws, numerical) for k in range(surveys)]
    found = []
    if workers == 1:
        for job in jobs:
            found.append(_judged(job))
            if progress is not None:
                progress(len(found))
    else:
        with ProcessPoolExecutor(workers) as pool:
            for outcome in pool.map(_judged, jobs, chunksize=8):
                found.append(outcome)
                if progress is not None:
                    progress(len(found))
    columns = {name: np.array([getattr(one, name) for one in found]) for name in Outcome.__dataclass_fields__}
    return Study(case, **columns)


def _judged(job: tuple[str, int, int, int, bool]) -> Outcome:
    case, seed, k, draws, numerical = job
    generator = np.random.default_rng([seed, list(CASES).index(case), k])
    return judge(CASES[case], generator, draws=draws, numerical=numerical)


def table(studies: Sequence[Study]) -> str:
    """Markdown table of the studies."""
    lines = [
        "| case | row | surveys | truth inside U95, measured sources | with numerical terms | scatter of the errors | "
        "mean u | ratio | mean error |",
        "| --- | --- | --- | --- | --- | --- | --- | --- | --- |",
    ]
    for one in studies:
        inside, wider = one.coverage(), one.coverage(numerical=True)
        for k, row in enumerate(JUDGED):
            sd = one.error[:, k].std(ddof=1)
            u = math.sqrt(float((one.u[:, k] ** 2).mean()))
            doubt = 100 * math.sqrt(max(inside[k] * (1 - inside[k]), 0.25 / one.surveys) / one.surveys)
            bias, bias_u = one.error[:, k].mean(), sd / math.sqrt(one.surveys)
            lines.append(
                f"| {one.case} | {row} | {one.surveys} | {100 * inside[k]:.1f} ± {doubt:.1f} % | "
                f"{100 * wider[k]:.1f} % | "
                f"{sd:.4f} N | {u:.4f} N | {u / sd:.2f} | {bias:+.4f} ± {bias_u:.4f} N |"
            )
    return "\n".join(lines)


def bias_table(studies: Sequence[Study]) -> str:
    """Markdown table of the noise bias of the induced drag."""
    lines = [
        "| case | subtracted | found in the survey's region | share left | found, region drawn anew | share left |",
        "| --- | --- | --- | --- | --- | --- |",
    ]
    for one in studies:
        if not CASES[one.case].random:
            continue
        cells = [one.case, f"{one.bias.mean():+.5f} N"]
        for found in (one.held, one.anew):
            raw, left = found.mean(), (found - one.bias).mean()
            doubt = (found - one.bias).std(ddof=1) / math.sqrt(one.surveys)
            share = f"{100 * left / one.held.mean():+.1f} ± {100 * doubt / one.held.mean():.1f} %"
            cells += [f"{raw:+.5f} ± {doubt:.5f} N", share]
        lines.append(f"| {' | '.join(cells)} |")
    return "\n".join(lines)


_BEGIN, _END = "<!-- generated: begin -->", "<!-- generated: end -->"


def main(arguments: Sequence[str] | None = None) -> None:
    """Run the study and print or write its tables."""
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks.coverage", description=__doc__)
    parser.add_argument("--surveys", type=int, default=100, help="surveys per case (default 100)")
    parser.add_argument("--case", action="append", choices=list(CASES), help="a case; all if not given")
    parser.add_argument("--draws", type=int, default=DRAWS, help=f"Monte Carlo draws per survey (default {DRAWS})")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--workers", type=int, default=1, help="processes (default 1)")
    parser.add_argument("--write", type=Path, help="page whose generated block is replaced")
    options = parser.parse_args(arguments)
    os.environ.setdefault("OMP_NUM_THREADS", "1")
    studies = []
    for case in options.case or CASES:
        start = time.perf_counter()

        def show(done: int, case: str = case, start: float = start) -> None:
            if done % 20 == 0:
                print(f"{case}: {done} in {time.perf_counter() - start:.0f} s", file=sys.stderr)

        found = study(
            case, options.surveys, seed=options.seed, draws=options.draws, workers=options.workers, progress=show
        )
        studies.append(found)
    text = f"{table(studies)}\n\n{bias_table(studies)}"
    print(text)
    if options.write:
        page = options.write.read_text(encoding="utf-8")
        before, rest = page.split(_BEGIN)
        after = rest.split(_END)[1]
        options.write.write_text(f"{before}{_BEGIN}\n\n{text}\n\n{_END}{after}", encoding="utf-8")


if __name__ == "__main__":
    main()
