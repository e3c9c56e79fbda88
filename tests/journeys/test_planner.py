"""An airspace planner on watch: aerodromes from a list, files every quarter of an hour, a wall crossing, the alert, the
predicted arrival on the page, the outage windows, and the day's summary afterwards.

Through the real commands, server and browser; files are pieces of a quarter of an hour of the invented storm day.
"""

import contextlib
import csv
import json
import re
import subprocess
import sys
import time
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from tests.journeys.newcomer import served

from invented import files, network, places
from skylag import cli
from skylag.archive import open_archive
from skylag.tables import Signals

pytestmark = pytest.mark.browser
STORM = "2031-03-12"
RECEIVERS = ("VANP", "KELM", "FENN", "BRIM", "SKAR", "JASP", "TWSK", "LURB")
AERODROME = "Pellbury aerodrome"
FIRST, SEEN, LAST = 4.5, 6.75, 7.5  # hours: the wall comes from the south-east and is over Pellbury at 07:10
LIST = """name,lat,lon
Pellbury aerodrome,-38.03,146.72
Stonnet aerodrome,-41.68,147.02
"""
ALERTS = """
[[alert]]
name = "front toward Pellbury"
when = "arrival"
site = "Pellbury aerodrome"
within_min = 60
to = [{file = "told.jsonl"}]

[[alert]]
name = "aerodromes"
when = "state"
state = "broken"
to = [{file = "told.jsonl"}]
"""


def piece(signals: Signals, start: float, end: float, folder: Path) -> None:
    """Write what one receiver saw in a span of hours as a file of a quarter of an hour, or of more, as they come."""
    hours = (signals.times - np.datetime64(STORM)) / np.timedelta64(1, "h")
    rows = (hours >= start) & (hours < end)
    cut = replace(
        signals, times=signals.times[rows], resets=signals.resets[rows],
        values={code: table[rows] for code, table in signals.values.items()},
        lock={code: table[rows] for code, table in signals.lock.items()},
    )  # fmt: skip
    minute = round(start * 60)
    name = f"{signals.receiver.name[:9]}_R_2031071{minute // 60:02d}{minute % 60:02d}_15M_60S_MO.rnx.gz"
    files.write(folder / name, files.packed(files.observation_text(cut)))


@contextlib.contextmanager
def watching(folder: Path, *words: str) -> Iterator[subprocess.Popen[str]]:
    """`skylag watch` in a process of its own."""
    with (folder / "watch.log").open("w") as log:
        command = [sys.executable, "-m", "skylag.cli", "watch", *words]
        process = subprocess.Popen(command, cwd=folder, stderr=log, text=True)
        try:
            yield process
        finally:
            process.terminate()
            try:
                process.wait(30)
            except subprocess.TimeoutExpired:
                process.kill()
                process.wait(30)


def kept_until(place: Path, hour: float, process: "subprocess.Popen[str]", log: Path) -> None:
    """Wait until the archive holds maps of the day up to an hour."""
    wanted = np.datetime64(STORM) + np.timedelta64(round(hour * 3600) - 900, "s")
    deadline = time.perf_counter() + 400.0
    while time.perf_counter() < deadline:
        assert process.poll() is None, log.read_text()
        if place.exists():
            with open_archive(place) as archive:
                if archive.days() and archive.fields("Tarn Strait", np.datetime64(STORM, "D")).times[-1] >= wanted:
                    return
        time.sleep(1.0)
    pytest.fail(f"no maps up to {hour} h:\n{log.read_text()[-3000:]}")


def test_a_wall_is_seen_coming(browser: Any, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    # The region, with the aerodromes of a list.
    region = tmp_path / "region.toml"
    region.write_text(places.region_toml().split("[[site]]")[0], encoding="utf-8")
    (tmp_path / "aerodromes.csv").write_text(LIST, encoding="utf-8")
    (tmp_path / "alerts.toml").write_text(ALERTS, encoding="utf-8")
    assert cli.main(["sites", str(tmp_path / "aerodromes.csv"), "--region", str(region), "--kind", "aerodrome"]) == 0

    world = network.simulate(STORM, RECEIVERS, (FIRST, LAST), 60.0, gaps=False, faults=False)
    incoming, place = tmp_path / "incoming", tmp_path / "archive"
    files.write(incoming / files.navigation_name(np.datetime64(STORM)), files.packed(world.navigation_text()))
    for signals in world.signals:
        for start in np.arange(FIRST, SEEN, 0.25):
            piece(signals, start, start + 0.25, incoming)

    words = (str(incoming), "--archive", str(place), "--region", str(region), "--alerts", str(tmp_path / "alerts.toml"),
             "--workers", "local:2", "--simulated")  # fmt: skip
    with watching(tmp_path, *words) as process:
        kept_until(place, SEEN, process, tmp_path / "watch.log")
        with served(place) as address:
            page = browser.new_page(viewport={"width": 1366, "height": 900})
            page.set_default_timeout(60_000)
            page.goto(f"{address}/?ask=now")
            page.wait_for_selector("#map[data-drawn=fields]")
            # Before it is there: the wall as a flag, and when it is expected over the aerodrome.
            page.wait_for_function("() => /front/i.test(document.querySelector('#present-flags').innerText)")
            coming = page.inner_text("#present-next")
            found = re.search(rf"07:(\d\d) UTC\s+{AERODROME}", coming)
            assert found, coming
            assert abs(int(found.group(1)) - 10) <= 5, coming
            # The next quarter of an hour comes, and the open page follows without being asked.
            shown = page.get_attribute("#map", "data-time")
            for signals in world.signals:
                piece(signals, SEEN, SEEN + 0.25, incoming)
            page.wait_for_function(f"() => document.querySelector('#map').dataset.time !== '{shown}'", timeout=300_000)
            page.wait_for_function("() => document.querySelector('#present-alerts').innerText.includes('Pellbury')")
            page.close()
        for signals in world.signals:
            for start in np.arange(SEEN + 0.25, LAST, 0.25):
                piece(signals, start, start + 0.25, incoming)
        kept_until(place, LAST, process, tmp_path / "watch.log")

    # The alert was told once, before the wall came, with its caution.
    told = [json.loads(line) for line in (tmp_path / "told.jsonl").read_text().splitlines()]
    arrivals = [one for one in told if one["subject"].startswith("front toward Pellbury")]
    assert arrivals and all("not for navigation" in json.dumps(one) for one in told)
    assert len({one["notice"] for one in told}) == len(told)
    first = min(arrivals, key=lambda one: one["notice"])
    assert abs(int(first["facts"]["expected_utc"][14:16]) - 10) <= 5, first

    # Outage windows per service level with their cause; afterwards the summary of the day as events.
    capsys.readouterr()
    day = ["--archive", str(place), "--day", STORM]
    assert cli.main(["advise", *day, "--site", AERODROME, "--sheet", str(tmp_path / "sheet.html"),
                     "--calendar", str(tmp_path / "out.ics")]) == 0  # fmt: skip
    said = capsys.readouterr().out
    assert "LPV-200" in said and "not for navigation" in said
    calendar = (tmp_path / "out.ics").read_text()
    assert calendar.startswith("BEGIN:VCALENDAR") and "BEGIN:VEVENT" in calendar
    assert AERODROME in (tmp_path / "sheet.html").read_text(encoding="utf-8")
    assert cli.main(["events", *day, "--use", "ground"]) == 0
    rows = list(csv.DictReader(capsys.readouterr().out.splitlines()))
    assert any(AERODROME in json.dumps(row) for row in rows), rows
