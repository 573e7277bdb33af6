"""What a calibration does not reproduce: residuals, left-out errors, and the standard uncertainty by region."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array
from wakeledger.intake.probe.coefficients import leading_hole, sector_terms
from wakeledger.intake.probe.directions import angles, from_plane
from wakeledger.intake.probe.inverse import newton_step

#: What an error is given of, in this order: rad, rad, and shares of the dynamic pressure.
QUANTITIES: tuple[str, ...] = ("pitch", "yaw", "total_pressure", "static_pressure")
#: Standard deviation of the weights by distance that make a region, in spacings of the table.
REGION = 1.5
_STEPS = 4
_MOST = 0.5


def reading_errors(measured: Array, predicted: Array, gradient: tuple[Array, Array], image: Array) -> Array:
    """Errors of the quantities if readings are reduced by a model of the holes that is slightly off.

    Parameters
    ----------
    measured : ndarray, shape (holes, n)
        Hole pressures (p - Ps)/(Pt - Ps) at known directions.
    predicted : ndarray, shape (holes, n)
        What the model gives there.
    gradient : pair of ndarray, shape (holes, n)
        Derivatives of the model along the two coordinates of the direction's image.
    image : ndarray, shape (2, n)
        Stereographic images of the known directions.

    Returns
    -------
    ndarray, shape (4, n)
        Reduced less true value of `QUANTITIES`.
    """
    lead = leading_hole(measured)
    own = sector_terms(measured, lead)
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        x, y, scale = own.compressed()
        shift = np.zeros_like(image)
        at = predicted
        for _ in range(_STEPS):
            change = newton_step(at, gradient, lead, np.stack([x, y]))
            shift = np.clip(shift + np.nan_to_num(change), -_MOST, _MOST)
            at = predicted + gradient[0] * shift[0] + gradient[1] * shift[1]
        there = sector_terms(at, lead)
        ratio = scale / there.compressed()[2]
        total = own.lead - (there.lead - 1.0) * ratio
    found, true = angles(from_plane(image + shift)), angles(from_plane(image))
    return np.stack([found[0] - true[0], found[1] - true[1], total - 1.0, total - ratio])


def regional(directions: Array, errors: Array, at: Array, *, radius: float) -> Array:
    """Root mean square of errors around each of many directions.

    Parameters
    ----------
    directions : ndarray, shape (3, n)
        Where the errors are known.
    errors : ndarray, shape (q, n)
        The errors.
    at : ndarray, shape (3, m)
        Where their size is wanted.
    radius : float
        Standard deviation of the Gaussian weights, rad.

    Returns
    -------
    ndarray, shape (q, m)
        Where all are far away, that of the nearest.
    """
    square = np.maximum(2.0 - 2.0 * (at.T @ directions), 0.0)
    square -= square.min(axis=1, keepdims=True)
    weights = np.exp(-0.5 * square / radius**2)
    weights /= weights.sum(axis=1, keepdims=True)
    return np.asarray(np.sqrt(weights @ (errors**2).T).T)


def midpoints(pitch: Array, yaw: Array) -> tuple[Array, Array]:
    """Centres of the triangles between calibrated directions.

    Parameters
    ----------
    pitch, yaw : ndarray, shape (n,)
        Directions, rad, each once.

    Returns
    -------
    pitch, yaw : ndarray, shape (t,)
    """
    from scipy.spatial import Delaunay

    points = np.stack([pitch, yaw], axis=1)
    centres = points[Delaunay(points).simplices].mean(axis=1)
    return centres[:, 0], centres[:, 1]


def representative(edge: NDArray[np.bool_], kept: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Places whose left-out errors stand for the calibration's error.

    A place on the hull's edge is predicted by extrapolation once it is left out, which never happens to a reading
    within the range; its neighbours inside stand for it.
    """
    inner = kept & ~edge
    return inner if np.count_nonzero(inner) >= 4 else kept
