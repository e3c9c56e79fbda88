"""The invented storm and calm days, a few hours each, against what was put in: wall, patch, receivers at fault.

The whole way from signals to flags, without the maps: the ionosphere there is three-dimensional, so that thin-shell
geometry and slanting lines of sight take their toll.
"""

import numpy as np
import pytest

from invented import network
from skylag import chain, formats
from skylag.ionosphere import adjustment, faults, fronts, irregularity, slopes
from skylag.ionosphere.field import plane_km
from skylag.tables import concatenate


def witnessed(day, hours):
    """Slopes, fronts, patches and faults of a stretch of an invented day, and its truth."""
    world = network.simulate(day, hours=hours)
    choices = chain.Choices()
    rays = concatenate([chain.receiver_day(s, [world.ephemerides], choices, 400e3).rays for s in world.signals])
    samples = adjustment.apply(adjustment.solve(rays, None, choices.adjustment, {}), rays)
    steep = slopes.measure(rays, samples)
    moving = fronts.track(rays, samples, steep)
    ragged = irregularity.assess(rays, moving, None, samples)
    return world, steep, moving, ragged, faults.find(rays, samples, ragged, steep, moving)


@pytest.fixture(scope="module")
def storm():
    return witnessed("2031-03-12", (6.3, 8.5))


@pytest.fixture(scope="module")
def calm():
    return witnessed("2031-03-11", (4.7, 6.3))


def test_the_wall_of_the_storm(storm):
    world, steep, moving, _, _ = storm
    assert len(moving.fronts) == 1
    front = moving.fronts[0]
    truth = world.front.at(front.epoch)
    assert front.speed_m_s == pytest.approx(truth.speed_m_s, rel=0.03)
    assert abs(front.speed_m_s - truth.speed_m_s) < 3 * front.speed_sigma_m_s
    assert abs((front.heading_deg - truth.heading_deg + 180) % 360 - 180) < min(2.0, 3 * front.heading_sigma_deg + 0.2)
    # Content grows toward the heading: the wall brings a fall.
    assert front.jump_tecu == pytest.approx(-truth.jump_tecu, rel=0.08)
    assert front.slope == pytest.approx(truth.slope_mm_per_km, rel=0.15)
    assert abs(front.slope - truth.slope_mm_per_km) < 2 * front.slope_sigma
    moment, sigma_s = fronts.expected_at(front, truth.lat, truth.lon)
    miss_s = abs((moment - front.epoch) / np.timedelta64(1, "s"))
    assert miss_s < 120.0 and miss_s < 3 * sigma_s
    assert any(claim.confirmed and claim.slope > 25.5 for claim in steep.claims)
    assert all(claim.slope < 1.1 * truth.slope_mm_per_km for claim in steep.claims if claim.confirmed)


def test_the_patch_of_the_storm(storm):
    world, _, _, ragged, _ = storm
    found = [patch for patch in ragged.patches if patch.confirmed]
    assert len(found) == 1
    patch = found[0]
    truth = world.patch.at(patch.start + (patch.end - patch.start) // 2)
    away = np.hypot(*plane_km(np.array(patch.lat), np.array(patch.lon), (truth.lat, truth.lon)))
    assert away < truth.radius_km
    assert 0.6 * truth.radius_km < patch.radius_km < 1.8 * truth.radius_km
    assert world.patch.at(patch.start + np.timedelta64(5, "m")) is not None
    assert world.patch.at(patch.end - np.timedelta64(5, "m")) is not None


def test_the_receiver_at_fault_is_no_weather(calm):
    _, steep, moving, ragged, blamed = calm
    assert moving.fronts == ()
    assert [patch for patch in ragged.patches if patch.confirmed] == []
    assert [claim for claim in steep.claims if claim.confirmed] == []
    spans = [fault for fault in blamed if fault.receiver.startswith("OXBR")]
    assert len(spans) == 1
    day, ten = np.datetime64("2031-03-11"), np.timedelta64(10, "m")
    assert abs(spans[0].start - day - np.timedelta64(300, "m")) <= ten
    # Arcs that began in the bad hour carry its code levels on until they end.
    assert abs(spans[0].end - day - np.timedelta64(360, "m")) <= 2 * ten


@pytest.mark.slow
@pytest.mark.open_data
def test_a_quiet_day_of_six_real_receivers_raises_nothing(open_data):
    orbits = [formats.read(path).table for path in sorted((open_data / "2021-001/nav").glob("*_MN.rnx.gz"))]
    choices = chain.Choices()
    signals = [formats.read(path).table for path in sorted((open_data / "2021-001/obs").iterdir())]
    rays = concatenate([chain.receiver_day(one, orbits, choices, 400e3).rays for one in signals])
    samples = adjustment.apply(adjustment.solve(rays, None, choices.adjustment, {}), rays)
    steep = slopes.measure(rays, samples)
    assert steep.summary["pair_slopes"] > 50_000
    assert [claim for claim in steep.claims if claim.confirmed] == []
    moving = fronts.track(rays, samples, steep)
    assert moving.fronts == ()
    assert [patch for patch in irregularity.assess(rays, moving, None, samples).patches if patch.confirmed] == []
