"""From derivatives by the plane that the methods see back to the gridded flow state.

Between the gridded state and that plane stand the pressures' relations, the empty tunnel, the zero of the total
pressure and the stream's swirl. All but the last two act place by place; those two are one number each for the whole
plane, and hand a derivative by it on to every place that it was read from. Everything here is the reverse of
`Chain.flow`, `zeroed` and `Chain._unswirled`, step for step.

Derivatives are kept as one array of shape (k, nz, ny) for each field, k figures at once.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.physics.fields.boundary import Boundary, FreeAir
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.fields.outer_flow import LEAST_SHARE
from wakeledger.physics.fields.poisson import stream_function
from wakeledger.physics.fields.transposed import (
    crossflow_pressure_gradient,
    transposed_ddy,
    transposed_ddz,
    transposed_vorticity,
)
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.physics.fields.wall_correction import wall_stream_function
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.shear import Displacement
from wakeledger.stream.reference import Reference

#: Derivatives by the fields of a plane, or by the gridded state (there with "temperature" for "total_temperature").
Gradient = dict[str, Array]
FLOW = ("u", "v", "w", "total_pressure", "static_pressure", "density", "total_temperature")


def _of(gradient: Mapping[str, Array], name: str) -> Array | float:
    return gradient.get(name, 0.0)


def _counts(by: Array | float) -> bool:
    """Whether a derivative is there: what a figure does not depend on stays zero without the figures' axis."""
    return np.ndim(by) > 2


def _put(gradient: Gradient, name: str, by: Array | float) -> None:
    if _counts(by):
        gradient[name] = np.asarray(by)
    else:
        gradient.pop(name, None)


def _added(gradient: Gradient, name: str, by: Array | float) -> None:
    if _counts(by):
        gradient[name] = gradient[name] + by if name in gradient else np.asarray(by)


def solve(source: Array, flow: Flow, boundary: Boundary) -> Array:
    """Stream function of a vorticity with what surrounds the plane; its kernel is symmetric, so it is its transpose."""
    free = isinstance(boundary, FreeAir)
    return stream_function(source, flow.grid) if free else wall_stream_function(source, flow.grid, boundary)


def crossflow_functional(by_v: Array, by_w: Array, flow: Flow, mask: Mask, boundary: Boundary) -> tuple[Array, Array]:
    """Derivatives of Σ(by_v v' + by_w w'), where (v', w') is the crossflow less that of the region's own vorticity.

    Parameters
    ----------
    by_v, by_w : ndarray, shape (..., nz, ny)
        Weights of what is left over.
    flow : Flow
        The plane.
    mask : ndarray of bool, shape (nz, ny)
        The wake region.
    boundary : FreeAir, ClosedWalls or OpenJet
        What surrounds the window.

    Returns
    -------
    (ndarray, ndarray)
        Weights of the crossflow itself.
    """
    by_psi = transposed_ddz(by_v, flow.grid) - transposed_ddy(by_w, flow.grid)
    from_v, from_w = transposed_vorticity(np.where(mask, solve(by_psi, flow, boundary), 0.0), flow.grid)
    return by_v - from_v, by_w - from_w


def swirl_gradient(chain: Chain, flow: Flow, mask: Mask) -> tuple[Array, Array]:
    """Derivatives of the stream's swirl (`wakeledger.physics.fields.outer_flow.stream_swirl`) by the crossflow."""
    from wakeledger.run.chain.chain import turned_crossflow

    grid, boundary = flow.grid, chain.settings.boundary.whole
    outer = (~mask).astype(float)
    if np.count_nonzero(outer) < LEAST_SHARE * outer.size:
        return np.zeros(grid.shape), np.zeros(grid.shape)
    turned = chain.frozen.turned
    if turned is None:
        turned = turned_crossflow(mask, grid, boundary)
    weight = outer / outer.sum()
    yy, zz = grid.mesh()
    shape = np.stack([-zz, yy]) - turned
    shape = shape - np.einsum("kzy,zy->k", shape, weight)[:, None, None]
    by = weight * shape / np.sum(weight * shape**2)
    return crossflow_functional(by[0], by[1], flow, mask, boundary)


