"""The JSON document, the CSV rows and the printed figures."""

import csv
import dataclasses
import io
import json
import math

import numpy as np
import pytest

from wakeledger.ledger.rounding import rounded, significant
from wakeledger.ledger.rows import BudgetLine, Check, CrossCheck, Row
from wakeledger.ledger.tabular import ledger_csv, ledger_json


@pytest.fixture(scope="module")
def document(ledger):
    # allow_nan=False: a NaN or an infinity anywhere is an error.
    return json.loads(json.dumps(ledger_json(ledger), allow_nan=False))


def test_the_document_has_the_documented_keys(document):
    assert list(document) == [
        "format", "title", "test", "compressible", "rows", "estimates", "comparisons", "budget", "checks", "notes",
        "reference",
    ]  # fmt: skip
    assert document["format"] == 1
    assert document["compressible"] is False
    assert list(document["rows"][0]) == [
        "name", "value", "unit", "standard_uncertainty", "expanded_uncertainty", "coverage_factor",
        "degrees_of_freedom", "coefficient", "coefficient_standard_uncertainty",
    ]  # fmt: skip
    assert list(document["estimates"][0]) == [
        "row", "method", "value", "unit", "standard_uncertainty", "difference", "expected_difference",
        "normalised_error", "verdict",
    ]  # fmt: skip
    assert {"name", "row", "value", "difference", "normalised_error", "verdict"} <= set(document["comparisons"][0])
    assert list(document["budget"][0]) == ["row", "source", "standard_uncertainty", "share"]
    assert list(document["checks"][0]) == ["name", "verdict", "value", "limit", "message"]


def test_numbers_are_numbers_in_full(document, ledger):
    for entry, row in zip(document["rows"], ledger.rows, strict=True):
        assert entry["value"] == (None if math.isnan(row.value) else row.value)
    assert all(isinstance(entry["value"], float) for entry in document["estimates"])


def test_what_is_unknown_is_null_with_a_reason(document):
    for table in ("rows", "estimates", "comparisons", "budget", "checks"):
        for entry in document[table]:
            assert (None in entry.values()) <= bool(entry.get("reason")), entry
    side_force = next(entry for entry in document["rows"] if entry["name"] == "side_force")
    assert side_force["value"] is None
    assert "lower edge" in side_force["reason"]
    assert "reason" not in document["rows"][0]


def test_infinite_degrees_of_freedom_stay_a_number(document, ledger):
    lift = next(entry for entry in document["rows"] if entry["name"] == "lift")
    assert math.isinf(ledger.row("lift").degrees_of_freedom)
    assert lift["degrees_of_freedom"] == 1e6
    assert "inf" not in ledger_csv(ledger)


def test_the_corrected_coefficient_appears_between_walls_only(ledger):
    rows = (dataclasses.replace(ledger.rows[0], coefficient_corrected=0.0141), *ledger.rows[1:])
    walled = ledger_json(dataclasses.replace(ledger, rows=rows))
    assert walled["rows"][0]["coefficient_corrected"] == 0.0141
    assert "coefficient_corrected" not in walled["rows"][1]
    assert "coefficient_corrected" in ledger_csv(dataclasses.replace(ledger, rows=rows)).splitlines()[0]
    assert "coefficient_corrected" not in ledger_csv(ledger)


def test_the_csv_opens_as_a_table(ledger):
    lines = list(csv.DictReader(io.StringIO(ledger_csv(ledger))))
    assert [line["name"] for line in lines] == [row.name for row in ledger.rows]
    induced = lines[1]
    assert float(induced["value"]) == ledger.row("induced_drag").value
    assert float(induced["counts"]) == pytest.approx(103.1, rel=1e-12)
    assert float(induced["counts_expanded_uncertainty"]) == pytest.approx(2.6, rel=1e-12)
    assert lines[5]["value"] == ""
    assert "lower edge" in lines[5]["reason"]


def test_dataset_and_data_frame(ledger):
    dataset = ledger.to_dataset()
    assert float(dataset["covariance"].sel(row="profile_drag", row_b="total_drag")) == ledger.covariance[0, 3] > 0
    assert float(dataset["value"].sel(row="lift")) == ledger.row("lift").value
    frame = ledger.to_dataframe()
    assert frame.loc["profile_drag", "counts"] == pytest.approx(148.2, rel=1e-12)


def test_notebook_display_escapes_and_names_failed_checks(ledger):
    text = ledger._repr_html_()
    assert "&lt;3" in text and "<3" not in text
    assert "core_resolution" in text
    assert "2.788" in text and "0.041" in text


@pytest.mark.parametrize(
    ("value", "uncertainty", "expected"),
    [
        (4.70812, 0.1038, ("4.71", "0.10")),
        (0.025091, 0.00036, ("0.02509", "0.00036")),
        (1234.5, 56.7, ("1234", "57")),
        (123456.0, 1234.0, ("123456", "1234")),
        (1.0, 0.0996, ("1.00", "0.10")),  # 0.0996 to two digits is 0.10, not 0.100
        (-0.0004, 0.01, ("0.000", "0.010")),
        (math.nan, 0.1, ("unknown", "0.10")),
        (1.23456, math.nan, ("1.235", "unknown")),
        (math.nan, math.nan, ("unknown", "unknown")),
    ],
)
def test_rounding_to_two_digits_of_the_uncertainty(value, uncertainty, expected):
    assert rounded(value, uncertainty) == expected


def test_significant_digits():
    assert significant(0.000123456, 3) == "0.000123"
    assert significant(-94.291, 3) == "-94.3"
    assert significant(1.5e-12, 2) == "1.5e-12"
    assert significant(0.0, 3) == "0"


def test_records_refuse_what_cannot_be(ledger):
    with pytest.raises(ValueError, match="needs a reason"):
        Row("lift", math.nan, "N", 1.0, 2.0, 2.0, 9.0)
    with pytest.raises(ValueError, match="unknown; known rows"):
        Row("drag", 1.0, "N", 1.0, 2.0, 2.0, 9.0)
    with pytest.raises(ValueError, match="negative"):
        Row("lift", 1.0, "N", -1.0, 2.0, 2.0, 9.0)
    with pytest.raises(ValueError, match="no method of row"):
        CrossCheck("lift", "jones", 1.0, "N", 0.1, 0.0, 0.0, 0.0, "agrees")
    with pytest.raises(ValueError, match="verdict 'fine' is unknown"):
        Check("noise_bias", "fine", 0.0, 0.1, "It is fine.")
    with pytest.raises(ValueError, match="needs a message"):
        Check("noise_bias", "pass", 0.0, 0.1, "")
    with pytest.raises(ValueError, match="known checks"):
        Check("noise", "pass", 0.0, 0.1, "m")
    with pytest.raises(ValueError, match="row 'drag' is unknown"):
        BudgetLine("drag", "s", 0.1, 1.0)
    with pytest.raises(ValueError, match="shape"):
        dataclasses.replace(ledger, covariance=np.zeros((2, 2)))
    with pytest.raises(ValueError, match="named twice"):
        dataclasses.replace(ledger, rows=ledger.rows[:1] * 7)
    with pytest.raises(KeyError, match="it has profile_drag"):
        ledger.row("wave_drag")


def test_failed_is_about_failures_only(ledger):
    assert ledger.failed
    warned = tuple(check for check in ledger.checks if check.verdict != "fail")
    assert not dataclasses.replace(ledger, checks=warned).failed
