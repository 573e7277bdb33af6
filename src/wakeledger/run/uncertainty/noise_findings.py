"""Which noise of the crossflow is reckoned with, and what a plane's data say about what the survey file declares of it.

Declared noise is used where there is any; what the data show stands in where there is none, and is called so. Where the
two disagree the check `declared_noise` says so (`wakeledger.run.uncertainty.channel_noise`).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from wakeledger.confidence.local_noise import local_noise
from wakeledger.confidence.noise import estimate_noise
from wakeledger.confidence.revisits import Visits, sort_visits
from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.core.grid import Array
from wakeledger.core.points import Points
from wakeledger.intake.gridding import Gridding
from wakeledger.intake.gridding.duplicates import place_labels
from wakeledger.intake.gridding.mirror import ON_PLANE
from wakeledger.intake.state import absolute
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.places import mask_at
from wakeledger.run.chain.reduction import Reduction
from wakeledger.run.uncertainty.channel_noise import (
    CHANNELS,
    OUTSIDE,
    WAKE,
    ChannelNoise,
    NoiseFindings,
    Shown,
    sums_factor,
)
from wakeledger.run.uncertainty.noise import Noise, declared_noise, white_noise
from wakeledger.run.uncertainty.noise_comparison import ON_ALL, Recording, compare_noise

#: Draws of noise fields where the points do not stand on lines.
_FIELDS = 16
#: Points that the neighbours of a scattered point speak for: its noise estimates overlap.
_SHARED = 8

_NO_ERRORS: Mapping[str, Array] = MappingProxyType({})


def crossflow_noises(
    chain: Chain,
    nominal: Reduction,
    sources: Sequence[Source],
    layouts: Mapping[str, InputLayout],
    *,
    seed: int,
) -> tuple[tuple[Noise, ...], NoiseFindings, list[str]]:
    """Noise of the crossflow that is reckoned with, and what the data say about it.

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
    findings : NoiseFindings
        Shown and declared noise of every channel that was measured.
    notes : list of str
    """
    findings = plane_findings(chain, nominal, sources, layouts, seed=seed)
    notes = [] if chain.settings.computed else list(findings.notes)
    if not chain.settings.crossflow:
        return (), findings, notes
    noises = declared_noise(chain, nominal, sources, layouts, seed=seed)
    if noises and (chain.empty is not None or any(findings[name].declares for name in "vw")):
        return noises, findings, notes
    (v, by), (w, _) = (findings[name].best() for name in "vw")
    if chain.empty is not None:
        # What is taken out of the crossflow brings its own noise.
        skip = _skipped(chain, nominal)
        v, w = (estimate_noise(field, mask=skip).standard_deviation for field in (nominal.flow.v, nominal.flow.w))
        by = "the data"
    if not math.isfinite(v + w):
        unknown = "The noise of the crossflow is unknown, so its bias was not subtracted from the induced drag."
        return (), findings, [unknown, *notes]
    found = f"v {v:.3g} m/s, w {w:.3g} m/s"
    said = f"No noise of the crossflow was declared; its bias was subtracted with what {by} show ({found})."
    return (_from_data(chain, v, w, seed=seed),), findings, [said, *notes]


def plane_findings(
    chain: Chain,
    nominal: Reduction,
    sources: Sequence[Source],
    layouts: Mapping[str, InputLayout],
    *,
    seed: int,
) -> NoiseFindings:
    """Declared noise of every measured channel of a plane beside what the data show; as `crossflow_noises`."""
    return compare_noise(_recording(chain, nominal), sources, layouts, seed=seed)


def shown_noise(chain: Chain, nominal: Reduction) -> dict[str, Shown]:
    """Noise of every measured channel in the flow outside the wake, by its neighbours.

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
    return dict(_recording(chain, nominal).shown)


def file_noises(chain: Chain, nominal: Reduction) -> tuple[ChannelNoise, ...]:
    """Noise of the file's own channels, in their own units: what `shown_noise` is of the flow state.

    Parameters
    ----------
    chain : Chain
        The survey.
    nominal : Reduction
        Its reduction.

    Returns
    -------
    tuple of ChannelNoise
        Nothing is declared in them.
    """
    given = {name: channel.values for name, channel in chain.points.channels.items() if name in CHANNELS}
    recording = _recording(chain, nominal, lambda errors: given)
    return compare_noise(recording, (), {}, seed=0).channels


