"""The flow that a planned survey is expected to meet, with the rows it must lead to."""

from __future__ import annotations

import math
import tomllib
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from wakeledger.core.errors import DataError, SurveyError
from wakeledger.core.grid import Array
from wakeledger.run.chain.outputs import ROWS, coefficient_of
from wakeledger.run.config.plan_file import PlanRequest
from wakeledger.run.config.stream import ModelTable, ReferenceTable
from wakeledger.stream.reference import Reference
from wakeledger.synthetic.elements import GaussianElements
from wakeledger.synthetic.loadings import shed, straight_edge
from wakeledger.synthetic.losses import GaussianLosses, sheet_losses, tip_cores
from wakeledger.synthetic.rollup import Sheet, roll_up
from wakeledger.synthetic.wakes import SyntheticWake

if TYPE_CHECKING:
    from wakeledger.ledger.rows import Ledger

#: Part of the profile drag's loss that lies in each tip vortex, beyond the sheet's own.
CORE_LOSS = 0.03
#: Elements per core length, and how many a sheet is cut into at least and at most.
_PER_CORE, _FEWEST, _MOST = 2.5, 120, 480
#: What a survey reads at each point.
VARIABLES = ("u", "v", "w", "total_pressure", "static_pressure")

State = Callable[[Array, Array], dict[str, Array]]


@dataclass(frozen=True, eq=False)
class ExpectedFlow:
    """A flow with known rows.

    Attributes
    ----------
    state : callable
        From places y, z (m, shape (n,)) to `VARIABLES` by name, SI, pressures above the stream's total and static
        pressure.
    values : mapping of str to float
        The chain's outputs it must lead to; NaN where one is not known.
    box : tuple of float
        Where the wake is: y and z of its port lower and its starboard upper corner, m.
    limits : tuple of float or None
        The same of the window in which the flow is known; None where it is known everywhere.
    finest : float
        Spacing below which nothing more is known of it, m; zero where there is none.
    tables : mapping of str to dict
        ``[reference]``, ``[model]`` and ``[wake]`` of the survey, as a file writes them.
    station : float
        Of the plane, m.
    notes : tuple of str
        What the flow is.
    """

    state: State
    values: Mapping[str, float]
    box: tuple[float, float, float, float]
    limits: tuple[float, float, float, float] | None
    finest: float
    tables: Mapping[str, Mapping[str, Any]]
    station: float
    notes: tuple[str, ...]


def expected_flow(request: PlanRequest) -> ExpectedFlow:
    """The flow that a plan asks for.

    Parameters
    ----------
    request : PlanRequest
        The plan.

    Returns
    -------
    ExpectedFlow

    Raises
    ------
    InputError
        If there can be no such flow, or the ledger cannot be used for it.
    """
    if request.plan.ledger is not None:
        return flow_of_ledger(request.resolve(request.plan.ledger))
    return flow_of_loading(request)


def flow_of_loading(request: PlanRequest) -> ExpectedFlow:
    """The wake of a wing with a given loading, from Gaussian elements, and its exact rows."""
    plan = request.plan
    reference_table = ReferenceTable.model_validate(request.tables["reference"])
    model = ModelTable.model_validate(request.tables["model"])
    reference = reference_table.resolve()
    assert model.span is not None and plan.tip_core is not None and plan.wake_width is not None
    scale = reference.dynamic_pressure * model.reference_area
    lift = plan.lift if plan.lift is not None else scale * float(plan.lift_coefficient or math.nan)
    drag = plan.profile_drag
    if drag is None:
        drag = scale * float(plan.profile_drag_coefficient or math.nan)
    count = int(np.clip(_PER_CORE * model.span / plan.tip_core, _FEWEST, _MOST))
    unit = shed(plan.loading, straight_edge(model.span), peak=1.0, core=plan.tip_core, n=count)
    peak = lift / unit.lift(speed=reference.speed, density=reference.density)
    flat = GaussianElements(unit.y, unit.z, peak * unit.circulation, unit.core)
    here = flat
    if plan.rolled_up:
        here = roll_up([Sheet(flat)], x=request.station, speed=reference.speed).elements
    quarter = model.quarter_chord()
    distance = None if quarter is None or reference.compressible else (request.station - quarter,)

    def with_loss(total: float) -> SyntheticWake:
        sheet = sheet_losses(flat, here, total=total * (1 - 2 * CORE_LOSS), width=float(plan.wake_width or 0.0))
        cores = tip_cores(here)
        tips = GaussianLosses(cores.y, cores.z, np.full(cores.n, CORE_LOSS * total), np.hypot(cores.core, 0.0))
        return SyntheticWake(reference, (here,), sheet + tips, cores, distance)

    try:
        wake = with_loss(drag)
        # The profile drag falls short of the loss by terms of second order.
        for _ in range(2):
            wake = with_loss(float(wake.losses.strength.sum()) * drag / wake.truth.profile_drag)
        truth = wake.truth
    except ValueError as error:
        raise SurveyError(
            f"there is no such wake ({error})",
            file=request.path,
            place="[plan] profile_drag, wake_width",
            remedy="give less profile drag or a wider wake",
        ) from error
    width = plan.wake_width
    y0 = min(float(here.y.min()) - plan.tip_core, float(wake.losses.y.min()) - width)
    y1 = max(float(here.y.max()) + plan.tip_core, float(wake.losses.y.max()) + width)
    z0 = min(float(here.z.min()) - plan.tip_core, float(wake.losses.z.min()) - width)
    z1 = max(float(here.z.max()) + plan.tip_core, float(wake.losses.z.max()) + width)
    shape = "rolled up as far as the station" if plan.rolled_up else "flat, not rolled up"
    return ExpectedFlow(
        state=lambda y, z: _readings(wake, y, z),
        values=with_coefficients(truth.rows(), reference, model),
        box=(y0, y1, z0, z1),
        limits=None,
        finest=0.0,
        tables=request.tables,
        station=request.station,
        notes=(
            f"The flow is that of {count} Gaussian vortex elements behind a wing of {plan.loading} loading, {shape},"
            f" with {100 * CORE_LOSS:.0f} % of the loss in each tip vortex; a real wake differs from it.",
        ),
    )


