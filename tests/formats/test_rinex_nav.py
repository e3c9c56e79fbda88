"""Navigation files: each version and system, times, oddities, bad input, and an independent reader on real files."""

import gzip
import warnings
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.conftest import Evidence, open_data_folder
from tests.formats.navigation_text import GLONASS_STATE_KM, INVENTED, NOON, header, kepler_of, orbit_values, record

from skylag.errors import FormatError
from skylag.formats import rinex_nav
from skylag.tables import Ephemerides
from skylag.timescales import gps_to_utc


def table_of(text: str) -> Ephemerides:
    reading = rinex_nav.parse(text.encode(), "made.nav")
    assert reading.problems == ()
    assert isinstance(reading.table, Ephemerides)
    return reading.table


def gps(**more: float | None) -> list[float | None]:
    return orbit_values(INVENTED, **{"v20": 2.8, "v21": 0.0, "v22": -1.1e-8, "v24": 381_618.0, **more})


@pytest.mark.parametrize(("version", "letter"), [(2.11, "D"), (3.02, "D"), (3.05, "E"), (2.0, "E")])
def test_a_gps_record_reads_alike_in_every_version(version: float, letter: str) -> None:
    text = header(version) + record("G07", "2020-06-25 12:00:00", gps(), version, letter)
    table = table_of(text)
    assert table.satellites.tolist() == ["G07"]
    assert table.messages.tolist() == ["LNAV"]
    assert kepler_of(table, 0) == pytest.approx(INVENTED, rel=1e-12)
    assert table.toe[0] == NOON
    assert table.sent[0] == np.datetime64("2020-06-25T10:00:18", "ns")
    assert table.healthy[0]
    assert table.accuracy_m[0] == 2.8
    assert table.group_delays_s[0, 0] == -1.1e-8
    assert np.isnan(table.group_delays_s[0, 1])


def test_rinex_4_has_messages_of_their_own() -> None:
    modern = orbit_values(INVENTED, 36, v0=2.5e-3, v17=1e-14, v21=0.0, v22=3e-9, v28=385_000.0, v8=111.0)
    text = header(4.0) + record("G07", "2020-06-25 12:00:00", gps(), heading="LNAV")
    text += "> STO G07 LNAV\n    2020 06 25 12 00 00 GPUT\n" + "    " + " 1.0" * 4 + "\n"
    text += record("G08", "2020-06-25 12:00:00", modern[:32], heading="CNAV")
    text += record("E11", "2020-06-25 12:00:00", gps(), heading="FNAV")
    text += record("C21", "2020-06-25 12:00:00", orbit_values(INVENTED, 36, v29=1.0, v32=388_000.0), heading="CNV1")
    state = [*GLONASS_STATE_KM[:3], 0.0, *GLONASS_STATE_KM[3:6], 5.0, *GLONASS_STATE_KM[6:], 0.0, 1.0, 0.0, 2.0, 3.0]
    text += record("R07", "2020-06-25 16:45:00", state, heading="FDMA")
    table = table_of(text)
    assert dict(zip(table.satellites.tolist(), table.messages.tolist(), strict=True)) == {
        "G07": "LNAV", "G08": "CNAV", "E11": "FNAV", "C21": "CNV1", "R07": "FDMA",
    }  # fmt: skip
    row = table.satellites.tolist().index("G08")
    assert table.rates is not None
    assert table.rates[row].tolist() == [2.5e-3, 1e-14]
    # CNAV gives no reference time of its own: it is the record's epoch, never the propagation time (111 s here).
    assert table.toe[row] == NOON
    assert table.kepler[row, -1] == 388_800.0
    assert not table.healthy[table.satellites.tolist().index("C21")]
    assert table.channels[table.satellites.tolist().index("R07")] == 5


def test_rinex_4_ionospheric_records() -> None:
    text = header(4.0)
    text += "> ION G05 LNAV\n    2020 06 25 00 00 00" + "".join(f"{v:19.12E}" for v in (1e-8, 2e-8, -3e-8)) + "\n"
    text += "    " + "".join(f"{v:19.12E}" for v in (4e-8, 8e4, 9e4, -6e4)) + "\n    " + f"{-5e5:19.12E}" + "\n"
    text += "> ION E05 IFNV\n    2020 06 25 00 00 00" + "".join(f"{v:19.12E}" for v in (28.25, 0.0078, 0.01)) + "\n"
    assert table_of(text).ionosphere == {
        "GPSA": (1e-8, 2e-8, -3e-8, 4e-8), "GPSB": (8e4, 9e4, -6e4, -5e5), "GAL": (28.25, 0.0078, 0.01),
    }  # fmt: skip


