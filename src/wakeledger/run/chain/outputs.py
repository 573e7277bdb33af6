"""The outputs of the chain by name, in the order of its output vector."""

from __future__ import annotations

#: Rows the chain always gives, in the ledger's order.
ROWS = (
    "profile_drag",
    "induced_drag",
    "induced_drag_free_air",
    "wave_drag",
    "residual_drag",
    "numerical_drag",
    "total_drag",
    "lift",
    "side_force",
    "rolling_moment",
    "root_bending_moment",
    "span_efficiency",
)
#: Rows that are moments: their coefficients are on span as well.
MOMENTS = ("rolling_moment", "root_bending_moment")
#: Figures about the tunnel that the chain gives, NaN in free air: the boundary factor δ, the wake-blockage velocity and
#: the upwash of the walls at the model as shares of the stream's speed, and the angle that corrects the incidence, rad.
TUNNEL = ("boundary_factor", "wake_blockage", "wall_upwash", "angle_correction")
#: Cross-checks the chain gives beside them, as (row, method).
ESTIMATES = (
    ("profile_drag", "entropy_area"),
    ("induced_drag", "energy_area"),
    ("induced_drag", "wake_line"),
    ("induced_drag", "vortex_sum"),
    ("total_drag", "momentum_area"),
    ("lift", "wake_line"),
)


def coefficient_of(row: str) -> str:
    """Name of a row's coefficient among the chain's outputs."""
    return f"{row} coefficient"


def corrected_coefficient_of(row: str) -> str:
    """Name of a row's coefficient on the blockage-corrected dynamic pressure."""
    return f"{row} corrected coefficient"


def estimate_of(row: str, method: str) -> str:
    """Name of an estimate among the chain's outputs."""
    return f"{row} {method}"


#: Everything the chain gives, in the order of its output vector.
OUTPUTS: tuple[str, ...] = (
    *ROWS,
    *(coefficient_of(row) for row in ROWS),
    *(corrected_coefficient_of(row) for row in ROWS),
    *TUNNEL,
    *(estimate_of(row, method) for row, method in ESTIMATES),
)


#: What the chain gives where the direction of the flow was not measured.
WITHOUT_CROSSFLOW: tuple[str, ...] = (
    "profile_drag",
    coefficient_of("profile_drag"),
    corrected_coefficient_of("profile_drag"),
    "wake_blockage",
    estimate_of("profile_drag", "entropy_area"),
)
#: Estimates that hold the wake of the model's support, whose drag is taken off them as off the rows.
WITH_SUPPORT: frozenset[str] = frozenset(
    (estimate_of("profile_drag", "entropy_area"), estimate_of("total_drag", "momentum_area"))
)
