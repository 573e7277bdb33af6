"""The records of a grid series: far and near field on several grids, their observed orders, and the JSON document."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from itertools import pairwise
from types import MappingProxyType
from typing import TYPE_CHECKING, Any, Literal

from wakeledger.confidence.grid_convergence import COVERAGE_FACTOR, LEAST_RATIO, ORDER_LIMITS, GridConvergence
from wakeledger.ledger.crosscheck import normalised_error, verdict_of
from wakeledger.ledger.rounding import rounded, significant
from wakeledger.ledger.rows import COUNT

if TYPE_CHECKING:
    import pandas as pd

    from wakeledger.ledger.rows import Verdict as Agreement

#: Version of the document `grid_series_json` makes.
JSON_FORMAT = 1

#: What a series comes to. Only the first is trusted.
Verdict = Literal[
    "monotone", "assumed", "close_grids", "out_of_range", "oscillatory", "divergent", "unchanged", "unknown"
]
#: Those whose extrapolated value is near enough to be shown in a figure or a difference.
EXTRAPOLATED: tuple[Verdict, ...] = ("monotone", "assumed", "close_grids")
#: Name of the field that the rows of the ledgers are of.
FAR_FIELD = "far field"


@dataclass(frozen=True)
class Grid:
    """One of the grids.

    Attributes
    ----------
    title : str
        Title of its survey.
    cells : float
        Number of cells.
    size : float
        Representative cell size over that of the finest grid.
    test : mapping of str to str
        The ``[test]`` table.
    file : str
        Name of the archive; empty where it was in memory.
    inputs : mapping of str to str
        SHA-256 of its inputs.
    failed : tuple of str
        Its failed checks, in words.
    """

    title: str
    cells: float
    size: float
    test: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))
    file: str = ""
    inputs: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))
    failed: tuple[str, ...] = ()


@dataclass(frozen=True)
class Series:
    """One number on all grids.

    Attributes
    ----------
    row : str
        The row that it is, or is compared with.
    source : str
        `FAR_FIELD`, or the name of the compared value.
    unit : str
        UDUNITS string of the SI unit.
    values : tuple of float
        On each grid, coarsest first; NaN where unknown.
    found : GridConvergence or None
        What the finest three grids, or the two, say; None where a value is unknown.
    own_uncertainty : float
        Standard uncertainty that the finest grid's ledger gives, for all but the grid of the flow solver; NaN where
        unknown.
    counts_per_unit : float
        Counts of one unit; NaN where it is no drag or has no coefficient.
    reason : str or None
        Why nothing was found.
    """

    row: str
    source: str
    unit: str
    values: tuple[float, ...]
    found: GridConvergence | None
    own_uncertainty: float = math.nan
    counts_per_unit: float = math.nan
    reason: str | None = None

    def __post_init__(self) -> None:
        if self.found is None and not self.reason:
            raise ValueError(f"{self.row}, {self.source}: a series that says nothing needs a reason")

    @property
    def verdict(self) -> Verdict:
        """What the series comes to."""
        if self.found is None:
            return "unknown"
        if self.found.convergence == "converged" or math.isnan(self.found.standard_uncertainty):
            return "unchanged"
        if self.found.convergence in ("divergent", "oscillatory", "assumed"):
            return self.found.convergence
        if not ORDER_LIMITS[0] <= self.found.order <= ORDER_LIMITS[1]:
            return "out_of_range"
        return "close_grids" if min(self.found.ratios) < LEAST_RATIO else "monotone"

    @property
    def trusted(self) -> bool:
        """Whether observed order and index can be trusted."""
        return self.verdict == "monotone"

    @property
    def fine(self) -> float:
        """Value on the finest grid."""
        return self.values[-1]

    @property
    def standard_uncertainty(self) -> float:
        """Standard uncertainty of the finest grid's value from its cells (k = 1)."""
        return math.nan if self.found is None else self.found.standard_uncertainty

    @property
    def expanded_uncertainty(self) -> float:
        """The same with the index's coverage factor, in the unit: the index times the value where it is trusted."""
        return COVERAGE_FACTOR * self.standard_uncertainty

    @property
    def extrapolated(self) -> float:
        """Value extrapolated to zero cell size; NaN where there is none."""
        return math.nan if self.found is None else self.found.extrapolated

    @property
    def scale(self) -> tuple[float, str]:
        """What a value is multiplied by to be shown, and the unit it then has (UDUNITS, or counts)."""
        return (self.counts_per_unit, "counts") if math.isfinite(self.counts_per_unit) else (1.0, self.unit)

    @property
    def within_own(self) -> bool:
        """Whether all values that were used differ by less than the row's own standard uncertainty."""
        used = self.values[-3:]
        return self.found is not None and 0 < max(used) - min(used) < self.own_uncertainty

    @property
    def statement(self) -> str:
        """What the grids say, in words."""
        head = f"{self.row.replace('_', ' ')}, {self.source}"
        if self.found is None:
            return f"{head}: nothing can be said ({self.reason})."
        scale, unit = self.scale
        factor = abs(scale)
        value, expanded = rounded(scale * self.fine, factor * self.expanded_uncertainty)
        unit = "" if unit == "1" else f" {unit}"
        on_finest = f"{value} ± {expanded}{unit} on the finest grid"
        found = self.found
        if self.verdict == "unchanged":
            said = on_finest
        elif self.verdict == "divergent":
            said = f"no order, {on_finest}, ± the spread of the grids"
        else:
            known = "assumed" if self.verdict == "assumed" else "observed"
            index = f", index {100 * found.index:.2g} %" if math.isfinite(found.index) else ""
            limit = significant(scale * found.extrapolated, 4)
            if math.isfinite(factor * self.expanded_uncertainty):
                limit = rounded(scale * found.extrapolated, factor * self.expanded_uncertainty)[0]
            said = f"{known} order {found.order:.2f}, {on_finest}{index}, {limit} extrapolated"
        if not self.trusted:
            said += f"; not trusted: {found.reason}"
        if self.within_own:
            own = significant(factor * self.own_uncertainty, 2)
            said += (
                f"; the grids differ by less than its own standard uncertainty of {own}{unit}, so that the order may be"
                " that of the reduction"
            )
        return f"{head}: {said}."


