"""The commands `advise` and `sites`: what a kept day means for work at a site; lists of sites into a region file.

Thin: parses, calls, prints, writes the files asked for.
"""

import argparse
import json
import sys
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from skylag import settings
from skylag.errors import FormatError, Missing, NotEnough, Refused
from skylag.formats import calendar, sheet, site_lists
from skylag.impact.ground_augmentation import StationChoices
from skylag.impact.satellite_augmentation import LEVEL, USUAL_LEVELS
from skylag.impact.shapes import SHAPES
from skylag.impact.survey import METHODS, Job
from skylag.spelling import SITE_KINDS, kind_trouble
from skylag.tables import Site

if TYPE_CHECKING:
    from skylag.jobs.advising import AskedService, DayAdvice, Desk
    from skylag.web.report import Clock


_SHEETS = (".html", ".pdf")


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
        + "\n\nservice levels: "
        + ", ".join(LEVEL)
        + "\n\nexamples:\n"
        '  skylag advise --archive skylag-demo --day 2031-03-12 --site "Kelm Isle airstrip" --sheet kelm.pdf\n'
        '  skylag advise --archive skylag-demo --site "Hobbinstead dam survey" --failed 2031-03-12T07:05:00Z\n'
        "  skylag advise --archive skylag-demo --at -40.1 146.2 --at -39.8 146.9 --shape route --baseline 20\n\n"
        "exit status: 0 told; 2 bad command; 3 no answer (the reason is told).\n\n" + caution,
    )
    settings.add_kept_day(parser)
    parser.add_argument("--site", default="", metavar="NAME",
                        help="a site of the region; without, all in a line each (aerodromes: approaches)")  # fmt: skip
    parser.add_argument("--at", nargs=2, type=float, action="append", metavar=("LAT", "LON"),
                        help="a place that is no site; give several with --shape")  # fmt: skip
    parser.add_argument("--shape", default="points", choices=tuple(SHAPES), help="what several places mean")
    parser.add_argument("--method", default="rtk", choices=tuple(METHODS))
    parser.add_argument("--baseline", type=float, default=10.0, metavar="KM", help="to the base or reference (10)")
    parser.add_argument("--reference", action="append", default=[], metavar="NAME",
                        help="a receiver in use, may come again: sets the baseline, or is of the network")  # fmt: skip
    parser.add_argument("--reference-at", nargs=2, type=float, action="append", default=[], metavar=("LAT", "LON"),
                        help="the same by place, for other stations")  # fmt: skip
    parser.add_argument("--tolerance", nargs=2, type=float, default=(30.0, 50.0), metavar=("ACROSS", "HEIGHT"),
                        help="in mm, at 95 %% (30 50)")  # fmt: skip
    parser.add_argument("--hours", default="", metavar="HH:MM-HH:MM", help="working hours in the region's own time")
    parser.add_argument("--session", type=float, default=60.0, metavar="MINUTES", help="of the method static (60)")
    parser.add_argument("--least-window", type=float, default=15.0, metavar="MINUTES", help="shorter is of no use (15)")
    parser.add_argument("--mask", type=float, default=15.0, metavar="DEG", help="lowest elevation in survey (15)")
    parser.add_argument("--satellites", type=int, default=5, metavar="N", help="needed at least (5)")
    parser.add_argument("--dilution", type=float, default=6.0, metavar="N", help="dilution of position at most (6)")
    parser.add_argument("--fixing", type=float, default=0.1, metavar="CHANCE", help="that fixing suffers, at most (.1)")
    parser.add_argument("--failed", default="", metavar="UTC", help="was it the ionosphere, at 2031-03-12T07:05:00Z?")
    service = parser.add_argument_group("what the region's service and the aircraft are assumed to do")
    service.add_argument("--levels", default="", metavar="LIST",
                         help=f"service levels of approaches ({','.join(USUAL_LEVELS)})")  # fmt: skip
    service.add_argument("--corrections", type=float, default=3.0, metavar="METRES",
                         help="bound of clock and orbit corrections, one of the published steps (3)")  # fmt: skip
    service.add_argument("--systems", default="G", metavar="LETTERS", help="satellites that are augmented (G)")
    service.add_argument("--lowest", type=float, default=5.0, metavar="DEG", help="lowest elevation in approaches (5)")
    service.add_argument("--noise", type=float, default=0.36, metavar="METRES", help="of the aircraft's receiver (.36)")
    service.add_argument("--usual-grid", type=float, default=3.0, metavar="METRES",
                         help="grid confidence of a usual day, which parts geometry from ionosphere (3)")  # fmt: skip
    station = parser.add_argument_group("what a ground-based station and its aircraft are assumed to do")
    station.add_argument("--spread", type=float, default=4.0, metavar="MM_PER_KM", help="announced by the station (4)")
    station.add_argument("--distance", type=float, default=6.0, metavar="KM", help="from station to aircraft (6)")
    station.add_argument("--speed", type=float, default=70.0, metavar="M_PER_S", help="of the aircraft (70)")
    station.add_argument("--smoothing", type=float, default=100.0, metavar="S", help="of the aircraft's receiver (100)")
    station.add_argument("--station-lowest", type=float, default=15.0, metavar="DEG", help="lowest elevation used (15)")
    station.add_argument("--coming", default="", metavar="UTC", help="the front that comes next after this instant")
    parser.add_argument("--sheet", type=Path, metavar="FILE", help="write a sheet: .html or .pdf")
    parser.add_argument("--calendar", type=Path, metavar="FILE", help="write windows and outages as .ics")
    parser.set_defaults(run=_advise)


