"""States for a way of working: differential positioning, ground- and satellite-based augmentation, single frequency.

Works from what a day is kept as (maps with their states, and flags), so that any use can be asked for later.  What
hurts differs by use: `differential` and `ground` are hurt by the slope of the delay, `satellite` by what no plane over
the neighbourhood follows, `single` by what the broadcast model leaves.  Published limits, unless it has its own:

- differential: the error over the baseline, slope times distance, may not eat what there is to spare.  `broken` where
  it does at the zenith already, `strained` where it does on the lowest line of sight leaned on (thin-shell mapping).
  Spare 95.1 mm: half a cycle of 1575.42 MHz, where fixing of whole cycles fails; baseline 10 km: common practice.
- ground: `strained` from 4 mm/km, the bound of nominal slopes (Mayer et al. 2009, ION GNSS, 1091-1099); `broken` from
  25.5 mm/km, the largest a station can announce (8 bits of 0.1 mm/km: ICAO Annex 10, Appendix B to chapter 3).
- satellite: vertical delay about the plane through all within 800 km, whose nominal spread is 0.35 m (Walter et al.
  2000, from memory): `strained` from 2 of these, `broken` from 3.29, the bound at 0.1 % that such services announce.
  A ragged patch is `broken` where the chi-square test of the planar fit through the lines of sight around it fails, as
  the service then stops correcting there, and `strained` where it passes with 30 lines of sight or more and residuals
  not smaller than their sigmas allow; any other pass says nothing.
- single: vertical error that the broadcast model leaves: `strained` from 4.5 m, the standard error that receivers take
  for it at middle latitudes, `broken` from 9 m, what they take near the equator (RTCA DO-229, appendix J.2.3; from
  memory).  Without the model at hand half of the delay: it is designed to remove half (IS-GPS-200, 20.3.3.5.2.5).

Never turns `unseen` into `holds`; a warning that reaches an unseen place stays a warning.  Not for navigation.
"""

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy.ndimage import label
from scipy.stats import chi2

from skylag.constants import L1_M_PER_TECU
from skylag.errors import Refused
from skylag.impact import at_places
from skylag.impact.ground_augmentation import ANNOUNCED_MOST, front_error_m
from skylag.impact.silence import Silences
from skylag.impact.states import (
    PLANAR_FAILS,
    PLANAR_PASSES,
    JudgeChoices,
    content_known,
    field_states,
    nearest_cells,
    stays_under,
)
from skylag.ionosphere.background import ERROR_SHARE, Background
from skylag.ionosphere.field import plane_km
from skylag.ionosphere.geometry import mapping
from skylag.ionosphere.slopes import MODEL_WIDTH_KM, NOMINAL_BOUND
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
    Ints,
    Region,
    Site,
    Times,
    Use,
)

PLANE_SPREAD_M, PLANE_KM = 0.35, 800.0  # Walter et al. 2000 (from memory)
STRAINED_SPREADS, BROKEN_SPREADS = 2.0, 3.29  # 3.29: 99.9 %, as errors at grid points are announced
MODEL_SIGMA_M, MODEL_WORST_M = 4.5, 9.0  # RTCA DO-229, J.2.3: middle latitudes; below 20 degrees (from memory)

PUBLISHED = (
    Use("differential over 10 km", "differential"),
    Use("ground-based augmentation", "ground", baseline_km=6.0),
    Use("satellite-based augmentation", "satellite"),
    Use("single frequency", "single"),
)
BETWEEN = -2
_PASSED = re.compile(rf"\b{PLANAR_PASSES} \(chi-square (?P<chi_square>\d+), limit (?P<limit>\d+)\)")
_LEAST_LINES = 30
_LIMITS = chi2.ppf(1.0 - 1e-3, np.arange(1, 2001))  # of the planar-fit test, by degrees of freedom: lines less 3
_SEARCH_KM = 150.0  # a warned cell belongs to the wall whose line is nearest, within this


