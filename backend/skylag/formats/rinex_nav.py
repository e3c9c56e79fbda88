"""Broadcast navigation files (RINEX 2, 3 and 4) to `Ephemerides`.

Knows where each message keeps its numbers, brings all times to GPS time, and keeps group delays, health, accuracy,
GLONASS channels and ionospheric coefficients.  Records of other systems (satellite-based augmentation, NavIC) are
counted and skipped.  A broken record is a `Problem`, and reading goes on.  Never opens a file or computes a position.

Layouts: RINEX 2.11 (Gurtner and Estey 2007) tables A4, A10; RINEX 3.05 tables A5 to A14; RINEX 4.00 tables A9 to A32.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from skylag.errors import FormatError
from skylag.formats.rinex_layout import MOST_PROBLEMS, Problems
from skylag.tables import Bools, Ephemerides, Floats, Ints, Reading, Times
from skylag.timescales import BDT_BEHIND_GPS_S, utc_to_gps

_WIDTH = 80
_WEEK_S, _DAY_S = 604_800.0, 86_400.0
_LARGEST = 1e12  # no number of a record comes near, and squares stay finite
_KEPLERIAN = "GECJ"
# Messages of RINEX 4 that carry an orbit in a known layout; before, records do not name theirs.
_MESSAGES = {"G": ("LNAV", "CNAV", "CNV2"), "J": ("LNAV", "CNAV", "CNV2"), "E": ("INAV", "FNAV"),
             "C": ("D1", "D2", "CNV1", "CNV2", "CNV3"), "R": ("FDMA",)}  # fmt: skip
# RINEX 2 has one system per file, told by the letter of the file type.
_TYPE_OF_VERSION_2 = {"N": "G", "G": "R", "E": "E", "L": "E", "H": "S", "J": "J", "C": "C", "Q": "J"}
_GEOSTATIONARY_BEIDOU = {f"C{n:02d}" for n in (1, 2, 3, 4, 5, 59, 60, 61, 62, 63)}

# Lines a record must have, by message.
_LINES = {"CNAV": 9, "CNV1": 10, "CNV2": 10, "CNV3": 9, "FDMA": 4}
_LINES_OTHERWISE = 8

# Where the KEPLER columns stand in the common Keplerian layout: values of the broadcast orbit lines, four a line,
# counted from 0.
_KEPLER_AT = {"sqrt_a": 7, "e": 5, "i0": 12, "idot": 16, "omega0": 10, "omega_dot": 15, "omega": 14, "m0": 3,
              "delta_n": 2, "cuc": 4, "cus": 6, "crc": 13, "crs": 1, "cic": 9, "cis": 11, "toe_s": 8}  # fmt: skip
# health, accuracy, first and second group delay, transmission time; -1 = the message has none, or another meaning of it
_MORE_AT = {
    "G": (21, 20, 22, -1, 24), "J": (21, 20, 22, -1, 24), "E": (21, 20, 22, 23, 24), "C": (21, 20, 22, 23, 24),
    "CNAV": (21, -1, 22, -1, 28), "CNV2 of GPS": (21, -1, 22, -1, 32),
    "CNV1": (29, -1, -1, -1, 32), "CNV2": (29, -1, -1, -1, 32), "CNV3": (25, -1, -1, -1, 28),
}  # fmt: skip

_TOO_FEW = "records with too few lines"  # what they are counted as once the list of problems is full
_ALLOWED = np.zeros(256, dtype=bool)
_ALLOWED[list(b"0123456789+-.Ee ")] = True


@dataclass(frozen=True)
class _Layout:
    """Where a line keeps its values: start of the satellite's epoch and of the numbers."""

    epoch: tuple[tuple[int, int], ...]  # (start, width) of year, month, day, hour, minute, second
    clock: int  # start of the three values of the first line
    orbit: int  # start of the four values of the other lines
    two_digit_years: bool


_VERSION_2 = _Layout(((3, 2), (6, 2), (9, 2), (12, 2), (15, 2), (17, 5)), 22, 3, True)
_VERSION_3 = _Layout(((4, 4), (9, 2), (12, 2), (15, 2), (18, 2), (21, 2)), 23, 4, False)


