"""RINEX observation files: versions 2.10 to 2.12, 3.00 to 3.05, 4.00 to 4.02, text to `Signals`.

The lines of the whole file are found at once, the epochs are walked, and then every column of every constellation is
read in one sweep over all its satellites and epochs.  Never opens a file, never decompresses, never repairs a value: an
observation that is no number is left out and reported with its line.
"""

from collections.abc import Collection, Mapping
from dataclasses import dataclass

import numpy as np

from skylag import timescales
from skylag.errors import FormatError
from skylag.formats import fixed_columns, rinex_header
from skylag.formats.joining import kept_when_thinned
from skylag.formats.rinex_header import CARRIED, SYSTEMS, Header
from skylag.formats.rinex_layout import (
    LONGEST_HEADER,
    MOST_PROBLEMS,
    Layout,
    Problems,
    Text,
    layout_2,
    layout_3,
    lines_of,
    looks_like_epoch_2,
)
from skylag.tables import Bools, Bytes, Floats, Ints, Reading, Receiver, Signals, Times

_SPARSEST = 40  # the dense arrays may take this many bytes per byte of text ...
_SMALL = 256 * 2**20  # ... once they are larger than this
_FIELDS_AT_ONCE = 30_000  # fields turned into numbers at once; the arrays in between then stay in the cache


def parse(
    data: bytes,
    name: str,
    *,
    wanted: Mapping[str, Collection[str]] | None = None,
    thin_to_s: float | None = None,
) -> Reading:
    """The observations of one receiver's file.

    data       the decompressed text
    name       the file's name, for messages and for a marker name where the header has none
    wanted     system letter -> code observables to keep, with phases and strengths of the same bands; where bands of
               strength are named too (S1), only strengths of those; None keeps all
    thin_to_s  keep epochs on multiples of so many seconds only; lost locks and power failures in between are kept
    Raises FormatError when there is no header, no list of observation types, or no epoch that can be read.
    """
    problems = Problems(name)
    if not data[:1000].strip() and not data.strip():
        raise FormatError(f"{name}: the file is empty; an observation file has a header and epochs", path=name, line=0)
    if b"\r" in data:
        data = data.replace(b"\r\n", b"\n").replace(b"\r", b"\n")
    text = lines_of(data, name)
    header, body = _top(text, name, problems)
    if header.version >= 3:
        layout = layout_3(text, body, header, problems)
    else:
        layout = layout_2(text, body, header, problems)
    times = _times(text, layout, header, name, problems)
    return _assemble(text, layout, times, header, name, wanted, thin_to_s, problems)


def _top(text: Text, name: str, problems: Problems) -> tuple[Header, int]:
    """The header at the top of the file, and the number of the first line behind it."""
    lines: list[tuple[int, str]] = []
    for number in range(min(len(text.begin), LONGEST_HEADER)):
        line = text.line(number)
        label = rinex_header.label_of(line)
        if label == "END OF HEADER":
            body = number + 1
            break
        if lines and not label and (line.startswith("> ") or looks_like_epoch_2(line)):
            problems.note(number + 1, "the header has no END OF HEADER", "took the first epoch as its end")
            body = number
            break
        lines.append((number + 1, line))
    else:
        raise FormatError(
            f"{name}: no END OF HEADER within {len(lines)} lines; the file is cut short or no RINEX file",
            path=name, line=len(lines),
        )  # fmt: skip
    header = Header()
    for problem in rinex_header.absorb(header, lines, name):
        problems.note(problem.line, problem.what)
    if not 2 <= header.version < 5:
        raise FormatError(
            f"{name}: RINEX version {header.version:g} cannot be read; versions 2.10 to 4.02 can", path=name, line=1
        )
    if not any(header.types.values()):
        raise FormatError(
            f"{name}: the header lists no observation types; without them the columns have no meaning",
            path=name, line=body,
        )  # fmt: skip
    return header, body


# ------------------------------------------------------------------------------------------------ times


