"""The day ahead over HTTP: a place, a use, entered activity, the record, and what is refused."""

import json
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from fastapi.testclient import TestClient
from tests.builders import REGION, STORM_DAY

from skylag.ionosphere.outlook import LEAST_DAYS
from skylag.jobs import hindcast
from skylag.tables import Indices
from skylag.web.outlook import of_place

SITE = REGION.sites[1]
ADDRESS = f"/api/outlook/{REGION.name}"


def get(client: TestClient, **asked: object) -> Any:
    answer = client.get(ADDRESS, params={"lat": SITE.lat, "lon": SITE.lon, **asked})
    assert answer.status_code == 200, answer.text
    return json.loads(answer.text)


def test_a_site_hour_by_hour(client: TestClient) -> None:
    told = get(client, use="ground")
    assert told["known_until"] == str(STORM_DAY) and told["name"] == SITE.name
    assert len(told["hours_utc"]) == len(told["vertical_delay"]) == len(told["chance_strained"]) == 48
    assert told["hours_utc"][0] == "2031-05-11T23:59:42Z"  # midnight of GPS time
    for hour in range(48):
        ends = [told["ranges"][share][end][hour] for share, end in (
            ("95", "low"), ("80", "low"), ("50", "low"), ("50", "high"), ("80", "high"), ("95", "high"))]  # fmt: skip
        assert ends == sorted(ends)
    assert told["use"] == "ground-based augmentation"
    assert told["simulated"] is True and "not for navigation" in told["caution"]


def test_two_days_do_not_make_a_window(client: TestClient) -> None:
    told = get(client)
    assert {span["kind"] for span in told["windows"]} == {"not known"}
    assert told["seen_days"] <= 2 and any("first guesses" in sentence for sentence in told["basis"])
    assert any("not covered" in sentence for sentence in told["advice"])
    assert set(told["chance_strained"]) == set(told["chance_broken"]) == {None}, "two days make no chance either"
    assert {span[name] for span in told["windows"] for name in ("chance_strained", "chance_broken")} == {None}


@pytest.mark.parametrize(("days", "known"), [(LEAST_DAYS - 1, False), (LEAST_DAYS, True)])
def test_chances_are_told_from_seven_seen_days_on(client: TestClient, days: int, known: bool) -> None:
    archive = client.app.state.archive  # type: ignore[attr-defined]
    kept = hindcast.newest(archive, REGION.name, keep=False)
    kept = replace(kept, outlook=replace(kept.outlook, seen_days=np.full_like(kept.outlook.seen_days, days)))
    told = of_place(kept, REGION, SITE.lat, SITE.lon, "", 0.1, True)
    hours = list(zip(told["chance_broken"], told["chance_strained"], strict=True))
    assert len(hours) == 48
    for broken, strained in hours:
        assert (0 <= broken <= strained <= 1) if known else broken is strained is None
    assert all((span["chance_strained"] is not None) is known for span in told["windows"])


def test_entered_activity_is_used_and_said(client: TestClient) -> None:
    told = get(client, expected_ap="120,20")
    assert told["storm_phase"][0] == "onset" and told["made_utc"] is None
    assert any("storm or its aftermath told" in sentence for sentence in told["basis"])
    assert get(client)["storm_phase"][0] == "untold"


def test_the_record_of_nothing_is_empty(client: TestClient) -> None:
    told = client.get(f"{ADDRESS}/record").json()
    assert told["outlooks"] == 0 and told["leads"] == {}


@pytest.mark.parametrize(
    ("asked", "status", "said"),
    [
        ({"expected_ap": "12,much"}, 422, "write two numbers"),
        ({"expected_ap": "12,900"}, 422, "from 0 to 400"),
        ({"expected_ap": "12"}, 422, "for each of the two days"),
        ({"most": "0.9"}, 422, "between 0 and 0.5"),
        ({"use": "sextant"}, 422, "choose from"),
        ({"lat": 10.0}, 422, "outside the map"),
    ],
)
def test_refusals(client: TestClient, asked: dict[str, object], status: int, said: str) -> None:
    answer = client.get(ADDRESS, params={"lat": SITE.lat, "lon": SITE.lon, **asked})
    assert answer.status_code == status and said in answer.json()["error"]


def test_the_list_of_days_tells_their_activity(client: TestClient) -> None:
    """What the year view filters by: null where no indices of the day were imported, and within where one lacks."""
    archive = client.app.state.archive  # type: ignore[attr-defined]
    ap = np.array([[2.0, 3, 4, 5, 6, 7, 80, 9]])
    kp = np.array([[0.667, 1, 1.333, 1.667, 1.667, 2, 6, 2.333]])
    day = np.array([STORM_DAY])
    table = Indices(day, kp, ap, np.array([15.0]), np.array([np.nan]))
    archive.activity.keep_measured(table, "", np.datetime64(1, "s"))
    listed = {one["day"]: one["activity"] for one in client.get("/api/days").json()["days"]}
    assert listed[str(STORM_DAY)] == {"kp_highest": 6.0, "ap_daily": 15.0, "f107": None}
    assert listed[str(STORM_DAY - 1)] is None
    assert client.get("/api/days", params={"since": str(STORM_DAY)}).json()["days"][0]["activity"]["kp_highest"] == 6.0
