"""Figures as they are printed: two significant digits of the uncertainty, and the value to the same place."""

from __future__ import annotations

import math

UNKNOWN = "unknown"


def rounded(value: float, uncertainty: float) -> tuple[str, str]:
    """A value and its uncertainty as text, rounded to two significant digits of the uncertainty.

    Parameters
    ----------
    value : float
        The value; NaN is printed as ``unknown``.
    uncertainty : float
        Its uncertainty in the same unit, standard or expanded; NaN is printed as ``unknown`` and the value then keeps
        four significant digits.

    Returns
    -------
    tuple of str
        Value and uncertainty, both with the same number of decimals.

    Notes
    -----
    Two digits are what GUM 7.2.6 recommends at most. An uncertainty above 99 is rounded to whole units only, so that no
    digit before the decimal point is replaced by a zero.

    Examples
    --------
    >>> rounded(4.70812, 0.1038)
    ('4.71', '0.10')
    >>> rounded(-123.456, 2.34)
    ('-123.5', '2.3')
    >>> rounded(4.70812, float("nan"))
    ('4.708', 'unknown')
    """
    if not math.isfinite(value):
        return UNKNOWN, UNKNOWN if not math.isfinite(uncertainty) else significant(uncertainty, 2)
    if not math.isfinite(uncertainty) or uncertainty <= 0:
        return significant(value, 4), UNKNOWN if not math.isfinite(uncertainty) else "0"
    decimals = _decimals(uncertainty, 2)
    return _signed(f"{value:.{decimals}f}"), f"{uncertainty:.{decimals}f}"


def significant(value: float, digits: int) -> str:
    """A value to so many significant digits, without an exponent where it is between 1e-4 and 1e9.

    Parameters
    ----------
    value : float
        The value; NaN is printed as ``unknown``.
    digits : int
        Number of significant digits.

    Returns
    -------
    str

    Examples
    --------
    >>> significant(0.0012345, 3)
    '0.00123'
    """
    if not math.isfinite(value):
        return UNKNOWN if math.isnan(value) else str(value)
    if value == 0:
        return "0"
    if not 1e-4 <= abs(value) < 1e9:
        return f"{value:.{digits - 1}e}"
    return f"{value:.{_decimals(abs(value), digits)}f}"


def _decimals(magnitude: float, digits: int) -> int:
    exponent = int(f"{magnitude:.{digits - 1}e}".partition("e")[2])
    return max(0, digits - 1 - exponent)


def _signed(text: str) -> str:
    """Drop the sign of a value that rounds to zero."""
    return text.lstrip("-") if not text.strip("-0.") else text
