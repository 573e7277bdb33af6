"""A survey brought onto its grid: where every use of it begins, to reduce it or only to look at it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from wakeledger.core.errors import SurveyError
from wakeledger.core.grid import Array, UniformGrid
from wakeledger.intake.gridding import Gridding, check_duplicates, make_gridding
from wakeledger.intake.gridding.lattice import find_lattice
from wakeledger.intake.gridding.mirror import make_mirrored
from wakeledger.intake.gridding.window import covered_window
from wakeledger.intake.speeds import check_speeds
from wakeledger.intake.state import State, check_state
from wakeledger.physics.fields.boundary import Boundary, FreeAir, Rectangle, Reflection, points_inside
from wakeledger.physics.fields.wake_region import region_of
from wakeledger.physics.vortices.identify import Vortex
from wakeledger.physics.vortices.vortex_sum import VortexSum, WakeParts, find_parts, summarise
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.empty_tunnel import EmptyTunnel
from wakeledger.run.chain.reduction import Reduction, Settings
from wakeledger.run.load import SurveyInput
from wakeledger.run.plane_window import Window, window_of
from wakeledger.run.traverse.outer_alignment import aligned
from wakeledger.run.traverse.rake import prepare_raw
from wakeledger.run.traverse.traverse import RawSurvey, corrected_points
from wakeledger.stream.reference import Reference

#: Points per core length that the plane is resampled to where its own points are uneven.
POINTS_PER_CORE = 2.0
#: Most cells of a resampled plane.
MOST_CELLS = 120_000
#: Most of a window that may lie outside a round or many-sided section: the corners of a rectangle about it.
_MOST_OUTSIDE = 0.25
#: Chord of a wing whose mean chord is not given, as a share of its span.
_CHORD_OF_SPAN = 0.15
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
    bare = bare_chain(survey)
    settings, empty, state, raw = bare.chain.settings, bare.chain, bare.state, bare.raw
    regrid = regrid_of(survey, state)
    coarse = quick and find_lattice(points.y, points.z) is None
    gridding = regrid(most_cells=MOST_CELLS_QUICK if coarse else MOST_CELLS)
    if settings.exclude and region_of(settings.exclude, gridding.grid).all():
        raise SurveyError(
            "the shapes cover the whole window", file=file.path, place="[wake] exclude", remedy="leave some of it free"
        )
    try:
        check_section(settings.boundary, gridding.grid)
        check_model_place(settings)
    except SurveyError as error:
        raise error.located(file=file.path) from error
    if survey.empty_tunnel is not None:
        stream = empty_tunnel(
            survey.empty_tunnel, settings, cut=regrid.cut, names=(file.path.name, survey.empty_tunnel.survey.path.name)
        )
        stream.check_cover(gridding.grid, place="[empty_tunnel] survey")
        empty = replace(empty, empty=stream)
    chain = replace(empty, gridding=gridding)
    first = chain.reduce(estimates=False)
    if raw is not None and any(probe.misalignment == "outer_flow" for probe in file.probe):
        raw = aligned(survey, chain, first, raw)
        empty, chain = (replace(one, traverse=raw.traverse) for one in (empty, chain))
        state, first = chain.state(first.reference), chain.reduce(estimates=False)
    parts, vortices = find_vortices(first, settings)
    if gridding.kind != "uniform" and vortices.vortices and not coarse:
        finer = min(vortex.core_length for vortex in vortices.vortices) / POINTS_PER_CORE
        if finer < 0.98 * max(gridding.grid.dy, gridding.grid.dz):
            gridding = regrid(spacing=(min(finer, gridding.grid.dy), min(finer, gridding.grid.dz)))
            chain = replace(empty, gridding=gridding)
            first = chain.reduce(estimates=False)
            parts, vortices = find_vortices(first, settings)
    return Gridded(chain, first, state, parts, vortices, raw)


@dataclass(frozen=True)
class Bare:
    """A survey's points as flow states, not yet on a grid.

    Attributes
    ----------
    chain : Chain
        Without a gridding.
    state : State
        The flow state at the points.
    raw : RawSurvey or None
        What a traverse of hole pressures adds.
    """

    chain: Chain
    state: State
    raw: RawSurvey | None


def bare_chain(survey: SurveyInput) -> Bare:
    """A survey's points, checked, as flow states.

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
    chain = Chain(points, None, settings)  # type: ignore[arg-type]
    if raw is not None:
        chain = replace(chain, traverse=raw.traverse, displacement=raw.displacement)
    state = chain.state(reference)
    check_state(state, points=points, reference=reference)
    check_speeds(state, points, reference)
    return Bare(chain, state, raw)


