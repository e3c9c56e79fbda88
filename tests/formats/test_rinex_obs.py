"""RINEX observation text to tables: what each rule of the format asks, and what real files do instead."""

import pickle
import time
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from tests.properties.rinex_text import (
    Cell,
    Epoch,
    Text,
    cell,
    epoch_lines,
    header,
    labelled,
    simple,
    texts,
    type_lines,
    value_at,
    write,
)

from skylag.errors import FormatError
from skylag.formats import rinex_obs
from skylag.tables import Reading, Signals

MIDNIGHT = np.datetime64("2031-05-10T00:00:00", "ns")


def read(text: Text | bytes, **choices: Any) -> Reading:
    return rinex_obs.parse(text if isinstance(text, bytes) else write(text), "wren1300.31o", **choices)


def signals(text: Text | bytes, **choices: Any) -> Signals:
    table = read(text, **choices).table
    assert isinstance(table, Signals)
    return table


def at(table: Signals, code: str, epoch: int, satellite: str) -> float:
    return float(table.values[code][epoch, list(table.satellites).index(satellite)])


def lines_of(text: Text) -> list[str]:
    return write(text).decode("ascii").splitlines()


def joined(lines: list[str]) -> bytes:
    return ("\n".join(lines) + "\n").encode("latin-1")


def said(reading: Reading) -> str:
    return "\n".join(str(p) for p in reading.problems)


# ------------------------------------------------------------------------------------------------ the plain case


@pytest.mark.parametrize("version", [3.00, 3.01, 3.02, 3.03, 3.04, 3.05, 4.00, 4.01, 4.02])
def test_version_3_and_4(version: float) -> None:
    reading = read(simple(version))
    table = reading.table
    assert isinstance(table, Signals)
    assert not reading.problems
    assert list(table.satellites) == ["E11", "G05", "G12"]
    assert list(table.times) == [MIDNIGHT + np.timedelta64(30 * k, "s") for k in range(4)]
    assert table.interval_s == 30.0
    for epoch in range(4):
        assert at(table, "C1C", epoch, "G05") == value_at(epoch, "G05", 0)
        assert at(table, "L2W", epoch, "G12") == value_at(epoch, "G12", 3)
        assert at(table, "L5Q", epoch, "E11") == value_at(epoch, "E11", 3)
    assert np.isnan(at(table, "C2W", 0, "E11"))
    assert table.receiver.name == "WREN"
    assert table.receiver.type == "INVENTED RECEIVER"
    assert table.receiver.antenna == "INVENTED ANTENNA"
    assert table.receiver.position_m == (-3950071.0, 2522415.0, -4311638.0)
    assert reading.header["version"] == version


@pytest.mark.parametrize("version", [2.10, 2.11, 2.12])
def test_version_2(version: float) -> None:
    """Six types are two lines per satellite; codes take RINEX 3 names, phases the tracking of the code beside them."""
    reading = read(simple(version, satellites=[f"G{n:02d}" for n in range(1, 15)] + ["R03"]))
    table = reading.table
    assert isinstance(table, Signals)
    assert not reading.problems
    assert len(table.satellites) == 15
    for epoch in range(4):
        assert at(table, "C1C", epoch, "G05") == value_at(epoch, "G05", 0)
        assert at(table, "L1C", epoch, "G05") == value_at(epoch, "G05", 1)
        assert at(table, "C2W", epoch, "G14") == value_at(epoch, "G14", 2)
        assert at(table, "L2W", epoch, "G13") == value_at(epoch, "G13", 3)
        assert at(table, "S2W", epoch, "G01") == value_at(epoch, "G01", 5)
        assert at(table, "C2P", epoch, "R03") == value_at(epoch, "R03", 2)


@settings(max_examples=60, deadline=None)
@given(texts())
def test_what_is_written_is_read(text: Text) -> None:
    """Every value, digit and epoch of any small file comes back, to the last thousandth."""
    reading = read(text)
    table = reading.table
    assert isinstance(table, Signals)
    assert not reading.problems, said(reading)
    assert list(table.times) == [epoch.time for epoch in text.epochs]
    assert list(table.satellites) == sorted({name for epoch in text.epochs for name in epoch.satellites})
    assert list(table.resets) == [epoch.flag == 1 for epoch in text.epochs]
    for k, epoch in enumerate(text.epochs):
        for column, name in enumerate(table.satellites):
            records = epoch.satellites.get(str(name))
            written = _expected(text, str(name), records)
            for code, values in table.values.items():
                value, lock = written.get(code, (np.nan, 0))
                assert np.array_equal(values[k, column], value, equal_nan=True), (code, name, k)
                if code[0] == "L":
                    assert table.lock[code][k, column] == lock, (code, name, k)


