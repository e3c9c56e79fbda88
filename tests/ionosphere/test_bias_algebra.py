"""Chains of biases, spans, group delays, and real products against each other."""

import gzip
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tests.conftest import Evidence

from skylag import formats
from skylag.constants import SPEED_OF_LIGHT_M_S
from skylag.formats import biases as bias_files
from skylag.formats import rinex_nav
from skylag.ionosphere import bias_algebra, geometry, orbits, pairs
from skylag.ionosphere.bias_algebra import pair_bias
from skylag.tables import Biases, Ephemerides, Signals

NEVER = np.datetime64("NaT", "ns")
NOON = np.datetime64("2024-03-30T12:00:00", "ns")
Row = tuple[str, str, str, str, str, float, float, np.datetime64, np.datetime64]


def row(
    code1: str, code2: str, value: float, sigma: float = 0.1, start: str = "", end: str = "", name: str = "G05"
) -> Row:  # fmt: skip
    kind = "satellite" if name[1:].isdigit() else "receiver"
    begin, finish = (np.datetime64(text, "ns") if text else NEVER for text in (start, end))
    return (kind, name, "G", code1, code2, value, sigma, begin, finish)


def table(*rows: Row) -> Biases:
    columns = list(zip(*rows, strict=True)) if rows else [()] * 9
    return Biases(
        *(np.array(column, dtype=np.str_) for column in columns[:5]),  # type: ignore[arg-type]
        *(np.array(column, dtype=np.float64) for column in columns[5:7]),  # type: ignore[arg-type]
        *(np.array(column, dtype="datetime64[ns]") for column in columns[7:]),  # type: ignore[arg-type]
    )


def of(biases: Biases, code1: str, code2: str, name: str = "G05", **more: float) -> tuple[float, float] | None:
    kind = "satellite" if name[1:].isdigit() else "receiver"
    return pair_bias(biases, kind, name, "G", code1, code2, NOON, **more)


def test_chains() -> None:
    known = table(row("C1W", "C2W", -7.717, 0.006), row("C1W", "C1C", 1.498, 0.004), row("C2W", "C2X", 0.5, 0.0))
    assert of(known, "C1W", "C2W") == (-7.717, 0.006)
    assert of(known, "C2W", "C1W") == (7.717, 0.006)
    # The published rule: the bias of C1C-C2W is that of P1-P2 less that of P1-C1 (handbook 4.1).
    assert of(known, "C1C", "C2W") == pytest.approx((-7.717 - 1.498, np.hypot(0.006, 0.004)))
    assert of(known, "C1C", "C2X") == pytest.approx((-7.717 - 1.498 + 0.5, np.hypot(0.006, 0.004)))
    assert of(known, "C1C", "C5Q") is None
    assert of(known, "C1C", "C1C") == (0.0, 0.0)
    assert of(known, "C1W", "C2W", "G06") is None
    assert of(table(), "C1W", "C2W") is None


@pytest.mark.parametrize(
    ("start", "end", "within_days", "meets"),
    [
        ("2024-03-30", "2024-03-31", 0.0, True), ("2024-03-01", "2024-04-01", 0.0, True), ("", "", 0.0, True),
        ("", "2024-03-30T01:00", 0.0, True), ("2024-03-29", "2024-03-30", 0.0, False),
        ("2024-03-31", "2024-04-01", 0.0, False), ("2024-03-30T06:00", "2024-03-30T06:00", 0.0, True),
        ("2024-03-20", "2024-03-21", 10.0, True), ("2024-03-20", "2024-03-21", 9.0, False),
        ("2024-05-29T12:00", "2024-05-30", 60.0, True), ("2024-05-30", "2024-05-31", 60.0, False),
    ],
)  # fmt: skip
def test_whether_a_table_is_of_a_day(start: str, end: str, within_days: float, meets: bool) -> None:
    known = table(row("C1W", "C2W", -7.7, start=start, end=end), row("C1W", "C2W", 1.0, start="1999-01-01",
                                                                    end="1999-01-02"))  # fmt: skip
    assert bias_algebra.of_day(known, NOON.astype("datetime64[D]"), within_days) is meets
    assert not bias_algebra.of_day(table(), NOON.astype("datetime64[D]"))


