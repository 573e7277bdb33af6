"""Declared noise of a line traverse beside what its points show of it, as of a plane."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from wakeledger.confidence.noise import line_noise
from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.core.grid import Array
from wakeledger.run.section.chain import SectionChain, SectionReduction
from wakeledger.run.uncertainty.channel_noise import OUTSIDE, WAKE, NoiseFindings, Shown, sums_factor
from wakeledger.run.uncertainty.noise_comparison import ON_ALL, Recording, compare_noise
from wakeledger.run.uncertainty.noise_findings import part_of, visits_of


def section_findings(
    chain: SectionChain,
    nominal: SectionReduction,
    usable: NDArray[np.bool_],
    sources: Sequence[Source],
    layouts: Mapping[str, InputLayout],
    *,
    seed: int,
) -> NoiseFindings:
    """Hold the declared noise of a traverse's channels against what the data show.

    Parameters
    ----------
    chain : SectionChain
        The survey.
    nominal : SectionReduction
        Its reduction.
    usable : ndarray of bool, shape (n,)
        Points that are used.
    sources, layouts
        What the survey file declares.
    seed : int
        The survey's seed.

    Returns
    -------
    NoiseFindings
        Of the pressures and the speed that were measured and that the drag depends on; neighbours are those along the
        line, beside the wake.
    """
    line, settings, reference = chain.line, chain.settings, nominal.reference
    outer = ~nominal.inside & ~line.filled

    def values(errors: Mapping[str, Array]) -> dict[str, Array]:
        state, given, raw = chain.state(reference, errors), chain.points.channels, chain.traverse is not None
        found = {"speed": state.speed} if {"u", "speed"} & set(given) else {}
        for name in ("total_pressure", "static_pressure"):
            if raw or name in given:
                found[name] = getattr(state, name)
        return {name: channel for name, channel in found.items() if channel is not None}

    spacing = float(np.median(np.diff(line.position)))
    shown = {}
    for name, channel in values({}).items():
        estimate = line_noise(line.position, line.apply(channel), skip=~outer)
        length = estimate.correlation_length_cells[1]
        along = (length * spacing, math.nan) if settings.along == "z" else (math.nan, length * spacing)
        shown[name] = Shown(estimate.standard_deviation, along, estimate.effective_size, sums_factor((length,)))

    def seen(name: str, errors: Array) -> Array:
        return np.stack([line.apply(one) for one in errors])[:, outer]

    position = getattr(chain.points, settings.along)
    nearest = np.abs(position[:, None] - line.position[None, :]).argmin(axis=1)
    inside = nominal.inside[nearest]
    visits, clock = visits_of(chain.points, np.where(usable, nearest, -1))
    return compare_noise(
        Recording(
            values=values,
            shown=shown,
            seen=seen,
            visits={OUTSIDE: part_of(visits, ~inside), WAKE: part_of(visits, inside)},
            clock=clock,
            pressure_per_speed=reference.density * reference.speed,
            direct={
                "speed": ("plane.u", "plane.v", "plane.w", "plane.speed", *ON_ALL),
                "total_pressure": ("plane.total_pressure", *ON_ALL),
                "static_pressure": ("plane.static_pressure", *ON_ALL),
            },
        ),
        sources,
        layouts,
        seed=seed,
    )