@dataclass(frozen=True)
class JudgedUse:
    """States of a day for one use.

    states         (T, lat, lon); site_states (T, sites)
    flag_of        (T, lat, lon) row number of the flag that makes the state, -1 where the map does, BETWEEN where
                   receivers nearby do that no flag of its own stands for
    owner          (T, lat, lon) row number of the flag that explains a bad cell, -1 where none does
    measure        (T, lat, lon) what is held against the limits by the map: slope [mm/km], or metres; NaN where unseen
    site_reasons   per site, per time: the sentence, "" where it holds
    site_evidence  per site, per time: row numbers of the flags behind it
    limits         from where strained, from where broken; unit of both
    """

    use: Use
    times: Times
    states: Bytes
    flag_of: Ints
    owner: Ints
    measure: Floats
    site_states: Bytes
    site_reasons: tuple[tuple[str, ...], ...]
    site_evidence: tuple[tuple[tuple[int, ...], ...], ...]
    limits: tuple[float, float]
    unit: str


def uses_of(region: Region) -> tuple[Use, ...]:
    """The region's own uses, or the published ones where it names none."""
    return region.uses or PUBLISHED


def find_use(region: Region, name: str) -> Use:
    """A use by name, or by kind where only one is of it.

    Raises Refused with the names there are.
    """
    known = uses_of(region)
    found = [use for use in known if use.name == name] or [use for use in known if use.kind == name]
    if len(found) != 1:
        names = [use.name for use in known]
        raise Refused(f"use={name}: there is no such use; choose from {', '.join(names)}", name="use", value=name,
                      allowed=tuple(names))  # fmt: skip
    return found[0]


def limits_of(use: Use, shell_height_m: float = 400e3) -> tuple[float, float, str]:
    """From where strained, from where broken, and their unit (mm/km for slopes, m for the others)."""
    unit = "mm/km" if use.kind in ("differential", "ground") else "m"
    if use.strained_from > 0.0:
        return use.strained_from, use.broken_from, unit
    if use.kind == "differential":
        eaten = use.spare_mm / use.baseline_km
        return eaten / float(mapping(use.elevation_deg, shell_height_m)), eaten, unit
    if use.kind == "ground":
        return NOMINAL_BOUND, ANNOUNCED_MOST, unit
    if use.kind == "satellite":
        return STRAINED_SPREADS * PLANE_SPREAD_M, BROKEN_SPREADS * PLANE_SPREAD_M, unit
    return MODEL_SIGMA_M, MODEL_WORST_M, unit


def approach_error_m(use: Use, slope_mm_per_km: float) -> float:
    """Error [m] of an approach under a slope, as a ground-based station's."""
    return float(front_error_m(slope_mm_per_km, use.baseline_km, use.speed_m_s, use.smoothing_s))


def judge_for(
    use: Use,
    fields: Fields,
    flags: Sequence[Flag],
    region: Region,
    model: Background | None = None,
    choices: JudgeChoices | None = None,
    silent: Silences | None = None,
) -> JudgedUse:
    """States of every cell and site for a use, each with its reason and the flags behind it.

    fields, flags  of a judged day: `fields.state` tells where fronts, patches and slopes between receivers reach
    silent         who was silent: nothing holds where the receiver nearest to a cell's middle, or to a site, is
    model          the broadcast model, for `single`; without it half of the delay is taken as its error
    """
    choices = choices or JudgeChoices()
    strained, broken, unit = limits_of(use, region.shell_height_km * 1000.0)
    measure, sigma = _measured(use, fields, model)
    seen = content_known(fields, region.thresholds) & np.isfinite(measure)
    with np.errstate(invalid="ignore"):
        sure = measure - choices.sigmas * sigma
        state = np.where(sure > broken, BROKEN, np.where(sure > strained, STRAINED, HOLDS)).astype(np.uint8)
    state[~seen | ~np.isfinite(sure)] = UNSEEN
    state[(state == HOLDS) & ~stays_under(measure, sigma, strained)] = UNSEEN
    state[(state == HOLDS) & taken_back(fields, region, choices)] = UNSEEN
    if silent is not None and silent.spans:
        state[(state == HOLDS) & silent.over(fields.lats[:, None], fields.lons[None, :], fields.times)] = UNSEEN
    owner = owners(fields, flags, region, choices)
    given = _given(use, fields, flags, owner, (strained, broken), choices)
    flag_of = np.where(given > state, owner, -1)
    state = np.maximum(state, given)
    owner = np.where(state >= STRAINED, np.maximum(owner, -1), -1)
    measure = np.where(seen, measure, np.nan)
    judged = JudgedUse(use, fields.times, state, flag_of, owner, measure, np.zeros((0, 0), np.uint8), (), (),
                       (strained, broken), unit)  # fmt: skip
    states, reasons, evidence = _at_sites(judged, sigma, flags, fields, region, choices, silent)
    return replace(judged, site_states=states, site_reasons=reasons, site_evidence=evidence)


