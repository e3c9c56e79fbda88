"""The same three users on real days: a quiet network day in the Low Countries and the Alps, and two days of one
receiver with a published map.

Through the real commands, server and browser; regions, sites and aerodromes are invented, the measurements are not.
"""

import contextlib
import io
import re
import shutil
import subprocess
import sys
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from tests.conftest import Evidence
from tests.journeys.newcomer import served

from skylag import cli, formats
from skylag.ionosphere.bias_algebra import pair_bias
from skylag.tables import Biases

pytestmark = [pytest.mark.browser, pytest.mark.open_data]
ROOT = Path(__file__).resolve().parents[2]
QUIET, AUGUST = "2021-01-01", "2015-08-23"
LOWLAND, ALPINE = "Lowland net", "Alpine foreland"
RECEIVERS = ["DELFT-16", "EIJSDEN", "ROVN", "WSRA", "ZEGV", "ZIMM"]  # as the files' own headers name them
DAM, FIELD, FAR = "Weir seven", "Meadow field", "Far strip"
LATE_BIASES = "COD0OPSRAP_20210780000_01D_01D_OSB.BIA.gz"  # of 19 March 2021
MAP = "corg2350.15i.gz"
# How many colours the cells of the drawn map have.
COLOURS_OF_THE_MAP = """() => {
  const canvas = document.querySelector("#map canvas");
  const dots = canvas.getContext("2d").getImageData(0, 0, canvas.width, canvas.height).data;
  const seen = new Set();
  for (let i = 0; i < dots.length; i += 4) if (dots[i + 3] === 255) seen.add(dots.slice(i, i + 3).join());
  return seen.size;
}"""
REGIONS = {
    LOWLAND: f"""
[region]
name = "{LOWLAND}"
south = 45.0
north = 55.0
west = 1.0
east = 10.0
step_deg = 0.5
timezone = "Europe/Amsterdam"

[[site]]
name = "{DAM}"
lat = 52.0
lon = 5.5
kind = "survey"

[[site]]
name = "{FIELD}"
lat = 51.5
lon = 5.0
kind = "aerodrome"

[[site]]
name = "{FAR}"
lat = 45.2
lon = 1.2
kind = "aerodrome"
""",
    ALPINE: f"""
[region]
name = "{ALPINE}"
south = 42.0
north = 52.0
west = 2.0
east = 13.0
step_deg = 1.0
timezone = "Europe/Zurich"

[[site]]
name = "Ridge tunnel"
lat = 46.9
lon = 7.6
kind = "survey"
""",
}


@dataclass(frozen=True)
class Kept:
    """A folder with region files, results and an archive, and what each command said while they were made."""

    folder: Path
    data: Path
    said: dict[str, "subprocess.CompletedProcess[str]"]

    def skylag(self, *words: str, status: int = 0) -> str:
        """What a command says about the archive, or why it failed; it must end with the status.  In this process."""
        out, err = io.StringIO(), io.StringIO()
        with contextlib.chdir(self.folder), contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
            ended = cli.main([*words, "--archive", "archive"])
        assert ended == status, (words, out.getvalue()[-2000:], err.getvalue()[-2000:])
        return err.getvalue() if status else out.getvalue()


def command(folder: Path, *words: str) -> "subprocess.CompletedProcess[str]":
    """The program in a process of its own."""
    return subprocess.run(
        [sys.executable, "-m", "skylag.cli", *words], cwd=folder, capture_output=True, text=True, check=False
    )


@pytest.fixture(scope="module")
def kept(open_data: Path, tmp_path_factory: pytest.TempPathFactory) -> Kept:
    """The network day by `day`, the two days of one receiver by `add` and `work`, in one archive."""
    folder = tmp_path_factory.mktemp("real")
    for name, text in REGIONS.items():
        (folder / f"{name}.toml").write_text(text, encoding="utf-8")
    said = {}
    for name, words in {
        "day": ("day", str(open_data / "2021-001"), "--region", f"{LOWLAND}.toml", "--out", "results", "--workers",
                "local:2"),
        "add": ("add", str(open_data / "2015-235"), "--region", f"{ALPINE}.toml"),
        "work": ("work", "--until-empty", "--workers", "local:2"),
    }.items():  # fmt: skip
        said[name] = command(folder, *words, "--archive", "archive")
    return Kept(folder, open_data, said)


