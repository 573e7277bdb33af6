"""Profile drag by expanding every streamtube of the wake to the stream's pressure.

J. van der Vooren, J. W. Slooff (1990); D. Destarac, J. van der Vooren (2004), the irreversible axial velocity defect:

    D_p = −∬_W ρu Δū dA,   Δū = U √{1 + 2ΔH/U² − [2/((γ−1)M²)](exp(κΔs/R) − 1)} − U,

with its incompressible limit Δū = √{U² − 2(H∞ − H)/ρ} − U. It has no real value where the total pressure lies below the
stream's static pressure, as in the core of a strong tip vortex: those places are counted, and said.
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


def expanded_axial_velocity_squared(flow: Flow, reference: Reference) -> Array:
    """Square of the axial velocity after expansion to the stream's pressure, m²/s²; negative where there is none.

    Parameters
    ----------
    flow : Flow
        The plane.
    reference : Reference
        The undisturbed stream.

    Returns
    -------
    ndarray, shape (..., nz, ny)
    """
    speed = reference.speed
    if not reference.compressible:
        return speed**2 - 2 * (reference.total_pressure - flow.total_pressure) / reference.density
    gamma = reference.gamma
    exponent = (gamma - 1) / gamma
    heat = reference.gas_constant / exponent
    ratio = flow.total_temperature / reference.total_temperature
    # exp(κΔs/R) = (T0/T0∞) (p0/p0∞)^−κ
    entropy_factor = ratio * (flow.total_pressure / reference.total_pressure) ** -exponent
    excess_enthalpy = heat * (flow.total_temperature - reference.total_temperature)
    lost = 2 * speed**2 / ((gamma - 1) * reference.mach**2) * (entropy_factor - 1)
    result: Array = speed**2 + 2 * excess_enthalpy - lost
    return result


def entropy_profile_drag(flow: Flow, reference: Reference, mask: Mask) -> tuple[Array, Array]:
    """Profile drag, N, and the area without a real value, m², both of shape (...); see `entropy_area`."""
    square = expanded_axial_velocity_squared(flow, reference)
    real = square > 0
    defect = np.sqrt(np.where(real, square, 0.0)) - reference.speed
    density = flow.density if reference.compressible else reference.density
    integrand = np.where(mask, -density * flow.u * defect, 0.0)
    return flow.grid.integrate(integrand), np.count_nonzero(mask & ~real, axis=(-2, -1)) * flow.grid.cell_area


def expansion_doubt(flow: Flow, reference: Reference, profile_integrand: Array) -> float:
    """How far expansion to the stream's pressure may differ from Betz's local form, as a standard uncertainty, N.

    Parameters
    ----------
    flow : Flow
        The plane, arrays of shape (nz, ny).
    reference : Reference
        The undisturbed stream.
    profile_integrand : ndarray, shape (nz, ny)
        Betz's integrand, Pa, zero outside the wake region.

    Returns
    -------
    float

    Notes
    -----
    Both are exact where the wake has the stream's pressure and no crossflow. Elsewhere they differ in second order, by
    about the loss times the local C_p (tests/physics/test_area_methods.py), so |C_p| and the crossflow's share of q
    weighted with the drag bound the difference; they are taken as its standard uncertainty.
    """
    q = reference.dynamic_pressure
    off_pressure = np.abs(flow.static_pressure - reference.static_pressure) / q
    defect = np.clip((reference.total_pressure - flow.total_pressure) / q, 0.0, 1.0)
    return float(flow.grid.integrate(np.abs(profile_integrand) * off_pressure * (0.05 + defect)))


def entropy_area(plane: xr.Dataset, reference: Reference) -> Estimate:
    """Profile drag of a labelled plane by the irreversible velocity defect over its wake mask.

    Parameters
    ----------
    plane : Dataset
        With u, v, w, total_pressure, static_pressure and wake_mask on a uniform (z, y) grid.
    reference : Reference
        The undisturbed stream.

    Returns
    -------
    Estimate
        Row ``profile_drag``, N, positive downstream; ``terms["invalid_area"]`` is the area, m², where the expansion
        has no real value and the flow counts as brought to rest.

    Raises
    ------
    DataError
        If the plane lacks a variable or is not uniform.
    """
    value, invalid = entropy_profile_drag(flow_of(plane, reference), reference, mask_of(plane))
    terms = {"invalid_area": float(invalid)}
    return Estimate("profile_drag", "entropy_area", float(value), reason="no uncertainty source was given", terms=terms)
