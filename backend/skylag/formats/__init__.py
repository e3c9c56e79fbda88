"""Text to tables and back: the one door through which files come in.

`read` opens a file, takes it out of whatever it is wrapped in, tells from the content what it is, and hands it to the
parser of that format.  Nothing else in the program opens a measurement file or decompresses one.  Never computes with
what it read, and never trusts the name of a file.
"""

import hashlib
import importlib
import re
from collections.abc import Collection, Mapping
from pathlib import Path
from typing import Any

from skylag.errors import FormatError, Refused
from skylag.formats.joining import merge, thin, together
from skylag.formats.wrappers import BYTE_ORDER_MARK, LARGEST_TEXT, decode, is_hatanaka, members, unpack
from skylag.tables import Ephemerides, Problem, Reading

__all__ = ["fingerprint", "kind_of", "mark_of", "merge", "read", "read_bytes", "thin"]

# What a file can be, and which module parses it: each has parse(data, name) -> Reading.
PARSERS = {
    "observations": "rinex_obs",
    "navigation": "rinex_nav",
    "orbits": "sp3",
    "biases": "biases",
    "ionex": "ionex",
    "indices": "indices",
}

_FEW_LINES, _SHORTEST_MEAN = 2**16, 30  # texts of more lines than this have longer lines than that in the mean

_MOST_LISTED = 400  # problems of all files in a zip

_YEAR_FIRST = re.compile(rb"^(19|20)\d\d +\d{1,2} +\d{1,2} ")


def read(
    path: str | Path,
    *,
    wanted: Mapping[str, Collection[str]] | None = None,
    thin_to_s: float | None = None,
) -> Reading:
    """The table a file holds, the problems met, and facts of its header.

    path       a file of any known format, plain or wrapped (.gz, .Z, .bz2, .zip, Hatanaka); a zip may hold several
               pieces of one receiver's observations, or several navigation files
    wanted     for observations: system letter -> code observables to keep, with the phases and strengths of their
               bands; None keeps all
    thin_to_s  for observations: keep the epochs on multiples of so many seconds
    Raises FormatError when the file cannot be read, is empty, or is nothing this program knows; a bad line only
    becomes a problem of the reading.
    """
    return read_bytes(_bytes_of(Path(path)), str(path), wanted=wanted, thin_to_s=thin_to_s)


