"""What a kept day means for work: brings the archive's maps, flags and lines of sight to `impact`.

One `DayAdvice` per day holds what several questions share (satellites, grid confidence) once it was asked for; `Desk`
keeps the last few.  Never changes the archive, never judges: `impact` does.
"""

import contextlib
import threading
from collections import OrderedDict
from collections.abc import Sequence
from datetime import datetime, timedelta
from datetime import time as clock
from functools import cached_property
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

import numpy as np
from threadpoolctl import threadpool_limits

from skylag import timescales
from skylag.archive import Archive, DayRecord
from skylag.errors import Missing, NotEnough, Refused
from skylag.impact import correction_grid, ground_augmentation, satellite_augmentation, single_frequency, sky, survey
from skylag.impact.correction_grid import GridConfidence
from skylag.impact.ground_augmentation import StationChoices, StationDay
from skylag.impact.satellite_augmentation import Availability, ServiceChoices
from skylag.impact.single_frequency import LeftOver
from skylag.impact.sky import Sky
from skylag.impact.survey import Advice, Explanation, Job
from skylag.ionosphere.geometry import geodetic
from skylag.tables import Fields, Flag, Samples, Site

Span = tuple[np.datetime64, np.datetime64]


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
    def shell_height_m(self) -> float:
        """Of the region's maps."""
        return self.record.region.shell_height_km * 1000.0

    def _samples(self) -> Samples:
        head = self.record.head
        return self._archive.samples(head.region, head.day, head.version)

    @property
    def sky(self) -> Sky:
        """The satellites that the network tracked, minute by minute.  Raises NotEnough where it tracked none."""
        with self._lock:
            if self._sky is None:
                self._sky = _sky_of(self._samples(), self.record.head.day)
            return self._sky

    @property
    def grid(self) -> GridConfidence:
        """Confidence at the correction grid at the epochs of the maps; some seconds of work, done once."""
        with self._lock:
            if self._grid is None:
                samples = self._samples()
                if self._sky is None:
                    self._sky = _sky_of(samples, self.record.head.day)
                with threadpool_limits(1):
                    self._grid = correction_grid.confidence(samples, self.record.times)
            return self._grid

    def site(self, name: str) -> Site:
        """A site of the region by name.  Raises Missing where it has no such site."""
        for one in self.record.region.sites:
            if one.name == name:
                return one
        known = [one.name for one in self.record.region.sites]
        raise Missing(
            f"{self.record.region.name} has no site {name}; it has {', '.join(known) or 'none'}", what=name,
            nearest=known,
        )  # fmt: skip

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

        Without satellites a usual geometry is taken, and said.
        """
        days = sorted((self, *beside), key=lambda one: one.record.head.day)
        days = [one for one in days if _same_grid(one.record, self.record)]
        fields = _joined_fields([one.fields for one in days])
        skies = [one.known_sky for one in days]
        whole = None if any(one is None for one in skies) else _joined_sky([one for one in skies if one is not None])
        return survey.advise(job, fields, whole, self.record.region.thresholds, self.shell_height_m)

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
        return ground_augmentation.station_day(site, self.fields, self.flags, choices, self.shell_height_m)

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


