"""E_n of ISO/IEC 17043 and the verdicts that follow from it."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from wakeledger.core.errors import SurveyError
from wakeledger.core.estimate import Estimate
from wakeledger.ledger.crosscheck import check_estimate, compare, difference_uncertainty, normalised_error, verdict_of
from wakeledger.ledger.rows import Row

NAN = math.nan


def row(value=10.0, u=0.3, name="total_drag", reason=None):
    return Row(name, value, "N", u, 2 * u, 2.0, 50.0, value / 100, u / 100, reason=reason)


def test_normalised_error_by_hand():
    # |11 - 10 - 0.4| / (2 * 0.5) = 0.6; the sign of the expected difference matters: with -0.4 it is 1.4.
    assert normalised_error(1.0, 0.4, 0.5) == pytest.approx(0.6, rel=1e-14)
    assert normalised_error(1.0, -0.4, 0.5) == pytest.approx(1.4, rel=1e-14)
    assert normalised_error(-1.0, 0.4, 0.5) == pytest.approx(1.4, rel=1e-14)


@pytest.mark.parametrize("u", [0.0, -1.0, NAN, math.inf])
def test_without_an_uncertainty_there_is_no_normalised_error(u):
    assert math.isnan(normalised_error(1.0, 0.0, u))


def test_uncertainty_of_a_difference_by_hand():
    # 0.3² + 0.4² = 0.5²; full positive correlation leaves the plain difference, negative the sum.
    assert difference_uncertainty(0.3, 0.4) == pytest.approx(0.5, rel=1e-14)
    assert difference_uncertainty(0.3, 0.4, 0.12) == pytest.approx(0.1, rel=1e-12)
    assert difference_uncertainty(0.3, 0.4, -0.12) == pytest.approx(0.7, rel=1e-12)
    assert math.isnan(difference_uncertainty(NAN, 0.4))
    assert math.isnan(difference_uncertainty(0.3, 0.4, NAN))
    with pytest.raises(ValueError, match="larger than the uncertainties"):
        difference_uncertainty(0.3, 0.4, 0.13)


@given(st.floats(0.01, 10), st.floats(0.01, 10), st.floats(-1, 1))
def test_uncertainty_of_a_difference_is_within_its_limits(first, second, correlation):
    u = difference_uncertainty(first, second, correlation * first * second)
    slack = 1e-7 * (first + second)
    assert abs(first - second) - slack <= u <= first + second + slack


def test_verdicts():
    assert verdict_of(0.0) == "agrees"
    assert verdict_of(1.0) == "agrees"
    assert verdict_of(1.0000001) == "disagrees"
    assert verdict_of(NAN) == "unknown"


def estimate(value=10.5, u=0.4, expected=0.0, reason=None):
    return Estimate("total_drag", "momentum_area", value, u, expected_difference=expected, reason=reason)


def test_an_estimate_is_held_against_its_row():
    line = check_estimate(estimate(10.5, expected=0.2), row(), difference_uncertainty=0.1)
    assert line.difference == pytest.approx(0.5, rel=1e-14)  # estimate minus primary
    assert line.normalised_error == pytest.approx(1.5, rel=1e-12)  # (0.5 - 0.2) / (2 * 0.1)
    assert line.verdict == "disagrees"
    assert line.unit == "N"
    assert check_estimate(estimate(10.5, expected=0.4), row(), difference_uncertainty=0.1).verdict == "agrees"


def test_the_same_algebra_never_agrees():
    line = check_estimate(estimate(10.0), row(), difference_uncertainty=0.0, same_algebra="it is the same sum")
    assert line.verdict == "not_independent"
    assert line.reason == "it is the same sum"


def test_unknown_uncertainty_makes_the_verdict_unknown_with_a_reason():
    line = check_estimate(estimate(), row(), difference_uncertainty=NAN)
    assert line.verdict == "unknown"
    assert line.reason
    line = check_estimate(estimate(), row(u=NAN, reason="no source was given"), difference_uncertainty=NAN)
    assert "no source was given" in line.reason
    assert (
        check_estimate(estimate(NAN, reason="no wake line"), row(), difference_uncertainty=0.1).reason == "no wake line"
    )


def test_an_estimate_of_another_row_is_refused():
    with pytest.raises(ValueError, match="held against lift"):
        check_estimate(estimate(), row(name="lift"), difference_uncertainty=0.1)


def test_comparison_with_a_force():
    line = compare(row(10.0, 0.3), name="balance", value=9.2, standard_uncertainty=0.4)
    assert line.difference == pytest.approx(0.8, rel=1e-12)  # row minus compared value
    assert line.normalised_error == pytest.approx(0.8, rel=1e-12)  # 0.8 / (2 * 0.5)
    assert line.verdict == "agrees"
    assert compare(row(10.0, 0.3), name="b", value=8.9, standard_uncertainty=0.4).verdict == "disagrees"


def test_comparison_with_a_coefficient():
    line = compare(row(10.0, 0.3), name="CFD", coefficient=0.092, standard_uncertainty=0.004, coefficient_scale=100.0)
    assert line.value == pytest.approx(9.2, rel=1e-12)
    assert line.standard_uncertainty == pytest.approx(0.4, rel=1e-12)
    assert line.normalised_error == pytest.approx(0.8, rel=1e-12)


def test_covariance_tightens_a_comparison():
    line = compare(row(10.0, 0.3), name="b", value=9.2, standard_uncertainty=0.4, covariance=0.12)
    assert line.normalised_error == pytest.approx(4.0, rel=1e-9)  # 0.8 / (2 * 0.1)
    assert line.verdict == "disagrees"


def test_a_half_model_balance_is_doubled_with_its_uncertainty():
    line = compare(row(10.0, 0.3), name="b", value=4.6, standard_uncertainty=0.2, as_measured="half")
    assert (line.value, line.standard_uncertainty) == (9.2, 0.4)
    bending = compare(
        row(10.0, 0.3, name="root_bending_moment"), name="b", value=9.2, standard_uncertainty=0.4, as_measured="half"
    )
    assert bending.value == 9.2
    coefficient = compare(
        row(), name="b", coefficient=0.092, standard_uncertainty=0.004, coefficient_scale=100.0, as_measured="half"
    )
    assert coefficient.value == pytest.approx(9.2, rel=1e-12)


def test_unknown_and_zero_uncertainties_of_comparisons():
    assert "not known" in compare(row(), name="b", value=9.0, standard_uncertainty=NAN).reason
    missing = row(u=NAN, reason="no source was given")
    assert "no source was given" in compare(missing, name="b", value=9.0, standard_uncertainty=0.1).reason
    exact = compare(row(u=0.0), name="b", value=9.0, standard_uncertainty=0.0)
    assert exact.verdict == "unknown"
    assert "no uncertainty" in exact.reason


@pytest.mark.parametrize(
    ("given_", "message"),
    [
        ({}, "either a value or a coefficient"),
        ({"value": 1.0, "coefficient": 1.0}, "either a value or a coefficient"),
        ({"value": 1.0, "as_measured": "port"}, "as_measured is 'port'"),
        ({"coefficient": 1.0}, "cannot be compared; give the value in N"),
    ],
)
def test_wrong_comparisons(given_, message):
    with pytest.raises(SurveyError, match=message):
        compare(row(), name="balance", standard_uncertainty=0.1, **given_)
