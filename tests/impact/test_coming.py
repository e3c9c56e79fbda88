"""When fronts reach places: worked by hand, each limit on both sides of it, laws for fronts and places at random."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.impact.test_ground_augmentation import SITE, a_front
from tests.impact.test_survey import DAY

from skylag.impact import coming as limits
from skylag.impact.coming import coming
from skylag.tables import Flag, Site

NOW = DAY + np.timedelta64(365, "m")  # five minutes after the front was first seen, 240 km south of the site
KM_PER_DEG = 111.1949  # of latitude on the sphere of 6371 km


def minutes(count: float) -> np.timedelta64:
    return np.timedelta64(round(count * 60), "s")


def alone(flag: Flag, site: Site = SITE, now: np.datetime64 = NOW) -> limits.Coming | None:
    """What comes to one site from one front."""
    return next(iter(coming([flag], [site], now)), None)


def test_when_the_next_front_comes() -> None:
    (found,) = coming([a_front(False), a_front()], [SITE], NOW)  # 240 km to go, 20 minutes
    assert found.away_km == pytest.approx(240.0, abs=1.0)
    assert abs(found.expected - (DAY + minutes(385))) < np.timedelta64(10, "s")
    assert found.sigma_s == pytest.approx(0.3 * 1200, rel=0.01)
    assert "in 20 minutes, give or take 12 (two sigmas)" in found.words
    # A front that tells the sigma of its own speed: 20 minutes times 25 over 200, and 6 km of its place at 200 m/s.
    known = alone(replace(a_front(), speed_sigma_m_s=25.0))
    assert known is not None
    assert known.sigma_s == pytest.approx(np.hypot(1200 * 25 / 200, 6000 / 200), rel=0.01)
    sharp = alone(replace(a_front(), speed_sigma_m_s=0.5))
    assert sharp is not None
    assert sharp.sigma_s >= 30.0  # a speed known well does not place the line to the second


def test_a_front_reaches_a_place_when_its_speed_says() -> None:
    """Worked by hand: one degree of latitude is 111.195 km; at 61.8 m/s that takes 1799 s."""
    track = ((NOW, -41.5, 146.0),)
    front = replace(a_front(), speed_m_s=61.8, track=track)
    north = alone(front, Site("there", -40.5, 146.0, "site"))
    assert north is not None and abs((north.expected - NOW) / np.timedelta64(1, "s") - 111_194.9 / 61.8) < 1.0
    assert alone(front, Site("behind", -42.5, 146.0, "site")) is None
    assert alone(front, Site("aside", -40.5, 151.0, "site")) is None
    east = replace(front, heading_deg=90.0, track=((NOW, 0.0, 179.5),))
    assert alone(east, Site("over the date line", 0.0, -179.5, "site")) is not None
    assert alone(replace(front, speed_m_s=float("nan")), Site("there", -40.5, 146.0, "site")) is None
    assert alone(replace(front, heading_deg=float("nan")), Site("there", -40.5, 146.0, "site")) is None
    assert alone(replace(front, track=()), Site("there", -40.5, 146.0, "site")) is None


@pytest.mark.parametrize("minute", [300, 400, 600])
def test_no_front_before_it_is_seen_or_after_it_passed(minute: int) -> None:
    assert alone(a_front(), now=DAY + minutes(minute)) is None


def test_an_unconfirmed_front_is_not_announced() -> None:
    assert alone(a_front(False)) is None
    assert alone(replace(a_front(), kind="slope")) is None


@pytest.mark.parametrize("name", ["slope_mm_per_km", "sigma_mm_per_km", "speed_sigma_m_s"])
def test_what_is_not_known_of_a_front_takes_no_arrival_away(name: str) -> None:
    known, vague = alone(a_front()), alone(replace(a_front(), **{name: float("nan")}))
    assert known is not None and vague is not None
    assert (vague.expected, vague.sigma_s) == (known.expected, known.sigma_s) and "nan" not in vague.words


def test_each_limit() -> None:
    """A front is told a little on this side of each limit, and not a little beyond."""
    still = replace(a_front(), track=((NOW, -40.2, 146.0),), end=NOW)
    for speed, told in ((4.95, False), (5.05, True)):  # 22 km in 74 minutes
        assert (alone(replace(still, speed_m_s=speed)) is not None) is told
    for share in (0.99, 1.01):
        told = share < 1.0
        slow = replace(still, speed_m_s=10.0)
        ahead = Site("ahead", -40.2 + share * 3 * 3600 * 0.010 / KM_PER_DEG, 146.0, "site")
        assert (alone(slow, ahead) is not None) is told, "three hours ahead"
        beside = Site("beside", 0.1, 146.0 + share * 300.0 / KM_PER_DEG, "site")
        equator = replace(still, track=((NOW, 0.0, 146.0),))
        assert (alone(equator, beside) is not None) is told, "300 km aside"
        late = alone(replace(still, speed_m_s=5.0, track=((NOW, -40.25, 146.0),)), now=NOW + minutes(60 * share))
        assert (late is not None) is told, "an hour after it was last seen"


def test_doubt_grows_from_where_a_front_was_last_seen() -> None:
    """Half an hour of silence leaves the time as it was and the doubt too: no nearer look was had."""
    front = replace(a_front(), speed_m_s=50.0, track=((NOW, -41.0, 146.0),), end=NOW)
    first, later = alone(front), alone(front, now=NOW + minutes(30))
    assert first is not None and later is not None
    assert (first.expected, first.sigma_s) == (later.expected, later.sigma_s)
    assert first.minutes - later.minutes == 30
    assert later.away_km == pytest.approx(first.away_km - 90.0)


places = st.tuples(st.floats(-60, 60), st.floats(-180, 180))


@st.composite
def fronts(draw: st.DrawFn) -> Flag:
    """A front on any way, seen for some while around the moment asked for, sometimes with nothing known of it."""
    lat, lon = draw(places)
    began = NOW - minutes(draw(st.floats(-30, 120)))
    count = draw(st.integers(0, 6))
    speed, heading = draw(st.floats(0, 900) | st.just(float("nan"))), draw(st.floats(0, 360) | st.just(float("nan")))
    way = 0.0 if not np.isfinite(speed * heading) else speed * 0.3 / KM_PER_DEG * np.cos(np.radians(heading))
    track = tuple((began + minutes(5 * k), float(np.clip(lat + k * way, -85, 85)), lon) for k in range(count))
    end = began + minutes(5 * max(count, 1) + draw(st.floats(0, 90)))
    sigma = draw(st.floats(0, 200) | st.just(float("nan")))
    return Flag(began, end, lat, lon, "front", 60.0, 3.0, speed, heading, "broken", "seen",
                draw(st.integers(0, 3)) > 0, track, sigma)  # fmt: skip


@settings(max_examples=300, deadline=None)
@given(st.lists(fronts(), max_size=5), st.lists(places, max_size=6))
def test_laws(flags: list[Flag], at: list[tuple[float, float]]) -> None:
    """Within the limits, soonest first, one per site; a site is told the same alone, and by the soonest front alone."""
    sites = [Site(f"site {number}", lat, lon, "site") for number, (lat, lon) in enumerate(at)]
    found = coming(flags, sites, NOW)
    assert [one.expected for one in found] == sorted(one.expected for one in found)
    assert len({one.site for one in found}) == len(found)
    for one in found:
        assert NOW < one.expected <= NOW + limits.HORIZON and one.flag.confirmed
        assert one.aside_km <= limits.ASIDE_KM and one.sigma_s > 0 and one.give_or_take_min >= 1
        assert abs(one.away_km - one.flag.speed_m_s * (one.expected - NOW) / np.timedelta64(1, "s") / 1000.0) < 1.0
        assert alone(one.flag, one.site) == one
    for site in sites:
        each = [told for flag in flags if (told := alone(flag, site)) is not None]
        named = [one for one in found if one.site == site]
        assert [one.expected for one in named] == [min(one.expected for one in each)] if each else named == []