def test_single_code_biases_make_pairs() -> None:
    known = table(row("C1C", "", 9.2873, 0.0035), row("C2W", "", 17.7562, 0.0))
    assert of(known, "C1C", "C2W") == pytest.approx((9.2873 - 17.7562, 0.0035))
    assert of(known, "C1C", "C1W") is None


def test_fewer_records_win_then_the_smaller_sigma() -> None:
    direct = row("C1C", "C2W", 5.0, 3.0)
    known = table(row("C1C", "", 1.0), row("C2W", "", 2.0), direct)
    assert of(known, "C1C", "C2W") == (5.0, 3.0)
    loose = row("C1C", "", 1.0, 0.5), row("C2W", "", 2.0, 0.5)
    two_ways = table(*loose, row("C1C", "C1W", 3.0, 0.1), row("C1W", "C2W", 4.0, 0.1))
    assert of(two_ways, "C1C", "C2W") == pytest.approx((7.0, np.hypot(0.1, 0.1)))


def test_an_unknown_sigma_stays_unknown() -> None:
    got = of(table(row("C1W", "C2W", 1.0, np.nan), row("C1W", "C1C", 2.0, 0.1)), "C1C", "C2W")
    assert got is not None
    assert got[0] == pytest.approx(-1.0)
    assert np.isnan(got[1])


def test_spans() -> None:
    day = row("C1W", "C2W", 1.0, 0.1, "2024-03-30", "2024-03-31")
    month = row("C1W", "C2W", 2.0, 0.1, "2024-03-01", "2024-04-01")
    always = row("C1W", "C2W", 3.0)
    for order in ((day, month, always), (always, month, day)):
        assert of(table(*order), "C1W", "C2W") == (1.0, 0.1)
    assert of(table(month, always), "C1W", "C2W") == (2.0, 0.1)
    assert of(table(always), "C1W", "C2W") == (3.0, 0.1)
    other = row("C1W", "C2W", 4.0, 0.1, "2024-03-28", "2024-03-29")
    assert of(table(other), "C1W", "C2W") is None
    assert of(table(other), "C1W", "C2W", within_days=1.0) is None  # it ended a day and a half before noon
    assert of(table(other), "C1W", "C2W", within_days=2.0) == (4.0, 0.1)
    assert of(table(other, always), "C1W", "C2W", within_days=2.0) == (3.0, 0.1)  # what covers comes first
    ended = row("C1W", "C2W", 5.0, 0.1, "2024-03-29", "2024-03-30T12:00:00")
    assert pair_bias(table(ended), "satellite", "G05", "G", "C1W", "C2W", NOON - np.timedelta64(1, "ns")) == (5.0, 0.1)


def test_receivers_by_four_or_nine_characters() -> None:
    known = table(row("C1W", "C2W", 1.0, name="ARDN"))
    assert of(known, "C1W", "C2W", "ARDN00XYZ") == (1.0, 0.1)
    assert of(known, "C1W", "C2W", "ardn") == (1.0, 0.1)
    assert of(known, "C1W", "C2W", "BOLT") is None
    assert pair_bias(known, "satellite", "ARDN", "G", "C1W", "C2W", NOON) is None


@given(st.lists(st.floats(-100, 100), min_size=3, max_size=6), st.data())
def test_differences_of_single_codes_close(values: list[float], data: st.DataObject) -> None:
    """Whatever mixture of records, the bias of a pair is the difference of the codes' own biases."""
    codes = ["C1C", "C1W", "C2W", "C2X", "C5Q", "C5X"][: len(values)]
    own = dict(zip(codes, values, strict=True))
    rows = []
    for number, code in enumerate(codes[1:], start=1):  # a random tree, so that every pair has a chain
        other = codes[data.draw(st.integers(0, number - 1))]
        first, second = data.draw(st.sampled_from([(code, other), (other, code)]))
        rows.append(row(first, second, own[first] - own[second]))
    for first in codes:
        for second in codes:
            got = of(table(*rows), first, second)
            assert got is not None
            assert got[0] == pytest.approx(own[first] - own[second], abs=1e-9)


