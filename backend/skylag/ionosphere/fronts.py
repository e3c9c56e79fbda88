"""Moving walls of content: found on many lines of sight, fitted to a straight line on the move, followed and foretold.

Each line of sight that a wall sweeps over shows one steep run of its vertical content (phase only: no bias matters).
The middles of the runs are points in space and time; a wall is a plane through them.  The plane is sought by trying
many triples of points (RANSAC: Fischler and Bolles 1981) and polished by least squares, together with the height at
which the wall stands, since a shell of another height shifts the pierce points of low lines of sight.  Speed and
direction from arrival times at three stations are common practice for such walls and carry about 30 % (Radio Science
48, 2013); many lines of sight do better and say how much.
Never calls a wall what a single receiver or satellite saw, nor what chance makes as good.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view

from skylag.constants import KM_PER_DEG, SHELL_EARTH_RADIUS_M
from skylag.events import Arrival
from skylag.ionosphere.field import plane_km
from skylag.ionosphere.front_segments import follow, joined, line_at, meeting
from skylag.ionosphere.sightlines import Sightlines, from_plane, lay_out, middle
from skylag.ionosphere.slopes import MM_PER_TECU
from skylag.tables import Bools, Floats, Front, Fronts, Ints, Onsets, Rays, Samples, Site, Slopes, Times

_LEAST_MISFIT = 0.05  # the scatter allowed to a run's place is for thick walls; agreement makes sigmas smaller, not nil
_TWO_WAYS_KM_S = 0.1  # pierce points overtake walls slower than this and see them from the other side
_SLOW_KM_S, _SLOW_BIAS_KM_S = 0.1, 0.005  # speed error of a wall near rest, less and less up to 100 m/s (simulated)
SLOWEST_M_S = 5.0  # nothing is foretold of a wall near rest: the bias above is as large as its speed
_PIERCE_KM_S = 0.06  # usual speed of a pierce point: even a wall at rest is swept over by them


@dataclass(frozen=True)
class FrontChoices:
    """How onsets and walls are found.

    step_s            faster data are thinned to this spacing
    elevation_deg     lowest elevation of a line of sight
    rate_tecu_min     a run is steep from this rate above its background on: a disturbance of 0.5 TECU amplitude and 15
                      minutes period changes by 0.21 TECU/min at most
    noise_factor      and from so many times the line's own scatter on
    least_jump_tecu   smaller runs are left alone
    dominance         a run must change content by so much more than any opposite run of its line within 15 minutes
    place_km, height_share_km   scatter allowed of a run's place: at zenith, and per unit of tan(zenith angle)
    fewest, fewest_receivers, fewest_satellites   what a wall needs
    fastest_m_s       walls faster than this are not sought
    tries, seed       triples tried, and where their draw starts
    """

    step_s: float = 30.0
    elevation_deg: float = 15.0
    rate_tecu_min: float = 0.35
    noise_factor: float = 6.0
    least_jump_tecu: float = 1.5
    dominance: float = 1.5
    place_km: float = 12.0
    height_share_km: float = 12.0
    height_sigma_km: float = 60.0
    fewest: int = 6
    fewest_receivers: int = 3
    fewest_satellites: int = 2
    fastest_m_s: float = 1500.0
    apart_s: float = 2400.0
    tries: int = 2500
    seed: int = 20_031_120
    track_step_s: float = 300.0


def track(
    rays: Rays, samples: Samples, slopes: Slopes | None = None, choices: FrontChoices | None = None
) -> Fronts:
    """The fronts of a network day and the onsets behind them.

    slopes  not needed for finding; where given, a front whose place pairs witness gains nothing but agreement
    """
    choices = choices or FrontChoices()
    onsets = find_onsets(rays, samples, choices)
    return fit_walls(onsets, rays, choices)


# ---------------------------------------------------------------------------------------------- onsets


def find_onsets(rays: Rays, samples: Samples, choices: FrontChoices | None = None) -> Onsets:
    """Steep runs of vertical content on every line of sight."""
    choices = choices or FrontChoices()
    lines = lay_out(rays, max(choices.step_s, rays.interval_s))
    vtec = lines.layer(np.where(rays.elevation >= choices.elevation_deg, samples.vtec, np.nan))
    arcs = lines.numbers(rays.arc)
    if len(lines.times) < 8:
        return _no_onsets()
    minute, three = (rate_over(vtec, arcs, lines.step_s, span) for span in (60.0, 180.0))
    # Walls that pass within minutes are too fast for rates over a minute: one interval is sharper.
    sharp = np.full(vtec.shape, np.nan)
    sharp[1:] = np.where((arcs[1:] == arcs[:-1]) & (arcs[1:] >= 0), np.diff(vtec, axis=0) / lines.step_s, np.nan)
    background = _background(three, lines.step_s)
    excess, slow = minute - background, three - background
    scatter = 1.4826 * _median_down(np.abs(excess))
    limit = np.maximum(choices.rate_tecu_min / 60.0, choices.noise_factor * _median_down(np.abs(slow)) * 1.4826)
    with np.errstate(invalid="ignore"):
        sign = np.where(np.abs(slow) > limit, np.sign(slow), 0.0)
    return _runs(lines, rays, sign, (sharp - background, excess, slow), scatter, choices)


def rate_over(values: Floats, arcs: Ints, step_s: float, span_s: float) -> Floats:
    """Central rate of change per second over about `span_s` (T, C), NaN where the arc does not reach both sides."""
    half = max(1, round(0.5 * span_s / step_s))
    rate = np.full(values.shape, np.nan)
    if len(values) > 2 * half:
        same = (arcs[2 * half :] == arcs[: -2 * half]) & (arcs[2 * half :] >= 0)
        rate[half:-half] = np.where(same, (values[2 * half :] - values[: -2 * half]) / (2 * half * step_s), np.nan)
    return rate


def _median_down(values: Floats) -> Floats:
    """Median of each column, NaN left out; 0 for a column without values."""
    ordered = np.sort(values, axis=0)  # NaN goes last
    count = np.isfinite(ordered).sum(axis=0)
    at = np.maximum(count // 2, 0).clip(max=len(values) - 1)
    return np.where(count > 0, np.nan_to_num(ordered[at, np.arange(values.shape[1])]), 0.0)


def _background(rate: Floats, step_s: float, block_s: float = 300.0, blocks: int = 25) -> Floats:
    """The running rate: median over two hours of five-minute medians (T, C); 0 where too little is known."""
    size = max(1, round(block_s / step_s))
    count = -(-len(rate) // size)
    padded = np.full((count * size, rate.shape[1]), np.nan)
    padded[: len(rate)] = rate
    ordered = np.sort(padded.reshape(count, size, -1), axis=1)
    known = np.isfinite(ordered).sum(axis=1)
    coarse = np.take_along_axis(ordered, (np.maximum(known - 1, 0) // 2)[:, None, :], axis=1)[:, 0, :]
    wide = np.full((count + blocks - 1, rate.shape[1]), np.nan)
    wide[blocks // 2 : blocks // 2 + count] = coarse
    windows = np.sort(sliding_window_view(wide, blocks, axis=0), axis=2)
    enough = np.isfinite(windows).sum(axis=2)
    middle_one = np.take_along_axis(windows, (np.maximum(enough - 1, 0) // 2)[:, :, None], axis=2)[:, :, 0]
    smooth = np.where(enough >= 4, middle_one, 0.0)
    return np.repeat(smooth, size, axis=0)[: len(rate)]


def _no_onsets() -> Onsets:
    empty: dict[str, Any] = {name: np.zeros(0) for name in Onsets.COLUMNS}
    for name in ("start", "time", "end"):
        empty[name] = np.zeros(0, dtype="datetime64[ns]")
    for name in ("receiver", "satellite", "front"):
        empty[name] = np.zeros(0, dtype=np.int64)
    return Onsets(**empty)


def _runs(
    lines: Sightlines, rays: Rays, sign: Floats, rates: tuple[Floats, Floats, Floats], scatter: Floats,
    choices: FrontChoices,
) -> Onsets:  # fmt: skip
    """Stretches of one sign, each with its middle, jump and steepest rate."""
    # One long row, line of sight after line of sight, so that a run is a stretch of equal sign.
    flat_sign = np.vstack([sign, np.zeros((1, sign.shape[1]))]).T.ravel()
    height = len(sign) + 1
    edges = np.flatnonzero(np.diff(np.concatenate([[0.0], flat_sign, [0.0]])) != 0)
    starts, ends = edges[:-1], edges[1:]  # stretches [start, end) of one value
    steep = flat_sign[starts] != 0
    starts, ends = starts[steep], ends[steep]
    if len(starts) == 0:
        return _no_onsets()
    # Rates above the background over one interval, one minute, three minutes.
    flat_sharp, flat_excess, flat_slow = (
        np.vstack([np.nan_to_num(rate), np.zeros((1, sign.shape[1]))]).T.ravel() for rate in rates
    )
    # A central rate over three minutes reaches past the run itself; the sums go by the one-minute rate inside.
    bounds = np.stack([starts, ends], axis=1).ravel()
    bounds = np.minimum(bounds, len(flat_excess) - 1)
    toward = flat_sign[starts]
    rate = flat_excess * flat_sign
    jump = np.add.reduceat(np.maximum(rate, 0.0) * lines.step_s, bounds)[::2]
    seconds = np.tile(np.arange(height) * lines.step_s, sign.shape[1])
    when = np.add.reduceat(np.maximum(rate, 0.0) * seconds * lines.step_s, bounds)[::2] / np.maximum(jump, 1e-9)
    peak_fine = np.maximum.reduceat(rate, bounds)[::2]
    peak_slow = np.maximum.reduceat(flat_slow * flat_sign, bounds)[::2]
    peak_sharp = np.maximum.reduceat(flat_sharp * flat_sign, bounds)[::2]
    lasting = (ends - starts) * lines.step_s
    line = starts // height
    clear = (lasting <= 420.0) & (peak_sharp > 20.0 * scatter[line])
    peak = np.where(clear, peak_sharp, np.where(lasting > 600.0, peak_slow, peak_fine))
    # A run that begins or ends with its arc is cut: its middle is only the middle of what was seen.
    known = np.vstack([np.isfinite(rates[2]), np.zeros((1, sign.shape[1]), dtype=bool)]).T.ravel()
    cut = ~(known[np.maximum(starts - 1, 0)] & known[np.minimum(ends, len(known) - 1)])
    kept = (jump >= choices.least_jump_tecu) & (lasting >= 2 * lines.step_s)
    kept &= _dominant(line, when, toward, jump, choices)
    line, when, toward, jump, peak, starts, ends, cut = (
        v[kept] for v in (line, when, toward, jump, peak, starts, ends, cut)
    )
    epoch = np.clip(np.rint(when / lines.step_s).astype(np.int64), 0, len(lines.times) - 1)
    place = _places(lines, rays, epoch, line, when)
    noise = scatter[line]
    # The middle of a run is not known better than to a tenth of its length: its feet drown in the background.
    spread = np.maximum(lines.step_s / np.sqrt(12.0), noise * 2.0 * lines.step_s / np.maximum(peak, 1e-9))
    spread = np.hypot(spread, np.where(cut, 0.5 * (ends - starts) * lines.step_s, 0.1 * jump / np.maximum(peak, 1e-9)))
    return Onsets(
        start=lines.times[np.minimum(starts % height, len(lines.times) - 1)],
        time=lines.times[0] + np.rint(when * 1e9).astype(np.int64).astype("timedelta64[ns]"),
        end=lines.times[np.minimum((ends - 1) % height, len(lines.times) - 1)],
        receiver=lines.receiver[line],
        satellite=lines.satellite[line],
        jump=toward * jump,
        rate=toward * peak,
        rate_sigma=np.maximum(noise, 1e-5),
        time_sigma_s=spread,
        front=np.full(len(line), -1, dtype=np.int64),
        **place,
    )


def _dominant(line: Ints, when: Floats, toward: Floats, jump: Floats, choices: FrontChoices) -> Bools:
    """Runs not matched by an opposite run of the same line within 15 minutes: a wall changes content one way."""
    good = np.ones(len(line), dtype=bool)
    for shift in range(1, 9):  # neighbours in time on the same line; runs come in order of line, then time
        for a, b in ((slice(None, -shift), slice(shift, None)), (slice(shift, None), slice(None, -shift))):
            if shift >= len(line):
                continue
            rival = (line[a] == line[b]) & (toward[a] != toward[b]) & (np.abs(when[a] - when[b]) < 900.0)
            good[a] &= ~(rival & (jump[a] < choices.dominance * jump[b]))
    return good


def _places(lines: Sightlines, rays: Rays, epoch: Ints, line: Ints, when: Floats) -> dict[str, Floats]:
    """Pierce point, its speed, elevation and azimuth at the middles of the runs."""
    row = lines.row[epoch, line]
    # The middle of a run may fall on an epoch without a ray: take the nearest ray of the line near it.
    for shift in (1, -1, 2, -2, 3, -3):
        missing = row < 0
        row[missing] = lines.row[np.clip(epoch[missing] + shift, 0, len(lines.times) - 1), line[missing]]
    ahead = lines.row[np.clip(epoch + 4, 0, len(lines.times) - 1), line]
    behind = lines.row[np.clip(epoch - 4, 0, len(lines.times) - 1), line]
    ahead, behind = np.where(ahead < 0, row, ahead), np.where(behind < 0, row, behind)
    span = (rays.time[ahead] - rays.time[behind]).astype(np.int64) / 1e9
    span = np.where(span > 0, span, np.nan)
    turn = (rays.pierce_lon[ahead] - rays.pierce_lon[behind] + 180.0) % 360.0 - 180.0
    shrink = np.cos(np.radians(rays.pierce_lat[row]))
    north = np.nan_to_num((rays.pierce_lat[ahead] - rays.pierce_lat[behind]) * KM_PER_DEG * 1000.0 / span)
    east = np.nan_to_num(turn * KM_PER_DEG * 1000.0 * shrink / span)
    late = when - (rays.time[row] - lines.times[0]).astype(np.int64) / 1e9
    return {
        "lat": rays.pierce_lat[row] + north * late / (KM_PER_DEG * 1000.0),
        "lon": rays.pierce_lon[row] + east * late / (KM_PER_DEG * 1000.0 * shrink),
        "elevation": rays.elevation[row],
        "azimuth": rays.azimuth[row],
        "east_speed": east,
        "north_speed": north,
    }


# ---------------------------------------------------------------------------------------------- walls


@dataclass(frozen=True)
class _Points:
    """Onsets on the local map: km, seconds since the epoch, and the shift of place per km of wall height."""

    x: Floats
    y: Floats
    t: Floats
    lean_x: Floats
    lean_y: Floats
    place_sigma: Floats
    time_sigma: Floats
    receiver: Ints
    satellite: Ints
    toward: Floats  # +1 where content grew
    east_speed: Floats  # of the pierce point [km/s]
    north_speed: Floats


def _taken(points: _Points, chosen: Bools) -> _Points:
    return _Points(**{name: getattr(points, name)[chosen] for name in _Points.__dataclass_fields__})


@dataclass(frozen=True)
class _Wall:
    """A line on the move: heading [rad, from north to east], speed [km/s], offset [km] at t = 0, height [km] above the
    shell; covariance in that order; which points lie on it; chi-square per degree of freedom."""

    heading: float
    speed: float
    offset: float
    height: float
    covariance: Floats
    inside: Bools
    misfit: float
    brings: float = 0.0  # +1 where it brings content, -1 where it takes it, 0 where not asked

    def side(self, points: _Points) -> Floats:
        """What the wall brings by each point: a line of sight that overtakes it sees the reverse; 0 where it keeps up
        with the wall so closely that either may be seen."""
        along = points.east_speed * np.sin(self.heading) + points.north_speed * np.cos(self.heading)
        relative = self.speed - along
        return np.asarray(np.where(np.abs(relative) < 0.02, 0.0, points.toward * np.sign(relative)))

    def fits(self, points: _Points) -> Bools:
        """Points whose change of content is the wall's own, all where that is not asked."""
        return np.asarray((self.brings == 0.0) | (self.side(points) * self.brings >= 0.0))

    def distance(self, points: _Points) -> Floats:
        """How far [km] each point lies ahead of the wall at its time."""
        east, north = np.sin(self.heading), np.cos(self.heading)
        x, y = points.x + self.height * points.lean_x, points.y + self.height * points.lean_y
        return np.asarray(x * east + y * north - self.speed * points.t - self.offset)


