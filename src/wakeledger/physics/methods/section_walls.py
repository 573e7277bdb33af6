"""Two-dimensional wall corrections of a section between parallel walls.

H. J. Allen and W. G. Vincenti, NACA Report 782 (1944), with σ = (π²/48)(c/h)², τ = (c/h)/4 and Λ for the section's
shape; primes denote what was measured, and M' the stream's Mach number ahead of the model:

    V/V'     = 1 + Λσ/(1 − M'²)^{3/2} + (1 + 0.4M'²) τc_d'/(1 − M'²)
    q/q'     = 1 + (2 − M'²) [the two terms of the velocity]
    M/M'     = 1 + (1 + 0.2M'²) [the same]
    c_d/c_d' = 1 − (3 − 0.6M'²) Λσ/(1 − M'²)^{3/2} − (2 − M'²)(1 + 0.4M'²) τc_d'/(1 − M'²)
    c_l/c_l' = 1 − σ/(1 − M'²) − (2 − M'²) [the two terms of the velocity]
    α − α'   = σ/(2π √(1 − M'²)) (c_l' + 4c_m')

The drag's solid term is one Λσ larger than that of q: the wake's images make the stream accelerate past the model,
which pushes it downstream. c_d' is the force on the section between the walls. What Jones's method gives there is more,
because it lets the wake recover to the pressure ahead of the model although the walls keep the stream behind it faster
by 2u_b; between the walls (compare `maskell`)

    D' = Jones − ρu_b ∫(u* − u) dz,     u_b = (1/2h) ∫(u* − u) dz,

the incompressible form being kept for this small term in compressible flow.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.physics.methods.section_kernels import speed_at
from wakeledger.stream.reference import Reference


@dataclass(frozen=True)
class SectionWalls:
    """A section of a given chord between parallel walls.

    Attributes
    ----------
    chord, height : float
        Chord and distance of the walls, m.
    solid_blockage : float
        Λσ, what the section's thickness adds to the stream's speed at it, as a share of the speed, at low speed.
    mach : float
        Mach number of the stream ahead of the model; 0 for incompressible flow.

    Raises
    ------
    ValueError
        If a length is not positive or the stream is not subsonic.
    """

    chord: float
    height: float
    solid_blockage: float = 0.0
    mach: float = 0.0

    def __post_init__(self) -> None:
        if not (self.chord > 0 and self.height > 0 and 0 <= self.mach < 1):
            raise ValueError(
                f"a chord of {self.chord} m between walls {self.height} m apart at Mach {self.mach} has no correction"
            )

    @property
    def sigma(self) -> float:
        """σ = (π²/48)(c/h)²."""
        return math.pi**2 / 48 * (self.chord / self.height) ** 2

    @property
    def tau(self) -> float:
        """τ = (c/h)/4."""
        return self.chord / (4 * self.height)

    @property
    def _solid(self) -> float:
        return self.solid_blockage / float((1 - self.mach**2) ** 1.5)

    def _wake(self, drag_coefficient: Array | float) -> Array | float:
        square = self.mach**2
        return (1 + 0.4 * square) / (1 - square) * self.tau * drag_coefficient

    def speed_ratio(self, drag_coefficient: Array | float) -> Array | float:
        """V/V', the corrected over the measured speed, for a measured c_d' of any shape."""
        return 1 + self._solid + self._wake(drag_coefficient)

    def dynamic_pressure_ratio(self, drag_coefficient: Array | float) -> Array | float:
        """q/q'."""
        return 1 + (2 - self.mach**2) * (self._solid + self._wake(drag_coefficient))

    def mach_ratio(self, drag_coefficient: Array | float) -> Array | float:
        """M/M'."""
        return 1 + (1 + 0.2 * self.mach**2) * (self._solid + self._wake(drag_coefficient))

    def corrected_drag(self, drag_coefficient: Array | float) -> Array | float:
        """c_d from the c_d' of the force between the walls."""
        square = self.mach**2
        solid = (3 - 0.6 * square) * self._solid
        return drag_coefficient * (1 - solid - (2 - square) * self._wake(drag_coefficient))

    def corrected_lift(self, lift_coefficient: Array | float, drag_coefficient: Array | float) -> Array | float:
        """c_l from c_l' and c_d'."""
        curvature = self.sigma / (1 - self.mach**2)
        blockage = (2 - self.mach**2) * (self._solid + self._wake(drag_coefficient))
        return lift_coefficient * (1 - curvature - blockage)

    def angle_correction(self, lift_coefficient: Array | float, moment_coefficient: Array | float) -> Array | float:
        """α − α', rad, to be added to the measured incidence; c_m' about the quarter chord."""
        scale = self.sigma / (2 * math.pi * math.sqrt(1 - self.mach**2))
        return scale * (lift_coefficient + 4 * moment_coefficient)


def section_wake_blockage(
    total_pressure: Array,
    static_pressure: Array,
    reference: Reference,
    *,
    weights: Array,
    height: float,
    total_temperature: Array | None = None,
) -> tuple[Array, Array]:
    """Wake-blockage velocity between parallel walls, and what it takes off the drag by Jones, Betz or momentum.

    Parameters
    ----------
    total_pressure, static_pressure : ndarray, shape (..., n)
        Pressures on the traverse, Pa.
    reference : Reference
        The undisturbed stream ahead of the model.
    weights : ndarray, shape (n,)
        Weights of the integral over the wake (`window_weights`), m.
    height : float
        Distance of the walls, m.
    total_temperature : ndarray, shape (..., n), optional
        Total temperature on the traverse, K; the stream's where not given.

    Returns
    -------
    velocity, excess : ndarray, shape (...)
        u_b, m/s, and ρu_b∫(u* − u) dz = 2ρh u_b², N/m, by which the methods for an unbounded stream read too high.
    """
    heat = reference.total_temperature if total_temperature is None else total_temperature
    star = speed_at(np.full_like(static_pressure, reference.total_pressure), static_pressure, heat, reference)
    deficit = (star - speed_at(total_pressure, static_pressure, heat, reference)) @ weights
    velocity = np.asarray(deficit / (2 * height))
    excess: Array = 2 * reference.density * height * velocity**2
    return velocity, excess
