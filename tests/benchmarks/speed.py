"""The measurements: planes of 512 x 1024 and 100 x 150 points, the program's start, a whole survey, tables."""

from __future__ import annotations

import resource
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
from tests.benchmarks.timing import Result, Timing, timed

from wakeledger.confidence.linear_budget import linear_budget
from wakeledger.confidence.montecarlo import run as run_montecarlo
from wakeledger.intake.readers.instants import CHUNK_BYTES
from wakeledger.physics.fields.poisson import stream_function
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.outputs import OUTPUTS
from wakeledger.run.chain.reduction import Frozen
from wakeledger.run.config import parse_survey
from wakeledger.run.gridded import Regrid, find_vortices, settings_of
from wakeledger.run.load import SurveyInput, load
from wakeledger.run.prepared import _line, prepare
from wakeledger.run.survey import inspect
from wakeledger.run.uncertainty.linear import linear_slopes
from wakeledger.run.uncertainty.noise import noise_bias, white_noise
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import Errors, Recording, grid_positions, record, wing_wake

ROOT = Path(__file__).resolve().parents[2]
SAMPLE = ROOT / "sample_surveys" / "wing_and_tail" / "survey.toml"
REFERENCE = Reference(speed=42.0, density=1.185, static_pressure=100_600.0)
NOISE = {"u": 0.17, "v": 0.17, "w": 0.17, "total_pressure": 1.6, "static_pressure": 2.1}
SOLVES = "free-space solves"


def plane(nz: int, ny: int, *, core: float, elements: int) -> SurveyInput:
    """A noisy plane behind a wing of 1.2 m span with the sample survey's settings, far behind the model."""
    step = 1.7 / ny
    at = grid_positions(step * (np.arange(ny) - ny / 2), step * (np.arange(nz) - nz / 2))
    wake = wing_wake(REFERENCE, core=core, n=elements)
    recording: Recording = record(wake, at, generator=np.random.default_rng(1), errors=Errors(random=NOISE))
    text = SAMPLE.read_text(encoding="utf-8").split("[[compare]]")[0].replace('station = "1.50 m"', 'station = "1e3 m"')
    return SurveyInput(parse_survey(text, SAMPLE), recording.points(), {})


def large_plane() -> list[Result]:
    """All estimates of a 512 x 1024 plane, in solves of the same plane."""
    given = plane(512, 1024, core=0.05, elements=24)
    points = given.points
    reference = given.survey.reference.resolve()
    gridding = Regrid(points.y, points.z, np.ones(points.n, dtype=bool), points.row)()
    chain = Chain(points, gridding, settings_of(given, reference))
    first = chain.reduce(estimates=False)
    grid = first.flow.grid
    solve = timed(lambda: stream_function(first.vorticity, grid), runs=7)
    parts, _ = find_vortices(first, chain.settings)
    line = _line(chain, first)
    near = chain.near_field(first.vorticity, grid)
    chain = replace(chain, frozen=Frozen(near, line.cuts if line.reason is None else None, parts))
    nominal = chain.reduce()
    noise = (white_noise("noise", 0.17, 0.17),)
    state = chain.flow(reference)
    one_pass = timed(lambda: chain.reduce(), runs=5)
    points_to_plane = timed(lambda: chain.flow(reference), runs=3)
    bias = timed(lambda: noise_bias(chain, nominal, noise), runs=3)
    geometry = timed(lambda: (find_vortices(first, chain.settings), _line(chain, first)), runs=1, warm=False)
    del state
    size = "512 x 1024 plane"
    return [
        Result(f"{size}: one free-space solve", solve, None, "s", "the yardstick; one thread"),
        Result(
            f"{size}: rows, all estimates and noise bias",
            (one_pass + bias) / solve,
            6.0,
            SOLVES,
            "points to rows and estimates, and the noise bias in closed form",
        ),
        Result("  of it rows and estimates", one_pass / solve, None, SOLVES, "points to rows on frozen geometry"),
        Result("  of these, points to plane", points_to_plane / solve, None, SOLVES, "state at the points, gridding"),
        Result("  of it noise bias", bias / solve, None, SOLVES, "one white source, every quadratic output"),
        Result("  once per survey: geometry", geometry / solve, None, SOLVES, "vortices and wake line found; one run"),
    ]


