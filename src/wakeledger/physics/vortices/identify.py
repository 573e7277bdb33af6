"""Vortices of a crossflow plane: where they are, how strong, how large.

A vortex is a place where Γ₂ comes close to ±1 and whose circulation stands out of the noise. Both judgements are blind
to a uniform velocity. Its centre comes from a fit of the velocity, its core and circulation from closed line integrals.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage
from scipy.interpolate import RectBivariateSpline

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.circulation import CrossflowSpline, cell_circulations
from wakeledger.physics.vortices.criteria import gamma2
from wakeledger.physics.vortices.gaussian_fit import (
    PEAK_RADIUS,
    PEAK_SWIRL,
    GaussianFit,
    ProfileFit,
    fit_gaussian,
    fit_profile,
)

#: |Γ₂| that a vortex centre reaches. Graftieaux et al. use 0.9 to 0.95 on Γ₁; sheets stay near 2/π.
CENTRE_LEVEL = 0.9
#: Standard deviations of the noise by which a vortex's circulation stands out.
SIGNIFICANCE = 5.0
#: Radius of the circle of the line integral, in units of the core a.
CONTOUR_RADIUS = 2.0
#: Peak swirl below this share of the plane's range of crossflow is an eddy of the sheet or a trace of rounding.
FAINT = 0.02
#: Largest misfit, in units of the peak swirl, that still passes for a vortex.
LARGEST_MISFIT = 0.35
_SMALLEST_CIRCLE = 1.0
_CIRCLES = 12
_REFINEMENTS = 8
_SWIRL_DROP = 0.93


@dataclass(frozen=True)
class Vortex:
    """One vortex of the plane.

    Attributes
    ----------
    y, z : float
        Centre, m, between grid points.
    circulation : float
        Γ, m²/s, counter-clockwise positive: closed line integral of the measured velocity on the circle of radius 2a
        (less where the window ends), over the share 1 − exp(−r²/a²) that a Gaussian vortex has inside it.
    core_length : float
        Core a of ξ ∝ exp(−r²/a²), m, fitted to the circulations Γ(r) = Γ(1 − exp(−r²/a²)) inside 2a. The swirl peaks at
        1.1209 a.
    contour_radius : float
        Radius of the circle of the line integral, m.
    peak_swirl : float
        Largest azimuthal-mean swirl measured, m/s, positive.
    roundness : float
        Smaller over larger principal axis of the vorticity; 1 is round.
    misfit : float
        Rms of what the fit leaves over, as a share of the peak swirl.
    u : float
        Axial velocity at the centre, m/s; NaN where none was given.
    """

    y: float
    z: float
    circulation: float
    core_length: float
    contour_radius: float
    peak_swirl: float
    roundness: float
    misfit: float
    u: float

    @property
    def core_radius(self) -> float:
        """Radius of the swirl's peak, 1.1209 a, m."""
        return PEAK_RADIUS * self.core_length


def crossflow_noise(v: Array, w: Array) -> float:
    """Standard deviation of point-to-point noise in one crossflow component, m/s.

    Parameters
    ----------
    v, w : ndarray, shape (nz, ny)
        Crossflow, m/s.

    Returns
    -------
    float
        From the median size of the mixed fourth difference, which smooth flow hardly enters and which a wake that fills
        less than half of the window does not move.
    """
    if min(v.shape) < 3:
        return 0.0
    mixed = [np.diff(np.diff(np.asarray(f, float), 2, axis=-1), 2, axis=-2) for f in (v, w)]
    # The weights (1, −2, 1) ⊗ (1, −2, 1) have the square sum 36; 0.6745 is the median of |N(0, 1)|.
    return float(np.median(np.abs(np.stack(mixed))) / (6 * 0.6745))


def find_vortices(
    v: Array,
    w: Array,
    grid: UniformGrid,
    *,
    mask: NDArray[np.bool_] | None = None,
    u: Array | None = None,
) -> tuple[Vortex, ...]:
    """Identify the vortices of one plane.

    Parameters
    ----------
    v, w : ndarray, shape (nz, ny)
        Crossflow, m/s, finite everywhere.
    grid : UniformGrid
        The grid.
    mask : ndarray of bool, shape (nz, ny), optional
        Only vortices with their centre in it are kept.
    u : ndarray, shape (nz, ny), optional
        Axial velocity, m/s.

    Returns
    -------
    tuple of Vortex
        From port to starboard. Mirrored data give the mirrored list.

    Raises
    ------
    ValueError
        If shapes do not fit the grid or a value is not finite.

    Notes
    -----
    Γ₂ of Graftieaux, Michard & Grosjean (2001); a candidate is a connected set of points with |Γ₂| > 0.9.
    """
    return tuple(measured.vortex for measured in measured_vortices(v, w, grid, mask=mask, u=u))


