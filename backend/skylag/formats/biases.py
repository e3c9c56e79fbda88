"""Code biases: Bias-SINEX (1.00 and the older 0.01) both ways, and the monthly text tables of differential biases.

Values in ns with the Bias-SINEX sign: bias of the first code minus bias of the second, or of the first alone.  Phase
biases, inter-system biases and biases of single satellite-receiver links are counted and skipped.  A broken line is a
`Problem`, and reading goes on.  Never opens a file, never combines biases.

Layouts: Bias-SINEX 1.00 (Schaer 2016); the monthly tables by their own headings.
"""

import re
from typing import Any

import numpy as np

from skylag.errors import FormatError
from skylag.formats.rinex_layout import Problems
from skylag.tables import Biases, Reading, Times
from skylag.timescales import BDT_BEHIND_GPS_S, utc_to_gps

_NEVER = np.datetime64("NaT", "ns")
_SYSTEMS = "GRECJSI"
_DATUM_MARK = "Datum of the levels: "

# What the letters of the monthly tables mean as RINEX 3 codes.  P1 and P2 of GPS are semi-codeless tracking (W).  C2 of
# GPS is the civil code without saying which part of it is tracked: C2X, as C2 of RINEX 2 observations is read.  Some
# Bias-SINEX files call the same thing C2C, a code RINEX 3 does not have for GPS.
_MONTHLY_CODES = {
    ("G", "P1"): "C1W", ("G", "P2"): "C2W", ("G", "C1"): "C1C", ("G", "C2"): "C2X",
    ("R", "P1"): "C1P", ("R", "P2"): "C2P", ("R", "C1"): "C1C", ("R", "C2"): "C2C",
}  # fmt: skip


class _Rows:
    """Columns of a `Biases` table as they grow."""

    def __init__(self) -> None:
        self.rows: list[tuple[str, str, str, str, str, float, float, np.datetime64, np.datetime64]] = []

    def table(self, source: str, datum: str) -> Biases:
        """The finished table."""
        columns = list(zip(*self.rows, strict=True)) if self.rows else [()] * 9
        kind, name, system, code1, code2 = (np.array(column, dtype=np.str_) for column in columns[:5])
        value, sigma = (np.array(column, dtype=np.float64) for column in columns[5:7])
        start, end = (np.array(column, dtype="datetime64[ns]") for column in columns[7:])
        return Biases(kind, name, system, code1, code2, value, sigma, start, end, source=source, datum=datum)


def parse(data: bytes, name: str) -> Reading:
    """The code biases of one file; header facts say what was skipped.

    Raises FormatError when the file is neither Bias-SINEX nor a monthly table, or has no bias at all.
    """
    lines = data.decode("latin-1").splitlines()
    if lines and lines[0].startswith("%=BIA"):
        return _bias_sinex(lines, name)
    for line in lines[:10]:
        told = re.search(r"DIFFERENTIAL \((\w\d)-(\w\d)\) CODE BIASES", line)
        if told:
            return _monthly(lines, name, told.group(1), told.group(2))
    raise FormatError(
        f"{name}: neither %=BIA in line 1 (Bias-SINEX) nor a heading DIFFERENTIAL (..-..) CODE BIASES in the first ten "
        "lines (monthly table); code biases come in one of the two",
        path=name, line=1,
    )  # fmt: skip


# ---------------------------------------------------------------------------------------------- Bias-SINEX


def _bias_sinex(lines: list[str], name: str) -> Reading:
    """Rows of the +BIAS/SOLUTION block."""
    problems = Problems(name)
    rows = _Rows()
    skipped: dict[str, int] = {}
    block, agency, mode, system, datum = "", lines[0][11:14].strip(), "", "G", ""
    ended = False
    for number, line in enumerate(lines, start=1):
        if line.startswith("+"):
            block = line[1:].strip()
        elif line.startswith("-"):
            block = ""
        elif line.startswith("%=ENDBIA"):
            ended = True
            break
        elif line.startswith("*"):
            continue
        elif block == "BIAS/DESCRIPTION":
            words = line.split()
            if len(words) > 1 and words[0] == "BIAS_MODE":
                mode = words[1].lower()
            elif len(words) > 1 and words[0] == "TIME_SYSTEM":
                system = words[1]
        elif block == "FILE/COMMENT" and _DATUM_MARK in line:
            datum = line.split(_DATUM_MARK, 1)[1].strip()
        elif block == "BIAS/SOLUTION":
            try:
                _solution_line(line, system, rows, skipped)
            except ValueError as what:
                problems.note(number, f"bias line is broken: {what}", kind="broken bias lines")
    if not ended:
        problems.note(len(lines), "no %=ENDBIA line; the file is cut", "what came before is used")
    for system in _undetermined(rows):
        rows.rows = [row for row in rows.rows if not (row[0] == "satellite" and row[2] == system)]
        problems.note(0, f"all satellite code biases of {system} are exactly 0: a convention, not a determination")
    if not rows.rows and not problems:
        problems.note(0, "no code bias in the file", "nothing to use")
    source = " ".join(filter(None, (agency, name)))
    header: dict[str, Any] = {"version": lines[0][6:10].strip(), "agency": agency, "mode": mode, "skipped": skipped}
    return Reading(rows.table(source, datum or mode), problems.all(), header)


