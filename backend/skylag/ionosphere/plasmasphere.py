"""The shape of the content above the shell's reach: a thin, high, one-sided share of the slant content.

A thin shell at a few hundred kilometres stands well for the dense layer and badly for the plasmasphere, which begins
around a thousand kilometres, reaches to the satellites, and thins away from the magnetic equator.  What this module
gives is only a shape; its amplitude is found from the data of the day.  Never used as truth.
"""

import numpy as np

from skylag.constants import SHELL_EARTH_RADIUS_M
from skylag.tables import Floats, Rays

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
# Gauss-Legendre in the logarithm of geocentric radius: dense where the plasma is.
_NODES = np.polynomial.legendre.leggauss(14)


# Between the shape and its neighbour, whose exponent is larger by this, the shape's change is taken.
_EXPONENT_STEP = 0.5


def slant_shape(
    lat: Floats, lon: Floats, elevation: Floats, azimuth: Floats, foot_exponent: float = FOOT_EXPONENT
) -> Floats:
    """Slant content [TECU] of the model plasmasphere from 1000 km to the satellites along rays, any one shape.

    lat, lon  of the ground end of the ray; elevation, azimuth there [deg]; straight rays, spherical Earth.
    foot_exponent  how the density grows along a field line toward its feet
    """
    return _shape_and_change(lat, lon, elevation, azimuth, foot_exponent)[0]


def _shape_and_change(
    lat: Floats, lon: Floats, elevation: Floats, azimuth: Floats, foot_exponent: float = FOOT_EXPONENT
) -> tuple[Floats, Floats]:
    """The shape, and how it changes per unit of the foot exponent [TECU]."""
    lat_rad, lon_rad = np.radians(lat), np.radians(lon)
    elevation_rad, azimuth_rad = np.radians(elevation), np.radians(azimuth)
    low = np.log(SHELL_EARTH_RADIUS_M + BASE_HEIGHT_M)
    high = np.log(SHELL_EARTH_RADIUS_M + TOP_HEIGHT_M)
    total, steeper = np.zeros(np.shape(elevation)), np.zeros(np.shape(elevation))
    cos_e, sin_e = np.cos(elevation_rad), np.sin(elevation_rad)
    pole_lat, pole_lon = np.radians(_POLE_LAT), np.radians(_POLE_LON)
    # The sine of magnetic latitude is linear in the unit vector: its share straight up and its share along the ray.
    sin_up = np.sin(lat_rad) * np.sin(pole_lat) + np.cos(lat_rad) * np.cos(pole_lat) * np.cos(lon_rad - pole_lon)
    north = np.cos(lat_rad) * np.sin(pole_lat) - np.sin(lat_rad) * np.cos(pole_lat) * np.cos(lon_rad - pole_lon)
    east = -np.cos(pole_lat) * np.sin(lon_rad - pole_lon)
    sin_along = north * np.cos(azimuth_rad) + east * np.sin(azimuth_rad)
    for node, weight in zip(*_NODES, strict=True):
        r = np.exp(0.5 * (high - low) * node + 0.5 * (high + low))
        sine = SHELL_EARTH_RADIUS_M * cos_e / r
        cosine = np.sqrt(1.0 - sine**2)
        # The angle at the Earth's centre is 90 deg less elevation less the angle at the node.
        cos_psi, sin_psi = sin_e * cosine + cos_e * sine, cos_e * cosine - sin_e * sine
        sin_magnetic = sin_up * cos_psi + sin_along * sin_psi
        shell_l = r / SHELL_EARTH_RADIUS_M / np.maximum(1.0 - sin_magnetic**2, 1e-3)
        density = 10.0 ** (_LOG_DENSITY + _LOG_SLOPE * np.minimum(shell_l, 20.0)) * 1e6
        density /= 1.0 + np.exp(np.clip((shell_l - _PLASMAPAUSE_L) / _PLASMAPAUSE_WIDTH, -50, 50))
        # ds = dr / sqrt(1 - sin^2) along the ray, dr = r d(log r)
        foot = shell_l * SHELL_EARTH_RADIUS_M / r
        density *= weight * r / cosine * foot**foot_exponent
        total += density
        steeper += density * foot**_EXPONENT_STEP
    scale = 0.5 * (high - low) / 1e16
    return total * scale, (steeper - total) * (scale / _EXPONENT_STEP)


def vertical_shape(lat: Floats, lon: Floats) -> Floats:
    """Vertical content [TECU] of the model plasmasphere above places; any one shape."""
    return slant_shape(lat, lon, np.full(np.shape(lat), 90.0), np.zeros(np.shape(lat)))


def along_rays(rays: Rays, lat: Floats, lon: Floats) -> tuple[Floats, Floats, Floats, Floats]:
    """Shape of every ray, slant and straight up at its pierce point, and how both change per unit of foot exponent.

    lat, lon  (rays,) geocentric place of the receiver [deg].  All (rays,) [TECU].  Worked out once in five minutes of
    each arc: the shape changes slowly along a pass, straight interpolation errs by some hundredths of a TECU at most.
    """
    order = np.lexsort((rays.time, rays.arc))
    arc = rays.arc[order]
    seconds = (rays.time[order] - rays.time.min()).astype("timedelta64[ns]").astype(np.int64) / 1e9
    block = seconds // 300.0
    new = np.ones(len(order), dtype=bool)
    new[1:] = (arc[1:] != arc[:-1]) | (block[1:] != block[:-1])
    last = np.ones(len(order), dtype=bool)
    last[:-1] = arc[1:] != arc[:-1]
    node = np.flatnonzero(new | last)
    at = order[node]
    overhead = np.full(len(at), 90.0)
    # One axis for all arcs: arcs stand far apart on it, so that interpolation never reaches across.
    axis = arc * 1e7 + seconds
    slant, slant_change = _shape_and_change(lat[at], lon[at], rays.elevation[at], rays.azimuth[at])
    above, above_change = _shape_and_change(rays.pierce_lat[at], rays.pierce_lon[at], overhead, 0.0 * overhead)
    found = []
    for values in (slant, above, slant_change, above_change):
        along = np.empty(len(order))
        along[order] = np.interp(axis, axis[node], values)
        found.append(along)
    return found[0], found[1], found[2], found[3]
