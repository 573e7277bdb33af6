"""What a correction hands back: the corrected values, how much was added, and how well that is known."""

from __future__ import annotations

from dataclasses import dataclass

from wakeledger.core.grid import Array


@dataclass(frozen=True, eq=False)
class Correction:
    """Corrected values with the correction's own size and uncertainty.

    Attributes
    ----------
    values : ndarray, shape (..., n) or (..., nz, ny)
        Corrected values, SI.
    size : ndarray, of the same shape
        What was added: values − size is what came in, so that reducing it tells what the correction is worth.
    per_sigma : ndarray, of the same shape
        Change of the values when the parameter of the correction is one standard uncertainty larger. One parameter
        serves all points, so it is a single, fully correlated error: reducing values + per_sigma tells what it is
        worth. NaN where nothing is known of it.
    """

    values: Array
    size: Array
    per_sigma: Array

    @property
    def uncorrected(self) -> Array:
        """The values as they came in."""
        return self.values - self.size
