"""Sentences about a place at a time, made from what is stored: the state, the numbers, the flags near by.

Never decides a state: it says the stored one in words, names what stands behind it, and says what is not known.
"""

import math
from collections.abc import Sequence
from typing import Any

from skylag.impact.states import digits_of
from skylag.tables import BROKEN, HOLDS, STATE_NAMES, UNSEEN, Thresholds
from skylag.web.nearby import NearFlag

CAUTION = (
    "Planning aid, not for navigation. Official notices, the service provider's and the receiver maker's information, "
    "local rules and licensed practice come first."
)
INVENTED = "Invented data: nothing here was measured."
GOES_ON = "This day goes on: more files are to come, and what is said of it may change."
GEOCENTRIC = (
    "Latitudes are geocentric. The maps were computed on geographic ones (WGS 84): values are interpolated between two "
    "of their rows, linear in latitude; none where either row has none, none beyond the last row."
)
OUTSIDE = "Unseen here: the place lies outside the map of this region."
_NOT_COVERED = "Treat it as not covered."
_EIGHT = ("north", "north-east", "east", "south-east", "south", "south-west", "west", "north-west")


def notices(simulated: bool, provisional: bool) -> list[str]:
    """What must be known of a day before its numbers are used: that it goes on, that it is invented."""
    return [text for text, holds in ((GOES_ON, provisional), (INVENTED, simulated)) if holds]


def about(simulated: bool, provisional: bool) -> dict[str, Any]:
    """The members that a JSON or GeoJSON file of a day carries beside its table."""
    told = notices(simulated, provisional)
    return {"simulated": simulated, "provisional": provisional, "notices": told, "caution": CAUTION}


def description(region: str, simulated: bool, provisional: bool) -> str:
    """The same in words, for files that have a place for text."""
    return " ".join([f"{region}.", *notices(simulated, provisional), CAUTION])


def of_state(
    code: int,
    *,
    slope: float,
    slope_sigma: float,
    delay_m: float,
    delay_sigma_m: float,
    support: int,
    limits: Thresholds,
    near: Sequence[NearFlag] = (),
) -> str:
    """What holds at a cell and why, in one to three sentences.

    slope in mm/km, delay in metres, not-a-number where not known; support lines of sight; near the flags active there,
    nearest first: they are named where the map's own slope does not reach the limit of the state.
    """
    known = math.isfinite(delay_m)
    if code == UNSEEN or (code == HOLDS and not known):
        return _unseen(delay_m, delay_sigma_m, support, limits)
    delay = f"the vertical delay is {with_sigma(delay_m, delay_sigma_m, 'm', 2)}" if known else ""
    steep = with_sigma(slope, slope_sigma, "mm per km", digits_of(slope_sigma))
    change = f"the delay changes by {steep}" if math.isfinite(slope) else ""
    if code == HOLDS:
        return f"Corrections hold here: {delay}" + (f", and {change}." if change else ".")
    limit = limits.broken_mm_per_km if code == BROKEN else limits.strained_mm_per_km
    parts = []
    if change and slope > limit:
        parts.append(f"Corrections are {STATE_NAMES[code]} here: {change}.")
    else:
        parts.append(f"Corrections are {STATE_NAMES[code]} here: {_witness(code, near)}.")
        if change:
            parts.append(f"On the map itself {change}.")
    parts.append(f"{delay[0].upper()}{delay[1:]}." if known else "The vertical delay itself is not known here.")
    return " ".join(parts)


def of_doubt(why: str) -> str:
    """A place that is unseen whatever its map says, and why."""
    return f"Unseen here: {why}. {_NOT_COVERED}"


def _unseen(delay_m: float, delay_sigma_m: float, support: int, limits: Thresholds) -> str:
    if support == 0 or not math.isfinite(delay_m):
        return f"Unseen here: no line of sight passes near enough to say anything. {_NOT_COVERED}"
    if math.isfinite(delay_sigma_m) and delay_sigma_m > limits.unseen_sigma_m:
        return (
            f"Unseen here: the vertical delay is known to {delay_sigma_m:.1f} m only, "
            f"and {limits.unseen_sigma_m:.1f} m is needed to say more. {_NOT_COVERED}"
        )
    lines = "one line of sight tells" if support == 1 else f"{support} lines of sight tell"
    return f"Unseen here: what {lines} of the slope is too little to say that corrections hold. {_NOT_COVERED}"


def _witness(code: int, near: Sequence[NearFlag]) -> str:
    """What stands behind a state that the map's own slope does not explain."""
    speaking = [one.flag for one in near if one.flag.kind != "fault" and one.flag.state == STATE_NAMES[code]]
    speaking += [one.flag for one in near if one.flag.kind != "fault" and one.flag not in speaking]
    if not speaking:
        return "receivers near by see more than the map shows"
    flag = speaking[0]
    steep = with_sigma(flag.slope_mm_per_km, flag.sigma_mm_per_km, "mm per km", digits_of(flag.sigma_mm_per_km))
    has_slope = math.isfinite(flag.slope_mm_per_km)
    if flag.kind == "front":
        moving = f", moving {compass(flag.heading_deg)}" if math.isfinite(flag.heading_deg) else ""
        return f"a front{f' of {steep}' if has_slope else ''} is near{moving}"
    if flag.kind == "irregular":
        return "an irregular patch is near"
    return f"a slope of {steep} is near" if has_slope else "a steep slope is near"


def compass(heading_deg: float) -> str:
    """The nearest of eight directions, in words."""
    return _EIGHT[round(heading_deg / 45.0) % 8]


def with_sigma(value: float, sigma: float, unit: str, digits: int) -> str:
    """A number with its uncertainty, like 38 ± 6 mm per km; without the second where it is not known."""
    if not math.isfinite(sigma):
        return f"{value:.{digits}f} {unit}, uncertainty not known"
    return f"{value:.{digits}f} ± {sigma:.{digits}f} {unit}"

