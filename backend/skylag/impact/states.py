"""What slopes, fronts and patches mean for a place: holds, strained, broken, unseen, each with its reason.

Limits on the slope of the vertical delay (1 mm/km of slope is 1 mm of error per km of baseline), defaults in
`tables.Thresholds`:
- strained from 8 mm/km: the top class limit of the hourly index that network operators publish in parts per million of
  the baseline (Wanninger 2004, ION GNSS, 2849-2854; class limits as two state operators give them).  Half a cycle of
  1575.42 MHz is reached over 12 km.
- broken from 25.5 mm/km: the largest standard deviation of the vertical gradient that a ground-based augmentation
  station can broadcast (8 bits of 0.1 mm/km; ICAO Annex 10, Appendix B to chapter 3).  What is steeper cannot even be
  announced.
- patches: index 0.5 and 1.0 TECU/min (Ma and Maruyama 2006 and common classes, from memory).
A planning aid, not for navigation.  Never turns `unseen` into `holds`; only a confirmed front or patch, or a confirmed
slope right there, speaks for a place that the map does not see, and then only as a warning.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.ndimage import find_objects, label

from skylag.constants import KM_PER_DEG, L1_M_PER_TECU
from skylag.events import Arrival, Fault, Patch, Patches
from skylag.ionosphere.field import plane_km
from skylag.ionosphere.fronts import ahead_km
from skylag.ionosphere.slopes import MODEL_WIDTH_KM, field_slope_at
from skylag.tables import (
    BROKEN,
    HOLDS,
    STATE_NAMES,
    STRAINED,
    UNSEEN,
    Bools,
    Bytes,
    Fields,
    Flag,
    Floats,
    Front,
    Fronts,
    Region,
    SlopeClaim,
    Slopes,
    Thresholds,
    cells_at,
)

NOTHING = float("nan")
DOUBTED = "a front whose slope is hardly known passes here: nothing can be said"
# What a patch's evidence says of the planar-fit test of satellite-based services; `impact.uses` goes by it.
PLANAR_FAILS, PLANAR_PASSES = "planar fit fails", "planar fit passes"


@dataclass(frozen=True)
class JudgeChoices:
    """How far a witness speaks for its surroundings.

    sigmas         a slope counts when it is above the limit by so many of its sigmas
    claim_reach_km, claim_reach_s   a confirmed slope between receivers speaks for cells this near
    front_margin_km, front_beside_km  added to half the width of a wall on both sides, and to its reach at both ends
    patch_margin_km added to the radius of a patch, patch_spare_s to its span at both ends; window_reach_s: how long a
                   ragged window speaks for its surroundings
    least_cells    fewer cell-epochs of steep field make no flag of their own
    most_unconfirmed  unconfirmed claims listed, steepest first
    """

    sigmas: float = 1.0
    claim_reach_km: float = 60.0
    claim_reach_s: float = 300.0
    front_margin_km: float = 25.0
    front_beside_km: float = 100.0
    patch_margin_km: float = 25.0
    patch_spare_s: float = 300.0
    window_reach_s: float = 450.0
    least_cells: int = 4
    most_unconfirmed: int = 12


_ONE_SIDED_95 = 1.645  # quantile of the normal distribution


@dataclass(frozen=True)
class Judged:
    """The maps with their states, states (T, sites) with a reason per site and time ("" where it holds), and flags."""

    fields: Fields
    site_states: Bytes
    site_reasons: tuple[tuple[str, ...], ...]
    flags: tuple[Flag, ...]


def state_of_slope(slope: npt.ArrayLike, sigma: npt.ArrayLike, thresholds: Thresholds, sigmas: float = 1.0) -> Bytes:
    """holds, strained or broken by slope [mm/km] beyond its sigma; unseen where the slope is not known; same shape."""
    sure = np.asarray(slope, dtype=np.float64) - sigmas * np.asarray(sigma, dtype=np.float64)
    state = np.full(np.shape(sure), HOLDS, dtype=np.uint8)
    with np.errstate(invalid="ignore"):
        state[sure > thresholds.strained_mm_per_km] = STRAINED
        state[sure > thresholds.broken_mm_per_km] = BROKEN
    state[~np.isfinite(sure)] = UNSEEN
    return state


def warning_of_slope(
    slope: npt.ArrayLike, sigma: npt.ArrayLike, thresholds: Thresholds, sigmas: float = 1.0
) -> Bytes:
    """The same for what witnesses tell: a slope whose sigma is not known warns as it stands, and never says `holds`."""
    known = np.isfinite(np.asarray(sigma, dtype=np.float64))
    state = state_of_slope(slope, np.where(known, sigma, 0.0), thresholds, sigmas)
    return np.where(~known & (state == HOLDS), UNSEEN, state).astype(np.uint8)


def judge(
    fields: Fields,
    slopes: Slopes,
    fronts: Fronts,
    patches: Patches,
    region: Region,
    faults: Sequence[Fault] = (),
    arrivals: Sequence[Arrival] = (),
    choices: JudgeChoices | None = None,
) -> Judged:
    """States of every cell and site at each epoch of the maps, and the flags of the day."""
    choices = choices or JudgeChoices()
    limits = region.thresholds
    lon_grid, lat_grid = np.meshgrid(fields.lons, fields.lats)
    cells = _Places(lat_grid.ravel(), lon_grid.ravel())
    shape = fields.vtec.shape

    by_field = field_states(fields, limits, choices)
    warned, _ = _warnings(fields.times, cells, slopes, fronts, patches, limits, choices, reasons=False)
    telling = replace(fronts, fronts=tuple(one for one in fronts.fronts if _front_state(one, limits) != UNSEEN))
    explained = _reached(fields.times, cells, telling, patches, choices).reshape(shape)
    state = np.maximum(by_field, warned.reshape(shape))
    state[(state == HOLDS) & _doubted(fields.times, cells, fronts, limits, choices).reshape(shape)] = UNSEEN

    site_states, site_reasons = _judge_sites(fields, state, by_field, slopes, fronts, patches, region, choices)
    flags = [
        *(
            _front_flag(front, limits, number, arrivals, _beside_front(front, fields, slopes, choices))
            for number, front in enumerate(fronts.fronts)
        ),
        *(_patch_flag(patch, limits) for patch in patches.patches),
        *_claim_flags(fields, slopes, telling, patches, faults, limits, choices),
        *_field_flags(fields, by_field, explained, slopes, choices),
        *(_fault_flag(fault) for fault in faults),
    ]
    ordered = tuple(sorted(flags, key=lambda flag: (flag.start, flag.kind)))
    return Judged(replace(fields, state=state), site_states, site_reasons, ordered)


def field_states(fields: Fields, limits: Thresholds, choices: JudgeChoices | None = None) -> Bytes:
    """States by the map alone (T, lat, lon): unseen without content, support, or with too wide a sigma.

    That corrections hold is a claim too: it is made only where the slope stays under the limit with 95 % confidence.
    Where a slope beyond the limit is neither seen nor excluded, the cell is unseen.
    """
    choices = choices or JudgeChoices()
    state = state_of_slope(fields.slope, fields.slope_sigma, limits, choices.sigmas)
    # Content known but not its slope: nothing can be said of corrections there.
    state[~content_known(fields, limits)] = UNSEEN
    state[(state == HOLDS) & ~stays_under(fields.slope, fields.slope_sigma, limits.strained_mm_per_km)] = UNSEEN
    return state


def content_known(fields: Fields, limits: Thresholds) -> Bools:
    """Where the content is seen, and known well enough to say anything (T, lat, lon)."""
    with np.errstate(invalid="ignore"):
        near: Bools = fields.vtec_sigma * L1_M_PER_TECU <= limits.unseen_sigma_m
    near &= np.isfinite(fields.vtec) & (fields.support > 0)
    return near


def honest_state(fields: Fields) -> Bytes:
    """The states as kept, but unseen for `holds` without a value or a line of sight behind it (T, lat, lon).

    Whoever shows or writes kept states asks this.  Warnings stay: a front or patch seen near by may reach over cells
    that have no value of their own.
    """
    known = np.isfinite(fields.vtec) & (fields.support > 0)
    return np.where((fields.state == HOLDS) & ~known, UNSEEN, fields.state).astype(np.uint8)


def carried(fields: Fields) -> Fields:
    """The maps with the states as `honest_state` has them, and no number where no line of sight carries a cell.

    There the maps hold what they fade into: the background, which nobody saw.  Whoever gives numbers to a reader who
    cannot see the support beside them asks this.
    """
    blind = fields.support == 0
    layers: dict[str, Any] = {
        name: np.where(blind, np.float32(np.nan), getattr(fields, name)).astype(np.float32)
        for name in ("vtec", "vtec_sigma", "slope", "slope_sigma", "slope_east", "slope_north")
    }
    return replace(fields, state=honest_state(fields), **layers)


def stays_under(value: npt.ArrayLike, sigma: npt.ArrayLike, limit: float) -> Bools:
    """Where a value is below a limit with 95 % confidence; False where it is not known."""
    with np.errstate(invalid="ignore"):
        return np.asarray(np.asarray(value) + _ONE_SIDED_95 * np.asarray(sigma) <= limit)


# ---------------------------------------------------------------------------------------------- what reaches a place


@dataclass(frozen=True)
class _Places:
    """Places to be judged: cells or sites [deg]."""

    lat: Floats
    lon: Floats


def _front_state(front: Front, limits: Thresholds) -> int:
    if not front.confirmed:
        return UNSEEN
    state = int(warning_of_slope(front.slope, front.slope_sigma, limits))
    if state == HOLDS and not stays_under(front.slope, front.slope_sigma, limits.strained_mm_per_km):
        return UNSEEN  # a wall whose slope is hardly known is no reason to say that corrections hold
    return state


def _patch_state(patch: Patch, limits: Thresholds) -> int:
    if not patch.confirmed:
        return UNSEEN
    return BROKEN if patch.index_highest >= limits.broken_roti else STRAINED


def in_front(front: Front, places: Any, times: Any, choices: JudgeChoices) -> Bools:
    """(T, P) whether a wall's foot-to-head band lies over places, within its span and reach.

    The band is wider by the way the wall makes in half the spacing of epochs, so that no place is skipped.
    """
    steps_ns = np.diff(times).astype("timedelta64[ns]").astype(np.int64)
    step_s = float(np.median(steps_ns)) / 1e9 if len(times) > 1 else 300.0
    width_km = front.width_km if np.isfinite(front.width_km) else MODEL_WIDTH_KM[1]  # the broadest published
    half = 0.5 * width_km + choices.front_margin_km + front.speed_m_s / 1000.0 * step_s / 2.0
    over: Bools = np.zeros((len(times), len(places.lat)), dtype=bool)
    spare = np.timedelta64(round(step_s * 1e9), "ns")
    for number in np.flatnonzero((times >= front.start - spare) & (times <= front.end + spare)):
        away, right = ahead_km(front, places.lat, places.lon, times[number])
        over[number] = (np.abs(away) <= half) & (right >= front.reach_km[0] - choices.front_beside_km)
        over[number] &= right <= front.reach_km[1] + choices.front_beside_km
    return over


def in_patch(patch: Patch, places: Any, times: Any, choices: JudgeChoices) -> Bools:
    """(T, P) whether places lie in a patch, within its span, or near one of its ragged windows of that moment.

    It moves with its drift where that is known, and grows with what is not known of it (two sigmas).
    """
    over: Bools = np.zeros((len(times), len(places.lat)), dtype=bool)
    east, north = plane_km(places.lat, places.lon, (patch.lat, patch.lon))
    window_east, window_north = plane_km(patch.window_lat, patch.window_lon, (patch.lat, patch.lon))
    half_way = patch.start + (patch.end - patch.start) // 2
    known = bool(np.isfinite(patch.drift_m_s))
    heading_rad = np.radians(patch.drift_heading_deg) if known else 0.0
    reach = np.timedelta64(round(choices.window_reach_s), "s")
    spare = np.timedelta64(round(choices.patch_spare_s), "s")
    for number in np.flatnonzero((times >= patch.start - reach) & (times < patch.end + reach)):
        late_s = float((times[number] - half_way) / np.timedelta64(1, "s"))
        way = patch.drift_m_s / 1000.0 * late_s if known else 0.0
        loose = 2.0 * patch.drift_sigma_m_s / 1000.0 * abs(late_s) if known else 0.0
        away = np.hypot(east - way * np.sin(heading_rad), north - way * np.cos(heading_rad))
        # Raggedness is told from five minutes of rates and from four windows: it was there a little before and after.
        if patch.start - spare <= times[number] < patch.end + spare:
            over[number] = away <= patch.radius_km + choices.patch_margin_km + loose
        now = np.abs(patch.window_time - times[number]) <= reach
        apart = np.hypot(east[:, None] - window_east[None, now], north[:, None] - window_north[None, now])
        over[number] |= (apart <= choices.claim_reach_km).any(axis=1)
    return over


def in_claim(
    claim: SlopeClaim, places: Any, times: Any, limits: Thresholds, choices: JudgeChoices
) -> tuple[Bytes, Floats]:
    """(T, P) state that a confirmed slope between receivers gives to places near its witnesses, and the slope."""
    state = np.zeros((len(times), len(places.lat)), dtype=np.uint8)
    steepest = np.zeros(state.shape)
    if len(claim.cell_time) == 0:
        return state, steepest
    each = warning_of_slope(claim.cell_slope, claim.cell_sigma, limits, choices.sigmas)
    reach = np.timedelta64(round(choices.claim_reach_s / 2.0 * 1e9), "ns")
    half_deg = choices.claim_reach_km / KM_PER_DEG
    for number in range(len(times)):
        now = np.flatnonzero(np.abs(claim.cell_time - times[number]) <= reach)
        if len(now) == 0:
            continue
        dy = places.lat[:, None] - claim.cell_lat[None, now]
        turn = (places.lon[:, None] - claim.cell_lon[None, now] + 180.0) % 360.0 - 180.0
        near = np.hypot(dy, turn * np.cos(np.radians(places.lat))[:, None]) <= half_deg
        state[number] = np.where(near, each[now][None, :], 0).max(axis=1)
        steepest[number] = np.where(near, claim.cell_slope[now][None, :], 0.0).max(axis=1)
    return state, steepest


def _warnings(
    times: Any, places: Any, slopes: Slopes, fronts: Fronts, patches: Patches, limits: Thresholds,
    choices: JudgeChoices, reasons: bool,
) -> tuple[Bytes, list[list[str]]]:  # fmt: skip
    """States (T, P) that confirmed fronts, patches and slopes give to places, 0 where none; and why, where wanted."""
    state = np.zeros((len(times), len(places.lat)), dtype=np.uint8)
    why = [["" for _ in range(len(times))] for _ in range(len(places.lat) if reasons else 0)]

    def add(given: Bytes, sentence: Any) -> None:
        if reasons:
            for number, place in zip(*np.nonzero(given > state), strict=True):
                why[place][number] = sentence(number, place)
        np.maximum(state, given, out=state)

    for front in fronts.fronts:
        level = _front_state(front, limits)
        if level >= STRAINED:
            text = front_sentence(front)
            add(np.where(in_front(front, places, times, choices), level, 0).astype(np.uint8), lambda n, p, t=text: t)
    for patch in patches.patches:
        level = _patch_state(patch, limits)
        if level >= STRAINED:
            text = patch_sentence(patch)
            add(np.where(in_patch(patch, places, times, choices), level, 0).astype(np.uint8), lambda n, p, t=text: t)
    for claim in slopes.claims:
        if claim.confirmed:
            given, steepest = in_claim(claim, places, times, limits, choices)
            given[given < STRAINED] = 0
            add(given, lambda n, p, c=claim, s=steepest: f"{s[n, p]:.0f} mm/km between receivers nearby: {c.why}")
    return state, why


def _reached(times: Any, places: Any, fronts: Fronts, patches: Patches, choices: JudgeChoices) -> Bools:
    """(T, P) whether a confirmed front or patch is over places: what the map shows there needs no flag of its own."""
    over: Bools = np.zeros((len(times), len(places.lat)), dtype=bool)
    wide = replace(choices, front_margin_km=100.0, front_beside_km=200.0, patch_margin_km=75.0)
    for front in fronts.fronts:
        over |= in_front(front, places, times, wide)
    for patch in patches.patches:
        if patch.confirmed:
            over |= in_patch(patch, places, times, wide)
    return over


def _doubted(times: Any, places: Any, fronts: Fronts, limits: Thresholds, choices: JudgeChoices) -> Bools:
    """(T, P) whether a confirmed front lies over places whose slope is hardly known: it may break what the map, which
    smears walls out, lets hold."""
    over: Bools = np.zeros((len(times), len(places.lat)), dtype=bool)
    for front in fronts.fronts:
        if front.confirmed and _front_state(front, limits) == UNSEEN:
            over |= in_front(front, places, times, choices)
    return over


# ---------------------------------------------------------------------------------------------- sites


def _judge_sites(
    fields: Fields, state: Bytes, by_field: Bytes, slopes: Slopes, fronts: Fronts, patches: Patches, region: Region,
    choices: JudgeChoices,
) -> tuple[Bytes, tuple[tuple[str, ...], ...]]:  # fmt: skip
    """States (T, sites) and reasons: by the site's cell of the map and by what reaches the site itself."""
    times, sites = fields.times, region.sites
    if not sites:
        return np.zeros((len(times), 0), dtype=np.uint8), ()
    lat = np.array([site.lat for site in sites], dtype=np.float64)
    lon = np.array([site.lon for site in sites], dtype=np.float64)
    warned, why = _warnings(times, _Places(lat, lon), slopes, fronts, patches, region.thresholds, choices, reasons=True)
    row, column, inside = nearest_cells(fields, lat, lon)
    cell = np.where(inside[None, :], by_field[:, row, column], UNSEEN).astype(np.uint8)
    states = np.maximum(cell, warned)
    doubted = _doubted(times, _Places(lat, lon), fronts, region.thresholds, choices) & (states == HOLDS)
    states[doubted] = UNSEEN
    reasons = []
    for number in range(len(sites)):
        sentences = why[number]
        for epoch in range(len(times)):
            if warned[epoch, number] >= max(STRAINED, int(cell[epoch, number])):
                continue
            if doubted[epoch, number]:
                sentences[epoch] = DOUBTED
                continue
            sentences[epoch] = _field_sentence(
                fields, int(cell[epoch, number]), epoch, int(row[number]), int(column[number]),
                bool(inside[number]), region.thresholds,
            )  # fmt: skip
        reasons.append(tuple(sentences))
    return states, tuple(reasons)


