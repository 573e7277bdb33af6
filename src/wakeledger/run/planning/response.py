"""How one set-up answers to errors: its row's variances for unit errors, from the reduction of simulated surveys."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from wakeledger.confidence.montecarlo import sample
from wakeledger.confidence.sampling import ErrorSampler, SourceErrors
from wakeledger.confidence.terms import NumericalTerm
from wakeledger.core.errors import InputError
from wakeledger.core.grid import Array
from wakeledger.run.chain.adjoint import input_gradients, point_gradient
from wakeledger.run.chain.outputs import OUTPUTS
from wakeledger.run.chain.reduction import Variation
from wakeledger.run.checks import all_checks
from wakeledger.run.config import Survey
from wakeledger.run.inputs import layouts, sources
from wakeledger.run.planning.flow import ExpectedFlow
from wakeledger.run.planning.instrument import Probe
from wakeledger.run.planning.simulate import (
    DRIFT,
    NOISES,
    SYSTEMATIC,
    Accuracies,
    Places,
    declared,
    noise_of,
    simulated,
)
from wakeledger.run.prepared import Prepared, prepare
from wakeledger.run.survey import facts_of
from wakeledger.run.uncertainty.draws import terms_of

#: Line of the budget for what a survey without any noise makes of its row.
GRID = "spacing, window and edge of the wake region"
#: Line of the budget for what the noise does beyond first order.
CURVED = "second order of the noise"
#: Pairs of draws for it.
PAIRS = 24
#: Where the mean square of what grids without noise miss is above this part of the declared noise's variance, more
#: grids are tried.
_WORTH = 1e-3


@dataclass(frozen=True)
class Power:
    """Variance that a source of standard uncertainty s adds: linear · s² + curved · s⁴."""

    linear: float = 0.0
    curved: float = 0.0

    def at(self, size: float | Array) -> float | Array:
        """Variance at a standard uncertainty, or at several."""
        square = np.square(size)
        return self.linear * square + self.curved * square**2


@dataclass(frozen=True)
class Response:
    """What one set-up knows of one output; variances in the output's unit squared.

    Attributes
    ----------
    noise : mapping of str to float
        From each part of the probe's noise, by source.
    drift : Power
        From the drift of the reference, Pa.
    systematic : mapping of str to Power
        From each systematic source, by its key in ``[plan]``.
    missed : float
        Mean square of what surveys without any noise are off the exact row, over grids shifted by chance.
    error : float
        Their mean error, in the output's unit.
    terms : mapping of str to float
        Of each numerical term that the ledger of such a survey states, NaN for one that cannot be had. It does not know
        the exact row, so that these stand for `missed` there.
    failing : tuple of str
        Checks that would fail.
    reason : str or None
        Why no survey is possible.
    first : Response or None
        Of the first simulated survey alone, which a full Monte Carlo can be held against.
    """

    noise: Mapping[str, float] = field(default_factory=dict)
    drift: Power = field(default_factory=Power)
    systematic: Mapping[str, Power] = field(default_factory=dict)
    missed: float = 0.0
    error: float = np.nan
    terms: Mapping[str, float] = field(default_factory=dict)
    failing: tuple[str, ...] = ()
    reason: str | None = None
    first: Response | None = None

    @property
    def usable(self) -> bool:
        """Whether such a survey can be reduced and passes its checks."""
        return self.reason is None and not self.failing

    def measured(self, accuracies: Accuracies, repeats: int) -> float:
        """Variance from all sources that were declared."""
        random = sum(self.noise.values()) + float(self.drift.at(accuracies.reference_drift))
        common = sum(float(power.at(getattr(accuracies, key))) for key, power in self.systematic.items())
        return random / repeats + common

    def scatter(self, accuracies: Accuracies, repeats: int) -> float:
        """Mean square of what surveys are off the exact row: declared sources, and what their grids miss."""
        return self.measured(accuracies, repeats) + self.missed

    def stated(self, accuracies: Accuracies, repeats: int) -> float:
        """Variance that a ledger states: declared sources and numerical terms; NaN where one of these is unknown."""
        return self.measured(accuracies, repeats) + sum(self.terms.values())

    def scaled(self, factor: float) -> Response:
        """With the variances of all sources multiplied: what a full Monte Carlo found different."""
        return replace(
            self,
            noise={name: factor * variance for name, variance in self.noise.items()},
            drift=Power(factor * self.drift.linear, factor * self.drift.curved),
            systematic={
                key: Power(factor * power.linear, factor * power.curved) for key, power in self.systematic.items()
            },
        )


def respond(
    flow: ExpectedFlow,
    probe: Probe,
    largest: Accuracies,
    *,
    output: str,
    surveys: Sequence[Places],
    further: Sequence[Places] = (),
    seed: Sequence[int],
    workers: int = 2,
) -> Response:
    """Reduce simulated surveys of one set-up under errors.

    Parameters
    ----------
    flow : ExpectedFlow
        The flow.
    probe : Probe
        Its noise.
    largest : Accuracies
        Sizes at which the sources beside the noise are tried.
    output : str
        The chain's output that is wanted.
    surveys : sequence of Places
        The same window with its lines shifted by chance.
    further : sequence of Places
        More of them, for what the grid misses; left aside where that is little beside the noise.
    seed : sequence of int
        Of the noise.
    workers : int
        Threads.

    Returns
    -------
    Response
    """
    # The drift changes the noise bias by next to nothing, and working that out takes most of the time.
    survey, whole = declared(flow, probe, Accuracies()), declared(flow, probe, largest)
    found: list[_Pass] = []
    errors: list[float] = []
    for number, places in enumerate((*surveys, *further)):
        if number == len(surveys):
            noise = sum(sum(one.noise.values()) for one in found)
            if sum(error**2 for error in errors) <= _WORTH * noise:
                break
        generator = np.random.default_rng([*seed, number])
        given = simulated(survey, places.points(noise_of(probe, places.y.size, generator)))
        try:
            prepared = prepare(given)
            if not prepared.nominal.region.mask.any():
                return Response(reason="no wake is found")
            terms = terms_of(prepared, given) if number < len(surveys) else ()
        except InputError as error:
            return Response(reason=error.found)
        errors.append(without_noise(prepared, places)[output] - flow.values[output])
        if number < len(surveys):
            found.append(_Pass(prepared, whole, terms, largest, output, (*seed, number), len(surveys), workers))
    return replace(_together(found, errors), first=_together(found[:1], errors[:1]))


def without_noise(prepared: Prepared, places: Places) -> Mapping[str, float]:
    """The chain's outputs of a survey without any noise, in the wake region that was found with it.

    Parameters
    ----------
    prepared : Prepared
        The survey with its noise.
    places : Places
        Its points and what a probe without errors reads there.

    Returns
    -------
    mapping of str to float
    """
    chain = prepared.chain
    still = replace(chain, points=places.points(), frozen=replace(chain.frozen, bias={}))
    return still.reduce(vary=Variation(mask=prepared.nominal.region.mask), estimates=False).values


class _Pass:
    """One simulated survey under errors."""

    def __init__(
        self,
        prepared: Prepared,
        survey: Survey,
        terms: Sequence[NumericalTerm],
        largest: Accuracies,
        output: str,
        seed: tuple[int, ...],
        surveys: int,
        workers: int,
    ) -> None:
        at = OUTPUTS.index(output)
        points, reference = prepared.chain.points, prepared.nominal.reference
        self.sources = sources(survey, points, reference)
        names = sorted({name for source in self.sources for name in source.applies_to})
        self.layouts = layouts(survey, points, prepared.chain.gridding, names)
        self.prepared, self.at, self.workers, self.seed = prepared, at, workers, seed
        chain = prepared.chain
        # One unknown term leaves the ledger's uncertainty unknown.
        sizes = ((term.name, float(term.standard_uncertainty[at])) for term in terms)
        self.terms = {name: size**2 for name, size in sizes if size != 0}
        self.failing = tuple(
            check.name for check in all_checks(prepared.nominal, facts_of(prepared)) if check.verdict == "fail"
        )
        gradient = point_gradient(chain, prepared.nominal, estimates=False, workers=workers)
        slopes, _ = input_gradients(chain, gradient, self.layouts, workers=workers)
        self.slopes = {name: gradient.outputs[[at]] @ slope for name, slope in slopes.items()}
        self.noise = {name: self._linear(name) for name in NOISES}
        self.noise[CURVED] = self._curved(-(-PAIRS // surveys))
        self.drift = _per_unit((self._linear(DRIFT), 0.0), largest.reference_drift)
        self.systematic = {
            key: _per_unit(self._shifted(name), float(getattr(largest, key))) for name, key in SYSTEMATIC.items()
        }

    def _errors(self, name: str) -> SourceErrors | None:
        source = next((one for one in self.sources if one.name == name), None)
        if source is None:
            return None
        inputs = {key: self.layouts[key] for key in source.applies_to}
        return SourceErrors(source, inputs, seed=self.seed)

    def _linear(self, name: str) -> float:
        """Variance to first order from a source that acts on the points, by the chain's own derivatives."""
        errors = self._errors(name)
        if errors is None:
            return 0.0
        effects = errors.effects({key: self.slopes[key] for key in errors.source.applies_to})
        return float(sum(np.sum(effect**2) for effect in effects.values()))

    def _evaluate(self, errors: dict[str, Array]) -> Array:
        return self.prepared.chain.vectors(errors, estimates=False)

    def _curved(self, pairs: int) -> float:
        """Variance of what the noise does to second order: the even part of the answer to errors of either sign."""
        chosen = [source for source in self.sources if source.name in NOISES]
        if not chosen:
            return 0.0
        inputs = {name: self.layouts[name] for source in chosen for name in source.applies_to}
        sampler = ErrorSampler(chosen, inputs, seed=self.seed)

        def draw(start: int, stop: int) -> dict[str, Array]:
            errors = sampler.draw(start // 2, stop // 2)
            signs = np.tile([1.0, -1.0], (stop - start) // 2)
            return {name: np.repeat(array, 2, axis=0) * signs[:, None] for name, array in errors.items()}

        values = sample(self._evaluate, draw, len(OUTPUTS), 2 * pairs, 16, self.workers, None)[:, self.at]
        return float(np.var((values[0::2] + values[1::2]) / 2, ddof=1))

    def _shifted(self, name: str) -> tuple[float, float]:
        """Variance of first and of second order of a source of few errors, each shifted up and down."""
        errors = self._errors(name)
        if errors is None:
            return 0.0, 0.0
        still = self.prepared.nominal.vector[self.at]
        linear = curved = 0.0
        for latent in range(errors.latents):
            deviation = errors.deviation(latent)
            up, down = (
                float(self._evaluate({key: sign * value for key, value in deviation.items()})[0, self.at])
                for sign in (1.0, -1.0)
            )
            linear += ((up - down) / 2) ** 2
            # A square of a normal error has twice its variance squared.
            curved += 2 * ((up + down) / 2 - still) ** 2
        return linear, curved


def _per_unit(variances: tuple[float, float], size: float) -> tuple[float, float]:
    """Variances of first and second order for a source of unit size instead of the size it was tried at."""
    return (variances[0] / size**2, variances[1] / size**4) if size > 0 else (0.0, 0.0)


def _together(passes: Sequence[_Pass], errors: Sequence[float]) -> Response:
    """Means over the surveys of one set-up."""
    count = len(passes)

    def mean(maps: Sequence[Mapping[str, float]]) -> dict[str, float]:
        names = list(dict.fromkeys(name for one in maps for name in one))
        return {name: sum(one.get(name, 0.0) for one in maps) / count for name in names}

    return Response(
        noise=mean([one.noise for one in passes]),
        drift=Power(*np.mean([one.drift for one in passes], axis=0)),
        systematic={
            key: Power(*np.mean([one.systematic[key] for one in passes], axis=0)) for key in SYSTEMATIC.values()
        },
        missed=float(np.mean(np.square(errors))),
        error=float(np.mean(errors)),
        terms=mean([one.terms for one in passes]),
        failing=tuple(dict.fromkeys(name for one in passes for name in one.failing)),
    )
