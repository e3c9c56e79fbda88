"""The archive: days of products kept in SQLite or PostgreSQL, about a dozen verbs.

A save is one transaction and makes a new version; nothing stored is ever changed or silently replaced.  SQLite: readers
in WAL mode see whole days only, one thread writes, and writers of several processes wait for one another.  PostgreSQL:
a pool.  Slant tables lie beside the database as Parquet.  Never computes, and never asks what time it is: the database
stamps its own rows.
"""

import threading
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager, suppress
from dataclasses import replace
from pathlib import Path
from typing import Any, Self, TypeVar

import numpy as np
import numpy.typing as npt
import sqlalchemy as sa
from sqlalchemy.engine import URL, Connection, Engine, make_url

from skylag.archive import chunks, forms, records, schema, slants
from skylag.archive.activity import Activity
from skylag.archive.keys import Keys
from skylag.archive.notices import Notices
from skylag.archive.outlooks import Outlooks
from skylag.archive.records import DayHead, DayRecord, SiteStates
from skylag.archive.sites import Sites, newest
from skylag.archive.tasks import Ending, Tasks, end_in
from skylag.errors import FormatError, Missing, Refused, SkylagError
from skylag.tables import UNSEEN, Biases, Fields, Flag, Products, Rays, Samples, Times

BUSY_WAIT_S = 30.0

_POOL = 20  # connections kept, and as many more for a rush: the web serves up to forty requests at a time
_MOST_VERSIONS = 2**31 - 1  # what the column holds
_SLANTS_LOCK = 0x536B7453  # any number that is ours
_HOUR_NS = 3600 * 10**9
Day = np.datetime64 | str  # a GPS-time day, like 2031-05-11
_Result = TypeVar("_Result")


_SUFFIXES = (".sqlite", ".db")  # of a file that is named as an archive itself


def open_archive(
    place: str | Path, *, slant_folder: str | Path | None = None, existing: bool = False
) -> "Archive":
    """Open an archive, made new where there is none.

    Raises Missing where `existing` is asked for and nothing is there, Refused where the place is no archive.

    place         a folder (its archive.sqlite is meant), a file ending in .sqlite or .db, or a URL: sqlite:///path,
                  postgresql://user@host/name
    slant_folder  where slant tables lie; beside a SQLite file when not given.  A PostgreSQL URL may name it as
                  `?slant_folder=/path`.
    """
    url = _url_of(place)
    query = dict(url.query)
    named = query.pop("slant_folder", None)
    url = url.set(query=query)
    folder = slant_folder if slant_folder is not None else named
    if url.get_backend_name() == "sqlite":
        if not url.database or url.database == ":memory:":
            raise Refused(
                "an archive needs a file, not memory, since readers and the writer are apart; name a path",
                name="archive", value=str(place), allowed="a path or a database URL",
            )  # fmt: skip
        path = Path(url.database)
        if existing and not path.is_file():
            raise Missing(
                f"{place}: no archive is there; name one with --archive or SKYLAG_ARCHIVE, or begin one with "
                "`skylag demo` or `skylag day --archive`",
                what=str(place), nearest=None,
            )  # fmt: skip
        if path.suffix not in _SUFFIXES and path.is_file():
            raise Refused(
                f"{place}: is a file and no archive; name the folder of an archive, or one that is not there yet",
                name="archive", value=str(place), allowed="a folder, a .sqlite or .db file, or a database URL",
            )  # fmt: skip
        path.parent.mkdir(parents=True, exist_ok=True)
        folder = folder if folder is not None else path.with_name(path.name + ".slants")
    elif folder is None:
        raise Refused(
            f"archive {url.render_as_string()}: a PostgreSQL archive needs a folder for its slant tables; "
            "add ?slant_folder=/path to the URL",
            name="slant_folder", value=None, allowed="a folder that every process of the archive reaches",
        )  # fmt: skip
    return Archive(url, Path(str(folder)))


def _url_of(place: str | Path) -> URL:
    if isinstance(place, Path) or "://" not in place:
        path = Path(place)
        file = path if path.is_file() or path.suffix in _SUFFIXES else path / "archive.sqlite"
        return URL.create("sqlite", database=str(file))
    try:
        url = make_url(place)
    except sa.exc.ArgumentError as cause:
        raise Refused(
            f"archive {place}: this is no database URL; write a path, or postgresql://user@host/name",
            name="archive", value=place, allowed="a path or a database URL",
        ) from cause  # fmt: skip
    backend = url.get_backend_name()
    if backend not in ("sqlite", "postgresql"):
        raise Refused(
            f"archive {url.render_as_string()}: {backend} is not supported; use a path or postgresql://user@host/name",
            name="archive", value=backend, allowed=("sqlite", "postgresql"),
        )  # fmt: skip
    return url.set(drivername="postgresql+psycopg") if backend == "postgresql" else url


