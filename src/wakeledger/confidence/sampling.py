"""Draws of the errors of every input, reproducible whatever the order, the chunks or the company of other sources."""

from __future__ import annotations

import hashlib
import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri

from wakeledger.confidence.correlation import Expansion, correlated_field
from wakeledger.confidence.sources import InputLayout, Source, check_sources
from wakeledger.core.grid import Array

Seed = int | Sequence[int]

# Few variables share one generator per block of draws, because starting a generator costs as much as 2000 numbers.
_BLOCK = 256
_FEW = 64


def stream(key: str, index: int) -> np.random.Generator:
    """A generator that depends only on the key and the index.

    Parameters
    ----------
    key : str
        Whatever identifies the stream.
    index : int
        Number of the draw, or of the block of draws.

    Returns
    -------
    numpy.random.Generator
    """
    entropy = int.from_bytes(hashlib.sha256(key.encode()).digest()[:16], "little")
    return np.random.Generator(np.random.SFC64(np.random.SeedSequence(entropy, spawn_key=(index,))))


def unit_variables(rng: np.random.Generator, out: Array, distribution: str) -> None:
    """Fill an array with independent variables of zero mean and unit variance.

    Parameters
    ----------
    rng : numpy.random.Generator
        Where the numbers come from.
    out : ndarray, shape (k, width)
        Filled in place; contiguous. With several rows each column is stratified (a Latin hypercube): every row has the
        distribution asked for, and the column's moments are nearly exact.
    distribution : {"normal", "rectangular", "triangular", "arcsine"}
        Their distribution.
    """
    stratified = len(out) > 1
    if distribution == "normal" and not stratified:
        rng.standard_normal(out=out)
        return
    rng.random(out=out)
    if stratified:
        strata = np.broadcast_to(np.arange(len(out), dtype=float)[:, None], out.shape)
        out += rng.permuted(strata, axis=0)
        out /= len(out)
    if distribution == "normal":
        np.clip(out, 1e-16, 1 - 1e-16, out=out)
        ndtri(out, out=out)
    elif distribution == "rectangular":
        out -= 0.5
        out *= math.sqrt(12)
    elif distribution == "triangular":
        rising = np.minimum(out, 1 - out)
        np.copysign(math.sqrt(6) * (1 - np.sqrt(2 * rising)), out - 0.5, out=out)
    else:
        np.sin(math.pi * (out - 0.5), out=out)
        out *= math.sqrt(2)


