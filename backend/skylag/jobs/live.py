"""Today, as its files come in: a folder is watched, each arrival brings the day's maps up to date, silence is noticed.

`step` is a pure fold over a closed list of events, so that a recorded day can be replayed at any speed; `Watch` owns
folder and clock and only makes events and carries out what is asked.  A file is read once, a receiver-day is computed
again only when its files changed, and an hour of maps is made again only when its rays moved (`closed_hours`).  A day
that goes on is kept as provisional; once it is over it is made whole.
"""

import re
import threading
from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import Executor
from dataclasses import dataclass, field, replace
from datetime import date
from pathlib import Path
from typing import Any

import numpy as np

from skylag.archive import Archive
from skylag.chain import Choices
from skylag.errors import Missing, SkylagError
from skylag.formats.glance import glance
from skylag.impact import silence
from skylag.jobs import alerts, board, hindcast, kept, work
from skylag.jobs.closed_hours import ClosedHours, Nearness
from skylag.jobs.under_way import of_day_before
from skylag.jobs.upkeep import Upkeep
from skylag.tables import HOLDS, UNSEEN, Fields, Products, Region
from skylag.timescales import utc_to_gps

_DAY = np.timedelta64(1, "D")


@dataclass(frozen=True)
class Patience:
    """How long is waited: s without new files before computing (and at most so long after the first), without data
    before a receiver is silent, after the end of a day before it is final; days back that still count as live.

    late_s  so much later than the span of its files a receiver may be and is not silent yet: files of an hour come
            every hour, whatever `silent_s` says
    """

    calm_s: float = 1.0
    at_most_s: float = 5.0
    silent_s: float = 2700.0
    late_s: float = 900.0
    settle_s: float = 7200.0
    days_back: int = 2


# ---------------------------------------------------------------------------------------------- events, asked for


@dataclass(frozen=True)
class FileCame:
    """A file is whole or has changed: its path, the GPS-time day it begins on (None for orbits and biases), now, and
    the span [s] that its name says it covers, 0 where that is not told or is more than an hour; the receiver whose
    observations it holds, "" for none."""

    path: str
    day: np.datetime64 | None
    now: np.datetime64
    span_s: float = 0.0
    receiver: str = ""


@dataclass(frozen=True)
class DayMade:
    """A day was computed: the last epoch (GPS time) of each receiver."""

    day: np.datetime64
    last: Mapping[str, np.datetime64]


@dataclass(frozen=True)
class Tick:
    """Time goes on."""

    now: np.datetime64


@dataclass(frozen=True)
class Make:
    """Asked for: compute a day and keep it, for good where `final`."""

    day: np.datetime64
    final: bool


@dataclass(frozen=True)
class Fell:
    """Asked for: tell that a receiver fell silent, since a GPS time."""

    receiver: str
    since: np.datetime64


Event = FileCame | DayMade | Tick
Asked = Make | Fell


@dataclass(frozen=True)
class State:
    """What is known: days that go on, when their files began and last came (not computed yet), last data of receivers,
    who is silent, the span [s] of each receiver's latest file."""

    open_days: frozenset[np.datetime64] = frozenset()
    waiting: Mapping[np.datetime64, tuple[np.datetime64, np.datetime64]] = field(default_factory=dict)
    last: Mapping[str, np.datetime64] = field(default_factory=dict)
    silent: frozenset[str] = frozenset()
    told: Mapping[np.datetime64, np.datetime64] = field(default_factory=dict)  # day -> when silence was last drawn
    spans: Mapping[str, float] = field(default_factory=dict)


def limit_of(receiver: str, spans: Mapping[str, float], patience: Patience) -> float:
    """After how long [s] without data a receiver is silent: what is asked for, but never while its next file, of the
    span of its latest one, is not overdue."""
    span_s = spans.get(receiver, 0.0)
    return max(patience.silent_s, span_s + patience.late_s if span_s else 0.0)


