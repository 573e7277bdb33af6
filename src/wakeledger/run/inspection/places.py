"""Which points share a place, how well they repeat, and which places were lost."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array
from wakeledger.core.points import Points
from wakeledger.intake.gridding.lattice import find_lattice
from wakeledger.intake.probe.readings import SAME_PLACE
from wakeledger.ledger.inspection import Repeats

#: Channels that do not belong to a place: readings of the stream at the moment, and the moment itself.
OF_THE_MOMENT = frozenset({"time", "reference_dynamic_pressure", "reference_static_pressure"})


@dataclass(frozen=True, eq=False)
class Places:
    """The places that points stand at.

    Attributes
    ----------
    label : ndarray of int, shape (n,)
        Place of each point.
    y, z : ndarray, shape (m,)
        Positions of the places, m.
    usable : ndarray of bool, shape (n,)
        Points with a usable measurement.
    """

    label: NDArray[np.intp]
    y: Array
    z: Array
    usable: NDArray[np.bool_]

    @property
    def lost(self) -> NDArray[np.bool_]:
        """Places without any usable point, shape (m,)."""
        return np.asarray(np.bincount(self.label[self.usable], minlength=self.y.size) == 0)

    @property
    def first(self) -> NDArray[np.bool_]:
        """The first usable point of each place, shape (n,)."""
        chosen = np.zeros(self.label.size, dtype=bool)
        usable = np.flatnonzero(self.usable)
        chosen[usable[np.unique(self.label[usable], return_index=True)[1]]] = True
        return chosen

    def repeats(self) -> Repeats:
        """Places measured more than once, and those among them that were left and visited again."""
        counts = np.bincount(self.label[self.usable], minlength=self.y.size)
        many = counts > 1
        if not many.any():
            return Repeats()
        chosen = np.flatnonzero(self.usable & many[self.label])
        # In the order of the file, of each place.
        order = chosen[np.argsort(self.label[chosen], kind="stable")]
        label = self.label[order]
        again = (np.diff(label) == 0) & (np.diff(order) > 1)
        return Repeats(int(many.sum()), chosen.size, np.unique(label[1:][again]).size)

    def repeatability(self, points: Points) -> dict[str, float]:
        """Standard deviation of each variable at one place, pooled over all places with several usable values.

        Parameters
        ----------
        points : Points
            The points, in the same order.

        Returns
        -------
        dict of str to float
            √(Σ (x − x̄)²/(points − places)), x̄ being the mean of the place; variables without repeats are left out.
        """
        found = {}
        for name, channel in points.channels.items():
            array = channel.values
            if name in OF_THE_MOMENT:
                continue
            known = self.usable & np.isfinite(array)
            counts = np.bincount(self.label[known], minlength=self.y.size)
            known &= counts[self.label] > 1
            freedom = int(known.sum()) - int(np.count_nonzero(counts > 1))
            if freedom < 1:
                continue
            label, x = self.label[known], array[known]
            mean = np.bincount(label, weights=x, minlength=self.y.size) / np.maximum(counts, 1)
            found[name] = float(np.sqrt(np.sum((x - mean[label]) ** 2) / freedom))
        return found


def places_of(points: Points, usable: NDArray[np.bool_], spacing: tuple[float, float]) -> Places:
    """Sort the points of a plane into places.

    Parameters
    ----------
    points : Points
        The points as read.
    usable : ndarray of bool, shape (n,)
        Points with a usable measurement.
    spacing : (float, float)
        Typical spacing along y and z, m.

    Returns
    -------
    Places
        Of points on a tensor grid, its nodes, those that no point was taken at included, between the outermost lines
        that hold a usable point; else points within 2 % of the spacing are at one place.
    """
    lattice = find_lattice(points.y, points.z)
    if lattice is not None:
        zz, yy = np.meshgrid(lattice.z, lattice.y, indexing="ij")
        label = np.asarray(lattice.iz * lattice.y.size + lattice.iy, dtype=np.intp)
        within = np.ones(yy.shape, dtype=bool)
        for lines, axis in ((lattice.iz[usable], 0), (lattice.iy[usable], 1)):
            at = np.arange(yy.shape[axis])
            inside = (at >= lines.min()) & (at <= lines.max())
            within &= inside[:, None] if axis == 0 else inside[None, :]
        # A node beyond them counts only where a point was taken: nobody meant to measure the others.
        kept = within.ravel()
        kept[label] = True
        number = np.cumsum(kept) - 1
        return Places(number[label], yy.ravel()[kept], zz.ravel()[kept], usable)
    return _clustered(points.y, points.z, usable, (spacing[0], spacing[1]))


def places_of_line(points: Points, position: Array, usable: NDArray[np.bool_], spacing: float) -> Places:
    """Sort the points of a line traverse into places.

    Parameters
    ----------
    points : Points
        The points as read.
    position : ndarray, shape (n,)
        Their positions along the traverse, m.
    usable : ndarray of bool, shape (n,)
        Points with a usable measurement.
    spacing : float
        Typical spacing, m.

    Returns
    -------
    Places
    """
    return _clustered(points.y, points.z, usable, (spacing, spacing), position=position)


def _clustered(
    y: Array, z: Array, usable: NDArray[np.bool_], spacing: tuple[float, float], *, position: Array | None = None
) -> Places:
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components
    from scipy.spatial import cKDTree

    scaled = np.column_stack([y / spacing[0], z / spacing[1]] if position is None else [position / spacing[0]])
    pairs = cKDTree(scaled).query_pairs(SAME_PLACE, output_type="ndarray")
    graph = coo_array((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(y.size, y.size))
    label = connected_components(graph, directed=False)[1].astype(np.intp)
    count = np.bincount(label)
    return Places(
        label, np.bincount(label, weights=y) / count, np.bincount(label, weights=z) / count, np.asarray(usable)
    )
