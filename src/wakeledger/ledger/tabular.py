"""The ledger as plain tables: the JSON document, the CSV rows, a data frame, a dataset, a notebook's display."""

from __future__ import annotations

import html
import json
import math
from collections.abc import Mapping
from dataclasses import asdict, fields
from typing import TYPE_CHECKING, Any

import numpy as np

from wakeledger.core.names import ROWS
from wakeledger.ledger.ledger import Ledger
from wakeledger.ledger.propagation import propagation_entry
from wakeledger.ledger.repeats import repeats_json
from wakeledger.ledger.rounding import UNKNOWN, rounded
from wakeledger.ledger.rows import COUNT, Row
from wakeledger.ledger.units import scalar

if TYPE_CHECKING:
    import pandas as pd
    import xarray as xr

    from wakeledger.ledger.closure import Closure

#: Version of the document `ledger_json` makes.
JSON_FORMAT = 1

#: Fields of a row that only blockage gives.
_CORRECTED = ("coefficient_corrected", "coefficient_corrected_standard_uncertainty")

#: JSON has no infinity: from here on a Student distribution is the normal one to 7 digits.
MANY_DEGREES_OF_FREEDOM = 1_000_000.0


def ledger_json(ledger: Ledger) -> dict[str, Any]:
    """The ledger as the document written to ``ledger.json``.

    Parameters
    ----------
    ledger : Ledger
        The ledger.

    Returns
    -------
    dict
        Made of dict, list, str, bool, int, float and None only, without NaN or infinity: ``format``, ``title``,
        ``test``, ``compressible``, ``rows``, ``estimates``, ``comparisons``, ``budget``, ``checks``, ``notes``,
        ``reference``, where they are known ``propagation``, in a tunnel ``tunnel``, and of combined repeats
        ``repeats``. A number that is not known is None, and the record it stands in has a ``reason``. Infinitely many
        degrees of freedom are written as 1e6.
    """
    document: dict[str, Any] = {
        "format": JSON_FORMAT,
        "title": ledger.title,
        "test": dict(ledger.test),
        "compressible": bool(ledger.compressible),
        "rows": [_plain(_row_entry(row), "it has no coefficient") for row in ledger.rows],
        "estimates": [_plain(asdict(line), "it has no such figure") for line in ledger.estimates],
        "comparisons": [_plain(asdict(line), "it has no such figure") for line in ledger.comparisons],
        "budget": [_plain(asdict(line), "the contribution is not known") for line in ledger.budget],
        "checks": [_plain(asdict(check), check.message) for check in ledger.checks],
        "notes": list(ledger.notes),
        "reference": {name: float(value) for name, value in ledger.reference.items() if math.isfinite(value)},
    }
    if ledger.propagation:
        document["propagation"] = [
            _plain(propagation_entry(one, many=MANY_DEGREES_OF_FREEDOM), "it was not worked out")
            for one in ledger.propagation
        ]
    if ledger.repeats is not None:
        document["repeats"] = repeats_json(ledger.repeats)
    if ledger.diagnostics:
        document["diagnostics"] = [_plain(asdict(one), "it has no value") for one in ledger.diagnostics]
    if ledger.closures:
        document["closures"] = [_closure_entry(one) for one in ledger.closures]
    if ledger.combined is not None:
        document["combined"] = _plain(asdict(ledger.combined), ledger.combined.reason)
        parts = ("rows", "estimates", "budget", "checks", "notes", "tunnel", "diagnostics")
        planes = [(one.station, ledger_json(one)) for one in ledger.stations]
        document["planes"] = [
            {"station": station} | {part: plane[part] for part in parts if part in plane} for station, plane in planes
        ]
    if ledger.tunnel:
        document["tunnel"] = [_plain(asdict(figure), "it has no such figure") for figure in ledger.tunnel]
    return document


