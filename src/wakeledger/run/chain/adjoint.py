"""Exact derivatives of every output of the chain with respect to every input, backwards through the chain.

One pass forwards gives the plane, one pass backwards the derivative of each output by every value at every point:

    output → plane → (swirl, zero, empty tunnel, relations) → gridded state → points → channels.

Each step is the transpose of the chain's own. The last one, from the state of a point to what was measured there, is in
`wakeledger.run.chain.adjoint_state`. What acts on the survey as a whole through the reference state is differenced by
whole passes.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, fields, replace
from types import MappingProxyType

import numpy as np

from wakeledger.confidence.sources import InputLayout
from wakeledger.core.grid import Array
from wakeledger.intake.probe.traverse import correction_input
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.methods.gradients import FlowGradient
from wakeledger.run.chain.adjoint_figures import BLOCKAGE, figure_gradients
from wakeledger.run.chain.adjoint_plane import (
    AxialChange,
    Gradient,
    SpeedChange,
    before_empty_tunnel,
    before_relations,
    before_swirl,
    before_zero,
    pressure_speed,
    swirl_gradient,
    zero_speed,
)
from wakeledger.run.chain.adjoint_state import StateSlopes
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.empty_tunnel import PREFIX, EmptyTunnel, _onto
from wakeledger.run.chain.outputs import (
    MOMENTS,
    OUTPUTS,
    ROWS,
    coefficient_of,
    corrected_coefficient_of,
)
from wakeledger.run.chain.reduction import Reduction
from wakeledger.stream.reference import Reference

_NO_ERRORS: Mapping[str, Array] = MappingProxyType({})
#: Points that are worked on at a time.
_CHUNK = 4096


@dataclass(frozen=True)
class PointGradient:
    """Derivatives by the flow state at the points.

    Attributes
    ----------
    names : tuple of str
        The k figures that are differentiated.
    by : dict of str to ndarray, shape (k, n)
        By u, v, w, total_pressure, static_pressure, density and temperature of each point, where there are any.
    outputs : ndarray, shape (m, k)
        Derivatives of the chain's outputs (`wakeledger.run.chain.outputs.OUTPUTS`) by the figures; NaN for an output
        that is not known or not differentiated.
    empty : PointGradient or None
        The same by the points of the empty tunnel.
    """

    names: tuple[str, ...]
    by: Gradient
    outputs: Array
    empty: PointGradient | None = None


def point_gradient(
    chain: Chain,
    nominal: Reduction,
    *,
    estimates: bool = True,
    errors: Mapping[str, Array] = _NO_ERRORS,
    workers: int = 2,
) -> PointGradient:
    """Derivatives of the outputs by the flow state at every point.

    Parameters
    ----------
    chain : Chain
        The survey, with what was frozen on the nominal plane.
    nominal : Reduction
        Its reduction.
    estimates : bool
        Whether the cross-checks are among the outputs; they are NaN otherwise.
    errors : mapping of str to ndarray
        Errors under which that reduction was made.
    workers : int
        Number of threads.

    Returns
    -------
    PointGradient
    """
    figures = figure_gradients(chain, nominal, estimates=estimates)
    names = tuple(figures)
    plane = _plane(chain, nominal, errors)
    # One figure at a time stays in the processor's cache, and carries only the fields it depends on.
    with ThreadPoolExecutor(workers) as pool:
        found = list(pool.map(lambda one: _backwards(one, chain, nominal, plane), figures.values()))
    outputs = _outputs(chain, nominal, names)
    empty = None
    if chain.empty is not None:
        empty = PointGradient(names, _joined([by_empty for _, by_empty in found]), outputs)
    return PointGradient(names, _joined([by for by, _ in found]), outputs, empty)


def _joined(parts: Sequence[Gradient]) -> Gradient:
    """Derivatives of figures, one by one, as one."""
    joined: Gradient = {}
    for name in dict.fromkeys(name for part in parts for name in part):
        rows = [part[name][0] if name in part else None for part in parts]
        array = np.empty((len(parts), next(row.size for row in rows if row is not None)))
        for k, row in enumerate(rows):
            array[k] = 0.0 if row is None else row
        joined[name] = array
    return joined


@dataclass(frozen=True)
class _Plane:
    """What the way back passes, the same for every figure.

    Attributes
    ----------
    before : Flow
        The plane before its total pressure was zeroed.
    with_stream : Flow
        The same before the empty tunnel was taken out.
    swirl : (ndarray, ndarray) or None
        Derivatives of the stream's swirl by the crossflow.
    zeroing : SpeedChange or None
        What the zero did to the speed.
    axial : AxialChange or None
        How u followed from the pressures.
    stream : Reference or None
        Of the survey of the empty tunnel.
    empty : Flow or None
        Its plane.
    """

    before: Flow
    with_stream: Flow
    swirl: tuple[Array, Array] | None
    zeroing: SpeedChange | None
    axial: AxialChange | None
    stream: Reference | None = None
    empty: Flow | None = None


def _plane(chain: Chain, nominal: Reduction, errors: Mapping[str, Array]) -> _Plane:
    before = chain.flow(nominal.reference, errors)
    swirl = swirl_gradient(chain, nominal.flow, nominal.region.mask) if chain.swirls else None
    zeroing = zero_speed(chain, nominal.reference, before, zero=nominal.loss_zero)
    if chain.empty is None:
        return _Plane(before, before, swirl, zeroing, pressure_speed(chain, nominal.reference, before))
    own = chain.empty.chain
    theirs = {name.removeprefix(PREFIX): array for name, array in errors.items() if name.startswith(PREFIX)}
    stream = own.reference(theirs)
    with_stream = replace(chain, empty=None).flow(nominal.reference, errors)
    axial = pressure_speed(chain, nominal.reference, with_stream)
    return _Plane(before, with_stream, swirl, zeroing, axial, stream, own.flow(stream, theirs))


def _backwards(figure: FlowGradient, chain: Chain, nominal: Reduction, plane: _Plane) -> tuple[Gradient, Gradient]:
    """Derivatives of a figure by the state of the points, and by that of the empty tunnel's points."""
    reference, mask = nominal.reference, nominal.region.mask
    gradient = {
        entry.name: np.broadcast_to(np.asarray(by, float), nominal.flow.grid.shape)[None]
        for entry in fields(FlowGradient)
        if np.ndim(by := getattr(figure, entry.name))
    }
    if plane.swirl is not None:
        gradient = before_swirl(gradient, chain, nominal.flow, swirl=nominal.swirl, by_crossflow=plane.swirl)
    gradient = before_zero(
        gradient, chain, reference, plane.before, zero=nominal.loss_zero, mask=mask, speed=plane.zeroing
    )
    by_empty: Gradient = {}
    if chain.empty is not None and plane.empty is not None and plane.stream is not None:
        gradient, by_stream = before_empty_tunnel(gradient, chain, reference, plane.before)
        by_empty = _empty_gradient(chain.empty, by_stream, nominal, plane.stream, plane.empty)
    gradient = before_relations(gradient, chain, reference, plane.with_stream, speed=plane.axial)
    return _to_points(gradient, chain), by_empty


