"""The form of the database: found out, and taken step by step to the one this program knows.

Steps run inside the one transaction that is handed in, whole or not at all.  A SQLite file that holds something is
copied first.  Never goes back a step: the copy is the way back.
"""

import contextlib
import os
import sqlite3
from pathlib import Path
from typing import Any

import sqlalchemy as sa
from sqlalchemy.engine import Connection

from skylag.archive import migrations, schema
from skylag.errors import Refused

_PREPARE_LOCK = 0x536B794C  # any number that is ours


def bring_up(connection: Connection, name: str) -> None:
    """Make the tables where there are none, take an older form to the present one.

    connection  in a transaction that may write; other openers wait for it
    name        of the archive, for messages
    Raises Refused for a form newer than this program.
    """
    if connection.dialect.name == "postgresql":  # two processes that open a new database take turns
        connection.execute(sa.select(sa.func.pg_advisory_xact_lock(_PREPARE_LOCK)))
    found = _form_of(connection)
    if found == schema.SCHEMA_VERSION:
        return
    if found > schema.SCHEMA_VERSION:
        raise Refused(
            f"archive {name} has form {found}, this program knows up to {schema.SCHEMA_VERSION}; "
            "update the program, or name another archive",
            name="archive", value=found, allowed=schema.SCHEMA_VERSION,
        )  # fmt: skip
    if found and connection.dialect.name == "sqlite":
        path = Path(str(connection.engine.url.database))
        copy_sqlite(path, path.with_name(f"{path.name}.form-{found}"))
    _take_steps(connection, found)


def is_present(connection: Connection) -> bool:
    """Whether the database has the form this program knows, so that nothing need be done."""
    return _form_of(connection) == schema.SCHEMA_VERSION


def _form_of(connection: Connection) -> int:
    """Number of the form; 0 for an empty database."""
    if not sa.inspect(connection).has_table(schema.schema_version.name):
        return 0
    return int(connection.scalar(sa.select(sa.func.max(schema.schema_version.c.version))) or 0)


def _take_steps(connection: Connection, found: int) -> None:
    """Run the steps after form `found`."""
    from alembic.config import Config  # a third of a second to import, and seldom needed
    from alembic.runtime.environment import EnvironmentContext
    from alembic.script import ScriptDirectory

    folder = Path(str(migrations.__file__)).parent
    script = ScriptDirectory(str(folder), version_locations=[str(folder / "versions")])

    def steps(revision: Any, _context: Any) -> Any:
        return script._upgrade_revs("head", revision)

    def adopt(revision: Any, _context: Any) -> Any:
        return script._stamp_revs(str(found), revision)

    todo = [steps]
    if found and not sa.inspect(connection).has_table("alembic_version"):
        todo = [adopt, steps]  # made before forms were counted by steps
    for plan in todo:
        with EnvironmentContext(Config(), script, fn=plan) as environment:
            environment.configure(connection=connection, target_metadata=schema.metadata)
            environment.run_migrations()


def copy_sqlite(source: Path, goal: Path) -> None:
    """Copy a SQLite database that may be in use to a file that appears whole; one already there is replaced."""
    passing = goal.with_name(goal.name + ".writing")
    passing.unlink(missing_ok=True)
    try:
        with (
            contextlib.closing(sqlite3.connect(source, timeout=30)) as old,
            contextlib.closing(sqlite3.connect(passing)) as new,
        ):
            old.backup(new)
            new.execute("PRAGMA journal_mode=DELETE")  # one file, with nothing beside it
        with passing.open("rb") as written:
            os.fsync(written.fileno())
        passing.replace(goal)
    finally:
        passing.unlink(missing_ok=True)
