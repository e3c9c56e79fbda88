"""The work queue in the database: work is added, claimed by one holder at a time, told about, ended.

A claim lasts for a span and is renewed by its holder; when the holder vanishes the claim runs out and the work is
claimed anew.  Whoever lost a claim can end nothing: every change asks for the holder's name.  Never does the work, and
never asks what time it is.
"""

import hashlib
from collections.abc import Collection, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import sqlalchemy as sa
from sqlalchemy.engine import Connection

from skylag.archive import records, schema
from skylag.archive.part import Part
from skylag.errors import Missing, Refused, SkylagError

STATES = ("waiting", "running", "done", "failed", "cancelled")
ENDED = ("done", "failed", "cancelled")
_TURNS_LOCK = 0x536B7451  # any number that is ours
_MOST = 2**31 - 1  # what the column holds


@dataclass(frozen=True)
class Task:
    """One piece of work.

    spec        what to compute, as plain facts; result: what came of it, empty until it is done
    attempts    how often it gave an error; losses: how often its holder vanished
    share       of the present stage, 0 to 1; word: what is being done; said: the last error in words
    times       UTC
    """

    id: int
    kind: str
    title: str
    spec: Mapping[str, Any]
    state: str
    attempts: int
    losses: int
    not_before: np.datetime64
    holder: str
    held_until: np.datetime64
    stage: str
    share: float
    word: str
    said: str
    result: Mapping[str, Any]
    added: np.datetime64
    changed: np.datetime64


@dataclass(frozen=True)
class Wanted:
    """Work to be queued: kind, title, and what to compute, as plain facts."""

    kind: str
    title: str
    spec: Mapping[str, Any]


@dataclass(frozen=True)
class Ending:
    """That a task is done, to be written together with what it made: task, its holder, UTC time, plain facts, and the
    work that follows from it."""

    task: int
    holder: str
    now: np.datetime64
    result: Mapping[str, Any]
    then: tuple[Wanted, ...] = ()


