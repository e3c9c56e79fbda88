"""A real page server over an invented archive, and a real Chromium.

Only for tests marked `browser`; nothing of it is imported or started otherwise.
"""

import socket
import subprocess
import sys
import time
import urllib.error
import urllib.request
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest

ROOT = Path(__file__).resolve().parents[2]


@pytest.fixture(scope="session")
def page_server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    """The address of a server in a process of its own, over `tests.builders`' invented archive."""
    folder = tmp_path_factory.mktemp("page-archive")
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        port = free.getsockname()[1]
    log = folder / "server.log"
    with log.open("w") as out:
        process = subprocess.Popen(
            [sys.executable, "-m", "tests.builders", str(folder), "--serve", str(port)],
            cwd=ROOT, stdout=out, stderr=subprocess.STDOUT,
        )  # fmt: skip
    address = f"http://127.0.0.1:{port}"
    try:
        _wait_until_well(address, process, log)
        yield address
    finally:
        process.terminate()
        try:
            process.wait(10)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait(10)


def _wait_until_well(address: str, process: "subprocess.Popen[bytes]", log: Path) -> None:
    deadline = time.monotonic() + 60
    while time.monotonic() < deadline:
        if process.poll() is not None:
            pytest.fail(f"the page server ended with {process.returncode}:\n{log.read_text()[-3000:]}")
        try:
            with urllib.request.urlopen(f"{address}/healthz", timeout=2):
                return
        except (urllib.error.URLError, OSError):
            time.sleep(0.1)
    pytest.fail(f"the page server was not ready within 60 s:\n{log.read_text()[-3000:]}")


# Stands in for plotly.js where a test does not look at what it draws.
IDLE = "window.Plotly = { react: async () => {}, purge() {} };"


@dataclass
class Visit:
    """One open page, with all that went wrong on it and every address it asked for."""

    page: Any
    server: str
    complaints: list[str] = field(default_factory=list)
    asked: list[str] = field(default_factory=list)

    def go(self, query: str = "", *, wait: bool = True) -> "Visit":
        """Open a view; wait for its map and its reading."""
        self.page.goto(f"{self.server}/{query}")
        if wait:
            self.page.wait_for_selector("#map[data-drawn=fields]")
            self.settled()
        return self

    def settled(self) -> None:
        """Wait until map and reading show the time that the strip shows."""
        self.page.wait_for_function(
            """() => {
              const map = document.getElementById("map"), answer = document.getElementById("answer");
              return map.dataset.drawn === "fields" && answer.dataset.time === map.dataset.time
                && answer.getAttribute("aria-busy") === "false";
            }"""
        )

    def minute(self) -> str:
        """The time in the address, which follows a run of moves within a tenth of a second."""
        self.page.wait_for_timeout(130)
        return str(self.page.evaluate("new URLSearchParams(location.search).get('time')"))

    def text(self, selector: str) -> str:
        """Text of an element, spaces joined."""
        return " ".join(str(self.page.inner_text(selector)).split())

    def paper(self) -> str:
        """The colour the page lies on."""
        return str(self.page.evaluate("getComputedStyle(document.body).backgroundColor"))


@pytest.fixture
def visit(browser: Any, page_server: str) -> Iterator[Callable[..., Visit]]:
    """Opens pages: visit(width=…, height=…, dark=…).  At the end no page may have complained or asked another host.

    plotly=False spares tests that look neither at axes nor at the plot the second that its script takes to run.
    """
    opened: list[tuple[Any, Visit]] = []

    def open_page(
        *, width: int = 1366, height: int = 900, dark: bool = False, plotly: bool = True, **more: Any
    ) -> Visit:
        context = browser.new_context(
            viewport={"width": width, "height": height}, color_scheme="dark" if dark else "light", **more
        )
        page = context.new_page()
        page.set_default_timeout(15_000)
        if not plotly:
            page.route(
                "**/vendor/plotly.min.js", lambda route: route.fulfill(content_type="text/javascript", body=IDLE)
            )
        one = Visit(page, page_server)
        page.on("console", lambda m: one.complaints.append(m.text) if m.type in {"error", "warning"} else None)
        page.on("pageerror", lambda failure: one.complaints.append(str(failure)))
        page.on("request", lambda request: one.asked.append(request.url))
        opened.append((context, one))
        return one

    yield open_page
    for context, one in opened:
        context.close()
        assert one.complaints == []
        foreign = [url for url in one.asked if not url.startswith((page_server, "data:", "blob:"))]
        assert foreign == []
