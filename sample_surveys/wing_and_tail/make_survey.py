"""Make the data of the sample survey: ``python make_survey.py`` rewrites traverse.csv and truth.json beside it.

An invented tunnel test: a model with a wing of 1.2 m span and a tailplane that carries a download, traversed with a
multi-hole probe 1.5 m behind the wing's trailing edge. The flow comes from `wakeledger.synthetic`, so every row of the
ledger is known exactly; truth.json holds them. The errors put in are those that survey.toml declares.
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np

from wakeledger.core.names import ROWS
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import SyntheticWake, wing_and_tail_wake
from wakeledger.synthetic.recordings import Errors, Recording, grid_positions, record

SEED = 117
REFERENCE = Reference(speed=42.0, density=1.185, static_pressure=100_600.0)
AREA, SPAN, CHORD = 0.18, 1.2, 0.15
STATION = 1.5
SPACING = 0.012
COLUMNS = {
    "y": ("Y", 1e3, 1),
    "z": ("Z", 1e3, 1),
    "u": ("U", 1.0, 3),
    "v": ("V", 1.0, 3),
    "w": ("W", 1.0, 3),
    "total_pressure": ("pt", 1.0, 2),
    "static_pressure": ("ps", 1.0, 2),
}
#: Random errors and, for the systematic ones, the value that they happened to take in this run.
ERRORS = Errors(
    random={"u": 0.17, "v": 0.17, "w": 0.17, "total_pressure": 1.6, "static_pressure": 2.1},
    systematic={"total_pressure": 0.2, "static_pressure": -0.7},
    pitch=np.deg2rad(0.15),
    yaw=np.deg2rad(-0.06),
)


def wake() -> SyntheticWake:
    """The flow behind the model: an aileron slightly down on the port side, the tailplane trimming the model."""
    return wing_and_tail_wake(
        REFERENCE,
        loading=lambda eta: np.sqrt(np.clip(1 - eta**2, 0, None)) * (1 - 0.04 * eta),
        span=SPAN,
        peak=2.11,
        core=0.024,
        x=STATION,
        bound_distance=STATION + 0.75 * CHORD,
        tail_bound_distance=STATION - 0.55 + 0.06,
    )


def recording(flow: SyntheticWake) -> Recording:
    """The traverse: 65 rows of 121 points, with a few points lost, some of them at the edge of the starboard core."""
    generator = np.random.default_rng(SEED)
    at = grid_positions(SPACING * np.arange(-60, 61), SPACING * np.arange(-28, 37))
    missing = np.zeros(at.y.size, dtype=bool)
    missing[generator.choice(at.y.size, 9, replace=False)] = True
    assert flow.cores is not None
    core_y, core_z = float(flow.cores.y[1]), float(flow.cores.z[1])
    edge = np.hypot(at.y - (core_y + 0.024), at.z - (core_z + 0.018))
    missing[np.argsort(edge)[:3]] = True
    return record(flow, at, generator=generator, errors=ERRORS, missing=missing)


def truth(flow: SyntheticWake) -> dict[str, object]:
    """Exact rows with their coefficients."""
    exact = flow.truth.rows()
    exact["span_efficiency"] = exact["lift"] ** 2 / (
        np.pi * REFERENCE.dynamic_pressure * SPAN**2 * exact["induced_drag"]
    )
    force = REFERENCE.dynamic_pressure * AREA
    rows = {}
    for name, value in exact.items():
        unit = ROWS[name].unit
        row: dict[str, object] = {"value": round(value, 9), "unit": unit}
        if unit != "1":
            row["coefficient"] = round(value / (force * SPAN if unit == "N m" else force), 11)
        rows[name] = row
    return {"about": "exact rows of the flow in traverse.csv, without its errors", "rows": rows}


def main() -> None:
    """Write both files beside this script."""
    here = Path(__file__).resolve().parent
    flow = wake()
    recording(flow).write_csv(here / "traverse.csv", COLUMNS)
    text = json.dumps(truth(flow), indent=2)
    (here / "truth.json").write_text(text + "\n", encoding="utf-8", newline="\n")


if __name__ == "__main__":
    main()
