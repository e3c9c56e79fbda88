"""RINEX observation files: versions 2.10 to 2.12, 3.00 to 3.05, 4.00 to 4.02, text to `Signals`.

The lines of the whole file are found at once, the epochs are walked, and then every column of every constellation is
read in one sweep over all its satellites and epochs.  Never opens a file, never decompresses, never repairs a value: an
observation that is no number is left out and reported with its line.
"""

from collections import Counter
from collections.abc import Collection, Mapping
from dataclasses import dataclass, field

import numpy as np

from skylag import timescales
from skylag.errors import FormatError
from skylag.formats import fixed_columns, rinex_header
from skylag.formats.joining import kept_when_thinned
from skylag.formats.rinex_header import CARRIED, SYSTEMS, Header
from skylag.tables import Bools, Bytes, Floats, Ints, Problem, Reading, Receiver, Signals, Times

_MOST_PROBLEMS = 200  # listed one by one; the rest is counted
_LONGEST_HEADER = 20_000  # lines
_SPARSEST = 40  # the dense arrays may take this many bytes per byte of text ...
_SMALL = 256 * 2**20  # ... once they are larger than this
_BLOCK = 2**20  # bytes of text looked through at once for line ends
_FIELDS_AT_ONCE = 30_000  # fields turned into numbers at once; the arrays in between then stay in the cache

_SYSTEM_NUMBER = np.full(256, -1, dtype=np.int64)
for _letter in SYSTEMS:
    _SYSTEM_NUMBER[ord(_letter)] = ord(_letter)


class _Problems(list[Problem]):
    """The problems met, up to a number; what comes after is counted by kind."""

    def __init__(self, path: str) -> None:
        super().__init__()
        self.path = path
        self.more: Counter[str] = Counter()

    def note(self, line: int, what: str, done: str = "skipped", kind: str = "") -> None:
        """One problem at a line, numbered from 1; `kind` is what it is counted as when the list is full."""
        if len(self) < _MOST_PROBLEMS:
            self.append(Problem(self.path, line, what, done))
        else:
            self.more[kind or what] += 1

    def all(self) -> tuple[Problem, ...]:
        """Everything, with the uncounted kinds as one line each."""
        rest = [Problem(self.path, 0, f"{count} more: {kind}") for kind, count in self.more.most_common(20)]
        return (*self, *rest)


@dataclass
class _Text:
    """The text and where its lines begin and end."""

    data: Bytes
    begin: Ints
    end: Ints
    raw: bytes

    def line(self, number: int) -> str:
        """Line by its number from 0."""
        return self.raw[self.begin[number] : self.end[number]].decode("latin-1")

    def at(self, lines: Ints, column: int) -> Bytes:
        """The byte in that column of each line, a blank where the line is shorter."""
        where = self.begin[lines] + column
        inside = where < self.end[lines]
        return np.where(inside, self.data[np.where(inside, where, 0)], np.uint8(0x20))


