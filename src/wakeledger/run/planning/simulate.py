"""A survey that has not been made: its points and its survey file, in memory."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import ValidationError

from wakeledger.core.errors import SurveyError
from wakeledger.core.grid import Array
from wakeledger.core.points import Channel, Points
from wakeledger.run.config import Survey
from wakeledger.run.config.errors import survey_error
from wakeledger.run.config.uncertainty import allowed_targets
from wakeledger.run.load import SurveyInput
from wakeledger.run.planning.flow import ExpectedFlow
from wakeledger.run.planning.instrument import Probe

#: Sources of a planned survey, by name.
VELOCITY, TOTAL, STATIC = "velocity noise", "total pressure noise", "static pressure noise"
DRIFT, ANGLES = "drift of the reference", "flow angles"
DYNAMIC, DENSITY = "dynamic pressure of the stream", "density of the air"
NOISES = (VELOCITY, TOTAL, STATIC)
#: What is the same at every point of a survey, with the key of ``[plan]`` that says how large it is.
SYSTEMATIC: Mapping[str, str] = MappingProxyType(
    {ANGLES: "angle_accuracy", DYNAMIC: "reference_accuracy", DENSITY: "density_accuracy"}
)

_COLUMNS = {
    "y": ("m", {}),
    "z": ("m", {}),
    "u": ("m/s", {}),
    "v": ("m/s", {}),
    "w": ("m/s", {}),
    "total_pressure": ("Pa", {"relative_to": "total"}),
    "static_pressure": ("Pa", {"relative_to": "static"}),
}
#: How the input that says most of the dynamic pressure, or the density, follows it: relative changes.
_OF_DYNAMIC = {"dynamic_pressure": 1.0, "speed": 0.5, "mach": 0.5, "calibrated_airspeed": 0.5}
_OF_DENSITY = {"density": 1.0, "temperature": 1.0}


@dataclass(frozen=True)
class Window:
    """Where the points of a survey stand.

    Attributes
    ----------
    spacing : float
        Distance of the points along y and z, m.
    margin : float
        From the wake to the edge of the window, m.
    y, z : ndarray, shape (ny,), (nz,)
        Lines of the grid, m, in the middle of what they may be shifted by.
    rows_along : {"y", "z"}
        Along which the probe goes to and fro.
    """

    spacing: float
    margin: float
    y: Array
    z: Array
    rows_along: str = "y"

    @property
    def points(self) -> int:
        """Number of points."""
        return int(self.y.size * self.z.size)

    @property
    def path(self) -> float:
        """Way of a probe that goes to and fro, m."""
        # Every point but the first is one spacing from the one before.
        return (self.points - 1) * self.spacing

    def lines(self, shift: tuple[float, float]) -> tuple[Array, Array]:
        """Lines shifted by parts of the spacing."""
        return self.y + shift[0] * self.spacing, self.z + shift[1] * self.spacing


def window_of(flow: ExpectedFlow, spacing: float, margin: float, *, rows_along: str = "y") -> Window | None:
    """The window that reaches so far beyond the wake; None where the flow is not known there.

    Parameters
    ----------
    flow : ExpectedFlow
        The flow.
    spacing, margin : float
        m.
    rows_along : {"y", "z"}
        Along which the probe goes to and fro.

    Returns
    -------
    Window or None
    """
    y0, y1, z0, z1 = flow.box
    wanted = (y0 - margin, y1 + margin), (z0 - margin, z1 + margin)
    limits = (None, None) if flow.limits is None else (flow.limits[:2], flow.limits[2:])
    lines: list[Array] = []
    for axis, span, limit in zip("yz", wanted, limits, strict=True):
        if flow.reflection == axis:
            found = _from_plane(flow.nearest, span[1], spacing, limit)
        else:
            found = _between(*span, spacing, limit)
        if found is None:
            return None
        lines.append(found)
    y, z = lines
    half = spacing / 2
    if not flow.holds(np.array([y[0] - half, y[-1] + half]), np.array([z[0] - half, z[-1] + half])):
        return None
    return Window(spacing, margin, y, z, rows_along)


def _between(low: float, high: float, spacing: float, limit: tuple[float, float] | None) -> Array | None:
    """Lines that reach from below one place to beyond another, as far as the limits let them; None beyond these."""
    steps = math.ceil((high - low) / spacing * (1 - 1e-9))
    if limit is not None:
        least, most = limit
        if low < least - 0.5 * spacing or high > most + 0.5 * spacing:
            return None
        steps = min(steps, math.floor((most - least) / spacing + 1e-9))
    places = (low + high) / 2 + spacing * (np.arange(steps + 1) - steps / 2)
    if limit is not None:
        places += max(0.0, least - float(places[0])) - max(0.0, float(places[-1]) - most)
    return places


def _from_plane(nearest: float, high: float, spacing: float, limit: tuple[float, float] | None) -> Array | None:
    """Lines from a reflection plane on, as a lattice of both sides has them, and none too near."""
    from_limit = 0.0 if limit is None else max(limit[0], 0.0)
    first = math.ceil(2 * max(nearest, from_limit) / spacing - 1e-9) * spacing / 2
    if limit is not None and high > limit[1] + 0.5 * spacing:
        return None
    steps = math.ceil((high - first) / spacing * (1 - 1e-9))
    if limit is not None:
        steps = min(steps, math.floor((limit[1] - first) / spacing + 1e-9))
    return first + spacing * np.arange(steps + 1)


def shift_of(flow: ExpectedFlow, window: Window, part: tuple[float, float]) -> tuple[float, float]:
    """By how much of a spacing a survey's lines happen to stand elsewhere.

    Parameters
    ----------
    flow : ExpectedFlow
        The flow; lines stay within what is known of it.
    window : Window
        The window.
    part : (float, float)
        Along y and z, between 0 and 1.

    Returns
    -------
    (float, float)
        Between -0.5 and 0.5 of the spacing. Across a reflection plane 0 or 0.5: there the lines stand as a lattice of
        both sides has them.
    """
    shift = []
    for number, (axis, lines) in enumerate(zip("yz", (window.y, window.z), strict=True)):
        mirrored = flow.reflection == axis
        one = (0.5 if part[number] >= 0.5 else 0.0) if mirrored else part[number] - 0.5
        if flow.limits is not None:
            below = (float(lines[0]) - flow.limits[2 * number]) / window.spacing
            above = (flow.limits[2 * number + 1] - float(lines[-1])) / window.spacing
            if mirrored:
                one = one if one <= above + 1e-9 else 0.0
            else:
                one = float(np.clip(one, -max(below, 0.0), max(above, 0.0)))
        shift.append(one)
    return shift[0], shift[1]


@dataclass(frozen=True, eq=False)
class Places:
    """Points of one survey and what a probe without errors reads there.

    Attributes
    ----------
    y, z : ndarray, shape (n,)
        m.
    row : ndarray of int, shape (n,)
        Traverse row.
    readings : mapping of str to ndarray, shape (n,)
        SI.
    """

    y: Array
    z: Array
    row: NDArray[np.int64]
    readings: Mapping[str, Array]

    def points(self, errors: Mapping[str, Array] | None = None) -> Points:
        """The points as a reader would hand them on, with errors added."""
        wrong = {} if errors is None else errors
        relative = {"total_pressure": "total", "static_pressure": "static"}
        channels = {
            name: Channel(value + wrong.get(name, 0.0), relative_to=relative.get(name))
            for name, value in self.readings.items()
        }
        line = np.arange(2, self.y.size + 2, dtype=np.int64)
        return Points(self.y, self.z, channels, line=line, source="plan", row=self.row)


def visit(flow: ExpectedFlow, window: Window, shift: tuple[float, float]) -> Places:
    """What is read in a window."""
    y, z = window.lines(shift)
    yy, zz = (np.ascontiguousarray(field.ravel()) for field in np.meshgrid(y, z))
    along_y = window.rows_along == "y"
    row = np.repeat(np.arange(z.size), y.size) if along_y else np.tile(np.arange(y.size), z.size)
    return Places(yy, zz, row.astype(np.int64), flow.state(yy, zz))


def noise_of(probe: Probe, count: int, generator: np.random.Generator) -> dict[str, Array]:
    """Errors of one probe that differ from point to point."""
    sizes = {
        "u": probe.velocity,
        "v": probe.velocity,
        "w": probe.velocity,
        "total_pressure": probe.total_pressure,
        "static_pressure": probe.static_pressure,
    }
    return {name: size * generator.standard_normal(count) for name, size in sizes.items()}


@dataclass(frozen=True)
class Accuracies:
    """Standard uncertainties beside a probe's noise.

    Attributes
    ----------
    angle_accuracy : float
        Of pitch and yaw, rad.
    reference_accuracy, density_accuracy : float
        Parts of the stream's dynamic pressure and density.
    reference_drift : float
        Of the reference total pressure from row to row, Pa.
    """

    angle_accuracy: float = 0.0
    reference_accuracy: float = 0.0
    density_accuracy: float = 0.0
    reference_drift: float = 0.0


def declared(flow: ExpectedFlow, probe: Probe, accuracies: Accuracies) -> Survey:
    """The survey file of a planned survey.

    Parameters
    ----------
    flow : ExpectedFlow
        The flow.
    probe, accuracies
        Its errors; those that are zero are left out.

    Returns
    -------
    Survey

    Raises
    ------
    SurveyError
        If the stream is not given by what the accuracies are of.
    """
    given = flow.tables["reference"]
    sources: list[dict[str, Any]] = []

    def add(name: str, applies_to: list[str], effect: str, size: float, unit: str) -> None:
        if size > 0:
            sources.append(
                {"name": name, "applies_to": applies_to, "effect": effect, "standard_uncertainty": f"{size!r} {unit}"}
            )

    add(VELOCITY, ["plane.u", "plane.v", "plane.w"], "random", probe.velocity, "m/s")
    add(TOTAL, ["plane.total_pressure"], "random", probe.total_pressure, "Pa")
    add(STATIC, ["plane.static_pressure"], "random", probe.static_pressure, "Pa")
    add(DRIFT, ["plane.total_pressure"], "per_row", accuracies.reference_drift, "Pa")
    add(ANGLES, ["angle.pitch", "angle.yaw"], "systematic", accuracies.angle_accuracy, "rad")
    for name, key, shares in ((DYNAMIC, "reference_accuracy", _OF_DYNAMIC), (DENSITY, "density_accuracy", _OF_DENSITY)):
        size = float(getattr(accuracies, key))
        target = next((one for one in shares if one in given), None)
        if size > 0 and target is None:
            raise SurveyError(
                f"{key} is given, and none of {', '.join(shares)} in [reference]",
                place=f"[plan] {key}",
                remedy=f"give {next(iter(shares))} in [reference], or leave {key} out",
            )
        if target is not None:
            add(name, [f"reference.{target}"], "systematic", 100 * size * shares[target], "%")
    raw: dict[str, Any] = {
        "title": "planned survey",
        **{name: dict(table) for name, table in flow.tables.items()},
        "plane": {
            "file": "planned.csv",
            "station": f"{flow.station!r} m",
            "primary": "total_pressure",
            "columns": {name: {"column": name, "unit": unit, **more} for name, (unit, more) in _COLUMNS.items()},
        },
        "uncertainty": {"source": sources},
    }
    try:
        return Survey.model_validate(raw, context={"targets": allowed_targets(raw)})
    except ValidationError as error:
        raise survey_error(error, raw, "plan") from error


def simulated(survey: Survey, points: Points) -> SurveyInput:
    """A survey in memory, as if it had been read."""
    return SurveyInput(survey, points, {})