def _closure_entry(closure: Closure) -> dict[str, Any]:
    entry = _plain(asdict(closure), "it has no such figure")
    entry["causes"] = [_plain(asdict(cause), cause.note) for cause in closure.causes]
    entry["errors"] = [_number(error) for error in closure.errors]
    return entry


def _row_entry(row: Row) -> dict[str, Any]:
    entry = asdict(row)
    if math.isinf(row.degrees_of_freedom):
        entry["degrees_of_freedom"] = MANY_DEGREES_OF_FREEDOM
    for name in _CORRECTED:
        if entry[name] is None:
            del entry[name]
    return entry


def _plain(entry: Mapping[str, Any], why: str) -> dict[str, Any]:
    """Numbers as plain floats, NaN as None with a reason; a reason only where there is something to explain."""
    plain: dict[str, Any] = {}
    for key, value in entry.items():
        plain[key] = [_number(one) for one in value] if isinstance(value, tuple) else _number(value)
    reason = plain.pop("reason", None)
    if any(value is None or (isinstance(value, list) and None in value) for value in plain.values()):
        reason = reason or why
    if reason:
        plain["reason"] = reason
    return plain


def _number(value: Any) -> Any:
    """A number as a plain float, None where it is not finite; anything else as it is."""
    if not isinstance(value, float | int | np.floating | np.integer):
        return value
    return float(value) if math.isfinite(value) else None


def json_text(document: Mapping[str, Any]) -> str:
    """A document as the text of a JSON file.

    Parameters
    ----------
    document : mapping
        As made by `ledger_json`.

    Returns
    -------
    str
        Indented, in Unicode, every number in full, ended by a line feed.

    Raises
    ------
    ValueError
        If it holds a NaN or an infinity.
    """
    return json.dumps(document, indent=1, ensure_ascii=False, allow_nan=False) + "\n"


def ledger_csv(ledger: Ledger) -> str:
    """The rows as comma-separated values for spreadsheets.

    Parameters
    ----------
    ledger : Ledger
        The ledger.

    Returns
    -------
    str
        One header line and one line per row, full precision; an unknown number is an empty cell. Infinitely many
        degrees of freedom are written as 1e6, as in the JSON document.
    """
    frame = rows_frame(ledger).replace({"degrees_of_freedom": {math.inf: MANY_DEGREES_OF_FREEDOM}})
    text: str = frame.to_csv(lineterminator="\n")
    return text


def rows_frame(ledger: Ledger) -> pd.DataFrame:
    """The rows as a data frame.

    Parameters
    ----------
    ledger : Ledger
        The ledger.

    Returns
    -------
    DataFrame
        Indexed by the row's name; the fields of `Row` in their order, with ``counts`` and
        ``counts_expanded_uncertainty`` after the coefficient's, without the corrected coefficient where no row has it.
    """
    import pandas as pd

    names = [field.name for field in fields(Row)]
    frame = pd.DataFrame([asdict(row) for row in ledger.rows], columns=names).set_index("name")
    position = list(frame.columns).index("coefficient_standard_uncertainty") + 1
    counts = [row.counts for row in ledger.rows]
    frame.insert(position, "counts", counts)
    expanded = [row.coefficient_expanded_uncertainty / COUNT for row in ledger.rows]
    frame.insert(position + 1, "counts_expanded_uncertainty", expanded)
    return frame.drop(columns=[name for name in _CORRECTED if all(getattr(row, name) is None for row in ledger.rows)])


