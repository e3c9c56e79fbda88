"""States of places that a day was not judged for when it was computed: from its kept maps and flags.

What reached a cell of the map is in the cell's state already.  That was judged at the cell's middle: a place aside of
it also takes the warnings of the cells around, and those whose flag lies over it, so that it is never told better than
it would have been at the time, though sometimes worse.  A place off the map, and a cell that nobody saw or warned of,
is unseen.  Never changes what was kept.
"""

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from skylag.constants import KM_PER_DEG
from skylag.impact.coming import from_line
from skylag.impact.silence import Silences
from skylag.impact.states import (
    DOUBTED,
    JudgeChoices,
    field_states,
    honest_state,
    nearest_cells,
    state_of_slope,
    with_its_sigma,
)
from skylag.impact.survey import touches
from skylag.ionosphere.covariance import plane_km
from skylag.tables import (
    HOLDS,
    STATE_NAMES,
    STRAINED,
    UNSEEN,
    Bools,
    Bytes,
    Fields,
    Flag,
    Ints,
    Site,
    Thresholds,
    Times,
)

_SPARE = np.timedelta64(450, "s")  # a witness speaks for so long before and after: the longest of `JudgeChoices`
_MIDDLE = 0.05  # of a step: so near to its middle a place is where its cell was judged
# Of a step: cells farther off carry no warning over a place that the nearer ones lack, as long as a warning reaches
# at least half the diagonal of a cell (a claim's 60 km does so for steps up to 0.75 degrees).
_AROUND = 1.25

_OFF, _NOBODY = "outside the map: nothing can be said", "no line of sight passes near: nothing can be said"


def judge(
    sites: Sequence[Site], fields: Fields, flags: Sequence[Flag], limits: Thresholds, silent: Sequence[Silences] = ()
) -> tuple[Bytes, tuple[tuple[str, ...], ...]]:
    """Codes (T, sites) and reasons, per site and epoch, "" where corrections hold.

    silent  of the days the maps are of: a place goes with the receiver nearest to itself
    """
    doubted = [doubts(site, fields.times, flags, silent) for site in sites]
    found = _codes(sites, fields, flags, limits, doubted)
    row, column, inside = _cells(sites, fields)
    warning = _warning(flags)
    told = [
        _reasons(
            site, found[:, number], (int(row[number]), int(column[number])), fields, warning, limits, doubted[number]
        )
        if inside[number] else (_OFF,) * len(fields.times)
        for number, site in enumerate(sites)
    ]  # fmt: skip
    return found, tuple(told)


def doubts(site: Site, times: Times, flags: Sequence[Flag], silent: Sequence[Silences] = ()) -> list[str]:
    """Per time why nothing may hold at a place, whatever its cell says: its nearest receiver is silent, or a confirmed
    front of hardly known slope passes; "" where neither."""
    said = [""] * len(times)
    for flag in flags:
        if flag.confirmed and flag.kind == "front" and flag.state == STATE_NAMES[UNSEEN]:
            for row in np.flatnonzero(over(flag, site, times)):
                said[row] = DOUBTED
    for one in silent:
        said = [more or before for more, before in zip(one.told(site.lat, site.lon, times), said, strict=True)]
    return said


def in_force(
    sites: Sequence[Site], known: Sequence[Site], kept: Bytes, told: Sequence[tuple[str, ...]], fields: Fields,
    flags: Sequence[Flag], limits: Thresholds, silent: Sequence[Silences] = (),
) -> tuple[Bytes, tuple[tuple[str, ...], ...]]:
    """Codes (T, sites) and reasons of the sites in force: as the day was kept where a site is where it was.

    known  the sites that the day was judged for, kept (T, known) their codes and told their reasons
    """
    column = {_place(one): number for number, one in enumerate(known)}
    fresh = [one for one in sites if _place(one) not in column]
    if fresh:
        more, reasons = judge(fresh, fields, flags, limits, silent)
        kept, told = np.concatenate([kept, more], axis=1), (*told, *reasons)
    column |= {_place(one): len(known) + number for number, one in enumerate(fresh)}
    order = [column[_place(one)] for one in sites]
    return kept[:, order], tuple(told[number] for number in order)


def _place(site: Site) -> tuple[str, float, float]:
    """What makes a site the same for a day that judged it."""
    return site.name, site.lat, site.lon