def test_beidou_time_is_fourteen_seconds_behind() -> None:
    table = table_of(header(3.05) + record("C19", "2020-06-25 12:00:00", gps()))
    assert table.toe[0] == NOON + np.timedelta64(14, "s")
    assert table.messages[0] == "D1"
    assert table_of(header(3.05) + record("C05", "2020-06-25 12:00:00", gps())).messages[0] == "D2"


def test_glonass_time_is_utc_and_states_are_metres() -> None:
    state = [*GLONASS_STATE_KM[:3], 0.0, *GLONASS_STATE_KM[3:6], 251.0, *GLONASS_STATE_KM[6:], 0.0]
    text = header(3.02) + record("R07", "2020-06-25 16:45:00", state, clock=(0.0, 0.0, 405_000.0))
    table = table_of(text)
    assert table.toe[0] == np.datetime64("2020-06-25T16:45:18", "ns")  # 18 leap seconds since 2017
    assert table.sent[0] == np.datetime64("2020-06-25T16:30:18", "ns")
    assert table.state[0, :3] == pytest.approx([24328438.96484, -5366442.871094, 5610807.617188])
    assert table.state[0, 3:6] == pytest.approx([-772.4418640137, 92.29373931885, 3458.779335022])
    assert table.channels[0] == -5  # written as 251 by some receivers: the raw byte of -5


def test_week_and_day_borders_fold_to_the_nearest() -> None:
    # A record of Saturday 23:59:44 for the Sunday midnight, its seconds of week already those of the new week.
    late = orbit_values({**INVENTED, "toe_s": 0.0}, v24=604_000.0)
    table = table_of(header(3.05) + record("G01", "2020-06-27 23:59:44", late))
    assert table.toe[0] == np.datetime64("2020-06-28T00:00:00", "ns")
    assert table.sent[0] == np.datetime64("2020-06-27T23:46:40", "ns")


def test_galileo_messages_follow_the_data_sources() -> None:
    text = header(3.05) + record("E11", "2020-06-25 12:00:00", gps(v17=258.0, v23=2e-9))
    text += record("E11", "2020-06-25 12:10:00", gps(v17=517.0, v23=3e-9, v20=-1.0))
    table = table_of(text)
    assert sorted(table.messages.tolist()) == ["FNAV", "INAV"]
    assert np.isnan(table.accuracy_m[table.messages == "INAV"]).all()  # -1 means: no accuracy is predicted
    assert table.group_delays_s[table.messages == "INAV", 1].tolist() == [3e-9]


def test_transmission_time_unknown_falls_back_to_the_epoch() -> None:
    table = table_of(header(3.05) + record("G07", "2020-06-25 12:00:00", gps(v24=0.9999e9)))
    assert table.sent[0] == NOON


def test_other_systems_are_counted_and_passed_over() -> None:
    text = header(3.05) + record("S20", "2020-06-25 12:00:00", [1.0] * 12) + record("G07", "2020-06-25 12:00:00", gps())
    text += record("I02", "2020-06-25 12:00:00", gps())
    reading = rinex_nav.parse(text.encode(), "made.nav")
    assert reading.header["skipped_records"] == {"S": 1, "I": 1}
    assert len(reading.table.toe) == 1  # type: ignore[union-attr]


def test_messages_of_unknown_layout_are_counted_and_passed_over() -> None:
    """RINEX 4.02 has messages of GLONASS and QZSS that say where a satellite is in ways not read here."""
    text = header(4.02) + record("R01", "2020-06-25 12:00:00", [0.0] * 20, heading="L1OC")
    text += record("C20", "2020-06-25 12:00:00", orbit_values(INVENTED), heading="D9")
    text += record("G05", "2020-06-25 12:00:00", gps(), heading="LNAV")
    reading = rinex_nav.parse(text.encode(), "made.nav")
    assert reading.problems == ()
    assert list(reading.table.satellites) == ["G05"]  # type: ignore[union-attr]
    assert reading.header["skipped_records"] == {"R L1OC": 1, "C D9": 1}


