"""Scatter of points that were taken more than once."""

import math

import numpy as np
import pytest

from wakeledger.confidence.revisits import pooled_scatter, sort_visits


def test_pooled_scatter_is_that_of_the_closed_form():
    # Places 0 and 1 with means 2 and 10: squares 1 + 0 + 1 and 4 + 4, of 3 + 2 points less two means.
    values = np.array([1.0, 8.0, 2.0, 3.0, 12.0, 99.0])
    place = np.array([0, 1, 0, 0, 1, -1])
    found = pooled_scatter(values, place)
    assert found.deviation == pytest.approx(math.sqrt(10 / 3))
    assert (found.degrees_of_freedom, found.places, found.points) == (3, 2, 5)


def test_missing_values_and_places_seen_once_say_nothing():
    found = pooled_scatter(np.array([1.0, np.nan, 3.0, 5.0]), np.array([0, 0, 1, 2]))
    assert math.isnan(found.deviation)
    assert (found.degrees_of_freedom, found.places, found.points) == (0, 0, 0)


def test_points_taken_at_once_and_visits_are_told_apart():
    # In order of time: place 0 twice at once, away, back at 0; place 1 once; place 2 three times without leaving.
    place = np.array([0, 0, 1, 0, 2, 2, 2])
    taken = np.array([6, 5, 4, 3, 2, 1, 0])
    filed = np.empty(7, dtype=int)
    filed[taken] = place
    visits = sort_visits(filed, taken)
    again, once = visits.again[taken], visits.once[taken]
    np.testing.assert_array_equal(again >= 0, [True, False, False, True, False, False, False])
    np.testing.assert_array_equal(once >= 0, [True, True, False, False, True, True, True])
    assert once[0] == once[1] != once[4] == once[6]


def test_noise_is_recovered_from_twelve_places_within_its_own_doubt():
    found = []
    for seed in range(200):
        rng = np.random.default_rng(seed)
        place = np.concatenate([np.arange(12), np.arange(12)])
        found.append(pooled_scatter(rng.uniform(-3, 3, 12)[place] + 0.1 * rng.standard_normal(24), place))
    values = np.array([one.deviation for one in found])
    assert found[0].degrees_of_freedom == 12
    # The variance is unbiased; its relative standard error is √(2/12), of the mean of 200 √(2/12/200) = 0.029.
    assert np.mean(values**2) == pytest.approx(0.01, rel=4 * 0.029)
    low, high = np.array([one.interval() for one in found]).T
    # 95 ± 4 √(0.95 · 0.05/200) %.
    assert np.mean((low < 0.1) & (high > 0.1)) == pytest.approx(0.95, abs=0.062)
