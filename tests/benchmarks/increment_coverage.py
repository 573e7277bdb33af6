"""Do the error bars of increments cover? Many pairs of small synthetic surveys whose shared errors really are shared.

``python -m tests.benchmarks.increment_coverage --pairs 250`` runs all cases and prints the table; ``--write
docs/increments.md`` puts it into that page. One pair takes about half a second on one core.
"""

from __future__ import annotations

import argparse
import math
import os
import sys
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cache
from pathlib import Path

import numpy as np

from wakeledger.confidence.components import Component, scatter, shifted_components, term_components
from wakeledger.confidence.samples import Samples
from wakeledger.confidence.sampling import ErrorSampler
from wakeledger.ledger.cancellation import subtract
from wakeledger.ledger.contributions import Contributions
from wakeledger.run.chain.outputs import OUTPUTS, coefficient_of
from wakeledger.run.config import parse_survey
from wakeledger.run.load import SurveyInput
from wakeledger.run.prepared import prepare
from wakeledger.run.uncertainty.draws import terms_of
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import SyntheticWake, wing_wake
from wakeledger.synthetic.recordings import Errors, grid_positions, record

DENSITY, PRESSURE, AREA, SPAN = 1.2, 100_000.0, 0.18, 1.2
CORE, SPACING, COUNT_Y, COUNT_Z = 0.05, 0.025, 68, 36
JUDGED = ("profile_drag", "induced_drag", "total_drag", "lift")
DRAWS = 100

_UNITS = {
    **dict.fromkeys(("u", "v", "w", "speed"), "m/s"),
    **dict.fromkeys(("total_pressure", "static_pressure"), "Pa"),
    **dict.fromkeys(("pitch", "yaw"), "rad"),
    "density": "kg/m^3",
}
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
    """

    random: Mapping[str, float]
    shared: Mapping[str, float] = field(default_factory=dict)
    own: Mapping[str, float] = field(default_factory=dict)
    speeds: tuple[float, float] = (40.0, 40.0)
    rectangular: bool = False


_OWN = {"plane.static_pressure": 2.0, "reference.density": 0.002}
_ALIKE = {name: size for name, size in _SYSTEMATIC.items() if name not in _OWN}
CASES = {
    "systematic shared": Case(_QUIET, shared=_SYSTEMATIC),
    "mixed": Case(_NOISY, shared=_SYSTEMATIC),
    "another speed": Case(_NOISY, shared=_SYSTEMATIC, speeds=(40.0, 46.0), rectangular=True),
    "partly shared": Case(_NOISY, shared=_ALIKE, own=_OWN),
    "nothing shared": Case(_NOISY, own=_SYSTEMATIC),
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


def _sources(case: Case) -> str:
    text = [_source(f"noise {name}", f"plane.{name}", "random", size) for name, size in case.random.items()]
    shape = "rectangular" if case.rectangular else "normal"
    for target, size in case.shared.items():
        text.append(_source(f"shared {target}", target, "systematic", size, shared_id=f"rig {target}", shape=shape))
    text += [_source(f"own {target}", target, "systematic", size) for target, size in case.own.items()]
    return "\n".join(text)


def _source(
    name: str, target: str, effect: str, size: float, *, shared_id: str | None = None, shape: str = "normal"
) -> str:
    unit = _UNITS[target.split(".")[1]]
    lines = [
        "[[uncertainty.source]]",
        f'name = "{name}"',
        f'applies_to = ["{target}"]',
        f'effect = "{effect}"',
        f'standard_uncertainty = "{size!r} {unit}"',
        f'distribution = "{shape}"',
    ]
    return "\n".join([*lines, *([] if shared_id is None else [f'shared_id = "{shared_id}"']), ""])


def pair(case: Case, generator: np.random.Generator) -> tuple[SurveyInput, SurveyInput]:
    """Surveys of A and B on one grid; the shared errors take one value for both, all others one for each."""
    draw = (lambda: generator.uniform(-1, 1) * math.sqrt(3)) if case.rectangular else generator.standard_normal
    common = {name: size * draw() for name, size in case.shared.items()}
    shift = generator.uniform(-0.5, 0.5, 2) * SPACING
    found = []
    for side, speed in enumerate(case.speeds):
        wrong = dict(common)
        for name, size in case.own.items():
            wrong[name] = wrong.get(name, 0.0) + size * generator.standard_normal()
        found.append(_survey(case, side, speed, wrong, shift, generator))
    return found[0], found[1]


def _survey(
    case: Case,
    side: int,
    speed: float,
    wrong: Mapping[str, float],
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
    text = f"""
