"""What a vortex that wanders, or an instrument that averages, takes off the induced drag of the mean plane.

A Gaussian core a smeared with a Gaussian of standard deviation s along each axis becomes a² + 2s², and the mean plane's
kinetic energy lacks what the smearing took. The self energy of a vortex is −(ρΓ²/8π)[ln 2a² − γ], so that each vortex
loses (ρΓ²/8π) ln(1 + 2s²/a²); the interaction of vortices that do not overlap is not changed.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np


def smearing_loss(circulations: Sequence[float], cores: Sequence[float], deviation: float, *, density: float) -> float:
    """Induced drag that smearing took from vortices, to be added to that of the measured plane.

    Parameters
    ----------
    circulations : sequence of float
        Γ of each vortex, m²/s.
    cores : sequence of float
        Gaussian core length a of each as measured, smearing included, m.
    deviation : float
        Standard deviation s of the smearing along each axis, m.
    density : float
        kg/m³.

    Returns
    -------
    float
        Σ (ρΓ²/8π) ln[a²/(a² − 2s²)], N; NaN where a measured core is no larger than its smearing alone would make it.
    """
    square = np.square(np.asarray(cores, dtype=float))
    still = square - 2 * deviation**2
    if (still <= 0).any():
        return math.nan
    gamma = np.asarray(circulations, dtype=float)
    return float(density / (8 * math.pi) * np.sum(gamma**2 * np.log(square / still)))
