"""The commands about work and keeping: add, work, watch; check, backup, restore, token.

Thin: parses, calls, prints.  The logs of `work` and `watch` go to standard error, one JSON object per line.
"""

import argparse
import signal
import sys
import threading
import time
from collections.abc import Callable
from concurrent.futures import BrokenExecutor
from datetime import date
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from skylag import settings
from skylag.errors import Refused

if TYPE_CHECKING:
    from skylag.archive import Archive


def add(
    commands: Any, caution: str, day: Callable[[str], date], minutes: Callable[[str], float]
) -> None:
    """Add the commands to the command line; `day` and `minutes` read such words."""
    adding = commands.add_parser("add", help="queue the days of files or folders for workers", epilog=caution)
    adding.add_argument("inputs", nargs="+", type=Path, metavar="FILES_OR_FOLDERS")
    adding.add_argument("--date", type=day, metavar="YYYY-MM-DD", help="this day only")
    working = commands.add_parser("work", help="work on the queue of an archive; any number may run", epilog=caution)
    working.add_argument("--until-empty", action="store_true", help="stop when nothing is left to do")
    watch = commands.add_parser("watch", help="follow a folder where today's files appear", epilog=caution)
    watch.add_argument("folder", type=Path, metavar="DIR")
    watch.add_argument("--alerts", type=Path, metavar="FILE", help="rules of alerts, [[alert]] entries")
    watch.add_argument(
        "--silent", type=minutes, default=45.0, metavar="MINUTES",
        help="silent after so long (45), or 15 more than its files span",
    )  # fmt: skip
    for parser in (adding, watch):
        parser.add_argument("--region", type=Path, metavar="FILE", help="region.toml; without it, around the receivers")
        parser.add_argument("--every", type=minutes, default=5.0, metavar="MINUTES", help="a map every 1 to 60 min (5)")
        parser.add_argument("--simulated", action="store_true", help="invented data: said wherever the day shows")
        settings.add_estimation(parser)
    for parser in (working, watch):
        parser.add_argument("--workers", default="", metavar="SPEC", help="local:N, threads:N or dask://host:port")
    check = commands.add_parser("check", help="look for damage in an archive; changes nothing")
    check.add_argument("--quick", action="store_true", help="only whether it can be read")
    save = commands.add_parser("backup", help="copy an archive into a new folder, while it is in use")
    back = commands.add_parser("restore", help="fill an empty archive from a backup")
    for parser in (save, back):
        parser.add_argument("folder", type=Path, metavar="DIR")
    token = commands.add_parser("token", help="make, list and revoke keys of access")
    token.add_argument("what", choices=("make", "list", "revoke"))
    token.add_argument("name", nargs="?", default="")
    token.add_argument("--scope", choices=("read", "write", "admin"), default="read", help="what it allows (read)")
    for parser, run in (
        (adding, _add), (working, _work), (watch, _watch), (check, _check), (save, _backup), (back, _restore),
        (token, _token),
    ):  # fmt: skip
        parser.add_argument("--archive", default="", metavar="PLACE", help="folder, or a PostgreSQL URL")
        parser.set_defaults(run=run)


def clock() -> np.datetime64:
    """The present UTC time."""
    return np.datetime64(time.time_ns(), "ns")


def _opened(options: argparse.Namespace) -> "Archive":
    from skylag.archive import open_archive  # a database is opened only where one is asked for

    return open_archive(options.archive or settings.from_environment().archive)


def _workers(options: argparse.Namespace) -> str:
    return options.workers or settings.from_environment().workers or settings.default_workers()


def _stopping() -> threading.Event:
    """An event that is set when the process is asked to end."""
    stop = threading.Event()
    signal.signal(signal.SIGTERM, lambda *_: stop.set())
    return stop