def parse(data: bytes, name: str) -> Reading:
    """The ephemerides of one navigation file.

    data  the decompressed file; name  what problems call it
    Header facts: version, leap_seconds, counts of skipped systems.
    Raises FormatError when the file is no navigation file or has no end of header.
    """
    lines = data.splitlines()
    version, kind, end, ionosphere, leap_seconds = _header(lines, name)
    layout = _VERSION_2 if version < 3 else _VERSION_3
    problems = Problems(name)
    starts, messages, extra_ionosphere = _records(lines, end, version, kind, problems)
    ionosphere = {**extra_ionosphere, **ionosphere}
    skipped: dict[str, int] = {}
    parts = []
    kinds = sorted({(system, message) for _, _, system, message in messages})
    for system, message in kinds:
        chosen = [k for k, entry in enumerate(messages) if entry[2:] == (system, message)]
        if not _is_read(system, message):
            skipped[f"{system} {message}" if system in _KEPLERIAN + "R" else system] = len(chosen)
            continue
        first = np.array([starts[k] for k in chosen])
        satellites = np.array([messages[k][1] for k in chosen])
        rows = _LINES["FDMA"] if system == "R" else _LINES.get(message, _LINES_OTHERWISE)
        text = b"".join(line[:_WIDTH].ljust(_WIDTH) for start in first for line in lines[start : start + rows])
        chars = np.frombuffer(text, dtype=np.uint8).reshape(len(first), rows, _WIDTH)
        part = _convert(chars, first, satellites, system, message, layout, problems)
        if part is not None:
            parts.append(part)
    table = _join(parts, ionosphere)
    header = {"version": version, "leap_seconds": leap_seconds, "skipped_records": skipped}
    problems.sort(key=lambda problem: problem.line)
    return Reading(table, problems.all(), header)


def _is_read(system: str, message: str) -> bool:
    return system in _MESSAGES and (not message or message in _MESSAGES[system])


def _header(lines: list[bytes], name: str) -> tuple[float, str, int, dict[str, tuple[float, ...]], int | None]:
    """Version, system letter of a RINEX 2 file, line behind the header, ionospheric coefficients, leap seconds."""
    if not lines or b"RINEX VERSION" not in lines[0][60:80]:
        raise FormatError(
            f"{name}: line 1 lacks RINEX VERSION / TYPE in columns 61-80; a RINEX navigation file must begin with it",
            path=name, line=1,
        )  # fmt: skip
    first = lines[0].decode("latin-1").ljust(_WIDTH)
    try:
        version = float(first[:9])
    except ValueError:
        raise FormatError(f"{name}: version {first[:9].strip()!r} is no number", path=name, line=1) from None
    kind = first[20]
    if version < 3 and kind in _TYPE_OF_VERSION_2:
        system = _TYPE_OF_VERSION_2[kind]
    elif version >= 3 and kind == "N":
        system = ""
    else:
        raise FormatError(
            f"{name}: file type {kind!r} of RINEX {version:g} is no navigation data; give observation files as such",
            path=name, line=1,
        )  # fmt: skip
    if not 2 <= version < 5:
        raise FormatError(f"{name}: RINEX {version:g} is not known here; versions 2 to 4 are", path=name, line=1)
    ionosphere: dict[str, tuple[float, ...]] = {}
    leap_seconds: int | None = None
    for number, line in enumerate(lines[:5000]):
        label = line[60:80].strip()
        if label == b"END OF HEADER":
            return version, system, number + 1, ionosphere, leap_seconds
        text = line.decode("latin-1")
        if label in (b"ION ALPHA", b"ION BETA"):
            values = _coefficients(text[2:50], 12)
            ionosphere.setdefault("GPSA" if label == b"ION ALPHA" else "GPSB", values)
        elif label == b"IONOSPHERIC CORR":
            key = text[:4].strip()
            values = _coefficients(text[5:53], 12)
            ionosphere.setdefault(key, values[:3] if key == "GAL" else values)
        elif label == b"LEAP SECONDS":
            digits = line[:6].strip()
            leap_seconds = int(digits) if digits.isdigit() else None
    raise FormatError(f"{name}: no END OF HEADER; the file is cut or is no RINEX file", path=name, line=len(lines))


