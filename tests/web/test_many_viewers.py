"""Many viewers of one day while days are saved into the same archive by another process: every answer is whole."""

import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import httpx
import numpy as np
import pytest
from tests.builders import CALM_DAY, REGION, write_archive
from tests.web.test_serve import PROGRAM, ROOT

pytestmark = pytest.mark.slow
VIEWERS, ROUNDS = 200, 3
SAVE = """
import sys
from skylag.archive import open_archive
from tests.builders import invented_day
day = invented_day(step_minutes=5)
with open_archive(sys.argv[1]) as archive:
    while True:
        archive.save(day)
        print("saved", flush=True)
"""


@pytest.fixture
def running(tmp_path: Path) -> Iterator[tuple[str, subprocess.Popen[str]]]:
    """A server's address, and a process that saves without end into its archive."""
    place = str(write_archive(tmp_path))
    processes = [
        subprocess.Popen([sys.executable, "-c", program, place], cwd=ROOT, stdout=subprocess.PIPE, text=True)
        for program in (PROGRAM, SAVE)
    ]
    try:
        address = processes[0].stdout.readline().strip()
        assert processes[1].stdout.readline() == "saved\n"
        yield address, processes[1]
    finally:
        for process in processes:
            process.send_signal(signal.SIGKILL)
            process.communicate()


def test_nobody_sees_an_error(running: tuple[str, subprocess.Popen[str]]) -> None:
    address, saver = running
    day = f"{address}api/days/{REGION.name}/{CALM_DAY}"

    def view(number: int) -> list[float]:
        taken = []
        with httpx.Client(timeout=120) as client:
            for turn in range(ROUNDS):
                hour = (number + turn) % 22
                tail = f"/fields?from=2031-05-10T{hour:02}:00:00Z&to=2031-05-10T{hour + 1:02}:00:00Z"
                start = time.perf_counter()
                answer = client.get(day + tail)
                taken.append(time.perf_counter() - start)
                assert answer.status_code == 200, answer.text
                assert len(answer.json()["times_utc"]) == 4
        return taken

    with ThreadPoolExecutor(VIEWERS) as crowd:
        taken = [seconds for one in crowd.map(view, range(VIEWERS)) for seconds in one]
    assert len(taken) == VIEWERS * ROUNDS
    assert saver.poll() is None, "the other process went on saving"
    print(f"{VIEWERS} viewers: median {np.median(taken):.2f} s, 95 of 100 under {np.quantile(taken, 0.95):.2f} s")
