"""Range of validity: the convex hull of the calibrated directions in the plane of pitch and yaw."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array

#: Directions outside the hull by less than this share of the table's spacing still count as calibrated: edges of a
#: table are not straight in any one plane, and a reading at an edge point must find itself.
EDGE_SHARE = 0.02
_CHUNK = 65536


@dataclass(frozen=True, eq=False)
class DirectionHull:
    """Convex hull in the plane of pitch and yaw.

    Attributes
    ----------
    vertices : ndarray, shape (e, 2)
        Corners (pitch, yaw), in order around the hull with the inside on the left, rad.
    spacing : float
        Median distance of a calibrated direction to its nearest neighbour, rad.
    """

    vertices: Array
    spacing: float

    @cached_property
    def _edges(self) -> Array:
        """Outward unit normal and offset of each edge, shape (e, 3)."""
        along = np.roll(self.vertices, -1, axis=0) - self.vertices
        normal = np.stack([along[:, 1], -along[:, 0]], axis=1) / np.hypot(*along.T)[:, None]
        return np.column_stack([normal, -np.sum(normal * self.vertices, axis=1)])

    @property
    def tolerance(self) -> float:
        """How far outside the hull a direction may lie and still count as calibrated, rad."""
        return EDGE_SHARE * self.spacing

    def outside(self, pitch: Array, yaw: Array) -> Array:
        """Distance to the hull.

        Parameters
        ----------
        pitch, yaw : ndarray, shape (...)
            Directions, rad.

        Returns
        -------
        ndarray, shape (...)
            rad; negative inside.
        """
        flat = np.stack([np.ravel(pitch), np.ravel(yaw)])
        distance = np.empty(flat.shape[1])
        for start in range(0, distance.size, _CHUNK):
            part = slice(start, start + _CHUNK)
            distance[part] = np.max(self._edges[:, :2] @ flat[:, part] + self._edges[:, 2:], axis=0)
        return distance.reshape(np.shape(pitch))

    def holds(self, pitch: Array, yaw: Array) -> NDArray[np.bool_]:
        """Directions that count as calibrated; not those that are NaN."""
        inside: NDArray[np.bool_] = self.outside(pitch, yaw) <= self.tolerance
        return inside

    def on_edge(self, pitch: Array, yaw: Array) -> NDArray[np.bool_]:
        """Directions that lie on the hull's edge, within a quarter of the spacing."""
        on: NDArray[np.bool_] = self.outside(pitch, yaw) > -0.25 * self.spacing
        return on


def direction_hull(pitch: Array, yaw: Array) -> DirectionHull:
    """Hull of calibrated directions.

    Parameters
    ----------
    pitch, yaw : ndarray, shape (n,)
        Calibrated directions, rad, each once.

    Returns
    -------
    DirectionHull

    Raises
    ------
    DataError
        If they lie on one line.
    """
    from scipy.spatial import ConvexHull, QhullError, cKDTree

    points = np.stack([pitch, yaw], axis=1)
    try:
        hull = ConvexHull(points)
    except (QhullError, ValueError) as error:
        raise DataError(
            "the calibrated directions lie on one line",
            remedy="give points over a range of both pitch and yaw (or cone and roll)",
        ) from error
    distance = cKDTree(points).query(points, k=2)[0][:, 1]
    return DirectionHull(points[hull.vertices], float(np.median(distance)))