def _coefficients(text: str, width: int) -> tuple[float, ...]:
    """Numbers of fixed width; blanks and broken ones are 0."""
    values = []
    for start in range(0, len(text.rstrip()), width):
        try:
            values.append(float(text[start : start + width].replace("D", "E").replace("d", "e")))
        except ValueError:
            values.append(0.0)
    return tuple((values + [0.0] * 4)[:4])


def _records(
    lines: list[bytes], end: int, version: float, file_system: str, problems: Problems
) -> tuple[list[int], list[tuple[int, str, str, str]], dict[str, tuple[float, ...]]]:
    """First lines of the ephemeris records, with (lines in the record, satellite, system, message); checks lengths."""
    found: list[tuple[int, str, str, str]] = []  # line, satellite, system, message
    ionosphere: dict[str, tuple[float, ...]] = {}
    told: set[tuple[str, str]] = set()  # ionospheric coefficients met, by system and message
    borders: list[int] = []
    if version < 4:
        for number in range(end, len(lines)):
            head = lines[number][:3]
            if head[:2].strip() and not lines[number][60:80].startswith(b"COMMENT"):
                borders.append(number)
                satellite = _satellite(head, file_system)
                if satellite is None:
                    what = f"no satellite in {head.decode('latin-1')!r}"
                    problems.note(number + 1, what, kind="lines of no satellite")
                else:
                    found.append((number, satellite, satellite[0], ""))
    else:
        for number in range(end, len(lines)):
            if lines[number][:1] != b">":
                continue
            borders.append(number)
            words = lines[number].decode("latin-1").split()
            if len(words) < 4 or words[1] not in ("EPH", "STO", "EOP", "ION"):
                if len(words) < 2 or words[1] not in ("EPH", "STO", "EOP", "ION"):
                    problems.note(number + 1, "record heading is not > EPH, STO, EOP or ION")
                continue
            satellite = _satellite(words[2].encode("latin-1", "replace")[:3].ljust(3), "")
            if words[1] == "ION":
                if (words[2][:1], words[3]) in told:
                    continue
                told.add((words[2][:1], words[3]))
                _ion_record(lines, number, words[2][:1], words[3], ionosphere)
            elif words[1] == "EPH":
                if satellite is None:
                    problems.note(number + 1, f"no satellite in {words[2]!r}", kind="headings of no satellite")
                else:
                    found.append((number + 1, satellite, satellite[0], words[3]))
    borders.append(len(lines))
    ends = np.searchsorted(np.array(borders), [entry[0] for entry in found], side="right")
    starts: list[int] = []
    records: list[tuple[int, str, str, str]] = []
    short = 0
    for (number, satellite, system, message), after in zip(found, ends.tolist(), strict=True):
        needed = _LINES["FDMA"] if system == "R" else _LINES.get(message, _LINES_OTHERWISE)
        length = borders[min(after, len(borders) - 1)] - number
        if not _is_read(system, message):
            needed = 0
        if length < needed:
            short += 1
            if short <= MOST_PROBLEMS:
                problems.note(number + 1, f"{satellite}: record has {length} lines, {needed} are needed", kind=_TOO_FEW)
            continue
        starts.append(number)
        records.append((length, satellite, system, message))
    if short > MOST_PROBLEMS:
        problems.more[_TOO_FEW] += short - MOST_PROBLEMS
    return starts, records, ionosphere


def _satellite(head: bytes, file_system: str) -> str | None:
    """Satellite name like G05 of the first three columns; None when there is none."""
    letter = head[:1].decode("latin-1")
    if letter in "GRECJSI" and letter.strip():
        system, digits = letter, head[1:3]
    elif file_system:
        system, digits = file_system, head[:2]
    else:
        return None
    digits = digits.strip()
    if not digits.isdigit() or int(digits) == 0:
        return None
    return f"{system}{int(digits):02d}"


