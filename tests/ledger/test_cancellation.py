"""The algebra of an increment: what is shared cancels as far as it acts alike, by identity and never by name."""

import math
from dataclasses import replace

import numpy as np
import pytest

from wakeledger.confidence.components import NUMERICAL, Component
from wakeledger.confidence.point_errors import PointErrors
from wakeledger.core.errors import InputError
from wakeledger.ledger.cancellation import opaque, subtract
from wakeledger.ledger.contributions import Contributions
from wakeledger.ledger.increment import Figure, IncrementRow, ordered_budget


def component(value, *, curved=0.0, source="zero", shared_id="rig", kind="measured", **options):
    effect = np.array([[value], [value / 100]])
    bend = np.array([[curved], [curved / 100]])
    return Component(source, kind, effect, bend, input=options.pop("input", "plane.u"), shared_id=shared_id, **options)


def contributions(*components, scatter=0.0):
    own = np.array([[[scatter**2]], [[(scatter / 100) ** 2]]])
    return Contributions(("total_drag",), components, own, np.full((2, 1), math.inf))


def u_of(a, b):
    covariance = subtract(a, b).covariance
    return math.sqrt(covariance[0, 0, 0]), 100 * math.sqrt(covariance[1, 0, 0])


def test_shared_errors_cancel_by_their_signed_effects():
    for in_a, in_b, left in ((3.0, 3.0, 0.0), (3.0, 4.0, 1.0), (3.0, -4.0, 7.0), (0.0, 4.0, 4.0)):
        assert u_of(contributions(component(in_a)), contributions(component(in_b))) == pytest.approx((left, left))


def test_second_order_cancels_too():
    found = u_of(contributions(component(0, curved=3.0)), contributions(component(0, curved=5.0)))
    # Variance (κ − 1) b² with κ = 3.
    assert found[0] == pytest.approx(math.sqrt(2) * 2, rel=1e-12)


@pytest.mark.parametrize(
    "other",
    [
        {"shared_id": None},
        {"shared_id": "another rig"},
        {"input": "plane.v"},
        {"number": 1},
    ],
)
def test_nothing_else_cancels(other):
    a, b = contributions(component(3.0)), contributions(component(4.0, **other))
    assert u_of(a, b)[0] == pytest.approx(5.0, rel=1e-12)
    assert subtract(a, b).cancelled == ()


def test_random_parts_and_numerical_terms_add():
    term = component(3.0, kind=NUMERICAL, shared_id=None, source="edge")
    found = subtract(contributions(term, component(9.0), scatter=2.0), contributions(term, component(9.0), scatter=6.0))
    assert found.covariance[0, 0, 0] == pytest.approx(9 + 9 + 4 + 36, rel=1e-12)
    by_source = {name: float(variance[0, 0]) for name, variance in found.by_source.items()}
    assert sum(by_source.values()) == pytest.approx(58, rel=1e-12)
    assert by_source["edge (A)"] == by_source["edge (B)"] == pytest.approx(9, rel=1e-12)
    lines = ordered_budget(("total_drag",), {name: variance[0] for name, variance in found.by_source.items()})
    assert lines[0].source.endswith("(B)")
    assert sum(line.share for line in lines) == pytest.approx(1, rel=1e-12)
    assert "zero (left)" not in [line.source for line in lines]
    # 36 + 4 + 18 all normal.
    assert found.half_width()[0, 0] == pytest.approx(1.96 * math.sqrt(58), rel=0.02)


def test_what_is_said_of_a_shared_source():
    a = contributions(component(3.0), component(2.0, input="plane.v"))
    b = contributions(component(4.0, source="new name"), component(5.0, source="new name", input="plane.w"))
    (said,) = subtract(a, b).cancelled
    assert (said.shared_id, said.source_a, said.source_b) == ("rig", "zero", "new name")
    # Of three errors one is in both: 4 − 3; the others stay whole.
    assert said.in_a[0, 0] == pytest.approx(math.hypot(3, 2))
    assert said.in_b[0, 0] == pytest.approx(math.hypot(4, 5))
    assert said.left[0, 0] == pytest.approx(math.sqrt(1 + 4 + 25))
    assert u_of(a, b)[0] == pytest.approx(math.sqrt(30))