def fit_walls(onsets: Onsets, rays: Rays, choices: FrontChoices | None = None) -> Fronts:
    """Walls through the onsets, best first within each stretch of time.

    Rising and falling content are kept apart at first.  A slow wall is seen as a rise by lines of sight that it
    overtakes and as a fall by those that overtake it: it takes both, and walls that hardly move are sought among both.
    """
    choices = choices or FrontChoices()
    centre = middle(rays)
    belongs = np.full(len(onsets), -1, dtype=np.int64)
    free = np.ones(len(onsets), dtype=bool)
    found: list[tuple[_Wall, Ints]] = []

    def seek(rows: Ints, two_ways: bool) -> None:
        left = rows[free[rows]]
        while len(left) >= choices.fewest:
            epoch = _mean_time(onsets.time[left])
            points = _points(onsets.where(left), centre, rays.shell_height_m, choices, epoch)
            wall = _best_wall(points, choices, two_ways)
            if wall is None:
                break
            if wall.speed < _TWO_WAYS_KM_S:
                left = _reachable(onsets, left, free, points, choices)
                points = _points(onsets.where(left), centre, rays.shell_height_m, choices, epoch)
                wall = _both_ways(points, wall, choices)
            found.append((wall, left[wall.inside]))
            # Broken runs of the wall and of its feet are the same wall, not another beside it: of a smooth step all but
            # two hundredths lie within its breadth (jump over steepest slope) on either side.
            steep = steepness(wall, onsets.where(left[wall.inside]), _taken(points, wall.inside))
            lean = points.lean_x * np.sin(wall.heading) + points.lean_y * np.cos(wall.heading)
            within = np.abs(wall.distance(points)) < steep.seen_width(lean) + 3.0 * points.place_sigma
            free[left[wall.inside | within]] = False
            left = rows[free[rows]]

    for rows in _stretches(onsets, choices, (1.0, -1.0)):
        seek(rows, two_ways=False)
    for rows in _stretches(onsets, choices, (0.0,)):
        seek(rows, two_ways=True)
    found.sort(key=lambda item: onsets.time[item[1]].min())
    pieces = [(_front(wall, onsets.where(rows), rays, centre, choices), rows) for wall, rows in found]
    pieces = _whole(pieces)
    for number, (_, rows) in enumerate(pieces):
        belongs[rows] = number
    return Fronts(tuple(front for front, _ in pieces), replace(onsets, front=belongs))