def taken_back(fields: Fields, region: Region, choices: JudgeChoices | None = None) -> Bools:
    """Cells (T, lat, lon) that the day calls unseen though its map alone would let them hold, and the unseen ones that
    touch those: around a receiver that fell silent nothing holds, for no use."""
    unseen = fields.state == UNSEEN
    taken: Bools = unseen & (field_states(fields, region.thresholds, choices) == HOLDS)
    if not taken.any():
        return taken
    beside = np.zeros((3, 3, 3), dtype=bool)
    beside[1] = True  # within one map, not from map to map
    marks, _ = label(unseen, structure=beside)
    return np.asarray(unseen & np.isin(marks, np.unique(marks[taken])))


# ---------------------------------------------------------------------------------------------- what the map says


def _measured(use: Use, fields: Fields, model: Background | None) -> tuple[Floats, Floats]:
    """What is held against the limits, and its sigma (T, lat, lon)."""
    if use.kind in ("differential", "ground"):
        return fields.slope.astype(np.float64), fields.slope_sigma.astype(np.float64)
    delay = fields.vtec.astype(np.float64) * L1_M_PER_TECU
    sigma = fields.vtec_sigma.astype(np.float64) * L1_M_PER_TECU
    if use.kind == "satellite":
        return np.abs(off_plane(delay, sigma, fields.support > 0, fields.lats, fields.lons)), sigma
    if model is None:
        return ERROR_SHARE * delay, ERROR_SHARE * sigma
    lon, lat = np.meshgrid(fields.lons, fields.lats)
    told = [model.vertical(lat, lon, time) * L1_M_PER_TECU for time in fields.times]
    return np.abs(delay - np.array(told).reshape(delay.shape)), sigma


def off_plane(delay_m: Floats, sigma_m: Floats, seen: Bools, lats: Floats, lons: Floats) -> Floats:
    """Vertical delay less the plane through all seen cells within 800 km (T, lat, lon) [m]; NaN where fewer than 4.

    Cells are weighed by their sigma and the nominal spread about a plane, as such services do with pierce points.
    """
    lon, lat = np.meshgrid(lons, lats)
    east, north = plane_km(lat.ravel(), lon.ravel(), (float(np.mean(lats)), float(np.mean(lons))))
    count = len(delay_m)
    flat, spread = delay_m.reshape(count, -1), sigma_m.reshape(count, -1)
    known = seen.reshape(count, -1) & np.isfinite(flat) & np.isfinite(spread)
    weight = np.where(known, 1.0 / (PLANE_SPREAD_M**2 + np.nan_to_num(spread) ** 2), 0.0)
    value = np.where(known, flat, 0.0)
    design = np.stack([np.ones(len(east)), east / 1000.0, north / 1000.0], axis=1)
    near = (np.hypot(east[:, None] - east, north[:, None] - north) <= PLANE_KM).astype(np.float64)
    products = (design[:, :, None] * design[:, None, :]).reshape(len(east), 9)
    result = np.full(flat.shape, np.nan)
    for epoch in range(count):  # one epoch at a time: memory, not time
        normal = (near @ (weight[epoch][:, None] * products)).reshape(-1, 3, 3)
        right = near @ ((weight[epoch] * value[epoch])[:, None] * design)
        able = known[epoch] & (near @ known[epoch].astype(np.float64) >= 4)
        if not able.any():
            continue
        plane = np.linalg.solve(normal[able] + 1e-9 * np.eye(3), right[able][..., None])[..., 0]
        result[epoch, able] = flat[epoch, able] - (plane * design[able]).sum(axis=1)
    return result.reshape(delay_m.shape)


