"""A wake as an instrument records it: points, errors, gaps, a file.

Positions come from a tensor grid, a polar traverse or anywhere; the errors put in are known in kind and size, so that
what an uncertainty budget says can be held against what was done.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from types import MappingProxyType
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array
from wakeledger.core.points import Channel, Points
from wakeledger.stream.reference import Reference
from wakeledger.synthetic.wakes import FlowState

#: What a pneumatic probe gives at each point.
PROBE_VARIABLES = ("u", "v", "w", "total_pressure", "static_pressure")
_RELATIVE_TO = MappingProxyType({"total_pressure": "total", "static_pressure": "static"})
_NONE: Mapping[str, float] = MappingProxyType({})


class Flow(Protocol):
    """What can be recorded: a stream and its state at points."""

    @property
    def reference(self) -> Reference:
        """The undisturbed stream."""

    def state(self, y: Array, z: Array) -> FlowState:
        """The flow at points, m."""


@dataclass(frozen=True)
class Positions:
    """Where the points of a survey lie, in the order in which they are taken.

    Attributes
    ----------
    y, z : ndarray, shape (n,)
        Positions, m.
    row : ndarray of int, shape (n,)
        Traverse row of each point, from 0.
    """

    y: Array
    z: Array
    row: NDArray[np.int64]


def grid_positions(y: Array, z: Array, *, serpentine: bool = False) -> Positions:
    """Points of a tensor grid, uniform or not, row after row of constant z.

    Parameters
    ----------
    y, z : ndarray, shape (ny,), (nz,)
        Axes, m.
    serpentine : bool
        Whether every second row runs back to port.

    Returns
    -------
    Positions
    """
    y, z = np.asarray(y, float), np.asarray(z, float)
    rows = np.broadcast_to(y, (z.size, y.size)).copy()
    if serpentine:
        rows[1::2] = rows[1::2, ::-1]
    return Positions(rows.ravel(), np.repeat(z, y.size), np.repeat(np.arange(z.size), y.size))


def polar_positions(radius: Array, angle: Array, *, y: float = 0.0, z: float = 0.0) -> Positions:
    """Points of a polar traverse about (y, z), one row per radius.

    Parameters
    ----------
    radius : ndarray, shape (nr,)
        Distances from the axis, m.
    angle : ndarray, shape (nt,)
        Angles from the starboard direction, rad, counter-clockwise seen from behind.
    y, z : float
        Axis of the traverse, m.

    Returns
    -------
    Positions
    """
    r, t = np.meshgrid(np.asarray(radius, float), np.asarray(angle, float), indexing="ij")
    row = np.repeat(np.arange(r.shape[0]), r.shape[1])
    return Positions(y + (r * np.cos(t)).ravel(), z + (r * np.sin(t)).ravel(), row)


def scattered_positions(
    y: tuple[float, float], z: tuple[float, float], *, n: int, generator: np.random.Generator
) -> Positions:
    """Points spread at random, evenly, over a window given by its ranges along y and z, m; all in row 0."""
    return Positions(generator.uniform(*y, n), generator.uniform(*z, n), np.zeros(n, dtype=np.int64))


@dataclass(frozen=True)
class Errors:
    """What goes wrong in a recording; all in SI, by the names of the variables.

    Attributes
    ----------
    random : mapping of str to float
        Standard deviation of an error of each point on its own.
    per_row : mapping of str to float
        Standard deviation of one error for each traverse row.
    systematic : mapping of str to float
        The error, the same at every point.
    drift : mapping of str to float
        Error growing evenly from zero at the first point to this at the last.
    pitch, yaw, roll : float
        Mounting of the probe, rad: right-handed turns about z (yaw, nose to port), then y (pitch, nose up), then x,
        each about the axes already turned. A probe mounted nose up reads upwash in a level stream.
    """

    random: Mapping[str, float] = field(default_factory=lambda: _NONE)
    per_row: Mapping[str, float] = field(default_factory=lambda: _NONE)
    systematic: Mapping[str, float] = field(default_factory=lambda: _NONE)
    drift: Mapping[str, float] = field(default_factory=lambda: _NONE)
    pitch: float = 0.0
    yaw: float = 0.0
    roll: float = 0.0

    @property
    def mounting(self) -> Array:
        """Rotation R with wind = R @ probe, shape (3, 3)."""
        (cy, sy), (cp, sp), (cr, sr) = ((np.cos(a), np.sin(a)) for a in (self.yaw, self.pitch, self.roll))
        about_z = np.array([[cy, -sy, 0], [sy, cy, 0], [0, 0, 1]])
        about_y = np.array([[cp, 0, sp], [0, 1, 0], [-sp, 0, cp]])
        about_x = np.array([[1, 0, 0], [0, cr, -sr], [0, sr, cr]])
        rotation: Array = about_z @ about_y @ about_x
        return rotation


@dataclass(frozen=True)
class Recording:
    """Points of a survey as recorded.

    Attributes
    ----------
    positions : Positions
        Where and in which order.
    values : mapping of str to ndarray, shape (n,)
        Variables in SI; pressures are differences: total pressure from the reference total pressure, static pressure
        from the reference static pressure. NaN where a point is missing.
    """

    positions: Positions
    values: Mapping[str, Array]

    def points(self) -> Points:
        """The recording as points that a reader would hand on; line numbers as in the file `write_csv` makes."""
        channels = {name: Channel(value, relative_to=_RELATIVE_TO.get(name)) for name, value in self.values.items()}
        at = self.positions
        line = np.arange(2, at.y.size + 2, dtype=np.int64)
        return Points(at.y, at.z, channels, line=line, source="recording", row=at.row)

    def write_csv(self, path: Path, columns: Mapping[str, tuple[str, float, int]]) -> None:
        """Write a table; the same recording always gives the same bytes.

        Parameters
        ----------
        path : Path
            File to write.
        columns : mapping of str to (str, float, int)
            For y, z, row and each variable wanted, in the order of the columns: the heading, what to multiply the SI
            value by, and the number of decimals. Missing values become empty cells.
        """
        data = {"y": self.positions.y, "z": self.positions.z, "row": self.positions.row, **self.values}
        cells = []
        for name, (_, factor, decimals) in columns.items():
            # Adding zero turns a rounded −0 into 0.
            rounded = np.round(np.asarray(data[name], float) * factor, decimals) + 0.0
            cells.append(["" if np.isnan(value) else f"{value:.{decimals}f}" for value in rounded])
        heading = ",".join(heading for heading, _, _ in columns.values())
        lines = [heading, *(",".join(cell) for cell in zip(*cells, strict=True))]
        path.write_text("\n".join(lines) + "\n", encoding="utf-8", newline="\n")


def record(
    wake: Flow,
    positions: Positions,
    *,
    generator: np.random.Generator,
    errors: Errors | None = None,
    missing: NDArray[np.bool_] | None = None,
    variables: tuple[str, ...] = PROBE_VARIABLES,
) -> Recording:
    """Record a wake at given points.

    Parameters
    ----------
    wake : Flow
        A wake, or a tunnel without its model.
    positions : Positions
        Where.
    generator : numpy.random.Generator
        Source of the random errors.
    errors : Errors, optional
        What goes wrong; nothing if left out.
    missing : ndarray of bool, shape (n,), optional
        Points whose values were lost.
    variables : tuple of str
        Names of the fields of `FlowState` to record.

    Returns
    -------
    Recording

    Raises
    ------
    ValueError
        If an error is given for a variable that is not recorded.
    """
    wrong = Errors() if errors is None else errors
    known = set(variables)
    for kind in (wrong.random, wrong.per_row, wrong.systematic, wrong.drift):
        if not known.issuperset(kind):
            raise ValueError(f"errors name {sorted(set(kind) - known)}, recorded are {sorted(known)}")
    state = wake.state(positions.y, positions.z)
    probe = wrong.mounting.T @ np.stack([state.u, state.v, state.w])
    fields = {**vars(state), "u": probe[0], "v": probe[1], "w": probe[2]}
    fields["total_pressure"] = state.total_pressure - wake.reference.total_pressure
    fields["static_pressure"] = state.static_pressure - wake.reference.static_pressure
    progress = np.linspace(0.0, 1.0, positions.y.size)
    values = {}
    for name in variables:
        value = np.array(fields[name], float)
        value += wrong.systematic.get(name, 0.0) + wrong.drift.get(name, 0.0) * progress
        value += wrong.random.get(name, 0.0) * generator.standard_normal(value.size)
        row_errors = generator.standard_normal(int(positions.row.max()) + 1)
        value += wrong.per_row.get(name, 0.0) * row_errors[positions.row]
        if missing is not None:
            value[missing] = np.nan
        values[name] = value
    return Recording(positions, MappingProxyType(values))