def digits_of(sigma: float) -> int:
    """Decimals of a sigma and its value: none; tenths, or hundredths, where it would read as nought."""
    return 0 if not sigma < 0.95 else 1 if sigma >= 0.05 else 2


def plus_minus(sigma: float) -> str:
    """A sigma as it is read, so that none reads as nought."""
    return f"± {sigma:.{digits_of(sigma)}f}"


def with_its_sigma(value: float, sigma: float) -> str:
    """A value with the digits that its sigma has, like 38 ± 6 or 1.4 ± 0.6; in whole numbers where it has none."""
    if not np.isfinite(sigma):
        return f"{value:.0f} (sigma not known)"
    return f"{value:.{digits_of(sigma)}f} {plus_minus(sigma)}"


def nearest_cells(fields: Fields, lat: Floats, lon: Floats) -> tuple[Any, Any, Bools]:
    """Row and column of the cell of each place, and whether the map reaches it."""
    return cells_at(fields.lats, fields.lons, lat, lon)


def _field_sentence(
    fields: Fields, state: int, epoch: int, row: int, column: int, inside: bool, limits: Thresholds
) -> str:
    """Why the map gives this state; "" where corrections hold."""
    if state == HOLDS:
        return ""
    if not inside:
        return "outside the map: nothing can be said"
    place = (epoch, row, column)
    if state == UNSEEN:
        if fields.support[place] == 0:
            return "no line of sight passes near: nothing can be said"
        sigma_m = float(fields.vtec_sigma[place]) * L1_M_PER_TECU
        if np.isfinite(sigma_m) and sigma_m > limits.unseen_sigma_m:
            return f"vertical delay known to {sigma_m:.1f} m only, {limits.unseen_sigma_m:.1f} m is needed"
        return f"slope known to {plus_minus(float(fields.slope_sigma[place]))} mm/km only: nothing can be said"
    limit = limits.broken_mm_per_km if state == BROKEN else limits.strained_mm_per_km
    return (
        f"the map slopes by {with_its_sigma(float(fields.slope[place]), float(fields.slope_sigma[place]))} mm/km, "
        f"the limit of {STATE_NAMES[state]} is {limit:g}"
    )


