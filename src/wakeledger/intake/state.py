"""The flow state at each point, in wind axes and absolute SI, from whatever was measured there."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import DataError, SurveyError
from wakeledger.core.grid import Array
from wakeledger.core.points import Channel, Points
from wakeledger.stream.gas import mach_from_pressure_ratio, pressure_ratio, temperature_ratio

#: Share of the points that may have no real flow state, and share with reverse flow, before the data are refused.
NONPHYSICAL_LIMIT = 0.02
REVERSE_LIMIT = 0.10
#: Dynamic pressures by which the median of a pressure may differ from the stream's.
MEDIAN_LIMIT = 1.0
_PLACE = "[plane.columns]"
_MEASURED = (
    "u",
    "v",
    "w",
    "speed",
    "pitch",
    "yaw",
    "total_pressure",
    "static_pressure",
    "density",
    "temperature",
    "total_temperature",
)


class Stream(Protocol):
    """What is needed of the undisturbed stream (`wakeledger.stream.reference.Reference`), SI."""

    @property
    def speed(self) -> float:
        """Speed, m/s."""

    @property
    def density(self) -> float:
        """Density, kg/m³."""

    @property
    def static_pressure(self) -> float:
        """Static pressure, Pa."""

    @property
    def total_pressure(self) -> float:
        """Total pressure, Pa."""

    @property
    def dynamic_pressure(self) -> float:
        """Dynamic pressure, Pa."""

    @property
    def temperature(self) -> float:
        """Static temperature, K; NaN where unknown."""

    @property
    def total_temperature(self) -> float:
        """Total temperature, K; NaN where unknown."""

    @property
    def sound_speed(self) -> float:
        """Speed of sound, m/s; NaN where unknown."""

    @property
    def viscosity(self) -> float:
        """Dynamic viscosity, Pa s; NaN where unknown."""

    @property
    def compressible(self) -> bool:
        """Whether the compressible relations are used."""

    @property
    def gamma(self) -> float:
        """Ratio of the specific heats."""

    @property
    def gas_constant(self) -> float:
        """Gas constant, J kg⁻¹ K⁻¹."""


@dataclass(frozen=True, eq=False)
class State:
    """Flow state at the points, wind axes, SI, NaN where unusable.

    Attributes
    ----------
    u, v, w : ndarray, shape (..., n)
        Velocity downstream, to starboard and up, m/s.
    total_pressure, static_pressure : ndarray, shape (..., n), or None
        Pa, absolute (or above the same zero as the reference's); None where neither measured nor implied.
    density : ndarray, shape (..., n)
        kg/m³.
    temperature : ndarray, shape (..., n)
        Static temperature, K; NaN throughout where it is unknown.
    impossible : ndarray of bool, shape (..., n)
        Points that were measured but have no real flow state.
    """

    u: Array
    v: Array
    w: Array
    total_pressure: Array | None
    static_pressure: Array | None
    density: Array
    temperature: Array
    impossible: NDArray[np.bool_]

    @property
    def usable(self) -> NDArray[np.bool_]:
        """Points with a complete state, shape (..., n)."""
        return np.isfinite(self.u)


def point_state(
    channels: Mapping[str, Array],
    kinds: Mapping[str, Channel],
    reference: Stream,
    *,
    primary: str,
    axes: Array,
    rotation: Array,
) -> State:
    """Flow state at each point from its measured variables.

    Parameters
    ----------
    channels : mapping of str to ndarray, shape (..., n)
        Values in SI by name (`wakeledger.core.names.VARIABLES`), as measured or with errors added; all of shapes that
        broadcast.
    kinds : mapping of str to Channel
        What each is measured against; a name that is missing here is an absolute value.
    reference : Stream
        The undisturbed stream.
    primary : {"total_pressure", "velocity"}
        Total pressure: the speed follows from total and static pressure, only the direction from u, v, w, or from pitch
        and yaw, or from v and w alone. Velocity: u, v, w as given (or speed with pitch and yaw, or speed with v and w).
    axes : ndarray, shape (3, 3)
        Signed permutation P of the file's vector components. Pitch and yaw have their senses in probe axes, and P does
        not apply to them.
    rotation : ndarray, shape (..., 3, 3), or (3, 3, n)
        Mounting of the measuring axes, wind = R @ P @ file (`wakeledger.core.rotation.rotation_matrix`); of each point
        its own where the last axis runs over the points.

    Returns
    -------
    State

    Raises
    ------
    SurveyError
        If the variables do not determine the state.
    ValueError
        If `primary` is neither.

    Notes
    -----
    Incompressible V² = 2 (H - p)/rho. Compressible: the Mach number from p/H, the temperature as measured or else from
    the total temperature as measured or else the stream's, rho = p/(R T). Direction from angles:
    (cos(yaw) cos(pitch), sin(yaw), cos(yaw) sin(pitch)). From v and w alone: u² = V² - v² - w², u positive.
    """
    if primary not in {"total_pressure", "velocity"}:
        raise ValueError(f"primary must be 'total_pressure' or 'velocity', {primary!r} was given")
    given = {
        name: absolute(np.asarray(channels[name], dtype=float), kinds.get(name), reference)
        for name in _MEASURED
        if name in channels
    }
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        if primary == "total_pressure":
            parts = _from_pressures(given, reference, axes)
        else:
            parts = _from_velocity(given, reference, axes)
        return _assemble(parts, given, np.asarray(rotation, dtype=float))


@dataclass(frozen=True)
class _Parts:
    """A state in measuring axes, and the names of the inputs it rests on."""

    velocity: tuple[Array, Array, Array]
    total_pressure: Array | None
    static_pressure: Array | None
    density: Array
    temperature: Array
    used: tuple[str, ...]


def absolute(values: Array, kind: Channel | None, reference: Stream) -> Array:
    """Undo what was done to a variable before it was written.

    Parameters
    ----------
    values : ndarray, shape (..., n)
        As written, SI.
    kind : Channel or None
        What it is measured against; None for an absolute value.
    reference : Stream
        The undisturbed stream.

    Returns
    -------
    ndarray, shape (..., n)
        The normalisation undone, then the division by density, then the subtraction of a reference pressure.

    Raises
    ------
    SurveyError
        If the stream does not have the quantity that a variable was divided by.
    """
    if kind is None:
        return values
    if kind.normalised_by is not None:
        values = values * normalisation(kind.normalised_by, reference)
    if kind.kinematic:
        values = values * reference.density
    if kind.relative_to == "total":
        values = values + reference.total_pressure
    elif kind.relative_to == "static":
        values = values + reference.static_pressure
    return values


def normalisation(name: str, reference: Stream) -> float:
    """The quantity of the undisturbed stream that a variable was divided by.

    Parameters
    ----------
    name : str
        One of `wakeledger.core.points.NORMALISATIONS`.
    reference : Stream
        The undisturbed stream.

    Returns
    -------
    float
        In SI; positive.

    Raises
    ------
    SurveyError
        If the stream does not have it.
    """
    if name == "density_speed_squared":
        value = reference.density * reference.speed**2
    elif name == "density_sound_speed_squared":
        value = reference.density * reference.sound_speed**2
    else:
        value = float(getattr(reference, name))
    if not (np.isfinite(value) and value > 0):
        needed = "static_pressure" if name in {"static_pressure", "total_pressure"} else "temperature"
        raise SurveyError(
            f'a column has normalised_by = "{name}", which [reference] does not determine',
            place="[reference]",
            remedy=f"add {needed} (or whatever else determines it), or give the column with its unit",
        )
    return value


def _needed(given: Mapping[str, Array], name: str, primary: str, remedy: str) -> Array:
    if name not in given:
        raise SurveyError(f'primary = "{primary}" needs {name}, which has no column', place=_PLACE, remedy=remedy)
    return given[name]


def _from_pressures(given: Mapping[str, Array], reference: Stream, axes: Array) -> _Parts:
    remedy = 'add it, or set primary = "velocity"'
    total = _needed(given, "total_pressure", "total_pressure", remedy)
    static = _needed(given, "static_pressure", "total_pressure", remedy)
    used = ["total_pressure", "static_pressure"]
    if not reference.compressible:
        density = given.get("density", np.asarray(reference.density, dtype=float))
        temperature = given.get("temperature", np.asarray(reference.temperature, dtype=float))
        used += [name for name in ("density",) if name in given]
        speed = np.sqrt(2 * (total - static) / density)
    else:
        gamma, gas = reference.gamma, reference.gas_constant
        mach = mach_from_pressure_ratio(static / total, gamma=gamma)
        if "temperature" in given:
            temperature = given["temperature"]
            used.append("temperature")
        elif "density" in given:
            temperature = static / (given["density"] * gas)
        else:
            stagnation = given.get("total_temperature", np.asarray(reference.total_temperature, dtype=float))
            used += [name for name in ("total_temperature",) if name in given]
            temperature = stagnation * temperature_ratio(mach, gamma=gamma)
        density = given["density"] if "density" in given else static / (gas * temperature)
        used += [name for name in ("density",) if name in given]
        speed = mach * np.sqrt(gamma * static / density)
    velocity, direction = _velocity(given, axes, speed, rescale=True)
    return _Parts(velocity, total, static, density, temperature, (*used, *direction))


def _from_velocity(given: Mapping[str, Array], reference: Stream, axes: Array) -> _Parts:
    velocity, used = _velocity(given, axes, given.get("speed"), rescale=False)
    total, static = given.get("total_pressure"), given.get("static_pressure")
    used += tuple(name for name in ("total_pressure", "static_pressure", "density") if name in given)
    square = velocity[0] ** 2 + velocity[1] ** 2 + velocity[2] ** 2
    if not reference.compressible:
        density = given.get("density", np.asarray(reference.density, dtype=float))
        temperature = given.get("temperature", np.asarray(reference.temperature, dtype=float))
        if total is None and static is not None:
            total = static + 0.5 * density * square
        return _Parts(velocity, total, static, density, temperature, used)
    gamma, gas = reference.gamma, reference.gas_constant
    warming = square * (gamma - 1) / (2 * gamma * gas)
    if "temperature" in given:
        temperature = given["temperature"]
        used += ("temperature",)
    elif "density" in given and static is not None:
        temperature = static / (given["density"] * gas)
    else:
        temperature = given.get("total_temperature", np.asarray(reference.total_temperature, dtype=float)) - warming
        used += tuple(name for name in ("total_temperature",) if name in given)
    mach = np.sqrt(square / (gamma * gas * temperature))
    ratio = pressure_ratio(mach, gamma=gamma)
    if static is None:
        if total is None:
            raise SurveyError(
                "the compressible relations need a pressure at each point",
                place=_PLACE,
                remedy="add static_pressure or total_pressure, or set compressible = false in [reference]",
            )
        static = total * ratio
    if total is None:
        total = static / ratio
    density = given["density"] if "density" in given else static / (gas * temperature)
    return _Parts(velocity, total, static, density, temperature, used)


def _velocity(
    given: Mapping[str, Array], axes: Array, speed: Array | None, *, rescale: bool
) -> tuple[tuple[Array, Array, Array], tuple[str, ...]]:
    """Velocity along the measuring axes, ordered as the wind axes, and the names it rests on."""
    source = [int(np.argmax(np.abs(axes[i]))) for i in range(3)]
    letters = ["uvw"[j] for j in source]
    u, v, w = (
        np.sign(axes[i, j]) * given[letter] if letter in given else None
        for i, (j, letter) in enumerate(zip(source, letters, strict=True))
    )
    own = () if rescale or speed is None else ("speed",)
    if u is not None and v is not None and w is not None:
        if not rescale or speed is None:
            return (u, v, w), tuple(letters)
        factor = speed / np.sqrt(u**2 + v**2 + w**2)
        return (factor * u, factor * v, factor * w), tuple(letters)
    if speed is not None and "pitch" in given and "yaw" in given:
        pitch, yaw = given["pitch"], given["yaw"]
        level = speed * np.cos(yaw)
        return (level * np.cos(pitch), speed * np.sin(yaw), level * np.sin(pitch)), (*own, "pitch", "yaw")
    if speed is not None and v is not None and w is not None:
        across = np.sqrt(speed**2 - v**2 - w**2)
        return (across, v, w), (*own, letters[1], letters[2])
    raise SurveyError(
        "the columns do not give the flow direction" if rescale else "the columns do not give the velocity",
        place=_PLACE,
        remedy="add u, v and w, or pitch and yaw, or the two components across the stream"
        + ("" if rescale else ", the latter two with speed"),
    )


def _assemble(parts: _Parts, given: Mapping[str, Array], rotation: Array) -> State:
    u, v, w = parts.velocity
    if not (rotation.shape == (3, 3) and np.array_equal(rotation, np.eye(3))):
        turn = rotation[..., None] if rotation.shape[-2:] == (3, 3) else rotation
        u, v, w = (turn[..., i, 0, :] * u + turn[..., i, 1, :] * v + turn[..., i, 2, :] * w for i in range(3))
    density = parts.density
    arrays = [u, v, w, density]
    arrays += [pressure for pressure in (parts.total_pressure, parts.static_pressure) if pressure is not None]
    shape = np.broadcast_shapes(*(array.shape for array in arrays), parts.temperature.shape)
    real = np.broadcast_to(density > 0, shape).copy()
    for array in arrays:
        real &= np.isfinite(array)
    if parts.total_pressure is not None and parts.static_pressure is not None:
        real &= parts.total_pressure >= parts.static_pressure
    measured = np.ones(shape, dtype=bool)
    for name in parts.used:
        measured &= np.isfinite(given[name])

    def masked(array: Array) -> Array:
        return np.where(real, array, np.nan)

    return State(
        u=masked(u),
        v=masked(v),
        w=masked(w),
        total_pressure=None if parts.total_pressure is None else masked(parts.total_pressure),
        static_pressure=None if parts.static_pressure is None else masked(parts.static_pressure),
        density=masked(density),
        temperature=masked(parts.temperature),
        impossible=measured & ~real,
    )


def nonphysical(state: State) -> NDArray[np.bool_]:
    """Points that were measured but have no real flow state.

    Parameters
    ----------
    state : State
        The state.

    Returns
    -------
    ndarray of bool, shape (..., n)
        Total pressure below static, no real velocity, or a density that is not positive.
    """
    return state.impossible


def check_state(
    state: State, *, points: Points | None = None, density: Array | None = None, reference: Stream | None = None
) -> None:
    """Refuse data whose flow state is wrong at more than a few points.

    Parameters
    ----------
    state : State
        The state of the survey, without leading draws.
    points : Points, optional
        The points as read, so that messages name file and line.
    density : ndarray, shape (n,), optional
        Density as measured; taken from `points` if they carry it.
    reference : Stream, optional
        The undisturbed stream, to hold the pressures against.

    Raises
    ------
    DataError
        If any measured density is not positive, more than 2 % of the points have no real flow state, the flow runs
        upstream over more than 10 % of the points, or the median of a pressure is further from the stream's than its
        dynamic pressure.
    """
    if density is None and points is not None and "density" in points.channels:
        density = points.channels["density"].values
    if density is not None:
        _refuse(
            np.asarray(density) <= 0,
            0.0,
            points,
            "the density is not positive",
            "correct the density column or its unit",
        )
    _refuse(
        nonphysical(state),
        NONPHYSICAL_LIMIT,
        points,
        "there is no real flow state (total pressure below static pressure, or no real velocity)",
        "check columns, units and relative_to of total_pressure and static_pressure",
    )
    _refuse(
        state.u <= 0,
        REVERSE_LIMIT,
        points,
        "the flow runs upstream (u <= 0)",
        "check the column of u and the directions in [plane.axes]",
    )
    if reference is not None:
        _refuse_another_zero(state, reference, points)


def _refuse_another_zero(state: State, reference: Stream, points: Points | None) -> None:
    """Refuse pressures that are not counted from the zero of the stream's, such as gauge against absolute ones."""
    for name, values, level in (
        ("static_pressure", state.static_pressure, reference.static_pressure),
        ("total_pressure", state.total_pressure, reference.total_pressure),
    ):
        if values is None or not np.isfinite(values).any():
            continue
        distance = float(np.nanmedian(values)) - level
        if abs(distance) > MEDIAN_LIMIT * reference.dynamic_pressure:
            raise DataError(
                f"{name} is {distance:+.4g} Pa off the stream's in the middle of its range,"
                f" {abs(distance) / reference.dynamic_pressure:.3g} times the dynamic pressure",
                file=None if points is None else points.source,
                place=f"{_PLACE} {name}",
                remedy="say what it is measured against with relative_to, and give [reference] static_pressure absolute"
                " where columns are absolute",
            )


def _refuse(wrong: NDArray[np.bool_], limit: float, points: Points | None, found: str, remedy: str) -> None:
    number = int(np.count_nonzero(wrong))
    if number <= limit * wrong.size:
        return
    first = int(np.flatnonzero(wrong)[0])
    raise DataError(
        f"{found} at {number} of {wrong.size} points",
        file=None if points is None else points.source,
        place=f"point {first + 1}" if points is None else f"line {points.line[first]}",
        remedy=remedy,
    )