def _readings(wake: SyntheticWake, y: Array, z: Array) -> dict[str, Array]:
    state = wake.state(y, z)
    read = {name: np.array(getattr(state, name), dtype=float) for name in VARIABLES}
    read["total_pressure"] -= wake.reference.total_pressure
    read["static_pressure"] -= wake.reference.static_pressure
    return read


def with_coefficients(rows: Mapping[str, float], reference: Reference, model: ModelTable) -> dict[str, float]:
    """Rows with their coefficients and the span efficiency, by the names of the chain's outputs.

    Parameters
    ----------
    rows : mapping of str to float
        Rows, N and N m.
    reference : Reference
        The stream.
    model : ModelTable
        Area and span.

    Returns
    -------
    dict of str to float
        NaN where a row is not known.
    """
    q, span = reference.dynamic_pressure, math.nan if model.span is None else model.span
    values = {name: rows.get(name, math.nan) for name in ROWS}
    if math.isnan(values["span_efficiency"]) and values["induced_drag"] > 0:
        values["span_efficiency"] = values["lift"] ** 2 / (math.pi * q * span**2 * values["induced_drag"])
    for name in ROWS:
        if name != "span_efficiency":
            length = span if name == "rolling_moment" else 1.0
            values[coefficient_of(name)] = values[name] / (q * model.reference_area * length)
    return values


def flow_of_ledger(path: Path) -> ExpectedFlow:
    """The plane of a finished ledger, taken for the truth."""
    from wakeledger.ledger.archive import open_archive

    ledger = open_archive(path)
    tables = tomllib.loads(str(ledger.survey_text))
    plane = ledger.plane
    missing = [name for name in VARIABLES if name not in plane]
    if missing:
        raise DataError(
            f"its plane has no {', '.join(missing)}", file=path, remedy="plan from the ledger of an area survey"
        )
    if ledger.compressible:
        raise DataError(
            "its plane is compressible, which is not planned from",
            file=path,
            remedy="plan from a loading: write [plan] with lift_coefficient, tip_core and so on",
        )
    boundary = tables.get("boundary", {})
    if "reflection" in boundary:
        raise DataError("it is of a half model", file=path, remedy="half models are not planned: plan from a loading")
    return _of_plane(ledger, tables, path)


def _of_plane(ledger: Ledger, tables: Mapping[str, Any], path: Path) -> ExpectedFlow:
    from scipy.interpolate import RectBivariateSpline

    plane = ledger.plane
    y, z = (np.asarray(plane[name].values, dtype=float) for name in ("y", "z"))
    zeros = {
        "total_pressure": float(ledger.reference["total_pressure"]),
        "static_pressure": float(ledger.reference["static_pressure"]),
    }
    fields = {name: np.asarray(plane[name].values, dtype=float) - zeros.get(name, 0.0) for name in VARIABLES}
    if not all(np.isfinite(field).all() for field in fields.values()):
        raise DataError("its plane has places without a value", file=path, remedy="plan from a loading")
    splines = {name: RectBivariateSpline(z, y, field, kx=3, ky=3, s=0) for name, field in fields.items()}
    mask = np.asarray(plane["wake_mask"].values, dtype=bool)
    if not mask.any():
        raise DataError("it holds no wake", file=path, remedy="plan from a loading")
    rows, columns = np.flatnonzero(mask.any(axis=1)), np.flatnonzero(mask.any(axis=0))
    model = ModelTable.model_validate(tables["model"])
    found = {row.name: row.value for row in ledger.rows}
    reference = ReferenceTable.model_validate(tables["reference"]).resolve()
    kept = {name: tables[name] for name in ("reference", "model", "wake") if name in tables}
    notes = [
        f"The flow is the plane of {path.name}, with the noise it was measured with: what differs between the set-ups "
        "by no noise of their own holds some of it, so that the plan is rather on the safe side.",
    ]
    if boundary_kind(tables) != "free_air":
        notes.append(f"[boundary] of {path.name}: planned as in free air, without walls.")
    return ExpectedFlow(
        state=lambda at_y, at_z: {name: spline.ev(at_z, at_y) for name, spline in splines.items()},
        values=with_coefficients(found, reference, model),
        box=(float(y[columns[0]]), float(y[columns[-1]]), float(z[rows[0]]), float(z[rows[-1]])),
        limits=(float(y[0]), float(y[-1]), float(z[0]), float(z[-1])),
        finest=float(max(np.diff(y).min(), np.diff(z).min())),
        tables=kept,
        station=station_of(tables),
        notes=tuple(notes),
    )


def boundary_kind(tables: Mapping[str, Any]) -> str:
    """What bounds the stream of a survey."""
    return str(tables.get("boundary", {}).get("kind", "free_air"))


def station_of(tables: Mapping[str, Any]) -> float:
    """Station of a survey's plane, m."""
    from wakeledger.run.config.quantities import parse_quantity

    plane = tables["plane"]
    return parse_quantity((plane[0] if isinstance(plane, list) else plane)["station"], "m")