# ---------------------------------------------------------------------------------------------- flags


def front_sentence(front: Front) -> str:
    """A front in one sentence, with its numbers and their uncertainty."""
    slope = f"{with_its_sigma(front.slope, front.slope_sigma)} mm/km" if np.isfinite(front.slope) else "unknown slope"
    over = f" over {front.width_km:.0f} km" if np.isfinite(front.width_km) else ""
    return (
        f"front of {slope}{over}, moving toward {with_its_sigma(front.heading_deg, front.heading_sigma_deg)}° at "
        f"{with_its_sigma(front.speed_m_s, front.speed_sigma_m_s)} m/s{_paces(front)}: {front.onsets} onsets on "
        f"{len(front.receivers)} receivers and {len(front.satellites)} satellites agree"
    )


def _paces(front: Front) -> str:
    """Where it changed its pace on its way by a fifth and more: from what to what."""
    pace = front.segments[:, 2] * 1000.0 if len(front.segments) else np.array([front.speed_m_s])
    least, most = float(pace.min()), float(pace.max())
    return f" ({least:.0f} to {most:.0f} m/s on its way)" if most - least > 0.2 * max(most, 50.0) else ""


def patch_sentence(patch: Patch) -> str:
    """A patch in one sentence, with what supports it."""
    text = (
        f"ragged content, index up to {patch.index_highest:.1f} TECU/min within {patch.radius_km:.0f} km: "
        f"{patch.windows} windows on {len(patch.receivers)} receivers and {len(patch.satellites)} satellites"
    )
    if patch.slips or patch.losses:
        text += f", {patch.slips} broken arcs, {patch.losses} lost signals"
    if np.isfinite(patch.planar[0]):
        verdict = PLANAR_FAILS if patch.planar[0] > patch.planar[1] else PLANAR_PASSES
        text += f", {verdict} (chi-square {patch.planar[0]:.0f}, limit {patch.planar[1]:.0f})"
    return text if patch.confirmed else f"unconfirmed: one receiver only, {text}"


