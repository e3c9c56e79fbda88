"""When to survey and when not: what the slope of the delay does to a job's positions, in millimetres and minutes.

The error budget is the differential delay alone: slope of the vertical delay times baseline, in the direction where it
is worst, with the uncertainty of the slope; mapped to each satellite's line of sight and through the geometry of those
in view into the horizontal and the height.  Multipath, noise, orbits and the lower atmosphere come on top.  Fixing of
whole cycles suffers where the differential delay reaches half a cycle of 1575.42 MHz.  Never calls a place workable
that the map does not see.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
from scipy.special import ndtr

from skylag.constants import L1_HZ, L1_M_PER_TECU, SPEED_OF_LIGHT_M_S
from skylag.errors import Refused
from skylag.impact import sky as satellites
from skylag.impact.coming import from_line
from skylag.impact.satellite_augmentation import spans
from skylag.impact.sky import Sky
from skylag.impact.states import content_known, nearest_cells, plus_minus, state_of_slope
from skylag.ionosphere.covariance import plane_km
from skylag.ionosphere.geometry import mapping
from skylag.tables import STATE_NAMES, STRAINED, UNSEEN, Bools, Bytes, Fields, Flag, Floats, Ints, Thresholds, Times
from skylag.timescales import gps_to_utc

CAUTION = (
    "Planning aid, not for navigation and no substitute for checks in the field: official notices, the correction "
    "service's own status, the instrument maker's limits and licensed professionals decide."
)
HALF_CYCLE_MM = 500.0 * SPEED_OF_LIGHT_M_S / L1_HZ  # 95.1 mm on 1575.42 MHz
METHODS = {
    "static": "static sessions on one frequency; with two frequencies and fixed cycles only the fixing counts",
    "rtk": "real-time work from an own base",
    "network": "real-time work with corrections interpolated between reference stations",
    "dgnss": "single-frequency code corrections from one reference; nothing is fixed",
}
WORK, AVOID, NOT_SEEN = "work", "avoid", "unseen"
# Class limits of the hourly index [ppm]: Wanninger 2004, ION GNSS, 2849-2854, as two state operators give them.
INDEX_CLASSES = ((2.0, "negligible"), (4.0, "weak"), (8.0, "strong"), (np.inf, "very strong"))
_WEAK_PPM = INDEX_CLASSES[1][0]
INDEX_REACH_KM = 150.0
# No slope counts as known finer, whatever the map says of itself: a tenth of the part per million by which makers let
# the error of a receiver pair grow with its distance (common practice).  What leans alike over a region all day is not
# smaller on quiet days, and nothing in the field is decided by it.
DOUBT_MM_PER_KM = 0.1
LONGEST_KM = 100.0  # baselines beyond are not spoken of
MOST_PLACES = 400
_ALONE = 20  # so many places have a geometry each
_FIX_ELEVATION_DEG = 30.0
_OF_THE_DAY = 0.95  # where no satellites are known: what this share of a day stays under counts


@dataclass(frozen=True)
class Job:
    """A piece of survey work.

    places        (lat, lon) [deg]: one, or all that a route or area touches (`shapes.places_of`); all must be workable
    shape         of `shapes.SHAPES`, as it was asked; only told
    method        of METHODS; baseline_km to the base or reference
    references    (lat, lon) of the reference stations of a network, three at least; else empty
    horizontal_mm, vertical_mm  tolerances at 95 %
    spans         (start, end) of working hours, GPS time; all day where empty
    session_min   length of a static session; least_min: shorter windows are of no use
    mask_deg, least_satellites, most_dilution (of position)   what the receiver needs
    fixing_chance the chance, at most, that fixing suffers
    """

    name: str
    places: tuple[tuple[float, float], ...]
    method: str = "rtk"
    baseline_km: float = 10.0
    references: tuple[tuple[float, float], ...] = ()
    horizontal_mm: float = 30.0
    vertical_mm: float = 50.0
    spans: tuple[tuple[np.datetime64, np.datetime64], ...] = ()
    session_min: float = 60.0
    least_min: float = 15.0
    mask_deg: float = 15.0
    least_satellites: int = 5
    most_dilution: float = 6.0
    fixing_chance: float = 0.1
    shape: str = "points"

    def __post_init__(self) -> None:
        rules = (
            ("method", self.method, self.method in METHODS, f"one of {', '.join(METHODS)}"),
            ("places", len(self.places), 1 <= len(self.places) <= MOST_PLACES, f"1 to {MOST_PLACES} places"),
            ("baseline_km", self.baseline_km, 0 < self.baseline_km <= LONGEST_KM, f"above 0 to {LONGEST_KM:g} km"),
            ("horizontal_mm", self.horizontal_mm, 0 < self.horizontal_mm <= 1e5, "above 0 to 100 000 mm"),
            ("vertical_mm", self.vertical_mm, 0 < self.vertical_mm <= 1e5, "above 0 to 100 000 mm"),
            ("mask_deg", self.mask_deg, 5 <= self.mask_deg <= 40, "5 to 40 degrees"),
            ("fixing_chance", self.fixing_chance, 0 < self.fixing_chance < 1, "between 0 and 1"),
            ("session_min", self.session_min, 5 <= self.session_min <= 1440, "5 to 1440 minutes"),
            ("references", len(self.references), self.method != "network" or len(self.references) >= 3,
             "three or more reference stations for the method network"),
            ("references", len(self.references), len(self.references) <= MOST_PLACES, f"up to {MOST_PLACES} of them"),
            ("least_min", self.least_min, 0 <= self.least_min <= 1440, "0 to 1440 minutes"),
            ("least_satellites", self.least_satellites, 4 <= self.least_satellites <= 40, "4 to 40 satellites"),
            ("most_dilution", self.most_dilution, 1 <= self.most_dilution <= 50, "1 to 50"),
        )  # fmt: skip
        for name, value, good, allowed in rules:
            if not good:
                raise Refused(
                    f"job {self.name}: {name} is {value}, it must be {allowed}", name=name, value=value, allowed=allowed
                )


@dataclass(frozen=True)
class Window:
    """A span with one verdict (work, avoid, unseen), start <= time < end, GPS time; why, in words."""

    start: np.datetime64
    end: np.datetime64
    verdict: str
    why: str


@dataclass(frozen=True)
class Advice:
    """A job through a day, all (T,) at the epochs of the maps, the worst of its places.

    slope, slope_sigma [mm/km]; differential_68, differential_95 [mm of vertical delay at the baseline];
    horizontal_68/95, vertical_68/95 [mm of position]; longest_km within tolerance; fixing: the chance that it suffers
    (NaN where nothing is fixed); count, dilution of the satellites (count -1 where none are known)
    verdict       work, avoid, unseen; reasons: the sentence, "" where work
    hours, index  starts of hours and the 95 % slope in each [ppm], NaN where nobody looked; index_words its class
    """

    job: Job
    times: Times
    slope: Floats
    slope_sigma: Floats
    differential_68: Floats
    differential_95: Floats
    horizontal_68: Floats
    horizontal_95: Floats
    vertical_68: Floats
    vertical_95: Floats
    longest_km: Floats
    fixing: Floats
    count: Ints
    dilution: Floats
    verdict: npt.NDArray[np.str_]
    reasons: tuple[str, ...]
    hours: Times
    index: Floats
    index_words: tuple[str, ...]
    windows: tuple[Window, ...]
    assumptions: tuple[str, ...]
    caution: str = CAUTION


def index_class(ppm: float) -> str:
    """The published class of an hourly index, in a word; "not known" for NaN."""
    return next((word for limit, word in INDEX_CLASSES if ppm <= limit), "not known")


def quantile(share: float, middle: Floats, sigma: Floats) -> Floats:
    """What |x| stays under with a probability, for x normal about `middle` with `sigma`; any one shape, NaN stays."""
    middle, sigma = np.abs(np.asarray(middle, dtype=np.float64)), np.asarray(sigma, dtype=np.float64)
    low, high = np.zeros(np.shape(middle)), middle + 9.0 * sigma
    tiny = np.maximum(sigma, 1e-12)
    for _ in range(42):
        half = 0.5 * (low + high)
        below = ndtr((half - middle) / tiny) - ndtr((-half - middle) / tiny) < share
        low, high = np.where(below, half, low), np.where(below, high, half)
    return np.where(np.isfinite(middle + sigma), high, np.nan)


def chance_beyond(limit: float | Floats, middle: Floats, sigma: Floats) -> Floats:
    """Probability that |x| is beyond a limit, for x normal about `middle` with `sigma`; NaN stays."""
    tiny = np.maximum(sigma, 1e-12)
    return np.asarray(1.0 - (ndtr((limit - middle) / tiny) - ndtr((-limit - middle) / tiny)))


def advise(
    job: Job,
    fields: Fields,
    sky: Sky | None = None,
    thresholds: Thresholds | None = None,
    shell_height_m: float = 400e3,
    judged: Bytes | None = None,
    doubts: Sequence[Sequence[str]] = (),
) -> Advice:
    """A job through the day of the maps.

    sky     satellites at the epochs of the maps; without it the geometry is that of the nominal constellation, and said
    judged  states (T, places) of the places themselves (`at_places.codes`), which warnings may reach that miss the
            middles of their cells; without it those of the cells count
    doubts  per place and epoch why nothing may hold there, "" where it may (`at_places.doubts`): no time to work
    """
    limits = thresholds or Thresholds()
    seen, looked, warned, middle, sigma, own = _differential(job, fields, limits, judged)
    geometry = _geometries(job, sky, fields.times, shell_height_m)
    horizontal = np.stack([one[0] for one in geometry])
    vertical = np.stack([one[1] for one in geometry])
    d68, d95 = quantile(0.68, middle, sigma), quantile(0.95, middle, sigma)
    fix_limit = HALF_CYCLE_MM / float(mapping(_FIX_ELEVATION_DEG, shell_height_m))
    fixing = chance_beyond(fix_limit, middle, sigma)
    per_km = quantile(0.95, own[0], own[1])
    with np.errstate(divide="ignore", invalid="ignore"):
        longest = np.minimum(job.horizontal_mm / (horizontal * per_km), job.vertical_mm / (vertical * per_km))
        if job.method != "dgnss":
            longest = np.minimum(longest, fix_limit / quantile(1.0 - job.fixing_chance, own[0], own[1]))
    longest = np.minimum(longest, LONGEST_KM)
    if job.method == "dgnss":
        fixing = np.full(fixing.shape, np.nan)
    count = np.min([one[2] for one in geometry], axis=0)
    dilution = np.max([one[3] for one in geometry], axis=0)
    worst = {
        "slope": own[0], "slope_sigma": own[1], "differential_68": d68, "differential_95": d95,
        "horizontal_68": horizontal * d68, "horizontal_95": horizontal * d95, "vertical_68": vertical * d68,
        "vertical_95": vertical * d95, "fixing": fixing,
    }  # fmt: skip
    told = {name: values.max(axis=0) for name, values in worst.items()}  # NaN anywhere stays NaN
    verdict, reasons = _verdicts(
        job, np.asarray(seen.all(axis=0)), np.asarray(looked.all(axis=0)), warned.max(axis=0), told, count, dilution,
        _off_the_map(job, fields),
        [next(filter(None, one), "") for one in zip(*doubts, strict=True)] or [""] * len(fields.times),
    )  # fmt: skip
    hours, index = hourly_index(fields, job.places)
    return Advice(
        job=job, times=fields.times, longest_km=longest.min(axis=0), count=count, dilution=dilution, verdict=verdict,
        reasons=reasons, hours=hours, index=index, index_words=tuple(index_class(float(one)) for one in index),
        windows=_windows(job, fields.times, verdict, reasons),
        assumptions=_assumptions(job, sky, shell_height_m, limits), **told,
    )  # fmt: skip


# ---------------------------------------------------------------------------------------------- the error budget


def _differential(job: Job, fields: Fields, limits: Thresholds, judged: Bytes | None) -> tuple[
    Bools, Bools, npt.NDArray[np.uint8], Floats, Floats, tuple[Floats, Floats]
]:  # fmt: skip
    """Per place and epoch (P, T): seen; a line of sight near, whether known well enough or not; warned beyond the map;
    differential vertical delay and sigma [mm] at the baseline; slope and sigma [mm/km]."""
    lat, lon = np.array(job.places, dtype=np.float64).T
    row, column, inside = nearest_cells(fields, lat, lon)

    def cells(name: str) -> Floats:
        return np.asarray(getattr(fields, name)[:, row, column].T, dtype=np.float64)

    east, north = cells("slope_east"), cells("slope_north")
    if job.method == "static":
        east, north = (_session_mean(values, fields.times, job.session_min) for values in (east, north))
    slope, slope_sigma = np.hypot(east, north), cells("slope_sigma")
    state = fields.state[:, row, column].T
    looked = inside[:, None] & (cells("support") > 0)
    seen = looked & (state != UNSEEN)
    seen &= np.isfinite(slope) & np.isfinite(slope_sigma) & np.isfinite(cells("vtec"))
    by_map = state_of_slope(cells("slope"), cells("slope_sigma"), limits)
    worst = state if judged is None else np.maximum(state, judged.T)
    warned = np.where((worst >= STRAINED) & (worst > by_map), worst, 0).astype(np.uint8)
    slope, slope_sigma = np.where(seen, slope, np.nan), np.where(seen, slope_sigma, np.nan)
    doubted = np.hypot(slope_sigma, DOUBT_MM_PER_KM)
    middle, sigma = slope * job.baseline_km, doubted * job.baseline_km
    if job.method == "network":  # a plane through stations takes away what leans alike
        middle, sigma = _off_network(job, fields, limits, row, column, slope, slope_sigma)
        seen = seen & np.isfinite(middle)
    return seen, looked, warned, middle, sigma, (slope, doubted)


def _session_mean(values: Floats, times: Times, session_min: float) -> Floats:
    """Means (P, T) over a session around each epoch; NaN where an epoch of it is not known."""
    half = np.timedelta64(round(session_min * 30e9), "ns")
    first = np.searchsorted(times, times - half, side="left")
    last = np.searchsorted(times, times + half, side="right")
    total = np.cumsum(np.concatenate([np.zeros((len(values), 1)), np.nan_to_num(values)], axis=1), axis=1)
    lost = np.cumsum(np.concatenate([np.zeros((len(values), 1)), np.isnan(values)], axis=1), axis=1)
    mean = (total[:, last] - total[:, first]) / (last - first)
    return np.where(lost[:, last] - lost[:, first] > 0, np.nan, mean)


def _off_network(
    job: Job, fields: Fields, limits: Thresholds, row: Ints, column: Ints, slope: Floats, slope_sigma: Floats
) -> tuple[Floats, Floats]:
    """What interpolation between reference stations leaves (P, T) [mm of vertical delay], and its sigma.

    The plane through the stations' own vertical delays against that of the place; the sigma is that of the slope over
    the way to the nearest station.  Not known where fewer than three stations are on the map or all stand in line, and
    at each time at which the map does not see one of those that are used.
    """
    lat, lon = np.array(job.references, dtype=np.float64).T
    station_row, station_column, inside = nearest_cells(fields, lat, lon)
    # Where nobody looks the maps hold a background: a plane through that says nothing.
    content = np.where(content_known(fields, limits), fields.vtec, np.nan)
    delay = np.asarray(content, dtype=np.float64) * L1_M_PER_TECU * 1000.0
    known = inside & np.isfinite(delay[:, station_row, station_column]).any(axis=0)
    left = np.full(slope.shape, np.nan)
    sigma = left.copy()
    # Stations and place stand in the middle of their cells here, since it is there that the delays are known.
    cell_lat, cell_lon = fields.lats[station_row[known]], fields.lons[station_column[known]]
    for number, place in enumerate(job.places):
        away_km = np.hypot(*plane_km(lat[known], lon[known], place))
        if len(away_km) < 3:
            continue
        middle = (float(fields.lats[row[number]]), float(fields.lons[column[number]]))
        x, y = plane_km(cell_lat, cell_lon, middle)
        near = np.argsort(away_km)[:6]
        design = np.stack([np.ones(len(near)), x[near], y[near]], axis=1)
        if np.linalg.matrix_rank(design / np.array([1.0, 100.0, 100.0])) < 3:
            continue
        share = np.linalg.pinv(design)[0]
        stations = delay[:, station_row[known][near], station_column[known][near]]
        left[number] = np.abs(delay[:, row[number], column[number]] - stations @ share)
        sigma[number] = slope_sigma[number] * away_km.min()
    return np.where(np.isfinite(slope), left, np.nan), sigma


def _geometries(
    job: Job, sky: Sky | None, times: Times, shell_height_m: float
) -> list[tuple[Floats, Floats, Ints, Floats]]:
    """`_geometry` of each place.  Of many places, those of one degree by one share that of the first: satellites stand
    less than a degree apart there."""
    few = len(job.places) <= _ALONE
    shared: dict[tuple[float, float], tuple[Floats, Floats, Ints, Floats]] = {}
    found = []
    for place in job.places:
        key = place if few else (float(round(place[0])), float(round(place[1])))
        if key not in shared:
            shared[key] = _geometry(job, sky, times, place, shell_height_m)
        found.append(shared[key])
    return found


def _geometry(
    job: Job, sky: Sky | None, times: Times, place: tuple[float, float], shell_height_m: float
) -> tuple[Floats, Floats, Ints, Floats]:
    """Metres of horizontal and of height per metre of differential vertical delay, satellites, dilution, (T,) each.

    Weights are the squared sine of the elevation (common practice).  The larger of two cases counts: delays of the
    satellites unrelated to each other, and all alike.
    """
    if sky is None:
        across, height = nominal_factors(place, job.mask_deg, shell_height_m)
        ones = np.ones(len(times))
        return across * ones, height * ones, np.full(len(times), -1), np.nan * ones
    at = np.clip(np.searchsorted(sky.times, times), 0, len(sky.times) - 1)
    elevation, azimuth = (values[at] for values in sky.look(*place))
    off = np.abs(sky.times[at] - times) > np.timedelta64(120, "s")
    elevation[off] = np.nan
    spread = satellites.spread(elevation, azimuth, job.mask_deg)
    horizontal, vertical = _factors(elevation, azimuth, job.mask_deg, shell_height_m)
    return horizontal, vertical, spread.count, spread.position


def _factors(elevation: Floats, azimuth: Floats, mask_deg: float, shell_height_m: float) -> tuple[Floats, Floats]:
    """Metres of horizontal and of height (T,) per metre of differential vertical delay on satellites (T, S)."""
    with np.errstate(invalid="ignore"):
        above = elevation >= mask_deg
    rows = satellites.rows_of(elevation, azimuth)
    weight = np.where(above, np.sin(np.radians(np.where(above, elevation, 90.0))) ** 2, 0.0)
    solve = np.einsum("tij,tsj,ts->tis", satellites.position_covariance(rows, weight), rows, weight)
    factor = np.where(above, mapping(np.where(above, elevation, 90.0), shell_height_m), 0.0)
    apart = np.sqrt(np.einsum("tis,ts->ti", solve**2, factor**2))
    alike = np.abs(np.einsum("tis,ts->ti", solve, factor))
    horizontal = np.maximum(np.hypot(apart[:, 0], apart[:, 1]), np.hypot(alike[:, 0], alike[:, 1]))
    return horizontal, np.maximum(apart[:, 2], alike[:, 2])


def nominal_factors(place: tuple[float, float], mask_deg: float, shell_height_m: float) -> tuple[float, float]:
    """The same two for the nominal constellation: what 95 % of a day stays under; infinite where they give nothing."""
    elevation, azimuth = satellites.nominal().look(*place)
    found = _factors(elevation, azimuth, mask_deg, shell_height_m)
    high = [float(np.quantile(np.nan_to_num(one, nan=np.inf), _OF_THE_DAY, method="higher")) for one in found]
    return high[0], high[1]


def hourly_index(fields: Fields, places: Sequence[tuple[float, float]]) -> tuple[Times, Floats]:
    """Starts of hours, and what 95 % of the vertical slopes seen within 150 km stay under in each [ppm = mm/km].

    Made in the manner of the published hourly index (Wanninger 2004), from maps instead of a network's own corrections;
    +-1 unit is its stated meaning over a state.  NaN for an hour in which nothing was seen, and for one of which less
    than half was and that seems no worse than weak: what was not seen may be why.
    """
    lon_grid, lat_grid = np.meshgrid(fields.lons, fields.lats)
    near = np.zeros(lat_grid.shape, dtype=bool)
    for place in places:
        x, y = plane_km(lat_grid, lon_grid, place)
        near |= np.hypot(x, y) <= INDEX_REACH_KM
    slope = np.asarray(fields.slope[:, near], dtype=np.float64)
    good = (fields.support[:, near] > 0) & (fields.state[:, near] != UNSEEN) & np.isfinite(slope)
    hour = fields.times.astype("datetime64[h]")
    hours = np.unique(hour)
    index = np.full(len(hours), np.nan)
    for number, one in enumerate(hours):
        seen = good[hour == one]
        if seen.any():
            ppm = np.quantile(slope[hour == one][seen], 0.95)
            index[number] = ppm if seen.mean() >= 0.5 or ppm > _WEAK_PPM else np.nan
    return hours.astype("datetime64[ns]"), index


# ---------------------------------------------------------------------------------------------- verdicts


def _verdicts(
    job: Job, seen: Bools, looked: Bools, warned: npt.NDArray[np.uint8], told: dict[str, Floats], count: Ints,
    dilution: Floats, off_the_map: str, doubted: Sequence[str],
) -> tuple[npt.NDArray[np.str_], tuple[str, ...]]:  # fmt: skip
    """Verdict and reason per epoch: the first of unseen, warnings, satellites, an unknown slope, height, horizontal,
    fixing, a silent receiver or another doubt.  off_the_map: why it is unseen where that is for good, else ""."""
    known = count >= 0
    over = f"over {job.baseline_km:g} km" if job.method != "network" else "between the reference stations"
    reasons = []
    verdict = np.full(len(seen), WORK, dtype="<U6")
    for t in range(len(seen)):
        why, seen_well = "", True
        if not seen[t]:
            seen_well = False
            why = (
                "delay or slope are not known well enough here: nothing can be said"
                if looked[t]
                else off_the_map or "the map does not see the place: nothing can be said"
            )
        elif warned[t]:
            why = f"{STATE_NAMES[int(warned[t])]}: a front, an irregular patch or a steep slope is reported here"
        elif known[t] and count[t] < job.least_satellites:
            why = f"{int(count[t])} satellites above {job.mask_deg:g} degrees, {job.least_satellites} are needed"
        elif known[t] and not dilution[t] <= job.most_dilution:
            why = f"dilution of position {float(dilution[t]):.1f}, {job.most_dilution:g} is the most"
        elif not np.isfinite(told["vertical_95"][t] + told["horizontal_95"][t]):
            why = f"the satellites above {job.mask_deg:g} degrees do not always give a position"
        elif _only_sigma(job, told, t):
            seen_well = False
            why = (
                f"the slope is known to {plus_minus(told['slope_sigma'][t])} mm/km only, which leaves "
                f"{_left_open(job, told, t, over)}: nothing can be said"
            )
        elif not told["vertical_95"][t] <= job.vertical_mm:
            why = f"height error {told['vertical_95'][t]:.0f} mm (95 %) {over}, tolerance {job.vertical_mm:g} mm"
        elif not told["horizontal_95"][t] <= job.horizontal_mm:
            why = (
                f"horizontal error {told['horizontal_95'][t]:.0f} mm (95 %) {over}, tolerance {job.horizontal_mm:g} mm"
            )
        elif told["fixing"][t] > job.fixing_chance:
            why = f"fixing suffers with a chance of {100 * told['fixing'][t]:.0f} % {over}"
        elif doubted[t]:
            seen_well, why = False, doubted[t]
        if why:
            verdict[t] = AVOID if seen_well else NOT_SEEN
        reasons.append(why)
    return verdict, tuple(reasons)


def _off_the_map(job: Job, fields: Fields) -> str:
    """Which of the job's places the map does not reach, and how far it does reach; "" where all are on it."""
    lat, lon = np.array(job.places, dtype=np.float64).T
    inside = nearest_cells(fields, lat, lon)[2]
    if inside.all():
        return ""
    first = int(np.flatnonzero(~inside)[0])
    others = int((~inside).sum()) - 1
    places = f"{lat[first]:g}, {lon[first]:g}" + (f" and {others} more lie" if others else " lies")
    south, north, west, east = (float(edge) for axis in (fields.lats, fields.lons) for edge in (axis.min(), axis.max()))
    return (
        f"{places} off the map of this region, which reaches from latitude {south:g} to {north:g} and from longitude "
        f"{west:g} to {east:g}: nothing can be said there"
    )


