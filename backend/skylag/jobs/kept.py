"""Files read and receiver-days computed already, kept on disk, so that only what changed is computed again.

`KeepingExecutor` stands before another executor: a receiver-day whose files, orbits, choices and program are the same
as before is given at once, to the bit; so are, to one that is told so, hours whose rays hardly moved
(`closed_hours`).  Any other work passes through.  What is kept may be thrown away at any time.  Kept as plain arrays
and JSON: nothing that is read can run.
"""

import contextlib
import hashlib
import io
import json
import os
import tempfile
import zipfile
from collections.abc import Callable, Collection, Mapping, Sequence
from concurrent.futures import Executor, Future
from dataclasses import asdict, dataclass, fields, is_dataclass
from functools import cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

import skylag
from skylag import formats
from skylag.chain import ReceiverDay
from skylag.ionosphere.field import Hour
from skylag.jobs import work
from skylag.jobs.closed_hours import ClosedHours
from skylag.tables import Problem, Rays, Reading, Receiver, SignalPair, Signals

if TYPE_CHECKING:
    from skylag.archive import Archive  # workers need no database


class KeepingExecutor(Executor):
    """An executor that keeps receiver-days in a folder, and hours of maps in memory where it is given a place for them.

    Its user is one thread.
    """

    def __init__(self, inner: Executor, folder: Path, hours: ClosedHours | None = None) -> None:
        self._inner, self._folder = inner, folder
        self.hours = hours  # None: every hour is made
        self._pending: set[Future[Any]] = set()
        self._sources: tuple[Any, str] | None = None
        self.given, self.computed = 0, 0  # receiver-days given from the folder, and computed
        self.hours_given, self.hours_made = 0, 0  # hours of maps

    def submit(self, function: Callable[..., Any], /, *arguments: Any, **named: Any) -> Future[Any]:
        """As any executor does."""
        if self.hours is not None and function in (work.hour_unit, work.left_out_unit):
            return self._hour(self.hours, function, *arguments)
        if function is not work.receiver_unit or named:
            return self._watched(self._inner.submit(function, *arguments, **named))
        mark = self._mark(*arguments)
        there = read(self._folder, mark) if mark else None
        if there is not None:
            self.given += 1
            return _done(there)
        self.computed += 1
        more = (ReadOnce(self._folder),) if len(arguments[1]) > 1 else ()  # of one file the receiver-day is kept itself
        future = self._watched(self._inner.submit(function, *arguments, *more))
        if mark:
            future.add_done_callback(lambda one: _keep(self._folder, mark, one))
        return future

    def _hour(self, hours: ClosedHours, unit: Callable[[Hour], Any], hour: Hour) -> Future[Any]:
        there = hours.given(unit.__name__, hour)
        maps = unit is work.hour_unit
        self.hours_given += maps and there is not None
        self.hours_made += maps and there is None
        if there is not None:
            return _done(there)
        age = hours.age
        future = self._watched(self._inner.submit(unit, hour))

        def keep(one: Future[Any]) -> None:  # in a thread of the executor, perhaps after result() returned
            if not one.cancelled() and one.exception() is None:
                hours.keep(unit.__name__, hour, one.result(), age)

        future.add_done_callback(keep)
        return future

    def drop(self) -> None:
        """Cancel what has not begun."""
        for future in tuple(self._pending):
            future.cancel()

    def _watched(self, future: Future[Any]) -> Future[Any]:
        self._pending.add(future)
        future.add_done_callback(self._pending.discard)
        return future

    def _mark(
        self, key: str, paths: Sequence[str], day: np.datetime64, sources: Any, choices: Any, shell_height_m: float
    ) -> str:
        """What names a receiver-day: everything that its result depends on; "" where a file cannot be read."""
        if self._sources is None or self._sources[0] is not sources:
            self._sources = (sources, digest(sources))
        try:
            files = [(path, hashlib.sha256(Path(path).read_bytes()).hexdigest()) for path in paths]
        except OSError:
            return ""
        facts = [program(), key, files, str(day), self._sources[1], repr(choices), shell_height_m]
        return hashlib.sha256(json.dumps(facts).encode()).hexdigest()


