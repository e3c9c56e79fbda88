"""The scenario: how the ionosphere fares over the three days, the wall, the patch, and what a test may change.

Time is in hours of GPS time since 2031-03-11 00:00.  Horizontal places are kilometres east and north of MIDDLE on the
plane that touches the Earth there (the point's direction from the Earth's centre, projected at right angles), so the
wall is a straight line on that plane and stands upright.  Holds no density: see `plasma`.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.interpolate import PchipInterpolator

Floats = npt.NDArray[np.float64]

START = np.datetime64("2031-03-11T00:00:00", "ns")
DAYS = ("2031-03-11", "2031-03-12", "2031-03-13")
MIDDLE_LAT, MIDDLE_LON = -40.0, 146.0
EARTH_KM = 6371.0
L1_MM_PER_TECU = 40.3e16 / 1575.42e6**2 * 1e3


def hours_since(times: npt.ArrayLike) -> Floats:
    """Hours of GPS time since the first midnight of the scenario."""
    elapsed = np.asarray(times, dtype="datetime64[ns]") - START
    return np.asarray(elapsed.astype(np.int64) / 3.6e12, dtype=np.float64)


def instant(hours: float) -> np.datetime64:
    """GPS time of hours since the first midnight."""
    return START + np.timedelta64(round(hours * 3.6e12), "ns")


@dataclass(frozen=True)
class Scenario:
    """What a simulated day holds.  The defaults are those of the committed files.

    level           factor on the content of the ionosphere below 2000 km, beside the course of the three days
    plasmasphere    factor on the plasmasphere
    waves           factor on the travelling disturbances
    front           whether the wall passes; its jump [TECU, vertical, far side to far side], steepest slope
                    [mm/km on 1575.42 MHz], speed [m/s], heading [deg, toward], and when it passes MIDDLE [hours]
    patch           whether the irregular patch lives; factor on its amplitude
    code_noise, multipath, phase_noise, biases, clocks   factors; 0 switches off
    slips, gaps, faults   whether they happen
    bias_drift_ns   marker -> amplitude of a daily wave of the receiver's second code biases
    mask_deg        elevation below which no receiver tracks
    """

    level: float = 1.0
    plasmasphere: float = 1.0
    waves: float = 1.0
    front: bool = True
    front_jump_tecu: float = 28.0
    front_slope_mm_per_km: float = 88.0
    front_speed_m_s: float = 220.0
    front_heading_deg: float = 325.0
    front_hours: float = 31.0
    patch: bool = True
    patch_strength: float = 1.0
    code_noise: float = 1.0
    multipath: float = 1.0
    phase_noise: float = 1.0
    biases: float = 1.0
    clocks: float = 1.0
    slips: bool = True
    gaps: bool = True
    faults: bool = True
    bias_drift_ns: tuple[tuple[str, float], ...] = ()
    mask_deg: float = 7.0


def _course(*points: tuple[float, float]) -> Callable[[Floats], Floats]:
    hours, values = zip(*points, strict=True)
    smooth = PchipInterpolator(hours, values, extrapolate=False)
    return lambda t: np.asarray(smooth(np.clip(t, hours[0], hours[-1])))


# Factor on the dense layer; hours since the first midnight.  Calm, an enhancement in the afternoon and evening of the
# second day (local time is about 9.7 h ahead), depletion after it, slow recovery.
level_of = _course((-2, 1.0), (26, 1.0), (27.2, 1.06), (29.5, 1.40), (31.0, 1.42), (33.5, 1.10), (37, 0.80),
                   (43, 0.58), (50, 0.52), (58, 0.56), (66, 0.66), (74, 0.72))  # fmt: skip
# Lift of the dense layer [km].
lift_of = _course((-2, 0), (26.5, 0), (28, 25), (30, 60), (32, 65), (36, 30), (44, 15), (60, 8), (74, 4))
# Outer edge of the plasmasphere in Earth radii at the magnetic equator.
edge_of = _course((-2, 4.7), (26.5, 4.7), (31, 3.9), (36, 3.2), (44, 3.1), (60, 3.4), (74, 3.7))
# Content of the plume ahead of the wall, as a share of the jump.
plume_of = _course((26, 0), (27.4, 0), (29.6, 0.9), (30.2, 1.0), (32.0, 1.0), (32.6, 0.85), (34.2, 0.0), (74, 0.0))
PLUME_REACH_KM = 1300.0


def plane_km(direction: Floats) -> tuple[Floats, Floats]:
    """East and north [km] on the plane at MIDDLE of unit vectors (..., 3) from the Earth's centre."""
    lat, lon = np.radians(MIDDLE_LAT), np.radians(MIDDLE_LON)
    # Explicit sums: a matrix product would hand the order of additions to a library.
    east = -np.sin(lon) * direction[..., 0] + np.cos(lon) * direction[..., 1]
    north = (
        -np.sin(lat) * np.cos(lon) * direction[..., 0]
        - np.sin(lat) * np.sin(lon) * direction[..., 1]
        + np.cos(lat) * direction[..., 2]
    )
    # MIDDLE is geodetic, directions are geocentric: 0.19 deg apart, so take the offset of MIDDLE's own direction off.
    return EARTH_KM * east, EARTH_KM * (north - _MIDDLE_OFFSET)


