"""The choice among methods as a term: nothing where methods agree, the spread they do not explain where they do not."""

import math
from dataclasses import replace
from unittest import mock

import pytest

from wakeledger.ledger.rows import CrossCheck
from wakeledger.run import survey as run_survey
from wakeledger.run.chain.outputs import estimate_of
from wakeledger.run.load import load
from wakeledger.run.prepared import prepare
from wakeledger.run.survey import reduce
from wakeledger.run.uncertainty.method_choice import choice_name, choice_terms

DRAWS = 100
#: Each term has a latent variable of its own, so that 100 draws scatter: three times 1/√200.
SAMPLED = 0.21
INDUCED = choice_name("induced_drag")


def check(difference, u, *, verdict=None):
    error = abs(difference) / (2 * u)
    return CrossCheck(
        row="lift",
        method="wake_line",
        value=100 + difference,
        unit="N",
        standard_uncertainty=1.0,
        difference=difference,
        expected_difference=0.0,
        normalised_error=error,
        verdict=verdict or ("agrees" if error <= 1 else "disagrees"),
        reason="not independent, or unknown",
    )


NAMES = ("lift", "lift coefficient", "span_efficiency", "side_force")
VALUES = {"lift": 100.0, "lift coefficient": 0.5, "span_efficiency": 0.9, "side_force": 1.0}


def test_closed_form_of_the_term():
    (term,) = choice_terms([check(3.0, 1.0), check(-5.0, 1.0)], VALUES, NAMES)
    tau = math.sqrt((9 + 25) / 2 - 1)
    assert term.name == "choice among methods for the lift"
    # Lift over its coefficient is 200 N; the efficiency goes with the square of the lift.
    assert term.standard_uncertainty == pytest.approx([tau, tau / 200, 2 * tau / 100 * 0.9, 0.0], rel=1e-9)


def test_one_estimate_counts_where_it_disagrees():
    # Further off than its u, but not than its U95: one in three is, by chance.
    assert choice_terms([check(1.9, 1.0)], VALUES, NAMES) == ()
    (term,) = choice_terms([check(3.0, 1.0)], VALUES, NAMES)
    assert term.standard_uncertainty[0] == pytest.approx(math.sqrt(8), rel=1e-9)


def test_only_independent_estimates_of_known_uncertainty_count():
    others = [check(9.0, 1.0, verdict="not_independent"), check(math.nan, math.nan, verdict="unknown")]
    assert choice_terms(others, VALUES, NAMES) == ()


@pytest.fixture(scope="module")
def found(kit, tmp_path_factory):
    """Ledgers of one survey, with its methods as they are and with expected differences that are wrong."""
    folder = tmp_path_factory.mktemp("choice")
    data = kit.table(kit.wing(), *kit.axes(spacing=0.0375, y=(-0.9, 0.9), z=(-0.6, 0.5)))
    content = kit.description(uncertainty={"draws": DRAWS})
    content["uncertainty.source"] = [kit.source("noise", ["plane.v", "plane.w"], "0.1 m/s", "random")]
    content["compare"] = [
        {"name": "other", "row": "induced_drag", "value": "1.55 N", "standard_uncertainty": "0.001 N"}
    ]
    given = load(kit.write(folder, data, content))

    def with_shift(**shifts):
        def wrong(survey):
            prepared = prepare(survey)
            expected = dict(prepared.expected)
            for method, shift in shifts.items():
                expected[estimate_of("induced_drag", method)] += shift
            return replace(prepared, expected=expected)

        with mock.patch.object(run_survey, "prepare", wrong):
            return reduce(given)

    shifts = {"energy_area": 0.4, "wake_line": -0.4, "vortex_sum": 0.4}
    twice = {name: 2 * shift for name, shift in shifts.items()}
    return with_shift(), with_shift(**shifts), with_shift(**twice)


def line(ledger, row, source):
    return sum(one.standard_uncertainty for one in ledger.budget if (one.row, one.source) == (row, source))


def test_methods_that_agree_add_nothing(found):
    agreeing = found[0]
    assert all(one.verdict != "disagrees" for one in agreeing.estimates)
    assert line(agreeing, "induced_drag", INDUCED) == 0


def test_methods_that_disagree_do_and_the_total_shares_it(found):
    _, apart, further = found
    sizes = [line(one, "induced_drag", INDUCED) for one in (apart, further)]
    # Expected differences of 0.4 N that are not there, over a few hundredths of a newton of their own.
    assert 0.3 < sizes[0] < 0.45
    assert sizes[1] > 1.8 * sizes[0]
    for ledger, size in zip((apart, further), sizes, strict=True):
        assert line(ledger, "total_drag", INDUCED) == pytest.approx(size, rel=1e-3)
        assert line(ledger, "profile_drag", INDUCED) == 0
        row = ledger.row("induced_drag")
        assert row.standard_uncertainty == pytest.approx(size, rel=SAMPLED)
        # By the coefficient as well, and the efficiency.
        share = row.standard_uncertainty / row.value
        assert row.coefficient_standard_uncertainty == pytest.approx(share * row.coefficient, rel=1e-3)
        assert ledger.row("span_efficiency").standard_uncertainty > 0.7 * size / row.value * 0.9
        assert any("the choice among methods adds" in note for note in ledger.notes)


def test_they_still_disagree_and_a_comparison_sees_the_term(found):
    agreeing, apart, _ = found
    wrong = [one for one in apart.estimates if one.row == "induced_drag"]
    assert [one.verdict for one in wrong] == ["disagrees"] * 3
    for before, after in zip((e for e in agreeing.estimates if e.row == "induced_drag"), wrong, strict=True):
        # The doubt of an expected difference is a fifth of it; nothing else has changed.
        u = abs(after.difference - after.expected_difference) / (2 * after.normalised_error)
        plain = abs(before.difference - before.expected_difference) / (2 * before.normalised_error)
        assert u == pytest.approx(math.hypot(plain, 0.2 * 0.4), rel=0.05)
    assert apart.comparisons[0].normalised_error < 0.5 * agreeing.comparisons[0].normalised_error


def test_it_is_numerical(found):
    _, apart, _ = found
    kinds = {one.source: one.kind for one in apart.contributions.components}
    assert kinds[INDUCED] == "numerical"
    (came,) = [one for one in apart.propagation if one.row == "induced_drag"]
    assert came.numerical_standard_uncertainty >= line(apart, "induced_drag", INDUCED) * 0.999
