"""Induced and profile drag at several stations as one: their sum is constant, one turns into the other.

Trailing vortices that diffuse lose crossflow energy, which reappears as a loss of total pressure. For separate cores of
a² = a0² + 4νx/U each vortex loses, and the plane's induced and profile drag at a station are,

    S(x) = Σ_j (ρΓ_j²/8π) ln(a_j²(x)/a_j²(0)),    D_i(x) = D_i0 − S(x),    D_p(x) = D − D_i0 + S(x),

the sum over both vortices of a pair giving (ρΓ²/4π) ln(1 + 4νx/(U a0²)). The effective diffusivity ν, never negative,
is unknown: a measure of what a computation's grid, or turbulence, does to a vortex.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy import special

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.stream.reference import Reference

#: Rise of the misfit without diffusion above which the trend is resolved: 95 % of a chi-square variable with one degree
#: of freedom.
RESOLVED = 3.841459
#: Smallest core at the trailing edge that is believed, as a part of that at the first station.
_LEAST_CORE = 0.3
#: Diffusivities tried, and the rise of the misfit beyond which one is out of the question.
_DIFFUSIVITIES = 301
_UNLIKELY = 40.0
_PROBABILITY = 0.95


@dataclass(frozen=True)
class StationFit:
    """Drag of all stations together.

    Attributes
    ----------
    method : {"extrapolated", "weighted_mean"}
        Whether the values are those at the trailing edge by a resolved trend, or the means weighted with the
        covariance.
    induced_drag, profile_drag, total_drag : float
        N.
    covariance : ndarray, shape (3, 3)
        Of these three, N². The decay that is possible but not resolved is in a mean's variance.
    decay : ndarray, shape (n,)
        Induced drag that the vortices have lost by each station, N, added back to `induced_drag` in a resolved trend.
    decay_uncertainty : ndarray, shape (n,)
        Its standard uncertainty, N.
    diffusivity, diffusivity_uncertainty : float
        Effective diffusivity ν and its standard uncertainty, m²/s.
    chi_square : float
        Misfit of the fit that was used.
    degrees_of_freedom : int
        Data less parameters.
    reason : str
        Why this method was used, and what limits it.
    """

    method: Literal["extrapolated", "weighted_mean"]
    induced_drag: float
    profile_drag: float
    total_drag: float
    covariance: Array
    decay: Array
    decay_uncertainty: Array
    diffusivity: float
    diffusivity_uncertainty: float
    chi_square: float
    degrees_of_freedom: int
    reason: str

    @property
    def standard_uncertainty(self) -> Array:
        """Standard uncertainties of induced, profile and total drag, N, shape (3,)."""
        result: Array = np.sqrt(np.diag(self.covariance))
        return result


def vortex_decay(
    x: Array, diffusivity: Array | float, *, circulation: Array, core: Array, core_station: float, reference: Reference
) -> Array:
    """Induced drag that separate vortices have lost since the trailing edge.

    Parameters
    ----------
    x : ndarray, shape (n,)
        Distance behind the trailing edge, m.
    diffusivity : float or ndarray, shape (m,)
        ν, m²/s.
    circulation : ndarray, shape (k,)
        Γ of each vortex, m²/s, any sign; both of a pair.
    core : ndarray, shape (k,) or (m, k)
        Core length a of ξ = Γ/(πa²) exp(−r²/a²) at `core_station`, m.
    core_station : float
        m behind the trailing edge.
    reference : Reference
        The undisturbed stream.

    Returns
    -------
    ndarray, shape (m, n)
        Σ (ρΓ²/8π) ln(a²(x)/a²(0)), N.
    """
    nu = np.atleast_1d(np.asarray(diffusivity, float))[:, None, None]
    growth = 4 * nu / reference.speed
    edge = np.atleast_2d(core)[:, None, :] ** 2 - growth * core_station
    strength = reference.density * np.asarray(circulation, float) ** 2 / (8 * np.pi)
    decay: Array = np.log1p(growth * np.asarray(x, float)[:, None] / edge) @ strength
    return decay


def station_fit(
    station: Array,
    induced: Array,
    profile: Array,
    covariance: Array,
    *,
    circulation: Array,
    core: Array,
    core_uncertainty: Array | None = None,
    reference: Reference,
) -> StationFit:
    """Fit induced and profile drag of several stations with a constant sum.

    Parameters
    ----------
    station : ndarray, shape (n,)
        Distance of each plane behind the trailing edge, m, positive, two or more different ones.
    induced, profile : ndarray, shape (n,)
        Induced and profile drag (with the axial remainder, if any) of each plane, N, of the whole configuration.
    covariance : ndarray, shape (2n, 2n)
        Covariance of all induced and then all profile drags, N²; errors that the planes share included.
    circulation : ndarray, shape (k,)
        Γ of the trailing vortices of the whole configuration, m²/s; both of a pair.
    core : ndarray, shape (k,) or (n, k)
        Core length of each vortex at the first station, or at every station, m.
    core_uncertainty : ndarray, shape (k,) or (n, k), optional
        Standard uncertainty of the core lengths, m. Where it is given with the cores of every station, their growth
        speaks on the diffusivity, too.
    reference : Reference
        The undisturbed stream.

    Returns
    -------
    StationFit

    Raises
    ------
    DataError
        If there are fewer than two stations, one is at or ahead of the trailing edge, or shapes do not fit.

    Notes
    -----
    All diffusivities from zero to that which leaves the vortices 0.3 of their first core at the trailing edge are
    equally likely beforehand; D_i0 and D follow from each by generalised least squares, and means and covariance from
    all of them weighted with their likelihood. The trend is resolved where no diffusion at all fits worse by a
    chi-square of 3.84. Where the best fit itself is worse than 95 % of its kind, the covariance is scaled up to it.
    """
    x, cores, u_cores = _checked(station, induced, profile, covariance, circulation, core, core_uncertainty)
    n = x.size
    order = np.argsort(x)
    rows = np.concatenate([order, order + n])
    x, cores = x[order], cores[order[: cores.shape[0]]] if cores.shape[0] > 1 else cores
    data = np.concatenate([induced, profile])[rows]
    weight = np.linalg.pinv(np.asarray(covariance, float)[np.ix_(rows, rows)], hermitian=True)
    if u_cores is not None:
        u_cores = u_cores[order] if u_cores.shape[0] > 1 else u_cores
    largest = reference.speed * float(np.min(cores[0] ** 2)) * (1 - _LEAST_CORE**2) / (4 * x[0])
    # D_i = D_i0 − S, D_p = D − D_i0 + S with parameters (D_i0, D).
    one, none = np.ones(n), np.zeros(n)
    design = np.block([[one[:, None], none[:, None]], [-one[:, None], one[:, None]]])
    normal = np.linalg.inv(design.T @ weight @ design)

    def fitted(nu: Array) -> tuple[Array, Array, Array, Array]:
        """Diffusivities that are possible, the decay by them, the parameters and the misfit."""
        first, core_misfit = _cores_at_first(x, cores, u_cores, nu, reference)
        # Cores that the data allow may still be too small to reach the trailing edge.
        edge2 = first**2 - 4 * nu[:, None] * x[0] / reference.speed
        possible = (edge2 > 0.5 * (_LEAST_CORE * cores[0]) ** 2).all(axis=1)
        nu, first, core_misfit = nu[possible], first[possible], core_misfit[possible]
        decay = vortex_decay(x, nu, circulation=circulation, core=first, core_station=float(x[0]), reference=reference)
        target = data + np.concatenate([decay, -decay], axis=1)
        found = target @ (normal @ design.T @ weight).T
        left = target - found @ design.T
        return nu, decay, found, np.einsum("mi,ij,mj->m", left, weight, left) + core_misfit

    nu, decay, found, misfit = fitted(np.linspace(0.0, largest, _DIFFUSIVITIES))
    still, mean_found = float(misfit[0]), found[0]
    # Once more where it is likely at all, as finely.
    likely_at = np.flatnonzero(misfit < misfit.min() + _UNLIKELY)
    low, high = nu[max(likely_at[0] - 1, 0)], nu[min(likely_at[-1] + 1, nu.size - 1)]
    nu, decay, found, misfit = fitted(np.linspace(low, high, _DIFFUSIVITIES))
    best = int(np.argmin(misfit))
    # One core length of each vortex is fitted to those measured.
    core_data = 0 if u_cores is None else cores.size - cores.shape[1]
    resolved = bool(still - misfit[best] > RESOLVED)
    chi_square, free = (float(misfit[best]), 2 * n + core_data - 3) if resolved else (still, 2 * n + core_data - 2)
    excess = chi_square / free if chi_square > special.chdtri(free, 1 - _PROBABILITY) else 1.0
    likely = np.exp(-0.5 * (misfit - misfit[best]) / excess)
    likely /= likely.sum()
    mean = likely @ found if resolved else mean_found
    about = found - mean
    parameters = excess * normal + (likely[:, None] * about).T @ about
    # (D_i0, D) to (D_i0, D − D_i0, D).
    turn = np.array([[1.0, 0.0], [-1.0, 1.0], [0.0, 1.0]])
    lost = likely @ decay
    spread = np.sqrt(likely @ (decay - lost) ** 2)
    value = float(likely @ nu)
    back = np.argsort(order)
    return StationFit(
        method="extrapolated" if resolved else "weighted_mean",
        induced_drag=float(mean[0]),
        profile_drag=float(mean[1] - mean[0]),
        total_drag=float(mean[1]),
        covariance=turn @ parameters @ turn.T,
        decay=lost[back],
        decay_uncertainty=spread[back],
        diffusivity=value,
        diffusivity_uncertainty=float(np.sqrt(likely @ (nu - value) ** 2)),
        chi_square=chi_square,
        degrees_of_freedom=free,
        reason=_reason(resolved, still - float(misfit[best]), excess, best == nu.size - 1),
    )


def _checked(
    station: Array,
    induced: Array,
    profile: Array,
    covariance: Array,
    circulation: Array,
    core: Array,
    core_uncertainty: Array | None,
) -> tuple[Array, Array, Array | None]:
    """Stations, and cores and their uncertainties of shape (1 or n, k)."""
    x = np.asarray(station, float)
    n, k = x.size, np.size(circulation)
    if np.unique(x).size < 2 or not (x > 0).all():
        raise DataError(
            f"stations at {', '.join(f'{one:g} m' for one in np.atleast_1d(x))} give no trend",
            remedy="give two or more different stations behind the trailing edge",
        )
    shapes = (np.shape(induced), np.shape(profile), np.shape(covariance))
    if shapes != ((n,), (n,), (2 * n, 2 * n)):
        raise DataError(f"induced drag, profile drag and covariance have shapes {shapes} at {n} stations")
    cores = np.atleast_2d(np.asarray(core, float))
    if cores.shape[1] != k or cores.shape[0] not in (1, n) or not (cores > 0).all():
        raise DataError(f"core lengths of shape {cores.shape} do not fit {k} vortices at {n} stations")
    if core_uncertainty is None or cores.shape[0] == 1:
        return x, cores, None
    u_cores = np.broadcast_to(np.asarray(core_uncertainty, float), cores.shape)
    return x, cores, u_cores


def _cores_at_first(
    x: Array, cores: Array, u_cores: Array | None, nu: Array, reference: Reference
) -> tuple[Array, Array]:
    """Core lengths at the first station for each diffusivity, and the misfit of the others."""
    if u_cores is None:
        return np.broadcast_to(cores[0], (nu.size, cores.shape[1])), np.zeros(nu.size)
    growth = 4 * nu[:, None, None] * (x - x[0])[:, None] / reference.speed
    weight = 1 / (2 * cores * u_cores) ** 2
    target = cores**2 - growth
    square = (weight * target).sum(axis=1) / weight.sum(axis=0)
    misfit = (weight * (target - square[:, None, :]) ** 2).sum(axis=(1, 2))
    return np.sqrt(np.maximum(square, 0.0)), misfit


def _reason(resolved: bool, rise: float, excess: float, at_limit: bool) -> str:
    if resolved:
        text = f"chi-square is {rise:.3g} higher without diffusion: the trend is resolved, and followed upstream"
        if at_limit:
            text += "; the diffusivity is at its upper limit"
    else:
        text = f"chi-square is only {rise:.2g} higher without diffusion: no trend is resolved, the mean is given"
    if excess > 1:
        text += f"; the stations scatter {np.sqrt(excess):.2g} times as much as their uncertainties"
    return text
