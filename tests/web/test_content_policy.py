"""The page in a real Chromium under the real headers: it draws, breaks no rule of the content policy, and asks no other
host for anything."""

import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from tests.builders import write_archive
from tests.web.test_serve import PROGRAM, ROOT

from skylag.web.app import frontend_folder

pytestmark = pytest.mark.browser

# Filled by the browser itself whenever the policy stops something.
WATCH = """
window.stopped = [];
document.addEventListener("securitypolicyviolation",
  (event) => window.stopped.push(`${event.effectiveDirective} ${event.blockedURI}`));
"""


@pytest.fixture
def address(tmp_path: Path) -> Iterator[str]:
    """A server of the real page over an archive of its own, in a process that ends with the test."""
    if not (frontend_folder() / "index.html").is_file():
        pytest.fail(f"the page's files are not at {frontend_folder()}")
    place = str(write_archive(tmp_path))
    process = subprocess.Popen([sys.executable, "-c", PROGRAM, place], cwd=ROOT, stdout=subprocess.PIPE, text=True)
    try:
        assert process.stdout is not None
        where = process.stdout.readline().strip()
        assert where.startswith("http://127.0.0.1:")
        yield where
    finally:
        process.terminate()
        try:
            process.communicate(timeout=20)
        except subprocess.TimeoutExpired:
            process.kill()
            process.communicate()


def test_the_page_keeps_the_policy(address: str, browser: Any) -> None:
    page = browser.new_page()
    asked: list[str] = []
    failed: list[str] = []
    page.on("request", lambda request: asked.append(request.url))
    page.on("response", lambda answer: failed.append(answer.url) if answer.status >= 400 else None)
    page.on("pageerror", lambda error: failed.append(str(error)))
    page.add_init_script(WATCH)
    page.goto(address)
    page.locator(".js-plotly-plot .main-svg").first.wait_for(state="attached", timeout=60_000)
    page.wait_for_load_state("networkidle")
    assert page.evaluate("window.stopped") == []
    assert failed == []
    elsewhere = [url for url in asked if not url.startswith((address, "data:", "blob:"))]
    assert elsewhere == [] and any("/fields?" in url for url in asked)

    # The watch itself sees: what the policy forbids is stopped and told.
    page.evaluate("""() => {
      const script = document.createElement("script");
      script.textContent = "window.ran = true";
      document.body.append(script);
      fetch("http://192.0.2.1/").catch(() => {});
    }""")
    page.wait_for_timeout(500)
    told = page.evaluate("window.stopped")
    assert any(line.startswith("script-src") for line in told), told
    assert any("connect-src" in line and "192.0.2.1" in line for line in told), told
    assert page.evaluate("window.ran === undefined")
    page.close()
