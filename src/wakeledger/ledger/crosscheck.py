"""Holding one figure against another: the normalised error of ISO/IEC 17043 and its verdict."""

from __future__ import annotations

import math

from wakeledger.core.errors import SurveyError
from wakeledger.core.estimate import Estimate
from wakeledger.ledger.rows import Comparison, CrossCheck, Row, Verdict

#: Coverage factor of the difference's expanded uncertainty (95 %, normal).
COVERAGE_FACTOR = 2.0

#: Rows that are twice the half model's.
DOUBLED_ROWS = frozenset(
    {"profile_drag", "induced_drag", "induced_drag_free_air", "wave_drag", "residual_drag", "total_drag", "lift"}
    | {"induced_drag_minimum"}
)


def normalised_error(difference: float, expected_difference: float, uncertainty: float) -> float:
    """Normalised error E_n of a difference.

    Parameters
    ----------
    difference : float
        Observed difference, any unit.
    expected_difference : float
        The difference that was to be expected, same unit.
    uncertainty : float
        Standard uncertainty (k = 1) of the observed minus the expected difference, covariance included, same unit.

    Returns
    -------
    float
        E_n, dimensionless, never negative; NaN where anything is unknown or the uncertainty is not positive.

    Notes
    -----
    E_n = abs(d - d_expected) / (2 u(d)), ISO/IEC 17043. Up to 1 the two agree.

    Examples
    --------
    >>> normalised_error(-0.75, -0.25, 0.5)
    0.5
    """
    if not uncertainty > 0 or not math.isfinite(uncertainty):
        return math.nan
    return abs(difference - expected_difference) / (COVERAGE_FACTOR * uncertainty)


def difference_uncertainty(first: float, second: float, covariance: float = 0.0) -> float:
    """Standard uncertainty of the difference of two figures.

    Parameters
    ----------
    first, second : float
        Standard uncertainties (k = 1), same unit; NaN where unknown.
    covariance : float
        Covariance of the two figures, unit squared.

    Returns
    -------
    float
        sqrt(u1² + u2² - 2 cov), GUM equation 16; NaN where either is unknown.

    Raises
    ------
    ValueError
        If the covariance is larger than the two uncertainties allow.
    """
    if math.isnan(first + second + covariance):
        return math.nan
    if abs(covariance) > first * second * (1 + 1e-9):
        raise ValueError(f"the covariance {covariance} is larger than the uncertainties {first} and {second} allow")
    return math.sqrt(max(0.0, first**2 + second**2 - 2 * covariance))


def verdict_of(error: float) -> Verdict:
    """Verdict that belongs to a normalised error.

    Parameters
    ----------
    error : float
        E_n; NaN where it is unknown.

    Returns
    -------
    {"agrees", "disagrees", "unknown"}

    Examples
    --------
    >>> verdict_of(1.0), verdict_of(1.01), verdict_of(float("nan"))
    ('agrees', 'disagrees', 'unknown')
    """
    if math.isnan(error):
        return "unknown"
    return "agrees" if error <= 1.0 else "disagrees"


def check_estimate(
    estimate: Estimate, primary: Row, *, difference_uncertainty: float, same_algebra: str | None = None
) -> CrossCheck:
    """Hold another method's estimate against the row.

    Parameters
    ----------
    estimate : Estimate
        The other method's estimate, with what it is expected to read above the primary one.
    primary : Row
        The row.
    difference_uncertainty : float
        Standard uncertainty (k = 1) of estimate minus row, covariance and the expected difference's own uncertainty
        included, in the row's unit; NaN where it is unknown.
    same_algebra : str, optional
        Why the estimate is not independent; its verdict is then ``not_independent`` whatever the difference.

    Returns
    -------
    CrossCheck

    Raises
    ------
    ValueError
        If the estimate belongs to another row.
    """
    if estimate.row != primary.name:
        raise ValueError(f"an estimate of {estimate.row} cannot be held against {primary.name}")
    difference = estimate.value - primary.value
    error = normalised_error(difference, estimate.expected_difference, difference_uncertainty)
    verdict: Verdict = "not_independent" if same_algebra else verdict_of(error)
    reason = same_algebra or estimate.reason
    if verdict == "unknown":
        reason = reason or _why_unknown(primary, estimate.standard_uncertainty, difference_uncertainty)
    return CrossCheck(
        row=estimate.row,
        method=estimate.method,
        value=estimate.value,
        unit=primary.unit,
        standard_uncertainty=estimate.standard_uncertainty,
        difference=difference,
        expected_difference=estimate.expected_difference,
        normalised_error=error,
        verdict=verdict,
        reason=reason,
    )


