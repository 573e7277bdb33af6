"""Words that every way of showing a ledger shares."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from types import MappingProxyType
from typing import TYPE_CHECKING

from wakeledger.ledger.rounding import UNKNOWN, rounded, significant
from wakeledger.ledger.rows import COUNT

if TYPE_CHECKING:
    from wakeledger.ledger.rows import Row

#: What the figures are and are not; stands on every report and below every printed ledger.
STATEMENT = (
    "These figures are engineering estimates. They do not replace certified performance data, the facility's own "
    "procedures or a test authority's limits."
)

#: Signs of the printed tables, each in a sentence.
ABOUT_U95 = "U95: expanded uncertainty, half the interval that holds the true value with 95 % probability."
ABOUT_U = "u: standard uncertainty (k = 1)."
ABOUT_COUNTS = "One count is 0.0001 of a drag coefficient."
ABOUT_ERROR = "E_n: difference, less the expected one, over its own expanded uncertainty; up to 1 the two agree."

_SPECIAL: Mapping[str, str] = MappingProxyType(
    {
        "induced_drag_free_air": "induced drag, free air",
        "induced_drag_minimum": "induced drag, least",
    }
)

#: UDUNITS strings as they are printed.
_UNITS: Mapping[str, str] = MappingProxyType(
    {"1": "", "N m": "N m", "N/m": "N/m", "m s-1": "m/s", "m2 s-1": "m²/s", "s-1": "1/s", "kg m-3": "kg/m³"}
    | {"m2": "m²", "J kg-1 K-1": "J/(kg K)", "m2 s-2": "m²/s²"}
)

#: Verdicts as they are printed; those that ask for attention are in capitals, so that they stand out without colour.
VERDICT_WORDS: Mapping[str, str] = MappingProxyType(
    {
        "pass": "pass",
        "warn": "WARN",
        "fail": "FAIL",
        "not_applicable": "n/a",
        "agrees": "agrees",
        "disagrees": "DISAGREES",
        "not_independent": "same algebra",
        "unknown": "unknown",
    }
)

#: How verdicts are shown on a terminal that has colours; nothing is said by these alone.
VERDICT_STYLES: Mapping[str, str] = MappingProxyType(
    {
        "pass": "green",
        "agrees": "green",
        "warn": "bold yellow",
        "fail": "bold red",
        "disagrees": "bold red",
        "unknown": "yellow",
        "not_independent": "dim",
        "not_applicable": "dim",
    }
)


def words(name: str) -> str:
    """A name of a row, method or check as it is printed.

    Parameters
    ----------
    name : str
        The name.

    Returns
    -------
    str

    Examples
    --------
    >>> words("edge_total_pressure_loss")
    'edge total pressure loss'
    """
    return _SPECIAL.get(name, name.replace("_", " "))


def unit_text(unit: str) -> str:
    """A UDUNITS string as it is printed.

    Parameters
    ----------
    unit : str
        The string.

    Returns
    -------
    str
        Empty for a dimensionless figure.
    """
    return _UNITS.get(unit, unit)


def in_counts(row: str) -> bool:
    """Whether a row's coefficient is printed in counts (1 count = 1e-4).

    Parameters
    ----------
    row : str
        Name of the row.

    Returns
    -------
    bool
        True for every drag.
    """
    return "drag" in row


def coefficient_text(row: Row) -> tuple[str, str, str]:
    """A row's coefficient as it is printed.

    Parameters
    ----------
    row : Row
        The row.

    Returns
    -------
    tuple of str
        Coefficient, its expanded uncertainty, and ``counts`` or an empty string; three empty strings where there is
        no coefficient.
    """
    scale, unit = (COUNT, "counts") if in_counts(row.name) else (1.0, "")
    figure, uncertainty = rounded(row.coefficient / scale, row.coefficient_expanded_uncertainty / scale)
    return ("", "", "") if figure == UNKNOWN else (figure, uncertainty, unit)


def printable(text: str) -> str:
    r"""A text from a file without the characters that would steer a terminal.

    Parameters
    ----------
    text : str
        Any text.

    Returns
    -------
    str
        With every control character replaced by a blank.

    Examples
    --------
    >>> printable("a\tb")
    'a b'
    """
    return "".join(character if character.isprintable() else " " for character in text)


def signed(difference: float, uncertainty: float) -> str:
    """A difference as it is printed: with its sign, to the place of an uncertainty's second digit.

    Parameters
    ----------
    difference, uncertainty : float
        In one unit.

    Returns
    -------
    str
        A dash where the difference is unknown.

    Examples
    --------
    >>> signed(0.0312, 0.018), signed(-0.0004, 0.018)
    ('+0.031', '0.000')
    """
    figure, _ = rounded(difference, uncertainty)
    if figure == UNKNOWN:
        return "–"
    return figure if figure.startswith("-") or not figure.strip("0.") else f"+{figure}"


def digits(value: float, count: int = 4) -> str:
    """A figure to so many significant digits.

    Parameters
    ----------
    value : float
        The figure.
    count : int
        How many.

    Returns
    -------
    str
        A dash where it is unknown.

    Examples
    --------
    >>> digits(0.031234, 2), digits(float("nan"))
    ('0.031', '–')
    """
    return significant(value, count) if math.isfinite(value) else "–"


def error_text(error: float) -> str:
    """A normalised error E_n as it is printed.

    Parameters
    ----------
    error : float
        The error.

    Returns
    -------
    str
        A dash where it is unknown.

    Examples
    --------
    >>> error_text(0.5), error_text(234.5), error_text(float("nan"))
    ('0.50', '234', '–')
    """
    return "–" if math.isnan(error) else f"{error:.2f}" if error < 100 else f"{error:.0f}"


def capital(sentence: str) -> str:
    """A sentence with a capital letter in front."""
    return sentence[:1].upper() + sentence[1:]


def grouped_reasons(reasons: Iterable[tuple[str, str | None]]) -> list[str]:
    """Reasons with everything they apply to, each said once.

    Parameters
    ----------
    reasons : iterable of (str, str or None)
        What it is about, and the reason; None where there is nothing to explain.

    Returns
    -------
    list of str

    Examples
    --------
    >>> grouped_reasons([("lift", "no source"), ("total drag", None), ("side force", "no source")])
    ['lift; side force: no source']
    """
    subjects: dict[str, list[str]] = {}
    for subject, reason in reasons:
        if reason:
            subjects.setdefault(reason, []).append(subject)
    return [f"{'; '.join(named)}: {reason}" for reason, named in subjects.items()]