def test_header_facts() -> None:
    extra = (
        ("GPSA   4.6566e-09  1.4901e-08 -5.9605e-08 -1.1921E-07", "IONOSPHERIC CORR"),
        ("GAL    2.8250e+01  7.8125e-03  1.0071e-02  0.0000E+00", "IONOSPHERIC CORR"),
        ("    18", "LEAP SECONDS"),
    )
    reading = rinex_nav.parse((header(3.05, extra=extra) + record("G07", "2020-06-25 12:00:00", gps())).encode(), "x")
    assert reading.header["leap_seconds"] == 18
    assert reading.table.ionosphere == {  # type: ignore[union-attr]
        "GPSA": (4.6566e-09, 1.4901e-08, -5.9605e-08, -1.1921e-07), "GAL": (28.25, 0.0078125, 0.010071),
    }  # fmt: skip
    odd = header(3.05, extra=(("   \x1c18", "LEAP SECONDS"), ("    \xb2\xb3", "LEAP SECONDS")))
    assert rinex_nav.parse(odd.encode("latin-1"), "x").header["leap_seconds"] is None
    old = header(2.11, extra=(("    0.1118D-07 -0.7451D-08 -0.5961D-07  0.1192D-06", "ION ALPHA"),))
    assert table_of(old).ionosphere == {"GPSA": (0.1118e-07, -0.7451e-08, -0.5961e-07, 0.1192e-06)}


# ------------------------------------------------------------------------------------------------ bad input


def spoiled(text: str) -> tuple[Ephemerides, list[str]]:
    reading = rinex_nav.parse(text.encode("latin-1"), "made.nav")
    return reading.table, [str(problem) for problem in reading.problems]  # type: ignore[return-value]


GOOD = record("G01", "2020-06-25 12:00:00", gps())


@pytest.mark.parametrize(
    ("what", "bad"),
    [
        ("missing or no number", record("G02", "2020-06-25 12:00:00", gps(v7=None))),
        ("missing or no number", GOOD.replace("5.153700000000E+03", "5.1537x0000000E+03")),
        ("missing or no number", GOOD.replace("5.153700000000E+03", "5.153_00000000E+03")),
        ("missing or no number", GOOD.replace("5.153700000000E+03", "5.15.700000000E+03")),
        ("outside of what", record("G02", "2020-06-25 12:00:00", gps(v7=12.0))),
        ("outside of what", record("G02", "2020-06-25 12:00:00", gps(v5=1.5))),
        ("impossible epoch", record("G02", "2020-02-30 12:00:00", gps())),
        ("impossible epoch", record("G02", "0020-06-25 12:00:00", gps())),
        ("more than a day", record("G02", "2020-06-22 12:00:00", gps())),
        ("record has 7 lines, 8 are needed", "\n".join(GOOD.splitlines()[:7]) + "\n"),
        ("no satellite", GOOD.replace("G01", "G0x")),
        ("no satellite", GOOD.replace("G01", "Q01")),
        ("GLONASS orbit", record("R02", "2020-06-25 12:15:00", [1.0] * 12)),
        ("no usable channel", record("R02", "2020-06-25 12:15:00", [
            *GLONASS_STATE_KM[:3], 0.0, *GLONASS_STATE_KM[3:6], 20.0, *GLONASS_STATE_KM[6:], 0.0])),
        ("velocity or acceleration missing", record("R02", "2020-06-25 12:15:00", [None] * 12)),
    ],
)  # fmt: skip
def test_a_broken_record_is_a_problem_and_reading_goes_on(what: str, bad: str) -> None:
    table, problems = spoiled(header(3.05) + GOOD + bad + record("G30", "2020-06-25 14:00:00", gps(v8=396_000.0)))
    assert table.satellites.tolist() == ["G01", "G30"]
    assert len(problems) == 1
    assert what in problems[0]
    assert problems[0].startswith("made.nav:11:")  # the line the broken record begins at


def test_a_file_cut_behind_a_heading() -> None:
    text = header(4.0) + record("G01", "2020-06-25 12:00:00", gps(), heading="LNAV") + "> EPH G02 LNAV"
    table, problems = spoiled(text)
    assert table.satellites.tolist() == ["G01"]
    assert "record has 0 lines" in problems[0]


