"""Points of a line traverse brought onto its places: repeats averaged, gaps filled, both linear in the data."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from wakeledger.core.errors import DataError
from wakeledger.core.flags import Flag
from wakeledger.core.grid import Array
from wakeledger.intake.gridding.fill import FAR

#: Positions closer than this share of the traverse's mean spacing are one place.
SAME_PLACE = 1e-6
#: Fewest places with a usable point.
FEWEST_PLACES = 5


@dataclass(frozen=True, eq=False)
class Line:
    """How the points of a traverse come onto its places.

    Attributes
    ----------
    position : ndarray, shape (m,)
        Places in ascending order, m.
    flag : ndarray of int, shape (m,)
        Quality flags (`wakeledger.core.flags.Flag`).
    row_index : ndarray of int, shape (n,)
        Traverse row of each point.
    """

    position: Array
    flag: NDArray[np.int32]
    row_index: NDArray[np.int64]
    _usable: NDArray[np.bool_]
    _operator: Any

    @property
    def filled(self) -> NDArray[np.bool_]:
        """Places whose value is filled in, shape (m,)."""
        filled: NDArray[np.bool_] = (self.flag & Flag.MISSING.value) != 0
        return filled

    @property
    def spacing(self) -> float:
        """Median distance between places, m."""
        return float(np.median(np.diff(self.position)))

    def apply(self, values: Array) -> Array:
        """Values at the places.

        Parameters
        ----------
        values : ndarray, shape (n,)
            At the points, file order; what stands at points that are not usable is ignored.

        Returns
        -------
        ndarray, shape (m,)
        """
        result: Array = self._operator @ np.where(self._usable, values, 0.0)
        return result


def make_line(
    position: Array,
    usable: NDArray[np.bool_],
    *,
    impossible: NDArray[np.bool_] | None = None,
    row: NDArray[np.int64] | None = None,
) -> Line:
    """Put the points of a traverse in order.

    Parameters
    ----------
    position : ndarray, shape (n,)
        Position of each point along the traverse, m; any order.
    usable : ndarray of bool, shape (n,)
        Points with a usable measurement.
    impossible : ndarray of bool, shape (n,), optional
        Points that were measured but have no real flow state; only the flags need them.
    row : ndarray of int, shape (n,), optional
        Traverse row of each point; one row where not given.

    Returns
    -------
    Line
        From the first place with a usable point to the last one.

    Raises
    ------
    DataError
        If fewer than `FEWEST_PLACES` places hold a usable point.

    Notes
    -----
    A place without a usable point gets the cubic through the two usable places on either side (a parabola or a straight
    line next to an end).
    """
    order = np.argsort(position, kind="stable")
    ordered = position[order]
    grain = SAME_PLACE * float(np.ptp(position)) / max(position.size - 1, 1)
    label = np.empty(position.size, dtype=np.intp)
    label[order] = np.concatenate([[0], np.cumsum(np.diff(ordered) > grain)])
    counts = np.bincount(label[usable], minlength=int(label.max()) + 1)
    measured = np.flatnonzero(counts)
    if measured.size < FEWEST_PLACES:
        raise DataError(
            f"only {measured.size} places of the traverse hold a usable point",
            remedy=f"a section traverse needs at least {FEWEST_PLACES}, and far more to resolve the wake",
        )
    first, last = int(measured[0]), int(measured[-1])
    kept = (label >= first) & (label <= last)
    members = np.bincount(label[kept] - first)
    place = np.bincount(label[kept] - first, weights=position[kept]) / members
    counts = counts[first : last + 1]
    own = np.flatnonzero(kept & usable)
    average = sparse.csr_array(
        (1.0 / counts[label[own] - first], (label[own] - first, own)), shape=(place.size, position.size)
    )
    flag = np.zeros(place.size, dtype=np.int32)
    flag[counts > 1] |= Flag.AVERAGED.value
    flag[counts == 0] |= Flag.MISSING.value
    if impossible is not None:
        flag[np.unique(label[kept & impossible] - first)] |= Flag.NON_PHYSICAL.value
    known = np.flatnonzero(counts)
    step = float(np.median(np.diff(place)))
    operator: Any = average
    gaps = np.flatnonzero(counts == 0)
    if gaps.size:
        weights = sparse.lil_array((place.size, place.size))
        weights[known, known] = 1.0
        for gap in gaps:
            after = int(np.searchsorted(known, gap))
            near = known[max(after - 2, 0) : after + 2]
            weights[gap, near] = _lagrange(place[near], place[gap])
            if np.abs(place[known] - place[gap]).min() > FAR * step * (1 + 1e-9):
                flag[gap] |= Flag.FAR_FROM_DATA.value
        operator = weights.tocsr() @ average
    row_index = np.zeros(position.size, dtype=np.int64) if row is None else row
    return Line(place, flag, row_index, usable, operator)


def _lagrange(nodes: Array, x: float) -> Array:
    """Weights of the polynomial through the nodes, read at x."""
    difference = nodes[:, None] - nodes
    np.fill_diagonal(difference, 1.0)
    factor = np.broadcast_to(x - nodes, difference.shape).copy()
    np.fill_diagonal(factor, 1.0)
    result: Array = np.prod(factor / difference, axis=1)
    return result
