"""The queue at work: files become tasks, workers take tasks, errors are tried again, vanished workers are replaced.

A task is one network day or one outlook.  The receiver-days of a day run side by side on an executor and are kept, so
that a day that was cut off goes on where it stopped.  What a task makes, that it is done, and the outlook that follows
from a day are written in one transaction: a day is never stored twice for one task, and never half.  The clock is
handed in.
"""

import os
import socket
import threading
from collections.abc import Callable, Iterable, Mapping, Sequence
from concurrent.futures import BrokenExecutor, Executor
from contextlib import ExitStack
from dataclasses import asdict, dataclass, replace
from datetime import date
from functools import cache, partial
from pathlib import Path
from typing import Any

import numpy as np

from skylag.archive import Archive, Ending, Task, Wanted
from skylag.archive.records import region_from
from skylag.chain import Choices
from skylag.errors import FormatError, NotEnough, Refused, SkylagError, Unsolvable
from skylag.jobs import advising, guard, hindcast, kept, work
from skylag.jobs.executor import open_executor
from skylag.jobs.upkeep import Upkeep
from skylag.settings import Estimation
from skylag.tables import Products, Region

Clock = Callable[[], np.datetime64]  # present UTC
Log = Callable[..., None]  # event, facts by name

# The input itself is at fault: trying again cannot help.
HOPELESS = (FormatError, NotEnough, Unsolvable, Refused)
NETWORK_DAY, OUTLOOK = "network day", "outlook"


@dataclass(frozen=True)
class Policy:
    """How patient the queue is.

    held_s        a claim runs out so long after its holder was last heard of
    most_attempts tries that may end in an error; waits between them grow from first_wait_s by wait_factor
    most_losses   times the process may vanish in the middle
    """

    held_s: float = 60.0
    most_attempts: int = 5
    first_wait_s: float = 5.0
    wait_factor: float = 4.0
    longest_wait_s: float = 3600.0
    most_losses: int = 10
    beat_s: float = 0.5

    def wait_s(self, attempts: int) -> float:
        """Wait after the so-manieth failed try, from 1."""
        return min(self.first_wait_s * self.wait_factor ** (attempts - 1), self.longest_wait_s)


class Withdrawn(Exception):
    """The task was cancelled, or is another worker's by now."""


# ---------------------------------------------------------------------------------------------- adding


def add(
    archive: Archive,
    paths: Iterable[Path],
    *,
    now: np.datetime64,
    region: Region | None = None,
    day: date | None = None,
    choices: Choices | None = None,
    simulated: bool = False,
    estimation: Estimation | None = None,
) -> tuple[list[int], tuple[work.LeftOut, ...]]:
    """Queue the network days that files and folders hold, one task per day; gives task numbers and what is of no use.

    Navigation, orbit and bias files go with the days whose observations lie in the same folder, and with all days where
    a folder has no such files of its own.  Raises NotEnough where no observation file tells its day.
    """
    inputs = work.sort_inputs(paths)
    choices = choices or Choices()
    days: dict[str, list[str]] = {}
    for path, first in inputs.days.items():
        if first is not None and (day is None or str(first) == day.isoformat()):
            days.setdefault(str(first), []).append(path)
    if not days:
        wanted = f"of {day}" if day is not None else "that tells its day"
        raise NotEnough(
            f"no observation file {wanted} is among the inputs; give RINEX observation files or folders of them"
            + "".join(f"\n  {item}" for item in inputs.left_out),
            had=0, needed=1, where="inputs", left_out=[str(item) for item in inputs.left_out],
        )  # fmt: skip
    numbers = []
    for name, observed in sorted(days.items()):
        side = [*_beside(observed, inputs.orbits), *_beside(observed, inputs.biases)]
        spec: dict[str, Any] = {
            "paths": sorted([*observed, *side]),
            "day": name,
            "region": None if region is None else asdict(region),
            "signals": {system: list(pair) for system, pair in choices.signals.items()},
            "epoch_step_s": choices.epoch_step_s,
            "simulated": simulated,
        }
        if estimation is not None and estimation != Estimation():
            spec["estimation"] = asdict(estimation)
        files = "1 observation file" if len(observed) == 1 else f"{len(observed)} observation files"
        title = f"{name} {region.name if region else 'around its receivers'}, {files}"
        numbers.append(archive.tasks.add(NETWORK_DAY, title, spec, now))
    return numbers, inputs.left_out


def outlook_after(region: str, day: np.datetime64) -> Wanted:
    """The work that a day of a region brings about: the outlook."""
    return Wanted(OUTLOOK, f"{day} outlook of {region}", {"region": region, "day": str(day)})


def _beside(observed: Sequence[str], others: Sequence[str]) -> list[str]:
    folders = {Path(path).parent for path in observed}
    near = [path for path in others if Path(path).parent in folders]
    return near or list(others)


def region_of(facts: Mapping[str, Any] | None) -> Region | None:
    """A region from the facts of a task."""
    return None if facts is None else region_from(facts)