title = "pair, {"AB"[side]}"
[reference]
speed = "{speed + wrong.get("reference.speed", 0.0)!r} m/s"
density = "{DENSITY + wrong.get("reference.density", 0.0)!r} kg/m^3"
static_pressure = "{PRESSURE!r} Pa"
[model]
reference_area = "{AREA!r} m^2"
span = "{SPAN!r} m"
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
{_sources(case)}
"""
    return SurveyInput(parse_survey(text, "pair.toml"), recording.points(), {})


def contributions(given: SurveyInput, *, draws: int, numerical: bool) -> tuple[np.ndarray, Contributions]:
    """Rows and coefficients of one survey, (2, rows), and what each error does to them, as the archive keeps it."""
    prepared = prepare(given)
    chain, seed = prepared.chain, given.survey.uncertainty.seed
    sampler = ErrorSampler(prepared.sources, prepared.layouts, seed=seed)
    at = np.array([[OUTPUTS.index(name) for name in JUDGED], [OUTPUTS.index(coefficient_of(name)) for name in JUDGED]])
    flat = at.ravel()

    def evaluate(errors: dict[str, np.ndarray]) -> np.ndarray:
        return chain.vectors(errors, estimates=False)[:, flat]

    few = [one for one in sampler.by_source if one.source.effect == "systematic"]
    samples = Samples(tuple(map(str, flat)), evaluate(sampler.draw(0, draws)))
    found = shifted_components(evaluate, sampler, few, flat.size, batch=draws, workers=1) if few else ()
    left = scatter(samples, few, found).reshape(2, len(JUDGED), 2, len(JUDGED))
    parts = [_over(one, at.shape) for one in found]
    if numerical:
        parts += [_over(one, at.shape, flat) for one in term_components(terms_of(prepared, given))]
    covariance = np.stack([left[0, :, 0], left[1, :, 1]])
    values = np.array([prepared.nominal.values[OUTPUTS[k]] for k in flat]).reshape(at.shape)
    return values, Contributions(JUDGED, tuple(parts), covariance, np.full(at.shape, math.inf))


def _over(one: Component, shape: tuple[int, ...], pick: np.ndarray | None = None) -> Component:
    linear, curved = (x if pick is None else x[pick] for x in (one.linear, one.curved))
    return replace(one, linear=linear.reshape(shape), curved=curved.reshape(shape))


@dataclass(frozen=True)
class Outcome:
    """One pair judged against the truth; arrays of shape (2, rows), values and coefficients.

    Attributes
    ----------
    error : ndarray
        Increment minus true increment.
    u, half_width : ndarray
        Its standard uncertainty and the half width of its 95 % interval.
    apart : ndarray
        Root of the sum of squares of the standard uncertainties of A and B.
    """

    error: np.ndarray
    u: np.ndarray
    half_width: np.ndarray
    apart: np.ndarray


def judge(case: Case, generator: np.random.Generator, *, draws: int = DRAWS, numerical: bool = False) -> Outcome:
    """Reduce one pair by the chain, take its increment by the program's own algebra, and hold it to the truth."""
    values, parts = zip(
        *(contributions(one, draws=draws, numerical=numerical) for one in pair(case, generator)), strict=True
    )
    difference = subtract(*parts)
    exact = truth(1, case.speeds[1]) - truth(0, case.speeds[0])
    variances = [np.einsum("qrr->qr", one.covariance) for one in parts]
    return Outcome(
        values[1] - values[0] - exact,
        np.sqrt(np.einsum("qrr->qr", difference.covariance)),
        difference.half_width(draws=4000),
        np.sqrt(variances[0] + variances[1]),
    )


