"""Points on a tensor grid: placed, averaged, gaps filled, resampled by splines where the lines are not uniform."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from wakeledger.core.errors import DataError
from wakeledger.core.flags import Flag
from wakeledger.core.grid import Array, UniformGrid
from wakeledger.intake.gridding.fill import FAR, GapFill, distance_to_data, make_gap_fill
from wakeledger.intake.gridding.lattice import Lattice
from wakeledger.intake.gridding.record import Gridding

#: Lines off their uniform places by less than this share of the spacing count as uniform.
UNIFORM = 0.01
#: Fewest rows and columns of a survey; after decimation.
FEWEST_LINES = 5
_FEWEST_DECIMATED = 4
#: Least share of the decimated places that must carry a usable point.
_LEAST_DECIMATED = 0.25
#: The spacing that this percentage of the raw intervals stays below is taken as the finest one.
_FINEST_PERCENT = 5.0


@dataclass(frozen=True, eq=False)
class TensorScheme:
    """Placement on the raw grid, gap filling and separable resampling.

    Attributes
    ----------
    lattice : Lattice
        Lines that are used; points on no line carry -1.
    usable : ndarray of bool, shape (n,)
        Points with a usable measurement.
    grid : UniformGrid
        The grid that is filled.
    wy, wz : ndarray or None
        Resampling along y, shape (ny, nc), and z, shape (nz, nr); None for a kept axis.
    """

    lattice: Lattice
    usable: NDArray[np.bool_]
    row_index: NDArray[np.int64]
    degree: int
    grid: UniformGrid
    wy: Array | None
    wz: Array | None
    _gather: NDArray[np.intp]
    _repeated: NDArray[np.intp]
    _mean: Any
    _gaps: GapFill

    def fields(self, values: Array) -> Array:
        """Grid values of shape (draws, n) to (draws, nz, ny)."""
        return self.resampled(self.lattice_fields(values))

    def lattice_fields(self, values: Array) -> Array:
        """Values of shape (draws, n) on the lattice, gaps filled, (draws, nr, nc)."""
        raw = values[:, self._gather]
        if self._repeated.size:
            raw[:, self._repeated] = (self._mean @ values.T).T
        self._gaps.into(raw)
        return raw.reshape(-1, self.lattice.z.size, self.lattice.y.size)

    @property
    def missing(self) -> NDArray[np.bool_]:
        """Places of the lattice without a measurement, shape (nr, nc)."""
        found = np.zeros(self._gather.size, dtype=bool)
        found[self._gaps.missing] = True
        return found.reshape(self.lattice.z.size, self.lattice.y.size)

    def resampled(self, fields: Array) -> Array:
        """Lattice fields, (draws, nr, nc), on the grid, (draws, nz, ny)."""
        if self.wy is not None:
            fields = fields @ self.wy.T
        if self.wz is not None:
            fields = self.wz @ fields
        return fields

    def transposed(self, weights: Array) -> Array:
        """Weights of the points, (k, n), from weights of the cells, (k, nz, ny)."""
        if self.wz is not None:
            weights = self.wz.T @ weights
        if self.wy is not None:
            weights = weights @ self.wy
        raw = weights.reshape(weights.shape[0], -1).copy()
        self._gaps.back(raw)
        cell, off = self._cell_of_point
        result = raw if cell is None else raw.take(cell, axis=1)
        result[:, off] = 0.0
        if self._repeated.size:
            result += (self._mean.T @ raw[:, self._repeated].T).T
        return result

    @cached_property
    def _cell_of_point(self) -> tuple[NDArray[np.intp] | None, NDArray[np.intp]]:
        """Cell that each point alone gives its value to, None where points and cells agree; points that give none."""
        single = np.ones(self._gather.size, dtype=bool)
        single[self._gaps.missing] = single[self._repeated] = False
        alone = np.full(self.usable.size, -1, dtype=np.intp)
        alone[self._gather[single]] = np.flatnonzero(single)
        off = np.flatnonzero(alone < 0)
        same = alone.size == single.size and not off.size and bool(np.all(alone == np.arange(alone.size)))
        return None if same else np.maximum(alone, 0), off

    def operators(self) -> tuple[Array, Array]:
        """Dense operators along z and y, identities for kept axes."""
        wz = np.eye(self.lattice.z.size) if self.wz is None else self.wz
        wy = np.eye(self.lattice.y.size) if self.wy is None else self.wy
        return wz, wy

    def near(self, points: NDArray[np.bool_]) -> NDArray[np.bool_]:
        """Cells whose nearest raw node carries one of the points."""
        lattice = self.lattice
        raw = np.zeros((lattice.z.size, lattice.y.size), dtype=bool)
        chosen = points & (lattice.iy >= 0) & (lattice.iz >= 0)
        raw[lattice.iz[chosen], lattice.iy[chosen]] = True
        return raw[np.ix_(_nearest(self.grid.z, lattice.z), _nearest(self.grid.y, lattice.y))]

    def decimated(self, step: int, phase: tuple[int, int]) -> Gridding:
        """The same with every `step`-th row and column only."""
        resampled = self.wy is not None or self.wz is not None
        iz = _every(self.lattice.z.size, step, phase[0], ends=resampled)
        iy = _every(self.lattice.y.size, step, phase[1], ends=resampled)
        if min(iz.size, iy.size) < _FEWEST_DECIMATED:
            raise DataError(
                f"every {step}. row and column leaves {iz.size} rows and {iy.size} columns",
                remedy=f"at least {_FEWEST_DECIMATED} are needed",
            )
        lattice = _subset(self.lattice, iy, iz)
        share = np.count_nonzero(self.usable & (lattice.iy >= 0) & (lattice.iz >= 0)) / (iz.size * iy.size)
        if share < _LEAST_DECIMATED:
            raise DataError(
                f"every {step}. row and column leaves usable points at {share:.0%} of the places",
                remedy=f"at least {_LEAST_DECIMATED:.0%} are needed",
            )
        grid = self.grid if resampled else UniformGrid(*_uniform_axes(lattice))
        return build(lattice, self.usable, self.row_index, grid=grid, degree=self.degree, resampled=resampled)


def make_tensor(
    lattice: Lattice,
    usable: NDArray[np.bool_],
    row_index: NDArray[np.int64],
    *,
    spacing: tuple[float, float] | None,
    degree: int,
    max_cells: int,
) -> Gridding:
    """Grid points that stand on a lattice.

    Parameters
    ----------
    lattice : Lattice
        Where they stand.
    usable : ndarray of bool, shape (n,)
        Points with a usable measurement.
    row_index : ndarray of int, shape (n,)
        Traverse row of each point.
    spacing : (float, float) or None
        Largest spacing of the grid along y and z, m; None for the raw one (its finest part where it is not uniform).
    degree : {3, 5}
        Degree of the splines.
    max_cells : int
        Most cells of a resampled grid.

    Returns
    -------
    Gridding

    Raises
    ------
    DataError
        If fewer than 5 rows or columns hold a usable point.
    """
    lattice = _trimmed(lattice, usable)
    if min(lattice.z.size, lattice.y.size) < FEWEST_LINES:
        raise DataError(
            f"the points with a usable measurement stand on {lattice.z.size} row(s) of constant z and "
            f"{lattice.y.size} column(s) of constant y",
            remedy=f"a plane needs at least {FEWEST_LINES} x {FEWEST_LINES}",
        )
    grid, resampled = _target_grid(lattice, spacing, max_cells)
    return build(lattice, usable, row_index, grid=grid, degree=degree, resampled=resampled)


def build(
    lattice: Lattice,
    usable: NDArray[np.bool_],
    row_index: NDArray[np.int64],
    *,
    grid: UniformGrid,
    degree: int,
    resampled: bool,
) -> Gridding:
    """Work out placement, filling and resampling from a lattice onto a grid.

    Parameters
    ----------
    lattice, usable, row_index
        As in `make_tensor`.
    grid : UniformGrid
        The target.
    degree : int
        Degree of the splines.
    resampled : bool
        False where the lattice is the grid.

    Returns
    -------
    Gridding
    """
    shape = (lattice.z.size, lattice.y.size)
    placed = np.flatnonzero(usable & (lattice.iy >= 0) & (lattice.iz >= 0))
    cell = lattice.iz[placed] * shape[1] + lattice.iy[placed]
    count = np.bincount(cell, minlength=shape[0] * shape[1])
    order = np.argsort(cell, kind="stable")
    gather = np.zeros(shape[0] * shape[1], dtype=np.intp)
    gather[cell[order][::-1]] = placed[order][::-1]
    repeated = np.flatnonzero(count > 1)
    measured = (count > 0).reshape(shape)
    wy = wz = None
    if resampled:
        wy = _resampling(lattice.y, grid.y, grid.dy, degree)
        wz = _resampling(lattice.z, grid.z, grid.dz, degree)
    scheme = TensorScheme(
        lattice=lattice,
        usable=usable,
        row_index=row_index,
        degree=degree,
        grid=grid,
        wy=wy,
        wz=wz,
        _gather=gather,
        _repeated=repeated,
        _mean=_means(cell, placed, repeated, count, usable.size),
        _gaps=make_gap_fill(measured, lattice.y, lattice.z),
    )
    nearest_z, nearest_y = _nearest(grid.z, lattice.z), _nearest(grid.y, lattice.y)
    raw_flag = np.zeros(shape, dtype=np.int32)
    raw_flag[~measured] |= Flag.MISSING.value
    raw_flag[count.reshape(shape) > 1] |= Flag.AVERAGED.value
    if not measured.all():
        raw_flag[distance_to_data(measured) > FAR] |= Flag.FAR_FROM_DATA.value
    flag = raw_flag[np.ix_(nearest_z, nearest_y)]
    between_z = np.abs(grid.z - lattice.z[nearest_z]) > UNIFORM * grid.dz
    between_y = np.abs(grid.y - lattice.y[nearest_y]) > UNIFORM * grid.dy
    if resampled:
        flag[between_z[:, None] | between_y[None, :]] |= Flag.INTERPOLATED.value
    filled = (flag & Flag.MISSING.value) != 0
    return Gridding(
        grid=grid,
        kind="tensor" if resampled else "uniform",
        flag=flag,
        filled=filled,
        filled_fraction=float(filled.mean()),
        raw_spacing=(float(np.median(np.diff(lattice.y))), float(np.median(np.diff(lattice.z)))),
        raw_shape=shape,
        row_index=row_index,
        scheme=scheme,
    )


def _means(
    cell: NDArray[np.intp], placed: NDArray[np.intp], repeated: NDArray[np.intp], count: NDArray[np.intp], n: int
) -> Any:
    member = np.isin(cell, repeated)
    rows = np.searchsorted(repeated, cell[member])
    return sparse.csr_array((1.0 / count[cell[member]], (rows, placed[member])), shape=(repeated.size, n))


def _trimmed(lattice: Lattice, usable: NDArray[np.bool_]) -> Lattice:
    """Without outer lines on which nothing usable was measured."""
    iy = np.unique(lattice.iy[usable])
    iz = np.unique(lattice.iz[usable])
    return _subset(lattice, np.arange(iy[0], iy[-1] + 1), np.arange(iz[0], iz[-1] + 1))


def _subset(lattice: Lattice, iy: NDArray[np.intp], iz: NDArray[np.intp]) -> Lattice:
    def renumber(index: NDArray[np.intp], kept: NDArray[np.intp], size: int) -> NDArray[np.intp]:
        table = np.full(size + 1, -1, dtype=np.intp)
        table[kept] = np.arange(kept.size)
        return table[index]

    return Lattice(
        lattice.y[iy],
        lattice.z[iz],
        renumber(lattice.iy, iy, lattice.y.size),
        renumber(lattice.iz, iz, lattice.z.size),
    )


def _every(size: int, step: int, phase: int, *, ends: bool) -> NDArray[np.intp]:
    chosen = np.arange(phase, size, step)
    return np.union1d(chosen, [0, size - 1]).astype(np.intp) if ends else chosen


def _nearest(x: Array, lines: Array) -> NDArray[np.intp]:
    return np.searchsorted((lines[1:] + lines[:-1]) / 2, x)


def _is_uniform(lines: Array) -> bool:
    step = (lines[-1] - lines[0]) / (lines.size - 1)
    start, slope = _straight(lines)
    return bool(np.abs(start + slope * np.arange(lines.size) - lines).max() <= UNIFORM * step)


def _straight(lines: Array) -> tuple[float, float]:
    """First line and spacing of uniform lines; from the outermost two unless positions scatter visibly."""
    step = float((lines[-1] - lines[0]) / (lines.size - 1))
    if np.abs(lines[0] + step * np.arange(lines.size) - lines).max() <= 1e-6 * step:
        return float(lines[0]), step
    slope, start = np.polyfit(np.arange(lines.size), lines, 1)
    return float(start), float(slope)


def _uniform_axes(lattice: Lattice) -> tuple[float, float, float, float, int, int]:
    y0, dy = _straight(lattice.y)
    z0, dz = _straight(lattice.z)
    return y0, z0, dy, dz, lattice.y.size, lattice.z.size


def _target_grid(lattice: Lattice, spacing: tuple[float, float] | None, max_cells: int) -> tuple[UniformGrid, bool]:
    axes = (lattice.y, lattice.z)
    kept = [_is_uniform(lines) for lines in axes]
    counts, free = [], []
    for lines, uniform, limit in zip(axes, kept, spacing or (None, None), strict=True):
        steps = np.diff(lines)
        own = _straight(lines)[1] if uniform else float(np.percentile(steps, _FINEST_PERCENT))
        wanted = own if limit is None else limit
        if uniform:
            # Whole subdivisions, so that every measured line is a line of the grid.
            counts.append((lines.size - 1) * max(1, math.ceil(own / wanted - UNIFORM)) + 1)
        else:
            counts.append(math.ceil((lines[-1] - lines[0]) / wanted * (1 - 1e-9)) + 1)
        free.append(counts[-1] > lines.size or not uniform)
    if not any(free):
        return UniformGrid(*_uniform_axes(lattice)), False
    excess = counts[0] * counts[1] / max_cells
    if excess > 1:
        for k, lines in enumerate(axes):
            if free[k]:
                reduced = counts[k] / (math.sqrt(excess) if all(free) else excess)
                counts[k] = max(int(reduced), min(counts[k], lines.size))
    (y0, dy), (z0, dz) = (
        _straight(lines) if count == lines.size and uniform else (float(lines[0]), float(np.ptp(lines)) / (count - 1))
        for lines, count, uniform in zip(axes, counts, kept, strict=True)
    )
    return UniformGrid(y0, z0, dy, dz, counts[0], counts[1]), True


def _resampling(lines: Array, x: Array, step: float, degree: int) -> Array | None:
    """Spline interpolation from lines to x as a matrix, shape (x.size, lines.size); None where they coincide."""
    from scipy.interpolate import make_interp_spline

    if lines.size == x.size and np.abs(lines - x).max() <= UNIFORM * step * (1 + 1e-9):
        return None
    order = min(degree, lines.size - 1)
    order -= 1 - order % 2
    return np.asarray(make_interp_spline(lines, np.eye(lines.size), k=order)(x), dtype=float)
