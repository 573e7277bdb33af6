"""The products of a reduction: built aside, then put in their place together, so they appear whole or not at all."""

from __future__ import annotations

import errno
import os
import shutil
import tempfile
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import suppress
from pathlib import Path
from typing import TYPE_CHECKING

from wakeledger.core.errors import DataError, ProductExistsError

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from wakeledger.ledger.grid_series import GridSeries
    from wakeledger.ledger.increment import Increment
    from wakeledger.ledger.plan import Plan
    from wakeledger.ledger.rows import Ledger

#: Files every reduction writes.
FILES = ("ledger.nc", "ledger.json", "ledger.csv", "report.html")

#: Files every increment writes.
INCREMENT_FILES = ("increment.nc", "increment.json", "increment.csv", "report.html")

#: Files every grid series writes.
GRID_FILES = ("grids.json", "grids.csv", "report.html")

#: Files every plan writes.
PLAN_FILES = ("plan.json", "report.html")

#: Folder of the figures, where they are asked for.
FIGURES = "figures"


def existing_products(directory: Path, *, files: Sequence[str] = FILES) -> tuple[Path, ...]:
    """Products of an earlier run in a folder.

    Parameters
    ----------
    directory : Path
        The folder; it need not exist.
    files : sequence of str
        Names of the products beside the figures.

    Returns
    -------
    tuple of Path
        Relative to the folder.
    """
    found = [Path(name) for name in files if (directory / name).exists()]
    folder = directory / FIGURES
    if folder.is_dir():
        from wakeledger.present.figures import FORMATS
        from wakeledger.present.figures.gallery import DRAWINGS
        from wakeledger.present.figures.grid_series import NAME as OF_GRIDS
        from wakeledger.present.figures.increment import DRAWINGS as OF_INCREMENTS

        ours = {f"{name}.{kind}" for name in (*DRAWINGS, *OF_INCREMENTS, OF_GRIDS) for kind in FORMATS}
        found += sorted(path.relative_to(directory) for path in folder.iterdir() if path.name in ours)
    return tuple(found)


def require_free(directory: Path, *, overwrite: bool, files: Sequence[str] = FILES) -> None:
    """Refuse a folder that already holds products, before any work is done.

    Parameters
    ----------
    directory : Path
        Where the products are to go.
    overwrite : bool
        Whether existing ones may be replaced.
    files : sequence of str
        Names of the products beside the figures.

    Raises
    ------
    ProductExistsError
        If there are products and they must not be replaced.
    DataError
        If the place is taken by a file, or nothing can be written there.
    """
    try:
        _require_writable(directory)
        found = existing_products(directory, files=files)
    except OSError as error:
        raise _unwritable(directory, error) from error
    for name in found:
        if name.name in files and (directory / name).is_dir():
            raise DataError(
                f"{name} is a folder there", file=directory, remedy="move it, or choose another folder with --out"
            )
    if found and not overwrite:
        names = ", ".join(str(name) for name in found[:4])
        raise ProductExistsError(
            f"{names} exist already and nothing was changed",
            file=directory,
            remedy="add --overwrite to replace them, or choose another folder with --out",
        )


def _require_writable(directory: Path) -> None:
    """Refuse a place where no folder can be made, or none can be filled, before any work is done."""
    nearest = next(folder for folder in (directory, *directory.absolute().parents) if os.path.lexists(folder))
    if not nearest.is_dir():
        if nearest == directory:
            raise DataError("the output folder is a file", file=directory, remedy="give a folder with --out")
        raise NotADirectoryError(errno.ENOTDIR, f"{nearest} is a file")
    if not os.access(nearest, os.W_OK | os.X_OK):
        raise PermissionError(errno.EACCES, f"{nearest} is not writable")


def _unwritable(directory: Path, error: OSError) -> DataError:
    return DataError(
        f"the products cannot be written ({error.strerror or error})",
        file=directory,
        remedy="choose another folder with --out",
    )


