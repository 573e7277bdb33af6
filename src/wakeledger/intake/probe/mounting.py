"""How a probe is mounted: from its own axes to those of the survey."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.core.rotation import rotation_matrix

_NO_ERRORS: Mapping[str, Array | float] = MappingProxyType({})


@dataclass(frozen=True)
class Mounting:
    """Right-handed rotations that bring the survey's axes onto the probe's, rad.

    Attributes
    ----------
    pitch, yaw, roll : float
        Yaw about z (nose to port), then pitch about y (nose up), then roll about x (counter-clockwise seen from
        behind), each about the already rotated axes.
    """

    pitch: float = 0.0
    yaw: float = 0.0
    roll: float = 0.0

    def matrix(self, errors: Mapping[str, Array | float] = _NO_ERRORS) -> Array:
        """Matrix R = Rz(yaw) Ry(pitch) Rx(roll) with survey = R @ probe.

        Parameters
        ----------
        errors : mapping of str to array_like, optional
            Errors of ``angle.pitch``, ``angle.yaw`` and ``angle.roll``, rad, of any shapes that broadcast.

        Returns
        -------
        ndarray, shape (..., 3, 3)
        """
        pitch, yaw, roll = (
            getattr(self, name) + np.asarray(errors.get(f"angle.{name}", 0.0)) for name in ("pitch", "yaw", "roll")
        )
        return rotation_matrix(pitch, yaw, roll)


def turned(direction: Array, matrix: Array) -> Array:
    """Vectors turned by matrices.

    Parameters
    ----------
    direction : ndarray, shape (3, ..., n)
        Components of the vectors.
    matrix : ndarray, shape (..., 3, 3)
        A matrix for all, or leading axes that broadcast with those of the points, (..., n).

    Returns
    -------
    ndarray, shape (3, ..., n)
    """
    if matrix.ndim == 2 and np.array_equal(matrix, np.eye(3)):
        return direction
    if matrix.ndim == 2:
        return np.asarray(np.tensordot(matrix, direction, axes=1))
    return np.stack([sum(matrix[..., i, j] * direction[j] for j in range(3)) for i in range(3)])
