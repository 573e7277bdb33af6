"""Induced drag as a sum over identified vortices and the rest of the wake.

The crossflow is represented by Gaussian elements: one for each identified vortex, with its fitted centre and core and
the circulation of a closed line integral, and one for each cell of the plane, with the line integral of the velocity
around the cell less the share of the identified vortices in it. Whatever the vortices leave over thus stays in the sum,
with its circulation and its place, so that neither depends on where a vortex is said to end. The drag is the closed
double sum over the elements, self terms included. Nothing is differentiated and no Poisson equation is solved.

A cell's element is a little wider than what it stands for: an even spread over the cell and a Gaussian of the cell's
second moment each take ½ρΓ²(width² + height²)/(24 · area) off the energy, to first order. Both are put back in the
cell's self term; between a cell and a vortex the sum uses the vortex's squared core less (width² + height²)/12.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.circulation import circle_weights
from wakeledger.physics.fields.differences import axial_vorticity
from wakeledger.physics.fields.gaussian_elements import Reflection, interaction_matrix
from wakeledger.physics.fields.wake_region import wake_region
from wakeledger.physics.vortices.identify import MeasuredVortex, Vortex, measured_vortices
from wakeledger.physics.vortices.tiles import Tiles, cut_plane

Mask = NDArray[np.bool_]

#: Largest cell in units of the smallest core found.
CELL_SIZE = 1.05
#: Cells at most; beyond it they grow.
MOST_CELLS = 2500
# Share of a vortex's squared core that is never taken off for the cells' size.
_LEAST_CORE = 0.25
# The error grows with at least the cell's square, so doubling the cells shows three times what is left.
_DOUBLING = 3.0


@dataclass(frozen=True)
class VortexDraws:
    """Vortices of one or many perturbed planes, each of shape (..., k) for k vortices in the nominal order.

    Attributes
    ----------
    y, z, circulation, core_radius : ndarray
        m, m, m²/s, m.
    """

    y: Array
    z: Array
    circulation: Array
    core_radius: Array


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
        Sum of Γ over all elements, m²/s.
    cells : int
        Number of cells used.
    cell_size : float
        Side of the smallest cells (the longer one), m.
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
    cell_size: float
    reason: str | None = None


@dataclass(frozen=True, eq=False)
class _Cut:
    """How the plane was cut, so that it can be cut again with other cells."""

    mask: Mask
    excluded: Mask | None
    intervals: tuple[int, int]

    def tiles(self, grid: UniformGrid) -> Tiles:
        return cut_plane(grid, self.mask, self.intervals, excluded=self.excluded)

    def doubled(self) -> _Cut:
        return replace(self, intervals=(2 * self.intervals[0], 2 * self.intervals[1]))


@dataclass(frozen=True, eq=False)
class WakeParts:
    """Elements of one nominal plane: the geometry that perturbed planes are evaluated on.

    Attributes
    ----------
    grid : UniformGrid
        The grid.
    vortices : tuple of Vortex
        From port to starboard.
    tiles : Tiles
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
    tiles: Tiles
    reflection: Reflection
    shares: Array
    among_vortices: Array
    with_cells: Array
    among_cells: Array
    _cut: _Cut
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
    cut, tiles = _fitting_cut(grid, mask, excluded, [measured.vortex.core_radius for measured in found])
    return _parts(grid, found, cut, tiles, reflection, (v, w))


def _fitting_cut(grid: UniformGrid, mask: Mask, excluded: Mask | None, cores: list[float]) -> tuple[_Cut, Tiles]:
    size = CELL_SIZE * min(cores) if cores else 0.0
    along_y, along_z = max(1, int(size / grid.dy)), max(1, int(size / grid.dz))
    while True:
        cut = _Cut(mask, excluded, (along_y, along_z))
        tiles = cut.tiles(grid)
        if tiles.count <= MOST_CELLS or along_y >= grid.ny - 1:
            return cut, tiles
        if along_y * grid.dy <= along_z * grid.dz:
            along_y += 1
        else:
            along_z += 1