def _geocentric_direction(lat: Floats, lon: Floats) -> Floats:
    e2 = 2.0 / 298.257223563 - 1.0 / 298.257223563**2
    la, lo = np.arctan((1.0 - e2) * np.tan(np.radians(lat))), np.radians(lon)
    return np.stack([np.cos(la) * np.cos(lo), np.cos(la) * np.sin(lo), np.sin(la) * np.ones_like(lo)], axis=-1)


_middle = _geocentric_direction(np.array(MIDDLE_LAT), np.array(MIDDLE_LON))
_MIDDLE_OFFSET = float(
    -np.sin(np.radians(MIDDLE_LAT)) * np.cos(np.radians(MIDDLE_LON)) * _middle[0]
    - np.sin(np.radians(MIDDLE_LAT)) * np.sin(np.radians(MIDDLE_LON)) * _middle[1]
    + np.cos(np.radians(MIDDLE_LAT)) * _middle[2]
)


def plane_of(lat: npt.ArrayLike, lon: npt.ArrayLike) -> tuple[Floats, Floats]:
    """East and north [km] of MIDDLE of geodetic places [deg], as the scenario counts them."""
    return plane_km(_geocentric_direction(np.asarray(lat, dtype=float), np.asarray(lon, dtype=float)))


def place_of(east_km: float, north_km: float) -> tuple[float, float]:
    """Latitude and longitude [deg] of a place on the plane, by iteration."""
    lat, lon = MIDDLE_LAT, MIDDLE_LON
    for _ in range(12):
        x, y = plane_of(np.array(lat), np.array(lon))
        lat += float(north_km - y) / 111.2
        lon += float(east_km - x) / (111.2 * float(np.cos(np.radians(lat))))
    return lat, lon


@dataclass(frozen=True)
class FrontNow:
    """The wall at an instant: a point on it (nearest to MIDDLE), where it goes, how high and how steep it is.

    heading [deg, toward which it moves; the content grows toward it], speed [m/s], jump [TECU, vertical],
    slope_mm_per_km the steepest vertical slope, width_km between 10 and 90 % of the jump.
    """

    lat: float
    lon: float
    heading_deg: float
    speed_m_s: float
    jump_tecu: float
    slope_mm_per_km: float
    width_km: float


@dataclass(frozen=True)
class Front:
    """The moving wall of a scenario."""

    scenario: Scenario

    @property
    def scale_km(self) -> float:
        """Scale of the wall's profile, jump * (1 + tanh(d / scale)) / 2."""
        jump_mm = self.scenario.front_jump_tecu * L1_MM_PER_TECU
        return jump_mm / (2.0 * self.scenario.front_slope_mm_per_km)

    def ahead_km(self, east_km: Floats, north_km: Floats, hours: Floats) -> Floats:
        """Distance [km] of places on the plane from the wall, positive where it has not yet been."""
        heading = np.radians(self.scenario.front_heading_deg)
        along = east_km * np.sin(heading) + north_km * np.cos(heading)
        return np.asarray(along - self.scenario.front_speed_m_s * 3.6 * (hours - self.scenario.front_hours))

    def content(self, east_km: Floats, north_km: Floats, hours: Floats) -> Floats:
        """Vertical content [TECU] of the plume at places on the plane: full ahead of the wall, none behind it."""
        if not self.scenario.front:
            return np.zeros(np.broadcast_shapes(np.shape(east_km), np.shape(hours)))
        ahead = self.ahead_km(east_km, north_km, hours)
        reach = np.exp(-((np.maximum(ahead, 0.0) / PLUME_REACH_KM) ** 2))
        step = 0.5 * (1.0 + np.tanh(ahead / self.scale_km))
        return np.asarray(self.scenario.front_jump_tecu * plume_of(hours) * step * reach)

    def at(self, time: np.datetime64) -> FrontNow | None:
        """The wall at a GPS time; None where there is none within 1000 km of the middle or it is spent."""
        hours = float(hours_since(time))
        share = float(plume_of(np.array(hours)))
        travelled = self.scenario.front_speed_m_s * 3.6 * (hours - self.scenario.front_hours)
        if not self.scenario.front or share < 0.05 or abs(travelled) > 1000.0:
            return None
        heading = np.radians(self.scenario.front_heading_deg)
        lat, lon = place_of(float(travelled * np.sin(heading)), float(travelled * np.cos(heading)))
        return FrontNow(
            lat, lon, self.scenario.front_heading_deg, self.scenario.front_speed_m_s,
            self.scenario.front_jump_tecu * share, self.scenario.front_slope_mm_per_km * share,
            float(2.0 * np.arctanh(0.8) * self.scale_km),
        )  # fmt: skip


