"""Where an hour stands in a geomagnetic storm, as far as the three-hourly index ap tells or was told beforehand.

Effects begin at high latitudes, reach lower ones within about a day and subside after a couple of days (common practice
knowledge): so hours of a storm are told apart by how long it has lasted, and hours after it by how long it is over.
Takes an index that was measured or expected; never forecasts one.
"""

from typing import Any

import numpy as np
import numpy.typing as npt

from skylag.tables import Floats

STORM_AP = 39.0  # Kp 5-, from where the scale of the space weather services counts a storm (Kp to ap: GFZ table)
UNTOLD, QUIET, ONSET, MAIN, AFTER, LATER = range(6)
PHASES = ("untold", "quiet", "onset", "main phase", "first day after", "second day after")

_ONSET_H, _DAY_H, _PAUSE_H = 12, 24, 12

Phases = npt.NDArray[np.uint8]


def hourly(ap: Floats) -> Floats:
    """Three-hourly values (days, 8) as hours in a row (days x 24,)."""
    return np.repeat(np.asarray(ap, dtype=np.float64).reshape(-1), 3)


def phases(ap: Floats) -> Phases:
    """The phase of each hour in a row (H,): codes of PHASES, from hourly ap (NaN where it is not known).

    An hour belongs to a storm where ap is 39 or more; after up to twelve hours below, the storm that comes back is the
    same one.  Hours without an index are `untold`, but for the two days after a storm.  No hour looks ahead.
    """
    values = np.asarray(ap, dtype=np.float64)
    with np.errstate(invalid="ignore"):
        stormy = values >= STORM_AP
    result = np.where(np.isfinite(values), QUIET, UNTOLD).astype(np.uint8)
    at = np.flatnonzero(stormy)
    if len(at) == 0:
        return result
    hours = np.arange(len(values))
    breaks = np.flatnonzero(np.diff(at) > _PAUSE_H + 1)
    starts, ends = at[np.concatenate([[0], breaks + 1])], at[np.concatenate([breaks, [len(at) - 1]])]
    for start, end in zip(starts, ends, strict=True):  # storms, not hours
        result[(hours > end + _DAY_H) & (hours <= end + 2 * _DAY_H)] = LATER
        result[(hours > end) & (hours <= end + _DAY_H)] = AFTER
        inside = at[(at >= start) & (at <= end)]
        for hour in inside:  # a pause is a first day after, until the storm comes back
            result[hour] = ONSET if hour < start + _ONSET_H else MAIN
            pause = slice(hour + 1, min(hour + 1 + _PAUSE_H, end))
            result[pause] = np.where(stormy[pause], result[pause], AFTER)
    return result


def told(measured: Floats, expected: Floats, back: int = 5) -> Phases:
    """Phases (days of `expected`, 24) as they stood when told: from measured ap (D, 8) and an expectation (d, 8).

    back  days of measurements looked back on
    """
    both = np.concatenate([hourly(measured[-back:]), hourly(expected)])
    return phases(both)[-24 * len(expected) :].reshape(-1, 24)


def words(codes: npt.NDArray[Any]) -> tuple[str, ...]:
    """The phases in words."""
    return tuple(PHASES[int(code)] for code in codes.reshape(-1))
