"""The three-dimensional field of a lifting line with straight legs, at any station behind it.

A bound line runs through the elements in the plane x = 0 and carries Γ_b; from each element a straight half-infinite
leg of circulation Γ runs downstream. The whole system is smoothed with one Gaussian of length a, which leaves the legs
with axial vorticity Γ/(πa²) exp(−r²/a²) and changes neither the bound line's field nor the legs' beginnings seen from
further than five core lengths; there the field is exact in closed form.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.synthetic.elements import GaussianElements

#: Stations nearer than this many core lengths see the smoothing of the bound line (exp(−25) = 1e-11).
_NEAREST = 5.0


@dataclass(frozen=True, eq=False)
class LiftingLine:
    """A bound line through Gaussian elements, in their order from port to starboard, with legs running downstream.

    Attributes
    ----------
    elements : GaussianElements
        Cross-section of the legs; their circulations add up to zero and all cores are equal.

    Raises
    ------
    ValueError
        If the circulations do not cancel (to 1e-9 of the largest bound circulation) or the cores differ.
    """

    elements: GaussianElements

    def __post_init__(self) -> None:
        scale = float(np.abs(self.bound_circulation).max())
        if abs(self.elements.net_circulation) > 1e-9 * scale:
            raise ValueError(f"the legs' circulations add up to {self.elements.net_circulation} m²/s, zero is needed")
        if np.ptp(self.elements.core) > 0:
            raise ValueError("all legs need the same core length, because one Gaussian smooths the whole system")

    @property
    def bound_circulation(self) -> Array:
        """Γ_b between each leg and the next, m²/s, shape (n − 1,), positive for lift."""
        bound: Array = -np.cumsum(self.elements.circulation)[:-1]
        return bound

    def velocity(self, x: float, y: Array, z: Array) -> tuple[Array, Array, Array]:
        """Disturbance velocity in the plane at distance x behind (or, negative, ahead of) the bound line.

        Parameters
        ----------
        x : float
            Distance downstream of the bound line, m, at least five core lengths; negative ahead of it.
        y, z : ndarray, any shape
            Points, m.

        Returns
        -------
        u, v, w : ndarray, shape of the points
            Disturbance along x (u − U), to starboard and up, m/s.

        Raises
        ------
        ValueError
            If the plane is nearer to the bound line than five core lengths.
        """
        e = self.elements
        core = float(e.core[0])
        if abs(x) < _NEAREST * core:
            raise ValueError(f"x = {x} m is nearer than five core lengths ({_NEAREST * core} m) to the bound line")
        yy, zz = np.broadcast_arrays(np.asarray(y, float), np.asarray(z, float))
        points_y, points_z = yy.ravel(), zz.ravel()
        u: Array = np.zeros(points_y.size)
        v: Array = np.zeros(points_y.size)
        w: Array = np.zeros(points_y.size)
        if x > 0:
            # Behind the line: endless vortices, less what is missing because they begin at the line.
            v, w = (np.array(component) for component in e.velocity(points_y, points_z))
        for part in e.chunks(points_y.size):
            dy, dz, r2 = e.offsets(points_y[part], points_z[part])
            distance = np.sqrt(x * x + r2)
            # ½(1 − |x|/R)/r² = ½/(R(R + |x|)), regular on the leg's axis.
            begun = np.sign(-x) * e.circulation / (4 * np.pi * distance * (distance + abs(x)))
            v[part] -= (begun * dz).sum(axis=1)
            w[part] += (begun * dy).sum(axis=1)
            self._add_bound(x, dy, dz, distance, u[part], v[part], w[part])
        return u.reshape(yy.shape), v.reshape(yy.shape), w.reshape(yy.shape)

    def _add_bound(self, x: float, dy: Array, dz: Array, distance: Array, u: Array, v: Array, w: Array) -> None:
        """Biot-Savart of the straight segments from leg to leg, added in place."""
        e = self.elements
        along_y, along_z = np.diff(e.y), np.diff(e.z)
        length2 = along_y**2 + along_z**2
        use = length2 > 0
        y1, z1, r1 = dy[:, :-1][:, use], dz[:, :-1][:, use], distance[:, :-1][:, use]
        y2, z2, r2 = dy[:, 1:][:, use], dz[:, 1:][:, use], distance[:, 1:][:, use]
        ty, tz, size2 = along_y[use], along_z[use], length2[use]
        # l × r1 for l = (0, ty, tz), r1 = (x, y1, z1).
        cross_x = ty * z1 - tz * y1
        perpendicular2 = cross_x**2 + (x * x) * size2
        strength = self.bound_circulation[use] / (4 * np.pi * perpendicular2)
        strength = strength * ((ty * y1 + tz * z1) / r1 - (ty * y2 + tz * z2) / r2)
        u += (strength * cross_x).sum(axis=1)
        v += (strength * tz).sum(axis=1) * x
        w -= (strength * ty).sum(axis=1) * x

    def velocity_on(self, x: float, grid: UniformGrid) -> tuple[Array, Array, Array]:
        """Disturbance velocity on a grid at distance x behind the bound line, three arrays of shape (nz, ny), m/s."""
        return self.velocity(x, *grid.mesh())

    def downwash_at_line(self, y: Array) -> Array:
        """Vertical velocity that the legs alone induce at points of a straight level bound line (z = that of the line).

        It is half of that far downstream (the half-infinite legs, smoothed), m/s, positive up.
        """
        e = self.elements
        _, w = e.velocity(np.asarray(y, float), np.full(np.shape(y), float(e.z.mean())))
        return w / 2