def _only_sigma(job: Job, told: dict[str, Floats], t: int) -> bool:
    """Whether it is not the differential delay but what is not known of it that passes a tolerance."""
    within = told["vertical_95"][t] <= job.vertical_mm and told["horizontal_95"][t] <= job.horizontal_mm
    fixed = not told["fixing"][t] > job.fixing_chance
    return bool(told["slope_sigma"][t] > told["slope"][t] and not (within and fixed))


def _left_open(job: Job, told: dict[str, Floats], t: int, over: str) -> str:
    """What an unknown slope leaves possible: the first tolerance of the job that it passes, with both numbers."""
    for what, error, limit in (
        ("height", told["vertical_95"][t], job.vertical_mm), ("horizontal", told["horizontal_95"][t], job.horizontal_mm)
    ):  # fmt: skip
        if not error <= limit:
            return f"up to {error:.0f} mm (95 %) of {what} error {over}, tolerance {limit:g} mm"
    return f"a chance of {100 * told['fixing'][t]:.0f} % that fixing suffers {over}"


def _windows(
    job: Job, times: Times, verdict: npt.NDArray[np.str_], reasons: Sequence[str]
) -> tuple[Window, ...]:
    """Runs of one verdict within the working hours, or the days of the maps; a run of work that is too short is to be
    avoided.  What no map reaches, before, between or after them, is unseen."""
    if not len(times):
        return ()
    step = np.median(np.diff(times)) if len(times) > 1 else np.timedelta64(300, "s")
    least = np.timedelta64(round(job.least_min * 60e9), "ns")
    found: list[Window] = []
    edges = np.append(times, times[-1] + step)
    whole = times[0].astype("datetime64[D]"), times[-1].astype("datetime64[D]") + np.timedelta64(1, "D")
    for start, end in job.spans or (tuple(one.astype("datetime64[ns]") for one in whole),):
        start, end = _snapped(start, edges), _snapped(end, edges)
        inside = (times >= start) & (times < end)
        found += _beyond(start, min(end, times[0]))
        for first, last in spans(inside):  # one run: times increase
            at = first
            while at < last:
                stop = at + 1
                while stop < last and verdict[stop] == verdict[at] and not _apart(times, stop, step):
                    stop += 1
                run = reasons[at:stop]
                window = Window(times[at], min(times[stop - 1] + step, end), str(verdict[at]), _most(run))
                if window.verdict == WORK and window.end - window.start < least:
                    window = replace(window, verdict=AVOID, why=f"good for less than {job.least_min:g} minutes only")
                found.append(window)
                if stop < last and _apart(times, stop, step):
                    found += _beyond(window.end, times[stop])
                at = stop
        found += _beyond(max(start, times[-1] + step), end)
    joined: list[Window] = []
    for window in found:
        if joined and joined[-1].verdict == window.verdict and joined[-1].end == window.start:
            longer = joined[-1].end - joined[-1].start >= window.end - window.start
            joined[-1] = replace(joined[-1], end=window.end, why=joined[-1].why if longer else window.why)
        else:
            joined.append(window)
    return tuple(joined)


