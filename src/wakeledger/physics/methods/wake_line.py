"""Induced drag and lift from line integrals along the wake: no derivative of the data, no Poisson solve.

The wake is cut into parts k along its trace, each with circulation Γ_k from the closed line integral of the measured
velocity around it and ψ̄_k, the mean over the part of the stream function, weighted with the part's own circulation:

    D_i = ½ρ Σ Γ_k ψ̄_k = ½ρ Σ Γ_b(k+½)(ψ̄_k+1 − ψ̄_k) = −½ρ ∫Γ_b V_n ds,        L = ρU Σ Γ_k ȳ_k,

with the bound circulation Γ_b = −(circulation accumulated from the port end) and dψ = −V_n ds = v dz − w dy,
integrated along paths through the measured field and averaged over every row and every column as the base line. The
parts consist of grid cells whose own circulations are line integrals, so the drag does not depend on where the cuts
are; they are there to be drawn, and to say where along the wake the drag arises.

A line integral of the measured normal velocity would see a flow-angle offset, −½L w0/U; the offset is therefore read
from closed lines around the wake (Cauchy's integral, `wakeledger.physics.fields.path_integrals.OuterFlow`) and removed.
Munk, NACA TR 121 (1923), for the line integral in the Trefftz plane.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.path_form import (
    Mask,
    PathFields,
    PathForm,
    path_fields,
    path_noise_bias,
    path_sensitivity,
)
from wakeledger.physics.fields.path_integrals import adjoint_of_circulation, cell_circulation, outer_flow
from wakeledger.physics.fields.wake_trace import WakeTrace, wake_trace

#: Families of base lines whose scatter is the method's own uncertainty: bands of rows, and as many of columns.
_BANDS = 3
#: Share of the gross circulation ½Σ|Γ| that islands on the window's edge, or the outermost cells, may hold.
_EDGE_SHARE = 0.02
#: Width of those outermost cells, and the net circulation that shows that a wake goes on beyond the edge it touches.
_RIM, _NET_SHARE = 3, 0.05
_OPEN = (
    "the wake region reaches the window's edge, so that no closed line of undisturbed flow surrounds it; "
    "widen the survey, or give the flow-angle offset"
)
_EMPTY = "the wake region is empty"
_NOT_FINITE = "the crossflow has values that are not finite; fill the missing points first"


@dataclass(frozen=True, eq=False)
class WakeCuts(PathForm):
    """How the wake of one nominal field is cut; evaluating other fields with it is linear algebra only.

    Attributes
    ----------
    grid, cells, outer
        As in `PathForm`; a cell belongs to the wake if any of its corners lies in the wake mask.
    trace : WakeTrace or None
        Trace and parts; None where they were not asked for.
    enclosed : bool
        Whether closed lines of undisturbed flow surround the wake inside the window.
    reason : str or None
        Why it is not enclosed.
    """

    trace: WakeTrace | None
    enclosed: bool
    reason: str | None


@dataclass(frozen=True, eq=False)
class WakeLineForces:
    """Drag and lift of any number of fields; every array has the leading shape (...) of the fields.

    Attributes
    ----------
    induced_drag, lift : ndarray
        N, downstream and up.
    method_uncertainty, lift_method_uncertainty : ndarray
        Standard uncertainty from the scatter between families of paths and between neighbouring edges of the wake, N.
    family_drag : ndarray, shape (..., 6)
        Induced drag with the base lines in each third of the rows (from below), then of the columns (from port), N.
    edge_drag, edge_lift : ndarray, shape (..., 2)
        Change when the wake region loses its outermost ring of cells, and when it gains one, N.
    net_circulation : ndarray
        ΣΓ over the wake, m²/s.
    offset_v, offset_w : ndarray
        Uniform crossflow that was removed, m/s.
    """

    induced_drag: Array
    lift: Array
    method_uncertainty: Array
    lift_method_uncertainty: Array
    family_drag: Array
    edge_drag: Array
    edge_lift: Array
    net_circulation: Array
    offset_v: Array
    offset_w: Array


@dataclass(frozen=True, eq=False)
class WakeLine:
    """The wake line of one field.

    Attributes
    ----------
    induced_drag, lift : float
        N, downstream and up; NaN with a reason where they cannot be had.
    method_uncertainty, lift_method_uncertainty : float
        Standard uncertainties of the method itself, N; see `WakeLineForces`.
    net_circulation : float
        ΣΓ over the wake, m²/s. Where it is not zero the drag depends on the unit of length (metres here).
    offset_v, offset_w : float
        Uniform crossflow that was found outside the wake and removed, m/s.
    y, z, arc_length : ndarray, shape (parts,)
        The trace, m; the arc length starts at each chain's port end.
    chain : ndarray of int, shape (parts,)
        Chain each part belongs to: one for each sheet that stands out of the noise, one for each branch.
    circulation : ndarray, shape (parts,)
        Γ_k, the closed line integral around each part, m²/s.
    centroid_y, centroid_z : ndarray, shape (parts,)
        Centroid of each part, m.
    stream_function : ndarray, shape (parts,)
        ψ̄_k, m²/s.
    drag : ndarray, shape (parts,)
        ½ρΓ_kψ̄_k, N; the sum is the induced drag, the share of one part depends on the constant of ψ.
    bound_circulation : ndarray, shape (parts,)
        Γ_b at the cut between a part and the next of its chain, m²/s; Σ Γ_b(ψ̄_k+1 − ψ̄_k) along the chains is the drag
        over ½ρ where the net circulation of each is zero.
    normal_velocity : ndarray, shape (parts,)
        Measured V_n at the same cuts, m/s, upward for a flat wake, less the offset; NaN at the end of a chain. On the
        trace it exceeds −dψ̄/ds by the wake's finite thickness.
    cuts : WakeCuts or None
        To evaluate other fields with.
    reason : str or None
        Why there is no value.
    """

    induced_drag: float
    lift: float
    method_uncertainty: float
    lift_method_uncertainty: float
    net_circulation: float
    offset_v: float
    offset_w: float
    y: Array
    z: Array
    arc_length: Array
    chain: NDArray[np.int64]
    circulation: Array
    centroid_y: Array
    centroid_z: Array
    stream_function: Array
    drag: Array
    bound_circulation: Array
    normal_velocity: Array
    cuts: WakeCuts | None
    reason: str | None


def find_cuts(
    v: Array, w: Array, grid: UniformGrid, *, mask: Mask, loss: Array | None = None, trace: bool = True
) -> WakeCuts:
    """Cut the wake of a nominal field.

    Parameters
    ----------
    v, w : ndarray, shape (nz, ny)
        Crossflow, m/s, finite.
    grid : UniformGrid
        The grid.
    mask : ndarray of bool, shape (nz, ny)
        Region that holds all vorticity.
    loss : ndarray, shape (nz, ny), optional
        Total-pressure loss, Pa; helps to find the trace.
    trace : bool
        Whether the trace and the parts are wanted; the forces do not need them.

    Returns
    -------
    WakeCuts

    Raises
    ------
    ValueError
        If the mask is empty, a shape differs from the grid's or a velocity is not finite.
    """
    for name, field in (("v", v), ("w", w), ("mask", mask)):
        if np.shape(field) != grid.shape:
            raise ValueError(f"{name} has shape {np.shape(field)}, the grid has {grid.shape} (z, y)")
    if not mask.any():
        raise ValueError(_EMPTY)
    if not (np.isfinite(v).all() and np.isfinite(w).all()):
        raise ValueError(_NOT_FINITE)
    cells = _cells(mask)
    circulation = cell_circulation(v, w, grid)
    inner, enclosed = _enclosed(np.where(cells, circulation, 0.0), cells)
    rows, columns = np.flatnonzero(inner.any(axis=1)), np.flatnonzero(inner.any(axis=0))
    box = (int(rows[0]), int(rows[-1]) + 1, int(columns[0]), int(columns[-1]) + 1)
    return WakeCuts(
        grid=grid,
        cells=cells,
        outer=outer_flow(grid, box),
        trace=wake_trace(circulation, cells, grid, loss=loss) if trace else None,
        enclosed=enclosed,
        reason=None if enclosed else _OPEN,
    )


def _cells(mask: Mask) -> Mask:
    """Cells with a corner in the mask, shape (..., nz − 1, ny − 1)."""
    cells: Mask = mask[..., 1:, 1:] | mask[..., 1:, :-1] | mask[..., :-1, 1:] | mask[..., :-1, :-1]
    return cells


def _enclosed(circulation: Array, cells: Mask) -> tuple[Mask, bool]:
    """The islands around which closed lines are laid, and whether what touches the window's edge is a trifle.

    A region may touch the edge by its margin only, or by a lone island of noise; a wake that crosses the edge has
    circulation there or lacks its other half.
    """
    labels, _ = ndimage.label(cells, structure=np.ones((3, 3)))
    rim = np.ones(cells.shape, dtype=bool)
    rim[1:-1, 1:-1] = False
    touching = np.unique(labels[rim & cells])
    if touching.size == 0:
        return cells, True
    inner = cells & ~np.isin(labels, touching)
    gross = np.abs(circulation).sum() / 2
    islands = np.abs(ndimage.sum_labels(circulation, labels, touching)).sum()
    if inner.any() and islands <= _EDGE_SHARE * gross:
        return inner, True
    deep = np.ones(cells.shape, dtype=bool)
    deep[_RIM:-_RIM, _RIM:-_RIM] = False
    at_edge = np.abs(circulation[deep]).sum() / 2
    return cells, bool(at_edge <= _EDGE_SHARE * gross and abs(circulation.sum()) <= _NET_SHARE * gross)


def evaluate(
    cuts: WakeCuts,
    v: Array,
    w: Array,
    density: Array | float,
    speed: Array | float,
    *,
    mask: Mask | None = None,
    offset: tuple[Array | float, Array | float] | None = None,
) -> WakeLineForces:
    """Drag and lift of fields with given cuts: linear algebra only.

    Parameters
    ----------
    cuts : WakeCuts
        From `find_cuts` on the nominal field.
    v, w : ndarray, shape (..., nz, ny)
        Crossflow, m/s.
    density, speed : float or ndarray, shape (...)
        Undisturbed stream, kg/m³ and m/s.
    mask : ndarray of bool, shape (..., nz, ny), optional
        Wake regions of the fields where they have their own.
    offset : (v0, w0), optional
        Uniform crossflow to remove, m/s, scalars or shape (...); read from closed lines around the wake where not
        given. Give (0, 0) between walls, whose own crossflow belongs to the drag as tested.

    Returns
    -------
    WakeLineForces
        NaN where the wake is not enclosed and no offset is given.

    Notes
    -----
    The value of the drag is a quadratic form in (v, w); see `noise_bias` for what independent noise adds to it.
    """
    form = cuts if mask is None else PathForm(cuts.grid, _cells(mask), cuts.outer)
    unknown = (math.nan, math.nan) if offset is None and not cuts.enclosed else offset
    fields = path_fields(form, v, w, offset=unknown)
    y, psi, inside = fields.y, fields.stream_function, fields.inside
    held = fields.circulation * inside
    half_density = 0.5 * np.asarray(density, float)
    impulse = np.asarray(density, float) * np.asarray(speed, float)
    drag = half_density * (held * psi).sum(axis=(-2, -1))
    lift = impulse * (held.sum(axis=-2) @ y)
    ring = np.ones((1,) * (inside.ndim - 2) + (3, 3), dtype=bool)
    lost = inside & ~ndimage.binary_erosion(inside, ring, border_value=1)
    gained = ndimage.binary_dilation(inside, ring) & ~inside
    changes = np.stack([-(fields.circulation * lost), fields.circulation * gained], axis=-3)
    edge_drag = half_density[..., None] * (changes * psi[..., None, :, :]).sum(axis=(-2, -1))
    edge_lift = impulse[..., None] * (changes.sum(axis=-2) @ y)
    bands = [b.mean(-1) for d in (fields.by_row, fields.by_column) for b in np.array_split(d, _BANDS, axis=-1)]
    family = drag[..., None] + half_density[..., None] * np.stack(bands, axis=-1)
    return WakeLineForces(
        induced_drag=drag,
        lift=lift,
        method_uncertainty=np.hypot(path_scatter(family), edge_scatter(edge_drag)),
        lift_method_uncertainty=edge_scatter(edge_lift),
        family_drag=family,
        edge_drag=edge_drag,
        edge_lift=edge_lift,
        net_circulation=held.sum(axis=(-2, -1)),
        offset_v=fields.offset_v,
        offset_w=fields.offset_w,
    )


def path_scatter(family_drag: Array) -> Array:
    """Standard deviation of the families' drags, shape (..., families) to (...), N.

    Where the crossflow diverges, near the model, the families differ systematically and averaging them does not help:
    the scatter itself, not that of the mean, covers the error. Once the families' drags of a predicted field have been
    subtracted, what is left is the unpredicted part.
    """
    scatter: Array = family_drag.std(axis=-1, ddof=1)
    return scatter


def edge_scatter(edge_change: Array) -> Array:
    """Standard uncertainty of a rectangular distribution as wide as the larger change, shape (..., 2) to (...)."""
    uncertainty: Array = np.abs(edge_change).max(axis=-1) / math.sqrt(3)
    return uncertainty


def sensitivity(
    cuts: WakeCuts, v: Array, w: Array, density: float, speed: float, *, mask: Mask | None = None
) -> tuple[tuple[Array, Array], tuple[Array, Array]]:
    """Exact derivatives of drag and lift with respect to every measured velocity.

    Parameters
    ----------
    cuts : WakeCuts
        From `find_cuts`.
    v, w : ndarray, shape (nz, ny)
        Crossflow, m/s.
    density, speed : float
        Undisturbed stream, kg/m³ and m/s.
    mask : ndarray of bool, shape (nz, ny), optional
        Wake region, where it is not that of the cuts.

    Returns
    -------
    (drag_v, drag_w), (lift_v, lift_w) : ndarray, shape (nz, ny)
        N per m/s, the offset being read from the field itself.
    """
    form = cuts if mask is None else PathForm(cuts.grid, _cells(mask), cuts.outer)
    drag_v, drag_w = path_sensitivity(form, v, w)
    y = cuts.grid.y0 + cuts.grid.dy * (np.arange(cuts.grid.ny - 1) + 0.5)
    lift_v, lift_w = adjoint_of_circulation(form.cells * y, cuts.grid)
    half, impulse = density / 2, density * speed
    return (half * drag_v, half * drag_w), (impulse * lift_v, impulse * lift_w)


def noise_bias(cuts: WakeCuts, variance_v: Array, variance_w: Array, density: float) -> float:
    """What independent noise adds to the drag on average, N; to be subtracted from it.

    Parameters
    ----------
    cuts : WakeCuts
        From `find_cuts`; the offset is read from the field itself.
    variance_v, variance_w : ndarray, shape (nz, ny)
        Variance of v and w at each point, m²/s².
    density : float
        kg/m³.

    Returns
    -------
    float
    """
    return density / 2 * path_noise_bias(cuts, variance_v, variance_w)


def wake_line(
    v: Array,
    w: Array,
    grid: UniformGrid,
    density: float,
    speed: float,
    *,
    mask: Mask | None = None,
    loss: Array | None = None,
    offset: tuple[float, float] | None = None,
    cuts: WakeCuts | None = None,
) -> WakeLine:
    """Induced drag and lift of one field from line integrals along its wake.

    Parameters
    ----------
    v, w : ndarray, shape (nz, ny)
        Crossflow, m/s.
    grid : UniformGrid
        The grid.
    density, speed : float
        Undisturbed stream, kg/m³ and m/s.
    mask : ndarray of bool, shape (nz, ny), optional
        Region that holds all vorticity; needed unless `cuts` are given.
    loss : ndarray, shape (nz, ny), optional
        Total-pressure loss, Pa; helps to find the trace.
    offset : (float, float), optional
        Uniform crossflow (v0, w0) to remove, m/s; found from the field outside the wake where not given.
    cuts : WakeCuts, optional
        From `find_cuts` on the nominal field, to skip that step.

    Returns
    -------
    WakeLine
        Values are NaN, with a reason, where the region is empty or not enclosed by the window or the field has gaps.

    Raises
    ------
    ValueError
        If neither mask nor cuts are given or a shape differs from the grid's.
    """
    if not (np.isfinite(v).all() and np.isfinite(w).all()):
        return _unknown(_NOT_FINITE)
    if cuts is None:
        if mask is None:
            raise ValueError("the wake region is needed: give mask, or cuts that were made with one")
        if not mask.any():
            return _unknown(_EMPTY)
        cuts = find_cuts(v, w, grid, mask=mask, loss=loss)
    if offset is None and not cuts.enclosed:
        return _unknown(_OPEN)
    forces = evaluate(cuts, v, w, density, speed, offset=offset)
    fields = path_fields(cuts, v, w, offset=(forces.offset_v, forces.offset_w))
    cell_gamma = _in_window(fields, fields.circulation, cuts)
    cell_psi = _in_window(fields, fields.stream_function, cuts)
    cell_y, cell_z = _in_window(fields, fields.y, cuts), _in_window(fields, fields.z[:, None], cuts)
    trace = cuts.trace
    if trace is None:
        trace = wake_trace(cell_circulation(v, w, grid), cuts.cells, grid, loss=loss)
    circulation = trace.sums(cell_gamma)
    mean_psi = _part_mean(trace, cell_gamma, cell_psi)
    return WakeLine(
        induced_drag=float(forces.induced_drag),
        lift=float(forces.lift),
        method_uncertainty=float(forces.method_uncertainty),
        lift_method_uncertainty=float(forces.lift_method_uncertainty),
        net_circulation=float(forces.net_circulation),
        offset_v=float(forces.offset_v),
        offset_w=float(forces.offset_w),
        y=trace.y,
        z=trace.z,
        arc_length=trace.arc_length,
        chain=trace.chain,
        circulation=circulation,
        centroid_y=_part_mean(trace, cell_gamma, cell_y),
        centroid_z=_part_mean(trace, cell_gamma, cell_z),
        stream_function=mean_psi,
        drag=0.5 * density * trace.sums(cell_gamma * cell_psi),
        bound_circulation=trace.bound_circulation(circulation),
        normal_velocity=_normal_velocity(trace, v - forces.offset_v, w - forces.offset_w, grid),
        cuts=cuts,
        reason=None,
    )


def _in_window(fields: PathFields, values: Array, cuts: WakeCuts) -> Array:
    """Values of the block put in their place in the window, zero around it."""
    window = np.zeros(cuts.cells.shape)
    first_z, first_y = (
        round((axis[0] - low) / step - 0.5)
        for axis, low, step in (
            (fields.z, cuts.grid.z0, cuts.grid.dz),
            (fields.y, cuts.grid.y0, cuts.grid.dy),
        )
    )
    window[first_z : first_z + fields.z.size, first_y : first_y + fields.y.size] = values
    return window


def _normal_velocity(trace: WakeTrace, v: Array, w: Array, grid: UniformGrid) -> Array:
    """Crossflow across the trace halfway to the next part, along n = (−dz/ds, dy/ds)."""
    along_y, along_z = np.diff(trace.y), np.diff(trace.z)
    middle_y, middle_z = trace.y[:-1] + along_y / 2, trace.z[:-1] + along_z / 2
    place = np.stack([(middle_z - grid.z0) / grid.dz, (middle_y - grid.y0) / grid.dy])
    v_there, w_there = (ndimage.map_coordinates(field, place, order=3, mode="nearest") for field in (v, w))
    same_chain = np.diff(trace.chain) == 0
    step = np.where(same_chain, np.hypot(along_y, along_z), math.nan)
    normal: Array = np.append((w_there * along_y - v_there * along_z) / step, math.nan)
    return normal


def _part_mean(trace: WakeTrace, circulation: Array, quantity: Array) -> Array:
    """Mean over each part weighted with the circulation, or with its magnitude where both signs nearly cancel."""
    net, gross = trace.sums(circulation), trace.sums(np.abs(circulation))
    one_signed = np.abs(net) > 0.5 * gross
    by_net = trace.sums(circulation * quantity) / np.where(one_signed, net, 1.0)
    by_gross = trace.sums(np.abs(circulation) * quantity) / np.where(gross > 0, gross, 1.0)
    return np.where(one_signed, by_net, by_gross)


def _unknown(reason: str) -> WakeLine:
    none = np.empty(0)
    unknown = math.nan
    return WakeLine(
        *(unknown,) * 7, none, none, none, np.empty(0, dtype=np.int64), *(none,) * 7, cuts=None, reason=reason
    )
