"""What the terminal is like, and printing to it."""

from __future__ import annotations

import io
import os
import shutil
import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path

import click

Progress = Callable[[int, int], None]

#: Width of what is printed where there is no terminal.
PIPED_WIDTH = 100


def width() -> int:
    """Columns of the terminal, or of the environment variable COLUMNS, or a fixed number where neither says."""
    return shutil.get_terminal_size((PIPED_WIDTH, 24)).columns


def colour() -> bool:
    """Whether colour codes may be written to standard output (https://no-color.org)."""
    return sys.stdout.isatty() and not os.environ.get("NO_COLOR") and os.environ.get("TERM") != "dumb"


def unicode() -> bool:
    """Whether standard output takes characters beyond ASCII."""
    return (sys.stdout.encoding or "ascii").lower().replace("_", "-").startswith("utf")


def show(text: str) -> None:
    """Write a text to standard output; characters its encoding does not have become question marks.

    Parameters
    ----------
    text : str
        The text with its last line feed.
    """
    if isinstance(sys.stdout, io.TextIOWrapper):
        sys.stdout.reconfigure(errors="replace")
    click.echo(text, nl=False, color=colour())


def show_written(directory: Path, names: Sequence[Path]) -> None:
    """Say which files were written; of a folder among them its name.

    Parameters
    ----------
    directory : Path
        Where.
    names : sequence of Path
        The files, relative to it.
    """
    listed = dict.fromkeys(str(name) if len(name.parts) == 1 else f"{name.parts[0]}/" for name in names)
    show(f"\nWritten to {directory}: {', '.join(listed)}\n")


@contextmanager
def progress_bar(label: str, *, quiet: bool) -> Iterator[Progress | None]:
    """A progress bar on standard error, while it is a terminal.

    Parameters
    ----------
    label : str
        What is being done.
    quiet : bool
        Whether to show none.

    Yields
    ------
    callable or None
        Called with the number of steps done and the number of steps there are; None where nothing is shown.
    """
    if quiet or not sys.stderr.isatty():
        yield None
        return
    with click.progressbar(length=1, label=label, file=sys.stderr, show_pos=False) as bar:

        def progress(done: int, total: int) -> None:
            bar.length = max(1, total)
            bar.update(min(done, bar.length) - bar.pos)

        yield progress
