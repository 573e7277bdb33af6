"""Does a survey know what its plan said? Many surveys simulated at the planned set-up, each reduced in full.

``python -m tests.benchmarks.plan_check --surveys 300`` runs all cases and prints the table; ``--write
docs/planning.md`` puts it into that page, and ``--json FILE`` keeps the figures that the page's figure is drawn from.
"""

from __future__ import annotations

import argparse
import json
import math
import sys
import time
from collections.abc import Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from wakeledger.ledger.plan import Plan, SetUp
from wakeledger.run.chain.outputs import coefficient_of
from wakeledger.run.config import Survey
from wakeledger.run.config.plan_file import parse_plan
from wakeledger.run.load import SurveyInput
from wakeledger.run.planning import plan
from wakeledger.run.planning.expected import expected_flow
from wakeledger.run.planning.flow import ExpectedFlow
from wakeledger.run.planning.instrument import Probe
from wakeledger.run.planning.search import FACTOR
from wakeledger.run.planning.simulate import (
    Accuracies,
    Window,
    declared,
    noise_of,
    shift_of,
    simulated,
    visit,
    window_of,
)
from wakeledger.run.prepared import prepare
from wakeledger.synthetic.recordings import Errors

WING: Mapping[str, Any] = {
    "station": "0.90 m",
    "lift_coefficient": 0.40,
    "profile_drag_coefficient": 0.0110,
    "tip_core": "40 mm",
    "wake_width": "40 mm",
    "spacing": "22 mm",
    "window": "220 mm",
    "noise": "0.10 m/s",
    "total_pressure_noise": "1.0 Pa",
    "angle_accuracy": "0.10 deg",
    "reference_accuracy": "0.2 %",
    "density_accuracy": "0.1 %",
    "rows_along": "z",
    "row": "total_drag",
    "target": "2 counts",
}
#: What each case changes.
CASES: Mapping[str, Mapping[str, Any]] = {
    "as it is": {},
    "drift of the reference": {"reference_drift": "0.3 Pa"},
    "drift, rows along the span": {"reference_drift": "0.3 Pa", "rows_along": "y"},
    "coarse": {"spacing": "32 mm", "window": "300 mm"},
    "noisy probe": {"noise": "0.40 m/s", "total_pressure_noise": "3.0 Pa"},
    "holes, induced drag": {"noise": None, "total_pressure_noise": None, "hole_noise": "1.5 Pa", "row": "induced_drag"},
    "poor reference": {"reference_accuracy": "2 %", "density_accuracy": "1 %", "angle_accuracy": "0.5 deg"},
    "three surveys": {"repeats": 3, "noise": "0.20 m/s", "total_pressure_noise": "2.0 Pa"},
    "lift": {"row": "lift", "target": "1 %", "noise": "0.30 m/s"},
    "flat sheet, bell loading": {"rolled_up": False, "loading": "bell", "row": "profile_drag"},
    "half model": {"boundary": {"kind": "free_air", "reflection": "y"}},
    "above the ground": {"boundary": {"kind": "free_air", "reflection": "z"}, "height": "0.40 m"},
    "closed walls, half model": {
        "boundary": {"kind": "closed_walls", "reflection": "y", "y": ["0 m", "1.0 m"], "z": ["-0.8 m", "0.8 m"]},
        "row": "induced_drag",
    },
    "open jet": {
        "boundary": {"kind": "open_jet", "section": "circle", "diameter": "2.4 m"},
        "row": "induced_drag",
        "noise": "0.20 m/s",
    },
    "compressible": {"speed": "120 m/s", "noise": "0.60 m/s", "total_pressure_noise": "10 Pa"},
}


def text_of(changes: Mapping[str, Any]) -> str:
    """The plan file of a case."""
    entries = {name: value for name, value in {**WING, **changes}.items() if value is not None}
    speed, boundary = entries.pop("speed", "40 m/s"), entries.pop("boundary", {"kind": "free_air"})
    stream = f'[reference]\nspeed = "{speed}"\ndensity = "1.19 kg/m^3"\nstatic_pressure = "100.9 kPa"\n'
    model = '[model]\nreference_area = "0.165 m^2"\nspan = "1.10 m"\nmean_chord = "0.15 m"\n'
    tables = (f"[{name}]\n" + _lines(table) for name, table in (("boundary", boundary), ("plan", entries)))
    return stream + model + "".join(tables)


def _lines(entries: Mapping[str, Any]) -> str:
    return "".join(f"{name} = {json.dumps(value)}\n" for name, value in entries.items())


