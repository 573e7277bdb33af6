"""Tables of figures: drawing those that a record has what is needed for, and writing them to a folder."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Generic, TypeVar

from wakeledger.present.figures.canvas import figure_bytes

if TYPE_CHECKING:
    from matplotlib.figure import Figure

Record = TypeVar("Record")


@dataclass(frozen=True)
class Drawing(Generic[Record]):
    """One figure of a kind of record.

    Attributes
    ----------
    make : callable
        Draws it.
    has : callable
        Whether a record has what it needs.
    caption : str
        What it shows.
    """

    make: Callable[[Record], Figure]
    has: Callable[[Record], bool]
    caption: str


def drawn(drawings: Mapping[str, Drawing[Record]], record: Record) -> dict[str, Figure]:
    """Every figure of a table that a record has what is needed for.

    Parameters
    ----------
    drawings : mapping of str to Drawing
        The table, by the names of the figures.
    record : object
        What they show.

    Returns
    -------
    dict of str to Figure
        By name, in the table's order.
    """
    return {name: drawing.make(record) for name, drawing in drawings.items() if drawing.has(record)}


def save(figures: Mapping[str, Figure], directory: str | Path, formats: Sequence[str]) -> tuple[Path, ...]:
    """Write figures in every format.

    Parameters
    ----------
    figures : mapping of str to Figure
        By name.
    directory : path
        An existing folder.
    formats : sequence of {"pdf", "png", "svg"}
        Formats.

    Returns
    -------
    tuple of Path
        The files, ``<name>.<format>``.

    Raises
    ------
    ValueError
        If a format is not one of `wakeledger.present.figures.canvas.FORMATS`.
    OSError
        If a file cannot be written.
    """
    written = []
    for name, figure in figures.items():
        for kind in formats:
            path = Path(directory) / f"{name}.{kind}"
            path.write_bytes(figure_bytes(figure, kind))
            written.append(path)
    return tuple(written)
