"""Rakes of several tubes: each takes its own traverse of the wake, and the file holds all of them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from types import MappingProxyType

import numpy as np
from numpy.typing import ArrayLike, NDArray

from wakeledger.core.grid import Array
from wakeledger.synthetic.probes import SphereProbe, TraverseConditions, record_traverse
from wakeledger.synthetic.recordings import Positions, Recording
from wakeledger.synthetic.wakes import SyntheticWake


class _StaticProbe(SphereProbe):
    """Reads the static pressure whatever the direction."""

    def coefficients(self, direction: Array, *, mach: ArrayLike = 0.0) -> Array:
        """Zero, shape (1, ...)."""
        return np.zeros((1, *np.shape(direction)[1:]))


def pitot_tube(*, tip_diameter: float = 1.0e-3) -> SphereProbe:
    """A tube that reads the total pressure whatever the direction, as p1."""
    return SphereProbe(np.array([[-1.0, 0.0, 0.0]]), np.zeros(1), tip_diameter)


def static_tube(*, tip_diameter: float = 1.0e-3) -> SphereProbe:
    """A tube that reads the static pressure whatever the direction, as p1."""
    return _StaticProbe(np.array([[0.0, 0.0, 1.0]]), np.ones(1), tip_diameter)


@dataclass(frozen=True, eq=False)
class RakeTube:
    """One tube of a rake.

    Attributes
    ----------
    number : int
        As the file has it.
    probe : SphereProbe
        What it is.
    offset : (float, float)
        Where it is, from the place that the file gives, m.
    conditions : TraverseConditions
        How its own readings are taken and what goes wrong in them.
    """

    number: int
    probe: SphereProbe
    offset: tuple[float, float] = (0.0, 0.0)
    conditions: TraverseConditions = field(default_factory=TraverseConditions)


@dataclass(frozen=True, eq=False)
class RakeTraverse:
    """A traverse of a rake as it stands in the file.

    Attributes
    ----------
    positions : Positions
        Indicated places of the traverse, one after the other and each as often as the rake has tubes.
    tube : ndarray of int, shape (n,)
        Number of the tube of each point.
    values : mapping of str to ndarray, shape (n,)
        As of `wakeledger.synthetic.probes.RawTraverse`; NaN for holes that a tube does not have.
    """

    positions: Positions
    tube: NDArray[np.int64]
    values: Mapping[str, Array]

    def write_csv(self, path: Path, columns: Mapping[str, tuple[str, float, int]]) -> None:
        """Write a table, as `wakeledger.synthetic.recordings.Recording.write_csv`, with ``tube`` among the columns."""
        Recording(self.positions, {**self.values, "tube": self.tube.astype(float)}).write_csv(path, columns)


def record_rake(
    wake: SyntheticWake, positions: Positions, tubes: Sequence[RakeTube], *, generator: np.random.Generator
) -> RakeTraverse:
    """Take a raw traverse of a wake with a rake.

    Parameters
    ----------
    wake : SyntheticWake
        The flow.
    positions : Positions
        Indicated places of the traverse.
    tubes : sequence of RakeTube
        The tubes; all read at the same moment.
    generator : numpy.random.Generator
        Source of the random errors.

    Returns
    -------
    RakeTraverse

    Raises
    ------
    ValueError
        As `wakeledger.synthetic.probes.record_traverse`.
    """
    taken = []
    for tube in tubes:
        moved = Positions(positions.y + tube.offset[0], positions.z + tube.offset[1], positions.row)
        taken.append(record_traverse(wake, moved, tube.probe, generator=generator, conditions=tube.conditions).values)
    names = list(dict.fromkeys(name for values in taken for name in values))
    missing = np.full(positions.y.size, np.nan)

    def in_turn(parts: Sequence[Array]) -> Array:
        return np.stack(parts, axis=1).ravel()

    values = {name: in_turn([one.get(name, missing) for one in taken]) for name in names}
    count = len(tubes)
    at = Positions(np.repeat(positions.y, count), np.repeat(positions.z, count), np.repeat(positions.row, count))
    number = np.tile([tube.number for tube in tubes], positions.y.size).astype(np.int64)
    return RakeTraverse(at, number, MappingProxyType(values))