def _apart(times: Times, at: int, step: np.timedelta64) -> bool:
    """Whether maps are missing before one of them, as between two days of which the first broke off."""
    return bool(times[at] - times[at - 1] > 1.5 * step)


def _snapped(time: np.datetime64, edges: Times) -> np.datetime64:
    """The edge of a map within half a minute of a time, since UTC and GPS time differ by seconds; else the time."""
    nearest: np.datetime64 = edges[int(np.argmin(np.abs(edges - time)))]
    return nearest if abs(nearest - time) <= np.timedelta64(30, "s") else time


def _beyond(start: np.datetime64, end: np.datetime64) -> list[Window]:
    """A span that no map of the day reaches."""
    if start >= end:
        return []
    return [Window(start, end, NOT_SEEN, "no map of the day reaches this time: nothing can be said")]


def _most(reasons: Sequence[str]) -> str:
    """The reason to name for a run: the middle one of the kind that is most frequent in it."""
    kinds: dict[str, list[str]] = {}
    for one in reasons:
        kinds.setdefault(one[:12], []).append(one)
    most = max(kinds.values(), key=len)
    return sorted(most)[len(most) // 2]


def _assumptions(job: Job, sky: Sky | None, shell_height_m: float, limits: Thresholds) -> tuple[str, ...]:
    geometry = (
        f"Satellites: {sky.source}, above {job.mask_deg:g} degrees, weighted by the squared sine of the elevation; "
        "their delays unrelated or all alike, whichever hurts more."
        if sky is not None
        else _without_sky(job, shell_height_m)
    )
    where = {
        "route": f"All {len(job.places)} cells of the map on the way are looked at; the worst counts.",
        "area": f"All {len(job.places)} cells of the map that the area touches are looked at; the worst counts.",
    }.get(job.shape, f"{len(job.places)} places are looked at; the worst counts." if len(job.places) > 1 else "")
    network = (
        "What interpolation leaves: the place's vertical delay against the plane through the nearest reference "
        "stations' (up to six); waves smaller than the map's cells are not in it."
        if job.method == "network"
        else f"Differential delay: slope of the map at the place times {job.baseline_km:g} km, in the worst direction."
    )
    return (
        f"Method: {METHODS[job.method]}"
        + (f"; the slope is that of the mean over {job.session_min:g} minutes." if job.method == "static" else "."),
        *((where,) if where else ()),
        network,
        geometry,
        "Only the ionosphere counts here: multipath, noise, orbits, lower atmosphere and the age of corrections come "
        "on top.",
        f"Fixing suffers where the slant differential delay at {_FIX_ELEVATION_DEG:g} degrees of elevation reaches "
        f"half a cycle, {HALF_CYCLE_MM:.1f} mm on 1575.42 MHz (9.5 ppm over 10 km); thin shell at "
        f"{shell_height_m / 1000:g} km.",
        "Tolerances are compared with what 95 % of errors stay under.",
        "The job's own distance and tolerances decide here. That corrections hold, on the map, asks only that the "
        f"slope stays under {limits.strained_mm_per_km:g} mm/km (95 %), which may be too little, or more than is "
        "needed, for this job.",
    )


def _without_sky(job: Job, shell_height_m: float) -> str:
    across, height = np.max([nominal_factors(place, job.mask_deg, shell_height_m) for place in job.places], axis=0)
    return (
        f"No satellites are known for this day: the 24 slots of the GPS baseline constellation are taken, above "
        f"{job.mask_deg:g} degrees; 95 % of a day they make at most {across:.1f} m across and {height:.1f} m of height "
        "from a metre of vertical delay."
    )


# ---------------------------------------------------------------------------------------------- afterwards


@dataclass(frozen=True)
class Explanation:
    """Was it the ionosphere?  verdict: likely, possible, unlikely, or cannot be told; evidence in sentences."""

    time: np.datetime64
    verdict: str
    evidence: tuple[str, ...]
    caution: str = CAUTION


def _second(time: np.datetime64) -> str:
    """A GPS time as a person writes it in UTC."""
    return f"{np.datetime_as_string(gps_to_utc(time), unit='s')}Z"


def was_it_the_ionosphere(
    advice: Advice, flags: Sequence[Flag], time: np.datetime64, around_min: float = 10.0
) -> Explanation:
    """Evidence for a time at which fixing failed at a job's place: from the maps, the flags, the hour, the satellites.

    Raises Refused for a time outside the day of the advice.
    """
    reach = np.timedelta64(round(around_min * 60e9), "ns")
    at = np.flatnonzero(np.abs(advice.times - time) <= reach)
    if not len(at):
        raise Refused(
            f"{_second(time)}: no map lies within {around_min:g} minutes; the maps of this day reach from "
            f"{_second(advice.times[0])} to {_second(advice.times[-1])}; choose the day that holds the time",
            name="time", value=str(time), allowed=f"{advice.times[0]} to {advice.times[-1]}",
        )  # fmt: skip
    said: list[str] = []
    seen = advice.verdict[at] != NOT_SEEN
    steep = float(np.nanmax(np.where(seen, advice.slope[at], np.nan))) if seen.any() else float("nan")
    chance = float(np.nanmax(advice.fixing[at])) if np.isfinite(advice.fixing[at]).any() else float("nan")
    if seen.any():
        worst = at[seen][int(np.argmax(advice.slope[at[seen]]))]
        said.append(
            f"The map sloped by up to {steep:.1f} ± {advice.slope_sigma[worst]:.1f} mm/km within {around_min:g} "
            f"minutes: {advice.differential_95[worst]:.0f} mm (95 %) at the job's distance."
        )
        if np.isfinite(chance):
            said.append(f"The chance that fixing suffered from it is {100 * chance:.0f} %.")
        day = advice.slope[np.isfinite(advice.slope)]
        share = float((day <= steep).mean())
        said.append(f"That is more than {100 * share:.0f} % of the day at this place.")
    else:
        why = _most([advice.reasons[k] for k in at])
        said.append(f"The map did not see the place at that time. {why[:1].upper()}{why[1:]}.")
    hour = advice.hours == time.astype("datetime64[h]")
    ppm = float(advice.index[hour][0]) if hour.any() else float("nan")
    if np.isfinite(ppm):
        said.append(f"The hour's 95 % differential delay around it was {ppm:.1f} ppm: {index_class(ppm)}.")
    warned = any("is reported here" in advice.reasons[k] for k in at)
    lat, lon = advice.job.places[0]
    near = [flag for flag in flags if touches(flag, lat, lon, time, reach)]
    said += [f"{_title(flag)}: {flag.evidence}." for flag in near[:5]]
    if warned and not near:
        said.append("A front, an irregular patch or a steep slope was reported over the place.")
    few = [k for k in at if "satellites above" in advice.reasons[k] or "dilution" in advice.reasons[k]]
    if few:
        said.append(f"Satellites, not the ionosphere, were short: {advice.reasons[few[0]]}.")
    told = [flag for flag in near if flag.confirmed and flag.kind != "fault"]
    if warned or told or chance > 0.5:
        verdict = "likely"
    elif not seen.any():
        verdict = "cannot be told"
    elif chance > advice.job.fixing_chance or (np.isfinite(ppm) and ppm > 4.0):
        verdict = "possible"
    elif not seen.all():
        verdict = "cannot be told"
        said.append(f"Of {len(at)} maps around that time {int((~seen).sum())} did not see the place well enough.")
    else:
        verdict = "unlikely"
        said.append("Nothing in the ionosphere explains a failure: look for masks, multipath, links and settings.")
    return Explanation(time, verdict, tuple(said))


def _title(flag: Flag) -> str:
    kind = {"slope": "Steep slope", "front": "Front", "irregular": "Irregular patch", "fault": "Receiver at fault"}
    return kind[flag.kind] + ("" if flag.confirmed else " (unconfirmed)")


def touches(flag: Flag, lat: float, lon: float, time: np.datetime64, reach: np.timedelta64) -> bool:
    """Whether a flag was active around a time within 150 km of a place, by its track where it has one."""
    if not flag.start - reach <= time <= flag.end + reach:
        return False
    if flag.kind == "front" and flag.track:
        place = min(flag.track, key=lambda point: abs(point[0] - time))[1:]
        # Of a wall only the way across counts: it reaches far to both sides.
        return abs(from_line(flag, place, lat, lon)[0]) <= 100.0
    x, y = plane_km(np.array([lat]), np.array([lon]), (flag.lat, flag.lon))
    return bool(np.hypot(x[0], y[0]) <= INDEX_REACH_KM)