def read_bytes(
    packed: bytes,
    name: str,
    *,
    wanted: Mapping[str, Collection[str]] | None = None,
    thin_to_s: float | None = None,
    only: Collection[str] | None = None,
    largest: int = LARGEST_TEXT,
) -> Reading:
    """The same for bytes that are already here, as of a file sent in; `name` stands in messages and problems.

    only     kinds that are wanted: anything else is refused before its parser, or its decoder, sees it
    largest  so many bytes of text are read, packed or not
    """
    short = Path(name).name
    if not packed[:1000].strip() and not packed.strip():
        raise FormatError(f"{short}: the file is empty; fetch it again", path=name, line=0)
    pieces = members(packed, name, largest)
    if len(pieces) > 1:
        if only is not None:
            raise FormatError(f"{short}: a zip of {len(pieces)} files; give the one that is meant", path=name, line=0)
        del packed
        return _read_members(pieces, name, wanted, thin_to_s)
    found = unpack(packed, name, largest)
    del packed, pieces
    kind = kind_of(found.data)
    if only is not None and kind not in ("unknown", *only):
        raise FormatError(f"{short}: holds {kind}, and {' or '.join(only)} is needed", path=name, line=1)
    if len(found.data) > largest:
        raise FormatError(f"{short}: more than {largest} bytes of text", path=name, line=0)
    if is_hatanaka(found.data):
        found = decode(found, name)
        kind = kind_of(found.data)
    data, wrapping = found
    del found
    lines = 0 if kind == "observations" else data.count(b"\n")
    if lines > max(_FEW_LINES, len(data) // _SHORTEST_MEAN):
        raise FormatError(
            f"{short}: nearly all of {lines} lines are empty or of a few characters; fetch it again",
            path=name, line=0,
        )  # fmt: skip
    if kind == "unknown":
        beginning = data[:60].split(b"\n")[0].decode("latin-1")
        raise FormatError(
            f"{short}: begins with {beginning!r}, which is no format known here; RINEX observations and navigation, "
            "SP3, Bias-SINEX, monthly code biases, IONEX and daily indices are",
            path=name, line=1,
        )  # fmt: skip
    parser = importlib.import_module(f"skylag.formats.{PARSERS[kind]}")
    choices: dict[str, Any] = {"wanted": wanted, "thin_to_s": thin_to_s} if kind == "observations" else {}
    reading: Reading = parser.parse(data, name, **choices)
    return Reading(reading.table, (*wrapping, *reading.problems), {**reading.header, "kind": kind})


def _read_members(
    pieces: list[tuple[str, bytes, list[Problem]]],
    name: str,
    wanted: Mapping[str, Collection[str]] | None,
    thin_to_s: float | None,
) -> Reading:
    """The files of a zip as one table: pieces of one receiver's observations, or else navigation files.

    What is neither, or stands beside observations, is left out and told.
    """
    readings: list[Reading] = []
    problems: list[Problem] = []
    for member, data, trouble in sorted(pieces, key=lambda piece: piece[0]):
        where = f"{name}/{member}"
        problems += trouble
        try:
            if members(data, where)[1:]:
                raise FormatError(f"{where}: a zip of several files within a zip", path=where, line=0)
            readings.append(read_bytes(data, where, wanted=wanted, thin_to_s=thin_to_s))
        except FormatError as error:
            problems.append(Problem(where, int(error.details.get("line", 0)), error.message, "left the file out"))
    kinds = {reading.header["kind"] for reading in readings}
    kind = "observations" if "observations" in kinds else "navigation"
    chosen = [reading for reading in readings if reading.header["kind"] == kind]
    if not chosen:
        raise FormatError(
            f"{name}: of the {len(pieces)} files in the zip none holds observations or navigation data that can be "
            "read; unpack it and give the files",
            path=name, line=0,
        )  # fmt: skip
    for other in sorted(kinds - {kind}):
        problems.append(Problem(name, 0, f"the zip holds {other} beside {kind}", "left out; unpack it to use both"))
    for reading in chosen:
        problems += reading.problems
    if len(problems) > _MOST_LISTED:
        rest = len(problems) - _MOST_LISTED
        problems[_MOST_LISTED:] = [
            Problem(name, 0, f"{rest} more problems in the files of the zip", "as told of others")
        ]
    header = {**chosen[0].header, "pieces": len(chosen)}
    if kind == "navigation":
        return Reading(together([r.table for r in chosen if isinstance(r.table, Ephemerides)]), tuple(problems), header)
    try:
        return Reading(merge(chosen), tuple(problems), header)
    except Refused as error:
        raise FormatError(f"{name}: {error.message}; unpack the zip and give the files", path=name, line=0) from error


def kind_of(data: bytes) -> str:
    """What a text is, by its first lines: a key of PARSERS, or "unknown"."""
    if is_hatanaka(data):
        return "observations"
    head = data[:4096].removeprefix(BYTE_ORDER_MARK)
    lines = head.splitlines()[:40]
    for line in lines:
        label = line[60:80].strip()
        if label == b"RINEX VERSION / TYPE":
            letter = line[20:21].upper()
            if letter == b"O":
                return "observations"
            # RINEX 2 has one kind per constellation (N, G, H; L and others in later practice), 3 and 4 have N for all.
            return "navigation" if letter in b"NGHLJCQPE" and letter else "unknown"
        if label == b"IONEX VERSION / TYPE":
            return "ionex"
    if head[:1] == b"#" and head[1:2] in b"abcd" and head[2:3] in (b"P", b"V"):
        return "orbits"
    if head[:5] == b"%=BIA":
        return "biases"
    if b"DCB SOLUTION" in head or b"CODE BIASES FOR" in head:
        return "biases"
    for line in lines:
        if not line.startswith(b"#"):
            return "indices" if _YEAR_FIRST.match(line) else "unknown"
    return "indices" if b"ap" in head.lower() and b"kp" in head.lower() else "unknown"


def fingerprint(path: str | Path) -> dict[str, Any]:
    """Which file it was: name, sha256 of its bytes as they lie on disk, and how many there are."""
    return mark_of(_bytes_of(Path(path)), Path(path).name)


def mark_of(packed: bytes, name: str) -> dict[str, Any]:
    """The same of bytes already read: name, sha256, and how many there are."""
    return {"name": name, "sha256": hashlib.sha256(packed).hexdigest(), "bytes": len(packed)}


def _bytes_of(path: Path) -> bytes:
    try:
        return path.read_bytes()
    except OSError as error:
        raise FormatError(
            f"{path.name}: cannot be opened: {error.strerror or error}; check that the file is there and may be read",
            path=str(path), line=0,
        ) from error  # fmt: skip
