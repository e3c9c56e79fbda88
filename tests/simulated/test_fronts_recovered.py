"""Walls drawn at random over the published threat space, and calm days with receivers at fault, against the marks.

The benchmark itself, with all figures: `python -m tests.benchmarks.fronts`.
"""

import pytest
from tests.benchmarks.fronts import calm_day, false_events, judged, marks, missed


def test_six_walls_of_the_threat_space():
    assert missed(marks([judged(seed) for seed in range(6)])) == []


def test_eight_calm_hours_with_receivers_at_fault_raise_nothing():
    day = calm_day(100, hours=8.0)
    assert false_events(day) == 0
    assert day["receivers blamed"] >= 2  # the one gone wild, the one that jumped, the silent one


@pytest.mark.slow
def test_two_hundred_walls_of_the_threat_space():
    figures = marks([judged(seed, family=2) for seed in range(200)])
    print(figures)
    assert missed(figures) == []


@pytest.mark.slow
def test_ten_calm_network_days_raise_at_most_one_event():
    assert sum(false_events(calm_day(seed, family=2)) for seed in range(10)) <= 1
