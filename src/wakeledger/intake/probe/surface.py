"""Smooth functions over scattered places in a plane, with their leave-one-out errors in closed form.

Radial functions |r|⁵ with all cubic polynomials: exact for cubics, smooth to the fourth derivative, and indifferent to
whether the places form a grid. The smoothing is chosen so that left-out values are predicted best, which is next to
none for values without noise.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array

#: Fewest places a surface can be fitted to.
FEWEST_PLACES = 16
_CUBIC = [(i, j) for i in range(4) for j in range(4 - i)]
_QUADRATIC = [(i, j) for i in range(3) for j in range(3 - i)]
_FEWEST_FOR_CUBIC = 30
_SMOOTHING = np.logspace(-13, 0, 40)
#: Share of the left-out errors that counts when the smoothing is chosen; the rest may be blunders or far corners.
_TRIMMED = 0.9
_BLOCK = 4_000_000
_NORMAL = 1.4826


@dataclass(frozen=True, eq=False)
class Surface:
    """A vector-valued smooth function of a place in a plane.

    Attributes
    ----------
    places : ndarray, shape (n, 2)
        Centres, scaled to the unit square.
    centre, scale : ndarray, shape (2,), float
        Scaled place = (place - centre) / scale.
    weights : ndarray, shape (n, k)
        Of the radial functions.
    polynomial : ndarray, shape (m, k)
        Coefficients of the polynomials.
    """

    places: Array
    centre: Array
    scale: float
    weights: Array
    polynomial: Array

    def __call__(self, x: Array, y: Array) -> Array:
        """Values at places.

        Parameters
        ----------
        x, y : ndarray, shape (...)
            Places.

        Returns
        -------
        ndarray, shape (k, ...)
        """
        shape = np.shape(x)
        at = (np.stack([np.ravel(x), np.ravel(y)], axis=1) - self.centre) / self.scale
        values = np.empty((len(at), self.weights.shape[1]))
        step = max(1, _BLOCK // len(self.places))
        for start in range(0, len(at), step):
            part = at[start : start + step]
            values[start : start + step] = (
                _kernel(part, self.places) @ self.weights + _powers(part, len(self.polynomial)) @ self.polynomial
            )
        return np.asarray(np.reshape(values.T, (-1, *shape)))


@dataclass(frozen=True, eq=False)
class SurfaceFit:
    """A surface fitted to values, some of which may have been set aside.

    Attributes
    ----------
    surface : Surface
        The fit to the values that were kept.
    left_out : ndarray, shape (n, k)
        Value less the prediction of all other kept values.
    deviations : ndarray, shape (n, k)
        `left_out` in robust standard deviations of what is to be expected at that place.
    one_sided : ndarray, shape (n,)
        At most 1: typical spread of a prediction over that at the place; small on edges and in corners, where a value
        that is left out is extrapolated to.
    kept : ndarray of bool, shape (n,)
        Places the fit rests on.
    smoothing : float
        Chosen smoothing, as a share of the radial functions' largest eigenvalue.
    """

    surface: Surface
    left_out: Array
    deviations: Array
    one_sided: Array
    kept: NDArray[np.bool_]
    smoothing: float


def _kernel(a: Array, b: Array) -> Array:
    square = np.maximum(
        np.sum(a * a, axis=1)[:, None] + np.sum(b * b, axis=1)[None, :] - 2.0 * (a @ b.T),
        0.0,
    )
    return np.asarray(-square * square * np.sqrt(square))


def _powers(at: Array, number: int) -> Array:
    powers = _CUBIC if number == len(_CUBIC) else _QUADRATIC
    return np.stack([at[:, 0] ** i * at[:, 1] ** j for i, j in powers], axis=1)


def fit_surface(places: Array, values: Array, *, limit: float, floor: float, most: float = 0.2) -> SurfaceFit:
    """Fit a smooth surface, and set aside the values that do not belong to it.

    Parameters
    ----------
    places : ndarray, shape (n, 2)
        Different places.
    values : ndarray, shape (n, k)
        Values of k quantities there.
    limit : float
        A place is set aside if any of its values lies further from the prediction of the others than this many robust
        standard deviations ...
    floor : float
        ... and by more than this, in units of the values.
    most : float, optional
        Largest share of the places that may be set aside.

    Returns
    -------
    SurfaceFit

    Raises
    ------
    DataError
        If there are too few places, or more than the largest share does not belong to any smooth surface.
    """
    number = len(places)
    if number < FEWEST_PLACES:
        raise DataError(
            f"there are {number} different calibrated directions",
            remedy=f"give at least {FEWEST_PLACES}",
        )
    low, high = places.min(axis=0), places.max(axis=0)
    centre, scale = 0.5 * (low + high), 0.5 * float(np.max(high - low))
    at = (places - centre) / scale
    kept = np.ones(number, dtype=bool)
    spectrum = _Spectrum(at, values)
    smoothing = spectrum.best_smoothing()
    inverse = spectrum.inverse(smoothing)
    kept = _set_aside(inverse, values, limit=limit, floor=floor, most=most)
    left_out, deviations = _left_out(inverse, values, kept)
    diagonal = np.diag(inverse)
    one_sided = np.minimum(1.0, np.sqrt(diagonal / np.median(diagonal)))
    if not kept.all():
        spectrum = _Spectrum(at[kept], values[kept])
        smoothing = spectrum.best_smoothing()
        again = spectrum.inverse(smoothing)
        inside, _ = _left_out(again, values[kept], np.ones(len(again), dtype=bool))
        left_out[kept] = inside
    weights, polynomial = spectrum.solve(smoothing)
    surface = Surface(at[kept], centre, scale, weights, polynomial)
    if not kept.all():
        bad = ~kept
        left_out[bad] = values[bad] - surface(places[bad, 0], places[bad, 1]).T
    return SurfaceFit(surface, left_out, deviations, one_sided, kept, smoothing)


class _Spectrum:
    """The radial functions' matrix on the complement of the polynomials, diagonalised once."""

    def __init__(self, at: Array, values: Array) -> None:
        from scipy import linalg

        self.values = values
        self.at = at
        number = len(_CUBIC) if len(at) >= _FEWEST_FOR_CUBIC else len(_QUADRATIC)
        self.powers = _powers(at, number)
        basis = linalg.qr(self.powers)[0][:, number:]
        self.kernel = _kernel(at, at)
        inner = basis.T @ self.kernel @ basis
        self.eigenvalues, vectors = linalg.eigh(0.5 * (inner + inner.T))
        self.eigenvalues = np.maximum(self.eigenvalues, 0.0)
        self.vectors = basis @ vectors
        self.projected = self.vectors.T @ values

    def _spread(self, smoothing: float) -> Array:
        spread: Array = 1.0 / (self.eigenvalues + smoothing * self.eigenvalues[-1])
        return spread

    def best_smoothing(self) -> float:
        """The smoothing with the smallest trimmed mean square of the left-out errors."""
        squares = self.vectors**2
        count = max(1, round(_TRIMMED * len(self.at)))
        scores = []
        for smoothing in _SMOOTHING:
            spread = self._spread(smoothing)
            errors = (self.vectors @ (spread[:, None] * self.projected)) / (squares @ spread)[:, None]
            scores.append(float(np.sum(np.sort(errors**2, axis=0)[:count])))
        return float(_SMOOTHING[int(np.argmin(scores))])

    def inverse(self, smoothing: float) -> Array:
        """W with weights = W values, shape (n, n)."""
        return np.asarray((self.vectors * self._spread(smoothing)) @ self.vectors.T)

    def solve(self, smoothing: float) -> tuple[Array, Array]:
        """Weights of the radial functions and coefficients of the polynomials."""
        weights = self.vectors @ (self._spread(smoothing)[:, None] * self.projected)
        remainder = self.values - self.kernel @ weights - smoothing * self.eigenvalues[-1] * weights
        return weights, np.linalg.lstsq(self.powers, remainder, rcond=None)[0]


