"""The inputs that errors can be added to, and the survey file's sources brought onto them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Protocol

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import RegularGridInterpolator

from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.core.grid import Array
from wakeledger.core.points import Points
from wakeledger.intake.probe.reduction import CALIBRATION_INPUTS
from wakeledger.intake.state import normalisation
from wakeledger.physics.fields.differences import ddy, ddz
from wakeledger.run.chain.chain import STATE, Chain
from wakeledger.run.config import Source as DeclaredSource
from wakeledger.run.config import Survey
from wakeledger.stream.reference import Reference

#: Name of the source made from a file's own standard deviations.
SAMPLES_SOURCE = "scatter of the samples"


#: Channels that change with time and not with the place.
_NOT_OF_PLACE = frozenset({"time", "reference_dynamic_pressure", "reference_static_pressure"})


class HasRows(Protocol):
    """Knows the traverse row of each point: a gridding, or the places of a line."""

    @property
    def row_index(self) -> NDArray[np.int64]:
        """Row of each point, shape (n,)."""


def layouts(survey: Survey, points: Points, gridding: HasRows, names: Sequence[str]) -> dict[str, InputLayout]:
    """Nominal values, places and rows of the inputs that some source acts on.

    Parameters
    ----------
    survey : Survey
        The survey file.
    points : Points
        The points as read.
    gridding : HasRows
        Knows the traverse row of each point.
    names : sequence of str
        The inputs wanted, as ``applies_to`` writes them.

    Returns
    -------
    dict of str to InputLayout
        Flow angles and the calibration of a probe are single numbers where only systematic sources act on them, else
        one number per point.
    """
    places = np.stack([points.y, points.z], axis=1)
    row = gridding.row_index
    pointwise = {
        name
        for source in survey.uncertainty.source
        for name in source.applies_to
        if source.effect != "systematic" and name.split(".")[0] in ("angle", "calibration")
    }
    raw = survey.plane.primary == "hole_pressures"
    found: dict[str, InputLayout] = {}
    for name in names:
        room, key = name.split(".", 1)
        if room == "probe":
            found[name] = InputLayout(points.channels[key].values, positions=places, row=row)
        elif room == "correction":
            found[name] = InputLayout(0.0)
        elif room == "calibration":
            # Its errors are multiples of its own standard uncertainty, so that a relative one is a multiple too.
            each = InputLayout(np.ones(points.n), positions=places, row=row)
            found[name] = each if room in pointwise else InputLayout(1.0)
        elif room == "plane":
            std = standard_errors(points).get(key)
            found[name] = InputLayout(points.channels[key].values, positions=places, row=row, std=std)
        elif room == "position":
            found[name] = InputLayout(getattr(points, key), positions=places, row=row)
        elif room == "boundary":
            assert survey.boundary is not None
            found[name] = InputLayout(survey.boundary.chain_inputs()[name].value)
        elif room == "angle":
            offset = float(getattr(survey.probe[0], key) if raw else getattr(survey.plane.axes, f"{key}_offset"))
            if name in pointwise:
                found[name] = InputLayout(np.full(points.n, offset), positions=places, row=row)
            else:
                found[name] = InputLayout(offset)
        elif room == "reference":
            found[name] = InputLayout(survey.reference.given()[key])
        elif room == "model" and survey.model is not None:
            found[name] = InputLayout(survey.model.given()[key])
    return found


def standard_errors(points: Points) -> dict[str, Array]:
    """Standard uncertainty of each point's mean from its own samples, by channel.

    The file's standard deviation over the root of the number of samples; without a number of samples the standard
    deviation stands as it is.
    """
    root = np.ones(points.n) if points.samples is None else np.sqrt(np.maximum(points.samples, 1))
    return {name: std / root for name, std in points.std.items()}


def sources(survey: Survey, points: Points, reference: Reference) -> tuple[Source, ...]:
    """The survey's sources in the units of its channels, with those of the file's own samples and of given values.

    Parameters
    ----------
    survey : Survey
        The survey file.
    points : Points
        The points as read.
    reference : Reference
        The nominal stream, for channels that are divided by one of its quantities.

    Returns
    -------
    tuple of Source
    """
    found: list[Source] = []
    for declared in survey.uncertainty.source:
        found.extend(_in_channel_units(declared, points, reference))
    if points.std and not any(source.name == SAMPLES_SOURCE for source in found):
        names = tuple(f"plane.{name}" for name in points.std)
        found.append(Source(SAMPLES_SOURCE, names, "random", 1.0, from_samples=True))
    # Where nothing is known of the measurement's errors, those of given values alone would pass for all there are.
    if survey.boundary is not None and (found or survey.plane.primary == "hole_pressures"):
        for name, each in survey.boundary.chain_inputs().items():
            found.append(Source(each.label, (name,), "systematic", each.standard_uncertainty))
    return tuple(found)


def _in_channel_units(declared: DeclaredSource, points: Points, reference: Reference) -> list[Source]:
    """One source, or several of the same size where its targets are written in different units."""
    base = Source(
        name=declared.name,
        applies_to=_inputs_of(declared.applies_to),
        effect=declared.effect,
        standard_uncertainty=declared.standard_uncertainty,
        relative=declared.relative,
        distribution=declared.distribution,
        correlation_length=declared.correlation_length,
        degrees_of_freedom=declared.degrees_of_freedom,
        shared_id=declared.shared_id,
    )
    if declared.scale != "absolute":
        return [base]
    by_divisor: dict[float, list[str]] = {}
    for name in base.applies_to:
        by_divisor.setdefault(_divisor(name, points, reference), []).append(name)
    if len(by_divisor) == 1:
        divisor = next(iter(by_divisor))
        return [replace(base, standard_uncertainty=base.standard_uncertainty / divisor)]
    return [
        replace(
            base,
            name=f"{base.name} ({', '.join(names)})",
            applies_to=tuple(names),
            standard_uncertainty=base.standard_uncertainty / divisor,
        )
        for divisor, names in by_divisor.items()
    ]


def _inputs_of(applies_to: Sequence[str]) -> tuple[str, ...]:
    """The names a source is given for as names of inputs: a calibration errs in each of what it gives."""
    found: list[str] = []
    for name in applies_to:
        found.extend(CALIBRATION_INPUTS if name == "calibration" else (name,))
    return tuple(found)


def _divisor(name: str, points: Points, reference: Reference) -> float:
    """What a channel was divided by before it was written, 1 for a plain dimensional one."""
    room, key = name.split(".", 1)
    channel = points.channels.get(key) if room in ("plane", "probe") else None
    if channel is None:
        return 1.0
    divisor = reference.density if channel.kinematic else 1.0
    if channel.normalised_by is not None:
        divisor *= normalisation(channel.normalised_by, reference)
    return divisor


def gradients(chain: Chain) -> Mapping[str, Array]:
    """Derivatives of every channel along y and z at the points, shape (2, n), unit per metre.

    They carry errors of position into the values; zero at points outside the grid. Where several tubes took the points,
    which do not read alike, those of the flow states, ``state.u`` and so on.
    """
    points, gridding = chain.points, chain.gridding
    values = {name: channel.values for name, channel in points.channels.items() if name not in _NOT_OF_PLACE}
    if chain.traverse is not None and len(chain.traverse.tubes) > 1:
        state = chain.state(chain.reference())
        values = {f"state.{name}": getattr(state, name) for name in STATE}
    grid = gridding.grid
    places = np.stack([points.z, points.y], axis=1)
    found = {}
    for name, array in values.items():
        field = gridding.apply(array)
        slopes = []
        for slope in (ddy(field, grid, order=2), ddz(field, grid, order=2)):
            interpolate = RegularGridInterpolator((grid.z, grid.y), slope, bounds_error=False, fill_value=0.0)
            slopes.append(interpolate(places))
        found[name] = np.stack(slopes)
    return found
