"""Maps of content: reading, writing, the biases in them, bad input, real files."""

import gzip
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.conftest import Evidence

from skylag.errors import FormatError, Refused
from skylag.formats import ionex
from skylag.tables import Biases, Fields


def invented(vtec: np.ndarray, sigma: np.ndarray | None = None, step: float = 2.5) -> Fields:
    """Maps with the given content (T, lat, lon) from 40 N, 170 W on, half an hour apart."""
    shape = vtec.shape
    start = np.datetime64("2024-03-30T00:00:18", "ns")  # 00:00 UT
    nothing = np.full(shape, np.nan, dtype=np.float32)
    return Fields(
        times=start + 1800 * np.arange(shape[0]).astype("timedelta64[s]"),
        lats=40.0 + step * np.arange(shape[1]), lons=-170.0 + step * np.arange(shape[2]),
        vtec=vtec.astype(np.float32), vtec_sigma=(nothing if sigma is None else sigma.astype(np.float32)),
        support=np.zeros(shape, dtype=np.uint16), slope=nothing, slope_sigma=nothing, slope_east=nothing,
        slope_north=nothing, state=np.zeros(shape, dtype=np.uint8),
    )  # fmt: skip


def written(fields: Fields) -> str:
    return ionex.write(fields, np.datetime64("2024-03-31", "ns"), 400.0, description="An invented map " * 6)


@given(
    st.integers(1, 3), st.integers(2, 5), st.integers(2, 34), st.sampled_from([0.5, 1.0, 2.5]), st.integers(0, 10**6)
)  # fmt: skip
@settings(max_examples=60)
def test_what_is_written_reads_back(times: int, lats: int, lons: int, step: float, seed: int) -> None:
    rng = np.random.default_rng(seed)
    vtec, sigma = rng.uniform(-20, 900, (2, times, lats, lons))
    vtec[rng.random(vtec.shape) < 0.1] = np.nan
    fields = invented(vtec, np.abs(sigma), step)
    reading = ionex.parse(written(fields).encode(), "made.inx")
    assert reading.problems == ()
    back = reading.table
    assert isinstance(back, Fields)
    assert np.array_equal(back.times, fields.times)
    assert back.lats == pytest.approx(fields.lats)
    assert back.lons == pytest.approx(fields.lons)
    assert np.allclose(back.vtec, fields.vtec, atol=0.0501, equal_nan=True)
    assert np.allclose(back.vtec_sigma, fields.vtec_sigma, atol=0.0501, equal_nan=True)
    assert reading.header["shell_height_km"] == 400.0


SAMPLE = written(invented(10 + np.arange(2 * 3 * 20).reshape(2, 3, 20) / 7.0))


def test_lines_are_as_the_format_has_them() -> None:
    lines = written(invented(np.full((2, 3, 20), 12.34))).splitlines()
    assert {len(line) for line in lines} == {80, 20}  # labelled lines, full lines of values, the rest of a row
    assert lines[0][60:].strip() == "IONEX VERSION / TYPE"
    assert "  -170.0-122.5   2.5" in next(line for line in lines if "LON1 / LON2 / DLON" in line)
    first = next(k for k, line in enumerate(lines) if "LAT/LON1/LON2/DLON/H" in line)
    assert lines[first][:32] == "    45.0-170.0-122.5   2.5 400.0"
    assert lines[first + 1] == "  123" * 16
    assert lines[first + 2] == "  123" * 4


def test_a_comment_is_broken_between_words() -> None:
    said = "Latitudes are geocentric: values lie between two rows of the map, and none beyond the last."
    text = ionex.write(invented(np.ones((1, 3, 3))), np.datetime64("2024-03-31", "ns"), 400.0, comment=said)
    lines = [line[:60].rstrip() for line in text.splitlines() if line[60:] == f"{'COMMENT':20s}"]
    assert len(lines) == 2 and " ".join(lines) == said
    assert ionex.parse(text.encode(), "made").problems == ()


def test_a_grid_the_format_cannot_hold_is_refused() -> None:
    with pytest.raises(Refused, match="tenths"):
        written(invented(np.ones((1, 3, 3)), step=0.25))


