"""What a section traverse says at each point: pressures or speed, whichever was measured, absolute and in SI."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import DataError, SurveyError
from wakeledger.core.grid import Array
from wakeledger.core.points import Channel, Points
from wakeledger.intake.state import REVERSE_LIMIT, absolute
from wakeledger.physics.methods.section_drag import EdgeStatic
from wakeledger.physics.methods.section_kernels import speed_at, total_at
from wakeledger.stream.reference import Reference

#: Share of the points that may have no real flow state before the data are refused: one point of a short traverse may.
NONPHYSICAL_LIMIT = 0.10
_PLACE = "[plane.columns]"


@dataclass(frozen=True, eq=False)
class SectionState:
    """What is known at the points of a traverse, SI, shape (n,) each; None where it is not known point by point.

    Attributes
    ----------
    total_pressure, static_pressure : ndarray or None
        Pa, on the reference's zero.
    speed : ndarray or None
        Speed, m/s, negative where the flow runs upstream.
    total_temperature : ndarray or None
        K, where a temperature was measured and the compressible relations are used.
    impossible : ndarray of bool
        Points that were measured but have no real flow state.
    """

    total_pressure: Array | None
    static_pressure: Array | None
    speed: Array | None
    total_temperature: Array | None
    impossible: NDArray[np.bool_]

    @property
    def usable(self) -> NDArray[np.bool_]:
        """Points where everything needed is known and possible, shape (n,)."""
        found = ~self.impossible
        for values in (self.total_pressure, self.static_pressure, self.speed, self.total_temperature):
            if values is not None:
                found &= np.isfinite(values)
        return found


def section_state(
    values: Mapping[str, Array],
    kinds: Mapping[str, Channel],
    reference: Reference,
    *,
    primary: str,
    edge_static: EdgeStatic,
    axes: Array,
) -> SectionState:
    """What each point of a section traverse measured.

    Parameters
    ----------
    values : mapping of str to ndarray, shape (n,)
        Channels in SI, as measured or with errors added.
    kinds : mapping of str to Channel
        What each is measured against.
    reference : Reference
        The undisturbed stream.
    primary : {"total_pressure", "velocity"}
        Total pressure: it is taken as measured, and the static pressure too, or from it and the speed. Velocity: the
        speed is taken as measured, and the total pressure follows from it and the static pressure.
    edge_static : {"measured", "stream", "edge_speed"}
        Where the static pressure comes from; it is given here for ``"measured"`` only.
    axes : ndarray, shape (3, 3)
        Signed permutation P of the file's vector components, wind = P @ file.

    Returns
    -------
    SectionState

    Raises
    ------
    SurveyError
        If a variable that is needed has no column.

    Notes
    -----
    The speed is the magnitude of the components that were measured, so the mounting of the probe does not matter.
    """
    given = {name: absolute(array, kinds.get(name), reference) for name, array in values.items()}
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        speed = _speed(given, axes)
        total, static = given.get("total_pressure"), given.get("static_pressure")
        heat = _total_temperature(given, speed, reference) if reference.compressible else None
        own: Array | None = None
        if primary == "total_pressure":
            total = _needed(total, "total_pressure", "it is the primary variable")
            if edge_static == "measured" and static is None:
                static = _static_from(
                    total, _needed(speed, "static_pressure, u or speed", _why(edge_static)), reference, heat
                )
            if edge_static == "edge_speed":
                if speed is None and static is not None:
                    speed = speed_at(total, static, _temperature(heat, reference), reference)
                own = _needed(speed, "u or speed", _why(edge_static))
        else:
            own = _needed(speed, "u or speed", "it is the primary variable")
            if edge_static == "measured":
                if static is None:
                    total = _needed(total, "static_pressure or total_pressure", _why(edge_static))
                    static = _static_from(total, own, reference, heat)
                else:
                    total = total_at(own, static, reference, total_temperature=heat)
            else:
                total = None
        if edge_static != "measured":
            static = None
        impossible = _impossible(total, static, own, heat, reference)
    return SectionState(total, static, own, heat, impossible)


def check_section_state(state: SectionState, points: Points) -> None:
    """Refuse a traverse whose flow state is wrong at more than a few points.

    Parameters
    ----------
    state : SectionState
        Of the survey as measured.
    points : Points
        The points as read, so that messages name file and line.

    Raises
    ------
    DataError
        If more than a tenth of the points have no real flow state, or run upstream.
    """
    reverse = np.zeros(points.n, dtype=bool) if state.speed is None else np.nan_to_num(state.speed, nan=1.0) <= 0
    for wrong, limit, found, remedy in (
        (
            reverse,
            REVERSE_LIMIT,
            "the flow runs upstream (u <= 0)",
            "check the column of u and the directions in [plane.axes]",
        ),
        (
            state.impossible,
            NONPHYSICAL_LIMIT,
            "there is no real flow state (total pressure below static pressure, or a speed that is not possible)",
            "check columns, units and relative_to of total_pressure and static_pressure",
        ),
    ):
        count = int(np.count_nonzero(wrong))
        if count > limit * points.n:
            first = int(np.flatnonzero(wrong)[0])
            raise DataError(
                f"{found} at {count} of {points.n} points",
                file=points.source,
                place=f"line {points.line[first]}",
                remedy=remedy,
            )


def _why(edge_static: str) -> str:
    return f'edge_static = "{edge_static}" rests on it'


def _needed(values: Array | None, name: str, why: str) -> Array:
    if values is None:
        raise SurveyError(f"{name} has no column, and {why}", place=_PLACE, remedy="add it, or choose another one")
    return values


def _speed(given: Mapping[str, Array], axes: Array) -> Array | None:
    if "speed" in given:
        return given["speed"]
    source = int(np.argmax(np.abs(axes[0])))
    along = "uvw"[source]
    if along not in given:
        return None
    square = sum(given[name] ** 2 for name in "uvw" if name in given)
    signed: Array = np.copysign(np.sqrt(square), axes[0, source] * given[along])
    return signed


def _total_temperature(given: Mapping[str, Array], speed: Array | None, reference: Reference) -> Array | None:
    if "total_temperature" in given:
        return given["total_temperature"]
    total, static = given.get("total_pressure"), given.get("static_pressure")
    temperature = given.get("temperature")
    if temperature is None and "density" in given and static is not None:
        temperature = static / (given["density"] * reference.gas_constant)
    if temperature is None:
        return None
    if speed is not None:
        return temperature + 0.5 * speed**2 / reference.heat_capacity
    if total is not None and static is not None:
        warmer: Array = temperature * (total / static) ** ((reference.gamma - 1.0) / reference.gamma)
        return warmer
    return None


def _temperature(heat: Array | None, reference: Reference) -> Array | float:
    return reference.total_temperature if heat is None else heat


def _static_from(total: Array, speed: Array, reference: Reference, heat: Array | None) -> Array:
    """Static pressure where the total pressure and the speed are known, Pa."""
    if not reference.compressible:
        return total - 0.5 * reference.density * speed**2
    ratio = 1.0 - 0.5 * speed**2 / (reference.heat_capacity * _temperature(heat, reference))
    result: Array = total * ratio ** (reference.gamma / (reference.gamma - 1.0))
    return result


def _impossible(
    total: Array | None, static: Array | None, speed: Array | None, heat: Array | None, reference: Reference
) -> NDArray[np.bool_]:
    """Points whose inputs are there and contradict a real flow."""
    present = [values for values in (total, static, speed, heat) if values is not None]
    wrong = np.zeros(present[0].shape, dtype=bool)
    if total is not None and static is not None:
        wrong |= total < static
    if speed is not None:
        wrong |= speed < 0
        if reference.compressible:
            wrong |= speed**2 >= 2.0 * reference.heat_capacity * _temperature(heat, reference)
    if reference.compressible:
        for pressure in (total, static):
            if pressure is not None:
                wrong |= pressure <= 0
    if heat is not None:
        wrong |= heat <= 0
    return wrong
