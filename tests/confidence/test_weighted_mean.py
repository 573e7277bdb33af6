"""Mean of correlated values."""

import numpy as np
import pytest

from wakeledger.confidence.weighted_mean import weighted_mean


def test_independent_values_weigh_as_their_variances():
    found = weighted_mean(np.array([1.0, 2.0]), np.diag([1.0, 4.0]))
    assert found.value == pytest.approx(1.2, rel=1e-14)
    assert found.standard_uncertainty == pytest.approx(np.sqrt(0.8), rel=1e-14)
    assert found.weights == pytest.approx([0.8, 0.2], rel=1e-14)


def test_a_common_error_does_not_average_out():
    covariance = np.full((4, 4), 0.09) + 0.04 * np.eye(4)
    found = weighted_mean(np.array([1.0, 1.1, 0.9, 1.0]), covariance)
    assert found.value == pytest.approx(1.0, rel=1e-12)
    assert found.standard_uncertainty == pytest.approx(np.sqrt(0.09 + 0.01), rel=1e-12)


def test_values_that_scatter_more_than_they_say_are_told():
    found = weighted_mean(np.array([0.0, 10.0, 20.0]), np.eye(3))
    assert not found.consistent
    assert found.chi_square == pytest.approx(200.0)
    assert found.standard_uncertainty == pytest.approx(np.sqrt(200.0 / 2 / 3), rel=1e-12)


def test_coverage():
    rng = np.random.default_rng(3)
    covariance = np.array([[1.0, 0.5, 0.2], [0.5, 2.0, 0.3], [0.2, 0.3, 0.5]])
    draws = rng.multivariate_normal(np.full(3, 7.0), covariance, size=2000)
    found = [weighted_mean(one, covariance) for one in draws]
    covered = np.mean([abs(one.value - 7.0) <= 2 * one.standard_uncertainty for one in found])
    # 2000 draws fix 95.4 % to 0.5 %; the scaling of the inconsistent twentieth adds a little.
    assert covered == pytest.approx(0.957, abs=0.015)


def test_what_has_no_mean_is_refused():
    with pytest.raises(ValueError, match="no weighted mean"):
        weighted_mean(np.ones(2), np.eye(3))
    with pytest.raises(ValueError, match="no weighted mean"):
        weighted_mean(np.array([1.0, np.nan]), np.eye(2))
    assert weighted_mean(np.array([3.0]), np.array([[4.0]])).standard_uncertainty == pytest.approx(2.0)
