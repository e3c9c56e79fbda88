"""Fronts: found, sized, followed and foretold on a simulated sky; not seen where there is none."""

import re

import numpy as np
import pytest
from tests.simulated.moving_wall import CENTRE, PLACES, START, changed, quiet, samples_of, simulate, wall

from skylag.impact import states
from skylag.ionosphere import fronts
from skylag.tables import Site


def with_wall(slope, width, speed, heading, seed, hours=6.0, **options):
    ramp = wall(slope, width, speed, heading, hours / 2 * 3600)
    return simulate(lambda x, y, t: quiet(x, y, t) + ramp(x, y, t), np.random.default_rng(seed), hours=hours, **options)


@pytest.mark.parametrize(
    ("slope", "width", "speed", "heading"),
    [(60, 100, 100, 40), (150, 60, 200, 300), (300, 50, 400, 200), (100, 150, 60, 120), (80, 25, 300, 10)],
)
def test_a_wall_is_recovered(slope, width, speed, heading):
    hours = 4.0 if speed >= 100 else 6.0
    found = fronts.track(*with_wall(slope, width, speed, heading, seed=slope, hours=hours))
    assert len(found.fronts) == 1
    front = found.fronts[0]
    assert front.confirmed and len(front.receivers) >= 3 and len(front.satellites) >= 2
    assert front.speed_m_s == pytest.approx(speed, rel=0.05)
    assert abs((front.heading_deg - heading + 180) % 360 - 180) < 3.0
    assert front.slope == pytest.approx(slope, rel=0.1)
    assert front.jump_tecu == pytest.approx(slope * width / 162.372, rel=0.2)
    moment, sigma_s = fronts.expected_at(front, *CENTRE)
    miss_s = abs((moment - START) / np.timedelta64(1, "s") - hours / 2 * 3600)
    assert miss_s < 60.0 and miss_s < 3 * sigma_s + 5


@pytest.mark.parametrize(
    ("slope", "width", "speed", "heading"),
    [(80, 60, 0, 40), (120, 100, 10, 300), (200, 50, 15, 120), (300, 40, 20, 10)],
)
def test_a_wall_that_hardly_moves_is_one_front(slope, width, speed, heading):
    found = fronts.track(*with_wall(slope, width, speed, heading, seed=slope, hours=6.0))
    assert len(found.fronts) == 1
    front = found.fronts[0]
    assert abs(front.speed_m_s - speed) < max(3.0, 2 * front.speed_sigma_m_s)
    turned = (front.heading_deg - heading + 180) % 360 - 180
    if speed == 0:  # a wall at rest has no front and back: the other way round it takes what it brought
        turned = (turned + 90) % 180 - 90
    else:
        assert front.jump_tecu > 0
    assert abs(turned) < 3.0
    assert front.slope == pytest.approx(slope, rel=0.1)
    # Lines of sight on both sides of its speed saw it: rises and falls alike belong to it.
    assert len(np.unique(np.sign(found.onsets.jump[found.onsets.front == 0]))) == 2


def bending(x, y, t):
    """A wall of 150 mm/km over 60 km that speeds up from 140 to 260 m/s and turns by 16 degrees in two hours."""
    late = t - 2 * 3600
    turn = np.radians(300.0 + 8.0 * np.clip(late / 3600.0, -1, 1))
    way = 0.2 * late + 0.06 * np.clip(late, -3600, 3600) ** 2 / 7200.0
    return 150.0 / 162.372448 * np.clip(30.0 - (x * np.sin(turn) + y * np.cos(turn) - way), 0.0, 60.0)


def test_a_front_that_turns_and_speeds_up_is_followed():
    rays, samples = simulate(lambda x, y, t: quiet(x, y, t) + bending(x, y, t), np.random.default_rng(23), hours=4.0)
    front = max(fronts.track(rays, samples).fronts, key=lambda f: f.onsets)
    assert len(front.segments) >= 3
    speed, heading = 1000.0 * front.segments[:, 2], np.degrees(front.segments[:, 3]) % 360.0
    middle_s = front.segments[:, 0] + (front.epoch - START) / np.timedelta64(1, "s") - 7200.0
    inside = np.abs(middle_s) < 3600
    # The pace of a line that turns differs along it; at its foot it is what was put in.
    assert np.abs(speed - (200.0 + 60.0 * middle_s / 3600.0))[inside].max() < 40.0
    assert np.abs(heading - (300.0 + 8.0 * middle_s / 3600.0))[inside].max() < 4.0
    assert speed[inside][-1] > speed[inside][0] + 20.0 and heading[inside][-1] > heading[inside][0] + 3.0
    straight = fronts.replace(front, segments=np.zeros((0, 7)))
    late = front.epoch + (np.arange(-2, 3) * 900).astype("timedelta64[s]")
    true = [0.2 * s + 0.06 * np.clip(s, -3600, 3600) ** 2 / 7200.0 for s in
            (late - START) / np.timedelta64(1, "s") - 7200.0]  # fmt: skip
    miss = [float(np.abs(fronts.position(one, late) - true).max()) for one in (front, straight)]
    assert miss[0] < 20.0 and miss[0] < miss[1] + 1.0


