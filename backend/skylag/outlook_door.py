"""The commands `ahead` and `activity`: the day ahead at a place and its record; activity of Sun and field, kept.

Thin: parses, calls, prints.  `hindcast` stands in `cli`.
"""

import argparse
import csv
import io
import json
import sys
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from skylag import settings
from skylag.errors import Missing, Refused
from skylag.spelling import no_such
from skylag.tables import ActivityOutlook, Floats, Indices, Region
from skylag.web import sentences
from skylag.web.sentences import CAUTION

if TYPE_CHECKING:
    from skylag.archive import Archive

Clock = Callable[[], np.datetime64]


def add(commands: Any, caution: str, clock: Clock) -> None:
    """Add the two commands to the command line; `clock` tells the present UTC time."""
    ahead = commands.add_parser(
        "ahead",
        help="tell what is expected of the two days after the newest, at a place",
        formatter_class=argparse.RawDescriptionHelpFormatter,
        description="Hour by hour: expected vertical delay with its 50, 80 and 95 % ranges, quantiles of the slope,\n"
        "the chance that corrections are strained or broken for a use; windows, advice, and what it all rests on.",
        epilog='examples:\n  skylag ahead --archive skylag-demo --site "Kelm Isle airstrip" --use ground\n'
        "  skylag ahead --archive skylag-demo --at -40.1 146.2 --format csv --out ahead.csv\n"
        "  skylag ahead --archive skylag-demo --record\n\n"
        "exit status: 0 told; 2 bad command; 3 no answer (the reason is told).\n\n" + caution,
    )
    ahead.add_argument("--site", default="", metavar="NAME", help="a site of the region; the first without")
    ahead.add_argument("--at", nargs=2, type=float, metavar=("LAT", "LON"), help="a place that is no site")
    ahead.add_argument("--use", default="", metavar="NAME", help="a use or its kind; the region's first without")
    ahead.add_argument("--expect", default="", metavar="AP,AP", help="what if ap were so, on the two days ahead")
    ahead.add_argument("--most", type=float, default=0.1, metavar="CHANCE", help="likely holds up to this (.1)")
    ahead.add_argument("--record", action="store_true", help="how often outlooks were right, instead")
    ahead.add_argument("--format", default="text", choices=("text", "csv", "json"))
    ahead.add_argument("--out", type=Path, metavar="FILE", help="write here; printed without")
    ahead.add_argument("--region", default="", metavar="NAME_OR_FILE",
                       help="of several regions, this one; or a region.toml, also of one without days")  # fmt: skip
    ahead.set_defaults(run=lambda options: _ahead(options, clock))
    activity = commands.add_parser(
        "activity",
        help="keep measured indices and outlooks of geomagnetic activity",
        formatter_class=argparse.RawDescriptionHelpFormatter,
        description="Keeps Kp, ap and F10.7 as measured, and outlooks of ap with the time they were made, so that a\n"
        "replay is told only what was known then. Without anything to keep, tells what is kept.",
        epilog="outlook files: a table `made_utc,day,ap` (or kp, or ap1 to ap8, or kp1 to kp8), or a three-day\n"
        "forecast text with its line `:Issued:`.\n\nexamples:\n"
        "  skylag activity --archive skylag-archive --measured Kp_ap_Ap_SN_F107_since_1932.txt\n"
        "  skylag activity --archive skylag-archive --outlook forecast.txt\n"
        "  skylag activity --archive skylag-archive --expect 2031-03-14 80 --expect 2031-03-15 20\n\n"
        "exit status: 0 kept, or told what is kept; 2 bad command; 3 nothing kept (the reason is told).\n\n" + caution,
    )
    activity.add_argument("--measured", type=Path, action="append", default=[], metavar="FILE",
                          help="indices, GFZ tables or WDC form; may come again")  # fmt: skip
    activity.add_argument("--outlook", type=Path, action="append", default=[], metavar="FILE", help="may come again")
    activity.add_argument("--expect", nargs=2, action="append", default=[], metavar=("DAY", "AP"),
                          help="one value for a UTC day, or eight with commas; may come again")  # fmt: skip
    activity.add_argument("--made", default="", metavar="UTC", help="when that was foretold, 2031-03-13T18:00 (now)")
    activity.add_argument("--source", default="", metavar="WORDS", help="where it comes from (the file's name)")
    activity.set_defaults(run=lambda options: _activity(options, clock))
    for parser in (ahead, activity):
        parser.add_argument("--archive", default="", metavar="PLACE", help="folder, or a PostgreSQL URL")


def _opened(options: argparse.Namespace, *, existing: bool = False) -> "Archive":
    from skylag.archive import open_archive  # a database is opened only where one is asked for

    return open_archive(options.archive or settings.from_environment().archive, existing=existing)


