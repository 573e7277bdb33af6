"""The wake's trace, a curve through the vortex centres along the ridge of vorticity and loss, and the parts along it.

The trace of each island of the wake region runs from its port end to its starboard end; what hangs on it (a fin's or
tail's sheet inside the same region) is followed as branches. Small parts of about three cells' length are strung along
it, and every cell of the region belongs to exactly one part. Nothing that is integrated depends on where the cuts fall.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage, sparse, spatial
from scipy.sparse import csgraph

from wakeledger.core.grid import Array, UniformGrid

Mask = NDArray[np.bool_]
Index = NDArray[np.int64]

#: Standard deviation of the smoothing, in cells.
_SMOOTHING = 1.5
#: A vortex centre is a peak of the smoothed vorticity above this fraction of the highest.
_CENTRE = 0.15
#: Length of a part along the trace, and distance from the trace that makes a centre a branch of its own, in cells.
_PART = 3.0
_BRANCH = 6.0
_MOST_BRANCHES = 8
#: Width of the neighbourhood in which a centre is the highest, and extent below which a lone vortex is one part, cells.
_NEIGHBOURHOOD, _COMPACT = 9, 12.0
#: Share of the total strength below which an island has no trace of its own.
_ISLAND_SHARE = 0.01
#: Weight of the loss, and of the distance from the region's boundary, against the vorticity when the ridge is followed.
_LOSS_WEIGHT, _CENTRE_WEIGHT = 0.3, 0.15


@dataclass(frozen=True, eq=False)
class WakeTrace:
    """Parts of the wake in order along its chains.

    Attributes
    ----------
    y, z : ndarray, shape (parts,)
        Points of the trace, m.
    arc_length : ndarray, shape (parts,)
        Along each chain from its port end, m.
    chain : ndarray of int, shape (parts,)
        Which chain each part belongs to; the parts of a chain are contiguous.
    part : ndarray of int, shape (nz − 1, ny − 1)
        Part of each cell, −1 outside the wake.
    joint : tuple of (int, bool)
        For each chain the part on which it hangs (−1 for a chain of its own) and whether its first part is the one
        that hangs there.
    """

    y: Array
    z: Array
    arc_length: Array
    chain: Index
    part: Index
    joint: tuple[tuple[int, bool], ...]

    @property
    def n(self) -> int:
        """Number of parts."""
        return int(self.y.size)

    def sums(self, cell_values: Array) -> Array:
        """Sum of a quantity given per cell, shape (nz − 1, ny − 1), over each part."""
        inside = self.part >= 0
        sums: Array = np.bincount(self.part[inside], weights=cell_values[inside], minlength=self.n).astype(np.float64)
        return sums

    def bound_circulation(self, circulation: Array) -> Array:
        """Bound circulation at the cut behind each part.

        Parameters
        ----------
        circulation : ndarray, shape (parts,)
            Γ of each part, m²/s.

        Returns
        -------
        ndarray, shape (parts,)
            −(circulation accumulated from the port end), m²/s, at the cut towards the next part; branches are counted
            from their free tip. The last value of a chain of its own is minus its net circulation.
        """
        gathered = circulation.copy()
        bound = np.empty(self.n)
        for chain in reversed(range(len(self.joint))):
            parts = np.flatnonzero(self.chain == chain)
            on, by_first = self.joint[chain]
            accumulated = np.cumsum(gathered[parts])
            bound[parts] = accumulated[-1] - accumulated if by_first else -accumulated
            if on >= 0:
                gathered[on] += accumulated[-1]
        return bound


def wake_trace(circulation: Array, cells: Mask, grid: UniformGrid, *, loss: Array | None = None) -> WakeTrace:
    """Find the trace and cut the wake into parts.

    Parameters
    ----------
    circulation : ndarray, shape (nz − 1, ny − 1)
        Circulation of each cell, m²/s.
    cells : ndarray of bool, shape (nz − 1, ny − 1)
        Cells of the wake region, at least one.
    grid : UniformGrid
        The grid.
    loss : ndarray, shape (nz, ny), optional
        Total-pressure loss, Pa; helps where the vorticity changes sign along the trace.

    Returns
    -------
    WakeTrace

    Raises
    ------
    ValueError
        If no cell belongs to the wake.
    """
    if not cells.any():
        raise ValueError("the wake region has no cell, so it has no trace")
    vorticity = np.abs(ndimage.gaussian_filter(np.where(cells, circulation, 0.0), _SMOOTHING, mode="constant"))
    cost = _cost(vorticity, cells, grid, loss)
    labels, count = ndimage.label(cells, structure=np.ones((3, 3)))
    strength = ndimage.sum_labels(vorticity, labels, np.arange(1, count + 1))
    chains: list[tuple[Array, int, bool]] = []
    island_of_chain: list[int] = []
    first_part = 0
    # A perfectly quiet wake still has an island to draw.
    for island in np.flatnonzero(strength >= _ISLAND_SHARE * strength.sum()) + 1:
        for points, on, by_first in _chains(vorticity, cost, labels == island, grid, first_part):
            chains.append((points, on, by_first))
            island_of_chain.append(int(island))
            first_part += len(points)
    points = np.concatenate([points for points, _, _ in chains])
    sizes = [len(points) for points, _, _ in chains]
    return WakeTrace(
        y=points[:, 0],
        z=points[:, 1],
        arc_length=np.concatenate([_arc_length(points) for points, _, _ in chains]),
        chain=np.repeat(np.arange(len(chains)), sizes),
        part=_nearest_part(points, np.repeat(island_of_chain, sizes), labels, grid),
        joint=tuple((on, by_first) for _, on, by_first in chains),
    )


def _cost(vorticity: Array, cells: Mask, grid: UniformGrid, loss: Array | None) -> Array:
    """Cost per unit length of following the trace through a cell: low on the ridge."""
    depth = ndimage.distance_transform_edt(np.pad(cells, 1), sampling=(grid.dz, grid.dy))[1:-1, 1:-1]
    quality = vorticity / max(float(vorticity.max()), np.finfo(float).tiny)
    if loss is not None:
        corners = (loss[1:, 1:] + loss[1:, :-1] + loss[:-1, 1:] + loss[:-1, :-1]) / 4
        smooth = np.clip(ndimage.gaussian_filter(np.where(cells, corners, 0.0), _SMOOTHING), 0.0, None)
        if smooth.max() > 0:
            quality = quality + _LOSS_WEIGHT * smooth / smooth.max()
    cost: Array = (0.02 + np.sqrt(quality) + _CENTRE_WEIGHT * depth / depth.max()) ** -2.0
    return cost


def _chains(
    vorticity: Array, cost: Array, island: Mask, grid: UniformGrid, first_part: int
) -> list[tuple[Array, int, bool]]:
    """Points of each chain of one island, the part it hangs on and whether by its first part."""
    rows, columns = np.nonzero(island)
    place = np.stack([grid.y0 + grid.dy * (columns + 0.5), grid.z0 + grid.dz * (rows + 0.5)], axis=1)
    by_length = _graph(island, np.ones(island.shape), grid)
    by_cost = _graph(island, cost, grid)
    centres = _centres(vorticity, island, rows, columns)
    strongest = centres[np.argmax(vorticity[rows, columns][centres])]
    one = centres[np.argmax(_distances(by_length, strongest)[centres])]
    from_one = _distances(by_length, one)[centres]
    other = centres[np.argmax(from_one)]
    if from_one.max() < _COMPACT * max(grid.dy, grid.dz) and one != strongest != other:
        one = other = strongest
    if (place[one, 0], place[one, 1]) > (place[other, 0], place[other, 1]):
        one, other = other, one
    step = _PART * max(grid.dy, grid.dz)
    path = _path(by_cost, np.array([one]), int(other))
    trunk = _strung(place[path], step)
    found: list[tuple[Array, int, bool]] = [(trunk, -1, False)]
    on_trace = set(path.tolist())
    for _ in range(_MOST_BRANCHES):
        tree = spatial.cKDTree(place[sorted(on_trace)])
        away = tree.query(place[centres])[0]
        tip = int(centres[np.argmax(away)])
        if away.max() < _BRANCH * max(grid.dy, grid.dz):
            break
        path = _path(by_cost, np.array(sorted(on_trace)), tip)
        # The junction itself belongs to the chain it lies on.
        outside = path[1:] if len(path) > 1 else path
        points = _strung(place[outside], step)
        known = np.concatenate([points for points, _, _ in found])
        joint = first_part + int(np.argmin(np.hypot(*(known - place[path[0]]).T)))
        from_junction = (points[0, 0], points[0, 1]) <= (points[-1, 0], points[-1, 1])
        found.append((points if from_junction else points[::-1], joint, from_junction))
        on_trace |= set(path.tolist())
    return found


def _centres(vorticity: Array, island: Mask, rows: Index, columns: Index) -> Index:
    """Nodes of the vortex centres; all strong cells where there is but one centre."""
    inside = np.where(island, vorticity, 0.0)
    strong = inside >= _CENTRE * inside.max()
    peak = strong & island & (inside == ndimage.maximum_filter(inside, size=_NEIGHBOURHOOD))
    nodes = np.flatnonzero(peak[rows, columns])
    if nodes.size < 2:
        nodes = np.flatnonzero((strong & island)[rows, columns])
    return nodes


def _graph(island: Mask, cost: Array, grid: UniformGrid) -> sparse.csr_array:
    """Neighbouring cells of an island joined by length times mean cost."""
    number = np.full(island.shape, -1)
    number[island] = np.arange(np.count_nonzero(island))
    first, second, weight = [], [], []
    nz, ny = island.shape
    for dz, dy in ((0, 1), (1, 0), (1, 1), (1, -1)):
        here = np.s_[: nz - dz, max(0, -dy) : ny - max(0, dy)]
        there = np.s_[dz:, max(0, dy) : ny + min(0, dy)]
        both = island[here] & island[there]
        first.append(number[here][both])
        second.append(number[there][both])
        weight.append(np.hypot(dz * grid.dz, dy * grid.dy) * (cost[here][both] + cost[there][both]) / 2)
    n = int(np.count_nonzero(island))
    joined = (np.concatenate(weight), (np.concatenate(first), np.concatenate(second)))
    return sparse.csr_array(joined, shape=(n, n))


def _distances(graph: sparse.csr_array, node: int) -> Array:
    distances: Array = csgraph.dijkstra(graph, directed=False, indices=int(node))
    return distances


def _path(graph: sparse.csr_array, sources: Index, target: int) -> Index:
    """Nodes of the cheapest path from any source to the target, both included."""
    _, before, _ = csgraph.dijkstra(graph, directed=False, indices=sources, min_only=True, return_predecessors=True)
    nodes = [target]
    while before[nodes[-1]] >= 0:
        nodes.append(int(before[nodes[-1]]))
    return np.array(nodes[::-1], dtype=np.int64)


def _strung(points: Array, step: float) -> Array:
    """A staircase path smoothed, its ends kept, and points strung along it about `step` apart."""
    if len(points) < 3:
        return points
    smooth = ndimage.gaussian_filter1d(points, 2.0, axis=0, mode="nearest")
    smooth[[0, -1]] = points[[0, -1]]
    along = _arc_length(smooth)
    count = max(2, round(float(along[-1]) / step) + 1)
    at = np.linspace(0.0, along[-1], count)
    return np.stack([np.interp(at, along, smooth[:, 0]), np.interp(at, along, smooth[:, 1])], axis=1)


def _arc_length(points: Array) -> Array:
    return np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(points, axis=0).T))])


def _nearest_part(points: Array, island: Index, labels: Index, grid: UniformGrid) -> Index:
    """Part of each cell: the nearest point of the trace on the cell's own island, or of any where it has none."""
    part = np.full(labels.shape, -1, dtype=np.int64)
    for label in range(1, int(labels.max()) + 1):
        own = np.flatnonzero(island == label)
        candidates = own if own.size else np.arange(len(points))
        rows, columns = np.nonzero(labels == label)
        place = np.stack([grid.y0 + grid.dy * (columns + 0.5), grid.z0 + grid.dz * (rows + 0.5)], axis=1)
        part[rows, columns] = candidates[spatial.cKDTree(points[candidates]).query(place)[1]]
    return part
