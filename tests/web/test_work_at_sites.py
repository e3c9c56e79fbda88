"""Routes about work at a site: every answer has its assumptions and caution, files are what they say."""

import re

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
    assert set(content["minutes"]) == {"within", "nominal", "announced", "threat", "warned", "unseen"}
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
    assert len(re.findall(rb"/Type /Page\b", paper.content)) == 1
    assert paper.headers["content-disposition"].endswith('-sheet.pdf"')


def test_the_style_of_sheets(client: TestClient) -> None:
    assert "@media print" in client.get("/api/sheet.css").text


AREA = "-40.5,146;-40.5,147.5;-41.6,147.5;-41.6,146"


def test_routes_and_areas(client: TestClient) -> None:
    """The more of the map a job touches, the fewer epochs it can work; each touched cell is told."""
    told = {}
    for shape in ("points", "route", "area"):
        content = client.get(f"{BASE}/survey", params={"places": AREA, "shape": shape, "method": "dgnss",
                                                       "horizontal_mm": 150, "vertical_mm": 250}).json()  # fmt: skip
        told[shape] = (len(content["job"]["places"]), content["verdict"].count("work"))
        assert content["job"]["shape"] == shape
        assert content["job"]["name"].endswith({"points": "and 3 more"}.get(shape, "from -40.5, 146"))
    cells, good = zip(*told.values(), strict=True)
    assert cells == (4, 9, 12)  # corners; three sides of a ring; rows 40.5 to 41.5, columns 146 to 147.5
    assert list(good) == sorted(good, reverse=True)
    assert good[2] > 0
    one = client.get(f"{BASE}/survey", params={"places": "-41,147"}).json()
    assert one["job"]["name"] == "-41, 147"
    assert any("cells of the map" in text for text in content["assumptions"])
    assert not any("cells of the map" in text for text in one["assumptions"])


@pytest.mark.parametrize("route", ["survey", "survey.ics", "survey/why", "sheet", "sheet.pdf"])
@pytest.mark.parametrize("site", ["Gannet Field", "Atlantis", "x" * 5000])
def test_a_site_gives_no_name_to_other_places(client: TestClient, route: str, site: str) -> None:
    asked = {"site": site, "places": "-38,143", "time": f"{STORM_DAY}T05:30:00Z"}
    answer = client.get(f"{BASE}/{route}", params=asked)
    assert answer.status_code == 422
    assert "a site and places are both named" in answer.json()["error"]
    assert answer.json()["details"]["name"] == "site"


def test_the_sheet_of_places_is_named_after_them(client: TestClient) -> None:
    text = client.get(f"{BASE}/sheet", params={"places": "-38,143"}).text
    assert f"<title>-38, 143, {STORM_DAY}" in text
    assert "Gannet" not in text


def test_reference_stations_in_use(client: TestClient) -> None:
    """Named stations set the baseline; for a network they are what is interpolated between."""
    near = client.get(f"{BASE}/survey", params={**SITE, "references": "GULL"}).json()
    assert near["job"]["baseline_km"] == pytest.approx(59.7, abs=0.5)  # 41.1 S 147.1 E to 41.2 S 146.4 E
    both = client.get(f"{BASE}/survey", params={**SITE, "references": "gull; -41.15,147.1"}).json()
    assert both["job"]["baseline_km"] == pytest.approx(5.6, abs=0.1)
    network = {**SITE, "method": "network"}
    some = client.get(f"{BASE}/survey", params={**network, "references": "GULL;FERN;HULL;IRON"}).json()
    every = client.get(f"{BASE}/survey", params=network).json()
    assert (len(some["job"]["references"]), len(every["job"]["references"])) == (4, 10)
    assert some["differential_95"] != every["differential_95"]


@pytest.mark.parametrize("method", ["static", "rtk", "network", "dgnss"])
def test_every_method(client: TestClient, method: str) -> None:
    content = client.get(f"{BASE}/survey", params={**SITE, "method": method}).json()
    assert content["job"]["method"] == method
    assert any(known is not None for known in content["horizontal_95"])
    assert all(known is None for known in content["fixing"]) == (method == "dgnss")
    sheet = client.get(f"{BASE}/sheet", params={**SITE, "method": method}).text
    assert f"Survey ({method}, " in sheet


def test_what_the_service_is_assumed_to_send(client: TestClient) -> None:
    """A looser bound of clock and orbit makes wider levels, and each figure is told with the answer."""
    one = client.get(f"{BASE}/approaches", params=SITE).json()
    two = client.get(f"{BASE}/approaches", params={**SITE, "correction_m": 15, "noise_m": 0.5, "lowest_deg": 10}).json()
    for text in ("bounded by 15 m", "divergence 0.5 m", "above 10 degrees"):
        assert any(text in sentence for sentence in two["assumptions"])
        assert not any(text in sentence for sentence in one["assumptions"])
    for before, after in zip(one["sites"][0]["vertical_m"], two["sites"][0]["vertical_m"], strict=True):
        assert after is None or after > before
    sheet = client.get(f"{BASE}/sheet", params={**SITE, "correction_m": 15, "levels": "APV-II"}).text
    assert "bounded by 15 m" in sheet
    assert "APV-II" in sheet
    assert "LPV-200" not in sheet


@pytest.mark.parametrize(
    ("route", "asked", "word"),
    [
        ("survey", {"method": "magic"}, "method"), ("survey", {"baseline_km": 0}, "baseline_km"),
        ("survey", {"hours": "9to5"}, "hours"), ("approaches", {"levels": "CAT-IX"}, "service level"),
        ("approaches", {"correction_m": 2.2}, "no step"), ("ground", {"sigma_mm_per_km": 99}, "sigma"),
        ("survey", {"site": "Atlantis"}, "no site"), ("survey", {"site": ""}, "no place is named"),
        ("survey", {"site": "", "places": "-41;147"}, "is no place"),
        ("survey", {"site": "", "places": "-41,147", "shape": "area"}, "needs 3"),
        ("survey", {"site": "", "places": ";"}, "needs 1"),
        ("survey", {"site": "", "places": "-41,147;" * 401}, "at most 400"),
        ("survey", {"site": "", "places": "-41,147;" * 101, "shape": "route"}, "at most 100"),
        ("survey", {"references": "GULL;" * 401}, "at most 400"),
        ("survey", {"shape": "star"}, "not known"), ("survey", {"references": "NONE"}, "no receiver"),
        ("survey", {"references": "-20,147"}, "baseline_km"), ("survey", {"fixing_chance": "nan"}, "fixing_chance"),
        ("survey", {"vertical_mm": "nan"}, "vertical_mm"),
        ("survey", {"method": "network", "references": "GULL"}, "three"),
        ("approaches", {"systems": "X"}, "systems"), ("approaches", {"noise_m": 99}, "noise_m"),
        ("ground", {"speed_m_s": 0}, "speed_m_s"), ("sheet", {"correction_m": 2.2}, "no step"),
        ("sheet.pdf", {"site": "", "places": "x"}, "is no place"),
    ],
)  # fmt: skip
def test_wrong_questions(client: TestClient, route: str, asked: dict[str, object], word: str) -> None:
    answer = client.get(f"{BASE}/{route}", params={**SITE, **asked})
    assert answer.status_code in (404, 422)
    assert word in answer.json()["error"]
