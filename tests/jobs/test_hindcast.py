"""Outlooks over an archive: kept when made, scored once, replayed without peeking, the hours they rest on."""

from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from tests.builders import CALM_DAY, REGION, STORM_DAY, invented_day
from tests.simulated.year_of_content import simulate

from skylag.archive import Archive, open_archive
from skylag.constants import L1_M_PER_TECU
from skylag.errors import Missing, NotEnough, Refused
from skylag.impact import outlook_advice, uses
from skylag.ionosphere.outlook import tomorrow, windows
from skylag.jobs import hindcast
from skylag.tables import BROKEN, HOLDS, STRAINED, UNSEEN, Indices

DAYS = [CALM_DAY + n for n in range(3)]


def save(archive: Archive, day: np.datetime64) -> None:
    archive.save(invented_day(day, storm=day == STORM_DAY, step_minutes=30, satellites=2))


@pytest.fixture
def two_days(tmp_path: Path) -> Iterator[Archive]:
    with open_archive(tmp_path / "archive.sqlite") as archive:
        for day in DAYS[:2]:
            save(archive, day)
        yield archive


def test_hours_of_a_day(two_days: Archive) -> None:
    """Means of delay, worst states; an hour that no map sees is unseen, with no number."""
    history, heads = hindcast.history_of(two_days, REGION.name)
    assert [str(head.day) for head in heads] == [str(day) for day in DAYS[:2]]
    assert list(history.names[:4]) == [site.name for site in REGION.sites]
    fields = two_days.fields(REGION.name, STORM_DAY)
    lat, lon = REGION.sites[1].lat, REGION.sites[1].lon
    row, column = int(np.argmin(np.abs(fields.lats - lat))), int(np.argmin(np.abs(fields.lons - lon)))
    expected = fields.vtec[10:12, row, column].mean() * L1_M_PER_TECU
    assert history.delay[1, 5, 1] == pytest.approx(float(expected), rel=1e-5)
    assert history.slope[1, 5, 1] == pytest.approx(float(fields.slope[10:12, row, column].max()), rel=1e-5)
    judged = uses.judge_for(uses.PUBLISHED[1], fields, two_days.flags(REGION.name, STORM_DAY), REGION)
    worst = judged.states[10:12, row, column].max()
    assert worst >= STRAINED and history.states[1, 1, 5, 1] == worst
    nothing = ~np.isfinite(history.delay)
    assert nothing.any() and not (history.states[:, nothing] == HOLDS).any()
    assert set(np.unique(history.states)) <= {UNSEEN, HOLDS, STRAINED, BROKEN}


def test_kept_hours_give_the_same_history(two_days: Archive) -> None:
    first, _ = hindcast.history_of(two_days, REGION.name)
    again, _ = hindcast.history_of(two_days, REGION.name)
    for name in ("delay", "sigma", "slope", "states"):
        np.testing.assert_array_equal(getattr(first, name), getattr(again, name))


def test_a_missing_day_is_unseen(two_days: Archive) -> None:
    save(two_days, CALM_DAY + 4)
    history, _ = hindcast.history_of(two_days, REGION.name)
    assert len(history.days) == 5
    assert np.isnan(history.delay[2:4]).all() and (history.states[:, 2:4] == UNSEEN).all()


def test_an_outlook_is_kept_and_scored_when_its_days_come(two_days: Archive) -> None:
    kept = hindcast.newest(two_days, REGION.name)
    assert kept.outlook.known_until == STORM_DAY and kept.number > 0
    again = hindcast.newest(two_days, REGION.name)
    assert again.number == kept.number
    np.testing.assert_array_equal(again.outlook.delay, kept.outlook.delay)
    assert hindcast.track_record(two_days, REGION.name).outlooks == 0
    save(two_days, DAYS[2])
    later = hindcast.newest(two_days, REGION.name)
    assert later.number != kept.number and later.outlook.known_until == DAYS[2]
    record = hindcast.track_record(two_days, REGION.name)
    assert record.outlooks == 1 and record.own["1"][0] > 0 and "2" not in record.own
    save(two_days, DAYS[2] + 1)
    hindcast.newest(two_days, REGION.name)
    record = hindcast.track_record(two_days, REGION.name)
    assert record.outlooks == 2 and record.own["2"][0] > 0  # the first now with both its days, counted once


