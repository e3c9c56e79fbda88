"""Files made to cost time or memory: none costs more than an honest file of its size, and what was left out is told.

The limits of the processor time are those of the campaign of changed files; what is timed takes a tenth of them on a
quiet machine, and took up to ten times as long before such files were thought of.
"""

import time
import tracemalloc
from collections.abc import Callable

import pytest
from tests.formats.campaign import LONGEST_S, seeds
from tests.properties.rinex_text import labelled, simple, write

from skylag import formats
from skylag.errors import FormatError
from skylag.formats import rinex_layout
from skylag.tables import Reading, Signals

VERSION_2, VERSION_3 = write(simple(2.11, epochs=6)), write(simple(3.04, epochs=6))
EVENT_2, EVENT_3 = b" " * 28 + b"4  %d\n", b">" + b" " * 30 + b"4  %d\n"
EPOCH_2, EPOCH_3 = b" 31  5 10  0  0  0.0000000  0  0\n", b"> 2031 05 10 00 00  0.0000000  0  0\n"
INTERVAL = labelled("    30.000", "INTERVAL").encode() + b"\n"
COMMENT = labelled("so it goes", "COMMENT").encode() + b"\n"


def types(version: float, names: tuple[str, ...]) -> bytes:
    listed = "".join(f"    {name}" if version < 3 else f" {name}" for name in names)
    count = f"{len(names):6d}" if version < 3 else f"G  {len(names):3d}"
    return labelled(count + listed, "# / TYPES OF OBSERV" if version < 3 else "SYS / # / OBS TYPES").encode() + b"\n"


def read_soon(data: bytes) -> Reading:
    """The reading, in the better of two tries where the first took long."""
    spent: list[float] = []
    while not spent or (len(spent) < 2 and spent[0] > LONGEST_S):
        begin = time.process_time()
        reading = formats.read_bytes(data, "hostile")
        spent.append(time.process_time() - begin)
    assert min(spent) < LONGEST_S
    return reading


CHANGES_2 = EVENT_2 % 1 + types(2.11, ("C1", "L1")) + EVENT_2 % 1 + types(2.11, ("L1", "C1", "P2", "L2", "S1", "S2"))
CHANGES_3 = EVENT_3 % 1 + types(3.04, ("C1C", "L1C")) + EVENT_3 % 1 + types(3.04, ("L1C", "C1C"))


@pytest.mark.parametrize(
    ("head", "again", "times", "told"),
    [
        (VERSION_3, EVENT_3 % 0, 100_000, ""),
        (VERSION_2, EVENT_2 % 0, 60_000, ""),
        (VERSION_3, EVENT_3 % 1 + COMMENT, 100_000, ""),
        (VERSION_2, EVENT_2 % 1 + COMMENT, 40_000, ""),
        (VERSION_3, EVENT_3 % 1 + INTERVAL, 20_000, "header changes"),
        (VERSION_2, EVENT_2 % 1 + INTERVAL, 20_000, "header changes"),
        (VERSION_3, CHANGES_3, 10_000, "header changes"),
        (VERSION_2, CHANGES_2, 10_000, "header changes"),
        (VERSION_3, INTERVAL + EPOCH_3, 20_000, "header changes"),
        (VERSION_2, INTERVAL + EPOCH_2, 20_000, "header changes"),
        (VERSION_3, b"what is this\n" + EPOCH_3, 100_000, "neither an epoch nor a satellite record"),
        (VERSION_2, b"what is this\n" + EPOCH_2, 40_000, "another number of lines"),
        (VERSION_2, EPOCH_2[:-2] + b"1G01\n", 110_000, "other lines behind them"),
    ],
    ids=["events 3", "events 2", "comments 3", "comments 2", "changes 3", "changes 2", "types 3", "types 2",
         "between epochs 3", "between epochs 2", "rubbish 3", "rubbish 2", "empty epochs 2"],
)  # fmt: skip
def test_what_stands_again_and_again(head: bytes, again: bytes, times: int, told: str) -> None:
    reading = read_soon(head + again * times)
    assert isinstance(reading.table, Signals)
    assert len(reading.table.times) in (5, 6)  # rubbish behind the last one may cost that epoch
    assert len(reading.problems) < 2 * rinex_layout.MOST_PROBLEMS
    assert (told in " ".join(problem.what for problem in reading.problems)) if told else reading.problems == ()


