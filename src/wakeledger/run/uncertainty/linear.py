"""The linear budget of a survey: derivatives of the chain, propagated in closed form and held against Monte Carlo."""

from __future__ import annotations

import math
from collections.abc import Collection, Mapping, Sequence
from dataclasses import replace

import numpy as np

from wakeledger.confidence.components import MEASURED, Component
from wakeledger.confidence.linear_budget import (
    NEGLIGIBLE,
    LinearBudget,
    SecondOrder,
    Slopes,
    linear_budget,
    probed_curvature,
)
from wakeledger.confidence.montecarlo import Evaluate
from wakeledger.confidence.pairs import PairOrder, pair_order
from wakeledger.confidence.samples import Samples
from wakeledger.confidence.sampling import ErrorSampler
from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.core.grid import Array
from wakeledger.run.chain.adjoint import input_gradients, point_gradient, scalar_gradients
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.outputs import OUTPUTS
from wakeledger.run.chain.reduction import Reduction, Variation

#: Draws of all errors, and the share of them at which the derivatives are tried on the chain.
_TRIALS, _TRIAL = 3, 0.02
#: By how much the change that they predict may miss, as a share of the standard uncertainty at that size.
_TRIAL_MISS = 0.02
#: Inputs of single numbers that are differenced by whole passes move by their standard uncertainty.
_LEAST_STEP = 1e-12


def linear_slopes(
    chain: Chain,
    nominal: Reduction,
    sources: Sequence[Source],
    layouts: Mapping[str, InputLayout],
    *,
    estimates: bool = True,
) -> Slopes:
    """Derivatives of the chain's outputs by every input that a source acts on.

    Parameters
    ----------
    chain : Chain
        The survey, with what was frozen on the nominal plane.
    nominal : Reduction
        Its reduction.
    sources : sequence of Source
        The sources; they tell how far single numbers are moved.
    layouts : mapping of str to InputLayout
        The inputs by name.
    estimates : bool
        Whether the cross-checks are among the outputs; they are unknown otherwise.

    Returns
    -------
    Slopes
    """
    gradient = point_gradient(chain, nominal, estimates=estimates)
    figures, left = input_gradients(chain, gradient, layouts)
    steps = {name: _step(name, sources, layouts[name]) for name in left}
    direct, curvatures = scalar_gradients(chain, nominal, left, steps, layouts, estimates=estimates)
    for name in left:
        if not layouts[name].is_scalar:
            # No way back leads there: what it does is unknown, not nothing.
            figures[name] = np.full((len(gradient.names), layouts[name].size), np.nan)
    return Slopes(gradient.outputs, figures, direct, curvatures)


def _step(name: str, sources: Sequence[Source], layout: InputLayout) -> float:
    sizes = [
        source.standard_uncertainty * (abs(float(np.max(layout.nominal))) if source.relative else 1.0)
        for source in sources
        if name in source.applies_to
    ]
    return max(math.sqrt(sum(size**2 for size in sizes)), _LEAST_STEP)


def tried(chain: Chain, slopes: Slopes, sources: Sequence[Source], layouts: Mapping[str, InputLayout]) -> Slopes:
    """Derivatives tried on the chain itself: an output whose change they do not predict is left unknown.

    Parameters
    ----------
    chain : Chain
        The survey.
    slopes : Slopes
        Its derivatives.
    sources, layouts
        What errs.

    Returns
    -------
    Slopes
        NaN for outputs that fail, so that no figure rests on a derivative that is not the chain's own.
    """
    sampler = ErrorSampler(sources, layouts, seed=0)
    errors = {name: _TRIAL * array for name, array in sampler.draw(0, _TRIALS).items()}
    both = {name: np.concatenate([array, -array]) for name, array in errors.items()}
    values = chain.vectors(both)
    found = (values[:_TRIALS] - values[_TRIALS:]) / 2
    expected = slopes.change(errors)
    size = _TRIAL * linear_budget(slopes, sources, layouts, names=OUTPUTS).standard_uncertainty
    rounding = 1e-9 * np.abs(values).max(axis=0)
    with np.errstate(invalid="ignore"):
        wrong = np.abs(found - expected) > _TRIAL_MISS * np.maximum(size, np.abs(expected)) + rounding
    outputs = slopes.outputs.copy()
    outputs[wrong.any(axis=0)] = np.nan
    return replace(slopes, outputs=outputs)


