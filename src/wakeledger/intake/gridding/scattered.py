"""Points anywhere: local interpolation by radial functions and cubic polynomials, as one sparse matrix.

Each cell takes the value of the interpolant through its nearest places: cubic radial functions |r|³ with all
polynomials up to the third degree. It passes through the data, is exact for cubic polynomials and converges at third
to fourth order on smooth fields, and is a fixed linear combination of the values, so that a thousand draws cost one
sparse product. On a Gaussian vortex its error is a third of that of piecewise cubic (Clough-Tocher) interpolation,
whose slopes come from an iteration that would have to be repeated for every draw
(tests/intake/test_gridding_scattered.py).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from wakeledger.core.errors import DataError
from wakeledger.core.flags import Flag
from wakeledger.core.grid import Array, UniformGrid
from wakeledger.intake.gridding.fill import FAR, GapFill, make_gap_fill
from wakeledger.intake.gridding.record import Gridding
from wakeledger.intake.gridding.stretching import STEP, stretch_levels

_NEIGHBOURS = 30
_POWERS = [(i, j) for i in range(4) for j in range(4 - i)]
_LINEAR_POWERS = [(0, 0), (1, 0), (0, 1)]
#: Weights that miss a polynomial by more than this belong to neighbours that do not carry it.
_MISSED = 1e-6
_CHUNK = 4096
#: Sum of the weights' magnitudes beyond which an interpolant is not trusted among stretched points; 1 is linear.
_WILD = 2.5
#: Points closer than this share of the typical spacing are one place.
_SAME_PLACE = 0.02
FEWEST_PLACES = 25
#: Spacings along y and z are told apart from this ratio on.
_ANISOTROPIC = 2.0
#: Below this ratio one look is enough to take them as equal.
_PLAINLY_ISOTROPIC = 1.25
_FINE_PERCENT = 20.0


@dataclass(frozen=True, eq=False)
class ScatteredScheme:
    """Interpolation matrix inside the data, gap filling outside."""

    y: Array
    z: Array
    usable: NDArray[np.bool_]
    row_index: NDArray[np.int64]
    grid: UniformGrid
    scale: tuple[float, float]
    _inside: NDArray[np.intp]
    _matrix: Any
    _gaps: GapFill
    _nearest_point: NDArray[np.intp]
    _places: NDArray[np.intp]
    mesh: bool = False

    def fields(self, values: Array) -> Array:
        """Grid values of shape (draws, n) to (draws, nz, ny)."""
        flat = np.zeros((values.shape[0], self.grid.nz * self.grid.ny))
        flat[:, self._inside] = (self._matrix @ np.ascontiguousarray(values.T)).T
        self._gaps.into(flat)
        return flat.reshape(-1, *self.grid.shape)

    def transposed(self, weights: Array) -> Array:
        """Weights of the points, (k, n), from weights of the cells, (k, nz, ny)."""
        flat = weights.reshape(weights.shape[0], -1).copy()
        self._gaps.back(flat)
        return np.asarray((self._matrix.T @ np.ascontiguousarray(flat[:, self._inside].T)).T)

    def operators(self) -> None:
        """Scattered gridding does not separate."""
        return

    def near(self, points: NDArray[np.bool_]) -> NDArray[np.bool_]:
        """Cells whose nearest point is among the given ones."""
        return points[self._nearest_point].reshape(self.grid.shape)

    def decimated(self, step: int, phase: tuple[int, int]) -> Gridding:
        """The same with every `step`-th place only."""
        kept = (self._places >= 0) & (self._places % step == phase[1])
        return make_scattered(self.y, self.z, kept, self.row_index, grid=self.grid, present=kept, mesh=self.mesh)


def make_scattered(
    y: Array,
    z: Array,
    usable: NDArray[np.bool_],
    row_index: NDArray[np.int64],
    *,
    spacing: tuple[float, float] | None = None,
    max_cells: int = 400_000,
    grid: UniformGrid | None = None,
    present: NDArray[np.bool_] | None = None,
    mesh: bool = False,
    degree: int = 3,
) -> Gridding:
    """Grid scattered points.

    Parameters
    ----------
    y, z : ndarray, shape (n,)
        Positions, m.
    usable : ndarray of bool, shape (n,)
        Points with a usable measurement.
    row_index : ndarray of int, shape (n,)
        Traverse row of each point.
    spacing : (float, float) or None
        Spacing of the grid, m; None for the points' own spacing where they stand closest.
    max_cells : int
        Most cells of the grid.
    grid : UniformGrid, optional
        The grid itself, instead of spacing and max_cells.
    present : ndarray of bool, shape (n,), optional
        Points that count at all, usable or not; all by default.
    mesh : bool
        Whether the points are those of a mesh that was made for the flow; else that is told from how they stand.
    degree : {3, 5}
        Power of the distance in the radial functions.

    Returns
    -------
    Gridding
        Cells outside the convex hull of the points, or further than two typical spacings from any, are filled and
        flagged as far from the data.

    Raises
    ------
    DataError
        If fewer than 25 places hold a usable point.
    """
    from scipy.spatial import Delaunay, cKDTree

    used = np.flatnonzero(usable)
    _require_places(used.size)
    scale, label, places = _places(y[used], z[used])
    _require_places(places.shape[0])
    scaled = places / scale
    net = Delaunay(scaled)
    spacings, reach = _spacings(net)
    if grid is None:
        fine = float(np.percentile(spacings, _FINE_PERCENT))
        grid = _grid(places, spacing or (fine * scale[0], fine * scale[1]), max_cells)
    zz, yy = np.meshgrid(grid.z, grid.y, indexing="ij")
    cells = np.column_stack([yy.ravel() / scale[0], zz.ravel() / scale[1]])
    simplex = net.find_simplex(cells, tol=1e-9)
    distance, nearest = cKDTree(scaled).query(cells)
    apart = distance / reach[nearest]
    levels = stretch_levels(scaled, _edges(net))
    level = levels[nearest]
    for each in np.unique(level[level != 0]):
        # Distances, and how far is far, in units of the spacings that hold about these cells.
        chosen = np.flatnonzero(level == each)
        squeezed = np.array([1.0, STEP ** float(each)])
        own_distance, own_nearest = cKDTree(scaled / squeezed).query(cells[chosen] / squeezed)
        apart[chosen] = own_distance / _spacings(net, squeezed)[1][own_nearest]
    inside = np.flatnonzero((simplex >= 0) & (apart <= FAR))
    if not inside.size:
        raise DataError("no cell of the grid lies among the points", remedy="give a finer spacing or more points")
    averaging = sparse.csr_array((1.0 / np.bincount(label)[label], (label, used)), shape=(places.shape[0], usable.size))
    # The flow is as stretched as a mesh made for it: what lies between two columns follows from both. Rows of a
    # traverse are as dense about a round vortex as elsewhere.
    mesh_like = mesh or bool(levels.any())
    stretch = np.ones(2) if mesh_like else np.array(scale) / min(scale)
    blocks, order = [], []
    for each in np.unique(level[inside]):
        part = np.flatnonzero(level[inside] == each)
        squeezed = np.array([1.0, STEP ** float(each)])
        tree = cKDTree(scaled / squeezed)
        block = _interpolation(scaled / squeezed, tree, cells[inside[part]] / squeezed, stretch=stretch, degree=degree)
        blocks.append(_tamed(block, net, cells[inside[part]], simplex[inside[part]]) if mesh_like else block)
        order.append(part)
    back = np.argsort(np.concatenate(order), kind="stable")
    matrix = sparse.vstack(blocks, format="csr")[back] @ averaging
    measured = np.zeros(cells.shape[0], dtype=bool)
    measured[inside] = True
    counted = np.arange(y.size) if present is None else np.flatnonzero(present)
    all_points = cKDTree(np.column_stack([y[counted] / scale[0], z[counted] / scale[1]]))
    nearest_point = counted[all_points.query(cells)[1]]
    flag = np.full(cells.shape[0], Flag.INTERPOLATED.value, dtype=np.int32)
    flag[~measured] |= Flag.FAR_FROM_DATA.value
    flag[~usable[nearest_point] & (apart > 0.5)] |= Flag.MISSING.value
    flag[np.bincount(label)[nearest] > 1] |= Flag.AVERAGED.value
    flag = flag.reshape(grid.shape)
    filled = (flag & (Flag.MISSING | Flag.FAR_FROM_DATA).value) != 0
    index = np.full(usable.size, -1, dtype=np.intp)
    index[used] = label
    scheme = ScatteredScheme(
        y=y,
        z=z,
        usable=usable,
        row_index=row_index,
        grid=grid,
        scale=scale,
        _inside=inside,
        _matrix=matrix.tocsr(),
        _gaps=make_gap_fill(measured.reshape(grid.shape), grid.y, grid.z),
        _nearest_point=nearest_point,
        _places=index,
        mesh=mesh,
    )
    typical = float(np.median(spacings))
    return Gridding(
        grid=grid,
        kind="scattered",
        flag=flag,
        filled=filled,
        filled_fraction=float(filled.mean()),
        raw_spacing=(typical * scale[0], typical * scale[1]),
        raw_shape=(1, places.shape[0]),
        row_index=row_index,
        scheme=scheme,
    )


def _require_places(number: int) -> None:
    if number < FEWEST_PLACES:
        raise DataError(
            f"the survey has usable measurements at {number} place{'' if number == 1 else 's'}",
            remedy=f"a plane needs at least 5 x 5 places ({FEWEST_PLACES})",
        )


def _places(y: Array, z: Array) -> tuple[tuple[float, float], NDArray[np.intp], Array]:
    """Distinct places, ordered by z then y, so that the order of the points plays no part.

    Returns the scale of y and z, the place of each point, and the places, shape (m, 2) as (y, z).
    """
    from scipy.sparse.csgraph import connected_components
    from scipy.spatial import Delaunay, cKDTree

    grain = 1e-9 * max(np.ptp(y), np.ptp(z))
    keys = np.column_stack([np.round((z - z.min()) / grain), np.round((y - y.min()) / grain)])
    _, first, label = np.unique(keys, axis=0, return_index=True, return_inverse=True)
    label = label.reshape(-1)
    distinct = np.column_stack([y[first], z[first]])
    _require_places(distinct.shape[0])
    scale = _scale(distinct)
    tree = cKDTree(distinct / scale)
    radius = _SAME_PLACE * float(np.median(_spacings(Delaunay(distinct / scale))[0]))
    pairs = tree.query_pairs(radius, output_type="ndarray")
    if not pairs.size:
        return scale, label, distinct
    links = sparse.csr_array((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(len(distinct),) * 2)
    _, group = connected_components(links, directed=False)
    group = group.astype(np.intp)
    size = np.bincount(group)
    merged = np.column_stack([np.bincount(group, weights=distinct[:, k]) / size for k in (0, 1)])
    return scale, group[label], merged


def _edges(mesh: Any) -> NDArray[np.intp]:
    corners = mesh.simplices
    pairs = np.concatenate([corners[:, [0, 1]], corners[:, [1, 2]], corners[:, [2, 0]]])
    low, high = pairs.min(axis=1).astype(np.int64), pairs.max(axis=1).astype(np.int64)
    # One number for each pair sorts far faster than pairs do.
    count = len(mesh.points)
    return np.column_stack(np.divmod(np.unique(low * count + high), count)).astype(np.intp)


def _scale(places: Array) -> tuple[float, float]:
    """Typical spacing along y and z: equal unless points stand much denser along one of them."""
    from scipy.spatial import Delaunay

    ratio = 1.0
    for _ in range(4):
        edges = _edges(Delaunay(places / (1.0, ratio)))
        delta = np.abs(places[edges[:, 0]] - places[edges[:, 1]])
        length = np.hypot(delta[:, 0], delta[:, 1] / ratio)
        short = length <= np.percentile(length, 90)
        mean = delta[short].mean(axis=0)
        ratio = float(mean[1] / mean[0])
        if 1 / _PLAINLY_ISOTROPIC < ratio < _PLAINLY_ISOTROPIC:
            break
    if 1 / _ANISOTROPIC < ratio < _ANISOTROPIC:
        ratio = 1.0
    typical = float(np.median(_spacings(Delaunay(places / (1.0, ratio)))[0]))
    return typical, typical * ratio


def _spacings(mesh: Any, squeezed: Array | float = 1.0) -> tuple[Array, Array]:
    """Spacing of the places about each place, and what may count as such at the edge of a hole.

    Lengths along y and z are divided by `squeezed` first.

    The first is the median length of the mesh edges that meet in a place; the second the lower quartile of these among
    the place and its neighbours, in which the long edges across a hole do not count.
    """
    edges = _edges(mesh)
    length = np.linalg.norm((mesh.points[edges[:, 0]] - mesh.points[edges[:, 1]]) / squeezed, axis=1)
    ends = np.concatenate([edges[:, 0], edges[:, 1]])
    median = _quantile_by_group(ends, np.concatenate([length, length]), 0.5)
    own = np.arange(median.size)
    others = np.concatenate([edges[:, 1], edges[:, 0], own])
    return median, _quantile_by_group(np.concatenate([ends, own]), median[others], 0.25)


def _quantile_by_group(group: NDArray[np.intp], values: Array, share: float) -> Array:
    """Quantile of the values of each group, groups numbered from 0; the lower of two candidates."""
    order = np.lexsort((values, group))
    count = np.bincount(group)
    start = np.concatenate([[0], np.cumsum(count)[:-1]])
    return np.asarray(values[order][start + (share * (count - 1)).astype(np.intp)], dtype=float)


def _grid(places: Array, spacing: tuple[float, float], max_cells: int) -> UniformGrid:
    extent = np.ptp(places, axis=0)
    counts = [math.ceil(length / step * (1 - 1e-9)) + 1 for length, step in zip(extent, spacing, strict=True)]
    excess = counts[0] * counts[1] / max_cells
    if excess > 1:
        counts = [int(count / math.sqrt(excess)) for count in counts]
    ny, nz = (max(count, 5) for count in counts)
    start = places.min(axis=0)
    return UniformGrid(
        float(start[0]), float(start[1]), float(extent[0]) / (ny - 1), float(extent[1]) / (nz - 1), ny, nz
    )


def _tamed(matrix: Any, mesh: Any, cells: Array, simplex: NDArray[np.intp]) -> Any:
    """Rows whose weights swing far beyond one, replaced by linear interpolation within the triangle of the cell."""
    wild = np.asarray(abs(matrix).sum(axis=1)).ravel() > _WILD
    if not wild.any():
        return matrix
    rows = np.flatnonzero(wild)
    transform = mesh.transform[simplex[rows]]
    first = np.einsum("cij,cj->ci", transform[:, :2], cells[rows] - transform[:, 2])
    weights = np.column_stack([first, 1.0 - first.sum(axis=1)])
    # Flat triangles have no such transform, or a wild one.
    weights = np.clip(np.where(np.isfinite(weights), weights, 1.0), 0.0, 1.0)
    weights /= weights.sum(axis=1, keepdims=True)
    corners = mesh.simplices[simplex[rows]]
    linear = sparse.csr_array((weights.ravel(), (np.repeat(rows, 3), corners.ravel())), shape=matrix.shape)
    return sparse.csr_array(sparse.diags_array((~wild).astype(float)) @ matrix + linear)


def _interpolation(places: Array, tree: Any, cells: Array, *, stretch: Array, degree: int) -> Any:
    """Interpolation from places to cells, sparse, shape (cells, places).

    Neighbours are the nearest in units of the spacing along each axis, so that they surround the cell; the radial
    functions count true distance, which `stretch` brings back.
    """
    k = min(_NEIGHBOURS, places.shape[0])
    distance, index = tree.query(cells, k)
    weights = np.empty((cells.shape[0], k))
    for begin in range(0, cells.shape[0], _CHUNK):
        part = slice(begin, begin + _CHUNK)
        reach = distance[part, -1][:, None, None]
        offset = (places[index[part]] - cells[part, None, :]) / reach
        found, missed = _local_weights(offset, offset * stretch, _POWERS, degree)
        poor = np.flatnonzero(missed > _MISSED)
        if poor.size:
            # Neighbours on one circle (the innermost of a polar traverse) or on few lines carry no cubic polynomial.
            found[poor] = _local_weights(offset[poor], offset[poor] * stretch, _LINEAR_POWERS, 3)[0]
        weights[part] = found
    rows = np.repeat(np.arange(cells.shape[0]), k)
    return sparse.csr_array((weights.ravel(), (rows, index.ravel())), shape=(cells.shape[0], places.shape[0]))


def _local_weights(offset: Array, true: Array, polynomials: list[tuple[int, int]], degree: int) -> tuple[Array, Array]:
    """Weights of the neighbours of each cell, shape (cells, k), and by how much they miss the polynomials there."""
    k, q = offset.shape[1], len(polynomials)
    system = np.zeros((offset.shape[0], k + q, k + q))
    system[:, :k, :k] = _power_of_length(
        true[:, :, None, 0] - true[:, None, :, 0], true[:, :, None, 1] - true[:, None, :, 1], degree
    )
    powers = np.stack([offset[..., 0] ** i * offset[..., 1] ** j for i, j in polynomials], axis=-1)
    system[:, :k, k:] = powers
    system[:, k:, :k] = powers.transpose(0, 2, 1)
    # Keeps the system solvable where the neighbours do not tell all polynomials apart.
    system[:, range(k, k + q), range(k, k + q)] = -1e-12
    right = np.zeros((offset.shape[0], k + q, 1))
    right[:, :k, 0] = _power_of_length(true[..., 0], true[..., 1], degree)
    right[:, k + polynomials.index((0, 0)), 0] = 1.0
    weights = np.linalg.solve(system, right)[:, :k, 0]
    missed: Array = np.abs(np.einsum("ckq,ck->cq", powers, weights) - right[:, k:, 0]).max(axis=1)
    return weights, missed


def _power_of_length(y: Array, z: Array, degree: int) -> Array:
    square = y * y + z * z
    power: Array = (square if degree == 3 else square**2) * np.sqrt(square)
    return power
