"""How a probe is mounted: from its own axes to those of the survey."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.core.rotation import rotation_matrix

#: Inputs that errors of a misalignment's pitch and yaw are drawn for: standard normal numbers.
TURN_INPUTS = ("correction.misalignment.pitch", "correction.misalignment.yaw")
_NO_ERRORS: Mapping[str, Array | float] = MappingProxyType({})


@dataclass(frozen=True)
class Turn:
    """What the measuring axes are turned by against those stated, found from the readings and taken out.

    Attributes
    ----------
    pitch, yaw : float
        As of `wakeledger.intake.probe.misalignment.Misalignment`, rad.
    standard_uncertainty : (float, float)
        Of pitch and yaw, rad.
    of_head : bool
        Whether the head is turned on its shaft, so that the turn rolls with the probe; else the whole mounting is.
    inputs : (str, str)
        Inputs that errors of pitch and yaw are drawn for.
    """

    pitch: float
    yaw: float
    standard_uncertainty: tuple[float, float]
    of_head: bool
    inputs: tuple[str, str] = TURN_INPUTS

    def matrix(self, errors: Mapping[str, Array | float] = _NO_ERRORS) -> Array:
        """Matrix E with stated = E @ measured, shape (..., 3, 3); errors in standard uncertainties."""
        pitch, yaw = (
            angle + sigma * np.asarray(errors.get(name, 0.0))
            for angle, sigma, name in zip((self.pitch, self.yaw), self.standard_uncertainty, self.inputs, strict=True)
        )
        return rotation_matrix(pitch, yaw, 0.0)


@dataclass(frozen=True)
class Mounting:
    """Right-handed rotations that bring the survey's axes onto the probe's, rad.

    Attributes
    ----------
    pitch, yaw, roll : float
        Yaw about z (nose to port), then pitch about y (nose up), then roll about x (counter-clockwise seen from
        behind), each about the already rotated axes.
    turn : Turn or None
        What the measuring axes turned out to be turned by beside these.
    """

    pitch: float = 0.0
    yaw: float = 0.0
    roll: float = 0.0
    turn: Turn | None = None

    def matrix(self, errors: Mapping[str, Array | float] = _NO_ERRORS) -> Array:
        """Matrix R = Rz(yaw) Ry(pitch) Rx(roll) with survey = R @ probe; R E, or E R, with a turn E.

        Parameters
        ----------
        errors : mapping of str to array_like, optional
            Errors of ``angle.pitch``, ``angle.yaw`` and ``angle.roll``, rad, and of the turn, of any shapes that
            broadcast.

        Returns
        -------
        ndarray, shape (..., 3, 3)
        """
        pitch, yaw, roll = (
            getattr(self, name) + np.asarray(errors.get(f"angle.{name}", 0.0)) for name in ("pitch", "yaw", "roll")
        )
        stated = rotation_matrix(pitch, yaw, roll)
        if self.turn is None:
            return stated
        turn = self.turn.matrix(errors)
        return np.asarray(stated @ turn if self.turn.of_head else turn @ stated)


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