@dataclass(frozen=True)
class Window:
    """A page over the archive, and what went wrong on it."""

    page: Any
    address: str
    complaints: list[str]

    def go(self, region: str, day: str, minute: str, place: str) -> str:
        """Open a view, wait for its map, and give the reading of the place."""
        self.page.goto(f"{self.address}/?region={region.replace(' ', '+')}&day={day}&time={minute}&at={place}")
        self.page.wait_for_selector("#map[data-drawn=fields]")
        self.page.wait_for_function("""() => {
          const answer = document.getElementById("answer"), map = document.getElementById("map");
          return answer.dataset.time === map.dataset.time && answer.getAttribute("aria-busy") === "false"; }""")
        return str(self.page.inner_text("#answer"))

    def take(self, words: str, folder: Path) -> Path:
        """The file that a link of the page gives."""
        with self.page.expect_download() as waiting:
            self.page.get_by_role("link", name=words).first.focus()
            self.page.keyboard.press("Enter")
        path = folder / str(waiting.value.suggested_filename)
        waiting.value.save_as(path)
        return path


@pytest.fixture(scope="module")
def window(kept: Kept, browser: Any) -> Iterator[Window]:
    """One page for all tests; no page complains, nor asks another host."""
    with served(kept.folder / "archive") as address, contextlib.ExitStack() as at_end:
        context = browser.new_context(viewport={"width": 1366, "height": 900}, accept_downloads=True)
        at_end.callback(context.close)
        page = context.new_page()
        page.set_default_timeout(30_000)
        complaints: list[str] = []
        page.on("console", lambda m: complaints.append(m.text) if m.type in {"error", "warning"} else None)
        page.on("pageerror", lambda failure: complaints.append(str(failure)))
        page.on("request", lambda one: None if one.url.startswith((address, "data:", "blob:"))
                else complaints.append(one.url))  # fmt: skip
        yield Window(page, address, complaints)
    assert complaints == []


def share(said: str, level: str) -> float:
    """Per cent of the day that a service level is available."""
    (found,) = re.findall(rf"{re.escape(level)} (\d+\.\d) %", said)
    return float(found)


def test_the_days_are_made_and_what_was_left_out_is_said(kept: Kept, evidence: Evidence) -> None:
    day, add, work = kept.said["day"], kept.said["add"], kept.said["work"]
    # Biases of another month and a map are no input of a day: named, status 1, and what else to do with them.
    assert day.returncode == 1, day.stderr
    assert f"{LATE_BIASES}: its biases are of 2021-03-19, not of {QUIET}" in day.stderr + day.stdout
    assert "receivers 6" in day.stdout and "broken 0.0 %" in day.stdout
    assert add.returncode == 1 and MAP in add.stderr and "skylag compare" in add.stderr
    assert f"{AUGUST} {ALPINE}, 1 observation file\n" in add.stdout
    assert work.returncode == 0, work.stderr

    rows = pd.read_csv(kept.folder / "results" / "biases.csv")
    assert sorted(set(rows.name[rows.kind == "receiver"])) == RECEIVERS
    # Satellite biases hardly walk in a season: those of eleven weeks later, both brought to one mean.
    later = formats.read(kept.data / "2021-001" / "bias" / LATE_BIASES).table
    assert isinstance(later, Biases)
    apart = []
    for row in rows[(rows.kind == "satellite") & (rows.code1 == "C1W") & (rows.code2 == "C2W")].itertuples():
        told = pair_bias(later, "satellite", row.name, "G", "C1W", "C2W", np.datetime64("2021-03-19T12:00", "ns"))
        if told is not None:
            apart.append(row.bias_ns - told[0])
    assert len(apart) >= 30
    evidence("Real network day 2021-01-01: GPS C1W-C2W against published biases of 77 days later, RMS about the mean",
             source="CODE rapid OSB of 2021-078; 0.5 ns: biases walk", expected=0.5, got=float(np.std(apart)),
             tolerance=0, unit="ns", at_most=True)  # fmt: skip


