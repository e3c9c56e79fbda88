"""The two closed models of ionospheric delay that satellites broadcast, to compare measured maps with.

Klobuchar's (GPS; BeiDou and QZSS send its likes) gives a delay, NTCM-G (Galileo) content.  Arrays of any one shape.
What a single-frequency receiver corrects without a network is what these say.  Never reads a file, never fits anything.
"""

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from skylag.constants import L1_HZ, SPEED_OF_LIGHT_M_S
from skylag.ionosphere.geometry import earth_angle, pierce
from skylag.tables import Floats, Times

_NIGHT_S = 5e-9

# NTCM-G Ionospheric Model Description 1.0 (European GNSS Service Centre, 2022): model coefficients k1 to k12.
_K = (0.92519, 0.16951, 0.00443, 0.06626, 0.00899, 0.21289, -0.15414, -0.38439, 1.14023, 1.20556, 1.41808, 0.13985)
_NTCM_HEIGHT_M = 450_000.0
_NTCM_POLE_LAT, _NTCM_POLE_LON = 79.74, -71.78


def klobuchar(
    alpha: Sequence[float], beta: Sequence[float], lat: npt.ArrayLike, lon: npt.ArrayLike, elevation: npt.ArrayLike,
    azimuth: npt.ArrayLike, times: Times, frequency_hz: float = L1_HZ,
) -> Floats:  # fmt: skip
    """Slant delay [m] on a frequency (IS-GPS-200 20.3.3.5.2.5).

    alpha, beta  four coefficients each, as the navigation header tells them (`ionosphere["GPSA"]`, `["GPSB"]`)
    lat, lon, elevation, azimuth  degrees, of the receiver and from it; times GPS time
    """
    semicircle = 180.0
    elevation_sc = np.asarray(elevation, dtype=np.float64) / semicircle
    azimuth_rad = np.radians(azimuth)
    psi = 0.0137 / (elevation_sc + 0.11) - 0.022
    pierce_lat = np.clip(np.asarray(lat) / semicircle + psi * np.cos(azimuth_rad), -0.416, 0.416)
    pierce_lon = np.asarray(lon) / semicircle + psi * np.sin(azimuth_rad) / np.cos(pierce_lat * np.pi)
    magnetic_lat = pierce_lat + 0.064 * np.cos((pierce_lon - 1.617) * np.pi)
    local_s = np.mod(43_200 * pierce_lon + _second_of_day(times), 86_400.0)
    amplitude = np.maximum(np.polynomial.polynomial.polyval(magnetic_lat, np.asarray(alpha, dtype=np.float64)), 0.0)
    period = np.maximum(np.polynomial.polynomial.polyval(magnetic_lat, np.asarray(beta, dtype=np.float64)), 72_000.0)
    x = 2 * np.pi * (local_s - 50_400.0) / period
    day = np.where(np.abs(x) < 1.57, amplitude * (1 - x**2 / 2 + x**4 / 24), 0.0)
    slant = 1 + 16 * (0.53 - elevation_sc) ** 3
    return np.asarray(slant * (_NIGHT_S + day) * SPEED_OF_LIGHT_M_S * (L1_HZ / frequency_hz) ** 2)


def ntcm(
    coefficients: Sequence[float], lat: npt.ArrayLike, lon: npt.ArrayLike, elevation: npt.ArrayLike,
    azimuth: npt.ArrayLike, times: Times,
) -> tuple[Floats, Floats]:  # fmt: skip
    """Slant and vertical content [TECU] of NTCM-G (model description 1.0, 2022), pierce points at 450 km.

    coefficients  ai0, ai1, ai2 of the Galileo message (`ionosphere["GAL"]`)
    lat, lon, elevation, azimuth  degrees, of the receiver and from it; times GPS time, taken as UT
    """
    # The description takes the arc sine for the longitude, also where a ray passes over the pole; so do its examples.
    pierce_lat, _ = pierce(lat, lon, elevation, azimuth, _NTCM_HEIGHT_M)
    away_rad = np.radians(earth_angle(elevation, _NTCM_HEIGHT_M))
    east = np.sin(away_rad) * np.sin(np.radians(azimuth)) / np.cos(np.radians(pierce_lat))
    pierce_lon = np.asarray(lon, dtype=np.float64) + np.degrees(np.arcsin(np.clip(east, -1.0, 1.0)))
    vertical = ntcm_vertical(coefficients, pierce_lat, pierce_lon, times)
    zenith_rad = np.radians(90.0 - np.asarray(elevation, dtype=np.float64))
    sine = 6371.0 / (6371.0 + 450.0) * np.sin(0.9782 * zenith_rad)
    return np.asarray(vertical / np.sqrt(1 - sine**2)), vertical


def ntcm_vertical(coefficients: Sequence[float], lat: npt.ArrayLike, lon: npt.ArrayLike, times: Times) -> Floats:
    """Vertical content [TECU] of NTCM-G at places [deg] and times."""
    a0, a1, a2 = coefficients[:3]
    activity = np.sqrt(a0**2 + 1633.33 * a1**2 + 4_802_000 * a2**2 + 3266.67 * a0 * a2)
    instants = np.asarray(times, dtype="datetime64[ns]")
    days = instants.astype("datetime64[D]")
    day_of_year = (days - days.astype("datetime64[Y]").astype("datetime64[D]")).astype(np.float64) + 1
    lat_rad, lon_deg = np.radians(lat), np.asarray(lon, dtype=np.float64)
    local_h = _second_of_day(instants) / 3600 + lon_deg / 15
    sun_rad = np.radians(23.44 * np.sin(np.radians(0.9856 * (day_of_year - 80.7))))
    k1, k2, k3, k4, k5, k6, k7, k8, k9, k10, k11, k12 = _K
    day, half, third = 2 * np.pi * (local_h - 14) / 24, 2 * np.pi * local_h / 12, 2 * np.pi * local_h / 8
    height_of_sun = np.cos(lat_rad - sun_rad)
    daily = (height_of_sun + 0.4) + (height_of_sun - 2 / np.pi * lat_rad * np.sin(sun_rad)) * (
        k1 * np.cos(day) + k2 * np.cos(half) + k3 * np.sin(half) + k4 * np.cos(third) + k5 * np.sin(third)
    )
    yearly = 1 + k6 * np.cos(2 * np.pi * (day_of_year - 18) / 365.25)
    yearly = yearly + k7 * np.cos(4 * np.pi * (day_of_year - 6) / 365.25)
    pole_rad = np.radians(_NTCM_POLE_LAT)
    sine = np.sin(lat_rad) * np.sin(pole_rad) + np.cos(lat_rad) * np.cos(pole_rad) * np.cos(
        np.radians(lon_deg - _NTCM_POLE_LON)
    )
    magnetic_rad = np.arcsin(np.clip(sine, -1.0, 1.0))
    magnetic = np.degrees(magnetic_rad)
    latitudinal = 1 + k8 * np.cos(magnetic_rad)
    north, south = (magnetic - 16) / 12, (magnetic + 10) / 13
    crests = 1 + k9 * np.exp(-(north**2) / 2) + k10 * np.exp(-(south**2) / 2)
    return np.asarray(daily * yearly * latitudinal * crests * (k11 + k12 * activity))


def _second_of_day(times: Times) -> Floats:
    """Seconds since midnight."""
    instants = np.asarray(times, dtype="datetime64[ns]")
    return np.asarray((instants - instants.astype("datetime64[D]")).astype(np.int64) / 1e9)