def _empty_gradient(
    empty: EmptyTunnel, by_stream: Gradient, nominal: Reduction, stream: Reference, flow: Flow
) -> Gradient:
    """Derivatives by the points of the empty tunnel, through its scaling and its own relations."""
    speed = nominal.reference.speed / stream.speed
    pressure = nominal.reference.dynamic_pressure / stream.dynamic_pressure
    grid = nominal.flow.grid
    along_z, along_y = _onto(flow.grid.z, grid.z), _onto(flow.grid.y, grid.y)
    gradient: Gradient = {}
    for name, by in by_stream.items():
        scaled = by * (pressure if name.endswith("pressure") else speed)
        if along_z is not None:
            scaled = along_z.T @ scaled
        gradient[name] = scaled if along_y is None else scaled @ along_y
    return _to_points(before_relations(gradient, empty.chain, stream, flow), empty.chain)


def _to_points(gradient: Gradient, chain: Chain) -> Gradient:
    gridding = chain.gridding
    return {
        name: gridding.transposed(by, odd=gridding.is_odd(name) if name in ("v", "w") else False)
        for name, by in gradient.items()
        if np.any(by)
    }


def _outputs(chain: Chain, nominal: Reduction, names: tuple[str, ...]) -> Array:
    """Derivatives of the outputs by the figures, shape (m, k)."""
    settings, reference, values = chain.settings, nominal.reference, nominal.values
    q, area, span = reference.dynamic_pressure, settings.reference_area, settings.span
    rows: dict[str, Array] = {}
    unknown = np.full(len(names), np.nan)

    def of(name: str) -> Array:
        """Derivatives of one output by the figures."""
        if name in rows:
            return rows[name]
        if name in names:
            row: Array = np.eye(len(names))[names.index(name)]
            return row
        return unknown

    rows["total_drag"] = of("profile_drag") + of("induced_drag") + of("residual_drag")
    free = "induced_drag_free_air" if settings.bounded else "induced_drag"
    if values["span_efficiency"] > 0:
        e = values["span_efficiency"]
        rows["span_efficiency"] = 2 * e / values["lift"] * of("lift") - e / values[free] * of(free)
    blockage = of(BLOCKAGE) if BLOCKAGE in names else np.zeros(len(names))
    solid = settings.given.get("boundary.solid_blockage", 0.0)
    faster = 1 + solid + nominal.wake_blockage / reference.speed
    for row in ROWS:
        if row == "span_efficiency":
            continue
        scale = q * area * (span if row in MOMENTS else 1.0)
        rows[coefficient_of(row)] = of(row) / scale
        by_blockage = -2 * values[row] / (scale * faster**3 * reference.speed)
        rows[corrected_coefficient_of(row)] = of(row) / (scale * faster**2) + by_blockage * blockage
    if settings.bounded:
        flow_area = getattr(settings.boundary, "flow_area")  # noqa: B009
        lift = values["lift"]
        if lift:
            by_drag = q * flow_area / lift**2 * (of("induced_drag_free_air") - of("induced_drag"))
            rows["boundary_factor"] = by_drag - 2 * values["boundary_factor"] / lift * of("lift")
            angle = values["angle_correction"]
            per_factor = lift / (q * flow_area)
            rows["angle_correction"] = per_factor * rows["boundary_factor"] + angle / lift * of("lift")
        rows["wake_blockage"] = of(BLOCKAGE) / reference.speed
    found = np.stack([of(name) for name in OUTPUTS])
    found[np.isnan(nominal.vector)] = np.nan
    return found