def test_a_survey_manager_asks_about_a_quiet_day(kept: Kept) -> None:
    asked = ("advise", "--region", LOWLAND, "--day", QUIET, "--site", DAM)
    said = kept.skylag(*asked, "--failed", f"{QUIET}T11:05:00Z")
    assert f"Was it the ionosphere at {QUIET}T11:05:00Z? Unlikely." in said
    assert "look for masks, multipath, links and settings" in said and "not for navigation" in said
    assert "± 0 mm" not in said

    kept.skylag(*asked, "--method", "rtk", "--baseline", "5", "--tolerance", "30", "50", "--hours", "08:00-17:00",
                "--sheet", "weir.pdf", "--calendar", "weir.ics")  # fmt: skip
    paper = (kept.folder / "weir.pdf").read_bytes()
    assert paper.startswith(b"%PDF") and paper.count(b"/Type /Page\n") == 1
    calendar = (kept.folder / "weir.ics").read_bytes().decode().replace("\r\n ", "")
    starts = re.findall(r"DTSTART:20210101T(\d{4})00Z\r\nDTEND:20210101T(\d{4})00Z\r\nSUMMARY:(\w+)", calendar)
    assert len(starts) == calendar.count("BEGIN:VEVENT") > 0, "whole minutes of UTC"
    assert starts[0][0] == "0700" and starts[-1][1] == "1600", "working hours are the region's own: an hour ahead"
    worked = sum(int(end[:2]) * 60 + int(end[2:]) - int(start[:2]) * 60 - int(start[2:])
                 for start, end, what in starts if what == "Work")  # fmt: skip
    assert worked > 4.5 * 60, "a short base on a quiet winter day: at least half of nine hours"
    assert "not for navigation" in calendar


def test_a_planner_asks_for_the_aerodromes(kept: Kept) -> None:
    every = kept.skylag("advise", "--region", LOWLAND, "--day", QUIET)
    first, *lines = every.splitlines()
    assert first.startswith(f"{LOWLAND}, {QUIET}")
    assert [line.split(":")[0] for line in lines if line.startswith((DAM, FIELD, FAR))] == [DAM, FIELD, FAR]
    asked = ("advise", "--region", LOWLAND, "--day", QUIET, "--site")
    near, far = kept.skylag(*asked, FIELD, "--sheet", "field.html"), kept.skylag(*asked, FAR)
    assert share(near, "NPA") == 100.0 and share(near, "LPV-200") > 99.0
    assert FIELD in (kept.folder / "field.html").read_text(encoding="utf-8")
    # No receiver within 450 km: grid points there are not monitored, and much of the day is not known.
    assert share(far, "LPV-200") < share(near, "LPV-200") - 5.0 and "not monitored" in far
    hours = {name: float(re.findall(r"not known for ([\d.]+) (h|min)", said)[0][0])
             / (1.0 if re.findall(r"not known for ([\d.]+) (h|min)", said)[0][1] == "h" else 60.0)
             for name, said in ((FIELD, near), (FAR, far))}  # fmt: skip
    assert hours[FIELD] < 3.0 < 10.0 < hours[FAR]
    for said in (near, far):
        assert "beyond nominal for 0 min" in said and "beyond the threat space for 0 min" in said
        assert "not for navigation" in said
    # A watched folder is for the days that go on; of files of years ago it says what takes them.
    (kept.folder / "incoming").mkdir()
    shutil.copy(kept.data / "2021-001" / "obs" / "zegv0010.21d.gz", kept.folder / "incoming")
    with (kept.folder / "watch.log").open("w") as log:
        watch = subprocess.Popen(
            [sys.executable, "-m", "skylag.cli", "watch", "incoming", "--archive", "live"], cwd=kept.folder,
            stdout=log, stderr=log,
        )  # fmt: skip
        try:
            deadline = time.perf_counter() + 60.0
            while "file left out" not in (told := (kept.folder / "watch.log").read_text()):
                assert watch.poll() is None and time.perf_counter() < deadline, told
                time.sleep(0.2)
        finally:
            watch.terminate()
            watch.wait(30)
    assert f"is of {QUIET}" in told and "`skylag add` takes days that are past" in told
    # A quiet day: nothing strained or broken for any way of working.
    for use in ([], ["--use", "ground"], ["--use", "satellite"]):
        assert len(kept.skylag("events", "--region", LOWLAND, "--day", QUIET, *use).splitlines()) == 1


