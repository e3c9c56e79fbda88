"""Routes about what to beware of: flags, and the states of sites."""

from fastapi import APIRouter, Request
from fastapi.responses import Response

from skylag.archive import Archive
from skylag.web import asking, payloads

router = APIRouter()


@router.get("/api/days/{region}/{day}/flags", summary="Flags of a day")
def flags(request: Request, region: str, day: str, version: int | None = None) -> Response:
    """Slopes, fronts, irregular patches and faults, with the tracks of fronts."""
    archive: Archive = request.app.state.archive
    return payloads.reply(payloads.flags(archive.flags(region, asking.day(day), version)))


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
    return payloads.flags_geojson(table, f"{region}-{day}", record.origin.simulated)


@router.get("/api/days/{region}/{day}/site-states", summary="States of the sites through a day")
def site_states(request: Request, region: str, day: str, version: int | None = None) -> Response:
    """One row of states per site, with the reason of each."""
    archive: Archive = request.app.state.archive
    return payloads.reply(payloads.site_states(archive.site_states(region, asking.day(day), version)))
