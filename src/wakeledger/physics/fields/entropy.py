"""Entropy and total enthalpy of a plane above those of the undisturbed stream."""

from __future__ import annotations

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.physics.fields.flow import Flow
from wakeledger.stream.reference import Reference


def entropy_loss(flow: Flow, reference: Reference) -> Array:
    """Loss p∞Δs/R that the entropy stands for, Pa, positive for a loss.

    Parameters
    ----------
    flow : Flow
        The plane; its total temperature counts in compressible flow.
    reference : Reference
        The undisturbed stream.

    Returns
    -------
    ndarray, shape (..., nz, ny)

    Notes
    -----
    Δs/R = ln(T0/T0∞)/κ − ln(p0/p0∞) with κ = (γ−1)/γ, which equals ln(T/T∞)/κ − ln(p/p∞). In incompressible flow it
    is the total-pressure loss H∞ − H itself.
    """
    if not reference.compressible:
        loss: Array = reference.total_pressure - flow.total_pressure
        return loss
    heat = reference.heat_capacity / reference.gas_constant
    increase = heat * np.log(flow.total_temperature / reference.total_temperature)
    increase = increase - np.log(flow.total_pressure / reference.total_pressure)
    result: Array = reference.static_pressure * increase
    return result


def enthalpy_excess(flow: Flow, reference: Reference) -> Array:
    """Total enthalpy above the stream's, ΔH = cp(T0 − T0∞), J/kg, shape (..., nz, ny); zero in incompressible flow."""
    if not reference.compressible:
        return np.zeros(np.shape(flow.u))
    excess: Array = reference.heat_capacity * (flow.total_temperature - reference.total_temperature)
    return np.broadcast_to(excess, np.shape(flow.u))


def static_temperature(flow: Flow, reference: Reference) -> Array:
    """Static temperature p/(ρR) of a compressible plane, K, shape (..., nz, ny)."""
    temperature: Array = flow.static_pressure / (reference.gas_constant * flow.density)
    return temperature