def write_products(
    ledger: Ledger, directory: Path, *, figures: Sequence[str] = (), overwrite: bool = False
) -> tuple[Path, ...]:
    """Write every product of a ledger.

    Parameters
    ----------
    ledger : Ledger
        The ledger.
    directory : Path
        The folder; it is made where it is missing. Other files in it stay as they are.
    figures : sequence of {"pdf", "png", "svg"}
        Formats in which the figures are written beside the report.
    overwrite : bool
        Whether existing products are replaced. Figures of an earlier reduction go too, so that none is out of date.

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
        return _build(ledger, folder, figures)

    return _write_whole(directory, build, files=FILES, overwrite=overwrite)


def write_increment(
    increment: Increment, directory: Path, *, figures: Sequence[str] = (), overwrite: bool = False
) -> tuple[Path, ...]:
    """Write every product of an increment.

    Parameters
    ----------
    increment : Increment
        The increment.
    directory, figures, overwrite
        As in `write_products`.

    Returns
    -------
    tuple of Path
        The files, relative to the folder.

    Raises
    ------
    ProductExistsError, DataError
        As in `write_products`.
    """

    def build(folder: Path) -> tuple[Path, ...]:
        return _build_increment(increment, folder, figures)

    return _write_whole(directory, build, files=INCREMENT_FILES, overwrite=overwrite)


def write_grid_series(
    series: GridSeries, directory: Path, *, figures: Sequence[str] = (), overwrite: bool = False
) -> tuple[Path, ...]:
    """Write every product of a grid series.

    Parameters
    ----------
    series : GridSeries
        The series.
    directory, figures, overwrite
        As in `write_products`.

    Returns
    -------
    tuple of Path
        The files, relative to the folder.

    Raises
    ------
    ProductExistsError, DataError
        As in `write_products`.
    """

    def build(folder: Path) -> tuple[Path, ...]:
        from wakeledger.ledger.grid_series import grid_series_csv, grid_series_json
        from wakeledger.ledger.tabular import json_text
        from wakeledger.present.figures.grid_series import draw_grid_series
        from wakeledger.present.report.grid_series import grid_series_html

        texts = {
            "grids.json": json_text(grid_series_json(series)),
            "grids.csv": grid_series_csv(series),
            "report.html": grid_series_html(series),
        }
        for name, text in texts.items():
            (folder / name).write_text(text, encoding="utf-8", newline="\n")
        names = [Path(name) for name in GRID_FILES]
        if figures:
            (folder / FIGURES).mkdir()
            names += [path.relative_to(folder) for path in _save(draw_grid_series(series), folder / FIGURES, figures)]
        return tuple(names)

    return _write_whole(directory, build, files=GRID_FILES, overwrite=overwrite)


def write_plan(plan: Plan, directory: Path, *, overwrite: bool = False) -> tuple[Path, ...]:
    """Write every product of a plan.

    Parameters
    ----------
    plan : Plan
        The plan.
    directory, overwrite
        As in `write_products`.

    Returns
    -------
    tuple of Path
        The files, relative to the folder.

    Raises
    ------
    ProductExistsError, DataError
        As in `write_products`.
    """

    def build(folder: Path) -> tuple[Path, ...]:
        from wakeledger.ledger.tabular import json_text
        from wakeledger.present.report.plan import plan_html

        texts = {"plan.json": json_text(plan.to_dict()), "report.html": plan_html(plan)}
        for name, text in texts.items():
            (folder / name).write_text(text, encoding="utf-8", newline="\n")
        return tuple(Path(name) for name in PLAN_FILES)

    return _write_whole(directory, build, files=PLAN_FILES, overwrite=overwrite)


def _write_whole(
    directory: Path, build: Callable[[Path], tuple[Path, ...]], *, files: Sequence[str], overwrite: bool
) -> tuple[Path, ...]:
    """Build the products aside and put them in their place together."""
    require_free(directory, overwrite=overwrite, files=files)
    made: list[Path] = []
    try:
        for missing in reversed(directory.parents):
            if not missing.exists():
                missing.mkdir()
                made.append(missing)
        home = directory if directory.is_dir() else directory.parent
        aside = Path(tempfile.mkdtemp(prefix=".wakeledger-", suffix=".part", dir=home))
        fresh = aside / "fresh"
        try:
            fresh.mkdir()
            names = build(fresh)
            # Another run may have written there meanwhile.
            require_free(directory, overwrite=overwrite, files=files)
            if directory.is_dir():
                _exchange(directory, fresh, aside / "earlier", names, existing_products(directory, files=files))
            else:
                fresh.rename(directory)
        finally:
            shutil.rmtree(aside, ignore_errors=True)
    except BaseException as error:
        for folder in reversed(made):
            with suppress(OSError):
                folder.rmdir()
        if isinstance(error, OSError):
            raise _unwritable(directory, error) from error
        if isinstance(error, DataError):
            raise error.located(file=directory) from error
        raise
    return names


def _build(ledger: Ledger, folder: Path, figures: Sequence[str]) -> tuple[Path, ...]:
    from wakeledger.ledger.archive import write_archive
    from wakeledger.ledger.tabular import json_text, ledger_csv, ledger_json
    from wakeledger.present.figures import save_figures
    from wakeledger.present.report import report_html

    try:
        write_archive(ledger, folder / "ledger.nc")
    except DataError as error:
        # It names a file that is there only while the products are built.
        raise DataError(error.found, remedy=error.remedy) from error
    texts = {
        "ledger.json": json_text(ledger_json(ledger)),
        "ledger.csv": ledger_csv(ledger),
        "report.html": report_html(ledger),
    }
    for name, text in texts.items():
        (folder / name).write_text(text, encoding="utf-8", newline="\n")
    names = [Path(name) for name in FILES]
    if figures:
        (folder / FIGURES).mkdir()
        names += [path.relative_to(folder) for path in save_figures(ledger, folder / FIGURES, figures)]
    return tuple(names)


def _build_increment(increment: Increment, folder: Path, figures: Sequence[str]) -> tuple[Path, ...]:
    from wakeledger.ledger.increment import increment_csv, increment_json, write_increment_archive
    from wakeledger.ledger.tabular import json_text
    from wakeledger.present.figures.increment import draw_increment
    from wakeledger.present.report.increment import increment_html

    try:
        write_increment_archive(increment, folder / "increment.nc")
    except RuntimeError as error:
        # The netCDF library reports a full disk as an error of its own.
        if not str(error).startswith("NetCDF:"):
            raise
        raise OSError(errno.EIO, str(error)) from error
    texts = {
        "increment.json": json_text(increment_json(increment)),
        "increment.csv": increment_csv(increment),
        "report.html": increment_html(increment),
    }
    for name, text in texts.items():
        (folder / name).write_text(text, encoding="utf-8", newline="\n")
    names = [Path(name) for name in INCREMENT_FILES]
    if figures:
        (folder / FIGURES).mkdir()
        names += [path.relative_to(folder) for path in _save(draw_increment(increment), folder / FIGURES, figures)]
    return tuple(names)


def _save(drawn: Mapping[str, Figure], folder: Path, formats: Sequence[str]) -> Iterator[Path]:
    from wakeledger.present.figures import figure_bytes

    for name, figure in drawn.items():
        for kind in formats:
            path = folder / f"{name}.{kind}"
            path.write_bytes(figure_bytes(figure, kind))
            yield path


def _exchange(directory: Path, fresh: Path, earlier: Path, names: Sequence[Path], old: Sequence[Path]) -> None:
    """Put the fresh files in the place of the old ones; if a step fails, put everything back."""
    moves = [(directory / name, earlier / name) for name in old] + [(fresh / name, directory / name) for name in names]
    done: list[tuple[Path, Path]] = []
    try:
        for source, target in moves:
            target.parent.mkdir(parents=True, exist_ok=True)
            source.rename(target)
            done.append((source, target))
    except BaseException:
        for source, target in reversed(done):
            target.rename(source)
        raise
    folder = directory / FIGURES
    if folder.is_dir() and not any(folder.iterdir()):
        folder.rmdir()
