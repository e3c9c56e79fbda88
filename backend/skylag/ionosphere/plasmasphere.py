"""The shape of the content above the shell's reach: a thin, high, one-sided share of the slant content.

A thin shell at a few hundred kilometres stands well for the dense layer and badly for the plasmasphere, which begins
around a thousand kilometres, reaches to the satellites, and thins away from the magnetic equator.  What this module
gives is only a shape; its amplitude is found from the data of the day.  Never used as truth.
"""

from dataclasses import dataclass

import numpy as np

from skylag.constants import SHELL_EARTH_RADIUS_M
from skylag.tables import Floats, Ints, Rays

# Saturated plasmasphere: log10 of the equatorial density [cm^-3] falls linearly with L (Carpenter and Anderson 1992,
# J. Geophys. Res. 97, 1097-1108; coefficients from memory).
_LOG_DENSITY, _LOG_SLOPE = 3.9043, -0.3145
# Along a field line the density grows toward its feet as a power of (top radius / radius); inside the plasmasphere the
# exponent is about 1, mostly between 0 and 2 (Denton et al. 2004, J. Geophys. Res. 109, A03215; from memory).  Real
# days need not follow the power law at all, so the whole of that range is taken as one sigma.
FOOT_EXPONENT, FOOT_EXPONENT_SIGMA = 1.0, 1.0
# A plasmasphere of another shape can look like none of this one and still pull the biases: what may hide so is taken to
# be as strong as the usual one.
HIDDEN_AMPLITUDE = 1.0
# Outside the plasmapause the density falls by one to two orders of magnitude; a quiet plasmapause lies near L = 4.5
# (5.6 - 0.46 Kp, the same paper; from memory).
_PLASMAPAUSE_L, _PLASMAPAUSE_WIDTH = 4.5, 0.3
# North pole of the centred dipole of 2020 (IGRF coefficients g10, g11, h11).
_POLE_LAT, _POLE_LON = 80.589, -72.680
BASE_HEIGHT_M, TOP_HEIGHT_M = 1.0e6, 2.02e7
# Gauss-Legendre in the logarithm of geocentric radius: dense where the plasma is.
_NODES = np.polynomial.legendre.leggauss(14)


# Once a day's data have told the exponent, what the shape still lacks is taken as so much of exponent: for a network,
# and for fewer than four receivers, which tell slopes of the dense layer and the plasmasphere's one side less well
# apart.  Calibrated on invented days with plasmaspheres of other shapes (tests/simulated/test_other_plasmaspheres.py).
FOOT_EXPONENT_REST, FOOT_EXPONENT_REST_FEW = 0.33, 0.67
# Exponents at which shapes are worked out; between them the logarithm of a shape is taken as a parabola.
_EXPONENTS = (0.0, 1.0, 2.0)


def slant_shape(
    lat: Floats, lon: Floats, elevation: Floats, azimuth: Floats, foot_exponent: float = FOOT_EXPONENT
) -> Floats:
    """Slant content [TECU] of the model plasmasphere from 1000 km to the satellites along rays, any one shape.

    lat, lon  of the ground end of the ray; elevation, azimuth there [deg]; straight rays, spherical Earth.
    foot_exponent  how the density grows along a field line toward its feet
    """
    return np.asarray(_shapes(lat, lon, elevation, azimuth, (foot_exponent,))[0])


def _shapes(
    lat: Floats, lon: Floats, elevation: Floats, azimuth: Floats, exponents: tuple[float, ...]
) -> Floats:
    """The shape for each exponent, (exponents, ...) [TECU]."""
    lat_rad, lon_rad = np.radians(lat), np.radians(lon)
    elevation_rad, azimuth_rad = np.radians(elevation), np.radians(azimuth)
    low = np.log(SHELL_EARTH_RADIUS_M + BASE_HEIGHT_M)
    high = np.log(SHELL_EARTH_RADIUS_M + TOP_HEIGHT_M)
    total = np.zeros((len(exponents), *np.shape(elevation)))
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
        density *= weight * r / cosine
        for number, exponent in enumerate(exponents):
            total[number] += density * foot**exponent
    return np.asarray(total * (0.5 * (high - low) / 1e16))


def vertical_shape(lat: Floats, lon: Floats) -> Floats:
    """Vertical content [TECU] of the model plasmasphere above places; any one shape."""
    return slant_shape(lat, lon, np.full(np.shape(lat), 90.0), np.zeros(np.shape(lat)))


@dataclass(frozen=True)
class HighLayer:
    """The shape of rays, for any foot exponent: logarithms at three of them, each (3, N).

    slant_log  along the rays; above_log straight up at their pierce points
    """

    slant_log: Floats
    above_log: Floats

    def slant(self, exponent: float) -> tuple[Floats, Floats]:
        """Slant shape (N,) [TECU] and its change per unit of the exponent."""
        return _between(self.slant_log, exponent)

    def above(self, exponent: float) -> tuple[Floats, Floats]:
        """Vertical shape at the pierce points (N,) [TECU] and its change per unit of the exponent."""
        return _between(self.above_log, exponent)

    def where(self, chosen: Ints) -> "HighLayer":
        """The rays chosen by row numbers."""
        return HighLayer(self.slant_log[:, chosen], self.above_log[:, chosen])


def _between(logs: Floats, exponent: float) -> tuple[Floats, Floats]:
    """Value and derivative of the parabola through the logarithms at 0, 1, 2, as a value."""
    bend = 0.5 * (logs[0] - 2.0 * logs[1] + logs[2])
    tilt = 0.5 * (logs[2] - logs[0])
    away = exponent - _EXPONENTS[1]
    value = np.exp(logs[1] + away * (tilt + away * bend))
    return value, value * (tilt + 2.0 * away * bend)


def along_rays(rays: Rays, lat: Floats, lon: Floats) -> HighLayer:
    """The shape of every ray.

    lat, lon  (rays,) geocentric place of the receiver [deg].  Worked out once in five minutes of each arc: the shape
    changes slowly along a pass, straight interpolation errs by some hundredths of a TECU at most.
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
    slant = _shapes(lat[at], lon[at], rays.elevation[at], rays.azimuth[at], _EXPONENTS)
    above = _shapes(rays.pierce_lat[at], rays.pierce_lon[at], overhead, 0.0 * overhead, _EXPONENTS)
    found = np.empty((6, len(order)))
    for number, values in enumerate((*slant, *above)):
        # Far outside the plasmapause next to nothing is left; a millionth of a TECU keeps the logarithm.
        found[number, order] = np.interp(axis, axis[node], np.log(np.maximum(values, 1e-6)))
    return HighLayer(found[:3], found[3:])
