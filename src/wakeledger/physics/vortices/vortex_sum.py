"""Induced drag as a sum over identified vortices and the rest of the wake.

The crossflow is represented by Gaussian elements: one for each identified vortex, with its fitted centre and core and
the circulation of a closed line integral, and one for each of the overlapping cells that cover the plane, with the mean
of the line integrals of the velocity around the cell less the share of the identified vortices in it. Whatever the
vortices leave over thus stays in the sum, with its circulation and its place, so that neither depends on where a vortex
is said to end. The drag is the closed double sum over the elements, self terms included. Nothing is differentiated and
no Poisson equation is solved.

A cell's element is wider than what it stands for: the averaging over the cell and the Gaussian that is as wide as the
cell each take ½ρΓ² s/(2 · area) off the energy, to first order in the sum s of the cell's second moments. Both are put
back in the cell's self term; between a cell and a vortex the sum uses the vortex's squared core less s.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.circulation import cell_circulations, circle_weights
from wakeledger.physics.fields.differences import axial_vorticity
from wakeledger.physics.fields.gaussian_elements import Reflection, interaction_matrix
from wakeledger.physics.fields.wake_region import wake_region
from wakeledger.physics.vortices.cells import Ground, WakeCells, cells_on, ground_of
from wakeledger.physics.vortices.identify import MeasuredVortex, Vortex, measured_vortices

Mask = NDArray[np.bool_]

#: Step of the wake's cells in units of the smallest core found, and in grid spacings where none is found.
CELL_STEP = 1.0
CELL_STEP_UNRESOLVED = 2.0
#: Cells at most; beyond it they grow.
MOST_CELLS = 2500
_GROWTH = 1.1
# Share of a vortex's squared core that is never taken off for the cells' size.
_LEAST_CORE = 0.25
# The error grows with at least the cell's square, so doubling the cells shows three times what is left.
_DOUBLING = 3.0


@dataclass(frozen=True)
class VortexDraws:
    """Vortices of one or many perturbed planes, each of shape (..., k) for k vortices in the nominal order.

    Attributes
    ----------
    y, z, circulation, core_length : ndarray
        m, m, m²/s, m.
    """

    y: Array
    z: Array
    circulation: Array
    core_length: Array


@dataclass(frozen=True)
class VortexSum:
    """Induced drag by the sum over vortices.

    Attributes
    ----------
    induced_drag : float
        D_i, N; NaN with a reason where it cannot be had. With a reflection plane the surveyed half's share.
    method_uncertainty : float
        Standard uncertainty from the choice of the split and of the cells' size, N.
    vortices : tuple of Vortex
        From port to starboard.
    vortex_circulation : float
        Sum of |Γ| of the vortices, m²/s.
    remainder_circulation : float
        Sum of |Γ| of the cells, less the vortices' share, m²/s.
    net_circulation : float
        Line integral around the window's edge, m²/s; about zero where the survey encloses the wake of a body in free
        air.
    cells : int
        Number of cells used.
    cell_step : float
        Step of the wake's cells, m.
    reason : str or None
        Why there is no value.
    """

    induced_drag: float
    method_uncertainty: float
    vortices: tuple[Vortex, ...]
    vortex_circulation: float
    remainder_circulation: float
    net_circulation: float
    cells: int
    cell_step: float
    reason: str | None = None


@dataclass(frozen=True, eq=False)
class _Sharing:
    """How the plane was shared out, so that it can be done again with other cells."""

    ground: Ground
    step: float

    def cells(self) -> WakeCells:
        return cells_on(self.ground, self.step)


@dataclass(frozen=True, eq=False)
class WakeParts:
    """Elements of one nominal plane: the geometry that perturbed planes are evaluated on.

    Attributes
    ----------
    grid : UniformGrid
        The grid.
    vortices : tuple of Vortex
        From port to starboard.
    cells : WakeCells
        Cells of the wake and of the outer flow.
    reflection : {"y", "z"} or None
        Plane of symmetry.
    shares : ndarray, shape (n, k)
        Share of each vortex in each cell.
    among_vortices, with_cells, among_cells : ndarray, shape (k, k), (k, n), (n, n)
        Matrices of the double sum, size corrections included.
    """

    grid: UniformGrid
    vortices: tuple[Vortex, ...]
    cells: WakeCells
    reflection: Reflection
    shares: Array
    among_vortices: Array
    with_cells: Array
    among_cells: Array
    _sharing: _Sharing
    _measured: tuple[MeasuredVortex, ...]
    _nominal: tuple[Array, Array]

    @cached_property
    def strengths(self) -> Array:
        """Circulations of the vortices, m²/s, shape (k,)."""
        return np.array([vortex.circulation for vortex in self.vortices])

    @cached_property
    def _linear(self) -> Array:
        gamma = self.strengths
        result: Array = gamma @ self.with_cells - self.among_cells @ (self.shares @ gamma)
        return result

    @cached_property
    def _constant(self) -> float:
        gamma = self.strengths
        taken = self.shares @ gamma
        inner = gamma @ self.among_vortices @ gamma - 2 * (gamma @ self.with_cells) @ taken
        return float(inner + taken @ self.among_cells @ taken)


def find_parts(
    v: Array,
    w: Array,
    grid: UniformGrid,
    *,
    mask: Mask | None = None,
    excluded: Mask | None = None,
    u: Array | None = None,
    reflection: Reflection = None,
) -> WakeParts:
    """Identify the vortices of a nominal plane and cut the rest of its wake into cells.

    Parameters
    ----------
    v, w : ndarray, shape (nz, ny)
        Crossflow, m/s, finite everywhere.
    grid : UniformGrid
        The grid.
    mask : ndarray of bool, shape (nz, ny), optional
        The wake region: where the cells are smallest. Vorticity outside it still counts, in larger cells. Found from
        the vorticity unless given.
    excluded : ndarray of bool, shape (nz, ny), optional
        What must not count: a support's wake, a wall layer.
    u : ndarray, shape (nz, ny), optional
        Axial velocity, m/s; only for the list of vortices.
    reflection : {"y", "z"}, optional
        Plane of symmetry y = 0 or z = 0 beside the survey.

    Returns
    -------
    WakeParts

    Raises
    ------
    ValueError
        If shapes do not fit the grid or a value is not finite.
    """
    v, w = np.asarray(v, float), np.asarray(w, float)
    kept = None if excluded is None else ~np.asarray(excluded, bool)
    found = measured_vortices(v, w, grid, mask=kept, u=u)
    if mask is None:
        mask = wake_region(np.zeros(grid.shape), axial_vorticity(v, w, grid), grid).mask
    sharing, cells = _sharing(grid, mask, excluded, reflection, [measured.vortex.core_length for measured in found])
    return _parts(grid, found, sharing, cells, reflection, (v, w))


def _sharing(
    grid: UniformGrid, mask: Mask, excluded: Mask | None, reflection: Reflection, cores: list[float]
) -> tuple[_Sharing, WakeCells]:
    spacing = max(grid.dy, grid.dz)
    step = max(spacing, CELL_STEP * min(cores)) if cores else CELL_STEP_UNRESOLVED * spacing
    ground = ground_of(grid, mask, excluded, reflection)
    while True:
        sharing = _Sharing(ground, step)
        cells = sharing.cells()
        if cells.count <= MOST_CELLS:
            return sharing, cells
        step *= max(_GROWTH, float(np.sqrt(cells.count / MOST_CELLS)))


def _parts(
    grid: UniformGrid,
    measured: tuple[MeasuredVortex, ...],
    sharing: _Sharing,
    cells: WakeCells,
    reflection: Reflection,
    nominal: tuple[Array, Array],
) -> WakeParts:
    vortices = tuple(one.vortex for one in measured)
    y, z = np.array([x.y for x in vortices]), np.array([x.z for x in vortices])
    core_squared = np.array([x.core_length**2 for x in vortices])
    shares = np.empty((cells.count, len(vortices)))
    with_cells = np.empty((len(vortices), cells.count))
    for k, vortex in enumerate(vortices):
        shares[:, k] = cells.gaussian_share(vortex.y, vortex.z, vortex.core_length)
        size = core_squared[k] - np.minimum(cells.spread, (1 - _LEAST_CORE) * core_squared[k])
        centre_y, centre_z, point = y[k : k + 1], z[k : k + 1], np.zeros(1)
        facing = interaction_matrix(cells.y, cells.z, size, centre_y, centre_z, point, reflection=reflection)
        with_cells[k] = facing[:, 0]
    among_cells = interaction_matrix(
        cells.y, cells.z, cells.spread, cells.y, cells.z, cells.spread, reflection=reflection
    )
    among_cells[np.diag_indices_from(among_cells)] += cells.spread / cells.area
    return WakeParts(
        grid=grid,
        vortices=vortices,
        cells=cells,
        reflection=reflection,
        shares=shares,
        among_vortices=interaction_matrix(y, z, core_squared, y, z, core_squared, reflection=reflection),
        with_cells=with_cells,
        among_cells=among_cells,
        _sharing=sharing,
        _measured=measured,
        _nominal=nominal,
    )


def evaluate(parts: WakeParts, v: Array, w: Array, density: float | Array) -> Array:
    """Induced drag of one or many planes on the elements of the nominal one.

    Parameters
    ----------
    parts : WakeParts
        From `find_parts`.
    v, w : ndarray, shape (..., nz, ny)
        Crossflow, m/s.
    density : float or ndarray, shape (...)
        ρ, kg/m³.

    Returns
    -------
    ndarray, shape (...)
        D_i, N. The nominal vortices stay where they are; every change of the field is carried by the cells, so the
        result is an exact quadratic form of the velocities.
    """
    cells = parts.cells.circulations(v, w)
    quadratic = np.einsum("...i,...i->...", cells @ parts.among_cells, cells)
    total = quadratic + 2 * (cells @ parts._linear) + parts._constant
    result: Array = 0.5 * np.asarray(density) * total
    return result


def sensitivities(parts: WakeParts, v: Array, w: Array, density: float) -> tuple[Array, Array]:
    """Derivatives of the drag with respect to the crossflow at every point.

    Parameters
    ----------
    parts : WakeParts
        From `find_parts`.
    v, w : ndarray, shape (nz, ny)
        Crossflow, m/s.
    density : float
        ρ, kg/m³.

    Returns
    -------
    by_v, by_w : ndarray, shape (nz, ny)
        ∂D_i/∂v and ∂D_i/∂w, N s/m, exact for the quadratic form of `evaluate`.
    """
    by_cell = density * (parts.among_cells @ parts.cells.circulations(v, w) + parts._linear)
    return parts.cells.velocity_derivatives(by_cell)


def vortex_draws(parts: WakeParts, v: Array, w: Array) -> VortexDraws:
    """Vortices of perturbed planes, to first order in the perturbation.

    Parameters
    ----------
    parts : WakeParts
        From `find_parts`.
    v, w : ndarray, shape (..., nz, ny)
        Crossflow, m/s.

    Returns
    -------
    VortexDraws
        Centre and core by one step of the fit from the nominal ones, the circulation by the line integral on the
        nominal circle.
    """
    v, w = np.asarray(v, float), np.asarray(w, float)
    lead, size = v.shape[:-2], v.shape[-2] * v.shape[-1]
    change_v = (v - parts._nominal[0]).reshape(-1, size)
    change_w = (w - parts._nominal[1]).reshape(-1, size)
    out = np.empty((4, change_v.shape[0], len(parts.vortices)))
    for k, measured in enumerate(parts._measured):
        vortex, centre = measured.vortex, measured.centre
        moved = np.concatenate([change_v[:, centre.points], change_w[:, centre.points]], axis=1) @ centre.response.T
        enclosed = np.empty((change_v.shape[0], measured.radii.size))
        for m, radius in enumerate(measured.radii):
            points, on_v, on_w = circle_weights(parts.grid, vortex.y, vortex.z, radius)
            enclosed[:, m] = change_v[:, points] @ on_v + change_w[:, points] @ on_w
        core = vortex.core_length + enclosed @ measured.profile.core_response
        inside = vortex.circulation * _gaussian_inside(vortex.contour_radius, vortex.core_length) + enclosed[:, -1]
        out[0, :, k] = vortex.y + moved[:, 0]
        out[1, :, k] = vortex.z + moved[:, 1]
        out[2, :, k] = inside / _gaussian_inside(vortex.contour_radius, core)
        out[3, :, k] = core
    y, z, circulation, core = out.reshape(4, *lead, len(parts.vortices))
    return VortexDraws(y, z, circulation, core)


def _gaussian_inside(radius: float, core: Array | float) -> Array | float:
    """Share of a Gaussian vortex's circulation inside a circle about its centre."""
    result: Array | float = -np.expm1(-((radius / core) ** 2))
    return result