def _beside_front(front: Front, fields: Fields, slopes: Slopes, choices: JudgeChoices) -> str:
    """What pairs of receivers and the map say of the slope where a front stands: agreement, or how they part.

    Both are means over a way (between pierce points; over a cell), so less than the front's own is no contradiction
    while they are steep at all; more is.
    """
    said = []
    best: tuple[float, float] | None = None
    for claim in slopes.claims:
        if not claim.confirmed or claim.start > front.end or claim.end < front.start or not len(claim.cell_time):
            continue
        places = _Places(claim.cell_lat, claim.cell_lon)
        moments, at = np.unique(claim.cell_time, return_inverse=True)
        under = in_front(front, places, moments, choices)[at, np.arange(len(at))]
        for number in np.flatnonzero(under):
            one = float(claim.cell_slope[number]), float(claim.cell_sigma[number])
            best = one if best is None or one[0] - one[1] > best[0] - best[1] else best
    said.append(_compared("receiver pairs", best, front))
    lon, lat = np.meshgrid(fields.lons, fields.lats)
    over = in_front(front, _Places(lat.ravel(), lon.ravel()), fields.times, choices).reshape(fields.slope.shape)
    height = np.where(over & np.isfinite(fields.slope - fields.slope_sigma), fields.slope - fields.slope_sigma, -np.inf)
    top = np.unravel_index(int(np.argmax(height)), height.shape) if height.size else None
    steepest = None
    if top is not None and np.isfinite(height[top]):
        steepest = float(fields.slope[top]), float(fields.slope_sigma[top])
    said.append(_compared("the map", steepest, front))
    return "; ".join(said)


