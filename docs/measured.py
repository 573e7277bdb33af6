"""Make the measured parts of these pages again: ``python docs/measured.py``.

Every table of accuracies and every printed output of the program stands between two comment lines,
``<!-- measured: name -->`` and ``<!-- end -->``. This script computes what belongs there and writes it into the pages;
tests/test_docs.py computes it once more and compares.
"""

from __future__ import annotations

import json
import os
import re
import subprocess
import sys
import tempfile
from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np

from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields.differences import axial_vorticity
from wakeledger.physics.fields.lifting_line import near_field
from wakeledger.physics.fields.poisson import stream_function
from wakeledger.physics.methods.energy_area import crossflow_energy
from wakeledger.physics.methods.wake_line import wake_line
from wakeledger.physics.vortices.vortex_sum import vortex_sum
from wakeledger.synthetic import (
    GaussianElements,
    LiftingLine,
    Sheet,
    roll_up,
    rolled_up_wing,
    shed,
    straight_edge,
    vortex_pair,
)

DOCS = Path(__file__).resolve().parent
SAMPLE = DOCS.parent / "sample_surveys" / "wing_and_tail"
RAW_SAMPLE = DOCS.parent / "sample_surveys" / "raw_traverse"
BLOCK = re.compile(r"(<!-- measured: (?P<name>[\w ]+) -->\n)(?P<body>.*?)(<!-- end -->)", re.DOTALL)

RHO, U, CORE = 1.2, 42.0, 0.03
RATIOS = (0.5, 0.8, 1.0)
ORDERS = (2, 4, 6, 8, 10)
STATIONS = (0.1, 0.25, 0.5, 1.0, 2.0, 5.0)


def window(elements: GaussianElements, ratio: float) -> UniformGrid:
    """Grid of spacing `ratio` core lengths, six cores and six points beyond the elements, off their symmetry."""
    h = ratio * float(elements.core.min())
    reach = 6 * float(elements.core.max()) + 6 * h
    y, z = (
        np.arange(c.min() - reach + part * h, c.max() + reach, h)
        for c, part in ((elements.y, 0.37), (elements.z, 0.21))
    )
    return UniformGrid.from_axes(y, z)


def inside(elements: GaussianElements, grid: UniformGrid) -> np.ndarray:
    """The places that hold vorticity, as booleans."""
    exact = np.abs(elements.vorticity_on(grid))
    return exact > 1e-12 * exact.max()


def vorticity_form(xi: np.ndarray, grid: UniformGrid) -> float:
    """Induced drag of a vorticity field."""
    return 0.5 * RHO * grid.cell_area * float((stream_function(xi, grid) * xi).sum())


def pair() -> GaussianElements:
    """Two Gaussian vortices of opposite sign."""
    return vortex_pair(circulation=2.0, spacing=0.8, core=CORE)


def wakes() -> dict[str, GaussianElements]:
    """Wakes whose induced drag is known as a closed double sum."""

    def lopsided(eta: np.ndarray) -> np.ndarray:
        return np.sqrt(np.clip(1 - eta**2, 0, None)) * (1 + 0.35 * eta)

    wing = shed("elliptic", straight_edge(1.0), peak=2.0, core=CORE, n=150)
    tail = shed("elliptic", straight_edge(0.4, z=0.12), peak=-0.4, core=CORE, n=80)
    rolled = {"span": 1.0, "peak": 2.0, "core": CORE, "x": 2.0, "speed": U, "n": 150}
    return {
        "vortex pair": pair(),
        "elliptic, flat": wing,
        "elliptic, rolled up": rolled_up_wing("elliptic", **rolled).elements,
        "asymmetric, rolled up": rolled_up_wing(lopsided, **rolled).elements,
        "wing and tail, rolled up": roll_up([Sheet(wing), Sheet(tail, x=0.5)], x=2.0, speed=U).elements,
    }


def table(head: list[str], lines: list[list[str]]) -> str:
    """A Markdown table."""
    rule = ["---"] + ["---:"] * (len(head) - 1)
    return "".join(f"| {' | '.join(line)} |\n" for line in (head, rule, *lines))


def size(error: float) -> str:
    """Size of a relative error to one digit; what is below 1e-9 is rounding."""
    return "< 1e-9" if abs(error) < 1e-9 else f"{abs(error):.0e}".replace("e-0", "e-")


def differences() -> str:
    """Error of the vorticity form with differences of several orders."""
    elements = pair()
    exact = elements.induced_drag(density=RHO)
    lines = []
    for order in ORDERS:
        errors = []
        for ratio in RATIOS:
            grid = window(elements, ratio)
            v, w = elements.velocity_on(grid)
            xi = np.where(inside(elements, grid), axial_vorticity(v, w, grid, order=order), 0.0)
            errors.append(size(vorticity_form(xi, grid) / exact - 1))
        lines.append([str(order), *errors])
    return table(["order", *(f"h/a = {ratio:g}" for ratio in RATIOS)], lines)


