"""Which figures a ledger has, and writing them to a folder."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from wakeledger.present.figures import budget, canvas, crosschecks, maps, section, spanwise, stations, traverse

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from wakeledger.ledger.rows import Ledger


def _in_plane(*names: str) -> Callable[[Ledger], bool]:
    def has(ledger: Ledger) -> bool:
        if traverse.is_traverse(ledger):
            return False
        return all(name in ledger.plane and bool(ledger.plane[name].notnull().any()) for name in names)

    return has


def _of_stations(ledger: Ledger) -> bool:
    return ledger.combined is not None and bool(stations.stations_rows(ledger))


Drawing = tuple[Callable[["Ledger"], "Figure"], Callable[["Ledger"], bool]]

#: Name of each figure's file, how to draw it, and whether a ledger has what it needs.
DRAWINGS: dict[str, Drawing] = {
    "stations": (
        stations.stations_figure,
        _of_stations,
    ),
    "section": (section.section_figure, section.has_section),
    "total_pressure_loss": (maps.loss_map, _in_plane("total_pressure_loss")),
    "axial_vorticity": (maps.vorticity_map, _in_plane("axial_vorticity", "v", "w")),
    "axial_velocity": (maps.axial_velocity_map, _in_plane("u")),
    "traverse": (traverse.traverse_figure, traverse.is_traverse),
    "span_loading": (spanwise.span_figure, lambda ledger: ledger.span is not None),
    "estimates": (crosschecks.estimates_figure, lambda ledger: bool(crosschecks.offsets(ledger))),
    "budget": (budget.budget_figure, lambda ledger: bool(ledger.budget)),
}


def draw(ledger: Ledger) -> dict[str, Figure]:
    """Every figure the ledger has what is needed for.

    Parameters
    ----------
    ledger : Ledger
        The ledger.

    Returns
    -------
    dict of str to Figure
        By the name of `DRAWINGS`.
    """
    return {name: make(ledger) for name, (make, has) in DRAWINGS.items() if has(ledger)}


def save_figures(ledger: Ledger, directory: str | Path, formats: Sequence[str]) -> tuple[Path, ...]:
    """Write every figure in every format.

    Parameters
    ----------
    ledger : Ledger
        The ledger.
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
    for name, figure in draw(ledger).items():
        for kind in formats:
            path = Path(directory) / f"{name}.{kind}"
            path.write_bytes(canvas.figure_bytes(figure, kind))
            written.append(path)
    return tuple(written)
