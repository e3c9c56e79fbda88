"""Routes about ways of working: uses of a region, sites judged for one of them, events and foretold arrivals of a day.

Worked out from the maps and flags that are kept, when asked.
"""

from typing import Any

from fastapi import APIRouter, Request
from fastapi.responses import Response

from skylag.archive import Archive, DayRecord, SiteStates
from skylag.events import Arrival, Event
from skylag.formats import events as event_files
from skylag.impact import arrivals, events, silence, uses
from skylag.web import asking, payloads, sentences

router = APIRouter()


@router.get("/api/days/{region}/{day}/uses", summary="Ways of working a day can be judged for")
def known_uses(request: Request, region: str, day: str, version: int | None = None) -> Response:
    """Name, kind and limits of each; the published ones where the region names none."""
    archive: Archive = request.app.state.archive
    known = archive.day(region, asking.day(day), version).region
    rows = []
    for use in uses.uses_of(known):
        strained, broken, unit = uses.limits_of(use, known.shell_height_km * 1000.0)
        rows.append({"name": use.name, "kind": use.kind, "baseline_km": use.baseline_km, "spare_mm": use.spare_mm,
                     "strained_from": round(strained, 4), "broken_from": round(broken, 4), "unit": unit})  # fmt: skip
    return payloads.reply({"uses": rows, "caution": sentences.CAUTION})


@router.get("/api/days/{region}/{day}/site-states-for", summary="States of the sites for one use")
def states_for(request: Request, region: str, day: str, use: str, version: int | None = None) -> Response:
    """As `site-states`, by the limits of a use; `evidence` lists rows of the day's flags, per site and time."""
    archive: Archive = request.app.state.archive
    record = archive.day(region, asking.day(day), version)
    wanted = uses.find_use(record.region, use)
    fields = archive.fields(region, record.head.day, version=record.head.version)
    judged = uses.judge_for(
        wanted, fields, archive.flags(region, record.head.day, record.head.version), record.region,
        silent=silence.of_facts(record.origin.counts, record.receivers),
    )  # fmt: skip
    table = SiteStates(judged.times, record.region.sites, judged.site_states, judged.site_reasons)
    evidence = [[list(rows) for rows in site] for site in judged.site_evidence]
    return payloads.reply({"use": wanted.name, **payloads.site_states(table), "evidence": evidence})


def _about(record: DayRecord) -> dict[str, Any]:
    return sentences.about(record.origin.simulated, record.head.provisional)


def _found(
    archive: Archive, region: str, day: str, use: str, version: int | None
) -> tuple[tuple[Event, ...], dict[str, Any]]:
    """The events of a stored day, for a use or by its own states; and what is to be known of the day."""
    record = archive.day(region, asking.day(day), version)
    fields = archive.fields(region, record.head.day, version=record.head.version)
    flags = archive.flags(region, record.head.day, record.head.version)
    if not use:
        return events.of_day(fields, flags, record.region), _about(record)
    silent = silence.of_facts(record.origin.counts, record.receivers)
    judged = uses.judge_for(uses.find_use(record.region, use), fields, flags, record.region, silent=silent)
    return events.of_use(judged, fields, flags, record.region), _about(record)


@router.get("/api/days/{region}/{day}/events", summary="Events of a day")
def listed(request: Request, region: str, day: str, use: str = "", version: int | None = None) -> Response:
    """Stretches of strained or broken cells with extent, worst value, cause; by the day's own states without `use`."""
    found, about = _found(request.app.state.archive, region, day, use, version)
    return Response(event_files.to_json(found, about), media_type="application/json")


@router.get("/api/days/{region}/{day}/events.csv", summary="Events of a day as CSV")
def as_table(request: Request, region: str, day: str, use: str = "", version: int | None = None) -> Response:
    """The same, one row each; times are UTC."""
    found, _ = _found(request.app.state.archive, region, day, use, version)
    return Response(event_files.to_csv(found), media_type="text/csv; charset=utf-8")


@router.get("/api/days/{region}/{day}/events.geojson", summary="Events of a day as GeoJSON")
def as_shapes(request: Request, region: str, day: str, use: str = "", version: int | None = None) -> Response:
    """The same as boxes."""
    found, about = _found(request.app.state.archive, region, day, use, version)
    return Response(event_files.to_geojson(found, about), media_type="application/geo+json")


def _told(
    archive: Archive, region: str, day: str, site: str, version: int | None
) -> tuple[list[Arrival], list[int], dict[str, Any]]:
    """Forecasts of a stored day, row numbers of the flags that are its fronts, and what is to be known of the day."""
    record = archive.day(region, asking.day(day), version)
    rows = arrivals.flag_rows(archive.flags(region, record.head.day, record.head.version))
    told = [one for one in arrivals.of_facts(record.origin.counts) if site in ("", one.place)]
    return told, rows, _about(record)


@router.get("/api/days/{region}/{day}/arrivals", summary="When fronts were foretold at the sites, and what came of it")
def foretold(request: Request, region: str, day: str, site: str = "", version: int | None = None) -> Response:
    """Forecasts for the hour ahead, made each quarter hour from what was seen until then; of one site with `site`."""
    told, rows, about = _told(request.app.state.archive, region, day, site, version)
    return Response(event_files.arrivals_to_json(told, rows, about), media_type="application/json")


@router.get("/api/days/{region}/{day}/arrivals.csv", summary="Foretold arrivals of fronts as CSV")
def foretold_table(request: Request, region: str, day: str, site: str = "", version: int | None = None) -> Response:
    """The same, one row each; times are UTC, `sigma_s` is the spread."""
    told, rows, _ = _told(request.app.state.archive, region, day, site, version)
    return Response(event_files.arrivals_to_csv(told, rows), media_type="text/csv; charset=utf-8")
