"""The map of a survey as lines for a terminal, and plain characters for terminals that have no others."""

from __future__ import annotations

from typing import TYPE_CHECKING

from wakeledger.ledger.plane_map import SYMBOLS, PlaneMap

if TYPE_CHECKING:
    from rich.text import Text

#: Widest line of a map, its scale included.
MAP_WIDTH = 78
#: Characters to the left of a map's first place.
_MARGIN = 9
_FRAMES = {True: ("\N{BOX DRAWINGS LIGHT VERTICAL}", "\N{BOX DRAWINGS LIGHT HORIZONTAL}"), False: ("|", "-")}
_DRAWN = {".": "\N{MIDDLE DOT}", "#": "\N{MEDIUM SHADE}", "o": "\N{WHITE CIRCLE}"}
_STYLES = {"#": "blue", "=": "cyan", "o": "bold red", "!": "bold yellow"}
_PLAIN = str.maketrans(
    {
        "\N{HORIZONTAL ELLIPSIS}": "...",
        "\N{MULTIPLICATION SIGN}": "x",
        "\N{EN DASH}": "-",
        "\N{MINUS SIGN}": "-",
        "\N{BOX DRAWINGS LIGHT HORIZONTAL}": "-",
        "\N{MIDDLE DOT}": "|",
        "\N{PLUS-MINUS SIGN}": "+-",
        "\N{SUPERSCRIPT TWO}": "2",
        "\N{SUPERSCRIPT THREE}": "3",
    }
)


def plain(text: str) -> str:
    """A text in ASCII as far as its own words go; other characters stay.

    Parameters
    ----------
    text : str
        Any text.

    Returns
    -------
    str

    Examples
    --------
    >>> plain("151 \u00d7 61, 1 \u2026 2 m\u00b2")
    '151 x 61, 1 ... 2 m2'
    """
    return text.translate(_PLAIN)


def map_lines(chart: PlaneMap, *, width: int = MAP_WIDTH, unicode: bool = True) -> list[Text]:
    """A map with its scales and its legend.

    Parameters
    ----------
    chart : PlaneMap
        The map.
    width : int
        Columns of the terminal; a map takes at most `MAP_WIDTH` of them.
    unicode : bool
        Whether the terminal has other characters than ASCII.

    Returns
    -------
    list of rich.text.Text
        A map of a plane is seen from behind: y to the right, z upwards.
    """
    from rich.text import Text

    room = min(width, MAP_WIDTH) - _MARGIN - 1
    drawn = chart.drawn(room)
    side, level = _FRAMES[unicode]
    columns = len(drawn.rows[0])
    lines: list[Text] = []
    labels = _labels(drawn)
    for k, row in enumerate(drawn.rows):
        line = Text(f"{labels.get(k, ''):>{_MARGIN - 2}} {side}")
        for symbol in row:
            line.append(_DRAWN.get(symbol, symbol) if unicode else symbol, style=_STYLES.get(symbol))
        line.append(side)
        lines.append(line)
    if not chart.is_line:
        rule = Text(f"{'':{_MARGIN - 1}}{level * (columns + 2)}")
        lines = [rule, *lines, rule]
    first, last, axis = (*drawn.z, "z, m") if chart.is_line and drawn.y == (0.0, 0.0) else (*drawn.y, "y, m")
    ends = (f"{first:.4g}", f"{last:.4g}")
    scale = f"{ends[0]}{axis:^{max(columns - len(ends[0]) - len(ends[1]), len(axis) + 2)}}{ends[1]}"
    lines.append(Text(f"{'':{_MARGIN}}{scale}"))
    lines.append(_legend(chart, width=min(width, MAP_WIDTH), unicode=unicode))
    return lines


def _labels(drawn: PlaneMap) -> dict[int, str]:
    """What stands to the left of a row."""
    last = len(drawn.rows) - 1
    return {} if drawn.is_line else {0: f"{drawn.z[1]:.4g}", last // 2: "z, m", last: f"{drawn.z[0]:.4g}"}


def _legend(chart: PlaneMap, *, width: int, unicode: bool) -> Text:
    """The symbols that occur and what they stand for, in lines of at most the width."""
    from rich.text import Text

    occurring = set("".join(chart.rows))
    text, column = Text(" "), 1
    for symbol, meaning in SYMBOLS.items():
        if symbol not in occurring:
            continue
        entry = f"{(_DRAWN.get(symbol, symbol) if unicode else symbol) if symbol.strip() else 'blank'} {meaning}"
        if column + len(entry) > width:
            text.append("\n ")
            column = 1
        text.append(entry[0], style=_STYLES.get(symbol))
        text.append(entry[1:] + "   ")
        column += len(entry) + 3
    return text
