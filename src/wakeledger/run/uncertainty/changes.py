"""Changes of the outputs when a choice is made differently, or some rows change: known, none, or unknown."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.run.chain.outputs import ESTIMATES, OUTPUTS, coefficient_of, corrected_coefficient_of, estimate_of

_ESTIMATES = [OUTPUTS.index(estimate_of(row, method)) for row, method in ESTIMATES]


def changes(varied: Array, same: Array, *, estimates: bool = True) -> Array:
    """Change of every output.

    Parameters
    ----------
    varied : ndarray, shape (..., m)
        Outputs with the choice made differently.
    same : ndarray, shape (m,)
        Outputs as they are.
    estimates : bool
        Whether the estimates of other methods were evaluated; else the choice is none of theirs, and they get zero.

    Returns
    -------
    ndarray, shape (..., m)
        Zero for an output that has no value, of which nothing can be in doubt; NaN for one that has a value here and
        none there: what the choice is worth is then unknown, and so is the output's uncertainty.
    """
    found: Array = np.where(np.isfinite(same), np.subtract(varied, same), 0.0)
    if not estimates:
        found[..., _ESTIMATES] = 0.0
    return found


def changes_with(rows: Mapping[str, float], values: Mapping[str, float], outputs: Sequence[str] = OUTPUTS) -> Array:
    """Change of every output where some rows change, and their coefficients in proportion.

    Parameters
    ----------
    rows : mapping of str to float
        Changes by row, in its unit.
    values : mapping of str to float
        The chain's outputs.
    outputs : sequence of str
        The m outputs wanted.

    Returns
    -------
    ndarray, shape (m,)
        Zero for an output that has no value, of which nothing can be in doubt; NaN for the coefficient of a row that is
        zero.
    """
    moved = dict(rows)
    for row, change in rows.items():
        for name in (coefficient_of(row), corrected_coefficient_of(row)):
            moved[name] = share_of(change, values.get(row, math.nan)) * values.get(name, math.nan)
    known = (moved.get(name, 0.0) if math.isfinite(values.get(name, math.nan)) else 0.0 for name in outputs)
    vector: Array = np.array(list(known))
    return vector


def with_induced_drag(change: float, values: Mapping[str, float]) -> dict[str, float]:
    """Changes of the rows that hold the induced drag, by row, where that changes by so much, N."""
    free = values.get("induced_drag_free_air", math.nan)
    drag = values["induced_drag"] if math.isnan(free) else free
    efficiency = -share_of(change, drag) * values.get("span_efficiency", math.nan)
    # The walls' part is the same.
    return dict.fromkeys(("induced_drag", "induced_drag_free_air", "total_drag"), change) | {
        "span_efficiency": efficiency
    }


def share_of(change: float, value: float) -> float:
    """A change over a value; NaN where that is zero."""
    return change / value if value else math.nan
