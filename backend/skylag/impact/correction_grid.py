"""The grid of points for which satellite-based augmentation sends vertical delays, and how well each could be known.

The standard grid, the steps of confidence and the user's interpolation are those of RTCA DO-229 (appendix A) and ICAO
Annex 10.  The confidence itself is estimated from the network's own lines of sight: kriged vertical delay and variance
at each point, a planar fit whose chi-square tells irregular from regular, and an allowance for slopes that the sampling
may have missed.  A point that is not well enough surrounded is not monitored.  Never reads a real service's messages:
this is what a service with just these receivers could say.
"""

from dataclasses import dataclass, field
from functools import lru_cache

import numpy as np
import numpy.typing as npt
from scipy.stats import chi2

from skylag.constants import L1_M_PER_TECU
from skylag.ionosphere import kriging
from skylag.ionosphere.augmentation_grid import all_points, on_the_standard_shell
from skylag.ionosphere.covariance import Epoch
from skylag.ionosphere.field import FieldChoices, prepare, systems
from skylag.tables import Bools, Floats, Ints, Samples, Times

# Steps of grid-point confidence: bound [m, 99.9 %] and variance [m^2] of each index.  RTCA DO-229, table A-17; the
# variance is (bound / 3.29)^2 rounded up to four decimals.  The sixteenth index, 15, is "not monitored".
CONFIDENCE_M = (0.3, 0.6, 0.9, 1.2, 1.5, 1.8, 2.1, 2.4, 2.7, 3.0, 3.6, 4.5, 6.0, 15.0, 45.0)
CONFIDENCE_VARIANCE_M2 = (0.0084, 0.0333, 0.0749, 0.1331, 0.2079, 0.2994, 0.4075, 0.5322, 0.6735, 0.8315, 1.1974,
                          1.8709, 3.3260, 20.7870, 187.0826)  # fmt: skip
HIGHEST_STEP, NOT_MONITORED = 14, 15
_LEARN_RAYS = 70
QUANTILE = 3.29  # of 99.9 %, two-sided, as the table has it


def step_of(bound_m: npt.ArrayLike) -> Ints:
    """Index of the smallest step that is not below a bound [m, 99.9 %]; 15 beyond the last, and for NaN."""
    bound = np.asarray(bound_m, dtype=np.float64)
    # A bound that is a step in the table stays that step; its last bits must not lift it.
    index = np.searchsorted(np.array(CONFIDENCE_M), bound - 1e-9, side="left")
    return np.asarray(np.where(np.isfinite(bound), index, NOT_MONITORED), dtype=np.int64)


def variance_of(step: npt.ArrayLike) -> Floats:
    """Variance [m^2] of confidence steps; NaN for "not monitored"."""
    table = np.array([*CONFIDENCE_VARIANCE_M2, np.nan])
    return np.asarray(table[np.asarray(step, dtype=np.int64)])


# ---------------------------------------------------------------------------------------------- the user's side


@dataclass(frozen=True)
class Corners:
    """Which grid points carry each place, (N, 4) in the order south-west, south-east, north-west, north-east.

    point   row numbers of grid points, -1 where the cell has none there
    weight  their shares, 0 where not used; all NaN where the place cannot be interpolated
    """

    point: Ints
    weight: Floats

    @property
    def usable(self) -> Bools:
        """Whether a place can be interpolated."""
        return np.isfinite(self.weight[:, 0])


