"""What the errors of the whole survey do together, two by two, beyond what each does alone.

With independent errors of zero mean and unit variance the second-order term h x_i x_j has the variance h², whatever
their distributions, and is uncorrelated with every other term up to the second order. A drag that holds the square of
a velocity bends most along such pairs: there the errors of static pressure and of the stream's speed multiply.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import combinations

import numpy as np

from wakeledger.confidence.components import MEASURED, Component
from wakeledger.confidence.montecarlo import Evaluate, Progress, sample
from wakeledger.confidence.sampling import ErrorSampler, SourceErrors
from wakeledger.confidence.sources import kurtosis
from wakeledger.core.grid import Array

#: Directions of signs that tell whether pairs matter, and those that stand for very many pairs.
_PROBES, _MANY_PROBES = 4, 32
#: More pairs than this are not worked out one by one.
_MOST_PAIRS = 120
#: Share of an output's variance below which the pairs are left out, a tenth of what a second order must reach.
_MATTERS = 1e-3


@dataclass(frozen=True)
class PairOrder:
    """Second order of m outputs from all pairs of single errors.

    Attributes
    ----------
    covariance : ndarray, shape (m, m)
        Added to the covariance of the outputs: Σ h hᵀ over pairs, h the pair's second difference at unit errors.
    inflation : ndarray, shape (m,)
        Added on average to the first-order variance by slopes taken at measured values: 2 Σ h².
    along : ndarray, shape (m,)
        2 Σ h a_i a_j with the first-order effects a: the curvature along the slope; 0 where the pairs were probed.
    """

    covariance: Array
    inflation: Array
    along: Array

    @classmethod
    def none(cls, outputs: int) -> PairOrder:
        """No pairs."""
        return cls(np.zeros((outputs, outputs)), np.zeros(outputs), np.zeros(outputs))


def pair_order(
    evaluate: Evaluate,
    sampler: ErrorSampler,
    few: Sequence[SourceErrors],
    components: Sequence[Component],
    variance: Array,
    *,
    batch: int = 16,
    workers: int = 2,
    progress: Progress | None = None,
) -> PairOrder:
    """Second order from pairs of errors that were shifted one by one.

    Parameters
    ----------
    evaluate : callable
        As in `wakeledger.confidence.montecarlo.run`.
    sampler : ErrorSampler
        Errors of all sources.
    few : sequence of SourceErrors
        The sources whose errors were shifted.
    components : sequence of Component
        What `wakeledger.confidence.components.shifted_components` gave for them.
    variance : ndarray, shape (m,)
        Of each output from all sources together: where pairs cannot matter beside it, they are not worked out.
    batch, workers, progress
        As in `wakeledger.confidence.montecarlo.sample`.

    Returns
    -------
    PairOrder
        NaN for an output without a value.

    Notes
    -----
    The second difference f(i, j) − f(i) − f(j) + f(0) takes one evaluation for each pair. Beyond a few pairs, all
    errors are first moved together, s_i = ±1 at random: the mean of the outputs at s and −s, less what each error does
    alone, is Σ s_i s_j h_ij, whose mean square is Σ h². Where that is a thousandth of the variance at most, pairs are
    left out; where there are more than 120 pairs, it stands for them, known within a quarter if many of them matter,
    exactly if one does.

    Errors of one source with few degrees of freedom share the doubt about its size, which makes the variance of their
    product larger (`wakeledger.confidence.sources.kurtosis`). One error that two sources share is no pair.
    """
    own = [one for one in components if one.kind == MEASURED]
    moves = [_Move(source, latent) for source in few for latent in range(source.latents)]
    n, m = len(moves), variance.size
    nothing = PairOrder.none(m)
    live = [k for k, move in enumerate(moves) if move.counts]
    pairs = [(i, j) for i, j in combinations(live, 2) if own[i].key is None or own[i].key != own[j].key]
    if not pairs:
        return nothing
    curved = np.stack([one.curved for one in own])
    linear = np.stack([one.linear for one in own])
    alone = linear + curved

    def at(directions: Array) -> Array:
        """Outputs at multiples of the errors, less those without any."""
        multiples = np.concatenate([np.zeros((1, n)), directions])
        values = sample(evaluate, _Draw(sampler, moves, multiples), m, len(multiples), batch, workers, progress)
        changes: Array = values[1:] - values[0]
        return changes

    if len(pairs) > 2 * _PROBES:
        count = _PROBES if len(pairs) <= _MOST_PAIRS else _MANY_PROBES
        signs = np.zeros((count, n))
        signs[:, live] = np.where(np.random.default_rng([n, 6]).random((count, len(live))) < 0.5, -1.0, 1.0)
        changes = at(np.concatenate([signs, -signs]))
        together = (changes[:count] + changes[count:]) / 2 - curved[live].sum(axis=0)
        squares = np.square(together).mean(axis=0)
        if not np.any(squares > _MATTERS * variance):
            return replace(nothing, covariance=np.where(np.isnan(np.add.outer(squares, squares)), np.nan, 0.0))
        if len(pairs) > _MOST_PAIRS:
            return PairOrder(together.T @ together / count, 2 * squares, np.zeros(m))
    unit = np.eye(n)
    found = at(np.stack([unit[i] + unit[j] for i, j in pairs]))
    effects = found - np.stack([alone[i] + alone[j] for i, j in pairs])
    weights = np.array([_common_doubt(moves[i].one, moves[j].one) for i, j in pairs])
    along = 2 * (effects * np.stack([linear[i] * linear[j] for i, j in pairs])).sum(axis=0)
    return PairOrder((weights[:, None] * effects).T @ effects, 2 * np.square(effects).sum(axis=0), along)


def _common_doubt(one: SourceErrors, other: SourceErrors) -> float:
    """Variance of the product of two unit errors: 1, or more where both have the same doubtful size."""
    if one is not other or not one.doubt_is_common:
        return 1.0
    source = one.source
    fourth = kurtosis(source.distribution, source.degrees_of_freedom)
    return fourth / kurtosis(source.distribution, math.inf) if math.isfinite(fourth) else 1.0


class _Move:
    """One error of a source at one standard deviation."""

    def __init__(self, one: SourceErrors, latent: int) -> None:
        self.one = one
        self.errors = {name: array[0] for name, array in one.deviation(latent).items() if np.any(array)}

    @property
    def counts(self) -> bool:
        """Whether it is an error at all."""
        return bool(self.errors)


class _Draw:
    """Errors at given multiples of single ones, as `wakeledger.confidence.montecarlo.sample` asks for them."""

    def __init__(self, sampler: ErrorSampler, moves: Sequence[_Move], multiples: Array) -> None:
        self.sampler, self.moves, self.multiples = sampler, moves, multiples

    def __call__(self, start: int, stop: int) -> dict[str, Array]:
        errors = self.sampler.zeros(stop - start)
        part = self.multiples[start:stop]
        for move, factors in zip(self.moves, part.T, strict=True):
            if not factors.any():
                continue
            for name, deviation in move.errors.items():
                if not errors[name].flags.writeable:
                    errors[name] = np.zeros(errors[name].shape)
                errors[name] += np.multiply.outer(factors, deviation)
        return errors
