"""The page in a real Chromium under the real headers: it draws, breaks no rule of the content policy, and asks no other
host for anything."""

import threading
from collections.abc import Iterator
from typing import Any

import pytest

from skylag.archive import Archive
from skylag.web.app import create_app, frontend_folder, serve

pytestmark = pytest.mark.browser

# Filled by the browser itself whenever the policy stops something.
WATCH = """
window.stopped = [];
document.addEventListener("securitypolicyviolation",
  (event) => window.stopped.push(`${event.effectiveDirective} ${event.blockedURI}`));
"""


@pytest.fixture
def address(small_archive: Archive) -> Iterator[str]:
    """A server of the real page over the small archive, in a thread that ends with the tests."""
    if not (frontend_folder() / "index.html").is_file():
        pytest.fail(f"the page's files are not at {frontend_folder()}")
    told: list[str] = []
    ready = threading.Event()

    def tell(where: str) -> None:
        told.append(where)
        ready.set()

    threading.Thread(
        target=serve, args=(create_app(small_archive), "127.0.0.1", 0, tell), daemon=True
    ).start()
    assert ready.wait(20)
    yield told[0]


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
