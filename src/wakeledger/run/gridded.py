"""A survey brought onto its grid: where every use of it begins, to reduce it or only to look at it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from wakeledger.core.errors import SurveyError
from wakeledger.core.grid import Array
from wakeledger.intake.gridding import Gridding, check_duplicates, make_gridding
from wakeledger.intake.gridding.lattice import find_lattice
from wakeledger.intake.gridding.window import covered_window
from wakeledger.intake.state import State, check_state
from wakeledger.physics.fields.wake_region import region_of
from wakeledger.physics.vortices.identify import Vortex
from wakeledger.physics.vortices.vortex_sum import VortexSum, WakeParts, find_parts, summarise
from wakeledger.run.chain import Chain
from wakeledger.run.load import SurveyInput
from wakeledger.run.rake import prepare_raw
from wakeledger.run.reduction import Reduction, Settings
from wakeledger.run.traverse import RawSurvey, corrected_points
from wakeledger.stream.reference import Reference

#: Points per core length that the plane is resampled to where its own points are uneven.
POINTS_PER_CORE = 2.0
#: Most cells of a resampled plane.
MOST_CELLS = 120_000
#: The same where scattered points are only looked at: working out the interpolation takes most of the time.
MOST_CELLS_QUICK = 12_000


@dataclass(frozen=True)
class Gridded:
    """A survey on its grid, as measured.

    Attributes
    ----------
    chain : Chain
        Nothing frozen yet.
    first : Reduction
        One pass, without cross-checks.
    state : State
        The flow state at the points.
    parts : WakeParts
        How the vortex sum divides the wake.
    vortices : VortexSum
        The vortices found.
    raw : RawSurvey or None
        What a traverse of hole pressures adds.
    """

    chain: Chain
    first: Reduction
    state: State
    parts: WakeParts
    vortices: VortexSum
    raw: RawSurvey | None = None


def grid_survey(survey: SurveyInput, *, quick: bool = False) -> Gridded:
    """Check a survey's points, grid them, and find its vortices.

    Parameters
    ----------
    survey : SurveyInput
        An area survey.
    quick : bool
        Whether a coarser grid of scattered points will do, which is not refined for the cores found.

    Returns
    -------
    Gridded

    Raises
    ------
    InputError
        If the survey or its data are wrong.
    """
    file, points = survey.survey, survey.points
    reference = file.reference.resolve()
    settings = settings_of(survey, reference)
    raw = prepare_raw(survey, reference) if file.plane.primary == "hole_pressures" else None
    check_duplicates(points if raw is None else corrected_points(points, raw.traverse, reference))
    empty = Chain(points, None, settings)  # type: ignore[arg-type]
    if raw is not None:
        empty = replace(empty, traverse=raw.traverse, displacement=raw.displacement)
    state = empty.state(reference)
    check_state(state, points=points, reference=reference)
    regrid = Regrid(points.y, points.z, usable_points(state), points.row)
    coarse = quick and find_lattice(points.y, points.z) is None
    gridding = regrid(most_cells=MOST_CELLS_QUICK if coarse else MOST_CELLS)
    if settings.exclude and region_of(settings.exclude, gridding.grid).all():
        raise SurveyError(
            "the shapes cover the whole window", file=file.path, place="[wake] exclude", remedy="leave some of it free"
        )
    chain = replace(empty, gridding=gridding)
    first = chain.reduce(estimates=False)
    parts, vortices = find_vortices(first, settings)
    if gridding.kind != "uniform" and vortices.vortices and not coarse:
        finer = min(vortex.core_length for vortex in vortices.vortices) / POINTS_PER_CORE
        if finer < 0.98 * max(gridding.grid.dy, gridding.grid.dz):
            gridding = regrid(spacing=(min(finer, gridding.grid.dy), min(finer, gridding.grid.dz)))
            chain = replace(empty, gridding=gridding)
            first = chain.reduce(estimates=False)
            parts, vortices = find_vortices(first, settings)
    return Gridded(chain, first, state, parts, vortices, raw)


def usable_points(state: State) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
    """Points where everything that was measured is known and possible, shape (n,)."""
    usable = np.isfinite(state.u) & np.isfinite(state.v) & np.isfinite(state.w)
    for pressure in (state.total_pressure, state.static_pressure):
        if pressure is not None:
            usable &= np.isfinite(pressure)
    return usable


def settings_of(survey: SurveyInput, reference: Reference) -> Settings:
    """The chain's settings from the survey file."""
    file, plane = survey.survey, survey.survey.plane
    model = file.model
    quarter_chord = None if model is None else model.quarter_chord()
    axes = plane.axes
    return Settings(
        reference=file.reference.given(),
        compressible=reference.compressible,
        # Hole pressures give total and static pressure and a direction: behind them it is a total-pressure survey.
        primary="total_pressure" if plane.primary == "hole_pressures" else plane.primary,
        offsets=(axes.pitch_offset, axes.yaw_offset, axes.roll_offset),
        station=plane.station,
        bound_line=math.inf if quarter_chord is None else quarter_chord,
        reference_area=math.nan if model is None else model.reference_area,
        span=math.nan if model is None or model.span is None else model.span,
        moment_centre=(0.0, 0.0) if model is None or model.moment_centre is None else model.moment_centre,
        level=file.wake.level if file.wake.level is not None else Settings.level,
        grow=file.wake.grow,
        include=tuple(file.wake.include),
        exclude=tuple(file.wake.exclude),
        crossflow=file.directed,
    )


@dataclass(frozen=True)
class Regrid:
    """Makes griddings of the same points with one choice made differently."""

    y: Array
    z: Array
    usable: np.ndarray[tuple[int], np.dtype[np.bool_]]
    row: np.ndarray[tuple[int], np.dtype[np.int64]] | None

    def __call__(
        self,
        *,
        usable: np.ndarray[tuple[int], np.dtype[np.bool_]] | None = None,
        spacing: tuple[float, float] | None = None,
        degree: int = 3,
        most_cells: int = MOST_CELLS,
    ) -> Gridding:
        """Gridding with other usable points, another largest spacing (along y and z, m), spline degree or size."""
        chosen = self.usable if usable is None else usable
        return covered_window(
            make_gridding(self.y, self.z, chosen, row=self.row, spacing=spacing, degree=degree, max_cells=most_cells)
        )


def find_vortices(nominal: Reduction, settings: Settings) -> tuple[WakeParts, VortexSum]:
    """The parts that the vortex sum divides a wake into, and its vortices."""
    flow = nominal.flow
    excluded = region_of(settings.exclude, flow.grid) if settings.exclude else None
    parts = find_parts(flow.v, flow.w, flow.grid, mask=nominal.region.mask, excluded=excluded, u=flow.u)
    return parts, summarise(parts, flow.v, flow.w, nominal.reference.density)


def core_spacings(chain: Chain, vortices: Sequence[Vortex]) -> tuple[float, ...]:
    """Larger of the points' spacings about each vortex, m; empty where the points stand evenly or on no lines."""
    points = chain.points
    lattice = find_lattice(points.y, points.z) if chain.gridding.kind == "tensor" else None
    if lattice is None:
        return ()

    def about(lines: Array, place: float) -> float:
        upper = min(max(int(np.searchsorted(lines, place)), 1), lines.size - 1)
        return float(lines[upper] - lines[upper - 1])

    return tuple(max(about(lattice.y, vortex.y), about(lattice.z, vortex.z)) for vortex in vortices)
