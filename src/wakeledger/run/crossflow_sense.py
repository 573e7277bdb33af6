"""Whether the crossflow is one that its own vorticity makes: exchanged or reversed components show there."""

from __future__ import annotations

import numpy as np

from wakeledger.confidence.noise import estimate_noise
from wakeledger.physics.fields.outer_flow import induced_crossflow
from wakeledger.run.chain.reduction import Reduction

#: Least share of the crossflow's energy. A wake has 0.95 and more, 0.9 as near as 0.13 span behind the wing line; one
#: component reversed leaves 0.4 to 0.5, both exchanged 0.5 to 0.64 (lifting line and rolled-up wakes).
_OWN = 0.7
#: Times its noise that the crossflow must be, so that noise alone is not judged.
_ABOVE_NOISE = 3.0


def crossflow_notes(nominal: Reduction) -> list[str]:
    """A sentence where components of the crossflow look exchanged or reversed.

    Parameters
    ----------
    nominal : Reduction
        The reduction.

    Returns
    -------
    list of str

    Notes
    -----
    Behind a body the crossflow follows from the axial vorticity, v = dψ/dz, w = -dψ/dy, but for what the bound vortex
    and the thickness of the wake add. With v and w exchanged, or one of them reversed, vorticity and divergence of a
    vortex change places, and ψ explains about half of its energy. Uniform parts are left out.
    """
    grid = nominal.flow.grid
    measured = np.stack([nominal.flow.v, nominal.flow.w])
    made = induced_crossflow(nominal.forces.stream_function, grid)
    measured, made = (field - field.mean(axis=(1, 2), keepdims=True) for field in (measured, made))
    energy = float(np.mean(measured**2))
    noise = np.array([estimate_noise(field).standard_deviation for field in measured])
    known = noise[np.isfinite(noise)]
    # Where too few points stand side by side to tell the noise, nothing is judged.
    if not known.size or not energy > _ABOVE_NOISE**2 * float(np.mean(known**2)):
        return []
    share = 1 - float(np.mean((measured - made) ** 2)) / energy
    if share >= _OWN:
        return []
    return [
        f"Only {max(share, 0.0):.0%} of the crossflow is what its own vorticity makes; of a wake it is nearly all. Look"
        " for v and w exchanged, or one of them with the wrong sign, in [plane.columns] and [plane.axes]."
    ]
