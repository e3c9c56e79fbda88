"""What a file is wrapped in: gzip, compress, bzip2, zip, Hatanaka compression; bytes in, text out.

Told from the content, never from the name; wrappers within wrappers are opened too.  A wrapper that is cut short gives
what it held up to there, and a problem.  A wrapper that swells beyond reason is refused before it fills the memory.
Never opens a file.
"""

import bz2
import io
import re
import subprocess
import sys
import warnings
import zipfile
import zlib
from importlib import resources
from typing import NamedTuple

import hatanaka
import ncompress

from skylag.errors import FormatError
from skylag.tables import Problem

BYTE_ORDER_MARK = b"\xef\xbb\xbf"  # some editors write it
LARGEST_TEXT = 2 * 2**30  # bytes; a day of one-second data of five constellations is about half of it
_SWELLS = 100  # times: text written by receivers shrinks 3 to 30 times, a trap a thousand times and more
_HARMLESS = 16 * 2**20  # bytes, below which nobody asks how much it swelled
_AT_ONCE = 64 * 2**20  # bytes taken out of a wrapper at once
_MOST_MEMBERS = 1000  # of a zip: a day of pieces of fifteen minutes has 96
_ZIP_MARKS = (b"PK\x03\x04", b"PK\x05\x06")
_DEEPEST = 4  # wrappers within wrappers


class Unwrapped(NamedTuple):
    """The text, and what was wrong with its wrapping."""

    data: bytes
    problems: list[Problem]


def unwrap(data: bytes, name: str, largest: int = LARGEST_TEXT) -> Unwrapped:
    """The text within all wrappers.

    Raises FormatError for a wrapper that holds nothing, more than can be real or than `largest` bytes, or more than one
    file (`members` first).
    """
    found = unpack(data, name, largest)
    return decode(found, name) if is_hatanaka(found.data) else found


def decode(found: Unwrapped, name: str) -> Unwrapped:
    """Plain RINEX of unpacked Compact RINEX."""
    problems = list(found.problems)
    return Unwrapped(_hatanaka(found.data, name, problems), problems)


def unpack(data: bytes, name: str, largest: int = LARGEST_TEXT) -> Unwrapped:
    """The same, but Compact RINEX is left as it is: what a file is can be seen before its decoder runs."""
    problems: list[Problem] = []
    for _ in range(_DEEPEST):
        data = data.removeprefix(BYTE_ORDER_MARK)
        if data[:2] == b"\x1f\x8b":
            data = _gzip(data, name, problems, largest)
        elif data[:2] == b"\x1f\x9d":
            data = _compress(data, name, largest)
        elif data[:3] == b"BZh":
            data = _bzip2(data, name, problems, largest)
        elif data[:4] in _ZIP_MARKS:
            data = _zip(data, name, problems, largest)
        else:
            return Unwrapped(_without_filling(data, name, problems), problems)
    raise FormatError(f"{name}: more than {_DEEPEST} wrappers within each other; unpack it by hand", path=name, line=0)


def _without_filling(data: bytes, name: str, problems: list[Problem]) -> bytes:
    """The text without what stands behind it: an end mark of old systems, zeros of a block that was never filled."""
    if data[-64:].rstrip(b"\r\n")[-1:] not in (b"\x1a", b"\0"):
        return data
    text = data.rstrip(b"\x1a\0\r\n")
    problems.append(Problem(name, 0, f"{len(data) - len(text)} filling bytes behind the text", "left out"))
    return text + b"\n"


def is_hatanaka(data: bytes) -> bool:
    """Whether the text is a Compact RINEX file (Hatanaka 2008), version 1.0 or 3.0."""
    return b"CRINEX VERS   / TYPE" in data[:100]


def _check_size(size: int, packed: int, name: str, largest: int) -> None:
    if size > largest or (size > _HARMLESS and size > _SWELLS * packed):
        raise FormatError(
            f"{name}: {packed} bytes swell to more than {size}; no observation file does, and at most {largest} "
            "are read; split it by hours if it is real",
            path=name, line=0,
        )  # fmt: skip


def _cut(name: str, what: str, got: int, problems: list[Problem]) -> None:
    if not got:
        raise FormatError(f"{name}: the {what} holds nothing that can be unpacked; fetch it again", path=name, line=0)
    problems.append(Problem(name, 0, f"the {what} is cut short or damaged", f"took the {got} bytes before that"))


def _gzip(data: bytes, name: str, problems: list[Problem], largest: int) -> bytes:
    parts: list[bytes] = []
    size, rest = 0, data
    while rest[:2] == b"\x1f\x8b":
        member = zlib.decompressobj(wbits=31)
        waiting = rest
        try:
            while not member.eof:
                part = member.decompress(waiting, _AT_ONCE)
                waiting = member.unconsumed_tail
                parts.append(part)
                size += len(part)
                _check_size(size, len(data), name, largest)
                if not part and not waiting and not member.eof:
                    break
        except zlib.error:
            _cut(name, "gzip file", size, problems)
            break
        if not member.eof:
            _cut(name, "gzip file", size, problems)
            break
        rest = member.unused_data.lstrip(b"\0")
    return b"".join(parts) if len(parts) != 1 else parts[0]


