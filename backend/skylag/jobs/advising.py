"""What a kept day means for work: brings the archive's maps, flags and lines of sight to `impact`.

One `DayAdvice` per day holds what several questions share (satellites, grid confidence) once it was asked for; `Desk`
keeps the last few.  What takes seconds is kept beside the day in the archive, where it may be thrown away.  Never
changes a day, never judges: `impact` does.
"""

import contextlib
import hashlib
import threading
from collections import OrderedDict
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from datetime import time as clock
from functools import cached_property
from typing import Any
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

import numpy as np
from threadpoolctl import threadpool_limits

from skylag import timescales
from skylag.archive import Archive, DayRecord, SiteStates
from skylag.errors import Missing, NotEnough, Refused, SkylagError
from skylag.impact import (
    at_places,
    correction_grid,
    ground_augmentation,
    satellite_augmentation,
    shapes,
    silence,
    single_frequency,
    sky,
    survey,
)
from skylag.impact.coming import Coming, coming
from skylag.impact.correction_grid import ConfidenceChoices, GridConfidence
from skylag.impact.ground_augmentation import StationChoices, StationDay
from skylag.impact.satellite_augmentation import Availability, ServiceChoices
from skylag.impact.silence import Silences
from skylag.impact.single_frequency import LeftOver
from skylag.impact.sky import Sky
from skylag.impact.survey import Advice, Explanation, Job
from skylag.ionosphere.covariance import plane_km
from skylag.ionosphere.geometry import geodetic
from skylag.jobs.under_way import with_day_before
from skylag.spelling import no_such
from skylag.tables import Bytes, Fields, Flag, Samples, Site, Times

Span = tuple[np.datetime64, np.datetime64]


@dataclass(frozen=True)
class AskedJob:
    """A survey job as a person asks for it, the same words over HTTP and on the command line.

    site        of the region, or places instead of it, as `lat,lon;lat,lon`; shape: what the places mean (points,
                route, area)
    method, baseline_km  as in `survey.Job`; references: stations in use, names of the network's receivers or
                `lat,lon`, with `;` between: for the method network all receivers without, for others the baseline is
                the longest way to the nearest of them
    horizontal_mm, vertical_mm  tolerances at 95 %; hours: local, like 07:00-16:30
    the rest    as in `survey.Job`
    """

    site: str = ""
    places: str = ""
    shape: str = Job.shape
    method: str = Job.method
    baseline_km: float = Job.baseline_km
    references: str = ""
    horizontal_mm: float = Job.horizontal_mm
    vertical_mm: float = Job.vertical_mm
    hours: str = ""
    session_min: float = Job.session_min
    least_min: float = Job.least_min
    mask_deg: float = Job.mask_deg
    least_satellites: int = Job.least_satellites
    most_dilution: float = Job.most_dilution
    fixing_chance: float = Job.fixing_chance


@dataclass(frozen=True)
class AskedService:
    """What the region's satellite-based service is assumed to send, and which of its levels are asked for.

    levels  names with commas between, the usual ones without; systems: letters of the satellites augmented; the rest
    as in `satellite_augmentation.ServiceChoices`
    """

    levels: str = ""
    systems: str = "G"
    lowest_deg: float = 5.0
    correction_m: float = 3.0
    noise_m: float = 0.36
    usual_grid_m: float = 3.0

    @property
    def choices(self) -> ServiceChoices:
        """Raises Refused where one is outside its range."""
        return ServiceChoices(self.systems, self.lowest_deg, self.correction_m, self.noise_m, self.usual_grid_m)

    @property
    def names(self) -> tuple[str, ...]:
        """Of the levels."""
        found = tuple(dict.fromkeys(part.strip() for part in self.levels.split(",") if part.strip()))
        return found or satellite_augmentation.USUAL_LEVELS


