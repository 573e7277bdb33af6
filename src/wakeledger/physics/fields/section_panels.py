"""Boundary elements on the edge of a section: an analytic function inside from its real part on the edge.

With ζ = y + iz, a harmonic function χ and its conjugate η form F = χ + iη, and Cauchy's integral gives F inside the
section and, with the factor ½, on its edge:

    ½F(ζ) = (1/2πi) PV∮ F(τ) dτ/(τ − ζ).

Its imaginary part is an equation of the second kind for the unknown part of F. The unknown is F itself, not some
fictitious density, so it is as smooth as the flow: in a corner of 90° (and 180°/n) it is analytic, and only other
corners need panels that shrink towards them. Panels carry Gauss-Legendre nodes; where a place is near a panel, the
interpolating polynomial of F times 1/(τ − ζ) is integrated exactly.

Source of the near-panel rule: J. Helsing, R. Ojala, J. Comput. Phys. 227 (2008) 2899-2921.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import linalg

from wakeledger.core.grid import Array
from wakeledger.physics.fields.boundary import Circle, Section

Complex = NDArray[np.complexfloating[Any, Any]]

#: Nodes of a panel.
ORDER = 16
#: Panels at a corner that is not 180°/n shrink to 4^−levels of its walls: the drag in a regular octagon to 2e-13.
CORNER_LEVELS = 3
_SHRINK = 0.25
#: Panel length over the distance of the nearest vortices: interpolation to about 1e-10, quadrature to rounding.
_REACH = 1.0
#: Bernstein ellipse outside which the plain rule of 16 nodes is good to 5e-14.
_NEAR = 2.6
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(ORDER)
_TO_MOMENTS = linalg.lu_factor(np.vander(_NODES, increasing=True).T)


@dataclass(frozen=True, eq=False)
class Panels:
    """Panels once around a section, counter-clockwise; n = 16 m nodes.

    Attributes
    ----------
    nodes, differentials : ndarray of complex, shape (n,)
        τ and dτ (with the quadrature weight), m.
    starts, ends : ndarray of complex, shape (m,)
        Ends of each panel, m.
    curved : bool
        Whether the panels are arcs.
    """

    nodes: Complex
    differentials: Complex
    starts: Complex
    ends: Complex
    curved: bool

    @property
    def arc(self) -> Array:
        """Length that each node stands for, m, shape (n,)."""
        return np.abs(self.differentials)

    @property
    def travelled(self) -> Array:
        """Share of the edge's length travelled from the first panel's start to each node, shape (n,)."""
        # Along a panel the speed is constant, so the place of a node is that of its abscissa.
        panel = self.arc.reshape(-1, ORDER).sum(axis=1)
        before = np.cumsum(panel) - panel
        share: Array = (before[:, None] + panel[:, None] * (_NODES + 1) / 2).ravel() / panel.sum()
        return share

    def direction(self, sources: Complex) -> tuple[Array, Array]:
        """Turns by which the direction from sources to the edge has turned since the first panel's start.

        Parameters
        ----------
        sources : ndarray of complex, shape (k,)
            Inside the section, or (straight walls only) outside it, m.

        Returns
        -------
        turned : ndarray, shape (n, k)
            At each node, in turns.
        winding : ndarray, shape (k,)
            Once around: 1 inside, 0 outside.
        """
        first = self.starts[:, None] - sources
        across = self._turn((self.ends[:, None] - sources) / first)
        before = np.cumsum(across, axis=0) - across
        gap = (self.nodes[:, None] - sources).reshape(self.starts.size, ORDER, sources.size)
        turned = before[:, None] + self._turn(gap / first[:, None])
        return turned.reshape(-1, sources.size), np.rint(before[-1] + across[-1])

    def _turn(self, ratio: Complex) -> Array:
        """Turns along one panel: less than a half on a straight one, forward on an arc seen from inside."""
        turn: Array = np.angle(ratio) / (2 * np.pi)
        return np.where(turn < -1e-9, turn + 1, turn) if self.curved else turn

    def cauchy(self, places: Complex, *, derivative: bool = False) -> Complex:
        """Weights of Cauchy's integral at places inside the section.

        Parameters
        ----------
        places : ndarray of complex, shape (k,)
            ζ inside the section, m.
        derivative : bool
            Weights of F′ instead of F.

        Returns
        -------
        ndarray of complex, shape (k, n)
            F(ζ) = Σ weights F(nodes).
        """
        return self._weights(places, derivative=derivative, on_edge=False)

    @cached_property
    def edge_weights(self) -> Complex:
        """Principal value of Cauchy's integral at the nodes themselves, shape (n, n)."""
        return self._weights(self.nodes, derivative=False, on_edge=True)

    @cached_property
    def conjugate(self) -> Array:
        """The other part of F from its real part at the nodes, mean zero along the edge, shape (n, n)."""
        weights = self.edge_weights
        system = 0.5 * np.eye(self.nodes.size) - weights.real + self.arc / self.arc.sum()
        solved: Array = linalg.solve(system, weights.imag, overwrite_a=True, check_finite=False)
        return solved

    def _weights(self, places: Complex, *, derivative: bool, on_edge: bool) -> Complex:
        gap = self.nodes[None, :] - places[:, None]
        if on_edge:
            np.fill_diagonal(gap, 1.0)
        weights: Complex = self.differentials / (gap**2 if derivative else gap)
        half = (self.ends - self.starts) / 2
        for index in range(self.starts.size):
            local = (places - (self.starts[index] + self.ends[index]) / 2) / half[index]
            root = np.sqrt(local - 1) * np.sqrt(local + 1)
            near = np.flatnonzero(np.maximum(np.abs(local + root), np.abs(local - root)) < _NEAR)
            if near.size == 0:
                continue
            columns = slice(index * ORDER, (index + 1) * ORDER)
            own = (near >= columns.start) & (near < columns.stop) if on_edge else np.zeros(near.size, dtype=bool)
            nodes = (self.nodes[columns] - (self.starts[index] + self.ends[index]) / 2) / half[index]
            rule = _near_rule(nodes, local[near], own, curved=self.curved, derivative=derivative)
            weights[near, columns] = rule / half[index] if derivative else rule
        weights /= 2j * np.pi
        return weights