def solve() -> str:
    """Error of the free-space solve alone, with exact vorticity."""
    elements = pair()
    exact = elements.induced_drag(density=RHO)
    errors = []
    for ratio in RATIOS:
        grid = window(elements, ratio)
        errors.append(size(vorticity_form(elements.vorticity_on(grid), grid) / exact - 1))
    return table(["", *(f"h/a = {ratio:g}" for ratio in RATIOS)], [["error of D_i", *errors]])


def estimates() -> str:
    """Error of each estimate of induced drag on wakes with a known drag, at half a core length spacing."""
    lines = []
    for name, elements in wakes().items():
        exact = elements.induced_drag(density=RHO)
        grid = window(elements, 0.5)
        v, w = elements.velocity_on(grid)
        mask = np.abs(elements.vorticity_on(grid))
        mask = mask > 1e-4 * mask.max()
        xi = np.where(inside(elements, grid), axial_vorticity(v, w, grid), 0.0)
        line = wake_line(v, w, grid, RHO, U, mask=mask)
        found = (
            vorticity_form(xi, grid),
            float(crossflow_energy(v, w, grid, density=RHO)),
            line.induced_drag,
            vortex_sum(v, w, grid, RHO, mask=mask).induced_drag,
        )
        lines.append([name, *(size(value / exact - 1) for value in found)])
    return table(["wake", "`vorticity_area`", "`energy_area`", "`wake_line`", "`vortex_sum`"], lines)


def station_excess(stations: tuple[float, ...] = STATIONS) -> Iterator[tuple[float, float, float, float]]:
    """Station over span, error of the vorticity form, excess of the energy form, its prediction; parts of D_i."""
    line = LiftingLine(shed("elliptic", straight_edge(1.0), peak=2.0, core=0.02, n=150))
    elements = line.elements
    exact = elements.induced_drag(density=RHO)
    grid = UniformGrid.from_axes(np.arange(-1.0, 1.0, 0.0125), np.arange(-0.5, 0.5, 0.0125))
    for x in stations:
        _, v, w = line.velocity_on(x, grid)
        xi = np.where(inside(elements, grid), axial_vorticity(v, w, grid), 0.0)
        energy = float(crossflow_energy(v, w, grid, density=RHO))
        near_v, near_w, _ = near_field(xi, grid, distance=x)
        far = float(crossflow_energy(v - near_v, w - near_w, grid, density=RHO))
        yield x, vorticity_form(xi, grid) / exact - 1, energy / exact - 1, (energy - far) / exact


def station() -> str:
    """What the vorticity form and the energy form read at several stations behind a lifting line."""
    lines = [
        [f"{x:g}", size(form), f"{100 * excess:+.2f} %", f"{100 * predicted:+.2f} %"]
        for x, form, excess, predicted in station_excess()
    ]
    return table(["x/b", "`vorticity_area`, error", "`energy_area`, excess", "predicted excess"], lines)


def noise() -> str:
    """What white noise does to the vorticity form, over the whole window and over the wake region."""
    elements = wakes()["elliptic, rolled up"]
    exact = elements.induced_drag(density=RHO)
    grid = UniformGrid.from_axes(np.arange(-1.0, 1.0, 0.02), np.arange(-0.5, 0.5, 0.02))
    v, w = elements.velocity_on(grid)
    strength = np.abs(elements.vorticity_on(grid))
    mask = strength > 1e-3 * strength.max()
    generator = np.random.default_rng(7)
    whole, masked, energy = [], [], []
    for _ in range(40):
        dv, dw = 0.005 * U * generator.standard_normal((2, *grid.shape))
        for sign in (1.0, -1.0):
            noisy_v, noisy_w = v + sign * dv, w + sign * dw
            xi = axial_vorticity(noisy_v, noisy_w, grid)
            whole.append(vorticity_form(xi, grid) / exact - 1)
            masked.append(vorticity_form(np.where(mask, xi, 0.0), grid) / exact - 1)
            energy.append(float(crossflow_energy(noisy_v, noisy_w, grid, density=RHO)) / exact - 1)
    lines = [
        [name, f"{100 * np.mean(values):+.1f} %", f"{100 * np.std(values[::2]):.1f} %"]
        for name, values in (
            ("vorticity form, whole window", whole),
            ("vorticity form, wake region", masked),
            ("energy form", energy),
        )
    ]
    return table(["estimate", "mean error", "scatter"], lines)