def _times(text: Text, layout: Layout, header: Header, name: str, problems: Problems) -> Times:
    """GPS time of each epoch, NaT where the line does not tell a time."""
    line = layout.epoch_line
    begin, end = text.begin[line], text.end[line]
    if header.version >= 3:
        columns = ((2, 4), (7, 2), (10, 2), (13, 2), (16, 2), (18, 3))
        decimals = 22
    else:
        columns = ((1, 2), (4, 2), (7, 2), (10, 2), (13, 2), (15, 3))
        decimals = 19
    good = np.ones(len(line), dtype=bool)
    parts = []
    for column, width in columns:
        value, fine = fixed_columns.whole(text.data, begin + column, width, end)
        good &= fine
        parts.append(value)
    year, month, day, hour, minute, second = parts
    if header.version < 3:
        year = year + np.where(year < 80, 2000, 1900)  # RINEX 2.11, 6.5
    nanoseconds = np.zeros(len(line), dtype=np.int64)
    dot = text.at(line, decimals - 1) == ord(".")
    for k in range(7):
        figure = text.at(line, decimals + k).astype(np.int64) - 0x30
        fine = (figure >= 0) & (figure <= 9)
        good &= fine | (figure == -0x10)
        nanoseconds += np.where(fine, figure, 0) * 10 ** (8 - k)
    good &= dot & (year >= 1980) & (year < 2100) & (month >= 1) & (month <= 12) & (day >= 1) & (hour <= 24)
    good &= (minute <= 59) & (second <= 60)
    months = np.where(good, (year - 1970) * 12 + month - 1, 0).astype("datetime64[M]")
    good &= day <= ((months + 1).astype("datetime64[D]") - months.astype("datetime64[D]")).astype(np.int64)
    days = months.astype("datetime64[D]") + np.where(good, day - 1, 0).astype("timedelta64[D]")
    seconds = np.where(good, hour * 3600 + minute * 60 + second, 0)
    times = days.astype("datetime64[ns]") + (seconds * 10**9 + nanoseconds).astype("timedelta64[ns]")
    for k in np.flatnonzero(~good)[: 2 * MOST_PROBLEMS]:
        problems.note(
            int(line[k]) + 1, f"no time can be read from the epoch line {text.line(int(line[k]))[:32].strip()!r}",
            "left the epoch out", kind="epoch lines without a time",
        )  # fmt: skip
    scale = header.time_scale
    if scale in ("GLO", "UTC"):
        times = timescales.utc_to_gps(times)
    elif scale == "BDT":
        times = times + np.timedelta64(timescales.BDT_BEHIND_GPS_S, "s")
    return np.where(good, times, np.datetime64("NaT", "ns"))


# ------------------------------------------------------------------------------------------------ values


@dataclass
class _Rows:
    """Satellite records with their place in the dense arrays."""

    flat: Ints  # epoch * satellites + satellite
    line: Ints
    system: Ints
    state: Ints
    satellite: Ints
    valued: Bools  # False: of an epoch thinned away, only its lost locks count


