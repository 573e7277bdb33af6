"""Wakes of whole bodies, ready to use: a wing, and a wing with a tailplane."""

from __future__ import annotations

import numpy as np

from wakeledger.stream.reference import Reference
from wakeledger.synthetic.elements import GaussianElements
from wakeledger.synthetic.loadings import Loading, shed, straight_edge
from wakeledger.synthetic.losses import GaussianLosses, sheet_losses, tip_cores
from wakeledger.synthetic.rollup import Sheet, roll_up
from wakeledger.synthetic.wakes import SyntheticWake


def _with_core_losses(losses: GaussianLosses, cores: GaussianElements, each: float) -> GaussianLosses:
    if each == 0:
        return losses
    return losses + GaussianLosses(cores.y, cores.z, np.full(cores.n, each), cores.core)


def wing_wake(
    reference: Reference,
    *,
    loading: str | Loading = "elliptic",
    span: float = 1.2,
    peak: float = 2.0,
    core: float = 0.024,
    x: float = 1.2,
    loss: float = 3.0,
    core_loss: float = 0.1,
    n: int = 240,
    bound_distance: float | None = None,
) -> SyntheticWake:
    """Rolled-up wake of a straight level wing whose trailing edge is z = 0.

    Parameters
    ----------
    reference : Reference
        The stream.
    loading : str or callable
        Loading along the span, as for `shed`.
    span, core : float
        Span and core length of the elements, m; the losses along the sheet are 1.2 cores wide.
    peak : float
        Bound circulation where the loading is 1, m²/s.
    x : float
        Distance behind the trailing edge, m; 0 gives the flat sheet.
    loss : float
        Integral of the total-pressure loss along the sheet, N (about the profile drag).
    core_loss : float
        Integral of the further loss in each tip vortex, N.
    n : int
        Number of elements.
    bound_distance : float, optional
        Distance of the plane behind the bound line, m, if that line's own field is wanted.

    Returns
    -------
    SyntheticWake
        Its `truth` holds the exact rows.
    """
    flat = shed(loading, straight_edge(span), peak=peak, core=core, n=n)
    here = roll_up([Sheet(flat)], x=x, speed=reference.speed).elements
    cores = tip_cores(here)
    losses = _with_core_losses(sheet_losses(flat, here, total=loss, width=1.2 * core), cores, core_loss)
    distance = None if bound_distance is None else (bound_distance,)
    return SyntheticWake(reference, (here,), losses, cores, distance)


def wing_and_tail_wake(
    reference: Reference,
    *,
    loading: str | Loading = "elliptic",
    span: float = 1.2,
    peak: float = 2.0,
    core: float = 0.024,
    x: float = 1.4,
    loss: float = 2.6,
    core_loss: float = 0.1,
    tail_span: float = 0.42,
    tail_peak: float = -0.3,
    tail_x: float = 0.55,
    tail_z: float = 0.14,
    tail_loss: float = 0.5,
    n: int = 240,
    n_tail: int = 120,
    bound_distance: float | None = None,
    tail_bound_distance: float | None = None,
) -> SyntheticWake:
    """Rolled-up wake of a wing and a tailplane behind it.

    Parameters
    ----------
    reference, loading, span, peak, core, x, loss, core_loss, n
        The wing, as for `wing_wake`.
    tail_span : float
        Span of the tailplane, m.
    tail_peak : float
        Bound circulation at its middle, m²/s; negative for a download.
    tail_x, tail_z : float
        Where its trailing edge stands behind and above the wing's, m.
    tail_loss : float
        Integral of its total-pressure loss, N.
    n_tail : int
        Number of its elements.
    bound_distance, tail_bound_distance : float, optional
        Distances of the plane behind the wing's and the tailplane's bound line, m, if the field of these lines is
        wanted; give both.

    Returns
    -------
    SyntheticWake
        Sheets in the order wing, tailplane.

    Raises
    ------
    ValueError
        If only one of the two distances is given.
    """
    if (bound_distance is None) != (tail_bound_distance is None):
        raise ValueError("give both bound_distance and tail_bound_distance, or neither")
    wing = shed(loading, straight_edge(span), peak=peak, core=core, n=n)
    tail = shed("elliptic", straight_edge(tail_span, z=tail_z), peak=tail_peak, core=core, n=n_tail)
    wake = roll_up([Sheet(wing), Sheet(tail, tail_x)], x=x, speed=reference.speed)
    here, behind = wake.of(0), wake.of(1)
    cores = tip_cores(here) + tip_cores(behind)
    losses = sheet_losses(wing, here, total=loss, width=1.2 * core)
    losses = losses + sheet_losses(tail, behind, total=tail_loss, width=1.2 * core)
    losses = _with_core_losses(losses, tip_cores(here), core_loss)
    distances = None
    if bound_distance is not None and tail_bound_distance is not None:
        distances = (bound_distance, tail_bound_distance)
    return SyntheticWake(reference, (here, behind), losses, cores, distances)