def _sqlite_engine(url: URL, begin: str) -> Engine:
    """An engine whose transactions open with `begin`; the driver's own habit of late transactions is switched off."""
    engine = sa.create_engine(
        url, connect_args={"timeout": BUSY_WAIT_S, "check_same_thread": False}, pool_size=_POOL, max_overflow=_POOL
    )

    @sa.event.listens_for(engine, "connect")
    def _on_connect(connection: Any, _record: Any) -> None:
        connection.isolation_level = None
        cursor = connection.cursor()
        cursor.execute(f"PRAGMA busy_timeout={int(BUSY_WAIT_S * 1000)}")
        cursor.execute("PRAGMA journal_mode=WAL")
        cursor.execute("PRAGMA synchronous=FULL")
        cursor.execute("PRAGMA foreign_keys=ON")
        cursor.close()

    @sa.event.listens_for(engine, "begin")
    def _on_begin(connection: Connection) -> None:
        connection.exec_driver_sql(begin)

    return engine


def _postgresql_engine(url: URL) -> Engine:
    try:
        return sa.create_engine(url, pool_pre_ping=True, pool_size=_POOL, max_overflow=_POOL)
    except ImportError as cause:
        raise Refused(
            "a PostgreSQL archive needs the package psycopg; run pip install 'skylag[server]', or name a folder",
            name="archive", value=url.render_as_string(), allowed="a path, or a PostgreSQL URL with psycopg installed",
        ) from cause  # fmt: skip


