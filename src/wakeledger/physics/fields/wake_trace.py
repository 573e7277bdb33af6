"""The wake's trace: chains of parts along the ridges of vorticity and loss, from vortex to vortex.

Each sheet that stands out of the noise has a chain, from its port to its starboard end; what hangs on it (a fin's
sheet, say) is followed as branches. Where neither vorticity nor loss can be told from the noise there is no trace, and
what goes on beyond such a gap is a chain that hangs on the first. Parts are about three cells long, and every cell of
the region belongs to exactly one. Nothing that is integrated depends on where the cuts fall.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage, sparse, spatial
from scipy.sparse import csgraph

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.wake_ridge import Ridges, find_ridges

Mask = NDArray[np.bool_]
Index = NDArray[np.int64]

#: Length of a part along the trace, and standard deviation of the smoothing along it, in cells.
_PART, _SMOOTHING = 3.0, 1.0
#: Least length of a branch, in cells, and the most that one ridge has.
_BRANCH = 6.0
_MOST_BRANCHES = 8
#: Radius in which a summit is the highest point, in cells.
_SUMMIT = 4.0
#: Distance between the ends of a ridge over its length below which it is closed, and the least length of such, cells.
_CLOSED, _RING = 0.15, 30.0
#: Distance over which the ends of a closed ridge are joined again after it was cut there, in cells.
_GAP = 9.0
#: How far the slopes of a vortex reach beyond those of a Gaussian of the same curvature, as a factor.
_SLOPE = 1.4
#: Net circulation of a ridge over its gross from which it must go on somewhere beyond a gap.
_UNBALANCED = 0.25


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
        For each chain the part of an earlier chain on which it hangs (−1 for a chain of its own), and whether its
        first part is the one that hangs there: branches, and the other half of a sheet beyond a gap in the trace.
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
            −(circulation accumulated from the port end), m²/s, at the cut towards the next part; hanging chains are
            counted from their free end. The last value of a chain of its own that none continues is minus its net
            circulation.
        """
        gathered = circulation.copy()
        bound, beyond = np.empty(self.n), np.zeros(self.n)
        last = np.append(np.diff(self.chain) != 0, True)
        for chain in reversed(range(len(self.joint))):
            parts = np.flatnonzero(self.chain == chain)
            on, by_first = self.joint[chain]
            accumulated = np.cumsum(gathered[parts])
            bound[parts] = accumulated[-1] - accumulated if by_first else -accumulated
            if on >= 0:
                gathered[on] += accumulated[-1]
                if by_first and last[on]:
                    beyond[on] += accumulated[-1]
        return bound + beyond