@dataclass(frozen=True)
class Pair:
    """Far field beside near field.

    Attributes
    ----------
    far, near : Series
        Of one row.
    """

    far: Series
    near: Series

    @property
    def differences(self) -> tuple[float, ...]:
        """Far field less near field on each grid, coarsest first."""
        return tuple(far - near for far, near in zip(self.far.values, self.near.values, strict=True))

    @property
    def extrapolated(self) -> float:
        """Difference of the two extrapolated values; NaN where one is not to be relied on."""
        usable = all(one.verdict in EXTRAPOLATED for one in (self.far, self.near))
        return self.far.extrapolated - self.near.extrapolated if usable else math.nan

    @property
    def standard_uncertainty(self) -> float:
        """Of the finest grid's difference: the cells' part of both, and the far field's own (k = 1)."""
        return math.hypot(self.far.standard_uncertainty, self.near.standard_uncertainty, self.far.own_uncertainty)

    @property
    def normalised_error(self) -> float:
        """E_n of the finest grid's difference (ISO/IEC 17043)."""
        return normalised_error(self.differences[-1], 0.0, self.standard_uncertainty)

    @property
    def agreement(self) -> Agreement:
        """Whether the two agree on the finest grid."""
        return verdict_of(self.normalised_error)

    @property
    def statement(self) -> str:
        """How the two stand to each other, in words."""
        scale, unit = self.far.scale
        u = abs(scale) * self.standard_uncertainty
        digits = [_signed(scale * difference, COVERAGE_FACTOR * u) for difference in self.differences]
        said = f"{self.far.row.replace('_', ' ')}, far field less {self.near.source}: {', '.join(digits)}"
        said += ("" if unit == "1" else f" {unit}") + " from coarse to fine"
        if math.isfinite(self.extrapolated):
            said += f", {_signed(scale * self.extrapolated, COVERAGE_FACTOR * u)} extrapolated"
        if self.agreement == "unknown":
            return f"{said}; whether they agree cannot be said, since an uncertainty is unknown."
        return f"{said}; E_n {self.normalised_error:.2f} on the finest grid, they {self.agreement[:-1]}."


@dataclass(frozen=True)
class GridSeries:
    """One computed case on several grids.

    Attributes
    ----------
    grids : tuple of Grid
        Coarsest first.
    dimensions : int
        In which the grids are refined.
    series : tuple of Series
        Every row that all ledgers have, each followed by the values it is compared with.
    notes : tuple of str
        Sentences about the choices that were made.
    warnings : tuple of str
        What makes the ledgers unlike.
    provenance : mapping of str to str
        Package versions, ``command`` and ``time`` (UTC, ISO 8601).
    """

    grids: tuple[Grid, ...]
    dimensions: int
    series: tuple[Series, ...]
    notes: tuple[str, ...] = ()
    warnings: tuple[str, ...] = ()
    provenance: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))

    def of(self, row: str, source: str = FAR_FIELD) -> Series:
        """The series of a row, or of a value that it is compared with.

        Parameters
        ----------
        row : str
            A row that all ledgers have.
        source : str
            `FAR_FIELD`, or the name of a compared value.

        Returns
        -------
        Series

        Raises
        ------
        KeyError
            If there is none; the message lists those there are.
        """
        for one in self.series:
            if (one.row, one.source) == (row, source):
                return one
        known = ", ".join(f"{one.row} ({one.source})" for one in self.series)
        raise KeyError(f"there is no series of {row!r} ({source}); there are {known}")

    @property
    def pairs(self) -> tuple[Pair, ...]:
        """Every compared value beside its row."""
        far = {one.row: one for one in self.series if one.source == FAR_FIELD}
        return tuple(Pair(far[one.row], one) for one in self.series if one.source != FAR_FIELD)

    @property
    def ratios(self) -> tuple[float, ...]:
        """Refinement ratio from each grid to the next finer one, coarsest first."""
        sizes = [grid.size for grid in self.grids]
        return tuple(coarse / fine for coarse, fine in pairwise(sizes))

    @property
    def failed(self) -> bool:
        """Whether a check of any ledger failed."""
        return any(grid.failed for grid in self.grids)

    def to_dataframe(self) -> pd.DataFrame:
        """The series as a table.

        Returns
        -------
        DataFrame
            One line per series, with the keys of ``series`` of the JSON document as columns; the value on each grid as
            ``value_1``, ``value_2``, ..., coarsest first.
        """
        import pandas as pd

        lines = []
        for one in self.series:
            entry = _entry(one)
            values = entry.pop("values")
            named = {f"value_{number}": value for number, value in enumerate(values, 1)}
            lines.append({key: entry.pop(key) for key in ("row", "source", "unit")} | named | entry)
        return pd.DataFrame(lines).set_index(["row", "source"])

    def _repr_html_(self) -> str:
        columns = ["unit", "order", "extrapolated", "index", "standard_uncertainty", "verdict"]
        frame = self.to_dataframe()
        values = [name for name in frame.columns if str(name).startswith("value_")]
        html: str = frame[[*values, *columns]].to_html(na_rep="–", float_format="{:.5g}".format)
        return html