class Archive:
    """Days of products.  Safe to share between threads; another process opens its own."""

    def __init__(self, url: URL, slant_folder: Path) -> None:
        self.slant_folder = slant_folder
        self.name = url.render_as_string(hide_password=True)
        self._writer: ThreadPoolExecutor | None = None
        self._closed = threading.Event()
        self.tasks = Tasks(self._write, self._reading)
        self.keys = Keys(self._write, self._reading)
        self.notices = Notices(self._write, self._reading)
        self.outlooks = Outlooks(self._write, self._reading)
        self.activity = Activity(self._write, self._reading)
        self.sites = Sites(self._write, self._reading)
        if url.get_backend_name() == "sqlite":
            self._read_engine = _sqlite_engine(url, "BEGIN")
            self._write_engine = _sqlite_engine(url, "BEGIN IMMEDIATE")
            self._writer = ThreadPoolExecutor(max_workers=1, thread_name_prefix="archive-writer")
        else:
            self._read_engine = self._write_engine = _postgresql_engine(url)
        try:
            with self._reading() as connection:  # an archive that can only be read is opened too, a standby server's
                present = forms.is_present(connection)
            if not present:
                self._write(lambda connection: forms.bring_up(connection, self.name))
        except BaseException:
            self.close()
            raise

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_exception: object) -> None:
        self.close()

    def close(self) -> None:
        """Wait for the writer and let go of the database."""
        self._closed.set()
        if self._writer is not None:
            self._writer.shutdown(wait=True)
        self._read_engine.dispose()
        self._write_engine.dispose()

    # ------------------------------------------------------------------------------------------ keeping

    def save(self, products: Products, *, provisional: bool = False, ending: Ending | None = None) -> int:
        """Keep a day as a new version of it, whole or not at all; gives the version number, from 1.

        provisional  the day is still being added to: its later versions take the place of this one
        ending       of the task that made it; where its claim was lost nothing is kept and SkylagError is raised
        """
        _check_name(products.region.name)
        sha256 = slants.write(products.samples, self.slant_folder)

        def keep(connection: Connection) -> int:
            _hold_slants(connection, shared=True)
            if not slants.path_of(self.slant_folder, sha256).is_file():  # swept as a stray in this very moment
                slants.write(products.samples, self.slant_folder)
            version = self._save(connection, products, sha256, provisional)
            if ending is not None:
                end_in(connection, ending, version)
            return version

        return self._write(keep)

    def sweep(self, older_than_s: float) -> int:
        """Remove slant tables that no version names and that were last written before a time [s, of the folder's own
        file system]; gives how many.  Saves wait meanwhile, and one that named such a table writes it anew.
        """

        def remove(connection: Connection) -> int:
            _hold_slants(connection, shared=False)
            named = set(connection.scalars(sa.select(schema.product.c.slant_sha256)))
            gone = 0
            for path in slants.strays(self.slant_folder, named):
                with suppress(FileNotFoundError):  # it has just been finished, or thrown away by another
                    if path.stat().st_mtime < older_than_s:
                        path.unlink()
                        gone += 1
            return gone

        return self._write(remove)

    def pin(self, region: str, day: Day, version: int | None) -> None:
        """Make a version the one that is shown even when newer ones come; None takes the pin off."""

        def change(connection: Connection) -> None:
            ours = (schema.product.c.region == region) & (schema.product.c.day == _day_text(day))
            if version is not None:
                self._product_row(connection, region, day, version)
            connection.execute(sa.update(schema.product).where(ours).values(pinned=False))
            if version is not None:
                chosen = ours & (schema.product.c.version == version)
                connection.execute(sa.update(schema.product).where(chosen).values(pinned=True))

        self._write(change)

    # ------------------------------------------------------------------------------------------ telling

    def regions(self) -> tuple[str, ...]:
        """Names of the regions that have days, in order."""
        with self._reading() as connection:
            return tuple(connection.scalars(sa.select(schema.region.c.name).order_by(schema.region.c.name)))

    def days(
        self, region: str | None = None, since: Day | None = None, until: Day | None = None
    ) -> tuple[DayHead, ...]:
        """The stored days, of one region or of all, newest day first; each in the version that is shown.

        since, until  first and last day wanted, both inside
        """
        product = schema.product
        query = sa.select(
            product.c.id, product.c.region, product.c.day, product.c.version, product.c.pinned, product.c.saved_at,
            product.c.simulated, product.c.provisional, product.c.summary,
        ).order_by(product.c.day.desc(), product.c.region, product.c.version)  # fmt: skip
        if region is not None:
            if not _is_name(region):
                return ()
            query = query.where(product.c.region == region)
        if since is not None:
            query = query.where(product.c.day >= _day_text(since))
        if until is not None:
            query = query.where(product.c.day <= _day_text(until))
        with self._reading() as connection:
            rows = connection.execute(query).all()
        groups: dict[tuple[str, str], list[Any]] = {}
        for row in rows:
            groups.setdefault((row.region, row.day), []).append(row)
        return tuple(_head(_shown(group), [row.version for row in group]) for group in groups.values())

    def newest_versions(self, count: int) -> tuple[tuple[str, str, int], ...]:
        """Region, day and version of what was saved last, newest first; one entry per day."""
        product = schema.product.c
        query = sa.select(product.region, product.day, product.version).order_by(product.id.desc()).limit(4 * count)
        with self._reading() as connection:
            rows = connection.execute(query).all()
        newest: dict[tuple[str, str], int] = {}
        for row in rows:
            newest.setdefault((row.region, row.day), int(row.version))
        return tuple((region, day, version) for (region, day), version in list(newest.items())[:count])

    def size(self) -> tuple[int, int]:
        """How many days, and how many versions of days, are kept."""
        days = sa.select(schema.product.c.region, schema.product.c.day).distinct().subquery()
        with self._reading() as connection:
            versions = connection.scalar(sa.select(sa.func.count()).select_from(schema.product))
            return int(connection.scalar(sa.select(sa.func.count()).select_from(days)) or 0), int(versions or 0)

    def version_of(self, region: str, day: Day, version: int | None = None) -> int:
        """The version of a day that is shown, or the one named, if it is there; without reading anything of it."""
        product, text = schema.product.c, _day_text(day)
        with self._reading() as connection:
            found = None
            if _is_name(region) and (version is None or 1 <= version <= _MOST_VERSIONS):
                query = sa.select(product.version).where(product.region == region, product.day == text)
                if version is not None:
                    query = query.where(product.version == version)
                found = connection.scalar(query.order_by(product.pinned.desc(), product.version.desc()).limit(1))
            if found is None:
                raise self._missing(connection, region, text, version)
        return int(found)

    def newest(self, region: str, day: str, place: str) -> DayHead:
        """The newest kept day, of one region and one date where they are not empty.

        place  how a message names this archive.  Raises Missing where no such day is kept.
        """
        heads = [head for head in self.days() if region in ("", head.region) and day in ("", str(head.day))]
        if not heads:
            wanted = " ".join(part for part in (region, day) if part) or "any day"
            kept = sorted({f"{head.region} {head.day}" for head in self.days()})[-10:]
            raise Missing(
                f"{place}: {wanted} is not kept here; it keeps {', '.join(kept) or 'none'}; see `skylag day --archive`",
                what=wanted, nearest=kept,
            )  # fmt: skip
        return max(heads, key=lambda head: head.day)

    def day(self, region: str, day: Day, version: int | None = None) -> DayRecord:
        """The plain facts of a day; the pinned or newest version when none is named.

        The sites are those in force now, whatever the day was computed with (`site_states` has these).
        """
        with self._reading() as connection:
            row = self._product_row(connection, region, day, version)
            changes = newest(connection, row.region)
            times = self._times(connection, row.id)
            ours = (schema.product.c.region == row.region) & (schema.product.c.day == row.day)
            versions = connection.scalars(
                sa.select(schema.product.c.version).where(ours).order_by(schema.product.c.version)
            ).all()
        facts = records.from_text(row.record)
        own = records.region_from(facts["region"])
        return DayRecord(
            head=_head(row, versions),
            region=replace(own, sites=changes.over(own.sites)),
            receivers=tuple(records.receiver_from(one) for one in facts["receivers"]),
            times=times,
            lats=np.array(facts["lats"], dtype=np.float64),
            lons=np.array(facts["lons"], dtype=np.float64),
            origin=records.origin_from(facts["origin"]),
            calibration=facts["calibration"],
            bias_source=facts["bias_source"],
            bias_datum=facts["bias_datum"],
            slant_rows=row.slant_rows,
            slant_sha256=row.slant_sha256,
        )

    def fields(
        self,
        region: str,
        day: Day,
        start: np.datetime64 | None = None,
        end: np.datetime64 | None = None,
        version: int | None = None,
    ) -> Fields:
        """The maps with start <= GPS time < end; the whole day without."""
        with self._reading() as connection:
            row = self._product_row(connection, region, day, version)
            times = self._times(connection, row.id)
            first = 0 if start is None else int(np.searchsorted(times, start, side="left"))
            last = len(times) if end is None else int(np.searchsorted(times, end, side="left"))
            hours = _hours(times, row.day)
            layers = self._layers(connection, row, hours, first, max(first, last))
        facts = records.from_text(row.record)
        return Fields(
            times=times[first : max(first, last)],
            lats=np.array(facts["lats"], dtype=np.float64),
            lons=np.array(facts["lons"], dtype=np.float64),
            **layers,
        )

    def cell_at(self, record: DayRecord, lat: float, lon: float, time: np.datetime64) -> Fields:
        """One map of one cell: the cell that holds a place, at a time of `record.times`.  Outside the grid: unseen."""
        cell = record.cell_of(lat, lon)
        if cell is None:
            return _nothing_seen(np.array([time]).astype("datetime64[ns]"), lat, lon)
        one = np.timedelta64(1, "ns")
        head = record.head
        return _cut(self.fields(head.region, head.day, time, time + one, head.version), cell)

    def series(self, region: str, day: Day, lat: float, lon: float, version: int | None = None) -> Fields:
        """The day at the cell that holds a place: maps of one cell.  Outside the grid all of it is unseen."""
        record = self.day(region, day, version)
        cell = record.cell_of(lat, lon)
        if cell is None:
            return _nothing_seen(record.times, lat, lon)
        return _cut(self.fields(region, day, version=record.head.version), cell)

    def flags(
        self, region: str, day: Day, version: int | None = None, *, kind: str = "", since: np.datetime64 | None = None
    ) -> tuple[Flag, ...]:
        """The flags of a day, in the order they were saved; of one kind, and those that end at a GPS time or later."""
        table = schema.flag
        with self._reading() as connection:
            product = self._product_row(connection, region, day, version)
            query = sa.select(table).where(table.c.product == product.id).order_by(table.c.number)
            if kind:
                query = query.where(table.c.kind == kind)
            if since is not None:
                query = query.where(table.c.end_ns >= _nanoseconds(since))
            rows = connection.execute(query).all()
        return tuple(_flag(row) for row in rows)

    def biases(self, region: str, day: Day, version: int | None = None) -> Biases:
        """The code biases of a day."""
        table = schema.bias
        with self._reading() as connection:
            product = self._product_row(connection, region, day, version)
            query = sa.select(table).where(table.c.product == product.id).order_by(table.c.number)
            rows = connection.execute(query).all()
        facts = records.from_text(product.record)

        def words(name: str) -> Any:
            return np.array([getattr(row, name) for row in rows], dtype=np.str_)

        return Biases(
            kind=words("kind"), name=words("name"), system=words("system"), code1=words("code1"), code2=words("code2"),
            value_ns=np.array([_number(row.value_ns) for row in rows], dtype=np.float64),
            sigma_ns=np.array([_number(row.sigma_ns) for row in rows], dtype=np.float64),
            start=np.array([_instant(row.start_ns) for row in rows], dtype="datetime64[ns]"),
            end=np.array([_instant(row.end_ns) for row in rows], dtype="datetime64[ns]"),
            source=facts["bias_source"], datum=facts["bias_datum"],
        )  # fmt: skip

    def site_states(self, region: str, day: Day, version: int | None = None) -> SiteStates:
        """The states of the sites that the region had when the day was computed, with their reasons."""
        with self._reading() as connection:
            row = self._product_row(connection, region, day, version)
            times = self._times(connection, row.id)
            codes = self._document(connection, row.id, "site_states")
            reasons = bytes(self._document(connection, row.id, "site_reasons")).decode("utf-8")
        sites = records.region_from(records.from_text(row.record)["region"]).sites
        told = tuple(tuple(one) for one in records.from_text(reasons))
        return SiteStates(times=times, sites=sites, codes=codes, reasons=told)

    def samples(self, region: str, day: Day, version: int | None = None) -> Samples:
        """The whole slant table of a day, in order of time."""
        with self._reading() as connection:
            row = self._product_row(connection, region, day, version)
        return slants.read(self.slant_folder, row.slant_sha256)

    def rays_at(self, region: str, day: Day, time: np.datetime64, version: int | None = None) -> Rays:
        """The lines of sight of the epoch nearest to a GPS time; none where the nearest is over one interval away."""
        with self._reading() as connection:
            row = self._product_row(connection, region, day, version)
        return slants.read_at(self.slant_folder, row.slant_sha256, time).rays

    def check(self) -> tuple[str, ...]:
        """Everything wrong in the archive, one sentence each: the database itself, all checksums, lost and stray files.

        Reads everything once and changes nothing.  A stray file does no harm: a save was cut off after writing it.
        """
        found: list[str] = []
        named: dict[str, str] = {}
        with self._reading() as connection:
            if connection.dialect.name == "sqlite":
                told = connection.exec_driver_sql("PRAGMA integrity_check").scalars().all()
                found += [f"database: {line}" for line in told if line != "ok"]
            for table in (schema.document, schema.chunk, schema.flag, schema.bias):
                nobody = table.c.product.not_in(sa.select(schema.product.c.id))
                lost = connection.scalar(sa.select(sa.func.count()).select_from(table).where(nobody))
                found += [f"{lost} rows of table {table.name} are of no day"] if lost else []
            products = connection.execute(sa.select(schema.product).order_by(schema.product.c.id)).all()
            for row in products:
                where = f"{row.region}, day {row.day}, version {row.version}"
                named.setdefault(row.slant_sha256, where)
                try:
                    times = self._times(connection, row.id)
                    for name in ("site_states", "site_reasons"):
                        self._document(connection, row.id, name)
                    hours = _hours(times, row.day)
                    for hour in np.unique(hours):
                        first, last = np.searchsorted(hours, hour, "left"), np.searchsorted(hours, hour, "right")
                        self._layers(connection, row, hours, int(first), int(last))
                except (FormatError, Missing) as failure:
                    found.append(f"{where}: {failure.message}")
        for sha256, where in named.items():
            try:
                slants.verify(self.slant_folder, sha256)
            except (FormatError, Missing) as failure:
                found.append(f"{where}: {failure.message}")
        found += [f"stray file, of no day: {path}" for path in slants.strays(self.slant_folder, named)]
        return tuple(found)

    @contextmanager
    def at_one_moment(self) -> Iterator[Connection]:
        """A connection that sees the database as it is now, however long it reads; for copying."""
        with _explained(self.name, "read from"), self._read_engine.connect() as connection:
            if connection.dialect.name == "postgresql":  # a transaction of SQLite is of one moment by itself
                connection = connection.execution_options(isolation_level="REPEATABLE READ")
            with connection.begin():
                yield connection

    def fill(self, work: Callable[[Connection], _Result]) -> _Result:
        """Do work on the tables in one transaction; for copying."""
        return self._write(work)

    # ------------------------------------------------------------------------------------------ inner works

    def _write(self, work: Callable[[Connection], _Result]) -> _Result:
        """Do work in one transaction, in the one writing thread where the database is SQLite."""
        if self._closed.is_set():
            raise SkylagError(f"archive {self.name} is closed; open it again", archive=self.name)

        def in_transaction() -> _Result:
            with _explained(self.name, "write to"), self._write_engine.begin() as connection:
                return work(connection)

        return in_transaction() if self._writer is None else self._writer.submit(in_transaction).result()

    @contextmanager
    def _reading(self) -> Iterator[Connection]:
        with _explained(self.name, "read from"), self._read_engine.begin() as connection:
            yield connection

    def _save(self, connection: Connection, products: Products, sha256: str, provisional: bool) -> int:
        day = _day_text(products.day)
        # Counting up the region's row makes saves of one region take turns, so that versions never collide.
        counted = sa.update(schema.region).where(schema.region.c.name == products.region.name)
        if not connection.execute(counted.values(saves=schema.region.c.saves + 1)).rowcount:
            with_care = _insert_if_absent(connection)
            connection.execute(with_care.values(name=products.region.name, saves=0))
            connection.execute(counted.values(saves=schema.region.c.saves + 1))
        ours = (schema.product.c.region == products.region.name) & (schema.product.c.day == day)
        version = 1 + (connection.scalar(sa.select(sa.func.max(schema.product.c.version)).where(ours)) or 0)
        # One older provisional version stays while the day goes on, for those who are just looking at it.
        oldest = version - 1 if provisional else version
        passing = ours & schema.product.c.provisional & ~schema.product.c.pinned & (schema.product.c.version < oldest)
        connection.execute(sa.delete(schema.product).where(passing))
        inserted = connection.execute(
            sa.insert(schema.product).values(
                region=products.region.name, day=day, version=version, pinned=False, provisional=provisional,
                simulated=products.origin.simulated,
                summary=records.to_text(records.summarise(products)),
                record=records.to_text(records.record_of(products)),
                slant_sha256=sha256, slant_rows=len(products.samples.rays),
            )
        )  # fmt: skip
        made = inserted.inserted_primary_key
        assert made is not None  # the database gives a key to every row
        key = int(made[0])
        documents: dict[str, npt.NDArray[Any]] = {
            "times": products.fields.times.astype("datetime64[ns]").astype(np.int64),
            "site_states": products.site_states,
            "site_reasons": np.frombuffer(records.to_text(products.site_reasons).encode("utf-8"), dtype=np.uint8),
        }
        rows = [
            {"product": key, "name": name, **vars(chunks.pack(array, _label(key, name)))}
            for name, array in documents.items()
        ]
        connection.execute(sa.insert(schema.document), rows)
        hours = _hours(products.fields.times, day)
        pieces = [
            {
                "product": key, "layer": layer, "hour": int(hour),
                **vars(chunks.pack(getattr(products.fields, layer)[hours == hour], _label(key, layer, int(hour)))),
            }
            for layer in Fields.LAYERS
            for hour in np.unique(hours)
        ]  # fmt: skip
        if pieces:
            connection.execute(sa.insert(schema.chunk), pieces)
        if products.flags:
            flags = [{"product": key, "number": n, **_flag_row(flag)} for n, flag in enumerate(products.flags)]
            connection.execute(sa.insert(schema.flag), flags)
        biases = _bias_rows(products.calibration.biases, key)
        if biases:
            connection.execute(sa.insert(schema.bias), biases)
        return version

    def _product_row(self, connection: Connection, region: str, day: Day, version: int | None) -> Any:
        product, text = schema.product, _day_text(day)
        row = None
        # What cannot have been kept is not there; the databases need not be asked with numbers or texts they refuse.
        if _is_name(region) and (version is None or 1 <= version <= _MOST_VERSIONS):
            query = sa.select(product).where(product.c.region == region, product.c.day == text)
            if version is not None:
                query = query.where(product.c.version == version)
            row = connection.execute(query.order_by(product.c.pinned.desc(), product.c.version.desc()).limit(1)).first()
        if row is None:
            raise self._missing(connection, region, text, version)
        return row

    def _missing(self, connection: Connection, region: str, day: str, version: int | None) -> Missing:
        product = schema.product
        query = sa.select(product.c.day).where(product.c.region == region).distinct()
        days = sorted(connection.scalars(query)) if _is_name(region) else []
        what = f"region {region}, day {day}" + ("" if version is None else f", version {version}")
        if not days:
            known = sorted(connection.scalars(sa.select(schema.region.c.name)))
            named = f"it holds {', '.join(known)}" if known else "it holds no region yet"
            return Missing(f"the archive has no {what}; {named}", what=what, nearest=known)
        wanted = np.datetime64(day, "D")
        nearest = min(days, key=lambda one: abs(np.datetime64(one, "D") - wanted))
        return Missing(f"the archive has no {what}; the nearest it holds is {nearest}", what=what, nearest=nearest)

    def _document(self, connection: Connection, key: int, name: str) -> npt.NDArray[Any]:
        table = schema.document
        row = connection.execute(sa.select(table).where(table.c.product == key, table.c.name == name)).first()
        if row is None:
            raise Missing(f"the archive lost {_label(key, name)}; restore it from a backup", what=name, nearest=None)
        return chunks.unpack(chunks.Packed(row.dtype, row.shape, bytes(row.data), row.sha256), _label(key, name))

    def _times(self, connection: Connection, key: int) -> Times:
        return self._document(connection, key, "times").astype("datetime64[ns]")

    def _layers(
        self, connection: Connection, product: Any, hours: npt.NDArray[np.int64], first: int, last: int
    ) -> dict[str, npt.NDArray[Any]]:
        """All layers of the maps number first to last - 1, put together from their hours."""
        wanted = np.unique(hours[first:last])
        if not wanted.size:  # keep types and the grid of an empty span
            wanted_all = hours[:1]
            if not wanted_all.size:
                raise Missing("this day has no maps; process it again", what="maps", nearest=None)
            return {
                name: layer[:0] for name, layer in self._layers(connection, product, hours, 0, 1).items()
            }
        table = schema.chunk
        query = (
            sa.select(table)
            .where(table.c.product == product.id, table.c.hour >= int(wanted[0]), table.c.hour <= int(wanted[-1]))
            .order_by(table.c.layer, table.c.hour)
        )
        parts: dict[str, list[npt.NDArray[Any]]] = {name: [] for name in Fields.LAYERS}
        for row in connection.execute(query):
            label = _label(product.id, row.layer, row.hour)
            packed = chunks.Packed(row.dtype, row.shape, bytes(row.data), row.sha256)
            parts[row.layer].append(chunks.unpack(packed, label))
        offset = int(np.searchsorted(hours, wanted[0], side="left"))
        expected = int(np.searchsorted(hours, wanted[-1], side="right")) - offset
        layers = {}
        for name, pieces in parts.items():
            whole = np.concatenate(pieces) if pieces else np.empty((0,))
            if len(whole) != expected:
                raise Missing(
                    f"the archive lost part of layer {name} of region {product.region}, day {product.day}; "
                    "restore it from a backup or process the day again",
                    what=name, nearest=None,
                )  # fmt: skip
            layers[name] = whole[first - offset : last - offset]
        return layers


