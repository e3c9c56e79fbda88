"""Approaches with vertical guidance by satellite-based augmentation: protection levels, availability, outages.

For each aerodrome and minute: the satellites then in view, their variances by the grid confidence of
`correction_grid`, protection levels by `protection`, against the published alert limits.  What no grid point or no data
speaks for is not available, and an outage says why.  A planning aid, not for navigation: what a real service broadcasts
(clock and orbit confidence, its own grid) is assumed, and every assumption is printed.
"""

import itertools
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from skylag.constants import SBAS_EARTH_RADIUS_M, SBAS_SHELL_HEIGHT_M
from skylag.errors import NotEnough, Refused
from skylag.impact import protection
from skylag.impact.correction_grid import (
    HIGHEST_STEP,
    NOT_MONITORED,
    Corners,
    GridConfidence,
    Lattice,
    step_of,
    variance_of,
)
from skylag.impact.sky import Sky
from skylag.ionosphere import geometry
from skylag.tables import Bools, Floats, Ints, Site, Times

CAUTION = (
    "Planning aid, not for navigation: notices to aviation, the service provider's own status, local regulation and "
    "licensed professionals decide."
)


@dataclass(frozen=True)
class ServiceLevel:
    """An operation with its alert limits [m]; vertical is infinite where none is set; grid: needs grid delays."""

    name: str
    horizontal_m: float
    vertical_m: float
    grid: bool
    source: str = "ICAO Annex 10 volume I, table 3.7.2.4-1"


# Category I lists 15 to 10 m; the stricter end is used.
SERVICE_LEVELS = (
    ServiceLevel("En route", 3700.0, np.inf, False),
    ServiceLevel("Terminal", 1850.0, np.inf, False),
    ServiceLevel("NPA", 556.0, np.inf, False),
    ServiceLevel("APV-I", 40.0, 50.0, True),
    ServiceLevel("LPV-200", 40.0, 35.0, True),
    ServiceLevel("APV-II", 40.0, 20.0, True),
    ServiceLevel("CAT-I", 40.0, 10.0, True),
)
LEVEL = {level.name: level for level in SERVICE_LEVELS}
USUAL_LEVELS = ("NPA", "APV-I", "LPV-200")

# Vertical delay sigma [m] a receiver assumes without a grid, by absolute geomagnetic latitude up to 20, up to 55, above
# (RTCA DO-229, appendix A; from memory).
WITHOUT_GRID_M = ((20.0, 9.0), (55.0, 4.5), (90.0, 6.0))
_SYSTEMS = "GRECJ"  # letters of RINEX
# Pole of the centred dipole of 2020, from IGRF coefficients.
_POLE_LAT, _POLE_LON = 80.589, -72.680


@dataclass(frozen=True)
class ServiceChoices:
    """What the region's real service and the aircraft are assumed to do; printed with every result.

    systems          satellites augmented (letters)
    mask_deg         satellites below are not used (RTCA DO-229: 5 degrees)
    correction_m     bound of clock and orbit corrections [m, 99.9 %], one of `protection.CORRECTION_M`
    noise_m          receiver noise and divergence (0.36 m: accuracy designator A at minimum signal, RTCA DO-229)
    usual_grid_m     confidence of grid delays on a usual day [m, 99.9 %]: an outage that would remain with it is called
                     geometry (our choice)
    """

    systems: str = "G"
    mask_deg: float = 5.0
    correction_m: float = 3.0
    noise_m: float = 0.36
    usual_grid_m: float = 3.0

    def __post_init__(self) -> None:
        if self.correction_m not in protection.CORRECTION_M:
            raise Refused(
                f"correction_m: {self.correction_m:g} m is no step of the table; choose from "
                + ", ".join(f"{step:g}" for step in protection.CORRECTION_M),
                name="correction_m", value=str(self.correction_m), allowed=protection.CORRECTION_M,
            )  # fmt: skip
        for name, low, high in (("mask_deg", 5.0, 40.0), ("noise_m", 0.05, 5.0), ("usual_grid_m", 0.3, 45.0)):
            value = getattr(self, name)
            if not low <= value <= high:
                raise Refused(
                    f"{name}: {value:g} is outside {low:g} to {high:g}", name=name, value=str(value),
                    allowed=f"{low:g} to {high:g}",
                )  # fmt: skip
        if not self.systems or set(self.systems) - set(_SYSTEMS):
            raise Refused(
                f"systems: {self.systems!r} must be letters of {_SYSTEMS}, like G or GE", name="systems",
                value=self.systems, allowed=_SYSTEMS,
            )  # fmt: skip

    @property
    def correction_m2(self) -> float:
        """Variance of clock and orbit corrections by the table."""
        return protection.CORRECTION_VARIANCE_M2[protection.CORRECTION_M.index(self.correction_m)]


