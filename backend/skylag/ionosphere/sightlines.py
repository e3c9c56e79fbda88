"""Rays laid out dense, epoch by line of sight, so that slopes, fronts and patches run along time without loops.

A line of sight is one receiver and one satellite over the whole day.  Never estimates anything.
"""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from skylag.constants import SHELL_EARTH_RADIUS_M
from skylag.tables import Floats, Ints, Rays, Times

EARTH_RADIUS_KM = SHELL_EARTH_RADIUS_M / 1000.0


@dataclass(frozen=True)
class Sightlines:
    """Where each ray stands in an array of epoch by line of sight.

    times      (T,) evenly spaced by step_s; epochs without rays are there too
    receiver, satellite  (C,) row numbers into the rays' receivers and satellites; sorted by satellite, then receiver
    row        (T, C) row number of the ray, -1 where there is none
    """

    times: Times
    step_s: float
    receiver: Ints
    satellite: Ints
    row: npt.NDArray[np.int32]

    def layer(self, values: Floats) -> Floats:
        """A column of the rays laid out (T, C); NaN where there is no ray."""
        padded = np.append(np.asarray(values, dtype=np.float64), np.nan)
        return np.asarray(padded[self.row])

    def numbers(self, values: Ints) -> Ints:
        """A column of whole numbers laid out (T, C); -1 where there is no ray."""
        padded = np.append(np.asarray(values, dtype=np.int64), -1)
        return np.asarray(padded[self.row])

    def __len__(self) -> int:
        return len(self.receiver)


def lay_out(rays: Rays, step_s: float | None = None) -> Sightlines:
    """The rays on an even time grid; step_s thins them to that spacing [s] (a multiple of the rays' own interval).

    A ray goes to the epoch of the grid within half its interval; of two on one epoch the later row stays.
    """
    own_s = rays.interval_s
    every = 1 if step_s is None else max(1, round(step_s / own_s))
    step_ns = round(own_s * every * 1e9)
    if len(rays) == 0:
        nothing = np.zeros(0, dtype=np.int64)
        return Sightlines(np.zeros(0, "datetime64[ns]"), own_s * every, nothing, nothing, np.zeros((0, 0), np.int32))
    nanoseconds = rays.time.astype("datetime64[ns]").astype(np.int64)
    # Most receivers sample on whole multiples of their interval; those that do not keep their own phase.
    own_ns = round(own_s * 1e9)
    phases, counts = np.unique(nanoseconds[:: max(1, len(nanoseconds) // 10_000)] % own_ns, return_counts=True)
    phase = int(phases[np.argmax(counts)])
    first = (int(nanoseconds.min()) - phase) // step_ns * step_ns + phase
    epoch = np.rint((nanoseconds - first) / step_ns).astype(np.int64)
    near = np.abs(nanoseconds - first - epoch * step_ns) <= own_ns // 2
    lines, line = np.unique(rays.satellite * len(rays.receivers) + rays.receiver, return_inverse=True)
    row = np.full((int(epoch.max()) + 1, len(lines)), -1, dtype=np.int32)
    at = np.flatnonzero(near)
    row[epoch[at], line[at]] = at
    times = (first + np.arange(len(row), dtype=np.int64) * step_ns).astype("datetime64[ns]")
    return Sightlines(times, own_s * every, lines % len(rays.receivers), lines // len(rays.receivers), row)


def from_plane(east_km: npt.ArrayLike, north_km: npt.ArrayLike, centre: tuple[float, float]) -> tuple[Floats, Floats]:
    """Latitude and longitude [deg] of places on the flat map of `field.plane_km`."""
    east, north = np.asarray(east_km, dtype=np.float64), np.asarray(north_km, dtype=np.float64)
    distance = np.hypot(east, north)
    angle = distance / EARTH_RADIUS_KM
    safe = np.maximum(distance, 1e-9)
    lat0_rad = np.radians(centre[0])
    sine = np.cos(angle) * np.sin(lat0_rad) + north / safe * np.sin(angle) * np.cos(lat0_rad)
    lat = np.degrees(np.arcsin(np.clip(sine, -1.0, 1.0)))
    lon = centre[1] + np.degrees(
        np.arctan2(
            east * np.sin(angle),
            safe * np.cos(lat0_rad) * np.cos(angle) - north * np.sin(lat0_rad) * np.sin(angle),
        )
    )
    return np.asarray(lat), np.asarray((lon + 180.0) % 360.0 - 180.0 if np.any(np.abs(lon) > 180.0) else lon)


def middle(rays: Rays) -> tuple[float, float]:
    """Latitude and longitude [deg] of the middle of the receivers, on a sphere: the centre of the local map."""
    x, y, z = np.mean(np.array([receiver.position_m for receiver in rays.receivers]), axis=0)
    return float(np.degrees(np.arctan2(z, np.hypot(x, y)))), float(np.degrees(np.arctan2(y, x)))
