"""Ranges of the measured variables and flow angles, and their noise as the data show it and as it is declared."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from wakeledger.confidence.local_noise import local_noise
from wakeledger.confidence.noise import estimate_noise
from wakeledger.core.grid import Array
from wakeledger.core.names import VARIABLES
from wakeledger.core.points import Channel, Points
from wakeledger.intake.gridding import Gridding
from wakeledger.ledger.inspection import AngleRange, ChannelSummary
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.run.inputs import sources, standard_errors
from wakeledger.run.load import SurveyInput
from wakeledger.stream.reference import Reference

#: Rooms of ``applies_to`` whose inputs are the channels themselves.
_CHANNEL_ROOMS = ("plane", "probe")


def channel_summaries(
    points: Points,
    *,
    noise: Mapping[str, float],
    declared: Mapping[str, float],
    repeatability: Mapping[str, float],
) -> tuple[ChannelSummary, ...]:
    """Range and noise of each measured variable.

    Parameters
    ----------
    points : Points
        The points as read.
    noise, declared, repeatability : mapping of str to float
        Standard deviations by channel, in the channel's unit: shown by the data, declared, and of repeats.

    Returns
    -------
    tuple of ChannelSummary
    """
    found = []
    for name, channel in points.channels.items():
        finite = channel.values[np.isfinite(channel.values)]
        low, high = (float(finite.min()), float(finite.max())) if finite.size else (math.nan, math.nan)
        found.append(
            ChannelSummary(
                name=name,
                unit=_unit(name, channel),
                minimum=low,
                maximum=high,
                noise=noise.get(name, math.nan),
                missing=int(channel.values.size - finite.size),
                declared_noise=declared.get(name, math.nan),
                repeatability=repeatability.get(name, math.nan),
            )
        )
    return tuple(found)


def _unit(name: str, channel: Channel) -> str:
    if channel.kinematic and not channel.normalised_by:
        return "m2 s-1" if name == "turbulent_viscosity" else "m2 s-2"
    return "1" if channel.normalised_by else VARIABLES[name].unit if name in VARIABLES else "1"


def shown_noise(points: Points, gridding: Gridding, wake: Mask, first_of_place: NDArray[np.bool_]) -> dict[str, float]:
    """Noise of each channel in the outer flow, by differences on a uniform grid, else from the nearest neighbours.

    Parameters
    ----------
    points : Points
        The points as read.
    gridding : Gridding
        How they come onto the grid.
    wake : ndarray of bool, shape (nz, ny)
        The wake region.
    first_of_place : ndarray of bool, shape (n,)
        Usable points, one of each place.

    Returns
    -------
    dict of str to float
        NaN where too little outer flow is left.
    """
    if gridding.kind == "uniform":
        skip = wake | gridding.filled
        return {
            name: estimate_noise(gridding.apply(channel.values), mask=skip).standard_deviation
            for name, channel in points.channels.items()
            if name != "time"
        }
    grid = gridding.grid
    iz = np.rint((points.z - grid.z0) / grid.dz).astype(int)
    iy = np.rint((points.y - grid.y0) / grid.dy).astype(int)
    inside = (iz >= 0) & (iz < grid.nz) & (iy >= 0) & (iy < grid.ny)
    outer = inside & first_of_place
    outer[inside] &= ~wake[iz[inside], iy[inside]]
    places = np.column_stack([points.y / gridding.raw_spacing[0], points.z / gridding.raw_spacing[1]])
    found = {}
    for name, channel in points.channels.items():
        if name == "time":
            continue
        chosen = outer & np.isfinite(channel.values)
        found[name] = float(local_noise(places[chosen], channel.values[None, chosen])[0])
    return found


def declared_noise(survey: SurveyInput, reference: Reference) -> dict[str, float]:
    """Standard deviation of the random errors that the survey's sources put on each channel, the rms over its points.

    Parameters
    ----------
    survey : SurveyInput
        The survey.
    reference : Reference
        The nominal stream.

    Returns
    -------
    dict of str to float
        Channels that a random source acts on directly; errors of flow angles and positions are not among them.
    """
    points = survey.points
    squares: dict[str, float] = {}
    for source in sources(survey.survey, points, reference):
        for name in source.applies_to if source.effect == "random" else ():
            room, _, key = name.partition(".")
            if room not in _CHANNEL_ROOMS or key not in points.channels:
                continue
            scale: Array = np.ones(1)
            if source.relative:
                scale = points.channels[key].values
            elif source.from_samples:
                scale = standard_errors(points)[key]
            known = scale[np.isfinite(scale)]
            if known.size:
                squares[key] = squares.get(key, 0.0) + source.standard_uncertainty**2 * float(np.mean(known**2))
    return {name: math.sqrt(square) for name, square in squares.items()}


def angle_ranges(u: Array, v: Array, w: Array, *, y: Array, z: Array) -> tuple[AngleRange, ...]:
    """Ranges of the flow angles, and where their ends are.

    Parameters
    ----------
    u, v, w : ndarray, shape (n,)
        Velocity at the points in wind axes, m/s; NaN where it is not known.
    y, z : ndarray, shape (n,)
        Positions, m.

    Returns
    -------
    tuple of AngleRange
        Pitch and yaw; empty where no point has a velocity.
    """
    known = np.isfinite(u) & np.isfinite(v) & np.isfinite(w) & (u**2 + v**2 + w**2 > 0)
    if not known.any():
        return ()
    u, v, w, y, z = (values[known] for values in (u, v, w, y, z))
    speed = np.sqrt(u**2 + v**2 + w**2)
    found = []
    for name, angle in (("pitch", np.arctan2(w, u)), ("yaw", np.arcsin(np.clip(v / speed, -1.0, 1.0)))):
        low, high = int(np.argmin(angle)), int(np.argmax(angle))
        at = [(float(y[k]), float(z[k])) for k in (low, high)]
        found.append(AngleRange(name, float(angle[low]), float(angle[high]), at[0], at[1]))
    return tuple(found)
