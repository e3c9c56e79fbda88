"""Precise orbit files: the three versions, missing values, time systems, bad input, and an independent reader."""

import gzip
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.conftest import Evidence, open_data_folder

from skylag.errors import FormatError
from skylag.formats import sp3
from skylag.tables import PreciseOrbits

HEAD = """#dP2024  3 30  0  0  0.00000000       2 d+D   IGS20 FIT  XYZ
## 2307 518400.00000000   900.00000000 60399 0.0000000000000
+    2   G01E11  0  0  0  0  0  0  0  0  0  0  0  0  0  0  0
%c M  cc GPS ccc cccc cccc cccc cccc ccccc ccccc ccccc ccccc
/* AN INVENTED FILE
"""
BODY = """*  2024  3 30  0  0  0.00000000
PG01  14957.102760  11470.363218 -19203.899808    176.750197  7  5  9  95
VG01  10000.000000  10000.000000 -10000.000000      0.100000
PE11      0.000000      0.000000      0.000000 999999.999999
*  2024  3 30  0 15  0.00000000
PG01  15957.102760  12470.363218 -18203.899808 999999.999999
PE11  20000.000000  10000.000000 -15000.000000   -306.528657
EOF
"""


def parse(text: str) -> tuple[PreciseOrbits, list[str]]:
    reading = sp3.parse(text.encode(), "made.sp3")
    assert isinstance(reading.table, PreciseOrbits)
    return reading.table, [str(problem) for problem in reading.problems]


def test_positions_clocks_and_what_is_missing() -> None:
    table, problems = parse(HEAD + BODY)
    assert problems == []
    assert table.satellites.tolist() == ["E11", "G01"]
    assert np.array_equal(table.times, np.array(["2024-03-30T00:00", "2024-03-30T00:15"], dtype="datetime64[ns]"))
    assert table.position_m[0, 1] == pytest.approx([14957102.760, 11470363.218, -19203899.808])
    assert np.isnan(table.position_m[0, 0]).all()
    assert table.clock_s[0, 1] == pytest.approx(176.750197e-6)
    assert np.isnan(table.clock_s[1, 1])
    assert table.clock_s[1, 0] == pytest.approx(-306.528657e-6)
    assert sp3.parse((HEAD + BODY).encode(), "x").header == {"version": "d", "time_system": "GPS", "agency": "XYZ"}


def test_the_oldest_version_has_bare_satellite_numbers() -> None:
    text = HEAD.replace("#d", "#a").replace("%c M  cc GPS", "%c cc cc ccc")
    text += BODY.replace("G01", "  1").replace("E11", " 11")
    assert parse(text)[0].satellites.tolist() == ["G01", "G11"]


@pytest.mark.parametrize(
    ("system", "shift_s"), [("GPS", 0), ("UTC", 18), ("GLO", 18), ("BDT", 14), ("GAL", 0), ("TAI", -19)]
)
def test_time_systems(system: str, shift_s: int) -> None:
    table, _ = parse(HEAD.replace("GPS", system) + BODY)
    assert table.times[0] == np.datetime64("2024-03-30T00:00:00", "ns") + np.timedelta64(shift_s, "s")


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("14957.102760", "14957.x02760", "position line is broken"),
        ("PG01  14957", "PGxx  14957", "position line is broken"),
        ("14957.102760", "9999999999.9", "position line is broken"),
        ("*  2024  3 30  0  0", "*  2024  3 30  0 77", "impossible epoch"),
        ("EOF\n", "", "the file is cut"),
    ],
)
def test_broken_lines_are_problems(old: str, new: str, words: str) -> None:
    table, problems = parse(HEAD + BODY.replace(old, new))
    assert len(problems) == 1
    assert words in problems[0]
    assert np.isfinite(table.position_m[-1, 0]).all()


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "line 1"),
        ("hello", "line 1"),
        (HEAD, "no position"),
        (HEAD.replace("GPS", "XXX") + BODY, "time system"),
    ],
)
def test_another_file_is_refused(text: str, words: str) -> None:
    with pytest.raises(FormatError, match=words):
        sp3.parse(text.encode(), "made")


@given(st.data())
@settings(max_examples=150, deadline=2000)
def test_mutated_files_end_in_a_table_or_a_named_error(data: st.DataObject) -> None:
    text = bytearray((HEAD + BODY).encode())
    for _ in range(data.draw(st.integers(1, 12))):
        place = data.draw(st.integers(0, max(len(text) - 1, 0)))
        if data.draw(st.booleans()):
            text[place : place + 1] = bytes([data.draw(st.integers(0, 255))])
        else:
            del text[place : place + data.draw(st.integers(1, 90))]
    try:
        reading = sp3.parse(bytes(text), "mutated")
    except FormatError:
        return
    assert isinstance(reading.table, PreciseOrbits)
    assert np.all(np.diff(reading.table.times.astype(np.int64)) > 0)