def cell_weights(x: Floats, y: Floats, there: Bools) -> Floats:
    """Shares (N, 4) of the corners south-west, south-east, north-west, north-east; NaN where a place cannot be used.

    x, y   place within the cell from its south-west corner, 0 to 1 eastward and northward
    there  (N, 4) which corners are monitored
    Four corners: bilinear.  Three: the plane through them, within their triangle only.  RTCA DO-229, A.4.4.10.2-3.
    """
    four = np.stack([(1 - x) * (1 - y), x * (1 - y), (1 - x) * y, x * y], axis=1)
    # Away from the right-angled corner (the one across from the missing one), along the parallel and the meridian.
    zero = np.zeros(len(x))
    three = np.stack(
        [
            np.stack([zero, 1 - y, 1 - x, x + y - 1], axis=1),  # south-west missing: from the north-east corner
            np.stack([1 - y, zero, y - x, x], axis=1),  # south-east missing: from the north-west corner
            np.stack([1 - x, x - y, zero, y], axis=1),  # north-west missing: from the south-east corner
            np.stack([1 - x - y, x, y, zero], axis=1),  # north-east missing: from the south-west corner
        ],
        axis=1,
    )
    missing = (~there).sum(axis=1)
    which = np.argmin(there, axis=1)
    alone = three[np.arange(len(x)), which]
    inside = (alone >= -1e-12).all(axis=1)
    weight = np.where((missing == 0)[:, None], four, np.where(((missing == 1) & inside)[:, None], alone, np.nan))
    return np.asarray(weight)