def _whole(pieces: list[tuple[Front, Ints]]) -> list[tuple[Front, Ints]]:
    """Fronts by their start, the pieces of one wall that changed its pace at once put together."""
    pieces = sorted(pieces, key=lambda piece: piece[0].start)
    for number, (first, rows) in enumerate(pieces):
        for later in range(number + 1, len(pieces)):
            at = meeting(first, pieces[later][0])
            if at is not None:
                one = joined(first, pieces[later][0], at), np.concatenate([rows, pieces[later][1]])
                return _whole([*pieces[:number], one, *pieces[number + 1 : later], *pieces[later + 1 :]])
    return pieces


def _reachable(onsets: Onsets, rows: Ints, free: Bools, points: _Points, choices: FrontChoices) -> Ints:
    """Rows of a stretch and of all free onsets of either sign within its span."""
    spare = np.timedelta64(round(choices.apart_s), "s")
    times = onsets.time[rows]
    near = free & (onsets.time >= times.min() - spare) & (onsets.time <= times.max() + spare)
    return np.union1d(rows, np.flatnonzero(near))


def _both_ways(points: _Points, wall: _Wall, choices: FrontChoices) -> _Wall:
    """A slow wall with the points that see it from its other side."""
    near = np.abs(wall.distance(points)) < 3.0 * points.place_sigma
    side = wall.side(points)[near]
    wall = replace(wall, brings=1.0 if (side > 0).sum() >= (side < 0).sum() else -1.0)
    own = near & wall.fits(points)
    polished = _polish(points, replace(wall, inside=own), choices)
    return replace(wall, inside=own) if polished is None else polished