def before_swirl(
    gradient: Gradient, chain: Chain, flow: Flow, *, swirl: float, by_crossflow: tuple[Array, Array]
) -> Gradient:
    """Derivatives by the plane before the stream's swirl was taken out of it.

    Parameters
    ----------
    gradient : dict of str to ndarray, shape (k, nz, ny)
        By the plane after.
    chain : Chain
        The survey.
    flow : Flow
        The plane after.
    swirl : float
        What was taken out, s⁻¹.
    by_crossflow : (ndarray, ndarray)
        From `swirl_gradient`.

    Returns
    -------
    dict of str to ndarray, shape (k, nz, ny)
    """
    yy, zz = flow.grid.mesh()
    found = dict(gradient)
    if chain.settings.primary == "total_pressure" and "u" in found:
        # The speed stays: u² = u₀² + (v₀² − v²) + (w₀² − w²), the index marking the plane before.
        v, w = flow.v - swirl * zz, flow.w + swirl * yy
        square = flow.u**2
        before = np.copysign(np.sqrt(np.maximum(square + flow.v**2 - v**2 + flow.w**2 - w**2, 0.0)), flow.u)
        share = np.where(square > 0, found["u"] / np.where(square > 0, flow.u, 1.0), 0.0)
        found["u"] = share * before
        for name, old, new in (("v", v, flow.v), ("w", w, flow.w)):
            _added(found, name, -share * new)
            found[f"{name} before"] = share * old
    by_swirl = np.tensordot(found["v"], zz, 2) - np.tensordot(found["w"], yy, 2)
    from_v, from_w = by_crossflow
    for name in ("v", "w"):
        _added(found, name, found.pop(f"{name} before", 0.0))
    _added(found, "v", by_swirl[:, None, None] * from_v)
    _added(found, "w", by_swirl[:, None, None] * from_w)
    return found


class AxialChange:
    """How u = √square − v² − w², `square` being that of the speed, is undone; the same for every figure.

    Parameters
    ----------
    flow : Flow
        The plane whose u became that.
    square : ndarray, shape (nz, ny)
        What u² became, m²/s².
    """

    def __init__(self, flow: Flow, square: Array) -> None:
        self.flow, real = flow, square > 0
        root = np.copysign(np.sqrt(np.where(real, square, 1.0)), flow.u)
        self.share = np.where(real, 0.5 / root, 0.0)
        self.kept = None if real.all() else ~real

    def undone(self, found: Gradient) -> Array | float:
        """Take derivatives by u to v and w, in place; gives the derivative by the square of the speed."""
        by_u = found.pop("u", None)
        if by_u is None:
            return 0.0
        by_square: Array = by_u * self.share
        if self.kept is not None:
            found["u"] = by_u * self.kept
        twice = -2 * by_square
        _added(found, "v", self.flow.v * twice)
        _added(found, "w", self.flow.w * twice)
        return by_square


class SpeedChange:
    """How the change of a plane's speed to a given square is undone; the same for every figure.

    Parameters
    ----------
    flow : Flow
        The plane before.
    square : ndarray, shape (nz, ny)
        Square of its speed afterwards, m²/s².
    directed : bool
        Whether the direction was kept, rather than v and w.
    """

    def __init__(self, flow: Flow, square: Array, *, directed: bool) -> None:
        self.flow, crossflow = flow, flow.v**2 + flow.w**2
        self.axial = None if directed else AxialChange(flow, square - crossflow)
        if directed:
            before, real = flow.u**2 + crossflow, square > 0
            self.factor = np.sqrt(np.where(real, square, 0.0) / before)
            self.per_square = np.where(real, 0.5 * self.factor / np.where(real, square, 1.0), 0.0)
            self.per_speed = self.factor / before

    def undone(self, gradient: Gradient) -> tuple[Gradient, Array | float]:
        """Derivatives by the plane before, and by the square."""
        found, flow = dict(gradient), self.flow
        if self.axial is not None:
            return found, self.axial.undone(found)
        given = [name for name in "uvw" if name in found]
        if not given:
            return found, 0.0
        by_factor: Array = found[given[0]] * getattr(flow, given[0])
        for name in given[1:]:
            by_factor += found[name] * getattr(flow, name)
        by_square = by_factor * self.per_square
        by_factor *= -self.per_speed
        for name in "uvw":
            along = by_factor * getattr(flow, name)
            if name in found:
                along += found[name] * self.factor
            found[name] = along
        return found, by_square


