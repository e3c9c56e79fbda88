"""What each route answers over a small invented archive."""

import base64
import csv
import io
import json
import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from fastapi.testclient import TestClient
from tests.builders import CALM_DAY, REGION, STORM_DAY, invented_day

from skylag import quantities, timescales
from skylag.archive import Archive, open_archive
from skylag.constants import L1_M_PER_TECU
from skylag.formats import netcdf
from skylag.formats.delimited import harmless
from skylag.impact.states import honest_state
from skylag.tables import BROKEN, HOLDS, STATE_NAMES, STRAINED, UNSEEN
from skylag.web import payloads
from skylag.web.app import create_app

DAY = f"/api/days/{REGION.name}/{STORM_DAY}"


def unpacked(thing: dict) -> np.ndarray:
    """An array as the page reads it."""
    data = np.frombuffer(base64.b64decode(thing["base64"]), dtype=np.dtype(thing["dtype"]).newbyteorder("<"))
    return data.reshape(thing["shape"])


def get(client: TestClient, address: str, **query: object) -> dict:
    answer = client.get(address, params=query)
    assert answer.status_code == 200, answer.text
    return answer.json()


def test_days(client: TestClient) -> None:
    listed = get(client, "/api/days")
    assert [one["day"] for one in listed["days"]] == ["2031-05-11", "2031-05-10"]
    assert all(one["simulated"] for one in listed["days"])
    assert listed["regions"] == [REGION.name]
    assert get(client, "/api/days", region="nowhere")["days"] == []
    assert len(get(client, "/api/days", since="2031-05-11")["days"]) == 1
    assert client.get("/api/days", params={"until": "soon"}).status_code == 422


def test_the_facts_of_a_day(client: TestClient, small_archive: Archive) -> None:
    facts = get(client, DAY)
    record = small_archive.day(REGION.name, STORM_DAY)
    assert facts["region"]["name"] == REGION.name
    assert len(facts["times_utc"]) == 96 and len(facts["receivers"]) == 10 and len(facts["sites"]) == 4
    assert facts["simulated"] is True
    assert facts["warnings"][0] == "Invented data: nothing here was measured."
    assert "not for navigation" in facts["caution"]
    assert (facts["grid"]["lats"][0], facts["grid"]["lons"][-1]) == (-43.0, 150.0)
    worst = max(one.highest["vtec"] for one in small_archive.days()) * L1_M_PER_TECU
    low, high = facts["scales"]["vertical_delay"]
    assert low == 0 and worst <= high <= 2 * worst
    other = get(client, f"/api/days/{REGION.name}/2031-05-10")
    assert facts["scales"] == other["scales"], "one scale per region and year"
    assert facts["receivers"][0]["name"] == record.receivers[0].name
    assert (facts["receivers"][0]["lat"], facts["receivers"][0]["lon"]) == (-37.6, 143.9)


def test_times_are_utc_and_say_so(client: TestClient) -> None:
    """GPS time was 18 s ahead of UTC at the last announced leap second (IERS Bulletin C 52)."""
    first = get(client, DAY)["times_utc"][0]
    assert first == "2031-05-10T23:59:42Z"
    assert get(client, "/healthz")["now_utc"] == "2031-05-12T00:00:00Z"


def test_maps_of_an_hour(client: TestClient, small_archive: Archive) -> None:
    answer = get(client, f"{DAY}/fields", **{"from": "2031-05-11T05:00:00Z", "to": "2031-05-11T06:00:00Z"})
    assert answer["times_utc"] == [f"2031-05-11T05:{minute}:42Z" for minute in (14, 29, 44, 59)]
    assert set(answer["layers"]) == set(payloads.USUAL_LAYERS)
    start = np.datetime64("2031-05-11T05:15", "ns")
    stored = small_archive.fields(REGION.name, STORM_DAY, start, start + np.timedelta64(1, "h"))
    delay = unpacked(answer["layers"]["vertical_delay"])
    np.testing.assert_allclose(delay, stored.vtec * L1_M_PER_TECU, rtol=1e-6)
    np.testing.assert_array_equal(unpacked(answer["layers"]["state"]), stored.state)
    assert answer["units"] == {"vertical_delay": "m", "vertical_delay_sigma": "m", "slope": "mm/km", "state": ""}