def measured_channels(chain: Chain, nominal: Reduction, errors: Mapping[str, Array] = _NO_ERRORS) -> dict[str, Array]:
    """The channels whose noise is looked at, at the points, as the flow state has them.

    Parameters
    ----------
    chain : Chain
        The survey.
    nominal : Reduction
        Its reduction; the reference is held.
    errors : mapping of str to ndarray
        Errors of the inputs.

    Returns
    -------
    dict of str to ndarray, shape (n,)
        The crossflow where the flow's direction was measured; pressures that were measured, of hole pressures those
        that they come to; u as measured, even where it follows from the pressures.
    """
    state, reference = chain.state(nominal.reference, errors), nominal.reference
    channels, raw = chain.points.channels, chain.traverse is not None
    found: dict[str, Array | None] = {}
    along = _along(chain)
    if not raw and chain.settings.primary == "velocity":
        found["u"] = state.u
    elif not raw and along in channels:
        values = channels[along].values + errors.get(f"plane.{along}", 0.0)
        found["u"] = absolute(values, channels[along], reference)
    if chain.settings.crossflow:
        found |= {"v": state.v, "w": state.w}
    for name in ("total_pressure", "static_pressure"):
        if raw or name in channels:
            found[name] = getattr(state, name)
    shape = (chain.points.n,)
    return {name: np.broadcast_to(values, shape) for name, values in found.items() if values is not None}


def _recording(
    chain: Chain, nominal: Reduction, channels: Callable[[Mapping[str, Array]], Mapping[str, Array]] | None = None
) -> Recording:
    """The survey as far as its noise is concerned: of the flow state, or of given channels under errors."""

    def measured(errors: Mapping[str, Array]) -> Mapping[str, Array]:
        return measured_channels(chain, nominal, errors)

    under = measured if channels is None else channels
    values = under({})
    wake = mask_at(nominal.region.mask, nominal.flow.grid, chain.points.y, chain.points.z)
    usable = np.isfinite(chain.state(nominal.reference).u)
    place = place_labels(chain.points.y, chain.points.z)
    idle = frozenset({"u"}) if chain.settings.primary != "velocity" else frozenset()
    reference = nominal.reference
    if chain.gridding.kind == "uniform":
        shown, chosen = _along_lines(chain, nominal, values), ~_skipped(chain, nominal)

        def seen(name: str, errors: Array) -> Array:
            return np.asarray(chain.gridding.apply(errors, odd=chain.gridding.is_odd(name))[..., chosen])
    else:
        alone = np.zeros(usable.size, dtype=bool)
        alone[np.unique(place, return_index=True)[1]] = True
        alone &= usable & ~wake
        shown = _by_neighbours(chain, values, alone)

        def seen(name: str, errors: Array) -> Array:
            return np.asarray(errors[:, alone])

    visits, clock = visits_of(chain.points, np.where(_one_tube(chain) & usable, place, -1))
    return Recording(
        values=under,
        shown=shown,
        seen=seen,
        visits={OUTSIDE: part_of(visits, ~wake), WAKE: part_of(visits, wake)},
        clock=clock,
        pressure_per_speed=reference.density * reference.speed,
        direct=_direct(chain),
        idle=idle,
    )


def _direct(chain: Chain) -> dict[str, tuple[str, ...]]:
    """What the names of the inputs begin with whose noise is a channel's own."""
    along = _along(chain)
    across = (*(f"plane.{name}" for name in "uvw" if name != along), "plane.pitch", "plane.yaw", "angle.", *ON_ALL)
    return {
        "u": (f"plane.{along}", "plane.speed", *ON_ALL),
        "v": across,
        "w": across,
        "total_pressure": ("plane.total_pressure", *ON_ALL),
        "static_pressure": ("plane.static_pressure", *ON_ALL),
    }