def test_a_steady_front_keeps_its_pace_in_all_stretches():
    front = fronts.track(*with_wall(100, 60, 100, 40, seed=5, hours=4.0)).fronts[0]
    assert len(front.segments) >= 4
    over = (front.segments[:, 2] - 0.1) / front.segments[:, 5]
    assert np.sqrt(np.mean(over**2)) < 2.5
    assert np.abs(np.degrees(front.segments[:, 3]) % 360.0 - 40.0).max() < 3.0


@pytest.mark.parametrize(("before", "after", "heading"), [(150, 300, 320), (300, 120, 40)])
def test_a_wall_that_changes_its_pace_at_once_is_one_front(before, after, heading):
    at_s = 2 * 3600
    turn = np.radians(heading)

    def content(x, y, t):
        late = t - at_s
        way = np.where(late < 0, before, after) / 1000.0 * late
        ahead = x * np.sin(turn) + y * np.cos(turn) - way
        return quiet(x, y, t) + 120.0 / 162.372448 * np.clip(30.0 - ahead, 0.0, 60.0)

    rays, samples = simulate(content, np.random.default_rng(before), hours=4.0)
    found = fronts.track(rays, samples)
    assert len(found.fronts) == 1
    front = found.fronts[0]
    assert (found.onsets.front == 0).sum() == front.onsets > 120
    assert front.speed_m_s == pytest.approx(after, rel=0.03)  # the pace it has now: that is what foretells
    assert front.slope == pytest.approx(120.0, rel=0.1)
    late_s = np.array([-2400, -1200, 0, 1200, 2400])
    moments = START + np.timedelta64(at_s, "s") + late_s.astype("timedelta64[s]")
    true_km = np.where(late_s < 0, before, after) / 1000.0 * late_s
    assert np.abs(fronts.position(front, moments) - true_km).max() < 30.0
    times = [point[0] for point in front.track]
    assert times == sorted(times) and times[0] < START + np.timedelta64(at_s, "s") < times[-1]
    least, most = re.search(r"\((\d+) to (\d+) m/s on its way\)", states.front_sentence(front)).groups()
    assert abs(int(least) - min(before, after)) < 10 and abs(int(most) - max(before, after)) < 10


def test_walls_alike_that_follow_each_other_stay_two():
    first, second = wall(120, 60, 200, 320, 1.5 * 3600), wall(120, 60, 200, 320, 3.0 * 3600)
    rays, samples = simulate(
        lambda x, y, t: quiet(x, y, t) + first(x, y, t) + second(x, y, t), np.random.default_rng(14), hours=5.0
    )
    found = fronts.track(rays, samples).fronts
    assert len(found) == 2
    assert [round(front.speed_m_s, -1) for front in found] == [200, 200]


def test_two_breadths_add_somewhere_between_plainly_and_as_squares():
    lean = np.linspace(0.1, 1.0, 40)
    for power in (1.0, 2.0):
        seen = (2.0**power + (5.0 * lean) ** power) ** (1.0 / power)
        breadth, sigma, growth = fronts._upright(seen, lean, 0.1, power)
        assert breadth == pytest.approx(2.0, rel=1e-6) and growth == pytest.approx(5.0, rel=1e-6)
        assert sigma < 0.2
    plain = fronts._upright((2.0**2 + (5.0 * lean) ** 2) ** 0.5, lean, 0.1, 1.0)[0]
    assert plain < 2.0  # the two answers stand on both sides of what is true


