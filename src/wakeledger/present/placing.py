"""Files built aside and then put in their place together, so that they appear whole or not at all."""

from __future__ import annotations

import errno
import os
import shutil
import tempfile
from collections.abc import Callable, Sequence
from contextlib import suppress
from pathlib import Path

from wakeledger.core.errors import DataError, ProductExistsError

#: Folder of the figures, where they are asked for.
FIGURES = "figures"
#: So many of the files that are in the way are named in a message.
_NAMED = 4


def existing(directory: Path, files: Sequence[str], ours: Callable[[str], bool] | None = None) -> tuple[Path, ...]:
    """Products of an earlier run in a folder.

    Parameters
    ----------
    directory : Path
        The folder; it need not exist.
    files : sequence of str
        Names of the products beside the figures.
    ours : callable, optional
        Whether a file of this name in the folder of the figures is a product, too; without it none is.

    Returns
    -------
    tuple of Path
        Relative to the folder.
    """
    found = [Path(name) for name in files if (directory / name).exists()]
    folder = directory / FIGURES
    if ours is not None and folder.is_dir():
        found += sorted(path.relative_to(directory) for path in folder.iterdir() if ours(path.name))
    return tuple(found)


def require_free(
    directory: Path, files: Sequence[str], ours: Callable[[str], bool] | None = None, *, overwrite: bool
) -> None:
    """Refuse a folder that already holds products, or that cannot be written.

    Parameters
    ----------
    directory : Path
        Where the products are to go.
    files, ours
        As for `existing`.
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
        found = existing(directory, files, ours)
    except OSError as error:
        raise _unwritable(directory, error) from error
    for name in found:
        if name.name in files and (directory / name).is_dir():
            raise DataError(
                f"{name} is a folder there", file=directory, remedy="move it, or choose another place with --out"
            )
    if found and not overwrite:
        names = ", ".join(str(name) for name in found[:_NAMED])
        more = f" and {len(found) - _NAMED} more" if len(found) > _NAMED else ""
        raise ProductExistsError(
            f"{names}{more} exist already and nothing was changed",
            file=directory,
            remedy="add --overwrite to replace them, or choose another place with --out",
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
        remedy="choose another place with --out",
    )


def write_whole(
    directory: Path,
    build: Callable[[Path], tuple[Path, ...]],
    *,
    files: Sequence[str],
    ours: Callable[[str], bool] | None = None,
    overwrite: bool,
) -> tuple[Path, ...]:
    """Build files in a folder aside and put them in their place together.

    Parameters
    ----------
    directory : Path
        The folder; it is made where it is missing. Other files in it stay as they are.
    build : callable
        Writes the files into the empty folder it is given; returns their names relative to it.
    files, ours
        As for `existing`.
    overwrite : bool
        Whether existing products are replaced. Figures of an earlier run go too, so that none is out of date.

    Returns
    -------
    tuple of Path
        What `build` returned.

    Raises
    ------
    ProductExistsError
        If there are products and they must not be replaced.
    DataError
        If the folder cannot be written.
    """
    require_free(directory, files, ours, overwrite=overwrite)
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
            names = _built(build, fresh, directory)
            # Another run may have written there meanwhile.
            require_free(directory, files, ours, overwrite=overwrite)
            if directory.is_dir():
                _exchange(directory, fresh, aside / "earlier", names, existing(directory, files, ours))
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


def _built(build: Callable[[Path], tuple[Path, ...]], fresh: Path, directory: Path) -> tuple[Path, ...]:
    """Build the files; an error that names one of them, which will be gone, names the folder they are for."""
    try:
        return build(fresh)
    except DataError as error:
        if error.file is None or not Path(error.file).is_relative_to(fresh):
            raise
        raise DataError(error.found, file=directory, remedy=error.remedy) from error
    except RuntimeError as error:
        # The netCDF library reports a full disk as an error of its own.
        if not str(error).startswith("NetCDF:"):
            raise
        raise OSError(errno.EIO, str(error)) from error


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
