"""A backup holds everything, comes back into either database, and is never half there."""

import json
from pathlib import Path

import numpy as np
import pytest
import sqlalchemy as sa
from tests.builders import CALM_DAY, REGION, STORM_DAY, invented_day

from skylag.archive import Archive, open_archive, schema, slants
from skylag.archive.backups import backup, restore
from skylag.errors import FormatError, Refused
from skylag.tables import Fields

T0 = np.datetime64("2031-05-12T08:00:00", "ns")


def fill(archive: Archive) -> None:
    archive.save(invented_day(CALM_DAY, storm=False))
    archive.save(invented_day(STORM_DAY))
    archive.save(invented_day(STORM_DAY, seed=5))
    archive.pin(REGION.name, STORM_DAY, 1)
    for number in range(3):
        archive.tasks.add("tiny", f"task {number}", {"number": number}, T0)
    archive.tasks.claim("elsewhere/1", T0, 60, 10)
    archive.keys.add("office", "write", "0" * 64, T0)


def test_there_and_back(archive: Archive, tmp_path: Path) -> None:
    """From either database into a folder, and from the folder into SQLite."""
    fill(archive)
    counts = backup(archive, tmp_path / "kept")
    assert counts["product"] == 3 and counts["chunk"] == 3 * 24 * len(Fields.LAYERS) and counts["access_key"] == 1
    with open_archive(tmp_path / "new") as other:
        assert restore(tmp_path / "kept", other) == counts
        assert other.check() == ()
        assert other.days() == archive.days()
        for version in (1, 2):
            for layer in Fields.LAYERS:
                np.testing.assert_array_equal(
                    getattr(other.fields(REGION.name, STORM_DAY, version=version), layer),
                    getattr(archive.fields(REGION.name, STORM_DAY, version=version), layer),
                )
        assert other.tasks.counts()["waiting"] == 3, "what was running waits again"
        assert repr(other.keys.all()) == repr(archive.keys.all())  # repr: not-a-time is not equal to itself
        assert other.save(invented_day(STORM_DAY)) == 3
        assert other.tasks.add("tiny", "task 9", {"number": 9}, T0) == 4, "numbers go on"


def test_into_either_database(archive: Archive, tmp_path: Path) -> None:
    with open_archive(tmp_path / "old") as old:
        fill(old)
        backup(old, tmp_path / "kept")
        restore(tmp_path / "kept", archive)
        assert archive.check() == () and archive.days() == old.days()
    assert archive.tasks.add("tiny", "task 9", {"number": 9}, T0) == 4
    assert archive.save(invented_day(STORM_DAY)) == 3
    with pytest.raises(Refused, match="holds something already"):
        restore(tmp_path / "kept", archive)


def test_a_backup_can_be_looked_at(tmp_path: Path) -> None:
    with open_archive(tmp_path / "old") as old:
        fill(old)
        backup(old, tmp_path / "kept")
    assert json.loads((tmp_path / "kept" / "backup.json").read_text())["slant_tables"] == 3
    with open_archive(tmp_path / "kept") as kept:
        assert len(kept.samples(REGION.name, STORM_DAY).rays) > 0


def test_nothing_is_written_over(tmp_path: Path) -> None:
    (tmp_path / "kept").mkdir()
    with open_archive(tmp_path / "old") as old, pytest.raises(Refused, match="is there already"):
        backup(old, tmp_path / "kept")
    assert list((tmp_path / "kept").iterdir()) == []


def test_no_backup_of_damage(archive: Archive, tmp_path: Path) -> None:
    archive.save(invented_day(STORM_DAY))
    path = slants.path_of(archive.slant_folder, archive.day(REGION.name, STORM_DAY).slant_sha256)
    path.write_bytes(path.read_bytes()[:-1] + b"?")
    with pytest.raises(FormatError, match="slant table is damaged"):
        backup(archive, tmp_path / "kept")
    assert not list(tmp_path.glob("kept*"))


def test_a_changed_backup_is_refused(tmp_path: Path) -> None:
    with open_archive(tmp_path / "old") as old:
        fill(old)
        backup(old, tmp_path / "kept")
    database = tmp_path / "kept" / "archive.sqlite"
    database.write_bytes(database.read_bytes()[:-1] + b"?")
    with open_archive(tmp_path / "new") as new:
        with pytest.raises(FormatError, match="not the one that was backed up"):
            restore(tmp_path / "kept", new)
        with pytest.raises(FormatError, match="is no backup"):
            restore(tmp_path / "old", new)
        assert new.days() == ()


def test_rows_of_no_day_are_found(tmp_path: Path) -> None:
    with open_archive(tmp_path) as archive:
        archive.save(invented_day(STORM_DAY))
        with archive._write_engine.connect() as connection:
            connection.exec_driver_sql("COMMIT")
            connection.exec_driver_sql("PRAGMA foreign_keys=OFF")
            connection.execute(sa.update(schema.flag).values(product=99))
            connection.exec_driver_sql("PRAGMA foreign_keys=ON")
        assert any("3 rows of table flag are of no day" in line for line in archive.check())


def test_a_day_that_goes_on_leaves_one_older_version(archive: Archive) -> None:
    """Provisional versions give way to the next but one; final and pinned ones stay."""
    for seed in range(4):
        archive.save(invented_day(STORM_DAY, seed=seed), provisional=True)
    (head,) = archive.days()
    assert (head.version, head.versions, head.provisional) == (4, (3, 4), True)
    archive.pin(REGION.name, STORM_DAY, 3)
    archive.save(invented_day(STORM_DAY, seed=9))
    archive.pin(REGION.name, STORM_DAY, None)
    (head,) = archive.days()
    assert (head.version, head.versions, head.provisional) == (5, (3, 5), False)
    archive.save(invented_day(STORM_DAY, seed=10))
    assert archive.days()[0].versions == (5, 6), "a final version is never taken away"
    assert all(line.startswith("stray") for line in archive.check())