def test_all_layers_of_a_day(client: TestClient) -> None:
    answer = get(client, f"{DAY}/fields", layers=",".join(payloads.LAYERS))
    for name, thing in answer["layers"].items():
        assert unpacked(thing).shape == (96, 15, 17), name
        assert thing["dtype"] == quantities.BY_NAME[name].dtype, name


@pytest.mark.parametrize(
    "text", ["2031-05-11T05:14:42Z", "2031-05-11T05:14:42", "2031-05-11T15:14:42+10:00", "2031-05-11T05:14:42.000Z"]
)
def test_instants_of_several_spellings(client: TestClient, text: str) -> None:
    reading = get(client, f"{DAY}/reading", lat=-41, lon=147, time=text)
    assert reading["time_utc"] == "2031-05-11T05:14:42Z"


def test_a_plus_that_was_not_escaped(client: TestClient) -> None:
    answer = client.get(f"{DAY}/reading?lat=-41&lon=147&time=2031-05-11T15:14:42+10:00")
    assert answer.json()["time_utc"] == "2031-05-11T05:14:42Z"


def test_a_reading_in_the_storm(client: TestClient) -> None:
    reading = get(client, f"{DAY}/reading", lat=-41.1, lon=146.9, time="2031-05-11T05:14:42Z")
    assert reading["state"] == "broken"
    assert reading["cell"] == {"lat": -41.0, "lon": 147.0}
    assert reading["sentence"].startswith("Corrections are broken here: the delay changes by 27 ± 5 mm per km.")
    assert [flag["kind"] for flag in reading["flags"]] == ["front", "fault"]
    front = reading["flags"][0]
    assert front["now_lat"] == pytest.approx(-41.0) and front["distance_km"] == pytest.approx(76.2, abs=1.0)
    assert reading["simulated"] is True


def test_a_reading_in_calm(client: TestClient) -> None:
    reading = get(client, f"{DAY}/reading", lat=-41.1, lon=146.9, time="2031-05-11T20:00:00Z")
    assert reading["state"] == "holds" and reading["flags"] == []
    assert reading["sentence"].startswith("Corrections hold here: the vertical delay is ")


@pytest.mark.parametrize("lat, lon", [(-36.0, 150.0), (-43.0, 142.0), (10.0, 10.0), (-36.0, -210.0 + 360.0)])
def test_unseen_places_have_no_numbers(client: TestClient, lat: float, lon: float) -> None:
    """The margin of the grid, its corner, and a place on the other side of the Earth."""
    reading = get(client, f"{DAY}/reading", lat=lat, lon=lon, time="2031-05-11T12:00:00Z")
    assert reading["state"] == "unseen"
    assert reading["sentence"].startswith("Unseen here")
    numbers = ("vertical_delay", "vertical_delay_sigma", "slope", "slope_sigma", "slope_east", "slope_north")
    assert [reading[name] for name in numbers] == [None] * 6


def test_a_time_without_a_map_is_missing(client: TestClient) -> None:
    answer = client.get(f"{DAY}/reading", params={"lat": -41, "lon": 147, "time": "2031-05-13T00:00:00Z"})
    assert answer.status_code == 404
    assert answer.json()["details"]["nearest"] == "2031-05-11T23:44:42Z"


def test_rays_of_a_moment(client: TestClient) -> None:
    rays = get(client, f"{DAY}/rays", time="2031-05-11T05:10:00Z")
    assert rays["time_utc"] == "2031-05-11T05:14:42Z"
    assert len(rays["receiver"]) == len(rays["pierce_lat"]) == len(rays["elevation"]) == 80
    assert get(client, f"{DAY}/rays", time="2031-06-11T05:10:00Z")["time_utc"] is None


def test_a_day_at_a_place(client: TestClient) -> None:
    series = get(client, f"{DAY}/series", lat=-41, lon=147)
    assert series["inside"] and len(series["times_utc"]) == len(series["vertical_delay"]) == len(series["state"]) == 96
    assert {"holds", "broken"} <= set(series["state"])
    outside = get(client, f"{DAY}/series", lat=0, lon=0)
    assert not outside["inside"]
    assert set(outside["state"]) == {"unseen"} and set(outside["vertical_delay"]) == {None}