def _add(options: argparse.Namespace) -> int:
    from skylag.chain import Choices
    from skylag.jobs import board

    region = settings.read_region(options.region) if options.region else None
    with _opened(options) as archive:
        numbers, left_out = board.add(
            archive, [path.resolve() for path in options.inputs], now=clock(), region=region, day=options.date,
            choices=Choices(epoch_step_s=options.every * 60.0), simulated=options.simulated,
            estimation=settings.estimation_from(options, options.region),
        )  # fmt: skip
        for number in numbers:
            print(f"queued {number}: {archive.tasks.one(number).title}")
    for item in left_out:
        print(f"left out: {item}", file=sys.stderr)
    return 1 if left_out else 0


def _work(options: argparse.Namespace) -> int:
    from skylag.jobs import board
    from skylag.jobs.journal import Journal

    with _opened(options) as archive:
        worker = board.Worker(archive, _workers(options), clock, log=Journal(sys.stderr, clock))
        worker.run(_stopping(), until_empty=options.until_empty)
        failed = archive.tasks.counts()["failed"]
    return 1 if options.until_empty and failed else 0


def _watch(options: argparse.Namespace) -> int:
    from skylag.chain import Choices
    from skylag.jobs import alerts, live
    from skylag.jobs.executor import open_executor
    from skylag.jobs.journal import Journal

    region = settings.read_region(options.region) if options.region else None
    rules = alerts.read_rules(options.alerts) if options.alerts else ()
    choices = settings.estimation_from(options, options.region).choices(Choices(epoch_step_s=options.every * 60.0))
    if not options.folder.is_dir():
        raise Refused(f"{options.folder}: is no folder", name="DIR", value=str(options.folder), allowed="a folder")
    stop, journal, watch = _stopping(), Journal(sys.stderr, clock), None
    with _opened(options) as archive:
        while not stop.is_set():
            with open_executor(_workers(options)) as executor:
                if watch is None:
                    watch = live.Watch(
                        archive, options.folder.resolve(), executor, clock, region=region, rules=rules,
                        choices=choices, simulated=options.simulated,
                        patience=live.Patience(silent_s=options.silent * 60.0), log=journal,
                    )  # fmt: skip
                try:
                    watch.use(executor)
                    watch.run(stop)
                except BrokenExecutor as failure:  # one of its processes was ended: take new ones
                    journal("executor lost", why=str(failure))
    return 0


def _check(options: argparse.Namespace) -> int:
    with _opened(options) as archive:
        found = () if options.quick else archive.check()
        days, versions = archive.size()
    for line in found:
        print(line)
    word = "it can be read" if options.quick else "all is well"
    harm = [line for line in found if not line.startswith("stray")]
    print(f"{days} days in {versions} versions: {f'{len(harm)} things are wrong' if harm else word}")
    return 3 if harm else 0


def _backup(options: argparse.Namespace) -> int:
    from skylag.archive.backups import backup

    with _opened(options) as archive:
        counts = backup(archive, options.folder)
    print(f"{options.folder}: {counts['product']} versions of days, {sum(counts.values())} rows in all")
    return 0


def _restore(options: argparse.Namespace) -> int:
    from skylag.archive.backups import restore

    with _opened(options) as archive:
        counts = restore(options.folder, archive)
    print(f"restored {counts['product']} versions of days, {sum(counts.values())} rows in all")
    return 0


def _token(options: argparse.Namespace) -> int:
    from skylag.jobs import guard

    if (options.what == "list") == bool(options.name):
        raise Refused(
            "write `skylag token make NAME --scope read|write|admin`, `skylag token revoke NAME`, or "
            "`skylag token list`",
            name="name", value=options.name, allowed="a name to make or revoke, none to list",
        )  # fmt: skip
    with _opened(options) as archive:
        if options.what == "make":
            print(guard.make_key(archive, options.name, options.scope, clock()))
            print(f"this is the only time the key is shown; it may {options.scope}", file=sys.stderr)
        elif options.what == "revoke":
            archive.keys.revoke(options.name, clock())
            print(f"{options.name}: revoked")
        else:
            for one in archive.keys.all():
                gone = "" if np.isnat(one.revoked) else f", revoked {np.datetime_as_string(one.revoked, unit='s')}Z"
                print(f"{one.name}: {one.scope}, made {np.datetime_as_string(one.made, unit='s')}Z{gone}")
    return 0
