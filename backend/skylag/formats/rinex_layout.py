"""Where the epochs and satellite records of a RINEX observation file lie.

Finds every line, tells epochs, records, events and header lines apart, and follows header changes along the file; all
by line numbers.  What no receiver does a hundred thousand times is given up after so many times, so that a hostile file
costs no more than an honest one.  Never reads an observation.
"""

import bisect
from collections import Counter
from dataclasses import dataclass

import numpy as np

from skylag.errors import FormatError
from skylag.formats import fixed_columns, rinex_header
from skylag.formats.rinex_header import SYSTEMS, Header
from skylag.tables import Bools, Bytes, Ints, Problem

MOST_PROBLEMS = 200  # listed one by one; the rest is counted
LONGEST_HEADER = 20_000  # lines
MOST_CHANGES = 5_000  # header changes in one file: a day of minutes laid end to end has 1440
MOST_STATES = 100  # different meanings of the columns in one file
MOST_ODD_STEPS = 100_000  # epochs of RINEX 2 with anything but their records behind them: a day has 86,400 seconds
_MANY_LINES, _SHORTEST_MEAN = 2**20, 16  # more lines than this must be longer than that in the mean
_BLOCK = 2**20  # bytes of text looked through at once for line ends

# What problems are counted as once their list is full.
_RUBBISH = "lines that are neither an epoch nor a satellite record"
_OTHER_EVENTS = "events of another length than they say"

_HUNDREDS = np.zeros(256, dtype=np.int16)  # letter of a constellation -> letter * 100, 0 for any other character
for _letter in SYSTEMS:
    _HUNDREDS[ord(_letter)] = 100 * ord(_letter)
_FIGURE = np.full(256, -100, dtype=np.int16)  # figure -> its number, far below 0 for any other character
_FIGURE[ord("0") : ord("9") + 1] = range(10)
_TENS = 10 * _FIGURE
_TENS[ord(" ")] = 0


class Problems(list[Problem]):
    """The problems met, up to a number; what comes after is counted by kind."""

    def __init__(self, path: str) -> None:
        super().__init__()
        self.path = path
        self.more: Counter[str] = Counter()

    def note(self, line: int, what: str, done: str = "skipped", kind: str = "") -> None:
        """One problem at a line, numbered from 1; `kind` is what it is counted as when the list is full."""
        if len(self) < MOST_PROBLEMS:
            self.append(Problem(self.path, line, what, done))
        else:
            self.more[kind or what] += 1

    def all(self) -> tuple[Problem, ...]:
        """Everything, with the uncounted kinds as one line each."""
        rest = [Problem(self.path, 0, f"{count} more: {kind}") for kind, count in self.more.most_common(20)]
        return (*self, *rest)


@dataclass
class Text:
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
class Layout:
    """Where things are: epochs in file order and satellite records in file order."""

    states: list[Header]
    epoch_line: Ints
    epoch_state: Ints
    epoch_flag: Ints
    row_epoch: Ints
    row_satellite: Ints  # letter * 100 + number
    row_line: Ints  # the line where the first column is


def lines_of(data: bytes, name: str) -> Text:
    """The lines of a text.

    Raises FormatError where nearly all of millions of lines are empty: they would take fifty times the text's memory.
    """
    text = np.frombuffer(data, dtype=np.uint8)
    # In blocks that stay in the cache: a third of the time of one sweep, and no array as large as the text.
    parts: list[Ints] = []
    count = 0
    for first in range(0, len(text), _BLOCK):
        parts.append(np.flatnonzero(text[first : first + _BLOCK] == 10) + first)
        count += len(parts[-1])
        if count > _MANY_LINES and min(first + _BLOCK, len(text)) < _SHORTEST_MEAN * count:
            raise FormatError(
                f"{name}: the first {count} lines are empty or of a few characters; observation files have lines of 40 "
                "characters and more; fetch the file again",
                path=name, line=count,
            )  # fmt: skip
    breaks = np.concatenate(parts)
    begin = np.concatenate(([0], breaks + 1))
    end = np.concatenate((breaks, [len(data)]))
    if begin[-1] == len(data):
        begin, end = begin[:-1], end[:-1]
    return Text(text, begin, end, data)


