"""Vertical content between the nodes and epochs of maps: the rules of IONEX 1.0, section 3.

Four nodes around a place, two maps around a time.  Maps turn with the Sun between their epochs where asked: the day's
bulge stays under the Sun while the Earth turns away below.  A place without all four nodes and a time outside the
maps are NaN.  Our own maps are read at the geocentric latitudes that such files count (section 2).  Never extrapolates,
never smooths.
"""

from dataclasses import replace

import numpy as np
import numpy.typing as npt

from skylag.errors import NotEnough
from skylag.ionosphere.geometry import geocentric_latitude, geodetic_latitude, mapping, pierce
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


def at_geocentric_rows(maps: Fields) -> Fields:
    """Content and its sigma of our maps on rows that are regular in geocentric latitude; `lats` are geocentric.

    Values are read between two rows of the map, linear in latitude: NaN where either of them is, never beyond the first
    or last row.  The other layers are empty.  The rows: see `_geocentric_rows`.
    """
    rows = _geocentric_rows(maps.lats)
    vtec, sigma = vertical_at(
        maps, geodetic_latitude(rows)[:, None], maps.lons, maps.times[:, None, None], turning=False
    )  # fmt: skip
    blank = np.full(vtec.shape, np.nan, dtype=np.float32)
    return replace(
        maps, lats=rows, vtec=vtec.astype(np.float32), vtec_sigma=sigma.astype(np.float32),
        support=np.zeros(vtec.shape, dtype=np.uint16), slope=blank, slope_sigma=blank, slope_east=blank,
        slope_north=blank, state=np.zeros(vtec.shape, dtype=np.uint8),
    )  # fmt: skip


def _geocentric_rows(lats: Floats) -> Floats:
    """Geocentric latitudes on whole tenths of a degree, the map's own step apart, that lie within its rows.

    Of the places where such rows may begin the one that loses fewest, and of those the one whose rows lie closest to
    the map's, so that least is taken between two.  Both counts give the map nearly the same width, so that all its rows
    would have to lie on tenths for none to be lost: mostly one is.  A map of two rows has room for a finer step only.
    Raises NotEnough where not even two rows of the finest step lie within.
    """
    own = geocentric_latitude(lats)
    first, last = (int(np.ceil(own[0] * 10.0 - 1e-9)), int(np.floor(own[-1] * 10.0 + 1e-9))) if len(own) > 1 else (0, 0)
    if last <= first:
        raise NotEnough(
            f"the map's rows, {', '.join(f'{lat:g}' for lat in lats[:3])} N, leave no room for two geocentric "
            "latitudes on tenths of a degree: take a larger region",
            had=len(lats), needed=3, where="latitudes",
        )  # fmt: skip
    step = min(max(round(float(lats[1] - lats[0]) * 10.0), 1), last - first)
    choices = [np.arange(first + k, last + 1e-9, step) / 10.0 for k in range(step)]
    most = max(len(rows) for rows in choices)
    return min(
        (rows for rows in choices if len(rows) == most), key=lambda rows: float(_away(rows, own).sum())
    )  # fmt: skip


def _away(rows: Floats, own: Floats) -> Floats:
    """How far each row is from the nearest of the map's own [deg]."""
    return np.asarray(np.abs(rows[:, None] - own[None, :]).min(axis=1))


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
