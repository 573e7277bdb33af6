"""From a plan file or a ledger to the survey that is worth making, in its declared order."""

from __future__ import annotations

import hashlib
import math
from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np

from wakeledger.confidence.montecarlo import run as run_montecarlo
from wakeledger.core.errors import InputError, SurveyError
from wakeledger.ledger.plan import Improvement, Kind, Plan, PlanLine, SetUp
from wakeledger.run import tables
from wakeledger.run.chain.outputs import OUTPUTS
from wakeledger.run.config.plan import PlanTable
from wakeledger.run.config.plan_file import PlanRequest, read_plan
from wakeledger.run.config.stream import ReferenceTable
from wakeledger.run.planning.expected import expected_flow
from wakeledger.run.planning.flow import ExpectedFlow
from wakeledger.run.planning.instrument import probes
from wakeledger.run.planning.of_ledger import is_archive, request_of_ledger
from wakeledger.run.planning.response import GRID, respond, without_noise
from wakeledger.run.planning.search import FACTOR, Choice, Design, Key, improvements, map_of
from wakeledger.run.planning.simulate import (
    DENSITY,
    DRIFT,
    DYNAMIC,
    NOISES,
    SYSTEMATIC,
    Accuracies,
    Places,
    Window,
    declared,
    noise_of,
    shift_of,
    simulated,
    visit,
    window_of,
)
from wakeledger.run.planning.target import Target, read_target
from wakeledger.run.prepared import prepare

Progress = Callable[[int, int], None]

#: Simulated surveys of each set-up, their lines shifted by chance.
SURVEYS = 2
#: How many more of them where what the grid misses counts.
FURTHER = 6
#: From one survey's shift to the next, parts of the spacing: powers of the plastic number, which spread evenly in two
#: dimensions (from memory: M. Roberts, 2018).
_STEP = (0.7548776662466927, 0.5698402909980532)
#: How often a set-up that the full Monte Carlo finds wanting is put aside for the next one.
_MOST_CHECKS = 4
_ZERO_NOTES = (
    ("angle_accuracy", "the flow angles are taken to have no error common to all points"),
    ("reference_accuracy", "the stream's dynamic pressure is taken as known exactly"),
    ("density_accuracy", "the density of the air is taken as known exactly"),
    ("reference_drift", "the reference is taken not to drift"),
)


def plan(
    path: str | Path,
    *,
    target: str | None = None,
    progress: Progress | None = None,
    command: str = "",
    workers: int = 2,
) -> Plan:
    """Find the cheapest survey that knows one row well enough.

    Parameters
    ----------
    path : path-like
        A plan file, a survey file with a ``[plan]``, or a finished ledger.
    target : str, optional
        Largest expanded uncertainty (95 %), as ``"2 counts"``, ``"0.5 %"`` or a value in the row's unit; that of the
        file unless given.
    progress : callable, optional
        Called with the steps done and their number.
    command : str
        The command line, for the record.
    workers : int
        Threads.

    Returns
    -------
    Plan

    Raises
    ------
    InputError
        If the file is wrong, or nothing can be planned from it.

    Notes
    -----
    Surveys of the expected flow are simulated for each spacing, window and probe and go through the reduction's own
    chain, which is disturbed by each source. The variance of the row is linear in the square of a source's standard
    uncertainty, with a term of second order; repeats divide the variance of what differs from point to point and from
    row to row. The set-up that comes out is checked by a full Monte Carlo.
    """
    path = Path(path)
    request = request_of_ledger(path) if is_archive(path) else read_plan(path)
    try:
        return _planned(request, target, progress, command, workers)
    except InputError as error:
        raise error.located(file=path) from error


