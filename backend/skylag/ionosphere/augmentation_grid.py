"""The standard grid points of satellite-based augmentation, and the field at them.

Points and their numbers as the standard has them; the vertical delay there is on the standard's shell, so that a user
who maps it with the standard's function gets the slant delay that was measured.  Never says whether a message may be
sent: that takes an integrity analysis this work does not have.

Source: RTCA DO-229, appendix A: bands of grid points (table A-14), shell of 350 km, obliquity factor (A.4.4.10.4).
"""

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from skylag.constants import L1_M_PER_TECU, SBAS_EARTH_RADIUS_M, SBAS_SHELL_HEIGHT_M
from skylag.errors import Refused
from skylag.ionosphere.covariance import plane_km
from skylag.ionosphere.field import FieldChoices, at_places
from skylag.ionosphere.geometry import geodetic, mapping, pierce
from skylag.ionosphere.irregularity import planar_fit
from skylag.tables import Floats, Ints, Samples, Times

# Point selection of the planar fit: nearest first within 800 km, then farther up to 30 points and 2100 km, at least 10;
# spread of vertical delay about a plane on a nominal day 0.35 m (Walter et al. 2000; from memory).
_NEAR_KM, _FAR_KM, _ENOUGH, _LEAST, _SPREAD_M = 800.0, 2100.0, 30, 10, 0.35


@dataclass(frozen=True)
class GridPoints:
    """Grid points: band (0 to 10) and number within it (from 1), latitude and longitude [deg]."""

    band: Ints
    number: Ints
    lat: Floats
    lon: Floats

    def __len__(self) -> int:
        return len(self.band)


@dataclass(frozen=True)
class GridDelays:
    """At epochs and grid points (T, N): vertical delay and sigma [m on 1575.42 MHz], lines of sight near, and the
    chi-square of the local planar fit with its limit (NaN where fewer than 10 pierce points are within reach)."""

    times: Times
    points: GridPoints
    delay_m: Floats
    sigma_m: Floats
    support: Ints
    chi_square: Floats
    limit: Floats


def all_points() -> GridPoints:
    """The 1808 points of bands 0 to 8 and the 192 each of bands 9 (north) and 10 (south)."""
    rows: list[tuple[int, int, float, float]] = []
    narrow = [float(lat) for lat in range(-55, 56, 5)]
    wide = [-75.0, -65.0, *narrow, 65.0, 75.0]
    for band in range(9):
        number = 0
        for lon in range(-180 + 40 * band, -180 + 40 * band + 40, 5):
            column = wide if lon % 10 == 0 else narrow
            if lon in (-180, -90, 0, 90):
                column = [*column, 85.0]
            elif lon in (-140, -50, 40, 130):
                column = [-85.0, *column]
            for lat in column:
                number += 1
                rows.append((band, number, lat, float(lon)))
    for band, sign, first_of_85 in ((9, 1.0, -180), (10, -1.0, -170)):
        number = 0
        for lat, step, first in ((60, 5, -180), (65, 10, -180), (70, 10, -180), (75, 10, -180), (85, 30, first_of_85)):
            for lon in range(first, 180, step):
                number += 1
                rows.append((band, number, sign * lat, float(lon)))
    band_column, number_column, lat_column, lon_column = zip(*rows, strict=True)
    return GridPoints(np.array(band_column), np.array(number_column), np.array(lat_column), np.array(lon_column))


def points_in(south: float, north: float, west: float, east: float) -> GridPoints:
    """The grid points of a region [deg], its edges included; west to east may cross 180 degrees.

    Raises Refused where north is not above south.
    """
    if not south < north:
        raise Refused(
            f"grid points: north {north:g} must be above south {south:g}", name="north", value=north, allowed=south
        )
    every = all_points()
    inside = (every.lat >= south) & (every.lat <= north)
    inside &= np.mod(every.lon - west, 360.0) <= min(east - west, 360.0)
    return GridPoints(every.band[inside], every.number[inside], every.lat[inside], every.lon[inside])


def on_the_standard_shell(samples: Samples) -> Samples:
    """The same calibrated slant contents, placed at 350 km and mapped as the standard maps."""
    rays = samples.rays
    lat, lon, _ = geodetic(np.array([receiver.position_m for receiver in rays.receivers], dtype=np.float64))
    pierce_lat, pierce_lon = pierce(
        lat[rays.receiver], lon[rays.receiver], rays.elevation, rays.azimuth, SBAS_SHELL_HEIGHT_M, SBAS_EARTH_RADIUS_M
    )
    factor = mapping(rays.elevation, SBAS_SHELL_HEIGHT_M, SBAS_EARTH_RADIUS_M)
    scale = rays.mapping / factor
    names = ("sigma", "arc_sigma", "receiver_sigma", "own_sigma", "bias_factor", "lean_shell", "lean_high")
    placed = replace(
        rays, pierce_lat=pierce_lat, pierce_lon=pierce_lon, mapping=factor, shell_height_m=SBAS_SHELL_HEIGHT_M
    )
    return replace(
        samples, rays=placed, vtec=samples.stec / factor, **{name: getattr(samples, name) * scale for name in names}
    )


