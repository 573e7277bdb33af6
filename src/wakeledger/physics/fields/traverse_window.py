"""Where a traverse through a wake enters and leaves it."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array

#: Share of the greatest deficit that counts as the wake's edge where the noise allows. A Gaussian wake cut there loses
#: 2e-4 of its deficit, well below the 0.5 % a section drag is wanted to.
TAIL = 1e-3


@dataclass(frozen=True)
class WakeWindow:
    """The part of a traverse that is taken as the wake.

    Attributes
    ----------
    lower, upper : float
        Its edges, m.
    automatic : bool
        Whether it was found from the traverse rather than given.
    depth : float
        Greatest deficit inside, in the deficit's unit.
    noise : float
        Standard deviation of one point outside the wake, same unit; NaN where it is unknown.
    threshold : float
        Deficit at which the edge was seen, same unit; the edge was moved out from there by the tail of a Gaussian
        wake, down to `TAIL` of the depth. NaN where the window was given.
    enclosed : bool
        Whether the traverse goes beyond both edges.
    """

    lower: float
    upper: float
    automatic: bool
    depth: float
    noise: float = math.nan
    threshold: float = math.nan
    enclosed: bool = True

    @property
    def width(self) -> float:
        """Distance between the edges, m."""
        return self.upper - self.lower

    @classmethod
    def given(cls, coordinate: Array, deficit: Array, lower: float, upper: float) -> WakeWindow:
        """A window chosen by the user.

        Parameters
        ----------
        coordinate, deficit : ndarray, shape (n,)
            The traverse, ascending.
        lower, upper : float
            The edges, m.

        Returns
        -------
        WakeWindow

        Raises
        ------
        DataError
            If the window is empty or not inside the traverse.
        """
        if not (coordinate[0] <= lower < upper <= coordinate[-1]):
            raise DataError(
                f"the wake window {lower:g} m to {upper:g} m is not inside the traverse",
                remedy=f"the traverse runs from {coordinate[0]:g} m to {coordinate[-1]:g} m",
            )
        inside = (coordinate >= lower) & (coordinate <= upper)
        depth = float(deficit[inside].max()) if inside.any() else math.nan
        enclosed = bool(coordinate[0] < lower and upper < coordinate[-1])
        return cls(lower, upper, automatic=False, depth=depth, enclosed=enclosed)

    def scaled(self, width: float, coordinate: Array) -> WakeWindow:
        """The window with another width, relative to this one's, about its centre, cut off where the traverse ends."""
        centre, half = 0.5 * (self.lower + self.upper), 0.5 * width * self.width
        return replace(
            self,
            lower=max(centre - half, float(coordinate[0])),
            upper=min(centre + half, float(coordinate[-1])),
            enclosed=bool(coordinate[0] < centre - half and centre + half < coordinate[-1]),
        )


