"""GPS time, UTC, weeks: against published instants."""

from collections.abc import Callable

import numpy as np
import pytest

from skylag import timescales

BULLETIN = "IERS Bulletin C: leap seconds (references section 0)"


@pytest.mark.parametrize(
    ("utc", "seconds"),
    [("1980-01-06T00:00:00", 0), ("1999-01-01T00:00:00", 13), ("2005-12-31T23:59:59", 13), ("2006-01-01T00:00:00", 14),
     ("2016-12-31T23:59:59", 17), ("2017-01-01T00:00:00", 18), ("2026-06-01T00:00:00", 18)],
)  # fmt: skip
def test_leap_seconds(utc: str, seconds: int, evidence: Callable[..., None]) -> None:
    got = int(timescales.gps_minus_utc_s(np.datetime64(utc)))
    evidence(f"GPS minus UTC at {utc}", source=BULLETIN, expected=seconds, got=got, tolerance=0, unit="s")


def test_check_date(evidence: Callable[..., None]) -> None:
    """25 June 2020 was GPS week 2111, second 345600 (two SP3 headers of that day)."""
    week, second = timescales.week_and_second(np.datetime64("2020-06-25T00:00:00"))
    source = "SP3 headers of 2020-06-25 (references section 0)"
    evidence("GPS week of 2020-06-25", source=source, expected=2111, got=int(week), tolerance=0)
    evidence("second of week of 2020-06-25", source=source, expected=345600, got=float(second), tolerance=0, unit="s")
    assert timescales.from_week(2111, 345600.0) == np.datetime64("2020-06-25T00:00:00", "ns")


def test_beidou_week(evidence: Callable[..., None]) -> None:
    """BeiDou time began on 2006-01-01 UTC, 14 s behind GPS time and 1356 weeks after it."""
    epoch = timescales.utc_to_gps(np.datetime64("2006-01-01T00:00:00"))
    week, second = timescales.week_and_second(epoch)
    source = "BDS-SIS-ICD-2.1, 3.3 (references section 0)"
    evidence("GPS week of the BeiDou epoch", source=source, expected=1356, got=int(week), tolerance=0)
    evidence("BeiDou time behind GPS time", source=source, expected=float(second), tolerance=0,
             got=timescales.BDT_BEHIND_GPS_S, unit="s")  # fmt: skip


def test_there_and_back(rng: np.random.Generator) -> None:
    """GPS to UTC and back loses nothing; week and second too, to the nanosecond."""
    start, end = np.datetime64("1981-01-01", "ns").astype(np.int64), np.datetime64("2040-01-01", "ns").astype(np.int64)
    gps = rng.integers(start, end, 500).astype("datetime64[ns]")
    assert np.array_equal(timescales.utc_to_gps(timescales.gps_to_utc(gps)), gps)
    whole = gps.astype("datetime64[ms]").astype("datetime64[ns]")
    assert np.array_equal(timescales.from_week(*timescales.week_and_second(whole)), whole)


def test_the_leap_second_itself() -> None:
    """23:59:60 has no name of its own: it reads as the second after it."""
    before = timescales.utc_to_gps(np.datetime64("2016-12-31T23:59:59"))
    inside = before + np.timedelta64(1, "s")
    assert timescales.gps_to_utc(inside + np.timedelta64(1, "s")) == np.datetime64("2017-01-01T00:00:00", "ns")
    assert timescales.gps_to_utc(inside) == np.datetime64("2017-01-01T00:00:00", "ns")


def test_days_and_seconds() -> None:
    times = np.array(["2031-03-12T23:59:30", "2031-03-13T00:00:00"], dtype="datetime64[ns]")
    assert [str(day) for day in timescales.day_of(times)] == ["2031-03-12", "2031-03-13"]
    assert timescales.seconds(times[1] - times[0]) == 30.0
    assert timescales.seconds(np.array([1, 90], dtype="timedelta64[m]")).tolist() == [60.0, 5400.0]