class Tasks(Part):
    """The queue of an archive."""

    def add(self, kind: str, title: str, spec: Mapping[str, Any], now: np.datetime64) -> int:
        """Queue work; gives its number.  The same work that is waiting or running already is not queued twice."""
        wanted = Wanted(kind, title, spec)
        return int(self._write(lambda connection: _queue(connection, wanted, now)))

    def claim(self, holder: str, now: np.datetime64, held_s: float, most_losses: int) -> Task | None:
        """Take the oldest work that is due, or whose holder let the claim run out; None where there is none.

        Work whose holder vanished more than `most_losses` times is given up: it may be what ends its holders.
        """
        with self._reading() as connection:  # looking does not keep others from writing
            if connection.scalar(sa.select(schema.task.c.id).where(_due(now)).limit(1)) is None:
                return None

        def take(connection: Connection) -> Task | None:
            table = schema.task
            query = sa.select(table).where(_due(now)).order_by(table.c.not_before_ns, table.c.id).limit(1)
            while (row := connection.execute(query.with_for_update(skip_locked=True)).first()) is not None:
                lost = row.losses + (row.state == "running")
                if lost > most_losses:
                    said = f"given up: its process vanished {lost} times while doing it, the last time in {row.stage!r}"
                    _change(connection, row.id, now, state="failed", holder="", losses=lost, said=said)
                    continue
                _change(
                    connection, row.id, now, state="running", holder=holder, held_until_ns=_ns(now, held_s),
                    losses=lost, stage="", share=0.0, word="",
                )  # fmt: skip
                return _task(connection.execute(sa.select(table).where(table.c.id == row.id)).one())
            return None

        found: Task | None = self._write(take)
        return found

    def keep(
        self, number: int, holder: str, now: np.datetime64, held_s: float, stage: str, share: float, word: str
    ) -> bool:
        """Tell how far the work is and renew the claim; False where it was cancelled or is another's by now."""

        def renew(connection: Connection) -> bool:
            changed = connection.execute(
                sa.update(schema.task)
                .where(_held(number, holder))
                .values(
                    stage=stage[:40], share=float(share), word=word[:300], held_until_ns=_ns(now, held_s),
                    changed_ns=_ns(now),
                )
            )  # fmt: skip
            return bool(changed.rowcount)

        return bool(self._write(renew))

    def fail(self, number: int, holder: str, said: str, now: np.datetime64, retry_at: np.datetime64 | None) -> bool:
        """End a try with an error in words; to be tried again at a time, or never.  False where the claim was lost."""

        def end(connection: Connection) -> bool:
            state = "failed" if retry_at is None else "waiting"
            changed = connection.execute(
                sa.update(schema.task)
                .where(_held(number, holder))
                .values(
                    state=state, holder="", held_until_ns=0, attempts=schema.task.c.attempts + 1, said=said,
                    not_before_ns=_ns(now if retry_at is None else retry_at), changed_ns=_ns(now),
                )
            )  # fmt: skip
            return bool(changed.rowcount)

        return bool(self._write(end))

    def finish(self, ending: Ending) -> None:
        """Write that a task is done whose result is kept already, by a verb that keeps the same thing once.

        Raises SkylagError where the claim was lost.
        """
        self._write(lambda connection: end_in(connection, ending, None))

    def give_back(self, holders: Collection[str], now: np.datetime64) -> int:
        """Let go of what these holders hold, since they are known to be gone; gives how many there were."""

        def release(connection: Connection) -> int:
            gone = (schema.task.c.state == "running") & schema.task.c.holder.in_(sorted(holders))
            return int(connection.execute(sa.update(schema.task).where(gone).values(held_until_ns=0)).rowcount)

        return int(self._write(release)) if holders else 0

    def holders(self) -> tuple[str, ...]:
        """Who holds work at present."""
        with self._reading() as connection:
            query = sa.select(schema.task.c.holder).where(schema.task.c.state == "running").distinct()
            return tuple(connection.scalars(query))

    def cancel(self, number: int, now: np.datetime64) -> Task:
        """Take work off the queue; its holder, if any, stops at its next step.  Refused where it has ended already."""

        def end(connection: Connection) -> Task:
            row = self._row(connection, number, lock=True)
            if row.state in ENDED:
                raise Refused(
                    f"work {number} is {row.state} already and cannot be cancelled; only waiting or running work can",
                    name="state", value=row.state, allowed=("waiting", "running"),
                )  # fmt: skip
            _change(connection, number, now, state="cancelled", holder="", held_until_ns=0)
            return _task(self._row(connection, number))

        found: Task = self._write(end)
        return found

    def again(self, number: int, now: np.datetime64) -> Task:
        """Queue failed or cancelled work once more, as if new."""

        def restart(connection: Connection) -> Task:
            _take_turns(connection)
            row = self._row(connection, number, lock=True)
            twin = (schema.task.c.spec_sha256 == row.spec_sha256) & schema.task.c.state.in_(("waiting", "running"))
            other = connection.scalar(sa.select(schema.task.c.id).where(twin))
            if row.state not in ("failed", "cancelled") or other is not None:
                why = f"is {row.state}" if other is None or other == number else f"is queued as {other} already"
                raise Refused(
                    f"work {number} {why}; only failed or cancelled work can be queued once more",
                    name="state", value=row.state, allowed=("failed", "cancelled"),
                )  # fmt: skip
            _change(
                connection, number, now, state="waiting", attempts=0, losses=0, not_before_ns=_ns(now), stage="",
                share=0.0, word="",
            )  # fmt: skip
            return _task(self._row(connection, number))

        found: Task = self._write(restart)
        return found

    def one(self, number: int) -> Task:
        """One piece of work by its number."""
        with self._reading() as connection:
            return _task(self._row(connection, number))

    def newest(self, count: int = 100, states: Collection[str] = STATES) -> tuple[Task, ...]:
        """The work that changed last, newest change first."""
        table = schema.task
        query = (
            sa.select(table).where(table.c.state.in_(sorted(states)))
            .order_by(table.c.changed_ns.desc(), table.c.id.desc()).limit(count)
        )  # fmt: skip
        with self._reading() as connection:
            return tuple(_task(row) for row in connection.execute(query))

    def counts(self) -> dict[str, int]:
        """State -> how many pieces of work are in it; every state is named."""
        query = sa.select(schema.task.c.state, sa.func.count()).group_by(schema.task.c.state)
        with self._reading() as connection:
            found = {str(state): int(number) for state, number in connection.execute(query)}
        return {state: found.get(state, 0) for state in STATES}

    def _row(self, connection: Connection, number: int, lock: bool = False) -> Any:
        query = sa.select(schema.task).where(schema.task.c.id == number)
        # What cannot have been kept is not there; the databases need not be asked with numbers they refuse.
        found = None
        if 1 <= number <= _MOST:
            found = connection.execute(query.with_for_update() if lock else query).first()
        if found is None:
            raise Missing(f"there is no work {number}; see the list of work", what=f"work {number}", nearest=None)
        return found


