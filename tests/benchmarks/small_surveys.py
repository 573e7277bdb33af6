"""What coverage studies share: small surveys as files, their uncertainty in closed form, and results kept on disk."""

from __future__ import annotations

import json
import math
import sys
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path
from typing import Any
from unittest import mock

import numpy as np

from wakeledger.confidence.components import Component, shifted_components
from wakeledger.confidence.linear_budget import LinearBudget, SecondOrder, linear_budget
from wakeledger.confidence.pairs import PairOrder
from wakeledger.confidence.sampling import ErrorSampler
from wakeledger.physics.vortices.vortex_sum import VortexSum
from wakeledger.run import gridded
from wakeledger.run.chain.outputs import OUTPUTS
from wakeledger.run.load import SurveyInput
from wakeledger.run.prepared import Prepared, prepare
from wakeledger.run.uncertainty import noise_findings
from wakeledger.run.uncertainty.linear import linear_slopes, paired, survey_budget
from wakeledger.run.uncertainty.noise import Noise

#: The rows that are held against the truth.
JUDGED = ("profile_drag", "induced_drag", "total_drag", "lift")

_UNITS = {
    **dict.fromkeys(("u", "v", "w", "speed"), "m/s"),
    **dict.fromkeys(("total_pressure", "static_pressure"), "Pa"),
    **dict.fromkeys(("pitch", "yaw"), "rad"),
    "density": "kg/m^3",
}


# -- survey files -------------------------------------------------------------------------------------------------


def source_text(
    name: str, targets: Sequence[str], effect: str, size: float, *, shape: str = "normal", shared_id: str | None = None
) -> str:
    """One ``[[uncertainty.source]]`` table; the size in SI."""
    lines = [
        "[[uncertainty.source]]",
        f'name = "{name}"',
        f"applies_to = {json.dumps(targets)}",
        f'effect = "{effect}"',
        f'standard_uncertainty = "{size!r} {_UNITS[targets[0].split(".")[1]]}"',
        f'distribution = "{shape}"',
        *([] if shared_id is None else [f'shared_id = "{shared_id}"']),
    ]
    return "\n".join([*lines, ""])


def survey_text(
    title: str,
    *,
    speed: float,
    density: float,
    static_pressure: float,
    area: float,
    span: float,
    seed: int,
    sources: Sequence[str],
    boundary: str = 'kind = "free_air"',
) -> str:
    """The survey file of a plane of velocities and pressures far behind a wing, SI."""
    columns = {
        **dict.fromkeys(("y", "z"), 'unit = "m"'),
        **dict.fromkeys(("u", "v", "w"), 'unit = "m/s"'),
        "total_pressure": 'unit = "Pa", relative_to = "total"',
        "static_pressure": 'unit = "Pa", relative_to = "static"',
    }
    listed = "\n".join(f'{name} = {{ column = "{name}", {rest} }}' for name, rest in columns.items())
    return f"""
title = "{title}"
[reference]
speed = "{speed!r} m/s"
density = "{density!r} kg/m^3"
static_pressure = "{static_pressure!r} Pa"
[model]
reference_area = "{area!r} m^2"
span = "{span!r} m"
[plane]
file = "plane.csv"
station = "1000 m"
primary = "total_pressure"
[plane.columns]
{listed}
[boundary]
{boundary}
[uncertainty]
seed = {seed}
{"".join(sources)}
"""


# -- one survey ---------------------------------------------------------------------------------------------------


def made_ready(given: SurveyInput, noises: dict[str, tuple[Noise, ...]] | None = None) -> Prepared:
    """A survey as it is prepared from its file, but for the vortices of a cross-check, on which no row hangs.

    To fit them takes a third of the time, and to draw what the declared noise does to the crossflow another: surveys
    that differ in their errors alone can have a memory of that.
    """
    nan = math.nan
    none = VortexSum(nan, nan, (), 0.0, 0.0, 0.0, 0, 0.0, "left out of the study")
    declared = noise_findings.declared_noise

    def remembered(*arguments: Any, **options: Any) -> tuple[Noise, ...]:
        if noises is None:
            return declared(*arguments, **options)
        if "" not in noises:
            noises[""] = declared(*arguments, **options)
        return noises[""]

    with (
        mock.patch.object(gridded, "find_vortices", lambda *_: (None, none)),
        mock.patch.object(noise_findings, "declared_noise", remembered),
    ):
        return prepare(given)


def closed_form(prepared: Prepared, second: Mapping[str, SecondOrder]) -> LinearBudget:
    """Uncertainty of a prepared survey from exact derivatives; its second order is that of the case."""
    slopes = linear_slopes(prepared.chain, prepared.nominal, prepared.sources, prepared.layouts, estimates=False)
    return linear_budget(slopes, prepared.sources, prepared.layouts, names=OUTPUTS, second=second)


