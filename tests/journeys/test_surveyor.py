"""A survey manager, the afternoon before: own files dropped on the page, a site entered, the outlook read and taken
along; and the evening after, when fixing had failed.

Through the page of `skylag serve --work` over the archive that the README's first command made.
"""

import shutil
import urllib.request
from pathlib import Path
from typing import Any

import pytest
from tests.journeys.newcomer import Newcomer, served

from invented import files, network

pytestmark = pytest.mark.browser
BASE = "KELM"
DAYS_BEFORE = ("2031-03-06", "2031-03-07", "2031-03-08", "2031-03-09", "2031-03-10")
STORM = "2031-03-12"


def own_files(folder: Path) -> list[Path]:
    """Working days of the firm's own base which the archive lacks, their orbits, and a letter got among them."""
    paths = []
    for day in DAYS_BEFORE:
        made = network.simulate(day, [BASE], (0.0, 8.0), 60.0)
        signals = made.signals[0]
        observations = folder / files.observation_name(signals.receiver.name[:9], made.day, 60.0)
        files.write(observations, files.compact_bytes(files.observation_text(signals)))
        orbits = folder / files.navigation_name(made.day)
        files.write(orbits, files.packed(made.navigation_text()))
        paths += [observations, orbits]
    letter = folder / "letter.txt"
    letter.write_text("Dear colleagues,\n", encoding="utf-8")
    return [*paths, letter]


def test_the_afternoon_before_and_the_evening_after(newcomer: Newcomer, browser: Any, tmp_path: Path) -> None:
    place = tmp_path / "archive"
    shutil.copytree(newcomer.place, place)
    with served(place, "--work") as address:
        page = browser.new_page(viewport={"width": 1366, "height": 900}, accept_downloads=True)
        page.set_default_timeout(60_000)
        page.goto(f"{address}/?region=Tarn+Strait")
        page.wait_for_selector("#map[data-drawn=fields]")

        # Own files: each told what it is or why not; then the day that is made of them is there.
        page.click("#files-open")
        page.set_input_files("#files-input", [str(path) for path in own_files(tmp_path)])
        page.wait_for_function("() => document.querySelectorAll('#files-list li[data-state=sent]').length === 10")
        assert "letter.txt" in page.inner_text("#files-list li[data-state=refused]")
        page.click("#files-begin")
        page.wait_for_function(
            "() => document.querySelectorAll('#files-tasks li[data-state=done]').length === 5", timeout=400_000
        )
        page.keyboard.press("Escape")
        for day in DAYS_BEFORE:
            page.wait_for_selector(f"#day option[value$='{day}']", state="attached")

        # The place of work becomes a site, which all days know from now on.
        page.focus("#sites > summary")
        page.keyboard.press("Enter")
        page.wait_for_selector("#sites-body input[name=name]")
        for name, value in (("name", "Weir three"), ("lat", "41.2 S"), ("lon", "146.6 E"), ("kind", "survey")):
            page.fill(f"#sites-body input[name={name}]", value)
        page.press("#sites-body input[name=kind]", "Enter")
        page.wait_for_function("() => document.getElementById('place-site').textContent.includes('Weir three')")
        page.select_option("#place-site", label="Weir three (survey)")

        # Tomorrow: eight mornings tell of mornings; of the hours that nobody saw nothing is promised.
        page.click("#asks a[data-ask=ahead]")
        page.wait_for_function("() => document.getElementById('ahead-body').textContent.includes('seen on 8 days')")
        told = page.inner_text("#ahead-body")
        spans = [line for line in told.splitlines() if " – " in line and " UTC: " in line]
        assert len(spans) == 4, told
        for tomorrow in ("14", "15"):
            assert any(f"{tomorrow} March 2031, 00:00 UTC – {tomorrow} March 2031, 08:00 UTC: likely holds" in line
                       for line in spans), spans  # fmt: skip
        assert all("likely holds" in line or "chances not known" in line for line in spans)
        assert "How outlooks turned out" in told and "not for navigation" in page.inner_text(".caution")
        link = page.url
        assert "ask=ahead" in link and "at=-41.2" in link

        # The link that is mailed shows the same to the one who opens it.
        other = browser.new_page()
        other.goto(link)
        other.wait_for_function("() => document.getElementById('ahead-body').textContent.includes('likely holds')")
        assert [line for line in other.inner_text("#ahead-body").splitlines() if line in spans] == spans
        other.close()

        # The evening after: fixing failed while the wall passed.
        page.goto(f"{address}/?region=Tarn+Strait&day={STORM}&time=07:00&at=-41.2,146.6")
        page.wait_for_selector("#map[data-drawn=fields]")
        page.focus("#work > summary")
        page.keyboard.press("Enter")
        page.wait_for_selector("#work-body .job-form", timeout=120_000)
        page.fill("#work-body input[name=failed]", "07:00")
        page.press("#work-body input[name=failed]", "Enter")
        page.wait_for_selector("#work-body [role=status] li", timeout=120_000)
        verdict = page.inner_text("#work-body [role=status]")
        assert verdict.startswith("Likely") and "front" in verdict.lower(), verdict
        page.close()

        # The report to print and the calendar entry, from the addresses that the page gives.
        day = f"{address}/api/days/Tarn%20Strait/{STORM}"
        with urllib.request.urlopen(f"{day}/sheet.pdf?site=Weir%20three", timeout=120) as answer:
            paper = answer.read()
        assert paper.startswith(b"%PDF") and paper.count(b"/Type /Page\n") == 1
        with urllib.request.urlopen(f"{day}/survey.ics?site=Weir%20three&hours=06:00-20:00", timeout=120) as answer:
            calendar = answer.read().decode()
        assert "BEGIN:VEVENT" in calendar and "not for navigation" in calendar.replace("\r\n ", "")
