"""What each error does to each row, with its sign, as the archive keeps it: the means to take increments of ledgers."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from wakeledger.confidence.components import Component
from wakeledger.core.grid import Array

if TYPE_CHECKING:
    import xarray as xr

#: What a row has: its value in its unit, and its coefficient.
QUANTITIES = ("value", "coefficient")

_TEXTS = {
    "source": "source of uncertainty, or numerical term",
    "kind": "measured: an error of a source; numerical: a numerical term",
    "input": "input the error acts on; empty for a numerical term",
    "shared_id": "identity under which other surveys have the very same error; empty where they have not",
    "distribution": "distribution of the error",
}


@dataclass(frozen=True)
class Contributions:
    """Independent errors and their effects on the rows.

    Attributes
    ----------
    rows : tuple of str
        Names of the m rows.
    components : tuple of Component
        The errors; their effects have shape (2, m), over `QUANTITIES` and the rows.
    scatter : ndarray, shape (2, m, m)
        Covariance of the rows from all else: sources with many errors, interaction of sources; one for each of
        `QUANTITIES`.
    scatter_degrees_of_freedom : ndarray, shape (2, m)
        How well its diagonal is known.
    """

    rows: tuple[str, ...]
    components: tuple[Component, ...]
    scatter: Array
    scatter_degrees_of_freedom: Array

    def __post_init__(self) -> None:
        m = len(self.rows)
        shapes = [(2, m)] * len(self.components)
        found = [np.shape(one.linear) for one in self.components]
        if found != shapes or np.shape(self.scatter) != (2, m, m):
            raise ValueError(f"effects have shapes {found}, the scatter {np.shape(self.scatter)}; there are {m} rows")

    def of(self, rows: Sequence[str]) -> Contributions:
        """The same for some of the rows.

        Parameters
        ----------
        rows : sequence of str
            Names of rows.

        Returns
        -------
        Contributions

        Raises
        ------
        ValueError
            If there is no such row.
        """
        at = [self.rows.index(row) for row in rows]
        components = tuple(replace(one, linear=one.linear[:, at], curved=one.curved[:, at]) for one in self.components)
        return Contributions(
            tuple(rows), components, self.scatter[:, at][:, :, at], self.scatter_degrees_of_freedom[:, at]
        )

    @property
    def covariance(self) -> Array:
        """Covariance of the rows, first order and variances of second order, shape (2, m, m)."""
        covariance = self.scatter.copy()
        diagonal = np.arange(len(self.rows))
        for one in self.components:
            covariance += one.linear[:, :, None] * one.linear[:, None, :]
            covariance[:, diagonal, diagonal] += one.variance - one.linear**2
        return covariance

    def to_dataset(self) -> xr.Dataset:
        """As kept in the archive: dimensions quantity, component, row and row_b.

        Returns
        -------
        Dataset
        """
        import xarray as xr

        dataset = xr.Dataset(
            coords={
                "quantity": (
                    "quantity",
                    np.array(QUANTITIES),
                    {"long_name": "value in its unit, or coefficient"},
                ),
                "row": ("row", np.array(self.rows, dtype=str), {"long_name": "name of the row"}),
                "row_b": ("row_b", np.array(self.rows, dtype=str), {"long_name": "name of the row, second index"}),
            }
        )
        for name, meaning in _TEXTS.items():
            values = np.array([getattr(one, name) or "" for one in self.components], dtype=str)
            dataset[name] = ("component", values, {"long_name": meaning})
        numbers = np.array([one.number for one in self.components], dtype=np.int32)
        dataset["number"] = ("component", numbers, {"long_name": "which of the input's errors it is", "units": "1"})
        freedom = np.array([one.degrees_of_freedom for one in self.components], dtype=float)
        meaning = "degrees of freedom of the error's standard deviation"
        dataset["degrees_of_freedom"] = ("component", freedom, {"long_name": meaning, "units": "1"})
        shape = (len(QUANTITIES), len(self.rows))
        for name, meaning in (
            ("linear", "change of the row at one standard deviation of the error, with its sign"),
            ("curved", "mean of the changes at plus and minus one standard deviation of the error"),
        ):
            effects = [np.asarray(getattr(one, name), dtype=float) for one in self.components]
            stacked = np.stack(effects, axis=1) if effects else np.zeros((shape[0], 0, shape[1]))
            dataset[name] = (("quantity", "component", "row"), stacked, {"long_name": meaning})
        meaning = "covariance of the rows from all that the components leave unexplained"
        dataset["scatter_covariance"] = (("quantity", "row", "row_b"), self.scatter, {"long_name": meaning})
        meaning = "degrees of freedom of the scatter's variances"
        dataset["scatter_degrees_of_freedom"] = (
            ("quantity", "row"), self.scatter_degrees_of_freedom, {"long_name": meaning, "units": "1"},
        )  # fmt: skip
        return dataset

    @classmethod
    def from_dataset(cls, dataset: xr.Dataset) -> Contributions:
        """Undo `to_dataset`.

        Parameters
        ----------
        dataset : Dataset
            As read from an archive.

        Returns
        -------
        Contributions

        Raises
        ------
        KeyError
            If a part is missing.
        """
        linear, curved = dataset["linear"].values, dataset["curved"].values
        texts = {name: [str(value) for value in dataset[name].values] for name in _TEXTS}
        components = tuple(
            Component(
                source=texts["source"][k],
                kind=texts["kind"][k],
                linear=linear[:, k],
                curved=curved[:, k],
                input=texts["input"][k],
                number=int(dataset["number"].values[k]),
                distribution=texts["distribution"][k],
                degrees_of_freedom=float(dataset["degrees_of_freedom"].values[k]),
                shared_id=texts["shared_id"][k] or None,
            )
            for k in range(linear.shape[1])
        )
        rows = tuple(str(row) for row in dataset["row"].values)
        freedom = dataset["scatter_degrees_of_freedom"].values
        return cls(rows, components, dataset["scatter_covariance"].values, freedom)