class DayAdvice:
    """One kept day and what follows from it for work.  Safe to share between threads."""

    def __init__(self, archive: Archive, record: DayRecord) -> None:
        self._archive = archive
        self.record = record
        self._lock = threading.RLock()
        self._sky: Sky | None = None
        self._grid: GridConfidence | None = None

    @cached_property
    def fields(self) -> Fields:
        """The maps of the day."""
        head = self.record.head
        return self._archive.fields(head.region, head.day, version=head.version)

    @cached_property
    def flags(self) -> tuple[Flag, ...]:
        """The flags of the day."""
        head = self.record.head
        return self._archive.flags(head.region, head.day, head.version)

    @property
    def silent(self) -> Silences:
        """Which receivers were silent when."""
        return silence.of_facts(self.record.origin.counts, self.record.receivers)

    @property
    def shell_height_m(self) -> float:
        """Of the region's maps."""
        return self.record.region.shell_height_km * 1000.0

    @property
    def sky(self) -> Sky:
        """The satellites that the network tracked, minute by minute.  Raises NotEnough where it tracked none."""
        with self._lock:
            if self._sky is None:
                self._fill(with_grid=False)
            assert self._sky is not None
            return self._sky

    @property
    def grid(self) -> GridConfidence:
        """Confidence at the correction grid at the epochs of the maps; some seconds of work, done once and kept."""
        with self._lock:
            if self._grid is None:
                self._fill(with_grid=True)
            assert self._grid is not None
            return self._grid

    def _fill(self, with_grid: bool) -> None:
        """Take the sky and the grid from beside the day, or make them and keep them there."""
        head, mark = self.record.head, _mark()
        there = self._archive.outlooks.hours(head.region, str(head.day), head.version, mark)
        if there is None:
            samples = self._archive.samples(head.region, head.day, head.version)
            if not with_grid:
                self._sky = _rounded(_sky_of(samples, head.day))
                return
            there = _prepared(samples, self.record.times, head.day)
            with contextlib.suppress(SkylagError):  # it can be made again
                self._archive.outlooks.keep_hours(head.region, str(head.day), head.version, mark, there)
        self._sky, self._grid = _sky_from(there), _grid_from(there, self.record.times)

    def site_states(self) -> SiteStates:
        """States of the sites in force: as kept where a site is where it was, from the kept maps for the others."""
        head, sites = self.record.head, self.record.region.sites
        kept = self._archive.site_states(head.region, head.day, head.version)
        if sites == kept.sites:
            return kept
        codes, reasons = at_places.in_force(
            sites, kept.sites, kept.codes, kept.reasons, self.fields, self.flags, self.record.region.thresholds,
            (self.silent,),
        )  # fmt: skip
        return SiteStates(kept.times, sites, codes, reasons)

    def states_at(self, site: Site) -> Bytes:
        """States (T,) of a place: as kept where it is a site of the day, else from the kept maps and flags."""
        states = self.site_states()
        for number, one in enumerate(states.sites):
            if (one.lat, one.lon) == (site.lat, site.lon):
                return states.codes[:, number]
        limits = self.record.region.thresholds
        return at_places.codes([site], self.fields, self.flags, limits, (self.silent,))[:, 0]

    def site(self, name: str) -> Site:
        """A site of the region by name.  Raises Missing where it has no such site."""
        for one in self.record.region.sites:
            if one.name == name:
                return one
        raise no_such(self.record.region.name, "site", name, [one.name for one in self.record.region.sites])

    def job(self, asked: AskedJob) -> Job:
        """The job that is asked for, named after what gave its place.

        Raises Missing for a site or receiver that is not there, Refused for the rest: also a site with places.
        """
        elsewhere = bool(asked.places.strip())
        if not elsewhere and not asked.site:
            raise Refused(
                "no place is named; name a site of the region, or places like -40.1,146.2;-40.3,146.5", name="site",
                value="", allowed="a site, or places",
            )  # fmt: skip
        if elsewhere and asked.site:
            raise Refused(
                "a site and places are both named, and a job is at one or the other; leave out the site for a job at "
                "the places, or the places for one at the site",
                name="site", value=asked.site, allowed="a site, or places",
            )  # fmt: skip
        record = self.record
        if elsewhere:
            points = places_in(asked.places, "places")
        else:
            site = self.site(asked.site)
            points = ((site.lat, site.lon),)
        node = (float(record.lats[0]), float(record.lons[0]))
        places = shapes.places_of(points, asked.shape, record.region.step_deg, node)
        references = self._references(asked.references)
        baseline_km = asked.baseline_km
        if references and asked.method != "network":
            lat, lon = np.array(references, dtype=np.float64).T
            ways = [np.hypot(*plane_km(lat, lon, place)).min() for place in places]
            baseline_km = float(np.round(max(ways), 1)) or 0.1
        elif asked.method == "network":
            references = references or tuple(self.receiver_places())
        return Job(
            name_of(points, asked.shape) if elsewhere else asked.site, places, asked.method, baseline_km, references,
            asked.horizontal_mm, asked.vertical_mm, self.local_hours(asked.hours), asked.session_min, asked.least_min,
            asked.mask_deg, asked.least_satellites, asked.most_dilution, asked.fixing_chance, asked.shape,
        )  # fmt: skip

    def _references(self, text: str) -> tuple[tuple[float, float], ...]:
        """Stations by receiver name or place."""
        parts = _parts(text, "references")
        named = [part for part in parts if "," not in part]
        names = [one.name.upper() for one in self.record.receivers]
        known = dict(zip(names, self.receiver_places(), strict=True))
        for name in named:
            if name.upper() not in known:
                raise no_such(self.record.region.name, "receiver", name, list(known))
        return tuple(
            known[part.upper()] if part in named else places_in(part, "references")[0] for part in parts
        )

    def receiver_places(self) -> list[tuple[float, float]]:
        """Latitude and longitude of the network's receivers [deg]."""
        places = np.array([receiver.position_m for receiver in self.record.receivers], dtype=np.float64)
        lat, lon, _ = geodetic(places)
        return list(zip(lat.tolist(), lon.tolist(), strict=True))

    @property
    def known_sky(self) -> Sky | None:
        """The same as `sky`, None where the network tracked no satellite."""
        try:
            return self.sky
        except NotEnough:
            return None

    def survey(self, job: Job, beside: "Sequence[DayAdvice]" = ()) -> Advice:
        """A survey job through the day, and through days beside it that its hours reach into.

        Without satellites the geometry of the nominal constellation is taken, and said.
        """
        days = sorted((self, *beside), key=lambda one: one.record.head.day)
        days = [one for one in days if _same_grid(one.record, self.record)]
        fields = _joined_fields([one.fields for one in days])
        skies = [one.known_sky for one in days]
        whole = None if any(one is None for one in skies) else _joined_sky([one for one in skies if one is not None])
        limits = self.record.region.thresholds
        places = [Site(job.name, lat, lon) for lat, lon in job.places]
        flags, silent = [flag for one in days for flag in one.flags], [one.silent for one in days]
        judged = at_places.codes(places, fields, flags, limits, silent)
        doubts = [at_places.doubts(place, fields.times, flags, silent) for place in places]
        return survey.advise(job, fields, whole, limits, self.shell_height_m, judged, doubts)

    def explain(self, job: Job, time: np.datetime64) -> Explanation:
        """Was it the ionosphere, at the job's place and a time."""
        return survey.was_it_the_ionosphere(self.survey(job), self.flags, time)

    def approaches(
        self, sites: Sequence[Site], choices: ServiceChoices | None = None,
        levels: Sequence[str] = satellite_augmentation.USUAL_LEVELS,
    ) -> Availability:  # fmt: skip
        """Availability of approaches at sites."""
        return satellite_augmentation.availability(self.grid, self.sky, sites, choices, levels)

    def station(self, site: Site, choices: StationChoices | None = None) -> StationDay:
        """The slope at an aerodrome against its station's assumptions."""
        limits = self.record.region.thresholds
        return ground_augmentation.station_day(
            site, self.fields, self.flags, choices, self.shell_height_m, limits, (self.silent,)
        )

    def coming(self, site: Site, now: np.datetime64) -> tuple[Coming, ...]:
        """The front that reaches a site next after a GPS time, if any: of this day, or seen late the day before."""
        head = self.record.head
        return coming(with_day_before(self._archive, head.region, head.day, self.flags, now), (site,), now)

    def broadcast_model(self, site: Site, mask_deg: float = 10.0) -> LeftOver:
        """What the broadcast model leaves.  Raises Missing where the day knows no coefficients."""
        told = self.record.origin.counts.get("broadcast_ionosphere", {})
        single_frequency.coefficients_of(told)
        return single_frequency.left_over(site, self.fields, self.sky, told, mask_deg, self.shell_height_m)

    def local_hours(self, text: str) -> tuple[Span, ...]:
        """Working hours like 07:30-16:00 of the region's local date as a span of GPS time; none for empty text.

        An end at or before the start is of the next date.  Raises Refused where they cannot be read.
        """
        return (local_span(text, str(self.record.head.day), self.record.region.timezone),) if text.strip() else ()