def before_zero(
    gradient: Gradient,
    chain: Chain,
    reference: Reference,
    flow: Flow,
    *,
    zero: float,
    mask: Mask,
    speed: SpeedChange | None = None,
) -> Gradient:
    """Derivatives by the plane before its total pressure was zeroed.

    Parameters
    ----------
    gradient : dict of str to ndarray, shape (k, nz, ny)
        By the zeroed plane.
    chain : Chain
        The survey.
    reference : Reference
        The undisturbed stream.
    flow : Flow
        The plane before.
    zero : float
        What was added to its total pressure, Pa.
    mask : ndarray of bool, shape (nz, ny)
        The wake region, outside which the zero was read.
    speed : SpeedChange, optional
        From `zero_speed`, worked out once for many figures.

    Returns
    -------
    dict of str to ndarray, shape (k, nz, ny)
    """
    found = dict(gradient)
    by_zero: Array | float = 0.0
    if chain.settings.primary == "velocity":
        if not reference.compressible:
            by_zero = _of(found, "total_pressure")
            if {"total_pressure", "static_pressure"} & chain.measured:
                by_zero = by_zero + _of(found, "static_pressure")
        else:
            raised = (flow.total_pressure + zero) / flow.total_pressure
            by_raised = _of(found, "static_pressure") * flow.static_pressure + _of(found, "density") * flow.density
            by_zero = _of(found, "total_pressure") + by_raised / flow.total_pressure
            _put(found, "total_pressure", by_zero - by_raised * raised / flow.total_pressure)
            for name in ("static_pressure", "density"):
                if name in found:
                    found[name] = found[name] * raised
    elif not reference.compressible:
        speed = zero_speed(chain, reference, flow, zero=zero) if speed is None else speed
        assert speed is not None
        found, by_square = speed.undone(found)
        by_total = 2 / reference.density * by_square
        _added(found, "total_pressure", by_total)
        _added(found, "static_pressure", -by_total)
        by_zero = _of(found, "total_pressure")
    else:
        found, by_zero = _before_hot_zero(found, chain, reference, flow, flow.total_pressure + zero)
    if _counts(by_zero):
        outer = ~mask
        if np.count_nonzero(outer) >= LEAST_SHARE * outer.size:
            # The zero is the mean loss outside the wake, which falls as the total pressure there rises.
            each = np.asarray(by_zero).sum(axis=(-2, -1)) / np.count_nonzero(outer)
            _added(found, "total_pressure", -each[:, None, None] * outer)
    return found


def zero_speed(chain: Chain, reference: Reference, flow: Flow, *, zero: float) -> SpeedChange | None:
    """What zeroing the total pressure did to the speed of an incompressible plane; None where it did nothing."""
    if chain.settings.primary == "velocity" or reference.compressible:
        return None
    square = 2 * (flow.total_pressure + zero - flow.static_pressure) / reference.density
    return SpeedChange(flow, square, directed=chain.directed)


def pressure_speed(chain: Chain, reference: Reference, flow: Flow) -> AxialChange | None:
    """How u of an incompressible plane follows from its two pressures; None where it does not."""
    measured = chain.traverse is not None or "static_pressure" in chain.points.channels
    if chain.settings.primary == "velocity" or reference.compressible or not measured:
        return None
    square = 2 * (flow.total_pressure - flow.static_pressure) / reference.density - flow.v**2 - flow.w**2
    return AxialChange(flow, square)