def _planned(
    request: PlanRequest, target_text: str | None, progress: Progress | None, command: str, workers: int
) -> Plan:
    table = request.plan
    flow = expected_flow(request)
    if flow.lines is not None:
        flow = _with_own_values(flow, table)
    place = "[plan] target" if target_text is None else "--target"
    target = read_target(table.target if target_text is None else target_text, table.row, flow.values, place=place)
    design = _design(flow, table, target, request.path, progress, workers)
    choice, reached = design.cheapest()
    ratios: dict[Key, float] = {}
    for _ in range(_MOST_CHECKS):
        if choice is None or choice.key in ratios:
            break
        ratio = ratios[choice.key] = _verify(flow, design, choice, workers)
        kept = {
            key: response.scaled(ratio**2) if key == choice.key else response
            for key, response in design.responses.items()
        }
        design = replace(design, responses=kept)
        choice, reached = design.cheapest()
    ratio = math.nan if choice is None else ratios.get(choice.key, math.nan)
    return _record(request, flow, design, choice, reached, ratio, command)


def _with_own_values(flow: ExpectedFlow, table: PlanTable) -> ExpectedFlow:
    """A measured plane with the rows that the chain gives of it whole, and with its own noise."""
    assert flow.lines is not None
    whole = Window(flow.finest, math.nan, *flow.lines)
    probe = probes(table, ReferenceTable.model_validate(flow.tables["reference"]).resolve())[0]
    places = visit(flow, whole, (0.0, 0.0))
    prepared = prepare(simulated(declared(flow, probe, Accuracies()), places.points()))
    return replace(flow, values=without_noise(prepared, places))


def _design(
    flow: ExpectedFlow, table: PlanTable, target: Target, path: Path, progress: Progress | None, workers: int
) -> Design:
    reference = ReferenceTable.model_validate(flow.tables["reference"]).resolve()
    candidates = probes(table, reference, path)
    spacings, margins = tuple(sorted(table.spacing)), tuple(sorted(table.window))
    windows = {}
    for i, spacing in enumerate(spacings):
        for j, margin in enumerate(margins):
            found = window_of(flow, spacing, margin, rows_along=table.rows_along)
            if found is not None and spacing >= flow.finest * (1 - 1e-6):
                windows[i, j] = found
    if not windows:
        raise SurveyError(
            "no window and spacing lies within what the ledger holds",
            file=path,
            place="[plan] spacing, window",
            remedy=f"its points are {1e3 * flow.finest:.3g} mm apart; give larger spacings and smaller windows",
        )
    for window in windows.values():
        _refuse_size(window, path)
    largest = Accuracies(**{key: max(getattr(table, key) or (0.0,)) for key in Accuracies.__dataclass_fields__})
    responses = {}
    for done, ((i, j), window) in enumerate(windows.items()):
        visits = _visits(flow, window, (table.seed, i, j), SURVEYS + FURTHER)
        for c, probe in enumerate(candidates):
            if progress is not None:
                progress(done * len(candidates) + c, (len(windows) + 1) * len(candidates))
            responses[i, j, c] = respond(
                flow,
                probe,
                largest,
                output=target.output,
                surveys=visits[:SURVEYS],
                further=visits[SURVEYS:],
                seed=(table.seed, i, j, c),
                workers=workers,
            )
    return Design(table, target, spacings, margins, candidates, windows, responses)


def _refuse_size(window: Window, path: Path) -> None:
    """Refuse surveys of too few lines to be gridded, and of more points than anyone would take."""
    least, most = 8, 60_000
    if min(window.y.size, window.z.size) < least or window.points > most:
        raise SurveyError(
            f"{window.y.size} x {window.z.size} points every {1e3 * window.spacing:.3g} mm",
            file=path,
            place="[plan] spacing",
            remedy=f"at least {least} lines and at most {most} points are planned",
        )


def _visits(flow: ExpectedFlow, window: Window, seed: Sequence[int], count: int) -> list[Places]:
    """Surveys whose lines stand elsewhere each time, spread evenly over what a spacing leaves open."""
    first = np.random.default_rng(list(seed)).uniform(size=2)
    parts = (first + np.outer(np.arange(count), _STEP)) % 1.0
    return [visit(flow, window, shift_of(flow, window, (float(y), float(z)))) for y, z in parts]