@dataclass(frozen=True)
class Outage:
    """A span in which a level is not available at a site: start <= time < end, GPS time.

    cause     "ionosphere", "geometry" or "unseen"; why: the sentence, with satellites and grid points
    highest   the worst vertical and horizontal protection level inside [m], infinite where there was none
    """

    site: str
    level: str
    start: np.datetime64
    end: np.datetime64
    cause: str
    why: str
    highest: tuple[float, float]


@dataclass(frozen=True)
class Availability:
    """Protection levels and availability of a day.

    vertical_m, horizontal_m, route_m  (sites, T) protection levels, NaN where there is no position
    in_view, used                      (sites, T) satellites above the mask, and with a grid delay
    available                          (levels, sites, T); share (levels, sites)
    """

    times: Times
    sites: tuple[Site, ...]
    levels: tuple[ServiceLevel, ...]
    vertical_m: Floats
    horizontal_m: Floats
    route_m: Floats
    in_view: Ints
    used: Ints
    available: Bools
    outages: tuple[Outage, ...]
    assumptions: tuple[str, ...]
    caution: str = CAUTION

    @property
    def share(self) -> Floats:
        """Share of the minutes in which a level is available (levels, sites)."""
        return np.asarray(self.available.mean(axis=2))

    def of_site(self, number: int) -> "Availability":
        """The same of one of its sites alone."""
        one = slice(number, number + 1)
        site = self.sites[number]
        return replace(
            self, sites=(site,), vertical_m=self.vertical_m[one], horizontal_m=self.horizontal_m[one],
            route_m=self.route_m[one], in_view=self.in_view[one], used=self.used[one],
            available=self.available[:, one], outages=tuple(out for out in self.outages if out.site == site.name),
        )  # fmt: skip


def availability(
    grid: GridConfidence,
    sky: Sky,
    sites: Sequence[Site],
    choices: ServiceChoices | None = None,
    levels: Sequence[str] = USUAL_LEVELS,
) -> Availability:
    """Availability at each site and time of the sky, for the levels named.

    Raises Refused for an unknown level, NotEnough without sites.
    """
    choices = choices or ServiceChoices()
    unknown = [name for name in levels if name not in LEVEL]
    if unknown:
        raise Refused(
            f"service level {unknown[0]} is not known; choose from {', '.join(LEVEL)}",
            name="level", value=unknown[0], allowed=tuple(LEVEL),
        )  # fmt: skip
    if not sites:
        raise NotEnough("availability needs a site; add [[site]] to the region file", had=0, needed=1, where="sites")
    wanted = tuple(LEVEL[name] for name in levels)
    sky = sky.of(choices.systems)
    lattice = Lattice(grid.lat, grid.lon)
    found = [_at_site(grid, lattice, sky, site, choices) for site in sites]
    vertical, horizontal, route = (np.stack([getattr(one, name) for one in found])
                                   for name in ("vertical_m", "horizontal_m", "route_m"))  # fmt: skip
    available = np.stack([_within(level, vertical, horizontal, route) for level in wanted])
    outages = [
        outage
        for number, one in enumerate(found)
        for level, good in zip(wanted, available[:, number], strict=True)
        for outage in _outages(level, good, one, grid, sky, choices)
    ]
    return Availability(
        sky.times, tuple(sites), wanted, vertical, horizontal, route, np.stack([one.in_view for one in found]),
        np.stack([one.used for one in found]), available, tuple(outages), assumptions(grid, sky, choices, wanted),
    )  # fmt: skip