def small_plane() -> list[Result]:
    """1000 draws of a 100 x 150 plane, from fewer."""
    prepared = prepare(plane(100, 150, core=0.024, elements=60))
    chain, nominal = prepared.chain, prepared.nominal
    solve = timed(lambda: stream_function(nominal.vorticity, nominal.flow.grid), runs=41)
    found = [Result("100 x 150 plane: one free-space solve", solve, None, "s", "the yardstick; one thread")]
    draws = 96
    calls: tuple[tuple[str, float, bool], ...] = (("area rows", 4.0, False), ("every estimate", 15.0, True))
    for what, target, estimates in calls:

        def evaluate(errors: dict[str, np.ndarray], estimates: bool = estimates) -> np.ndarray:
            return chain.vectors(errors, estimates=estimates)

        def propagate(
            evaluate: Callable[[dict[str, np.ndarray]], np.ndarray] = evaluate,
        ) -> object:
            return run_montecarlo(
                evaluate, prepared.sources, prepared.layouts, names=OUTPUTS, draws=draws, seed=1, workers=2
            )

        taken = timed(propagate, runs=3)
        scaled = taken * (1000 / draws)
        how = f"{draws} draws, scaled; 2 threads; one draw is {taken.cpu / draws / solve.cpu:.0f} solves of CPU time"
        found.append(Result(f"100 x 150 plane: 1000 draws, {what}", scaled, target, "s", how, cores=2))
    return found


def linear() -> list[Result]:
    """Linear budget of a 200 x 300 plane beyond the reduction itself."""
    prepared = prepare(plane(200, 300, core=0.03, elements=24))
    chain, nominal = prepared.chain, prepared.nominal
    solve = timed(lambda: stream_function(nominal.vorticity, nominal.flow.grid), runs=41)
    one_pass = timed(lambda: chain.reduce(estimates=False), runs=15)
    layouts = {name: one for name, one in prepared.layouts.items() if not name.startswith("reference.")}
    sources = [source for source in prepared.sources if set(source.applies_to) <= set(layouts)]

    def budget() -> object:
        slopes = linear_slopes(chain, nominal, sources, layouts, estimates=False)
        return linear_budget(slopes, sources, layouts, names=OUTPUTS)

    first = timed(budget, runs=15)
    whole = timed(lambda: linear_slopes(chain, nominal, prepared.sources, prepared.layouts), runs=5)
    size = "200 x 300 plane"
    return [
        Result(f"{size}: one free-space solve", solve, None, "s", "the yardstick; one thread"),
        Result(f"{size}: reduction, rows", one_pass, None, "s", "points to rows"),
        Result(
            f"{size}: linear budget of the rows",
            first,
            0.05,
            "s",
            f"{len(sources)} sources on points and angles, derivatives included; 2 threads;"
            f" {first.cpu / solve.cpu:.0f} solves of CPU time",
            cores=2,
        ),
        Result(
            "  with the reference and every estimate",
            whole,
            None,
            "s",
            "two passes for each number of [reference]",
            cores=2,
        ),
    ]


def start() -> list[Result]:
    """Start of the program and of the library, in processes of their own."""
    program = Path(sys.executable).with_name("wakeledger")
    commands = (
        ("wakeledger --help", 0.25, [str(program), "--help"]),
        ("import wakeledger", None, [sys.executable, "-c", "import wakeledger"]),
        ("an empty Python", None, [sys.executable, "-c", "pass"]),
    )
    return [
        Result(what, _process(command, runs=7), target, "s", "median of 7 processes")
        for what, target, command in commands
    ]


def _process(command: list[str], *, runs: int) -> Timing:
    wall, cpu = [], []
    for run in range(runs + 1):
        before, clock = resource.getrusage(resource.RUSAGE_CHILDREN), time.perf_counter()
        subprocess.run(command, check=False, capture_output=True, cwd=tempfile.gettempdir())
        after = resource.getrusage(resource.RUSAGE_CHILDREN)
        if run:
            wall.append(time.perf_counter() - clock)
            cpu.append(after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime)
    return Timing(statistics.median(wall), statistics.median(cpu))


def whole_survey() -> list[Result]:
    """The main job on the sample survey, as a user runs it."""
    program = Path(sys.executable).with_name("wakeledger")
    with tempfile.TemporaryDirectory() as folder:
        command = [str(program), "reduce", str(SAMPLE), "--out", folder, "--overwrite", "--quiet"]
        taken = _process(command, runs=2)
    return [Result("sample survey with report", taken, 5.0, "s", "wakeledger reduce, its own process; 300 draws")]


