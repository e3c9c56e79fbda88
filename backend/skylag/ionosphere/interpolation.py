"""Vertical content between the nodes and epochs of maps: the rules of IONEX 1.0, section 3.

Four nodes around a place, two maps around a time.  Maps turn with the Sun between their epochs where asked: the day's
bulge stays under the Sun while the Earth turns away below.  A place without all four nodes and a time outside the
maps are NaN.  Never extrapolates, never smooths.
"""

import numpy as np
import numpy.typing as npt

from skylag.errors import NotEnough
from skylag.ionosphere.geometry import mapping, pierce
from skylag.tables import Fields, Floats, Ints, Times

_DEGREES_PER_SECOND = 360.0 / 86_400.0


def vertical_at(
    maps: Fields, lat: npt.ArrayLike, lon: npt.ArrayLike, times: Times, turning: bool = True
) -> tuple[Floats, Floats]:  # fmt: skip
    """Vertical content and its sigma [TECU] at places [deg] and times, arrays of one shape.

    turning  maps are turned with the Sun before the mean in time is taken (the way the format's makers recommend)
    Latitudes are those of the maps: geocentric ones for maps of IONEX files.
    The sigma is the mean of those of the nodes: errors of neighbouring nodes are much alike.
    Raises NotEnough when there is no map.
    """
    if not len(maps.times):
        raise NotEnough("maps: none was given to read from; at least one is needed", had=0, needed=1, where="maps")
    where_lat, where_lon, instants = np.broadcast_arrays(
        np.asarray(lat, dtype=np.float64), np.asarray(lon, dtype=np.float64), np.asarray(times, dtype="datetime64[ns]")
    )
    epochs = maps.times.astype(np.int64)
    at = instants.astype(np.int64)
    later = np.clip(np.searchsorted(epochs, at, side="left"), min(1, len(epochs) - 1), len(epochs) - 1)
    earlier = np.maximum(later - 1, 0)
    span = np.where(later > earlier, epochs[later] - epochs[earlier], 1)
    share = np.where(later > earlier, (at - epochs[earlier]) / span, 0.0)
    inside = (at >= epochs[0]) & (at <= epochs[-1])
    results = []
    for layer in (maps.vtec, maps.vtec_sigma):
        value = np.zeros(at.shape)
        for number, weight in ((earlier, 1.0 - share), (later, share)):
            turned = where_lon + ((at - epochs[number]) / 1e9 * _DEGREES_PER_SECOND if turning else 0.0)
            node = _between_nodes(maps, layer, number, where_lat, turned)
            value = value + np.where(weight == 0, 0.0, weight * node)  # a map of no weight may lack the place
        results.append(np.where(inside, value, np.nan))
    return results[0], results[1]


def slant_at(
    maps: Fields, lat: npt.ArrayLike, lon: npt.ArrayLike, elevation: npt.ArrayLike, azimuth: npt.ArrayLike,
    times: Times, shell_height_m: float, turning: bool = False,
) -> tuple[Floats, Floats]:  # fmt: skip
    """Slant content and its sigma [TECU] for receivers at places [deg] looking up at elevation and azimuth [deg].

    The vertical content where the line of sight pierces the maps' shell, times the shell's mapping; arrays of one
    shape.  Sigma is the map's at the pierce point, mapped: what a single shell cannot say of a slanting line beside a
    wall is in it only as far as the map's own sigma holds it.  NaN at or below the horizon and outside the maps.
    """
    up = np.asarray(elevation, dtype=np.float64)
    upward = np.where(up > 0.0, up, 90.0)
    pierce_lat, pierce_lon = pierce(lat, lon, upward, azimuth, shell_height_m)
    content, sigma = vertical_at(maps, pierce_lat, pierce_lon, times, turning)
    factor = np.where(up > 0.0, mapping(upward, shell_height_m), np.nan)
    return content * factor, sigma * factor


def _between_nodes(maps: Fields, layer: npt.NDArray[np.float32], number: Ints, lat: Floats, lon: Floats) -> Floats:
    """Bilinear value of the maps with the given numbers; NaN outside the grid or beside a missing node."""
    lats, lons = maps.lats, maps.lons
    if len(lats) < 2 or len(lons) < 2:
        return np.full(lat.shape, np.nan)
    lat_step, lon_step = lats[1] - lats[0], lons[1] - lons[0]
    round_the_globe = lons[-1] - lons[0] + lon_step >= 360.0 - 1e-6
    east = np.mod(lon - lons[0], 360.0)
    if not round_the_globe:  # places just west of the first node are outside, not a turn away
        east = np.where(east > 360.0 - 1e-9, 0.0, east)
    q, p = (lat - lats[0]) / lat_step, east / lon_step
    south = np.clip(np.floor(q + 1e-12), 0, len(lats) - 2).astype(np.int64)
    west = np.floor(p + 1e-12).astype(np.int64)
    last = len(lons) - 1
    if round_the_globe:
        nodes_round = round(360.0 / lon_step)
        west, next_east = west % nodes_round, (west + 1) % nodes_round
        next_east = np.minimum(next_east, last)
        p = p - np.floor(p + 1e-12)
        outside = np.zeros(lat.shape, dtype=bool)
    else:
        outside = p > last + 1e-9
        west = np.clip(west, 0, last - 1)
        next_east = west + 1
        p = p - west
    q = q - south
    outside |= (q < -1e-9) | (q > 1 + 1e-9)
    value = np.zeros(lat.shape)
    for row, column, weight in (
        (south, west, (1 - p) * (1 - q)), (south, next_east, p * (1 - q)),
        (south + 1, west, (1 - p) * q), (south + 1, next_east, p * q),
    ):  # fmt: skip
        node = layer[number, row, column].astype(np.float64)
        value = value + np.where(np.abs(weight) < 1e-9, 0.0, weight * node)
    return np.asarray(np.where(outside, np.nan, value))
