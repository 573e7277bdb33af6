"""An area survey looked at."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.flags import Flag, decode
from wakeledger.core.grid import UniformGrid
from wakeledger.core.points import Points
from wakeledger.intake.gridding import Gridding
from wakeledger.intake.state import nonphysical
from wakeledger.ledger.inspection import Inspection
from wakeledger.ledger.plane_map import PlaneMap, plane_map
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.run import tables
from wakeledger.run.checks import Facts, all_checks, worst_core
from wakeledger.run.gridded import Gridded, core_spacings, usable_points
from wakeledger.run.inspection.advice import recommendations, traverse_of
from wakeledger.run.inspection.channels import angle_ranges, channel_summaries, declared_noise, shown_noise
from wakeledger.run.inspection.edges import plane_edges
from wakeledger.run.inspection.places import Places, places_of
from wakeledger.run.load import SurveyInput
from wakeledger.run.traverse.notes import apart_notes
from wakeledger.run.traverse.probe_range import probe_range, tip_notes
from wakeledger.run.traverse.traverse import RawSurvey, corrected_points
from wakeledger.stream.reference import Reference

#: Checks whose value needs the noise bias or errors drawn from the sources; they are left to `reduce`.
_LATER = frozenset({"noise_bias", "declared_noise"})
_ARRANGEMENTS = {
    "uniform": "tensor grid, uniform",
    "tensor": "tensor grid, uneven lines",
    "scattered": "scattered",
}


def inspect_plane(survey: SurveyInput, gridded: Gridded) -> Inspection:
    """What can be said of an area survey from its grid and one pass through the chain.

    Parameters
    ----------
    survey : SurveyInput
        The survey.
    gridded : Gridded
        It on its grid.

    Returns
    -------
    Inspection
    """
    chain, state, points = gridded.chain, gridded.state, survey.points
    gridding, grid = chain.gridding, chain.gridding.grid
    nominal = chain.reduce(geometric=False)
    wake, vortices = nominal.region.mask, gridded.vortices.vortices
    facts = Facts(
        vortices=vortices,
        raw_spacing=max(gridding.raw_spacing),
        filled=gridding.filled,
        bias=math.nan,
        loss_zero_uncertainty=math.nan,
        spacings=core_spacings(chain, vortices),
        crossflow=chain.settings.crossflow,
        probe=probe_range(chain),
        computed=chain.settings.computed,
    )
    checks = tuple(check for check in all_checks(nominal, facts) if check.name not in _LATER)
    worst = worst_core(facts)
    places = places_of(points, usable_points(state), gridding.raw_spacing)
    repeats = places.repeats()
    raw = gridded.raw
    steady = points if raw is None else _steady(points, raw, nominal.reference)
    channels = channel_summaries(
        # The holes of different tubes read different pressures at one place.
        steady if raw is not None and len(raw.traverse.tubes) > 1 else points,
        noise=shown_noise(steady, gridding, wake, places.first),
        declared=declared_noise(survey, nominal.reference),
        repeatability=places.repeatability(steady),
    )
    edges = plane_edges(nominal, gridding.raw_spacing)
    missing, in_wake = _lost(places, wake, grid)
    flags = tables.plane_flags(chain)
    beyond = np.flatnonzero(tables.out_of_range(chain))
    corrected = (
        () if raw is None else (*(f"{sentence}." for sentence in raw.said.values()), *raw.notes, *tip_notes(chain))
    )
    apart = [] if raw is None else apart_notes(raw, chain, nominal)
    spacing = {"y": gridding.raw_spacing[0], "z": gridding.raw_spacing[1]}
    return Inspection(
        title=survey.survey.title,
        source=points.source,
        points=points.n,
        arrangement=_ARRANGEMENTS[gridding.kind],
        shape=(grid.ny, grid.nz),
        spacing=(grid.dy, grid.dz),
        window=(float(grid.y[0]), float(grid.y[-1]), float(grid.z[0]), float(grid.z[-1])),
        coverage=1.0 - gridding.filled_fraction,
        station=chain.settings.station,
        flags=decode(flags),
        channels=channels,
        edges=edges,
        checks=checks,
        recommendations=recommendations(
            checks,
            edges=edges,
            traverse=traverse_of(points, gridding),
            core=None if worst is None else worst[1],
            missing_in_wake=missing[:in_wake],
            channels=channels,
            repeats=repeats,
            out_of_range=[(float(points.y[k]), float(points.z[k])) for k in beyond],
            spacing=spacing,
            remarks=apart,
        ),
        notes=(*survey.notes(), *corrected, *tables.notes(survey, chain, nominal, state)),
        reference=tables.reference_scalars(nominal.reference),
        test=survey.survey.test.given(),
        angles=angle_ranges(state.u, state.v, state.w, y=points.y, z=points.z) if facts.crossflow else (),
        repeats=repeats,
        missing_places=missing,
        missing_in_wake=in_wake,
        map=_map(gridding, flags, wake, nonphysical(state)),
    )


def _steady(points: Points, raw: RawSurvey, reference: Reference) -> Points:
    """The points with values that repeat and follow their neighbours (`corrected_points`)."""
    corrected = corrected_points(points, raw.traverse, reference)
    kept = points.channels
    if len(raw.traverse.tubes) > 1:
        kept = {name: channel for name, channel in kept.items() if name not in raw.traverse.kinds}
    return replace(points, channels={**kept, **corrected.channels})


def _lost(places: Places, wake: Mask, grid: UniformGrid) -> tuple[tuple[tuple[float, float], ...], int]:
    """Places without a usable measurement, those in the wake region first, and how many these are."""
    lost = places.lost
    y, z = places.y[lost], places.z[lost]
    iz, iy = (np.rint((z - grid.z0) / grid.dz).astype(int), np.rint((y - grid.y0) / grid.dy).astype(int))
    inside = (iz >= 0) & (iz < grid.nz) & (iy >= 0) & (iy < grid.ny)
    inside[inside] = wake[iz[inside], iy[inside]]
    order = np.argsort(~inside, kind="stable")
    return tuple((float(y[k]), float(z[k])) for k in order), int(np.count_nonzero(inside))


def _map(gridding: Gridding, flags: NDArray[np.int32], wake: Mask, impossible: NDArray[np.bool_]) -> PlaneMap:
    grid = gridding.grid

    def has(flag: Flag) -> Mask:
        found: Mask = (flags & flag.value) != 0
        return found

    return plane_map(
        wake=wake,
        missing=has(Flag.MISSING),
        flagged=has(Flag.OUT_OF_RANGE) | has(Flag.NON_PHYSICAL) | gridding.near(impossible),
        repeated=has(Flag.AVERAGED),
        uncovered=has(Flag.FAR_FROM_DATA) & ~has(Flag.MISSING),
        y=(float(grid.y[0]), float(grid.y[-1])),
        z=(float(grid.z[0]), float(grid.z[-1])),
    )