def test_the_quiet_day_on_the_page(kept: Kept, window: Window, tmp_path: Path) -> None:
    page = window.page
    noon = window.go(LOWLAND, QUIET, "11:30", "52,5.5")
    assert not page.locator("#simulated").is_visible(), "measured, not invented"
    assert page.locator(".caution").is_visible() and "not for navigation" in page.inner_text(".caution")
    (delay, sigma) = map(float, re.findall(r"the vertical delay is (\d+\.\d+) ± (\d+\.\d+) m", noon)[0])
    (content,) = re.findall(r"(\d+\.\d) ± \d+\.\d TECU", noon)
    # Winter, 52 N, F10.7 near 80: 5 to 10 TECU at noon, 2 to 5 at night (common practice; 1 TECU is 0.162 m).
    assert 4.0 < float(content) < 11.0 and delay == pytest.approx(0.162 * float(content), abs=0.02)
    assert 0.0 < sigma < 0.5
    assert "holds" in noon and "0 ± 0" not in noon
    night = window.go(LOWLAND, QUIET, "04:00", "52,5.5")
    (dark,) = re.findall(r"the vertical delay is (\d+\.\d+)", night)
    assert float(dark) < 0.7 * delay
    colours = page.evaluate(COLOURS_OF_THE_MAP)
    assert colours > 10, "cells in the colours of their delay"
    assert page.inner_text("#flags-title") and "No flag was raised on this day" in page.inner_text("main")
    assert "6 receivers" in page.inner_text("footer")

    assert LATE_BIASES in page.inner_text("footer"), "what was left out is told on the page too, at once"
    notes = page.locator("footer details")
    notes.locator("summary").click()
    assert "no orbit for" in notes.inner_text(), "all notes of a day can be read"

    page.goto(f"{window.address}/?region={LOWLAND.replace(' ', '+')}&day={QUIET}&ask=network")
    page.wait_for_selector("#network-table tbody tr")
    told = page.inner_text("#network-table")
    assert all(name in told for name in RECEIVERS)
    # ZIMM is 450 km from all others, whose field misses it by more; they say so, and it does not stand out.
    assert "None of 6 receivers stands out" in page.inner_text("#network-said")

    unseen = window.go(LOWLAND, QUIET, "11:00", "45.2,1.2")
    assert "Unseen here: no line of sight passes near enough" in unseen and "not covered" in unseen
    assert "not known" in unseen and "TECU" not in unseen
    outside = window.go(LOWLAND, QUIET, "11:00", "61.0,25.0")
    assert "Unseen here: the place lies outside the map" in outside and "TECU" not in outside

    # What is on the screen is taken away, and read with the lines that the README shows.
    window.go(LOWLAND, QUIET, "11:30", "52,5.5")
    field, ionex = window.take("day, NetCDF", tmp_path), window.take("day, IONEX", tmp_path)
    shutil.copy(field, tmp_path / "field.nc")
    (block,) = re.findall(r"```python\n(.*?)```", (ROOT / "README.md").read_text(encoding="utf-8"), re.DOTALL)
    run = subprocess.run([sys.executable, "-c", block], cwd=tmp_path, capture_output=True, text=True, check=False)
    assert run.returncode == 0, run.stderr
    with xr.open_dataset(field) as maps:
        assert float(run.stdout.split()[-1]) == pytest.approx(float(maps.slope.max()), abs=0.1)
        assert float(maps.slope.where(maps.state == 1).max()) < 8.0, "strained_mm_per_km"
        at_noon = maps.vertical_delay.sel(time=f"{QUIET}T11:30", lat=52.0, lon=5.5, method="nearest")
        assert float(at_noon) == pytest.approx(delay, abs=0.02)
    shutil.copy(ionex, kept.folder / "own.21i")
    told = kept.skylag("compare", "own.21i", "--region", LOWLAND, "--day", QUIET)
    assert re.search(r"mean [+-]?0\.0\d TECU", told), told
    assert "Invented" not in told


