"""Pairs raise the slope of a front that the running background follows; one receiver alone raises nothing."""

from dataclasses import replace

import numpy as np
import pytest
from tests.simulated.moving_wall import quiet, simulate, wall

from skylag.ionosphere import front_witness, fronts, slopes
from skylag.tables import Fronts


@pytest.fixture(scope="module")
def slow():
    """A broad wall that takes two hours to pass, as lines of sight and as pairs see it."""
    ramp = wall(200.0, 180.0, 25.0, 80.0, 2 * 3600)
    rays, samples = simulate(lambda x, y, t: quiet(x, y, t) + ramp(x, y, t), np.random.default_rng(26), hours=4.0)
    found = fronts.track(rays, samples)
    return found, slopes.measure(rays, samples)


def flattened(found, share):
    """The front as it is told where the background follows the wall: too flat, and too sure of it."""
    best = max(found.fronts, key=lambda front: front.onsets)
    flat = replace(best, slope=200.0 * share, slope_sigma=5.0, width_km=100.0, jump_tecu=200.0 * share * 100.0 / 162.37)
    return Fronts((flat,), found.onsets)


def test_a_front_is_no_less_steep_than_two_pairs_apart_see_it(slow):
    found, steep = slow
    told = flattened(found, 0.3)
    (front,) = front_witness.at_least(told, steep).fronts
    assert 140.0 < front.slope < 200.0 + 2.0 * front.slope_sigma
    assert front.slope_sigma > 5.0 and front.width_km == 100.0
    assert front.jump_tecu == pytest.approx(front.slope * 100.0 / 162.372448)
    assert (front.speed_m_s, front.heading_deg) == (told.fronts[0].speed_m_s, told.fronts[0].heading_deg)


def test_a_front_that_is_steep_enough_stays_as_it_is(slow):
    found, steep = slow
    told = flattened(found, 1.0)
    assert front_witness.at_least(told, steep) == told
    assert front_witness.at_least(Fronts((), found.onsets), steep).fronts == ()


def test_one_receiver_raises_nothing(slow):
    found, steep = slow
    told = flattened(found, 0.3)
    only = (steep.receiver == 8) | (steep.other == 8)
    star = replace(steep, **{name: getattr(steep, name)[only] for name in slopes.Slopes.COLUMNS})
    assert only.sum() > 100
    assert front_witness.at_least(told, star) == told
    nobody = replace(steep, **{name: getattr(steep, name)[:0] for name in slopes.Slopes.COLUMNS})
    assert front_witness.at_least(told, nobody) == told