def survey_budget(
    chain: Chain,
    nominal: Reduction,
    slopes: Slopes,
    sources: Sequence[Source],
    layouts: Mapping[str, InputLayout],
    *,
    noisy: Collection[str],
    components: Sequence[Component] = (),
    pairs: PairOrder | None = None,
) -> LinearBudget:
    """Linear budget of a survey, with a second order where the first does not tell all.

    Parameters
    ----------
    chain, nominal
        The survey and its reduction.
    slopes : Slopes
        From `linear_slopes`.
    sources, layouts
        What errs.
    noisy : collection of str
        Sources whose errors make the crossflow differ from point to point, on which rows hang quadratically.
    components : sequence of Component
        Effects of single errors, as far as they are known: those of sources with few errors, both orders.
    pairs : PairOrder, optional
        What two of them do together (`paired`).

    Returns
    -------
    LinearBudget

    Notes
    -----
    A quadratic form that noise can only raise has a second-order variance of at most twice the square of its noise
    bias, because the squares of the eigenvalues of such a form add to no more than the square of their sum. Where that
    is below 1 % of the first order, nothing is worked out. It is worked out for the rows; for the cross-checks it is
    then unknown. The value of a row has its noise bias subtracted already;
    the second-order variance is the scatter about that mean and does not hold it.
    """
    second = _from_components(components)
    first = linear_budget(slopes, sources, layouts, names=OUTPUTS, second=second, pairs=pairs)
    variance = np.nan_to_num(np.diag(first.total))
    bias = np.array([chain.frozen.bias.get(name, 0.0) for name in OUTPUTS])
    if not np.any(2 * bias**2 > NEGLIGIBLE * variance):
        return first
    for source in sources:
        through = all(name in slopes.figures for name in source.applies_to)
        if source.name in noisy and source.name not in second and through:
            second[source.name] = probed_curvature(_Displaced(chain, nominal, slopes, layouts), source, layouts)
    return linear_budget(slopes, sources, layouts, names=OUTPUTS, second=second, pairs=pairs)


def paired(
    evaluate: Evaluate,
    sources: Sequence[Source],
    layouts: Mapping[str, InputLayout],
    components: Sequence[Component],
    variance: Array,
    *,
    workers: int = 2,
) -> PairOrder:
    """What the single errors of a survey do two by two.

    Parameters
    ----------
    evaluate : callable
        The chain, as `wakeledger.confidence.montecarlo.run` takes it.
    sources, layouts
        What errs.
    components : sequence of Component
        Effects of single errors; those of the sources with few errors are paired.
    variance : ndarray, shape (m,)
        Of each output.
    workers : int
        Number of threads.

    Returns
    -------
    PairOrder
    """
    shifted = {one.source for one in components if one.kind == MEASURED}
    sampler = ErrorSampler(sources, layouts, seed=0)
    few = [one for one in sampler.by_source if one.source.name in shifted]
    return pair_order(evaluate, sampler, few, components, variance, workers=workers)


def _from_components(components: Sequence[Component]) -> dict[str, SecondOrder]:
    """Second order of the sources whose errors were shifted one by one."""
    found: dict[str, SecondOrder] = {}
    for one in components:
        if one.kind == MEASURED:
            before = found.get(one.source, SecondOrder.none(one.curved.size))
            added = SecondOrder(
                one.variance - one.linear**2, one.curved, 4 * one.curved**2, 2 * one.curved * one.linear**2
            )
            found[one.source] = before + added
    return found


class _Displaced:
    """Derivatives of the chain at displaced inputs."""

    def __init__(self, chain: Chain, nominal: Reduction, slopes: Slopes, layouts: Mapping[str, InputLayout]) -> None:
        self.chain, self.layouts, self.known = chain, layouts, slopes
        self.vary = Variation(mask=nominal.region.mask)

    def __call__(self, errors: Mapping[str, Array]) -> Slopes:
        there = self.chain.reduce(errors, vary=self.vary, estimates=False)
        gradient = point_gradient(self.chain, there, estimates=False, errors=errors)
        own = {name: self.layouts[name] for name in errors}
        figures, _ = input_gradients(self.chain, gradient, own, errors=errors)
        unknown = np.asarray(np.isnan(self.known.outputs).any(axis=1))
        return Slopes(np.where(unknown[:, None], np.nan, gradient.outputs), figures)


def with_prediction(evaluate: Evaluate, slopes: Slopes) -> Evaluate:
    """A callable of errors that gives its outputs, and beside them the changes that derivatives predict.

    Parameters
    ----------
    evaluate : callable
        As `wakeledger.confidence.montecarlo.run` takes it, with m outputs.
    slopes : Slopes
        Its derivatives.

    Returns
    -------
    callable
        With 2 m outputs. Both see the same draws, so that their difference is free of the draws' sampling error.
    """

    def both(errors: dict[str, Array]) -> Array:
        return np.concatenate([evaluate(errors), slopes.change(errors)], axis=1)

    return both


def separated(samples: Samples) -> tuple[Samples, Samples]:
    """The outputs and the predicted changes of draws of `with_prediction`, each over `OUTPUTS`."""
    m = len(OUTPUTS)
    return Samples(OUTPUTS, samples.values[:, :m]), Samples(OUTPUTS, samples.values[:, m:])