_NAMES_2 = {
    "G": {"C1": "C1C", "P1": "C1W", "P2": "C2W", "C2": "C2X", "C5": "C5X", "L5": "L5X"},
    "R": {"C1": "C1C", "P1": "C1P", "P2": "C2P", "C2": "C2C"},
    "E": {"C1": "C1X", "C5": "C5X", "L1": "L1X", "S1": "S1X", "L5": "L5X"},
}


def _expected(text: Text, name: str, records: list[Cell] | None) -> dict[str, tuple[float, int]]:
    """RINEX 3 code -> value and lock digit, from what was written."""
    if records is None:
        return {}
    types = text.types.get(name[0], text.types.get("", []))
    names = {t: t for t in types}
    if text.version < 3:
        names = dict(_NAMES_2[name[0]])
        first = "C" if "C1" in types or "P1" not in types else ("W" if name[0] == "G" else "P")
        p_code, c_code = ("W", "X") if name[0] == "G" else ("P", "C")
        second = p_code if "P2" in types or "C2" not in types else c_code
        if name[0] != "E":
            names |= {"L1": "L1" + first, "S1": "S1" + first, "L2": "L2" + second, "S2": "S2" + second}
    out = {}
    for kind, (value, lock, _) in zip(types, records, strict=True):
        if kind in names:
            out[names[kind]] = (value or np.nan, lock or 0)
    return out


def test_a_reading_survives_pickling() -> None:
    """It travels between worker processes."""
    reading = read(simple())
    again = pickle.loads(pickle.dumps(reading))
    assert np.array_equal(again.table.values["C1C"], signals(simple()).values["C1C"], equal_nan=True)
    assert again.header == reading.header


# ------------------------------------------------------------------------------------------------ values


def test_fields_and_their_digits() -> None:
    """RINEX 3.05 table A3: F14.3, loss of lock, strength; 0.0 and blank are missing; short lines miss the last."""
    types = {"G": ["C1C", "L1C", "C2W", "L2W"]}
    text = simple(types=types, satellites=["G05"], epochs=1)
    lines = header(text)
    lines.append("> 2031 05 10 00 00  0.0000000  0  6")
    lines.append("G01  23629347.915 7        -0.353 1         0.000  -123456789.12346")
    lines.append("G02  23629347.915 7")
    lines.append("G03")
    lines.append("G04                              5")  # a digit without a value
    lines.append("G05" + f"{'.123':>14}  " + f"{'-.353':>14}  ")
    lines.append("G06" + "9999999999.999  " + "-999999999.99912")
    reading = read(joined(lines))
    table = reading.table
    assert isinstance(table, Signals)
    assert at(table, "C1C", 0, "G01") == 23629347.915
    assert at(table, "L1C", 0, "G01") == -0.353
    assert np.isnan(at(table, "C2W", 0, "G01"))
    assert at(table, "L2W", 0, "G01") == -123456789.123
    assert table.lock["L2W"][0, 0] == 4
    assert at(table, "C1C", 0, "G02") == 23629347.915
    assert np.isnan(at(table, "L1C", 0, "G02"))
    assert np.isnan(at(table, "C1C", 0, "G03"))
    assert at(table, "C1C", 0, "G05") == 0.123
    assert at(table, "L1C", 0, "G05") == -0.353
    assert at(table, "L1C", 0, "G06") == -999999999.999
    assert at(table, "C1C", 0, "G06") == 9999999999.999
    assert not reading.problems, said(reading)


@pytest.mark.parametrize(
    "field",
    [
        "  2362x347.915  ",
        "  23 29347.915  ",
        "  23629347 915  ",
        "**************  ",
        "  23629347.9 5  ",
        "  2362934/.915  ",
        "  2362934:.915  ",
        "  -2-629347.91  ",
        "  23629347.-15  ",
        "           .    ",
        "  236%9347.915  ",
        "             -  ",
    ],
)
def test_what_is_no_number_is_left_out_and_named(field: str) -> None:
    lines = header(simple(types={"G": ["C1C", "C2W"]}, satellites=["G05"], epochs=1))
    lines += ["> 2031 05 10 00 00  0.0000000  0  1", "G05" + field + cell((21e6, None, None))]
    reading = read(joined(lines))
    table = reading.table
    assert isinstance(table, Signals)
    assert np.isnan(at(table, "C1C", 0, "G05"))
    assert at(table, "C2W", 0, "G05") == 21e6
    assert [p.line for p in reading.problems] == [len(lines)]
    assert "C1C is no number" in reading.problems[0].what


def test_a_dot_elsewhere_is_read_as_fortran_reads_it() -> None:
    lines = header(simple(types={"G": ["C1C", "L1C"]}, satellites=["G05"], epochs=1))
    lines += ["> 2031 05 10 00 00  0.0000000  0  1", "G05   23629347.91  " + "    12345678   5"]
    table = signals(joined(lines))
    assert at(table, "C1C", 0, "G05") == 23629347.91
    assert table.lock["L1C"][0, 0] == 0


