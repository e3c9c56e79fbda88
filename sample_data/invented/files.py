"""The files of the invented network: RINEX 3.05 observations, compact (Hatanaka) and gzipped, and navigation.

No file carries the time of its making, so that the same numbers give the same bytes with the same versions of the
`hatanaka` library and of zlib.  Writes what `network` gives and changes no value.
"""

import gzip
import re
from pathlib import Path

import hatanaka
import numpy as np

from invented import places
from skylag.tables import Signals

# RINEX wants the codes of a constellation in one order; this one keeps a code beside its phase.
_ORDER = ("C1C", "L1C", "S1C", "C1W", "L1W", "S1W", "C2W", "L2W", "C5Q", "L5Q")


def observation_name(marker: str, day: np.datetime64, interval_s: float) -> str:
    """The RINEX 3 long name of a compressed daily file."""
    year = str(day)[:4]
    number = int((day.astype("datetime64[D]") - np.datetime64(f"{year}-01-01")).astype(int)) + 1
    return f"{marker}_R_{year}{number:03d}0000_01D_{round(interval_s):02d}S_MO.crx.gz"


def navigation_name(day: np.datetime64) -> str:
    """The RINEX 3 long name of the day's navigation file."""
    year = str(day)[:4]
    number = int((day.astype("datetime64[D]") - np.datetime64(f"{year}-01-01")).astype(int)) + 1
    return f"TARN00XBS_R_{year}{number:03d}0000_01D_MN.rnx.gz"


def _header(signals: Signals, codes: dict[str, list[str]]) -> list[str]:
    station = places.station(signals.receiver.name)

    def line(text: str, label: str) -> str:
        return f"{text:<60}{label}"

    def when(time: np.datetime64) -> str:
        date, clock = str(time.astype("datetime64[s]")).split("T")
        year, month, day = (int(v) for v in date.split("-"))
        hour, minute, second = (int(v) for v in clock.split(":"))
        return f"{year:6d}{month:6d}{day:6d}{hour:6d}{minute:6d}{second:13.7f}     GPS"

    x, y, z = signals.receiver.position_m
    rows = [
        line(f"{3.05:9.2f}{'':11}{'OBSERVATION DATA':<20}{'M: MIXED':<20}", "RINEX VERSION / TYPE"),
        line(f"{'invented network':<20}{'sample data':<20}{'20310101 000000 GPS':<20}", "PGM / RUN BY / DATE"),
        line("INVENTED DATA: no such receiver, place or measurement.", "COMMENT"),
        line(f"{signals.receiver.name}", "MARKER NAME"),
        line("GEODETIC", "MARKER TYPE"),
        line(f"{'nobody':<20}{station.place:<40}", "OBSERVER / AGENCY"),
        line(f"{'0':<20}{signals.receiver.type:<20}{'1':<20}", "REC # / TYPE / VERS"),
        line(f"{'0':<20}{signals.receiver.antenna:<20}", "ANT # / TYPE"),
        line(f"{x:14.4f}{y:14.4f}{z:14.4f}", "APPROX POSITION XYZ"),
        line(f"{0.0:14.4f}{0.0:14.4f}{0.0:14.4f}", "ANTENNA: DELTA H/E/N"),
    ]
    for system, names in codes.items():
        rows.append(line(f"{system}  {len(names):3d} " + " ".join(names), "SYS / # / OBS TYPES"))
    rows += [line("DBHZ", "SIGNAL STRENGTH UNIT"), line(f"{signals.interval_s:10.3f}", "INTERVAL")]
    rows += [
        line(when(signals.times[0]), "TIME OF FIRST OBS"),
        line(when(signals.times[-1]), "TIME OF LAST OBS"),
    ]
    for system, names in codes.items():
        rows += [line(f"{system} {name}  {0.0:7.5f}", "SYS / PHASE SHIFT") for name in names if name[0] == "L"]
    rows += [line(f"{18:6d}", "LEAP SECONDS"), line("", "END OF HEADER")]
    return rows


def observation_text(signals: Signals) -> str:
    """One receiver's observations as RINEX 3.05 text."""
    system_of = np.array([name[0] for name in signals.satellites])
    codes: dict[str, list[str]] = {}
    for system in ("G", "E"):
        columns = system_of == system
        codes[system] = [
            c for c in _ORDER if c in signals.values and not np.isnan(signals.values[c][:, columns]).all()
        ]
    present = np.zeros((len(signals.times), len(signals.satellites)), dtype=bool)
    for array in signals.values.values():
        present |= ~np.isnan(array)
    # One text per satellite and epoch, in the order of the epochs.
    texts: dict[str, list[str]] = {}
    for system, names in codes.items():
        rows, columns = np.nonzero(present & (system_of == system))
        parts = []
        for name in names:
            value = signals.values[name][rows, columns]
            field = np.char.mod("%14.3f", value)
            field[np.isnan(value)] = " " * 14
            mark = np.full(len(rows), "  ")
            if name in signals.lock:
                digit = signals.lock[name][rows, columns]
                mark = np.where(digit > 0, np.char.add(digit.astype("U1"), " "), mark)
            parts.append(np.char.add(field, mark))
        joined = signals.satellites[columns]
        for part in parts:
            joined = np.char.add(joined, part)
        texts[system] = list(np.char.rstrip(joined))
    lines = _header(signals, codes)
    position = dict.fromkeys(codes, 0)
    counts = {s: (present & (system_of == s)).sum(axis=1) for s in codes}
    for e, time in enumerate(signals.times):
        date, clock = str(time.astype("datetime64[s]")).split("T")
        stamp = f"> {date.replace('-', ' ')} {clock[:2]} {clock[3:5]}{int(clock[6:]):3d}.0000000"
        total = sum(int(counts[s][e]) for s in codes)
        lines.append(f"{stamp}  {int(signals.resets[e])}{total:3d}")
        for s in codes:
            count = int(counts[s][e])
            lines += texts[s][position[s] : position[s] + count]
            position[s] += count
    return "\n".join(lines) + "\n"


def compact_bytes(text: str) -> bytes:
    """Hatanaka-compressed and gzipped text, with the writing time of both containers fixed."""
    compact = hatanaka.rnx2crx(text)
    # The second line tells program and time of compression: keep the program, fix the time.
    lines = compact.split("\n", 2)
    if not lines[1].rstrip().endswith("CRINEX PROG / DATE"):
        raise ValueError(f"second line of a compact file must be its program and date, got {lines[1]!r}")
    program = re.sub(r"\s*\d{2}-\w{3}-\d{2} \d{2}:\d{2}\s*$", "", lines[1][:60])
    lines[1] = f"{program:<40}{'01-Jan-31 00:00':<20}CRINEX PROG / DATE"
    return packed("\n".join(lines))


def packed(text: str) -> bytes:
    """Gzipped text without a time stamp."""
    return gzip.compress(text.encode("ascii"), compresslevel=9, mtime=0)


def write(path: Path, content: bytes) -> int:
    """Write bytes, folders and all, whole or not at all; returns their number."""
    path.parent.mkdir(parents=True, exist_ok=True)
    part = path.with_name(path.name + ".part")
    part.write_bytes(content)
    part.replace(path)
    return len(content)