def _stretches(onsets: Onsets, choices: FrontChoices, signs: tuple[float, ...]) -> list[Ints]:
    """Row numbers of onsets of one sign (0: either) without a long silence between them."""
    stretches: list[Ints] = []
    for toward in signs:
        rows = np.flatnonzero((toward == 0.0) | (np.sign(onsets.jump) == toward))
        rows = rows[np.argsort(onsets.time[rows], kind="stable")]
        if len(rows) == 0:
            continue
        gaps = np.diff(onsets.time[rows]).astype("timedelta64[ns]").astype(np.int64) / 1e9
        stretches.extend(np.split(rows, np.flatnonzero(gaps > choices.apart_s) + 1))
    return stretches


def _points(
    onsets: Onsets, centre: tuple[float, float], shell_height_m: float, choices: FrontChoices, epoch: Any = None
) -> _Points:
    """Onsets on the local map; time runs from `epoch`, by default their mean."""
    x, y = plane_km(onsets.lat, onsets.lon, centre)
    epoch = _mean_time(onsets.time) if epoch is None else epoch
    # Zenith angle at the shell, and how the pierce point moves outward per km of height.
    ratio = SHELL_EARTH_RADIUS_M / (SHELL_EARTH_RADIUS_M + shell_height_m)
    zenith_rad = np.arcsin(np.clip(ratio * np.cos(np.radians(onsets.elevation)), 0.0, 1.0))
    lean = np.tan(zenith_rad) * ratio
    azimuth_rad = np.radians(onsets.azimuth)
    return _Points(
        x=x,
        y=y,
        t=(onsets.time - epoch).astype("timedelta64[ns]").astype(np.int64) / 1e9,
        lean_x=lean * np.sin(azimuth_rad),
        lean_y=lean * np.cos(azimuth_rad),
        place_sigma=np.hypot(choices.place_km, choices.height_share_km * lean),
        time_sigma=onsets.time_sigma_s,
        receiver=onsets.receiver,
        satellite=onsets.satellite,
        toward=np.sign(onsets.jump),
        east_speed=onsets.east_speed / 1000.0,
        north_speed=onsets.north_speed / 1000.0,
    )


def _mean_time(times: Times) -> np.datetime64:
    first = times.min().astype("datetime64[ns]")
    mean_ns = int((times - first).astype("timedelta64[ns]").astype(np.int64).mean())
    return np.datetime64(first + np.timedelta64(mean_ns, "ns"))