def _cut(fields: Fields, cell: tuple[int, int]) -> Fields:
    """Maps of one cell of the grid."""
    row, column = slice(cell[0], cell[0] + 1), slice(cell[1], cell[1] + 1)
    layers = {name: getattr(fields, name)[:, row, column] for name in Fields.LAYERS}
    return Fields(times=fields.times, lats=fields.lats[row], lons=fields.lons[column], **layers)


def _nothing_seen(times: Times, lat: float, lon: float) -> Fields:
    """Maps of one place where nothing is known."""
    shape = (len(times), 1, 1)
    nothing = np.full(shape, np.nan, dtype=np.float32)
    return Fields(
        times=times, lats=np.array([lat]), lons=np.array([lon]), vtec=nothing, vtec_sigma=nothing,
        support=np.zeros(shape, dtype=np.uint16), slope=nothing, slope_sigma=nothing, slope_east=nothing,
        slope_north=nothing, state=np.full(shape, UNSEEN, dtype=np.uint8),
    )  # fmt: skip


@contextmanager
def _explained(name: str, doing: str) -> Iterator[None]:
    """Failures of the database itself, in words."""
    try:
        yield
    except sa.exc.DBAPIError as cause:
        reason = str(cause.orig).strip().split("\n")[0]
        raise SkylagError(
            f"cannot {doing} the archive {name}: {reason}; nothing was changed; check its disk, rights and server",
            archive=name,
            reason=reason,
        ) from cause


