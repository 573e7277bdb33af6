"""How the uncertainty of each row came about: its random and systematic parts, and two ways of propagating it."""

from __future__ import annotations

import math
from dataclasses import asdict, dataclass, fields
from typing import TYPE_CHECKING, Any, Literal, get_args

import numpy as np

from wakeledger.core.names import ROWS

if TYPE_CHECKING:
    import xarray as xr

Agreement = Literal["validated", "not_validated", "undecided", "unknown"]

_MEANINGS = {
    "random_standard_uncertainty": "part of the standard uncertainty from errors that differ between points or rows",
    "systematic_standard_uncertainty": "part from errors that are the same throughout the survey",
    "numerical_standard_uncertainty": "part from numerical terms",
    "linear_standard_uncertainty": "from the declared sources by derivatives, first and second order",
    "second_order_standard_uncertainty": "what the second order alone contributes to that",
    "monte_carlo_standard_uncertainty": "from the same sources by Monte Carlo",
    "curvature_factor": "factor on the draws of the declared sources, so that the curvature of the row counts once",
    "linear_degrees_of_freedom": "effective degrees of freedom (Welch and Satterthwaite); infinite: all sizes exact",
    "linear_coverage_factor": "factor of the expanded uncertainty by Student's t with these degrees of freedom",
    "linear_expanded_uncertainty": "expanded uncertainty (95 %) by derivatives",
    "interval_difference": "largest difference between the ends of the two 95 % intervals about their means",
    "tolerance": "numerical tolerance of the Monte Carlo standard uncertainty (JCGM 101, 7.9.2)",
    "non_linearity": "standard deviation of what the derivatives do not predict, over that of the draws",
}


@dataclass(frozen=True)
class Propagation:
    """How one row's uncertainty came about (``propagation`` of ledger.json).

    Attributes
    ----------
    row : str
        The row.
    random_standard_uncertainty, systematic_standard_uncertainty, numerical_standard_uncertainty : float
        Parts of the row's standard uncertainty; their squares add up to its square. Random: errors that differ between
        points or rows of the survey. Systematic: one error for the whole survey.
    linear_standard_uncertainty, second_order_standard_uncertainty : float
        From the declared sources alone, by derivatives, both orders; and the second order's contribution to it.
    monte_carlo_standard_uncertainty : float
        From the same sources by Monte Carlo, without numerical terms (JCGM 101).
    curvature_factor : float
        Factor on these draws in the row's uncertainty. Below 1 the row bends so much over its errors that draws about
        the measured values, which hold the errors already, are too wide (docs/uncertainty.md); 1 where it does not.
    linear_degrees_of_freedom, linear_coverage_factor, linear_expanded_uncertainty : float
        Welch and Satterthwaite's degrees of freedom, Student's factor for them, and their U95.
    interval_difference, tolerance : float
        How far the 95 % intervals of the two are apart, and the numerical tolerance of the last digit that matters.
    non_linearity : float
        Standard deviation, over the draws, of what the derivatives do not predict, as a share of that of the draws.
    verdict : {"validated", "not_validated", "undecided", "unknown"}
        Whether first-order propagation may stand for Monte Carlo (JCGM 101:2008, clause 8).
    reason : str or None
        Why something is unknown.
    """

    row: str
    random_standard_uncertainty: float
    systematic_standard_uncertainty: float
    numerical_standard_uncertainty: float
    linear_standard_uncertainty: float = math.nan
    second_order_standard_uncertainty: float = math.nan
    monte_carlo_standard_uncertainty: float = math.nan
    curvature_factor: float = 1.0
    linear_degrees_of_freedom: float = math.nan
    linear_coverage_factor: float = math.nan
    linear_expanded_uncertainty: float = math.nan
    interval_difference: float = math.nan
    tolerance: float = math.nan
    non_linearity: float = math.nan
    verdict: Agreement = "unknown"
    reason: str | None = None

    def __post_init__(self) -> None:
        if self.row not in ROWS:
            raise ValueError(f"row {self.row!r} is unknown; known rows: {', '.join(ROWS)}")
        if self.verdict not in get_args(Agreement):
            raise ValueError(f"verdict {self.verdict!r} is unknown; allowed: {', '.join(get_args(Agreement))}")
        if self.verdict == "unknown" and not self.reason:
            raise ValueError(f"{self.row}: verdict unknown needs a reason")


def propagation_dataset(records: tuple[Propagation, ...]) -> xr.Dataset:
    """The records as arrays over ``row``, in each row's unit."""
    import xarray as xr

    dataset = xr.Dataset(coords={"row": ("row", np.array([one.row for one in records], dtype=str))})
    dataset["row"].attrs = {"long_name": "name of the row"}
    for name, meaning in _MEANINGS.items():
        values = np.array([getattr(one, name) for one in records], dtype=float)
        dataset[name] = ("row", values, {"long_name": meaning})
    for name, meaning in (
        ("verdict", "whether derivatives may stand for Monte Carlo"),
        ("reason", "why it is unknown"),
    ):
        texts = np.array([getattr(one, name) or "" for one in records], dtype=str)
        dataset[name] = ("row", texts, {"long_name": meaning})
    return dataset


def dataset_propagation(dataset: xr.Dataset) -> tuple[Propagation, ...]:
    """Undo `propagation_dataset`."""
    found = []
    # An archive from before a figure was told leaves it at its default.
    kept = [name for name in _MEANINGS if name in dataset]
    for index, row in enumerate(dataset["row"].values):
        entry: dict[str, Any] = {name: float(dataset[name].values[index]) for name in kept}
        entry["verdict"] = str(dataset["verdict"].values[index])
        entry["reason"] = str(dataset["reason"].values[index]) or None
        found.append(Propagation(str(row), **entry))
    return tuple(found)


def propagation_entry(record: Propagation, *, many: float) -> dict[str, Any]:
    """One record for ledger.json; infinitely many degrees of freedom become the number given."""
    entry = {field.name: asdict(record)[field.name] for field in fields(record)}
    if math.isinf(record.linear_degrees_of_freedom):
        entry["linear_degrees_of_freedom"] = many
    return entry