def looks_like_epoch_2(line: str) -> bool:
    return (
        len(line) > 28
        and line[18] == "."
        and all(line[k] == " " for k in (0, 3, 6, 9, 12, 26, 27))
        and all(line[k].isdigit() for k in (2, 5, 8, 11, 14, 28))
    )


# ------------------------------------------------------------------------------------------------ header changes


class _Course:
    """The header states along the file, and what events say about the antenna."""

    def __init__(self, header: Header, text: Text, problems: Problems) -> None:
        self.states = [header]
        self.current = 0  # the number of the state that holds now
        self.text, self.problems = text, problems
        self.moving = False
        self.changes = 0
        self.ended = 0  # the line from which nothing is read any more
        self.why = ""

    def change(self, first: int, last: int) -> None:
        """Header lines first to last (not inside) hold from here on; comments change nothing."""
        lines = [(k + 1, self.text.line(k)) for k in range(first, min(last, first + LONGEST_HEADER))]
        if all(line[60:67] == "COMMENT" for _, line in lines):
            return
        self.changes += 1
        if self.changes > MOST_CHANGES:
            self.end(first + 1, f"more than {MOST_CHANGES} header changes in one file, as no receiver writes")
            return
        before = self.states[self.current]
        state = before.copy()
        for problem in rinex_header.absorb(state, lines, self.problems.path):
            self.problems.note(problem.line, problem.what, kind="line without a header label behind an event")
        if (state.version >= 3) != (before.version >= 3):
            self.problems.note(first + 1, "another major RINEX version in mid-file", "read on as before")
            state.version = before.version
        if not any(state.types.values()):
            state.types = dict(before.types)
        state.marker = state.marker or before.marker
        if (before.marker and state.marker.split() != before.marker.split()) or _apart(state, before) > 100.0:
            self.end(first + 1, "another site is occupied from here on")
        # A state whose columns mean what those of an earlier one did takes its place.
        decoding = state.decoding()
        alike = (k for k, earlier in enumerate(self.states) if earlier.decoding() == decoding)
        self.current = next(alike, len(self.states))
        if self.current < len(self.states):
            self.states[self.current] = state
        elif self.current == MOST_STATES:
            self.current -= 1
            self.end(first + 1, f"more than {MOST_STATES} different lists of types in one file, as no receiver writes")
        else:
            self.states.append(state)

    def end(self, line: int, why: str) -> None:
        """Nothing from this line on is taken."""
        if not self.ended:
            self.ended, self.why = line, why

    def tell_end(self) -> None:
        """Where and why the reading ended before the file did."""
        if self.ended:
            self.problems.note(self.ended, self.why, "left out what follows", kind=self.why)

    def event(self, line: int, flag: int, count: int) -> None:
        """An epoch of flag 2 to 5 with `count` special lines behind it (RINEX 3.05 table A3)."""
        if flag in (2, 3, 4):
            self.change(line + 1, line + 1 + count)
        if flag == 2:
            self.moving = True
            self.problems.note(line + 1, "the antenna starts to move", "skipped until it stands again")
        if flag == 3:
            self.moving = False

    def outside_events(self, numbers: Ints) -> bool:
        """Header lines that stand where none may; False where they are comments only and change nothing."""
        if all(rinex_header.label_of(self.text.line(int(k))) == "COMMENT" for k in numbers):
            return False
        self.problems.note(int(numbers[0]) + 1, "header lines outside an event", "taken as said from there on")
        for first, last in zip(_runs(numbers), _run_ends(numbers), strict=True):
            self.change(int(first), int(last))
        return True

    def usable(self) -> bool:
        """Whether observations from here on belong to the site the file began with."""
        return not self.moving and not self.ended


def _apart(a: Header, b: Header) -> float:
    if a.position_m is None or b.position_m is None:
        return 0.0
    return float(np.linalg.norm(np.subtract(a.position_m, b.position_m)))


