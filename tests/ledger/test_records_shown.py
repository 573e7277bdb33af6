"""Estimates and budget of a ledger as tables, datasets and a notebook's display."""

import dataclasses

import numpy as np
import pytest

import wakeledger as wl
from wakeledger.ledger.encoding import dataset_records
from wakeledger.ledger.rows import BudgetLine, CrossCheck


def test_budget_and_estimates_are_frozen_tables(ledger):
    assert isinstance(ledger.budget, wl.Budget)
    frame = ledger.budget.to_dataframe()
    assert list(frame.columns) == [field.name for field in dataclasses.fields(BudgetLine)]
    assert frame["share"].tolist() == [line.share for line in ledger.budget]
    with pytest.raises(TypeError):
        ledger.budget[0] = ledger.budget[1]


@pytest.mark.parametrize(("name", "record"), [("budget", BudgetLine), ("estimates", CrossCheck)])
def test_their_datasets_hold_everything(ledger, name, record):
    table = getattr(ledger, name)
    returned = dataset_records(table.to_dataset(), record)
    assert repr(returned) == repr(tuple(table))
    assert len(table) > 1


def test_a_notebook_shows_them(ledger):
    page = ledger.budget._repr_html_()
    assert page.count("<tr") == len(ledger.budget) + 1
    assert ledger.budget[0].source in page
    assert ledger.estimates[0].method in ledger.estimates._repr_html_()


def test_an_estimate_shows_itself():
    found = wl.Estimate("lift", "wake_line", 90.0, 0.5, reason="for show", terms={"chains": 2.0})
    frame, dataset = found.to_dataframe(), found.to_dataset()
    assert frame.loc["lift", "value"] == 90.0
    assert frame.loc["lift", "chains"] == 2.0
    assert frame.loc["lift", "unit"] == dataset["value"].attrs["units"] == "N"
    assert float(dataset["standard_uncertainty"]) == 0.5
    assert dataset.attrs["reason"] == "for show"
    assert "wake_line" in found._repr_html_()
    assert np.isnan(wl.Estimate("lift", "wake_line", 90.0).to_dataset()["standard_uncertainty"])
