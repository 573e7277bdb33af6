"""The outputs of the chain by name, in the order of its output vector."""

from __future__ import annotations

#: Rows the chain always gives, in the ledger's order.
ROWS = (
    "profile_drag",
    "induced_drag",
    "residual_drag",
    "total_drag",
    "lift",
    "side_force",
    "rolling_moment",
    "span_efficiency",
)
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


def estimate_of(row: str, method: str) -> str:
    """Name of an estimate among the chain's outputs."""
    return f"{row} {method}"


#: Everything the chain gives, in the order of its output vector.
OUTPUTS: tuple[str, ...] = (
    *ROWS,
    *(coefficient_of(row) for row in ROWS),
    *(estimate_of(row, method) for row, method in ESTIMATES),
)


#: What the chain gives where the direction of the flow was not measured.
WITHOUT_CROSSFLOW: tuple[str, ...] = (
    "profile_drag",
    coefficient_of("profile_drag"),
    estimate_of("profile_drag", "entropy_area"),
)