def compute(task: Task, executor: Executor, tell: work.Progress, archive: Archive | None = None) -> Products:
    """The products of a task; files that were sent go by the names they were sent under.

    archive  where biases of earlier days are kept, for tasks that draw upon them
    """
    spec = task.spec
    if task.kind != NETWORK_DAY:
        raise Refused(
            f"work {task.id} is of kind {task.kind!r}, which this program does not do; update the program",
            name="kind", value=task.kind, allowed=(NETWORK_DAY, OUTLOOK),
        )  # fmt: skip
    signals = {system: (pair[0], pair[1]) for system, pair in spec["signals"].items()}
    choices = Estimation(**spec.get("estimation", {})).choices(
        Choices(signals=signals, epoch_step_s=spec["epoch_step_s"])
    )
    paths = [Path(path) for path in spec["paths"]]
    names = guard.sent_names(paths)
    try:
        products = work.network_day(
            paths,
            region=region_of(spec["region"]), day=date.fromisoformat(spec["day"]), choices=choices, executor=executor,
            simulated=spec["simulated"], progress=tell,
            earlier=None if archive is None else work.earlier_biases(archive, choices.earlier_days),
        ).products  # fmt: skip
    except SkylagError as failure:
        failure.message = guard.by_sent_names(failure.message, names)
        raise
    origin = products.origin
    shown = {Path(path).name: name for path, name in names.items()}
    return replace(products, origin=replace(
        origin, warnings=tuple(guard.by_sent_names(warning, names) for warning in origin.warnings),
        inputs=tuple({**one, "name": shown.get(one["name"], one["name"])} for one in origin.inputs),
    ))  # fmt: skip


# ---------------------------------------------------------------------------------------------- working


_compute = compute  # a worker's own argument has the same name


class Worker:
    """Takes tasks one after the other.  Several may work on one archive, in threads, processes or on machines."""

    def __init__(
        self,
        archive: Archive,
        place: str,
        clock: Clock,
        policy: Policy | None = None,
        log: Log | None = None,
        compute: Callable[[Task, Executor, work.Progress], Products] | None = None,
        name: str = "",
    ) -> None:
        self._archive, self._place, self._clock = archive, place, clock
        self._policy = policy or Policy()
        self._log: Log = log or (lambda event, **facts: None)
        self._compute = compute or partial(_compute, archive=archive)
        self.name = f"{process_name()}/{name or threading.get_ident()}"

    def run(
        self, stop: threading.Event, *, until_empty: bool = False, idle_s: float = 0.5, away_s: float = 10.0
    ) -> int:
        """Work until told to stop, or until nothing is waiting or running; gives how many tasks were taken.

        Where the archive cannot be reached or written that is told every `away_s`, and work goes on when it is back; a
        run `until_empty` raises SkylagError instead.
        """
        taken, upkeep = 0, Upkeep(self._archive, self._log)
        while not stop.is_set():
            with open_executor(self._place) as executor:
                try:
                    while not stop.is_set():
                        if self.one(executor):
                            taken += 1
                            continue
                        counts = self._archive.tasks.counts()
                        if until_empty and not counts["waiting"] and not counts["running"]:
                            return taken
                        upkeep.turn()  # while there is nothing else to do
                        stop.wait(idle_s)
                except BrokenExecutor as failure:  # one of its processes was ended: take new ones
                    self._log("executor lost", worker=self.name, why=str(failure))
                except SkylagError as failure:
                    if until_empty:
                        raise
                    self._log("archive away", worker=self.name, why=failure.message)
                    stop.wait(away_s)
        return taken

    def one(self, executor: Executor) -> bool:
        """Take the next task that is due and do it; False where there is none.

        Raises BrokenExecutor, after giving the task back, where the executor is of no more use.
        """
        tasks, policy = self._archive.tasks, self._policy
        tasks.give_back([one for one in tasks.holders() if is_gone(one)], self._clock())
        task = tasks.claim(self.name, self._clock(), policy.held_s, policy.most_losses)
        if task is None:
            return False
        self._log("task begun", task=task.id, title=task.title, worker=self.name, losses=task.losses)
        keeping = kept.KeepingExecutor(executor, kept.folder_of(self._archive))
        beat = _Beat(self._archive, task, self.name, self._clock, policy)
        try:
            with ExitStack() as stack:
                stack.callback(beat.end)
                beat.start()
                if task.kind == OUTLOOK:
                    self._outlook(task, beat)
                    return True
                products = self._compute(task, keeping, beat.tell)
                beat.check()
            result = {
                "region": products.region.name, "day": str(products.day), "given": keeping.given,
                "computed": keeping.computed, "warnings": len(products.origin.warnings),
            }  # fmt: skip
            then = (outlook_after(products.region.name, products.day),) if task.kind == NETWORK_DAY else ()
            ending = Ending(task.id, self.name, self._clock(), result, then)
            version = self._archive.save(products, ending=ending)
            self._log("task done", task=task.id, title=task.title, version=version, given=keeping.given)
        except Withdrawn:
            keeping.drop()
            self._log("task withdrawn", task=task.id, title=task.title)
        except BrokenExecutor as failure:
            self._fail(task, failure)
            raise
        except Exception as failure:
            keeping.drop()
            self._fail(task, failure)
        else:
            self._prepare(task, products, version)
        return True

    def _outlook(self, task: Task, beat: "_Beat") -> None:
        """Make and keep the outlook after the newest day of a region, and the scores that are due.

        The same outlook is kept once, whoever makes it and how often; so one that was made before its task was
        cancelled or lost stays.
        """
        beat.tell("outlook", 0.0, task.spec["region"])
        made = hindcast.newest(self._archive, task.spec["region"])
        beat.check()
        result = {"region": made.region, "known_until": str(made.outlook.known_until), "outlook": made.number}
        self._archive.tasks.finish(Ending(task.id, self.name, self._clock(), result))
        self._log("task done", task=task.id, title=task.title, outlook=made.number)

    def _prepare(self, task: Task, products: Products, version: int) -> None:
        """What others will ask of a day that is done: its hours for outlooks and, where no other day waits, what
        questions about approaches need; else the first to ask waits for that.  The task is done whatever happens here.
        """
        region, day = products.region.name, products.day
        try:
            waiting = self._archive.tasks.newest(2, ("waiting",))
            if task.kind == NETWORK_DAY:
                hindcast.day_kept(self._archive, region, day, self._log, more=True)
            if all(one.kind == OUTLOOK for one in waiting):
                advising.prepare(self._archive, region, str(day), version)
        except Exception as failure:
            self._log("day not prepared", task=task.id, region=region, day=str(day), why=_said(failure))

    def _fail(self, task: Task, failure: Exception) -> None:
        """Write down a failed try, and when the next is due."""
        said = _said(failure)
        attempts, now = task.attempts + 1, self._clock()
        hopeless = isinstance(failure, HOPELESS) or attempts >= self._policy.most_attempts
        wait = np.timedelta64(round(self._policy.wait_s(attempts) * 1e9), "ns")
        known = self._archive.tasks.fail(task.id, self.name, said, now, None if hopeless else now + wait)
        self._log("task failed", task=task.id, title=task.title, why=said, again=not hopeless, known=known)


