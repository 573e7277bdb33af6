"""Errors of single points or rows that other surveys of the same points have too: what each does to the outputs."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import accumulate, pairwise

import numpy as np
from numpy.typing import NDArray

from wakeledger.confidence.components import shifted_components
from wakeledger.confidence.linear_budget import Slopes
from wakeledger.confidence.montecarlo import Evaluate
from wakeledger.confidence.sampling import ErrorSampler, SourceErrors
from wakeledger.confidence.sources import InputLayout
from wakeledger.core.grid import Array

#: A source with more independent errors on one input than this is not followed error by error.
MOST_ERRORS = 100_000
#: The same where every error has to be shifted by itself.
MOST_SHIFTED = 400
#: Places are the same where they differ by less than this share of the points' extent.
_SAME_PLACE = 1e-6
#: Draws that are expanded at once.
_CHUNK = 16


@dataclass(frozen=True, eq=False)
class PointErrors:
    """Independent errors of one source at the points or rows of one input, and what each does to every output.

    Attributes
    ----------
    source : str
        Name of the source.
    input : str
        Input it acts on.
    shared_id : str
        Identity under which other surveys of the same points have the very same errors.
    effect : {"random", "per_row"}
        Whether each point has its own error, or each traverse row.
    effects : ndarray, shape (..., k)
        Change of the outputs at one standard deviation of each of the k errors, **with its sign**, first order.
    places : ndarray, shape (n, 2)
        Where the n points lie, m.
    row : ndarray of int, shape (n,)
        Traverse row of each; empty where rows are not known.
    correlation_length : float or None
        Length over which neighbours have their errors in common, m.
    distribution : str
        Distribution of each error.
    degrees_of_freedom : float
        How well their common standard uncertainty is known; infinite where each has one of its own.
    """

    source: str
    input: str
    shared_id: str
    effect: str
    effects: Array
    places: Array
    row: NDArray[np.int64]
    correlation_length: float | None
    distribution: str
    degrees_of_freedom: float

    @property
    def key(self) -> tuple[str, str]:
        """What tells the same errors in another survey, if its points are the same."""
        return self.shared_id, self.input

    @property
    def variance(self) -> Array:
        """Variance of each output."""
        variance: Array = np.square(self.effects).sum(axis=-1)
        return variance

    @property
    def covariance(self) -> Array:
        """Covariance of the outputs along the last axis before the errors, shape (..., m, m)."""
        covariance: Array = self.effects @ np.swapaxes(self.effects, -1, -2)
        return covariance

    def times(self, factor: Array | float) -> PointErrors:
        """The same errors with their effect on each output multiplied.

        Parameters
        ----------
        factor : ndarray or float
            Fits the outputs' shape.

        Returns
        -------
        PointErrors
        """
        return replace(self, effects=self.effects * np.asarray(factor)[..., None])

    def unlike(self, other: PointErrors) -> str | None:
        """Why the errors of another survey are not these, None where they are.

        Parameters
        ----------
        other : PointErrors
            With the same `key`.

        Returns
        -------
        str or None
            Half a sentence.
        """
        declared = [(one.effect, one.correlation_length, one.distribution) for one in (self, other)]
        if declared[0] != declared[1]:
            return "effect, correlation length or distribution differ"
        counts = len(self.places), len(other.places)
        if counts[0] != counts[1]:
            return f"one has {counts[0]} points, the other {counts[1]}"
        apart = float(np.abs(self.places - other.places).max(initial=0.0))
        extent = float(np.ptp(self.places, axis=0).max(initial=0.0)) if counts[0] else 0.0
        if apart > _SAME_PLACE * extent:
            return f"the points lie up to {1e3 * apart:.3g} mm apart, or come in another order"
        if self.effect == "per_row" and not np.array_equal(self.row, other.row):
            return "the points are in other rows"
        if self.effects.shape[-1] != other.effects.shape[-1]:
            return "the points are not expanded alike"
        return None


def point_errors(errors: SourceErrors, slopes: Slopes, layouts: Mapping[str, InputLayout]) -> tuple[PointErrors, ...]:
    """Errors of one source at points or rows, from derivatives.

    Parameters
    ----------
    errors : SourceErrors
        Of a source.
    slopes : Slopes
        Derivatives of m outputs; nothing is followed of an output whose derivatives are unknown.
    layouts : mapping of str to InputLayout
        The inputs by name.

    Returns
    -------
    tuple of PointErrors
        One for each input that is an array with known places, over the m outputs; none of a source without a shared
        identity, or with one error for the whole survey.
    """
    names = _kept(errors, layouts)
    if not names or not all(name in slopes.figures for name in errors.source.applies_to):
        return ()
    found = []
    for name, weights in errors.effects({name: slopes.figures[name] for name in errors.source.applies_to}).items():
        effects = np.nan_to_num(slopes.outputs @ weights) if name in names else np.zeros((1, 0))
        if np.any(effects):
            found.append(_record(errors, name, effects, layouts[name]))
    return tuple(found)


def shifted_point_errors(
    evaluate: Evaluate,
    sampler: ErrorSampler,
    errors: SourceErrors,
    outputs: int,
    *,
    batch: int,
    workers: int,
) -> tuple[PointErrors, ...]:
    """The same by two-sided shifts of every error, where there are no derivatives.

    Parameters
    ----------
    evaluate, sampler, outputs, batch, workers
        As in `wakeledger.confidence.components.shifted_components`.
    errors : SourceErrors
        Of one of the sampler's sources.

    Returns
    -------
    tuple of PointErrors
        None of a source with more than `MOST_SHIFTED` errors.
    """
    names = _kept(errors, sampler.layouts)
    if not names or errors.latents > MOST_SHIFTED:
        return ()
    single = shifted_components(evaluate, sampler, [errors], outputs, batch=batch, workers=workers)
    found = []
    for name in names:
        effects = np.nan_to_num(np.stack([one.linear for one in single if one.input == name], axis=-1))
        if np.any(effects):
            found.append(_record(errors, name, effects, sampler.layouts[name]))
    return tuple(found)


def _kept(errors: SourceErrors, layouts: Mapping[str, InputLayout]) -> tuple[str, ...]:
    """Inputs of which the errors at points or rows may be followed to other surveys."""
    if errors.source.shared_id is None or errors.followed:
        return ()
    return tuple(
        name
        for name, count in errors.counts.items()
        if count <= MOST_ERRORS and not layouts[name].is_scalar and layouts[name].positions is not None
    )


def _record(errors: SourceErrors, name: str, effects: Array, layout: InputLayout) -> PointErrors:
    source = errors.source
    return PointErrors(
        source=source.name,
        input=name,
        shared_id=str(source.shared_id),
        effect=source.effect,
        effects=effects,
        places=np.asarray(layout.positions, dtype=float),
        row=np.zeros(0, dtype=np.int64) if layout.row is None else np.asarray(layout.row, dtype=np.int64),
        correlation_length=source.correlation_length,
        distribution=source.distribution,
        degrees_of_freedom=math.inf if source.from_samples else source.degrees_of_freedom,
    )


def predicted(errors: Sequence[SourceErrors], points: Sequence[PointErrors], draws: int) -> Array:
    """What followed errors do in each draw, to first order.

    Parameters
    ----------
    errors : sequence of SourceErrors
        The sources of a run.
    points : sequence of PointErrors
        Those of their errors that are followed, over m outputs; at least one.
    draws : int
        Number of draws.

    Returns
    -------
    ndarray, shape (draws, m)
    """
    changed = np.zeros((draws, len(points[0].effects)))
    for one in errors:
        own = {each.input: each for each in points if each.source == one.source.name}
        if not own:
            continue
        for start in range(0, draws, _CHUNK):
            stop = min(start + _CHUNK, draws)
            for name, variables in _by_input(one, start, stop):
                if name in own:
                    changed[start:stop] += variables @ own[name].effects.T
    return changed


def _by_input(errors: SourceErrors, start: int, stop: int) -> Iterator[tuple[str, Array]]:
    variables = errors.variables(start, stop)
    counts = errors.counts
    for name, (first, last) in zip(counts, pairwise(accumulate(counts.values(), initial=0)), strict=True):
        yield name, variables[:, first:last]