class Sample:
    """The sample survey reduced by the program itself, in a folder of its own."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        for name in ("survey.toml", "traverse.csv"):
            (folder / name).write_bytes((SAMPLE / name).read_bytes())
        text = (SAMPLE / "survey.toml").read_text("utf-8")
        (folder / "cut.toml").write_text(text.replace("traverse.csv", "cut.csv"), "utf-8")
        head, *lines = (SAMPLE / "traverse.csv").read_text("utf-8").splitlines()
        kept = [line for line in lines if float(line.split(",")[0]) < 430]
        (folder / "cut.csv").write_text("\n".join([head, *kept]) + "\n", "utf-8")

    def run(self, *arguments: str, status: int = 0) -> str:
        """What a command prints; it must end with the given exit status."""
        program = [sys.executable, "-c", "from wakeledger.cli import main; main()"]
        done = subprocess.run(
            [*program, *arguments],
            cwd=self.folder,
            env={**os.environ, "COLUMNS": "100", "NO_COLOR": "1"},
            capture_output=True,
            text=True,
            encoding="utf-8",
            check=False,
        )
        if done.returncode != status:
            raise RuntimeError(f"wakeledger {' '.join(arguments)} ended with {done.returncode}: {done.stderr}")
        return f"$ wakeledger {' '.join(arguments)}\n{done.stdout}{done.stderr}"

    def console(self, text: str) -> str:
        """A block of console output for a page."""
        return f"```console\n{text.rstrip()}\n```\n"

    def reduced(self) -> str:
        """The main job on the sample survey."""
        return self.console(self.run("reduce", "survey.toml", "--overwrite").replace(" --overwrite", ""))

    def inspected(self) -> str:
        """The sample survey before it is reduced."""
        return self.console(self.run("inspect", "survey.toml"))

    def inspected_cut(self) -> str:
        """The same survey without its starboard end before it is reduced: the map, the edges and what to do."""
        text = self.run("inspect", "cut.toml", status=1)
        chart = text[text.index("Map of the points") : text.index("Measured variables")]
        edges = text[text.index("Edges of the window") : text.index("Checks\n")]
        advice = text[text.index("What to do") : text.index("Notes\n")]
        return self.console(f"{text.splitlines()[0]}\n...\n{chart}...\n\n{edges}...\n\n{advice}")

    def raw(self) -> str:
        """What the program says of the raw traverse's corrections, and its total drag."""
        folder = self.folder / "raw_traverse"
        folder.mkdir(exist_ok=True)
        for name in ("survey.toml", "traverse.csv", "probe.toml", "calibration.csv"):
            (folder / name).write_bytes((RAW_SAMPLE / name).read_bytes())
        text = self.run("reduce", "raw_traverse/survey.toml", "--overwrite").replace(" --overwrite", "")
        drag = next(line for line in text.splitlines() if line.startswith("total drag"))
        notes = text[text.index("Notes\n") : text.index(" - 5095 points")]
        return self.console(f"{text.splitlines()[0]}\n...\n{drag}\n...\n{notes}...")

    def cut(self) -> str:
        """What the program says of the same survey without its starboard end, without heading and notes."""
        text = self.run("reduce", "cut.toml", "--draws", "100", "--overwrite", status=1).replace(" --overwrite", "")
        command = text.splitlines()[0]
        rows = text[text.index("\n\n") : text.index("Comparison")]
        checks = text[text.index("Checks\n") : text.index("Notes\n")]
        return self.console(f"{command}\n...{rows}...\n\n{checks}")

    def truth(self) -> str:
        """The ledger of the sample survey beside its exact rows."""
        ledger = json.loads((self.folder / "survey-ledger" / "ledger.json").read_text("utf-8"))
        exact = json.loads((SAMPLE / "truth.json").read_text("utf-8"))["rows"]
        lines = []
        for row in ledger["rows"]:
            true = exact[row["name"]]["value"]
            miss = row["value"] - true
            lines.append(
                [
                    f"`{row['name']}`",
                    f"{row['value']:.4g}",
                    f"{row['expanded_uncertainty']:.2g}",
                    f"{true:.4g}",
                    f"{miss / row['expanded_uncertainty']:+.1f}",
                ]
            )
        return table(["row", "ledger", "U95", "truth", "miss / U95"], lines)


#: Parts that need no reduction.
TABLES: dict[str, Callable[[], str]] = {
    "differences": differences,
    "solve": solve,
    "estimates": estimates,
    "station": station,
    "noise": noise,
}
#: Parts that come from the sample survey, in the order in which they are made.
OUTPUTS: dict[str, Callable[[Sample], str]] = {
    "inspect": Sample.inspected,
    "inspect cut": Sample.inspected_cut,
    "reduce": Sample.reduced,
    "raw": Sample.raw,
    "cut": Sample.cut,
    "truth": Sample.truth,
}


def blocks() -> dict[str, str]:
    """The measured parts as they stand in the pages, by name."""
    found = {}
    for page in sorted(DOCS.glob("*.md")):
        for match in BLOCK.finditer(page.read_text("utf-8")):
            found[match["name"]] = match["body"]
    return found


def main() -> None:
    """Write every measured part into its page."""
    fresh = {name: make() for name, make in TABLES.items()}
    with tempfile.TemporaryDirectory() as folder:
        sample = Sample(Path(folder))
        fresh |= {name: make(sample) for name, make in OUTPUTS.items()}
    for page in sorted(DOCS.glob("*.md")):
        text = page.read_text("utf-8")
        new = BLOCK.sub(lambda match: f"{match[1]}{fresh[match['name']]}{match[4]}", text)
        if new != text:
            page.write_text(new, "utf-8", newline="\n")


if __name__ == "__main__":
    main()
