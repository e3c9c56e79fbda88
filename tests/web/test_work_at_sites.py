"""Routes about work at a site: every answer has its assumptions and caution, files are what they say."""

import pytest
from fastapi.testclient import TestClient
from tests.builders import REGION, STORM_DAY

BASE = f"/api/days/{REGION.name}/{STORM_DAY}"
SITE = {"site": "Gannet Field"}


def test_survey(client: TestClient) -> None:
    content = client.get(f"{BASE}/survey", params={**SITE, "hours": "07:00-17:00", "baseline_km": 12}).json()
    assert content["job"]["baseline_km"] == 12
    assert len(content["verdict"]) == len(content["times_utc"]) == len(content["horizontal_95"])
    assert {window["verdict"] for window in content["windows"]} <= {"work", "avoid", "unseen"}
    assert content["windows"][0]["start_utc"] == "2031-05-10T20:59:42Z"  # 07:00 in Hobart, at the map of 21:00 GPS time
    assert "not for navigation" in content["caution"]
    assert any("95.1 mm" in one for one in content["assumptions"])


def test_a_longer_baseline_over_http(client: TestClient) -> None:
    minutes = []
    for baseline in (2, 20, 60):
        content = client.get(f"{BASE}/survey", params={**SITE, "baseline_km": baseline}).json()
        minutes.append(content["verdict"].count("work"))
    assert minutes == sorted(minutes, reverse=True)


def test_approaches(client: TestClient) -> None:
    content = client.get(f"{BASE}/approaches").json()
    assert [site["name"] for site in content["sites"]] == ["Gannet Field", "Kelp Island"]
    assert [level["name"] for level in content["levels"]] == ["NPA", "APV-I", "LPV-200"]
    for site in content["sites"]:
        for name, row in site["available"].items():
            assert len(row) == 1440
            assert site["share"][name] == pytest.approx(sum(row) / 1440, abs=1e-6)
    named = {(one["site"], one["level"]) for one in content["outages"]}
    assert all(one["cause"] in ("ionosphere", "geometry", "unseen") and one["why"] for one in content["outages"])
    less = {(s["name"], n) for s in content["sites"] for n, share in s["share"].items() if share < 1}
    assert named == less
    assert "not for navigation" in content["caution"]


def test_ground_and_the_front_that_comes(client: TestClient) -> None:
    content = client.get(f"{BASE}/ground", params={**SITE, "time": "2031-05-11T04:30:00Z"}).json()
    assert set(content["minutes"]) == {"nominal", "announced", "threat", "unseen"}
    coming = content["next_front"]
    assert coming is None or coming["expected_utc"] > "2031-05-11T04:30:00Z"
    assert client.get(f"{BASE}/ground", params=SITE).json()["next_front"] is None


def test_afterwards(client: TestClient) -> None:
    content = client.get(f"{BASE}/survey/why", params={**SITE, "time": "2031-05-11T05:10:00Z"}).json()
    assert content["verdict"] in ("likely", "possible", "unlikely", "cannot be told")
    assert content["evidence"]
    late = client.get(f"{BASE}/survey/why", params={**SITE, "time": "2031-06-11T05:10:00Z"})
    assert late.status_code == 422


def test_without_coefficients(client: TestClient) -> None:
    answer = client.get(f"{BASE}/broadcast-model", params=SITE)
    assert answer.status_code == 404
    assert "GPSA" in answer.json()["error"]


@pytest.mark.parametrize("route", ["survey.ics", "approaches.ics"])
def test_calendars(client: TestClient, route: str) -> None:
    answer = client.get(f"{BASE}/{route}", params=SITE)
    assert answer.headers["content-type"].startswith("text/calendar")
    assert answer.text.startswith("BEGIN:VCALENDAR\r\n")
    assert answer.text.count("BEGIN:VEVENT") == answer.text.count("END:VEVENT") > 0
    assert "not for navigation" in answer.text.replace("\r\n ", "")


@pytest.mark.parametrize("site", [site.name for site in REGION.sites])
def test_sheets(client: TestClient, site: str) -> None:
    page = client.get(f"{BASE}/sheet", params={"site": site})
    assert page.headers["content-type"].startswith("text/html")
    text = page.text
    order = [text.index(word) for word in ("Invented data", "Survey (rtk", "<svg", "Windows for survey", "Evidence",
                                           "What is assumed", "Cautions", "not for navigation")]  # fmt: skip
    assert order == sorted(order)
    assert "<style" not in text  # the content policy forbids it
    assert ("Approaches available" in text or "Approaches cannot" in text) == (site in ("Gannet Field", "Kelp Island"))
    paper = client.get(f"{BASE}/sheet.pdf", params={"site": site})
    assert paper.content.startswith(b"%PDF-")
    assert paper.headers["content-disposition"].endswith('-sheet.pdf"')


def test_the_style_of_sheets(client: TestClient) -> None:
    assert "@media print" in client.get("/api/sheet.css").text


@pytest.mark.parametrize(
    ("route", "asked", "word"),
    [
        ("survey", {"method": "magic"}, "method"), ("survey", {"baseline_km": 0}, "baseline_km"),
        ("survey", {"hours": "9to5"}, "hours"), ("approaches", {"levels": "CAT-IX"}, "service level"),
        ("approaches", {"correction_m": 2.2}, "no step"), ("ground", {"sigma_mm_per_km": 99}, "sigma"),
        ("survey", {"site": "Atlantis"}, "no site"),
    ],
)  # fmt: skip
def test_wrong_questions(client: TestClient, route: str, asked: dict[str, object], word: str) -> None:
    answer = client.get(f"{BASE}/{route}", params={**SITE, **asked})
    assert answer.status_code in (404, 422)
    assert word in answer.json()["error"]