def _best_wall(points: _Points, choices: FrontChoices, two_ways: bool = False) -> _Wall | None:
    """The wall with most points on it, polished; None where chance does as well or too few saw it.

    two_ways  seek among rises and falls; only walls that pierce points overtake are taken then
    """
    rng = np.random.default_rng(choices.seed)
    start = _try_triples(points, rng, choices, two_ways)
    if start is None:
        return None
    wall = _polish(points, start, choices)
    if wall is None or wall.inside.sum() < choices.fewest:
        return None
    if two_ways and wall.speed >= _PIERCE_KM_S:
        return None
    if len(np.unique(points.receiver[wall.inside])) < choices.fewest_receivers:
        return None
    if len(np.unique(points.satellite[wall.inside])) < choices.fewest_satellites:
        return None
    # The same places with their times dealt out anew: what a plane catches there is chance.  A wall at rest stays where
    # it is whatever the times, so the places are turned about their middle instead, each by an angle of its own.
    chance = 0
    for _ in range(3):
        dealt = _turned(points, rng) if two_ways else replace(points, t=rng.permutation(points.t))
        caught = _try_triples(dealt, rng, choices, two_ways)
        chance = max(chance, 0 if caught is None else int(caught.inside.sum()))
    if wall.inside.sum() - 3 < 1.7 * (chance - 3):
        return None
    return wall


def _turned(points: _Points, rng: np.random.Generator) -> _Points:
    """The points, each turned about their middle by a random angle."""
    angle = rng.uniform(0.0, 2.0 * np.pi, len(points.x))
    x, y = points.x - points.x.mean(), points.y - points.y.mean()
    return replace(points, x=x * np.cos(angle) - y * np.sin(angle), y=x * np.sin(angle) + y * np.cos(angle))


def _try_triples(points: _Points, rng: np.random.Generator, choices: FrontChoices, two_ways: bool) -> _Wall | None:
    """The best of many planes, each through three points in space and time.

    Times count as kilometres at a tenth of a km per second, so that a wall at rest is a plane like any other.
    """
    pace = 0.1
    places = np.stack([points.x, points.y, points.t * pace], axis=1)
    a, b, c = rng.integers(0, len(places), size=(choices.tries, 3)).T
    one, two = places[b] - places[a], places[c] - places[a]
    normal = np.cross(one, two)
    area = np.linalg.norm(normal, axis=1)
    level = np.hypot(normal[:, 0], normal[:, 1])
    # Three places well off one line, or the direction is anybody's guess.
    longest = np.maximum(np.linalg.norm(one, axis=1), np.linalg.norm(two, axis=1))
    reach = np.maximum(np.hypot(one[:, 0], one[:, 1]), np.hypot(two[:, 0], two[:, 1]))
    usable = (area > 0.15 * longest**2) & (reach > 60.0) & (points.receiver[a] != points.receiver[b])
    usable &= np.abs(normal[:, 2]) * pace * 1000.0 <= choices.fastest_m_s * level
    if two_ways:
        usable &= np.abs(normal[:, 2]) * pace <= 2.0 * _PIERCE_KM_S * level
    if not usable.any():
        return None
    normal, level, a = normal[usable], level[usable], a[usable]
    speed = -normal[:, 2] * pace / level
    ahead = np.where(speed < 0.0, -1.0, 1.0)
    east, north, speed = ahead * normal[:, 0] / level, ahead * normal[:, 1] / level, np.abs(speed)
    offset = points.x[a] * east + points.y[a] * north - speed * points.t[a]
    away = np.abs(
        points.x[None, :] * east[:, None] + points.y[None, :] * north[:, None] - speed[:, None] * points.t
        - offset[:, None]
    )  # fmt: skip
    allowed = np.hypot(
        points.place_sigma[None, :], np.maximum(speed, _PIERCE_KM_S)[:, None] * points.time_sigma[None, :]
    )
    cost = np.minimum((away / allowed) ** 2, 9.0)
    brings = 0.0
    if two_ways:
        relative = speed[:, None] - points.east_speed * east[:, None] - points.north_speed * north[:, None]
        side = np.where(np.abs(relative) < 0.02, 0.0, points.toward * np.sign(relative))
        gain, loss = (np.where(side * way < 0.0, 9.0, cost).sum(axis=1) for way in (1.0, -1.0))
        brings = 1.0 if gain.min() <= loss.min() else -1.0
        best = int(np.argmin(gain if brings > 0.0 else loss))
        inside = ((away / allowed)[best] < 3.0) & (side[best] * brings >= 0.0)
    else:
        best = int(np.argmin(cost.sum(axis=1)))
        inside = (away / allowed)[best] < 3.0
    return _Wall(
        float(np.arctan2(east[best], north[best])), float(speed[best]), float(offset[best]), 0.0,
        np.zeros((4, 4)), inside, float("nan"), brings,
    )  # fmt: skip


