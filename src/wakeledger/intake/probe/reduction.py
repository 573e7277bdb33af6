"""From hole pressures to the flow state at each point."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from types import MappingProxyType
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import DataError
from wakeledger.core.flags import Flag
from wakeledger.core.grid import Array
from wakeledger.core.points import Channel
from wakeledger.intake.probe.mounting import Mounting, turned
from wakeledger.intake.probe.record import Calibration, Reading
from wakeledger.intake.probe.residuals import QUANTITIES
from wakeledger.intake.state import State, Stream, absolute, point_state
from wakeledger.stream.gas import mach_from_pressure_ratio, sutherland_viscosity

#: Waves over the directions that errors of the calibration are made of.
WAVES = 4
#: Distance over which these errors hang together, in spacings of the calibrated directions. Tables with noise give
#: surfaces whose errors, scaled to the uncertainty by left-out points, are as steep as waves of 2 to 6 spacings.
WAVE_SPACINGS = 3.0
#: Inputs that errors of the calibration are drawn for: standard normal numbers, four for each of `QUANTITIES`, times
#: the calibration's own standard uncertainty in the region of the point.
CALIBRATION_INPUTS: tuple[str, ...] = tuple(
    f"calibration.{name}.{wave}" for name in QUANTITIES for wave in range(WAVES)
)
#: What a survey may measure at each point beside the holes.
_PASSED_ON = ("density", "temperature", "total_temperature")
_NO_ERRORS: Mapping[str, Array | float] = MappingProxyType({})
_LEVEL_STEPS = 2


class ProbeStream(Stream, Protocol):
    """What is needed of the undisturbed stream (`wakeledger.stream.reference.Reference`), SI."""

    @property
    def mach(self) -> float:
        """Mach number; NaN where unknown."""


@dataclass(frozen=True, eq=False)
class HoleReduction:
    """Reduction of one probe's hole pressures, the same for the value and for every draw of its errors.

    Attributes
    ----------
    calibration : Calibration
        The probe's calibration.
    mounting : Mounting
        How the probe is mounted in the survey's axes.
    kinds : mapping of str to Channel
        What each hole is measured against (``relative_to``, ``normalised_by``; the values of the channels are not
        used); a hole that is missing here is an absolute pressure.
    tip_diameter : float
        m; needed by a calibration with sets of different Reynolds number.
    in_range : ndarray of bool, shape (n,), or None
        Points that count as within the calibrated range whatever errors are added; None to judge each reading by
        itself. See `frozen_on`.
    """

    calibration: Calibration
    mounting: Mounting = field(default_factory=Mounting)
    kinds: Mapping[str, Channel] = field(default_factory=dict)
    tip_diameter: float = np.nan
    in_range: NDArray[np.bool_] | None = None

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the holes, ``p1`` the centre."""
        return tuple(f"p{number}" for number in range(1, self.calibration.holes + 1))

    def frozen_on(self, values: Mapping[str, Array], reference: ProbeStream) -> HoleReduction:
        """The same reduction with the range decided once, so that errors do not make points come and go.

        Parameters
        ----------
        values : mapping of str to ndarray, shape (n,)
            Nominal values.
        reference : ProbeStream
            Nominal stream.

        Returns
        -------
        HoleReduction
            A point near the edge of the range that an error pushes across it keeps a value: the tables reach one
            spacing of the calibration beyond, and hold their edge value from there on.
        """
        return replace(self, in_range=~self.out_of_range(values, reference))

    def out_of_range(self, values: Mapping[str, Array], reference: ProbeStream) -> NDArray[np.bool_]:
        """Points outside the calibrated range, those with a missing hole included.

        Parameters
        ----------
        values : mapping of str to ndarray, shape (..., n)
            Hole pressures as measured.
        reference : ProbeStream
            The undisturbed stream.

        Returns
        -------
        ndarray of bool, shape (..., n)
        """
        beyond = self.read(values, reference).out_of_range
        assert beyond is not None
        return beyond

    def flags(self, values: Mapping[str, Array], reference: ProbeStream) -> NDArray[np.int32]:
        """Quality flags of the points (`wakeledger.core.flags.Flag`).

        Parameters
        ----------
        values : mapping of str to ndarray, shape (..., n)
            Hole pressures as measured.
        reference : ProbeStream
            The undisturbed stream.

        Returns
        -------
        ndarray of int, shape (..., n)
            OUT_OF_RANGE, or MISSING where a hole has no value.
        """
        missing = np.isnan(self._holes(values, reference, _NO_ERRORS)).any(axis=0)
        beyond = self.out_of_range(values, reference) & ~missing
        return (beyond * np.int32(Flag.OUT_OF_RANGE) + missing * np.int32(Flag.MISSING)).astype(np.int32)

    def read(
        self,
        values: Mapping[str, Array],
        reference: ProbeStream,
        errors: Mapping[str, Array | float] = _NO_ERRORS,
        *,
        check: bool = True,
    ) -> Reading:
        """Flow direction in probe axes, total and static pressure.

        Parameters
        ----------
        values : mapping of str to ndarray, shape (..., n)
            Hole pressures as measured, Pa.
        reference : ProbeStream
            The undisturbed stream.
        errors : mapping of str to array_like, optional
            As for `state`; those of the mounting play no part.
        check : bool, optional
            Whether to tell which readings lie outside the calibrated range.

        Returns
        -------
        Reading
            Of arrays of shape (..., n); pressures absolute, or above the same zero as the reference's.

        Raises
        ------
        DataError
            If the calibration has sets of different Mach or Reynolds number and the survey does not tell it.
        """
        holes = self._holes(values, reference, errors)
        shape = holes.shape[1:]
        flat = holes.reshape(len(holes), -1)
        several = len(self.calibration.sets) > 1
        level = self._level(reference, np.array([]), np.array([])) if several else None
        reading = self.calibration.read(flat, level=level, check=check and not several)
        if several:
            for step in range(_LEVEL_STEPS):
                level = self._level(reference, reading.total, reading.static)
                reading = self.calibration.read(flat, level=level, check=check and step == _LEVEL_STEPS - 1)
        if any(name in errors for name in CALIBRATION_INPUTS):
            reading = _disturbed(reading, errors, shape)
        return reading if len(shape) == 1 else reading.reshaped(shape)

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
            ``p1`` ... as measured, and, where the survey has them, ``density``, ``temperature`` or
            ``total_temperature`` in SI; further names are not used.
        reference : ProbeStream
            The undisturbed stream.
        errors : mapping of str to array_like, optional
            Each of a shape that broadcasts with (..., n), so (draws, 1) for one number per draw: ``probe.p1`` ... in
            Pa; ``angle.pitch``, ``angle.yaw``, ``angle.roll`` of the mounting in rad; `CALIBRATION_INPUTS`, standard
            normal numbers.
        rotation : ndarray, shape (..., 3, 3), optional
            From the survey's axes to wind axes, wind = rotation @ survey; leading axes as in errors.

        Returns
        -------
        State
            In wind axes; NaN outside the calibrated range.

        Raises
        ------
        DataError
            As `read`.

        Notes
        -----
        Direction in probe axes from the calibration, then R = Rz(yaw) Ry(pitch) Rx(roll) of the mounting, then
        `rotation`; no angle is taken as small. Speed, density and temperature as for a total-pressure survey
        (`wakeledger.intake.state.point_state`).
        """
        reading = self.read(values, reference, errors, check=self.in_range is None)
        beyond = reading.out_of_range if self.in_range is None else ~self.in_range
        assert beyond is not None
        matrix = self.mounting.matrix(errors)
        if rotation is not None:
            matrix = rotation @ matrix
        direction = turned(reading.direction, matrix)
        total = np.where(beyond, np.nan, reading.total)
        channels = {"u": direction[0], "v": direction[1], "w": direction[2]}
        channels |= {"total_pressure": total, "static_pressure": reading.static}
        channels |= {name: values[name] for name in _PASSED_ON if name in values}
        return point_state(channels, {}, reference, primary="total_pressure", axes=np.eye(3), rotation=np.eye(3))

    def _holes(self, values: Mapping[str, Array], reference: Stream, errors: Mapping[str, Array | float]) -> Array:
        holes = []
        for name in self.names:
            if name not in values:
                raise DataError(
                    f"hole {name} has no column, and the probe is calibrated with {self.calibration.holes} holes",
                    place="[plane.columns]",
                    remedy=f"add {name}, or give the calibration of the probe that was used",
                )
            pressure = absolute(np.asarray(values[name], dtype=float), self.kinds.get(name), reference)
            error = errors.get(f"probe.{name}")
            holes.append(pressure if error is None else pressure + error)
        return np.stack(np.broadcast_arrays(*holes))

    def _level(self, reference: ProbeStream, total: Array, static: Array) -> Array | float:
        """Mach or Reynolds number of readings, or of the stream where there are none yet."""
        name = self.calibration.table.level_name
        first = total.size == 0
        if name == "reynolds":
            temperature = reference.temperature
            if not (np.isfinite(temperature) and np.isfinite(self.tip_diameter)):
                missing = "tip_diameter in [probe]" if np.isfinite(temperature) else "temperature in [reference]"
                raise DataError(
                    "the calibration has sets of different Reynolds number, and the survey's is not known",
                    remedy=f"give {missing}",
                )
            factor = self.tip_diameter / sutherland_viscosity(temperature)
            if first:
                return reference.density * reference.speed * factor
            with np.errstate(invalid="ignore"):
                return np.asarray(np.sqrt(2.0 * reference.density * (total - static)) * factor)
        if first and np.isfinite(reference.mach):
            return reference.mach
        if first and reference.static_pressure > 0:
            return float(mach_from_pressure_ratio(reference.static_pressure / reference.total_pressure))
        with np.errstate(invalid="ignore", divide="ignore"):
            if reference.static_pressure > 0:
                return mach_from_pressure_ratio(static / total, gamma=reference.gamma)
            if np.isfinite(reference.mach):
                speed = np.sqrt(2.0 * (total - static) / reference.density)
                return np.asarray(reference.mach * speed / reference.speed)
        raise DataError(
            "the calibration has sets of different Mach number, and the survey's is not known",
            remedy="give static_pressure in [reference]",
        )


def _disturbed(reading: Reading, errors: Mapping[str, Array | float], shape: tuple[int, ...]) -> Reading:
    """A reading with errors of the calibration; shape is that of the points and draws.

    The error of a quantity at the direction (a, b) is its standard uncertainty there times
    (z0 cos ka + z1 sin ka) cos kb + (z2 cos ka + z3 sin ka) sin kb: of variance 1 everywhere, alike at directions that
    are close to each other, and independent at those a quarter of a wave apart.
    """
    sizes = reading.standard_uncertainty()
    waves = _waves(reading)
    pitch, yaw, total, static = (
        sum(
            np.ravel(np.broadcast_to(np.asarray(errors.get(f"calibration.{name}.{k}", 0.0), float), shape)) * wave
            for k, wave in enumerate(waves)
        )
        * size
        for name, size in zip(QUANTITIES, sizes, strict=True)
    )
    u, v, w = reading.direction
    level = np.sqrt(u * u + w * w)
    cosine, sine = np.cos(yaw), np.sin(yaw)
    with np.errstate(invalid="ignore", divide="ignore"):
        shrink = cosine - v * sine / level
    u, v, w = u * shrink, v * cosine + level * sine, w * shrink
    cosine, sine = np.cos(pitch), np.sin(pitch)
    dynamic = reading.total - reading.static
    return replace(
        reading,
        direction=np.stack([u * cosine - w * sine, v, w * cosine + u * sine]),
        total=reading.total + total * dynamic,
        static=reading.static + static * dynamic,
    )


def _waves(reading: Reading) -> tuple[Array, Array, Array, Array]:
    """The waves that errors of the calibration are made of, at the directions of a reading, shape (n,) each."""
    number = 1.0 / (WAVE_SPACINGS * reading.weights[0][0].hull.spacing)
    by_pitch, by_yaw = number * reading.pitch, number * reading.yaw
    cos_pitch, sin_pitch, cos_yaw, sin_yaw = np.cos(by_pitch), np.sin(by_pitch), np.cos(by_yaw), np.sin(by_yaw)
    return cos_pitch * cos_yaw, sin_pitch * cos_yaw, cos_pitch * sin_yaw, sin_pitch * sin_yaw