def _stray(text: Text, number: int) -> bool:
    return bool(text.end[number] - text.begin[number] > 60 and rinex_header.label_of(text.line(number)))


def _comments(text: Text, lines: Ints) -> Bools:
    """Which lines are comments by their label."""
    is_comment = text.end[lines] - text.begin[lines] >= 67
    for column, letter in enumerate(b"COMMENT", start=60):
        some = np.flatnonzero(is_comment)
        is_comment[some] = text.data[text.begin[lines[some]] + column] == letter
    return is_comment


# ------------------------------------------------------------------------------------------------ RINEX 3 and 4


def layout_3(text: Text, body: int, header: Header, problems: Problems) -> Layout:
    """Epoch lines begin with >, satellite records with a letter and two digits: all found at once."""
    lines = np.arange(body, len(text.begin))
    is_epoch = text.at(lines, 0) == ord(">")
    satellite = _satellites(text, lines, np.zeros(len(lines), dtype=np.int64))
    satellite[is_epoch] = -1
    # A comment or a marker name may begin like a satellite record, but no value reaches column 61 with a letter.
    for k in np.flatnonzero((satellite >= 0) & (text.at(lines, 60) >= ord("A"))):
        if rinex_header.label_of(text.line(body + int(k))):
            satellite[k] = -1
    epochs = np.flatnonzero(is_epoch)
    epoch_line = lines[epochs]
    flag, flag_good = fixed_columns.whole(text.data, text.begin[epoch_line] + 31, 1, text.end[epoch_line])
    count, count_good = fixed_columns.whole(text.data, text.begin[epoch_line] + 32, 3, text.end[epoch_line])
    # A long count may begin one column early in files of more than 999 lines; none is known to.
    flag_good |= text.at(epoch_line, 31) == 0x20  # a blank flag is 0
    flag = np.where(flag_good & (flag <= 6), flag, -1)
    for k in np.flatnonzero(flag < 0)[:MOST_PROBLEMS]:
        said = text.line(int(epoch_line[k]))[31:32]
        problems.note(int(epoch_line[k]) + 1, f"the epoch flag {said!r} is none of 0 to 6")
    behind = np.cumsum(is_epoch) - 1  # the epoch each line belongs to
    course = _Course(header, text, problems)
    last = np.append(epochs[1:], len(lines))  # the line behind each epoch's records
    special = (flag >= 2) & (flag <= 5)
    in_special = (behind >= 0) & special[np.maximum(behind, 0)] if len(epochs) else np.zeros(len(lines), dtype=bool)
    other = np.flatnonzero(~is_epoch & (satellite < 0) & ~in_special)
    for k in np.flatnonzero(special & count_good & (count != last - epochs - 1))[: 2 * MOST_PROBLEMS]:
        what = f"the event says {count[k]} lines follow, {last[k] - epochs[k] - 1} do"
        problems.note(int(epoch_line[k]) + 1, what, "took those that do", kind=_OTHER_EVENTS)
    events = np.flatnonzero(special)
    epoch_state, usable = _follow(text, body, events, epochs, last, flag, other, behind, course, problems)
    course.tell_end()
    observed = ((flag == 0) | (flag == 1)) & usable
    rows = np.flatnonzero((satellite >= 0) & (behind >= 0))
    rows = rows[observed[behind[rows]]] if len(epochs) else rows[:0]
    have_rows = np.bincount(behind[rows], minlength=len(epochs)) if len(epochs) else np.zeros(0, dtype=np.int64)
    for k in np.flatnonzero(observed & (~count_good | (have_rows != count)))[: 2 * MOST_PROBLEMS]:
        said = str(count[k]) if count_good[k] else "not how many"
        problems.note(
            int(epoch_line[k]) + 1, f"the epoch says {said} satellites follow, {have_rows[k]} do",
            "took those that do", kind="epochs with another number of satellites than they say",
        )  # fmt: skip
    orphan = int(np.sum((satellite >= 0) & (behind < 0)))
    if orphan:
        problems.note(body + 1, f"{orphan} satellite records before the first epoch")
    keep = np.flatnonzero(observed)
    renumber = np.full(len(epochs), -1, dtype=np.int64)
    renumber[keep] = np.arange(len(keep))
    return Layout(
        course.states, epoch_line[keep], epoch_state[keep], flag[keep],
        renumber[behind[rows]], satellite[rows], lines[rows],
    )  # fmt: skip


