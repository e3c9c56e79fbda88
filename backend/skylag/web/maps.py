"""Routes about maps: fields, one place, one day at a place, lines of sight, coast.  A route parses, asks, encodes."""

from typing import Annotated

import numpy as np
from fastapi import APIRouter, Query, Request
from fastapi.responses import Response

from skylag.archive import Archive, DayRecord
from skylag.errors import Missing
from skylag.formats import coast
from skylag.web import asking, nearby, payloads

router = APIRouter()


@router.get("/api/days/{region}/{day}/fields", summary="Maps of a span of time")
def fields(
    request: Request,
    region: str,
    day: str,
    start: Annotated[str, Query(alias="from")] = "",
    end: Annotated[str, Query(alias="to")] = "",
    layers: str = "",
    version: int | None = None,
) -> Response:
    """Maps with from <= time < to (UTC; all of the day without), of the layers named, separated by commas."""
    archive: Archive = request.app.state.archive
    first = asking.instant(start, "from") if start else None
    last = asking.instant(end, "to") if end else None
    names = asking.layers(layers)
    return payloads.reply(payloads.maps(archive.fields(region, asking.day(day), first, last, version), names))


@router.get("/api/days/{region}/{day}/rays", summary="Lines of sight of one moment")
def rays(request: Request, region: str, day: str, time: str, version: int | None = None) -> Response:
    """Pierce points of the epoch nearest to a UTC instant."""
    archive: Archive = request.app.state.archive
    moment = asking.instant(time, "time")
    return payloads.reply(payloads.rays(archive.rays_at(region, asking.day(day), moment, version), moment))


@router.get("/api/days/{region}/{day}/reading", summary="What is known at a place and time")
def reading(
    request: Request, region: str, day: str, lat: float, lon: float, time: str, version: int | None = None
) -> Response:
    """Delay, slope, state and its reason at the cell that holds a place, from the map nearest to a UTC instant."""
    archive: Archive = request.app.state.archive
    lat, lon = asking.place(lat, lon)
    moment = asking.instant(time, "time")
    record = archive.day(region, asking.day(day), version)
    epoch = _nearest(record, moment)
    cell = archive.cell_at(record, lat, lon, epoch)
    near = nearby.active_near(archive.flags(region, record.head.day, record.head.version), lat, lon, epoch)
    return payloads.reply(payloads.reading(cell, record, lat, lon, near))


@router.get("/api/days/{region}/{day}/series", summary="The day at a place")
def series(
    request: Request, region: str, day: str, lat: float, lon: float, version: int | None = None
) -> Response:
    """Delay, slope and state through the day at the cell that holds a place."""
    archive: Archive = request.app.state.archive
    lat, lon = asking.place(lat, lon)
    record = archive.day(region, asking.day(day), version)
    cell = archive.series(region, record.head.day, lat, lon, record.head.version)
    return payloads.reply(payloads.series(cell, record.cell_of(lat, lon) is not None))


@router.get("/api/coast", summary="Coast lines within a box")
def coast_lines(
    request: Request, south: float, north: float, west: float, east: float, region: str | None = None
) -> Response:
    """Coast lines within a box in degrees, finer for smaller boxes; the region's own where it is named and has some."""
    archive: Archive = request.app.state.archive
    heads = archive.days(region) if region is not None else ()
    own = archive.day(heads[0].region, heads[0].day).region.coast if heads else ""
    lines = coast.read_coast(*asking.box(south, north, west, east), path=own or None)
    answer = payloads.reply(payloads.coast(lines))
    answer.headers["Cache-Control"] = "public, max-age=86400"
    return answer


def _nearest(record: DayRecord, moment: np.datetime64) -> np.datetime64:
    """The time of the map nearest to a moment; no map within one step of it is refused, not guessed."""
    times = record.times
    if not len(times):
        raise Missing("this day has no maps; process it again", what="maps", nearest=None)
    nearest = times[int(np.argmin(np.abs(times - moment)))]
    step = np.min(np.diff(times)) if len(times) > 1 else np.timedelta64(900, "s")
    if abs(nearest - moment) > step:
        raise Missing(
            f"no map of {record.region.name}, day {record.head.day}, is near {payloads.utc(moment)}; "
            f"the nearest is of {payloads.utc(nearest)}",
            what=payloads.utc(moment), nearest=payloads.utc(nearest),
        )  # fmt: skip
    return np.datetime64(nearest, "ns")
