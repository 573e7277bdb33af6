"""A gridding: how values at points become fields on the uniform grid, worked out once and applied to many."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Protocol

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array, UniformGrid

if TYPE_CHECKING:
    from wakeledger.intake.gridding.mirror import Mirror


class Scheme(Protocol):
    """What a way of gridding must be able to do."""

    def fields(self, values: Array) -> Array:
        """Grid values of shape (draws, n) to (draws, nz, ny)."""

    def transposed(self, weights: Array) -> Array:
        """Weights of the points, (k, n), from weights of the cells, (k, nz, ny): the transpose of `fields`."""

    def operators(self) -> tuple[Array, Array] | None:
        """Dense operators along z and y, None where gridding does not separate."""

    def near(self, points: NDArray[np.bool_]) -> NDArray[np.bool_]:
        """Cells whose nearest point is among the given ones, shape (nz, ny)."""

    def decimated(self, step: int, phase: tuple[int, int]) -> Gridding:
        """The same with every `step`-th row and column only."""


@dataclass(frozen=True, eq=False)
class Gridding:
    """From values at n points to fields on a uniform grid; linear in the values.

    Attributes
    ----------
    grid : UniformGrid
        The grid.
    kind : {"uniform", "tensor", "scattered"}
        Points on this very grid; on a tensor grid that is resampled by splines; anywhere.
    flag : ndarray of int32, shape (nz, ny)
        `wakeledger.core.flags.Flag` of each cell.
    filled : ndarray of bool, shape (nz, ny)
        Cells without a measurement, filled from their surroundings.
    filled_fraction : float
        Share of the cells that are filled.
    raw_spacing : (float, float)
        Typical spacing of the points along y and z, m.
    raw_shape : (int, int)
        Rows and columns of the raw tensor grid (nr, nc); for scattered points (1, number of places).
    row_index : ndarray of int, shape (n,)
        Traverse row of each point.
    mirror : Mirror or None
        Where the points are one half and the grid is the whole's (`wakeledger.intake.gridding.mirror`).
    """

    grid: UniformGrid
    kind: str
    flag: NDArray[np.int32]
    filled: NDArray[np.bool_]
    filled_fraction: float
    raw_spacing: tuple[float, float]
    raw_shape: tuple[int, int]
    row_index: NDArray[np.int64]
    scheme: Scheme
    mirror: Mirror | None = None

    @property
    def n(self) -> int:
        """Number of points."""
        return int(self.row_index.size)

    def apply(self, values: Array, *, odd: bool = False) -> Array:
        """Grid values at the points.

        Parameters
        ----------
        values : ndarray, shape (..., n)
            Values in file order. What stands at unusable points is ignored, NaN included.
        odd : bool, optional
            Whether the quantity changes its sign at the reflection plane; without one it makes no difference.

        Returns
        -------
        ndarray, shape (..., nz, ny)
            Fields on `grid`.

        Raises
        ------
        ValueError
            If the last axis is not the points'.
        """
        array = np.asarray(values, dtype=np.float64)
        if array.ndim < 1 or array.shape[-1] != self.n:
            raise ValueError(f"values have shape {array.shape}, the last axis must hold the {self.n} points")
        flat = array.reshape(-1, self.n)
        fields = self.scheme.fields(flat if self.mirror is None else self.mirror.values(flat, odd=odd))
        return fields.reshape(*array.shape[:-1], *self.grid.shape)

    def transposed(self, weights: Array, *, odd: bool = False) -> Array:
        """How a weighted sum over the grid depends on the values at the points: the transpose of `apply`.

        Parameters
        ----------
        weights : ndarray, shape (..., nz, ny)
            Weight of each cell.
        odd : bool, optional
            As in `apply`.

        Returns
        -------
        ndarray, shape (..., n)
            Σ weights apply(values) = Σ transposed(weights) values for every set of values; zero at unusable points.

        Raises
        ------
        ValueError
            If the last axes are not the grid's.
        """
        array = np.asarray(weights, dtype=np.float64)
        if array.shape[-2:] != self.grid.shape:
            raise ValueError(f"weights have shape {array.shape}, the last axes must be the grid's {self.grid.shape}")
        back = self.scheme.transposed(array.reshape(-1, *self.grid.shape))
        if self.mirror is not None:
            back = self.mirror.transposed(back, odd=odd)
        return back.reshape(*array.shape[:-2], self.n)

    def is_odd(self, component: str) -> bool:
        """Whether a velocity component, "u", "v" or "w", is the one normal to the reflection plane."""
        return self.mirror is not None and component == {"y": "v", "z": "w"}[self.mirror.axis]

    def operators(self, *, odd: bool = False) -> tuple[Array, Array] | None:
        """Separable resampling, field = Wz @ raw @ Wy.T.

        Parameters
        ----------
        odd : bool, optional
            As in `apply`.

        Returns
        -------
        (ndarray, ndarray) or None
            Wz of shape (nz, nr) and Wy of shape (ny, nc), identities where the raw axis is kept; None for scattered
            points.
        """
        operators = self.scheme.operators()
        if operators is None or self.mirror is None:
            return operators
        return self.mirror.operators(*operators, odd=odd)

    def near(self, points: NDArray[np.bool_]) -> NDArray[np.bool_]:
        """Cells that stand for given points, to carry a flag from points to cells.

        Parameters
        ----------
        points : ndarray of bool, shape (n,)
            True at the points in question.

        Returns
        -------
        ndarray of bool, shape (nz, ny)
            Cells whose nearest point (or raw node) is among them.
        """
        chosen = np.asarray(points, dtype=bool)
        return self.scheme.near(chosen if self.mirror is None else self.mirror.points(chosen))

    def decimated(self, step: int, *, phase: tuple[int, int] = (0, 0)) -> Gridding:
        """Grid with every `step`-th row and column of the raw points only, to see what resolution costs.

        Parameters
        ----------
        step : int
            At least 1.
        phase : (int, int), optional
            Row and column (z, y) to begin with, each from 0 to step - 1.

        Returns
        -------
        Gridding
            For the same n values. Uniform: on its own coarser grid. Tensor: splines from the fewer lines onto the same
            grid (the outermost lines are kept). Scattered: every `step`-th place, ordered by z then y, onto the same
            grid; only phase[1] counts.

        Raises
        ------
        ValueError
            If step or phase is out of range.
        DataError
            If too few rows, columns or places remain.
        """
        if step < 1 or not all(0 <= start < step for start in phase):
            raise ValueError(f"step must be at least 1 and phase within 0 ... step - 1, {step} and {phase} were given")
        coarse = self.scheme.decimated(step, phase)
        return replace(coarse, mirror=self.mirror, row_index=self.row_index)
