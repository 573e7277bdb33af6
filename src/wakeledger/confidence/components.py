"""Independent errors one by one: what each does to the outputs, with its sign, and what they leave unexplained."""

from __future__ import annotations

import math
from collections.abc import Hashable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from wakeledger.confidence.montecarlo import Evaluate, Progress, sample
from wakeledger.confidence.samples import Samples
from wakeledger.confidence.sampling import ErrorSampler, SourceErrors, doubt, draw_blocks, unit_variables
from wakeledger.confidence.sources import kurtosis, spread
from wakeledger.confidence.terms import NumericalTerm
from wakeledger.core.grid import Array

#: Draws of a model of components; its 95 % interval is then known within about 1 %.
MODEL_DRAWS = 20_000

#: Kind of a component: an error of a declared source, or a numerical term.
MEASURED, NUMERICAL = "measured", "numerical"


@dataclass(frozen=True)
class Component:
    """One independent error and what it does to every output.

    Attributes
    ----------
    source : str
        Name of the source, or of the numerical term.
    kind : {"measured", "numerical"}
        Whether it is an error of a source or a numerical term.
    linear : ndarray, shape (...)
        Half the difference of the outputs at plus and minus one standard deviation of the error, **with its sign**.
    curved : ndarray, shape (...)
        Half their sum less the nominal outputs: the second order.
    input : str
        Input it acts on; empty for a numerical term.
    number : int
        Which of the input's errors it is.
    distribution : {"normal", "rectangular", "triangular", "arcsine"}
        Its distribution.
    degrees_of_freedom : float
        How well its standard deviation is known.
    shared_id : str or None
        Identity under which other surveys have the very same error; None where there is no such error elsewhere.
    """

    source: str
    kind: str
    linear: Array
    curved: Array
    input: str = ""
    number: int = 0
    distribution: str = "normal"
    degrees_of_freedom: float = math.inf
    shared_id: str | None = None

    @property
    def key(self) -> tuple[str, str, int] | None:
        """What tells the same error in another survey; None where it has no like."""
        return None if self.shared_id is None else (self.shared_id, self.input, self.number)

    @property
    def variance(self) -> Array:
        """Variance of each output from this error alone, a² + (κ - 1) b²."""
        fourth = kurtosis(self.distribution, self.degrees_of_freedom)
        # A t with few degrees of freedom has no fourth moment; the normal one stands in.
        result: Array = self.linear**2 + ((fourth if math.isfinite(fourth) else 3.0) - 1) * self.curved**2
        return result

    def times(self, factor: Array | float) -> Component:
        """The same error with its effect on each output multiplied.

        Parameters
        ----------
        factor : ndarray or float
            Fits the outputs' shape.

        Returns
        -------
        Component
        """
        return replace(self, linear=self.linear * factor, curved=self.curved * factor)


def shifted_components(
    evaluate: Evaluate,
    sampler: ErrorSampler,
    few: Sequence[SourceErrors],
    outputs: int,
    *,
    batch: int,
    workers: int,
    progress: Progress | None = None,
) -> tuple[Component, ...]:
    """Components of sources by two-sided shifts of each of their independent errors.

    Parameters
    ----------
    evaluate : callable
        As in `wakeledger.confidence.montecarlo.run`.
    sampler : ErrorSampler
        Errors of all sources.
    few : sequence of SourceErrors
        Those of its sources that are to be shifted.
    outputs : int
        Number of outputs m.
    batch, workers, progress
        As in `wakeledger.confidence.montecarlo.sample`.

    Returns
    -------
    tuple of Component
        Source by source, in the order of `SourceErrors.deviation`, over the m outputs.
    """
    shifts = [(one, latent, sign) for one in few for latent in range(one.latents) for sign in (1.0, -1.0)]

    def draw(start: int, stop: int) -> dict[str, Array]:
        errors = sampler.zeros(stop - start)
        for k in range(max(start, 1), stop):
            one, latent, sign = shifts[k - 1]
            for name, deviation in one.deviation(latent).items():
                if not errors[name].flags.writeable:
                    errors[name] = np.zeros(errors[name].shape)
                errors[name][k - start] = sign * deviation[0]
        return errors

    values = sample(evaluate, draw, outputs, 1 + len(shifts), batch, workers, progress)
    found, position = [], 1
    for one in few:
        for name, number in one.names:
            up, down = values[position], values[position + 1]
            position += 2
            found.append(
                Component(
                    source=one.source.name,
                    kind=MEASURED,
                    linear=(up - down) / 2,
                    curved=(up + down) / 2 - values[0],
                    input=name,
                    number=number,
                    distribution=one.source.distribution,
                    degrees_of_freedom=one.source.degrees_of_freedom,
                    shared_id=one.source.shared_id if one.followed else None,
                )
            )
    return tuple(found)