def step(state: State, event: Event, patience: Patience) -> tuple[State, tuple[Asked, ...]]:
    """What is known after an event, and what is asked for.  Pure; times are GPS time."""
    if isinstance(event, FileCame):
        today = event.now.astype("datetime64[D]")
        days = state.open_days if event.day is None else frozenset({event.day})
        days = frozenset(day for day in days if day >= today - patience.days_back * _DAY)
        waiting = {**state.waiting}
        for day in days:
            first, _ = waiting.get(day, (event.now, event.now))
            waiting[day] = (first, event.now)
        spans = {**state.spans, event.receiver: event.span_s} if event.receiver else state.spans
        return replace(state, open_days=state.open_days | days, waiting=waiting, spans=spans), ()
    if isinstance(event, DayMade):
        last = {**state.last}
        for name, time in event.last.items():
            last[name] = max(time, last.get(name, time))
        back = {name for name in state.silent if last[name] > state.last[name]}
        return replace(state, last=last, silent=state.silent - back), ()
    asked: list[Asked] = []
    waiting, told = {**state.waiting}, {**state.told}
    for day, (first, latest) in sorted(state.waiting.items()):
        if event.now - latest >= _s(patience.calm_s) or event.now - first >= _s(patience.at_most_s):
            asked.append(Make(day, False))
            del waiting[day]
    # Files that came and are not computed yet may be of one who seems silent: that is asked at the next tick.
    fallen = {
        name: time for name, time in state.last.items()
        if name not in state.silent and not state.waiting
        and event.now - time >= _s(limit_of(name, state.spans, patience))
    }  # fmt: skip
    asked += [Fell(name, time) for name, time in sorted(fallen.items())]
    silent = state.silent | fallen.keys()
    over = {day for day in state.open_days if event.now >= day + _DAY + _s(patience.settle_s) and day not in waiting}
    asked = [one for one in asked if not (isinstance(one, Make) and one.day in over)]
    asked += [Make(day, True) for day in sorted(over)]
    # While all are silent nothing comes that would bring the maps up to date: they are drawn unseen until now.
    today = event.now.astype("datetime64[D]")
    all_silent = bool(state.last) and silent >= state.last.keys()
    still_open = today in state.open_days - over - waiting.keys()
    if all_silent and still_open and event.now - told.get(today, event.now - _DAY) >= _s(600.0):
        told[today] = event.now
        if Make(today, False) not in asked:
            asked.append(Make(today, False))
    told = {day: time for day, time in told.items() if day not in over}
    known = {name: t for name, t in state.last.items() if event.now - t < patience.days_back * _DAY}
    new = State(state.open_days - over, waiting, known, frozenset(silent & known.keys()), told, state.spans)
    return new, tuple(asked)


def _s(seconds: float) -> np.timedelta64:
    return np.timedelta64(round(seconds * 1e9), "ns")


def unseen_until(
    products: Products, now: np.datetime64, silent_s: float, limits: Mapping[str, float] | None = None
) -> Products:
    """The day with maps that say unseen from the last one on until now, where none came for longer than a span.

    limits  receiver -> span [s] where it has one of its own: the shortest of all that gave data counts
    Pure; never past the end of the day.
    """
    used = np.unique(products.samples.rays.receiver)
    names = [products.samples.rays.receivers[number].name for number in used]
    silent_s = min(((limits or {}).get(name, silent_s) for name in names), default=silent_s)
    times = products.fields.times
    until = min(now, (products.day + _DAY).astype("datetime64[ns]") - np.timedelta64(1, "ns"))
    if not len(times) or until - times[-1] < _s(silent_s):
        return products
    every = np.min(np.diff(times)) if len(times) > 1 else np.timedelta64(300, "s")
    more = np.arange(times[-1] + every, until + np.timedelta64(1, "ns"), every).astype("datetime64[ns]")
    if not len(more):
        return products
    layers: dict[str, Any] = {}
    for name in Fields.LAYERS:
        layer = getattr(products.fields, name)
        fill = np.nan if layer.dtype.kind == "f" else UNSEEN if name == "state" else 0
        layers[name] = np.concatenate([layer, np.full((len(more), *layer.shape[1:]), fill, dtype=layer.dtype)])
    since = f"no data since {np.datetime_as_string(times[-1], unit='m')} GPS time"
    return replace(
        products,
        fields=replace(products.fields, times=np.concatenate([times, more]), **layers),
        site_states=np.concatenate(
            [products.site_states, np.full((len(more), products.site_states.shape[1]), UNSEEN, dtype=np.uint8)]
        ),
        site_reasons=tuple((*one, *(since for _ in more)) for one in products.site_reasons),
    )


def silent_areas(products: Products, silent_s: float, limits: Mapping[str, float] | None = None) -> Products:
    """The day with cells and sites unseen, where they would hold, while the receiver nearest to them is silent.

    Warnings stay.  Who was silent when is kept among the facts of the day, for places that are judged later (see
    `impact.silence`).  Pure.

    limits  receiver -> span [s] where it has one of its own
    """
    fields, rays = products.fields, products.samples.rays
    if not len(fields.times) or not rays.receivers:
        return products
    spans = [_s((limits or {}).get(receiver.name, silent_s)) for receiver in rays.receivers]
    data = [np.unique(rays.time[rays.receiver == number]) for number in range(len(rays.receivers))]
    silent = silence.find(rays.receivers, data, fields.times, spans)
    if not silent.spans:
        return products
    cells = silent.over(fields.lats[:, None], fields.lons[None, :], fields.times)
    state = np.where(cells & (fields.state == HOLDS), UNSEEN, fields.state).astype(np.uint8)
    codes, reasons = products.site_states.copy(), []
    for column, site in enumerate(products.region.sites):
        told = list(products.site_reasons[column])
        for row, why in enumerate(silent.told(site.lat, site.lon, fields.times)):
            if why and codes[row, column] == HOLDS:
                codes[row, column] = UNSEEN
                told[row] = why
        reasons.append(tuple(told))
    counts = {**products.origin.counts, silence.FACTS: silence.facts(silent)}
    return replace(
        products, fields=replace(fields, state=state), site_states=codes, site_reasons=tuple(reasons),
        origin=replace(products.origin, counts=counts),
    )  # fmt: skip