@dataclass(frozen=True)
class ReadOnce:
    """Reads as `formats.read` does, and keeps what an observation file holds: hours of a day are read once each."""

    folder: Path

    def __call__(self, path: Path, *, wanted: Mapping[str, Collection[str]], thin_to_s: float | None) -> Reading:
        """Raises FormatError as `formats.read` does."""
        codes = {system: sorted(wanted[system]) for system in sorted(wanted)}
        try:
            facts = [program(), hashlib.sha256(path.read_bytes()).hexdigest(), str(path), codes, thin_to_s]
        except OSError:
            return formats.read(path, wanted=wanted, thin_to_s=thin_to_s)  # which says what is wrong
        mark = hashlib.sha256(json.dumps(facts).encode()).hexdigest()
        there = read_signals(self.folder, mark)
        if there is not None:
            return there
        reading = formats.read(path, wanted=wanted, thin_to_s=thin_to_s)
        if isinstance(reading.table, Signals):
            with contextlib.suppress(OSError):  # a full disk only costs the time to read it again
                write_signals(self.folder, mark, reading.table, reading.problems)
        return reading


def _done(result: Any) -> Future[Any]:
    done: Future[Any] = Future()
    done.set_result(result)
    return done


def digest(value: Any) -> str:
    """A hash of tables made of arrays, numbers and texts."""
    found = hashlib.sha256()

    def add(one: Any) -> None:
        if isinstance(one, np.ndarray):
            found.update(f"{one.dtype.str}{one.shape}".encode())
            found.update(np.ascontiguousarray(one).tobytes())
        elif is_dataclass(one):
            found.update(type(one).__name__.encode())
            for item in fields(one):
                add(getattr(one, item.name))
        elif isinstance(one, dict):
            for name, part in one.items():
                add(name)
                add(part)
        elif isinstance(one, list | tuple):
            found.update(str(len(one)).encode())
            for part in one:
                add(part)
        else:
            found.update(repr(one).encode())

    add(value)
    return found.hexdigest()


@cache
def program() -> str:
    """A hash of this program's own text: a change of it makes all that was kept void."""
    folder, found = Path(skylag.__file__).parent, hashlib.sha256()
    for path in sorted(folder.rglob("*.py")):
        found.update(f"{path.relative_to(folder)}".encode() + path.read_bytes())
    return found.hexdigest()


def _path(folder: Path, mark: str) -> Path:
    return folder / mark[:2] / f"{mark}.npz"


def _keep(folder: Path, mark: str, future: Future[Any]) -> None:
    if not future.cancelled() and future.exception() is None and future.result().day is not None:
        try:
            write(folder, mark, future.result())
        except OSError:
            return  # a full disk only costs the time to compute it again


def write(folder: Path, mark: str, result: work.ReceiverResult) -> None:
    """Keep a receiver-day; a half-written file never has its name."""
    made = result.day
    assert made is not None  # nothing else is kept
    rays = made.rays
    facts = {
        "key": result.key,
        "receiver": asdict(made.receiver),
        "notes": made.notes,
        "facts": dict(made.facts),
        "problems": [asdict(one) for one in result.problems],
        "left_out": [asdict(one) for one in result.left_out],
        "receivers": [asdict(one) for one in rays.receivers],
        "pairs": [asdict(one) for one in rays.pairs],
        "shell_height_m": rays.shell_height_m,
        "interval_s": rays.interval_s,
    }
    _write(folder, mark, facts, {name: getattr(rays, name) for name in (*Rays.COLUMNS, "satellites")})


def read(folder: Path, mark: str) -> work.ReceiverResult | None:
    """A kept receiver-day; None where there is none or it is damaged."""
    found = _read(folder, mark)
    if found is None:
        return None
    facts, arrays = found
    rays = Rays(
        receivers=tuple(_receiver(one) for one in facts["receivers"]),
        pairs=tuple(SignalPair(**one) for one in facts["pairs"]),
        shell_height_m=facts["shell_height_m"], interval_s=facts["interval_s"], **arrays,
    )  # fmt: skip
    return work.ReceiverResult(
        key=facts["key"],
        day=ReceiverDay(_receiver(facts["receiver"]), rays, tuple(facts["notes"]), facts["facts"]),
        problems=tuple(Problem(**one) for one in facts["problems"]),
        left_out=tuple(work.LeftOut(**one) for one in facts["left_out"]),
    )


