"""The planes of several stations beside each other, as tables."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from wakeledger.ledger.rounding import rounded, significant
from wakeledger.ledger.rows import COUNT
from wakeledger.present.printing import joined, new_table
from wakeledger.present.wording import VERDICT_WORDS, error_text, in_counts, unit_text, words

if TYPE_CHECKING:
    from rich.table import Table

    from wakeledger.ledger.ledger import Combined, Ledger
    from wakeledger.ledger.rows import Row

#: Rows that a resolved trend gives at the trailing edge; all others are means.
_FOLLOWED = ("induced_drag", "induced_drag_free_air", "profile_drag", "total_drag", "span_efficiency")
#: What the last line of the table shows.
DECAY = "vortex decay"
#: Blanks between two columns.
_GAP = 2


@dataclass(frozen=True)
class Scale:
    """What a row of several planes is printed in.

    Attributes
    ----------
    per_unit : float
        How many of `unit` make one of the row's own unit.
    unit : str
        As it is printed.
    of_coefficient : bool
        Whether the coefficient and its uncertainty are printed instead of the value.
    """

    per_unit: float
    unit: str
    of_coefficient: bool

    def figures(self, row: Row) -> tuple[float, float]:
        """The row's figure and its expanded uncertainty in `unit`."""
        if not self.of_coefficient:
            return row.value, row.expanded_uncertainty
        one = COUNT if in_counts(row.name) else 1.0
        return row.coefficient / one, row.coefficient_expanded_uncertainty / one


def scale_of(ledger: Ledger, name: str) -> Scale:
    """What a row is printed in: its coefficient where that is known at every station, its SI unit otherwise.

    Parameters
    ----------
    ledger : Ledger
        With stations.
    name : str
        A row that all of them have.

    Returns
    -------
    Scale
    """
    rows = [one.row(name) for one in (ledger, *ledger.stations)]
    known = (row.coefficient_expanded_uncertainty for row in rows)
    own = rows[0]
    if own.value and all(math.isfinite(row.coefficient) for row in rows) and all(math.isfinite(u) for u in known):
        counted = in_counts(name)
        return Scale(own.coefficient / own.value / (COUNT if counted else 1.0), "counts" if counted else "", True)
    return Scale(1.0, unit_text(own.unit), False)


def head_of(station: float) -> str:
    """A station as the head of its column."""
    return f"{station:g} m"


def how(name: str, combined: Combined) -> str:
    """How a combined row came about."""
    followed = combined.method == "extrapolated" and name in _FOLLOWED
    return "trailing edge" if followed else "mean"


@dataclass(frozen=True)
class StationsLine:
    """One line of the table of several planes.

    Attributes
    ----------
    label, unit, how : str
        The row's words, what it is printed in, and how the combined figure came about.
    stations : tuple of (str, str)
        Figure and expanded uncertainty at each station.
    combined : (str, str)
        The combined ones; empty for the decay.
    """

    label: str
    unit: str
    stations: tuple[tuple[str, str], ...]
    combined: tuple[str, str]
    how: str

    @property
    def figures(self) -> tuple[tuple[str, str], ...]:
        """Those of the stations, then the combined ones."""
        return (*self.stations, self.combined)


def stations_lines(ledger: Ledger) -> tuple[StationsLine, ...]:
    """Every row at every station, and what the trailing vortices have lost by each.

    Parameters
    ----------
    ledger : Ledger
        With stations.

    Returns
    -------
    tuple of StationsLine
    """
    assert ledger.combined is not None
    found = []
    for row in ledger.rows:
        scale = scale_of(ledger, row.name)
        planes = tuple(rounded(*scale.figures(one.row(row.name))) for one in ledger.stations)
        combined = rounded(*scale.figures(row))
        found.append(StationsLine(words(row.name), scale.unit, planes, combined, how(row.name, ledger.combined)))
    decay = _decay_line(ledger, ledger.combined)
    return (*found, *([] if decay is None else [decay]))


def _decay_line(ledger: Ledger, combined: Combined) -> StationsLine | None:
    if not any(math.isfinite(lost) for lost in combined.decay):
        return None
    scale = scale_of(ledger, "induced_drag")
    planes = tuple(
        rounded(scale.per_unit * lost, 2 * scale.per_unit * doubt)
        for lost, doubt in zip(combined.decay, combined.decay_uncertainty, strict=True)
    )
    said = "added back" if combined.method == "extrapolated" else "not resolved"
    return StationsLine(DECAY, scale.unit, planes, ("–", ""), said)


def fit_sentence(combined: Combined) -> str | None:
    """What the fit along the stations found, in a sentence; None where there was none."""
    if not math.isfinite(combined.diffusivity):
        return None
    value, expanded = rounded(combined.diffusivity, 2 * combined.diffusivity_uncertainty)
    free = combined.degrees_of_freedom
    return (
        f"Effective diffusivity of the trailing vortices {value} ± {expanded} m²/s (k = 2); misfit of the planes:"
        f" chi-square {significant(combined.chi_square, 2)} with {free:g} degree{'' if free == 1 else 's'} of freedom."
    )


