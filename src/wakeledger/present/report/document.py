"""The report: one HTML file that holds everything it shows, readable on paper and on screen."""

from __future__ import annotations

import base64
import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from wakeledger.ledger.rounding import UNKNOWN, rounded, significant
from wakeledger.present.repeats_text import repeats_cells
from wakeledger.present.stations_text import fit_sentence, head_of, stations_lines, verdict_lines, verdict_reasons
from wakeledger.present.tunnel_text import tunnel_cells, tunnel_planes, tunnel_reasons
from wakeledger.present.wording import (
    STATEMENT,
    VERDICT_WORDS,
    coefficient_text,
    grouped_reasons,
    in_counts,
    signed,
    unit_text,
    words,
)

if TYPE_CHECKING:
    from jinja2 import Environment
    from matplotlib.figure import Figure

    from wakeledger.ledger.rows import Ledger

#: What each figure shows, by the name of its file.
CAPTIONS = {
    "stations": "Each drag against the station of the plane, bars U95. Where a trend is resolved, the ledger's drags "
    "are those at the trailing edge, and what the vortices lose on their way goes from induced to profile drag.",
    "section": "The window of the plane, its wake region and vortices in what surrounds them, seen from behind, "
    "looking upstream.",
    "total_pressure_loss": "Total-pressure loss, seen from behind, looking upstream. Profile drag is integrated inside "
    "the outlined wake region; hatched cells hold no measurement that can be trusted and were filled.",
    "axial_vorticity": "Axial vorticity with arrows of the crossflow. Counter-clockwise is positive; the colours are "
    "centred at zero.",
    "axial_velocity": "Velocity along the stream as a part of the stream's speed.",
    "traverse": "Loss, static pressure and speed along the traverse. The drag is integrated over the shaded wake; open "
    "circles were not measured but filled in.",
    "span_loading": "Loading along the span and the drag of each strip, with expanded uncertainties (k = 2) where they "
    "are known.",
    "estimates": "Every estimate and compared value beside its primary row; the short stroke is the difference that is "
    "to be expected of the method at this station.",
    "budget": "Share of each source in the variance of the main rows.",
}

_MAPS = ("total_pressure_loss", "axial_vorticity", "axial_velocity", "traverse")


@dataclass(frozen=True)
class Picture:
    """One figure as it stands in the report.

    Attributes
    ----------
    name : str
        Name of the figure.
    source : str
        Data address of its SVG.
    caption : str
        What it shows.
    """

    name: str
    source: str
    caption: str


def report_html(ledger: Ledger) -> str:
    """The report of a ledger.

    Parameters
    ----------
    ledger : Ledger
        The ledger.

    Returns
    -------
    str
        A whole HTML document without external resources; the same ledger gives the same text.
    """
    from wakeledger.present.figures import draw

    pictures = {name: picture(name, figure, CAPTIONS[name]) for name, figure in draw(ledger).items()}
    return (
        environment()
        .get_template("report.html")
        .render(
            ledger=ledger,
            statement=STATEMENT,
            verdicts=VERDICT_WORDS,
            rows=_rows(ledger),
            row_reasons=grouped_reasons((words(row.name), row.reason) for row in ledger.rows),
            estimate_reasons=grouped_reasons(
                (f"{words(x.row)}, {words(x.method)}", x.reason) for x in ledger.estimates
            ),
            comparison_reasons=grouped_reasons((f"{x.name}, {words(x.row)}", x.reason) for x in ledger.comparisons),
            corrected=any(row.coefficient_corrected is not None for row in ledger.rows),
            estimates=_estimates(ledger),
            comparisons=_comparisons(ledger),
            sources=_sources(ledger),
            summary=_summary(ledger),
            repeats=[] if ledger.repeats is None else repeats_cells(ledger, ledger.repeats),
            stations=_stations(ledger),
            tunnel=_tunnel(ledger),
            reference={name: value for name, value in ledger.reference.items() if math.isfinite(value)},
            units=_scalar_units(),
            maps=[pictures[name] for name in _MAPS if name in pictures],
            pictures=pictures,
            versions={
                key.removeprefix("version "): text for key, text in ledger.provenance.items() if "version " in key
            },
        )
    )


def environment() -> Environment:
    """Templates of the reports, with their filters."""
    from jinja2 import Environment, PackageLoader, StrictUndefined

    found = Environment(
        loader=PackageLoader("wakeledger.present.report", package_path=""),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    found.filters |= {"words": words, "unit": unit_text, "digits": digits, "scalar": _scalar, "cell": _cell}
    return found


def picture(name: str, figure: Figure, caption: str) -> Picture:
    """A figure as it stands in a report.

    Parameters
    ----------
    name : str
        Its name.
    figure : Figure
        The figure.
    caption : str
        What it shows.

    Returns
    -------
    Picture
    """
    from wakeledger.present.figures import figure_bytes

    encoded = base64.b64encode(figure_bytes(figure, "svg")).decode("ascii")
    return Picture(name, f"data:image/svg+xml;base64,{encoded}", caption)


def _scalar_units() -> dict[str, str]:
    from wakeledger.ledger.units import SCALAR_UNITS

    return {name: unit_text(unit) for name, unit in SCALAR_UNITS.items()}


def digits(value: float, count: int = 4) -> str:
    """A figure to so many significant digits, a dash where it is unknown."""
    return significant(value, count) if math.isfinite(value) else "–"


def _scalar(value: object) -> str:
    return f"{value:.6g}" if isinstance(value, float) else str(value)


def _cell(value: object) -> str:
    """One entry of a table whose columns the report does not know: a number, a count or a word."""
    try:
        number = float(value)  # type: ignore[arg-type]
    except (TypeError, ValueError):
        return str(value)
    return f"{number:.4g}" if math.isfinite(number) else "–"


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
                "error": f"{line.normalised_error:.2f}" if math.isfinite(line.normalised_error) else "–",
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
                "error": f"{line.normalised_error:.2f}" if math.isfinite(line.normalised_error) else "–",
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
    return [sentence[0].upper() + sentence[1:] for sentence in sentences]
