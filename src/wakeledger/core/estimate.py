"""One number with its uncertainty and where it came from."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import TYPE_CHECKING

from wakeledger.core.names import METHODS, ROWS

if TYPE_CHECKING:
    import pandas as pd
    import xarray as xr


@dataclass(frozen=True)
class Estimate:
    """A row of the ledger as one published method sees it.

    Attributes
    ----------
    row : str
        Name of the row (`wakeledger.core.names.ROWS`).
    method : str
        Name of the method (`wakeledger.core.names.METHODS`).
    value : float
        The estimate, in the row's SI unit; NaN with a reason where it cannot be had.
    standard_uncertainty : float
        Standard uncertainty (k = 1) in the same unit; NaN means unknown, never zero.
    method_uncertainty : float
        The part that the method itself contributes (scatter between paths, choice of threshold), k = 1; it is contained
        in `standard_uncertainty` where that is known. Zero for methods without such a choice.
    expected_difference : float
        What this method is expected to read above the primary one at this station, same unit.
    reason : str or None
        Why the value or the uncertainty is unknown.
    terms : mapping of str to float
        Named parts and diagnostics.
    """

    row: str
    method: str
    value: float
    standard_uncertainty: float = math.nan
    method_uncertainty: float = 0.0
    expected_difference: float = 0.0
    reason: str | None = None
    terms: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))

    def __post_init__(self) -> None:
        if self.row not in ROWS:
            raise ValueError(f"row {self.row!r} is unknown; known rows: {', '.join(ROWS)}")
        if self.method not in METHODS.get(self.row, ()):
            raise ValueError(f"{self.method!r} is no method of row {self.row!r}; its methods: {METHODS.get(self.row)}")
        if math.isnan(self.value) and not self.reason:
            raise ValueError(f"an unknown value of {self.row} needs a reason")

    @property
    def unit(self) -> str:
        """UDUNITS string of the row's unit."""
        return ROWS[self.row].unit

    def to_dataframe(self) -> pd.DataFrame:
        """The estimate as a table of one line.

        Returns
        -------
        DataFrame
            Indexed by the row's name; a column for each figure, one for the unit, and one for each of the terms.
        """
        import pandas as pd

        line = {"method": self.method, "unit": self.unit} | self._figures() | {"reason": self.reason} | dict(self.terms)
        return pd.DataFrame(line, index=pd.Index([self.row], name="row"))

    def to_dataset(self) -> xr.Dataset:
        """The estimate as a dataset of scalars.

        Returns
        -------
        Dataset
            Figures with their ``units``; terms under their own names; row, method and reason as attributes.
        """
        import xarray as xr

        figures = {name: ((), value, {"units": self.unit}) for name, value in self._figures().items()}
        terms = {name: ((), float(value)) for name, value in self.terms.items()}
        attributes = {"row": self.row, "method": self.method, "long_name": ROWS[self.row].long_name}
        return xr.Dataset(figures | terms, attrs=attributes | ({"reason": self.reason} if self.reason else {}))

    def _figures(self) -> dict[str, float]:
        names = ("value", "standard_uncertainty", "method_uncertainty", "expected_difference")
        return {name: float(getattr(self, name)) for name in names}

    def _repr_html_(self) -> str:
        html: str = self.to_dataframe().to_html(na_rep="–", float_format="{:.4g}".format)
        return html
