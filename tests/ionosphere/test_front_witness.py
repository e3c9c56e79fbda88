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


def test_pairs_speak_for_a_front_that_does_not_know_its_slope(slow):
    """Nor is their word lost where the front's own sigma is not known.  Half of the wall's slope at the least: of an
    unknown breadth only the narrowest published one is searched for pairs."""
    found, steep = slow
    best = flattened(found, 0.3).fronts[0]
    for unknown in ({"slope": np.nan, "slope_sigma": np.nan, "width_km": np.nan}, {"slope_sigma": np.nan}):
        (front,) = front_witness.at_least(Fronts((replace(best, **unknown),), found.onsets), steep).fronts
        assert front.slope > 100.0 and 0.0 < front.slope_sigma < 60.0 and np.isfinite(front.jump_tecu)
