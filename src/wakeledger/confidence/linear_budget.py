"""Budget in closed form from derivatives: what every source does to every output, to first order and second.

With the derivative g of an output by every element of an input and the map E from a source's independent variables to
its errors, the output's variance is |Eᵀg|²: a sum over points for random errors, the square of a sum for systematic
ones, a sum over rows, and for errors that vary smoothly in space the quadratic form gᵀKg with their correlation K. GUM
(JCGM 100:2008) 5.2.2, and the note to 5.1.2 for the second order.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from wakeledger.confidence.linear import coverage_factor, welch_satterthwaite
from wakeledger.confidence.pairs import PairOrder
from wakeledger.confidence.sampling import SourceErrors
from wakeledger.confidence.sources import InputLayout, Source, check_sources
from wakeledger.core.grid import Array

#: Pairs of directions along which the curvature of sources with many errors is probed.
PROBES = 8
#: A second order is left out where it cannot add more than this share of an output's variance.
NEGLIGIBLE = 0.01


@dataclass(frozen=True)
class Slopes:
    """Derivatives of m outputs by every element of every input.

    Attributes
    ----------
    outputs : ndarray, shape (m, k)
        Derivatives of the outputs by k figures; NaN for an output that is not known.
    figures : mapping of str to ndarray, shape (k, n), or (k,) for single numbers
        Derivatives of the figures by the inputs.
    direct : mapping of str to ndarray, shape (m,)
        Derivatives of the outputs by inputs that are single numbers and reach them otherwise.
    curvatures : mapping of str to ndarray, shape (m,)
        Second derivatives by those inputs.
    """

    outputs: Array
    figures: Mapping[str, Array]
    direct: Mapping[str, Array] = field(default_factory=dict)
    curvatures: Mapping[str, Array] = field(default_factory=dict)

    def change(self, errors: Mapping[str, Array]) -> Array:
        """Change of the outputs under errors, to first order.

        Parameters
        ----------
        errors : mapping of str to ndarray, shape (draws, n) or (draws,)
            As `wakeledger.confidence.sampling.ErrorSampler.draw` gives them.

        Returns
        -------
        ndarray, shape (draws, m)
        """
        draws = len(next(iter(errors.values())))
        by_figure = np.zeros((draws, self.outputs.shape[1]))
        result = np.zeros((draws, len(self.outputs)))
        for name, array in errors.items():
            if name in self.figures and np.any(array.strides):
                slope = self.figures[name]
                by_figure += np.multiply.outer(array, slope) if slope.ndim == 1 else np.nan_to_num(array) @ slope.T
            elif name in self.direct:
                result += np.multiply.outer(array, self.direct[name])
        changed: Array = result + by_figure @ self.outputs.T
        return changed


@dataclass(frozen=True)
class SecondOrder:
    """What the curvature of the outputs adds under the errors of one source.

    Attributes
    ----------
    variance : ndarray, shape (m,)
        Added to the variance of each output: ½ tr(HCHC) for normal errors of covariance C.
    shift : ndarray, shape (m,)
        Added to its mean: ½ tr(HC).
    inflation : ndarray, shape (m,), or None
        Added on average to the first-order variance by slopes at measured values, tr(HCHC)
        (`wakeledger.confidence.curvature`); None for twice the variance, as with normal errors.
    along : ndarray, shape (m,), or None
        gᵀCHCg, the curvature along the slope; None where it is not known, which counts as none.
    """

    variance: Array
    shift: Array
    inflation: Array | None = None
    along: Array | None = None

    @classmethod
    def none(cls, outputs: int) -> SecondOrder:
        """No curvature."""
        return cls(*np.zeros((4, outputs)))

    @property
    def in_slopes(self) -> Array:
        """The inflation, shape (m,)."""
        return 2 * self.variance if self.inflation is None else self.inflation

    def __add__(self, other: SecondOrder) -> SecondOrder:
        along = [0.0 if one.along is None else one.along for one in (self, other)]
        return SecondOrder(
            self.variance + other.variance,
            self.shift + other.shift,
            self.in_slopes + other.in_slopes,
            np.asarray(along[0] + along[1] + np.zeros(self.variance.shape)),
        )


@dataclass(frozen=True)
class LinearBudget:
    """Uncertainty of m outputs by source, in closed form.

    Attributes
    ----------
    names : tuple of str
        Names of the outputs.
    sources : tuple of Source
        The s sources.
    covariance : ndarray, shape (s, m, m)
        First order, from each source alone.
    second : tuple of SecondOrder
        Second order, from each source alone.
    pairs : PairOrder
        Second order of two errors together.
    common : ndarray, shape (m, m)
        Added by errors that two sources share: their covariance.
    correlated : str or None
        Why the degrees of freedom cannot be combined, where they cannot.
    """

    names: tuple[str, ...]
    sources: tuple[Source, ...]
    covariance: Array
    second: tuple[SecondOrder, ...]
    pairs: PairOrder
    common: Array
    correlated: str | None = None

    @property
    def contributions(self) -> Array:
        """Variance of each output from each source alone, shape (s, m), both orders."""
        first: Array = np.diagonal(self.covariance, axis1=1, axis2=2)
        return first + np.stack([one.variance for one in self.second])

    @property
    def total(self) -> Array:
        """Covariance of the outputs, shape (m, m); the second order of each source alone on the diagonal only."""
        total: Array = self.covariance.sum(axis=0) + self.common + self.pairs.covariance
        return total + np.diag(np.sum([one.variance for one in self.second], axis=0))

    @property
    def standard_uncertainty(self) -> Array:
        """Combined standard uncertainty of each output, shape (m,)."""
        return np.sqrt(np.maximum(np.diag(self.total), 0.0))

    @property
    def second_order(self) -> Array:
        """Standard uncertainty that the second order alone would give, shape (m,)."""
        alone = np.sum([one.variance for one in self.second], axis=0)
        return np.asarray(np.sqrt(alone + np.diag(self.pairs.covariance)))

    @property
    def inflation(self) -> Array:
        """What the second order adds on average to the first at measured values, shape (m,).

        Without what lies along the slope of each output itself (`wakeledger.confidence.curvature`).
        """
        whole = np.sum([one.in_slopes for one in self.second], axis=0) + self.pairs.inflation
        along = np.sum([one.along for one in self.second if one.along is not None], axis=0) + self.pairs.along
        first = np.diag(self.covariance.sum(axis=0) + self.common)
        own = np.square(np.divide(along, first, out=np.zeros(whole.shape), where=first > 0))
        inflation: Array = np.maximum(whole - own, 0.0)
        return inflation

    @property
    def shift(self) -> Array:
        """What the errors add to the mean of each output, to second order, shape (m,)."""
        shift: Array = np.sum([one.shift for one in self.second], axis=0)
        return shift

    def degrees_of_freedom(self) -> Array:
        """Effective degrees of freedom by Welch and Satterthwaite, shape (m,); NaN where `correlated` says why."""
        if self.correlated:
            return np.full(len(self.names), math.nan)
        freedom = np.array([source.degrees_of_freedom for source in self.sources])
        return welch_satterthwaite(self.contributions.T, freedom)

    def coverage_factor(self, probability: float = 0.95) -> Array:
        """Factor k of the expanded uncertainty, shape (m,): Student's t with the effective degrees of freedom.

        Parameters
        ----------
        probability : float
            Coverage probability.

        Returns
        -------
        ndarray
            NaN where the degrees of freedom are not known.

        Notes
        -----
        Degrees of freedom are truncated to the next lower integer (GUM G.6.4).
        """
        return np.array(
            [
                math.nan
                if math.isnan(nu)
                else coverage_factor(probability, degrees_of_freedom=max(math.floor(nu), 1) if nu < 1e9 else math.inf)
                for nu in self.degrees_of_freedom()
            ]
        )


def linear_budget(
    slopes: Slopes,
    sources: Sequence[Source],
    layouts: Mapping[str, InputLayout],
    *,
    names: Sequence[str],
    second: Mapping[str, SecondOrder] | None = None,
    pairs: PairOrder | None = None,
) -> LinearBudget:
    """Propagate all sources through given derivatives.

    Parameters
    ----------
    slopes : Slopes
        Derivatives by every input that a source acts on.
    sources : sequence of Source
        The sources.
    layouts : mapping of str to InputLayout
        The inputs by name.
    names : sequence of str
        Names of the m outputs.
    second : mapping of str to SecondOrder, optional
        Second order of sources by name (`probed_curvature`), whole; where it is not given, that of single numbers comes
        from `Slopes.curvatures`.
    pairs : PairOrder, optional
        Second order of pairs of single errors (`wakeledger.confidence.pairs.pair_order`); none where it is left out.

    Returns
    -------
    LinearBudget

    Raises
    ------
    SurveyError
        If a source cannot act on these inputs.
    KeyError
        If a derivative is missing: an input is never taken as one that does nothing.

    Notes
    -----
    The standard deviation of a source with few degrees of freedom is that of its t distribution, as in Monte Carlo.
    """
    check_sources(sources, layouts)
    m = len(names)
    covariances, orders = [], []
    common = np.zeros((m, m))
    shared: dict[str, list[Array]] = {}
    for source in sources:
        errors = SourceErrors(source, layouts, seed=0)
        covariance = np.zeros((m, m))
        order = (second or {}).get(source.name, SecondOrder.none(m))
        through = {name: slopes.figures[name] for name in source.applies_to if name not in slopes.direct}
        straight = {name: slopes.direct[name] for name in source.applies_to if name in slopes.direct}
        found = errors.effects({**through, **straight})
        for stream, inputs in errors.streams.items():
            if source.shared_id is None:
                for name in inputs:
                    inner = found[name] @ found[name].T
                    covariance += inner if name in straight else slopes.outputs @ inner @ slopes.outputs.T
                continue
            # An error of several inputs acts on all of them at once.
            whole: Array = np.sum(
                [found[name] if name in straight else slopes.outputs @ found[name] for name in inputs], axis=0
            )
            covariance += whole @ whole.T
            for other in shared.setdefault(stream, []):
                common += other @ whole.T + whole @ other.T
            shared[stream].append(whole)
        for name in straight if source.name not in (second or {}) else ():
            curved = 0.5 * slopes.curvatures.get(name, np.zeros(m)) * _size(source, layouts[name]) ** 2
            fourth = source.kurtosis if math.isfinite(source.kurtosis) else 3.0
            order += SecondOrder(
                (fourth - 1) * curved**2, curved, 4 * curved**2, 2 * curved * np.square(found[name][:, 0])
            )
        covariances.append(covariance)
        orders.append(order)
    together = PairOrder.none(m) if pairs is None else pairs
    return LinearBudget(
        tuple(names),
        tuple(sources),
        np.stack(covariances),
        tuple(orders),
        together,
        common,
        correlated_sources(sources),
    )


def _size(source: Source, layout: InputLayout) -> float:
    """Standard deviation of a source's error of a single number."""
    size = source.standard_uncertainty * source.spread
    return size * abs(float(layout.nominal)) if source.relative else size