def wake_edges(
    coordinate: Array, deficit: Array, *, level: float = 3.0, noise: float | None = None, sloping: bool = False
) -> WakeWindow:
    """Find where a traverse enters and leaves the wake.

    Parameters
    ----------
    coordinate : ndarray, shape (n,)
        Positions along the traverse, m, ascending; any spacing.
    deficit : ndarray, shape (n,)
        What marks the wake, positive inside it: the loss of total pressure, or of speed.
    level : float
        How many standard deviations of the (smoothed) noise the edge stands out.
    noise : float, optional
        Standard deviation of one point; estimated from the outer flow where not given.
    sloping : bool
        Whether the outer flow on each side is a sloping line (speed, which the body's potential flow changes) rather
        than a level (total pressure).

    Returns
    -------
    WakeWindow

    Raises
    ------
    DataError
        If nothing stands out of the noise.

    Notes
    -----
    The wake is where the flow departs from the loss-free outer flow beside it. On each side the outer flow is fitted
    just outside the wake, from three half-widths (where half the deficit is left) to six, and further out while the
    wake or a second one reaches there; the fit's scatter is the noise. The deficit against it is smoothed over a tenth
    of the wake's width at half its depth, and the edge is where it falls below `level` times what noise is left, or
    below `TAIL` of the greatest deficit. Where noise hid the rest of the tail the edge is moved out from there as a
    Gaussian tail would reach: by sqrt(ln(1/TAIL)/ln(1/t)), t being the deficit's share at the threshold. Only the
    window follows from this; nothing inside it is cut off or subtracted.
    """
    z, raw = coordinate, deficit
    peak, depth, halves = _peak(z, raw)
    width, reach = halves[0] + halves[1], [3.0 * halves[0], 3.0 * halves[1]]
    cells = _cells(z)
    for _ in range(20):
        beside = [(z < peak - reach[0]), (z > peak + reach[1])]
        near = [beside[0] & (z >= peak - 2.0 * reach[0]), beside[1] & (z <= peak + 2.0 * reach[1])]
        base, scatter, wavy = _outer_flow(z, raw, peak, beside, near, sloping, 0.02 * depth)
        sigma = scatter if noise is None else noise
        departure = raw - base
        smoothed, left = _smoothed(z, departure, cells, 0.1 * width)
        depth = float(smoothed[(z >= peak - reach[0]) & (z <= peak + reach[1])].max())
        threshold = np.maximum(level * left * (0.0 if math.isnan(sigma) else sigma), TAIL * depth)
        above = smoothed > threshold
        first, last = _around(z, above, peak, 0.5 * width)
        grown = False
        for side, edge in ((0, first), (1, last)):
            outermost = 0 if side == 0 else z.size - 1
            beyond = z[edge] <= peak - reach[0] if side == 0 else z[edge] >= peak + reach[1]
            if edge != outermost and (beyond or wavy[side]):
                reach[side] *= 1.5
                grown = True
        if not grown:
            break
    if not above.any() or depth <= level * float(np.min(left)) * (0.0 if math.isnan(sigma) else sigma):
        raise DataError(
            "no wake stands out of the noise of the traverse",
            remedy="check the signs and the reference, or give the window",
        )
    edges, seen = [], 0.0
    for edge, step, end in ((first, -1, 0), (last, 1, z.size - 1)):
        if edge == end:
            edges.append((float(z[end]), False))
            continue
        over, under = smoothed[edge] - threshold[edge], threshold[edge + step] - smoothed[edge + step]
        crossing = float(z[edge] + (z[edge + step] - z[edge]) * over / (over + under))
        seen = max(seen, float(threshold[edge]))
        share = min(max(float(threshold[edge]) / depth, TAIL), 0.6)
        reached = peak + (crossing - peak) * math.sqrt(math.log(1.0 / TAIL) / math.log(1.0 / share))
        inside = z[0] < reached < z[-1]
        edges.append((float(min(max(reached, z[0]), z[-1])), bool(inside)))
    return WakeWindow(
        edges[0][0],
        edges[1][0],
        automatic=True,
        depth=depth,
        noise=sigma,
        threshold=seen if seen > 0.0 else math.nan,
        enclosed=edges[0][1] and edges[1][1],
    )


def edge_levels(coordinate: Array, values: Array, window: WakeWindow, *, reach: float = 0.25) -> tuple[float, float]:
    """Value of a quantity at the two edges of the wake, from the flow just outside it.

    Parameters
    ----------
    coordinate, values : ndarray, shape (n,)
        The traverse, ascending.
    window : WakeWindow
        The wake.
    reach : float
        How far outside each edge points count, relative to the wake's width.

    Returns
    -------
    lower, upper : float
        A straight line through the points that count, read at the edge; where there are fewer than four of them, the
        value on the traverse at the edge.
    """
    found = []
    for edge, sign in ((window.lower, -1.0), (window.upper, 1.0)):
        distance = sign * (coordinate - edge)
        outside = (distance >= 0.0) & (distance <= reach * window.width)
        if np.count_nonzero(outside) < 4:
            found.append(float(np.interp(edge, coordinate, values)))
        else:
            found.append(_line(distance[outside], values[outside], _cells(distance[outside] * sign))[0])
    return found[0], found[1]


def outer_levels(coordinate: Array, values: Array, window: WakeWindow, *, reach: float = 1.5) -> tuple[float, float]:
    """Mean of a quantity in the outer flow on each side of the wake.

    Parameters
    ----------
    coordinate, values : ndarray, shape (n,)
        The traverse, ascending.
    window : WakeWindow
        The wake.
    reach : float
        How far outside each edge points count, relative to the wake's width. The tenth of the width next to the edge
        does not, so that what is left of the wake's tail stays out.

    Returns
    -------
    lower, upper : float
        NaN on a side with fewer than four such points.
    """
    found = []
    for edge, sign in ((window.lower, -1.0), (window.upper, 1.0)):
        distance = sign * (coordinate - edge) / window.width
        outside = (distance >= 0.1) & (distance <= reach)
        found.append(float(values[outside].mean()) if np.count_nonzero(outside) >= 4 else math.nan)
    return found[0], found[1]


def _line(x: Array, y: Array, weights: Array) -> tuple[float, float]:
    """Weighted straight line: value at x = 0 and slope."""
    total = weights.sum()
    middle = float(weights @ x / total)
    slope = float(weights @ ((x - middle) * y) / (weights @ (x - middle) ** 2))
    return float(weights @ y / total) - slope * middle, slope


def _cells(z: Array) -> Array:
    """Length that each point stands for, m."""
    cells = np.zeros(z.size)
    half = 0.5 * np.diff(z)
    cells[1:] += half
    cells[:-1] += half
    return cells