@dataclass
class _Layout:
    """Where things are: epochs in file order and satellite records in file order."""

    states: list[Header]
    epoch_line: Ints
    epoch_state: Ints
    epoch_flag: Ints
    row_epoch: Ints
    row_satellite: Ints  # letter * 100 + number
    row_line: Ints  # the line where the first column is
    resets_before: list[int] = field(default_factory=list)  # epoch numbers before which the receiver lost power


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
    wanted     system letter -> code observables to keep, with phases and strengths of the same bands; None keeps all
    thin_to_s  keep epochs on multiples of so many seconds only; lost locks and power failures in between are kept
    Raises FormatError when there is no header, no list of observation types, or no epoch that can be read.
    """
    problems = _Problems(name)
    if not data[:1000].strip() and not data.strip():
        raise FormatError(f"{name}: the file is empty; an observation file has a header and epochs", path=name, line=0)
    if b"\r" in data:
        data = data.replace(b"\r\n", b"\n").replace(b"\r", b"\n")
    text = _lines(data)
    header, body = _top(text, name, problems)
    if header.version >= 3:
        layout = _layout_3(text, body, header, problems)
    else:
        layout = _layout_2(text, body, header, problems)
    times = _times(text, layout, header, name, problems)
    return _assemble(text, layout, times, header, name, wanted, thin_to_s, problems)


def _lines(data: bytes) -> _Text:
    text = np.frombuffer(data, dtype=np.uint8)
    # In blocks that stay in the cache: a third of the time of one sweep, and no array as large as the text.
    breaks = np.concatenate(
        [np.flatnonzero(text[first : first + _BLOCK] == 10) + first for first in range(0, len(text), _BLOCK)]
    )
    begin = np.concatenate(([0], breaks + 1))
    end = np.concatenate((breaks, [len(data)]))
    if begin[-1] == len(data):
        begin, end = begin[:-1], end[:-1]
    return _Text(text, begin, end, data)


def _top(text: _Text, name: str, problems: _Problems) -> tuple[Header, int]:
    """The header at the top of the file, and the number of the first line behind it."""
    lines: list[tuple[int, str]] = []
    for number in range(min(len(text.begin), _LONGEST_HEADER)):
        line = text.line(number)
        label = rinex_header.label_of(line)
        if label == "END OF HEADER":
            body = number + 1
            break
        if lines and not label and (line.startswith("> ") or _looks_like_epoch_2(line)):
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


def _looks_like_epoch_2(line: str) -> bool:
    return (
        len(line) > 28
        and line[18] == "."
        and all(line[k] == " " for k in (0, 3, 6, 9, 12, 26, 27))
        and all(line[k].isdigit() for k in (2, 5, 8, 11, 14, 28))
    )


# ------------------------------------------------------------------------------------------------ header changes


class _Course:
    """The header states along the file, and what events say about the antenna."""

    def __init__(self, header: Header, text: _Text, problems: _Problems) -> None:
        self.states = [header]
        self.text, self.problems = text, problems
        self.moving = False
        self.ended = 0  # the line from which the file is about another site

    def change(self, first: int, last: int) -> None:
        """Header lines first to last (not inside) hold from here on."""
        state = self.states[-1].copy()
        lines = [(k + 1, self.text.line(k)) for k in range(first, min(last, first + _LONGEST_HEADER))]
        for problem in rinex_header.absorb(state, lines, self.problems.path):
            self.problems.note(problem.line, problem.what, kind="line without a header label behind an event")
        before = self.states[-1]
        if (state.version >= 3) != (before.version >= 3):
            self.problems.note(first + 1, "another major RINEX version in mid-file", "read on as before")
            state.version = before.version
        if not any(state.types.values()):
            state.types = dict(before.types)
        if state.marker.split() != before.marker.split() or _apart(state, before) > 100.0:
            self.ended = self.ended or first + 1
        if state != before:
            self.states.append(state)

    def event(self, line: int, flag: int, count: int) -> None:
        """An epoch of flag 2 to 5 with `count` special lines behind it (RINEX 3.05 table A3)."""
        if flag in (2, 3, 4):
            self.change(line + 1, line + 1 + count)
        if flag == 2:
            self.moving = True
            self.problems.note(line + 1, "the antenna starts to move", "skipped until it stands again")
        if flag == 3:
            self.moving = False

    def usable(self) -> bool:
        """Whether observations from here on belong to the site the file began with."""
        return not self.moving and not self.ended


def _apart(a: Header, b: Header) -> float:
    if a.position_m is None or b.position_m is None:
        return 0.0
    return float(np.linalg.norm(np.subtract(a.position_m, b.position_m)))


def _stray(text: _Text, number: int) -> bool:
    return text.end[number] - text.begin[number] > 60 and bool(rinex_header.label_of(text.line(number)))


# ------------------------------------------------------------------------------------------------ RINEX 3 and 4


def _layout_3(text: _Text, body: int, header: Header, problems: _Problems) -> _Layout:
    """Epoch lines begin with >, satellite records with a letter and two digits: all found at once."""
    lines = np.arange(body, len(text.begin))
    is_epoch = text.at(lines, 0) == ord(">")
    satellite = _satellites(text, lines, np.zeros(len(lines), dtype=np.int64))
    satellite[is_epoch] = -1
    # A comment may begin like a satellite record.
    for k in np.flatnonzero((satellite >= 0) & (text.at(lines, 60) == ord("C"))):
        if text.line(body + int(k))[60:80].rstrip() == "COMMENT":
            satellite[k] = -1
    epochs = np.flatnonzero(is_epoch)
    epoch_line = lines[epochs]
    flag, flag_good = fixed_columns.whole(text.data, text.begin[epoch_line] + 31, 1, text.end[epoch_line])
    count, count_good = fixed_columns.whole(text.data, text.begin[epoch_line] + 32, 3, text.end[epoch_line])
    # A long count may begin one column early in files of more than 999 lines; none is known to.
    flag = np.where(flag_good & (flag <= 6), flag, -1)
    for k in np.flatnonzero(flag < 0)[:_MOST_PROBLEMS]:
        problems.note(int(epoch_line[k]) + 1, f"the epoch flag {text.line(int(epoch_line[k]))[31:32]!r} is none of 0 to 6")
    behind = np.cumsum(is_epoch) - 1  # the epoch each line belongs to
    # Lines that are neither epochs nor satellite records, and events, change the course; there are few.
    course = _Course(header, text, problems)
    epoch_state = np.zeros(len(epochs), dtype=np.int64)
    usable = np.ones(len(epochs), dtype=bool)
    last = np.append(epochs[1:], len(lines))  # the line behind each epoch's records
    special = (flag >= 2) & (flag <= 5)
    in_special = (behind >= 0) & special[np.maximum(behind, 0)] if len(epochs) else np.zeros(len(lines), dtype=bool)
    other = np.flatnonzero(~is_epoch & (satellite < 0) & ~in_special)
    points = sorted([(int(k), False) for k in _runs(other)] + [(int(epochs[k]), True) for k in np.flatnonzero(special)])
    run_end = dict(zip(_runs(other).tolist(), _run_ends(other).tolist(), strict=True))
    changes: list[tuple[int, int, bool]] = []  # from this epoch on: state, usable
    for place, is_event in points:
        if is_event:
            k = int(behind[place])
            have = int(last[k] - epochs[k] - 1)
            if count_good[k] and have != count[k]:
                problems.note(
                    int(epoch_line[k]) + 1, f"the event says {count[k]} lines follow, {have} do", "took those that do"
                )
            course.event(int(epoch_line[k]), int(flag[k]), have)
            changes.append((k + 1, len(course.states) - 1, course.usable()))
        else:
            stop = run_end[place]
            stray = [m for m in range(place, min(stop, place + _LONGEST_HEADER)) if _stray(text, body + m)]
            if stray:
                course.change(body + stray[0], body + stray[-1] + 1)
                changes.append((int(behind[place]) + 1, len(course.states) - 1, course.usable()))
                if any(rinex_header.label_of(text.line(body + m)) != "COMMENT" for m in stray):
                    problems.note(body + place + 1, "header lines outside an event", "taken as said from there on",
                                  kind="header lines outside an event")  # fmt: skip
            elif text.raw[text.begin[body + place] : text.end[body + stop - 1]].strip():
                problems.note(
                    body + place + 1,
                    f"{stop - place} lines are neither an epoch nor a satellite record"
                    if stop - place > 1 else "the line is neither an epoch nor a satellite record",
                    kind="lines that are neither an epoch nor a satellite record",
                )  # fmt: skip
    for first, state, good in changes:
        epoch_state[first:] = state
        usable[first:] = good
    if course.ended:
        problems.note(course.ended, "another site is occupied from here on", "left out what follows")
    observed = ((flag == 0) | (flag == 1)) & usable
    rows = np.flatnonzero((satellite >= 0) & (behind >= 0))
    rows = rows[observed[behind[rows]]] if len(epochs) else rows[:0]
    have_rows = np.bincount(behind[rows], minlength=len(epochs)) if len(epochs) else np.zeros(0, dtype=np.int64)
    for k in np.flatnonzero(observed & (~count_good | (have_rows != count)))[: 2 * _MOST_PROBLEMS]:
        problems.note(
            int(epoch_line[k]) + 1,
            f"the epoch says {count[k] if count_good[k] else 'nothing of how many'} satellites follow, {have_rows[k]} do",
            "took those that do", kind="epochs with another number of satellites than they say",
        )  # fmt: skip
    orphan = int(np.sum((satellite >= 0) & (behind < 0)))
    if orphan:
        problems.note(body + 1, f"{orphan} satellite records before the first epoch")
    keep = np.flatnonzero(observed)
    renumber = np.full(len(epochs), -1, dtype=np.int64)
    renumber[keep] = np.arange(len(keep))
    return _Layout(
        course.states, epoch_line[keep], epoch_state[keep], flag[keep],
        renumber[behind[rows]], satellite[rows], lines[rows],
    )  # fmt: skip


def _runs(numbers: Ints) -> Ints:
    """The first of each stretch of consecutive numbers."""
    return numbers[np.flatnonzero(np.diff(numbers, prepend=-9) != 1)]


def _run_ends(numbers: Ints) -> Ints:
    """One behind the last of each stretch of consecutive numbers."""
    return numbers[np.flatnonzero(np.diff(numbers, append=np.iinfo(np.int64).max) != 1)] + 1


def _satellites(text: _Text, lines: Ints, column: Ints, blank: int = 0) -> Ints:
    """Satellite names at a column of each line as letter * 100 + number, -1 where there is none.

    blank   the letter that a blank stands for, 0 for none
    """
    at = text.begin[lines] + column
    inside = at + 2 < text.end[lines]
    at = np.where(inside, at, 0)
    letter = text.data[at].astype(np.int64)
    if blank:
        letter = np.where(letter == 0x20, blank, letter)
    tens, units = text.data[at + 1].astype(np.int64), text.data[at + 2].astype(np.int64)
    tens = np.where(tens == 0x20, 0x30, tens) - 0x30
    units = units - 0x30
    number = tens * 10 + units
    good = inside & (_SYSTEM_NUMBER[letter] > 0) & (tens >= 0) & (tens <= 9) & (units >= 0) & (units <= 9) & (number > 0)
    return np.where(good, letter * 100 + number, -1)


# ------------------------------------------------------------------------------------------------ RINEX 2


def _layout_2(text: _Text, body: int, header: Header, problems: _Problems) -> _Layout:
    """Records have no mark of their own: the lines are walked from epoch to epoch, checked at each step.

    Stretches of epochs that are followed by just the lines they announce are taken as one step.
    """
    total = len(text.begin) - body
    starts, timed = _epoch_lines_2(text, body)
    line = starts + body
    flag, flag_good = fixed_columns.whole(text.data, text.begin[line] + 28, 1, text.end[line])
    count, count_good = fixed_columns.whole(text.data, text.begin[line] + 29, 3, text.end[line])
    good = flag_good & count_good & (flag <= 6)
    first = starts + np.maximum(1, -(-count // 12))
    behind = np.append(starts[1:], total)  # the next epoch line, or the end

    course = _Course(header, text, problems)
    taken = _Taken()
    step = _lines_each(header)
    broken = _broken_2(first, behind, count, flag, good, step)
    place = 0
    while place < total:
        k = int(np.searchsorted(starts, place))
        if k == len(starts) or starts[k] != place:  # not at an epoch line
            stop = int(starts[k]) if k < len(starts) else total
            if _skip_to(text, body, place, stop, course, problems):
                step = _lines_each(course.states[-1])
                broken = _broken_2(first, behind, count, flag, good, step)
            place = stop
            continue
        nearest = int(np.searchsorted(broken, k))
        until = int(broken[nearest]) if nearest < len(broken) else len(starts)
        if until > k:  # epochs k to until (not inside) are as they say
            if course.usable():
                chosen = np.arange(k, until)[flag[k:until] < 2]
                taken.stretch(line[chosen], len(course.states) - 1, flag[chosen], body + first[chosen], count[chosen], step)
            place = int(starts[until]) if until < len(starts) else total
            continue
        where = body + place + 1
        if not good[k]:
            problems.note(where, "the epoch line has no flag of 0 to 6 or no number of satellites")
            place += 1
        elif 2 <= flag[k] <= 5:
            stop = min(place + 1 + int(count[k]), total)
            epochs_inside = timed[(timed > place) & (timed < stop)]  # a count that would swallow an epoch is wrong
            if len(epochs_inside):
                stop = int(epochs_inside[0])
            if stop - place - 1 != count[k]:
                problems.note(where, f"the event says {count[k]} lines follow, {stop - place - 1} do", "took those that do")
            course.event(body + place, int(flag[k]), stop - place - 1)
            place = stop
        else:
            _untidy_2(text, body, k, place, first, behind, count, flag, step, total, course, taken, problems)
            place = int(behind[k])
        if _lines_each(course.states[-1]) != step:
            step = _lines_each(course.states[-1])
            broken = _broken_2(first, behind, count, flag, good, step)
    if course.ended:
        problems.note(course.ended, "another site is occupied from here on", "left out what follows")
    return taken.layout(text, course.states, header, problems)


def _epoch_lines_2(text: _Text, body: int) -> tuple[Ints, Ints]:
    """Lines (counted from the body) that look like an epoch or an event, and those of them that tell a time."""
    # Column 27 is the dot of a record's second value and blank in an epoch line: few other lines pass.
    long_enough = np.flatnonzero(text.end[body:] - text.begin[body:] > 28)
    likely = long_enough[text.data[text.begin[body + long_enough] + 26] == 0x20]
    begin = text.begin[body + likely]
    column = {k: text.data[begin + k] for k in (0, 2, 3, 5, 6, 8, 9, 10, 11, 12, 14, 18, 27, 28)}
    timed = column[18] == ord(".")
    for k in (0, 3, 6, 9, 12, 27):
        timed &= column[k] == 0x20
    for k in (2, 5, 8, 11, 14, 28):
        timed &= (column[k] >= 0x30) & (column[k] <= 0x39)
    untimed = (column[28] >= ord("2")) & (column[28] <= ord("5"))  # events need no time
    for k in (0, 2, 5, 8, 10, 11, 14, 18, 27):
        untimed &= column[k] == 0x20
    return likely[timed | untimed], likely[timed]


def _broken_2(first: Ints, behind: Ints, count: Ints, flag: Ints, good: Bools, step: int) -> Ints:
    """Numbers of the epoch lines that are events, or not followed by the lines they announce."""
    fits = good & ((flag < 2) | (flag == 6)) & (first + count * step == behind)
    return np.flatnonzero(~fits)


class _Taken:
    """Epochs and records of a RINEX 2 file gathered on the walk."""

    def __init__(self) -> None:
        self.epochs: list[Ints] = []  # each (n, 3): line, state, flag
        self.records: list[Ints] = []  # each (n, 3): epoch number, place among the epoch's satellites, first line
        self.length = 0

    def stretch(self, line: Ints, state: int, flag: Ints, first: Ints, count: Ints, step: int) -> None:
        """Epochs whose records follow without a gap."""
        number = self.length + np.arange(len(line))
        self.epochs.append(np.column_stack((line, np.full(len(line), state), flag)))
        self.length += len(line)
        slot = np.arange(int(count.sum())) - np.repeat(np.cumsum(count) - count, count)
        self.records.append(np.column_stack((np.repeat(number, count), slot, np.repeat(first, count) + slot * step)))

    def single(self, line: int, state: int, flag: int, records: list[tuple[int, int]]) -> None:
        """One epoch, with the place and the first line of each record."""
        self.epochs.append(np.array([[line, state, flag]]))
        if records:
            self.records.append(np.array([(self.length, place, first) for place, first in records]))
        self.length += 1

    def layout(self, text: _Text, states: list[Header], header: Header, problems: _Problems) -> _Layout:
        """All of it, with the satellites' names read from the epoch lines."""
        nothing = np.empty((0, 3), dtype=np.int64)
        epochs, records = np.concatenate((nothing, *self.epochs)), np.concatenate((nothing, *self.records))
        slot = records[:, 1]
        letter = header.system if header.system in SYSTEMS else "G"
        name_line = epochs[records[:, 0], 0] + slot // 12
        satellite = _satellites(text, name_line, 32 + 3 * (slot % 12), ord(letter))
        nameless = np.flatnonzero(satellite < 0)
        for k in nameless[: 2 * _MOST_PROBLEMS]:
            problems.note(int(name_line[k]) + 1, f"satellite {slot[k] + 1} of the epoch has no name",
                          kind="satellites without a name")  # fmt: skip
        if len(nameless):
            records, satellite = records[satellite >= 0], satellite[satellite >= 0]
        return _Layout(states, epochs[:, 0], epochs[:, 1], epochs[:, 2], records[:, 0], satellite, records[:, 2])


