"""The edge of the wake region as a numerical term: what lies beyond it, as far as that can be known.

A wider region takes in more noise than wake. What its ring holds counts only where it stands clear of the ring's own
noise; elsewhere the tails of the wake's fields, told from within the region, say how much there can be. A weak
loss, whose contours are those of noise, tells no tail: there it is what the outer flow shows, and how well.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
from scipy import ndimage
from scipy.special import stdtrit

from wakeledger.confidence.noise import estimate_noise
from wakeledger.confidence.terms import NumericalTerm
from wakeledger.core.grid import Array
from wakeledger.physics.fields.differences import axial_vorticity
from wakeledger.physics.fields.outer_flow import LEAST_SHARE
from wakeledger.physics.fields.wake_region import GROW_CELLS, Mask, region_of, smoothed, wake_region
from wakeledger.physics.fields.wake_tail import hidden_tail, shape_share, untold, wake_tails
from wakeledger.physics.methods.vorticity_area import vorticity_forces
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.coefficients import coefficients, tunnel_figures
from wakeledger.run.chain.outputs import OUTPUTS
from wakeledger.run.chain.places import default_grow
from wakeledger.run.chain.reduction import Reduction, Variation
from wakeledger.run.uncertainty.changes import changes

MASK = "edge of the wake region"
#: Widths of the rings about the region that are looked at, in spacings of the points.
RINGS = (2.0, 8.0)
#: Chance with which noise alone makes a ring count.
CHANCE = 0.0003
#: Factor on both: a tail need not be Gaussian, a ring's content is off by its noise, and more may lie beyond it.
BEYOND = 2.0
#: Doubt of a tail, as a share of it (k = 1), before the outer flow is asked.
DOUBT = 1.0
#: Draws of noise that the data show, where none is declared.
_DRAWS = 16

Noise = Sequence[Mapping[str, Array]]


def mask_term(chain: Chain, nominal: Reduction, noise: Noise, *, zero_uncertainty: float = 0.0) -> NumericalTerm:
    """What lies beyond the edge of the wake region.

    Parameters
    ----------
    chain : Chain
        The survey, with what was frozen on the nominal plane.
    nominal : Reduction
        Its reduction.
    noise : sequence of mapping
        A few draws of the random errors alone; empty where none is declared.
    zero_uncertainty : float
        Standard uncertainty of the zero of the total pressure from what it wanders, Pa, which has a term of its own.

    Returns
    -------
    NumericalTerm
        Rectangular. Half its width is, for each output, twice the larger of what the tails hold outside the region
        (`wakeledger.physics.fields.wake_tail`) and what a ring holds, c: √(c² − s²) where c stands clear of the ring's
        own noise s, else nothing. As far as the peak of the loss is near its level, the level over the region's
        surroundings stands for the tail. How much of a tail there is: 1 ± 1, and what a fit to the outer flow says,
        weighted by their uncertainties, as rms; more where it is high at the region's edge. Outputs move with the sign
        in which the wake goes on. Without any measured pressure what the pressure that turns the crossflow does in the
        rings is added: far out it is not the flow's.
    """
    rings = _rings(chain, nominal)
    tails, ring = _tails(chain, nominal), _clear_of_noise(chain, nominal, noise, rings, zero_uncertainty)
    # A value that a wider region loses makes the term unknown, whatever the tails say.
    half = np.where((np.abs(ring) > np.abs(tails)) | np.isnan(ring), ring, tails)
    if chain.settings.primary == "velocity" and not {"total_pressure", "static_pressure"} & chain.measured:
        half = np.copysign(np.abs(half) + np.abs(_turning(chain, nominal, rings)), half)
    return NumericalTerm(MASK, BEYOND * half / math.sqrt(3), "rectangular")


def _turning(chain: Chain, nominal: Reduction, rings: Sequence[Mask]) -> Array:
    """What the pressure that turns the crossflow is worth in the widest ring; the noise of the speed drops out."""
    if not rings or not chain.settings.turning_pressure:
        return np.zeros(len(OUTPUTS))
    without = replace(chain, settings=replace(chain.settings, turning_pressure=False))
    by_mask = [
        changes(
            *(one.reduce(vary=Variation(mask=mask), estimates=False).vector for one in (without, chain)),
            estimates=False,
        )
        for mask in (rings[-1], nominal.region.mask)
    ]
    found: Array = by_mask[0] - by_mask[1]
    return found


def _tails(chain: Chain, nominal: Reduction) -> Array:
    """Change of the outputs by the tails of loss and vorticity outside the region."""
    settings, flow, grid = chain.settings, nominal.flow, nominal.flow.grid
    loss = nominal.reference.total_pressure - flow.total_pressure
    vorticity = axial_vorticity(flow.v, flow.w, grid)
    grow = default_grow(chain.gridding) if settings.grow is None else settings.grow
    exclude = region_of(settings.exclude, grid) if settings.exclude else None
    found = wake_region(loss, vorticity, grid, level=settings.level, grow=grow, exclude=exclude)
    smooth_loss, smooth_vorticity = smoothed(loss, vorticity, grid)
    mask = nominal.region.mask if exclude is None else nominal.region.mask | exclude
    lost, turned = wake_tails(
        smooth_loss - found.loss_zero,
        smooth_vorticity,
        grid,
        levels=(found.loss_level, found.vorticity_level),
        mask=mask,
    )
    outer = ~mask
    # Where the tail is high at the region's edge, the zero and the level hold much of it too.
    high = [
        1.0 + (float(np.abs(tail).max()) / level if level > 0 else 0.0)
        for tail, level in ((lost, found.loss_level), (turned, found.vorticity_level))
    ]
    hides = untold(smooth_loss - found.loss_zero, found.loss_level)
    if hides > 0:
        width = 0.5 * max(grow, default_grow(chain.gridding))
        hidden = hidden_tail(found.loss_level, grid, mask=mask, width=width)
        lost, high[0] = (1 - hides) * lost + hides * hidden, 1.0 + (1 - hides) * (high[0] - 1.0)
    lost = lost * high[0] * _likely_share(loss, lost, outer)
    turned = turned * high[1] * _likely_share(vorticity, turned, outer)
    energised = chain.frozen.energised
    if energised is not None:
        # The energy of a slipstream is no profile drag, nor is its tail.
        lost = np.where(lost > 0, np.where(energised, 0.0, lost), 0.0)
    changed = _changed(chain, nominal, _with_zero(lost, nominal.region.mask), turned)
    if not lost.any():
        return changed
    # Gains and losses cancel here, but perhaps not there.
    whole = _changed(chain, nominal, _with_zero(np.abs(lost), nominal.region.mask), np.zeros(lost.shape))
    sign = -1.0 if lost.sum() < 0 else 1.0
    for name in ("profile_drag", "profile_drag coefficient", "profile_drag corrected coefficient"):
        changed[OUTPUTS.index(name)] = sign * whole[OUTPUTS.index(name)]
    return changed


def _likely_share(field: Array, tail: Array, outer: Mask) -> float:
    """How much of a tail there may be, as rms: one and its doubt, drawn to what the outer flow shows by its noise."""
    alone = math.hypot(1.0, DOUBT)
    if np.count_nonzero(outer) < 3 or not np.ptp(tail[outer]) > 0:
        return alone
    share, u = shape_share(field[outer], tail[outer])
    if not u > 0:
        return max(abs(share), alone)
    weight = DOUBT**2 / (DOUBT**2 + u**2)
    return math.hypot(1.0 + weight * (share - 1.0), math.sqrt(weight) * u)


def _with_zero(lost: Array, mask: Mask) -> Array:
    """A tail outside the region, and what it does inside, where the zero of the loss has its mean taken out."""
    added: Array = np.where(mask, lost[~mask].mean() if not mask.all() else 0.0, lost)
    return added


def _changed(chain: Chain, nominal: Reduction, loss: Array, vorticity: Array) -> Array:
    """Change of the outputs by a loss, Pa, and a vorticity, s⁻¹, added to the plane; of first order in the loss."""
    settings, grid, reference = chain.settings, nominal.flow.grid, nominal.reference
    with_it = vorticity_forces(
        nominal.vorticity + vorticity,
        grid,
        reference,
        moment_centre=settings.moment_centre,
        boundary=settings.boundary.whole,
        reflection=settings.reflection,
    )
    values = dict(nominal.values)
    profile = settings.counted * float(grid.integrate(loss))
    induced, free = (
        float(getattr(with_it, name) - getattr(nominal.forces, name)) for name in ("induced_drag", "free_air_drag")
    )
    values["profile_drag"] += profile
    values["total_drag"] += profile + induced
    values["induced_drag"] += induced
    values["induced_drag_free_air"] += free
    for name in ("lift", "side_force", "rolling_moment", "root_bending_moment"):
        values[name] += float(getattr(with_it, name) - getattr(nominal.forces, name))
    free_air = float(with_it.free_air_drag) - chain.frozen.bias.get("induced_drag_free_air", 0.0)
    values |= coefficients(values, free_air, settings, reference, nominal.wake_blockage, {})
    values |= tunnel_figures(
        values, nominal.vorticity + vorticity, grid, settings, reference, nominal.wake_blockage, {}
    )
    return changes(np.array([values[name] for name in OUTPUTS]), nominal.vector)


def _clear_of_noise(
    chain: Chain, nominal: Reduction, noise: Noise, rings: Sequence[Mask], zero_uncertainty: float
) -> Array:
    """What a ring about the region holds beyond its own noise, zero where it cannot be told from that."""
    if not rings:
        # The region fills the window; what lies beyond is the term of the window's edge, and the tails'.
        return np.zeros(len(OUTPUTS))

    def change(errors: Mapping[str, Array]) -> Array:
        same, *wider = (
            chain.reduce(errors, vary=Variation(mask=mask), estimates=False).vector
            for mask in (nominal.region.mask, *rings)
        )
        return changes(np.stack(wider), same, estimates=False)

    found = change({})
    if noise:
        square, count = np.mean([np.square(change(errors) - found) for errors in noise], axis=0), len(noise)
    else:
        square, count = _shown_noise(chain, nominal, rings), _DRAWS
    square = square + _wander(chain, nominal, rings, zero_uncertainty)
    # The noise is known from a few draws only.
    limit = float(stdtrit(count, 1 - CHANCE / 2))
    clear = np.where(found**2 <= limit**2 * square, 0.0, np.sqrt(np.maximum(found**2 - square, 0.0)))
    largest = clear.argmax(axis=0)
    at = np.arange(len(OUTPUTS))
    result: Array = np.sign(found[largest, at]) * clear[largest, at]
    return result


def _wander(chain: Chain, nominal: Reduction, rings: Sequence[Mask], zero_uncertainty: float) -> Array:
    """Mean square of what a wandering total pressure does in each ring: its zero moves, and so does the ring's mean."""
    # Where the wander is unknown, so is all that hangs on the zero, by the zero's own term.
    size = zero_uncertainty if math.isfinite(zero_uncertainty) else 0.0
    own = np.square(
        _changed(chain, nominal, np.where(nominal.region.mask, size, 0.0), np.zeros(nominal.flow.grid.shape))
    )
    inside = max(int(np.count_nonzero(nominal.region.mask)), 1)
    share = [1.0 + (int(np.count_nonzero(ring)) / inside) ** 2 for ring in rings]
    found: Array = np.multiply.outer(np.array(share), own)
    return found