def test_a_lock_digit_that_is_none() -> None:
    lines = header(simple(types={"G": ["L1C"]}, satellites=["G05"], epochs=1))
    lines += ["> 2031 05 10 00 00  0.0000000  0  1", "G05  23629347.915x5"]
    reading = read(joined(lines))
    assert "L1C is no number" in said(reading)


def test_scale_factors_divide() -> None:
    """RINEX 3.05, SYS / SCALE FACTOR: divide stored values by the factor before use."""
    extra = [labelled("G  100   2 L1C C2W", "SYS / SCALE FACTOR"), labelled("E 1000", "SYS / SCALE FACTOR")]
    table = signals(simple(extra=extra))
    assert at(table, "L1C", 1, "G05") == value_at(1, "G05", 1) / 100.0
    assert at(table, "C2W", 1, "G05") == value_at(1, "G05", 2) / 100.0
    assert at(table, "C1C", 1, "G05") == value_at(1, "G05", 0)
    assert at(table, "C5Q", 1, "E11") == value_at(1, "E11", 2) / 1000.0


def test_wanted_codes_bring_their_phases_and_strengths() -> None:
    types = {"G": ["C1C", "L1C", "S1C", "C1W", "C2W", "L2W", "S2W", "C5Q", "L5Q", "D1C"], "E": ["C1C", "L1C"]}
    table = signals(simple(types=types), wanted={"G": {"C1W", "C2W"}})
    assert set(table.values) == {"C1W", "L1C", "S1C", "C2W", "L2W", "S2W"}
    assert list(table.satellites) == ["G05", "G12"]
    one_band = signals(simple(types=types), wanted={"G": {"C1W", "C2W", "S1"}})
    assert set(one_band.values) == {"C1W", "L1C", "S1C", "C2W", "L2W"}
    everything = signals(simple(types=types))
    assert set(everything.values) == set(types["G"]) - {"D1C"}


def test_glonass_channels_from_the_header() -> None:
    extra = [labelled(" 11 R01  1 R02 -4 R03  5 R04  6 R05  1 R06 -4 R07  5 R08  6 ", "GLONASS SLOT / FRQ #"),
             labelled("    R09 -2 R10 -7 R11  0 ", "GLONASS SLOT / FRQ #")]  # fmt: skip
    types = {"R": ["C1C", "L1C", "C2P", "L2P"]}
    table = signals(simple(types=types, satellites=["R02", "R10"], extra=extra))
    assert table.channels["R02"] == -4
    assert table.channels["R10"] == -7
    assert len(table.channels) == 11


def test_beidou_band_1_of_version_3_02_is_band_2() -> None:
    """B1I was written 1I in RINEX 3.02 and 2I before and after; 1P and 1X of later versions are B1C."""
    types = {"C": ["C1I", "L1I", "C6I", "L6I"]}
    table = signals(simple(3.02, types=types, satellites=["C19"]))
    assert set(table.values) == {"C2I", "L2I", "C6I", "L6I"}
    table = signals(simple(3.04, types={"C": ["C1X", "L1X", "C5X", "L5X"]}, satellites=["C19"]))
    assert set(table.values) == {"C1X", "L1X", "C5X", "L5X"}


def test_a_list_of_types_shorter_than_it_says_is_reported() -> None:
    for version, few, many in ((2.11, "     6    C1", "     8    C1"), (3.04, "G    5 C1C", "G    7 C1C")):
        data = write(simple(version)).replace(few.encode(), many.encode())
        reading = read(data)
        assert isinstance(reading.table, Signals)
        assert len(reading.table.times) == 4
        assert "2 types" in said(reading), said(reading)
        assert "fewer are listed than announced" in said(reading)


def test_conversion_comments_tell_the_tracking() -> None:
    """A RINEX 2 file made from RINEX 3 may say which signal each column was."""
    extra = [labelled("   G C2L -> C2", "COMMENT"), labelled("   G L2W -> L2", "COMMENT")]
    table = signals(simple(2.11, types={"": ["C1", "C2", "L1", "L2"]}, satellites=["G05"], extra=extra))
    assert set(table.values) == {"C1C", "C2L", "L1C", "L2W"}


def test_half_wavelength_phases_are_not_used() -> None:
    """RINEX 2.11, WAVELENGTH FACT L1/2: factor 2 is half cycles, from squaring receivers."""
    extra = [
        labelled("     1     1", "WAVELENGTH FACT L1/2"),
        labelled("     1     2     1   G05", "WAVELENGTH FACT L1/2"),
    ]
    table = signals(simple(2.11, satellites=["G05", "G12"], extra=extra))
    assert np.isnan(at(table, "L2W", 0, "G05"))
    assert at(table, "L2W", 0, "G12") == value_at(0, "G12", 3)
    assert at(table, "L1C", 0, "G05") == value_at(0, "G05", 1)