@dataclass(frozen=True, eq=False)
class MeasuredVortex:
    """A vortex with the fits behind it, for what a change of the data does to it.

    Attributes
    ----------
    vortex : Vortex
        The record.
    centre : GaussianFit
        Fit of the centre.
    profile : ProfileFit
        Fit of the core.
    radii : ndarray, shape (m,)
        Radii of the circles of the profile, m; the last is the contour's.
    """

    vortex: Vortex
    centre: GaussianFit
    profile: ProfileFit
    radii: Array


def measured_vortices(
    v: Array,
    w: Array,
    grid: UniformGrid,
    *,
    mask: NDArray[np.bool_] | None = None,
    u: Array | None = None,
) -> tuple[MeasuredVortex, ...]:
    """As `find_vortices`, each vortex with the fits behind it."""
    v, w = np.asarray(v, float), np.asarray(w, float)
    if v.shape != grid.shape or w.shape != grid.shape:
        raise ValueError(f"v and w need the grid's shape {grid.shape}, {v.shape} and {w.shape} were given")
    if not (np.isfinite(v).all() and np.isfinite(w).all()):
        raise ValueError("v and w must be finite everywhere; fill missing points first")
    if min(grid.shape) < 7:
        return ()
    noise = crossflow_noise(v, w)
    faint = FAINT * max(float(np.ptp(v)), float(np.ptp(w)))
    spacing = max(grid.dy, grid.dz)
    spline: CrossflowSpline | None = None
    found: list[MeasuredVortex] = []
    for y, z in _candidates(v, w, grid):
        spline = CrossflowSpline.on_grid(v, w, grid) if spline is None else spline
        measured = _measured(v, w, grid, spline, y, z, u)
        if measured is None:
            continue
        vortex = measured.vortex
        circle_noise = noise * np.sqrt(2 * np.pi * vortex.contour_radius * spacing)
        if abs(vortex.circulation) < SIGNIFICANCE * circle_noise or vortex.peak_swirl < max(2 * noise, faint):
            continue
        if vortex.misfit > LARGEST_MISFIT or (mask is not None and not _value_at(mask, grid, vortex.y, vortex.z)):
            continue
        found.append(measured)
    return _ordered(_without_doubles(found), grid)


def _candidates(v: Array, w: Array, grid: UniformGrid) -> Iterator[tuple[float, float]]:
    criterion = gamma2(v, w, grid)
    for sign in (1.0, -1.0):
        labels, count = ndimage.label(sign * criterion > CENTRE_LEVEL, structure=np.ones((3, 3)))
        if count == 0:
            continue
        weight = np.abs(criterion) - CENTRE_LEVEL
        for row, column in ndimage.center_of_mass(weight, labels, range(1, count + 1)):
            yield grid.y0 + column * grid.dy, grid.z0 + row * grid.dz


def _measured(
    v: Array, w: Array, grid: UniformGrid, spline: CrossflowSpline, y: float, z: float, u: Array | None
) -> MeasuredVortex | None:
    guess = _first_guess(spline, grid, y, z)
    if guess is None:
        return None
    centre = fit_gaussian(v, w, grid, y=y, z=z, circulation=guess[0], core=guess[1])
    if centre is None:
        return None
    room = _room(grid, centre.y, centre.z)
    core = centre.core
    profile: ProfileFit | None = None
    radii: Array = np.zeros(0)
    enclosed: Array = np.zeros(0)
    for _ in range(_REFINEMENTS):
        largest = min(CONTOUR_RADIUS * core, room)
        if largest < _SMALLEST_CIRCLE * core:
            return None
        radii = largest * np.arange(1, _CIRCLES + 1) / _CIRCLES
        enclosed = spline.around_circle(centre.y, centre.z, radii)
        profile = fit_profile(radii, enclosed, core=core)
        if profile is None or not 0.5 < profile.core / centre.core < 2:
            return None
        core = profile.core
    circulation = float(enclosed[-1]) / -float(np.expm1(-((radii[-1] / core) ** 2)))
    if profile is None or circulation * centre.circulation <= 0:
        return None
    vortex = Vortex(
        y=centre.y,
        z=centre.z,
        circulation=circulation,
        core_length=core,
        contour_radius=float(radii[-1]),
        peak_swirl=float((np.abs(enclosed) / (2 * np.pi * radii)).max()),
        roundness=_roundness(v, w, grid, centre.y, centre.z, core),
        misfit=centre.misfit,
        u=float("nan") if u is None else _interpolated(np.asarray(u, float), grid, centre.y, centre.z),
    )
    return MeasuredVortex(vortex, centre, profile, radii)


