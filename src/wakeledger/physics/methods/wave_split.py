"""Viscous and wave drag on one plane: the loss outside the viscous wake, continued under it.

A shock's loss lies over the wake of the boundary layer that it stands on. Entropies add along a streamline, so the
split is made in entropy: outside the viscous region all of it is the shock's; inside, the base on which the viscous
profile stands is fitted on either side of the region and continued to the profile's peak, the streamline that divides
the flow over the upper side from that under the lower. With the base entropy s_w,

    D_w = −∬ρu Δū(s_w, ΔH = 0) dA,    D_v = −∬ρuΔū(s, ΔH) dA − D_w       over the viscous and the shock's region,

with the plane's own mass flux, and the expanded velocity defect Δū. What neither region holds is numerical.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from wakeledger.core.errors import InputError
from wakeledger.core.grid import Array
from wakeledger.physics.fields.entropy import entropy_loss
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.fields.loss_regions import PROFILE_REACH, viscous_region
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.physics.methods.velocity_defect import velocity_defect
from wakeledger.stream.reference import Reference

Rows = NDArray[np.intp]

#: Choices of the fit that are varied: reach of the viscous region, what is continued and by which degree, how both
#: sides are joined. A weak shock's entropy is as the cube of M² − 1 ahead of it, which varies smoothly along it.
REACHES = (0.95, 1.05, 1.15)
BASES = (("strength", 1), ("strength", 2), ("loss", 2))
JOINS = ("step", "ramp")
#: Length over which the base is fitted beside the viscous region, in half widths of it, and least number of points.
_FIT_LENGTH = 2.0
_FEWEST = 6
#: Smoothing of the entropy in which the shock's region is found, cells.
_SMOOTHING = 1.5
#: Quantiles between which lies one standard deviation to either side of a normal variable: wild choices do not count.
_CENTRAL = (0.158655, 0.841345)
#: Loss beside the viscous region thinner than this part of its half width is the skirt of the viscous profile.
_SKIRT = 0.25


@dataclass(frozen=True)
class LossRegions:
    """Regions of a plane, bool arrays of shape (nz, ny) that do not overlap.

    Attributes
    ----------
    viscous : ndarray of bool
        Wake of boundary layers and vortex cores.
    wave : ndarray of bool
        Loss outside it that belongs to a shock.
    energised : ndarray of bool
        Slipstreams and heated flow.
    """

    viscous: Mask
    wave: Mask
    energised: Mask

    @property
    def outside(self) -> Mask:
        """The rest of the plane."""
        return ~(self.viscous | self.wave | self.energised)


@dataclass(frozen=True)
class WaveSplit:
    """Drag of a plane by what made it, N.

    Attributes
    ----------
    viscous_drag, wave_drag : float
        Their sum is the irreversible drag of both regions exactly.
    split_uncertainty : float
        Standard uncertainty of the border between the two: it acts on them with opposite signs.
    numerical_drag : float
        Irreversible drag outside all regions.
    energised_drag : float
        Irreversible drag of slipstreams and heated flow, negative for thrust.
    continued_drag : float
        Part of the wave drag that was continued under the viscous wake.
    tail_drag : float
        What the wave drag would have more if the steep tails of the viscous profile were a shock's. A shock whose loss
        falls by e within three quarters of the wake's width, so one no higher than about four widths, looks like them
        and is counted as viscous; the turbulent viscosity tells the two apart.
    invalid_area : float
        Area of the regions where the defect has no real value, m².
    regions : LossRegions
        The regions.
    base_loss : ndarray, shape (nz, ny)
        Loss p∞Δs/R taken to be the shock's, Pa.
    choices : tuple of float
        Wave drag with each choice of the fit, N.
    """

    viscous_drag: float
    wave_drag: float
    split_uncertainty: float
    numerical_drag: float
    energised_drag: float
    continued_drag: float
    tail_drag: float
    invalid_area: float
    regions: LossRegions
    base_loss: Array
    choices: tuple[float, ...]


def wave_split(
    flow: Flow,
    reference: Reference,
    *,
    level: float,
    turbulent_viscosity: Array | None = None,
    viscous: Mask | None = None,
    shock: Mask | None = None,
    energised: Mask | None = None,
    within: Mask | None = None,
) -> WaveSplit:
    """Split the irreversible drag of one plane into viscous and wave drag.

    Parameters
    ----------
    flow : Flow
        The plane, arrays of shape (nz, ny), total pressure zeroed in the outer flow.
    reference : Reference
        The undisturbed stream, compressible.
    level : float
        Loss p∞Δs/R above which smooth loss outside the viscous wake is a shock's, Pa: several times the outer flow's
        noise and wander.
    turbulent_viscosity : ndarray, shape (nz, ny), optional
        Turbulent viscosity; it then finds the viscous wake.
    viscous : ndarray of bool, shape (nz, ny), optional
        A given viscous region, such as one with the core of a tip vortex in it.
    shock : ndarray of bool, shape (nz, ny), optional
        Where a shock's loss can be at all; everywhere unless given.
    energised : ndarray of bool, shape (nz, ny), optional
        Slipstreams and heated flow, kept apart (`wakeledger.physics.fields.loss_regions.energised_region`).
    within : ndarray of bool, shape (nz, ny), optional
        Where drag is counted as viscous or wave drag, such as the wake region that a profile drag is of; everywhere
        unless given. The regions are found, and the base is fitted, wherever they lie.

    Returns
    -------
    WaveSplit

    Raises
    ------
    InputError
        If the reference is not compressible.
    ValueError
        If the level is not positive.

    Notes
    -----
    The value is the median of the choices: the viscous region 0.95, 1.05 and 1.15 times as wide; the base continued
    in the cube root of the loss, which is as M² − 1 ahead of a weak shock, by first and second degree, or in the loss
    itself by second; both sides joined by a step at the peak or by a straight ramp across the region. The uncertainty
    combines half the range of the central 68 % of the choices, the scatter of the points about each line's fit, the
    shock below the level that may hide under a wake beside which none was seen, the border where the shock's loss
    fades out, and the tails of the viscous profile, which a shock no higher than a few widths of the wake would look
    like.
    """
    if not reference.compressible:
        raise InputError("wave drag needs a compressible stream", remedy="set compressible = true in [reference]")
    if not level > 0:
        raise ValueError(f"level is {level} Pa; it must be positive")
    grid = flow.grid
    loss = entropy_loss(flow, reference)
    found = velocity_defect(flow, reference)
    flux = -flow.density * flow.u
    irreversible = flux * found.defect
    slip = np.zeros(grid.shape, bool) if energised is None else energised
    allowed = ~slip if shock is None else shock & ~slip
    counted = np.ones(grid.shape, bool) if within is None else within

    def viscous_with(factor: float, *, to_base: bool = True) -> Mask:
        if viscous is not None:
            region = _stretched(viscous, factor)
        elif turbulent_viscosity is not None:
            region = _stretched(viscous_region(loss, grid, turbulent_viscosity=turbulent_viscosity), factor)
        else:
            apart = np.where(slip, 0.0, loss)
            region = viscous_region(apart, grid, level=level, reach=PROFILE_REACH * factor, to_base=to_base)
        return region & ~slip

    def drag_of(base: Array) -> float:
        shocked = replace(
            flow,
            total_pressure=reference.total_pressure * np.exp(-base / reference.static_pressure),
            total_temperature=np.full(grid.shape, reference.total_temperature),
        )
        return float(grid.integrate(np.where(counted, flux * velocity_defect(shocked, reference).defect, 0.0)))

    drags, bases, scatters, borders = [], [], [], []
    for factor in REACHES:
        inner = viscous_with(factor)
        inner, outer = _wave_region(loss, inner, allowed, level)
        borders.append((inner, outer))
        for quantity, degree in BASES:
            for base, scatter in _continued(loss, inner, outer, level=level, quantity=quantity, degree=degree):
                bases.append(np.where(inner, base, np.where(outer, loss, 0.0)))
                drags.append(drag_of(bases[-1]))
                scatters.append(scatter * grid.cell_area)
    inner, wave = borders[1]
    base_loss = np.median(bases, axis=0)
    value = float(np.median(drags))
    both = (inner | wave) & counted
    low, high = np.quantile(drags, _CENTRAL)
    # The border where the loss fades out: what lies between once and twice the level, all of it or nothing.
    fading = drag_of(np.where(wave & ~_wave_region(loss, inner, allowed, 2 * level)[1], loss, 0.0)) / np.sqrt(12)
    # The tails of the viscous profile beyond its least width, if they were a shock's close above it.
    bare, tails = _wave_region(loss, viscous_with(1.0, to_base=False), allowed, level)
    base, _ = next(_continued(loss, bare, tails, level=level, quantity="loss", degree=1))
    tail_drag = max(drag_of(np.where(bare, base, np.where(tails, loss, 0.0))) - value, 0.0)
    uncertainty = float(np.linalg.norm([(high - low) / 2, np.median(scatters), fading, tail_drag / np.sqrt(3)]))
    total = float(grid.integrate(np.where(both, irreversible, 0.0)))
    return WaveSplit(
        viscous_drag=total - value,
        wave_drag=value,
        split_uncertainty=uncertainty,
        numerical_drag=float(grid.integrate(np.where(both | slip, 0.0, irreversible))),
        energised_drag=float(grid.integrate(np.where(slip, irreversible, 0.0))),
        continued_drag=value - drag_of(np.where(wave, base_loss, 0.0)),
        tail_drag=tail_drag,
        invalid_area=float(np.count_nonzero((both | slip) & ~found.valid) * grid.cell_area),
        regions=LossRegions(inner, wave, slip),
        base_loss=base_loss,
        choices=tuple(drags),
    )


def _stretched(mask: Mask, factor: float) -> Mask:
    """A region made wider or narrower along each line of constant y, about the middle of each of its runs."""
    result = np.zeros_like(mask)
    for column, first, last in _runs(mask):
        change = round((factor - 1) * (last - first + 1) / 2)
        result[max(first - change, 0) : last + change + 1, column] = True
    return result


def _runs(mask: Mask) -> Iterator[tuple[int, int, int]]:
    """Column, first and last row of each unbroken run of a region along z."""
    for column in np.flatnonzero(mask.any(axis=0)):
        steps = np.diff(mask[:, column].astype(np.int8), prepend=0, append=0)
        for first, beyond in zip(np.flatnonzero(steps == 1), np.flatnonzero(steps == -1), strict=True):
            yield int(column), int(first), int(beyond) - 1


def _wave_region(loss: Array, viscous: Mask, allowed: Mask, level: float) -> tuple[Mask, Mask]:
    """The viscous region with its skirts, and the loss above the level outside it."""
    # A smoothed viscous wake would spill over its border, so it does not take part in the smoothing.
    weight = (~viscous & allowed).astype(float)
    share = ndimage.gaussian_filter(weight, _SMOOTHING, mode="nearest")
    smooth = ndimage.gaussian_filter(np.where(weight > 0, loss, 0.0), _SMOOTHING, mode="nearest")
    weak = (weight > 0) & (smooth > 0.5 * level * share)
    labels, count = ndimage.label(weak, structure=np.ones((3, 3)))
    keep = np.zeros(count + 1, dtype=bool)
    keep[np.unique(labels[(weight > 0) & (smooth > level * share)])] = True
    keep[0] = False
    region: Mask = keep[labels]
    halves = [(last - first + 1) / 2 for _, first, last in _runs(viscous)]
    thickness = max(3, round(_SKIRT * float(np.median(halves)))) if halves else 1
    layer: Mask = ndimage.binary_opening(region, np.ones((thickness, 1)))
    return viscous | (region & ~layer), layer


def _continued(
    loss: Array, viscous: Mask, wave: Mask, *, level: float, quantity: str, degree: int
) -> Iterator[tuple[Array, float]]:
    """Base loss under the viscous region for each join, Pa, and the standard uncertainty of its sum over the cells."""
    bases = {join: np.zeros(loss.shape) for join in JOINS}
    variance, unseen = 0.0, 0
    for column, first, last in _runs(viscous):
        inside = np.arange(first, last + 1)
        line = loss[:, column]
        length = max(_FEWEST, round(_FIT_LENGTH * inside.size / 2))
        sides = []
        for step, edge in ((-1, first), (1, last)):
            rows = edge + step * np.arange(1, length + 1)
            rows = rows[(rows >= 0) & (rows < line.size)]
            # Only what hangs together with the region's edge: beyond the top of the shock nothing is continued.
            rows = rows[np.cumprod(wave[rows, column]).astype(bool)]
            sides.append(_extrapolated(line, rows, inside, quantity, degree))
        if not any(base.any() for base, _ in sides):
            unseen += inside.size
            continue
        (below, below_u), (above, above_u) = sides
        middle = int(np.argmax(line[first : last + 1]))
        # Beyond the dividing streamline a loss that diffused across it is no stronger than on it.
        ramp = (inside - first + 0.5) / inside.size
        weights = {"step": np.where(inside == first + middle, 0.5, inside > first + middle), "ramp": ramp}
        for join, weight in weights.items():
            base = weight * above[np.maximum(np.arange(inside.size), middle)]
            base = base + (1 - weight) * below[np.minimum(np.arange(inside.size), middle)]
            bases[join][inside, column] = np.clip(base, 0.0, np.maximum(line[inside], 0.0))
        variance += (below_u**2 + above_u**2) * (inside.size / 2) ** 2
    # Under a wake beside which no shock was seen one below the level may lie: anything between nothing and the level.
    hidden = level * unseen / np.sqrt(12)
    for base in bases.values():
        yield base, float(np.hypot(np.sqrt(variance), hidden))


def _extrapolated(line: Array, rows: Rows, inside: Rows, quantity: str, degree: int) -> tuple[Array, float]:
    """Base from one side, Pa, continued into the region, and its mean's standard uncertainty; zero without a shock."""
    if rows.size < _FEWEST:
        return np.zeros(inside.size), 0.0
    origin, scale = rows[0], rows.size
    design = np.vander((rows - origin) / scale, degree + 1)
    values = np.cbrt(line[rows]) if quantity == "strength" else line[rows]
    fit, *_ = np.linalg.lstsq(design, values, rcond=None)
    at = np.vander((inside - origin) / scale, degree + 1)
    base = at @ fit
    left = rows.size - degree - 1
    sigma = float(np.sqrt(np.sum((values - design @ fit) ** 2) / left)) if left > 0 else 0.0
    # Mean over the half of the region next to this side: that is as far as the base is used.
    half = np.argsort(np.abs(inside - origin))[: max(1, inside.size // 2)]
    near = at[half].mean(axis=0)
    spread = sigma * float(np.sqrt(near @ np.linalg.pinv(design.T @ design) @ near))
    if quantity == "strength":
        spread *= 3 * float(np.mean(base[half])) ** 2
        base = np.maximum(base, 0.0) ** 3
    return base, spread