def _bzip2(data: bytes, name: str, problems: list[Problem], largest: int) -> bytes:
    parts: list[bytes] = []
    size, rest = 0, data
    while rest[:3] == b"BZh":
        member = bz2.BZ2Decompressor()
        waiting = rest
        try:
            while not member.eof:
                part = member.decompress(waiting, _AT_ONCE)
                waiting = b""
                parts.append(part)
                size += len(part)
                _check_size(size, len(data), name, largest)
                if not part and member.needs_input:
                    break
        except (OSError, ValueError):
            _cut(name, "bzip2 file", size, problems)
            break
        if not member.eof:
            _cut(name, "bzip2 file", size, problems)
            break
        rest = member.unused_data
    return b"".join(parts)


class _Bounded(io.BytesIO):
    """A buffer that refuses to grow beyond reason."""

    def __init__(self, packed: int, name: str, largest: int) -> None:
        super().__init__()
        self.packed, self.name, self.largest = packed, name, largest

    def write(self, part: bytes, /) -> int:  # type: ignore[override]
        _check_size(self.tell() + len(part), self.packed, self.name, self.largest)
        return super().write(part)


def _compress(data: bytes, name: str, largest: int) -> bytes:
    out = _Bounded(len(data), name, largest)
    try:
        ncompress.decompress(data, out)
    except FormatError:
        raise
    except Exception as error:
        raise FormatError(
            f"{name}: the compress (.Z) file is damaged: {error}; fetch it again", path=name, line=0
        ) from error
    return out.getvalue()


def members(data: bytes, name: str, largest: int = LARGEST_TEXT) -> list[tuple[str, bytes, list[Problem]]]:
    """The files in a zip, with their names within it and what was wrong with them; none where it is no zip.

    All of them together may swell no more than one file may.  Raises FormatError for a zip that holds nothing, more
    than can be real, or cannot be unpacked.
    """
    if data[:4] not in _ZIP_MARKS:
        return []
    out: list[tuple[str, bytes, list[Problem]]] = []
    size = 0
    try:
        with zipfile.ZipFile(io.BytesIO(data)) as folder:
            entries = [entry for entry in folder.infolist() if not entry.is_dir()]
            if not 0 < len(entries) <= _MOST_MEMBERS:
                raise FormatError(
                    f"{name}: the zip file holds {len(entries)} files; from 1 to {_MOST_MEMBERS} can be read",
                    path=name, line=0,
                )  # fmt: skip
            for entry in entries:
                problems: list[Problem] = []
                where = name if len(entries) == 1 else f"{name}/{entry.filename}"
                parts: list[bytes] = []
                got = 0
                with folder.open(entry) as member:
                    try:
                        while part := member.read(_AT_ONCE // 16):
                            parts.append(part)
                            got += len(part)
                            _check_size(size + got, len(data), name, largest)
                    except (zipfile.BadZipFile, zlib.error, EOFError):
                        if len(entries) == 1 or got:
                            _cut(where, "zip file", got, problems)
                        else:
                            problems.append(Problem(where, 0, "cannot be unpacked", "left out"))
                size += got
                out.append((entry.filename, b"".join(parts), problems))
    except (zipfile.BadZipFile, zlib.error, RuntimeError, OSError, ValueError) as error:
        raise FormatError(f"{name}: the zip file cannot be unpacked: {error}", path=name, line=0) from error
    return out


def _zip(data: bytes, name: str, problems: list[Problem], largest: int) -> bytes:
    found = members(data, name, largest)
    if len(found) != 1:
        raise FormatError(
            f"{name}: a zip file of {len(found)} files within another wrapper; unpack it and give the files",
            path=name, line=0,
        )  # fmt: skip
    problems += found[0][2]
    return found[0][1]


def _hatanaka(data: bytes, name: str, problems: list[Problem]) -> bytes:
    """Plain RINEX.  Where the decoder gives up, what it can follow, up to where it can follow it."""
    with warnings.catch_warnings(record=True) as said:
        warnings.simplefilter("always")
        try:
            text: bytes = hatanaka.crx2rnx(data)
        except hatanaka.HatanakaException as error:
            text = _salvaged(data)
            if b"END OF HEADER" not in text:
                raise FormatError(
                    f"{name}: the Hatanaka compression cannot be undone: {_one_line(str(error))}; fetch the file again",
                    path=name, line=0,
                ) from error  # fmt: skip
            what = f"the Hatanaka compression is damaged or cut short: {_one_line(str(error))}"
            line = re.search(r"line (\d+)", str(error))
            problems.append(Problem(name, int(line[1]) if line else 0, what, "took what can be followed"))
    for warning in said[:20]:
        problems.append(Problem(name, 0, f"Hatanaka decoder: {_one_line(str(warning.message))}", "kept the rest"))
    return text


def _salvaged(data: bytes) -> bytes:
    """What the library's decoder wrote before it gave up, told to skip epochs that it cannot follow.

    The library itself throws this away, so its program is called without it.
    """
    program = "crx2rnx.exe" if sys.platform == "win32" else "crx2rnx"
    with resources.as_file(resources.files("hatanaka.bin") / program) as decoder:
        try:
            done = subprocess.run([decoder, "-", "-s"], input=data, capture_output=True, timeout=60, check=False)
        except subprocess.TimeoutExpired:
            return b""
    return done.stdout


def _one_line(sentence: str) -> str:
    return " ".join(sentence.split())[:200]
