"""What coarser grids of the same points give, and the order that shows."""

from __future__ import annotations

import math

from wakeledger.core.errors import DataError
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.places import sampled_mask
from wakeledger.run.chain.reduction import Reduction, Variation
from wakeledger.run.tables import counts_text

#: Change of the induced drag below which no order can be told, as a share of it.
_CONVERGED = 1e-4


def resolution_notes(chain: Chain, nominal: Reduction) -> list[str]:
    """A sentence about the induced drag on every second and every fourth line of the points.

    Parameters
    ----------
    chain : Chain
        The survey.
    nominal : Reduction
        Its nominal reduction.

    Returns
    -------
    list of str
        Empty where the points are scattered or too few.

    Notes
    -----
    The order p of f = f0 + c hᵖ follows from three grids, 2ᵖ = (f4 − f2)/(f2 − f1); noise, of which fewer points
    average less, lowers it.
    """
    if chain.gridding.operators() is None or not chain.settings.crossflow:
        return []
    found = [nominal.values["induced_drag"]]
    for step in (2, 4):
        try:
            coarse = chain.with_gridding(chain.gridding.decimated(step, phase=(0, 0)))
        except DataError:
            return []
        mask = sampled_mask(nominal.region.mask, nominal.flow.grid, coarse.gridding.grid)
        reduced = coarse.reduce(vary=Variation(mask=mask), estimates=False)
        found.append(float(reduced.forces.induced_drag) - chain.frozen.bias.get("induced_drag", 0.0))
    near, far = found[1] - found[0], found[2] - found[1]
    changes = " and ".join(counts_text(found[k] - found[0], nominal, chain) for k in (1, 2))
    said = f"On every second and every fourth line of the points the induced drag changes by {changes}"
    if abs(near) < _CONVERGED * abs(found[0]):
        return [f"{said}: it is converged."]
    if near * far <= 0:
        return [f"{said}: no order shows."]
    return [f"{said}: observed order {math.log2(far / near):.1f}."]
