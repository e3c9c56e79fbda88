"""Ways a file may come to harm, each a function of bytes and a random generator: for campaigns of changed files.

Knows nothing of any format beyond what its lines look like, and shares nothing with the readers.
"""

import bz2
import gzip
import io
import re
import zipfile
from collections.abc import Callable

import hatanaka
import ncompress
import numpy as np

Change = Callable[[bytes, np.random.Generator], bytes]

_WORDS = (b"999", b"-99", b"\0\0\0", b">", b"\n", b"  4999", b"9999999999", b"G", b" ", b"\xff\xfe", b"\r", b".", b"0",
          b"nan", b"inf", b"1E999", b"-0.0", b"*", b"+", b"%", b"EOF", b"END OF HEADER")  # fmt: skip
_YEARS = (b"0000", b"0001", b"1601", b"1979", b"2038", b"2262", b"2263", b"9999", b"-001", b"    ")
_LARGEST = 2 * 2**20  # bytes a change may swell a text to


def flip(data: bytes, rng: np.random.Generator) -> bytes:
    """Some bits."""
    out = bytearray(data)
    for _ in range(int(rng.integers(1, 12))):
        out[rng.integers(len(out))] ^= 1 << int(rng.integers(8))
    return bytes(out)


def overwrite(data: bytes, rng: np.random.Generator) -> bytes:
    """A few words that mean something somewhere."""
    out = bytearray(data)
    for _ in range(int(rng.integers(1, 5))):
        word = _WORDS[rng.integers(len(_WORDS))]
        at = int(rng.integers(len(out)))
        out[at : at + len(word)] = word
    return bytes(out)


def cut(data: bytes, rng: np.random.Generator) -> bytes:
    """The end is missing."""
    return data[: rng.integers(len(data))]


def hole(data: bytes, rng: np.random.Generator) -> bytes:
    """Something in the middle is missing."""
    a, b = sorted(int(k) for k in rng.integers(len(data), size=2))
    if rng.random() < 0.3:
        return data[:a] + data[b:]
    return data[:a] + data[min(a + int(rng.integers(1, 200)), len(data)) :]


def insert(data: bytes, rng: np.random.Generator) -> bytes:
    """Bytes that were never there."""
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
    elif what == "number":  # other figures in a line's numbers: counts, years, flags, columns
        figures = [k for k, c in enumerate(lines[a]) if 48 <= c <= 57]
        for k in figures[: int(rng.integers(0, 12))]:
            lines[a] = lines[a][:k] + bytes([48 + int(rng.integers(10))]) + lines[a][k + 1 :]
    return b"\n".join(lines)


def swap(data: bytes, rng: np.random.Generator) -> bytes:
    """Two lines change places."""
    return _by_lines(data, rng, "swap")


def drop(data: bytes, rng: np.random.Generator) -> bytes:
    """A line is missing."""
    return _by_lines(data, rng, "drop")


def repeat(data: bytes, rng: np.random.Generator) -> bytes:
    """A line stands many times."""
    return _by_lines(data, rng, "repeat")


def shuffle(data: bytes, rng: np.random.Generator) -> bytes:
    """All lines in another order."""
    return _by_lines(data, rng, "shuffle")


def shift(data: bytes, rng: np.random.Generator) -> bytes:
    """A line begins some columns early or late."""
    return _by_lines(data, rng, "shift")


def number(data: bytes, rng: np.random.Generator) -> bytes:
    """Other figures in a line."""
    return _by_lines(data, rng, "number")


def huge_count(data: bytes, rng: np.random.Generator) -> bytes:
    """A whole number becomes as large as its column holds, or larger, or negative."""
    found = list(re.finditer(rb"(?<![\d.])\d{1,4}(?![\d.])", data))
    if not found:
        return data
    at = found[rng.integers(len(found))]
    width = at.end() - at.start()
    word = (b"9" * width, b"9" * (width + 3), b"-" + b"9" * max(width - 1, 1))[rng.integers(3)]
    return data[: at.start()] + word + data[at.end() if len(word) <= width else at.start() + len(word) :]


