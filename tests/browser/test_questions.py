"""The page's questions in a real Chromium: Past, Now, Ahead and Network, comparing, playing, taking away, access.

Over the two invented days of `tests.builders`; the fixture of each visit fails on any complaint of the browser.
"""

import base64
import csv
import io
import json
import statistics
import urllib.request
from collections.abc import Callable
from importlib import resources
from pathlib import Path
from typing import Any

import numpy as np
import pytest

pytestmark = pytest.mark.browser
Open = Callable[..., Any]
STORM = "?day=2031-05-11"
DAY = "/api/days/Strait%20of%20trials/2031-05-11"


def _service(server: str, path: str) -> Any:
    with urllib.request.urlopen(f"{server}{path}") as answer:
        return json.load(answer)


def test_the_days_at_a_glance(visit: Open) -> None:
    """Both days stand in the strip with their worst state; filter, keys and click open days; the table agrees."""
    v = visit(plotly=False, accept_downloads=True).go(f"{STORM}&time=05:30")
    assert v.page.locator("#year-strip .day-mark").count() == 2
    told = [str(v.page.locator("#year-strip title").nth(n).text_content()) for n in (0, 1)]
    assert told[0].startswith("Sat, 10 May 2031: holds") and told[1].startswith("Sun, 11 May 2031: broken")
    v.page.focus("#year-strip")
    v.page.keyboard.press("ArrowLeft")
    v.page.wait_for_function("() => document.getElementById('chart-time').textContent.startsWith('10 May 2031')")
    v.page.select_option("#year-worst", "broken")
    v.page.wait_for_function("() => document.querySelectorAll('#year-strip .day-mark').length < 2")
    assert v.page.locator("#year-strip .day-mark").count() == 1
    assert "worst=broken" in v.page.evaluate("location.search")
    v.page.click(".year .table-behind summary")
    v.page.click("#year-table tbody button")
    v.page.wait_for_function("() => document.getElementById('chart-time').textContent.startsWith('11 May 2031')")
    slope = _service(v.server, "/api/days?since=2031-05-11")["days"][0]["highest"]["slope"]
    assert f"{slope:.1f} mm/km" in v.text("#year-table tbody tr")
    with v.page.expect_download() as download:
        v.page.click("#year-csv")
    (row,) = csv.DictReader(io.StringIO(Path(download.value.path()).read_text()))
    assert row["day"] == "2031-05-11" and row["worst_state"] == "broken" and row["kp_highest"] == ""
    assert float(row["slope_mm_per_km"]) == pytest.approx(slope, rel=1e-4)
    assert v.page.is_disabled("#year-field") and "No indices of geomagnetic activity" in v.text("#year-note")
    v.page.select_option("#year-span", "dec-feb")
    assert "No stored day is like that" in v.text("#year-note")


def test_two_days_side_by_side_and_their_difference(visit: Open) -> None:
    """The other map is the other day's; the difference is this day's number less the other's, cell by cell."""
    v = visit(plotly=False, accept_downloads=True).go(f"{STORM}&time=06:00&versus=2031-05-10")
    v.page.wait_for_selector(".map-other[data-drawn=fields]")
    assert "Right: Sat, 10 May 2031" in v.text("#compared")
    v.page.click("#versus-how label:has(input[value=difference])")
    v.page.wait_for_selector("#other-box", state="hidden")
    v.page.click("#map-details summary")
    shown = v.text("#map-table tbody tr:last-child").replace("\u2212", "-").split()
    span = "from=2031-05-{0}T05:59:00Z&to=2031-05-{0}T06:01:00Z&layers=vertical_delay"
    first, second = (
        np.frombuffer(
            base64.b64decode(
                _service(v.server, f"/api/days/Strait%20of%20trials/2031-05-{n}/fields?{span.format(n)}")["layers"][
                    "vertical_delay"
                ]["base64"]
            ),
            dtype="<f4",
        )
        for n in ("11", "10")
    )
    wanted = (first - second).reshape(15, 17)[0]  # south to north: the last row shown
    for text, value in zip(shown[2:], wanted, strict=True):
        assert text == "unseen" if np.isnan(value) else abs(float(text) - value) < 0.0051
    with v.page.expect_download() as download:
        v.page.click("#map-csv")
    assert download.value.suggested_filename.endswith("-0600-difference.csv")
    rows = list(csv.DictReader(io.StringIO(Path(download.value.path()).read_text())))
    for row, value in zip(rows[:17], wanted, strict=True):
        told = row["vertical_delay_m"]
        assert told == "" if np.isnan(value) else float(told) == pytest.approx(value, abs=1e-4)
    v.page.select_option("#versus", "quiet")
    v.page.wait_for_function("() => document.getElementById('compared').textContent.includes('median of 1 quiet day')")
    # The day at the place beside that of the quiet day, in the table behind the plot.
    v.page.click(".through-day .table-behind summary")
    v.page.wait_for_function("() => document.querySelectorAll('#series-table thead th').length === 4")
    assert "median of 1 quiet day" in v.text("#series-table thead")
    # On paper it is day, without controls, with the way back.
    v.page.emulate_media(media="print")
    v.page.evaluate("window.dispatchEvent(new Event('beforeprint'))")
    assert not any(v.page.is_visible(one) for one in ("#asks", "#play", "#place-form", ".exports", "#year-strip"))
    assert v.page.is_visible(".caution") and "versus=quiet" in v.text("#printed")


