"""Whatever is asked, the answer is a good one or a failure in words: never a defect."""

import json
import re

import numpy as np
import pytest
from fastapi.routing import APIRoute
from fastapi.testclient import TestClient
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from tests.builders import REGION, STORM_DAY
from tests.web.test_errors import routes

from skylag.tables import STATE_NAMES
from skylag.web import asking, payloads

# Values that are nearly right, or that some layer below might choke on.
ODD = st.sampled_from(
    ["2031-05-11T05:00:00Z", "2031-05-11T05:00:00+25:00", "2031-05-11", "20310511T05", "1980-01-01T00:00:00+14:00",
     "2200-12-31T23:59:59-14:00", "2031-W19-7", "-0", "1e308", "-1e-320", "inf", "nan", "9" * 30, "90", "-180", "360",
     "0x1", "1_000", "٣", "1", "0", "-1", "state", "state,,vtec", "vertical_delay", REGION.name, "..", "%00", "\x00",
     "", " ", "9223372036854775808", "-9223372036854775809", "2147483648"]
)  # fmt: skip
VALUES = ODD | st.text(max_size=12) | st.floats().map(str) | st.integers().map(str)
GOOD = {"region": REGION.name, "day": str(STORM_DAY), "lat": "-41", "lon": "147", "time": "2031-05-11T05:00:00Z",
        "from": "2031-05-11T05:00:00Z", "to": "2031-05-11T06:00:00Z", "layers": "state", "version": "1", "south": "-43",
        "north": "-36", "west": "142", "east": "150", "since": "2031-05-01", "until": "2031-05-31", "state": "done",
        "number": "1",
        "use": "ground", "site": "Gannet Field", "method": "rtk", "baseline_km": "10", "horizontal_mm": "30",
        "vertical_mm": "50", "hours": "07:00-16:00", "levels": "LPV-200", "correction_m": "3", "sigma_mm_per_km": "4",
        "expected_ap": "", "most": "0.1", "step_m": "0.5",
        "places": "-41.1,147.1;-41.3,147.4", "shape": "route", "references": "GULL;-41,147", "session_min": "60",
        "least_min": "15", "mask_deg": "15", "least_satellites": "5", "most_dilution": "6", "fixing_chance": "0.1",
        "systems": "G", "lowest_deg": "15", "noise_m": "0.36", "usual_grid_m": "3", "distance_km": "6",
        "speed_m_s": "70", "smoothing_s": "100", "newest": "30",
        "revision": "0", "reach_km": "100", "minutes": "30"}  # fmt: skip
MANY = settings(max_examples=100, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])


def names_of(route: APIRoute) -> list[str]:
    """Everything a route can be asked with, by itself and by what it depends on."""
    own = [route.dependant, *route.dependant.dependencies]
    return [field.alias for one in own for field in (*one.path_params, *one.query_params)]


QUESTIONS = {route.path: names_of(route) for route in routes() if "GET" in route.methods and names_of(route)}


# Answers about single lines of sight, receivers and queues tell no state of a place, but may use the same words.
_NO_STATES = ("/api/network", "/api/work", "/api/coast", "/rays", "/witnesses", "/biases")


def test_whoever_is_told_a_state_or_a_verdict_is_told_the_caution(client: TestClient) -> None:
    telling = {"state", "states", "verdict", "state_shares", "strained_from", "chance_strained"}
    asked = set()
    for address in sorted({*QUESTIONS, "/api/quantities"}):
        path = address
        for name in ("region", "day", "number"):
            path = path.replace("{" + name + "}", GOOD[name])
        left = {name for name in QUESTIONS.get(address, ()) if "{" + name + "}" in address} | {"places", "shape"}
        names = [name for name in QUESTIONS.get(address, ()) if name not in left]
        answer = client.get(path, params={name: GOOD[name] for name in names if GOOD[name]})
        json_told = answer.status_code == 200 and "json" in answer.headers.get("content-type", "")
        if any(part in address for part in _NO_STATES) or not json_told:
            continue
        if telling & set(re.findall(r"\w+", answer.text)):
            assert "not for navigation" in answer.json()["caution"], address
            asked.add(address.removeprefix("/api/").removeprefix("days/{region}/{day}"))
    assert asked >= {"quantities", "days", "", "/fields", "/reading", "/series", "/flags", "/flags.geojson", "/events",
                     "/site-states", "/site-states-for", "/uses", "/survey", "/survey/why", "/ground"}  # fmt: skip


@pytest.mark.parametrize("address", QUESTIONS)
@settings(MANY, max_examples=25)
@given(data=st.data())
def test_no_question_is_a_defect(client: TestClient, address: str, data: st.DataObject) -> None:
    """Good questions with one or two things wrong."""

    def quoted(text: str) -> str:
        return "".join(f"%{byte:02X}" for byte in text.encode("utf-8", "surrogatepass"))

    names = QUESTIONS[address]
    odd = data.draw(st.dictionaries(st.sampled_from(names), VALUES, min_size=1, max_size=2))
    asked = {name: odd.get(name, GOOD[name]) for name in names}
    if {"site", "places"} <= set(names):  # a job is at one or the other
        del asked[data.draw(st.sampled_from(["site", "places"]))]
    there = address
    for name in ("region", "day"):
        there = there.replace(f"{{{name}}}", quoted(asked.get(name, "")))
    rest = "&".join(f"{name}={quoted(value)}" for name, value in asked.items() if f"{{{name}}}" not in address)
    answer = client.get(f"{there}?{rest}")
    assert answer.status_code < 500, (there, rest, answer.text)
    if answer.status_code >= 400:
        content = answer.json()
        assert set(content) == {"ok", "error", "kind", "details", "status"} and content["ok"] is False


def test_questions_are_found() -> None:
    assert len(QUESTIONS) >= 12 and QUESTIONS["/api/days/{region}/{day}/flags"] == ["region", "day", "version"]
    assert {name for names in QUESTIONS.values() for name in names} == set(GOOD)


@MANY
@given(lat=st.floats(-90, 90), lon=st.floats(-180, 360), minute=st.integers(0, 24 * 60 - 1))
def test_any_place_and_time_has_a_whole_reading(client: TestClient, lat: float, lon: float, minute: int) -> None:
    """An unseen place has no numbers and says so; a seen one has them all."""
    time = f"2031-05-11T{minute // 60:02}:{minute % 60:02}:00Z"
    answer = client.get(f"/api/days/{REGION.name}/{STORM_DAY}/reading", params={"lat": lat, "lon": lon, "time": time})
    assert answer.status_code == 200, answer.text
    reading = json.loads(answer.text)
    numbers = [reading[name] for name in ("vertical_delay", "vertical_delay_sigma", "slope", "slope_sigma")]
    assert reading["state"] in STATE_NAMES
    if reading["state"] == "unseen":
        assert numbers == [None] * 4 and reading["sentence"].startswith("Unseen here")
    else:
        assert None not in numbers and "nseen" not in reading["sentence"]


@given(st.integers(-(2**31), 7 * 2**30).map(lambda seconds: np.datetime64(seconds, "s").astype("datetime64[ns]")))
def test_instants_survive_the_way_out_and_in(gps: np.datetime64) -> None:
    """GPS to UTC text and back.  Before 1980 there is no GPS time, and nothing is asked for."""
    text = payloads.utc(gps)
    assert text is not None
    if text >= "1980-01-06T00:00:00Z" and text < "2200-12-31":
        back = asking.instant(text, "time")
        assert abs(back - gps) <= np.timedelta64(1, "s"), "the leap second itself reads as the second after it"
        assert payloads.utc(back) == text
