"""Profile drag by Betz's integral over the wake region, and the axial partner term it leaves.

A. Betz, ZFM 16 (1925) 42; NACA TM 337. The measured plane is compared with a fictitious loss-free one that has the same
static pressure and crossflow; where there is no loss both are equal, so the integral needs the wake region only:

    D_p = ∬_W {(H∞ − H) + ½ρ(u* − u)(u* + u − 2U)} dA,     u*² = 2(H∞ − p)/ρ − v² − w².

What remains of the momentum balance is ½ρ∬{v² + w² − (u* − U)²} dA, exactly. For a compressible stream the same
comparison at local pressure gives D_p = −∬_W ρu(u − u*) dA, u*² = 2[h₀∞ − h(p, s∞)] − v² − w².
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from wakeledger.core.estimate import Estimate
from wakeledger.core.grid import Array
from wakeledger.physics.fields.flow import Flow, flow_of, mask_of
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.stream.reference import Reference

if TYPE_CHECKING:
    import xarray as xr


def loss_free_axial_velocity(flow: Flow, reference: Reference) -> Array:
    """Axial velocity u* of the loss-free flow at the same static pressure and crossflow.

    Parameters
    ----------
    flow : Flow
        The plane.
    reference : Reference
        The undisturbed stream.

    Returns
    -------
    ndarray, shape (..., nz, ny)
        u*, m/s; the stream's speed where it has no real value, which turns Betz's integrand into the plain momentum
        balance there instead of dropping the point.
    """
    square = loss_free_axial_velocity_squared(flow, reference)
    return np.where(square > 0, np.sqrt(np.maximum(square, 0)), reference.speed)


def loss_free_axial_velocity_squared(flow: Flow, reference: Reference) -> Array:
    """Square of u* of `loss_free_axial_velocity`, m²/s², shape (..., nz, ny); not positive where u* is not real."""
    crossflow = flow.v**2 + flow.w**2
    if reference.compressible:
        heat = reference.gamma / (reference.gamma - 1) * reference.gas_constant
        exponent = (reference.gamma - 1) / reference.gamma
        enthalpy = heat * reference.temperature * (flow.static_pressure / reference.static_pressure) ** exponent
        square: Array = 2 * (reference.total_enthalpy - enthalpy) - crossflow
        return square
    slow: Array = 2 * (reference.total_pressure - flow.static_pressure) / reference.density - crossflow
    return slow


def profile_integrand(flow: Flow, reference: Reference, loss_free: Array) -> Array:
    """Betz's integrand, Pa; zero where nothing was lost.

    Parameters
    ----------
    flow, reference
        The plane and the undisturbed stream.
    loss_free : ndarray, shape (..., nz, ny)
        u* of `loss_free_axial_velocity`.

    Returns
    -------
    ndarray, shape (..., nz, ny)
    """
    if reference.compressible:
        compressible: Array = flow.density * flow.u * (loss_free - flow.u)
        return compressible
    gain = 0.5 * reference.density * (loss_free - flow.u) * (loss_free + flow.u - 2 * reference.speed)
    return reference.total_pressure - flow.total_pressure + gain


def axial_integrand(loss_free: Array, reference: Reference) -> Array:
    """The axial partner term −½ρ(1 − M²)(u* − U)², Pa.

    Never to be added without its partner −½ρφσ: for a disturbance that decays downstream the two cancel over the whole
    plane.
    """
    factor = 1 - reference.mach**2 if reference.compressible else 1.0
    result: Array = -0.5 * reference.density * factor * (loss_free - reference.speed) ** 2
    return result


def profile_drag(flow: Flow, reference: Reference, mask: Mask) -> Array:
    """Profile drag over the wake region, N, shape (...); see `betz_area`."""
    loss_free = loss_free_axial_velocity(flow, reference)
    return flow.grid.integrate(np.where(mask, profile_integrand(flow, reference, loss_free), 0.0))


def betz_area(plane: xr.Dataset, reference: Reference) -> Estimate:
    """Profile drag of a labelled plane by Betz's integral over its wake mask.

    Parameters
    ----------
    plane : Dataset
        With u, v, w, total_pressure, static_pressure and wake_mask on a uniform (z, y) grid.
    reference : Reference
        The undisturbed stream.

    Returns
    -------
    Estimate
        Row ``profile_drag``, N, positive downstream. Its uncertainty is unknown: it needs the sources of a survey.

    Raises
    ------
    DataError
        If the plane lacks a variable or is not uniform.

    Notes
    -----
    D_p = ∬_W {(H∞ − H) + ½ρ(u* − u)(u* + u − 2U)} dA, after Betz (1925).
    """
    value = float(profile_drag(flow_of(plane, reference), reference, mask_of(plane)))
    return Estimate("profile_drag", "betz_area", value, reason="no uncertainty source was given")
