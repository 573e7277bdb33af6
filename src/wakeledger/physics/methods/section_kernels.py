"""Integrals that give the drag of a section from the pressures on one traverse through its wake.

Jones (1936, ARC R&M 1688), Betz (1925, NACA TM 337) and the plain momentum balance, each incompressible or compressible
as the reference says. Everything is per unit span and positive downstream. The last axis of every array is the
traverse, so that many perturbed traverses go through in one call.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from types import MappingProxyType

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.stream.reference import Reference


def window_weights(coordinate: Array, lower: float, upper: float) -> Array:
    """Weights w with sum(w f) = integral of f from lower to upper, f being straight between the points.

    Parameters
    ----------
    coordinate : ndarray, shape (n,)
        Ascending positions along the traverse, m; any spacing.
    lower, upper : float
        Limits within the traverse, m; they need not be points of it.

    Returns
    -------
    ndarray, shape (n,)
        Weights, m.
    """
    start, stop = coordinate[:-1], coordinate[1:]
    a, b = np.clip(lower, start, stop), np.clip(upper, start, stop)
    right_share = 0.5 * ((b - start) ** 2 - (a - start) ** 2) / (stop - start)
    weights = np.zeros(coordinate.size)
    weights[1:] += right_share
    weights[:-1] += (b - a) - right_share
    return weights


def jones(
    coordinate: Array,
    total_pressure: Array,
    static_pressure: Array,
    reference: Reference,
    *,
    weights: Array | None = None,
    total_temperature: Array | None = None,
) -> Array:
    """Section drag by the method of Jones.

    Parameters
    ----------
    coordinate : ndarray, shape (n,)
        Ascending positions across the wake, normal to stream and span, m.
    total_pressure, static_pressure : ndarray, shape (..., n)
        Pressures on the traverse, Pa, on the same zero as the reference's.
    reference : Reference
        The undisturbed stream.
    weights : ndarray, shape (n,), optional
        Weights of the integral (`window_weights`); the whole traverse where not given.
    total_temperature : ndarray, shape (..., n), optional
        Total temperature on the traverse, K, used in compressible flow only; the stream's where not given.

    Returns
    -------
    ndarray, shape (...)
        Drag per unit span, N/m, positive downstream.

    Notes
    -----
    D' = integral of rho u (U - u2) dz, where each stream tube reaches the stream's static pressure with the total
    pressure it has on the traverse: u2 = sqrt(2 (H - p_inf)/rho), or isentropically in compressible flow. In
    incompressible flow this is 2 q integral sqrt(g - k) (1 - sqrt(g)) dz with g = (H - p_inf)/q, k = (p - p_inf)/q
    (B. M. Jones, ARC R&M 1688, 1936). Where H < p_inf a tube cannot reach p_inf and u2 = 0 is used.
    """
    total = _total_temperature(total_temperature, reference)
    density, speed = _state(total_pressure, static_pressure, total, reference)
    recovered = speed_at(total_pressure, reference.static_pressure, total, reference)
    return _integral(density * speed * (reference.speed - recovered), coordinate, weights)


def betz(
    coordinate: Array,
    total_pressure: Array,
    static_pressure: Array,
    reference: Reference,
    *,
    weights: Array | None = None,
    total_temperature: Array | None = None,
) -> Array:
    """Section drag by the method of Betz; parameters and result as for `jones`.

    Notes
    -----
    D' = integral of rho* u* (u* - U) - rho u (u - U) dz, where the star is the flow that has the local static pressure
    and the stream's total pressure and temperature. In incompressible flow this is
    integral (H_inf - H) + rho/2 (u* - u)(u* + u - 2 U) dz (Betz, ZFM 16, 1925; NACA TM 337). The integrand vanishes
    outside the wake.
    """
    total = _total_temperature(total_temperature, reference)
    density, speed = _state(total_pressure, static_pressure, total, reference)
    ideal_density, ideal_speed = _ideal_state(static_pressure, reference)
    stream = reference.speed
    integrand = ideal_density * ideal_speed * (ideal_speed - stream) - density * speed * (speed - stream)
    return _integral(integrand, coordinate, weights)


def momentum(
    coordinate: Array,
    total_pressure: Array,
    static_pressure: Array,
    reference: Reference,
    *,
    weights: Array | None = None,
    total_temperature: Array | None = None,
) -> Array:
    """Section drag by the momentum balance; parameters and result as for `jones`.

    Notes
    -----
    D' = integral of rho u (U - u) - (p - p_inf) dz, exact over an unbounded traverse. A finite window leaves out what
    the outer flow carries; `momentum_outer_part` is its difference from `betz`.
    """
    total = _total_temperature(total_temperature, reference)
    density, speed = _state(total_pressure, static_pressure, total, reference)
    integrand = density * speed * (reference.speed - speed) - (static_pressure - reference.static_pressure)
    return _integral(integrand, coordinate, weights)


def momentum_outer_part(
    coordinate: Array, static_pressure: Array, reference: Reference, *, weights: Array | None = None
) -> Array:
    """What the momentum balance reads above Betz within a window, N/m.

    Parameters
    ----------
    coordinate : ndarray, shape (n,)
        Ascending positions across the wake, m.
    static_pressure : ndarray, shape (..., n)
        Static pressure on the traverse, Pa.
    reference : Reference
        The undisturbed stream.
    weights : ndarray, shape (n,), optional
        Weights of the integral; the whole traverse where not given.

    Returns
    -------
    ndarray, shape (...)

    Notes
    -----
    integral of rho* u* (U - u*) - (p - p_inf) dz, in incompressible flow -rho/2 integral (u* - U)^2 dz: the momentum
    balance of the loss-free flow. With the crossflow's energy it vanishes over an unbounded traverse.
    """
    density, speed = _ideal_state(static_pressure, reference)
    integrand = density * speed * (reference.speed - speed) - (static_pressure - reference.static_pressure)
    return _integral(integrand, coordinate, weights)


KERNELS: Mapping[str, Callable[..., Array]] = MappingProxyType({"jones": jones, "betz": betz, "momentum": momentum})


def _integral(integrand: Array, coordinate: Array, weights: Array | None) -> Array:
    used = window_weights(coordinate, -math.inf, math.inf) if weights is None else weights
    result: Array = integrand @ used
    return result


def _total_temperature(given: Array | None, reference: Reference) -> Array | float:
    return reference.total_temperature if given is None else given


def speed_at(total: Array | float, static: Array | float, total_temperature: Array | float, ref: Reference) -> Array:
    """Speed of the isentropic state between two pressures, m/s; zero where the static pressure is the higher one."""
    if not ref.compressible:
        square = 2.0 * (np.asarray(total) - static) / ref.density
    else:
        kappa = (ref.gamma - 1.0) / ref.gamma
        square = 2.0 * ref.heat_capacity * total_temperature * (1.0 - (np.asarray(static) / total) ** kappa)
    return np.sqrt(np.maximum(square, 0.0))


def _state(
    total: Array, static: Array, total_temperature: Array | float, ref: Reference
) -> tuple[Array | float, Array]:
    """Density, kg/m³, and speed, m/s."""
    speed = speed_at(total, static, total_temperature, ref)
    if not ref.compressible:
        return ref.density, speed
    temperature = total_temperature - 0.5 * speed * speed / ref.heat_capacity
    return static / (ref.gas_constant * temperature), speed


def _ideal_state(static: Array, ref: Reference) -> tuple[Array | float, Array]:
    total = np.full_like(static, ref.total_pressure)
    return _state(total, static, ref.total_temperature, ref)


def static_at(speed: Array, ref: Reference) -> Array:
    """Static pressure of loss-free flow at a speed, Pa."""
    if not ref.compressible:
        return ref.total_pressure - 0.5 * ref.density * speed * speed
    ratio = 1.0 - 0.5 * speed * speed / (ref.heat_capacity * ref.total_temperature)
    result: Array = ref.total_pressure * ratio ** (ref.gamma / (ref.gamma - 1.0))
    return result


def total_at(speed: Array, static: Array, ref: Reference, *, total_temperature: Array | None = None) -> Array:
    """Total pressure at a speed and static pressure, Pa; the total temperature is the stream's where not given."""
    if not ref.compressible:
        return static + 0.5 * ref.density * speed * speed
    ratio = 1.0 - 0.5 * speed * speed / (ref.heat_capacity * _total_temperature(total_temperature, ref))
    result: Array = static * ratio ** (-ref.gamma / (ref.gamma - 1.0))
    return result
