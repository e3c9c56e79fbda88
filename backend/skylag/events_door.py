"""The command `events`: the bad stretches of a kept day, by its own states or for one use, as CSV, GeoJSON or JSON; or
when its fronts were foretold at the sites, and what came of it.

Thin: parses, calls, prints or writes one file.
"""

import argparse
import sys
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from skylag import settings
from skylag.errors import Refused
from skylag.formats import events as event_files
from skylag.impact import arrivals, events, silence, uses
from skylag.tables import Flag
from skylag.web import sentences

if TYPE_CHECKING:
    from skylag.archive import DayRecord


def add(commands: Any, caution: str) -> None:
    """Add the command to the command line."""
    parser = commands.add_parser(
        "events",
        help="list the bad stretches of a kept day",
        formatter_class=argparse.RawDescriptionHelpFormatter,
        description="Stretches of strained or broken cells that touch in space and time, parted by their cause, with\n"
        "extent, worst value, sites reached and reason; for one use where asked.  With --arrivals: when fronts were\n"
        "foretold at the sites within the hour, with the spread, and whether they came within two spreads.",
        epilog="uses where the region names none:\n"
        + "\n".join(f"  {use.name}" for use in uses.PUBLISHED)
        + "\n\nexamples:\n"
        "  skylag events --archive skylag-demo --day 2031-03-12 --use ground --format geojson --out storm.geojson\n"
        "  skylag events --archive skylag-demo --arrivals\n\n"
        "exit status: 0 told; 2 bad command; 3 no answer (the reason is told).\n\n" + caution,
    )
    settings.add_kept_day(parser)
    parser.add_argument("--use", default="", metavar="NAME", help="a use or its kind; the day's own states without")
    parser.add_argument("--format", default="csv", choices=("csv", "geojson", "json"))
    parser.add_argument("--arrivals", action="store_true", help="foretold arrivals of fronts instead, as CSV or JSON")
    parser.add_argument("--out", type=Path, metavar="FILE", help="write here; printed without")
    parser.set_defaults(run=_events)


def _events(options: argparse.Namespace) -> int:
    from skylag.archive import open_archive  # a database is opened only where one is asked for

    place = options.archive or settings.from_environment().archive
    with open_archive(place, existing=True) as archive:
        newest = archive.newest(options.region, options.day, place)
        record = archive.day(newest.region, newest.day)
        fields, flags = archive.fields(newest.region, newest.day), archive.flags(newest.region, newest.day)
    about = sentences.about(record.origin.simulated, record.head.provisional)
    if options.arrivals:
        _write(_arrivals(record, flags, options), options, about)
        return 0
    if options.use:
        silent = silence.of_facts(record.origin.counts, record.receivers)
        judged = uses.judge_for(uses.find_use(record.region, options.use), fields, flags, record.region, silent=silent)
        found = events.of_use(judged, fields, flags, record.region)
    else:
        found = events.of_day(fields, flags, record.region)
    text = {
        "csv": lambda: event_files.to_csv(found), "geojson": lambda: event_files.to_geojson(found, about) + "\n",
        "json": lambda: event_files.to_json(found, about) + "\n",
    }[options.format]()  # fmt: skip
    _write(text, options, about)
    return 0


def _arrivals(record: "DayRecord", flags: Sequence[Flag], options: argparse.Namespace) -> str:
    if options.format == "geojson" or options.use:
        raise Refused(
            "events --arrivals: forecasts are the same for every use and have no shape; leave --use out, and choose "
            "--format csv or json", name="arrivals", value=options.format, allowed=("csv", "json"),
        )  # fmt: skip
    told, rows = arrivals.of_facts(record.origin.counts), arrivals.flag_rows(flags)
    if options.format == "json":
        about = sentences.about(record.origin.simulated, record.head.provisional)
        return event_files.arrivals_to_json(told, rows, about) + "\n"
    return event_files.arrivals_to_csv(told, rows)


def _write(text: str, options: argparse.Namespace, about: Mapping[str, Any]) -> None:
    if options.out:
        options.out.write_text(text, encoding="utf-8")
    else:
        print(text, end="")
    if options.format == "csv":  # a table has no place for it
        print("\n".join([*about["notices"], about["caution"]]), file=sys.stderr)
