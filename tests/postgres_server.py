"""A PostgreSQL server for the tests: made in a folder of its own, reached by a socket there, gone afterwards.

PostgreSQL refuses to run as root, so a root run starts it as another user.
"""

import contextlib
import os
import pwd
import shutil
import signal
import subprocess
import tempfile
import time
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import sqlalchemy as sa

_START_WAIT_S = 60.0


class NoServer(Exception):
    """No server can be started here; the message says why."""


def _program_folder() -> Path:
    """The folder with initdb and postgres: the newest packaged version, or the search path."""
    packaged = sorted(Path("/usr/lib/postgresql").glob("*/bin/initdb"), key=lambda p: float(p.parts[-3]))
    if packaged:
        return packaged[-1].parent
    found = shutil.which("initdb")
    if found is None:
        raise NoServer("needs PostgreSQL's initdb and postgres programs: install the package postgresql")
    return Path(found).resolve().parent


def _other_user() -> dict[str, Any]:
    """What makes subprocess drop root's rights; nothing where we are not root."""
    if os.geteuid() != 0:
        return {}
    for name in ("postgres", "nobody"):
        with contextlib.suppress(KeyError):
            user = pwd.getpwnam(name)
            return {"user": user.pw_uid, "group": user.pw_gid, "extra_groups": []}
    raise NoServer("PostgreSQL does not run as root, and there is neither a user postgres nor nobody to run it as")


class PostgresServer:
    """One running server; `empty_database` gives the URL of a database with nothing in it."""

    def __init__(self) -> None:
        programs, self._user = _program_folder(), _other_user()
        self._folder = Path(tempfile.mkdtemp(prefix="skylag-postgres-"))
        self._process: subprocess.Popen[bytes] | None = None
        if self._user:
            os.chown(self._folder, self._user["user"], self._user["group"])
        data = self._folder / "data"
        made = subprocess.run(
            [programs / "initdb", "-D", data, "-U", "skylag", "-A", "trust", "-E", "UTF8", "--locale=C", "--no-sync"],
            capture_output=True, text=True, cwd="/", check=False, **self._user,
        )  # fmt: skip
        if made.returncode:
            shutil.rmtree(self._folder, ignore_errors=True)
            raise RuntimeError(f"initdb failed: {made.stderr}")
        self._log = (self._folder / "log").open("wb")
        self._process = subprocess.Popen(
            [programs / "postgres", "-D", data, "-k", self._folder, "-c", "listen_addresses=", "-c", "fsync=off"],
            stdout=self._log, stderr=self._log, cwd="/", **self._user,
        )  # fmt: skip
        self._wait()

    def url(self, database: str) -> str:
        """URL of a database of this server."""
        return f"postgresql+psycopg://skylag@/{database}?host={self._folder}"

    def _wait(self) -> None:
        engine = sa.create_engine(self.url("postgres"), poolclass=sa.NullPool)
        deadline = time.perf_counter() + _START_WAIT_S
        while True:
            try:
                engine.connect().close()
                return
            except sa.exc.OperationalError:
                assert self._process is not None
                if self._process.poll() is not None or time.perf_counter() > deadline:
                    said = (self._folder / "log").read_text(errors="replace")
                    self.close()
                    raise RuntimeError(f"PostgreSQL did not start: {said}") from None
                time.sleep(0.1)

    def empty_database(self) -> str:
        """URL of the one database of this server, emptied: far quicker than a new one for each test."""
        url = self.url("postgres")
        engine = sa.create_engine(url, isolation_level="AUTOCOMMIT", poolclass=sa.NullPool)
        with engine.connect() as connection:
            others = "SELECT pg_terminate_backend(pid) FROM pg_stat_activity WHERE pid <> pg_backend_pid()"
            connection.exec_driver_sql(f"{others} AND backend_type = 'client backend'")
            connection.exec_driver_sql("DROP SCHEMA public CASCADE")
            connection.exec_driver_sql("CREATE SCHEMA public")
        return url

    def close(self) -> None:
        """Stop the server and remove its folder."""
        if self._process is not None:
            self._process.send_signal(signal.SIGINT)  # PostgreSQL: end now, do not wait for clients
            try:
                self._process.wait(timeout=10)
            except subprocess.TimeoutExpired:
                self._process.kill()
                self._process.wait()
        self._log.close()
        shutil.rmtree(self._folder, ignore_errors=True)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, _kind: type[BaseException] | None, _error: BaseException | None, _trace: TracebackType | None
    ) -> None:
        self.close()
