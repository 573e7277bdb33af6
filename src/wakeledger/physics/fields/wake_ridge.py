"""Ridges of the wake: where smoothed loss and vorticity, each measured by its own noise, are highest across the wake.

A point lies on a ridge where the field has its maximum across the direction of its strongest downward curvature; the
maximum is found between the cells from the local second-order expansion. Steger, IEEE Trans. PAMI 20 (1998), for the
construction.
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

#: Standard deviation of the smoothing of the fields, and of the sum of their squares, in cells.
_SMOOTHING, _CREASE = 1.25, 1.25
#: Standard deviations by which a ridge stands above the noise, by which its highest point does, and which soften the
#: logarithm near zero.
_LEVEL, _SEED, _SOFT = 4.0, 8.0, 0.5
#: The level for data without noise, as a fraction of the peak.
_VORTICITY_FLOOR, _LOSS_FLOOR = 2e-3, 4e-3
#: A median of magnitudes of normal noise is 0.6745 standard deviations, their 30 % quantile 0.3853.
_MEDIAN_NORMAL, _QUANTILE, _QUANTILE_NORMAL = 0.674490, 0.30, 0.385320
#: Share of the window outside the wake from which noise is read there rather than from the whole window.
_OUTER_SHARE = 0.05
#: How far from a cell's centre the maximum may lie, and the longest step from one point of a ridge to the next, cells.
_OFFSET, _STEP = 0.6, 8.0
#: Curvature along a ridge, as a fraction of that across, from which it is a round hill, and with the other sign from
#: which it is the pass between two hills.
_ROUND, _PASS = 0.5, 0.4
#: On a step from one point of a ridge to the next the field falls below both by no more than this many standard
#: deviations of its noise and this fraction.
_DIP, _DIP_SHARE = 1.0, 0.1
#: Length of such a step, in cells, per standard deviation by which the lower end stands out of the noise.
_LEAP = 0.65
#: Cosine of the angle within which a step across a change of sign follows the ridge.
_STRAIGHT = 0.9
#: Least share of the whole strength that a ridge has, and least number of points as high as its highest must be to
#: which it amounts.
_SHARE, _BODY = 0.003, 6.0


@dataclass(frozen=True, eq=False)
class Ridges:
    """Points on ridges and the trees that join them.

    Attributes
    ----------
    place : ndarray, shape (points, 2)
        (y, z), m.
    height : ndarray, shape (points,)
        ½ln(R² + ¼), R the root of the smoothed sum of the squares of loss and vorticity, each over its noise.
    vorticity : ndarray, shape (points,)
        Magnitude of the smoothed vorticity over its noise.
    reach : ndarray, shape (points,)
        Width a of the Gaussian exp(−n²/a²) that has the curvature of the field across the ridge, m.
    tree : csr_array, shape (points, points)
        Length of the steps between neighbours, m, stored once each; every ridge is a tree, a closed one being cut
        where it is weakest.
    ridge : ndarray of int, shape (points,)
        Which ridge each point belongs to, the strongest first; −1 for a ridge too weak to be told from noise.
    """

    place: Array
    height: Array
    vorticity: Array
    reach: Array
    tree: sparse.csr_array
    ridge: Index


def find_ridges(circulation: Array, cells: Mask, grid: UniformGrid, *, loss: Array | None = None) -> Ridges:
    """Find the ridges of a wake.

    Parameters
    ----------
    circulation : ndarray, shape (nz − 1, ny − 1)
        Circulation of each cell, inside and outside the wake, m²/s.
    cells : ndarray of bool, shape (nz − 1, ny − 1)
        Cells of the wake region.
    grid : UniformGrid
        The grid.
    loss : ndarray, shape (nz, ny), optional
        Total-pressure loss, Pa, finite.

    Returns
    -------
    Ridges
    """
    vorticity = _over_noise(circulation, cells, _VORTICITY_FLOOR)
    deficit = np.zeros(cells.shape)
    if loss is not None:
        corners = (loss[1:, 1:] + loss[1:, :-1] + loss[:-1, 1:] + loss[:-1, :-1]) / 4
        if not cells.all():
            corners = corners - np.median(corners[~cells])
        deficit = np.clip(_over_noise(corners, cells, _LOSS_FLOOR), 0.0, None)
    # Smoothed once more, so that the field has no crease where the vorticity changes sign along a sheet.
    strength = np.sqrt(ndimage.gaussian_filter(vorticity**2 + deficit**2, _CREASE, mode="nearest"))
    crests = _crests(np.log(np.hypot(strength, _SOFT)), cells & (strength > _LEVEL), grid)
    tree = _tree(crests, strength, vorticity, deficit, grid)
    height = strength[crests.rows, crests.columns]
    count, label = csgraph.connected_components(tree, directed=False)
    total = np.bincount(label, weights=height, minlength=count)
    peak = np.zeros(count)
    np.maximum.at(peak, label, height)
    kept = (peak >= _SEED) & (total >= max(_BODY * _SEED, _SHARE * total.sum()))
    rank = np.full(count, -1)
    rank[np.argsort(-total * kept)[: np.count_nonzero(kept)]] = np.arange(np.count_nonzero(kept))
    return Ridges(
        place=crests.place,
        height=np.log(np.hypot(height, _SOFT)),
        vorticity=np.abs(vorticity[crests.rows, crests.columns]),
        reach=np.sqrt(2 / crests.curvature),
        tree=tree,
        ridge=rank[label],
    )


def _over_noise(field: Array, cells: Mask, floor: float) -> Array:
    """A field smoothed, over the noise that is left in it."""
    smooth = ndimage.gaussian_filter(field, _SMOOTHING, mode="nearest")
    magnitude = np.abs(smooth)
    if np.count_nonzero(~cells) >= _OUTER_SHARE * cells.size:
        noise = float(np.median(magnitude[~cells])) / _MEDIAN_NORMAL
    else:
        noise = float(np.quantile(magnitude, _QUANTILE)) / _QUANTILE_NORMAL
    noise = max(noise, floor * float(magnitude.max()) / _LEVEL, np.finfo(float).tiny)
    over: Array = smooth / noise
    return over


@dataclass(frozen=True, eq=False)
class _Crests:
    """Points with a maximum across the ridge: their cells, places, the ridge's direction, curvature and roundness."""

    rows: Index
    columns: Index
    place: Array
    tangent: Array
    curvature: Array
    round_: Mask