@dataclass(frozen=True)
class PatchNow:
    """The irregular patch at an instant: centre, radius where it has fallen to a third, strength from 0 to 1."""

    lat: float
    lon: float
    radius_km: float
    strength: float


@dataclass(frozen=True)
class Patch:
    """The irregular patch: many small waves within a round edge, in a thin sheet, drifting.

    The structure is aligned with the field in truth; a sheet stands for it, since a thick upright one would smear away
    along slanting rays.  Small waves from 8 to 80 km, amplitude growing with the wave's length.
    """

    scenario: Scenario
    seed: int = 2031
    sheet_km: float = 350.0
    radius_km: float = 115.0
    first_hours: float = 31.0
    last_hours: float = 33.1
    heading_deg: float = 285.0
    speed_m_s: float = 70.0
    rms_tecu: float = 1.15

    def centre_km(self, hours: Floats) -> tuple[Floats, Floats]:
        """Centre on the plane [km]: from the east coast of the southern land across the strait."""
        heading = np.radians(self.heading_deg)
        travelled = self.speed_m_s * 3.6 * (np.asarray(hours) - self.first_hours)
        return 230.0 + travelled * np.sin(heading), -85.0 + travelled * np.cos(heading)

    def strength(self, hours: Floats) -> Floats:
        """Share of the full amplitude, from 0 to 1: a quarter of an hour to rise, a quarter of an hour to fade."""
        rise = np.clip((np.asarray(hours) - self.first_hours) / 0.25, 0.0, 1.0)
        fall = np.clip((self.last_hours - np.asarray(hours)) / 0.25, 0.0, 1.0)
        both = np.minimum(rise, fall)
        return both * both * (3.0 - 2.0 * both) * (1.0 if self.scenario.patch else 0.0)

    def content(self, east_km: Floats, north_km: Floats, hours: Floats) -> Floats:
        """Vertical content [TECU] that the patch adds or takes at places on the plane; arrays of one shape."""
        shape = np.broadcast_shapes(np.shape(east_km), np.shape(north_km), np.shape(hours))
        total = np.zeros(shape)
        if not self.scenario.patch:
            return total
        hours = np.broadcast_to(hours, shape)
        cx, cy = self.centre_km(hours)
        x, y = east_km - cx, north_km - cy
        envelope = self.strength(hours) * np.exp(-((x * x + y * y) / self.radius_km**2) ** 2)
        inside = envelope > 1e-4
        if not inside.any():
            return total
        x, y, t = x[inside], y[inside], hours[inside]
        rng = np.random.default_rng([self.seed, 23])
        count = 48
        length = 8.0 * 10.0 ** rng.uniform(0.0, 1.0, count)
        angle, phase = rng.uniform(0, 2 * np.pi, count), rng.uniform(0, 2 * np.pi, count)
        turn = rng.normal(0.0, 2.5, count)  # rad/h: the structure does not stay frozen
        weight = length / np.sqrt(0.5 * (length**2).sum())
        sums = np.zeros(x.shape)
        for k in range(count):
            sums += weight[k] * np.sin(
                2 * np.pi / length[k] * (x * np.cos(angle[k]) + y * np.sin(angle[k])) + turn[k] * t + phase[k]
            )
        total[inside] = self.rms_tecu * self.scenario.patch_strength * envelope[inside] * sums
        return total

    def at(self, time: np.datetime64) -> PatchNow | None:
        """The patch at a GPS time, or None while there is none."""
        hours = np.array(float(hours_since(time)))
        strength = float(self.strength(hours))
        if strength < 0.02:
            return None
        x, y = self.centre_km(hours)
        lat, lon = place_of(float(x), float(y))
        return PatchNow(lat, lon, self.radius_km, strength)
