"""Sums over finite-core (Gaussian) vortex elements in the unbounded crossflow plane.

An element of circulation Γ and core a carries ξ = Γ/(πa²) exp(−r²/a²). The stream function of one such element weighted
with the vorticity of another is −(ΓᵢΓⱼ/2π) [ln r + ½E₁(r²/s²)], s² = aᵢ² + aⱼ², which stays finite for i = j, so the
self terms are members of the same sum. Source: the double sum of the crossflow energy of Lamb-Oseen vortices.
"""

from __future__ import annotations

from typing import Literal

import numpy as np
from scipy import special

from wakeledger.core.grid import Array

#: A plane of symmetry beside the elements: y = 0 (half model) or z = 0 (ground).
Reflection = Literal["y", "z"] | None

# Beyond this argument E1 is below 1e-17 of the logarithm beside it.
_FAR = 36.0
# Below this argument ln x + E1(x) + γ loses digits to cancellation and its series takes over.
_NEAR = 1e-2


def pair_logarithm(distance_squared: Array, size_squared: Array) -> Array:
    """Vorticity-weighted mean logarithm of the distance between two Gaussian elements.

    Parameters
    ----------
    distance_squared : ndarray
        r², m²; zero is allowed.
    size_squared : ndarray
        s² = aᵢ² + aⱼ², m², positive; broadcast against the first.

    Returns
    -------
    ndarray
        ln r + ½E₁(r²/s²), with its limit ½(ln s² − γ) at r = 0.

    Examples
    --------
    >>> round(float(pair_logarithm(0.0, 2.0)), 6)  # self term ½(ln 2a² − γ), a = 1
    0.057966
    """
    r2, s2 = np.broadcast_arrays(np.asarray(distance_squared, float), np.asarray(size_squared, float))
    x = r2 / s2
    out = np.empty(x.shape)
    far = x > _FAR
    near = x < _NEAR
    between = ~(far | near)
    out[far] = np.log(r2[far])
    out[between] = np.log(r2[between]) + special.exp1(x[between])
    t = x[near]
    out[near] = np.log(s2[near]) - np.euler_gamma + t * (1 - t * (1 / 4 - t * (1 / 18 - t * (1 / 96 - t / 600))))
    out *= 0.5
    return out


def interaction_matrix(
    y: Array,
    z: Array,
    core_squared: Array,
    other_y: Array,
    other_z: Array,
    other_core_squared: Array,
    *,
    reflection: Reflection = None,
) -> Array:
    """Matrix K with ½ρ Γᵢ Kᵢⱼ Γⱼ the crossflow energy that elements i and j have in common.

    Parameters
    ----------
    y, z : ndarray, shape (n,)
        Positions of the first set, m.
    core_squared : ndarray, shape (n,)
        a² of the first set, m². Only the sum over a pair has to be positive.
    other_y, other_z, other_core_squared : ndarray, shape (m,)
        The second set.
    reflection : {"y", "z"}, optional
        Add to each of the second set its mirror image in y = 0 or z = 0, of opposite circulation.

    Returns
    -------
    ndarray, shape (n, m)
        −(ln r + ½E₁(r²/s²))/2π, less the same for the image.
    """
    size = np.add.outer(core_squared, other_core_squared)
    dy2 = np.subtract.outer(y, other_y) ** 2
    dz2 = np.subtract.outer(z, other_z) ** 2
    matrix = pair_logarithm(dy2 + dz2, size)
    if reflection == "y":
        matrix -= pair_logarithm(np.add.outer(y, other_y) ** 2 + dz2, size)
    elif reflection == "z":
        matrix -= pair_logarithm(dy2 + np.add.outer(z, other_z) ** 2, size)
    matrix /= -2 * np.pi
    return matrix


def induced_drag_of_elements(
    y: Array, z: Array, circulation: Array, core: Array, density: float, *, reflection: Reflection = None
) -> float:
    """Induced drag of a set of Gaussian elements by the closed-form double sum.

    Parameters
    ----------
    y, z : ndarray, shape (n,)
        Positions, m.
    circulation : ndarray, shape (n,)
        Γ, m²/s, positive counter-clockwise seen from behind.
    core : ndarray, shape (n,)
        Core a of ξ ∝ exp(−r²/a²), m, positive.
    density : float
        ρ, kg/m³.
    reflection : {"y", "z"}, optional
        The elements face their mirror images; the result is the surveyed side's share, half of the whole.

    Returns
    -------
    float
        D_i = −(ρ/4π) ΣΣ ΓᵢΓⱼ [ln rᵢⱼ + ½E₁(rᵢⱼ²/(aᵢ² + aⱼ²))], N. It depends on the length unit where the net
        circulation is not zero.

    Examples
    --------
    >>> pair = induced_drag_of_elements([-0.5, 0.5], [0, 0], [-1, 1], [0.05, 0.05], 1.0)
    >>> round(pair, 6)  # (ρΓ²/4π)[ln(b²/2a²) + γ + E1(b²/2a²)]
    0.46756
    """
    y, z, circulation = (np.asarray(values, float) for values in (y, z, circulation))
    core_squared = np.asarray(core, float) ** 2
    matrix = interaction_matrix(y, z, core_squared, y, z, core_squared, reflection=reflection)
    return float(0.5 * density * circulation @ matrix @ circulation)


def swirl_fraction(radius_squared: Array, core_squared: float) -> Array:
    """(1 − exp(−r²/a²))/r², m⁻², with its limit 1/a² at r = 0."""
    r2 = np.asarray(radius_squared, float)
    x = r2 / core_squared
    safe = np.where(x > 0, x, 1.0)
    return np.where(x > 0, -np.expm1(-safe) / safe, 1.0) / core_squared


def element_velocity(
    at_y: Array, at_z: Array, y: float, z: float, circulation: float, core: float
) -> tuple[Array, Array]:
    """Crossflow of one Gaussian element.

    Parameters
    ----------
    at_y, at_z : ndarray
        Where it is wanted, m.
    y, z, circulation, core : float
        The element: m, m, m²/s, m.

    Returns
    -------
    v, w : ndarray
        Γ/(2πr²) (1 − exp(−r²/a²)) (−(z − z₀), y − y₀), m/s.
    """
    dy, dz = np.asarray(at_y) - y, np.asarray(at_z) - z
    rate = circulation / (2 * np.pi) * swirl_fraction(dy**2 + dz**2, core**2)
    return -rate * dz, rate * dy