def _ion_record(
    lines: list[bytes], number: int, system: str, message: str, ionosphere: dict[str, tuple[float, ...]]
) -> None:
    """Coefficients of a RINEX 4 ION record (tables A33 to A35); the first of each kind is kept."""
    texts = [line.decode("latin-1").ljust(_WIDTH) for line in lines[number + 1 : number + 4]]
    values: list[float] = []
    for row, text in enumerate(texts):
        if text.startswith(">"):
            break
        for start in range(23 if row == 0 else 4, _WIDTH, 19):
            try:
                values.append(float(text[start : start + 19].replace("D", "E").replace("d", "e")))
            except ValueError:
                values.append(0.0)
    values += [0.0] * 12
    if system == "E":
        ionosphere.setdefault("GAL", tuple(values[:3]))
    elif message in ("LNAV", "D1D2", "CNVX") and not (system == "C" and message == "CNVX"):
        prefix = {"G": "GPS", "C": "BDS", "J": "QZS", "I": "IRN"}.get(system)
        if prefix:
            ionosphere.setdefault(prefix + "A", tuple(values[:4]))
            ionosphere.setdefault(prefix + "B", tuple(values[4:8]))
    elif system == "C":
        ionosphere.setdefault("BDGIM", tuple(values[:9]))


def _numbers(chars: npt.NDArray[np.uint8], start: int, width: int, count: int) -> Floats:
    """Fixed-width numbers of each line, (lines, count); blanks, broken and absurdly large ones are NaN."""
    block = np.ascontiguousarray(chars[:, start : start + width * count]).reshape(len(chars), count, width)
    block = np.where((block == ord("D")) | (block == ord("d")), ord("E"), block).astype(np.uint8)
    usable = _ALLOWED[block].all(axis=2) & (block != ord(" ")).any(axis=2)
    words = block.view(f"S{width}")[:, :, 0]
    words = np.where(usable, words, b"nan")
    try:
        values = words.astype(np.float64)
    except ValueError:
        values = np.full(words.shape, np.nan)
        for place in np.ndindex(words.shape):
            try:
                values[place] = float(words[place])
            except ValueError:
                continue
    values[np.abs(values) > _LARGEST] = np.nan
    return values


def _epochs(chars: npt.NDArray[np.uint8], layout: _Layout) -> Times:
    """Epochs of first lines as they are written, in their own time scale; NaT where impossible."""
    parts = np.column_stack([_numbers(chars, start, width, 1)[:, 0] for start, width in layout.epoch])
    usable: Bools = np.asarray(np.isfinite(parts).all(axis=1))
    year, month, day, hour, minute, second = np.where(usable[:, None], parts, [2000.0, 1, 1, 0, 0, 0]).T
    if layout.two_digit_years:
        year = np.where(year < 80, year + 2000, np.where(year < 100, year + 1900, year))
    usable &= (year >= 1980) & (year < 2200) & (month >= 1) & (month <= 12) & (day >= 1) & (day <= 31)
    usable &= (hour >= 0) & (hour <= 24) & (minute >= 0) & (minute < 60) & (second >= 0) & (second <= 60)
    usable &= (year % 1 == 0) & (month % 1 == 0) & (day % 1 == 0) & (hour % 1 == 0) & (minute % 1 == 0)
    months = np.where(usable, (year - 1970) * 12 + month - 1, 0).astype(np.int64).astype("datetime64[M]")
    days = months.astype("datetime64[D]") + np.where(usable, day - 1, 0).astype(np.int64)
    usable &= days.astype("datetime64[M]") == months
    rest = np.where(usable, hour * 3600 + minute * 60 + second, 0.0)
    epochs = days.astype("datetime64[ns]") + np.rint(rest * 1e9).astype(np.int64).astype("timedelta64[ns]")
    epochs[~usable] = np.datetime64("NaT")
    return np.asarray(epochs)