def _joined_fields(parts: Sequence[Fields]) -> Fields:
    """Maps of days on one grid, one after another."""
    if len(parts) == 1:
        return parts[0]
    layers = {name: np.concatenate([getattr(one, name) for one in parts]) for name in Fields.LAYERS}
    return Fields(np.concatenate([one.times for one in parts]), parts[0].lats, parts[0].lons, **layers)


def _same_grid(one: DayRecord, other: DayRecord) -> bool:
    return np.array_equal(one.lats, other.lats) and np.array_equal(one.lons, other.lons)


def _joined_sky(parts: Sequence[Sky]) -> Sky:
    """Satellites of days, one after another."""
    if len(parts) == 1:
        return parts[0]
    names = np.unique(np.concatenate([one.satellites for one in parts]))
    times = np.concatenate([one.times for one in parts])
    position = np.full((len(times), len(names), 3), np.nan)
    first = 0
    for one in parts:
        last = first + len(one.times)
        position[first:last, np.searchsorted(names, one.satellites)] = one.position_m
        first = last
    return Sky(times, names, position, parts[0].source)


# What is kept beside a day; another number where the meaning of the arrays, or how they are made, changes.
_KEPT_FORM = 1


def _mark() -> str:
    """Names what is kept: it depends on the choices."""
    choices = hashlib.sha256(repr(ConfidenceChoices()).encode()).hexdigest()[:16]
    return f"correction grid and sky {_KEPT_FORM} {choices}"