def _hold_slants(connection: Connection, *, shared: bool) -> None:
    """Keep a sweep and saves apart until the transaction ends.  SQLite's write transactions take turns anyway."""
    if connection.dialect.name == "postgresql":
        lock = sa.func.pg_advisory_xact_lock_shared if shared else sa.func.pg_advisory_xact_lock
        connection.execute(sa.select(lock(_SLANTS_LOCK)))


def _insert_if_absent(connection: Connection) -> Any:
    """An insert into the region table that does nothing where the name is there (both databases speak it alike)."""
    if connection.dialect.name == "sqlite":
        from sqlalchemy.dialects.sqlite import insert
    else:
        from sqlalchemy.dialects.postgresql import insert  # type: ignore[assignment]
    return insert(schema.region).on_conflict_do_nothing()


def _label(key: int, name: str, hour: int | None = None) -> str:
    return f"product {key}, {name}" + ("" if hour is None else f", hour {hour}")


def _is_name(name: str) -> bool:
    """Can this be a region's name: it is part of addresses and a key of the database."""
    return 0 < len(name) <= 200 and "/" not in name and name.isprintable() and name == name.strip()


def _check_name(name: str) -> None:
    if not _is_name(name):
        raise Refused(
            f"region {name!r}: a name has 1 to 200 printable characters, no slash, no blank at its ends",
            name="region", value=name, allowed="1 to 200 printable characters without /",
        )  # fmt: skip