def input_gradients(
    chain: Chain,
    gradient: PointGradient,
    layouts: Mapping[str, InputLayout],
    *,
    errors: Mapping[str, Array] = _NO_ERRORS,
    workers: int = 2,
) -> tuple[dict[str, Array], tuple[str, ...]]:
    """Derivatives by the inputs that act on the points.

    Parameters
    ----------
    chain : Chain
        The survey.
    gradient : PointGradient
        From `point_gradient`.
    layouts : mapping of str to InputLayout
        The inputs wanted.
    errors : mapping of str to ndarray
        Errors under which the derivatives are wanted.
    workers : int
        Number of threads.

    Returns
    -------
    slopes : dict of str to ndarray, shape (k, n), or (k,) for single numbers
        Derivatives of the figures by those inputs that act through the flow state of the points; times
        `PointGradient.outputs` they are those of the outputs.
    left : tuple of str
        The other inputs: what changes the reference state, the model or the relations on the plane.
    """
    tasks, left = {}, []
    parts: dict[bool, StateSlopes] = {}
    for name, layout in layouts.items():
        elsewhere = name.startswith(PREFIX) and chain.empty is not None and gradient.empty is not None
        own = name.removeprefix(PREFIX) if elsewhere else name
        room = own.split(".", 1)[0]
        through = room in ("plane", "probe", "position", "angle", "calibration", "correction")
        if not through or own == correction_input("displacement"):
            left.append(name)
            continue
        at = gradient
        if elsewhere and chain.empty is not None and gradient.empty is not None:
            at = gradient.empty
            if elsewhere not in parts:
                there = {key.removeprefix(PREFIX): array for key, array in errors.items() if key.startswith(PREFIX)}
                parts[elsewhere] = StateSlopes(chain.empty.chain, there)
        elif elsewhere not in parts:
            parts[elsewhere] = StateSlopes(chain, errors)
        tasks[name] = (parts[elsewhere], own, at, layout)
    with ThreadPoolExecutor(workers) as pool:
        found = pool.map(lambda task: _by_input(*task), tasks.values())
        return dict(zip(tasks, found, strict=True)), tuple(left)