class Lattice:
    """Finds the cell of the grid around places, by RTCA DO-229, A.4.4.10.2, for bands 0 to 8.

    Up to 60 degrees: the cell of 5 by 5 degrees with four or three monitored corners, else that of 10 by 10; bands 0 to
    8 have no rows between 55 and 65 and between 65 and 75, so only wide cells there.  Wide cells lie between
    multiples of ten degrees of longitude; of latitude too, save from 45 to 75 where the rows are 45, 55, 65, 75.
    From 75 to 85: two points at 75 and, between the points at 85 which stand 90 degrees apart, values interpolated to
    their longitudes.  Beyond: the four points at 85, with x and y of their own.  Both need all four points (the rules
    of the caps from memory).  The denser bands 9 and 10, which a service may send instead, are not in here.
    """

    _SOUTH = -90

    def __init__(self, lat: npt.ArrayLike, lon: npt.ArrayLike) -> None:
        self.lat = np.asarray(lat, dtype=np.int64)
        self.lon = np.asarray(lon, dtype=np.int64)
        self._index = np.full((37, 72), -1, dtype=np.int64)
        self._index[(self.lat - self._SOUTH) // 5, (self.lon + 180) // 5 % 72] = np.arange(len(self.lat))

    def _corners(self, lat: Floats, lon: Floats, south: Floats, height: Floats, west: Floats, width: float) -> tuple[
        Ints, Floats, Floats
    ]:  # fmt: skip
        row = ((south - self._SOUTH) // 5).astype(np.int64)
        high = row + (height // 5).astype(np.int64)
        column = ((west + 180) // 5).astype(np.int64) % 72
        right = (column + int(width // 5)) % 72
        rows = np.stack([row, row, high, high], axis=1).clip(0, 36)
        point = self._index[rows, np.stack([column, right, column, right], axis=1)]
        return point, (lon - west) / width, (lat - south) / height

    def around(self, lat: npt.ArrayLike, lon: npt.ArrayLike, monitored: Bools) -> Corners:
        """Corners of places [deg] (N,); monitored (N, points) or (points,) tells which points may be used."""
        lat = np.asarray(lat, dtype=np.float64)
        lon = np.mod(np.asarray(lon, dtype=np.float64) + 180.0, 360.0) - 180.0
        ones = np.ones(len(lat))
        narrow = self._corners(lat, lon, np.floor(lat / 5) * 5, 5 * ones, np.floor(lon / 5) * 5, 5.0)
        size = np.minimum(np.abs(lat), 75.0 - 1e-9)
        low = np.where(size < 45, np.floor(size / 10) * 10, np.floor((size - 5) / 10) * 10 + 5)
        high = np.where(size < 40, low + 10, np.where(size < 45, 50.0, low + 10))
        south = np.where(lat >= 0, low, -high)
        wide = self._corners(lat, lon, south, high - low, np.floor(lon / 10) * 10, 10.0)
        point = np.full((len(lat), 4), -1, dtype=np.int64)
        weight = np.full((len(lat), 4), np.nan)
        for found, x, y in (narrow, wide):
            there = found >= 0
            if monitored.ndim == 1:
                there &= monitored[found]
            else:
                there &= np.take_along_axis(monitored, np.maximum(found, 0), axis=1)
            tried = cell_weights(x, y, there)
            take = np.isnan(weight[:, 0]) & np.isfinite(tried[:, 0]) & (np.abs(lat) <= 75)
            weight[take], point[take] = tried[take], found[take]
            lost = np.isnan(weight[:, 0]) & (point[:, 0] < 0)
            point[lost] = found[lost]  # named as the cell that failed
        polar = np.abs(lat) > 75
        if polar.any():
            chosen = monitored if monitored.ndim == 1 else monitored[polar]
            point[polar], weight[polar] = self._cap(lat[polar], lon[polar], chosen)
        return Corners(point, weight)

    def _cap(self, lat: Floats, lon: Floats, monitored: Bools) -> tuple[Ints, Floats]:
        """Corners and shares of places beyond 75 degrees; the southern points at 85 stand 40 degrees farther east."""
        north = lat >= 0
        size = np.abs(lat)
        first = np.where(north, -180.0, -140.0)
        before = np.floor((lon - first) / 90.0) * 90.0 + first  # the point at 85 to the west
        west = np.floor(lon / 10.0) * 10.0
        row85 = np.where(north, 35, 1)
        row75 = np.where(north, 33, 3)

        def at(row: Ints, longitude: Floats) -> Ints:
            return np.asarray(self._index[row, ((longitude + 180.0) // 5).astype(np.int64) % 72])

        # 75 to 85: a value at 85 over the western corner, and one over the eastern, each from the two points there.
        x, y = (lon - west) / 10.0, (size - 75.0) / 10.0
        over_west, over_east = (west - before) / 90.0, (west + 10.0 - before) / 90.0
        belt = np.stack([at(row75, west), at(row75, west + 10.0), at(row85, before), at(row85, before + 90.0)], axis=1)
        eastern = (1 - x) * y * over_west + x * y * over_east
        belt_share = np.stack([(1 - x) * (1 - y), x * (1 - y), y - eastern, eastern], axis=1)
        # Beyond 85: the point to the west, the one to the east, and the two across the pole from them.
        up = (size - 85.0) / 10.0
        along = (lon - before) / 90.0 * (1.0 - 2.0 * up) + up
        top = np.stack([at(row85, before + 90.0 * quarter) for quarter in (0, 1, 3, 2)], axis=1)
        top_share = np.stack([(1 - along) * (1 - up), along * (1 - up), (1 - along) * up, along * up], axis=1)
        high = (size > 85.0)[:, None]
        point, share = np.where(high, top, belt), np.where(high, top_share, belt_share)
        safe = np.maximum(point, 0)
        there = point >= 0
        there &= monitored[safe] if monitored.ndim == 1 else np.take_along_axis(monitored, safe, axis=1)
        whole = np.all(there, axis=1)
        return point, np.where(whole[:, None], share, np.nan)


# ---------------------------------------------------------------------------------------------- the service's side


@dataclass(frozen=True)
class ConfidenceChoices:
    """How confidence at a grid point is found; every figure is printed with each result.

    decorrelation_m    nominal spread of vertical delay about a plane (common in published work; from memory)
    first_km, last_km  radius of the planar fit, and how far it may grow until it holds `enough` lines of sight
    enough, fewest     lines of sight wanted, and needed (Walter et al. 2000, from memory)
    false_alarm, missed  of the chi-square test (from memory)
    missed_mm_per_km   standard deviation of a slope that the sampling may have missed, over the way from the nearest
                       line of sight and from their centre to the point (our choice)
    nearest_km         a point with no line of sight this near is not monitored (our choice: about one cell)
    minimum_elevation_deg, window_s  of the lines of sight, and how long they are averaged
    time_out_s         a confidence older than this is not used (RTCA DO-229: 600 s; from memory)
    """

    decorrelation_m: float = 0.35
    first_km: float = 800.0
    last_km: float = 2100.0
    enough: int = 30
    fewest: int = 10
    false_alarm: float = 1e-3
    missed: float = 1e-3
    missed_mm_per_km: float = 1.0
    nearest_km: float = 555.0
    minimum_elevation_deg: float = 10.0
    window_s: float = 300.0
    time_out_s: float = 600.0


@dataclass(frozen=True)
class GridConfidence:
    """What a service with these receivers could broadcast: per time and grid point, all (T, P) unless said.

    times (T,) GPS time; lat, lon (P,) [deg]; delay_m vertical on 1575.42 MHz; sigma_m of the kriged delay alone;
    step 0 to 15; irregular: the planar fit failed its test; rays: lines of sight in the fit; choices as used
    """

    times: Times
    lat: Ints
    lon: Ints
    delay_m: Floats
    sigma_m: Floats
    step: Ints
    irregular: Bools
    rays: Ints
    choices: ConfidenceChoices = field(default_factory=ConfidenceChoices)

    @property
    def variance_m2(self) -> Floats:
        """Variance by step [m^2], NaN where not monitored."""
        return variance_of(self.step)


def confidence(samples: Samples, times: Times, choices: ConfidenceChoices | None = None) -> GridConfidence:
    """Confidence at the standard points around the network's lines of sight, at each time (a few minutes apart).

    Raises NotEnough where no line of sight stands high enough in the span.
    """
    choices = choices or ConfidenceChoices()
    # Half as many lines of sight teach the residual as for maps: a third of the time less, 95 of 100 steps the same.
    maps = FieldChoices(
        minimum_elevation=choices.minimum_elevation_deg, window_s=choices.window_s, learn_rays=_LEARN_RAYS
    )
    placed = on_the_standard_shell(samples)
    lat, lon = _points_near(placed.rays.pierce_lat, placed.rays.pierce_lon)
    shape = (len(times), len(lat))
    delay, sigma, bound = (np.full(shape, np.nan) for _ in range(3))
    irregular = np.zeros(shape, dtype=bool)
    count = np.zeros(shape, dtype=np.int64)
    number = -1
    for hour in prepare(placed, lat.astype(np.float64), lon.astype(np.float64), times, maps):
        for system in systems(hour):
            number += 1
            if system is None or len(system.part) < choices.fewest:
                continue
            found = kriging.at(system, hour.x, hour.y, maps.slope_over_km, maps.widen_km)
            delay[number], sigma[number] = found.value * L1_M_PER_TECU, found.sigma * L1_M_PER_TECU
            used, fails, raised, missed_m = judge_points(system.part, hour.covariance, hour.x, hour.y, choices)
            count[number], irregular[number] = used, fails
            bound[number] = QUANTILE * np.sqrt(
                raised**2 * (sigma[number] ** 2 + choices.decorrelation_m**2) + missed_m**2
            )
    step = step_of(bound)
    step[irregular & (step <= HIGHEST_STEP)] = HIGHEST_STEP
    step[step > HIGHEST_STEP] = NOT_MONITORED
    return GridConfidence(times, lat, lon, delay, sigma, step, irregular, count, choices)


def _points_near(pierce_lat: Floats, pierce_lon: Floats) -> tuple[Ints, Ints]:
    """Standard points of the cells in which lines of sight pierce the shell, and of their neighbours."""
    every = all_points()
    mostly = every.band <= 8
    lat, lon = every.lat[mostly].astype(np.int64), every.lon[mostly].astype(np.int64)
    middle = np.degrees(np.angle(np.exp(1j * np.radians(pierce_lon)).mean()))
    turn = np.mod(pierce_lon - middle + 180.0, 360.0) - 180.0
    own = np.mod(lon - middle + 180.0, 360.0) - 180.0
    near = (lat >= pierce_lat.min() - 10) & (lat <= pierce_lat.max() + 10) & (np.abs(lat) <= 75)
    near &= (own >= turn.min() - 10) & (own <= turn.max() + 10)
    # Around the caps all that stands at 85 is near, and beyond them all longitudes of 75.
    for side in (1, -1):
        reach = float((side * pierce_lat).max())
        near |= (side * lat == 85) & (reach > 75)
        near |= (side * lat == 75) & (reach > 85)
    return lat[near], lon[near]


@lru_cache(maxsize=16)
def _test_table(false_alarm: float, missed: float, most: int) -> tuple[Floats, Floats]:
    """Limit of chi-square and inflation of sigma by the count of lines of sight in a fit, up to `most`."""
    freedom = np.maximum(np.arange(most + 1) - 3, 1)
    limit = chi2.ppf(1.0 - false_alarm, freedom)
    return limit, np.sqrt(limit / chi2.ppf(missed, freedom))


def judge_points(
    part: Epoch, covariance: Floats, gx: Floats, gy: Floats, choices: ConfidenceChoices
) -> tuple[Ints, Bools, Floats, Floats]:
    """The planar fit around each point (P,): lines of sight used, whether it fails, inflation, missed slope [m].

    Inflation is NaN where the point cannot be monitored.
    """
    away2 = (part.x[None, :] - gx[:, None]) ** 2 + (part.y[None, :] - gy[:, None]) ** 2
    last = min(choices.enough, away2.shape[1]) - 1
    nearest_km = np.sqrt(away2.min(axis=1))
    wanted = np.sqrt(np.partition(away2, last, axis=1)[:, last])
    radius = np.clip(wanted, choices.first_km, choices.last_km)
    member = away2 <= (radius**2 * (1.0 + 1e-12))[:, None]
    count = member.sum(axis=1)
    value = part.vtec * L1_M_PER_TECU
    weight = 1.0 / (choices.decorrelation_m**2 + np.diagonal(part.noise(covariance)) * L1_M_PER_TECU**2)
    # Sums over the members in one product; the plane in thousands of km and about the middle of all values.
    middle = float((weight * value).sum() / weight.sum())
    x, y, v = part.x / 1000.0, part.y / 1000.0, value - middle
    columns = weight * np.stack([np.ones(len(x)), x, y, x * x, x * y, y * y, v, x * v, y * v, v * v])
    n, sx, sy, sxx, sxy, syy, sv, sxv, syv, svv = (member.astype(np.float64) @ columns.T).T
    px, py = gx / 1000.0, gy / 1000.0  # and shifted to each point
    east, north = sx - px * n, sy - py * n
    east2, north2 = sxx - 2 * px * sx + px**2 * n, syy - 2 * py * sy + py**2 * n
    both = sxy - px * sy - py * sx + px * py * n
    normal = np.stack([n, east, north, east, east2, both, north, both, north2], axis=1).reshape(-1, 3, 3)
    right = np.stack([sv, sxv - px * sv, syv - py * sv], axis=1)
    enough = count >= max(choices.fewest, 4)
    normal = np.where(enough[:, None, None], normal, np.eye(3))
    plane = np.linalg.solve(normal, right[:, :, None])[:, :, 0]
    chi_square = svv - (plane * right).sum(axis=1)
    limits, inflations = _test_table(choices.false_alarm, choices.missed, 100 * (len(x) // 100 + 1))
    limit, raised = limits[count], inflations[count]  # a copy
    centre_km = 1000.0 * np.hypot(east, north) / np.maximum(n, 1e-300)
    way_km = np.maximum(centre_km, nearest_km)
    near = nearest_km <= choices.nearest_km
    raised[~(enough & near)] = np.nan
    return count, enough & (chi_square > limit), raised, choices.missed_mm_per_km * way_km / 1000.0