def test_a_cut_file_keeps_what_is_whole() -> None:
    text = header(3.05) + GOOD + record("G02", "2020-06-25 12:00:00", gps())
    table, problems = spoiled(text[:-300])
    assert table.satellites.tolist() == ["G01"]
    assert "record has" in problems[0]


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "RINEX VERSION"),
        ("hello\n", "RINEX VERSION"),
        (header(3.05, kind="O"), "no navigation data"),
        (header(2.11, kind="O"), "no navigation data"),
        (header(7.0), "not known here"),
        (header(3.05).replace("     3.05", "     x.05"), "no number"),
        ("\n".join(header(3.05).splitlines()[:1]), "END OF HEADER"),
    ],
)
def test_a_file_of_another_kind_is_refused(text: str, words: str) -> None:
    with pytest.raises(FormatError, match=words):
        rinex_nav.parse(text.encode(), "made.nav")


def test_a_file_without_records_is_an_empty_table() -> None:
    assert len(table_of(header(3.05)).toe) == 0


SAMPLE = (
    header(3.05) + GOOD + record("C19", "2020-06-25 12:00:00", gps()) + record("E11", "2020-06-25 12:00:00", gps())
).encode()
SAMPLE_4 = (header(4.0) + record("G07", "2020-06-25 12:00:00", gps(), heading="LNAV")).encode()
SAMPLE_2 = (header(2.11) + record("G07", "2020-06-25 12:00:00", gps(), 2.11)).encode()


@given(st.data())
@settings(max_examples=150, deadline=2000)
def test_mutated_files_end_in_a_table_or_a_named_error(data: st.DataObject) -> None:
    text = bytearray(data.draw(st.sampled_from([SAMPLE, SAMPLE_4, SAMPLE_2])))
    for _ in range(data.draw(st.integers(1, 12))):
        place = data.draw(st.integers(0, len(text) - 1))
        match data.draw(st.sampled_from(["flip", "cut", "drop", "digit"])):
            case "flip":
                text[place] = data.draw(st.integers(0, 255))
            case "digit":
                text[place] = data.draw(st.sampled_from(b"0123456789+-.ED \n>"))
            case "drop":
                del text[place : place + data.draw(st.integers(1, 200))]
            case "cut":
                del text[place + 1 :]
        if not text:
            break
    try:
        reading = rinex_nav.parse(bytes(text), "mutated")
    except FormatError:
        return
    assert isinstance(reading.table, Ephemerides)
    assert np.isfinite(reading.table.kepler[reading.table.messages != "FDMA"]).all()


ANGLES = st.floats(-3.1, 3.1).map(lambda value: round(value, 9))


