"""What every test may ask for.  Heavy things are made once in a session."""

import csv
import os
import shutil
from collections.abc import Callable, Generator, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from tests.journeys.newcomer import Newcomer, demo
from tests.postgres_server import NoServer, PostgresServer

from skylag.archive import Archive, open_archive

ROOT = Path(__file__).resolve().parent.parent
EVIDENCE_ROWS: dict[tuple[str, str], dict[str, str]] = {}


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--browser", action="store_true", help="run the tests that drive a real Chromium")


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    if config.getoption("--browser"):
        return
    skip = pytest.mark.skip(reason="needs --browser and a Chromium")
    for item in items:
        if "browser" in item.keywords:
            item.add_marker(skip)


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
        EVIDENCE_ROWS[(request.node.nodeid.split("::")[0], subject)] = {
            "subject": subject,
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
    """Write the table of outside checks: rows of files not run this time are kept from the last run."""
    if not EVIDENCE_ROWS:
        return
    path = ROOT / "tests" / "EVIDENCE.md"
    ran = {str(item.nodeid.split("::")[0]) for item in session.items}
    write_evidence(path, EVIDENCE_ROWS, ran)


_COLUMNS = ("test file", "subject", "source", "expected", "got", "tolerance", "unit", "verdict")


def write_evidence(path: Path, rows: dict[tuple[str, str], dict[str, str]], ran: set[str]) -> None:
    """Merge new rows into the table on disk, sorted by file and subject."""
    merged: dict[tuple[str, str], dict[str, str]] = {}
    if path.is_file():
        for line in path.read_text(encoding="utf-8").splitlines():
            cells = [c.strip().replace("&#124;", "|") for c in line.strip().strip("|").split("|")]
            if len(cells) == len(_COLUMNS) and cells[0].startswith("tests/"):
                old = dict(zip(_COLUMNS, cells, strict=True))
                if old["test file"] not in ran and (path.parent.parent / old["test file"]).is_file():
                    merged[(old["test file"], old["subject"])] = old
    for (file, subject), row in rows.items():
        merged[(file, subject)] = {"test file": file, **row}
    lines = [
        "# Checks against the outside world",
        "",
        "Written by the test run. Each row: what was checked, the published source (or \"common practice\", or \"from",
        "memory\"), the expected value, the value got, the tolerance.",
        "",
        "| " + " | ".join(_COLUMNS) + " |",
        "|" + "---|" * len(_COLUMNS),
    ]
    for key in sorted(merged):
        lines.append("| " + " | ".join(merged[key][c].replace("|", "&#124;") for c in _COLUMNS) + " |")
    text = "\n".join(lines) + "\n"
    if not path.is_file() or path.read_text(encoding="utf-8") != text:
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
