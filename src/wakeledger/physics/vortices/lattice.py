"""Overlapping tents on a square lattice, and the covariance of their circulations from noise.

A tent is a product of one triangle per axis, and the noise of the velocities acts through one stencil per axis. The
covariance is therefore summed first along the one axis, row by row, and then along the other; only the share with which
each square counts is no product. Nothing is written out over pairs of grid points.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations_with_replacement

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.circulation import interval_weights

Numbers = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class TentLattice:
    """Tents of one step over the squares between grid points.

    Attributes
    ----------
    along_z, along_y : ndarray, shape (a, nz − 1), (b, ny − 1)
        Triangles along each axis.
    share : ndarray, shape (nz − 1, ny − 1)
        Weight with which each square counts.
    number : ndarray of int, shape (a, b)
        Which cell the tent of each pair of triangles is; −1 where it is none.
    """

    along_z: Array
    along_y: Array
    share: Array
    number: Numbers

    @property
    def transposed(self) -> TentLattice:
        """The same with the axes exchanged."""
        return TentLattice(self.along_y, self.along_z, self.share.T, self.number.T)


def circulation_covariance(
    lattices: Sequence[TentLattice], grid: UniformGrid, variance_v: Array | float, variance_w: Array | float
) -> sparse.csr_array:
    """Covariance of the circulations of all cells from independent noise of the velocities.

    Parameters
    ----------
    lattices : sequence of TentLattice
        Their cells are numbered through.
    grid : UniformGrid
        The grid.
    variance_v, variance_w : float or ndarray, shape (nz, ny)
        Variances at the grid points, m²/s².

    Returns
    -------
    sparse array, shape (n, n)
        m⁴/s².

    Notes
    -----
    Γ_i = Σ_p t_i(p) s(p) c_p over the squares p with c = −D_z I_y v + I_z D_y w, D the difference of neighbours and I
    the integral from point to point. With white noise cov(c_p, c_q) from v is (D_z D_zᵀ)(I_y I_yᵀ), three diagonals
    along z and fifteen along y.
    """
    turned = [lattice.transposed for lattice in lattices]
    from_v = _from_velocity(lattices, _Stencil.of(grid.ny), np.asarray(variance_v, float) * grid.dy**2)
    from_w = _from_velocity(turned, _Stencil.of(grid.nz), np.asarray(variance_w, float).T * grid.dz**2)
    rows, columns, values = (np.concatenate(part) for part in zip(*from_v, *from_w, strict=True))
    count = 1 + max(int(lattice.number.max(initial=-1)) for lattice in lattices)
    return sparse.csr_array(sparse.coo_array((values, (rows, columns)), shape=(count, count)))


@dataclass(frozen=True, eq=False)
class _Stencil:
    """Integrals along an axis, shape (n − 1, n), and their products I Iᵀ, shape (n − 1, n − 1)."""

    integral: Array
    product: Array
    indices: Numbers
    starts: Numbers

    @classmethod
    def of(cls, points: int) -> _Stencil:
        integral = interval_weights(points)
        product = sparse.csr_array(integral @ integral.T)
        return cls(integral.toarray(), product.toarray(), product.indices, product.indptr)

    def reach(self, squares: slice) -> slice:
        """Squares that share a point with given ones."""
        touched = self.indices[self.starts[squares.start] : self.starts[squares.stop]]
        return slice(int(touched.min()), int(touched.max()) + 1)

    def spread(self, held: Array, squares: slice, reach: slice, variance: Array) -> tuple[Array, Array, Array]:
        """Covariance of rows of weights with every square in reach of the row below, their own and the one above."""
        if not variance.ndim:
            same = held @ (variance * self.product[squares, reach])
            return -same, 2 * same, -same
        at_points = held @ self.integral[squares]
        below, above = (at_points * part @ self.integral[reach].T for part in (variance[:-1], variance[1:]))
        return -below, below + above, -above


def _from_velocity(
    lattices: Sequence[TentLattice], stencil: _Stencil, variance: Array
) -> list[tuple[Numbers, Numbers, Array]]:
    """Entries of the covariance from the velocity along y: differences from row to row along z, integrals along y."""
    entries = []
    for first, second in combinations_with_replacement(lattices, 2):
        rows, columns, values = _between(first, second, stencil, variance)
        entries.append((rows, columns, values))
        if first is not second:
            entries.append((columns, rows, values))
    return entries


def _between(
    first: TentLattice, second: TentLattice, stencil: _Stencil, variance: Array
) -> tuple[Numbers, Numbers, Array]:
    """Entries of the covariance between the tents of two lattices."""
    count = first.along_z.shape[1]
    padded_share, padded_z = np.pad(second.share, ((1, 1), (0, 0))), np.pad(second.along_z, ((0, 0), (1, 1)))
    # Along y: for every triangle of the first lattice those of the second that its noise reaches.
    (starts_z, stops_z), (starts_y, stops_y) = _supports(first.along_z), _supports(first.along_y)
    starts_other, stops_other = _supports(second.along_y)
    pairs_y: list[tuple[int, int]] = []
    sums: list[tuple[slice, list[Array]]] = []
    for b, triangle in enumerate(first.along_y):
        kept = first.number[:, b] >= 0
        if not kept.any():
            continue
        rows = slice(int(starts_z[kept].min()), int(stops_z[kept].max()))
        squares = slice(int(starts_y[b]), int(stops_y[b]))
        reach = stencil.reach(squares)
        facing = range(
            int(np.searchsorted(stops_other, reach.start, "right")), int(np.searchsorted(starts_other, reach.stop))
        )
        here = variance if not variance.ndim else variance[rows.start : rows.stop + 1]
        spreads = stencil.spread(first.share[rows, squares] * triangle[squares], squares, reach, here)
        shares = (padded_share[rows.start + shift : rows.stop + shift, reach] for shift in range(3))
        along = second.along_y[facing.start : facing.stop, reach].T
        sums.append((rows, [spread * share @ along for spread, share in zip(spreads, shares, strict=True)]))
        pairs_y += [(b, other) for other in facing]
    # Along z: products of triangles in the same row and in neighbouring ones.
    nearby = padded_z[:, :-2] + padded_z[:, 1:-1] + padded_z[:, 2:]
    a, other_a = np.nonzero((first.along_z @ nearby.T) > 0)
    of_first = sparse.csr_array(first.along_z)[a]
    total = np.zeros((a.size, len(pairs_y)))
    for shift in range(3):
        by_row = np.zeros((count, len(pairs_y)))
        column = 0
        for rows, parts in sums:
            width = parts[shift].shape[1]
            by_row[rows, column : column + width] = parts[shift]
            column += width
        of_second = sparse.csr_array(padded_z[:, shift : shift + count])[other_a]
        total += of_first.multiply(of_second).tocsr() @ by_row
    along_first, along_second = np.array(pairs_y, dtype=np.int64).reshape(-1, 2).T
    numbers = first.number[a[:, None], along_first]
    others = second.number[other_a[:, None], along_second]
    held = (numbers >= 0) & (others >= 0) & (total != 0)
    return numbers[held], others[held], total[held]


def _supports(triangles: Array) -> tuple[Numbers, Numbers]:
    """First square of each triangle and the one behind its last."""
    held = triangles > 0
    return held.argmax(axis=1), held.shape[1] - held[:, ::-1].argmax(axis=1)