def correlated_sources(sources: Sequence[Source]) -> str | None:
    """Why degrees of freedom of sources cannot be combined by Welch and Satterthwaite, None where they can.

    Parameters
    ----------
    sources : sequence of Source
        The sources.

    Returns
    -------
    str or None

    Notes
    -----
    The formula is for independent inputs (GUM G.4.1). It fails where one error belongs to two sources, and where the
    errors behind a size that is itself uncertain are correlated from point to point. Sizes that are taken as exact
    need no formula, however their errors hang together.
    """
    uncertain = [source for source in sources if math.isfinite(source.degrees_of_freedom)]
    if not uncertain:
        return None
    for source in uncertain:
        if source.correlation_length is not None:
            return f"the errors of {source.name!r} are correlated from point to point"
    seen: dict[tuple[str, str], str] = {}
    for source in sources:
        for name in source.applies_to if source.shared_id is not None else ():
            other = seen.setdefault((str(source.shared_id), name), source.name)
            if other != source.name:
                return f"the sources {other!r} and {source.name!r} share their errors of {name}"
    return None


def probed_curvature(
    gradient_at: Callable[[Mapping[str, Array]], Slopes],
    source: Source,
    layouts: Mapping[str, InputLayout],
    *,
    probes: int = PROBES,
    seed: int = 0,
) -> SecondOrder:
    """Second order of a source with many errors, from derivatives at displaced inputs.

    Parameters
    ----------
    gradient_at : callable
        Takes additive errors by input, arrays of shape (n,), and gives the derivatives there.
    source : Source
        The source.
    layouts : mapping of str to InputLayout
        The inputs by name.
    probes : int
        Directions, at least 2; two evaluations for each.
    seed : int
        Of the directions.

    Returns
    -------
    SecondOrder

    Notes
    -----
    With independent unit variables x of the source and the outputs' second derivatives A by them, f = g·x + ½xᵀAx has
    the variance |g|² + ½ tr A² + ¼(κ − 3) Σ A_ii² and the mean ½ tr A (κ the kurtosis of one variable). Along
    directions s of signs ±1 the difference of derivatives at ±s is 2As; (s·As')² over pairs of directions estimates
    tr A² without bias and s·As estimates tr A. Where many variables take part, K directions leave a relative scatter
    of about 2/K in tr A²: the uncertainty of the second order is known within an eighth for 8 of them. Up to as many
    variables as directions are taken one by one, which is exact.
    """
    errors = SourceErrors(source, layouts, seed=0)
    fourth = source.kurtosis if math.isfinite(source.kurtosis) else 3.0
    if errors.latents <= probes:
        # The images of the single variables are the columns of A.
        directions = np.eye(errors.latents)
        images = np.stack([_image(gradient_at, source, errors, one, directions).by_direction for one in directions])
        diagonal = np.einsum("jmj->mj", images)
        variance = 0.5 * np.square(images).sum(axis=(0, 2)) + 0.25 * (fourth - 3.0) * np.square(diagonal).sum(axis=1)
        return SecondOrder(np.maximum(variance, 0.0), 0.5 * diagonal.sum(axis=1), np.square(images).sum(axis=(0, 2)))
    directions = np.sign(np.random.default_rng([seed, 5]).random((probes, errors.latents)) - 0.5)
    found: list[_Image] = []
    weighted: Array | float = 0.0
    for direction in directions:
        image = _image(gradient_at, source, errors, direction, directions)
        found.append(image)
        if fourth != 3.0:
            weighted = weighted + direction * image.effects / probes
    products = np.stack([image.by_direction for image in found])
    others = ~np.eye(probes, dtype=bool)
    frobenius = np.square(np.moveaxis(products, 1, -1)[others]).mean(axis=0)
    trace = np.moveaxis(products, 1, -1)[~others].mean(axis=0)
    variance = 0.5 * frobenius
    if fourth != 3.0:
        outputs = np.mean([image.outputs for image in found], axis=0)
        estimate = np.diag(outputs @ (weighted @ np.transpose(weighted)) @ outputs.T)
        squares = (probes * estimate - frobenius) / (probes - 1)
        variance = variance + 0.25 * (fourth - 3.0) * np.clip(squares, 0.0, frobenius)
    return SecondOrder(np.maximum(variance, 0.0), 0.5 * trace, np.maximum(frobenius, 0.0))