def _undetermined(rows: _Rows) -> list[str]:
    """Systems whose satellites all have the code bias 0: some files write that where only clocks were determined."""
    values: dict[str, list[float]] = {}
    for kind, _, system, _, _, value, *_ in rows.rows:
        if kind == "satellite":
            values.setdefault(system, []).append(value)
    return [system for system, told in values.items() if len(told) > 3 and not any(told)]


def _solution_line(line: str, system: str, rows: _Rows, skipped: dict[str, int]) -> None:
    """One line of biases into `rows`; raises ValueError saying what is wrong."""
    kind, satellite, station = line[1:5].strip(), line[11:14].strip(), line[15:24].strip()
    code1, code2 = line[25:29].strip(), line[30:34].strip()
    words = line[34:].split()
    times = [word for word in words[:2] if ":" in word]
    rest = words[len(times) :]
    if kind not in ("OSB", "DSB", "DCB"):
        if kind in ("ISB", "IFB"):
            skipped[kind] = skipped.get(kind, 0) + 1
            return
        raise ValueError(f"type {kind!r} is none of OSB, DSB, ISB")
    if not times or len(rest) < 2:
        raise ValueError("a time, a unit and a value are needed")
    if code1[:1] == "L" or rest[0] != "ns":
        skipped["phase"] = skipped.get("phase", 0) + 1
        return
    if len(code1) != 3 or code1[0] != "C" or (code2 and (len(code2) != 3 or code2[0] != "C")):
        raise ValueError(f"{code1!r} {code2!r} are no codes like C1C")
    if (kind == "OSB") == bool(code2):
        raise ValueError(f"{kind} with second code {code2!r}")
    if satellite[:1] == "G":
        code1, code2 = ("C2X" if code == "C2C" else code for code in (code1, code2))
    if station and len(satellite) > 1:
        skipped["satellite-receiver link"] = skipped.get("satellite-receiver link", 0) + 1
        return
    if not satellite[:1] or satellite[0] not in _SYSTEMS:
        raise ValueError("no satellite or system")
    if not station and (len(satellite) != 3 or not satellite[1:].isdecimal()):
        raise ValueError(f"{satellite!r} is no satellite")
    value = float(rest[1])
    sigma = float(rest[2]) if len(rest) > 2 else np.nan
    if not np.isfinite(value) or abs(value) > 1e6:
        raise ValueError(f"value {rest[1]}")
    start = _instant(times[0], system)
    end = _instant(times[1], system) if len(times) > 1 else _NEVER
    kind = "receiver" if station else "satellite"
    rows.rows.append((kind, station or satellite, satellite[0], code1, code2, value, sigma, start, end))


def _instant(text: str, system: str) -> np.datetime64:
    """GPS time of YYYY:DDD:SSSSS (or YY:DDD:SSSSS); all zeros = open."""
    year_text, day_text, second_text = text.split(":")
    year, day, second = int(year_text), int(day_text), int(second_text)
    if year == day == second == 0:
        return _NEVER
    if len(year_text) == 2:
        year += 1900 if year >= 80 else 2000
    if not (1980 <= year < 2200 and 1 <= day <= 366 and 0 <= second <= 86_400):
        raise ValueError(f"time {text}")
    since = (day - 1) * 86_400 + second + (BDT_BEHIND_GPS_S if system == "C" else 0)
    instant: Times = np.array([f"{year:04d}-01-01"], dtype="datetime64[s]").astype("datetime64[ns]")
    instant = np.asarray(instant + np.array([since]).astype("timedelta64[s]"))
    chosen: np.datetime64 = (utc_to_gps(instant) if system in ("UTC", "U", "R") else instant)[0]
    return chosen


def _time_tag(instant: np.datetime64) -> str:
    """YYYY:DDD:SSSSS of a GPS time; zeros for open."""
    if np.isnat(instant):
        return "0000:000:00000"
    day = instant.astype("datetime64[D]")
    year = day.astype("datetime64[Y]")
    second = int((instant - day).astype("timedelta64[s]").astype(np.int64))
    return f"{year}:{int((day - year.astype('datetime64[D]')).astype(np.int64)) + 1:03d}:{second:05d}"


