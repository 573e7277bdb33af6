"""The wake of a wing with a given loading, in free air, on a reflection plane or in a test section, with exact rows."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import numpy as np

from wakeledger.core.errors import SurveyError
from wakeledger.core.grid import Array
from wakeledger.run.config.plan import PlanTable
from wakeledger.run.config.plan_file import PlanRequest
from wakeledger.run.config.stream import ModelTable, ReferenceTable
from wakeledger.run.config.tables import BoundaryTable
from wakeledger.run.planning.flow import VARIABLES, ExpectedFlow, with_coefficients
from wakeledger.stream.reference import Reference
from wakeledger.synthetic.elements import GaussianElements
from wakeledger.synthetic.loadings import shed, straight_edge
from wakeledger.synthetic.losses import GaussianLosses, sheet_losses, tip_cores
from wakeledger.synthetic.rollup import Sheet, roll_up
from wakeledger.synthetic.tunnel import TunnelWake, root_bending_moment
from wakeledger.synthetic.wakes import SyntheticWake
from wakeledger.synthetic.walls import RectangularDuct, RoundDuct

#: Part of the profile drag's loss that lies in each tip vortex, beyond the sheet's own.
CORE_LOSS = 0.03
#: Elements per core length, and how many a sheet is cut into at least and at most.
_PER_CORE, _FEWEST, _MOST = 2.5, 120, 480
#: Core lengths that every vortex keeps clear of the ground and of walls.
_CLEAR = 3.0

Wake = SyntheticWake | TunnelWake
Losses = Callable[[float], GaussianLosses]


@dataclass(frozen=True)
class _Place:
    """Where the wing stands, and in what.

    Attributes
    ----------
    y, z : float
        Middle of the trailing edge, m.
    reflection : {"y", "z"} or None
    duct : RectangularDuct, RoundDuct or None
    """

    y: float
    z: float
    reflection: Literal["y", "z"] | None
    duct: RectangularDuct | RoundDuct | None


def flow_of_loading(request: PlanRequest) -> ExpectedFlow:
    """The wake of a wing with a given loading, from Gaussian elements, and its exact rows.

    Parameters
    ----------
    request : PlanRequest
        The plan.

    Returns
    -------
    ExpectedFlow

    Raises
    ------
    SurveyError
        If there can be no such flow.
    """
    plan = request.plan
    reference = ReferenceTable.model_validate(request.tables["reference"]).resolve()
    model = ModelTable.model_validate(request.tables["model"])
    boundary = BoundaryTable.model_validate(request.tables["boundary"])
    assert model.span is not None and plan.tip_core is not None and plan.wake_width is not None
    place = _place(boundary, plan, reference, request.path)
    scale = reference.dynamic_pressure * model.reference_area
    lift = plan.lift if plan.lift is not None else scale * float(plan.lift_coefficient or math.nan)
    drag = plan.profile_drag
    if drag is None:
        drag = scale * float(plan.profile_drag_coefficient or math.nan)
    count = int(np.clip(_PER_CORE * model.span / plan.tip_core, _FEWEST, _MOST))
    count += count % 2
    edge = straight_edge(model.span, y=place.y, z=place.z)
    unit = shed(plan.loading, edge, peak=1.0, core=plan.tip_core, n=count)
    peak = lift / unit.lift(speed=reference.speed, density=reference.density)
    flat = GaussianElements(unit.y, unit.z, peak * unit.circulation, unit.core)
    here = flat
    if plan.rolled_up:
        sheets = [Sheet(flat)] + ([Sheet(flat.mirrored("z"))] if place.reflection == "z" else [])
        here = roll_up(sheets, x=request.station, speed=reference.speed).of(0)
        # Beside the ground the vortices of one side move apart; the lift asked for is that at the station.
        here = here.scaled(circulation=lift / here.lift(speed=reference.speed, density=reference.density))
    _refuse_contact(place, here, plan, request.path)
    quarter = model.quarter_chord()
    distance = None if quarter is None or reference.compressible else request.station - quarter

    def losses(total: float) -> GaussianLosses:
        sheet = sheet_losses(flat, here, total=total * (1 - 2 * CORE_LOSS), width=float(plan.wake_width or 0.0))
        cores = tip_cores(here)
        return sheet + GaussianLosses(cores.y, cores.z, np.full(cores.n, CORE_LOSS * total), cores.core)

    try:
        wake, rows = _fitted(place, reference, here, losses, distance, drag)
    except ValueError as error:
        raise SurveyError(
            f"there is no such wake ({error})",
            file=request.path,
            place="[plan] profile_drag, wake_width",
            remedy="give less profile drag, a wider wake, or a model that stands clear of walls",
        ) from error
    lost = losses(drag)
    width, core = plan.wake_width, plan.tip_core
    return ExpectedFlow(
        state=lambda y, z: _readings(wake, y, z),
        values=with_coefficients(rows, reference, model),
        box=(
            0.0 if place.reflection == "y" else min(float(here.y.min()) - core, float(lost.y.min()) - width),
            max(float(here.y.max()) + core, float(lost.y.max()) + width),
            min(float(here.z.min()) - core, float(lost.z.min()) - width),
            max(float(here.z.max()) + core, float(lost.z.max()) + width),
        ),
        limits=_limits(place.duct),
        tables=request.tables,
        station=request.station,
        notes=tuple(_notes(place, plan, count, distance)),
        reflection=place.reflection,
        nearest=boundary.inboard_cut or 0.0,
        circle=(*place.duct.centre, place.duct.diameter / 2) if isinstance(place.duct, RoundDuct) else None,
    )


def _place(boundary: BoundaryTable, plan: PlanTable, reference: Reference, path: Path) -> _Place:
    """Where the wing stands, as far as such a flow can be made."""
    duct: RectangularDuct | RoundDuct | None = None
    if boundary.kind != "free_air":
        closed = boundary.kind == "closed_walls"
        if boundary.diameter is None and (boundary.y is None or boundary.z is None):
            raise SurveyError(
                "the flow in such a section is not known exactly, and not planned from a loading",
                file=path,
                place="[boundary] section",
                remedy="plan with the rectangle or circle that is nearest to it, or from a ledger",
            )
        boundary.surroundings()
        if reference.compressible:
            raise SurveyError(
                "a compressible stream between walls is not planned from a loading",
                file=path,
                place="[boundary] kind",
                remedy='plan it as in free air (kind = "free_air"), or with compressible = false in [reference]',
            )
        if boundary.diameter is not None:
            duct = RoundDuct(boundary.diameter, _pair(boundary.centre), closed)
        else:
            assert boundary.y is not None and boundary.z is not None
            walls = {"y": boundary.y, "z": boundary.z}
            if boundary.reflection is not None:
                # Walls that end on the reflection plane stand for both sides of it.
                low, high = walls[boundary.reflection]
                walls[boundary.reflection] = (low if low < 0 else -high, high)
            duct = RectangularDuct(walls["y"], walls["z"], closed)
    y, z = _pair(boundary.model_centre)
    if plan.height is not None:
        z = plan.height
    if boundary.reflection == "y" and y != 0:
        raise SurveyError(
            f"the middle of the whole model stands at y = {y:g} m",
            file=path,
            place="[boundary] model_centre",
            remedy="a half model is mirrored in y = 0: write 0 m for its y",
        )
    if boundary.reflection == "z" and z <= 0:
        raise SurveyError(
            "the height of the model above the ground z = 0 is not given",
            file=path,
            place="[plan] height",
            remedy='add height = "0.3 m" (of the trailing edge)',
        )
    return _Place(y, z, boundary.reflection, duct)


def _pair(point: Any) -> tuple[float, float]:
    return (0.0, 0.0) if point is None else (float(point[0]), float(point[1]))


def _refuse_contact(place: _Place, here: GaussianElements, plan: PlanTable, path: Path) -> None:
    """Refuse a wake that reaches the ground or a wall: its rows are not known exactly."""
    assert plan.tip_core is not None
    room = math.inf
    if place.reflection == "z":
        room = float(here.z.min())
    if isinstance(place.duct, RectangularDuct):
        low, high = place.duct.z
        gaps = [high - float(here.z.max()), place.duct.y[1] - float(here.y.max())]
        gaps += [] if place.reflection == "z" else [float(here.z.min()) - low]
        gaps += [] if place.reflection == "y" else [float(here.y.min()) - place.duct.y[0]]
        room = min(room, *gaps)
    elif place.duct is not None:
        across, up = place.duct.centre
        room = min(room, place.duct.diameter / 2 - float(np.hypot(here.y - across, here.z - up).max()))
    if room < _CLEAR * plan.tip_core:
        raise SurveyError(
            f"the wake comes within {1e3 * room:.3g} mm of a wall or the ground, less than {_CLEAR:g} core lengths",
            file=path,
            place="[plan] tip_core, height" if place.reflection == "z" else "[boundary]",
            remedy="give a model that stands clear of it, or a smaller tip_core",
        )


def _fitted(
    place: _Place,
    reference: Reference,
    here: GaussianElements,
    losses: Losses,
    distance: float | None,
    drag: float,
) -> tuple[Wake, dict[str, float]]:
    """The wake whose profile drag is the one wanted, and its rows."""
    total = drag
    wake, rows = _wake(place, reference, here, losses(total), distance)
    # The profile drag falls short of the loss by terms of second order.
    for _ in range(2):
        total *= drag / rows["profile_drag"]
        wake, rows = _wake(place, reference, here, losses(total), distance)
    return wake, rows


def _wake(
    place: _Place, reference: Reference, here: GaussianElements, losses: GaussianLosses, distance: float | None
) -> tuple[Wake, dict[str, float]]:
    cores = tip_cores(here)
    if place.duct is not None:
        bound = distance if isinstance(place.duct, RectangularDuct) else None
        if place.reflection == "y":
            here, cores, losses = here[here.y > 0], cores[cores.y > 0], _starboard(losses)
        between = TunnelWake(reference, here, losses, place.duct, place.reflection, cores, None, bound)
        return between, between.truth.rows()
    if place.reflection != "z":
        free = SyntheticWake(reference, (here,), losses, cores, None if distance is None else (distance,))
        rows = free.truth.rows()
        if place.reflection == "y":
            half = root_bending_moment(here[here.y > 0], speed=reference.speed, density=reference.density)
            rows = {name: value for name, value in rows.items() if name not in ("side_force", "rolling_moment")}
            rows["root_bending_moment"] = half
        return free, rows
    image = here.mirrored("z")
    both = SyntheticWake(
        reference,
        (here, image),
        losses + GaussianLosses(losses.y, -losses.z, losses.strength, losses.width),
        cores + cores.mirrored("z"),
        None if distance is None else (distance, distance),
    )
    # The drag above the ground is half of that of both; lift and moments are those of the wing's own vortices.
    rows = {name: value / 2 for name, value in both.truth.rows().items() if name.endswith("drag")}
    rows["lift"] = here.lift(speed=reference.speed, density=reference.density)
    rows["side_force"] = here.side_force(speed=reference.speed, density=reference.density)
    rows["rolling_moment"] = here.rolling_moment(speed=reference.speed, density=reference.density)
    return both, rows


def _starboard(losses: GaussianLosses) -> GaussianLosses:
    half = losses.y > 0
    return GaussianLosses(losses.y[half], losses.z[half], losses.strength[half], losses.width[half])


def _limits(duct: RectangularDuct | RoundDuct | None) -> tuple[float, float, float, float] | None:
    if duct is None:
        return None
    if isinstance(duct, RectangularDuct):
        return (duct.y[0], duct.y[1], duct.z[0], duct.z[1])
    (y, z), radius = duct.centre, duct.diameter / 2
    return (y - radius, y + radius, z - radius, z + radius)


def _readings(wake: Wake, y: Array, z: Array) -> dict[str, Array]:
    state = wake.state(y, z)
    read = {name: np.array(getattr(state, name), dtype=float) for name in VARIABLES}
    read["total_pressure"] -= wake.reference.total_pressure
    read["static_pressure"] -= wake.reference.static_pressure
    return read


def _notes(place: _Place, plan: PlanTable, count: int, distance: float | None) -> list[str]:
    shape = "rolled up as far as the station" if plan.rolled_up else "flat, not rolled up"
    found = [
        f"The flow is that of {count} Gaussian vortex elements behind a wing of {plan.loading} loading, {shape},"
        f" with {100 * CORE_LOSS:.0f} % of the loss in each tip vortex; a real wake differs from it."
    ]
    if place.reflection == "y":
        found.append(
            "Half model: points and times are those of the starboard half, loads those of the whole configuration. The"
            " boundary layer of the reflection plane is not in the flow."
        )
    if place.reflection == "z":
        found.append(
            f"Ground: the trailing edge stands {place.z:.3g} m above z = 0, and the survey reaches down to it."
        )
    if place.duct is not None:
        kind = "closed walls" if place.duct.closed else "an open jet"
        far = (
            "" if distance is not None and isinstance(place.duct, RectangularDuct) else "; the bound vortex is left out"
        )
        found.append(
            f"The flow is that of {kind}, by images, around a wake that has rolled up as in free air{far}; what the"
            " tunnel does without a model is not in it."
        )
    return found
