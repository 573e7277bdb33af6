"""The wind-tunnel boundary factor δ: what the walls do to the induced drag, as one number.

    ΔC_D = δ (S/C) C_L²,    Δα = δ (S/C) C_L,

both to be added to what was measured; positive between closed walls, which lower the induced drag, and negative in an
open jet. The same vorticity gives it from the induced drag with the walls and without them; classical theory gives it
from the loading on a straight lifting line in the section. The upwash far downstream is 2δ, that at the model δ.

H. Glauert, R&M 1566 (1933), for the classical theory.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from wakeledger.core.errors import SurveyError
from wakeledger.core.grid import Array
from wakeledger.physics.fields.boundary import ClosedWalls, OpenJet, points_inside
from wakeledger.physics.fields.section_setup import size_of
from wakeledger.physics.fields.wall_correction import section_interaction

#: Vortices of the elliptic loading; the walls' share is smooth, so that the rule is exact.
_VORTICES = 32
#: Span of the small wing as a part of the section's area over its larger extent.
_SMALL = 1e-3


def boundary_factor(
    as_tested: Array | float,
    free_air: Array | float,
    lift: Array | float,
    *,
    dynamic_pressure: float,
    area: float,
) -> Array:
    """Boundary factor from the induced drag of one vorticity field with its walls and in free air.

    Parameters
    ----------
    as_tested, free_air : ndarray or float
        Induced drag with the walls and without them, N.
    lift : ndarray or float
        N; the forces belong to the same part of the configuration as the area.
    dynamic_pressure : float
        Pa.
    area : float
        Area C of the section, m² (`flow_area` of the boundary).

    Returns
    -------
    ndarray
        δ = (D_free − D_tested) qC/L²; NaN without lift.
    """
    lift = np.asarray(lift, float)
    square = np.where(lift != 0, lift**2, np.nan)
    factor: Array = (np.asarray(free_air, float) - as_tested) * dynamic_pressure * area / square
    return factor


def angle_correction(factor: float, *, lift_coefficient: float, reference_area: float, area: float) -> float:
    """Correction of the angle of attack Δα = δ (S/C) C_L, rad, to be added to the measured one."""
    return factor * reference_area / area * lift_coefficient


def classical_boundary_factor(
    boundary: ClosedWalls | OpenJet, loading: str, *, span: float = 0.0, centre: tuple[float, float] = (0.0, 0.0)
) -> float:
    """Boundary factor of a straight level lifting line in a section.

    Parameters
    ----------
    boundary : ClosedWalls or OpenJet
        The section; with reflection plane "y" the line spans both halves, with "z" it is compared with the same line
        above the same ground.
    loading : {"small", "elliptic", "uniform"}
        A wing that is small against the section, or the loading along the span.
    span : float
        Distance of the tips, or of the two tip vortices of a uniform loading, m; not used for the small wing.
    centre : (float, float)
        y and z of the line's middle, m.

    Returns
    -------
    float
        δ.

    Raises
    ------
    SurveyError
        If the line reaches outside the section.
    ValueError
        If the loading is unknown.
    """
    size = size_of(boundary.section)
    if loading == "small":
        span = _SMALL * boundary.section.area / size
    if loading == "elliptic":
        # Γ_b = √(1 − η²) with η = cos θ: equal steps of θ carry Γ = cos θ.
        eta = np.cos((np.arange(_VORTICES) + 0.5) * np.pi / _VORTICES)
        circulation = eta * np.pi / _VORTICES
    elif loading in ("small", "uniform"):
        eta, circulation = np.array([-1.0, 1.0]), np.array([-1.0, 1.0])
    else:
        raise ValueError(f"loading {loading!r} is unknown; it is 'small', 'elliptic' or 'uniform'")
    y, z = centre[0] + span / 2 * eta, np.full(eta.size, float(centre[1]))
    ends = np.array([-1.0, 1.0]) * span / 2 + centre[0]
    inside = bool(points_inside(boundary.section, ends, np.full(2, float(centre[1]))).all())
    if not inside or (boundary.reflection == "z" and centre[1] <= 0):
        raise SurveyError(
            f"a span of {span:g} m about y = {centre[0]:g} m, z = {centre[1]:g} m reaches outside the section",
            place="[boundary] section",
            remedy="check [model] span and the positions of the walls",
        )
    stream = replace(boundary, reflection=None) if boundary.reflection == "y" else boundary
    walls = section_interaction(stream, y, z, margin=1e-3 * size)
    # ρ = U = 1: D = ½ΣΓχΓ, L = ΣΓy, q = ½.
    added, lift = 0.5 * circulation @ walls @ circulation, circulation @ y
    return float(boundary_factor(added, 0.0, lift, dynamic_pressure=0.5, area=boundary.flow_area))
