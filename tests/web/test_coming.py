"""The page, alerts and a ground station's warning tell one arrival: on the stormy sample day, on fronts at random."""

import json
from collections.abc import Iterator, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from fastapi.testclient import TestClient
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from tests.builders import REGION, STORM_DAY, invented_day
from tests.simulated import day_results

from skylag.archive import Archive, open_archive
from skylag.cli import main
from skylag.jobs import alerts
from skylag.jobs.alerts import Rule
from skylag.jobs.under_way import of_day_before
from skylag.tables import Flag, Products
from skylag.web import payloads
from skylag.web.app import create_app

RULE = Rule("r", "arrival", within_min=180)
ROOT = Path(__file__).resolve().parents[2]


@pytest.fixture
def own(tmp_path: Path) -> Iterator[Archive]:
    with open_archive(tmp_path) as archive:
        yield archive


def until(products: Products, count: int) -> Products:
    """The day as a watch has it whose newest map is the one of this number."""
    layers = {name: getattr(products.fields, name)[:count] for name in type(products.fields).LAYERS}
    return replace(
        products, fields=replace(products.fields, times=products.fields.times[:count], **layers),
        site_states=products.site_states[:count], site_reasons=tuple(one[:count] for one in products.site_reasons),
    )  # fmt: skip


def agreed(client: TestClient, products: Products, version: int, count: int, stations: Sequence[str]) -> set[str]:
    """The sites that a front is on its way to at a map, after all three ways of telling it have been compared."""
    now = products.fields.times[count - 1]
    base, words = f"/api/days/{products.region.name}/{products.day}", {"time": payloads.utc(now), "version": version}
    shown = {one["site"]: one for one in client.get(f"{base}/coming", params=words).json()["coming"]}
    told = {str(one.facts["site"]): one for one in alerts.occasions([RULE], until(products, count))}
    assert set(shown) == set(told)
    for name, one in shown.items():
        assert told[name].facts["expected_utc"] == f"{one['expected_utc'][:16]}Z"
        assert told[name].facts["sigma_s"] == one["sigma_s"]
        assert f"give or take {one['give_or_take_min']} min" in told[name].sentence
        assert payloads.utc(told[name].end) == one["expected_utc"]
    for name in stations:
        warned = client.get(f"{base}/ground", params={**words, "site": name}).json()["next_front"]
        expected: dict[str, Any] | None = {k: v for k, v in shown.get(name, {}).items() if k != "site"} or None
        assert warned == expected
        if warned:
            assert f"in {warned['minutes']} minutes, give or take {warned['give_or_take_min']}" in warned["words"]
    return set(shown)


def test_they_agree_on_the_stormy_sample_day(own: Archive) -> None:
    products = day_results.day(day_results.STORM).products
    version = own.save(products)
    client = TestClient(create_app(own))
    stations = [site.name for site in products.region.sites if site.kind == "aerodrome"][:2]
    assert len(stations) == 2
    seen = [agreed(client, products, version, count, stations) for count in range(1, len(products.fields.times) + 1, 3)]
    assert set().union(*seen) >= {site.name for site in products.region.sites if site.kind == "aerodrome"}
    assert not seen[0] and not seen[-1], "no front at the day's beginning and end"


@st.composite
def fronts(draw: st.DrawFn) -> Flag:
    """A front that some while of the invented day's middle sees; of any speed and way, not always confirmed."""
    began = np.datetime64(f"{STORM_DAY}T11:00:00", "ns") + np.timedelta64(draw(st.integers(0, 7200)), "s")
    count = draw(st.integers(0, 8))
    speed, heading = draw(st.floats(0, 600) | st.just(float("nan"))), draw(st.floats(0, 360) | st.just(float("nan")))
    lat, lon = draw(st.floats(-44, -35)), draw(st.floats(141, 151))
    track = tuple((began + np.timedelta64(300 * k, "s"), lat + 0.1 * k, lon) for k in range(count))
    end = began + np.timedelta64(300 * max(count, 1) + draw(st.integers(0, 5400)), "s")
    sigma = draw(st.floats(0, 200) | st.just(float("nan")))
    return Flag(began, end, lat, lon, "front", 60.0, 3.0, speed, heading, "broken", "seen by all",
                draw(st.integers(0, 3)) > 0, track, sigma)  # fmt: skip