def _before_hot_zero(
    found: Gradient, chain: Chain, reference: Reference, flow: Flow, total: Array
) -> tuple[Gradient, Array]:
    """`before_zero` of a compressible plane whose speed follows from its pressures."""
    exponent = reference.gas_constant / reference.heat_capacity
    raised = total / flow.total_pressure
    above = total > flow.static_pressure
    ratio = np.where(above, np.maximum(total / flow.static_pressure, 1.0) ** exponent, 1.0)
    kept = bool({"temperature", "density"} & chain.measured)
    temperature = flow.static_pressure / (reference.gas_constant * flow.density)
    stagnation = temperature * ratio if kept else flow.total_temperature
    square = 2 * reference.heat_capacity * stagnation * (1 - 1 / ratio)
    found, by_square = SpeedChange(flow, square, directed=chain.directed).undone(found)
    by_stagnation = _of(found, "total_temperature") + 2 * reference.heat_capacity * (1 - 1 / ratio) * by_square
    by_ratio = 2 * reference.heat_capacity * stagnation / ratio**2 * by_square
    by_total = _of(found, "total_pressure")
    if kept:
        by_ratio = by_ratio + by_stagnation * temperature
        by_temperature = by_stagnation * ratio
        _added(found, "static_pressure", by_temperature * temperature / flow.static_pressure)
        _added(found, "density", -by_temperature * temperature / flow.density)
        found.pop("total_temperature", None)
        own: Array | float = 0.0
    else:
        _put(found, "total_temperature", by_stagnation)
        by_raised = _of(found, "density") * flow.density * exponent * raised ** (exponent - 1)
        if "density" in found:
            found["density"] = found["density"] * raised**exponent
        by_total = by_total + by_raised / flow.total_pressure
        own = -by_raised * raised / flow.total_pressure
    by_ratio = np.where(above, by_ratio * exponent * ratio, 0.0)
    by_total = by_total + by_ratio / total
    _added(found, "static_pressure", -by_ratio / flow.static_pressure)
    _put(found, "total_pressure", by_total + own)
    return found, np.asarray(by_total)


def before_empty_tunnel(
    gradient: Gradient, chain: Chain, reference: Reference, flow: Flow
) -> tuple[Gradient, Gradient]:
    """Derivatives by the plane before the empty tunnel was taken out, and by the disturbances that were.

    Parameters
    ----------
    gradient : dict of str to ndarray, shape (k, nz, ny)
        By the plane after.
    chain : Chain
        The survey.
    reference : Reference
        Its undisturbed stream.
    flow : Flow
        The plane after.

    Returns
    -------
    (dict, dict)
    """
    found = dict(gradient)
    if not reference.compressible:
        crossflow = flow.v**2 + flow.w**2
        if chain.settings.primary == "total_pressure":
            square = 2 * (flow.total_pressure - flow.static_pressure) / reference.density - crossflow
            by_total = 2 / reference.density * AxialChange(flow, square).undone(found)
            _added(found, "total_pressure", by_total)
            _added(found, "static_pressure", -by_total)
        else:
            _before_kinetic(found, reference, flow, measured_total="total_pressure" in chain.measured)
    names = ("u", "v", "w", "total_pressure", "static_pressure")
    return found, {name: -found[name] for name in names if name in found}


def _before_kinetic(found: Gradient, reference: Reference, flow: Flow, *, measured_total: bool) -> None:
    """Undo the one pressure that follows from the other by ½ρV², in place."""
    follows, given = ("static_pressure", "total_pressure") if measured_total else ("total_pressure", "static_pressure")
    by = found.pop(follows, None)
    if by is None:
        return
    _added(found, given, by)
    by_kinetic = (-by if measured_total else by) * reference.density
    for name in "uvw":
        _added(found, name, by_kinetic * getattr(flow, name))


