"""What the survey file's wandering takes off the induced drag, as a note: the rows stay those of the mean plane."""

from __future__ import annotations

import math

from wakeledger.physics.vortices.smearing import smearing_loss
from wakeledger.physics.vortices.vortex_sum import VortexSum
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.reduction import Reduction
from wakeledger.run.config.tables import WakeTable
from wakeledger.run.tables import counts_text


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
    gamma = [one.circulation for one in vortices.vortices]
    cores = [one.core_length for one in vortices.vortices]

    def loss(size: float) -> float:
        return chain.settings.counted * smearing_loss(gamma, cores, size, density=nominal.reference.density)

    found = loss(deviation)
    said = f"Wandering of {1e3 * deviation:.3g} mm along each axis"
    if math.isnan(found):
        return [
            f"{said} would alone make a core larger than the smallest that was measured"
            f" (a = {1e3 * min(cores):.3g} mm): it is too large for these data, and no correction can be given."
        ]
    doubt = wake.wandering_standard_uncertainty
    uncertain = "; give wandering_standard_uncertainty for its uncertainty"
    if doubt is not None:
        low, high = loss(max(deviation - doubt, 0.0)), loss(deviation + doubt)
        sides = (found - low, high - found)
        u = math.nan if math.isnan(high) else max(sides)
        uncertain = "; its uncertainty is unknown, as a larger wandering would leave no core"
        if not math.isnan(u):
            uncertain = f", with a standard uncertainty of {counts_text(u, nominal, chain)} from that of the wandering"
    corrected = nominal.values["induced_drag"] + found
    return [
        f"{said} took {counts_text(found, nominal, chain)} from the induced drag of the mean plane{uncertain}. The rows"
        f" are those of the mean plane; corrected, the induced drag is {counts_text(corrected, nominal, chain)}."
    ]