def test_one_identity_twice_in_one_ledger_is_one_error():
    twice = contributions(component(1.0, source="p"), component(2.0, source="q"))
    assert u_of(twice, contributions(component(3.0)))[0] == pytest.approx(0.0, abs=1e-12)
    assert u_of(twice, contributions())[0] == pytest.approx(3.0)


def test_one_identity_with_two_distributions_is_refused():
    a, b = contributions(component(3.0)), contributions(component(3.0, distribution="rectangular"))
    with pytest.raises(InputError, match=r"rig.*normal.*rectangular"):
        subtract(a, b)


def test_degrees_of_freedom_by_welch_and_satterthwaite():
    a = contributions(component(3.0, shared_id=None, degrees_of_freedom=5))
    b = contributions(component(4.0, shared_id=None, degrees_of_freedom=10))
    # u⁴/Σ(u_i⁴/ν_i) = 625/(81/5 + 256/10)
    assert subtract(a, b).degrees_of_freedom[0, 0] == pytest.approx(625 / (81 / 5 + 256 / 10), rel=1e-12)
    # What cancels takes no part.
    same = contributions(component(9.0, degrees_of_freedom=3), scatter=1.0)
    assert subtract(same, same).degrees_of_freedom[0, 0] == math.inf


def test_a_ledger_without_contributions_adds_whole():
    known = contributions(component(3.0))
    total = opaque(("total_drag",), np.array([[4.0], [0.04]]), np.full((2, 1), 7.0))
    assert u_of(known, total) == pytest.approx((5.0, 5.0))
    assert subtract(known, total).degrees_of_freedom[0, 0] == pytest.approx(625 / (256 / 7), rel=1e-12)


def test_contributions_survive_a_dataset():
    given = contributions(
        component(3.0, curved=0.5, degrees_of_freedom=9.0), component(1.0, kind=NUMERICAL, shared_id=None), scatter=2.0
    )
    back = Contributions.from_dataset(given.to_dataset())
    np.testing.assert_array_equal(back.covariance, given.covariance)
    for one, other in zip(given.components, back.components, strict=True):
        assert (one.source, one.kind, one.key, one.distribution) == (
            other.source, other.kind, other.key, other.distribution
        )  # fmt: skip
        np.testing.assert_array_equal(one.linear, other.linear)
        np.testing.assert_array_equal(one.curved, other.curved)
        assert one.degrees_of_freedom == other.degrees_of_freedom
    none = contributions(scatter=1.0)
    assert Contributions.from_dataset(none.to_dataset()).components == ()


def points(effects, *, source="table", shared_id="holder", places=None, **options):
    effects = np.asarray(effects, dtype=float)
    at = np.stack([np.arange(effects.size), np.zeros(effects.size)], axis=1) if places is None else places
    both = np.stack([effects, effects / 100])[:, None, :]
    fixed = {"effect": "random", "correlation_length": None, "distribution": "normal", "degrees_of_freedom": math.inf}
    row = np.zeros(effects.size, dtype=np.int64)
    return PointErrors(source, "plane.v", shared_id, effects=both, places=at, row=row, **{**fixed, **options})


def with_points(*given, scatter=0.0):
    return replace(contributions(scatter=scatter), points=given)


def test_errors_of_points_cancel_one_by_one():
    a, b = with_points(points([3.0, 4.0, 1.0]), scatter=1.0), with_points(points([3.0, 1.0, -1.0]), scatter=1.0)
    found = subtract(a, b)
    # (0, −3, −2) and the scatter of both.
    assert found.covariance[0, 0, 0] == pytest.approx(9 + 4 + 2, rel=1e-12)
    (said,) = found.cancelled
    assert (said.shared_id, said.source_a, said.source_b) == ("holder", "table", "table")
    assert [x[0, 0] for x in (said.in_a, said.in_b, said.left)] == pytest.approx(
        [math.sqrt(26), math.sqrt(11), math.sqrt(13)]
    )
    assert found.by_source["table (left)"][1, 0] == pytest.approx(13e-4)
    assert found.half_width()[0, 0] == pytest.approx(1.96 * math.sqrt(15), rel=0.02)
    assert subtract(a, a).covariance[0, 0, 0] == pytest.approx(2.0)


