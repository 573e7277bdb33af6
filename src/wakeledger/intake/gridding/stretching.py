"""How points stand about each place: as dense along y as along z, or many times denser along one of them.

The points of a computed plane stand a hundred times closer across the wake than along the span, and evenly in the
outer flow. Their neighbours, and how far from them is far, have to be told in units of the spacings that hold there.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array

#: Local spacings along y and z are told apart from this ratio on, in powers of it.
STEP = 2.0
#: Beyond STEP to this power no more.
_MOST = 8
#: Share of the places that must be stretched.
_LEAST_SHARE = 0.1


def stretch_levels(places: Array, edges: NDArray[np.intp]) -> NDArray[np.int64]:
    """Local ratio of the spacing along z to that along y.

    Parameters
    ----------
    places : ndarray, shape (m, 2)
        Places (y, z), in units in which they are equally dense along both on the whole.
    edges : ndarray of int, shape (k, 2)
        Edges of a mesh between them.

    Returns
    -------
    ndarray of int, shape (m,)
        The power of `STEP` nearest to the ratio, brought to the median of each place and its neighbours; 0 throughout
        where fewer than one place in ten is further than one step off, as are scattered and polar points here and
        there.
    """
    delta = np.abs(places[edges[:, 0]] - places[edges[:, 1]])
    ends = np.concatenate([edges[:, 0], edges[:, 1]])
    along = [np.bincount(ends, np.concatenate([delta[:, k], delta[:, k]]), places.shape[0]) for k in (0, 1)]
    tiny = 1e-12 * max(float(delta.max(initial=0.0)), np.finfo(float).tiny)
    power = np.log((along[1] + tiny) / (along[0] + tiny)) / np.log(STEP)
    power = _median_of_neighbours(power, edges)
    level = np.clip(np.round(power), -_MOST, _MOST).astype(np.int64)
    plain = np.count_nonzero(np.abs(level) > 1) < _LEAST_SHARE * level.size
    return np.zeros_like(level) if plain else level


def _median_of_neighbours(values: Array, edges: NDArray[np.intp]) -> Array:
    """Median of the values at each place and the places it has an edge with; the lower of two candidates."""
    own = np.arange(values.size)
    group = np.concatenate([edges[:, 0], edges[:, 1], own])
    others = np.concatenate([edges[:, 1], edges[:, 0], own])
    order = np.lexsort((values[others], group))
    count = np.bincount(group)
    start = np.concatenate([[0], np.cumsum(count)[:-1]])
    return np.asarray(values[others][order][start + (count - 1) // 2], dtype=float)
