"""What would help where an outlook is bad: sentences with their reasons, cautious, for a way of working.

Facts behind them: an error that grows with the baseline shrinks with it (slope times distance); two frequencies take
the first-order delay away, so that only the fixing of whole cycles still feels it (IS-GPS-200, 20.3.3.3.3.3, for the
combination); longer static sessions average what changes during them (common practice); disturbances begin at high
latitudes, reach lower ones within about a day and subside after a couple of days (common practice).
Never promises anything, and never says that a job is safe.
"""

import numpy as np

from skylag.ionosphere.outlook import SPAN_KINDS, Span
from skylag.tables import Use

_HOLDS, *_, _UNKNOWN = SPAN_KINDS
_HOUR = np.timedelta64(1, "h")


def advice(use: Use, spans: tuple[Span, ...], storm_told: bool) -> tuple[str, ...]:
    """Sentences for a use and the spans of the hours ahead; none where all of them likely hold."""
    kinds = {span.kind for span in spans}
    if kinds == {_HOLDS}:
        return ()
    if kinds == {_UNKNOWN}:
        return ("Too few days were seen here lately: treat the place as not covered, whatever the climatology says.",)
    said = []
    good = [span for span in spans if span.kind == _HOLDS]
    if good:
        longest = max(good, key=lambda span: span.end - span.start)
        hours = int((longest.end - longest.start) / _HOUR)
        said.append(f"Another hour may do: the longest stretch likely to hold is {hours} h; see the windows.")
    else:
        said.append("No hour of the outlook is likely to hold; another day may do.")
    if _UNKNOWN in kinds:
        said.append("Hours that are not known were seen here on too few days lately: treat them as not covered.")
    if storm_told:
        said.append(
            "A geomagnetic storm or its aftermath is told: effects begin at high latitudes, reach lower ones within "
            "about a day and mostly subside after a couple of days (common practice)."
        )
    if use.kind == "differential":
        said.append(
            "A shorter baseline may help: the error grows with the distance (slope times distance), and half of "
            f"{use.baseline_km:g} km halves it."
        )
        said.append(
            "Two frequencies may help: they take the delay itself away but for a small rest (IS-GPS-200, "
            "20.3.3.3.3.3); fixing of whole cycles still feels it."
        )
        said.append(
            "Longer static sessions may help: what changes within them averages out (common practice); check on known "
            "points."
        )
    elif use.kind == "single":
        said.append(
            "Two frequencies may help: they take the delay itself away but for a small rest, at the price of more "
            "noise (IS-GPS-200, 20.3.3.3.3.3)."
        )
    else:
        said.append(
            "Approaches: have an alternative that does not lean on these corrections; official notices and the service "
            "provider's information come first."
        )
    return tuple(said)