def _parts(
    grid: UniformGrid,
    measured: tuple[MeasuredVortex, ...],
    cut: _Cut,
    tiles: Tiles,
    reflection: Reflection,
    nominal: tuple[Array, Array],
) -> WakeParts:
    vortices = tuple(one.vortex for one in measured)
    y, z = np.array([x.y for x in vortices]), np.array([x.z for x in vortices])
    core_squared = np.array([x.core_radius**2 for x in vortices])
    shares = np.empty((tiles.count, len(vortices)))
    with_cells = np.empty((len(vortices), tiles.count))
    spread = tiles.spread
    for k, vortex in enumerate(vortices):
        shares[:, k] = tiles.gaussian_share(vortex.y, vortex.z, vortex.core_radius)
        taken_off = np.minimum(spread, (1 - _LEAST_CORE) * core_squared[k])
        centre_y, centre_z, point = y[k : k + 1], z[k : k + 1], np.zeros(1)
        with_cells[k] = interaction_matrix(
            tiles.y, tiles.z, core_squared[k] - taken_off, centre_y, centre_z, point, reflection=reflection
        )[:, 0]
    among_cells = interaction_matrix(tiles.y, tiles.z, spread, tiles.y, tiles.z, spread, reflection=reflection)
    among_cells[np.diag_indices_from(among_cells)] += spread / tiles.area
    return WakeParts(
        grid=grid,
        vortices=vortices,
        tiles=tiles,
        reflection=reflection,
        shares=shares,
        among_vortices=interaction_matrix(y, z, core_squared, y, z, core_squared, reflection=reflection),
        with_cells=with_cells,
        among_cells=among_cells,
        _cut=cut,
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
    cells = parts.tiles.circulations(v, w)
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
    tiles = parts.tiles
    by_cell = density * (parts.among_cells @ tiles.circulations(v, w) + parts._linear)
    out = []
    for matrix in (tiles.from_v, tiles.from_w):
        flat = np.zeros(parts.grid.nz * parts.grid.ny)
        flat[tiles.points] = matrix.T @ by_cell
        out.append(flat.reshape(parts.grid.shape))
    return out[0], out[1]


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
        core = vortex.core_radius + enclosed @ measured.profile.core_response
        inside = vortex.circulation * _gaussian_inside(vortex.contour_radius, vortex.core_radius) + enclosed[:, -1]
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
    tiles = parts.tiles
    shape = parts.grid.shape
    total = 0.0
    for matrix, variance in ((tiles.from_v, variance_v), (tiles.from_w, variance_w)):
        weights = np.broadcast_to(np.asarray(variance, float), shape).ravel()[tiles.points]
        covariance = sparse.csr_array((matrix * weights[None, :]) @ matrix.T)
        total += float(covariance.multiply(parts.among_cells).sum())
    return 0.5 * density * total


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
    tiles = parts.tiles
    cells = tiles.circulations(v, w)
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
        net_circulation=float(gamma.sum() + remainder.sum()),
        cells=tiles.count,
        cell_size=float(max((tiles.y_high - tiles.y_low).min(), (tiles.z_high - tiles.z_low).min())),
        reason=reason,
    )


def _method_uncertainty(parts: WakeParts, v: Array, w: Array, density: float, drag: float) -> float:
    """Change of the drag without a split and with cells twice as large, the second scaled to what is left."""
    cells = parts.tiles.circulations(v, w)
    unsplit = 0.5 * density * float(cells @ parts.among_cells @ cells)
    cut = parts._cut.doubled()
    doubled = _parts(parts.grid, parts._measured, cut, cut.tiles(parts.grid), parts.reflection, parts._nominal)
    coarse = float(evaluate(doubled, v, w, density))
    return float(np.hypot(unsplit - drag, (coarse - drag) / _DOUBLING))