def _day_text(day: Day) -> str:
    try:
        text = str(np.asarray(day, dtype="datetime64[D]"))
    except ValueError as cause:
        raise Refused(
            f"day {day}: a day is written like 2031-05-11", name="day", value=str(day), allowed="YYYY-MM-DD"
        ) from cause
    return text


def _hours(times: Times, day: str) -> npt.NDArray[np.int64]:
    """Number of the hour of the day of each time; maps a little outside the day get hours below 0 or above 23."""
    since = times.astype("datetime64[ns]") - np.datetime64(day, "ns")
    return np.asarray(np.floor_divide(since.astype(np.int64), _HOUR_NS))


def _shown(group: list[Any]) -> Any:
    """Of the versions of one day, oldest first, the one that is shown."""
    pinned = [row for row in group if row.pinned]
    return pinned[-1] if pinned else group[-1]


def _head(row: Any, versions: Any) -> DayHead:
    saved = row.saved_at
    if saved.tzinfo is not None:  # PostgreSQL tells the zone, SQLite stamps in UTC and tells none
        saved = saved.replace(tzinfo=None) - saved.utcoffset()
    return DayHead(
        region=row.region, day=np.datetime64(row.day, "D"), version=row.version, versions=tuple(versions),
        pinned=bool(row.pinned), saved_at=np.datetime64(saved, "s"), simulated=bool(row.simulated),
        provisional=bool(row.provisional), **records.from_text(row.summary),
    )  # fmt: skip