def stations_tables(ledger: Ledger, width: int) -> list[Table]:
    """The rows at every station as tables for the terminal, as many beside each other as it is wide.

    Parameters
    ----------
    ledger : Ledger
        With stations.
    width : int
        Columns of the terminal.

    Returns
    -------
    list of Table
        The last one has the combined figures.
    """
    lines = stations_lines(ledger)
    planes = [
        [head_of(one.station), *figures_joined([line.stations[k] for line in lines])]
        for k, one in enumerate(ledger.stations)
    ]
    combined = ["combined", *figures_joined([line.combined for line in lines])]
    last = ["", *(line.how for line in lines)]
    room = width - column_width([line.label for line in lines]) - column_width([line.unit for line in lines])
    blocks = blocks_of(planes, room)
    if sum(map(column_width, (*blocks[-1], combined, last))) > room:
        blocks.append([])
    blocks[-1].append(combined)
    found = []
    for block in blocks:
        final = block[-1] is combined
        ends = [("", "left")] * (2 if final else 1)
        table = new_table(("", "left"), *((column[0], "left") for column in block), *ends)
        for k, line in enumerate(lines, start=1):
            table.add_row(line.label, *(column[k] for column in block), line.unit, *([last[k]] if final else []))
        found.append(table)
    return found


def figures_joined(pairs: Sequence[tuple[str, str]]) -> list[str]:
    """Pairs as `joined` writes them; what has no uncertainty to be known has no ``±``."""
    return [
        text if second else text.rpartition(" ± ")[0] for text, (_, second) in zip(joined(pairs), pairs, strict=True)
    ]


def column_width(cells: Sequence[str]) -> int:
    """Columns of the terminal that a column of a table takes, its gap included."""
    return max(map(len, cells), default=0) + _GAP


def blocks_of(columns: Sequence[list[str]], room: int) -> list[list[list[str]]]:
    """Columns in blocks that are no wider than there is room for."""
    blocks: list[list[list[str]]] = [[]]
    used = 0
    for column in columns:
        wide = column_width(column)
        if blocks[-1] and used + wide > room:
            blocks.append([])
            used = 0
        blocks[-1].append(column)
        used += wide
    return blocks


@dataclass(frozen=True)
class VerdictsLine:
    """What one other method says at every station.

    Attributes
    ----------
    row, method : str
        In words.
    stations : tuple of (str, str)
        Verdict ("" where the plane has no such estimate) and E_n as printed.
    """

    row: str
    method: str
    stations: tuple[tuple[str, str], ...]


def verdict_lines(ledger: Ledger) -> tuple[VerdictsLine, ...]:
    """Verdicts of the other methods at every station.

    Parameters
    ----------
    ledger : Ledger
        With stations.

    Returns
    -------
    tuple of VerdictsLine
    """
    known = {(line.row, line.method): k for one in ledger.stations for k, line in enumerate(one.estimates)}
    found = []
    for row, method in sorted(known, key=lambda key: known[key]):
        planes = []
        for one in ledger.stations:
            line = next((line for line in one.estimates if (line.row, line.method) == (row, method)), None)
            text = "" if line is None or math.isnan(line.normalised_error) else error_text(line.normalised_error)
            planes.append(("" if line is None else line.verdict, text))
        found.append(VerdictsLine(words(row), words(method), tuple(planes)))
    return tuple(found)


def verdict_reasons(ledger: Ledger) -> list[tuple[str, str | None]]:
    """Why verdicts are unknown or estimates not independent, each said once for all planes."""
    pairs = (
        (f"{words(line.row)}, {words(line.method)}", line.reason) for one in ledger.stations for line in one.estimates
    )
    return list(dict.fromkeys(pairs))


def verdict_tables(ledger: Ledger, width: int) -> list[Table]:
    """Verdicts of the other methods at every station as tables for the terminal.

    Parameters
    ----------
    ledger : Ledger
        With stations.
    width : int
        Columns of the terminal.

    Returns
    -------
    list of Table
    """
    lines = verdict_lines(ledger)
    columns = []
    for k, one in enumerate(ledger.stations):
        cells = [line.stations[k] for line in lines]
        widest = max((len(VERDICT_WORDS.get(verdict, "–")) for verdict, _ in cells), default=0)
        texts = [f"{VERDICT_WORDS.get(verdict, '–'):<{widest}}  {error}".rstrip() for verdict, error in cells]
        columns.append([head_of(one.station), *texts])
    fixed = column_width([line.row for line in lines]) + column_width([line.method for line in lines])
    found = []
    for block in blocks_of(columns, width - fixed):
        table = new_table(("", "left"), ("method", "left"), *((column[0], "left") for column in block))
        for k, line in enumerate(lines, start=1):
            table.add_row(line.row, line.method, *(column[k] for column in block))
        found.append(table)
    return found