def write_signals(folder: Path, mark: str, signals: Signals, problems: Sequence[Problem]) -> None:
    """Keep what an observation file holds."""
    facts = {
        "receiver": asdict(signals.receiver),
        "values": list(signals.values),
        "lock": list(signals.lock),
        "channels": dict(signals.channels),
        "interval_s": signals.interval_s,
        "problems": [asdict(one) for one in problems],
    }
    shape = (0, len(signals.times), len(signals.satellites))
    arrays = {
        "times": signals.times, "satellites": signals.satellites, "resets": signals.resets,
        "values": np.stack(list(signals.values.values())) if signals.values else np.zeros(shape),
        "lock": np.stack(list(signals.lock.values())) if signals.lock else np.zeros(shape, dtype=np.uint8),
    }  # fmt: skip
    _write(folder, mark, facts, arrays)


def read_signals(folder: Path, mark: str) -> Reading | None:
    """What an observation file holds, the problems of its reading too; None where it is not kept, or damaged."""
    found = _read(folder, mark)
    if found is None:
        return None
    facts, arrays = found
    signals = Signals(
        receiver=_receiver(facts["receiver"]), times=arrays["times"], satellites=arrays["satellites"],
        values=dict(zip(facts["values"], arrays["values"], strict=True)),
        lock=dict(zip(facts["lock"], arrays["lock"], strict=True)),
        channels=facts["channels"], resets=arrays["resets"], interval_s=facts["interval_s"],
    )  # fmt: skip
    return Reading(signals, tuple(Problem(**one) for one in facts["problems"]))


def _write(folder: Path, mark: str, facts: dict[str, Any], arrays: dict[str, Any]) -> None:
    """Write facts and arrays; a half-written file never has its name."""
    content = io.BytesIO()
    np.savez(content, facts=np.frombuffer(json.dumps(facts).encode(), dtype=np.uint8), **arrays)
    goal = _path(folder, mark)
    goal.parent.mkdir(parents=True, exist_ok=True)
    handle, passing = tempfile.mkstemp(dir=goal.parent, prefix="writing-")
    try:
        with os.fdopen(handle, "wb") as file:
            file.write(content.getbuffer())
        Path(passing).replace(goal)
    finally:
        Path(passing).unlink(missing_ok=True)


def _read(folder: Path, mark: str) -> tuple[dict[str, Any], dict[str, Any]] | None:
    """Facts and arrays as they were written; None where they are not there or damaged."""
    path = _path(folder, mark)
    try:
        with path.open("rb") as file, np.load(file, allow_pickle=False) as there:
            arrays = {name: there[name] for name in there.files}
        with contextlib.suppress(OSError):
            os.utime(path)  # it is of use still
        return json.loads(bytes(arrays.pop("facts"))), arrays
    except (OSError, ValueError, EOFError, KeyError, zipfile.BadZipFile):
        return None


def _receiver(facts: dict[str, Any]) -> Receiver:
    x, y, z = facts["position_m"]
    return Receiver(facts["name"], (x, y, z), facts["antenna"], facts["type"])


def folder_of(archive: "Archive") -> Path:
    """Where receiver-days of an archive are kept: beside its slant tables."""
    return archive.slant_folder.with_name(f"{archive.slant_folder.name}.receivers")


def tidy(folder: Path, older_than_s: float, now_s: float) -> int:
    """Throw away what was last of use longer ago than a span, by the files' own times; gives how many."""
    gone = 0
    for path in folder.rglob("*") if folder.is_dir() else ():
        with contextlib.suppress(FileNotFoundError):  # another has just thrown it away
            if path.is_file() and now_s - path.stat().st_mtime > older_than_s:
                path.unlink()
                gone += 1
    return gone
