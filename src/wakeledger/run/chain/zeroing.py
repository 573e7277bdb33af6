"""The plane with its total pressure raised by a constant, and what depends on it following."""

from __future__ import annotations

from collections.abc import Set
from dataclasses import replace

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.physics.fields.flow import Flow
from wakeledger.stream.reference import Reference


def zeroed(flow: Flow, reference: Reference, zero: float, *, primary: str, measured: Set[str], directed: bool) -> Flow:
    """The plane with a constant added to its total pressure.

    Parameters
    ----------
    flow : Flow
        The plane.
    reference : Reference
        The undisturbed stream.
    zero : float
        Added to the total pressure, Pa.
    primary : {"total_pressure", "velocity"}
        Which variables were measured.
    measured : set of str
        Their names.
    directed : bool
        Whether the flow's direction was measured.

    Returns
    -------
    Flow
        A measured speed stays, and the static pressure follows if a pressure was measured at all; where the speed
        itself comes from the pressures, it follows, at the same static pressure and the same measured, else total,
        temperature.
        Where the flow's direction was measured, the crossflow follows the speed; where v and w themselves were, they
        stay.
    """
    total = flow.total_pressure + zero
    raised = total / flow.total_pressure
    if primary == "velocity":
        if not reference.compressible:
            # Beside a measured velocity it is the pressure that is off, whichever of the two was measured.
            implied = zero if {"total_pressure", "static_pressure"} & measured else 0.0
            return replace(flow, total_pressure=total, static_pressure=flow.static_pressure + implied)
        return replace(
            flow,
            total_pressure=total,
            static_pressure=flow.static_pressure * raised,
            density=flow.density * raised,
        )
    if not reference.compressible:
        square = 2 * (total - flow.static_pressure) / reference.density
        return replace(_with_speed(flow, square, directed=directed), total_pressure=total)
    exponent = reference.gas_constant / reference.heat_capacity
    ratio = np.maximum(total / flow.static_pressure, 1.0) ** exponent
    if {"temperature", "density"} & measured:
        # The static temperature was measured and stays.
        temperature = flow.static_pressure / (reference.gas_constant * flow.density)
        total_temperature, density = temperature * ratio, flow.density
    else:
        total_temperature, density = flow.total_temperature, flow.density * raised**exponent
    square = 2 * reference.heat_capacity * total_temperature * (1 - 1 / ratio)
    return replace(
        _with_speed(flow, square, directed=directed),
        total_pressure=total,
        density=density,
        total_temperature=total_temperature,
    )


def _with_speed(flow: Flow, square: Array, *, directed: bool) -> Flow:
    """The plane with another square of the speed, m²/s², in the measured direction or at the measured crossflow."""
    crossflow = flow.v**2 + flow.w**2
    if not directed:
        return replace(flow, u=axial_velocity(square - crossflow, flow.u))
    factor = np.sqrt(np.maximum(square, 0.0) / (flow.u**2 + crossflow))
    return replace(flow, u=factor * flow.u, v=factor * flow.v, w=factor * flow.w)


def axial_velocity(square: Array, measured: Array) -> Array:
    """Axial velocity of a given square, in the direction measured; as measured where the square is not positive."""
    return np.where(square > 0, np.copysign(np.sqrt(np.maximum(square, 0.0)), measured), measured)