# ---------------------------------------------------------------------------------------------- the folder


# What of a usual file name tells its span: 01H or 15M in long names, the letter of an hour and minutes in short ones.
_LONG_SPAN = re.compile(r"[A-Z0-9]{9}_[A-Z]_\d{11}_(\d\d)([MH])_", re.ASCII)
_SHORT_SPAN = re.compile(r"[A-Za-z0-9]{4}\d{3}[a-xA-X](\d\d)?\.\d\d", re.ASCII)


def span_of(name: str) -> float:
    """The span [s] that a file's name tells, as the RINEX descriptions have it; 0 for none, and for over an hour."""
    found = _LONG_SPAN.match(name)
    if found:
        span_s = int(found.group(1)) * (60.0 if found.group(2) == "M" else 3600.0)
        return span_s if span_s <= 3600.0 else 0.0
    short = _SHORT_SPAN.match(name)
    return 0.0 if short is None else 900.0 if short.group(1) else 3600.0


def marker_of(name: str) -> str:
    """The receiver that a file's name tells: nine characters of long names, four of short ones."""
    return name[:9].upper() if "_" in name[9:10] else name[:4].upper()


class Folder:
    """Files of a folder that are whole: of the same size and time at two looks in a row."""

    def __init__(self, path: Path) -> None:
        self._path = path
        self._growing: dict[Path, tuple[int, int]] = {}
        self._known: dict[Path, tuple[int, int]] = {}

    def look(self) -> list[Path]:
        """Files that are new or changed, and whole since the last look."""
        came, growing = [], {}
        for path in sorted(self._path.rglob("*")):
            if path.name.startswith(".") or path.suffix in (".toml", ".md", ".part", ".tmp"):
                continue
            try:
                found = path.stat()
            except OSError:
                continue  # gone again
            if not path.is_file() or self._known.get(path) == (mark := (found.st_size, found.st_mtime_ns)):
                continue
            if self._growing.get(path) == mark and found.st_size:
                self._known[path] = mark
                came.append(path)
            else:
                growing[path] = mark
        self._growing = growing
        return came


