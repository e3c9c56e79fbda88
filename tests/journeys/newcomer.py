"""`skylag demo` as a newcomer runs it, watched from outside; and the page's server over an archive."""

import contextlib
import json
import re
import signal
import subprocess
import sys
import time
import urllib.request
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

SAMPLE_DAYS = ("2031-03-11", "2031-03-12", "2031-03-13")


@dataclass(frozen=True)
class Newcomer:
    """What the command said and did: its first line, the page, days when the page was first there, seconds, the end."""

    place: Path
    line: str
    page: str
    first_days: list[str]
    first_map_s: float
    status: int


def fetched(address: str) -> str:
    """The body of an answer, as text."""
    with urllib.request.urlopen(address, timeout=60) as answer:
        return str(answer.read().decode())


def kept_days(address: str) -> list[str]:
    """Days that the archive behind an address holds."""
    days: list[dict[str, Any]] = json.loads(fetched(f"{address}api/days"))["days"]
    return [day["day"] for day in days]


def demo(folder: Path) -> Newcomer:
    """Run the README's first command in an empty folder until all sample days are there, then end it with Ctrl-C."""
    began = time.perf_counter()
    said = folder / "said"
    with said.open("w") as errors:
        process = subprocess.Popen(
            [sys.executable, "-m", "skylag.cli", "demo", "--archive", "demo", "--port", "0", "--no-browser"],
            cwd=folder, stdout=subprocess.PIPE, stderr=errors, text=True,
        )  # fmt: skip
        try:
            assert process.stdout is not None
            line = process.stdout.readline()
            found = re.search(r"the page is at (http://127\.0\.0\.1:\d+/)", line)
            assert found, (line, said.read_text())
            address = found.group(1)
            page, first_days = fetched(address), kept_days(address)
            first_map_s = time.perf_counter() - began
            deadline = time.perf_counter() + 400.0
            while not set(SAMPLE_DAYS) <= set(kept_days(address)):
                assert time.perf_counter() < deadline, "the other sample days did not follow"
                assert process.poll() is None, said.read_text()
                time.sleep(1.0)
        finally:
            process.send_signal(signal.SIGINT)
            status = process.wait(timeout=60)
            if process.stdout is not None:
                process.stdout.close()
    return Newcomer(folder / "demo", line, page, first_days, first_map_s, status)


@contextlib.contextmanager
def served(place: Path, *more: str) -> Iterator[str]:
    """The address of `skylag serve` over an archive, without the last slash."""
    process = subprocess.Popen(
        [sys.executable, "-m", "skylag.cli", "serve", "--archive", str(place), "--port", "0", *more],
        cwd=place.parent, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True,
    )  # fmt: skip
    try:
        assert process.stdout is not None
        found = re.search(r"http://127\.0\.0\.1:\d+", process.stdout.readline())
        assert found
        yield found.group(0)
    finally:
        process.terminate()
        try:
            process.wait(20)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait(20)
        if process.stdout is not None:
            process.stdout.close()