def _within(level: ServiceLevel, vertical: Floats, horizontal: Floats, route: Floats) -> Bools:
    """Where protection levels are within the alert limits; a level that is not known is not within."""
    with np.errstate(invalid="ignore"):
        if not level.grid:
            return np.asarray(route <= level.horizontal_m)
        return np.asarray((horizontal <= level.horizontal_m) & (vertical <= level.vertical_m))


# ---------------------------------------------------------------------------------------------- one site


@dataclass(frozen=True)
class _SiteDay:
    """What one site sees through the day: flat arrays are one row per satellite in view, (N,)."""

    site: Site
    vertical_m: Floats
    horizontal_m: Floats
    route_m: Floats
    in_view: Ints
    used: Ints
    elevation: Floats  # (T, S), NaN below the mask
    azimuth: Floats
    epoch: Ints  # (T,) grid epoch in force, -1 where none
    minute: Ints  # (N,)
    satellite: Ints  # (N,)
    corners: Corners


def grid_epochs(grid: GridConfidence, times: Times) -> Ints:
    """Which grid epoch is in force at times: the last one, no older than the time-out; -1 where there is none."""
    last = np.searchsorted(grid.times, times, side="right") - 1
    age = times - grid.times[np.maximum(last, 0)]
    late = age > np.timedelta64(round(grid.choices.time_out_s * 1e9), "ns")
    return np.asarray(np.where((last < 0) | late, -1, last))


def without_grid_m(lat: float, lon: float) -> float:
    """Vertical delay sigma [m] that a receiver assumes at a place when it has no grid."""
    lat_rad, pole_rad = np.radians(lat), np.radians(_POLE_LAT)
    sine = np.sin(lat_rad) * np.sin(pole_rad)
    sine += np.cos(lat_rad) * np.cos(pole_rad) * np.cos(np.radians(lon - _POLE_LON))
    magnetic = abs(float(np.degrees(np.arcsin(np.clip(sine, -1.0, 1.0)))))
    return next(sigma for limit, sigma in WITHOUT_GRID_M if magnetic <= limit)


def _at_site(grid: GridConfidence, lattice: Lattice, sky: Sky, site: Site, choices: ServiceChoices) -> _SiteDay:
    elevation, azimuth = sky.look(site.lat, site.lon)
    with np.errstate(invalid="ignore"):
        above = elevation >= choices.mask_deg
    elevation, azimuth = np.where(above, elevation, np.nan), np.where(above, azimuth, np.nan)
    minute, satellite = np.nonzero(above)
    el, az = elevation[above], azimuth[above]
    lat, lon = geometry.pierce(site.lat, site.lon, el, az, SBAS_SHELL_HEIGHT_M, SBAS_EARTH_RADIUS_M)
    epoch = grid_epochs(grid, sky.times)
    step = grid.step[np.maximum(epoch, 0)]
    step[epoch < 0] = NOT_MONITORED
    point_variance = variance_of(step)  # (T, P)
    corners = lattice.around(lat, lon, np.isfinite(point_variance)[minute])
    variance = np.nan_to_num(point_variance[minute[:, None], np.maximum(corners.point, 0)])
    vertical_m2 = (corners.weight * variance).sum(axis=1)  # NaN where the place cannot be interpolated
    factor2 = protection.pierce_factor(el) ** 2
    rest = choices.correction_m2 + protection.airborne_variance(el, choices.noise_m)
    rest = rest + protection.troposphere_variance(el)
    precise = np.full(elevation.shape, np.nan)
    precise[above] = rest + factor2 * vertical_m2
    coarse = precise.copy()
    coarse[above] = rest + factor2 * np.fmin(vertical_m2, without_grid_m(site.lat, site.lon) ** 2)
    found = protection.levels(elevation, azimuth, precise)
    route = protection.levels(elevation, azimuth, coarse).horizontal_route_m
    return _SiteDay(
        site, found.vertical_m, found.horizontal_m, route, above.sum(axis=1), np.isfinite(precise).sum(axis=1),
        elevation, azimuth, epoch, minute, satellite, corners,
    )  # fmt: skip


