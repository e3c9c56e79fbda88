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
DAY_BEFORE = "2031-03-10"
STORM = "2031-03-12"


def own_files(folder: Path) -> list[Path]:
    """A morning of the firm's own base of a day that the archive lacks, its orbits, and a letter got among them."""
    made = network.simulate(DAY_BEFORE, [BASE], (0.0, 8.0), 60.0)
    signals = made.signals[0]
    observations = folder / files.observation_name(signals.receiver.name[:9], made.day, 60.0)
    files.write(observations, files.compact_bytes(files.observation_text(signals)))
    orbits = folder / files.navigation_name(made.day)
    files.write(orbits, files.packed(made.navigation_text()))
    letter = folder / "letter.txt"
    letter.write_text("Dear colleagues,\n", encoding="utf-8")
    return [observations, orbits, letter]


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
        page.wait_for_function("() => document.querySelectorAll('#files-list li[data-state=sent]').length === 2")
        assert "letter.txt" in page.inner_text("#files-list li[data-state=refused]")
        page.click("#files-begin")
        page.wait_for_selector("#files-tasks li[data-state=done]", timeout=300_000)
        page.keyboard.press("Escape")
        page.wait_for_selector(f"#day option[value$='{DAY_BEFORE}']", state="attached")

        # The place of work becomes a site, which all days know from now on.
        page.focus("#sites > summary")
        page.keyboard.press("Enter")
        page.wait_for_selector("#sites-body input[name=name]")
        for name, value in (("name", "Weir three"), ("lat", "41.2 S"), ("lon", "146.6 E"), ("kind", "survey")):
            page.fill(f"#sites-body input[name={name}]", value)
        page.press("#sites-body input[name=kind]", "Enter")
        page.wait_for_function("() => document.getElementById('place-site').textContent.includes('Weir three')")
        page.select_option("#place-site", label="Weir three (survey)")

        # Tomorrow: three days of an archive are few, and the page says so instead of promising.
        page.click("#asks a[data-ask=ahead]")
        page.wait_for_function("() => document.getElementById('ahead-body').textContent.includes('Too few days')")
        told = page.inner_text("#ahead-body")
        assert "not known" in told and "not for navigation" in page.inner_text(".caution")
        link = page.url
        assert "ask=ahead" in link and "at=-41.2" in link

        # The link that is mailed shows the same to the one who opens it.
        other = browser.new_page()
        other.goto(link)
        other.wait_for_function("() => document.getElementById('ahead-body').textContent.includes('Too few days')")
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