def regrid_of(survey: SurveyInput, state: State) -> Regrid:
    """What grids a survey's points, those inside an inboard cut left out."""
    boundary, points = survey.survey.boundary, survey.points
    cut = None if boundary is None else boundary.inboard_cut
    reflection = None if boundary is None else boundary.reflection
    mesh = points.triangles is not None or points.areas is not None
    usable = usable_points(state)
    window = survey_window(survey, state)
    if window is not None:
        usable &= window.holds(points.y, points.z)
    return Regrid(points.y, points.z, usable, points.row, reflection, cut or 0.0, mesh)


def survey_window(survey: SurveyInput, state: State) -> Window | None:
    """The part of a survey's plane that is gridded, None where all of it is."""
    total = survey.survey.reference.resolve().total_pressure
    return window_of(survey, state, usable_points(state), loss_free=total, most_cells=MOST_CELLS)


def empty_tunnel(survey: SurveyInput, settings: Settings, *, cut: float, names: tuple[str, str]) -> EmptyTunnel:
    """The stream without the model from its own survey.

    Parameters
    ----------
    survey : SurveyInput
        Of the empty tunnel.
    settings : Settings
        Of the survey with the model.
    cut : float
        Its inboard cut, m.
    names : (str, str)
        Files of the survey with the model and of that without it, for messages.

    Returns
    -------
    EmptyTunnel

    Raises
    ------
    InputError
        If the survey or its data are wrong, or its surroundings are others.
    """
    bare = bare_chain(survey)
    own = bare.chain.settings
    if own.boundary != settings.boundary:
        raise SurveyError(
            f"[boundary] of {names[1]} is not that of {names[0]}",
            file=survey.survey.path,
            place="[boundary]",
            remedy="describe the same test section and reflection plane in both",
        )
    if own.station != settings.station:
        raise SurveyError(
            f"its station is {own.station:g} m, that of the survey with the model {settings.station:g} m",
            file=survey.survey.path,
            place="[plane] station",
            remedy="survey the empty tunnel at the same station",
        )
    # What is left out next to the reflection plane is left out of both, and filled alike.
    regrid = regrid_of(survey, bare.state)
    regrid = replace(regrid, cut=max(regrid.cut, cut))
    gridding = regrid(most_cells=MOST_CELLS)
    return EmptyTunnel(replace(bare.chain, gridding=gridding), regrid, () if bare.raw is None else bare.raw.sources)


def check_section(boundary: Boundary, grid: UniformGrid) -> None:
    """Refuse a window that reaches through the walls.

    Raises
    ------
    SurveyError
        If more than a few cells of the window lie outside the section, beyond half a spacing.
    """
    if isinstance(boundary, FreeAir):
        return
    section = boundary.section
    outside = ~points_inside(section, *grid.mesh(), margin=0.75 * max(grid.dy, grid.dz))
    if isinstance(section, Rectangle) and outside.any():
        raise SurveyError(
            f"the survey reaches y {grid.y[0]:.4g} to {grid.y[-1]:.4g} m, z {grid.z[0]:.4g} to {grid.z[-1]:.4g} m,"
            f" through the walls at y = {section.y[0]:g} and {section.y[1]:g} m, z = {section.z[0]:g} and"
            f" {section.z[1]:g} m",
            place="[boundary] y, z",
            remedy="give the walls in the survey's own axes, those of the whole configuration",
        )
    if outside.mean() > _MOST_OUTSIDE:
        raise SurveyError(
            f"{outside.mean():.0%} of the survey's window lies outside the section",
            place="[boundary] section",
            remedy="give the section in the survey's own axes",
        )