def _entry(one: Series) -> dict[str, Any]:
    """A series as a flat record."""
    found = one.found
    return {
        "row": one.row,
        "source": one.source,
        "unit": one.unit,
        "values": list(one.values),
        "ratio_21": math.nan if found is None else found.ratios[0],
        "ratio_32": math.nan if found is None else found.ratios[1],
        "order": math.nan if found is None else found.order,
        "extrapolated": one.extrapolated,
        "approximate_error": math.nan if found is None else found.approximate_error,
        "extrapolated_error": math.nan if found is None else found.extrapolated_error,
        "index": math.nan if found is None else found.index,
        "standard_uncertainty": one.standard_uncertainty,
        "own_uncertainty": one.own_uncertainty,
        "counts": one.counts_per_unit * one.fine,
        "counts_extrapolated": one.counts_per_unit * one.extrapolated,
        "counts_standard_uncertainty": abs(one.counts_per_unit) * one.standard_uncertainty,
        "verdict": one.verdict,
        "statement": one.statement,
        "reason": one.reason if found is None else found.reason,
    }


def grid_series_json(series: GridSeries) -> dict[str, Any]:
    """The grid series as the document that ``--json`` prints.

    Parameters
    ----------
    series : GridSeries
        The series.

    Returns
    -------
    dict
        Made of dict, list, str, int, float and None only, without NaN or infinity. A number that is not known is None.
    """
    return {
        "format": JSON_FORMAT,
        "dimensions": series.dimensions,
        "grids": [
            {
                "title": grid.title,
                "test": dict(grid.test),
                "file": grid.file,
                "cells": grid.cells,
                "size": grid.size,
                "failed_checks": list(grid.failed),
            }
            for grid in series.grids
        ],
        "ratios": list(series.ratios),
        "series": [_plain(_entry(one)) for one in series.series],
        "differences": [
            _plain(
                {
                    "row": pair.far.row,
                    "source": pair.near.source,
                    "unit": pair.far.unit,
                    "values": list(pair.differences),
                    "extrapolated": pair.extrapolated,
                    "standard_uncertainty": pair.standard_uncertainty,
                    "normalised_error": pair.normalised_error,
                    "verdict": pair.agreement,
                    "statement": pair.statement,
                }
            )
            for pair in series.pairs
        ],
        "warnings": list(series.warnings),
        "notes": list(series.notes),
    }


def _plain(entry: Mapping[str, Any]) -> dict[str, Any]:
    def number(value: Any) -> Any:
        return (float(value) if math.isfinite(value) else None) if isinstance(value, float) else value

    plain = {
        key: [number(one) for one in value] if isinstance(value, list) else number(value)
        for key, value in entry.items()
    }
    return {key: value for key, value in plain.items() if key != "reason" or value is not None}


def grid_series_csv(series: GridSeries) -> str:
    """The series as comma-separated values.

    Parameters
    ----------
    series : GridSeries
        The series.

    Returns
    -------
    str
        One header line and one line per series, full precision; an unknown number is an empty cell.
    """
    text: str = series.to_dataframe().to_csv(lineterminator="\n")
    return text


def _signed(figure: float, expanded: float) -> str:
    """A difference with its sign."""
    shown = rounded(figure, expanded)[0]
    return shown if shown.startswith("-") or not shown.strip("0.") or shown == "unknown" else f"+{shown}"


def counts_per_unit(row: str, value: float, coefficient: float) -> float:
    """Counts of one unit of a row.

    Parameters
    ----------
    row : str
        Name of the row.
    value, coefficient : float
        Its value and its coefficient.

    Returns
    -------
    float
        NaN of a row that is no drag or has no coefficient.
    """
    if "drag" not in row or not value or not math.isfinite(coefficient / value):
        return math.nan
    return coefficient / value / COUNT
