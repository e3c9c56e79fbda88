"""Activity of Sun and magnetic field in the database: measured indices, and outlooks of ap with when they were made.

Days are UTC days, as indices are told.  Rows are added and never changed: of a day measured twice the row that came
last counts, of outlooks that which was made last before the moment asked for.  Never computes an index.
"""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import sqlalchemy as sa
from sqlalchemy.engine import Connection

from skylag.archive import records, schema
from skylag.archive.part import Part
from skylag.errors import Refused
from skylag.tables import ActivityOutlook, Floats, Indices

Day = np.datetime64 | str  # a UTC day, like 2031-05-11
_ROWS_AT_ONCE = 2000


@dataclass(frozen=True)
class DayActivity:
    """A day in a list: highest Kp of its eight, its mean ap, observed F10.7; NaN where it was not told."""

    kp_highest: float
    ap_daily: float
    f107: float


@dataclass(frozen=True)
class Foretold:
    """ap (8,) foretold for a UTC day, when it was made (UTC), where it came from."""

    day: np.datetime64
    made: np.datetime64
    ap: Floats
    source: str


class Activity(Part):
    """The activity kept in an archive."""

    # ------------------------------------------------------------------------------------------ measured

    def keep_measured(self, indices: Indices, source: str, now: np.datetime64) -> int:
        """Keep measured days; gives how many were new or other than before."""
        table = schema.activity
        told = {
            str(day): records.to_text({
                "kp": _list(indices.kp[row]), "ap": _list(indices.ap[row]),
                "daily_ap": float(indices.daily_ap[row]), "f107": float(indices.f107_observed[row]),
            })
            for row, day in enumerate(indices.day)
        }  # fmt: skip

        def insert(connection: Connection) -> int:
            known = {row.day: row.facts for row in _newest_rows(connection, table)}
            rows = [
                {"day": day, "facts": facts, "source": source[:200], "entered_ns": _ns(now)}
                for day, facts in told.items() if known.get(day) != facts
            ]  # fmt: skip
            for start in range(0, len(rows), _ROWS_AT_ONCE):
                connection.execute(sa.insert(table), rows[start : start + _ROWS_AT_ONCE])
            return len(rows)

        return int(self._write(insert))

    def measured(self, since: Day | None = None, until: Day | None = None) -> Indices:
        """The measured days of a span, both ends inside, days ascending; of each the row that came last."""
        with self._reading() as connection:
            rows = _newest_rows(connection, schema.activity, since, until)
        facts = [records.from_text(row.facts) for row in rows]
        return Indices(
            day=np.array([row.day for row in rows], dtype="datetime64[D]"),
            kp=np.array([one["kp"] for one in facts], dtype=np.float64).reshape(-1, 8),
            ap=np.array([one["ap"] for one in facts], dtype=np.float64).reshape(-1, 8),
            daily_ap=np.array([one["daily_ap"] for one in facts], dtype=np.float64),
            f107_observed=np.array([one["f107"] for one in facts], dtype=np.float64),
        )

    def by_day(self, since: Day | None = None, until: Day | None = None) -> Mapping[str, DayActivity]:
        """What a list of days shows of each measured day."""
        with self._reading() as connection:
            rows = _newest_rows(connection, schema.activity, since, until)
        told = [(row.day, records.from_text(row.facts)) for row in rows]
        return {day: DayActivity(_highest(one["kp"]), one["daily_ap"], one["f107"]) for day, one in told}

    # ------------------------------------------------------------------------------------------ foretold

    def keep_foretold(self, outlook: ActivityOutlook, source: str, now: np.datetime64) -> int:
        """Keep an outlook of ap; gives how many of its rows were new.

        Raises Refused where a row was made after the day it speaks of was over, or where ap is out of range.
        """
        if not np.all((outlook.ap >= 0) & (outlook.ap <= 400)):
            raise Refused("outlook of ap: give eight values from 0 to 400 for each day", name="ap",
                          value=str(outlook.ap.tolist())[:80], allowed="0 to 400")  # fmt: skip
        late = outlook.made >= (outlook.day + np.timedelta64(1, "D")).astype("datetime64[ns]")
        if late.any():
            day, made = outlook.day[late][0], np.datetime_as_string(outlook.made[late][0], unit="m")
            raise Refused(
                f"outlook of ap for {day}, made {made} UTC: the day was over by then, so it is no outlook; import "
                "measured indices instead, or give the time it was made",
                name="day", value=str(day), allowed=f"days not over at {made} UTC",
            )  # fmt: skip
        table = schema.activity_outlook

        def insert(connection: Connection) -> int:
            count = 0
            for day, made, row in zip(outlook.day, outlook.made, outlook.ap, strict=True):
                key = {"day": str(day), "made_ns": _ns(made)}
                facts = records.to_text({"ap": _list(row)})
                query = sa.select(table.c.facts).where(*(table.c[name] == value for name, value in key.items()))
                if connection.scalar(query.order_by(table.c.id.desc()).limit(1)) != facts:
                    row_of = {**key, "facts": facts, "source": source[:200], "entered_ns": _ns(now)}
                    connection.execute(sa.insert(table).values(**row_of))
                    count += 1
            return count

        return int(self._write(insert))

    def foretold(self, since: Day | None = None, until: Day | None = None) -> tuple[Foretold, ...]:
        """Outlooks of the days of a span, by day and by when they were made; of equals that which was entered last."""
        table = schema.activity_outlook
        query = sa.select(table).order_by(table.c.day, table.c.made_ns, table.c.id)
        if since is not None:
            query = query.where(table.c.day >= str(since))
        if until is not None:
            query = query.where(table.c.day <= str(until))
        with self._reading() as connection:
            rows = connection.execute(query).all()
        newest = {(row.day, row.made_ns): row for row in rows}
        return tuple(
            Foretold(np.datetime64(row.day, "D"), np.datetime64(int(row.made_ns), "ns"),
                     np.array(records.from_text(row.facts)["ap"], dtype=np.float64), row.source)
            for row in newest.values()
        )  # fmt: skip


def _newest_rows(
    connection: Connection, table: sa.Table, since: Day | None = None, until: Day | None = None
) -> Sequence[Any]:
    newest = sa.select(sa.func.max(table.c.id)).group_by(table.c.day)
    if since is not None:
        newest = newest.where(table.c.day >= str(since))
    if until is not None:
        newest = newest.where(table.c.day <= str(until))
    return connection.execute(sa.select(table).where(table.c.id.in_(newest)).order_by(table.c.day)).all()


def _highest(values: Sequence[float]) -> float:
    return max((value for value in values if value == value), default=math.nan)  # not-a-number differs from itself


def _list(values: npt.NDArray[Any]) -> list[float]:
    return [float(value) for value in values]


def _ns(time: np.datetime64) -> int:
    return int(time.astype("datetime64[ns]").astype(np.int64))
