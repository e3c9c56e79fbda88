"""Who may do what, how often, and how much: keys, rates, and the folder for what people send.

A key is shown once, when it is made; only its hash is kept.  It holds 256 random bits, so that a plain hash cannot be
guessed back (common practice for keys that are not chosen by people).  A name that somebody sends never becomes a
path: it lies as text in a hidden note beside the file, so that who sent it is told of it by that name.  The clock is
handed in.
"""

import contextlib
import hashlib
import os
import re
import secrets
import shutil
import threading
from collections import Counter
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from skylag.archive import Archive
from skylag.archive.keys import SCOPES
from skylag.errors import Missing, NotEnough, Refused
from skylag.formats.glance import glance

_PREFIX = "skylag-"
_NOTE = ".sent"  # ends the name of the note that tells under which name a file was sent
_BATCH = re.compile(r"[0-9a-f]{32}", re.ASCII)
# What of a usual file name tells the receiver: the long and the short names of the RINEX descriptions.
_LONG_NAME = re.compile(r"([A-Z0-9]{4}\d{2}[A-Z]{3})_[A-Za-z0-9_.]*", re.ASCII)
_SHORT_NAME = re.compile(r"([A-Za-z0-9]{4}\d{3}[0-9a-xA-X]\d{0,2})\.[A-Za-z0-9.]*", re.ASCII)


# ---------------------------------------------------------------------------------------------- keys


def make_key(archive: Archive, name: str, scope: str, now: np.datetime64) -> str:
    """A new key, kept as its hash; the one time it can be seen."""
    key = _PREFIX + secrets.token_urlsafe(32)
    archive.keys.add(name, scope, hash_of(key), now)
    return key


def hash_of(key: str) -> str:
    """The hash under which a key is kept."""
    return hashlib.sha256(key.encode("utf-8", "surrogatepass")).hexdigest()


def allows(archive: Archive, key: str, scope: str) -> bool | None:
    """Whether a key may do what the scope says; None where it is no good key at all."""
    if not key.startswith(_PREFIX) or len(key) > 200:
        return None
    found = archive.keys.scope_of(hash_of(key))
    return None if found is None else SCOPES.index(found) >= SCOPES.index(scope)


# ---------------------------------------------------------------------------------------------- rates