# ---------------------------------------------------------------------------------------------- outages and why


def spans(bad: Bools) -> list[tuple[int, int]]:
    """First and one-past-last index of each run of True."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], bad, [False]]).astype(np.int8)))
    return list(itertools.pairwise(edges.tolist()))[::2]


def _outages(
    level: ServiceLevel, good: Bools, one: _SiteDay, grid: GridConfidence, sky: Sky, choices: ServiceChoices
) -> list[Outage]:
    step = np.median(np.diff(sky.times)) if len(sky.times) > 1 else np.timedelta64(60, "s")
    made = []
    for first, last in spans(~good):
        vertical = one.vertical_m[first:last] if level.grid else np.zeros(last - first)
        horizontal = (one.horizontal_m if level.grid else one.route_m)[first:last]
        badness = np.maximum(
            np.nan_to_num(vertical, nan=np.inf) / (level.vertical_m if level.grid else 1.0),
            np.nan_to_num(horizontal, nan=np.inf) / level.horizontal_m,
        )
        worst = first + int(np.argmax(badness))
        cause, why = _cause(level, one, grid, sky, choices, worst)
        highest = tuple(float(np.max(np.nan_to_num(v, nan=np.inf))) for v in (vertical, horizontal))
        made.append(Outage(one.site.name, level.name, sky.times[first], sky.times[last - 1] + step, cause, why,
                           (highest[0], highest[1])))  # fmt: skip
    return made


def _cause(
    level: ServiceLevel, one: _SiteDay, grid: GridConfidence, sky: Sky, choices: ServiceChoices, minute: int
) -> tuple[str, str]:
    """Why a level is not available at a minute: would it be with a usual grid for every satellite in view?"""
    if one.in_view[minute] == 0:
        return "unseen", "no satellite was tracked by the network at this minute: nothing can be said"
    if not level.grid:
        return "geometry", f"{one.in_view[minute]} satellites above {choices.mask_deg:g} degrees do not suffice"
    if one.epoch[minute] < 0:
        return "unseen", "no grid delays are known for this minute: nothing can be said"
    usual_m2 = float(variance_of(step_of(choices.usual_grid_m)))
    elevation, azimuth = one.elevation[minute], one.azimuth[minute]
    variance = (
        choices.correction_m2 + protection.pierce_factor(elevation) ** 2 * usual_m2
        + protection.airborne_variance(elevation, choices.noise_m) + protection.troposphere_variance(elevation)
    )  # fmt: skip
    could = protection.levels(elevation, azimuth, variance)
    nothing = np.array(np.nan)
    if not _within(level, could.vertical_m, could.horizontal_m, nothing):
        return "geometry", (
            f"{one.in_view[minute]} satellites above {choices.mask_deg:g} degrees stand too unfavourably: "
            f"{_metres(could.vertical_m, could.horizontal_m)} even with grid delays known to "
            f"{choices.usual_grid_m:g} m"
        )
    return "ionosphere", _lost(one, grid, sky, minute)


def _metres(vertical: Floats, horizontal: Floats) -> str:
    if not np.isfinite(vertical):
        return "no position"
    return f"{float(vertical):.0f} m vertically and {float(horizontal):.0f} m horizontally"


def _lost(one: _SiteDay, grid: GridConfidence, sky: Sky, minute: int) -> str:
    """Which satellites lost which grid point, or hang on weak ones, at a minute."""
    rows = np.flatnonzero(one.minute == minute)
    step = grid.step[one.epoch[minute]]
    irregular = grid.irregular[one.epoch[minute]]
    lost: dict[str, list[str]] = {}
    weak: dict[str, list[str]] = {}
    for row in rows:
        name = str(sky.satellites[one.satellite[row]])
        points = one.corners.point[row]
        known = points[points >= 0]
        if not one.corners.usable[row]:
            gone = known[step[known] == NOT_MONITORED]
            where = ", ".join(_point(grid, int(p)) for p in gone) or "the grid around"
            lost.setdefault(f"{where} not monitored", []).append(name)
            continue
        heavy = known[(one.corners.weight[row][points >= 0] > 0.05) & (step[known] >= HIGHEST_STEP - 1)]
        if len(heavy):
            worst = int(heavy[np.argmax(step[heavy])])
            reason = "irregular" if irregular[worst] else "uncertain"
            weak.setdefault(f"{_point(grid, worst)} {reason}", []).append(name)
    parts = [f"{where} ({', '.join(names)})" for where, names in (*weak.items(), *lost.items())]
    used = int(one.used[minute])
    head = f"{used} of {int(one.in_view[minute])} satellites in view have a grid delay"
    return f"{head}: " + "; ".join(parts) if parts else f"{head}, but with too wide a confidence"


def _point(grid: GridConfidence, point: int) -> str:
    lat, lon = int(grid.lat[point]), int(grid.lon[point])
    return f"{abs(lat)}{'N' if lat >= 0 else 'S'} {abs(lon)}{'E' if lon >= 0 else 'W'}"


def assumptions(
    grid: GridConfidence, sky: Sky, choices: ServiceChoices, levels: Sequence[ServiceLevel]
) -> tuple[str, ...]:
    """Everything assumed, one sentence each."""
    told = grid.choices
    limits = ", ".join(
        f"{level.name} {level.horizontal_m:g} m" + (f" / {level.vertical_m:g} m" if level.grid else " / no vertical")
        for level in levels
    )
    return (
        f"Alert limits (horizontal / vertical): {limits}; {levels[0].source}.",
        f"Satellites augmented: systems {choices.systems}, above {choices.mask_deg:g} degrees; their places: "
        f"{sky.source}; all are taken as healthy.",
        f"Clock and orbit corrections of every satellite are bounded by {choices.correction_m:g} m (99.9 %), variance "
        f"{choices.correction_m2:g} m²; no degradation by lost messages.",
        f"Aircraft receiver: noise and divergence {choices.noise_m:g} m; multipath and lower atmosphere by the "
        "standard.",
        "Grid delays: those a service with only this network's receivers could send, at the standard 5 degree points; "
        f"planar spread {told.decorrelation_m:g} m, fit over {told.first_km:g} to {told.last_km:g} km with "
        f"{told.fewest} to {told.enough} or more lines of sight, false alarm and missed detection {told.false_alarm:g} "
        f"and {told.missed:g}.",
        f"Undersampling: a slope of {told.missed_mm_per_km:g} mm/km that nobody saw is allowed for over the way from "
        f"the lines of sight to the grid point; no line of sight within {told.nearest_km:g} km: not monitored.",
        f"A grid older than {told.time_out_s:g} s is not used. Without a grid (en route to NPA) the receiver assumes "
        "4.5 to 9 m of vertical delay uncertainty, by geomagnetic latitude; the broadcast model's own share is left "
        "out.",
        "An outage is put down to geometry where it would remain with grid delays known to "
        f"{choices.usual_grid_m:g} m.",
    )