@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    st.lists(fronts(), min_size=1, max_size=3),
    st.lists(st.tuples(st.floats(-43, -36), st.floats(142, 150)), min_size=4, max_size=4),
    st.lists(st.integers(40, 64), min_size=3, max_size=3, unique=True),
)
def test_they_agree_on_any_fronts_and_sites(
    own: Archive, flags: list[Flag], at: list[tuple[float, float]], counts: list[int]
) -> None:
    sites = tuple(replace(site, lat=lat, lon=lon) for site, (lat, lon) in zip(REGION.sites, at, strict=True))
    products = replace(invented_day(STORM_DAY), flags=tuple(flags), region=replace(REGION, sites=sites))
    version = own.save(products)
    client = TestClient(create_app(own))
    for count in counts:
        agreed(client, products, version, count, [sites[1].name])


def over_midnight() -> tuple[Products, Products]:
    """The stormy day with a front that it sees until ten to midnight, and the day after, which sees none."""
    first, second = invented_day(STORM_DAY), invented_day(STORM_DAY + 1, storm=False)
    shift = np.timedelta64(15 * 60 + 50, "m")  # seen until 08:00 in the invention
    (front,) = (flag for flag in first.flags if flag.kind == "front")
    track = tuple((time + shift, lat, lon) for time, lat, lon in front.track if lat < -41.0)
    late = replace(front, start=track[0][0], end=front.end + shift, track=track)
    late = replace(late, track=(*track[:-1], (late.end, -41.5, 146.0)))
    return replace(first, flags=(late,)), replace(second, flags=())


def test_a_front_that_was_last_seen_before_midnight_is_told_after_it(
    own: Archive, monkeypatch: pytest.MonkeyPatch
) -> None:
    first, second = over_midnight()
    version = own.save(second)
    client, site = TestClient(create_app(own)), "Northport"
    midnight = second.day.astype("datetime64[ns]")

    def told(minutes: int) -> tuple[bool, bool, bool]:
        """By the page, by a ground station's warning and by an alert."""
        now = midnight + np.timedelta64(minutes, "m")
        words = {"time": payloads.utc(now), "version": version}
        base = f"/api/days/{REGION.name}/{second.day}"
        shown = client.get(f"{base}/coming", params=words).json()["coming"]
        warned = client.get(f"{base}/ground", params={**words, "site": site}).json()["next_front"]
        until_now = until(second, minutes // 15 + 1)
        before = of_day_before(own, REGION.name, second.day, until_now.fields.times[-1])
        found = alerts.occasions([replace(RULE, site=site)], until_now, None, before)
        return site in {one["site"] for one in shown}, warned is not None, bool(found)

    assert told(15) == (False, False, False), "the day before is not kept"
    own.save(first)
    assert told(0) == told(15) == told(45) == (True, True, True)
    assert told(60) == (False, False, False), "an hour after it was last seen"
    read: list[object] = []
    flags = own.flags
    monkeypatch.setattr(own, "flags", lambda *asked, **named: read.append(named) or flags(*asked, **named))
    assert told(120) == (False, False, False)
    assert not any(read), "later in the day the day before is not read"
    (late,) = of_day_before(own, REGION.name, second.day, midnight + np.timedelta64(10, "m"))
    assert late.track == first.flags[0].track
    assert of_day_before(own, REGION.name, second.day, midnight + np.timedelta64(55, "m")) == ()


def test_the_command_tells_it_too(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    first, second = over_midnight()
    with open_archive(tmp_path) as archive:
        for one in (first, second):
            archive.save(one)
    words = ["advise", "--archive", str(tmp_path), "--day", str(second.day), "--site", "Kelp Island"]
    assert main([*words, "--coming", f"{second.day}T00:10:00Z"]) == 0
    assert f"Next front after {second.day}T00:10:00Z: front of 95 mm/km" in capsys.readouterr().out
    assert main([*words, "--coming", f"{second.day}T01:10:00Z"]) == 0
    assert "none is on its way" in capsys.readouterr().out


def test_the_page_reckons_no_arrival_itself() -> None:
    """Its scripts show minutes and spread as the service sends them; no speed or doubt of a front is reckoned with."""
    script = (ROOT / "frontend" / "js" / "panels" / "present.js").read_text(encoding="utf-8")
    assert "api.coming(" in script and "one.minutes, one.giveOrTake" in script
    for path in (ROOT / "frontend" / "js").rglob("*.js"):
        assert "speedSigma /" not in path.read_text(encoding="utf-8"), path


def test_an_hour_that_is_no_instant_is_refused(client: TestClient) -> None:
    base = f"/api/days/{REGION.name}/{STORM_DAY}/coming"
    assert client.get(base, params={"time": "soon"}).status_code == 422
    assert client.get(base).status_code == 422
    content = json.loads(client.get(base, params={"time": "2031-05-11T05:00:00Z"}).text)
    assert content["simulated"] and "not for navigation" in content["caution"] and content["hours_ahead"] == 3.0
    assert content["coming"][0]["site"] == "Gannet Field"
