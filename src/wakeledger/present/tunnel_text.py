"""What the walls of a tunnel do at the model, as tables."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from wakeledger.ledger.rounding import rounded, significant
from wakeledger.ledger.rows import COUNT
from wakeledger.present.printing import new_table
from wakeledger.present.stations_text import blocks_of, column_width, figures_joined, head_of
from wakeledger.present.wording import coefficient_text, in_counts, unit_text, words

if TYPE_CHECKING:
    from rich.table import Table

    from wakeledger.ledger.ledger import Ledger
    from wakeledger.ledger.rows import TunnelFigure


@dataclass(frozen=True)
class _Shown:
    """How one figure is printed: its words, the printed unit, and how many of that make one of the ledger's."""

    label: str
    unit: str
    scale: float
    classical: bool = False


_DEGREE = math.degrees(1.0)
#: In the order in which they are printed; each classical value stands below what the survey says.
_FIGURES = {
    "boundary_factor": _Shown("boundary factor δ", "", 1.0),
    "classical_small": _Shown("classical, small wing", "", 1.0, classical=True),
    "classical_elliptic": _Shown("classical, elliptic loading", "", 1.0, classical=True),
    "classical_uniform": _Shown("classical, uniform loading", "", 1.0, classical=True),
    "wall_upwash": _Shown("upwash of the walls at the model", "deg", _DEGREE),
    "angle_correction": _Shown("incidence to be added", "deg", _DEGREE),
    "wake_blockage": _Shown("wake blockage", "% of the speed", 100.0),
    "expected_wake_blockage": _Shown("classical, C_D S/4C", "% of the speed", 100.0, classical=True),
}
#: Digits of a figure that has no uncertainty of its own.
_DIGITS = 3


def tunnel_cells(ledger: Ledger) -> list[dict[str, str | bool]]:
    """What a table of the tunnel's figures shows, line by line.

    Parameters
    ----------
    ledger : Ledger
        Of one plane.

    Returns
    -------
    list of dict
        ``label``, ``value``, ``expanded`` (95 %; empty for a classical value, which has none), ``unit``, ``meaning``
        and whether it is ``classical``. Figures this table does not know keep their own names and units.
    """
    order = list(_FIGURES)
    figures = sorted(ledger.tunnel, key=lambda one: order.index(one.name) if one.name in order else len(order))
    return [_cells(figure) for figure in figures]


def _cells(figure: TunnelFigure) -> dict[str, str | bool]:
    shown = _FIGURES.get(figure.name) or _Shown(words(figure.name), unit_text(figure.unit), 1.0)
    value, u = shown.scale * figure.value, shown.scale * figure.standard_uncertainty
    texts = (significant(value, _DIGITS), "") if shown.classical else rounded(value, 2 * u)
    return {
        "label": shown.label,
        "value": texts[0],
        "expanded": texts[1],
        "unit": shown.unit,
        "meaning": figure.meaning,
        "classical": shown.classical,
    }


def tunnel_planes(ledger: Ledger) -> tuple[Ledger, ...]:
    """Ledgers whose planes have figures about a tunnel: the ledger itself, or those of its stations."""
    return tuple(one for one in (ledger, *ledger.stations) if one.tunnel)


def tunnel_reasons(ledger: Ledger) -> list[tuple[str, str | None]]:
    """Why uncertainties are unknown, each said once for all planes; a classical value has none to be known."""
    found = (
        (str(cells["label"]), figure.reason)
        for one in tunnel_planes(ledger)
        for figure in one.tunnel
        if not (cells := _cells(figure))["classical"]
    )
    return list(dict.fromkeys(found))


def tunnel_tables(ledger: Ledger, width: int) -> list[Table]:
    """The tunnel's figures as tables for the terminal, of several planes as many beside each other as it is wide.

    Parameters
    ----------
    ledger : Ledger
        With such figures, or with stations that have them.
    width : int
        Columns of the terminal.

    Returns
    -------
    list of Table
    """
    planes = [(one, tunnel_cells(one)) for one in tunnel_planes(ledger)]
    lines = {str(line["label"]): line for _, cells in planes for line in cells}
    labels = [("  " if line["classical"] else "") + label for label, line in lines.items()]
    units = [str(line["unit"]) for line in lines.values()]
    columns = []
    for one, cells in planes:
        own = {str(line["label"]): line for line in cells}
        pairs = [_pair(own.get(label)) for label in lines]
        columns.append([head_of(one.station) if ledger.stations else "value ± U95", *figures_joined(pairs)])
    found = []
    for block in blocks_of(columns, width - column_width(labels) - column_width(units)):
        table = new_table(("", "left"), *((column[0], "left") for column in block), ("", "left"))
        for k, (label, unit) in enumerate(zip(labels, units, strict=True), start=1):
            table.add_row(label, *(column[k] for column in block), unit)
        found.append(table)
    return found


def _pair(line: dict[str, str | bool] | None) -> tuple[str, str]:
    return ("–", "") if line is None else (str(line["value"]), str(line["expanded"]))


def corrected_cells(ledger: Ledger) -> list[dict[str, str]]:
    """Coefficients on the dynamic pressure corrected for blockage, beside those on the reference's.

    Parameters
    ----------
    ledger : Ledger
        The ledger.

    Returns
    -------
    list of dict
        ``row``, ``coefficient``, ``corrected`` and ``unit`` of the rows that have both.
    """
    found = []
    for row in ledger.rows:
        if row.coefficient_corrected is None or not math.isfinite(row.coefficient):
            continue
        scale = COUNT if in_counts(row.name) else 1.0
        u = row.coefficient_corrected_standard_uncertainty
        expanded = (row.coefficient_expanded_uncertainty if u is None else row.coverage_factor * u) / scale
        corrected, doubt = rounded(row.coefficient_corrected / scale, expanded)
        coefficient, _, unit = coefficient_text(row)
        if u is not None:
            corrected = f"{corrected} ± {doubt}"
        found.append({"row": words(row.name), "coefficient": coefficient, "corrected": corrected, "unit": unit})
    return found


def corrected_table(ledger: Ledger) -> Table:
    """The corrected coefficients as a table for the terminal.

    Parameters
    ----------
    ledger : Ledger
        With such coefficients.

    Returns
    -------
    Table
    """
    table = new_table(("coefficient", "left"), ("as tested", "right"), ("corrected", "right"), ("", "left"))
    for line in corrected_cells(ledger):
        table.add_row(line["row"], line["coefficient"], line["corrected"], line["unit"])
    return table
