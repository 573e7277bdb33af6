"""Exact crossflow of Gaussian vortices in a test section: the walls' images, summed in closed form.

In a rectangle of width B and height H the images of a vortex stand at ±(y − y₀) + 2mB, ±(z − z₀) + 2nH. Each of the
four families of them is the lattice of zeros of a theta function, so that all images together are

    ψ = −(Γ/2π) Σ± s ln|θ₁(π(ζ − ζ_s)/2B)|,      ζ = (y − y₀) + i(z − z₀),      q = exp(−πH/B),

with s = ±1 reversing once for each wall between closed walls and s = 1 throughout in an open jet. In a circle of radius
R the one image stands at R²/ζ̄₀. The image nearest to a point has the vortex's own Gaussian core, so that ψ is exact up
to the walls.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array
from wakeledger.synthetic.elements import GaussianElements, log_distance, swirl_factor

Complex = NDArray[np.complex128]

#: Nearer to a pole than this part of a period over π, the first term of the Laurent series stands.
_POLE = 1e-4
#: A section smaller than so many core lengths lets a Gaussian reach beyond its nearest image.
_CORES = 6.5
_NET = 1e-9


@dataclass(frozen=True)
class RectangularDuct:
    """A rectangular section with closed walls, or an open jet of that shape.

    Attributes
    ----------
    y, z : (float, float)
        Positions of the side walls, and of floor and ceiling, m.
    closed : bool
        Closed walls; an open jet otherwise.
    """

    y: tuple[float, float]
    z: tuple[float, float]
    closed: bool = True

    @property
    def area(self) -> float:
        """Cross-section area, m²."""
        return (self.y[1] - self.y[0]) * (self.z[1] - self.z[0])

    def velocity(self, elements: GaussianElements, y: Array, z: Array) -> tuple[Array, Array]:
        """Crossflow v, w of the elements with all images, m/s, at points of any shape inside the section (m)."""
        self._check(elements)
        slope, _ = self._sums(elements, y, z, potential=False)
        return slope.real / (2 * np.pi), -slope.imag / (2 * np.pi)

    def stream_function(self, elements: GaussianElements, y: Array, z: Array) -> Array:
        """Stream function with all images, m²/s; zero on closed walls, known up to a constant in an open jet."""
        self._check(elements)
        _, logarithm = self._sums(elements, y, z, slope=False)
        return -logarithm / (2 * np.pi)

    def induced_drag(self, elements: GaussianElements, *, density: float) -> float:
        """Induced drag ½ρ∬ψξ dA over the section, N, of elements that lie clear of the walls.

        The mean of ψ over a Gaussian is, but for its own and its near images' cores, that at its centre; two cores
        together act as one of length √(a_i² + a_j²).
        """
        self._check(elements)
        _, logarithm = self._sums(elements, elements.y, elements.z, slope=False, core=elements.core)
        return float(-density / (4 * np.pi) * (elements.circulation @ logarithm))

    def _check(self, elements: GaussianElements) -> None:
        (y0, y1), (z0, z1) = self.y, self.z
        inside = (elements.y >= y0) & (elements.y <= y1) & (elements.z >= z0) & (elements.z <= z1)
        if not inside.all():
            raise ValueError("every vortex must stand inside the section")
        if elements.core.max() * _CORES > min(y1 - y0, z1 - z0):
            raise ValueError(f"the section must be larger than {_CORES} core lengths")
        if not self.closed:
            _no_net_circulation(elements)

    def _sums(
        self,
        elements: GaussianElements,
        y: Array,
        z: Array,
        *,
        slope: bool = True,
        potential: bool = True,
        core: Array | float = 0.0,
    ) -> tuple[Complex, Array]:
        """Σ −iΓs θ'/θ (which is 2π(v − iw)) and Σ Γs ln|θ|, each with the nearest image's core; of the points' shape.

        `core` is that of Gaussians over which the points' values are averaged.
        """
        yy, zz = np.broadcast_arrays(np.asarray(y, float) - self.y[0], np.asarray(z, float) - self.z[0])
        cores = np.broadcast_to(np.asarray(core, float), yy.shape).ravel()
        points_y, points_z = yy.ravel(), zz.ravel()
        slopes, logs = np.zeros(points_y.size, complex), np.zeros(points_y.size)
        width, height = self.y[1] - self.y[0], self.z[1] - self.z[0]
        theta = _Theta(height / width)
        ey, ez = elements.y - self.y[0], elements.z - self.z[0]
        for turn_y in (1, -1):
            for turn_z in (1, -1):
                sign = turn_y * turn_z if self.closed else 1
                strength = sign * elements.circulation
                for part in elements.chunks(points_y.size):
                    # Real period 2B; into the cell about the nearest image along y.
                    dy = points_y[part, None] - turn_y * ey
                    dy = dy - 2 * width * np.rint(dy / (2 * width))
                    dz = points_z[part, None] - turn_z * ez
                    turns = np.rint(dz / (2 * height))
                    dz = dz - 2 * height * turns
                    x = (np.pi / (2 * width)) * (dy + 1j * dz)
                    r2 = dy * dy + dz * dz
                    smeared = elements.core**2 + cores[part, None] ** 2
                    if slope:
                        # θ'/θ(x + kπτ) = θ'/θ(x) − 2ik
                        smooth = (np.pi / (2 * width)) * (theta.slope(x) - 2j * turns)
                        swirl = (dy - 1j * dz) * swirl_factor(r2, smeared)
                        slopes[part] += (smooth + swirl) @ (-1j * strength)
                    if potential:
                        # ln|θ(x + kπτ)| = ln|θ(x)| − k² ln q + 2k Im x
                        outside = turns**2 * (np.pi * height / width) + 2 * turns * x.imag
                        smooth_log = theta.logarithm(x) + outside + math.log(np.pi / (2 * width))
                        logs[part] += (smooth_log + log_distance(r2, smeared)) @ strength
        return slopes.reshape(yy.shape), logs.reshape(yy.shape)


@dataclass(frozen=True)
class RoundDuct:
    """A circular section with closed walls, or a round open jet; vortices stand clear of its edge.

    Attributes
    ----------
    diameter : float
        m.
    centre : (float, float)
        y and z, m.
    closed : bool
        Closed walls; an open jet otherwise.
    """

    diameter: float
    centre: tuple[float, float] = (0.0, 0.0)
    closed: bool = True

    @property
    def area(self) -> float:
        """Cross-section area, m²."""
        return math.pi * self.diameter**2 / 4

    def velocity(self, elements: GaussianElements, y: Array, z: Array) -> tuple[Array, Array]:
        """Crossflow v, w of the elements with their images, m/s, at points of any shape inside the section (m)."""
        v, w = elements.velocity(y, z)
        place, at = self._places(elements, y, z)
        # v − iw = ∓(Γ/2πi) ζ̄₀/(ζζ̄₀ − R²)
        image = self._sign * (
            (at.conj() / (place[..., None] * at.conj() - (self.diameter / 2) ** 2))
            @ (elements.circulation / (2j * np.pi))
        )
        return v + image.real, w - image.imag

    def stream_function(self, elements: GaussianElements, y: Array, z: Array) -> Array:
        """Stream function with the images, m²/s; zero on closed walls, known up to a constant in an open jet."""
        return elements.stream_function(y, z) + self._image(elements, y, z)

    def induced_drag(self, elements: GaussianElements, *, density: float) -> float:
        """Induced drag ½ρ∬ψξ dA over the section, N."""
        image = self._image(elements, elements.y, elements.z)
        return elements.induced_drag(density=density) + float(density * elements.circulation @ image / 2)

    @property
    def _sign(self) -> int:
        return -1 if self.closed else 1

    def _image(self, elements: GaussianElements, y: Array, z: Array) -> Array:
        place, at = self._places(elements, y, z)
        radius = self.diameter / 2
        logarithm = np.log(np.abs(radius - place[..., None] * at.conj() / radius))
        image: Array = -self._sign * (logarithm @ elements.circulation) / (2 * np.pi)
        return image

    def _places(self, elements: GaussianElements, y: Array, z: Array) -> tuple[Complex, Complex]:
        if not self.closed:
            _no_net_circulation(elements)
        at = (elements.y - self.centre[0]) + 1j * (elements.z - self.centre[1])
        if not (np.abs(at) + _CORES * elements.core < self.diameter / 2).all():
            raise ValueError(f"every vortex must stand {_CORES} core lengths inside the section")
        place = (np.asarray(y, float) - self.centre[0]) + 1j * (np.asarray(z, float) - self.centre[1])
        return place, at


Duct = RectangularDuct | RoundDuct


def bound_field(
    line: GaussianElements, duct: RectangularDuct, distance: float, y: Array, z: Array
) -> tuple[Array, Array, Array]:
    """What a bound line and the beginning of its legs add at a station, with all their images.

    Parameters
    ----------
    line : GaussianElements
        Cross-section of the legs, in order along the bound line, which runs straight from one to the next.
    duct : RectangularDuct
        The section.
    distance : float
        Distance of the station behind the bound line, m, positive.
    y, z : ndarray, any shape
        Points, m.

    Returns
    -------
    u, v, w : ndarray, shape of the points
        To be added to the stream and to the endless legs' crossflow, m/s.

    Notes
    -----
    Behind the line the disturbance is Φ = Σ A f e^{−kx} over modes f of unit square, cosines between closed walls and
    sines in a jet. Half the jump of the crossflow across the plane of the bound line belongs to either side, so that
    k²A = −½∫Γ_b (∂f/∂z dy − ∂f/∂y dz) along it.
    """
    (y0, y1), (z0, z1) = duct.y, duct.z
    first = 0 if duct.closed else 1
    number_y, number_z = (
        np.pi * np.arange(first, 2 + math.ceil(40.0 * size / (np.pi * distance))) / size for size in (y1 - y0, z1 - z0)
    )
    nodes, weights = np.polynomial.legendre.leggauss(3)
    bound = -np.cumsum(line.circulation)[:-1]
    step_y, step_z = np.diff(line.y), np.diff(line.z)
    at_y = ((line.y[1:] + line.y[:-1]) / 2 + step_y / 2 * nodes[:, None]).ravel()
    at_z = ((line.z[1:] + line.z[:-1]) / 2 + step_z / 2 * nodes[:, None]).ravel()
    along_y, along_z = ((weights[:, None] / 2 * bound * step).ravel() for step in (step_y, step_z))

    def modes(number: Array, place: Array) -> tuple[Array, Array]:
        phase = np.outer(number, place)
        if duct.closed:
            return np.cos(phase), -number[:, None] * np.sin(phase)
        return np.sin(phase), number[:, None] * np.cos(phase)

    (fy, dfy), (fz, dfz) = modes(number_y, at_y - y0), modes(number_z, at_z - z0)
    source = 0.5 * ((dfz * along_y) @ fy.T - (fz * along_z) @ dfy.T)
    square = number_z[:, None] ** 2 + number_y**2
    k = np.sqrt(square)
    unit = np.where(number_z == 0, 1, 2)[:, None] * np.where(number_y == 0, 1, 2) / duct.area
    amplitude = -unit * source * np.exp(-k * distance) / np.where(square > 0, square, np.inf)
    yy, zz = np.broadcast_arrays(np.asarray(y, float), np.asarray(z, float))
    (fy, dfy), (fz, dfz) = modes(number_y, yy.ravel() - y0), modes(number_z, zz.ravel() - z0)
    parts = ((-k * amplitude, fz, fy), (amplitude, fz, dfy), (amplitude, dfz, fy))
    u, v, w = (np.einsum("mp,mn,np->p", up, a, across, optimize=True).reshape(yy.shape) for a, up, across in parts)
    return u, v, w


def _no_net_circulation(elements: GaussianElements) -> None:
    if abs(elements.net_circulation) > _NET * np.abs(elements.circulation).sum():
        raise ValueError(f"an open jet holds no net circulation, {elements.net_circulation} m²/s was given")


class _Theta:
    """θ₁ with its pole at the origin taken out, for |Im x| ≤ π|τ|/2, τ = i·ratio."""

    def __init__(self, ratio: float) -> None:
        # The terms fall as exp(−π ratio (n + ½)(n − ½)) at the edge of the cell.
        count = math.ceil(math.sqrt(39.0 / (math.pi * ratio) + 0.25)) + 1
        n = np.arange(count)
        self.order = 2 * n + 1
        # Without the common factor q^¼, which the four families' signs or the vanishing net circulation cancel.
        self.weight = 2.0 * (-1.0) ** n * np.exp(-math.pi * ratio * (n * (n + 1)))
        first = float(self.weight @ self.order)
        self.log_first = math.log(first)
        self.curvature = -float(self.weight @ self.order**3) / (3 * first)

    def slope(self, x: Complex) -> Complex:
        """θ'/θ − 1/x."""
        value, derivative = self._sums(x)
        near = np.abs(x) < _POLE
        safe = np.where(near, 1.0, x)
        regular: Complex = np.where(near, self.curvature * x, derivative / np.where(near, 1.0, value) - 1 / safe)
        return regular

    def logarithm(self, x: Complex) -> Array:
        """ln|θ/x|."""
        value, _ = self._sums(x)
        near = np.abs(x) < _POLE
        far = np.log(np.abs(np.where(near, 1.0, value)) / np.where(near, 1.0, np.abs(x)))
        regular: Array = np.where(near, self.log_first + (self.curvature * x * x).real / 2, far)
        return regular

    def _sums(self, x: Complex) -> tuple[Complex, Complex]:
        turn = np.exp(1j * x)
        back = 1 / turn
        double, half = turn * turn, back * back
        value, derivative = np.zeros_like(turn), np.zeros_like(turn)
        for weight, order in zip(self.weight, self.order, strict=True):
            value += (weight / 2j) * (turn - back)
            derivative += (weight * order / 2) * (turn + back)
            turn = turn * double
            back = back * half
        return value, derivative