def rows_dataset(ledger: Ledger) -> xr.Dataset:
    """The rows, their covariance and the reference state as a dataset.

    Parameters
    ----------
    ledger : Ledger
        The ledger.

    Returns
    -------
    Dataset
        Dimensions row and row_b; ``value``, ``unit``, ``standard_uncertainty``, ``expanded_uncertainty``,
        ``coverage_factor``, ``degrees_of_freedom``, ``coefficient``, ``coefficient_standard_uncertainty``,
        ``coefficient_corrected`` and its standard uncertainty, ``reason``, ``long_name`` over row, ``covariance`` over
        both, and one scalar for each entry of the reference state.
    """
    import xarray as xr

    names = np.array([row.name for row in ledger.rows], dtype=str)
    dataset = xr.Dataset(coords={"row": ("row", names), "row_b": ("row_b", names)})
    dataset["row"].attrs = {"long_name": "name of the row"}
    dataset["row_b"].attrs = {"long_name": "name of the row, second index of the covariance"}
    mixed = "in the unit given by the variable unit"
    meanings = {
        "value": f"value, {mixed}",
        "standard_uncertainty": f"standard uncertainty (k = 1), {mixed}",
        "expanded_uncertainty": f"expanded uncertainty (95 %), {mixed}",
        "coverage_factor": "expanded over standard uncertainty",
        "degrees_of_freedom": "effective degrees of freedom of the standard uncertainty",
        "coefficient": "coefficient on the reference dynamic pressure",
        "coefficient_standard_uncertainty": "standard uncertainty of the coefficient (k = 1)",
        "coefficient_corrected": "coefficient on the blockage-corrected dynamic pressure",
        "coefficient_corrected_standard_uncertainty": "standard uncertainty of the corrected coefficient (k = 1)",
    }
    for name, meaning in meanings.items():
        raw = [getattr(row, name) for row in ledger.rows]
        numbers = np.array([math.nan if number is None else float(number) for number in raw], dtype=float)
        dataset[name] = ("row", numbers, {"long_name": meaning} | ({} if mixed in meaning else {"units": "1"}))
    texts = {
        "unit": ("UDUNITS string of the row's unit", [row.unit for row in ledger.rows]),
        "meaning": ("what the row is", [ROWS[row.name].long_name for row in ledger.rows]),
        "reason": ("why a figure is unknown", [row.reason or "" for row in ledger.rows]),
    }
    for name, (meaning, strings) in texts.items():
        dataset[name] = ("row", np.array(strings, dtype=str), {"long_name": meaning})
    covariance = np.asarray(ledger.covariance, dtype=float)
    meaning = "covariance of two rows, in the product of their units"
    dataset["covariance"] = (("row", "row_b"), covariance, {"long_name": meaning})
    dataset["value"].attrs["ancillary_variables"] = "standard_uncertainty expanded_uncertainty unit"
    for name, value in ledger.reference.items():
        dataset[name] = scalar(name, value, "undisturbed stream")
    return dataset


def rows_html(ledger: Ledger) -> str:
    """The rows as a small HTML table for notebooks.

    Parameters
    ----------
    ledger : Ledger
        The ledger.

    Returns
    -------
    str
        A fragment of HTML with every text escaped.
    """
    right = ' style="text-align:right"'
    lines = []
    for row in ledger.rows:
        value, expanded = rounded(row.value, row.expanded_uncertainty)
        coefficient, u_coefficient = rounded(row.coefficient, row.coefficient_expanded_uncertainty)
        figures = (value, expanded, coefficient, u_coefficient)
        cells = "".join(f"<td{right}>{_dash(figure)}</td>" for figure in figures[:2])
        cells += f"<td>{html.escape(row.unit)}</td>"
        cells += "".join(f"<td{right}>{_dash(figure)}</td>" for figure in figures[2:])
        lines.append(f'<tr><td style="text-align:left">{html.escape(row.name)}</td>{cells}</tr>')
    failed = [check.name for check in ledger.checks if check.verdict == "fail"]
    caption = f"{ledger.title} (failed checks: {', '.join(failed)})" if failed else ledger.title
    head = "".join(f"<th>{name}</th>" for name in ("row", "value", "± U95", "unit", "coefficient", "± U95"))
    return (
        f"<table><caption>{html.escape(caption)}</caption><thead><tr>{head}</tr></thead>"
        f"<tbody>{''.join(lines)}</tbody></table>"
    )


def _dash(figure: str) -> str:
    return "–" if figure == UNKNOWN else html.escape(figure)