def _compared(who: str, slope: tuple[float, float] | None, front: Front) -> str:
    """One way of seeing a slope against a front's own."""
    if slope is None:
        return f"{who} {'say' if who.endswith('s') else 'says'} nothing there"
    text = f"up to {with_its_sigma(*slope)} mm/km by {who}"
    more = slope[0] - front.slope > 2.0 * float(np.hypot(slope[1], front.slope_sigma))
    less = slope[0] + 2.0 * slope[1] < 0.25 * front.slope
    return text + (", which disagrees" if more else ", which sees little of it" if less else ", which agrees")


def _front_flag(front: Front, limits: Thresholds, number: int, arrivals: Sequence[Arrival], beside: str) -> Flag:
    """A front as one flag, drawn by its track; other ways and how its forecasts fared are part of the evidence."""
    middle = front.track[len(front.track) // 2] if front.track else (front.epoch, front.centre[0], front.centre[1])
    own = [arrival for arrival in arrivals if arrival.front == number and arrival.came_true is not None]
    text = f"{front_sentence(front)}; {beside}"
    if own:
        good = sum(1 for arrival in own if arrival.came_true)
        text += f"; {good} of {len(own)} forecasts of its arrival came true within two sigmas"
    return Flag(
        start=front.start, end=front.end, lat=float(middle[1]), lon=float(middle[2]), kind="front",
        slope_mm_per_km=front.slope, sigma_mm_per_km=front.slope_sigma, speed_m_s=front.speed_m_s,
        heading_deg=front.heading_deg, state=STATE_NAMES[_front_state(front, limits)], evidence=text,
        confirmed=front.confirmed, track=front.track, speed_sigma_m_s=front.speed_sigma_m_s,
    )  # fmt: skip


def _patch_flag(patch: Patch, limits: Thresholds) -> Flag:
    return Flag(
        start=patch.start, end=patch.end, lat=patch.lat, lon=patch.lon, kind="irregular", slope_mm_per_km=NOTHING,
        sigma_mm_per_km=NOTHING, speed_m_s=patch.drift_m_s, heading_deg=patch.drift_heading_deg,
        state=STATE_NAMES[_patch_state(patch, limits)], evidence=patch_sentence(patch), confirmed=patch.confirmed,
        speed_sigma_m_s=patch.drift_sigma_m_s,
    )  # fmt: skip


def _fault_flag(fault: Fault) -> Flag:
    return Flag(
        start=fault.start, end=fault.end, lat=fault.lat, lon=fault.lon, kind="fault", slope_mm_per_km=NOTHING,
        sigma_mm_per_km=NOTHING, speed_m_s=NOTHING, heading_deg=NOTHING, state=STATE_NAMES[UNSEEN],
        evidence=fault.why, confirmed=True,
    )  # fmt: skip


def _claim_flags(
    fields: Fields, slopes: Slopes, fronts: Fronts, patches: Patches, faults: Sequence[Fault], limits: Thresholds,
    choices: JudgeChoices,
) -> list[Flag]:  # fmt: skip
    """Slopes that no front, patch or receiver at fault explains; of the unconfirmed the steepest few."""
    flags: list[Flag] = []
    doubtful: list[Flag] = []
    for claim in slopes.claims:
        if _mostly_explained(claim, fronts, patches, choices) or _by_fault(claim, faults):
            continue
        state = int(warning_of_slope(claim.slope, claim.sigma, limits, choices.sigmas))
        flag = Flag(
            start=claim.start, end=claim.end, lat=claim.lat, lon=claim.lon, kind="slope",
            slope_mm_per_km=claim.slope, sigma_mm_per_km=claim.sigma, speed_m_s=NOTHING, heading_deg=NOTHING,
            state=STATE_NAMES[state if claim.confirmed else UNSEEN], confirmed=claim.confirmed,
            evidence=claim.why + _map_beside(claim, fields),
        )  # fmt: skip
        (flags if claim.confirmed else doubtful).append(flag)
    doubtful.sort(key=lambda flag: -flag.slope_mm_per_km)
    return flags + doubtful[: choices.most_unconfirmed]


def _map_beside(claim: SlopeClaim, fields: Fields) -> str:
    """What the map says where a claim is steepest: that it agrees, or by how much it does not."""
    if not len(fields.times):
        return ""
    slope, sigma = (
        float(values[0])
        for values in field_slope_at(fields, np.array([claim.start + (claim.end - claim.start) // 2]),
                                     np.array([claim.lat]), np.array([claim.lon]))
    )  # fmt: skip
    if not np.isfinite(slope):
        return "; the map says nothing there"
    apart = abs(slope - claim.slope) > 2.0 * float(np.hypot(sigma, claim.sigma))
    return f"; the map {'disagrees' if apart else 'agrees'}: {with_its_sigma(slope, sigma)} mm/km"


def _by_fault(claim: SlopeClaim, faults: Sequence[Fault]) -> bool:
    """Whether an unconfirmed claim is what a receiver at fault says within the span of its fault."""
    return not claim.confirmed and any(
        fault.receiver in claim.receivers and fault.start <= claim.end and claim.start <= fault.end
        and fault.end - fault.start < np.timedelta64(6, "h")
        for fault in faults
    )  # fmt: skip


def _mostly_explained(claim: SlopeClaim, fronts: Fronts, patches: Patches, choices: JudgeChoices) -> bool:
    """Whether two thirds of a claim's cells lie under a front or patch."""
    if len(claim.cell_time) == 0:  # paths alone: they have a place but no size
        claim = replace(
            claim, cell_time=np.array([claim.start]), cell_lat=np.array([claim.lat]), cell_lon=np.array([claim.lon])
        )
    places = _Places(claim.cell_lat, claim.cell_lon)
    wide = replace(choices, front_margin_km=150.0, front_beside_km=200.0, patch_margin_km=75.0)
    under = np.zeros(len(claim.cell_lat), dtype=bool)
    moments = np.unique(claim.cell_time)
    at = np.searchsorted(moments, claim.cell_time)
    for front in fronts.fronts:
        under |= in_front(front, places, moments, wide)[at, np.arange(len(at))]
    for patch in patches.patches:
        if patch.confirmed:
            under |= in_patch(patch, places, moments, wide)[at, np.arange(len(at))]
    return bool(under.mean() >= 2.0 / 3.0)


def _field_flags(
    fields: Fields, by_field: Bytes, explained: Bools, slopes: Slopes, choices: JudgeChoices
) -> list[Flag]:
    """Stretches of steep map that nothing else explains, joined over space and time."""
    steep = (by_field >= STRAINED) & ~explained
    marks, _ = label(steep, structure=np.ones((3, 3, 3)))
    flags = []
    step = fields.times[1] - fields.times[0] if len(fields.times) > 1 else np.timedelta64(300, "s")
    for number, box in enumerate(find_objects(marks), start=1):
        member = marks[box] == number
        if member.sum() < choices.least_cells:
            continue
        height = np.where(member, fields.slope[box] - choices.sigmas * fields.slope_sigma[box], -np.inf)
        peak = np.unravel_index(int(np.argmax(height)), height.shape)
        at = tuple(part.start + where for part, where in zip(box, peak, strict=True))
        start, end = fields.times[box[0].start], fields.times[box[0].stop - 1] + step
        agree = [
            claim for claim in slopes.claims
            if claim.confirmed and claim.start <= end and claim.end >= start
            and _near(claim, float(fields.lats[at[1]]), float(fields.lons[at[2]]))
        ]  # fmt: skip
        text = f"the map is steep over {int(member.any(axis=0).sum())} cells"
        text += f"; between receivers {agree[0].why}" if agree else "; unconfirmed: no receivers nearby witness it"
        flags.append(Flag(
            start=start, end=end, lat=float(fields.lats[at[1]]), lon=float(fields.lons[at[2]]), kind="slope",
            slope_mm_per_km=float(fields.slope[at]), sigma_mm_per_km=float(fields.slope_sigma[at]),
            speed_m_s=NOTHING, heading_deg=NOTHING, state=STATE_NAMES[int(by_field[box][member].max())],
            evidence=text, confirmed=bool(agree),
        ))  # fmt: skip
    return flags


def _near(claim: SlopeClaim, lat: float, lon: float) -> bool:
    turn = (claim.cell_lon - lon + 180.0) % 360.0 - 180.0
    if len(turn) == 0:
        return False
    return bool((np.hypot(claim.cell_lat - lat, turn * np.cos(np.radians(lat))) * KM_PER_DEG).min() <= 300.0)
