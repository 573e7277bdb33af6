"""Loadings of least induced drag for a trailing edge of any shape.

Munk's condition: with the wake seen end-on, the drag for a given lift is least where the velocity normal to the
trailing edge is V_n = −W cos θ, θ being the local dihedral. It is solved with panels of constant bound circulation,
crowded towards both ends of every straight piece.

Source: M. Munk, The minimum induced drag of aerofoils, NACA Report 121, 1921.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import ArrayLike

from wakeledger.core.grid import Array
from wakeledger.synthetic.elements import GaussianElements


@dataclass(frozen=True, eq=False)
class OptimumLoading:
    """Loading of least drag, for unit downwash W at a level trailing edge.

    Attributes
    ----------
    y, z : ndarray, shape (n_nodes,)
        Where the wake's vortices leave, m.
    node_circulation : ndarray, shape (n_nodes,)
        Their circulation, m²/s.
    bound_circulation : ndarray, shape (n_panels,)
        Bound circulation of each panel, m²/s, positive for lift where the panel runs to starboard.
    panel_y : ndarray, shape (n_panels,)
        Extent of each panel along y, m.
    span : float
        Largest extent along y, m.
    """

    y: Array
    z: Array
    node_circulation: Array
    bound_circulation: Array
    panel_y: Array
    span: float

    @property
    def efficiency(self) -> float:
        """Span efficiency e = L²/(πqb²D_i) of the thin sheet, on the actual span."""
        # D_i = ½ρW Σ Γ Δy for a loading that obeys Munk's condition, L = ρU Σ Γ Δy.
        return float(4 * (self.bound_circulation @ self.panel_y) / (np.pi * self.span**2))

    def elements(self, *, core: float, peak: float = 1.0) -> GaussianElements:
        """The wake as Gaussian elements.

        Parameters
        ----------
        core : float
            Core length, m.
        peak : float
            Largest bound circulation, m²/s.

        Returns
        -------
        GaussianElements
        """
        scale = peak / np.abs(self.bound_circulation).max()
        return GaussianElements(self.y, self.z, scale * self.node_circulation, np.asarray(core, float))


def optimum_loading(surfaces: Sequence[ArrayLike], *, panels: int = 80) -> OptimumLoading:
    """Solve Munk's condition for a system of trailing edges.

    Parameters
    ----------
    surfaces : sequence of array_like, shape (m, 2)
        Polylines of corners (y, z), m; corners shared between polylines (or by the ends of a closed one) join them.
    panels : int
        Panels on each straight piece.

    Returns
    -------
    OptimumLoading
        Of the thin sheet; its efficiency converges with the number of panels (`optimum_efficiency` extrapolates).

    Raises
    ------
    ValueError
        If a surface has fewer than two corners.
    """
    angle = np.linspace(0, np.pi, panels + 1)
    fraction = (1 - np.cos(angle)) / 2
    control = (1 - np.cos((angle[1:] + angle[:-1]) / 2)) / 2
    nodes: list[tuple[float, float]] = []
    index: dict[tuple[float, float], int] = {}
    first, last, at, tangent, length = [], [], [], [], []
    for surface in surfaces:
        corners = np.asarray(surface, float)
        if corners.ndim != 2 or corners.shape[0] < 2 or corners.shape[1] != 2:
            raise ValueError(f"a surface needs shape (m, 2) with m >= 2, {corners.shape} was given")
        for start, end in pairwise(corners):
            along = end - start
            numbers = []
            for point in start + fraction[:, None] * along:
                key = (round(float(point[0]), 12), round(float(point[1]), 12))
                if key not in index:
                    index[key] = len(nodes)
                    nodes.append(key)
                numbers.append(index[key])
            first += numbers[:-1]
            last += numbers[1:]
            at.append(start + control[:, None] * along)
            size = float(np.hypot(*along))
            tangent.append(np.tile(along / size, (panels, 1)))
            length.append(np.diff(fraction) * size)
    y, z = np.array(nodes).T
    points, direction, extent = np.concatenate(at), np.concatenate(tangent), np.concatenate(length)
    count = extent.size
    # A node sheds what the panel ending there carries less what the panel starting there carries away.
    shed = np.zeros((y.size, count))
    shed[last, np.arange(count)] += 1
    shed[first, np.arange(count)] -= 1
    dy, dz = points[:, 0, None] - y, points[:, 1, None] - z
    kernel = 1 / (2 * np.pi * (dy**2 + dz**2))
    # n = (−t_z, t_y); (v, w) = Γ/(2πr²) (−dz, dy).
    normal = kernel * (direction[:, 1, None] * dz + direction[:, 0, None] * dy)
    # A circulation that is constant round a closed loop sheds nothing: least squares picks the smallest.
    bound = np.linalg.lstsq(normal @ shed, -direction[:, 0], rcond=1e-12)[0]
    return OptimumLoading(y, z, shed @ bound, bound, extent * direction[:, 0], float(np.ptp(y)))


def optimum_efficiency(surfaces: Sequence[ArrayLike], *, panels: int = 40) -> float:
    """Span efficiency of the optimum loading, extrapolated from three panel counts (Aitken).

    Parameters
    ----------
    surfaces : sequence of array_like
        As for `optimum_loading`.
    panels : int
        Panels per straight piece of the coarsest of three solutions (then doubled twice).

    Returns
    -------
    float
    """
    coarse, middle, fine = (optimum_loading(surfaces, panels=panels * k).efficiency for k in (1, 2, 4))
    change = (fine - middle) - (middle - coarse)
    return fine if abs(change) < 1e-10 * abs(fine) else fine - (fine - middle) ** 2 / change


def biplane(height: float, *, span: float = 1.0) -> list[Array]:
    """Two equal level edges, `height` (m) apart."""
    half = span / 2
    return [np.array([[-half, z], [half, z]]) for z in (-height / 2, height / 2)]


def box_wing(height: float, *, span: float = 1.0) -> list[Array]:
    """Rectangle of the given height and span, m: two wings joined at their tips."""
    half, top = span / 2, height / 2
    return [np.array([[-half, -top], [half, -top], [half, top], [-half, top], [-half, -top]])]


def winglets(height: float, *, span: float = 1.0) -> list[Array]:
    """Level wing with upright winglets of the given height, m."""
    half = span / 2
    return [np.array([[-half, height], [-half, 0.0], [half, 0.0], [half, height]])]


def end_plates(height: float, *, span: float = 1.0) -> list[Array]:
    """Level wing with plates of the given total height at its tips, half up and half down, m."""
    half, reach = span / 2, height / 2
    plates = [np.array([[y, -reach], [y, 0.0], [y, reach]]) for y in (-half, half)]
    return [np.array([[-half, 0.0], [half, 0.0]]), *plates]


def straight_v(height: float, *, span: float = 1.0) -> list[Array]:
    """Straight V with its tips at the given height above its middle, m."""
    return [np.array([[-span / 2, height], [0.0, 0.0], [span / 2, height]])]


def c_wing(height: float, inboard: float, *, span: float = 1.0) -> list[Array]:
    """Level wing, upright tips of the given height, and a return of length `inboard` from each, m."""
    half = span / 2
    port = [[-half + inboard, height], [-half, height], [-half, 0.0]]
    return [np.array([*port, [half, 0.0], [half, height], [half - inboard, height]])]