def _near_rule(nodes: Complex, places: Complex, own: NDArray[np.bool_], *, curved: bool, derivative: bool) -> Complex:
    """∫ f dτ/(τ − ζ) over a panel from −1 to 1, or with the square below, for the polynomial through its nodes."""
    first = np.log(1 - places) - np.log(-1 - places)
    # Seen from inside, a straight panel sweeps less than a half turn; an arc sweeps forward, by up to a whole one.
    angle = np.angle((1 - places) / (-1 - places))
    if curved:
        angle = np.where(angle < -1e-9, angle + 2 * np.pi, angle)
    principal = np.angle((1 - places) / (1 + places))
    first = first.real + 1j * np.where(own, principal, angle)
    moments = np.empty((ORDER, places.size), complex)
    moments[0] = first
    for k in range(1, ORDER):
        moments[k] = places * moments[k - 1] + (1 - (-1) ** k) / k
    if derivative:
        slopes = np.empty_like(moments)
        slopes[0] = -1 / (1 - places) - 1 / (1 + places)
        for k in range(1, ORDER):
            slopes[k] = places * slopes[k - 1] + moments[k - 1]
        moments = slopes
    if curved:
        solved: Complex = np.linalg.solve(np.vander(nodes, increasing=True).T, moments)
    else:
        solved = linalg.lu_solve(_TO_MOMENTS, moments)
    return solved.T