@dataclass(frozen=True)
class _Image:
    """Second derivatives applied to one direction of a source's variables.

    Attributes
    ----------
    outputs : ndarray, shape (m, k)
        Derivatives of the outputs by the figures.
    effects : ndarray, shape (k, latents)
        Of the figures; never of the outputs, which are many on as many points.
    by_direction : ndarray, shape (m, directions)
        Of the outputs, applied to further directions.
    """

    outputs: Array
    effects: Array
    by_direction: Array


def _image(
    gradient_at: Callable[[Mapping[str, Array]], Slopes],
    source: Source,
    errors: SourceErrors,
    direction: Array,
    directions: Array,
) -> _Image:
    drawn = errors.expanded(direction)
    up, down = (gradient_at({name: sign * array for name, array in drawn.items()}) for sign in (1.0, -1.0))
    change = {name: (up.figures[name] - down.figures[name]) / 2 for name in source.applies_to}
    mean = {name: (up.figures[name] + down.figures[name]) / 2 for name in source.applies_to}
    effects = np.concatenate(list(errors.effects(change).values()), axis=1)
    level = np.concatenate(list(errors.effects(mean).values()), axis=1)
    outputs, turned = (up.outputs + down.outputs) / 2, (up.outputs - down.outputs) / 2
    return _Image(outputs, effects, outputs @ (effects @ directions.T) + turned @ (level @ directions.T))
