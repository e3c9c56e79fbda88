"""Advice over kept days: what is shared is made once, days beside are joined, hours are local."""

from collections.abc import Iterator

import numpy as np
import pytest
from tests.builders import CALM_DAY, REGION, STORM_DAY, write_archive

from skylag.archive import Archive, open_archive
from skylag.errors import Missing, Refused
from skylag.impact import survey
from skylag.impact.survey import Job
from skylag.jobs.advising import Desk, local_span


@pytest.fixture(scope="module")
def kept(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Archive]:
    with open_archive(write_archive(tmp_path_factory.mktemp("advice"))) as archive:
        yield archive


def test_local_hours_are_gps_times() -> None:
    """Hobart is ten hours ahead of UTC in May, GPS time 18 s ahead of UTC in 2031 as far as is announced."""
    start, end = local_span("07:30-16:00", "2031-05-11", "Australia/Hobart")
    assert start == np.datetime64("2031-05-10T21:30:18")
    assert end == np.datetime64("2031-05-11T06:00:18")
    over = local_span("22:00-04:00", "2031-05-11", "UTC")
    assert over == (np.datetime64("2031-05-11T22:00:18"), np.datetime64("2031-05-12T04:00:18"))


@pytest.mark.parametrize("text", ["", "7-16", "07:00", "25:00-26:00", "07:00-08:00-09:00", "x-y"])
def test_hours_that_cannot_be_read(text: str) -> None:
    with pytest.raises(Refused, match="07:30-16:00"):
        local_span(text, "2031-05-11", "UTC")
    with pytest.raises(Refused):
        local_span("07:00-16:00", "2031-05-11", "Mars/Olympus")


def test_a_day_is_looked_up_once(kept: Archive) -> None:
    desk = Desk(kept, most=1)
    one = desk.day(REGION.name, str(STORM_DAY))
    assert desk.day(REGION.name, str(STORM_DAY)) is one
    assert one.sky is one.sky
    assert one.fields is one.fields
    desk.day(REGION.name, str(CALM_DAY))
    assert desk.day(REGION.name, str(STORM_DAY)) is not one


def test_a_site_that_is_not_there(kept: Archive) -> None:
    day = Desk(kept).day(REGION.name, str(STORM_DAY))
    with pytest.raises(Missing, match="Gannet Field"):
        day.site("Atlantis")
    with pytest.raises(Missing):
        Desk(kept).day(REGION.name, "2031-07-01")


def test_hours_reach_into_the_day_before(kept: Archive) -> None:
    desk = Desk(kept)
    day = desk.day(REGION.name, str(STORM_DAY))
    site = day.site("Southmere quarry")
    spans = day.local_hours("07:00-17:00")
    job = Job(site.name, ((site.lat, site.lon),), spans=spans)
    alone, joined = day.survey(job), desk.survey(day, job)
    assert alone.times[0] == STORM_DAY.astype("datetime64[ns]")
    assert joined.times[0] == CALM_DAY.astype("datetime64[ns]")
    before = STORM_DAY.astype("datetime64[ns]")
    assert {w.verdict for w in alone.windows if w.start < before} == {survey.NOT_SEEN}
    calm = desk.day(REGION.name, str(CALM_DAY)).survey(Job(site.name, ((site.lat, site.lon),)))
    early = joined.times < before
    np.testing.assert_array_equal(joined.slope[early], calm.slope)
    np.testing.assert_array_equal(joined.verdict[early], calm.verdict)
    assert not any("no map of the day" in w.why for w in joined.windows)
    same = np.isin(joined.times, alone.times)
    np.testing.assert_array_equal(joined.slope[same], alone.slope)


def test_unseen_cells_are_never_work(kept: Archive) -> None:
    day = Desk(kept).day(REGION.name, str(STORM_DAY))
    for site in REGION.sites:
        advice = day.survey(Job(site.name, ((site.lat, site.lon),)))
        cell = day.record.cell_of(site.lat, site.lon)
        assert cell is not None
        unseen = day.fields.state[:, cell[0], cell[1]] == 0
        assert not (unseen & (advice.verdict == survey.WORK)).any()


def test_a_day_without_coefficients_says_so(kept: Archive) -> None:
    day = Desk(kept).day(REGION.name, str(STORM_DAY))
    with pytest.raises(Missing, match="not known for this day"):
        day.broadcast_model(REGION.sites[0])