def panels_of(section: Section, clearance: Callable[[Complex], Array], *, floor: float, refine: float = 1.0) -> Panels:
    """Panels short against the distance of the nearest vortices.

    Parameters
    ----------
    section : Rectangle, Circle or Polygon
        The section.
    clearance : callable
        Distance of places on the edge from the nearest place that may hold vortices, m.
    floor : float
        Length below which panels are not divided for the vortices' sake, m.
    refine : float
        Factor on the number of panels, to see how the solution converges.

    Returns
    -------
    Panels
    """
    if isinstance(section, Circle):
        radius, centre = section.diameter / 2, complex(*section.centre)

        def place(t: Array) -> Complex:
            spot: Complex = centre + radius * np.exp(2j * np.pi * t)
            return spot

        breaks = _divided(np.linspace(0, 1, round(8 * refine) + 1), place, 2 * np.pi * radius, clearance, floor, refine)
        middle, half = (breaks[1:] + breaks[:-1]) / 2, np.diff(breaks) / 2
        t = (middle[:, None] + half[:, None] * _NODES).ravel()
        around: Complex = place(t)
        speed = 2j * np.pi * (around - centre)
        return Panels(around, speed * np.outer(half, _WEIGHTS).ravel(), place(breaks[:-1]), place(breaks[1:]), True)
    corners = section.corners[:, 0] + 1j * section.corners[:, 1]
    ahead = np.roll(corners, -1) - corners
    angles = np.pi - np.angle(ahead / np.roll(ahead, 1))
    starts, ends = [], []
    for index, corner in enumerate(corners):
        grade = [_graded(angles[index], refine), _graded(angles[(index + 1) % corners.size], refine)]
        breaks = np.concatenate([[0.0], grade[0], [0.5], 1 - grade[1][::-1], [1.0]])

        def along(t: Array, corner: complex = corner, side: complex = ahead[index]) -> Complex:
            straight: Complex = corner + t * side
            return straight

        breaks = _divided(breaks, along, abs(ahead[index]), clearance, floor, refine)
        starts.append(along(breaks[:-1]))
        ends.append(along(breaks[1:]))
    start, end = np.concatenate(starts, dtype=complex), np.concatenate(ends, dtype=complex)
    middle_panel, half_panel = (start + end)[:, None] / 2, (end - start)[:, None] / 2
    differentials = np.multiply(half_panel, _WEIGHTS, dtype=complex).ravel()
    nodes = np.add(middle_panel, half_panel * _NODES, dtype=complex).ravel()
    return Panels(nodes, differentials, start, end, False)


def mean_logarithm(section: Section, sources: Complex) -> Array:
    """Mean of ln|τ − ζ| along the edge of a section, in closed form.

    Parameters
    ----------
    section : Rectangle, Circle or Polygon
        The section.
    sources : ndarray of complex, shape (k,)
        ζ, inside or outside, m.

    Returns
    -------
    ndarray, shape (k,)
        Lengths in metres inside the logarithm.
    """
    if isinstance(section, Circle):
        distance = np.abs(sources - complex(*section.centre))
        outer: Array = np.log(np.maximum(distance, section.diameter / 2))
        return outer
    corners = section.corners[:, 0] + 1j * section.corners[:, 1]
    total, length = np.zeros(sources.size), 0.0
    for start, end in zip(corners, np.roll(corners, -1), strict=True):
        side = abs(end - start)
        length += side
        local = (start - sources) * side / (end - start)
        height = np.abs(local.imag)
        for sign, s in ((1.0, local.real + side), (-1.0, local.real)):
            radius = np.hypot(s, height)
            total += sign * (s * np.log(np.where(radius > 0, radius, 1.0)) - s + height * np.arctan2(s, height))
    mean: Array = total / length
    return mean


def _graded(angle: float, refine: float) -> Array:
    """Breaks near a corner, as parts of the wall, ascending; none where the flow in the corner is analytic."""
    turns = math.pi / angle
    if abs(turns - round(turns)) < 1e-9:
        return np.empty(0)
    levels = round(CORNER_LEVELS * refine * max(1.0, angle / math.pi))
    return 0.5 * _SHRINK ** np.arange(levels, 0, -1.0)


def _divided(
    breaks: Array,
    place: Callable[[Array], Complex],
    length: float,
    clearance: Callable[[Complex], Array],
    floor: float,
    refine: float,
) -> Array:
    """Breaks with every panel halved until it is short against its distance from the vortices."""
    probe = np.linspace(0, 1, 9)
    while True:
        low, high = breaks[:-1], breaks[1:]
        distance = clearance(place(low[:, None] + (high - low)[:, None] * probe)).min(axis=1)
        allowed = np.maximum(_REACH * distance, floor) / refine
        split = (high - low) * length > allowed
        if not split.any():
            return breaks
        breaks = np.sort(np.concatenate([breaks, (low + high)[split] / 2]))
