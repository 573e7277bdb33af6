"""A small, seeded part of the coverage study of increments (tests/benchmarks/increment_coverage.py)."""

import importlib.util
import sys
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import chi2

#: Pairs; all numbers below are the same in every run.
PAIRS = 8
RISK = 1e-3


@pytest.fixture(scope="module")
def increments():
    path = Path(__file__).resolve().parents[1] / "benchmarks" / "increment_coverage.py"
    spec = importlib.util.spec_from_file_location("increment_coverage_study", path)
    module = importlib.util.module_from_spec(spec)
    # Dataclasses look their module up while they are made.
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    yield module
    del sys.modules[spec.name]


@pytest.fixture(scope="module")
def study(increments):
    return increments.study("systematic shared", PAIRS, draws=60)


def test_the_errors_are_as_large_as_the_uncertainty_says(study):
    """The squares of error over u add up to χ² for each row; without cancellation u would be five times too large."""
    squares = np.sum((study.error / study.u) ** 2, axis=0)
    low, high = chi2.ppf(RISK, PAIRS), chi2.isf(RISK, PAIRS)
    assert (squares > low).all() and (squares < high).all()
    # Were u four times too large, the sum would be around PAIRS/16.
    assert low > PAIRS / 4.0**2
    assert study.coverage.mean() > 0.85


def test_increments_are_three_times_tighter_where_systematic_errors_rule(study, increments):
    for row, ratio in zip(increments.JUDGED, study.tightening[1], strict=True):
        assert ratio > 3, row


def test_the_study_uses_what_the_archive_keeps(increments):
    """The study's own short way through the chain gives the contributions of a whole reduction."""
    from wakeledger.run.survey import reduce

    generator = np.random.default_rng(5)
    given, _ = increments.pair(increments.CASES["systematic shared"], generator)
    values, parts = increments.contributions(given, draws=60, numerical=False)
    ledger = reduce(given, draws=100)
    kept = ledger.contributions.of(increments.JUDGED)
    np.testing.assert_allclose(values[0], [ledger.row(name).value for name in increments.JUDGED], rtol=1e-12)
    for one in parts.components:
        other = next(x for x in kept.components if (x.source, x.input) == (one.source, one.input))
        assert other.key == one.key
        np.testing.assert_allclose(other.linear, one.linear, rtol=1e-9, atol=1e-12)