def _follow(
    text: Text,
    body: int,
    events: Ints,
    epochs: Ints,
    last: Ints,
    flag: Ints,
    other: Ints,
    behind: Ints,
    course: _Course,
    problems: Problems,
) -> tuple[Ints, Bools]:
    """State and usability of each epoch: what events and lines that are neither epochs nor records change on the way.

    Lines are counted from the body.  Events and stretches of lines that change nothing (external events, comments,
    rubbish) are told from the others at once; the others are taken one by one.
    """
    # An event of comments alone, or of an external signal, changes nothing.
    special = np.zeros(len(epochs) + 1, dtype=bool)  # the last one stands for lines before the first epoch
    special[events] = True
    inner = np.flatnonzero(special[behind]) if len(events) else events
    comments = np.bincount(behind[inner[_comments(text, inner + body)]], minlength=len(epochs))
    quiet = (flag[events] == 5) | ((flag[events] == 4) & (comments[events] == last[events] - epochs[events] - 1))
    loud_events = events[~quiet]
    # So does a stretch without any label but comments.
    first, stop = _runs(other), _run_ends(other)
    size = text.end[other + body] - text.begin[other + body]
    comment = _comments(text, other + body)
    run = np.repeat(np.arange(len(first)), stop - first)
    loud_runs = np.unique(run[(size > 60) & ~comment])
    rubbish = np.setdiff1d(np.unique(run[(size > 0) & ~comment]), loud_runs)
    rubbish = np.setdiff1d(rubbish, np.unique(run[comment]))
    for k in rubbish[: 2 * MOST_PROBLEMS]:
        _note_rubbish(text, body, int(first[k]), int(stop[k]), problems)
    if len(rubbish) > 2 * MOST_PROBLEMS:
        problems.more[_RUBBISH] += len(rubbish) - 2 * MOST_PROBLEMS
    points = [(int(epochs[k]), int(k), True) for k in loud_events] + [(int(first[k]), int(k), False) for k in loud_runs]
    points.sort()
    begins: list[int] = [0]  # from this epoch on: state, usable
    states: list[int] = [0]
    goods: list[bool] = [True]
    for place, k, is_event in points:
        if is_event:
            course.event(int(epochs[k]) + body, int(flag[k]), int(last[k] - epochs[k] - 1))
            begins.append(k + 1)
        else:
            until = min(int(stop[k]), place + LONGEST_HEADER)
            stray = [m for m in range(place, until) if _stray(text, body + m)]
            if not stray:
                _note_rubbish(text, body, place, int(stop[k]), problems)
                continue
            if not course.outside_events(np.array(stray) + body):
                continue
            begins.append(int(behind[place]) + 1)
        states.append(course.current)
        goods.append(course.usable())
        if course.ended:
            break
    which = np.searchsorted(np.array(begins), np.arange(len(epochs)), side="right") - 1
    return np.array(states)[which], np.array(goods)[which]


def _note_rubbish(text: Text, body: int, first: int, stop: int, problems: Problems) -> None:
    if len(problems) >= MOST_PROBLEMS or text.raw[text.begin[body + first] : text.end[body + stop - 1]].strip():
        what = f"{stop - first} lines are neither an epoch nor a satellite record"
        alone = "the line is neither an epoch nor a satellite record"
        problems.note(body + first + 1, what if stop - first > 1 else alone, kind=_RUBBISH)


def _runs(numbers: Ints) -> Ints:
    """The first of each stretch of consecutive numbers."""
    return numbers[np.flatnonzero(np.diff(numbers, prepend=-9) != 1)]


def _run_ends(numbers: Ints) -> Ints:
    """One behind the last of each stretch of consecutive numbers."""
    return numbers[np.flatnonzero(np.diff(numbers, append=np.iinfo(np.int64).max) != 1)] + 1