def test_biases_taken_off_by_others_are_reported() -> None:
    extra = [labelled("G cc2nonX         cc.example/biases", "SYS / DCBS APPLIED")]
    reading = read(simple(extra=extra))
    assert "already removed" in said(reading)
    assert "G" in reading.header["biases_removed"]


# ------------------------------------------------------------------------------------------------ times


@pytest.mark.parametrize(
    ("system", "name", "seconds"),
    [
        ("GPS", "G05", 0),
        ("GAL", "E11", 0),
        ("QZS", "J02", 0),
        ("BDT", "C19", 14),
        ("GLO", "R03", 18),
        ("UTC", "R03", 18),
    ],
)
def test_time_systems_come_to_gps_time(system: str, name: str, seconds: int) -> None:
    """GPST - BDT = 14 s (BDS-SIS-ICD 3.3); GPST - UTC = 18 s since 2017 (IERS Bulletin C 52)."""
    types = {name[0]: ["C1C", "L1C"]}
    table = signals(simple(types=types, satellites=[name], time_system=system, start="2020-06-25T00:00:00"))
    assert table.times[0] == np.datetime64("2020-06-25T00:00:00", "ns") + np.timedelta64(seconds, "s")


@pytest.mark.parametrize(("letter", "seconds"), [("R", 18), ("C", 14), ("E", 0), ("G", 0)])
def test_a_single_constellation_keeps_its_own_time(letter: str, seconds: int) -> None:
    """RINEX 3.05 table A2: without a statement, files of one constellation are in its time system."""
    text = simple(types={letter: ["C1C", "L1C"]}, satellites=[f"{letter}11"], system=letter, time_system="   ",
                  start="2020-06-25T00:00:00")  # fmt: skip
    assert signals(text).times[0] == np.datetime64("2020-06-25T00:00:00", "ns") + np.timedelta64(seconds, "s")


@pytest.mark.parametrize(("year", "full"), [("80", 1980), ("99", 1999), ("00", 2000), ("04", 2004), ("79", 2079)])
def test_two_digit_years(year: str, full: int) -> None:
    """RINEX 2.11, 6.5: 80 to 99 are 1980 to 1999, 00 to 79 are 2000 to 2079."""
    lines = header(simple(2.11))
    lines += [
        f" {year}  2 29  0  0  0.0000000  0  1G05" if full % 4 == 0 else f" {year}  2 28  0  0  0.0000000  0  1G05"
    ]
    lines += [cell((2e7, None, None)), ""]
    assert int(str(signals(joined(lines)).times[0])[:4]) == full


def test_epochs_off_the_full_second_keep_their_time() -> None:
    text = simple(epochs=3, start="2031-05-10T00:00:29.9990000")
    assert signals(text).times[0] == np.datetime64("2031-05-10T00:00:29.999", "ns")


@pytest.mark.parametrize(
    "epoch",
    [
        "> 2031 13 10 00 00 00.0000000  0  1",
        "> 2031 02 30 00 00 00.0000000  0  1",
        "> 9999 05 10 00 00 00.0000000  0  1",
        "> 2031 05 10 25 00 00.0000000  0  1",
        "> 2031 05 10 00 61 00.0000000  0  1",
        "> 2031 05 10 00 00 xx.0000000  0  1",
        "> 0000 00 00 00 00 00.0000000  0  1",
        ">                              0  1",
    ],
)
def test_absurd_times_are_left_out_and_named(epoch: str) -> None:
    lines = lines_of(simple(satellites=["G05"], epochs=2))
    where = len(lines) + 1
    lines += [epoch, "G05" + cell((2e7, None, None))]
    reading = read(joined(lines))
    table = reading.table
    assert isinstance(table, Signals)
    assert len(table.times) == 2
    assert [p.line for p in reading.problems] == [where]
    assert "no time can be read" in said(reading)


# ------------------------------------------------------------------------------------------------ events


@pytest.mark.parametrize("version", [2.11, 3.04])
def test_power_failure_is_a_reset(version: float) -> None:
    text = simple(version, satellites=["G05"])
    text.epochs[2].flag = 1
    assert list(signals(text).resets) == [False, False, True, False]


