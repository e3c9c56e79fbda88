"""Outlooks in the database: kept when made and never changed, with what became of them.  Never makes or scores one."""

import contextlib
import hashlib
import io
from collections.abc import Mapping
from dataclasses import dataclass, fields
from typing import Any

import numpy as np
import numpy.typing as npt
import sqlalchemy as sa
from sqlalchemy.engine import Connection

from skylag.archive import records, schema
from skylag.archive.part import Part
from skylag.errors import FormatError
from skylag.tables import Outlook


@dataclass(frozen=True)
class Kept:
    """An outlook as it was made: number, region, the mark of its inputs, when (UTC), and itself."""

    number: int
    region: str
    entered: str
    made_at: np.datetime64
    outlook: Outlook


class Outlooks(Part):
    """The outlooks of an archive."""

    def keep(self, region: str, outlook: Outlook, entered: str = "") -> int:
        """Keep an outlook; gives its number.  One of the same region, day and inputs is there for good: it stays.

        entered  what marks the inputs, up to 64 characters: versions of the days, activity entered
        """
        facts, data = _pack(outlook)
        values = {
            "region": region, "known_until": str(outlook.known_until), "entered": entered, "facts": facts, "data": data,
            "sha256": _digest(facts, data),
        }  # fmt: skip

        def insert(connection: Connection) -> int:
            table = schema.outlook
            ours = (
                (table.c.region == region)
                & (table.c.known_until == values["known_until"])
                & (table.c.entered == entered)
            )
            found = connection.scalar(sa.select(table.c.id).where(ours))
            if found is not None:
                return int(found)
            _insert_once(connection, sa.insert(table).values(**values))
            return int(connection.scalar(sa.select(table.c.id).where(ours)) or 0)

        return int(self._write(insert))

    def find(self, region: str, known_until: np.datetime64, entered: str = "") -> Kept | None:
        """The outlook of a region, made after a day from marked inputs; None where there is none."""
        table = schema.outlook
        query = sa.select(table).where(
            table.c.region == region, table.c.known_until == str(known_until), table.c.entered == entered
        )
        with self._reading() as connection:
            row = connection.execute(query).first()
        return None if row is None else _kept(row)

    def unscored(self, region: str, days: int = 2, since: np.datetime64 | None = None) -> tuple[Kept, ...]:
        """Outlooks that were not scored with so many of their days in, oldest first; made after `since` or on it."""
        table, score = schema.outlook, schema.outlook_score
        done = sa.select(score.c.outlook).where(score.c.days >= days)
        query = sa.select(table).where(table.c.region == region, table.c.id.not_in(done))
        if since is not None:
            query = query.where(table.c.known_until >= str(since))
        with self._reading() as connection:
            rows = connection.execute(query.order_by(table.c.known_until, table.c.id)).all()
        return tuple(_kept(row) for row in rows)

    def keep_score(self, number: int, days: int, facts: Any) -> None:
        """Keep what became of an outlook when so many of its days were in; the first score stays."""

        def insert(connection: Connection) -> None:
            table = schema.outlook_score
            ours = (table.c.outlook == number) & (table.c.days == days)
            if connection.scalar(sa.select(table.c.outlook).where(ours)) is None:
                values = {"outlook": number, "days": days, "facts": records.to_text(facts)}
                _insert_once(connection, sa.insert(table).values(**values))

        self._write(insert)

    def scores(self, region: str, newest: int = 120) -> tuple[Any, ...]:
        """The fullest score of the outlook made last after each day of a region, newest first.

        newest  so many days at most
        """
        table, score = schema.outlook, schema.outlook_score
        query = (
            sa.select(table.c.id, table.c.known_until, score.c.facts)
            .join(score, score.c.outlook == table.c.id)
            .where(table.c.region == region)
            .order_by(table.c.known_until.desc(), table.c.id.desc(), score.c.days.desc())
        )
        best: dict[str, Any] = {}
        with self._reading() as connection:
            for row in connection.execute(query):
                if len(best) == newest and row.known_until not in best:
                    break
                best.setdefault(row.known_until, row.facts)
        return tuple(records.from_text(text) for text in best.values())

    def keep_hours(
        self, region: str, day: str, version: int, mark: str, arrays: Mapping[str, npt.NDArray[Any]]
    ) -> None:
        """Keep the hours of a day at the places that a mark stands for; those already there stay."""
        data = _bytes_of(arrays)
        key = {"region": region, "day": day, "version": version, "mark": mark}

        def insert(connection: Connection) -> None:
            table = schema.day_digest
            ours = sa.and_(*(table.c[name] == value for name, value in key.items()))
            if connection.scalar(sa.select(table.c.day).where(ours)) is None:
                row = sa.insert(table).values(**key, data=data, sha256=_digest(_label(key), data))
                _insert_once(connection, row)

        self._write(insert)

    def hours(self, region: str, day: str, version: int, mark: str) -> dict[str, npt.NDArray[Any]] | None:
        """The hours kept for a day; None where there are none, or not those that were kept: they can be made again."""
        key = {"region": region, "day": day, "version": version, "mark": mark}
        table = schema.day_digest
        query = sa.select(table).where(*(table.c[name] == value for name, value in key.items()))
        with self._reading() as connection:
            row = connection.execute(query).first()
        if row is None or _digest(_label(key), row.data) != row.sha256:
            return None
        return _arrays_of(row.data)


