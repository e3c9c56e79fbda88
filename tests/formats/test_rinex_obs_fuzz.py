"""Files changed at random: each ends in a table with problems or in a named error, soon and in little memory.

SKYLAG_FUZZ sets how many (2,000 when not said); `-m slow` does 200,000.
"""

import gzip
import os
import resource
import sys
import time
from collections import Counter
from collections.abc import Callable
from pathlib import Path

import hatanaka
import numpy as np
import pytest
from tests.conftest import open_data_folder
from tests.formats.test_rinex_obs_real import _cut
from tests.properties.rinex_text import labelled, simple, type_lines, write

from skylag import formats
from skylag.errors import FormatError
from skylag.tables import Signals

Change = Callable[[bytes, np.random.Generator], bytes]

LONGEST_S = 2.0
LARGEST_BYTES = 2**30


def seeds() -> list[bytes]:
    """Small files of each version, with events, plain and compact, and cuts of real files where there are any."""
    out = []
    for version in (2.11, 3.04, 4.00):
        text = simple(version, satellites=[f"G{n:02d}" for n in range(1, 15)], epochs=6)
        text.epochs[2].flag = 1
        text.extra = [labelled("  2 R01  1 R02 -4", "GLONASS SLOT / FRQ #"), labelled("    30.000", "INTERVAL")]
        lines = write(text).decode().split("\n")
        event = [labelled("A CHANGE", "COMMENT"), *type_lines(version, text.types)]
        mark = f"{'':28}4{len(event):3d}" if version < 3 else f">{'':30}4{len(event):3d}"
        starts = [k for k, line in enumerate(lines) if line.startswith((" 31  5 10", "> 2031"))]
        lines[starts[3] : starts[3]] = [mark, *event]
        plain = "\n".join(lines).encode()
        out += [plain, plain, plain, hatanaka.rnx2crx(plain), gzip.compress(plain)]
    for name in ("2020-177/obs/ESBC00DNK_R_20201770000_01D_30S_MO.crx.gz", "2021-001/obs/rovn0010.21d.gz"):
        path = open_data_folder() / name
        if path.is_file():
            out.append(_cut(hatanaka.decompress(path), 4, 1000))
    return out


def flip(data: bytes, rng: np.random.Generator) -> bytes:
    out = bytearray(data)
    for _ in range(int(rng.integers(1, 12))):
        out[rng.integers(len(out))] ^= 1 << int(rng.integers(8))
    return bytes(out)


def overwrite(data: bytes, rng: np.random.Generator) -> bytes:
    words = (
        b"999",
        b"-99",
        b"\0\0\0",
        b">",
        b"\n",
        b"  4999",
        b"9999999999",
        b"G",
        b" ",
        b"\xff\xfe",
        b"\r",
        b".",
        b"0",
    )
    out = bytearray(data)
    for _ in range(int(rng.integers(1, 5))):
        word = words[rng.integers(len(words))]
        at = int(rng.integers(len(out)))
        out[at : at + len(word)] = word
    return bytes(out)


def cut(data: bytes, rng: np.random.Generator) -> bytes:
    return data[: rng.integers(len(data))]


def hole(data: bytes, rng: np.random.Generator) -> bytes:
    a, b = sorted(int(k) for k in rng.integers(len(data), size=2))
    return (
        data[:a] + data[b:] if rng.random() < 0.3 else data[:a] + data[min(a + int(rng.integers(1, 200)), len(data)) :]
    )


def insert(data: bytes, rng: np.random.Generator) -> bytes:
    at = int(rng.integers(len(data)))
    return data[:at] + rng.integers(0, 256, int(rng.integers(1, 100)), dtype=np.uint8).tobytes() + data[at:]