def _untidy_2(
    text: _Text,
    body: int,
    k: int,
    place: int,
    first: Ints,
    behind: Ints,
    count: Ints,
    flag: Ints,
    step: int,
    total: int,
    course: _Course,
    taken: _Taken,
    problems: _Problems,
) -> None:
    """Epoch k, which other lines follow than it says: comments within, cut short, or out of step."""
    begin, found, many = int(first[k]), int(behind[k]), int(count[k])
    records = [m for m in range(min(begin, found), found) if not _stray(text, body + m)]
    whole = min(len(records) // step, many) if step else 0
    fits = len(records) == many * step
    if not fits and found == total and len(records) < many * step:
        problems.note(len(text.begin), f"the file ends within an epoch: {whole} of {many} satellites are there",
                      "took those that are")  # fmt: skip
        fits = True
    if fits and flag[k] < 2 and course.usable():
        unbroken: list[tuple[int, int]] = []
        for slot in range(whole):
            if records[(slot + 1) * step - 1] - records[slot * step] == step - 1:
                unbroken.append((slot, body + records[slot * step]))
            else:
                problems.note(body + records[slot * step] + 1, "a header line within a satellite's record",
                              "left the record out")  # fmt: skip
        taken.single(body + place, len(course.states) - 1, int(flag[k]), unbroken)
    elif not fits:
        problems.note(
            body + place + 1, f"the epoch says {many} satellites of {step} lines, {len(records)} lines follow",
            "left the epoch out", kind="epochs with another number of lines than they say",
        )  # fmt: skip
    if len(records) < found - begin:
        _skip_to(text, body, begin, found, course, problems, quiet=True)


def _lines_each(header: Header) -> int:
    """Lines of one satellite's record: five observations a line (RINEX 2.11 table A2)."""
    return -(-len(header.types.get("", [])) // 5)


def _skip_to(
    text: _Text, body: int, place: int, stop: int, course: _Course, problems: _Problems, *, quiet: bool = False
) -> bool:
    """Lines that belong to no epoch: header lines are taken in, others reported; True where the header changed."""
    states = len(course.states)
    stray = [k for k in range(place, min(stop, place + _LONGEST_HEADER)) if _stray(text, body + k)]
    if stray:
        course.change(body + stray[0], body + stray[-1] + 1) if not quiet else _take_each(course, body, stray)
        if any(rinex_header.label_of(text.line(body + k)) != "COMMENT" for k in stray):
            problems.note(body + place + 1, "header lines outside an event", "taken as said from there on",
                          kind="header lines outside an event")  # fmt: skip
    elif not quiet and text.raw[text.begin[body + place] : text.end[body + stop - 1]].strip():
        problems.note(body + place + 1, f"{stop - place} lines belong to no epoch", kind="lines that belong to no epoch")
    return len(course.states) > states


def _take_each(course: _Course, body: int, stray: list[int]) -> None:
    numbers = np.array(stray, dtype=np.int64)
    for first, last in zip(_runs(numbers), _run_ends(numbers), strict=True):
        course.change(body + int(first), body + int(last))


# ------------------------------------------------------------------------------------------------ times


def _times(text: _Text, layout: _Layout, header: Header, name: str, problems: _Problems) -> Times:
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
    for k in np.flatnonzero(~good)[: 2 * _MOST_PROBLEMS]:
        problems.note(
            int(line[k]) + 1, f"no time can be read from the epoch line {text.line(int(line[k]))[:32].strip()!r}",
            "left the epoch out", kind="epoch lines without a time",
        )  # fmt: skip
    scale = header.time_scale
    if scale in ("GLO", "UTC"):
        times = timescales.utc_to_gps(times)
    elif scale == "BDT":
        times = times + np.timedelta64(timescales.BDT_BEHIND_GPS_S, "s")
    times[~good] = np.datetime64("NaT")
    return times


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
    text: _Text,
    layout: _Layout,
    times: Times,
    header: Header,
    name: str,
    wanted: Mapping[str, Collection[str]] | None,
    thin_to_s: float | None,
    problems: _Problems,
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
        for line in np.unique(layout.epoch_line[layout.row_epoch[rows[twice]]])[: 2 * _MOST_PROBLEMS]:
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
    last = layout.states[-1]
    kept_resets = np.zeros(len(kept), dtype=bool)
    kept_resets[into[np.flatnonzero(resets & (into < len(kept)))]] = True
    receiver = Receiver(
        name=header.marker or _marker_from(name),
        position_m=header.position_m or last.position_m or (np.nan, np.nan, np.nan),
        antenna=header.antenna,
        type=header.receiver_type,
    )
    if not header.marker:
        problems.note(0, "the header has no marker name", f"named {receiver.name} after the file")
    if np.isnan(receiver.position_m[0]):
        problems.note(0, "the header has no approximate position", "left it open")
    for letter, who in last.biases_removed.items():
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
        "biases_removed": dict(last.biases_removed),
        "clock_applied": header.clock_applied,
    }
    return Reading(signals, problems.all(), facts)


def _first_of_each(keys: Ints) -> Ints:
    """The row numbers, ascending, where each key stands for the first time."""
    if len(keys) < 2 or bool(np.all(np.diff(keys) > 0)):
        return np.arange(len(keys))
    return np.sort(np.unique(keys, return_index=True)[1])


def _report_order(layout: _Layout, times: Times, readable: Bools, problems: _Problems) -> None:
    """Epochs that stand before an earlier one in the file."""
    line = layout.epoch_line[readable]
    latest = np.maximum.accumulate(times[readable].astype(np.int64))
    for k in np.flatnonzero(times[readable][1:].astype(np.int64) < latest[:-1])[: 2 * _MOST_PROBLEMS]:
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
    text: _Text,
    states: list[Header],
    rows: _Rows,
    shape: tuple[int, int],
    wanted: Mapping[str, Collection[str]] | None,
    problems: _Problems,
    name: str,
) -> tuple[dict[str, Floats], dict[str, Bytes]]:
    """Every wanted column of every constellation, dense."""
    jobs: list[tuple[Header, str, Ints, list[int]]] = []  # state, system, rows, columns
    for state_number, state in enumerate(states):
        for letter in CARRIED:
            chosen = np.flatnonzero((rows.state == state_number) & (rows.system == ord(letter)))
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
    text: _Text,
    state: Header,
    letter: str,
    rows: _Rows,
    chosen: Ints,
    columns: list[int],
    dense: _Dense,
    problems: _Problems,
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
        line = rows.line[pick][:, None] + further
        at = text.begin[np.minimum(line, len(text.begin) - 1)] + offset
        room = np.where(line < len(text.begin), text.end[np.minimum(line, len(text.begin) - 1)] - at, 0)
        values, digits, odd = fixed_columns.observations(text.data, at.reshape(-1), room.reshape(-1))
        listed = odd[: max(_MOST_PROBLEMS - len(problems), 0)]
        if len(listed) < len(odd):
            problems.more["values that are no numbers"] += len(odd) - len(listed)
        for k in listed:
            row, j = divmod(int(k), len(columns))
            where = int(at[row, j])
            said = text.raw[where : where + min(fixed_columns.FIELD, int(room[row, j]))].decode("latin-1")
            problems.note(int(line[row, j]) + 1, f"{codes[columns[j]]} is no number: {said!r}")
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


def _is_wanted(letter: str, code: str, wanted: Mapping[str, Collection[str]] | None) -> bool:
    if len(code) != 3 or code[0] not in "CLS":
        return False
    if wanted is None:
        return True
    codes = wanted.get(letter, ())
    return code in codes if code[0] == "C" else any(code[1] == kept[1] for kept in codes)


def _without_squared(state: Header, code: str, satellite: Ints, values: Floats) -> Floats:
    """Phases of squaring receivers come in half wavelengths and are not used."""
    who = state.squared.get(code[1], set())
    numbers = [ord(s[0]) * 100 + int(s[1:]) for s in who if s[1:].isdigit() and s[0] in SYSTEMS]
    return np.where(("" in who) | np.isin(satellite, numbers), np.nan, values)
