"""Older archives are taken to the present form when opened, and nothing of them is lost on the way."""

import sqlite3
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import sqlalchemy as sa
from alembic.autogenerate import compare_metadata
from alembic.migration import MigrationContext
from tests.builders import REGION, STORM_DAY, invented_day

from skylag.archive import Archive, forms, open_archive, schema
from skylag.errors import SkylagError

FORM_1 = {"schema_version", "region", "product", "document", "chunk", "flag", "bias"}


def make_old(archive: Archive) -> None:
    """Take an archive back to form 1, as programs before the steps made it: their tables and one line of form."""
    with archive._write_engine.begin() as connection:
        for table in reversed(schema.metadata.sorted_tables):
            if table.name not in FORM_1:
                connection.exec_driver_sql(f"DROP TABLE {table.name}")
        connection.exec_driver_sql("DROP TABLE alembic_version")
        connection.exec_driver_sql("ALTER TABLE product DROP COLUMN provisional")
        connection.exec_driver_sql("ALTER TABLE flag DROP COLUMN speed_sigma_m_s")
        connection.exec_driver_sql("DELETE FROM schema_version WHERE version > 1")


def test_steps_give_the_tables_that_are_written_down(archive: Archive) -> None:
    """The sum of all steps is the schema: no table, column, index or type is missing or left over."""
    with archive._read_engine.connect() as connection:
        context = MigrationContext.configure(connection, opts={"compare_type": True})
        assert compare_metadata(context, schema.metadata) == []
        assert forms._form_of(connection) == schema.SCHEMA_VERSION


def test_an_old_archive_is_taken_along(archive_place: str) -> None:
    storm = invented_day(STORM_DAY)
    with open_archive(archive_place) as archive:
        archive.save(storm)
        archive.pin(REGION.name, STORM_DAY, 1)
        make_old(archive)
    with open_archive(archive_place) as archive:
        np.testing.assert_array_equal(archive.fields(REGION.name, STORM_DAY).vtec, storm.fields.vtec)
        assert archive.days()[0].pinned and archive.save(storm) == 2
        assert archive.check() == ()
        with archive._read_engine.connect() as connection:
            context = MigrationContext.configure(connection, opts={"compare_type": True})
            assert compare_metadata(context, schema.metadata) == []


def test_a_copy_is_made_before_a_step(tmp_path: Path) -> None:
    place = tmp_path / "archive.sqlite"
    storm = invented_day(STORM_DAY)
    with open_archive(place) as archive:
        archive.save(storm)
        make_old(archive)
    with open_archive(place):
        pass
    copy = tmp_path / "archive.sqlite.form-1"
    with sqlite3.connect(copy) as connection:
        assert connection.execute("SELECT max(version) FROM schema_version").fetchone() == (1,)
        assert connection.execute("SELECT count(*) FROM chunk").fetchone()[0] > 100
        assert connection.execute("PRAGMA integrity_check").fetchone() == ("ok",)
    connection.close()
    made = copy.stat().st_mtime_ns
    with open_archive(place):
        pass
    assert copy.stat().st_mtime_ns == made, "an archive of the present form is not copied"


def test_no_copy_of_a_new_archive(tmp_path: Path) -> None:
    with open_archive(tmp_path / "archive.sqlite"):
        pass
    assert not list(tmp_path.glob("*.form-*"))


def test_a_step_that_fails_changes_nothing(archive_place: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """The database refuses the last table of the step: the archive is as old as before, and whole."""
    with open_archive(archive_place) as archive:
        archive.save(invented_day(STORM_DAY))
        make_old(archive)
        with archive._write_engine.begin() as connection:
            connection.exec_driver_sql("CREATE TABLE delivery (other INTEGER)")
    with pytest.raises(SkylagError, match="delivery"):
        open_archive(archive_place)
    engine = archive._write_engine
    with engine.begin() as connection:
        assert forms._form_of(connection) == 1
        tables = set(sa.inspect(connection).get_table_names())
        assert not tables & {"notice", "task", "access_key", "alembic_version"}
        connection.exec_driver_sql("DROP TABLE delivery")
    engine.dispose()
    with open_archive(archive_place) as opened:
        assert opened.days()[0].version == 1


def test_several_processes_step_at_once(archive_place: str) -> None:
    """One takes the step, the others find it taken."""
    with open_archive(archive_place) as archive:
        archive.save(invented_day(STORM_DAY))
        make_old(archive)
    program = "import sys; from skylag.archive import open_archive\nwith open_archive(sys.argv[1]): print('open')\n"
    running = [
        subprocess.Popen([sys.executable, "-c", program, archive_place], stdout=subprocess.PIPE,
                         stderr=subprocess.PIPE, text=True)
        for _ in range(3)
    ]  # fmt: skip
    for process in running:
        said, trouble = process.communicate(timeout=60)
        assert (process.returncode, said) == (0, "open\n"), trouble
