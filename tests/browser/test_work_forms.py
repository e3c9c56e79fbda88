"""The sites of a region and the job at a place, by keyboard, beside a server of the command line that takes changes."""

import os
import re
import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
from tests.builders import STORM_DAY, invented_day

from skylag.archive import open_archive

pytestmark = pytest.mark.browser
Open = Callable[..., Any]
REGION = "Strait of trials"


@pytest.fixture
def place(tmp_path: Path) -> Path:
    with open_archive(tmp_path / "archive") as own:
        own.save(invented_day(STORM_DAY, storm=True, seed=11))
    return tmp_path / "archive"


@pytest.fixture
def server(place: Path) -> Iterator[str]:
    process = subprocess.Popen(
        [sys.executable, "-m", "skylag.cli", "serve", "--archive", str(place), "--port", "0"],
        stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True, cwd=Path(__file__).parent,
        env={**os.environ, "SKYLAG_WORKERS": "threads:1"},
    )  # fmt: skip
    assert process.stdout is not None
    found = re.search(r"http://[\d.]+:\d+", process.stdout.readline())
    assert found
    yield found.group(0)
    process.terminate()
    process.wait(15)


def test_sites_and_jobs_by_keyboard(server: str, place: Path, visit: Open, tmp_path: Path) -> None:
    """A site is added, changed, read at, taken away; a list is taken in; a job is asked in the form's own words."""
    v = visit(plotly=False)
    v.server = server
    v.page.set_default_timeout(30_000)
    v.go(f"?day={STORM_DAY}&time=05:30&at=-42.4,147.0")

    # A site is added: all by keys.
    v.page.focus("#sites > summary")
    v.page.keyboard.press("Enter")
    v.page.wait_for_selector("#sites-body table")
    assert v.page.locator("#sites-body tr").count() == 4
    for width in (1400, 390):  # what may be pressed is not cut off
        v.page.set_viewport_size({"width": width, "height": 900})
        beyond = "() => [...document.querySelectorAll('#sites-body .scroll')].map((e) => e.scrollWidth - e.clientWidth)"
        assert v.page.evaluate(beyond) == [0], width
        assert v.page.evaluate("() => document.querySelector('#sites-body input[type=file]').clientWidth") > 200
    v.page.focus("#sites-body input[name=name]")
    v.page.keyboard.type("New pier")
    v.page.keyboard.press("Tab")
    v.page.keyboard.type("95")
    v.page.keyboard.press("Tab")
    v.page.keyboard.type("146.5 E")
    v.page.keyboard.press("Enter")
    v.page.wait_for_selector("#sites-body .trouble")
    assert "lat is 95" in v.text("#sites-body .said")
    v.page.fill("#sites-body input[name=lat]", "40.5 S")
    v.page.keyboard.press("Enter")
    v.page.wait_for_function("() => document.querySelectorAll('#sites-body tr').length === 5")
    assert "New pier site 40.50° S, 146.50° E" in v.text("#sites-body table")

    # It is on the page, though the day was computed before: in the list of places, on the strip, and it can be read.
    v.page.wait_for_function("() => document.getElementById('place-site').textContent.includes('New pier')")
    v.page.wait_for_function("() => document.getElementById('strip-names').textContent.includes('New pier')")
    v.page.select_option("#place-site", label="New pier (site)")
    v.page.wait_for_function("() => document.querySelector('.answer-where').textContent.includes('New pier')")

    # Its name is changed, and it is taken away after a question.
    v.page.press("#sites-body button[aria-label='Change New pier']", "Enter")
    assert v.page.evaluate("document.activeElement.name") == "name"
    v.page.keyboard.type("Old pier")  # in place of the whole name
    v.page.keyboard.press("Enter")
    v.page.wait_for_function("() => document.querySelector('#sites-body table').textContent.includes('Old pier')")
    v.page.press("#sites-body button[aria-label='Take away Northport']", "Enter")
    v.page.keyboard.press("Enter")
    v.page.wait_for_function("() => !document.querySelector('#sites-body table').textContent.includes('Northport')")
    table = tmp_path / "list.csv"
    table.write_text("name,lat,lon,kind\nBrook,-40.2,146,survey\nFar,10,10,\n", encoding="utf-8")
    v.page.set_input_files("#sites-body input[type=file]", table)
    v.page.wait_for_function("() => document.querySelector('#sites-body table').textContent.includes('Brook')")
    assert "1 of the list could not be taken" in v.text("#sites-body .said")
    assert "Far at 10, 10 lies outside the map" in v.text("#sites-body .said")

    # The job: method, reference, an area, and whether it was the ionosphere.
    v.page.focus("#work > summary")
    v.page.keyboard.press("Enter")
    v.page.wait_for_selector("#work-body .job-form")
    assert v.text("#work-body h3") == "Survey at Old pier"
    v.page.select_option("#work-body select[name=method]", "static")
    v.page.wait_for_function("() => document.getElementById('work-body').textContent.includes('static sessions on')")
    v.page.press("#work-body .job-form details > summary", "Enter")
    v.page.fill("#work-body input[name=references]", "GULL;HULL;IRON")
    v.page.fill("#work-body input[name=vertical_mm]", "250")
    v.page.fill("#work-body input[name=places]", "-40.5,146;-40.5,147.5;-41.6,147.5;-41.6,146")
    v.page.select_option("#work-body select[name=shape]", "area")
    v.page.press("#work-body input[name=hours]", "Enter")
    v.page.wait_for_function("() => document.getElementById('work-body').textContent.includes('12 cells of the map')")
    assert v.text("#work-body h3") == "Survey at area of 4 points from -40.5, 146"  # and no longer at Old pier
    href = v.page.get_attribute("#work-body .exports a", "href")
    for word in ("method=static", "references=GULL%3BHULL%3BIRON", "shape=area", "vertical_mm=250"):
        assert word in href
    assert "site=" not in href
    v.page.fill("#work-body input[name=failed]", "05:30")
    v.page.press("#work-body input[name=failed]", "Enter")
    v.page.wait_for_selector("#work-body [role=status] li")
    v.page.fill("#work-body input[name=hours]", "9to5")
    v.page.press("#work-body input[name=hours]", "Enter")
    v.page.wait_for_selector("#work-body > .trouble")
    assert "07:30-16:00" in v.text("#work-body .trouble")

    # The sheets of a stormy aerodrome and of the job: one page of paper each, from the browser too.
    for address in (f"/api/days/{REGION}/{STORM_DAY}/sheet?site=Gannet%20Field", href):
        v.page.goto(server + address)
        assert len(re.findall(rb"/Type\s*/Page\b", v.page.pdf(prefer_css_page_size=True))) == 1

    assert "area of 4 points" in v.page.title() and "Old pier" not in v.page.content()

    with open_archive(place) as own:
        names = [site.name for site in own.day(REGION, STORM_DAY).region.sites]
    assert names == ["Gannet Field", "Kelp Island", "Southmere quarry", "Old pier", "Brook"]
    v.complaints[:] = [text for text in v.complaints if "422" not in text]  # Chromium tells every refusal
    v.asked[:] = [url for url in v.asked if not url.startswith(server)]
