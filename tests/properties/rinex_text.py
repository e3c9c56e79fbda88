"""A tiny writer of RINEX observation text, written from the format tables alone, and strategies that feed it.

Shares nothing with the reader: values are written with Python's own number formatting, one at a time.
"""

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from hypothesis import strategies as st

# A value, its loss-of-lock digit and its strength digit; None is blank.
Cell = tuple[float | None, int | None, int | None]


@dataclass
class Epoch:
    """One epoch: time in the file's own time system, flag, satellite -> one cell per declared type."""

    time: np.datetime64
    satellites: dict[str, list[Cell]]
    flag: int = 0
    clock_s: float | None = None


@dataclass
class Text:
    """What is to be written."""

    version: float
    types: dict[str, list[str]]  # "" for RINEX 2
    epochs: list[Epoch]
    system: str = "M"
    time_system: str = "GPS"
    marker: str = "WREN"
    extra: list[str] = field(default_factory=list)  # further header lines
    trimmed: bool = True  # whether blanks at the ends of lines are left out


def labelled(body: str, label: str) -> str:
    """A header line."""
    return f"{body:<60}{label}"


def header(text: Text) -> list[str]:
    """The header lines, END OF HEADER last."""
    first = text.epochs[0].time if text.epochs else np.datetime64("2031-05-10T00:00:00", "ns")
    year, month, day, hour, minute, second = _parts(first)
    lines = [
        labelled(f"{text.version:9.2f}           OBSERVATION DATA    {text.system}", "RINEX VERSION / TYPE"),
        labelled(f"{text.marker}", "MARKER NAME"),
        labelled(f"{'7':<20}{'INVENTED RECEIVER':<20}{'1.0':<20}", "REC # / TYPE / VERS"),
        labelled(f"{'9':<20}{'INVENTED ANTENNA':<20}", "ANT # / TYPE"),
        labelled(f"{-3950071.0:14.4f}{2522415.0:14.4f}{-4311638.0:14.4f}", "APPROX POSITION XYZ"),
        *type_lines(text.version, text.types),
        labelled(
            f"{year:6d}{month:6d}{day:6d}{hour:6d}{minute:6d}{second:13.7f}     {text.time_system}", "TIME OF FIRST OBS"
        ),
        *text.extra,
    ]
    return [*lines, labelled("", "END OF HEADER")]


def type_lines(version: float, types: dict[str, list[str]]) -> list[str]:
    """The header lines that list the observation types."""
    lines = []
    if version < 3:
        names = types[""]
        for first in range(0, len(names), 9):
            count = f"{len(names):6d}" if first == 0 else " " * 6
            body = count + "".join(f"    {name}" for name in names[first : first + 9])
            lines.append(labelled(body, "# / TYPES OF OBSERV"))
        return lines
    for system, names in types.items():
        for first in range(0, len(names), 13):
            begin = f"{system}  {len(names):3d}" if first == 0 else " " * 6
            body = begin + "".join(f" {name}" for name in names[first : first + 13])
            lines.append(labelled(body, "SYS / # / OBS TYPES"))
    return lines


def _parts(time: np.datetime64) -> tuple[int, int, int, int, int, float]:
    words = str(time.astype("datetime64[ns]"))
    date, clock = words.split("T")
    year, month, day = (int(part) for part in date.split("-"))
    hour, minute, second = clock.split(":")
    return year, month, day, int(hour), int(minute), float(second)


def cell(value: Cell) -> str:
    """Sixteen characters."""
    number, lock, strength = value
    text = " " * 14 if number is None else f"{number:14.3f}"
    return text + ("" if lock is None else str(lock)).rjust(1) + ("" if strength is None else str(strength)).rjust(1)


def epoch_lines(text: Text, epoch: Epoch) -> list[str]:
    """An epoch line and its records."""
    year, month, day, hour, minute, second = _parts(epoch.time)
    names = list(epoch.satellites)
    if text.version < 3:
        begin = (
            f" {year % 100:02d} {month:2d} {day:2d} {hour:2d} {minute:2d}{second:11.7f}  {epoch.flag}{len(names):3d}"
        )
        lines = []
        for first in range(0, max(len(names), 1), 12):
            line = (begin if first == 0 else " " * 32) + "".join(names[first : first + 12])
            if first == 0 and epoch.clock_s is not None:
                line = f"{line:<68}{epoch.clock_s:12.9f}"
            lines.append(line)
        for name in names:
            cells = [cell(value) for value in epoch.satellites[name]]
            lines += ["".join(cells[first : first + 5]) for first in range(0, len(cells), 5)]
    else:
        begin = f"> {year:4d} {month:02d} {day:02d} {hour:02d} {minute:02d}{second:11.7f}  {epoch.flag}{len(names):3d}"
        clock = "" if epoch.clock_s is None else f"      {epoch.clock_s:15.12f}"
        lines = [begin + clock]
        lines += [name + "".join(cell(value) for value in epoch.satellites[name]) for name in names]
    return [line.rstrip() if text.trimmed else line for line in lines]