def test_now_tells_the_age_and_what_comes(visit: Open) -> None:
    """Now opens the newest data and says how old; at an earlier time it foretells arrivals and leads back."""
    v = visit(plotly=False).go("?ask=now")
    assert v.minute() == "None"
    assert v.page.get_attribute("#strip", "aria-valuetext") == "23:45 UTC"
    v.page.wait_for_function("() => document.getElementById('present-age').textContent")
    assert v.text("#present-age").startswith("Newest data: 23:45 UTC, 11 May 2031")
    assert "not the present" in v.text("#present-age")
    v.page.evaluate("window.scrollTo(0, document.body.scrollHeight)")
    assert 0 <= v.page.locator("#present-age").bounding_box()["y"] < 60, "the age stays in sight"
    v.go("?ask=now&day=2031-05-11&time=05:00")
    # The invented front stands at 41.5 S at 05:00 and moves north at two degrees an hour: Gannet Field at 41.1 S.
    v.page.wait_for_function("() => document.getElementById('present-next').textContent.includes('Gannet')")
    assert "05:12 UTC Gannet Field, in 12 minutes, give or take " in v.text("#present-next")
    assert "Moving front" in v.text("#present-flags")
    v.page.click("#present-back")
    v.page.wait_for_function("() => document.getElementById('strip').getAttribute('aria-valuetext') === '23:45 UTC'")
    assert not v.page.is_visible("#present-back")


def test_the_network_and_ahead(visit: Open) -> None:
    """Receivers with their biases, the suspected one first; the outlook, or the service's words why there is none."""
    v = visit(plotly=False, accept_downloads=True)
    v.go("?ask=network&day=2031-05-11", wait=False)
    v.page.wait_for_selector("#network-table tbody tr")
    assert v.page.is_visible("#network-caution") and "not for navigation" in v.text("#network-caution")
    assert v.page.locator("#network-table tbody tr").count() == 10
    assert v.text("#network-table tbody tr").startswith("HULL")
    assert "HULL stands out of 10 receivers" in v.text("#network-said")
    assert not v.page.is_visible("#map")
    with v.page.expect_download() as download:
        v.page.click("#network-csv")
    rows = list(csv.DictReader(io.StringIO(Path(download.value.path()).read_text())))
    assert len(rows) == 10 and all(row["day"] == "2031-05-11" and "+-" in row["biases_ns"] for row in rows)
    v.page.click("#network-all summary")
    v.page.wait_for_function("() => document.querySelectorAll('#network-days tbody tr').length > 0")
    assert v.page.locator("#network-days tbody tr").count() == 20  # ten receivers on two days
    v.page.click("#asks a[data-ask=ahead]")
    v.page.wait_for_function("() => document.querySelector('#ahead-body :is(.chances, .trouble)')")
    v.page.click("#asks a[data-ask=past]")
    v.page.wait_for_selector("#map[data-drawn=fields]")
    v.page.go_back()
    assert v.page.is_visible("#ahead-title")


def test_playing_moves_the_map(visit: Open) -> None:
    """Play steps through the epochs and stops at the end or on request."""
    v = visit(plotly=False).go(f"{STORM}&time=05:30")
    v.page.select_option("#rate", "20")
    v.page.click("#play")
    v.page.wait_for_function("() => Number(document.getElementById('play').dataset.count) >= 6")
    v.page.click("#play")
    assert v.page.get_attribute("#play", "data-playing") == "false"
    v.settled()
    assert v.minute() >= "07:00"


def test_stepping_asks_nothing(visit: Open) -> None:
    """Within the hours that are here a step in time sends no request, and the reading is never dimmed."""
    v = visit(plotly=False).go(f"{STORM}&time=05:00&at=-41.1,147.1")
    v.page.wait_for_timeout(600)
    before = len(v.asked)
    v.page.focus("#strip")
    for _ in range(3):
        v.page.keyboard.press("ArrowRight")
        assert v.page.get_attribute("#answer", "aria-busy") == "false"
    told = _service(v.server, f"{DAY}/reading?lat=-41.1&lon=147.1&time=2031-05-11T05:45:00Z")
    assert v.text(".lead") == told["sentence"]
    assert [url for url in v.asked[before:] if "/reading" in url or "/series" in url] == []


