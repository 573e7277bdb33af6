"""The records of the ledger: what is reported, what it is held against, and what it was made from.

The fields of `Row`, `CrossCheck`, `Comparison`, `BudgetLine` and `Check` are the keys of ``ledger.json``. A number that
is not known is NaN and carries a reason; it is never zero.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

from wakeledger.core.names import CHECKS, METHODS, ROWS

if TYPE_CHECKING:
    pass

#: How an estimate or a compared value stands to the row.
Verdict = Literal["agrees", "disagrees", "not_independent", "unknown"]
#: How a check of the survey came out.
CheckVerdict = Literal["pass", "warn", "fail", "not_applicable"]

VERDICTS: tuple[str, ...] = ("agrees", "disagrees", "not_independent", "unknown")
CHECK_VERDICTS: tuple[str, ...] = ("pass", "warn", "fail", "not_applicable")

#: One drag count in terms of the coefficient.
COUNT = 1e-4


def _require(condition: bool, message: str) -> None:
    if not condition:
        raise ValueError(message)


def _known_row(name: str) -> None:
    _require(name in ROWS, f"row {name!r} is unknown; known rows: {', '.join(ROWS)}")


@dataclass(frozen=True)
class Row:
    """One figure of the ledger with its uncertainty.

    Attributes
    ----------
    name : str
        A row of `wakeledger.core.names.ROWS`.
    value : float
        In `unit`; NaN where it is unknown.
    unit : str
        UDUNITS string of the SI unit.
    standard_uncertainty : float
        k = 1, in `unit`; NaN where it is unknown.
    expanded_uncertainty : float
        Half width of the interval that holds the true value with 95 % probability, in `unit`.
    coverage_factor : float
        Expanded over standard uncertainty.
    degrees_of_freedom : float
        Effective degrees of freedom of the standard uncertainty; may be infinite.
    coefficient, coefficient_standard_uncertainty : float
        The value over reference dynamic pressure and area (and span for moments), and its uncertainty (k = 1); NaN for
        a row that has no coefficient.
    coefficient_corrected : float or None
        The coefficient on the blockage-corrected dynamic pressure, between walls only.
    coefficient_corrected_standard_uncertainty : float or None
        Its uncertainty (k = 1), that of the blockage included; None where it is unknown or there is no such figure.
    reason : str or None
        Why the value or its uncertainty is unknown.
    """

    name: str
    value: float
    unit: str
    standard_uncertainty: float
    expanded_uncertainty: float
    coverage_factor: float
    degrees_of_freedom: float
    coefficient: float = math.nan
    coefficient_standard_uncertainty: float = math.nan
    coefficient_corrected: float | None = None
    reason: str | None = None
    coefficient_corrected_standard_uncertainty: float | None = None

    def __post_init__(self) -> None:
        _known_row(self.name)
        unknown = math.isnan(self.value) or math.isnan(self.standard_uncertainty)
        _require(bool(self.reason) or not unknown, f"{self.name}: an unknown value or uncertainty needs a reason")
        _require(not self.standard_uncertainty < 0, f"{self.name}: the standard uncertainty is negative")

    @property
    def counts(self) -> float:
        """The coefficient in counts (1 count = 1e-4)."""
        return self.coefficient / COUNT

    @property
    def coefficient_expanded_uncertainty(self) -> float:
        """Expanded uncertainty of the coefficient, with the row's coverage factor."""
        return self.coverage_factor * self.coefficient_standard_uncertainty