def _near(epoch: Times, second: Floats, period_s: float) -> Times:
    """The instant with the given second of its week (or day) that is nearest to the epoch."""
    since = (epoch - np.datetime64("1980-01-06T00:00:00", "ns")).astype(np.int64) / 1e9
    difference = np.mod(second - since + period_s / 2, period_s) - period_s / 2
    return np.asarray(epoch + np.rint(difference * 1e9).astype(np.int64).astype("timedelta64[ns]"))


def _convert(
    chars: npt.NDArray[np.uint8], first: Ints, satellites: npt.NDArray[np.str_], system: str, message: str,
    layout: _Layout, problems: Problems,
) -> dict[str, Any] | None:  # fmt: skip
    """Columns of the records of one system and message; broken ones become problems.

    chars  (records, lines, columns); first  line numbers of the records, from 0
    """
    def drop(bad: npt.NDArray[np.bool_], what: str) -> None:
        for row, satellite in zip(first[bad], satellites[bad], strict=True):
            problems.note(int(row) + 1, f"{satellite}: {what}", kind=f"records with {what}")

    epoch = _epochs(chars[:, 0], layout)
    clock = _numbers(chars[:, 0], layout.clock, 19, 3)
    orbit = np.concatenate(
        [_numbers(chars[:, line], layout.orbit, 19, 4) for line in range(1, chars.shape[1])], axis=1
    )  # fmt: skip
    count = len(first)
    part: dict[str, Any] = {
        "kepler": np.full((count, 16), np.nan),
        "state": np.full((count, 9), np.nan),
        "channels": np.zeros(count, dtype=np.int64),
        "group_delays_s": np.full((count, 2), np.nan),
        "accuracy_m": np.full(count, np.nan),
        "rates": np.zeros((count, 2)),
    }
    good = ~np.isnat(epoch)
    drop(~good, "impossible epoch")
    epoch = np.where(good, epoch, np.datetime64("2000-01-01", "ns"))
    if system == "R":
        complete = np.isfinite(orbit[:, [0, 1, 2, 4, 5, 6, 8, 9, 10]]).all(axis=1)
        drop(good & ~complete, "position, velocity or acceleration missing or no number")
        good &= complete
        part["state"] = orbit[:, [0, 4, 8, 1, 5, 9, 2, 6, 10]] * 1000.0
        radius = np.sqrt((part["state"][:, :3] ** 2).sum(axis=1))
        speed = np.sqrt((part["state"][:, 3:6] ** 2).sum(axis=1))
        sane = (radius > 2.0e7) & (radius < 3.1e7) & (speed < 6000.0)
        drop(good & ~sane, "position or velocity is not that of a GLONASS orbit")
        good &= sane
        part["toe"] = utc_to_gps(epoch)
        part["sent"] = utc_to_gps(_near(epoch, np.where(np.isfinite(clock[:, 2]), clock[:, 2], 0.0), _DAY_S))
        part["sent"] = np.where(np.isfinite(clock[:, 2]), part["sent"], part["toe"])
        part["healthy"] = orbit[:, 3] == 0
        channel = orbit[:, 7]
        # Two ways of writing negative channels are met: -7 to -1, and 249 to 255 or 25 to 31 from receivers' raw bits.
        channel = np.where(channel > 128, channel - 256, np.where(channel > 24, channel - 32, channel))
        known = np.isfinite(channel) & (channel >= -7) & (channel <= 13) & (channel % 1 == 0)
        drop(good & ~known, "no usable channel number")
        good &= known
        part["channels"] = np.where(known, channel, 0).astype(np.int64)
        names = np.full(count, "FDMA")
    else:
        columns = [_KEPLER_AT[column] for column in Ephemerides.KEPLER]
        kepler = orbit[:, columns]
        modern = message in ("CNAV", "CNV1", "CNV2", "CNV3")
        behind_s = float(BDT_BEHIND_GPS_S) if system == "C" else 0.0
        if modern and system in "GJ":
            # These give the propagation time in the place of the orbit's reference time, which is the record's epoch.
            kepler[:, -1] = np.mod((epoch - np.datetime64("1980-01-06", "ns")).astype(np.int64) / 1e9, _WEEK_S)
        complete = np.isfinite(kepler).all(axis=1)
        drop(good & ~complete, "orbit value missing or no number")
        good &= complete
        sane = (kepler[:, 0] > 3500) & (kepler[:, 0] < 9000) & (kepler[:, 1] >= 0) & (kepler[:, 1] < 0.5)
        sane &= (np.abs(kepler[:, -1]) <= _WEEK_S) & (np.abs(kepler[:, 2]) < 4) & (np.abs(kepler[:, 8]) < 1e-6)
        drop(good & ~sane, "orbit values outside of what a navigation satellite can have")
        good &= sane
        kepler = np.where(good[:, None], kepler, 0.0)
        toe = _near(epoch, kepler[:, -1], _WEEK_S)  # week numbers are not needed, so 10-bit ones cannot mislead
        near = np.abs((toe - epoch).astype(np.int64)) <= 86_400 * 10**9
        drop(good & ~near, "reference time of the orbit is more than a day from the record's epoch")
        good &= near
        layout_name = message if modern else system
        if message == "CNV2" and system in "GJ":
            layout_name = "CNV2 of GPS"
        health, accuracy, delay1, delay2, sent = _MORE_AT[layout_name]
        shift = np.timedelta64(int(behind_s * 1e9), "ns")
        part["kepler"] = kepler
        part["toe"] = toe + shift
        sent_s = orbit[:, sent]
        told = np.isfinite(sent_s) & (np.abs(sent_s) <= _WEEK_S)
        when = _near(epoch, np.where(told, sent_s, 0.0), _WEEK_S)
        told &= np.abs((when - epoch).astype(np.int64)) <= 86_400 * 10**9
        part["sent"] = np.where(told, when, epoch) + shift
        part["healthy"] = orbit[:, health] == 0
        if accuracy >= 0:
            part["accuracy_m"] = np.where(orbit[:, accuracy] >= 0, orbit[:, accuracy], np.nan)
        for place, column in enumerate((delay1, delay2)):
            if column >= 0:
                delay = orbit[:, column]
                part["group_delays_s"][:, place] = np.where(np.abs(delay) < 1e-6, delay, np.nan)
        if modern:
            part["rates"] = np.nan_to_num(orbit[:, [0, 17]])
        names = _message_names(system, message, satellites, orbit[:, 17])
    part["messages"] = names
    part["satellites"] = satellites
    if not good.any():
        return None
    return {key: values[good] for key, values in part.items()}


