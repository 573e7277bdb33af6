"""Total-pressure losses made of Gaussian patches, carried by a vortex sheet or lying in its cores."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from wakeledger.core.grid import Array
from wakeledger.synthetic.elements import GaussianElements


@dataclass(frozen=True, eq=False)
class GaussianLosses:
    """Loss of total pressure H∞ − H = Σ m/(πs²) exp(−r²/s²).

    Attributes
    ----------
    y, z : ndarray, shape (n,)
        Centres, m.
    strength : ndarray, shape (n,)
        Integral m of each patch over the plane, N; positive for a loss, negative for added energy.
    width : ndarray, shape (n,)
        Width s of each patch, m.
    """

    y: Array
    z: Array
    strength: Array
    width: Array

    def __post_init__(self) -> None:
        # The same checks and the same sums as for vorticity, which has the same shape.
        patches = GaussianElements(self.y, self.z, self.strength, self.width)
        for name, value in zip(
            ("y", "z", "strength", "width"), (patches.y, patches.z, patches.circulation, patches.core), strict=True
        ):
            object.__setattr__(self, name, value)

    def __add__(self, other: GaussianLosses) -> GaussianLosses:
        """Both sets together."""
        pairs = ((getattr(self, f), getattr(other, f)) for f in ("y", "z", "strength", "width"))
        return GaussianLosses(*(np.concatenate(pair) for pair in pairs))

    @property
    def n(self) -> int:
        """Number of patches."""
        return int(self.y.size)

    def loss(self, y: Array, z: Array) -> Array:
        """Loss of total pressure H∞ − H, Pa, at points of any shape (m)."""
        return GaussianElements(self.y, self.z, self.strength, self.width).vorticity(y, z)


def no_losses() -> GaussianLosses:
    """A wake without losses."""
    return GaussianLosses(np.zeros(1), np.zeros(1), np.zeros(1), np.ones(1))


def sheet_losses(
    shed: GaussianElements, here: GaussianElements, *, total: float, width: float, weight: ArrayLike = 1.0
) -> GaussianLosses:
    """Losses of a surface's boundary layers, riding on the elements it shed.

    Parameters
    ----------
    shed : GaussianElements
        Elements at the trailing edge, in their order along it; each carries the loss of its own piece of edge.
    here : GaussianElements
        The same elements at the station.
    total : float
        Integral of the loss, N (somewhat above the profile drag it causes).
    width : float
        Width of every patch, m.
    weight : array_like, shape (n,) or scalar
        Loss per unit length of the edge, relative (local chord times section drag, say).

    Returns
    -------
    GaussianLosses
    """
    along = np.concatenate([[0.0], np.cumsum(np.hypot(np.diff(shed.y), np.diff(shed.z)))])
    strength = np.gradient(along) * np.asarray(weight, float)
    return GaussianLosses(here.y, here.z, total * strength / strength.sum(), np.asarray(width, float))


def tip_cores(sheet: GaussianElements, *, share: float = 0.5) -> GaussianElements:
    """The two concentrated vortices into which the ends of a sheet have rolled up.

    Parameters
    ----------
    sheet : GaussianElements
        Elements of one surface in order from port to starboard.
    share : float
        Part of each side's circulation that is taken to be in its core, counted from the tip.

    Returns
    -------
    GaussianElements
        Port and starboard vortex: circulation, centre of vorticity, and the core length whose Gaussian has the same
        second moment, a² = ⟨r²⟩ + ⟨a_i²⟩.
    """
    parts = []
    for order in (slice(None), slice(None, None, -1)):
        side = sheet[order]
        # The bound circulation grows inboard from the tip up to where the sheet changes sign.
        bound = np.abs(np.cumsum(side.circulation))
        members = side[: int(np.argmax(bound >= share * bound.max() * (1 - 1e-9))) + 1]
        circulation = float(members.circulation.sum())
        y = float(members.y @ members.circulation) / circulation
        z = float(members.z @ members.circulation) / circulation
        spread = (members.y - y) ** 2 + (members.z - z) ** 2 + members.core**2
        parts.append((y, z, circulation, float(np.sqrt(spread @ members.circulation / circulation))))
    return GaussianElements(*(np.array(column) for column in zip(*parts, strict=True)))
