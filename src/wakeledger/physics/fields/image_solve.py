"""Free-space solves of a vorticity field together with its images in planes along the axes.

An image is the window's vorticity mirrored or moved: a source at (y, z) acts as `sign` times one at (p y + s, q z + t)
with p, q = ±1. Direct and moved images are convolutions of the window's vorticity, mirrored ones convolutions of its
reversed copy, whose transform is the same spectrum read backwards: any number of images costs one forward and one
backward transform. Weights are those of the free-space solve itself, at offsets between the grid's points where need
be, so that a half window with its image gives the whole window's solution to rounding.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.poisson import _truncated_logarithm, green_weights

Complex = NDArray[np.complexfloating[Any, Any]]

#: With images in walls, the spectral weights pass smoothly into the plain logarithm between these numbers of cells: a
#: sharp change would cost 1e-5.
_BLEND = (32, 128)


@dataclass(frozen=True)
class Image:
    """One image: y → turn_y·y + shift_y, z → turn_z·z + shift_z, circulation times sign.

    Attributes
    ----------
    turn_y, turn_z : int
        +1 or −1.
    shift_y, shift_z : float
        m.
    sign : float
        Factor on the circulation.
    distant : bool
        Whether it lies so many cells away from the window that a smooth field acts by the plain logarithm.
    """

    turn_y: int = 1
    shift_y: float = 0.0
    turn_z: int = 1
    shift_z: float = 0.0
    sign: float = 1.0
    distant: bool = field(default=False, compare=False)

    def after(self, first: Image) -> Image:
        """The image, by this one, of another image."""
        return Image(
            self.turn_y * first.turn_y,
            self.turn_y * first.shift_y + self.shift_y,
            self.turn_z * first.turn_z,
            self.turn_z * first.shift_z + self.shift_z,
            self.sign * first.sign,
            self.distant or first.distant,
        )

    def of(self, y: Array, z: Array) -> tuple[Array, Array]:
        """Places of the image of sources at (y, z), m."""
        return self.turn_y * y + self.shift_y, self.turn_z * z + self.shift_z


#: The vorticity itself.
ITSELF = Image()


def mirror(axis: str, *, at: float = 0.0, sign: float = -1.0) -> Image:
    """The image in the plane y = `at` or z = `at`; a solid plane reverses the circulation."""
    return Image(-1, 2 * at, 1, 0.0, sign) if axis == "y" else Image(1, 0.0, -1, 2 * at, sign)


@dataclass(frozen=True, eq=False)
class ImageSolve:
    """Transforms of the images' weights on the doubled window, by how the window's copy is turned.

    Attributes
    ----------
    grid : UniformGrid
        The window.
    kernels : dict of (int, int) to ndarray of complex, shape (mz, my // 2 + 1)
        By (turn_y, turn_z).
    """

    grid: UniformGrid
    kernels: dict[tuple[int, int], Complex]

    def __call__(self, vorticity: Array, *, workers: int = 1) -> Array:
        """Stream function of the vorticity and its images on the window.

        Parameters
        ----------
        vorticity : ndarray, shape (..., nz, ny)
            Axial vorticity, s⁻¹.
        workers : int
            Threads of the transforms.

        Returns
        -------
        ndarray, shape (..., nz, ny)
            ψ, m²/s.
        """
        nz, ny = self.grid.shape
        mz, my = _padded(self.grid)
        rows = fft.rfft(np.asarray(vorticity, float), n=my, axis=-1, workers=workers)
        spectrum = fft.fft(rows, n=mz, axis=-2, workers=workers, overwrite_x=True)
        total: Complex = np.zeros_like(spectrum)
        backwards = -np.arange(mz) % mz
        for (turn_y, turn_z), kernel in self.kernels.items():
            # A reversed copy has the spectrum of negative wavenumbers; along y those are the conjugates of both axes.
            turned = spectrum if turn_y == turn_z else spectrum[..., backwards, :]
            total += kernel * (turned.conj() if turn_y < 0 else turned)
        columns = fft.ifft(total, axis=-2, workers=workers, overwrite_x=True)[..., :nz, :]
        solution: Array = fft.irfft(columns, n=my, axis=-1, workers=workers)[..., :ny]
        return solution


def image_solve(grid: UniformGrid, images: tuple[Image, ...], reach: tuple[float, float] | None = None) -> ImageSolve:
    """Prepare a solve with images.

    Parameters
    ----------
    grid : UniformGrid
        The window.
    images : tuple of Image
        All that act, `ITSELF` included.
    reach : (float, float) or None
        Extents along z and y of the window together with its reflection where there are no images in walls, m: the
        free-space solve's own weights of that size are used throughout. With images in walls, None.

    Returns
    -------
    ImageSolve
    """
    nz, ny = grid.shape
    mz, my = _padded(grid)
    sums: dict[tuple[int, int], Array] = {}
    for image in images:
        at_z, off_z = _offsets(grid.z0, grid.dz, nz, image.turn_z, image.shift_z)
        at_y, off_y = _offsets(grid.y0, grid.dy, ny, image.turn_y, image.shift_y)
        weights = sums.setdefault((image.turn_y, image.turn_z), np.zeros((mz, my)))
        acting = _weights(grid, off_z, off_y, image, reach)
        weights[np.ix_(at_z % mz, at_y % my)] += image.sign * acting
    return ImageSolve(grid, {turn: fft.rfft2(weights) for turn, weights in sums.items()})


def _padded(grid: UniformGrid) -> tuple[int, int]:
    return fft.next_fast_len(2 * grid.nz, real=True), fft.next_fast_len(2 * grid.ny, real=True)


def _offsets(first: float, step: float, n: int, turn: int, shift: float) -> tuple[NDArray[np.intp], Array]:
    """Index i − j (direct) or i + j (mirrored) and the offset in steps from the image of point j to point i."""
    if turn > 0:
        index = np.arange(1 - n, n)
        return index, index - shift / step
    index = np.arange(2 * n - 1)
    return index, index + (2 * first - shift) / step


def _part(offsets: Array) -> tuple[NDArray[np.intp], float]:
    """Offsets ascending by one as whole steps and the part of a step they share."""
    start = np.floor(offsets[0] + 1e-6)
    fraction = round(float(offsets[0] - start), 9)
    return (start + np.arange(offsets.size)).astype(int), 0.0 if abs(fraction) < 1e-6 else fraction


def _weights(grid: UniformGrid, off_z: Array, off_y: Array, image: Image, reach: tuple[float, float] | None) -> Array:
    """Green's function at offsets in steps, each axis ascending by one, cell area included, m²."""
    (whole_z, part_z), (whole_y, part_y) = _part(off_z), _part(off_y)
    if reach is not None:
        room = 1 if part_z == part_y == 0 else 2
        nz, ny = (int(np.ceil(n / h - 1e-6)) + room for n, h in zip(reach, (grid.dz, grid.dy), strict=True))
        spectral = _between(nz, ny, grid.dz, grid.dy, part_z, part_y)
        return spectral[np.ix_(whole_z + nz - 1, whole_y + ny - 1)]
    radius = np.hypot(off_z[:, None] * grid.dz, off_y[None, :] * grid.dy)
    weights: Array = -grid.cell_area * np.log(np.where(radius > 0, radius, 1.0)) / (2 * np.pi)
    if image.distant:
        return weights
    n = _BLEND[1]
    near_z, near_y = np.flatnonzero(np.abs(whole_z) < n), np.flatnonzero(np.abs(whole_y) < n)
    spectral = _between(n, n, grid.dz, grid.dy, part_z, part_y)
    share = _blend(off_z[near_z])[:, None] * _blend(off_y[near_y])
    excess = spectral[np.ix_(whole_z[near_z] + n - 1, whole_y[near_y] + n - 1)] - weights[np.ix_(near_z, near_y)]
    weights[np.ix_(near_z, near_y)] += share * excess
    return weights


def _blend(cells: Array) -> Array:
    """1 up to the lower number of cells, 0 beyond the upper one, infinitely smooth between."""
    low, high = _BLEND
    t = np.clip((np.abs(cells) - low) / (high - 1 - low), 2e-3, 1 - 2e-3)
    share: Array = 1 / (1 + np.exp(1 / (1 - t) - 1 / t))
    return share


@lru_cache(maxsize=8)
def _between(nz: int, ny: int, dz: float, dy: float, part_z: float, part_y: float) -> Array:
    """`green_weights` at offsets moved by a part of a step."""
    if part_z == 0 and part_y == 0:
        return green_weights(nz, ny, dz, dy)
    diagonal = float(np.hypot(nz * dz, ny * dy))
    radius = 1.1
    pz = fft.next_fast_len(max(2 * nz, int(np.ceil(nz + radius * diagonal / dz)) + 1), real=True)
    py = fft.next_fast_len(max(2 * ny, int(np.ceil(ny + radius * diagonal / dy)) + 1), real=True)
    sz = 2 * np.pi * fft.fftfreq(pz, dz / diagonal)
    sy = 2 * np.pi * fft.rfftfreq(py, dy / diagonal)
    spectrum = _truncated_logarithm(np.hypot(sz[:, None], sy[None, :]), radius)
    turn_z = np.exp(1j * sz * part_z * dz / diagonal)
    turn_y = np.exp(1j * sy * part_y * dy / diagonal)
    # The highest wavenumber of an even length stands for both its signs.
    if pz % 2 == 0:
        turn_z[pz // 2] = turn_z[pz // 2].real
    if py % 2 == 0:
        turn_y[-1] = turn_y[-1].real
    response = fft.irfft2(spectrum * turn_z[:, None] * turn_y[None, :], s=(pz, py))
    weights: Array = response[np.ix_(np.arange(1 - nz, nz) % pz, np.arange(1 - ny, ny) % py)]
    weights = weights * diagonal**2 - dz * dy * np.log(diagonal) / (2 * np.pi)
    weights.flags.writeable = False
    return weights
