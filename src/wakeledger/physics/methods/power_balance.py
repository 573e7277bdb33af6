"""Where the power D·U goes: the mechanical power balance and the exergy balance of one plane, as diagnostics.

Both are the momentum balance in another order of terms, point by point, so they test no drag; they say where the loss
is. M. Drela, AIAA J. 47 (2009) 1761; A. Arntz (2014) for the exergy. Side terms of a finite control volume are not
among them.

    incompressible   ½ρu(u − U)² + ½ρu(v² + w²) + (p − p∞)(u − U) + u(H∞ − H) = U·f
    exergy           ½ρu[(u − U)² + v² + w²] + (p − p∞)(u − U)
                     + ρu[Δe + p∞(1/ρ − 1/ρ∞) − T∞Δs] + T∞ρuΔs               = U·f + ρuΔH

with f = −ρu(u − U) − (p − p∞).
"""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType

from wakeledger.core.errors import InputError
from wakeledger.core.grid import Array
from wakeledger.physics.fields.entropy import enthalpy_excess, entropy_loss, static_temperature
from wakeledger.physics.fields.flow import Flow
from wakeledger.stream.reference import Reference


def power_integrands(flow: Flow, reference: Reference) -> Mapping[str, Array]:
    """Terms of the mechanical power balance of an incompressible plane, W/m², each of shape (..., nz, ny).

    Parameters
    ----------
    flow : Flow
        The plane.
    reference : Reference
        The undisturbed stream, incompressible.

    Returns
    -------
    mapping of str to ndarray
        ``axial_kinetic`` ½ρu(u − U)², ``crossflow_kinetic`` ½ρu(v² + w²), ``pressure_work`` (p − p∞)(u − U),
        ``dissipation`` u(H∞ − H), what was dissipated upstream of the plane. Their sum is U times `momentum_integrand`.

    Raises
    ------
    InputError
        If the reference is compressible, where the dissipation does not show in the total pressure alone.
    """
    if reference.compressible:
        raise InputError(
            "the mechanical power balance of one plane is closed in incompressible flow only",
            remedy="use the exergy balance",
        )
    axial = flow.u - reference.speed
    mass_flux = reference.density * flow.u
    return MappingProxyType(
        {
            "axial_kinetic": 0.5 * mass_flux * axial**2,
            "crossflow_kinetic": 0.5 * mass_flux * (flow.v**2 + flow.w**2),
            "pressure_work": (flow.static_pressure - reference.static_pressure) * axial,
            "dissipation": flow.u * (reference.total_pressure - flow.total_pressure),
        }
    )


def exergy_integrands(flow: Flow, reference: Reference) -> Mapping[str, Array]:
    """Terms of the exergy balance of a compressible plane, W/m², each of shape (..., nz, ny).

    Parameters
    ----------
    flow : Flow
        The plane.
    reference : Reference
        The undisturbed stream, compressible.

    Returns
    -------
    mapping of str to ndarray
        ``mechanical``, ``thermal``, ``anergy`` T∞ρuΔs, and ``enthalpy`` −ρuΔH, what was put in as heat or work. Their
        sum is U times `momentum_integrand`.

    Raises
    ------
    InputError
        If the reference is not compressible: without a gas there is no entropy to speak of.
    """
    if not reference.compressible:
        raise InputError(
            "the exergy balance needs a compressible stream",
            remedy="give static pressure and temperature and set compressible = true, or use the power balance",
        )
    mass_flux = flow.density * flow.u
    axial = flow.u - reference.speed
    kinetic = 0.5 * mass_flux * (axial**2 + flow.v**2 + flow.w**2)
    warmer = static_temperature(flow, reference) - reference.temperature
    internal = (reference.heat_capacity - reference.gas_constant) * warmer
    displaced = reference.static_pressure * (1 / flow.density - 1 / reference.density)
    # T∞Δs = (p∞Δs/R)/ρ∞ for a perfect gas.
    lost = entropy_loss(flow, reference) / reference.density
    return MappingProxyType(
        {
            "mechanical": kinetic + (flow.static_pressure - reference.static_pressure) * axial,
            "thermal": mass_flux * (internal + displaced - lost),
            "anergy": mass_flux * lost,
            "enthalpy": -mass_flux * enthalpy_excess(flow, reference),
        }
    )
