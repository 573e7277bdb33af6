"""One function per published method, on a labelled plane and its stream; what ``wakeledger.methods`` names."""

from __future__ import annotations

from typing import TYPE_CHECKING

from wakeledger.core.estimate import Estimate
from wakeledger.core.plane import array_of, grid_of
from wakeledger.physics.fields.flow import mask_of
from wakeledger.physics.methods.betz_area import betz_area
from wakeledger.physics.methods.energy_area import energy_area
from wakeledger.physics.methods.entropy_area import entropy_area
from wakeledger.physics.methods.momentum_area import momentum_area
from wakeledger.physics.methods.section_drag import section_drag
from wakeledger.physics.methods.station_fit import station_fit
from wakeledger.physics.methods.velocity_defect import drag_split
from wakeledger.physics.methods.vorticity_area import vorticity_area
from wakeledger.physics.methods.wake_line import wake_line as line_forces
from wakeledger.physics.methods.wave_split import wave_split
from wakeledger.physics.vortices.vortex_sum import vortex_sum as summed_vortices

if TYPE_CHECKING:
    import xarray as xr

    from wakeledger.stream.reference import Reference

__all__ = [
    "betz_area",
    "drag_split",
    "energy_area",
    "entropy_area",
    "momentum_area",
    "section_drag",
    "station_fit",
    "vortex_sum",
    "vorticity_area",
    "wake_line",
    "wave_split",
]

_NO_SOURCE = "no uncertainty source was given"


def wake_line(plane: xr.Dataset, reference: Reference) -> tuple[Estimate, Estimate]:
    """Induced drag and lift of a labelled plane from line integrals along the wake's trace.

    Parameters
    ----------
    plane : Dataset
        With v, w and wake_mask (`wakeledger.find_wake`).
    reference : Reference
        The undisturbed stream.

    Returns
    -------
    (Estimate, Estimate)
        Rows ``induced_drag`` (N, positive downstream) and ``lift`` (N, positive up), each with what the choice of the
        path is worth; NaN with the reason where the window does not enclose the wake.

    Raises
    ------
    DataError
        If the plane lacks a variable or is not uniform.

    Notes
    -----
    D_i = -½ρ ∫ Γ_b V_n ds on the trace, the finite thickness by vorticity-weighted parts
    (`wakeledger.physics.methods.wake_line`).
    """
    v, w, grid = array_of(plane, "v"), array_of(plane, "w"), grid_of(plane)
    found = line_forces(v, w, grid, reference.density, reference.speed, mask=mask_of(plane))
    reason = found.reason or _NO_SOURCE
    return (
        Estimate(
            "induced_drag", "wake_line", found.induced_drag, method_uncertainty=found.method_uncertainty, reason=reason
        ),
        Estimate("lift", "wake_line", found.lift, method_uncertainty=found.lift_method_uncertainty, reason=reason),
    )


def vortex_sum(plane: xr.Dataset, reference: Reference) -> Estimate:
    """Induced drag of a labelled plane as a double sum over its vortices and the rest of its wake.

    Parameters
    ----------
    plane : Dataset
        With v, w and wake_mask (`wakeledger.find_wake`).
    reference : Reference
        The undisturbed stream.

    Returns
    -------
    Estimate
        Row ``induced_drag``, N, positive downstream, with what the split and the cells' size are worth; ``terms`` hold
        the number of vortices and the sums of their and of the remainder's circulations, m²/s.

    Raises
    ------
    DataError
        If the plane lacks a variable or is not uniform.
    ValueError
        If v or w is not finite everywhere.

    Notes
    -----
    D_i = -(ρ/4π) ΣΣ ΓᵢΓⱼ [ln rᵢⱼ + ½E₁(rᵢⱼ²/(aᵢ² + aⱼ²))], i = j included (`wakeledger.physics.vortices.vortex_sum`).
    """
    v, w = array_of(plane, "v"), array_of(plane, "w")
    found = summed_vortices(v, w, grid_of(plane), reference.density, mask=mask_of(plane))
    return Estimate(
        "induced_drag",
        "vortex_sum",
        found.induced_drag,
        method_uncertainty=found.method_uncertainty,
        reason=found.reason or _NO_SOURCE,
        terms={
            "vortices": float(len(found.vortices)),
            "vortex_circulation": found.vortex_circulation,
            "remainder_circulation": found.remainder_circulation,
        },
    )