def codes(
    sites: Sequence[Site], fields: Fields, flags: Sequence[Flag], limits: Thresholds, silent: Sequence[Silences] = ()
) -> Bytes:
    """The same without the reasons (T, sites)."""
    return _codes(sites, fields, flags, limits, [doubts(site, fields.times, flags, silent) for site in sites])


def _codes(
    sites: Sequence[Site], fields: Fields, flags: Sequence[Flag], limits: Thresholds, doubted: Sequence[Sequence[str]]
) -> Bytes:
    """Codes (T, sites), given per site and epoch why nothing may hold there."""
    found = np.zeros((len(fields.times), len(sites)), dtype=np.uint8)
    row, column, inside = _cells(sites, fields)
    warning = _warning(flags)
    honest = honest_state(fields)
    beyond = np.where(honest > field_states(fields, limits), honest, 0)
    beyond[beyond < STRAINED] = 0
    coarse = _half_diagonal_km(fields) > JudgeChoices().claim_reach_km
    for number, site in enumerate(sites):
        if not inside[number]:
            continue
        place = (slice(None), int(row[number]), int(column[number]))
        state = np.maximum(honest[place], _around(site, place[1:], fields, honest, beyond, warning))
        for flag in warning:
            if coarse or flag.kind == "irregular":
                state = np.maximum(state, np.where(over(flag, site, fields.times), _level(flag), 0))
        unsure = np.array([bool(one) for one in doubted[number]], dtype=bool)
        found[:, number] = np.where((state == HOLDS) & unsure, UNSEEN, state)
    return found


def _cells(sites: Sequence[Site], fields: Fields) -> tuple[Ints, Ints, Bools]:
    """Row and column of each site's cell, and whether the map reaches it."""
    lat, lon = (np.array([getattr(site, name) for site in sites], dtype=np.float64) for name in ("lat", "lon"))
    return nearest_cells(fields, lat, lon)


def _warning(flags: Sequence[Flag]) -> list[Flag]:
    """The flags that warn of anything."""
    return [flag for flag in flags if flag.confirmed and flag.kind != "fault"]


def _half_diagonal_km(fields: Fields) -> float:
    """From the middle of a cell to its corner [km], where cells are widest."""
    sides = [abs(float(axis[1] - axis[0])) if len(axis) > 1 else 0.0 for axis in (fields.lats, fields.lons)]
    return 0.5 * KM_PER_DEG * float(np.hypot(sides[0], sides[1] * np.cos(np.radians(fields.lats)).max()))


def _level(flag: Flag) -> int:
    """The state that a flag gives where it lies, 0 where it is no warning."""
    code = STATE_NAMES.index(flag.state)
    return code if code >= STRAINED else 0


def _around(
    site: Site, cell: tuple[int, int], fields: Fields, honest: Bytes, beyond: Bytes, warning: Sequence[Flag]
) -> Bytes:
    """The worst warning (T,) of the cells around a place, 0 where none or where the place is in its cell's middle.

    beyond: states that are worse than the map's own slope makes them.  Where the slope itself hides a warning, a flag
    near by counts instead.
    """
    worst = np.zeros(len(fields.times), dtype=np.uint8)
    north = _steps(fields.lats, site.lat)
    east = _steps(fields.lons, site.lon)
    if max(abs(north[cell[0]]), abs(east[cell[1]])) <= _MIDDLE:
        return worst
    near_rows, near_columns = (np.flatnonzero(np.abs(away) < _AROUND) for away in (north, east))
    block = np.ix_(np.arange(len(worst)), near_rows, near_columns)
    np.maximum(worst, beyond[block].max(axis=(1, 2)), out=worst)
    steep = honest[block].max(axis=(1, 2))
    for epoch in np.flatnonzero(steep > np.maximum(worst, HOLDS)):
        near = [
            _level(flag) for flag in warning
            if touches(flag, site.lat, site.lon, fields.times[epoch], _SPARE)
        ]  # fmt: skip
        worst[epoch] = max(int(worst[epoch]), min(int(steep[epoch]), max(near, default=0)))
    return worst