# ---------------------------------------------------------------------------------------------- what flags say


def owners(
    fields: Fields, flags: Sequence[Flag], region: Region, choices: JudgeChoices | None = None
) -> Ints:
    """Row number of the flag that explains each strained or broken cell of the day's own states (T, lat, lon).

    Where flags reach is what those states tell; of the flags alive at a moment the front whose line is nearest comes
    first, then a patch, then a slope.  -1 where the map says so by itself, BETWEEN where a warning has no flag.
    """
    owner = np.full(fields.state.shape, -1, dtype=np.int64)
    alarmed = fields.state >= STRAINED
    by_map = field_states(fields, region.thresholds, choices)
    lon, lat = np.meshgrid(fields.lons, fields.lats)
    step = fields.times[1] - fields.times[0] if len(fields.times) > 1 else np.timedelta64(300, "s")
    rank = {"front": 0, "irregular": 1, "slope": 2}
    spoken = [number for number, flag in enumerate(flags) if flag.confirmed and flag.kind in rank]
    spoken.sort(key=lambda number: rank[flags[number].kind])
    for epoch in np.flatnonzero(alarmed.any(axis=(1, 2))):
        time = fields.times[epoch]
        nearest = np.full(lat.shape, np.inf)
        beyond = fields.state[epoch] > by_map[epoch]
        owner[epoch][beyond] = BETWEEN
        for number in spoken:
            flag = flags[number]
            if not (flag.start - step <= time <= flag.end + step):
                continue
            if flag.kind == "front":  # it may lie where the map is steep by itself; the others speak beyond the map
                away = _away_km(flag, lat, lon, time)
                closer = alarmed[epoch] & (away <= _SEARCH_KM) & (away < nearest)
                nearest = np.where(closer, away, nearest)
            else:
                closer = beyond & (owner[epoch] < 0)
            owner[epoch][closer] = number
    return owner


def _given(
    use: Use, fields: Fields, flags: Sequence[Flag], owner: Ints, limits: tuple[float, float], choices: JudgeChoices
) -> Bytes:
    """States (T, lat, lon) that flags give to the cells they explain, for a use; 0 where they say nothing to it."""
    table = np.zeros(len(flags) + 2, dtype=np.uint8)  # the last two: BETWEEN and -1
    for number, flag in enumerate(flags):
        table[number] = flag_state(use, flag, limits, choices)
    given = table[owner]
    if use.kind in ("differential", "ground"):
        given = np.where(owner == BETWEEN, fields.state, given)
    return np.asarray(given, dtype=np.uint8)


def _away_km(flag: Flag, lat: Floats, lon: Floats, time: np.datetime64) -> Floats:
    """Distance [km] of cells from a flag at a time: from the line of a front, from the place of others."""
    if flag.kind != "front" or not flag.track or not np.isfinite(flag.heading_deg):
        return np.asarray(np.hypot(*plane_km(lat, lon, (flag.lat, flag.lon))))
    moments = np.array([point[0] for point in flag.track], dtype="datetime64[ns]")
    at = int(np.argmin(np.abs(moments - time)))
    late_s = float((time - moments[at]).astype("timedelta64[ns]").astype(np.int64)) / 1e9
    heading_rad = np.radians(flag.heading_deg)
    east, north = plane_km(lat, lon, flag.track[at][1:])
    way = (flag.speed_m_s if np.isfinite(flag.speed_m_s) else 0.0) / 1000.0 * late_s
    return np.asarray(np.abs(east * np.sin(heading_rad) + north * np.cos(heading_rad) - way))


