"""Uses and events over HTTP."""

import csv
import io
import json
from typing import Any

from fastapi.testclient import TestClient
from tests.builders import REGION, STORM_DAY

DAY = f"/api/days/{REGION.name}/{STORM_DAY}"


def get(client: TestClient, address: str) -> Any:
    answer = client.get(address)
    assert answer.status_code == 200, answer.text
    return json.loads(answer.text)


def test_the_published_uses_where_a_region_names_none(client: TestClient) -> None:
    rows = get(client, f"{DAY}/uses")["uses"]
    assert [row["kind"] for row in rows] == ["differential", "ground", "satellite", "single"]
    assert (rows[1]["strained_from"], rows[1]["broken_from"], rows[1]["unit"]) == (4.0, 25.5, "mm/km")


def test_sites_for_a_use(client: TestClient) -> None:
    told = get(client, f"{DAY}/site-states-for?use=ground")
    assert told["use"] == "ground-based augmentation"
    assert len(told["codes"]) == len(told["reasons"]) == len(told["evidence"]) == len(REGION.sites)
    for codes, reasons in zip(told["codes"], told["reasons"], strict=True):
        assert all((code == 1) == (reason == "") for code, reason in zip(codes, reasons, strict=True))
    answer = client.get(f"{DAY}/site-states-for?use=sextant")
    assert answer.status_code == 422 and "choose from" in answer.json()["error"]


def test_events_three_ways(client: TestClient) -> None:
    told = get(client, f"{DAY}/events")["events"]
    assert told and {event["state"] for event in told} <= {"strained", "broken"}
    rows = list(csv.DictReader(io.StringIO(client.get(f"{DAY}/events.csv").text)))
    assert [row["start_utc"] for row in rows] == [event["start_utc"] for event in told]
    shapes = get(client, f"{DAY}/events.geojson")
    assert [shape["properties"]["cause"] for shape in shapes["features"]] == [event["cause"] for event in told]
    for_use = get(client, f"{DAY}/events?use=single")["events"]
    assert all(event["use"] == "single frequency" for event in for_use)


def test_foretold_arrivals_and_what_came_of_them(client: TestClient) -> None:
    told = get(client, f"{DAY}/arrivals")
    assert (told["told"], told["checked"], told["came_true"], told["simulated"]) == (2, 1, 1, True)
    true, open_one = told["arrivals"]
    assert (true["flag"], true["site"], true["sigma_s"], true["came_true"]) == (0, "Gannet Field", 240, True)
    # GPS time is 18 s ahead of UTC.
    assert (true["made_utc"], true["expected_utc"], true["seen_utc"]) == tuple(
        f"{STORM_DAY}T{clock}Z" for clock in ("04:59:42", "05:44:42", "05:46:42")
    )
    assert open_one["came_true"] is None and open_one["seen_utc"] is None
    rows = list(csv.DictReader(io.StringIO(client.get(f"{DAY}/arrivals.csv?site=Northport").text)))
    assert [(row["site"], row["seen_utc"], row["came_true"]) for row in rows] == [("Northport", "", "")]
    assert get(client, f"/api/days/{REGION.name}/2031-05-10/arrivals")["arrivals"] == []
