"""Routes about maps: fields, one place, one day at a place, lines of sight, coast.  A route parses, asks, encodes."""

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Annotated

import numpy as np
from fastapi import APIRouter, Query, Request
from fastapi.responses import Response

from skylag import timescales
from skylag.archive import Archive, DayRecord, slants
from skylag.errors import Missing
from skylag.formats import coast, contours, delimited, ionex, netcdf
from skylag.impact import at_places, silence
from skylag.impact.states import carried, honest_state
from skylag.ionosphere.interpolation import at_geocentric_rows
from skylag.tables import Fields, Flag, Site
from skylag.web import asking, nearby, payloads, sentences, witnesses
from skylag.web.frames import Answers

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
    shown = archive.version_of(region, asking.day(day), version)
    answers: Answers = request.app.state.answers
    return answers.answer(
        request, (region, day, shown, str(first), str(last), names),
        lambda: payloads.reply(payloads.maps(archive.fields(region, day, first, last, shown), names)),
    )  # fmt: skip


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
    flags = archive.flags(region, record.head.day, record.head.version)
    near = nearby.active_near(flags, lat, lon, epoch)
    (doubt,) = _doubts(record, lat, lon, cell, flags)
    return payloads.reply(payloads.reading(cell, record, lat, lon, near, doubt))


def _doubts(record: DayRecord, lat: float, lon: float, cell: Fields, flags: Sequence[Flag]) -> list[str]:
    """Why nothing may hold at a place at the times of a cell, whatever the cell says; "" where it may."""
    silent = silence.of_facts(record.origin.counts, record.receivers)
    return at_places.doubts(Site("", lat, lon), cell.times, flags, (silent,))


@router.get("/api/days/{region}/{day}/series", summary="The day at a place")
def series(
    request: Request, region: str, day: str, lat: float, lon: float, version: int | None = None
) -> Response:
    """Delay, slope and state through the day at the cell that holds a place."""
    archive: Archive = request.app.state.archive
    lat, lon = asking.place(lat, lon)
    record = archive.day(region, asking.day(day), version)
    cell = archive.series(region, record.head.day, lat, lon, record.head.version)
    flags = archive.flags(region, record.head.day, record.head.version)
    near = [nearby.active_near(flags, lat, lon, time) for time in cell.times]
    doubts = _doubts(record, lat, lon, cell, flags)
    return payloads.reply(payloads.series(cell, record, near, record.cell_of(lat, lon) is not None, doubts))


@router.get("/api/days/{region}/{day}/witnesses", summary="Lines of sight behind what is said of a place")
def witnesses_near(
    request: Request, region: str, day: str, lat: float, lon: float, time: str, version: int | None = None
) -> Response:
    """Curves of the lines of sight that pass near a place within three quarters of an hour of a UTC instant."""
    archive: Archive = request.app.state.archive
    lat, lon = asking.place(lat, lon)
    moment = asking.instant(time, "time")
    record = archive.day(region, asking.day(day), version)
    half = np.timedelta64(45, "m")
    samples = slants.read(archive.slant_folder, record.slant_sha256, moment - half, moment + half)
    return payloads.reply(payloads.witnesses(witnesses.near(samples, lat, lon)))


@router.get("/api/days/{region}/{day}/field.nc", summary="Maps of a day as NetCDF")
def field_netcdf(request: Request, region: str, day: str, version: int | None = None) -> Response:
    """All maps of the day with CF conventions."""
    archive: Archive = request.app.state.archive
    record = archive.day(region, asking.day(day), version)
    held = archive.fields(region, record.head.day, None, None, record.head.version)
    simulated, provisional = record.origin.simulated, record.head.provisional
    with TemporaryDirectory() as folder:
        path = Path(folder) / "field.nc"
        held = replace(held, state=honest_state(held))
        netcdf.write(
            held, record.region, path, simulated=simulated, provisional=provisional,
            notices=sentences.notices(simulated, provisional),
        )  # fmt: skip
        data = path.read_bytes()
    return payloads.file(data, f"{region}-{day}-field.nc", "application/x-netcdf")


@router.get("/api/days/{region}/{day}/maps.inx", summary="Maps of a day as IONEX")
def maps_ionex(request: Request, region: str, day: str, version: int | None = None) -> Response:
    """Maps of content and its uncertainty, every quarter of an hour, with the day's biases, as IONEX 1.0.

    Latitudes are geocentric, as the format counts them: values lie between two rows of the map.  Where no line of sight
    carries a cell of either there is the format's 9999.
    """
    archive: Archive = request.app.state.archive
    record = archive.day(region, asking.day(day), version)
    held = archive.fields(region, record.head.day, None, None, record.head.version)
    step_s = float(np.min(np.diff(held.times)) / np.timedelta64(1, "s")) if len(held.times) > 1 else 900.0
    every = slice(None, None, max(1, round(900.0 / step_s)))
    thin = replace(
        held, times=held.times[every], **{name: getattr(held, name)[every] for name in Fields.LAYERS}
    )  # fmt: skip
    about = sentences.description(record.region.name, record.origin.simulated, record.head.provisional)
    saved_at = np.datetime64(timescales.utc_to_gps(record.head.saved_at.astype("datetime64[ns]")).item(), "ns")
    biases = archive.biases(region, record.head.day, record.head.version)
    text = ionex.write(
        at_geocentric_rows(carried(thin)), saved_at, record.region.shell_height_km, description=about, biases=biases,
        comment=sentences.GEOCENTRIC,
    )  # fmt: skip
    return payloads.file(text.encode("ascii", "replace"), f"{region}-{day}.inx", "text/plain")


@router.get("/api/days/{region}/{day}/map.csv", summary="A map as CSV")
def map_csv(request: Request, region: str, day: str, time: str, version: int | None = None) -> Response:
    """Delay, slope, their uncertainty and the state of every cell of the map nearest to a UTC instant."""
    held, record = _one_map(request, region, day, time, version)
    return payloads.file(delimited.maps_csv(carried(held)).encode(), f"{region}-{record.head.day}-map.csv", "text/csv")


@router.get("/api/days/{region}/{day}/lines.geojson", summary="Lines of equal delay of a map as GeoJSON")
def delay_lines(
    request: Request, region: str, day: str, time: str, step_m: float = 0.5, version: int | None = None
) -> Response:
    """Lines every `step_m` metres of vertical delay on the map nearest to a UTC instant, where it sees something."""
    held, record = _one_map(request, region, day, time, version)
    about = sentences.about(record.origin.simulated, record.head.provisional)
    text = contours.to_geojson(held, 0, step_m, about, record.region.thresholds.unseen_sigma_m)
    return payloads.file(text.encode(), f"{region}-{record.head.day}-lines.geojson", "application/geo+json")


def _one_map(request: Request, region: str, day: str, time: str, version: int | None) -> tuple[Fields, DayRecord]:
    """The map nearest to a UTC instant, and the day it is of."""
    archive: Archive = request.app.state.archive
    moment = asking.instant(time, "time")
    record = archive.day(region, asking.day(day), version)
    epoch = _nearest(record, moment)
    after = epoch + np.timedelta64(1, "ns")
    return archive.fields(region, record.head.day, epoch, after, record.head.version), record


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
