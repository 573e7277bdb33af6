"""Many instants of one plane: mean, scatter and how many independent samples they are worth, read block by block.

A set of instants is never held in memory: it is read in blocks of at most half of `CHUNK_BYTES`, and of a block a few
instants at a time are worked on. Neighbouring instants resemble each other where the flow was sampled faster than it
changes; the mean is then known less well than the standard deviation over the root of their number says. Means of
consecutive stretches show by how much: their variance over that of independent instants, one figure for the plane.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array

#: Memory that reading a set may take: half of it for a block as it is read, the rest for the plane's own sums.
CHUNK_BYTES = 64_000_000
# Worked on at once, as numbers of double precision.
_SLICE_BYTES = 2_000_000
_STRETCHES = 64
_FEWEST_STRETCHES = 8
# Fewer points than this say too little about how alike neighbouring instants are.
_FEWEST_INSTANTS = _FEWEST_STRETCHES**2
# Within this of 1 instants pass for independent.
_INDEPENDENT = 1.1
_TIME_NAMES = frozenset({"time", "t", "instant", "instants", "snapshot", "snapshots"})


@dataclass(frozen=True)
class Instants:
    """What many instants of one quantity come to; arrays have the plane's shape.

    Attributes
    ----------
    mean, deviation : ndarray
        Mean and standard deviation, in the file's unit; NaN where no, or only one, instant has a value.
    count : ndarray of int
        Instants with a value.
    alike : float
        Variance of the mean over that of as many independent instants, at least 1; NaN where the set is too short to
        tell.
    """

    mean: Array
    deviation: Array
    count: NDArray[np.int64]
    alike: float


def time_dimension(dataset: Any, variable: Any) -> int | None:
    """Which dimension of a variable counts instants.

    Parameters
    ----------
    dataset : netCDF4.Dataset or Group
        The file.
    variable : netCDF4.Variable
        One of its variables.

    Returns
    -------
    int or None
        The dimension longer than one that is called time (or instant, snapshot), or whose coordinate variable says so
        by ``axis``, ``standard_name`` or units "… since …"; None where there is none.
    """
    for i, (name, length) in enumerate(zip(variable.dimensions, variable.shape, strict=True)):
        if length == 1:
            continue
        coordinate = dataset.variables.get(name)
        said = [str(getattr(coordinate, key, "")) for key in ("axis", "standard_name", "units")]
        if name.lower() in _TIME_NAMES or said[0] == "T" or said[1] == "time" or " since " in said[2]:
            return i
    return None


def read_instants(variable: Any, axis: int) -> Instants:
    """Mean and scatter of a variable over its instants.

    Parameters
    ----------
    variable : netCDF4.Variable
        Sliced, never read as a whole; what is masked is missing.
    axis : int
        The dimension that counts instants.

    Returns
    -------
    Instants
    """
    _limit_cache(variable, axis)
    shape = tuple(length for i, length in enumerate(variable.shape) if i != axis)
    total, stretch_total = _Sums(shape), _Sums(shape)
    shift: Array | None = None
    for stretch in _stretches(variable.shape[axis]):
        own = _Sums(shape)
        for block in _blocks(variable, axis, stretch):
            for values in block:
                if shift is None:
                    first = values[0]
                    shift = np.where(np.isfinite(first), first, 0.0)
                own.add(values - shift)
        total.join(own)
        stretch_total.add(own.mean[None])
    scatter = total.variance
    with np.errstate(divide="ignore", invalid="ignore"):
        independent = scatter / total.count
        ratio = stretch_total.variance / stretch_total.count / independent
    known = ratio[np.isfinite(ratio)]
    alike = math.nan
    if variable.shape[axis] >= _FEWEST_INSTANTS and known.size:
        # The median of a variance estimate lies below its mean.
        freedom = _stretch_count(variable.shape[axis]) - 1
        alike = float(np.median(known)) / (1 - 2 / (9 * freedom)) ** 3
        if alike < _INDEPENDENT:
            alike = 1.0
    mean = total.mean if shift is None else total.mean + shift
    return Instants(mean, np.sqrt(scatter), total.count.astype(np.int64), alike)


def _limit_cache(variable: Any, axis: int) -> None:
    """Let the library keep the pieces of the file that the next block begins in, and no more."""
    chunking = variable.chunking() if hasattr(variable, "chunking") else None
    if not isinstance(chunking, list):
        return
    instant = variable.dtype.itemsize * math.prod(variable.shape) // variable.shape[axis]
    variable.set_var_chunk_cache(size=min(2 * chunking[axis] * instant, CHUNK_BYTES // 8))


class _Sums:
    """Running sums of values and squares, missing values left out."""

    def __init__(self, shape: tuple[int, ...]) -> None:
        self.count, self.sum, self.squares = np.zeros(shape), np.zeros(shape), np.zeros(shape)

    def add(self, values: Array) -> None:
        held = np.isfinite(values)
        values = np.where(held, values, 0.0)
        self.count += held.sum(axis=0)
        self.sum += values.sum(axis=0)
        self.squares += np.einsum("i...,i...->...", values, values)

    def join(self, other: _Sums) -> None:
        self.count += other.count
        self.sum += other.sum
        self.squares += other.squares

    @property
    def mean(self) -> Array:
        result: Array = np.divide(self.sum, self.count, out=np.full(self.sum.shape, np.nan), where=self.count > 0)
        return result

    @property
    def variance(self) -> Array:
        spread = np.full(self.sum.shape, np.nan)
        several = self.count > 1
        left = self.squares[several] - self.sum[several] ** 2 / self.count[several]
        spread[several] = np.maximum(left, 0.0) / (self.count[several] - 1)
        return spread


def _stretch_count(instants: int) -> int:
    return max(1, min(_STRETCHES, math.isqrt(instants)))


def _stretches(instants: int) -> Iterator[range]:
    ends = np.linspace(0, instants, _stretch_count(instants) + 1).astype(int)
    for start, stop in pairwise(ends):
        yield range(int(start), int(stop))


def _blocks(variable: Any, axis: int, stretch: range) -> Iterator[Iterator[Array]]:
    """Blocks of a stretch of instants, each as slices of double precision with the instants first."""
    size = int(np.prod(variable.shape)) // variable.shape[axis]
    # A mask takes a byte beside each number.
    most = max(1, CHUNK_BYTES // 2 // (size * (variable.dtype.itemsize + 1)))
    for start in range(stretch.start, stretch.stop, most):
        at = [slice(None)] * len(variable.shape)
        at[axis] = slice(start, min(start + most, stretch.stop))
        yield _slices(np.moveaxis(np.ma.asarray(variable[tuple(at)]), axis, 0), max(1, _SLICE_BYTES // (8 * size)))


def _slices(block: Any, most: int) -> Iterator[Array]:
    for start in range(0, len(block), most):
        yield np.ma.filled(block[start : start + most].astype(np.float64), np.nan)