def _said(failure: Exception) -> str:
    """What went wrong, in words."""
    return failure.message if isinstance(failure, SkylagError) else f"{type(failure).__name__}: {failure}"


class _Beat:
    """Tells the queue how far a task is and renews its claim, from a thread of its own."""

    def __init__(self, archive: Archive, task: Task, holder: str, clock: Clock, policy: Policy) -> None:
        self._archive, self._task, self._holder, self._clock, self._policy = archive, task, holder, clock, policy
        self._latest: tuple[str, float, str] = ("", 0.0, "")
        self._ended, self._withdrawn = threading.Event(), threading.Event()
        self._thread = threading.Thread(target=self._run, name=f"beat-{task.id}", daemon=True)

    def start(self) -> None:
        self._thread.start()

    def end(self) -> None:
        self._ended.set()
        self._thread.join()

    def tell(self, stage: str, share: float, word: str) -> None:
        """Called by the work itself, as often as it likes; raises Withdrawn where it shall stop."""
        self._latest = (stage, share, word)
        self.check()

    def check(self) -> None:
        if self._withdrawn.is_set():
            raise Withdrawn(str(self._task.id))

    def _run(self) -> None:
        told: tuple[str, float, str] | None = None
        beats = 0
        while not self._ended.wait(self._policy.beat_s):
            beats += 1
            latest = self._latest
            if latest == told and beats % 4:  # a cancelled task is noticed within four beats
                continue
            try:
                going = self._archive.tasks.keep(
                    self._task.id, self._holder, self._clock(), self._policy.held_s, *latest
                )
            except SkylagError:
                continue  # the database is away: the claim decides, when it is back
            told = latest
            if not going:
                self._withdrawn.set()
                return


# ---------------------------------------------------------------------------------------------- who is alive


@cache
def process_name() -> str:
    """This process, told apart from any other of this machine, also from an earlier one of the same number."""
    return f"{socket.gethostname()}/{_boot()}/{os.getpid()}/{_started(os.getpid())}"


def is_gone(holder: str) -> bool:
    """Whether a holder is a process of this machine that has ended.  Of other machines nothing is known: False."""
    parts = holder.split("/")
    if len(parts) < 4 or parts[0] != socket.gethostname() or parts[1] != _boot() or not parts[3]:
        return False
    return not parts[2].isdigit() or _started(int(parts[2])) != parts[3]


@cache
def _boot() -> str:
    """What tells this run of the machine and this view of its processes; "" where the system tells neither."""
    try:
        boot = Path("/proc/sys/kernel/random/boot_id").read_text(encoding="ascii").strip()
        return f"{boot}:{Path('/proc/self/ns/pid').readlink()}"
    except OSError:
        return ""


def _started(number: int) -> str:
    """When a process began, in ticks since the machine did; "" where it is not there, or dead and not yet buried."""
    try:
        rest = Path(f"/proc/{number}/stat").read_text(encoding="utf-8", errors="replace").rpartition(") ")[2].split()
    except OSError:
        return ""
    return "" if rest[0] in "ZX" else rest[19]
