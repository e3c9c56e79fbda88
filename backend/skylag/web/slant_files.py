"""Slant data to carry away: of a whole day, or of the lines of sight behind what is said of one place and time."""

from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
from fastapi import APIRouter, Request
from fastapi.responses import Response

from skylag.archive import Archive, slants
from skylag.errors import Refused
from skylag.formats import delimited
from skylag.web import asking, payloads
from skylag.web.nearby import great_circle_km

router = APIRouter()
MOST_MINUTES, MOST_KM = 180.0, 1000.0
MOST_ROWS = 50_000  # of CSV at once


@router.get("/api/days/{region}/{day}/slant.parquet", summary="Slant data of a day as Parquet")
def whole_day(request: Request, region: str, day: str, version: int | None = None) -> Response:
    """One row per line of sight, with the columns of the result file of the same name."""
    archive: Archive = request.app.state.archive
    record = archive.day(region, asking.day(day), version)
    samples = slants.read(archive.slant_folder, record.slant_sha256)
    with TemporaryDirectory() as folder:
        path = Path(folder) / "slant.parquet"
        delimited.write_slants(samples, path)
        data = path.read_bytes()
    return payloads.file(data, f"{region}-{day}-slant.parquet", "application/vnd.apache.parquet")


@router.get("/api/days/{region}/{day}/slant.csv", summary="Slant data near a place")
def near_a_place(
    request: Request, region: str, day: str, lat: float, lon: float, time: str,
    reach_km: float = 100.0, minutes: float = 30.0, version: int | None = None,
) -> Response:  # fmt: skip
    """Every line of sight that pierces the shell near a place and a UTC instant, at full rate, one row each.

    At most 50,000 rows at once; of more, a smaller reach or fewer minutes are to be asked, or slant.parquet.
    """
    archive: Archive = request.app.state.archive
    lat, lon = asking.place(lat, lon)
    moment = asking.instant(time, "time")
    for name, value, most in (("reach_km", reach_km, MOST_KM), ("minutes", minutes, MOST_MINUTES)):
        if not 0.0 < value <= most:
            raise Refused(f"{name} is to be above 0 and at most {most:g}, got {value:g}",
                          name=name, value=value, allowed=f"0 to {most:g}")  # fmt: skip
    record = archive.day(region, asking.day(day), version)
    half = np.timedelta64(round(minutes * 60.0), "s")
    samples = slants.read(archive.slant_folder, record.slant_sha256, moment - half, moment + half)
    rays = samples.rays
    near = great_circle_km(rays.pierce_lat, rays.pierce_lon, lat, lon) <= reach_km
    near &= np.abs(rays.time - moment) <= half
    rows = int(near.sum())
    if rows > MOST_ROWS:
        raise Refused(
            f"{rows} lines of sight lie within {reach_km:g} km and {minutes:g} minutes, at most {MOST_ROWS} are "
            "written as CSV at once; ask for a smaller reach_km or fewer minutes, or take the whole day as "
            "slant.parquet",
            name="rows", value=rows, allowed=MOST_ROWS,
        )  # fmt: skip
    name = f"{region}-{day}-{str(moment)[11:16].replace(':', '')}-slant.csv"
    return payloads.file(delimited.slants_csv(samples, near).encode(), name, "text/csv")