def theirs(path: Path) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Times, names, positions [m] and clocks [microseconds] as georinex reads them, names by the house."""
    georinex = pytest.importorskip("georinex")
    got = georinex.load_sp3(path, None)
    names = [str(name) if str(name)[0].isalpha() else f"G{int(name):02d}" for name in got.sv.values]  # SP3-a: bare
    order = np.argsort(names)
    return (got.time.values.astype("datetime64[ns]"), np.array(names)[order],
            got["position"].values[:, order] * 1000.0, got["clock"].values[:, order])  # fmt: skip


ORBIT_FILES = sorted(str(path.relative_to(open_data_folder())) for path in open_data_folder().glob("*/sp3/*"))


@pytest.mark.open_data
@pytest.mark.parametrize("path", ORBIT_FILES or ["none"])
def test_every_value_equals_that_of_an_independent_reader(
    open_data: Path, evidence: Evidence, tmp_path: Path, path: str
) -> None:  # fmt: skip
    """Positions and clocks of all satellites at all epochs, and where there are none."""
    georinex = pytest.importorskip("georinex")
    data = gzip.decompress((open_data / path).read_bytes())
    plain = tmp_path / "orbits.sp3"
    plain.write_bytes(data)
    times, names, position, clock = theirs(plain)
    reading = sp3.parse(data, path)
    assert reading.problems == ()
    mine = reading.table
    assert isinstance(mine, PreciseOrbits)
    assert np.array_equal(times, mine.times)
    assert names.tolist() == mine.satellites.tolist()
    clock = np.where(clock >= 999_999.0, np.nan, clock)  # what the format writes for none
    differing = ~((position == mine.position_m) | (np.isnan(position) & np.isnan(mine.position_m)))
    late = ~((clock * 1e-6 == mine.clock_s) | (np.isnan(clock) & np.isnan(mine.clock_s)))
    evidence(f"values that differ, of {position.size + clock.size} of {Path(path).name}",
             source=f"georinex {georinex.__version__} on the same real file", expected=0,
             got=int(differing.sum() + late.sum()), tolerance=0)  # fmt: skip


def test_why_orbits_are_read_by_an_own_reader(tmp_path: Path) -> None:
    """What georinex 1.16 does with an epoch that lacks a satellite, a clock of none, and a broken line."""
    three = HEAD.replace("    2   G01E11  0", "    3   G01E11E12")
    last = "PE12 -20000.000000  10000.000000 -15000.000000   -306.528657\n"
    body = BODY.replace("*  2024  3 30  0 15", last + "*  2024  3 30  0 15").replace("EOF\n", last + "EOF\n")
    lacking = "".join(
        line for line in body.splitlines(True) if "15957.102760" not in line
    )  # no G01 at the second epoch
    plain = tmp_path / "orbits.sp3"
    plain.write_text(three + lacking)
    table, problems = parse(three + lacking)
    assert problems == []
    assert np.isnan(table.position_m[1, table.satellites == "G01"]).all()
    assert table.position_m[1, table.satellites == "E12", 0] == -20_000_000.0
    _, names, position, clock = theirs(plain)
    assert position[1, names == "G01", 0] == 20_000_000.0  # that of E11
    assert clock[0, names == "E11"] > 999_999
    plain.write_text(three + body.replace("14957.102760", "14957.x02760"))
    with pytest.raises(ValueError, match="could not convert"):
        theirs(plain)


@pytest.mark.open_data
@pytest.mark.parametrize(
    ("path", "satellites", "epochs"),
    [
        ("2024-090/sp3/COD0MGXFIN_20240900000_01D_05M_ORB.SP3.gz", 121, 289),
        ("2004-001/sp3/igs12514.sp3.gz", 29, 96),
    ],
)
def test_sizes_of_real_files(open_data: Path, evidence: Evidence, path: str, satellites: int, epochs: int) -> None:
    reading = sp3.parse(gzip.decompress((open_data / path).read_bytes()), path)
    assert reading.problems == ()
    table = reading.table
    assert isinstance(table, PreciseOrbits)
    name = Path(path).name
    evidence(f"satellites of {name}", source="the file's own header line +", expected=satellites,
             got=len(table.satellites), tolerance=0)  # fmt: skip
    evidence(f"epochs of {name}", source="the file's own first line", expected=epochs, got=len(table.times),
             tolerance=0)  # fmt: skip
    radius = np.linalg.norm(table.position_m, axis=-1)
    assert np.nanmin(radius) > 2.3e7  # two Galileo satellites are on eccentric orbits
    assert np.nanmax(radius) < 4.8e7
