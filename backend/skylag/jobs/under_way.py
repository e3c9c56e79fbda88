"""The fronts that count at a moment of a kept day: its own, and those of the day before that were seen until lately.

A wall that was last seen at ten to midnight is still on its way at ten past.  Never judges: `impact.coming` does.
"""

from collections.abc import Sequence

import numpy as np

from skylag.archive import Archive
from skylag.errors import Missing
from skylag.impact.coming import LAST_SEEN
from skylag.tables import Flag

_DAY = np.timedelta64(1, "D")


def with_day_before(
    archive: Archive, region: str, day: np.datetime64, flags: Sequence[Flag], now: np.datetime64
) -> tuple[Flag, ...]:
    """A day's flags, with the fronts of the day before that still count at a GPS time, where that day is kept.

    Nothing is read but in the first hour of the day, and then only fronts that ended within the last hour.
    """
    return (*flags, *of_day_before(archive, region, day, now))


def of_day_before(archive: Archive, region: str, day: np.datetime64, now: np.datetime64) -> tuple[Flag, ...]:
    """The latter alone."""
    begin = day.astype("datetime64[D]").astype("datetime64[ns]")
    if not begin <= now <= begin + LAST_SEEN:
        return ()
    try:
        return archive.flags(region, day.astype("datetime64[D]") - _DAY, kind="front", since=now - LAST_SEEN)
    except Missing:
        return ()
