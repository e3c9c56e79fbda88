"""Measured indices and outlooks of ap: kept with their time, newest first to count, nothing changed; both databases."""

import numpy as np
import pytest
from tests.builders import CALM_DAY

from skylag.archive import Archive
from skylag.errors import Refused
from skylag.tables import Indices

NOW = np.datetime64("2031-05-20T12:00", "ns")


def indices(day: np.datetime64, kp: float, ap: float, flux: float = 150.0) -> Indices:
    return Indices(np.array([day]), np.full((1, 8), kp), np.full((1, 8), ap), np.array([ap]), np.array([flux]))


def test_measured_days(archive: Archive) -> None:
    assert archive.activity.keep_measured(indices(CALM_DAY, 2.0, 7.0), "quick", NOW) == 1
    assert archive.activity.keep_measured(indices(CALM_DAY, 2.0, 7.0), "again", NOW) == 0
    assert archive.activity.keep_measured(indices(CALM_DAY, 2.333, 9.0), "final", NOW) == 1
    archive.activity.keep_measured(indices(CALM_DAY + 1, np.nan, np.nan, np.nan), "gaps", NOW)
    known = archive.activity.measured()
    assert known.day.tolist() == [CALM_DAY.item(), (CALM_DAY + 1).item()]
    assert known.ap[0].tolist() == [9.0] * 8 and np.isnan(known.ap[1]).all()
    assert len(archive.activity.measured(CALM_DAY + 1, CALM_DAY + 1).day) == 1
    assert archive.activity.measured(CALM_DAY + 9).kp.shape == (0, 8)
    listed = archive.activity.by_day(str(CALM_DAY), str(CALM_DAY + 1))
    assert listed[str(CALM_DAY)].kp_highest == 2.333 and listed[str(CALM_DAY)].f107 == 150.0
    assert np.isnan(listed[str(CALM_DAY + 1)].kp_highest)


def test_outlooks_keep_the_time_they_were_made(archive: Archive) -> None:
    evening = np.datetime64("2031-05-09T12:30", "ns")
    days = [CALM_DAY, CALM_DAY + 1]
    assert archive.activity.keep_foretold(days, np.full((2, 8), 10.0), evening, "office", NOW) == 2
    assert archive.activity.keep_foretold(days, np.full((2, 8), 10.0), evening, "office", NOW) == 0
    later = evening + np.timedelta64(12, "h")
    assert archive.activity.keep_foretold(days[1:], np.full((1, 8), 80.0), later, "office", NOW) == 1
    told = archive.activity.foretold(CALM_DAY, CALM_DAY + 1)
    assert [(str(one.day), one.ap[0]) for one in told] == [
        (str(CALM_DAY), 10.0), (str(CALM_DAY + 1), 10.0), (str(CALM_DAY + 1), 80.0)]  # fmt: skip
    assert told[0].made == evening and told[2].made == later and told[0].source == "office"
    assert archive.activity.foretold(CALM_DAY + 2) == ()


def test_what_is_no_outlook_is_refused(archive: Archive) -> None:
    day = [CALM_DAY]
    made = np.datetime64("2031-05-09T12:30", "ns")
    with pytest.raises(Refused, match="later than now"):
        archive.activity.keep_foretold(day, np.full((1, 8), 9.0), NOW + 1, "", NOW)
    with pytest.raises(Refused, match="was over by then"):
        archive.activity.keep_foretold(day, np.full((1, 8), 9.0), NOW, "", NOW)
    for wrong in (np.full((1, 8), 401.0), np.full((1, 8), np.nan), np.full((1, 3), 9.0)):
        with pytest.raises(Refused, match="eight values from 0 to 400"):
            archive.activity.keep_foretold(day, wrong, made, "", NOW)
    assert archive.activity.foretold() == ()