def _sites_parser(commands: Any, caution: str) -> None:
    parser = commands.add_parser(
        "sites",
        help="take a list of sites into a region file",
        formatter_class=argparse.RawDescriptionHelpFormatter,
        description="Take sites from CSV (name, lat, lon, kind) or GeoJSON points and add them to a region file.\n"
        "Sites whose name the region already has are left as they are.",
        epilog="examples:\n"
        "  skylag sites aerodromes.csv --region region.toml --kind aerodrome\n"
        "  skylag sites places.geojson --region region.toml\n\n"
        "exit status: 0 all sites are in the region file; 1 done, some lines were left out (each named); 2 bad\n"
        "command; 3 the region file was left as it was.\n\n" + caution,
    )
    parser.add_argument("list", type=Path, metavar="FILE", help="CSV or GeoJSON")
    parser.add_argument("--region", type=Path, required=True, metavar="FILE", help="region.toml to add to")
    parser.add_argument("--kind", default="", metavar="WORD", help="kind of sites that tell none, e.g. aerodrome")
    parser.set_defaults(run=_sites)


def _advise(options: argparse.Namespace) -> int:
    from skylag.archive import open_archive
    from skylag.jobs.advising import Desk

    if options.sheet and options.sheet.suffix.lower() not in _SHEETS:
        raise Refused(
            f"--sheet {options.sheet}: a sheet is HTML or PDF; end its name with {' or '.join(_SHEETS)}",
            name="sheet", value=str(options.sheet), allowed=_SHEETS,
        )  # fmt: skip
    place = options.archive or settings.from_environment().archive
    with open_archive(place, existing=True) as archive:
        heads = [head for head in archive.days() if not options.region or head.region == options.region]
        if options.day:
            heads = [head for head in heads if str(head.day) == options.day]
        if not heads:
            known = sorted({f"{head.region} {head.day}" for head in archive.days()})
            raise Missing(
                f"{place} keeps no such day{_named(options.region, options.day)}; it keeps "
                f"{', '.join(known[-10:]) or 'none'}",
                what=options.day, nearest=known[-10:],
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


def _named(*words: str) -> str:
    """What was asked for, in brackets; nothing where nothing was named."""
    said = " ".join(word for word in words if word)
    return f" ({said})" if said else ""


def _job(day: "DayAdvice", site: str, options: argparse.Namespace) -> Job:
    from skylag.jobs.advising import AskedJob

    across, height = options.tolerance
    stations = [*options.reference, *_pairs(options.reference_at)]
    return day.job(
        AskedJob(
            site, ";".join(_pairs(options.at or ())), options.shape, options.method, options.baseline,
            ";".join(stations), across, height, options.hours, options.session, options.least_window, options.mask,
            options.satellites, options.dilution, options.fixing,
        )
    )  # fmt: skip


def _pairs(places: Iterable[Sequence[float]]) -> list[str]:
    return [f"{lat!r},{lon!r}" for lat, lon in places]


def _tell(desk: "Desk", day: "DayAdvice", options: argparse.Namespace) -> None:
    from skylag.web import asking, report, sentences

    clock = report.Clock(day.record.region.timezone)
    lines = sentences.notices(day.record.origin.simulated, day.record.head.provisional)
    if not options.at and not options.site:
        lines.append(f"{day.record.region.name}, {day.record.head.day} (times UTC)")
        lines += _all_sites(desk, day, options)
        print("\n".join([*lines, "For one of them, with reasons and assumptions: --site NAME", sentences.CAUTION]))
        return
    for pair in options.at or ():
        asking.place(*pair)
    job = _job(day, options.site, options)
    site = Site(job.name, *job.places[0], "job") if options.at else day.site(options.site)
    advice = desk.survey(day, job)
    entries = report.survey_entries(advice)
    lines.append(f"{site.name}, {day.record.head.day}, {day.record.region.name} (times UTC)")
    lines.append(report.survey_verdict(advice, clock))
    for window in advice.windows:
        span = f"{clock.utc(window.start)} - {clock.utc_end(window.end)}"
        lines.append(f"  {span}  {window.verdict:7} {window.why}".rstrip())
    lines += report.survey_figures(advice, clock)
    if options.failed:
        found = day.explain(job, asking.instant(options.failed, "failed"))
        lines.append(f"Was it the ionosphere at {options.failed}? {found.verdict.capitalize()}.")
        lines += [f"  {sentence}" for sentence in found.evidence]
    assumed = [*advice.assumptions]
    service = _service(options)
    if site.kind == "aerodrome":
        told, more, entries_of_approaches = _aerodrome(day, site, options)
        lines += told
        assumed += more
        entries += entries_of_approaches
    try:
        left = day.broadcast_model(site)
        if np.isfinite(left.day_range_95_m):
            lines.append(
                f"Users of one frequency: the broadcast model leaves {left.day_range_95_m:.1f} m of range (95 %)."
            )
            assumed += left.assumptions
    except (Missing, NotEnough) as trouble:
        lines.append(f"Users of one frequency: {trouble.message}")
    # Printed as one, so that no verdict is read without its caution because a later question was refused.
    print("\n".join([*lines, "Assumed:", *(f"  {sentence}" for sentence in dict.fromkeys(assumed)), advice.caution]))
    if options.sheet:
        title, blocks = report.of_site(day, site, advice, service.choices, service.names)
        if options.sheet.suffix.lower() == ".pdf":
            options.sheet.write_bytes(sheet.to_pdf(title, blocks, day.record.head.saved_at))
        else:
            options.sheet.write_text(sheet.to_html(title, blocks), encoding="utf-8")
        print(f"sheet: {options.sheet}")
    if options.calendar:
        text = calendar.to_ics(entries, site.name, day.record.head.saved_at)
        options.calendar.write_bytes(text.encode("utf-8"))
        print(f"calendar: {options.calendar}")


def _all_sites(desk: "Desk", day: "DayAdvice", options: argparse.Namespace) -> list[str]:
    """A line per site: approaches of aerodromes, survey at all others."""
    from skylag.web import report

    clock, sites = report.Clock(day.record.region.timezone), day.record.region.sites
    # All aerodromes at once, and before the survey: what is prepared for them is the sky of all.
    told = _flown(day, [one for one in sites if one.kind == "aerodrome"], options, clock)
    for one in sites:
        if one.name not in told:
            told[one.name] = report.survey_verdict(desk.survey(day, _job(day, one.name, options)), clock)
    return [f"{one.name}: {told[one.name]}" for one in sites]


def _flown(day: "DayAdvice", aerodromes: Sequence[Site], options: argparse.Namespace, clock: "Clock") -> dict[str, str]:
    """Name of each aerodrome -> its approaches in a sentence or two."""
    from skylag.web import report

    service = _service(options)
    if not aerodromes:
        return {}
    try:
        found = day.approaches(aerodromes, service.choices, service.names)
    except NotEnough as trouble:
        return {one.name: f"Approaches cannot be judged: {trouble.message}" for one in aerodromes}
    return {one.name: report.approach_verdict(found.of_site(number), clock) for number, one in enumerate(aerodromes)}


def _service(options: argparse.Namespace) -> "AskedService":
    from skylag.jobs.advising import AskedService

    return AskedService(
        options.levels, options.systems, options.lowest, options.corrections, options.noise, options.usual_grid
    )


def _aerodrome(
    day: "DayAdvice", site: Site, options: argparse.Namespace
) -> tuple[list[str], list[str], list[calendar.Entry]]:
    """Lines on approaches and the ground-based station, what they assume, and entries of a calendar."""
    from skylag.web import asking, report

    clock, service = report.Clock(day.record.region.timezone), _service(options)
    station = day.station(
        site,
        StationChoices(options.spread, options.distance, options.speed, options.smoothing, options.station_lowest),
    )
    told, assumed, entries = [], [*station.assumptions], []
    try:
        approaches = day.approaches([site], service.choices, service.names)
    except NotEnough as trouble:
        told.append(f"Approaches cannot be judged: {trouble.message}")
    else:
        told.append(report.approach_verdict(approaches, clock))
        for outage in approaches.outages:
            span = f"{clock.utc(outage.start)} - {clock.utc_end(outage.end)}"
            told.append(f"  {span}  no {outage.level:8} {outage.cause}: {outage.why}")
        assumed = [*approaches.assumptions, *assumed]
        entries = report.approach_entries(approaches)
    told.append(report.station_verdict(station))
    if options.coming:
        fronts = day.coming(site, asking.instant(options.coming, "coming"))
        told.append(f"Next front after {options.coming}: {fronts[0].words if fronts else 'none is on its way'}.")
    return told, assumed, entries


def _sites(options: argparse.Namespace) -> int:
    if trouble := kind_trouble(options.kind):
        raise Refused(f"--kind: {trouble}", name="kind", value=options.kind, allowed=SITE_KINDS)
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
        passing = options.region.with_name(options.region.name + ".writing")
        try:  # in place only when it is whole and understood
            passing.write_text("\n".join([before, *pieces]), encoding="utf-8")
            settings.read_region(passing)
            passing.replace(options.region)
        finally:
            passing.unlink(missing_ok=True)
    print(f"sites added to {options.region}: {len(fresh)}; it has {len(there) + len(fresh)}")
    return 1 if problems else 0


def _toml(site: Site, kind: str) -> str:
    """A [[site]] entry; texts of JSON are texts of TOML too."""
    name, word = (json.dumps(text) for text in (site.name, kind if kind and site.kind == "site" else site.kind))
    return f"\n[[site]]\nname = {name}\nlat = {site.lat!r}\nlon = {site.lon!r}\nkind = {word}\n"
