"""What nobody needs any more is thrown away, and nothing else."""

import os
import threading
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from tests.builders import REGION, STORM_DAY, invented_day

from skylag.archive import Archive, open_archive, slants
from skylag.errors import SkylagError
from skylag.jobs import board, guard, kept, upkeep
from skylag.jobs.upkeep import Ages, Gone, Upkeep, tidy

T0 = np.datetime64("2031-05-12T08:00:00", "ns")
DAY_S = 86_400.0
NOTHING = Gone(0, 0, 0)


def age(path: Path, days: float) -> None:
    """As if a file or folder had last been touched so long ago."""
    then = path.stat().st_mtime - days * DAY_S
    os.utime(path, (then, then))


def files(folder: Path) -> set[str]:
    return {path.name for path in folder.rglob("*") if path.is_file()}


def test_an_empty_archive_has_nothing_to_tidy(archive: Archive) -> None:
    assert tidy(archive) == NOTHING


def test_slant_tables_of_replaced_versions_go_after_an_hour(archive: Archive) -> None:
    """A live day saved five times leaves three tables that no version names; those of the newest two stay."""
    for seed in range(5):
        archive.save(invented_day(STORM_DAY, satellites=2, step_minutes=120, seed=seed), provisional=True)
    folder = archive.slant_folder
    (folder / "writing-x.parquet").write_bytes(b"half")
    assert len(files(folder)) == 6 and tidy(archive) == NOTHING, "they might be of saves under way"
    for path in folder.rglob("*.parquet"):
        age(path, 0.05)
    assert tidy(archive) == Gone(0, 0, 4)
    (head,) = archive.days()
    assert files(folder) == {
        f"{archive.day(REGION.name, STORM_DAY, version).slant_sha256}.parquet" for version in head.versions
    }
    assert archive.check() == () and len(archive.samples(REGION.name, STORM_DAY).rays) > 0


def test_a_save_whose_slant_table_was_swept_away_writes_it_anew(archive: Archive, monkeypatch: Any) -> None:
    """Another process sweeps between the writing of a slant table and the transaction that names it."""
    real, swept = slants.write, []

    def write(samples: Any, folder: Path) -> str:
        sha256 = real(samples, folder)
        if not swept:
            swept.append(archive.sweep(2.0**60))
        return sha256

    monkeypatch.setattr(slants, "write", write)
    archive.save(invented_day(STORM_DAY, satellites=2, step_minutes=120))
    assert swept == [1] and archive.check() == ()


def test_saves_and_sweeps_side_by_side_lose_nothing(archive_place: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """Sweeps that spare only what is not finished, in another connection, while the same days are saved over and over.
    Ages would spare all of them."""
    real = slants.strays
    monkeypatch.setattr(slants, "strays", lambda *what: [p for p in real(*what) if not p.name.startswith("writing-")])
    days = [invented_day(STORM_DAY, satellites=2, step_minutes=240, seed=seed) for seed in range(3)]
    stop, swept = threading.Event(), [0]
    with open_archive(archive_place) as saving, open_archive(archive_place) as sweeping:

        def sweep() -> None:
            while not stop.is_set():
                swept.append(sweeping.sweep(2.0**60))

        thread = threading.Thread(target=sweep)
        thread.start()
        try:
            for number in range(12):
                saving.save(days[number % 3], provisional=True)
        finally:
            stop.set()
            thread.join()
        assert saving.check() == () and sum(swept) > 0


def test_what_was_sent_stays_while_work_may_need_it(archive: Archive) -> None:
    inbox = guard.Inbox(guard.inbox_folder(archive))
    batches = {name: inbox.path_of(inbox.open_batch()) for name in ("waits", "runs", "done", "fresh", "unused")}
    for name, folder in batches.items():
        (folder / name).write_text("x")
        if name != "unused":
            spec = {"paths": [str(folder / name)]}
            archive.tasks.add("tiny", name, spec, T0)
    holder = "somebody"
    for _ in ("waits", "runs", "done"):
        task = archive.tasks.claim(holder, T0, 60.0, 10)
        assert task is not None
        if task.title == "waits":
            archive.tasks.fail(task.id, holder, "later", T0, T0 + np.timedelta64(1, "h"))
        if task.title == "done":
            archive.tasks.fail(task.id, holder, "no", T0, None)
    for name, folder in batches.items():
        if name != "fresh":
            age(folder / name, 31)
        age(folder, 31)
    states = {task.title: task.state for task in archive.tasks.newest()}
    assert states == {"waits": "waiting", "runs": "running", "done": "failed", "fresh": "waiting"}
    assert tidy(archive) == Gone(0, 2, 0)
    assert {name for name, folder in batches.items() if folder.is_dir()} == {"waits", "runs", "fresh"}


def test_what_was_kept_goes_when_it_is_of_no_use(archive: Archive) -> None:
    folder = kept.folder_of(archive)
    (folder / "ab").mkdir(parents=True)
    for name, days in (("old", 3.1), ("new", 2.9)):
        (folder / "ab" / f"{name}.npz").write_bytes(b"x")
        age(folder / "ab" / f"{name}.npz", days)
    assert tidy(archive) == Gone(1, 0, 0) and files(folder) == {"new.npz"}


def test_a_worker_tidies_while_it_has_nothing_to_do(archive: Archive) -> None:
    folder = kept.folder_of(archive)
    folder.mkdir(parents=True)
    (folder / "old.npz").write_bytes(b"x")
    age(folder / "old.npz", 4)
    log: list[tuple[str, dict[str, Any]]] = []
    stop = threading.Event()

    def note(event: str, **facts: Any) -> None:
        log.append((event, facts))
        stop.set()

    board.Worker(archive, "threads:1", lambda: T0, log=note).run(stop, idle_s=0.01)
    assert log == [("tidied", {"kept": 1, "sent": 0, "strays": 0})] and not files(folder)


def test_now_and_then_only_and_a_failure_is_told(archive: Archive, monkeypatch: pytest.MonkeyPatch) -> None:
    log: list[tuple[str, dict[str, Any]]] = []
    calls = []

    def broken(*_: Any) -> Gone:
        calls.append(1)
        raise SkylagError("the archive is away")

    monkeypatch.setattr(upkeep, "tidy", broken)
    one = Upkeep(archive, lambda event, **facts: log.append((event, facts)), Ages(every_s=3600))
    one.turn()
    one.turn()
    assert len(calls) == 1 and log == [("not tidied", {"why": "the archive is away"})]