def _queue(connection: Connection, wanted: Wanted, now: np.datetime64) -> int:
    """Queue work, unless the same is waiting or running; gives its number."""
    text = records.to_text(wanted.spec)
    sha256 = hashlib.sha256(f"{wanted.kind}\n{text}".encode()).hexdigest()
    _take_turns(connection)
    there = connection.scalar(
        sa.select(schema.task.c.id).where(
            schema.task.c.spec_sha256 == sha256, schema.task.c.state.in_(("waiting", "running"))
        )
    )
    if there is not None:
        return int(there)
    made = connection.execute(
        sa.insert(schema.task).values(
            kind=wanted.kind, title=wanted.title[:300], spec=text, spec_sha256=sha256, state="waiting", attempts=0,
            losses=0, not_before_ns=_ns(now), holder="", held_until_ns=0, stage="", share=0.0, word="", said="",
            result="{}", added_ns=_ns(now), changed_ns=_ns(now),
        )
    ).inserted_primary_key  # fmt: skip
    assert made is not None  # the database gives a key to every row
    return int(made[0])


def end_in(connection: Connection, ending: Ending, version: int | None) -> None:
    """Write that a task is done, in the transaction that writes what it made.

    version  of the day it made, None where it made none
    Raises SkylagError where the claim was lost, so that nothing of the transaction stays.
    """
    result = dict(ending.result) if version is None else {**ending.result, "version": version}
    changed = connection.execute(
        sa.update(schema.task)
        .where(_held(ending.task, ending.holder))
        .values(
            state="done", holder="", held_until_ns=0, share=1.0, word="", said="",
            result=records.to_text(result), changed_ns=_ns(ending.now),
        )
    )  # fmt: skip
    if not changed.rowcount:
        raise SkylagError(
            f"work {ending.task} was cancelled or is done by another by now; its result is not kept", task=ending.task
        )
    for wanted in ending.then:
        _queue(connection, wanted, ending.now)


def _due(now: np.datetime64) -> Any:
    table = schema.task.c
    waiting = (table.state == "waiting") & (table.not_before_ns <= _ns(now))
    return waiting | ((table.state == "running") & (table.held_until_ns < _ns(now)))


def _held(number: int, holder: str) -> Any:
    return (schema.task.c.id == number) & (schema.task.c.state == "running") & (schema.task.c.holder == holder)


def _change(connection: Connection, number: int, now: np.datetime64, **values: Any) -> None:
    connection.execute(
        sa.update(schema.task).where(schema.task.c.id == number).values(**values, changed_ns=_ns(now))
    )


def _take_turns(connection: Connection) -> None:
    """Wait until nobody else is adding.  SQLite's write transactions take turns by themselves."""
    if connection.dialect.name == "postgresql":
        connection.execute(sa.select(sa.func.pg_advisory_xact_lock(_TURNS_LOCK)))


def _ns(time: np.datetime64, later_s: float = 0.0) -> int:
    return int(time.astype("datetime64[ns]").astype(np.int64)) + round(later_s * 1e9)


def _instant(value: int) -> np.datetime64:
    return np.datetime64(int(value), "ns")


def _task(row: Any) -> Task:
    return Task(
        id=row.id, kind=row.kind, title=row.title, spec=records.from_text(row.spec), state=row.state,
        attempts=row.attempts, losses=row.losses, not_before=_instant(row.not_before_ns), holder=row.holder,
        held_until=_instant(row.held_until_ns), stage=row.stage, share=row.share, word=row.word, said=row.said,
        result=records.from_text(row.result), added=_instant(row.added_ns), changed=_instant(row.changed_ns),
    )  # fmt: skip
