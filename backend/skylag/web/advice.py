"""Routes about what to beware of: flags, the states of sites, and what a day means for work at a site.

A question about work names a site of the region or places; sizes have sensible defaults, which the answer tells.
"""

import threading
from typing import Annotated

from fastapi import APIRouter, Depends, Request
from fastapi.responses import Response

from skylag.archive import Archive
from skylag.formats import calendar, sheet
from skylag.impact.coming import coming
from skylag.impact.ground_augmentation import StationChoices
from skylag.impact.satellite_augmentation import Availability
from skylag.impact.survey import Advice
from skylag.jobs.advising import AskedJob, AskedService, DayAdvice, Desk
from skylag.jobs.under_way import with_day_before
from skylag.tables import Site
from skylag.web import asking, payloads, report, sentences

router = APIRouter()
_DESK_LOCK = threading.Lock()
_CALENDAR = "text/calendar; charset=utf-8"


@router.get("/api/days/{region}/{day}/flags", summary="Flags of a day")
def flags(request: Request, region: str, day: str, version: int | None = None) -> Response:
    """Slopes, fronts, irregular patches and faults, with the tracks of fronts."""
    archive: Archive = request.app.state.archive
    return payloads.reply(payloads.flags(archive.flags(region, asking.day(day), version)))


@router.get("/api/days/{region}/{day}/coming", summary="Fronts on their way to the sites")
def fronts_coming(request: Request, region: str, day: str, time: str, version: int | None = None) -> Response:
    """The front that reaches each site next after a UTC instant, soonest first, if it keeps speed and heading.

    In the first hour of a day also those that the day before saw last.
    """
    archive: Archive = request.app.state.archive
    record = archive.day(region, asking.day(day), version)
    now = asking.instant(time, "time")
    own = archive.flags(region, record.head.day, record.head.version)
    found = coming(with_day_before(archive, region, record.head.day, own, now), record.region.sites, now)
    return payloads.reply({**sentences.about(record.origin.simulated, record.head.provisional),
                           **payloads.coming_fronts(found)})  # fmt: skip


@router.get("/api/days/{region}/{day}/flags.csv", summary="Flags of a day as CSV")
def flags_csv(request: Request, region: str, day: str, version: int | None = None) -> Response:
    """The same without tracks, one row each; times are UTC."""
    archive: Archive = request.app.state.archive
    return payloads.flags_csv(archive.flags(region, asking.day(day), version), f"{region}-{day}")


@router.get("/api/days/{region}/{day}/flags.geojson", summary="Flags of a day as GeoJSON")
def flags_geojson(request: Request, region: str, day: str, version: int | None = None) -> Response:
    """The same as points and lines."""
    archive: Archive = request.app.state.archive
    record = archive.day(region, asking.day(day), version)
    table = archive.flags(region, record.head.day, record.head.version)
    return payloads.flags_geojson(
        table, f"{region}-{day}", sentences.about(record.origin.simulated, record.head.provisional)
    )


@router.get("/api/days/{region}/{day}/site-states", summary="States of the sites through a day")
def site_states(request: Request, region: str, day: str, version: int | None = None) -> Response:
    """One row of states per site in force, with the reason of each."""
    return payloads.reply(payloads.site_states(_day(request, region, day, version).site_states()))


# ---------------------------------------------------------------------------------------------- work at a site


def _desk(request: Request) -> Desk:
    """The application's desk, which remembers the last few days."""
    with _DESK_LOCK:
        if not hasattr(request.app.state, "desk"):
            request.app.state.desk = Desk(request.app.state.archive)
    desk: Desk = request.app.state.desk
    return desk


def _day(request: Request, region: str, day: str, version: int | None) -> DayAdvice:
    return _desk(request).day(region, asking.day(day), version)


def _asked(request: Request, kept: DayAdvice, asked: AskedJob) -> Advice:
    return _desk(request).survey(kept, kept.job(asked))


def _approaches(kept: DayAdvice, site: str, service: AskedService) -> Availability:
    sites = [kept.site(site)] if site else [one for one in kept.record.region.sites if one.kind == "aerodrome"]
    return kept.approaches(sites, service.choices, service.names)


def _name(kept: DayAdvice, site: str, what: str) -> str:
    return f"{site or kept.record.region.name}-{kept.record.head.day}-{what}"


@router.get("/api/days/{region}/{day}/survey", summary="Survey windows of a job")
def survey_windows(
    request: Request, region: str, day: str, asked: Annotated[AskedJob, Depends()], version: int | None = None
) -> Response:
    """Errors, verdicts and windows at a site, at places, on a route or over an area.

    places, instead of a site, are written `lat,lon;lat,lon`; shape is points, route or area; method static, rtk,
    network or dgnss; references are names of receivers or `lat,lon`, with `;` between; hours are local, like
    07:00-16:30
    """
    kept = _day(request, region, day, version)
    return payloads.reply(payloads.survey(_asked(request, kept, asked)))