def _room(grid: UniformGrid, y: float, z: float) -> float:
    return float(min(y - grid.y[0], grid.y[-1] - y, z - grid.z[0], grid.z[-1] - z))


def _first_guess(spline: CrossflowSpline, grid: UniformGrid, y: float, z: float) -> tuple[float, float] | None:
    """Circulation and core from the first peak of the azimuthal-mean swirl, walking outwards."""
    spacing = max(grid.dy, grid.dz)
    room = _room(grid, y, z)
    if room < 1.5 * spacing:
        return None
    radii = np.geomspace(0.75 * spacing, room, max(8, int(np.log(room / spacing) / np.log(1.12)) + 1))
    best_radius, best_swirl = 0.0, 0.0
    for radius in radii:
        swirl = float(spline.around_circle(y, z, radius)) / (2 * np.pi * radius)
        if abs(swirl) > abs(best_swirl):
            best_radius, best_swirl = float(radius), swirl
        elif abs(swirl) < _SWIRL_DROP * abs(best_swirl):
            break
    if best_swirl == 0:
        return None
    core = best_radius / PEAK_RADIUS
    return 2 * np.pi * core * best_swirl / PEAK_SWIRL, core


def _roundness(v: Array, w: Array, grid: UniformGrid, at_y: float, at_z: float, core: float) -> float:
    """Axis ratio of the Gaussian whose second moments, seen through a round Gaussian window, are the measured ones."""
    y, z = grid.y[:-1] + grid.dy / 2 - at_y, grid.z[:-1] + grid.dz / 2 - at_z
    reach = 3.0 * core
    columns, rows = np.flatnonzero(np.abs(y) < reach), np.flatnonzero(np.abs(z) < reach)
    first, last = slice(rows[0], rows[-1] + 2), slice(columns[0], columns[-1] + 2)
    cut = UniformGrid(0.0, 0.0, grid.dy, grid.dz, columns.size + 1, rows.size + 1)
    circulation = cell_circulations(v[first, last], w[first, last], cut)
    yy, zz = np.meshgrid(y[columns], z[rows])
    weight = circulation * np.exp(-(yy**2 + zz**2) / core**2)
    total = weight.sum()
    yy_moment = float((weight * yy**2).sum() / total) - grid.dy**2 / 12
    zz_moment = float((weight * zz**2).sum() / total) - grid.dz**2 / 12
    yz_moment = float((weight * yy * zz).sum() / total)
    tensor = np.array([[yy_moment, yz_moment], [yz_moment, zz_moment]])
    axes = np.linalg.eigvalsh(tensor)
    if not axes[0] > 0:
        return 0.0
    # The window multiplies by exp(−r²/a²), which adds 2/a² to the inverse of each squared axis.
    short, long = 1 / axes - 2 / core**2
    return float(np.sqrt(long / short)) if long > 0 else 0.0


def _value_at(mask: NDArray[np.bool_], grid: UniformGrid, y: float, z: float) -> bool:
    row = int(np.clip(round((z - grid.z0) / grid.dz), 0, grid.nz - 1))
    column = int(np.clip(round((y - grid.y0) / grid.dy), 0, grid.ny - 1))
    return bool(mask[row, column])


def _interpolated(field: Array, grid: UniformGrid, y: float, z: float) -> float:
    row = int(np.clip(np.floor((z - grid.z0) / grid.dz) - 3, 0, max(grid.nz - 8, 0)))
    column = int(np.clip(np.floor((y - grid.y0) / grid.dy) - 3, 0, max(grid.ny - 8, 0)))
    rows, columns = slice(row, row + 8), slice(column, column + 8)
    return float(RectBivariateSpline(grid.z[rows], grid.y[columns], field[rows, columns]).ev(z, y))


def _without_doubles(found: list[MeasuredVortex]) -> list[MeasuredVortex]:
    """Fits that ran into the same vortex count once; the better fit stays."""
    kept: list[MeasuredVortex] = []
    for new in sorted(found, key=lambda measured: measured.vortex.misfit):
        a = new.vortex
        others = (measured.vortex for measured in kept)
        if all(np.hypot(a.y - b.y, a.z - b.z) > max(a.core_length, b.core_length) / 2 for b in others):
            kept.append(new)
    return kept


def _ordered(found: list[MeasuredVortex], grid: UniformGrid) -> tuple[MeasuredVortex, ...]:
    step = 1e-6 * min(grid.dy, grid.dz)
    return tuple(sorted(found, key=lambda measured: (round(measured.vortex.y / step), measured.vortex.z)))
