"""Bias files: Bias-SINEX and monthly tables, round trip, bad input, real files."""

import gzip
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.conftest import Evidence

from skylag.errors import FormatError
from skylag.formats import biases
from skylag.tables import Biases

HEAD = """%=BIA 1.00 XYZ 2021:085:57378 XYZ 2021:078:00000 2021:079:00000 R 00000006
+BIAS/DESCRIPTION
*KEYWORD________________________________ VALUE(S)_______________________________
 BIAS_MODE                               RELATIVE
 TIME_SYSTEM                             G
-BIAS/DESCRIPTION
+BIAS/SOLUTION
*BIAS SVN_ PRN STATION__ OBS1 OBS2 BIAS_START____ BIAS_END______ UNIT __ESTIMATED_VALUE____ _STD_DEV___
"""
TAIL = "-BIAS/SOLUTION\n%=ENDBIA\n"
ROWS = """ DSB  G063 G01           C1W  C2W  2021:078:00000 2021:079:00000 ns                 -6.9749      0.0120
 OSB  E101 E11           C1C       2021:078:00000 2021:079:00000 ns                  1.2500
 DSB       G   ARDN00XYZ C1W  C2W  2021:078:00000 2021:079:43200 ns                 12.5000      0.1000
 OSB  G063 G01           L1C       2021:078:00000 2021:079:00000 cyc                 0.2500      0.0000
 OSB       R01 ARDN00XYZ C1P       2021:078:00000 2021:079:00000 ns                  3.0000      0.1000
 ISB       G   ARDN00XYZ C1W       2021:078:00000 2021:079:00000 ns                  3.0000      0.1000
"""


def table_of(text: str) -> Biases:
    reading = biases.parse(text.encode(), "made.bia")
    assert reading.problems == ()
    assert isinstance(reading.table, Biases)
    return reading.table


def test_bias_sinex_rows() -> None:
    reading = biases.parse((HEAD + ROWS + TAIL).encode(), "made.bia")
    table = table_of(HEAD + ROWS + TAIL)
    assert table.kind.tolist() == ["satellite", "satellite", "receiver"]
    assert table.name.tolist() == ["G01", "E11", "ARDN00XYZ"]
    assert table.system.tolist() == ["G", "E", "G"]
    assert table.code1.tolist() == ["C1W", "C1C", "C1W"]
    assert table.code2.tolist() == ["C2W", "", "C2W"]
    assert table.value_ns.tolist() == [-6.9749, 1.25, 12.5]
    assert table.sigma_ns[0] == 0.012
    assert np.isnan(table.sigma_ns[1])
    assert table.start[0] == np.datetime64("2021-03-19", "ns")
    assert table.end[2] == np.datetime64("2021-03-20T12:00:00", "ns")
    assert table.source == "XYZ made.bia"
    assert table.datum == "relative"
    assert reading.header["skipped"] == {"phase": 1, "satellite-receiver link": 1, "ISB": 1}


def test_the_older_draft_with_two_digit_years_and_open_spans() -> None:
    text = HEAD.replace("1.00", "0.01")
    text += " DCB  G063 G01           C1W  C2W  16:004:00000 16:005:00000 ns  -6.9749 0.0120\n"
    text += " DCB       G02           C1C  C1W  00:000:00000 00:000:00000 ns  0.5\n"
    table = table_of(text + TAIL)
    assert table.start[0] == np.datetime64("2016-01-04", "ns")
    assert np.isnat(table.start[1])
    assert np.isnat(table.end[1])
    assert table.value_ns.tolist() == [-6.9749, 0.5]


@pytest.mark.parametrize(("system", "shift_s"), [("G", 0), ("UTC", 18), ("C", 14)])
def test_time_systems(system: str, shift_s: int) -> None:
    text = HEAD.replace(f"TIME_SYSTEM{'':29s}G", f"TIME_SYSTEM{'':29s}{system}")
    table = table_of(text + ROWS.splitlines()[0] + "\n" + TAIL)
    assert table.start[0] == np.datetime64("2021-03-19", "ns") + np.timedelta64(shift_s, "s")


def test_the_gps_code_that_rinex_does_not_have() -> None:
    row = " OSB  G063 G01           C2C       2021:078:00000 2021:079:00000 ns                  1.2500\n"
    assert table_of(HEAD + row + TAIL).code1.tolist() == ["C2X"]
    assert table_of(HEAD + row.replace("G01", "R01") + TAIL).code1.tolist() == ["C2C"]