def absurd_year(data: bytes, rng: np.random.Generator) -> bytes:
    """One year, or all of them, cannot be."""
    year = _YEARS[rng.integers(len(_YEARS))]
    found = [m.start() for m in re.finditer(rb"(?<!\d)(?:19|20)\d\d(?!\d)", data)]
    if not found:
        return data
    chosen = found if rng.random() < 0.2 else [found[rng.integers(len(found))]]
    out = bytearray(data)
    for at in chosen:
        out[at : at + 4] = year
    return bytes(out)


def endless_header(data: bytes, rng: np.random.Generator) -> bytes:
    """The first or another early line goes on and on; seldom without an end."""
    lines = data.split(b"\n")
    at = int(rng.integers(1, max(min(30, len(lines)), 2)))
    line = f"{'and so on':<60}COMMENT".encode() if rng.random() < 0.5 else lines[min(at, len(lines) - 1)]
    times = int(rng.integers(1, 500)) if rng.random() < 0.97 else 30_000
    if rng.random() < 0.1:
        lines = [text for text in lines if b"END OF HEADER" not in text]
    lines[at:at] = [line] * min(times, _LARGEST // (len(line) + 1))
    return b"\n".join(lines)


def block_again(data: bytes, rng: np.random.Generator) -> bytes:
    """Some lines stand hundreds of times, in their order."""
    lines = data.split(b"\n")
    a = int(rng.integers(len(lines)))
    block = lines[a : a + int(rng.integers(1, 8))]
    times = int(rng.integers(2, 2000 if rng.random() < 0.1 else 60))
    size = sum(len(line) + 1 for line in block)
    lines[a:a] = block * min(times, _LARGEST // size)
    return b"\n".join(lines)


TEXT_CHANGES: tuple[Change, ...] = (
    flip, overwrite, cut, hole, insert, swap, drop, repeat, shuffle, shift, number, number, number, huge_count,
    huge_count, absurd_year, endless_header, block_again,
)  # fmt: skip
BYTE_CHANGES: tuple[Change, ...] = (flip, flip, overwrite, cut, hole, insert)


# ------------------------------------------------------------------------------------------------ wrappers


def compressed(data: bytes) -> bytes:
    """As `compress` does (.Z)."""
    out = io.BytesIO()
    ncompress.compress(data, out)
    return out.getvalue()


def zipped(data: bytes, times: int = 1, level: int = 6) -> bytes:
    """A zip of one or several members."""
    out = io.BytesIO()
    with zipfile.ZipFile(out, "w", zipfile.ZIP_DEFLATED, compresslevel=level) as folder:
        for k in range(times):
            folder.writestr(f"piece{k}.txt", data)
    return out.getvalue()


WRAPPERS: tuple[Callable[[bytes], bytes], ...] = (
    lambda data: gzip.compress(data, 1), compressed, bz2.compress, zipped, lambda data: zipped(data, 3),
    lambda data: gzip.compress(bz2.compress(data), 1),
)  # fmt: skip


def compact(data: bytes) -> bytes:
    """Compact RINEX of whole observation text."""
    return bytes(hatanaka.rnx2crx(data))


def traps(head: bytes) -> list[bytes]:
    """Small wrappers that swell a thousand times and more: of blanks, of line ends, of one record again and again."""
    fillings = [b" ", b"\n", b"\0", b"> 2031 05 10 00 00  0.0000000  0  0\n", b"G01\n", b">\n",
                b" 31  5 10  0  0  0.0000000  0  1G01\n"]  # fmt: skip
    out = [gzip.compress(head + filling * (12 * 2**20 // len(filling)), 1) for filling in fillings]
    blanks = b" " * (100 * 2**20)
    out += [bz2.compress(blanks[: 2**24]), gzip.compress(gzip.compress(blanks, 1)), zipped(blanks[: 2**18], 300)]
    return out