def noise_bias(parts: WakeParts, variance_v: Array | float, variance_w: Array | float, density: float) -> float:
    """Mean of D_i that noise of the velocities adds, in closed form.

    Parameters
    ----------
    parts : WakeParts
        From `find_parts`.
    variance_v, variance_w : float or ndarray, shape (nz, ny)
        Variance of independent noise at each point, m²/s².
    density : float
        ρ, kg/m³.

    Returns
    -------
    float
        ½ρ tr(K C), C the covariance of the cells' circulations, N.
    """
    covariance = parts.cells.covariance(variance_v, variance_w).tocoo()
    rows, columns = covariance.coords
    return 0.5 * density * float(covariance.data @ parts.among_cells[rows, columns])


def vortex_sum(
    v: Array,
    w: Array,
    grid: UniformGrid,
    density: float,
    *,
    mask: Mask | None = None,
    excluded: Mask | None = None,
    u: Array | None = None,
    reflection: Reflection = None,
) -> VortexSum:
    """Induced drag of one plane as a sum over its vortices and the rest of its wake.

    Parameters
    ----------
    v, w : ndarray, shape (nz, ny)
        Crossflow, m/s, finite everywhere.
    grid : UniformGrid
        The grid.
    density : float
        ρ, kg/m³.
    mask, excluded, u, reflection
        As in `find_parts`.

    Returns
    -------
    VortexSum

    Raises
    ------
    ValueError
        If shapes do not fit the grid or a value is not finite.

    Notes
    -----
    D_i = −(ρ/4π) ΣΣ ΓᵢΓⱼ [ln rᵢⱼ + ½E₁(rᵢⱼ²/(aᵢ² + aⱼ²))] over vortices and cells, i = j included.
    """
    parts = find_parts(v, w, grid, mask=mask, excluded=excluded, u=u, reflection=reflection)
    return summarise(parts, v, w, density)