def wake_trace(circulation: Array, cells: Mask, grid: UniformGrid, *, loss: Array | None = None) -> WakeTrace:
    """Find the trace and cut the wake into parts.

    Parameters
    ----------
    circulation : ndarray, shape (nz − 1, ny − 1)
        Circulation of each cell, m²/s, outside the wake too, where the noise is read.
    cells : ndarray of bool, shape (nz − 1, ny − 1)
        Cells of the wake region, at least one.
    grid : UniformGrid
        The grid.
    loss : ndarray, shape (nz, ny), optional
        Total-pressure loss, Pa; shows the sheet where its vorticity changes sign.

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
    cell = max(grid.dy, grid.dz)
    pieces = _pieces(find_ridges(circulation, cells, grid, loss=loss), cell)
    if not pieces:
        # Even a wake without a ridge has a place.
        row, column = np.unravel_index(np.argmax(np.where(cells, np.abs(circulation), -1.0)), cells.shape)
        pieces = [_Piece(np.array([[grid.y0 + grid.dy * (column + 0.5), grid.z0 + grid.dz * (row + 0.5)]]))]
    points = np.concatenate([piece.points for piece in pieces])
    chain = np.repeat(np.arange(len(pieces)), [len(piece.points) for piece in pieces])
    part = _nearest_part(points, cells, grid)
    trace = WakeTrace(
        y=points[:, 0],
        z=points[:, 1],
        arc_length=np.concatenate([_arc_length(piece.points) for piece in pieces]),
        chain=chain,
        part=part,
        joint=tuple((piece.on, piece.by_first) for piece in pieces),
    )
    return replace(trace, joint=_continued(trace, trace.sums(circulation)))


@dataclass(frozen=True, eq=False)
class _Piece:
    """One chain: its points from port to starboard, the part it hangs on and whether by its first."""

    points: Array
    on: int = -1
    by_first: bool = False


def _pieces(ridges: Ridges, cell: float) -> list[_Piece]:
    """The chain along each ridge, the strongest first, each followed by its branches."""
    place = ridges.place
    free = _ends(ridges, cell)
    found: list[_Piece] = []
    for number in range(int(ridges.ridge.max(initial=-1)) + 1):
        own = free & (ridges.ridge == number)
        if not own.any():
            continue
        first_part = sum(len(piece.points) for piece in found)
        one = _farthest(ridges.tree, int(np.argmax(own)), own)
        other = _farthest(ridges.tree, one, own)
        on_trace = _from_summit(ridges, _path(ridges.tree, np.array([one]), other), cell)
        on_trace = _from_summit(ridges, on_trace[::-1], cell)
        free &= ~_on_slope(ridges, on_trace, cell)
        own &= free
        chains = _trunk(place[on_trace], cell, first_part)
        for _ in range(_MOST_BRANCHES):
            away = np.where(own, spatial.cKDTree(place[on_trace]).query(place)[0], 0.0)
            tip = int(np.argmax(away))
            if away[tip] < _BRANCH * cell:
                break
            arm = _path(ridges.tree, on_trace, tip)
            # The junction itself belongs to the chain it lies on.
            branch = _from_summit(ridges, arm[:0:-1], cell)
            own[tip] = False
            free &= ~_on_slope(ridges, branch, cell)
            own &= free
            if away[branch[0]] < _BRANCH * cell:
                continue
            points = place[branch[::-1]]
            known = np.concatenate([piece.points for piece in chains])
            on = first_part + int(np.argmin(np.hypot(*(known - place[arm[0]]).T)))
            by_first = tuple(points[0]) <= tuple(points[-1])
            chains.append(_Piece(_strung(points if by_first else points[::-1], cell), on, by_first))
            on_trace = np.concatenate([on_trace, branch])
        found += chains
    return found


def _ends(ridges: Ridges, cell: float) -> Mask:
    """Points at which a trace may end: the summits of vortices and what does not lie on their slopes."""
    place, height = ridges.place, ridges.height
    kept = ridges.ridge >= 0
    if not kept.any():
        return kept
    first, second = spatial.cKDTree(place).query_pairs(_SUMMIT * cell, output_type="ndarray").T
    highest = height.copy()
    np.maximum.at(highest, first, height[second])
    np.maximum.at(highest, second, height[first])
    return kept & ~_on_slope(ridges, np.flatnonzero(kept & (height >= highest)), cell)


def _on_slope(ridges: Ridges, summits: Index, cell: float) -> Mask:
    """Points that lie on the slope of any of the summits: part of a vortex and not of a sheet of its own."""
    slope = np.zeros(len(ridges.place), dtype=bool)
    for summit in summits:
        fall = ridges.height[summit] - ridges.height
        apart = ((ridges.place - ridges.place[summit]) ** 2).sum(axis=1)
        slope |= (fall > 0) & (apart <= (_SLOPE * ridges.reach[summit]) ** 2 * fall + cell**2)
    return slope


def _from_summit(ridges: Ridges, path: Index, cell: float) -> Index:
    """The path without what lies on the far slope of the vortex it begins in."""
    place, height = ridges.place[path], ridges.height[path]
    fall = np.clip(height - height[:, None], 0.0, None)
    apart = ((place - place[:, None]) ** 2).sum(axis=-1)
    slope = apart <= (_SLOPE * ridges.reach[path]) ** 2 * fall + cell**2
    summit = np.array([slope[:k, k].all() for k in range(len(path))])
    return path[np.argmax(np.where(summit, ridges.vorticity[path], -1.0)) :]


def _trunk(points: Array, cell: float, first_part: int) -> list[_Piece]:
    """The chain along the longest way through a ridge; two where the ridge is closed, cut at its sides."""
    if tuple(points[0]) > tuple(points[-1]):
        points = points[::-1]
    along = _arc_length(points)
    gap = float(np.hypot(*(points[-1] - points[0])))
    if gap > _CLOSED * along[-1] or along[-1] < _RING * cell:
        return [_Piece(_strung(points, cell))]
    one, other = sorted(_side(points * (sign, 1), cell) for sign in (-1, 1))
    across = points[one : other + 1]
    rest = [points[other:], points[: one + 1]]
    if gap <= _GAP * cell:
        rest = [np.concatenate(rest)]
    if points[one, 0] > points[other, 0]:
        across = across[::-1]
    else:
        rest = [way[::-1] for way in rest[::-1]]
    strung = [_strung(way, cell) for way in (across, *rest) if len(way) > 1 and _arc_length(way)[-1] > _PART * cell]
    pieces = [_Piece(way) for way in strung]
    if len(pieces) == 3:
        # The second surface is whole but for the gap where the ridge was cut.
        pieces[2] = _Piece(strung[2], first_part + len(strung[0]) + len(strung[1]) - 1, True)
    return pieces


def _side(points: Array, cell: float) -> int:
    """The point half way up the starboard side of a closed ridge."""
    side = np.flatnonzero(points[:, 0] >= points[:, 0].max() - 2 * cell)
    return int(side[np.argmin(np.abs(points[side, 1] - points[side, 1].mean()))])


def _farthest(tree: sparse.csr_array, node: int, among: Mask) -> int:
    """The node farthest from one along its tree."""
    distance = csgraph.dijkstra(tree, directed=False, indices=node)
    return int(np.argmax(np.where(among, distance, -1.0)))


def _path(tree: sparse.csr_array, sources: Index, node: int) -> Index:
    """Nodes of the way along the tree to one from the nearest of the sources."""
    _, before, _ = csgraph.dijkstra(tree, directed=False, indices=sources, min_only=True, return_predecessors=True)
    nodes = [node]
    while before[nodes[-1]] >= 0:
        nodes.append(int(before[nodes[-1]]))
    return np.array(nodes[::-1], dtype=np.int64)


def _continued(trace: WakeTrace, circulation: Array) -> tuple[tuple[int, bool], ...]:
    """Joints, with each ridge that has circulation left over hung on the nearest part of a stronger one."""
    joints = list(trace.joint)
    place = np.stack([trace.y, trace.z], axis=1)
    trunks = [chain for chain, (on, _) in enumerate(joints) if on < 0]
    for start, stop in list(pairwise([*trunks, len(joints)]))[1:]:
        own = circulation[(trace.chain >= start) & (trace.chain < stop)]
        if abs(own.sum()) < _UNBALANCED * np.abs(own).sum():
            continue
        earlier = np.flatnonzero(trace.chain < start)
        ends = np.flatnonzero(trace.chain == start)[[0, -1]]
        apart = np.hypot(*np.moveaxis(place[ends][:, None] - place[earlier], -1, 0))
        on = int(earlier[np.argmin(apart.min(axis=0))])
        joints[start] = on, bool(trace.y[on] <= trace.y[ends].mean())
    return tuple(joints)


def _strung(points: Array, cell: float) -> Array:
    """Points along a path smoothed with its ends kept, about a part's length apart."""
    along = _arc_length(points)
    if along[-1] < _PART * cell:
        return np.asarray(points.mean(axis=0, keepdims=True))

    def evenly(points: Array, along: Array, step: float) -> Array:
        at = np.linspace(0.0, along[-1], max(2, round(float(along[-1]) / step) + 1))
        return np.stack([np.interp(at, along, points[:, k]) for k in (0, 1)], axis=1)

    fine = evenly(points, along, cell / 2)
    width = min(int(8 * _SMOOTHING), len(fine) - 1)
    extended = np.pad(fine, ((width, width), (0, 0)), mode="reflect", reflect_type="odd")
    smooth = ndimage.gaussian_filter1d(extended, 2 * _SMOOTHING, axis=0)[width:-width]
    return evenly(smooth, _arc_length(smooth), _PART * cell)


def _arc_length(points: Array) -> Array:
    return np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(points, axis=0).T))])


def _nearest_part(points: Array, cells: Mask, grid: UniformGrid) -> Index:
    """Part of each cell: the nearest point of the trace on the cell's own island, or of any where it has none."""
    labels, count = ndimage.label(cells, structure=np.ones((3, 3)))
    row = np.clip(((points[:, 1] - grid.z0) / grid.dz).astype(int), 0, cells.shape[0] - 1)
    column = np.clip(((points[:, 0] - grid.y0) / grid.dy).astype(int), 0, cells.shape[1] - 1)
    island = labels[row, column]
    part = np.full(cells.shape, -1, dtype=np.int64)
    for label in range(1, count + 1):
        own = np.flatnonzero(island == label)
        candidates = own if own.size else np.arange(len(points))
        rows, columns = np.nonzero(labels == label)
        place = np.stack([grid.y0 + grid.dy * (columns + 0.5), grid.z0 + grid.dz * (rows + 0.5)], axis=1)
        part[rows, columns] = candidates[spatial.cKDTree(points[candidates]).query(place)[1]]
    return part
