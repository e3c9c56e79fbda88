"""What a file is, from its first few kilobytes: kind, fingerprint, and the day of its first observation.

Lets a folder of hundreds of files be sorted without decoding them.  Never reads a measurement.
"""

import bz2
import contextlib
import io
import zipfile
import zlib
from pathlib import Path
from typing import Any, NamedTuple

import ncompress
import numpy as np

from skylag.errors import FormatError
from skylag.formats import kind_of, mark_of

_PEEK = 65_536
_DEEPEST = 4
_PEEK_PACKED = 2**20  # of what lies in a zip: a block of bzip2 must be whole
_DAMAGED = (OSError, ValueError, EOFError, RuntimeError, zlib.error, zipfile.BadZipFile)
_MOST_MEMBERS = 100  # of a zip, that are looked into
_INVENTED = b"INVENTED DATA"  # a comment in every observation file of the sample days


class Glance(NamedTuple):
    """What a file is.

    kind as `formats.kind_of` says, or "empty"; mark: name, sha256, bytes; day: of the first observation, or None;
    invented: the header says that the data are invented; marker: the name of the receiver's place that the header of
    an observation file tells, or "".
    """

    kind: str
    mark: dict[str, Any]
    day: np.datetime64 | None
    invented: bool = False
    marker: str = ""


def glance(path: Path) -> Glance:
    """Look at a file without decoding it.  Raises FormatError when it cannot be opened."""
    try:
        packed = path.read_bytes()
    except OSError as error:
        raise FormatError(
            f"{path}: cannot be opened: {error.strerror or error}; check that it is there and may be read",
            path=str(path), line=0,
        ) from error  # fmt: skip
    mark = mark_of(packed, path.name)
    if not packed.strip():
        return Glance("empty", mark, None)
    try:
        head = _head(packed)
    except _DAMAGED:
        return Glance("unknown", mark, None)
    kind = kind_of(head)
    observed = kind == "observations"
    if not observed:
        return Glance(kind, mark, None)
    return Glance(kind, mark, _first_day(head), _INVENTED in head, _marker(head))


def _head(data: bytes) -> bytes:
    """The beginning of the text within all wrappers."""
    for _ in range(_DEEPEST):
        if data[:2] == b"\x1f\x8b":
            data = zlib.decompressobj(wbits=31).decompress(data, _PEEK)
        elif data[:3] == b"BZh":
            data = bz2.BZ2Decompressor().decompress(data, _PEEK)
        elif data[:2] == b"\x1f\x9d":
            data = _compress_head(data)
        elif data[:2] == b"PK":
            data = _zip_head(data)
        else:
            break
    return data


def _zip_head(data: bytes) -> bytes:
    """The beginning of the file in a zip; of several, of the first of observations, else the first that is known."""
    heads: list[bytes] = []
    with zipfile.ZipFile(io.BytesIO(data)) as folder:
        entries = [entry for entry in folder.infolist() if not entry.is_dir()]
        for entry in entries[:_MOST_MEMBERS]:
            with folder.open(entry) as member:
                head = member.read(_PEEK_PACKED)
            if len(entries) == 1:
                return head
            if head[:2] != b"PK":
                with contextlib.suppress(*_DAMAGED):
                    heads.append(_head(head))
            if heads and kind_of(heads[-1]) == "observations":
                return heads[-1]
    known = [head for head in heads if kind_of(head) != "unknown"]
    return (known or heads or [b""])[0]


def _first_day(head: bytes) -> np.datetime64 | None:
    """The day of the header's TIME OF FIRST OBS."""
    for line in head.splitlines():
        if line[60:80].strip() == b"TIME OF FIRST OBS":
            try:
                year, month, day = (int(line[start : start + 6]) for start in (0, 6, 12))
                return np.datetime64(f"{year:04d}-{month:02d}-{day:02d}", "D")
            except ValueError:
                return None
        if line[60:80].strip() == b"END OF HEADER":
            return None
    return None


def _marker(head: bytes) -> str:
    """The header's MARKER NAME."""
    for line in head.splitlines():
        label = line[60:80].strip()
        if label in (b"MARKER NAME", b"END OF HEADER"):
            return line[:60].decode("ascii", "replace").strip() if label == b"MARKER NAME" else ""
    return ""


class _Peek(io.BytesIO):
    """A buffer that takes a beginning and no more, so that nothing can swell in it."""

    def write(self, part: bytes, /) -> int:  # type: ignore[override]
        if self.tell() >= _PEEK:
            raise _Enough
        return super().write(part[:_PEEK])


class _Enough(Exception):
    """The beginning is there."""


def _compress_head(data: bytes) -> bytes:
    """The beginning of a compress (.Z) file."""
    out = _Peek()
    with contextlib.suppress(_Enough):
        ncompress.decompress(data, out)
    return out.getvalue()
