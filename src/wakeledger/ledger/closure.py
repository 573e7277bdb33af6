"""How a far-field value closes on the near-field one: the difference, and what each known cause contributes to it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from wakeledger.core.errors import SurveyError
from wakeledger.ledger.crosscheck import COVERAGE_FACTOR, difference_uncertainty, normalised_error, verdict_of
from wakeledger.ledger.rows import COUNT, Verdict

#: Causes that can make a far-field value differ from the near-field one, in the order in which they are printed.
CAUSES: tuple[str, ...] = ("station", "mask", "walls", "reference_level", "resolution", "decay", "numerical")


@dataclass(frozen=True)
class NearField:
    """Forces integrated over the body's surface, in the row's unit, of the whole configuration.

    Attributes
    ----------
    total : float
        Sum of pressure and friction.
    standard_uncertainty : float
        k = 1; from a grid series, or NaN where it is not known.
    pressure, friction : float
        Its parts; NaN where they are not given.

    Raises
    ------
    SurveyError
        If the parts do not add up to the total within 0.1 % of the larger of them.
    """

    total: float
    standard_uncertainty: float
    pressure: float = math.nan
    friction: float = math.nan

    def __post_init__(self) -> None:
        parts = self.pressure + self.friction
        if abs(parts - self.total) > 1e-3 * max(abs(self.pressure), abs(self.friction), abs(self.total)):
            raise SurveyError(
                f"near-field pressure {self.pressure:g} and friction {self.friction:g} add up to {parts:g},"
                f" not to the total {self.total:g}",
                place="[[compare]]",
                remedy="give the three for the same body, half or whole, or leave the parts out",
            )


@dataclass(frozen=True)
class Cause:
    """What one cause makes of the difference, in the row's unit.

    Attributes
    ----------
    name : str
        One of `CAUSES`.
    difference : float
        By how much it makes the far-field value larger than the near-field one; zero where only its size is known.
    standard_uncertainty : float
        k = 1, of that; what the far-field value's own uncertainty does not hold already.
    note : str
        How it was found, in a sentence.

    Raises
    ------
    ValueError
        If the name is not known or the uncertainty is negative.
    """

    name: str
    difference: float
    standard_uncertainty: float
    note: str = ""

    def __post_init__(self) -> None:
        if self.name not in CAUSES:
            raise ValueError(f"cause {self.name!r} is unknown; known: {', '.join(CAUSES)}")
        if self.standard_uncertainty < 0:
            raise ValueError(f"cause {self.name}: the standard uncertainty is negative")


@dataclass(frozen=True)
class Closure:
    """A far-field row against the near field, in the row's unit.

    Attributes
    ----------
    row : str
        The row.
    far, near : float
        The two values.
    difference : float
        Far minus near.
    standard_uncertainty : float
        Of the difference, without the causes.
    normalised_error : float
        E_n of the difference as it stands.
    explained : float
        Sum of what the causes contribute.
    left_over : float
        Difference less what is explained.
    left_over_uncertainty : float
        Its standard uncertainty, the causes' included.
    left_over_error : float
        E_n of what is left over.
    verdict : {"agrees", "disagrees", "unknown"}
        Of what is left over.
    causes : tuple of Cause
        In the order of `CAUSES`.
    errors : tuple of float
        Each cause's part of E_n of the difference, its sign included: it and the left-over's part add up to ±E_n.
    counts_per_unit : float
        Drag counts of one unit of the row; NaN where there is no coefficient.
    """

    row: str
    far: float
    near: float
    difference: float
    standard_uncertainty: float
    normalised_error: float
    explained: float
    left_over: float
    left_over_uncertainty: float
    left_over_error: float
    verdict: Verdict
    causes: tuple[Cause, ...]
    errors: tuple[float, ...]
    counts_per_unit: float

    @property
    def counts(self) -> dict[str, float]:
        """Difference, each cause and what is left over, in counts."""
        parts = {"difference": self.difference, **{cause.name: cause.difference for cause in self.causes}}
        return {name: value * self.counts_per_unit for name, value in {**parts, "left_over": self.left_over}.items()}


def close(
    row: str,
    *,
    far: float,
    far_uncertainty: float,
    near: NearField,
    causes: Sequence[Cause] = (),
    covariance: float = 0.0,
    coefficient_scale: float = math.nan,
) -> Closure:
    """Hold a far-field row against the near field and take the difference apart.

    Parameters
    ----------
    row : str
        Name of the row.
    far, far_uncertainty : float
        Value and standard uncertainty (k = 1) of the whole configuration.
    near : NearField
        The near-field value.
    causes : sequence of Cause
        What is known to make the two differ, each name once.
    covariance : float
        Covariance of far and near, the unit squared.
    coefficient_scale : float
        Force of a unit coefficient, q S.

    Returns
    -------
    Closure

    Raises
    ------
    ValueError
        If a cause is named twice, or the covariance is larger than the uncertainties allow.

    Notes
    -----
    A cause whose uncertainty is unknown (NaN) leaves the verdict unknown: it cannot be said that the two agree.
    """
    names = [cause.name for cause in causes]
    if len(set(names)) < len(names):
        raise ValueError(f"a cause is named twice: {', '.join(names)}")
    ordered = tuple(sorted(causes, key=lambda cause: CAUSES.index(cause.name)))
    difference = far - near.total
    own = difference_uncertainty(far_uncertainty, near.standard_uncertainty, covariance)
    explained = math.fsum(cause.difference for cause in ordered)
    left_over = difference - explained
    together = math.hypot(own, *(cause.standard_uncertainty for cause in ordered))
    error = normalised_error(left_over, 0.0, together)
    unit = COVERAGE_FACTOR * own
    return Closure(
        row=row,
        far=far,
        near=near.total,
        difference=difference,
        standard_uncertainty=own,
        normalised_error=normalised_error(difference, 0.0, own),
        explained=explained,
        left_over=left_over,
        left_over_uncertainty=together,
        left_over_error=error,
        verdict=verdict_of(error),
        causes=ordered,
        errors=tuple(cause.difference / unit if unit > 0 else math.nan for cause in ordered),
        counts_per_unit=1 / (coefficient_scale * COUNT),
    )
