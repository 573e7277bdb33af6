"""What may be wrong with the inputs: sources of uncertainty and the layout of the inputs they act on."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Literal, get_args

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import SurveyError, nearest
from wakeledger.core.grid import Array

Effect = Literal["random", "systematic", "per_row"]
Distribution = Literal["normal", "rectangular", "triangular", "arcsine"]

_KURTOSIS: Mapping[str, float] = {"normal": 3.0, "rectangular": 1.8, "triangular": 2.4, "arcsine": 1.5}


@dataclass(frozen=True)
class Source:
    """One source of uncertainty: what it acts on, how large it is and how its errors hang together.

    Attributes
    ----------
    name : str
        Name of the source, unique in a survey.
    applies_to : tuple of str
        Names of the inputs it acts on. Each input has errors of its own, independent of the other inputs' errors.
    effect : {"random", "systematic", "per_row"}
        ``random``: every element of an input has its own error; ``systematic``: one error per input for the whole
        survey; ``per_row``: one error per input for each traverse row.
    standard_uncertainty : float
        Standard uncertainty, k = 1: in SI, or a fraction of the nominal value (`relative`), or a multiple of each
        element's own standard deviation (`from_samples`).
    relative : bool
        Multiply by the nominal value, element by element and with its sign: a relative systematic error is a gain.
    from_samples : bool
        Multiply by the layout's `std`, element by element. For random effects only.
    distribution : {"normal", "rectangular", "triangular", "arcsine"}
        Shape of the distribution, scaled to `standard_uncertainty`.
    correlation_length : float or None
        Length L, m, for random effects that vary smoothly in space: errors of one input at a distance d are jointly
        normal with correlation exp(-(d/L)²/2).
    degrees_of_freedom : float
        How well `standard_uncertainty` is known; infinite when it is taken as exact.
    shared_id : str or None
        Names an instrument: every survey with this identity has the same errors, draw for draw, whatever its seed.
    prefix : str
        What the names of inputs of another survey begin with here; their errors are those of the inputs without it.

    Raises
    ------
    SurveyError
        If a value is outside its range or two of them contradict each other.

    Notes
    -----
    With finite degrees of freedom ν a normal source becomes a scaled and shifted t distribution (JCGM 101:2008,
    6.4.9): `standard_uncertainty` is its scale, s/√n of the observations, and the standard deviation of the errors is
    larger by √(ν/(ν - 2)). A rectangular one gets limits that are themselves uncertain by the fraction (2ν)^(-1/2)
    (JCGM 101:2008, 6.4.3, as 9.5 there restates GUM H.1); its standard deviation is larger by √(1 + 1/(6ν)).
    The uncertainty was assessed once, so the doubt about it is one factor per draw, common to everything the source
    acts on; with `from_samples` each element was assessed by itself and has a factor of its own.
    """

    name: str
    applies_to: tuple[str, ...]
    effect: Effect
    standard_uncertainty: float
    relative: bool = False
    from_samples: bool = False
    distribution: Distribution = "normal"
    correlation_length: float | None = None
    degrees_of_freedom: float = math.inf
    shared_id: str | None = None
    prefix: str = ""

    def __post_init__(self) -> None:
        for key, value, allowed in (
            ("effect", self.effect, get_args(Effect)),
            ("distribution", self.distribution, get_args(Distribution)),
        ):
            if value not in allowed:
                self._refuse(f"{key} is {value!r}", f"allowed are {', '.join(allowed)}")
        if not self.applies_to:
            self._refuse("applies_to names no input", "name at least one")
        if len(set(self.applies_to)) != len(self.applies_to):
            self._refuse("applies_to names an input twice", "name each input once")
        if not (math.isfinite(self.standard_uncertainty) and self.standard_uncertainty >= 0):
            self._refuse(
                f"standard_uncertainty is {self.standard_uncertainty}", "give a finite value that is not negative"
            )
        if not self.degrees_of_freedom > 0:
            self._refuse(f"degrees_of_freedom is {self.degrees_of_freedom}", "give a positive number")
        if self.from_samples and (self.relative or self.effect != "random"):
            self._refuse("from_samples stands with relative or without a random effect", "use it for random effects")
        if self.correlation_length is not None:
            if not self.correlation_length > 0:
                self._refuse(f"correlation_length is {self.correlation_length} m", "give a positive length")
            if self.effect != "random" or self.distribution != "normal":
                self._refuse(
                    f"correlation_length stands with a {self.effect} effect and a {self.distribution} distribution",
                    "only random effects with a normal distribution can be correlated in space",
                )
        if math.isfinite(self.degrees_of_freedom) and self.distribution in ("triangular", "arcsine"):
            self._refuse(
                f"degrees_of_freedom stands with a {self.distribution} distribution",
                "use it with a normal or a rectangular one",
            )

    def _refuse(self, found: str, remedy: str) -> None:
        raise SurveyError(found, place=f"uncertainty source {self.name!r}", remedy=remedy)

    @property
    def spread(self) -> float:
        """Standard deviation of the errors over `standard_uncertainty`; infinite for a t with ν ≤ 2."""
        return spread(self.distribution, self.degrees_of_freedom)

    @property
    def kurtosis(self) -> float:
        """Fourth moment of one error over the square of its variance; infinite for a t with ν ≤ 4."""
        return kurtosis(self.distribution, self.degrees_of_freedom)


def spread(distribution: str, degrees_of_freedom: float) -> float:
    """Standard deviation of an error over its standard uncertainty as stated.

    Parameters
    ----------
    distribution : {"normal", "rectangular", "triangular", "arcsine"}
        Distribution of the error.
    degrees_of_freedom : float
        How well the standard uncertainty is known.

    Returns
    -------
    float
        Infinite for a t with ν ≤ 2.
    """
    nu = degrees_of_freedom
    if math.isinf(nu):
        return 1.0
    if distribution == "rectangular":
        return math.sqrt(1 + 1 / (6 * nu))
    return math.sqrt(nu / (nu - 2)) if nu > 2 else math.inf


def kurtosis(distribution: str, degrees_of_freedom: float) -> float:
    """Fourth moment of an error over the square of its variance.

    Parameters
    ----------
    distribution : {"normal", "rectangular", "triangular", "arcsine"}
        Distribution of the error.
    degrees_of_freedom : float
        How well its standard uncertainty is known.

    Returns
    -------
    float
        Infinite for a t with ν ≤ 4.
    """
    nu = degrees_of_freedom
    plain = _KURTOSIS[distribution]
    if math.isinf(nu):
        return plain
    if distribution == "rectangular":
        d = 1 / math.sqrt(2 * nu)
        return plain * (1 + 2 * d**2 + d**4 / 5) / (1 + d**2 / 3) ** 2
    return plain * (nu - 2) / (nu - 4) if nu > 4 else math.inf


@dataclass(frozen=True)
class InputLayout:
    """Shape and nominal values of one input that errors are added to.

    Attributes
    ----------
    nominal : ndarray, shape (n,), or float
        Nominal values in SI; NaN marks a missing element, whose error is zero.
    positions : ndarray, shape (n, 2), or None
        Where each element was measured, m (any two coordinates of the plane).
    row : ndarray of int, shape (n,), or None
        Traverse row of each element.
    std : ndarray, shape (n,), or None
        Standard uncertainty of each element from its own samples (the standard deviation over the root of their
        number, where the element is a mean), SI.

    Raises
    ------
    ValueError
        If the arrays do not have one entry per element.
    """

    nominal: Array | float
    positions: Array | None = None
    row: NDArray[np.int64] | None = None
    std: Array | None = None

    def __post_init__(self) -> None:
        if np.ndim(self.nominal) > 1:
            raise ValueError(f"nominal has shape {np.shape(self.nominal)}; give a flat array or one number")
        for name, array, shape in (
            ("positions", self.positions, (self.size, 2)),
            ("row", self.row, (self.size,)),
            ("std", self.std, (self.size,)),
        ):
            if array is not None and np.shape(array) != shape:
                raise ValueError(f"{name} has shape {np.shape(array)}; {shape} is needed beside nominal")

    @property
    def size(self) -> int:
        """Number of elements; 1 for a single number."""
        return int(np.size(self.nominal))

    @property
    def is_scalar(self) -> bool:
        """Whether the input is one number rather than an array."""
        return np.ndim(self.nominal) == 0


def check_sources(sources: Iterable[Source], layouts: Mapping[str, InputLayout]) -> None:
    """Refuse sources that cannot act on these inputs.

    Parameters
    ----------
    sources : iterable of Source
        The sources of one survey.
    layouts : mapping of str to InputLayout
        The inputs by name.

    Raises
    ------
    SurveyError
        If two sources have one name, a source names an unknown input, or an input lacks the rows, positions or standard
        deviations that a source needs, or the degrees of freedom are too few to draw from.
    """
    seen: set[str] = set()
    for source in sources:
        place = f"uncertainty source {source.name!r}"
        if source.name in seen:
            raise SurveyError("the name is used twice", place=place, remedy="give each source a name of its own")
        seen.add(source.name)
        if math.isinf(source.spread):
            raise SurveyError(
                f"degrees_of_freedom is {source.degrees_of_freedom:g}",
                place=place,
                remedy="a t distribution has a standard deviation only above 2; give more, or a rectangular one",
            )
        if math.isfinite(source.degrees_of_freedom) and source.degrees_of_freedom <= 0.5:
            raise SurveyError(
                f"degrees_of_freedom is {source.degrees_of_freedom:g}", place=place, remedy="give more than 0.5"
            )
        for name in source.applies_to:
            if name not in layouts:
                hint = nearest(name, layouts)
                known = f"did you mean {hint}?" if hint else f"the inputs of this survey are {', '.join(layouts)}"
                raise SurveyError(
                    f"applies_to names {name!r}, which this survey does not have", place=place, remedy=known
                )
            layout = layouts[name]
            if source.effect == "per_row" and layout.row is None and not layout.is_scalar:
                raise SurveyError(
                    f"effect is per_row, but the rows of {name} are not known",
                    place=place,
                    remedy="name a row column, give data on a grid, or use random or systematic",
                )
            if source.correlation_length is not None and layout.positions is None and layout.size > 1:
                raise SurveyError(
                    f"correlation_length is given, but {name} has no positions",
                    place=place,
                    remedy="leave it out for this input",
                )
            if source.from_samples and layout.std is None:
                raise SurveyError(
                    f"the uncertainty is to come from the samples, but {name} has no standard deviations",
                    place=place,
                    remedy="name a std column",
                )