def _verify(flow: ExpectedFlow, design: Design, choice: Choice, workers: int) -> float:
    """Standard uncertainty of the declared sources by a full Monte Carlo over that from derivatives, one survey."""
    table, window, probe = design.plan, design.window_of(choice), design.probes[choice.probe]
    seed = (table.seed, choice.spacing, choice.window)
    places = _visits(flow, window, seed, 1)[0]
    generator = np.random.default_rng([*seed, choice.probe, 0])
    survey = declared(flow, probe, choice.accuracies)
    prepared = prepare(simulated(survey, places.points(noise_of(probe, places.y.size, generator))))

    def evaluate(errors: dict[str, np.ndarray]) -> np.ndarray:
        return prepared.chain.vectors(errors, estimates=False)[:, [at]]

    at = OUTPUTS.index(design.target.output)
    names = [design.target.output]
    samples = run_montecarlo(
        evaluate, prepared.sources, prepared.layouts, names=names, draws=table.draws, seed=table.seed, workers=workers
    )
    found = float(samples.standard_uncertainty[0])
    response = design.responses[choice.key]
    expected = math.sqrt((response.first or response).measured(choice.accuracies, 1))
    return found / expected if expected > 0 else 1.0


def _record(
    request: PlanRequest,
    flow: ExpectedFlow,
    design: Design,
    choice: Choice | None,
    reached: bool,
    ratio: float,
    command: str,
) -> Plan:
    target, table = design.target, request.plan
    shape = (len(design.probes), len(design.margins), len(design.spacings))
    uncertainty, failing, minutes = np.full(shape, np.nan), np.zeros(shape, dtype=bool), np.full(shape[1:], np.nan)
    lines: tuple[PlanLine, ...] = ()
    terms: tuple[PlanLine, ...] = ()
    better: tuple[Improvement, ...] = ()
    expanded = stated = left = math.nan
    by_probe: list[SetUp] = []
    slower = None if reached else design.beyond()
    if choice is not None:
        lines = _budget(design, choice)
        total = sum(line.standard_uncertainty**2 for line in lines)
        expanded = FACTOR * math.sqrt(total)
        stated = design.stated(choice)
        terms = _terms(design, choice, stated)
        better = improvements(design, choice, _halves(lines, design, choice), total)
        uncertainty, failing, minutes = map_of(design, choice)
        left = design.responses[choice.key].error * target.scale
        for number in range(len(design.probes)):
            one, _ = design.cheapest(number)
            if one is not None:
                by_probe.append(design.set_up(one))
    return Plan(
        title=request.title or request.path.stem,
        row=target.row,
        unit=target.unit,
        value=flow.values[target.output] * target.scale,
        target=target.limit,
        time_limit=design.time_limit,
        reached=reached,
        chosen=None if choice is None else design.set_up(choice),
        beyond=None if slower is None else design.set_up(slower),
        expanded_uncertainty=expanded,
        stated=stated,
        non_linearity=ratio - 1,
        left=left,
        draws=table.draws,
        budget=lines,
        terms=terms,
        improvements=better,
        by_probe=tuple(by_probe),
        spacings=design.spacings,
        windows=design.margins,
        probes=tuple(probe.label for probe in design.probes),
        uncertainty=uncertainty,
        failing=failing,
        minutes=minutes,
        tried=sum(1 for _ in design.choices()),
        notes=(*flow.notes, *request.notes, *_notes(table, design)),
        inputs={request.path.name: request.sha256, **_ledger_digest(request)},
        provenance=tables.provenance(command),
    )


def _ledger_digest(request: PlanRequest) -> dict[str, str]:
    if request.plan.ledger is None:
        return {}
    path = request.resolve(request.plan.ledger)
    return {request.plan.ledger: hashlib.sha256(path.read_bytes()).hexdigest()}


