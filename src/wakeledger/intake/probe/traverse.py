"""A raw traverse as it is reduced: hole pressures brought to one condition, corrected, and turned into a flow state.

The corrections are worked out once, on the readings as they are. A draw of errors adds to each a standard normal
number times its standard uncertainty, so that a draw costs little more than the reduction of the holes itself. A lag is
taken out of every draw anew: that is how noise grows by it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.flags import Flag
from wakeledger.core.grid import Array
from wakeledger.core.points import Channel
from wakeledger.intake.probe.lag import RateFilter
from wakeledger.intake.probe.mounting import Turn
from wakeledger.intake.probe.pitot import STATIC_INPUT, PitotReduction
from wakeledger.intake.probe.readings import at_reference_condition
from wakeledger.intake.probe.reduction import HoleReduction, ProbeStream
from wakeledger.intake.probe.static_tubes import StaticInterpolation
from wakeledger.intake.state import State

#: Readings of the stream that were taken beside the holes.
DYNAMIC, STATIC, TEMPERATURE = "reference_dynamic_pressure", "reference_static_pressure", "temperature"
#: Name of the correction of the measuring axes.
MISALIGNMENT = "misalignment"
#: What may be measured in the flow beside the holes.
_IN_THE_FLOW = ("density", "total_temperature")
_NO_ERRORS: Mapping[str, Array | float] = MappingProxyType({})


def correction_input(name: str) -> str:
    """Name of the input that an error of a correction is drawn for: a standard normal number."""
    return f"correction.{name}"


@dataclass(frozen=True, eq=False)
class LagFilter:
    """What taking out a lag adds to pressures.

    Attributes
    ----------
    rates : RateFilter
        Rates of change along the rows, points in the order in which they were taken.
    lag : float
        Time constant, s.
    order : ndarray of int, shape (n,)
        Which points, as filed, were taken one after the other; 0 is added to others, of other tubes.
    """

    rates: RateFilter
    lag: float
    order: NDArray[np.intp]

    def added(self, pressure: Array) -> Array:
        """Lag times rate, Pa, shape (..., n); 0 at points that have none."""
        found = np.zeros(pressure.shape)
        found[..., self.order] = self.lag * np.nan_to_num(self.rates.rate(pressure[..., self.order]))
        return found


@dataclass(frozen=True, eq=False)
class Addition:
    """What one correction adds to the hole pressures.

    Attributes
    ----------
    name : str
        Name of the correction.
    size : mapping of str to ndarray, shape (n,)
        What is added to each hole, Pa; holes that are missing here stay as they are.
    per_sigma : mapping of str to mapping of str to ndarray, shape (n,)
        By input (`correction_input`): change of each hole if that parameter is one standard uncertainty larger, Pa.
    raw : bool
        Whether it is added to the readings as they are, before they are brought to the reference condition.
    lag : LagFilter or None
        Instead of `size`.
    """

    name: str
    size: Mapping[str, Array]
    per_sigma: Mapping[str, Mapping[str, Array]] = field(default_factory=dict)
    raw: bool = False
    lag: LagFilter | None = None

    def to(self, hole: str, pressure: Array, errors: Mapping[str, Array | float]) -> Array:
        """Pressure of a hole with what is added to it under errors of the correction, Pa."""
        total: Array | float = self.size.get(hole, 0.0) if self.lag is None else self.lag.added(pressure)
        for name, changes in self.per_sigma.items():
            factor = errors.get(name)
            if factor is not None and hole in changes:
                total = total + factor * changes[hole]
        return np.asarray(pressure + total)


@dataclass(frozen=True, eq=False)
class Tube:
    """One probe and the points it took.

    Attributes
    ----------
    reduction : HoleReduction or PitotReduction
        Of its hole pressures, absolute.
    points : ndarray of int, or None
        Its points; None for all.
    """

    reduction: HoleReduction | PitotReduction
    points: NDArray[np.intp] | None = None

    @property
    def turn(self) -> Turn | None:
        """What its axes turned out to be turned by."""
        return self.reduction.mounting.turn if isinstance(self.reduction, HoleReduction) else None

    def with_turn(self, turn: Turn | None) -> Tube:
        """The same with its axes turned; a pitot has none."""
        if not isinstance(self.reduction, HoleReduction):
            return self
        mounting = replace(self.reduction.mounting, turn=turn)
        return replace(self, reduction=replace(self.reduction, mounting=mounting))


@dataclass(frozen=True, eq=False)
class StaticTubes:
    """Static tubes that sit elsewhere than the tubes in the flow, and their readings.

    Attributes
    ----------
    traverses : tuple of Traverse
        Of each tube, its reading as ``p1``.
    values : tuple of mapping of str to ndarray
        Readings of each.
    interpolation : StaticInterpolation
        From the readings of all, one tube after the other, to the points in the flow.
    """

    traverses: tuple[Traverse, ...]
    values: tuple[Mapping[str, Array], ...]
    interpolation: StaticInterpolation

    def at_points(
        self, reference: ProbeStream, errors: Mapping[str, Array | float], *, normalised: bool = True
    ) -> Array:
        """Static pressure at the points in the flow, Pa, shape (..., n).

        Errors of the corrections and of the interpolation (`STATIC_INPUT`) act on it; those of single points do not.
        """
        common = {name: error for name, error in errors.items() if name.startswith("correction.")}
        readings = [
            replace(traverse, normalised=normalised).pressures(values, reference, common)["p1"]
            for traverse, values in zip(self.traverses, self.values, strict=True)
        ]
        shape = np.broadcast_shapes(*(one.shape[:-1] for one in readings))
        whole = np.concatenate([np.broadcast_to(one, (*shape, one.shape[-1])) for one in readings], axis=-1)
        found = self.interpolation.at_points(np.nan_to_num(whole))
        error = errors.get(STATIC_INPUT)
        return found if error is None else found + error * self.interpolation.standard_uncertainty


@dataclass(frozen=True, eq=False)
class Traverse:
    """Reduction of a raw traverse, the same for the value and for every draw of its errors.

    Attributes
    ----------
    tubes : tuple of Tube
        The probes; their points are all points.
    kinds : mapping of str to Channel
        What each hole is measured against (the values of the channels are not used).
    additions : tuple of Addition
        The corrections of the hole pressures, in the order in which they are made.
    normalised : bool
        Whether the readings of the stream at each point are used, where there are any.
    statics : StaticTubes or None
        Where the static pressure of pitot tubes comes from, if not from a column of their own or from the stream.

    Notes
    -----
    p* = p∞ + (p + zeros − p_i) q∞/q_i + lag + backlash + drift + wall, then calibration, misalignment and mounting.
    Every parameter is frozen: nothing is estimated anew under errors.
    """

    tubes: tuple[Tube, ...]
    kinds: Mapping[str, Channel]
    additions: tuple[Addition, ...] = ()
    normalised: bool = True
    statics: StaticTubes | None = None

    @property
    def holes(self) -> tuple[str, ...]:
        """Names of all holes."""
        return max((tube.reduction.names for tube in self.tubes), key=len)

    @property
    def inputs(self) -> tuple[str, ...]:
        """Names of the inputs that errors of the corrections are drawn for."""
        found = tuple(name for addition in self.additions for name in addition.per_sigma) + self.turn_inputs
        if self.statics is not None:
            found += tuple(name for traverse in self.statics.traverses for name in traverse.inputs)
        return found

    @property
    def turn_inputs(self) -> tuple[str, ...]:
        """Names of the inputs that errors of the tubes' misalignment are drawn for."""
        turns = [tube.turn for tube in self.tubes]
        return tuple(dict.fromkeys(name for turn in turns if turn is not None for name in turn.inputs))

    def without(self, name: str) -> Traverse:
        """The same traverse without one of its corrections."""
        if name == MISALIGNMENT:
            return replace(self, tubes=tuple(tube.with_turn(None) for tube in self.tubes))
        statics = self.statics
        if statics is not None:
            statics = replace(statics, traverses=tuple(one.without(name) for one in statics.traverses))
        return replace(self, additions=tuple(one for one in self.additions if one.name != name), statics=statics)

    def pressures(
        self,
        values: Mapping[str, Array],
        reference: ProbeStream,
        errors: Mapping[str, Array | float] = _NO_ERRORS,
    ) -> dict[str, Array]:
        """Hole pressures at the reference condition, corrected.

        Parameters
        ----------
        values : mapping of str to ndarray, shape (..., n)
            Readings: ``p1`` ..., and `DYNAMIC`, `STATIC` where the survey has them, Pa.
        reference : ProbeStream
            The undisturbed stream.
        errors : mapping of str to array_like, optional
            As for `state`.

        Returns
        -------
        dict of str to ndarray, shape (..., n)
            Pa, absolute, or above the same zero as the reference's.
        """
        found = {}
        for hole in self.holes:
            if hole not in values:
                continue
            pressure = np.asarray(values[hole], dtype=float)
            error = errors.get(f"probe.{hole}")
            if error is not None:
                pressure = pressure + error
            for addition in self.additions:
                if addition.raw:
                    pressure = addition.to(hole, pressure, errors)
            pressure = self._at_reference(pressure, self.kinds.get(hole), values, reference)
            for addition in self.additions:
                if not addition.raw:
                    pressure = addition.to(hole, pressure, errors)
            found[hole] = pressure
        return found

    def state(
        self,
        values: Mapping[str, Array],
        reference: ProbeStream,
        errors: Mapping[str, Array | float] = _NO_ERRORS,
        *,
        rotation: Array | None = None,
    ) -> State:
        """Flow state at each point.

        Parameters
        ----------
        values : mapping of str to ndarray, shape (..., n)
            Readings as for `pressures`; ``density`` or ``total_temperature`` measured in the flow; `TEMPERATURE` of the
            stream while each point was taken.
        reference : ProbeStream
            The undisturbed stream.
        errors : mapping of str to array_like, optional
            Each of a shape that broadcasts with (..., n): ``probe.p1`` ... in Pa; ``angle.pitch``, ``angle.yaw``,
            ``angle.roll`` of the mounting in rad; `CALIBRATION_INPUTS` and `inputs`, standard normal numbers.
        rotation : ndarray, shape (..., 3, 3), optional
            From the survey's axes to wind axes.

        Returns
        -------
        State
            In wind axes; NaN outside the calibrated range.

        Raises
        ------
        DataError
            As `HoleReduction.state`.
        """
        readings: dict[str, Array] = self.pressures(values, reference, errors)
        readings |= self._in_the_flow(values, reference)
        if self.statics is not None:
            readings["static_pressure"] = self.statics.at_points(reference, errors, normalised=self.normalised)
        # Errors of the holes are in the readings by now.
        errors = {name: error for name, error in errors.items() if not name.startswith("probe.")}
        if len(self.tubes) == 1 and self.tubes[0].points is None:
            return self.tubes[0].reduction.state(readings, reference, errors, rotation=rotation)
        parts = []
        for tube in self.tubes:
            own = {name: array[..., tube.points] for name, array in readings.items()}
            mine = {name: _of_points(error, tube.points, self._count(readings)) for name, error in errors.items()}
            parts.append((tube.points, tube.reduction.state(own, reference, mine, rotation=rotation)))
        return _together(parts, self._count(readings))

    def flags(self, values: Mapping[str, Array], reference: ProbeStream) -> NDArray[np.int32]:
        """Quality flags of the points, shape (n,): OUT_OF_RANGE, or MISSING where a reading has no value."""
        readings = self.pressures(values, reference)
        found = np.zeros(self._count(readings), dtype=np.int32)
        for tube in self.tubes:
            at = slice(None) if tube.points is None else tube.points
            own = {name: array[..., at] for name, array in readings.items()}
            found[at] = tube.reduction.flags(own, reference)
        return found

    def out_of_range(self, values: Mapping[str, Array], reference: ProbeStream) -> NDArray[np.bool_]:
        """Points outside the calibrated range, those with a missing reading not included, shape (n,)."""
        return np.asarray((self.flags(values, reference) & Flag.OUT_OF_RANGE) != 0)

    def frozen_on(self, values: Mapping[str, Array], reference: ProbeStream) -> Traverse:
        """The same traverse with the points within the calibrated range decided once (`HoleReduction.frozen_on`)."""
        readings = self.pressures(values, reference)
        tubes = []
        for tube in self.tubes:
            at = slice(None) if tube.points is None else tube.points
            own = {name: array[..., at] for name, array in readings.items()}
            tubes.append(replace(tube, reduction=tube.reduction.frozen_on(own, reference)))
        return replace(self, tubes=tuple(tubes))

    @staticmethod
    def _count(readings: Mapping[str, Array]) -> int:
        return int(next(iter(readings.values())).shape[-1])

    def _at_reference(
        self, pressure: Array, kind: Channel | None, values: Mapping[str, Array], reference: ProbeStream
    ) -> Array:
        zero = reference.static_pressure
        if kind is not None and kind.relative_to == "total":
            zero = reference.total_pressure
        against = kind is not None and kind.relative_to is not None
        if kind is not None and kind.normalised_by is not None:
            # Written as a share of the dynamic pressure of the moment: it is at the reference condition already.
            return np.asarray(pressure * reference.dynamic_pressure + (zero if against else 0.0))
        brought = at_reference_condition(
            pressure,
            dynamic_pressure=values.get(DYNAMIC) if self.normalised else None,
            reference_dynamic_pressure=reference.dynamic_pressure,
            static_pressure=values.get(STATIC) if self.normalised else None,
            reference_static_pressure=reference.static_pressure,
            relative=against,
        )
        return brought + zero if against else brought

    def _in_the_flow(self, values: Mapping[str, Array], reference: ProbeStream) -> dict[str, Array]:
        """Density and total temperature of the points as they are at the reference condition."""
        found = {name: np.asarray(values[name], dtype=float) for name in _IN_THE_FLOW if name in values}
        if not self.normalised:
            return found
        warmer: Array | float = 1.0
        denser: Array | float = 1.0
        if TEMPERATURE in values and np.isfinite(reference.temperature):
            warmer = values[TEMPERATURE] / reference.temperature
        if STATIC in values and reference.static_pressure > 0:
            denser = values[STATIC] / reference.static_pressure
        if "total_temperature" in found:
            found["total_temperature"] = found["total_temperature"] / warmer
        if "density" in found:
            found["density"] = found["density"] * warmer / denser
        return found


def _of_points(error: Array | float, points: NDArray[np.intp] | None, n: int) -> Array | float:
    """The part of an error that belongs to some points: one that does not differ between them stays as it is."""
    shape = np.shape(error)
    if points is None or not shape or shape[-1] != n:
        return error
    return np.asarray(error)[..., points]


def _together(parts: list[tuple[NDArray[np.intp] | None, State]], n: int) -> State:
    """The states of several tubes as one."""
    shape = (*np.shape(parts[0][1].u)[:-1], n)
    found: dict[str, Array] = {}
    for name in ("u", "v", "w", "total_pressure", "static_pressure", "density", "temperature"):
        whole = np.full(shape, np.nan)
        for points, state in parts:
            whole[..., points] = getattr(state, name)
        found[name] = whole
    impossible = np.zeros(shape, dtype=bool)
    for points, state in parts:
        impossible[..., points] = state.impossible
    return State(**found, impossible=impossible)
