"""A survey on one side of a reflection plane, gridded as the whole that the plane makes of it.

Every point has a twin on the other side of the plane, where the velocity normal to the plane has the other sign and
everything else the same value. The whole is gridded, so that differences, line integrals and splines cross the plane as
they cross any other line, and a gap next to it (an inboard cut) is filled from both sides. An error of a point is an
error of its twin: values stay those of the n points of the file.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import DataError
from wakeledger.core.flags import Flag
from wakeledger.core.grid import Array
from wakeledger.intake.gridding.lattice import find_lattice
from wakeledger.intake.gridding.record import Gridding

#: Points closer to the plane than this share of the spacing stand on it.
ON_PLANE = 0.02
#: The gap to the plane is a number of half spacings within this share of one.
_WHOLE = 0.05
#: Most lines that are put into that gap.
_MOST_LINES = 200


@dataclass(frozen=True, eq=False)
class Mirror:
    """How values at the points of one half become values at the places of the whole.

    Attributes
    ----------
    axis : {"y", "z"}
        The plane y = 0 or z = 0; points lie on its positive side.
    on_plane : ndarray of bool, shape (n,)
        Points that stand on the plane and have no twin.
    spare : int
        Places in the gap next to the plane, without a measurement.
    """

    axis: Literal["y", "z"]
    on_plane: NDArray[np.bool_]
    spare: int

    @property
    def n(self) -> int:
        """Number of points of the half."""
        return int(self.on_plane.size)

    def values(self, values: Array, *, odd: bool = False) -> Array:
        """Values at every place of the whole.

        Parameters
        ----------
        values : ndarray, shape (..., n)
            At the points of the half.
        odd : bool
            Whether the quantity changes its sign at the plane, as the velocity normal to it does; it is then zero on
            the plane.

        Returns
        -------
        ndarray, shape (..., 2 n + spare)
        """
        own, twin = values, values
        if odd:
            own, twin = np.where(self.on_plane, 0.0, values), -values
        return np.concatenate([own, twin, np.full((*values.shape[:-1], self.spare), np.nan)], axis=-1)

    def transposed(self, weights: Array, *, odd: bool = False) -> Array:
        """Weights of the points of the half, (..., n), from those of the places of the whole, (..., 2 n + spare)."""
        own, twin = weights[..., : self.n], weights[..., self.n : 2 * self.n]
        return np.where(self.on_plane, 0.0, own) - twin if odd else own + twin

    def points(self, chosen: NDArray[np.bool_]) -> NDArray[np.bool_]:
        """Chosen points of the half, shape (n,), and their twins, shape (2 n + spare,)."""
        return np.concatenate([chosen, chosen & ~self.on_plane, np.zeros(self.spare, dtype=bool)])

    def operators(self, along_z: Array, along_y: Array, *, odd: bool) -> tuple[Array, Array]:
        """Operators of the whole's lattice on which only the lines of one half have weight.

        Parameters
        ----------
        along_z, along_y : ndarray, shape (nz, nr), (ny, nc)
            As `Gridding.operators` gives them for the whole; its lines lie symmetrically.
        odd : bool
            Whether the quantity changes its sign at the plane.

        Returns
        -------
        (ndarray, ndarray)
            Shapes as given; the columns of the mirrored half are zero.
        """
        folded = along_y if self.axis == "y" else along_z
        count = folded.shape[1]
        half = count // 2
        result = folded.copy()
        result[:, count - half :] += (-1.0 if odd else 1.0) * folded[:, :half][:, ::-1]
        result[:, :half] = 0.0
        if odd and count % 2:
            result[:, half] = 0.0
        return (along_z, result) if self.axis == "y" else (result, along_y)


def make_mirrored(
    make: Callable[..., Gridding],
    y: Array,
    z: Array,
    usable: NDArray[np.bool_],
    row: NDArray[np.integer] | None,
    *,
    axis: Literal["y", "z"],
) -> Gridding:
    """Grid the whole that a reflection plane makes of a half.

    Parameters
    ----------
    make : callable
        Grids places: ``make(y, z, usable, row)``, as `wakeledger.intake.gridding.make_gridding` does.
    y, z : ndarray, shape (n,)
        Points of the half, m.
    usable : ndarray of bool, shape (n,)
        Those with a usable measurement.
    row : ndarray of int, shape (n,), or None
        Traverse row of each point.
    axis : {"y", "z"}
        The plane y = 0 or z = 0.

    Returns
    -------
    Gridding
        For the n values of the half, on a grid of the whole; places nearer to the plane than any usable point are
        flagged as missing and count as filled.

    Raises
    ------
    DataError
        If a point lies on the other side of the plane, or the half cannot be gridded.
    """
    across = y if axis == "y" else z
    spacing = _spacing(y, z, across)
    beyond = across < -ON_PLANE * spacing
    if beyond.any():
        side = "starboard of" if axis == "y" else "above"
        raise DataError(
            f"{np.count_nonzero(beyond)} of {across.size} points lie across the reflection plane {axis} = 0, the"
            f" farthest at {axis} = {across.min():.4g} m",
            remedy=f"survey {side} the plane only and check [plane.axes], or leave [boundary] reflection out",
        )
    on_plane = across <= ON_PLANE * spacing
    own, twin = np.where(on_plane, 0.0, across), np.where(on_plane, 0.0, -across)
    along = z if axis == "y" else y
    spare_across, spare_along = _gap_places(y, z, own, spacing, axis)
    all_across = np.concatenate([own, twin, spare_across])
    all_along = np.concatenate([along, along, spare_along])
    mirror = Mirror(axis, on_plane, spare_across.size)
    order = (all_across, all_along) if axis == "y" else (all_along, all_across)
    rows = None if row is None else np.concatenate([row, row, np.full(spare_across.size, int(np.max(row)) + 1)])
    whole = make(*order, mirror.points(usable), rows)
    return replace(_gap_flagged(whole, own[usable], axis), mirror=mirror, row_index=whole.row_index[: y.size])


def _spacing(y: Array, z: Array, across: Array) -> float:
    """Typical distance of the lines across the plane; of the points where there are no lines, m."""
    lattice = find_lattice(y, z)
    if lattice is not None:
        lines = lattice.y if across is y else lattice.z
        if lines.size > 1:
            return float(np.median(np.diff(lines)))
    return float(np.sqrt(np.ptp(y) * np.ptp(z) / max(y.size, 1)))


def _gap_places(y: Array, z: Array, own: Array, spacing: float, axis: str) -> tuple[Array, Array]:
    """Lattice places between the plane and the first line, where the lines stand evenly on both sides of it."""
    nothing = np.zeros(0), np.zeros(0)
    lattice = find_lattice(y, z)
    if lattice is None:
        return nothing
    lines, others = (lattice.y, lattice.z) if axis == "y" else (lattice.z, lattice.y)
    first = float(own.min())
    halves = 2 * first / spacing
    number = round(halves)
    if number < 2 or number > _MOST_LINES or abs(halves - number) > _WHOLE or lines.size < 2:
        return nothing
    inner = np.linspace(-first, first, number + 1)[1:-1]
    across, along = np.meshgrid(inner, others)
    return across.ravel(), along.ravel()


def _gap_flagged(gridding: Gridding, measured: Array, axis: str) -> Gridding:
    """Cells nearer to the plane than any usable point are filled, and not outside of the window."""
    grid = gridding.grid
    lines, step = (grid.y, grid.dy) if axis == "y" else (grid.z, grid.dz)
    inside = np.abs(lines) < float(measured.min()) - step / 2
    cells = np.broadcast_to(inside if axis == "y" else inside[:, None], grid.shape)
    if not cells.any():
        return gridding
    flag = np.where(cells, (gridding.flag & ~np.int32(Flag.FAR_FROM_DATA)) | np.int32(Flag.MISSING), gridding.flag)
    filled = gridding.filled | cells
    return replace(gridding, flag=flag, filled=filled, filled_fraction=float(filled.mean()))
