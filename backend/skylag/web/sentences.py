"""Sentences about a place at a time, made from what is stored: the state, the numbers, the flags near by.

Never decides a state: it says the stored one in words, and says `unseen` wherever a number is missing.
"""

import math

from skylag.tables import BROKEN, HOLDS, STRAINED, UNSEEN

CAUTION = (
    "Planning aid, not for navigation: official notices, the service provider, the receiver maker "
    "and local rules decide."
)
INVENTED = "Invented data: nothing here was measured."


def of_state(code: int, slope: float, slope_sigma: float, delay_m: float, delay_sigma_m: float, support: int) -> str:
    """What holds at a cell and why, in one or two sentences; slopes in mm/km, delays in metres."""
    if code == UNSEEN or not math.isfinite(delay_m):
        if support > 0:
            lines = f"{support} lines of sight" if support != 1 else "one line of sight"
            return f"Unseen here: {lines} cannot say whether corrections hold. Treat it as not covered."
        return "Unseen here: no line of sight passes near enough to say anything. Treat it as not covered."
    delay = f"the vertical delay is {with_sigma(delay_m, delay_sigma_m, 'm', 2)}"
    change = f"the delay changes by {with_sigma(slope, slope_sigma, 'mm per km', 0)}" if math.isfinite(slope) else ""
    if code == HOLDS:
        return f"Corrections hold here: {delay}" + (f", and {change}." if change else ".")
    word = {STRAINED: "strained", BROKEN: "broken"}[code]
    if not change:
        return f"Corrections are {word} here; {delay}."
    return f"Corrections are {word} here: {change}. {delay[0].upper()}{delay[1:]}."


def with_sigma(value: float, sigma: float, unit: str, digits: int) -> str:
    """A number with its uncertainty, like 38 ± 6 mm per km; without the second where it is not known."""
    if not math.isfinite(sigma):
        return f"{value:.{digits}f} {unit}, uncertainty not known"
    return f"{value:.{digits}f} ± {sigma:.{digits}f} {unit}"


OUTSIDE = "Unseen here: the place lies outside the map of this region."