def plane_holds(evidence: str) -> bool:
    """Does a patch's evidence tell of a passed planar fit that means something?

    A few lines of sight, or sigmas far above the residuals, pass any test.  So the limit must be that of 30 lines, the
    number such services seek (Walter et al. 2000, from memory), and chi-square no lower than its own 0.1 % point.
    """
    told = _PASSED.search(evidence)
    if told is None:
        return False
    chi_square, limit = float(told["chi_square"]), float(told["limit"])
    degrees = int((limit + 0.5 >= _LIMITS).sum())  # both are told in whole numbers
    return degrees >= _LEAST_LINES - 3 and float(chi2.ppf(1e-3, degrees)) <= chi_square <= limit


def flag_state(use: Use, flag: Flag, limits: tuple[float, float], choices: JudgeChoices | None = None) -> int:
    """The state that a confirmed flag gives to places it reaches, for a use; UNSEEN where it says nothing to it."""
    choices = choices or JudgeChoices()
    if flag.kind == "irregular":
        # Ragged content breaks phases; whoever lives on one frequency's code is merely served worse.
        own = STATE_NAMES.index(flag.state)
        if use.kind == "satellite" and PLANAR_FAILS in flag.evidence:
            return BROKEN  # the service's own test finds no plane there: it stops correcting
        if use.kind == "satellite" and plane_holds(flag.evidence):
            return min(own, STRAINED)
        return min(own, STRAINED) if use.kind == "single" else own
    spread = flag.sigma_mm_per_km if np.isfinite(flag.sigma_mm_per_km) else 0.0
    sure = flag.slope_mm_per_km - choices.sigmas * spread
    if use.kind in ("satellite", "single"):
        if flag.kind != "front":
            return UNSEEN
        # A wall lifts one side by slope times width; a plane or a smooth model through both misses half of it.  Walls
        # are 25 km wide at least (published bounds), so this is the least it can be.
        sure *= MODEL_WIDTH_KM[0] / 2.0 / 1000.0
    if not np.isfinite(sure):
        return UNSEEN
    return BROKEN if sure > limits[1] else STRAINED if sure > limits[0] else UNSEEN


# ---------------------------------------------------------------------------------------------- sites and sentences


def _at_sites(
    judged: JudgedUse, sigma: Floats, flags: Sequence[Flag], fields: Fields, region: Region, choices: JudgeChoices,
    silent: Silences | None,
) -> tuple[Bytes, tuple[tuple[str, ...], ...], tuple[tuple[tuple[int, ...], ...], ...]]:
    """States, sentences and flags of the sites: by the cells they stand in, and by what lies over the sites alone."""
    lat = np.array([site.lat for site in region.sites], dtype=np.float64)
    lon = np.array([site.lon for site in region.sites], dtype=np.float64)
    count = len(judged.times)
    if not len(lat):
        return np.zeros((count, 0), dtype=np.uint8), (), ()
    row, column, inside = nearest_cells(fields, lat, lon)
    states = np.where(inside[None, :], judged.states[:, row, column], UNSEEN).astype(np.uint8)
    warned, told = at_places.judge(region.sites, fields, flags, region.thresholds)
    beside = warned > np.maximum(fields.state[:, row, column], HOLDS)  # a warning that the cell itself does not have
    reasons, evidence = [], []
    for number, site in enumerate(region.sites):
        over = _over_site(judged, site, beside[:, number], warned[:, number], flags, choices)
        doubted = at_places.doubts(site, fields.times, flags, () if silent is None else (silent,))
        sentences: list[str] = []
        rows: list[tuple[int, ...]] = []
        for epoch in range(count):
            place = (epoch, int(row[number]), int(column[number]))
            if not inside[number]:
                sentences.append("outside the map: nothing can be said")
                rows.append(())
                continue
            if over[epoch] > states[epoch, number]:
                states[epoch, number] = over[epoch]
                sentences.append(f"{told[number][epoch]}; it reaches the site and makes {judged.use.name} "
                                 f"{STATE_NAMES[int(over[epoch])]}")  # fmt: skip
                rows.append(())
                continue
            if states[epoch, number] == HOLDS and doubted[epoch]:
                states[epoch, number] = UNSEEN
                sentences.append(f"{judged.use.name}: {doubted[epoch]}")
                rows.append(())
                continue
            behind = int(judged.flag_of[place])
            sentences.append(sentence(judged, place, float(sigma[place]), flags))
            rows.append((behind,) if behind >= 0 else ())
        reasons.append(tuple(sentences))
        evidence.append(tuple(rows))
    return states, tuple(reasons), tuple(evidence)


