"""Keys of access in the database: their names, scopes and hashes.  Never sees a key itself, and never makes one."""

from dataclasses import dataclass

import numpy as np
import sqlalchemy as sa
from sqlalchemy.engine import Connection

from skylag.archive import schema
from skylag.archive.part import Part
from skylag.errors import Missing, Refused

SCOPES = ("read", "write", "admin")  # each may do what those before it may


@dataclass(frozen=True)
class Key:
    """A key as it is listed: UTC times; revoked is not-a-time while it is good."""

    name: str
    scope: str
    made: np.datetime64
    revoked: np.datetime64


class Keys(Part):
    """The keys of an archive."""

    def add(self, name: str, scope: str, sha256: str, now: np.datetime64) -> None:
        """Keep a key's hash.  Raises Refused for a name that is taken or empty, or a scope there is not."""
        if scope not in SCOPES:
            raise Refused(
                f"scope {scope!r}: choose one of {', '.join(SCOPES)}", name="scope", value=scope, allowed=SCOPES
            )
        if not (0 < len(name) <= 100 and name.isprintable() and name == name.strip()):
            raise Refused(
                f"name {name!r}: a key's name has 1 to 100 printable characters, no blank at its ends",
                name="name", value=name, allowed="1 to 100 printable characters",
            )  # fmt: skip

        def insert(connection: Connection) -> None:
            table = schema.access_key
            if connection.scalar(sa.select(table.c.id).where(table.c.name == name)) is not None:
                raise Refused(
                    f"there was a key named {name} already; names are not used twice, so that a log can be read later",
                    name="name", value=name, allowed="a new name",
                )  # fmt: skip
            connection.execute(sa.insert(table).values(name=name, scope=scope, sha256=sha256, made_ns=_ns(now)))

        self._write(insert)

    def revoke(self, name: str, now: np.datetime64) -> None:
        """Make a key useless from now on; its name stays.  Raises Missing where there is none."""

        def change(connection: Connection) -> None:
            table = schema.access_key
            ours = (table.c.name == name) & table.c.revoked_ns.is_(None)
            if not connection.execute(sa.update(table).where(ours).values(revoked_ns=_ns(now))).rowcount:
                known = sorted(connection.scalars(sa.select(table.c.name).where(table.c.revoked_ns.is_(None))))
                raise Missing(
                    f"there is no good key named {name!r}; good ones: {', '.join(known) or 'none'}",
                    what=name, nearest=known,
                )  # fmt: skip

        self._write(change)

    def all(self) -> tuple[Key, ...]:
        """All keys, good and revoked, by name."""
        table = schema.access_key
        with self._reading() as connection:
            rows = connection.execute(sa.select(table).order_by(table.c.name)).all()
        return tuple(
            Key(
                row.name, row.scope, np.datetime64(row.made_ns, "ns"),
                np.datetime64("NaT", "ns") if row.revoked_ns is None else np.datetime64(row.revoked_ns, "ns"),
            )
            for row in rows
        )  # fmt: skip

    def scope_of(self, sha256: str) -> str | None:
        """The scope of the good key with this hash; None where there is none."""
        table = schema.access_key
        with self._reading() as connection:
            query = sa.select(table.c.scope).where(table.c.sha256 == sha256, table.c.revoked_ns.is_(None))
            found = connection.scalar(query)
        return None if found is None else str(found)


def _ns(time: np.datetime64) -> int:
    return int(time.astype("datetime64[ns]").astype(np.int64))
