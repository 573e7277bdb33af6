"""The report: one HTML file that holds everything it shows, readable on paper and on screen."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from wakeledger.ledger.rounding import UNKNOWN, rounded
from wakeledger.present.computed_text import closure_lines, diagnostic_heads, diagnostic_lines
from wakeledger.present.repeats_text import repeats_cells
from wakeledger.present.report.page import page, pictures
from wakeledger.present.stations_text import fit_sentence, head_of, stations_lines, verdict_lines, verdict_reasons
from wakeledger.present.tunnel_text import tunnel_cells, tunnel_planes, tunnel_reasons
from wakeledger.present.wording import (
    capital,
    coefficient_text,
    digits,
    error_text,
    grouped_reasons,
    in_counts,
    signed,
    unit_text,
    words,
)

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from wakeledger.ledger.ledger import Ledger


def report_html(ledger: Ledger, figures: Mapping[str, Figure] | None = None) -> str:
    """The report of a ledger.

    Parameters
    ----------
    ledger : Ledger
        The ledger.
    figures : mapping of str to Figure, optional
        Its figures, where they have been drawn.

    Returns
    -------
    str
        A whole HTML document without external resources; the same ledger gives the same text.
    """
    from wakeledger.present.figures import draw, gallery

    drawn = draw(ledger) if figures is None else figures
    return page(
        "report.html",
        provenance=ledger.provenance,
        ledger=ledger,
        rows=_rows(ledger),
        row_reasons=grouped_reasons((words(row.name), row.reason) for row in ledger.rows),
        estimate_reasons=grouped_reasons((f"{words(x.row)}, {words(x.method)}", x.reason) for x in ledger.estimates),
        comparison_reasons=grouped_reasons((f"{x.name}, {words(x.row)}", x.reason) for x in ledger.comparisons),
        corrected=any(row.coefficient_corrected is not None for row in ledger.rows),
        estimates=_estimates(ledger),
        comparisons=_comparisons(ledger),
        closures=closure_lines(ledger),
        sources=_sources(ledger),
        summary=_summary(ledger),
        repeats=[] if ledger.repeats is None else repeats_cells(ledger, ledger.repeats),
        stations=_stations(ledger),
        tunnel=_tunnel(ledger),
        diagnostics={"heads": diagnostic_heads(ledger), "lines": diagnostic_lines(ledger)},
        reference={name: value for name, value in ledger.reference.items() if math.isfinite(value)},
        units=_scalar_units(),
        planes=_planes(ledger, drawn),
        not_drawn=_not_drawn(ledger),
        pictures=pictures(drawn, gallery.OF_LEDGER),
    )


def _planes(ledger: Ledger, drawn: Mapping[str, Figure]) -> list[dict[str, Any]]:
    """What is shown of each plane: its maps, vortices and loading along the span."""
    from wakeledger.present.figures import gallery

    planes = gallery.planes_of(ledger)
    found: list[dict[str, Any]] = []
    for k in gallery.planes_drawn(ledger):
        named = {name: drawn[own] for name in gallery.OF_PLANE if (own := gallery.name_in(ledger, name, k)) in drawn}
        shown = pictures(named, gallery.OF_PLANE)
        found.append(
            {
                "head": head_of(planes[k].station) if ledger.stations else "",
                "maps": [one for name, one in shown.items() if name != "span_loading"],
                "traverse": "traverse" in shown,
                "span": shown.get("span_loading"),
                "vortices": planes[k].vortices,
            }
        )
    return found


def _not_drawn(ledger: Ledger) -> str:
    """Which planes the report does not draw, in a sentence; empty where it draws all."""
    from wakeledger.present.figures import gallery

    shown = gallery.planes_drawn(ledger)
    left = [head_of(one.station) for k, one in enumerate(gallery.planes_of(ledger)) if k not in shown]
    if not left:
        return ""
    return (
        f"The {'plane' if len(left) == 1 else 'planes'} at {', '.join(left)} {'is' if len(left) == 1 else 'are'}"
        " not drawn here, to keep this file small: --figures writes the maps of all"
        " planes, and the archive holds their fields."
    )


def _scalar_units() -> dict[str, str]:
    from wakeledger.ledger.units import SCALAR_UNITS

    return {name: unit_text(unit) for name, unit in SCALAR_UNITS.items()}


def _shown(figure: str) -> str:
    return "–" if figure == UNKNOWN else figure


def _rows(ledger: Ledger) -> list[dict[str, Any]]:
    lines: list[dict[str, Any]] = []
    for row in ledger.rows:
        value, expanded = rounded(row.value, row.expanded_uncertainty)
        coefficient, u_coefficient, counts = coefficient_text(row)
        corrected = row.coefficient_corrected
        scale = 1e-4 if in_counts(row.name) else 1.0
        own = row.coefficient_corrected_standard_uncertainty
        expanded_own = (row.coefficient_expanded_uncertainty if own is None else row.coverage_factor * own) / scale
        corrected_text = ""
        if corrected is not None:
            figure, doubt = rounded(corrected / scale, expanded_own)
            corrected_text = figure if own is None else f"{figure} ± {doubt}"
        dof = row.degrees_of_freedom
        lines.append(
            {
                "name": words(row.name),
                "main": row.name in ("total_drag", "section_drag"),
                "value": value,
                "expanded": _shown(expanded),
                "unit": unit_text(row.unit),
                "u": digits(row.standard_uncertainty, 2),
                "k": digits(row.coverage_factor, 3),
                "dof": "∞" if math.isinf(dof) or dof >= 1e6 else "–" if math.isnan(dof) else f"{dof:.0f}",
                "coefficient": coefficient,
                "u_coefficient": _shown(u_coefficient),
                "counts": counts,
                "corrected": corrected_text,
            }
        )
    return lines


def _estimates(ledger: Ledger) -> list[dict[str, Any]]:
    lines: list[dict[str, Any]] = []
    for line in ledger.estimates:
        value, u = rounded(line.value, line.standard_uncertainty)
        lines.append(
            {
                "row": words(line.row),
                "method": words(line.method),
                "value": value,
                "u": _shown(u),
                "unit": unit_text(line.unit),
                "difference": signed(line.difference, line.standard_uncertainty),
                "expected": signed(line.expected_difference, line.standard_uncertainty),
                "error": error_text(line.normalised_error),
                "verdict": line.verdict,
            }
        )
    return lines


def _comparisons(ledger: Ledger) -> list[dict[str, Any]]:
    lines: list[dict[str, Any]] = []
    for line in ledger.comparisons:
        value, u = rounded(line.value, line.standard_uncertainty)
        lines.append(
            {
                "name": line.name,
                "row": words(line.row),
                "value": value,
                "u": _shown(u),
                "unit": unit_text(line.unit),
                "difference": signed(line.difference, line.standard_uncertainty),
                "error": error_text(line.normalised_error),
                "verdict": line.verdict,
            }
        )
    return lines


def _stations(ledger: Ledger) -> dict[str, Any] | None:
    """The planes of several stations beside each other; None where there is one plane."""
    if ledger.combined is None:
        return None
    return {
        "heads": [head_of(one.station) for one in ledger.stations],
        "lines": stations_lines(ledger),
        "verdicts": verdict_lines(ledger),
        "reasons": grouped_reasons(verdict_reasons(ledger)),
        "fit": fit_sentence(ledger.combined),
    }


def _tunnel(ledger: Ledger) -> list[dict[str, Any]]:
    """What the walls do at the model, of each plane that has such figures."""
    return [
        {
            "head": head_of(one.station) if ledger.stations else "",
            "cells": tunnel_cells(one),
            "reasons": grouped_reasons(tunnel_reasons(one)),
        }
        for one in tunnel_planes(ledger)
    ]


def _sources(ledger: Ledger) -> list[dict[str, Any]]:
    """The budget, one block per row, in counts where the row is a drag with a coefficient."""
    blocks: list[dict[str, Any]] = []
    for row in ledger.rows:
        lines = [line for line in ledger.budget if line.row == row.name]
        if not lines:
            continue
        known = in_counts(row.name) and math.isfinite(row.coefficient) and row.value
        scale, unit = (row.counts / row.value, "counts") if known else (1.0, unit_text(row.unit))
        entries = [
            {
                "source": line.source,
                "u": digits(scale * line.standard_uncertainty, 2),
                "share": f"{100 * line.share:.1f}" if math.isfinite(line.share) else "–",
            }
            for line in lines
        ]
        total = digits(scale * row.standard_uncertainty, 2)
        blocks.append({"row": words(row.name), "unit": unit, "lines": entries, "total": total})
    return blocks


def _summary(ledger: Ledger) -> list[str]:
    """What a reader must see first: which checks and cross-checks ask for attention."""
    sentences = [
        f"Check {words(check.name)} {'failed' if check.verdict == 'fail' else 'warns'}: {check.message}"
        for check in ledger.checks
        if check.verdict in ("fail", "warn")
    ]
    sentences += [
        f"{words(line.method)} disagrees with the primary {words(line.row)} (E_n = {line.normalised_error:.2f})."
        for line in ledger.estimates
        if line.verdict == "disagrees"
    ]
    sentences += [
        f"at {head_of(one.station)} {words(line.method)} disagrees with the primary {words(line.row)}"
        f" (E_n = {line.normalised_error:.2f})."
        for one in ledger.stations
        for line in one.estimates
        if line.verdict == "disagrees"
    ]
    sentences += [
        f"{line.name} disagrees with {words(line.row)} (E_n = {line.normalised_error:.2f})."
        for line in ledger.comparisons
        if line.verdict == "disagrees"
    ]
    return [capital(sentence) for sentence in sentences]