@pytest.mark.parametrize("version", [2.11, 3.04])
def test_cycle_slip_records_are_no_observations(version: float) -> None:
    """Flag 6: the records look like observations and hold slip counts (RINEX 3.05 table A3)."""
    text = simple(version, satellites=["G05", "G12"])
    text.epochs.insert(
        2, Epoch(text.epochs[1].time, {"G05": [(7.0, None, None)] * len(next(iter(text.types.values())))}, 6)
    )
    reading = read(text)
    table = reading.table
    assert isinstance(table, Signals)
    assert not reading.problems, said(reading)
    assert len(table.times) == 4
    assert at(table, "C1C", 1, "G05") == value_at(1, "G05", 0)


@pytest.mark.parametrize("version", [2.11, 3.04])
@pytest.mark.parametrize("timed", [True, False])
def test_header_lines_behind_an_event_change_the_columns(version: float, timed: bool) -> None:
    """Flag 4: new lists of types hold from there on, also where fewer lines per satellite follow."""
    text = simple(version, satellites=["G05"], epochs=2)
    after = simple(version, types={"": ["L1", "C1"]} if version < 3 else {"G": ["L1C", "C1C"]}, satellites=["G05"],
                   start="2031-05-10T00:01:00", epochs=2)  # fmt: skip
    changes = [labelled("NOW THE OTHER WAY ROUND", "COMMENT"), *type_lines(version, after.types)]
    if version < 3:
        event = f" 31  5 10  0  0 59.0000000  4{len(changes):3d}" if timed else f"{'':28}4{len(changes):3d}"
    else:
        event = f"> 2031 05 10 00 00 59.0000000  4{len(changes):3d}" if timed else f">{'':30}4{len(changes):3d}"
    lines = [*lines_of(text), event, *changes]
    for epoch in after.epochs:
        lines += epoch_lines(after, epoch)
    reading = read(joined(lines))
    table = reading.table
    assert isinstance(table, Signals)
    assert not reading.problems, said(reading)
    assert len(table.times) == 4
    assert at(table, "C1C", 1, "G05") == value_at(1, "G05", 0)
    assert at(table, "L1C", 2, "G05") == value_at(0, "G05", 0)
    assert at(table, "C1C", 3, "G05") == value_at(1, "G05", 1)


@pytest.mark.parametrize("version", [2.11, 3.04])
def test_external_events_are_passed_over(version: float) -> None:
    lines = lines_of(simple(version, satellites=["G05"], epochs=2))
    lines += [" 31  5 10  0  0 45.1234567  5  0" if version < 3 else "> 2031 05 10 00 00 45.1234567  5  0"]
    more = simple(version, satellites=["G05"], epochs=1, start="2031-05-10T00:01:00")
    lines += epoch_lines(more, more.epochs[0])
    reading = read(joined(lines))
    assert isinstance(reading.table, Signals)
    assert not reading.problems, said(reading)
    assert len(reading.table.times) == 3


@pytest.mark.parametrize("version", [2.11, 3.04])
def test_a_moving_antenna_is_not_listened_to(version: float) -> None:
    """Flags 2 and 3: start to move, new site; at the same place it goes on, at another place the file is over."""
    for there, expected in (("WREN", 3), ("OTTR", 1)):
        text = simple(version, satellites=["G05"], epochs=4)
        blocks = [epoch_lines(text, epoch) for epoch in text.epochs]
        mark = "> 2031 05 10 00 00 10.0000000" if version >= 3 else " 31  5 10  0  0 10.0000000"
        lines = header(text) + blocks[0] + [f"{mark}  2  0"] + blocks[1]
        lines += [f"{mark}  3  1", labelled(there, "MARKER NAME")] + blocks[2] + blocks[3]
        reading = read(joined(lines))
        assert isinstance(reading.table, Signals)
        assert len(reading.table.times) == expected, said(reading)
        assert "starts to move" in said(reading)
        assert ("another site" in said(reading)) == (there == "OTTR")


# ------------------------------------------------------------------------------------------------ oddities


@pytest.mark.parametrize("version", [2.11, 3.04])
def test_an_epoch_written_twice_counts_once(version: float) -> None:
    text = simple(version, satellites=["G05", "G12"], epochs=3)
    width = len(text.epochs[0].satellites["G05"])
    text.epochs.insert(1, Epoch(text.epochs[0].time, {"G05": [(1.0, None, None)] * width}))
    reading = read(text)
    table = reading.table
    assert isinstance(table, Signals)
    assert len(table.times) == 3
    assert at(table, "C1C", 0, "G05") == value_at(0, "G05", 0)
    assert "written twice" in said(reading)


def test_a_satellite_twice_in_an_epoch_counts_once() -> None:
    lines = lines_of(simple(satellites=["G05"], epochs=1))
    lines[-2] = lines[-2][:32] + "  2"
    lines += ["G05" + cell((1.0, None, None))]
    reading = read(joined(lines))
    assert isinstance(reading.table, Signals)
    assert at(reading.table, "C1C", 0, "G05") == value_at(0, "G05", 0)
    assert "written twice" in said(reading)


