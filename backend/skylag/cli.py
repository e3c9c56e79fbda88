"""The command line: day, demo, serve.  Thin: parses, calls, prints.

Exit status: 0 all went well; 1 done, but some inputs were left out (each is named); 2 the command was not understood;
3 no result.
"""

import argparse
import contextlib
import errno
import os
import sys
import threading
import time
import webbrowser
from collections.abc import Sequence
from datetime import date
from pathlib import Path
from typing import TextIO

import numpy as np

from skylag import advice_door, compare_door, events_door, maps_door, outlook_door, settings, work_door
from skylag.chain import Choices
from skylag.errors import Refused, SkylagError
from skylag.formats import results
from skylag.ionosphere.pairs import USABLE_PAIRS, parse_wanted
from skylag.jobs import hindcast, work
from skylag.jobs.executor import open_executor
from skylag.tables import STATE_NAMES, Indices, Products
from skylag.web.sentences import CAUTION

_FIRST_DAY = "2031-03-12"  # of the sample days: the storm has the most to see
_STAGES = {
    "look": (0.00, "looking at the files"),
    "orbits": (0.03, "orbits and biases"),
    "receivers": (0.06, "reading receivers"),
    "biases": (0.55, "finding biases"),
    "maps": (0.65, "making maps"),
    "slopes": (0.85, "measuring slopes"),
    "fronts": (0.90, "looking for fronts"),
    "irregular": (0.95, "looking for irregular patches"),
    "states": (0.98, "judging states"),
}


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command; returns the exit status."""
    parser = command_parser()
    options = parser.parse_args(arguments)
    if not hasattr(options, "run"):
        parser.print_help()
        return 2
    try:
        return int(options.run(options))
    except SkylagError as trouble:
        print(f"skylag: {trouble.message}", file=sys.stderr)
        return 3
    except KeyboardInterrupt:
        print("skylag: stopped; nothing unfinished was kept", file=sys.stderr)
        return 130
    except BrokenPipeError:  # whoever read the answer has seen enough
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 141
    except OSError as trouble:
        where = f"{trouble.filename}: " if trouble.filename else ""
        way_out = _WAYS_OUT.get(trouble.errno or 0, "")
        print(f"skylag: {where}{trouble.strerror or trouble}{way_out and '; ' + way_out}", file=sys.stderr)
        return 3


_WAYS_OUT = {
    errno.ENOENT: "check the path; a folder to write into must be there first",
    errno.EACCES: "change its rights, or choose a place where you may read and write",
    errno.EROFS: "choose a place where you may write",
    errno.ENOSPC: "make room on the disk and try again",
    errno.EISDIR: "name a file",
    errno.ENOTDIR: "a file stands where a folder is wanted; choose another place",
    errno.EEXIST: "a file stands where a folder is wanted; choose another place",
}


def command_parser() -> argparse.ArgumentParser:
    """The whole command line."""
    parser = argparse.ArgumentParser(
        prog="skylag",
        description="What the ionosphere does to satellite positioning in a region: from the RINEX files of a network "
        "of dual-frequency receivers to delay maps with an uncertainty, and to the places and times where "
        "corrections stop holding.",
        epilog=f"{CAUTION} Start with `skylag demo`.",
    )
    parser.add_argument("--version", action="version", version=f"skylag {work.own_version()}")
    commands = parser.add_subparsers(title="commands", metavar="COMMAND")
    _day_parser(commands)
    _demo_parser(commands)
    _serve_parser(commands)
    _hindcast_parser(commands)
    advice_door.add(commands, CAUTION)
    events_door.add(commands, CAUTION)
    outlook_door.add(commands, CAUTION, work_door.clock)
    compare_door.add(commands, CAUTION)
    maps_door.add(commands, CAUTION)
    work_door.add(commands, CAUTION, _date, _minutes)
    return parser


def _day_parser(commands: "argparse._SubParsersAction[argparse.ArgumentParser]") -> None:
    pairs = "\n".join(
        f"  {system}  " + ", ".join("-".join(pair) for pair in usable) for system, usable in USABLE_PAIRS.items()
    )
    parser = commands.add_parser(
        "day",
        help="compute one network day from files or folders",
        formatter_class=argparse.RawDescriptionHelpFormatter,
        description="Compute one network day: observation files of any number of receivers (RINEX 2, 3, 4; plain or\n"
        "compressed; Hatanaka too), with at least one navigation or SP3 file, and bias files if you have them.\n"
        "Kinds are told by content, so you may simply give a folder.",
        epilog="examples:\n"
        "  skylag day june-25/ --out results/\n"
        "  skylag day base.rnx nav.rnx --out results/ --signals G=C1C-C2W,E=C1C-C5Q\n"
        "  skylag day archive/ --date 2031-03-12 --region region.toml --out results/ --archive skylag-archive\n"
        "  skylag day tuesday/ --region region.toml --out results/ --archive skylag-archive --earlier-days 7\n\n"
        "signal pairs, best first; without --signals the first that a receiver brings is used:\n" + pairs + "\n\n"
        "results in DIR: biases.csv, slant.parquet, field.nc, flags.csv, day.json (columns: README).\n"
        "exit status: 0 all inputs used; 1 done, some inputs left out (each named); 2 bad command; 3 no result.\n\n"
        + CAUTION,
    )
    parser.add_argument("inputs", nargs="+", type=Path, metavar="FILES_OR_FOLDERS", help="files or folders, mixed")
    parser.add_argument("--out", type=Path, required=True, metavar="DIR", help="folder for the results")
    parser.add_argument("--region", type=Path, metavar="FILE", help="region.toml; without it, around the receivers")
    parser.add_argument("--date", type=_date, metavar="YYYY-MM-DD", help="the GPS-time day; else that of most files")
    parser.add_argument("--signals", default="", metavar="LIST", help="signal pairs, e.g. G=C1W-C2W,E=C1C-C5Q")
    parser.add_argument("--every", type=_minutes, default=5.0, metavar="MINUTES", help="a map every 1 to 60 min (5)")
    parser.add_argument("--archive", default="", metavar="PLACE", help="also keep the day in this archive")
    parser.add_argument("--workers", default="", metavar="SPEC", help="local:N, threads:N or dask://host:port")
    parser.add_argument("--quiet", action="store_true", help="no progress, only what went wrong")
    settings.add_estimation(parser)
    parser.set_defaults(run=_day)


def _demo_parser(commands: "argparse._SubParsersAction[argparse.ArgumentParser]") -> None:
    parser = commands.add_parser(
        "demo",
        help="compute the invented sample days and open the page",
        formatter_class=argparse.RawDescriptionHelpFormatter,
        description="Compute the three invented sample days (calm, storm, recovery) into an embedded archive and open\n"
        "the page on the loopback address as soon as the first is there. Days already there are not computed again.",
        epilog="examples:\n"
        "  skylag demo\n"
        "  skylag demo --archive /tmp/sample --port 0 --no-browser\n"
        "  skylag demo --no-serve\n\n"
        "exit status: 0 ended as asked, also by Ctrl-C once the page is there; 2 bad command; 3 no page (the\n"
        "reason is told); 130 stopped by Ctrl-C while the first day was computed.\n\n" + CAUTION,
    )
    parser.add_argument("--archive", default="skylag-demo", metavar="PLACE", help="folder of the archive (skylag-demo)")
    parser.add_argument("--port", default="", metavar="PORT", help="port of the page (8017; 0 takes a free one)")
    parser.add_argument("--workers", default="", metavar="SPEC", help="local:N or threads:N")
    parser.add_argument("--no-browser", action="store_true", help="print the address, open nothing")
    parser.add_argument("--no-serve", action="store_true", help="compute the days and stop")
    parser.set_defaults(run=_demo)


def _serve_parser(commands: "argparse._SubParsersAction[argparse.ArgumentParser]") -> None:
    parser = commands.add_parser(
        "serve",
        help="serve what an archive holds",
        formatter_class=argparse.RawDescriptionHelpFormatter,
        description="Serve the page over what the archive holds, until Ctrl-C. Settings may come from the\n"
        "environment: SKYLAG_ARCHIVE, SKYLAG_HOST, SKYLAG_PORT. On another address than loopback files are\n"
        "taken only with a key (`skylag token`), and --reading key asks readers for one too.",
        epilog="examples:\n"
        "  skylag serve --archive skylag-archive\n"
        "  skylag serve --archive skylag-archive --work --port 0\n"
        "  skylag serve --archive skylag-archive --host 0.0.0.0 --reading key\n\n"
        "exit status: 0 ended by Ctrl-C or SIGTERM; 2 bad command; 3 no page (the reason is told).\n\n" + CAUTION,
    )
    parser.add_argument("--archive", default="", metavar="PLACE", help="folder, or a PostgreSQL URL")
    parser.add_argument("--host", default="", help="address to listen on (127.0.0.1)")
    parser.add_argument("--port", default="", help="port (8017; 0 takes a free one)")
    parser.add_argument("--reading", choices=("open", "key"), default="open", help="off loopback, who may read (open)")
    parser.add_argument("--work", action="store_true", help="also work on the queue, in this process")
    parser.set_defaults(run=_serve)


def _hindcast_parser(commands: "argparse._SubParsersAction[argparse.ArgumentParser]") -> None:
    parser = commands.add_parser(
        "hindcast",
        help="replay outlooks over an archive and tell how often they were right",
        formatter_class=argparse.RawDescriptionHelpFormatter,
        description="For each day from FROM to TO, make the outlook as it would have been made the evening before,\n"
        "from earlier days alone, and score it with the day itself: errors, ranges, chances, beside persistence,\n"
        "recurrence after 27 days, climatology, and the usual of the last 27 days. Keeps no outlook.",
        epilog="examples:\n"
        "  skylag hindcast 2031-03-01 2031-04-30 --archive skylag-archive\n"
        "  skylag hindcast 2031-03-12 2031-03-13 --archive skylag-demo --indices Kp_ap_Ap_SN_F107_since_1932.txt\n\n"
        "exit status: 0 told; 2 bad command; 3 no result (the reason is told).\n\n" + CAUTION,
    )
    parser.add_argument("first", type=_date, metavar="FROM", help="first day foretold, YYYY-MM-DD")
    parser.add_argument("last", type=_date, metavar="TO", help="last day foretold")
    parser.add_argument("--archive", default="", metavar="PLACE", help="folder, or a PostgreSQL URL")
    parser.add_argument("--region", default="", metavar="NAME", help="region; not needed where the archive has one")
    parser.add_argument("--indices", type=Path, metavar="FILE", help="measured Kp, ap and F10.7, GFZ or WDC form")
    parser.set_defaults(run=_hindcast)


def _date(text: str) -> date:
    try:
        return date.fromisoformat(text)
    except ValueError:
        raise argparse.ArgumentTypeError(f"{text!r} is no date; write it as 2031-03-12") from None


def _minutes(text: str) -> float:
    try:
        minutes = float(text)
    except ValueError:
        raise argparse.ArgumentTypeError(f"{text!r} is no number of minutes") from None
    if not 1 <= minutes <= 60:
        raise argparse.ArgumentTypeError(f"{text} is outside 1 to 60 minutes")
    return minutes


# ---------------------------------------------------------------------------------------------- commands


def _day(options: argparse.Namespace) -> int:
    region = settings.read_region(options.region) if options.region else None
    choices = settings.estimation_from(options, options.region).choices(
        Choices(signals=parse_wanted(options.signals), epoch_step_s=options.every * 60.0)
    )
    _look_ahead(options.out, options.archive)
    bar = _Bar("day", quiet=options.quiet)
    with contextlib.ExitStack() as opened:
        executor = opened.enter_context(open_executor(options.workers or settings.default_workers()))
        made = work.network_day(
            options.inputs, region=region, day=options.date, choices=choices, executor=executor, progress=bar.tell,
            earlier=_earlier(opened, options.archive, choices.earlier_days),
        )  # fmt: skip
    bar.close()
    for item in made.left_out:
        print(f"left out: {item}", file=sys.stderr)
    if made.problems:
        shown = made.problems[:10]
        for problem in shown:
            print(f"noticed: {problem}", file=sys.stderr)
        if len(made.problems) > len(shown):
            print(f"noticed: {len(made.problems) - len(shown)} more such places", file=sys.stderr)
    paths = results.write(made.products, options.out)
    if options.archive:
        from skylag.archive import open_archive  # a database is opened only where one is asked for

        with open_archive(options.archive) as archive:
            archive.save(made.products)
            hindcast.day_kept(archive, made.products.region.name, made.products.day, _say)
    if not options.quiet:
        _tell_day(made.products)
        print("results: " + ", ".join(str(path) for path in paths))
    return 1 if made.left_out else 0


def _look_ahead(out: Path, archive: str) -> None:
    """Say before the work, not after it, that its results have no place to go.

    Raises Refused or OSError as writing would.
    """
    there = next(path for path in (out, *out.absolute().parents) if path.exists())
    if not there.is_dir():
        raise Refused(f"--out {out}: {there} is a file; name a folder", name="out", value=str(out), allowed="a folder")
    if not os.access(there, os.W_OK | os.X_OK):
        raise PermissionError(errno.EACCES, os.strerror(errno.EACCES), str(there))
    if archive and Path(archive).exists():
        from skylag.archive import open_archive  # a database is opened only where one is asked for

        open_archive(archive).close()


def _earlier(opened: contextlib.ExitStack, place: str, days: int) -> work.Earlier | None:
    """Where biases of earlier days are asked for; None where they are not wanted.

    Raises Refused where no archive is named.
    """
    if not days:
        return None
    if not place:
        raise Refused(
            "earlier_days: the days before are kept in an archive; name it with --archive",
            name="earlier_days", value=days, allowed="with --archive",
        )  # fmt: skip
    from skylag.archive import open_archive  # a database is opened only where one is asked for

    return work.earlier_biases(opened.enter_context(open_archive(place)), days)


def _say(event: str, **facts: object) -> None:
    """What went wrong after a day was kept; what went well is not worth a line."""
    if "why" in facts:
        print(f"noticed: {event}: {facts['why']}", file=sys.stderr)


def _tell_day(products: Products) -> None:
    """A day in a few lines."""
    counts = products.origin.counts
    fields = products.fields
    print(
        f"{products.day} {products.region.name}: receivers {counts['receivers']}, "
        f"lines of sight {counts['rays']}, arcs {counts['arcs']} ({counts['slips']} began with a slip), "
        f"maps {counts['maps']}"
    )
    seen = (fields.state > 0) & (fields.support > 0)
    if seen.any():
        from skylag.constants import L1_M_PER_TECU

        delay = fields.vtec[seen] * L1_M_PER_TECU
        print(
            f"vertical delay on 1575.42 MHz where seen: {delay.min():.1f} to {delay.max():.1f} m "
            f"({fields.vtec[seen].min():.1f} to {fields.vtec[seen].max():.1f} TECU)"
        )
    foretold = counts.get("receivers_left_out", {})
    if foretold.get("lines_of_sight"):
        print(
            f"checked against receivers left out: {foretold['rms_tecu']:.2f} TECU RMS over "
            f"{foretold['lines_of_sight']} lines of sight, {100.0 * foretold['within_95']:.1f} % within 95 %"
        )
    shares = [f"{name} {100.0 * float((fields.state == code).mean()):.1f} %" for code, name in enumerate(STATE_NAMES)]
    print("cells over the day: " + ", ".join(shares))
    for flag in [f for f in products.flags if f.state == "broken" or f.kind == "fault"][:12]:
        print(f"  {flag.kind}: {flag.evidence}")
    for warning in products.origin.warnings:
        if not warning.startswith("left out:"):
            print(f"note: {warning}")
    print(CAUTION)


def sample_folder() -> Path:
    """The invented network beside the package of a checkout.

    Raises SkylagError where the program was installed without it.
    """
    folder = Path(__file__).resolve().parents[2] / "sample_data"
    if not (folder / "region.toml").is_file():
        raise SkylagError(
            f"{folder}: the sample days are not here; run `skylag demo` from a checkout that was installed with "
            "`pip install -e .`"
        )
    return folder


def _demo(options: argparse.Namespace) -> int:
    from skylag.archive import open_archive

    folder = sample_folder()
    region = settings.read_region(folder / "region.toml")
    days = sorted((p for p in folder.iterdir() if p.is_dir() and _is_date(p.name)), key=lambda p: p.name != _FIRST_DAY)
    with open_archive(options.archive) as archive:
        there = {str(head.day) for head in archive.days() if head.region == region.name}
    todo = [path for path in days if path.name not in there]

    def compute(some: Sequence[Path]) -> None:
        # A connection of its own: the page reads while this writes.
        with open_archive(options.archive) as own, open_executor(options.workers or settings.default_workers()) as pool:
            for path in some:
                bar = _Bar(f"sample day {path.name}")
                made = work.network_day([path], region=region, executor=pool, simulated=True, progress=bar.tell)
                own.save(made.products)
                hindcast.day_kept(own, region.name, made.products.day, _say, more=path != some[-1])
                bar.close()

    if options.no_serve:
        compute(todo)
        print(
            f"{options.archive}: {len(days)} invented days of {region.name}; `skylag serve --archive "
            f"{options.archive}` shows them, `skylag advise --archive {options.archive}` tells what they mean for work"
        )
        return 0
    # The page opens with the first day; the others follow while it is looked at.
    if not there:
        compute(todo[:1])
        todo = todo[1:]
    if todo:
        threading.Thread(target=compute, args=(todo,), daemon=True).start()
    workers = options.workers or settings.default_workers()  # for files that are sent from the page
    try:
        return _open_page(options.archive, "127.0.0.1", options.port, browser=not options.no_browser, workers=workers)
    except Refused:
        if options.port:
            raise
        return _open_page(options.archive, "127.0.0.1", "0", browser=not options.no_browser, workers=workers)


def _is_date(name: str) -> bool:
    try:
        date.fromisoformat(name)
    except ValueError:
        return False
    return True


def _serve(options: argparse.Namespace) -> int:
    given = settings.from_environment()
    workers = (given.workers or settings.default_workers()) if options.work else ""
    return _open_page(
        options.archive or given.archive, options.host or given.host, options.port, browser=False,
        reading=options.reading, workers=workers,
    )  # fmt: skip


def _open_page(place: str, host: str, port: str, *, browser: bool, reading: str = "open", workers: str = "") -> int:
    from skylag.archive import open_archive
    from skylag.jobs.board import Worker
    from skylag.web.access import for_host
    from skylag.web.app import create_app, serve

    number = settings.port_number(port) if port else settings.from_environment().port
    with open_archive(place) as archive:
        app = create_app(archive, clock=work_door.clock, access=for_host(host, reading))
        stop = threading.Event()
        helper = threading.Thread(target=Worker(archive, workers, work_door.clock).run, args=(stop,), daemon=True)

        def ready(address: str) -> None:
            print(f"the page is at {address} (stop with Ctrl-C). {CAUTION}", flush=True)
            if browser:
                threading.Thread(target=webbrowser.open, args=(address,), daemon=True).start()
            if workers:
                helper.start()

        try:
            serve(app, host, number, ready)
        finally:
            stop.set()
            if helper.is_alive():
                helper.join(10)  # what is cut off is taken up again at the next start
    return 0


def _hindcast(options: argparse.Namespace) -> int:
    from skylag import formats
    from skylag.archive import open_archive

    indices: Indices | None = None
    if options.indices:
        table = formats.read(options.indices).table
        if isinstance(table, Indices):
            indices = table
        else:
            raise Refused(f"{options.indices}: holds no geomagnetic indices; give a GFZ table or WDC cards",
                          name="indices", value=str(options.indices), allowed="GFZ or WDC form")  # fmt: skip
    first, last = (np.datetime64(day.isoformat(), "D") for day in (options.first, options.last))
    with open_archive(options.archive or settings.from_environment().archive, existing=True) as archive:
        known = archive.regions()
        if not options.region and len(known) != 1:
            raise Refused(f"name a region with --region: the archive has {', '.join(known) or 'none'}", name="region",
                          value="", allowed=known)  # fmt: skip
        found = hindcast.hindcast(archive, options.region or known[0], first, last, indices)
    print("\n".join(hindcast.told(found)))
    print(CAUTION)
    return 0


class _Bar:
    """Progress of one day on standard error: a bar on a terminal, a line per stage elsewhere."""

    def __init__(self, title: str, *, quiet: bool = False, out: TextIO | None = None) -> None:
        self._title, self._quiet = title, quiet
        self._out = out or sys.stderr
        self._live = self._out.isatty() and os.environ.get("TERM") != "dumb"
        self._stage = ""
        self._began = time.perf_counter()

    def tell(self, stage: str, share: float, word: str) -> None:
        """Show the share of the whole day that is done."""
        if self._quiet:
            return
        names = list(_STAGES)
        start, words = _STAGES[stage]
        number = names.index(stage)
        end = _STAGES[names[number + 1]][0] if number + 1 < len(names) else 1.0
        whole = start + (end - start) * share
        if self._live:
            filled = round(24 * whole)
            text = f"\r{self._title} [{'=' * filled}{' ' * (24 - filled)}] {100 * whole:3.0f} % {words} {word}"
            self._out.write(f"{text:<110}"[:110])
            self._out.flush()
        elif stage != self._stage:
            print(f"{self._title}: {words}", file=self._out)
        self._stage = stage

    def close(self) -> None:
        """End the line and tell how long it took."""
        if self._quiet:
            return
        seconds = time.perf_counter() - self._began
        if self._live:
            self._out.write("\r" + " " * 110 + "\r")
        print(f"{self._title}: done in {seconds:.1f} s", file=self._out)


if __name__ == "__main__":
    sys.exit(main())
