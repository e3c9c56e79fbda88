"""The shape of the content above the shell's reach: a thin, high, one-sided share of the slant content.

A thin shell at a few hundred kilometres stands well for the dense layer and badly for the plasmasphere, which begins
around a thousand kilometres, reaches to the satellites, and thins away from the magnetic equator.  What this module
gives is only a shape; its amplitude is found from the data of the day.  Never used as truth.
"""

import numpy as np

from skylag.constants import SHELL_EARTH_RADIUS_M
from skylag.tables import Floats

# Saturated plasmasphere: log10 of the equatorial density [cm^-3] falls linearly with L (Carpenter and Anderson 1992,
# J. Geophys. Res. 97, 1097-1108; coefficients from memory).
_LOG_DENSITY, _LOG_SLOPE = 3.9043, -0.3145
# Along a field line the density grows toward its feet as a power of (top radius / radius); inside the plasmasphere the
# exponent is about 1, mostly between 0 and 2 (Denton et al. 2004, J. Geophys. Res. 109, A03215; from memory).
FOOT_EXPONENT, FOOT_EXPONENT_SIGMA = 1.0, 0.5
# Outside the plasmapause the density falls by one to two orders of magnitude; a quiet plasmapause lies near L = 4.5
# (5.6 - 0.46 Kp, the same paper; from memory).
_PLASMAPAUSE_L, _PLASMAPAUSE_WIDTH = 4.5, 0.3
# North pole of the centred dipole of 2020 (IGRF coefficients g10, g11, h11).
_POLE_LAT, _POLE_LON = 80.589, -72.680
BASE_HEIGHT_M, TOP_HEIGHT_M = 1.0e6, 2.02e7
_NODES = 14


def slant_shape(
    lat: Floats, lon: Floats, elevation: Floats, azimuth: Floats, foot_exponent: float = FOOT_EXPONENT
) -> Floats:
    """Slant content [TECU] of the model plasmasphere from 1000 km to the satellites along rays, any one shape.

    lat, lon  of the ground end of the ray; elevation, azimuth there [deg]; straight rays, spherical Earth.
    foot_exponent  how the density grows along a field line toward its feet
    """
    lat_rad, lon_rad = np.radians(lat), np.radians(lon)
    elevation_rad, azimuth_rad = np.radians(elevation), np.radians(azimuth)
    # Gauss-Legendre in the logarithm of geocentric radius: dense where the plasma is.
    nodes, weights = np.polynomial.legendre.leggauss(_NODES)
    low = np.log(SHELL_EARTH_RADIUS_M + BASE_HEIGHT_M)
    high = np.log(SHELL_EARTH_RADIUS_M + TOP_HEIGHT_M)
    total = np.zeros(np.shape(elevation))
    sin_lat, cos_lat = np.sin(lat_rad), np.cos(lat_rad)
    cos_e = np.cos(elevation_rad)
    pole_lat, pole_lon = np.radians(_POLE_LAT), np.radians(_POLE_LON)
    for node, weight in zip(nodes, weights, strict=True):
        r = np.exp(0.5 * (high - low) * node + 0.5 * (high + low))
        sine = SHELL_EARTH_RADIUS_M * cos_e / r
        psi = np.pi / 2 - elevation_rad - np.arcsin(sine)
        sin_at = sin_lat * np.cos(psi) + cos_lat * np.sin(psi) * np.cos(azimuth_rad)
        at_lat = np.arcsin(np.clip(sin_at, -1, 1))
        at_lon = lon_rad + np.arctan2(np.sin(psi) * np.sin(azimuth_rad) * cos_lat, np.cos(psi) - sin_lat * sin_at)
        sin_magnetic = sin_at * np.sin(pole_lat) + np.cos(at_lat) * np.cos(pole_lat) * np.cos(at_lon - pole_lon)
        shell_l = r / SHELL_EARTH_RADIUS_M / np.maximum(1.0 - sin_magnetic**2, 1e-3)
        density = 10.0 ** (_LOG_DENSITY + _LOG_SLOPE * np.minimum(shell_l, 20.0)) * 1e6
        density /= 1.0 + np.exp(np.clip((shell_l - _PLASMAPAUSE_L) / _PLASMAPAUSE_WIDTH, -50, 50))
        # ds = dr / sqrt(1 - sin^2) along the ray, dr = r d(log r)
        density *= (shell_l * SHELL_EARTH_RADIUS_M / r) ** foot_exponent
        total += weight * density * r / np.sqrt(1.0 - sine**2)
    return np.asarray(total * 0.5 * (high - low) / 1e16)


def vertical_shape(lat: Floats, lon: Floats) -> Floats:
    """Vertical content [TECU] of the model plasmasphere above places; any one shape."""
    return slant_shape(lat, lon, np.full(np.shape(lat), 90.0), np.zeros(np.shape(lat)))
