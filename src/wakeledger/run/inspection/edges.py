"""Whether the wake still touches the edges of what was measured, and how far beyond them it is expected to go on."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from wakeledger.core.grid import Array
from wakeledger.ledger.inspection import EdgeState
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.run.chain.reduction import Reduction
from wakeledger.run.checks import EDGE_CELLS, LIMITS

#: Lines next to the edge from which the decay of the wake is read.
_TAIL_LINES = 6
#: A profile falls towards the edge where it is below this share of its largest value there.
_FALLEN = 0.6
#: And by at least this fraction with each line.
_LEAST_DECAY = 0.1
#: Where a profile is below this share of its largest value the wake has ended.
_ENDED = 0.02
#: Parts of the wake region that hold less than this share of the loss and net circulation are rather noise than wake.
PATCH = 0.05
_OPPOSITE = {"port": "starboard", "starboard": "port", "lower": "upper", "upper": "lower"}
_LINE = {"port": "column", "starboard": "column", "lower": "row", "upper": "row"}


@dataclass(frozen=True, eq=False)
class EdgeProfile:
    """How a field of the wake region goes on from an edge inwards.

    Attributes
    ----------
    shares : ndarray, shape (m,)
        Share of its absolute integral in each line of measured points, the outermost first.
    strip : float
        Share in the three outermost lines of the grid, by which the edge checks judge.
    spacing : float
        Distance of the lines, m.
    edge : float
        Position of the outermost line along the axis across the edge, m.
    outward : int
        +1 where the axis grows beyond the edge, −1 where it falls.
    """

    shares: Array
    strip: float
    spacing: float
    edge: float
    outward: int

    @property
    def last_three(self) -> float:
        """Share in the three outermost lines of measured points."""
        return float(self.shares[:EDGE_CELLS].sum())

    def reach(self, limit: float, opposite: EdgeProfile | None) -> float:
        """How far beyond the edge the field is expected to go on until the edge is quiet, m.

        Parameters
        ----------
        limit : float
            Share of the field that may lie along the edge.
        opposite : EdgeProfile or None
            The same seen from the opposite edge, where the body is symmetrical about 0 along this axis.

        Returns
        -------
        float
            A whole number of lines.

        Notes
        -----
        Where the field falls towards the edge, it is taken to go on falling at the same rate (a wake falls faster
        still). Else the wake is taken to reach as far from 0 on this side as on the other one, or to be as wide
        beyond its strongest line as inwards of it. Three lines more leave the edge quiet.
        """
        lines = self._by_decay(limit)
        if lines is None:
            lines = self._by_symmetry(opposite)
        if lines is None:
            lines = self._by_width()
        return self.spacing * min(math.ceil(max(lines, 1.0) - 1e-6) + EDGE_CELLS, self.shares.size)

    def _by_decay(self, limit: float) -> float | None:
        tail = self.shares[:_TAIL_LINES]
        peak = float(self.shares.max())
        if tail.size < 3 or tail[0] > _FALLEN * peak or tail.min() <= 0:
            return None
        decay = float(np.polyfit(np.arange(tail.size), np.log(tail), 1)[0])
        return math.log(max(self.last_three / limit, 1.0)) / decay if decay > _LEAST_DECAY else None

    def _by_symmetry(self, opposite: EdgeProfile | None) -> float | None:
        """None unless the wake ends before the opposite edge, on the other side of 0 and further out."""
        if opposite is None or opposite.edge * opposite.outward <= 0:
            return None
        first = self._outermost(opposite.shares)
        if first == 0:
            return None
        beyond = opposite.edge * opposite.outward - first * opposite.spacing - self.edge * self.outward
        return beyond / self.spacing if beyond > 0 else None

    def _by_width(self) -> float:
        strongest = int(np.argmax(self.shares))
        inner = np.flatnonzero(self.shares > _ENDED * self.shares.max())
        return float(inner[-1] - 2 * strongest)

    @staticmethod
    def _outermost(shares: Array) -> int:
        return int(np.flatnonzero(shares > _ENDED * shares.max())[0])


def plane_edges(nominal: Reduction, raw_spacing: tuple[float, float]) -> tuple[EdgeState, ...]:
    """State of the four edges of a plane.

    Parameters
    ----------
    nominal : Reduction
        One pass through the chain.
    raw_spacing : (float, float)
        Spacing of the measured points along y and z, m.

    Returns
    -------
    tuple of EdgeState
        Port, starboard, lower, upper.
    """
    mask = nominal.region.mask
    loss = np.where(mask, nominal.reference.total_pressure - nominal.flow.total_pressure, 0.0)
    turning = np.where(mask, np.abs(nominal.vorticity), 0.0)
    fields = {"total-pressure loss": np.abs(loss), "vorticity": turning}
    wake = _without_patches(mask, (loss, np.where(mask, nominal.vorticity, 0.0)))
    profiles = {name: _profiles(field, wake, nominal, raw_spacing) for name, field in fields.items()}
    peak = float(turning.max())
    found = []
    for side in _OPPOSITE:
        signal, turned = _strip(loss, side), _strip(turning, side)
        found.append(
            edge_state(
                side,
                {name: by_side[side] for name, by_side in profiles.items() if by_side},
                {name: by_side[_OPPOSITE[side]] for name, by_side in profiles.items() if by_side},
                largest_loss=float(signal.max()) / nominal.reference.dynamic_pressure,
                largest_vorticity=float(turned.max()) / peak if peak > 0 else 0.0,
                line=_LINE[side],
                symmetrical=side in ("port", "starboard"),
            )
        )
    return tuple(found)


def edge_state(
    side: str,
    profiles: Mapping[str, EdgeProfile],
    opposite: Mapping[str, EdgeProfile],
    *,
    largest_loss: float,
    largest_vorticity: float,
    line: str,
    symmetrical: bool,
) -> EdgeState:
    """State of one edge from the profiles of loss and vorticity.

    Parameters
    ----------
    side : str
        Which edge.
    profiles, opposite : mapping of str to EdgeProfile
        By field, seen from this edge and from the opposite one.
    largest_loss, largest_vorticity : float
        As in `EdgeState`.
    line : str
        What a line of points along it is called.
    symmetrical : bool
        Whether the body is taken as symmetrical about 0 across this edge.

    Returns
    -------
    EdgeState
    """
    limits = {"total-pressure loss": "edge_total_pressure_loss", "vorticity": "edge_vorticity"}
    loud = {name: profile for name, profile in profiles.items() if profile.strip > LIMITS[limits[name]][0]}
    shares = {name: float(profile.shares[0]) for name, profile in profiles.items()}
    reach, message = math.nan, f"The {side} edge is quiet."
    if loud:
        reach = max(
            profile.reach(LIMITS[limits[name]][0], opposite[name] if symmetrical else None)
            for name, profile in loud.items()
        )
        parts = " and ".join(f"{percent(shares[name])} of the {_short(name)}" for name in loud)
        verb = "are" if len(loud) > 1 else "is"
        strips = " and ".join(percent(profile.last_three) for profile in loud.values())
        message = (
            f"The wake still touches the {side} edge: {parts} {verb} in the last {line}, {strips} in the last three."
        )
    return EdgeState(
        side=side,
        total_pressure_loss=largest_loss,
        vorticity=largest_vorticity,
        loss_share=shares.get("total-pressure loss", math.nan),
        vorticity_share=shares.get("vorticity", math.nan),
        quiet=not loud,
        missing_reach=reach,
        message=message,
    )


def percent(share: float) -> str:
    """A share as it is printed."""
    value = 100 * share
    return f"{value:.0f} %" if value >= 1.95 else f"{value:.1f} %" if value >= 0.05 else "less than 0.1 %"


def _short(name: str) -> str:
    return "loss" if name == "total-pressure loss" else name


def _strip(field: Array, side: str) -> Array:
    return inwards(field, side)[:EDGE_CELLS]


def inwards(field: Array, side: str) -> Array:
    """A field with the lines along one edge first, the outermost one at 0."""
    views: dict[str, Array] = {"port": field.T, "starboard": field.T[::-1], "lower": field, "upper": field[::-1]}
    return views[side]


def _without_patches(mask: Mask, fields: Sequence[Array]) -> Mask:
    """The parts of the wake region that hold more than a small share of one of the fields, signs cancelling in each."""
    label, count = ndimage.label(mask, structure=np.ones((3, 3)))
    kept = np.zeros(count + 1, dtype=bool)
    for field in fields:
        held = np.bincount(label.ravel(), weights=field.ravel(), minlength=count + 1)
        kept |= np.abs(held) > PATCH * np.abs(field).sum()
    kept[0] = False
    if not kept.any():
        return mask
    wake: Mask = kept[label]
    return wake


def _profiles(field: Array, wake: Mask, nominal: Reduction, raw_spacing: Sequence[float]) -> dict[str, EdgeProfile]:
    total = float(field.sum())
    if total == 0:
        return {}
    grid = nominal.flow.grid
    found = {}
    for side in _OPPOSITE:
        across_y = side in ("port", "starboard")
        step, spacing = (grid.dy, raw_spacing[0]) if across_y else (grid.dz, raw_spacing[1])
        axis = grid.y if across_y else grid.z
        last = side in ("starboard", "upper")
        lines = inwards(np.where(wake, field, 0.0), side).sum(axis=1) / total
        # Cells of a resampled plane belong to the nearest line of measured points.
        number = np.floor(np.arange(lines.size) * step / max(spacing, step) + 0.5).astype(int)
        found[side] = EdgeProfile(
            shares=np.asarray(np.bincount(number, weights=lines), dtype=float),
            strip=float(lines[:EDGE_CELLS].sum()),
            spacing=max(spacing, step),
            edge=float(axis[-1] if last else axis[0]),
            outward=1 if last else -1,
        )
    return found
