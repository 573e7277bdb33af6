"""The records of an increment: B minus A row by row, what cancelled and what did not, and the JSON document."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, field
from pathlib import Path
from types import MappingProxyType
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from wakeledger.ledger.encoding import write_group
from wakeledger.ledger.rounding import rounded
from wakeledger.ledger.rows import COUNT, BudgetLine
from wakeledger.ledger.tabular import MANY_DEGREES_OF_FREEDOM

if TYPE_CHECKING:
    import pandas as pd
    import xarray as xr

#: Version of the document `increment_json` makes.
JSON_FORMAT = 1
#: What the difference of the coefficients between walls is called.
_CORRECTED = "coefficient_corrected"

_MEANINGS = {
    "unit": "UDUNITS string of the row's unit",
    "a": "figure in A",
    "b": "figure in B",
    "value": "difference of the values B - A, in the row's unit",
    "coefficient": "difference of the coefficients B - A",
    "coefficient_corrected": "difference of the coefficients on the dynamic pressure corrected for blockage, B - A",
    "standard_uncertainty": "standard uncertainty of the difference (k = 1)",
    "expanded_uncertainty": "expanded uncertainty of the difference (95 %)",
    "coverage_factor": "expanded over standard uncertainty",
    "degrees_of_freedom": "effective degrees of freedom",
    "uncancelled_uncertainty": "standard uncertainty if nothing cancelled (k = 1)",
    "counts": "difference of the coefficients in counts of 1e-4",
    "counts_expanded_uncertainty": "expanded uncertainty of the difference in counts",
    "statement": "whether the difference is resolved, in words",
    "reason": "why something is unknown",
}


@dataclass(frozen=True)
class Figure:
    """One difference B - A with its uncertainty; NaN where unknown.

    Attributes
    ----------
    a, b : float
        The figure in A and in B.
    difference : float
        B minus A.
    standard_uncertainty, expanded_uncertainty : float
        Of the difference: k = 1, and half width of its 95 % interval.
    coverage_factor : float
        Expanded over standard uncertainty.
    degrees_of_freedom : float
        Effective degrees of freedom.
    uncancelled_uncertainty : float
        Root of the sum of squares of the two ledgers' standard uncertainties: what it would be if nothing cancelled.
    """

    a: float
    b: float
    difference: float
    standard_uncertainty: float
    expanded_uncertainty: float
    coverage_factor: float
    degrees_of_freedom: float
    uncancelled_uncertainty: float

    @property
    def resolved(self) -> bool | None:
        """Whether |B - A| is larger than its expanded uncertainty; None where either is unknown."""
        if math.isnan(self.difference) or math.isnan(self.expanded_uncertainty):
            return None
        return bool(abs(self.difference) > self.expanded_uncertainty)

    @property
    def in_counts(self) -> tuple[float, float]:
        """Difference and expanded uncertainty of a coefficient in counts (1 count = 1e-4)."""
        return self.difference / COUNT, self.expanded_uncertainty / COUNT


@dataclass(frozen=True)
class IncrementRow:
    """One row of an increment.

    Attributes
    ----------
    name, unit : str
        The row and the unit of its values.
    value, coefficient : Figure
        Difference of the values, and of the coefficients on each ledger's own reference.
    corrected : Figure or None
        Difference of the coefficients on the dynamic pressure corrected for blockage; None unless both are between
        walls.
    reason : str or None
        Why the difference or its uncertainty is unknown.
    """

    name: str
    unit: str
    value: Figure
    coefficient: Figure
    corrected: Figure | None = None
    reason: str | None = None

    def __post_init__(self) -> None:
        if self.value.resolved is None and not self.reason:
            raise ValueError(f"{self.name}: an unknown difference or uncertainty needs a reason")

    @property
    def judged(self) -> Figure:
        """The figure the statement is about: the coefficient where there is one."""
        return self.value if self.coefficient.resolved is None else self.coefficient

    @property
    def resolved(self) -> bool | None:
        """Whether the difference is larger than its expanded uncertainty; None where that cannot be said."""
        return self.judged.resolved

    @property
    def statement(self) -> str:
        """Whether the increment is resolved, in words."""
        name = self.name.replace("_", " ")
        if self.resolved is None:
            return f"{name}: whether B differs from A cannot be said ({self.reason})."
        in_counts = self.judged is self.coefficient
        figures = self.judged.in_counts if in_counts else (self.value.difference, self.value.expanded_uncertainty)
        difference, expanded = rounded(*figures)
        unit = " counts" if in_counts else "" if self.unit == "1" else f" {self.unit}"
        sign = "" if difference.startswith("-") or not difference.strip("0.") else "+"
        if self.resolved:
            which = "higher" if figures[0] > 0 else "lower"
            said = f"{name}: {sign}{difference} ± {expanded}{unit}, resolved: B is {which}"
        else:
            said = f"{name}: {sign}{difference} ± {expanded}{unit}, not resolved: it cannot be told from zero"
        other = self.value.resolved
        if in_counts and other is not None and other != self.resolved:
            said += f"; the difference in {self.unit} is {'resolved' if other else 'not resolved'}"
        return f"{said}."


@dataclass(frozen=True)
class Cancellation:
    """What one shared source comes to in one row, k = 1, in the row's unit and of the coefficient.

    Attributes
    ----------
    row, shared_id, source_a, source_b : str
        The row, the identity, and what the two ledgers call the source.
    in_a, in_b, left : float
        Standard uncertainty from it in A, in B and in the difference.
    coefficient_in_a, coefficient_in_b, coefficient_left : float
        The same of the coefficient.
    """

    row: str
    shared_id: str
    source_a: str
    source_b: str
    in_a: float
    in_b: float
    left: float
    coefficient_in_a: float
    coefficient_in_b: float
    coefficient_left: float


@dataclass(frozen=True)
class NotCancelled:
    """A source that both ledgers have but that does not cancel.

    Attributes
    ----------
    source : str
        Its name.
    reason : str
        Why.
    """

    source: str
    reason: str


@dataclass(frozen=True)
class Side:
    """One of the two ledgers.

    Attributes
    ----------
    title : str
        Title of its survey.
    test : mapping of str to str
        The ``[test]`` table.
    file : str
        Name of the archive; empty where it was in memory.
    inputs : mapping of str to str
        SHA-256 of its inputs.
    failed : tuple of str
        Its failed checks, in words.
    reference : mapping of str to float
        The undisturbed stream, SI.
    """

    title: str
    test: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))
    file: str = ""
    inputs: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))
    failed: tuple[str, ...] = ()
    reference: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))


@dataclass(frozen=True, eq=False)
class Increment:
    """B minus A.

    Attributes
    ----------
    a, b : Side
        The two ledgers.
    rows : tuple of IncrementRow
        Every row that both have.
    covariance : ndarray, shape (m, m)
        Covariance of the differences of the values, in the product of their units; NaN where unknown.
    cancellations : tuple of Cancellation
        Every shared source, row by row.
    not_cancelled : tuple of NotCancelled
        Sources and numerical terms that both have and that do not cancel.
    budget : tuple of BudgetLine
        Every difference's uncertainty by source, largest first.
    warnings : tuple of str
        What makes the two ledgers unlike.
    notes : tuple of str
        Sentences about the choices that were made.
    plane : Dataset or None
        Difference of the planes (`wakeledger.ledger.plane_difference`); of several stations, at the first that both
        have, which is its coordinate ``x``.
    further_planes : tuple of Dataset
        The same at the other stations that both ledgers have.
    provenance : mapping of str to str
        Package versions, ``command`` and ``time`` (UTC, ISO 8601).
    """

    a: Side
    b: Side
    rows: tuple[IncrementRow, ...]
    covariance: NDArray[np.float64]
    cancellations: tuple[Cancellation, ...] = ()
    not_cancelled: tuple[NotCancelled, ...] = ()
    budget: tuple[BudgetLine, ...] = ()
    warnings: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
    plane: xr.Dataset | None = None
    further_planes: tuple[xr.Dataset, ...] = ()
    provenance: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))

    def row(self, name: str) -> IncrementRow:
        """The row with this name.

        Parameters
        ----------
        name : str
            A row that both ledgers have.

        Returns
        -------
        IncrementRow

        Raises
        ------
        KeyError
            If there is no such row; the message lists those there are.
        """
        for row in self.rows:
            if row.name == name:
                return row
        raise KeyError(f"the increment has no row {name!r}; it has {', '.join(row.name for row in self.rows)}")

    @property
    def failed(self) -> bool:
        """Whether a check of either ledger failed."""
        return bool(self.a.failed or self.b.failed)

    def to_dataframe(self) -> pd.DataFrame:
        """The rows as a table.

        Returns
        -------
        DataFrame
            Indexed by the row's name, with the keys of the rows of the JSON document as columns.
        """
        import pandas as pd

        return pd.DataFrame(self._entries()).set_index("name")

    def _entries(self) -> list[dict[str, Any]]:
        """One flat record for each row, all with the same keys."""
        entries = [_row_entry(row) for row in self.rows]
        if any(row.corrected is not None for row in self.rows):
            unknown = Figure(*(math.nan,) * 8)
            for row, entry in zip(self.rows, entries, strict=True):
                entry |= _figure_entry(f"{_CORRECTED}_", row.corrected or unknown)
        return entries

    def to_dataset(self) -> xr.Dataset:
        """The rows and their covariance as a dataset.

        Returns
        -------
        Dataset
            Dimensions row and row_b; the columns of `to_dataframe` but ``resolved``, and ``covariance``.
        """
        import xarray as xr

        entries = self._entries()
        names = np.array([entry["name"] for entry in entries], dtype=str)
        dataset = xr.Dataset(coords={"row": ("row", names), "row_b": ("row_b", names)})
        for key in entries[0]:
            if key in ("name", "resolved"):
                continue
            values = [entry[key] for entry in entries]
            text = key in ("unit", "statement", "reason")
            array = np.array([value or "" for value in values], dtype=str) if text else np.array(values, dtype=float)
            dataset[key] = ("row", array, {"long_name": _meaning(key)})
        meaning = "covariance of the differences of two rows, in the product of their units"
        dataset["covariance"] = (("row", "row_b"), self.covariance, {"long_name": meaning})
        return dataset

    def _repr_html_(self) -> str:
        columns = ["value", "expanded_uncertainty", "unit", "counts", "counts_expanded_uncertainty", "statement"]
        html: str = self.to_dataframe()[columns].to_html(na_rep="–", float_format="{:.4g}".format)
        return html


def _row_entry(row: IncrementRow) -> dict[str, Any]:
    """One row as a flat record."""
    entry: dict[str, Any] = {"name": row.name, "unit": row.unit}
    for prefix, figure in (("", row.value), ("coefficient_", row.coefficient)):
        entry |= _figure_entry(prefix, figure)
    entry["counts"], entry["counts_expanded_uncertainty"] = row.coefficient.in_counts
    entry["resolved"] = row.resolved
    entry["statement"] = row.statement
    entry["reason"] = row.reason
    return entry


def _figure_entry(prefix: str, figure: Figure) -> dict[str, Any]:
    """One difference as a flat record whose keys begin with a prefix."""
    numbers = asdict(figure)
    entry = {f"{prefix}a": numbers.pop("a"), f"{prefix}b": numbers.pop("b")}
    entry[prefix.rstrip("_") or "value"] = numbers.pop("difference")
    return entry | {f"{prefix}{name}": number for name, number in numbers.items()}


def _meaning(key: str) -> str:
    """What a column of the rows is."""
    if key in _MEANINGS:
        return _MEANINGS[key]
    for prefix, words in ((f"{_CORRECTED}_", "corrected coefficient: "), ("coefficient_", "coefficient: ")):
        if key.startswith(prefix):
            return words + _MEANINGS[key.removeprefix(prefix)]
    raise KeyError(key)


def increment_json(increment: Increment) -> dict[str, Any]:
    """The increment as the document that ``--json`` prints.

    Parameters
    ----------
    increment : Increment
        The increment.

    Returns
    -------
    dict
        Made of dict, list, str, bool, int, float and None only, without NaN or infinity. A number that is not known is
        None; infinitely many degrees of freedom are 1e6.
    """
    return {
        "format": JSON_FORMAT,
        "a": _side(increment.a),
        "b": _side(increment.b),
        "rows": [_plain(_row_entry(row) | _corrected_entry(row)) for row in increment.rows],
        "cancelled": [_plain(asdict(line)) for line in increment.cancellations],
        "not_cancelled": [asdict(line) for line in increment.not_cancelled],
        "budget": [_plain(asdict(line)) for line in increment.budget],
        "warnings": list(increment.warnings),
        "notes": list(increment.notes),
    }


def _corrected_entry(row: IncrementRow) -> dict[str, Any]:
    return {} if row.corrected is None else _figure_entry(f"{_CORRECTED}_", row.corrected)


def _side(side: Side) -> dict[str, Any]:
    return {
        "title": side.title,
        "test": dict(side.test),
        "file": side.file,
        "failed_checks": list(side.failed),
        "reference": {name: float(value) for name, value in side.reference.items() if math.isfinite(value)},
    }


def _plain(entry: Mapping[str, Any]) -> dict[str, Any]:
    plain: dict[str, Any] = {}
    for key, value in entry.items():
        if key.endswith("degrees_of_freedom") and value == math.inf:
            plain[key] = MANY_DEGREES_OF_FREEDOM
        elif isinstance(value, float | np.floating):
            plain[key] = float(value) if math.isfinite(value) else None
        elif key != "reason" or value is not None:
            plain[key] = value
    return plain


def increment_csv(increment: Increment) -> str:
    """The rows as comma-separated values.

    Parameters
    ----------
    increment : Increment
        The increment.

    Returns
    -------
    str
        One header line and one line per row, full precision; an unknown number is an empty cell.
    """
    frame = increment.to_dataframe()
    freedom = [name for name in frame.columns if str(name).endswith("degrees_of_freedom")]
    text: str = frame.replace({name: {math.inf: MANY_DEGREES_OF_FREEDOM} for name in freedom}).to_csv(
        lineterminator="\n"
    )
    return text


def write_increment_archive(increment: Increment, path: Path) -> None:
    """Write an increment as a netCDF-4 file: the rows at the root, the difference of the planes in the group ``plane``.

    Differences at further stations are in the groups ``plane_2``, ``plane_3`` and so on.

    Parameters
    ----------
    increment : Increment
        The increment.
    path : Path
        A file that is not there yet.

    Raises
    ------
    OSError
        If it cannot be written.
    """
    root = increment.to_dataset()
    root.attrs = {
        "Conventions": "CF-1.11",
        "title": f"{increment.b.title} minus {increment.a.title}",
        "history": f"{increment.provenance.get('time', '')} {increment.provenance.get('command', '')}".strip(),
        "source": f"wakeledger {increment.provenance.get('version wakeledger', '')}".strip(),
        "document": json.dumps(increment_json(increment), ensure_ascii=False, allow_nan=False),
    }
    write_group(root, path, group=None, mode="w")
    if increment.plane is not None:
        write_group(increment.plane, path, group="plane", mode="a")
    for number, plane in enumerate(increment.further_planes, start=2):
        write_group(plane, path, group=f"plane_{number}", mode="a")


def ordered_budget(rows: Sequence[str], variances: Mapping[str, NDArray[np.float64]]) -> tuple[BudgetLine, ...]:
    """Budget lines of each row, the largest first; sources that do nothing to a row are left out.

    Parameters
    ----------
    rows : sequence of str
        The m rows.
    variances : mapping of str to ndarray, shape (m,)
        Variance by source.

    Returns
    -------
    tuple of BudgetLine
    """
    lines = []
    for k, row in enumerate(rows):
        parts = {name: float(variance[k]) for name, variance in variances.items() if variance[k] > 0}
        total = sum(parts.values())
        ordered = sorted(parts.items(), key=lambda part: -part[1])
        lines += [BudgetLine(row, name, math.sqrt(value), value / total) for name, value in ordered]
    return tuple(lines)