def _say(event: str, **facts: object) -> None:
    if "why" in facts:
        print(f"noticed: {event}: {facts['why']}", file=sys.stderr)


# ---------------------------------------------------------------------------------------------- ahead


def _ahead(options: argparse.Namespace, clock: Clock) -> int:
    from skylag.jobs import hindcast
    from skylag.web import outlook

    if options.format == "csv" and options.record:
        raise Refused("--record: is told as text or json", name="format", value="csv", allowed=("text", "json"))
    given = settings.read_region(Path(options.region)) if options.region.endswith(".toml") else None
    with _opened(options, existing=given is None) as archive:
        known = archive.regions()
        region = given.name if given else options.region or (known[0] if len(known) == 1 else "")
        if region in known:
            given = archive.day(region, archive.days(region)[0].day).region
        if given is None:
            raise Missing(f"name a region with --region: the archive has {', '.join(known) or 'none yet'}; or give a "
                          "region.toml, for climatology alone", what=region, nearest=list(known))  # fmt: skip
        lat, lon = options.at or _site(given, options.site)
        if options.record:
            facts: Mapping[str, Any] = hindcast.summary(hindcast.track_record(archive, region))
            lines = [f"{region}: {facts['outlooks']} outlooks whose days came", *hindcast.scored(facts), CAUTION]
        elif region in known:
            facts = outlook.ahead(archive, region, lat, lon, options.use, _two(options.expect), options.most)
            lines = _told(facts)
        else:
            yesterday = clock().astype("datetime64[D]") - np.timedelta64(1, "D")
            kept = hindcast.without_days(archive, given, yesterday, _two(options.expect))
            facts = outlook.of_place(kept, given, lat, lon, options.use, options.most, False)
            lines = _told(facts)
    text = {"text": lambda: "\n".join(lines) + "\n", "csv": lambda: _table(facts),
            "json": lambda: json.dumps(facts, indent=1) + "\n"}[options.format]()  # fmt: skip
    if options.out:
        options.out.write_text(text, encoding="utf-8")
    else:
        print(text, end="")
    if options.format == "csv":  # a table has no place for it
        print("\n".join([*sentences.notices(facts["simulated"], False), CAUTION]), file=sys.stderr)
    return 0


def _site(region: Region, name: str) -> tuple[float, float]:
    for site in region.sites:
        if name in ("", site.name):
            return site.lat, site.lon
    if not name:
        raise Refused(f"{region.name} has no sites; give --at", name="site", value=name, allowed="--at LAT LON")
    raise no_such(region.name, "site", name, [site.name for site in region.sites], "give --at")


def _two(text: str) -> Floats | None:
    if not text:
        return None
    try:
        return np.array([float(word) for word in text.split(",")], dtype=np.float64)
    except ValueError:
        raise Refused(f"--expect {text}: write two numbers, one for each day ahead, like 12,80", name="expect",
                      value=text, allowed="two numbers from 0 to 400") from None  # fmt: skip


_RANGES = ("50", "80", "95")


def _rows(facts: Mapping[str, Any]) -> list[list[Any]]:
    """Hours: start, phase, delay, both ends of each range, slope quantiles, both chances."""
    columns = [facts["hours_utc"], facts["storm_phase"], facts["vertical_delay"]]
    columns += [facts["ranges"][share][end] for share in _RANGES for end in ("low", "high")]
    columns += [*facts["slope"].values(), facts["chance_strained"], facts["chance_broken"]]
    return [list(row) for row in zip(*columns, strict=True)]


def _table(facts: Mapping[str, Any]) -> str:
    names = ["start_utc", "storm_phase", "vertical_delay_m"]
    names += [f"delay_{share}_{end}_m" for share in _RANGES for end in ("low", "high")]
    names += [f"slope_{100 * float(level):g}_mm_per_km" for level in facts["slope"]]
    goal = io.StringIO()
    writer = csv.writer(goal, lineterminator="\n")
    writer.writerow([*names, "chance_strained", "chance_broken"])
    writer.writerows(["" if value is None else value for value in row] for row in _rows(facts))
    return goal.getvalue()