def _prepared(samples: Samples, times: Times, day: np.datetime64) -> dict[str, Any]:
    """Sky and grid as arrays to keep: positions to some metres, delays to some millimetres."""
    found = _sky_of(samples, day)
    with threadpool_limits(1):
        grid = correction_grid.confidence(samples, times)
    return {
        "sky_minutes": found.times.astype(np.int64), "sky_satellites": found.satellites.astype("S8"),
        "sky_position_m": found.position_m.astype(np.float32), "sky_source": np.array([found.source.encode()]),
        "lat": grid.lat, "lon": grid.lon, "delay_m": grid.delay_m.astype(np.float32),
        "sigma_m": grid.sigma_m.astype(np.float32), "step": grid.step.astype(np.uint8), "irregular": grid.irregular,
        "rays": grid.rays.astype(np.uint16),
    }  # fmt: skip


def _sky_from(there: dict[str, Any]) -> Sky:
    return Sky(
        there["sky_minutes"].astype("datetime64[ns]"), there["sky_satellites"].astype(np.str_),
        there["sky_position_m"].astype(np.float64), bytes(there["sky_source"][0]).decode(),
    )  # fmt: skip


def _rounded(made: Sky) -> Sky:
    """The sky as it would be kept, so that the first answer is the same as all others."""
    return Sky(made.times, made.satellites, made.position_m.astype(np.float32).astype(np.float64), made.source)


def _grid_from(there: dict[str, Any], times: Times) -> GridConfidence:
    return GridConfidence(
        times, there["lat"].astype(np.int64), there["lon"].astype(np.int64), there["delay_m"].astype(np.float64),
        there["sigma_m"].astype(np.float64), there["step"].astype(np.int64), there["irregular"],
        there["rays"].astype(np.int64),
    )  # fmt: skip


def prepare(archive: Archive, region: str, day: str, version: int | None = None) -> bool:
    """Make and keep what questions about approaches share, before anybody asks; False where no site is an aerodrome.

    Raises NotEnough where the day has no line of sight high enough.
    """
    record = archive.day(region, day, version)
    if not any(site.kind == "aerodrome" for site in record.region.sites):
        return False
    return len(DayAdvice(archive, record).grid.lat) > 0


def _sky_of(samples: Samples, day: np.datetime64) -> Sky:
    minutes = day.astype("datetime64[ns]") + np.arange(1440) * np.timedelta64(60 * 10**9, "ns")
    return sky.from_rays(samples.rays, minutes)


