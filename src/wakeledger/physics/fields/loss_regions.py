"""Regions of a plane by what made their loss: boundary layers, shocks, or work and heat put into the stream.

Sensors: the turbulent viscosity, which a shock does not raise; the entropy, whose narrow peak on each vertical line is
the viscous wake; the Mach number normal to a shock, where the pressure gradient is known in three dimensions; total
pressure or total enthalpy above the stream's for slipstreams.
"""

from __future__ import annotations

import numpy as np
from scipy import ndimage

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.entropy import enthalpy_excess
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.stream.reference import Reference

#: Turbulent viscosity above the outer flow's at which a wake begins, as a part of its largest value.
VISCOSITY_SHARE = 0.02
#: Half width of a viscous wake in units of the width s of exp(−z²/s²): the profile is down to 4e-4 there.
PROFILE_REACH = 2.8
#: Level on the flank of a profile at which its width is read, as a part of the peak, and the width there in units of s.
_FLANK = 0.6
_FLANK_WIDTH = float(np.sqrt(np.log(1 / _FLANK)))
#: A peak below this part of the plane's largest belongs to no viscous wake.
_LEAST_PEAK = 0.002
#: A profile wider than this part of the line it stands on is no narrow peak.
_WIDEST = 0.25
#: A profile ends at its base, where the loss no longer falls by e within this part of the width s; and at the latest
#: this many reaches from the peak.
_KNEE = 0.75
_FARTHEST = 2.5
#: Smoothing of a line on which its slope is taken, cells.
_SMOOTHING = 1.5
#: Peaks looked for on one line.
_MOST_PEAKS = 6
#: Flanks that differ by more than this factor are those of a layer with an edge, as a shock's alone, and of no wake.
_UNLIKE = 3.0


def viscous_region(
    entropy: Array,
    grid: UniformGrid,
    *,
    turbulent_viscosity: Array | None = None,
    level: float = 0.0,
    reach: float = PROFILE_REACH,
    to_base: bool = True,
) -> Mask:
    """Region of the viscous wake.

    Parameters
    ----------
    entropy : ndarray, shape (nz, ny)
        Loss by entropy (`wakeledger.physics.fields.entropy.entropy_loss`), any unit, positive for a loss.
    grid : UniformGrid
        The grid.
    turbulent_viscosity : ndarray, shape (nz, ny), optional
        Turbulent viscosity, any unit; where it is given it alone decides.
    level : float
        Loss below which nothing counts, in the entropy's unit.
    reach : float
        Least half width of the region in widths of the entropy's profile; without turbulent viscosity.
    to_base : bool
        Whether a profile with longer tails is followed down to its base, where the loss stops falling steeply.

    Returns
    -------
    ndarray of bool, shape (nz, ny)

    Notes
    -----
    The turbulent viscosity's level is `VISCOSITY_SHARE` of its largest value above its median. The entropy's profile is
    read on each line of constant y: from the peak to where it falls to 60 %, on either side, which a loss lying under
    one flank hardly moves, and from there outward to its base. A profile broader than a quarter of the line, or with
    one flank three times as long as the other, is no viscous wake.
    """
    if turbulent_viscosity is not None:
        outer = float(np.median(turbulent_viscosity))
        peak = float(turbulent_viscosity.max())
        region: Mask = ndimage.binary_fill_holes(turbulent_viscosity > outer + VISCOSITY_SHARE * (peak - outer))
        return region
    mask = np.zeros(grid.shape, dtype=bool)
    least = max(level, _LEAST_PEAK * float(entropy.max()), 0.0)
    for column in np.flatnonzero(entropy.max(axis=0) > least):
        mask[:, column] = _profiles(entropy[:, column], least, reach, level if to_base else None)
    return mask