def test_flags_three_ways(client: TestClient) -> None:
    flags = get(client, f"{DAY}/flags")["flags"]
    assert [flag["kind"] for flag in flags] == ["front", "irregular", "fault"]
    assert flags[0]["track"][0] == ["2031-05-11T03:59:42Z", -43.5, 146.0] and len(flags[0]["track"]) == 17
    assert flags[1]["slope_mm_per_km"] is None

    answer = client.get(f"{DAY}/flags.csv")
    assert answer.headers["content-type"].startswith("text/csv")
    rows = list(csv.DictReader(io.StringIO(answer.text)))
    assert [row["kind"] for row in rows] == [flag["kind"] for flag in flags]
    assert rows[0]["start_utc"] == flags[0]["start_utc"] and rows[1]["slope_mm_per_km"] == ""

    answer = client.get(f"{DAY}/flags.geojson")
    assert answer.headers["content-type"] == "application/geo+json"
    collection = answer.json()
    assert collection["simulated"] is True
    assert [f["geometry"]["type"] for f in collection["features"]] == ["LineString", "Point", "Point"]
    assert collection["features"][1]["geometry"]["coordinates"] == [148.0, -38.0], "longitude first"
    assert 'filename="Strait_of_trials-2031-05-11-flags.geojson"' in answer.headers["content-disposition"]


def test_site_states(client: TestClient) -> None:
    states = get(client, f"{DAY}/site-states")
    assert states["states"] == list(STATE_NAMES)
    assert [site["name"] for site in states["sites"]] == [site.name for site in REGION.sites]
    assert [len(row) for row in states["codes"]] == [96] * 4
    for codes, reasons in zip(states["codes"], states["reasons"], strict=True):
        assert all((code == 1) == (reason == "") for code, reason in zip(codes, reasons, strict=True))


def test_biases(client: TestClient) -> None:
    biases = get(client, f"{DAY}/biases")
    assert len(biases["biases"]) == 18 and biases["datum"]
    assert {row["kind"] for row in biases["biases"]} == {"satellite", "receiver"}


def test_vocabulary(client: TestClient) -> None:
    words = get(client, "/api/quantities")
    assert {q["name"] for q in words["quantities"]} >= set(words["layers"])
    assert words["states"] == ["unseen", "holds", "strained", "broken"]


def test_coast(client: TestClient) -> None:
    lines = get(client, "/api/coast", south=-43.7, north=-36, west=142, east=150)["lines"]
    assert len(lines) > 20
    assert all(len(line["lat"]) == len(line["lon"]) >= 2 for line in lines)


def test_plotly_comes_from_here(client: TestClient) -> None:
    answer = client.get("/vendor/plotly.min.js")
    assert answer.status_code == 200 and answer.headers["content-encoding"] == "gzip"
    assert "plotly.js v" in answer.text[:200] and len(answer.text) > 3_000_000
    assert "max-age=604800" in answer.headers["cache-control"]
    again = client.get("/vendor/plotly.min.js", headers={"If-None-Match": answer.headers["etag"]})
    assert again.status_code == 304 and not again.content
    plain = client.get("/vendor/plotly.min.js", headers={"Accept-Encoding": "identity"})
    assert "content-encoding" not in plain.headers and plain.text == answer.text


def test_the_page_is_served(client: TestClient) -> None:
    answer = client.get("/")
    assert answer.status_code == 200 and "Trial" in answer.text
    assert answer.headers["cache-control"] == "no-cache"
    assert client.get("/../pyproject.toml").status_code == 404
    assert client.get("/%2e%2e/pyproject.toml").status_code == 404


def test_big_answers_are_compressed(client: TestClient) -> None:
    answer = client.get(f"{DAY}/fields")
    assert answer.headers["content-encoding"] == "gzip"


def test_the_same_answers_on_both_databases(client: TestClient, archive: Archive, small_archive: Archive) -> None:
    """SQLite and PostgreSQL give the same text; only when a day was saved differs."""
    archive.save(invented_day(CALM_DAY, storm=False, seed=10))
    archive.save(invented_day(STORM_DAY, storm=True, seed=11))
    other = TestClient(create_app(archive))
    here = "lat=-41&lon=147&time=2031-05-11T05:14:42Z"
    for tail in ("", "/fields", "/flags", "/site-states", "/biases", f"/reading?{here}", f"/series?{here}",
                 f"/rays?{here}", "/flags.csv", "/flags.geojson"):  # fmt: skip
        texts = [re.sub(r'"saved_at_utc":"[^"]*"', "", one.get(DAY + tail).text) for one in (client, other)]
        assert texts[0] == texts[1], tail


# ---------------------------------------------------------------------------------------------- encoding


