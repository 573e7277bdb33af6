"""What is known of computed planes beyond their rows: their own mesh's integrals, slipstreams, and diagnostics."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from scipy import ndimage

from wakeledger.confidence.terms import NumericalTerm
from wakeledger.ledger.rows import Diagnostic
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.fields.loss_regions import energised_region
from wakeledger.physics.fields.triangle_quadrature import area_weights, delaunay
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.physics.methods.betz_area import loss_free_axial_velocity, profile_integrand
from wakeledger.physics.methods.first_order_entropy import first_order_bracket
from wakeledger.physics.methods.power_balance import exergy_integrands, power_integrands
from wakeledger.physics.methods.slipstream import slipstream
from wakeledger.physics.methods.velocity_defect import drag_split
from wakeledger.physics.methods.vorticity_area import vorticity_forces
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.reduction import Reduction
from wakeledger.run.chain.zeroing import zeroed
from wakeledger.run.load import SurveyInput
from wakeledger.run.tables import counts_text
from wakeledger.run.uncertainty.changes import changes_with

MESH = "integral on the points' own mesh"
#: Excess of total pressure or enthalpy over the stream's that is a slipstream's, as a share of q, and its fewest cells.
ENERGISED = 0.02
_FEWEST_CELLS = 25

_POWERS: Mapping[str, str] = {
    "axial_kinetic": "power in the axial disturbance's kinetic energy",
    "crossflow_kinetic": "power in the crossflow's kinetic energy",
    "pressure_work": "power of the pressure on the axial disturbance",
    "dissipation": "power dissipated upstream of the plane",
    "mechanical": "mechanical exergy outflow",
    "thermal": "thermal exergy outflow",
    "anergy": "anergy outflow",
}


def mesh_term(survey: SurveyInput, chain: Chain, nominal: Reduction) -> NumericalTerm | None:
    """What resampling did to the profile drag: its integral on the points' own triangles or cells, against the grid's.

    Parameters
    ----------
    survey : SurveyInput
        A computed plane.
    chain : Chain
        Its chain.
    nominal : Reduction
        Its nominal reduction.

    Returns
    -------
    NumericalTerm or None
        None where the points have no mesh, or no complete state.
    """
    points, reference, settings = survey.points, nominal.reference, chain.settings
    state = chain.state(reference)
    if state.total_pressure is None or state.static_pressure is None:
        return None
    grid, mask = nominal.flow.grid, nominal.region.mask
    usable = np.isfinite(state.u) & np.isfinite(state.total_pressure)
    if points.areas is not None:
        weights = np.where(usable, points.areas, 0.0)
    else:
        triangles = points.triangles
        if triangles is None:
            try:
                triangles = np.flatnonzero(usable)[delaunay(points.y[usable], points.z[usable])]
            except ValueError:
                return None
        weights = area_weights(points.y, points.z, triangles[usable[triangles].all(axis=1)])
    flow = Flow(
        grid,
        state.u,
        state.v,
        state.w,
        state.total_pressure,
        state.static_pressure,
        state.density,
        state.temperature + (state.u**2 + state.v**2 + state.w**2) / (2 * reference.heat_capacity)
        if reference.compressible
        else np.nan,
    )
    flow = zeroed(
        flow,
        reference,
        nominal.loss_zero,
        primary=settings.primary,
        measured=set(chain.measured),
        directed=chain.directed,
    )
    with np.errstate(invalid="ignore"):
        integrand = profile_integrand(flow, reference, loss_free_axial_velocity(flow, reference))
    iz, iy = np.rint((points.z - grid.z0) / grid.dz).astype(int), np.rint((points.y - grid.y0) / grid.dy).astype(int)
    held = (iz >= 0) & (iz < grid.nz) & (iy >= 0) & (iy < grid.ny) & usable
    held[held] = mask[iz[held], iy[held]]
    # Points stand on one side of a reflection plane; both count for a half model.
    factor = 2.0 if settings.reflection == "y" else 1.0
    on_mesh = factor * float(np.sum(weights[held] * integrand[held]))
    star = nominal.loss_free
    gridded = np.where(mask, profile_integrand(nominal.flow, reference, star), 0.0)
    change = abs(on_mesh - settings.counted * float(grid.integrate(gridded)))
    moved = dict.fromkeys(("profile_drag", "total_drag"), change)
    return NumericalTerm(MESH, changes_with(moved, nominal.values), "rectangular")


def slipstream_region(chain: Chain, first: Reduction) -> Mask | None:
    """Where work or heat was put into a computed flow; None where it was nowhere."""
    if not chain.settings.computed:
        return None
    found = energised_region(first.flow, first.reference, level=ENERGISED)
    labels, count = ndimage.label(found)
    sizes = ndimage.sum_labels(found, labels, np.arange(1, count + 1))
    kept = np.isin(labels, 1 + np.flatnonzero(sizes >= _FEWEST_CELLS))
    return kept if kept.any() else None


def diagnostics(chain: Chain, nominal: Reduction) -> tuple[Diagnostic, ...]:
    """Other forms of the drag of a computed plane, and where its power goes; none of them is in a row.

    Parameters
    ----------
    chain : Chain
        The survey.
    nominal : Reduction
        Its nominal reduction.

    Returns
    -------
    tuple of Diagnostic
        Empty for measured planes.
    """
    settings, flow, reference = chain.settings, nominal.flow, nominal.reference
    if not settings.computed:
        return ()
    mask, counted = nominal.region.mask, settings.counted
    found = []
    if reference.compressible:
        bracket = first_order_bracket(flow, reference, mask)
        split = drag_split(flow, reference, mask)
        for name, value, meaning in (
            ("oswatitsch", bracket.mass_flux_weighted, "drag by (T/U) times the entropy outflow, first order"),
            ("local_entropy", bracket.local, "drag by the static pressure times the entropy, first order"),
            (
                "irreversible_expanded",
                split.irreversible,
                "irreversible drag, defect expanded to the stream's pressure",
            ),
            ("induced_flux", split.induced_flux, "what that leaves of the momentum balance over the window"),
            ("induced_second_order", split.induced_second_order, "the same to second order, with (1 - M^2)"),
        ):
            found.append(Diagnostic(name, counted * float(value), "N", meaning))
        powers = exergy_integrands(flow, reference)
    else:
        powers = power_integrands(flow, reference)
    for name, integrand in powers.items():
        power = counted * float(flow.grid.integrate(np.where(mask, integrand, 0.0)))
        found.append(Diagnostic(name, power, "W", _POWERS.get(name, name.replace("_", " "))))
    region = chain.frozen.energised
    if region is not None:
        apart = slipstream(flow, reference, region)
        without = vorticity_forces(
            np.where(region, 0.0, nominal.vorticity),
            flow.grid,
            reference,
            boundary=settings.boundary.whole,
            reflection=settings.reflection,
        )
        for name, figure, unit, meaning in (
            (
                "slipstream_thrust",
                counted * float(apart.thrust),
                "N",
                "net thrust of the slipstream, in no row",
            ),
            ("slipstream_power", counted * float(apart.power), "W", "power put into the slipstream"),
            (
                "slipstream_swirl",
                counted * float(apart.swirl_energy),
                "N",
                "crossflow energy of the slipstream",
            ),
            ("slipstream_area", counted * float(apart.area), "m2", "its area"),
            (
                "induced_without_slipstream",
                float(without.induced_drag),
                "N",
                "induced drag of the vorticity outside the slipstream",
            ),
        ):
            found.append(Diagnostic(name, figure, unit, meaning))
    return tuple(found)


def slipstream_notes(chain: Chain, nominal: Reduction) -> list[str]:
    """A sentence about a slipstream that was kept apart, if there is one."""
    region, counted = chain.frozen.energised, chain.settings.counted
    if region is None:
        return []
    area = counted * float(np.count_nonzero(region)) * nominal.flow.grid.cell_area
    thrust = counted * float(slipstream(nominal.flow, nominal.reference, region).thrust)
    return [
        f"Over {area:.3g} m2 the total pressure or enthalpy is above the stream's: a slipstream or heated flow, kept"
        f" out of the profile drag; its thrust is {counts_text(thrust, nominal, chain)}. Its vorticity is in the"
        " induced drag."
    ]
