"""Records of one kind as a frozen table: a tuple that is also a data frame, a dataset and a notebook's display."""

from __future__ import annotations

from dataclasses import asdict, fields
from typing import TYPE_CHECKING, Any, ClassVar, TypeVar

if TYPE_CHECKING:
    import pandas as pd
    import xarray as xr

Record = TypeVar("Record")


class RecordTable(tuple[Record, ...]):
    """A tuple of records of one kind.

    Attributes
    ----------
    record : type
        Kind of the records, a frozen dataclass of numbers and text.
    dimension : str
        Name of the dataset's dimension.
    """

    __slots__ = ()
    record: ClassVar[type[Any]]
    dimension: ClassVar[str]

    def to_dataframe(self) -> pd.DataFrame:
        """The records as a table.

        Returns
        -------
        DataFrame
            A line for each record, a column for each of its fields.
        """
        import pandas as pd

        return pd.DataFrame([asdict(one) for one in self], columns=[field.name for field in fields(self.record)])  # type: ignore[call-overload]

    def to_dataset(self) -> xr.Dataset:
        """The records as in the archive.

        Returns
        -------
        Dataset
            One dimension, a variable for each field; text that is absent is empty, a number that is absent is NaN.
        """
        from wakeledger.ledger.encoding import records_dataset

        return records_dataset(self, self.record, self.dimension)

    def _repr_html_(self) -> str:
        html: str = self.to_dataframe().to_html(index=False, na_rep="–", float_format="{:.4g}".format)
        return html