def test_a_replay_tells_what_was_told_then(two_days: Archive) -> None:
    """The outlook kept on the storm day equals that of a replay after the archive has grown, bit by bit."""
    then = hindcast.newest(two_days, REGION.name).outlook
    save(two_days, DAYS[2])
    history, _ = hindcast.history_of(two_days, REGION.name, until=STORM_DAY)
    np.testing.assert_array_equal(tomorrow(history).delay.astype(np.float32), then.delay.astype(np.float32))
    found = hindcast.hindcast(two_days, REGION.name, STORM_DAY, DAYS[2])
    assert found.tally.outlooks == 2 and found.days_with_data == 3
    lines = hindcast.told(found)
    assert "2 outlooks scored" in lines[0] and any("beside persistence" in line for line in lines)
    assert two_days.outlooks.scores(REGION.name) == ()  # a replay keeps nothing


def test_entered_activity(two_days: Archive) -> None:
    calm = hindcast.newest(two_days, REGION.name)
    storm = hindcast.newest(two_days, REGION.name, expected_ap=np.array([100.0, 10.0]), keep=False)
    assert storm.number == 0 and set(storm.outlook.phases[:24]) == {"onset", "main phase"}
    assert hindcast.newest(two_days, REGION.name).number == calm.number
    kept = hindcast.newest(two_days, REGION.name, expected_ap=np.array([100.0, 10.0]))
    assert kept.number not in (0, calm.number)
    with pytest.raises(Refused, match="from 0 to 400"):
        hindcast.newest(two_days, REGION.name, expected_ap=np.array([900.0, 1.0]))


def test_measured_indices_are_laid_on_their_days(two_days: Archive) -> None:
    ap = np.full((1, 8), 50.0)
    indices = Indices(np.array([STORM_DAY]), np.full((1, 8), 5.0), ap, np.array([50.0]), np.array([155.0]))
    drivers = hindcast.drivers_of(np.array(DAYS[:2]), indices)
    assert np.isnan(drivers.ap[0]).all() and (drivers.ap[1] == 50.0).all() and drivers.flux[1] == 155.0
    assert np.isnan(drivers.expected).all()
    told = hindcast.newest(two_days, REGION.name, indices).outlook
    assert set(told.phases[:24]) == {"first day after"}


def test_two_days_are_too_few_for_windows(two_days: Archive) -> None:
    made = hindcast.newest(two_days, REGION.name).outlook
    spans = windows(made, 0, 0)
    assert {span.kind for span in spans} == {"not known"}
    assert "treat the place as not covered" in outlook_advice.advice(uses.PUBLISHED[0], spans, False)[0]


def test_what_cannot_be_done_is_explained(two_days: Archive) -> None:
    with pytest.raises(Missing, match="has no whole day"):
        hindcast.newest(two_days, "Atlantis")
    with pytest.raises(NotEnough, match="give an earlier day"):
        hindcast.hindcast(two_days, REGION.name, CALM_DAY - 3, CALM_DAY)
    with pytest.raises(Refused, match="give the earlier day first"):
        hindcast.hindcast(two_days, REGION.name, STORM_DAY, CALM_DAY)


def test_outlooks_on_both_databases(archive: Archive) -> None:
    """Kept, found, scored, and damage is found out; on SQLite and PostgreSQL."""
    made = tomorrow(simulate(2, days=3, places=2).history)
    number = archive.outlooks.keep("here", made, "mark")
    assert archive.outlooks.keep("here", made, "mark") == number
    found = archive.outlooks.find("here", made.known_until, "mark")
    assert found is not None and found.outlook.basis == made.basis
    np.testing.assert_allclose(found.outlook.delay, made.delay, rtol=1e-6)
    assert archive.outlooks.find("here", made.known_until, "other") is None
    assert [one.number for one in archive.outlooks.unscored("here")] == [number]
    archive.outlooks.keep_score(number, 1, {"outlooks": 1})
    archive.outlooks.keep_score(number, 2, {"outlooks": 2})
    archive.outlooks.keep_score(number, 2, {"outlooks": 3})
    assert archive.outlooks.unscored("here") == ()
    assert archive.outlooks.scores("here") == ({"outlooks": 2},)
    archive.outlooks.keep_hours("here", "2031-05-11", 1, "m", {"delay": np.arange(3.0)})
    hours = archive.outlooks.hours("here", "2031-05-11", 1, "m")
    assert hours is not None and hours["delay"].tolist() == [0.0, 1.0, 2.0]
    assert archive.outlooks.hours("here", "2031-05-11", 2, "m") is None
