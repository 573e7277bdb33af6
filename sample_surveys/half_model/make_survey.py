"""Make the data of the sample survey: ``python make_survey.py`` rewrites the two tables and truth.json beside it.

An invented tunnel test: a half model of 0.75 m on the port wall of a closed test section 1.15 m wide and 0.90 m high,
traversed 1.1 m behind its trailing edge, and once more without the model. The flow comes from `wakeledger.synthetic`,
with the images of the wake in all walls, so every row of the ledger is known exactly; truth.json holds them. The errors
put in are those that survey.toml and empty.toml declare.
"""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.names import ROWS
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import EmptyTunnel, GaussianElements, GaussianLosses, RectangularDuct, TunnelWake
from wakeledger.synthetic.loadings import shed, straight_edge
from wakeledger.synthetic.losses import sheet_losses, tip_cores
from wakeledger.synthetic.recordings import Errors, Positions, Recording, grid_positions, record
from wakeledger.synthetic.rollup import Sheet, roll_up

SEED = 2231
REFERENCE = Reference(speed=55.0, density=1.165, static_pressure=98_900.0)
#: Of the whole configuration, as in the survey file.
AREA, SPAN, CHORD = 0.31, 1.5, 0.21
STATION = 1.1
SECTION = RectangularDuct((-1.15, 1.15), (-0.45, 0.45))
#: What the model's volume adds to the speed, and what the empty section's pressure does to the half model.
SOLID, BUOYANCY = 0.0055, 0.20
COLUMNS = {
    "y": ("y", 1e3, 0),
    "z": ("z", 1e3, 0),
    "u": ("u", 1.0, 2),
    "v": ("v", 1.0, 3),
    "w": ("w", 1.0, 3),
    "total_pressure": ("H", 1.0, 1),
    "static_pressure": ("p", 1.0, 1),
}
#: Random errors of every point; of the systematic ones the value that they happened to take. The probe and the
#: transducers are the same in both runs.
NOISE = {"u": 0.10, "v": 0.10, "w": 0.10, "total_pressure": 2.0, "static_pressure": 2.5}
ERRORS = Errors(random=NOISE, systematic={"total_pressure": 1.5, "static_pressure": -2.0}, pitch=np.deg2rad(0.12))


def tunnel(*, thickness: float) -> EmptyTunnel:
    """The stream without the model: upflow, a boundary layer on the wall, a vortex in its corner, a screen's seam."""
    return EmptyTunnel(
        upflow=0.22,
        losses=GaussianLosses(np.array([0.47]), np.array([0.02]), np.array([0.12]), np.array([0.05])),
        layer_loss=820.0,
        layer_thickness=thickness,
        vortices=GaussianElements(np.array([0.11]), np.array([-0.21]), np.array([0.09]), np.array([0.03])),
    )


def wake() -> TunnelWake:
    """The flow behind the model, whose lift thickens the wall's boundary layer a little."""
    flat = shed(
        lambda eta: np.sqrt(np.clip(1 - eta**2, 0, None)) * (1.0 - 0.25 * eta**2),
        straight_edge(SPAN),
        peak=4.1,
        core=0.028,
        n=160,
    )
    here = roll_up([Sheet(flat)], x=STATION, speed=REFERENCE.speed).elements
    losses = sheet_losses(flat, here, total=5.6, width=0.032)
    starboard = flat.y > 0
    return TunnelWake(
        REFERENCE,
        here[starboard],
        GaussianLosses(*(getattr(losses, name)[starboard] for name in ("y", "z", "strength", "width"))),
        SECTION,
        "y",
        cores=tip_cores(here)[1:],
        empty=tunnel(thickness=0.0160),
        bound_distance=STATION + 0.75 * CHORD,
    )


def places() -> Positions:
    """Where the probe stopped, in both runs: 64 columns from 7 mm off the wall, 43 rows."""
    return grid_positions(0.007 + 0.014 * np.arange(64), 0.014 * np.arange(-21, 22))


def recording(flow: TunnelWake) -> tuple[Recording, Recording]:
    """The traverse with the model, four points of it lost, and that without."""
    generator = np.random.default_rng(SEED)
    at = places()
    missing: NDArray[np.bool_] = np.zeros(at.y.size, dtype=bool)
    missing[generator.choice(at.y.size, 4, replace=False)] = True
    with_model = record(flow, at, generator=generator, errors=ERRORS, missing=missing)
    without = replace(flow, empty=tunnel(thickness=0.0155))
    return with_model, record(without.without_model, at, generator=generator, errors=ERRORS)


def truth(flow: TunnelWake) -> dict[str, object]:
    """Exact rows with their coefficients, and the tunnel's own figures."""
    exact = flow.truth.rows()
    force = REFERENCE.dynamic_pressure * AREA
    free, lift = exact["induced_drag_free_air"], exact["lift"]
    exact["span_efficiency"] = lift**2 / (np.pi * REFERENCE.dynamic_pressure * SPAN**2 * free)
    blocked = flow.truth.wake_blockage / REFERENCE.speed
    rows = {}
    for name, value in exact.items():
        unit = ROWS[name].unit
        row: dict[str, object] = {"value": round(value, 9), "unit": unit}
        if unit != "1":
            coefficient = value / (force * SPAN if unit == "N m" else force)
            row["coefficient"] = round(coefficient, 11)
            row["coefficient_corrected"] = round(coefficient / (1 + SOLID + blocked) ** 2, 11)
        rows[name] = row
    figures = {
        "wake_blockage": round(blocked, 9),
        "boundary_factor": round(
            (free - exact["induced_drag"]) * REFERENCE.dynamic_pressure * SECTION.area / lift**2, 9
        ),
    }
    about = (
        "exact rows of the flow in traverse.csv, both halves together, without its errors and the empty tunnel's flow"
    )
    return {"about": about, "rows": rows, "tunnel": figures}


def main() -> None:
    """Write the three files beside this script."""
    here = Path(__file__).resolve().parent
    flow = wake()
    for table, name in zip(recording(flow), ("traverse.csv", "empty.csv"), strict=True):
        table.write_csv(here / name, COLUMNS)
    text = json.dumps(truth(flow), indent=2)
    (here / "truth.json").write_text(text + "\n", encoding="utf-8", newline="\n")


if __name__ == "__main__":
    main()