def _message_names(system: str, message: str, satellites: npt.NDArray[np.str_], source: Floats) -> npt.NDArray[Any]:
    """Names of the messages; before RINEX 4 they follow from the constellation and, for Galileo, the data sources."""
    if message:
        return np.full(len(satellites), message)
    if system == "E":
        bits = np.where(np.isfinite(source), source, 1).astype(np.int64)
        return np.where(bits & 2, "FNAV", "INAV")
    if system == "C":
        return np.where(np.isin(satellites, list(_GEOSTATIONARY_BEIDOU)), "D2", "D1")
    return np.full(len(satellites), "LNAV")


def _join(parts: list[dict[str, Any]], ionosphere: dict[str, tuple[float, ...]]) -> Ephemerides:
    """One table of all parts, sorted by satellite, reference time and transmission time."""
    if not parts:
        none = np.empty(0)
        times = np.empty(0, dtype="datetime64[ns]")
        return Ephemerides(
            satellites=np.empty(0, dtype="U3"), messages=np.empty(0, dtype="U4"), toe=times, sent=times,
            healthy=np.empty(0, dtype=bool), accuracy_m=none, kepler=np.empty((0, 16)), state=np.empty((0, 9)),
            channels=np.empty(0, dtype=np.int64), group_delays_s=np.empty((0, 2)), ionosphere=ionosphere,
            rates=np.empty((0, 2)),
        )  # fmt: skip
    joined = {key: np.concatenate([part[key] for part in parts]) for key in parts[0]}
    order = np.lexsort((joined["messages"], joined["sent"], joined["toe"], joined["satellites"]))
    return Ephemerides(**{key: values[order] for key, values in joined.items()}, ionosphere=ionosphere)