@router.get("/api/days/{region}/{day}/survey.ics", summary="Survey windows as a calendar")
def survey_calendar(
    request: Request, region: str, day: str, asked: Annotated[AskedJob, Depends()], version: int | None = None
) -> Response:
    """The same windows as calendar entries (RFC 5545)."""
    kept = _day(request, region, day, version)
    found = _asked(request, kept, asked)
    text = calendar.to_ics(report.survey_entries(found), f"Survey at {found.job.name}", kept.record.head.saved_at)
    return payloads.file(text.encode("utf-8"), _name(kept, found.job.name, "survey.ics"), _CALENDAR)


@router.get("/api/days/{region}/{day}/survey/why", summary="Was it the ionosphere")
def survey_why(
    request: Request, region: str, day: str, time: str, asked: Annotated[AskedJob, Depends()],
    version: int | None = None,
) -> Response:  # fmt: skip
    """For a UTC instant at which fixing failed: verdict and evidence, for the job as it was."""
    kept = _day(request, region, day, version)
    return payloads.reply(payloads.explanation(kept.explain(kept.job(asked), asking.instant(time, "time"))))


@router.get("/api/days/{region}/{day}/approaches", summary="Availability of approaches")
def approaches(
    request: Request, region: str, day: str, service: Annotated[AskedService, Depends()], site: str = "",
    version: int | None = None,
) -> Response:  # fmt: skip
    """Protection levels, availability, outages with causes, of a site or of all aerodromes; some seconds at first.

    levels with commas between; correction_m is the bound of clock and orbit corrections that the service is taken to
    send (a step of the published table), systems the satellites it augments, lowest_deg the aircraft's mask, noise_m
    its receiver; usual_grid_m parts outages of geometry from those of the ionosphere
    """
    kept = _day(request, region, day, version)
    return payloads.reply(payloads.approaches(_approaches(kept, site, service)))


@router.get("/api/days/{region}/{day}/approaches.ics", summary="Outages of approaches as a calendar")
def approaches_calendar(
    request: Request, region: str, day: str, service: Annotated[AskedService, Depends()], site: str = "",
    version: int | None = None,
) -> Response:  # fmt: skip
    """The same outages as calendar entries (RFC 5545)."""
    kept = _day(request, region, day, version)
    found = _approaches(kept, site, service)
    text = calendar.to_ics(report.approach_entries(found), "Outages of approaches", kept.record.head.saved_at)
    return payloads.file(text.encode("utf-8"), _name(kept, site, "approaches.ics"), _CALENDAR)


@router.get("/api/days/{region}/{day}/ground", summary="Ground-based augmentation at a site")
def ground(
    request: Request, region: str, day: str, site: str, station: Annotated[StationChoices, Depends()], time: str = "",
    version: int | None = None,
) -> Response:  # fmt: skip
    """The slope against the station's assumptions; with a UTC instant also the front that comes next.

    sigma_mm_per_km is the spread that the station announces; distance_km, speed_m_s, smoothing_s and lowest_deg are
    those of the aircraft
    """
    kept = _day(request, region, day, version)
    place = kept.site(site)
    found = kept.station(place, station)
    fronts = kept.coming(place, asking.instant(time, "time")) if time else ()
    return payloads.reply(payloads.station(found, fronts))


@router.get("/api/days/{region}/{day}/broadcast-model", summary="What the broadcast model leaves at a site")
def broadcast_model(request: Request, region: str, day: str, site: str, version: int | None = None) -> Response:
    """Range and position errors of single-frequency users, 95 %, per hour."""
    kept = _day(request, region, day, version)
    return payloads.reply(payloads.broadcast_model(kept.broadcast_model(kept.site(site))))


def _sheet(
    request: Request, kept: DayAdvice, asked: AskedJob, service: AskedService
) -> tuple[str, list[sheet.Block]]:
    found = _asked(request, kept, asked)
    lat, lon = found.job.places[0]
    site = Site(found.job.name, lat, lon, "job") if asked.places.strip() else kept.site(asked.site)
    return report.of_site(kept, site, found, service.choices, service.names)


@router.get("/api/days/{region}/{day}/sheet", summary="Sheet of a site and day")
def site_sheet(
    request: Request, region: str, day: str, asked: Annotated[AskedJob, Depends()],
    service: Annotated[AskedService, Depends()], version: int | None = None,
) -> Response:  # fmt: skip
    """One page to print: verdict, chart, evidence, assumptions, cautions; for a job as in `survey`."""
    kept = _day(request, region, day, version)
    title, blocks = _sheet(request, kept, asked, service)
    return payloads.page(sheet.to_html(title, blocks, "/api/sheet.css"))


@router.get("/api/days/{region}/{day}/sheet.pdf", summary="Sheet of a site and day as PDF")
def site_sheet_pdf(
    request: Request, region: str, day: str, asked: Annotated[AskedJob, Depends()],
    service: Annotated[AskedService, Depends()], version: int | None = None,
) -> Response:  # fmt: skip
    """The same as PDF."""
    kept = _day(request, region, day, version)
    title, blocks = _sheet(request, kept, asked, service)
    content = sheet.to_pdf(title, blocks, kept.record.head.saved_at)
    return payloads.file(content, _name(kept, asked.site or "places", "sheet.pdf"), "application/pdf")


@router.get("/api/sheet.css", summary="Style of sheets", include_in_schema=False)
def sheet_style() -> Response:
    """The style of sheets, on screen and on paper."""
    return Response(sheet.STYLE, media_type="text/css")
