"""Errors of points and rows that surveys share: from derivatives and shifts, against draws; when they are the same."""

import dataclasses
import math

import numpy as np
import pytest

from wakeledger.confidence.budget import make_budget
from wakeledger.confidence.linear_budget import Slopes
from wakeledger.confidence.montecarlo import run
from wakeledger.confidence.point_errors import PointErrors, point_errors, predicted
from wakeledger.confidence.sampling import ErrorSampler, SourceErrors
from wakeledger.confidence.sources import InputLayout, Source

X = np.linspace(1.0, 3.0, 40)
PLACES = np.stack([np.tile(np.arange(8.0), 5), np.repeat(np.arange(5.0), 8)], axis=1)
ROW = np.repeat(np.arange(5), 8)
LAYOUTS = {"x": InputLayout(X, positions=PLACES, row=ROW), "gain": InputLayout(2.0)}
WEIGHTS = np.sin(np.arange(40.0)), np.cos(np.arange(40.0))


def evaluate(errors):
    x, gain = X + errors["x"], 2.0 + errors["gain"]
    return np.stack([gain * (x @ WEIGHTS[0]), x @ WEIGHTS[1]], axis=1)


SLOPES = Slopes(
    np.eye(2), {"x": np.stack([2.0 * WEIGHTS[0], WEIGHTS[1]])}, direct={"gain": np.array([X @ WEIGHTS[0], 0.0])}
)
SHARED = Source("table", ("x",), "random", 0.3, shared_id="table")
GAIN = Source("gain", ("gain",), "systematic", 0.01)


def found(source, slopes=SLOPES):
    return point_errors(SourceErrors(source, LAYOUTS, seed=1), slopes, LAYOUTS)


def test_effects_of_points_and_of_rows():
    (one,) = found(SHARED)
    np.testing.assert_allclose(one.effects, 0.3 * SLOPES.figures["x"], rtol=1e-12)
    np.testing.assert_allclose(one.variance, [0.36 * (WEIGHTS[0] ** 2).sum(), 0.09 * (WEIGHTS[1] ** 2).sum()])
    assert one.key == ("table", "x") and one.degrees_of_freedom == math.inf
    (rows,) = found(dataclasses.replace(SHARED, effect="per_row"))
    by_row = np.stack([weights.reshape(5, 8).sum(axis=1) for weights in SLOPES.figures["x"]])
    np.testing.assert_allclose(rows.effects, 0.3 * by_row, rtol=1e-12, atol=1e-15)
    # An error with few degrees of freedom is larger by √(ν/(ν − 2)).
    (few,) = found(dataclasses.replace(SHARED, degrees_of_freedom=6.0))
    np.testing.assert_allclose(few.effects, one.effects * math.sqrt(6 / 4), rtol=1e-12)


def test_only_errors_that_can_be_shared_are_kept():
    assert found(dataclasses.replace(SHARED, shared_id=None)) == ()
    assert found(dataclasses.replace(SHARED, effect="systematic")) == ()
    # An output without derivatives is not followed; without any, nothing is.
    half = dataclasses.replace(SLOPES, outputs=np.array([[1.0, 0.0], [np.nan, np.nan]]))
    (one,) = found(SHARED, half)
    assert np.any(one.effects[0]) and not np.any(one.effects[1])
    assert found(SHARED, dataclasses.replace(SLOPES, outputs=np.full((2, 2), np.nan))) == ()


@pytest.mark.parametrize("effect", ["random", "per_row"])
def test_what_is_predicted_is_what_the_draws_do(effect):
    source = dataclasses.replace(SHARED, effect=effect)
    sampler = ErrorSampler([source], LAYOUTS, seed=3)
    values = evaluate(sampler.draw(0, 50)) - evaluate(sampler.zeros(1))
    np.testing.assert_allclose(predicted(sampler.by_source, found(source), 50), values, rtol=1e-9, atol=1e-12)


@pytest.mark.parametrize("slopes", [SLOPES, None])
def test_the_scatter_of_a_budget_does_not_hold_them_again(slopes):
    sources = [SHARED, GAIN, Source("noise", ("x",), "random", 0.1)]
    samples = run(evaluate, sources, LAYOUTS, names=("a", "b"), draws=400, seed=5)
    budget = make_budget(evaluate, sources, LAYOUTS, samples, seed=5, slopes=slopes)
    (one,) = budget.points
    np.testing.assert_allclose(one.effects, 0.3 * SLOPES.figures["x"], rtol=1e-6)
    noise = np.sqrt([0.04 * (WEIGHTS[0] ** 2).sum(), 0.01 * (WEIGHTS[1] ** 2).sum()])
    # 400 draws know it within 3.5 %: four times that. The table's part is three times the noise.
    np.testing.assert_allclose(np.sqrt(np.diag(budget.scatter)), noise, rtol=0.14)
    line = next(line for line in budget.of("a") if line.source == "table")
    assert line.standard_uncertainty == pytest.approx(math.sqrt(one.variance[0]), rel=0.14)


def test_when_they_are_the_same():
    (one,) = found(SHARED)
    assert one.unlike(one) is None
    moved = dataclasses.replace(one, places=one.places + np.array([1e-9, 0.0]))
    assert one.unlike(moved) is None
    for other, words in (
        (dataclasses.replace(one, places=one.places + np.array([1e-3, 0.0])), "1 mm apart"),
        (dataclasses.replace(one, places=one.places[::-1]), "another order"),
        (dataclasses.replace(one, places=one.places[1:], effects=one.effects[:, 1:]), "40 points, the other 39"),
        (dataclasses.replace(one, distribution="rectangular"), "distribution"),
        (dataclasses.replace(one, effect="per_row"), "effect"),
    ):
        assert words in one.unlike(other)
        assert other.unlike(one) is not None
    rows = dataclasses.replace(one, effect="per_row")
    assert rows.unlike(dataclasses.replace(rows, row=rows.row + 1)) == "the points are in other rows"
    assert isinstance(one.times(2.0), PointErrors)
    np.testing.assert_allclose(one.times(np.array([2.0, 0.0])).variance, one.variance * [4.0, 0.0])