def test_exponents_and_gaps() -> None:
    """An exponent inside a map holds from there on; 9999 is none, whatever the exponent."""
    lines = SAMPLE.splitlines()
    second = [k for k, line in enumerate(lines) if "EPOCH OF CURRENT MAP" in line][1]
    lines.insert(second + 1, f"{-2:6d}{'':54s}EXPONENT")
    where = next(k for k, line in enumerate(lines) if "LAT/LON1" in line) + 1
    lines[where] = " 9999" + lines[where][5:]
    table = ionex.parse("\n".join(lines).encode(), "made").table
    plain = ionex.parse(SAMPLE.encode(), "made").table
    assert isinstance(table, Fields)
    assert isinstance(plain, Fields)
    assert np.isnan(table.vtec[0, -1, 0])
    assert table.vtec[1] == pytest.approx(plain.vtec[1] / 10)
    assert table.vtec[0, -1, 1:] == pytest.approx(plain.vtec[0, -1, 1:])


def test_a_last_map_at_24_hours() -> None:
    old, new = "  2024     3    30     0    30     0", "  2024     3    30    24     0     0"
    table = ionex.parse(SAMPLE.replace(old, new).encode(), "made").table
    assert isinstance(table, Fields)
    assert table.times[-1] == np.datetime64("2024-03-31T00:00:18", "ns")


def biased() -> str:
    rows = [
        ("Reference observables for GPS    : C1W-C2W", "COMMENT"),
        ("   G01    -7.118     0.056", "PRN / BIAS / RMS"),
        ("    02     7.582     0.051", "PRN / BIAS / RMS"),
        ("Reference observables for ARDN 10001M001 (G): C1C-C2W", "COMMENT"),
        ("   G  ARDN 10001M001          -0.999     0.150", "STATION / BIAS / RMS"),
        ("   R  BOLT 10002M001          11.102     0.162", "STATION / BIAS / RMS"),
    ]
    end = f"{'':60s}END OF HEADER"
    assert end in SAMPLE
    return SAMPLE.replace(end, "\n".join(f"{text:60s}{label}" for text, label in rows) + "\n" + end)


def test_the_biases_of_the_header() -> None:
    reading = ionex.parse(biased().encode(), "made.inx")
    assert reading.problems == ()
    found = reading.header["biases"]
    assert isinstance(found, Biases)
    columns = [getattr(found, name).tolist() for name in ("kind", "name", "system", "code1", "code2", "value_ns")]
    assert list(zip(*columns, strict=True)) == [
        ("satellite", "G01", "G", "C1W", "C2W", -7.118), ("satellite", "G02", "G", "C1W", "C2W", 7.582),
        ("receiver", "ARDN", "G", "C1C", "C2W", -0.999), ("receiver", "BOLT", "R", "C1P", "C2P", 11.102),
    ]  # fmt: skip
    assert found.sigma_ns.tolist() == [0.056, 0.051, 0.150, 0.162]
    assert found.start[0] == np.datetime64("2024-03-30", "ns")
    assert found.end[0] == np.datetime64("2024-03-31", "ns")


LATITUDE = "    45.0-170.0-122.5   2.5 400.0                            LAT/LON1/LON2/DLON/H"


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        (f"{1:6d}{'':54s}END OF TEC MAP", "", "no end of the map"),
        (f"  2024     3    30{0:6d}{0:6d}{0:6d}{'':24s}EPOCH OF CURRENT MAP", "", "epoch missing"),
        (LATITUDE, LATITUDE.replace("45.0", "85.0"), "not in the header"),
        ("  160", "  x60", "invalid literal"),
        (LATITUDE, "", "2 of 3 latitudes"),
    ],
)
def test_a_broken_map_is_a_problem_and_reading_goes_on(old: str, new: str, words: str) -> None:
    assert old in SAMPLE
    reading = ionex.parse(SAMPLE.replace(old, new, 1).encode(), "made.inx")
    assert isinstance(reading.table, Fields)
    assert len(reading.table.times) == 1
    assert len(reading.problems) == 1
    assert words in str(reading.problems[0])


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "IONEX VERSION"),
        (SAMPLE.replace("END OF HEADER", "END OF  EADER"), "no END OF HEADER"),
        (SAMPLE.replace("    45.0  40.0  -2.5", "    45.0  40.0   0.0"), "make no axis"),
        (SAMPLE.replace("    45.0  40.0  -2.5", "    45.0  40.0   2.5"), "make no axis"),
        (SAMPLE.replace("    45.0  40.0  -2.5", "   945.0  40.0  -2.5"), "not on Earth"),
        (SAMPLE[: SAMPLE.index("START OF TEC MAP") + 400], "no whole map"),
    ],
)
def test_a_file_that_makes_no_sense_is_refused(text: str, words: str) -> None:
    with pytest.raises(FormatError, match=words):
        ionex.parse(text.encode(), "made")


