"""Rotations between the axes of a probe, or of a file, and the wind axes."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from wakeledger.core.grid import Array


def rotation_matrix(pitch: ArrayLike, yaw: ArrayLike, roll: ArrayLike) -> Array:
    """Matrix that brings vector components from rotated axes to wind axes, wind = R @ rotated.

    Parameters
    ----------
    pitch, yaw, roll : float or array_like
        Angles by which the axes are rotated, rad, each of any shape that broadcasts with the others: yaw about z (nose
        to port), then pitch about y (nose up), then roll about x (counter-clockwise from behind), each about the
        already rotated axes and positive right-handed.

    Returns
    -------
    ndarray, shape (..., 3, 3)
        R = Rz(yaw) Ry(pitch) Rx(roll), x downstream, y starboard, z up. Its columns are the rotated axes in wind axes.

    Notes
    -----
    In a uniform stream (U, 0, 0) axes pitched nose up by t read an upwash of angle +t, axes yawed nose to port by t
    read a flow towards port, yaw angle -t.

    Examples
    --------
    >>> import numpy as np
    >>> in_probe_axes = rotation_matrix(np.radians(2.0), 0.0, 0.0).T @ [10.0, 0.0, 0.0]
    >>> round(float(np.degrees(np.arctan2(in_probe_axes[2], in_probe_axes[0]))), 12)
    2.0
    """
    pitch, yaw, roll = np.broadcast_arrays(np.asarray(pitch, float), np.asarray(yaw, float), np.asarray(roll, float))
    cp, sp = np.cos(pitch), np.sin(pitch)
    cy, sy = np.cos(yaw), np.sin(yaw)
    cr, sr = np.cos(roll), np.sin(roll)
    rows = (
        (cy * cp, cy * sp * sr - sy * cr, cy * sp * cr + sy * sr),
        (sy * cp, sy * sp * sr + cy * cr, sy * sp * cr - cy * sr),
        (-sp, cp * sr, cp * cr),
    )
    return np.stack([np.stack(row, axis=-1) for row in rows], axis=-2)