def test_zeros_for_all_satellites_of_a_system_are_no_determination() -> None:
    rows = "".join(
        f" OSB       C{n:02d}           {code}       2021:078:00000 2021:079:00000 ns                  0.0000\n"
        for n in (6, 7, 8) for code in ("C2I", "C6I")
    )  # fmt: skip
    reading = biases.parse((HEAD + ROWS + rows + TAIL).encode(), "made.bia")
    assert "C" not in reading.table.system.tolist()  # type: ignore[union-attr]
    assert "a convention, not a determination" in str(reading.problems[0])
    assert len(reading.table) == 3  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("row", "words"),
    [
        (" XXX  G063 G01           C1W  C2W  2021:078:00000 2021:079:00000 ns  1.0 0.1", "none of OSB"),
        (" DSB  G063 G01           C1W       2021:078:00000 2021:079:00000 ns  1.0 0.1", "second code"),
        (" OSB  G063 G01           C1W  C2W  2021:078:00000 2021:079:00000 ns  1.0 0.1", "second code"),
        (" DSB  G063 G01           C1W  Q2W  2021:078:00000 2021:079:00000 ns  1.0 0.1", "no codes like"),
        (" DSB  G063 G01           C1W  C2W  2021:378:00000 2021:079:00000 ns  1.0 0.1", "time 2021:378"),
        (" DSB  G063 G01           C1W  C2W  2021:078:00000 2021:079:00000 ns", "a value are needed"),
        (" DSB  G063 G01           C1W  C2W  2021:078:00000 2021:079:00000 ns  1.x 0.1", "could not convert"),
        (" DSB  G063 G01           C1W  C2W  2021:078:00000 2021:079:00000 ns  nan 0.1", "value nan"),
        (" DSB  G063 Gxx           C1W  C2W  2021:078:00000 2021:079:00000 ns  1.0 0.1", "no satellite"),
        (" DSB                     C1W  C2W  2021:078:00000 2021:079:00000 ns  1.0 0.1", "no satellite"),
    ],
)
def test_a_broken_line_is_a_problem_and_reading_goes_on(row: str, words: str) -> None:
    reading = biases.parse((HEAD + row + "\n" + ROWS + TAIL).encode(), "made.bia")
    assert len(reading.table) == 3  # type: ignore[arg-type]
    assert words in str(reading.problems[0])
    assert reading.problems[0].line == 9


def test_a_cut_file_is_said_to_be_cut() -> None:
    reading = biases.parse((HEAD + ROWS).encode(), "made.bia")
    assert len(reading.table) == 3  # type: ignore[arg-type]
    assert "the file is cut" in str(reading.problems[0])


@pytest.mark.parametrize("text", ["", "hello\n", "%=SNX 2.02\n"])
def test_another_file_is_refused(text: str) -> None:
    with pytest.raises(FormatError, match="neither %=BIA"):
        biases.parse(text.encode(), "made")


MONTHLY = """SOMEBODY'S MONTHLY GNSS P1-P2 DCB SOLUTION, YEAR 2015, MONTH 12       05-JAN-16 07:47
--------------------------------------------------------------------------------

DIFFERENTIAL (P1-P2) CODE BIASES FOR SATELLITES AND RECEIVERS:

PRN / STATION NAME        VALUE (NS)  RMS (NS)
***   ****************    *****.***   *****.***
G01                          -7.717       0.006
R05                          25.907       0.030
G     ARDN 10001M001        -11.149       0.016
R     ARDN 10001M001        -13.946       0.028
"""


def test_monthly_tables() -> None:
    table = table_of(MONTHLY)
    assert table.kind.tolist() == ["satellite", "satellite", "receiver", "receiver"]
    assert table.name.tolist() == ["G01", "R05", "ARDN", "ARDN"]
    assert table.code1.tolist() == ["C1W", "C1P", "C1W", "C1P"]
    assert table.code2.tolist() == ["C2W", "C2P", "C2W", "C2P"]
    assert table.value_ns.tolist() == [-7.717, 25.907, -11.149, -13.946]
    assert table.start[0] == np.datetime64("2015-12-01", "ns")
    assert table.end[0] == np.datetime64("2016-01-01", "ns")


@pytest.mark.parametrize(("pair", "codes"), [("P1-C1", ("C1W", "C1C")), ("P2-C2", ("C2W", "C2X"))])
def test_monthly_tables_of_other_pairs(pair: str, codes: tuple[str, str]) -> None:
    table = table_of(MONTHLY.replace("(P1-P2)", f"({pair})"))
    assert (table.code1[0], table.code2[0]) == codes


@pytest.mark.parametrize("row", [f"G02{'':27s}x.xxx       0.006", "G02", "      ARDN      1.0 0.1", "Q01  1.0 0.1"])
def test_a_broken_monthly_row_is_a_problem(row: str) -> None:
    reading = biases.parse((MONTHLY + row + "\n").encode(), "made.dcb")
    assert len(reading.table) == 4  # type: ignore[arg-type]
    assert len(reading.problems) == 1
    assert reading.problems[0].line == 12


def test_a_monthly_table_cut_in_its_heading_is_refused() -> None:
    with pytest.raises(FormatError, match="mask line"):
        biases.parse("\n".join(MONTHLY.splitlines()[:6]).encode(), "made.dcb")


# ------------------------------------------------------------------------------------------------ writing

TIMES = st.one_of(st.none(), st.integers(315_964_800, 4_000_000_000))


