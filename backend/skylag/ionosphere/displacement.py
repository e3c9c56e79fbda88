"""Where the content of a slanting ray belongs: a shell's height is known to tens of kilometres only.

A ray crosses a thick layer, so its content belongs some way before or behind its pierce point.  Where the map is steep
that is an error of slope times way; it goes into the sigma of the single ray.  The maps' own sigma has it by what
content departs from a plane around each place.  Never moves a pierce point, never touches a value.
"""

from dataclasses import replace

import numpy as np
import numpy.typing as npt

from skylag.constants import L1_M_PER_TECU, SHELL_EARTH_RADIUS_M
from skylag.ionosphere.geometry import earth_angle
from skylag.tables import Fields, Floats, Ints, Samples

_TECU_PER_MM = 1.0 / (1000.0 * L1_M_PER_TECU)


def pierce_moves_km(elevation: npt.ArrayLike, shell_height_m: float, higher_m: float) -> Floats:
    """How far away from the receiver [km on the ground] pierce points move when the shell stands so much higher."""
    angle = earth_angle(elevation, shell_height_m + higher_m) - earth_angle(elevation, shell_height_m)
    return np.asarray(np.radians(angle) * SHELL_EARTH_RADIUS_M / 1000.0)


def of_rays(samples: Samples, fields: Fields, height_sigma_m: float) -> Floats:
    """What one sigma of the shell's height does to each ray's vertical content [TECU]; 0 where no slope is known.

    The slope of the nearest cell of the nearest map (within one step of each), along the ray.
    """
    rays = samples.rays
    epoch = _nearest(fields.times.astype(np.int64).astype(np.float64), rays.time.astype(np.int64).astype(np.float64))
    row = _nearest(fields.lats, rays.pierce_lat)
    middle = 0.5 * float(fields.lons[0] + fields.lons[-1])
    column = _nearest(fields.lons, middle + np.mod(rays.pierce_lon - middle + 180.0, 360.0) - 180.0)
    known = (epoch >= 0) & (row >= 0) & (column >= 0)
    place = tuple(np.where(known, index, 0) for index in (epoch, row, column))
    azimuth_rad = np.radians(rays.azimuth)
    along = fields.slope_east[place] * np.sin(azimuth_rad) + fields.slope_north[place] * np.cos(azimuth_rad)
    away_km = pierce_moves_km(rays.elevation, rays.shell_height_m, height_sigma_m)
    known &= np.isfinite(along) & (fields.support[place] > 0)
    return np.asarray(np.where(known, np.abs(along * away_km) * _TECU_PER_MM, 0.0), dtype=np.float64)


def widened(samples: Samples, fields: Fields, height_sigma_m: float) -> Samples:
    """The samples, their sigma with what the height of the shell does to it where the maps are steep."""
    return replace(samples, sigma=np.hypot(samples.sigma, of_rays(samples, fields, height_sigma_m)))


def _nearest(axis: Floats, values: Floats) -> Ints:
    """Number of the nearest node; -1 farther than half a step beyond the ends."""
    if len(axis) < 2:
        return np.zeros(len(values), dtype=np.int64)
    number = np.searchsorted(0.5 * (axis[1:] + axis[:-1]), values)
    low, high = 1.5 * axis[0] - 0.5 * axis[1], 1.5 * axis[-1] - 0.5 * axis[-2]
    return np.where((values >= low) & (values <= high), number, -1)
