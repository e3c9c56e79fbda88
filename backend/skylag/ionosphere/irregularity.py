"""Where content is ragged: the rate-of-change index, the along-arc rate, the planar-fit test, and patches of them.

ROT is the change of slant content from phase over one 30 s step [TECU/min]; ROTI its standard deviation over five
minutes in the published (population) form: Pi et al. 1997, GRL 24, 2283.  The values depend on the sampling rate: data
faster than 30 s are thinned to it, slower data are worked as they come.  AATR weighs the rate by the mapping function
squared: Sanz et al. 2014; Juan et al. 2018.  A wall passing is steep, not ragged: the runs that belong to a front are
left out.  Never takes the raggedness of one receiver for weather.
"""

import itertools
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree
from scipy.stats import chi2

from skylag.constants import L1_M_PER_TECU
from skylag.errors import NotEnough
from skylag.events import Patch, Patches
from skylag.ionosphere.field import plane_km
from skylag.ionosphere.sightlines import Sightlines, from_plane, lay_out, middle
from skylag.tables import Bools, Floats, Fronts, Ints, Rays, Samples

ROTI_STEP_S = 30.0
ROTI_WINDOW_S = 300.0
AATR_LIMIT_TECU_MIN = 0.369520819  # 1 mm/s of delay on 1575.42 MHz, the operational limit: Sanz et al. 2014
DECORRELATION_M = 0.35  # nominal vertical spread about a plane: satellite-based augmentation (from memory)


@dataclass(frozen=True)
class IrregularityChoices:
    """How raggedness is measured and gathered.

    elevation_deg   windows below are not judged: noise and mapping inflate the index two to four times there
    ragged_tecu_min index from which a window is ragged; 0.5 marks kilometre-scale irregularities (Ma and Maruyama 2006,
                    from memory)
    restless_tecu_min  windows beside ragged ones count from here on (common class "weak", from memory); on a quiet
                    mid-latitude day 99 % of windows above 30 degrees are below 0.05
    steady_share    of restless_tecu_min that must be left without the two wildest rates of a window
    least_rates     rates a window needs
    join_km, join_s ragged windows nearer than this belong together
    fewest, fewest_ragged   windows a patch needs, and ragged ones among them
    drift_sigmas    drift is only told when it is so many times its sigma
    loss_s, break_s a signal away longer than loss_s is lost; an arc that ends without break_s of silence is broken
    """

    elevation_deg: float = 30.0
    ragged_tecu_min: float = 0.5
    restless_tecu_min: float = 0.25
    steady_share: float = 0.5
    least_rates: int = 6
    join_km: float = 150.0
    join_s: float = 900.0
    fewest: int = 4
    fewest_ragged: int = 2
    drift_sigmas: float = 3.0
    loss_s: float = 60.0
    break_s: float = 180.0


def rate_of_change(stec: Floats, step_s: float) -> Floats:
    """ROT [TECU/min] of slant content [TECU] along the first axis, step_s apart; one row fewer."""
    return np.diff(np.asarray(stec, dtype=np.float64), axis=0) * 60.0 / step_s


def index_of(rot: Floats) -> Floats:
    """ROTI [TECU/min]: population standard deviation of ROT along the first axis, NaN left out (Pi et al. 1997)."""
    known = np.isfinite(rot)
    count = np.maximum(known.sum(axis=0), 1)
    mean = np.where(known, rot, 0.0).sum(axis=0) / count
    square = np.where(known, (rot - mean) ** 2, 0.0).sum(axis=0) / count
    return np.asarray(np.where(known.any(axis=0), np.sqrt(square), np.nan))