def _profiles(line: Array, least: float, reach: float, level: float | None) -> Mask:
    """Where the narrow peaks of one line stand, shape (nz,)."""
    mask = np.zeros(line.size, dtype=bool)
    seen = np.zeros(line.size, dtype=bool)
    for _ in range(_MOST_PEAKS):
        peak = int(np.argmax(np.where(seen, -np.inf, line)))
        if seen[peak] or not line[peak] > least:
            break
        # A peak that hangs on what was seen already has no flank on that side: it is what lies over the other's.
        whole = np.where(seen, np.inf, line)
        below, above = _flank(whole[peak::-1]), _flank(whole[peak:])
        narrow = below + above < _WIDEST * line.size and max(below, above) <= _UNLIKE * max(min(below, above), 1.0)
        if narrow:
            down, up = below / _FLANK_WIDTH, above / _FLANK_WIDTH
            first, last = int(np.floor(peak - reach * down)), int(np.ceil(peak + reach * up))
            if level is not None:
                smooth = ndimage.gaussian_filter1d(line, _SMOOTHING, mode="nearest")
                first = peak - _base(smooth[peak::-1], peak - first, down, level, reach)
                last = peak + _base(smooth[peak:], last - peak, up, level, reach)
            mask[max(first, 0) : last + 1] = True
            seen |= mask
        else:
            labels, _ = ndimage.label((line > _FLANK * line[peak]) & ~seen)
            seen |= labels == labels[peak]
    return mask


def _base(line: Array, start: int, width: float, level: float, reach: float) -> int:
    """Distance in cells from a peak to the base of its profile, from a start outward."""
    at = start
    while at + 1 < min(line.size, _FARTHEST * reach * width):
        # Still the profile's own tail where the loss falls by e within a part of its width.
        if line[at] < 0.5 * level or line[at + 1] > line[at] * np.exp(-1 / (_KNEE * width)):
            break
        at += 1
    return at


def _flank(line: Array) -> float:
    """Distance in cells from a peak at the first place to 60 % of it; infinite where the line does not fall so far."""
    under = np.flatnonzero(line <= _FLANK * line[0])
    if not under.size:
        return float("inf")
    k = int(under[0])
    if np.isinf(line[:k]).any():
        return float("inf")
    return k - 1 + float((line[k - 1] - _FLANK * line[0]) / (line[k - 1] - line[k]))


def energised_region(flow: Flow, reference: Reference, *, level: float) -> Mask:
    """Region into which work or heat was put.

    Parameters
    ----------
    flow : Flow
        The plane, arrays of shape (..., nz, ny).
    reference : Reference
        The undisturbed stream.
    level : float
        Excess that counts, as a part of the dynamic pressure: of (H − H∞)/q and of ρ∞ΔH/q. Take it several times above
        the noise and the wander of the outer flow.

    Returns
    -------
    ndarray of bool, shape (..., nz, ny)
        True where total pressure or total enthalpy is above the stream's by more than the level: a slipstream's lossy
        middle, whose total pressure may be low, is in it where the temperature was measured.
    """
    q = reference.dynamic_pressure
    region: Mask = flow.total_pressure - reference.total_pressure > level * q
    if reference.compressible:
        region = region | (reference.density * enthalpy_excess(flow, reference) > level * q)
    return region


def shock_sensor(
    velocity: tuple[Array, Array, Array], pressure_gradient: tuple[Array, Array, Array], sound_speed: Array
) -> Array:
    """Mach number along the pressure gradient, V·∇p/(a|∇p|): a shock stands where it reaches 1.

    Parameters
    ----------
    velocity : three ndarrays, any shape
        u, v, w, m/s.
    pressure_gradient : three ndarrays, the same shape
        ∂p/∂x, ∂p/∂y, ∂p/∂z, Pa/m. On one plane ∂p/∂x is not known; a volume or two close planes give it.
    sound_speed : ndarray, the same shape
        m/s.

    Returns
    -------
    ndarray
        Zero where the pressure is uniform; negative in an expansion.
    """
    along = np.einsum("i...,i...->...", np.asarray(velocity), np.asarray(pressure_gradient))
    steepness = np.linalg.norm(np.asarray(pressure_gradient), axis=0)
    sensor: Array = np.divide(along, sound_speed * steepness, out=np.zeros(np.shape(along)), where=steepness > 0)
    return sensor
