"""Numerical terms of a section's drag: window, spacing, gaps and the level of the outer flow, each made differently."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from wakeledger.confidence.terms import NumericalTerm
from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.intake.gridding.line import Line
from wakeledger.physics.methods.section_drag import SWEEP
from wakeledger.run.section.chain import OUTPUTS, SectionChain, SectionReduction, SectionVariation

WINDOW = "edges of the wake"
RESOLUTION = "spacing of the points"
GAPS = "filled points"
LEVEL = "level of the outer flow"

#: Order of the trapezium rule, by which a traverse with every second place is extrapolated.
ORDER = 2.0
#: Factors on how far beside the wake the outer flow is used.
REACHES = (0.5, 2.0)
#: By how many places the pattern of the gaps is moved to remove measured points instead.
_SHIFTS = (-3, -2, -1, 1, 2, 3)

Errors = Mapping[str, Array]


@dataclass(frozen=True)
class _Trials:
    """Makes the same choices differently with and without noise, to tell their own effect from the noise's."""

    chain: SectionChain
    nominal: SectionReduction
    noise: Sequence[Errors]
    noise_share: float

    def changes(self, choices: Callable[[SectionReduction, Errors], Sequence[Array]]) -> Array:
        """Change of the outputs by each choice, the mean square that noise alone causes taken off; shape (c, m)."""

        def differences(same: SectionReduction, errors: Errors) -> Array:
            return np.stack([vector - same.vector for vector in choices(same, errors)])

        found = differences(self.nominal, {})
        if not self.noise:
            return found
        held = SectionVariation(window=self.nominal.window)
        by_noise = [differences(self.chain.reduce(errors, vary=held), errors) - found for errors in self.noise]
        square = np.square(found) - self.noise_share * np.mean(np.square(by_noise), axis=0)
        cleaned: Array = np.copysign(np.sqrt(np.maximum(square, 0.0)), found)
        return cleaned


def section_terms(
    chain: SectionChain,
    nominal: SectionReduction,
    *,
    line: Callable[[NDArray[np.bool_]], Line],
    usable: NDArray[np.bool_],
    noise: Sequence[Errors] = (),
    noise_share: float = 1.0,
) -> tuple[NumericalTerm, ...]:
    """All numerical terms of one traverse.

    Parameters
    ----------
    chain : SectionChain
        The survey.
    nominal : SectionReduction
        Its nominal reduction.
    line : callable
        Makes the places of the same points with other usable ones.
    usable : ndarray of bool, shape (n,)
        Points that are used.
    noise : sequence of mapping
        A few draws of the random errors alone.
    noise_share : float
        Which share of their variance the data show; only so much can have caused what is found.

    Returns
    -------
    tuple of NumericalTerm
        Over `wakeledger.run.section.chain.OUTPUTS`; terms that do not apply are left out.
    """
    trials = _Trials(chain, nominal, noise, noise_share)
    terms = [_window_term(trials), _resolution_term(trials), _level_term(trials)]
    if chain.line.filled.any():
        terms.append(_gap_term(trials, line, usable))
    return tuple(terms)


def _widest(changes: Array) -> Array:
    """The largest change of each output, as the half width of a rectangular distribution; its standard deviation."""
    sizes = np.abs(changes)
    # One latent choice moves all outputs together: the signs are those of the choice that moves the row most.
    found: Array = np.copysign(sizes.max(axis=0), changes[sizes[:, 0].argmax()]) / np.sqrt(3.0)
    return found


def _window_term(trials: _Trials) -> NumericalTerm:
    windows = [trials.nominal.window.scaled(width, trials.nominal.coordinate) for width in SWEEP if width != 1.0]

    def choices(_: SectionReduction, errors: Errors) -> list[Array]:
        return [trials.chain.reduce(errors, vary=SectionVariation(window=window)).vector for window in windows]

    return NumericalTerm(WINDOW, _widest(trials.changes(choices)), "rectangular")


def _resolution_term(trials: _Trials) -> NumericalTerm:
    """What every second place gives: twice the spacing has four times the error."""

    def choices(same: SectionReduction, _: Errors) -> list[Array]:
        return [same.integrated(every=2, phase=phase) for phase in (0, 1)]

    changes = trials.changes(choices) / (2.0**ORDER - 1.0)
    return NumericalTerm(RESOLUTION, np.copysign(np.sqrt(np.mean(np.square(changes), axis=0)), changes[0]))


def _level_term(trials: _Trials) -> NumericalTerm:
    def choices(_: SectionReduction, errors: Errors) -> list[Array]:
        held = SectionVariation(window=trials.nominal.window)
        return [trials.chain.reduce(errors, vary=replace(held, reach=reach)).vector for reach in REACHES]

    return NumericalTerm(LEVEL, _widest(trials.changes(choices)), "rectangular")


def _gap_term(trials: _Trials, line: Callable[[NDArray[np.bool_]], Line], usable: NDArray[np.bool_]) -> NumericalTerm:
    """Remove measured points in the same pattern beside the true gaps, fill them, and see what that does."""
    chain = trials.chain
    others = []
    gaps = np.flatnonzero(chain.line.filled)
    position = getattr(chain.points, chain.settings.along)
    place = np.abs(position[:, None] - chain.line.position).argmin(axis=1)
    for shift in _SHIFTS:
        removed = np.isin(place, gaps + shift) & usable
        if not removed.any():
            continue
        try:
            moved = line(usable & ~removed)
        except DataError:
            continue
        others.append(replace(chain, line=moved))
    if not others:
        return NumericalTerm(GAPS, np.full(len(OUTPUTS), np.nan))

    def choices(_: SectionReduction, errors: Errors) -> list[Array]:
        held = SectionVariation(window=trials.nominal.window)
        return [other.reduce(errors, vary=held).vector for other in others]

    changes = trials.changes(choices)
    return NumericalTerm(GAPS, np.copysign(np.sqrt(np.mean(np.square(changes), axis=0)), changes[0]))
