"""States of places that a day was not judged for when it was computed: from its kept maps and flags.

What reached a cell of the map is in the cell's state already; here each state only gets its reason.  A place off the
map, and a cell that nobody saw, is unseen.  Never changes what was kept.
"""

from collections.abc import Sequence

import numpy as np

from skylag.impact.states import honest_state, nearest_cells, state_of_slope
from skylag.impact.survey import touches
from skylag.tables import HOLDS, STATE_NAMES, UNSEEN, Bytes, Fields, Flag, Site, Thresholds

_OFF, _NOBODY = "outside the map: nothing can be said", "no line of sight passes near: nothing can be said"


def judge(
    sites: Sequence[Site], fields: Fields, flags: Sequence[Flag], limits: Thresholds
) -> tuple[Bytes, tuple[tuple[str, ...], ...]]:
    """Codes (T, sites) and reasons, per site and epoch, "" where corrections hold."""
    count = len(fields.times)
    codes = np.zeros((count, len(sites)), dtype=np.uint8)
    if not len(sites):
        return codes, ()
    lat, lon = (np.array([getattr(site, name) for site in sites], dtype=np.float64) for name in ("lat", "lon"))
    row, column, inside = nearest_cells(fields, lat, lon)
    warning = [flag for flag in flags if flag.confirmed and flag.kind != "fault"]
    honest = honest_state(fields)
    told = []
    for number, site in enumerate(sites):
        if not inside[number]:
            told.append((_OFF,) * count)
            continue
        place = (slice(None), int(row[number]), int(column[number]))
        state = honest[place]
        codes[:, number] = state
        told.append(_reasons(site, state, place[1:], fields, warning, limits))
    return codes, tuple(told)


def _reasons(
    site: Site, state: Bytes, cell: tuple[int, int], fields: Fields, warning: Sequence[Flag], limits: Thresholds
) -> tuple[str, ...]:
    """The sentences of one site."""
    place = (slice(None), *cell)
    slope, sigma = fields.slope[place], fields.slope_sigma[place]
    by_map = state_of_slope(slope, sigma, limits)
    step = np.timedelta64(1, "m")
    said = []
    for epoch, code in enumerate(state.tolist()):
        if code == HOLDS:
            said.append("")
        elif code == UNSEEN:
            nobody = fields.support[epoch, cell[0], cell[1]] == 0 or not np.isfinite(sigma[epoch])
            said.append(_NOBODY if nobody else "delay or slope are not known well enough: nothing can be said")
        elif by_map[epoch] >= code:
            limit = limits.broken_mm_per_km if STATE_NAMES[code] == "broken" else limits.strained_mm_per_km
            said.append(
                f"the map slopes by {slope[epoch]:.0f} ± {sigma[epoch]:.0f} mm/km, the limit of {STATE_NAMES[code]} "
                f"is {limit:g}"
            )
        else:
            near = [flag for flag in warning if touches(flag, site.lat, site.lon, fields.times[epoch], step)]
            near.sort(key=lambda flag: (flag.state != STATE_NAMES[code], flag.kind != "front"))
            said.append(near[0].evidence if near else "a front, an irregular patch or a steep slope reaches here")
    return tuple(said)
