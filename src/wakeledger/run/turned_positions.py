"""Positions of a traverse that stands askew, turned to wind axes with the vectors."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.core.points import Points


def turned(points: Points, rotation: Array) -> tuple[Points, float]:
    """Points whose positions were taken along turned axes, in wind axes.

    Parameters
    ----------
    points : Points
        With y and z along the turned axes, m, from the origin about which these are turned.
    rotation : ndarray, shape (3, 3)
        R with wind = R @ turned (`wakeledger.core.rotation.rotation_matrix`).

    Returns
    -------
    points : Points
        Seen along the stream: y and z in wind axes, m; areas of cells as the stream sees them.
    lean : float
        Largest distance of a point along x from the station, m, beyond rounding; 0 for a plane that is only rolled.
    """
    x, y, z = rotation @ np.stack([np.zeros_like(points.y), points.y, points.z])
    size = float(np.hypot(points.y, points.z).max(initial=0.0))
    lean = float(np.abs(x).max(initial=0.0))
    # The normal of the plane in wind axes is the first column of R.
    areas = None if points.areas is None else points.areas * rotation[0, 0]
    return replace(points, y=y, z=z, areas=areas), lean if lean > 1e-12 * size else 0.0
