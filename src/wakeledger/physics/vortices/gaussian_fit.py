"""Least-squares fit of one Gaussian vortex to the measured velocity around it.

The velocity is fitted, not its derivatives: v_θ = Γ/(2πr)(1 − exp(−r²/a²)) about an unknown centre, on top of what
other vortices and the stream's misalignment leave there (a uniform velocity, irrotational strain and dilatation).
Points count with a weight that fades smoothly beyond the swirl's peak, so that the answer does not hinge on which
points a sharp window happens to hold.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import optimize

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.gaussian_elements import swirl_fraction

#: Radius of the swirl's peak in units of a: the root of exp(x) = 1 + 2x, x = (r/a)².
PEAK_RADIUS = 1.1209064227
#: Share of Γ/(2πa) that the peak swirl reaches.
PEAK_SWIRL = 0.6381726864
# The weight is exp(−(r/reach)⁴) with this reach in units of a.
_WEIGHT_REACH = 1.5
_WINDOW = 2.2
_STAGES = 3
_POLISH = 80
_CONVERGED = 1e-13


@dataclass(frozen=True)
class GaussianFit:
    """Vortex fitted to the velocity, and how its centre answers to a change of the data.

    Attributes
    ----------
    y, z : float
        Centre, m.
    circulation : float
        Γ of the fitted swirl, m²/s.
    core : float
        Core a, m.
    misfit : float
        Weighted rms of the residual over the fitted peak swirl.
    points : ndarray of int, shape (n,)
        Flat indices of the grid points used.
    response : ndarray, shape (2, 2n)
        d(y, z)/d(v at the points, w at the points).
    """

    y: float
    z: float
    circulation: float
    core: float
    misfit: float
    points: NDArray[np.intp]
    response: Array


@dataclass(frozen=True)
class _Patch:
    """Data around a vortex in local units: lengths over `length`, velocities over `speed`."""

    y: Array
    z: Array
    velocity: Array
    weight: Array

    def model_and_jacobian(self, p: Array) -> tuple[Array, Array]:
        """Weighted residual and its derivatives for p = (y, z, Γ/2π, ln a, v₀, w₀, two strains, dilatation)."""
        dy, dz = self.y - p[0], self.z - p[1]
        core_squared = np.exp(2 * p[3])
        r2 = dy**2 + dz**2
        fraction = swirl_fraction(r2, core_squared)
        decay = np.exp(-np.minimum(r2 / core_squared, 700.0)) / core_squared
        # d(fraction)/d(r²) = (decay − fraction)/r², whose limit at the centre is −1/(2a⁴).
        near = r2 < 1e-6 * core_squared
        slope = np.where(near, -0.5 / core_squared**2, (decay - fraction) / np.where(near, 1.0, r2))
        strength = p[2]
        one, nil = np.ones_like(dy), np.zeros_like(dy)
        v = [-strength * fraction * dz, one, nil, self.y, self.z, self.y]
        w = [strength * fraction * dy, nil, one, -self.z, self.y, self.z]
        residual_v = v[0] + sum(c * b for c, b in zip(p[4:], v[1:], strict=True))
        residual_w = w[0] + sum(c * b for c, b in zip(p[4:], w[1:], strict=True))
        residual = np.concatenate([residual_v, residual_w]) - self.velocity
        by_y = (2 * strength * slope * dy * dz, -strength * (fraction + 2 * slope * dy**2))
        by_z = (strength * (fraction + 2 * slope * dz**2), -2 * strength * slope * dy * dz)
        by_strength = (-fraction * dz, fraction * dy)
        # d(fraction)/d(ln a) = −2 decay.
        by_core = (2 * strength * decay * dz, -2 * strength * decay * dy)
        columns = [np.concatenate(pair) for pair in (by_y, by_z, by_strength, by_core)]
        columns += [np.concatenate(pair) for pair in zip(v[1:], w[1:], strict=True)]
        return residual * self.weight, np.stack(columns, axis=1) * self.weight[:, None]


def fit_gaussian(
    v: Array, w: Array, grid: UniformGrid, *, y: float, z: float, circulation: float, core: float
) -> GaussianFit | None:
    """Fit a Gaussian vortex near a first guess.

    Parameters
    ----------
    v, w : ndarray, shape (nz, ny)
        Crossflow, m/s.
    grid : UniformGrid
        The grid.
    y, z, circulation, core : float
        First guess: m, m, m²/s, m.

    Returns
    -------
    GaussianFit or None
        None where the fit runs away from the guess or too few points are at hand.
    """
    first_core = core
    fit: GaussianFit | None = None
    for _ in range(_STAGES):
        fit = _stage(v, w, grid, y, z, circulation, core)
        if fit is None or not 0.25 < fit.core / first_core < 4.0:
            return None
        y, z, circulation, core = fit.y, fit.z, fit.circulation, fit.core
    return fit


def _stage(
    v: Array, w: Array, grid: UniformGrid, y: float, z: float, circulation: float, core: float
) -> GaussianFit | None:
    """One fit with the weights that belong to the given vortex."""
    reach = max(_WINDOW * core, 2.5 * max(grid.dy, grid.dz))
    columns = np.flatnonzero(np.abs(grid.y - y) <= reach * (1 + 1e-9))
    rows = np.flatnonzero(np.abs(grid.z - z) <= reach * (1 + 1e-9))
    speed = PEAK_SWIRL * abs(circulation) / (2 * np.pi * core)
    if columns.size < 3 or rows.size < 3 or not speed > 0:
        return None
    yy, zz = np.meshgrid((grid.y[columns] - y) / core, (grid.z[rows] - z) / core)
    yy, zz = yy.ravel(), zz.ravel()
    cut = np.ix_(rows, columns)
    velocity = np.concatenate([v[cut].ravel(), w[cut].ravel()]) / speed
    spread = max(_WEIGHT_REACH, 1.5 * max(grid.dy, grid.dz) / core)
    weight = np.exp(-(((yy**2 + zz**2) / spread**2) ** 2) / 2)
    patch = _Patch(yy, zz, velocity, np.concatenate([weight, weight]))
    start = np.zeros(9)
    start[2] = circulation / (2 * np.pi * core * speed)
    solution = optimize.least_squares(
        lambda p: patch.model_and_jacobian(p)[0],
        start,
        jac=lambda p: patch.model_and_jacobian(p)[1],
        method="lm",
        xtol=1e-12,
        ftol=1e-12,
        gtol=1e-12,
    )
    p, pseudo_inverse = _polished(patch, solution.x)
    if not np.isfinite(p).all() or np.hypot(p[0], p[1]) > 2 or abs(p[3]) > np.log(3.0) or p[2] * circulation <= 0:
        return None
    fitted_core = core * float(np.exp(p[3]))
    residual = patch.model_and_jacobian(p)[0]
    rms = float(np.sqrt((residual**2).sum() / (patch.weight**2).sum()))
    return GaussianFit(
        y=y + float(p[0]) * core,
        z=z + float(p[1]) * core,
        circulation=float(p[2]) * 2 * np.pi * core * speed,
        core=fitted_core,
        misfit=rms * float(np.exp(p[3])) / (PEAK_SWIRL * abs(float(p[2]))),
        points=(rows[:, None] * grid.ny + columns).ravel(),
        response=pseudo_inverse[:2] * patch.weight * (core / speed),
    )


def _polished(patch: _Patch, p: Array) -> tuple[Array, Array]:
    """Plain Gauss-Newton steps until rounding: mirrored data must give mirrored answers to the last digits."""
    pseudo_inverse: Array = np.zeros((p.size, patch.velocity.size))
    for _ in range(_POLISH):
        residual, jacobian = patch.model_and_jacobian(p)
        pseudo_inverse = np.linalg.pinv(jacobian)
        step = pseudo_inverse @ residual
        p = p - step
        if not np.isfinite(p).all() or np.abs(p[:4]).max() > 5 or np.abs(step[:4]).max() < _CONVERGED:
            break
    return p, pseudo_inverse


@dataclass(frozen=True)
class ProfileFit:
    """Γ(r) = Γ(1 − exp(−r²/a²)) fitted to circulations around circles.

    Attributes
    ----------
    circulation : float
        Γ, m²/s.
    core : float
        Core a, m.
    core_response : ndarray, shape (m,)
        da/dΓ(r), s/m.
    """

    circulation: float
    core: float
    core_response: Array


def fit_profile(radius: Array, enclosed: Array, *, core: float) -> ProfileFit | None:
    """Fit a Gaussian vortex to its radial profile of circulation.

    Parameters
    ----------
    radius : ndarray, shape (m,)
        Radii of the circles, m.
    enclosed : ndarray, shape (m,)
        Γ(r) by line integrals, m²/s.
    core : float
        First guess of a, m.

    Returns
    -------
    ProfileFit or None
        Least squares with equal weights; None where it runs away from the guess by more than a factor of two.
    """
    logarithm = 0.0
    circulation, pseudo_inverse = 0.0, np.zeros((2, radius.size))
    for _ in range(_POLISH):
        x = (radius / (core * np.exp(logarithm))) ** 2
        share = -np.expm1(-x)
        circulation = float(share @ enclosed / (share @ share))
        by_core = -2 * circulation * x * np.exp(-x)
        pseudo_inverse = np.linalg.pinv(np.stack([share, by_core], axis=1))
        step = float(pseudo_inverse[1] @ (enclosed - circulation * share))
        logarithm += float(np.clip(step, -0.5, 0.5))
        if abs(step) < _CONVERGED:
            break
        if abs(logarithm) > np.log(2.0):
            return None
    fitted = core * float(np.exp(logarithm))
    return ProfileFit(circulation, fitted, pseudo_inverse[1] * fitted)
