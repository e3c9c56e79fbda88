"""The commands `advise` and `sites`: what a kept day means for work at a site; lists of sites into a region file.

Thin: parses, calls, prints, writes the files asked for.
"""

import argparse
import json
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from skylag import settings
from skylag.errors import FormatError, Missing, Refused
from skylag.formats import calendar, sheet, site_lists
from skylag.impact.satellite_augmentation import LEVEL, USUAL_LEVELS, ServiceChoices
from skylag.impact.survey import METHODS, Job
from skylag.tables import Site

if TYPE_CHECKING:
    from skylag.jobs.advising import DayAdvice, Desk


def add(commands: Any, caution: str) -> None:
    """Add the two commands to the command line."""
    _advise_parser(commands, caution)
    _sites_parser(commands, caution)


def _advise_parser(commands: Any, caution: str) -> None:
    parser = commands.add_parser(
        "advise",
        help="tell what a kept day means for work at a site",
        formatter_class=argparse.RawDescriptionHelpFormatter,
        description="Windows to survey in and to keep out of, availability of approaches, ground-based augmentation\n"
        "and single-frequency errors at a site of a kept day, with the assumptions behind them.",
        epilog="methods of survey:\n"
        + "\n".join(f"  {name:8} {meaning}" for name, meaning in METHODS.items())
        + "\n\nservice levels: " + ", ".join(LEVEL) + "\n\nexample:\n"
        '  skylag advise --archive skylag-demo --day 2031-03-12 --site "Kelm Isle airstrip" --sheet kelm.pdf\n\n'
        + caution,
    )
    parser.add_argument("--archive", default="", metavar="PLACE", help="folder, or a PostgreSQL URL")
    parser.add_argument("--region", default="", metavar="NAME", help="of several regions in the archive, this one")
    parser.add_argument("--day", default="", metavar="YYYY-MM-DD", help="the newest day without")
    parser.add_argument("--site", default="", metavar="NAME", help="a site of the region; without, all in a line each")
    parser.add_argument("--at", nargs=2, type=float, action="append", metavar=("LAT", "LON"),
                        help="a place that is no site; several make an area or a route")  # fmt: skip
    parser.add_argument("--method", default="rtk", choices=tuple(METHODS))
    parser.add_argument("--baseline", type=float, default=10.0, metavar="KM", help="to the base or reference (10)")
    parser.add_argument("--tolerance", nargs=2, type=float, default=(30.0, 50.0), metavar=("ACROSS", "HEIGHT"),
                        help="in mm, at 95 %% (30 50)")  # fmt: skip
    parser.add_argument("--hours", default="", metavar="HH:MM-HH:MM", help="working hours in the region's own time")
    parser.add_argument("--failed", default="", metavar="UTC", help="was it the ionosphere, at 2031-03-12T07:05:00Z?")
    parser.add_argument("--levels", default=",".join(USUAL_LEVELS), metavar="LIST", help="service levels of approaches")
    parser.add_argument("--corrections", type=float, default=3.0, metavar="METRES",
                        help="bound of clock and orbit corrections, one of the published steps (3)")  # fmt: skip
    parser.add_argument("--sheet", type=Path, metavar="FILE", help="write a sheet: .html or .pdf")
    parser.add_argument("--calendar", type=Path, metavar="FILE", help="write windows and outages as .ics")
    parser.set_defaults(run=_advise)


def _sites_parser(commands: Any, caution: str) -> None:
    parser = commands.add_parser(
        "sites",
        help="take a list of sites into a region file",
        description="Take sites from CSV (name, lat, lon, kind) or GeoJSON points and add them to a region file. Sites "
        "whose name the region already has are left as they are.",
        epilog=caution,
    )
    parser.add_argument("list", type=Path, metavar="FILE", help="CSV or GeoJSON")
    parser.add_argument("--region", type=Path, required=True, metavar="FILE", help="region.toml to add to")
    parser.add_argument("--kind", default="", metavar="WORD", help="kind of sites that tell none, e.g. aerodrome")
    parser.set_defaults(run=_sites)


def _advise(options: argparse.Namespace) -> int:
    from skylag.archive import open_archive
    from skylag.jobs.advising import Desk

    place = options.archive or settings.from_environment().archive
    with open_archive(place) as archive:
        heads = [head for head in archive.days() if not options.region or head.region == options.region]
        if options.day:
            heads = [head for head in heads if str(head.day) == options.day]
        if not heads:
            known = sorted({f"{head.region} {head.day}" for head in archive.days()})
            raise Missing(
                f"{place} keeps no such day; it keeps {', '.join(known[-10:]) or 'none'}", what=options.day,
                nearest=known[-10:],
            )  # fmt: skip
        if len({head.region for head in heads}) > 1:
            names = sorted({head.region for head in heads})
            raise Refused(
                f"{place} keeps several regions; name one with --region: {', '.join(names)}", name="region", value="",
                allowed=names,
            )  # fmt: skip
        desk = Desk(archive)
        day = desk.day(heads[0].region, str(heads[0].day))
        _tell(desk, day, options)
    return 0