def _polish(points: _Points, start: _Wall, choices: FrontChoices) -> _Wall | None:
    """Least squares for heading, speed, offset and height of the wall, points far off weighted down (Huber)."""
    wall = start
    for _ in range(12):
        east, north = np.sin(wall.heading), np.cos(wall.heading)
        x, y = points.x + wall.height * points.lean_x, points.y + wall.height * points.lean_y
        away = wall.distance(points)
        sigma = np.hypot(points.place_sigma, max(abs(wall.speed), _PIERCE_KM_S) * points.time_sigma)
        # Cut or long runs have wide sigmas: they are weighed by them, but not let in from afar.
        near = np.hypot(points.place_sigma, max(abs(wall.speed), _PIERCE_KM_S) * np.minimum(points.time_sigma, 120.0))
        inside = (np.abs(away) < 3.0 * near) & wall.fits(points)
        if inside.sum() < max(4, choices.fewest - 1):
            return None
        pull = np.minimum(1.0, 1.5 / np.maximum(np.abs(away / sigma), 1e-9))
        weight = np.where(inside, pull, 0.0) / sigma**2
        design = np.stack(
            [x * north - y * east, -points.t, -np.ones(len(x)), points.lean_x * east + points.lean_y * north], axis=1
        )
        normal = design.T @ (design * weight[:, None])
        right = -design.T @ (away * weight)
        normal[3, 3] += 1.0 / choices.height_sigma_km**2
        right[3] -= wall.height / choices.height_sigma_km**2
        scale = np.sqrt(np.maximum(np.diag(normal), 1e-12))
        scaled = normal / scale[:, None] / scale[None, :]
        if np.linalg.cond(scaled) > 1e10:
            return None
        step = np.linalg.solve(scaled, right / scale) / scale
        misfit = float((away[inside] ** 2 * weight[inside]).sum() / max(1, inside.sum() - 4))
        wall = _Wall(
            wall.heading + float(np.clip(step[0], -0.5, 0.5)), wall.speed + float(step[1]),
            wall.offset + float(step[2]), wall.height + float(step[3]),
            np.linalg.inv(scaled) / scale[:, None] / scale[None, :] * max(_LEAST_MISFIT, misfit), inside, misfit,
            wall.brings,
        )  # fmt: skip
    wall = replace(wall, covariance=_widened(wall.covariance, normal, design * (weight * away)[:, None], points))
    if wall.speed < 0.0:
        # The other way round it takes what it brought.
        wall = replace(
            wall, heading=wall.heading + np.pi, speed=-wall.speed, offset=-wall.offset, brings=-wall.brings
        )
    return wall if wall.speed * 1000.0 <= choices.fastest_m_s else None


def _widened(covariance: Floats, normal: Floats, pulls: Floats, points: _Points) -> Floats:
    """The covariance, no smaller than what the agreement between satellites says.

    Errors are alike along one satellite (shape of the wall, background, how the pierce points run), so that each
    satellite counts as one witness: the cluster-robust estimate (Liang and Zeger 1986), with correlations kept.
    pulls  (N, 4) what each point pulls at the parameters
    """
    satellites, which = np.unique(points.satellite, return_inverse=True)
    sums = np.zeros((len(satellites), 4))
    np.add.at(sums, which, pulls)
    spread = np.linalg.inv(normal)
    robust = spread @ (sums.T @ sums) @ spread * len(satellites) / max(1, len(satellites) - 1)
    growth = np.sqrt(np.maximum(1.0, np.diag(robust) / np.maximum(np.diag(covariance), 1e-30)))
    return np.asarray(covariance * growth[:, None] * growth[None, :], dtype=np.float64)


def _front(
    wall: _Wall, onsets: Onsets, rays: Rays, centre: tuple[float, float], choices: FrontChoices
) -> Front:
    """A wall with its slope, width, reach and track."""
    epoch = _mean_time(onsets.time)
    # The wall was fitted with time from the mean of all points of its stretch: fit it anew to its own.
    points = _points(onsets, centre, rays.shell_height_m, choices)
    wall = replace(wall, offset=wall.offset + float(np.median(wall.distance(points))))
    wall = _polish(points, wall, choices) or wall
    east, north = np.sin(wall.heading), np.cos(wall.heading)
    x, y = points.x + wall.height * points.lean_x, points.y + wall.height * points.lean_y
    offset = wall.offset
    along = x * north - y * east  # to the right of the heading
    # A slow wall takes so long to pass that the running background follows it: its speed is biased by that.
    covariance = wall.covariance.copy()
    covariance[1, 1] += (_SLOW_BIAS_KM_S * max(0.0, 1.0 - wall.speed / _SLOW_KM_S)) ** 2
    wall = replace(wall, covariance=covariance)
    steep = steepness(wall, onsets, points, max(choices.step_s, rays.interval_s))
    lean_start, lean_end = onsets.time.min(), onsets.time.max()
    steps = np.arange(lean_start, lean_end + np.timedelta64(1, "s"), np.timedelta64(round(choices.track_step_s), "s"))
    whole = (offset, wall.speed, wall.heading)
    late = np.hypot(points.place_sigma, max(wall.speed, _PIERCE_KM_S) * points.time_sigma)
    segments = follow(along, wall.distance(points), late, points.t, whole, wall.misfit)
    away, turned = line_at(segments, whole, (steps - epoch).astype("timedelta64[ns]").astype(np.int64) / 1e9)
    lat, lon = from_plane(away * np.sin(turned), away * np.cos(turned), centre)
    sigma = np.sqrt(np.diag(covariance))
    receivers = tuple(rays.receivers[number].name for number in np.unique(onsets.receiver))
    satellites = tuple(str(rays.satellites[number]) for number in np.unique(onsets.satellite))
    return Front(
        start=lean_start,
        end=lean_end,
        epoch=epoch,
        centre=centre,
        offset_km=offset,
        offset_sigma_km=float(sigma[2]),
        speed_m_s=wall.speed * 1000.0,
        speed_sigma_m_s=float(sigma[1]) * 1000.0,
        heading_deg=float(np.degrees(wall.heading) % 360.0),
        heading_sigma_deg=float(np.degrees(sigma[0])),
        slope=steep.slope,
        slope_sigma=steep.slope_sigma,
        width_km=steep.width,
        width_sigma_km=steep.width_sigma,
        jump_tecu=steep.jump * (wall.brings or float(np.sign(onsets.jump[0]))),
        jump_sigma_tecu=steep.jump_sigma,
        depth_km=steep.depth,
        reach_km=(float(along.min()), float(along.max())),
        sweep_km=float(np.sqrt(np.mean(wall.distance(points) ** 2))),
        height_km=rays.shell_height_m / 1000.0 + wall.height,
        height_sigma_km=float(sigma[3]),
        onsets=len(onsets),
        receivers=receivers,
        satellites=satellites,
        confirmed=True,
        covariance=covariance[np.ix_([2, 1, 0], [2, 1, 0])],
        track=tuple(zip(steps, lat.tolist(), lon.tolist(), strict=True)),
        segments=segments,
    )