def _without(inverse: Array, removed: NDArray[np.bool_]) -> Array:
    """W of the kept places alone."""
    kept = ~removed
    across = inverse[np.ix_(kept, removed)]
    reduced: Array = inverse[np.ix_(kept, kept)] - across @ np.linalg.solve(inverse[np.ix_(removed, removed)], across.T)
    return reduced


def _standardised(inverse: Array, values: Array) -> tuple[Array, Array]:
    """Left-out errors, and the same over the square root of their expected variance's shape."""
    weights = inverse @ values
    diagonal = np.diag(inverse)[:, None]
    return weights / diagonal, weights / np.sqrt(diagonal)


def _left_out(inverse: Array, values: Array, kept: NDArray[np.bool_]) -> tuple[Array, Array]:
    """Left-out errors of all places, each predicted by the kept ones, and their robust standard deviations."""
    core = inverse if kept.all() else _without(inverse, ~kept)
    inside, shaped = _standardised(core, values[kept])
    spread = np.maximum(_NORMAL * np.median(np.abs(shaped), axis=0), 1e-300)
    left_out, deviations = np.empty_like(values), np.empty_like(values)
    left_out[kept], deviations[kept] = inside, np.abs(shaped) / spread
    for index in np.flatnonzero(~kept):
        others = ~kept
        others[index] = False
        own = _without(inverse, others) if others.any() else inverse
        position = int(np.count_nonzero(~others[:index]))
        error, one = _standardised(own, values[~others])
        left_out[index], deviations[index] = error[position], np.abs(one[position]) / spread
    return left_out, deviations


def _set_aside(inverse: Array, values: Array, *, limit: float, floor: float, most: float) -> NDArray[np.bool_]:
    number = len(values)
    kept = np.ones(number, dtype=bool)
    core = inverse
    while True:
        error, shaped = _standardised(core, values[kept])
        spread = np.maximum(_NORMAL * np.median(np.abs(shaped), axis=0), 1e-300)
        # Edges and corners are predicted from one side only: what counts as large grows with the prediction's spread.
        usual = floor * np.sqrt(np.median(np.diag(core)))
        large = (np.abs(error) > floor) & (np.abs(shaped) > usual)
        deviations = np.where(large, np.abs(shaped) / spread, 0.0)
        worst = np.unravel_index(int(np.argmax(deviations)), deviations.shape)
        if deviations[worst] <= limit:
            return kept
        kept[np.flatnonzero(kept)[worst[0]]] = False
        if np.count_nonzero(~kept) > most * number:
            raise DataError(
                f"more than {100 * most:.0f} % of the calibration points lie on no smooth surface",
                remedy="check the columns and the angles' signs of the calibration table",
            )
        rest = np.delete(np.arange(len(core)), worst[0])
        column = core[rest, worst[0]]
        core = core[np.ix_(rest, rest)] - np.outer(column, column) / core[worst[0], worst[0]]
