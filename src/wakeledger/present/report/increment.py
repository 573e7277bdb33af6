"""The report of an increment, in the manner of a ledger's."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from wakeledger.ledger.rounding import rounded
from wakeledger.ledger.rows import COUNT
from wakeledger.present.increment_text import OUTCOMES, corrected_cells, figure_text, largest_part, part_text
from wakeledger.present.report.page import page, pictures
from wakeledger.present.stations_text import head_of
from wakeledger.present.wording import capital, digits, grouped_reasons, unit_text, words

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from wakeledger.ledger.increment import Increment

_CLASSES = {True: "pass", False: "not_applicable", None: "unknown"}


def increment_html(increment: Increment, figures: Mapping[str, Figure] | None = None) -> str:
    """The report of an increment.

    Parameters
    ----------
    increment : Increment
        The increment.
    figures : mapping of str to Figure, optional
        Its figures, where they have been drawn.

    Returns
    -------
    str
        A whole HTML document without external resources; the same increment gives the same text.
    """
    from wakeledger.present.figures.increment import OF_INCREMENT, draw_increment

    drawn = draw_increment(increment) if figures is None else figures
    return page(
        "increment.html",
        provenance=increment.provenance,
        increment=increment,
        rows=_rows(increment),
        reasons=grouped_reasons((words(row.name), row.reason) for row in increment.rows),
        corrected=corrected_cells(increment),
        sentences=[capital(row.statement) for row in increment.rows],
        cancelled=_cancelled(increment),
        kept=grouped_reasons((line.source, line.reason) for line in increment.not_cancelled),
        attention=[
            *increment.warnings,
            *(f"In {name} a check failed: {text}" for name, side in _sides(increment) for text in side.failed),
        ],
        sides=_sides(increment),
        planes=_planes(increment, drawn),
        pictures=pictures(drawn, OF_INCREMENT),
    )


def _planes(increment: Increment, drawn: Mapping[str, Figure]) -> list[dict[str, Any]]:
    """Maps of the change at each station."""
    from wakeledger.present.figures.increment import OF_PLANES, differences_of, name_in

    found = []
    for k, one in enumerate(differences_of(increment)):
        named = {name: drawn[own] for name in OF_PLANES if (own := name_in(increment, name, k)) in drawn}
        known = increment.further_planes and one.plane is not None
        found.append(
            {
                "head": head_of(float(one.plane["x"])) if known and one.plane is not None else "",
                "maps": list(pictures(named, OF_PLANES).values()),
            }
        )
    return [one for one in found if one["maps"]]


def _sides(increment: Increment) -> tuple[tuple[str, Any], ...]:
    return ("A", increment.a), ("B", increment.b)


def _rows(increment: Increment) -> list[dict[str, Any]]:
    lines = []
    for row in increment.rows:
        value, expanded = figure_text(row.value)
        counts, counts_expanded = figure_text(row.coefficient, COUNT)
        judged = row.judged
        ratio = (
            judged.uncancelled_uncertainty / judged.standard_uncertainty if judged.standard_uncertainty else math.nan
        )
        nu = judged.degrees_of_freedom
        lines.append(
            {
                "name": words(row.name),
                "main": row.name in ("total_drag", "section_drag"),
                "a": rounded(row.value.a, row.value.expanded_uncertainty)[0],
                "b": rounded(row.value.b, row.value.expanded_uncertainty)[0],
                "value": value or "–",
                "expanded": expanded if row.resolved is not None else "",
                "unit": unit_text(row.unit),
                "counts": counts,
                "counts_expanded": counts_expanded if row.coefficient.resolved is not None else "",
                "u": digits(row.value.standard_uncertainty, 2),
                "k": digits(judged.coverage_factor, 3),
                "dof": "∞" if math.isinf(nu) or nu >= 1e6 else "–" if math.isnan(nu) else f"{nu:.0f}",
                "ratio": digits(ratio, 3),
                "outcome": OUTCOMES[row.resolved],
                "class": _CLASSES[row.resolved],
            }
        )
    return lines


def _cancelled(increment: Increment) -> list[dict[str, Any]]:
    """Shared sources, one block per row."""
    blocks = []
    for row in increment.rows:
        lines = [line for line in increment.cancellations if line.row == row.name]
        if not lines:
            continue
        in_counts = row.judged is row.coefficient
        entries = []
        whole = largest_part(lines, in_counts=in_counts)
        for line in lines:
            figures = (line.in_a, line.in_b, line.left)
            if in_counts:
                figures = (line.coefficient_in_a, line.coefficient_in_b, line.coefficient_left)
            name = line.source_a if line.source_a == line.source_b else f"{line.source_a} / {line.source_b}"
            scale = COUNT if in_counts else 1.0
            shown = [part_text(figure / scale, whole / scale) for figure in figures]
            entries.append({"source": name, "shared_id": line.shared_id, "figures": shown})
        unit = "counts" if in_counts else unit_text(row.unit)
        blocks.append({"row": words(row.name), "unit": unit, "lines": entries})
    return blocks