@pytest.mark.parametrize("version", [2.11, 3.04])
def test_epochs_out_of_order_are_sorted(version: float) -> None:
    text = simple(version, satellites=["G05"], epochs=3)
    text.epochs.reverse()
    reading = read(text)
    assert isinstance(reading.table, Signals)
    assert at(reading.table, "C1C", 2, "G05") == value_at(2, "G05", 0)
    assert "earlier than the one before" in said(reading)


@pytest.mark.parametrize("version", [2.11, 3.04])
@pytest.mark.parametrize("where", ["between", "behind the epoch line", "within"])
def test_stray_comments_do_not_shift_anything(version: float, where: str) -> None:
    """Also one that begins like a satellite record."""
    text = simple(version, satellites=["G05", "G12"], epochs=3)
    blocks = [epoch_lines(text, epoch) for epoch in text.epochs]
    comment = labelled("G05 IS A FINE SATELLITE", "COMMENT")
    place = {"between": 0, "behind the epoch line": 1, "within": 2 if version >= 3 else 3}[where]
    blocks[1].insert(place, comment)
    reading = read(joined(header(text) + [line for block in blocks for line in block]))
    table = reading.table
    assert isinstance(table, Signals)
    assert len(table.times) == 3, said(reading)
    for epoch in range(3):
        for name in ("G05", "G12"):
            assert at(table, "C1C", epoch, name) == value_at(epoch, name, 0)


@pytest.mark.parametrize("version", [2.11, 3.04])
def test_files_laid_end_to_end_are_read_through(version: float) -> None:
    """A second header in mid-file, as when hourly files are simply put together."""
    one = simple(version, satellites=["G05"], epochs=2)
    two = simple(version, types={"": ["L1", "C1"]} if version < 3 else {"G": ["L1C", "C1C"]}, satellites=["G05"],
                 start="2031-05-10T00:01:00", epochs=2)  # fmt: skip
    reading = read(write(one) + write(two))
    table = reading.table
    assert isinstance(table, Signals)
    assert len(table.times) == 4
    assert at(table, "C1C", 3, "G05") == value_at(1, "G05", 1)
    assert "header lines outside an event" in said(reading)


@pytest.mark.parametrize("version", [2.11, 3.04])
def test_a_comment_between_all_epochs_costs_no_time_to_speak_of(version: float) -> None:
    text = simple(version, satellites=["G05"], epochs=1500, step_s=1.0)
    comment = [labelled("AND YET ANOTHER", "COMMENT")]
    lines = header(text) + [line for epoch in text.epochs for line in [*comment, *epoch_lines(text, epoch)]]
    begin = time.process_time()
    reading = read(joined(lines))
    assert time.process_time() - begin < 2.0
    assert isinstance(reading.table, Signals)
    assert len(reading.table.times) == 1500
    assert not reading.problems, said(reading)


def test_more_than_sixty_satellites_in_an_epoch() -> None:
    names = [f"{s}{n:02d}" for s in "GREC" for n in range(1, 25)]
    types = {s: ["C1C", "L1C"] for s in "GREC"}
    table = signals(simple(types=types, satellites=names))
    assert len(table.satellites) == 96
    assert at(table, "L1C", 3, "R24") == value_at(3, "R24", 1)
    table = signals(simple(2.11, satellites=[n for n in names if n[0] != "C"]))
    assert len(table.satellites) == 72
    assert at(table, "C1C", 3, "R24") == value_at(3, "R24", 0)


def test_late_satellites_do_not_mix_up_columns() -> None:
    text = simple(satellites=["G12"], epochs=3)
    for epoch in text.epochs[1:]:
        epoch.satellites = {"G05": [(5.5, None, None)] * 5, **epoch.satellites}
    table = signals(text)
    assert np.isnan(at(table, "C1C", 0, "G05"))
    assert at(table, "C1C", 2, "G05") == 5.5
    assert at(table, "C1C", 2, "G12") == value_at(2, "G12", 0)


def test_a_declared_constellation_may_never_appear() -> None:
    reading = read(simple(satellites=["G05"]))
    assert isinstance(reading.table, Signals)
    assert not reading.problems
    assert "C5Q" not in reading.table.values


def test_augmentation_and_unknown_satellites_are_skipped() -> None:
    types = {"G": ["C1C", "L1C"], "S": ["C1C", "L1C"], "I": ["C5A", "L5A"]}
    text = simple(types=types, satellites=["G05", "S20", "I03"])
    reading = read(text)
    assert isinstance(reading.table, Signals)
    assert list(reading.table.satellites) == ["G05"]
    assert reading.header["skipped_systems"] == {"S": 4, "I": 4}
    assert not reading.problems, said(reading)
    reading = read(write(text).replace(b"I03", b"Z03"))
    assert "neither an epoch nor a satellite record" in said(reading)


