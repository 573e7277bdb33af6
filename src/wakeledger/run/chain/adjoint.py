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
from wakeledger.physics.fields.boundary import ClosedWalls, FreeAir
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.methods import gradients
from wakeledger.physics.methods.gradients import FlowGradient
from wakeledger.physics.methods.vorticity_area import own_share
from wakeledger.physics.methods.wake_line import sensitivity as wake_line_sensitivity
from wakeledger.physics.vortices.vortex_sum import sensitivities as vortex_sum_sensitivities
from wakeledger.run.chain.adjoint_plane import (
    AxialChange,
    Gradient,
    SpeedChange,
    before_empty_tunnel,
    before_relations,
    before_swirl,
    before_zero,
    crossflow_functional,
    pressure_speed,
    swirl_gradient,
    zero_speed,
)
from wakeledger.run.chain.adjoint_state import StateSlopes
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.empty_tunnel import PREFIX, EmptyTunnel, _onto
from wakeledger.run.chain.estimates import counted_mask, without_walls
from wakeledger.run.chain.outputs import (
    MOMENTS,
    OUTPUTS,
    ROWS,
    coefficient_of,
    corrected_coefficient_of,
    estimate_of,
)
from wakeledger.run.chain.reduction import Reduction
from wakeledger.stream.reference import Reference

FREE_AIR = FreeAir()
_NO_ERRORS: Mapping[str, Array] = MappingProxyType({})
#: Wake-blockage velocity, m/s, among the figures that are differentiated; the outputs hold its share of the speed.
_BLOCKAGE = "wake blockage velocity"
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
    figures = _figures(chain, nominal, estimates=estimates)
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


def _figures(chain: Chain, nominal: Reduction, *, estimates: bool) -> dict[str, FlowGradient]:
    """Derivatives of what the outputs are made of by the plane that the methods see."""
    settings, flow, reference = chain.settings, nominal.flow, nominal.reference
    grid, mask, star, forces = flow.grid, nominal.region.mask, nominal.loss_free, nominal.forces
    counted, boundary = settings.counted, settings.boundary.whole
    weights = np.where(mask, grid.weights, 0.0)
    blockage = nominal.wake_blockage
    near = chain.frozen.near_field
    shift: Array | float = 0.0 if near is None else near.u
    profile = gradients.profile_gradient(flow, reference, star, weights)
    axial = gradients.axial_gradient(flow, reference, star, weights, shift=shift + 2 * blockage)
    found: dict[str, FlowGradient] = {}
    if isinstance(boundary, ClosedWalls):
        deficit = gradients.deficit_gradient(flow, reference, star, weights)
        found[_BLOCKAGE] = deficit * (1 / (2 * boundary.surveyed_area))
        # ρu_b∬(u* − u) is quadratic in the deficit, which u_b is a multiple of.
        profile = profile + deficit * (-2 * reference.density * blockage)
        if not reference.compressible:
            by_blockage = (
                2 * reference.density * float((weights * (star - shift - 2 * blockage - reference.speed)).sum())
            )
            axial = axial + found[_BLOCKAGE] * by_blockage
    found["profile_drag"] = profile * counted
    if settings.crossflow:
        divergence = gradients.divergence_gradient(flow, mask, density=reference.density, near=near, boundary=boundary)
        found["residual_drag"] = (divergence + axial) * counted
        induced = gradients.induced_gradient(forces.stream_function, mask, grid, density=reference.density)
        found["induced_drag"] = induced * counted
        if settings.bounded:
            free = gradients.induced_gradient(forces.free_air_stream_function, mask, grid, density=reference.density)
            found["induced_drag_free_air"] = free * counted
        found |= _impulses(chain, nominal)
    if estimates:
        name = estimate_of("profile_drag", "entropy_area")
        found[name] = gradients.entropy_gradient(flow, reference, weights) * counted
        if settings.crossflow:
            found |= _energies(chain, nominal, found.get(_BLOCKAGE))
            found |= _on_frozen_geometry(chain, nominal, found)
    return found


def _impulses(chain: Chain, nominal: Reduction) -> dict[str, FlowGradient]:
    settings, flow, reference = chain.settings, nominal.flow, nominal.reference
    grid, reflection = flow.grid, settings.reflection
    yy, zz = grid.mesh()
    about_y, about_z = yy - settings.moment_centre[0], zz - settings.moment_centre[1]
    arms = {"lift": yy}
    if reflection == "y":
        arms["root_bending_moment"] = 0.5 * np.maximum(yy, 0.0) ** 2
    else:
        arms |= {"side_force": -zz, "rolling_moment": -0.5 * (about_y**2 + about_z**2)}
    counted = nominal.region.mask * own_share(grid, reflection)[:, None]
    impulse = reference.density * reference.speed
    return {name: gradients.impulse_gradient(arm, counted, grid, impulse=impulse) for name, arm in arms.items()}


