"""The ledger of one survey: rows, what they are held against, and what they were made from."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from wakeledger.ledger.record_table import RecordTable
from wakeledger.ledger.rows import BudgetLine, Check, Comparison, CrossCheck, Diagnostic, Row, TunnelFigure

if TYPE_CHECKING:
    import pandas as pd
    import xarray as xr

    from wakeledger.core.points import Points
    from wakeledger.ledger.closure import Closure
    from wakeledger.ledger.contributions import Contributions
    from wakeledger.ledger.propagation import Propagation


class Budget(RecordTable[BudgetLine]):
    """Every row's uncertainty by source, largest first."""

    __slots__ = ()
    record = BudgetLine
    dimension = "line"


class Estimates(RecordTable[CrossCheck]):
    """Other methods' estimates, each held against its row."""

    __slots__ = ()
    record = CrossCheck
    dimension = "estimate"


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
    estimates : Estimates
        Other methods' estimates of the rows.
    comparisons : tuple of Comparison
        Values from elsewhere the rows are held against.
    budget : Budget
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
        if len(set(names)) != len(names):
            raise ValueError(f"rows are named twice: {names}")
        shape, found = (len(names), len(names)), np.shape(self.covariance)
        if found != shape:
            raise ValueError(f"the covariance has shape {found}, the {len(names)} rows need {shape}")
        object.__setattr__(self, "estimates", Estimates(self.estimates))
        object.__setattr__(self, "budget", Budget(self.budget))

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