def survey_of(
    flow: ExpectedFlow,
    window: Window,
    one: SetUp,
    wrong: Mapping[str, float],
    generator: np.random.Generator,
) -> SurveyInput:
    """A survey with errors drawn for it by a way of its own: the probe is turned and the stream is read wrong."""
    probe = Probe(one.velocity_noise, one.total_pressure_noise, one.static_pressure_noise)
    places = visit(flow, window, shift_of(flow, window, tuple(generator.uniform(size=2))))
    readings = dict(places.readings)
    turn = Errors(pitch=wrong["pitch"], yaw=wrong["yaw"]).mounting
    turned = turn.T @ np.stack([readings[name] for name in "uvw"])
    readings |= dict(zip("uvw", turned, strict=True))
    errors = noise_of(probe, places.y.size, generator)
    rows = one.reference_drift * generator.standard_normal(int(places.row.max()) + 1)
    errors["total_pressure"] = errors["total_pressure"] + rows[places.row]
    points = type(places)(places.y, places.z, places.row, readings).points(errors)
    accuracies = Accuracies(one.angle_accuracy, one.reference_accuracy, one.density_accuracy, one.reference_drift)
    return simulated(_read_wrong(declared(flow, probe, accuracies), wrong), points)


def _read_wrong(survey: Survey, wrong: Mapping[str, float]) -> Survey:
    table = survey.reference
    assert table.speed is not None and table.density is not None
    changed = table.model_copy(
        update={
            "speed": table.speed * (1 + 0.5 * wrong["dynamic"]),
            "density": table.density * (1 + wrong["density"]),
        }
    )
    return survey.model_copy(update={"reference": changed})


@dataclass(frozen=True)
class Outcome:
    """One case.

    Attributes
    ----------
    case, unit : str
    predicted : float
        U95 of the plan.
    declared : float
        Its part from the declared sources.
    errors : ndarray, shape (surveys,)
        Of the simulated surveys, each the mean of its repeats.
    """

    case: str
    unit: str
    predicted: float
    declared: float
    errors: np.ndarray

    @property
    def scatter(self) -> float:
        """1.96 times the root mean square of the errors: scatter and what all surveys have in common."""
        return FACTOR * float(np.sqrt(np.mean(self.errors**2)))

    @property
    def doubt(self) -> float:
        """Standard error of the scatter from the number of surveys, relative."""
        return 1 / math.sqrt(2 * len(self.errors))

    @property
    def covered(self) -> float:
        """Share of the surveys whose error lies within the predicted U95."""
        return float(np.mean(np.abs(self.errors) <= self.predicted))


def planned(changes: Mapping[str, Any], folder: Path, *, workers: int = 2) -> tuple[Plan, ExpectedFlow, Window, str]:
    """The plan of a case, and what its surveys are simulated with."""
    path = folder / "plan.toml"
    path.write_text(text_of(changes), encoding="utf-8")
    found = plan(path, workers=workers)
    assert found.chosen is not None
    request = parse_plan(path.read_text(encoding="utf-8"), path)
    flow = expected_flow(request)
    window = window_of(flow, found.chosen.spacing, found.chosen.window, rows_along=request.plan.rows_along)
    assert window is not None
    return found, flow, window, path.read_text(encoding="utf-8")


def errors_of(
    found: Plan, flow: ExpectedFlow, window: Window, numbers: Sequence[int], *, seed: Sequence[int] = (1,)
) -> np.ndarray:
    """Errors of surveys in the plan's unit; survey k is the same whatever their number is."""
    one = found.chosen
    assert one is not None
    output = coefficient_of(found.row)
    scale = 1e4 if found.unit == "counts" else 1.0
    errors = []
    for k in numbers:
        generator = np.random.default_rng([*seed, k])
        size = {
            "pitch": one.angle_accuracy,
            "yaw": one.angle_accuracy,
            "dynamic": one.reference_accuracy,
            "density": one.density_accuracy,
        }
        wrong = {name: value * float(generator.standard_normal()) for name, value in size.items()}
        values = [
            prepare(survey_of(flow, window, one, wrong, generator)).nominal.values[output] for _ in range(one.repeats)
        ]
        errors.append(scale * (float(np.mean(values)) - flow.values[output]))
    return np.array(errors)


