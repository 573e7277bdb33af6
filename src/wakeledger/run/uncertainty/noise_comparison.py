"""Declared noise held against what the data show: errors of every source are put on the channels of a survey."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.special import stdtrit

from wakeledger.confidence.revisits import Visits, pooled_scatter
from wakeledger.confidence.sampling import SourceErrors
from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.core.grid import Array
from wakeledger.intake.probe.readings import estimate_drift
from wakeledger.run.uncertainty.channel_noise import (
    CHANCE,
    CHANNELS,
    Again,
    ChannelNoise,
    NoiseFindings,
    Shown,
)

#: Draws of each source for the size of what is declared; more where single differences of re-visits need them.
_DRAWS, _DRAWS_OF_VISITS = 8, 32
#: Share of the re-visits' variance that an even drift must explain to be called one.
_EVEN = 0.5
#: Inputs that act on whatever is measured.
ON_ALL = ("position.", "probe.", "calibration.")
#: Kinds of `Visits`.
_KINDS = ("again", "once")


@dataclass(frozen=True, eq=False)
class Recording:
    """The measured channels of a survey, as far as their noise is concerned.

    Attributes
    ----------
    values : callable
        From errors of the inputs to the channels at the n points, by name.
    shown : mapping of str to Shown
        What neighbouring points show, by channel.
    seen : callable
        From a channel's name and its errors at the points, (k, n), to those at the places that `shown` rests on.
    visits : mapping of str to Visits
        By region.
    clock : ndarray, shape (n,)
        Time of each point, or its number in the order in which they were taken.
    pressure_per_speed : float
        ρU, Pa s/m.
    direct : mapping of str to tuple of str
        By channel, what the names of the inputs begin with whose noise is its own. What others leave in it, such as the
        pressures in the direction of the flow, is not taken for a declaration.
    idle : frozenset of str
        Channels that no row depends on.
    """

    values: Callable[[Mapping[str, Array]], Mapping[str, Array]]
    shown: Mapping[str, Shown]
    seen: Callable[[str, Array], Array]
    visits: Mapping[str, Visits]
    clock: Array
    pressure_per_speed: float
    direct: Mapping[str, tuple[str, ...]]
    idle: frozenset[str] = field(default_factory=frozenset)


def compare_noise(
    recording: Recording, sources: Sequence[Source], layouts: Mapping[str, InputLayout], *, seed: int
) -> NoiseFindings:
    """Hold the declared noise of every channel against what the data show.

    Parameters
    ----------
    recording : Recording
        The survey's channels.
    sources, layouts
        What the survey file declares.
    seed : int
        The survey's seed.

    Returns
    -------
    NoiseFindings
    """
    still = recording.values({})
    names = [name for name in CHANNELS if name in still]
    white, shared = dict.fromkeys(names, 0.0), dict.fromkeys(names, False)
    own = {
        name: tuple(
            source.name
            for source in sources
            if source.effect != "systematic"
            and any(each.startswith(recording.direct.get(name, ())) for each in source.applies_to)
        )
        for name in names
    }
    labels = {(where, kind): getattr(visits, kind) for where, visits in recording.visits.items() for kind in _KINDS}
    scatters = {
        (name, *key): pooled_scatter(np.asarray(still[name], dtype=float), label)
        for name in names
        for key, label in labels.items()
    }
    between = dict.fromkeys(((name, where) for name in names for where in recording.visits), 0.0)
    visited = any(scatters[name, where, "again"].degrees_of_freedom for name, where in between)
    count = _DRAWS_OF_VISITS if visited else _DRAWS
    for number, source in enumerate(sources):
        steady = source.effect == "systematic"
        if steady and not visited:
            continue
        under = [recording.values(errors) for errors in _one_deviation(source, layouts, count, [seed, number])]
        alone = source.effect == "random" and source.correlation_length is None
        for name in names:
            errors = np.stack([one[name] - still[name] for one in under])
            if not steady:
                seen = recording.seen(name, errors)
                known = seen[np.isfinite(seen)]
                square = float(np.mean(known**2)) if known.size else 0.0
                if alone:
                    white[name] += square
                elif square > 0:
                    shared[name] = True
            for where in recording.visits if visited else ():
                parts = [pooled_scatter(one, labels[where, "again"]).deviation for one in errors]
                between[name, where] += float(np.mean(np.nan_to_num(parts) ** 2))
    again = {
        name: tuple(
            Again(
                where,
                scatters[name, where, "again"],
                scatters[name, where, "once"],
                math.sqrt(between[name, where]),
                _even_change(np.asarray(still[name], dtype=float), recording.clock, labels[where, "again"]),
            )
            for where in recording.visits
        )
        for name in names
    }
    return NoiseFindings(
        tuple(
            ChannelNoise(
                name,
                recording.shown[name],
                math.sqrt(white[name]) if own[name] else 0.0,
                shared[name] and bool(own[name]),
                again[name],
                matters=name not in recording.idle,
                sources=own[name],
            )
            for name in names
        ),
        recording.pressure_per_speed,
    )


def _one_deviation(
    source: Source, layouts: Mapping[str, InputLayout], count: int, seed: Sequence[int]
) -> Iterator[dict[str, Array]]:
    """Errors of a source whose independent variables are all one standard deviation off, to either side at random.

    The mean square over points of a channel that the source acts on directly is then that of the source, exactly.
    """
    errors, rng = SourceErrors(source, layouts, seed=0), np.random.default_rng([*seed, 57])
    for _ in range(count):
        yield errors.expanded(rng.choice([-1.0, 1.0], errors.latents))


def _even_change(values: Array, clock: Array, place: NDArray[np.int64]) -> float:
    """Change over the survey that the visits to places show as a straight line of time; NaN where they show none."""
    found = estimate_drift(values, clock, place)
    if found is None or found.degrees_of_freedom < 1:
        return math.nan
    rate, sigma = float(found.rate), float(found.standard_uncertainty)
    clear = abs(rate) > float(stdtrit(found.degrees_of_freedom, 1 - CHANCE / 2)) * sigma
    left = found.repeatability**2 * found.degrees_of_freedom
    total = pooled_scatter(values, place)
    even = left < _EVEN * total.deviation**2 * total.degrees_of_freedom
    return rate * float(np.ptp(clock)) if clear and even else math.nan
