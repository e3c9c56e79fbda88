"""When a moving front reaches a place: the one reckoning behind the page, alerts and a ground station's warning.

A front keeps its speed and heading from where it was last seen; each limit stands here once, with its reason.  A day's
forecasts (`ionosphere.fronts.arrivals`) are another thing: each is made from a wall fitted anew to what was seen until
then, and is kept so that it can be checked; a flag keeps no such fits.  A planning aid: how long a front is, and
whether it lasts, is not known.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from skylag.ionosphere.covariance import plane_km
from skylag.ionosphere.fronts import SLOWEST_M_S
from skylag.tables import Flag, Site

_SECOND = np.timedelta64(1, "s")

# Farther ahead the doubt of a front's speed alone, where no better one is known, is an hour and more (one sigma).
HORIZON = np.timedelta64(3, "h")
# So long after it was last seen a front counts as on its way: as long as forecasts are made and checked for.
LAST_SEEN = np.timedelta64(1, "h")
# A flag keeps one place of a front's line and not its length: so far to each side of it the front is taken to reach.
# Ours, of the size of a network.  What already lies over a place (`at_places.over`) has no such limit: it only raises.
ASIDE_KM = 300.0
# Speeds of fronts from few stations carry about 30 % (Radio Science 48, 2013): for flags that tell no sigma of theirs.
SPEED_DOUBT = 0.3
PLACE_DOUBT_KM = 6.0  # of a front's line: five walls through invented three-dimensional content lay off by up to 7 km


@dataclass(frozen=True)
class Coming:
    """A front on its way to a site: said at `now`, expected (GPS time, to the second), with one sigma [s].

    away_km  how far the site lies ahead of the front's line now; aside_km: how far beside the place where it was seen
    """

    site: Site
    flag: Flag
    now: np.datetime64
    expected: np.datetime64
    sigma_s: float
    away_km: float
    aside_km: float

    @property
    def minutes(self) -> int:
        """From now on, as it is told."""
        return round(float((self.expected - self.now) / _SECOND) / 60.0)

    @property
    def give_or_take_min(self) -> int:
        """Two sigmas, as they are told: never less than a minute."""
        return max(1, round(2.0 * self.sigma_s / 60.0))

    @property
    def words(self) -> str:
        """The same in words."""
        slope = self.flag.slope_mm_per_km
        steep = f"{slope:.0f} mm/km" if np.isfinite(slope) else "unknown slope"
        return (
            f"front of {steep}, {self.away_km:.0f} km away, at "
            f"{self.flag.speed_m_s:.0f} m/s toward {self.flag.heading_deg:.0f} degrees: in {self.minutes} minutes, "
            f"give or take {self.give_or_take_min} (two sigmas), if it keeps its way"
        )


def coming(flags: Sequence[Flag], sites: Sequence[Site], now: np.datetime64) -> tuple[Coming, ...]:
    """The front that reaches each site next after a GPS time, soonest first; none for a site that none reaches.

    Only confirmed fronts that were seen before `now`, and no place of theirs that is later.
    """
    soonest: dict[Site, Coming] = {}
    for flag in flags:
        if not _moves(flag, now):
            continue
        known = tuple(point for point in flag.track if point[0] <= now) or flag.track[:1]
        for site in sites:
            found = _reaches(flag, known[-1], site, now)
            if found is not None and (site not in soonest or found.expected < soonest[site].expected):
                soonest[site] = found
    return tuple(sorted(soonest.values(), key=lambda one: (one.expected, one.site.name)))


def _moves(flag: Flag, now: np.datetime64) -> bool:
    """Whether a flag is a front that counts as on its way at a time."""
    known = flag.kind == "front" and flag.confirmed and bool(flag.track)
    moving = flag.speed_m_s >= SLOWEST_M_S and bool(np.isfinite(flag.heading_deg))  # nothing known is not faster
    return known and moving and bool(flag.start <= now <= flag.end + LAST_SEEN)


def _reaches(flag: Flag, seen: tuple[np.datetime64, float, float], site: Site, now: np.datetime64) -> Coming | None:
    """When a front reaches a site from one place of its track; None where it does not, or not within the limits."""
    ahead_km, aside_km = from_line(flag, seen[1:], site.lat, site.lon)
    way_s = ahead_km * 1000.0 / flag.speed_m_s
    since = seen[0].astype("datetime64[ns]")
    expected = since + np.timedelta64(round(way_s), "s")
    if aside_km > ASIDE_KM or not now < expected <= now + HORIZON:
        return None
    share = flag.speed_sigma_m_s / flag.speed_m_s if np.isfinite(flag.speed_sigma_m_s) else SPEED_DOUBT
    sigma_s = float(np.hypot(share * way_s, PLACE_DOUBT_KM * 1000.0 / flag.speed_m_s))
    away_km = ahead_km - flag.speed_m_s * float((now - since) / _SECOND) / 1000.0
    return Coming(site, flag, now, expected, sigma_s, away_km, aside_km)


def from_line(flag: Flag, place: tuple[float, float], lat: float, lon: float) -> tuple[float, float]:
    """How far [km] a place lies ahead of a front's line through another (lat, lon), and how far beside that other."""
    x, y = plane_km(np.array([lat]), np.array([lon]), place)
    heading_rad = np.radians(flag.heading_deg)
    east, north = np.sin(heading_rad), np.cos(heading_rad)
    return float(x[0] * east + y[0] * north), float(abs(x[0] * north - y[0] * east))
