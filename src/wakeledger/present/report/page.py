"""What all reports are made with: their templates, and figures as they stand in them."""

from __future__ import annotations

import base64
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from wakeledger.present.wording import STATEMENT, VERDICT_WORDS, digits, unit_text, words

if TYPE_CHECKING:
    from jinja2 import Environment
    from matplotlib.figure import Figure

    from wakeledger.present.figures.drawing import Drawing


@dataclass(frozen=True)
class Picture:
    """One figure as it stands in a report.

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


def pictures(figures: Mapping[str, Figure], drawings: Mapping[str, Drawing[Any]]) -> dict[str, Picture]:
    """Those of a record's figures that a table names, with the table's captions.

    Parameters
    ----------
    figures : mapping of str to Figure
        By name.
    drawings : mapping of str to Drawing
        The table.

    Returns
    -------
    dict of str to Picture
    """
    return {name: picture(name, figures[name], one.caption) for name, one in drawings.items() if name in figures}


def page(template: str, *, provenance: Mapping[str, str], **values: object) -> str:
    """A whole HTML document without external resources.

    Parameters
    ----------
    template : str
        Name of its template, which extends ``base.html``.
    provenance : mapping of str to str
        The record's.
    **values : object
        What the template shows.

    Returns
    -------
    str
        The same for the same values.
    """
    versions = {key.removeprefix("version "): text for key, text in provenance.items() if key.startswith("version ")}
    shared = {"provenance": provenance, "versions": versions, "statement": STATEMENT, "verdicts": VERDICT_WORDS}
    return _environment().get_template(template).render(shared | values)


def _environment() -> Environment:
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


def _scalar(value: object) -> str:
    return f"{value:.6g}" if isinstance(value, float) else str(value)


def _cell(value: object) -> str:
    """One entry of a table whose columns the report does not know: a number, a count or a word."""
    try:
        number = float(value)  # type: ignore[arg-type]
    except (TypeError, ValueError):
        return str(value)
    return f"{number:.4g}" if math.isfinite(number) else "–"