def _by_input(slopes: StateSlopes, name: str, gradient: PointGradient, layout: InputLayout) -> Array:
    """Derivatives of the figures by one input, shape (k, n), or (k,) for a single number."""
    own = slopes(name, layout, frozenset(gradient.by))
    if layout.is_scalar:
        together = np.zeros(len(gradient.names))
        for field, slope in own.items():
            together += gradient.by[field] @ slope
        return together
    if not own:
        return np.zeros((len(gradient.names), layout.size))
    result = np.empty((len(gradient.names), layout.size))
    product = np.empty((len(gradient.names), _CHUNK))
    (first, by_first), *others = own.items()
    # A few thousand points at a time stay in the processor's cache.
    for start in range(0, layout.size, _CHUNK):
        part = slice(start, min(start + _CHUNK, layout.size))
        target, spare = result[:, part], product[:, : part.stop - start]
        np.multiply(gradient.by[first][:, part], by_first[part], out=target)
        for field, slope in others:
            target += np.multiply(gradient.by[field][:, part], slope[part], out=spare)
    return result


def scalar_gradients(
    chain: Chain,
    nominal: Reduction,
    names: Sequence[str],
    steps: Mapping[str, float],
    layouts: Mapping[str, InputLayout],
    *,
    estimates: bool = True,
    workers: int = 2,
) -> tuple[dict[str, Array], dict[str, Array]]:
    """Derivatives of the outputs by what acts on the survey as a whole, by differences of whole passes.

    Parameters
    ----------
    chain : Chain
        The survey.
    nominal : Reduction
        Its reduction.
    names : sequence of str
        The inputs.
    steps : mapping of str to float
        Step of each input, its standard uncertainty in SI (GUM 5.1.3, note 2).
    layouts : mapping of str to InputLayout
        The inputs, single numbers all of them.
    estimates : bool
        Whether the cross-checks are among the outputs; they are NaN otherwise.
    workers : int
        Number of threads.

    Returns
    -------
    slopes, curvatures : dict of str to ndarray, shape (m,)
        (f₊ − f₋)/2h and (f₊ + f₋ − 2f₀)/h².
    """
    single = [name for name in names if layouts[name].is_scalar]
    slopes: dict[str, Array] = {name: np.zeros(len(OUTPUTS)) for name in single}
    curvatures: dict[str, Array] = {name: np.zeros(len(OUTPUTS)) for name in single}
    used = [name for name in single if steps[name] > 0]

    def shifted(name: str) -> Array:
        return chain.vectors({name: np.array([steps[name], -steps[name]])}, estimates=estimates)

    with ThreadPoolExecutor(workers) as pool:
        for name, (up, down) in zip(used, pool.map(shifted, used), strict=True):
            slopes[name] = (up - down) / (2 * steps[name])
            curvatures[name] = (up + down - 2 * nominal.vector) / steps[name] ** 2
    return slopes, curvatures