@given(st.data())
@settings(max_examples=150, deadline=2000)
def test_mutated_files_end_in_a_table_or_a_named_error(data: st.DataObject) -> None:
    text = bytearray(biased().encode())
    for _ in range(data.draw(st.integers(1, 12))):
        place = data.draw(st.integers(0, max(len(text) - 1, 0)))
        if data.draw(st.booleans()):
            text[place : place + 1] = bytes([data.draw(st.integers(0, 255))])
        else:
            del text[place : place + data.draw(st.integers(1, 90))]
    try:
        reading = ionex.parse(bytes(text), "mutated")
    except FormatError:
        return
    assert isinstance(reading.table, Fields)


@pytest.mark.open_data
def test_a_real_map(open_data: Path, evidence: Evidence) -> None:
    path = open_data / "2015-235/ionex/corg2350.15i.gz"
    reading = ionex.parse(gzip.decompress(path.read_bytes()), path.name)
    assert reading.problems == ()
    table, found = reading.table, reading.header["biases"]
    assert isinstance(table, Fields)
    assert table.vtec.shape == (25, 71, 73)
    peaks = [491, 499, 504, 506, 495, 518, 526, 524, 528, 532, 517, 547, 537, 506, 481, 471, 475, 504, 508, 524, 539,
             557, 563, 569, 570]  # fmt: skip
    got = np.rint(np.nanmax(table.vtec, axis=(1, 2)) * 10)
    evidence("peaks of the 25 maps of CODE 2015-08-23, largest difference", unit="0.1 TECU",
             source="peak values told in the file's own comments", expected=0.0,
             got=float(np.abs(got - peaks).max()), tolerance=0)  # fmt: skip
    zimm = (found.name == "ZIMM") & (found.system == "G")
    evidence("receiver bias of ZIMM in the map file of 2015-08-23", source="CODE corg2350.15i", unit="ns",
             expected=-11.083, got=float(found.value_ns[zimm][0]), tolerance=0)  # fmt: skip
    gps = (found.kind == "satellite") & (found.system == "G")
    evidence("sum of the GPS satellite biases of the map file of 2015-08-23", unit="ns",
             source="zero-mean condition told in the file's description; rounded to 0.001", expected=0.0,
             got=float(found.value_ns[gps].sum()), tolerance=0.02)  # fmt: skip
    assert np.nanmin(table.vtec_sigma) > 0


@pytest.mark.open_data
def test_receiver_codes_of_a_real_map(open_data: Path) -> None:
    path = open_data / "2024-090/ionex/COD0OPSFIN_20240900000_01D_01H_GIM.INX.gz"
    reading = ionex.parse(gzip.decompress(path.read_bytes()), path.name)
    assert reading.problems == ()
    found = reading.header["biases"]
    zimm = (found.name == "ZIMM") & (found.system == "G")
    assert (found.code1[zimm][0], found.code2[zimm][0], found.value_ns[zimm][0]) == ("C1C", "C2W", -10.708)


@pytest.mark.parametrize("told", ["  2024", "     x"])
def test_an_impossible_unit_between_maps_ends_the_reading(told: str) -> None:
    at = SAMPLE.index("\n", SAMPLE.index("END OF TEC MAP")) + 1
    text = SAMPLE[:at] + f"{told:<60}EXPONENT\n" + SAMPLE[at:]
    reading = ionex.parse(text.encode(), "made.inx")
    assert isinstance(reading.table, Fields)
    assert len(reading.table.times) == 1
    assert "EXPONENT" in reading.problems[0].what