def _energies(chain: Chain, nominal: Reduction, by_blockage: FlowGradient | None) -> dict[str, FlowGradient]:
    """Energy form and momentum balance, whose crossflow offset is read from the plane itself."""
    settings, flow, reference = chain.settings, nominal.flow, nominal.reference
    grid, mask, counted = flow.grid, nominal.region.mask, chain.settings.counted
    v, w = (component - offset for component, offset in zip((flow.v, flow.w), nominal.crossflow_offset, strict=True))
    energy = gradients.energy_gradient(v, w, grid, density=reference.density)
    square = flow.u**2 + (flow.v**2 - v**2) + (flow.w**2 - w**2)
    along = np.sqrt(np.maximum(square, 0.0))
    aligned = Flow(grid, along, v, w, flow.total_pressure, flow.static_pressure, flow.density, flow.total_temperature)
    balance = gradients.momentum_gradient(aligned, reference)
    # u² = u² + (v² − v'²) + (w² − w'²): turning the flow keeps its speed.
    share = np.where(square > 0, np.asarray(balance.u) / np.where(square > 0, along, 1.0), 0.0)
    momentum = FlowGradient(
        u=share * flow.u,
        v=np.asarray(balance.v) - share * v,
        w=np.asarray(balance.w) - share * w,
        total_pressure=balance.total_pressure,
        static_pressure=balance.static_pressure,
        density=balance.density,
    )
    direct = FlowGradient(v=share * flow.v, w=share * flow.w)
    if by_blockage is not None and nominal.wake_blockage:
        width, height = (grid.ny - 1) * grid.dy, (grid.nz - 1) * grid.dz
        beside = max(getattr(settings.boundary, "section").area - width * height, 0.0)  # noqa: B009
        direct = direct + by_blockage * (-4 * reference.density * nominal.wake_blockage * beside)
    outer = (~mask).astype(float)
    found = {}
    for name, inner, rest in (
        (estimate_of("induced_drag", "energy_area"), energy, FlowGradient()),
        (estimate_of("total_drag", "momentum_area"), momentum, direct),
    ):
        total = inner + rest
        if outer.sum() > 0:
            # Both act on the crossflow less its offset: what they lose by the offset goes to where that was read.
            by = [
                0.0 if settings.reflection == axis else -float(np.sum(part))
                for axis, part in (("y", inner.v), ("z", inner.w))
            ]
            each = outer / outer.sum()
            from_v, from_w = crossflow_functional(by[0] * each, by[1] * each, flow, mask, settings.boundary.whole)
            total = total + FlowGradient(v=from_v, w=from_w)
        found[name] = total * counted
    return found


def _on_frozen_geometry(chain: Chain, nominal: Reduction, rows: Mapping[str, FlowGradient]) -> dict[str, FlowGradient]:
    """Wake line and vortex sum, which see the crossflow without that of the walls."""
    settings, frozen, flow, reference = chain.settings, chain.frozen, nominal.flow, nominal.reference
    grid, mask = flow.grid, nominal.region.mask
    v, w = without_walls(settings, flow, nominal.forces)
    found: dict[str, tuple[Array, Array]] = {}
    if frozen.cuts is not None and frozen.cuts.enclosed:
        above = counted_mask(settings, mask, grid)
        drag, lift = wake_line_sensitivity(frozen.cuts, v, w, reference.density, reference.speed, mask=above)
        found[estimate_of("induced_drag", "wake_line")] = drag
        found[estimate_of("lift", "wake_line")] = lift
    if frozen.parts is not None:
        by_v, by_w = vortex_sum_sensitivities(frozen.parts, v, w, reference.density)
        found[estimate_of("induced_drag", "vortex_sum")] = (settings.counted * by_v, settings.counted * by_w)
    result = {}
    for name, (by_v, by_w) in found.items():
        gradient = FlowGradient(v=by_v, w=by_w)
        if settings.bounded:
            gradient = gradient + _through_walls(by_v, by_w, chain, nominal)
            if name.startswith("induced_drag"):
                gradient = gradient + rows["induced_drag"] + rows["induced_drag_free_air"] * -1.0
        result[name] = gradient
    return result


def _through_walls(by_v: Array, by_w: Array, chain: Chain, nominal: Reduction) -> FlowGradient:
    """What the crossflow of the walls, itself made by the wake's vorticity, hands back to the plane."""
    flow, mask, boundary = nominal.flow, nominal.region.mask, chain.settings.boundary.whole
    walled = crossflow_functional(by_v, by_w, flow, mask, boundary)
    free = crossflow_functional(by_v, by_w, flow, mask, FREE_AIR)
    return FlowGradient(v=walled[0] - free[0], w=walled[1] - free[1])


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
    blockage = of(_BLOCKAGE) if _BLOCKAGE in names else np.zeros(len(names))
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
        rows["wake_blockage"] = of(_BLOCKAGE) / reference.speed
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
        return np.sum([gradient.by[field] @ slope for field, slope in own.items()], axis=0) + np.zeros(
            len(gradient.names)
        )
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
