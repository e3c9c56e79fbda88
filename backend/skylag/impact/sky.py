"""The satellites in view from places: where they stand, and how well they are spread (dilution of precision).

From orbits where there are some; for archived days from the directions in which the network's receivers saw them.
Then a satellite's distance is that of its kind of orbit: up to 500 km from a receiver the direction is right to a tenth
of a degree.  A satellite that no receiver tracked is not in this sky: what cannot be used does not count.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from skylag.errors import NotEnough
from skylag.ionosphere import geometry, orbits
from skylag.tables import Ephemerides, Floats, Ints, PreciseOrbits, Rays, Times, Words

# Mean distance from the Earth's centre [m], from the nominal periods (IS-GPS-200; Galileo OS SIS ICD; GLONASS ICD; BDS
# ICDs).  BeiDou satellites that stand or loop over one longitude, and those of QZSS and NavIC, have the fifth.
_RADIUS_M = {"G": 26_560e3, "E": 29_600e3, "R": 25_510e3, "C": 27_906e3}
_SYNCHRONOUS_M = 42_164e3
_SYNCHRONOUS_BEIDOU = frozenset(
    f"C{n:02d}" for n in (*range(1, 11), 13, 16, 31, 38, 39, 40, 56, *range(59, 64))
)  # as broadcast by 2025; from memory

# The 24 slots of the GPS baseline constellation: per plane, right ascension of the ascending node and arguments of
# latitude [deg] at 1 July 1993 00:00 UTC, when Greenwich stood at 18 h 36 min 14.4 s; semi-major axis, inclination.
# Source: GPS Standard Positioning Service Performance Standard, table of baseline slots (figures from memory).
_SLOTS = (
    (272.847, (268.126, 161.786, 11.676, 41.806)), (332.847, (80.956, 173.336, 309.976, 204.376)),
    (32.847, (111.876, 11.796, 339.666, 241.556)), (92.847, (135.226, 265.446, 35.136, 167.356)),
    (152.847, (197.046, 302.596, 66.066, 333.686)), (212.847, (238.886, 345.226, 105.206, 135.346)),
)  # fmt: skip
_SLOT_RADIUS_M, _SLOT_INCLINATION_DEG, _SLOT_GREENWICH_DEG = 26_559.7e3, 55.0, 279.06
_SIDEREAL_DAY_S = 86_164.1


@dataclass(frozen=True)
class Sky:
    """Satellite positions (T, S, 3) [m, Earth-fixed], NaN where not known; times GPS time; how they were found."""

    times: Times
    satellites: Words
    position_m: Floats
    source: str

    def of(self, systems: str) -> "Sky":
        """The same with the satellites of some systems only, e.g. "G" or "GE"."""
        chosen = np.array([str(name)[0] in systems for name in self.satellites], dtype=bool)
        return Sky(self.times, self.satellites[chosen], self.position_m[:, chosen], self.source)

    def look(self, lat: float, lon: float, height_m: float = 0.0) -> tuple[Floats, Floats]:
        """Elevation and azimuth [deg], (T, S), from a place; NaN where a satellite is not known."""
        return geometry.look(geometry.earth_fixed(lat, lon, height_m).tolist(), self.position_m)


def nominal(step_s: float = 300.0) -> Sky:
    """The 24 slots of the GPS baseline constellation through one turn of the Earth, after which all repeats.

    It has no date: its times count from zero.  For days on which no satellite is known.
    """
    count = round(_SIDEREAL_DAY_S / step_s)
    turn_rad = np.arange(count) * (2.0 * np.pi / count)
    node = np.repeat([slot[0] for slot in _SLOTS], [len(slot[1]) for slot in _SLOTS])
    argument = np.concatenate([slot[1] for slot in _SLOTS])
    # Two revolutions of a satellite to one turn of the Earth.
    u_rad = np.radians(argument)[None, :] + 2.0 * turn_rad[:, None]
    node_rad = np.radians(node - _SLOT_GREENWICH_DEG)[None, :] - turn_rad[:, None]
    tilt_rad = np.radians(_SLOT_INCLINATION_DEG)
    x, y = np.cos(u_rad), np.sin(u_rad) * np.cos(tilt_rad)
    position = _SLOT_RADIUS_M * np.stack(
        [x * np.cos(node_rad) - y * np.sin(node_rad), x * np.sin(node_rad) + y * np.cos(node_rad),
         np.sin(u_rad) * np.sin(tilt_rad)], axis=-1,
    )  # fmt: skip
    times = np.datetime64(0, "ns") + (np.arange(count) * (_SIDEREAL_DAY_S / count * 1e9)).astype("timedelta64[ns]")
    names = np.array([f"G{number:02d}" for number in range(1, len(node) + 1)])
    return Sky(times, names, position, "the 24 slots of the GPS baseline constellation")


def from_orbits(
    sources: Sequence[Ephemerides | PreciseOrbits], satellites: Sequence[str], times: Times
) -> Sky:
    """The sky by broadcast or tabulated orbits."""
    position = orbits.positions(sources, list(satellites), times)
    return Sky(times, np.array(list(satellites), dtype=np.str_), position, "orbits")


def from_rays(rays: Rays, times: Times, systems: str = "") -> Sky:
    """The sky as the network saw it: for each time, the lines of sight of the nearest epoch within one interval.

    systems  letters of the systems wanted; all without
    Raises NotEnough where there is no line of sight.
    """
    if not len(rays) or not len(times):
        raise NotEnough("no line of sight to place satellites by; process the day again", had=0, needed=1, where="rays")
    half = np.timedelta64(round(rays.interval_s * 5e8), "ns")
    nearest = np.clip(np.searchsorted(times, rays.time - half, side="left"), 0, len(times) - 1)
    wanted = np.abs(rays.time - times[nearest]) <= half
    if systems:
        of_system = np.array([str(name)[0] in systems for name in rays.satellites], dtype=bool)
        wanted &= of_system[rays.satellite]
    row = np.flatnonzero(wanted)
    satellites = rays.satellites
    places = np.array([receiver.position_m for receiver in rays.receivers], dtype=np.float64)
    toward = _directions(places, rays.receiver[row], rays.elevation[row], rays.azimuth[row])
    radius = np.array([_radius(str(name)) for name in satellites])[rays.satellite[row]]
    start = places[rays.receiver[row]]
    along = np.einsum("ij,ij->i", start, toward)
    reach = -along + np.sqrt(along**2 + radius**2 - np.einsum("ij,ij->i", start, start))
    found = start + reach[:, None] * toward
    key = nearest[row] * len(satellites) + rays.satellite[row]
    size = len(times) * len(satellites)
    count = np.bincount(key, minlength=size)
    with np.errstate(invalid="ignore"):
        mean = np.stack([np.bincount(key, found[:, k], size) / count for k in range(3)], axis=-1)
    mean = mean.reshape(len(times), len(satellites), 3)
    seen = np.isfinite(mean[..., 0]).any(axis=0)
    return Sky(times, satellites[seen], mean[:, seen], "directions seen by the network's receivers")


def _radius(satellite: str) -> float:
    if satellite in _SYNCHRONOUS_BEIDOU:
        return _SYNCHRONOUS_M
    return _RADIUS_M.get(satellite[0], _SYNCHRONOUS_M)


def _directions(places: Floats, receiver: Ints, elevation: Floats, azimuth: Floats) -> Floats:
    """Earth-fixed unit vectors (N, 3) of lines of sight."""
    lat, lon, _ = geometry.geodetic(places)
    lat_rad, lon_rad = np.radians(lat)[receiver], np.radians(lon)[receiver]
    elevation_rad, azimuth_rad = np.radians(elevation), np.radians(azimuth)
    east = np.cos(elevation_rad) * np.sin(azimuth_rad)
    north = np.cos(elevation_rad) * np.cos(azimuth_rad)
    up = np.sin(elevation_rad)
    sin_lat, cos_lat, sin_lon, cos_lon = np.sin(lat_rad), np.cos(lat_rad), np.sin(lon_rad), np.cos(lon_rad)
    across = up * cos_lat - north * sin_lat
    return np.stack([across * cos_lon - east * sin_lon, across * sin_lon + east * cos_lon,
                     up * sin_lat + north * cos_lat], axis=-1)  # fmt: skip


def rows_of(elevation: Floats, azimuth: Floats) -> Floats:
    """Rows (..., 4) of the design: minus the unit vector east, north, up, and 1 for the clock; NaN becomes 0.

    Source: RTCA DO-229, appendix J.
    """
    elevation_rad, azimuth_rad = np.radians(elevation), np.radians(azimuth)
    rows = np.stack(
        [
            -np.cos(elevation_rad) * np.sin(azimuth_rad),
            -np.cos(elevation_rad) * np.cos(azimuth_rad),
            -np.sin(elevation_rad),
            np.ones(np.shape(elevation)),
        ],
        axis=-1,
    )
    return np.where(np.isfinite(rows), rows, 0.0)


def position_covariance(rows: Floats, weight: Floats) -> Floats:
    """(GᵀWG)⁻¹ (..., 4, 4) of rows (..., S, 4) and weights (..., S); NaN where fewer than four or not solvable."""
    normal = np.einsum("...si,...s,...sj->...ij", rows, weight, rows, optimize=True)
    scale = np.maximum(np.trace(normal, axis1=-2, axis2=-1), 1e-300)
    with np.errstate(divide="ignore", invalid="ignore"):
        solvable = np.linalg.det(normal / scale[..., None, None]) > 1e-12
    solvable &= np.count_nonzero(weight > 0, axis=-1) >= 4
    safe = np.where(solvable[..., None, None], normal, np.eye(4))
    return np.where(solvable[..., None, None], np.linalg.inv(safe), np.nan)


@dataclass(frozen=True)
class Spread:
    """How satellites above a mask are spread, (T,): their count; position, horizontal and vertical dilution (NaN
    below four)."""

    count: Ints
    position: Floats
    horizontal: Floats
    vertical: Floats


def spread(elevation: Floats, azimuth: Floats, mask_deg: float) -> Spread:
    """Counts and dilutions of precision (T,) of satellites (T, S) above a mask, equal weights."""
    with np.errstate(invalid="ignore"):
        above = elevation >= mask_deg
    covariance = position_covariance(rows_of(elevation, azimuth), above.astype(np.float64))
    diagonal = np.diagonal(covariance, axis1=-2, axis2=-1)
    return Spread(
        count=above.sum(axis=1),
        position=np.sqrt(diagonal[:, :3].sum(axis=1)),
        horizontal=np.sqrt(diagonal[:, :2].sum(axis=1)),
        vertical=np.sqrt(diagonal[:, 2]),
    )