def test_an_engineer_lays_a_published_map_beside_the_day(kept: Kept, window: Window, evidence: Evidence) -> None:
    published = kept.data / "2015-235" / "ionex" / MAP
    told = kept.skylag("compare", str(published), "--region", ALPINE)
    (mean,) = re.findall(r"mean ([+-]\d+\.\d+) TECU", told)
    (scatter,) = re.findall(r"scatter about the mean (\d+\.\d+)", told)
    (bias,) = re.findall(r"1 receiver is in both, together with the satellites ([+-]\d+\.\d+) ns", told)
    # The level is a known limit (DEVELOPERS.md): here it must be the one that is told there, and explained by the bias.
    source = "CODE map corg2350.15i of 2015-08-23; what is left of the mean beside the receiver's bias: 0.5 TECU"
    evidence("ZIMM 2015-08-23 by the command line: region less published map, mean", source=source,
             expected=-2.9, got=float(mean), tolerance=0.5, unit="TECU")  # fmt: skip
    assert float(scatter) < 1.0 and abs(float(bias) + 1.18) < 0.30
    assert len([line for line in told.splitlines() if line.startswith(AUGUST)]) == 24

    page = window.page
    window.go(ALPINE, AUGUST, "12:00", "46.9,7.6")
    assert "One receiver alone (ZIMM)" in page.inner_text("footer")
    page.focus("#beside > summary")
    page.keyboard.press("Enter")
    page.set_input_files("#beside-file", str(published))
    page.wait_for_selector("#beside-body canvas")
    beside = page.inner_text("#beside-body")
    assert MAP in beside and f"mean {mean} TECU".replace("-", "−") in beside.replace("-", "−")
    assert page.locator("#beside-body table tbody tr").count() == 24
    # The map of another day is refused in words.
    window.go(LOWLAND, QUIET, "12:00", "52,5.5")
    page.focus("#beside > summary")
    page.keyboard.press("Enter")
    page.set_input_files("#beside-file", str(published))
    page.wait_for_selector("#beside-body .trouble")
    assert "give the map of the same day" in page.inner_text("#beside-body .trouble")
    window.complaints[:] = [said for said in window.complaints if "422" not in said]  # the browser notes refusals
    assert "give the map of the same day" in kept.skylag(
        "compare", str(published), "--region", LOWLAND, "--day", QUIET, status=3
    )


def test_two_days_are_too_few_for_an_outlook(kept: Kept, window: Window) -> None:
    ahead = kept.skylag("ahead", "--region", ALPINE)
    assert "seen on 2 of the last 27 days" in ahead and "Too few days were seen here lately" in ahead
    hours = [line for line in ahead.splitlines() if re.match(r"2015-08-2[56] \d\d:00 ", line)]
    assert len(hours) == 48 and all(line.endswith("not known") for line in hours)
    assert "first guesses" in ahead and "a storm would come unannounced" in ahead

    replayed = kept.skylag("hindcast", "2015-08-23", "2015-08-24", "--region", ALPINE)
    assert "1 outlook scored" in replayed
    (rms,) = re.findall(r"the day ahead: delay RMS (\d+\.\d+) m", replayed)
    (inside,) = re.findall(r"95 % range held (\d+\.\d) %", replayed)
    assert float(rms) < 0.8 and float(inside) > 90.0
    # One outlook could not be made: nothing was known the evening before the first day.
    kept.skylag("hindcast", "2015-08-23", "2015-08-23", "--region", ALPINE, status=3)

    page = window.page
    page.goto(f"{window.address}/?region={ALPINE.replace(' ', '+')}&ask=ahead&at=46.9,7.6")
    page.wait_for_function("() => document.getElementById('ahead-body').textContent.includes('Too few days')")
    assert "not known" in page.inner_text("#ahead-body") and "not for navigation" in page.inner_text(".caution")
