"""Around a silent receiver nothing holds: a place at the edge of its cell goes with its own nearest receiver."""

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from fastapi.testclient import TestClient
from hypothesis import given
from hypothesis import strategies as st
from tests.builders import REGION, STORM_DAY, invented_day

from skylag.archive import Archive, open_archive
from skylag.impact import at_places, silence, states, uses
from skylag.impact.silence import Silences
from skylag.jobs import alerts, live
from skylag.jobs.advising import AskedJob, DayAdvice, Desk
from skylag.tables import BROKEN, HOLDS, STRAINED, UNSEEN, Products, Site
from skylag.web.app import create_app

# Nearest to HULL, 67 km off; the middle of its cell, -41.0 and 147.0, is nearer to GULL.
EDGE = Site("Edge", -41.2, 147.2, "aerodrome")
FROM, TO = (np.datetime64(f"{STORM_DAY}T{text}:00", "ns") for text in ("12:00", "17:00"))


def without(day: Products, name: str) -> Products:
    """A day whose receiver of a name gives nothing between the two times."""
    rays = day.samples.rays
    number = [one.name for one in rays.receivers].index(name)
    gone = (rays.receiver == number) & (rays.time >= FROM) & (rays.time < TO)
    rest = {column: getattr(day.samples, column)[~gone] for column in day.samples.__dataclass_fields__
            if column not in ("rays", "bias_covariance")}  # fmt: skip
    return replace(day, samples=replace(day.samples, rays=rays.where(~gone), **rest))


@pytest.fixture(scope="module")
def gentle() -> Products:
    """The day with a slope at which every way of working holds around the site, which it was judged for."""
    day = invented_day(STORM_DAY)
    sites = (*REGION.sites, EDGE)
    shape = day.fields.state.shape
    calm = {"slope": 1.0, "slope_sigma": 0.2, "slope_east": 1.0, "slope_north": 0.0, "vtec": 12.0, "vtec_sigma": 0.5}
    layers = {name: np.full(shape, value, dtype=np.float32) for name, value in calm.items()}
    fields = replace(day.fields, **layers, state=np.full(shape, HOLDS, np.uint8), support=np.full(shape, 9, np.uint16))
    codes = np.full((shape[0], len(sites)), HOLDS, dtype=np.uint8)
    return replace(
        day, fields=fields, flags=(), region=replace(REGION, sites=sites), site_states=codes,
        site_reasons=(("",) * shape[0],) * len(sites),
    )  # fmt: skip


@pytest.fixture(scope="module")
def day(gentle: Products) -> Products:
    """The same with HULL silent from 12:45 to 17:00."""
    return live.silent_areas(without(gentle, "HULL"), 2700.0)


@pytest.fixture(scope="module")
def quiet(day: Products) -> np.ndarray:
    return np.asarray((day.fields.times >= FROM + np.timedelta64(45, "m")) & (day.fields.times < TO))


@pytest.fixture
def own(tmp_path: Path, day: Products) -> Iterator[Archive]:
    with open_archive(tmp_path) as archive:
        archive.save(day)
        yield archive


def of(day: Products) -> Silences:
    return silence.of_facts(day.origin.counts, day.receivers)


def test_the_cell_holds_where_the_site_does_not(day: Products, quiet: np.ndarray) -> None:
    row, column, _ = states.nearest_cells(day.fields, np.array([EDGE.lat]), np.array([EDGE.lon]))
    assert (day.fields.state[:, row[0], column[0]] == HOLDS).all(), "or the rest tells nothing"
    np.testing.assert_array_equal(day.site_states[:, -1] == UNSEEN, quiet)
    assert (day.site_states[quiet, -1] == UNSEEN).all() and (day.site_states[~quiet, -1] == HOLDS).all()
    assert day.site_reasons[-1][int(np.flatnonzero(quiet)[0])].startswith("HULL, the nearest receiver, has been silent")


def test_a_place_judged_later_is_unseen_as_one_judged_at_the_time(day: Products, quiet: np.ndarray) -> None:
    later, reasons = at_places.judge([EDGE], day.fields, day.flags, REGION.thresholds, (of(day),))
    np.testing.assert_array_equal(later[:, 0], day.site_states[:, -1])
    assert reasons[0] == day.site_reasons[-1]
    assert (at_places.codes([EDGE], day.fields, day.flags, REGION.thresholds)[:, 0] == HOLDS).all(), "without the facts"


def test_no_use_holds_there(day: Products, quiet: np.ndarray) -> None:
    for use in uses.PUBLISHED:
        judged = uses.judge_for(use, day.fields, day.flags, day.region, silent=of(day))
        np.testing.assert_array_equal(judged.site_states[:, -1] == HOLDS, ~quiet)
        assert (judged.site_states[quiet, -1] == UNSEEN).all()
        assert "HULL, the nearest receiver" in judged.site_reasons[-1][int(np.flatnonzero(quiet)[0])]


def test_nor_does_a_use_with_wider_limits_where_the_day_itself_is_strained(gentle: Products) -> None:
    """Cells that are strained for the day stay so under a silent receiver; a use that they hold for may not."""
    steep = replace(gentle.fields, slope=np.full_like(gentle.fields.slope, 10.0),
                    state=np.full_like(gentle.fields.state, STRAINED))  # fmt: skip
    strained = live.silent_areas(without(replace(gentle, fields=steep), "HULL"), 2700.0)
    assert (strained.fields.state == STRAINED).all()
    use = replace(uses.PUBLISHED[0], strained_from=20.0, broken_from=40.0)
    judged = uses.judge_for(use, strained.fields, (), strained.region, silent=of(strained))
    over = of(strained).over(steep.lats[:, None], steep.lons[None, :], steep.times)
    assert over.any()
    np.testing.assert_array_equal(judged.states == HOLDS, ~over)


