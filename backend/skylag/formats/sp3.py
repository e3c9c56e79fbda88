"""Tabulated precise orbits (SP3-a, -c and -d) to `PreciseOrbits`.

Positions in metres, clocks in seconds, epochs in GPS time; missing positions and clocks are NaN.  Velocities and
accuracy codes are passed over.  A broken line is a `Problem`, and reading goes on.  Never opens a file or interpolates.

Layout: the SP3-d description (Hilla 2016): epoch lines `*`, position lines `P` of columns 5-60, header line `%c`.
"""

from functools import lru_cache

import numpy as np

from skylag.errors import FormatError
from skylag.formats.rinex_layout import Problems
from skylag.tables import PreciseOrbits, Reading
from skylag.timescales import BDT_BEHIND_GPS_S, utc_to_gps

_SYSTEMS = "GRECJSIL"
_SPARSEST = 40  # the dense arrays may take this many bytes per byte of text ...
_SMALL = 64 * 2**20  # ... once they are larger than this
_BAD_CLOCK = 999_999.0  # microseconds; this and above mean "none"


def parse(data: bytes, name: str) -> Reading:
    """The orbits of one SP3 file; header facts: version, time_system, agency.

    Raises FormatError when the first line is not that of an SP3 file, the time system is unknown, or no epoch is whole.
    """
    lines = data.splitlines()
    if not lines or lines[0][:1] != b"#" or lines[0][1:2] not in (b"a", b"b", b"c", b"d"):
        raise FormatError(f"{name}: line 1 does not begin with #a, #b, #c or #d; an SP3 file must", path=name, line=1)
    head = lines[0].decode("latin-1").ljust(60)
    system = "GPS"
    for line in lines[:60]:
        if line[:2] == b"%c":
            told = line[9:12].decode("latin-1").strip()
            system = told if told and told != "ccc" else "GPS"
            break
    if system not in ("GPS", "GAL", "QZS", "UTC", "GLO", "BDT", "BDS", "TAI", "IRN"):
        raise FormatError(f"{name}: time system {system!r} of SP3 is not known here", path=name, line=0)
    problems = Problems(name)
    epochs: list[int] = []
    rows: list[int] = []
    names: list[str] = []
    values: list[list[float]] = []
    current = -1
    ended = False
    for number, line in enumerate(lines, start=1):
        first = line[:1]
        if first == b"P" and current >= 0:
            satellite = _satellite(line[1:4])
            numbers = _numbers(line)
            if satellite is None or numbers is None:
                problems.note(number, "position line is broken")
                continue
            rows.append(current)
            names.append(satellite)
            values.append(numbers)
        elif first == b"*":
            epoch = _epoch(line)
            current = -1
            if epoch is None:
                problems.note(number, "impossible epoch", "its positions skipped")
                continue
            epochs.append(epoch)
            current = len(epochs) - 1
        elif line.startswith(b"EOF"):
            ended = True
            break
    if not values:
        raise FormatError(f"{name}: no position behind any epoch; the file is cut or empty", path=name, line=len(lines))
    if not ended:
        problems.note(len(lines), "no EOF line; the file is cut", "what came before is used")
    dense = len(set(names)) * len(epochs) * 32
    if dense > max(_SMALL, _SPARSEST * len(data)):
        raise FormatError(
            f"{name}: {len(epochs)} epochs of {len(set(names))} satellites, nearly all without a position; no orbit "
            "file is like that; fetch it again",
            path=name, line=0,
        )  # fmt: skip
    table = _table(np.array(epochs).astype("datetime64[ns]"), np.array(rows), np.array(names), np.array(values), system)
    header = {"version": head[1], "time_system": system, "agency": head[56:60].strip()}
    return Reading(table, problems.all(), header)


def _satellite(head: bytes) -> str | None:
    """Name like G05 of three columns; a blank letter means GPS (SP3-a)."""
    letter = head[:1].decode("latin-1").strip() or "G"
    digits = head[1:3].strip()
    return f"{letter}{int(digits):02d}" if letter in _SYSTEMS and digits.isdigit() else None


def _numbers(line: bytes) -> list[float] | None:
    """Position [km] and clock [microseconds]; a missing clock column reads as none."""
    try:
        position = [float(line[start : start + 14]) for start in (4, 18, 32)]
    except ValueError:
        return None
    try:
        clock = float(line[46:60])
    except ValueError:
        clock = _BAD_CLOCK
    return [*position, clock] if all(abs(p) < 1e6 for p in position) else None


@lru_cache(maxsize=64)
def _midnight(year: int, month: int, day: int) -> int:
    return int(np.datetime64(f"{year:04d}-{month:02d}-{day:02d}", "ns").astype(np.int64))


def _epoch(line: bytes) -> int | None:
    """Time of an epoch line as written, in nanoseconds since 1970."""
    words = line[1:].split()
    try:
        year, month, day, hour, minute = (int(word) for word in words[:5])
        second = float(words[5])
        if not (1980 <= year < 2200 and 0 <= hour < 24 and 0 <= minute < 60 and 0 <= second < 61):
            return None
        midnight = _midnight(year, month, day)
    except (ValueError, IndexError):
        return None
    return midnight + round((hour * 3600 + minute * 60 + second) * 1e9)


def _table(
    epochs: np.ndarray, rows: np.ndarray, names: np.ndarray, values: np.ndarray, system: str
) -> PreciseOrbits:  # fmt: skip
    """Dense arrays; of an epoch or satellite told twice the last counts."""
    if system in ("UTC", "GLO"):
        epochs = utc_to_gps(epochs)
    elif system in ("BDT", "BDS"):
        epochs = epochs + np.timedelta64(BDT_BEHIND_GPS_S, "s")
    elif system == "TAI":
        epochs = epochs - np.timedelta64(19, "s")  # TAI - GPS time, constant
    times, epoch_at = np.unique(epochs, return_inverse=True)
    satellites, at = np.unique(names, return_inverse=True)
    position = np.full((len(times), len(satellites), 3), np.nan)
    clock = np.full((len(times), len(satellites)), np.nan)
    missing = np.all(np.abs(values[:, :3]) < 1e-6, axis=1)
    position[epoch_at[rows], at] = np.where(missing[:, None], np.nan, values[:, :3] * 1000.0)
    clock[epoch_at[rows], at] = np.where(missing | (values[:, 3] >= _BAD_CLOCK), np.nan, values[:, 3] * 1e-6)
    return PreciseOrbits(times=times, satellites=satellites, position_m=position, clock_s=clock)