@dataclass(frozen=True)
class Steepness:
    """Slope [mm/km, vertical], breadth [km] (jump over steepest slope), jump [TECU], with sigmas; depth [km]: how much
    broader a line of sight sees the wall per unit of its lean, since the wall has a height of its own."""

    slope: float
    slope_sigma: float
    width: float
    width_sigma: float
    jump: float
    jump_sigma: float
    depth: float

    def seen_width(self, lean: Floats) -> Floats:
        """Breadth [km] that a line of sight of this lean along the heading sees."""
        return np.hypot(np.nan_to_num(self.width), self.depth * lean)


def steepness(wall: _Wall, onsets: Onsets, points: _Points, interval_s: float = 30.0) -> Steepness:
    """How steep a wall is, from how fast each line of sight crossed it.

    A pierce point that moves with the wall sees it pass slowly, so the steepest rate is divided by the relative speed
    along the heading.  A slanting line of sight meets an upright wall over a stretch that grows with its lean, and
    sees it too broad and too flat: the breadth per TECU is taken as that of the wall upright and a part that grows with
    the lean, those of least lean counting most.  How the two add depends on shapes that are not known: as squares when
    both are bells, plainly when they have long tails; the truth lies between, so the mean of both is taken and half
    their difference is in the sigma, as is what a wider choice of lines would change, and what the restlessness of the
    lines adds to a steepest rate.  Broken runs (jump far from the usual) are left out.
    """
    east, north = np.sin(wall.heading), np.cos(wall.heading)
    relative = np.abs(wall.speed * 1000.0 - (onsets.east_speed * east + onsets.north_speed * north)) / 1000.0
    lean = np.abs(points.lean_x * east + points.lean_y * north)
    jumps = np.abs(onsets.jump)
    usual = float(np.median(jumps))
    whole = (relative > 0.03) & (np.abs(jumps - usual) < 0.4 * usual)
    nearest = np.sort(lean[whole])[min(int(whole.sum()), max(8, int(whole.sum()) // 2)) - 1] if whole.any() else 0.0
    used = np.flatnonzero(whole & (lean <= nearest))
    if len(used) < 3:
        nothing = float("nan")
        return Steepness(nothing, nothing, nothing, nothing, usual, nothing, 0.0)
    # Kilometres per TECU: the inverse slope, whose square grows with the square of the lean.
    inverse = relative[used] / np.maximum(np.abs(onsets.rate[used]), 1e-9)
    bells, bells_sigma, depth = _upright(inverse, lean[used], 0.1, 2.0)
    tails = _upright(inverse, lean[used], 0.1, 1.0)[0]
    breadth = 2.0 / (1.0 / bells + 1.0 / tails)
    unknown = np.array([0.5 * (bells - tails), 0.5 * (bells - _upright(inverse, lean[used], 0.2, 2.0)[0]), bells_sigma])
    breadth_sigma = float(np.sqrt((unknown**2).sum()))
    few = used[np.argsort(lean[used], kind="stable")][: max(5, len(used) // 3)]
    jump = float(np.median(jumps[few]))
    jump_sigma = 1.2533 * 1.4826 * float(np.median(np.abs(jumps[few] - jump))) / np.sqrt(len(few))
    slope, width = MM_PER_TECU / breadth, jump * breadth
    speed_share = float(np.sqrt(wall.covariance[1, 1]) / np.median(relative[used]))
    # Steepest rates are taken over an interval: a wall that passes within two of them is flattened by chance.
    intervals = float(np.median(relative[used]) * interval_s / width)
    blur = min(0.5, intervals**2 / 12.0 + 0.25 * min(1.0, max(0.0, 2.0 * intervals - 1.0)))
    restless = float(np.median(onsets.rate_sigma[used] / np.abs(onsets.rate[used])))
    share = float(np.sqrt((breadth_sigma / breadth) ** 2 + speed_share**2 + blur**2 + restless**2))
    width_sigma = width * float(np.hypot(share, jump_sigma / jump))
    return Steepness(slope, slope * share, width, width_sigma, jump, jump_sigma, depth * jump)


def _upright(seen: Floats, lean: Floats, least: float, power: float) -> tuple[float, float, float]:
    """Breadth seen upright, its sigma, and the growth of breadth per unit of lean; robust.

    seen   breadths [km per TECU]; lean  tangent of the angle in which a line of sight slants along the heading
    power  the breadths of wall and slant add as such powers

    Lines with a lean above `least` count less and less.
    """
    trust = 1.0 / (1.0 + (lean / least) ** 2)
    design = np.stack([np.ones(len(seen)), lean**power], axis=1)
    target = seen**power
    weight = np.sqrt(trust) / np.median(target)
    covariance: Floats = np.zeros((2, 2))
    answer = np.array([float(np.median(target)), 0.0])
    for _ in range(8):
        normal = _normal(design, weight)
        answer = np.linalg.solve(normal, design.T @ (target * weight**2))
        # Neither a width nor a depth can be negative: what would be is held at nothing.
        if answer[1] < 0.0 or answer[0] < 0.05 * float(np.min(target)):
            mean = float((target * weight**2).sum() / (weight**2).sum())
            answer = np.array([mean, 0.0])
        model = np.maximum(design @ answer, 1e-12)
        over = target / model - 1.0
        scatter = max(1.4826 * float(np.median(np.abs(over))), 0.01)
        weight = np.sqrt(trust * np.minimum(1.0, 1.5 / np.maximum(np.abs(over) / scatter, 1e-9))) / model
        covariance = np.asarray(np.linalg.inv(_normal(design, weight)) * scatter**2, dtype=np.float64)
    held = answer[1] == 0.0
    variance = scatter**2 * answer[0] ** 2 / len(seen) if held else covariance[0, 0]
    breadth, growth = float(answer[0] ** (1.0 / power)), float(answer[1] ** (1.0 / power))
    return breadth, float(np.sqrt(variance)) * breadth / (power * float(answer[0])), growth


def _normal(design: Floats, weight: Floats) -> Floats:
    """Normal matrix, kept away from singular by a trillionth of its diagonal."""
    normal = design.T @ (design * weight[:, None] ** 2)
    return np.asarray(normal + 1e-12 * np.diag(np.diag(normal) + 1e-30))


# ---------------------------------------------------------------------------------------------- arrivals


def line_of(front: Front, time: Any) -> tuple[Floats, Floats]:
    """Distance [km] of the wall's line from the centre of its map, and its heading [rad], at times."""
    elapsed = (np.asarray(time) - front.epoch).astype("timedelta64[ns]").astype(np.int64) / 1e9
    whole = (front.offset_km, front.speed_m_s / 1000.0, float(np.radians(front.heading_deg)))
    return line_at(front.segments, whole, elapsed)


def position(front: Front, time: Any) -> Floats:
    """Distance [km] of the wall from the centre of its map toward its heading, at times."""
    return line_of(front, time)[0]


def ahead_km(front: Front, lat: Any, lon: Any, time: Any) -> tuple[Floats, Floats]:
    """How far [km] places lie ahead of the wall at times (negative: passed), and how far right of its middle line."""
    x, y = plane_km(np.asarray(lat, dtype=np.float64), np.asarray(lon, dtype=np.float64), front.centre)
    offset, heading_rad = line_of(front, time)
    east, north = np.sin(heading_rad), np.cos(heading_rad)
    return np.asarray(x * east + y * north - offset), np.asarray(x * north - y * east)


def expected_at(front: Front, lat: float, lon: float) -> tuple[np.datetime64, float]:
    """When the wall's middle is at a place, and the spread [s]; NaT where it stands still.

    The spread holds the sigmas of line and speed and the scatter of the lines of sight about the line.
    """
    if front.speed_m_s < SLOWEST_M_S:
        return np.datetime64("NaT"), float("nan")
    speed = front.speed_m_s / 1000.0
    moment, right = front.epoch, 0.0
    for _ in range(6):  # the line may change its pace and heading on the way
        left, aside = ahead_km(front, lat, lon, moment)
        right = float(aside)
        moment = moment + np.timedelta64(round(float(np.clip(left / speed, -1e5, 1e5)) * 1e9), "ns")
    elapsed = float((moment - front.epoch).astype("timedelta64[ns]").astype(np.int64)) / 1e9
    derivative = np.array([-1.0, -elapsed, float(right)])  # of the distance left, by offset, speed, heading
    variance = float(derivative @ front.covariance @ derivative) + front.sweep_km**2
    if len(front.segments):  # where it is foretold, by the pace of its latest stretch
        latest = front.segments[-1]
        variance += (max(0.0, elapsed - float(latest[0])) * float(latest[5])) ** 2
    return moment, float(np.sqrt(variance) / speed)


def arrivals(
    fronts: Fronts,
    rays: Rays,
    sites: Sequence[Site],
    choices: FrontChoices | None = None,
    every_s: float = 900.0,
    horizon_s: float = 3600.0,
) -> tuple[Arrival, ...]:
    """What could be foretold at each quarter hour from the onsets until then, for the sites, and what came of it.

    Each forecast refits the walls to the onsets of the two hours before: nothing later is used.  What came of it is
    told by the front as known at the end of the day, near the site.  Where the data end while a front is about, the
    last forecast is made from all of them: what it says of the next hour nobody can check yet.
    """
    choices = choices or FrontChoices()
    told: list[Arrival] = []
    if not len(rays):
        return ()
    newest = rays.time.max().astype("datetime64[ns]")
    step = np.timedelta64(round(every_s * 1e9), "ns")
    for number, front in enumerate(fronts.fronts):
        toward = np.sign(front.jump_tecu)
        moments = list(np.arange(front.start + step, min(front.end + step, newest) + np.timedelta64(1, "ns"), step))
        if newest <= front.end + np.timedelta64(round(horizon_s), "s") and newest not in moments:
            moments.append(newest)
        for made in moments:
            known = (fronts.onsets.end <= made) & (fronts.onsets.end > made - np.timedelta64(7200, "s"))
            known &= np.sign(fronts.onsets.jump) == toward
            then = fit_walls(fronts.onsets.where(known), rays, choices).fronts if known.sum() >= choices.fewest else ()
            for earlier in then[:1] if len(then) == 1 else sorted(then, key=lambda f: -f.onsets)[:1]:
                told.extend(_foretold(number, front, earlier, made, sites, horizon_s))
    return tuple(told)


def _foretold(
    number: int, front: Front, earlier: Front, made: np.datetime64, sites: Sequence[Site], horizon_s: float
) -> list[Arrival]:
    """Forecasts of one moment, with the outcome by the final front."""
    rows = []
    for site in sites:
        expected, sigma = expected_at(earlier, site.lat, site.lon)
        if np.isnat(expected) or not made < expected <= made + np.timedelta64(round(horizon_s), "s"):
            continue
        seen, seen_sigma = expected_at(front, site.lat, site.lon)
        _, right = ahead_km(front, site.lat, site.lon, front.epoch)
        watched = front.start <= seen <= front.end and front.reach_km[0] - 100 <= right <= front.reach_km[1] + 100
        miss = abs((expected - seen).astype("timedelta64[ns]").astype(np.int64) / 1e9)
        verdict = bool(miss <= 2.0 * np.hypot(sigma, seen_sigma)) if watched else None
        rows.append(
            Arrival(number, site.name, made, expected, sigma, seen if watched else np.datetime64("NaT"), verdict)
        )
    return rows