def _assemble(
    text: Text,
    layout: Layout,
    times: Times,
    header: Header,
    name: str,
    wanted: Mapping[str, Collection[str]] | None,
    thin_to_s: float | None,
    problems: Problems,
) -> Reading:
    readable = ~np.isnat(times)
    if not readable.any():
        raise FormatError(
            f"{name}: not one epoch can be read; an observation file has epochs behind its header",
            path=name, line=len(text.begin),
        )  # fmt: skip
    all_times = np.unique(times[readable])
    place = np.searchsorted(all_times, times)  # of each epoch record among the times
    _report_order(layout, times, readable, problems)
    interval_s = _interval(all_times, header)
    resets = np.zeros(len(all_times), dtype=bool)
    resets[place[readable & (layout.epoch_flag == 1)]] = True
    kept = np.arange(len(all_times)) if thin_to_s is None else kept_when_thinned(all_times, thin_to_s)
    into = np.searchsorted(kept, np.arange(len(all_times)))  # the kept epoch at or behind each time
    exact = np.zeros(len(all_times), dtype=bool)
    exact[kept] = True

    system = layout.row_satellite // 100
    letters_met, counts = np.unique(system, return_counts=True)
    skipped = {chr(k): int(n) for k, n in zip(letters_met, counts, strict=True) if chr(k) not in CARRIED}
    letters = [s for s in CARRIED if wanted is None or s in wanted]
    keep = readable[layout.row_epoch] & np.isin(system, [ord(s) for s in letters])
    epoch = place[layout.row_epoch]
    keep &= into[np.minimum(epoch, len(into) - 1)] < len(kept)
    rows = np.flatnonzero(keep)
    epoch = epoch[rows]
    identities = np.unique(layout.row_satellite[rows])
    names = np.array([f"{chr(i // 100)}{i % 100:02d}" for i in identities], dtype="<U3")
    column = np.searchsorted(identities, layout.row_satellite[rows])
    # A satellite twice at one time: the first stays.
    once = _first_of_each(epoch * max(len(identities), 1) + column)
    if len(once) < len(rows):
        twice = np.setdiff1d(np.arange(len(rows)), once, assume_unique=True)
        for line in np.unique(layout.epoch_line[layout.row_epoch[rows[twice]]])[: 2 * MOST_PROBLEMS]:
            problems.note(int(line) + 1, "the epoch, or a satellite in it, is written twice", "kept the first",
                          kind="epochs written twice")  # fmt: skip
        rows, epoch, column = rows[once], epoch[once], column[once]
    table = _Rows(
        flat=into[epoch] * len(identities) + column,
        line=layout.row_line[rows],
        system=system[rows],
        state=layout.epoch_state[layout.row_epoch[rows]],
        satellite=layout.row_satellite[rows],
        valued=exact[epoch],
    )
    shape = (len(kept), len(identities))
    values, lock = _columns(text, layout.states, table, shape, wanted, problems, name)
    told = [state.position_m for state in layout.states if state.position_m is not None]
    removed = {letter: who for state in layout.states for letter, who in state.biases_removed.items()}
    kept_resets = np.zeros(len(kept), dtype=bool)
    kept_resets[into[np.flatnonzero(resets & (into < len(kept)))]] = True
    receiver = Receiver(
        name=header.marker or _marker_from(name),
        position_m=header.position_m or (told[0] if told else (np.nan, np.nan, np.nan)),
        antenna=header.antenna,
        type=header.receiver_type,
    )
    if not header.marker:
        problems.note(0, "the header has no marker name", f"named {receiver.name} after the file")
    if np.isnan(receiver.position_m[0]):
        problems.note(0, "the header has no approximate position", "left it open")
    for letter, who in removed.items():
        problems.note(0, f"code biases of {letter or 'all'} were already removed: {who}", "kept the values as they are")
    signals = Signals(
        receiver=receiver,
        times=all_times[kept],
        satellites=names,
        values=values,
        lock=lock,
        channels={s: c for state in layout.states for s, c in state.channels.items()},
        resets=kept_resets,
        interval_s=max(interval_s, float(thin_to_s)) if thin_to_s else interval_s,
    )
    facts = {
        "kind": "observations",
        "version": header.version,
        "time_system": header.time_scale,
        "marker_number": header.marker_number,
        "stated_interval_s": header.interval_s,
        "declared": {s: header.names(s) for s in CARRIED if any(header.names(s))},
        "skipped_systems": skipped,
        "biases_removed": removed,
        "clock_applied": header.clock_applied,
    }
    return Reading(signals, problems.all(), facts)


def _first_of_each(keys: Ints) -> Ints:
    """The row numbers, ascending, where each key stands for the first time."""
    if len(keys) < 2 or bool(np.all(np.diff(keys) > 0)):
        return np.arange(len(keys))
    return np.sort(np.unique(keys, return_index=True)[1])


