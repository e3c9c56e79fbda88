"""Calendars: the form that RFC 5545 asks for, and times in UTC."""

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from skylag.formats.calendar import Entry, to_ics

MADE = np.datetime64("2031-03-13T01:02:03")
START = np.datetime64("2031-03-12T06:00:18", "ns")


def _unfolded(text: str) -> list[str]:
    """Lines as a reader joins them (RFC 5545, 3.1)."""
    return text.replace("\r\n ", "").split("\r\n")[:-1]


def test_an_entry() -> None:
    entry = Entry(START, START + np.timedelta64(90, "m"), "Avoid: dam, east; west", "steep\nnot for navigation", "Dam")
    lines = _unfolded(to_ics([entry], "Dam", MADE))
    assert lines[0] == "BEGIN:VCALENDAR"
    assert lines[-1] == "END:VCALENDAR"
    assert "DTSTART:20310312T060000Z" in lines  # GPS time is 18 s ahead of UTC (IERS Bulletin C 52)
    assert "DTEND:20310312T073000Z" in lines
    assert "DTSTAMP:20310313T010203Z" in lines
    assert "SUMMARY:Avoid: dam\\, east\\; west" in lines
    assert "DESCRIPTION:steep\\nnot for navigation" in lines
    assert "LOCATION:Dam" in lines


def test_times_are_minutes_as_on_the_sheet() -> None:
    """Maps stand at minutes of GPS time, 18 s before those of UTC (IERS Bulletin C 52)."""
    whole = np.datetime64("2031-03-12T06:00:00", "ns")
    lines = _unfolded(to_ics([Entry(whole, whole + np.timedelta64(95, "m"), "Work")], "Dam", MADE))
    assert "DTSTART:20310312T060000Z" in lines
    assert "DTEND:20310312T073500Z" in lines


def test_the_same_windows_have_the_same_names() -> None:
    entry = Entry(START, START + np.timedelta64(90, "m"), "Work")
    other = Entry(START, START + np.timedelta64(95, "m"), "Work")
    assert to_ics([entry], "a", MADE) == to_ics([entry], "a", MADE)
    names = [line for line in _unfolded(to_ics([entry, other], "a", MADE)) if line.startswith("UID:")]
    assert len(set(names)) == 2


@given(st.text(max_size=300))
def test_any_title_survives(title: str) -> None:
    text = to_ics([Entry(START, START + np.timedelta64(1, "h"), title)], "any", MADE)
    lines = text.split("\r\n")
    assert all(len(line.encode("utf-8")) <= 75 for line in lines)
    assert not any("\n" in line or "\r" in line for line in lines)
    whole = next(line for line in _unfolded(text) if line.startswith("SUMMARY:"))
    kept = "".join(c for c in title.replace("\r", "") if c.isprintable() or c == "\n")
    back = whole[8:].replace("\\n", "\n") if "\\" not in title else None
    if back is not None:
        assert back.replace("\\,", ",").replace("\\;", ";") == kept


def test_no_entries_is_a_calendar_still() -> None:
    assert _unfolded(to_ics([], "empty", MADE))[-1] == "END:VCALENDAR"