def draw_blocks(
    key: str, start: int, stop: int, width: int, fill: Callable[[np.random.Generator, Array], None]
) -> Array:
    """Draws `start` to `stop` of a stream, the same numbers however the range is cut.

    Parameters
    ----------
    key : str
        Identifies the stream.
    start, stop : int
        First draw and one past the last.
    width : int
        Numbers per draw.
    fill : callable
        Fills an array of shape (k, width) from a generator: whole blocks where the width is small, else single draws.

    Returns
    -------
    ndarray, shape (stop - start, width)
    """
    out = np.empty((stop - start, width))
    if width > _FEW:
        for draw in range(start, stop):
            fill(stream(key, draw), out[draw - start : draw - start + 1])
        return out
    for block in range(start // _BLOCK, -(-stop // _BLOCK)):
        numbers = np.empty((_BLOCK, width))
        fill(stream(key, block), numbers)
        first, last = max(start, block * _BLOCK), min(stop, (block + 1) * _BLOCK)
        out[first - start : last - start] = numbers[first - block * _BLOCK : last - block * _BLOCK]
    return out


@dataclass(frozen=True)
class _InputErrors:
    """One source on one input: `latents` independent unit variables, expanded to errors by a linear map."""

    name: str
    key: str
    latents: int
    scale: Array
    expand: Expansion | None
    is_scalar: bool

    def errors(self, latents: Array) -> Array:
        """Errors in SI, (draws, n) or (draws,), from unit variables, (draws, latents), which may be overwritten."""
        if self.expand is None:
            field = latents
            field *= self.scale
        else:
            field = self.expand(latents) * self.scale
        return field[:, 0] if self.is_scalar else field

    def weights(self, slopes: Array, spread: float) -> Array:
        """Effects of variables of given spread, (m, latents), from derivatives by the input, (m, n) or (m,)."""
        scale = spread * self.scale
        if isinstance(self.expand, _Repeated) and not self.is_scalar:
            together: Array = (slopes @ scale)[:, None]
            return together
        effects: Array = (slopes[:, None] if self.is_scalar else slopes) * scale
        return effects if self.expand is None else self.expand.transposed(effects)


class SourceErrors:
    """The errors of one source on all its inputs.

    Parameters
    ----------
    source : Source
        The source, checked against the layouts.
    layouts : mapping of str to InputLayout
        The inputs by name.
    seed : int or sequence of int
        Seed of the survey.
    """

    def __init__(self, source: Source, layouts: Mapping[str, InputLayout], *, seed: Seed) -> None:
        self.source = source
        numbers = (seed,) if isinstance(seed, int) else tuple(seed)
        self._key = f"shared|{source.shared_id}" if source.shared_id else f"survey|{numbers}|{source.name}"
        self._inputs = tuple(self._prepare(name, layouts[name]) for name in source.applies_to)
        # Inputs of two surveys that one error acts on have their variables in common.
        groups: dict[tuple[str, int], list[_InputErrors]] = {}
        for one in self._inputs:
            groups.setdefault((one.key, one.latents), []).append(one)
        self._groups = tuple(tuple(group) for group in groups.values())

    def _prepare(self, name: str, layout: InputLayout) -> _InputErrors:
        source = self.source
        nominal = np.atleast_1d(np.asarray(layout.nominal, dtype=float))
        scale = np.full(layout.size, source.standard_uncertainty)
        if source.relative:
            scale *= nominal
        if source.from_samples and layout.std is not None:
            scale *= layout.std
        scale[~np.isfinite(nominal) | ~np.isfinite(scale)] = 0.0
        latents = layout.size
        expand: Expansion | None = None
        if source.effect == "systematic":
            latents, expand = 1, _Repeated(layout.size)
        elif source.effect == "per_row" and layout.row is not None:
            rows, inverse = np.unique(layout.row, return_inverse=True)
            latents, expand = rows.size, _ByRow(inverse, rows.size)
        elif source.correlation_length is not None and layout.positions is not None:
            latents, expand = correlated_field(layout.positions, source.correlation_length)
        # What errs at each point or row does so anew in another survey.
        common = name.removeprefix(source.prefix) if source.effect == "systematic" else name
        return _InputErrors(name, f"{self._key}|{common}", latents, scale, expand, layout.is_scalar)

    @property
    def latents(self) -> int:
        """Number of independent variables behind the errors of one draw."""
        return sum(group[0].latents for group in self._groups)

    @property
    def doubt_is_common(self) -> bool:
        """Whether one factor per draw expresses what is not known about the uncertainty itself."""
        return math.isfinite(self.source.degrees_of_freedom) and not self.source.from_samples

    def draw(self, start: int, stop: int) -> dict[str, Array]:
        """Errors of the draws `start` to `stop`.

        Parameters
        ----------
        start, stop : int
            First draw and one past the last.

        Returns
        -------
        dict of str to ndarray, shape (stop - start, n), or (stop - start,) for single numbers
            Additive errors in SI by input.
        """
        return {
            one.name: one.errors(latents.copy() if len(group) > 1 else latents)
            for group, latents in zip(self._groups, self._latents(start, stop), strict=True)
            for one in group
        }

    def variables(self, start: int, stop: int) -> Array:
        """The independent variables behind the errors that `draw` gives, of unit variance.

        Parameters
        ----------
        start, stop : int
            First draw and one past the last.

        Returns
        -------
        ndarray, shape (stop - start, latents)
            In the order of `deviation`.
        """
        return np.concatenate(self._latents(start, stop), axis=1) / self.source.spread

    def expanded(self, variables: Array) -> dict[str, Array]:
        """Errors that given independent variables of unit variance make.

        Parameters
        ----------
        variables : ndarray, shape (latents,)
            In the order of `deviation`.

        Returns
        -------
        dict of str to ndarray, shape (n,), or () for single numbers
            Additive errors in SI by input.
        """
        errors, start = {}, 0
        for group in self._groups:
            stop = start + group[0].latents
            for one in group:
                errors[one.name] = one.errors(self.source.spread * variables[None, start:stop])[0]
            start = stop
        return errors

    def effects(self, slopes: Mapping[str, Array]) -> dict[str, Array]:
        """What one standard deviation of each independent variable does to outputs, to first order.

        Parameters
        ----------
        slopes : mapping of str to ndarray, shape (m, n), or (m,) for single numbers
            Derivatives of the m outputs by every element of the source's inputs.

        Returns
        -------
        dict of str to ndarray, shape (m, latents)
            By input, with signs: the transpose of the map from variables to errors. The covariance of the outputs is
            the sum of its products with itself.
        """
        return {one.name: one.weights(slopes[one.name], self.source.spread) for one in self._inputs}

    @property
    def names(self) -> tuple[tuple[str, int], ...]:
        """Input of each independent variable and its number there, in the order of `deviation`.

        Of a variable that acts on two inputs, the first.
        """
        return tuple((name, number) for name, count in self.counts.items() for number in range(count))

    @property
    def counts(self) -> dict[str, int]:
        """Number of independent variables of each input, in the order of `deviation`.

        Of inputs that have them in common, under the first one's name.
        """
        return {group[0].name: group[0].latents for group in self._groups}

    @property
    def streams(self) -> dict[str, tuple[str, ...]]:
        """Inputs that have their variables in common, by what tells these from all others."""
        return {f"{group[0].key}|{group[0].latents}": tuple(one.name for one in group) for group in self._groups}

    @property
    def followed(self) -> bool:
        """Whether its variables can be followed to other surveys: one for each input, not for each point or row."""
        return all(one.is_scalar for one in self._inputs) or self.source.effect == "systematic"

    def _latents(self, start: int, stop: int) -> list[Array]:
        """Variables of each group of inputs, (draws, latents), before they are expanded to errors."""
        source = self.source

        def fill(rng: np.random.Generator, out: Array) -> None:
            unit_variables(rng, out, source.distribution)
            if source.from_samples and math.isfinite(source.degrees_of_freedom):
                out *= doubt(rng, out.shape, source.distribution, source.degrees_of_freedom)

        factor = None
        if self.doubt_is_common:
            factor = draw_blocks(f"{self._key}|doubt", start, stop, 1, lambda rng, out: _fill_doubt(rng, out, source))
        drawn = []
        for one, *_ in self._groups:
            latents = draw_blocks(one.key, start, stop, one.latents, fill)
            if factor is not None:
                latents *= factor
            drawn.append(latents)
        return drawn

    def deviation(self, latent: int) -> dict[str, Array]:
        """Errors when one independent variable is one standard deviation above zero and the others are zero.

        Parameters
        ----------
        latent : int
            Number of the variable, below `latents`.

        Returns
        -------
        dict of str to ndarray, shape (1, n), or (1,) for single numbers
        """
        errors = {}
        for group in self._groups:
            count = group[0].latents
            for one in group:
                unit = np.zeros((1, count))
                if 0 <= latent < count:
                    unit[0, latent] = self.source.spread
                errors[one.name] = one.errors(unit)
            latent -= count
        return errors


@dataclass(frozen=True)
class _Repeated:
    """One variable for all points."""

    size: int

    def __call__(self, latents: Array) -> Array:
        return np.broadcast_to(latents, (len(latents), self.size))

    def transposed(self, weights: Array) -> Array:
        result: Array = weights.sum(axis=1, keepdims=True)
        return result


@dataclass(frozen=True, eq=False)
class _ByRow:
    """One variable for each traverse row."""

    index: NDArray[np.int64]
    rows: int

    def __call__(self, latents: Array) -> Array:
        return latents[:, self.index]

    def transposed(self, weights: Array) -> Array:
        return np.stack([np.bincount(self.index, row, minlength=self.rows) for row in weights])


def doubt(rng: np.random.Generator, shape: tuple[int, ...], distribution: str, nu: float) -> Array:
    """Factors on errors whose standard uncertainty has few degrees of freedom.

    Parameters
    ----------
    rng : numpy.random.Generator
        Where the numbers come from.
    shape : tuple of int
        Their shape.
    distribution : str
        Distribution of the errors: ``"rectangular"``, else normal.
    nu : float
        Degrees of freedom.

    Returns
    -------
    ndarray
    """
    if distribution == "rectangular":
        result: Array = 1 + (2 * rng.random(shape) - 1) / math.sqrt(2 * nu)
    else:
        result = np.sqrt(nu / rng.chisquare(nu, shape))
    return result


def _fill_doubt(rng: np.random.Generator, out: Array, source: Source) -> None:
    out[...] = doubt(rng, out.shape, source.distribution, source.degrees_of_freedom)


class ErrorSampler:
    """The errors of all sources together, draw by draw.

    Parameters
    ----------
    sources : sequence of Source
        The sources of one survey.
    layouts : mapping of str to InputLayout
        The inputs by name.
    seed : int or sequence of int
        Seed of the survey. Two surveys with the same seed, names and layouts get the same errors; surveys that are to
        be compared need seeds of their own, and share only the sources with a `shared_id`.

    Raises
    ------
    SurveyError
        If a source cannot act on these inputs (`check_sources`).
    """

    def __init__(self, sources: Sequence[Source], layouts: Mapping[str, InputLayout], *, seed: Seed) -> None:
        check_sources(sources, layouts)
        self.layouts = dict(layouts)
        self.by_source = tuple(SourceErrors(source, layouts, seed=seed) for source in sources)

    def zeros(self, draws: int) -> dict[str, Array]:
        """No error at all, for every input, as read-only arrays that take no memory.

        Parameters
        ----------
        draws : int
            Length of the leading axis.

        Returns
        -------
        dict of str to ndarray, shape (draws, n), or (draws,) for single numbers
        """
        return {
            name: np.broadcast_to(np.float64(0), (draws,) if layout.is_scalar else (draws, layout.size))
            for name, layout in self.layouts.items()
        }

    def draw(self, start: int, stop: int) -> dict[str, Array]:
        """Sum of the errors of all sources for the draws `start` to `stop`.

        Parameters
        ----------
        start, stop : int
            First draw and one past the last.

        Returns
        -------
        dict of str to ndarray, shape (stop - start, n), or (stop - start,) for single numbers
            Every input of the layouts is there; those that no source acts on are zero.
        """
        total: dict[str, Array] = {}
        for one in self.by_source:
            for name, errors in one.draw(start, stop).items():
                if name in total:
                    total[name] += errors
                else:
                    total[name] = errors
        return self.zeros(stop - start) | total


def draw_errors(
    source: Source, layouts: Mapping[str, InputLayout], *, seed: Seed, draws: int, start: int = 0
) -> dict[str, Array]:
    """Errors of one source.

    Parameters
    ----------
    source : Source
        The source.
    layouts : mapping of str to InputLayout
        The inputs by name.
    seed : int or sequence of int
        Seed of the survey.
    draws : int
        How many draws.
    start : int
        Number of the first draw: chunks give the same numbers as one call.

    Returns
    -------
    dict of str to ndarray, shape (draws, n), or (draws,) for single numbers
        Additive errors in SI by input, for the inputs the source acts on.

    Raises
    ------
    SurveyError
        If the source cannot act on these inputs.
    """
    check_sources([source], layouts)
    return SourceErrors(source, layouts, seed=seed).draw(start, start + draws)
