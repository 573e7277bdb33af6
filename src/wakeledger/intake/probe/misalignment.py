"""How the measuring axes stand against those the survey file states: from a roll pair, or from the outer flow.

A probe turned by 180° about its axis turns its own misalignment with it, while the stream's upflow stays: a pair of
traverses tells the two apart. The outer flow alone gives their sum.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.core.rotation import rotation_matrix
from wakeledger.intake.probe.correction import Correction

_ITERATIONS = 20
_STEP = 1e-6
_FEWEST = 3


@dataclass(frozen=True)
class Misalignment:
    """A turn of the measuring axes against those stated.

    Attributes
    ----------
    pitch, yaw : float
        Turn, rad, nose up and nose to port positive: stated = R(pitch, yaw) @ measured, and in a stream along the
        stated axis the measuring axes read a pitch of +pitch and a yaw of −yaw.
    standard_uncertainty : (float, float)
        Of pitch and yaw, rad, from the scatter between rows (or points); NaN where there are too few.
    scatter : float
        Rms of the remaining flow angle, rad.
    points : int
        Points it rests on.
    """

    pitch: float
    yaw: float
    standard_uncertainty: tuple[float, float]
    scatter: float
    points: int

    @property
    def rotation(self) -> Array:
        """Rotation R with stated = R @ measured, shape (3, 3)."""
        return rotation_matrix(self.pitch, self.yaw, 0.0)


def from_roll_pair(
    first: Array, second: Array, *, roll: ArrayLike = np.pi, row: NDArray[np.integer] | None = None
) -> Misalignment:
    """Misalignment of the probe's head from two traverses of the same places, the second with the probe rolled.

    Parameters
    ----------
    first, second : ndarray, shape (3, n)
        Velocity in the probe's measuring axes in each traverse, same places in the same order; only its direction
        counts. NaN where a point is missing.
    roll : float
        Roll of the second traverse less that of the first, rad.
    row : ndarray of int, shape (n,), optional
        Traverse row of each point; errors are then taken as independent from row to row, else from point to point.

    Returns
    -------
    Misalignment
        The turn E of the head with E d₁ = Rx(roll) E d₂ at all points, by least squares on the unit vectors. The
        stream's own upflow and the mounting's error cancel.

    Raises
    ------
    DataError
        If fewer than three points were measured in both, or the roll is so small that it tells nothing.
    """
    turn = rotation_matrix(0.0, 0.0, float(np.asarray(roll)))
    if np.linalg.norm(turn - np.eye(3)) < 0.2:
        raise DataError(
            f"the two traverses differ in roll by {np.degrees(float(np.asarray(roll))):.3g} degrees only",
            remedy="the probe's own misalignment shows when it is rolled by 180 degrees between them",
        )
    a, b, which = _paired(first, second, row)

    def left(angles: Array) -> Array:
        head = rotation_matrix(angles[0], angles[1], 0.0)
        return np.asarray((head @ a - turn @ head @ b)[1:])

    return _solve(left, a.shape[1], which)


def from_outer_flow(
    velocity: Array,
    *,
    expected: tuple[ArrayLike, ArrayLike] = (0.0, 0.0),
    row: NDArray[np.integer] | None = None,
) -> Misalignment:
    """Misalignment of the mounted axes from the mean crossflow outside the wake.

    Parameters
    ----------
    velocity : ndarray, shape (3, n)
        u, v, w of the outer flow in the stated axes, m/s.
    expected : (array_like, array_like), shape (n,) or scalar
        Crossflow v and w that the wake and the stream's own upflow are known to have there, m/s.
    row : ndarray of int, shape (n,), optional
        As in `from_roll_pair`.

    Returns
    -------
    Misalignment
        The turn after which the crossflow is the expected one on average. A stream that is not level looks the same:
        what is found is the sum of both.

    Raises
    ------
    DataError
        If fewer than three points are given.
    """
    v, w = (np.broadcast_to(np.asarray(x, float), velocity.shape[1:]) for x in expected)
    speed = np.linalg.norm(velocity, axis=0)
    a, b, which = _paired(velocity, np.stack([np.zeros(v.shape), v, w]), row, lengths=(speed, speed))

    def left(angles: Array) -> Array:
        return np.asarray((rotation_matrix(angles[0], angles[1], 0.0) @ a - b)[1:])

    return _solve(left, a.shape[1], which)


def correct_misalignment(velocity: Array, found: Misalignment) -> Correction:
    """Velocities in the stated axes.

    Parameters
    ----------
    velocity : ndarray, shape (3, ..., n)
        u, v, w in the measuring axes, m/s.
    found : Misalignment
        From `from_roll_pair` (velocities in probe axes, before the mounting) or `from_outer_flow` (after it).

    Returns
    -------
    Correction
        R(pitch, yaw) @ velocity. `per_sigma` has a leading axis of two: for the pitch and for the yaw, which are
        independent.
    """
    turned = np.einsum("ij,j...->i...", found.rotation, velocity)
    changes = []
    for sigma, unit in zip(found.standard_uncertainty, ((1.0, 0.0), (0.0, 1.0)), strict=True):
        further = rotation_matrix(found.pitch + _STEP * unit[0], found.yaw + _STEP * unit[1], 0.0)
        changes.append(sigma / _STEP * np.einsum("ij,j...->i...", further - found.rotation, velocity))
    return Correction(turned, turned - velocity, np.stack(changes))


def _paired(
    first: Array,
    second: Array,
    row: NDArray[np.integer] | None,
    *,
    lengths: tuple[Array, Array] | None = None,
) -> tuple[Array, Array, NDArray[np.integer]]:
    """Unit vectors of the points that have both, and the group of each."""
    a, b = np.asarray(first, float), np.asarray(second, float)
    both = np.isfinite(a).all(axis=0) & np.isfinite(b).all(axis=0)
    if np.count_nonzero(both) < _FEWEST:
        raise DataError(
            f"a misalignment needs at least {_FEWEST} points, {np.count_nonzero(both)} are usable",
            remedy="measure the same places in both traverses, or leave the misalignment out",
        )
    over = (np.linalg.norm(a, axis=0), np.linalg.norm(b, axis=0)) if lengths is None else lengths
    group = np.arange(both.size) if row is None else np.asarray(row)
    return a[:, both] / over[0][both], b[:, both] / over[1][both], group[both]


def _solve(left: Callable[[Array], Array], points: int, group: NDArray[np.integer]) -> Misalignment:
    """Gauss-Newton on two angles; uncertainty from the scatter of the groups' own sums."""
    angles = np.zeros(2)
    unit = np.eye(2) * _STEP
    for _ in range(_ITERATIONS):
        rest = left(angles)
        slope = np.stack([(left(angles + d) - left(angles - d)) / (2 * _STEP) for d in unit])
        normal = np.einsum("akn,bkn->ab", slope, slope)
        move = -np.linalg.solve(normal, np.einsum("akn,kn->a", slope, rest))
        angles = angles + move
        if np.abs(move).max() < 1e-13:
            break
    rest = left(angles)
    scatter = float(np.sqrt(np.mean(np.sum(rest**2, axis=0))))
    _, member = np.unique(group, return_inverse=True)
    groups = int(member.max()) + 1
    if groups < _FEWEST:
        return Misalignment(float(angles[0]), float(angles[1]), (np.nan, np.nan), scatter, points)
    pull = np.stack([np.bincount(member, weights=x) for x in np.einsum("akn,kn->an", slope, rest)])
    inverse = np.linalg.inv(normal)
    covariance = inverse @ (pull @ pull.T) @ inverse * groups / (groups - 1)
    sigma = np.sqrt(np.diag(covariance))
    return Misalignment(float(angles[0]), float(angles[1]), (float(sigma[0]), float(sigma[1])), scatter, points)
