"""The chain of a section traverse, from raw points to its drag, as one function of data, settings and errors."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from types import MappingProxyType
from typing import Literal

import numpy as np

from wakeledger.core.errors import DataError, InputError, SurveyError
from wakeledger.core.grid import Array
from wakeledger.core.points import Channel, Points
from wakeledger.intake.gridding.line import Line
from wakeledger.intake.probe.traverse import Traverse
from wakeledger.physics.fields.traverse_window import WakeWindow, edge_levels, outer_levels, wake_edges
from wakeledger.physics.methods.section_drag import EdgeStatic
from wakeledger.physics.methods.section_kernels import KERNELS, speed_at, static_at, total_at, window_weights
from wakeledger.physics.methods.section_walls import SectionWalls, section_wake_blockage
from wakeledger.run.chain.outputs import coefficient_of, corrected_coefficient_of, estimate_of
from wakeledger.run.section.state import SectionState, section_state
from wakeledger.stream.reference import Reference, resolve_reference

#: The row of a section, and what is held against it.
ROW = "section_drag"
METHODS = ("betz", "momentum")
ESTIMATES = tuple((ROW, method) for method in METHODS)
_COEFFICIENTS = (coefficient_of(ROW), corrected_coefficient_of(ROW))
#: Everything the chain gives, in the order of its output vector.
OUTPUTS: tuple[str, ...] = (
    ROW,
    coefficient_of(ROW),
    corrected_coefficient_of(ROW),
    *(estimate_of(ROW, method) for method in METHODS),
)


@dataclass(frozen=True)
class SectionSettings:
    """What the survey file fixes about the chain, in SI.

    Attributes
    ----------
    reference : mapping of str to float
        The inputs of ``[reference]`` as given.
    compressible : bool
        Whether the compressible relations are used; decided once, on the nominal values.
    primary : {"total_pressure", "velocity"}
        Which variables were measured.
    edge_static : {"measured", "stream", "edge_speed"}
        Where the static pressure across the wake comes from.
    along : {"y", "z"}
        Along which axis the traverse runs.
    chord : float
        Chord that the coefficient refers to, m.
    level : float
        How far the wake's edge stands out of the noise, in standard deviations.
    grow : float
        How far the window is moved out beyond the edges that were found, m.
    include : tuple of (float, float)
        Stretches of the traverse that belong to the window whatever was found, m.
    height : float or None
        Distance of the walls above and below the section, m; None without walls.
    solid_blockage : float
        What the section's thickness adds to the stream's speed at it, Λσ, as a share of the speed.
    """

    reference: Mapping[str, float]
    compressible: bool
    primary: str
    edge_static: EdgeStatic
    along: Literal["y", "z"]
    chord: float
    level: float = 3.0
    grow: float = 0.0
    include: tuple[tuple[float, float], ...] = ()
    height: float | None = None
    solid_blockage: float = 0.0


@dataclass(frozen=True)
class SectionVariation:
    """A numerical choice made differently, to see what it is worth.

    Attributes
    ----------
    window : WakeWindow or None
        A given window instead of a found one.
    reach : float
        Factor on how far beside the wake the outer flow is used for its level.
    """

    window: WakeWindow | None = None
    reach: float = 1.0


@dataclass(frozen=True, eq=False)
class SectionReduction:
    """One pass through the chain.

    Attributes
    ----------
    reference : Reference
        The undisturbed stream.
    coordinate : ndarray, shape (m,)
        Places along the traverse, ascending, m.
    total_pressure, static_pressure, speed : ndarray, shape (m,)
        The traverse as it was integrated, Pa and m/s; the total pressure zeroed in the outer flow.
    total_temperature : ndarray, shape (m,), or None
        K, where it was measured.
    window : WakeWindow
        The part that was integrated.
    loss_zero : (float, float)
        Loss of the outer flow that was taken out at the window's lower and upper edge, straight between, Pa; NaN where
        there is no outer flow on either side, zero where the total pressure follows from the edge speeds.
    values : mapping of str to float
        The outputs by name.
    height : float or None
        Distance of the walls, m.
    wake_blockage : float
        Velocity u_b that the wake adds at the model between walls, m/s.
    """

    reference: Reference
    coordinate: Array
    total_pressure: Array
    static_pressure: Array
    speed: Array
    total_temperature: Array | None
    window: WakeWindow
    loss_zero: tuple[float, float]
    values: Mapping[str, float]
    height: float | None = None
    wake_blockage: float = 0.0

    @property
    def vector(self) -> Array:
        """The outputs in the order of `OUTPUTS`."""
        return np.array([self.values[name] for name in OUTPUTS])

    @property
    def loss(self) -> Array:
        """Total pressure of the stream less the local one, Pa."""
        return self.reference.total_pressure - self.total_pressure

    @property
    def inside(self) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
        """Places inside the window."""
        return (self.coordinate >= self.window.lower) & (self.coordinate <= self.window.upper)

    def integrated(self, *, every: int = 1, phase: int = 0) -> Array:
        """The outputs from a part of the places, the window and everything else being the same.

        Parameters
        ----------
        every, phase : int
            Each how many-th place is used, beginning with which one.

        Returns
        -------
        ndarray
            In the order of `OUTPUTS`.
        """
        part = slice(phase, None, every)
        z = self.coordinate[part]
        weights = window_weights(z, self.window.lower, self.window.upper)
        drags = self.drags(part, weights)
        ratios = [self.values[name] / self.values[ROW] if self.values else math.nan for name in _COEFFICIENTS]
        return np.array([drags[0], *(drags[0] * ratio for ratio in ratios), *drags[1:]])

    def drags(self, part: slice, weights: Array) -> list[float]:
        """Jones, Betz and momentum over a part of the places, N/m; between walls less what these hold back."""
        total, static = self.total_pressure[part], self.static_pressure[part]
        heat = None if self.total_temperature is None else self.total_temperature[part]
        excess, ref = self._blockage(part, weights)[1], self.reference
        return [
            float(KERNELS[name](self.coordinate[part], total, static, ref, weights=weights, total_temperature=heat))
            - excess
            for name in ("jones", *METHODS)
        ]

    def _blockage(self, part: slice, weights: Array) -> tuple[float, float]:
        """Wake-blockage velocity, m/s, and the drag that goes with it, N/m; both zero without walls."""
        if self.height is None:
            return 0.0, 0.0
        heat = None if self.total_temperature is None else self.total_temperature[part]
        velocity, excess = section_wake_blockage(
            self.total_pressure[part],
            self.static_pressure[part],
            self.reference,
            weights=weights,
            height=self.height,
            total_temperature=heat,
        )
        return float(velocity), float(excess)

    def with_blockage(self) -> SectionReduction:
        """The same pass with the wake-blockage velocity filled in."""
        weights = window_weights(self.coordinate, self.window.lower, self.window.upper)
        return replace(self, wake_blockage=self._blockage(slice(None), weights)[0])


_NO_ERRORS: Mapping[str, Array] = MappingProxyType({})
_AS_FOUND = SectionVariation()


@dataclass(frozen=True, eq=False)
class SectionChain:
    """Data and settings of one traverse, ready to be reduced under any errors.

    Attributes
    ----------
    points : Points
        The points as read.
    line : Line
        How they come onto the places of the traverse.
    settings : SectionSettings
        The survey's settings.
    drifting : bool
        Whether the total pressure beside the wake is a sloping line, as where its reference drifts, and not a level.
    traverse : Traverse or None
        How readings of pitots become pressures; None where pressures or velocities are given.
    """

    points: Points
    line: Line
    settings: SectionSettings
    drifting: bool = False
    traverse: Traverse | None = None

    def reference(self, errors: Mapping[str, Array] = _NO_ERRORS) -> Reference:
        """The undisturbed stream under errors of its inputs."""
        given = {name: value + float(errors.get(f"reference.{name}", 0.0)) for name, value in self._given.items()}
        return resolve_reference(given, compressible=self.settings.compressible)

    @property
    def _given(self) -> Mapping[str, float]:
        return self.settings.reference

    def state(self, reference: Reference, errors: Mapping[str, Array] = _NO_ERRORS) -> SectionState:
        """What the points say, under errors of their variables."""
        values = {
            name: channel.values + errors.get(f"plane.{name}", 0.0) for name, channel in self.points.channels.items()
        }
        kinds: Mapping[str, Channel] = self.points.channels
        if self.traverse is not None:
            read = self.traverse.state(values, reference, errors)
            pressures = {"total_pressure": read.total_pressure, "static_pressure": read.static_pressure}
            values = {name: pressure for name, pressure in pressures.items() if pressure is not None}
            kinds = {}
        return section_state(
            values,
            kinds,
            reference,
            primary=self.settings.primary,
            edge_static=self.settings.edge_static,
            axes=self.points.axes,
        )

    def reduce(
        self, errors: Mapping[str, Array] = _NO_ERRORS, *, vary: SectionVariation = _AS_FOUND
    ) -> SectionReduction:
        """One pass from points to the drag.

        Parameters
        ----------
        errors : mapping of str to ndarray
            Additive errors of the inputs in SI. Flow angles do not matter, and of the positions only that along the
            traverse does.
        vary : SectionVariation
            Numerical choices made differently.

        Returns
        -------
        SectionReduction

        Raises
        ------
        DataError
            If no wake stands out of the noise.
        """
        settings = self.settings
        reference = self.reference(errors)
        state = self.state(reference, errors)
        z = self.line.position
        total, static, speed, heat = (
            None if values is None else self.line.apply(values)
            for values in (state.total_pressure, state.static_pressure, state.speed, state.total_temperature)
        )
        shift = errors.get(f"position.{settings.along}")
        if shift is not None and np.any(shift):
            z = z + self.line.apply(shift)
            order = np.argsort(z, kind="stable")
            z = z[order]
            total, static, speed, heat = (
                None if values is None else values[order] for values in (total, static, speed, heat)
            )
        window = vary.window
        if window is None:
            window = self._window(z, total, speed, reference)
        if settings.edge_static == "stream":
            static = np.full(z.size, reference.static_pressure)
        elif settings.edge_static == "edge_speed":
            assert speed is not None
            lower, upper = edge_levels(z, speed, window, reach=0.25 * vary.reach)
            static = static_at(lower + (upper - lower) * (z - window.lower) / window.width, reference)
        assert static is not None
        zero = (0.0, 0.0)
        if total is None:
            assert speed is not None
            total = total_at(speed, static, reference, total_temperature=heat)
        if state.total_pressure is not None or settings.edge_static == "stream":
            zero = _both_sides(outer_levels(z, reference.total_pressure - total, window, reach=1.5 * vary.reach))
            if math.isfinite(zero[0]):
                total = total + np.interp(z, (window.lower, window.upper), zero)
        if speed is None or settings.primary == "total_pressure":
            speed = speed_at(total, static, reference.total_temperature if heat is None else heat, reference)
        found = SectionReduction(reference, z, total, static, speed, heat, window, zero, {}, settings.height)
        found = found.with_blockage()
        if settings.edge_static == "stream" and settings.height is not None and state.total_pressure is not None:
            found = self._behind_the_model(found)
        drags = found.drags(slice(None), window_weights(z, window.lower, window.upper))
        coefficient = drags[0] / (reference.dynamic_pressure * settings.chord)
        values = {ROW: drags[0], coefficient_of(ROW): coefficient}
        values[corrected_coefficient_of(ROW)] = self._corrected(coefficient, reference, errors)
        values |= {estimate_of(ROW, method): drag for method, drag in zip(METHODS, drags[1:], strict=True)}
        return replace(found, values=values)

    def _behind_the_model(self, found: SectionReduction) -> SectionReduction:
        """The pass with the stream's static pressure lowered by the 2u_b that the walls add behind the model."""
        reference = found.reference
        heat = reference.total_temperature if found.total_temperature is None else found.total_temperature
        for _ in range(3):
            lower = static_at(np.full(found.coordinate.size, reference.speed + 2 * found.wake_blockage), reference)
            speed = speed_at(found.total_pressure, lower, heat, reference)
            found = replace(found, static_pressure=lower, speed=speed).with_blockage()
        return found

    def _corrected(self, coefficient: float, reference: Reference, errors: Mapping[str, Array]) -> float:
        """The coefficient in an unbounded stream; NaN without walls."""
        walls = self.walls(reference, errors)
        return math.nan if walls is None else float(walls.corrected_drag(coefficient))

    def walls(self, reference: Reference, errors: Mapping[str, Array] = _NO_ERRORS) -> SectionWalls | None:
        """The walls' corrections under an error of the given solid blockage; None without walls."""
        settings = self.settings
        if settings.height is None:
            return None
        solid = settings.solid_blockage + float(errors.get("boundary.solid_blockage", 0.0))
        mach = reference.mach if settings.compressible else 0.0
        if not mach < 1:
            raise SurveyError(
                f"the stream's Mach number is {mach:.3g}",
                place="[boundary] kind",
                remedy='the wall corrections of a section are for subsonic streams: write "free_air"',
            )
        return SectionWalls(settings.chord, settings.height, solid, mach)

    def vectors(self, errors: dict[str, Array], *, vary: SectionVariation = _AS_FOUND) -> Array:
        """Many passes, one row of outputs each: what Monte Carlo calls.

        Parameters
        ----------
        errors : dict of str to ndarray, shape (k, n) or (k,)
            Additive errors of the inputs in SI, one draw after the other.
        vary : SectionVariation
            Numerical choices made differently.

        Returns
        -------
        ndarray, shape (k, m)
            Over `OUTPUTS`; NaN where a draw is no possible stream, or hides a wake that is to be found.
        """
        count = len(next(iter(errors.values())))
        result = np.full((count, len(OUTPUTS)), np.nan)
        with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
            for k in range(count):
                try:
                    result[k] = self.reduce({name: array[k] for name, array in errors.items()}, vary=vary).vector
                except InputError:
                    continue
        return result

    def _window(self, z: Array, total: Array | None, speed: Array | None, reference: Reference) -> WakeWindow:
        settings = self.settings
        if total is not None:
            deficit, sloping = reference.total_pressure - total, self.drifting
        else:
            assert speed is not None
            deficit, sloping = reference.speed - speed, True
        try:
            window = wake_edges(z, deficit, level=settings.level, sloping=sloping)
        except DataError:
            if not settings.include:
                raise
            ends = np.clip([edge for stretch in settings.include for edge in stretch], z[0], z[-1])
            return WakeWindow.given(z, deficit, float(ends.min()), float(ends.max()))
        lower, upper = window.lower - settings.grow, window.upper + settings.grow
        for start, stop in settings.include:
            lower, upper = min(lower, start), max(upper, stop)
        if (lower, upper) == (window.lower, window.upper):
            return window
        return replace(
            window,
            lower=max(lower, float(z[0])),
            upper=min(upper, float(z[-1])),
            enclosed=bool(z[0] < lower and upper < z[-1]),
        )


def _both_sides(levels: tuple[float, float]) -> tuple[float, float]:
    """Levels of the outer flow with a side that has none taken from the other one."""
    lower, upper = levels
    return (upper if math.isnan(lower) else lower), (lower if math.isnan(upper) else upper)
