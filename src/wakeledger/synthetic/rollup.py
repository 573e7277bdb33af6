"""Roll-up of Gaussian elements under their own crossflow.

In the cross-section carried along with the stream, x = Ut, every element moves with the crossflow averaged over its own
vorticity, which is the velocity from a kernel of core √(a_i² + a_j²). The motion is then Hamiltonian with the E1 double
sum: the induced drag stays the same, and so do the circulation and, in free air, the lift.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.synthetic.elements import GaussianElements, swirl_factor
from wakeledger.synthetic.loadings import Loading, shed, straight_edge


@dataclass(frozen=True, eq=False)
class Sheet:
    """Elements and the place where they leave the body.

    Attributes
    ----------
    elements : GaussianElements
        The vortex sheet as it is shed.
    x : float
        Station of the trailing edge it leaves, m.
    """

    elements: GaussianElements
    x: float = 0.0


@dataclass(frozen=True, eq=False)
class RolledUpWake:
    """A wake of several sheets at one station.

    Attributes
    ----------
    elements : GaussianElements
        All elements, sheet after sheet, each in its original order along the edge.
    sheet : ndarray of int, shape (n,)
        Which sheet each element came from.
    x : float
        Station, m.
    """

    elements: GaussianElements
    sheet: Array
    x: float

    def of(self, sheet: int) -> GaussianElements:
        """The elements that came from one sheet."""
        return self.elements[self.sheet == sheet]


def _drift(y: Array, z: Array, circulation: Array, core_squared: Array) -> tuple[Array, Array]:
    """Mean crossflow over each element's own vorticity, m/s."""
    dy = y[:, None] - y
    dz = z[:, None] - z
    swirl = swirl_factor(dy * dy + dz * dz, core_squared)
    swirl *= circulation / (2 * np.pi)
    return -np.einsum("ij,ij->i", swirl, dz), np.einsum("ij,ij->i", swirl, dy)


def step(elements: GaussianElements, duration: float) -> GaussianElements:
    """One fourth-order Runge-Kutta step of `duration`, s."""
    core_squared = elements.core[:, None] ** 2 + elements.core**2

    def velocity(y: Array, z: Array) -> tuple[Array, Array]:
        return _drift(y, z, elements.circulation, core_squared)

    y, z = elements.y, elements.z
    v1, w1 = velocity(y, z)
    v2, w2 = velocity(y + duration / 2 * v1, z + duration / 2 * w1)
    v3, w3 = velocity(y + duration / 2 * v2, z + duration / 2 * w2)
    v4, w4 = velocity(y + duration * v3, z + duration * w3)
    return GaussianElements(
        y + duration / 6 * (v1 + 2 * v2 + 2 * v3 + v4),
        z + duration / 6 * (w1 + 2 * w2 + 2 * w3 + w4),
        elements.circulation,
        elements.core,
    )


def roll_up(sheets: Sequence[Sheet], *, x: float, speed: float, step_length: float = 0.25) -> RolledUpWake:
    """Carry sheets from their trailing edges to a station, each joining where it is shed.

    Parameters
    ----------
    sheets : sequence of Sheet
        Vortex sheets, in any order of their stations.
    x : float
        Station wanted, m, behind every trailing edge.
    speed : float
        Stream U, m/s.
    step_length : float
        Furthest that any element moves across the stream in one step, in core lengths.

    Returns
    -------
    RolledUpWake

    Raises
    ------
    ValueError
        If the station lies ahead of a trailing edge.
    """
    if any(sheet.x > x for sheet in sheets):
        raise ValueError(f"the station x = {x} m lies ahead of a trailing edge at {max(s.x for s in sheets)} m")
    order = sorted(range(len(sheets)), key=lambda k: sheets[k].x)
    stops = [sheets[k].x for k in order[1:]] + [x]
    present = sheets[order[0]].elements
    owner = np.full(present.n, order[0])
    here = sheets[order[0]].x
    for number, stop in enumerate(stops):
        remaining = (stop - here) / speed
        while remaining > 0:
            fastest = float(np.hypot(*present.velocity(present.y, present.z)).max())
            longest = step_length * float(present.core.min()) / max(fastest, 1e-300)
            duration = remaining / np.ceil(remaining / longest)
            present = step(present, duration)
            remaining = remaining - duration if remaining > 1.5 * duration else 0.0
        here = stop
        if number + 1 < len(order):
            present = present + sheets[order[number + 1]].elements
            owner = np.concatenate([owner, np.full(sheets[order[number + 1]].elements.n, order[number + 1])])
    back = np.argsort(owner, kind="stable")
    return RolledUpWake(present[back], owner[back], x)


def rolled_up_wing(
    loading: str | Loading,
    *,
    span: float,
    peak: float,
    core: float,
    x: float,
    speed: float,
    n: int = 240,
    step_length: float = 0.25,
) -> RolledUpWake:
    """Wake of a straight level wing at a station.

    Parameters
    ----------
    loading : str or callable
        As for `shed`.
    span, core : float
        Span and core length, m.
    peak : float
        Bound circulation where the loading is 1, m²/s.
    x : float
        Distance behind the trailing edge, m.
    speed : float
        Stream U, m/s.
    n : int
        Number of elements.
    step_length : float
        As for `roll_up`.

    Returns
    -------
    RolledUpWake
    """
    sheet = Sheet(shed(loading, straight_edge(span), peak=peak, core=core, n=n))
    return roll_up([sheet], x=x, speed=speed, step_length=step_length)
