"""Which flags concern a place at a moment, and how far away they are.

Takes flags and gives flags with distances; a front is where its track has it at that moment.  Never judges them.
"""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from skylag.constants import SHELL_EARTH_RADIUS_M
from skylag.tables import Flag, Floats

# A flag is told with a place up to this distance: beyond it, another part of the map is meant.
REACH_KM = 300.0


@dataclass(frozen=True)
class NearFlag:
    """A flag active at the moment, with where it is then, its distance [km] and its bearing [deg] from the place."""

    flag: Flag
    lat: float
    lon: float
    distance_km: float
    bearing_deg: float


def active_near(flags: tuple[Flag, ...], lat: float, lon: float, time: np.datetime64) -> tuple[NearFlag, ...]:
    """The flags that are active at a GPS time within reach of a place, nearest first."""
    found = []
    for flag in flags:
        if not flag.start <= time <= flag.end:
            continue
        flag_lat, flag_lon = position_at(flag, time)
        distance_km, bearing_deg = distance_and_bearing(lat, lon, flag_lat, flag_lon)
        if distance_km <= REACH_KM:
            found.append(NearFlag(flag, flag_lat, flag_lon, distance_km, bearing_deg))
    return tuple(sorted(found, key=lambda near: near.distance_km))


def position_at(flag: Flag, time: np.datetime64) -> tuple[float, float]:
    """Where a flag is at a GPS time: along its track if it has one, else its place."""
    if not flag.track:
        return flag.lat, flag.lon
    times = np.array([point[0] for point in flag.track]).astype("datetime64[ns]").astype(np.int64)
    instant = time.astype("datetime64[ns]").astype(np.int64)
    lats = np.array([point[1] for point in flag.track])
    lons = np.unwrap([point[2] for point in flag.track], period=360.0)
    seconds = (times - times[0]) / 1e9
    now = (instant - times[0]) / 1e9
    return float(np.interp(now, seconds, lats)), float(np.interp(now, seconds, lons))


def great_circle_km(lats: npt.ArrayLike, lons: npt.ArrayLike, lat: float, lon: float) -> Floats:
    """Distances [km] of places from one, on the mean sphere."""
    a, b = np.deg2rad(lats), np.deg2rad(lat)
    half = np.sin((a - b) / 2) ** 2 + np.cos(a) * np.cos(b) * np.sin(np.deg2rad(np.asarray(lons) - lon) / 2) ** 2
    return np.asarray(2 * SHELL_EARTH_RADIUS_M / 1000.0 * np.arcsin(np.sqrt(np.minimum(half, 1.0))))


def distance_and_bearing(lat1: float, lon1: float, lat2: float, lon2: float) -> tuple[float, float]:
    """Great-circle distance [km] on the mean sphere and initial bearing [deg from north over east]."""
    lat1_rad, lat2_rad = np.deg2rad(lat1), np.deg2rad(lat2)
    lon_rad = np.deg2rad(lon2 - lon1)
    east = np.sin(lon_rad) * np.cos(lat2_rad)
    north = np.cos(lat1_rad) * np.sin(lat2_rad) - np.sin(lat1_rad) * np.cos(lat2_rad) * np.cos(lon_rad)
    return float(great_circle_km(lat2, lon2, lat1, lon1)), float(np.rad2deg(np.arctan2(east, north)) % 360.0)