def _told(facts: Mapping[str, Any]) -> list[str]:
    where = facts["name"] or f"{facts['lat']:.2f}, {facts['lon']:.2f}"
    lines = [f"{where}, {facts['use']}: after {facts['known_until']}; seen on {facts['seen_days']} of the last 27 days"]
    if facts["simulated"]:
        lines.append("Invented data: nothing here was measured.")
    lines += [
        f"  {_minute(one['start_utc'])} to {_minute(one['end_utc'])} UTC: {one['kind']}"
        + (
            f", strained or worse up to {100 * one['chance_strained']:.0f} %, broken up to "
            f"{100 * one['chance_broken']:.0f} %"
            if one["chance_strained"] is not None else ""
        )
        for one in facts["windows"]
    ]  # fmt: skip
    lines += [f"  {sentence}" for sentence in facts["advice"]]
    levels = "/".join(f"{100 * float(level):g}" for level in facts["slope"])
    lines.append(f"hour (UTC)        delay m, ranges of 50, 80, 95 %; slope mm/km at {levels} %; strained, broken %")
    for start, phase, delay, *rest in _rows(facts):
        ends = ", ".join(f"{rest[2 * n]:.2f}-{rest[2 * n + 1]:.2f}" for n in range(3))
        slope = "/".join(f"{value:.1f}" for value in rest[6:-2])
        chances = "not known" if None in rest[-2:] else f"{100 * rest[-2]:.0f}, {100 * rest[-1]:.0f}"
        storm = "" if phase == "untold" else f"; {phase}"
        lines.append(f"{_minute(start)}  {delay:.2f}, {ends}; {slope}; {chances}{storm}")
    return [*lines, *(f"note: {sentence}" for sentence in facts["basis"]), facts["caution"]]


def _minute(text: str) -> str:
    """A UTC instant at the nearest minute: hours of GPS time begin some seconds before those of UTC."""
    nearest = np.datetime64(text.removesuffix("Z"), "s") + np.timedelta64(30, "s")
    return np.datetime_as_string(nearest, unit="m").replace("T", " ")


# ---------------------------------------------------------------------------------------------- activity


def _activity(options: argparse.Namespace, clock: Clock) -> int:
    from skylag import formats
    from skylag.formats import activity_outlook
    from skylag.jobs import hindcast

    now = clock()
    measured: list[tuple[str, Indices]] = []
    for path in options.measured:
        reading = formats.read(path)
        if not isinstance(reading.table, Indices):
            raise Refused(f"{path}: holds no geomagnetic indices; give a GFZ table or WDC cards", name="measured",
                          value=str(path), allowed="GFZ or WDC form")  # fmt: skip
        measured.append((path.name, reading.table))
        for problem in reading.problems[:10]:
            print(f"noticed: {problem}", file=sys.stderr)
    foretold = [(activity_outlook.parse(path.read_bytes(), path.name), path.name) for path in options.outlook]
    if options.expect:
        foretold.append((_expected(options.expect, options.made, now), "entered"))
    with _opened(options) as archive:
        kept = archive.activity
        for name, indices in measured:
            count = kept.keep_measured(indices, options.source or name, now)
            print(f"{name}: {indices.day[0]} to {indices.day[-1]}, {count} days new or other than before")
        for table, name in foretold:
            count = kept.keep_foretold(table, options.source or name, now)
            print(f"{name}: ap foretold for {', '.join(str(day) for day in table.day)}, {count} new")
        if measured or foretold:
            for region in archive.regions():
                newest = [head.day for head in archive.days(region) if not head.provisional]
                if newest:
                    hindcast.day_kept(archive, region, newest[0], _say)
        else:
            _list(archive)
    return 0


def _expected(told: list[list[str]], made: str, now: np.datetime64) -> ActivityOutlook:
    days, values = [], []
    try:
        instant = np.datetime64(made.removesuffix("Z"), "ns") if made else now
        for day, text in told:
            days.append(np.datetime64(day, "D"))
            values.append(np.broadcast_to(np.array([float(word) for word in text.split(",")]), 8))
    except ValueError:
        raise Refused(
            f"--expect {', '.join(' '.join(one) for one in told)}{f' --made {made}' if made else ''}: write a UTC day "
            "and one ap or eight, like 2031-03-14 80; and a time like 2031-03-13T18:00",
            name="expect", value=str(told), allowed="YYYY-MM-DD AP",
        ) from None  # fmt: skip
    return ActivityOutlook(np.array(days), np.full(len(days), instant), np.array(values, dtype=np.float64))


def _list(archive: "Archive") -> None:
    measured, foretold = archive.activity.by_day(), archive.activity.foretold()
    days = sorted(measured)
    print(f"measured: {len(days)} days" + (f", {days[0]} to {days[-1]}" if days else ""))
    for day in days[-10:]:
        one = measured[day]
        print(f"  {day}: Kp up to {one.kp_highest:.2f}, ap {one.ap_daily:g}, F10.7 {one.f107:g}")
    print(f"foretold: {len(foretold)} tellings")
    for told in foretold[-10:]:
        made = np.datetime_as_string(told.made, unit="m")
        print(f"  {told.day}: ap up to {told.ap.max():g}, made {made} UTC, {told.source}")