def _peak(z: Array, deficit: Array) -> tuple[float, float, list[float]]:
    """Place of the greatest deficit, the deficit, and the distances from it at which half of it is left."""
    ends = 3 if z.size >= 12 else 1
    slope = (deficit[-ends:].mean() - deficit[:ends].mean()) / (z[-ends:].mean() - z[:ends].mean())
    above = deficit - deficit[:ends].mean() - slope * (z - z[:ends].mean())
    averaged = np.convolve(np.pad(above, 1, mode="edge"), (0.25, 0.5, 0.25), mode="valid")
    top = int(np.argmax(averaged))
    depth = float(averaged[top])
    halves = []
    for step, end in ((-1, 0), (1, z.size - 1)):
        i = top
        while i != end and averaged[i] > 0.5 * depth:
            i += step
        if averaged[i] > 0.5 * depth or i == top:
            halves.append(abs(float(z[end] - z[top])))
            continue
        share = (averaged[i - step] - 0.5 * depth) / (averaged[i - step] - averaged[i])
        halves.append(abs(float(z[i - step] + share * (z[i] - z[i - step]) - z[top])))
    narrow = max(min(halves), float(np.diff(z).min()))
    return float(z[top]), depth, [max(half, narrow) for half in halves]


def _outer_flow(
    z: Array,
    deficit: Array,
    peak: float,
    beside: list[NDArray[np.bool_]],
    near: list[NDArray[np.bool_]],
    sloping: bool,
    large: float,
) -> tuple[Array, float, list[bool]]:
    """Deficit of the outer flow carried under the wake from each side, its scatter, and which side is no outer flow."""
    lines, residuals, wavy, freedom = [], [], [], 0
    for side, outer in enumerate(near):
        used = outer
        if np.count_nonzero(used) < 4:
            away = np.flatnonzero(beside[side])
            nearest = away[-4:] if side == 0 else away[:4]
            if nearest.size == 0:
                nearest = np.array([0 if side == 0 else z.size - 1])
            used = np.zeros(z.size, dtype=bool)
            used[nearest] = True
        weights = _cells(z)[used]
        parameters = 2 if sloping and np.count_nonzero(used) >= 4 else 1
        if parameters == 2:
            value, slope = _line(z[used] - peak, deficit[used], weights)
        else:
            value, slope = float(np.average(deficit[used], weights=weights)), 0.0
        lines.append(value + slope * (z - peak))
        residuals.append(deficit[used] - lines[-1][used])
        rest = residuals[-1]
        steps = math.sqrt(0.5 * float(np.mean(np.diff(rest) ** 2))) if rest.size >= 6 else math.inf
        wavy.append(bool(rest.std() > max(3.0 * steps, large)))
        freedom += max(int(np.count_nonzero(used)) - parameters, 0)
    square = float(sum(np.sum(part**2) for part in residuals))
    scatter = math.sqrt(square / freedom) if freedom > 0 else math.nan
    base = np.where(z < peak, lines[0], np.where(z > peak, lines[1], 0.5 * (lines[0] + lines[1])))
    return base, scatter, wavy


#: Places smoothed at a time, and how many scales a Gaussian reaches before it is below rounding.
_PLACES, _REACH = 512, 9.0


def _smoothed(z: Array, values: Array, cells: Array, scale: float) -> tuple[Array, Array]:
    """Values averaged with a Gaussian of the given scale, and what is left of the noise of one point."""
    mean, gain = np.empty(z.size), np.empty(z.size)
    # Some places at a time, each with the stretch of the traverse that its Gaussian reaches.
    for start in range(0, z.size, _PLACES):
        here = slice(start, min(start + _PLACES, z.size))
        near = slice(*np.searchsorted(z, [z[here.start] - _REACH * scale, z[here.stop - 1] + _REACH * scale]))
        kernel = np.exp(-0.5 * ((z[here, None] - z[near]) / scale) ** 2) * cells[near]
        kernel /= kernel.sum(axis=1, keepdims=True)
        mean[here], gain[here] = kernel @ values[near], np.sqrt(np.sum(kernel**2, axis=1))
    return mean, gain


def _around(z: Array, above: Array, peak: float, gap: float) -> tuple[int, int]:
    """First and last point of the stretch above the threshold around the peak, closing gaps up to a length."""
    top = int(np.argmin(np.abs(z - peak)))
    found = []
    for step, end in ((-1, 0), (1, z.size - 1)):
        edge = i = top
        while i != end and abs(z[i + step] - z[edge]) <= max(gap, abs(z[edge + step] - z[edge])):
            i += step
            if above[i]:
                edge = i
        found.append(edge)
    return found[0], found[1]
