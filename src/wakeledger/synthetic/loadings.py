"""Loadings shed from a trailing edge, cut into Gaussian vortex elements.

A loading is the bound circulation Γ_b(η), η from −1 at the port end of the trailing edge to +1 at its starboard end,
measured along the edge. What leaves between two stations is one element, Γ = −ΔΓ_b, at the centroid of the sheet
between them, so that the lift of the elements is that of the loading.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from types import MappingProxyType

import numpy as np
from numpy.typing import ArrayLike

from wakeledger.core.grid import Array
from wakeledger.synthetic.elements import GaussianElements

#: A loading: η in [−1, 1] -> Γ_b over its value at mid-span.
Loading = Callable[[Array], Array]


def _inside(eta: Array) -> Array:
    inside: Array = np.clip(1 - np.asarray(eta, float) ** 2, 0.0, None)
    return inside


#: Loadings by name, each 1 at mid-span.
LOADINGS: Mapping[str, Loading] = MappingProxyType(
    {
        "elliptic": lambda eta: np.sqrt(_inside(eta)),
        "parabolic": _inside,
        "linear": lambda eta: np.clip(1 - np.abs(eta), 0.0, None),
        "bell": lambda eta: _inside(eta) ** 1.5,
        "uniform": lambda eta: np.where(np.abs(eta) < 1, 1.0, 0.0),
    }
)

#: Span efficiency e = L²/(πqb²D_i) of the thin flat sheet (uniform loading: zero, its drag is infinite).
THIN_SHEET_EFFICIENCY: Mapping[str, float] = MappingProxyType(
    {"elliptic": 1.0, "parabolic": 8 / 9, "linear": 1 / (2 * np.log(2)), "bell": 0.75}
)

_GAUSS_X, _GAUSS_W = np.polynomial.legendre.leggauss(16)


def straight_edge(span: float, *, y: float = 0.0, z: float = 0.0) -> Array:
    """Straight level trailing edge of the given span centred at (y, z), m, shape (2, 2)."""
    return np.array([[y - span / 2, z], [y + span / 2, z]])


def v_edge(span: float, *, tip_height: float) -> Array:
    """Trailing edge of a straight V whose tips stand `tip_height` above its middle, m, shape (3, 2)."""
    return np.array([[-span / 2, tip_height], [0.0, 0.0], [span / 2, tip_height]])


def shed(
    loading: str | Loading,
    trailing_edge: ArrayLike,
    *,
    peak: float,
    core: float,
    n: int = 200,
    spacing: str = "cosine",
) -> GaussianElements:
    """Cut the sheet behind a trailing edge into Gaussian elements.

    Parameters
    ----------
    loading : str or callable
        Name in `LOADINGS`, or Γ_b(η)/peak with η in [−1, 1] along the edge from port to starboard.
    trailing_edge : array_like, shape (m, 2)
        Corners (y, z) of the edge from its port end to its starboard end, m.
    peak : float
        Bound circulation where the loading is 1, m²/s.
    core : float
        Core length of every element, m.
    n : int
        Number of elements.
    spacing : {"cosine", "uniform"}
        Stations crowded towards both ends, or evenly spread along the edge.

    Returns
    -------
    GaussianElements
        In order from port to starboard; elements without circulation are left out.

    Raises
    ------
    ValueError
        If the loading or spacing is unknown or the edge has fewer than two corners.
    """
    shape = _named(loading)
    corners = np.asarray(trailing_edge, float)
    if corners.ndim != 2 or corners.shape[0] < 2 or corners.shape[1] != 2:
        raise ValueError(f"trailing_edge needs shape (m, 2) with m >= 2, {corners.shape} was given")
    if spacing == "cosine":
        angle = np.linspace(0, np.pi, n + 1)
    elif spacing == "uniform":
        angle = np.arccos(np.linspace(1, -1, n + 1))
    else:
        raise ValueError(f"spacing must be 'cosine' or 'uniform', {spacing!r} was given")
    eta = -np.cos(angle)
    bound = np.asarray(shape(eta), float)
    circulation = -np.diff(bound)
    # ∫Γ_b dη with η = −cos θ, in which loadings with a square root at the tips are smooth.
    middle, half = (angle[1:] + angle[:-1]) / 2, np.diff(angle) / 2
    theta = middle[:, None] + half[:, None] * _GAUSS_X
    impulse = half * ((np.asarray(shape(-np.cos(theta)), float) * np.sin(theta)) @ _GAUSS_W)
    keep = np.abs(circulation) > 1e-13 * np.abs(bound).max()
    centroid = -np.cos(middle)
    centroid[keep] = (impulse - np.diff(eta * bound))[keep] / circulation[keep]
    # Where the sheet changes sign inside an element its centroid may lie outside; the middle is then as good.
    outside = (centroid < eta[:-1] - 1e-12) | (centroid > eta[1:] + 1e-12)
    centroid[outside] = -np.cos(middle[outside])
    along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(corners, axis=0).T))])
    place = (centroid[keep] + 1) / 2 * along[-1]
    y, z = (np.interp(place, along, corners[:, k]) for k in (0, 1))
    return GaussianElements(y, z, peak * circulation[keep], np.asarray(core, float))


def _named(loading: str | Loading) -> Loading:
    if not isinstance(loading, str):
        return loading
    if loading not in LOADINGS:
        raise ValueError(f"loading {loading!r} is unknown; known loadings: {', '.join(LOADINGS)}")
    return LOADINGS[loading]


def thin_sheet_limit(cores: Sequence[float], values: Sequence[float]) -> float:
    """Value at core → 0 of something computed at several finite cores.

    The drag of a sheet of thickness a falls short of the thin sheet's by terms in a ln a (square-root edges), a,
    a² ln a (steps in the sheet's strength) and a²; these are fitted.

    Parameters
    ----------
    cores : sequence of float
        At least five different core lengths, m, all small against the span.
    values : sequence of float
        The value at each.

    Returns
    -------
    float
    """
    a = np.asarray(cores, float)
    if a.size < 5:
        raise ValueError(f"at least 5 cores are needed, {a.size} were given")
    a = a / a.max()
    terms = np.stack([np.ones_like(a), a * np.log(a), a, a**2 * np.log(a), a**2], axis=1)
    return float(np.linalg.lstsq(terms, np.asarray(values, float), rcond=None)[0][0])


def biplane_interference(gap: float) -> float:
    """Prandtl's mutual factor σ = D12/D11 of two equal elliptic loadings one above the other.

    σ = (2/π) ∫_{−1}^{1} Re[1 − ζ/√(ζ² − 1)] √(1 − y²) dy with ζ = y + 2iG.

    Parameters
    ----------
    gap : float
        Gap over span, G > 0. For ground effect G = 2h/b and D_i/D_i,free = 1 − σ.

    Returns
    -------
    float
    """
    # y = cos θ makes the integrand smooth at the tips; the midpoint rule is then spectrally accurate.
    theta = (np.arange(4000) + 0.5) * np.pi / 4000
    zeta = np.cos(theta) + 2j * gap
    root = np.sqrt(zeta - 1) * np.sqrt(zeta + 1)
    integrand = (1 - zeta / root).real * np.sin(theta) ** 2
    return float(integrand.sum() * np.pi / 4000 / (np.pi / 2))
