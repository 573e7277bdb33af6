"""A line traverse behind a section looked at."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.flags import Flag, decode
from wakeledger.core.grid import Array
from wakeledger.ledger.inspection import AngleRange, EdgeState, Inspection
from wakeledger.ledger.plane_map import PlaneMap, plane_map
from wakeledger.physics.methods.section_kernels import window_weights
from wakeledger.run import tables
from wakeledger.run.checks import EDGE_CELLS
from wakeledger.run.inspection.advice import recommendations
from wakeledger.run.inspection.channels import angle_ranges, channel_summaries, declared_noise
from wakeledger.run.inspection.edges import EdgeProfile, edge_state
from wakeledger.run.inspection.places import Places, places_of_line
from wakeledger.run.load import SurveyInput
from wakeledger.run.section.checks import section_checks
from wakeledger.run.section.survey import PreparedSection, prepare_section

_SIDES = {"y": ("port", "starboard"), "z": ("lower", "upper")}
#: Steps between neighbouring places beside the wake that show the noise.
_FEWEST_STEPS = 6


def inspect_section(survey: SurveyInput) -> Inspection:
    """Read and check a section survey without reducing it.

    Parameters
    ----------
    survey : SurveyInput
        With a ``[section]``.

    Returns
    -------
    Inspection

    Raises
    ------
    InputError
        If the survey or its data are wrong.
    """
    prepared = prepare_section(survey)
    chain, nominal, line, points = prepared.chain, prepared.nominal, prepared.chain.line, survey.points
    along = chain.settings.along
    vertical = along == "z"
    low, high = float(line.position[0]), float(line.position[-1])
    checks = section_checks(nominal, prepared.facts)
    places = places_of_line(points, getattr(points, along), prepared.state.usable, line.spacing)
    repeats = places.repeats()
    channels = channel_summaries(
        points,
        noise=_noise(prepared),
        declared=declared_noise(survey, nominal.reference),
        repeatability=places.repeatability(points),
    )
    edges = _edges(prepared)
    missing, in_wake = _lost(places, prepared)
    return Inspection(
        title=survey.survey.title,
        source=points.source,
        points=points.n,
        arrangement=f"line traverse along {along}",
        shape=(1, line.position.size) if vertical else (line.position.size, 1),
        spacing=(math.nan, line.spacing) if vertical else (line.spacing, math.nan),
        window=(0.0, 0.0, low, high) if vertical else (low, high, 0.0, 0.0),
        coverage=1.0 - float(line.filled.mean()),
        station=survey.survey.plane.station,
        flags=decode(line.flag),
        channels=channels,
        edges=edges,
        checks=checks,
        recommendations=recommendations(
            checks,
            edges=edges,
            missing_in_wake=missing[:in_wake],
            channels=channels,
            repeats=repeats,
            spacing={along: line.spacing},
            place=lambda place: f"{along} = {1e3 * place[int(vertical)]:.4g} mm",
        ),
        notes=prepared.notes,
        reference=tables.reference_scalars(nominal.reference),
        test=survey.survey.test.given(),
        angles=_angles(prepared),
        repeats=repeats,
        missing_places=missing,
        missing_in_wake=in_wake,
        map=_map(prepared),
    )


def _noise(prepared: PreparedSection) -> dict[str, float]:
    """Noise of each channel from the steps between neighbouring places beside the wake."""
    line = prepared.chain.line
    outer = ~prepared.nominal.inside & ~line.filled
    pairs = outer[1:] & outer[:-1]
    found = {}
    for name, channel in prepared.chain.points.channels.items():
        found[name] = math.nan
        if np.count_nonzero(pairs) >= _FEWEST_STEPS and np.isfinite(channel.values[prepared.usable]).all():
            steps = np.diff(line.apply(channel.values))[pairs]
            found[name] = math.sqrt(0.5 * float(np.mean(steps**2)))
    return found


def _edges(prepared: PreparedSection) -> tuple[EdgeState, ...]:
    """State of both ends of the traverse."""
    nominal, along = prepared.nominal, prepared.chain.settings.along
    loss = np.where(nominal.inside, nominal.loss, 0.0)
    lost = np.abs(loss) * window_weights(nominal.coordinate, -math.inf, math.inf)
    shares = lost / float(lost.sum())
    lower, upper = _SIDES[along]
    ends = {
        lower: (shares, loss, -1, nominal.coordinate[0]),
        upper: (shares[::-1], loss[::-1], 1, nominal.coordinate[-1]),
    }
    profiles = {
        side: {
            "total-pressure loss": EdgeProfile(
                shares=part,
                strip=float(part[:EDGE_CELLS].sum()),
                spacing=prepared.chain.line.spacing,
                edge=float(edge),
                outward=outward,
            )
        }
        for side, (part, _, outward, edge) in ends.items()
    }
    return tuple(
        edge_state(
            side,
            profiles[side],
            {},
            largest_loss=float(ends[side][1][:EDGE_CELLS].max()) / nominal.reference.dynamic_pressure,
            largest_vorticity=math.nan,
            line="place",
            symmetrical=False,
        )
        for side in (lower, upper)
    )


def _lost(places: Places, prepared: PreparedSection) -> tuple[tuple[tuple[float, float], ...], int]:
    """Places without a usable measurement, those in the wake first, and how many these are."""
    lost = places.lost
    y, z = places.y[lost], places.z[lost]
    window = prepared.nominal.window
    position = z if prepared.chain.settings.along == "z" else y
    inside = (position >= window.lower) & (position <= window.upper)
    order = np.argsort(~inside, kind="stable")
    return tuple((float(y[k]), float(z[k])) for k in order), int(np.count_nonzero(inside))


def _angles(prepared: PreparedSection) -> tuple[AngleRange, ...]:
    """Ranges of the flow angles, where all three components were measured."""
    points = prepared.chain.points
    if not {"u", "v", "w"} <= set(points.channels):
        return ()
    measured: Array = np.stack([points.channels[name].values for name in "uvw"])
    u, v, w = points.axes @ measured
    return angle_ranges(u, v, w, y=points.y, z=points.z)


def _map(prepared: PreparedSection) -> PlaneMap:
    line, along = prepared.chain.line, prepared.chain.settings.along
    ends = (float(line.position[0]), float(line.position[-1]))
    # By position: the places of a traverse need not be evenly spaced.
    wanted = np.linspace(*ends, line.position.size)
    upper = np.clip(np.searchsorted(line.position, wanted), 1, line.position.size - 1)
    nearest = upper - (wanted - line.position[upper - 1] < line.position[upper] - wanted)
    shown = np.zeros(line.position.size, dtype=bool)
    shown[nearest] = True

    def has(flag: Flag) -> NDArray[np.bool_]:
        chosen = (line.flag & flag.value) != 0
        found = chosen[nearest]
        # A place between two evenly spaced ones is drawn at the nearer one.
        for place in np.flatnonzero(chosen & ~shown):
            found[int(np.argmin(np.abs(wanted - line.position[place])))] = True
        return np.asarray(found[None, :], dtype=bool)

    nobody = np.zeros((1, line.position.size), dtype=bool)
    return plane_map(
        wake=prepared.nominal.inside[nearest][None, :],
        missing=has(Flag.MISSING),
        flagged=has(Flag.OUT_OF_RANGE) | has(Flag.NON_PHYSICAL),
        repeated=has(Flag.AVERAGED),
        uncovered=nobody,
        y=ends if along == "y" else (0.0, 0.0),
        z=ends if along == "z" else (0.0, 0.0),
    )