def write_bias_sinex(biases: Biases, created: np.datetime64, agency: str = "SKL", description: str = "") -> str:
    """Bias-SINEX 1.00 text of a table of biases: differential ones as DSB, those of one code as OSB.

    created  GPS time written as the time of making; agency  three letters
    Values are kept to 0.0001 ns, times to the second, receiver names to nine characters.
    """
    starts, ends = biases.start[~np.isnat(biases.start)], biases.end[~np.isnat(biases.end)]
    first = starts.min() if len(starts) else _NEVER
    last = ends.max() if len(ends) else _NEVER
    absolute = bool(len(biases)) and bool(np.all(biases.code2 == ""))
    mode = "ABSOLUTE" if absolute else "RELATIVE"
    agency = f"{agency:3.3s}"
    lines = [
        f"%=BIA 1.00 {agency} {_time_tag(created)} {agency} {_time_tag(first)} {_time_tag(last)} {mode[0]} "
        f"{len(biases):08d}",
        "+FILE/REFERENCE",
        "*INFO_TYPE_________ INFO________________________________________________________",
        f" DESCRIPTION        {description or 'Code biases'}"[:80],
        f" INPUT              {biases.source or 'not told'}"[:80],
        "-FILE/REFERENCE",
        "+FILE/COMMENT",
        f" {_DATUM_MARK}{' '.join(biases.datum.split()) or 'not told'}",
        "-FILE/COMMENT",
        "+BIAS/DESCRIPTION",
        "*KEYWORD________________________________ VALUE(S)_______________________________",
        f" BIAS_MODE                               {mode}",
        " TIME_SYSTEM                             G",
        "-BIAS/DESCRIPTION",
        "+BIAS/SOLUTION",
        "*BIAS SVN_ PRN STATION__ OBS1 OBS2 BIAS_START____ BIAS_END______ UNIT __ESTIMATED_VALUE____ _STD_DEV___",
    ]
    for kind, name, system, code1, code2, value, sigma, start, end in zip(
        biases.kind, biases.name, biases.system, biases.code1, biases.code2, biases.value_ns, biases.sigma_ns,
        biases.start, biases.end, strict=True,
    ):  # fmt: skip
        satellite, station = (str(name), "") if kind == "satellite" else (str(system), str(name))
        spread = f" {sigma:11.4f}" if np.isfinite(sigma) else ""
        lines.append(
            f" {'DSB' if code2 else 'OSB':4s}      {satellite:3.3s} {station:9.9s} {code1:4s} {code2:4s} "
            f"{_time_tag(start)} {_time_tag(end)} ns   {value:21.4f}{spread}"
        )
    lines += ["-BIAS/SOLUTION", "%=ENDBIA", ""]
    return "\n".join(lines)


# ---------------------------------------------------------------------------------------------- monthly tables


def _monthly(lines: list[str], name: str, first: str, second: str) -> Reading:
    """Rows of a monthly table of differential biases; its month is the span."""
    title = lines[0].upper()
    told = re.search(r"YEAR (\d{4}), MONTH (\d{1,2})", title)
    start = end = _NEVER
    if told and 1 <= int(told.group(2)) <= 12 and 1980 <= int(told.group(1)) < 2200:
        month = np.datetime64(f"{told.group(1)}-{int(told.group(2)):02d}", "M")
        start, end = month.astype("datetime64[ns]"), (month + 1).astype("datetime64[ns]")
    problems = Problems(name)
    rows = _Rows()
    begun = False
    for number, line in enumerate(lines, start=1):
        if line.startswith("***"):
            begun = True
            continue
        if not begun or not line.strip():
            continue
        satellite, station = line[:3].strip(), line[6:22].strip()
        code1, code2 = (_MONTHLY_CODES.get((satellite[:1], code), "") for code in (first, second))
        numbers = line[22:].split()
        try:
            value = float(numbers[0])
            sigma = float(numbers[1]) if len(numbers) > 1 else np.nan
        except (ValueError, IndexError):
            problems.note(number, "value or its rms is missing or no number")
            continue
        whole = len(satellite) == 3 and satellite[1:].isdecimal()
        if not code1 or not code2 or whole == bool(station):
            what = f"{satellite!r} {station!r}: neither a satellite nor a receiver"
            problems.note(number, what, kind="rows of neither a satellite nor a receiver")
            continue
        kind, who = ("satellite", satellite) if whole else ("receiver", station.split()[0])
        rows.rows.append((kind, who, satellite[0], code1, code2, value, sigma, start, end))
    if not begun:
        raise FormatError(f"{name}: no mask line *** under the heading; the table is cut", path=name, line=len(lines))
    source = " ".join(filter(None, ("CODE" if title.startswith("CODE") else "", name)))
    datum = "mean of the satellites is zero"
    return Reading(rows.table(source, datum), problems.all(), {"pair": f"{first}-{second}"})
