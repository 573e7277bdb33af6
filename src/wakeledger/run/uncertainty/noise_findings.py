"""Which noise of the crossflow is reckoned with, and what the data say about what the survey file declares of it.

Declared noise is used where there is any; what the data show stands in where there is none, and is called so. Where the
two disagree, in size or in that neighbouring points share what the file gives to each point alone, a note says so: one
of the two is wrong, and nothing is changed on the data's word alone.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from wakeledger.confidence.local_noise import local_noise
from wakeledger.confidence.noise import estimate_noise
from wakeledger.confidence.sampling import SourceErrors
from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.core.grid import Array
from wakeledger.intake.gridding import Gridding
from wakeledger.intake.gridding.mirror import ON_PLANE
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.reduction import Reduction
from wakeledger.run.uncertainty.noise import Noise, declared_noise, white_noise

#: Factor between shown and declared noise from which on it is told.
FACTOR = 1.5
#: Standard errors of what is shown that are allowed for beside it.
_ERRORS = 3.0
#: Channels of the flow state that are looked at, their names in sentences and their units.
_CHANNELS = {"v": ("v", "m/s"), "w": ("w", "m/s"), "total_pressure": ("total pressure", "Pa")}
#: Draws of each source for the size of what is declared.
_DRAWS = 8
#: Draws of noise fields where the points do not stand on lines.
_FIELDS = 16
#: Points that the neighbours of a scattered point speak for: its noise estimates overlap.
_SHARED = 8


@dataclass(frozen=True)
class Shown:
    """Noise of one channel as the data outside the wake show it.

    Attributes
    ----------
    deviation : float
        Standard deviation of one point, in the channel's unit; NaN where it cannot be had.
    lengths : (float, float)
        Length along z and y over which neighbours share it, m; NaN where they do not, or where that is not told.
    size : float
        Number of independent values that would fix the deviation equally well.
    """

    deviation: float
    lengths: tuple[float, float]
    size: float

    @property
    def length(self) -> float:
        """The larger of the two lengths, m; NaN where neighbours share nothing."""
        known = [length for length in self.lengths if math.isfinite(length)]
        return max(known, default=math.nan)


@dataclass(frozen=True)
class _Declared:
    """Declared noise of one channel: of each point alone, and whether any is shared by neighbours."""

    white: float
    shared: bool


def crossflow_noises(
    chain: Chain,
    nominal: Reduction,
    sources: Sequence[Source],
    layouts: Mapping[str, InputLayout],
    *,
    seed: int,
) -> tuple[tuple[Noise, ...], list[str]]:
    """Noise of the crossflow that is reckoned with, and notes on what the data say about it.

    Parameters
    ----------
    chain : Chain
        The survey.
    nominal : Reduction
        Its reduction, no bias subtracted.
    sources, layouts
        What the survey file declares.
    seed : int
        The survey's seed.

    Returns
    -------
    noises : tuple of Noise
        As declared, else as the data show it; empty where neither tells.
    notes : list of str
    """
    if not chain.settings.crossflow:
        return (), []
    noises = declared_noise(chain, nominal, sources, layouts, seed=seed)
    shown = shown_noise(chain, nominal)
    v, w = (shown[name].deviation for name in "vw")
    if not math.isfinite(v + w):
        if noises:
            return noises, ["The noise of the crossflow cannot be estimated: too little outer flow is left."]
        return (), ["The noise of the crossflow is unknown, so its bias was not subtracted from the induced drag."]
    notes = disagreements(shown, _declared(chain, nominal, sources, layouts, seed=seed), crossflow=bool(noises))
    if noises:
        return noises, notes
    found = f"v {v:.3g} m/s, w {w:.3g} m/s"
    said = f"No noise of the crossflow was declared; its bias was subtracted with what the data show ({found})."
    return (_from_data(chain, v, w, seed=seed),), [said, *notes]


def shown_noise(chain: Chain, nominal: Reduction) -> dict[str, Shown]:
    """Noise of v, w and total pressure in the flow outside the wake.

    Parameters
    ----------
    chain : Chain
        The survey.
    nominal : Reduction
        Its reduction.

    Returns
    -------
    dict of str to Shown
        From differences along rows and columns where the points stand evenly, with the length over which neighbours
        share it; else from each point's nearest neighbours, which do not tell a length.
    """
    grid, mask = nominal.flow.grid, nominal.region.mask
    if chain.gridding.kind == "uniform":
        skip = mask | chain.gridding.filled | _twins(chain.gridding)
        found = {}
        for name in _CHANNELS:
            estimate = estimate_noise(getattr(nominal.flow, name), mask=skip)
            along_z, along_y = estimate.correlation_length_cells
            found[name] = Shown(
                estimate.standard_deviation, (along_z * grid.dz, along_y * grid.dy), estimate.effective_size
            )
        return found
    state = chain.state(nominal.reference)
    usable = np.isfinite(state.u) & ~_inside(chain, nominal)
    places = np.stack([chain.points.y, chain.points.z], axis=1) / np.asarray(chain.gridding.raw_spacing)
    _, first = np.unique(np.round(places, 3), axis=0, return_index=True)
    alone = np.zeros(usable.size, dtype=bool)
    alone[first] = True
    chosen = usable & alone
    values = []
    for name in _CHANNELS:
        channel = getattr(state, name)
        values.append(np.zeros(usable.size) if channel is None else np.broadcast_to(channel, usable.shape))
    deviations = local_noise(places[chosen], np.stack(values)[:, chosen])
    size = float(chosen.sum()) / _SHARED
    return {
        name: Shown(float(one), (math.nan, math.nan), size) for name, one in zip(_CHANNELS, deviations, strict=True)
    }


def _twins(gridding: Gridding) -> Mask:
    """Places on or beyond a reflection plane, whose values are those of the measured half and no news."""
    grid, mirror = gridding.grid, gridding.mirror
    if mirror is None:
        return np.zeros(grid.shape, dtype=bool)
    if mirror.axis == "y":
        return np.broadcast_to(grid.y <= ON_PLANE * grid.dy, grid.shape)
    return np.broadcast_to(grid.z[:, None] <= ON_PLANE * grid.dz, grid.shape)


def disagreements(shown: Mapping[str, Shown], declared: Mapping[str, _Declared], *, crossflow: bool) -> list[str]:
    """Sentences about declared noise that is not what the data show.

    Parameters
    ----------
    shown : mapping of str to Shown
        By channel.
    declared : mapping of str to _Declared
        The same.
    crossflow : bool
        Whether noise of the crossflow was declared at all.

    Returns
    -------
    list of str
    """
    wrong, together = [], []
    for name, (words, unit) in _CHANNELS.items():
        found, said = shown[name], declared[name]
        if not math.isfinite(found.deviation) or (name in "vw" and not crossflow):
            continue
        if said.white > 0 and _far(found, said.white):
            wrong.append(f"{words} {found.deviation:.3g} {unit}, declared {said.white:.3g} {unit}")
        if said.white > 0 and not said.shared and math.isfinite(found.length):
            together.append(f"{words} over about {1e3 * found.length:.2g} mm")
    notes = []
    if wrong:
        notes.append(
            f"The point-to-point noise shown by the data is not the declared one ({'; '.join(wrong)}); check the"
            " sources."
        )
    if together:
        notes.append(
            f"Neighbouring points share their noise ({'; '.join(together)}), which the survey file declares for each"
            ' point alone: give the source a correlation_length, or effect = "per_row".'
        )
    return notes


def _far(found: Shown, said: float) -> bool:
    """Whether shown noise is off the declared by the factor that is told, beyond its own standard error."""
    allowed = math.log(FACTOR) + _ERRORS / math.sqrt(2 * max(found.size, 1.0))
    # What is shown may be nothing at all, of exact data.
    return abs(math.log(max(found.deviation, 1e-12 * said) / said)) > allowed


def _declared(
    chain: Chain, nominal: Reduction, sources: Sequence[Source], layouts: Mapping[str, InputLayout], *, seed: int
) -> dict[str, _Declared]:
    """What the sources put on each channel of the flow state, root mean square over the points outside the wake."""
    still = chain.state(nominal.reference)
    outside = ~_inside(chain, nominal)
    white, shared = dict.fromkeys(_CHANNELS, 0.0), dict.fromkeys(_CHANNELS, False)
    for source in sources:
        if source.effect == "systematic":
            continue
        drawn = SourceErrors(source, layouts, seed=seed).draw(0, _DRAWS)
        states = [chain.state(nominal.reference, {name: one[k] for name, one in drawn.items()}) for k in range(_DRAWS)]
        alone = source.effect == "random" and source.correlation_length is None
        for name in _CHANNELS:
            if getattr(still, name) is None:
                continue
            errors = np.stack([getattr(state, name) - getattr(still, name) for state in states])[:, outside]
            square = float(np.mean(np.square(errors[np.isfinite(errors)]))) if np.isfinite(errors).any() else 0.0
            if alone:
                white[name] += square
            elif square > 0:
                shared[name] = True
    return {name: _Declared(math.sqrt(white[name]), shared[name]) for name in _CHANNELS}


def _inside(chain: Chain, nominal: Reduction) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
    """Whether each point lies in the wake region, by the nearest place of the grid."""
    grid = nominal.flow.grid
    iz = np.clip(np.rint((chain.points.z - grid.z0) / grid.dz).astype(int), 0, grid.nz - 1)
    iy = np.clip(np.rint((chain.points.y - grid.y0) / grid.dy).astype(int), 0, grid.ny - 1)
    inside: np.ndarray[tuple[int], np.dtype[np.bool_]] = nominal.region.mask[iz, iy]
    return inside


def _from_data(chain: Chain, v: float, w: float, *, seed: int) -> Noise:
    """Independent noise of the sizes that the data show, drawn where no closed form serves."""
    plain = white_noise("noise in the data", v, w)
    gridding = chain.gridding
    if gridding.operators() is not None and gridding.mirror is None:
        return plain
    rng = np.random.default_rng([seed, 31])
    fields: list[Array] = [
        gridding.apply(size * rng.standard_normal((_FIELDS, chain.points.n)), odd=gridding.is_odd(name))
        for name, size in (("v", v), ("w", w))
    ]
    return Noise(plain.name, plain.variance, plain.outer_variance, plain.correlation, np.stack(fields))
