"""Polygons of a plane as bare arrays: their centres and areas, and the triangles they fall into."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array

Indices = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Polygons:
    """Polygons over points.

    Attributes
    ----------
    corners : ndarray of int, shape (k,)
        Points of the first polygon in order around it, then of the second, and so on.
    offsets : ndarray of int, shape (m + 1,)
        Where each polygon begins in `corners`, and where the last one ends.
    """

    corners: Indices
    offsets: Indices

    @property
    def m(self) -> int:
        """Number of polygons."""
        return int(self.offsets.size - 1)

    @property
    def sizes(self) -> Indices:
        """Number of corners of each, shape (m,)."""
        return np.diff(self.offsets)

    @property
    def owner(self) -> Indices:
        """Polygon of each entry of `corners`, shape (k,)."""
        return np.repeat(np.arange(self.m), self.sizes)

    def kept(self, wanted: NDArray[np.bool_]) -> Polygons:
        """Only the wanted ones."""
        sizes = self.sizes[wanted]
        return Polygons(self.corners[np.repeat(wanted, self.sizes)], np.concatenate([[0], np.cumsum(sizes)]))

    def renumbered(self, table: Indices) -> Polygons:
        """The same over points with other numbers."""
        return Polygons(table[self.corners], self.offsets)


def none() -> Polygons:
    """No polygons."""
    return Polygons(np.zeros(0, dtype=np.int64), np.zeros(1, dtype=np.int64))


def joined(parts: list[Polygons], points: list[int]) -> Polygons:
    """Polygons over the points of several parts, one part after the other.

    Parameters
    ----------
    parts : list of Polygons
        Each over its own points.
    points : list of int
        Number of points of each part.

    Returns
    -------
    Polygons
    """
    first = np.concatenate([[0], np.cumsum(points)])
    start = np.concatenate([[0], np.cumsum([part.corners.size for part in parts])])
    corners = [part.corners + shift for part, shift in zip(parts, first, strict=False)]
    offsets = [part.offsets[:-1] + shift for part, shift in zip(parts, start, strict=False)]
    return Polygons(np.concatenate(corners), np.concatenate([*offsets, start[-1:]]))


def _following(polygons: Polygons) -> Indices:
    """Point that follows each entry of `corners` around its polygon."""
    following = np.empty_like(polygons.corners)
    following[:-1] = polygons.corners[1:]
    following[polygons.offsets[1:] - 1] = polygons.corners[polygons.offsets[:-1]]
    return following


def areas_and_centres(polygons: Polygons, places: Array) -> tuple[Array, Array]:
    """Signed area and centre of area of each polygon.

    Parameters
    ----------
    polygons : Polygons
        m of them, each with at least one corner.
    places : ndarray, shape (n, 2)
        Positions of the points in the plane.

    Returns
    -------
    area : ndarray, shape (m,)
        Positive where the corners run counter-clockwise.
    centre : ndarray, shape (m, 2)
        Of area; mean of the corners where the area vanishes. Corners on a straight side, as of hanging nodes, do not
        move it.
    """
    owner, following = polygons.owner, _following(polygons)
    count = polygons.sizes
    mean = np.stack([np.bincount(owner, places[polygons.corners, k], polygons.m) / count for k in (0, 1)], axis=-1)
    a, b = places[polygons.corners] - mean[owner], places[following] - mean[owner]
    cross = a[:, 0] * b[:, 1] - a[:, 1] * b[:, 0]
    area = 0.5 * np.bincount(owner, cross, polygons.m)
    moment = np.stack([np.bincount(owner, cross * (a + b)[:, k], polygons.m) / 6.0 for k in (0, 1)], axis=-1)
    size = np.bincount(owner, np.abs(cross), polygons.m)
    with np.errstate(divide="ignore", invalid="ignore"):
        shift = np.where((np.abs(area) > 1e-12 * size)[:, None], moment / area[:, None], 0.0)
    return area, mean + shift


def triangles_of(polygons: Polygons, places: Array) -> Indices:
    """The triangles that polygons fall into, as fans about a corner.

    Parameters
    ----------
    polygons : Polygons
        m of them.
    places : ndarray, shape (n, 2)
        Positions of the points in the plane.

    Returns
    -------
    ndarray of int, shape (t, 3)
        Counter-clockwise; those without area are left out. The fan begins at a corner from which the whole polygon is
        seen, so that the triangles add up to it; a polygon that has no such corner is left to overlapping ones.
    """
    area, _ = areas_and_centres(polygons, places)
    triangles = []
    for size in np.unique(polygons.sizes):
        if size < 3:
            continue
        chosen = np.flatnonzero(polygons.sizes == size)
        corners = polygons.corners[polygons.offsets[chosen][:, None] + np.arange(size)]
        turned = area[chosen] < 0
        corners[turned] = corners[turned][:, ::-1]
        corners = _begin_where_all_is_seen(corners, places, np.abs(area[chosen]))
        fans = np.stack([np.repeat(corners[:, :1], size - 2, axis=1), corners[:, 1:-1], corners[:, 2:]], axis=-1)
        triangles.append(fans.reshape(-1, 3))
    if not triangles:
        return np.zeros((0, 3), dtype=np.int64)
    found = np.concatenate(triangles)
    size_of = np.abs(_double_areas(found, places))
    kept: Indices = found[size_of > 1e-12 * np.max(size_of, initial=0.0)]
    return kept.astype(np.int64)


def _double_areas(triangles: Indices, places: Array) -> Array:
    a, b, c = (places[triangles[..., k]] for k in range(3))
    result: Array = (b - a)[..., 0] * (c - a)[..., 1] - (b - a)[..., 1] * (c - a)[..., 0]
    return result


def _begin_where_all_is_seen(corners: Indices, places: Array, area: Array) -> Indices:
    """Corners turned so that the fan about the first has no triangle the other way round, where that can be."""
    size = corners.shape[1]
    best = corners.copy()
    open_ = np.arange(corners.shape[0])
    for start in range(size):
        turned = np.roll(corners[open_], -start, axis=1)
        fans = np.stack([np.repeat(turned[:, :1], size - 2, axis=1), turned[:, 1:-1], turned[:, 2:]], axis=-1)
        seen = (_double_areas(fans, places) >= -1e-9 * area[open_][:, None]).all(axis=1)
        best[open_[seen]] = turned[seen]
        open_ = open_[~seen]
        if not open_.size:
            break
    return best