def _over_site(
    judged: JudgedUse, site: Site, beside: Bools, warned: Bytes, flags: Sequence[Flag], choices: JudgeChoices
) -> Bytes:
    """States (T,) that warnings give to a site alone, where its cell has none; 0 elsewhere.

    By the flags that lie over the site; where none does, receivers nearby warn, which counts as it is for what slopes
    hurt.
    """
    found, explained = np.zeros(len(warned), dtype=np.uint8), np.zeros(len(warned), dtype=bool)
    if not beside.any():
        return found
    for flag in flags:
        if flag.confirmed and flag.kind != "fault":
            over = beside & at_places.over(flag, site, judged.times)
            found = np.maximum(found, np.where(over, flag_state(judged.use, flag, judged.limits, choices), UNSEEN))
            explained |= over
    if judged.use.kind in ("differential", "ground"):
        found = np.where(beside & ~explained, warned, found)
    return found.astype(np.uint8)


def sentence(judged: JudgedUse, place: tuple[int, int, int], sigma: float, flags: Sequence[Flag]) -> str:
    """Why a cell at (epoch, row, column) has its state for this use; "" where corrections hold."""
    state, use = int(judged.states[place]), judged.use
    if state == HOLDS:
        return ""
    if state == UNSEEN:
        return f"{use.name}: too few lines of sight near to say anything"
    limit = judged.limits[1 if state == BROKEN else 0]
    means = f"{use.name} is {STATE_NAMES[state]} from {limit:.3g} {judged.unit}"
    behind = int(judged.flag_of[place])
    if behind >= 0:
        flag = flags[behind]
        if flag.kind == "irregular":
            return f"{flag.evidence}; ragged content makes {use.name} {STATE_NAMES[state]}"
        if use.kind in ("satellite", "single"):
            missed = flag.slope_mm_per_km * MODEL_WIDTH_KM[0] / 2000.0
            return f"{flag.evidence}; at least {missed:.1f} m beside any smooth surface; {means}"
        return f"{flag.evidence}; {_consequence(use, flag.slope_mm_per_km)}{means}"
    if behind == BETWEEN:
        return f"slopes between receivers nearby make {use.name} {STATE_NAMES[state]}"
    value = float(judged.measure[place])
    if use.kind in ("differential", "ground"):
        return f"the map slopes by {value:.1f} ± {sigma:.1f} mm/km; {_consequence(use, value)}{means}"
    what = "off the plane through its surroundings" if use.kind == "satellite" else "left by the broadcast model"
    return f"{value:.1f} ± {sigma:.1f} m of vertical delay {what}; {means}"


def _consequence(use: Use, slope: float) -> str:
    if use.kind == "ground":
        return f"{approach_error_m(use, slope):.2f} m on an approach {use.baseline_km:g} km out; "
    return f"{slope * use.baseline_km:.0f} mm over {use.baseline_km:g} km, {use.spare_mm:g} mm to spare; "