def _by_lines(data: bytes, rng: np.random.Generator, what: str) -> bytes:
    lines = data.split(b"\n")
    a, b = (int(k) for k in rng.integers(len(lines), size=2))
    if what == "swap":
        lines[a], lines[b] = lines[b], lines[a]
    elif what == "drop":
        del lines[a]
    elif what == "repeat":
        lines[b:b] = [lines[a]] * int(rng.integers(1, 50))
    elif what == "shuffle":
        lines = [lines[k] for k in rng.permutation(len(lines))]
    elif what == "shift":
        lines[a] = b" " * int(rng.integers(1, 20)) + lines[a] if rng.random() < 0.5 else lines[a][rng.integers(1, 20) :]
    elif what == "number":  # another figure in a line's numbers: counts, years, flags, columns
        figures = [k for k, c in enumerate(lines[a]) if 48 <= c <= 57]
        for k in figures[: int(rng.integers(0, 12))]:
            lines[a] = lines[a][:k] + bytes([48 + int(rng.integers(10))]) + lines[a][k + 1 :]
    return b"\n".join(lines)


def swap(data: bytes, rng: np.random.Generator) -> bytes:
    return _by_lines(data, rng, "swap")


def drop(data: bytes, rng: np.random.Generator) -> bytes:
    return _by_lines(data, rng, "drop")


def repeat(data: bytes, rng: np.random.Generator) -> bytes:
    return _by_lines(data, rng, "repeat")


def shuffle(data: bytes, rng: np.random.Generator) -> bytes:
    return _by_lines(data, rng, "shuffle")


def shift(data: bytes, rng: np.random.Generator) -> bytes:
    return _by_lines(data, rng, "shift")


def number(data: bytes, rng: np.random.Generator) -> bytes:
    return _by_lines(data, rng, "number")


def endless_header(data: bytes, rng: np.random.Generator) -> bytes:
    at = data.find(b"\n") + 1
    return data[:at] + (labelled("and so on", "COMMENT").encode() + b"\n") * int(rng.integers(1, 500)) + data[at:]


CHANGES: list[Change] = [flip, overwrite, cut, hole, insert, swap, drop, repeat, shuffle, shift, number, number, number,
                         endless_header]  # fmt: skip


def run(count: int, seed: int, tmp_path: Path) -> Counter[str]:
    """So many changed files through the door; how they ended."""
    rng = np.random.default_rng(seed)
    files = seeds()
    place = tmp_path / "changed"
    ends: Counter[str] = Counter()
    for k in range(count):
        data = files[rng.integers(len(files))]
        names = []
        for _ in range(int(rng.choice([1, 1, 1, 2, 4]))):
            change = CHANGES[rng.integers(len(CHANGES))]
            names.append(change.__name__)
            if data:
                data = change(data, rng)
        begin = time.process_time()
        try:
            reading = formats.read_bytes(data, str(place), thin_to_s=60.0 if k % 7 == 0 else None)
        except FormatError as error:
            ends["error"] += 1
            assert error.details["path"] == str(place), names
            assert isinstance(error.details["line"], int), names
        except Exception as error:
            kept = tmp_path / "culprit"
            kept.write_bytes(data)
            pytest.fail(f"case {k} of seed {seed} ({', '.join(names)}) raised {error!r}; its input is {kept}")
        else:
            ends["problems" if reading.problems else "clean"] += 1
            if isinstance(reading.table, Signals):
                assert len(reading.table.times) > 0
                assert not any(np.isinf(v).any() for v in reading.table.values.values())
            assert len(reading.problems) < 300, names
            assert all(p.path == str(place) and p.what and p.done for p in reading.problems), names
        spent = time.process_time() - begin
        assert spent < LONGEST_S, f"case {k} of seed {seed} took {spent:.1f} s"
    return ends


def _peak_bytes() -> int:
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return peak if sys.platform == "darwin" else peak * 1024


def test_changed_files_end_well(tmp_path: Path) -> None:
    count = int(os.environ.get("SKYLAG_FUZZ", "2000"))
    before = _peak_bytes()
    ends = run(count, 20310510, tmp_path)
    print(dict(ends))
    assert sum(ends.values()) == count
    assert min(ends["error"], ends["problems"], ends["clean"]) > count // 50, f"one-sided changes: {ends}"
    assert _peak_bytes() - before < LARGEST_BYTES


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(20))
def test_two_hundred_thousand_changed_files_end_well(seed: int, tmp_path: Path) -> None:
    ends = run(10_000, seed, tmp_path)
    assert sum(ends.values()) == 10_000
    assert _peak_bytes() < 2 * LARGEST_BYTES