def _rings(chain: Chain, nominal: Reduction) -> list[Mask]:
    """Wider regions, as far as they leave twice as much of the window as the zero of the total pressure needs."""
    grid, mask = nominal.flow.grid, nominal.region.mask
    distance = ndimage.distance_transform_edt(~mask, sampling=(grid.dz, grid.dy))
    excluded = region_of(chain.settings.exclude, grid) if chain.settings.exclude else np.zeros(grid.shape, dtype=bool)
    spacing = default_grow(chain.gridding) / GROW_CELLS
    found = []
    for width in RINGS[:1] if chain.settings.computed else RINGS:
        wider = (distance <= width * spacing) & ~excluded
        if np.mean(~wider) >= 2 * LEAST_SHARE and (wider & ~mask).any():
            found.append(wider)
    return found


def _shown_noise(chain: Chain, nominal: Reduction, rings: Sequence[Mask]) -> Array:
    """Mean square of what noise as the plane shows it outside the wake does in each ring; none in a computed flow."""
    square = np.zeros((len(rings), len(OUTPUTS)))
    if chain.settings.computed:
        return square
    flow, grid, mask = nominal.flow, nominal.flow.grid, nominal.region.mask
    # Noise that cannot be told takes nothing off.
    v, w, total = (
        np.nan_to_num(estimate_noise(field, mask=mask).standard_deviation)
        for field in (flow.v, flow.w, flow.total_pressure)
    )
    rng = np.random.default_rng(0)
    for _ in range(_DRAWS):
        noisy = rng.standard_normal((3, *grid.shape))
        loss, vorticity = total * noisy[2], axial_vorticity(v * noisy[0], w * noisy[1], grid)
        counted = [np.where(one, loss - loss[~one].mean(), 0.0) for one in (mask, *rings)]
        for k, ring in enumerate(rings):
            added = np.where(ring & ~mask, vorticity, 0.0)
            square[k] += np.square(_changed(chain, nominal, counted[k + 1] - counted[0], added)) / _DRAWS
    return square
