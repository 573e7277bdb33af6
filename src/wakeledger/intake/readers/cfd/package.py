"""The package that reads meshes: loaded when it is needed, missed in one line, and its messages caught."""

from __future__ import annotations

import contextlib
import importlib
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from wakeledger.core.errors import DataError, MissingPackageError

_INSTALL = "pip install 'wakeledger[cfd]'"


def optional_package(name: str, what: str, path: Path) -> Any:
    """Load a package of the extra ``cfd``.

    Parameters
    ----------
    name : {"pyvista", "h5py"}
        The package.
    what : str
        What kind of file needs it, for the message ("a VTK XML file").
    path : Path
        That file.

    Returns
    -------
    module

    Raises
    ------
    MissingPackageError
        Where the package is not installed; with the command that installs it.
    """
    try:
        return importlib.import_module(name)
    except ImportError as error:
        raise MissingPackageError(
            f"this is {what}, and the package that reads it ({name}) is not installed",
            file=path,
            remedy=f"install it with: {_INSTALL}",
        ) from error


@contextlib.contextmanager
def caught_messages(what: str, path: Path) -> Iterator[None]:
    """Turn what the package prints as an error into an exception.

    Parameters
    ----------
    what : str
        What kind of file it is, for the message.
    path : Path
        The file being read.

    Raises
    ------
    DataError
        With the first message, where there is one.
    """
    from vtkmodules.vtkCommonCore import vtkOutputWindow, vtkStringOutputWindow

    window, previous = vtkStringOutputWindow(), vtkOutputWindow.GetInstance()
    vtkOutputWindow.SetInstance(window)
    try:
        yield
    finally:
        vtkOutputWindow.SetInstance(previous)
    message = _first_error(window.GetOutput())
    if message:
        raise damaged(message, what, path)


def _first_error(text: str) -> str | None:
    """The first error among the package's messages: a line with the place in its source, then the text."""
    found = re.search(r"(?:ERROR: In .*\n|ERR\|\s*)(?:\w+ \([^)]*\):\s*)?(.*)", text)
    return found[1].strip() if found else None


def damaged(message: str, what: str, path: Path) -> DataError:
    """The error for a file that the package fails on.

    Parameters
    ----------
    message : str
        What the package says.
    what : str
        What kind of file it is.
    path : Path
        The file.

    Returns
    -------
    DataError
        On one line.
    """
    line = " ".join(message.split())
    return DataError(
        f"this is {what}, and it cannot be read ({line[:160]})",
        file=path,
        remedy="check that it is whole, and write it again if it is not",
    )
