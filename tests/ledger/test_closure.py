"""Near field against far field: the difference, its causes, what is left over."""

import math

import pytest

from wakeledger.core.errors import SurveyError
from wakeledger.ledger.closure import CAUSES, Cause, NearField, close

NEAR = NearField(total=76.0, standard_uncertainty=0.4, pressure=54.0, friction=22.0)
SCALE = 551.25 * 6.0


def test_difference_and_causes_add_up():
    causes = (
        Cause("decay", 0.0, 0.3, "moves drag between rows"),
        Cause("mask", -1.2, 0.5, "a wider mask"),
        Cause("walls", -0.6, 0.05),
    )
    found = close("total_drag", far=73.6, far_uncertainty=0.3, near=NEAR, causes=causes, coefficient_scale=SCALE)
    assert found.difference == pytest.approx(-2.4, rel=1e-12)
    assert found.standard_uncertainty == pytest.approx(0.5, rel=1e-12)
    assert found.normalised_error == pytest.approx(2.4, rel=1e-12)
    assert found.explained == pytest.approx(-1.8, rel=1e-12)
    assert found.left_over == pytest.approx(-0.6, rel=1e-12)
    spread = math.sqrt(0.3**2 + 0.4**2 + 0.3**2 + 0.5**2 + 0.05**2)
    assert found.left_over_uncertainty == pytest.approx(spread, rel=1e-12)
    assert found.left_over_error == pytest.approx(0.6 / (2 * spread), rel=1e-12)
    assert found.verdict == "agrees"
    assert [cause.name for cause in found.causes] == ["mask", "walls", "decay"]
    # Signed parts of E_n: causes and left-over add up to the difference's.
    assert sum(found.errors) + found.left_over == pytest.approx(-found.normalised_error, rel=1e-12)
    # One count of 6 m² at 551.25 Pa is 0.33075 N.
    assert found.counts["difference"] == pytest.approx(-2.4 / 0.33075, rel=1e-12)
    parts = dict(found.counts)
    whole = parts.pop("difference")
    assert sum(parts.values()) == pytest.approx(whole, rel=1e-12)


def test_without_causes_the_difference_stands():
    found = close("total_drag", far=73.6, far_uncertainty=0.3, near=NEAR)
    assert found.verdict == "disagrees" and found.left_over_error == found.normalised_error
    assert math.isnan(found.counts["difference"])
    same = close("total_drag", far=73.6, far_uncertainty=0.4, near=NEAR, covariance=0.12)
    assert same.standard_uncertainty == pytest.approx(math.sqrt(0.16 + 0.16 - 0.24), rel=1e-12)


def test_what_is_unknown_stays_unknown():
    near = NearField(total=76.0, standard_uncertainty=math.nan)
    found = close("total_drag", far=73.6, far_uncertainty=0.3, near=near, causes=(Cause("mask", -1.0, 0.2),))
    assert found.verdict == "unknown" and math.isnan(found.left_over_error) and math.isnan(found.errors[0])
    vague = close("total_drag", far=73.6, far_uncertainty=0.3, near=NEAR, causes=(Cause("station", 0.0, math.nan),))
    assert vague.verdict == "unknown" and vague.normalised_error == pytest.approx(2.4)


def test_what_does_not_fit_is_refused():
    with pytest.raises(SurveyError, match="add up to 38, not to the total 76"):
        NearField(total=76.0, standard_uncertainty=0.4, pressure=27.0, friction=11.0)
    with pytest.raises(ValueError, match="'turbulence' is unknown"):
        Cause("turbulence", 0.0, 0.1)
    with pytest.raises(ValueError, match="negative"):
        Cause("mask", 0.0, -0.1)
    with pytest.raises(ValueError, match="named twice"):
        close("total_drag", far=1.0, far_uncertainty=0.1, near=NEAR, causes=(Cause("mask", 0.0, 0.1),) * 2)
    assert len(set(CAUSES)) == len(CAUSES)
