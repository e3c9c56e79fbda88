"""Measured indices and outlooks of ap: kept with their time, newest first to count, nothing changed; both databases."""

import numpy as np
import pytest
from tests.builders import CALM_DAY

from skylag.archive import Archive
from skylag.errors import Refused
from skylag.tables import ActivityOutlook, Indices

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


def outlook(made: str, *told: tuple[np.datetime64, float]) -> ActivityOutlook:
    days, ap = np.array([one[0] for one in told]), np.array([np.full(8, one[1]) for one in told])
    return ActivityOutlook(days, np.full(len(told), np.datetime64(made, "ns")), ap)


def test_outlooks_keep_the_time_they_were_made(archive: Archive) -> None:
    evening, later = "2031-05-09T12:30", "2031-05-10T00:30"
    both = outlook(evening, (CALM_DAY, 10.0), (CALM_DAY + 1, 10.0))
    assert archive.activity.keep_foretold(both, "office", NOW) == 2
    assert archive.activity.keep_foretold(both, "office", NOW) == 0
    assert archive.activity.keep_foretold(outlook(later, (CALM_DAY + 1, 80.0)), "office", NOW) == 1
    told = archive.activity.foretold(CALM_DAY, CALM_DAY + 1)
    assert [(str(one.day), one.ap[0]) for one in told] == [
        (str(CALM_DAY), 10.0), (str(CALM_DAY + 1), 10.0), (str(CALM_DAY + 1), 80.0)]  # fmt: skip
    assert told[0].made == np.datetime64(evening) and told[2].made == np.datetime64(later)
    assert told[0].source == "office"
    assert archive.activity.foretold(CALM_DAY + 2) == ()
    archive.activity.keep_foretold(outlook(later, (CALM_DAY + 1, 60.0)), "corrected", NOW)
    assert [one.ap[0] for one in archive.activity.foretold(CALM_DAY + 1)] == [10.0, 60.0]


def test_what_is_no_outlook_is_refused(archive: Archive) -> None:
    with pytest.raises(Refused, match="was over by then"):
        archive.activity.keep_foretold(outlook("2031-05-11", (CALM_DAY, 9.0)), "", NOW)
    for wrong in (401.0, np.nan, -1.0):
        with pytest.raises(Refused, match="eight values from 0 to 400"):
            archive.activity.keep_foretold(outlook("2031-05-09", (CALM_DAY, wrong)), "", NOW)
    assert archive.activity.foretold() == ()