def _report_order(layout: Layout, times: Times, readable: Bools, problems: Problems) -> None:
    """Epochs that stand before an earlier one in the file."""
    line = layout.epoch_line[readable]
    latest = np.maximum.accumulate(times[readable].astype(np.int64))
    for k in np.flatnonzero(times[readable][1:].astype(np.int64) < latest[:-1])[: 2 * MOST_PROBLEMS]:
        problems.note(int(line[k + 1]) + 1, "the epoch is earlier than the one before it", "sorted",
                      kind="epochs earlier than the one before")  # fmt: skip


def _interval(times: Times, header: Header) -> float:
    """The usual spacing of epochs in seconds: the median one; what the header states where there are fewer than two."""
    if len(times) < 2:
        return header.interval_s or 30.0
    median = float(np.median(np.diff(times).astype(np.int64))) / 1e9
    return round(median, 3) or median


def _marker_from(name: str) -> str:
    """A marker from a file name of either convention: nine characters of long names, four of short ones."""
    stem = name.replace("\\", "/").rsplit("/", 1)[-1]
    first = stem.split("_")[0]
    return first.upper() if len(first) == 9 else stem[:4].upper()


class _Dense:
    """The arrays of all codes in one block, of which only the parts that are used take memory."""

    def __init__(self, shape: tuple[int, int], codes: list[str], text_bytes: int, name: str) -> None:
        self.values: dict[str, Floats] = {}
        self.lock: dict[str, Bytes] = {}
        self._shape, self._codes = shape, codes
        if shape[0] * shape[1] * len(codes) * 9 > max(_SMALL, _SPARSEST * text_bytes):
            raise FormatError(
                f"{name}: {shape[0]} epochs of {shape[1]} satellites and {len(codes)} signals, nearly all empty; no "
                "receiver writes such a file; split it by hours if it is real",
                path=name, line=0,
            )  # fmt: skip
        # One large block comes in large pages: a third of the time of one array per code.
        self._block = np.empty((len(codes), *shape))

    def of(self, code: str) -> tuple[Floats, Bytes | None]:
        """Flat arrays of a code, made when first asked for."""
        if code not in self.values:
            self.values[code] = self._block[self._codes.index(code)]
            self.values[code].fill(np.nan)
            if code[0] == "L":
                self.lock[code] = np.zeros(self._shape, dtype=np.uint8)
        lock = self.lock.get(code)
        return self.values[code].reshape(-1), None if lock is None else lock.reshape(-1)


def _columns(
    text: Text,
    states: list[Header],
    rows: _Rows,
    shape: tuple[int, int],
    wanted: Mapping[str, Collection[str]] | None,
    problems: Problems,
    name: str,
) -> tuple[dict[str, Floats], dict[str, Bytes]]:
    """Every wanted column of every constellation, dense."""
    jobs: list[tuple[Header, str, Ints, list[int]]] = []  # state, system, rows, columns
    for state_number, state in enumerate(states):
        own = np.flatnonzero(rows.state == state_number) if len(states) > 1 else np.arange(len(rows.state))
        for letter in CARRIED:
            chosen = own[rows.system[own] == ord(letter)]
            codes = state.names(letter)
            if len(chosen) and not codes:
                problems.note(
                    int(rows.line[chosen[0]]) + 1, f"satellites of {letter}, but the header lists no types of {letter}"
                )
            columns = [k for k, code in enumerate(codes) if _is_wanted(letter, code, wanted)]
            if not len(chosen) or not columns:
                continue
            jobs.append((state, letter, chosen[rows.valued[chosen]], columns))
            if not rows.valued[chosen].all():  # of epochs thinned away only lost locks are wanted
                phases = [k for k in columns if codes[k][0] == "L"]
                jobs.append((state, letter, chosen[~rows.valued[chosen]], phases))
    every = sorted({state.names(letter)[k] for state, letter, _, columns in jobs for k in columns})
    dense = _Dense(shape, every, len(text.raw), name)
    for state, letter, chosen, columns in jobs:
        if columns:
            _sweep(text, state, letter, rows, chosen, columns, dense, problems)
    return dense.values, dense.lock


