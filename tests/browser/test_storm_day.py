"""The committed storm day through the command line's archive and server onto the page: the line from end to end.

The numbers read on the page are compared with what the generator put in.
"""

import re
import subprocess
import sys
import urllib.parse
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from tests.simulated.day_results import STORM, day, truth_of

from skylag.archive import open_archive
from skylag.constants import L1_M_PER_TECU

pytestmark = pytest.mark.browser
PLACE = (-39.0, 145.5)


@pytest.fixture(scope="module")
def storm_server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    """`skylag serve` over an archive that holds the committed storm day."""
    place = tmp_path_factory.mktemp("storm") / "archive"
    with open_archive(place) as archive:
        archive.save(day(STORM).products)
    process = subprocess.Popen(
        [sys.executable, "-m", "skylag.cli", "serve", "--archive", str(place), "--port", "0"],
        stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True, cwd=Path(__file__).parent,
    )  # fmt: skip
    assert process.stdout is not None
    line = process.stdout.readline()
    found = re.search(r"http://127\.0\.0\.1:\d+", line)
    assert found, line
    yield found.group(0)
    process.terminate()
    process.wait(15)


def test_the_storm_day_on_the_page(storm_server: str, browser: Any) -> None:
    """Open it at noon, go back to the front with the keys, read a place, see the flag and its witnesses."""
    page = browser.new_page(viewport={"width": 1366, "height": 900})
    complaints: list[str] = []
    page.on("console", lambda message: complaints.append(message.text) if message.type == "error" else None)
    page.on("pageerror", lambda error: complaints.append(str(error)))
    query = urllib.parse.urlencode({"day": STORM, "time": "08:00", "at": f"{PLACE[0]},{PLACE[1]}"})
    page.goto(f"{storm_server}/?{query}")
    page.wait_for_selector("#map[data-drawn=fields]")
    page.focus("#strip")
    page.keyboard.press("Shift+ArrowLeft")
    for _ in range(2):
        page.keyboard.press("ArrowRight")
    page.wait_for_function("() => document.querySelector('.answer-where').innerText.includes('07:10 UTC')")
    page.wait_for_function("() => document.getElementById('answer').getAttribute('aria-busy') === 'false'")
    assert page.get_attribute("#map", "data-flags") and "front" in page.get_attribute("#map", "data-flags")
    answer = page.inner_text("#answer")
    assert "broken" in answer
    metres = re.search(r"([\d.]+) ± ([\d.]+) m\b", answer)
    assert metres, answer
    # 07:10 UTC is 07:10:18 GPS time; the map read is the nearest of every five minutes.
    when = np.array([np.datetime64(f"{STORM}T07:10:00")])
    true = float(truth_of(STORM).vertical_content(np.array([PLACE[0]]), np.array([PLACE[1]]), when)[0]) * L1_M_PER_TECU
    assert abs(float(metres.group(1)) - true) < max(3.0 * float(metres.group(2)), 1.0)
    assert re.search(r"front of \d+ ± \d+ mm per km|front of \d+ ± \d+ mm/km", answer, re.IGNORECASE)
    assert "Simulated data" in page.inner_text("#simulated")
    assert "not for navigation" in page.inner_text(".caution")
    assert page.locator("#flag-table tbody tr").count() >= 3
    assert not complaints
    page.close()
