"""The page beside a server that works: files sent and computed, alerts that come, the record of outlooks, a key.

One server that works on its queue, one on another address that asks for keys; both are the command line's.
"""

import base64
import csv
import io
import json
import os
import re
import subprocess
import sys
import urllib.request
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from tests.builders import CALM_DAY, STORM_DAY, invented_day

from skylag.archive import Archive, open_archive
from skylag.jobs import guard, hindcast
from skylag.tables import Indices

pytestmark = pytest.mark.browser
Open = Callable[..., Any]
NOW = np.datetime64("2031-05-12T00:10:00", "ns")


def _serve(place: Path, *more: str) -> "tuple[subprocess.Popen[str], str]":
    process = subprocess.Popen(
        [sys.executable, "-m", "skylag.cli", "serve", "--archive", str(place), "--port", "0", *more],
        stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True, cwd=Path(__file__).parent,
        env={**os.environ, "SKYLAG_WORKERS": "threads:1"},
    )  # fmt: skip
    assert process.stdout is not None
    line = process.stdout.readline()
    found = re.search(r"http://[\d.]+:\d+", line)
    assert found, line
    return process, found.group(0)


@pytest.fixture(scope="module")
def archive(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Archive]:
    """A calm day, the outlook made after it, then the day that came; the magnetic field of both, and one alert."""
    with open_archive(tmp_path_factory.mktemp("sending") / "archive") as own:
        own.save(invented_day(CALM_DAY, storm=False, seed=10))
        hindcast.newest(own, "Strait of trials")
        own.save(invented_day(STORM_DAY, storm=True, seed=11))
        kp = np.array([[1.0] * 8, [2.0] * 4 + [7.333] * 4])
        days = Indices(np.array([CALM_DAY, STORM_DAY]), kp, 4.0 * kp, 4.0 * kp.mean(axis=1), np.array([120.0, 121.0]))
        own.activity.keep_measured(days, "invented", NOW)
        own.notices.tell("one", "A front is expected at Gannet Field.", {"start_ns": 1, "end_ns": 2}, [], 0, NOW)
        yield own


@pytest.fixture
def server(archive: Archive, request: pytest.FixtureRequest) -> Iterator[str]:
    """`skylag serve` over that archive, with the options of the test's mark."""
    more = request.node.get_closest_marker("parametrize").args[1][0]
    process, address = _serve(archive.slant_folder.parent, *more)
    yield address
    process.terminate()
    process.wait(15)


def _tell(server: str, path: str) -> Any:
    with urllib.request.urlopen(server + path) as answer:
        return json.load(answer)


