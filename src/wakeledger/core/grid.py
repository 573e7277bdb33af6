"""The uniform grid every field lives on."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.floating[Any]]


@dataclass(frozen=True)
class UniformGrid:
    """A uniform grid of points in the plane; arrays on it have shape ``(..., nz, ny)``.

    Attributes
    ----------
    y0, z0 : float
        Position of the first point, m (y to starboard, z up).
    dy, dz : float
        Spacing, m; both positive.
    ny, nz : int
        Number of points along each axis.
    """

    y0: float
    z0: float
    dy: float
    dz: float
    ny: int
    nz: int

    def __post_init__(self) -> None:
        if not (self.dy > 0 and self.dz > 0):
            raise ValueError(f"spacing must be positive, dy = {self.dy}, dz = {self.dz} m were given")
        if self.ny < 2 or self.nz < 2:
            raise ValueError(f"a grid needs at least 2 x 2 points, {self.ny} x {self.nz} (y x z) were given")

    @classmethod
    def from_axes(cls, y: Array, z: Array) -> UniformGrid:
        """The grid with the given axes.

        Parameters
        ----------
        y, z : ndarray, shape (ny,), (nz,)
            Ascending, uniformly spaced coordinates, m.

        Returns
        -------
        UniformGrid

        Raises
        ------
        ValueError
            If either axis is not ascending and uniform to 1e-6 of its spacing.
        """
        steps = []
        for name, axis in (("y", np.asarray(y, float)), ("z", np.asarray(z, float))):
            step = (axis[-1] - axis[0]) / (axis.size - 1)
            if not step > 0 or np.abs(np.diff(axis) - step).max() > 1e-6 * step:
                raise ValueError(f"the {name} axis is not ascending and uniform; resample it first")
            steps.append(float(step))
        return cls(float(y[0]), float(z[0]), steps[0], steps[1], len(y), len(z))

    @property
    def y(self) -> Array:
        """Coordinates along y, m, shape (ny,)."""
        return self.y0 + self.dy * np.arange(self.ny)

    @property
    def z(self) -> Array:
        """Coordinates along z, m, shape (nz,)."""
        return self.z0 + self.dz * np.arange(self.nz)

    @property
    def shape(self) -> tuple[int, int]:
        """Shape of a field on the grid, (nz, ny)."""
        return self.nz, self.ny

    @property
    def cell_area(self) -> float:
        """Area that one point stands for, m²."""
        return self.dy * self.dz

    @property
    def area(self) -> float:
        """Area between the outermost points, m²."""
        return self.dy * (self.ny - 1) * self.dz * (self.nz - 1)

    @property
    def weights(self) -> Array:
        """Weights of `integrate`, m², shape (nz, ny)."""
        return np.outer(_gregory(self.nz) * self.dz, _gregory(self.ny) * self.dy)

    def mesh(self) -> tuple[Array, Array]:
        """Coordinates of every point, m, two arrays of shape (nz, ny): y, z."""
        yy, zz = np.meshgrid(self.y, self.z)
        return yy, zz

    def integrate(self, field: Array) -> Array:
        """Integral over the window by Gregory's rule: the trapezium rule with fourth-order end corrections.

        Parameters
        ----------
        field : ndarray, shape (..., nz, ny)
            Integrand.

        Returns
        -------
        ndarray, shape (...)
            Integral, in the field's unit times m².
        """
        weights_y, weights_z = _gregory(self.ny) * self.dy, _gregory(self.nz) * self.dz
        result: Array = np.asarray((np.asarray(field) @ weights_y) @ weights_z)
        return result


def _gregory(n: int) -> Array:
    weights = np.ones(n)
    ends = np.array([3 / 8, 7 / 6, 23 / 24]) if n >= 6 else np.array([1 / 2])
    weights[: ends.size] = ends
    weights[n - ends.size :] = ends[::-1]
    return weights