def _insert_once(connection: Connection, statement: Any) -> None:
    """Insert, unless another process has put the same row there in this very moment."""
    with contextlib.suppress(sa.exc.IntegrityError), connection.begin_nested():
        connection.execute(statement)


def _label(key: Mapping[str, Any]) -> str:
    return records.to_text(dict(key))


def _bytes_of(arrays: Mapping[str, npt.NDArray[Any]]) -> bytes:
    goal = io.BytesIO()
    np.savez_compressed(goal, **dict(arrays))  # type: ignore[arg-type]
    return goal.getvalue()


def _arrays_of(data: bytes) -> dict[str, npt.NDArray[Any]]:
    with np.load(io.BytesIO(data), allow_pickle=False) as arrays:
        return {name: arrays[name] for name in arrays.files}


def _digest(facts: str, data: bytes) -> str:
    checksum = hashlib.sha256(facts.encode())
    checksum.update(data)
    return checksum.hexdigest()


_SMALL = ("delay", "delay_quantiles", "slope_quantiles", "strained", "broken")  # single precision is plenty


def _pack(outlook: Outlook) -> tuple[str, bytes]:
    arrays = {item.name: getattr(outlook, item.name) for item in fields(Outlook)}
    facts = {"known_until": str(arrays.pop("known_until")), "basis": list(arrays.pop("basis"))}
    small = {name: value.astype(np.float32) if name in _SMALL else value for name, value in arrays.items()}
    return records.to_text(facts), _bytes_of(small)


def _kept(row: Any) -> Kept:
    """Raises FormatError where the bytes are not those that were kept."""
    if _digest(row.facts, row.data) != row.sha256:
        raise FormatError(
            f"the outlook kept for {row.region} after {row.known_until} does not match its checksum and is not used; "
            "restore the archive from a backup",
            path=row.region, line=0,
        )  # fmt: skip
    facts = records.from_text(row.facts)
    arrays = _arrays_of(row.data)
    known: dict[str, Any] = {
        name: value.astype(np.float64) if name in _SMALL else value for name, value in arrays.items()
    }
    outlook = Outlook(known_until=np.datetime64(facts["known_until"], "D"), basis=tuple(facts["basis"]), **known)
    return Kept(row.id, row.region, row.entered, np.datetime64(row.made_at.replace(tzinfo=None), "s"), outlook)
