"""Pieces of what is printed on a terminal: tables, headings and bullets, as text."""

from __future__ import annotations

import io
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

from wakeledger.ledger.rounding import UNKNOWN
from wakeledger.present.wording import STATEMENT, printable

if TYPE_CHECKING:
    from rich.console import Console
    from rich.table import Table

#: Lines longer than this are hard to read, however wide the terminal is.
LONGEST_LINE = 140


def new_console(width: int, colour: bool) -> Console:
    """A console that keeps what is printed on it.

    Parameters
    ----------
    width : int
        Columns of the terminal.
    colour : bool
        Whether to write the terminal's colour codes.

    Returns
    -------
    Console
    """
    from rich.console import Console

    return Console(
        file=io.StringIO(),
        width=max(60, min(width, LONGEST_LINE)),
        force_terminal=colour,
        color_system="standard" if colour else None,
        no_color=not colour,
        highlight=False,
        markup=False,
        emoji=False,
        legacy_windows=False,
    )


def text_of(console: Console) -> str:
    """What was printed: lines without trailing blanks, ended by a line feed."""
    file = console.file
    assert isinstance(file, io.StringIO)
    return "\n".join(line.rstrip() for line in file.getvalue().splitlines()) + "\n"


def with_statement(console: Console, *terms: str) -> str:
    """What was printed, closed by the sentence that stands below every printed result.

    Parameters
    ----------
    console : Console
        Where it was printed.
    *terms : str
        What the signs in its tables mean, a sentence each.

    Returns
    -------
    str
    """
    console.print()
    if terms:
        console.print(" ".join(terms), style="dim")
    console.print(STATEMENT, style="dim")
    return text_of(console)


def new_table(*columns: tuple[str, str], header: bool = True) -> Table:
    """An empty table.

    Parameters
    ----------
    *columns : (str, {"left", "right"})
        Head of each column, and the side its cells stand on.
    header : bool
        Whether the heads are shown.

    Returns
    -------
    Table
    """
    from rich import box
    from rich.table import Table

    style = box.SIMPLE_HEAD if header else None
    gap = (0, 1, 0, 0) if header else (0, 2, 0, 0)
    table = Table(box=style, show_header=header, show_edge=False, pad_edge=False, padding=gap)
    for name, side in columns:
        table.add_column(name, justify="right" if side == "right" else "left", overflow="fold", header_style="bold")
    return table


def heading(console: Console, title: str, test: Mapping[str, str]) -> None:
    """Print a title and what identifies the test."""
    from rich.text import Text

    console.print(Text(printable(title), style="bold"))
    if test:
        console.print(Text(printable(" · ".join(f"{key} {value}" for key, value in test.items()))))
    console.print()


def section(console: Console, title: str) -> None:
    """Print the title of a section."""
    from rich.text import Text

    console.print()
    console.print(Text(title, style="bold"))


def bullet(console: Console, sentence: str) -> None:
    """Print one sentence of a list."""
    from rich.padding import Padding
    from rich.table import Table
    from rich.text import Text

    grid = Table.grid(padding=(0, 1, 0, 0))
    grid.add_column(width=1)
    grid.add_column(ratio=1)
    grid.add_row("-", Text(printable(sentence)))
    console.print(Padding(grid, (0, 0, 0, 1)))


def sentences_of(console: Console, title: str, sentences: Sequence[str]) -> None:
    """Print a section of sentences, if there are any."""
    if sentences:
        section(console, title)
        for sentence in sentences:
            bullet(console, sentence)


def joined(pairs: Sequence[tuple[str, ...]]) -> list[str]:
    """Pairs of figures as ``a ± b`` with every part under its like."""
    left = max((len(first) for first, _ in pairs), default=0)
    right = max((len(second) for _, second in pairs if second != UNKNOWN), default=0)
    texts = []
    for first, second in pairs:
        if not first or first == UNKNOWN:
            texts.append(first.rjust(left))
        else:
            texts.append(f"{first.rjust(left)} ± {'?' if second == UNKNOWN else second.rjust(right)}")
    return texts
