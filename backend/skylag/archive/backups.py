"""A whole archive copied to a folder, and brought back from one, whatever database it is kept in.

A backup is itself an archive on SQLite with its slant tables beside it and a list of what it holds; it can be looked
at like any other, and restored into SQLite or PostgreSQL.  It appears whole or not at all.  Never writes over an
archive that holds something.  What was sent in but not computed yet is not part of it.
"""

import hashlib
import json
import shutil
from collections.abc import Iterator
from pathlib import Path

import sqlalchemy as sa
from sqlalchemy.engine import Connection

from skylag.archive import schema, slants
from skylag.archive.store import Archive, open_archive
from skylag.errors import FormatError, Missing, Refused

_ROWS_AT_ONCE = 200
_LIST = "backup.json"
# Parents before children; the form is stamped by opening.
_TABLES = [table for table in schema.metadata.sorted_tables if table is not schema.schema_version]


def backup(archive: Archive, folder: Path) -> dict[str, int]:
    """Copy an archive, as it is at one moment, into a new folder; gives table -> rows.

    Others may read and write meanwhile.  Raises Refused where the folder is there already, FormatError or Missing where
    a slant table is damaged or lost: then there is no backup.
    """
    if folder.exists():
        raise Refused(
            f"{folder}: is there already; a backup goes into a new folder", name="folder", value=str(folder),
            allowed="a folder that is not there yet",
        )  # fmt: skip
    passing = folder.with_name(folder.name + ".writing")
    shutil.rmtree(passing, ignore_errors=True)
    try:
        with open_archive(passing) as copy, archive.at_one_moment() as source:
            counts = copy.fill(lambda goal: _copy_tables(source, goal))
            named = sorted(set(source.scalars(sa.select(schema.product.c.slant_sha256))))
            for sha256 in named:
                _copy_slants(archive.slant_folder, copy.slant_folder, sha256)
        database = passing / "archive.sqlite"
        facts = {
            "form": schema.SCHEMA_VERSION, "rows": counts, "slant_tables": len(named),
            "database_sha256": _hash(database),
        }  # fmt: skip
        (passing / _LIST).write_text(json.dumps(facts, indent=1) + "\n", encoding="utf-8")
        passing.rename(folder)
    finally:
        shutil.rmtree(passing, ignore_errors=True)
    return counts


def restore(folder: Path, archive: Archive) -> dict[str, int]:
    """Fill an empty archive from a backup; gives table -> rows.  Work that was running is waiting again.

    Raises Refused where the archive holds something, FormatError where the backup is not what it was when made.
    """
    try:
        facts = json.loads((folder / _LIST).read_text(encoding="utf-8"))
        whole = _hash(folder / "archive.sqlite") == facts["database_sha256"]
    except (OSError, ValueError, KeyError) as cause:
        raise FormatError(f"{folder}: is no backup of an archive ({cause})", path=str(folder), line=0) from cause
    if not whole:
        raise FormatError(
            f"{folder}: the database is not the one that was backed up; take another backup", path=str(folder), line=0
        )
    with open_archive(folder) as kept, kept.at_one_moment() as source:
        for sha256 in sorted(set(source.scalars(sa.select(schema.product.c.slant_sha256)))):
            _copy_slants(kept.slant_folder, archive.slant_folder, sha256)

        def fill(goal: Connection) -> dict[str, int]:
            for table in (schema.region, schema.task, schema.access_key, schema.notice):
                if goal.execute(sa.select(table).limit(1)).first() is not None:
                    raise Refused(
                        f"archive {archive.name} holds something already; a backup is restored into an empty one",
                        name="archive", value=archive.name, allowed="an empty archive",
                    )  # fmt: skip
            counts = _copy_tables(source, goal)
            running = schema.task.c.state == "running"
            goal.execute(sa.update(schema.task).where(running).values(state="waiting", holder="", held_until_ns=0))
            return counts

        counts = archive.fill(fill)
    return counts


def _copy_tables(source: Connection, goal: Connection) -> dict[str, int]:
    """All rows of all tables; the databases count on from the highest number."""
    counts = {}
    for table in _TABLES:
        counts[table.name] = 0
        for rows in _rows(source, table):
            goal.execute(sa.insert(table), rows)
            counts[table.name] += len(rows)
        if goal.dialect.name == "postgresql" and "id" in table.c:
            highest = goal.scalar(sa.select(sa.func.max(table.c.id)))
            if highest is not None:
                goal.execute(sa.select(sa.func.setval(sa.func.pg_get_serial_sequence(table.name, "id"), highest)))
    return counts


def _rows(source: Connection, table: sa.Table) -> Iterator[list[dict[str, object]]]:
    order = list(table.primary_key.columns)
    found = source.execution_options(yield_per=_ROWS_AT_ONCE).execute(sa.select(table).order_by(*order))
    for part in found.mappings().partitions():
        yield [dict(row) for row in part]


def _copy_slants(source: Path, goal: Path, sha256: str) -> None:
    """Copy one slant table; what arrives is what its address says."""
    there = slants.path_of(goal, sha256)
    if there.is_file():
        return
    path = slants.path_of(source, sha256)
    if not path.is_file():
        raise Missing(f"the slant table {path} is not there; see `skylag check`", what=str(path), nearest=None)
    there.parent.mkdir(parents=True, exist_ok=True)
    passing = there.with_name(f"writing-{sha256}")
    shutil.copyfile(path, passing)
    if _hash(passing) != sha256:
        passing.unlink()
        raise FormatError(f"{path}: the slant table is damaged; see `skylag check`", path=str(path), line=0)
    passing.replace(there)


def _hash(path: Path) -> str:
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()