def test_no_value_is_never_said_to_hold(small_archive: Archive) -> None:
    """A cell without a value or without a line of sight; warnings that reach over it stay."""
    fields = small_archive.fields(REGION.name, STORM_DAY)
    no_value = {"vtec": np.full_like(fields.vtec, np.nan)}
    no_sight = {"vtec": np.ones_like(fields.vtec), "support": np.zeros_like(fields.support)}
    for lack in (no_value, no_sight):
        for stored, given in ((HOLDS, UNSEEN), (UNSEEN, UNSEEN), (STRAINED, STRAINED), (BROKEN, BROKEN)):
            told = honest_state(replace(fields, state=np.full_like(fields.state, stored), **lack))
            assert (told == given).all(), (stored, given)
    np.testing.assert_array_equal(honest_state(fields), fields.state)


@pytest.mark.parametrize(
    "value, top",
    [(0.31, 0.5), (5.0, 5.0), (5.1, 10.0), (0.0, 1.0), (np.nan, 1.0), (999.0, 1000.0), (2.0, 2.0), (1e-3, 1e-3)],
)
def test_scale_ends_are_round(value: float, top: float) -> None:
    assert payloads._round_up(value) == pytest.approx(top)


def test_what_json_cannot_say_is_a_defect() -> None:
    with pytest.raises(ValueError, match="JSON"):
        payloads.reply({"delay": float("nan")})


def test_a_cell_that_looks_like_a_formula() -> None:
    assert harmless("=1+1") == "'=1+1"
    assert harmless("-40 TECU") == "'-40 TECU"
    assert harmless(-40.0) == -40.0


def test_utc_text_keeps_milliseconds_only_where_needed() -> None:
    whole = np.array(["2024-05-11T00:00:18"], dtype="datetime64[ns]")
    assert payloads.utc_texts(whole) == ["2024-05-11T00:00:00Z"]
    assert payloads.utc_texts(whole + np.timedelta64(500, "ms")) == ["2024-05-11T00:00:00.500Z"]
    assert payloads.utc(np.datetime64("NaT", "ns")) is None
    assert timescales.utc_to_gps(np.datetime64("2024-05-11T00:00:00", "ns")) == whole[0]


def test_answers_are_json_of_the_standard(client: TestClient) -> None:
    """No bare NaN: a browser would refuse the whole answer."""
    for address in (DAY, f"{DAY}/flags", f"{DAY}/series?lat=-43&lon=142", f"{DAY}/biases"):
        json.loads(client.get(address).text, parse_constant=lambda word: pytest.fail(f"{word} in an answer"))


def test_a_day_that_goes_on_is_never_shown_as_final(tmp_path: Path, page_folder: Path) -> None:
    """In the list, among the notices of the day, on the sheet and in the file of maps; and no more once it is whole."""
    said = "This day goes on"
    address = f"/api/days/{REGION.name}/{STORM_DAY}"
    with open_archive(tmp_path) as archive, TestClient(create_app(archive, frontend=page_folder)) as client:
        for provisional in (True, False):
            archive.save(invented_day(STORM_DAY, step_minutes=60, satellites=6), provisional=provisional)
            (listed,) = client.get("/api/days").json()["days"]
            day = client.get(address).json()
            assert listed["provisional"] is day["provisional"] is provisional
            assert any(notice.startswith(said) for notice in day["warnings"][:2]) is provisional, "the page shows two"
            sheet = client.get(f"{address}/sheet", params={"site": "Southmere quarry"})
            maps = client.get(f"{address}/maps.inx")
            assert sheet.status_code == maps.status_code == 200
            assert (said in sheet.text) is provisional and (said in maps.text) is provisional
            for tail in ("lines.geojson", "arrivals", "events", "events.geojson", "flags.geojson"):
                told = get(client, f"{address}/{tail}", **({"time": "2031-05-11T05:00:00Z"} if "lines" in tail else {}))
                assert told["provisional"] is provisional and told["simulated"] is True, tail
                assert any(notice.startswith(said) for notice in told["notices"]) is provisional, tail
                assert "not for navigation" in told["caution"], tail
            (tmp_path / "field.nc").write_bytes(client.get(f"{address}/field.nc").content)
            comment = netcdf.read_with_facts(tmp_path / "field.nc")[1]["comment"]
            assert (said in comment) is provisional and "Invented" in comment and "not for navigation" in comment
