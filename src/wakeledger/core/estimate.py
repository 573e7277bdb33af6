"""One number with its uncertainty and where it came from."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType

from wakeledger.core.names import METHODS, ROWS


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
