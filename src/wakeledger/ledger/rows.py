"""The records of the ledger: what is reported, what it is held against, and what it was made from.

The fields of `Row`, `CrossCheck`, `Comparison`, `BudgetLine` and `Check` are the keys of ``ledger.json``. A number that
is not known is NaN and carries a reason; it is never zero.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.names import CHECKS, METHODS, ROWS

if TYPE_CHECKING:
    import pandas as pd
    import xarray as xr

    from wakeledger.core.points import Points
    from wakeledger.ledger.closure import Closure
    from wakeledger.ledger.contributions import Contributions
    from wakeledger.ledger.propagation import Propagation

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


@dataclass(frozen=True)
class Combined:
    """How the planes of several stations were made into one set of rows.

    Attributes
    ----------
    method : {"extrapolated", "weighted_mean"}
        Whether the drags are those at the trailing edge by a resolved trend, or means weighted with the covariance.
    reason : str
        Why, and what limits it.
    diffusivity, diffusivity_uncertainty : float
        Effective diffusivity of the trailing vortices and its standard uncertainty, m²/s; NaN where unknown.
    chi_square : float
        Misfit of the planes with each other.
    degrees_of_freedom : int
        Data less parameters.
    decay : tuple of float
        Induced drag that the vortices have lost by each station, N, added back in an extrapolation.
    decay_uncertainty : tuple of float
        Its standard uncertainty, N.
    """

    method: str
    reason: str
    diffusivity: float
    diffusivity_uncertainty: float
    chi_square: float
    degrees_of_freedom: int
    decay: tuple[float, ...]
    decay_uncertainty: tuple[float, ...]

    def __post_init__(self) -> None:
        object.__setattr__(self, "decay", tuple(self.decay))
        object.__setattr__(self, "decay_uncertainty", tuple(self.decay_uncertainty))


@dataclass(frozen=True, eq=False)
class KeptSurvey:
    """Another survey that a ledger rests on, whole.

    Attributes
    ----------
    survey_text : str
        Its survey file's text.
    raw : Points
        Its points as read.
    """

    survey_text: str
    raw: Points


def _empty() -> Mapping[str, str]:
    return MappingProxyType({})


@dataclass(frozen=True, eq=False)
class Ledger:
    """Everything one survey came to, and everything needed to reduce it again.

    Attributes
    ----------
    title : str
        Title of the survey.
    test : mapping of str to str
        The ``[test]`` table of the survey file.
    compressible : bool
        Whether the compressible relations were used.
    rows : tuple of Row
        The figures.
    estimates : tuple of CrossCheck
        Other methods' estimates of the rows.
    comparisons : tuple of Comparison
        Values from elsewhere the rows are held against.
    budget : tuple of BudgetLine
        Every row's uncertainty by source, largest first.
    propagation : tuple of Propagation
        How the uncertainty of each row came about (`wakeledger.ledger.propagation`).
    checks : tuple of Check
        The checks of the survey.
    covariance : ndarray, shape (m, m)
        Covariance of the m rows, in the product of their units; NaN where unknown.
    plane : Dataset
        Fields in wind axes on a uniform grid, dimensions (z, y) (`wakeledger.core.plane.make_plane`); of a
        section, profiles along its traverse, one of the dimensions being 1 (`wakeledger.core.traverse.make_traverse`).
    raw : Points
        The points as read, lossless.
    survey_text : str
        The survey file's text.
    reference : mapping of str to float
        The undisturbed stream, SI (speed, density, dynamic_pressure, ...).
    model : mapping of str to float
        Reference area, span, mean chord, SI.
    notes : tuple of str
        Sentences about the choices that were made.
    wake_line, vortices, span : Dataset or None
        The wake's trace, the identified vortices, the span loading, where found.
    contributions : Contributions or None
        What each error does to the rows, with its sign; None where no uncertainty is known.
    repeats : Dataset or None
        Of a ledger that combines several surveys: their rows, weights and scatter (`wakeledger.run.ledgers.repeats`).
    calibrations : mapping of str to Dataset
        Calibrations of the probes whose hole pressures were reduced, whole, by the name the survey file gives them.
    tunnel : tuple of TunnelFigure
        What the walls do, where there are any.
    companions : mapping of str to KeptSurvey
        Surveys that this one rests on, by what they stand for ("empty_tunnel", "support_tare").
    stations : tuple of Ledger
        Ledgers of several planes, each of one station; empty where there is one plane. `plane`, `raw`, the wake line,
        the vortices and the span loading are then those of the first.
    combined : Combined or None
        How the stations were made into the rows.
    diagnostics : tuple of Diagnostic
        Other forms of the drag of a computed plane, for information.
    closures : tuple of Closure
        Drags of computed planes held against the solver's surface forces, taken apart by cause.
    inputs : mapping of str to str
        SHA-256 of each input file by name.
    provenance : mapping of str to str
        Package versions (``version <package>``), ``command`` and ``time`` (UTC, ISO 8601).

    Raises
    ------
    ValueError
        If two rows have one name, or the covariance does not have one row and column per row.
    """

    title: str
    compressible: bool
    rows: tuple[Row, ...]
    covariance: NDArray[np.float64]
    plane: xr.Dataset
    raw: Points
    survey_text: str
    estimates: tuple[CrossCheck, ...] = ()
    comparisons: tuple[Comparison, ...] = ()
    budget: tuple[BudgetLine, ...] = ()
    propagation: tuple[Propagation, ...] = ()
    checks: tuple[Check, ...] = ()
    notes: tuple[str, ...] = ()
    test: Mapping[str, str] = field(default_factory=_empty)
    reference: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))
    model: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))
    wake_line: xr.Dataset | None = None
    vortices: xr.Dataset | None = None
    span: xr.Dataset | None = None
    contributions: Contributions | None = None
    repeats: xr.Dataset | None = None
    calibrations: Mapping[str, xr.Dataset] = field(default_factory=lambda: MappingProxyType({}))
    tunnel: tuple[TunnelFigure, ...] = ()
    companions: Mapping[str, KeptSurvey] = field(default_factory=lambda: MappingProxyType({}))
    stations: tuple[Ledger, ...] = ()
    combined: Combined | None = None
    diagnostics: tuple[Diagnostic, ...] = ()
    closures: tuple[Closure, ...] = ()
    inputs: Mapping[str, str] = field(default_factory=_empty)
    provenance: Mapping[str, str] = field(default_factory=_empty)

    def __post_init__(self) -> None:
        names = [row.name for row in self.rows]
        _require(len(set(names)) == len(names), f"rows are named twice: {names}")
        shape = (len(names), len(names))
        found = np.shape(self.covariance)
        _require(found == shape, f"the covariance has shape {found}, the {len(names)} rows need {shape}")

    def row(self, name: str) -> Row:
        """The row with this name.

        Parameters
        ----------
        name : str
            A row of the ledger.

        Returns
        -------
        Row

        Raises
        ------
        KeyError
            If the ledger has no such row; the message lists those it has.
        """
        for row in self.rows:
            if row.name == name:
                return row
        raise KeyError(f"the ledger has no row {name!r}; it has {', '.join(row.name for row in self.rows)}")

    @property
    def station(self) -> float:
        """Distance of the plane behind the trailing edge, m; of the first of several."""
        return float(self.plane.coords["x"])

    @property
    def failed(self) -> bool:
        """Whether any check failed."""
        return any(check.verdict == "fail" for check in self.checks)

    def to_dataframe(self) -> pd.DataFrame:
        """The rows as a table.

        Returns
        -------
        DataFrame
            Indexed by the row's name, one column per field of `Row`, and ``counts``.
        """
        from wakeledger.ledger.tabular import rows_frame

        return rows_frame(self)

    def to_dataset(self) -> xr.Dataset:
        """The rows, their covariance and the reference state, as at the root of the archive.

        Returns
        -------
        Dataset
            Dimensions row and row_b.
        """
        from wakeledger.ledger.tabular import rows_dataset

        return rows_dataset(self)

    def _repr_html_(self) -> str:
        from wakeledger.ledger.tabular import rows_html

        return rows_html(self)