@given(st.dictionaries(st.sampled_from(["m0", "omega", "omega0"]), ANGLES), st.integers(0, 604_784 // 16))
@settings(max_examples=60)
def test_round_trip_to_the_resolution_of_the_format(angles: dict[str, float], step: int) -> None:
    toe_s = 16.0 * step
    kepler = {**INVENTED, **angles, "toe_s": toe_s}
    epoch = np.datetime64("2020-06-21T00:00:00", "s") + int(toe_s)
    text = header(3.05) + record("G09", str(epoch).replace("T", " "), orbit_values(kepler, v24=toe_s))
    table = table_of(text)
    assert kepler_of(table, 0) == pytest.approx(kepler, rel=1e-12, abs=1e-18)
    assert table.toe[0] == epoch.astype("datetime64[ns]")


# ------------------------------------------------------------------------------------------------ real files

KEPLER_NAMES = {
    "sqrt_a": "sqrtA", "e": "Eccentricity", "i0": "Io", "idot": "IDOT", "omega0": "Omega0", "omega_dot": "OmegaDot",
    "omega": "omega", "m0": "M0", "delta_n": "DeltaN", "cuc": "Cuc", "cus": "Cus", "crc": "Crc", "crs": "Crs",
    "cic": "Cic", "cis": "Cis", "toe_s": "Toe",
}  # fmt: skip


@pytest.mark.open_data
@pytest.mark.parametrize(
    ("path", "system", "shift_s", "more"),
    [
        # The other reader gives NaN for files that leave spare fields blank, so these are files that do not.
        ("2021-001/nav/cbw10010.21n.gz", "G", 0, {"TGD": "tgd", "SVacc": "accuracy"}),
        ("2024-127/nav/NYA100NOR_S_20241240000_01D_GN.rnx.gz", "G", 0, {"TGD": "tgd", "SVacc": "accuracy"}),
        ("2021-001/nav/AMEL00NLD_R_20210010000_01D_MN.rnx.gz", "C", 14, {"TGD1": "tgd", "TGD2": "second"}),
        ("2024-090/nav/KIR000SWE_R_20240900000_01D_MN.rnx.gz", "E", 0, {"BGDe5a": "tgd", "BGDe5b": "second"}),
    ],
)
def test_values_equal_those_of_an_independent_reader(
    open_data: Path, evidence: Evidence, path: str, system: str, shift_s: int, more: dict[str, str]
) -> None:
    georinex = pytest.importorskip("georinex")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        theirs = georinex.load(open_data / path, use={system} if "_MN" in path else None)
    mine = rinex_nav.parse(gzip.decompress((open_data / path).read_bytes()), path).table
    assert isinstance(mine, Ephemerides)
    epochs = theirs.time.values.astype("datetime64[ns]") + np.timedelta64(shift_s, "s")
    # The record of theirs is keyed by its epoch; the orbit's reference time may differ by a little in mine.
    own = {name: mine.kepler[:, column] for column, name in enumerate(Ephemerides.KEPLER)}
    compared = worst = 0.0
    for name in theirs.sv.values:
        short = str(name)[:3]
        rows = mine.satellites == short
        for column, label in KEPLER_NAMES.items():
            values = theirs[label].sel(sv=name).values
            told = np.isfinite(values)
            for epoch, value in zip(epochs[told], values[told], strict=True):
                near = rows & (np.abs((mine.toe - epoch).astype(np.int64)) < 3_600 * 10**9)
                worst = max(worst, float(np.min(np.abs(own[column][near] - value))) if near.any() else np.inf)
                compared += 1
        extra = {"tgd": mine.group_delays_s[:, 0], "second": mine.group_delays_s[:, 1], "accuracy": mine.accuracy_m}
        for label, column in more.items():
            values = theirs[label].sel(sv=name).values
            values = values[np.isfinite(values)]
            got = extra[column][rows]
            # SISA and accuracy of -1 mean none; ours are NaN there.
            missing = [value for value in values if value >= -1e-6 and not np.any(got == value)]
            assert not missing, (short, label, missing)
    assert compared > 1000
    evidence(
        f"largest difference of any orbit value of {system}, {Path(path).name}",
        source=f"georinex {georinex.__version__} on the same real file",
        expected=0.0, got=worst, tolerance=0.0,
    )  # fmt: skip


@pytest.mark.open_data
def test_glonass_values_equal_those_of_an_independent_reader(open_data: Path, evidence: Evidence) -> None:
    georinex = pytest.importorskip("georinex")
    path = open_data / "2021-001/nav/dlf10010.21g.gz"
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        theirs = georinex.load(path)
    mine = rinex_nav.parse(gzip.decompress(path.read_bytes()), path.name).table
    assert isinstance(mine, Ephemerides)
    worst, compared = 0.0, 0
    for row in range(len(mine.toe)):
        epoch = mine.toe[row] - np.timedelta64(18, "s")
        one = theirs.sel(sv=str(mine.satellites[row]), time=epoch, method=None)
        # The other reader keeps metres as we do.
        got = mine.state[row]
        expected = [float(one[label]) for label in ("X", "Y", "Z", "dX", "dY", "dZ", "dX2", "dY2", "dZ2")]
        if np.all(np.isfinite(expected)):
            worst = max(worst, float(np.max(np.abs(got - expected))))
            assert int(one["FreqNum"]) == mine.channels[row]
            compared += 1
    assert compared > 400
    evidence(
        "largest difference of any GLONASS position [m], velocity, acceleration, dlf10010.21g",
        source=f"georinex {georinex.__version__} on the same real file",
        expected=0.0, got=worst, tolerance=1e-6,
    )  # fmt: skip


NAVIGATION_FILES = sorted(str(p.relative_to(open_data_folder())) for p in open_data_folder().glob("*/nav/*"))
STATE_NAMES = ("X", "Y", "Z", "dX", "dY", "dZ", "dX2", "dY2", "dZ2")


def without_blanks(text: bytes) -> bytes:
    """Zeros in the blank fields of orbit lines of RINEX 3."""
    lines = text.decode("latin-1").split("\n")
    begin = next(k for k, line in enumerate(lines) if "END OF HEADER" in line) + 1
    for k in range(begin, len(lines)):
        if lines[k].startswith("    ") and lines[k].strip():
            fields = [lines[k].ljust(80)[at : at + 19] for at in range(4, 80, 19)]
            lines[k] = "    " + "".join(part if part.strip() else f"{0:19.12E}" for part in fields)
    return "\n".join(lines).encode("latin-1")


@pytest.mark.slow
@pytest.mark.open_data
@pytest.mark.parametrize("path", NAVIGATION_FILES or ["none"])
def test_every_orbit_value_of_every_file_equals_that_of_an_independent_reader(
    open_data: Path, evidence: Evidence, path: str, tmp_path: Path
) -> None:
    """Each record of ours, of each constellation, against theirs of its epoch.

    Where a spare field is blank theirs has no number at all, so it is given the text with zeros there.
    Of several messages of one epoch any may match.
    """
    georinex = pytest.importorskip("georinex")
    text = gzip.decompress((open_data / path).read_bytes())
    mine = rinex_nav.parse(text, path).table
    assert isinstance(mine, Ephemerides)
    plain = tmp_path / Path(path).name.removesuffix(".gz")
    plain.write_bytes(without_blanks(text))
    leap_s = round(float((mine.toe[:1] - gps_to_utc(mine.toe[:1]))[0] / np.timedelta64(1, "s")))
    compared = differing = silent = 0
    for system in sorted({str(name)[0] for name in mine.satellites}):
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            theirs = georinex.load(plain, use={system} if "_MN" in path else None)
        shift = {"R": leap_s, "C": 14}.get(system, 0)
        of_satellite: dict[str, list[str]] = {}
        for name in theirs.sv.values:
            of_satellite.setdefault(str(name)[:3], []).append(str(name))
        labels = STATE_NAMES if system == "R" else tuple(KEPLER_NAMES[column] for column in Ephemerides.KEPLER)
        block = np.stack([theirs[label].transpose("time", "sv").values for label in labels], axis=-1)
        times = theirs.time.values.astype("datetime64[ns]") + np.timedelta64(shift, "s")
        columns = {str(name): k for k, name in enumerate(theirs.sv.values)}
        for row in np.flatnonzero(np.char.startswith(mine.satellites, system)):
            own = mine.state[row] if system == "R" else mine.kepler[row]
            near = np.flatnonzero(np.abs((times - mine.toe[row]).astype(np.int64)) < 3_600 * 10**9)
            told = [block[k, columns[name]] for k in near for name in of_satellite.get(str(mine.satellites[row]), [])]
            whole = [values for values in told if np.isfinite(values).all()]
            if not whole:
                silent += 1
                continue
            compared += len(own)
            same = np.array([np.isclose(values, own, rtol=1e-12, atol=0) for values in whole])
            differing += len(own) - int(same.sum(axis=1).max())
    evidence(f"orbit values that differ, of {compared} in {Path(path).name}",
             source=f"georinex {georinex.__version__} on the same real file; of {silent} records it tells no whole one",
             expected=0, got=differing, tolerance=0)  # fmt: skip
    assert compared > 1000


@pytest.mark.open_data
def test_every_real_navigation_file_reads_without_a_problem(open_data: Path) -> None:
    paths = sorted(open_data.glob("*/nav/*.gz"))
    assert len(paths) > 10
    for path in paths:
        reading = rinex_nav.parse(gzip.decompress(path.read_bytes()), path.name)
        assert reading.problems == (), path.name
        assert len(reading.table.toe) > 100  # type: ignore[union-attr]


@pytest.mark.open_data
def test_counts_of_a_mixed_file(open_data: Path, evidence: Evidence) -> None:
    path = open_data / "2020-177/nav/ESBC00DNK_R_20201770000_01D_MN.rnx.gz"
    table = rinex_nav.parse(gzip.decompress(path.read_bytes()), path.name).table
    assert isinstance(table, Ephemerides)
    evidence(
        "BeiDou D1 and D2 records of ESBC 2020-06-25", source="summary comments in the header of the file itself (357)",
        expected=357, got=float(np.isin(table.messages, ["D1", "D2"]).sum()), tolerance=0,
    )  # fmt: skip
