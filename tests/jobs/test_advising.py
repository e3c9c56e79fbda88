"""Advice over kept days: what is shared is made once, days beside are joined, hours are local."""

from collections.abc import Iterator
from dataclasses import replace

import numpy as np
import pytest
from tests.builders import CALM_DAY, REGION, STORM_DAY, invented_day, write_archive

from skylag.archive import Archive, open_archive
from skylag.errors import Missing, Refused
from skylag.impact import survey
from skylag.impact.survey import Job
from skylag.jobs.advising import DayAdvice, Desk, local_span, prepare
from skylag.tables import BROKEN, HOLDS, Site


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


def test_a_warning_beside_the_middle_of_the_cell_is_heard_by_job_and_place(kept: Archive) -> None:
    """A place stands aside of its cell's middle: what warns of the neighbouring cell only may lie over the place."""
    day = DayAdvice(kept, kept.day(REGION.name, CALM_DAY))
    fields = day.fields
    row, column = 4, 6
    aside = Site("aside", float(fields.lats[row]), float(fields.lons[column]) + 0.2)
    state, slope = np.full_like(fields.state, HOLDS), np.full_like(fields.slope, 0.1)
    state[10:14, row, column + 1] = BROKEN
    day.__dict__["fields"] = replace(
        fields, state=state, slope=slope, slope_sigma=slope, slope_east=slope, slope_north=slope,
        vtec=np.full_like(slope, 10.0), vtec_sigma=np.full_like(slope, 0.5), support=np.full_like(fields.support, 9),
    )  # fmt: skip
    day.__dict__["flags"] = ()
    asked = Job("aside", ((aside.lat, aside.lon),), baseline_km=1.0, horizontal_mm=500.0, vertical_mm=500.0)
    found = day.survey(asked)
    assert set(found.verdict[10:14]) == {survey.AVOID}
    assert survey.WORK in found.verdict
    np.testing.assert_array_equal(day.states_at(aside)[8:16], [1, 1, 3, 3, 3, 3, 1, 1])


def test_a_site_has_the_states_it_was_kept_with(kept: Archive) -> None:
    day = DayAdvice(kept, kept.day(REGION.name, STORM_DAY))
    known = kept.site_states(REGION.name, STORM_DAY)
    for number, site in enumerate(REGION.sites):
        np.testing.assert_array_equal(day.states_at(site), known.codes[:, number])
    assert not day.states_at(Site("off the map", 10.0, 10.0)).any()


def test_a_day_without_coefficients_says_so(kept: Archive) -> None:
    day = Desk(kept).day(REGION.name, str(STORM_DAY))
    with pytest.raises(Missing, match="not known for this day"):
        day.broadcast_model(REGION.sites[0])


def test_what_takes_seconds_is_kept_and_gives_the_same(kept: Archive, monkeypatch: pytest.MonkeyPatch) -> None:
    """The first answer, made from the lines of sight, equals all later ones, which read no line of sight."""
    assert prepare(kept, REGION.name, str(STORM_DAY))
    sites = [site for site in REGION.sites if site.kind == "aerodrome"]
    record = kept.day(REGION.name, STORM_DAY)
    first = DayAdvice(kept, record)
    monkeypatch.setattr(kept.outlooks, "hours", lambda *_: None)
    made = first.approaches(sites)
    monkeypatch.undo()
    later = DayAdvice(kept, record)
    monkeypatch.setattr(kept, "samples", lambda *_: pytest.fail("the lines of sight were read again"))
    again = later.approaches(sites)
    assert later.sky.source == first.sky.source
    for name in ("vertical_m", "horizontal_m", "route_m", "available", "in_view", "used"):
        np.testing.assert_array_equal(getattr(again, name), getattr(made, name))
    assert again.outages == made.outages


def test_a_day_without_an_aerodrome_is_not_prepared(archive: Archive) -> None:
    day = invented_day(STORM_DAY)
    region = replace(REGION, sites=tuple(site for site in REGION.sites if site.kind != "aerodrome"))
    archive.save(replace(day, region=region, site_states=day.site_states[:, [0, 3]],
                         site_reasons=(day.site_reasons[0], day.site_reasons[3])))  # fmt: skip
    assert not prepare(archive, REGION.name, str(STORM_DAY))


def test_sites_that_came_later_are_judged_from_what_was_kept(archive: Archive) -> None:
    """A new site has at least the states of its cell; one off the map is unseen; order and kind are in force."""
    archive.save(invented_day(STORM_DAY))
    desk = Desk(archive)
    before = desk.day(REGION.name, str(STORM_DAY)).site_states()
    assert before.sites == REGION.sites
    old = REGION.sites[1]
    beside = Site("Beside", old.lat + 0.01, old.lon + 0.01, "survey")
    archive.sites.change(
        REGION.name, "test",
        lambda now: now.with_site(beside).with_site(Site("Far", 10, 10)).with_site(replace(old, kind="port"))
        .without("Northport"),
    )  # fmt: skip
    day = desk.day(REGION.name, str(STORM_DAY))
    found = day.site_states()
    assert [site.name for site in found.sites] == ["Gannet Field", "Kelp Island", "Southmere quarry", "Beside", "Far"]
    assert found.sites[0].kind == "port"
    np.testing.assert_array_equal(found.codes[:, :3], before.codes[:, 1:])
    assert found.reasons[:3] == before.reasons[1:]
    cell = day.record.cell_of(beside.lat, beside.lon)
    assert cell is not None
    # Never better than its cell; worse only as far as the cells around warn.
    own = day.fields.state[:, cell[0], cell[1]]
    around = day.fields.state[:, cell[0] - 1 : cell[0] + 2, cell[1] - 1 : cell[1] + 2].max(axis=(1, 2))
    assert (found.codes[:, 3] >= own).all()
    assert (found.codes[:, 3] <= around).all()
    assert (found.codes[:, 3] == own).mean() > 0.9
    told = zip(found.reasons[3], found.codes[:, 3], strict=True)
    assert all(bool(reason) == (code != HOLDS) for reason, code in told)
    assert not found.codes[:, 4].any()
    assert set(found.reasons[4]) == {"outside the map: nothing can be said"}
    assert day.site("Beside").kind == "survey"
    with pytest.raises(Missing):
        day.site("Northport")