def term_components(terms: Sequence[NumericalTerm]) -> tuple[Component, ...]:
    """Numerical terms as components.

    Parameters
    ----------
    terms : sequence of NumericalTerm
        The terms.

    Returns
    -------
    tuple of Component
    """
    return tuple(
        Component(
            source=term.name,
            kind=NUMERICAL,
            linear=np.asarray(term.standard_uncertainty, dtype=float),
            curved=np.zeros(np.shape(term.standard_uncertainty)),
            distribution=term.distribution,
        )
        for term in terms
    )


def scatter(
    samples: Samples,
    few: Sequence[SourceErrors],
    components: Sequence[Component],
    *,
    predicted: Array | None = None,
) -> Array:
    """Covariance of the outputs that components leave unexplained.

    Parameters
    ----------
    samples : Samples
        Draws of the m outputs without numerical terms.
    few : sequence of SourceErrors
        The sources that were shifted.
    components : sequence of Component
        What `shifted_components` gave for them.
    predicted : ndarray, shape (draws, m), or None
        What other errors that are followed do in each draw (`wakeledger.confidence.point_errors.predicted`).

    Returns
    -------
    ndarray, shape (m, m)
        NaN for unknown outputs. It holds the sources with many errors and the interaction of all sources; what the
        components do in each draw is taken off first, so that it is free of the sampling error of a dominant one.
    """
    known = samples.known
    covariance = np.full((known.size, known.size), np.nan)
    values = samples.values[:, known]
    if predicted is not None:
        values = values - predicted[:, known]
    if few:
        variables = np.concatenate([one.variables(0, samples.draws) for one in few], axis=1)
        linear = np.stack([one.linear[known] for one in components])
        curved = np.stack([one.curved[known] for one in components])
        values = values - (variables @ linear + (variables**2 - 1) @ curved)
    used = values[np.isfinite(values).all(axis=1)]
    if len(used) < 2:
        return covariance
    deviations = used - used.mean(axis=0)
    covariance[np.ix_(known, known)] = deviations.T @ deviations / (len(used) - 1)
    return covariance


def half_width(
    components: Sequence[Component],
    groups: Sequence[Hashable],
    scatters: Sequence[tuple[Array, Array | float]] = (),
    *,
    probability: float = 0.95,
    draws: int = MODEL_DRAWS,
) -> Array:
    """Half the length of the symmetric coverage interval of what components and scatters do together.

    Parameters
    ----------
    components : sequence of Component
        Independent errors, over m outputs.
    groups : sequence of hashable
        For each component, which source it belongs to: components of one source share the doubt about its size.
    scatters : sequence of (ndarray of shape (m,), ndarray or float)
        Standard deviations of further independent errors and their degrees of freedom: normal where these are
        infinite, else s times a variable of Student's t distribution.
    probability : float
        Coverage probability.
    draws : int
        Draws of the model; the same figures give the same half width.

    Returns
    -------
    ndarray, shape (m,)
        The size of a t-distributed scatter is s itself, as in the GUM's Type A evaluation, and that of a component is
        its standard deviation.
    """
    shapes = [one.linear for one in components] + [np.asarray(size) for size, _ in scatters]
    values = np.zeros((draws, *shapes[0].shape)) if shapes else np.zeros((draws, 0))
    doubts: dict[Hashable, Array] = {}
    for k, (one, group) in enumerate(zip(components, groups, strict=True)):
        if not (np.any(one.linear) or np.any(one.curved)):
            continue
        variable = _variable(f"model|component|{k}", draws, one.distribution)
        nu = one.degrees_of_freedom
        if math.isfinite(nu):
            if group not in doubts:
                doubts[group] = _doubt(f"model|doubt|{len(doubts)}", draws, one.distribution, nu)
            variable *= doubts[group] / spread(one.distribution, nu)
        values += np.multiply.outer(variable, one.linear)
        if np.any(one.curved):
            values += np.multiply.outer(variable**2 - 1, one.curved)
    for k, (size, nu_of_scatter) in enumerate(scatters):
        variable = _variable(f"model|scatter|{k}", draws, "normal")
        together = np.broadcast_to(np.asarray(nu_of_scatter, dtype=float), np.shape(size))
        for nu in np.unique(together):
            drawn = variable
            if math.isfinite(nu):
                drawn = variable * _doubt(f"model|scatter doubt|{k}", draws, "normal", float(nu))
            values += np.multiply.outer(drawn, np.where(together == nu, size, 0.0))
    ends = [(1 - probability) / 2, (1 + probability) / 2]
    low, high = np.quantile(values, ends, axis=0, method="median_unbiased")
    half: Array = (high - low) / 2
    return half


def _variable(key: str, draws: int, distribution: str) -> Array:
    def fill(rng: np.random.Generator, out: Array) -> None:
        unit_variables(rng, out, distribution)

    return draw_blocks(key, 0, draws, 1, fill)[:, 0]


def _doubt(key: str, draws: int, distribution: str, nu: float) -> Array:
    def fill(rng: np.random.Generator, out: Array) -> None:
        out[...] = doubt(rng, out.shape, distribution, nu)

    return draw_blocks(key, 0, draws, 1, fill)[:, 0]