@dataclass(frozen=True)
class CrossCheck:
    """Another method's estimate of a row, held against the primary one (``estimates`` of ledger.json).

    Attributes
    ----------
    row, method : str
        The row and the method (`wakeledger.core.names.METHODS`).
    value, standard_uncertainty : float
        The estimate and its standard uncertainty, in `unit`.
    unit : str
        UDUNITS string of the SI unit.
    difference : float
        Estimate minus primary value.
    expected_difference : float
        What this method is expected to read above the primary one.
    normalised_error : float
        E_n of ISO/IEC 17043: |difference - expected difference| over the expanded uncertainty of that difference.
    verdict : {"agrees", "disagrees", "not_independent", "unknown"}
        The outcome; only an independent estimate can agree.
    reason : str or None
        Why something is unknown, or why the estimate is not independent.
    """

    row: str
    method: str
    value: float
    unit: str
    standard_uncertainty: float
    difference: float
    expected_difference: float
    normalised_error: float
    verdict: Verdict
    reason: str | None = None

    def __post_init__(self) -> None:
        _known_row(self.row)
        methods = METHODS.get(self.row, ())
        _require(self.method in methods, f"{self.method!r} is no method of row {self.row!r}; its methods: {methods}")
        _require(self.verdict in VERDICTS, f"verdict {self.verdict!r} is unknown; allowed: {', '.join(VERDICTS)}")
        _require(
            bool(self.reason) or self.verdict != "unknown", f"{self.row}, {self.method}: verdict unknown needs a reason"
        )


@dataclass(frozen=True)
class Comparison:
    """A value from elsewhere (balance, near field) that a row is held against.

    Attributes
    ----------
    name : str
        What it is ("balance").
    row : str
        The row it is compared with.
    value, standard_uncertainty : float
        The compared value and its standard uncertainty, in `unit`.
    unit : str
        UDUNITS string of the row's SI unit.
    difference : float
        Row minus compared value.
    normalised_error : float
        E_n of ISO/IEC 17043.
    verdict : {"agrees", "disagrees", "not_independent", "unknown"}
        The outcome.
    reason : str or None
        Why the verdict is unknown.
    """

    name: str
    row: str
    value: float
    unit: str
    standard_uncertainty: float
    difference: float
    normalised_error: float
    verdict: Verdict
    reason: str | None = None

    def __post_init__(self) -> None:
        _known_row(self.row)
        _require(self.verdict in VERDICTS, f"verdict {self.verdict!r} is unknown; allowed: {', '.join(VERDICTS)}")
        _require(bool(self.reason) or self.verdict != "unknown", f"{self.name}: verdict unknown needs a reason")


@dataclass(frozen=True)
class BudgetLine:
    """One source's part in a row's standard uncertainty.

    Attributes
    ----------
    row, source : str
        The row and the source's name.
    standard_uncertainty : float
        Its contribution, k = 1, in the row's unit.
    share : float
        Its part of the row's variance; the shares of one row add to 1.
    """

    row: str
    source: str
    standard_uncertainty: float
    share: float

    def __post_init__(self) -> None:
        _known_row(self.row)


@dataclass(frozen=True)
class Check:
    """One check of the survey's quality.

    Attributes
    ----------
    name : str
        A check of `wakeledger.core.names.CHECKS`.
    verdict : {"pass", "warn", "fail", "not_applicable"}
        The outcome.
    value, limit : float
        What was found and what is allowed, dimensionless; NaN where the check does not apply.
    message : str
        What it means and what to do.
    """

    name: str
    verdict: CheckVerdict
    value: float
    limit: float
    message: str

    def __post_init__(self) -> None:
        _require(self.name in CHECKS, f"check {self.name!r} is unknown; known checks: {', '.join(CHECKS)}")
        allowed = ", ".join(CHECK_VERDICTS)
        _require(self.verdict in CHECK_VERDICTS, f"verdict {self.verdict!r} is unknown; allowed: {allowed}")
        _require(bool(self.message), f"check {self.name} needs a message")


@dataclass(frozen=True)
class TunnelFigure:
    """What the walls of a tunnel do to the flow at the model (``tunnel`` of ledger.json).

    Attributes
    ----------
    name : str
        Of the figure.
    value, standard_uncertainty : float
        In `unit`; NaN where unknown.
    unit : str
        UDUNITS string.
    meaning : str
        What it is, with its sign.
    reason : str or None
        Why something is unknown.
    """

    name: str
    value: float
    unit: str
    standard_uncertainty: float
    meaning: str
    reason: str | None = None


@dataclass(frozen=True)
class Diagnostic:
    """Another form of a computed plane's drag, or a power, that is in no row (``diagnostics`` of ledger.json).

    Attributes
    ----------
    name : str
        Of the figure.
    value : float
        In `unit`.
    unit : str
        UDUNITS string.
    meaning : str
        What it is, with its sign.
    """

    name: str
    value: float
    unit: str
    meaning: str