def summarise(parts: WakeParts, v: Array, w: Array, density: float) -> VortexSum:
    """The nominal plane's result with its method uncertainty, from parts already found.

    Parameters
    ----------
    parts : WakeParts
        From `find_parts` on the same v, w.
    v, w : ndarray, shape (nz, ny)
        Crossflow, m/s.
    density : float
        ρ, kg/m³.

    Returns
    -------
    VortexSum
    """
    cells = parts.cells.circulations(v, w)
    gamma = parts.strengths
    remainder = cells - parts.shares @ gamma
    drag = float(evaluate(parts, v, w, density))
    gross = float(np.abs(gamma).sum() + np.abs(remainder).sum())
    reason = None if gross > 0 else "the plane carries no axial vorticity"
    return VortexSum(
        induced_drag=drag if reason is None else float("nan"),
        method_uncertainty=_method_uncertainty(parts, v, w, density, drag) if reason is None else float("nan"),
        vortices=parts.vortices,
        vortex_circulation=float(np.abs(gamma).sum()),
        remainder_circulation=float(np.abs(remainder).sum()),
        net_circulation=float(cell_circulations(v, w, parts.grid).sum()),
        cells=parts.cells.count,
        cell_step=parts._sharing.step,
        reason=reason,
    )


def _method_uncertainty(parts: WakeParts, v: Array, w: Array, density: float, drag: float) -> float:
    """Change of the drag without a split and with cells twice as large, the second scaled to what is left."""
    cells = parts.cells.circulations(v, w)
    unsplit = 0.5 * density * float(cells @ parts.among_cells @ cells)
    sharing = replace(parts._sharing, step=2 * parts._sharing.step)
    doubled = _parts(parts.grid, parts._measured, sharing, sharing.cells(), parts.reflection, parts._nominal)
    coarse = float(evaluate(doubled, v, w, density))
    return float(np.hypot(unsplit - drag, (coarse - drag) / _DOUBLING))
