"""The products of each command: which files there are, and what is written into them."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Generic, TypeVar

from wakeledger.present import placing

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from wakeledger.ledger.grid_series import GridSeries
    from wakeledger.ledger.increment import Increment
    from wakeledger.ledger.ledger import Ledger
    from wakeledger.ledger.plan import Plan

Record = TypeVar("Record")
Figures = Mapping[str, "Figure"]


@dataclass(frozen=True)
class Products(Generic[Record]):
    """What is written of one kind of record.

    Attributes
    ----------
    files : tuple of str
        Names of the files every run writes; the archive first, where there is one.
    draw : callable
        Draws the figures of a record: those of its report, or every one.
    texts : callable
        Texts of the files but the archive, in their order, of a record and its figures.
    archive : callable or None
        Writes the archive of a record.
    """

    files: tuple[str, ...]
    draw: Callable[[Record, bool], Figures]
    texts: Callable[[Record, Figures], Sequence[str]]
    archive: Callable[[Record, Path], None] | None = None

    def existing(self, directory: Path) -> tuple[Path, ...]:
        """Products of an earlier run in a folder, which need not exist; relative to it."""
        return placing.existing(directory, self.files, _is_figure)

    def require_free(self, directory: Path, *, overwrite: bool) -> None:
        """Refuse a folder that already holds products, before any work is done.

        Parameters
        ----------
        directory : Path
            Where the products are to go.
        overwrite : bool
            Whether existing ones may be replaced.

        Raises
        ------
        ProductExistsError
            If there are products and they must not be replaced.
        DataError
            If the place is taken by a file, or nothing can be written there.
        """
        placing.require_free(directory, self.files, _is_figure, overwrite=overwrite)

    def write(
        self, record: Record, directory: Path, *, figures: Sequence[str] = (), overwrite: bool = False
    ) -> tuple[Path, ...]:
        """Write every product of a record, all or none.

        Parameters
        ----------
        record : object
            The record.
        directory : Path
            The folder; it is made where it is missing. Other files in it stay as they are.
        figures : sequence of {"pdf", "png", "svg"}
            Formats in which the figures are written beside the report.
        overwrite : bool
            Whether existing products are replaced. Figures of an earlier run go too, so that none is out of date.

        Returns
        -------
        tuple of Path
            The files, relative to the folder.

        Raises
        ------
        ProductExistsError
            If there are products and they must not be replaced.
        DataError
            If the folder cannot be written.
        """

        def build(folder: Path) -> tuple[Path, ...]:
            return self._build(record, folder, figures)

        return placing.write_whole(directory, build, files=self.files, ours=_is_figure, overwrite=overwrite)

    def _build(self, record: Record, folder: Path, figures: Sequence[str]) -> tuple[Path, ...]:
        if self.archive is not None:
            self.archive(record, folder / self.files[0])
        drawn = self.draw(record, bool(figures))
        names = [Path(name) for name in self.files]
        written = self.files[0 if self.archive is None else 1 :]
        for name, text in zip(written, self.texts(record, drawn), strict=True):
            (folder / name).write_text(text, encoding="utf-8", newline="\n")
        if figures:
            from wakeledger.present.figures import save

            (folder / placing.FIGURES).mkdir()
            names += [path.relative_to(folder) for path in save(drawn, folder / placing.FIGURES, figures)]
        return tuple(names)


def _is_figure(name: str) -> bool:
    """Whether a file of this name is a figure that one of the commands writes."""
    from wakeledger.present.figures import FORMATS, gallery, grid_series, increment

    whole = "|".join(
        (*gallery.OF_LEDGER, *gallery.OF_PLANE, *increment.OF_INCREMENT, *increment.OF_PLANES, *grid_series.DRAWINGS)
    )
    return re.fullmatch(rf"({whole})(_plane_\d+)?\.({'|'.join(FORMATS)})", name) is not None


def _draw_ledger(ledger: Ledger, every: bool) -> Figures:
    from wakeledger.present import figures

    return figures.draw(ledger, every=every)


def _ledger_texts(ledger: Ledger, drawn: Figures) -> Sequence[str]:
    from wakeledger.ledger.tabular import json_text, ledger_csv, ledger_json
    from wakeledger.present import report

    return json_text(ledger_json(ledger)), ledger_csv(ledger), report.report_html(ledger, drawn)


def _write_ledger(ledger: Ledger, file: Path) -> None:
    from wakeledger.ledger.archive import write_archive

    write_archive(ledger, file)


def _draw_increment(increment: Increment, _every: bool) -> Figures:
    from wakeledger.present.figures.increment import draw_increment

    return draw_increment(increment)


def _increment_texts(increment: Increment, drawn: Figures) -> Sequence[str]:
    from wakeledger.ledger.increment import increment_csv, increment_json
    from wakeledger.ledger.tabular import json_text
    from wakeledger.present.report import increment as report

    return json_text(increment_json(increment)), increment_csv(increment), report.increment_html(increment, drawn)


def _write_increment(increment: Increment, file: Path) -> None:
    from wakeledger.ledger.increment import write_increment_archive

    write_increment_archive(increment, file)


def _draw_grid_series(series: GridSeries, _every: bool) -> Figures:
    from wakeledger.present.figures.grid_series import draw_grid_series

    return draw_grid_series(series)


def _grid_series_texts(series: GridSeries, drawn: Figures) -> Sequence[str]:
    from wakeledger.ledger.grid_series import grid_series_csv, grid_series_json
    from wakeledger.ledger.tabular import json_text
    from wakeledger.present.report import grid_series as report

    return json_text(grid_series_json(series)), grid_series_csv(series), report.grid_series_html(series, drawn)


def _draw_plan(plan: Plan, _every: bool) -> Figures:
    from wakeledger.present.figures.plan import draw_plan

    return draw_plan(plan)


def _plan_texts(plan: Plan, drawn: Figures) -> Sequence[str]:
    from wakeledger.ledger.tabular import json_text
    from wakeledger.present.report.plan import plan_html

    return json_text(plan.to_dict()), plan_html(plan, drawn)


#: What a reduction writes, and what combined repeats are written as.
OF_LEDGER: Products[Ledger] = Products(
    ("ledger.nc", "ledger.json", "ledger.csv", "report.html"), _draw_ledger, _ledger_texts, _write_ledger
)
OF_INCREMENT: Products[Increment] = Products(
    ("increment.nc", "increment.json", "increment.csv", "report.html"),
    _draw_increment,
    _increment_texts,
    _write_increment,
)
OF_GRID_SERIES: Products[GridSeries] = Products(
    ("grids.json", "grids.csv", "report.html"), _draw_grid_series, _grid_series_texts
)
OF_PLAN: Products[Plan] = Products(("plan.json", "report.html"), _draw_plan, _plan_texts)
