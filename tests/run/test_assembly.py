"""From a chain's outputs to rows: degrees of freedom."""

import math

import numpy as np
import pytest

from wakeledger.confidence.budget import make_budget
from wakeledger.confidence.montecarlo import run
from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.run.assembly import effective_degrees_of_freedom


def budget_of(*sources):
    inputs = {source.applies_to[0]: InputLayout(0.0) for source in sources}

    def evaluate(errors):
        return sum(errors.values())[:, None]

    samples = run(evaluate, sources, inputs, names=("lift",), draws=4000, seed=1)
    return make_budget(evaluate, sources, inputs, samples, seed=1)


def test_welch_satterthwaite_for_two_sources():
    # GUM G.4.1 by hand: u1 = 3 with 9, u2 = 4 with 16 degrees of freedom: 5⁴/(3⁴/9 + 4⁴/16) = 25.
    one = Source("one", ("a",), "systematic", 3.0, degrees_of_freedom=9)
    two = Source("two", ("b",), "systematic", 4.0, degrees_of_freedom=16)
    spread = np.array([3.0 * one.spread, 4.0 * two.spread])
    expected = (spread**2).sum() ** 2 / (spread**4 / [9, 16]).sum()
    # The budget's own sampling and its remainder move the figure by a few per cent.
    assert effective_degrees_of_freedom(budget_of(one, two), "lift", (one, two)) == pytest.approx(expected, rel=0.1)
    assert expected == pytest.approx(25, rel=0.2)


def test_sources_taken_as_exact_have_infinite_degrees_of_freedom():
    one = Source("one", ("a",), "systematic", 3.0)
    assert effective_degrees_of_freedom(budget_of(one), "lift", (one,)) == math.inf
    assert effective_degrees_of_freedom(None, "lift", ()) == math.inf


def test_correlated_sources_have_no_degrees_of_freedom():
    # Welch and Satterthwaite's formula is for independent inputs (GUM G.4.1).
    smooth = Source("s", ("plane.v",), "random", 0.1, correlation_length=0.1, degrees_of_freedom=9)
    assert math.isnan(effective_degrees_of_freedom(budget_of(smooth), "lift", (smooth,)))
    exact = Source("s", ("plane.v",), "random", 0.1, correlation_length=0.1)
    assert effective_degrees_of_freedom(budget_of(exact), "lift", (exact,)) == math.inf
