"""A small, seeded part of the coverage study of increments (tests/benchmarks/increment_coverage.py)."""

import json

import numpy as np
import pytest
from scipy.stats import binom, chi2
from tests.benchmarks import increment_coverage as increments
from tests.benchmarks.small_surveys import column

#: Pairs of each case; all numbers below are the same in every run.
PAIRS = 8
CASES = ("systematic shared", "another speed")
RISK = 1e-3


@pytest.fixture(scope="module")
def studies():
    # Monte Carlo in the second pair of each case, numerical terms in the first.
    return {case: [increments.done(task) for task in increments.tasks(case, PAIRS)] for case in CASES}


@pytest.mark.parametrize("case", CASES)
def test_the_errors_are_as_large_as_the_uncertainty_says(studies, case):
    """The squares of error over u add up to χ² for each row."""
    squares = np.square(column(studies[case], "error") / column(studies[case], "u")).sum(axis=0)
    low, high = chi2.ppf(RISK, PAIRS), chi2.isf(RISK, PAIRS)
    assert (squares > low).all() and (squares < high).all()
    # Without cancellation u would be five times too large where systematic errors rule; half the u would be seen too.
    assert low > PAIRS / 5.0**2 and high < 4 * PAIRS


@pytest.mark.parametrize("case", CASES)
def test_intervals_hold_the_true_increment(studies, case):
    inside = np.abs(column(studies[case], "error")) <= column(studies[case], "half_width")
    assert (inside.sum(axis=0) >= binom.ppf(RISK, PAIRS, 0.95)).all()
    wide = [one for one in studies[case] if "half_width_all" in one]
    # Both are found from 20 000 draws, within 1 %.
    assert wide and (column(wide, "half_width_all") >= 0.97 * column(wide, "half_width")).all()


def test_increments_are_three_times_tighter_where_systematic_errors_rule(studies):
    for row, ratio in zip(increments.JUDGED, increments.tightening(studies["systematic shared"])[1], strict=True):
        assert ratio > 3, row


@pytest.mark.parametrize("case", CASES)
def test_closed_form_is_that_of_monte_carlo(studies, case):
    (one,) = [one for one in studies[case] if "mc_u" in one]
    # 400 draws of each survey know a standard deviation within 3.5 %: four times that.
    np.testing.assert_allclose(one["u"], one["mc_u"], rtol=0.14)
    np.testing.assert_allclose(one["half_width"], one["mc_half_width"], rtol=0.14)


def test_the_study_uses_what_the_archive_keeps():
    """The study's own short way through the chain gives the contributions of a whole reduction."""
    from wakeledger.run.survey import reduce

    generator = np.random.default_rng(5)
    given, _ = increments.pair(increments.CASES["systematic shared"], generator)
    ready = increments.made_ready(given)
    parts = increments.contributions(ready, increments.second_order("systematic shared", 0), seed=1)
    ledger = reduce(given, draws=100)
    kept = ledger.contributions.of(increments.JUDGED)
    values = [ledger.row(name).value for name in increments.JUDGED]
    np.testing.assert_allclose(ready.nominal.vector[increments.AT][0], values, rtol=1e-12)
    for one in parts.components:
        other = next(x for x in kept.components if (x.source, x.input) == (one.source, one.input))
        assert other.key == one.key
        np.testing.assert_allclose(other.linear, one.linear, rtol=1e-9, atol=1e-12)
    # What is left beside them is found from 100 draws, within 7 %: four times that. The study leaves out that the
    # program makes it smaller where a row bends over its errors.
    straight = [one.curvature_factor == 1 for one in ledger.propagation if one.row in increments.JUDGED]
    assert sum(straight) == 3
    u = [np.sqrt(np.einsum("qrr->qr", one.scatter))[:, straight] for one in (kept, parts)]
    np.testing.assert_allclose(u[0], u[1], rtol=0.28)


def test_results_are_continued_and_tabulated(studies, tmp_path):
    file = tmp_path / "results.jsonl"
    lines = [json.dumps(one) for one in studies["another speed"]]
    # The last line was cut off when the study was stopped.
    file.write_text("\n".join([*lines, lines[0][:40]]), encoding="utf-8")
    found = increments.read(file)
    assert found == {"another speed": studies["another speed"]}
    assert increments.table(found).count(f"| another speed | lift | {PAIRS} | ") == 1
