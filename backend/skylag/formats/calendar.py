"""Spans of time as an iCalendar file (RFC 5545), to be taken into any calendar.  Written only, never read."""

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from skylag.timescales import gps_to_utc


@dataclass(frozen=True)
class Entry:
    """A span: start, end in GPS time, a title, a text, a place's name."""

    start: np.datetime64
    end: np.datetime64
    title: str
    text: str = ""
    place: str = ""


def to_ics(entries: Sequence[Entry], name: str, made: np.datetime64) -> str:
    """The calendar; times are UTC, to the nearest minute, as sheets tell them: maps stand at minutes of GPS time.

    made  UTC instant that the entries were made (of the day's keeping, say): the standard asks for one
    """
    lines = ["BEGIN:VCALENDAR", "VERSION:2.0", "PRODID:-//Skylag//windows//EN", f"X-WR-CALNAME:{_escaped(name)}"]
    for entry in entries:
        key = "|".join((name, str(entry.start), str(entry.end), entry.title, entry.place))
        lines += [
            "BEGIN:VEVENT",
            f"UID:{hashlib.sha256(key.encode()).hexdigest()[:32]}@skylag",
            f"DTSTAMP:{_stamp(made)}",
            f"DTSTART:{_minute(entry.start)}",
            f"DTEND:{_minute(entry.end)}",
            f"SUMMARY:{_escaped(entry.title)}",
        ]
        if entry.place:
            lines.append(f"LOCATION:{_escaped(entry.place)}")
        if entry.text:
            lines.append(f"DESCRIPTION:{_escaped(entry.text)}")
        lines += ["TRANSP:TRANSPARENT", "END:VEVENT"]
    lines.append("END:VCALENDAR")
    return "".join(_folded(line) for line in lines)


def _minute(gps: np.datetime64) -> str:
    return _stamp(gps_to_utc(gps + np.timedelta64(30, "s")).astype("datetime64[m]"))


def _stamp(utc: object) -> str:
    text = np.datetime_as_string(np.asarray(utc, dtype="datetime64[s]"), unit="s")
    return str(text).replace("-", "").replace(":", "") + "Z"


def _escaped(text: str) -> str:
    """Commas, semicolons, backslashes and line ends as the standard writes them; other control characters go."""
    plain = text.replace("\\", "\\\\").replace(";", "\\;").replace(",", "\\,").replace("\r", "").replace("\n", "\\n")
    return "".join(c for c in plain if c.isprintable())


def _folded(line: str) -> str:
    """A line in pieces of at most 75 bytes, never through a character."""
    pieces: list[str] = []
    piece, size = "", 0
    for character in line:
        width = len(character.encode("utf-8"))
        if size + width > 75:
            pieces.append(piece)
            piece, size = " ", 1
        piece += character
        size += width
    return "\r\n".join([*pieces, piece]) + "\r\n"