def test_errors_of_other_points_add_and_say_why():
    one, other = points([3.0, 4.0]), points([3.0, 4.0], places=np.array([[0.0, 0.0], [1.1, 0.0]]))
    found = subtract(with_points(one), with_points(other))
    assert found.covariance[0, 0, 0] == pytest.approx(50) and found.cancelled == ()
    ((identity, source_a, source_b, why),) = found.unlike
    assert (identity, source_a, source_b) == ("holder", "table", "table") and "100 mm apart" in why
    assert set(found.by_source) >= {"table (A)", "table (B)"}
    for unknown in (points([3.0, 4.0], shared_id="another"), None):
        apart = subtract(with_points(one), with_points(*([] if unknown is None else [unknown])))
        assert apart.covariance[0, 0, 0] == pytest.approx(50 if unknown is not None else 25)
        assert apart.unlike == ()


def test_doubt_about_the_size_of_errors_of_points():
    few = points([3.0, 4.0], degrees_of_freedom=5.0)
    found = subtract(with_points(few), with_points(points([0.0, 0.0], degrees_of_freedom=5.0)))
    assert found.degrees_of_freedom[0, 0] == pytest.approx(5.0)
    # One factor for all: Student's t with 5 degrees of freedom of scale s = 5 √(3/5), t = 2.571.
    assert found.half_width()[0, 0] == pytest.approx(2.571 * 5 * math.sqrt(3 / 5), rel=0.03)


def test_errors_of_points_survive_a_dataset():
    given = with_points(
        points([3.0, 4.0]), points([1.0, 2.0, 5.0], source="rake", correlation_length=0.02), scatter=1.0
    )
    back = Contributions.from_dataset(given.to_dataset())
    np.testing.assert_array_equal(back.covariance, given.covariance)
    for one, other in zip(given.points, back.points, strict=True):
        assert (one.source, one.key, one.unlike(other)) == (other.source, other.key, None)
        np.testing.assert_array_equal(one.effects, other.effects)
        np.testing.assert_array_equal(one.row, other.row)


def test_a_third_quantity_is_subtracted_too():
    effect = np.array([[3.0], [0.03], [0.02]])
    one = Component("zero", "measured", effect, np.zeros((3, 1)), input="plane.u", shared_id="rig")
    a = Contributions(("total_drag",), (one,), np.zeros((3, 1, 1)), np.full((3, 1), math.inf))
    b = replace(a, components=(replace(one, linear=2 * effect),))
    assert a.quantities == ("value", "coefficient", "coefficient_corrected")
    np.testing.assert_allclose(np.sqrt(subtract(a, b).covariance[:, 0, 0]), effect[:, 0])
    assert a.of(("total_drag",), quantities=2).quantities == ("value", "coefficient")


def figure(difference, expanded):
    return Figure(1.0, 1.0 + difference, difference, expanded / 2, expanded, 2.0, math.inf, expanded)


def test_statements():
    row = IncrementRow("total_drag", "N", figure(0.5, 0.2), figure(3.2e-4, 1.1e-4))
    assert row.statement == "total drag: +3.2 ± 1.1 counts, resolved: B is higher."
    row = IncrementRow("total_drag", "N", figure(-0.5, 0.2), figure(-0.4e-4, 1.1e-4))
    assert row.statement == (
        "total drag: -0.4 ± 1.1 counts, not resolved: it cannot be told from zero; the difference in N is resolved."
    )
    nothing = figure(math.nan, math.nan)
    assert IncrementRow("lift", "N", figure(2.0, 3.0), nothing).statement.startswith("lift: +2.0 ± 3.0 N, not resolved")
    with pytest.raises(ValueError, match="reason"):
        IncrementRow("lift", "N", nothing, nothing)
    row = IncrementRow("lift", "N", nothing, nothing, reason="unknown in A: no source")
    assert row.resolved is None
    assert row.statement == "lift: whether B differs from A cannot be said (unknown in A: no source)."
    # Exactly on the limit is not beyond it.
    assert figure(0.2, 0.2).resolved is False