def test_satellites_of_an_undeclared_constellation_are_named() -> None:
    lines = lines_of(simple(types={"G": ["C1C", "L1C"]}, satellites=["G05"], epochs=1))
    lines[-2] = lines[-2][:32] + "  2"
    lines += ["E11" + cell((2e7, None, None))]
    assert "header lists no types of E" in said(read(joined(lines)))


def test_blank_system_letters_and_blank_tens() -> None:
    """RINEX 2.11: a blank letter is the constellation of the file; numbers may be written with a blank."""
    lines = header(simple(2.11, system="G"))
    lines += [" 31  5 10  0  0  0.0000000  0  2  5G 7", *[cell((2e7, None, None)), ""] * 2]
    assert list(signals(joined(lines)).satellites) == ["G05", "G07"]
    lines = header(simple(2.11, system="R", time_system="GPS"))
    lines += [" 31  5 10  0  0  0.0000000  0  1  5", cell((2e7, None, None)), ""]
    assert list(signals(joined(lines)).satellites) == ["R05"]


@pytest.mark.parametrize("version", [2.11, 3.04])
def test_a_blank_flag_is_an_ordinary_epoch(version: float) -> None:
    lines = lines_of(simple(version))
    for k, line in enumerate(lines):
        if line.startswith(("> 2031", " 31  5 10")):
            place = 31 if version >= 3 else 28
            lines[k] = line[:place] + " " + line[place + 1 :]
    reading = read(joined(lines))
    assert isinstance(reading.table, Signals)
    assert not reading.problems, said(reading)
    assert len(reading.table.times) == 4


@pytest.mark.parametrize("version", [2.11, 3.04])
def test_lines_end_as_they_like(version: float) -> None:
    plain = write(simple(version))
    expected = signals(plain).values["C1C"]
    for ending in (b"\r\n", b"\r"):
        assert np.array_equal(signals(plain.replace(b"\n", ending)).values["C1C"], expected, equal_nan=True)
    assert np.array_equal(signals(plain.rstrip(b"\n")).values["C1C"], expected, equal_nan=True)
    assert np.array_equal(signals(plain + b"\n \n\n").values["C1C"], expected, equal_nan=True)


def test_trailing_blank_lines_of_records_are_kept_count_of() -> None:
    """RINEX 2: a satellite always has its lines, also where the last is empty."""
    text = simple(2.11, types={"": ["C1", "L1", "L2", "P2", "S1", "S2", "C5"]}, satellites=["G05", "G12"])
    for epoch in text.epochs:
        for name, cells in epoch.satellites.items():
            epoch.satellites[name] = cells[:5] + [(None, None, None)] * 2
    reading = read(text)
    assert isinstance(reading.table, Signals)
    assert not reading.problems
    assert at(reading.table, "C1C", 3, "G12") == value_at(3, "G12", 0)


def test_a_receiver_without_a_name_is_named_after_its_file() -> None:
    reading = read(simple(marker=""))
    assert isinstance(reading.table, Signals)
    assert reading.table.receiver.name == "WREN"
    assert "no marker name" in said(reading)
    long_name = rinex_obs.parse(write(simple(marker="")), "data/OTTR00XXX_R_20311300000_01D_30S_MO.rnx")
    assert isinstance(long_name.table, Signals)
    assert long_name.table.receiver.name == "OTTR00XXX"


# ------------------------------------------------------------------------------------------------ broken files


@pytest.mark.parametrize("version", [2.11, 3.04])
def test_a_file_cut_at_any_byte_gives_what_was_there(version: float) -> None:
    """Up to the last whole satellite of RINEX 2, the last whole value of RINEX 3, and never a wrong value."""
    text = simple(version, satellites=["G05", "G12"], epochs=3)
    data = write(text)
    whole = signals(data)
    body = data.index(b"END OF HEADER") + 14
    first_value = data.index(b"20000050.123") + 60
    for end in range(first_value, len(data)):
        reading = read(data[:end])
        table = reading.table
        assert isinstance(table, Signals)
        assert set(table.times) <= set(whole.times)
        for code, values in table.values.items():
            for k, instant in enumerate(table.times):
                for j, name in enumerate(table.satellites):
                    if np.isfinite(values[k, j]):
                        epoch = int(np.flatnonzero(whole.times == instant)[0])
                        assert values[k, j] == at(whole, code, epoch, str(name)), (end, code, name)
    assert body < first_value


@pytest.mark.parametrize("version", [2.11, 3.04])
def test_a_file_cut_within_an_epoch_says_where(version: float) -> None:
    data = write(simple(version, satellites=["G05", "G12"], epochs=3))
    lines = data.split(b"\n")[:-2]
    reading = read(b"\n".join(lines) + b"\n")
    assert isinstance(reading.table, Signals)
    assert len(reading.table.times) == 3
    assert at(reading.table, "C1C", 2, "G05") == value_at(2, "G05", 0)
    assert reading.problems, "a cut must be reported"
    assert len(lines) - 6 <= reading.problems[-1].line <= len(lines)


