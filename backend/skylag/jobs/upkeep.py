"""Throwing away what nobody needs any more: what was kept to save time, what was sent and is computed, strays.

Ages are told by the files' own times against a file written now, so neither a clock of another machine nor one that is
set by hand decides.  Nothing that a stored day, a waiting or a running task names is ever touched, and no file of
a watched folder.
"""

import shutil
import tempfile
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from skylag.archive import Archive
from skylag.errors import SkylagError
from skylag.jobs import guard, kept

_DAY_S = 86_400.0


@dataclass(frozen=True)
class Ages:
    """When what goes [s].

    kept_s   receiver-days and read files, after they were last of use
    sent_s   files that were sent, after the last of them came, once no task waits for them or runs
    stray_s  slant tables of no day, after they were written: a save that is under way has written its own already
    every_s  how often is looked
    """

    kept_s: float = 3 * _DAY_S
    sent_s: float = 30 * _DAY_S
    stray_s: float = 3600.0
    every_s: float = 900.0


@dataclass(frozen=True)
class Gone:
    """How many files were thrown away: kept to save time, of batches that were sent, slant tables of no day."""

    kept: int
    sent: int
    strays: int


def tidy(archive: Archive, ages: Ages | None = None) -> Gone:
    """Throw away what is old enough.  Raises SkylagError or OSError where archive or disk cannot be reached."""
    ages = ages or Ages()
    folder = kept.folder_of(archive)
    return Gone(
        kept.tidy(folder, ages.kept_s, _now_s(folder)) if folder.is_dir() else 0,
        _tidy_inbox(archive, ages.sent_s),
        archive.sweep(_now_s(archive.slant_folder) - ages.stray_s) if archive.slant_folder.is_dir() else 0,
    )


class Upkeep:
    """Tidies now and then, for a loop that goes on; a failure is told and never stops the loop."""

    def __init__(self, archive: Archive, log: Callable[..., None], ages: Ages | None = None) -> None:
        self._archive, self._log, self._ages = archive, log, ages or Ages()
        self._last_s: float | None = None

    def turn(self) -> None:
        """Tidy, unless that was done a short while ago."""
        now_s = time.monotonic()
        if self._last_s is not None and now_s - self._last_s < self._ages.every_s:
            return
        self._last_s = now_s
        try:
            gone = tidy(self._archive, self._ages)
        except (SkylagError, OSError) as failure:
            self._log("not tidied", why=str(failure))
            return
        if gone != Gone(0, 0, 0):
            self._log("tidied", **vars(gone))


def _now_s(folder: Path) -> float:
    """The present by the clock of the folder's own file system."""
    with tempfile.NamedTemporaryFile(dir=folder, prefix=".now-") as file:
        return Path(file.name).stat().st_mtime


def _tidy_inbox(archive: Archive, older_than_s: float) -> int:
    folder = guard.inbox_folder(archive)
    if not folder.is_dir():
        return 0
    now_s, gone = _now_s(folder), 0
    old = [batch for batch in folder.iterdir() if batch.is_dir() and now_s - _latest_s(batch) > older_than_s]
    if not old:
        return 0
    going = archive.tasks.newest(10**9, ("waiting", "running"))
    named = {str(Path(path).parent) for task in going for path in task.spec.get("paths", ())}
    for batch in old:
        if str(batch) not in named and str(batch.resolve()) not in named:
            gone += sum(1 for path in batch.iterdir() if not path.name.startswith("."))
            shutil.rmtree(batch, ignore_errors=True)
    return gone


def _latest_s(batch: Path) -> float:
    """When the last thing happened to a batch."""
    times = [batch.stat().st_mtime]
    for path in batch.iterdir():
        try:
            times.append(path.stat().st_mtime)
        except FileNotFoundError:  # it has just got its name
            return float("inf")
    return max(times)
