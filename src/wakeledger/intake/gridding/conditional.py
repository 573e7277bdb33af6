"""Conditional simulation of cells without a measurement: what they may hold, given the data around them.

The surface of least bending energy that fills a gap is the mean of a Gaussian field whose prior falls with exp(−E/2τ²),
E being that energy; given the data around the gap the missing cells scatter about the fill with the covariance
τ² N⁻¹, N the matrix of the energy in those cells (kriging with the thin plate's generalised covariance). Its size τ²,
and the correlation of the channels, are read from the data beside the gap: the same footprint is cut out of measured
cells, filled, and compared. What noise alone makes of that comparison is taken off, since noise is drawn elsewhere.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array
from wakeledger.intake.gridding.fill import make_gap_fill

#: Gaps that are closer than this many cells share cells of the energy's stencil and are drawn together.
_NEAR = 2
#: Cells around a footprint that take part in its fill; the fill of a gap hardly looks further.
_AROUND = 6
#: Largest gap that is simulated, cells.
MOST_CELLS = 600
#: Shifts of a footprint: this many cells beyond its own extent, along each axis and both.
_BEYOND = (1, 2)


@dataclass(frozen=True, eq=False)
class Hole:
    """Missing cells that hang together.

    Attributes
    ----------
    cells : ndarray of int, shape (n,)
        Flat indices on the lattice.
    root : ndarray, shape (n, n)
        Square root of N⁻¹.
    covariance : ndarray, shape (c, c)
        τ² of each channel and the covariance of channels, in the channels' units; NaN where no footprint fits beside.
    patterns : int
        Footprints that were compared.
    """

    cells: NDArray[np.intp]
    root: Array
    covariance: Array
    patterns: int

    @property
    def known(self) -> bool:
        """Whether the data beside the gap tell its size."""
        return bool(np.isfinite(self.covariance).all())

    def draw(self, rng: np.random.Generator) -> Array:
        """Deviations of the missing cells from their fill, shape (c, n)."""
        values, vectors = np.linalg.eigh(self.covariance)
        between = vectors * np.sqrt(np.maximum(values, 0.0))
        return np.asarray(between @ rng.standard_normal((len(self.covariance), self.cells.size)) @ self.root.T)


def find_holes(
    fields: Array, missing: NDArray[np.bool_], y: Array, z: Array, *, noise: Array | None = None
) -> tuple[Hole, ...]:
    """Gaps of a lattice and what the data beside them say about them.

    Parameters
    ----------
    fields : ndarray, shape (c, nz, ny)
        Channels, filled.
    missing : ndarray of bool, shape (nz, ny)
        Cells without a measurement.
    y, z : ndarray, shape (ny,), (nz,)
        Ascending lines of the lattice, m.
    noise : ndarray, shape (k, c, nz, ny), optional
        Draws of the noise alone, filled.

    Returns
    -------
    tuple of Hole
        Gaps of more than `MOST_CELLS` cells are left without a known size.
    """
    from scipy import ndimage

    near = ndimage.binary_dilation(missing, np.ones((3, 3), dtype=bool), iterations=_NEAR // 2)
    labels, count = ndimage.label(near, np.ones((3, 3)))
    fills: dict[tuple[Any, ...], Any] = {}
    found = []
    for number, box in enumerate(ndimage.find_objects(labels), start=1):
        inside = (labels[box] == number) & missing[box]
        iz, iy = np.nonzero(inside)
        if not iz.size:
            continue
        iz, iy = iz + box[0].start, iy + box[1].start
        found.append(_hole(fields, missing, y, z, noise, np.stack([iz, iy]), fills))
    assert count == len(found)
    return tuple(found)


def _hole(
    fields: Array,
    missing: NDArray[np.bool_],
    y: Array,
    z: Array,
    noise: Array | None,
    cells: NDArray[np.intp],
    fills: dict[tuple[Any, ...], Any],
) -> Hole:
    channels, n = len(fields), cells.shape[1]
    flat = np.ravel_multi_index((cells[0], cells[1]), missing.shape)
    unknown = Hole(flat, np.zeros((n, n)), np.full((channels, channels), np.nan), 0)
    if n > MOST_CELLS:
        return unknown
    extent = cells.max(axis=1) - cells.min(axis=1) + 1
    misfits: list[Array] = []
    by_noise: list[Array] = []
    for dz, dy in _shifts(extent):
        moved = cells + np.array([[dz], [dy]])
        if (moved < 0).any() or (moved >= np.array(missing.shape)[:, None]).any() or missing[moved[0], moved[1]].any():
            continue
        fill, normal, window = _fill(moved, missing.shape, y, z, fills)
        misfits.append(_misfit(fields, moved, fill, normal, window))
        if noise is not None:
            by_noise += [_misfit(one, moved, fill, normal, window) for one in noise]
    if len(misfits) < 2:
        return unknown
    _, normal, _ = _fill(cells, missing.shape, y, z, fills)
    root = np.linalg.inv(np.linalg.cholesky(normal)).T
    noises = np.stack(by_noise) if by_noise else np.zeros((1, channels, channels))
    return Hole(flat, root, _covariance(np.stack(misfits), noises), len(misfits))


def _covariance(misfits: Array, noises: Array) -> Array:
    """Covariance of the channels from the misfits of several footprints, (p, c, c), and of noise alone, (k, c, c).

    A gap may lie over what only some of its surroundings have, a wake that passes through or the edge of a core: each
    channel's size is that of the footprint that misses most, less what noise does on average. Where noise is all that
    the footprints show, that is as much as they leave in doubt.
    """
    excess = np.diagonal(misfits - noises.mean(axis=0), axis1=1, axis2=2)
    size = np.sqrt(np.maximum(excess.max(axis=0), 0.0))
    alone = np.sqrt(np.maximum(np.diagonal(misfits.mean(axis=0)), np.finfo(float).tiny))
    correlation = misfits.mean(axis=0) / np.outer(alone, alone)
    values, vectors = np.linalg.eigh((correlation + correlation.T) / 2)
    correlation = (vectors * np.maximum(values, 0.0)) @ vectors.T
    return np.asarray(size[:, None] * correlation * size[None, :])


def _shifts(extent: NDArray[np.intp]) -> list[tuple[int, int]]:
    """Places of the same footprint around it, the nearest first."""
    shifts = []
    for beyond in _BEYOND:
        dz, dy = int(extent[0]) + beyond - 1, int(extent[1]) + beyond - 1
        shifts += [(a * dz, b * dy) for a in (-1, 0, 1) for b in (-1, 0, 1) if a or b]
    return shifts


def _fill(
    cells: NDArray[np.intp], shape: tuple[int, ...], y: Array, z: Array, fills: dict[tuple[Any, ...], Any]
) -> tuple[Any, Array, tuple[slice, slice]]:
    """Fill of a footprint in the window around it, its energy matrix, and the window; the same one where it recurs."""
    low = np.maximum(cells.min(axis=1) - _AROUND, 0)
    high = np.minimum(cells.max(axis=1) + _AROUND + 1, shape)
    window = slice(int(low[0]), int(high[0])), slice(int(low[1]), int(high[1]))
    measured = np.ones(high - low, dtype=bool)
    measured[cells[0] - low[0], cells[1] - low[1]] = False
    lines = tuple(
        np.round(np.diff(line[part]) / np.median(np.diff(line)), 6).tobytes()
        for line, part in zip((z, y), window, strict=True)
    )
    key = (measured.shape, measured.tobytes(), lines)
    if key not in fills:
        fill = make_gap_fill(measured, y[window[1]], z[window[0]])
        fills[key] = fill, fill.energy()
    fill, normal = fills[key]
    return fill, normal, window


def _misfit(fields: Array, cells: NDArray[np.intp], fill: Any, normal: Array, window: tuple[slice, slice]) -> Array:
    """Mean square of what a fill misses in measured cells over that of a unit field: an estimate of τ².

    The square itself and not its energy is matched, because the flow is smoother than the field: the energy would be
    shared out to short waves that it does not hold, at the cost of the long ones that an integral sees.
    """
    local = fields[(slice(None), *window)].reshape(len(fields), -1)
    filled = local.copy()
    fill.into(filled)
    missed = (local - filled)[:, fill.missing]
    result: Array = missed @ missed.T / np.trace(np.linalg.inv(normal))
    return result


def drawn_deviations(holes: Sequence[Hole], rng: np.random.Generator, channels: int, shape: tuple[int, int]) -> Array:
    """One conditional draw of all gaps as deviations from their fill.

    Parameters
    ----------
    holes : sequence of Hole
        The gaps, all of known size.
    rng : numpy.random.Generator
        Where the numbers come from.
    channels : int
        Number of channels c.
    shape : (int, int)
        Shape of the lattice.

    Returns
    -------
    ndarray, shape (c, nz, ny)
        Zero in measured cells.
    """
    out = np.zeros((channels, shape[0] * shape[1]))
    for hole in holes:
        out[:, hole.cells] = hole.draw(rng)
    return out.reshape(channels, *shape)