def test_a_lost_line_of_version_2_costs_one_epoch() -> None:
    lines = lines_of(simple(2.11, satellites=["G05", "G12"], epochs=4))
    first = next(k for k, line in enumerate(lines) if "END OF HEADER" in line) + 1
    del lines[first + 5 + 1]  # the first data line of the second epoch
    reading = read(joined(lines))
    assert isinstance(reading.table, Signals)
    assert len(reading.table.times) == 3
    assert at(reading.table, "C1C", 1, "G12") == value_at(2, "G12", 0)
    assert [p.line for p in reading.problems] == [first + 6]


@pytest.mark.parametrize("count", [b"999", b" -1", b"  x"])
def test_a_wrong_count_of_satellites_costs_at_most_one_epoch(count: bytes) -> None:
    for version in (2.11, 3.04):
        lines = write(simple(version, satellites=["G05", "G12"], epochs=4)).split(b"\n")
        marks = [k for k, line in enumerate(lines) if line.startswith((b"> 2031", b" 31  5 10"))]
        place = 32 if version >= 3 else 29
        lines[marks[1]] = lines[marks[1]][:place] + count + lines[marks[1]][place + 3 :]
        reading = read(b"\n".join(lines))
        assert isinstance(reading.table, Signals)
        assert len(reading.table.times) >= 3
        assert reading.problems


def test_rubbish_between_epochs_is_reported_once() -> None:
    lines = lines_of(simple(epochs=2))
    lines[-4:-4] = ["rubbish", "more rubbish"]
    reading = read(joined(lines))
    assert isinstance(reading.table, Signals)
    assert len(reading.table.times) == 2
    assert len([p for p in reading.problems if "neither" in p.what]) == 1


def test_a_thousand_bad_lines_are_counted_not_listed() -> None:
    lines = header(simple(types={"G": ["C1C"]}, satellites=["G05"]))
    for k in range(1000):
        lines += [f"> 2031 05 10 00 {k // 60:02d} {k % 60:2d}.0000000  0  1", "G05        bad.bad  "]
    reading = read(joined(lines))
    assert len(reading.problems) <= 250
    assert "800 more" in said(reading)


@pytest.mark.parametrize(
    ("data", "reason"),
    [
        (b"", "empty"),
        (b"   \n \n", "empty"),
        (b"no header here\n" * 30, "END OF HEADER"),
        (write(Text(3.04, {"G": []}, [])).replace(b"OBS TYPES", b"OBS_TYPES"), "observation types"),
        (write(Text(3.04, {"G": ["C1C"]}, [])), "not one epoch"),
        (write(Text(5.00, {"G": ["C1C"]}, [])), "version 5"),
        (write(Text(3.04, {"G": ["C1C"]}, []))[:300], "END OF HEADER"),
    ],
)
def test_files_beyond_use_are_refused_with_the_reason(data: bytes, reason: str) -> None:
    with pytest.raises(FormatError, match=reason) as caught:
        read(data)
    assert caught.value.details["path"] == "wren1300.31o"
    assert isinstance(caught.value.details["line"], int)


def test_an_endless_header_is_refused() -> None:
    line = labelled("and another thing", "COMMENT").encode() + b"\n"
    with pytest.raises(FormatError, match="END OF HEADER"):
        read(write(simple())[:81] + line * 30_000)


def test_a_lost_end_of_header_is_made_up_for() -> None:
    for version in (2.11, 3.04):
        lines = [line for line in lines_of(simple(version, satellites=["G05"])) if "END OF HEADER" not in line]
        reading = read(joined(lines))
        assert isinstance(reading.table, Signals)
        assert len(reading.table.times) == 4
        assert "no END OF HEADER" in said(reading)


def test_an_absurdly_sparse_file_is_refused_before_it_fills_the_memory() -> None:
    types = {s: ["C1C", "L1C", "C2W", "L2W", "C5Q", "L5Q", "C7Q", "C8Q"] for s in "GREC"}
    lines = header(simple(types=types))
    names = [f"{s}{n:02d}" for s in "GREC" for n in range(1, 99)]
    for k in range(20_000):
        day, second = divmod(k, 86_400)
        lines += [
            f"> 2031 05 {day + 10:02d} {second // 3600:02d} {second // 60 % 60:02d} {second % 60:2d}.0000000  0  1"
        ]
        lines += [names[k % len(names)] + "        1.000"]
    with pytest.raises(FormatError, match="nearly all empty"):
        read(joined(lines))