def _notes(table: PlanTable, design: Design) -> list[str]:
    """What was left out of account, and why."""
    found = [f"[plan] {key}: it is absent, so {what}" for key, what in _ZERO_NOTES if getattr(table, key) is None]
    if table.settling_time is None and table.traverse_speed is None:
        found.append("[plan] settling_time: it is absent, so times are unknown and the fewest points are the cheapest")
    if table.hole_noise is None and table.static_pressure_noise is None:
        found.append("[plan] static_pressure_noise: it is absent, and taken to be that of the total pressure")
    if table.hole_noise is not None:
        found.append(
            "[plan] hole_noise: the flow variables' noise is that of a five-hole probe with a spherical nose, its outer"
            " holes 45 degrees off the axis, in a stream that meets it nearly head-on"
        )
    lost = {response.reason: (i, j) for (i, j, _), response in design.responses.items() if response.reason is not None}
    for reason, (i, j) in lost.items():
        found.append(
            f"No survey every {1e3 * design.spacings[i]:.3g} mm with a window {1e3 * design.margins[j]:.3g} mm beyond"
            f" the wake can be reduced: {reason}"
        )
    failing: dict[str, list[str]] = {}
    for (i, j, _), response in design.responses.items():
        for name in response.failing:
            where = f"{1e3 * design.spacings[i]:.3g} mm with {1e3 * design.margins[j]:.3g} mm"
            if where not in failing.setdefault(name, []):
                failing[name].append(where)
    for name, places in failing.items():
        found.append(f"The check {name} would fail with some probe at spacing and window: {', '.join(places)}")
    if len(design.windows) < len(design.spacings) * len(design.margins):
        found.append("Spacings and windows beyond what the ledger holds were left out")
    found.append(
        "Probe interference, the tunnel's unsteadiness, wandering of the vortices, positions and what [plan] does not"
        " name are not in these figures"
    )
    return found


def _budget(design: Design, choice: Choice) -> tuple[PlanLine, ...]:
    """Lines of a set-up in the plan's unit, all repeats together."""
    scale, response, repeats = design.target.scale, design.responses[choice.key], choice.repeats
    found: list[tuple[str, Kind, float]] = [
        (name, "random", variance / repeats) for name, variance in response.noise.items()
    ]
    found.append((DRIFT, "random", float(response.drift.at(choice.accuracies.reference_drift)) / repeats))
    for name, key in SYSTEMATIC.items():
        found.append((name, "systematic", float(response.systematic[key].at(getattr(choice.accuracies, key)))))
    found.append((GRID, "numerical", response.missed))
    return _lines(found, scale, sum(variance for _, _, variance in found))


def _terms(design: Design, choice: Choice, stated: float) -> tuple[PlanLine, ...]:
    """Numerical terms that the ledger of a set-up states, in the plan's unit."""
    scale = design.target.scale
    terms = design.responses[choice.key].terms
    found: list[tuple[str, Kind, float]] = [(name, "numerical", variance) for name, variance in terms.items()]
    return _lines(found, scale, (stated / FACTOR / scale) ** 2)


def _lines(found: Sequence[tuple[str, Kind, float]], scale: float, total: float) -> tuple[PlanLine, ...]:
    lines = [
        PlanLine(name, kind, scale * math.sqrt(variance), variance / total)
        for name, kind, variance in found
        if not variance <= 0
    ]
    # Unknown ones last.
    return tuple(sorted(lines, key=lambda line: (math.isnan(line.standard_uncertainty), -line.standard_uncertainty)))


def _halves(lines: Sequence[PlanLine], design: Design, choice: Choice) -> dict[str, float]:
    """What a better instrument would halve, with the variance it causes now."""
    of = {line.source: line.standard_uncertainty**2 for line in lines}
    noise = sum(of.get(name, 0.0) for name in NOISES)
    halves = {"probe's noise": noise}
    if math.isnan(design.probes[choice.probe].hole):
        # Where one of them is all there is, it is not said twice.
        halves |= {f"{name} alone": of[name] for name in NOISES if 0 < of.get(name, 0.0) < 0.999 * noise}
    else:
        halves = {"noise of the holes": noise}
    words = {DYNAMIC: "error of the dynamic pressure", DENSITY: "error of the density"}
    for name in (*SYSTEMATIC, DRIFT):
        label = words.get(name, "drift of the reference" if name == DRIFT else "error of the flow angles")
        halves[label] = of.get(name, 0.0)
    return halves
