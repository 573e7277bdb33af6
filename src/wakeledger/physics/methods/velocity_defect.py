"""The irreversible axial velocity defect and the exact split of the momentum balance that it makes.

Whatever Δū is, point by point and with the plane's normal downstream,

    −ρuΔū  +  {−ρu(u − U − Δū) − (p − p∞)}  =  −ρu(u − U) − (p − p∞):

the first part is viscous and wave drag, the second the induced drag in flux form. Two published defects are at hand:
*expanded* to the stream's pressure (form A: van der Vooren and Slooff 1990, Destarac and van der Vooren 2004) and
*local*, at the plane's own pressure and crossflow (form B, after Betz). With the expanded defect the flux form equals

    ½ρ∞[v² + w² − (1 − M²)(u − U − Δū)²]

up to third order in the disturbances, lossy streamtubes included; with the local one the product of loss and pressure
disturbance is left over. In incompressible flow −ρuΔu with the local defect is Betz's integrand less ρ(u* − u)(u* − U),
which Betz counts as profile drag. For a loss-free axial disturbance the remainder is
ρ∞U²M²[1 − (2 − γ)M²/3]((u − U)/U)³; a crossflow adds nothing at third order.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.physics.methods.betz_area import loss_free_axial_velocity, loss_free_axial_velocity_squared
from wakeledger.physics.methods.entropy_area import expanded_axial_velocity_squared
from wakeledger.physics.methods.momentum_area import momentum_integrand
from wakeledger.stream.reference import Reference

Form = Literal["expanded", "local"]


@dataclass(frozen=True)
class VelocityDefect:
    """Irreversible axial velocity defect of a plane.

    Attributes
    ----------
    defect : ndarray, shape (..., nz, ny)
        Δū, m/s, negative for a loss. Where it has no real value the flow counts as brought to rest (expanded, Δū = −U)
        or as compared with the stream itself (local, Δū = u − U).
    valid : ndarray of bool, shape (..., nz, ny)
        Where it has a real value.
    form : {"expanded", "local"}
        Which defect it is.
    """

    defect: Array
    valid: Mask
    form: Form


@dataclass(frozen=True)
class SplitIntegrands:
    """The momentum balance point by point, Pa, arrays of shape (..., nz, ny).

    Attributes
    ----------
    irreversible : ndarray
        −ρuΔū: viscous and wave drag, negative for thrust.
    induced : ndarray
        −ρu(u − U − Δū) − (p − p∞): induced drag in flux form.
    second_order : ndarray
        ½ρ∞[v² + w² − (1 − M²)(u − U − Δū)²]: the same to second order.
    """

    irreversible: Array
    induced: Array
    second_order: Array


@dataclass(frozen=True)
class DragSplit:
    """The split integrated over the plane, N, arrays of the fields' leading shape (...).

    Attributes
    ----------
    irreversible : ndarray
        Viscous and wave drag inside the region.
    outside : ndarray
        The same integrand outside the region: entropy that neither a wake nor a shock made.
    induced_flux : ndarray
        Induced drag in flux form over the window.
    induced_second_order : ndarray
        The same to second order.
    total : ndarray
        Momentum balance of the window, the sum of the first three; the crossflow energy beyond its edge is missing.
    invalid_area : ndarray
        Area of the region where the defect has no real value, m².
    form : {"expanded", "local"}
        Which defect was used.
    """

    irreversible: Array
    outside: Array
    induced_flux: Array
    induced_second_order: Array
    total: Array
    invalid_area: Array
    form: Form


def velocity_defect(flow: Flow, reference: Reference, *, form: Form = "expanded") -> VelocityDefect:
    """Irreversible axial velocity defect Δū of a plane.

    Parameters
    ----------
    flow : Flow
        The plane.
    reference : Reference
        The undisturbed stream.
    form : {"expanded", "local"}
        Expanded to the stream's pressure (A), or at the plane's own pressure and crossflow (B).

    Returns
    -------
    VelocityDefect

    Raises
    ------
    ValueError
        If the form is neither of the two.

    Notes
    -----
    A: Δū = U√{1 + 2ΔH/U² − [2/((γ−1)M²)](exp(κΔs/R) − 1)} − U. B: Δū = u − u*, u*² = 2[h₀∞ − h(p, s∞)] − v² − w².
    """
    if form == "expanded":
        square = expanded_axial_velocity_squared(flow, reference)
        valid = square > 0
        return VelocityDefect(np.sqrt(np.where(valid, square, 0.0)) - reference.speed, valid, form)
    if form == "local":
        valid = loss_free_axial_velocity_squared(flow, reference) > 0
        return VelocityDefect(flow.u - loss_free_axial_velocity(flow, reference), valid, form)
    raise ValueError(f"form is {form!r}; allowed are 'expanded' and 'local'")


def split_integrands(flow: Flow, reference: Reference, defect: Array) -> SplitIntegrands:
    """Split of the momentum balance by a velocity defect, point by point.

    Parameters
    ----------
    flow : Flow
        The plane.
    reference : Reference
        The undisturbed stream.
    defect : ndarray, shape (..., nz, ny)
        Δū, m/s.

    Returns
    -------
    SplitIntegrands
        Its first two parts add up to `momentum_integrand` exactly.
    """
    density = flow.density if reference.compressible else reference.density
    reversible = flow.u - reference.speed - defect
    factor = 1 - reference.mach**2 if reference.compressible else 1.0
    return SplitIntegrands(
        irreversible=-density * flow.u * defect,
        induced=-density * flow.u * reversible - (flow.static_pressure - reference.static_pressure),
        second_order=0.5 * reference.density * (flow.v**2 + flow.w**2 - factor * reversible**2),
    )


def drag_split(flow: Flow, reference: Reference, mask: Mask, *, form: Form = "expanded") -> DragSplit:
    """Split of the momentum balance of a window.

    Parameters
    ----------
    flow : Flow
        The plane.
    reference : Reference
        The undisturbed stream.
    mask : ndarray of bool, shape (..., nz, ny)
        Region whose losses are the body's.
    form : {"expanded", "local"}
        Which defect to use.

    Returns
    -------
    DragSplit

    Raises
    ------
    ValueError
        If the form is neither of the two.

    Notes
    -----
    The loss outside the region is reported, and not subtracted from anything: on one plane it cannot be told whether
    it was made near the body, inside the near-field drag, or by trailing vortices that decayed on their way.
    """
    grid = flow.grid
    found = velocity_defect(flow, reference, form=form)
    parts = split_integrands(flow, reference, found.defect)
    return DragSplit(
        irreversible=grid.integrate(np.where(mask, parts.irreversible, 0.0)),
        outside=grid.integrate(np.where(mask, 0.0, parts.irreversible)),
        induced_flux=grid.integrate(parts.induced),
        induced_second_order=grid.integrate(parts.second_order),
        total=grid.integrate(momentum_integrand(flow, reference)),
        invalid_area=np.count_nonzero(mask & ~found.valid, axis=(-2, -1)) * grid.cell_area,
        form=form,
    )