def delays_at(samples: Samples, points: GridPoints, epochs: Times, choices: FieldChoices | None = None) -> GridDelays:
    """The field at grid points, and the test whether a plane fits around each.

    Raises Refused where there is no point.
    """
    if not len(points):
        raise Refused(
            "grid points: none given; a region of less than 5 degrees may hold none, widen it", name="points", value=0,
            allowed="at least one",
        )  # fmt: skip
    placed = on_the_standard_shell(samples)
    content, sigma, support = at_places(placed, points.lat, points.lon, epochs, choices)
    chi_square, limit = planar_fits(placed, points.lat, points.lon, epochs)
    return GridDelays(
        epochs, points, np.asarray(content, dtype=np.float64) * L1_M_PER_TECU,
        np.asarray(sigma, dtype=np.float64) * L1_M_PER_TECU, support.astype(np.int64), chi_square, limit,
    )  # fmt: skip


def planar_facts(samples: Samples, box: tuple[float, float, float, float], epochs: Times) -> dict[str, Any]:
    """The fit test kept with a day's maps: of each hour the worst chi-square over its limit at the standard points.

    box  south, north, west, east [deg]; where no standard point lies in it, its middle stands for them.  Above one the
    region is no plane around that point at that hour.
    """
    points = points_in(*box)
    lat, lon = points.lat, points.lon
    if not len(points):
        lat, lon = np.array([0.5 * (box[0] + box[1])]), np.array([0.5 * (box[2] + box[3])])
    placed = on_the_standard_shell(samples)
    chi_square, limit = planar_fits(placed, lat, lon, epochs)
    hour = epochs.astype("datetime64[h]")
    with np.errstate(invalid="ignore"):
        share = np.where(np.isfinite(chi_square), chi_square / limit, -1.0)
    worst = {
        str(one): [round(float(value), 3) if value >= 0.0 else None for value in share[hour == one].max(axis=0)]
        for one in np.unique(hour)
    }
    return {
        "points": [[round(float(a), 3), round(float(b), 3)] for a, b in zip(lat, lon, strict=True)],
        "worst_chi_square_over_limit": worst,
        "maps_not_planar": int((share > 1.0).any(axis=1).sum()),
    }


def rows_of(delays: GridDelays) -> tuple[Times, list[tuple[int, int, float, float]], tuple[npt.NDArray[Any], ...]]:
    """Times, points as (band, number, latitude, longitude), and the layers, as tables take them."""
    points = delays.points
    places = [
        (int(band), int(number), float(lat), float(lon))
        for band, number, lat, lon in zip(points.band, points.number, points.lat, points.lon, strict=True)
    ]
    return delays.times, places, (delays.delay_m, delays.sigma_m, delays.support, delays.chi_square, delays.limit)


def planar_fits(
    samples: Samples, lat: Floats, lon: Floats, epochs: Times, minimum_elevation: float = 15.0
) -> tuple[Floats, Floats]:
    """Chi-square of the local planar fit around places [deg], and its limit; (epochs, places), NaN where too few rays.

    One ray per arc and epoch, the nearest in time.
    """
    rays = samples.rays
    chi_square = np.full((len(epochs), len(lat)), np.nan)
    limit = chi_square.copy()
    half = np.timedelta64(round(0.75 * rays.interval_s * 1e9), "ns")
    high = np.flatnonzero((rays.elevation >= minimum_elevation) & np.isfinite(samples.vtec))
    high = high[np.argsort(rays.time[high], kind="stable")]
    first, last = (np.searchsorted(rays.time[high], epochs + shift) for shift in (-half, half))
    for number in range(len(epochs)):
        rows = high[first[number] : last[number]]
        rows = rows[np.argsort(np.abs(rays.time[rows] - epochs[number]), kind="stable")]
        rows = rows[np.unique(rays.arc[rows], return_index=True)[1]]
        measured_m = np.hypot(samples.own_sigma[rows], samples.arc_sigma[rows]) * L1_M_PER_TECU
        for place in range(len(lat)):
            east, north = plane_km(rays.pierce_lat[rows], rays.pierce_lon[rows], (float(lat[place]), float(lon[place])))
            away = np.hypot(east, north)
            order = np.argsort(away)
            reach = away[order[_ENOUGH - 1]] if len(order) >= _ENOUGH else np.inf
            taken = away <= min(max(_NEAR_KM, reach), _FAR_KM)
            if taken.sum() < _LEAST:
                continue
            fit = planar_fit(
                east[taken], north[taken], samples.vtec[rows[taken]] * L1_M_PER_TECU,
                np.hypot(measured_m[taken], _SPREAD_M),
            )  # fmt: skip
            chi_square[number, place], limit[number, place] = fit["chi_square"], fit["limit"]
    return chi_square, limit