def test_the_sign_of_biases_in_content(evidence: Evidence) -> None:
    """P2-P1 of 5 m with biases of +2 ns (satellite) and -4 ns (receiver) is 41.890382 TECU of slant content."""
    per_tecu_m = 0.105045953
    satellite, receiver = of(table(row("C1W", "C2W", 2.0)), "C1W", "C2W"), -4.0
    assert satellite is not None
    got = (5.0 + SPEED_OF_LIGHT_M_S * 1e-9 * (satellite[0] + receiver)) / per_tecu_m
    evidence("slant content of 5 m with both biases", source="handbook 4.1: STEC = [P2 - P1 + c (DCB_s + DCB_r)]/A",
             expected=41.890382, got=got, tolerance=1e-5, unit="TECU")  # fmt: skip


# ------------------------------------------------------------------------------------------------ group delays


def broadcast(satellite: str, delays: tuple[float, float], sent_h: int = 0, healthy: bool = True) -> Ephemerides:
    when = np.array([np.datetime64("2024-03-30T06:00:00", "ns") + np.timedelta64(sent_h, "h")])
    return Ephemerides(
        satellites=np.array([satellite]), messages=np.array(["LNAV"]), toe=when, sent=when, healthy=np.array([healthy]),
        accuracy_m=np.array([2.0]), kepler=np.ones((1, 16)), state=np.full((1, 9), np.nan),
        channels=np.zeros(1, dtype=np.int64), group_delays_s=np.array([delays]),
    )  # fmt: skip


@pytest.mark.parametrize(
    ("satellite", "delays", "codes", "expected", "source"),
    [
        ("G05", (1e-8, np.nan), ("C1W", "C2W"), -6.46944444, "IS-GPS-200 20.3.3.3.3.2: 1 - (77/60)^2"),
        ("E11", (1e-8, 0.0), ("C1C", "C5Q"), -7.93270321, "Galileo OS SIS ICD 5.1.5: 1 - (154/115)^2"),
        ("E11", (0.0, 1e-8), ("C1X", "C7X"), -7.03246194, "Galileo OS SIS ICD 5.1.5: 1 - (154/118)^2"),
        ("C21", (1e-8, 4e-9), ("C2I", "C6I"), 10.0, "BDS-SIS-ICD B1I 5.2.4.10"),
        ("C21", (1e-8, 4e-9), ("C2I", "C7I"), 6.0, "BDS-SIS-ICD B1I 5.2.4.10"),
    ],
)
def test_group_delays_as_biases(
    satellite: str, delays: tuple[float, float], codes: tuple[str, str], expected: float, source: str,
    evidence: Evidence,
) -> None:  # fmt: skip
    known = bias_algebra.from_group_delays(broadcast(satellite, delays))
    assert known.datum == "broadcast"
    got = pair_bias(known, "satellite", satellite, satellite[0], *codes, NOON)
    assert got is not None
    evidence(f"{codes[0]}-{codes[1]} of {satellite[0]} from 10 ns of its group delay", source=source, expected=expected,
             got=got[0], tolerance=1e-7, unit="ns")  # fmt: skip


def test_the_latest_healthy_record_counts() -> None:
    told = ((1e-9, 0, True), (2e-9, 4, True), (9e-9, 6, False))
    joined = orbits.join([broadcast("G05", (delay, np.nan), sent_h, healthy) for delay, sent_h, healthy in told])[0]
    assert isinstance(joined, Ephemerides)
    got = pair_bias(bias_algebra.from_group_delays(joined), "satellite", "G05", "G", "C1W", "C2W", NOON)
    assert got is not None
    assert got[0] == pytest.approx(-0.646944444 * 2)
    sick = bias_algebra.from_group_delays(broadcast("G05", (9e-9, np.nan), 6, False))
    assert len(sick) == 0


def test_join_keeps_all_rows() -> None:
    both = bias_algebra.join([table(row("C1W", "C2W", 1.0)), table(row("C1W", "C1C", 2.0))])
    assert of(both, "C1C", "C2W") == pytest.approx((-1.0, np.hypot(0.1, 0.1)))