@pytest.mark.parametrize("options", [["--work"]])
def test_from_dropped_files_to_the_day_on_the_page(
    server: str, visit: Open, options: list[str], archive: Archive, sample_folder: Path, tmp_path: Path
) -> None:
    """Alerts come by themselves; outlooks have a record; files are sent by keyboard and by drop, computed, opened."""
    v = visit(plotly=False, accept_downloads=True)
    v.server = server
    v.go("?ask=now")
    v.page.wait_for_selector("#present-alerts strong")
    assert "12 May 2031, 00:10 UTC A front is expected at Gannet Field." in v.text("#present-alerts")
    archive.notices.tell("two", "HULL has fallen silent.", {"start_ns": 1, "end_ns": 2}, [], 0, NOW)
    v.page.wait_for_function("() => document.getElementById('present-alerts').textContent.includes('fallen silent')")
    assert v.page.get_attribute("#present-alerts", "aria-live") == "polite"

    v.go("?day=2031-05-10&time=05:30")
    v.page.select_option("#year-field", "storm")
    told = [str(text) for text in v.page.locator("#year-strip title").all_text_contents()]
    assert len(told) == 1 and told[0].startswith("Sun, 11 May 2031: broken") and told[0].endswith("Kp up to 7.3")
    assert "field=storm" in v.page.evaluate("location.search")
    assert "No indices" not in v.text("#year-note")

    v.go("?ask=ahead", wait=False)
    v.page.wait_for_selector(".record-said")
    lead = _tell(server, "/api/outlook/Strait%20of%20trials/record?newest=1")["leads"]["1"]
    assert f"was off by {lead['rms_m']:.2f} m (root mean square); beside it the day before again" in v.text(".record")
    assert v.page.locator("svg.chances path.spread").count() == 3
    with v.page.expect_download() as download:
        v.page.click("#ahead-csv")
    hours = list(csv.DictReader(io.StringIO(Path(download.value.path()).read_text())))
    place = v.page.evaluate("new URLSearchParams(location.search).get('at')").split(",")
    told = _tell(server, f"/api/outlook/Strait%20of%20trials?lat={place[0]}&lon={place[1]}")
    assert len(hours) == 48 and float(hours[5]["high_95_m"]) == pytest.approx(told["ranges"]["95"]["high"][5], rel=1e-4)
    with v.page.expect_download() as download:
        v.page.click("#ahead-ics")
    calendar = Path(download.value.path()).read_text()
    assert calendar.count("BEGIN:VEVENT") == len(told["windows"])
    assert "not for navigation" in calendar.replace("\n ", "")

    letter, nothing = tmp_path / "letter.txt", tmp_path / "nothing.rnx"
    letter.write_text("Dear surveyor,\n")
    nothing.write_text("")
    good = [next((sample_folder / "2031-03-11").glob(f"{marker}*")) for marker in ("MRGT", "TARN")]
    v.page.focus("#files-open")
    v.page.keyboard.press("Enter")
    v.page.wait_for_selector("dialog[open] #files-input")
    assert "files=open" in v.page.evaluate("location.search")
    v.page.set_input_files("#files-input", [str(path) for path in (good[0], letter, nothing)])
    said = "() => document.getElementById('files-said').textContent"
    v.page.wait_for_function(f"{said} === '1 of 3 files sent, 2 refused.'")
    rows = [" ".join(text.split()) for text in v.page.locator("#files-list li").all_inner_texts()]
    assert rows[0].endswith("observations of MRGT00XBS, Tue, 11 March 2031")
    assert not v.page.locator("#files-list progress").first.is_visible(), "what is sent needs no bar"
    assert "of no kind that is known" in rows[1] and "the file is empty" in rows[2]
    # A drop anywhere on the page, here onto the open window.
    v.page.evaluate(
        """([name, text]) => {
          const carried = new DataTransfer();
          carried.items.add(new File([Uint8Array.from(atob(text), (c) => c.charCodeAt(0))], name));
          for (const type of ["dragover", "drop"]) {
            const how = { dataTransfer: carried, bubbles: true, cancelable: true };
            document.body.dispatchEvent(new DragEvent(type, how));
          }
        }""",
        [good[1].name, base64.b64encode(good[1].read_bytes()).decode()],
    )
    v.page.wait_for_function(f"{said}.startsWith('2 of 4 files sent')")
    v.page.select_option("#files-region", "")
    v.page.focus("#files-begin")
    v.page.keyboard.press("Enter")
    stages = "#files-tasks li[data-state=running] progress, #files-tasks li[data-state=done]"
    v.page.wait_for_selector(stages, timeout=60_000)
    v.page.wait_for_selector("#files-tasks li[data-state=done] button", timeout=120_000)
    v.page.go_back()
    assert not v.page.is_visible("dialog"), "the window of files is a step of the history"
    v.page.go_forward()
    v.page.click("#files-tasks li[data-state=done] button")
    v.page.wait_for_function("() => document.getElementById('region-name').textContent === 'Around MRGT00XBS'")
    v.page.wait_for_selector("#map[data-drawn=fields]")
    assert v.page.evaluate("new URLSearchParams(location.search).get('day')") == "2031-03-11"
    v.complaints[:] = [text for text in v.complaints if "422" not in text]  # Chromium notes the refusal of the letter
    v.asked[:] = [url.replace(server, "data:") for url in v.asked]


@pytest.mark.parametrize("options", [["--host", "127.0.0.2", "--reading", "key"]])
def test_a_server_that_asks_for_a_key(server: str, visit: Open, options: list[str], archive: Archive) -> None:
    """The page asks for it, keeps it for the tab, reads and fetches files with it; a wrong one is said to be wrong."""
    key = guard.make_key(archive, "page", "read", NOW)
    v = visit(plotly=False, accept_downloads=True)
    v.server = server
    v.go("?day=2031-05-11&time=05:30", wait=False)
    v.page.wait_for_selector(".key-form input")
    v.page.fill(".key-form input", "skylag-wrong")
    v.page.keyboard.press("Enter")
    v.page.wait_for_function("() => document.querySelector('.trouble').textContent.includes('not known')")
    v.page.fill(".key-form input", key)
    v.page.click(".key-form button")
    v.page.wait_for_selector("#map[data-drawn=fields]")
    v.settled()
    with v.page.expect_download() as download:
        v.page.click("#flags-csv")
    assert Path(download.value.path()).read_text().startswith("start_utc,")
    v.go("?day=2031-05-11&time=05:30&files=open")
    # The key may read, not write: the server says so beside the file.
    v.page.set_input_files("#files-input", [{"name": "a.rnx", "mimeType": "text/plain", "buffer": b"x"}])
    v.page.wait_for_selector("#files-list li[data-state=refused]")
    assert "needs the scope 'write'" in v.text("#files-list")
    v.complaints[:] = [text for text in v.complaints if "401" not in text and "403" not in text]
    v.asked[:] = [url.replace(server, "data:") for url in v.asked]
