"""An engineer with an archive: the storm found in the year, laid beside quiet days, played, carried away, compared.

Through the real command line, server and browser; the archive holds the sample days and two months of invented ones.
"""

import re
import shutil
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from tests import invented_year
from tests.builders import REGION
from tests.journeys.newcomer import Newcomer, served

from skylag.archive import open_archive

pytestmark = pytest.mark.browser
ROOT = Path(__file__).resolve().parents[2]
STORM = "2031-03-12"


@pytest.fixture(scope="module")
def years(newcomer: Newcomer, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The sample days, and days of another region in the same archive."""
    place = tmp_path_factory.mktemp("engineer") / "archive"
    shutil.copytree(newcomer.place, place)
    with open_archive(place) as archive:
        for products in invented_year.days(np.datetime64("2031-03-01", "D"), 45):
            archive.save(products)
    return place


def taken(page: Any, words: str, folder: Path) -> Path:
    """The file that a link of the page gives."""
    with page.expect_download() as waiting:
        page.get_by_role("link", name=words).or_(page.get_by_role("button", name=words)).first.focus()
        page.keyboard.press("Enter")
    path = folder / str(waiting.value.suggested_filename)
    waiting.value.save_as(path)
    return path


def test_a_storm_is_found_compared_played_and_carried_away(years: Path, browser: Any, tmp_path: Path) -> None:
    with open_archive(years) as archive:
        heads = [head for head in archive.days() if head.region == REGION.name]
        worst = max(heads, key=lambda head: head.highest["slope"])
    with served(years) as address:
        page = browser.new_page(viewport={"width": 1366, "height": 900}, accept_downloads=True)
        page.set_default_timeout(30_000)
        page.goto(f"{address}/?region={REGION.name.replace(' ', '+')}&day=2031-04-14")
        page.wait_for_selector("#map[data-drawn=fields]")

        # The year at a glance: only broken days, and of these the steepest.
        page.select_option("#year-worst", "broken")
        page.wait_for_function("() => !document.querySelector('#year-note').textContent.startsWith('All')")
        bars = page.locator("#year-strip .day-mark")
        assert 0 < bars.count() < 45
        tallest = page.evaluate("""() => {
          const bars = [...document.querySelectorAll("#year-strip .day-slope")];
          const tall = bars.map((bar) => Number(bar.getAttribute("height")));
          return tall.indexOf(Math.max(...tall));
        }""")
        bars.nth(tallest).locator(".day-hit").click(force=True)
        page.wait_for_function(f"() => new URLSearchParams(location.search).get('day') === '{worst.day}'")
        page.wait_for_selector("#map[data-drawn=fields]")

        # Laid beside the median of the quiet days around it.
        page.select_option("#versus", "quiet")
        page.wait_for_function("() => /\\d/.test(document.querySelector('#compared').innerText)")

        # Played: the time moves on by itself.
        before = page.get_attribute("#map", "data-time")
        page.click("#play")
        page.wait_for_function(f"() => document.querySelector('#map').dataset.time !== '{before}'")
        page.click("#play")

        # The sample storm day, read where the wall passed; its maps and the lines of sight behind them taken away.
        page.goto(f"{address}/?region=Tarn+Strait&day={STORM}&time=07:05&at=-39.6,146")
        page.wait_for_selector("#map[data-drawn=fields]")
        assert page.locator("#simulated").is_visible() and "not for navigation" in page.inner_text(".caution")
        field, ionex = taken(page, "day, NetCDF", tmp_path), taken(page, "day, IONEX", tmp_path)
        page.locator("summary", has_text="Curves of the lines of sight").focus()
        page.keyboard.press("Enter")
        slant = taken(page, "these lines of sight, CSV", tmp_path)
        page.close()

    rows = pd.read_csv(slant)
    assert len(rows) > 200 and rows.receiver.nunique() >= 2 and rows.satellite.nunique() >= 2
    assert rows.vtec_tecu.max() - rows.vtec_tecu.min() > 15.0, "the wall stands in the slant data"

    # Our own map as if it were a published one: what comes every quarter of an hour is between maps a little off.
    told = compare(ionex, years)
    assert re.search(r"mean [+-]?0\.0\d TECU", told), told
    assert "Invented data" in told

    # In a notebook, with the lines that the README shows.
    shutil.copy(field, tmp_path / "field.nc")
    (block,) = re.findall(r"```python\n(.*?)```", (ROOT / "README.md").read_text(encoding="utf-8"), re.DOTALL)
    assert len(block.strip().splitlines()) == 3
    run = subprocess.run([sys.executable, "-c", block], cwd=tmp_path, capture_output=True, text=True, check=False)
    assert run.returncode == 0, run.stderr
    with xr.open_dataset(field) as maps:
        assert float(run.stdout.split()[-1]) == pytest.approx(float(maps.slope.max()), abs=0.1)


def compare(published: Path, place: Path) -> str:
    """What `skylag compare` says."""
    run = subprocess.run(
        [sys.executable, "-m", "skylag.cli", "compare", str(published), "--archive", str(place), "--day", STORM,
         "--region", "Tarn Strait"],
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert run.returncode == 0, run.stderr
    return run.stdout
