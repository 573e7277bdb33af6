"""What each error does to each row, with its sign, as the archive keeps it: the means to take increments of ledgers."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from wakeledger.confidence.components import Component
from wakeledger.confidence.point_errors import PointErrors
from wakeledger.core.grid import Array

if TYPE_CHECKING:
    import xarray as xr

#: What a row has: its value in its unit, its coefficient and, between walls, that on the dynamic pressure corrected for
#: blockage.
QUANTITIES = ("value", "coefficient", "coefficient_corrected")
#: What every row has.
PLAIN = 2

_TEXTS = {
    "source": "source of uncertainty, or numerical term",
    "kind": "measured: an error of a source; numerical: a numerical term",
    "input": "input the error acts on; empty for a numerical term",
    "shared_id": "identity under which other surveys have the very same error; empty where they have not",
    "distribution": "distribution of the error",
}
#: Variables of errors of points begin with this; their attributes tell the source.
_EFFECTS = "point_effects"
_POINT_ATTRIBUTES = ("source", "input", "shared_id", "effect", "distribution", "degrees_of_freedom")


@dataclass(frozen=True)
class Contributions:
    """Independent errors and their effects on the rows.

    Attributes
    ----------
    rows : tuple of str
        Names of the m rows.
    components : tuple of Component
        The errors; their effects have shape (q, m), over the first q of `QUANTITIES` and the rows.
    scatter : ndarray, shape (q, m, m)
        Covariance of the rows from all else: sources with many errors, interaction of sources.
    scatter_degrees_of_freedom : ndarray, shape (q, m)
        How well its diagonal is known.
    points : tuple of PointErrors
        Errors of points or rows that other surveys of the same points have too; their effects have shape (q, m, k).
    """

    rows: tuple[str, ...]
    components: tuple[Component, ...]
    scatter: Array
    scatter_degrees_of_freedom: Array
    points: tuple[PointErrors, ...] = ()

    def __post_init__(self) -> None:
        m, q = len(self.rows), len(self.scatter)
        found = [np.shape(one.linear) for one in self.components] + [one.effects.shape[:2] for one in self.points]
        if any(shape != (q, m) for shape in found) or np.shape(self.scatter) != (q, m, m):
            raise ValueError(f"effects have shapes {found}, the scatter {np.shape(self.scatter)}; there are {m} rows")

    @property
    def quantities(self) -> tuple[str, ...]:
        """What the figures are of: the first q of `QUANTITIES`."""
        return QUANTITIES[: len(self.scatter)]

    def of(self, rows: Sequence[str], *, quantities: int | None = None) -> Contributions:
        """The same for some of the rows.

        Parameters
        ----------
        rows : sequence of str
            Names of rows.
        quantities : int, optional
            How many of `QUANTITIES`, no more than there are; all when left out.

        Returns
        -------
        Contributions

        Raises
        ------
        ValueError
            If there is no such row.
        """
        at, q = [self.rows.index(row) for row in rows], slice(quantities)
        components = tuple(
            replace(one, linear=one.linear[q][:, at], curved=one.curved[q][:, at]) for one in self.components
        )
        points = tuple(replace(one, effects=one.effects[q][:, at]) for one in self.points)
        scatter, freedom = self.scatter[q][:, at][:, :, at], self.scatter_degrees_of_freedom[q][:, at]
        return Contributions(tuple(rows), components, scatter, freedom, points)

    @property
    def covariance(self) -> Array:
        """Covariance of the rows, first order and variances of second order, shape (q, m, m)."""
        covariance = self.scatter.copy()
        diagonal = np.arange(len(self.rows))
        for one in self.components:
            covariance += one.linear[:, :, None] * one.linear[:, None, :]
            covariance[:, diagonal, diagonal] += one.variance - one.linear**2
        for each in self.points:
            covariance += each.covariance
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
                    np.array(self.quantities),
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
        shape = (len(self.quantities), len(self.rows))
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
        for number, each in enumerate(self.points, 1):
            dataset.update(_points_dataset(each, number))
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
        points = tuple(
            _points_of(dataset, number)
            for number in range(1, len(dataset.data_vars))
            if f"{_EFFECTS}_{number}" in dataset
        )
        return cls(rows, components, dataset["scatter_covariance"].values, freedom, points)


def _points_dataset(errors: PointErrors, number: int) -> xr.Dataset:
    """Errors of points as variables with their number in the names; each has its own places."""
    import xarray as xr

    attributes = {name: getattr(errors, name) for name in _POINT_ATTRIBUTES}
    if errors.correlation_length is not None:
        attributes["correlation_length"] = errors.correlation_length
    error, point = f"error_{number}", f"point_{number}"
    meaning = "change of the row at one standard deviation of the error of each point or row, with its sign"
    found = xr.Dataset(
        {f"{_EFFECTS}_{number}": (("quantity", "row", error), errors.effects, {"long_name": meaning} | attributes)}
    )
    for name, values, words in zip("yz", errors.places.T, ("distance to starboard", "height"), strict=True):
        found[f"point_{name}_{number}"] = (point, values, {"units": "m", "long_name": f"{words} of the points"})
    if errors.row.size:
        found[f"point_row_{number}"] = (point, errors.row, {"long_name": "traverse row of the points", "units": "1"})
    return found


def _points_of(dataset: xr.Dataset, number: int) -> PointErrors:
    effects = dataset[f"{_EFFECTS}_{number}"]
    row = dataset.get(f"point_row_{number}")
    return PointErrors(
        **{name: effects.attrs[name] for name in _POINT_ATTRIBUTES},
        effects=effects.values,
        places=np.stack([dataset[f"point_{name}_{number}"].values for name in "yz"], axis=1),
        row=np.zeros(0, dtype=np.int64) if row is None else row.values.astype(np.int64),
        correlation_length=effects.attrs.get("correlation_length"),
    )
