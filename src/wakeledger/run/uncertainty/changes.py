"""Changes of the outputs when a choice is made differently: known, none, or unknown."""

from __future__ import annotations

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.run.chain.outputs import ESTIMATES, OUTPUTS, estimate_of

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