def before_relations(
    gradient: Gradient, chain: Chain, reference: Reference, flow: Flow, *, speed: AxialChange | None = None
) -> Gradient:
    """Derivatives by the gridded flow state, from those by the plane that the pressures' relations make of it.

    Parameters
    ----------
    gradient : dict of str to ndarray, shape (k, nz, ny)
        By the plane of `Chain.flow`, the empty tunnel left in.
    chain : Chain
        The survey.
    reference : Reference
        The undisturbed stream.
    flow : Flow
        That plane.
    speed : AxialChange, optional
        From `pressure_speed`, worked out once for many figures.

    Returns
    -------
    dict of str to ndarray, shape (k, nz, ny)
        By u, v, w, total_pressure, static_pressure, density, temperature, those that the state of the points gives.
    """
    found = dict(gradient)
    names = chain.points.channels
    if chain.settings.primary == "total_pressure" or reference.compressible:
        speed = pressure_speed(chain, reference, flow) if speed is None else speed
        if reference.compressible:
            _before_gas(found, chain, reference, flow)
        elif speed is not None:
            by_total = 2 / reference.density * speed.undone(found)
            _added(found, "total_pressure", by_total)
            _added(found, "static_pressure", -by_total)
        if chain.displacement is not None:
            found = _before_displacement(found, chain.displacement, flow)
        return found
    measured_total = "total_pressure" in chain.measured
    if measured_total or "static_pressure" in names:
        _before_kinetic(found, reference, flow, measured_total=measured_total)
        return found
    _before_kinetic(found, reference, flow, measured_total=False)
    by_static = found.pop("static_pressure", None)
    if by_static is not None:
        by_v: Array = -reference.density * flow.v * by_static
        by_w: Array = -reference.density * flow.w * by_static
        if chain.settings.turning_pressure:
            by_v, by_w = crossflow_pressure_gradient(flow.v, flow.w, by_static, flow.grid, density=reference.density)
        _added(found, "v", by_v)
        _added(found, "w", by_w)
    return found


def _before_gas(found: Gradient, chain: Chain, reference: Reference, flow: Flow) -> None:
    """Undo the relations of a compressible plane, in place."""
    heat = reference.heat_capacity
    warming = (flow.u**2 + flow.v**2 + flow.w**2) / (2 * heat)
    temperature = flow.total_temperature - warming
    by_stagnation = found.pop("total_temperature", 0.0)
    by_temperature: Any = 0.0
    if chain.settings.primary == "velocity" and "total_pressure" in chain.measured:
        # p = H (T/T0)^(cp/R), ρ = p/(R T)
        by_density = found.pop("density", 0.0)
        by_static = found.pop("static_pressure", 0.0) + by_density / (reference.gas_constant * temperature)
        by_temperature = -by_density * flow.density / temperature
        share = by_static * flow.static_pressure
        _added(found, "total_pressure", share / flow.total_pressure)
        power = heat / reference.gas_constant
        by_temperature = by_temperature + share * power / temperature
        by_stagnation = by_stagnation - share * power / flow.total_temperature
    if _counts(by_stagnation):
        for name in "uvw":
            _added(found, name, by_stagnation * getattr(flow, name) / heat)
    by_temperature = by_temperature + by_stagnation
    _added(found, "temperature", by_temperature)


def _before_displacement(found: Gradient, displacement: Displacement, flow: Flow) -> Gradient:
    """Derivatives by the fields as read, before they were brought to the probe's axis."""
    grid = flow.grid
    yy, zz = grid.mesh()
    # The correction a ∂f/∂y + b ∂f/∂z of the coordinates themselves is a and b.
    along = np.stack([np.zeros(grid.shape)] * 3 + [yy, zz])
    moved = displacement.undone(along, grid)
    a, b = moved[3] - yy, moved[4] - zz
    return {
        name: by + _transposed_slope(a * by, grid.dy, -1) + _transposed_slope(b * by, grid.dz, -2)
        for name, by in found.items()
    }


def _transposed_slope(weights: Array, step: float, axis: int) -> Array:
    """Transpose of `numpy.gradient` along one axis."""
    w = np.moveaxis(weights, axis, -1) / step
    out = np.zeros_like(w)
    out[..., 2:] += 0.5 * w[..., 1:-1]
    out[..., :-2] -= 0.5 * w[..., 1:-1]
    out[..., 1] += w[..., 0]
    out[..., 0] -= w[..., 0]
    out[..., -1] += w[..., -1]
    out[..., -2] -= w[..., -1]
    return np.moveaxis(out, -1, axis)