@dataclass(frozen=True)
class Study:
    """All pairs of one case; arrays of shape (pairs, 2, rows)."""

    case: str
    error: np.ndarray
    u: np.ndarray
    half_width: np.ndarray
    apart: np.ndarray

    @property
    def pairs(self) -> int:
        """Number of pairs."""
        return len(self.error)

    @property
    def coverage(self) -> np.ndarray:
        """Share of the pairs whose interval holds the true increment, shape (2, rows)."""
        return (np.abs(self.error) <= self.half_width).mean(axis=0)

    @property
    def tightening(self) -> np.ndarray:
        """Uncertainty if nothing cancelled over that of the increment, root mean squares, shape (2, rows)."""
        return np.sqrt((self.apart**2).mean(axis=0) / (self.u**2).mean(axis=0))


def study(
    case: str,
    pairs: int,
    *,
    seed: int = 1,
    draws: int = DRAWS,
    numerical: bool = False,
    progress: Callable[[int], None] | None = None,
) -> Study:
    """Judge many pairs of a case; pair k is the same whatever their number is."""
    found = []
    for k in range(pairs):
        generator = np.random.default_rng([seed, list(CASES).index(case), k])
        found.append(judge(CASES[case], generator, draws=draws, numerical=numerical))
        if progress is not None:
            progress(k + 1)
    columns = {name: np.array([getattr(one, name) for one in found]) for name in Outcome.__dataclass_fields__}
    return Study(case, **columns)


def table(studies: Sequence[Study]) -> str:
    """Markdown table of the studies, in counts."""
    lines = [
        "| case | row | pairs | true increment inside U95 | scatter of the errors | mean u | ratio | "
        "u if nothing cancelled / u |",
        "| --- | --- | ---: | ---: | ---: | ---: | ---: | ---: |",
    ]
    for one in studies:
        for k, row in enumerate(JUDGED):
            inside = one.coverage[1, k]
            doubt = 100 * math.sqrt(max(inside * (1 - inside), 0.25 / one.pairs) / one.pairs)
            scattered = 1e4 * math.sqrt(float((one.error[:, 1, k] ** 2).mean()))
            u = 1e4 * math.sqrt(float((one.u[:, 1, k] ** 2).mean()))
            lines.append(
                f"| {one.case} | {row} | {one.pairs} | {100 * inside:.1f} ± {doubt:.1f} % | {scattered:.2f} counts | "
                f"{u:.2f} counts | {u / scattered:.2f} | {one.tightening[1, k]:.1f} |"
            )
    return "\n".join(lines)


_BEGIN, _END = "<!-- generated: begin -->", "<!-- generated: end -->"


def main(arguments: Sequence[str] | None = None) -> None:
    """Run the study and print or write its table."""
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks.increment_coverage", description=__doc__)
    parser.add_argument("--pairs", type=int, default=50, help="pairs per case (default 50)")
    parser.add_argument("--case", action="append", choices=list(CASES), help="a case; all if not given")
    parser.add_argument("--draws", type=int, default=DRAWS, help=f"Monte Carlo draws per survey (default {DRAWS})")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--numerical", action="store_true", help="add the numerical terms, which takes longer")
    parser.add_argument("--write", type=Path, help="page whose generated block is replaced")
    options = parser.parse_args(arguments)
    os.environ.setdefault("OMP_NUM_THREADS", "1")
    studies = []
    for case in options.case or CASES:
        start = time.perf_counter()

        def show(done: int, case: str = case, start: float = start) -> None:
            if done % 20 == 0:
                print(f"{case}: {done} in {time.perf_counter() - start:.0f} s", file=sys.stderr)

        studies.append(
            study(
                case,
                options.pairs,
                seed=options.seed,
                draws=options.draws,
                numerical=options.numerical,
                progress=show,
            )
        )
    text = table(studies)
    print(text)
    if options.write:
        page = options.write.read_text(encoding="utf-8")
        before, rest = page.split(_BEGIN)
        after = rest.split(_END)[1]
        options.write.write_text(f"{before}{_BEGIN}\n\n{text}\n\n{_END}{after}", encoding="utf-8")


if __name__ == "__main__":
    main()
