"""A spherical multi-hole probe in potential flow, and the raw traverse it takes of a wake.

The pressure at a hole whose outward normal makes the angle θ with the oncoming stream is p + (H − p)(1 − (9/4) sin²θ),
that of an ideal sphere. Everything that goes wrong on the way from the flow to the file is put in exactly and is known:
mounting, shear, backlash, tubing lag, drifting zeros, a drifting stream and drifting reference readings.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from types import MappingProxyType

import numpy as np
from numpy.typing import ArrayLike, NDArray

from wakeledger.core.grid import Array
from wakeledger.core.points import Channel, Points
from wakeledger.synthetic.recordings import Errors, Positions, Recording
from wakeledger.synthetic.wakes import SyntheticWake

#: Directions in which the outer holes lie, seen from behind, degrees counter-clockwise from starboard: p2, p3, ...
HOLE_DIRECTIONS: Mapping[int, tuple[float, ...]] = MappingProxyType(
    {5: (180.0, 0.0, 270.0, 90.0), 7: (90.0, 150.0, 210.0, 270.0, 330.0, 30.0)}
)
_SPHERE = 9 / 4
#: Points at which the pressure is followed between two recorded ones of a continuous traverse.
_SUBSTEPS = 8
#: Shear below this many reference speeds per metre of tip diameter does not displace the probe.
_NO_SHEAR = 1e-6


def direction_of(pitch: ArrayLike, yaw: ArrayLike) -> Array:
    """Unit velocity vector (x, y, z) from pitch = atan2(w, u) and yaw = asin(v/|V|), rad, shape (3, ...)."""
    pitch, yaw = np.broadcast_arrays(np.asarray(pitch, float), np.asarray(yaw, float))
    return np.stack([np.cos(yaw) * np.cos(pitch), np.sin(yaw), np.cos(yaw) * np.sin(pitch)])


@dataclass(frozen=True, eq=False)
class SphereProbe:
    """A sphere with a centre hole and a ring of outer holes.

    Attributes
    ----------
    normals : ndarray, shape (holes, 3)
        Outward unit normals of p1, p2, ... in probe axes (x downstream, so the centre hole's is about (−1, 0, 0)).
    sensitivity : ndarray, shape (holes,)
        Factor on (9/4) sin²θ of each hole, 1 for the ideal one.
    tip_diameter : float
        m.
    mach_effect : float
        The factor on (9/4) sin²θ grows by 1 + mach_effect M²; 0 for coefficients that do not depend on Mach number.
    """

    normals: Array
    sensitivity: Array
    tip_diameter: float = 3.2e-3
    mach_effect: float = 0.0

    @property
    def holes(self) -> int:
        """Number of holes."""
        return int(self.normals.shape[0])

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the holes, p1 the centre."""
        return tuple(f"p{k + 1}" for k in range(self.holes))

    def coefficients(self, direction: Array, *, mach: ArrayLike = 0.0) -> Array:
        """Pressure coefficient (p_hole − p)/(H − p) of every hole.

        Parameters
        ----------
        direction : ndarray, shape (3, ...)
            Velocity in probe axes; its length does not matter.
        mach : array_like, shape (...)
            Local Mach number.

        Returns
        -------
        ndarray, shape (holes, ...)
        """
        vector = np.asarray(direction, float)
        along = -np.einsum("hi,i...->h...", self.normals, vector / np.linalg.norm(vector, axis=0))
        expand = (slice(None), *(None,) * (along.ndim - 1))
        factor = _SPHERE * self.sensitivity[expand] * (1 + self.mach_effect * np.square(mach))
        return np.asarray(1 - factor * (1 - along**2))

    def pressures(self, direction: Array, total: ArrayLike, static: ArrayLike, *, mach: ArrayLike = 0.0) -> Array:
        """Hole pressures p + (H − p) C, Pa, shape (holes, ...), on the zero of `total` and `static`."""
        static = np.asarray(static, float)
        return np.asarray(static + (np.asarray(total, float) - static) * self.coefficients(direction, mach=mach))

    def calibration_table(
        self,
        pitch: Array,
        yaw: Array,
        *,
        dynamic_pressure: float = 1000.0,
        static_pressure: float = 0.0,
        mach: ArrayLike = 0.0,
        noise: float = 0.0,
        generator: np.random.Generator | None = None,
    ) -> dict[str, Array]:
        """What a calibration of this probe records.

        Parameters
        ----------
        pitch, yaw : ndarray, shape (n,)
            Flow angles in probe axes, rad, in any order and at any places.
        dynamic_pressure, static_pressure : float
            H − p and p of the calibration stream, Pa.
        mach : array_like, shape (n,) or scalar
            Mach number of the stream.
        noise : float
            Standard deviation of the hole readings, Pa; needs `generator`.
        generator : numpy.random.Generator, optional
            Source of the noise.

        Returns
        -------
        dict of str to ndarray, shape (n,)
            pitch, yaw (rad), p1, p2, ..., total_pressure and static_pressure (Pa).

        Raises
        ------
        ValueError
            If there is noise without a generator.
        """
        pitch, yaw = np.asarray(pitch, float), np.asarray(yaw, float)
        total = static_pressure + dynamic_pressure
        holes = self.pressures(direction_of(pitch, yaw), total, static_pressure, mach=mach)
        if noise:
            if generator is None:
                raise ValueError("noise needs a generator")
            holes = holes + noise * generator.standard_normal(holes.shape)
        table = {"pitch": pitch, "yaw": yaw, **dict(zip(self.names, holes, strict=True))}
        table["total_pressure"] = np.full(pitch.shape, total)
        table["static_pressure"] = np.full(pitch.shape, static_pressure)
        return table


def sphere_probe(
    holes: int = 5,
    *,
    off_axis: float = np.pi / 4,
    tip_diameter: float = 3.2e-3,
    displaced: float = 0.0,
    unequal: float = 0.0,
    mach_effect: float = 0.0,
    generator: np.random.Generator | None = None,
) -> SphereProbe:
    """A sphere probe with its holes where the interface numbers them.

    Parameters
    ----------
    holes : {5, 7}
        Five: p1 centre, p2 port, p3 starboard, p4 lower, p5 upper. Seven: p1 centre, then p2 to p7 top, upper port,
        lower port, bottom, lower starboard, upper starboard.
    off_axis : float
        Angle of the outer holes off the axis, rad.
    tip_diameter : float
        m.
    displaced : float
        Standard deviation of an error in each hole's place, rad, along two directions on the sphere.
    unequal : float
        Standard deviation of each hole's sensitivity about 1.
    mach_effect : float
        As in `SphereProbe`.
    generator : numpy.random.Generator, optional
        Source of the hole errors.

    Returns
    -------
    SphereProbe

    Raises
    ------
    ValueError
        If the number of holes is another, or there are hole errors without a generator.
    """
    if holes not in HOLE_DIRECTIONS:
        raise ValueError(f"a probe has 5 or 7 holes, {holes} were given")
    around = np.radians(HOLE_DIRECTIONS[holes])
    ring = np.stack(
        [np.full(around.size, -np.cos(off_axis)), np.sin(off_axis) * np.cos(around), np.sin(off_axis) * np.sin(around)],
        axis=-1,
    )
    normals = np.vstack([[-1.0, 0.0, 0.0], ring])
    sensitivity = np.ones(holes)
    if displaced or unequal:
        if generator is None:
            raise ValueError("displaced or unequal holes need a generator")
        normals = normals + displaced * generator.standard_normal(normals.shape)
        normals /= np.linalg.norm(normals, axis=1, keepdims=True)
        sensitivity = sensitivity + unequal * generator.standard_normal(holes)
    return SphereProbe(normals, sensitivity, tip_diameter, mach_effect)


@dataclass(frozen=True)
class TraverseConditions:
    """How a traverse is taken and what goes wrong in it, SI.

    Attributes
    ----------
    pitch, yaw, roll : float
        Mounting of the probe as the survey file states it, rad (`wakeledger.synthetic.recordings.Errors`).
    head_pitch, head_yaw : float
        Turn of the measuring axes against the mounted ones, rad, which the survey file does not know: it rolls with the
        probe.
    point_time : float
        Time from one point to the next, s, where the probe stops at each.
    speed : float
        Speed of a continuous traverse, m/s; 0 for one that stops at each point and does not lag.
    row_time : float
        Additional time between two rows, s.
    lag : float or tuple of float
        Time constant of the tubing, s, of all holes or of each; a continuous traverse is settled when a row begins.
    displacement : float
        The probe reads the flow this many tip diameters from its axis, towards the higher speed.
    backlash : float
        Play b of the traverse gear, m: the probe stands b/2 behind the indicated place in its direction of travel.
    noise : float
        Standard deviation of each hole's reading, Pa.
    zeros_before, zeros_after : tuple of float
        Readings of the holes with no flow, Pa, at the times of the first and the last point; the zero changes evenly.
    stream_drift, static_drift : float
        Change of the stream over the traverse: of its dynamic pressure, relative, and of its static pressure, Pa.
    temperature, temperature_drift : float
        Reading of the stream's temperature and its change over the traverse, K; NaN where it is not read.
    reference_noise : float
        Standard deviation of the readings of the stream's dynamic and static pressure, Pa.
    reference_drift : float
        Error of the reading of the dynamic pressure at the last point, Pa, growing evenly from 0.
    relative : bool
        Whether hole pressures are read against the stream's static pressure of the moment, or absolute.
    """

    pitch: float = 0.0
    yaw: float = 0.0
    roll: float = 0.0
    head_pitch: float = 0.0
    head_yaw: float = 0.0
    point_time: float = 1.0
    speed: float = 0.0
    row_time: float = 0.0
    lag: float | tuple[float, ...] = 0.0
    displacement: float = 0.0
    backlash: float = 0.0
    noise: float = 0.0
    zeros_before: tuple[float, ...] = ()
    zeros_after: tuple[float, ...] = ()
    stream_drift: float = 0.0
    static_drift: float = 0.0
    temperature: float = float("nan")
    temperature_drift: float = 0.0
    reference_noise: float = 0.0
    reference_drift: float = 0.0
    relative: bool = True

    @property
    def rotation(self) -> Array:
        """Rotation R with wind = R @ probe, shape (3, 3): the mounting times the turn of the head."""
        mounted = Errors(pitch=self.pitch, yaw=self.yaw, roll=self.roll).mounting
        return mounted @ Errors(pitch=self.head_pitch, yaw=self.head_yaw).mounting


@dataclass(frozen=True, eq=False)
class RawTraverse:
    """A traverse as it stands in the file.

    Attributes
    ----------
    positions : Positions
        Indicated places and rows, in the order in which the points were taken.
    values : mapping of str to ndarray, shape (n,)
        p1, p2, ..., reference_dynamic_pressure, reference_static_pressure, time and, where it is read, temperature; SI.
    relative : bool
        Whether hole pressures are differences from the stream's static pressure.
    true_y, true_z : ndarray, shape (n,)
        Where the probe was, m.
    """

    positions: Positions
    values: Mapping[str, Array]
    relative: bool
    true_y: Array = field(repr=False)
    true_z: Array = field(repr=False)

    @property
    def holes(self) -> Array:
        """Hole pressures, Pa, shape (holes, n)."""
        return np.stack([value for name, value in self.values.items() if name[0] == "p" and name[1:].isdigit()])

    def points(self) -> Points:
        """The traverse as points that a reader would hand on."""
        zero = "static" if self.relative else None
        channels = {
            name: Channel(value, relative_to=zero if name[0] == "p" else None) for name, value in self.values.items()
        }
        at = self.positions
        line = np.arange(2, at.y.size + 2, dtype=np.int64)
        return Points(at.y, at.z, channels, line=line, source="recording", row=at.row)

    def write_csv(self, path: Path, columns: Mapping[str, tuple[str, float, int]]) -> None:
        """Write a table, as `Recording.write_csv`."""
        Recording(self.positions, self.values).write_csv(path, columns)


def with_revisits(positions: Positions, *, y: float, z: float, every: int) -> Positions:
    """A traverse that goes back to one place before it begins, after every few rows and at its end.

    Parameters
    ----------
    positions : Positions
        The traverse.
    y, z : float
        The place, m.
    every : int
        Rows between two visits.

    Returns
    -------
    Positions
        Each visit is a row of its own; rows are numbered anew in the order in which they are taken.
    """
    parts: list[tuple[Array, Array]] = [(np.array([y]), np.array([z]))]
    rows = np.unique(positions.row)
    for count, row in enumerate(rows, start=1):
        here = positions.row == row
        parts.append((positions.y[here], positions.z[here]))
        if count % every == 0 or count == rows.size:
            parts.append((np.array([y]), np.array([z])))
    number = np.repeat(np.arange(len(parts)), [part[0].size for part in parts])
    return Positions(np.concatenate([p[0] for p in parts]), np.concatenate([p[1] for p in parts]), number)


def record_traverse(
    wake: SyntheticWake,
    positions: Positions,
    probe: SphereProbe,
    *,
    generator: np.random.Generator,
    conditions: TraverseConditions | None = None,
) -> RawTraverse:
    """Take a raw traverse of a wake.

    Parameters
    ----------
    wake : SyntheticWake
        The flow.
    positions : Positions
        Indicated places, in the order in which they are taken.
    probe : SphereProbe
        The probe.
    generator : numpy.random.Generator
        Source of the random errors.
    conditions : TraverseConditions, optional
        How it is taken; a perfect traverse if left out.

    Returns
    -------
    RawTraverse

    Raises
    ------
    ValueError
        If zeros or lags are not one per hole.

    Notes
    -----
    A stream that drifts keeps its dimensionless flow: p(t) = p∞(t) + [p − p∞] q(t)/q∞.
    """
    how = TraverseConditions() if conditions is None else conditions
    for name in ("zeros_before", "zeros_after", "lag"):
        given = getattr(how, name)
        if isinstance(given, tuple) and given and len(given) != probe.holes:
            raise ValueError(f"{name} needs one value per hole, {len(given)} were given for {probe.holes} holes")
    y, z = _true_places(positions, how.backlash)
    time = _times(positions, how)
    if how.speed > 0 and np.any(np.asarray(how.lag) > 0):
        holes = _lagged(wake, probe, how, y, z, time, positions.row)
    else:
        holes = _hole_pressures(wake, probe, how, y, z)
    progress = _progress(time)
    ref = wake.reference
    dynamic = ref.dynamic_pressure * (1 + how.stream_drift * progress)
    static = ref.static_pressure + how.static_drift * progress
    holes = (holes - ref.static_pressure) * (dynamic / ref.dynamic_pressure)
    if not how.relative:
        holes = holes + static
    before = np.array(how.zeros_before or (0.0,) * probe.holes)
    after = np.array(how.zeros_after or tuple(before))
    holes = holes + before[:, None] + (after - before)[:, None] * progress
    holes = holes + how.noise * generator.standard_normal(holes.shape)
    values: dict[str, Array] = dict(zip(probe.names, holes, strict=True))
    noise = how.reference_noise * generator.standard_normal((2, y.size))
    values["reference_dynamic_pressure"] = dynamic + how.reference_drift * progress + noise[0]
    values["reference_static_pressure"] = static + noise[1]
    if np.isfinite(how.temperature):
        values["temperature"] = how.temperature + how.temperature_drift * progress
    values["time"] = time
    return RawTraverse(positions, MappingProxyType(values), how.relative, y, z)


def _progress(time: Array) -> Array:
    """From 0 at the first point to 1 at the last."""
    extent = time[-1] - time[0]
    return np.asarray((time - time[0]) / extent) if extent > 0 else np.zeros(time.size)


def _travel(positions: Positions) -> tuple[Array, Array]:
    """Unit vector of travel of each point's row; zero for a row of one point."""
    along_y, along_z = np.zeros(positions.y.size), np.zeros(positions.y.size)
    for row in np.unique(positions.row):
        here = np.flatnonzero(positions.row == row)
        step = np.array([positions.y[here[-1]] - positions.y[here[0]], positions.z[here[-1]] - positions.z[here[0]]])
        length = np.hypot(*step)
        if length > 0:
            along_y[here], along_z[here] = step / length
    return along_y, along_z


def _true_places(positions: Positions, backlash: float) -> tuple[Array, Array]:
    along_y, along_z = _travel(positions)
    return positions.y - 0.5 * backlash * along_y, positions.z - 0.5 * backlash * along_z


def _times(positions: Positions, how: TraverseConditions) -> Array:
    path = np.hypot(np.diff(positions.y), np.diff(positions.z))
    steps = path / how.speed if how.speed > 0 else np.full(path.size, how.point_time)
    steps = steps + how.row_time * (np.diff(positions.row) != 0)
    return np.concatenate([[0.0], np.cumsum(steps)])


def _displaced(wake: SyntheticWake, y: Array, z: Array, distance: float, diameter: float) -> tuple[Array, Array]:
    """Places whose flow the probe reads."""
    if distance == 0:
        return y, z
    step = 0.02 * diameter

    def speed(y: Array, z: Array) -> Array:
        state = wake.state(y, z)
        return np.sqrt(state.u**2 + state.v**2 + state.w**2)

    by_y = (speed(y + step, z) - speed(y - step, z)) / (2 * step)
    by_z = (speed(y, z + step) - speed(y, z - step)) / (2 * step)
    shear = np.hypot(by_y, by_z) + _NO_SHEAR * wake.reference.speed / diameter
    return y + distance * by_y / shear, z + distance * by_z / shear


def _hole_pressures(wake: SyntheticWake, probe: SphereProbe, how: TraverseConditions, y: Array, z: Array) -> Array:
    """Steady hole pressures at the reference condition, Pa, absolute, shape (holes, n)."""
    y, z = _displaced(wake, y, z, how.displacement * probe.tip_diameter, probe.tip_diameter)
    state = wake.state(y, z)
    velocity = how.rotation.T @ np.stack([state.u, state.v, state.w])
    mach: ArrayLike = 0.0
    if wake.reference.compressible:
        sound = np.sqrt(wake.reference.gamma * wake.reference.gas_constant * state.temperature)
        mach = np.linalg.norm(velocity, axis=0) / sound
    return probe.pressures(velocity, state.total_pressure, state.static_pressure, mach=mach)


def _lagged(
    wake: SyntheticWake,
    probe: SphereProbe,
    how: TraverseConditions,
    y: Array,
    z: Array,
    time: Array,
    row: NDArray[np.int64],
) -> Array:
    """Hole pressures behind tubes of first order, followed between the points in small steps that are straight."""
    share = np.arange(_SUBSTEPS) / _SUBSTEPS
    fine = [np.append((x[:-1, None] + np.diff(x)[:, None] * share).ravel(), x[-1]) for x in (y, z, time)]
    steady = _hole_pressures(wake, probe, how, fine[0], fine[1])
    tau = np.broadcast_to(np.asarray(how.lag, float), (probe.holes,))[:, None]
    steps = np.diff(fine[2]) / np.maximum(tau, 1e-12)
    kept = np.exp(-steps)
    mean = np.divide(1 - kept, steps, out=np.ones_like(steps), where=steps > 1e-9)
    settled = np.zeros(fine[0].size, dtype=bool)
    settled[np.flatnonzero(np.diff(row, prepend=row[0] - 1)) * _SUBSTEPS] = True
    out = steady.copy()
    for k in range(1, settled.size):
        if not settled[k]:
            out[:, k] = kept[:, k - 1] * out[:, k - 1] + (1 - mean[:, k - 1]) * steady[:, k]
            out[:, k] += (mean[:, k - 1] - kept[:, k - 1]) * steady[:, k - 1]
    return out[:, ::_SUBSTEPS]
