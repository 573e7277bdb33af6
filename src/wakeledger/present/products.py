"""The products of a reduction: built aside, then put in their place together, so they appear whole or not at all."""

from __future__ import annotations

import errno
import os
import shutil
import tempfile
from collections.abc import Sequence
from contextlib import suppress
from pathlib import Path
from typing import TYPE_CHECKING

from wakeledger.core.errors import DataError, ProductExistsError

if TYPE_CHECKING:
    from wakeledger.ledger.rows import Ledger

#: Files every reduction writes.
FILES = ("ledger.nc", "ledger.json", "ledger.csv", "report.html")

#: Folder of the figures, where they are asked for.
FIGURES = "figures"


def existing_products(directory: Path) -> tuple[Path, ...]:
    """Products of an earlier reduction in a folder.

    Parameters
    ----------
    directory : Path
        The folder; it need not exist.

    Returns
    -------
    tuple of Path
        Relative to the folder.
    """
    found = [Path(name) for name in FILES if (directory / name).exists()]
    folder = directory / FIGURES
    if folder.is_dir():
        from wakeledger.present.figures import FORMATS
        from wakeledger.present.figures.gallery import DRAWINGS

        ours = {f"{name}.{kind}" for name in DRAWINGS for kind in FORMATS}
        found += sorted(path.relative_to(directory) for path in folder.iterdir() if path.name in ours)
    return tuple(found)


def require_free(directory: Path, *, overwrite: bool) -> None:
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
    try:
        _require_writable(directory)
        found = existing_products(directory)
    except OSError as error:
        raise _unwritable(directory, error) from error
    for name in found:
        if name.name in FILES and (directory / name).is_dir():
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
    require_free(directory, overwrite=overwrite)
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
            names = _build(ledger, fresh, figures)
            # Another run may have written there meanwhile.
            require_free(directory, overwrite=overwrite)
            if directory.is_dir():
                _exchange(directory, fresh, aside / "earlier", names, existing_products(directory))
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
