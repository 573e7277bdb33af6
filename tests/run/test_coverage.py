"""A small, seeded part of the coverage study (tests/benchmarks/coverage.py): do the error bars cover the truth?"""

import importlib.util
import sys
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import binom

#: Surveys of each case; all numbers below are the same in every run.
SURVEYS = 24
#: Chance at which a sound error bar would fail one of the bounds, if the seed were free.
RISK = 1e-4
ONE_SIGMA, TWO_SIGMA = 0.6827, 0.95


@pytest.fixture(scope="module")
def coverage():
    path = Path(__file__).resolve().parents[1] / "benchmarks" / "coverage.py"
    spec = importlib.util.spec_from_file_location("coverage_study", path)
    module = importlib.util.module_from_spec(spec)
    # Dataclasses look their module up while they are made.
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    yield module
    del sys.modules[spec.name]


@pytest.fixture(scope="module")
def studies(coverage):
    return {case: coverage.study(case, SURVEYS, draws=80, numerical=False) for case in ("random", "systematic")}


def bounds(count, probability):
    """Counts that a binomial variable leaves only at the risk."""
    return binom.ppf(RISK / 2, count, probability), binom.isf(RISK / 2, count, probability)


def test_standard_uncertainty_is_the_scatter_of_the_errors(studies):
    """Within u lie 68 %; were u 1.5 times too small or too large it would be 50 % or 87 %."""
    inside = np.concatenate([np.abs(one.error) <= one.u for one in studies.values()])
    # Total drag is the sum of the others, and so no further evidence.
    evidence = inside[:, [0, 1, 3]]
    low, high = bounds(evidence.size, ONE_SIGMA)
    assert low <= evidence.sum() <= high
    # The bounds themselves tell a factor of 1.5 from one.
    assert low > 0.505 * evidence.size
    assert high < 0.866 * evidence.size


def test_each_row_is_covered_by_its_95_percent_interval(studies, coverage):
    inside = sum((np.abs(one.error) <= one.half_width).sum(axis=0) for one in studies.values())
    low, _ = bounds(len(studies) * SURVEYS, TWO_SIGMA)
    # Half the width would hold 67 %.
    assert low > 0.75 * len(studies) * SURVEYS
    for row, count in zip(coverage.JUDGED, inside, strict=True):
        assert count >= low, row


@pytest.mark.parametrize("case", ["random", "systematic"])
def test_uncertainty_is_never_zero_and_matches_the_scatter_row_by_row(studies, coverage, case):
    one = studies[case]
    assert (one.u > 0).all()
    ratio = np.sqrt((one.u**2).mean(axis=0) / one.error.var(axis=0, ddof=1))
    # The scatter of 24 errors is known to 15 %: a factor 1.5 is three of these away.
    for row, value in zip(coverage.JUDGED, ratio, strict=True):
        assert 1 / 1.45 < value < 1.45, row


def test_subtracted_noise_bias_is_the_one_that_is_there(studies):
    """In a given wake region; what is left is below a tenth, found with the noise of both signs."""
    one = studies["random"]
    assert one.bias.mean() > 0
    np.testing.assert_allclose(one.bias.mean(), one.held.mean(), rtol=0.1)
