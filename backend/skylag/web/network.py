"""Routes about days and the network: what is stored, the facts of a day, biases, the vocabulary."""

from fastapi import APIRouter, Request
from fastapi.responses import Response

from skylag.archive import Archive
from skylag.web import asking, payloads, witnesses

router = APIRouter()


@router.get("/api/days", summary="Stored days")
def days(
    request: Request, region: str | None = None, since: str | None = None, until: str | None = None
) -> Response:
    """All stored days, or those of one region, or from one day to another, newest first.

    `activity` of a day is what was measured of Sun and magnetic field: `kp_highest` of its eight Kp, `ap_daily`,
    `f107`; null where no indices of the day were imported.
    """
    archive: Archive = request.app.state.archive
    first = asking.day(since) if since is not None else None
    last = asking.day(until) if until is not None else None
    return payloads.reply(payloads.days(archive.days(region, first, last), archive.activity.by_day(first, last)))


@router.get("/api/quantities", summary="Vocabulary")
def vocabulary() -> Response:
    """Name, unit, label and meaning of every quantity; names of states; layers."""
    return payloads.reply(payloads.vocabulary())


@router.get("/api/days/{region}/{day}", summary="Facts of a day")
def day(request: Request, region: str, day: str, version: int | None = None) -> Response:
    """Region, receivers, sites, grid, times, scales, counts, warnings and origin of a day."""
    archive: Archive = request.app.state.archive
    record = archive.day(region, asking.day(day), version)
    year = day[:4]
    return payloads.reply(payloads.day(record, archive.days(region, f"{year}-01-01", f"{year}-12-31")))


@router.get("/api/days/{region}/{day}/biases", summary="Code biases of a day")
def biases(request: Request, region: str, day: str, version: int | None = None) -> Response:
    """Satellite and receiver biases with their uncertainty."""
    archive: Archive = request.app.state.archive
    return payloads.reply(payloads.biases(archive.biases(region, asking.day(day), version)))


MOST_DAYS = 92


@router.get("/api/network", summary="What each receiver gave, day by day")
def receivers(
    request: Request, region: str | None = None, since: str | None = None, until: str | None = None
) -> Response:
    """Data received, gaps, slips, biases and faults of the receivers on the newest days asked for, 92 at most."""
    archive: Archive = request.app.state.archive
    first = asking.day(since) if since is not None else None
    last = asking.day(until) if until is not None else None
    days = []
    for head in archive.days(region, first, last)[:MOST_DAYS]:
        record = archive.day(head.region, head.day, head.version)
        biases = archive.biases(head.region, head.day, head.version)
        days.append(witnesses.network_of(record, biases, archive.flags(head.region, head.day, head.version)))
    return payloads.reply(payloads.network(days))