def _number(value: float | None) -> float:
    return float("nan") if value is None else float(value)


def _or_none(value: float) -> float | None:
    return None if np.isnan(value) else float(value)


def _instant(value: int | None) -> np.datetime64:
    return np.datetime64("NaT", "ns") if value is None else np.datetime64(int(value), "ns")


def _nanoseconds(time: np.datetime64) -> int | None:
    return None if np.isnat(time) else int(time.astype("datetime64[ns]").astype(np.int64))


def _flag_row(flag: Flag) -> dict[str, Any]:
    return {
        "start_ns": _nanoseconds(flag.start), "end_ns": _nanoseconds(flag.end),
        "lat": float(flag.lat), "lon": float(flag.lon), "kind": flag.kind,
        "slope_mm_per_km": _or_none(flag.slope_mm_per_km), "sigma_mm_per_km": _or_none(flag.sigma_mm_per_km),
        "speed_m_s": _or_none(flag.speed_m_s), "heading_deg": _or_none(flag.heading_deg),
        "state": flag.state, "evidence": flag.evidence, "confirmed": bool(flag.confirmed),
        "track": records.to_text([[_nanoseconds(t), float(lat), float(lon)] for t, lat, lon in flag.track]),
        "speed_sigma_m_s": _or_none(flag.speed_sigma_m_s),
    }  # fmt: skip


