"""Make the data of the sample survey: ``python make_survey.py`` rewrites traverse.csv and truth.json beside it.

An invented tunnel test: a laminar section of 0.5 m chord stands upright between floor and ceiling, and a rake tube with
a static tube beside it is traversed across its wake, 0.35 chords behind the trailing edge. The wake is given far
downstream, where the pressure is the stream's and the drag is plain; each stream tube is then carried back to the rake,
where the section's own flow has another pressure. truth.json holds the drag. The errors put in are those that
survey.toml declares.
"""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

Profile = NDArray[np.float64]

SEED = 58
SPEED, DENSITY, PRESSURE = 36.0, 1.18, 99_400.0
CHORD = 0.5
DYNAMIC_PRESSURE = 0.5 * DENSITY * SPEED**2
#: Random errors and, for the systematic ones, the value that they happened to take in this run.
NOISE = {"total": 2.7, "static": 2.3}
ZEROS = {"total": 1.6, "static": -1.9}
#: Points that the data system lost.
LOST = (29, 58)


@dataclass(frozen=True)
class Wake:
    """The flow at the rake on a fine grid.

    Attributes
    ----------
    y : ndarray
        Distance to starboard, m; the suction side is to starboard.
    total, static : ndarray
        Pressures above the stream's static pressure, Pa.
    drag : float
        Drag per unit span, N/m.
    """

    y: Profile
    total: Profile
    static: Profile
    drag: float


def wake() -> Wake:
    """The wake: thicker on the suction side, and displaced by the section's lift."""
    far = np.linspace(-0.25, 0.25, 20_001)
    deficit = np.where(far > 0, np.exp(-((far / 0.0150) ** 2)), np.exp(-((far / 0.0105) ** 2)))
    speed = SPEED * (1 - 0.125 * deficit)
    total = 0.5 * DENSITY * speed**2
    drag = float(np.trapezoid(DENSITY * speed * (SPEED - speed), far))
    static = DYNAMIC_PRESSURE * (0.034 - 0.05 * far) * np.exp(-((far / 0.35) ** 2))
    squeezed = speed / np.sqrt(2 * (total - static) / DENSITY)
    across = np.concatenate([[0.0], np.cumsum(0.5 * (squeezed[1:] + squeezed[:-1]) * np.diff(far))])
    return Wake(across - across[np.argmin(np.abs(far))] + 0.012, total, static, drag)


def places() -> Profile:
    """Where the rake stopped: every 2 mm across the wake, further apart beside it, one place measured twice."""
    inner = 0.012 + 0.002 * np.arange(-22, 27)
    outer = 0.006 * np.arange(1, 13)
    return np.concatenate([inner[0] - outer[::-1], inner, inner[-1] + outer, [inner[24]]])


def recording(flow: Wake) -> dict[str, Profile]:
    """What was written down: positions in mm, pressures in Pa above the stream's."""
    generator = np.random.default_rng(SEED)
    y = places()
    total = np.interp(y, flow.y, flow.total) + generator.normal(ZEROS["total"], NOISE["total"], y.size)
    static = np.interp(y, flow.y, flow.static) + generator.normal(ZEROS["static"], NOISE["static"], y.size)
    total[list(LOST)] = np.nan
    return {"Y": 1e3 * y, "pt": total - DYNAMIC_PRESSURE, "ps": static}


def truth(flow: Wake) -> dict[str, object]:
    """The exact row with its coefficient."""
    coefficient = flow.drag / (DYNAMIC_PRESSURE * CHORD)
    row = {"value": round(flow.drag, 9), "unit": "N m-1", "coefficient": round(coefficient, 11)}
    return {"about": "exact row of the flow in traverse.csv, without its errors", "rows": {"section_drag": row}}


def main() -> None:
    """Write both files beside this script."""
    here = Path(__file__).resolve().parent
    flow = wake()
    table = recording(flow)
    rows = zip(*table.values(), strict=True)
    lines = (",".join("" if np.isnan(value) else f"{value:.2f}" for value in row) for row in rows)
    (here / "traverse.csv").write_text("\n".join([",".join(table), *lines]) + "\n", encoding="utf-8", newline="\n")
    text = json.dumps(truth(flow), indent=2)
    (here / "truth.json").write_text(text + "\n", encoding="utf-8", newline="\n")


if __name__ == "__main__":
    main()
