"""The figures of the README, measured on the machine at hand: `python -m tests.benchmarks.figures`.

Times and memory of `skylag day` for networks of several sizes, errors against the truth of the invented days and
against what is known of real ones (from the table of outside checks), and the page's times in a real browser.  Prints a
table; with --readme the table takes the place of the one there.  It takes some ten minutes for 64 receivers, most of
them for making their files.
"""

import argparse
import json
import os
import platform
import re
import subprocess
import sys
import tempfile
import threading
import time
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import psutil

from invented import files, network, places

ROOT = Path(__file__).resolve().parents[2]
README = ROOT / "README.md"
START, END = "<!-- figures -->\n", "<!-- end of figures -->\n"
STORM = "2031-03-12"
STAGES = {
    "reading and arcs": ("receivers",),
    "biases": ("biases",),
    "maps": ("maps",),
    "slopes, fronts, patches, states": ("slopes", "fronts", "irregular", "states"),
}


def stations(count: int) -> tuple[places.Station, ...]:
    """As many receivers spread over the region: the committed ones first, then a jittered lattice between them."""
    if count <= len(places.STATIONS):
        return places.STATIONS[:count]
    more = count - len(places.STATIONS)
    side = int(np.ceil(np.sqrt(more)))
    chance = np.random.default_rng(64)
    lats = np.linspace(places.SOUTH + 0.4, places.NORTH - 0.4, side)
    lons = np.linspace(places.WEST + 0.5, places.EAST - 0.5, side)
    spots = [(lat, lon) for lat in lats for lon in lons][:more]
    return places.STATIONS + tuple(
        places.Station(f"X{i:03d}00XBS", f"Spot {i}", *(np.round(spot + chance.uniform(-0.2, 0.2, 2), 2)), 50.0)
        for i, spot in enumerate(spots)
    )


def _make(folder: Path, station: places.Station) -> None:
    path = folder / files.observation_name(station.marker, np.datetime64(STORM), 30.0)
    if not path.is_file():
        if station not in places.STATIONS:  # headers look them up there; this process serves nothing else
            places.STATIONS = (*places.STATIONS, station)
        made = network.simulate(STORM, stations=[station])
        files.write(path, files.compact_bytes(files.observation_text(made.signals[0])))


def make_day(folder: Path, count: int) -> Path:
    """A folder with the storm day of as many receivers; what is there already is kept."""
    here = folder / f"{count}-receivers"
    here.mkdir(parents=True, exist_ok=True)
    with ProcessPoolExecutor(2) as pool:
        list(pool.map(_make, [here] * count, stations(count)))
    one = network.simulate(STORM, stations=stations(1), hours=(0.0, 0.1))
    files.write(here / files.navigation_name(np.datetime64(STORM)), files.packed(one.navigation_text()))
    return here


@dataclass(frozen=True)
class Run:
    """One run of `skylag day`: wall time [s], processor time [s], largest memory [MB], seconds of each stage."""

    wall_s: float
    processor_s: float
    memory_mb: float
    stages: dict[str, float]


def run_day(folder: Path, out: Path) -> Run:
    """Run the command in a process of its own and watch it and its children."""
    began, peak = time.perf_counter(), 0.0
    child = subprocess.Popen(
        [sys.executable, "-m", "skylag.cli", "day", str(folder), "--out", str(out), "--quiet",
         "--region", str(ROOT / "sample_data" / "region.toml")],
    )  # fmt: skip
    ended = threading.Event()

    def watch() -> None:
        nonlocal peak
        while not ended.wait(0.1):
            try:
                family = [psutil.Process(child.pid), *psutil.Process(child.pid).children(recursive=True)]
                peak = max(peak, sum(one.memory_full_info().pss for one in family) / 1e6)
            except psutil.Error:  # one of them has just ended
                continue

    watcher = threading.Thread(target=watch)
    watcher.start()
    before = os.times()
    status = child.wait()
    after = os.times()
    ended.set()
    watcher.join()
    if status not in (0, 1):
        raise SystemExit(f"skylag day ended with {status}")
    used = (after.children_user - before.children_user) + (after.children_system - before.children_system)
    return Run(time.perf_counter() - began, used, peak, json.loads((out / "day.json").read_text())["timings_s"])


def sizes(counts: list[int], folder: Path) -> list[str]:
    """Rows of time and memory."""
    rows = []
    for count in counts:
        here = make_day(folder, count)
        with tempfile.TemporaryDirectory() as out:
            run = run_day(here, Path(out) / "day")
        parts = [f"{name} {sum(run.stages.get(stage, 0.0) for stage in keys):.1f}" for name, keys in STAGES.items()]
        network_name = "receiver" if count == 1 else "receivers"
        rows += [
            f"| a day of {count} {network_name}, files to results | {run.wall_s:.0f} s ({'; '.join(parts)}) |",
            f"| its processor time and memory | {run.processor_s:.0f} s, {run.memory_mb:.0f} MB |",
        ]
    return rows


