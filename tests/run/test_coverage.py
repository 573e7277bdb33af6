"""A small, seeded part of the coverage study (tests/benchmarks/coverage.py): do the error bars cover the truth?

Every bound is that which a sound error bar would break once in ten thousand choices of the seed.
"""

import importlib.util
import json
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import binom, chi2
from tests.benchmarks.small_surveys import column as read_column

#: Surveys of each case, and of each kind of wrong declaration; all numbers below are the same in every run.
SURVEYS, WRONG = 14, 4
COVERED = ("random", "systematic", "mixed", "gappy", "half_model")
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
    # Monte Carlo in the second survey of each case.
    return {case: [coverage.done(task) for task in coverage.tasks(case, SURVEYS)] for case in COVERED}


@pytest.fixture(scope="module")
def column():
    return read_column


def bounds(count, probability):
    """Counts that a binomial variable leaves only at the risk."""
    return binom.ppf(RISK / 2, count, probability), binom.isf(RISK / 2, count, probability)


def test_standard_uncertainty_is_the_scatter_of_the_errors(studies, column):
    """Within u lie 68 %; were u 1.5 times too small or too large it would be 50 % or 87 %."""
    inside = np.concatenate([np.abs(column(one, "error")) <= column(one, "u") for one in studies.values()])
    # Profile and induced drag hang on different noise; total drag is their sum and lift goes with the induced drag.
    evidence = inside[:, [0, 1]]
    low, high = bounds(evidence.size, ONE_SIGMA)
    assert low <= evidence.sum() <= high
    # The bounds themselves tell a factor of 1.5 from one.
    assert low > 0.495 * evidence.size
    assert high < 0.866 * evidence.size


def test_each_row_is_covered_by_its_95_percent_interval(studies, coverage, column):
    inside = sum((np.abs(column(one, "error")) <= column(one, "half_width")).sum(axis=0) for one in studies.values())
    low, _ = bounds(len(studies) * SURVEYS, TWO_SIGMA)
    # Half the width would hold 67 %.
    assert low > 0.67 * len(studies) * SURVEYS
    for row, count in zip(coverage.JUDGED, inside, strict=True):
        assert count >= low, row


@pytest.mark.parametrize("case", COVERED)
def test_errors_over_u_have_the_spread_of_a_unit_normal_in_every_case(studies, coverage, column, case):
    u = column(studies[case], "u")
    assert (u > 0).all()
    square = np.square(column(studies[case], "error") / u).sum(axis=0)
    low, high = chi2.ppf(RISK / 2, SURVEYS), chi2.isf(RISK / 2, SURVEYS)
    for row, value in zip(coverage.JUDGED, square, strict=True):
        assert low < value < high, row
    # Half the u would leave four times the square: outside.
    assert high < 4 * SURVEYS


@pytest.mark.parametrize("case", COVERED)
def test_closed_form_is_that_of_monte_carlo(studies, column, case):
    (one,) = [one for one in studies[case] if "mc_u" in one]
    # 400 draws know a standard deviation within 3.5 %, an end of an interval within 6 %: four times that.
    np.testing.assert_allclose(one.get("plain_u", one["u"]), one["mc_u"], rtol=0.14)
    np.testing.assert_allclose(one.get("plain_half_width", one["half_width"]), one["mc_half_width"], rtol=0.24)


def test_numerical_terms_only_widen_the_interval(studies, column):
    for own in studies.values():
        wide = [one for one in own if "half_width_all" in one]
        assert wide
        # Found from 400 draws: as above.
        assert (column(wide, "half_width_all") > 0.76 * column(wide, "half_width")).all()


@pytest.mark.parametrize("case", ["random", "mixed", "gappy", "half_model"])
def test_subtracted_noise_bias_is_the_one_that_is_there(studies, column, case):
    """In a given wake region; what is left is below a tenth, found with the noise of both signs."""
    bias, held = column(studies[case], "bias"), column(studies[case], "held")
    assert bias.mean() > 0
    # The quadratic form of the noise scatters by a tenth from survey to survey.
    np.testing.assert_allclose(bias.mean(), held.mean(), rtol=0.1)


