"""GPS time, UTC, leap seconds, week and second of week.

All times inside the program are GPS time as `datetime64[ns]`.  Never asks what time it is now.
"""

import numpy as np
import numpy.typing as npt

Times = npt.NDArray[np.datetime64]

GPS_EPOCH = np.datetime64("1980-01-06T00:00:00", "ns")
BDT_BEHIND_GPS_S = 14  # BeiDou time = GPS time - 14 s (BDS-SIS-ICD-2.1, 3.3)

# First UTC instant from which GPS - UTC has the given value [s].  Source: IERS Bulletin C series.
_STEPS_UTC = np.array(
    ["1980-01-06", "1981-07-01", "1982-07-01", "1983-07-01", "1985-07-01", "1988-01-01", "1990-01-01", "1991-01-01",
     "1992-07-01", "1993-07-01", "1994-07-01", "1996-01-01", "1997-07-01", "1999-01-01", "2006-01-01", "2009-01-01",
     "2012-07-01", "2015-07-01", "2017-01-01"],
    dtype="datetime64[ns]",
)  # fmt: skip
_STEPS_GPS = _STEPS_UTC + np.arange(len(_STEPS_UTC)).astype("timedelta64[s]")


def gps_minus_utc_s(utc: npt.ArrayLike) -> npt.NDArray[np.int64]:
    """Whole seconds that GPS time is ahead of UTC at the UTC instant(s) given; any shape; 0 before 1981."""
    steps = np.searchsorted(_STEPS_UTC, np.asarray(utc, dtype="datetime64[ns]"), side="right") - 1
    return np.asarray(np.maximum(steps, 0), dtype=np.int64)


def utc_to_gps(utc: npt.ArrayLike) -> Times:
    """GPS time of UTC instants, `datetime64[ns]`, same shape."""
    instants = np.asarray(utc, dtype="datetime64[ns]")
    return np.asarray(instants + gps_minus_utc_s(instants).astype("timedelta64[s]"))


def gps_to_utc(gps: npt.ArrayLike) -> Times:
    """UTC of GPS times, `datetime64[ns]`, same shape.  The leap second itself reads as the second after it."""
    instants = np.asarray(gps, dtype="datetime64[ns]")
    steps = np.maximum(np.searchsorted(_STEPS_GPS, instants, side="right") - 1, 0)
    return np.asarray(instants - steps.astype("timedelta64[s]"))


def week_and_second(gps: npt.ArrayLike) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.float64]]:
    """Continuous GPS week and second of week of GPS times, same shape."""
    elapsed_ns = (np.asarray(gps, dtype="datetime64[ns]") - GPS_EPOCH).astype(np.int64)
    week, rest_ns = np.divmod(elapsed_ns, 604_800 * 10**9)
    return np.asarray(week), np.asarray(rest_ns / 1e9)


def from_week(week: npt.ArrayLike, second: npt.ArrayLike) -> Times:
    """GPS time of continuous GPS week and second of week, to the nanosecond."""
    nanoseconds = np.rint(np.asarray(second, dtype=np.float64) * 1e9).astype(np.int64)
    total = np.asarray(week, dtype=np.int64) * (604_800 * 10**9) + nanoseconds
    return np.asarray(GPS_EPOCH + total.astype("timedelta64[ns]"))


def day_of(gps: npt.ArrayLike) -> npt.NDArray[np.datetime64]:
    """GPS-time calendar day, `datetime64[D]`, same shape."""
    return np.asarray(np.asarray(gps, dtype="datetime64[ns]").astype("datetime64[D]"))


def seconds(span: npt.ArrayLike) -> npt.NDArray[np.float64]:
    """Seconds as float of `timedelta64` values of any unit."""
    return np.asarray(np.asarray(span).astype("timedelta64[ns]").astype(np.int64) / 1e9)