def _job(day: "DayAdvice", site: Site, options: argparse.Namespace) -> Job:
    places = tuple((lat, lon) for lat, lon in options.at) if options.at else ((site.lat, site.lon),)
    references = tuple(day.receiver_places()) if options.method == "network" else ()
    across, height = options.tolerance
    return Job(
        site.name, places, options.method, options.baseline, references, across, height,
        day.local_hours(options.hours),
    )  # fmt: skip


def _tell(desk: "Desk", day: "DayAdvice", options: argparse.Namespace) -> None:
    from skylag.web import asking, report

    clock = report.Clock(day.record.region.timezone)
    if day.record.origin.simulated:
        print("Invented data: nothing here was measured.")
    if options.at:
        places = [asking.place(*pair) for pair in options.at]
        lat, lon = places[0]
        more = f" and {len(options.at) - 1} more" if len(options.at) > 1 else ""
        site = Site(options.site or f"{lat:g}, {lon:g}{more}", lat, lon)
    elif options.site:
        site = day.site(options.site)
    else:
        for one in day.record.region.sites:
            print(f"{one.name}: {report.survey_verdict(desk.survey(day, _job(day, one, options)), clock)}")
        print("For one of them, with reasons and assumptions: --site NAME")
        return
    job = _job(day, site, options)
    advice = desk.survey(day, job)
    entries = report.survey_entries(advice)
    print(f"{site.name}, {day.record.head.day}, {day.record.region.name} (times UTC)")
    print(report.survey_verdict(advice, clock))
    for window in advice.windows:
        print(f"  {clock.utc(window.start)} - {clock.utc(window.end)}  {window.verdict:7} {window.why}")
    if options.failed:
        found = day.explain(job, asking.instant(options.failed, "failed"))
        print(f"Was it the ionosphere at {options.failed}? {found.verdict.capitalize()}.")
        for sentence in found.evidence:
            print(f"  {sentence}")
    assumed = [*advice.assumptions]
    choices = ServiceChoices(correction_m=options.corrections)
    if site.kind == "aerodrome":
        names = tuple(part.strip() for part in options.levels.split(",") if part.strip())
        approaches = day.approaches([site], choices, names)
        station = day.station(site)
        print(report.approach_verdict(approaches, clock))
        for outage in approaches.outages:
            span = f"{clock.utc(outage.start)} - {clock.utc(outage.end)}"
            print(f"  {span}  no {outage.level:8} {outage.cause}: {outage.why}")
        print(report.station_verdict(station))
        entries += report.approach_entries(approaches)
        assumed += [*approaches.assumptions, *station.assumptions]
    try:
        left = day.broadcast_model(site)
        if np.isfinite(left.day_range_95_m):
            print(f"Users of one frequency: the broadcast model leaves {left.day_range_95_m:.1f} m of range (95 %).")
    except Missing as trouble:
        print(f"Users of one frequency: {trouble.message}")
    print("Assumed:")
    for sentence in dict.fromkeys(assumed):
        print(f"  {sentence}")
    print(advice.caution)
    if options.sheet:
        title, blocks = report.of_site(day, site, advice, choices)
        if options.sheet.suffix == ".pdf":
            options.sheet.write_bytes(sheet.to_pdf(title, blocks, day.record.head.saved_at))
        else:
            options.sheet.write_text(sheet.to_html(title, blocks), encoding="utf-8")
        print(f"sheet: {options.sheet}")
    if options.calendar:
        text = calendar.to_ics(entries, site.name, day.record.head.saved_at)
        options.calendar.write_bytes(text.encode("utf-8"))
        print(f"calendar: {options.calendar}")


def _sites(options: argparse.Namespace) -> int:
    try:
        text = options.list.read_text(encoding="utf-8")
    except UnicodeDecodeError as cause:
        raise FormatError(f"{options.list}: is no UTF-8 text", path=str(options.list), line=0) from cause
    sites, problems = site_lists.sites_from(text, str(options.list))
    region = settings.read_region(options.region)
    there = {site.name for site in region.sites}
    fresh = [site for site in sites if site.name not in there]
    for problem in problems:
        print(f"left out: {problem}", file=sys.stderr)
    for site in sites:
        if site.name in there:
            print(f"left as it is: {site.name}", file=sys.stderr)
    before = options.region.read_text(encoding="utf-8").rstrip("\n")
    pieces = [_toml(site, options.kind) for site in fresh]
    if pieces:
        options.region.write_text("\n".join([before, *pieces]), encoding="utf-8")
        settings.read_region(options.region)
    print(f"sites added to {options.region}: {len(fresh)}; it has {len(there) + len(fresh)}")
    return 1 if problems else 0


def _toml(site: Site, kind: str) -> str:
    """A [[site]] entry; texts of JSON are texts of TOML too."""
    name, word = (json.dumps(text) for text in (site.name, kind if kind and site.kind == "site" else site.kind))
    return f"\n[[site]]\nname = {name}\nlat = {site.lat!r}\nlon = {site.lon!r}\nkind = {word}\n"