def _along(chain: Chain) -> str:
    """The file's velocity component along the stream."""
    return "uvw"[int(np.argmax(np.abs(chain.points.axes[0])))]


def visits_of(points: Points, place: NDArray[np.int64]) -> tuple[Visits, Array]:
    """Which points repeat each other, and when each was taken.

    Parameters
    ----------
    points : Points
        The points as read, in the order in which they were taken unless they have a time.
    place : ndarray of int, shape (n,)
        Place of each; −1 leaves a point out.

    Returns
    -------
    visits : Visits
        Copies of a line, alike in every channel, are no visits.
    clock : ndarray, shape (n,)
        Time, s, or the number of the point.
    """
    channel = points.channels.get("time")
    clock = np.arange(points.n, dtype=float)
    if channel is not None and np.isfinite(channel.values).all():
        clock = channel.values
    if np.unique(place[place >= 0]).size == np.count_nonzero(place >= 0):
        nowhere = np.full(points.n, -1, dtype=np.int64)
        return Visits(nowhere, nowhere), clock
    columns = [place, *(each.values for name, each in points.channels.items() if name != "time")]
    _, first = np.unique(np.column_stack(columns), axis=0, return_index=True)
    own = np.zeros(points.n, dtype=bool)
    own[first] = True
    order = np.argsort(clock, kind="stable")
    visits = sort_visits(place + 1, order)
    kept = own & (place >= 0)
    return part_of(visits, kept), clock


def part_of(visits: Visits, kept: NDArray[np.bool_]) -> Visits:
    """Those visits only whose points are kept."""
    return Visits(np.where(kept, visits.again, -1), np.where(kept, visits.once, -1))


def _one_tube(chain: Chain) -> NDArray[np.bool_]:
    """Points of the first of several tubes, whose readings at one place are not those of the others."""
    tubes = () if chain.traverse is None else chain.traverse.tubes
    taken = None if len(tubes) < 2 else tubes[0].points
    every = np.arange(chain.points.n)
    return np.asarray(every >= 0 if taken is None else np.isin(every, taken))


def _along_lines(chain: Chain, nominal: Reduction, values: Mapping[str, Array]) -> dict[str, Shown]:
    gridding, skip = chain.gridding, _skipped(chain, nominal)
    spacing = np.array([gridding.grid.dz, gridding.grid.dy])
    found = {}
    for name, channel in values.items():
        estimate = estimate_noise(gridding.apply(channel, odd=gridding.is_odd(name)), mask=skip)
        cells = estimate.correlation_length_cells
        along_z, along_y = (float(length) for length in np.array(cells) * spacing)
        found[name] = Shown(
            estimate.standard_deviation, (along_z, along_y), estimate.effective_size, sums_factor(cells)
        )
    return found


def _by_neighbours(chain: Chain, values: Mapping[str, Array], chosen: NDArray[np.bool_]) -> dict[str, Shown]:
    if not values:
        return {}
    places = np.stack([chain.points.y, chain.points.z], axis=1) / np.asarray(chain.gridding.raw_spacing)
    deviations = local_noise(places[chosen], np.stack([np.asarray(one)[chosen] for one in values.values()]))
    size, unknown = float(chosen.sum()) / _SHARED, (math.nan, math.nan)
    return {name: Shown(float(one), unknown, size) for name, one in zip(values, deviations, strict=True)}


def _skipped(chain: Chain, nominal: Reduction) -> Mask:
    """Places that do not show the noise: those of the wake, filled ones, and the mirrored half."""
    skipped: Mask = nominal.region.mask | chain.gridding.filled | _twins(chain.gridding)
    return skipped


def _twins(gridding: Gridding) -> Mask:
    """Places on or beyond a reflection plane, whose values are those of the measured half and no news."""
    grid, mirror = gridding.grid, gridding.mirror
    if mirror is None:
        return np.zeros(grid.shape, dtype=bool)
    if mirror.axis == "y":
        return np.broadcast_to(grid.y <= ON_PLANE * grid.dy, grid.shape)
    return np.broadcast_to(grid.z[:, None] <= ON_PLANE * grid.dz, grid.shape)


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
