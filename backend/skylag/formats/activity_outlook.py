"""Outlooks of geomagnetic activity: a plain table, and the three-day forecast of the American space weather service.

- table: comma-separated, its first line names the columns: `made_utc` (like 2031-05-10T12:30Z), `day` (UTC), and then
  either `ap` or `kp` for the whole day, or `ap1` to `ap8` (or `kp1` to `kp8`) for its eight times three hours
- three-day forecast: the lines `:Issued: 2031 May 10 1230 UTC`, one of three dates, and eight like
  `00-03UT  3.00  5.67 (G2)  4.33`; layout from memory

Kp becomes ap by the table of the index's makers (GFZ), at the nearest third.  Never opens a file, never guesses when an
outlook was made.
"""

import csv
import re
from datetime import datetime

import numpy as np

from skylag.errors import FormatError
from skylag.tables import ActivityOutlook, Floats

# ap of Kp 0, 1/3, 2/3 ... 9: GFZ, Matzka et al. 2021, Space Weather 19, table 1.
AP_OF_KP = np.array([0, 2, 3, 4, 5, 6, 7, 9, 12, 15, 18, 22, 27, 32, 39, 48, 56, 67, 80, 94, 111, 132, 154, 179, 207,
                     236, 300, 400], dtype=np.float64)  # fmt: skip

_ISSUED = re.compile(r"^:Issued:\s*(\d{4} \w{3} \d{1,2} \d{4}) UTC", re.MULTILINE)
_DATES = re.compile(r"^\s+((?:[A-Z][a-z]{2} \d{1,2}\s*){3})$", re.MULTILINE)
_HOURS = re.compile(r"^(\d{2})-\d{2}UT\s+(.*)$", re.MULTILINE)


def ap_of_kp(kp: Floats) -> Floats:
    """ap of Kp from 0 to 9, at the nearest third."""
    return np.asarray(AP_OF_KP[np.rint(np.asarray(kp) * 3.0).astype(np.int64)])


def parse(data: bytes, name: str) -> ActivityOutlook:
    """The outlooks of one file.  Raises FormatError, with the line, where any of it cannot be read."""
    text = data.decode("utf-8-sig", "replace")
    issued = _ISSUED.search(text)
    rows = _three_days(text, issued.group(1), name) if issued else _table(text, name)
    days, made, ap = zip(*rows, strict=True)
    return ActivityOutlook(np.array(days, "datetime64[D]"), np.array(made, "datetime64[ns]"), np.array(ap, np.float64))


_Row = tuple[np.datetime64, np.datetime64, Floats]


def _table(text: str, name: str) -> list[_Row]:
    numbered = [
        (number, line) for number, line in enumerate(text.splitlines(), start=1)
        if line.strip() and not line.startswith("#")
    ]  # fmt: skip
    lines = [line for _, line in numbered]
    columns = [word.strip().lower() for word in lines[0].split(",")] if lines else []
    index = next((one for one in ("ap", "kp") if one in columns or f"{one}1" in columns), None)
    wanted = [] if index is None else [index] if index in columns else [f"{index}{n}" for n in range(1, 9)]
    lacking = [one for one in ("made_utc", "day", *wanted) if one not in columns]
    if not wanted or lacking or len(lines) < 2:
        raise FormatError(
            f"{name}: is no outlook of activity; write a first line `made_utc,day,ap` (or kp, or ap1 to ap8, or kp1 to "
            f"kp8) and a line for each day{f'; {chr(44).join(lacking)} is lacking' if lacking and wanted else ''}",
            path=name, line=numbered[0][0] if numbered else 1,
        )  # fmt: skip
    rows: list[_Row] = []
    reader = csv.DictReader(lines)
    for row in reader:
        told = {(key or "").strip().lower(): (value or "").strip() if isinstance(value, str) else "" for key, value in
                row.items()}  # fmt: skip
        try:
            values = np.array([float(told[one]) for one in wanted])
            top = 9.0 if index == "kp" else 400.0
            if not np.all((values >= 0) & (values <= top)):
                raise ValueError(f"{index} is outside 0 to {top:g}")
            made = np.datetime64(told["made_utc"].removesuffix("Z"), "ns")
            day = np.datetime64(told["day"], "D")
            if np.isnat(made) or np.isnat(day):
                raise ValueError("a time is not told")
        except ValueError as cause:
            number, line = numbered[reader.line_num - 1]
            raise FormatError(
                f"{name}: {line[:60]!r} is no line like 2031-05-10T12:30Z,2031-05-11,12 ({cause})",
                path=name, line=number,
            ) from cause  # fmt: skip
        rows.append((day, made, np.broadcast_to(ap_of_kp(values) if index == "kp" else values, 8)))
    return rows


def _three_days(text: str, issued: str, name: str) -> list[_Row]:
    dates, hours = _DATES.search(text), _HOURS.findall(text)
    try:
        made = datetime.strptime(f"{issued} +0000", "%Y %b %d %H%M %z")
        if dates is None or [start for start, _ in hours] != [f"{hour:02d}" for hour in range(0, 24, 3)]:
            raise ValueError("three dates above eight lines 00-03UT to 21-00UT are needed")
        kp = np.array([[float(word) for word in re.sub(r"\(.*?\)", " ", rest).split()] for _, rest in hours])
        if kp.shape != (8, 3) or not np.all((kp >= 0) & (kp <= 9)):
            raise ValueError("each of the eight lines needs three Kp from 0 to 9")
        dated = re.findall(r"\w{3} \d+", dates.group(1))
        days = [datetime.strptime(f"{made.year} {one} +0000", "%Y %b %d %z") for one in dated]
    except ValueError as cause:
        raise FormatError(f"{name}: the three-day forecast cannot be read ({cause}); fetch it again",
                          path=name, line=1) from cause  # fmt: skip
    # Around the end of a year the later dates lie in the next one.
    days = [day.replace(year=day.year + 1) if (made - day).days > 180 else day for day in days]
    instant = np.datetime64(made.replace(tzinfo=None), "ns")
    return [
        (np.datetime64(day.date(), "D"), instant, ap_of_kp(kp[:, column]))
        for column, day in enumerate(days) if day.date() >= made.date()
    ]  # fmt: skip