def _sweep(
    text: Text,
    state: Header,
    letter: str,
    rows: _Rows,
    chosen: Ints,
    columns: list[int],
    dense: _Dense,
    problems: Problems,
) -> None:
    """Some columns of one constellation's records into the dense arrays, a block of records at a time."""
    codes = state.names(letter)
    number = np.array(columns)
    if state.version >= 3:
        further, offset = np.zeros(len(number), dtype=np.int64), 3 + fixed_columns.FIELD * number
        divide = [state.scale.get((letter, state.types[letter][k]), state.scale.get((letter, "all"), 1.0))
                  for k in columns]  # fmt: skip
    else:
        further, offset = number // 5, fixed_columns.FIELD * (number % 5)
        divide = [1.0] * len(columns)
    block = max(_FIELDS_AT_ONCE // len(columns), 1)
    for first in range(0, len(chosen), block):
        pick = chosen[first : first + block]
        at, room, line = _fields(text, rows.line[pick], further, offset)
        values, digits, odd = fixed_columns.observations(text.data, at.reshape(-1), room.reshape(-1))
        listed = odd[: max(MOST_PROBLEMS - len(problems), 0)]
        if len(listed) < len(odd):
            problems.more["values that are no numbers"] += len(odd) - len(listed)
        for k in listed:
            row, j = divmod(int(k), len(columns))
            where = int(at[row, j])
            said = text.raw[where : where + min(fixed_columns.FIELD, int(room[row, j]))].decode("latin-1")
            problems.note(int(line[row] + further[j]) + 1, f"{codes[columns[j]]} is no number: {said!r}")
        into, valued = rows.flat[pick], rows.valued[pick[0]]
        found, marks = values.reshape(at.shape), digits.reshape(at.shape)
        for j, k in enumerate(columns):
            code = codes[k]
            target, lock = dense.of(code)
            column = found[:, j] / divide[j] if divide[j] != 1.0 else found[:, j]
            if lock is not None:
                if valued:
                    lock[into] |= marks[:, j]
                else:
                    lock[into[(marks[:, j] & 1) > 0]] |= np.uint8(1)
                if state.squared and state.version < 3:
                    column = _without_squared(state, code, rows.satellite[pick], column)
            if not valued:
                continue
            if code in codes[:k]:  # two columns of one meaning: the second fills what the first left
                column = np.where(np.isnan(target[into]), column, target[into])
            target[into] = column


def _fields(text: Text, line: Ints, further: Ints, offset: Ints) -> tuple[Ints, Ints, Ints]:
    """Where the fields of records begin and how much of their line is left there (records, columns), and the lines.

    further, offset   (columns,) lines below the record's first, and characters from the line's beginning
    """
    if not further.any():
        begin = text.begin[line]
        return begin[:, None] + offset, (text.end[line] - begin)[:, None] - offset, line
    where = line[:, None] + further
    inside = where < len(text.begin)
    where = np.where(inside, where, 0)
    at = text.begin[where] + offset
    return at, np.where(inside, text.end[where] - at, 0), line


def _is_wanted(letter: str, code: str, wanted: Mapping[str, Collection[str]] | None) -> bool:
    if len(code) != 3 or code[0] not in "CLS":
        return False
    if wanted is None:
        return True
    codes = wanted.get(letter, ())
    if code[0] == "C":
        return code in codes
    if code[0] == "S" and any(kept[0] == "S" for kept in codes):
        return code[:2] in codes
    return any(code[1] == kept[1] for kept in codes if kept[0] == "C")


def _without_squared(state: Header, code: str, satellite: Ints, values: Floats) -> Floats:
    """Phases of squaring receivers come in half wavelengths and are not used."""
    who = state.squared.get(code[1], set())
    numbers = [ord(s[0]) * 100 + int(s[1:]) for s in who if s[1:].isdigit() and s[0] in SYSTEMS]
    return np.where(("" in who) | np.isin(satellite, numbers), np.nan, values)