@given(
    st.lists(
        st.tuples(
            st.sampled_from([("satellite", "G01", "G"), ("receiver", "ARDN", "E"), ("receiver", "ARDN00XYZ", "C")]),
            st.sampled_from([("C1W", "C2W"), ("C1C", ""), ("C2I", "C6I")]),
            st.floats(-500, 500), st.one_of(st.none(), st.floats(0, 50)), TIMES, TIMES,
        ),
        min_size=1, max_size=8,
    )
)  # fmt: skip
@settings(max_examples=80)
def test_what_is_written_reads_back(rows: list[tuple]) -> None:  # type: ignore[type-arg]
    def times(column: int) -> np.ndarray:
        told = [np.datetime64("NaT") if row[column] is None else np.datetime64(row[column], "s") for row in rows]
        return np.array(told, dtype="datetime64[ns]")

    table = Biases(
        kind=np.array([row[0][0] for row in rows]), name=np.array([row[0][1] for row in rows]),
        system=np.array([row[0][2] for row in rows]), code1=np.array([row[1][0] for row in rows]),
        code2=np.array([row[1][1] for row in rows]), value_ns=np.array([row[2] for row in rows]) + 0.001,
        sigma_ns=np.array([np.nan if row[3] is None else row[3] for row in rows]), start=times(4), end=times(5),
        source="made", datum="zero mean of 31 satellites",
    )  # fmt: skip
    text = biases.write_bias_sinex(table, np.datetime64("2024-01-02T03:04:05", "ns"), "SKY", "Biases for a test")
    assert all(len(line) <= 106 for line in text.splitlines())
    back = table_of(text)
    for name in ("kind", "name", "system", "code1", "code2"):
        assert getattr(back, name).tolist() == getattr(table, name).tolist()
    for name in ("start", "end"):
        assert np.array_equal(getattr(back, name), getattr(table, name), equal_nan=True)
    assert back.value_ns == pytest.approx(table.value_ns, abs=5.1e-5)
    assert back.sigma_ns == pytest.approx(table.sigma_ns, abs=5.1e-5, nan_ok=True)
    assert back.datum == table.datum


@given(st.data())
@settings(max_examples=150, deadline=2000)
def test_mutated_files_end_in_a_table_or_a_named_error(data: st.DataObject) -> None:
    text = bytearray(data.draw(st.sampled_from([(HEAD + ROWS + TAIL).encode(), MONTHLY.encode()])))
    for _ in range(data.draw(st.integers(1, 15))):
        place = data.draw(st.integers(0, max(len(text) - 1, 0)))
        if data.draw(st.booleans()):
            text[place : place + 1] = bytes([data.draw(st.integers(0, 255))])
        else:
            del text[place : place + data.draw(st.integers(1, 100))]
    try:
        reading = biases.parse(bytes(text), "mutated")
    except FormatError:
        return
    assert isinstance(reading.table, Biases)
    assert np.isfinite(reading.table.value_ns).all()


# ------------------------------------------------------------------------------------------------ real files


@pytest.mark.open_data
def test_real_bias_files(open_data: Path, evidence: Evidence) -> None:
    """Values as they stand in the files, and sums that published datums promise."""
    monthly = biases.parse((open_data / "2015-235/bias/P1P21508_ALL.DCB").read_bytes(), "P1P21508_ALL.DCB").table
    assert isinstance(monthly, Biases)
    gps = (monthly.kind == "satellite") & (monthly.system == "G")
    evidence("sum of CODE monthly P1-P2 satellite biases, GPS 2015-08", unit="ns",
             source="CODE DCB 2015-08: zero-mean datum; 31 values rounded to 0.001",
             expected=0.0, got=float(monthly.value_ns[gps].sum()), tolerance=0.02)  # fmt: skip
    zimm = (monthly.name == "ZIMM") & (monthly.system == "G")
    evidence("CODE monthly receiver bias of ZIMM, 2015-08", source="CODE P1P21508_ALL.DCB", unit="ns",
             expected=-11.149, got=float(monthly.value_ns[zimm][0]), tolerance=0.0)  # fmt: skip
    path = open_data / "2021-001/bias/COD0OPSRAP_20210780000_01D_01D_OSB.BIA.gz"
    reading = biases.parse(gzip.decompress(path.read_bytes()), path.name)
    assert reading.problems == ()
    assert isinstance(reading.table, Biases)
    assert sum(reading.header["skipped"].values()) + len(reading.table) == 8306
    evidence("lines of the CODE rapid OSB file accounted for", source="count of lines in the file's solution block",
             expected=8306, got=sum(reading.header["skipped"].values()) + len(reading.table), tolerance=0)  # fmt: skip


@pytest.mark.open_data
def test_every_real_bias_file_reads(open_data: Path) -> None:
    paths = sorted(open_data.glob("*/bias/*"))
    assert len(paths) >= 9
    for path in paths:
        data = path.read_bytes()
        reading = biases.parse(gzip.decompress(data) if path.suffix == ".gz" else data, path.name)
        assert len(reading.table) > 25, path.name  # type: ignore[arg-type]
        assert len(reading.problems) == ("COD0MGXFIN" in path.name), path.name
