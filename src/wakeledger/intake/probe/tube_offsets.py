"""How far the total pressures of a rake's tubes are off each other."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array

#: Points of one place lie within this share of the typical distance between points.
SAME_PLACE = 0.02
#: Fewest readings of a tube in the outer flow.
FEWEST = 8
#: Share of a tube's points that must lie at one level for it to be that of the outer flow.
LEVEL_SHARE = 0.25
#: A level further below the highest one than this share of the dynamic pressure is no outer flow.
LARGEST_OFFSET = 0.03
#: Overlap and outer flow that differ by this many times what their uncertainties allow contradict each other.
CONTRARY = 3.0
_CLIP = 3.0
_ROUNDS = 20


@dataclass(frozen=True, eq=False)
class TubeOffsets:
    """Total pressure each tube reads above the mean of all tubes.

    Attributes
    ----------
    value, standard_uncertainty : ndarray, shape (tubes,)
        Pa; NaN for a tube that cannot be told, and its uncertainty where nothing is left to judge it by.
    degrees_of_freedom : ndarray of int, shape (tubes,)
        Of the uncertainty.
    source : str
        "overlap", "outer flow", or "both".
    count : int
        Places seen by several tubes, or points in the outer flow.
    second : int
        Points in the outer flow where both tell.
    """

    value: Array
    standard_uncertainty: Array
    degrees_of_freedom: NDArray[np.int64]
    source: str
    count: int
    second: int = 0


def offsets_from_both(overlap: TubeOffsets, outer: TubeOffsets) -> TubeOffsets:
    """Offsets from overlap and outer flow together, by the inverse squares of their uncertainties.

    Parameters
    ----------
    overlap, outer : TubeOffsets
        From `offsets_from_overlap` and `offsets_from_outer_flow`.

    Returns
    -------
    TubeOffsets
        The means add to zero again. A tube of which either tells nothing, or not how well, keeps what the overlap says
        of it; the outer flow's offsets are brought to the overlap's mean over the tubes that both know. Where the two
        contradict each other, the overlap alone: a wake that reaches into a tube's outer flow does not touch it.

    Notes
    -----
    Places in the outer flow that several tubes have seen count in both, so the uncertainty of the mean is that of two
    errors that are one: the mean of the two by the same weights. Where both disagree by more than independent errors
    allow, it is widened by the Birge ratio, beyond `CONTRARY` of which they contradict each other.
    """
    both = np.isfinite(overlap.standard_uncertainty + outer.standard_uncertainty)
    both &= (overlap.standard_uncertainty > 0) & (outer.standard_uncertainty > 0)
    if np.count_nonzero(both) < 2:
        return overlap
    shifted = outer.value - np.mean((outer.value - overlap.value)[both])
    weights = np.stack([overlap.standard_uncertainty, outer.standard_uncertainty])[:, both] ** -2
    total = weights.sum(axis=0)
    value, sigma = overlap.value.copy(), overlap.standard_uncertainty.copy()
    freedom = overlap.degrees_of_freedom.copy()
    value[both] = (weights[0] * overlap.value[both] + weights[1] * shifted[both]) / total
    apart = (overlap.value - shifted)[both] ** 2 / (1.0 / weights).sum(axis=0)
    ratio = float(np.sqrt(max(1.0, apart.sum() / (np.count_nonzero(both) - 1))))
    if ratio > CONTRARY:
        return overlap
    sigma[both] = ratio * np.sum(np.sqrt(weights), axis=0) / total
    freedom[both] += outer.degrees_of_freedom[both]
    return TubeOffsets(value - value.mean(), sigma, freedom, "both", overlap.count, outer.count)


def offsets_from_overlap(total: Array, tube: NDArray[np.intp], y: Array, z: Array, *, tubes: int) -> TubeOffsets | None:
    """Offsets from places that several tubes have seen.

    Parameters
    ----------
    total : ndarray, shape (n,)
        Total pressures, Pa; NaN ones are not used.
    tube : ndarray of int, shape (n,)
        Index of the tube of each point, from 0.
    y, z : ndarray, shape (n,)
        Positions, m.
    tubes : int
        Number of tubes.

    Returns
    -------
    TubeOffsets or None
        None where the overlaps do not lead from every tube to every other.

    Notes
    -----
    Least squares of total = (a level for each place) + (an offset for each tube), the offsets adding to zero.
    """
    from scipy.sparse.csgraph import connected_components

    usable = np.flatnonzero(np.isfinite(total))
    place = _places(y[usable], z[usable])
    held = usable[place >= 0]
    place, which, values = place[place >= 0], tube[held], total[held]
    if not place.size:
        return None
    _, place = np.unique(place, return_inverse=True)
    number = np.bincount(place)
    counts = np.zeros((number.size, tubes))
    np.add.at(counts, (place, which), 1.0)
    several = np.count_nonzero(counts, axis=1) > 1
    if not several.any():
        return None
    keep = several[place]
    place, which, values = place[keep], which[keep], values[keep]
    counts, number = counts[several], number[several]
    _, place = np.unique(place, return_inverse=True)
    means = np.bincount(place, weights=values) / number
    normal = np.diag(counts.sum(axis=0)) - counts.T @ (counts / number[:, None])
    if connected_components(counts.T @ counts > 0, directed=False)[0] > 1:
        return None
    right = np.bincount(which, weights=values - means[place], minlength=tubes)
    inverse = np.linalg.pinv(normal, rcond=1e-9, hermitian=True)
    found: Array = np.asarray(inverse @ right, dtype=float)
    # What an offset does to its place's mean is part of the model.
    shift = counts @ found / number
    left = values - means[place] - found[which] + shift[place]
    freedom = int(values.size - number.size - (tubes - 1))
    variance = float(left @ left) / freedom if freedom > 0 else np.nan
    sigma = np.sqrt(variance * np.diag(inverse))
    return TubeOffsets(found, sigma, np.full(tubes, max(freedom, 0)), "overlap", int(number.size))


def _places(y: Array, z: Array) -> NDArray[np.int64]:
    """Number of the place of each point that shares it with another one, -1 for all others."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components
    from scipy.spatial import cKDTree

    label = np.full(y.size, -1, dtype=np.int64)
    step = np.hypot(np.diff(y), np.diff(z))
    moving = step[step > 0]
    if not moving.size:
        return label
    tree = cKDTree(np.column_stack([y, z]))
    pairs = tree.query_pairs(SAME_PLACE * float(np.median(moving)), output_type="ndarray")
    if not pairs.size:
        return label
    graph = coo_array((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(y.size, y.size))
    place = connected_components(graph, directed=False)[1]
    shared = np.bincount(place) > 1
    label[shared[place]] = place[shared[place]]
    return label


def offsets_from_outer_flow(
    total: Array, tube: NDArray[np.intp], *, tubes: int, dynamic_pressure: float
) -> TubeOffsets | None:
    """Offsets from the level that each tube reads outside the wake.

    Parameters
    ----------
    total, tube, tubes
        As for `offsets_from_overlap`.
    dynamic_pressure : float
        Of the stream, Pa: a level further than `LARGEST_OFFSET` of it below the highest is not that of the outer flow.

    Returns
    -------
    TubeOffsets or None
        None where fewer than two tubes have seen the outer flow.

    Notes
    -----
    The level of a tube is that at which a quarter of its points lie closest together, made finer by the mean of the
    points within three standard deviations. In the outer flow the total pressure is the stream's everywhere.
    """
    found = [_level(total[(tube == k) & np.isfinite(total)]) for k in range(tubes)]
    level, sigma, count = (np.array(part, dtype=float) for part in zip(*found, strict=True))
    known = np.isfinite(level)
    if known.any():
        known &= level > np.nanmax(level) - LARGEST_OFFSET * dynamic_pressure
    if np.count_nonzero(known) < 2:
        return None
    mean = float(level[known].mean())
    variance = sigma**2 / count
    share = 1.0 / np.count_nonzero(known)
    spread = np.sqrt(variance * (1 - 2 * share) + share**2 * float(variance[known].sum()))
    return TubeOffsets(
        np.where(known, level - mean, np.nan),
        np.where(known, spread, np.nan),
        np.where(known, count - 1, 0).astype(np.int64),
        "outer flow",
        int(count[known].sum()),
    )


def _level(values: Array) -> tuple[float, float, float]:
    """Level, standard deviation about it, and number of the values at it."""
    ordered = np.sort(values)
    part = max(FEWEST // 2, int(np.ceil(LEVEL_SHARE * ordered.size)))
    if ordered.size < FEWEST:
        return np.nan, np.nan, np.nan
    width = ordered[part - 1 :] - ordered[: ordered.size - part + 1]
    start = int(np.argmin(width))
    chosen = ordered[start : start + part]
    level, sigma = float(chosen.mean()), float(width[start]) / 0.6372
    for _ in range(_ROUNDS):
        inner = ordered[np.abs(ordered - level) <= _CLIP * sigma]
        if inner.size < part or inner.size == chosen.size:
            break
        chosen, level, sigma = inner, float(inner.mean()), float(inner.std(ddof=1))
    return level, float(chosen.std(ddof=1)), float(chosen.size)
