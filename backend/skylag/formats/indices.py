"""Daily geomagnetic and solar indices: the open text tables of GFZ (daily and three-hourly) and the WDC card form.

Kp as decimal thirds (2.667 for 3-), ap in its own unit (2 nT), F10.7 as observed; missing values are NaN.  A broken
line is a `Problem`, and reading goes on.  Never opens a file, never fills a gap.

Layouts: the headings of the GFZ files; WDC form: columns of the Kp card (Bartels 1949 series, as GFZ publishes it).
"""

import numpy as np

from skylag.errors import FormatError
from skylag.formats.rinex_layout import Problems
from skylag.tables import Indices, Reading


def parse(data: bytes, name: str) -> Reading:
    """The indices of one file, one row per day, days ascending; of a day told twice the last line counts.

    Raises FormatError when no line reads as one of the three forms.
    """
    days: dict[np.datetime64, list[float]] = {}
    problems = Problems(name)
    forms: set[str] = set()
    for number, line in enumerate(data.decode("latin-1").splitlines(), start=1):
        if line.startswith("#") or not line.strip():
            continue
        words = line.split()
        try:
            if len(words) == 28:
                forms.add("daily")
                _daily(words, days)
            elif len(words) == 10:
                forms.add("three-hourly")
                _three_hourly(words, days)
            elif len(line) >= 58 and line[:6].isdigit():
                forms.add("WDC")
                _card(line, days)
            else:
                raise ValueError("none of the known forms (28 or 10 columns, or the WDC card)")
        except ValueError as what:
            problems.note(number, str(what), kind="broken lines")
    if not days:
        raise FormatError(
            f"{name}: no line reads as a day of geomagnetic indices; the GFZ tables and the WDC card form are known",
            path=name, line=1,
        )  # fmt: skip
    order = sorted(days)
    rows = np.array([days[day] for day in order])
    table = Indices(
        day=np.array(order, dtype="datetime64[D]"), kp=rows[:, :8], ap=rows[:, 8:16], daily_ap=rows[:, 16],
        f107_observed=rows[:, 17],
    )  # fmt: skip
    return Reading(table, problems.all(), {"forms": sorted(forms)})


def _day(year: int, month: int, day: int) -> np.datetime64:
    """The day, or ValueError."""
    if not 1868 <= year < 2200:
        raise ValueError(f"year {year} is outside 1868 to 2199")
    return np.datetime64(f"{year:04d}-{month:02d}-{day:02d}", "D")


def _known(value: float, low: float, high: float, what: str) -> float:
    """The value, NaN for a negative one (the sign of none), or ValueError outside its range."""
    if value < 0:
        return np.nan
    if not low <= value <= high:
        raise ValueError(f"{what} {value:g} is outside {low:g} to {high:g}")
    return value


def _daily(words: list[str], days: dict[np.datetime64, list[float]]) -> None:
    """A line of the GFZ daily table: date, counters, 8 Kp, 8 ap, Ap, sunspots, observed and adjusted F10.7, quality."""
    kp = [_known(float(word), 0, 9, "Kp") for word in words[7:15]]
    ap = [_known(float(word), 0, 400, "ap") for word in words[15:23]]
    mean = _known(float(words[23]), 0, 400, "Ap")
    flux = _known(float(words[25]), 0, 2000, "F10.7")
    days[_day(int(words[0]), int(words[1]), int(words[2]))] = [*kp, *ap, mean, flux or np.nan]


def _three_hourly(words: list[str], days: dict[np.datetime64, list[float]]) -> None:
    """A line of the GFZ three-hourly table: date, start and middle hour, two counters, Kp, ap, quality."""
    start = float(words[3])
    if start not in (0, 3, 6, 9, 12, 15, 18, 21):
        raise ValueError(f"{words[3]} is no three-hourly start")
    kp, ap = _known(float(words[7]), 0, 9, "Kp"), _known(float(words[8]), 0, 400, "ap")
    row = days.setdefault(_day(int(words[0]), int(words[1]), int(words[2])), [np.nan] * 18)
    row[int(start) // 3], row[8 + int(start) // 3] = kp, ap
    row[16] = float(np.rint(np.mean(row[8:16]))) if not np.isnan(row[8:16]).any() else np.nan


def _card(line: str, days: dict[np.datetime64, list[float]]) -> None:
    """A WDC card: yymmdd, rotation, 8 Kp in tenths (33 is 3+, 27 is 3-), sum, 8 ap, Ap, Cp, C9, sunspots, F10.7."""
    year = int(line[:2])
    tenths = [_field(line[start : start + 2]) for start in range(12, 28, 2)]
    kp = [_known(float(np.rint(value * 0.3) / 3), 0, 9, "Kp") if value >= 0 else np.nan for value in tenths]
    ap = [_known(_field(line[start : start + 3]), 0, 400, "ap") for start in range(31, 55, 3)]
    mean = _known(_field(line[55:58]), 0, 400, "Ap")
    flux = _known(_field(line[65:70]), 0, 2000, "F10.7")
    day = _day(year + (1900 if year >= 32 else 2000), int(line[2:4]), int(line[4:6]))
    days[day] = [*kp, *ap, mean, flux or np.nan]


def _field(text: str) -> float:
    """Number of a fixed column; blank = none (-1)."""
    return float(text) if text.strip() else -1.0