def _steps(axis: npt.NDArray[np.float64], value: float) -> npt.NDArray[np.float64]:
    """How many steps of an axis [deg] its middles lie from a value, whole turns aside."""
    step = abs(float(axis[1] - axis[0])) if len(axis) > 1 else 1.0
    return np.asarray(((axis - value + 180.0) % 360.0 - 180.0) / step)


def over(flag: Flag, site: Site, times: Times) -> Bools:
    """Epochs (T,) at which a confirmed flag lies over a place, as far as a flag alone tells.

    A front: within 25 km of its line and half a step of its way.  A patch: 25 km around its middle, which drifts; its
    size is not kept, the cells of the map tell it.  A slope: 60 km around its steepest place, all the while.
    """
    choices = JudgeChoices()
    found: Bools = np.zeros(len(times), dtype=bool)
    spare = np.timedelta64(round(choices.patch_spare_s if flag.kind == "irregular" else 0.0), "s")
    active = np.flatnonzero((times >= flag.start - spare) & (times <= flag.end + spare))
    if not flag.confirmed:
        return found
    if flag.kind == "front":
        if not flag.track or not np.isfinite(flag.heading_deg):
            return found
        step_s = float(np.median(np.diff(times)) / np.timedelta64(1, "s")) if len(times) > 1 else 300.0
        half_km = choices.front_margin_km + 0.5 * flag.speed_m_s * step_s / 1000.0
        for number in active:
            found[number] = abs(ahead_of(flag, site.lat, site.lon, times[number])) <= half_km
    elif flag.kind in ("irregular", "slope"):
        x, y = (float(way[0]) for way in plane_km(np.array([site.lat]), np.array([site.lon]), (flag.lat, flag.lon)))
        drifts = flag.kind == "irregular" and np.isfinite(flag.speed_m_s) and np.isfinite(flag.heading_deg)
        late_s = (times[active] - (flag.start + (flag.end - flag.start) // 2)) / np.timedelta64(1, "s")
        way = flag.speed_m_s / 1000.0 * late_s if drifts else np.zeros(len(active))
        heading_rad = np.radians(flag.heading_deg) if drifts else 0.0
        reach = choices.patch_margin_km if flag.kind == "irregular" else choices.claim_reach_km
        found[active] = np.hypot(x - way * np.sin(heading_rad), y - way * np.cos(heading_rad)) <= reach
    return found


def ahead_of(flag: Flag, lat: float, lon: float, time: np.datetime64) -> float:
    """How far [km] a place lies ahead of a front's line at a time, by the flag's track, speed and heading."""
    moment, line_lat, line_lon = min(flag.track, key=lambda point: abs(point[0] - time))
    late_s = float((time - moment) / np.timedelta64(1, "s"))
    return from_line(flag, (line_lat, line_lon), lat, lon)[0] - flag.speed_m_s * late_s / 1000.0


def _reasons(
    site: Site, state: Bytes, cell: tuple[int, int], fields: Fields, warning: Sequence[Flag], limits: Thresholds,
    doubted: Sequence[str],
) -> tuple[str, ...]:  # fmt: skip
    """The sentences of one site."""
    place = (slice(None), *cell)
    slope, sigma = fields.slope[place], fields.slope_sigma[place]
    by_map = state_of_slope(slope, sigma, limits)
    said = []
    for epoch, code in enumerate(state.tolist()):
        if code == HOLDS:
            said.append("")
        elif code == UNSEEN:
            nobody = fields.support[epoch, cell[0], cell[1]] == 0 or not np.isfinite(sigma[epoch])
            unsure = doubted[epoch] or "delay or slope are not known well enough: nothing can be said"
            said.append(_NOBODY if nobody else unsure)
        elif by_map[epoch] >= code:
            limit = limits.broken_mm_per_km if STATE_NAMES[code] == "broken" else limits.strained_mm_per_km
            said.append(
                f"the map slopes by {with_its_sigma(float(slope[epoch]), float(sigma[epoch]))} mm/km, the limit of "
                f"{STATE_NAMES[code]} is {limit:g}"
            )
        else:
            near = [flag for flag in warning if touches(flag, site.lat, site.lon, fields.times[epoch], _SPARE)]
            near.sort(key=lambda flag: (flag.state != STATE_NAMES[code], flag.kind != "front"))
            said.append(near[0].evidence if near else "a front, an irregular patch or a steep slope reaches here")
    return tuple(said)