def tables() -> list[Result]:
    """Reading a table of 20 000 points, and inspecting the survey in it."""
    given = plane(100, 200, core=0.024, elements=60)
    with tempfile.TemporaryDirectory() as folder:
        at = given.points
        names = {"Y": at.y, "Z": at.z, "U": "u", "V": "v", "W": "w", "pt": "total_pressure", "ps": "static_pressure"}
        columns = [at.channels[x].values if isinstance(x, str) else 1e3 * x for x in names.values()]
        lines = [",".join(names), *(",".join(f"{x:.6g}" for x in row) for row in zip(*columns, strict=True))]
        (Path(folder) / "traverse.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
        path = Path(folder) / "survey.toml"
        path.write_text(given.survey.text, encoding="utf-8")
        read = timed(lambda: load(path), runs=5)
        loaded = load(path)
        looked = timed(lambda: inspect(loaded), runs=2)
    return [
        Result("reading a table of 20 000 rows", read, 0.5, "s", "survey file and data, in a running process"),
        Result("inspecting 20 000 points", looked, 2.0, "s", "gridding, one reduction, checks; without reading"),
    ]


#: Reads a set of instants and prints by how much its process has grown at most, in MB.
_READING = """
import sys
from pathlib import Path
import netCDF4, numpy as np
from wakeledger.core.points import Column
from wakeledger.intake.readers import read_points
names = {"y": "y", "z": "z", "v": "V", "w": "W"}
columns = {key: Column(name, "m" if key in "yz" else "m/s") for key, name in names.items()}
read_points(sys.argv[2], columns, axes=np.eye(3))
def highest():
    # The figure of getrusage would begin with the memory of the process that started this one.
    lines = Path("/proc/self/status").read_text().splitlines()
    return next(int(line.split()[1]) for line in lines if line.startswith("VmHWM"))
before = highest()
read_points(sys.argv[1], columns, axes=np.eye(3))
print((highest() - before) / 1024)
"""


def instants() -> list[Result]:
    """Memory and time of reading 10 000 instants of v and w on 60 x 80 points; where the system tells (Linux)."""
    if not Path("/proc/self/status").exists():
        return []
    with tempfile.TemporaryDirectory() as folder:
        large, small = Path(folder) / "large.nc", Path(folder) / "small.nc"
        _write_instants(large, 10_000)
        # What every read needs is loaded before the measurement begins.
        _write_instants(small, 100)
        clock = time.perf_counter()
        done = subprocess.run(
            [sys.executable, "-c", _READING, str(large), str(small)], check=True, capture_output=True, text=True
        )
        taken = time.perf_counter() - clock
        size = large.stat().st_size / 1e6
    megabytes = float(done.stdout) * 1024**2 / 1e6
    chunk = CHUNK_BYTES / 1e6
    return [
        Result(
            "10 000 instants: peak memory beyond the program's own",
            Timing(megabytes / chunk),
            1.5,
            "chunks",
            f"{size:.0f} MB of v and w on 60 x 80 points; chunks of {chunk:.0f} MB; one worker",
        ),
        Result("  reading them, process included", Timing(taken), None, "s", "mean, scatter and worth of the instants"),
    ]


def _write_instants(path: Path, count: int) -> None:
    """Instants of a steady vortex pair under noise, invented."""
    import netCDF4

    y, z = np.linspace(-0.8, 0.8, 80), np.linspace(-0.4, 0.4, 60)
    rng = np.random.default_rng(1)
    with netCDF4.Dataset(path, "w") as dataset:
        for name, axis in (("time", np.arange(count)), ("z", z), ("y", y)):
            dataset.createDimension(name, axis.size)
            dataset.createVariable(name, "f8", (name,))[:] = axis
        for name in ("V", "W"):
            variable = dataset.createVariable(name, "f4", ("time", "z", "y"), chunksizes=(min(count, 100), 60, 80))
            for start in range(0, count, 500):
                part = min(500, count - start)
                variable[start : start + part] = np.sin(3 * y) + 0.2 * rng.standard_normal((part, 60, 80), np.float32)


def memory() -> list[Result]:
    """Highest memory of this process so far."""
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    return [Result("peak memory of these measurements", Timing(peak), None, "MB", "the 512 x 1024 plane included")]


GROUPS: dict[str, Callable[[], list[Result]]] = {
    "start": start,
    "large plane": large_plane,
    "small plane": small_plane,
    "linear budget": linear,
    "tables": tables,
    "whole survey": whole_survey,
    "instants": instants,
    "memory": memory,
}