def compare(
    row: Row,
    *,
    name: str,
    standard_uncertainty: float,
    value: float | None = None,
    coefficient: float | None = None,
    coefficient_scale: float = math.nan,
    as_measured: str = "whole",
    covariance: float = 0.0,
) -> Comparison:
    """Hold a row against a value from elsewhere (balance, near field).

    Parameters
    ----------
    row : Row
        The row.
    name : str
        What the value is ("balance").
    standard_uncertainty : float
        Standard uncertainty (k = 1) of the value, in the unit of whichever of `value` and `coefficient` is given.
    value : float, optional
        The compared value in the row's unit.
    coefficient : float, optional
        The compared coefficient instead.
    coefficient_scale : float
        Force or moment of a unit coefficient (q S, or q S b), in the row's unit; needed with `coefficient`.
    as_measured : {"whole", "half"}
        "half" for a force measured on a half model: lift and drag are doubled, as in the ledger. A coefficient refers
        to the area of what was measured and is the same for both.
    covariance : float
        Covariance of the row and the compared value, the row's unit squared.

    Returns
    -------
    Comparison
        With the value in the row's unit, of the whole configuration.

    Raises
    ------
    SurveyError
        If not exactly one of value and coefficient is given, the coefficient has no scale, or `as_measured` is neither
        "whole" nor "half".
    """
    place = f"compare {name!r}"
    if (value is None) == (coefficient is None):
        raise SurveyError("a comparison needs either a value or a coefficient", place=place, remedy="give one of them")
    if as_measured not in ("whole", "half"):
        raise SurveyError(f"as_measured is {as_measured!r}", place=place, remedy="'whole' and 'half' are allowed")
    if value is not None:
        factor = 2.0 if as_measured == "half" and row.name in DOUBLED_ROWS else 1.0
        compared = factor * value
    elif not math.isfinite(coefficient_scale):
        raise SurveyError(
            f"a coefficient of {row.name} cannot be compared", place=place, remedy=f"give the value in {row.unit}"
        )
    else:
        assert coefficient is not None
        factor = coefficient_scale
        compared = factor * coefficient
    uncertainty = abs(factor) * standard_uncertainty
    u_difference = difference_uncertainty(row.standard_uncertainty, uncertainty, covariance)
    difference = row.value - compared
    error = normalised_error(difference, 0.0, u_difference)
    verdict = verdict_of(error)
    return Comparison(
        name=name,
        row=row.name,
        value=compared,
        unit=row.unit,
        standard_uncertainty=uncertainty,
        difference=difference,
        normalised_error=error,
        verdict=verdict,
        reason=_why_unknown(row, uncertainty, u_difference) if verdict == "unknown" else None,
    )


def _why_unknown(row: Row, uncertainty: float, u_difference: float) -> str:
    if math.isnan(row.value) or math.isnan(row.standard_uncertainty):
        return f"{row.name}: {row.reason}"
    if math.isnan(uncertainty):
        return "its standard uncertainty is not known"
    if u_difference <= 0:
        return "the difference has no uncertainty, which nothing measured can have"
    return "the uncertainty of the difference is not known"