def test_warnings_stay(day: Products, quiet: np.ndarray) -> None:
    for code in (STRAINED, BROKEN):
        warned = replace(day.fields, state=np.full_like(day.fields.state, code))
        later = at_places.codes([EDGE], warned, day.flags, REGION.thresholds, (of(day),))
        assert (later == code).all()


def test_no_time_to_work_is_found_there(own: Archive, quiet: np.ndarray, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(DayAdvice, "known_sky", None)  # the nominal constellation: the invented one is rarely in view
    kept = Desk(own).day(REGION.name, str(STORM_DAY))
    loose = AskedJob(least_satellites=4, most_dilution=50.0, horizontal_mm=1e5, vertical_mm=1e5, fixing_chance=0.9)
    middle = kept.survey(kept.job(replace(loose, places="-41.0,147.0")))
    works = middle.verdict == "work"
    assert works[quiet].sum() > 5 and works[~quiet].sum() > 5, "or the rest tells nothing"
    route = replace(loose, places=f"-41.0,147.0;{EDGE.lat},{EDGE.lon}")
    for asked in (replace(loose, site="Edge"), replace(loose, places=f"{EDGE.lat},{EDGE.lon}"), route):
        found = kept.survey(kept.job(asked))
        assert (found.verdict[quiet] != "work").all()
        assert (found.verdict[quiet & works] == "unseen").any() and (found.verdict[~quiet] == "work").any()
        assert any("HULL, the nearest receiver" in found.reasons[row] for row in np.flatnonzero(quiet & works))


def test_the_station_is_not_within_there(own: Archive, quiet: np.ndarray) -> None:
    found = Desk(own).day(REGION.name, str(STORM_DAY)).station(EDGE)
    np.testing.assert_array_equal(found.state == HOLDS, ~quiet)
    (told,) = [one for one in found.exceeded if one.what == "unseen"]
    assert "HULL, the nearest receiver" in told.why


def test_the_page_reads_it_unseen(own: Archive, quiet: np.ndarray) -> None:
    client, base = TestClient(create_app(own)), f"/api/days/{REGION.name}/{STORM_DAY}"
    place = {"lat": EDGE.lat, "lon": EDGE.lon}
    for text, state in (("12:30", "holds"), ("13:00", "unseen"), ("17:00", "holds")):
        read = client.get(f"{base}/reading", params={**place, "time": f"{STORM_DAY}T{text}:00Z"}).json()
        assert read["state"] == state
        assert (read["slope"] is None) is (state == "unseen")
        assert ("HULL, the nearest receiver" in read["sentence"]) is (state == "unseen")
    day = client.get(f"{base}/series", params=place).json()
    assert [one == "unseen" for one in day["state"]] == quiet.tolist()
    assert all(("HULL" in said) == silent for said, silent in zip(day["sentence"], quiet.tolist(), strict=True))
    for asked in ("site-states", "site-states-for?use=single"):
        told = client.get(f"{base}/{asked}").json()
        assert told["sites"][-1]["name"] == "Edge"
        assert [code == UNSEEN for code in told["codes"][-1]] == quiet.tolist()


def test_a_site_that_came_later_is_unseen_there(own: Archive, day: Products, quiet: np.ndarray) -> None:
    new = Site("New quay", EDGE.lat, EDGE.lon, "port")
    own.sites.change(REGION.name, "New quay added", lambda before: before.with_site(new))
    told = Desk(own).day(REGION.name, str(STORM_DAY)).site_states()
    np.testing.assert_array_equal(told.codes[:, told.sites.index(new)] == UNSEEN, quiet)
    until = int(np.flatnonzero(quiet)[3]) + 1
    layers = {name: getattr(day.fields, name)[:until] for name in type(day.fields).LAYERS}
    now = replace(day, fields=replace(day.fields, times=day.fields.times[:until], **layers),
                  site_states=day.site_states[:until])  # fmt: skip
    rule = alerts.Rule("r", "state", site="New quay", state="unseen")
    (one,) = alerts.occasions([rule], now, told.sites)
    assert "HULL, the nearest receiver" in one.sentence and one.start == day.fields.times[quiet][0]


@given(st.lists(st.booleans(), min_size=40, max_size=40), st.integers(1, 12))
def test_what_is_kept_tells_each_silence_again(has: list[bool], limit: int) -> None:
    """Against the definition, map by map: it gave data before, and none for longer than a span."""
    times = FROM + np.arange(40) * np.timedelta64(5, "m")
    had, span = times[np.array(has)], np.timedelta64(5 * limit, "m")
    receivers = invented_day(STORM_DAY, step_minutes=360, satellites=2).receivers[:1]
    told = silence.find(receivers, [had], times, [span])
    again = silence.of_facts({silence.FACTS: silence.facts(told)}, receivers)
    expected = [bool((had <= now).any()) and bool(now - had[had <= now].max() > span) for now in times]
    assert told.over(0.0, 0.0, times).tolist() == again.over(0.0, 0.0, times).tolist() == expected
    for now, why in zip(times, again.told(0.0, 0.0, times), strict=True):
        assert not why or str(had[had <= now].max().astype("datetime64[m]")) in why