def _crests(height: Array, where: Mask, grid: UniformGrid) -> _Crests:
    """The points of all ridges, one for each cell that holds one."""
    rows, columns = np.nonzero(where)
    slope_z, slope_y = np.gradient(height, grid.dz, axis=0), np.gradient(height, grid.dy, axis=1)
    yy, zz = np.gradient(slope_y, grid.dy, axis=1), np.gradient(slope_z, grid.dz, axis=0)
    zy = np.gradient(slope_z, grid.dy, axis=1)
    slope_y, slope_z, yy, zy, zz = (np.asarray(d)[rows, columns] for d in (slope_y, slope_z, yy, zy, zz))
    gradient = np.stack([slope_y, slope_z], axis=1)
    # Principal axes of the curvature, the stronger downward one across the ridge.
    half, mean = (yy - zz) / 2, (yy + zz) / 2
    difference = np.hypot(half, zy)
    curvature, along = difference - mean, -difference - mean
    angle = np.arctan2(zy, half) / 2
    tangent = np.stack([np.cos(angle), np.sin(angle)], axis=1)
    normal = np.stack([-tangent[:, 1], tangent[:, 0]], axis=1)
    nearest = _OFFSET * np.array([grid.dy, grid.dz])

    def step(direction: Array, curvature: Array) -> Array:
        down = np.where(curvature > 0, curvature, np.nan)
        ahead: Array = ((gradient * direction).sum(axis=1) / down)[:, None] * direction
        return ahead

    offset = step(normal, curvature)
    crest = (np.abs(offset) <= nearest).all(axis=1)
    # The slopes of a round vortex curve alike in both directions; only its summit belongs to a ridge.
    round_ = along > _ROUND * curvature
    summit = (np.abs(offset + step(tangent, along)) <= 2 * nearest).all(axis=1)
    crest &= (~round_ | summit) & (along > -_PASS * curvature)
    centre = np.stack([grid.y0 + grid.dy * (columns + 0.5), grid.z0 + grid.dz * (rows + 0.5)], axis=1)
    return _Crests(
        rows[crest], columns[crest], (centre + offset)[crest], tangent[crest], curvature[crest], round_[crest]
    )


def _tree(crests: _Crests, strength: Array, vorticity: Array, deficit: Array, grid: UniformGrid) -> sparse.csr_array:
    """Points joined to their neighbours so that the weakest of any closed way is left out."""
    place = crests.place
    n = len(place)
    if n == 0:
        return sparse.csr_array((0, 0))
    cell = max(grid.dy, grid.dz)
    pairs = spatial.cKDTree(place).query_pairs(_STEP * cell, output_type="ndarray")
    first, second = pairs[:, 0], pairs[:, 1]
    way = place[second] - place[first]
    length = np.hypot(*way.T)
    own = strength[crests.rows, crests.columns]
    positive = vorticity[crests.rows, crests.columns] > 0
    lower = np.minimum(own[first], own[second])
    # Where the vorticity changes sign only the loss goes on, or the sheet in its own direction.
    changes = positive[first] != positive[second]
    inner = np.array([0.25, 0.5, 0.75])[:, None, None]
    between = (place[first] + way * inner - (grid.y0, grid.z0)) / (grid.dy, grid.dz) - 0.5
    between = np.moveaxis(between[..., ::-1], -1, 0)
    dip = np.empty(len(first))
    for some, field in ((~changes, strength), (changes, deficit)):
        dip[some] = ndimage.map_coordinates(field, between[..., some], order=1, mode="nearest").min(axis=0)
    joined = (dip >= (1 - _DIP_SHARE) * lower - _DIP) & (length <= _LEAP * cell * lower)
    for end in (first, second):
        changes &= ~crests.round_[end] & (np.abs((way * crests.tangent[end]).sum(axis=1)) >= _STRAIGHT * length)
    joined |= changes
    weight = (1 + (length / cell) ** 2) / lower
    graph = sparse.csr_array((weight[joined], (first[joined], second[joined])), shape=(n, n))
    forest = csgraph.minimum_spanning_tree(graph).tocoo()
    length = np.hypot(*(place[forest.row] - place[forest.col]).T)
    # Two points in one place still are neighbours.
    return sparse.csr_array((np.maximum(length, 1e-6 * cell), (forest.row, forest.col)), shape=(n, n))