class Rates:
    """How often each of many callers may do something: `burst` at once, then `per_s` in the long run.

    A bucket per caller that fills with time; callers that were quiet long enough to have a full one are forgotten.
    """

    def __init__(self, per_s: float, burst: float, most_callers: int = 10_000) -> None:
        self._per_s, self._burst, self._most = per_s, burst, most_callers
        self._levels: dict[str, tuple[float, float]] = {}  # caller -> level, when
        self._lock = threading.Lock()

    def wait_s(self, caller: str, now_s: float, cost: float = 1.0) -> float:
        """Take `cost` from the caller's bucket; 0 where it was there, else seconds until it will be (none is taken)."""
        with self._lock:
            level, since = self._levels.get(caller, (self._burst, now_s))
            level = min(self._burst, level + max(0.0, now_s - since) * self._per_s)
            if level < cost:
                self._levels[caller] = (level, now_s)
                return (cost - level) / self._per_s
            if len(self._levels) >= self._most and caller not in self._levels:
                self._forget(now_s)
            self._levels[caller] = (level - cost, now_s)
            return 0.0

    def level(self, caller: str, now_s: float) -> float:
        """How often the caller may at once."""
        level, since = self._levels.get(caller, (self._burst, now_s))
        return min(self._burst, level + max(0.0, now_s - since) * self._per_s)

    def _forget(self, now_s: float) -> None:
        full = [c for c, (level, since) in self._levels.items() if level + (now_s - since) * self._per_s >= self._burst]
        for caller in full or list(self._levels)[: self._most // 10 + 1]:
            del self._levels[caller]


class AtOnce:
    """How many questions that cost much may be at work at once: in all, and of one caller."""

    def __init__(self, total: int, each: int) -> None:
        self._total, self._each = total, each
        self._at_work: Counter[str] = Counter()
        self._lock = threading.Lock()

    @contextlib.contextmanager
    def place(self, caller: str) -> Iterator[bool]:
        """Whether there is a place for one more, which is the caller's until the block ends."""
        with self._lock:
            free = self._at_work.total() < self._total and self._at_work[caller] < self._each
            if free:
                self._at_work[caller] += 1
        try:
            yield free
        finally:
            with self._lock:
                if free:
                    self._at_work[caller] -= 1
                if not self._at_work[caller]:
                    del self._at_work[caller]


# ---------------------------------------------------------------------------------------------- what is sent


@dataclass(frozen=True)
class Limits:
    """How much may be sent: one file, one batch, files of a batch; so much room stays on the disk."""

    file_bytes: int = 512 * 2**20
    batch_bytes: int = 8 * 2**30
    batch_files: int = 2000
    spare_bytes: int = 2**30


@dataclass(frozen=True)
class Received:
    """A file that was sent: the name it was sent under, the name it is kept under, its kind, size and hash.

    marker, day  of an observation file, as far as its header tells: else "" and None
    """

    name: str
    kept_as: str
    kind: str
    size: int
    sha256: str
    marker: str = ""
    day: np.datetime64 | None = None


def inbox_folder(archive: Archive) -> Path:
    """Where what people send lies: beside the slant tables."""
    return archive.slant_folder.with_name(f"{archive.slant_folder.name}.inbox")


class Inbox:
    """A folder of batches; each batch a folder of files that were sent together."""

    def __init__(self, folder: Path, limits: Limits | None = None) -> None:
        self._folder, self.limits = folder, limits or Limits()

    def open_batch(self) -> str:
        """A new, empty batch; gives its name, which cannot be guessed."""
        name = secrets.token_hex(16)
        (self._folder / name).mkdir(parents=True, mode=0o700)
        return name

    def path_of(self, batch: str) -> Path:
        """The folder of a batch.  Raises Missing for any name that was not given by `open_batch`."""
        if not _BATCH.fullmatch(batch) or not (self._folder / batch).is_dir():
            raise Missing("there is no such batch of files; open a new one", what="batch", nearest=None)
        return self._folder / batch

    def receive(self, batch: str, name: str, announced: int | None) -> "Receiving":
        """Begin to take a file; `announced` bytes are to come, None where that is not told."""
        folder, limits = self.path_of(batch), self.limits
        there = []
        for path in folder.iterdir():
            if path.name.endswith(_NOTE):
                continue
            with contextlib.suppress(FileNotFoundError):  # another file of the batch has just been put in its place
                there.append(path.stat().st_size)
        room = min(limits.file_bytes, limits.batch_bytes - sum(there))
        if len(there) >= limits.batch_files:
            raise Refused(
                f"a batch holds at most {limits.batch_files} files; begin another",
                name="files", value=len(there), allowed=limits.batch_files,
            )  # fmt: skip
        free = shutil.disk_usage(folder).free - limits.spare_bytes
        if free < (announced or 0):
            raise NotEnough(
                "the disk of the server has no room for this file; ask whoever runs it to make room",
                had=max(free, 0), needed=announced or 1, where="disk",
            )  # fmt: skip
        if announced is not None and announced > room:
            raise _too_much(announced, room)
        return Receiving(folder, name, min(room, free))


def _too_much(size: int, room: int) -> Refused:
    return Refused(
        f"the file has {size} bytes or more, {max(room, 0)} are taken here; compress it, or split it by hours",
        name="size", value=size, allowed=max(room, 0),
    )  # fmt: skip


class Receiving:
    """A file on its way: `write` its parts, then `finish`; or `abandon` it, which leaves nothing."""

    def __init__(self, folder: Path, name: str, room: int) -> None:
        self._folder, self._name, self._room = folder, name, room
        self._passing = folder / f".coming-{secrets.token_hex(8)}"
        self._file = self._passing.open("xb")
        self._size, self._hash = 0, hashlib.sha256()

    def write(self, part: bytes) -> None:
        """Raises Refused as soon as more comes than is taken."""
        self._size += len(part)
        if self._size > self._room:
            self.abandon()
            raise _too_much(self._size, self._room)
        self._hash.update(part)
        self._file.write(part)

    def finish(self) -> Received:
        """Look what it is and give it a name.  Raises Refused for what no network day can use."""
        self._file.flush()
        os.fsync(self._file.fileno())
        self._file.close()
        seen = glance(self._passing)
        kind = seen.kind
        if kind in ("unknown", "empty"):
            self.abandon()
            raise Refused(
                f"this file is {'empty' if kind == 'empty' else 'of no kind that is known'}; "
                "send RINEX observation or navigation files, SP3 or bias files, compressed as you have them",
                name="file", value=kind, allowed="RINEX, SP3, Bias-SINEX",
            )  # fmt: skip
        sha256 = self._hash.hexdigest()
        kept_as = kept_name(self._name, sha256)
        shown = "".join(letter for letter in self._name if letter.isprintable()).strip()
        if shown:
            _note_of(self._folder / kept_as).write_text(shown, encoding="utf-8")
        self._passing.replace(self._folder / kept_as)
        return Received(self._name, kept_as, kind, self._size, sha256, seen.marker, seen.day)

    def abandon(self) -> None:
        """Leave nothing of it."""
        self._file.close()
        self._passing.unlink(missing_ok=True)


def _note_of(path: Path) -> Path:
    """Where the name lies under which a kept file was sent."""
    return path.with_name(f".{path.name}{_NOTE}")


def sent_names(paths: Iterable[Path]) -> dict[str, str]:
    """Path of a kept file -> the name it was sent under; only of files that were sent.  Folders are looked into."""
    names = {}
    for path in paths:
        for one in path.iterdir() if path.is_dir() else (path,):
            with contextlib.suppress(OSError):
                names[str(one)] = _note_of(one).read_text(encoding="utf-8")
    return names


def by_sent_names(text: str, names: Mapping[str, str]) -> str:
    """A text with the names that files were sent under in place of where they lie on the server."""
    for path, name in names.items():
        text = text.replace(path, name)
    return text


def kept_name(name: str, sha256: str) -> str:
    """The name a file is kept under: its hash, after what tells the receiver where the name is a usual one.

    Of a foreign name only letters and digits at fixed places are taken, so it can name nothing outside the folder.
    """
    for usual, between in ((_LONG_NAME, "_"), (_SHORT_NAME, ".")):
        match = usual.fullmatch(name)
        if match:
            return f"{match.group(1)}{between}{sha256}"
    return sha256