def test_curves_behind_what_is_said(visit: Open) -> None:
    """Lines of sight near the place with a table behind them."""
    v = visit(plotly=False).go(f"{STORM}&time=06:00&at=-41.1,147.1")
    v.page.click("#curves > summary")
    v.page.wait_for_selector("svg.curves, #curves .empty")
    asked = next(url for url in v.asked if "/witnesses" in url)
    assert "lat=-41.1&lon=147.1" in asked and "05%3A59%3A42" in asked  # epochs stand on GPS time
    told = _service(asked, "")["lines"]
    assert v.page.locator("#curves tbody tr").count() == len(told) > 0


def test_files_of_what_is_on_the_screen(visit: Open) -> None:
    """The map as CSV has every cell of this moment, SVG is a drawing, NetCDF and IONEX are the service's."""
    v = visit(accept_downloads=True).go(f"{STORM}&time=05:30")
    with v.page.expect_download() as download:
        v.page.click("#map-csv")
    rows = list(csv.DictReader(io.StringIO(Path(download.value.path()).read_text())))
    assert len(rows) == 15 * 17 and {row["time_utc"] for row in rows} == {"2031-05-11T05:29:42.000Z"}
    assert all(row["vertical_delay_m"] == "" for row in rows if row["state"] == "unseen")
    with v.page.expect_download() as download:
        v.page.click("#series-csv")
    assert len(Path(download.value.path()).read_text().splitlines()) == 97
    with v.page.expect_download() as download:
        v.page.click("#map-svg")
    assert Path(download.value.path()).read_text().startswith("<svg")
    for selector, begin in (("#day-netcdf", b"\x89HDF"), ("#day-ionex", b"     1.0")):
        with urllib.request.urlopen(v.server + v.page.get_attribute(selector, "href")) as answer:
            assert answer.read(8).startswith(begin)


@pytest.fixture(scope="session")
def axe() -> str:
    """axe-core's script, as the package of the tests brings it."""
    return (resources.files("axe_playwright_python") / "axe.min.js").read_text(encoding="utf-8")


@pytest.mark.parametrize("dark", [False, True], ids=["day", "night"])
def test_axe_finds_nothing(visit: Open, axe: str, dark: bool) -> None:
    """All rules of WCAG 2.2 A and AA that axe-core knows, with every fold open, on every question.

    By night the colours alone are asked about: all else is the same page.
    """
    rules = ["color-contrast"] if dark else ["wcag2a", "wcag2aa", "wcag21a", "wcag21aa", "wcag22aa"]
    v = visit(dark=dark, bypass_csp=True, plotly=False)
    queries = {
        f"{STORM}&time=05:30&versus=2031-05-10": "#map[data-drawn=fields]", "?ask=now": "#present-alerts li",
        "?ask=ahead": "#ahead-body :is(.record, .trouble)", "?ask=network": "#network-table tr",
        "?files=open": "#files-tasks li",
    }  # fmt: skip
    for query, ready in queries.items():
        v.go(query, wait=False)
        v.page.wait_for_selector(ready)
        v.page.evaluate("document.querySelectorAll('details').forEach((fold) => { fold.open = true; })")
        v.page.wait_for_timeout(400)
        v.page.wait_for_function("() => !document.querySelector('main [aria-busy=true]')")
        v.page.evaluate(axe)
        found = v.page.evaluate("(runOnly) => axe.run(document, { runOnly })", rules)
        assert len(found["passes"]) > (0 if dark else 10)
        told = [f"{one['id']}: {one['nodes'][0]['html'][:150]}" for one in found["violations"]]
        assert told == [], query


def test_speed_of_playing(visit: Open, record_property: Callable[[str, object], None]) -> None:
    """Maps a second while playing at forty asked; the bound allows for a busy machine, the project's budget is 20."""
    v = visit().go(f"{STORM}&time=00:00")
    v.page.wait_for_selector("#series .main-svg")
    v.page.wait_for_timeout(500)
    v.page.select_option("#rate", "40")
    rates = []
    for _ in range(2):
        v.page.focus("#strip")
        v.page.keyboard.press("Home")
        v.page.wait_for_timeout(400)
        rates.append(
            v.page.evaluate(
                """async () => {
                  const play = document.getElementById("play"), start = performance.now();
                  play.click();
                  while (play.dataset.playing === "true") await new Promise((r) => setTimeout(r, 5));
                  return (1000 * Number(play.dataset.count)) / (performance.now() - start);
                }"""
            )
        )
    record_property("maps_a_second", round(statistics.median(rates), 1))
    print(f"playing: {statistics.median(rates):.1f} maps a second (median of {len(rates)} days)")
    assert statistics.median(rates) > 4