def accuracy() -> list[str]:
    """Rows of errors against the truth of the invented days."""
    from tests.simulated.day_results import CALM, day
    from tests.simulated.test_day_recovered import bias_errors
    from tests.simulated.test_field_recovered import compared, rms

    rows = []
    for name, word in ((CALM, "calm"), (STORM, "storm")):
        satellites, receivers = bias_errors(name, "satellite")[0], bias_errors(name, "receiver")[0]
        day(name)
        got = compared(name)
        inside = got["hull"] & (got["support"] > 0) & (got["wall"] > 150.0)
        held = np.mean(np.abs(got["error"][inside]) <= 1.96 * got["sigma"][inside])
        away = ", 150 km and more from the wall" if word == "storm" else ""
        biases = f"{np.std(satellites):.3f}, {rms(receivers):.3f} ns"
        content = f"{rms(got['error'][inside]):.2f} TECU; 95 % intervals hold {100 * held:.0f} %"
        rows += [
            f"| {word} day: satellite, receiver biases against truth | {biases} |",
            f"| {word} day: content of the map inside the network{away} | {content} |",
        ]
    return rows


def day_ahead() -> list[str]:
    """Rows of the outlook over the invented days of its test, and of a year of it at some 400 places."""
    from tests.simulated.test_outlook_record import SEED, record
    from tests.simulated.year_of_content import simulate
    from tests.speed.test_speed_outlook import year_of_hindcast

    from skylag.ionosphere.outlook_score import verdict

    days = simulate(SEED, days=242)
    found = verdict(record(days, days.drivers))
    if found is None:
        raise SystemExit("no outlook was scored")
    ways = {"persistence": "the day before again", "climatology": "climatology", "usual": "the usual of 27 days"}
    less = ", ".join(f"{100 * found.against[name].better_rms:.0f} % {word}" for name, word in ways.items())
    return [
        f"| day ahead, 120 invented days: RMS of delay less than that of | {less} |",
        f"| its 95 % ranges hold | {100 * found.inside['95']:.1f} % |",
        f"| a year of hindcast at 412 places, hours kept | {year_of_hindcast(412)[0]:.0f} s |",
    ]


# What of the table of outside checks is worth a row here: by the beginning of its subject, and how many digits.
REAL = {
    "ESBC 2020-06-25: GPS C1W-C2W against T_GD": 2,
    "ESBC 2020-06-25: Galileo C1C-C5Q against BGD": 2,
    "ESBC 2020-06-25: GPS-only less Galileo-only": 2,
    "broadcast minus precise 2020-06-25, G, rms": 1,
    "field near ZIMM minus published map, mean": 1,
    "field near ZIMM minus published map, scatter": 2,
}


def real() -> list[str]:
    """Rows of real days, out of the table that the last whole test run wrote."""
    lines = (ROOT / "tests" / "EVIDENCE.md").read_text(encoding="utf-8").splitlines()
    rows = []
    for start, digits in REAL.items():
        cells = [line.split(" | ") for line in lines if f"| {start}" in line]
        if len(cells) != 1:
            raise SystemExit(f"tests/EVIDENCE.md has {len(cells)} rows of {start!r}; run the tests with the real files")
        _, subject, _, _, got, _, unit, _ = cells[0]
        rows.append(f"| real day, {subject} | {float(got):.{digits}f} {unit} |")
    return rows


def page() -> list[str]:
    """Rows of the page's times, as its browser test prints them."""
    told = subprocess.run(
        [sys.executable, "-m", "pytest", "--browser", "-s", "-q", "tests/browser", "-k", "test_speed"],
        cwd=ROOT, capture_output=True, text=True, check=False,
    ).stdout  # fmt: skip
    found = re.search(r"first map (\d+) ms, step (\d+) ms", told)
    playing = re.search(r"playing: ([\d.]+) maps a second", told)
    if not found or not playing:
        raise SystemExit(f"the browser tests told no times:\n{told[-2000:]}")
    return [
        f"| page: first map, one step in time (median) | {found.group(1)} ms, {found.group(2)} ms |",
        f"| page: playing | {playing.group(1)} maps a second |",
    ]


def table(rows: list[str]) -> str:
    """The whole table with where it was measured."""
    memory = psutil.virtual_memory().total / 2**30
    machine = f"{os.cpu_count()} processors, {memory:.0f} GiB, Python {platform.python_version()}"
    head = [f"Measured on {machine}, no other load, by `python -m tests.benchmarks.figures --readme`:", ""]
    return "\n".join([*head, "| what | measured |", "|---|---|", *rows]) + "\n"


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--receivers", nargs="+", type=int, default=[1, 16, 64], help="sizes of network")
    parser.add_argument("--folder", type=Path, help="where the files of the networks are made and kept")
    parser.add_argument("--readme", action="store_true", help="put the table into README.md")
    chosen = parser.parse_args()
    with tempfile.TemporaryDirectory() as scratch:
        networks = sizes(chosen.receivers, chosen.folder or Path(scratch))
        text = table([*networks, *accuracy(), *day_ahead(), *real(), *page()])
    print(text)
    if chosen.readme:
        before, rest = README.read_text(encoding="utf-8").split(START, 1)
        README.write_text(before + START + text + END + rest.split(END, 1)[1], encoding="utf-8")


if __name__ == "__main__":
    main()
