"""Observed order and grid convergence index of a number computed on three grids.

I. B. Celik, U. Ghia, P. J. Roache, C. J. Freitas, H. Coleman, P. E. Raad, J. Fluids Eng. 130 (2008) 078001. With
representative cell sizes h1 < h2 < h3, r21 = h2/h1, r32 = h3/h2, ε21 = φ2 − φ1, ε32 = φ3 − φ2 and s = sign(ε32/ε21),

    p = |ln|ε32/ε21| + q(p)|/ln r21,    q(p) = ln[(r21^p − s)/(r32^p − s)],
    φext = (r21^p φ1 − φ2)/(r21^p − 1),   GCI = 1.25 |(φ1 − φ2)/φ1|/(r21^p − 1).

The absolute value of p is left out here: a root that is not positive says that the grids diverge, and that is what is
reported. Two grids show no order; with an assumed one the index has the factor 3 instead of 1.25 (P. J. Roache, J.
Fluids Eng. 116 (1994) 405).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

#: Safety factor of the index for three and more grids.
SAFETY_FACTOR = 1.25
#: The same for two grids, whose order is assumed.
SAFETY_FACTOR_ASSUMED = 3.0
#: Coverage factor the index is taken to have when it is turned into a standard uncertainty: it was fitted to hold in
#: about 95 % of cases.
COVERAGE_FACTOR = 2.0
#: Refinement ratios below this make differences drown in round-off and iteration errors (Celik et al.).
LEAST_RATIO = 1.3
#: Orders beyond these are not those of a scheme: a smaller one says that the grids are not in the asymptotic range, a
#: larger one would make the index too small.
ORDER_LIMITS = (0.5, 4.0)

Convergence = Literal["monotone", "oscillatory", "divergent", "converged", "assumed"]


@dataclass(frozen=True)
class GridConvergence:
    """What three grids, or two and an assumed order, say about the discretisation error of the finest.

    Attributes
    ----------
    convergence : {"monotone", "oscillatory", "divergent", "converged", "assumed"}
        How the three values approach each other; converged where the two finest are equal, assumed of two grids.
    order : float
        Observed, or assumed, order p; NaN where there is none.
    extrapolated : float
        Value extrapolated to zero cell size, the number's unit.
    approximate_error : float
        |(φ1 − φ2)/φ1|.
    extrapolated_error : float
        |(φext − φ1)/φext|.
    index : float
        Grid convergence index of the finest grid, relative to φ1; NaN where it cannot be had.
    ratios : (float, float)
        r21 and r32; the latter NaN of two grids.
    standard_uncertainty : float
        Of the finest grid's value, in its unit: the index over its coverage factor, or, where the grids do not converge
        or the order lies outside `ORDER_LIMITS`, half the spread of the three values if that is more. NaN where all
        values are equal.
    reason : str or None
        What limits the statement.
    """

    convergence: Convergence
    order: float
    extrapolated: float
    approximate_error: float
    extrapolated_error: float
    index: float
    ratios: tuple[float, float]
    standard_uncertainty: float
    reason: str | None = None


def cell_size(cells: float, *, dimensions: int = 3) -> float:
    """Representative cell size N^(−1/d) of a grid of a domain of unit size.

    Parameters
    ----------
    cells : float
        Number of cells N.
    dimensions : {1, 2, 3}
        Dimensions d in which the grid is refined.

    Returns
    -------
    float

    Raises
    ------
    ValueError
        If there are no cells, or the dimensions are none of the three.
    """
    if not cells > 0 or dimensions not in (1, 2, 3):
        raise ValueError(f"{cells} cells in {dimensions} dimensions; a positive number in 1, 2 or 3 is needed")
    return math.pow(cells, -1.0 / dimensions)


def grid_convergence(values: Sequence[float], sizes: Sequence[float]) -> GridConvergence:
    """Observed order and grid convergence index of three grids.

    Parameters
    ----------
    values : sequence of float
        The number on the three grids, any order of grids.
    sizes : sequence of float
        Their representative cell sizes (`cell_size`), any unit; all different.

    Returns
    -------
    GridConvergence

    Raises
    ------
    ValueError
        If there are not three finite values with three different positive sizes.
    """
    order = np.argsort(sizes)
    h = np.asarray(sizes, float)[order]
    phi = np.asarray(values, float)[order]
    if phi.shape != (3,) or h.shape != (3,) or not np.isfinite(phi).all() or not (h[0] > 0 and (np.diff(h) > 0).all()):
        raise ValueError(f"three values on grids of three sizes are needed; {list(values)} on {list(sizes)} were given")
    r21, r32 = float(h[1] / h[0]), float(h[2] / h[1])
    e21, e32 = float(phi[1] - phi[0]), float(phi[2] - phi[1])
    # Values that do not differ at all say nothing about the error.
    spread = float(np.ptp(phi)) / 2 or math.nan
    fine = float(phi[0])
    approximate = abs(e21 / fine) if fine else math.nan
    if e21 == 0.0:
        reason = "the two finest grids give the same value, so no order can be observed"
        return GridConvergence("converged", math.nan, fine, 0.0, math.nan, math.nan, (r21, r32), spread, reason)
    if e32 == 0.0:
        reason = "the two coarsest grids give the same value, so no order can be observed"
        return GridConvergence(
            "divergent", math.nan, math.nan, approximate, math.nan, math.nan, (r21, r32), spread, reason
        )
    convergence: Convergence = "monotone" if e32 / e21 > 0 else "oscillatory"
    p = observed_order(e32 / e21, r21, r32)
    if not p > 0:
        reason = "the differences do not shrink with the cells: the grids diverge"
        return GridConvergence(
            "divergent", math.nan, math.nan, approximate, math.nan, math.nan, (r21, r32), spread, reason
        )
    growth = r21**p - 1
    extrapolated = fine - e21 / growth
    error = abs((extrapolated - fine) / extrapolated) if extrapolated else math.nan
    index = SAFETY_FACTOR * approximate / growth
    uncertainty = SAFETY_FACTOR * abs(e21) / growth / COVERAGE_FACTOR
    reasons = []
    if min(r21, r32) < LEAST_RATIO:
        reasons.append(f"a refinement ratio of {min(r21, r32):.3g} is below {LEAST_RATIO:g}")
    if not ORDER_LIMITS[0] <= p <= ORDER_LIMITS[1]:
        reasons.append(f"the observed order {p:.2g} lies outside {ORDER_LIMITS[0]:g} to {ORDER_LIMITS[1]:g}")
        uncertainty = max(uncertainty, spread)
    if convergence == "oscillatory":
        reasons.append("the values oscillate from grid to grid")
        uncertainty = max(uncertainty, spread)
    return GridConvergence(
        convergence, p, extrapolated, approximate, error, index, (r21, r32), uncertainty, "; ".join(reasons) or None
    )


def assumed_convergence(values: Sequence[float], sizes: Sequence[float], *, order: float) -> GridConvergence:
    """Grid convergence index of two grids with an assumed order.

    Parameters
    ----------
    values : sequence of float
        The number on the two grids, either order of grids.
    sizes : sequence of float
        Their representative cell sizes (`cell_size`), any unit; different.
    order : float
        Order p of the scheme, positive.

    Returns
    -------
    GridConvergence
        Its index has the factor `SAFETY_FACTOR_ASSUMED`.

    Raises
    ------
    ValueError
        If there are not two finite values with two different positive sizes, or the order is not positive.
    """
    at = np.argsort(sizes)
    h = np.asarray(sizes, float)[at]
    phi = np.asarray(values, float)[at]
    if phi.shape != (2,) or h.shape != (2,) or not np.isfinite(phi).all() or not 0 < h[0] < h[1] or not order > 0:
        raise ValueError(
            f"two values on grids of two sizes and a positive order are needed; {list(values)} on {list(sizes)}"
            f" with {order} were given"
        )
    r21, fine, change = float(h[1] / h[0]), float(phi[0]), float(phi[1] - phi[0])
    growth = r21**order - 1
    extrapolated = fine - change / growth
    approximate = abs(change / fine) if fine else math.nan
    reasons = [f"two grids show no order; {order:g} is assumed"]
    if change == 0.0:
        reasons = ["both grids give the same value, which says nothing about the error"]
    if r21 < LEAST_RATIO:
        reasons.append(f"a refinement ratio of {r21:.3g} is below {LEAST_RATIO:g}")
    return GridConvergence(
        "assumed",
        float(order),
        extrapolated,
        approximate,
        abs((extrapolated - fine) / extrapolated) if extrapolated else math.nan,
        SAFETY_FACTOR_ASSUMED * approximate / growth if change else math.nan,
        (r21, math.nan),
        SAFETY_FACTOR_ASSUMED * abs(change) / growth / COVERAGE_FACTOR if change else math.nan,
        "; ".join(reasons),
    )


def observed_order(ratio: float, r21: float, r32: float) -> float:
    """Observed order of a ratio of differences.

    Parameters
    ----------
    ratio : float
        (φ3 − φ2)/(φ2 − φ1), not zero.
    r21, r32 : float
        Refinement ratios, above 1.

    Returns
    -------
    float
        p; NaN where no positive order fits (the differences do not shrink).
    """
    from scipy import optimize

    sign = math.copysign(1.0, ratio)
    target = math.log(abs(ratio))

    def off(p: float) -> float:
        # φ_i = φ0 + g h_i^p makes |ε32/ε21| = r21^p (r32^p − 1)/(r21^p − 1); oscillating, Celik et al. write + 1.
        return p * math.log(r21) + math.log((r32**p - sign) / (r21**p - sign)) - target

    low, high = 1e-6, 30.0
    if off(low) * off(high) > 0:
        return math.nan
    return float(optimize.brentq(off, low, high, xtol=1e-12))