def judge(
    case: str, changes: Mapping[str, Any], surveys: int, folder: Path, *, workers: int = 1, seed: int = 1
) -> Outcome:
    """Plan one case and simulate it; every case has errors of its own."""
    found, flow, window, text = planned(changes, folder, workers=workers)
    own = (seed, list(CASES).index(case))
    if workers == 1:
        errors = errors_of(found, flow, window, range(surveys), seed=own)
    else:
        chunks = [range(k, surveys, 4 * workers) for k in range(4 * workers)]
        with ProcessPoolExecutor(workers) as pool:
            parts = pool.map(_in_process, [(text, found, chunk, own) for chunk in chunks])
            errors = np.concatenate(list(parts))
    return _outcome(case, found, errors)


def _outcome(case: str, found: Plan, errors: np.ndarray) -> Outcome:
    known = sum(line.standard_uncertainty**2 for line in found.budget if line.kind != "numerical")
    return Outcome(case, found.unit, found.expanded_uncertainty, FACTOR * math.sqrt(known), errors)


def _in_process(job: tuple[str, Plan, range, tuple[int, ...]]) -> np.ndarray:
    text, found, numbers, seed = job
    request = parse_plan(text, "plan.toml")
    flow = expected_flow(request)
    assert found.chosen is not None
    window = window_of(flow, found.chosen.spacing, found.chosen.window, rows_along=request.plan.rows_along)
    assert window is not None
    return errors_of(found, flow, window, numbers, seed=seed)


def table(outcomes: Sequence[Outcome]) -> str:
    """Markdown table of the outcomes."""
    lines = [
        "| case | surveys | U95 of the plan | 1.96 × rms error of the surveys | plan / surveys | "
        "declared sources alone / surveys | inside U95 |",
        "| --- | --- | --- | --- | --- | --- | --- |",
    ]
    for one in outcomes:
        unit = " counts" if one.unit == "counts" else ""
        ratios = [u / one.scatter for u in (one.predicted, one.declared)]
        whole, sources = (f"{ratio:.2f} ± {ratio * one.doubt:.2f}" for ratio in ratios)
        lines.append(
            f"| {one.case} | {len(one.errors)} | {one.predicted:.3g}{unit} | {one.scatter:.3g}{unit} | {whole} | "
            f"{sources} | {100 * one.covered:.0f} % |"
        )
    return "\n".join(lines)


def _record(one: Outcome) -> dict[str, Any]:
    """An outcome as plain values."""
    return {
        "case": one.case,
        "unit": one.unit,
        "predicted": one.predicted,
        "declared": one.declared,
        "errors": one.errors.tolist(),
    }


_BEGIN, _END = "<!-- generated: begin -->", "<!-- generated: end -->"


def main(arguments: Sequence[str] | None = None) -> None:
    """Run the cases and print or write their table."""
    import tempfile

    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks.plan_check", description=__doc__)
    parser.add_argument("--surveys", type=int, default=200, help="surveys per case (default 200)")
    parser.add_argument("--case", action="append", choices=list(CASES), help="a case; all if not given")
    parser.add_argument("--seed", type=int, default=1, help="of the surveys' errors (default 1)")
    parser.add_argument("--workers", type=int, default=1, help="processes (default 1)")
    parser.add_argument("--write", type=Path, help="page whose generated block is replaced")
    parser.add_argument("--json", type=Path, help="file for the figures")
    parser.add_argument("--kept", type=Path, help="file of figures: its surveys, planned anew")
    options = parser.parse_args(arguments)
    kept = {} if options.kept is None else {one["case"]: one for one in json.loads(options.kept.read_text("utf-8"))}
    outcomes = []
    for case in options.case or (kept if kept else CASES):
        start = time.perf_counter()
        with tempfile.TemporaryDirectory() as folder:
            if case in kept:
                found = planned(CASES[case], Path(folder))[0]
                outcomes.append(_outcome(case, found, np.array(kept[case]["errors"])))
            else:
                outcomes.append(
                    judge(case, CASES[case], options.surveys, Path(folder), workers=options.workers, seed=options.seed)
                )
        if options.json:
            options.json.write_text(json.dumps([_record(one) for one in outcomes], indent=1) + "\n", encoding="utf-8")
        print(table(outcomes[-1:]).splitlines()[-1], file=sys.stderr)
        print(f"{case}: {time.perf_counter() - start:.0f} s", file=sys.stderr)
    text = table(outcomes)
    print(text)
    if options.write:
        page = options.write.read_text(encoding="utf-8")
        before, rest = page.split(_BEGIN)
        after = rest.split(_END)[1]
        options.write.write_text(f"{before}{_BEGIN}\n\n{text}\n\n{_END}{after}", encoding="utf-8")


if __name__ == "__main__":
    main()
