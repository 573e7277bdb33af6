"""Flow directions in the probe's axes, in the forms that calibrations use."""

from __future__ import annotations

import numpy as np

from wakeledger.core.grid import Array


def direction_from_angles(pitch: Array, yaw: Array) -> Array:
    """Unit vector of the flow from pitch and yaw.

    Parameters
    ----------
    pitch, yaw : ndarray, shape (...)
        pitch = atan2(w, u), positive for upwash; yaw = asin(v/|V|), positive towards starboard; rad.

    Returns
    -------
    ndarray, shape (3, ...)
        (cos(yaw) cos(pitch), sin(yaw), cos(yaw) sin(pitch)).
    """
    level = np.cos(yaw)
    return np.stack([level * np.cos(pitch), np.sin(yaw), level * np.sin(pitch)])


def direction_from_cone(cone: Array, roll: Array) -> Array:
    """Unit vector of the flow from cone and roll angle.

    Parameters
    ----------
    cone, roll : ndarray, shape (...)
        The probe's nose is pitched up by `cone`, then the probe is rolled about its axis by `roll`, counter-clockwise
        seen from behind; rad. Roll 0 is pure pitch, roll 90° is pure yaw towards starboard.

    Returns
    -------
    ndarray, shape (3, ...)
        (cos(cone), sin(cone) sin(roll), sin(cone) cos(roll)).
    """
    across = np.sin(cone)
    return np.stack([np.cos(cone), across * np.sin(roll), across * np.cos(roll)])


def angles(direction: Array) -> tuple[Array, Array]:
    """Pitch and yaw of a unit vector.

    Parameters
    ----------
    direction : ndarray, shape (3, ...)
        Unit vectors.

    Returns
    -------
    pitch, yaw : ndarray, shape (...)
        atan2(w, u) and asin(v), rad.
    """
    return np.arctan2(direction[2], direction[0]), np.arcsin(np.clip(direction[1], -1.0, 1.0))


def to_plane(direction: Array) -> Array:
    """Stereographic image (v, w)/(1 + u) of unit vectors: smooth up to 90° from the axis and beyond.

    Parameters
    ----------
    direction : ndarray, shape (3, ...)
        Unit vectors.

    Returns
    -------
    ndarray, shape (2, ...)
    """
    return np.asarray(direction[1:] / (1.0 + direction[0]))


def from_plane(image: Array) -> Array:
    """Unit vectors of stereographic images, the inverse of `to_plane`.

    Parameters
    ----------
    image : ndarray, shape (2, ...)
        (v, w)/(1 + u).

    Returns
    -------
    ndarray, shape (3, ...)
    """
    square = image[0] * image[0] + image[1] * image[1]
    factor = 1.0 / (1.0 + square)
    return np.stack([(1.0 - square) * factor, 2.0 * factor * image[0], 2.0 * factor * image[1]])
