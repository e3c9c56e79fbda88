"""What every test may ask for.  Heavy things are made once in a session."""

import csv
import os
import shutil
from collections.abc import Callable, Generator, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from tests import evidence_table
from tests.journeys.newcomer import Newcomer, demo
from tests.postgres_server import NoServer, PostgresServer

from skylag.archive import Archive, open_archive

ROOT = Path(__file__).resolve().parent.parent
EVIDENCE_ROWS: evidence_table.Rows = {}
_RAN: set[str] = set()  # cases that came to an end, well or not
_NOT_CHOSEN: list[str] = []


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--browser", action="store_true", help="run the tests that drive a real Chromium")


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    if config.getoption("--browser"):
        return
    skip = pytest.mark.skip(reason="needs --browser and a Chromium")
    for item in items:
        if "browser" in item.keywords:
            item.add_marker(skip)


def pytest_deselected(items: list[pytest.Item]) -> None:
    """Cases that were found and not chosen: their rows of outside checks stay."""
    _NOT_CHOSEN.extend(item.nodeid for item in items)


def pytest_runtest_logreport(report: pytest.TestReport) -> None:
    """Which cases came to an end."""
    if report.when == "call" and report.outcome in ("passed", "failed"):
        _RAN.add(report.nodeid)


@pytest.hookimpl(wrapper=True)
def pytest_runtest_makereport(item: pytest.Item) -> Generator[None, pytest.TestReport, pytest.TestReport]:
    """With SKYLAG_NO_SKIPS=1 a skipped browser or database test fails; a real-data one too if its folder is set."""
    report = yield
    if report.skipped and not hasattr(report, "wasxfail") and os.environ.get("SKYLAG_NO_SKIPS") == "1":
        wanted = {"browser", "database"} | ({"open_data"} if os.environ.get("SKYLAG_OPEN_DATA") else set())
        asked_for = {mark.name for mark in item.iter_markers()} | set(getattr(item, "fixturenames", ()))
        asked_for |= {"database"} if asked_for & {"postgres_server", "archive_place"} else set()
        if wanted & asked_for:
            reason = report.longrepr[2] if isinstance(report.longrepr, tuple) else str(report.longrepr)
            report.outcome = "failed"
            report.longrepr = f"skipped where SKYLAG_NO_SKIPS=1 allows no skip: {reason}"
    return report


def open_data_folder() -> Path:
    """The folder of real measurement files: SKYLAG_OPEN_DATA, or the usual place beside the project."""
    return Path(os.environ.get("SKYLAG_OPEN_DATA", ROOT.parent / "shared" / "open-data"))


@pytest.fixture(scope="session")
def open_data() -> Path:
    """The folder of real measurement files; skips where it is absent."""
    folder = open_data_folder()
    if not folder.is_dir():
        pytest.skip(f"no real measurement files at {folder}; set SKYLAG_OPEN_DATA to the folder that holds them")
    return folder


@pytest.fixture(scope="session")
def sample_folder() -> Path:
    """The invented network's files."""
    return ROOT / "sample_data"


@pytest.fixture
def rng() -> np.random.Generator:
    """A generator with a fixed seed."""
    return np.random.default_rng(20240917)


@pytest.fixture(scope="session")
def postgres_server() -> Iterator[PostgresServer]:
    """A PostgreSQL server of our own, on a socket in a folder of its own; skips where none is installed."""
    try:
        server = PostgresServer()
    except NoServer as absent:
        pytest.skip(str(absent))
    with server:
        yield server


def _chromium() -> str | None:
    """Chromium of the system, where there is one; else what Playwright brought itself."""
    named = os.environ.get("SKYLAG_CHROMIUM")
    if named:
        return named
    return next(
        (path for name in ("chromium", "chromium-browser", "google-chrome") if (path := shutil.which(name))), None
    )


@pytest.fixture(scope="module")
def browser() -> Iterator[Any]:
    """One headless Chromium for the tests of a file; its event loop ends with it, as later tests run their own."""
    from playwright.sync_api import sync_playwright

    with sync_playwright() as playwright:
        started = playwright.chromium.launch(
            executable_path=_chromium(), args=["--no-sandbox", "--disable-background-networking"]
        )
        yield started
        started.close()


@pytest.fixture(scope="session")
def newcomer(tmp_path_factory: pytest.TempPathFactory) -> Newcomer:
    """The README's first command, run once; its archive of the three sample days is to be copied, not changed."""
    return demo(tmp_path_factory.mktemp("newcomer"))


@pytest.fixture(params=["sqlite", "postgresql"])
def archive_place(request: pytest.FixtureRequest, tmp_path: Path) -> str:
    """Where a new, empty archive can be opened: a SQLite file, and a database of a real PostgreSQL server."""
    if request.param == "sqlite":
        return str(tmp_path / "archive.sqlite")
    server: PostgresServer = request.getfixturevalue("postgres_server")
    return f"{server.empty_database()}&slant_folder={tmp_path / 'slants'}"


@pytest.fixture
def archive(archive_place: str) -> Iterator[Archive]:
    """An empty archive, on SQLite and on PostgreSQL."""
    with open_archive(archive_place) as opened:
        yield opened


Evidence = Callable[..., None]


@pytest.fixture
def evidence(request: pytest.FixtureRequest) -> Evidence:
    """Record a check against the outside world in tests/EVIDENCE.md, and assert it."""

    def check(
        subject: str,
        *,
        source: str,
        expected: float,
        got: float,
        tolerance: float,
        unit: str = "",
        at_most: bool = False,
    ) -> None:
        """Assert |got - expected| <= tolerance, or got <= expected when `at_most`; the row is written either way."""
        good = got <= expected if at_most else abs(got - expected) <= tolerance
        EVIDENCE_ROWS[(evidence_table.name_of(request.node.nodeid), subject)] = {
            "source": source,
            "expected": f"{'at most ' if at_most else ''}{expected:.12g}",
            "got": f"{got:.12g}",
            "tolerance": "" if at_most else f"{tolerance:.3g}",
            "unit": unit,
            "verdict": "met" if good else "NOT MET",
        }
        assert good, f"{subject}: expected {expected}, got {got}, tolerance {tolerance} {unit} ({source})"

    return check


def pytest_sessionfinish(session: pytest.Session) -> None:
    """Write the table of outside checks, if this run made any."""
    if not EVIDENCE_ROWS:
        return
    root = session.config.rootpath
    path = root / "tests" / "EVIDENCE.md"
    before = path.read_text(encoding="utf-8") if path.is_file() else ""
    cases = [item.nodeid for item in session.items] + _NOT_CHOSEN
    whole = evidence_table.ran_whole(cases, _RAN, by_case=any("[" in word for word in session.config.args))
    rows = evidence_table.merged(
        evidence_table.read(before), EVIDENCE_ROWS, whole, evidence_table.exists_under(root)
    )  # fmt: skip
    text = evidence_table.written(rows)
    if text != before:
        path.write_text(text, encoding="utf-8")


def reference_rows(name: str) -> list[dict[str, str]]:
    """The rows of a table of published values under tests/reference; lines starting with # name the source."""
    path = ROOT / "tests" / "reference" / name
    with path.open(encoding="utf-8") as lines:
        return list(csv.DictReader(line for line in lines if not line.startswith("#")))


@pytest.fixture
def quiet_environment(monkeypatch: pytest.MonkeyPatch) -> Iterator[None]:
    """No setting of this machine leaks into a test."""
    for name in list(os.environ):
        if name.startswith("SKYLAG_") and name != "SKYLAG_OPEN_DATA":
            monkeypatch.delenv(name)
    yield