def write(text: Text) -> bytes:
    """The whole file."""
    lines = header(text)
    for epoch in text.epochs:
        lines += epoch_lines(text, epoch)
    return ("\n".join(lines) + "\n").encode("ascii")


def simple(
    version: float = 3.04,
    types: dict[str, list[str]] | None = None,
    satellites: Sequence[str] = ("G05", "G12", "E11"),
    epochs: int = 4,
    start: str = "2031-05-10T00:00:00",
    step_s: float = 30.0,
    **more: object,
) -> Text:
    """A small regular file with values that tell epoch, satellite and column apart."""
    if types is None:
        types = {"": ["C1", "L1", "P2", "L2", "S1", "S2"]} if version < 3 else {
            "G": ["C1C", "L1C", "C2W", "L2W", "S1C"], "E": ["C1C", "L1C", "C5Q", "L5Q"],
        }  # fmt: skip
    begin = np.datetime64(start, "ns")
    out = []
    for k in range(epochs):
        records: dict[str, list[Cell]] = {}
        for name in satellites:
            columns = types[""] if version < 3 else types[name[0]]
            records[name] = [(value_at(k, name, j), None, None) for j in range(len(columns))]
        out.append(Epoch(begin + np.timedelta64(round(k * step_s * 1e9), "ns"), records))
    return Text(version, types, out, **more)  # type: ignore[arg-type]


def value_at(epoch: int, satellite: str, column: int) -> float:
    """The value `simple` writes there."""
    return round(20_000_000.0 + 1000.0 * epoch + 10.0 * int(satellite[1:]) + column + 0.123, 3)


# ------------------------------------------------------------------------------------------------ strategies

# The thousandths that F14.3 can hold: nine digits before the dot with a sign, ten without.
_NUMBERS = st.integers(min_value=-999_999_999_999, max_value=9_999_999_999_999).map(lambda n: n / 1000.0)
CELLS: st.SearchStrategy[Cell] = st.tuples(
    st.none() | _NUMBERS, st.none() | st.integers(0, 7), st.none() | st.integers(0, 9)
)

_TYPES_3 = {
    "G": ["C1C", "L1C", "S1C", "C1W", "C2W", "L2W", "S2W", "C2L", "L2L", "C5Q", "L5Q", "D1C"],
    "E": ["C1C", "L1C", "C5Q", "L5Q", "C7Q", "L7Q", "S5Q"],
    "R": ["C1C", "L1C", "C2P", "L2P"],
    "C": ["C2I", "L2I", "C6I", "L6I", "C1P", "L1P"],
    "J": ["C1C", "L1C", "C2L", "L2L"],
}
_TYPES_2 = ["C1", "P1", "L1", "L2", "P2", "S1", "S2", "C2", "C5", "L5", "D1"]


@st.composite
def texts(draw: st.DrawFn) -> Text:
    """Any small file of RINEX 2, 3 or 4."""
    version = draw(st.sampled_from([2.10, 2.11, 2.12, 3.00, 3.02, 3.03, 3.04, 3.05, 4.00, 4.01, 4.02]))
    if version < 3:
        types = {"": draw(st.lists(st.sampled_from(_TYPES_2), min_size=1, max_size=11, unique=True))}
        systems = ["G", "R", "E"]
    else:
        systems = draw(st.lists(st.sampled_from(list(_TYPES_3)), min_size=1, max_size=5, unique=True))
        types = {
            s: draw(st.lists(st.sampled_from(_TYPES_3[s]), min_size=1, max_size=len(_TYPES_3[s]), unique=True))
            for s in systems
        }
    names = [f"{s}{n:02d}" for s in systems for n in range(1, 25)]
    seconds = draw(st.lists(st.integers(0, 86_399), min_size=1, max_size=4, unique=True).map(sorted))
    # Tenths of a microsecond is what an epoch line holds.
    offset = draw(st.sampled_from([0, 0, 100, 1_000_000, 999_999_900]))
    epochs = []
    for second in seconds:
        chosen = draw(st.lists(st.sampled_from(names), min_size=1, max_size=16, unique=True))
        records = {}
        for name in chosen:
            width = len(types[""] if version < 3 else types[name[0]])
            records[name] = draw(st.lists(CELLS, min_size=width, max_size=width))
        time = np.datetime64("2031-05-10T00:00:00", "ns") + np.timedelta64(second * 10**9 + offset, "ns")
        epochs.append(Epoch(time, records, flag=draw(st.sampled_from([0, 0, 0, 1]))))
    return Text(version, types, epochs, trimmed=draw(st.booleans()))