@pytest.mark.open_data
@pytest.mark.parametrize(("system", "codes", "rms_ns"), [("G", ("C1W", "C2W"), 0.8), ("E", ("C1C", "C5Q"), 0.7)])
def test_group_delays_against_precise_biases_of_the_day(
    open_data: Path, evidence: Evidence, system: str, codes: tuple[str, str], rms_ns: float
) -> None:
    """Real group delays and CODE's single-code biases of 2024-03-30: slope one, and what is left after one mean."""
    nav = open_data / "2024-090/nav/KIR000SWE_R_20240900000_01D_MN.rnx.gz"
    precise = open_data / "2024-090/bias/COD0MGXFIN_20240900000_01D_01D_OSB.BIA.gz"
    records = rinex_nav.parse(gzip.decompress(nav.read_bytes()), nav.name).table
    known = bias_files.parse(gzip.decompress(precise.read_bytes()), precise.name).table
    assert isinstance(records, Ephemerides)
    assert isinstance(known, Biases)
    told = bias_algebra.from_group_delays(records)
    points = [
        (mine[0], theirs[0])
        for name in np.unique(told.name[told.system == system])
        if (mine := pair_bias(told, "satellite", name, system, *codes, NOON))
        and (theirs := pair_bias(known, "satellite", name, system, *codes, NOON))
    ]
    assert len(points) > 20
    mine, theirs = np.array(points).T
    slope = float(np.polyfit(mine, theirs, 1)[0])
    source = "CODE MGEX OSB of 2024-03-30, real data"
    evidence(f"slope of precise on broadcast {system} {'-'.join(codes)}", source=source,
             expected=1.0, got=slope, tolerance=0.05)  # fmt: skip
    evidence(f"scatter of broadcast against precise {system} {'-'.join(codes)}", source=source,
             expected=rms_ns, got=float(np.std(mine - theirs)), tolerance=0, unit="ns", at_most=True)  # fmt: skip


@pytest.mark.open_data
def test_signs_of_group_delays_in_measured_codes(open_data: Path, evidence: Evidence) -> None:
    """Code differences of one receiver-day against broadcast biases, satellite by satellite: the slope is one.

    P2 - P1 = A STEC - c (satellite + receiver); with a rough content of 5 TECU straight up (a quiet day) what is left
    is minus the biases.  A wrong sign would give minus one.  BeiDou has no precise biases in the file set.
    """
    signals = formats.read(open_data / "2020-177/obs/ESBC00DNK_R_20201770000_01D_30S_MO.crx.gz").table
    records = formats.read(open_data / "2020-177/nav/ESBC00DNK_R_20201770000_01D_MN.rnx.gz").table
    assert isinstance(signals, Signals)
    assert isinstance(records, Ephemerides)
    observations, _ = pairs.choose(signals)
    told = bias_algebra.from_group_delays(records)
    position = orbits.positions(records, observations.satellites, observations.times)
    elevation, _ = geometry.look(signals.receiver.position_m, position)
    content = 5.0 * geometry.mapping(elevation, 450e3)
    factor = 40.3e16 * (1 / observations.f2_hz**2 - 1 / observations.f1_hz**2)
    left_ns = -(observations.code2 - observations.code1 - factor * content) / SPEED_OF_LIGHT_M_S * 1e9
    left_ns[~(elevation > 30)] = np.nan
    for system, tolerance in (("G", 0.1), ("E", 0.1), ("C", 0.2)):
        pair = observations.pairs[system]
        points = []
        for column, name in enumerate(observations.satellites):
            known = pair_bias(told, "satellite", str(name), system, pair.code1, pair.code2, observations.times[1440])
            if known and np.isfinite(left_ns[:, column]).sum() > 60:
                points.append((known[0], np.nanmedian(left_ns[:, column])))
        assert len(points) >= 10, system
        slope = float(np.polyfit(*np.array(points).T, 1)[0])
        evidence(f"slope of measured code difference on broadcast bias, {system} {pair.name}",
                 source="ESBC 2020-06-25, real data", expected=1.0, got=slope, tolerance=tolerance)  # fmt: skip