def _satellites(text: Text, lines: Ints, column: Ints, blank: int = 0) -> Ints:
    """Satellite names at a column of each line as letter * 100 + number, -1 where there is none.

    blank   the letter that a blank stands for, 0 for none
    """
    at = text.begin[lines] + column
    inside = at + 2 < text.end[lines]
    if not inside.all():
        at = np.where(inside, at, 0)
    letter = text.data[at]
    if blank:
        letter = np.where(letter == 0x20, np.uint8(blank), letter)
    hundreds = _HUNDREDS[letter]
    number = _TENS[text.data[at + 1]] + _FIGURE[text.data[at + 2]]
    good = inside & (hundreds > 0) & (number > 0)
    return np.where(good, hundreds + number, -1).astype(np.int64)


# ------------------------------------------------------------------------------------------------ RINEX 2


def layout_2(text: Text, body: int, header: Header, problems: Problems) -> Layout:
    """Records have no mark of their own: the lines are walked from epoch to epoch, checked at each step.

    Stretches of epochs that are followed by just the lines they announce are taken as one step.
    """
    total = len(text.begin) - body
    starts, timed = _epoch_lines_2(text, body)
    line = starts + body
    flag, flag_good = fixed_columns.whole(text.data, text.begin[line] + 28, 1, text.end[line])
    count, count_good = fixed_columns.whole(text.data, text.begin[line] + 29, 3, text.end[line])
    flag_good |= text.at(line, 28) == 0x20  # a blank flag is 0
    good = flag_good & count_good & (flag <= 6)
    first = starts + np.maximum(1, -(-count // 12))
    behind = np.append(starts[1:], total)  # the next epoch line, or the end

    course = _Course(header, text, problems)
    taken = _Taken()
    step = _lines_each(header)
    broken_of: dict[int, list[int]] = {}  # lines per satellite -> numbers of the epoch lines that need a closer look

    def broken_for(lines_each: int) -> list[int]:
        if lines_each not in broken_of:
            broken_of[lines_each] = _broken_2(first, behind, count, flag, good, lines_each).tolist()
        return broken_of[lines_each]

    broken = broken_for(step)
    all_starts, all_timed = starts.tolist(), timed.tolist()
    place = odd = k = 0
    while place < total and not course.ended:
        k = bisect.bisect_left(all_starts, place, k)
        if k == len(all_starts) or all_starts[k] != place:  # not at an epoch line
            stop = all_starts[k] if k < len(all_starts) else total
            if _skip_to(text, body, place, stop, course, problems):
                step = _lines_each(course.states[course.current])
                broken = broken_for(step)
            place = stop
            continue
        nearest = bisect.bisect_left(broken, k)
        until = broken[nearest] if nearest < len(broken) else len(all_starts)
        if until > k:  # epochs k to until (not inside) are as they say
            if course.usable():
                chosen = np.arange(k, until)[flag[k:until] < 2]
                taken.stretch(line[chosen], course.current, flag[chosen], body + first[chosen], count[chosen], step)
            place = all_starts[until] if until < len(all_starts) else total
            continue
        odd += 1
        if odd > MOST_ODD_STEPS:
            course.end(
                body + place + 1, f"more than {MOST_ODD_STEPS} epochs with other lines behind them than they say"
            )
            break
        if not good[k]:
            problems.note(body + place + 1, "the epoch line has no flag of 0 to 6 or no number of satellites",
                          kind="epoch lines without a flag or a number of satellites")  # fmt: skip
            place += 1
        elif 2 <= flag[k] <= 5:
            announced = int(count[k])
            stop = min(place + 1 + announced, total)
            inside = bisect.bisect_right(all_timed, place)
            if inside < len(all_timed):  # a count that would swallow an epoch is wrong
                stop = min(stop, all_timed[inside])
            if stop - place - 1 != announced:
                what = f"the event says {announced} lines follow, {stop - place - 1} do"
                problems.note(body + place + 1, what, "took those that do", kind=_OTHER_EVENTS)
            course.event(body + place, int(flag[k]), stop - place - 1)
            place = stop
        else:
            _untidy_2(text, body, k, place, first, behind, count, flag, step, total, course, taken, problems)
            place = int(behind[k])
        changed = _lines_each(course.states[course.current])
        if changed != step:
            step = changed
            broken = broken_for(step)
    course.tell_end()
    return taken.layout(text, course.states, header, problems)


def _epoch_lines_2(text: Text, body: int) -> tuple[Ints, Ints]:
    """Lines (counted from the body) that look like an epoch or an event, and those of them that tell a time."""
    # Column 27 is the dot of a record's second value and blank in an epoch line: few other lines pass.
    long_enough = np.flatnonzero(text.end[body:] - text.begin[body:] > 28)
    likely = long_enough[text.data[text.begin[body + long_enough] + 26] == 0x20]
    begin = text.begin[body + likely]
    column = {k: text.data[begin + k] for k in (0, 2, 3, 5, 6, 8, 9, 10, 11, 12, 14, 18, 27, 28)}
    timed = column[18] == ord(".")
    for k in (0, 3, 6, 9, 12, 27):
        timed &= column[k] == 0x20
    for k in (2, 5, 8, 11, 14):
        timed &= (column[k] >= 0x30) & (column[k] <= 0x39)
    timed &= (column[28] == 0x20) | ((column[28] >= 0x30) & (column[28] <= 0x39))
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

    def layout(self, text: Text, states: list[Header], header: Header, problems: Problems) -> Layout:
        """All of it, with the satellites' names read from the epoch lines."""
        nothing = np.empty((0, 3), dtype=np.int64)
        epochs, records = np.concatenate((nothing, *self.epochs)), np.concatenate((nothing, *self.records))
        slot = records[:, 1]
        letter = header.system if header.system in SYSTEMS else "G"
        name_line = epochs[records[:, 0], 0] + slot // 12
        satellite = _satellites(text, name_line, 32 + 3 * (slot % 12), ord(letter))
        nameless = np.flatnonzero(satellite < 0)
        for k in nameless[: 2 * MOST_PROBLEMS]:
            problems.note(int(name_line[k]) + 1, f"satellite {slot[k] + 1} of the epoch has no name",
                          kind="satellites without a name")  # fmt: skip
        if len(nameless):
            records, satellite = records[satellite >= 0], satellite[satellite >= 0]
        return Layout(states, epochs[:, 0], epochs[:, 1], epochs[:, 2], records[:, 0], satellite, records[:, 2])


def _untidy_2(
    text: Text,
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
    problems: Problems,
) -> None:
    """Epoch k, which other lines follow than it says: comments within, cut short, or out of step."""
    begin, found, many = int(first[k]), int(behind[k]), int(count[k])
    records = [m for m in range(min(begin, found), found) if not _stray(text, body + m)]
    whole = min(len(records) // step, many) if step else 0
    surplus = records[many * step :]
    if surplus and found == total:  # the end of the file: blank lines, or an epoch line cut off
        cut_off = len(surplus) == 1 and text.end[-1] == len(text.raw)
        if cut_off:
            problems.note(body + surplus[0] + 1, "the file ends within an epoch line")
        if cut_off or not text.raw[text.begin[body + surplus[0]] :].strip():
            records = records[: many * step]
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
        taken.single(body + place, course.current, int(flag[k]), unbroken)
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
    text: Text, body: int, place: int, stop: int, course: _Course, problems: Problems, *, quiet: bool = False
) -> bool:
    """Lines that belong to no epoch: header lines are taken in, others reported; True where the header changed."""
    changes = course.changes
    stray = [k for k in range(place, min(stop, place + LONGEST_HEADER)) if _stray(text, body + k)]
    if stray:
        course.outside_events(np.array(stray) + body)
    elif not quiet and text.raw[text.begin[body + place] : text.end[body + stop - 1]].strip():
        problems.note(body + place + 1, f"{stop - place} lines belong to no epoch", kind="lines of no epoch")
    return course.changes > changes
