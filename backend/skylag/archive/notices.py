"""What somebody is to be told, kept until each of those who asked has it.  Never delivers anything itself."""

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import sqlalchemy as sa
from sqlalchemy.engine import Connection

from skylag.archive import records, schema
from skylag.archive.part import Part

_NEVER_NS = 2**62


@dataclass(frozen=True)
class Notice:
    """An occasion: about what, a sentence, plain facts (`start_ns` and `end_ns` of it among them), UTC when made."""

    id: int
    subject: str
    sentence: str
    facts: Mapping[str, Any]
    made: np.datetime64


@dataclass(frozen=True)
class Due:
    """A notice that a target has not got yet; how often it was tried."""

    notice: Notice
    target: str
    attempts: int


@dataclass(frozen=True)
class Delivery:
    """How a notice came to a target: UTC when it did, or not-a-time and the last reason why not."""

    target: str
    attempts: int
    delivered: np.datetime64
    said: str


class Notices(Part):
    """The notices of an archive."""

    def tell(
        self, subject: str, sentence: str, facts: Mapping[str, Any], targets: Sequence[str], quiet_s: float,
        now: np.datetime64,
    ) -> int | None:  # fmt: skip
        """Keep a notice with all its deliveries; gives its number.

        facts  with `start_ns` and `end_ns` of the occasion; one that touches the last of the same subject, or begins
               less than quiet_s after its end, is the same occasion: it only grows, and None is given
        """
        table = schema.notice

        def keep(connection: Connection) -> int | None:
            mine = table.c.rule == subject[:100]
            query = sa.select(table).where(mine).order_by(table.c.id.desc()).limit(1).with_for_update()
            last = connection.execute(query).first()
            if last is not None:
                known = records.from_text(last.facts)
                if facts["start_ns"] <= known["end_ns"] + quiet_s * 1e9 and facts["end_ns"] >= known["start_ns"]:
                    grown = {**known, "end_ns": max(known["end_ns"], facts["end_ns"])}
                    change = sa.update(table).where(table.c.id == last.id).values(facts=records.to_text(grown))
                    connection.execute(change)
                    return None
            mark = hashlib.sha256(f"{subject}\n{facts['start_ns']}".encode()).hexdigest()
            if connection.scalar(sa.select(table.c.id).where(table.c.mark == mark)) is not None:
                return None
            made = connection.execute(
                sa.insert(table).values(
                    mark=mark, rule=subject[:100], sentence=sentence, facts=records.to_text(facts), made_ns=_ns(now)
                )
            ).inserted_primary_key
            assert made is not None  # the database gives a key to every row
            rows = [
                {"notice": made[0], "target": target, "attempts": 0, "not_before_ns": _ns(now), "said": ""}
                for target in dict.fromkeys(targets)
            ]
            if rows:
                connection.execute(sa.insert(schema.delivery), rows)
            return int(made[0])

        found: int | None = self._write(keep)
        return found

    def due(self, now: np.datetime64, count: int = 50) -> tuple[Due, ...]:
        """Deliveries that are due, oldest first."""
        query = (
            sa.select(schema.notice, schema.delivery.c.target, schema.delivery.c.attempts)
            .join(schema.delivery, schema.delivery.c.notice == schema.notice.c.id)
            .where(schema.delivery.c.delivered_ns.is_(None), schema.delivery.c.not_before_ns <= _ns(now))
            .order_by(schema.delivery.c.not_before_ns, schema.notice.c.id).limit(count)
        )  # fmt: skip
        with self._reading() as connection:
            return tuple(Due(_notice(row), row.target, row.attempts) for row in connection.execute(query))

    def delivered(self, number: int, target: str, now: np.datetime64) -> None:
        """A target has a notice."""
        self._change(number, target, delivered_ns=_ns(now), said="")

    def put_off(self, number: int, target: str, said: str, not_before: np.datetime64 | None) -> None:
        """A target could not be reached, and why; to be tried again at a time, or never."""
        later = _NEVER_NS if not_before is None else _ns(not_before)
        self._change(number, target, said=said[:1000], not_before_ns=later)

    def _change(self, number: int, target: str, **values: Any) -> None:
        table = schema.delivery
        ours = (table.c.notice == number) & (table.c.target == target)
        change = sa.update(table).where(ours).values(attempts=table.c.attempts + 1, **values)
        self._write(lambda connection: connection.execute(change))

    def newest(self, count: int = 100) -> tuple[tuple[Notice, tuple[Delivery, ...]], ...]:
        """The last notices, newest first, each with how it was delivered."""
        with self._reading() as connection:
            rows = connection.execute(sa.select(schema.notice).order_by(schema.notice.c.id.desc()).limit(count)).all()
            table = schema.delivery
            query = sa.select(table).where(table.c.notice.in_([row.id for row in rows])).order_by(table.c.target)
            ways: dict[int, list[Delivery]] = {}
            for row in connection.execute(query):
                when = np.datetime64("NaT", "ns") if row.delivered_ns is None else np.datetime64(row.delivered_ns, "ns")
                ways.setdefault(row.notice, []).append(Delivery(row.target, row.attempts, when, row.said))
        return tuple((_notice(row), tuple(ways.get(row.id, ()))) for row in rows)

    def undelivered(self) -> int:
        """How many deliveries are still to be made."""
        query = sa.select(sa.func.count()).select_from(schema.delivery).where(schema.delivery.c.delivered_ns.is_(None))
        with self._reading() as connection:
            return int(connection.scalar(query) or 0)


def _notice(row: Any) -> Notice:
    return Notice(row.id, row.rule, row.sentence, records.from_text(row.facts), np.datetime64(row.made_ns, "ns"))


def _ns(time: np.datetime64) -> int:
    return int(time.astype("datetime64[ns]").astype(np.int64))
