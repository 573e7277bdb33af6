"""What the survey file's wandering takes off the induced drag: a note and a numerical term.

The rows stay those of the mean plane: what is known to be missing from them, and is not put back, is in their doubt.
"""

from __future__ import annotations

import math

from wakeledger.confidence.terms import NumericalTerm
from wakeledger.physics.vortices.smearing import smearing_loss
from wakeledger.physics.vortices.vortex_sum import VortexSum
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.outputs import ESTIMATES, estimate_of
from wakeledger.run.chain.reduction import Reduction
from wakeledger.run.config.tables import WakeTable
from wakeledger.run.tables import counts_text
from wakeledger.run.uncertainty.changes import changes_with, with_induced_drag

WANDERING = "wandering of the vortices"


def _lost(vortices: VortexSum, chain: Chain, nominal: Reduction, deviation: float) -> float:
    """Induced drag that a wandering takes, N; NaN where it would alone make a core larger than was measured."""
    gamma = [one.circulation for one in vortices.vortices]
    cores = [one.core_length for one in vortices.vortices]
    return chain.settings.counted * smearing_loss(gamma, cores, deviation, density=nominal.reference.density)


def _doubt(wake: WakeTable, vortices: VortexSum, chain: Chain, nominal: Reduction) -> float | None:
    """Standard uncertainty of what wandering takes, from that of the wandering, N; None where that is not given."""
    deviation, doubt = wake.wandering, wake.wandering_standard_uncertainty
    if deviation is None or doubt is None:
        return None
    found, low, high = (
        _lost(vortices, chain, nominal, size) for size in (deviation, max(deviation - doubt, 0.0), deviation + doubt)
    )
    return math.nan if math.isnan(high) else max(found - low, high - found)


def wandering_term(wake: WakeTable, vortices: VortexSum, chain: Chain, nominal: Reduction) -> NumericalTerm | None:
    """What wandering took off the rows, and the doubt of that.

    Parameters
    ----------
    wake : WakeTable
        ``[wake]`` with ``wandering`` and its uncertainty.
    vortices : VortexSum
        The vortices of the mean plane.
    chain : Chain
        The survey.
    nominal : Reduction
        Its reduction.

    Returns
    -------
    NumericalTerm or None
        √(ΔD² + u²(ΔD)) on the induced and the total drag, and on the estimates of the same smeared plane, so that a
        cross-check does not see it. Without an uncertainty of the wandering ΔD alone, whose own doubt is small beside
        it. Unknown where the wandering is too large for the data; None where none is asked for.
    """
    # Without a vortex nothing is there that could have wandered, which the notes say.
    if wake.wandering is None or not vortices.vortices:
        return None
    found = _lost(vortices, chain, nominal, wake.wandering)
    size = math.hypot(found, _doubt(wake, vortices, chain, nominal) or 0.0)
    moved = with_induced_drag(size, nominal.values)
    moved |= {estimate_of(row, method): size for row, method in ESTIMATES if row in moved}
    return NumericalTerm(WANDERING, changes_with(moved, nominal.values))


def wandering_notes(wake: WakeTable, vortices: VortexSum, chain: Chain, nominal: Reduction) -> list[str]:
    """The induced drag corrected for vortices that wander, or for an instrument that averages, where it is asked for.

    Parameters
    ----------
    wake : WakeTable
        ``[wake]`` with ``wandering`` and its uncertainty.
    vortices : VortexSum
        The vortices of the mean plane.
    chain : Chain
        The survey.
    nominal : Reduction
        Its reduction.

    Returns
    -------
    list of str
        Empty where nothing is asked for.
    """
    deviation = wake.wandering
    if deviation is None:
        return []
    if not vortices.vortices:
        return ["[wake] wandering is given, but no vortex was identified that could have wandered."]
    found = _lost(vortices, chain, nominal, deviation)
    said = f"Wandering of {1e3 * deviation:.3g} mm along each axis"
    if math.isnan(found):
        smallest = min(one.core_length for one in vortices.vortices)
        return [
            f"{said} would alone make a core larger than the smallest that was measured"
            f" (a = {1e3 * smallest:.3g} mm): it is too large for these data, no correction can be given, and the"
            " uncertainty of what holds the induced drag is unknown."
        ]
    u = _doubt(wake, vortices, chain, nominal)
    uncertain = "; give wandering_standard_uncertainty for its uncertainty"
    if u is not None:
        uncertain = "; its uncertainty is unknown, as a larger wandering would leave no core"
        if not math.isnan(u):
            uncertain = f", with a standard uncertainty of {counts_text(u, nominal, chain)} from that of the wandering"
    corrected = nominal.values["induced_drag"] + found
    return [
        f"{said} took {counts_text(found, nominal, chain)} from the induced drag of the mean plane{uncertain}. The rows"
        " are those of the mean plane, and what is missing is part of their uncertainty; corrected, the induced drag is"
        f" {counts_text(corrected, nominal, chain)}."
    ]
