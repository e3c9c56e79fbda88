"""`skylag demo` as a newcomer runs it: one command, and a page with a first map."""

import json
import re
import signal
import subprocess
import sys
import time
import urllib.request
from pathlib import Path


def test_demo_serves_a_first_map_and_then_the_other_days(tmp_path: Path) -> None:
    began = time.perf_counter()
    demo = subprocess.Popen(
        [sys.executable, "-m", "skylag.cli", "demo", "--archive", "demo", "--port", "0", "--no-browser"],
        cwd=tmp_path, stdout=subprocess.PIPE, stderr=(tmp_path / "said").open("w"), text=True,
    )  # fmt: skip
    try:
        assert demo.stdout is not None
        line = demo.stdout.readline()
        found = re.search(r"the page is at (http://127\.0\.0\.1:\d+/)", line)
        assert found, (line, (tmp_path / "said").read_text())
        assert "not for navigation" in line
        address = found.group(1)
        page = urllib.request.urlopen(address, timeout=30).read().decode()
        assert "Skylag" in page
        days = json.load(urllib.request.urlopen(address + "api/days", timeout=30))
        assert "2031-03-12" in json.dumps(days)
        assert time.perf_counter() - began < 90.0, "from the command to a page with a first map"
        deadline = time.perf_counter() + 200.0
        while "2031-03-13" not in json.dumps(days) or "2031-03-11" not in json.dumps(days):
            assert time.perf_counter() < deadline, "the other sample days did not follow"
            assert demo.poll() is None
            time.sleep(1.0)
            days = json.load(urllib.request.urlopen(address + "api/days", timeout=30))
    finally:
        demo.send_signal(signal.SIGINT)
        status = demo.wait(timeout=30)
    assert status in (0, 130), "Ctrl-C ends it quietly"