def test_errors_over_sigma_look_like_a_unit_normal():
    over = []
    for seed in range(6):
        rng = np.random.default_rng(1000 + seed)
        slope, width = rng.uniform(60, 300), rng.uniform(30, 120)
        speed, heading = rng.uniform(60, 500), rng.uniform(0, 360)
        found = fronts.track(*with_wall(slope, width, speed, heading, seed=seed, hours=4.0)).fronts
        assert found
        best = max(found, key=lambda f: f.onsets)
        over.append((
            (best.speed_m_s - speed) / best.speed_sigma_m_s,
            ((best.heading_deg - heading + 180) % 360 - 180) / best.heading_sigma_deg,
        ))  # fmt: skip
    assert 0.3 < np.sqrt(np.mean(np.square(over))) < 1.8


def test_a_calm_sky_has_no_front():
    found = fronts.track(*simulate(quiet, np.random.default_rng(3), hours=8.0))
    assert found.fronts == ()


def test_a_receiver_gone_wild_is_no_front():
    rays, samples = simulate(quiet, np.random.default_rng(4), hours=4.0)
    rng = np.random.default_rng(40)
    rows = np.flatnonzero((rays.receiver == 3) & (rays.time > START + np.timedelta64(1, "h"))
                          & (rays.time < START + np.timedelta64(2, "h")))  # fmt: skip
    walk = np.cumsum(rng.normal(0, 1.5, len(rows)))
    found = fronts.track(*changed(rays, samples, rows, walk))
    assert len(found.onsets) > 0
    assert found.fronts == ()


def test_chance_onsets_make_no_front():
    rays, samples = simulate(quiet, np.random.default_rng(9), hours=4.0)
    rng = np.random.default_rng(90)
    arcs = np.unique(rays.arc)
    step = np.zeros(len(rays))
    for arc in rng.choice(arcs, 120):
        rows = np.flatnonzero(rays.arc == arc)
        if len(rows) > 60:
            at = rng.integers(20, len(rows) - 20)
            step[rows] += 8.0 * np.clip((np.arange(len(rows)) - at) / 6.0, 0, 1) * rays.mapping[rows]
    found = fronts.track(*changed(rays, samples, np.arange(len(rays)), step))
    assert len(found.onsets) > 60
    assert found.fronts == ()


def test_two_walls_of_a_day_are_two():
    rise, fall = wall(120, 60, 150, 330, 2.5 * 3600), wall(120, 60, 250, 60, 6.0 * 3600)
    rays, samples = simulate(
        lambda x, y, t: quiet(x, y, t) + rise(x, y, t) - fall(x, y, t) + 60.0, np.random.default_rng(12), hours=8
    )
    found = sorted(fronts.track(rays, samples).fronts, key=lambda f: f.start)
    assert [round(f.speed_m_s / 10) * 10 for f in found] == [150, 250]
    assert found[0].jump_tecu > 0 > found[1].jump_tecu


def test_too_few_receivers_make_no_front():
    found = fronts.track(*with_wall(150, 60, 200, 300, seed=2, places=PLACES[:2]))
    assert len(found.onsets) > 10
    assert found.fronts == ()


def test_arrivals_are_foretold_and_come_true():
    rays, samples = with_wall(150, 60, 150, 300, seed=21, hours=6.0)
    found = fronts.track(rays, samples)
    sites = [Site("middle", *CENTRE), Site("north west", -37.8, 143.5)]
    told = fronts.arrivals(found, rays, sites)
    known = [one for one in told if one.came_true is not None]
    assert len(known) >= 4
    assert np.mean([one.came_true for one in known]) > 0.8
    assert all(one.made < one.expected <= one.made + np.timedelta64(3600, "s") for one in told)
    middle = [abs((one.expected - START) / np.timedelta64(1, "s") - 10_800) for one in told if one.place == "middle"]
    assert max(middle) < 600.0


def test_where_the_data_end_the_next_hour_is_foretold():
    rays, samples = with_wall(150, 60, 150, 300, seed=21, hours=6.0)
    now = START + np.timedelta64(170, "m")
    seen = rays.time <= now
    rays = rays.where(seen)
    until = fronts.track(
        rays, samples_of(rays, samples.vtec[seen], samples.arc_sigma[seen], samples.receiver_sigma[seen])
    )
    sites = [Site("middle", *CENTRE), Site("north west", -37.8, 143.5), Site("behind", -42.5, 148.5)]
    told = fronts.arrivals(until, rays, sites)
    newest = [one for one in told if one.made == now]
    assert {one.place for one in newest} == {"middle", "north west"}
    assert max(one.made for one in told) == now  # never made later than the data reach
    middle = next(one for one in newest if one.place == "middle")
    assert middle.came_true is None and np.isnat(middle.seen)
    assert abs((middle.expected - START) / np.timedelta64(1, "s") - 10_800) < 2 * middle.sigma_s + 30
