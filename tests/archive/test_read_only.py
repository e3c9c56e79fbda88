"""An archive that can be read and not written: said in words, nothing lost, and good again when rights are back."""

import contextlib
import os
import shutil
import subprocess
import sys
import tempfile
import threading
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import sqlalchemy as sa
from fastapi.testclient import TestClient
from tests.builders import REGION, STORM_DAY, invented_day

from skylag.archive import Archive, open_archive
from skylag.errors import SkylagError
from skylag.jobs.board import Worker, process_name
from skylag.tables import Products
from skylag.web.access import Access
from skylag.web.app import create_app

T0 = np.datetime64("2031-05-12T08:00:00", "ns")
NOBODY = 65534
ROOT = Path(__file__).resolve().parents[2]
# Rights do not hold root, who therefore turns into nobody; that is for a whole process, so these tests have their own.
ALONE = "SKYLAG_TEST_AS_NOBODY"
OWN_PROCESS = os.geteuid() == 0 and ALONE not in os.environ


@pytest.fixture(params=["postgresql"] if OWN_PROCESS else ["sqlite", "postgresql"])
def archive_place(request: pytest.FixtureRequest, tmp_path: Path) -> str:
    """Where a new, empty archive can be opened."""
    if request.param == "sqlite":
        return str(tmp_path / "archive.sqlite")
    return f"{request.getfixturevalue('postgres_server').empty_database()}&slant_folder={tmp_path / 'slants'}"


@pytest.mark.skipif(not OWN_PROCESS, reason="this process has no rights beyond those of files, or is the one meant")
def test_an_archive_of_files_in_a_process_of_its_own() -> None:
    done = subprocess.run(
        [sys.executable, "-m", "pytest", "-q", "-p", "no:cacheprovider", "-k", "sqlite", __file__],
        cwd=ROOT, env={**os.environ, ALONE: "1"}, capture_output=True, text=True, check=False, timeout=300,
    )  # fmt: skip
    assert done.returncode == 0 and "4 passed" in done.stdout, done.stdout + done.stderr
    assert os.geteuid() == 0


@pytest.fixture(scope="module")
def day() -> Products:
    return invented_day(STORM_DAY, satellites=2, step_minutes=120)


@contextlib.contextmanager
def without_rights(folder: Path) -> Iterator[None]:
    """The system itself lets this process read a folder and all in it, and write nothing there."""
    there = [folder, *folder.rglob("*")]
    modes = {path: path.stat().st_mode for path in there}
    for path in there:
        path.chmod(0o555 if path.is_dir() else 0o444)
    process_name()  # reads what later it may not
    root = os.geteuid() == 0
    if root:  # who is not held by rights
        assert ALONE in os.environ, "all threads of a process change with it"
        os.seteuid(NOBODY)
    try:
        yield
    finally:
        if root:
            os.seteuid(0)
        for path, mode in modes.items():
            if path.exists():
                path.chmod(mode)


@contextlib.contextmanager
def read_only_server(place: str) -> Iterator[None]:
    """New connections to the database of a PostgreSQL archive may only read."""
    url = sa.make_url(place.split("&slant_folder")[0]).set(drivername="postgresql+psycopg")
    engine = sa.create_engine(url, isolation_level="AUTOCOMMIT")

    def say(value: str) -> None:
        with engine.connect() as connection:
            connection.exec_driver_sql("SET default_transaction_read_only = off")
            connection.exec_driver_sql(f'ALTER DATABASE "{url.database}" SET default_transaction_read_only = {value}')

    say("on")
    try:
        yield
    finally:
        say("off")
        engine.dispose()


@pytest.fixture
def read_only(archive_place: str, day: Products) -> Iterator[Archive]:
    """An archive with a day and a waiting task, on SQLite and PostgreSQL, opened while nothing can be written; after
    the test it is looked at with all rights: what was there is there, and nothing else."""
    with contextlib.ExitStack() as stack:
        if "://" in archive_place:
            place = archive_place
            without = read_only_server(place)
        else:
            folder = Path(tempfile.mkdtemp())  # one that anybody may walk through, unlike pytest's own
            folder.chmod(0o755)
            stack.callback(shutil.rmtree, folder)
            place = str(folder / "archive.sqlite")
            without = without_rights(folder)
        with open_archive(place) as archive:
            archive.save(day)
            archive.tasks.add("tiny", "waits", {"number": 1}, T0)
            with without, open_archive(place) as opened:
                yield opened
        with open_archive(place) as archive:
            assert archive.days()[0].versions == (1,) and archive.check() == ()
            assert [task.state for task in archive.tasks.newest()] == ["waiting"]
            assert archive.save(day) == 2, "with rights it goes on"


READ_ONLY = "read-?only|Permission denied"


def test_what_is_there_can_be_read(read_only: Archive, day: Products) -> None:
    assert read_only.regions() == (REGION.name,)
    np.testing.assert_array_equal(read_only.fields(REGION.name, STORM_DAY).vtec, day.fields.vtec)
    assert len(read_only.samples(REGION.name, STORM_DAY).rays) == len(day.samples.rays)
    assert read_only.check() == ()


def test_each_change_is_refused_in_words(read_only: Archive, day: Products) -> None:
    changes: list[Any] = [
        lambda: read_only.save(day),
        lambda: read_only.pin(REGION.name, STORM_DAY, 1),
        lambda: read_only.tasks.add("tiny", "more", {"number": 2}, T0),
        lambda: read_only.tasks.cancel(1, T0),
        lambda: read_only.keys.add("office", "read", "0" * 64, T0),
        lambda: read_only.notices.tell("s", "x", {"start_ns": 0, "end_ns": 1}, ["{}"], 1.0, T0),
    ]
    for change in changes:
        with pytest.raises(SkylagError, match=READ_ONLY) as told:
            change()
        assert "nothing was" in told.value.message and "check" in told.value.message


def test_over_http_it_is_said_too(read_only: Archive) -> None:
    no_page = Path(tempfile.gettempdir()) / "no page here"
    app = create_app(read_only, clock=lambda: T0, frontend=no_page, access=Access(writing="open"))
    with TestClient(app, raise_server_exceptions=False) as client:
        assert client.get("/healthz").status_code == 200
        assert client.get(f"/api/days/{REGION.name}/{STORM_DAY}").status_code == 200
        answer = client.put(f"/api/pins/{REGION.name}/{STORM_DAY}?version=1")
        assert answer.status_code == 503 and "nothing was changed" in answer.json()["error"]


def test_a_worker_waits_until_it_may_write(read_only: Archive) -> None:
    log: list[tuple[str, dict[str, Any]]] = []
    stop = threading.Event()

    def note(event: str, **facts: Any) -> None:
        log.append((event, facts))
        if len(log) == 3:
            stop.set()

    worker = Worker(read_only, "threads:1", lambda: T0, log=note)
    assert worker.run(stop, idle_s=0.01, away_s=0.01) == 0
    assert [event for event, _ in log] == ["archive away"] * 3 and "read" in log[0][1]["why"]
    with pytest.raises(SkylagError, match=READ_ONLY):
        worker.run(threading.Event(), until_empty=True)