def check_model_place(settings: Settings) -> None:
    """Refuse a model that does not stand in the stream.

    Raises
    ------
    SurveyError
        If its centre lies outside the section, or below the ground.
    """
    boundary, place = settings.boundary, settings.model_place
    if place is None or isinstance(boundary, FreeAir):
        return
    inside = bool(points_inside(boundary.section, np.array(place[0]), np.array(place[1])))
    if not inside or (boundary.reflection == "z" and place[1] <= 0):
        raise SurveyError(
            f"the model's centre y = {place[0]:g} m, z = {place[1]:g} m does not lie in the stream",
            place="[boundary] model_centre",
            remedy="give it in the survey's own axes, as the walls",
        )


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
    model, boundary = file.model, file.boundary
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
        boundary=_surroundings(survey),
        given={name: each.value for name, each in survey.given.items()},
        model_place=None if boundary is None else boundary.model_centre,
        computed=survey.computed,
        zero_beyond=_zero_beyond(survey),
        core=survey.core,
    )


def _surroundings(survey: SurveyInput) -> Boundary:
    file = survey.survey
    try:
        return FreeAir() if file.boundary is None else file.boundary.surroundings()
    except SurveyError as error:
        raise error.located(file=file.path) from error


def _zero_beyond(survey: SurveyInput) -> float:
    """A computed wake has a weak, broad loss of a chord about it, which the zero must not take out of it, m."""
    model = survey.survey.model
    if not survey.computed or model is None:
        return 0.0
    if model.mean_chord is not None:
        return model.mean_chord
    return 0.0 if model.span is None else _CHORD_OF_SPAN * model.span


@dataclass(frozen=True)
class Regrid:
    """Makes griddings of the same points with one choice made differently."""

    y: Array
    z: Array
    usable: np.ndarray[tuple[int], np.dtype[np.bool_]]
    row: np.ndarray[tuple[int], np.dtype[np.int64]] | None
    reflection: Reflection | None = None
    cut: float = 0.0
    mesh: bool = False

    def __call__(
        self,
        *,
        usable: np.ndarray[tuple[int], np.dtype[np.bool_]] | None = None,
        spacing: tuple[float, float] | None = None,
        degree: int = 3,
        most_cells: int = MOST_CELLS,
        cut_factor: float = 1.0,
    ) -> Gridding:
        """Gridding with other usable points, largest spacing (along y and z, m), spline degree, size or inboard cut."""
        chosen = self.usable if usable is None else usable
        if self.cut:
            chosen = chosen & (self.y >= self.cut * cut_factor)

        def make(
            y: Array,
            z: Array,
            usable: np.ndarray[tuple[int], np.dtype[np.bool_]],
            row: np.ndarray[tuple[int], np.dtype[np.int64]] | None,
        ) -> Gridding:
            return make_gridding(
                y, z, usable, row=row, spacing=spacing, degree=degree, max_cells=most_cells, mesh=self.mesh
            )

        if self.reflection is None:
            return covered_window(make(self.y, self.z, chosen, self.row))
        whole = make_mirrored(make, self.y, self.z, chosen, self.row, axis=self.reflection)
        return covered_window(whole, mirrored=self.reflection)


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
        if not lines[0] <= place <= lines[-1] and lines[0] <= -place <= lines[-1]:
            # In the mirrored half, whose points are those of the other.
            place = -place
        upper = min(max(int(np.searchsorted(lines, place)), 1), lines.size - 1)
        return float(lines[upper] - lines[upper - 1])

    return tuple(max(about(lattice.y, vortex.y), about(lattice.z, vortex.z)) for vortex in vortices)