def test_a_day_with_a_comment_at_every_second_is_read_whole() -> None:
    """No limit meets what a receiver might do."""
    for version, mark in ((2.11, EVENT_2), (3.04, EVENT_3)):
        lines = write(simple(version, satellites=["G05"], epochs=4000, step_s=1.0)).split(b"\n")
        starts = (b" 31  5 10", b"> 2031")
        body = b"\n".join((mark % 1 + COMMENT + line) if line.startswith(starts) else line for line in lines)
        reading = formats.read_bytes(body, "talkative")
        assert isinstance(reading.table, Signals)
        assert len(reading.table.times) == 4000
        assert reading.problems == ()


def test_columns_that_return_to_their_first_meaning_share_one_state() -> None:
    back = types(3.04, ("C1C", "L1C", "C2W", "L2W", "S1C"))
    epochs = b"\n".join(VERSION_3.split(b"\n")[-17:])
    assert epochs.startswith(b"> 2031")
    later = epochs.replace(b" 05 10 00 0", b" 05 10 01 0")
    latest = epochs.replace(b" 05 10 00 0", b" 05 10 02 0")
    data = VERSION_3 + EVENT_3 % 1 + types(3.04, ("L1C", "C1C")) + later + EVENT_3 % 1 + back + latest
    table = formats.read_bytes(data, "to and fro").table
    assert isinstance(table, Signals)
    assert len(table.times) == 6 + 4 + 4
    first, mid, last = (table.values["C1C"][k, table.satellites == "G05"] for k in (2, 6, 10))
    assert first == last
    assert mid == table.values["L1C"][2, table.satellites == "G05"]


def test_a_hundred_meanings_of_the_columns_and_no_more(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(rinex_layout, "MOST_STATES", 5)
    codes = [f"C{band}{track}" for band in "12567" for track in "CWLX"]
    data = VERSION_3 + b"".join(EVENT_3 % 1 + types(3.04, (code,)) for code in codes)
    told = [problem.what for problem in formats.read_bytes(data, "moody").problems]
    assert told == ["more than 5 different lists of types in one file, as no receiver writes"]


@pytest.mark.parametrize(
    ("kind", "filling", "megabytes"),
    [("observations", b"\n", 15), ("observations", b">\n", 15), ("observations", b"G01\n", 15),
     ("navigation", b"\n", 15), ("navigation", b"G01\n", 15), ("navigation", b"> ION G05 LNAV\n", 15),
     ("orbits", b"\n", 15), ("biases", b"\n", 15), ("ionex", b"\n", 15)],
)  # fmt: skip
def test_millions_of_empty_lines_are_refused(kind: str, filling: bytes, megabytes: int) -> None:
    data = seeds()[kind][0].replace(b"EOF\n", b"") + filling * (megabytes * 2**20 // len(filling))
    tracemalloc.start()
    begin = time.process_time()
    try:
        with pytest.raises(FormatError, match="empty or of a few characters"):
            formats.read_bytes(data, "empty")
        assert tracemalloc.get_traced_memory()[1] < 3 * len(data)
    finally:
        tracemalloc.stop()
    assert time.process_time() - begin < LONGEST_S


def _sparse_orbits() -> bytes:
    head, _ = seeds()["orbits"][0].split(b"*  ", 1)
    line = b"P%c%02d  14957.102760  11470.363218 -19203.899808    176.750197\n"
    out = [head]
    for k in range(6_000):
        out.append(b"*  2024  3 %2d %2d %2d %11.8f\n" % (1 + k // 1440 % 28, k // 60 % 24, k % 60, k // 40_320))
        out.append(line % (b"GREC"[k % 4], 1 + k // 4 % 99))
    return b"".join(out)


@pytest.mark.parametrize(("make", "words"), [(_sparse_orbits, "nearly all without a position")])
def test_tables_that_would_be_nearly_empty_are_refused(make: Callable[[], bytes], words: str) -> None:
    with pytest.raises(FormatError, match=words):
        formats.read_bytes(make(), "sparse")
