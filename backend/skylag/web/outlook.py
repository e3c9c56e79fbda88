"""Routes about the day ahead: the outlook after the newest day of a region, at a place or on a map, and its record.

Made and kept when a day is kept, or at the first request after it.  An outlook is a planning aid, not for navigation.
"""

from typing import Annotated, Any

import numpy as np
from fastapi import APIRouter, Query, Request
from fastapi.responses import Response

from skylag.archive import Archive
from skylag.archive.outlooks import Kept
from skylag.constants import KM_PER_DEG
from skylag.errors import Missing, Refused
from skylag.impact import outlook_advice, uses
from skylag.ionosphere import outlook as science
from skylag.jobs import hindcast
from skylag.tables import Floats, Outlook, Region, cells_at
from skylag.web import asking, payloads

router = APIRouter()


def _entered(expected_ap: str) -> Floats | None:
    """Two values of ap for the two days ahead, as they are asked: `12,80`; None without."""
    if not expected_ap.strip():
        return None
    try:
        return np.array([float(word) for word in expected_ap.split(",")], dtype=np.float64)
    except ValueError:
        raise Refused(
            f"expected_ap={expected_ap}: write two numbers, one for each day ahead, like 12,80",
            name="expected_ap", value=expected_ap, allowed="two numbers from 0 to 400",
        ) from None  # fmt: skip


def _place(made: Outlook, lat: float, lon: float) -> tuple[int, float]:
    """Row of the nearest place and its distance [km]."""
    north = made.lats - lat
    east = ((made.lons - lon + 180.0) % 360.0 - 180.0) * np.cos(np.radians(lat))
    away = np.hypot(north, east) * KM_PER_DEG
    return int(np.argmin(away)), float(away.min())


def _known(archive: Archive, region: str) -> str:
    """The region, where the archive has days of it; Missing elsewhere."""
    there = archive.regions()
    if region not in there:
        raise Missing(
            f"region {region}: the archive has no day of it; it has {', '.join(there) or 'none yet'}",
            what=region, nearest=list(there),
        )  # fmt: skip
    return region


@router.get("/api/outlook/{region}", summary="The day ahead at a place")
def at_place(
    request: Request, region: str, lat: float, lon: float, use: str = "", expected_ap: str = "", most: float = 0.1
) -> Response:
    """Hour by hour for two days: expected delay with ranges, slope quantiles, chances for a use, windows, advice.

    expected_ap  ap entered for the two days ahead, like `12,80` (such an outlook is not kept)
    most         the chance up to which an hour counts as likely to hold
    A place outside the map is refused.
    """
    archive: Archive = request.app.state.archive
    return payloads.reply(ahead(archive, _known(archive, region), lat, lon, use, _entered(expected_ap), most))


def ahead(
    archive: Archive, region: str, lat: float, lon: float, use: str = "", expected_ap: Floats | None = None,
    most: float = 0.1,
) -> dict[str, Any]:  # fmt: skip
    """What the outlook of a kept region tells of a place for a use; one with entered activity is not kept.

    Raises Missing for a region without days, Refused for a place outside its map.
    """
    kept = hindcast.newest(archive, region, expected_ap=expected_ap, keep=False)
    record = archive.day(region, archive.days(region)[0].day)
    return of_place(kept, record.region, lat, lon, use, most, record.origin.simulated)


def of_place(
    kept: Kept, region: Region, lat: float, lon: float, use: str, most: float, simulated: bool
) -> dict[str, Any]:  # fmt: skip
    """What an outlook tells of a place for a use ("" the region's first), as plain facts."""
    lat, lon = asking.place(lat, lon)
    made = kept.outlook
    wanted = uses.find_use(region, use) if use else uses.uses_of(region)[0]
    if not cells_at(region.lats, region.lons, np.array([lat]), np.array([lon]))[2][0]:
        raise Refused(
            f"{lat}, {lon} lies outside the map of {region.name}: nothing can be told there; choose a place inside",
            name="lat, lon", value=f"{lat}, {lon}", allowed="a place inside the map",
        )  # fmt: skip
    place, away_km = _place(made, lat, lon)
    number = [str(name) for name in made.uses].index(wanted.name)
    spans = science.windows(made, place, number, most)
    storm = any(word not in ("untold", "quiet") for word in made.phases)
    advice = outlook_advice.advice(wanted, spans, storm)
    return payloads.outlook_at(kept, place, away_km, number, spans, advice, simulated)


@router.get("/api/outlook/{region}/record", summary="How often outlooks were right")
def track_record(request: Request, region: str, newest: Annotated[int, Query(ge=1, le=120)] = 120) -> Response:
    """Scores of the newest kept outlooks whose days came, beside persistence, recurrence, climatology, the usual.

    newest  so many at most; 1 tells of the last one alone
    """
    archive: Archive = request.app.state.archive
    scores = hindcast.summary(hindcast.track_record(archive, _known(archive, region), newest))
    return payloads.reply(payloads.outlook_record(region, scores))