def steadily(rot: Floats) -> Floats:
    """The index without the two rates farthest from the median: small where a slip or a single wild phase made it.

    A step is one wild rate, a wild phase two; in ragged content all of them scatter.
    """
    known = np.isfinite(rot)
    ordered = np.sort(rot, axis=0)
    count = known.sum(axis=0)
    at = (np.maximum(count - 1, 0) // 2)[None, ...]
    centre = np.take_along_axis(ordered, at, axis=0) if len(rot) else np.zeros((1, *rot.shape[1:]))
    away = np.where(known, np.abs(rot - centre), np.inf)
    rank = np.argsort(np.argsort(away, axis=0), axis=0)
    return index_of(np.where(known & (rank < count - 2), rot, np.nan))


def along_arc_rate(rot: Floats, mapping: Floats) -> Floats:
    """AATR [TECU/min]: ROT over the mapping function squared (Juan et al. 2018)."""
    return np.asarray(rot / np.asarray(mapping) ** 2)


def planar_fit(
    east_km: Floats, north_km: Floats, delay_m: Floats, sigma_m: Floats, false_alarm: float = 1e-3
) -> dict[str, Any]:
    """Plane through vertical delays, weighted, and the chi-square test of its residuals.

    Returns level_m, east_m_per_km, north_m_per_km, level_sigma_m, chi_square, limit, irregular.
    Source: grid-point estimation of satellite-based augmentation; Walter et al. 2000, false alarm rate from memory.
    Raises NotEnough below 4 points.
    """
    count = len(delay_m)
    if count < 4:
        raise NotEnough(
            f"planar fit: {count} pierce points, a plane and its test need 4; widen the radius", had=count, needed=4
        )
    design = np.stack([np.ones(count), east_km, north_km], axis=1)
    weight = 1.0 / np.broadcast_to(np.asarray(sigma_m, dtype=np.float64), (count,)) ** 2
    covariance = np.linalg.inv(design.T @ (design * weight[:, None]))
    plane = covariance @ (design.T @ (weight * delay_m))
    chi_square = float((weight * (delay_m - design @ plane) ** 2).sum())
    limit = float(chi2.ppf(1.0 - false_alarm, count - 3))
    return {
        "level_m": float(plane[0]), "east_m_per_km": float(plane[1]), "north_m_per_km": float(plane[2]),
        "level_sigma_m": float(np.sqrt(covariance[0, 0])), "chi_square": chi_square, "limit": limit,
        "irregular": chi_square > limit,
    }  # fmt: skip


def inflation(points: int, false_alarm: float = 1e-3, missed: float = 1e-3) -> float:
    """How much a formal sigma is raised since a smooth-looking fit of so many points may hide irregularity.

    Square root of the ratio of the two chi-square limits (from memory, Walter et al. 2000).
    """
    return float(np.sqrt(chi2.ppf(1.0 - false_alarm, points - 3) / chi2.ppf(missed, points - 3)))


def assess(
    rays: Rays, fronts: Fronts | None = None, choices: IrregularityChoices | None = None, samples: Samples | None = None
) -> Patches:
    """Ragged patches of a network day.

    fronts   their onsets are left out of the index
    samples  for the planar-fit test around each patch; without them it is not made
    """
    choices = choices or IrregularityChoices()
    lines = lay_out(rays, max(ROTI_STEP_S, rays.interval_s))
    size = max(2, round(ROTI_WINDOW_S / lines.step_s))
    if len(lines.times) < 2:
        return _nothing(rays)
    arcs = lines.numbers(rays.arc)
    rot = rate_of_change(lines.layer(rays.stec_phase), lines.step_s)
    rot[(arcs[1:] != arcs[:-1]) | (arcs[1:] < 0)] = np.nan
    elevation = lines.layer(rays.elevation)[1:]
    whole_rot = rot.copy()
    if fronts is not None:
        _leave_out(rot, lines, fronts)
    with np.errstate(invalid="ignore"):
        rot[~(elevation >= choices.elevation_deg)] = np.nan
    blocks = -(-len(rot) // size)

    def blocked(values: Floats) -> Floats:
        padded = np.full((blocks * size, values.shape[1]), np.nan)
        padded[: len(values)] = values
        return padded.reshape(blocks, size, -1)

    cut = blocked(rot)
    count = np.isfinite(cut).sum(axis=1)
    least = min(choices.least_rates, max(2, size - 2))
    index = np.where(count >= least, index_of(np.swapaxes(cut, 0, 1)), np.nan)
    ragged = index.copy()  # what patches are made of
    with np.errstate(invalid="ignore"):
        blocks_high, lines_high = np.nonzero(index >= choices.restless_tecu_min)
    few = steadily(cut[blocks_high, :, lines_high].T) < choices.steady_share * choices.restless_tecu_min
    ragged[blocks_high[few], lines_high[few]] = np.nan
    lat, lon = (_middle_of(blocked(lines.layer(v)[1:])) for v in (rays.pierce_lat, rays.pierce_lon))
    times = lines.times[:-1:size][:blocks]
    breaks, losses = _breaks(lines, rays, arcs, blocks, size, choices)
    mapping = lines.layer(rays.mapping)[1:]
    aatr = _hourly(along_arc_rate(whole_rot, mapping), lines, len(rays.receivers))
    patches = _patches(ragged, lat, lon, times, lines, breaks, losses, rays, samples, choices)
    return Patches(patches, times, lines.receiver, lines.satellite, index, lat, lon, aatr, breaks, losses)


def _nothing(rays: Rays) -> Patches:
    """What is known of raggedness from less than two epochs."""
    none, floats = np.zeros(0, dtype=np.int64), np.zeros((0, 0))
    counts = np.zeros((0, len(rays.receivers)), dtype=np.int64)
    rates = np.zeros((len(rays.receivers), 0))
    return Patches(
        (), np.zeros(0, dtype="datetime64[ns]"), none, none, floats, floats, floats, rates, counts, counts
    )


def _middle_of(values: Floats) -> Floats:
    """Mean over the window of blocked values (B, size, C); NaN where there is none."""
    known = np.isfinite(values)
    total = np.where(known, values, 0.0).sum(axis=1)
    count = known.sum(axis=1)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)


def _leave_out(rot: Floats, lines: Sightlines, fronts: Fronts) -> None:
    """Blank the steep runs of front members, a minute and a half longer on both sides."""
    onsets = fronts.onsets.where(fronts.onsets.front >= 0)
    line_of = {(int(r), int(s)): n for n, (r, s) in enumerate(zip(lines.receiver, lines.satellite, strict=True))}
    spare = np.timedelta64(90, "s")
    first = np.searchsorted(lines.times, onsets.start - spare) - 1
    last = np.searchsorted(lines.times, onsets.end + spare, side="right")
    for receiver, satellite, start, end in zip(onsets.receiver, onsets.satellite, first, last, strict=True):
        line = line_of.get((int(receiver), int(satellite)))
        if line is not None:
            rot[max(0, start) : end, line] = np.nan


def _breaks(
    lines: Sightlines, rays: Rays, arcs: Ints, blocks: int, size: int, choices: IrregularityChoices
) -> tuple[Ints, Ints]:
    """Arcs broken without a long silence, and signals lost above the elevation limit, per window and receiver."""
    count = len(lines.times)
    order = np.where(arcs >= 0, np.arange(count)[:, None], -1)
    last_seen = np.maximum.accumulate(order, axis=0)
    epoch, line = np.nonzero((arcs[1:] >= 0) & (last_seen[:-1] >= 0))
    before = last_seen[:-1][epoch, line]
    silence_s = (epoch + 1 - before) * lines.step_s
    elevation = lines.layer(rays.elevation)
    high = elevation[epoch + 1, line] >= choices.elevation_deg
    broken = (arcs[epoch + 1, line] != arcs[before, line]) & (silence_s <= choices.break_s)
    lost = (silence_s > choices.loss_s) & (silence_s <= 1800.0) & high
    table = np.zeros((2, blocks, len(rays.receivers)), dtype=np.int64)
    for number, which in enumerate((broken, lost)):
        np.add.at(table[number], (np.minimum(epoch[which] // size, blocks - 1), lines.receiver[line[which]]), 1)
    return table[0], table[1]


def _hourly(rate: Floats, lines: Sightlines, receivers: int) -> Floats:
    """Root mean square per receiver and hour [TECU/min] (receivers, hours); NaN where there is nothing."""
    per_hour = max(1, round(3600.0 / lines.step_s))
    hour = np.arange(len(rate)) // per_hour
    hours = int(hour[-1]) + 1 if len(hour) else 0
    square, count = np.zeros((receivers, hours)), np.zeros((receivers, hours))
    known = np.isfinite(rate)
    by_line = np.add.reduceat(np.where(known, rate, 0.0) ** 2, np.arange(0, len(rate), per_hour), axis=0)
    number = np.add.reduceat(known.astype(np.int64), np.arange(0, len(rate), per_hour), axis=0)
    np.add.at(square, lines.receiver, by_line.T)
    np.add.at(count, lines.receiver, number.T)
    return np.where(count > 0, np.sqrt(square / np.maximum(count, 1)), np.nan)


def _patches(
    index: Floats, lat: Floats, lon: Floats, times: Any, lines: Sightlines, breaks: Ints, losses: Ints, rays: Rays,
    samples: Samples | None, choices: IrregularityChoices,
) -> tuple[Patch, ...]:  # fmt: skip
    """Ragged windows joined in space and time."""
    with np.errstate(invalid="ignore"):
        block, line = np.nonzero((index >= choices.restless_tecu_min) & np.isfinite(lat))
    if len(block) == 0:
        return ()
    centre = middle(rays)
    east, north = plane_km(lat[block, line], lon[block, line], centre)
    scaled = np.stack(
        [east / choices.join_km, north / choices.join_km, block * ROTI_WINDOW_S / choices.join_s], axis=1
    )
    near = cKDTree(scaled).query_pairs(1.0, output_type="ndarray")
    graph = coo_matrix((np.ones(len(near)), (near[:, 0], near[:, 1])), shape=(len(block), len(block)))
    _, cluster = connected_components(graph, directed=False)
    order = np.argsort(cluster, kind="stable")
    bounds = np.searchsorted(cluster[order], np.arange(int(cluster.max()) + 2))
    patches = []
    for start, end in itertools.pairwise(bounds):
        rows = order[start:end]
        ragged = index[block[rows], line[rows]] >= choices.ragged_tecu_min
        if len(rows) < choices.fewest or ragged.sum() < choices.fewest_ragged:
            continue
        patches.append(
            _patch(block[rows], line[rows], east[rows], north[rows], index, times, lines, breaks, losses, rays,
                   samples, centre, choices)
        )  # fmt: skip
    return tuple(sorted(patches, key=lambda patch: patch.start))


def _patch(
    block: Ints, line: Ints, east: Floats, north: Floats, index: Floats, times: Any, lines: Sightlines, breaks: Ints,
    losses: Ints, rays: Rays, samples: Samples | None, centre: tuple[float, float], choices: IrregularityChoices,
) -> Patch:  # fmt: skip
    """One patch from its ragged windows."""
    values = index[block, line]
    weight = values / values.sum()
    x, y = float((east * weight).sum()), float((north * weight).sum())
    seconds = block.astype(np.float64) * ROTI_WINDOW_S
    drift, drift_sigma, heading = _drift(seconds, east, north, values, choices)
    moved = (seconds - (seconds * weight).sum()) * (drift / 1000.0 if np.isfinite(drift) else 0.0)
    turn_rad = np.radians(heading if np.isfinite(heading) else 0.0)
    away = np.hypot(east - x - moved * np.sin(turn_rad), north - y - moved * np.cos(turn_rad))
    where = from_plane(x, y, centre)
    window_lat, window_lon = from_plane(east, north, centre)
    receivers, satellites = np.unique(lines.receiver[line]), np.unique(lines.satellite[line])
    span = slice(int(block.min()), int(block.max()) + 1)
    start, end = times[block.min()], times[block.max()] + np.timedelta64(round(ROTI_WINDOW_S), "s")
    lat, lon = float(where[0]), float(where[1])
    return Patch(
        start=start,
        end=end,
        lat=lat,
        lon=lon,
        radius_km=float(np.quantile(away, 0.9)),
        index_highest=float(values.max()),
        index_median=float(np.median(values)),
        windows=len(values),
        receivers=tuple(rays.receivers[number].name for number in receivers),
        satellites=tuple(str(rays.satellites[number]) for number in satellites),
        slips=int(breaks[span][:, receivers].sum()),
        losses=int(losses[span][:, receivers].sum()),
        planar=_planar_around(samples, start, end, lat, lon),
        drift_m_s=drift,
        drift_sigma_m_s=drift_sigma,
        drift_heading_deg=heading,
        confirmed=_not_one_receiver(lines.receiver[line], values >= choices.ragged_tecu_min),
        window_time=times[block] + np.timedelta64(round(ROTI_WINDOW_S / 2.0), "s"),
        window_lat=window_lat,
        window_lon=window_lon,
    )


def _not_one_receiver(receiver: Ints, ragged: Bools) -> bool:
    """Whether two windows or more, a ragged one among them, remain when any one receiver is left out."""
    windows = np.bincount(receiver)
    own = np.bincount(receiver, weights=ragged)
    return bool(np.all(len(receiver) - windows >= 2) and np.all(ragged.sum() - own >= 1))


def _drift(
    seconds: Floats, east: Floats, north: Floats, weight: Floats, choices: IrregularityChoices
) -> tuple[float, float, float]:
    """Speed [m/s], sigma and direction [deg] of the centre of raggedness; NaN where it cannot be told.

    A weighted straight line through the places by time.  The pierce points move by themselves and look where the
    satellites are; their scatter is in the sigma, and only a drift of several sigmas is told.
    """
    nothing = (float("nan"), float("nan"), float("nan"))
    if len(np.unique(seconds)) < 4 or len(seconds) < 10:
        return nothing
    share = weight / weight.sum()
    middle_t = (seconds * share).sum()
    spread = (share * (seconds - middle_t) ** 2).sum()
    speeds, sigmas = [], []
    for place in (east, north):
        slope = (share * (seconds - middle_t) * place).sum() / spread
        rest = place - (share * place).sum() - slope * (seconds - middle_t)
        speeds.append(slope * 1000.0)
        sigmas.append(1000.0 * np.sqrt((share * rest**2).sum() / spread / max(1.0, len(seconds) / 3.0 - 2.0)))
    speed, sigma = float(np.hypot(*speeds)), float(np.hypot(*sigmas))
    if speed < choices.drift_sigmas * sigma:
        return nothing
    return speed, sigma, float(np.degrees(np.arctan2(speeds[0], speeds[1])) % 360.0)


def _planar_around(samples: Samples | None, start: Any, end: Any, lat: float, lon: float) -> tuple[float, float]:
    """Chi-square and its limit of the planar fit around a place at the middle of a span; NaN where too few points.

    Points nearest first: 800 km, then farther up to 30 points and 2100 km, at least 10 (from memory, Walter et al.).
    """
    if samples is None:
        return float("nan"), float("nan")
    rays = samples.rays
    moment = start + (end - start) // 2
    half = np.timedelta64(round(0.75 * rays.interval_s * 1e9), "ns")
    rows = np.flatnonzero((np.abs(rays.time - moment) <= half) & (rays.elevation >= 10.0))
    if len(rows) == 0:
        return float("nan"), float("nan")
    _, first = np.unique(rays.satellite[rows] * len(rays.receivers) + rays.receiver[rows], return_index=True)
    rows = rows[first]
    east, north = plane_km(rays.pierce_lat[rows], rays.pierce_lon[rows], (lat, lon))
    away = np.hypot(east, north)
    order = np.argsort(away)
    number = max(int((away <= 800.0).sum()), min(30, int((away <= 2100.0).sum())))
    if number < 10:
        return float("nan"), float("nan")
    near = order[:number]
    sigma = np.hypot(DECORRELATION_M, samples.sigma[rows[near]] * L1_M_PER_TECU)
    fit = planar_fit(east[near], north[near], samples.vtec[rows[near]] * L1_M_PER_TECU, sigma)
    return float(fit["chi_square"]), float(fit["limit"])