@pytest.mark.parametrize(("case", "key"), [("twice", "size"), ("half", "size"), ("correlated_1_cell", "shared")])
def test_noise_that_is_not_as_declared_is_reported(coverage, case, key):
    assert all(coverage.done(task)[key] for task in coverage.tasks(case, WRONG))


def test_noise_that_is_as_declared_is_not_reported(studies, column):
    for key in ("size", "shared"):
        alarms = sum(column(one, key).sum() for one in studies.values())
        # One in a hundred at most, by the study.
        assert alarms <= binom.isf(RISK, len(studies) * SURVEYS, 0.01)


def test_spacing_is_covered_by_its_own_term(coverage, column):
    found = [coverage.done(task) for task in coverage.tasks("numerical", WRONG)]
    error, told = (np.abs(column(found, f"resolution_{key}")) for key in ("error", "half_width"))
    # Exact data: what is left is the spacing's own error. The term is not a tight one.
    assert (error <= told).all()
    assert (error > 0).all()


@pytest.mark.parametrize("case", ["random", "half_model"])
def test_what_is_left_out_of_the_study_changes_nothing(coverage, case):
    given = coverage.survey(coverage.CASES[case], np.random.default_rng(8)).given
    whole, short = coverage.prepare(given), coverage.made_ready(given)
    for row in coverage.JUDGED:
        assert short.nominal.values[row] == whole.nominal.values[row]
    kept = {name: whole.chain.frozen.bias[name] for name in short.chain.frozen.bias}
    assert short.chain.frozen.bias == kept
    assert short.chain.frozen.bias["induced_drag"] > 0
    np.testing.assert_array_equal(
        coverage.closed_form(short, {}).total[np.ix_(coverage.AT, coverage.AT)],
        coverage.closed_form(whole, {}).total[np.ix_(coverage.AT, coverage.AT)],
    )


def test_results_are_continued(coverage, tmp_path):
    one = coverage.judge("half", 3, 5)
    assert coverage.judge("half", 3, 5) == one
    file = tmp_path / "results.jsonl"
    # The last line was cut off when the study was stopped.
    file.write_text(json.dumps(one) + "\n" + json.dumps(one)[:20], encoding="utf-8")
    assert coverage.read(file, seed=3) == {"half": [one]}
    assert coverage.read(file, seed=4) == {}


def test_draws_about_measured_values_are_too_wide_and_the_correction_takes_that_back(coverage):
    """A static pressure off by one standard deviation to either side: the two points of Gauss's rule for its error.

    The variance about the truth, both orders, is that of the errors. Of the quadratic row the mean over the two surveys
    is that over all surveys.
    """
    made = coverage.survey(coverage.CASES["systematic"], np.random.default_rng(3))

    def budget(off):
        values = dict(made.exact.values)
        values["static_pressure"] = values["static_pressure"] + off
        given = replace(made.given, points=replace(made.exact, values=values).points())
        prepared = coverage.made_ready(given)
        return coverage.with_single_errors(prepared, coverage.closed_form(prepared, {}))

    at = coverage.OUTPUTS.index("total_drag")
    size = coverage.CASES["systematic"].systematic["static_pressure"]
    truth = budget(0.0).total[at, at]
    drawn, corrected = [], []
    for off in (size, -size):
        one = budget(off)
        variance = np.diag(one.total)
        drawn.append(variance[at])
        factor = coverage.curvature_factor(variance, one.second_order**2, one.inflation)
        corrected.append((factor**2 * variance)[at])
        for row in ("profile_drag", "induced_drag", "lift"):
            assert factor[coverage.OUTPUTS.index(row)] == 1.0
    # The second order is a twelfth of the variance; the slopes hold twice that beside it.
    assert np.mean(drawn) > 1.1 * truth
    # The curvature along the row's own slope is left in.
    assert truth < np.mean(corrected) < 1.06 * truth