def _flag(row: Any) -> Flag:
    return Flag(
        start=_instant(row.start_ns), end=_instant(row.end_ns), lat=row.lat, lon=row.lon, kind=row.kind,
        slope_mm_per_km=_number(row.slope_mm_per_km), sigma_mm_per_km=_number(row.sigma_mm_per_km),
        speed_m_s=_number(row.speed_m_s), heading_deg=_number(row.heading_deg), state=row.state,
        evidence=row.evidence, confirmed=bool(row.confirmed),
        track=tuple((_instant(t), float(lat), float(lon)) for t, lat, lon in records.from_text(row.track)),
        speed_sigma_m_s=_number(row.speed_sigma_m_s),
    )  # fmt: skip


def _bias_rows(biases: Biases, key: int) -> list[dict[str, Any]]:
    return [
        {
            "product": key, "number": n, "kind": str(biases.kind[n]), "name": str(biases.name[n]),
            "system": str(biases.system[n]), "code1": str(biases.code1[n]), "code2": str(biases.code2[n]),
            "value_ns": _or_none(biases.value_ns[n]), "sigma_ns": _or_none(biases.sigma_ns[n]),
            "start_ns": _nanoseconds(biases.start[n]), "end_ns": _nanoseconds(biases.end[n]),
        }
        for n in range(len(biases))
    ]  # fmt: skip