def noise_second_order(prepared: Prepared) -> dict[str, SecondOrder]:
    """Second order of the sources that the crossflow's noise comes from.

    It is a thousandth of the variance of every judged row and takes four times as long as everything else, so that a
    study has one for all surveys of a case.
    """
    chain, nominal, given, layouts = prepared.chain, prepared.nominal, prepared.sources, prepared.layouts
    slopes = linear_slopes(chain, nominal, given, layouts, estimates=False)
    noisy = {noise.name for noise in prepared.noises}
    whole = survey_budget(chain, nominal, slopes, given, layouts, noisy=noisy)
    orders = zip(whole.sources, whole.second, strict=True)
    return {source.name: order for source, order in orders if source.name in noisy}


def single_errors(prepared: Prepared, budget: LinearBudget) -> tuple[tuple[Component, ...], PairOrder]:
    """Errors of the whole survey one by one and in pairs, over `OUTPUTS`, beside a budget of all sources."""

    def evaluate(errors: dict[str, np.ndarray]) -> np.ndarray:
        return prepared.chain.vectors(errors, estimates=False)

    given, layouts = prepared.sources, prepared.layouts
    sampler = ErrorSampler(given, layouts, seed=0)
    few = [one for one in sampler.by_source if one.source.effect == "systematic"]
    components = shifted_components(evaluate, sampler, few, len(OUTPUTS), batch=16, workers=1)
    return components, paired(evaluate, given, layouts, components, np.diag(budget.total), workers=1)


def curvature(prepared: Prepared, budget: LinearBudget) -> tuple[np.ndarray, np.ndarray]:
    """Variance that errors of the whole survey add to second order, each alone and in pairs, over `OUTPUTS`."""
    components, pairs = single_errors(prepared, budget)
    alone: np.ndarray = np.sum([one.variance - one.linear**2 for one in components], axis=0)
    return alone, np.diag(pairs.covariance)


# -- many surveys -------------------------------------------------------------------------------------------------


Task = tuple[Any, ...]
Judge = Callable[[Any], dict[str, Any]]


def study(judge: Judge, wanted: Sequence[Task], *, jobs: int = 1) -> Iterator[dict[str, Any]]:
    """Judge what is wanted, in its order."""
    if jobs == 1:
        yield from map(judge, wanted)
        return
    with ProcessPoolExecutor(jobs) as pool:
        yield from pool.map(judge, wanted, chunksize=8)


def continued(results: Path, judge: Judge, wanted: Sequence[Task], *, jobs: int = 1) -> None:
    """Append to a file of results what is wanted, as soon as each is done."""
    start = time.perf_counter()
    with results.open("a", encoding="utf-8") as file:
        for count, one in enumerate(study(judge, wanted, jobs=jobs), 1):
            file.write(json.dumps(one) + "\n")
            file.flush()
            if count % 100 == 0:
                spent = time.perf_counter() - start
                print(f"{one['case']}: {count} of {len(wanted)} in {spent:.0f} s", file=sys.stderr)


def read(results: Path, *, seed: int = 1) -> dict[str, list[dict[str, Any]]]:
    """What a file of results holds by case, in the order of the numbers; a line cut short is left out."""
    found: dict[str, dict[int, dict[str, Any]]] = {}
    if results.exists():
        for line in results.read_text(encoding="utf-8").splitlines():
            try:
                one = json.loads(line)
            except json.JSONDecodeError:
                continue
            if one["seed"] == seed:
                found.setdefault(one["case"], {})[one["k"]] = one
    return {case: [own[k] for k in sorted(own)] for case, own in found.items()}


def column(found: Sequence[Mapping[str, Any]], name: str) -> np.ndarray:
    """One figure of those that have it, shape (number, ...)."""
    return np.array([one[name] for one in found if name in one])


# -- tables -------------------------------------------------------------------------------------------------------


def share_text(hits: np.ndarray) -> str:
    """A share of hits, with its standard error, in per cent."""
    count, share = hits.size, float(hits.mean())
    doubt = math.sqrt(max(share * (1 - share), 0.25 / count) / count)
    return f"{100 * share:.1f} ± {100 * doubt:.1f} %"


def markdown_table(heads: Sequence[str], lines: Sequence[Sequence[str]]) -> str:
    """A table for a page."""
    rows = [heads, ["---"] * len(heads), *lines]
    return "\n".join(f"| {' | '.join(row)} |" for row in rows)


def with_block(page: str, begin: str, end: str, text: str) -> str:
    """A page with what stands between two marks made again."""
    before, rest = page.split(begin)
    return f"{before}{begin}\n\n{text}\n\n{end}{rest.split(end, 1)[1]}"