def local_span(text: str, day: str, timezone: str) -> Span:
    """Hours like 07:30-16:00 of a local date, as GPS times.  Raises Refused where hours or zone cannot be read."""
    try:
        zone = ZoneInfo(timezone)
        start, end = (clock.fromisoformat(part.strip()) for part in text.split("-"))
        date = datetime.fromisoformat(day).date()
        first, last = (datetime.combine(date, moment, zone) for moment in (start, end))
    except (ValueError, KeyError, ZoneInfoNotFoundError) as cause:
        raise Refused(
            f"hours {text} in {timezone}: write them like 07:30-16:00, and the region's timezone like Etc/UTC",
            name="hours", value=text, allowed="HH:MM-HH:MM",
        ) from cause  # fmt: skip
    if last <= first:
        last += timedelta(days=1)
    utc = [np.datetime64(int(moment.timestamp()) * 10**9, "ns") for moment in (first, last)]
    gps = timescales.utc_to_gps(np.array(utc))
    return np.datetime64(gps[0], "ns"), np.datetime64(gps[1], "ns")


def _parts(text: str, name: str) -> list[str]:
    """What stands between semicolons.  Raises Refused, before it is read, for more than can be looked at."""
    parts = [part.strip() for part in text.split(";") if part.strip()]
    if len(parts) > shapes.MOST_PLACES:
        raise Refused(
            f"{name}: there are {len(parts)}, at most {shapes.MOST_PLACES} can be looked at; ask in parts",
            name=name, value=len(parts), allowed=shapes.MOST_PLACES,
        )  # fmt: skip
    return parts


def places_in(text: str, name: str) -> tuple[tuple[float, float], ...]:
    """Places written as `lat,lon;lat,lon`.  Raises Refused for too many, or one that cannot be read or lies nowhere."""
    found = []
    for part in _parts(text, name):
        try:
            lat, lon = (float(word) for word in part.split(","))
        except ValueError:
            lat = lon = float("nan")
        if not (-90.0 <= lat <= 90.0 and -180.0 <= lon <= 360.0):
            raise Refused(
                f"{name}: {part!r} is no place; write latitude and longitude in degrees like -40.1,146.2, "
                "and ; between places",
                name=name, value=part, allowed="-90 to 90, -180 to 360",
            )  # fmt: skip
        found.append((lat, lon))
    return tuple(found)


def name_of(points: Sequence[tuple[float, float]], shape: str = "points") -> str:
    """What to call places that are no site."""
    lat, lon = points[0]
    first = f"{lat:g}, {lon:g}"
    if len(points) == 1:
        return first
    if shape == "points":
        return f"{first} and {len(points) - 1} more"
    return f"{shape} of {len(points)} points from {first}"


class Desk:
    """The last few days asked about."""

    def __init__(self, archive: Archive, most: int = 6) -> None:
        self._archive, self._most = archive, most
        self._lock = threading.Lock()
        self._days: OrderedDict[tuple[str, str, int], DayAdvice] = OrderedDict()

    def day(self, region: str, day: str, version: int | None = None) -> DayAdvice:
        """A day's advice, the shown version without a number.  Raises Missing where the archive has no such day."""
        record = self._archive.day(region, day, version)
        key = (record.head.region, str(record.head.day), record.head.version)
        with self._lock:
            if key not in self._days:
                self._days[key] = DayAdvice(self._archive, record)
            self._days[key].record = record  # the sites may have changed
            self._days.move_to_end(key)
            while len(self._days) > self._most:
                self._days.popitem(last=False)
            return self._days[key]

    def survey(self, day: DayAdvice, job: Job) -> Advice:
        """A survey job on its day; where its hours reach into the days beside it, with those that are kept."""
        beside = []
        own = day.record.head.day
        for other in (own - np.timedelta64(1, "D"), own + np.timedelta64(1, "D")):
            begin = other.astype("datetime64[ns]")
            if any(start < begin + np.timedelta64(1, "D") and end > begin for start, end in job.spans):
                with contextlib.suppress(Missing):
                    beside.append(self.day(day.record.head.region, str(other)))
        return day.survey(job, beside)