class Watch:
    """A watched folder, and an archive that follows it."""

    def __init__(
        self,
        archive: Archive,
        path: Path,
        executor: Executor,
        clock: Callable[[], np.datetime64],
        *,
        region: Region | None = None,
        choices: Choices | None = None,
        patience: Patience | None = None,
        nearness: Nearness | None = None,
        rules: Sequence[alerts.Rule] = (),
        simulated: bool = False,
        log: board.Log | None = None,
    ) -> None:
        self._archive, self._clock, self._region, self._rules = archive, clock, region, rules
        self._hours = ClosedHours(nearness)
        self.use(executor)
        self._choices, self._patience = choices or Choices(), patience or Patience()
        self._simulated = simulated
        self._log: board.Log = log or (lambda event, **facts: None)
        self._upkeep = Upkeep(archive, self._log)
        self._folder = Folder(path)
        self._days: dict[str, np.datetime64 | None] = {}  # file -> day
        self._owed: tuple[Asked, ...] = ()  # what was asked for while the archive could not be reached
        self.state = State()

    def use(self, executor: Executor) -> None:
        """Compute with another executor from now on."""
        self._executor = kept.KeepingExecutor(executor, kept.folder_of(self._archive), self._hours)

    def run(self, stop: threading.Event, every_s: float = 0.5, away_s: float = 10.0) -> None:
        """Follow the folder until told to stop.

        While the archive cannot be reached or written, that is told every `away_s`, and what was asked for is made up
        for afterwards.  Raises BrokenExecutor where the executor is of no more use: `use` another and run again.
        """
        while not stop.is_set():
            try:
                self.turn()
            except SkylagError as failure:
                self._log("archive away", why=failure.message, owed=len(self._owed))
                stop.wait(away_s)
            stop.wait(every_s)

    def turn(self) -> int:
        """One look at the folder and at the clock; gives how many days were made.

        Raises SkylagError where the archive cannot be reached or written: what is owed is done at the next turn.
        """
        for path in self._folder.look():
            self._came(path)
        asked = tuple(dict.fromkeys((*self._owed, *self._step(Tick(self._now())))))
        whole = {one.day for one in asked if isinstance(one, Make) and one.final}
        self._owed = tuple(one for one in asked if not (isinstance(one, Make) and not one.final and one.day in whole))
        made = 0
        while self._owed:
            one = self._owed[0]
            if isinstance(one, Make):
                made += self._make(one)
            else:
                limit_s = limit_of(one.receiver, self.state.spans, self._patience)
                self._log("receiver silent", receiver=one.receiver, since=str(one.since), after_s=limit_s)
                told = alerts.silences(self._rules, one.receiver, one.since, self._now())
                alerts.keep(self._archive, told, self._clock())
            self._owed = self._owed[1:]
        if self._rules:
            alerts.deliver(self._archive, self._clock, self._log)
        if not made:
            self._upkeep.turn()
        return made

    def _now(self) -> np.datetime64:
        return np.datetime64(utc_to_gps(self._clock().astype("datetime64[ns]")).item(), "ns")

    def _step(self, event: Event) -> tuple[Asked, ...]:
        self.state, asked = step(self.state, event, self._patience)
        return asked

    def _came(self, path: Path) -> None:
        try:
            found = glance(path)
        except SkylagError as failure:
            self._log("file left out", file=path.name, why=failure.message)
            return
        if found.kind in ("unknown", "empty"):
            self._log("file left out", file=path.name, why=f"is {found.kind}")
            return
        if found.day is not None and found.day < self._now().astype("datetime64[D]") - self._patience.days_back * _DAY:
            why = f"is of {found.day}, and only today and the {self._patience.days_back} days before are followed"
            self._log("file left out", file=path.name, why=f"{why}: `skylag add` takes days that are past")
            return
        self._days[str(path)] = found.day
        self._log("file came", file=path.name, kind=found.kind, day=str(found.day))
        receiver = (found.marker or marker_of(path.name)) if found.kind == "observations" else ""
        before = self.state.spans
        self._step(FileCame(str(path), found.day, self._now(), span_of(path.name), receiver))
        limit_s = limit_of(receiver, self.state.spans, self._patience)
        if limit_s != limit_of(receiver, before, self._patience):
            self._log(
                "silence limit", receiver=receiver, after_s=limit_s, asked_s=self._patience.silent_s,
                span_s=self.state.spans[receiver],
            )  # fmt: skip

    def _make(self, asked: Make) -> int:
        """Compute a day from all its files and keep it; gives 1 where that went well."""
        paths = [Path(path) for path, day in self._days.items() if day in (asked.day, None) and Path(path).is_file()]
        before = (self._executor.given, self._executor.computed, self._executor.hours_given, self._executor.hours_made)
        if asked.final:
            self._hours.forget(asked.day)  # made whole, once more
        try:
            made = work.network_day(
                paths, region=self._region, day=date.fromisoformat(str(asked.day)), choices=self._choices,
                executor=self._executor, simulated=self._simulated,
                earlier=work.earlier_biases(self._archive, self._choices.earlier_days),
            ).products  # fmt: skip
            # Of a day that is over no file is on its way.
            spans = {} if asked.final else self.state.spans
            limits = {name: limit_of(name, spans, self._patience) for name in spans}
            products = silent_areas(made, self._patience.silent_s, limits)
            if not asked.final:
                products = unseen_until(products, self._now(), self._patience.silent_s, limits)
            version = self._archive.save(products, provisional=not asked.final)
        except (*board.HOPELESS, Missing) as failure:  # the files themselves are at fault
            self._log("day not made", day=str(asked.day), why=failure.message)
            return 0
        finally:
            if asked.final:
                self._hours.forget(asked.day)
        self._log(
            "day made", day=str(asked.day), final=asked.final, version=version,
            given=self._executor.given - before[0], computed=self._executor.computed - before[1],
            hours_given=self._executor.hours_given - before[2], hours_made=self._executor.hours_made - before[3],
        )  # fmt: skip
        rays = made.samples.rays
        ends = {
            receiver.name: rays.time[rays.receiver == number].max()
            for number, receiver in enumerate(rays.receivers) if np.any(rays.receiver == number)
        }  # fmt: skip
        self._step(DayMade(asked.day, ends))
        if asked.final:
            hindcast.day_kept(self._archive, products.region.name, products.day, self._log)
        else:
            sites = self._archive.day(products.region.name, products.day, version).region.sites  # those in force
            newest = products.fields.times[-1] if len(products.fields.times) else products.day.astype("datetime64[ns]")
            late = of_day_before(self._archive, products.region.name, products.day, newest)
            alerts.keep(self._archive, alerts.occasions(self._rules, products, sites, late), self._clock())
        return 1
