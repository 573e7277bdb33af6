"""Gaussian vortex elements: a crossflow whose velocity, lift and induced drag are known exactly.

Each element carries the axial vorticity ξ = Γ/(πa²) exp(−r²/a²). Velocity, stream function and the induced drag of any
set of them are closed forms; the drag is a double sum with the exponential integral E1.

Signs: y to starboard, z up, ξ = ∂w/∂y − ∂v/∂z; the starboard tip vortex of a lifting wing has Γ > 0.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from scipy.special import exp1

from wakeledger.core.grid import Array, UniformGrid

#: Element-point pairs worked on at once; about 30 MB of temporaries.
_CHUNK = 500_000
#: (r/a)² beyond which exp(−r²/a²) is below the rounding of 1.
_FAR = 40.0


def log_distance(distance_squared: Array, core_squared: Array) -> Array:
    """Smoothed logarithm ln r + ½E1(r²/s²), which is ½(ln s² − γ) at r = 0.

    Parameters
    ----------
    distance_squared, core_squared : ndarray
        r² and s², m², broadcast against each other.

    Returns
    -------
    ndarray
        Of the broadcast shape; lengths in metres inside the logarithm.
    """
    r2, s2 = np.broadcast_arrays(np.asarray(distance_squared, float), np.asarray(core_squared, float))
    q = r2 / s2
    result = np.empty(q.shape)
    near = q < _FAR
    result[~near] = np.log(r2[~near]) / 2
    inside = near & (q > 1e-30)
    result[inside] = (np.log(r2[inside]) + exp1(q[inside])) / 2
    centre = near & ~inside
    result[centre] = (np.log(s2[centre]) - np.euler_gamma) / 2
    return result


@dataclass(frozen=True, eq=False)
class GaussianElements:
    """A set of Gaussian (Lamb-Oseen) vortices in one plane.

    Attributes
    ----------
    y, z : ndarray, shape (n,)
        Centres, m.
    circulation : ndarray, shape (n,)
        Γ, m²/s, positive counter-clockwise seen from behind.
    core : ndarray, shape (n,)
        Core length a, m: ξ = Γ/(πa²) exp(−r²/a²). The swirl peaks at 1.1209 a.

    A scalar is spread over all elements.
    """

    y: Array
    z: Array
    circulation: Array
    core: Array

    def __post_init__(self) -> None:
        arrays = np.broadcast_arrays(*(np.atleast_1d(np.asarray(getattr(self, f), float)) for f in _FIELDS))
        for name, array in zip(_FIELDS, arrays, strict=True):
            if array.ndim != 1:
                raise ValueError(f"{name} must be one-dimensional, shape {array.shape} was given")
            if not np.isfinite(array).all():
                raise ValueError(f"{name} holds values that are not finite")
            own = array.copy()
            own.flags.writeable = False
            object.__setattr__(self, name, own)
        if not (self.core > 0).all():
            raise ValueError(f"core must be positive, the smallest given is {self.core.min()} m")

    @property
    def n(self) -> int:
        """Number of elements."""
        return int(self.y.size)

    def __add__(self, other: GaussianElements) -> GaussianElements:
        """Both sets together."""
        return GaussianElements(*(np.concatenate([getattr(self, f), getattr(other, f)]) for f in _FIELDS))

    def __getitem__(self, which: object) -> GaussianElements:
        """The elements selected by an index array, a slice or a mask."""
        return GaussianElements(*(np.atleast_1d(getattr(self, f)[which]) for f in _FIELDS))

    def shifted(self, *, y: float = 0.0, z: float = 0.0) -> GaussianElements:
        """The same set moved by (y, z), m."""
        return GaussianElements(self.y + y, self.z + z, self.circulation, self.core)

    def rotated(self, angle: float) -> GaussianElements:
        """The same set turned about the origin by `angle`, rad, counter-clockwise seen from behind."""
        c, s = np.cos(angle), np.sin(angle)
        return GaussianElements(c * self.y - s * self.z, s * self.y + c * self.z, self.circulation, self.core)

    def scaled(self, *, length: float = 1.0, circulation: float = 1.0) -> GaussianElements:
        """The same set with lengths and circulations multiplied."""
        return GaussianElements(
            self.y * length, self.z * length, self.circulation * circulation, self.core * abs(length)
        )

    def with_core(self, core: Array | float) -> GaussianElements:
        """The same set with another core length, m."""
        return GaussianElements(
            self.y, self.z, self.circulation, np.broadcast_to(np.asarray(core, float), self.y.shape)
        )

    def mirrored(self, axis: str, *, at: float = 0.0) -> GaussianElements:
        """The image in a wall y = `at` or z = `at`: positions reflected, circulations reversed.

        Parameters
        ----------
        axis : {"y", "z"}
            Coordinate that changes sign.
        at : float
            Position of the wall, m.

        Returns
        -------
        GaussianElements

        Raises
        ------
        ValueError
            If `axis` is neither "y" nor "z".
        """
        if axis == "y":
            return GaussianElements(2 * at - self.y, self.z, -self.circulation, self.core)
        if axis == "z":
            return GaussianElements(self.y, 2 * at - self.z, -self.circulation, self.core)
        raise ValueError(f"axis must be 'y' or 'z', {axis!r} was given")

    # -- fields ---------------------------------------------------------------------------------------------------

    def velocity(self, y: Array, z: Array) -> tuple[Array, Array]:
        """Crossflow velocity, v_θ = Γ/(2πr)(1 − exp(−r²/a²)) about each element.

        Parameters
        ----------
        y, z : ndarray, any shape
            Points, m.

        Returns
        -------
        v, w : ndarray, shape of the points
            Velocity to starboard and up, m/s.
        """
        points_y, points_z, shape = _flat(y, z)
        v, w = np.empty(points_y.size), np.empty(points_y.size)
        strength = self.circulation / (2 * np.pi)
        for part in self.chunks(points_y.size):
            dy, dz, r2 = self.offsets(points_y[part], points_z[part])
            swirl = swirl_factor(r2, self.core**2)
            swirl *= strength
            np.einsum("ij,ij->i", swirl, dz, out=v[part])
            np.einsum("ij,ij->i", swirl, dy, out=w[part])
        return -v.reshape(shape), w.reshape(shape)

    def vorticity(self, y: Array, z: Array) -> Array:
        """Axial vorticity ξ, s⁻¹, at points of any shape (m)."""
        points_y, points_z, shape = _flat(y, z)
        xi = np.empty(points_y.size)
        strength = self.circulation / (np.pi * self.core**2)
        for part in self.chunks(points_y.size):
            _, _, r2 = self.offsets(points_y[part], points_z[part])
            xi[part] = np.exp(-np.minimum(r2 / self.core**2, 700.0)) @ strength
        return xi.reshape(shape)

    def stream_function(self, y: Array, z: Array) -> Array:
        """Stream function ψ = −(Γ/2π)[ln r + ½E1(r²/a²)], m²/s, at points of any shape (m)."""
        points_y, points_z, shape = _flat(y, z)
        psi = np.empty(points_y.size)
        for part in self.chunks(points_y.size):
            _, _, r2 = self.offsets(points_y[part], points_z[part])
            psi[part] = log_distance(r2, self.core**2) @ self.circulation
        return (-psi / (2 * np.pi)).reshape(shape)

    def velocity_on(self, grid: UniformGrid) -> tuple[Array, Array]:
        """Crossflow velocity on a grid, two arrays of shape (nz, ny), m/s."""
        return self.velocity(*grid.mesh())

    def vorticity_on(self, grid: UniformGrid) -> Array:
        """Axial vorticity on a grid, shape (nz, ny), s⁻¹."""
        return self.vorticity(*grid.mesh())

    def stream_function_on(self, grid: UniformGrid) -> Array:
        """Stream function on a grid, shape (nz, ny), m²/s."""
        return self.stream_function(*grid.mesh())

    def chunks(self, points: int) -> Iterator[slice]:
        """Slices of so many points, each small enough to be worked on with all elements at once."""
        size = max(1, _CHUNK // self.n)
        return (slice(start, start + size) for start in range(0, points, size))

    def offsets(self, y: Array, z: Array) -> tuple[Array, Array, Array]:
        """Distances along y and z from each element to each point, m, and r², m²; three arrays of shape (points, n)."""
        dy = y[:, None] - self.y
        dz = z[:, None] - self.z
        return dy, dz, dy * dy + dz * dz

    # -- integrals ------------------------------------------------------------------------------------------------

    @property
    def net_circulation(self) -> float:
        """ΣΓ, m²/s; zero for the whole wake of a body in free air."""
        return float(self.circulation.sum())

    def induced_drag(self, *, density: float) -> float:
        """Induced drag D_i = ½ρ∬ψξ dA of the set, N, positive downstream.

        D_i = −(ρ/4π) Σ_i Σ_j Γ_iΓ_j [ln r_ij + ½E1(r_ij²/(a_i² + a_j²))], the self term being ½[ln 2a² − γ]. With a
        net circulation the value depends on the unit of length (metres here).

        Parameters
        ----------
        density : float
            ρ, kg/m³.

        Returns
        -------
        float
        """
        return mutual_drag(self, self, density=density)

    def lift(self, *, speed: float, density: float) -> float:
        """Lift L = ρU ΣyΓ, N, positive up."""
        return float(density * speed * (self.y @ self.circulation))

    def side_force(self, *, speed: float, density: float) -> float:
        """Side force Y = −ρU ΣzΓ, N, positive to starboard."""
        return float(-density * speed * (self.z @ self.circulation))

    def rolling_moment(self, *, speed: float, density: float) -> float:
        """Rolling moment about the x axis −½ρU Σ(y² + z² + a²)Γ, N m, positive starboard wing down.

        The moment about +x itself, +½ρU∬(y² + z²)ξ dA, lifts the starboard wing. The second moment of each Gaussian
        about its own centre adds a² to y² + z².
        """
        moment = (self.y**2 + self.z**2 + self.core**2) @ self.circulation
        return float(-density * speed * moment / 2)

    def span_efficiency(self, *, span: float) -> float:
        """Span efficiency e = L²/(πqb²D_i) on the given span, m."""
        lift = self.lift(speed=1.0, density=1.0)
        return float(lift**2 / (np.pi * 0.5 * span**2 * self.induced_drag(density=1.0)))


_FIELDS = ("y", "z", "circulation", "core")


def swirl_factor(distance_squared: Array, core_squared: Array) -> Array:
    """(1 − exp(−r²/a²))/r², m⁻², regular at r = 0 where it is 1/a²."""
    q = distance_squared / core_squared
    factor: Array = -np.expm1(-np.minimum(q, _FAR))
    np.maximum(q, 1e-30, out=q)
    factor /= q * core_squared
    # expm1(0)/1e-30 is 0 there, the limit is 1/a².
    tiny = q <= 1e-30
    if tiny.any():
        factor[tiny] = np.broadcast_to(1 / core_squared, factor.shape)[tiny]
    return factor


def mutual_drag(first: GaussianElements, second: GaussianElements, *, density: float) -> float:
    """Drag that one set suffers from the crossflow of another, D12 = ½ρ∬ψ₂ξ₁ dA = D21, N.

    The induced drag of both together is D11 + D22 + 2 D12. Each set should have zero net circulation, otherwise its
    share depends on the unit of length.

    Parameters
    ----------
    first, second : GaussianElements
        The sets.
    density : float
        ρ, kg/m³.

    Returns
    -------
    float
    """
    total = 0.0
    for part in second.chunks(first.n):
        _, _, r2 = second.offsets(first.y[part], first.z[part])
        smoothed = log_distance(r2, first.core[part, None] ** 2 + second.core**2)
        total += float(first.circulation[part] @ smoothed @ second.circulation)
    return -density * total / (4 * np.pi)


def _flat(y: Array, z: Array) -> tuple[Array, Array, tuple[int, ...]]:
    yy, zz = np.broadcast_arrays(np.asarray(y, float), np.asarray(z, float))
    return yy.ravel(), zz.ravel(), yy.shape


def vortex_pair(*, circulation: float, spacing: float, core: float) -> GaussianElements:
    """Two equal and opposite vortices on z = 0, starboard positive.

    Their induced drag is (ρΓ²/4π)[ln(b²/2a²) + γ + E1(b²/2a²)].

    Parameters
    ----------
    circulation : float
        Γ of the starboard vortex, m²/s.
    spacing : float
        Distance b between the centres, m.
    core : float
        Core length a, m.

    Returns
    -------
    GaussianElements
    """
    half = spacing / 2
    return GaussianElements(
        np.array([-half, half]), np.zeros(2), np.array([-circulation, circulation]), np.array([core, core])
    )
