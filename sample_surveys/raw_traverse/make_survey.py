"""Make the data of this sample survey: ``python make_survey.py`` rewrites three files beside it.

An invented tunnel test: a wing of 1.1 m span, traversed to and fro with a five-hole probe 0.9 m behind it.
What is in the table is what the data system wrote: hole pressures against the static pressure of the moment, with the
zeros of their transducers, the stream's own readings, and a visit to one quiet place after every five rows. The probe
was calibrated before, and hangs upside down. The flow comes from `wakeledger.synthetic`, so every row of the ledger is
known exactly; truth.json holds them.
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np

from wakeledger.core.names import ROWS
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import SyntheticWake, wing_wake
from wakeledger.synthetic.probes import SphereProbe, TraverseConditions, record_traverse, sphere_probe, with_revisits
from wakeledger.synthetic.recordings import Recording, grid_positions

SEED = 64
REFERENCE = Reference(speed=40.0, density=1.19, static_pressure=100_900.0)
AREA, SPAN, CHORD = 0.165, 1.1, 0.15
STATION = 0.9
SPACING = 0.012
#: The place that is visited again, and the number of rows from one visit to the next.
QUIET = (-0.552, 0.24)
EVERY = 5
HOLES = ("p1", "p2", "p3", "p4", "p5")
COLUMNS = {
    "time": ("t", 1.0, 1),
    "y": ("Y", 1e3, 1),
    "z": ("Z", 1e3, 1),
    **{hole: (hole.upper(), 1.0, 2) for hole in HOLES},
    "reference_dynamic_pressure": ("q", 1.0, 2),
    "reference_static_pressure": ("ps", 1e-3, 4),
}
CALIBRATION = ("pitch", "yaw", *HOLES, "total_pressure", "static_pressure")
#: What goes wrong; survey.toml states the mounting, the zeros and the size of the noise, and not the rest.
CONDITIONS = TraverseConditions(
    pitch=np.deg2rad(-1.5),
    roll=np.pi,
    head_pitch=np.deg2rad(0.09),
    head_yaw=np.deg2rad(-0.05),
    point_time=1.2,
    row_time=4.0,
    displacement=0.13,
    backlash=0.6e-3,
    noise=0.6,
    zeros_before=(3.1, -1.4, 0.6, 2.2, -0.9),
    zeros_after=(3.3, -1.3, 0.5, 2.5, -1.0),
    stream_drift=0.012,
    static_drift=-65.0,
    reference_noise=0.4,
    reference_drift=3.0,
)


def wake() -> SyntheticWake:
    """The flow behind the wing, its ailerons a little apart."""
    return wing_wake(
        REFERENCE,
        loading=lambda eta: np.sqrt(np.clip(1 - eta**2, 0, None)) * (1 + 0.05 * eta),
        span=SPAN,
        peak=1.95,
        core=0.024,
        x=STATION,
        bound_distance=STATION + 0.75 * CHORD,
    )


def probe() -> SphereProbe:
    """The probe: no hole where the drawing has it, and none as sensitive as the next."""
    return sphere_probe(5, displaced=0.02, unequal=0.015, generator=np.random.default_rng(SEED))


def recording(flow: SyntheticWake) -> Recording:
    """The traverse: 45 rows of 113 points and the visits between them, seven points lost."""
    generator = np.random.default_rng(SEED + 1)
    grid = grid_positions(SPACING * np.arange(-56, 57), SPACING * np.arange(-22, 23), serpentine=True)
    at = with_revisits(grid, y=QUIET[0], z=QUIET[1], every=EVERY)
    raw = record_traverse(flow, at, probe(), generator=generator, conditions=CONDITIONS)
    lost = generator.choice(at.y.size, 7, replace=False)
    values = dict(raw.values)
    for hole in HOLES:
        values[hole] = values[hole].copy()
        values[hole][lost] = np.nan
    return Recording(at, values)


def calibration_text() -> str:
    """The calibration table: every 5 degrees to 30 in pitch and yaw, one reading spoilt by a leaking hole."""
    side = np.arange(-30, 31, 5)
    pitch, yaw = (part.ravel() for part in np.meshgrid(side, side, indexing="ij"))
    table = probe().calibration_table(
        np.deg2rad(pitch),
        np.deg2rad(yaw),
        dynamic_pressure=1200.0,
        noise=0.6,
        generator=np.random.default_rng(SEED + 2),
    )
    table["pitch"], table["yaw"] = pitch, yaw
    spoilt = np.flatnonzero((pitch == 10) & (yaw == -15))
    table["p3"][spoilt] -= 45.0
    rows = zip(*(np.round(table[name], 2) + 0.0 for name in CALIBRATION), strict=True)
    lines = [",".join(CALIBRATION), *(",".join(f"{value:g}" for value in row) for row in rows)]
    return "\n".join(lines) + "\n"


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
    """Write the files beside this script."""
    here = Path(__file__).resolve().parent
    flow = wake()
    recording(flow).write_csv(here / "traverse.csv", COLUMNS)
    (here / "calibration.csv").write_text(calibration_text(), encoding="utf-8", newline="\n")
    text = json.dumps(truth(flow), indent=2)
    (here / "truth.json").write_text(text + "\n", encoding="utf-8", newline="\n")


if __name__ == "__main__":
    main()
